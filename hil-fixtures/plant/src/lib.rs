//! An f64 model of a pump and the plant around it, so that the monitoring chain can be tried against a known truth.
//!
//! The crate depends on no other crate of this workspace on purpose: were it built from the laws that the
//! controller uses, a test would compare those laws with themselves. It is therefore a build-up of losses with a
//! slip model of another school ([`pump`]), a pipe with inertia ([`system`]), a drive ([`drive`]), wandering demand
//! ([`noise`]) and sensors with lag, noise and calibration error ([`sensor`]).
//!
//! Everything is SI unless a name says otherwise (`_rpm`, `_ma`); gauge pressures are relative to the local
//! atmosphere. A run is a function of the configuration, the seed and the sequence of calls, bit for bit on every
//! machine: the generator is a fixed algorithm and transcendental functions come from `libm`, not the platform.
//!
//! Not modelled: cavitation, reverse rotation and reverse flow, water hammer (the liquid is a rigid column), motor
//! electrics, temperature (density and viscosity are constants of the run).
//!
//! ```
//! use offcurve_plant::{Plant, PlantConfig};
//! let mut plant = Plant::new(&PlantConfig::default(), 7)?;
//! for _ in 0..500 {
//!     plant.step(0.02);
//! }
//! let truth = plant.truth();
//! assert!(truth.running && (70.0..90.0).contains(&(truth.flow_m3s * 3600.0)));
//! # Ok::<(), offcurve_plant::PlantError>(())
//! ```

pub mod drive;
pub mod noise;
mod plant;
pub mod pump;
pub mod sensor;
pub mod system;

pub use plant::{Plant, PlantConfig, Truth};
pub use pump::{PumpGeometry, PumpModel, SteadyPoint};
pub use sensor::{PulseWheel, SensorFault, Transmitter, TransmitterSpec};

/// Standard gravity, m/s². The invented waterworks stands where it holds.
pub const GRAVITY: f64 = 9.806_65;

/// A configuration value the model cannot work with.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("plant setting {name} is {found}, allowed is {allowed}")]
pub struct PlantError {
    /// Name of the field.
    pub name: &'static str,
    /// The value found, SI unless the name says otherwise.
    pub found: f64,
    /// The allowed range in words.
    pub allowed: &'static str,
}

/// Refuses a value outside `low..=high` (NaN included).
pub(crate) fn within(
    name: &'static str,
    found: f64,
    low: f64,
    high: f64,
    allowed: &'static str,
) -> Result<(), PlantError> {
    if found >= low && found <= high { Ok(()) } else { Err(PlantError { name, found, allowed }) }
}
