//! What the bytes of one line mean: frames in, events out, no I/O and no clock, so that every order of bytes can be
//! tested.
//!
//! A record carries the number of the controller's start (boot), but not the controller's profile or time: those are in
//! its hello. A record whose boot is not that of the last hello is held, and a hello asked for; so no record is taken
//! for another start's, or another controller's after a swap. What is held is bounded, the oldest goes first and is
//! counted: its number then shows as a gap.
//!
//! Where it stops: two controllers that use the same boot number on one line cannot be told apart here; the store sees
//! it as one number with two contents and says so.

use offcurve_core::link::{
    Decoder, FrameError, Hello, Message, MessageError, Record, frame::MAX_FRAME, message::Payload,
};
use std::collections::VecDeque;

/// The most records that wait for a hello. At 10 records a second this is 25 s, five times the time between two
/// unasked hellos.
pub const HELD: usize = 256;

/// Why bytes were no message of this protocol.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Reason {
    /// More bytes than any frame has.
    TooLong,
    /// Broken stuffing: bytes lost or changed.
    BrokenStuffing,
    /// The checksum does not fit.
    Checksum,
    /// A sound frame of an unknown kind.
    UnknownKind,
    /// A sound frame, too short or too long for its kind.
    WrongLength,
    /// A sound frame with a byte that has no meaning here.
    BadField,
    /// A hello of another build.
    OtherBuild,
    /// A sound message that only a host sends: two hosts on one line, or an echo.
    FromHost,
    /// A reason newer than this list.
    Other,
}

impl Reason {
    /// Every reason, in the order of [`Counts::bad`].
    pub const ALL: [Self; 9] = [
        Self::TooLong,
        Self::BrokenStuffing,
        Self::Checksum,
        Self::UnknownKind,
        Self::WrongLength,
        Self::BadField,
        Self::OtherBuild,
        Self::FromHost,
        Self::Other,
    ];

    /// A few words for logs.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::TooLong => "too long",
            Self::BrokenStuffing => "broken stuffing",
            Self::Checksum => "wrong checksum",
            Self::UnknownKind => "unknown kind",
            Self::WrongLength => "wrong length",
            Self::BadField => "unknown field value",
            Self::OtherBuild => "other build",
            Self::FromHost => "sent by a host",
            Self::Other => "other",
        }
    }
}

impl From<FrameError> for Reason {
    fn from(error: FrameError) -> Self {
        match error {
            FrameError::TooLong => Self::TooLong,
            FrameError::BrokenStuffing => Self::BrokenStuffing,
            FrameError::ChecksumMismatch => Self::Checksum,
            _ => Self::Other,
        }
    }
}

impl From<MessageError> for Reason {
    fn from(error: MessageError) -> Self {
        match error {
            MessageError::UnknownKind { .. } => Self::UnknownKind,
            MessageError::WrongLength { .. } => Self::WrongLength,
            MessageError::BadField { .. } => Self::BadField,
            MessageError::OtherVersion { .. } => Self::OtherBuild,
            _ => Self::Other,
        }
    }
}

/// What a line has carried since the daemon started.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Counts {
    /// Hellos of this build.
    pub hellos: u64,
    /// Sound records, held ones included.
    pub records: u64,
    /// Records given up while they waited for a hello.
    pub held_lost: u64,
    /// Frames that were no message, by [`Reason::ALL`].
    pub bad: [u64; Reason::ALL.len()],
}

impl Counts {
    /// All bad frames together.
    #[must_use]
    pub fn bad_frames(&self) -> u64 {
        self.bad.iter().sum()
    }

    /// "3 wrong checksum, 1 too long", or an empty string.
    #[must_use]
    pub fn bad_words(&self) -> String {
        let named = Reason::ALL.iter().zip(self.bad).filter(|(_, count)| *count > 0);
        named.map(|(reason, count)| format!("{count} {}", reason.name())).collect::<Vec<_>>().join(", ")
    }
}

/// A record and the very bytes it came in, which is what the store keeps.
#[derive(Clone, Debug, PartialEq)]
pub struct Received {
    /// The record.
    pub record: Record,
    /// Its payload, without frame and checksum.
    pub payload: Payload,
}

/// What the bytes amount to.
#[derive(Clone, Debug, PartialEq)]
#[non_exhaustive]
#[allow(clippy::large_enum_variant, reason = "records are the common case, and they are moved, not kept")]
pub enum Event {
    /// The first hello after opening, or one that differs in boot, machine or profile: who speaks from here on.
    Speaker(Hello),
    /// A record of the last [`Event::Speaker`]'s boot.
    Record(Received),
    /// Every record of this boot with a lower number has passed here or is lost: the hello names the next number.
    Upto {
        /// Number of the controller's start.
        boot: u64,
        /// The number the next record will have.
        next_number: u32,
        /// What the controller itself has dropped because the line was slow or away.
        dropped: u32,
    },
    /// A hello of another wire version or layout; said once for each pair found.
    OtherBuild {
        /// The version found.
        version: u8,
        /// The layout found.
        layout: u32,
    },
    /// The first record was given up because no hello came; said once for each opening.
    NoHello,
}

/// One line's state.
#[derive(Debug, Default)]
pub struct Session {
    decoder: Decoder<MAX_FRAME>,
    /// A delimiter was seen since opening: what came before it is the rest of a frame that began earlier, no fault.
    in_step: bool,
    speaker: Option<Hello>,
    /// Boot of the newest record that had no hello.
    waiting_for: Option<u64>,
    held: VecDeque<Received>,
    said_other_build: Option<(u8, u32)>,
    said_no_hello: bool,
    counts: Counts,
}

impl Session {
    /// The line was opened anew: another controller may be at its end, so it must say hello first. Held records stay,
    /// they need a hello of their own boot anyway.
    pub fn opened(&mut self) {
        self.decoder = Decoder::default();
        self.in_step = false;
        self.speaker = None;
        self.said_no_hello = false;
    }

    /// Takes bytes as they came; adds to `events` what they amount to, in order.
    pub fn feed(&mut self, bytes: &[u8], events: &mut Vec<Event>) {
        for &byte in bytes {
            if !self.in_step {
                self.in_step = byte == 0;
                continue;
            }
            let message = match self.decoder.push(byte) {
                None => continue,
                Some(Err(error)) => Err(Reason::from(error)),
                Some(Ok(payload)) => match Message::decode(payload) {
                    Ok(message) => Ok((message, Payload::from_slice(payload).unwrap_or_default())),
                    Err(MessageError::OtherVersion { version, layout }) => {
                        self.other_build(version, layout, events);
                        continue;
                    }
                    Err(error) => Err(Reason::from(error)),
                },
            };
            match message {
                Ok((Message::Hello(hello), _)) => self.hello(hello, events),
                Ok((Message::Record(record), payload)) => self.record(Received { record, payload }, events),
                Ok((Message::HelloRequest { .. } | Message::Ack { .. }, _)) => self.bad(Reason::FromHost),
                Ok(_) => self.bad(Reason::UnknownKind),
                Err(reason) => self.bad(reason),
            }
        }
    }

    /// Whether a hello should be asked for: none came since opening, or the newest record has another boot.
    #[must_use]
    pub fn wants_hello(&self) -> bool {
        match (&self.speaker, self.waiting_for) {
            (None, _) => true,
            (Some(speaker), Some(boot)) => speaker.boot != boot,
            (Some(_), None) => false,
        }
    }

    /// Records that wait for a hello now; at most [`HELD`].
    #[must_use]
    pub fn held(&self) -> usize {
        self.held.len()
    }

    /// What came so far.
    #[must_use]
    pub const fn counts(&self) -> &Counts {
        &self.counts
    }

    fn bad(&mut self, reason: Reason) {
        if let Some(count) = self.counts.bad.get_mut(reason as usize) {
            *count += 1;
        }
    }

    fn other_build(&mut self, version: u8, layout: u32, events: &mut Vec<Event>) {
        self.bad(Reason::OtherBuild);
        // Whoever was known here has been replaced: its records would be read with the wrong layout.
        self.speaker = None;
        if self.said_other_build != Some((version, layout)) {
            self.said_other_build = Some((version, layout));
            events.push(Event::OtherBuild { version, layout });
        }
    }

    fn hello(&mut self, hello: Hello, events: &mut Vec<Event>) {
        self.counts.hellos += 1;
        self.said_other_build = None;
        let identity = |hello: &Hello| (hello.boot, hello.machine, hello.profile_checksum);
        let (boot, next_number, dropped) = (hello.boot, hello.next_number, hello.dropped);
        let known = self.speaker.as_ref().is_some_and(|speaker| identity(speaker) == identity(&hello));
        if !known {
            events.push(Event::Speaker(hello.clone()));
            for _ in 0..self.held.len() {
                let Some(received) = self.held.pop_front() else { break };
                if received.record.boot == boot {
                    events.push(Event::Record(received));
                } else {
                    self.held.push_back(received);
                }
            }
        }
        if self.waiting_for == Some(boot) {
            self.waiting_for = None;
        }
        self.speaker = Some(hello);
        // Only now: the held records came before this hello and belong below its number.
        events.push(Event::Upto { boot, next_number, dropped });
    }

    fn record(&mut self, received: Received, events: &mut Vec<Event>) {
        self.counts.records += 1;
        let boot = received.record.boot;
        if self.speaker.as_ref().is_some_and(|speaker| speaker.boot == boot) {
            self.waiting_for = None;
            events.push(Event::Record(received));
            return;
        }
        self.waiting_for = Some(boot);
        if self.held.len() >= HELD {
            self.held.pop_front();
            self.counts.held_lost += 1;
            // Another build's hello has been said already, and explains it.
            if self.said_other_build.is_none() && !std::mem::replace(&mut self.said_no_hello, true) {
                events.push(Event::NoHello);
            }
        }
        self.held.push_back(received);
    }
}
