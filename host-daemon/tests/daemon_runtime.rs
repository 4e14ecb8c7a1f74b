//! The whole daemon on a pseudo-terminal with the real controller program at its other end: records stored, judged and
//! acknowledged; alarms; unplugging; restarts of either side; stops.

mod daemon;

use daemon::{Bench, frames, hello, plant, record, wait_until};
use offcurve::{
    alarm::{AlarmChange, AlarmKind, AlarmState},
    runtime::{self, Listeners, Plant, Summary},
    store::{Totals, totals},
};
use offcurve_core::{
    guard::Advisories,
    link::{
        Decoder, Message, Record,
        frame::{MAX_FRAME, encode},
    },
};
use offcurve_rig::pty::{FarEnd, Pty};
use rusqlite::Connection;
use std::{
    path::{Path, PathBuf},
    sync::{Arc, Mutex},
    thread::JoinHandle,
    time::{Duration, Instant},
};
use tokio::sync::oneshot;

/// A folder with a store and a port name, and a daemon that can be started there.
struct Site {
    folder: tempfile::TempDir,
}

struct Daemon {
    stop: oneshot::Sender<()>,
    thread: JoinHandle<Result<Summary, runtime::RuntimeError>>,
    changes: Arc<Mutex<Vec<AlarmChange>>>,
}

impl Site {
    fn new() -> Self {
        Self { folder: tempfile::tempdir().unwrap() }
    }

    fn port(&self) -> PathBuf {
        self.folder.path().join("port")
    }

    fn store(&self) -> PathBuf {
        self.folder.path().join("plant.db")
    }

    fn start(&self) -> Daemon {
        self.start_with(plant(&self.store(), &self.port()))
    }

    fn start_with(&self, plant: Plant) -> Daemon {
        let changes = Arc::new(Mutex::new(Vec::new()));
        let (stop, told) = oneshot::channel();
        let seen = Arc::clone(&changes);
        let thread = std::thread::spawn(move || {
            let listeners = Listeners {
                board: None,
                on_alarm: Some(Box::new(move |machine, change| {
                    assert_eq!(machine, "Test pump");
                    seen.lock().unwrap().push(change.clone());
                })),
            };
            let stop = async {
                let _ = told.await;
            };
            tokio::runtime::Builder::new_current_thread()
                .enable_all()
                .build()
                .unwrap()
                .block_on(runtime::run(plant, listeners, stop))
        });
        Daemon { stop, thread, changes }
    }

    fn totals(&self) -> Totals {
        // Before the daemon has made it there is nothing in it.
        if self.store().exists() { totals(&self.store()).unwrap_or_default() } else { Totals::default() }
    }

    fn stored(&self) -> u64 {
        self.totals().records
    }

    fn query(&self, sql: &str) -> Vec<(i64, i64)> {
        let connection = Connection::open(self.store()).unwrap();
        let mut statement = connection.prepare(sql).unwrap();
        let rows = statement.query_map([], |row| Ok((row.get(0)?, row.get(1)?))).unwrap();
        rows.collect::<Result<_, _>>().unwrap()
    }
}

impl Daemon {
    fn stop(self) -> Summary {
        let begun = Instant::now();
        self.stop.send(()).unwrap();
        let summary = self.thread.join().unwrap().unwrap();
        assert!(begun.elapsed() < Duration::from_secs(2), "the stop took {:?}", begun.elapsed());
        summary
    }

    fn active(&self, kind: AlarmKind) -> Option<AlarmChange> {
        let changes = self.changes.lock().unwrap();
        changes.iter().rev().find(|change| change.kind == kind).filter(|change| change.state.is_active()).cloned()
    }
}

/// Each boot's numbers are there from its first without a hole, but for the gaps written down.
fn assert_whole(site: &Site) {
    let sql = "SELECT boot, max(last) + 1 - min(first) - sum(last + 1 - first) FROM (
                   SELECT boot, number AS first, number AS last FROM record
                   UNION ALL SELECT boot, first, last FROM gap) GROUP BY boot";
    let holes = site.query(sql);
    assert!(!holes.is_empty());
    assert!(holes.iter().all(|&(_, numbers)| numbers == 0), "(boot, numbers neither stored nor in a gap): {holes:?}");
}

#[test]
fn records_are_stored_compared_and_acknowledged() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 11);
    let daemon = site.start();
    wait_until("300 records", || site.stored() >= 300);
    wait_until("an acknowledgement", || bench.acknowledged().is_some_and(|(boot, number)| boot == 11 && number > 100));
    let acknowledged = bench.acknowledged().unwrap().1;
    let durable = site.query("SELECT 0, max(number) FROM record")[0].1;
    assert!(i64::from(acknowledged) <= durable, "nothing is acknowledged before it is stored");
    let summary = daemon.stop();
    assert_eq!((summary.mismatches, summary.bad_frames, summary.duplicates, summary.conflicts), (0, 0, 0, 0));
    assert_eq!(summary.stored, summary.received);
    assert_eq!(summary.stored, site.stored());
    assert_whole(&site);
}

#[test]
fn off_curve_is_alarmed_journalled_and_cleared() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 1);
    let daemon = site.start();
    wait_until("30 s of plant time", || site.stored() >= 300);
    assert_eq!(daemon.active(AlarmKind::OffCurve), None, "healthy");
    bench.set(|knobs| knobs.share = 0.85);
    wait_until("the alarm", || daemon.active(AlarmKind::OffCurve).is_some());
    let alarm = daemon.active(AlarmKind::OffCurve).unwrap();
    assert!(!alarm.text.is_empty());
    bench.set(|knobs| knobs.share = 1.0);
    wait_until("all clear", || daemon.active(AlarmKind::OffCurve).is_none());
    let summary = daemon.stop();
    assert_eq!(summary.alarms, 1);
    let journal = site.totals().journal;
    let states: Vec<_> = journal.iter().map(|entry| (entry.kind.as_str(), entry.state)).collect();
    let expected = [AlarmState::Unacknowledged, AlarmState::ReturnedUnacknowledged];
    assert_eq!(states, expected.map(|state| ("off-curve", state)));
    assert_eq!(journal[0].text, alarm.text);
    assert_eq!(journal[0].at_us, (alarm.at * 1e6).round() as i64);
}

#[test]
fn a_standing_alarm_outlives_the_daemon_and_is_not_raised_twice() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 1);
    bench.set(|knobs| knobs.share = 0.85);
    let daemon = site.start();
    wait_until("the alarm", || daemon.active(AlarmKind::OffCurve).is_some());
    daemon.stop();
    let before = site.stored();
    let daemon = site.start();
    wait_until("60 s of plant time", || site.stored() >= before + 600);
    let summary = daemon.stop();
    assert_eq!(summary.alarms, 0, "it stands already");
    let daemon = site.start();
    bench.set(|knobs| knobs.share = 1.0);
    wait_until("all clear in the journal", || site.totals().journal.len() == 2);
    daemon.stop();
    assert_eq!(site.totals().journal[1].state, AlarmState::ReturnedUnacknowledged);
    assert_whole(&site);
}

#[test]
fn another_profile_is_stored_but_differs() {
    let site = Site::new();
    let _bench = Bench::power_up(&site.port(), 1);
    let mut plant = plant(&site.store(), &site.port());
    plant.lines[0].profile.density += 1.0;
    let daemon = site.start_with(plant);
    wait_until("100 records", || site.stored() >= 100);
    wait_until("the alarm", || daemon.active(AlarmKind::EstimateMismatch).is_some());
    let summary = daemon.stop();
    assert_eq!(summary.mismatches, summary.stored);
}

#[test]
fn another_machine_is_stored_but_not_judged() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 1);
    bench.set(|knobs| knobs.share = 0.7);
    let mut plant = plant(&site.store(), &site.port());
    plant.lines[0].profile.machine = 8;
    let daemon = site.start_with(plant);
    wait_until("600 records", || site.stored() >= 600);
    let summary = daemon.stop();
    assert_eq!((summary.mismatches, summary.alarms), (0, 0));
}

#[test]
fn the_cable_is_pulled_and_put_back() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 5);
    let daemon = site.start();
    wait_until("100 records", || site.stored() >= 100);
    let (mut controller, mut now_ms) = bench.unplug();
    for times in 1..=3 {
        std::thread::sleep(Duration::from_millis(300));
        // A new device under the old name, the same controller behind it.
        let before = site.stored();
        let bench = Bench::plug_in(&site.port(), controller, now_ms);
        wait_until("100 records more", || site.stored() >= before + 100);
        if times == 3 {
            break;
        }
        (controller, now_ms) = bench.unplug();
    }
    let summary = daemon.stop();
    assert_eq!(summary.stored, site.stored());
    assert_eq!(site.query("SELECT count(DISTINCT boot), 0 FROM record"), [(1, 0)]);
    assert_whole(&site);
    // What was under way when the plug was pulled is lost, and written down.
    assert_eq!(summary.lost, site.totals().lost);
}

#[test]
fn a_controller_restarts_and_time_goes_on() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 5);
    let daemon = site.start();
    wait_until("200 records", || site.stored() >= 200);
    drop(bench);
    let before = site.stored();
    let bench = Bench::power_up(&site.port(), 6);
    wait_until("200 records of the next boot", || site.stored() >= before + 200);
    let summary = daemon.stop();
    drop(bench);
    assert_eq!(summary.conflicts, 0);
    let times = site.query(
        "SELECT min(anchor_us + 1000 * at_ms), max(anchor_us + 1000 * at_ms)
         FROM record JOIN boot USING (controller, boot) GROUP BY boot ORDER BY boot",
    );
    assert_eq!(times.len(), 2);
    // Fast time: the first boot ended ahead of the clock, and the second begins there, not before.
    assert!(times[1].0 >= times[0].1, "{times:?}");
    assert_whole(&site);
}

#[test]
fn the_daemon_restarts_and_finds_its_place() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 9);
    let daemon = site.start();
    wait_until("100 records", || site.stored() >= 100);
    daemon.stop();
    let anchor = site.query("SELECT boot, anchor_us FROM boot");
    let made = bench.made();
    wait_until("records that nobody reads", || bench.made() > made + 1000);
    let before = site.stored();
    let daemon = site.start();
    wait_until("100 records more", || site.stored() >= before + 100);
    let summary = daemon.stop();
    assert_eq!(site.query("SELECT boot, anchor_us FROM boot"), anchor, "the anchor stays");
    assert!(summary.lost > 0, "what was made meanwhile is lost and said");
    assert_eq!(summary.lost, site.totals().lost);
    assert_eq!(summary.duplicates, 0);
    assert_whole(&site);
}

/// Writes bytes at the pace of the reader; gives up after ten seconds.
fn send(pty: &Pty, mut bytes: &[u8]) {
    let begun = Instant::now();
    while !bytes.is_empty() {
        let taken = pty.try_write(bytes).unwrap();
        bytes = &bytes[taken..];
        if taken == 0 {
            assert!(begun.elapsed() < Duration::from_secs(10), "nobody reads");
            std::thread::sleep(Duration::from_millis(1));
        }
    }
}

/// A port that a test drives by hand, once the daemon has asked for a hello there.
fn by_hand(site: &Site) -> (Pty, Daemon) {
    let mut pty = Pty::open(FarEnd::Free).unwrap();
    pty.link_at(&site.port()).unwrap();
    let daemon = site.start();
    let mut decoder = Decoder::<MAX_FRAME>::default();
    wait_until("a hello request", || {
        let mut bytes = [0; 64];
        let count = pty.try_read(&mut bytes).unwrap();
        bytes[..count].iter().any(|&byte| {
            let message = decoder.push(byte).and_then(Result::ok).map(Message::decode);
            matches!(message, Some(Ok(Message::HelloRequest { .. })))
        })
    });
    (pty, daemon)
}

#[test]
fn gaps_repeats_and_noise() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    let mut bytes = frames(&[Message::Hello(hello(1, 0, 0))]);
    let mut say = |message: Message| bytes.extend_from_slice(&message.frame());
    for number in [0, 1, 2, 5, 6, 6, 5, 3, 10] {
        say(Message::Record(record(1, number)));
    }
    // The end of a boot: 11 to 13 were made, as the hello says, but never came.
    say(Message::Hello(hello(1, 14, 1400)));
    say(Message::Record(record(1, 14)));
    bytes.extend([0xff; 500]);
    bytes.push(0);
    bytes.extend(frames(&[Message::Record(record(1, 15))]));
    send(&pty, &bytes);
    wait_until("the last record", || site.query("SELECT 0, coalesce(max(number), 0) FROM record")[0].1 == 15);
    let summary = daemon.stop();
    assert_eq!((summary.received, summary.stored, summary.duplicates, summary.bad_frames), (11, 9, 2, 1));
    let gaps = site.query("SELECT first, last FROM gap ORDER BY first");
    assert_eq!(gaps, [(4, 4), (7, 9), (11, 13)]);
    assert_eq!((summary.lost, site.totals().lost), (7, 7));
    assert_eq!(site.totals().duplicates, 2);
}

#[test]
fn a_controller_never_seen_before_begins_without_a_gap_but_a_known_one_does_not() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    send(&pty, &frames(&[Message::Hello(hello(1, 500, 50_000)), Message::Record(record(1, 500))]));
    send(&pty, &frames(&[Message::Hello(hello(2, 3, 300)), Message::Record(record(2, 3))]));
    wait_until("both records", || site.stored() == 2);
    daemon.stop();
    assert_eq!(site.query("SELECT boot, last FROM gap"), [(2, 2)], "0 to 2 of the restart never came");
}

#[test]
fn two_controllers_with_one_boot_number_are_found_out() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    let mut other = record(1, 1);
    other.advisories = Advisories::RUN_OUT;
    let records = [record(1, 0), record(1, 1), other, record(1, 2)].map(Message::Record);
    send(&pty, &frames(&[&[Message::Hello(hello(1, 0, 0))], &records[..]].concat()));
    wait_until("the last record", || site.stored() == 3);
    let summary = daemon.stop();
    assert_eq!((summary.conflicts, summary.duplicates, summary.stored), (1, 0, 3));
    assert_eq!(site.totals().conflicts, 1);
    assert!(summary.to_string().contains("number was taken 1"), "{summary}");
}

/// An acknowledgement says "durable, forget it": of a record that was refused it would be a lie.
#[test]
fn a_refused_record_is_not_acknowledged() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    let mut decoder = Decoder::<MAX_FRAME>::default();
    let mut acknowledged = || {
        let mut bytes = [0; 256];
        let count = pty.try_read(&mut bytes).unwrap();
        let newest = bytes[..count].iter().filter_map(|&byte| {
            match decoder.push(byte).and_then(Result::ok).map(Message::decode) {
                Some(Ok(Message::Ack { boot, number })) => Some((boot, number)),
                _ => None,
            }
        });
        newest.last()
    };
    let records = [record(1, 0), record(1, 1), record(1, 2)].map(Message::Record);
    send(&pty, &frames(&[&[Message::Hello(hello(1, 0, 0))], &records[..]].concat()));
    wait_until("an acknowledgement of all three", || acknowledged() == Some((1, 2)));
    let mut other = record(1, 1);
    other.advisories = Advisories::RUN_OUT;
    send(&pty, &frames(&[Message::Record(other)]));
    wait_until("the conflict", || site.totals().conflicts == 1);
    let begun = Instant::now();
    while begun.elapsed() < Duration::from_millis(800) {
        assert_eq!(acknowledged(), None);
        std::thread::sleep(Duration::from_millis(10));
    }
    daemon.stop();
}

/// The watch's time does not go back: a record that comes after later ones is stored, and that is all.
#[test]
fn a_late_record_is_stored_but_not_judged() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    // What is judged is compared, so a wrong checksum shows what was judged.
    let wrong = |number| Record { estimate_checksum: record(1, number).estimate_checksum ^ 1, ..record(1, number) };
    let records = [record(1, 0), wrong(1), record(1, 3), wrong(2), record(1, 4)].map(Message::Record);
    send(&pty, &frames(&[&[Message::Hello(hello(1, 0, 0))], &records[..]].concat()));
    wait_until("all five", || site.stored() == 5);
    let summary = daemon.stop();
    assert_eq!((summary.stored, summary.lost, summary.mismatches), (5, 0, 1), "number 1 counts, the late 2 does not");
}

/// All 64 bits of a boot number count, also beyond what a signed number holds, and over a restart of the daemon.
#[test]
fn a_boot_number_may_be_any() {
    let site = Site::new();
    for (round, boot) in [u64::MAX, 1 << 63, (1 << 63) - 1, 0].into_iter().enumerate() {
        let (pty, daemon) = by_hand(&site);
        let first = if round == 0 { 0 } else { 2 };
        let known = u64::MAX; // the first boot goes on in each later round: 2, then 3 and 4
        if round > 0 {
            let next = first + 2 * (round as u32 - 1);
            let more = [record(known, next), record(known, next + 1)].map(Message::Record);
            send(&pty, &frames(&[&[Message::Hello(hello(known, next, 100 * next))], &more[..]].concat()));
        }
        let new = [record(boot, 0), record(boot, 1)].map(Message::Record);
        send(&pty, &frames(&[&[Message::Hello(hello(boot, 0, 0))], &new[..]].concat()));
        wait_until("what was sent", || site.stored() == 2 + 4 * round as u64);
        let summary = daemon.stop();
        assert_eq!((summary.lost, summary.duplicates, summary.conflicts), (0, 0, 0), "round {round}");
    }
    let numbers = site.query("SELECT boot, count(*) FROM record GROUP BY boot ORDER BY boot");
    assert_eq!(numbers, [(i64::MIN, 2), (-1, 8), (0, 2), (i64::MAX, 2)]);
}

#[test]
fn nothing_is_stored_of_another_build() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    let mut payload = Message::Hello(hello(1, 0, 0)).payload();
    payload[3] ^= 1; // within the layout
    send(&pty, &encode(&payload).unwrap());
    send(&pty, &frames(&[Message::Record(record(1, 0)), Message::Record(record(1, 1))]));
    // A controller of this build takes over: the line is read on.
    send(&pty, &frames(&[Message::Hello(hello(2, 0, 0)), Message::Record(record(2, 0))]));
    wait_until("the record", || site.stored() == 1);
    assert_eq!(daemon.stop().bad_frames, 1);
    assert_eq!(site.query("SELECT boot, number FROM record"), [(2, 0)]);
}

#[test]
fn any_noise_is_lived_through() {
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    // A cheap generator is enough: the decoder has its own property tests.
    let mut state = 1_u32;
    let noise: Vec<u8> = std::iter::repeat_with(|| {
        state = state.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        (state >> 24) as u8
    })
    .take(200_000)
    .collect();
    send(&pty, &noise);
    send(&pty, &[0]);
    send(
        &pty,
        &frames(&[Message::Hello(hello(1, 0, 0)), Message::Hello(hello(1, 0, 0)), Message::Record(record(1, 0))]),
    );
    wait_until("the record", || site.stored() == 1);
    let summary = daemon.stop();
    assert!(summary.bad_frames > 100, "{summary}");
    assert_eq!(summary.stored, 1);
}

#[test]
fn one_port_has_one_reader() {
    let site = Site::new();
    let _bench = Bench::power_up(&site.port(), 1);
    let daemon = site.start();
    wait_until("10 records", || site.stored() >= 10);
    // A second daemon, with a store of its own, at the same port: it waits, and harms nobody.
    let other = Site::new();
    let second = other.start_with(plant(&other.store(), &site.port()));
    std::thread::sleep(Duration::from_millis(500));
    let before = site.stored();
    wait_until("100 records more", || site.stored() >= before + 100);
    assert_eq!(second.stop().received, 0);
    assert_eq!(daemon.stop().bad_frames, 0);
    assert_whole(&site);
}

#[test]
fn a_stop_comes_through_while_the_store_is_locked() {
    let site = Site::new();
    let _bench = Bench::power_up(&site.port(), 1);
    let daemon = site.start();
    wait_until("10 records", || site.stored() >= 10);
    let other = Connection::open(site.store()).unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    std::thread::sleep(Duration::from_millis(300));
    let begun = Instant::now();
    daemon.stop.send(()).unwrap();
    let failed = daemon.thread.join().unwrap().unwrap_err();
    assert!(matches!(failed, runtime::RuntimeError::Unstored { records, .. } if records > 0), "{failed}");
    assert!(begun.elapsed() < Duration::from_secs(4), "the stop took {:?}", begun.elapsed());
}

#[test]
fn a_store_that_cannot_be_written_for_a_while_loses_nothing_of_what_was_read() {
    let site = Site::new();
    let bench = Bench::power_up(&site.port(), 1);
    let daemon = site.start();
    wait_until("10 records", || site.stored() >= 10);
    let other = Connection::open(site.store()).unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    // On a busy computer some are lost before the daemon reads for the first time.
    let (made, lost) = (bench.made(), site.totals().lost);
    wait_until("three seconds' records", || bench.made() > made + 1000);
    assert!(site.stored() <= u64::from(made) + 20, "nothing is stored while the store is locked");
    // What is acknowledged a controller may forget: never before it is stored.
    let newest = site.query("SELECT 0, max(number) FROM record")[0].1;
    let (_, acknowledged) = bench.acknowledged().expect("ten records were stored before the lock");
    assert!(i64::from(acknowledged) <= newest, "acknowledged up to {acknowledged}, stored up to {newest}");
    other.execute_batch("ROLLBACK").unwrap();
    wait_until("them all stored", || site.stored() + lost > u64::from(made) + 1000);
    let summary = daemon.stop();
    assert_eq!((summary.lost, summary.stored), (lost, summary.received), "the channel held them all");
    assert_whole(&site);
}

#[test]
fn a_port_that_is_not_there_is_waited_for() {
    let site = Site::new();
    let daemon = site.start();
    std::thread::sleep(Duration::from_millis(400));
    let _bench = Bench::power_up(&site.port(), 1);
    wait_until("10 records", || site.stored() >= 10);
    daemon.stop();
}

/// The figure that the line, the store and the watch take together; printed, not judged.
#[test]
fn a_hundred_thousand_records_at_once() {
    const COUNT: u32 = 100_000;
    let site = Site::new();
    let (pty, daemon) = by_hand(&site);
    let mut bytes = frames(&[Message::Hello(hello(1, 0, 0))]);
    for number in 0..COUNT {
        bytes.extend_from_slice(&Message::Record(record(1, number)).frame());
    }
    let begun = Instant::now();
    send_for(&pty, &bytes, Duration::from_secs(120));
    // Unoptimised on a busy computer the last of them take longer than what `wait_until` allows.
    while site.query("SELECT 0, coalesce(max(number), 0) FROM record")[0].1 < i64::from(COUNT) - 1 {
        assert!(begun.elapsed() < Duration::from_secs(240), "waited in vain: all stored");
        std::thread::sleep(Duration::from_millis(10));
    }
    let took = begun.elapsed();
    let summary = daemon.stop();
    println!("{COUNT} records, line to store to watch: {:.2?}, {:.0}/s", took, f64::from(COUNT) / took.as_secs_f64());
    assert_eq!((summary.stored, summary.lost, summary.mismatches), (u64::from(COUNT), 0, 0));
}

fn send_for(pty: &Pty, mut bytes: &[u8], limit: Duration) {
    let begun = Instant::now();
    while !bytes.is_empty() {
        let taken = pty.try_write(bytes).unwrap();
        bytes = &bytes[taken..];
        if taken == 0 {
            assert!(begun.elapsed() < limit, "nobody reads");
            std::thread::sleep(Duration::from_micros(100));
        }
        // The other way must not fill up.
        let _ = pty.try_read(&mut [0; 256]).unwrap();
    }
}

#[test]
fn a_store_that_cannot_be_opened_is_said_at_once() {
    let site = Site::new();
    let daemon = site.start_with(plant(Path::new("/nonexistent/plant.db"), &site.port()));
    let failed = daemon.thread.join().unwrap().unwrap_err().to_string();
    assert!(failed.contains("/nonexistent") && failed.contains("does not exist"), "{failed}");
}
