//! Do the intervals hold what they promise? Measurement errors are drawn around a known truth with the declared
//! standard uncertainties, and the 95 % interval (value ± 1.96 u) of each estimate must hold the truth in 90 to 98 % of
//! the draws: narrower is too sure, wider hides faults.
//!
//! Drawn: the five readings; the true density around the declared one; the machine's true curve around the stated one,
//! head and power by one factor each. Truth by the f64 reference. The controller codes each uncertainty rounded up by
//! up to 9 %, so more than 95 % is expected, up to 96.8 %.

use offcurve_core::{estimate::estimate, quantity::Quantity, sensing::Channel};
use offcurve_tests::{
    draws::Draws,
    fixtures::{self, Shape},
    reference_estimate::{self as reference, Given, NAMES, listed},
};

const DRAWS: u32 = 1000;
/// Estimates that are judged; the momentum torque's 8 % is a bound of its own model, not a spread of readings.
const JUDGED: [&str; 7] =
    ["head", "hydraulic power", "shaft power", "efficiency", "relative flow", "head residual", "power residual"];

/// Truth of a judged estimate from true inputs; the curve's factors among them.
fn truth(name: &str, profile: &offcurve_core::machine::Profile, x: &reference::Inputs) -> f64 {
    let [speed, _, _, _, torque, ..] = *x;
    let power = speed * torque;
    match name {
        "head" => reference::head(profile, x),
        "hydraulic power" => reference::hydraulic_power(profile, x),
        "shaft power" => power,
        "efficiency" => reference::hydraulic_power(profile, x) / power,
        "relative flow" => reference::relative_flow(profile, x),
        "head residual" => reference::head(profile, x) - reference::expected_head(profile, x),
        "power residual" => power - reference::expected_power(profile, x),
        other => panic!("no truth for {other}"),
    }
}

#[test]
fn intervals_cover_the_truth() {
    let shape = Shape { deviations: [0.002, 0.01, 0.015, 0.08], ..Shape::WATERWORKS };
    let profile = shape.profile();
    // A worn pump at two speeds and three flows: residuals are not zero, slopes differ.
    let points = [(1.0, 1.0), (0.7, 0.6), (0.85, 1.25)];
    let mut failures = Vec::new();
    for (seed, point) in points.into_iter().enumerate() {
        let relative = [0.002, 0.012, 0.005, 0.005, 0.015];
        let stated = fixtures::on_curve(&shape, point, (0.95, 1.02), 35_000.0, relative);
        let mut true_inputs = Given::new(&fixtures::sample(stated.map(Some)), &profile).value;
        let spread = Given::new(&fixtures::sample(stated.map(Some)), &profile).deviation;
        let stated_inputs = true_inputs;
        let mut draws = Draws::new(seed as u64 + 1);
        let mut inside = [0_u32; JUDGED.len()];
        for _ in 0..DRAWS {
            let mut measured = stated;
            for (value, deviation) in &mut measured {
                *value += *deviation * draws.normal();
            }
            // Declared, not read: here the truth moves around what is stated.
            for place in Channel::ALL.len()..true_inputs.len() {
                true_inputs[place] = stated_inputs[place] + spread[place] * draws.normal();
            }
            let found = listed(&estimate(&fixtures::sample(measured.map(Some)), &profile));
            for (name, inside) in JUDGED.iter().zip(&mut inside) {
                let place = NAMES.iter().position(|each| each == name).expect("a judged name is an estimate");
                let (value, deviation, _) = found[place].expect("a well instrumented machine has every value");
                let off = (value - truth(name, &profile, &true_inputs)).abs();
                *inside += u32::from(off <= 1.96 * deviation);
            }
        }
        for (name, inside) in JUDGED.iter().zip(inside) {
            let share = 100.0 * f64::from(inside) / f64::from(DRAWS);
            println!("speed ratio {} relative flow {}: {name} {share:.1} %", point.0, point.1);
            if !(90.0..=98.0).contains(&share) {
                failures.push(format!("{name} at {point:?}: {share:.1} %"));
            }
        }
    }
    assert!(failures.is_empty(), "95 % intervals outside 90..=98 %: {failures:?}");
}

/// The measure itself: intervals half or twice as wide must fail it, or it would pass anything.
#[test]
fn the_measure_tells_wrong_intervals_from_right_ones() {
    let mut draws = Draws::new(9);
    let errors: Vec<f64> = (0..DRAWS).map(|_| draws.normal()).collect();
    let share = |width: f64| {
        100.0 * errors.iter().filter(|error| error.abs() <= 1.96 * width).count() as f64 / f64::from(DRAWS)
    };
    assert!((90.0..=98.0).contains(&share(1.0)) && share(0.7) < 90.0 && share(1.4) > 98.0);
}

/// The coded uncertainty must not be below the declared one: coverage rests on it.
#[test]
fn coding_never_narrows_an_interval() {
    let readings =
        fixtures::on_curve(&Shape::WATERWORKS, (0.8, 0.9), (1.0, 1.0), 0.0, [0.001, 0.01, 0.003, 0.004, 0.02]);
    let found = estimate(&fixtures::sample(readings.map(Some)), &Shape::WATERWORKS.profile());
    let torque = found.shaft_torque.expect("measured");
    let declared = readings[4].1;
    let coded = f64::from(torque.deviation.si());
    assert!(coded >= declared * (1.0 - 1e-6) && coded <= declared * 1.0906, "{coded} for {declared}");
}
