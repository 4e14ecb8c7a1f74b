//! The alarm limit of the sums from the false alarms one is willing to have, in f64, for the host that prepares a profile.
//!
//! Siegmund's approximation of the mean number of blocks to an alarm of one sum, in control or shifted by `δ` σ:
//! `L = (exp(−2Δb) + 2Δb − 1)/(2Δ²)`, `Δ = δ − k`, `b = h + 1.166`; `L = b²` at `Δ = 0`. Two sums that watch both
//! ways: `1/L = 1/L⁺ + 1/L⁻`. Within 0.8 % of exact run lengths for small shifts at k = 0.5 and h from 4, 5 % for shifts
//! of 1.6 σ and more (held against an integral equation in the published tests).
//!
//! For independent, normal block means. It says how often noise alone gives an alarm; misfit of the curve beyond the
//! dead band gives more, whatever the limit.

extern crate std;

/// Seconds of a year of 365.25 days.
const YEAR: f64 = 365.25 * 86_400.0;

/// Largest limit [`limit_for`] gives: more blocks to a false alarm than any machine lives.
pub const LARGEST_LIMIT: f64 = 100.0;

/// Mean blocks to an alarm of ONE sum with reference value `k`, limit `h`, for a mean shifted by `shift` σ towards it.
#[must_use]
pub fn siegmund(k: f64, h: f64, shift: f64) -> f64 {
    let b = h + 1.166;
    let y = 2.0 * (shift - k) * b;
    if y.abs() < 1e-4 {
        // The quotient loses its digits here; b²·(1 − y/3 + …) does not.
        return b * b * (1.0 - y / 3.0 + y * y / 12.0);
    }
    2.0 * b * b * ((-y).exp_m1() + y) / (y * y)
}

/// Mean blocks to an alarm of both sums together.
#[must_use]
pub fn siegmund_two_sided(k: f64, h: f64, shift: f64) -> f64 {
    1.0 / (1.0 / siegmund(k, h, shift) + 1.0 / siegmund(k, h, -shift))
}

/// Blocks between false alarms that ONE sum must reach, for `alarms_per_year` of a machine with `sums` sums (two per
/// watched residual) and blocks of `block_seconds`, running all year.
#[must_use]
pub fn run_length(alarms_per_year: f64, block_seconds: f64, sums: u32) -> f64 {
    f64::from(sums) * YEAR / block_seconds / alarms_per_year
}

/// Limit `h` at which one sum with reference value `k` runs `blocks` blocks in control, by [`siegmund`], 200 halvings.
///
/// `None` unless `k` is positive and finite and the limit lies in 0 to [`LARGEST_LIMIT`].
///
/// # Examples
/// ```
/// # use offcurve_core::drift::limits::{limit_for, run_length};
/// // Two false alarms a year from four sums and blocks of 30 s.
/// let h = limit_for(0.5, run_length(2.0, 30.0, 4)).expect("a sensible rate");
/// assert!((h - 12.7).abs() < 0.1);
/// ```
#[must_use]
pub fn limit_for(k: f64, blocks: f64) -> Option<f64> {
    let reachable = siegmund(k, 0.0, 0.0)..=siegmund(k, LARGEST_LIMIT, 0.0);
    let sensible = k > 0.0 && k.is_finite() && reachable.contains(&blocks);
    if !sensible {
        return None;
    }
    let (mut low, mut high) = (0.0, LARGEST_LIMIT);
    for _ in 0..200 {
        let middle = 0.5 * (low + high);
        if siegmund(k, middle, 0.0) < blocks {
            low = middle;
        } else {
            high = middle;
        }
    }
    Some(0.5 * (low + high))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn limits_invert_run_lengths() {
        for k in [0.25, 0.5, 1.0] {
            for h in [2.0, 5.0, 14.6, 30.0] {
                let found = limit_for(k, siegmund(k, h, 0.0)).unwrap();
                assert!((found - h).abs() < 1e-9, "{k} {h}: {found}");
            }
        }
        for blocks in [f64::NAN, 0.0, -1.0, 1.0, f64::INFINITY] {
            assert_eq!(limit_for(0.5, blocks), None, "{blocks}");
        }
        for k in [0.0, -0.5, f64::NAN, f64::INFINITY] {
            assert_eq!(limit_for(k, 1000.0), None, "{k}");
        }
    }

    #[test]
    fn series_and_formula_meet() {
        let b: f64 = 5.0 + 1.166;
        for edge in [1e-4, -1e-4] {
            let shift = |y: f64| 0.5 + y / (2.0 * b);
            let (inside, outside) = (siegmund(0.5, 5.0, shift(0.999 * edge)), siegmund(0.5, 5.0, shift(1.001 * edge)));
            assert!((inside / outside - 1.0).abs() < 1e-6, "{inside} {outside}");
        }
        assert_eq!(siegmund(0.5, 5.0, 0.5), b * b);
    }

    /// Figures of the method's own check list: k 0.5, h 14.6 runs 1.4e7 blocks one way; h 4 runs 338, 169 both ways.
    #[test]
    fn figures_of_the_method() {
        assert!((siegmund(0.5, 14.6, 0.0) / 1.4e7 - 1.0).abs() < 0.01);
        assert!((siegmund(0.5, 4.0, 0.0) - 338.0).abs() < 0.5);
        assert!((siegmund_two_sided(0.5, 4.0, 0.0) - 169.0).abs() < 0.25);
        // 26 sums, 30 s blocks, 2 a year.
        assert!((limit_for(0.5, run_length(2.0, 30.0, 26)).unwrap() - 14.6).abs() < 0.05);
    }
}
