//! The demo's controllers: one per machine of the plant file, each on a bench with its scenario.

use crate::config::PlantConfig;
use anyhow::Context as _;
use offcurve_core::machine::profile::PROFILE_BYTES;
use offcurve_rig::{
    HostController, HostControllerOptions,
    bench::Bench,
    emulated::{Emulator, EmulatorOptions},
    scenario::Scenario,
};
use std::{
    path::{Path, PathBuf},
    sync::{Arc, Mutex, PoisonError},
};

/// Scenario of each controller, in the order of the plant file.
const SCENARIOS: [&str; 2] = ["waterworks-healthy", "waterworks-wear"];
/// Which of them runs on the emulated board when there is one.
const EMULATED: usize = 1;

/// Where `tests/boards.sh build` puts the image, seen from the sources this program was built from.
pub(super) fn usual_image() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("../hil-fixtures/boards/target/thumbv7em-none-eabihf/release/emulated-m4f")
}

enum Running {
    Host(HostController),
    Emulated { board: Box<Emulator<Arc<Mutex<Bench>>>>, bench: Arc<Mutex<Bench>> },
}

/// All controllers of the demo; dropping them cuts their power.
pub(super) struct Controllers(Vec<(String, Running)>);

impl Controllers {
    pub(super) fn start(plant: &PlantConfig, speed: f64, image: Option<&Path>) -> anyhow::Result<Self> {
        // Rises from start to start, as a stored counter would.
        let boot = u64::try_from(jiff::Timestamp::now().as_millisecond()).unwrap_or(1);
        let mut running = Vec::new();
        for (place, (controller, scenario)) in plant.controllers.iter().zip(SCENARIOS).enumerate() {
            let scenario = Scenario::built_in(scenario)?;
            let mut bytes = [0; PROFILE_BYTES];
            let length = controller
                .machine
                .profile
                .encode(&mut bytes)
                .map_err(|error| anyhow::anyhow!("cannot encode the profile: {error:?}"))?;
            let profile = bytes[..length].to_vec();
            let one = match image {
                Some(image) if place == EMULATED => {
                    let mut bench = Bench::new(&scenario)?;
                    bench.set_scan_interval(u32::from(controller.machine.profile.schedule.scan_ms));
                    let bench = Arc::new(Mutex::new(bench));
                    let mut options = EmulatorOptions::new(image);
                    options.profile = profile;
                    options.boot = boot;
                    options.link = Some(controller.port.clone());
                    options.speed = Some(speed);
                    let board = Emulator::start(&options, Arc::clone(&bench))?;
                    Running::Emulated { board: Box::new(board), bench }
                }
                _ => {
                    let options = HostControllerOptions {
                        name: controller.name.clone(),
                        boot,
                        profile,
                        link: controller.port.clone(),
                        speed: Some(speed),
                    };
                    Running::Host(HostController::start(options, &scenario)?)
                }
            };
            running.push((controller.machine.name.clone(), one));
        }
        Ok(Self(running))
    }

    /// Whether all still run.
    pub(super) fn check(&mut self) -> anyhow::Result<()> {
        for (name, one) in &mut self.0 {
            match one {
                Running::Host(controller) => {
                    if let Some(failure) = controller.status().failure {
                        anyhow::bail!("the controller of {name} lost its port: {failure}");
                    }
                }
                Running::Emulated { board, .. } => board.check().with_context(|| format!("the board of {name}"))?,
            }
        }
        Ok(())
    }

    /// A line per controller: what it did.
    pub(super) fn report(&self) -> Vec<String> {
        let line = |(name, one): &(String, Running)| match one {
            Running::Host(controller) => {
                let status = controller.status();
                format!(
                    "{name}: {:.0} plant minutes, {} records made, {} frames dropped by the controller.",
                    status.plant_seconds / 60.0,
                    status.records_made,
                    status.dropped
                )
            }
            Running::Emulated { board, bench } => {
                let plant = bench.lock().unwrap_or_else(PoisonError::into_inner).time_s();
                let counters = board.counters();
                format!(
                    "{name}: {:.0} plant minutes on the emulated board, {} converter scans, {} estimates.",
                    plant / 60.0,
                    counters.transactions,
                    counters.captures
                )
            }
        };
        self.0.iter().map(line).collect()
    }
}
