//! A child process that never outlives us.
//!
//! Dropping it is not enough: a rig that is killed drops nothing, and an emulator left behind would hold the plant's
//! port. So a second process waits on a pipe that only we hold open, and ends the first when the pipe closes.
//! Where it stops being true: if both we and the guard are killed at once, the emulator stays.

use std::{
    io,
    os::unix::process::CommandExt,
    path::Path,
    process::{Child, Command, Stdio},
};

use super::{EmulatorError, io_error};

/// A process that does not outlive us, even if we are killed: a second one waits on a pipe that only we hold open,
/// and ends the first when the pipe closes.
#[derive(Debug)]
pub(super) struct Guarded {
    process: Child,
    guard: Child,
}

impl Guarded {
    pub(super) fn spawn(command: &mut Command) -> io::Result<Self> {
        // A group of its own: Ctrl-C at the terminal is for us, and we end the board in our order.
        let mut process = command.process_group(0).spawn()?;
        let guard = Command::new("sh")
            .args(["-c", "read -r _; kill -9 \"$1\"", "sh", &process.id().to_string()])
            .process_group(0)
            .stdin(Stdio::piped())
            .stdout(Stdio::null())
            .stderr(Stdio::null())
            .spawn();
        match guard {
            Ok(guard) => Ok(Self { process, guard }),
            Err(error) => {
                process.kill()?;
                process.wait()?;
                Err(error)
            }
        }
    }

    pub(super) fn check(&mut self, stderr: &Path) -> Result<(), EmulatorError> {
        match self.process.try_wait().map_err(io_error("look after the emulator"))? {
            None => Ok(()),
            Some(status) => {
                let text = std::fs::read(stderr).unwrap_or_default();
                let from = text.len().saturating_sub(2000);
                let stderr = String::from_utf8_lossy(&text[from..]).into_owned();
                Err(EmulatorError::Ended { status, stderr })
            }
        }
    }
}

impl Drop for Guarded {
    fn drop(&mut self) {
        // The guard first: once the process is gone, its number may be given to another.
        for child in [&mut self.guard, &mut self.process] {
            // Errors mean that it is gone already.
            let _ = child.kill();
            let _ = child.wait();
        }
    }
}

#[cfg(test)]
mod tests {
    use std::{fs::File, time::Instant};

    use super::{super::START_LIMIT, *};

    #[test]
    fn a_process_that_ends_by_itself_is_reported_with_its_words() {
        let folder = tempfile::tempdir().unwrap();
        // Any program that fails on QEMU's arguments will do.
        let stderr = folder.path().join("stderr");
        let mut command = Command::new("sh");
        command.args(["-c", "echo no such board >&2; exit 3"]).stderr(File::create(&stderr).unwrap());
        let mut process = Guarded::spawn(&mut command).unwrap();
        let begun = Instant::now();
        let error = loop {
            match process.check(&stderr) {
                Err(error) => break error,
                Ok(()) => assert!(begun.elapsed() < START_LIMIT),
            }
        };
        assert_eq!(error.to_string(), "the emulator has ended (exit status: 3): no such board");
    }
}
