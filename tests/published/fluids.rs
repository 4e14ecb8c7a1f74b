//! Fluids against published tables, row by row, and against an independent library over their whole ranges.
//!
//! Dense tables: `reference/14_water_dense.csv` and `14_air_dense.csv`, written by `reference/make_fluids.py` with
//! CoolProp 8.0.0 (IAPWS-95, IAPWS R12-08, ASHRAE RP-1485). Each largest error is held from both sides: above the bound
//! the law got worse, far below it the bound says nothing any more.

use crate::{Check, OutOfScope};
use offcurve_core::{
    affinity::SpeedRatio,
    fluid::{
        LiquidProperties, air, site,
        table::{LiquidTable, Row, TableAccuracy},
        viscous::{Correction, ViscousPump},
        water,
    },
    quantity::{
        AbsolutePressure, AngularSpeed, Density, DynamicViscosity, Head, KinematicViscosity, Quantity, Ratio,
        Temperature, VolumeFlow,
    },
};
use offcurve_tests::published::{self, Arithmetic::Single};

fn si<T: Quantity>(value: f64) -> T {
    T::from_si(value as f32)
}

/// Water at K and Pa absolute.
fn water_at(kelvins: f64, pascals: f64) -> LiquidProperties {
    let found = water::properties(si(kelvins), si(pascals)).expect("finite");
    assert!(found.density.coverage.is_within(), "{kelvins} K, {pascals} Pa is out of range");
    found
}

fn density(kelvins: f64, pascals: f64) -> f64 {
    f64::from(water_at(kelvins, pascals).density.value.si())
}

fn viscosity(kelvins: f64, pascals: f64) -> f64 {
    f64::from(water_at(kelvins, pascals).dynamic_viscosity.value.si())
}

fn vapour_pressure(kelvins: f64) -> f64 {
    let found = water::vapour_pressure(si(kelvins)).expect("finite");
    assert!(found.coverage.is_within(), "{kelvins} K is out of range");
    f64::from(found.value.si())
}

/// Where a rising function takes a value, by halving; the function is the core's.
fn inverse(function: impl Fn(f64) -> f64, wanted: f64, mut low: f64, mut high: f64) -> f64 {
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if function(middle) < wanted { low = middle } else { high = middle }
    }
    0.5 * (low + high)
}

/// Saturated liquid: the pressure a hair above the vapour pressure, by 1e-5 of a density.
fn saturated_density(kelvins: f64) -> f64 {
    density(kelvins, vapour_pressure(kelvins) * 1.001)
}

const ATMOSPHERE: f64 = 101_325.0;

/// Water rows to their own tolerance: vapour pressure is the printed formula itself.
pub(crate) const WATER_EXACT: &[Check] = &[
    ("01_water-04", Single, || vec![vapour_pressure(300.0)]),
    ("01_water-07", Single, || vec![inverse(vapour_pressure, 1e5, 273.2, 453.1)]),
    ("01_water-08", Single, || vec![inverse(vapour_pressure, 1e6, 273.2, 453.1)]),
    ("01_water-10", Single, || vec![vapour_pressure(273.16)]),
];

/// Rows of vapour pressure from another formulation than the one computed: 1e-3, the budget.
pub(crate) const WATER_VAPOUR: &[Check] = &[
    ("01_water-12", Single, || vec![vapour_pressure(373.1243)]),
    ("01_water-22", Single, || vec![vapour_pressure(298.15)]),
    ("01_water-25", Single, || vec![vapour_pressure(333.15)]),
];

/// Density: 2e-4, the budget.
pub(crate) const WATER_DENSITY: &[Check] = &[
    ("01_water-01", Single, || vec![1.0 / density(300.0, 3e6)]),
    ("01_water-11", Single, || vec![saturated_density(273.16)]),
    ("01_water-13", Single, || vec![saturated_density(373.1243)]),
    ("01_water-20", Single, || vec![density(298.15, ATMOSPHERE)]),
    ("01_water-23", Single, || vec![density(333.15, ATMOSPHERE)]),
];

/// Viscosity: 1e-2, the budget.
pub(crate) const WATER_VISCOSITY: &[Check] = &[
    // Stated at 998 kg/m³, which 298.15 K has near 2 MPa.
    ("01_water-16", Single, || vec![viscosity(298.15, inverse(|p| density(298.15, p), 998.0, 1e5, 9e6))]),
    ("01_water-21", Single, || vec![viscosity(298.15, ATMOSPHERE)]),
    ("01_water-24", Single, || vec![viscosity(333.15, ATMOSPHERE)]),
];

pub(crate) const WATER_OUT_OF_SCOPE: &[OutOfScope] = &[
    (&["01_water-02"], "80 MPa: the law ends at 10 MPa"),
    (
        &["01_water-03", "01_water-05", "01_water-06", "01_water-09", "01_water-14", "01_water-15"],
        "above 180 °C, where the law ends",
    ),
    (
        &["01_water-17", "01_water-18", "01_water-19"],
        "densities that need more than 10 MPa: 400, 95 and 190 MPa, about",
    ),
];

/// Moist air at °C, Pa absolute and relative humidity.
fn air_at(celsius: f64, pascals: f64, humidity: f64) -> air::AirProperties {
    let found = air::properties(Temperature::from_degrees_celsius(celsius as f32), si(pascals), si(humidity));
    let found = found.expect("finite");
    assert!(found.density.coverage.is_within(), "{celsius} °C, {pascals} Pa, {humidity} is out of range");
    found
}

fn air_density(celsius: f64, pascals: f64, humidity: f64) -> Vec<f64> {
    vec![f64::from(air_at(celsius, pascals, humidity).density.value.si())]
}

/// Volume that holds 1 kg of dry air: (1 + w)/ρ with w = 0.621 98·e/(p − e).
fn volume_of_dry_air(celsius: f64, humidity: f64) -> Vec<f64> {
    let found = air_at(celsius, ATMOSPHERE, humidity);
    let vapour = f64::from(found.vapour_pressure.value.si());
    let share = 0.621_98 * vapour / (ATMOSPHERE - vapour);
    vec![(1.0 + share) / f64::from(found.density.value.si())]
}

fn standard_pressure(altitude: f64) -> Vec<f64> {
    vec![f64::from(site::standard_pressure(altitude as f32).expect("below 11 km").si())]
}

/// Altitudes, to the rows' own tolerance.
pub(crate) const ALTITUDE: &[Check] = &[
    ("01_air-01", Single, || standard_pressure(0.0)),
    ("01_air-03", Single, || standard_pressure(1000.0)),
    ("01_air-05", Single, || standard_pressure(2000.0)),
    ("01_air-07", Single, || standard_pressure(3000.0)),
    ("01_air-09", Single, || standard_pressure(4000.0)),
    ("01_air-11", Single, || standard_pressure(5000.0)),
];

/// Dry air of the standard atmosphere, an ideal gas as here: 1e-5, the difference of the two gas constants.
pub(crate) const STANDARD_ATMOSPHERE: &[Check] = &[
    ("01_air-02", Single, || air_density(15.0, 101_325.0, 0.0)),
    ("01_air-04", Single, || air_density(8.5, 89_874.6, 0.0)),
    ("01_air-06", Single, || air_density(2.0, 79_495.2, 0.0)),
    ("01_air-08", Single, || air_density(-4.5, 70_108.5, 0.0)),
    ("01_air-10", Single, || air_density(-11.0, 61_640.2, 0.0)),
    ("01_air-12", Single, || air_density(-17.5, 54_019.9, 0.0)),
];

/// Real moist air: 7e-4, the ideal form's budget up to 40 °C.
pub(crate) const MOIST_AIR: &[Check] = &[
    ("01_air-13", Single, || volume_of_dry_air(0.0, 0.0)),
    ("01_air-15", Single, || volume_of_dry_air(10.0, 0.0)),
    ("01_air-17", Single, || volume_of_dry_air(30.0, 0.0)),
    ("01_air-19", Single, || volume_of_dry_air(40.0, 0.0)),
    ("01_air-21", Single, || air_density(0.0, ATMOSPHERE, 0.0)),
    ("01_air-22", Single, || air_density(20.0, ATMOSPHERE, 0.5)),
    ("01_air-23", Single, || air_density(20.0, ATMOSPHERE, 0.5)),
    ("01_air-24", Single, || air_density(20.0, ATMOSPHERE, 0.0)),
    ("01_air-25", Single, || air_density(25.0, 95_000.0, 0.6)),
    ("01_air-26", Single, || air_density(15.0, 90_000.0, 0.3)),
    ("01_air-27", Single, || air_density(27.0, 104_000.0, 0.8)),
];

/// Volume per kilogram of dry air, saturated: the vapour's own budget (0.5 % of it is the enhancement left out) on top.
pub(crate) const SATURATED_AIR: &[Check] = &[
    ("01_air-14", Single, || volume_of_dry_air(0.0, 1.0)),
    ("01_air-16", Single, || volume_of_dry_air(10.0, 1.0)),
    ("01_air-18", Single, || volume_of_dry_air(30.0, 1.0)),
    ("01_air-20", Single, || volume_of_dry_air(40.0, 1.0)),
];

/// Water data of the standard's example: 110 m³/h, 77 m, 2950 rev/min.
fn example_pump() -> ViscousPump {
    ViscousPump::new(
        si::<VolumeFlow>(110.0 / 3600.0),
        si::<Head>(77.0),
        AngularSpeed::from_revolutions_per_minute(2950.0),
    )
    .expect("a pump")
}

fn correction(square_millimetres: f64) -> Correction {
    let exact = KinematicViscosity::from_si(0.0);
    let viscosity = KinematicViscosity::from_square_millimetres_per_second(square_millimetres as f32);
    example_pump().correction(viscosity, exact, SpeedRatio::new(1.0).expect("in range")).expect("a liquid")
}

fn factor_b(square_millimetres: f64, head: f64, flow: f64, turns: f64) -> f64 {
    16.5 * square_millimetres.sqrt() * head.powf(0.0625) / (flow.powf(0.375) * turns.powf(0.25))
}

/// The correction of the example pump with the viscosity that gives this B.
fn correction_of(b: f64) -> Correction {
    correction((b / factor_b(1.0, 77.0, 110.0, 2950.0)).powi(2))
}

fn head_factor(relative_flow: f64) -> Vec<f64> {
    vec![f64::from(correction(120.0).head(si::<Ratio>(relative_flow)).expect("a flow").value)]
}

fn flow_factor_of(b: f64) -> Vec<f64> {
    vec![f64::from(correction_of(b).flow.value)]
}

fn efficiency_factor_of(b: f64) -> Vec<f64> {
    vec![f64::from(correction_of(b).efficiency.value)]
}

pub(crate) const VISCOUS: &[Check] = &[
    ("05_viscosity-01", Single, || vec![f64::from(correction(120.0).b)]),
    ("05_viscosity-02", Single, || vec![f64::from(correction(120.0).flow.value)]),
    ("05_viscosity-03", Single, || head_factor(1.0)),
    ("05_viscosity-04", Single, || vec![f64::from(correction(120.0).efficiency.value)]),
    ("05_viscosity-06", Single, || head_factor(0.6)),
    ("05_viscosity-07", Single, || head_factor(0.8)),
    ("05_viscosity-08", Single, || head_factor(1.2)),
    ("05_viscosity-09", Single, || flow_factor_of(1.0)),
    ("05_viscosity-10", Single, || efficiency_factor_of(1.0)),
    ("05_viscosity-11", Single, || flow_factor_of(1.5)),
    ("05_viscosity-12", Single, || efficiency_factor_of(1.5)),
    ("05_viscosity-13", Single, || flow_factor_of(3.0)),
    ("05_viscosity-14", Single, || efficiency_factor_of(3.0)),
    ("05_viscosity-15", Single, || flow_factor_of(10.0)),
    ("05_viscosity-16", Single, || efficiency_factor_of(10.0)),
    ("05_viscosity-17", Single, || flow_factor_of(20.0)),
    ("05_viscosity-18", Single, || efficiency_factor_of(20.0)),
    ("05_viscosity-19", Single, || flow_factor_of(39.0)),
    ("05_viscosity-20", Single, || efficiency_factor_of(39.0)),
];

pub(crate) const VISCOUS_OUT_OF_SCOPE: &[OutOfScope] =
    &[(&["05_viscosity-05"], "the constant for feet and US gallons, 0.4 % from the SI one that the core uses")];

/// Like [`crate::run`], with the budget of a law that is not the row's own formula in place of the row's tolerance.
fn run_within(file: &str, checks: &[Check], budget: f64) {
    let rows = published::rows(file).expect("the reference file is readable");
    let failures: Vec<String> = checks
        .iter()
        .filter_map(|(id, arithmetic, compute)| {
            let row = rows.iter().find(|row| row.id == *id).expect("the row exists").clone();
            published::Row { tol_rel_f32: budget, ..row }.check(&compute(), *arithmetic).err()
        })
        .collect();
    assert!(failures.is_empty(), "{}", failures.join("\n"));
}

#[test]
fn published_rows() {
    crate::run("01_water", WATER_EXACT);
    run_within("01_water", WATER_VAPOUR, 1e-3);
    run_within("01_water", WATER_DENSITY, 2e-4);
    run_within("01_water", WATER_VISCOSITY, 1e-2);
    crate::run("01_air", ALTITUDE);
    run_within("01_air", STANDARD_ATMOSPHERE, 1e-5);
    run_within("01_air", MOIST_AIR, 7e-4);
    run_within("01_air", SATURATED_AIR, 1.3e-3);
    crate::run("05_viscosity", VISCOUS);
}

/// Rows of numbers of a dense table.
fn dense<const N: usize>(file: &str) -> Vec<[f64; N]> {
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_path(published::path(file)).expect("readable");
    reader
        .records()
        .map(|record| {
            let record = record.expect("a row");
            assert_eq!(record.len(), N);
            core::array::from_fn(|column| record[column].parse().expect("a number"))
        })
        .collect()
}

/// The largest relative error, held between a fifth of the bound and the bound.
struct Worst {
    what: &'static str,
    bound: f64,
    found: f64,
    rows: usize,
}

impl Worst {
    fn new(what: &'static str, bound: f64) -> Self {
        Self { what, bound, found: 0.0, rows: 0 }
    }

    fn add(&mut self, got: f64, exact: f64, place: &dyn core::fmt::Debug) {
        let off = (got / exact - 1.0).abs();
        assert!(
            off <= self.bound,
            "{}: {got} for {exact} at {place:?}, {off:.2e} off, bound {}",
            self.what,
            self.bound
        );
        self.found = self.found.max(off);
        self.rows += 1;
    }

    fn finish(&self, rows: usize) {
        println!("{}: largest relative error {:.2e} over {} rows", self.what, self.found, self.rows);
        assert!(self.rows >= rows, "{}: only {} rows", self.what, self.rows);
        assert!(
            self.found > 0.2 * self.bound,
            "{}: {:.2e}, the bound is too loose to mean much",
            self.what,
            self.found
        );
    }
}

#[test]
fn water_over_its_whole_range() {
    let mut density = Worst::new("water density", 3.2e-5);
    let mut viscosity = Worst::new("water viscosity to 1 MPa", 5.6e-4);
    let mut viscosity_high = Worst::new("water viscosity to 10 MPa", 4.5e-3);
    let mut vapour = Worst::new("water vapour pressure", 1.9e-4);
    for row in dense::<5>("14_water_dense") {
        let [celsius, pascals, rho, mu, saturation] = row;
        let found = water_at(celsius + 273.15, pascals);
        density.add(f64::from(found.density.value.si()), rho, &row);
        let worst = if pascals < 1.1e6 { &mut viscosity } else { &mut viscosity_high };
        worst.add(f64::from(found.dynamic_viscosity.value.si()), mu, &row);
        vapour.add(f64::from(found.vapour_pressure.value.si()), saturation, &row);
        // The stated standard uncertainty is a rectangle's: no error beyond √3 of it.
        for (value, deviation, exact) in [
            (found.density.value.si(), found.density.model_deviation(), rho),
            (found.dynamic_viscosity.value.si(), found.dynamic_viscosity.model_deviation(), mu),
            (found.vapour_pressure.value.si(), found.vapour_pressure.model_deviation(), saturation),
        ] {
            assert!(
                (f64::from(value) - exact).abs() < 3.0_f64.sqrt() * f64::from(deviation),
                "{value} {exact} {row:?}"
            );
        }
    }
    for (worst, rows) in [(density, 292), (viscosity, 146), (viscosity_high, 146), (vapour, 292)] {
        worst.finish(rows);
    }
}

#[test]
fn moist_air_over_its_whole_range() {
    let mut usual = Worst::new("air density, 0-40 °C, 80-110 kPa", 7.5e-4);
    let mut density = Worst::new("air density", 2.9e-3);
    let mut viscosity = Worst::new("air viscosity", 1.25e-2);
    for row in dense::<5>("14_air_dense") {
        let [celsius, pascals, humidity, rho, mu] = row;
        let found = air_at(celsius, pascals, humidity);
        let got = f64::from(found.density.value.si());
        density.add(got, rho, &row);
        if (0.0..=40.0).contains(&celsius) && (8e4..=1.1e5).contains(&pascals) {
            usual.add(got, rho, &row);
        }
        viscosity.add(f64::from(found.dynamic_viscosity.value.si()), mu, &row);
        let share = found.vapour_pressure.value.si() / pascals as f32;
        assert!((got / rho - 1.0).abs() < f64::from(air::density_bound(share)), "density at {row:?}: {got}");
        let off = (f64::from(found.dynamic_viscosity.value.si()) / mu - 1.0).abs();
        assert!(off < f64::from(air::viscosity_bound(share)), "viscosity at {row:?}: {off}");
    }
    for (worst, rows) in [(usual, 150), (density, 650), (viscosity, 650)] {
        worst.finish(rows);
    }
}

/// A user's table of water every 10 K: the interpolation errors that the table's documentation states.
#[test]
fn a_table_of_water_every_ten_kelvin() {
    let rows: Vec<[f64; 5]> = dense("14_water_dense");
    let at_one_megapascal: Vec<&[f64; 5]> = rows.iter().skip(1).step_by(4).collect();
    let accuracy = TableAccuracy { density: 2e-4, dynamic_viscosity: 7e-3, vapour_pressure: 8e-4 };
    let mut worst = [("table density", 2.0e-4), ("table viscosity", 8e-3), ("table vapour pressure", 8.5e-4)]
        .map(|(what, bound)| Worst::new(what, bound));
    for first in [0, 28, 44] {
        let knots: Vec<Row> = at_one_megapascal[first..]
            .iter()
            .step_by(4)
            .take(8)
            .map(|&&[celsius, _, rho, mu, saturation]| Row {
                temperature: si::<Temperature>(celsius + 273.15),
                density: si::<Density>(rho),
                dynamic_viscosity: si::<DynamicViscosity>(mu),
                vapour_pressure: si::<AbsolutePressure>(saturation),
            })
            .collect();
        let table = LiquidTable::new(&knots, accuracy).expect("rows in order");
        for row in &at_one_megapascal[first..=first + 28] {
            let [celsius, _, rho, mu, saturation] = **row;
            let found = table.properties(si(celsius + 273.15)).expect("finite");
            assert!(found.density.coverage.is_within(), "{celsius}");
            let got = [found.density.value.si(), found.dynamic_viscosity.value.si(), found.vapour_pressure.value.si()];
            for ((worst, got), exact) in worst.iter_mut().zip(got).zip([rho, mu, saturation]) {
                worst.add(f64::from(got), exact, row);
            }
        }
    }
    for worst in worst {
        worst.finish(87);
    }
}

/// The viscous factors against their formulas in f64, over B from 1 to 100, and head over flow.
#[test]
fn viscous_factors_over_their_whole_range() {
    let mut b_error = Worst::new("B", 4e-7);
    let mut flow_error = Worst::new("C_Q", 8e-7);
    let mut efficiency_error = Worst::new("C_eta", 4e-6);
    let mut head_error = Worst::new("C_H", 8e-7);
    for step in 1..=2000 {
        let viscosity = KinematicViscosity::from_square_millimetres_per_second(
            (factor_b(1.0, 77.0, 110.0, 2950.0).powi(-2) * 100_f64.powf(f64::from(step) / 1000.0)) as f32,
        );
        let exact = KinematicViscosity::from_si(0.0);
        let got =
            example_pump().correction(viscosity, exact, SpeedRatio::new(1.0).expect("in range")).expect("a liquid");
        let b = factor_b(1e6 * f64::from(viscosity.si()), 77.0, 110.0, 2950.0);
        let flow = 2.71_f64.powf(-0.165 * b.log10().powf(3.15));
        b_error.add(f64::from(got.b), b, &step);
        flow_error.add(f64::from(got.flow.value), flow, &b);
        efficiency_error.add(f64::from(got.efficiency.value), b.powf(-0.0547 * b.powf(0.69)), &b);
        if b < 40.0 {
            for relative in [0.0, 0.3, 0.9, 1.25] {
                let head = f64::from(got.head(si(relative)).expect("a flow").value);
                head_error.add(head, 1.0 - (1.0 - flow) * f64::from(relative as f32).powf(0.75), &(b, relative));
            }
        }
    }
    for worst in [b_error, flow_error, efficiency_error, head_error] {
        worst.finish(2000);
    }
}

/// Source: the ISO 2533 formula in f64, over the altitudes accepted.
#[test]
fn altitude_over_its_whole_range() {
    let mut error = Worst::new("altitude pressure", 1e-6);
    for altitude in (-500..=11_000).step_by(7) {
        let exact = 101_325.0 * (1.0 - 0.0065 * f64::from(altitude) / 288.15).powf(5.255_88);
        error.add(standard_pressure(f64::from(altitude))[0], exact, &altitude);
    }
    error.finish(1600);
}
