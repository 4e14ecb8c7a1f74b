//! A standard uncertainty in one byte, so that a record can carry one beside every value.
//!
//! Logarithmic, eight steps to the octave over 32 octaves: `u = 2^(base + code/8)`, the base exponent fixed per
//! quantity. Coding rounds UP, by 9 % at most: an uncertainty may be stated too large, never too small. The conditioned sample holds the coded
//! form, so controller and host compute from the same bits.

/// 2^(k/8) for k = 0..8.
const STEPS: [f32; 8] =
    [1.0, 1.090_507_7, 1.189_207_1, 1.296_839_6, core::f32::consts::SQRT_2, 1.542_210_8, 1.681_792_8, 1.834_008];

/// A standard uncertainty, coded. Larger code, larger uncertainty; [`Deviation::LARGEST`] also stands for unknown.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Deviation(u8);

impl Deviation {
    /// The largest code: this much or more, or not known.
    pub const LARGEST: Self = Self(u8::MAX);

    /// From the byte a record carries.
    #[must_use]
    pub const fn from_code(code: u8) -> Self {
        Self(code)
    }

    /// The byte a record carries.
    #[must_use]
    pub const fn code(self) -> u8 {
        self.0
    }

    /// Smallest code that is not below `value` (same unit as the base, positive); NaN and infinity give [`Self::LARGEST`].
    #[must_use]
    pub fn at_least(value: f32, base_exponent: i8) -> Self {
        if value.is_nan() || value == f32::INFINITY {
            return Self::LARGEST;
        }
        if value < f32::MIN_POSITIVE {
            return Self(0);
        }
        let bits = value.to_bits();
        let octave = ((bits >> 23) as i32).wrapping_sub(127).wrapping_sub(i32::from(base_exponent));
        let mantissa = f32::from_bits((bits & 0x007f_ffff) | (127 << 23));
        // Counts the steps below the mantissa: 0 when it is exactly a power of two, 8 when the next octave is needed.
        let step = STEPS.iter().filter(|&&step| step < mantissa).count() as i32;
        let code = octave.wrapping_mul(8).wrapping_add(step);
        Self(code.clamp(0, i32::from(u8::MAX)) as u8)
    }

    /// Smallest code that is not below the root of `variance` (the base's unit squared): uncertainties add as variances,
    /// so a sum of them is coded without taking a root. NaN and infinity give [`Self::LARGEST`].
    #[must_use]
    pub fn at_least_root(variance: f32, base_exponent: i8) -> Self {
        if variance.is_nan() || variance == f32::INFINITY {
            return Self::LARGEST;
        }
        if variance < f32::MIN_POSITIVE {
            return Self(0);
        }
        let bits = variance.to_bits();
        let octave = ((bits >> 23) as i32).wrapping_sub(127);
        let mantissa = f32::from_bits((bits & 0x007f_ffff) | (127 << 23));
        // One octave of variance is half an octave of its root: four steps, and every other of the table.
        let step = STEPS.iter().step_by(2).filter(|&&step| step < mantissa).count() as i32;
        let code = octave.wrapping_mul(4).wrapping_add(step).wrapping_sub(i32::from(base_exponent).wrapping_mul(8));
        Self(code.clamp(0, i32::from(u8::MAX)) as u8)
    }

    /// The standard uncertainty, in the unit of the base.
    #[must_use]
    pub fn value(self, base_exponent: i8) -> f32 {
        let octave = i32::from(self.0 >> 3).wrapping_add(i32::from(base_exponent));
        let step = STEPS.get(usize::from(self.0 & 7)).copied().unwrap_or(1.0);
        let exponent = octave.wrapping_add(127).clamp(1, 254) as u32;
        step * f32::from_bits(exponent << 23)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn every_code_survives_coding() {
        for base in [-28_i8, -16, -8, 0] {
            for code in 0..=u8::MAX {
                let deviation = Deviation::from_code(code);
                assert_eq!(Deviation::at_least(deviation.value(base), base), deviation, "base {base} code {code}");
            }
        }
    }

    #[test]
    fn ends_saturate() {
        assert_eq!(Deviation::at_least(0.0, -16).code(), 0);
        assert_eq!(Deviation::at_least(-1.0, -16).code(), 0);
        assert_eq!(Deviation::at_least(1e9, -16), Deviation::LARGEST);
        assert_eq!(Deviation::at_least(f32::NAN, -16), Deviation::LARGEST);
        assert_eq!(Deviation::at_least(f32::INFINITY, -16), Deviation::LARGEST);
    }

    #[test]
    fn roots_saturate_as_values_do() {
        assert_eq!(Deviation::at_least_root(0.0, -16).code(), 0);
        assert_eq!(Deviation::at_least_root(-1.0, -16).code(), 0);
        assert_eq!(Deviation::at_least_root(1e18, -16), Deviation::LARGEST);
        assert_eq!(Deviation::at_least_root(f32::NAN, -16), Deviation::LARGEST);
        assert_eq!(Deviation::at_least_root(f32::INFINITY, -16), Deviation::LARGEST);
        assert_eq!(Deviation::at_least_root(4.0, -16).value(-16), 2.0);
    }

    proptest! {
        #[test]
        fn a_root_rounds_up_by_nine_per_cent_at_most(variance in 4e-10_f32..3.6e9) {
            let root = f64::from(variance).sqrt();
            let coded = f64::from(Deviation::at_least_root(variance, -16).value(-16));
            prop_assert!(coded >= root * (1.0 - 1e-7) && coded <= root * 1.0906, "√{variance} became {coded}");
        }

        #[test]
        fn rounds_up_by_nine_per_cent_at_most(value in 2e-5_f32..6e4) {
            let coded = Deviation::at_least(value, -16).value(-16);
            prop_assert!(coded >= value && coded <= value * 1.0906, "{value} became {coded}");
        }
    }
}
