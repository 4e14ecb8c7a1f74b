//! The command line: one file per command, exit codes in one place.

use clap::{Parser, Subcommand};
use std::process::ExitCode;

pub mod check;
pub mod ports;
pub mod replay;
pub mod watch;

/// Watches pumps against their expected curve. Advises; it is no protective device.
#[derive(Debug, Parser)]
#[command(name = "offcurve", version, arg_required_else_help = true)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Read the controllers of a plant, store their records and raise alarms until stopped.
    Watch(watch::Watch),
    /// Check a plant or machine file without touching a port or a store.
    Check(check::Check),
    /// List the serial ports of this computer.
    Ports(ports::Ports),
    /// Run estimates and the watch over a recorded CSV file.
    Replay(replay::Replay),
    /// Show the whole chain on an invented waterworks, without hardware.
    #[cfg(feature = "demo")]
    Demo(crate::demo::Demo),
}

/// Exit code of a wrong command line or configuration (64, after the BSD convention `EX_USAGE`).
pub const BAD_CONFIGURATION: u8 = 64;

/// Runs the command line of this process.
#[must_use]
pub fn main() -> ExitCode {
    let arguments = Arguments::parse();
    let result = match &arguments.command {
        Command::Watch(command) => command.run(),
        Command::Check(command) => command.run(),
        Command::Ports(command) => command.run(),
        Command::Replay(command) => command.run(),
        #[cfg(feature = "demo")]
        Command::Demo(command) => command.run(),
    };
    match result {
        Ok(code) => code,
        Err(error) => {
            eprintln!("offcurve: {error:#}");
            let configuration = error.downcast_ref::<crate::config::ConfigError>().is_some();
            ExitCode::from(if configuration { BAD_CONFIGURATION } else { 1 })
        }
    }
}
