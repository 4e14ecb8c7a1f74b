//! The firmware image on the emulated Cortex-M4F: its records arrive over its serial line, and this computer computes
//! the same estimates from them to the bit.

use offcurve_core::{
    estimate::estimate,
    link::{Decoder, Hello, Message, Record, frame::MAX_FRAME},
    machine::Profile,
};
use offcurve_rig::{
    bench::Bench,
    emulated::{Emulator, EmulatorOptions},
    scenario::Scenario,
};
use offcurve_tests::running::{MACHINE_FILE, image, machine, profile_bytes, with_line};
use std::{
    io::Read as _,
    sync::{Arc, Mutex},
    time::{Duration, Instant},
};

/// What came over the line.
struct Heard {
    hellos: Vec<Hello>,
    records: Vec<Record>,
    bad_frames: u32,
}

/// A board with this machine file, listened to until it has sent so many records.
fn listen(machine_file: &str, records: usize) -> (Profile, Heard) {
    let profile = machine(machine_file).profile;
    let scenario = Scenario::built_in("waterworks-wear").expect("a built-in scenario");
    let mut bench = Bench::new(&scenario).expect("a bench");
    bench.set_scan_interval(u32::from(profile.schedule.scan_ms));
    let mut options = EmulatorOptions::new(image());
    options.profile = profile_bytes(&profile);
    options.boot = 7;
    let mut board = Emulator::start(&options, Arc::new(Mutex::new(bench))).expect("the board starts");
    let mut port = serialport::new(board.line().to_string_lossy(), 115_200)
        .timeout(Duration::from_secs(5))
        .open()
        .expect("the board's line opens");
    let begun = Instant::now();
    let mut decoder = Decoder::<MAX_FRAME>::default();
    let mut heard = Heard { hellos: Vec::new(), records: Vec::new(), bad_frames: 0 };
    let mut bytes = [0; 4096];
    while heard.records.len() < records {
        board.check().expect("the board runs");
        let count = port.read(&mut bytes).expect("the board goes on sending");
        for &byte in &bytes[..count] {
            match decoder.push(byte).map(|frame| frame.map(Message::decode)) {
                Some(Ok(Ok(Message::Hello(hello)))) => heard.hellos.push(hello),
                Some(Ok(Ok(Message::Record(record)))) => heard.records.push(record),
                None => {}
                Some(_) => heard.bad_frames += 1,
            }
        }
    }
    let counters = board.counters();
    let wall = begun.elapsed().as_secs_f64();
    println!(
        "{} records in {wall:.1} s; {:.0} converter scans/s, {:.0} estimates/s, {:.1} plant seconds per second",
        heard.records.len(),
        counters.transactions as f64 / wall,
        counters.captures as f64 / wall,
        counters.plant_microseconds as f64 / 1e6 / wall
    );
    println!("stack: {:?}", board.stack_use().expect("the stack can be measured"));
    assert_eq!(counters.stray_bytes, 0);
    (profile, heard)
}

fn mismatches(records: &[Record], profile: &Profile) -> usize {
    records.iter().filter(|record| estimate(&record.sample, profile).checksum() != record.estimate_checksum).count()
}

/// Ten thousand estimates of a run with healthy and worn parts, each sent; coarse scans, so that it takes a minute.
#[test]
fn ten_thousand_estimates_of_the_image_are_equal_to_the_bit() {
    let text = with_line(MACHINE_FILE, "scan_interval", "scan_interval = \"20 ms\"");
    let text = with_line(&text, "record_interval", "record_interval = \"100 ms\"");
    let (profile, heard) = listen(&text, 10_000);
    let numbers: Vec<u32> = heard.records.iter().map(|record| record.number).collect();
    let lost = numbers.windows(2).filter(|pair| pair[1] != pair[0] + 1).count();
    println!("{} hellos, {} bad frames, {lost} jumps in the numbers", heard.hellos.len(), heard.bad_frames);
    assert!(heard.bad_frames <= 1, "only the first frame may be cut by joining late");
    assert!(heard.records.iter().all(|record| record.boot == 7 && record.machine == profile.machine));
    assert_eq!(heard.hellos.last().map(|hello| hello.profile_checksum), Some(profile.checksum()));

    assert_eq!(mismatches(&heard.records, &profile), 0, "estimates that differ from the image's");
    let judged = heard.records.iter().filter(|record| estimate(&record.sample, &profile).head_residual.is_ok()).count();
    println!("0 of {} estimates differ; {judged} of them have a head residual", heard.records.len());
    assert!(judged > 9_900, "equal estimates of nothing would prove nothing: {judged}");

    // The lowest bit of one number of the profile: every estimate that uses it must differ.
    let mut flipped = profile.clone();
    flipped.density = f32::from_bits(flipped.density.to_bits() ^ 1);
    let differ = mismatches(&heard.records, &flipped);
    println!("with one bit of the profile flipped, {differ} of {} estimates differ", heard.records.len());
    assert!(differ > 9_900, "{differ}");
}

/// The rates a real board has: a scan each millisecond, a record each second.
#[test]
fn the_image_runs_at_the_rates_of_a_real_plant() {
    let text = with_line(MACHINE_FILE, "scan_interval", "scan_interval = \"1 ms\"");
    let (profile, heard) = listen(&text, 30);
    assert_eq!(mismatches(&heard.records, &profile), 0);
    let intervals = heard.records.windows(2).map(|pair| pair[1].at_ms - pair[0].at_ms);
    for (place, interval) in intervals.enumerate() {
        assert_eq!(interval, 1_000, "between records {place} and the next");
    }
}
