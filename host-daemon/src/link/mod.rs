//! From a serial line to records with a known sender: opening and reopening the port ([`serial`]), and what the bytes
//! mean ([`session`], pure).
//!
//! The controller sends without being asked and repeats nothing: a byte lost on the line is a record lost for good,
//! which the record numbers show. The daemon sends two things only, "say hello" and acknowledgements.

pub mod serial;
pub mod session;

pub use serial::{Heard, SerialLink, SerialSettings};
pub use session::{Counts, Event, Reason, Received, Session};

use std::path::PathBuf;

/// Why a serial port could not be opened or has gone. None of these ends the daemon: it waits and tries again.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum LinkError {
    /// No such path: unplugged, or a wrong name.
    #[error("there is no {port}: unplugged, or named otherwise (`offcurve ports` lists what there is)")]
    Missing {
        /// The path of the configuration.
        port: PathBuf,
    },
    /// The path is there, but not for this user.
    #[error(
        "no permission to open {port}: the user of the daemon must be in the group of the device, on most systems \
         `dialout` (sudo usermod -aG dialout USER, then log in again)"
    )]
    Forbidden {
        /// The path of the configuration.
        port: PathBuf,
    },
    /// Another program holds the port.
    #[error("{port} is in use by another program, perhaps a second daemon; one port has one reader")]
    InUse {
        /// The path of the configuration.
        port: PathBuf,
    },
    /// Anything else the system says.
    #[error("cannot open {port} at {baud} Bd: is it a serial port, and does it have that rate?")]
    Open {
        /// The path of the configuration.
        port: PathBuf,
        /// Bits per second asked for.
        baud: u32,
        /// What the system said.
        #[source]
        source: serialport::Error,
    },
    /// The far end has gone: cable pulled, adapter or controller without power.
    #[error("{port} has hung up: cable pulled, or the adapter has lost its power")]
    HungUp {
        /// The path of the configuration.
        port: PathBuf,
    },
    /// Reading or writing failed.
    #[error("{port} failed")]
    Failed {
        /// The path of the configuration.
        port: PathBuf,
        /// What the system said.
        #[source]
        source: std::io::Error,
    },
    /// The reader's thread could not be started.
    #[error("cannot start a thread for {port}")]
    Thread {
        /// The path of the configuration.
        port: PathBuf,
        /// What the system said.
        #[source]
        source: std::io::Error,
    },
}
