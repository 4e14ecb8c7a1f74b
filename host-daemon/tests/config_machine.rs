//! Machine files: what a good one becomes, and the exact words for what is wrong with a bad one.

use offcurve::config::{ConfigError, Machine, TimeFormat};
use offcurve_core::{
    machine::{Profile, profile::PROFILE_BYTES, profile::Source},
    sensing::Channel,
};
use std::path::Path;

const GOOD: &str = r#"machine = "Well pump 2"
tag = 2

[fluid]
density = "998.2 kg/m3"

[taps]
suction_bore = "150 mm"
discharge_bore = "125 mm"
discharge_gauge_above_suction_gauge = "0.4 m"

[curve]
speed = "1480 rpm"
flow = "0, 36, 72, 108 m3/h"
head = "40, 38, 34, 28 m"
power = "4, 6, 8.6, 11 kW"

[sensors.speed]
pulses_per_revolution = 60
uncertainty = "0.1 %"

[sensors.flow]
loop_input = 0
range = "0 .. 160 m3/h"
uncertainty = "0.5 % + 0.36 m3/h"
column = "q"
column_unit = "l/s"

[sensors.suction_pressure]
loop_input = 1
range = "-1 .. 1.5 bar"
uncertainty = "7 mbar"

[sensors.discharge_pressure]
loop_input = 2
range = "0 .. 6 bar"
uncertainty = "16 mbar"

[sensors.shaft_torque]
loop_input = 3
range = "0 .. 120 N m"
uncertainty = "2 %"
"#;

const IMPELLER: &str = r#"
[impeller]
outlet_diameter = "315 mm"
outlet_width = "12 mm"
inlet_diameter = "125 mm"
outlet_blade_angle = "25 deg"
blades = 6
blade_thickness = "4 mm"
drag_torque = "6 N m"
volumetric_efficiency = "94 %"
"#;

fn parse(text: &str) -> Result<Machine, ConfigError> {
    Machine::parse(text, Path::new("m.toml"))
}

/// The good file with one piece replaced, which must be there.
fn with(from: &str, to: &str) -> String {
    assert!(GOOD.contains(from), "the good file has no {from:?}");
    GOOD.replacen(from, to, 1)
}

fn error_of(text: &str) -> String {
    parse(text).expect_err(text).to_string()
}

#[test]
fn a_good_file_becomes_si() {
    let machine = parse(GOOD).unwrap();
    let profile = &machine.profile;
    assert_eq!((machine.name.as_str(), profile.machine), ("Well pump 2", 2));
    assert_eq!(profile.density, 998.2);
    // 0.1 % where none is stated.
    assert!((profile.density_deviation - 0.9982).abs() < 1e-6);
    // 1480 rev/min in rad/s.
    assert!((f64::from(profile.reference_speed) - 1480.0 * std::f64::consts::TAU / 60.0).abs() < 1e-5);
    assert_eq!(profile.reference_density, 998.2, "the liquid's density unless the curve states its own");
    let knots = profile.curve.knots();
    let flows: Vec<f32> = knots.iter().map(|knot| knot.flow).collect();
    assert_eq!(flows, [0.0, 0.01, 0.02, 0.03]);
    assert_eq!(knots[2].power, 8600.0);
    assert_eq!(profile.flow.source, Source::Loop { input: 0, low: 0.0, high: 160.0 / 3600.0 });
    assert_eq!((profile.flow.deviation, profile.flow.relative_deviation), (1e-4, 0.005));
    assert_eq!(profile.suction_pressure.source, Source::Loop { input: 1, low: -1e5, high: 1.5e5 });
    assert_eq!(profile.suction_pressure.deviation, 700.0);
    assert_eq!(profile.speed.source, Source::Pulses { per_revolution: 60 });
    assert_eq!(profile.limits.minimum_flow, None);
    assert_eq!(profile.schedule.step_ms(), 100);
    assert_eq!(machine.watch, offcurve::watch::WatchSettings::default());
    let column = machine.columns.channels[Channel::Flow as usize].as_ref().unwrap();
    assert_eq!((column.name.as_str(), column.unit.name()), ("q", "l/s"));
    assert_eq!(machine.columns.time_format, TimeFormat::Seconds);
}

#[test]
fn the_best_efficiency_point_is_the_largest_of_the_curve() {
    let machine = parse(GOOD).unwrap();
    let best = machine.best_efficiency;
    // Q·H/P at the points: 0, 228/3600, 284.7/3600, 274.9/3600 (m³/s·m/kW), so the maximum lies between the last two.
    assert!(best.flow > 72.0 / 3600.0 && best.flow < 108.0 / 3600.0 && !best.declared, "{best:?}");
    let at = |q: f64| {
        let point = machine
            .profile
            .curve
            .at(offcurve_core::quantity::VolumeFlow::from_cubic_metres_per_second(q as f32))
            .unwrap();
        998.2 * 9.806_65 * q * f64::from(point.head.metres()) / f64::from(point.power.watts())
    };
    assert!((best.efficiency - at(best.flow)).abs() < 1e-5);
    for step in [-5e-4, -1e-4, 1e-4, 5e-4] {
        assert!(at(best.flow + step) < best.efficiency, "{step}");
    }
    let declared =
        parse(&with("speed = \"1480 rpm\"", "speed = \"1480 rpm\"\nbest_efficiency_flow = \"80 m3/h\"")).unwrap();
    assert!((declared.best_efficiency.flow - 80.0 / 3600.0).abs() < 1e-12 && declared.best_efficiency.declared);
}

#[test]
fn every_key_can_be_given() {
    let text = format!(
        r#"kind = "centrifugal pump"
{}{IMPELLER}
slip = 0.8
recirculation_onset = "55 %"
uncertainty = "10 %"
[site]
gravity = "9.81 m/s2"
[limits]
minimum_flow = {{ at = "30 %", deadband = "5 %", on_delay = "10 s", off_delay = "1 min" }}
run_out = {{ at = "140 %" }}
torque = {{ at = "0.09 kN m" }}
sensor_delay = "3 s"
[controller]
scan_interval = "2 ms"
estimate_interval = "0.2 s"
record_interval = "1 min"
[watch]
block = "1 min"
head_limit = "3 %"
power_limit = "5 %"
deadband = "20 %"
on_delay = "2 min"
off_delay = "0.25 h"
sensor_delay = "20 s"
[replay]
time_column = "when"
time_format = "rfc3339"
separator = ";"
run_column = "running"
"#,
        with("uncertainty = \"2 %\"", "uncertainty = \"2 %\"\nfrom_drive = true")
    );
    let machine = parse(&text).unwrap();
    let profile = &machine.profile;
    assert_eq!(profile.gravity, 9.81);
    let wheel = profile.impeller.unwrap();
    assert_eq!((wheel.slip_factor, wheel.outlet_radius, wheel.model_deviation), (0.8, 0.1575, 0.1));
    let minimum = profile.limits.minimum_flow.unwrap();
    assert_eq!((minimum.at, minimum.deadband, minimum.on_delay, minimum.off_delay), (0.3, 0.05, 10.0, 60.0));
    assert_eq!(profile.limits.torque.unwrap().at, 90.0);
    assert_eq!(profile.limits.sensor_delay, 3.0);
    let schedule = profile.schedule;
    assert_eq!((schedule.scan_ms, schedule.scans_per_step, schedule.steps_per_record), (2, 100, 300));
    assert!(profile.shaft_torque.from_drive);
    assert_eq!((machine.watch.block, machine.watch.off_delay, machine.watch.head_limit), (60.0, 900.0, 0.03));
    assert_eq!(machine.columns.run.as_deref(), Some("running"));
    assert_eq!((machine.columns.separator, machine.columns.time_format), (b';', TimeFormat::Rfc3339));
}

#[test]
fn an_impeller_gets_the_slip_factor_of_its_dimensions() {
    let machine = parse(&format!("{GOOD}{IMPELLER}")).unwrap();
    let report = machine.impeller.unwrap();
    // 1 − √sin 25°/6^0.7; the radius ratio 0.397 is below the limit exp(−8.16·sin 25°/6) = 0.563.
    let expected = 1.0 - 25_f64.to_radians().sin().sqrt() / 6_f64.powf(0.7);
    assert!(report.by_wiesner && (report.slip_factor - expected).abs() < 1e-12, "{report:?}");
    let (model, promised) = report.torque_at_best.unwrap();
    assert!(model > 0.8 * promised && model < 1.2 * promised, "{report:?}");
    let impeller = machine.profile.impeller.unwrap();
    assert_eq!(impeller.inlet_whirl, 0.0);
    // π·315 mm·12 mm, less 6 blades that each take 4 mm/sin 25° of the circumference.
    let circumference = std::f64::consts::PI * 0.315;
    let free = (circumference - 6.0 * 0.004 / 25_f64.to_radians().sin()) * 0.012;
    assert!((f64::from(impeller.outlet_area) / free - 1.0).abs() < 1e-6, "{} m2, not {free}", impeller.outlet_area);
    assert!(impeller.outlet_area < 0.95 * 0.012 * circumference as f32, "the blades take their part");
}

#[test]
fn a_parsed_profile_survives_its_byte_form() {
    for text in [GOOD.to_owned(), format!("{GOOD}{IMPELLER}")] {
        let profile = parse(&text).unwrap().profile;
        let mut bytes = [0; PROFILE_BYTES];
        let length = profile.encode(&mut bytes).unwrap();
        assert_eq!(Profile::decode(&bytes[..length]), Ok(profile));
    }
}

#[test]
fn mistakes_are_named_with_what_is_allowed() {
    let flow_units = "m3/h, m3/s, l/s, l/min, gpm allowed";
    let table: Vec<(String, String)> = [
        ("0 .. 160 m3/h", "0 .. 160", r#"m.toml:24: sensors.flow.range: "0 .. 160" has no unit; write e.g. "0 .. 160 m3/h" (FLOW)"#),
        ("0 .. 160 m3/h", "0 .. 160 bar", r#"m.toml:24: sensors.flow.range: "0 .. 160 bar": "bar" is no unit of flow (FLOW)"#),
        ("0 .. 160 m3/h", "160 .. 0 m3/h", r#"m.toml:24: sensors.flow.range: "160 .. 0 m3/h" is not a range of flow from low to high; write e.g. "0 .. 45 m3/h" (FLOW)"#),
        ("0 .. 160 m3/h", "160 m3/h", r#"m.toml:24: sensors.flow.range: "160 m3/h" is not a range of flow from low to high; write e.g. "0 .. 45 m3/h" (FLOW)"#),
        ("0 .. 160 m3/h", "0 .. 9e6 m3/h", r#"m.toml:24: sensors.flow.range: "0 .. 9e6 m3/h" is outside -3600000 .. 3600000 m3/h"#),
        ("0.5 % + 0.36 m3/h", "0.5", r#"m.toml:25: sensors.flow.uncertainty: "0.5" has no unit; write e.g. "0.5 % or 0.5 m3/h" (%, FLOW)"#),
        ("0.5 % + 0.36 m3/h", "0.5 % + 1 %", r#"m.toml:25: sensors.flow.uncertainty: "0.5 % + 1 %" is not an uncertainty (a share of the value, a constant part, or both joined by +); write e.g. "0.5 % + 0.4 m3/h" (%, FLOW)"#),
        ("0, 36, 72, 108 m3/h", "0, 36, 36, 108 m3/h", "m.toml:14: curve.flow: 36 m3/h after 36 m3/h: flows must rise from point to point"),
        ("0, 36, 72, 108 m3/h", "0, 36, x, 108 m3/h", r#"m.toml:14: curve.flow: "0, 36, x, 108 m3/h" is not a list of flow with one unit at its end; write e.g. "0, 20, 45 m3/h" (FLOW)"#),
        ("\"0, 36, 72, 108 m3/h\"", "[0, 36, 72, 108]", r#"m.toml:14: curve.flow: an array cannot carry a unit; write one text, e.g. "0, 20, 45 m3/h" (FLOW)"#),
        ("40, 38, 34, 28 m", "40, 38, 34 m", "m.toml:15: curve.head: 3 values for 4 flows; give one for each flow"),
        ("4, 6, 8.6, 11 kW", "4, 6, 5, 11 kW", "m.toml:16: curve.power: point 3 (72 m3/h): these powers make the efficiency 1.331, and it must be below 1; is a unit wrong, or is this the power of the liquid and not of the shaft?"),
        ("\"1480 rpm\"", "1480", r#"m.toml:13: curve.speed: 1480 has no unit; write e.g. "1480 rpm" (rpm, rev/s, rad/s allowed)"#),
        ("1480 rpm", "5 rpm", r#"m.toml:13: curve.speed: "5 rpm" is outside 9.5493 .. 95493 rpm"#),
        ("998.2 kg/m3", "998,2 kg/m3", r#"m.toml:5: fluid.density: "998,2 kg/m3" has a comma; write decimals with a point, as "998.2 kg/m3""#),
        ("998.2 kg/m3", "heavy", r#"m.toml:5: fluid.density: "heavy" is not a density; write e.g. "998.2 kg/m3" (kg/m3, g/cm3, lb/ft3 allowed)"#),
        ("density = \"998.2 kg/m3\"", "densty = \"998.2 kg/m3\"", "m.toml:4: fluid.density: missing; write e.g. density = \"998.2 kg/m3\"\nm.toml:5: fluid.densty: unknown key; did you mean density? allowed here: density, density_uncertainty"),
        ("tag = 2", "tag = 300", "m.toml:2: tag: 300 is not a whole number 0 .. 255"),
        ("tag = 2", "tag = 2\nkind = \"fan\"", r#"m.toml:3: kind: "fan" is not known here; allowed: "centrifugal pump""#),
        ("tag = 2", "tag = 2\ncolour = \"red\"", "m.toml:3: colour: unknown key; allowed here: machine, tag, kind, site, fluid, taps, curve, impeller, sensors, limits, controller, watch, replay"),
        ("tag = 2", "tag = ", "m.toml:2: string values must be quoted, expected literal string"),
        ("loop_input = 1", "loop_input = 0", "m.toml:30: sensors.suction_pressure.loop_input: input 0 is also that of flow"),
        ("loop_input = 1", "loop_input = 8", "m.toml:30: sensors.suction_pressure.loop_input: 8 is not a whole number 0 .. 7"),
        ("pulses_per_revolution = 60\n", "", "m.toml:18: sensors.speed: no source: give pulses_per_revolution for a controller, or column for a recorded file"),
        ("column_unit = \"l/s\"", "", r#"m.toml:22: sensors.flow.column_unit: missing beside column; write e.g. column_unit = "m3/h""#),
        ("column_unit = \"l/s\"", "column_unit = \"bar\"", r#"m.toml:27: sensors.flow.column_unit: "bar" is no unit of flow (FLOW)"#),
        ("discharge_gauge_above_suction_gauge = \"0.4 m\"\n", "", r#"m.toml:7: taps.discharge_gauge_above_suction_gauge: missing; write e.g. discharge_gauge_above_suction_gauge = "150 mm""#),
    ]
    .map(|(from, to, message)| (with(from, to), message.replace("FLOW", flow_units)))
    .to_vec();
    for (text, message) in table {
        assert_eq!(error_of(&text), message);
    }
}

#[test]
fn mistakes_in_optional_parts_are_named() {
    for (extra, message) in [
        (
            "[limits]\nminimum_flow = { at = \"30 m3/h\" }",
            r#"m.toml:44: limits.minimum_flow.at: "30 m3/h": "m3/h" is no unit of share (% allowed)"#,
        ),
        (
            "[limits]\nminimum_flow = \"30 %\"",
            r#"m.toml:44: limits.minimum_flow: "30 %" where a table [limits.minimum_flow] belongs"#,
        ),
        (
            "[limits]\nrun_out = { at = \"60 %\" }\nminimum_flow = { at = \"70 %\" }",
            "m.toml:45: limits.minimum_flow: not below run_out",
        ),
        (
            "[controller]\nestimate_interval = \"0.15 ms\"",
            r#"m.toml:44: controller.estimate_interval: "0.15 ms" is outside 1 .. 10000 ms"#,
        ),
        (
            "[controller]\nestimate_interval = \"1.5 ms\"",
            "m.toml:44: controller.estimate_interval: 0.0015 s is not a whole multiple (1 .. 65535) of scan_interval",
        ),
        (
            "[watch]\nblock = \"1 d\"",
            r#"m.toml:44: watch.block: "1 d": "d" is no unit of time (s, ms, min, h allowed)"#,
        ),
        (
            "[replay]\ntime_format = \"unix\"",
            r#"m.toml:44: replay.time_format: "unix" is not known here; allowed: "seconds", "rfc3339""#,
        ),
        (
            "[curve_fit]\nx = 1",
            "m.toml:43: curve_fit: unknown key; allowed here: machine, tag, kind, site, fluid, taps, curve, impeller, sensors, limits, controller, watch, replay",
        ),
        (
            "[sensors.temperature]\nrange = \"x\"",
            "m.toml:43: sensors.temperature: unknown key; allowed here: speed, flow, suction_pressure, discharge_pressure, shaft_torque",
        ),
    ] {
        assert_eq!(error_of(&format!("{GOOD}{extra}\n")), message);
    }
    let impeller = |from: &str, to: &str| error_of(&format!("{GOOD}{}", IMPELLER.replacen(from, to, 1)));
    assert_eq!(
        impeller("125 mm", "400 mm"),
        "m.toml:47: impeller.inlet_diameter: not smaller than outlet_diameter; this is the eye of a radial impeller"
    );
    assert_eq!(
        impeller("blade_thickness = \"4 mm\"", "blade_thickness = \"4 mm\"\nslip = 1.5"),
        "m.toml:51: impeller.slip: 1.5 is outside 0.1 .. 1 (the lost whirl is (1 - slip) of the rim speed)"
    );
    assert_eq!(
        impeller("blade_thickness = \"4 mm\"", "blade_thickness = \"4 mm\"\nuncertainty = \"3 %\""),
        r#"m.toml:51: impeller.uncertainty: "3 %" is outside 8 .. 100 %"#
    );
    assert_eq!(
        impeller("blade_thickness = \"4 mm\"", "blade_thickness = \"60 mm\""),
        "m.toml:50: impeller.blade_thickness: 6 blades this thick leave 14 % of the outlet free; at least 30 % is expected"
    );
}

#[test]
fn all_mistakes_of_a_file_come_at_once_in_its_order() {
    let text = with("1480 rpm", "1480").replace("0 .. 6 bar", "0 .. 6 m").replace("tag = 2", "tag = -1");
    let ConfigError::Invalid { problems } = parse(&text).unwrap_err() else { panic!("read from a text") };
    let keys: Vec<&str> = problems.iter().map(|problem| problem.key.as_str()).collect();
    assert_eq!(keys, ["tag", "curve.speed", "sensors.discharge_pressure.range"]);
    assert_eq!(error_of("").lines().count(), 5, "name, tag, and three tables: {}", error_of(""));
}

#[test]
fn warnings_say_what_to_look_at() {
    assert_eq!(parse(GOOD).unwrap().warnings, Vec::<String>::new());
    let warned = |text: String| parse(&text).unwrap().warnings;
    let drop_sensor = |name: &str| {
        let start = GOOD.find(&format!("[sensors.{name}]")).unwrap();
        let end = GOOD[start + 1..].find('[').map_or(GOOD.len(), |at| start + 1 + at);
        format!("{}{}", &GOOD[..start], &GOOD[end..])
    };
    for (text, warning) in [
        (
            with("40, 38", "37, 38"),
            "curve.head: head rises with flow between 0 m3/h and 36 m3/h: an unstable branch, where one head belongs to two flows",
        ),
        (
            with("0 .. 160 m3/h", "0 .. 100 m3/h"),
            "sensors.flow.range: ends at 100.0 m3/h, below the curve's largest flow, 108.0 m3/h",
        ),
        (
            with("0 .. 6 bar", "0 .. 3 bar"),
            "sensors.discharge_pressure.range: ends at 3.0 bar, below the curve's largest head with no suction pressure, 3.9 bar",
        ),
        (
            with("0 .. 120 N m", "0 .. 60 N m"),
            "sensors.shaft_torque.range: ends at 60.0 N m, below the curve's largest torque, 71.0 N m",
        ),
        (
            with("4, 6, 8.6, 11 kW", "4, 6, 8.6, 10 kW"),
            "curve: efficiency is still rising at its end, 108 m3/h; the best efficiency point may lie outside: declare best_efficiency_flow",
        ),
        (
            drop_sensor("flow"),
            "sensors.flow: none, so neither head nor shaft power can be compared with the curve, and efficiency is not known",
        ),
        (drop_sensor("speed"), "sensors.speed: none, so nothing can be compared with the curve"),
        (drop_sensor("suction_pressure"), "sensors.suction_pressure: none, so the head is not known and not watched"),
        (
            drop_sensor("shaft_torque"),
            "sensors.shaft_torque: none; shaft power and efficiency are not known, and power is not watched",
        ),
        (
            with("loop_input = 0\n", ""),
            "sensors.flow: has a column but no source, so a controller does not read it; only a replay has it",
        ),
        (
            with("uncertainty = \"2 %\"", "uncertainty = \"0 %\""),
            "sensors.shaft_torque: uncertainty 0; no sensor is that good",
        ),
        (
            format!("{GOOD}[controller]\nestimate_interval = \"50 ms\"\nrecord_interval = \"1 s\"\n"),
            "controller.estimate_interval: 50 ms does not span whole mains periods of both 50 and 60 Hz, as 100 ms does; hum may enter the readings",
        ),
    ] {
        assert_eq!(warned(text), [warning]);
    }
    let slim = format!("{GOOD}{}", IMPELLER.replace("12 mm", "3 mm"));
    let warnings = warned(slim);
    assert!(
        warnings.len() == 1 && warnings[0].starts_with("impeller: at best efficiency the momentum model gives "),
        "{warnings:?}"
    );
}

#[test]
fn a_file_that_is_not_there_or_not_text_is_named() {
    let error = Machine::load(Path::new("no/such/file.toml")).unwrap_err().to_string();
    assert!(error.starts_with("cannot read no/such/file.toml: "), "{error}");
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("big.toml");
    std::fs::write(&path, vec![b'#'; (1 << 20) + 1]).unwrap();
    let error = Machine::load(&path).unwrap_err().to_string();
    assert_eq!(error, format!("{}: larger than 1 MiB: this is no machine or plant file", path.display()));
}

#[test]
fn one_slip_of_syntax_does_not_flood() {
    let error = error_of(&format!("x = {}", "[".repeat(1000)));
    assert!((1..=5).contains(&error.lines().count()) && error.starts_with("m.toml:1: "), "{error}");
}
