//! Machine and plant files: TOML as people write it, turned into checked values in SI, or into errors that say where,
//! what was found and what is allowed. All problems of a file are reported together, so that a commissioning engineer
//! corrects it once.
//!
//! Files are read by key through `reader::Section`, not into mirror structs: every message can then name the key's full path, its
//! line and the nearest allowed word. A key that nobody asked for is an error.

mod curve;
mod error;
mod machine;
mod plant;
mod reader;
mod review;
mod sensors;
mod settings;
pub mod units;

pub use curve::{BestEfficiency, ImpellerReport};
pub use error::{ConfigError, Problem};
pub use machine::Machine;
pub use plant::{ControllerConfig, PlantConfig};
pub use sensors::{ChannelColumn, Columns, TimeFormat};

use offcurve_core::sensing::Channel;
use std::path::Path;

/// The key of a channel's table under `[sensors]`.
#[must_use]
pub const fn channel_key(channel: Channel) -> &'static str {
    sensors::key(channel)
}

/// What a file is, told by its top-level keys.
#[derive(Debug)]
pub enum AnyFile {
    /// A machine file (`machine = "..."`).
    Machine(Box<Machine>),
    /// A plant file (`[[controller]]`).
    Plant(PlantConfig),
}

/// Loads a file that may be a machine file or a plant file.
///
/// # Errors
/// [`ConfigError`], as [`Machine::load`] and [`PlantConfig::load`]; a file that has neither a `machine` nor a
/// `[[controller]]` is refused.
pub fn load_any(path: &Path) -> Result<AnyFile, ConfigError> {
    let text = error::read(path)?;
    match reader::top_level_kind(&text) {
        Some(reader::Kind::Plant) => PlantConfig::parse(&text, path).map(AnyFile::Plant),
        Some(reader::Kind::Machine) => Machine::parse(&text, path).map(|machine| AnyFile::Machine(Box::new(machine))),
        None => Err(ConfigError::one(
            path,
            None,
            "",
            "neither a machine file (it has no machine = \"name\") nor a plant file (it has no [[controller]])",
        )),
    }
}
