//! Rates that a user waits for, printed with the machine they were measured on. Times fail nothing: only wrong results
//! do.

use offcurve_tests::running::{MACHINE_FILE, program};
use std::{fmt::Write as _, fs, path::Path, process::Command, time::Instant};

const ROWS: usize = 400_000;

fn machine_of_this_run() -> String {
    let cpu = fs::read_to_string("/proc/cpuinfo").unwrap_or_default();
    let name = cpu.lines().find_map(|line| line.strip_prefix("model name")).unwrap_or("unknown processor");
    let cores = std::thread::available_parallelism().map_or(0, usize::from);
    format!("{} ({cores} cores)", name.trim_start_matches([' ', '\t', ':']))
}

/// A recorded run in the columns of the demo's machine file: steady at four speeds, with a little scatter.
fn recorded(path: &Path) {
    let mut text = String::with_capacity(ROWS * 60);
    text += "time,speed_rpm,flow_m3h,suction_bar,discharge_bar,torque_Nm\n";
    for row in 0..ROWS {
        let ratio = [1.0, 0.9, 0.95, 0.85][row / 900 % 4];
        let scatter = ((row * 7919) % 1000) as f64 / 1000.0 - 0.5;
        let (speed, flow) = (1480.0 * ratio, 76.36 * ratio + 0.4 * scatter);
        let discharge = 0.2 + 33.2 * ratio * ratio * 999.1 * 9.81 / 1e5 + 0.01 * scatter;
        let torque = 58.0 * ratio * ratio + 0.5 * scatter;
        writeln!(text, "{row},{speed:.1},{flow:.2},0.200,{discharge:.3},{torque:.2}").expect("room in memory");
    }
    fs::write(path, text).expect("a writable folder");
}

#[test]
fn replay() {
    println!("machine: {}", machine_of_this_run());
    let folder = tempfile::tempdir().expect("a temporary folder");
    let input = folder.path().join("run.csv");
    recorded(&input);
    let machine = folder.path().join("machine.toml");
    fs::write(&machine, MACHINE_FILE).expect("a writable folder");
    for (what, target, arguments) in
        [("estimates only", 200_000.0, &["--estimates-only"][..]), ("with the watch", 40_000.0, &[][..])]
    {
        let out = folder.path().join(what.replace(' ', "-"));
        let begun = Instant::now();
        let output = Command::new(program())
            .arg("replay")
            .arg("--machine")
            .arg(&machine)
            .arg("--input")
            .arg(&input)
            .arg("--out")
            .arg(&out)
            .args(arguments)
            .output()
            .expect("the program starts");
        let seconds = begun.elapsed().as_secs_f64();
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let rows = fs::read_to_string(out.join("estimates.csv")).expect("estimates").lines().count() - 1;
        assert_eq!(rows, ROWS, "a row for each row");
        println!("replay, {what}: {:.0} rows/s (wanted: {target:.0})", ROWS as f64 / seconds);
    }
}
