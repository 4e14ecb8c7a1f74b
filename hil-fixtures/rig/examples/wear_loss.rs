//! What the wear scenario takes from the pump, and how fast the bench runs: figures for whoever tunes an alarm.
//!
//! First the truth at two speeds, healthy and worn, where pump and system meet (unrest of the process switched off);
//! head and power are also compared with the healthy pump at the same speed and flow, as a monitor would. Then ten
//! hours of the healthy scenario at 100 scans a second against the wall clock.

use std::time::Instant;

use offcurve_plant::Plant;
use offcurve_rig::bench::Bench;
use offcurve_rig::converter::select_frame;
use offcurve_rig::scenario::{Action, Scenario};

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let scenario = Scenario::built_in("waterworks-wear")?;
    let worn = scenario.events.iter().find_map(|event| match event.action {
        Action::RingClearance { to_m, .. } => Some(to_m),
        _ => None,
    });
    let worn = worn.ok_or("the scenario opens no ring")?;
    println!("speed rpm  ring mm  flow m3/h  head m  power kW  efficiency  torque N m  suction bar  discharge bar");
    for speed in [1480.0, 1110.0] {
        for clearance in [scenario.plant.pump.ring_clearance_m, worn] {
            let mut config = scenario.plant.clone();
            config.system.demand_noise = 0.0;
            config.system.level_noise_m = 0.0;
            config.system.level_swing_m = 0.0;
            config.speed_rpm = speed;
            let mut plant = Plant::new(&config, scenario.seed)?;
            plant.set_ring_clearance(clearance);
            for _ in 0..6000 {
                plant.step(0.02);
            }
            let truth = plant.truth();
            println!(
                "{speed:9} {:8.2} {:10.2} {:7.2} {:9.3} {:11.4} {:11.2} {:12.3} {:14.3}",
                clearance * 1e3,
                truth.flow_m3s * 3600.0,
                truth.head_m,
                truth.shaft_power_w / 1e3,
                truth.efficiency.unwrap_or(f64::NAN),
                truth.shaft_torque_nm,
                truth.suction_pa_gauge / 1e5,
                truth.discharge_pa_gauge / 1e5,
            );
            let new = plant.pump().steady(speed, truth.flow_m3s, config.pump.ring_clearance_m, config.density);
            println!(
                "          against a new pump at this flow: head {:+.2} %, power {:+.2} %, efficiency {:+.4}",
                (truth.head_m / new.head_m - 1.0) * 100.0,
                (truth.shaft_power_w / new.shaft_power_w - 1.0) * 100.0,
                truth.efficiency.unwrap_or(f64::NAN) - new.efficiency.unwrap_or(f64::NAN),
            );
        }
    }

    let mut bench = Bench::new(&Scenario::built_in("waterworks-healthy")?)?;
    let mosi: Vec<u8> = (0..9).flat_map(select_frame).collect();
    let mut miso = vec![0; mosi.len()];
    for (interval_ms, hours) in [(10, 10.0), (1, 1.0)] {
        bench.set_scan_interval(interval_ms);
        let (started, from_s) = (Instant::now(), bench.time_s());
        let mut scans = 0_u64;
        while bench.time_s() - from_s < hours * 3600.0 {
            bench.scan_spi(&mosi, &mut miso);
            scans += 1;
        }
        let wall = started.elapsed().as_secs_f64();
        println!(
            "{hours} h at {interval_ms} ms: {scans} scans in {wall:.2} s, {:.2} us a scan",
            wall / scans as f64 * 1e6
        );
    }
    Ok(())
}
