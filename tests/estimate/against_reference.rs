//! Random plausible machines and readings: value, uncertainty, source and reason of every estimate, core against f64.
//!
//! Tolerances: a value within [`VALUE`] of the magnitude of its terms (not of itself: a residual near zero is a
//! difference of large terms), an uncertainty within [`DEVIATION`] of itself. The largest found is printed by
//! `largest_differences`, so that the tolerances can be seen to be neither idle nor tight.

use crate::missing::states;
use offcurve_core::{conditioning::ConditionedSample, estimate::estimate, machine::Profile};
use offcurve_tests::{
    draws::Draws,
    fixtures::{self, Shape},
    reference_estimate::{NAMES, listed, values},
};
use proptest::prelude::*;

/// Of the magnitude of the terms; f32 has 6e-8 per operation.
const VALUE: f64 = 5e-7;
/// Relative; first-order slopes in f32 against numeric derivatives in f64.
const DEVIATION: f64 = 1e-4;

/// Differences of one sample: per estimate the value's (in its scale) and the uncertainty's (relative), 0 where both
/// sides give the same reason.
fn differences(sample: &ConditionedSample, profile: &Profile) -> Result<[(f64, f64); 11], String> {
    let core = listed(&estimate(sample, profile));
    let reference = values(sample, profile);
    let mut found = [(0.0, 0.0); 11];
    for (place, name) in NAMES.iter().enumerate() {
        match (&core[place], &reference[place]) {
            (Err(core), Err(reference)) if core == reference => {}
            (Ok((value, deviation, source)), Ok(wanted)) => {
                let off = (value - wanted.value).abs() / wanted.scale;
                let deviation_off = (deviation - wanted.deviation).abs() / wanted.deviation;
                let numbers = !off.is_nan() && !deviation_off.is_nan();
                if !numbers || off > VALUE || deviation_off > DEVIATION || *source != wanted.source {
                    return Err(format!("{name}: {value} ± {deviation} {source:?}, reference {wanted:?}"));
                }
                found[place] = (off, deviation_off);
            }
            (core, reference) => return Err(format!("{name}: core {core:?}, reference {reference:?}")),
        }
    }
    Ok(found)
}

/// Six figures of a machine, two of its taps, four relative uncertainties.
fn shapes() -> impl Strategy<Value = Shape> {
    (
        (3.0..150.0_f64, -3.0..-0.5_f64, 0.05..0.5_f64, 70.0..380.0_f64, 3_usize..=16),
        (0.97..1.03_f64, 700.0..1_300.0_f64, 9.76..9.84_f64, 0.6..1.0_f64, -1.0..3.0_f64),
        prop::array::uniform4(0.0..0.05_f64),
        any::<bool>(),
    )
        .prop_map(|(machine, site, deviations, impeller)| {
            let (shut_off_head, best_flow_exponent, droop, reference_speed, knots) = machine;
            let (density_ratio, density, gravity, bore_ratio, elevation) = site;
            let best_flow = 10_f64.powf(best_flow_exponent);
            let suction_bore = (best_flow / 2.0).sqrt(); // 2.5 m/s at best flow
            Shape {
                shut_off_head,
                best_flow,
                droop,
                reference_speed,
                knots,
                density,
                reference_density: density * density_ratio,
                gravity,
                suction_bore,
                discharge_bore: suction_bore * bore_ratio,
                elevation,
                deviations,
                impeller,
            }
        })
}

/// Speed ratio and relative flow, head and power off the curve, suction pressure, relative uncertainties.
type Running = ((f64, f64), (f64, f64), f64, [f64; 5]);

fn running() -> impl Strategy<Value = Running> {
    (
        (0.21..1.19_f64, 0.02..1.48_f64),
        (0.7..1.3_f64, 0.7..1.3_f64),
        -60_000.0..400_000.0_f64,
        prop::array::uniform5(0.000_3..0.05_f64),
    )
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(2000))]

    #[test]
    fn every_estimate_agrees(shape in shapes(), (point, factors, suction, relative) in running(), torque_fitted: bool, from_drive: bool) {
        let mut profile = shape.profile();
        profile.shaft_torque.from_drive = from_drive;
        let mut readings = fixtures::on_curve(&shape, point, factors, suction, relative).map(Some);
        if !torque_fitted { readings[4] = None; }
        let result = differences(&fixtures::sample(readings), &profile);
        prop_assert!(result.is_ok(), "{}", result.unwrap_err());
    }

    /// Any mixture of missing, zero, negative and unbounded readings, any run state: same reasons on both sides.
    #[test]
    fn every_reason_agrees(
        shape in shapes(),
        (point, factors, suction, relative) in running(),
        odd in prop::array::uniform5(0_u8..12),
        state in 0_usize..9,
    ) {
        let mut readings = fixtures::on_curve(&shape, point, factors, suction, relative).map(Some);
        for (reading, odd) in readings.iter_mut().zip(odd) {
            let value = reading.map_or(0.0, |(value, _)| value);
            *reading = match odd {
                0 => None,
                1 => Some((f64::NAN, 1.0)),
                2 => Some((f64::INFINITY, 1.0)),
                3 => Some((0.0, 1.0)),
                4 => Some((-value, 1.0)),
                5 => Some((0.05 * value, 1.0)),
                6 => Some((1.7 * value, 1.0)),
                _ => *reading,
            };
        }
        let mut sample = fixtures::sample(readings);
        (sample.run, sample.direction) = states()[state];
        let profile = shape.profile();
        let core = listed(&estimate(&sample, &profile)).map(Result::err);
        let reference = values(&sample, &profile).map(Result::err);
        prop_assert_eq!(core, reference);
    }
}

/// 20,000 draws over the same ranges; fails past the tolerances and prints how much of them is used.
#[test]
fn largest_differences() {
    let mut draws = Draws::new(20);
    let mut worst = [(0.0_f64, 0.0_f64); 11];
    for _ in 0..20_000 {
        let density = draws.between(700.0, 1300.0);
        let best_flow = 10_f64.powf(draws.between(-3.0, -0.5));
        let suction_bore = (best_flow / 2.0).sqrt();
        let shape = Shape {
            shut_off_head: draws.between(3.0, 150.0),
            best_flow,
            droop: draws.between(0.05, 0.5),
            reference_speed: draws.between(70.0, 380.0),
            knots: 3 + (draws.bits() % 14) as usize,
            density,
            reference_density: density * draws.between(0.97, 1.03),
            gravity: draws.between(9.76, 9.84),
            suction_bore,
            discharge_bore: suction_bore * draws.between(0.6, 1.0),
            elevation: draws.between(-1.0, 3.0),
            deviations: core::array::from_fn(|_| draws.between(0.0, 0.05)),
            impeller: true,
        };
        let point = (draws.between(0.21, 1.19), draws.between(0.02, 1.48));
        let factors = (draws.between(0.7, 1.3), draws.between(0.7, 1.3));
        let suction = draws.between(-60_000.0, 400_000.0);
        let relative = core::array::from_fn(|_| draws.between(0.000_3, 0.05));
        let mut readings = fixtures::on_curve(&shape, point, factors, suction, relative).map(Some);
        if draws.bits().is_multiple_of(2) {
            readings[4] = None;
        }
        let found = differences(&fixtures::sample(readings), &shape.profile()).unwrap();
        for (worst, found) in worst.iter_mut().zip(found) {
            *worst = (worst.0.max(found.0), worst.1.max(found.1));
        }
    }
    for (name, (value, deviation)) in NAMES.iter().zip(worst) {
        println!(
            "{name:16} value {value:.1e} of its terms (allowed {VALUE:.0e}), uncertainty {deviation:.1e} (allowed {DEVIATION:.0e})"
        );
        assert!(value > 0.0 || *name == "shaft torque", "{name} was never compared");
    }
}
