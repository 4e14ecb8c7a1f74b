//! Moist air from −20 to 90 °C and 50 to 130 kPa: density, dynamic viscosity, partial pressure of the vapour.
//!
//! Ideal gases: `ρ = (p − 0.378 02·e)/(287.055·T)` with `e = h·p_sv(T)`, h the relative humidity over liquid water.
//! `p_sv` from 0 °C up is water's vapour pressure ([`water`]), below it Magnus over undercooled water,
//! `611.2·exp(17.62·t/(243.12 + t))`: the same within 3e-5 where they meet; Magnus further up would be 2 % off at
//! 90 °C, which a drying hall reaches. Viscosity: a polynomial for dry air, reduced in proportion to the vapour share,
//! both our fits to CoolProp 8.0.0. Measured errors: table in [`fluid`](super).
//!
//! Real-gas behaviour is left out: it is what the bound consists of (up to 1.3e-3 at −20 °C and 130 kPa). Above a vapour
//! share of 0.4 the form is flagged. Composition is that of clean air; no dust, no fog.

use super::{Cover, Coverage, Input, NotFinite, Property, clamped, model_variance, polynomial, water};
use crate::{
    math,
    quantity::{AbsolutePressure, Density, DynamicViscosity, Quantity, Ratio, Temperature},
};

/// Lowest temperature of the laws, K: −20 °C.
pub const LOWEST_TEMPERATURE: f32 = 253.15;
/// Highest temperature of the laws, K: 90 °C.
pub const HIGHEST_TEMPERATURE: f32 = 363.15;
/// Lowest pressure of the laws, Pa absolute.
pub const LOWEST_PRESSURE: f32 = 50_000.0;
/// Highest pressure of the laws, Pa absolute.
pub const HIGHEST_PRESSURE: f32 = 130_000.0;
/// Vapour share e/p above which the laws are flagged.
pub const HIGHEST_VAPOUR_SHARE: f32 = 0.4;

/// Gas constant of dry air, J/(kg·K).
const DRY_AIR: f32 = 287.055;
/// What a molecule of water lacks against one of air: 1 − 18.015/28.964.
const LIGHTER: f32 = 0.378_02;
/// Dry air, Pa·s, in x = (T − 308.15 K)/55 K.
const VISCOSITY: [f32; 3] = [1.892_507_2e-5, 2.624_915_6e-6, -9.999_291e-8];
/// Relative loss of viscosity per vapour share, in the same x.
const VAPOUR_THINS: [f32; 2] = [0.368_921_7, 0.079_794_07];

/// Properties of moist air at one state.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct AirProperties {
    /// Density.
    pub density: Property<Density>,
    /// Dynamic viscosity.
    pub dynamic_viscosity: Property<DynamicViscosity>,
    /// Partial pressure of the water vapour.
    pub vapour_pressure: Property<AbsolutePressure>,
}

/// Relative bound of the density for a vapour share: 1.3e-3 for dry air, 3.1e-3 at a share of 0.4.
#[must_use]
pub fn density_bound(vapour_share: f32) -> f32 {
    1.3e-3 + 1.1e-2 * (vapour_share * vapour_share)
}

/// Relative bound of the viscosity for a vapour share: 1 % for dry air, 2 % at a share of 0.4.
#[must_use]
pub fn viscosity_bound(vapour_share: f32) -> f32 {
    1e-2 + 2.5e-2 * vapour_share
}

/// Properties at a temperature, an absolute pressure and a relative humidity (0 to 1).
///
/// # Errors
/// [`NotFinite`] for an input of NaN or infinity.
///
/// # Examples
/// ```
/// use offcurve_core::{fluid::air, quantity::{AbsolutePressure, Ratio, Temperature}};
///
/// let temperature = Temperature::from_degrees_celsius(20.0);
/// let found = air::properties(temperature, AbsolutePressure::from_pascals(101_325.0), Ratio::from_fraction(0.5))?;
/// assert!((found.density.value.kilograms_per_cubic_metre() - 1.1993).abs() < 8e-4);
/// # Ok::<(), offcurve_core::fluid::NotFinite>(())
/// ```
pub fn properties(
    temperature: Temperature,
    pressure: AbsolutePressure,
    humidity: Ratio,
) -> Result<AirProperties, NotFinite> {
    let at = clamped(temperature.kelvins(), LOWEST_TEMPERATURE, HIGHEST_TEMPERATURE, Input::Temperature)?;
    let pressure = clamped(pressure.pascals(), LOWEST_PRESSURE, HIGHEST_PRESSURE, Input::Pressure)?;
    let humidity = clamped(humidity.fraction(), 0.0, 1.0, Input::Humidity)?;
    let (saturated, saturated_slope) = saturation(at.value);
    let vapour = humidity.value * saturated;
    let vapour_slope = humidity.value * saturated_slope;
    let share = vapour / pressure.value;
    let too_wet = humidity.cover == Cover::Within && share > HIGHEST_VAPOUR_SHARE;
    let coverage = Coverage {
        temperature: at.cover,
        pressure: pressure.cover,
        humidity: if too_wet { Cover::Above } else { humidity.cover },
    };
    let property = |value: f32, bound: f32, [per_kelvin, per_pascal, per_humidity]: [f32; 3]| {
        let outside = [per_kelvin * at.distance, per_pascal * pressure.distance, per_humidity * humidity.distance];
        (value, model_variance(value, bound, outside), per_kelvin, per_pascal, per_humidity)
    };

    let per_pascal = 1.0 / (DRY_AIR * at.value);
    let density = (pressure.value - LIGHTER * vapour) * per_pascal;
    let per_kelvin = -density / at.value - LIGHTER * vapour_slope * per_pascal;
    let slopes = [per_kelvin, per_pascal, -LIGHTER * saturated * per_pascal];
    let density = typed(property(density, density_bound(share), slopes), coverage);

    let x = (at.value - 308.15) * (1.0 / 55.0);
    let (dry, dry_slope) = polynomial(&VISCOSITY, x);
    let (thins, thins_slope) = polynomial(&VAPOUR_THINS, x);
    let factor = 1.0 - thins * share;
    let per_kelvin =
        (dry_slope * factor - dry * thins_slope * share) * (1.0 / 55.0) - dry * thins * vapour_slope / pressure.value;
    let slopes = [per_kelvin, dry * thins * share / pressure.value, -dry * thins * saturated / pressure.value];
    let dynamic_viscosity = typed(property(dry * factor, viscosity_bound(share), slopes), coverage);

    let slopes = [vapour_slope, 0.0, saturated];
    let vapour_pressure = typed(
        property(vapour, SATURATION_BOUND, slopes),
        Coverage { pressure: Cover::Within, humidity: humidity.cover, ..coverage },
    );
    Ok(AirProperties { density, dynamic_viscosity, vapour_pressure })
}

/// Relative bound of the saturation pressure: Magnus and water's line each against IAPWS, and the enhancement of vapour
/// by the air around it, 0.5 % at most (CIPM-2007), which is left out.
const SATURATION_BOUND: f32 = 8e-3;

fn typed<T: Quantity>(parts: (f32, f32, f32, f32, f32), coverage: Coverage) -> Property<T> {
    let (value, model_variance, per_kelvin, per_pascal, per_humidity) = parts;
    Property { value: T::from_si(value), model_variance, per_kelvin, per_pascal, per_humidity, coverage }
}

/// Saturation pressure over liquid water, Pa, and its slope, Pa/K, for a temperature in the range of the laws.
fn saturation(kelvins: f32) -> (f32, f32) {
    if kelvins >= water::LOWEST_TEMPERATURE {
        return water::saturation(kelvins);
    }
    let celsius = kelvins - 273.15;
    let from_pole = 1.0 / (243.12 + celsius);
    let value = 611.2 * math::exp(17.62 * celsius * from_pole);
    (value, value * (17.62 * 243.12) * (from_pole * from_pole))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn at(celsius: f32, pascals: f32, humidity: f32) -> AirProperties {
        properties(
            Temperature::from_degrees_celsius(celsius),
            AbsolutePressure::from_pascals(pascals),
            Ratio::from_fraction(humidity),
        )
        .unwrap()
    }

    #[test]
    fn slopes_are_those_of_the_values() {
        for (celsius, pascals, humidity) in
            [(-15.0, 1e5, 0.8), (-0.9, 1e5, 0.5), (20.0, 6e4, 0.5), (45.0, 1.2e5, 0.9), (80.0, 1e5, 0.3)]
        {
            let here = at(celsius, pascals, humidity);
            let by = [
                (at(celsius - 0.5, pascals, humidity), at(celsius + 0.5, pascals, humidity), 1.0),
                (at(celsius, pascals - 500.0, humidity), at(celsius, pascals + 500.0, humidity), 1000.0),
                (at(celsius, pascals, humidity - 0.1), at(celsius, pascals, humidity + 0.1), 0.2),
            ];
            let slopes = |p: &Property<Density>| [p.per_kelvin, p.per_pascal, p.per_humidity];
            for (slope, (low, high, step)) in slopes(&here.density).into_iter().zip(&by) {
                let difference = (high.density.value.si() - low.density.value.si()) / step;
                assert!((slope - difference).abs() < 0.01 * difference.abs() + 1e-9, "{slope} {difference}");
            }
            let p = &here.dynamic_viscosity;
            for (slope, (low, high, step)) in [p.per_kelvin, p.per_pascal, p.per_humidity].into_iter().zip(&by) {
                let difference = (high.dynamic_viscosity.value.si() - low.dynamic_viscosity.value.si()) / step;
                assert!((slope - difference).abs() < 0.03 * difference.abs() + 1e-14, "{slope} {difference}");
            }
            let p = &here.vapour_pressure;
            for (slope, (low, high, step)) in [p.per_kelvin, p.per_pascal, p.per_humidity].into_iter().zip(&by) {
                let difference = (high.vapour_pressure.value.si() - low.vapour_pressure.value.si()) / step;
                assert!((slope - difference).abs() < 0.01 * difference.abs() + 1e-9, "{slope} {difference}");
            }
        }
    }

    #[test]
    fn saturation_lines_meet_at_zero() {
        let (above, slope) = saturation(273.15);
        let (below, slope_below) = saturation(273.15_f32.next_down());
        assert!((above / below - 1.0).abs() < 4e-5, "{above} {below}");
        assert!((slope / slope_below - 1.0).abs() < 5e-3, "{slope} {slope_below}");
    }

    #[test]
    fn outside_is_the_end_flagged_and_less_sure() {
        let end = at(90.0, 1e5, 0.2);
        let hot = at(120.0, 1e5, 0.2);
        assert!(end.density.coverage.is_within());
        assert_eq!((hot.density.value, hot.density.coverage.temperature), (end.density.value, Cover::Above));
        assert!(hot.density.model_deviation() > 0.9 * 30.0 * end.density.per_kelvin.abs());
        assert_eq!(at(-25.0, 1e5, 0.2).density.coverage.temperature, Cover::Below);
        assert_eq!(at(20.0, 4e4, 0.2).density.coverage.pressure, Cover::Below);
        assert_eq!(at(20.0, 4e4, 0.2).density.value, at(20.0, 5e4, 0.2).density.value);
        let wet = at(20.0, 1e5, 1.03);
        assert_eq!(
            (wet.density.value, wet.density.coverage.humidity),
            (at(20.0, 1e5, 1.0).density.value, Cover::Above)
        );
        assert_eq!(at(20.0, 1e5, -0.02).density.coverage.humidity, Cover::Below);
        // Half of it vapour: no input is outside its range, but the form is.
        let steam = at(85.0, 1e5, 0.9);
        assert_eq!(steam.density.coverage.humidity, Cover::Above);
        assert!(steam.vapour_pressure.coverage.is_within());
    }

    #[test]
    fn not_a_number_is_refused() {
        let good = (Temperature::from_kelvins(300.0), AbsolutePressure::from_pascals(1e5), Ratio::from_fraction(0.5));
        for bad in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY] {
            let refused = |input| Err(NotFinite { input });
            assert_eq!(properties(Temperature::from_kelvins(bad), good.1, good.2), refused(Input::Temperature));
            assert_eq!(properties(good.0, AbsolutePressure::from_pascals(bad), good.2), refused(Input::Pressure));
            assert_eq!(properties(good.0, good.1, Ratio::from_fraction(bad)), refused(Input::Humidity));
        }
    }

    proptest! {
        #[test]
        fn any_finite_input_gives_finite_values(t in -1e30_f32..1e30, p in -1e30_f32..1e30, h in -1e30_f32..1e30) {
            let (t, p, h) = (Temperature::from_kelvins(t), AbsolutePressure::from_pascals(p), Ratio::from_fraction(h));
            let found = properties(t, p, h).unwrap();
            prop_assert!((0.2..1.8).contains(&found.density.value.si()));
            prop_assert!((5e-6..2.2e-5).contains(&found.dynamic_viscosity.value.si()));
            prop_assert!((0.0..7.1e4).contains(&found.vapour_pressure.value.si()));
        }
    }
}
