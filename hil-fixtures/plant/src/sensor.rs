//! Instruments between truth and terminal: lag, band-limited noise, calibration error, mains ripple, loop current.
//!
//! A transmitter sees `x` through `dy/dt = (x − y)/τ`, adds errors and sends `4 + 16·(y − lo)/(hi − lo)` mA, limited
//! to 3.8 to 20.5 mA as NE 43 has it (from memory). Its noise has a correlation time of 0.15 s and is scaled so that a
//! mean over 100 ms carries the declared standard deviation: averaging 1 kHz samples cannot make it kinder. One
//! constant error of a third of that deviation is drawn at the start. [`PulseWheel`] places pulse edges by shaft
//! angle. Not modelled: temperature drift, hysteresis, dead band, noise that grows with age.

use crate::noise::{Stream, Wander, variance_left_by_mean};

/// Correlation time of instrument noise, s.
pub const NOISE_CORRELATION_S: f64 = 0.15;
/// Averaging time at which the declared noise is met, s (whole periods of 50 and 60 Hz).
pub const AVERAGING_S: f64 = 0.1;
/// Calibration error as a share of the noise figure.
pub const CALIBRATION_SHARE: f64 = 1.0 / 3.0;
/// Limits of the current a working transmitter sends, mA.
pub const CURRENT_LIMITS_MA: (f64, f64) = (3.8, 20.5);

/// How an instrument is built; `lo` and `hi` in the unit of the quantity.
#[derive(Debug, Clone, PartialEq)]
pub struct TransmitterSpec {
    /// Value at 4 mA.
    pub lo: f64,
    /// Value at 20 mA.
    pub hi: f64,
    /// First-order time constant, s.
    pub lag_s: f64,
    /// Standard deviation in proportion to the reading, share.
    pub noise_of_reading: f64,
    /// Standard deviation in proportion to the span, share; added to the one above.
    pub noise_of_span: f64,
    /// Amplitude of mains ripple, share of span.
    pub ripple_of_span: f64,
    /// Mains frequency, Hz.
    pub mains_hz: f64,
}

impl TransmitterSpec {
    /// Flow meter: 0.5 % of reading and 0.2 % of span, lag 1.5 s.
    pub fn flow(lo: f64, hi: f64) -> Self {
        Self { lag_s: 1.5, noise_of_reading: 0.005, noise_of_span: 0.002, ..Self::pressure(lo, hi) }
    }

    /// Pressure transmitter: 0.25 % of span, lag 0.2 s.
    pub fn pressure(lo: f64, hi: f64) -> Self {
        Self { lo, hi, lag_s: 0.2, noise_of_reading: 0.0, noise_of_span: 0.0025, ripple_of_span: 0.001, mains_hz: 50.0 }
    }

    /// Torque shaft: 2 % of reading and 0.05 % of span, lag 0.3 s.
    pub fn torque(lo: f64, hi: f64) -> Self {
        Self { lag_s: 0.3, noise_of_reading: 0.02, noise_of_span: 0.0005, ..Self::pressure(lo, hi) }
    }

    /// Declared standard deviation at a reading, in the unit of the quantity.
    pub fn deviation(&self, reading: f64) -> f64 {
        self.noise_of_reading * reading.abs() + self.noise_of_span * (self.hi - self.lo)
    }
}

/// What is wrong with an instrument.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub enum SensorFault {
    /// Nothing.
    #[default]
    None,
    /// The loop is broken: no current.
    OpenLoop,
    /// The output stays where it was when the fault began.
    Stuck,
    /// The reading is multiplied by this factor.
    Gain(f64),
    /// This much is added to the reading, in the unit of the quantity.
    Offset(f64),
}

/// A 4-20 mA instrument.
#[derive(Debug, Clone)]
pub struct Transmitter {
    spec: TransmitterSpec,
    noise: Wander,
    calibration: f64,
    lagged: Option<f64>,
    lag_step_s: f64,
    lag_share: f64,
    ripple_phase: f64,
    current_ma: f64,
    fault: SensorFault,
}

impl Transmitter {
    /// An instrument with its own random stream; the calibration error is drawn here.
    pub fn new(spec: TransmitterSpec, seed: u64, stream: u64) -> Self {
        let mut draw = Stream::new(seed, stream.wrapping_mul(2));
        let calibration = CALIBRATION_SHARE * draw.normal();
        let ripple_phase = draw.normal();
        let scale = 1.0 / variance_left_by_mean(AVERAGING_S, NOISE_CORRELATION_S).sqrt();
        let noise = Wander::new(Stream::new(seed, stream.wrapping_mul(2) + 1), scale, NOISE_CORRELATION_S);
        Self {
            spec,
            noise,
            calibration,
            lagged: None,
            lag_step_s: f64::NAN,
            lag_share: 1.0,
            ripple_phase,
            current_ma: 0.0,
            fault: SensorFault::None,
        }
    }

    /// Advances by `dt` seconds with the quantity at `truth` and gives the loop current in mA.
    /// `time_s` is the time at the end of the step; it only sets the phase of the ripple.
    pub fn step(&mut self, truth: f64, dt: f64, time_s: f64) -> f64 {
        if dt != self.lag_step_s {
            self.lag_step_s = dt;
            self.lag_share = if self.spec.lag_s > 0.0 { 1.0 - libm::exp(-dt / self.spec.lag_s) } else { 1.0 };
        }
        let before = self.lagged.unwrap_or(truth);
        let lagged = before + (truth - before) * self.lag_share;
        self.lagged = Some(lagged);
        let errors = (self.noise.step(dt) + self.calibration) * self.spec.deviation(lagged);
        let span = self.spec.hi - self.spec.lo;
        let cycles = self.spec.mains_hz * time_s;
        let ripple = self.spec.ripple_of_span
            * span
            * libm::sin(2.0 * core::f64::consts::PI * (cycles - cycles.floor()) + self.ripple_phase);
        let mut reading = lagged + errors + ripple;
        match self.fault {
            SensorFault::None => {}
            SensorFault::Gain(factor) => reading *= factor,
            SensorFault::Offset(offset) => reading += offset,
            SensorFault::OpenLoop => {
                self.current_ma = 0.0;
                return 0.0;
            }
            SensorFault::Stuck => return self.current_ma,
        }
        self.current_ma =
            (4.0 + 16.0 * (reading - self.spec.lo) / span).clamp(CURRENT_LIMITS_MA.0, CURRENT_LIMITS_MA.1);
        self.current_ma
    }

    /// The current last sent, mA; 0 before the first step.
    pub fn current_ma(&self) -> f64 {
        self.current_ma
    }

    /// How the instrument is built.
    pub fn spec(&self) -> &TransmitterSpec {
        &self.spec
    }

    /// The instrument's constant error at a reading, in the unit of the quantity.
    pub fn calibration_error(&self, reading: f64) -> f64 {
        self.calibration * self.spec.deviation(reading)
    }

    /// Sets or clears a fault.
    pub fn set_fault(&mut self, fault: SensorFault) {
        self.fault = fault;
    }
}

/// Declared noise of a speed reading taken over 100 ms, share.
pub const SPEED_NOISE: f64 = 0.001;
/// Standard deviation of a single edge's time, s.
const EDGE_JITTER_S: f64 = 3e-6;

/// A toothed wheel and its pick-up: a count and the time of the last edge.
#[derive(Debug, Clone)]
pub struct PulseWheel {
    pulses_per_revolution: u32,
    gain_noise: Wander,
    jitter: Stream,
    calibration: f64,
    /// Apparent angle since the start, pulses.
    angle: f64,
    revolutions: f64,
    count: u64,
    last_edge_s: Option<f64>,
}

impl PulseWheel {
    /// A wheel with that many teeth (0 counts as 1), its own random stream and a calibration error.
    pub fn new(pulses_per_revolution: u32, seed: u64, stream: u64) -> Self {
        let mut jitter = Stream::new(seed, stream.wrapping_mul(2));
        let calibration = CALIBRATION_SHARE * SPEED_NOISE * jitter.normal();
        let scale = SPEED_NOISE / variance_left_by_mean(AVERAGING_S, NOISE_CORRELATION_S).sqrt();
        let gain_noise = Wander::new(Stream::new(seed, stream.wrapping_mul(2) + 1), scale, NOISE_CORRELATION_S);
        Self {
            pulses_per_revolution: pulses_per_revolution.max(1),
            gain_noise,
            jitter,
            calibration,
            angle: 0.0,
            revolutions: 0.0,
            count: 0,
            last_edge_s: None,
        }
    }

    /// Advances to a shaft angle (revolutions since the start, not falling) over the `dt` seconds that end at
    /// `time_s`. Within the step the speed is taken as constant, so an edge lies where the angle crosses a tooth.
    pub fn step(&mut self, revolutions: f64, dt: f64, time_s: f64) {
        let turned = (revolutions - self.revolutions).max(0.0);
        self.revolutions = revolutions;
        let apparent =
            turned * f64::from(self.pulses_per_revolution) * (1.0 + self.calibration + self.gain_noise.step(dt));
        if apparent <= 0.0 {
            return;
        }
        self.angle += apparent;
        let teeth = self.angle.floor();
        if teeth > self.count as f64 {
            self.count = teeth as u64;
            let exact = time_s - dt * (self.angle - teeth) / apparent;
            let seen = exact + EDGE_JITTER_S * self.jitter.normal();
            // An edge can be seen neither in the future nor before its forerunner.
            let earliest = self.last_edge_s.unwrap_or(0.0);
            self.last_edge_s = Some(seen.clamp(earliest.min(time_s), time_s));
        }
    }

    /// Edges since the start.
    pub fn count(&self) -> u64 {
        self.count
    }

    /// Time of the last edge, s since the start; `None` before the first.
    pub fn last_edge_s(&self) -> Option<f64> {
        self.last_edge_s
    }

    /// Teeth of the wheel.
    pub fn pulses_per_revolution(&self) -> u32 {
        self.pulses_per_revolution
    }
}
