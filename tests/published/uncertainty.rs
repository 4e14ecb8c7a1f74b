//! Published propagation of uncertainty (JCGM 100, products), through the estimate.
//!
//! The rows state relative uncertainties of a product, so the values are ours to choose. They are chosen so that every
//! stated uncertainty is exactly one that a record's byte can code, and so that head is an input of its own, as in the
//! rows: the gauges read the same, all head is height between them, and the head's uncertainty is that of the gauges.

use crate::Check;
use offcurve_core::{deviation::Deviation, estimate::estimate, machine::Profile, quantity::Quantity, sensing::Channel};
use offcurve_tests::{
    fixtures::{self, Shape},
    published::Arithmetic::Single,
};

/// An uncertainty near `about` that a byte codes exactly, in the channel's unit.
fn codeable(channel: Channel, about: f64) -> f64 {
    f64::from(Deviation::at_least(about as f32, channel.deviation_base()).value(channel.deviation_base()))
}

/// Relative standard uncertainties of hydraulic power and efficiency by the core, for ρ 0.05 %, Q 1 %, H 0.5 %, T 1 %,
/// ω 0.1 %.
fn relative_uncertainties() -> (f64, f64) {
    let density = 998.0;
    let pressure = codeable(Channel::DischargePressure, 1450.0);
    let head = pressure / (density * 9.81) / 0.005;
    let flow = codeable(Channel::Flow, 0.0005);
    let torque = codeable(Channel::ShaftTorque, 1.2);
    let speed = codeable(Channel::Speed, 0.155);
    let shape = Shape { density, suction_bore: 0.1, elevation: head, ..Shape::WATERWORKS };
    let profile = Profile { density_deviation: (0.0005 * density) as f32, ..shape.profile() };
    let found = estimate(
        &fixtures::sample([
            Some((speed / 0.001, speed)),
            Some((flow / 0.01, flow)),
            Some((0.0, 0.0)), // coded as 2^-8 Pa, nothing beside the other gauge
            Some((0.0, pressure)),
            Some((torque / 0.01, torque)),
        ]),
        &profile,
    );
    let power = found.hydraulic_power.expect("all readings are there");
    let efficiency = found.efficiency.expect("all readings are there");
    (
        f64::from(power.deviation.si()) / f64::from(power.value.si()),
        f64::from(efficiency.deviation.si()) / f64::from(efficiency.value.si()),
    )
}

pub(crate) const CHECKS: &[Check] = &[
    ("09_uncertainty-10", Single, || vec![relative_uncertainties().0]),
    ("09_uncertainty-11", Single, || vec![relative_uncertainties().1]),
];

#[test]
fn published_rows() {
    crate::run("09_uncertainty", CHECKS);
}
