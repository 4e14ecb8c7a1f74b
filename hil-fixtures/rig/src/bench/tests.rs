//! The bench as a controller sees it: bytes, edges and counters against the plant's truth.

use embedded_hal::spi::{Operation, SpiDevice};

use super::*;
use crate::converter::{current_ma, select_frame};

/// One transaction that reads all eight inputs: nine frames, the first answer belongs to an earlier selection.
fn scan(bench: &mut Bench) -> [u16; 8] {
    let mosi: Vec<u8> = (0..9).flat_map(select_frame).collect();
    let mut miso = [0; 18];
    bench.scan_spi(&mosi, &mut miso);
    std::array::from_fn(|input| u16::from_be_bytes([miso[2 * input + 2], miso[2 * input + 3]]))
}

fn scenario(lines: &str) -> Scenario {
    Scenario::parse(&format!("seed = 4\n{lines}"), "test").unwrap()
}

/// A plant whose quantities stand still, so that averages converge on the truth.
const CALM: &str = "[plant]\ndemand_noise = \"0 %\"\nlevel_noise = \"0 m\"\nlevel_swing = \"0 m\"\n";

#[test]
fn time_moves_with_transactions_only() {
    let mut bench = Bench::new(&scenario("")).unwrap();
    assert_eq!(bench.time_s(), 0.0);
    scan(&mut bench);
    assert_eq!(bench.time_s(), 0.001);
    bench.set_scan_interval(250);
    scan(&mut bench);
    bench.capture();
    assert!((bench.time_s() - 0.251).abs() < 1e-12 && (bench.truth().time_s - 0.251).abs() < 1e-9);
    assert_eq!((bench.capture().now, bench.capture().now_ms), (251_000, 251));
}

#[test]
fn counts_decode_to_the_truth_within_the_declared_noise() {
    let mut bench = Bench::new(&scenario(CALM)).unwrap();
    let mut sums = [0.0; 8];
    let scans = 20_000;
    for _ in 0..scans {
        for (sum, counts) in sums.iter_mut().zip(scan(&mut bench)) {
            *sum += current_ma(counts);
        }
    }
    let truth = bench.truth();
    let quantities = [truth.flow_m3s, truth.suction_pa_gauge, truth.discharge_pa_gauge, truth.shaft_torque_nm];
    for (input, quantity) in quantities.into_iter().enumerate() {
        let sensor = &bench.sensors()[input];
        let spec = sensor.spec();
        let mean = spec.lo + (sums[input] / f64::from(scans) - 4.0) / 16.0 * (spec.hi - spec.lo);
        // Twenty seconds hold about 65 independent noise values; 0.4 of a deviation is over three standard errors.
        let error = mean - quantity - sensor.calibration_error(quantity);
        assert!(error.abs() < 0.4 * spec.deviation(quantity), "input {input}: {mean} for {quantity}");
    }
    assert_eq!(sums[4..], [0.0; 4], "nothing is wired to the other inputs");
}

#[test]
fn edges_give_the_speed_within_two_tenths_of_a_percent() {
    for speed in [1480.0, 1036.0, 300.0] {
        let mut bench = Bench::new(&scenario(&format!("{CALM}speed = \"{speed} rpm\"\n"))).unwrap();
        bench.set_scan_interval(10);
        let mut before = bench.capture();
        for _ in 0..20 {
            for _ in 0..100 {
                scan(&mut bench);
            }
            let now = bench.capture();
            let ticks = now.last_edge.wrapping_sub(before.last_edge);
            let edges = now.count.wrapping_sub(before.count);
            let measured = f64::from(edges) / 60.0 / (f64::from(ticks) / f64::from(now.ticks_per_second)) * 60.0;
            if before.count > 0 {
                assert!((measured / speed - 1.0).abs() < 0.002, "{measured} for {speed}");
            }
            assert!(now.now.wrapping_sub(now.last_edge) < 10_000 + 4000, "the last edge is recent: {now:?}");
            before = now;
        }
    }
}

#[test]
fn counters_wrap_as_promised() {
    let mut bench = Bench::new(&scenario(CALM)).unwrap();
    bench.time_us = (1 << 32) - 5000; // just before the tick counter wraps; instruments do not care
    let before = bench.capture();
    bench.advance(10_000);
    let after = bench.capture();
    assert!(after.now < before.now);
    assert_eq!(after.now.wrapping_sub(before.now), 10_000);
    assert_eq!(after.now, 5000);
    assert_eq!(after.now_ms, 4_294_972); // milliseconds have a counter of their own: 2³² µs are 4294967.296 ms
    assert!(after.now.wrapping_sub(after.last_edge) < 2000);
}

#[test]
fn stopping_is_seen_in_run_state_and_edges() {
    let mut bench =
        Bench::new(&scenario(&format!("{CALM}[pulses]\ndirection = true\n[[event]]\nat = \"1 s\"\nrun = false\n")))
            .unwrap();
    bench.advance(990_000);
    assert!(bench.capture().running);
    assert_eq!(bench.capture().forward, Some(true));
    bench.advance(20_000);
    assert!(!bench.capture().running);
    bench.advance(60_000_000);
    let still = bench.capture();
    bench.advance(5_000_000);
    let later = bench.capture();
    assert_eq!((still.count, still.last_edge), (later.count, later.last_edge));
    assert_eq!(bench.truth().speed_rpm, 0.0);
}

#[test]
fn faults_act_at_their_times() {
    let events = "
        [[event]]\nat = \"1 s\"\nsensor = \"flow\"\nfault = \"open loop\"
        [[event]]\nat = \"2 s\"\nsensor = \"flow\"\nfault = \"none\"
        [[event]]\nat = \"2 s\"\nsensor = \"discharge\"\nfault = \"stuck\"
        [[event]]\nat = \"3 s\"\nconverter = \"dead\"
        [[event]]\nat = \"4 s\"\nconverter = \"healthy\"
        [[event]]\nat = \"4 s\"\nsensor = \"torque\"\nfault = \"gain\"\namount = \"-50 %\"";
    let mut bench = Bench::new(&scenario(&format!("{CALM}{events}"))).unwrap();
    bench.set_scan_interval(10);
    let mut seen = Vec::new();
    for _ in 0..500 {
        seen.push(scan(&mut bench));
    }
    // seen[i] was converted at (i + 1)·10 ms. A chip event of that very moment acts on it, an instrument's from the next
    // scan on: its current of that moment was already sent.
    let flow: Vec<bool> = seen.iter().map(|counts| counts[0] == 0).collect();
    assert_eq!(
        (flow.iter().position(|open| *open), flow[..300].iter().rposition(|open| *open)),
        (Some(100), Some(199))
    );
    assert!(seen[200..299].iter().all(|counts| counts[2] == seen[200][2]), "stuck");
    assert!(seen[..200].iter().any(|counts| counts[2] != seen[0][2]), "alive before");
    let dead: Vec<usize> = (0..500).filter(|i| seen[*i] == [0xFFFF; 8]).collect();
    assert_eq!((dead.first(), dead.last(), dead.len()), (Some(&299), Some(&398), 100));
    let mean = |range: std::ops::Range<usize>| {
        seen[range.clone()].iter().map(|counts| current_ma(counts[3])).sum::<f64>() / range.len() as f64
    };
    let halved = (mean(410..500) - 4.0) / (mean(0..290) - 4.0);
    assert!((halved - 0.5).abs() < 0.02, "{halved}");
}

#[test]
fn the_ring_opens_over_its_time() {
    let wear = "[[event]]\nat = \"10 s\"\nwear_ring_clearance = \"1 mm\"\nover = \"20 s\"
        [[event]]\nat = \"40 s\"\nwear_ring_clearance = \"0.25 mm\"";
    let mut bench = Bench::new(&scenario(&format!("{CALM}{wear}"))).unwrap();
    let mut clearance_at = |second: u64| {
        bench.advance(second * 1_000_000 - bench.time_us);
        bench.truth().ring_clearance_m * 1e3
    };
    for (second, expected) in [(10, 0.25), (15, 0.4375), (20, 0.625), (30, 1.0), (39, 1.0), (41, 0.25)] {
        assert!((clearance_at(second) - expected).abs() < 1e-9, "at {second} s");
    }
}

#[test]
fn an_event_between_two_scans_splits_the_step() {
    let wear = "[[event]]\nat = \"1005 ms\"\nwear_ring_clearance = \"1 mm\"";
    let mut bench = Bench::new(&scenario(&format!("{CALM}{wear}"))).unwrap();
    bench.advance(1_000_000);
    assert!((bench.truth().ring_clearance_m - 0.25e-3).abs() < 1e-12);
    bench.advance(10_000);
    assert!((bench.truth().ring_clearance_m - 1e-3).abs() < 1e-12);
}

#[test]
fn the_pattern_repeats_and_events_interrupt_it() {
    let day = "[[pattern]]\nfor = \"1 min\"\nspeed = \"1400 rpm\"\nvalve = \"70 %\"
        [[pattern]]\nfor = \"1 min\"\nspeed = \"1100 rpm\"
        [[event]]\nat = \"150 s\"\nspeed = \"1250 rpm\"";
    let mut bench = Bench::new(&scenario(&format!("{CALM}{day}"))).unwrap();
    for (second, speed) in [(55, 1400.0), (115, 1100.0), (145, 1400.0), (175, 1250.0), (235, 1100.0), (295, 1400.0)] {
        bench.advance(second * 1_000_000 - bench.time_us);
        assert!((bench.truth().speed_rpm - speed).abs() < 0.1, "at {second} s: {}", bench.truth().speed_rpm);
    }
}

#[test]
fn a_run_repeats_bit_for_bit() {
    let record = || {
        let mut bench = Bench::new(&Scenario::built_in("waterworks-wear").unwrap()).unwrap();
        bench.set_scan_interval(10);
        (0..2000).map(|_| (scan(&mut bench), bench.capture())).collect::<Vec<_>>()
    };
    assert!(record() == record());
}

#[test]
fn the_duration_ends_a_run() {
    let mut bench = Bench::new(&scenario("duration = \"1 s\"\n")).unwrap();
    bench.advance(999_999);
    assert!(!bench.finished());
    bench.advance(1);
    assert!(bench.finished());
}

#[test]
fn spi_operations_join_into_one_run_of_clocks() {
    let same = scenario(CALM);
    let mut plain = Bench::new(&same).unwrap();
    let mut expected = [0; 8];
    plain.scan_spi(&[0x08, 0x00, 0x10, 0x00, 0x18, 0x00, 0x00, 0x00], &mut expected);

    let shared = Arc::new(Mutex::new(Bench::new(&same).unwrap()));
    let mut port = BenchSpi::new(Arc::clone(&shared));
    let (mut first, mut in_place, mut last) = ([0xAA; 1], [0x00, 0x10, 0x00], [0xAA; 2]);
    port.transaction(&mut [
        Operation::Transfer(&mut first, &[0x08]),
        Operation::TransferInPlace(&mut in_place), // frames straddle operations
        Operation::DelayNs(1000),
        Operation::Write(&[0x18, 0x00]),
        Operation::Read(&mut last),
    ])
    .unwrap();
    assert_eq!([&first[..], &in_place].concat(), expected[..4]);
    assert_eq!(last, expected[6..]);
    assert_eq!(shared.lock().unwrap().time_s(), 0.001);

    // Unequal halves of a transfer: the longer one sets the clocks.
    let mut answer = [0xAA; 4];
    port.transfer(&mut answer, &[0x20, 0x00]).unwrap();
    assert_eq!(answer[2..], [0x00, 0x00], "input 4 was selected and carries nothing");
    assert_ne!(answer[..2], [0x00, 0x00], "the selection before was input 0, the flow");
    port.write(&[]).unwrap();
    assert_eq!(shared.lock().unwrap().time_s(), 0.002, "no byte, no selection, no time");
}

#[test]
fn an_abandoned_bench_is_an_error_not_a_panic() {
    let shared = Arc::new(Mutex::new(Bench::new(&scenario("")).unwrap()));
    let holder = Arc::clone(&shared);
    let panicked = std::thread::spawn(move || {
        let _guard = holder.lock();
        panic!("on purpose, to poison the lock");
    });
    assert!(panicked.join().is_err());
    assert_eq!(BenchSpi::new(shared).read(&mut [0; 2]), Err(BenchGone));
}
