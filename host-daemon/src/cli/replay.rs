//! `offcurve replay`: estimates and the watch over a recorded file.

use crate::{
    config::Machine,
    replay::{self, Options},
};
use std::{io::Write as _, path::PathBuf, process::ExitCode, time::Instant};

/// How many alarm changes are printed; all of them are in `alarms.csv`.
const SHOWN: usize = 20;

/// Runs estimates and the watch over a recorded CSV file, with the code that the daemon runs.
///
/// The machine file says which column holds which channel, in which unit, and how time is written. DIR gets
/// estimates.csv (SI units in the column names, a row per input row) and alarms.csv (a row per change). DIR is made if
/// it is not there; files of these names are replaced only if a replay wrote them.
#[derive(Debug, clap::Args)]
pub struct Replay {
    /// The machine file.
    #[arg(long, value_name = "FILE")]
    machine: PathBuf,
    /// The recorded CSV file; its first line names the columns.
    #[arg(long, value_name = "FILE")]
    input: PathBuf,
    /// The folder for the results.
    #[arg(long, value_name = "DIR")]
    out: PathBuf,
    /// Leave the watch out: no alarms.csv.
    #[arg(long)]
    estimates_only: bool,
}

impl Replay {
    /// Runs the command.
    ///
    /// # Errors
    /// A machine file or a recorded file that cannot be used, or results that cannot be written.
    pub fn run(&self) -> anyhow::Result<ExitCode> {
        let machine = Machine::load(&self.machine)?;
        for warning in &machine.warnings {
            note(&format!("{}: note: {warning}\n", machine.file.display()));
        }
        let start = Instant::now();
        let summary = replay::run(&Options {
            machine: &machine,
            input: &self.input,
            out: &self.out,
            estimates_only: self.estimates_only,
        })?;
        let seconds = start.elapsed().as_secs_f64();
        let findings = summary.findings.to_string();
        if !findings.is_empty() {
            note(&format!("{}:\n{findings}", self.input.display()));
        }
        let mut out = String::new();
        for (time, change) in summary.changes.iter().take(SHOWN) {
            out += &format!("{time} {} {}: {}\n", change.kind, change.state.id(), change.text);
        }
        if summary.changes.len() > SHOWN {
            out += &format!("and {} more changes, see alarms.csv\n", summary.changes.len() - SHOWN);
        }
        out += &format!(
            "{}: {} rows in {seconds:.2} s ({:.0} rows/s); results in {}\n",
            machine.name,
            summary.rows,
            summary.rows as f64 / seconds.max(1e-9),
            self.out.display()
        );
        if !self.estimates_only {
            let active: Vec<String> = summary.active.iter().map(ToString::to_string).collect();
            let state = if active.is_empty() { "none".to_owned() } else { active.join(", ") };
            out += &format!(
                "rows watched: {}; alarm changes: {}; active at the end: {state}\n",
                summary.watched,
                summary.changes.len()
            );
        }
        super::say(&out)?;
        Ok(ExitCode::SUCCESS)
    }
}

/// Says something beside the result; with nobody to hear it the result counts all the same.
fn note(text: &str) {
    let _ = std::io::stderr().lock().write_all(text.as_bytes());
}
