//! Live shaft torque, hydraulic power, efficiency and operating point of a pump, for the controller of its drive: no
//! allocation, no unsafe code, no clock, no register, no panic.
//!
//! A machine at variable speed hides its own decline: no single gauge says whether it still does what its curve
//! promises. This crate compares what is measured now with the curve carried to the speed of now.
//!
//! # Layers, from the terminals up
//! - [`board`]: traits a board implements (converter, pulse capture, run signal, line)
//! - [`sensing`] and [`conditioning`]: raw readings to a [`ConditionedSample`](conditioning::ConditionedSample), the only part that remembers readings
//! - [`machine`]: the profile of one machine, loaded at run time
//! - [`head`], [`momentum`], [`affinity`]: one law per file, pure
//! - [`estimate`]: all laws over one sample, pure, with uncertainties
//! - [`guard`]: advisory limits with deadband and delays
//! - [`link`]: the protocol that controller and host share
//!
//! Built and tested, and not yet part of the profile and the estimate: [`fluid`] (water, moist air, tables, viscous
//! liquids), [`inverse`] (flow from head or power), [`reconcile`] (three witnesses of one flow), [`regions`], [`drift`],
//! and in [`sensing`] all but loops and speed pulses.
//!
//! It advises; it is no protective device, and has no call that can command a drive.
//!
//! # Symbols
//! | symbol | unit | meaning |
//! |---|---|---|
//! | ω, n | rad/s, rev/min | shaft speed, positive in the design direction |
//! | Q | m³/s | delivered flow, positive from suction to discharge |
//! | H | m | total head, metres of the pumped liquid |
//! | p | Pa | gauge pressure at a tap |
//! | T, P | N·m, W | shaft torque and power, positive into the machine |
//! | ρ, g | kg/m³, m/s² | density of the liquid, local acceleration of free fall |
//! | u, c_u, c_m | m/s | rim speed; whirl and meridional part of the absolute velocity |
//! | β | rad | blade angle from the tangential direction |
//! | σ | 1 | slip factor, 1 − (c_u2∞ − c_u2)/u2 |
//!
//! # Not modelled yet
//! Fans and compressible flow, double suction and multistage, NPSH, speed ramps.
//!
//! # Example
//! ```
//! use offcurve_core::{affinity::{self, SpeedRatio}, quantity::{Head, VolumeFlow}};
//!
//! // A point of the curve at 1480 rev/min, carried to 1110 rev/min.
//! let ratio = SpeedRatio::new(1110.0 / 1480.0)?;
//! let flow = affinity::flow(VolumeFlow::from_cubic_metres_per_second(0.024), ratio);
//! let head = affinity::head(Head::from_metres(32.0), ratio);
//! assert_eq!((flow.cubic_metres_per_second(), head.metres()), (0.018, 18.0));
//! # Ok::<(), affinity::ScaleError>(())
//! ```
#![no_std]
#![forbid(unsafe_code)]
#![deny(missing_docs)]
#![cfg_attr(
    not(test),
    deny(
        clippy::indexing_slicing,
        clippy::arithmetic_side_effects,
        clippy::unwrap_used,
        clippy::expect_used,
        clippy::panic
    )
)]

#[cfg(test)]
extern crate std;

pub mod affinity;
pub mod board;
mod bytes;
pub mod checksum;
pub mod conditioning;
pub mod deviation;
pub mod drift;
pub mod estimate;
pub mod fluid;
pub mod guard;
pub mod head;
pub mod inverse;
pub mod link;
pub mod machine;
pub mod math;
pub mod momentum;
pub mod quantity;
pub mod reconcile;
pub mod regions;
pub mod sensing;
mod uncertain;
