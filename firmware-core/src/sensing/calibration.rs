//! Two-point calibration of a loop: what it read as found at two known values, so that its readings can be corrected.
//!
//! `true = reference_low + (reading − found_low)·gain`, `gain = (reference_high − reference_low)/(found_high − found_low)`.
//! A correction is known no better than what it was made with: with `w = (reading − found_low)/(found_high − found_low)`
//! the standard uncertainty is `u² = (gain·u_reading)² + ((1 − w)·u_low)² + (w·u_high)² + u_standard²`, so it grows outside
//! the two points. `u_low` and `u_high` are the scatter of each comparison, independent of each other; `u_standard` is
//! what both share with the reference instrument, and moves every corrected value alike.
//! Straight line only: a bent characteristic between the points stays as it is, and drift after the calibration too.

use super::Measured;
use crate::{math, quantity::Quantity};

/// The least distance of the two points, as a share of the measuring span: nearer points make the gain a guess
/// (common practice, no source).
pub const LEAST_SEPARATION: f32 = 0.2;

/// Gains a working loop can have; beyond them a unit was mixed up or two points were swapped (common practice, no
/// source).
pub const GAIN_RANGE: core::ops::RangeInclusive<f32> = 0.8..=1.25;

/// One comparison with a reference.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Comparison {
    /// What the loop read, SI.
    pub found: f32,
    /// What the reference said at the same moment, SI.
    pub reference: f32,
    /// Standard uncertainty of this comparison alone (scatter of both readings), SI, not negative.
    pub deviation: f32,
}

/// Why two comparisons do not make a calibration.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum CalibrationError {
    /// A figure is not finite, a standard uncertainty is negative, or the span is not positive.
    NotANumber,
    /// The points are nearer than [`LEAST_SEPARATION`] of the span, or the second lies below the first.
    PointsTooClose {
        /// Second minus first reading as found, as a share of the span.
        separation: f32,
    },
    /// The gain lies outside [`GAIN_RANGE`].
    GainOutOfRange {
        /// The gain found.
        gain: f32,
    },
}

/// A checked calibration.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Calibration {
    found: f32,
    reference: f32,
    gain: f32,
    /// 1 over the distance of the points as found.
    per_separation: f32,
    low_deviation: f32,
    high_deviation: f32,
    standard_deviation: f32,
}

impl Calibration {
    /// Changes nothing and adds no uncertainty: a loop whose declared uncertainty covers its calibration.
    pub const NONE: Self = Self {
        found: 0.0,
        reference: 0.0,
        gain: 1.0,
        per_separation: 0.0,
        low_deviation: 0.0,
        high_deviation: 0.0,
        standard_deviation: 0.0,
    };

    /// From two comparisons over a loop whose range is `span` wide (SI, positive); `standard_deviation` is the standard
    /// uncertainty of the reference instrument itself, shared by both comparisons.
    ///
    /// # Errors
    /// [`CalibrationError`]: figures that are none, points too close or swapped, a gain that no working loop has.
    pub fn from_two_points(
        low: Comparison,
        high: Comparison,
        span: f32,
        standard_deviation: f32,
    ) -> Result<Self, CalibrationError> {
        let figures = [low.found, low.reference, high.found, high.reference, span];
        let deviations = [low.deviation, high.deviation, standard_deviation];
        let sound = figures.iter().all(|figure| figure.is_finite())
            && deviations.iter().all(|deviation| deviation.is_finite() && *deviation >= 0.0)
            && span > 0.0;
        if !sound {
            return Err(CalibrationError::NotANumber);
        }
        let separation = (high.found - low.found) / span;
        if separation.is_nan() || separation < LEAST_SEPARATION {
            return Err(CalibrationError::PointsTooClose { separation });
        }
        let gain = (high.reference - low.reference) / (high.found - low.found);
        if !GAIN_RANGE.contains(&gain) {
            return Err(CalibrationError::GainOutOfRange { gain });
        }
        Ok(Self {
            found: low.found,
            reference: low.reference,
            gain,
            per_separation: 1.0 / (high.found - low.found),
            low_deviation: low.deviation,
            high_deviation: high.deviation,
            standard_deviation,
        })
    }

    /// What a reading is multiplied by.
    #[must_use]
    pub const fn gain(&self) -> f32 {
        self.gain
    }

    /// What the corrected value is where the loop reads 0, SI.
    #[must_use]
    pub fn offset(&self) -> f32 {
        self.reference - self.found * self.gain
    }

    /// The corrected reading; NaN stays NaN.
    #[must_use]
    pub fn apply<Q: Quantity>(&self, reading: Measured<Q>) -> Measured<Q> {
        // From the first point, not through the offset: the difference of two large products would lose digits.
        let beyond = reading.value.si() - self.found;
        let share = beyond * self.per_separation;
        Measured {
            value: Q::from_si(self.reference + self.gain * beyond),
            deviation: math::root_sum_square([
                self.gain * reading.deviation,
                (1.0 - share) * self.low_deviation,
                share * self.high_deviation,
                self.standard_deviation,
            ]),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::GaugePressure;
    use proptest::prelude::*;

    const LOW: Comparison = Comparison { found: 1_200.0, reference: 0.0, deviation: 100.0 };
    const HIGH: Comparison = Comparison { found: 498_700.0, reference: 500_000.0, deviation: 200.0 };
    const SPAN: f32 = 600_000.0;

    fn read(pascals: f32, deviation: f32) -> Measured<GaugePressure> {
        Measured { value: GaugePressure::from_pascals(pascals), deviation }
    }

    #[test]
    fn as_found_readings_become_the_reference() {
        let calibration = Calibration::from_two_points(LOW, HIGH, SPAN, 0.0).unwrap();
        assert!((calibration.gain() - 500_000.0 / 497_500.0).abs() < 1e-7);
        assert!((calibration.offset() + 1_200.0 * 500_000.0 / 497_500.0).abs() < 1e-2);
        for point in [LOW, HIGH] {
            let got = calibration.apply(read(point.found, 0.0));
            assert!((got.value.pascals() - point.reference).abs() < 0.05, "{got:?}");
            assert!((got.deviation - point.deviation).abs() < 1e-3, "{got:?}");
        }
    }

    #[test]
    fn uncertainty_is_least_between_the_points_and_grows_outside() {
        let calibration = Calibration::from_two_points(LOW, HIGH, SPAN, 50.0).unwrap();
        let at = |share: f32| calibration.apply(read(1_200.0 + share * 497_500.0, 300.0)).deviation;
        // By hand at the middle: (1.005025·300)² + (½·100)² + (½·200)² + 50².
        assert!((at(0.5) - (301.507_54_f32.powi(2) + 2500.0 + 10_000.0 + 2500.0).sqrt()).abs() < 0.01, "{}", at(0.5));
        assert!(at(0.5) < at(1.0) && at(1.0) < at(1.2) && at(0.0) < at(-0.5));
    }

    #[test]
    fn none_changes_nothing() {
        assert_eq!(Calibration::NONE.apply(read(12_345.0, 67.0)), read(12_345.0, 67.0));
        assert!(Calibration::NONE.apply(read(f32::NAN, 1.0)).value.pascals().is_nan());
    }

    #[test]
    fn degenerate_points_are_refused() {
        let with = |low, high, span| Calibration::from_two_points(low, high, span, 0.0);
        assert_eq!(with(LOW, LOW, SPAN), Err(CalibrationError::PointsTooClose { separation: 0.0 }));
        assert!(
            matches!(with(HIGH, LOW, SPAN), Err(CalibrationError::PointsTooClose { separation }) if separation < 0.0)
        );
        let near = Comparison { found: LOW.found + 0.19 * SPAN, ..HIGH };
        assert!(matches!(with(LOW, near, SPAN), Err(CalibrationError::PointsTooClose { .. })));
        // Bar for kilopascal, and a reference that falls while the loop rises.
        for reference in [5_000.0, 1_000_000.0, -500_000.0] {
            let wrong = Comparison { reference, ..HIGH };
            assert!(matches!(with(LOW, wrong, SPAN), Err(CalibrationError::GainOutOfRange { .. })), "{reference}");
        }
        for bad in [f32::NAN, f32::INFINITY] {
            assert_eq!(with(Comparison { found: bad, ..LOW }, HIGH, SPAN), Err(CalibrationError::NotANumber));
            assert_eq!(with(LOW, Comparison { reference: bad, ..HIGH }, SPAN), Err(CalibrationError::NotANumber));
            assert_eq!(with(LOW, HIGH, bad), Err(CalibrationError::NotANumber));
        }
        assert_eq!(with(Comparison { deviation: -1.0, ..LOW }, HIGH, SPAN), Err(CalibrationError::NotANumber));
        assert_eq!(with(LOW, HIGH, 0.0), Err(CalibrationError::NotANumber));
        assert_eq!(Calibration::from_two_points(LOW, HIGH, SPAN, -1.0), Err(CalibrationError::NotANumber));
    }

    proptest! {
        /// A loop with any gain and offset in range, calibrated, reads what is there.
        #[test]
        fn undoes_a_straight_line(gain in 0.81_f32..1.23, offset in -0.1_f32..0.1, x in -0.2_f32..1.2) {
            let loop_reads = |truth: f32| (truth - offset) / gain;
            let point = |truth| Comparison { found: loop_reads(truth), reference: truth, deviation: 0.0 };
            let calibration = Calibration::from_two_points(point(0.1), point(0.9), 1.0, 0.0).unwrap();
            let got = calibration.apply(read(loop_reads(x), 0.0)).value.pascals();
            prop_assert!((got - x).abs() < 2e-6, "{got} for {x}");
        }
    }
}
