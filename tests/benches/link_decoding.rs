//! How fast one host core takes records off the line: frames to payloads to records.
//!
//! Wanted: a million records per second in an optimised build (`cargo bench -p offcurve-tests`). Time is that of the
//! processor spent on this thread where the system tells it (Linux), so that other work on the machine counts less.
//! Rates are printed, with the machine, and fail nothing. What does fail is a record that does not come out as it went
//! in.

use offcurve_core::{
    estimate::estimate,
    guard::Advisories,
    link::{Decoder, Message, Record, frame::MAX_FRAME},
};
use offcurve_tests::fixtures::{self, Shape};
use std::{hint::black_box, time::Instant};

const RECORDS: u32 = 200_000;
const ROUNDS: usize = 7;

/// A stream of full records: every channel, every key estimate.
fn stream() -> (Vec<u8>, u64) {
    let profile = Shape::WATERWORKS.profile();
    let mut bytes = Vec::new();
    let mut checksums = 0_u64;
    for number in 0..RECORDS {
        let part = f64::from(number % 1000) / 1000.0;
        let readings = fixtures::on_curve(
            &Shape::WATERWORKS,
            (0.5 + 0.5 * part, 0.6 + 0.7 * part),
            (0.97, 1.01),
            20_000.0,
            [0.001, 0.01, 0.005, 0.005, 0.01],
        );
        let sample = fixtures::sample(readings.map(Some));
        let estimate = estimate(&sample, &profile);
        let record = Record::new((7, 1, number, number.wrapping_mul(100)), sample, Advisories::NONE, &estimate);
        checksums += u64::from(record.estimate_checksum);
        bytes.extend_from_slice(&Message::Record(record).frame());
    }
    (bytes, checksums)
}

/// The frames alone: number of sound ones and the sum of their lengths.
fn unframe(bytes: &[u8]) -> (u32, usize) {
    let mut decoder = Decoder::<MAX_FRAME>::default();
    let (mut frames, mut length) = (0, 0);
    for &byte in bytes {
        if let Some(Ok(payload)) = decoder.push(byte) {
            frames += 1;
            length += payload.len();
        }
    }
    (frames, length)
}

/// Decodes the stream; number of records and the sum of their checksums.
fn decode(bytes: &[u8]) -> (u32, u64) {
    let mut decoder = Decoder::<MAX_FRAME>::default();
    let (mut records, mut checksums) = (0, 0);
    for &byte in bytes {
        if let Some(Ok(payload)) = decoder.push(byte)
            && let Ok(Message::Record(record)) = Message::decode(payload)
        {
            records += 1;
            checksums += u64::from(record.estimate_checksum);
        }
    }
    (records, checksums)
}

fn processor() -> String {
    let text = std::fs::read_to_string("/proc/cpuinfo").unwrap_or_default();
    let model = text.lines().find_map(|line| line.strip_prefix("model name")?.split_once(": ").map(|(_, name)| name));
    model.unwrap_or("processor unknown").to_owned()
}

/// A point in time, s: processor time of this thread, or else the clock's.
fn now(start: Instant) -> f64 {
    let on_processor = || {
        let text = std::fs::read_to_string("/proc/thread-self/schedstat").ok()?;
        text.split_whitespace().next()?.parse::<u64>().ok()
    };
    on_processor().map_or_else(|| start.elapsed().as_secs_f64(), |nanoseconds| nanoseconds as f64 * 1e-9)
}

/// Records per second over several rounds, in rising order.
fn rates<T>(bytes: &[u8], work: fn(&[u8]) -> T, sound: impl Fn(T) -> bool) -> Vec<f64> {
    let origin = Instant::now();
    let mut rates: Vec<f64> = (0..ROUNDS)
        .map(|_| {
            let start = now(origin);
            let found = work(black_box(bytes));
            let seconds = now(origin) - start;
            assert!(sound(found), "records were lost or changed");
            f64::from(RECORDS) / seconds
        })
        .collect();
    rates.sort_by(f64::total_cmp);
    rates
}

fn main() {
    let (bytes, checksums) = stream();
    let length = bytes.len() / RECORDS as usize;
    let build = if cfg!(debug_assertions) { "unoptimised" } else { "optimised" };
    println!("link decoding on one core, {build} build, {}; {length} bytes per record", processor());
    let report = |what: &str, rates: &[f64]| {
        let (slowest, median, fastest) = (rates[0] / 1e6, rates[ROUNDS / 2] / 1e6, rates[ROUNDS - 1] / 1e6);
        println!(
            "{what}: median {median:.2} million records/s (slowest {slowest:.2}, fastest {fastest:.2}), {:.0} MB/s",
            median * length as f64
        );
    };
    report("frames and records", &rates(&bytes, decode, |found| found == (RECORDS, checksums)));
    report("frames alone", &rates(&bytes, unframe, |(frames, _)| frames == RECORDS));
}
