//! Instruments against published figures: Pt100 (IEC 60751), NE 43 bands and the 4–20 mA scale, root extraction, pulse
//! resolution in f32 as on a controller; the orifice plate (ISO 5167-2:2003) in f64 as on the host.

use crate::{Check, OutOfScope};
use core::f64::consts::PI;
use offcurve_core::{
    board::{LoopCurrent, PulseSnapshot, RunState},
    conditioning::Conditioner,
    machine::{
        Profile,
        profile::{ChannelSetup, Source},
    },
    quantity::{Density, PressureDifference, VolumeFlow},
    sensing::{
        ChannelFault, Measured, Reading,
        flow_element::{ElementDesign, FlowElement, Place},
        flow_pulse::{by_count, by_period},
        orifice_design::{
            Orifice,
            Taps::{self, Corner, DAndHalfD, Flange},
            Upstream,
        },
        resistance_thermometer::{self, ToleranceClass},
    },
};
use offcurve_tests::{
    fixtures::Shape,
    published::{
        Arithmetic::{Double, Single},
        rows,
    },
};

pub(crate) const CHECKS: &[Check] = &[
    ("07_sensors-01", Single, || vec![ohms(-200.0)]),
    ("07_sensors-02", Single, || vec![ohms(-100.0)]),
    ("07_sensors-03", Single, || vec![ohms(-50.0)]),
    ("07_sensors-04", Single, || vec![ohms(-10.0)]),
    ("07_sensors-05", Single, || vec![ohms(0.0)]),
    ("07_sensors-06", Single, || vec![ohms(10.0)]),
    ("07_sensors-07", Single, || vec![ohms(25.0)]),
    ("07_sensors-08", Single, || vec![ohms(50.0)]),
    ("07_sensors-09", Single, || vec![ohms(100.0)]),
    ("07_sensors-10", Single, || vec![ohms(150.0)]),
    ("07_sensors-11", Single, || vec![ohms(200.0)]),
    ("07_sensors-12", Single, || vec![ohms(300.0)]),
    ("07_sensors-13", Single, || vec![ohms(400.0)]),
    ("07_sensors-14", Single, || vec![ohms(500.0)]),
    ("07_sensors-15", Single, || vec![ohms(600.0)]),
    ("07_sensors-16", Single, || vec![ohms(700.0)]),
    ("07_sensors-17", Single, || vec![ohms(800.0)]),
    ("07_sensors-18", Single, || vec![ohms(850.0)]),
    ("07_sensors-29", Single, || vec![share(4.0)]),
    ("07_sensors-30", Single, || vec![share(8.0)]),
    ("07_sensors-31", Single, || vec![share(12.0)]),
    ("07_sensors-32", Single, || vec![share(16.0)]),
    ("07_sensors-33", Single, || vec![share(20.0)]),
    ("07_sensors-34", Single, || vec![share(3.8)]),
    ("07_sensors-35", Single, || vec![share(20.5)]),
    ("07_sensors-36", Single, || vec![f64::from(ToleranceClass::AA.tolerance(100.0))]),
    ("07_sensors-37", Single, || vec![f64::from(ToleranceClass::A.tolerance(100.0))]),
    ("07_sensors-38", Single, || vec![f64::from(ToleranceClass::B.tolerance(100.0))]),
    ("07_sensors-39", Single, || vec![f64::from(ToleranceClass::C.tolerance(100.0))]),
    ("07_sensors-40", Double, || {
        let plate = Orifice { pipe_bore: 0.07391, bore: 0.0222, taps: Flange };
        vec![plate.coefficient(4.0 * 0.12 / (PI * 0.07391 * 1.85e-5))]
    }),
    ("07_sensors-41", Double, || {
        vec![Orifice { pipe_bore: 0.0739, bore: 0.0222, taps: Flange }.expansibility(1e5, 9.9e4, 1.4)]
    }),
    ("07_sensors-42", Double, || {
        let plate = Orifice { pipe_bore: 0.07366, bore: 0.05, taps: DAndHalfD };
        let fluid = Upstream { pressure: 2e5, density: 999.1, viscosity: 1.1e-3, isentropic_exponent: Some(1.33) };
        vec![plate.mass_flow(&fluid, 17_000.0).expect("a plate in a pipe").mass_flow]
    }),
    ("07_sensors-43", Double, || vec![coefficient(Corner, 0.1, 0.5, 1e5)]),
    ("07_sensors-44", Double, || vec![coefficient(Flange, 0.1, 0.5, 1e5)]),
    ("07_sensors-45", Double, || vec![coefficient(DAndHalfD, 0.1, 0.5, 1e5)]),
    ("07_sensors-46", Double, || vec![coefficient(DAndHalfD, 0.1, 0.75, 1e6)]),
    ("07_sensors-47", Double, || vec![coefficient(Flange, 0.05, 0.6, 5e4)]),
    ("07_sensors-48", Double, || vec![coefficient(Corner, 0.3, 0.4, 1e7)]),
    ("07_sensors-49", Single, || vec![root(1.0)]),
    ("07_sensors-50", Single, || vec![root(0.25)]),
    ("07_sensors-51", Single, || vec![root(0.01)]),
    ("07_sensors-53", Single, || {
        // 60 pulses a revolution: rev/min is pulses per second.
        vec![f64::from(by_count(1_500, 1.0).expect("a gate").resolution)]
    }),
    ("07_sensors-54", Single, || {
        // 1500 rev/min, one pulse each: 25 a second, 40,000 ticks apart.
        let found = by_period(1, 40_000, 1_000_000).expect("an edge and time");
        vec![f64::from(found.resolution / found.rate)]
    }),
];

pub(crate) const OUT_OF_SCOPE: &[OutOfScope] = &[
    (
        &[
            "07_sensors-19",
            "07_sensors-20",
            "07_sensors-21",
            "07_sensors-22",
            "07_sensors-23",
            "07_sensors-24",
            "07_sensors-25",
            "07_sensors-26",
            "07_sensors-27",
            "07_sensors-28",
        ],
        "the answer is a word: checked by `bands` below",
    ),
    (
        &["07_sensors-52"],
        "0.01 % of the span lies below every cut-off that may be declared, where the flow is 0: see `root_below_the_cut_off`",
    ),
];

/// Every row was computed by the library named in its source, with `reference/make_orifice_grid.py`.
pub(crate) const GRID: &[Check] = &[
    ("07_orifice_grid-01", Double, || vec![coefficient(Corner, 0.06, 0.2, 20000.0)]),
    ("07_orifice_grid-02", Double, || vec![coefficient(Corner, 0.06, 0.2, 1000000.0)]),
    ("07_orifice_grid-03", Double, || vec![coefficient(Corner, 0.06, 0.5, 20000.0)]),
    ("07_orifice_grid-04", Double, || vec![coefficient(Corner, 0.06, 0.5, 1000000.0)]),
    ("07_orifice_grid-05", Double, || vec![coefficient(Corner, 0.06, 0.7, 20000.0)]),
    ("07_orifice_grid-06", Double, || vec![coefficient(Corner, 0.06, 0.7, 1000000.0)]),
    ("07_orifice_grid-07", Double, || vec![coefficient(Corner, 0.25, 0.2, 20000.0)]),
    ("07_orifice_grid-08", Double, || vec![coefficient(Corner, 0.25, 0.2, 1000000.0)]),
    ("07_orifice_grid-09", Double, || vec![coefficient(Corner, 0.25, 0.5, 20000.0)]),
    ("07_orifice_grid-10", Double, || vec![coefficient(Corner, 0.25, 0.5, 1000000.0)]),
    ("07_orifice_grid-11", Double, || vec![coefficient(Corner, 0.25, 0.7, 20000.0)]),
    ("07_orifice_grid-12", Double, || vec![coefficient(Corner, 0.25, 0.7, 1000000.0)]),
    ("07_orifice_grid-13", Double, || vec![coefficient(Flange, 0.06, 0.2, 20000.0)]),
    ("07_orifice_grid-14", Double, || vec![coefficient(Flange, 0.06, 0.2, 1000000.0)]),
    ("07_orifice_grid-15", Double, || vec![coefficient(Flange, 0.06, 0.5, 20000.0)]),
    ("07_orifice_grid-16", Double, || vec![coefficient(Flange, 0.06, 0.5, 1000000.0)]),
    ("07_orifice_grid-17", Double, || vec![coefficient(Flange, 0.06, 0.7, 20000.0)]),
    ("07_orifice_grid-18", Double, || vec![coefficient(Flange, 0.06, 0.7, 1000000.0)]),
    ("07_orifice_grid-19", Double, || vec![coefficient(Flange, 0.25, 0.2, 20000.0)]),
    ("07_orifice_grid-20", Double, || vec![coefficient(Flange, 0.25, 0.2, 1000000.0)]),
    ("07_orifice_grid-21", Double, || vec![coefficient(Flange, 0.25, 0.5, 20000.0)]),
    ("07_orifice_grid-22", Double, || vec![coefficient(Flange, 0.25, 0.5, 1000000.0)]),
    ("07_orifice_grid-23", Double, || vec![coefficient(Flange, 0.25, 0.7, 20000.0)]),
    ("07_orifice_grid-24", Double, || vec![coefficient(Flange, 0.25, 0.7, 1000000.0)]),
    ("07_orifice_grid-25", Double, || vec![coefficient(DAndHalfD, 0.06, 0.2, 20000.0)]),
    ("07_orifice_grid-26", Double, || vec![coefficient(DAndHalfD, 0.06, 0.2, 1000000.0)]),
    ("07_orifice_grid-27", Double, || vec![coefficient(DAndHalfD, 0.06, 0.5, 20000.0)]),
    ("07_orifice_grid-28", Double, || vec![coefficient(DAndHalfD, 0.06, 0.5, 1000000.0)]),
    ("07_orifice_grid-29", Double, || vec![coefficient(DAndHalfD, 0.06, 0.7, 20000.0)]),
    ("07_orifice_grid-30", Double, || vec![coefficient(DAndHalfD, 0.06, 0.7, 1000000.0)]),
    ("07_orifice_grid-31", Double, || vec![coefficient(DAndHalfD, 0.25, 0.2, 20000.0)]),
    ("07_orifice_grid-32", Double, || vec![coefficient(DAndHalfD, 0.25, 0.2, 1000000.0)]),
    ("07_orifice_grid-33", Double, || vec![coefficient(DAndHalfD, 0.25, 0.5, 20000.0)]),
    ("07_orifice_grid-34", Double, || vec![coefficient(DAndHalfD, 0.25, 0.5, 1000000.0)]),
    ("07_orifice_grid-35", Double, || vec![coefficient(DAndHalfD, 0.25, 0.7, 20000.0)]),
    ("07_orifice_grid-36", Double, || vec![coefficient(DAndHalfD, 0.25, 0.7, 1000000.0)]),
    ("07_orifice_grid-37", Double, || vec![expansibility(0.3, 0.98, 1.4)]),
    ("07_orifice_grid-38", Double, || vec![expansibility(0.3, 0.8, 1.4)]),
    ("07_orifice_grid-39", Double, || vec![expansibility(0.7, 0.98, 1.4)]),
    ("07_orifice_grid-40", Double, || vec![expansibility(0.7, 0.8, 1.4)]),
    ("07_orifice_grid-41", Double, || vec![mass_flow(Corner, 0.03, 10000.0)]),
    ("07_orifice_grid-42", Double, || vec![mass_flow(Corner, 0.06, 50000.0)]),
    ("07_orifice_grid-43", Double, || vec![mass_flow(Flange, 0.03, 10000.0)]),
    ("07_orifice_grid-44", Double, || vec![mass_flow(Flange, 0.06, 50000.0)]),
    ("07_orifice_grid-45", Double, || vec![mass_flow(DAndHalfD, 0.03, 10000.0)]),
    ("07_orifice_grid-46", Double, || vec![mass_flow(DAndHalfD, 0.06, 50000.0)]),
];

fn ohms(celsius: f64) -> f64 {
    f64::from(resistance_thermometer::resistance(celsius as f32))
}

fn coefficient(taps: Taps, pipe_bore: f64, beta: f64, reynolds: f64) -> f64 {
    Orifice { pipe_bore, bore: beta * pipe_bore, taps }.coefficient(reynolds)
}

fn expansibility(beta: f64, pressure_ratio: f64, exponent: f64) -> f64 {
    Orifice { pipe_bore: 0.1, bore: beta * 0.1, taps: Corner }.expansibility(2e5, 2e5 * pressure_ratio, exponent)
}

fn mass_flow(taps: Taps, bore: f64, pressure_difference: f64) -> f64 {
    let fluid = Upstream { pressure: 4e5, density: 998.2, viscosity: 1.0016e-3, isentropic_exponent: Some(1.4) };
    let found = Orifice { pipe_bore: 0.1, bore, taps }.mass_flow(&fluid, pressure_difference);
    found.expect("a plate in a pipe").mass_flow
}

/// One current through the conditioning, on a loop that measures 0 to 1.
fn loop_reading(milliamperes: f64) -> Reading {
    let flow = ChannelSetup { source: Source::Loop { input: 0, low: 0.0, high: 1.0 }, ..ChannelSetup::default() };
    let profile = Profile { flow, ..Shape::WATERWORKS.profile() };
    let mut conditioner = Conditioner::default();
    conditioner.add_scan(Ok(&[LoopCurrent::from_milliamperes(milliamperes as f32)]));
    conditioner.finish(&profile, &PulseSnapshot::default(), 1_000_000, RunState::Running).flow
}

fn share(milliamperes: f64) -> f64 {
    f64::from(loop_reading(milliamperes).expect("within the band").value)
}

fn element() -> FlowElement<offcurve_core::sensing::flow_element::RootHere> {
    let design = ElementDesign {
        full_scale_flow: VolumeFlow::from_cubic_metres_per_second(1.0),
        density: Density::from_kilograms_per_cubic_metre(998.2),
        cut_off: 0.005,
        relative_deviation: 0.005,
    };
    FlowElement::root_here(design, PressureDifference::from_pascals(25_000.0)).expect("a design within its ranges")
}

fn pressure(share: f64) -> Measured<PressureDifference> {
    Measured { value: PressureDifference::from_pascals((share * 25_000.0) as f32), deviation: 10.0 }
}

fn root(share: f64) -> f64 {
    f64::from(element().flow(pressure(share)).expect("a pressure").flow.value.cubic_metres_per_second())
}

#[test]
fn published_rows() {
    crate::run("07_sensors", CHECKS);
}

#[test]
fn orifice_grid() {
    crate::run("07_orifice_grid", GRID);
}

/// NE 43 bands (from memory), limits inclusive: the current of each row, named by what the conditioning makes of it.
#[test]
fn bands() {
    let mut seen = 0;
    for row in rows("07_sensors").expect("the reference file is readable") {
        if row.quantity != "NE 43 state" {
            continue;
        }
        let current = row.given.rsplit("i=").next().and_then(|text| text.split(' ').next());
        let current: f64 = current.and_then(|text| text.parse().ok()).expect("a current in mA");
        let got = match loop_reading(current) {
            Err(ChannelFault::FailureLow) => "fail_low",
            Err(ChannelFault::FailureHigh) => "fail_high",
            Err(_) => "other fault",
            Ok(value) if value.saturated && value.value < 0.5 => "under_gap",
            Ok(value) if value.saturated => "over_gap",
            Ok(_) => "measure",
        };
        assert_eq!(got, row.word, "{} ({}): {current} mA", row.id, row.source);
        seen += 1;
    }
    assert_eq!(seen, 10);
}

/// Row 52 asks for 1 % of the flow at 0.01 % of the span. No transmitter resolves that; the element gives 0 and an
/// uncertainty that covers it.
#[test]
fn root_below_the_cut_off() {
    let found = element().flow(pressure(0.0001)).expect("a pressure");
    assert_eq!((found.flow.value.cubic_metres_per_second(), found.place), (0.0, Place::BelowCutOff));
    assert!(found.flow.deviation > 0.01);
}

/// Back from the published resistances (rounded to 0.01 ohm: 0.013 to 0.018 K) to the temperatures they are of.
#[test]
fn resistances_give_their_temperatures() {
    let mut seen = 0;
    for row in rows("07_sensors").expect("the reference file is readable").iter().filter(|row| row.quantity == "R") {
        let celsius = row.given.rsplit("t=").next().and_then(|text| text.split(' ').next());
        let celsius: f64 = celsius.and_then(|text| text.parse().ok()).expect("a temperature");
        let (exact, printed) = (row.recomputed.expect("a figure"), row.expected[0]);
        let of_exact = f64::from(resistance_thermometer::celsius(exact as f32));
        let of_printed = f64::from(resistance_thermometer::celsius(printed as f32));
        assert!((of_exact - celsius).abs() < 2.5e-4, "{} ({}): {of_exact} for {celsius}", row.id, row.source);
        assert!((of_printed - celsius).abs() < 0.018, "{} ({}): {of_printed} for {celsius}", row.id, row.source);
        seen += 1;
    }
    assert_eq!(seen, 18);
}
