//! The pump model against physics it must obey and against figures worked by hand.
//!
//! Nothing here is a published pump: the machine is invented. Bounds are what a stable radial machine of this specific
//! speed shows (common practice, no source).

use offcurve_plant::{PumpGeometry, PumpModel, SteadyPoint};

const DENSITY: f64 = 999.1;
const SPEED: f64 = 1480.0;
const HEALTHY: f64 = 0.000_25;

fn healthy() -> PumpModel {
    PumpModel::new(PumpGeometry::default()).unwrap()
}

fn at(pump: &PumpModel, speed: f64, flow_m3h: f64, clearance: f64) -> SteadyPoint {
    pump.steady(speed, flow_m3h / 3600.0, clearance, DENSITY)
}

/// Flow (m³/h) of best efficiency at a speed, to a tenth.
fn best_flow(pump: &PumpModel, speed: f64, clearance: f64) -> f64 {
    let efficiency = |tenth: u32| at(pump, speed, f64::from(tenth) / 10.0, clearance).efficiency.unwrap_or(0.0);
    f64::from((1..1200).max_by(|a, b| efficiency(*a).total_cmp(&efficiency(*b))).unwrap()) / 10.0
}

#[test]
fn blades_alone_give_the_head_worked_by_hand() {
    let geometry = PumpGeometry {
        friction_loss_m: 0.0,
        incidence_loss_m: 0.0,
        recirculation_loss_m: 0.0,
        recirculation_power_w: 0.0,
        ..PumpGeometry::default()
    };
    let pump = PumpModel::new(geometry).unwrap();
    // By hand: ω = 154.985 rad/s, u2 = 24.4102 m/s; ψ' = 0.65·(1 + 25/60) = 0.920833; r2² = 0.02480625, r1² = 0.00390625,
    // p = 0.920833·0.02480625/(6·0.01045) = 0.364318; H(0) = 24.4102²/1.364318/9.80665 = 44.536 m.
    let shut_off = pump.steady(SPEED, 0.0, 0.0, DENSITY);
    assert!((shut_off.head_m - 44.536).abs() < 0.005, "{}", shut_off.head_m);
    // Outlet: free circumference 2π·0.1575 − 6·0.004/sin 25° = 0.932813 m, times 0.0118 m = 0.0110072 m²; at 0.02 m³/s
    // c_m2 = 1.81699, c_m2·cot 25° = 3.89655 m/s; H = 24.4102·(24.4102 − 3.89655)/1.364318/9.80665 = 37.427 m.
    let loaded = pump.steady(SPEED, 0.02, 0.0, DENSITY);
    assert!((loaded.head_m - 37.427).abs() < 0.005, "{}", loaded.head_m);
    assert_eq!(loaded.leakage_m3s, 0.0);
    // Torque beyond disc and bearings is ρQ·Y/ω; the disc and bearings are what is left at zero flow.
    let blade_torque = DENSITY * 0.02 * 37.427 * 9.806_65 / 154.985;
    assert!((loaded.shaft_torque_nm - shut_off.shaft_torque_nm - blade_torque).abs() < 0.01);
}

#[test]
fn the_machine_is_the_one_intended() {
    let pump = healthy();
    let best = best_flow(&pump, SPEED, HEALTHY);
    assert!((76.0..84.0).contains(&best), "best efficiency at {best} m3/h");
    let point = at(&pump, SPEED, best, HEALTHY);
    assert!((31.0..35.0).contains(&point.head_m), "{point:?}");
    assert!((0.74..0.79).contains(&point.efficiency.unwrap()), "{point:?}");
    let leak_share = point.leakage_m3s * 3600.0 / best;
    assert!((0.03..0.08).contains(&leak_share), "ring leakage {leak_share} of the flow");
}

#[test]
fn shaft_power_always_exceeds_hydraulic_power() {
    let pump = healthy();
    for speed in [5.0, 120.0, 400.0, 740.0, 1036.0, 1480.0, 1600.0] {
        for tenth in 0..=1400 {
            for clearance in [0.0, HEALTHY, 0.001, 0.003] {
                let point = at(&pump, speed, f64::from(tenth) / 10.0, clearance);
                assert!(
                    point.shaft_power_w > 0.0 && point.hydraulic_power_w < point.shaft_power_w,
                    "{speed} rpm, {tenth}/10 m3/h, {clearance} m: {point:?}"
                );
                assert!(point.efficiency.is_none_or(|efficiency| efficiency > 0.0 && efficiency < 0.85));
                assert_eq!(point.efficiency.is_some(), tenth > 0 && point.head_m > 0.0);
            }
        }
    }
}

#[test]
fn the_curve_falls_to_run_out_and_power_rises() {
    let pump = healthy();
    for speed in [740.0, 1036.0, 1250.0, 1480.0] {
        let best = best_flow(&pump, speed, HEALTHY);
        let points: Vec<_> = (0..=150).map(|i| at(&pump, speed, best * f64::from(i) / 100.0, HEALTHY)).collect();
        for pair in points.windows(2) {
            assert!(pair[1].head_m < pair[0].head_m, "head must fall at {speed} rpm: {pair:?}");
            assert!(pair[1].shaft_power_w > pair[0].shaft_power_w, "power must rise at {speed} rpm: {pair:?}");
        }
        let rise = points[0].head_m / points[100].head_m;
        assert!((1.1..1.35).contains(&rise), "shut-off over best point {rise}");
    }
}

#[test]
fn a_worn_ring_costs_head_and_power_at_every_flow() {
    let pump = healthy();
    for speed in [1036.0, 1480.0] {
        for flow in [10.0, 30.0, 50.0, 60.0, 75.0, 80.0] {
            let steps: Vec<_> = [1.0, 1.5, 2.0, 3.0, 4.0].map(|factor| at(&pump, speed, flow, HEALTHY * factor)).into();
            for pair in steps.windows(2) {
                assert!(pair[1].head_m < pair[0].head_m, "{speed} {flow}: {pair:?}");
                assert!(pair[1].shaft_power_w > pair[0].shaft_power_w, "{speed} {flow}: {pair:?}");
                assert!(pair[1].efficiency.unwrap() < pair[0].efficiency.unwrap());
                assert!(pair[1].leakage_m3s > pair[0].leakage_m3s);
            }
        }
    }
}

#[test]
fn ring_flow_solves_its_own_equation() {
    // Q_L = c_d·π·d·s·√(2·share·g·H): net specific work is gH at the solved point, so the closed form must hold.
    let (pump, g) = (healthy(), PumpGeometry::default());
    for (speed, flow, clearance) in
        [(1480.0, 80.0, HEALTHY), (1480.0, 0.0, 0.001), (900.0, 30.0, 0.002), (1480.0, 110.0, 0.003)]
    {
        let point = at(&pump, speed, flow, clearance);
        let discharge = (g.ring_entry_loss + g.ring_friction * g.ring_length_m / (2.0 * clearance)).powf(-0.5);
        let expected = discharge
            * std::f64::consts::PI
            * g.ring_diameter_m
            * clearance
            * (2.0 * g.ring_pressure_share * 9.806_65 * point.head_m).sqrt();
        assert!((point.leakage_m3s / expected - 1.0).abs() < 1e-9, "{} against {expected}", point.leakage_m3s);
    }
}

#[test]
fn affinity_holds_nearly_but_not_exactly() {
    let pump = healthy();
    // Bearings weigh most at half speed and little load: allow twice as much there.
    for (ratio, allowed) in [(0.5, 0.10), (0.7, 0.05), (0.85, 0.025), (1.08, 0.02)] {
        for flow in [20.0, 50.0, 80.0, 100.0] {
            let (full, part) = (at(&pump, SPEED, flow, HEALTHY), at(&pump, SPEED * ratio, flow * ratio, HEALTHY));
            let head = part.head_m / (full.head_m * ratio * ratio) - 1.0;
            let power = part.shaft_power_w / (full.shaft_power_w * ratio * ratio * ratio) - 1.0;
            assert!(head.abs() < 0.02, "head off affinity by {head} at {ratio}, {flow}");
            assert!(power.abs() < allowed, "power off affinity by {power} at {ratio}, {flow}");
            // Slower is less efficient, as on every real machine.
            assert_eq!(part.efficiency < full.efficiency, ratio < 1.0);
        }
    }
    let power_at_half =
        at(&pump, 740.0, 40.0, HEALTHY).shaft_power_w / (at(&pump, SPEED, 80.0, HEALTHY).shaft_power_w / 8.0);
    assert!(power_at_half > 1.01, "bearing and Reynolds effects must be there: {power_at_half}");
    let head_at_half = at(&pump, 740.0, 40.0, HEALTHY).head_m / (at(&pump, SPEED, 80.0, HEALTHY).head_m / 4.0);
    assert!((0.98..0.998).contains(&head_at_half), "friction must weigh more at half speed: {head_at_half}");
}

#[test]
fn head_does_not_depend_on_density_and_power_nearly_scales_with_it() {
    let pump = healthy();
    let (light, heavy) = (pump.steady(SPEED, 0.02, HEALTHY, 800.0), pump.steady(SPEED, 0.02, HEALTHY, 1000.0));
    assert!((light.head_m - heavy.head_m).abs() < 1e-9);
    let bearing = 0.5 + 0.9; // bearing and seal torque carry no density
    let ratio = (light.shaft_torque_nm - bearing) / (heavy.shaft_torque_nm - bearing);
    assert!((ratio - 0.8).abs() < 1e-9, "{ratio}");
}

#[test]
fn standstill_and_nonsense_are_finite() {
    let pump = healthy();
    for (speed, flow, clearance) in
        [(0.0, 0.0, HEALTHY), (0.0, 0.02, HEALTHY), (-50.0, 0.01, HEALTHY), (1480.0, -1.0, -1.0), (1480.0, 0.5, 0.01)]
    {
        let point = pump.steady(speed, flow, clearance, DENSITY);
        assert!(point.head_m.is_finite() && point.shaft_torque_nm.is_finite() && point.leakage_m3s >= 0.0, "{point:?}");
        assert!(point.efficiency.is_none(), "no efficiency without speed, flow and head: {point:?}");
    }
    assert!(pump.steady(0.0, 0.02, HEALTHY, DENSITY).head_m < 0.0, "a pump at rest resists flow");
}

#[test]
fn impossible_geometry_is_refused_by_name() {
    let geometry = PumpGeometry { inlet_radius_m: 0.2, ..PumpGeometry::default() };
    let error = PumpModel::new(geometry).unwrap_err();
    assert_eq!(error.to_string(), "plant setting inlet_radius_m is 0.2, allowed is 5 mm to 0.9 of the outer radius");
    assert!(PumpModel::new(PumpGeometry { blades: 20, blade_thickness_m: 0.02, ..PumpGeometry::default() }).is_err());
    assert!(PumpModel::new(PumpGeometry { outlet_angle_deg: f64::NAN, ..PumpGeometry::default() }).is_err());
}
