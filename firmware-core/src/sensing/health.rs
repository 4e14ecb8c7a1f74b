//! Whether one signal can be believed, judged from the signal alone: out of band, stuck, too noisy, too smooth, dropped
//! out, moving at an impossible rate, stale. Each finding is a reason of its own, with delays; time is an argument.
//!
//! Scatter is judged by `(x[i] − 2·x[i−1] + x[i−2])²/6`, whose mean over a block is the variance of independent noise and
//! whose second difference cancels level and ramp, so that a moving process is not taken for noise. It is compared with
//! the scatter the owner declared for the healthy signal (of this very statistic, at this very rate: noise that is
//! correlated from reading to reading has a smaller one than its plain variance). Much less means a blocked impulse line, a
//! frozen filter or a simulated value; much more a loose terminal or a failing transmitter.
//!
//! Stuck is a run of identical readings longer than the declared scatter and resolution allow by chance: the chance of
//! one more repeat is at most `r/(s·√(2π))`, and the run is judged where it would happen by chance once in 10¹².
//! What this cannot see: a signal that is wrong but alive (offset, gain, drift); that takes a second witness.

use crate::math;

/// Readings per block of the scatter judgement.
pub const BLOCK: u16 = 64;

/// Scatter relative to the declared one at which a signal is too noisy; 1 over it at which it is too smooth. Our choice:
/// for independent normal noise a block of [`BLOCK`] readings strays that far less than once in 10⁹.
pub const SCATTER_FACTOR: f32 = 3.0;

/// Second differences count as no more than this many times the one expected, so that one step of the process is not
/// taken for a block of noise.
const DIFFERENCE_CAP: f32 = 6.0;

/// Gaps in a block that count as dropping out, though none of them is long.
pub const GAPS_IN_BLOCK: u16 = BLOCK / 8;

/// Chance of a healthy run that is called stuck.
const STUCK_CHANCE: f32 = 1e-12;

/// The longest run that is waited for.
const LONGEST_RUN: u16 = 128;

/// What is wrong with a signal: a set, as several can hold at once.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Reasons(u8);

impl Reasons {
    /// Nothing.
    pub const NONE: Self = Self(0);
    /// Outside the band the quantity can have on this machine.
    pub const OUT_OF_BAND: Self = Self(1);
    /// The same reading longer than chance allows.
    pub const STUCK: Self = Self(1 << 1);
    /// Scatter above [`SCATTER_FACTOR`] times the declared one.
    pub const TOO_NOISY: Self = Self(1 << 2);
    /// Scatter below 1/[`SCATTER_FACTOR`] of the declared one: blocked impulse line, frozen filter.
    pub const TOO_SMOOTH: Self = Self(1 << 3);
    /// No reading, for longer than the delay or too often.
    pub const DROPPED_OUT: Self = Self(1 << 4);
    /// Moved faster than the quantity can.
    pub const IMPLAUSIBLE_RATE: Self = Self(1 << 5);
    /// The newest reading is too old.
    pub const STALE: Self = Self(1 << 6);

    /// Every reason with one or two words for it.
    pub const NAMED: [(Self, &'static str); 7] = [
        (Self::OUT_OF_BAND, "out of band"),
        (Self::STUCK, "stuck"),
        (Self::TOO_NOISY, "too noisy"),
        (Self::TOO_SMOOTH, "too smooth"),
        (Self::DROPPED_OUT, "dropped out"),
        (Self::IMPLAUSIBLE_RATE, "implausible rate"),
        (Self::STALE, "stale"),
    ];

    /// As bits; 7 are used.
    #[must_use]
    pub const fn bits(self) -> u8 {
        self.0
    }

    /// Whether all reasons of `other` hold.
    #[must_use]
    pub const fn contains(self, other: Self) -> bool {
        self.0 & other.0 == other.0
    }

    /// Whether there is no reason to doubt the signal.
    #[must_use]
    pub const fn is_healthy(self) -> bool {
        self.0 == 0
    }
}

/// How a healthy signal behaves.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct HealthSetup {
    /// Time between readings, ms.
    pub step_ms: u32,
    /// Least value the quantity can have on this machine, SI.
    pub low: f32,
    /// Largest, SI.
    pub high: f32,
    /// Smallest step between two readings, SI, positive. Readings less than half of it apart are identical.
    pub resolution: f32,
    /// Standard deviation that the second differences of the healthy signal show, SI, at least half the resolution.
    /// `None` where it is not known, or finer than the converter resolves: stuck, too noisy and too smooth are then not
    /// judged.
    pub scatter: Option<f32>,
    /// Fastest the quantity can move, SI per second; above what its scatter does from one reading to the next.
    pub largest_rate: f32,
    /// Age above which a reading is stale, ms.
    pub stale_after_ms: u32,
    /// How long a finding must hold before its reason does, ms. Stuck, rate and stale need none: they carry their own.
    pub on_delay_ms: u32,
    /// How long a finding must be gone before its reason is, ms.
    pub off_delay_ms: u32,
}

/// Why a signal cannot be watched so.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum HealthError {
    /// The time between readings is 0.
    NoStep,
    /// The band is empty or its ends are no finite numbers.
    Band,
    /// The resolution is not a positive number.
    Resolution,
    /// The scatter is below half the resolution, or no finite number: the converter would decide what is seen of it.
    ScatterBelowResolution {
        /// The scatter declared.
        scatter: f32,
    },
    /// The largest rate is not positive, or so small that healthy scatter exceeds it from one reading to the next.
    RateWithinScatter {
        /// The smallest rate that could be declared, SI per second.
        least: f32,
    },
}

/// One step of a signal.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Observation {
    /// The reading; `None`, and any that is no finite number, is missing.
    pub reading: Option<f32>,
    /// Age of the reading, ms. Older than one step, it is a reading seen before.
    pub age_ms: u32,
    /// Time since the step before, ms.
    pub elapsed_ms: u32,
    /// The quantity should be moving: false while the machine stands, or a value is held at zero by a cut-off. Stuck, noisy
    /// and smooth are then not judged.
    pub lively: bool,
}

/// What one step says: reasons that hold, reasons that are gone; those in neither are not judged and change nothing.
#[derive(Clone, Copy, Default)]
struct Findings {
    holds: u8,
    gone: u8,
}

impl Findings {
    fn add(&mut self, reason: Reasons, holds: bool) {
        if holds {
            self.holds |= reason.0;
        } else {
            self.gone |= reason.0;
        }
    }
}

/// Reasons that must hold for the on delay; the others carry their own.
const DELAYED: u8 = Reasons::OUT_OF_BAND.0 | Reasons::TOO_NOISY.0 | Reasons::TOO_SMOOTH.0 | Reasons::DROPPED_OUT.0;

/// Sums of one block.
#[derive(Clone, Copy, Debug, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
struct Block {
    steps: u16,
    /// Times a reading was missing that had been there the step before.
    gaps: u16,
    differences: u16,
    /// Sum of squared second differences over 6 declared variances, each no more than [`DIFFERENCE_CAP`] squared.
    sum: f32,
}

/// The watch over one signal.
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Health {
    setup: HealthSetup,
    /// Identical readings that make it stuck.
    run_limit: u16,
    /// The last readings, newest first, while they are one step apart.
    last: Option<f32>,
    before: Option<f32>,
    /// Time since `last`, ms.
    since_ms: u32,
    /// First reading of the present run of identical ones, and how many there are.
    run_of: f32,
    run: u16,
    block: Block,
    scatter: Option<f32>,
    was_missing: bool,
    drops_often: bool,
    /// How long each finding has been the opposite of its reason, ms, and for which that is not 0.
    waited_ms: [u32; 7],
    waiting: u8,
    reasons: Reasons,
}

impl Health {
    /// A watch that has seen nothing yet.
    ///
    /// # Errors
    /// [`HealthError`].
    pub fn new(setup: HealthSetup) -> Result<Self, HealthError> {
        if setup.step_ms == 0 {
            return Err(HealthError::NoStep);
        }
        if !setup.low.is_finite() || !setup.high.is_finite() || setup.low >= setup.high {
            return Err(HealthError::Band);
        }
        if !setup.resolution.is_finite() || setup.resolution <= 0.0 {
            return Err(HealthError::Resolution);
        }
        let mut run_limit = u16::MAX;
        let mut least = 0.0;
        if let Some(scatter) = setup.scatter {
            if !scatter.is_finite() || scatter < 0.5 * setup.resolution {
                return Err(HealthError::ScatterBelowResolution { scatter });
            }
            run_limit = longest_healthy_run(setup.resolution / scatter);
            // From one reading to the next, correlated noise moves by √3 of this scatter at most; six times that.
            least = 6.0 * 1.732_050_8 * scatter / (setup.step_ms as f32 * 1e-3);
        }
        if setup.largest_rate.is_nan() || setup.largest_rate <= 0.0 || setup.largest_rate < least {
            return Err(HealthError::RateWithinScatter { least });
        }
        Ok(Self {
            setup,
            run_limit,
            last: None,
            before: None,
            since_ms: 0,
            run_of: 0.0,
            run: 0,
            block: Block::default(),
            scatter: None,
            was_missing: true,
            drops_often: false,
            waited_ms: [0; 7],
            waiting: 0,
            reasons: Reasons::NONE,
        })
    }

    /// How many identical readings make this signal stuck.
    #[must_use]
    pub const fn stuck_after(&self) -> u16 {
        self.run_limit
    }

    /// Standard deviation seen in the last full block, SI, to hold against the one declared. Second differences beyond six
    /// times the expected count as that.
    #[must_use]
    pub const fn scatter(&self) -> Option<f32> {
        self.scatter
    }

    /// The reasons that hold now.
    #[must_use]
    pub const fn reasons(&self) -> Reasons {
        self.reasons
    }

    /// Judges one step.
    pub fn step(&mut self, seen: &Observation) -> Reasons {
        let step_ms = self.setup.step_ms;
        self.since_ms = self.since_ms.saturating_add(seen.elapsed_ms);
        let in_step = self.since_ms.abs_diff(step_ms) <= step_ms / 2;
        let reading = seen.reading.filter(|reading| reading.is_finite());
        let mut findings = Findings::default();
        if let Some(reading) = reading {
            findings.add(Reasons::OUT_OF_BAND, !(self.setup.low..=self.setup.high).contains(&reading));
        }
        // Older than a step, it has been judged before.
        let new = reading.filter(|_| seen.age_ms <= step_ms);
        if let Some(new) = new {
            self.judge_rate(new, &mut findings);
        }
        let lively = if seen.lively { new.zip(self.setup.scatter) } else { None };
        self.judge_run(lively.is_some(), new.unwrap_or(0.0), &mut findings);
        if let Some((new, declared)) = lively
            && in_step
        {
            self.add_difference(new, declared);
        }
        self.end_step_of_block(reading.is_none());
        if let (Some(found), Some((_, declared))) = (self.scatter, lively) {
            findings.add(Reasons::TOO_NOISY, found > declared * SCATTER_FACTOR);
            findings.add(Reasons::TOO_SMOOTH, found * SCATTER_FACTOR < declared);
        }
        findings.add(Reasons::DROPPED_OUT, reading.is_none() || self.drops_often);
        findings.add(Reasons::STALE, reading.is_some() && seen.age_ms > self.setup.stale_after_ms);
        self.delay(findings, seen.elapsed_ms);
        if let Some(new) = new {
            self.before = if in_step { self.last } else { None };
            self.last = Some(new);
            self.since_ms = 0;
        }
        self.reasons
    }

    fn judge_rate(&self, new: f32, findings: &mut Findings) {
        if let Some(last) = self.last
            && self.since_ms > 0
        {
            let reach = self.setup.largest_rate * (self.since_ms as f32 * 1e-3);
            findings.add(Reasons::IMPLAUSIBLE_RATE, (new - last).abs() > reach);
        }
    }

    fn judge_run(&mut self, lively: bool, new: f32, findings: &mut Findings) {
        if !lively {
            self.run = 0;
            return;
        }
        if self.run > 0 && (new - self.run_of).abs() < 0.5 * self.setup.resolution {
            self.run = self.run.saturating_add(1);
        } else {
            self.run = 1;
            self.run_of = new;
        }
        findings.add(Reasons::STUCK, self.run >= self.run_limit);
    }

    fn add_difference(&mut self, new: f32, declared: f32) {
        if let (Some(last), Some(before)) = (self.last, self.before) {
            let relative = (new - 2.0 * last + before) / declared;
            let square = relative * relative * (1.0 / 6.0);
            self.block.sum += square.min(DIFFERENCE_CAP * DIFFERENCE_CAP);
            self.block.differences = self.block.differences.saturating_add(1);
        }
    }

    fn end_step_of_block(&mut self, missing: bool) {
        self.block.steps = self.block.steps.saturating_add(1);
        self.block.gaps = self.block.gaps.saturating_add(u16::from(missing && !self.was_missing));
        self.was_missing = missing;
        if self.block.steps >= BLOCK {
            let block = core::mem::take(&mut self.block);
            self.drops_often = block.gaps >= GAPS_IN_BLOCK;
            // With half of the differences missing, the rest says too little.
            self.scatter = match self.setup.scatter {
                Some(declared) if block.differences >= BLOCK / 2 => {
                    Some(declared * math::sqrt(block.sum / f32::from(block.differences)))
                }
                _ => None,
            };
        }
    }

    /// A reason comes when its finding has held for the on delay, and goes when it has been gone for the off delay.
    fn delay(&mut self, findings: Findings, elapsed_ms: u32) {
        let Findings { holds, gone } = findings;
        let opposite = (holds & !self.reasons.0) | (gone & self.reasons.0);
        let changing = opposite | (self.waiting & (holds | gone));
        if changing == 0 {
            return; // a healthy signal: nothing comes, nothing goes
        }
        // Often missing has waited a block already.
        let delayed = if self.drops_often { DELAYED & !Reasons::DROPPED_OUT.0 } else { DELAYED };
        for ((reason, _), waited_ms) in Reasons::NAMED.iter().zip(&mut self.waited_ms) {
            let bit = reason.0;
            if changing & bit == 0 {
                continue;
            }
            let delay_ms = if self.reasons.0 & bit != 0 {
                self.setup.off_delay_ms
            } else if delayed & bit != 0 {
                self.setup.on_delay_ms
            } else {
                0
            };
            *waited_ms = waited_ms.saturating_add(elapsed_ms);
            if opposite & bit != 0 && *waited_ms < delay_ms {
                self.waiting |= bit;
                continue;
            }
            *waited_ms = 0;
            self.waiting &= !bit;
            self.reasons.0 ^= opposite & bit;
        }
    }
}

/// The run of identical readings that happens by chance once in 1/[`STUCK_CHANCE`], for a resolution of `relative`
/// standard deviations: each further one is as likely as the fullest step of the normal distribution, 0.399·relative.
fn longest_healthy_run(relative: f32) -> u16 {
    let chance = 0.398_942_3 * relative;
    let mut left = 1.0_f32;
    let mut run = 1_u16;
    while left > STUCK_CHANCE && run < LONGEST_RUN {
        left *= chance;
        run = run.saturating_add(1);
    }
    run
}

#[cfg(test)]
mod tests {
    use super::*;

    const SETUP: HealthSetup = HealthSetup {
        step_ms: 100,
        low: 0.0,
        high: 1.0e6,
        resolution: 100.0,
        scatter: Some(1_000.0),
        largest_rate: 200_000.0,
        stale_after_ms: 1_000,
        on_delay_ms: 2_000,
        off_delay_ms: 5_000,
    };

    /// Independent normal noise by the sum of twelve uniform numbers, from a fixed linear congruence.
    struct Noise(u64);

    impl Noise {
        fn uniform(&mut self) -> f64 {
            self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            (self.0 >> 11) as f64 / (1_u64 << 53) as f64
        }
        fn normal(&mut self) -> f64 {
            (0..12).map(|_| self.uniform()).sum::<f64>() - 6.0
        }
    }

    struct Signal {
        health: Health,
        noise: Noise,
        level: f64,
        scatter: f64,
    }

    impl Signal {
        fn new(setup: HealthSetup) -> Self {
            Self { health: Health::new(setup).unwrap(), noise: Noise(7), level: 4.0e5, scatter: 1_000.0 }
        }

        fn reading(&mut self) -> f32 {
            ((self.level + self.scatter * self.noise.normal()) / 100.0).round() as f32 * 100.0
        }

        fn see(&mut self, reading: Option<f32>, age_ms: u32, lively: bool) -> Reasons {
            self.health.step(&Observation { reading, age_ms, elapsed_ms: 100, lively })
        }

        /// Healthy noise about the level; gives every reason seen on the way.
        fn run(&mut self, steps: usize) -> Reasons {
            (0..steps).fold(Reasons::NONE, |all, _| {
                let reading = self.reading();
                Reasons(all.0 | self.see(Some(reading), 0, true).0)
            })
        }
    }

    #[test]
    fn healthy_noise_raises_nothing() {
        let mut signal = Signal::new(SETUP);
        assert_eq!(signal.run(100_000), Reasons::NONE);
        let found = signal.health.scatter().unwrap();
        assert!((0.6..1.5).contains(&(found / 1_000.0)), "{found}");
        // A process that moves: ramps of half the largest rate, steps of ten standard deviations.
        for k in 0..100 {
            let by = if k % 2 == 0 { 1.0e4 } else { -1.0e4 };
            for _ in 0..10 {
                signal.level += by;
                assert_eq!(signal.run(1), Reasons::NONE);
            }
            assert_eq!(signal.run(100), Reasons::NONE);
            signal.level += by;
            assert_eq!(signal.run(100), Reasons::NONE);
        }
    }

    #[test]
    fn out_of_band_with_its_delays() {
        let mut signal = Signal::new(HealthSetup { largest_rate: f32::INFINITY, ..SETUP });
        assert_eq!(signal.run(100), Reasons::NONE);
        signal.level = 1.1e6;
        assert_eq!(signal.run(19), Reasons::NONE, "1.9 s of 2 s");
        assert_eq!(signal.run(1), Reasons::OUT_OF_BAND);
        signal.level = 4.0e5;
        let mut left = 0;
        while signal.run(1) == Reasons::OUT_OF_BAND {
            left += 1;
        }
        assert_eq!(left, 49, "5 s back inside");
        signal.level = -1.0e5;
        assert_eq!(signal.run(30), Reasons::OUT_OF_BAND, "below counts too");
    }

    #[test]
    fn a_frozen_reading_is_stuck_within_the_run_chance_allows() {
        let mut signal = Signal::new(SETUP);
        let limit = signal.health.stuck_after();
        // 0.0399 a step: eight more to pass 1e-12.
        assert_eq!(limit, 10);
        assert_eq!(signal.run(500), Reasons::NONE);
        let frozen = signal.reading();
        let mut steps = 0;
        while !signal.see(Some(frozen), 0, true).contains(Reasons::STUCK) {
            steps += 1;
            assert!(steps < 20);
        }
        assert_eq!(steps + 1, limit);
        // It is freed after the off delay.
        assert!(signal.run(48).contains(Reasons::STUCK));
        let _ = signal.run(2);
        assert!(!signal.health.reasons().contains(Reasons::STUCK));
        // A coarser converter must be given longer.
        let coarse = Health::new(HealthSetup { resolution: 1_000.0, ..SETUP }).unwrap();
        let coarsest = Health::new(HealthSetup { resolution: 2_000.0, ..SETUP }).unwrap();
        assert_eq!((coarse.stuck_after(), coarsest.stuck_after()), (32, 124));
    }

    #[test]
    fn a_standing_machine_is_not_stuck() {
        let mut signal = Signal::new(SETUP);
        assert_eq!(signal.run(500), Reasons::NONE);
        for _ in 0..1_000 {
            assert_eq!(signal.see(Some(4.0e5), 0, false), Reasons::NONE);
        }
        assert_eq!(signal.run(500), Reasons::NONE);
    }

    #[test]
    fn four_times_the_scatter_is_too_noisy_and_twice_is_not() {
        let mut signal = Signal::new(HealthSetup { largest_rate: f32::INFINITY, ..SETUP });
        assert_eq!(signal.run(500), Reasons::NONE);
        signal.scatter = 2_000.0;
        assert_eq!(signal.run(20_000), Reasons::NONE);
        signal.scatter = 4_000.0;
        assert_eq!(signal.run(3 * usize::from(BLOCK)), Reasons::TOO_NOISY);
        signal.scatter = 1_000.0;
        let _ = signal.run(3 * usize::from(BLOCK));
        assert_eq!(signal.health.reasons(), Reasons::NONE);
    }

    #[test]
    fn a_quarter_of_the_scatter_is_too_smooth_and_half_is_not() {
        let mut signal = Signal::new(SETUP);
        assert_eq!(signal.run(500), Reasons::NONE);
        signal.scatter = 500.0;
        assert_eq!(signal.run(20_000), Reasons::NONE);
        // A blocked impulse line: what is left of the scatter is the converter's, and the level creeps.
        signal.scatter = 250.0;
        assert_eq!(signal.run(3 * usize::from(BLOCK)), Reasons::TOO_SMOOTH);
        signal.scatter = 1_000.0;
        let _ = signal.run(3 * usize::from(BLOCK));
        assert_eq!(signal.health.reasons(), Reasons::NONE);
    }

    #[test]
    fn missing_for_long_or_often_is_dropped_out() {
        for missing in [None, Some(f32::NAN), Some(f32::NEG_INFINITY)] {
            let mut signal = Signal::new(SETUP);
            assert_eq!(signal.run(500), Reasons::NONE);
            for _ in 0..19 {
                assert_eq!(signal.see(missing, 0, true), Reasons::NONE);
            }
            assert_eq!(signal.see(missing, 0, true), Reasons::DROPPED_OUT);
        }
        // One in six, never two together: no gap is long.
        let mut signal = Signal::new(SETUP);
        let mut all = Reasons::NONE;
        for k in 0..200 {
            let reading = signal.reading();
            all = signal.see((k % 6 != 0).then_some(reading), 0, true);
        }
        assert_eq!(all, Reasons::DROPPED_OUT);
        // One in twenty is borne.
        let mut signal = Signal::new(SETUP);
        for k in 0..20_000 {
            let reading = signal.reading();
            assert_eq!(signal.see((k % 20 != 0).then_some(reading), 0, true), Reasons::NONE);
        }
    }

    #[test]
    fn a_jump_is_an_implausible_rate_at_once() {
        let mut signal = Signal::new(SETUP);
        assert_eq!(signal.run(500), Reasons::NONE);
        signal.level += 3.0e4; // 300 kPa/s, allowed 200
        assert_eq!(signal.run(1), Reasons::IMPLAUSIBLE_RATE);
        assert_eq!(signal.run(49), Reasons::IMPLAUSIBLE_RATE);
        let _ = signal.run(1);
        assert_eq!(signal.health.reasons(), Reasons::NONE);
        // The same change over a gap of 0.4 s is not too fast.
        for _ in 0..3 {
            assert_eq!(signal.see(None, 0, true), Reasons::NONE);
        }
        signal.level += 3.0e4;
        assert_eq!(signal.run(1), Reasons::NONE);
    }

    #[test]
    fn a_held_value_is_stale_and_not_stuck() {
        let mut signal = Signal::new(SETUP);
        assert_eq!(signal.run(500), Reasons::NONE);
        let held = signal.reading();
        for age in 0..=10 {
            assert_eq!(signal.see(Some(held), age * 100, true), Reasons::NONE, "{age}");
        }
        for age in 11..100 {
            assert_eq!(signal.see(Some(held), age * 100, true), Reasons::STALE, "{age}");
        }
        let _ = signal.run(51);
        assert_eq!(signal.health.reasons(), Reasons::NONE);
    }

    #[test]
    fn without_a_declared_scatter_only_the_rest_is_judged() {
        let mut signal = Signal::new(HealthSetup { scatter: None, ..SETUP });
        for _ in 0..1_000 {
            assert_eq!(signal.see(Some(4.0e5), 0, true), Reasons::NONE);
        }
        assert_eq!(signal.health.scatter(), None);
        assert_eq!(signal.see(Some(9.0e5), 0, true), Reasons::IMPLAUSIBLE_RATE);
    }

    #[test]
    fn uneven_time_is_not_noise() {
        let mut signal = Signal::new(SETUP);
        // A ramp read at uneven times has second differences that are no noise: they are left out.
        for k in 0..2_000_u32 {
            let elapsed_ms = if k % 8 == 0 { 300 } else { 100 };
            signal.level += f64::from(elapsed_ms) * if k / 40 % 2 == 0 { 100.0 } else { -100.0 };
            let reading = Some(signal.reading());
            let got = signal.health.step(&Observation { reading, age_ms: 0, elapsed_ms, lively: true });
            assert_eq!(got, Reasons::NONE, "step {k}, scatter {:?}", signal.health.scatter());
        }
        assert!((0.5..1.6).contains(&(signal.health.scatter().unwrap() / 1_000.0)));
    }

    #[test]
    fn impossible_settings_are_refused() {
        let with = |setup| Health::new(setup).map(|_| ());
        assert_eq!(with(SETUP), Ok(()));
        assert_eq!(with(HealthSetup { step_ms: 0, ..SETUP }), Err(HealthError::NoStep));
        for (low, high) in [(1.0, 1.0), (2.0, 1.0), (f32::NAN, 1.0), (0.0, f32::INFINITY)] {
            assert_eq!(with(HealthSetup { low, high, ..SETUP }), Err(HealthError::Band));
        }
        for resolution in [0.0, -1.0, f32::NAN, f32::INFINITY] {
            assert_eq!(with(HealthSetup { resolution, ..SETUP }), Err(HealthError::Resolution));
        }
        let fine = HealthSetup { scatter: Some(49.0), ..SETUP };
        assert_eq!(with(fine), Err(HealthError::ScatterBelowResolution { scatter: 49.0 }));
        assert!(with(HealthSetup { scatter: Some(f32::NAN), ..SETUP }).is_err());
        let slow = with(HealthSetup { largest_rate: 1.0e5, ..SETUP });
        assert!(matches!(slow, Err(HealthError::RateWithinScatter { least }) if (least - 103_923.0).abs() < 1.0));
        for largest_rate in [0.0, -1.0, f32::NAN] {
            assert!(with(HealthSetup { largest_rate, scatter: None, ..SETUP }).is_err());
        }
    }

    #[test]
    fn every_reason_has_one_bit_and_a_name() {
        let all = Reasons::NAMED.iter().fold(0, |all, (reason, name)| {
            assert!(reason.bits().count_ones() == 1 && all & reason.bits() == 0 && !name.is_empty());
            all | reason.bits()
        });
        assert_eq!(all, 0x7f);
        assert!(Reasons::NONE.is_healthy() && !Reasons::STALE.is_healthy());
    }

    #[test]
    fn fits_the_memory_budget() {
        assert!(size_of::<Health>() <= 192, "{} bytes", size_of::<Health>());
    }
}
