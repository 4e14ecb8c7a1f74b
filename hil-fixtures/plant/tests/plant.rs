//! The plant in motion: settled start, repeatability, check valve, unrest of the declared kind.

use offcurve_plant::drive::DriveConfig;
use offcurve_plant::system::SystemConfig;
use offcurve_plant::{Plant, PlantConfig, Truth};

fn quiet() -> PlantConfig {
    let system = SystemConfig { demand_noise: 0.0, level_noise_m: 0.0, level_swing_m: 0.0, ..SystemConfig::default() };
    PlantConfig { system, ..PlantConfig::default() }
}

fn run(plant: &mut Plant, seconds: f64) -> Truth {
    for _ in 0..(seconds / 0.02).round() as u32 {
        plant.step(0.02);
    }
    plant.truth()
}

/// Mean, standard deviation and the lag at which the autocorrelation falls below 1/e, in samples.
fn statistics(values: &[f64]) -> (f64, f64, usize) {
    let mean = values.iter().sum::<f64>() / values.len() as f64;
    let covariance = |lag: usize| {
        let pairs = values.iter().zip(&values[lag..]);
        pairs.map(|(a, b)| (a - mean) * (b - mean)).sum::<f64>() / (values.len() - lag) as f64
    };
    let variance = covariance(0);
    let lag =
        (1..values.len() / 10).find(|lag| covariance(*lag) < variance / std::f64::consts::E).unwrap_or(usize::MAX);
    (mean, variance.sqrt(), lag)
}

#[test]
fn starts_settled_where_pump_and_system_meet() {
    let mut plant = Plant::new(&quiet(), 1).unwrap();
    let start = plant.truth();
    let later = run(&mut plant, 60.0);
    assert!((start.flow_m3s / later.flow_m3s - 1.0).abs() < 1e-6);
    let relative = later.flow_m3s / (80.0 / 3600.0);
    let wanted = 12.0 + (12.0 + 8.0 + 0.8) * relative * relative;
    assert!((later.head_m - wanted).abs() < 1e-3, "pump gives {} m, system wants {wanted} m", later.head_m);
}

#[test]
fn gauges_give_back_the_head() {
    let mut plant = Plant::new(&PlantConfig::default(), 3).unwrap();
    let truth = run(&mut plant, 30.0);
    let velocity = |bore: f64| truth.flow_m3s * 4.0 / (std::f64::consts::PI * bore * bore);
    let velocity_heads = (velocity(0.125).powi(2) - velocity(0.150).powi(2)) / (2.0 * 9.806_65);
    let head = (truth.discharge_pa_gauge - truth.suction_pa_gauge) / (999.1 * 9.806_65) + 0.4 + velocity_heads;
    assert!((head - truth.head_m).abs() < 1e-9, "{head} against {}", truth.head_m);
    let hydraulic = 999.1 * 9.806_65 * truth.flow_m3s * truth.head_m;
    assert!((hydraulic / truth.shaft_power_w - truth.efficiency.unwrap()).abs() < 1e-6);
}

#[test]
fn a_seed_repeats_bit_for_bit_and_seeds_differ() {
    let record = |seed: u64| {
        let mut plant = Plant::new(&PlantConfig::default(), seed).unwrap();
        (0..500)
            .map(|i| {
                plant.set_speed(if i < 250 { 1480.0 } else { 1100.0 });
                plant.step(0.02);
                let truth = plant.truth();
                [truth.flow_m3s, truth.head_m, truth.suction_pa_gauge, truth.shaft_torque_nm].map(f64::to_bits)
            })
            .collect::<Vec<_>>()
    };
    assert_eq!(record(5), record(5));
    let (a, b) = (record(5), record(6));
    let same = a.iter().zip(&b).filter(|(a, b)| a[0] == b[0]).count();
    assert!(same < 5, "{same} of 500 flows agree between two seeds");
}

#[test]
fn the_check_valve_holds() {
    let mut plant = Plant::new(&PlantConfig::default(), 8).unwrap();
    assert!(plant.truth().flow_m3s > 0.015);
    plant.set_run(false);
    let mut lowest = f64::MAX;
    for _ in 0..6000 {
        plant.step(0.02);
        lowest = lowest.min(plant.truth().flow_m3s);
    }
    let stopped = plant.truth();
    assert_eq!((lowest, stopped.flow_m3s, stopped.speed_rpm, stopped.running), (0.0, 0.0, 0.0, false));
    assert!(stopped.efficiency.is_none() && stopped.shaft_torque_nm.abs() < 1e-9);
    // Too slow for the static lift: the pump turns against a shut check valve.
    plant.set_run(true);
    plant.set_speed(650.0);
    let churning = run(&mut plant, 60.0);
    assert_eq!(churning.flow_m3s, 0.0);
    assert!(churning.head_m > 5.0 && churning.head_m < 11.0 && churning.shaft_torque_nm > 2.0, "{churning:?}");
    plant.set_speed(1480.0);
    assert!(run(&mut plant, 90.0).flow_m3s > 0.015);
}

#[test]
fn speed_follows_the_ramp_and_torque_shows_it() {
    let drive = DriveConfig { ramp_rpm_per_s: 40.0, ..DriveConfig::default() };
    let mut plant = Plant::new(&PlantConfig { drive, ..quiet() }, 1).unwrap();
    let before = plant.truth();
    plant.set_speed(1080.0);
    let middle = run(&mut plant, 5.0);
    // 5 s down the ramp less the lag of 0.4 s.
    assert!((middle.speed_rpm - (1480.0 - 40.0 * 4.6)).abs() < 1.0, "{}", middle.speed_rpm);
    let steady = plant.pump().steady(middle.speed_rpm, middle.flow_m3s, middle.ring_clearance_m, plant.density());
    let inertia = 0.12 * 40.0 * std::f64::consts::PI / 30.0;
    assert!((steady.shaft_torque_nm - middle.shaft_torque_nm - inertia).abs() < 1e-3);
    let after = run(&mut plant, 30.0);
    assert!((after.speed_rpm - 1080.0).abs() < 1e-6);
    let turned = after.revolutions - before.revolutions;
    // Area under the speed: a 10 s ramp, 25 s at 1080, and the lag of 0.4 s over a fall of 400. The reference moves at
    // the start of each 20 ms step, so it runs half a step ahead of the smooth ramp: 400 · 0.01 less.
    let expected = (1280.0 * 10.0 + 1080.0 * 25.0 + 400.0 * 0.4 - 400.0 * 0.01) / 60.0;
    assert!((turned - expected).abs() < 0.01, "{turned} against {expected}");
}

#[test]
fn closing_the_valve_costs_flow_and_raises_head() {
    let mut plant = Plant::new(&quiet(), 1).unwrap();
    let open = plant.truth();
    plant.set_valve(0.5);
    let throttled = run(&mut plant, 60.0);
    assert!(throttled.flow_m3s < 0.9 * open.flow_m3s && throttled.head_m > open.head_m + 1.0);
    plant.set_valve(0.0);
    let shut = run(&mut plant, 60.0);
    assert!(shut.flow_m3s < 0.01 * open.flow_m3s, "{}", shut.flow_m3s);
}

#[test]
fn flow_and_pressures_wander_together_with_the_declared_memory() {
    let mut plant = Plant::new(&PlantConfig::default(), 21).unwrap();
    let truths: Vec<_> = (0..36_000).map(|_| run(&mut plant, 1.0)).collect();
    let flows: Vec<_> = truths.iter().map(|truth| truth.flow_m3s * 3600.0).collect();
    let suctions: Vec<_> = truths.iter().map(|truth| truth.suction_pa_gauge).collect();
    let (mean, deviation, memory) = statistics(&flows);
    assert!((75.0..85.0).contains(&mean), "mean flow {mean} m3/h");
    assert!((0.8..3.0).contains(&deviation), "flow wanders by {deviation} m3/h");
    assert!((20..=60).contains(&memory), "flow remembers {memory} s");
    let (_, deviation, memory) = statistics(&suctions);
    assert!((500.0..1500.0).contains(&deviation), "suction wanders by {deviation} Pa");
    assert!((20..=60).contains(&memory), "suction remembers {memory} s");
    // More flow means less head: the points move along the curve, not off it.
    let (flow_mean, head_mean) = (mean, truths.iter().map(|truth| truth.head_m).sum::<f64>() / truths.len() as f64);
    let joint: f64 = truths.iter().map(|t| (t.flow_m3s * 3600.0 - flow_mean) * (t.head_m - head_mean)).sum();
    assert!(joint < 0.0);
}

#[test]
fn a_step_that_is_no_step_does_nothing() {
    let mut plant = Plant::new(&PlantConfig::default(), 2).unwrap();
    let before = plant.truth();
    for dt in [0.0, -1.0, f64::NAN] {
        plant.step(dt);
    }
    plant.set_speed(f64::NAN);
    plant.set_valve(f64::NAN);
    assert_eq!(plant.truth(), before);
}

#[test]
fn settings_out_of_range_are_named() {
    let error = Plant::new(&PlantConfig { density: 50.0, ..PlantConfig::default() }, 1).unwrap_err();
    assert_eq!(error.to_string(), "plant setting density is 50, allowed is 300 to 2000 kg/m3");
    let error = Plant::new(&PlantConfig { speed_rpm: 1700.0, ..PlantConfig::default() }, 1).unwrap_err();
    assert_eq!(error.name, "speed_rpm");
}
