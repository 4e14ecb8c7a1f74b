//! Seeded, correlated noise: what keeps a simulated plant from being easier than a real one.
//!
//! [`Wander`] is the Ornstein-Uhlenbeck process `dx = −x/τ·dt + σ√(2/τ)·dW`, stepped exactly:
//! `x' = φx + σ√(1 − φ²)·N`, `φ = exp(−dt/τ)`. Its standard deviation is `σ` and its autocorrelation
//! `exp(−t/τ)` whatever the step. Every source has a stream of its own, so adding one does not shift the others.

use rand_pcg::Pcg64;
use rand_pcg::rand_core::Rng;

/// One independent stream of random numbers.
///
/// The generator is PCG XSL 128/64 under a stream constant of its own; normal numbers come from Marsaglia's polar
/// method with `libm`'s logarithm, so the sequence is the same on every machine and under every compiler.
#[derive(Debug, Clone)]
pub struct Stream {
    generator: Pcg64,
    spare: Option<f64>,
}

impl Stream {
    /// The stream with this number under this seed.
    pub fn new(seed: u64, number: u64) -> Self {
        // Odd constants spread small seeds over the state; which ones is our choice.
        let state = u128::from(seed).wrapping_add(1).wrapping_mul(0x9E37_79B9_7F4A_7C15_F39C_C060_5CED_C835);
        let mut generator = Pcg64::new(state, u128::from(number).wrapping_mul(0xBF58_476D_1CE4_E5B9));
        // A few turns, so that neighbouring seeds have parted before the first number is used.
        for _ in 0..4 {
            generator.next_u64();
        }
        Self { generator, spare: None }
    }

    /// Uniform on -1 to 1.
    fn uniform(&mut self) -> f64 {
        const STEP: f64 = 1.0 / (1_u64 << 52) as f64;
        (self.generator.next_u64() >> 11) as f64 * STEP - 1.0
    }

    /// A standard normal number.
    pub fn normal(&mut self) -> f64 {
        if let Some(spare) = self.spare.take() {
            return spare;
        }
        loop {
            let (x, y) = (self.uniform(), self.uniform());
            let square = x * x + y * y;
            if square < 1.0 && square > 0.0 {
                let scale = (-2.0 * libm::log(square) / square).sqrt();
                self.spare = Some(y * scale);
                return x * scale;
            }
        }
    }
}

/// A zero-mean process with a declared standard deviation and correlation time.
#[derive(Debug, Clone)]
pub struct Wander {
    stream: Stream,
    deviation: f64,
    correlation_s: f64,
    value: f64,
    /// Step the coefficients below belong to, s.
    step_s: f64,
    keep: f64,
    fresh: f64,
}

impl Wander {
    /// Starts in its stationary distribution. `correlation_s` at or below zero gives white noise.
    pub fn new(stream: Stream, deviation: f64, correlation_s: f64) -> Self {
        let mut stream = stream;
        let value = deviation * stream.normal();
        Self { stream, deviation, correlation_s, value, step_s: f64::NAN, keep: 0.0, fresh: 0.0 }
    }

    /// Advances by `dt` seconds and gives the new value.
    pub fn step(&mut self, dt: f64) -> f64 {
        if dt != self.step_s {
            self.step_s = dt;
            self.keep = if self.correlation_s > 0.0 { libm::exp(-dt / self.correlation_s) } else { 0.0 };
            self.fresh = self.deviation * (1.0 - self.keep * self.keep).max(0.0).sqrt();
        }
        self.value = self.keep * self.value + self.fresh * self.stream.normal();
        self.value
    }

    /// The present value.
    pub fn value(&self) -> f64 {
        self.value
    }
}

/// Share of the variance of such a process that survives a mean over `window_s`, 0 to 1:
/// `2(a − 1 + e^−a)/a²` with `a = window/τ`.
pub fn variance_left_by_mean(window_s: f64, correlation_s: f64) -> f64 {
    let a = window_s / correlation_s;
    if a < 1e-4 { 1.0 - a / 3.0 } else { 2.0 * (a - 1.0 + libm::exp(-a)) / (a * a) }
}
