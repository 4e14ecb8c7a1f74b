//! What a board implements to run the controller program: where currents, pulses and the run contact come from, and
//! where bytes go. Everything else (scaling, filtering, physics, framing) is written once, above these traits.
//!
//! embedded-hal 1.0 gives SPI, I²C, pins and delays but no serial line and no timer capture, hence the small traits
//! here; drivers bind them to embedded-hal where it does have a trait ([`RunContact`] does so for a pin).
//! No call in this file can command a drive: the controller watches and advises.

use embedded_hal::digital::InputPin;

/// The most loop inputs one converter scan can carry.
pub const LOOP_INPUTS: usize = 8;

/// Current in a 4–20 mA loop, in milliamperes; 0 for an open loop.
#[derive(Clone, Copy, Debug, Default, PartialEq, PartialOrd)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LoopCurrent(f32);

impl LoopCurrent {
    /// From milliamperes.
    #[must_use]
    pub const fn from_milliamperes(value: f32) -> Self {
        Self(value)
    }

    /// The value in milliamperes.
    #[must_use]
    pub const fn milliamperes(self) -> f32 {
        self.0
    }
}

/// Why a converter scan gave nothing.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ScanError {
    /// The bus refused or did not answer in time. Try again at the next scan.
    Bus(embedded_hal::spi::ErrorKind),
    /// The bus answered, but not with a frame this chip can send: chip missing, unpowered or its data line stuck.
    NotAConverter,
}

/// Loop currents, all inputs at one instant.
pub trait ChannelSource {
    /// Reads the currents of inputs `0..into.len()`, in that order.
    ///
    /// # Errors
    /// [`ScanError`] when no input could be read; `into` is then unspecified and must not be used.
    fn scan(&mut self, into: &mut [LoopCurrent]) -> Result<(), ScanError>;
}

/// Which way the shaft turns.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Direction {
    /// No direction source: the sign of the speed is unknown.
    #[default]
    Unknown,
    /// The design direction.
    Forward,
    /// Against the design direction.
    Reverse,
}

/// Whether the driver is switched on.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum RunState {
    /// No run signal: running is judged by speed alone.
    #[default]
    Unknown,
    /// The drive is on.
    Running,
    /// The drive is off; the shaft may still coast or be turned by the liquid.
    Stopped,
}

/// A free-running pulse counter with a time stamp of its last edge, read at one instant.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseSnapshot {
    /// Edges since power-up; wraps.
    pub count: u32,
    /// Timer value at the last edge, in capture ticks; wraps.
    pub last_edge: u32,
    /// Timer value now, in capture ticks; wraps.
    pub now: u32,
    /// Direction, where the encoder has one.
    pub direction: Direction,
}

/// Shaft pulses from a capture timer.
pub trait PulseCapture {
    /// Capture ticks per second; constant, at least 10,000 for a useful resolution.
    fn ticks_per_second(&self) -> u32;
    /// Count, last edge and timer value, taken together.
    fn snapshot(&mut self) -> PulseSnapshot;
}

/// Whether the drive runs, from a contact or from the drive's own status word.
pub trait RunSignal {
    /// The present state; [`RunState::Unknown`] when the source cannot be read.
    fn run_state(&mut self) -> RunState;
}

/// A run contact on a pin: high means running.
#[derive(Debug)]
pub struct RunContact<P>(pub P);

impl<P: InputPin> RunSignal for RunContact<P> {
    fn run_state(&mut self) -> RunState {
        match self.0.is_high() {
            Ok(true) => RunState::Running,
            Ok(false) => RunState::Stopped,
            Err(_) => RunState::Unknown,
        }
    }
}

/// The serial line to the host. Both calls return at once: the control loop must never wait for a reader.
pub trait Line {
    /// Queues as many of `bytes` as fit, from the front, and returns how many; 0 when the queue is full.
    fn try_write(&mut self, bytes: &[u8]) -> usize;
    /// Takes up to `into.len()` received bytes and returns how many; 0 when there are none.
    fn try_read(&mut self, into: &mut [u8]) -> usize;
}
