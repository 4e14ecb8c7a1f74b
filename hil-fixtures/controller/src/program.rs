//! The order of work: sum scans, condition, estimate, guard, make a record, keep the line fed, answer the host.

use crate::Outbox;
use offcurve_core::{
    board::{ChannelSource, LOOP_INPUTS, Line, LoopCurrent, PulseSnapshot, RunState},
    checksum::crc32,
    conditioning::Conditioner,
    estimate::{Estimate, estimate},
    guard::Guard,
    link::{Decoder, Hello, LAYOUT, Message, Record, WIRE_VERSION, frame::MAX_FRAME, message::Name},
    machine::{Profile, ProfileError},
};

/// How often a hello is sent without being asked, ms: a listener that missed the first one learns the boot number.
const HELLO_INTERVAL_MS: u32 = 5_000;
/// Most bytes taken from the line at one call, so that a chattering host cannot hold up the loop.
const READ_AT_ONCE: usize = 32;

/// One controller with one machine; `OUTBOX` frames of room for a reader that is slow or away.
#[derive(Debug)]
pub struct Controller<const OUTBOX: usize> {
    name: Name,
    boot: u64,
    machine: Option<Machine>,
    outbox: Outbox<OUTBOX>,
    from_host: Decoder<MAX_FRAME>,
    now_ms: u32,
    hello_sent_ms: u32,
    hello_due: bool,
    next_number: u32,
    acknowledged: Option<(u64, u32)>,
}

#[derive(Debug)]
struct Machine {
    profile: Profile,
    checksum: u32,
    conditioner: Conditioner,
    guard: Guard,
    steps_to_record: u16,
}

impl<const OUTBOX: usize> Controller<OUTBOX> {
    /// A controller at start. `name` beyond 16 bytes is cut at a character; `boot` must differ from all starts before.
    #[must_use]
    pub fn new(name: &str, boot: u64) -> Self {
        let mut short = Name::new();
        for character in name.chars() {
            if short.push(character).is_err() {
                break;
            }
        }
        Self {
            name: short,
            boot,
            machine: None,
            outbox: Outbox::default(),
            from_host: Decoder::default(),
            now_ms: 0,
            hello_sent_ms: 0,
            hello_due: true,
            next_number: 0,
            acknowledged: None,
        }
    }

    /// Takes a profile in its byte form; sums and flags start afresh.
    ///
    /// # Errors
    /// [`ProfileError`]; the profile in use, or none, stays.
    pub fn load_profile(&mut self, bytes: &[u8]) -> Result<(), ProfileError> {
        let profile = Profile::decode(bytes)?;
        // A profile has one byte form, so this is its checksum; encoding it again would cost 640 bytes of stack.
        let checksum = crc32(bytes);
        self.machine = Some(Machine {
            profile,
            checksum,
            conditioner: Conditioner::default(),
            guard: Guard::default(),
            steps_to_record: 0,
        });
        self.hello_due = true;
        Ok(())
    }

    /// The profile in use.
    #[must_use]
    pub fn profile(&self) -> Option<&Profile> {
        self.machine.as_ref().map(|machine| &machine.profile)
    }

    /// Boot and number up to which the host has said its records are durable.
    #[must_use]
    pub const fn acknowledged(&self) -> Option<(u64, u32)> {
        self.acknowledged
    }

    /// Records made so far.
    #[must_use]
    pub const fn records_made(&self) -> u32 {
        self.next_number
    }

    /// Frames dropped because the line did not take them in time.
    #[must_use]
    pub const fn dropped(&self) -> u32 {
        self.outbox.dropped()
    }

    /// Frames waiting for the line, the one being sent included.
    #[must_use]
    pub fn waiting(&self) -> usize {
        self.outbox.waiting()
    }

    /// Takes one converter scan. Call every `scan_ms`.
    pub fn scan(&mut self, source: &mut impl ChannelSource) {
        let Some(machine) = &mut self.machine else { return };
        let mut currents = [LoopCurrent::default(); LOOP_INPUTS];
        let used = currents.get_mut(..machine.profile.loop_inputs()).unwrap_or(&mut []);
        let result = source.scan(used);
        machine.conditioner.add_scan(result.map(|()| &*used));
    }

    /// Ends a step: estimates, guards, and queues a record when one is due. Call after every `scans_per_step` scans.
    ///
    /// `now_ms` is the time since boot; it may wrap. `ticks_per_second` is the clock of `pulses`.
    pub fn step(
        &mut self,
        now_ms: u32,
        pulses: &PulseSnapshot,
        ticks_per_second: u32,
        run: RunState,
    ) -> Option<Estimate> {
        self.now_ms = now_ms;
        if now_ms.wrapping_sub(self.hello_sent_ms) >= HELLO_INTERVAL_MS {
            self.hello_due = true;
        }
        // Before the record, so that a fresh listener knows the boot number of what follows.
        if core::mem::take(&mut self.hello_due) {
            self.hello_sent_ms = now_ms;
            self.outbox.push(Message::Hello(self.hello()).frame());
        }
        let machine = self.machine.as_mut()?;
        let profile = &machine.profile;
        let sample = machine.conditioner.finish(profile, pulses, ticks_per_second, run);
        let estimate = estimate(&sample, profile);
        let advisories = machine.guard.step(&sample, &estimate, profile, profile.schedule.step_ms());
        if machine.steps_to_record == 0 {
            machine.steps_to_record = profile.schedule.steps_per_record;
            let numbers = (profile.machine, self.boot, self.next_number, now_ms);
            let record = Record::new(numbers, sample, advisories, &estimate);
            self.next_number = self.next_number.wrapping_add(1);
            self.outbox.push(Message::Record(record).frame());
        }
        machine.steps_to_record = machine.steps_to_record.saturating_sub(1);
        Some(estimate)
    }

    /// Moves bytes both ways, as many as the line takes and gives at once.
    pub fn exchange(&mut self, line: &mut impl Line) {
        let mut bytes = [0; READ_AT_ONCE];
        let count = line.try_read(&mut bytes);
        for &byte in bytes.iter().take(count) {
            // A damaged frame is dropped here: the host repeats what it still wants.
            let Some(Ok(payload)) = self.from_host.push(byte) else { continue };
            match Message::decode(payload) {
                Ok(Message::HelloRequest { .. }) => self.hello_due = true,
                Ok(Message::Ack { boot, number }) => self.acknowledged = Some((boot, number)),
                _ => {}
            }
        }
        self.outbox.send(line);
    }

    fn hello(&self) -> Hello {
        let machine = self.machine.as_ref();
        let schedule = machine.map(|machine| machine.profile.schedule);
        Hello {
            version: WIRE_VERSION,
            layout: LAYOUT,
            boot: self.boot,
            profile_checksum: machine.map_or(0, |machine| machine.checksum),
            machine: machine.map_or(0, |machine| machine.profile.machine),
            at_ms: self.now_ms,
            record_interval_ms: schedule
                .map_or(0, |schedule| schedule.step_ms().saturating_mul(u32::from(schedule.steps_per_record))),
            next_number: self.next_number,
            dropped: self.outbox.dropped(),
            name: self.name.clone(),
        }
    }
}
