//! The controller's image on an emulated board (QEMU, mps2-an386: a Cortex-M4F), with the rig at its chips.
//!
//! The board's first serial port is its line: QEMU makes a pseudo-terminal of it and [`Emulator`] gives that a lasting
//! name. The second is a tunnel on which the image asks for converter transactions and capture registers; a thread
//! answers from a [`TunnelDevice`], which is the bench. Profile, boot number and name are put into the image's flash
//! pages before reset, so one image serves every machine.
//!
//! Time is the plant's. The image asks, the bench advances the plant by what passed and answers; a paced run holds
//! capture answers back until `plant seconds = speed · wall seconds`, and the image waits without knowing it. A run
//! that cannot keep up simply is slower; [`TunnelCounters`] tells.
//!
//! Where it stops being true: QEMU counts no cycles and its serial ports have no bit rate, so nothing here says
//! anything about execution time or link load on silicon.

mod monitor;
mod process;
mod stack;
mod tunnel;

use std::{
    fs::File,
    io,
    net::Shutdown,
    os::unix::net::UnixStream,
    path::{Path, PathBuf},
    process::{Command, ExitStatus, Stdio},
    sync::Arc,
    thread::JoinHandle,
    time::{Duration, Instant},
};

use serde_json::json;
use tempfile::TempDir;

use self::{
    monitor::Monitor,
    process::Guarded,
    stack::Painted,
    tunnel::{Counters, Server},
};
pub use self::{
    stack::StackUse,
    tunnel::{TunnelCounters, TunnelDevice},
};
use crate::pty::{PortLink, PtyError};

/// Address of the image's profile page.
const PROFILE_ADDRESS: u32 = 0x0030_0000;
/// Longest profile the page takes, in bytes: 4096 less the length field.
pub const PROFILE_LIMIT: usize = 4092;
/// Address of the image's identity page.
const IDENTITY_ADDRESS: u32 = 0x0030_1000;
/// Longest name the identity page takes, in bytes; the same as the longest a hello carries.
pub const NAME_LIMIT: usize = 16;
/// How long QEMU may take to open its sockets or to answer.
const START_LIMIT: Duration = Duration::from_secs(10);
/// Slowest speed allowed: the image gives up on an answer after two seconds, and asks every 0.1 s of plant time.
pub const SLOWEST_SPEED: f64 = 0.1;

/// Why the emulated board could not be started or has stopped.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum EmulatorError {
    /// QEMU is not installed.
    #[error("{program} is not installed: apt-get install qemu-system-arm")]
    NoQemu {
        /// The program looked for.
        program: PathBuf,
    },
    /// There is no image to run.
    #[error("no controller image at {path}: build it with tests/boards.sh build")]
    NoImage {
        /// Where it was looked for.
        path: PathBuf,
    },
    /// The image cannot be used.
    #[error("{path} is no controller image: {reason}")]
    BadImage {
        /// The file.
        path: PathBuf,
        /// What is wrong with it.
        reason: String,
    },
    /// The profile does not fit the image's flash page.
    #[error("the profile has {length} bytes; the image's page takes at most {PROFILE_LIMIT}")]
    ProfileTooLong {
        /// Bytes given.
        length: usize,
    },
    /// The boot number cannot be stored.
    #[error("boot number {boot} means an empty page; allowed are 1 to 2^64 - 2")]
    BootNumber {
        /// The number given.
        boot: u64,
    },
    /// The name cannot be stored.
    #[error("the name {name:?} is not allowed: 1 to {NAME_LIMIT} bytes of UTF-8 without a zero")]
    Name {
        /// The name given.
        name: String,
    },
    /// The speed is not one a run can be paced to.
    #[error("speed {speed} is not allowed: a finite number of at least {SLOWEST_SPEED} plant seconds per wall second")]
    Speed {
        /// The speed given.
        speed: f64,
    },
    /// The emulator ended by itself.
    #[error("the emulator has ended ({status}){}", said(.stderr))]
    Ended {
        /// Its exit status.
        status: ExitStatus,
        /// The last of what it wrote to its error output.
        stderr: String,
    },
    /// The emulator does not answer as expected.
    #[error("the emulator did not {expected} within {} s", START_LIMIT.as_secs())]
    NoAnswer {
        /// What it should have done.
        expected: &'static str,
    },
    /// The emulator refused a command.
    #[error("the emulator refused {command}: {answer}")]
    Refused {
        /// The command.
        command: &'static str,
        /// Its answer.
        answer: String,
    },
    /// The line's link could not be made.
    #[error("cannot name the emulated board's line")]
    Link(#[from] PtyError),
    /// Files or sockets failed.
    #[error("cannot {action}")]
    Io {
        /// What was tried.
        action: &'static str,
        /// What the system said.
        #[source]
        source: io::Error,
    },
}

fn said(stderr: &str) -> String {
    if stderr.trim().is_empty() { String::new() } else { format!(": {}", stderr.trim()) }
}

fn io_error(action: &'static str) -> impl FnOnce(io::Error) -> EmulatorError {
    move |source| EmulatorError::Io { action, source }
}

fn start_process(command: &mut Command) -> Result<Guarded, EmulatorError> {
    Guarded::spawn(command).map_err(|source| match source.kind() {
        io::ErrorKind::NotFound => EmulatorError::NoQemu { program: command.get_program().into() },
        _ => EmulatorError::Io { action: "start the emulator", source },
    })
}

/// What to run.
#[derive(Clone, Debug)]
#[non_exhaustive]
pub struct EmulatorOptions {
    /// The image, an ELF file as `tests/boards.sh build` makes it.
    pub image: PathBuf,
    /// Bytes of the machine profile; empty leaves the page empty.
    pub profile: Vec<u8>,
    /// Boot number of this start, at least 1; it must rise from start to start.
    pub boot: u64,
    /// The controller's name in its hello, 1 to [`NAME_LIMIT`] bytes. `None`: the image's own.
    pub name: Option<String>,
    /// Lasting name for the line, a symbolic link. `None`: only the kernel's name, see [`Emulator::line`].
    pub link: Option<PathBuf>,
    /// Plant seconds per wall second, at least [`SLOWEST_SPEED`]; `None`: as fast as it goes.
    pub speed: Option<f64>,
    /// The emulator's program.
    pub qemu: PathBuf,
}

impl EmulatorOptions {
    /// Options for `image`: no profile, boot number 1, no link, as fast as it goes, `qemu-system-arm` from the path.
    #[must_use]
    pub fn new(image: impl Into<PathBuf>) -> Self {
        Self {
            image: image.into(),
            profile: Vec::new(),
            boot: 1,
            name: None,
            link: None,
            speed: None,
            qemu: PathBuf::from("qemu-system-arm"),
        }
    }

    fn check(&self) -> Result<(), EmulatorError> {
        if !self.image.is_file() {
            return Err(EmulatorError::NoImage { path: self.image.clone() });
        }
        if self.profile.len() > PROFILE_LIMIT {
            return Err(EmulatorError::ProfileTooLong { length: self.profile.len() });
        }
        if self.boot == 0 || self.boot == u64::MAX {
            return Err(EmulatorError::BootNumber { boot: self.boot });
        }
        if let Some(name) = &self.name
            && (name.is_empty() || name.len() > NAME_LIMIT || name.contains('\0'))
        {
            return Err(EmulatorError::Name { name: name.clone() });
        }
        match self.speed {
            Some(speed) if !(speed.is_finite() && speed >= SLOWEST_SPEED) => Err(EmulatorError::Speed { speed }),
            _ => Ok(()),
        }
    }
}

/// A running emulated board. Dropping it is cutting the controller's power.
#[derive(Debug)]
pub struct Emulator<D> {
    // In this order on drop: the tunnel ends, the link goes, then QEMU, then its files.
    tunnel: Option<JoinHandle<D>>,
    tunnel_socket: UnixStream,
    link: Option<PortLink>,
    line: PathBuf,
    counters: Arc<Counters>,
    monitor: Monitor,
    qemu: Guarded,
    painted: Painted,
    folder: TempDir,
}

impl<D: TunnelDevice + Send + 'static> Emulator<D> {
    /// Starts the image; it runs when this returns.
    ///
    /// # Errors
    /// [`EmulatorError`]: what is missing, out of range, or what QEMU said.
    pub fn start(options: &EmulatorOptions, device: D) -> Result<Self, EmulatorError> {
        options.check()?;
        // A short path: a socket's name may have 107 bytes.
        let folder = tempfile::Builder::new().prefix("emulated-").tempdir().map_err(io_error("make a folder"))?;
        let at = |name: &str| folder.path().join(name);
        let mut profile = u32::try_from(options.profile.len()).unwrap_or(0).to_le_bytes().to_vec();
        profile.extend_from_slice(&options.profile);
        std::fs::write(at("profile.bin"), profile).map_err(io_error("write the profile page"))?;
        let mut identity = options.boot.to_le_bytes().to_vec();
        identity.extend_from_slice(options.name.as_deref().unwrap_or_default().as_bytes());
        identity.resize(options.boot.to_le_bytes().len() + NAME_LIMIT, 0);
        std::fs::write(at("identity.bin"), identity).map_err(io_error("write the identity page"))?;
        let stderr = File::create(at("stderr")).map_err(io_error("make a file for the emulator's messages"))?;

        let painted = Painted::of(&options.image)?;
        let paint = painted.option(&at("paint.bin"))?;

        let mut command = Command::new(&options.qemu);
        command
            .current_dir(folder.path())
            // -S: stay stopped until everything is connected; what the image sends before that would be lost.
            .args(["-M", "mps2-an386", "-display", "none", "-monitor", "none", "-S"])
            .args(["-chardev", "pty,id=line", "-serial", "chardev:line"])
            .args(["-chardev", "socket,id=tunnel,path=tunnel.sock,server=on,wait=off", "-serial", "chardev:tunnel"])
            .args(["-qmp", "unix:qmp.sock,server=on,wait=off"])
            .args(["-device", &format!("loader,file=profile.bin,addr={PROFILE_ADDRESS:#x},force-raw=on")])
            .args(["-device", &format!("loader,file=identity.bin,addr={IDENTITY_ADDRESS:#x},force-raw=on")])
            .args(["-device", &paint])
            .arg("-kernel")
            .arg(std::path::absolute(&options.image).map_err(io_error("find the current folder"))?)
            .stdin(Stdio::null())
            .stdout(Stdio::null())
            .stderr(stderr);
        let mut qemu = start_process(&mut command)?;

        let mut connect = |name: &str, expected| {
            let begun = Instant::now();
            loop {
                if let Ok(stream) = UnixStream::connect(at(name)) {
                    return Ok(stream);
                }
                qemu.check(&at("stderr"))?;
                if begun.elapsed() > START_LIMIT {
                    return Err(EmulatorError::NoAnswer { expected });
                }
                std::thread::sleep(Duration::from_millis(5));
            }
        };
        let mut monitor = Monitor::new(connect("qmp.sock", "open its monitor")?)?;
        let tunnel_socket = connect("tunnel.sock", "open the tunnel")?;
        let line = monitor.line()?;
        let link = options.link.as_deref().map(|path| PortLink::create(path, &line)).transpose()?;

        let counters = Arc::new(Counters::default());
        let server = Server::new(
            tunnel_socket.try_clone().map_err(io_error("share the tunnel's socket"))?,
            device,
            options.speed,
            Arc::clone(&counters),
        );
        let tunnel = std::thread::Builder::new()
            .name("tunnel".into())
            .spawn(move || server.run())
            .map_err(io_error("start the tunnel's thread"))?;
        monitor.command("cont", &json!({}))?;
        Ok(Self { tunnel: Some(tunnel), tunnel_socket, link, line, counters, monitor, qemu, painted, folder })
    }

    /// The kernel's name of the board's line, such as `/dev/pts/4`.
    #[must_use]
    pub fn line(&self) -> &Path {
        &self.line
    }

    /// The line's lasting name, if one was asked for.
    #[must_use]
    pub fn link(&self) -> Option<&Path> {
        self.link.as_ref().map(PortLink::path)
    }

    /// What has passed through the tunnel.
    #[must_use]
    pub fn counters(&self) -> TunnelCounters {
        self.counters.now()
    }

    /// Whether the board still runs.
    ///
    /// # Errors
    /// [`EmulatorError::Ended`] with what QEMU said, for instance after a fault inside a fault.
    pub fn check(&mut self) -> Result<(), EmulatorError> {
        self.qemu.check(&self.folder.path().join("stderr"))
    }

    /// How deep the image's stack has reached since reset. The board stands still for some milliseconds.
    ///
    /// # Errors
    /// [`EmulatorError::Refused`], [`EmulatorError::NoAnswer`] or [`EmulatorError::Io`].
    pub fn stack_use(&mut self) -> Result<StackUse, EmulatorError> {
        self.painted.measure(&mut self.monitor, &self.folder.path().join("memory.bin"))
    }

    /// Stops or resumes the board's processor, as a debugger would; the line and its name stay.
    ///
    /// # Errors
    /// [`EmulatorError::Refused`] or [`EmulatorError::NoAnswer`].
    pub fn pause(&mut self, paused: bool) -> Result<(), EmulatorError> {
        self.monitor.command(if paused { "stop" } else { "cont" }, &json!({})).map(|_| ())
    }

    /// Cuts the power and gives the device back. `None` if the device panicked.
    #[must_use]
    pub fn stop(mut self) -> Option<D> {
        self.end_tunnel()
    }
}

impl<D> Emulator<D> {
    fn end_tunnel(&mut self) -> Option<D> {
        // An error means that QEMU has closed the socket already, and then the thread ends by itself.
        let _ = self.tunnel_socket.shutdown(Shutdown::Both);
        self.tunnel.take()?.join().ok()
    }
}

impl<D> Drop for Emulator<D> {
    fn drop(&mut self) {
        drop(self.end_tunnel());
    }
}

#[cfg(test)]
mod tests {
    use super::{tunnel::tests::Complement, *};

    #[test]
    fn what_is_missing_is_named() {
        let error = Emulator::start(&EmulatorOptions::new("/nowhere/image"), Complement::default()).unwrap_err();
        assert_eq!(error.to_string(), "no controller image at /nowhere/image: build it with tests/boards.sh build");
        let error = start_process(&mut Command::new("no-such-emulator")).unwrap_err();
        assert_eq!(error.to_string(), "no-such-emulator is not installed: apt-get install qemu-system-arm");
    }

    #[test]
    fn values_out_of_range_are_refused() {
        let image = tempfile::NamedTempFile::new().unwrap();
        let good = EmulatorOptions::new(image.path());
        assert!(good.check().is_ok());
        for speed in [0.0, -1.0, 0.09, f64::NAN, f64::INFINITY] {
            let options = EmulatorOptions { speed: Some(speed), ..good.clone() };
            assert!(matches!(options.check(), Err(EmulatorError::Speed { .. })), "{speed}");
        }
        for boot in [0, u64::MAX] {
            assert!(matches!(EmulatorOptions { boot, ..good.clone() }.check(), Err(EmulatorError::BootNumber { .. })));
        }
        for name in ["", "seventeen letters", "a\0b"] {
            let options = EmulatorOptions { name: Some(name.into()), ..good.clone() };
            assert!(matches!(options.check(), Err(EmulatorError::Name { .. })), "{name:?}");
        }
        let options = EmulatorOptions { profile: vec![0; PROFILE_LIMIT + 1], ..good };
        assert!(matches!(options.check(), Err(EmulatorError::ProfileTooLong { length: 4093 })));
    }
}
