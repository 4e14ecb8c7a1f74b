//! Head, hydraulic power, shaft power and efficiency of worked examples, through the estimate as a controller makes it.
//!
//! Gauges at one level in pipes of one bore, as the examples have it, so the head is the pressure rise alone. Torque is
//! power over a speed of our choice; the speed cancels in every row.

use crate::{Check, OutOfScope};
use offcurve_core::estimate::{Estimate, estimate};
use offcurve_core::quantity::Quantity;
use offcurve_tests::{
    fixtures::{self, Shape},
    published::Arithmetic::Single,
};

/// Exact by definition: foot, pound-force, US gallon's rounded 0.1337 ft³ as the example solution has it.
pub(crate) const FOOT: f64 = 0.3048;
const POUND_FORCE: f64 = 4.448_221_615_260_5;
const GALLON: f64 = 0.1337 * FOOT * FOOT * FOOT;
/// 550 ft·lbf/s.
const HORSEPOWER: f64 = 550.0 * FOOT * POUND_FORCE;
/// Speed of our choice, rad/s.
const SPEED: f64 = 150.0;

/// What the core makes of a pump with this pressure rise (Pa), flow (m³/s), liquid (kg/m³), g (m/s²) and shaft power (W).
pub(crate) fn running(rise: f64, flow: f64, density: f64, gravity: f64, shaft_power: f64) -> Estimate {
    let shape = Shape { best_flow: flow, density, gravity, suction_bore: 0.1, elevation: 0.0, ..Shape::WATERWORKS };
    let torque = shaft_power / SPEED;
    estimate(
        &fixtures::sample([
            Some((SPEED, 0.1)),
            Some((flow, 1e-4)),
            Some((0.0, 1.0)),
            Some((rise, 1.0)),
            Some((torque, 1.0)),
        ]),
        &shape.profile(),
    )
}

fn hydraulic_power(estimate: &Estimate) -> f64 {
    f64::from(estimate.hydraulic_power.expect("all readings are there").value.si())
}

pub(crate) fn efficiency(estimate: &Estimate) -> f64 {
    f64::from(estimate.efficiency.expect("all readings are there").value.si())
}

/// Shaft power in hp for a flow in gal/min and a head in ft of a liquid of 62.30 lbf/ft³: ρgQH by the core, over η.
fn horsepower(gallons_per_minute: f64, feet: f64, efficiency: f64) -> Vec<f64> {
    let weight = 62.30 * POUND_FORCE / FOOT.powi(3);
    let flow = gallons_per_minute * GALLON / 60.0;
    let found = running(weight * feet * FOOT, flow, weight / 9.81, 9.81, 1000.0);
    vec![hydraulic_power(&found) / efficiency / HORSEPOWER]
}

pub(crate) const CHECKS: &[Check] = &[
    // 15 kW into a motor of 90 %; 1 to 3 bar; 50 l/s.
    ("02_head_npsh_fan-01", Single, || {
        vec![efficiency(&running(300_000.0 - 100_000.0, 0.050, 1000.0, 9.81, 15_000.0 * 0.90))]
    }),
    // 370 gpm, 24 ft, 70 %.
    ("02_head_npsh_fan-03", Single, || horsepower(370.0, 24.0, 0.7)),
    // 370 gpm, 72 ft, 76.5 %.
    ("02_head_npsh_fan-04", Single, || horsepower(370.0, 72.0, 0.765)),
    // 45 l/s, 35 m, 60 %, water of 1000 kg/m³.
    ("02_head_npsh_fan-05", Single, || {
        vec![hydraulic_power(&running(1000.0 * 9.81 * 35.0, 0.045, 1000.0, 9.81, 1000.0)) / 0.60]
    }),
];

pub(crate) const OUT_OF_SCOPE: &[OutOfScope] = &[
    (&["02_head_npsh_fan-02"], "temperature rise of the liquid: not in the core yet"),
    (&["02_head_npsh_fan-06", "02_head_npsh_fan-07"], "NPSH: not in the core yet"),
    (&["02_head_npsh_fan-09"], "duct resistance and fan total pressure: not in the core yet"),
    (
        &[
            "02_head_npsh_fan-10",
            "02_head_npsh_fan-11",
            "02_head_npsh_fan-12",
            "02_head_npsh_fan-13",
            "02_head_npsh_fan-14",
            "02_head_npsh_fan-15",
        ],
        "NPSH: not in the core yet",
    ),
    (
        &["02_head_npsh_fan-16", "02_head_npsh_fan-17", "02_head_npsh_fan-18", "02_head_npsh_fan-19"],
        "compressibility factor of fan air power: not in the core yet",
    ),
];

#[test]
fn published_rows() {
    crate::run("02_head_npsh_fan", CHECKS);
}

/// The other way round: fed with the row's shaft power, the core gives the row's efficiency back.
#[test]
fn rows_stated_by_efficiency_close() {
    for (flow, head, eta) in [(0.045, 35.0, 0.60), (0.0233434, 7.3152, 0.7), (0.0233434, 21.9456, 0.765)] {
        let shaft = 1000.0 * 9.81 * flow * head / eta;
        let got = efficiency(&running(1000.0 * 9.81 * head, flow, 1000.0, 9.81, shaft));
        assert!((got / eta - 1.0).abs() < 2e-6, "{got} for {eta}");
    }
}
