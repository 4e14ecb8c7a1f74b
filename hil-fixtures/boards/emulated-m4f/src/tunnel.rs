//! Chips the emulated board does not have, reached over its second serial port.
//!
//! The converter's driver speaks `embedded_hal::spi::SpiDevice`, as it would on silicon. Here a whole SPI transaction
//! becomes one frame to the rig, which plays the chip: the driver's bytes are the real ones, only the wire differs.
//! The speed input has no bus, so its capture registers come as a second kind of frame.
//!
//! | request | answer |
//! |---|---|
//! | `S`, length (u8, 1..=255), bytes out | as many bytes in |
//! | `E`, 4 bytes above 127 | the same 4 bytes |
//! | `C` | count u32, last edge u32, now u32 (ticks of 1 MHz), status u8, reserved u8 (0); little endian |
//!
//! Status bits: 0 running, 1 run state known, 2 forward, 3 direction known.
//!
//! The rig sets the pace: it may hold an answer back. If none comes within [`PATIENCE`] the transfer fails with
//! [`TunnelError::NoAnswer`] and the next ones wait only [`SHORT_PATIENCE`], so a dead rig costs the line's service
//! little. Answers carry no number, so after a failure a late one could be taken for the next. Therefore nothing is
//! asked again until an echo request with a new number has come back: what is in front of it is old and is dropped.
//! Bytes above 127 are no request, so an echo that falls into a half-sent transaction does no harm beyond it.

use core::cell::RefCell;

use embedded_hal::spi::{Error, ErrorKind, ErrorType, Operation, SpiDevice};
use offcurve_core::board::Line;

use crate::{ticks, uart::Uart};

/// Longest wait for an answer, in ticks: two seconds.
const PATIENCE: u32 = 2 * ticks::PER_SECOND;
/// The same after a failure: 50 ms.
const SHORT_PATIENCE: u32 = ticks::PER_SECOND / 20;
/// Looks at the queue before going to sleep. An answer mostly comes within microseconds, and waking up takes longer
/// than that; a paced rig makes us wait for milliseconds, and then the core should sleep.
const LOOKS_BEFORE_SLEEP: u32 = 200;

/// Why a transfer through the tunnel failed.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
pub(crate) enum TunnelError {
    /// The rig did not answer in time.
    NoAnswer,
    /// The transaction is longer than 255 bytes.
    TooLong,
    /// The port is in use by a transfer that is still going on. Cannot happen as long as interrupts do not transfer.
    Busy,
}

impl Error for TunnelError {
    fn kind(&self) -> ErrorKind {
        ErrorKind::Other
    }
}

/// The second serial port and what is known of the rig behind it.
pub(crate) struct Tunnel {
    uart: Uart,
    failed: bool,
    echoes: u32,
}

impl Tunnel {
    /// Takes the port over.
    pub(crate) fn new(uart: Uart) -> RefCell<Self> {
        RefCell::new(Self { uart, failed: false, echoes: 0 })
    }

    fn patience(&self) -> u32 {
        if self.failed { SHORT_PATIENCE } else { PATIENCE }
    }

    /// Drops what is left of earlier answers, up to the answer to an echo request sent now.
    fn find_step(&mut self) -> Result<(), TunnelError> {
        self.echoes = self.echoes.wrapping_add(1);
        let mark = [0, 7, 14, 21].map(|shift| 0x80 | (self.echoes >> shift) as u8);
        self.send(b"E")?;
        self.send(&mark)?;
        let begun = ticks::now();
        let mut latest = [0; 4];
        while latest != mark {
            let [_, b, c, d] = latest;
            latest = [b, c, d, self.receive_byte(begun)?];
        }
        Ok(())
    }

    fn send(&mut self, mut bytes: &[u8]) -> Result<(), TunnelError> {
        let begun = ticks::now();
        loop {
            let taken = self.uart.try_write(bytes);
            bytes = bytes.get(taken..).unwrap_or_default();
            if bytes.is_empty() {
                return Ok(());
            }
            if ticks::now().wrapping_sub(begun) > self.patience() {
                return Err(TunnelError::NoAnswer);
            }
        }
    }

    fn receive(&mut self, into: &mut [u8]) -> Result<(), TunnelError> {
        let begun = ticks::now();
        for place in into {
            *place = self.receive_byte(begun)?;
        }
        Ok(())
    }

    fn receive_byte(&mut self, begun: u32) -> Result<u8, TunnelError> {
        loop {
            for _ in 0..LOOKS_BEFORE_SLEEP {
                if let Some(byte) = self.uart.read_byte() {
                    return Ok(byte);
                }
            }
            if ticks::now().wrapping_sub(begun) > self.patience() {
                return Err(TunnelError::NoAnswer);
            }
            self.uart.sleep_until_interrupt();
        }
    }

    /// One exchange: `action` sends the request and takes the answer.
    fn exchange<R>(&mut self, action: impl FnOnce(&mut Self) -> Result<R, TunnelError>) -> Result<R, TunnelError> {
        let ready = if self.failed { self.find_step() } else { Ok(()) };
        let result = ready.and_then(|()| action(self));
        self.failed = result.is_err();
        result
    }

    fn transaction(&mut self, operations: &mut [Operation<'_, u8>]) -> Result<(), TunnelError> {
        let mut total: usize = 0;
        for operation in operations.iter() {
            total = total.saturating_add(clocked(operation));
        }
        let length = u8::try_from(total).map_err(|_| TunnelError::TooLong)?;
        if length == 0 {
            return Ok(());
        }
        self.exchange(|tunnel| {
            tunnel.send(&[b'S', length])?;
            for operation in operations.iter() {
                match operation {
                    Operation::Write(out) => tunnel.send(out)?,
                    Operation::TransferInPlace(both) => tunnel.send(both)?,
                    Operation::Transfer(_, out) => {
                        tunnel.send(out)?;
                        tunnel.send_zeroes(clocked(operation).saturating_sub(out.len()))?;
                    }
                    Operation::Read(into) => tunnel.send_zeroes(into.len())?,
                    Operation::DelayNs(_) => {}
                }
            }
            for operation in operations.iter_mut() {
                match operation {
                    Operation::Write(out) => tunnel.skip(out.len())?,
                    Operation::TransferInPlace(both) => tunnel.receive(both)?,
                    Operation::Transfer(into, out) => {
                        tunnel.receive(into)?;
                        tunnel.skip(out.len().saturating_sub(into.len()))?;
                    }
                    Operation::Read(into) => tunnel.receive(into)?,
                    Operation::DelayNs(_) => {}
                }
            }
            Ok(())
        })
    }

    fn send_zeroes(&mut self, count: usize) -> Result<(), TunnelError> {
        for _ in 0..count {
            self.send(&[0])?;
        }
        Ok(())
    }

    fn skip(&mut self, count: usize) -> Result<(), TunnelError> {
        let begun = ticks::now();
        for _ in 0..count {
            self.receive_byte(begun)?;
        }
        Ok(())
    }
}

/// Bytes an operation clocks over the bus: a transfer lasts as long as the longer of its two sides.
fn clocked(operation: &Operation<'_, u8>) -> usize {
    match operation {
        Operation::Read(into) => into.len(),
        Operation::Write(out) => out.len(),
        Operation::Transfer(into, out) => into.len().max(out.len()),
        Operation::TransferInPlace(both) => both.len(),
        Operation::DelayNs(_) => 0,
    }
}

/// The tunnel as the bus the converter hangs on.
pub(crate) struct TunnelledSpi<'a>(pub(crate) &'a RefCell<Tunnel>);

impl ErrorType for TunnelledSpi<'_> {
    type Error = TunnelError;
}

impl SpiDevice for TunnelledSpi<'_> {
    fn transaction(&mut self, operations: &mut [Operation<'_, u8>]) -> Result<(), TunnelError> {
        self.0.try_borrow_mut().map_err(|_| TunnelError::Busy)?.transaction(operations)
    }
}

/// What the rig's capture registers hold at one instant.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(crate) struct Capture {
    /// Pulses counted since start; wraps.
    pub(crate) count: u32,
    /// Time of the last edge in ticks of 1 MHz; wraps.
    pub(crate) last_edge_ticks: u32,
    /// Now, in ticks of 1 MHz; wraps after 71.6 minutes.
    pub(crate) now_ticks: u32,
    /// Whether the drive runs; `None` when the rig does not say.
    pub(crate) running: Option<bool>,
    /// Whether the shaft turns forward; `None` when there is no direction source.
    pub(crate) forward: Option<bool>,
}

/// Asks the rig for the capture registers.
///
/// # Errors
/// [`TunnelError::NoAnswer`] or [`TunnelError::Busy`].
pub(crate) fn capture(tunnel: &RefCell<Tunnel>) -> Result<Capture, TunnelError> {
    let mut answer = [0; 14];
    tunnel.try_borrow_mut().map_err(|_| TunnelError::Busy)?.exchange(|tunnel| {
        tunnel.send(b"C")?;
        tunnel.receive(&mut answer)
    })?;
    let [c0, c1, c2, c3, e0, e1, e2, e3, n0, n1, n2, n3, status, _] = answer;
    let flag = |known: u8, value: u8| (status & known != 0).then_some(status & value != 0);
    Ok(Capture {
        count: u32::from_le_bytes([c0, c1, c2, c3]),
        last_edge_ticks: u32::from_le_bytes([e0, e1, e2, e3]),
        now_ticks: u32::from_le_bytes([n0, n1, n2, n3]),
        running: flag(1 << 1, 1),
        forward: flag(1 << 3, 1 << 2),
    })
}
