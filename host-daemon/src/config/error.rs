//! What can be wrong with a configuration file, in words for the person who wrote it.

use std::{
    fmt,
    path::{Path, PathBuf},
};

/// A machine or plant file could not be used.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ConfigError {
    /// The file could not be read.
    #[error("cannot read {}: {source}", .file.display())]
    Read {
        /// The file asked for.
        file: PathBuf,
        /// What the operating system said.
        source: std::io::Error,
    },
    /// The file was read; these things in it are wrong. At least one.
    #[error("{}", lines(.problems))]
    Invalid {
        /// Every problem found, in the order of the file.
        problems: Vec<Problem>,
    },
}

/// One thing wrong in a file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Problem {
    /// The file it is in.
    pub file: PathBuf,
    /// Line, from 1; `None` when it concerns the file as a whole.
    pub line: Option<usize>,
    /// Full path of the key, as `sensors.flow.range`; empty when there is no one key.
    pub key: String,
    /// What was found and what is allowed.
    pub message: String,
}

impl fmt::Display for Problem {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(out, "{}:", self.file.display())?;
        if let Some(line) = self.line {
            write!(out, "{line}:")?;
        }
        if !self.key.is_empty() {
            write!(out, " {}:", self.key)?;
        }
        write!(out, " {}", self.message)
    }
}

impl ConfigError {
    pub(super) fn one(file: &Path, line: Option<usize>, key: &str, message: impl Into<String>) -> Self {
        let problem = Problem { file: file.to_owned(), line, key: key.to_owned(), message: message.into() };
        Self::Invalid { problems: vec![problem] }
    }
}

/// The largest file read, bytes: far above any real one, so that a wrong path cannot fill the memory.
const LARGEST_FILE: u64 = 1 << 20;

pub(super) fn read(path: &Path) -> Result<String, ConfigError> {
    let failed = |source| ConfigError::Read { file: path.to_owned(), source };
    let mut text = String::new();
    let file = std::fs::File::open(path).map_err(failed)?;
    match std::io::Read::read_to_string(&mut std::io::Read::take(file, LARGEST_FILE + 1), &mut text) {
        Err(error) if error.kind() == std::io::ErrorKind::InvalidData => {
            return Err(ConfigError::one(path, None, "", "not a text in UTF-8: this is no machine or plant file"));
        }
        other => other.map_err(failed)?,
    };
    if text.len() as u64 > LARGEST_FILE {
        return Err(ConfigError::one(path, None, "", "larger than 1 MiB: this is no machine or plant file"));
    }
    Ok(text)
}

fn lines(problems: &[Problem]) -> String {
    problems.iter().map(Problem::to_string).collect::<Vec<_>>().join("\n")
}
