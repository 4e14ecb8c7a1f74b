//! `offcurve check`: reads a plant or machine file, says what it was understood as, touches nothing else.

use crate::config::{
    self, AnyFile, Columns, Machine, PlantConfig, channel_key,
    units::{Dimension, plain},
};
use offcurve_core::{
    machine::profile::{Limit, Source},
    sensing::Channel,
};
use std::{fmt::Write as _, path::PathBuf, process::ExitCode};

/// Checks a plant or machine file and prints what it was understood as, without touching a port or a store.
///
/// Exit code 0 when the file can be used, notes included; 64 when it cannot.
#[derive(Debug, clap::Args)]
pub struct Check {
    /// The plant file or machine file.
    #[arg(value_name = "FILE")]
    path: PathBuf,
}

impl Check {
    /// Runs the command.
    ///
    /// # Errors
    /// [`config::ConfigError`] with every problem found.
    pub fn run(&self) -> anyhow::Result<ExitCode> {
        super::say(&report(&config::load_any(&self.path)?))?;
        Ok(ExitCode::SUCCESS)
    }
}

/// What a file was understood as, for a person to verify.
#[must_use]
pub fn report(file: &AnyFile) -> String {
    match file {
        AnyFile::Machine(machine) => machine_report(machine),
        AnyFile::Plant(plant) => plant_report(plant),
    }
}

fn plant_report(plant: &PlantConfig) -> String {
    let mut out = String::new();
    // Writing to a String cannot fail.
    let _ = writeln!(out, "plant {:?}, records in {}", plant.name, plant.store.display());
    for controller in &plant.controllers {
        let _ =
            writeln!(out, "controller {:?} at {}, {} Bd", controller.name, controller.port.display(), controller.baud);
    }
    for controller in &plant.controllers {
        let _ = write!(out, "\n{}", machine_report(&controller.machine));
    }
    out
}

/// A value in the first unit of its dimension, or in the named one.
fn show(dimension: Dimension, si: f64, unit: &str) -> String {
    let unit = dimension.unit(unit).unwrap_or(&dimension.units()[0]);
    format!("{} {}", rounded(unit.from_si(si)), unit.name())
}

/// Four significant digits: enough to recognise a figure of a data sheet.
fn rounded(value: f64) -> String {
    let scale = 10_f64.powf(3.0 - value.abs().max(1e-300).log10().floor());
    let cut = (value * scale).round() / scale;
    plain(if cut.is_finite() { cut } else { value })
}

fn percent(share: f64) -> String {
    show(Dimension::Share, share, "%")
}

fn machine_report(machine: &Machine) -> String {
    let mut out = String::new();
    let profile = &machine.profile;
    let mut line = |label: &str, text: String| {
        let _ = writeln!(out, "  {label:<22} {text}");
    };
    let (gravity, density) = (f64::from(profile.gravity), f64::from(profile.density));
    line(
        "liquid",
        format!(
            "{}, standard uncertainty {}; gravity {}",
            show(Dimension::Density, density, "kg/m3"),
            show(Dimension::Density, f64::from(profile.density_deviation), "kg/m3"),
            show(Dimension::Acceleration, gravity, "m/s2")
        ),
    );
    let speed = f64::from(profile.reference_speed);
    let (first, last) = profile.curve.flow_range();
    line(
        "curve",
        format!(
            "{} points from {} to {} at {} and {}",
            profile.curve.knots().len(),
            show(Dimension::Flow, f64::from(first.cubic_metres_per_second()), "m3/h"),
            show(Dimension::Flow, f64::from(last.cubic_metres_per_second()), "m3/h"),
            show(Dimension::Speed, speed, "rpm"),
            show(Dimension::Density, f64::from(profile.reference_density), "kg/m3")
        ),
    );
    if let Some(shut_off) = profile.curve.knots().first() {
        let head = show(Dimension::Head, f64::from(shut_off.head), "m");
        line(if shut_off.flow == 0.0 { "shut-off head" } else { "head at first point" }, head);
    }
    line(
        "curve uncertainty",
        format!(
            "head {}, power {} (standard, relative)",
            percent(f64::from(profile.head_curve_deviation)),
            percent(f64::from(profile.power_curve_deviation))
        ),
    );
    let best = &machine.best_efficiency;
    line(
        "best efficiency point",
        format!(
            "{} ({}), {}, {}, efficiency {}",
            show(Dimension::Flow, best.flow, "m3/h"),
            if best.declared { "declared" } else { "found on the curve" },
            show(Dimension::Head, best.head, "m"),
            show(Dimension::Power, best.power, "kW"),
            percent(best.efficiency)
        ),
    );
    // n·√Q/H^0.75 in rev/min, m³/s, m: the form of European practice; for one stage with one inlet.
    let rpm = speed * 30.0 / std::f64::consts::PI;
    line(
        "specific speed",
        format!("{} (rev/min, m3/s, m; one stage, one inlet)", rounded(rpm * best.flow.sqrt() / best.head.powf(0.75))),
    );
    let velocity = f64::from(profile.taps.velocity_head) * best.flow * best.flow;
    line(
        "taps",
        format!(
            "discharge gauge {} above the suction gauge; velocity head {} at best efficiency",
            show(Dimension::Length, f64::from(profile.taps.elevation), "m"),
            show(Dimension::Length, velocity, "m")
        ),
    );
    match &machine.impeller {
        Some(wheel) => line(
            "impeller",
            format!(
                "slip factor {} ({}), {} of the outlet free, area {} cm2{}",
                rounded(wheel.slip_factor),
                if wheel.by_wiesner { "Wiesner" } else { "given" },
                percent(wheel.blockage_factor),
                rounded(wheel.outlet_area * 1e4),
                wheel.torque_at_best.map_or_else(String::new, |(model, promised)| format!(
                    "; at best efficiency the momentum model gives {}, the curve {}",
                    show(Dimension::Torque, model, "N m"),
                    show(Dimension::Torque, promised, "N m")
                ))
            ),
        ),
        None => line("impeller", "not described: no momentum torque".to_owned()),
    }
    for channel in Channel::ALL {
        line(channel_key(channel), sensor_text(machine, channel));
    }
    let limits = &profile.limits;
    let limit = |limit: &Option<Limit>, dimension: Dimension, unit: &str| match limit {
        None => "not declared".to_owned(),
        Some(limit) => format!(
            "{}, deadband {}, on after {}, off after {}",
            show(dimension, f64::from(limit.at), unit),
            show(dimension, f64::from(limit.deadband), unit),
            show(Dimension::Time, f64::from(limit.on_delay), "s"),
            show(Dimension::Time, f64::from(limit.off_delay), "s")
        ),
    };
    line("minimum flow", limit(&limits.minimum_flow, Dimension::Share, "%"));
    line("run-out", limit(&limits.run_out, Dimension::Share, "%"));
    line("torque limit", limit(&limits.torque, Dimension::Torque, "N m"));
    let schedule = profile.schedule;
    line(
        "controller",
        format!(
            "scan each {} ms, estimate each {} ms, record each {} ms",
            schedule.scan_ms,
            schedule.step_ms(),
            schedule.step_ms().saturating_mul(u32::from(schedule.steps_per_record))
        ),
    );
    line("watched", watched(machine));
    let watch = &machine.watch;
    line(
        "off-curve alarm",
        format!(
            "beyond {} of head or {} of power, blocks of {}, on after {}, off after {}, deadband {}",
            percent(watch.head_limit),
            percent(watch.power_limit),
            show(Dimension::Time, watch.block, "s"),
            show(Dimension::Time, watch.on_delay, "s"),
            show(Dimension::Time, watch.off_delay, "s"),
            percent(watch.deadband)
        ),
    );
    line("sensor alarm", format!("after {} without a value", show(Dimension::Time, watch.sensor_delay, "s")));
    line("recorded files", columns_text(&machine.columns));
    let mut text =
        format!("machine {:?}, tag {}, from {}\n{out}", machine.name, profile.machine, machine.file.display());
    if machine.warnings.is_empty() {
        text.push_str("  no notes\n");
    }
    for warning in &machine.warnings {
        let _ = writeln!(text, "  note: {warning}");
    }
    text
}

fn sensor_text(machine: &Machine, channel: Channel) -> String {
    let setup = machine.profile.channel(channel);
    let (dimension, unit) = match channel {
        Channel::Speed => (Dimension::Speed, "rpm"),
        Channel::Flow => (Dimension::Flow, "m3/h"),
        Channel::SuctionPressure | Channel::DischargePressure => (Dimension::Pressure, "bar"),
        Channel::ShaftTorque => (Dimension::Torque, "N m"),
    };
    let mut text = match setup.source {
        Source::NotFitted if machine.columns.channels[channel as usize].is_none() => return "not fitted".to_owned(),
        Source::NotFitted => "only in recorded files".to_owned(),
        Source::Loop { input, low, high } => format!(
            "loop input {input}, 4 mA is {}, 20 mA is {}",
            show(dimension, f64::from(low), unit),
            show(dimension, f64::from(high), unit)
        ),
        Source::Pulses { per_revolution } => format!("{per_revolution} pulses per revolution"),
    };
    let relative = (setup.relative_deviation > 0.0).then(|| percent(f64::from(setup.relative_deviation)));
    let constant = (setup.deviation > 0.0).then(|| show(dimension, f64::from(setup.deviation), unit));
    let parts: Vec<String> = relative.into_iter().chain(constant).collect();
    let none = || "0".to_owned();
    let _ = write!(
        text,
        "; standard uncertainty {}",
        parts.into_iter().reduce(|a, b| format!("{a} + {b}")).unwrap_or_else(none)
    );
    if setup.from_drive {
        text.push_str("; the drive's own value, not an instrument's");
    }
    text
}

/// What can be compared with the sensors there are.
fn watched(machine: &Machine) -> String {
    let profile = &machine.profile;
    let has = |channel: Channel| {
        profile.channel(channel).source != Source::NotFitted || machine.columns.channels[channel as usize].is_some()
    };
    let place = has(Channel::Speed) && has(Channel::Flow);
    let mut what = Vec::new();
    if place && has(Channel::SuctionPressure) && has(Channel::DischargePressure) {
        what.push("head against the curve");
    }
    if place && has(Channel::ShaftTorque) {
        what.push("shaft power against the curve");
    }
    if Channel::ALL.into_iter().any(has) {
        what.push("failed sensors");
    }
    if what.is_empty() { "nothing: there are no sensors".to_owned() } else { what.join(", ") }
}

fn columns_text(columns: &Columns) -> String {
    let named: Vec<String> = Channel::ALL
        .into_iter()
        .zip(&columns.channels)
        .filter_map(|(channel, column)| {
            let column = column.as_ref()?;
            Some(format!("{} = {:?} in {}", channel_key(channel), column.name, column.unit.name()))
        })
        .collect();
    if named.is_empty() {
        return "no columns named: this machine cannot be replayed".to_owned();
    }
    format!("time = {:?}, {}", columns.time, named.join(", "))
}
