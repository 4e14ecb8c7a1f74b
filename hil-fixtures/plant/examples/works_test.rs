//! Prints a works-test table of the healthy waterworks pump at its reference speed, ready for a machine file; then the
//! same pump with a worn ring, and how far the healthy one departs from the affinity laws.
//!
//! Flow m³/h, head m, shaft power kW, efficiency; density as in the plant's default. No instrument error: the
//! table is the model's truth rounded for printing.

use offcurve_plant::{PlantConfig, PlantError, PumpModel};

fn main() -> Result<(), PlantError> {
    let config = PlantConfig::default();
    let pump = PumpModel::new(config.pump.clone())?;
    let speed = config.pump.reference_speed_rpm;
    let clearances = [("healthy", 1.0), ("ring worn to four times", 4.0)];
    for (name, factor) in clearances {
        let clearance = config.pump.ring_clearance_m * factor;
        println!("{name}: {speed} rpm, ring clearance {:.2} mm, {} kg/m3", clearance * 1e3, config.density);
        println!("  flow m3/h   head m   power kW   efficiency   leak m3/h");
        for step in 0..12 {
            let flow_m3h = 120.0 * f64::from(step) / 11.0;
            let point = pump.steady(speed, flow_m3h / 3600.0, clearance, config.density);
            println!(
                "  {flow_m3h:9.2} {:8.2} {:10.3} {:12.4} {:11.2}",
                point.head_m,
                point.shaft_power_w / 1e3,
                point.efficiency.unwrap_or(0.0),
                point.leakage_m3s * 3600.0
            );
        }
    }
    println!("departure of the healthy pump from the affinity laws, carried from {speed} rpm");
    println!("  speed rpm   flow m3/h   head %   power %");
    for ratio in [0.7_f64, 0.75, 0.9] {
        for flow_m3h in [40.0, 60.0, 80.0] {
            let clearance = config.pump.ring_clearance_m;
            let full = pump.steady(speed, flow_m3h / 3600.0, clearance, config.density);
            let part = pump.steady(speed * ratio, flow_m3h * ratio / 3600.0, clearance, config.density);
            println!(
                "  {:9} {:11.1} {:8.2} {:9.2}",
                speed * ratio,
                flow_m3h * ratio,
                (part.head_m / (full.head_m * ratio.powi(2)) - 1.0) * 100.0,
                (part.shaft_power_w / (full.shaft_power_w * ratio.powi(3)) - 1.0) * 100.0
            );
        }
    }
    Ok(())
}
