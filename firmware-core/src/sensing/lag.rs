//! Lag matching: instruments answer at different speeds, so a ratio of two of them is wrong while anything moves. Every
//! faster channel is slowed until all have the slowest declared lag.
//!
//! An instrument of lag τ sees `1/(τs + 1)`. To see `1/(τ_s·s + 1)` instead, its reading passes through
//! `(τs + 1)/(τ_s·s + 1) = k + (1 − k)/(τ_s·s + 1)` with `k = τ/τ_s`: a share k directly, the rest through a lag of
//! τ_s. This is exact, where a second lag of τ_s − τ alone would match ramps but be up to 0.14 of a step off. Weights
//! are not negative and add up to one, so the output is never more uncertain than the input. Between samples the input is
//! taken as a straight line. What that costs where the truth steps between two samples: at most `Δt²/(8·τ·τ_s)` of the
//! step and never more than `Δt/(2·τ_s)`; where it starts to ramp, `Δt²/(8·τ_s)` times the slope (measured in this file's
//! tests).
//!
//! Only as good as the declared lags, and for first-order instruments: a dead time is not a lag.

use super::filter::{FilterError, checked_share};

/// A matched reading.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Matched {
    /// The reading as an instrument with the slowest lag would give it.
    pub value: f32,
    /// The matching has forgotten where it began (more than [`SETTLING`] lags ago); before that a ratio with another
    /// channel can be off.
    pub settled: bool,
}

/// Lags after which the start no longer shows: exp(−7) = 0.09 %.
pub const SETTLING: f32 = 7.0;

/// Slows one channel to a given lag.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LagMatch {
    /// Share that passes directly, k.
    direct: f32,
    /// Weights of the lag's input now and one step before; the rest stays.
    now: f32,
    before: f32,
    /// Steps until the start no longer shows.
    settling_steps: u32,
    state: Option<State>,
}

#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
struct State {
    input: f32,
    lagged: f32,
    steps: u32,
}

/// Why lags cannot be matched.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum LagError {
    /// The time between samples is not a positive number.
    StepNotPositive,
    /// A lag is negative or no finite number.
    NotALag {
        /// The lag, s.
        lag: f32,
    },
    /// The channel is slower than the lag it is to have: slowing cannot make it faster.
    Slower {
        /// The channel's own lag, s.
        own: f32,
    },
}

impl LagMatch {
    /// For samples every `step` seconds of an instrument with a lag of `own` seconds that is to have `slowest`.
    ///
    /// # Errors
    /// [`LagError`].
    pub fn new(step: f32, own: f32, slowest: f32) -> Result<Self, LagError> {
        if !own.is_finite() || own < 0.0 {
            return Err(LagError::NotALag { lag: own });
        }
        let share = checked_share(step, slowest).map_err(|error| match error {
            FilterError::StepNotPositive => LagError::StepNotPositive,
            _ => LagError::NotALag { lag: slowest },
        })?;
        if own > slowest {
            return Err(LagError::Slower { own });
        }
        if own == slowest {
            return Ok(Self { direct: 1.0, now: 0.0, before: 0.0, settling_steps: 0, state: None });
        }
        // Exact for an input that goes straight from one sample to the next. With x = Δt/τ_s and s = 1 − exp(−x) the
        // weights are 1 − s/x (now) and s/x − (1 − s) (before).
        let x = (step / slowest).min(1e6);
        let held = held_share(share, x);
        let settling_steps = (SETTLING / x) as u32;
        Ok(Self {
            direct: own / slowest,
            now: 1.0 - held,
            before: share - (1.0 - held),
            settling_steps: settling_steps.saturating_add(1),
            state: None,
        })
    }

    /// Takes a reading; `None` (missing, or no finite number) makes the channel start again with the next one.
    pub fn push(&mut self, reading: Option<f32>) -> Option<Matched> {
        let Some(input) = reading.filter(|reading| reading.is_finite()) else {
            self.state = None;
            return None;
        };
        let state = match self.state {
            None => State { input, lagged: input, steps: 0 },
            Some(last) => State {
                input,
                lagged: last.lagged + self.now * (input - last.lagged) + self.before * (last.input - last.lagged),
                steps: last.steps.saturating_add(1),
            },
        };
        self.state = Some(state);
        Some(Matched {
            value: state.lagged + self.direct * (input - state.lagged),
            settled: state.steps >= self.settling_steps,
        })
    }
}

/// (1 − exp(−x))/x; below 0.05 by its series, where 1 minus the quotient would keep few digits.
fn held_share(share: f32, x: f32) -> f32 {
    if x < 0.05 { 1.0 - x * (0.5 - x * (1.0 / 6.0 - x * (1.0 / 24.0))) } else { share / x }
}

/// Slows `N` channels of one machine to the slowest of them.
///
/// # Examples
/// ```
/// use offcurve_core::sensing::lag::LagBank;
///
/// // Flow 1.5 s, pressure 0.2 s, torque 0.3 s, ten samples a second.
/// let mut bank = LagBank::new(0.1, [Some(1.5), Some(0.2), Some(0.3)])?;
/// assert_eq!(bank.common_lag(), 1.5);
/// let [flow, pressure, torque] = bank.push([Some(0.02), Some(3.1e5), None]);
/// assert_eq!(pressure.map(|matched| matched.value), Some(3.1e5));
/// assert!(flow.is_some() && torque.is_none());
/// # Ok::<(), offcurve_core::sensing::lag::LagError>(())
/// ```
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LagBank<const N: usize> {
    channels: [Option<LagMatch>; N],
    common: f32,
}

impl<const N: usize> LagBank<N> {
    /// For samples every `step` seconds; `lags` in seconds, `None` for a channel that is not fitted: it neither slows the
    /// others nor gives a value.
    ///
    /// # Errors
    /// [`LagError`].
    pub fn new(step: f32, lags: [Option<f32>; N]) -> Result<Self, LagError> {
        let common = lags.iter().flatten().fold(0.0_f32, |slowest, &lag| slowest.max(lag));
        let mut channels = [None; N];
        for (channel, lag) in channels.iter_mut().zip(lags) {
            if let Some(own) = lag {
                *channel = Some(LagMatch::new(step, own, common)?);
            }
        }
        Ok(Self { channels, common })
    }

    /// The lag all channels have after matching, s.
    #[must_use]
    pub const fn common_lag(&self) -> f32 {
        self.common
    }

    /// Takes one reading of every channel, gives the matched ones.
    pub fn push(&mut self, readings: [Option<f32>; N]) -> [Option<Matched>; N] {
        let mut matched = [None; N];
        for ((channel, reading), out) in self.channels.iter_mut().zip(readings).zip(&mut matched) {
            *out = channel.as_mut().and_then(|channel| channel.push(reading));
        }
        matched
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Exact response of a lag to a step from 0 to 1 at `at`, or to a ramp of slope 1 that begins there.
    fn step_response(t: f64, at: f64, lag: f64) -> f64 {
        if t <= at { 0.0 } else { 1.0 - (-(t - at) / lag).exp() }
    }
    fn ramp_response(t: f64, at: f64, lag: f64) -> f64 {
        if t <= at { 0.0 } else { (t - at) - lag * (1.0 - (-(t - at) / lag).exp()) }
    }

    /// Largest difference of the two instruments' readings of one change of 1, matched and raw, wherever between two
    /// samples the change begins.
    fn difference(response: fn(f64, f64, f64) -> f64, step: f64, fast: f64, slow: f64) -> (f64, f64) {
        let (mut matched, mut raw) = (0.0_f64, 0.0_f64);
        for phase in 0..20 {
            let mut bank = LagBank::new(step as f32, [Some(fast as f32), Some(slow as f32)]).unwrap();
            let begin = (10.0 + 0.05 * f64::from(phase)) * step;
            for k in 0..400 {
                let readings = [fast, slow].map(|lag| response(f64::from(k) * step, begin, lag));
                raw = raw.max((readings[0] - readings[1]).abs());
                let got = bank.push(readings.map(|reading| Some(reading as f32)));
                let [a, b] = got.map(|reading| f64::from(reading.unwrap().value));
                matched = matched.max((a - b).abs());
            }
        }
        (matched, raw)
    }

    const PAIRS: [(f64, f64, f64); 6] =
        [(0.1, 0.2, 1.5), (0.1, 0.3, 1.5), (0.02, 0.2, 1.5), (0.1, 0.2, 0.4), (0.1, 1.0, 5.0), (0.1, 0.01, 1.5)];

    #[test]
    fn a_step_through_different_lags_stays_together() {
        for (step, fast, slow) in PAIRS {
            let bound = (step * step / (8.0 * fast * slow)).min(step / (2.0 * slow));
            let (matched, raw) = difference(step_response, step, fast, slow);
            assert!(matched < bound + 1e-6 && matched > 0.3 * bound, "{matched:e} {bound:e} {step} {fast} {slow}");
            assert!(raw > 10.0 * matched, "{matched:e} matched, {raw:e} raw");
        }
    }

    #[test]
    fn a_ramp_through_different_lags_stays_together() {
        for (step, fast, slow) in PAIRS {
            let bound = step * step / (8.0 * slow);
            let (matched, raw) = difference(ramp_response, step, fast, slow);
            // The ramp reaches 400 steps, so f32 rounds it by up to 2e-6 of 40.
            assert!(matched < bound + 6e-6 && matched > 0.1 * bound, "{matched:e} {bound:e} {step} {fast} {slow}");
            assert!(raw > 100.0 * matched, "{matched:e} matched, {raw:e} raw");
        }
    }

    /// The case of a pump: flow 1.5 s, pressure 0.2 s, ten samples a second, everything up by half at once. Unmatched the
    /// ratio of the two is off by 28 %; matched, by 0.15 %.
    #[test]
    fn a_ratio_holds_through_a_step() {
        let mut bank = LagBank::new(0.1, [Some(0.2), Some(1.5)]).unwrap();
        let (mut matched, mut raw) = (0.0_f64, 0.0_f64);
        for k in 0..600 {
            let readings = [0.2, 1.5].map(|lag| 1.0 + 0.5 * step_response(0.1 * f64::from(k), 20.05, lag));
            raw = raw.max((readings[0] / readings[1] - 1.0).abs());
            let [a, b] = bank.push(readings.map(|reading| Some(reading as f32))).map(Option::unwrap);
            if a.settled {
                matched = matched.max((f64::from(a.value) / f64::from(b.value) - 1.0).abs());
            }
        }
        assert!(raw > 0.25 && matched < 2.1e-3, "{raw} raw, {matched:e} matched");
    }

    #[test]
    fn steady_readings_pass_unchanged_and_a_gap_starts_again() {
        let mut bank = LagBank::new(0.1, [Some(0.0), Some(2.0), None]).unwrap();
        for k in 0..300 {
            let [a, b, c] = bank.push([Some(3.0e5), Some(0.02), Some(1.0)]);
            assert_eq!((a.unwrap().value, b.unwrap().value, c), (3.0e5, 0.02, None));
            assert!(b.unwrap().settled, "the slowest channel passes as it is");
            assert_eq!(a.unwrap().settled, k >= 141, "step {k}");
        }
        for missing in [None, Some(f32::NAN), Some(f32::INFINITY)] {
            assert_eq!(bank.push([missing, Some(0.02), None])[0], None);
        }
        let again = bank.push([Some(2.0e5), Some(0.02), None])[0].unwrap();
        assert_eq!((again.value, again.settled), (2.0e5, false));
    }

    #[test]
    fn weights_stay_between_nothing_and_all() {
        for x in [1e-6_f32, 1e-4, 1e-3, 0.03, 0.049, 0.051, 0.3, 1.0, 5.0, 100.0, 1e5] {
            let channel = LagMatch::new(x, 0.0, 1.0).unwrap();
            assert!((0.0..=1.0).contains(&channel.now) && (-1e-7..=1.0).contains(&channel.before), "{x}: {channel:?}");
            let exact = -(-f64::from(x)).exp_m1();
            let sum = f64::from(channel.now) + f64::from(channel.before);
            assert!((sum / exact - 1.0).abs() < 1e-6 || (sum - exact).abs() < 6e-8, "{x}: {sum} for {exact}");
        }
    }

    #[test]
    fn impossible_lags_are_refused() {
        assert_eq!(LagMatch::new(0.0, 0.1, 1.0), Err(LagError::StepNotPositive));
        assert_eq!(LagMatch::new(0.1, 2.0, 1.0), Err(LagError::Slower { own: 2.0 }));
        assert_eq!(LagMatch::new(0.1, -1.0, 1.0), Err(LagError::NotALag { lag: -1.0 }));
        assert!(matches!(LagMatch::new(0.1, 0.1, f32::NAN), Err(LagError::NotALag { .. })));
        assert!(matches!(LagBank::new(0.1, [Some(0.1), Some(f32::NAN)]), Err(LagError::NotALag { .. })));
        assert_eq!(LagBank::new(0.1, [Some(0.1), Some(-0.1)]), Err(LagError::NotALag { lag: -0.1 }));
        assert_eq!(LagBank::<1>::new(0.1, [None]).unwrap().push([Some(1.0)]), [None]);
    }
}
