//! Slip factors and the radius ratio that limits Wiesner's, in f64 on the host.

use crate::Check;
use offcurve_core::machine::design::{stanitz, wiesner, wiesner_limit};
use offcurve_tests::published::Arithmetic::Double;

/// Well below every limit in the rows (the smallest is 0.44).
const SMALL_EYE: f64 = 0.3;

pub(crate) const CHECKS: &[Check] = &[
    // The blade count that gives 0.78: the factor is 1 − c/z, so one value of it gives c.
    ("03_euler_textbook-28", Double, || vec![(1.0 - stanitz(1)) / (1.0 - 0.78)]),
    ("03_euler_textbook-33", Double, || vec![wiesner(90_f64.to_radians(), 10, SMALL_EYE)]),
    ("03_euler_textbook-34", Double, || vec![wiesner_limit(90_f64.to_radians(), 10)]),
    ("03_euler_textbook-35", Double, || vec![wiesner(90_f64.to_radians(), 20, SMALL_EYE)]),
    ("03_euler_textbook-36", Double, || vec![wiesner_limit(90_f64.to_radians(), 20)]),
    ("03_euler_textbook-37", Double, || vec![wiesner(30_f64.to_radians(), 6, SMALL_EYE)]),
    ("03_euler_textbook-38", Double, || vec![wiesner_limit(30_f64.to_radians(), 6)]),
    ("03_euler_textbook-39", Double, || vec![wiesner(22.5_f64.to_radians(), 7, SMALL_EYE)]),
    ("03_euler_textbook-40", Double, || vec![wiesner_limit(22.5_f64.to_radians(), 7)]),
    ("03_euler_textbook-41", Double, || vec![wiesner(40_f64.to_radians(), 7, SMALL_EYE)]),
    ("03_euler_textbook-42", Double, || vec![wiesner_limit(40_f64.to_radians(), 7)]),
    ("03_euler_textbook-43", Double, || vec![stanitz(20)]),
];

#[test]
fn published_rows() {
    crate::run("03_euler_textbook", CHECKS);
}

/// Above the limit the factor falls, meets the base at the limit and 0 where the eye is as wide as the wheel.
#[test]
fn the_limit_is_where_the_factor_starts_to_fall() {
    for (degrees, blades) in [(90_f64, 10), (30.0, 6), (22.5, 7)] {
        let angle = degrees.to_radians();
        let limit = wiesner_limit(angle, blades);
        let base = wiesner(angle, blades, SMALL_EYE);
        assert_eq!(wiesner(angle, blades, limit - 1e-6), base);
        let (near, far) = (wiesner(angle, blades, limit + 0.05), wiesner(angle, blades, limit + 0.2));
        assert!(far < near && near < base, "{degrees}°, {blades} blades: {far} {near} {base}");
        assert!(wiesner(angle, blades, 1.0).abs() < 1e-15);
    }
}
