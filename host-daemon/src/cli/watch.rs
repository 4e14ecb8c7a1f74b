//! `offcurve watch`: the daemon in the foreground, for a service manager or a person.

use crate::{
    config::PlantConfig,
    live::{Display, LogAbove, Screen},
    runtime::{self, Listeners, Plant},
};
use anyhow::Context;
use std::{path::PathBuf, process::ExitCode, sync::Arc};
use tokio::signal::unix::{SignalKind, signal};
use tracing_subscriber::{EnvFilter, util::SubscriberInitExt};

/// Read the controllers of a plant, store their records and raise alarms until stopped.
#[derive(Debug, clap::Args)]
pub struct Watch {
    /// The plant file.
    #[arg(long, value_name = "FILE")]
    config: PathBuf,
    /// Show a line for each machine: what it does now, and how that stands against its curve.
    #[arg(long)]
    live: bool,
}

impl Watch {
    /// Runs until SIGINT or SIGTERM.
    ///
    /// # Errors
    /// A bad configuration; a store that cannot be opened, or not be written at the stop.
    pub fn run(&self) -> anyhow::Result<ExitCode> {
        let screen = Arc::new(Screen::default());
        start_logging(&screen);
        let plant = Plant::from(PlantConfig::load(&self.config)?);
        let board = self.live.then(|| Arc::new(plant.board()));
        let display = match &board {
            Some(board) => Some(Display::start(Arc::clone(board), screen).context("cannot show live lines")?),
            None => None,
        };
        let result = tokio::runtime::Builder::new_current_thread().enable_all().build()?.block_on(async {
            // Before anything is opened, so that a stop during the start is a clean one, too.
            let stop = stop_signal().context("cannot listen for SIGINT and SIGTERM")?;
            let listeners = Listeners { board, ..Listeners::default() };
            Ok::<_, anyhow::Error>(runtime::run(plant, listeners, stop).await?)
        });
        if let Some(display) = display {
            display.stop();
        }
        result.map(|_| ExitCode::SUCCESS)
    }
}

/// Logs to stderr, filtered by `OFFCURVE_LOG` (default `info`); on a terminal above the live lines of `screen`.
///
/// Does nothing when the process logs already.
pub fn start_logging(screen: &Arc<Screen>) {
    let filter = EnvFilter::try_from_env("OFFCURVE_LOG").unwrap_or_else(|_| EnvFilter::new("info"));
    let logger = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_target(false)
        .with_ansi(false)
        .with_writer(LogAbove(Arc::clone(screen)))
        .finish();
    // Refused only when a logger is set already, by a test or an embedding program.
    let _ = logger.try_init();
}

/// Ready at the first SIGINT or SIGTERM. A second one ends the process the hard way: handlers go with this future.
///
/// # Errors
/// When the system refuses a signal handler.
pub fn stop_signal() -> std::io::Result<impl Future<Output = ()> + Send + 'static> {
    let mut interrupt = signal(SignalKind::interrupt())?;
    let mut terminate = signal(SignalKind::terminate())?;
    Ok(async move {
        tokio::select! {
            _ = interrupt.recv() => {}
            _ = terminate.recv() => {}
        }
    })
}
