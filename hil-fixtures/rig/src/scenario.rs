//! Scenario files: what the plant is, how its day runs and what goes wrong when.
//!
//! TOML with units in the values. Unknown keys are refused, and every complaint names the file, the key, what was
//! found and what is allowed, so that a slip of the pen cannot quietly become a healthy run. Reading has two stages:
//! serde gives the raw keys, then they are checked into [`Scenario`], which the bench trusts.
//!
//! | table | keys (`seed` alone is required) |
//! |---|---|
//! | top | `title`, `seed`, `duration` |
//! | `[plant]` | `density`, `speed`, `max_speed`, `valve`, `run`, `wear_ring_clearance`, `static_lift`, `rated_flow`, `pipe_loss`, `valve_loss` (both at the rated flow), `suction_level`, `level_swing`, `level_period`, `demand_noise`, `demand_correlation`, `level_noise`, `level_correlation` |
//! | `[sensors.flow]`, `suction`, `discharge`, `torque` | `range` (values at 4 and 20 mA), `lag`, `noise_of_reading`, `noise_of_span`, `ripple_of_span` |
//! | `[pulses]` | `per_revolution`, `direction` (a second pick-up is there) |
//! | `[[pattern]]` | `for`, `speed`, `valve`; the steps repeat for ever |
//! | `[[event]]` | `at` and one of `speed`, `valve`, `suction_level`, `run`, `wear_ring_clearance` (with `over`), `sensor` (with `fault`: `none`, `open loop`, `stuck`, `gain`, `offset`, the last two with `amount`), `converter` (`healthy`, `dead`, `bit 5 high`) |
//!
//! ```
//! use offcurve_rig::scenario::Scenario;
//! let text = "seed = 3\n[plant]\nspeed = \"1480 rpm\"\n[[event]]\nat = \"20 min\"\nvalve = \"60 %\"\n";
//! assert_eq!(Scenario::parse(text, "short.toml")?.events.len(), 1);
//! let error = Scenario::parse("seed = 3\n[plant]\nspeed = \"1480\"\n", "short.toml").unwrap_err();
//! assert_eq!(
//!     error.to_string(),
//!     "short.toml: plant.speed is \"1480\", allowed is a speed such as \"1480 rpm\" (rpm, 1/min, 1/s)"
//! );
//! # Ok::<(), offcurve_rig::scenario::ScenarioError>(())
//! ```

use std::path::Path;

use offcurve_plant::{PlantConfig, SensorFault, TransmitterSpec};

use crate::converter::ConverterFault;

mod check;
mod raw;
mod units;

/// The instruments of the bench; the number is the converter input each is wired to.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Sensor {
    /// Delivered flow, m³/s.
    Flow = 0,
    /// Pressure at the suction gauge, Pa gauge.
    Suction = 1,
    /// Pressure at the discharge gauge, Pa gauge.
    Discharge = 2,
    /// Torque at the coupling, N·m.
    Torque = 3,
}

impl Sensor {
    /// All instruments in the order of their inputs.
    pub const ALL: [Self; 4] = [Self::Flow, Self::Suction, Self::Discharge, Self::Torque];

    /// The name used in scenario files.
    pub fn name(self) -> &'static str {
        match self {
            Self::Flow => "flow",
            Self::Suction => "suction",
            Self::Discharge => "discharge",
            Self::Torque => "torque",
        }
    }

    /// The converter input it is wired to.
    pub fn input(self) -> usize {
        self as usize
    }
}

/// Something that happens once.
#[derive(Debug, Clone, PartialEq)]
pub struct Event {
    /// When, microseconds of plant time.
    pub at_us: u64,
    /// What.
    pub action: Action,
}

/// What can happen.
#[derive(Debug, Clone, PartialEq)]
pub enum Action {
    /// New speed set-point, rev/min; holds until the next step of the pattern.
    Speed(f64),
    /// New valve opening, 0 to 1; holds until a step of the pattern that names a valve.
    Valve(f64),
    /// New mean suction level above the pump's axis, m.
    SuctionLevel(f64),
    /// Start or stop.
    Run(bool),
    /// The wear ring opens (or is repaired) from its present clearance to this one.
    RingClearance {
        /// Clearance at the end, m.
        to_m: f64,
        /// Time it takes, microseconds; 0 is at once.
        over_us: u64,
    },
    /// An instrument fails or recovers.
    Sensor(Sensor, SensorFault),
    /// The converter chip fails or recovers.
    Converter(ConverterFault),
}

/// One stretch of the daily pattern.
#[derive(Debug, Clone, PartialEq)]
pub struct Step {
    /// How long it lasts, microseconds, never 0.
    pub for_us: u64,
    /// Speed set-point, rev/min.
    pub speed_rpm: f64,
    /// Valve opening, 0 to 1, where the step names one.
    pub valve: Option<f64>,
}

/// A checked scenario.
#[derive(Debug, Clone, PartialEq)]
pub struct Scenario {
    /// One line for people; may be empty.
    pub title: String,
    /// Seed of all noise and calibration errors.
    pub seed: u64,
    /// Length of the run in microseconds; `None` runs until stopped.
    pub duration_us: Option<u64>,
    /// The plant at the start.
    pub plant: PlantConfig,
    /// Instruments in the order of [`Sensor::ALL`].
    pub sensors: [TransmitterSpec; 4],
    /// Teeth of the speed wheel.
    pub pulses_per_revolution: u32,
    /// Whether there is a second pick-up that tells the direction.
    pub direction_input: bool,
    /// Speed pattern, repeated for ever; may be empty.
    pub pattern: Vec<Step>,
    /// Events in order of time.
    pub events: Vec<Event>,
}

/// Why a scenario was refused.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ScenarioError {
    /// The file could not be read.
    #[error("cannot read scenario {origin}")]
    Read {
        /// The path.
        origin: String,
        /// The system's reason.
        #[source]
        source: std::io::Error,
    },
    /// Not TOML, an unknown key or a missing one; the source says which and where.
    #[error("{origin}: {source}")]
    Syntax {
        /// The path or name of the text.
        origin: String,
        /// The parser's message with line and column.
        source: Box<toml::de::Error>,
    },
    /// A key holds something it must not.
    #[error("{origin}: {key} is {found}, allowed is {allowed}")]
    Value {
        /// The path or name of the text.
        origin: String,
        /// The key, for example `event[2].at` (counted from 1).
        key: String,
        /// What was found there.
        found: String,
        /// What may stand there.
        allowed: String,
    },
}

/// Scenarios that come with the rig: name and text.
pub const BUILT_IN: [(&str, &str); 2] = [
    ("waterworks-healthy", include_str!("../../scenarios/waterworks-healthy.toml")),
    ("waterworks-wear", include_str!("../../scenarios/waterworks-wear.toml")),
];

impl Scenario {
    /// Reads a scenario file.
    ///
    /// # Errors
    /// [`ScenarioError`] naming the file and, where one is at fault, the key.
    pub fn load(path: &Path) -> Result<Self, ScenarioError> {
        let origin = path.display().to_string();
        let text =
            std::fs::read_to_string(path).map_err(|source| ScenarioError::Read { origin: origin.clone(), source })?;
        Self::parse(&text, &origin)
    }

    /// Reads a scenario from text; `origin` names it in messages.
    ///
    /// # Errors
    /// As [`Scenario::load`], without [`ScenarioError::Read`].
    pub fn parse(text: &str, origin: &str) -> Result<Self, ScenarioError> {
        let raw = toml::from_str::<raw::Scenario>(text)
            .map_err(|source| ScenarioError::Syntax { origin: origin.to_owned(), source: Box::new(source) })?;
        check::scenario(raw, origin)
    }

    /// A scenario that comes with the rig, by its name in [`BUILT_IN`].
    ///
    /// # Errors
    /// [`ScenarioError::Value`] for a name that is not there.
    pub fn built_in(name: &str) -> Result<Self, ScenarioError> {
        let Some((_, text)) = BUILT_IN.iter().find(|(known, _)| *known == name) else {
            return Err(ScenarioError::Value {
                origin: "built-in scenarios".to_owned(),
                key: "name".to_owned(),
                found: format!("{name:?}"),
                allowed: BUILT_IN.map(|(known, _)| known).join(", "),
            });
        };
        Self::parse(text, name)
    }
}

#[cfg(test)]
mod tests;
