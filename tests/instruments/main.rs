//! The core's watch over a signal and its filters against simulated instruments of another hand: lag, noise with a
//! correlation time, calibration error, mains ripple, limits of the current, a converter of 12 bits.
//!
//! Currents are scanned at 200 Hz, conditioned into ten readings a second by the core, and judged. The scatter each watch
//! is told to expect is worked out here from the instrument's data sheet, not from a run.

use core::f64::consts::TAU;
use offcurve_core::{
    board::{Direction, LoopCurrent, PulseSnapshot, RunState},
    conditioning::{ConditionedSample, Conditioner},
    machine::{
        Profile,
        profile::{ChannelSetup, Source},
    },
    sensing::{
        Channel,
        health::{Health, HealthSetup, Observation, Reasons},
        lag::LagBank,
    },
};
use offcurve_plant::{
    noise::variance_left_by_mean,
    sensor::{AVERAGING_S, NOISE_CORRELATION_S, PulseWheel, SPEED_NOISE, SensorFault, Transmitter, TransmitterSpec},
};
use offcurve_tests::fixtures::Shape;

const SCAN_S: f64 = 0.005;
const SCANS: usize = 20;
const STEP_S: f64 = SCAN_S * SCANS as f64;
const TICKS_PER_SECOND: u32 = 1_000_000;
const TEETH: u16 = 60;
/// Step of the converter, mA: 24 mA in 12 bits.
const CONVERTER_MA: f64 = 24.0 / 4096.0;

/// Share of the variance of 100 ms means that their second differences show, `(6 − 8ρ₁ + 2ρ₂)/6`: neighbouring means of
/// correlated noise are alike, with `ρ₁ = (1 − e^−a)²/(a²·v)`, `ρ₂ = ρ₁·e^−a`, a the window in correlation times and v the
/// variance that the mean leaves (integrals of the autocorrelation `e^−|t|/τ` over two windows).
fn share_in_second_differences() -> f64 {
    let a = AVERAGING_S / NOISE_CORRELATION_S;
    let first = ((1.0 - (-a).exp()) / a).powi(2) / variance_left_by_mean(AVERAGING_S, NOISE_CORRELATION_S);
    (6.0 - 8.0 * first + 2.0 * first * (-a).exp()) / 6.0
}

/// One loop instrument and what is measured with it.
struct Instrument {
    channel: Channel,
    transmitter: Transmitter,
    /// Value at full speed, SI.
    full: f64,
    /// How it goes with the speed.
    power: i32,
}

/// A line of instruments on one machine, seen through the conditioning of the core.
struct Bench {
    instruments: [Instrument; 3],
    wheel: PulseWheel,
    revolutions: f64,
    conditioner: Conditioner,
    profile: Profile,
    time: f64,
    /// Speed relative to the full 1480 rev/min.
    speed: f64,
}

const FULL_SPEED: f64 = 1480.0 / 60.0;

impl Bench {
    fn new(seed: u64, pressure: TransmitterSpec) -> Self {
        let instrument = |channel, spec: TransmitterSpec, stream, full, power| Instrument {
            channel,
            transmitter: Transmitter::new(spec, seed, stream),
            full,
            power,
        };
        let instruments = [
            instrument(Channel::Flow, TransmitterSpec::flow(0.0, 0.05), 1, 0.025, 1),
            instrument(Channel::DischargePressure, pressure, 2, 4.0e5, 2),
            instrument(Channel::ShaftTorque, TransmitterSpec::torque(0.0, 150.0), 3, 80.0, 2),
        ];
        let source = |index: u8| {
            let spec = instruments[usize::from(index)].transmitter.spec();
            let source = Source::Loop { input: index, low: spec.lo as f32, high: spec.hi as f32 };
            ChannelSetup { source, ..ChannelSetup::default() }
        };
        let speed = ChannelSetup { source: Source::Pulses { per_revolution: TEETH }, ..ChannelSetup::default() };
        let profile = Profile {
            flow: source(0),
            discharge_pressure: source(1),
            shaft_torque: source(2),
            suction_pressure: ChannelSetup::default(),
            speed,
            ..Shape::WATERWORKS.profile()
        };
        Self {
            instruments,
            wheel: PulseWheel::new(u32::from(TEETH), seed, 4),
            revolutions: 0.0,
            conditioner: Conditioner::default(),
            profile,
            time: 0.0,
            speed: 1.0,
        }
    }

    fn step(&mut self) -> ConditionedSample {
        for _ in 0..SCANS {
            self.time += SCAN_S;
            self.revolutions += FULL_SPEED * self.speed * SCAN_S;
            self.wheel.step(self.revolutions, SCAN_S, self.time);
            let mut currents = [LoopCurrent::default(); 3];
            for (instrument, current) in self.instruments.iter_mut().zip(&mut currents) {
                let truth = instrument.full * self.speed.powi(instrument.power);
                let sent = instrument.transmitter.step(truth, SCAN_S, self.time);
                *current = LoopCurrent::from_milliamperes(((sent / CONVERTER_MA).round() * CONVERTER_MA) as f32);
            }
            self.conditioner.add_scan(Ok(&currents));
        }
        let ticks = |seconds: f64| (seconds * f64::from(TICKS_PER_SECOND)) as u64 as u32;
        let pulses = PulseSnapshot {
            count: self.wheel.count() as u32,
            last_edge: ticks(self.wheel.last_edge_s().unwrap_or(0.0)),
            now: ticks(self.time),
            direction: Direction::Unknown,
        };
        self.conditioner.finish(&self.profile, &pulses, TICKS_PER_SECOND, RunState::Running)
    }

    /// A watch for a channel: scatter and resolution from the data sheet at the value of now.
    fn watch(&self, channel: Channel) -> Health {
        let (value, deviation, low, high, resolution) = match self.instruments.iter().find(|one| one.channel == channel)
        {
            Some(Instrument { transmitter, full, .. }) => {
                let spec = transmitter.spec();
                let resolution = (spec.hi - spec.lo) / 16.0 * CONVERTER_MA / SCANS as f64;
                (*full, spec.deviation(*full), spec.lo, spec.hi, resolution)
            }
            None => {
                let full = FULL_SPEED * TAU;
                (full, SPEED_NOISE * full, 0.0, 1.2 * full, full / (STEP_S * f64::from(TICKS_PER_SECOND)))
            }
        };
        let scatter = deviation * share_in_second_differences().sqrt();
        Health::new(HealthSetup {
            step_ms: 100,
            low: low as f32,
            high: high as f32,
            resolution: resolution as f32,
            scatter: Some(scatter as f32),
            // The drive goes from standing to full speed in 5 s at the fastest; twice that, and the scatter's own motion.
            largest_rate: (0.4 * value + 11.0 * scatter / STEP_S) as f32,
            stale_after_ms: 1_000,
            on_delay_ms: 2_000,
            off_delay_ms: 5_000,
        })
        .expect("a data sheet within its ranges")
    }
}

fn observe(sample: &ConditionedSample, channel: Channel) -> Observation {
    let reading = sample.channel(channel).ok();
    Observation {
        reading: reading.map(|found| found.value),
        age_ms: reading.map_or(0, |found| 100 * u32::from(found.age)),
        elapsed_ms: 100,
        lively: true,
    }
}

fn pressure() -> TransmitterSpec {
    TransmitterSpec::pressure(-1.0e5, 6.0e5)
}

const WATCHED: [Channel; 4] = [Channel::Speed, Channel::Flow, Channel::DischargePressure, Channel::ShaftTorque];

/// Steady running, slow swings of the speed and a change of set point every ten minutes: 100,000 readings of each of four
/// channels, and not one reason.
#[test]
fn healthy_instruments_raise_nothing() {
    let mut all: Vec<(f64, f64)> = vec![(f64::MAX, 0.0); WATCHED.len()];
    for seed in 1..=4 {
        let mut bench = Bench::new(seed, pressure());
        let mut watches = WATCHED.map(|channel| bench.watch(channel));
        let mut target = 1.0;
        for k in 0..25_000_u32 {
            if k % 6_000 == 3_000 {
                target = if target > 0.95 { 0.9 } else { 1.0 };
            }
            // A ramp of 5 % a second towards the set point, and a swing of 1 % within two minutes.
            let swing = 0.01 * (TAU * f64::from(k) * STEP_S / 120.0).sin();
            bench.speed += (target + swing - bench.speed).clamp(-0.005, 0.005);
            let sample = bench.step();
            for ((watch, channel), seen) in watches.iter_mut().zip(WATCHED).zip(&mut all) {
                let reasons = watch.step(&observe(&sample, channel));
                // The first reading of the pulses has no forerunner.
                assert_eq!(
                    reasons,
                    Reasons::NONE,
                    "{channel:?} after {k} readings, seed {seed}: {:?}",
                    watch.scatter()
                );
                if let Some(found) = watch.scatter() {
                    *seen = (seen.0.min(f64::from(found)), seen.1.max(f64::from(found)));
                }
            }
        }
    }
    // How near a block of healthy readings comes to either limit: lowest and highest scatter over the declared one.
    let bench = Bench::new(1, pressure());
    for (channel, (low, high)) in WATCHED.into_iter().zip(all) {
        let declared = match bench.instruments.iter().find(|one| one.channel == channel) {
            Some(one) => one.transmitter.spec().deviation(one.full),
            None => SPEED_NOISE * FULL_SPEED * TAU,
        } * share_in_second_differences().sqrt();
        println!("{channel:?}: blocks from {:.2} to {:.2} of the declared scatter", low / declared, high / declared);
        assert!(low / declared > 0.4 && high / declared < 2.0, "{channel:?}: {low} to {high} for {declared}");
    }
}

/// Steps until a fault of the pressure transmitter raises a reason, and that reason.
fn found(seed: u64, change: impl Fn(&mut Bench)) -> (usize, Reasons) {
    let mut bench = Bench::new(seed, pressure());
    let mut watch = bench.watch(Channel::DischargePressure);
    for _ in 0..1_000 {
        let sample = bench.step();
        assert_eq!(watch.step(&observe(&sample, Channel::DischargePressure)), Reasons::NONE);
    }
    change(&mut bench);
    for step in 1..2_000 {
        let sample = bench.step();
        let reasons = watch.step(&observe(&sample, Channel::DischargePressure));
        if !reasons.is_healthy() {
            return (step, reasons);
        }
    }
    (usize::MAX, Reasons::NONE)
}

#[test]
fn faults_are_found_by_the_reason_that_fits() {
    let fault = |fault| move |bench: &mut Bench| bench.instruments[1].transmitter.set_fault(fault);
    let replaced = |spec: TransmitterSpec| {
        move |bench: &mut Bench| {
            let mut other = Transmitter::new(spec.clone(), 99, 2);
            // Settled at the level before it takes over, so that only its scatter differs.
            for _ in 0..1_000 {
                let _ = other.step(4.0e5, 0.1, 0.0);
            }
            bench.instruments[1].transmitter = other;
        }
    };
    let blocked = TransmitterSpec { noise_of_span: 0.0025 / 8.0, ripple_of_span: 0.0, ..pressure() };
    let loose = TransmitterSpec { noise_of_span: 0.0025 * 5.0, ..pressure() };
    for seed in 11..=20 {
        let cases: [(&str, (usize, Reasons), Reasons, usize); 6] = [
            ("stuck", found(seed, fault(SensorFault::Stuck)), Reasons::STUCK, 20),
            ("open loop", found(seed, fault(SensorFault::OpenLoop)), Reasons::DROPPED_OUT, 20),
            ("jump", found(seed, fault(SensorFault::Offset(1.5e5))), Reasons::IMPLAUSIBLE_RATE, 1),
            ("gain", found(seed, fault(SensorFault::Gain(1.6))), Reasons::IMPLAUSIBLE_RATE, 1),
            ("blocked line", found(seed, replaced(blocked.clone())), Reasons::TOO_SMOOTH, 2 * 64 + 20),
            ("loose terminal", found(seed, replaced(loose.clone())), Reasons::TOO_NOISY, 2 * 64 + 20),
        ];
        for (name, (steps, reasons), wanted, within) in cases {
            if seed == 11 {
                println!("{name}: {steps} readings, {reasons:?}");
            }
            assert!(reasons == wanted && steps <= within, "{name}: {reasons:?} after {steps}, seed {seed}");
        }
    }
}

/// Two instruments of one quantity through a change of set point: once matched, the ratio keeps what the noise leaves.
#[test]
fn matched_lags_keep_a_ratio_through_a_change_of_speed() {
    let quiet = |spec: TransmitterSpec| TransmitterSpec {
        noise_of_reading: 0.0,
        noise_of_span: 0.0,
        ripple_of_span: 0.0,
        ..spec
    };
    let mut fast = Transmitter::new(quiet(TransmitterSpec::pressure(0.0, 2.0)), 1, 1);
    let mut slow = Transmitter::new(quiet(TransmitterSpec::flow(0.0, 2.0)), 1, 2);
    let mut bank = LagBank::new(0.1, [Some(fast.spec().lag_s as f32), Some(slow.spec().lag_s as f32)]).expect("lags");
    let (mut raw, mut matched) = (0.0_f64, 0.0_f64);
    for k in 0..1_200_u32 {
        let mut means = [0.0; 2];
        for scan in 0..SCANS as u32 {
            let time = f64::from(k) * STEP_S + f64::from(scan) * SCAN_S;
            // 0.8 to 1.2 within 2 s, at 60 s.
            let truth = 0.8 + 0.2 * (time - 60.0).clamp(0.0, 2.0);
            for (mean, transmitter) in means.iter_mut().zip([&mut fast, &mut slow]) {
                *mean += (transmitter.step(truth, SCAN_S, time) - 4.0) / 8.0 / SCANS as f64;
            }
        }
        raw = raw.max((means[0] / means[1] - 1.0).abs());
        if let [Some(a), Some(b)] = bank.push(means.map(|mean| Some(mean as f32)))
            && a.settled
        {
            matched = matched.max((f64::from(a.value) / f64::from(b.value) - 1.0).abs());
        }
    }
    println!("ratio off by {raw:.3} unmatched, {matched:.1e} matched");
    assert!(raw > 0.15 && matched < 1e-3, "{raw} unmatched, {matched:e} matched");
}
