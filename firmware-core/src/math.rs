//! The only place that calls micromath. Its functions are fast first guesses (square root 6 % off, see the bounds
//! below), so each is refined here to a stated error, and edge values are handled before it is called.
//!
//! Call these by path. The method form `x.sqrt()` gives std's exact root in a unit test and micromath's rough one on
//! the target, because an inherent method wins wherever std is linked.
//!
//! Powers of the affinity laws are plain products elsewhere in this crate: micromath's `powf` is up to 42 % off for
//! bases below one.

use micromath::F32;

/// Square root; the largest relative error over all normal numbers is 2.5e-7 (measured in this file's tests).
///
/// Zero and subnormal numbers give 0, infinity gives infinity, negative numbers and NaN give NaN.
/// Cost: three multiply-only Newton steps on micromath's reciprocal root, no division, no table.
#[must_use]
pub fn sqrt(x: f32) -> f32 {
    if x.is_nan() || x < 0.0 {
        return f32::NAN;
    }
    if x < f32::MIN_POSITIVE {
        return 0.0;
    }
    if x == f32::INFINITY {
        return x;
    }
    // Scaled to [1, 4) by an even power of two: the steps then neither overflow nor lose bits at the ends of the range.
    let bits = x.to_bits();
    let exponent = (bits >> 23).wrapping_sub(127); // wraps below 1: the low bit and the shift below still hold
    let odd = exponent & 1;
    let mantissa = f32::from_bits((bits & 0x007f_ffff) | (127_u32.wrapping_add(odd) << 23));
    let half_exponent = (exponent.wrapping_sub(odd) as i32) >> 1;

    let half = 0.5 * mantissa;
    let mut inverse_root = F32(mantissa).invsqrt().0;
    inverse_root *= 1.5 - half * inverse_root * inverse_root;
    inverse_root *= 1.5 - half * inverse_root * inverse_root;
    inverse_root *= 1.5 - half * inverse_root * inverse_root;
    let root = mantissa * inverse_root; // in [1, 2)
    root * f32::from_bits((half_exponent.wrapping_add(127) as u32) << 23)
}

/// Square root of the sum of squares of independent contributions, the way standard uncertainties add.
///
/// NaN in, NaN out. Squares overflow above 1.8e19, far outside any quantity here.
#[must_use]
pub fn root_sum_square<const N: usize>(terms: [f32; N]) -> f32 {
    sqrt(terms.iter().map(|term| term * term).sum())
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn relative_error(x: f32) -> f64 {
        let exact = f64::from(x).sqrt();
        (f64::from(sqrt(x)) - exact).abs() / exact
    }

    #[test]
    fn stated_bound_holds_over_the_whole_range() {
        let mut worst = 0.0_f64;
        // Every exponent, mantissas spaced by a prime so that all bit positions are exercised.
        for exponent in 1_u32..255 {
            for step in 0_u32..4096 {
                let mantissa = (step * 2053) & 0x007f_ffff;
                worst = worst.max(relative_error(f32::from_bits((exponent << 23) | mantissa)));
            }
        }
        assert!(worst < 2.5e-7, "largest relative error {worst:e}");
        assert!(worst > 5e-8, "a bound this loose would hide a change: {worst:e}");
    }

    #[test]
    fn edge_values_are_defined() {
        assert_eq!(sqrt(0.0), 0.0);
        assert_eq!(sqrt(-0.0), 0.0);
        assert_eq!(sqrt(f32::from_bits(1)), 0.0);
        assert_eq!(sqrt(f32::INFINITY), f32::INFINITY);
        assert!(sqrt(-1.0).is_nan());
        assert!(sqrt(f32::NEG_INFINITY).is_nan());
        assert!(sqrt(f32::NAN).is_nan());
    }

    #[test]
    fn squares_add() {
        assert!((root_sum_square([3.0, 4.0, 12.0]) - 13.0).abs() < 1e-5);
        assert!(root_sum_square([1.0, f32::NAN]).is_nan());
    }

    proptest! {
        #[test]
        fn never_rougher_than_stated(x in f32::MIN_POSITIVE..f32::MAX) {
            prop_assert!(relative_error(x) < 2.5e-7);
        }
    }
}
