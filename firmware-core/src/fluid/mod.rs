//! What flows: density, viscosity and vapour pressure of water, moist air and liquids of the user's own table, because
//! head, power, NPSH and every comparison with the curve carry the density, and cavitation the vapour pressure.
//!
//! - [`water`], [`air`], [`table`]: one fluid each, pure functions of temperature, pressure and humidity
//! - [`state`]: the same from readings that may be missing, over a declared range, with all uncertainties
//! - [`solids`]: what a declared share of solids does to density
//! - [`site`]: local gravity and air pressure
//! - [`viscous`]: what a viscous liquid takes from a pump's water curve
//!
//! Every value comes as a [`Property`]: with the standard uncertainty of the law itself, with its slopes, and with a
//! [`Coverage`] that says whether the law was asked for something outside the range it is known in. Outside, the value
//! is that of the nearest end of the range, flagged, and its uncertainty grows by slope times distance. NaN and
//! infinity are refused.
//!
//! Largest errors, measured in `tests/published/fluids.rs` against CoolProp 8.0.0, which for water agrees with a second
//! library (iapws 1.5.5) to 5e-8:
//!
//! | law | range | largest relative error | budget |
//! |---|---|---|---|
//! | water, density | 0-180 °C, to 10 MPa | 3.1e-5 | 2e-4 |
//! | water, viscosity | 0-180 °C, to 1 MPa / 10 MPa | 5.3e-4 / 4.0e-3 | 1e-2 |
//! | water, vapour pressure | 0-180 °C | 1.8e-4 | 1e-3 |
//! | moist air, density | 0-40 °C, 80-110 kPa | 7.1e-4 | 1.3e-3 |
//! | moist air, density | -20-90 °C, 50-130 kPa, vapour share to 0.4 | 2.7e-3 | 1.3e-3 + 0.011·x_v² |
//! | moist air, viscosity | the same | 1.2e-2 | 1e-2 + 0.025·x_v |
//!
//! Not modelled: dissolved salts and gases (sea water is 2.5 % denser than this water: use a table), non-Newtonian
//! liquids, the viscosity of slurries, gases other than air.

pub mod air;
pub mod site;
pub mod solids;
pub mod state;
pub mod table;
pub mod viscous;
pub mod water;

use crate::{
    math,
    quantity::{AbsolutePressure, Density, DynamicViscosity, Quantity},
};

/// What a fluid law is asked with.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Input {
    /// Temperature.
    Temperature,
    /// Absolute pressure.
    Pressure,
    /// Relative humidity.
    Humidity,
}

/// A law was asked with NaN or infinity; there is no nearest end to fall back to.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct NotFinite {
    /// Which input.
    pub input: Input,
}

/// Where an input lies against the range a law is known in.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Cover {
    /// Within the range.
    #[default]
    Within,
    /// Below it: the value is that of the lower end.
    Below,
    /// Above it: the value is that of the upper end.
    Above,
}

/// Which inputs of a value lay outside its law's range.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Coverage {
    /// Temperature against the law's range.
    pub temperature: Cover,
    /// Pressure against the law's range; a liquid below its vapour pressure counts as below.
    pub pressure: Cover,
    /// Humidity against 0 to 1, and [`Cover::Above`] too for more vapour than the law is good for.
    pub humidity: Cover,
}

impl Coverage {
    /// Whether the law was asked for nothing outside its range.
    #[must_use]
    pub fn is_within(self) -> bool {
        self == Self::default()
    }

    /// What two values that enter one result leave of it: the first flag that is up, per input.
    #[must_use]
    pub fn and(self, other: Self) -> Self {
        let first = |mine: Cover, others: Cover| if mine == Cover::Within { others } else { mine };
        Self {
            temperature: first(self.temperature, other.temperature),
            pressure: first(self.pressure, other.pressure),
            humidity: first(self.humidity, other.humidity),
        }
    }
}

/// A property of a fluid at one state.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Property<T: Quantity> {
    /// The value.
    pub value: T,
    /// Variance of the law itself, in the value's unit squared; inputs are taken as exact. Outside the law's range it
    /// holds slope times distance as well. A variance, because variances add: a root per property would cost more than
    /// the property.
    pub model_variance: f32,
    /// Change per kelvin.
    pub per_kelvin: f32,
    /// Change per pascal.
    pub per_pascal: f32,
    /// Change from dry (0) to saturated (1) at this slope; 0 for liquids.
    pub per_humidity: f32,
    /// Whether the law knows this state.
    pub coverage: Coverage,
}

impl<T: Quantity> Property<T> {
    /// Standard uncertainty of the law itself, in the value's unit.
    #[must_use]
    pub fn model_deviation(&self) -> f32 {
        math::sqrt(self.model_variance)
    }
}

/// Density, viscosity and vapour pressure of a liquid at one state.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LiquidProperties {
    /// Density.
    pub density: Property<Density>,
    /// Dynamic viscosity.
    pub dynamic_viscosity: Property<DynamicViscosity>,
    /// Vapour pressure.
    pub vapour_pressure: Property<AbsolutePressure>,
}

/// A bound taken as a rectangle of that half width: its variance is the bound's square times this (JCGM 100, 4.3.7).
pub(crate) const RECTANGLE: f32 = 1.0 / 3.0;

/// An input brought into its range, where it lay, and how far outside.
#[derive(Clone, Copy)]
pub(crate) struct Clamped {
    pub(crate) value: f32,
    pub(crate) cover: Cover,
    pub(crate) distance: f32,
}

/// Refuses NaN and infinity; brings everything else into `low..=high`.
pub(crate) fn clamped(value: f32, low: f32, high: f32, input: Input) -> Result<Clamped, NotFinite> {
    if !value.is_finite() {
        return Err(NotFinite { input });
    }
    let (inside, cover) = if value < low {
        (low, Cover::Below)
    } else if value > high {
        (high, Cover::Above)
    } else {
        (value, Cover::Within)
    };
    Ok(Clamped { value: inside, cover, distance: value - inside })
}

/// Value and slope of c₀ + c₁x + c₂x² + …
pub(crate) fn polynomial<const N: usize>(coefficients: &[f32; N], x: f32) -> (f32, f32) {
    let (mut value, mut slope) = (0.0, 0.0);
    for coefficient in coefficients.iter().rev() {
        slope = slope * x + value;
        value = value * x + coefficient;
    }
    (value, slope)
}

/// Law's own variance: its relative bound as a rectangle, and slope times distance for each input outside its range.
pub(crate) fn model_variance<const N: usize>(value: f32, bound: f32, outside: [f32; N]) -> f32 {
    let own = value * bound;
    outside.iter().fold(own * own * RECTANGLE, |sum, part| sum + part * part)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn polynomials_and_their_slopes() {
        assert_eq!(polynomial(&[3.0, -2.0, 0.5, 1.0], 2.0), (3.0 - 4.0 + 2.0 + 8.0, -2.0 + 2.0 + 12.0));
        assert_eq!(polynomial(&[7.0], 2.0), (7.0, 0.0));
    }

    #[test]
    fn inputs_are_brought_in_and_flagged() {
        let at = |value| clamped(value, 1.0, 3.0, Input::Humidity).map(|c| (c.value, c.cover, c.distance));
        assert_eq!(at(0.5), Ok((1.0, Cover::Below, -0.5)));
        assert_eq!(at(1.0), Ok((1.0, Cover::Within, 0.0)));
        assert_eq!(at(3.0), Ok((3.0, Cover::Within, 0.0)));
        assert_eq!(at(4.0), Ok((3.0, Cover::Above, 1.0)));
        for bad in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY] {
            assert_eq!(at(bad), Err(NotFinite { input: Input::Humidity }));
        }
    }

    #[test]
    fn flags_of_two_values_add() {
        let hot = Coverage { temperature: Cover::Above, ..Coverage::default() };
        let low = Coverage { pressure: Cover::Below, ..Coverage::default() };
        assert_eq!(
            hot.and(low),
            Coverage { temperature: Cover::Above, pressure: Cover::Below, humidity: Cover::Within }
        );
        assert!(Coverage::default().and(Coverage::default()).is_within() && !low.and(hot).is_within());
    }
}
