//! Replay: the estimate and the watch of the daemon over a recorded CSV file. One row of the file is one conditioned
//! sample; its uncertainties are those of the machine file, so nothing is smoothed or guessed.
//!
//! A recorded file is dirty, so nothing in a row stops a replay: what cannot be read becomes a missing reading, is
//! counted, and the first few of each kind are located. Every input row gives one row of estimates (a blank line is
//! no row). Rows out of order (`order`) and rows without a readable time are estimated but not shown to the watch, whose
//! clock does not go back.
//! Not replayed: what the file does not hold, such as ages of readings and the scatter within 100 ms.

mod findings;
mod input;
mod lines;
mod order;
mod output;

pub use findings::{Finding, Findings};
pub use output::ESTIMATE_NAMES;

use crate::{
    alarm::{AlarmChange, AlarmKind},
    config::Machine,
    watch::Watch,
};
use input::{Layout, RowReader};
use lines::Lines;
use offcurve_core::{
    conditioning::ConditionedSample,
    estimate::{Estimate, estimate},
};
use order::{Held, Order};
use output::{AlarmWriter, EstimateWriter, OwnFile};
use std::{
    collections::BTreeSet,
    fmt,
    fs::File,
    path::{Path, PathBuf},
};

/// Why a file could not be replayed.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ReplayError {
    /// The recorded file could not be opened or read.
    #[error("cannot read {}: {source}", .file.display())]
    Read {
        /// The file.
        file: PathBuf,
        /// What the operating system said.
        source: std::io::Error,
    },
    /// The recorded file has no header line.
    #[error("{}: empty; the first line must name the columns", .file.display())]
    Empty {
        /// The file.
        file: PathBuf,
    },
    /// A line that no CSV file has.
    #[error("{}: line {line} is longer than {} bytes; is this a CSV file?", .file.display(), lines::LONGEST_LINE)]
    LineTooLong {
        /// The file.
        file: PathBuf,
        /// Its line, from 1.
        line: u64,
    },
    /// The machine file names no column of any channel.
    #[error("{}: no sensor has a column; write e.g. column = \"flow\" and column_unit = \"m3/h\" in [sensors.flow]", .machine.display())]
    NoColumns {
        /// The machine file.
        machine: PathBuf,
    },
    /// A column that the machine file names is not in the recorded file, or is there more than once.
    #[error("{0}")]
    Column(Box<ColumnProblem>),
    /// An output file is there already and was not written by a replay.
    #[error("{} is there already and was not written by a replay; choose another --out", .file.display())]
    NotOurs {
        /// The file.
        file: PathBuf,
    },
    /// An output could not be written.
    #[error("cannot write {}: {source}", .file.display())]
    Write {
        /// The file or folder.
        file: PathBuf,
        /// What the operating system said.
        source: std::io::Error,
    },
}

/// How many columns a message names.
const MOST_COLUMNS: usize = 40;

/// A column that cannot be found.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ColumnProblem {
    /// The recorded file.
    pub input: PathBuf,
    /// The machine file.
    pub machine: PathBuf,
    /// Its key that names the column.
    pub key: String,
    /// The column's name.
    pub column: String,
    /// How many columns have that name.
    pub times: usize,
    /// The columns that are there.
    pub found: Vec<String>,
}

impl fmt::Display for ColumnProblem {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        // The header may be anything, a binary file's first bytes among it.
        let mut found: Vec<String> =
            self.found.iter().take(MOST_COLUMNS).map(|name| findings::shown(name.as_bytes())).collect();
        if self.found.len() > MOST_COLUMNS {
            found.push(format!("and {} more", self.found.len() - MOST_COLUMNS));
        }
        write!(
            out,
            "{}: {} column named {:?} ({} in {}); the columns are: {}",
            self.input.display(),
            if self.times == 0 { "no" } else { "more than one" },
            self.column,
            self.key,
            self.machine.display(),
            found.join(", ")
        )
    }
}

/// What to replay.
#[derive(Clone, Copy, Debug)]
pub struct Options<'a> {
    /// The machine.
    pub machine: &'a Machine,
    /// The recorded file.
    pub input: &'a Path,
    /// The folder for the results; made if it is not there.
    pub out: &'a Path,
    /// Leave the watch out.
    pub estimates_only: bool,
}

/// What a replay did.
#[derive(Clone, Debug, Default)]
#[non_exhaustive]
pub struct Summary {
    /// Rows read, blank lines not counted.
    pub rows: u64,
    /// Rows given to the watch.
    pub watched: u64,
    /// What was found wrong in them.
    pub findings: Findings,
    /// Alarm changes, in order, each with the time as the file writes it.
    pub changes: Vec<(String, AlarmChange)>,
    /// The alarms active at the end.
    pub active: Vec<AlarmKind>,
}

/// Replays a file.
///
/// # Errors
/// [`ReplayError`]; results written so far are left under their temporary names, existing results stay as they were.
pub fn run(options: &Options<'_>) -> Result<Summary, ReplayError> {
    let Options { machine, input, out, estimates_only } = *options;
    let file = File::open(input).map_err(|source| ReplayError::Read { file: input.to_owned(), source })?;
    let mut lines = Lines::new(file);
    let layout = Layout::from_header(&mut lines, machine, input)?;

    std::fs::create_dir_all(out).map_err(|source| ReplayError::Write { file: out.to_owned(), source })?;
    let mut estimates = EstimateWriter::new(
        OwnFile::create(out.join("estimates.csv"), |header| header.ends_with(&output::estimate_header_tail()))?,
        layout.time_name(),
    )?;
    let mut alarms = if estimates_only {
        None
    } else {
        let file = OwnFile::create(out.join("alarms.csv"), |header| header == output::ALARM_HEADER)?;
        Some(AlarmWriter::new(file, &machine.name)?)
    };

    let mut summary = Summary::default();
    let mut watcher = Watcher::new(machine);
    let mut order = Order::default();
    let mut reader = RowReader::new(layout, &machine.profile, machine.columns.time_format);
    while let Some((number, line)) = lines.next(input)? {
        if line.iter().all(u8::is_ascii_whitespace) {
            continue;
        }
        summary.rows += 1;
        let row = reader.read(number, line, &mut summary.findings);
        let found = estimate(&row.sample, &machine.profile);
        estimates.write(row.time, &found)?;
        let Some(at) = row.at else { continue };
        let Some(passed) = order.push(number, at, row.time, &(row.sample, found), &mut summary.findings) else {
            continue;
        };
        if let Some(alarms) = &mut alarms {
            watcher.push(passed, alarms, &mut summary)?;
        }
    }
    if let Some(passed) = order.finish(&mut summary.findings)
        && let Some(alarms) = &mut alarms
    {
        watcher.push(passed, alarms, &mut summary)?;
    }
    estimates.finish()?;
    if let Some(alarms) = alarms {
        alarms.finish()?;
    }
    summary.active = watcher.active.into_iter().collect();
    Ok(summary)
}

/// The watch over the rows that are in order.
struct Watcher<'m> {
    machine: &'m Machine,
    watch: Watch,
    active: BTreeSet<AlarmKind>,
}

impl<'m> Watcher<'m> {
    fn new(machine: &'m Machine) -> Self {
        Self { machine, watch: Watch::new(&machine.profile, machine.watch), active: BTreeSet::new() }
    }

    fn push(
        &mut self,
        passed: &Held<(ConditionedSample, Estimate)>,
        alarms: &mut AlarmWriter,
        summary: &mut Summary,
    ) -> Result<(), ReplayError> {
        if summary.watched == 0 {
            alarms.first(&passed.time)?;
        }
        summary.watched += 1;
        let (sample, found) = &passed.what;
        for change in self.watch.push(passed.at, sample, found) {
            if change.state.is_active() {
                self.active.insert(change.kind);
            } else {
                self.active.remove(&change.kind);
            }
            let time = input::time_text(change.at, passed.at, &passed.time, self.machine.columns.time_format);
            alarms.change(&time, !self.active.is_empty(), &change)?;
            summary.changes.push((time, change));
        }
        Ok(())
    }
}
