//! Affinity scaling: carries an operating point of one machine to another shaft speed and density.
//!
//! The expected curve is stored once, at its reference speed, and the drive runs at any speed, so every comparison
//! passes through here. With `r = n_to / n_from`: `Q' = r·Q`, `H' = r²·H`, `T' = r²·T·ρ'/ρ`, `P' = r³·P·ρ'/ρ`.
//! Same impeller, same fluid family. Not modelled: efficiency lost at low speed, hence [`RATIO_RANGE`]; bearing and
//! seal torque, which do not follow the square.

use crate::quantity::{Head, Power, Torque, VolumeFlow};

/// Speed ratios we trust (dimensionless). Our choice; measured speeds of a real blower support 0.9 to 1.1, the rest
/// rests on the law.
pub const RATIO_RANGE: core::ops::RangeInclusive<f32> = 0.2..=1.2;

/// Why an operating point could not be carried to another speed.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ScaleError {
    /// Ratio outside the trusted range, or NaN. Keep the last good point and mark it stale.
    RatioOutOfRange {
        /// The ratio asked for.
        ratio: f32,
    },
}

/// A checked speed ratio `n_to / n_from`, so that the laws below need no error of their own.
#[derive(Clone, Copy, Debug, PartialEq, PartialOrd)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SpeedRatio(f32);

impl SpeedRatio {
    /// Checks a ratio.
    ///
    /// # Errors
    /// [`ScaleError::RatioOutOfRange`] outside [`RATIO_RANGE`], NaN included.
    pub fn new(ratio: f32) -> Result<Self, ScaleError> {
        if RATIO_RANGE.contains(&ratio) { Ok(Self(ratio)) } else { Err(ScaleError::RatioOutOfRange { ratio }) }
    }

    /// The ratio, within [`RATIO_RANGE`].
    #[must_use]
    pub const fn get(self) -> f32 {
        self.0
    }
}

/// Flow at the other speed: `Q' = r·Q`.
#[must_use]
pub fn flow(at_from: VolumeFlow, ratio: SpeedRatio) -> VolumeFlow {
    VolumeFlow::from_cubic_metres_per_second(at_from.cubic_metres_per_second() * ratio.0)
}

/// Head at the other speed: `H' = r²·H`; density does not enter.
///
/// # Examples
/// ```
/// # use offcurve_core::{affinity::{self, SpeedRatio}, quantity::Head};
/// let three_quarters = SpeedRatio::new(0.75)?;
/// assert_eq!(affinity::head(Head::from_metres(32.0), three_quarters), Head::from_metres(18.0));
/// # Ok::<(), affinity::ScaleError>(())
/// ```
#[must_use]
pub fn head(at_from: Head, ratio: SpeedRatio) -> Head {
    Head::from_metres(at_from.metres() * (ratio.0 * ratio.0))
}

/// Shaft torque at the other speed: `T' = r²·T·(ρ'/ρ)`. `density_ratio` is ρ'/ρ.
#[must_use]
pub fn torque(at_from: Torque, ratio: SpeedRatio, density_ratio: f32) -> Torque {
    Torque::from_newton_metres(at_from.newton_metres() * (ratio.0 * ratio.0) * density_ratio)
}

/// Power at the other speed: `P' = r³·P·(ρ'/ρ)`. `density_ratio` is ρ'/ρ.
#[must_use]
pub fn power(at_from: Power, ratio: SpeedRatio, density_ratio: f32) -> Power {
    Power::from_watts(at_from.watts() * (ratio.0 * ratio.0 * ratio.0) * density_ratio)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ratios_outside_the_trusted_range_are_refused() {
        for bad in [0.0, 0.199, 1.201, -1.0, f32::NAN, f32::INFINITY] {
            assert!(SpeedRatio::new(bad).is_err(), "{bad}");
        }
        for good in [0.2, 1.0, 1.2] {
            assert_eq!(SpeedRatio::new(good).map(SpeedRatio::get), Ok(good));
        }
    }

    #[test]
    fn density_changes_power_and_torque_only() {
        let r = SpeedRatio::new(1.0).unwrap();
        assert_eq!(power(Power::from_watts(100.0), r, 1.25), Power::from_watts(125.0));
        assert_eq!(torque(Torque::from_newton_metres(10.0), r, 0.5), Torque::from_newton_metres(5.0));
        assert_eq!(head(Head::from_metres(10.0), r), Head::from_metres(10.0));
    }
}
