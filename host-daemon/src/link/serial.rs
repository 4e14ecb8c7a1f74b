//! One serial port on a thread of its own: opened by path (a link is followed anew each time, so a device that comes
//! back under another number is found), read, and reopened for as long as the daemon lives.
//!
//! Blocking reads on a thread, because a hang-up is then an error and not a silence. What is read goes into a bounded
//! channel; when the daemon is slow the thread waits there, the system's buffer fills, and what the line loses then
//! shows as a gap in the record numbers. Nothing grows.
//!
//! The port is 8N1 without flow control and locked against a second reader. Opening raises DTR on most systems, which
//! may restart a board: its boot number tells. A pseudo-terminal is locked only against readers that ask for the file
//! lock, because Linux keeps its exclusive mode beyond the death of the process that set it, until the far end closes:
//! after a `kill -9` no ordinary user could open it again (seen on Linux 6.18).

use super::{
    LinkError,
    session::{Counts, Event, Session},
};
use offcurve_core::link::{Message, WIRE_VERSION};
use serialport::{ClearBuffer, DataBits, FlowControl, Parity, SerialPort, StopBits, TTYPort};
use std::{
    io::{ErrorKind, Read, Write},
    path::PathBuf,
    sync::{
        Arc, Mutex, PoisonError,
        atomic::{AtomicBool, Ordering},
    },
    thread::JoinHandle,
    time::{Duration, Instant, SystemTime},
};
use tokio::sync::mpsc::Sender;
use tracing::{debug, info, warn};

/// How long one read waits: the longest a stop or an acknowledgement waits for an idle line.
const READ_WAIT: Duration = Duration::from_millis(50);
/// How often a hello is asked for until one came.
const ASK_AGAIN: Duration = Duration::from_secs(2);
/// Least time between two acknowledgements: 20 bytes in 250 ms are 8 % of the slowest line (9,600 Bd).
const ACK_EVERY: Duration = Duration::from_millis(250);
/// After the line took no byte in [`READ_WAIT`], how long nothing is written.
const WRITE_PAUSE: Duration = Duration::from_secs(1);
/// Waits between two attempts to open: doubling between these.
const BACK_OFF: (Duration, Duration) = (Duration::from_millis(200), Duration::from_secs(5));
/// Silence of an open port after which the log says so.
const SILENT: Duration = Duration::from_secs(15);
/// Least time between two warnings about bad frames.
const BAD_FRAMES_EVERY: Duration = Duration::from_secs(60);

/// Where a controller is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct SerialSettings {
    /// Its name in the configuration.
    pub name: String,
    /// Path of the port, or a link to it.
    pub port: PathBuf,
    /// Bits per second.
    pub baud: u32,
}

/// What came in one read.
#[derive(Debug)]
pub struct Heard {
    /// Place of the controller in the configuration, from 0.
    pub controller: usize,
    /// When the bytes were read, µs since 1970 UTC by the computer's clock.
    pub received_us: i64,
    /// What they amount to, in order; not empty.
    pub events: Vec<Event>,
}

/// The computer's clock, µs since 1970 UTC; 0 for a clock set before that.
#[must_use]
pub fn now_us() -> i64 {
    let since = SystemTime::now().duration_since(SystemTime::UNIX_EPOCH).unwrap_or_default();
    i64::try_from(since.as_micros()).unwrap_or(i64::MAX)
}

/// What the thread and the daemon share.
#[derive(Debug, Default)]
struct Shared {
    stop: AtomicBool,
    /// The newest acknowledgement not yet sent; older ones need not be sent at all.
    acknowledge: Mutex<Option<(u64, u32)>>,
    counts: Mutex<Counts>,
}

/// A running reader of one port.
#[derive(Debug)]
pub struct SerialLink {
    shared: Arc<Shared>,
    thread: Option<JoinHandle<()>>,
}

impl SerialLink {
    /// Starts reading as controller number `controller`. The thread ends when [`stop`](Self::stop) is called or `into` closes.
    ///
    /// # Errors
    /// [`LinkError::Thread`] when the system has no thread left. A missing port is no error: it is waited for.
    pub fn start(controller: usize, settings: SerialSettings, into: Sender<Heard>) -> Result<Self, LinkError> {
        let shared = Arc::new(Shared::default());
        let port = settings.port.clone();
        let reader = Reader {
            controller,
            settings,
            into,
            shared: Arc::clone(&shared),
            session: Session::default(),
            bad_said: (0, None),
            opened_before: false,
        };
        let thread = std::thread::Builder::new()
            .name(format!("link {controller}"))
            .spawn(move || reader.run())
            .map_err(|source| LinkError::Thread { port, source })?;
        Ok(Self { shared, thread: Some(thread) })
    }

    /// Says that records of `boot` up to and with `number` are durable.
    pub fn acknowledge(&self, boot: u64, number: u32) {
        *self.shared.acknowledge.lock().unwrap_or_else(PoisonError::into_inner) = Some((boot, number));
    }

    /// What came so far.
    #[must_use]
    pub fn counts(&self) -> Counts {
        *self.shared.counts.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Asks the thread to end; what it has read already still goes into the channel.
    pub fn stop(&self) {
        self.shared.stop.store(true, Ordering::Relaxed);
    }

    /// Waits for the thread to end; call once the channel has been emptied.
    pub fn join(mut self) {
        if let Some(thread) = self.thread.take() {
            // A panic in it has been printed already, and the daemon is on its way out.
            let _ = thread.join();
        }
    }
}

struct Reader {
    controller: usize,
    settings: SerialSettings,
    into: Sender<Heard>,
    shared: Arc<Shared>,
    session: Session,
    /// Bad frames at the last warning, and when that was.
    bad_said: (u64, Option<Instant>),
    opened_before: bool,
}

/// Why reading ended for good.
struct Stopped;

impl Reader {
    fn run(mut self) {
        let mut wait = BACK_OFF.0;
        let mut said: Option<String> = None;
        loop {
            if self.stopping() {
                return;
            }
            let reason = match self.open() {
                Ok(port) => {
                    if said.take().is_some() || self.opened_before {
                        info!(controller = %self.settings.name, port = %self.settings.port.display(), "port is back");
                    } else {
                        let (name, baud) = (&self.settings.name, self.settings.baud);
                        info!(controller = %name, port = %self.settings.port.display(), baud, "port opened");
                    }
                    self.opened_before = true;
                    let begun = Instant::now();
                    let Ok(reason) = self.read(port) else { return };
                    if begun.elapsed() > BACK_OFF.1 {
                        wait = BACK_OFF.0; // it had worked: the next failure is a new one
                    }
                    reason
                }
                Err(reason) => reason,
            };
            // Once, and again only when the reason changes: a cable that stays pulled must not fill the log.
            let words = words(&reason);
            if said.as_ref() != Some(&words) {
                warn!(controller = %self.settings.name, "{words}; trying again every {} s at most", BACK_OFF.1.as_secs());
                said = Some(words);
            }
            if self.sleep(wait).is_err() {
                return;
            }
            wait = (wait * 2).min(BACK_OFF.1);
        }
    }

    fn open(&self) -> Result<TTYPort, LinkError> {
        let SerialSettings { port, baud, .. } = &self.settings;
        let mut opened = serialport::new(port.to_string_lossy(), *baud)
            .data_bits(DataBits::Eight)
            .parity(Parity::None)
            .stop_bits(StopBits::One)
            .flow_control(FlowControl::None)
            .timeout(READ_WAIT)
            .open_native()
            .map_err(|source| match source.kind() {
                serialport::ErrorKind::NoDevice if port.exists() => LinkError::InUse { port: port.clone() },
                serialport::ErrorKind::NoDevice => LinkError::Missing { port: port.clone() },
                serialport::ErrorKind::Io(ErrorKind::NotFound) => LinkError::Missing { port: port.clone() },
                serialport::ErrorKind::Io(ErrorKind::PermissionDenied) => LinkError::Forbidden { port: port.clone() },
                _ => LinkError::Open { port: port.clone(), baud: *baud, source },
            })?;
        if std::fs::canonicalize(port).is_ok_and(|device| device.starts_with("/dev/pts"))
            && let Err(error) = opened.set_exclusive(false)
        {
            debug!(controller = %self.settings.name, %error, "the exclusive mode could not be left");
        }
        // What the system kept from before this opening has no known time.
        if let Err(error) = opened.clear(ClearBuffer::Input) {
            debug!(controller = %self.settings.name, %error, "input could not be cleared");
        }
        Ok(opened)
    }

    /// Reads until the port fails.
    fn read(&mut self, mut port: TTYPort) -> Result<LinkError, Stopped> {
        self.session.opened();
        let mut writer = Writer::default();
        let mut silence = Silence::default();
        let mut buffer = [0; 1024];
        let failed = loop {
            if self.stopping() {
                return Err(Stopped);
            }
            let wants_hello = self.session.wants_hello();
            if let Err(error) = writer.write(&mut port, wants_hello, &self.shared) {
                break error;
            }
            silence.look(&self.settings.name, self.session.counts());
            match port.read(&mut buffer) {
                // A terminal says "end of file" when its far end has gone.
                Ok(0) => break ErrorKind::BrokenPipe.into(),
                Ok(count) => self.take(buffer.get(..count).unwrap_or(&[]))?,
                Err(error) if is_nothing_yet(&error) => {}
                Err(error) => break error,
            }
        };
        let port = self.settings.port.clone();
        Ok(match failed.kind() {
            ErrorKind::BrokenPipe => LinkError::HungUp { port },
            _ => LinkError::Failed { port, source: failed },
        })
    }

    fn take(&mut self, bytes: &[u8]) -> Result<(), Stopped> {
        let mut events = Vec::new();
        self.session.feed(bytes, &mut events);
        let counts = *self.session.counts();
        *self.shared.counts.lock().unwrap_or_else(PoisonError::into_inner) = counts;
        let bad = counts.bad_frames();
        if bad > self.bad_said.0 && self.bad_said.1.is_none_or(|at| at.elapsed() >= BAD_FRAMES_EVERY) {
            let (name, more) = (&self.settings.name, bad - self.bad_said.0);
            warn!(
                controller = %name,
                "{more} bad frames on the line (so far: {}); a wrong rate, a bad cable or interference",
                counts.bad_words()
            );
            self.bad_said = (bad, Some(Instant::now()));
        }
        if events.is_empty() {
            return Ok(());
        }
        let heard = Heard { controller: self.controller, received_us: now_us(), events };
        self.into.blocking_send(heard).map_err(|_| Stopped)
    }

    fn stopping(&self) -> bool {
        self.shared.stop.load(Ordering::Relaxed) || self.into.is_closed()
    }

    fn sleep(&self, wait: Duration) -> Result<(), Stopped> {
        let until = Instant::now() + wait;
        while Instant::now() < until {
            if self.stopping() {
                return Err(Stopped);
            }
            std::thread::sleep(READ_WAIT.min(until.saturating_duration_since(Instant::now())));
        }
        Ok(())
    }
}

/// Says when an open port stays silent, and when that ends.
#[derive(Debug)]
struct Silence {
    /// Sound messages so far; `None` before the first look.
    messages: Option<u64>,
    since: Instant,
    said: bool,
}

impl Default for Silence {
    fn default() -> Self {
        Self { messages: None, since: Instant::now(), said: false }
    }
}

impl Silence {
    fn look(&mut self, name: &str, counts: &Counts) {
        let messages = Some(counts.hellos + counts.records);
        if messages != self.messages {
            self.messages = messages;
            self.since = Instant::now();
            if std::mem::take(&mut self.said) {
                info!(controller = %name, "controller is heard again");
            }
        } else if !self.said && self.since.elapsed() >= SILENT {
            self.said = true;
            warn!(
                controller = %name,
                "the port is open but nothing sensible has come for {} s; has the controller power, and do rate and \
                 wiring fit?",
                SILENT.as_secs()
            );
        }
    }
}

fn is_nothing_yet(error: &std::io::Error) -> bool {
    matches!(error.kind(), ErrorKind::TimedOut | ErrorKind::Interrupted | ErrorKind::WouldBlock)
}

/// An error with its causes, in one line.
fn words(error: &dyn std::error::Error) -> String {
    let mut text = error.to_string();
    let mut source = error.source();
    while let Some(cause) = source {
        text += &format!(": {cause}");
        source = cause.source();
    }
    text
}

/// What the daemon says on one opening of the line.
#[derive(Debug, Default)]
struct Writer {
    asked: Option<Instant>,
    acknowledged: Option<Instant>,
    paused: Option<Instant>,
}

impl Writer {
    /// Sends what is due. A line that takes nothing is left alone for a while; only a port that has gone is an error.
    fn write(&mut self, port: &mut TTYPort, wants_hello: bool, shared: &Shared) -> std::io::Result<()> {
        if self.paused.is_some_and(|at| at.elapsed() < WRITE_PAUSE) {
            return Ok(());
        }
        self.paused = None;
        let mut bytes = Vec::new();
        if !wants_hello {
            self.asked = None; // the next time one is wanted it is asked for at once
        } else if self.asked.is_none_or(|at| at.elapsed() >= ASK_AGAIN) {
            self.asked = Some(Instant::now());
            bytes.extend_from_slice(&Message::HelloRequest { version: WIRE_VERSION }.frame());
        }
        let mut acknowledge = None;
        if self.acknowledged.is_none_or(|at| at.elapsed() >= ACK_EVERY) {
            acknowledge = shared.acknowledge.lock().unwrap_or_else(PoisonError::into_inner).take();
        }
        if let Some((boot, number)) = acknowledge {
            self.acknowledged = Some(Instant::now());
            bytes.extend_from_slice(&Message::Ack { boot, number }.frame());
        }
        if bytes.is_empty() {
            return Ok(());
        }
        match port.write_all(&bytes) {
            Err(error) if is_nothing_yet(&error) => {
                // Half a frame may be out: the delimiter that opens the next one ends it.
                self.paused = Some(Instant::now());
                self.asked = None;
                let mut newest = shared.acknowledge.lock().unwrap_or_else(PoisonError::into_inner);
                if newest.is_none() {
                    *newest = acknowledge;
                }
                Ok(())
            }
            other => other,
        }
    }
}
