//! Solids carried by the liquid: a share and a density that the user declares, or none of the properties holds.
//!
//! `ρ = (1 − φ)·ρ_liquid + φ·ρ_solids` with φ the share of the volume. That is all that is modelled: what solids do to
//! viscosity, and what grains that lag behind the liquid take from head and efficiency, is not; a state with solids has
//! no viscosity.

use super::state::Derived;
use crate::quantity::{Density, Quantity, Ratio};

/// Solids carried by the liquid, as the user declares them.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Solids {
    /// None that matter.
    None,
    /// A share and a density.
    Declared(Slurry),
    /// There are some, but how much is not known: no property is valid.
    Unknown,
}

/// A declared share of solids.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Slurry {
    share: f32,
    share_deviation: f32,
    density: f32,
    density_deviation: f32,
}

/// Why a declaration of solids is refused.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum SolidsError {
    /// Volume share outside 0 to 0.6, or NaN: beyond that the grains touch.
    Share {
        /// What was given.
        found: f32,
    },
    /// Density of the solids outside 200 to 20,000 kg/m³, or NaN.
    Density {
        /// What was given, kg/m³.
        found: f32,
    },
    /// A standard uncertainty that is negative, infinite or NaN.
    Deviation {
        /// What was given.
        found: f32,
    },
}

impl Slurry {
    /// Share of the volume that is solids (0 to 0.6) and density of the solids, each with its standard uncertainty.
    ///
    /// # Errors
    /// [`SolidsError`], naming the figure.
    pub fn new(share: Ratio, share_deviation: Ratio, solids: Density, deviation: Density) -> Result<Self, SolidsError> {
        let slurry = Self {
            share: share.fraction(),
            share_deviation: share_deviation.fraction(),
            density: solids.si(),
            density_deviation: deviation.si(),
        };
        if !(0.0..=0.6).contains(&slurry.share) {
            return Err(SolidsError::Share { found: slurry.share });
        }
        if !(200.0..=20_000.0).contains(&slurry.density) {
            return Err(SolidsError::Density { found: slurry.density });
        }
        for found in [slurry.share_deviation, slurry.density_deviation] {
            if !found.is_finite() || found < 0.0 {
                return Err(SolidsError::Deviation { found });
            }
        }
        Ok(slurry)
    }

    /// Density of the mixture: `ρ = (1 − φ)·ρ_liquid + φ·ρ_solids`.
    pub(super) fn mixed(&self, liquid: &Derived<Density>) -> Derived<Density> {
        let rest = 1.0 - self.share;
        let by_solids = self.share * self.density_deviation;
        let by_share = (self.density - liquid.value.si()) * self.share_deviation;
        Derived {
            value: Density::from_si(rest * liquid.value.si() + self.share * self.density),
            by_temperature: rest * liquid.by_temperature,
            by_pressure: rest * liquid.by_pressure,
            by_humidity: rest * liquid.by_humidity,
            own_variance: rest * rest * liquid.own_variance + by_solids * by_solids + by_share * by_share,
        }
    }
}
