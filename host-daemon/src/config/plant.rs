//! The plant file: which controllers there are, at which ports, with which machines, and where the records go.

use super::{
    Machine,
    curve::or_default,
    error::{self, ConfigError},
    reader::{Bounds, Document, Kind, Section, top_level_kind},
    units::Dimension,
};
use std::path::{Path, PathBuf};

/// Symbol rate of a line that states none, Bd.
const USUAL_BAUD: f64 = 115_200.0;

/// A plant, checked, with its machines.
#[derive(Clone, Debug)]
#[non_exhaustive]
pub struct PlantConfig {
    /// Its name, as people say it.
    pub name: String,
    /// The file it came from.
    pub file: PathBuf,
    /// The database file; relative paths of the file are relative to the file's own folder.
    pub store: PathBuf,
    /// The controllers, at least one.
    pub controllers: Vec<ControllerConfig>,
}

/// One controller on one line.
#[derive(Clone, Debug)]
#[non_exhaustive]
pub struct ControllerConfig {
    /// Its name, as people say it.
    pub name: String,
    /// The serial device; never relative to the plant file.
    pub port: PathBuf,
    /// Symbol rate of the line, Bd.
    pub baud: u32,
    /// The machine it watches.
    pub machine: Machine,
}

impl ControllerConfig {
    /// A controller put together by a program, not read from a file.
    #[must_use]
    pub const fn new(name: String, port: PathBuf, baud: u32, machine: Machine) -> Self {
        Self { name, port, baud, machine }
    }
}

impl PlantConfig {
    /// A plant put together by a program, not read from a file; nothing is checked.
    #[must_use]
    pub const fn new(name: String, store: PathBuf, controllers: Vec<ControllerConfig>) -> Self {
        Self { name, file: PathBuf::new(), store, controllers }
    }

    /// Reads and checks a plant file and the machine files it names.
    ///
    /// # Errors
    /// [`ConfigError`], with the problems of the machine files too.
    pub fn load(path: &Path) -> Result<Self, ConfigError> {
        Self::parse(&error::read(path)?, path)
    }

    /// Checks the text of a plant file; its machine files are read from disk, relative to the folder of `path`.
    ///
    /// # Errors
    /// [`ConfigError`], with the problems of the machine files too.
    pub fn parse(text: &str, path: &Path) -> Result<Self, ConfigError> {
        let document = Document::parse(text, path)?;
        if let Some(Kind::Machine) = top_level_kind(text) {
            let message =
                "this is a machine file; a plant file is wanted, whose [[controller]] tables name machine files";
            return Err(ConfigError::one(path, None, "", message));
        }
        let plant = read(&document, path);
        document.finish()?;
        plant.ok_or_else(|| ConfigError::one(path, None, "", "cannot be used"))
    }
}

fn read(document: &Document<'_>, path: &Path) -> Option<PlantConfig> {
    let folder = path.parent().unwrap_or(Path::new(""));
    let mut root = document.root();
    let name = root.require_text("name", "Waterworks");
    let store = root.require_text("store", "waterworks.db");
    let there = root.has("controller");
    let sections = root.sections("controller");
    if !there || (sections.is_empty() && document.is_clean()) {
        document.problem(None, "controller", "missing; a plant has at least one [[controller]]");
    }
    let complete: Vec<Option<ControllerConfig>> =
        sections.into_iter().map(|section| controller(section, folder)).collect();
    root.finish();
    let controllers = complete.into_iter().collect::<Option<Vec<_>>>()?;
    refuse_doubles(document, &controllers);
    Some(PlantConfig { name: name?.to_owned(), file: path.to_owned(), store: folder.join(store?), controllers })
}

fn controller(mut section: Section<'_>, folder: &Path) -> Option<ControllerConfig> {
    let name = section.require_text("name", "pump house");
    let port = section.require_text("port", "/dev/ttyUSB0");
    let baud = or_default(&mut section, "baud", Dimension::SymbolRate, Bounds(300.0, 4_000_000.0), USUAL_BAUD);
    let machine =
        section.require_text("machine", "well-pump-2.toml").and_then(|file| match Machine::load(&folder.join(file)) {
            Ok(machine) => Some(machine),
            Err(ConfigError::Read { file, source }) => {
                section.problem("machine", format!("cannot read {}: {source}", file.display()));
                None
            }
            Err(ConfigError::Invalid { problems }) => {
                section.document().adopt(problems);
                None
            }
        });
    section.finish();
    Some(ControllerConfig {
        name: name?.to_owned(),
        port: PathBuf::from(port?),
        baud: baud?.round() as u32, // within the bounds above
        machine: machine?,
    })
}

/// Two controllers must differ in name, port, and in the name and tag of their machine: the store keeps records by tag.
fn refuse_doubles(document: &Document<'_>, controllers: &[ControllerConfig]) {
    for (later, one) in controllers.iter().enumerate() {
        for (earlier, other) in controllers[..later].iter().enumerate() {
            let pairs = [
                ("name", one.name == other.name, format!("{:?}", one.name)),
                ("port", one.port == other.port, format!("{:?}", one.port)),
                (
                    "machine",
                    one.machine.profile.machine == other.machine.profile.machine,
                    format!("tag {}", one.machine.profile.machine),
                ),
                ("machine", one.machine.name == other.machine.name, format!("{:?}", one.machine.name)),
            ];
            for (key, same, what) in pairs {
                if same {
                    let message = format!("{what} is also that of controller[{}] {:?}", earlier + 1, other.name);
                    document.problem(None, &format!("controller[{}].{key}", later + 1), message);
                }
            }
        }
    }
}
