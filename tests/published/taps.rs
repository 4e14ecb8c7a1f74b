//! Velocity heads at the taps against ISO 9906's form (clause from memory): `(v_d² − v_s²)/2g`, `v = 4Q/(πD²)`.

use core::f64::consts::PI;
use offcurve_core::{estimate::estimate, head::Taps, quantity::Quantity};
use offcurve_tests::fixtures::{self, Shape};

/// Tolerance: one f64 constant rounded to f32, and the sums of the head in f32, 1e-6 of its terms.
#[test]
fn head_counts_velocity_and_height() {
    for (suction_bore, discharge_bore, elevation) in [(0.125, 0.1, 0.4), (0.1, 0.125, -0.3), (0.2, 0.05, 1.2)] {
        let shape = Shape { suction_bore, discharge_bore, elevation, ..Shape::WATERWORKS };
        let (flow, suction, discharge) = (0.022, -12_000.0, 310_000.0);
        let velocity = |bore: f64| 4.0 * flow / (PI * bore * bore);
        let kinetic = (velocity(discharge_bore).powi(2) - velocity(suction_bore).powi(2)) / (2.0 * shape.gravity);
        let wanted = (discharge - suction) / (shape.density * shape.gravity) + elevation + kinetic;
        let readings = [None, Some((flow, 1e-4)), Some((suction, 100.0)), Some((discharge, 100.0)), None];
        let got = f64::from(
            estimate(&fixtures::sample(readings), &shape.profile()).head.expect("gauges and flow suffice").value.si(),
        );
        assert!((got - wanted).abs() < 1e-6 * (wanted.abs() + kinetic.abs()), "{got} for {wanted}");
    }
    assert_eq!(Taps::from_bores(0.1, 0.1, 0.0, 9.81).velocity_head, 0.0);
}
