//! What the daemon's tests share: one small invented pump, records of it, and a controller on a pseudo-terminal.

#![allow(dead_code, unreachable_pub, reason = "each test file uses its own part of this module")]

use offcurve::{
    link::SerialSettings,
    runtime::{Line as PlantLine, Plant},
    watch::WatchSettings,
};
use offcurve_controller::Controller;
use offcurve_core::{
    board::{ChannelSource, Direction, Line, LoopCurrent, PulseSnapshot, RunState, ScanError},
    conditioning::ConditionedSample,
    estimate::estimate,
    guard::Advisories,
    head::Taps,
    link::{Hello, LAYOUT, Message, Record, WIRE_VERSION, message::Name},
    machine::{
        CurveTable, Profile,
        curve::Knot,
        profile::{ChannelSetup, Limits, PROFILE_BYTES, Schedule, Source},
    },
};
use offcurve_rig::pty::{FarEnd, Pty};
use std::{
    path::{Path, PathBuf},
    sync::{
        Arc, Mutex,
        atomic::{AtomicBool, Ordering},
    },
    thread::JoinHandle,
    time::{Duration, Instant},
};

/// Curve of the test pump: H = 40 − 20000·Q² (m, m³/s), P = 3000 + 200000·Q (W), at 1480 rev/min.
pub fn profile() -> Profile {
    let knots: Vec<Knot> = (0..8_u8)
        .map(|k| {
            let flow = f32::from(k) * 0.005;
            Knot {
                flow,
                head: 40.0 - 20_000.0 * flow * flow,
                head_slope: -40_000.0 * flow,
                power: 3000.0 + 200_000.0 * flow,
                power_slope: 200_000.0,
            }
        })
        .collect();
    let channel = |input, low, high, deviation| ChannelSetup {
        source: Source::Loop { input, low, high },
        deviation,
        ..ChannelSetup::default()
    };
    Profile {
        machine: 7,
        gravity: 9.806_65,
        density: 998.0,
        density_deviation: 0.5,
        taps: Taps { velocity_head: 0.0, elevation: 0.0 },
        reference_speed: 154.985, // 1480 rev/min
        reference_density: 998.0,
        best_efficiency_flow: 0.02,
        head_curve_deviation: 0.01,
        power_curve_deviation: 0.015,
        curve: CurveTable::new(&knots).expect("the curve above is one"),
        impeller: None,
        speed: ChannelSetup {
            source: Source::Pulses { per_revolution: 60 },
            relative_deviation: 0.001,
            ..ChannelSetup::default()
        },
        flow: channel(0, 0.0, 0.04, 1e-4),
        suction_pressure: channel(1, -1e5, 1.5e5, 600.0),
        discharge_pressure: channel(2, 0.0, 6e5, 1500.0),
        shaft_torque: channel(3, 0.0, 120.0, 0.8),
        limits: Limits { sensor_delay: 5.0, ..Limits::default() },
        schedule: Schedule { scan_ms: 10, scans_per_step: 10, steps_per_record: 1 },
    }
}

/// Milliamperes of inputs 0 to 3 at 0.02 m³/s and the head of the curve, 32 m, times `share`.
pub fn currents(share: f32) -> [f32; 4] {
    let rise = share * 32.0 * 998.0 * 9.806_65;
    let current = |value: f32, low: f32, high: f32| 4.0 + 16.0 * (value - low) / (high - low);
    [
        current(0.02, 0.0, 0.04),
        current(0.0, -1e5, 1.5e5),
        current(rise, 0.0, 6e5),
        current(7000.0 / 154.985, 0.0, 120.0),
    ]
}

pub fn hello(boot: u64, next_number: u32, at_ms: u32) -> Hello {
    let mut name = Name::new();
    name.push_str("bench").expect("five bytes fit");
    Hello {
        version: WIRE_VERSION,
        layout: LAYOUT,
        boot,
        profile_checksum: profile().checksum(),
        machine: 7,
        at_ms,
        record_interval_ms: 100,
        next_number,
        dropped: 0,
        name,
    }
}

/// A record whose sample has nothing but a run state.
pub fn record(boot: u64, number: u32) -> Record {
    let sample =
        ConditionedSample { run: RunState::Running, direction: Direction::Forward, ..ConditionedSample::EMPTY };
    let at_ms = number.wrapping_mul(100);
    Record::new((7, boot, number, at_ms), sample, Advisories::NONE, &estimate(&sample, &profile()))
}

pub fn frames(messages: &[Message]) -> Vec<u8> {
    messages.iter().flat_map(|message| message.frame().to_vec()).collect()
}

pub fn plant(store: &Path, port: &Path) -> Plant {
    let serial = SerialSettings { name: "bench".into(), port: port.to_owned(), baud: 115_200 };
    // Short blocks and delays: a minute of plant time is enough to alarm.
    let watch = WatchSettings { block: 5.0, on_delay: 15.0, off_delay: 15.0, sensor_delay: 2.0, ..Default::default() };
    let line = PlantLine { serial, machine: "Test pump".into(), profile: profile(), watch };
    Plant { store: store.to_owned(), lines: vec![line] }
}

/// What a bench may be told while it runs.
#[derive(Debug)]
pub struct Knobs {
    /// Head over that of the curve.
    pub share: f32,
    /// Steps of 100 ms plant time per 5 ms of wall time.
    pub steps: u32,
}

/// Records made, and the newest acknowledgement that came.
type Made = (u32, Option<(u64, u32)>);

/// The controller program on a pseudo-terminal, in fast time, on a thread of its own. Dropping it unplugs the port.
pub struct Bench {
    stop: Arc<AtomicBool>,
    knobs: Arc<Mutex<Knobs>>,
    made: Arc<Mutex<Made>>,
    thread: Option<JoinHandle<(Controller<64>, u32)>>,
    link: PathBuf,
}

struct Converter([f32; 4]);

impl ChannelSource for Converter {
    fn scan(&mut self, into: &mut [LoopCurrent]) -> Result<(), ScanError> {
        for (slot, current) in into.iter_mut().zip(self.0) {
            *slot = LoopCurrent::from_milliamperes(current);
        }
        Ok(())
    }
}

struct PtyLine<'a>(&'a Pty);

impl Line for PtyLine<'_> {
    fn try_write(&mut self, bytes: &[u8]) -> usize {
        self.0.try_write(bytes).unwrap_or(0)
    }

    fn try_read(&mut self, into: &mut [u8]) -> usize {
        self.0.try_read(into).unwrap_or(0)
    }
}

impl Bench {
    /// A controller at its start.
    pub fn power_up(link: &Path, boot: u64) -> Self {
        let mut controller = Controller::new("bench", boot);
        let mut bytes = [0; PROFILE_BYTES];
        let length = profile().encode(&mut bytes).expect("it fits");
        controller.load_profile(&bytes[..length]).expect("it is sound");
        Self::plug_in(link, controller, 0)
    }

    /// A controller that has been running, at a new port under the old name.
    pub fn plug_in(link: &Path, mut controller: Controller<64>, mut now_ms: u32) -> Self {
        let mut pty = Pty::open(FarEnd::Free).expect("a pseudo-terminal");
        pty.link_at(link).expect("a link");
        let stop = Arc::new(AtomicBool::new(false));
        let knobs = Arc::new(Mutex::new(Knobs { share: 1.0, steps: 2 }));
        let made = Arc::new(Mutex::new((controller.records_made(), controller.acknowledged())));
        let (stopped, told, count) = (Arc::clone(&stop), Arc::clone(&knobs), Arc::clone(&made));
        let thread = std::thread::spawn(move || {
            while !stopped.load(Ordering::Relaxed) {
                let (share, steps) = {
                    let knobs = told.lock().unwrap();
                    (knobs.share, knobs.steps)
                };
                for _ in 0..steps {
                    for _ in 0..10 {
                        controller.scan(&mut Converter(currents(share)));
                    }
                    now_ms = now_ms.wrapping_add(100);
                    // 1480 edges a second, on a clock of 1 MHz.
                    let edges = u64::from(now_ms) * 1480 / 1000;
                    let pulses = PulseSnapshot {
                        count: edges as u32,
                        last_edge: (edges * 1_000_000 / 1480) as u32,
                        now: now_ms.wrapping_mul(1000),
                        direction: Direction::Forward,
                    };
                    controller.step(now_ms, &pulses, 1_000_000, RunState::Running);
                    controller.exchange(&mut PtyLine(&pty));
                }
                *count.lock().unwrap() = (controller.records_made(), controller.acknowledged());
                std::thread::sleep(Duration::from_millis(5));
            }
            (controller, now_ms)
        });
        Self { stop, knobs, made, thread: Some(thread), link: link.to_owned() }
    }

    /// Changes a knob.
    pub fn set(&self, change: impl FnOnce(&mut Knobs)) {
        change(&mut self.knobs.lock().unwrap());
    }

    /// Records made so far.
    pub fn made(&self) -> u32 {
        self.made.lock().unwrap().0
    }

    /// The newest acknowledgement that came.
    pub fn acknowledged(&self) -> Option<(u64, u32)> {
        self.made.lock().unwrap().1
    }

    /// Pulls the plug; the controller goes on living.
    pub fn unplug(mut self) -> (Controller<64>, u32) {
        self.stop.store(true, Ordering::Relaxed);
        let ended = self.thread.take().expect("taken only here and in drop").join().expect("the bench ran");
        assert!(std::fs::symlink_metadata(&self.link).is_err(), "the port's name has gone with it");
        ended
    }
}

impl Drop for Bench {
    fn drop(&mut self) {
        self.stop.store(true, Ordering::Relaxed);
        if let Some(thread) = self.thread.take() {
            let _ = thread.join();
        }
    }
}

/// Waits until something holds; fails the test after 20 s.
pub fn wait_until(what: &str, mut holds: impl FnMut() -> bool) {
    let begun = Instant::now();
    while !holds() {
        assert!(begun.elapsed() < Duration::from_secs(20), "waited 20 s in vain: {what}");
        std::thread::sleep(Duration::from_millis(10));
    }
}
