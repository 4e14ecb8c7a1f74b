//! The program itself: signals, `kill -9`, exit codes, what it prints.

mod daemon;

use daemon::{Bench, wait_until};
use offcurve::{config::PlantConfig, store::totals};
use offcurve_controller::Controller;
use offcurve_core::machine::profile::PROFILE_BYTES;
use rustix::process::{Pid, Signal, kill_process};
use std::{
    path::{Path, PathBuf},
    process::{Child, Command, ExitStatus, Stdio},
    time::{Duration, Instant},
};

const MACHINE: &str = include_str!("../demo/well-pump-1.toml");

struct Site {
    folder: tempfile::TempDir,
}

impl Site {
    fn new() -> Self {
        let folder = tempfile::tempdir().unwrap();
        let port = folder.path().join("port");
        let plant = format!(
            "name = \"Waterworks\"\nstore = \"plant.db\"\n\n[[controller]]\nname = \"Pump house\"\nport = {port:?}\n\
             baud = \"115200 Bd\"\nmachine = \"pump.toml\"\n"
        );
        std::fs::write(folder.path().join("plant.toml"), plant).unwrap();
        // A record for each estimate, so that the test is short.
        let machine = MACHINE.replace("record_interval = \"1 s\"", "record_interval = \"100 ms\"");
        assert_ne!(machine, MACHINE, "the line to be replaced has changed");
        std::fs::write(folder.path().join("pump.toml"), machine).unwrap();
        Self { folder }
    }

    fn plant_file(&self) -> PathBuf {
        self.folder.path().join("plant.toml")
    }

    fn store(&self) -> PathBuf {
        self.folder.path().join("plant.db")
    }

    fn stored(&self) -> u64 {
        if self.store().exists() { totals(&self.store()).map_or(0, |totals| totals.records) } else { 0 }
    }

    fn bench(&self, boot: u64) -> Bench {
        let plant = PlantConfig::load(&self.plant_file()).unwrap();
        let mut bytes = [0; PROFILE_BYTES];
        let length = plant.controllers[0].machine.profile.encode(&mut bytes).unwrap();
        let mut controller = Controller::new("bench", boot);
        controller.load_profile(&bytes[..length]).unwrap();
        Bench::plug_in(&plant.controllers[0].port, controller, 0)
    }

    fn start(&self, more: &[&str]) -> Running {
        let output = |name: &str| std::fs::File::create(self.folder.path().join(name)).unwrap();
        let child = Command::new(env!("CARGO_BIN_EXE_offcurve"))
            .arg("watch")
            .arg("--config")
            .arg(self.plant_file())
            .args(more)
            .env_remove("OFFCURVE_LOG")
            .stdin(Stdio::null())
            .stdout(output("stdout"))
            .stderr(output("stderr"))
            .spawn()
            .unwrap();
        Running(child)
    }

    fn read(&self, name: &str) -> String {
        std::fs::read_to_string(self.folder.path().join(name)).unwrap()
    }
}

/// Killed when a test fails in between.
struct Running(Child);

impl Running {
    fn signal(&mut self, signal: Signal) -> (ExitStatus, Duration) {
        let begun = Instant::now();
        kill_process(Pid::from_child(&self.0), signal).unwrap();
        (self.0.wait().unwrap(), begun.elapsed())
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}

#[test]
fn a_signal_ends_it_cleanly() {
    for signal in [Signal::TERM, Signal::INT] {
        let site = Site::new();
        let _bench = site.bench(1);
        let mut running = site.start(&[]);
        wait_until("100 records", || site.stored() >= 100);
        let (status, took) = running.signal(signal);
        assert_eq!(status.code(), Some(0), "{}", site.read("stderr"));
        assert!(took < Duration::from_secs(2), "{took:?}");
        let log = site.read("stderr");
        let all = totals(&site.store()).unwrap();
        assert!(log.contains(&format!("stored {}, duplicates 0, lost {}", all.records, all.lost)), "{log}");
        assert!(log.contains("estimate mismatches 0"), "{log}");
        let left = std::fs::metadata(site.store().with_extension("db-wal")).map_or(0, |file| file.len());
        assert_eq!(left, 0, "the write-ahead log is empty");
    }
}

#[test]
fn killed_twenty_times_nothing_acknowledged_is_lost() {
    let site = Site::new();
    let bench = site.bench(3);
    for round in 1..=20 {
        let before = bench.acknowledged();
        let mut running = site.start(&[]);
        wait_until("an acknowledgement after the kill", || bench.acknowledged() > before);
        // At another place of the daemon's round each time.
        std::thread::sleep(Duration::from_millis(7 * round));
        let (status, _) = running.signal(Signal::KILL);
        assert!(!status.success());
        let acknowledged = bench.acknowledged().expect("it lived long enough").1;
        let connection = rusqlite::Connection::open(site.store()).unwrap();
        let newest: u32 = connection.query_row("SELECT max(number) FROM record", [], |row| row.get(0)).unwrap();
        assert!(newest >= acknowledged, "round {round}: {acknowledged} was acknowledged, the store ends at {newest}");
    }
    let connection = rusqlite::Connection::open(site.store()).unwrap();
    let sound: String = connection.query_row("PRAGMA integrity_check", [], |row| row.get(0)).unwrap();
    assert_eq!(sound, "ok");
    let sql = "SELECT max(last) + 1 - sum(last + 1 - first) FROM (
                   SELECT number AS first, number AS last FROM record UNION ALL SELECT first, last FROM gap)";
    let first: i64 = connection.query_row("SELECT min(number) FROM record", [], |row| row.get(0)).unwrap();
    let holes: i64 = connection.query_row(sql, [], |row| row.get(0)).unwrap();
    assert_eq!(holes, first, "after the first one every number is stored once or in a gap once");
    assert_eq!(totals(&site.store()).unwrap().duplicates, 0);
}

#[test]
fn live_lines_say_what_the_machine_does() {
    let site = Site::new();
    let bench = site.bench(1);
    let mut running = site.start(&["--live"]);
    wait_until("a live line with values", || site.read("stdout").contains("rev/min"));
    drop(bench);
    wait_until("the silence", || site.read("stdout").contains("no data for"));
    assert_eq!(running.signal(Signal::INT).0.code(), Some(0));
    let shown = site.read("stdout");
    let line = shown.lines().find(|line| line.contains("rev/min")).unwrap();
    assert!(line.starts_with("Well pump 1  00:"), "{line}");
    assert!(line.contains(" 1480 rev/min") && line.contains("m3/h") && line.contains("±"), "{line}");
    assert!(!shown.contains('\u{1b}'), "a file gets no control sequences");
}

#[test]
fn a_bad_configuration_is_exit_code_64() {
    let site = Site::new();
    std::fs::write(site.plant_file(), "name = 3").unwrap();
    let mut running = site.start(&[]);
    assert_eq!(running.0.wait().unwrap().code(), Some(64), "{}", site.read("stderr"));
    let missing = Command::new(env!("CARGO_BIN_EXE_offcurve"))
        .args(["watch", "--config"])
        .arg(Path::new("/nonexistent/plant.toml"))
        .output()
        .unwrap();
    assert_eq!(missing.status.code(), Some(64));
}

#[test]
fn a_foreign_store_is_refused_and_left_alone() {
    let site = Site::new();
    std::fs::write(site.store(), "these are notes, no store").unwrap();
    let mut running = site.start(&[]);
    assert_eq!(running.0.wait().unwrap().code(), Some(1));
    assert!(site.read("stderr").contains("not an offcurve store"), "{}", site.read("stderr"));
    assert_eq!(std::fs::read_to_string(site.store()).unwrap(), "these are notes, no store");
}

#[test]
fn ports_are_listed() {
    let output = Command::new(env!("CARGO_BIN_EXE_offcurve")).arg("ports").output().unwrap();
    assert_eq!(output.status.code(), Some(0));
    let text = String::from_utf8(output.stdout).unwrap();
    assert!(text.contains("dialout"), "{text}");
    assert!(text.contains("port = \"") || text.contains("no serial port"), "{text}");
}
