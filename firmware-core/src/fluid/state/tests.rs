use super::*;
use crate::fluid::{
    Cover,
    solids::{Slurry, SolidsError},
    table::{Row, TableAccuracy},
};
use draw::Draw;

/// Even draws between two ends, by the additive recurrence of the golden ratio's relatives: no seed, no clumps.
mod draw {
    pub(super) struct Draw(pub(super) u32);

    impl Draw {
        /// The `axis`-th coordinate of the next point, 0 to 1; call for axis 0 first.
        pub(super) fn next(&mut self, axis: usize) -> f32 {
            const STEPS: [f64; 3] = [0.819_172_513_396_164_5, 0.671_043_606_703_789_2, 0.549_700_477_901_970_4];
            if axis == 0 {
                self.0 += 1;
            }
            (0.5 + STEPS[axis] * f64::from(self.0)).fract() as f32
        }
    }
}

fn celsius(value: f32) -> Temperature {
    Temperature::from_degrees_celsius(value)
}

fn pascals(value: f32) -> AbsolutePressure {
    AbsolutePressure::from_pascals(value)
}

fn declared<T: Quantity>(low: T, high: T) -> Known<T> {
    Known::resolve(None, &Declared::new(low, high).unwrap())
}

fn measured<T: Quantity>(value: T, deviation: f32) -> Known<T> {
    let elsewhere = Declared::new(value, value).unwrap();
    Known::resolve(Some(Measured { value, deviation }), &elsewhere)
}

fn mean_square_distance(values: &[f32], from: f32) -> f32 {
    let sum: f64 = values.iter().map(|value| f64::from(value - from).powi(2)).sum();
    (sum / values.len() as f64).sqrt() as f32
}

#[test]
fn ranges_are_checked() {
    let ratio = Ratio::from_fraction;
    assert_eq!(Declared::new(ratio(0.8), ratio(0.2)), Err(RangeError::Reversed { low: 0.8, high: 0.2 }));
    for bad in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY] {
        assert_eq!(Declared::new(ratio(bad), ratio(0.2)), Err(RangeError::NotFinite));
        assert_eq!(Declared::new(ratio(0.2), ratio(bad)), Err(RangeError::NotFinite));
    }
    let range = Declared::new(ratio(0.2), ratio(0.8)).unwrap();
    assert!((range.middle().fraction() - 0.5).abs() < 1e-7 && (range.deviation() - 0.6 / 12_f32.sqrt()).abs() < 1e-7);
    assert_eq!(Declared::new(ratio(0.4), ratio(0.4)).unwrap().deviation(), 0.0);
}

#[test]
fn a_useless_reading_gives_way_to_the_range_and_says_so() {
    let season = Declared::new(celsius(4.0), celsius(22.0)).unwrap();
    let blind = Known::resolve(None, &season);
    assert_eq!(blind.origin, Origin::Declared);
    for (value, deviation) in
        [(f32::NAN, 0.1), (f32::INFINITY, 0.1), (290.0, f32::NAN), (290.0, -0.1), (290.0, f32::INFINITY)]
    {
        let reading = Measured { value: Temperature::from_kelvins(value), deviation };
        assert_eq!(Known::resolve(Some(reading), &season), blind, "{value} {deviation}");
    }
    let read = Known::resolve(Some(Measured { value: celsius(30.0), deviation: 0.0 }), &season);
    assert_eq!((read.value, read.deviation, read.origin), (celsius(30.0), 0.0, Origin::Measured));
}

/// What the state claims over a declared range is what drawing from the range gives, within 3 %; the law's own part is
/// far smaller here, except for viscosity, where it is subtracted.
#[test]
fn a_declared_range_spreads_water_as_drawing_from_it_does() {
    for (low, high) in [(2.0, 20.0), (5.0, 80.0), (0.0, 8.0), (60.0, 95.0), (100.0, 175.0)] {
        let pressure = measured(pascals(2e6), 0.0);
        let state = LiquidState::new(&Liquid::Water, Solids::None, &declared(celsius(low), celsius(high)), &pressure);
        let state = state.unwrap();
        assert!(state.coverage.is_within());
        let mut draw = Draw(0);
        let drawn: std::vec::Vec<LiquidProperties> = (0..20_000)
            .map(|_| water::properties(celsius(low + (high - low) * draw.next(0)), pressure.value).unwrap())
            .collect();
        let middle = water::properties(celsius(0.5 * (low + high)), pressure.value).unwrap();
        let check = |what: &str, claimed: f32, own: f32, value: f32, values: std::vec::Vec<f32>| {
            let wanted = mean_square_distance(&values, value);
            let claimed = (claimed * claimed - own * own).sqrt();
            assert!((claimed / wanted - 1.0).abs() < 0.03, "{what} {low}..{high}: {claimed} {wanted}");
        };
        if low > 0.0 {
            // From 0 to 8 °C density rises and falls by 0.1 kg/m³: the law's own part is larger than that.
            check(
                "density",
                state.density.deviation(),
                middle.density.model_deviation(),
                state.density.value.si(),
                drawn.iter().map(|d| d.density.value.si()).collect(),
            );
        }
        check(
            "vapour pressure",
            state.vapour_pressure.deviation(),
            middle.vapour_pressure.model_deviation(),
            state.vapour_pressure.value.si(),
            drawn.iter().map(|d| d.vapour_pressure.value.si()).collect(),
        );
        let viscosity = state.dynamic_viscosity.unwrap();
        check(
            "viscosity",
            viscosity.deviation(),
            middle.dynamic_viscosity.model_deviation(),
            viscosity.value.si(),
            drawn.iter().map(|d| d.dynamic_viscosity.value.si()).collect(),
        );
        let kinematic = state.kinematic_viscosity.unwrap();
        let own = middle.dynamic_viscosity.model_deviation() / middle.density.value.si();
        check(
            "kinematic viscosity",
            kinematic.deviation(),
            own,
            kinematic.value.si(),
            drawn.iter().map(|d| d.dynamic_viscosity.value.si() / d.density.value.si()).collect(),
        );
    }
}

#[test]
fn declared_ranges_spread_air_as_drawing_from_them_does() {
    let ratio = Ratio::from_fraction;
    for ((t_low, t_high), (h_low, h_high), (p_low, p_high)) in [
        ((10.0, 35.0), (0.2, 0.9), (98e3, 104e3)),
        ((-15.0, 10.0), (0.3, 1.0), (80e3, 86e3)),
        ((30.0, 60.0), (0.1, 0.6), (99e3, 103e3)),
    ] {
        let (temperature, pressure, humidity) = (
            declared(celsius(t_low), celsius(t_high)),
            declared(pascals(p_low), pascals(p_high)),
            declared(ratio(h_low), ratio(h_high)),
        );
        let state = AirState::new(&temperature, &pressure, &humidity).unwrap();
        assert!(state.coverage.is_within(), "{:?}", state.coverage);
        let mut draw = Draw(0);
        let drawn: std::vec::Vec<air::AirProperties> = (0..20_000)
            .map(|_| {
                let t = celsius(t_low + (t_high - t_low) * draw.next(0));
                let p = pascals(p_low + (p_high - p_low) * draw.next(1));
                air::properties(t, p, ratio(h_low + (h_high - h_low) * draw.next(2))).unwrap()
            })
            .collect();
        let middle = air::properties(temperature.value, pressure.value, humidity.value).unwrap();
        let densities: std::vec::Vec<f32> = drawn.iter().map(|d| d.density.value.si()).collect();
        let wanted = mean_square_distance(&densities, state.density.value.si());
        let claimed = (state.density.deviation().powi(2) - middle.density.model_deviation().powi(2)).sqrt();
        assert!((claimed / wanted - 1.0).abs() < 0.03, "density {t_low}..{t_high}: {claimed} {wanted}");
        let kinematic: std::vec::Vec<f32> =
            drawn.iter().map(|d| d.dynamic_viscosity.value.si() / d.density.value.si()).collect();
        let wanted = mean_square_distance(&kinematic, state.kinematic_viscosity.value.si());
        let parts = &state.kinematic_viscosity;
        let claimed = parts.by_temperature.hypot(parts.by_pressure).hypot(parts.by_humidity);
        assert!((claimed / wanted - 1.0).abs() < 0.04, "viscosity {t_low}..{t_high}: {claimed} {wanted}");
    }
}

#[test]
fn a_measured_temperature_moves_all_properties_by_their_slopes() {
    let (temperature, pressure) = (measured(celsius(60.0), 0.5), measured(pascals(3e5), 1e4));
    let state = LiquidState::new(&Liquid::Water, Solids::None, &temperature, &pressure).unwrap();
    let at = water::properties(celsius(60.0), pascals(3e5)).unwrap();
    assert_eq!(state.density.by_temperature, 0.5 * at.density.per_kelvin);
    assert_eq!(state.density.by_pressure, 1e4 * at.density.per_pascal);
    assert_eq!(state.vapour_pressure.by_temperature, 0.5 * at.vapour_pressure.per_kelvin);
    assert!(state.density.by_temperature < 0.0 && state.vapour_pressure.by_temperature > 0.0, "signs are kept");
    assert!(state.density.own_variance == at.density.model_variance);
    assert_eq!(state.temperature.origin, Origin::Measured);
    let exact = LiquidState::new(&Liquid::Water, Solids::None, &measured(celsius(60.0), 0.0), &pressure).unwrap();
    assert!(exact.vapour_pressure.deviation() < state.vapour_pressure.deviation());
}

#[test]
fn a_range_that_leaves_the_law_is_flagged() {
    let pressure = measured(pascals(1e6), 0.0);
    let at = |low, high| {
        LiquidState::new(&Liquid::Water, Solids::None, &declared(celsius(low), celsius(high)), &pressure).unwrap()
    };
    assert!(at(0.0, 30.0).coverage.is_within());
    assert_eq!(at(-5.0, 30.0).coverage.temperature, Cover::Below);
    assert_eq!(at(100.0, 170.0).coverage, Coverage::default());
    // 185 °C is outside, and at 1 MPa water of 180 °C already boils.
    assert_eq!(at(100.0, 185.0).coverage.temperature, Cover::Above);
    let ratio = Ratio::from_fraction;
    let air = |t: (f32, f32), p: (f32, f32), h: (f32, f32)| {
        let (t, p) = (declared(celsius(t.0), celsius(t.1)), declared(pascals(p.0), pascals(p.1)));
        AirState::new(&t, &p, &declared(ratio(h.0), ratio(h.1))).unwrap().coverage
    };
    assert!(air((0.0, 30.0), (9e4, 1e5), (0.0, 1.0)).is_within());
    assert_eq!(air((-30.0, 30.0), (9e4, 1e5), (0.0, 1.0)).temperature, Cover::Below);
    assert_eq!(air((0.0, 95.0), (9e4, 1e5), (0.0, 0.1)).temperature, Cover::Above);
    assert_eq!(air((0.0, 30.0), (4e4, 1e5), (0.0, 1.0)).pressure, Cover::Below);
    assert_eq!(air((0.0, 30.0), (9e4, 1.4e5), (0.0, 1.0)).pressure, Cover::Above);
    assert_eq!(air((0.0, 30.0), (9e4, 1e5), (-0.1, 1.0)).humidity, Cover::Below);
    assert_eq!(air((0.0, 30.0), (9e4, 1e5), (0.0, 1.1)).humidity, Cover::Above);
    // Each input is within its range; hot and wet together are more vapour than the form is good for.
    assert_eq!(air((30.0, 85.0), (9e4, 1e5), (0.1, 0.9)).humidity, Cover::Above);
}

#[test]
fn absolute_pressure_is_as_sure_as_gauge_and_air_together() {
    let gauge = |value, deviation| Measured { value: GaugePressure::from_pascals(value), deviation };
    let air = declared(pascals(98e3), pascals(104e3));
    let inlet = Known::above(gauge(-30e3, 1e3), &air).unwrap();
    assert_eq!((inlet.value, inlet.origin), (pascals(71e3), Origin::Declared));
    assert!((inlet.deviation - 1e3_f32.hypot(6e3 / 12_f32.sqrt())).abs() < 0.1);
    assert_eq!(inlet.span(), (pascals(68e3), pascals(74e3)));
    assert_eq!(Known::above(gauge(-30e3, 1e3), &measured(pascals(1e5), 50.0)).unwrap().origin, Origin::Measured);
    for bad in [gauge(f32::NAN, 1.0), gauge(f32::INFINITY, 1.0), gauge(0.0, f32::NAN), gauge(0.0, -1.0)] {
        assert_eq!(Known::above(bad, &air), None);
    }
}

#[test]
fn solids_make_the_liquid_heavier_and_its_viscosity_unknown() {
    let (temperature, pressure) = (measured(celsius(20.0), 0.5), measured(pascals(2e5), 1e3));
    let at = |solids| LiquidState::new(&Liquid::Water, solids, &temperature, &pressure);
    let clean = at(Solids::None).unwrap();
    let (ratio, density) = (Ratio::from_fraction, Density::from_kilograms_per_cubic_metre);
    let sand = Slurry::new(ratio(0.1), ratio(0.02), density(2650.0), density(30.0)).unwrap();
    let slurry = at(Solids::Declared(sand)).unwrap();
    let liquid = clean.density.value.si();
    assert!((slurry.density.value.si() - (0.9 * liquid + 265.0)).abs() < 1e-3);
    let parts = [0.9 * clean.density.deviation(), 0.1 * 30.0, 0.02 * (2650.0 - liquid)];
    let wanted = parts.iter().map(|part| part * part).sum::<f32>().sqrt();
    assert!((slurry.density.deviation() / wanted - 1.0).abs() < 1e-5);
    assert_eq!(slurry.dynamic_viscosity, Err(StateError::Slurry));
    assert_eq!(slurry.kinematic_viscosity, Err(StateError::Slurry));
    assert_eq!(slurry.vapour_pressure, clean.vapour_pressure);
    assert_eq!(at(Solids::Unknown), Err(StateError::Slurry));

    let none = Slurry::new(ratio(0.0), ratio(0.0), density(2650.0), density(0.0)).unwrap();
    assert_eq!(at(Solids::Declared(none)).unwrap().density.value, clean.density.value);
    let refused = |share, share_deviation, solids, deviation| {
        Slurry::new(ratio(share), ratio(share_deviation), density(solids), density(deviation)).unwrap_err()
    };
    assert_eq!(refused(0.61, 0.0, 2650.0, 0.0), SolidsError::Share { found: 0.61 });
    assert_eq!(refused(-0.1, 0.0, 2650.0, 0.0), SolidsError::Share { found: -0.1 });
    assert_eq!(refused(0.1, 0.0, 100.0, 0.0), SolidsError::Density { found: 100.0 });
    assert_eq!(refused(0.1, -0.1, 2650.0, 0.0), SolidsError::Deviation { found: -0.1 });
    assert!(matches!(refused(0.1, 0.1, 2650.0, f32::NAN), SolidsError::Deviation { .. }));
    assert!(matches!(refused(f32::NAN, 0.1, 2650.0, 0.0), SolidsError::Share { .. }));
    assert!(matches!(refused(0.1, 0.1, f32::NAN, 0.0), SolidsError::Density { .. }));
}

#[test]
fn a_table_serves_as_well_as_water() {
    let row = |t: f32, density: f32, viscosity: f32| Row {
        temperature: celsius(t),
        density: Density::from_si(density),
        dynamic_viscosity: DynamicViscosity::from_si(viscosity),
        vapour_pressure: pascals(0.5),
    };
    let accuracy = TableAccuracy { density: 0.002, dynamic_viscosity: 0.05, vapour_pressure: 0.5 };
    let oil = LiquidTable::new(&[row(10.0, 890.0, 0.2), row(70.0, 850.0, 0.015)], accuracy).unwrap();
    let oil = Liquid::Table(oil);
    let pressure = measured(pascals(2e5), 1e3);
    let state = LiquidState::new(&oil, Solids::None, &declared(celsius(20.0), celsius(60.0)), &pressure).unwrap();
    assert!(state.coverage.is_within());
    assert!((state.density.value.si() - 870.0).abs() < 1e-3);
    assert!((state.density.by_temperature + 40.0 / 60.0 * 40.0 / 12_f32.sqrt()).abs() < 1e-2);
    // μ falls to a sixth over the range: far more than first order shows in the bend.
    let viscosity = state.dynamic_viscosity.unwrap();
    assert!(viscosity.deviation() > 0.4 * viscosity.value.si(), "{viscosity:?}");
    let hot = LiquidState::new(&oil, Solids::None, &measured(celsius(80.0), 0.1), &pressure).unwrap();
    assert_eq!(hot.coverage.temperature, Cover::Above);
    let nowhere = oil.properties(celsius(20.0), pascals(f32::NAN));
    assert_eq!(nowhere, Err(NotFinite { input: Input::Pressure }));
}
