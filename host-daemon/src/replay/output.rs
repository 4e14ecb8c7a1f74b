//! The two result files: `estimates.csv`, one row per input row, and `alarms.csv`, one row per alarm change.
//!
//! A file is written under a temporary name and takes its real name when it is complete, so a result that is there is
//! a whole one. A file of the same name that no replay wrote is never replaced; it is told by its header line.

use super::ReplayError;
use crate::alarm::AlarmChange;
use offcurve_core::{
    estimate::{Estimate, Outcome},
    quantity::Quantity,
};
use std::{
    fs::File,
    io::{BufRead, BufReader, BufWriter, Read, Write},
    path::PathBuf,
};

/// Name and SI unit of each estimate, in the order of the columns.
pub const ESTIMATE_NAMES: [(&str, &str); 11] = [
    ("head", "m"),
    ("hydraulic_power", "W"),
    ("momentum_torque", "Nm"),
    ("shaft_torque", "Nm"),
    ("shaft_power", "W"),
    ("efficiency", "1"),
    ("relative_flow", "1"),
    ("expected_head", "m"),
    ("expected_power", "W"),
    ("head_residual", "m"),
    ("power_residual", "W"),
];

/// How many causes an alarm row holds.
const CAUSES: usize = 3;

pub(super) const ALARM_HEADER: &str =
    "machine,timestamp,alarm,alarm_id,state,cause_1,cause_1_weight,cause_2,cause_2_weight,cause_3,cause_3_weight";

/// The header of `estimates.csv` after the name of the time column.
pub(super) fn estimate_header_tail() -> String {
    ESTIMATE_NAMES.iter().map(|(name, unit)| format!(",{name}_{unit},{name}_u_{unit},{name}_source")).collect()
}

/// An output file under its temporary name.
pub(super) struct OwnFile {
    writer: BufWriter<File>,
    path: PathBuf,
    temporary: PathBuf,
}

impl OwnFile {
    /// Opens a file for writing, if none is there or `is_ours` recognises the header line of the one that is.
    pub(super) fn create(path: PathBuf, is_ours: impl FnOnce(&str) -> bool) -> Result<Self, ReplayError> {
        if let Ok(existing) = File::open(&path) {
            let mut header = String::new();
            let read = BufReader::new(existing.take(1 << 16)).read_line(&mut header);
            if read.is_err() || !is_ours(header.trim_end_matches(['\n', '\r'])) {
                return Err(ReplayError::NotOurs { file: path });
            }
        } else if path.exists() {
            return Err(ReplayError::NotOurs { file: path });
        }
        let mut temporary = path.clone();
        temporary.as_mut_os_string().push(".part");
        match File::create(&temporary) {
            Ok(file) => Ok(Self { writer: BufWriter::with_capacity(1 << 18, file), path, temporary }),
            Err(source) => Err(ReplayError::Write { file: temporary, source }),
        }
    }

    fn write(&mut self, bytes: &[u8]) -> Result<(), ReplayError> {
        self.writer.write_all(bytes).map_err(|source| ReplayError::Write { file: self.temporary.clone(), source })
    }

    fn finish(mut self) -> Result<(), ReplayError> {
        self.writer.flush().map_err(|source| ReplayError::Write { file: self.temporary.clone(), source })?;
        std::fs::rename(&self.temporary, &self.path)
            .map_err(|source| ReplayError::Write { file: self.path.clone(), source })
    }
}

/// Appends a field, in quotes where it needs them.
fn field(line: &mut Vec<u8>, text: &[u8]) {
    if !text.iter().any(|byte| matches!(byte, b',' | b'"' | b'\n' | b'\r')) {
        line.extend_from_slice(text);
        return;
    }
    line.push(b'"');
    for &byte in text {
        if byte == b'"' {
            line.push(b'"');
        }
        line.push(byte);
    }
    line.push(b'"');
}

/// Writes `estimates.csv`.
pub(super) struct EstimateWriter {
    file: OwnFile,
    line: Vec<u8>,
    digits: zmij::Buffer,
}

impl EstimateWriter {
    pub(super) fn new(mut file: OwnFile, time_name: &str) -> Result<Self, ReplayError> {
        let mut line = Vec::with_capacity(1 << 10);
        field(&mut line, time_name.as_bytes());
        line.extend_from_slice(estimate_header_tail().as_bytes());
        line.push(b'\n');
        file.write(&line)?;
        Ok(Self { file, line, digits: zmij::Buffer::new() })
    }

    pub(super) fn write(&mut self, time: &[u8], estimate: &Estimate) -> Result<(), ReplayError> {
        self.line.clear();
        field(&mut self.line, time);
        self.outcome(&estimate.head);
        self.outcome(&estimate.hydraulic_power);
        self.outcome(&estimate.momentum_torque);
        self.outcome(&estimate.shaft_torque);
        self.outcome(&estimate.shaft_power);
        self.outcome(&estimate.efficiency);
        self.outcome(&estimate.relative_flow);
        self.outcome(&estimate.expected_head);
        self.outcome(&estimate.expected_power);
        self.outcome(&estimate.head_residual);
        self.outcome(&estimate.power_residual);
        self.line.push(b'\n');
        self.file.write(&self.line)
    }

    fn outcome<T: Quantity>(&mut self, outcome: &Outcome<T>) {
        let line = &mut self.line;
        match outcome {
            Ok(found) if found.value.si().is_finite() && found.deviation.si().is_finite() => {
                line.push(b',');
                line.extend_from_slice(self.digits.format_finite(found.value.si()).as_bytes());
                line.push(b',');
                line.extend_from_slice(self.digits.format_finite(found.deviation.si()).as_bytes());
                line.push(b',');
                line.extend_from_slice(found.source.name().as_bytes());
            }
            Ok(_) => line.extend_from_slice(b",,,not finite"), // overflow of absurd input
            Err(missing) => {
                line.extend_from_slice(b",,,");
                line.extend_from_slice(missing.name().as_bytes());
            }
        }
    }

    pub(super) fn finish(self) -> Result<(), ReplayError> {
        self.file.finish()
    }
}

/// Writes `alarms.csv`.
pub(super) struct AlarmWriter {
    file: OwnFile,
    machine: String,
}

impl AlarmWriter {
    pub(super) fn new(mut file: OwnFile, machine: &str) -> Result<Self, ReplayError> {
        file.write(format!("{ALARM_HEADER}\n").as_bytes())?;
        Ok(Self { file, machine: machine.to_owned() })
    }

    /// The state before anything was watched, at the time of the first sample.
    pub(super) fn first(&mut self, time: &[u8]) -> Result<(), ReplayError> {
        self.row(time, false, "", "normal", &[])
    }

    /// One change; `any` says whether any alarm of the machine is active after it.
    pub(super) fn change(&mut self, time: &str, any: bool, change: &AlarmChange) -> Result<(), ReplayError> {
        let causes: Vec<(&str, f64)> = change.causes.iter().map(|ranked| (ranked.cause, ranked.weight)).collect();
        self.row(time.as_bytes(), any, change.kind.id(), change.state.id(), &causes)
    }

    fn row(
        &mut self,
        time: &[u8],
        alarm: bool,
        id: &str,
        state: &str,
        causes: &[(&str, f64)],
    ) -> Result<(), ReplayError> {
        let mut line = Vec::new();
        field(&mut line, self.machine.as_bytes());
        line.push(b',');
        field(&mut line, time);
        line.extend_from_slice(format!(",{},{id},{state}", u8::from(alarm)).as_bytes());
        for place in 0..CAUSES {
            line.push(b',');
            if let Some((cause, weight)) = causes.get(place) {
                field(&mut line, cause.as_bytes());
                line.extend_from_slice(format!(",{weight:.3}").as_bytes());
            } else {
                line.push(b',');
            }
        }
        line.push(b'\n');
        self.file.write(&line)
    }

    pub(super) fn finish(self) -> Result<(), ReplayError> {
        self.file.finish()
    }
}
