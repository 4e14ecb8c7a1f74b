//! Replay's alarms: the watch over a recording with a known fault, and the scorer that reads the result.

use std::{
    fmt::Write as _,
    fs,
    path::{Path, PathBuf},
    process::Command,
};

/// A recording of the demo machine, a row each second for `hours`: on its curve with scatter and slow demand changes,
/// its head short by a tenth between `fault` and `repair` s, its flow reading gone between 600 and 660 s if `blind`.
fn recording(hours: f64, fault: f64, repair: f64, blind: bool) -> String {
    let mut text = "time,speed_rpm,flow_m3h,suction_bar,discharge_bar,torque_Nm\n".to_owned();
    // A small linear congruential generator; sums of four draws stand for scatter.
    let mut state = 12_345_u64;
    let mut scatter = || {
        (0..4).fold(0.0, |sum, _| {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            sum + ((state >> 40) as f64 / f64::from(1 << 24) - 0.5)
        }) / (4.0_f64 / 12.0).sqrt()
    };
    // The demo machine's works test.
    let flows = [0.0, 10.91, 21.82, 32.73, 43.64, 54.55, 65.45, 76.36, 87.27, 98.18, 109.09, 120.0];
    let heads = [40.51, 40.12, 39.52, 38.73, 37.74, 36.55, 35.17, 33.59, 31.83, 29.90, 27.81, 25.55];
    let powers = [3.815, 4.464, 5.143, 5.852, 6.591, 7.359, 8.157, 8.984, 9.788, 10.529, 11.206, 11.820];
    let along = |table: &[f64; 12], flow: f64| {
        let place = (flow / 10.909).clamp(0.0, 10.999);
        let low = place as usize;
        table[low] + (flow - flows[low]) / (flows[low + 1] - flows[low]) * (table[low + 1] - table[low])
    };
    for second in 0..(hours * 3600.0) as u32 {
        let t = f64::from(second);
        let ratio = [1.0, 0.9, 0.85, 0.95][(second / 1800 % 4) as usize];
        let reference_flow = 72.0 + 4.0 * (t / 700.0).sin();
        let worn = if t >= fault && t < repair { 0.9 } else { 1.0 };
        let head = along(&heads, reference_flow) * ratio * ratio * worn;
        let power = along(&powers, reference_flow) * ratio * ratio * ratio;
        let flow = reference_flow * ratio;
        let omega = 1480.0 * ratio * std::f64::consts::TAU / 60.0;
        // 0.4 m and the velocity head lie between head and pressures.
        let velocity = 0.0814 * (flow / 77.61).powi(2);
        let rise = (head - 0.4 - velocity) * 999.1 * 9.806_65 / 1e5;
        let flow_text =
            if blind && (600.0..660.0).contains(&t) { String::new() } else { format!("{:.2}", flow + 0.4 * scatter()) };
        let _ = writeln!(
            text,
            "{t},{:.1},{flow_text},{:.4},{:.4},{:.2}",
            1480.0 * ratio + scatter(),
            0.2 + 0.006 * scatter(),
            0.2 + rise + 0.015 * scatter(),
            power * 1000.0 / omega + scatter()
        );
    }
    text
}

fn demo() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("demo/well-pump-2.toml")
}

/// Runs the command; alarm rows as (time, alarm, id, state).
fn replay(folder: &Path, input: &str) -> (Vec<(f64, u8, String, String)>, String) {
    let file = folder.join("run.csv");
    fs::write(&file, input).unwrap();
    let output = Command::new(env!("CARGO_BIN_EXE_offcurve"))
        .args(["replay", "--machine"])
        .arg(demo())
        .arg("--input")
        .arg(&file)
        .arg("--out")
        .arg(folder.join("out"))
        .output()
        .unwrap();
    let shown = String::from_utf8_lossy(&output.stdout).into_owned() + &String::from_utf8_lossy(&output.stderr);
    assert!(output.status.success(), "{shown}");
    let mut reader = csv::Reader::from_path(folder.join("out/alarms.csv")).unwrap();
    let rows = reader
        .records()
        .map(|row| {
            let row = row.unwrap();
            assert_eq!(&row[0], "Well pump 2");
            (row[1].parse().unwrap(), row[2].parse().unwrap(), row[3].to_owned(), row[4].to_owned())
        })
        .collect();
    (rows, shown)
}

#[test]
fn a_lost_tenth_of_head_alarms_and_returns() {
    let folder = tempfile::tempdir().unwrap();
    let (rows, shown) = replay(folder.path(), &recording(4.0, 3600.0, 9000.0, false));
    assert_eq!(rows[0], (0.0, 0, String::new(), "normal".to_owned()));
    let changes: Vec<_> = rows[1..].iter().map(|(_, alarm, id, state)| (*alarm, id.as_str(), state.as_str())).collect();
    assert_eq!(changes, [(1, "off-curve", "unacknowledged"), (0, "off-curve", "returned unacknowledged")], "{shown}");
    // On after 120 s, off after 300 s, in blocks of 30 s, plus the blocks at either edge.
    assert!((3720.0..=3900.0).contains(&rows[1].0), "{}", rows[1].0);
    assert!((9300.0..=9480.0).contains(&rows[2].0), "{}", rows[2].0);
    assert!(shown.contains("alarm changes: 2; active at the end: none"), "{shown}");
}

#[test]
fn a_healthy_recording_has_one_row() {
    let folder = tempfile::tempdir().unwrap();
    let (rows, shown) = replay(folder.path(), &recording(3.0, f64::INFINITY, 0.0, false));
    assert_eq!(rows.len(), 1, "{shown}");
}

#[test]
fn alarm_is_one_while_any_alarm_is_active() {
    let folder = tempfile::tempdir().unwrap();
    // The fault begins before the flow reading goes, so two alarms overlap.
    let (rows, shown) = replay(folder.path(), &recording(0.5, 60.0, f64::INFINITY, true));
    let changes: Vec<_> = rows[1..].iter().map(|(_, alarm, id, state)| (*alarm, id.as_str(), state.as_str())).collect();
    assert_eq!(
        changes,
        [
            (1, "off-curve", "unacknowledged"),
            (1, "sensor-failed-flow", "unacknowledged"),
            (1, "sensor-failed-flow", "returned unacknowledged"),
        ],
        "{shown}"
    );
    assert!((rows[2].0 - 610.0).abs() <= 1.0 && (rows[3].0 - 670.0).abs() <= 1.0, "{rows:?}");
    assert!(shown.contains("empty fields, taken as no reading: 60\n  line 602, column flow_m3h: empty\n"), "{shown}");
    assert!(shown.contains("active at the end: off-curve"), "{shown}");
}

#[test]
fn the_scorer_reads_the_result() {
    let scorer = Path::new(env!("CARGO_MANIFEST_DIR")).join("../tests/score-alarms");
    if Command::new("python3").arg("--version").output().is_err() {
        assert!(std::env::var_os("CI").is_none(), "python3 is missing, and CI skips nothing");
        eprintln!("skipped: no python3 to run the scorer with");
        return;
    }
    let folder = tempfile::tempdir().unwrap();
    replay(folder.path(), &recording(4.0, 3600.0, 9000.0, false));
    let truth = folder.path().join("truth.csv");
    fs::write(
        &truth,
        "machine,run_start,run_end,start,end,fault,category\nWell pump 2,0,14400,3600,9000,head lost,machine\n",
    )
    .unwrap();
    let output =
        Command::new("python3").arg(scorer).arg(folder.path().join("out/alarms.csv")).arg(truth).output().unwrap();
    let text = String::from_utf8_lossy(&output.stdout).into_owned();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    for line in ["\"faults\": 1,", "\"detected\": 1,", "\"false_alarms\": 0,"] {
        assert!(text.contains(line), "no {line} in {text}");
    }
}
