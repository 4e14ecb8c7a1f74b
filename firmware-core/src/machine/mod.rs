//! All that is known of one machine: its expected curve, its impeller, its taps, its sensors, its limits.

pub mod curve;
#[cfg(any(feature = "std", test))]
pub mod design;
pub mod impeller;
pub mod profile;

pub use curve::CurveTable;
pub use impeller::Impeller;
pub use profile::{Profile, ProfileError};
