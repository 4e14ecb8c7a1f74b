//! Counts the instructions of one step of the core, part by part, over many inputs, on an emulated Cortex-M4F.
//!
//! Run under `qemu-system-arm -M mps2-an386 -icount shift=7`: one instruction then is 128 ns, which is 3.2 ticks of the
//! 25 MHz SysTick, so tick differences are exact instruction counts. The cost of reading the counter is measured first
//! and taken off. Results go to the host over semihosting, one line per part: name, inputs, mean, largest.
//!
//! Instructions are not cycles: on silicon a division or a root takes more than one, a load may wait for flash.
#![no_std]
#![no_main]

use core::hint::black_box;
use cortex_m::peripheral::{SYST, syst::SystClkSource};
use cortex_m_semihosting::{debug, hprintln};
use offcurve_core::{
    board::{Direction, LOOP_INPUTS, LoopCurrent, PulseSnapshot, RunState},
    conditioning::{ConditionedSample, Conditioner},
    deviation::Deviation,
    estimate::estimate,
    guard::{Advisories, Guard},
    head::Taps,
    link::{Message, Record},
    machine::{
        CurveTable, Impeller, Profile,
        curve::{KNOTS, Knot},
        profile::{ChannelSetup, Limit, Limits, Schedule, Source},
    },
    sensing::{Channel, ChannelFault, ChannelValue},
};
use panic_halt as _;

/// Inputs per part: the promise is a maximum over at least 100,000.
const INPUTS: u32 = 100_000;
const RELOAD: u32 = 0x00ff_ffff;

/// What one part costs.
#[derive(Default)]
struct Cost {
    sum: u64,
    largest: u32,
}

struct Counter {
    overhead: u32,
}

impl Counter {
    fn start(syst: &mut SYST) -> Self {
        syst.set_clock_source(SystClkSource::Core);
        syst.set_reload(RELOAD);
        syst.clear_current();
        syst.enable_counter();
        let mut counter = Self { overhead: 0 };
        counter.overhead = counter.instructions(|| ());
        counter
    }

    /// Instructions of a piece of work of less than five million.
    #[inline(always)]
    fn instructions<T>(&self, work: impl FnOnce() -> T) -> u32 {
        let begun = SYST::get_current();
        black_box(work());
        let ticks = begun.wrapping_sub(SYST::get_current()) & RELOAD;
        // 3.2 ticks per instruction.
        (ticks * 5 + 8) / 16 - self.overhead
    }

    #[inline(always)]
    fn add<T>(&self, cost: &mut Cost, work: impl FnOnce() -> T) {
        let count = self.instructions(work);
        cost.sum += u64::from(count);
        cost.largest = cost.largest.max(count);
    }
}

/// Marsaglia's xorshift, 2003: the same inputs at every run.
struct Draws(u32);

impl Draws {
    fn bits(&mut self) -> u32 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 17;
        self.0 ^= self.0 << 5;
        self.0
    }

    fn between(&mut self, low: f32, high: f32) -> f32 {
        low + (high - low) * (self.bits() >> 8) as f32 / 16_777_216.0
    }

    fn one_in(&mut self, n: u32) -> bool {
        self.bits() % n == 0
    }
}

fn setup(input: u8, low: f32, high: f32, deviation: f32) -> ChannelSetup {
    ChannelSetup { source: Source::Loop { input, low, high }, deviation, relative_deviation: 0.01, from_drive: false }
}

/// A pump of 80 m³/h and 33 m with everything declared that a profile can hold.
fn profile() -> Option<Profile> {
    let knots: [Knot; KNOTS] = core::array::from_fn(|k| {
        let flow = 0.0024 * k as f32;
        let place = flow / 0.022;
        Knot {
            flow,
            head: 40.0 - 7.0 * place * place,
            head_slope: -14.0 * place / 0.022,
            power: 3_800.0 + 5_200.0 * place,
            power_slope: 5_200.0 / 0.022,
        }
    });
    let limit = Limit { at: 1.4, deadband: 0.05, on_delay: 10.0, off_delay: 10.0 };
    Some(Profile {
        machine: 1,
        gravity: 9.81,
        density: 999.1,
        density_deviation: 0.5,
        taps: Taps { velocity_head: 175.0, elevation: 0.4 },
        reference_speed: 154.98,
        reference_density: 999.1,
        best_efficiency_flow: 0.022,
        head_curve_deviation: 0.01,
        power_curve_deviation: 0.015,
        curve: CurveTable::new(&knots).ok()?,
        impeller: Some(Impeller {
            outlet_radius: 0.1575,
            outlet_area: 0.011,
            outlet_cotangent: 2.14,
            slip_factor: 0.79,
            inlet_whirl: 0.0,
            volumetric_efficiency: 0.94,
            drag_torque: 5.8,
            recirculation_onset: 0.6,
            model_deviation: 0.08,
        }),
        speed: ChannelSetup { source: Source::Pulses { per_revolution: 60 }, ..setup(0, 0.0, 1.0, 0.0) },
        flow: setup(0, 0.0, 0.0444, 1e-4),
        suction_pressure: setup(1, -1e5, 1.5e5, 700.0),
        discharge_pressure: setup(2, 0.0, 6e5, 1_600.0),
        shaft_torque: setup(3, 0.0, 120.0, 0.07),
        limits: Limits { minimum_flow: Some(limit), run_out: Some(limit), torque: Some(limit), sensor_delay: 5.0 },
        schedule: Schedule { scan_ms: 1, scans_per_step: 100, steps_per_record: 10 },
    })
}

fn sample(draws: &mut Draws) -> ConditionedSample {
    let mut sample = ConditionedSample {
        run: if draws.one_in(20) { RunState::Stopped } else { RunState::Running },
        direction: if draws.one_in(50) { Direction::Reverse } else { Direction::Forward },
        ..ConditionedSample::EMPTY
    };
    let ranges = [(0.0, 190.0), (-0.002, 0.04), (-1e5, 1.5e5), (0.0, 6e5), (-5.0, 110.0)];
    for (channel, (low, high)) in Channel::ALL.into_iter().zip(ranges) {
        let value = draws.between(low, high);
        *sample.channel_mut(channel) = if draws.one_in(40) {
            Err(ChannelFault::FailureLow)
        } else {
            let deviation = Deviation::at_least(0.003 * high, channel.deviation_base());
            Ok(ChannelValue { value, deviation, saturated: false, age: 0 })
        };
    }
    sample
}

#[cortex_m_rt::entry]
fn main() -> ! {
    let status = match (cortex_m::Peripherals::take(), profile()) {
        (Some(mut core), Some(profile)) if profile.check().is_ok() => {
            measure(&Counter::start(&mut core.SYST), &profile);
            debug::EXIT_SUCCESS
        }
        _ => debug::EXIT_FAILURE,
    };
    debug::exit(status);
    loop {
        cortex_m::asm::nop();
    }
}

fn measure(counter: &Counter, profile: &Profile) {
    let mut draws = Draws(0x2545_f491);
    let mut conditioner = Conditioner::default();
    let mut guard = Guard::default();
    let mut costs: [Cost; 7] = Default::default();
    let [scan, finish, full, checksum, guarding, record, frame] = &mut costs;
    let mut pulses = PulseSnapshot::default();
    for number in 0..INPUTS {
        let currents: [LoopCurrent; LOOP_INPUTS] =
            core::array::from_fn(|_| LoopCurrent::from_milliamperes(draws.between(3.0, 21.5)));
        let (used, _) = currents.split_at(4);
        counter.add(scan, || conditioner.add_scan(Ok(black_box(used))));
        pulses.count = pulses.count.wrapping_add(draws.bits() % 180);
        pulses.now = pulses.now.wrapping_add(100_000);
        pulses.last_edge = pulses.now.wrapping_sub(draws.bits() % 1_000);
        counter.add(finish, || conditioner.finish(profile, black_box(&pulses), 1_000_000, RunState::Running));

        let sample = sample(&mut draws);
        let estimated = estimate(&sample, profile);
        counter.add(full, || estimate(black_box(&sample), profile));
        counter.add(guarding, || guard.step(black_box(&sample), &estimated, profile, 100));
        counter.add(checksum, || black_box(&estimated).checksum());
        let numbers = (1, 7, number, number);
        let made = Record::new(numbers, sample, Advisories::NONE, &estimated);
        counter.add(record, || Record::new(black_box(numbers), sample, Advisories::NONE, &estimated));
        let message = Message::Record(made);
        counter.add(frame, || black_box(&message).frame());
    }
    hprintln!("inputs {}", INPUTS);
    for (name, cost) in [
        ("conditioning, each converter scan of 4 inputs", &*scan),
        ("conditioning, end of step", finish),
        ("estimate with uncertainties", full),
        ("guard", guarding),
        ("checksum over all estimates (records only)", checksum),
        ("record with checksum (records only)", record),
        ("frame (records only)", frame),
    ] {
        hprintln!("{:5} mean {:5} largest: {}", cost.sum / u64::from(INPUTS), cost.largest, name);
    }
    let step = finish.largest + full.largest + guarding.largest;
    hprintln!("step {} (sum of the largest: end of step, estimate, guard)", step);
}
