//! Running the real thing for the end-to-end tests: a plant folder with the demo's machine files, controllers on
//! pseudo-terminals, the daemon as a process, and what its store holds afterwards.

use offcurve::config::Machine;
use offcurve_core::machine::{Profile, profile::PROFILE_BYTES};
use offcurve_rig::{HostController, HostControllerOptions, scenario::Scenario};
use rusqlite::{Connection, OpenFlags};
use std::{
    fs,
    path::{Path, PathBuf},
    process::{Child, Command, ExitStatus, Stdio},
    time::{Duration, Instant},
};
use tempfile::TempDir;

/// The demo's machine file of the pump whose ring wears; the healthy one has the same plant.
pub const MACHINE_FILE: &str = include_str!("../../host-daemon/demo/well-pump-2.toml");

/// The `offcurve` program built beside this test program.
///
/// # Panics
/// When it is not there: build it first, with the same profile.
#[must_use]
pub fn program() -> PathBuf {
    let test = std::env::current_exe().expect("a test program has a path");
    let program = test.ancestors().nth(2).expect("target/PROFILE/deps").join("offcurve");
    assert!(program.is_file(), "{} is missing: cargo build --release -p offcurve", program.display());
    program
}

/// The firmware image that `tests/boards.sh build` makes.
///
/// # Panics
/// When it is not there.
#[must_use]
pub fn image() -> PathBuf {
    let image = Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("../hil-fixtures/boards/target/thumbv7em-none-eabihf/release/emulated-m4f");
    assert!(image.is_file(), "{} is missing: tests/boards.sh build", image.display());
    image
}

/// A machine file's text with one line replaced, the line that begins with `key =`.
///
/// # Panics
/// When there is not exactly one such line.
#[must_use]
pub fn with_line(text: &str, key: &str, line: &str) -> String {
    let begins = |found: &&str| found.split_once('=').is_some_and(|(name, _)| name.trim() == key);
    assert_eq!(text.lines().filter(begins).count(), 1, "lines with {key}");
    text.lines().map(|found| if begins(&found) { line } else { found }).collect::<Vec<_>>().join("\n")
}

/// The machine of a file's text.
///
/// # Panics
/// When the text is not valid.
#[must_use]
pub fn machine(text: &str) -> Machine {
    Machine::parse(text, Path::new("machine.toml")).expect("a valid machine file")
}

/// A profile's byte form.
///
/// # Panics
/// When it does not fit.
#[must_use]
pub fn profile_bytes(profile: &Profile) -> Vec<u8> {
    let mut bytes = [0; PROFILE_BYTES];
    let length = profile.encode(&mut bytes).expect("room for any profile");
    bytes[..length].to_vec()
}

/// A folder with a plant of one machine.
#[derive(Debug)]
pub struct PlantFolder {
    folder: TempDir,
    profile: Vec<u8>,
}

impl PlantFolder {
    /// Writes the plant file and this machine file.
    ///
    /// # Panics
    /// When the folder cannot be written or the machine file is not valid.
    #[must_use]
    pub fn new(machine_file: &str) -> Self {
        let folder = tempfile::tempdir().expect("a temporary folder");
        let profile = profile_bytes(&machine(machine_file).profile);
        fs::write(folder.path().join("machine.toml"), machine_file).expect("a writable folder");
        let port = folder.path().join("port");
        let plant = format!(
            "name = \"Test waterworks\"\nstore = \"store.db\"\n\n[[controller]]\nname = \"pump house\"\nport = \"{}\"\n\
             baud = \"115200 Bd\"\nmachine = \"machine.toml\"\n",
            port.display()
        );
        fs::write(folder.path().join("plant.toml"), plant).expect("a writable folder");
        Self { folder, profile }
    }

    /// The plant file.
    #[must_use]
    pub fn plant_file(&self) -> PathBuf {
        self.folder.path().join("plant.toml")
    }

    /// The serial port that the plant file names.
    #[must_use]
    pub fn port(&self) -> PathBuf {
        self.folder.path().join("port")
    }

    /// The store that the plant file names.
    #[must_use]
    pub fn store(&self) -> PathBuf {
        self.folder.path().join("store.db")
    }

    /// Starts the controller, compiled for this computer, on a bench of this scenario.
    ///
    /// # Panics
    /// When it cannot start.
    #[must_use]
    pub fn controller(&self, scenario: &Scenario, speed: Option<f64>) -> HostController {
        let options = HostControllerOptions {
            name: "pump house".into(),
            boot: 1,
            profile: self.profile.clone(),
            link: self.port(),
            speed,
        };
        HostController::start(options, scenario).expect("the controller starts")
    }

    /// Starts the daemon.
    #[must_use]
    pub fn daemon(&self) -> Daemon {
        Daemon::start(&self.plant_file())
    }
}

/// The daemon as a process; killed when dropped.
#[derive(Debug)]
pub struct Daemon(Child);

impl Daemon {
    /// `offcurve watch --config FILE`, its log beside the plant file.
    ///
    /// # Panics
    /// When it cannot be started.
    #[must_use]
    pub fn start(plant_file: &Path) -> Self {
        let log = plant_file.with_file_name("daemon.log");
        let log = fs::File::options().create(true).append(true).open(log).expect("a writable folder");
        let child = Command::new(program())
            .args(["watch", "--config"])
            .arg(plant_file)
            .stdin(Stdio::null())
            .stdout(Stdio::null())
            .stderr(log)
            .spawn()
            .expect("the program starts");
        Self(child)
    }

    /// Kills it as a power cut would: no signal handler, no flush.
    ///
    /// # Panics
    /// When it has ended by itself before.
    pub fn kill(mut self) {
        assert_eq!(self.0.try_wait().expect("a child"), None, "the daemon ended by itself");
        self.0.kill().expect("a child that runs");
        self.0.wait().expect("a child");
    }

    /// Asks it to stop, and gives how it ended and how long that took.
    ///
    /// # Panics
    /// When it has not ended after ten seconds.
    #[must_use]
    pub fn stop(mut self) -> (ExitStatus, Duration) {
        let begun = Instant::now();
        let pid = rustix::process::Pid::from_raw(self.0.id() as i32).expect("a process number");
        rustix::process::kill_process(pid, rustix::process::Signal::TERM).expect("a child that runs");
        let ended = wait_for(Duration::from_secs(10), || self.0.try_wait().expect("a child"));
        (ended.expect("the daemon stops when asked"), begun.elapsed())
    }
}

impl Drop for Daemon {
    fn drop(&mut self) {
        // Ended already in most tests.
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}

/// Asks until there is an answer or the time is over.
pub fn wait_for<T>(limit: Duration, mut ask: impl FnMut() -> Option<T>) -> Option<T> {
    let begun = Instant::now();
    loop {
        if let Some(answer) = ask() {
            return Some(answer);
        }
        if begun.elapsed() > limit {
            return None;
        }
        std::thread::sleep(Duration::from_millis(20));
    }
}

/// A store opened for reading while the daemon may still write.
///
/// # Panics
/// When it cannot be opened.
#[must_use]
pub fn open(store: &Path) -> Connection {
    Connection::open_with_flags(store, OpenFlags::SQLITE_OPEN_READ_ONLY).expect("a store")
}

/// One number out of a store; a NULL is 0.
///
/// # Panics
/// When the query is not valid.
#[must_use]
pub fn number(store: &Connection, query: &str) -> i64 {
    store.query_row(query, [], |row| row.get::<_, Option<i64>>(0)).expect("a valid query").unwrap_or(0)
}

/// Every change in the alarm journal: kind, state, plant time in s since the first record, text.
///
/// # Panics
/// When the store is not one of ours.
#[must_use]
pub fn journal(store: &Connection) -> Vec<(String, String, f64, String)> {
    let origin = number(store, "SELECT min(anchor_us) FROM boot");
    let mut query = store.prepare("SELECT kind, state, at_us, text FROM alarm ORDER BY id").expect("a valid query");
    let rows = query.query_map([], |row| {
        let at: i64 = row.get(2)?;
        Ok((row.get(0)?, row.get(1)?, (at - origin) as f64 / 1e6, row.get(3)?))
    });
    rows.expect("a valid query").map(|row| row.expect("a readable row")).collect()
}
