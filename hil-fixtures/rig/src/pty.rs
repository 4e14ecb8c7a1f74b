//! A serial port without hardware: the two ends of a pseudo-terminal, and a name that outlives them.
//!
//! The daemon opens a port by its path, as it would open a USB adapter. The kernel gives a new pseudo-terminal
//! whatever number is free, so a configuration names a symbolic link instead; [`PortLink`] moves that link to the
//! new device in one step. Dropping a [`Pty`] is pulling the plug: the reader gets an error and the name is gone.
//! Making a new one at the same link is plugging it in again.
//!
//! Where it stops being true: a pseudo-terminal has no bit rate (bytes pass as fast as both ends go), no framing
//! errors and no modem lines, and its buffer (a few kilobytes) keeps bytes for a reader that comes late.

use std::{
    io,
    os::fd::OwnedFd,
    path::{Path, PathBuf},
};

use rustix::{
    fs::{Mode, OFlags},
    io::Errno,
    pty::OpenptFlags,
    termios::OptionalActions,
};

/// Why a pseudo-terminal or its link could not be made or used.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum PtyError {
    /// The kernel refused a step of making the pair.
    #[error("cannot make a pseudo-terminal: {step} failed")]
    Open {
        /// The step that failed.
        step: &'static str,
        /// What the kernel said.
        #[source]
        source: io::Error,
    },
    /// Bytes could not be moved.
    #[error("cannot {action} pseudo-terminal {port}")]
    Transfer {
        /// "read from" or "write to".
        action: &'static str,
        /// The slave's path.
        port: PathBuf,
        /// What the kernel said.
        #[source]
        source: io::Error,
    },
    /// The link's path is taken by something that is not a link.
    #[error("{path} exists and is not a symbolic link; a port link replaces links only")]
    NotALink {
        /// The path asked for.
        path: PathBuf,
    },
    /// The link could not be written.
    #[error("cannot make port link {path}")]
    Link {
        /// The path asked for.
        path: PathBuf,
        /// What the file system said.
        #[source]
        source: io::Error,
    },
}

fn open_step<T>(step: &'static str, result: Result<T, Errno>) -> Result<T, PtyError> {
    result.map_err(|errno| PtyError::Open { step, source: errno.into() })
}

/// Whether the pair keeps a handle of its own to the reader's end.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum FarEnd {
    /// Keep one: a reader may come and go, the settings stay raw and unread bytes stay in the buffer. This is how a
    /// built-in port or an adapter that stays plugged in behaves.
    #[default]
    Kept,
    /// Keep none: with the last reader gone the kernel forgets raw mode, so the next reader must set it itself
    /// (serial libraries do), and what is written before that may be echoed back.
    Free,
}

/// The device side of a pseudo-terminal in raw, non-blocking mode.
#[derive(Debug)]
pub struct Pty {
    link: Option<PortLink>,
    master: OwnedFd,
    _far_end: Option<OwnedFd>,
    slave: PathBuf,
}

impl Pty {
    /// Makes a pair.
    ///
    /// # Errors
    /// [`PtyError::Open`], for instance when the system has no pseudo-terminal left.
    pub fn open(far_end: FarEnd) -> Result<Self, PtyError> {
        let master = open_step(
            "opening the master",
            rustix::pty::openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY | OpenptFlags::CLOEXEC),
        )?;
        open_step("granting access", rustix::pty::grantpt(&master))?;
        open_step("unlocking the slave", rustix::pty::unlockpt(&master))?;
        let name = open_step("naming the slave", rustix::pty::ptsname(&master, Vec::new()))?;
        let handle = open_step(
            "opening the slave",
            rustix::fs::open(name.as_c_str(), OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC, Mode::empty()),
        )?;
        let mut settings = open_step("reading its settings", rustix::termios::tcgetattr(&handle))?;
        settings.make_raw();
        open_step("setting raw mode", rustix::termios::tcsetattr(&handle, OptionalActions::Now, &settings))?;
        open_step("setting non-blocking mode", rustix::io::ioctl_fionbio(&master, true))?;
        let slave = PathBuf::from(String::from_utf8_lossy(name.as_bytes()).into_owned());
        let far_end = match far_end {
            FarEnd::Kept => Some(handle),
            FarEnd::Free => None,
        };
        Ok(Self { link: None, master, _far_end: far_end, slave })
    }

    /// Path of the end a reader opens, such as `/dev/pts/4`.
    #[must_use]
    pub fn slave(&self) -> &Path {
        &self.slave
    }

    /// Makes or moves a symbolic link at `path` to the reader's end. It goes when this value goes.
    ///
    /// # Errors
    /// [`PtyError::NotALink`] or [`PtyError::Link`].
    pub fn link_at(&mut self, path: &Path) -> Result<(), PtyError> {
        self.link = Some(PortLink::create(path, &self.slave)?);
        Ok(())
    }

    /// Takes what a writer at the other end has sent; 0 when there is nothing, or nobody.
    ///
    /// # Errors
    /// [`PtyError::Transfer`] for anything the kernel says but "nothing yet" and "nobody there".
    pub fn try_read(&self, into: &mut [u8]) -> Result<usize, PtyError> {
        match rustix::io::read(&self.master, into) {
            Ok(count) => Ok(count),
            // EIO: no handle to the other end is open. On a real port that is silence, too.
            Err(Errno::AGAIN | Errno::INTR | Errno::IO) => Ok(0),
            Err(errno) => {
                Err(PtyError::Transfer { action: "read from", port: self.slave.clone(), source: errno.into() })
            }
        }
    }

    /// Hands over as many leading bytes as the kernel's buffer takes; 0 when it is full because nobody reads.
    ///
    /// # Errors
    /// [`PtyError::Transfer`] for anything the kernel says but "full".
    pub fn try_write(&self, bytes: &[u8]) -> Result<usize, PtyError> {
        match rustix::io::write(&self.master, bytes) {
            Ok(count) => Ok(count),
            Err(Errno::AGAIN | Errno::INTR | Errno::IO) => Ok(0),
            Err(errno) => {
                Err(PtyError::Transfer { action: "write to", port: self.slave.clone(), source: errno.into() })
            }
        }
    }
}

/// A symbolic link that gives a port a lasting name. Removed on drop, unless it has been moved to another port since.
#[derive(Debug)]
pub struct PortLink {
    path: PathBuf,
    target: PathBuf,
}

impl PortLink {
    /// Makes the link, or moves an existing one; a reader sees the old port or the new one, never no port.
    ///
    /// # Errors
    /// [`PtyError::NotALink`] when `path` is a file, folder or device; [`PtyError::Link`] when the file system refuses.
    pub fn create(path: &Path, target: &Path) -> Result<Self, PtyError> {
        let failed = |source| PtyError::Link { path: path.to_path_buf(), source };
        match std::fs::symlink_metadata(path) {
            Ok(found) if !found.is_symlink() => return Err(PtyError::NotALink { path: path.to_path_buf() }),
            Err(error) if error.kind() != io::ErrorKind::NotFound => return Err(failed(error)),
            _ => {}
        }
        // Made beside the final name and then renamed, because a rename within a folder is one step for every reader.
        let Some(name) = path.file_name() else {
            return Err(failed(io::Error::new(io::ErrorKind::InvalidInput, "the path names no file")));
        };
        let mut temporary_name = std::ffi::OsString::from(".");
        temporary_name.push(name);
        temporary_name.push(format!(".{}", std::process::id()));
        let temporary = path.with_file_name(temporary_name);
        match std::fs::remove_file(&temporary) {
            Err(error) if error.kind() != io::ErrorKind::NotFound => return Err(failed(error)),
            _ => {}
        }
        std::os::unix::fs::symlink(target, &temporary).map_err(failed)?;
        std::fs::rename(&temporary, path).map_err(failed)?;
        Ok(Self { path: path.to_path_buf(), target: target.to_path_buf() })
    }

    /// The lasting name.
    #[must_use]
    pub fn path(&self) -> &Path {
        &self.path
    }
}

impl Drop for PortLink {
    fn drop(&mut self) {
        if std::fs::read_link(&self.path).is_ok_and(|now| now == self.target) {
            // Nobody to tell: a link that cannot be removed dangles, and opening it says so.
            let _ = std::fs::remove_file(&self.path);
        }
    }
}

#[cfg(test)]
mod tests {
    use std::{
        fs::File,
        io::{Read, Write},
        time::{Duration, Instant},
    };

    use super::*;

    fn read_some(pty: &Pty, wanted: usize) -> Vec<u8> {
        let mut got = Vec::new();
        let begun = Instant::now();
        while got.len() < wanted && begun.elapsed() < Duration::from_secs(5) {
            let mut buffer = [0; 64];
            let count = pty.try_read(&mut buffer).unwrap();
            got.extend_from_slice(&buffer[..count]);
        }
        got
    }

    /// Every byte value, both ways: the terminal must not echo, translate line ends or act on control characters.
    #[test]
    fn all_byte_values_pass_both_ways() {
        let pty = Pty::open(FarEnd::Kept).unwrap();
        let all: Vec<u8> = (0..=255).collect();
        let mut port = File::options().read(true).write(true).open(pty.slave()).unwrap();
        assert_eq!(pty.try_write(&all).unwrap(), 256);
        let mut got = vec![0; 256];
        port.read_exact(&mut got).unwrap();
        assert_eq!(got, all);
        port.write_all(&all).unwrap();
        assert_eq!(read_some(&pty, 256), all);
        assert_eq!(pty.try_read(&mut [0; 8]).unwrap(), 0, "nothing is echoed");
    }

    #[test]
    fn a_reader_may_come_and_go() {
        let pty = Pty::open(FarEnd::Kept).unwrap();
        drop(File::open(pty.slave()).unwrap());
        assert_eq!(pty.try_read(&mut [0; 8]).unwrap(), 0);
        assert_eq!(pty.try_write(b"\r\x03kept").unwrap(), 6);
        let mut got = [0; 6];
        File::open(pty.slave()).unwrap().read_exact(&mut got).unwrap();
        assert_eq!(&got, b"\r\x03kept");
    }

    #[test]
    fn without_a_kept_far_end_nobody_is_silence_not_an_error() {
        let pty = Pty::open(FarEnd::Free).unwrap();
        assert_eq!(pty.try_read(&mut [0; 8]).unwrap(), 0);
    }

    #[test]
    fn a_full_buffer_takes_no_more_and_does_not_block() {
        let pty = Pty::open(FarEnd::Kept).unwrap();
        let block = [0x55; 1024];
        let mut total = 0;
        for _ in 0..1000 {
            total += pty.try_write(&block).unwrap();
        }
        assert!(total < 1_000_000, "took {total} bytes that nobody read");
        assert_eq!(pty.try_write(&block).unwrap(), 0);
    }

    #[test]
    fn the_link_follows_unplug_and_replug() {
        let folder = tempfile::tempdir().unwrap();
        let name = folder.path().join("pump-1");
        let mut first = Pty::open(FarEnd::Kept).unwrap();
        first.link_at(&name).unwrap();
        let mut port = File::open(&name).unwrap();
        // Replugged before the old one is gone: the name must follow the new device and survive the old one's end.
        let mut second = Pty::open(FarEnd::Kept).unwrap();
        second.link_at(&name).unwrap();
        drop(first);
        assert!(port.read(&mut [0; 1]).map_or(true, |count| count == 0), "the old port is dead");
        assert_eq!(std::fs::read_link(&name).unwrap(), second.slave());
        drop(second);
        assert!(std::fs::symlink_metadata(&name).is_err(), "unplugged: no name");
        assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0, "no temporary link is left");
    }

    #[test]
    fn a_real_file_is_never_replaced() {
        let folder = tempfile::tempdir().unwrap();
        let name = folder.path().join("plant.toml");
        std::fs::write(&name, "mine").unwrap();
        let mut pty = Pty::open(FarEnd::Kept).unwrap();
        assert!(matches!(pty.link_at(&name), Err(PtyError::NotALink { .. })));
        assert_eq!(std::fs::read_to_string(&name).unwrap(), "mine");
    }
}
