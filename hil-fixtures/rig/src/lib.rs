//! Everything around a controller that is not the controller: the plant's instruments and converter chip on a bench in
//! virtual time, the line as a pseudo-terminal, scenarios from TOML files, and two ways to run the one controller
//! program against them: compiled for this computer, or as its image on an emulated board.
//!
//! The bench uses the plant model, never the core's physics: otherwise a test would check the code against itself.

pub mod bench;
pub mod converter;
pub mod emulated;
pub mod host_controller;
pub mod pty;
pub mod scenario;

pub use host_controller::{HostController, HostControllerOptions};
