//! Moment of momentum: head, torque, power and outlet whirl of worked examples.
//!
//! Angles and widths become speeds here, in f64; the laws under test are the core's (`momentum`, f32), the area is that
//! of `machine::design` (f64). Blade angles from tangential, as everywhere in the core.

use crate::head_and_power::{FOOT, efficiency, running};
use crate::{Check, OutOfScope};
use core::f64::consts::PI;
use offcurve_core::{
    machine::design::ImpellerGeometry,
    momentum,
    quantity::{AngularSpeed, Quantity, Torque},
};
use offcurve_tests::published::Arithmetic::{Double, Single};

fn speed(revolutions_per_minute: f64) -> f64 {
    revolutions_per_minute * PI / 30.0
}

/// Whirl at the outlet by the core, m/s.
fn whirl(rim: f64, meridional: f64, blade_degrees: f64, slip_factor: f64) -> f64 {
    let cotangent = 1.0 / blade_degrees.to_radians().tan();
    f64::from(momentum::outlet_whirl(rim as f32, meridional as f32, cotangent as f32, slip_factor as f32))
}

/// Euler's head by the core, m.
fn head(outlet: (f64, f64), inlet: (f64, f64), gravity: f64) -> f64 {
    let ((u2, c_u2), (u1, c_u1)) = (outlet, inlet);
    f64::from(momentum::euler_head(u2 as f32, c_u2 as f32, u1 as f32, c_u1 as f32, gravity as f32))
}

/// Torque and shaft power by the core, N·m and W, without inlet whirl.
fn torque_and_power(mass_flow: f64, radius: f64, c_u2: f64, omega: f64) -> (f64, f64) {
    let torque = momentum::stream_torque(mass_flow as f32, (radius as f32, c_u2 as f32), (0.0, 0.0));
    let power = Torque::from_newton_metres(torque) * AngularSpeed::from_radians_per_second(omega as f32);
    (f64::from(torque), f64::from(power.si()))
}

/// A wheel without blade thickness: the examples give the free circumference.
fn area(diameter: f64, width: f64) -> f64 {
    ImpellerGeometry {
        outlet_diameter: diameter,
        outlet_width: width,
        inlet_diameter: 0.5 * diameter,
        outlet_blade_angle: PI / 2.0,
        blades: 6,
        blade_thickness: 0.0,
    }
    .outlet_area()
}

/// Example 14-5: blower, 1750 rev/min, r2 8 cm, b2 2.3 cm, 0.13 m³/s leaving at 40° from RADIAL, air of 1.20 kg/m³.
/// Rim speed and whirl, m/s.
fn blower() -> (f64, f64) {
    let rim = f64::from(momentum::rim_speed(0.08, speed(1750.0) as f32));
    (rim, 0.13 / area(0.16, 0.023) * 40_f64.to_radians().tan())
}

/// Example 11.1, in feet: r2 7 in, b 1.75 in, β2 20°, 1440 rev/min; the flow follows from a shockless entry at
/// r1 4 in, β1 30°. Rim speed, whirl (ft/s) and flow (ft³/s).
fn backward_pump() -> (f64, f64, f64) {
    let (u1, u2) = (speed(1440.0) * 4.0 / 12.0, speed(1440.0) * 7.0 / 12.0);
    let flow = area(8.0 / 12.0, 1.75 / 12.0) * u1 * 30_f64.to_radians().tan();
    (u2, whirl(u2, flow / area(14.0 / 12.0, 1.75 / 12.0), 20.0, 1.0), flow)
}

/// Example 2.13: D2 0.26 m, b2 0.02 m, 1400 rev/min, 0.03 m³/s, β2 30°. Rim speed and meridional speed, m/s.
fn ratio_slip_wheel() -> (f64, f64) {
    (speed(1400.0) * 0.13, 0.03 / area(0.26, 0.02))
}

/// Example 2.16: double suction, D2 0.28 m, b2 0.018 m shared by two sides, 85 % free, 1650 rev/min, 74 l/s, β2 35°.
/// Rim speed and whirl, m/s.
fn double_suction() -> (f64, f64) {
    let rim = speed(1650.0) * 0.14;
    (rim, whirl(rim, 0.5 * 0.074 / (area(0.28, 0.009) * 0.85), 35.0, 1.0))
}

/// Blade angle in degrees at which the core's Euler head is `wanted`: the head is linear in the cotangent, so two
/// values of it give the root.
fn blade_angle(wanted: f64, rim: f64, meridional: f64) -> f64 {
    let head_at = |degrees: f64| head((rim, whirl(rim, meridional, degrees, 1.0)), (0.0, 0.0), 9.81);
    let (steep, flat) = (90.0_f64, 12.0_f64);
    let cot = |degrees: f64| 1.0 / degrees.to_radians().tan();
    let share = (wanted - head_at(steep)) / (head_at(flat) - head_at(steep));
    (1.0 / (cot(steep) + share * (cot(flat) - cot(steep)))).atan().to_degrees()
}

pub(crate) const CHECKS: &[Check] = &[
    ("03_euler_textbook-01", Single, || {
        let metres_of_air = head(blower(), (0.0, 0.0), 9.81);
        vec![metres_of_air * 1.20 / 998.0 * 1000.0]
    }),
    ("03_euler_textbook-02", Single, || {
        let (_, c_u2) = blower();
        vec![torque_and_power(1.20 * 0.13, 0.08, c_u2, speed(1750.0)).1]
    }),
    // 1720 rev/min, r2 0.18 m, b2 0.03 m, 0.25 m³/s, 14.5 m.
    ("03_euler_textbook-04", Single, || vec![blade_angle(14.5, speed(1720.0) * 0.18, 0.25 / area(0.36, 0.03))]),
    // The same pump: the whirl that gives 14.5 m, as torque times speed; 1226 kg/m³.
    ("03_euler_textbook-05", Single, || {
        let omega = speed(1720.0);
        vec![torque_and_power(1226.0 * 0.25, 0.18, 9.81 * 14.5 / (omega * 0.18), omega).1]
    }),
    // Counter-swirl of 60° at 47.1 m/s, removed by the rotor at r 0.40 m, 1750 rev/min: inlet whirl against rotation.
    ("03_euler_textbook-10", Single, || {
        let rim = speed(1750.0) * 0.40;
        vec![head((rim, 0.0), (rim, -47.1 * 60_f64.to_radians().tan()), 9.81)]
    }),
    ("03_euler_textbook-13", Single, || vec![backward_pump().1]),
    // Standard gravity in ft/s².
    ("03_euler_textbook-14", Single, || {
        let (u2, c_u2, _) = backward_pump();
        vec![head((u2, c_u2), (0.0, 0.0), 9.80665 / FOOT)]
    }),
    // 1.94 slug/ft³ taken as 999.83 kg/m³ and 745.7 W to the hp, as the recomputed figure has them.
    ("03_euler_textbook-15", Single, || {
        let (_, c_u2, flow) = backward_pump();
        let mass_flow = 999.83 * flow * FOOT.powi(3);
        vec![torque_and_power(mass_flow, 7.0 / 12.0 * FOOT, c_u2 * FOOT, speed(1440.0)).1 / 745.7]
    }),
    // u2 12 m/s, c_r2 1.5 m/s, β2 28°.
    ("03_euler_textbook-19", Single, || vec![head((12.0, whirl(12.0, 1.5, 28.0, 1.0)), (0.0, 0.0), 9.81)]),
    // The solution goes on with its own rounded head of 11.23 m; 3.8 m³/min, r2 0.6 m, so ω = 20 rad/s.
    ("03_euler_textbook-20", Single, || {
        vec![torque_and_power(1000.0 * 3.8 / 60.0, 0.6, 9.81 * 11.23 / 12.0, 12.0 / 0.6).1]
    }),
    ("03_euler_textbook-21", Single, || {
        vec![torque_and_power(1000.0 * 3.8 / 60.0, 0.6, 9.81 * 11.23 / 12.0, 12.0 / 0.6).0]
    }),
    // Radial blades without slip: c_u2 = u2; 2.5 m/s lost at delivery. D2 0.6 m, 550 rev/min.
    ("03_euler_textbook-22", Single, || {
        let rim = speed(550.0) * 0.3;
        vec![head((rim, whirl(rim, 3.5, 90.0, 1.0)), (0.0, 0.0), 9.81) - 2.5 * 2.5 / (2.0 * 9.81)]
    }),
    ("03_euler_textbook-23", Double, || vec![area(0.6, 0.082) * 3.5]),
    // D2 0.37 m, 800 rev/min, c_r2 2.5 m/s, β2 45°.
    ("03_euler_textbook-24", Single, || {
        let rim = speed(800.0) * 0.185;
        vec![head((rim, whirl(rim, 2.5, 45.0, 1.0)), (0.0, 0.0), 9.81)]
    }),
    // Overall efficiency by the core (8 hp of 0.746 kW, 30 l/s, 14 m), then the stated mechanical and volumetric parts
    // taken off.
    ("03_euler_textbook-25", Single, || {
        let overall = efficiency(&running(1000.0 * 9.81 * 14.0, 0.03, 1000.0, 9.81, 8.0 * 746.0));
        vec![overall / (0.96 * 0.97)]
    }),
    ("03_euler_textbook-26", Single, || {
        let (rim, meridional) = ratio_slip_wheel();
        vec![head((rim, whirl(rim, meridional, 30.0, 1.0)), (0.0, 0.0), 9.81)]
    }),
    // The text's slip is the ratio c_u2/c_u2∞; the core's loses (1 − σ)·u2. The same whirl in the core's terms:
    ("03_euler_textbook-27", Single, || {
        let (rim, meridional) = ratio_slip_wheel();
        let without_slip = rim - meridional / 30_f64.to_radians().tan();
        let lost_rim_speed = 1.0 - (1.0 - 0.78) * without_slip / rim;
        vec![head((rim, whirl(rim, meridional, 30.0, lost_rim_speed)), (0.0, 0.0), 9.81)]
    }),
    ("03_euler_textbook-30", Single, || vec![double_suction().1]),
    // 25 m over Euler's head.
    ("03_euler_textbook-31", Single, || vec![25.0 / head(double_suction(), (0.0, 0.0), 9.81)]),
];

pub(crate) const OUT_OF_SCOPE: &[OutOfScope] = &[
    (
        &["03_euler_textbook-03", "03_euler_textbook-11", "03_euler_textbook-12", "03_euler_textbook-29"],
        "inlet blade angle and shockless flow: the core has no inlet triangle, the flow is measured",
    ),
    (
        &["03_euler_textbook-06", "03_euler_textbook-07", "03_euler_textbook-08", "03_euler_textbook-09"],
        "axial blade setting: not in the core",
    ),
    (&["03_euler_textbook-32"], "volumetric efficiency is declared in the profile, leakage is not computed yet"),
];

#[test]
fn published_rows() {
    crate::run("03_euler_textbook", CHECKS);
}

/// The definition trap of example 2.13: the text's ratio used as the core's factor gives another head, so a check that
/// mixed them up would not pass.
#[test]
fn the_two_slip_definitions_differ() {
    let (rim, meridional) = ratio_slip_wheel();
    let mixed_up = head((rim, whirl(rim, meridional, 30.0, 0.78)), (0.0, 0.0), 9.81);
    assert!((mixed_up - 24.06).abs() > 1.0, "{mixed_up}");
}

/// Pre-whirl with the rotation lowers head and torque, against it raises both.
#[test]
fn signs_of_inlet_whirl() {
    let plain = head((20.0, 15.0), (10.0, 0.0), 9.81);
    assert!(head((20.0, 15.0), (10.0, 3.0), 9.81) < plain);
    assert!(head((20.0, 15.0), (10.0, -3.0), 9.81) > plain);
    let torque = |inlet| momentum::stream_torque(10.0, (0.1, 15.0), (0.05, inlet));
    assert!(torque(3.0) < torque(0.0) && torque(-3.0) > torque(0.0));
}
