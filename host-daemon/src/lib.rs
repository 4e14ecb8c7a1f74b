//! The offcurve daemon as a library: reads controllers over serial lines, stores every record, judges it against the
//! machine's expected curve, and alarms with the likely cause. `main.rs` is a thin shell around it.
//!
//! Flow of data: [`link`] (bytes to records) → [`store`] (durable) → acknowledgement → [`watch`] (blocks, alarms).
//! [`replay`] runs the same watch over a recorded file.

pub mod alarm;
pub mod cli;
pub mod config;
#[cfg(feature = "demo")]
pub mod demo;
pub mod link;
pub mod live;
pub mod replay;
pub mod runtime;
pub mod store;
pub mod watch;
