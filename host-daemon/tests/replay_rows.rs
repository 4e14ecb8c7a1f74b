//! Replay: rows in, rows out. Small hand-made files with the exact rows expected, and every kind of dirt.

use offcurve::{
    config::Machine,
    replay::{self, ESTIMATE_NAMES, Options, ReplayError, Summary},
};
use offcurve_core::{
    board::{Direction, RunState},
    conditioning::ConditionedSample,
    deviation::Deviation,
    estimate::{Estimate, Outcome, estimate},
    quantity::Quantity,
    sensing::{Channel, ChannelFault, ChannelValue},
};
use proptest::prelude::*;
use std::{
    fs,
    path::{Path, PathBuf},
};

const HEADER: &str = "time,speed_rpm,flow_m3h,suction_bar,discharge_bar,torque_Nm";

fn machine() -> Machine {
    Machine::load(&Path::new(env!("CARGO_MANIFEST_DIR")).join("demo/well-pump-2.toml")).unwrap()
}

/// The demo machine with its file changed.
fn machine_with(changes: &[(&str, &str)]) -> Machine {
    let mut text = include_str!("../demo/well-pump-2.toml").to_owned();
    for (from, to) in changes {
        assert!(text.contains(from), "the demo machine has no {from:?}");
        text = text.replacen(from, to, 1);
    }
    Machine::parse(&text, Path::new("m.toml")).unwrap()
}

struct Replayed {
    summary: Summary,
    /// Header and rows of estimates.csv, cut into fields.
    header: Vec<String>,
    rows: Vec<Vec<String>>,
    alarms: String,
    folder: tempfile::TempDir,
}

fn replay(machine: &Machine, input: &str) -> Replayed {
    replay_bytes(machine, input.as_bytes())
}

fn replay_bytes(machine: &Machine, input: &[u8]) -> Replayed {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("run.csv");
    fs::write(&file, input).unwrap();
    let out = folder.path().join("out");
    let summary = replay::run(&Options { machine, input: &file, out: &out, estimates_only: false }).unwrap();
    let mut reader = csv::ReaderBuilder::new().has_headers(false).from_path(out.join("estimates.csv")).unwrap();
    let mut rows: Vec<Vec<String>> = reader
        .byte_records()
        .map(|row| row.unwrap().iter().map(|field| String::from_utf8_lossy(field).into_owned()).collect())
        .collect();
    let header = rows.remove(0);
    let alarms = fs::read_to_string(out.join("alarms.csv")).unwrap();
    Replayed { summary, header, rows, alarms, folder }
}

fn error_of(machine: &Machine, input: &str) -> (String, ReplayError) {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("run.csv");
    fs::write(&file, input).unwrap();
    let out = folder.path().join("out");
    let error = replay::run(&Options { machine, input: &file, out: &out, estimates_only: false }).unwrap_err();
    (error.to_string().replace(&format!("{}/", folder.path().display()), ""), error)
}

/// The fields that an estimate should give, formatted by other code: Rust's own shortest form.
fn fields(estimate: &Estimate) -> Vec<(f32, f32, String)> {
    fn one<T: Quantity>(outcome: &Outcome<T>) -> (f32, f32, String) {
        match outcome {
            Ok(found) => (found.value.si(), found.deviation.si(), found.source.name().to_owned()),
            Err(missing) => (f32::NAN, f32::NAN, missing.name().to_owned()),
        }
    }
    vec![
        one(&estimate.head),
        one(&estimate.hydraulic_power),
        one(&estimate.momentum_torque),
        one(&estimate.shaft_torque),
        one(&estimate.shaft_power),
        one(&estimate.efficiency),
        one(&estimate.relative_flow),
        one(&estimate.expected_head),
        one(&estimate.expected_power),
        one(&estimate.head_residual),
        one(&estimate.power_residual),
    ]
}

fn assert_row(row: &[String], time: &str, expected: &Estimate) {
    assert_eq!(row.len(), 1 + 3 * ESTIMATE_NAMES.len());
    assert_eq!(row[0], time);
    for ((got, (value, deviation, source)), (name, _)) in row[1..].chunks(3).zip(fields(expected)).zip(ESTIMATE_NAMES) {
        assert_eq!(got[2], source, "{name}");
        if value.is_nan() {
            assert_eq!((got[0].as_str(), got[1].as_str()), ("", ""), "{name}");
        } else {
            // Bit for bit: the shortest form of an f32 leads back to it.
            assert_eq!(got[0].parse::<f32>().unwrap().to_bits(), value.to_bits(), "{name}");
            assert_eq!(got[1].parse::<f32>().unwrap().to_bits(), deviation.to_bits(), "{name}");
        }
    }
}

fn value(channel: Channel, value: f64, deviation: f64) -> Result<ChannelValue, ChannelFault> {
    let coded = Deviation::at_least(deviation as f32, channel.deviation_base());
    Ok(ChannelValue { value: value as f32, deviation: coded, saturated: false, age: 0 })
}

/// The sample of `1480,78,0.2,3.4,58` in the demo machine's units; uncertainties as its file states them.
fn sample() -> ConditionedSample {
    let omega = 1480.0 * std::f64::consts::TAU / 60.0;
    let flow: f64 = 78.0 / 3600.0;
    ConditionedSample {
        speed: value(Channel::Speed, omega, 0.001 * omega),
        flow: value(Channel::Flow, flow, (0.005 * flow).hypot(0.35 / 3600.0)),
        suction_pressure: value(Channel::SuctionPressure, 0.2e5, 700.0),
        discharge_pressure: value(Channel::DischargePressure, 3.4e5, 1600.0),
        shaft_torque: value(Channel::ShaftTorque, 58.0, (0.021_f64 * 58.0).hypot(0.07)),
        run: RunState::Unknown,
        direction: Direction::Unknown,
    }
}

#[test]
fn a_row_becomes_the_estimate_of_its_sample() {
    let machine = machine();
    let replayed = replay(&machine, &format!("{HEADER}\n12.50,1480,78,0.2,3.4,58\n"));
    assert_eq!(replayed.header[0], "time");
    let names: Vec<String> = ESTIMATE_NAMES
        .iter()
        .flat_map(|(name, unit)| [format!("{name}_{unit}"), format!("{name}_u_{unit}"), format!("{name}_source")])
        .collect();
    assert_eq!(replayed.header[1..], names);
    assert_eq!(replayed.rows.len(), 1);
    let expected = estimate(&sample(), &machine.profile);
    assert_row(&replayed.rows[0], "12.50", &expected);
    // Head by hand: (3.4 − 0.2) bar over ρg, 0.4 m, and the velocity heads at 150 and 125 mm.
    let area = |bore: f64| std::f64::consts::FRAC_PI_4 * bore * bore;
    let (q, g) = (78.0 / 3600.0, 9.806_65);
    let velocity = ((q / area(0.125)).powi(2) - (q / area(0.15)).powi(2)) / (2.0 * g);
    let head = 3.2e5 / (999.1 * g) + 0.4 + velocity;
    let got: f64 = replayed.rows[0][1].parse().unwrap();
    assert!((got - head).abs() < 1e-4, "{got} instead of {head}");
    assert_eq!(
        replayed.alarms,
        "machine,timestamp,alarm,alarm_id,state,cause_1,cause_1_weight,cause_2,cause_2_weight,cause_3,cause_3_weight\nWell pump 2,12.50,0,,normal,,,,,,\n"
    );
    assert!(replayed.summary.findings.to_string().is_empty());
}

#[test]
fn missing_readings_are_counted_located_and_estimated_around() {
    let machine = machine();
    let replayed = replay(
        &machine,
        &format!(
            "{HEADER}\n0,1480,,0.2,3.4,58\n1,1480,abc,0.2,3.4,58\n2,1480,NaN,0.2,3.4,58\n3,1480,-inf,0.2,3.4,58\n4,1480, 78 ,\"0.2\",3.4,58\n"
        ),
    );
    let without_flow = ConditionedSample { flow: Err(ChannelFault::NoReading), ..sample() };
    let expected = estimate(&without_flow, &machine.profile);
    for (row, time) in replayed.rows.iter().zip(["0", "1", "2", "3"]) {
        assert_row(row, time, &expected);
    }
    assert_row(&replayed.rows[4], "4", &estimate(&sample(), &machine.profile));
    let findings = &replayed.summary.findings;
    assert_eq!(findings.empty_fields.first, ["line 2, column flow_m3h: empty"]);
    assert_eq!(findings.not_numbers.first, ["line 3, column flow_m3h: 'abc' is not a number"]);
    assert_eq!(findings.not_finite.first, ["line 4, column flow_m3h: NaN", "line 5, column flow_m3h: -inf"]);
    assert_eq!(
        findings.to_string(),
        "empty fields, taken as no reading: 1\n  line 2, column flow_m3h: empty\n\
         fields that are not numbers, taken as no reading: 1\n  line 3, column flow_m3h: 'abc' is not a number\n\
         fields that are NaN or infinite, taken as no reading: 2\n  line 4, column flow_m3h: NaN\n  line 5, column flow_m3h: -inf\n"
    );
}

#[test]
fn junk_rows_give_empty_rows_and_do_not_stop_or_swallow_anything() {
    let machine = machine();
    let junk = b"0,1480,78,0.2,3.4,58\n\
        1,1480,78\n\
        \"never closed,1480,78,0.2,3.4,58\n\
        \xff\xfe\x00\n\
        \n\
        later,1480,78,0.2,3.4,58\n\
        2,1480,78,0.2,3.4,58,99\n\
        3,1480,78,0.2,3.4,58";
    let replayed = replay_bytes(&machine, &[HEADER.as_bytes(), b"\n", junk].concat());
    let empty = estimate(&ConditionedSample::EMPTY, &machine.profile);
    let full = estimate(&sample(), &machine.profile);
    let times: Vec<&str> = replayed.rows.iter().map(|row| row[0].as_str()).collect();
    assert_eq!(
        times,
        ["0", "1", "\"never closed", "\u{fffd}\u{fffd}\0", "later", "2", "3"],
        "a row per row, blank lines are none"
    );
    for (place, row) in replayed.rows.iter().enumerate() {
        assert_row(row, times[place], if matches!(place, 0 | 6) { &full } else { &empty });
    }
    let findings = &replayed.summary.findings;
    assert_eq!(
        findings.wrong_field_count.first,
        [
            "line 3: 3 fields, the header has 6",
            "line 5: 1 fields, the header has 6",
            "line 8: 7 fields, the header has 6"
        ]
    );
    assert_eq!(
        findings.unreadable_time.first,
        [
            "line 4, column time: '\\\"never closed' is not a number of seconds",
            "line 7, column time: 'later' is not a number of seconds"
        ]
    );
    assert_eq!((replayed.summary.rows, replayed.summary.watched), (7, 2));
}

#[test]
fn many_mistakes_are_counted_but_only_the_first_are_located() {
    let rows: String = (0..40).map(|k| format!("{k},x,78,0.2,3.4,58\n")).collect();
    let replayed = replay(&machine(), &format!("{HEADER}\n{rows}"));
    let finding = &replayed.summary.findings.not_numbers;
    assert_eq!((finding.count, finding.first.len()), (40, 5));
    assert!(replayed.summary.findings.to_string().contains("  and 35 more\n"));
}

#[test]
fn rows_out_of_order_are_estimated_but_not_watched() {
    let machine = machine();
    let row = |time: &str| format!("{time},1480,78,0.2,3.4,58\n");
    let input: String = ["0", "1", "2", "0.5", "3", "9e9", "4", "5"].into_iter().map(row).collect();
    let replayed = replay(&machine, &format!("{HEADER}\n{input}"));
    let expected = estimate(&sample(), &machine.profile);
    assert_eq!(replayed.rows.len(), 8);
    for (row, time) in replayed.rows.iter().zip(["0", "1", "2", "0.5", "3", "9e9", "4", "5"]) {
        assert_row(row, time, &expected);
    }
    assert_eq!(replayed.summary.watched, 6);
    assert_eq!(replayed.summary.findings.out_of_order.first, ["line 5: 0.5", "line 7: 9e9"]);
}

#[test]
fn gaps_are_counted_and_located() {
    let times = ["0", "1", "2", "3", "60", "61", "62"];
    let input: String = times.into_iter().map(|time| format!("{time},1480,78,0.2,3.4,58\n")).collect();
    let gaps = replay(&machine(), &format!("{HEADER}\n{input}")).summary.findings.gaps;
    assert_eq!(gaps.first, ["line 6: 57 s after the row before it, where 1 s is usual"]);
}

#[test]
fn values_far_outside_a_loop_are_a_failed_sensor() {
    let machine = machine();
    // 0 .. 160 m³/h: 3.6 mA is −4, 21 mA is 170; 3.8 mA is −2.
    for (flow, fault) in
        [("-4.1", Some(ChannelFault::FailureLow)), ("171", Some(ChannelFault::FailureHigh)), ("-3", None)]
    {
        let replayed = replay(&machine, &format!("{HEADER}\n0,1480,{flow},0.2,3.4,58\n"));
        let si: f64 = flow.parse::<f64>().unwrap() / 3600.0;
        let reading = match fault {
            Some(fault) => Err(fault),
            None => value(Channel::Flow, si, (0.005 * si).hypot(0.35 / 3600.0)),
        };
        assert_row(
            &replayed.rows[0],
            "0",
            &estimate(&ConditionedSample { flow: reading, ..sample() }, &machine.profile),
        );
        assert_eq!(replayed.summary.findings.beyond_range.count, u64::from(fault.is_some()), "{flow}");
    }
}

#[test]
fn run_signal_and_direction_enter_the_sample() {
    let machine = machine_with(&[("time_column = \"time\"", "time_column = \"time\"\nrun_column = \"on\"")]);
    let replayed = replay(
        &machine,
        &format!(
            "{HEADER},on\n0,1480,78,0.2,3.4,58,1\n1,1480,78,0.2,3.4,58,off\n2,-1480,78,0.2,3.4,58,TRUE\n3,1480,78,0.2,3.4,58,perhaps\n"
        ),
    );
    let with = |run, direction| estimate(&ConditionedSample { run, direction, ..sample() }, &machine.profile);
    assert_row(&replayed.rows[0], "0", &with(RunState::Running, Direction::Unknown));
    assert_row(&replayed.rows[1], "1", &with(RunState::Stopped, Direction::Unknown));
    assert_eq!(replayed.rows[1][24], "not running", "expected head");
    assert_row(&replayed.rows[2], "2", &with(RunState::Running, Direction::Reverse));
    assert_eq!(replayed.rows[2][24], "reverse rotation");
    assert_row(&replayed.rows[3], "3", &with(RunState::Unknown, Direction::Unknown));
    assert_eq!(
        replayed.summary.findings.unreadable_run.first,
        ["line 5, column on: 'perhaps' is neither on (1, true, on) nor off (0, false, off)"]
    );
}

#[test]
fn columns_may_be_anywhere_in_any_unit_and_with_any_separator() {
    let machine = machine_with(&[
        ("time_format = \"seconds\"", "time_format = \"rfc3339\"\nseparator = \";\""),
        ("column_unit = \"m3/h\"", "column_unit = \"l/s\""),
        ("column = \"torque_Nm\"\ncolumn_unit = \"N m\"\n", ""),
    ]);
    let replayed = replay(
        &machine,
        "\u{feff}discharge_bar; note ;flow_m3h;time;speed_rpm;suction_bar\r\n\
         3.4;\"a; b\";21.666666666666668;2031-05-04T08:00:00.25Z;1480;0.2\r\n\
         3.4;;21.666666666666668;2031-05-04T10:00:01+02:00;1480;0.2\r\n",
    );
    // 78 m³/h is 21.667 l/s. No torque column: the machine counts as having no torque sensor in this recording.
    let expected = ConditionedSample { shaft_torque: Err(ChannelFault::NotFitted), ..sample() };
    let expected = estimate(&expected, &machine.profile);
    assert_row(&replayed.rows[0], "2031-05-04T08:00:00.25Z", &expected);
    assert_row(&replayed.rows[1], "2031-05-04T10:00:01+02:00", &expected);
    assert_eq!(replayed.rows[0][12], "from momentum", "shaft torque");
    assert_eq!(replayed.summary.watched, 2, "both instants are in order");
    assert!(replayed.alarms.ends_with("\nWell pump 2,2031-05-04T08:00:00.25Z,0,,normal,,,,,,\n"));
}

#[test]
fn times_without_an_offset_count_as_utc() {
    let machine = machine_with(&[("time_format = \"seconds\"", "time_format = \"rfc3339\"")]);
    let rows = [
        "2031-05-04 08:00:00,1480,78,0.2,3.4,58",
        "2031-05-04T09:59:59+02:00,1480,78,0.2,3.4,58",
        "2031-05-04,1,2,3,4,5",
    ];
    let replayed = replay(&machine, &format!("{HEADER}\n{}\n", rows.join("\n")));
    let findings = &replayed.summary.findings;
    assert_eq!(findings.no_offset.first[0], "line 2: 2031-05-04 08:00:00");
    assert_eq!(findings.out_of_order.first, ["line 3: 2031-05-04T09:59:59+02:00"], "one second before the first");
    assert_eq!(findings.unreadable_time.count, 1, "a date alone");
}

#[test]
fn columns_that_are_not_there_are_named() {
    let machine = machine();
    let text = |input| error_of(&machine, input).0.replace(&machine.file.display().to_string(), "M.toml");
    assert_eq!(
        text("time,speed_rpm,q\n"),
        "run.csv: no column named \"flow_m3h\" (sensors.flow.column in M.toml); the columns are: time, speed_rpm, q"
    );
    assert_eq!(
        text("t;flow_m3h\n"),
        "run.csv: no column named \"time\" (replay.time_column in M.toml); the columns are: t;flow_m3h"
    );
    assert_eq!(
        text("time,speed_rpm,flow_m3h,flow_m3h\n"),
        "run.csv: more than one column named \"flow_m3h\" (sensors.flow.column in M.toml); the columns are: time, speed_rpm, flow_m3h, flow_m3h"
    );
    let many: String = (0..50).map(|k| format!("c{k}\u{1b}[31m,")).collect();
    let long = text(&many);
    assert!(!long.contains('\u{1b}') && long.ends_with("c39\\u{1b}[31m, and 11 more"), "{long}");
    assert_eq!(text(""), "run.csv: empty; the first line must name the columns");
    let mut none = machine.clone();
    none.columns.channels = Default::default();
    assert!(matches!(error_of(&none, HEADER).1, ReplayError::NoColumns { .. }));
}

#[test]
fn results_replace_only_what_a_replay_wrote() {
    let machine = machine();
    let first = replay(&machine, &format!("{HEADER}\n0,1480,78,0.2,3.4,58\n"));
    let input = first.folder.path().join("run.csv");
    let out = first.folder.path().join("out");
    let again = |estimates_only| replay::run(&Options { machine: &machine, input: &input, out: &out, estimates_only });
    let text = fs::read(out.join("estimates.csv")).unwrap();
    again(false).unwrap();
    assert_eq!(fs::read(out.join("estimates.csv")).unwrap(), text);
    assert_eq!(names(&out), ["alarms.csv", "estimates.csv"]);

    fs::write(out.join("alarms.csv"), "somebody,else\n1,2\n").unwrap();
    let error = again(false).unwrap_err().to_string();
    assert!(
        error.ends_with("alarms.csv is there already and was not written by a replay; choose another --out"),
        "{error}"
    );
    assert_eq!(fs::read_to_string(out.join("alarms.csv")).unwrap(), "somebody,else\n1,2\n");
    again(true).unwrap();

    fs::write(out.join("estimates.csv"), "").unwrap();
    assert!(matches!(again(true), Err(ReplayError::NotOurs { .. })));
}

#[test]
fn estimates_only_leaves_the_alarms_out() {
    let machine = machine();
    let folder = tempfile::tempdir().unwrap();
    let input = folder.path().join("run.csv");
    fs::write(&input, format!("{HEADER}\n0,1480,78,0.2,3.4,58\n")).unwrap();
    let out: PathBuf = folder.path().join("deep/out");
    let summary = replay::run(&Options { machine: &machine, input: &input, out: &out, estimates_only: true }).unwrap();
    assert_eq!((summary.rows, summary.watched), (1, 0));
    assert_eq!(names(&out), ["estimates.csv"]);
}

fn names(folder: &Path) -> Vec<String> {
    let mut names: Vec<String> =
        fs::read_dir(folder).unwrap().map(|entry| entry.unwrap().file_name().into_string().unwrap()).collect();
    names.sort();
    names
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn any_bytes_give_a_row_per_row(
        lines in prop::collection::vec(prop_oneof![
            3 => "[0-9]{1,3}(,[-0-9.e]{0,6}){5}",
            1 => "[ -~]{0,40}",
            1 => "\\PC{0,10}",
        ], 0..30)
    ) {
        let input = format!("{HEADER}\n{}", lines.join("\n"));
        let expected = input.lines().skip(1).filter(|line| !line.bytes().all(|byte| byte.is_ascii_whitespace())).count();
        let replayed = replay(&machine(), &input);
        prop_assert_eq!(replayed.rows.len(), expected);
        prop_assert_eq!(replayed.summary.rows, expected as u64);
        prop_assert!(replayed.rows.iter().all(|row| row.len() == 1 + 3 * ESTIMATE_NAMES.len()));
    }
}
