//! Flow without a meter on a published pump: the table of Cengel & Cimbala (Fluid Mechanics, 3rd ed., Table 14-2), whose
//! head rises first and whose power is not monotonic, so that every kind of answer occurs.
//!
//! The rows ask for straight lines between the points. The core's curve is a piecewise cubic, and a cubic whose end slopes are
//! those of its chord is a straight line: so each inner point is given as three knots, itself and one 0.01 cm³/s to either side with the
//! slope of that side, and the curve is the straight lines except within 0.01 cm³/s of the corners. No row asks there.
//! Three everywhere would be 17 knots, one more than fit, so the corner at 400 cm³/s, where nothing turns, has two.
//!
//! Flows and heads stay in the table's cm³/s and cm, which are whole numbers: reading a curve backwards knows no units,
//! and a rise of 5 cm between heads in metres would lose in f32 more than the rows allow.

use offcurve_core::{
    inverse::{Attributed, CurveFlow, FlowFinder, NoFlow, Scale},
    machine::{CurveTable, curve::Knot},
    quantity::{Quantity, VolumeFlow},
};
use offcurve_tests::published::{self, Arithmetic::Single, Row};

const FILE: &str = "08_operating_point";
const FLOWS: [f64; 7] = [100.0, 200.0, 300.0, 400.0, 500.0, 600.0, 700.0]; // cm³/s
const HEADS: [f64; 7] = [180.0, 185.0, 175.0, 170.0, 150.0, 95.0, 54.0]; // cm
/// Efficiencies of the same table; not written out in the rows, and borne out by all seven powers.
const EFFICIENCIES: [f64; 7] = [0.32, 0.54, 0.70, 0.79, 0.81, 0.66, 0.38];
/// Distance of a corner's outer knots from it, cm³/s: 640/65536, so that heads there are exact in f32 as well.
const CORNER: f64 = 0.009_765_625;
/// The corner that has no knot of its own.
const TWO_KNOTS: usize = 3;

/// Shaft power at a point of the table, W: hydraulic power by the core over the table's efficiency.
fn power(point: usize) -> f64 {
    let found =
        crate::head_and_power::running(998.0 * 9.81 * HEADS[point] / 100.0, FLOWS[point] * 1e-6, 998.0, 9.81, 9.0);
    f64::from(found.hydraulic_power.expect("all readings are there").value.si()) / EFFICIENCIES[point]
}

/// Slope through a corner that keeps both sides monotone: the flatter of the two, level where the curve turns.
fn through(before: f64, after: f64) -> f64 {
    if before * after <= 0.0 {
        0.0
    } else if before.abs() < after.abs() {
        before
    } else {
        after
    }
}

/// The table as straight lines.
fn table() -> CurveTable {
    let powers: Vec<f64> = (0..7).map(power).collect();
    let slope = |values: &[f64], line: usize| (values[line + 1] - values[line]) / (FLOWS[line + 1] - FLOWS[line]);
    // A knot `aside` of a point, on the straight line `line`.
    let on_line = |point: usize, line: usize, aside: f64| Knot {
        flow: (FLOWS[point] + aside) as f32,
        head: (HEADS[point] + slope(&HEADS, line) * aside) as f32,
        head_slope: slope(&HEADS, line) as f32,
        power: (powers[point] + slope(&powers, line) * aside) as f32,
        power_slope: slope(&powers, line) as f32,
    };
    let mut knots = vec![on_line(0, 0, 0.0)];
    for point in 1..6 {
        let (before, after) = (point - 1, point);
        knots.push(on_line(point, before, -CORNER));
        if point != TWO_KNOTS {
            knots.push(Knot {
                head_slope: through(slope(&HEADS, before), slope(&HEADS, after)) as f32,
                power_slope: through(slope(&powers, before), slope(&powers, after)) as f32,
                ..on_line(point, after, 0.0)
            });
        }
        knots.push(on_line(point, after, CORNER));
    }
    knots.push(on_line(6, 5, 0.0));
    CurveTable::new(&knots).expect("sixteen knots with rising flows")
}

fn finder() -> FlowFinder {
    FlowFinder::new(&table(), 0.0, 0.0, 0.0).expect("straight lines turn at knots only")
}

fn exact(value: f64) -> Attributed {
    Attributed::own(value as f32, 0.0)
}

fn at(ratio: f64) -> Scale {
    Scale { ratio: ratio as f32, deviation: 0.0 }
}

/// Flow in cm³/s from a head in cm at a speed in rev/min.
fn from_head(centimetres: f64, speed: f64) -> Result<CurveFlow, NoFlow> {
    finder().from_head(&exact(centimetres), &at(speed / 1725.0))
}

/// dQ/dH at a flow of the table, cm³/s per cm.
fn flow_per_head(flow: f64) -> f64 {
    let point = table().at(VolumeFlow::from_cubic_metres_per_second(flow as f32)).expect("inside the table");
    1.0 / f64::from(point.head_slope)
}

/// A row's name and what is held against it.
type Figure = (&'static str, fn() -> Vec<f64>);

/// Rows with a figure, checked both ways as everywhere.
const CHECKS: &[Figure] = &[
    ("08_operating_point-01", || vec![f64::from(from_head(160.0, 1725.0).expect("one answer").flow.value)]),
    ("08_operating_point-02", || vec![f64::from(from_head(102.4, 1380.0).expect("one answer").flow.value)]),
    ("08_operating_point-05", || vec![flow_per_head(450.0)]),
    ("08_operating_point-06", || vec![flow_per_head(350.0)]),
    ("08_operating_point-07", || vec![power(0)]),
    ("08_operating_point-08", || vec![power(1)]),
    ("08_operating_point-09", || vec![power(2)]),
    ("08_operating_point-10", || vec![power(3)]),
    ("08_operating_point-11", || vec![power(4)]),
    ("08_operating_point-12", || vec![power(5)]),
    ("08_operating_point-13", || vec![power(6)]),
];

/// Rows whose answer is not one figure: each has a test of its own below.
const OTHERWISE: &[&str] = &["08_operating_point-03", "08_operating_point-04", "08_operating_point-14"];

/// Rows that are not checked, and why.
const OUT_OF_SCOPE: &[(&[&str], &str)] = &[(
    &["08_operating_point-15", "08_operating_point-16", "08_operating_point-17", "08_operating_point-18"],
    "accuracy somebody reached in the field with another method: no formula to check",
)];

/// The file's rows with their status; it has rows without a figure, which the common reader refuses.
fn rows() -> Vec<(String, Row)> {
    let mut reader = csv::Reader::from_path(published::path(FILE)).expect("the reference file is readable");
    reader
        .records()
        .map(|record| {
            let record = record.expect("a row of the reference file");
            let number = |column: usize| record[column].parse().expect("a number");
            let row = Row {
                id: record[0].to_owned(),
                given: record[1].to_owned(),
                quantity: record[2].to_owned(),
                expected: record[3].split(';').filter_map(|part| part.parse().ok()).collect(),
                word: record[3].to_owned(),
                unit: record[4].to_owned(),
                tol_abs: number(5),
                tol_rel_f64: number(6),
                tol_rel_f32: number(7),
                recomputed: record[10].parse().ok(),
                source: record[11].to_owned(),
            };
            (record[8].to_owned(), row)
        })
        .collect()
}

#[test]
fn published_rows() {
    let rows = rows();
    let mut failures = Vec::new();
    for (id, compute) in CHECKS {
        let (status, row) = rows.iter().find(|(_, row)| row.id == *id).expect("the row is in the file");
        assert_eq!(status, "ok", "{id}");
        failures.extend(row.check(&compute(), Single).err());
    }
    assert!(failures.is_empty(), "{}", failures.join("\n"));
}

#[test]
fn every_row_is_accounted_for_once() {
    let named = CHECKS.iter().map(|(id, _)| *id).chain(OTHERWISE.iter().copied());
    let mut named: Vec<&str> = named.chain(OUT_OF_SCOPE.iter().flat_map(|(ids, _)| ids.iter().copied())).collect();
    named.sort_unstable();
    let rows = rows();
    let mut there: Vec<&str> = rows.iter().map(|(_, row)| row.id.as_str()).collect();
    there.sort_unstable();
    assert_eq!(named, there);
}

/// Row 03: the head curve rises first, so 182 cm has two flows, and neither is chosen.
#[test]
fn two_flows_are_reported_as_two() {
    let rows = rows();
    let (status, row) = rows.iter().find(|(_, row)| row.id == OTHERWISE[0]).expect("the row is in the file");
    assert_eq!(status, "ambiguous");
    let Err(NoFlow::Ambiguous(found)) = from_head(182.0, 1725.0) else { panic!("{:?}", from_head(182.0, 1725.0)) };
    let flows: Vec<f64> = found.flows().iter().map(|flow| f64::from(flow.si())).collect();
    row.check(&flows, Single).expect("140 and 230 cm³/s");
}

/// Row 04: above the largest head of the table there is no flow.
#[test]
fn a_head_above_the_curve_has_no_flow() {
    let rows = rows();
    let (status, row) = rows.iter().find(|(_, row)| row.id == OTHERWISE[1]).expect("the row is in the file");
    assert_eq!((status.as_str(), row.word.as_str()), ("out_of_range", "none"));
    assert_eq!(from_head(190.0, 1725.0), Err(NoFlow::AboveCurve));
    assert_eq!(from_head(53.0, 1725.0), Err(NoFlow::BelowCurve));
}

/// Row 14: power falls from 500 to 600 cm³/s, so power tells the flow only where it is outside the sag.
#[test]
fn power_tells_the_flow_only_where_one_flow_has_it() {
    let rows = rows();
    let (_, row) = rows.iter().find(|(_, row)| row.id == OTHERWISE[2]).expect("the row is in the file");
    assert_eq!((row.word.parse(), power(5) < power(4)), (Ok(true), true));
    let from_power = |watts: f64| finder().from_power(&exact(watts), &at(1.0), &at(1.0));
    let Err(NoFlow::Ambiguous(found)) = from_power(8.9) else { panic!("{:?}", from_power(8.9)) };
    assert_eq!((found.found(), found.flows().len()), (3, 3));
    let [a, b, c] = [0, 1, 2].map(|k| f64::from(found.flows()[k].si()));
    assert!((400.0..500.0).contains(&a) && (500.0..600.0).contains(&b) && (600.0..700.0).contains(&c), "{a} {b} {c}");
    // Below the sag and above the hump, one.
    let low = from_power(6.5).expect("one flow");
    assert!((100.0..200.0).contains(&f64::from(low.flow.value)), "{low:?}");
    let high = from_power(9.5).expect("one flow");
    assert!((600.0..700.0).contains(&f64::from(high.flow.value)), "{high:?}");
}

/// Rows 05 and 06 through the answer: the head's uncertainty comes out times dQ/dH, and where a head error of 1 % is
/// 10 % of flow nothing is given out.
#[test]
fn the_level_part_is_refused() {
    let head = Attributed::own(160.0, 0.1);
    let found = finder().from_head(&head, &at(1.0)).expect("one answer");
    assert!((f64::from(found.flow.own) / (5.0 * 0.1) - 1.0).abs() < 1e-5, "{found:?}");
    let level = from_head(172.5, 1725.0);
    let Err(NoFlow::TooFlat { elasticity }) = level else { panic!("{level:?}") };
    // 5 cm per 100 cm³/s at 350 cm³/s and 172.5 cm.
    assert!((f64::from(elasticity) + 0.05 * 350.0 / 172.5).abs() < 1e-6, "{elasticity}");
}
