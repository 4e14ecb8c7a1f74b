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
    let half = 0.5 * x;
    let mut inverse_root = F32(x).invsqrt().0;
    // Grouped so that no product leaves the range of f32 at either end: half·inverse_root is about √x/2.
    inverse_root *= 1.5 - (half * inverse_root) * inverse_root;
    inverse_root *= 1.5 - (half * inverse_root) * inverse_root;
    inverse_root *= 1.5 - (half * inverse_root) * inverse_root;
    x * inverse_root
}

/// Square root of the sum of squares of independent contributions, the way standard uncertainties add.
///
/// NaN in, NaN out. Squares overflow above 1.8e19, far outside any quantity here.
#[must_use]
pub fn root_sum_square<const N: usize>(terms: [f32; N]) -> f32 {
    sqrt(terms.iter().map(|term| term * term).sum())
}

/// Natural logarithm; the largest error over all normal numbers is 2.0e-7 of the result (measured in this file's tests).
///
/// Zero (of either sign) and subnormal numbers give negative infinity, infinity gives infinity, negative numbers and
/// NaN give NaN. The mantissa is taken between √½ and √2, so that nothing cancels near 1; there the series
/// `ln m = 2(s + s³/3 + s⁵/5 + s⁷/7 + s⁹/9)` with `s = (m − 1)/(m + 1)` is cut after 2e-9 of its sum.
/// Cost: one division, a dozen multiplications, no table.
#[must_use]
pub fn ln(x: f32) -> f32 {
    if x.is_nan() || x <= -f32::MIN_POSITIVE {
        return f32::NAN;
    }
    if x < f32::MIN_POSITIVE {
        return f32::NEG_INFINITY;
    }
    if x == f32::INFINITY {
        return x;
    }
    // Adding the distance from √½ to 1 carries into the exponent exactly for mantissas from √2 up.
    let shifted = x.to_bits().wrapping_add(0x3f80_0000_u32.wrapping_sub(ROOT_HALF_BITS));
    let exponent = ((shifted >> 23) as i32).wrapping_sub(127);
    let mantissa = f32::from_bits((shifted & 0x007f_ffff).wrapping_add(ROOT_HALF_BITS));

    let s = (mantissa - 1.0) / (mantissa + 1.0);
    let square = s * s;
    let tail = square * (0.666_666_7 + square * (0.4 + square * (0.285_714_3 + square * 0.222_222_22)));
    let scale = exponent as f32;
    scale * LN_2_HIGH + (2.0 * s + (s * tail + scale * LN_2_LOW))
}

/// Exponential; the largest relative error from -87.33 to 88.72, where the result is a normal number, is 1.0e-7
/// (measured in this file's tests).
///
/// Below -87.33 it gives 0 (no subnormal results), above 88.72 infinity; NaN gives NaN.
/// `eˣ = 2ᵏ·eʳ` with `|r| ≤ ln 2/2` and the Taylor polynomial of degree 7 for `eʳ` (rest 6e-9).
/// Cost: no division, no table.
#[must_use]
pub fn exp(x: f32) -> f32 {
    if x.is_nan() {
        return x;
    }
    if x > EXP_HIGHEST {
        return f32::INFINITY;
    }
    if x < EXP_LOWEST {
        return 0.0;
    }
    let whole = x * core::f32::consts::LOG2_E;
    let k = (whole + if whole < 0.0 { -0.5 } else { 0.5 }) as i32; // to the nearest; within ±128 by the guards above
    let scale = k as f32;
    let r = (x - scale * LN_2_HIGH) - scale * LN_2_LOW;
    let power = r
        * r
        * (0.5 + r * (0.166_666_67 + r * (0.041_666_668 + r * (8.333_334e-3 + r * (1.388_889e-3 + r * 1.984_127e-4)))));
    // In two halves: 2ᵏ alone overflows at k = 128, where the product is still a number.
    let half = k >> 1;
    (1.0 + (r + power)) * power_of_two(half) * power_of_two(k.wrapping_sub(half))
}

/// Bits of √½, where the mantissa range of [`ln`] begins.
const ROOT_HALF_BITS: u32 = 0x3f35_04f3;
/// ln 2 in two parts: the high one has ten trailing zero bits, so that its product with an exponent is exact.
const LN_2_HIGH: f32 = 0.693_145_75;
const LN_2_LOW: f32 = 1.428_606_8e-6;
/// ln of the largest number, rounded down.
const EXP_HIGHEST: f32 = 88.722_83;
/// ln of the smallest normal number, rounded up.
const EXP_LOWEST: f32 = -87.336_54;

/// 2ᵏ for k from -126 to 127.
fn power_of_two(k: i32) -> f32 {
    f32::from_bits((k.wrapping_add(127) as u32) << 23)
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

    /// Relative error, measured against zero only where the logarithm itself is zero.
    fn ln_error(x: f32) -> f64 {
        let exact = f64::from(x).ln();
        if exact == 0.0 { f64::from(ln(x)).abs() } else { (f64::from(ln(x)) / exact - 1.0).abs() }
    }

    fn exp_error(x: f32) -> f64 {
        (f64::from(exp(x)) / f64::from(x).exp() - 1.0).abs()
    }

    #[test]
    fn ln_keeps_its_bound_over_the_whole_range_and_near_one() {
        let mut worst = 0.0_f64;
        for exponent in 1_u32..255 {
            for step in 0_u32..4096 {
                let mantissa = (step * 2053) & 0x007f_ffff;
                worst = worst.max(ln_error(f32::from_bits((exponent << 23) | mantissa)));
            }
        }
        for step in 0_u32..200_000 {
            // Both sides of 1, down to its direct neighbours, and both ends of the mantissa range.
            for start in [0x3f80_0000_u32, ROOT_HALF_BITS, 0x3fb5_04f3] {
                worst = worst.max(ln_error(f32::from_bits(start + step))).max(ln_error(f32::from_bits(start - step)));
            }
        }
        assert!(worst < 2e-7, "largest relative error {worst:e}");
        assert!(worst > 8e-8, "a bound this loose would hide a change: {worst:e}");
    }

    #[test]
    fn exp_keeps_its_bound_over_the_whole_range() {
        let mut worst = 0.0_f64;
        let steps = 4_000_000;
        for step in 0..=steps {
            let x = EXP_LOWEST + (EXP_HIGHEST - EXP_LOWEST) * (step as f32 / steps as f32);
            worst = worst.max(exp_error(x));
        }
        for step in 0..100_000 {
            let x = 2e-5 * (step - 50_000) as f32; // finely around zero
            worst = worst.max(exp_error(x));
        }
        assert!(worst < 1e-7, "largest relative error {worst:e}");
        assert!(worst > 8e-8, "a bound this loose would hide a change: {worst:e}");
    }

    #[test]
    fn edge_values_of_ln_and_exp_are_defined() {
        for zero in [0.0, -0.0, f32::from_bits(1), -f32::from_bits(1)] {
            assert_eq!(ln(zero), f32::NEG_INFINITY);
        }
        assert_eq!(ln(1.0), 0.0);
        assert_eq!(ln(f32::INFINITY), f32::INFINITY);
        assert!(ln(-1.0).is_nan() && ln(-f32::MIN_POSITIVE).is_nan() && ln(f32::NAN).is_nan());
        assert!(ln(f32::NEG_INFINITY).is_nan());
        assert!((ln(f32::MAX) - 88.722_84).abs() < 1e-5 && (ln(f32::MIN_POSITIVE) + 87.336_54).abs() < 1e-5);
        assert_eq!(exp(0.0), 1.0);
        assert_eq!(exp(-0.0), 1.0);
        assert_eq!(
            (exp(f32::INFINITY), exp(89.0), exp(EXP_HIGHEST.next_up())),
            (f32::INFINITY, f32::INFINITY, f32::INFINITY)
        );
        assert_eq!((exp(f32::NEG_INFINITY), exp(-88.0), exp(EXP_LOWEST.next_down())), (0.0, 0.0, 0.0));
        assert!(exp(EXP_HIGHEST).is_finite() && exp(EXP_LOWEST) >= f32::MIN_POSITIVE);
        assert!(exp(f32::NAN).is_nan());
    }

    proptest! {
        #[test]
        fn never_rougher_than_stated(x in f32::MIN_POSITIVE..f32::MAX) {
            prop_assert!(relative_error(x) < 2.5e-7);
            prop_assert!(ln_error(x) < 2e-7);
        }

        #[test]
        fn exp_never_rougher_than_stated(x in EXP_LOWEST..EXP_HIGHEST) {
            prop_assert!(exp_error(x) < 1e-7);
        }
    }
}
