//! Filters for one signal: mean over mains periods, median, first order, rate limit. Fixed memory, fixed work per step,
//! nothing allocated; none of them takes a reading that is no number.
//!
//! A filter trades delay for quiet: a mean of N samples delays by (N − 1)/2 of them, a median of N by the same, a first
//! order by its time constant. Delays count as lag of the channel, see [`lag`](super::lag). A filter does not make a
//! systematic error smaller, so the uncertainty of its output is that of its input unless the scatter alone is meant.

/// Mean of the last `N` samples. With the samples of whole mains periods the hum cancels: 100 samples at 1 kHz are five
/// periods of 50 Hz and six of 60 Hz.
///
/// # Examples
/// ```
/// use offcurve_core::sensing::filter::MainsAverage;
///
/// let mut mean = MainsAverage::<4>::new();
/// let found = [1.0, 3.0, 5.0, 7.0, 9.0].map(|sample| mean.push(sample));
/// assert_eq!(found, [None, None, None, Some(4.0), Some(6.0)]); // nothing before the window is full
/// ```
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct MainsAverage<const N: usize> {
    ring: [f32; N],
    next: usize,
    filled: usize,
}

impl<const N: usize> MainsAverage<N> {
    /// Empty.
    #[must_use]
    pub const fn new() -> Self {
        const { assert!(N > 0 && N <= 1000, "a window has 1 to 1000 samples") };
        Self { ring: [0.0; N], next: 0, filled: 0 }
    }

    /// Takes a sample and gives the mean of the last `N`; `None` until there are `N`, and for a sample that is no
    /// finite number, which empties the window: a mean over a gap would not span whole periods.
    pub fn push(&mut self, sample: f32) -> Option<f32> {
        if !sample.is_finite() {
            *self = Self::new();
            return None;
        }
        if let Some(slot) = self.ring.get_mut(self.next) {
            *slot = sample;
        }
        self.next = if self.next >= const { N - 1 } { 0 } else { self.next.saturating_add(1) };
        self.filled = self.filled.saturating_add(1).min(N);
        // Summed afresh from the newest as origin: a running sum would gather rounding for ever.
        (self.filled == N).then(|| {
            let from_newest: f32 = self.ring.iter().map(|other| other - sample).sum();
            sample + from_newest / N as f32
        })
    }
}

impl<const N: usize> Default for MainsAverage<N> {
    fn default() -> Self {
        Self::new()
    }
}

/// Median of the last `N` samples, `N` 3, 5 or 7: takes out (N − 1)/2 neighbouring spikes, keeps edges.
///
/// # Examples
/// ```
/// use offcurve_core::sensing::filter::Median;
///
/// let mut median = Median::<3>::new();
/// let found = [1.0, 1.1, 99.0, 1.2, 1.3].map(|sample| median.push(sample).unwrap());
/// assert_eq!(found, [1.0, 1.0, 1.1, 1.2, 1.3]);
/// ```
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Median<const N: usize> {
    ring: [f32; N],
    next: usize,
    empty: bool,
}

impl<const N: usize> Median<N> {
    /// Empty.
    #[must_use]
    pub const fn new() -> Self {
        const { assert!(N == 3 || N == 5 || N == 7, "a median of 3, 5 or 7") };
        Self { ring: [0.0; N], next: 0, empty: true }
    }

    /// Takes a sample and gives the median; the first fills the whole window. `None`, and no change, for NaN.
    pub fn push(&mut self, sample: f32) -> Option<f32> {
        if sample.is_nan() {
            return None;
        }
        if core::mem::take(&mut self.empty) {
            self.ring = [sample; N];
        } else if let Some(slot) = self.ring.get_mut(self.next) {
            *slot = sample;
        }
        self.next = if self.next >= const { N - 1 } { 0 } else { self.next.saturating_add(1) };
        let mut sorted = self.ring;
        // Odd-even transposition: N passes sort N values, whatever they are.
        for pass in 0..N {
            if let Some(from) = sorted.get_mut(pass & 1..) {
                for pair in from.chunks_exact_mut(2) {
                    if let [low, high] = pair {
                        (*low, *high) = (low.min(*high), low.max(*high));
                    }
                }
            }
        }
        sorted.get(N / 2).copied()
    }
}

impl<const N: usize> Default for Median<N> {
    fn default() -> Self {
        Self::new()
    }
}

/// Why a filter cannot be set up so.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum FilterError {
    /// The time between samples is not a positive number.
    StepNotPositive,
    /// The time constant is negative or no finite number.
    TimeConstant,
    /// The rate is not a positive number.
    RateNotPositive,
}

/// `1 − exp(−x)` for x ≥ 0: the share a first-order lag goes towards its input in a step of x time constants.
///
/// Relative error at most 1e-6 (measured in this file's tests). The quotient `y/(1 + y/2 + y²/12)` for y = x/64, then
/// six doublings `s(2y) = s·(2 − s)`: no difference of near-equal numbers, so small steps keep their digits, where
/// 1 − exp would lose them. 1 above x = 17; NaN and negative x give NaN.
#[must_use]
pub fn first_order_share(x: f32) -> f32 {
    if x.is_nan() || x < 0.0 {
        return f32::NAN;
    }
    if x > 17.0 {
        return 1.0;
    }
    let y = x * (1.0 / 64.0);
    let mut share = y / (1.0 + y * (0.5 + y * (1.0 / 12.0)));
    for _ in 0..6 {
        share *= 2.0 - share;
    }
    share
}

/// First-order lag, stepped exactly for an input held over each step: `y += (1 − exp(−Δt/τ))·(x − y)`.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct FirstOrder {
    share: f32,
    state: Option<f32>,
}

impl FirstOrder {
    /// For samples every `step` seconds and a time constant in seconds; 0 passes the input through.
    ///
    /// # Errors
    /// [`FilterError::StepNotPositive`], [`FilterError::TimeConstant`].
    pub fn new(step: f32, time_constant: f32) -> Result<Self, FilterError> {
        let share = checked_share(step, time_constant)?;
        Ok(Self { share, state: None })
    }

    /// Takes a sample, gives the output; the first sample is the first output. `None`, and no change, for a sample that
    /// is no finite number.
    pub fn push(&mut self, sample: f32) -> Option<f32> {
        if !sample.is_finite() {
            return None;
        }
        let before = self.state.unwrap_or(sample);
        let after = before + self.share * (sample - before);
        self.state = Some(after);
        Some(after)
    }

    /// What is left of the standard deviation of independent scatter: √(s/(2 − s)). Correlated noise keeps more.
    #[must_use]
    pub fn scatter_left(&self) -> f32 {
        crate::math::sqrt(self.share / (2.0 - self.share))
    }
}

/// The share of one step, both times checked.
pub(super) fn checked_share(step: f32, time_constant: f32) -> Result<f32, FilterError> {
    if !step.is_finite() || step <= 0.0 {
        return Err(FilterError::StepNotPositive);
    }
    if !time_constant.is_finite() || time_constant < 0.0 {
        return Err(FilterError::TimeConstant);
    }
    // A time constant far below the step, 0 included, passes everything.
    Ok(if time_constant > 0.0 { first_order_share((step / time_constant).min(1e6)) } else { 1.0 })
}

/// What a rate limit gives.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RateLimited {
    /// The value, no further from the last than the rate allows.
    pub value: f32,
    /// The sample lay further away: the value is not the reading, and the difference is not in any uncertainty.
    pub limited: bool,
}

/// Limits how fast a value may move, and says when it did.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RateLimit {
    per_second: f32,
    last: Option<f32>,
}

impl RateLimit {
    /// Largest change per second, either way.
    ///
    /// # Errors
    /// [`FilterError::RateNotPositive`].
    pub fn new(per_second: f32) -> Result<Self, FilterError> {
        if per_second.is_finite() && per_second > 0.0 {
            Ok(Self { per_second, last: None })
        } else {
            Err(FilterError::RateNotPositive)
        }
    }

    /// Takes a sample `elapsed` seconds after the last; the first passes. `None`, and no change, for a sample or a time
    /// that is no finite number, or for time that runs backwards.
    pub fn push(&mut self, sample: f32, elapsed: f32) -> Option<RateLimited> {
        if !sample.is_finite() || !elapsed.is_finite() || elapsed < 0.0 {
            return None;
        }
        let last = self.last.unwrap_or(sample);
        let reach = self.per_second * elapsed;
        let value = if sample > last + reach {
            last + reach
        } else if sample < last - reach {
            last - reach
        } else {
            sample
        };
        self.last = Some(value);
        Some(RateLimited { value, limited: value != sample })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn share_holds_its_bound() {
        let mut worst = 0.0_f64;
        for step in 0..200_000_u32 {
            let x = 1e-6_f32 * 1.000_085_f32.powi(step as i32); // 1e-6 to 24
            let exact = -(-f64::from(x)).exp_m1();
            worst = worst.max((f64::from(first_order_share(x)) / exact - 1.0).abs());
        }
        assert!(worst < 1e-6, "{worst:e}");
        assert!(worst > 1e-7, "a bound this loose would hide a change: {worst:e}");
        assert_eq!((first_order_share(0.0), first_order_share(f32::INFINITY)), (0.0, 1.0));
        assert!(first_order_share(-1e-3).is_nan() && first_order_share(f32::NAN).is_nan());
    }

    #[test]
    fn a_mean_over_whole_periods_removes_the_hum() {
        for hertz in [50.0_f64, 60.0] {
            for phase in [0.0, 0.7, 2.1] {
                let mut mean = MainsAverage::<100>::new();
                let (mut worst, mut means) = (0.0_f32, 0);
                for sample in 0..1000 {
                    let angle = core::f64::consts::TAU * hertz * f64::from(sample) * 1e-3 + phase;
                    if let Some(got) = mean.push((12.0 + 0.5 * angle.sin()) as f32) {
                        worst = worst.max((got - 12.0).abs());
                        means += 1;
                    }
                }
                assert!(means == 901 && worst < 2e-6, "{hertz} Hz: {worst:e} of an amplitude of 0.5, {means} means");
            }
        }
        // A window that is no whole number of periods leaves some: the test above can fail.
        let mut mean = MainsAverage::<93>::new();
        let left = (0..1000).filter_map(|k| mean.push((core::f64::consts::TAU * 0.05 * f64::from(k)).sin() as f32));
        assert!(left.fold(0.0_f32, |worst, got| worst.max(got.abs())) > 0.01);
    }

    #[test]
    fn a_mean_does_not_drift_and_a_gap_empties_it() {
        let mut mean = MainsAverage::<10>::new();
        for k in 0..100_000 {
            mean.push(if k % 2 == 0 { 1e6 } else { -1e6 });
        }
        let settled = (0..10).map(|_| mean.push(0.1)).last();
        assert_eq!(settled, Some(Some(0.1)));
        assert_eq!(mean.push(f32::NAN), None);
        for _ in 0..9 {
            assert_eq!(mean.push(0.2), None);
        }
        assert_eq!(mean.push(0.2), Some(0.2));
    }

    fn spikes_taken<const N: usize>() -> usize {
        (1..=N)
            .take_while(|&spikes| {
                let mut median = Median::<N>::new();
                let before = (0..N).map(|_| median.push(1.0));
                assert!(before.flatten().all(|got| got == 1.0));
                let during: std::vec::Vec<_> = (0..spikes).map(|_| median.push(100.0).unwrap()).collect();
                during.iter().all(|&got| got == 1.0)
            })
            .count()
    }

    #[test]
    fn a_median_takes_out_just_under_half_its_window() {
        assert_eq!((spikes_taken::<3>(), spikes_taken::<5>(), spikes_taken::<7>()), (1, 2, 3));
        let mut median = Median::<3>::new();
        assert_eq!(median.push(f32::NAN), None);
        assert_eq!(median.push(5.0), Some(5.0), "the first reading fills the window, NaN does not count");
    }

    proptest! {
        #[test]
        fn medians_are_medians(samples in proptest::collection::vec(-1e6_f32..1e6, 7..40)) {
            fn middle<const N: usize>(window: &[f32]) -> f32 {
                let mut sorted = window.to_vec();
                sorted.sort_by(f32::total_cmp);
                sorted[N / 2]
            }
            let (mut three, mut five, mut seven) = (Median::<3>::new(), Median::<5>::new(), Median::<7>::new());
            for (k, &sample) in samples.iter().enumerate() {
                let got = (three.push(sample).unwrap(), five.push(sample).unwrap(), seven.push(sample).unwrap());
                if k >= 6 {
                    let last = |n: usize| &samples[k + 1 - n..=k];
                    prop_assert_eq!(got, (middle::<3>(last(3)), middle::<5>(last(5)), middle::<7>(last(7))));
                }
            }
        }

        /// The limiter never moves further than allowed, and says so exactly when it changed the sample.
        #[test]
        fn rate_is_limited_and_reported(samples in proptest::collection::vec(-100.0_f32..100.0, 2..50)) {
            let mut limit = RateLimit::new(50.0).unwrap();
            let mut last = limit.push(samples[0], 0.0).unwrap();
            prop_assert!(!last.limited);
            for &sample in &samples[1..] {
                let got = limit.push(sample, 0.1).unwrap();
                prop_assert!((got.value - last.value).abs() <= 5.0 * (1.0 + 1e-5));
                prop_assert_eq!(got.limited, got.value != sample);
                if (sample - last.value).abs() < 4.9999 {
                    prop_assert!(!got.limited);
                }
                last = got;
            }
        }
    }

    #[test]
    fn first_order_is_exact_at_the_samples() {
        let mut filter = FirstOrder::new(0.1, 1.5).unwrap();
        assert_eq!(filter.push(0.0), Some(0.0));
        let mut worst = 0.0_f64;
        for k in 1..=200 {
            let exact = 1.0 - (-0.1 * f64::from(k) / 1.5).exp();
            worst = worst.max((f64::from(filter.push(1.0).unwrap()) - exact).abs());
        }
        assert!(worst < 1e-6, "{worst:e}");
        assert_eq!(filter.push(f32::NAN), None);
        assert_eq!(filter.push(f32::INFINITY), None);
        assert!((filter.push(1.0).unwrap() - 1.0).abs() < 1e-5, "what is no number leaves no trace");
        // Scatter of ±1 drawn independently: variance share s/(2 − s), s = 1 − exp(−1/15) = 0.0645.
        assert!((filter.scatter_left() - (0.064_493_0_f32 / 1.935_507).sqrt()).abs() < 1e-6);
        let mut through = FirstOrder::new(0.1, 0.0).unwrap();
        assert_eq!((through.push(3.0), through.push(-7.0)), (Some(3.0), Some(-7.0)));
    }

    #[test]
    fn impossible_settings_are_refused() {
        assert_eq!(FirstOrder::new(0.0, 1.0), Err(FilterError::StepNotPositive));
        assert_eq!(FirstOrder::new(f32::NAN, 1.0), Err(FilterError::StepNotPositive));
        assert_eq!(FirstOrder::new(0.1, -1.0), Err(FilterError::TimeConstant));
        assert_eq!(FirstOrder::new(0.1, f32::INFINITY), Err(FilterError::TimeConstant));
        for rate in [0.0, -1.0, f32::NAN, f32::INFINITY] {
            assert_eq!(RateLimit::new(rate), Err(FilterError::RateNotPositive));
        }
        let mut limit = RateLimit::new(1.0).unwrap();
        assert_eq!((limit.push(f32::NAN, 0.1), limit.push(1.0, -0.1), limit.push(1.0, f32::NAN)), (None, None, None));
        assert_eq!(limit.push(8.0, 0.1), Some(RateLimited { value: 8.0, limited: false }));
        assert_eq!(limit.push(6.0, 0.5), Some(RateLimited { value: 7.5, limited: true }));
        assert_eq!(limit.push(7.5, 0.0), Some(RateLimited { value: 7.5, limited: false }));
    }
}
