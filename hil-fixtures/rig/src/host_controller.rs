//! The controller program compiled for this computer: the bench at its converter and pick-up, a pseudo-terminal as its
//! line. The same source as on a board; only the traits below it are implemented here.
//!
//! A thread runs it in plant time, paced to `speed` plant seconds per wall second. Without a pace it runs as fast as its
//! reader takes the records, and waits while there is none: then nothing is ever dropped.

use std::{
    collections::BTreeMap,
    path::{Path, PathBuf},
    sync::{Arc, Mutex, MutexGuard, PoisonError, mpsc},
    thread::JoinHandle,
    time::{Duration, Instant},
};

use offcurve_controller::{Controller, Converter};
use offcurve_core::{
    board::{Direction, Line, PulseSnapshot, RunState},
    machine::{Profile, ProfileError},
};
use offcurve_plant::{PlantError, Truth};

use crate::{
    bench::{Bench, BenchSpi, Capture},
    converter::FULL_SCALE_MA,
    pty::{FarEnd, Pty, PtyError},
    scenario::Scenario,
};

/// Frames of room in the controller's outbox: some seconds of records, as on a small board.
const OUTBOX: usize = 64;
/// How long the thread rests when there is nothing to do.
const REST: Duration = Duration::from_micros(200);
/// A paced run that is late by more than this counts anew instead of racing to catch up.
const CATCH_UP_LIMIT: Duration = Duration::from_millis(500);

/// What to run.
#[derive(Clone, Debug)]
pub struct HostControllerOptions {
    /// The controller's name, up to 16 bytes.
    pub name: String,
    /// Number of its first start; each restart counts one up.
    pub boot: u64,
    /// The machine's profile in its byte form.
    pub profile: Vec<u8>,
    /// Lasting name of its port, a symbolic link.
    pub link: PathBuf,
    /// Plant seconds per wall second; `None`: as fast as the reader takes it.
    pub speed: Option<f64>,
}

/// Why it could not start.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum HostControllerError {
    /// The pseudo-terminal could not be made or named.
    #[error("cannot make the controller's port")]
    Port(#[from] PtyError),
    /// The scenario's plant contradicts itself.
    #[error("cannot build the plant")]
    Plant(#[from] PlantError),
    /// The profile was refused.
    #[error("the controller refuses the profile: {0:?}")]
    Profile(ProfileError),
    /// No thread could be started.
    #[error("cannot start the controller's thread")]
    Thread(#[source] std::io::Error),
}

/// What it has done so far.
#[derive(Clone, Debug, Default)]
pub struct HostControllerStatus {
    /// Number of the present start.
    pub boot: u64,
    /// Records made over all starts.
    pub records_made: u64,
    /// Frames dropped over all starts because nobody took them in time.
    pub dropped: u64,
    /// Per start: the last record the host has called durable.
    pub acknowledged: BTreeMap<u64, u32>,
    /// Plant time, s.
    pub plant_seconds: f64,
    /// Why the port failed, if it did.
    pub failure: Option<String>,
}

enum Command {
    Unplug,
    Plug,
    Restart,
    Stop,
}

/// A running controller; dropping it cuts its power.
#[derive(Debug)]
pub struct HostController {
    commands: mpsc::Sender<Command>,
    status: Arc<Mutex<HostControllerStatus>>,
    bench: Arc<Mutex<Bench>>,
    link: PathBuf,
    thread: Option<JoinHandle<()>>,
}

impl HostController {
    /// Starts it on a bench of this scenario.
    ///
    /// # Errors
    /// [`HostControllerError`].
    pub fn start(options: HostControllerOptions, scenario: &Scenario) -> Result<Self, HostControllerError> {
        let profile = Profile::decode(&options.profile).map_err(HostControllerError::Profile)?;
        let mut bench = Bench::new(scenario)?;
        bench.set_scan_interval(u32::from(profile.schedule.scan_ms));
        let bench = Arc::new(Mutex::new(bench));
        let status = Arc::new(Mutex::new(HostControllerStatus { boot: options.boot, ..Default::default() }));
        let (commands, orders) = mpsc::channel();
        let link = options.link.clone();
        let runner = Runner {
            controller: powered_up(&options, options.boot)?,
            port: Some(plugged(&options.link)?),
            converter: Converter::new(BenchSpi::new(Arc::clone(&bench)), FULL_SCALE_MA as f32),
            bench: Arc::clone(&bench),
            status: Arc::clone(&status),
            boot: options.boot,
            booted_at_ms: 0,
            made_before: 0,
            dropped_before: 0,
            options,
            scans_per_step: profile.schedule.scans_per_step,
        };
        let thread = std::thread::Builder::new()
            .name("controller".into())
            .spawn(move || runner.run(&orders))
            .map_err(HostControllerError::Thread)?;
        Ok(Self { commands, status, bench, link, thread: Some(thread) })
    }

    /// The port's lasting name.
    #[must_use]
    pub fn link(&self) -> &Path {
        &self.link
    }

    /// What it has done so far.
    #[must_use]
    pub fn status(&self) -> HostControllerStatus {
        locked(&self.status).clone()
    }

    /// The plant as it really is.
    #[must_use]
    pub fn truth(&self) -> Truth {
        locked(&self.bench).truth()
    }

    /// Pulls the port's cable: the reader's end hangs up and the name goes.
    pub fn unplug(&self) {
        self.order(Command::Unplug);
    }

    /// Plugs it in again: another device under the same lasting name.
    pub fn plug(&self) {
        self.order(Command::Plug);
    }

    /// Cuts and restores the controller's power; the line stays, the boot number counts up.
    pub fn restart(&self) {
        self.order(Command::Restart);
    }

    fn order(&self, command: Command) {
        // A thread that has ended takes no orders; its status says why.
        let _ = self.commands.send(command);
    }
}

impl Drop for HostController {
    fn drop(&mut self) {
        self.order(Command::Stop);
        if let Some(thread) = self.thread.take() {
            let _ = thread.join();
        }
    }
}

fn locked<T>(shared: &Mutex<T>) -> MutexGuard<'_, T> {
    shared.lock().unwrap_or_else(PoisonError::into_inner)
}

fn powered_up(options: &HostControllerOptions, boot: u64) -> Result<Controller<OUTBOX>, HostControllerError> {
    let mut controller = Controller::new(&options.name, boot);
    controller.load_profile(&options.profile).map_err(HostControllerError::Profile)?;
    Ok(controller)
}

fn plugged(link: &Path) -> Result<Pty, PtyError> {
    let mut pty = Pty::open(FarEnd::Kept)?;
    pty.link_at(link)?;
    Ok(pty)
}

/// The board's side of the line; a port that fails is silence, and is reported once.
struct PtyLine<'a> {
    port: Option<&'a Pty>,
    failure: &'a mut Option<String>,
}

impl PtyLine<'_> {
    fn note(&mut self, result: Result<usize, PtyError>) -> usize {
        result.unwrap_or_else(|error| {
            self.failure.get_or_insert_with(|| error.to_string());
            0
        })
    }
}

impl Line for PtyLine<'_> {
    fn try_write(&mut self, bytes: &[u8]) -> usize {
        match self.port {
            Some(port) => self.note(port.try_write(bytes)),
            // No cable: a serial port shifts its bytes out all the same, to nobody.
            None => bytes.len(),
        }
    }

    fn try_read(&mut self, into: &mut [u8]) -> usize {
        match self.port {
            Some(port) => self.note(port.try_read(into)),
            None => 0,
        }
    }
}

struct Runner {
    controller: Controller<OUTBOX>,
    port: Option<Pty>,
    converter: Converter<BenchSpi>,
    bench: Arc<Mutex<Bench>>,
    status: Arc<Mutex<HostControllerStatus>>,
    options: HostControllerOptions,
    scans_per_step: u16,
    boot: u64,
    booted_at_ms: u32,
    made_before: u64,
    dropped_before: u64,
}

impl Runner {
    fn run(mut self, orders: &mpsc::Receiver<Command>) {
        let mut begun = (Instant::now(), self.plant_seconds());
        loop {
            match orders.try_recv() {
                Ok(Command::Stop) | Err(mpsc::TryRecvError::Disconnected) => return,
                Ok(order) => self.obey(&order),
                Err(mpsc::TryRecvError::Empty) => {}
            }
            self.exchange();
            if self.must_wait(&mut begun) {
                std::thread::sleep(REST);
                continue;
            }
            self.step();
        }
    }

    fn plant_seconds(&self) -> f64 {
        locked(&self.bench).time_s()
    }

    fn must_wait(&self, begun: &mut (Instant, f64)) -> bool {
        let Some(speed) = self.options.speed else {
            return self.port.is_some() && self.controller.waiting() > OUTBOX / 2;
        };
        let plant = self.plant_seconds();
        let due = begun.0 + Duration::from_secs_f64(((plant - begun.1) / speed).max(0.0));
        let now = Instant::now();
        if now > due + CATCH_UP_LIMIT {
            *begun = (now, plant);
        }
        now < due
    }

    fn step(&mut self) {
        for _ in 0..self.scans_per_step {
            self.controller.scan(&mut self.converter);
        }
        let capture = locked(&self.bench).capture();
        let now_ms = capture.now_ms.wrapping_sub(self.booted_at_ms);
        let (pulses, run) = signals(&capture);
        self.controller.step(now_ms, &pulses, capture.ticks_per_second, run);
        self.report();
    }

    fn exchange(&mut self) {
        let mut failure = None;
        self.controller.exchange(&mut PtyLine { port: self.port.as_ref(), failure: &mut failure });
        let mut status = locked(&self.status);
        if let Some((boot, number)) = self.controller.acknowledged() {
            status.acknowledged.insert(boot, number);
        }
        if status.failure.is_none() {
            status.failure = failure;
        }
    }

    fn report(&self) {
        let mut status = locked(&self.status);
        status.boot = self.boot;
        status.records_made = self.made_before + u64::from(self.controller.records_made());
        status.dropped = self.dropped_before + u64::from(self.controller.dropped());
        status.plant_seconds = locked(&self.bench).time_s();
    }

    fn obey(&mut self, order: &Command) {
        match order {
            Command::Unplug => self.port = None,
            Command::Plug => match plugged(&self.options.link) {
                Ok(port) => self.port = Some(port),
                Err(error) => locked(&self.status).failure = Some(error.to_string()),
            },
            Command::Restart => {
                // The profile was accepted at start, so it is accepted again.
                if let Ok(controller) = powered_up(&self.options, self.boot + 1) {
                    self.made_before += u64::from(self.controller.records_made());
                    self.dropped_before += u64::from(self.controller.dropped());
                    self.controller = controller;
                    self.boot += 1;
                    self.booted_at_ms = locked(&self.bench).capture().now_ms;
                }
            }
            Command::Stop => {}
        }
    }
}

/// The bench's capture unit in the controller's terms.
fn signals(capture: &Capture) -> (PulseSnapshot, RunState) {
    let direction = match capture.forward {
        None => Direction::Unknown,
        Some(true) => Direction::Forward,
        Some(false) => Direction::Reverse,
    };
    let pulses = PulseSnapshot { count: capture.count, last_edge: capture.last_edge, now: capture.now, direction };
    (pulses, if capture.running { RunState::Running } else { RunState::Stopped })
}
