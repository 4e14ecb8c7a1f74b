//! Design-time maths in f64, for the host that prepares a profile: impeller constants from drawing dimensions, slip
//! factors, and the slopes of a shape-preserving curve. None of it runs on a controller, which gets the results as f32.
//!
//! Blade angles are measured from the TANGENTIAL direction; papers on compressors often measure from the radial one.
//! Slip factors here are of the kind `σ = 1 − (c_u2∞ − c_u2)/u2`: the lost whirl is `(1 − σ)·u2`. Some texts use the
//! ratio c_u2/c_u2∞ instead; the two are different numbers for the same wheel.

extern crate std;

use std::{vec, vec::Vec};

/// Drawing dimensions of a radial impeller outlet and eye.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ImpellerGeometry {
    /// Outlet diameter D2, m.
    pub outlet_diameter: f64,
    /// Outlet width b2, m.
    pub outlet_width: f64,
    /// Mean diameter of the blades' inlet edges D1, m.
    pub inlet_diameter: f64,
    /// Blade angle at the outlet β2, rad from tangential, 0 < β2 < π.
    pub outlet_blade_angle: f64,
    /// Blade count z.
    pub blades: u32,
    /// Blade thickness at the outlet, normal to the blade, m.
    pub blade_thickness: f64,
}

impl ImpellerGeometry {
    /// Share of the outlet circumference left free by the blades: `κ2 = 1 − z·e2/(π·D2·sin β2)`.
    #[must_use]
    pub fn blockage_factor(&self) -> f64 {
        1.0 - f64::from(self.blades) * self.blade_thickness
            / (core::f64::consts::PI * self.outlet_diameter * self.outlet_blade_angle.sin())
    }

    /// Area the stream leaves through, blades taken off: `π·D2·b2·κ2`, m².
    #[must_use]
    pub fn outlet_area(&self) -> f64 {
        core::f64::consts::PI * self.outlet_diameter * self.outlet_width * self.blockage_factor()
    }

    /// Cotangent of the outlet blade angle, as cos/sin so that forward-curved blades (β2 > 90°) need no special case.
    #[must_use]
    pub fn outlet_cotangent(&self) -> f64 {
        self.outlet_blade_angle.cos() / self.outlet_blade_angle.sin()
    }

    /// Wiesner's slip factor for this wheel, its radius-ratio limit included.
    #[must_use]
    pub fn wiesner(&self) -> f64 {
        wiesner(self.outlet_blade_angle, self.blades, self.inlet_diameter / self.outlet_diameter)
    }
}

/// Wiesner's slip factor: `1 − √(sin β2)/z^0.7` up to the limiting radius ratio [`wiesner_limit`], above it the whole
/// factor times `1 − ((r1/r2 − ε)/(1 − ε))³`.
///
/// Source: Wiesner, 1967, J. Eng. Power 89; the limit and the cubic are from memory.
#[must_use]
pub fn wiesner(outlet_blade_angle: f64, blades: u32, radius_ratio: f64) -> f64 {
    let base = 1.0 - outlet_blade_angle.sin().sqrt() / f64::from(blades).powf(0.7);
    let limit = wiesner_limit(outlet_blade_angle, blades);
    if radius_ratio <= limit { base } else { base * (1.0 - ((radius_ratio - limit) / (1.0 - limit)).powi(3)) }
}

/// Radius ratio r1/r2 up to which Wiesner's base formula holds: `ε = exp(−8.16·sin β2/z)` (from memory).
#[must_use]
pub fn wiesner_limit(outlet_blade_angle: f64, blades: u32) -> f64 {
    (-8.16 * outlet_blade_angle.sin() / f64::from(blades)).exp()
}

/// Stanitz' slip factor `1 − 0.63π/z`, for blade angles of 45° to 90° (Stanitz, 1952).
#[must_use]
pub fn stanitz(blades: u32) -> f64 {
    1.0 - 0.63 * core::f64::consts::PI / f64::from(blades)
}

/// Slopes at the knots of a shape-preserving cubic through the points `(x[k], y[k])`: each interval is monotone, so the
/// curve has no extremum that the points do not have.
///
/// Inside: the weighted harmonic mean of the neighbouring chords, 0 where they change sign (Fritsch and Butland, 1984,
/// SIAM J. Sci. Stat. Comput. 5, in Brodlie's weighting). Ends: the three-point formula, limited to keep the shape.
/// `x` must rise strictly. Slices of different length, or fewer than two points, give an empty result.
#[must_use]
#[allow(
    clippy::indexing_slicing,
    clippy::arithmetic_side_effects,
    reason = "runs on a host only; every index is below the length checked on the first line"
)]
pub fn monotone_slopes(x: &[f64], y: &[f64]) -> Vec<f64> {
    if x.len() != y.len() || x.len() < 2 {
        return Vec::new();
    }
    let width: Vec<f64> = x.windows(2).map(|pair| pair[1] - pair[0]).collect();
    let chord: Vec<f64> = y.windows(2).zip(&width).map(|(pair, h)| (pair[1] - pair[0]) / h).collect();
    let last = x.len() - 1;
    if last == 1 {
        return vec![chord[0]; 2];
    }
    let mut slope = vec![0.0; x.len()];
    for k in 1..last {
        let (before, after) = (chord[k - 1], chord[k]);
        if before * after > 0.0 {
            let (w1, w2) = (2.0 * width[k] + width[k - 1], width[k] + 2.0 * width[k - 1]);
            slope[k] = (w1 + w2) / (w1 / before + w2 / after);
        }
    }
    slope[0] = end_slope(width[0], width[1], chord[0], chord[1]);
    slope[last] = end_slope(width[last - 1], width[last - 2], chord[last - 1], chord[last - 2]);
    slope
}

fn end_slope(near: f64, next: f64, near_chord: f64, next_chord: f64) -> f64 {
    let slope = ((2.0 * near + next) * near_chord - near * next_chord) / (near + next);
    if slope * near_chord <= 0.0 {
        0.0
    } else if near_chord * next_chord <= 0.0 && slope.abs() > 3.0 * near_chord.abs() {
        3.0 * near_chord
    } else {
        slope
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wiesner_falls_above_its_radius_limit() {
        let angle = 30_f64.to_radians();
        let limit = wiesner_limit(angle, 6);
        let base = wiesner(angle, 6, 0.3);
        assert_eq!(base, wiesner(angle, 6, limit));
        let halfway = limit + 0.5 * (1.0 - limit);
        assert!((wiesner(angle, 6, halfway) - base * (1.0 - 0.125)).abs() < 1e-12);
    }

    #[test]
    fn forward_blades_have_a_negative_cotangent() {
        let wheel = ImpellerGeometry {
            outlet_diameter: 0.3,
            outlet_width: 0.02,
            inlet_diameter: 0.1,
            outlet_blade_angle: 120_f64.to_radians(),
            blades: 6,
            blade_thickness: 0.004,
        };
        assert!(wheel.outlet_cotangent() < 0.0);
        // 6 × 4 mm / sin 120° of a 942.48 mm circumference is taken.
        assert!(
            (wheel.blockage_factor() - (1.0 - 0.024 / (core::f64::consts::PI * 0.3 * 0.866_025_403_784))).abs() < 1e-9
        );
    }

    #[test]
    fn slopes_match_an_independent_implementation() {
        // Source: scipy.interpolate.PchipInterpolator (scipy 1.17.1, a general-purpose library), derivative at the knots
        // for x = 0 1 3 4 7, y = 10 9.5 9.6 7 2.
        let slopes = monotone_slopes(&[0.0, 1.0, 3.0, 4.0, 7.0], &[10.0, 9.5, 9.6, 7.0, 2.0]);
        let expected = [-0.683_333_333_333_333_2, 0.0, 0.0, -2.108_108_108_108_108, -0.966_666_666_666_667_2];
        for (got, want) in slopes.iter().zip(expected) {
            assert!((got - want).abs() < 1e-12, "{slopes:?}");
        }
        assert_eq!(slopes.len(), expected.len());
    }

    #[test]
    fn straight_points_give_a_straight_line() {
        assert_eq!(monotone_slopes(&[0.0, 1.0, 2.5], &[1.0, 3.0, 6.0]), [2.0, 2.0, 2.0]);
        assert_eq!(monotone_slopes(&[0.0, 2.0], &[1.0, 5.0]), [2.0, 2.0]);
        assert!(monotone_slopes(&[0.0], &[1.0]).is_empty());
        assert!(monotone_slopes(&[0.0, 1.0], &[1.0]).is_empty());
    }
}
