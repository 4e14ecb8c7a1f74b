//! QEMU's machine protocol (QMP): one JSON object a line, answers mixed with events.
//!
//! Only what the rig needs: where the line is, stop and go, and a copy of memory. A QEMU that does not answer within
//! [`super::START_LIMIT`] is an error, never a wait without end.

use std::{
    io::{self, BufRead, BufReader, Write},
    os::unix::net::UnixStream,
    path::PathBuf,
};

use serde_json::{Value, json};

use super::{EmulatorError, START_LIMIT, io_error};

/// QEMU's machine protocol: one JSON object a line.
#[derive(Debug)]
pub(super) struct Monitor {
    reader: BufReader<UnixStream>,
    writer: UnixStream,
}

impl Monitor {
    pub(super) fn new(stream: UnixStream) -> Result<Self, EmulatorError> {
        stream.set_read_timeout(Some(START_LIMIT)).map_err(io_error("set up the emulator's monitor"))?;
        let writer = stream.try_clone().map_err(io_error("set up the emulator's monitor"))?;
        let mut monitor = Self { reader: BufReader::new(stream), writer };
        monitor.receive()?; // its greeting
        monitor.command("qmp_capabilities", &json!({}))?;
        Ok(monitor)
    }

    fn receive(&mut self) -> Result<Value, EmulatorError> {
        let mut text = String::new();
        let length = self.reader.read_line(&mut text).map_err(|source| match source.kind() {
            io::ErrorKind::WouldBlock | io::ErrorKind::TimedOut => EmulatorError::NoAnswer { expected: "answer" },
            _ => EmulatorError::Io { action: "read from the emulator's monitor", source },
        })?;
        let source = match serde_json::from_str(&text) {
            Ok(value) => return Ok(value),
            Err(_) if length == 0 => io::ErrorKind::UnexpectedEof.into(),
            Err(error) => error.into(),
        };
        Err(EmulatorError::Io { action: "read from the emulator's monitor", source })
    }

    pub(super) fn command(&mut self, command: &'static str, arguments: &Value) -> Result<Value, EmulatorError> {
        let request = json!({ "execute": command, "arguments": arguments });
        self.writer.write_all(request.to_string().as_bytes()).map_err(io_error("write to the emulator's monitor"))?;
        loop {
            let mut answer = self.receive()?; // events come in between
            if let Some(result) = answer.get_mut("return") {
                return Ok(result.take());
            }
            if let Some(error) = answer.get("error") {
                return Err(EmulatorError::Refused { command, answer: error.to_string() });
            }
        }
    }

    /// The pseudo-terminal QEMU has made for the line.
    pub(super) fn line(&mut self) -> Result<PathBuf, EmulatorError> {
        let devices = self.command("query-chardev", &json!({}))?;
        devices
            .as_array()
            .into_iter()
            .flatten()
            .filter(|device| device["label"] == "line")
            .find_map(|device| device["filename"].as_str()?.strip_prefix("pty:"))
            .map(PathBuf::from)
            .ok_or_else(|| EmulatorError::Refused { command: "query-chardev", answer: devices.to_string() })
    }
}
