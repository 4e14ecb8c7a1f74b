//! What the controller program promises its host, seen from the line: a hello when asked, records at the profile's
//! rate with run state and direction in them, advisory flags, and that a line which takes nothing costs records that
//! are counted and told, never time.

use offcurve_controller::Controller;
use offcurve_core::{
    board::{ChannelSource, Direction, Line, LoopCurrent, PulseSnapshot, RunState, ScanError},
    estimate::estimate,
    guard::Advisories,
    head::Taps,
    link::{Decoder, Hello, Message, Record, WIRE_VERSION, frame::MAX_FRAME},
    machine::{
        CurveTable, Impeller, Profile,
        curve::Knot,
        profile::{ChannelSetup, Limit, Limits, PROFILE_BYTES, Schedule, Source},
    },
    sensing::ChannelFault,
};

const STEP_MS: u32 = 100;
const STEPS_PER_RECORD: u16 = 5;

/// H = 40 − 20000·Q² (m, m³/s), P = 3000 + 200000·Q (W) at 1480 rev/min; flow on loop 0, torque on loop 1.
fn profile() -> Profile {
    let knots: Vec<Knot> = (0..8_u8)
        .map(|k| {
            let flow = f32::from(k) * 0.005;
            let (head, head_slope) = (40.0 - 20_000.0 * flow * flow, -40_000.0 * flow);
            Knot { flow, head, head_slope, power: 3000.0 + 200_000.0 * flow, power_slope: 200_000.0 }
        })
        .collect();
    let channel = |input, high, deviation| ChannelSetup {
        source: Source::Loop { input, low: 0.0, high },
        deviation,
        ..ChannelSetup::default()
    };
    let limit = |at| Some(Limit { at, deadband: 0.05, on_delay: 1.0, off_delay: 1.0 });
    Profile {
        machine: 7,
        gravity: 9.806_65,
        density: 998.0,
        density_deviation: 0.5,
        taps: Taps { velocity_head: 0.0, elevation: 0.0 },
        reference_speed: 154.985,
        reference_density: 998.0,
        best_efficiency_flow: 0.02,
        head_curve_deviation: 0.01,
        power_curve_deviation: 0.015,
        curve: CurveTable::new(&knots).unwrap(),
        impeller: None,
        speed: ChannelSetup {
            source: Source::Pulses { per_revolution: 60 },
            relative_deviation: 0.001,
            ..ChannelSetup::default()
        },
        flow: channel(0, 0.04, 1e-4),
        suction_pressure: ChannelSetup::default(),
        discharge_pressure: ChannelSetup::default(),
        shaft_torque: channel(1, 120.0, 0.8),
        limits: Limits {
            minimum_flow: limit(0.3),
            run_out: limit(1.5),
            torque: Some(Limit { at: 90.0, deadband: 3.0, on_delay: 1.0, off_delay: 1.0 }),
            sensor_delay: 1.0,
        },
        schedule: Schedule { scan_ms: 10, scans_per_step: 10, steps_per_record: STEPS_PER_RECORD },
    }
}

fn bytes(profile: &Profile) -> Vec<u8> {
    let mut bytes = [0; PROFILE_BYTES];
    let length = profile.encode(&mut bytes).unwrap();
    bytes[..length].to_vec()
}

/// Currents of inputs 0 and 1; a failed bus with `None`.
struct Loops(Option<[f32; 2]>);

impl ChannelSource for Loops {
    fn scan(&mut self, into: &mut [LoopCurrent]) -> Result<(), ScanError> {
        let currents = self.0.ok_or(ScanError::NotAConverter)?;
        for (slot, current) in into.iter_mut().zip(currents) {
            *slot = LoopCurrent::from_milliamperes(current);
        }
        Ok(())
    }
}

/// A line that takes nothing while it is stuck.
#[derive(Default)]
struct Wire {
    stuck: bool,
    sent: Vec<u8>,
    to_controller: Vec<u8>,
}

impl Line for Wire {
    fn try_write(&mut self, bytes: &[u8]) -> usize {
        if self.stuck {
            return 0;
        }
        self.sent.extend_from_slice(bytes);
        bytes.len()
    }

    fn try_read(&mut self, into: &mut [u8]) -> usize {
        let count = into.len().min(self.to_controller.len());
        into[..count].copy_from_slice(&self.to_controller[..count]);
        self.to_controller.drain(..count);
        count
    }
}

/// A controller on its bench.
struct Rig {
    controller: Controller<4>,
    wire: Wire,
    loops: Loops,
    run: RunState,
    direction: Direction,
    now_ms: u32,
}

/// Half of best-efficiency flow, 60 N·m.
const USUAL: [f32; 2] = [8.0, 12.0];

impl Rig {
    fn new() -> Self {
        let mut controller = Controller::new("a name that is too long", 9);
        controller.load_profile(&bytes(&profile())).unwrap();
        let (run, direction) = (RunState::Running, Direction::Forward);
        Self { controller, wire: Wire::default(), loops: Loops(Some(USUAL)), run, direction, now_ms: 0 }
    }

    fn steps(&mut self, count: u32) {
        for _ in 0..count {
            for _ in 0..10 {
                self.controller.scan(&mut self.loops);
            }
            self.now_ms += STEP_MS;
            let edges = u64::from(self.now_ms) * 1480 / 1000;
            let pulses = PulseSnapshot {
                count: edges as u32,
                last_edge: (edges * 1_000_000 / 1480) as u32,
                now: self.now_ms * 1000,
                direction: self.direction,
            };
            self.controller.step(self.now_ms, &pulses, 1_000_000, self.run);
            self.controller.exchange(&mut self.wire);
        }
    }

    /// What has been sent since the last call.
    fn heard(&mut self) -> (Vec<Hello>, Vec<Record>) {
        let mut decoder = Decoder::<MAX_FRAME>::default();
        let (mut hellos, mut records) = (Vec::new(), Vec::new());
        for byte in self.wire.sent.drain(..) {
            match decoder.push(byte).map(|frame| Message::decode(frame.unwrap()).unwrap()) {
                Some(Message::Hello(hello)) => hellos.push(hello),
                Some(Message::Record(record)) => records.push(record),
                Some(other) => panic!("a controller does not send {other:?}"),
                None => {}
            }
        }
        (hellos, records)
    }

    fn say(&mut self, message: &Message) {
        self.wire.to_controller.extend_from_slice(&message.frame());
    }
}

#[test]
fn a_hello_comes_first_when_asked_for_and_every_five_seconds() {
    let mut rig = Rig::new();
    rig.steps(1);
    let (hellos, records) = rig.heard();
    assert_eq!((hellos.len(), records.len()), (1, 1));
    let hello = &hellos[0];
    assert_eq!((hello.boot, hello.machine, hello.profile_checksum), (9, 7, profile().checksum()));
    assert_eq!((hello.name.as_str(), hello.record_interval_ms, hello.next_number), ("a name that is t", 500, 0));
    rig.steps(20);
    assert!(rig.heard().0.is_empty(), "nobody asked");
    rig.say(&Message::HelloRequest { version: WIRE_VERSION });
    rig.steps(2);
    let (hellos, _) = rig.heard();
    assert_eq!(hellos.len(), 1);
    assert_eq!(hellos[0].next_number, rig.controller.records_made(), "every lower number has been sent before it");
    rig.steps(100);
    assert_eq!(rig.heard().0.len(), 2);
}

#[test]
fn records_come_at_the_rate_of_the_profile_with_run_state_and_direction() {
    let mut rig = Rig::new();
    for (run, direction) in [
        (RunState::Running, Direction::Forward),
        (RunState::Stopped, Direction::Reverse),
        (RunState::Unknown, Direction::Unknown),
    ] {
        (rig.run, rig.direction) = (run, direction);
        rig.steps(10 * u32::from(STEPS_PER_RECORD));
        let (_, records) = rig.heard();
        assert_eq!(records.len(), 10);
        for pair in records.windows(2) {
            assert_eq!(pair[1].number, pair[0].number + 1);
            assert_eq!(pair[1].at_ms, pair[0].at_ms + STEP_MS * u32::from(STEPS_PER_RECORD));
        }
        for record in &records {
            assert_eq!((record.sample.run, record.sample.direction), (run, direction));
            assert_eq!((record.boot, record.machine), (9, 7));
        }
    }
}

#[test]
fn a_stuck_line_costs_records_that_are_counted_and_told_but_no_time() {
    let mut rig = Rig::new();
    rig.steps(10);
    rig.heard();
    rig.wire.stuck = true;
    rig.steps(200);
    assert_eq!(rig.controller.records_made(), 2 + 40, "the work goes on");
    rig.wire.stuck = false;
    rig.steps(10);
    let (_, records) = rig.heard();
    assert!(records.len() <= 7 && records.windows(2).all(|pair| pair[0].number < pair[1].number));
    // 40 records and 4 hellos, of which at most four and a half waited.
    let dropped = rig.controller.dropped();
    assert!((38..=41).contains(&dropped), "{dropped}");
    rig.say(&Message::HelloRequest { version: WIRE_VERSION });
    rig.steps(2);
    let (hellos, _) = rig.heard();
    assert_eq!(hellos.last().map(|hello| hello.dropped), Some(dropped), "the hello tells what was dropped");
}

#[test]
fn advisory_flags_come_with_the_records() {
    let mut rig = Rig::new();
    let flags = |rig: &mut Rig, loops| {
        rig.loops = Loops(loops);
        rig.steps(25);
        rig.heard().1.last().unwrap().advisories
    };
    assert_eq!(flags(&mut rig, Some(USUAL)), Advisories::NONE);
    assert_eq!(flags(&mut rig, Some([5.0, 12.0])), Advisories::BELOW_MINIMUM_FLOW, "an eighth of the best flow");
    assert_eq!(flags(&mut rig, Some([17.0, 12.0])), Advisories::RUN_OUT, "13/8 of it");
    assert_eq!(flags(&mut rig, Some([8.0, 17.0])), Advisories::OVER_TORQUE, "97.5 N·m");
    // The torque was too high when its loop broke: a missing value is no reason to take that back.
    let both = Advisories::from_bits(Advisories::OVER_TORQUE.bits() | Advisories::SENSOR_FAILED.bits());
    assert_eq!(flags(&mut rig, Some([8.0, 0.0])), both, "no torque at all");
    assert_eq!(flags(&mut rig, Some(USUAL)), Advisories::NONE);
}

#[test]
fn a_flag_waits_for_its_delay() {
    let mut rig = Rig::new();
    rig.steps(20);
    rig.heard();
    rig.loops = Loops(Some([8.0, 0.0]));
    rig.steps(9);
    let raised = |rig: &mut Rig| rig.heard().1.iter().map(|record| record.advisories).collect::<Vec<_>>();
    assert!(raised(&mut rig).iter().all(|flags| *flags == Advisories::NONE), "0.9 s of a delay of 1 s");
    rig.steps(6);
    assert_eq!(raised(&mut rig).last(), Some(&Advisories::SENSOR_FAILED));
}

/// The torque limit is for the shaft. A torque that a model makes of speed and flow is known to 8 % at best, and knows
/// nothing of what rubs: it raises no flag.
#[test]
fn a_torque_from_the_momentum_model_raises_no_flag() {
    let mut profile = profile();
    profile.shaft_torque = ChannelSetup::default();
    profile.limits.torque = Some(Limit { at: 1.0, deadband: 0.1, on_delay: 0.0, off_delay: 0.0 });
    profile.impeller = Some(Impeller {
        outlet_radius: 0.16,
        outlet_area: 0.0125,
        outlet_cotangent: 2.2,
        slip_factor: 0.78,
        inlet_whirl: 0.0,
        volumetric_efficiency: 0.95,
        drag_torque: 3.0,
        recirculation_onset: 0.2,
        model_deviation: 0.08,
    });
    let mut rig = Rig::new();
    rig.controller.load_profile(&bytes(&profile)).unwrap();
    rig.steps(25);
    let record = *rig.heard().1.last().unwrap();
    let torque = estimate(&record.sample, &profile).shaft_torque.expect("the model gives one");
    assert!(torque.value.newton_metres() > 10.0 * 1.0, "{torque:?} is far above the limit");
    assert_eq!(record.advisories, Advisories::NONE);
}

#[test]
fn a_dead_converter_is_a_failed_reading_and_not_a_zero() {
    let mut rig = Rig::new();
    rig.loops = Loops(None);
    rig.steps(10);
    let (_, records) = rig.heard();
    let sample = records.last().unwrap().sample;
    assert_eq!(sample.flow, Err(ChannelFault::ConverterFailed));
    assert_eq!(sample.suction_pressure, Err(ChannelFault::NotFitted));
    assert!(sample.speed.is_ok());
}

#[test]
fn a_profile_that_is_not_sound_leaves_the_one_in_use() {
    let mut rig = Rig::new();
    let mut damaged = bytes(&profile());
    damaged[20] ^= 1;
    assert!(rig.controller.load_profile(&damaged).is_err());
    assert_eq!(rig.controller.profile().map(Profile::checksum), Some(profile().checksum()));
    let mut fresh = Controller::<4>::new("new", 1);
    assert!(fresh.load_profile(&damaged).is_err());
    assert!(fresh.profile().is_none());
}

#[test]
fn an_acknowledgement_is_remembered_and_noise_is_not_one() {
    let mut rig = Rig::new();
    rig.steps(1);
    assert_eq!(rig.controller.acknowledged(), None);
    let mut frame = Message::Ack { boot: 9, number: 3 }.frame().to_vec();
    frame[3] ^= 0x40;
    rig.wire.to_controller.extend_from_slice(&frame);
    rig.steps(2);
    assert_eq!(rig.controller.acknowledged(), None);
    rig.say(&Message::Ack { boot: 9, number: 4 });
    rig.steps(2);
    assert_eq!(rig.controller.acknowledged(), Some((9, 4)));
}
