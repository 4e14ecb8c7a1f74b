//! Liquid water from 0 to 180 °C and up to 10 MPa: density, dynamic viscosity, vapour pressure.
//!
//! - Vapour pressure: IAPWS R7-97(2012) region 4, equation 30, as printed; one root, no exponential.
//! - Density: `ρ = ρ'(T)·(1 + y − 3y²)`, `y = κ(T)·(p − p_v)`; ρ' on the saturation line by a polynomial of degree 6,
//!   compressibility κ there by one of degree 4. This is `ρ'·exp((p − p_v)/K)` to first order, and the second-order
//!   term that fits water (its bulk modulus K rises with pressure), without the exponential.
//! - Viscosity: `1/μ` is nearly straight in T, so a polynomial of degree 5 for it and one of degree 2 for the change
//!   with pressure.
//!
//! The polynomials are least-maximum fits of ours to IAPWS-95 and IAPWS R12-08 (computed with CoolProp 8.0.0) in
//! `x = (T − 363.15 K)/90 K`, which runs from −1 to 1. Measured errors: table in [`fluid`](super).
//! Fixed work, no table. Not modelled: dissolved salts and gases, ice, steam: below the vapour pressure the values are
//! those of the liquid on the saturation line, flagged.

use super::{Clamped, Coverage, Input, LiquidProperties, NotFinite, Property, clamped, model_variance, polynomial};
use crate::{
    fluid::Cover,
    math,
    quantity::{AbsolutePressure, Density, DynamicViscosity, Quantity, Temperature},
};

/// Lowest temperature of the laws, K: 0 °C.
pub const LOWEST_TEMPERATURE: f32 = 273.15;
/// Highest temperature of the laws, K: 180 °C.
pub const HIGHEST_TEMPERATURE: f32 = 453.15;
/// Highest pressure of the laws, Pa absolute.
pub const HIGHEST_PRESSURE: f32 = 1e7;

/// Density is within this part of IAPWS-95 (measured: 3.0e-5; the rest is room for what is dissolved in clean water).
pub const DENSITY_BOUND: f32 = 2e-4;
/// Viscosity is within this part of the true one: 4.0e-3 is ours, the rest the formulation's own 1 % (from memory).
pub const VISCOSITY_BOUND: f32 = 1e-2;
/// Vapour pressure is within this part of IAPWS-95 (measured: 1.7e-4, the distance between the two formulations).
pub const VAPOUR_PRESSURE_BOUND: f32 = 5e-4;

/// ρ' on the saturation line, kg/m³.
const DENSITY: [f32; 7] = [965.301_1, -60.353_523, -19.366_491, 2.476_475_2, -1.479_016_4, 1.470_227_2, -1.059_532];
/// Isothermal compressibility on the saturation line, 1/Pa.
const COMPRESSIBILITY: [f32; 5] = [4.754_084_3e-10, 1.317_731_5e-10, 1.085_861_6e-10, -7.132_034e-12, 4.842_213e-11];
/// The factor of y² that fits IAPWS-95 up to 10 MPa.
const SECOND_ORDER: f32 = 3.0;
/// 1/μ on the saturation line, 1/(Pa·s).
const FLUIDITY: [f32; 6] = [3_182.787_6, 3_272.477, 403.165_22, -246.638_3, 17.616_163, 19.740_555];
/// Relative change of μ with pressure, 1/Pa: negative below 34 °C.
const VISCOSITY_PRESSURE: [f32; 3] = [8.911_28e-10, 1.153_064_9e-9, -5.466_439_5e-10];

/// Vapour pressure. Positive from 611 Pa at 0 °C to 1.003 MPa at 180 °C.
///
/// # Errors
/// [`NotFinite`] for a temperature of NaN or infinity.
///
/// # Examples
/// ```
/// use offcurve_core::{fluid::water, quantity::Temperature};
///
/// let warm = water::vapour_pressure(Temperature::from_degrees_celsius(60.0))?;
/// assert!((warm.value.pascals() - 19_946.0).abs() < 10.0);
/// assert!(warm.coverage.is_within());
/// # Ok::<(), offcurve_core::fluid::NotFinite>(())
/// ```
pub fn vapour_pressure(temperature: Temperature) -> Result<Property<AbsolutePressure>, NotFinite> {
    Ok(saturated(&temperature_in_range(temperature)?))
}

/// Density at a temperature and an absolute pressure.
///
/// # Errors
/// [`NotFinite`] for an input of NaN or infinity.
pub fn density(temperature: Temperature, pressure: AbsolutePressure) -> Result<Property<Density>, NotFinite> {
    Ok(properties(temperature, pressure)?.density)
}

/// Dynamic viscosity at a temperature and an absolute pressure.
///
/// # Errors
/// [`NotFinite`] for an input of NaN or infinity.
pub fn dynamic_viscosity(
    temperature: Temperature,
    pressure: AbsolutePressure,
) -> Result<Property<DynamicViscosity>, NotFinite> {
    Ok(properties(temperature, pressure)?.dynamic_viscosity)
}

/// All properties at a temperature and an absolute pressure; cheaper than one by one.
///
/// # Errors
/// [`NotFinite`] for an input of NaN or infinity.
pub fn properties(temperature: Temperature, pressure: AbsolutePressure) -> Result<LiquidProperties, NotFinite> {
    let at = temperature_in_range(temperature)?;
    let vapour_pressure = saturated(&at);
    let pressure = clamped(pressure.pascals(), vapour_pressure.value.pascals(), HIGHEST_PRESSURE, Input::Pressure)?;
    let coverage = Coverage { temperature: at.cover, pressure: pressure.cover, humidity: Cover::Within };
    let x = (at.value - 363.15) * (1.0 / 90.0);
    let above = pressure.value - vapour_pressure.value.pascals();

    let (saturated_density, slope) = polynomial(&DENSITY, x);
    let (compressibility, compressibility_slope) = polynomial(&COMPRESSIBILITY, x);
    let y = compressibility * above;
    let factor = 1.0 + y - SECOND_ORDER * (y * y);
    let per_y = saturated_density * (1.0 - 2.0 * SECOND_ORDER * y);
    let y_per_kelvin = compressibility_slope * (1.0 / 90.0) * above - compressibility * vapour_pressure.per_kelvin;
    let value = saturated_density * factor;
    let (per_kelvin, per_pascal) = (slope * (1.0 / 90.0) * factor + per_y * y_per_kelvin, per_y * compressibility);
    let density = Property {
        value: Density::from_si(value),
        model_variance: model_variance(
            value,
            DENSITY_BOUND,
            [per_kelvin * at.distance, per_pascal * pressure.distance],
        ),
        per_kelvin,
        per_pascal,
        per_humidity: 0.0,
        coverage,
    };

    let (fluidity, slope) = polynomial(&FLUIDITY, x);
    let (stiffening, _) = polynomial(&VISCOSITY_PRESSURE, x);
    let saturated_viscosity = 1.0 / fluidity;
    let value = saturated_viscosity * (1.0 + stiffening * above);
    let (per_kelvin, per_pascal) =
        (-value * saturated_viscosity * slope * (1.0 / 90.0), saturated_viscosity * stiffening);
    let dynamic_viscosity = Property {
        value: DynamicViscosity::from_si(value),
        model_variance: model_variance(
            value,
            VISCOSITY_BOUND,
            [per_kelvin * at.distance, per_pascal * pressure.distance],
        ),
        per_kelvin,
        per_pascal,
        per_humidity: 0.0,
        coverage,
    };
    Ok(LiquidProperties { density, dynamic_viscosity, vapour_pressure })
}

fn temperature_in_range(temperature: Temperature) -> Result<Clamped, NotFinite> {
    clamped(temperature.kelvins(), LOWEST_TEMPERATURE, HIGHEST_TEMPERATURE, Input::Temperature)
}

fn saturated(at: &Clamped) -> Property<AbsolutePressure> {
    let (value, per_kelvin) = saturation(at.value);
    Property {
        value: AbsolutePressure::from_pascals(value),
        model_variance: model_variance(value, VAPOUR_PRESSURE_BOUND, [per_kelvin * at.distance]),
        per_kelvin,
        per_pascal: 0.0,
        per_humidity: 0.0,
        coverage: Coverage { temperature: at.cover, ..Coverage::default() },
    }
}

/// Saturation pressure, Pa, and its slope, Pa/K, for a temperature in the range of the laws.
///
/// IAPWS R7-97(2012) equations 29b and 30; the slope by implicit differentiation of equation 29.
pub(super) fn saturation(kelvins: f32) -> (f32, f32) {
    const N1: f32 = 1_167.052_1;
    const N2: f32 = -724_213.2;
    const N3: f32 = -17.073_847;
    const N4: f32 = 12_020.825;
    const N5: f32 = -3_232_555.0;
    const N6: f32 = 14.915_109;
    const N7: f32 = -4_823.265_6;
    const N8: f32 = 405_113.4;
    const N9: f32 = -0.238_555_57;
    const N10: f32 = 650.175_36;
    let to_end = 1.0 / (kelvins - N10);
    let theta = kelvins + N9 * to_end;
    let a = (theta + N1) * theta + N2;
    let b = (N3 * theta + N4) * theta + N5;
    let c = (N6 * theta + N7) * theta + N8;
    let beta = 2.0 * c / (math::sqrt(b * b - 4.0 * a * c) - b); // fourth root of the pressure in MPa
    let square = beta * beta;

    let by_theta = square * (2.0 * theta + N1) + beta * (2.0 * N3 * theta + N4) + (2.0 * N6 * theta + N7);
    let by_beta = 2.0 * a * beta + b;
    let theta_per_kelvin = 1.0 - N9 * to_end * to_end;
    let slope = 4e6 * square * beta * (-by_theta / by_beta) * theta_per_kelvin;
    (1e6 * square * square, slope)
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn at(celsius: f32, pascals: f32) -> LiquidProperties {
        properties(Temperature::from_degrees_celsius(celsius), AbsolutePressure::from_pascals(pascals)).unwrap()
    }

    /// Slopes against differences of the values over 2 K and 0.2 MPa; 2 % of the slope is enough for an uncertainty.
    #[test]
    fn slopes_are_those_of_the_values() {
        for pascals in [1.2e6, 5e6, 9.8e6] {
            for step in 1..36 {
                let celsius = 5.0 * step as f32 - 1.0;
                let (here, below, above) =
                    (at(celsius, pascals), at(celsius - 1.0, pascals), at(celsius + 1.0, pascals));
                let close = |slope: f32, low: f32, high: f32, floor: f32, what: &str| {
                    let difference = (high - low) / 2.0;
                    let off = (slope - difference).abs();
                    assert!(off < 0.02 * difference.abs() + floor, "{what} at {celsius}: {slope} {difference}");
                };
                let value = |of: &LiquidProperties| of.density.value.si();
                close(here.density.per_kelvin, value(&below), value(&above), 2e-3, "density");
                let value = |of: &LiquidProperties| of.dynamic_viscosity.value.si();
                close(here.dynamic_viscosity.per_kelvin, value(&below), value(&above), 0.0, "viscosity");
                let value = |of: &LiquidProperties| of.vapour_pressure.value.si();
                close(here.vapour_pressure.per_kelvin, value(&below), value(&above), 0.0, "vapour pressure");
                let (low, high) = (at(celsius, pascals - 1e5), at(celsius, pascals + 1e5));
                let rise = (high.density.value.si() - low.density.value.si()) / 2e5;
                assert!((here.density.per_pascal - rise).abs() < 0.01 * rise, "{rise} {}", here.density.per_pascal);
                let rise = (high.dynamic_viscosity.value.si() - low.dynamic_viscosity.value.si()) / 2e5;
                let off = (here.dynamic_viscosity.per_pascal - rise).abs();
                assert!(off < 0.02 * rise.abs() + 2e-15, "{rise} {}", here.dynamic_viscosity.per_pascal);
            }
        }
    }

    #[test]
    fn outside_is_the_end_flagged_and_less_sure() {
        let (end, beyond) = (at(180.0, 5e6), at(190.0, 5e6));
        assert!(end.density.coverage.is_within() && end.vapour_pressure.coverage.is_within());
        assert!((at(0.0, 1e5).density.coverage.is_within(), at(0.0, 1e7).density.coverage.is_within()) == (true, true));
        assert_eq!(beyond.density.value, end.density.value);
        assert_eq!(beyond.density.coverage.temperature, Cover::Above);
        assert_eq!(beyond.vapour_pressure.coverage.temperature, Cover::Above);
        let grown = beyond.density.model_deviation();
        let distance = 10.0 * end.density.per_kelvin;
        assert!((grown * grown - end.density.model_deviation().powi(2) - distance * distance).abs() < 1e-2, "{grown}");

        let cold = at(-3.0, 1e5);
        assert_eq!(cold.dynamic_viscosity.value, at(0.0, 1e5).dynamic_viscosity.value);
        assert_eq!(cold.dynamic_viscosity.coverage.temperature, Cover::Below);
        let deep = at(20.0, 2e7);
        assert_eq!((deep.density.value, deep.density.coverage.pressure), (at(20.0, 1e7).density.value, Cover::Above));
        // 0.2 % for the 10 MPa too many: more than the 0.04 % it would be off if it were let through.
        assert!(deep.density.model_deviation() > 3.0);
        let boiling = at(120.0, 1e5);
        assert_eq!(boiling.density.coverage.pressure, Cover::Below);
        assert!(boiling.vapour_pressure.coverage.is_within(), "the vapour pressure does not depend on the pressure");
    }

    #[test]
    fn not_a_number_is_refused() {
        let (good, pressure) = (Temperature::from_kelvins(300.0), AbsolutePressure::from_pascals(1e5));
        for bad in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY] {
            let refused = NotFinite { input: Input::Temperature };
            assert_eq!(vapour_pressure(Temperature::from_kelvins(bad)), Err(refused));
            assert_eq!(density(Temperature::from_kelvins(bad), pressure), Err(refused));
            assert_eq!(dynamic_viscosity(Temperature::from_kelvins(bad), pressure), Err(refused));
            let refused = properties(good, AbsolutePressure::from_pascals(bad));
            assert_eq!(refused, Err(NotFinite { input: Input::Pressure }));
        }
    }

    proptest! {
        #[test]
        fn any_finite_input_gives_finite_positive_values(kelvins in -1e30_f32..1e30, pascals in -1e30_f32..1e30) {
            let found = properties(Temperature::from_kelvins(kelvins), AbsolutePressure::from_pascals(pascals)).unwrap();
            prop_assert!((880.0..1006.0).contains(&found.density.value.si()));
            prop_assert!((1.4e-4..1.8e-3).contains(&found.dynamic_viscosity.value.si()));
            prop_assert!((611.0..1.004e6).contains(&found.vapour_pressure.value.si()));
        }
    }
}
