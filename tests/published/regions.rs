//! Operating regions, suction margins, specific speeds and thermal flow: guideline figures that are the core's defaults,
//! and the formulas behind them.

use crate::{Check, OutOfScope};
use offcurve_core::regions::{
    HIGH_SUCTION_SPEED_CHEMICAL, HIGH_SUCTION_SPEED_WATER, Service, Span, default_suction_margin, minimum_thermal_flow,
    preferred_by_specific_speed, specific_speed, temperature_rise, type_number, us_specific_speed,
};
use offcurve_tests::published::{Arithmetic::Single, rows};

const FILE: &str = "12_regions";

fn rise(efficiency: f64) -> Vec<f64> {
    vec![f64::from(temperature_rise(50.0, efficiency as f32, 4186.0, 9.80665).expect("positive inputs"))]
}

/// Rows that are figures.
pub(crate) const CHECKS: &[Check] = &[
    ("12_regions-16", Single, || vec![f64::from(us_specific_speed(1.0))]),
    ("12_regions-17", Single, || rise(0.5)),
    ("12_regions-18", Single, || rise(0.05)),
    ("12_regions-19", Single, || {
        vec![f64::from(minimum_thermal_flow(10_000.0, 998.0, 4186.0, 10.0).expect("positive inputs"))]
    }),
];

/// A row's name and the default, in the row's words.
type DefaultInWords = (&'static str, fn() -> String);

/// Rows that are defaults: the row's text is compared with what the core gives, written the same way.
const DEFAULTS: &[DefaultInWords] = &[
    ("12_regions-01", || span(preferred_by_specific_speed(87.0))),
    // The two sources differ; the default is the narrower, the text names both.
    ("12_regions-02", || format!("{} (recalled) or 0.80..1.20 (article)", span(preferred_by_specific_speed(87.1)))),
    ("12_regions-04", || margin(Service::Hydrocarbon, 1000.0, false)),
    ("12_regions-05", || margin(Service::Chemical, HIGH_SUCTION_SPEED_CHEMICAL, false)),
    ("12_regions-06", || margin(Service::Chemical, HIGH_SUCTION_SPEED_CHEMICAL + 0.1, true)),
    ("12_regions-07", || margin(Service::Chemical, HIGH_SUCTION_SPEED_CHEMICAL + 0.1, false)),
    ("12_regions-08", || margin(Service::WaterAndPower, HIGH_SUCTION_SPEED_WATER, false)),
    ("12_regions-09", || margin(Service::WaterAndPower, HIGH_SUCTION_SPEED_WATER + 0.1, true)),
    ("12_regions-11", || margin(Service::Building, HIGH_SUCTION_SPEED_WATER + 0.1, true)),
    ("12_regions-12", || {
        // Rounded to the guideline's hundreds in US units.
        let us = |metric: f32| (us_specific_speed(metric) / 500.0).round() * 500.0;
        let (high, low) = (HIGH_SUCTION_SPEED_CHEMICAL, HIGH_SUCTION_SPEED_WATER);
        format!("{high} / {} and {low} / {}", us(high), us(low))
    }),
];

/// Row 10 has no figure of its own ("above 1.0 through the AOR"): the default is the ratio 1 and no metres.
const BUILDING: &str = "12_regions-10";

const OUT_OF_SCOPE: &[OutOfScope] = &[
    (&["12_regions-03"], "the allowable region is the maker's: declared, and without a default"),
    (&["12_regions-13"], "definition of the required NPSH: a word of the profile's documentation, nothing computed"),
    (&["12_regions-14", "12_regions-15"], "limits of trimming a wheel: not part of the regions"),
];

fn span(span: Span) -> String {
    format!("{:.2}..{:.2}", span.low, span.high)
}

fn margin(service: Service, suction_specific_speed: f32, preferred: bool) -> String {
    let margin = default_suction_margin(service, suction_specific_speed, preferred);
    format!("{} or {:.1} m", margin.ratio, margin.metres)
}

#[test]
fn published_rows() {
    crate::run(FILE, CHECKS);
}

#[test]
fn guideline_figures_are_the_defaults() {
    let rows = rows(FILE).expect("the reference file is readable");
    for (id, compute) in DEFAULTS {
        let row = rows.iter().find(|row| row.id == *id).expect("the row is in the file");
        // Some rows leave the unit to their column.
        let (got, want) = (compute(), row.word.as_str());
        assert!(got == want || got.trim_end_matches(" m") == want, "{id} ({}): {got}, published {want}", row.source);
    }
    let building = rows.iter().find(|row| row.id == BUILDING).expect("the row is in the file");
    let margin = default_suction_margin(Service::Building, HIGH_SUCTION_SPEED_WATER, false);
    assert_eq!((building.word.as_str(), margin.ratio, margin.metres), ("above 1.0 through the AOR", 1.0, 0.0));
    // Not a number counts as the side that asks for more.
    assert_eq!(default_suction_margin(Service::WaterAndPower, f32::NAN, false).ratio, 1.2);
    assert_eq!(span(preferred_by_specific_speed(f32::NAN)), "0.80..1.15");
}

#[test]
fn every_row_is_accounted_for_once() {
    let checked = CHECKS.iter().map(|(id, ..)| *id).chain(DEFAULTS.iter().map(|(id, _)| *id)).chain([BUILDING]);
    let mut named: Vec<&str> = checked.chain(OUT_OF_SCOPE.iter().flat_map(|(ids, _)| ids.iter().copied())).collect();
    named.sort_unstable();
    let rows = rows(FILE).expect("the reference file is readable");
    let mut there: Vec<&str> = rows.iter().map(|row| row.id.as_str()).collect();
    there.sort_unstable();
    assert_eq!(named, there);
}

const FOOT: f64 = 0.3048;
/// 231 cubic inches a minute.
const GALLON_PER_MINUTE: f64 = 231.0 * 0.0254 * 0.0254 * 0.0254 / 60.0;

/// Specific speeds of `04_similarity`: 1170 rev/min, 320 gal/min, 23.5 ft; and what converts one to another.
pub(crate) const SPECIFIC_SPEEDS: &[Check] = &[
    ("04_similarity-01", Single, || vec![f64::from(us_specific_speed(example().0))]),
    ("04_similarity-03", Single, || vec![f64::from(example().1)]),
    ("04_similarity-04", Single, || vec![f64::from(us_specific_speed(1.0))]),
    ("04_similarity-05", Single, || vec![f64::from(example().0) / f64::from(example().1)]),
    ("04_similarity-06", Single, || vec![f64::from(us_specific_speed(example().0)) / f64::from(example().1)]),
];

/// n_q and ω_s of the example, standard g.
fn example() -> (f32, f32) {
    let (flow, head) = ((320.0 * GALLON_PER_MINUTE) as f32, (23.5 * FOOT) as f32);
    let omega = (1170.0 * core::f64::consts::PI / 30.0) as f32;
    let n_q = specific_speed(1170.0, flow, head).expect("positive inputs");
    (n_q, type_number(omega, flow, head, 9.80665).expect("positive inputs"))
}

#[test]
fn published_specific_speeds() {
    crate::run("04_similarity", SPECIFIC_SPEEDS);
}
