//! The rig's end of the tunnel: answers the image's requests from a [`TunnelDevice`], in step with the wall if asked.
//!
//! | request | answer |
//! |---|---|
//! | `S`, length (u8), bytes out | as many bytes in |
//! | `C` | the capture registers, 14 bytes |
//! | `E`, 4 bytes | the same 4 bytes: after a time-out the image finds out which answer belongs to what |
//!
//! The pace is kept at capture answers only: with `t` in plant seconds since the first and `v` the speed, an answer
//! leaves no earlier than `t / v` wall seconds after the first. Between two of them, a tenth of a plant second as the
//! image asks, transactions run as fast as they can, so a look at the wall clock in there says nothing.

use std::{
    io::{self, BufReader, Read, Write},
    os::unix::net::UnixStream,
    sync::{
        Arc, Mutex, PoisonError,
        atomic::{AtomicU64, Ordering},
    },
    time::{Duration, Instant},
};

use crate::bench::{Bench, TICKS_PER_SECOND};

/// The tunnel's capture ticks have a fixed rate of 1 MHz, so the bench's must have it too.
const _: () = assert!(TICKS_PER_SECOND == 1_000_000);

/// A paced run that is late by more than this starts counting anew instead of racing to catch up.
const CATCH_UP_LIMIT: Duration = Duration::from_millis(500);

/// The chips behind the tunnel.
pub trait TunnelDevice {
    /// One SPI transaction (chip select low to high): bytes from the board in `mosi`, bytes to it in `miso`, which
    /// comes zeroed and has the same length.
    fn spi(&mut self, mosi: &[u8], miso: &mut [u8]);

    /// The speed input's registers at this instant: count u32, last edge u32, now u32 (ticks of 1 MHz, wrapping;
    /// all little endian), status u8 (bit 0 running, 1 run state known, 2 forward, 3 direction known), 0.
    fn capture(&mut self) -> [u8; 14];
}

impl TunnelDevice for Bench {
    fn spi(&mut self, mosi: &[u8], miso: &mut [u8]) {
        self.scan_spi(mosi, miso);
    }

    fn capture(&mut self) -> [u8; 14] {
        let capture = Bench::capture(self);
        let mut answer = [0; 14];
        let [count, last_edge, now] = [capture.count, capture.last_edge, capture.now].map(u32::to_le_bytes);
        answer[0..4].copy_from_slice(&count);
        answer[4..8].copy_from_slice(&last_edge);
        answer[8..12].copy_from_slice(&now);
        answer[12] = u8::from(capture.running)
            | 1 << 1
            | u8::from(capture.forward.unwrap_or(false)) << 2
            | u8::from(capture.forward.is_some()) << 3;
        answer
    }
}

impl<D: TunnelDevice + ?Sized> TunnelDevice for Arc<Mutex<D>> {
    fn spi(&mut self, mosi: &[u8], miso: &mut [u8]) {
        self.lock().unwrap_or_else(PoisonError::into_inner).spi(mosi, miso);
    }

    fn capture(&mut self) -> [u8; 14] {
        self.lock().unwrap_or_else(PoisonError::into_inner).capture()
    }
}

/// What has passed through the tunnel since start.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[non_exhaustive]
pub struct TunnelCounters {
    /// SPI transactions answered.
    pub transactions: u64,
    /// Capture requests answered.
    pub captures: u64,
    /// Plant time passed between the first and the last capture, in microseconds.
    pub plant_microseconds: u64,
    /// Echo requests answered. Above 0 the image has waited in vain for an answer at least once.
    pub echoes: u64,
    /// Bytes that were no request. Above 0 the image and the rig do not speak the same tunnel.
    pub stray_bytes: u64,
    /// Times a paced run fell behind by more than half a second and gave up that time.
    pub fell_behind: u64,
}

#[derive(Debug, Default)]
pub(super) struct Counters {
    transactions: AtomicU64,
    captures: AtomicU64,
    plant_microseconds: AtomicU64,
    echoes: AtomicU64,
    stray_bytes: AtomicU64,
    fell_behind: AtomicU64,
}

impl Counters {
    pub(super) fn now(&self) -> TunnelCounters {
        let value = |counter: &AtomicU64| counter.load(Ordering::Relaxed);
        TunnelCounters {
            transactions: value(&self.transactions),
            captures: value(&self.captures),
            plant_microseconds: value(&self.plant_microseconds),
            echoes: value(&self.echoes),
            stray_bytes: value(&self.stray_bytes),
            fell_behind: value(&self.fell_behind),
        }
    }
}

/// Keeps plant time and wall time in proportion.
pub(super) struct Pace {
    speed: f64,
    begun: Option<(Instant, u64)>,
}

impl Pace {
    pub(super) fn new(speed: f64) -> Self {
        Self { speed, begun: None }
    }

    /// How long to wait at plant time `plant` (microseconds), seen at `now`; `None`: hopelessly late, so start anew.
    fn wait(&mut self, plant: u64, now: Instant) -> Option<Duration> {
        let (begun, from) = *self.begun.get_or_insert((now, plant));
        let due = begun + Duration::from_secs_f64(plant.saturating_sub(from) as f64 * 1e-6 / self.speed);
        if now.saturating_duration_since(due) > CATCH_UP_LIMIT {
            self.begun = Some((now, plant));
            return None;
        }
        Some(due.saturating_duration_since(now))
    }
}

/// Answers the image until the tunnel closes.
pub(super) struct Server<D> {
    stream: UnixStream,
    device: D,
    pace: Option<Pace>,
    counters: Arc<Counters>,
    last_now: Option<u32>,
}

impl<D: TunnelDevice> Server<D> {
    pub(super) fn new(stream: UnixStream, device: D, speed: Option<f64>, counters: Arc<Counters>) -> Self {
        Self { stream, device, pace: speed.map(Pace::new), counters, last_now: None }
    }

    pub(super) fn run(mut self) -> D {
        // Its errors all mean one thing: the other end is gone, by our wish or with QEMU, which `check` reports.
        let _ = self.serve();
        self.device
    }

    fn serve(&mut self) -> io::Result<()> {
        let mut requests = BufReader::new(self.stream.try_clone()?);
        loop {
            let [kind] = read_array(&mut requests)?;
            match kind {
                b'S' => {
                    let [length] = read_array(&mut requests)?;
                    let mut mosi = [0; 255];
                    let mut miso = [0; 255];
                    let mosi = &mut mosi[..usize::from(length)];
                    let miso = &mut miso[..usize::from(length)];
                    requests.read_exact(mosi)?;
                    self.device.spi(mosi, miso);
                    self.stream.write_all(miso)?;
                    self.counters.transactions.fetch_add(1, Ordering::Relaxed);
                }
                b'C' => {
                    let answer = self.device.capture();
                    self.keep_pace(&answer);
                    self.stream.write_all(&answer)?;
                    self.counters.captures.fetch_add(1, Ordering::Relaxed);
                }
                b'E' => {
                    let mark: [u8; 4] = read_array(&mut requests)?;
                    self.stream.write_all(&mark)?;
                    self.counters.echoes.fetch_add(1, Ordering::Relaxed);
                }
                _ => {
                    self.counters.stray_bytes.fetch_add(1, Ordering::Relaxed);
                }
            }
        }
    }

    fn keep_pace(&mut self, answer: &[u8; 14]) {
        let [.., n0, n1, n2, n3, _, _] = *answer;
        let now = u32::from_le_bytes([n0, n1, n2, n3]);
        let passed = now.wrapping_sub(self.last_now.replace(now).unwrap_or(now));
        let plant =
            self.counters.plant_microseconds.fetch_add(u64::from(passed), Ordering::Relaxed) + u64::from(passed);
        if let Some(pace) = &mut self.pace {
            match pace.wait(plant, Instant::now()) {
                Some(wait) => std::thread::sleep(wait),
                None => {
                    self.counters.fell_behind.fetch_add(1, Ordering::Relaxed);
                }
            }
        }
    }
}

fn read_array<const N: usize>(from: &mut impl Read) -> io::Result<[u8; N]> {
    let mut bytes = [0; N];
    from.read_exact(&mut bytes)?;
    Ok(bytes)
}

#[cfg(test)]
pub(super) mod tests {
    use super::*;

    /// Answers as a chip that returns the complement, with 1 ms of plant time a transaction.
    #[derive(Debug, Default)]
    pub(in super::super) struct Complement {
        now: u32,
    }

    impl TunnelDevice for Complement {
        fn spi(&mut self, mosi: &[u8], miso: &mut [u8]) {
            self.now = self.now.wrapping_add(1000);
            for (to, from) in miso.iter_mut().zip(mosi) {
                *to = !from;
            }
        }

        fn capture(&mut self) -> [u8; 14] {
            let mut answer = [0; 14];
            answer[8..12].copy_from_slice(&self.now.to_le_bytes());
            answer
        }
    }

    #[test]
    fn pace_holds_the_proportion_and_forgives_a_long_stall() {
        let mut pace = Pace::new(60.0);
        let start = Instant::now();
        assert_eq!(pace.wait(5_000_000, start), Some(Duration::ZERO), "the first answer sets the origin");
        assert_eq!(pace.wait(65_000_000, start), Some(Duration::from_secs(1)), "a plant minute is a wall second");
        assert_eq!(pace.wait(65_000_000, start + Duration::from_millis(1400)), Some(Duration::ZERO), "late: go on");
        let late = start + Duration::from_secs(9);
        assert_eq!(pace.wait(65_000_000, late), None, "hopelessly late");
        assert_eq!(pace.wait(71_000_000, late), Some(Duration::from_millis(100)), "counted from there");
    }

    /// The server alone, over a socket pair: answers, skips what is no request, and ends when the peer does.
    #[test]
    fn requests_are_answered_in_order_and_stray_bytes_counted() {
        let (mut board, rig) = UnixStream::pair().unwrap();
        let counters = Arc::new(Counters::default());
        let server = Server::new(rig, Complement::default(), None, Arc::clone(&counters));
        let thread = std::thread::spawn(move || server.run());
        board.write_all(b"\x00C?S\x03\x01\x02\xffE\x81SC\xffC").unwrap();
        let answers: [u8; 14 + 3 + 4 + 14] = read_array(&mut board).unwrap();
        assert_eq!(answers[14..17], [0xfe, 0xfd, 0x00]);
        assert_eq!(answers[17..21], *b"\x81SC\xff");
        assert_eq!(answers[29..33], 1000_u32.to_le_bytes(), "one transaction later");
        drop(board);
        assert_eq!(thread.join().unwrap().now, 1000);
        assert_eq!(counters.stray_bytes.load(Ordering::Relaxed), 2);
        assert_eq!(counters.plant_microseconds.load(Ordering::Relaxed), 1000);
    }
}
