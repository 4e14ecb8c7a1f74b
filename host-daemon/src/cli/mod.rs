//! The command line: one file per command, exit codes in one place.

use anyhow::Context as _;
use clap::{Parser, Subcommand};
use std::{
    io::{self, Write as _},
    process::ExitCode,
};

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
    let arguments = match Arguments::try_parse() {
        Ok(arguments) => arguments,
        Err(wrong) => {
            // Help and version come this way, too; nobody is left to hear that a terminal has gone.
            let _ = wrong.print();
            return if wrong.use_stderr() { ExitCode::from(BAD_CONFIGURATION) } else { ExitCode::SUCCESS };
        }
    };
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
            // With nobody to hear it the exit code has to do.
            let _ = writeln!(io::stderr().lock(), "offcurve: {}", words(&error));
            let configuration = error.downcast_ref::<crate::config::ConfigError>().is_some();
            ExitCode::from(if configuration { BAD_CONFIGURATION } else { 1 })
        }
    }
}

/// An error with its causes in one text, without those whose words are in it already: many libraries repeat theirs.
fn words(error: &anyhow::Error) -> String {
    let mut text = error.to_string();
    for cause in error.chain().skip(1).map(ToString::to_string) {
        if !text.contains(&cause) {
            text = format!("{text}: {cause}");
        }
    }
    text
}

/// Writes a command's result to standard output. A reader that has gone (`| head`) has heard enough: no error.
///
/// # Errors
/// Anything else that keeps it from being written, such as a full disk.
fn say(text: &str) -> anyhow::Result<()> {
    let mut out = io::stdout().lock();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(error) if error.kind() == io::ErrorKind::BrokenPipe => Ok(()),
        other => other.context("cannot write to standard output"),
    }
}
