//! `offcurve demo`: plant, controllers and daemon in one command, without hardware, on real serial devices
//! (pseudo-terminals).
//!
//! The daemon is a process of its own, started as a plant would start it. So it may be killed to see what happens: the
//! demo starts it again, and nothing that was stored is lost. The plant is invented: a small waterworks.
//! Time is fast: the controllers run in plant time, so stamps run ahead of the wall clock.

mod controllers;

use crate::{alarm::AlarmState, config::PlantConfig, store};
use anyhow::Context as _;
use clap::{Args, ValueEnum};
use controllers::Controllers;
use std::{
    fs,
    io::Write as _,
    path::{Path, PathBuf},
    process::ExitCode,
    time::{Duration, Instant},
};
use tokio::{
    process::{Child, Command},
    signal::unix::{SignalKind, signal},
};

const MACHINE_FILES: [(&str, &str); 2] = [
    ("well-pump-1.toml", include_str!("../../demo/well-pump-1.toml")),
    ("well-pump-2.toml", include_str!("../../demo/well-pump-2.toml")),
];
/// Converter scans of a machine file, as a plant needs them.
const PLANT_SCANS: &str = "scan_interval = \"1 ms\"";
/// What takes their place for the emulated board: every scan passes an emulated serial port, which 1,000 scans per
/// plant second in fast time would not fit through.
const COARSE_SCANS: &str =
    "scan_interval = \"20 ms\" # coarse, for the emulated board in fast time; a plant needs 1 ms";
/// How long the daemon may take to stop before it is killed.
const STOP_LIMIT: Duration = Duration::from_secs(5);
/// How long a dead daemon stays away, so that the gap can be seen.
const RESTART_AFTER: Duration = Duration::from_secs(1);
const TICK: Duration = Duration::from_millis(100);

/// Prints a line. That nobody reads it any more is no reason to end: the plant goes on.
macro_rules! tell {
    ($($text:tt)*) => {{
        let _ = writeln!(std::io::stdout().lock(), $($text)*);
    }};
}

/// Which build of the controller program runs well pump 2.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum ControllerChoice {
    /// Compiled for this computer.
    Host,
    /// The firmware image on an emulated Cortex-M4F.
    Emulated,
}

impl ControllerChoice {
    /// Plant seconds per wall second that this computer keeps up with.
    const fn usual_speed(self) -> f64 {
        match self {
            Self::Host => 60.0,
            // The converter scans pass through an emulated serial port.
            Self::Emulated => 20.0,
        }
    }
}

/// Show the whole chain on an invented waterworks, without hardware.
#[derive(Debug, Args)]
pub struct Demo {
    /// End by itself after this long, e.g. 90s or 3min; without it, Ctrl-C ends it.
    #[arg(long = "for", value_name = "TIME", value_parser = duration)]
    length: Option<Duration>,
    /// Folder for its files; made if missing. Default: a new one in the system's temporary folder.
    #[arg(long, value_name = "DIR")]
    dir: Option<PathBuf>,
    /// What runs the controller of well pump 2.
    #[arg(long, value_enum, default_value = "host")]
    controller: ControllerChoice,
    /// Plant seconds per second, 0.1 to 200. Default: 60, with the emulated controller 20.
    #[arg(long, value_name = "FACTOR", value_parser = speed, allow_negative_numbers = true)]
    speed: Option<f64>,
    /// The firmware image for the emulated controller. Default: where `tests/boards.sh build` puts it.
    #[arg(long, value_name = "ELF")]
    image: Option<PathBuf>,
}

fn duration(text: &str) -> Result<Duration, String> {
    let allowed = "write a time such as 90s, 3min or 1h";
    let span: jiff::SignedDuration = text.parse().map_err(|_| format!("{text:?} is no time; {allowed}"))?;
    Duration::try_from(span)
        .ok()
        .filter(|span| *span >= Duration::from_secs(1))
        .ok_or_else(|| format!("{text:?} is less than a second; {allowed}"))
}

fn speed(text: &str) -> Result<f64, String> {
    match text.parse() {
        Ok(speed) if (0.1..=200.0).contains(&speed) => Ok(speed),
        _ => Err(format!("{text:?} is not allowed; a number from 0.1 to 200")),
    }
}

impl Demo {
    /// Runs the demo until it is stopped or its time is over.
    ///
    /// # Errors
    /// What kept it from starting: the folder, the ports, the image, the daemon.
    pub fn run(&self) -> anyhow::Result<ExitCode> {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build()?;
        runtime.block_on(self.play())
    }

    async fn play(&self) -> anyhow::Result<ExitCode> {
        anyhow::ensure!(
            self.image.is_none() || self.controller == ControllerChoice::Emulated,
            "--image is for the emulated controller; add --controller emulated"
        );
        let folder = self.folder()?;
        let plant_file = write_files(&folder, self.controller)?;
        let plant = PlantConfig::load(&plant_file)?;
        let speed = self.speed.unwrap_or(self.controller.usual_speed());
        let image = match self.controller {
            ControllerChoice::Host => None,
            ControllerChoice::Emulated => Some(self.image.clone().unwrap_or_else(controllers::usual_image)),
        };
        let mut controllers = Controllers::start(&plant, speed, image.as_deref())?;
        self.greet(&folder, speed);

        let mut daemon = Daemon::start(&plant_file, &folder)?;
        let mut interrupted = signal(SignalKind::interrupt())?;
        let mut terminated = signal(SignalKind::terminate())?;
        let begun = Instant::now();
        loop {
            tokio::select! {
                _ = interrupted.recv() => break,
                _ = terminated.recv() => break,
                () = tokio::time::sleep(TICK) => {}
            }
            if self.length.is_some_and(|length| begun.elapsed() >= length) {
                break;
            }
            controllers.check()?;
            daemon.supervise().await?;
        }
        daemon.stop().await?;
        summary(&controllers, &plant, begun.elapsed())?;
        Ok(ExitCode::SUCCESS)
    }

    fn folder(&self) -> anyhow::Result<PathBuf> {
        let folder = match &self.dir {
            Some(folder) => folder.clone(),
            None => {
                let stamp = jiff::Timestamp::now().as_second();
                std::env::temp_dir().join(format!("offcurve-demo-{stamp}-{}", std::process::id()))
            }
        };
        fs::create_dir_all(&folder).with_context(|| format!("cannot make the folder {}", folder.display()))?;
        // Links to ports must resolve from anywhere.
        std::path::absolute(&folder).with_context(|| format!("cannot find {}", folder.display()))
    }

    fn greet(&self, folder: &Path, speed: f64) {
        tell!("An invented waterworks with two well pumps; no hardware. It advises; it is no protective device.");
        tell!("Fast time: 1 s here is {} on the plant.", plant_time(speed));
        tell!("Files: {} (store waterworks.db, the daemon's log daemon.log)", folder.display());
        let fault = 20.0 * 60.0 / speed;
        tell!("At plant minute 20, in about {fault:.0} s, the wear ring of well pump 2 begins to open.");
        if self.length.is_none() {
            tell!("Ctrl-C ends it.");
        }
        tell!();
    }
}

fn plant_time(speed: f64) -> String {
    if (speed - 60.0).abs() < 1e-9 { "1 min".to_owned() } else { format!("{speed} s") }
}

/// Writes plant and machine files; the plant file's path.
fn write_files(folder: &Path, controller: ControllerChoice) -> anyhow::Result<PathBuf> {
    let write = |name: &str, text: &str| {
        let path = folder.join(name);
        fs::write(&path, text).with_context(|| format!("cannot write {}", path.display())).map(|()| path)
    };
    let ports = folder.join("ports");
    fs::create_dir_all(&ports).with_context(|| format!("cannot make {}", ports.display()))?;
    let mut plant = String::from(
        "# Invented: the demo's waterworks. The ports are pseudo-terminals that the demo makes.\n\
         name = \"Waterworks (invented)\"\nstore = \"waterworks.db\"\n",
    );
    for (name, text) in MACHINE_FILES {
        match controller {
            ControllerChoice::Host => write(name, text)?,
            ControllerChoice::Emulated => write(name, &text.replace(PLANT_SCANS, COARSE_SCANS))?,
        };
        let stem = name.trim_end_matches(".toml");
        let port = toml::Value::String(ports.join(stem).display().to_string());
        plant += &format!(
            "\n[[controller]]\nname = \"{stem}\"\nport = {port}\nbaud = \"115200 Bd\"\nmachine = \"{name}\"\n"
        );
    }
    write("waterworks.toml", &plant)
}

/// The daemon as a process that is started again when it dies.
struct Daemon {
    child: Child,
    plant_file: PathBuf,
    log: PathBuf,
}

impl Daemon {
    fn start(plant_file: &Path, folder: &Path) -> anyhow::Result<Self> {
        let log = folder.join("daemon.log");
        let child = spawn(plant_file, &log)?;
        Ok(Self { child, plant_file: plant_file.to_owned(), log })
    }

    async fn supervise(&mut self) -> anyhow::Result<()> {
        let Some(status) = self.child.try_wait()? else { return Ok(()) };
        if status.code().is_some() {
            let log = fs::read_to_string(&self.log).unwrap_or_default();
            let last = log.lines().last().unwrap_or("nothing");
            anyhow::bail!("the daemon ended by itself ({status}); the last line of {}: {last}", self.log.display());
        }
        tell!("The daemon was killed ({status}); it is started again in a second.");
        tokio::time::sleep(RESTART_AFTER).await;
        self.child = spawn(&self.plant_file, &self.log)?;
        Ok(())
    }

    async fn stop(&mut self) -> anyhow::Result<()> {
        if let Some(pid) = self.child.id().and_then(|id| rustix::process::Pid::from_raw(id as i32)) {
            // Ended already: then there is nobody to ask.
            let _ = rustix::process::kill_process(pid, rustix::process::Signal::TERM);
        }
        if tokio::time::timeout(STOP_LIMIT, self.child.wait()).await.is_err() {
            self.child.kill().await?;
            tell!("The daemon did not stop within {} s and was killed.", STOP_LIMIT.as_secs());
        }
        Ok(())
    }
}

fn spawn(plant_file: &Path, log: &Path) -> anyhow::Result<Child> {
    let program = std::env::current_exe().context("cannot find this program's own file")?;
    let log = fs::File::options().create(true).append(true).open(log)?;
    Command::new(program)
        .args(["watch", "--live", "--config"])
        .arg(plant_file)
        .stdin(std::process::Stdio::null())
        .stderr(log)
        .kill_on_drop(true)
        .spawn()
        .context("cannot start the daemon")
}

fn summary(controllers: &Controllers, plant: &PlantConfig, ran: Duration) -> anyhow::Result<()> {
    tell!("\nRan {:.0} s.", ran.as_secs_f64());
    for line in controllers.report() {
        tell!("{line}");
    }
    let totals = store::totals(&plant.store).context("cannot read the store back")?;
    tell!(
        "Daemon: {} records received, {} stored, {} lost ({} gaps), {} duplicates dropped. What was on the line at the \
         end counts for none of these.",
        totals.records + totals.duplicates + totals.conflicts,
        totals.records,
        totals.lost,
        totals.gaps,
        totals.duplicates
    );
    let raised: Vec<_> = totals.journal.iter().filter(|entry| entry.state == AlarmState::Unacknowledged).collect();
    tell!("Alarms raised: {}.", raised.len());
    for entry in raised {
        tell!("- {}: {}: {}", entry.machine, entry.kind, entry.text);
    }
    tell!("Store: {}", plant.store.display());
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_demo_s_files_are_valid_and_its_plant_is_checked() {
        let folder = tempfile::tempdir().unwrap();
        for (choice, scan_ms) in [(ControllerChoice::Host, 1), (ControllerChoice::Emulated, 20)] {
            let plant = PlantConfig::load(&write_files(folder.path(), choice).unwrap()).unwrap();
            let names: Vec<_> = plant.controllers.iter().map(|one| one.machine.name.as_str()).collect();
            assert_eq!(names, ["Well pump 1", "Well pump 2"]);
            assert!(plant.controllers.iter().all(|one| one.machine.profile.schedule.scan_ms == scan_ms));
        }
    }

    #[test]
    fn times_and_speeds_say_what_is_allowed() {
        assert_eq!(duration("90s"), Ok(Duration::from_secs(90)));
        assert_eq!(duration("3min"), Ok(Duration::from_secs(180)));
        for bad in ["", "90", "soon", "-5s", "0s"] {
            assert!(duration(bad).unwrap_err().contains("90s"), "{bad:?}");
        }
        assert_eq!(speed("60"), Ok(60.0));
        for bad in ["0", "201", "NaN", "fast"] {
            assert!(speed(bad).unwrap_err().contains("0.1 to 200"), "{bad:?}");
        }
    }
}
