//! Long campaigns: many plants, each with its own seed (calibration errors, noise, slow unrest), through bench,
//! controller program, frames, estimate and watch, without ports and store so that a day passes in seconds.
//!
//! They answer two questions with counts: how often does healthy running alarm, and is seeded ring wear found, how soon,
//! under which name?

use offcurve::{alarm::AlarmState, watch::Watch};
use offcurve_controller::{Controller, Converter};
use offcurve_core::{
    board::{Direction, Line, PulseSnapshot, RunState},
    estimate::estimate,
    link::{Decoder, Message, frame::MAX_FRAME},
};
use offcurve_rig::{
    bench::{Bench, BenchSpi},
    converter::FULL_SCALE_MA,
    scenario::Scenario,
};
use offcurve_tests::running::{MACHINE_FILE, machine, profile_bytes, with_line};
use std::sync::{Arc, Mutex};

const SEEDS: u64 = 24;

/// A line that remembers what was sent.
#[derive(Default)]
struct Memory(Vec<u8>);

impl Line for Memory {
    fn try_write(&mut self, bytes: &[u8]) -> usize {
        self.0.extend_from_slice(bytes);
        bytes.len()
    }

    fn try_read(&mut self, _: &mut [u8]) -> usize {
        0
    }
}

/// An alarm that was raised.
#[derive(Debug)]
struct Raised {
    at: f64,
    kind: &'static str,
    first_cause: &'static str,
}

/// Alarms raised while this scenario runs for so many plant seconds, and the share of blocks that could be judged.
fn run(scenario: &Scenario, seconds: f64) -> (Vec<Raised>, f64) {
    // Coarse scans: the noise is band-limited, so ten scans a step carry the same scatter as a hundred.
    let machine = machine(&with_line(MACHINE_FILE, "scan_interval", "scan_interval = \"10 ms\""));
    let schedule = machine.profile.schedule;
    let mut bench = Bench::new(scenario).expect("a bench");
    bench.set_scan_interval(u32::from(schedule.scan_ms));
    let bench = Arc::new(Mutex::new(bench));
    let mut converter = Converter::new(BenchSpi::new(Arc::clone(&bench)), FULL_SCALE_MA as f32);
    let mut controller = Controller::<4>::new("campaign", 1);
    controller.load_profile(&profile_bytes(&machine.profile)).expect("a valid profile");
    let mut watch = Watch::new(&machine.profile, machine.watch);
    let mut decoder = Decoder::<MAX_FRAME>::default();
    let mut line = Memory::default();
    let mut raised = Vec::new();
    loop {
        for _ in 0..schedule.scans_per_step {
            controller.scan(&mut converter);
        }
        let capture = bench.lock().expect("no other thread").capture();
        let pulses = PulseSnapshot {
            count: capture.count,
            last_edge: capture.last_edge,
            now: capture.now,
            direction: Direction::Unknown,
        };
        let run = if capture.running { RunState::Running } else { RunState::Stopped };
        controller.step(capture.now_ms, &pulses, capture.ticks_per_second, run);
        controller.exchange(&mut line);
        for byte in line.0.drain(..) {
            let Some(Ok(payload)) = decoder.push(byte) else { continue };
            let Ok(Message::Record(record)) = Message::decode(payload) else { continue };
            let at = f64::from(record.at_ms) / 1000.0;
            for change in watch.push(at, &record.sample, &estimate(&record.sample, &machine.profile)) {
                if change.state == AlarmState::Unacknowledged {
                    let first_cause = change.causes.first().map_or("", |cause| cause.cause);
                    raised.push(Raised { at, kind: change.kind.id(), first_cause });
                }
            }
        }
        if f64::from(capture.now_ms) / 1000.0 >= seconds {
            let (judged, closed) = watch.judged();
            return (raised, judged as f64 / closed.max(1) as f64);
        }
    }
}

#[test]
fn healthy_plants_are_quiet() {
    let mut false_alarms = 0;
    for seed in 1..=SEEDS {
        let mut scenario = Scenario::built_in("waterworks-healthy").expect("a built-in scenario");
        scenario.seed = 1_000 + seed;
        let (raised, judged) = run(&scenario, 36_000.0);
        println!(
            "seed {}: {} alarms in 10 h, {:.0} % of blocks judged {raised:?}",
            scenario.seed,
            raised.len(),
            100.0 * judged
        );
        assert!(judged > 0.5, "quiet because nothing was judged");
        false_alarms += raised.len();
    }
    println!("{false_alarms} false alarms in {} healthy plant hours", SEEDS * 10);
    assert_eq!(false_alarms, 0);
}

#[test]
fn ring_wear_is_found_and_named() {
    let mut delays = Vec::new();
    let mut named = 0;
    for seed in 1..=SEEDS {
        let mut scenario = Scenario::built_in("waterworks-wear").expect("a built-in scenario");
        scenario.seed = 2_000 + seed;
        let (raised, _) = run(&scenario, 3_600.0);
        println!("seed {}: {raised:?}", scenario.seed);
        assert!(raised.iter().all(|alarm| alarm.at >= 1_200.0 && alarm.kind == "off-curve"), "before the fault");
        if let Some(first) = raised.first() {
            delays.push(first.at - 1_200.0);
            named += usize::from(first.first_cause.starts_with("worn wear rings"));
        }
    }
    delays.sort_by(f64::total_cmp);
    let middle = delays.get(delays.len() / 2).copied().unwrap_or(f64::NAN);
    println!(
        "found {} of {SEEDS}, named right {named}, median delay {middle:.0} s, longest {:?}",
        delays.len(),
        delays.last()
    );
    assert_eq!(delays.len() as u64, SEEDS);
    assert!(named as u64 * 10 >= SEEDS * 8, "right cause first in {named} of {SEEDS}");
}
