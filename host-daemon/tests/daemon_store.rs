//! The SQLite store: durable without a clean end, each record once, gaps that close, a journal that only grows, other
//! schemas refused, a full disk survived.

mod daemon;

use daemon::record;
use offcurve::{
    alarm::{AlarmKind, AlarmState},
    store::{AlarmRow, Batch, BootRow, Gap, Outcome, RecordRow, SqliteStore, Store, StoreError, Writer, totals},
};
use offcurve_core::link::Message;
use rusqlite::Connection;
use std::{path::Path, sync::Arc, time::Duration};

fn row(boot: u64, number: u32) -> RecordRow {
    let record = record(boot, number);
    RecordRow {
        controller: "bench".into(),
        boot,
        number,
        machine: record.machine,
        received_us: 1_000_000 + i64::from(number),
        at_ms: i64::from(record.at_ms),
        payload: Message::Record(record).payload(),
    }
}

fn boot_row(boot: u64, anchor_us: i64) -> BootRow {
    BootRow {
        controller: "bench".into(),
        boot,
        anchor_us,
        seen_us: anchor_us + 5,
        name: "bench".into(),
        profile_checksum: 1,
        layout: 2,
    }
}

fn batch(records: impl IntoIterator<Item = RecordRow>) -> Batch {
    Batch { records: records.into_iter().collect(), ..Batch::default() }
}

fn gap(first: u32, last: u32) -> Gap {
    Gap { controller: Arc::from("bench"), boot: 1, first, last, noticed_us: 9 }
}

fn gaps(path: &Path) -> Vec<(u32, u32)> {
    let connection = Connection::open(path).unwrap();
    let mut statement = connection.prepare("SELECT first, last FROM gap ORDER BY first").unwrap();
    let rows = statement.query_map([], |row| Ok((row.get(0)?, row.get(1)?))).unwrap();
    rows.collect::<Result<_, _>>().unwrap()
}

#[test]
fn a_second_daemon_is_kept_off_a_store() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let first = SqliteStore::open(&path).unwrap();
    let refused = SqliteStore::open(&path).unwrap_err();
    assert!(matches!(refused, StoreError::InUse { .. }), "{refused}");
    assert!(totals(&path).is_ok(), "reading goes on");
    drop(first);
    assert!(SqliteStore::open(&path).is_ok(), "and it is free again");
}

#[test]
fn what_is_committed_is_there_without_a_clean_end() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    let top = u64::MAX - 3; // its bits are a negative number in the file
    let mut first = batch((0..50).map(|number| row(top, number)));
    first.boots.push(boot_row(top, 777));
    assert_eq!(store.append(&first).unwrap(), vec![Outcome::Stored; 50]);
    // As a killed process leaves it: no close, no checkpoint; the files are copied while the store is still open.
    let copy = folder.path().join("copy.db");
    for end in ["", "-wal"] {
        std::fs::copy(format!("{}{end}", path.display()), format!("{}{end}", copy.display())).unwrap();
    }
    let again = SqliteStore::open(&copy).unwrap();
    let boots = again.boots("bench").unwrap();
    assert_eq!(boots.len(), 1);
    assert_eq!((boots[0].boot, boots[0].anchor_us, boots[0].next_number), (top, 777, 50));
    assert_eq!(boots[0].last, Some((4900, 1_000_049)));
    assert_eq!(totals(&copy).unwrap().records, 50);
    let payload: Vec<u8> =
        Connection::open(&copy).unwrap().query_row("SELECT payload FROM record LIMIT 1", [], |row| row.get(0)).unwrap();
    assert_eq!(Message::decode(&payload), Ok(Message::Record(record(top, 0))));
}

#[test]
fn the_settings_that_durability_hangs_on() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    store.append(&batch([row(1, 0)])).unwrap();
    let mode: String = Connection::open(&path).unwrap().query_row("PRAGMA journal_mode", [], |row| row.get(0)).unwrap();
    assert_eq!(mode, "wal");
    assert!(std::fs::metadata(format!("{}-wal", path.display())).unwrap().len() > 0);
    store.close().unwrap();
    assert_eq!(std::fs::metadata(format!("{}-wal", path.display())).unwrap().len(), 0, "the log is emptied at the end");
}

#[test]
fn twice_is_once_and_another_content_is_refused() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    store.append(&batch((0..10).map(|number| row(1, number)))).unwrap();
    let mut other = row(1, 3);
    other.payload[20] ^= 1;
    let outcomes = store.append(&batch([row(1, 2), other, row(1, 10), row(2, 2)])).unwrap();
    assert_eq!(outcomes, [Outcome::Duplicate, Outcome::Conflict, Outcome::Stored, Outcome::Stored]);
    let totals = totals(&path).unwrap();
    assert_eq!((totals.records, totals.duplicates, totals.conflicts), (12, 1, 1));
    let mut same_number = row(1, 2);
    same_number.controller = "other".into();
    assert_eq!(store.append(&batch([same_number])).unwrap(), [Outcome::Stored], "another controller's");
}

#[test]
fn a_boot_keeps_its_first_anchor() {
    let folder = tempfile::tempdir().unwrap();
    let mut store = SqliteStore::open(&folder.path().join("plant.db")).unwrap();
    for anchor in [100, 200] {
        store.append(&Batch { boots: vec![boot_row(1, anchor)], ..Batch::default() }).unwrap();
    }
    assert_eq!(store.boots("bench").unwrap()[0].anchor_us, 100);
    assert_eq!(store.boots("nobody").unwrap(), []);
}

#[test]
fn gaps_close_as_their_records_come_after_all() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    let mut with_gap = batch([row(1, 0), row(1, 10)]);
    with_gap.gaps.push(gap(1, 9));
    with_gap.boots.push(boot_row(1, 0));
    store.append(&with_gap).unwrap();
    assert_eq!(totals(&path).unwrap().lost, 9);
    assert_eq!(store.append(&batch([row(1, 5)])).unwrap(), [Outcome::FilledGap]);
    assert_eq!(gaps(&path), [(1, 4), (6, 9)]);
    store.append(&batch([1, 4, 9, 6, 7, 8].map(|number| row(1, number)))).unwrap();
    assert_eq!(gaps(&path), [(2, 3)]);
    assert_eq!(totals(&path).unwrap().lost, 2);
    // A gap at the end counts for what comes next, or it would be found again at every start.
    store.append(&Batch { gaps: vec![gap(11, 19)], ..Batch::default() }).unwrap();
    assert_eq!(store.boots("bench").unwrap()[0].next_number, 20);
}

#[test]
fn the_journal_grows_only_and_says_what_stands() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    let alarm = |at_us, kind: AlarmKind, state: AlarmState| AlarmRow {
        at_us,
        written_us: at_us,
        machine: "Test pump".into(),
        kind: kind.id().into(),
        state: state.id().into(),
        causes: "0.700 wear".into(),
        text: "words".into(),
    };
    let alarms = vec![
        alarm(1, AlarmKind::OffCurve, AlarmState::Unacknowledged),
        alarm(2, AlarmKind::EstimateMismatch, AlarmState::Unacknowledged),
        alarm(3, AlarmKind::OffCurve, AlarmState::ReturnedUnacknowledged),
        alarm(4, AlarmKind::EstimateMismatch, AlarmState::Normal),
    ];
    store.append(&Batch { alarms, ..Batch::default() }).unwrap();
    let standing = store.standing_alarms("Test pump").unwrap();
    assert_eq!(standing.len(), 1);
    assert_eq!((standing[0].kind.as_str(), standing[0].state.as_str()), ("off-curve", "returned unacknowledged"));
    assert_eq!(store.standing_alarms("another").unwrap(), []);
    let journal = totals(&path).unwrap().journal;
    assert_eq!(journal.iter().map(|entry| entry.at_us).collect::<Vec<_>>(), [1, 2, 3, 4]);
    assert_eq!(journal[3].state, AlarmState::Normal);
    let connection = Connection::open(&path).unwrap();
    for change in ["UPDATE alarm SET text = 'never happened'", "DELETE FROM alarm"] {
        let refused = connection.execute(change, []).unwrap_err().to_string();
        assert!(refused.contains("append-only"), "{refused}");
    }
}

#[test]
fn what_is_no_store_of_this_build_is_left_alone() {
    let folder = tempfile::tempdir().unwrap();
    let missing = folder.path().join("nowhere/plant.db");
    assert!(matches!(SqliteStore::open(&missing), Err(StoreError::NoFolder { .. })));

    let text = folder.path().join("notes.txt");
    std::fs::write(&text, "no database, but long enough to be taken for one".repeat(50)).unwrap();
    assert!(matches!(SqliteStore::open(&text), Err(StoreError::Foreign { .. })));
    assert_eq!(std::fs::read_to_string(&text).unwrap().len(), 48 * 50);

    let foreign = folder.path().join("foreign.db");
    Connection::open(&foreign).unwrap().execute_batch("CREATE TABLE cake (slices INTEGER)").unwrap();
    let before = std::fs::read(&foreign).unwrap();
    assert!(matches!(SqliteStore::open(&foreign), Err(StoreError::Foreign { .. })));
    assert_eq!(std::fs::read(&foreign).unwrap(), before);

    for change in ["PRAGMA user_version = 1", "UPDATE about SET layout = layout + 1"] {
        let path = folder.path().join("other.db");
        let _ = std::fs::remove_file(&path);
        drop(SqliteStore::open(&path).unwrap());
        Connection::open(&path).unwrap().execute_batch(change).unwrap();
        let refused = SqliteStore::open(&path).unwrap_err();
        assert!(matches!(refused, StoreError::OtherSchema { .. }), "{refused}");
        assert!(refused.to_string().contains("schema version"), "{refused}");
        assert!(matches!(totals(&path), Err(StoreError::OtherSchema { .. })));
    }
}

#[test]
fn a_locked_store_is_named_and_nothing_of_the_batch_stays() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    let other = Connection::open(&path).unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    let refused = store.append(&batch([row(1, 0)])).unwrap_err();
    assert!(matches!(refused, StoreError::Busy { .. }), "{refused}");
    other.execute_batch("ROLLBACK").unwrap();
    assert_eq!(totals(&path).unwrap().records, 0);
    assert_eq!(store.append(&batch([row(1, 0)])).unwrap(), [Outcome::Stored]);
}

#[tokio::test]
async fn the_writer_waits_for_a_locked_store_and_gives_up_only_when_told() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("plant.db");
    let writer = Writer::start(Box::new(SqliteStore::open(&path).unwrap())).unwrap();
    let other = Connection::open(&path).unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    let unlock = std::thread::spawn(move || {
        std::thread::sleep(Duration::from_millis(1700)); // longer than one try
        other.execute_batch("ROLLBACK").unwrap();
        other
    });
    let (_, outcomes) = writer.write(batch([row(1, 0)])).await.unwrap();
    assert_eq!(outcomes, [Outcome::Stored]);

    let other = unlock.join().unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    writer.hurry().now();
    let refused = writer.write(batch([row(1, 1), row(1, 2)])).await.unwrap_err();
    assert!(matches!(refused, StoreError::GaveUp { records: 2, .. }), "{refused}");
    other.execute_batch("ROLLBACK").unwrap();
    writer.close();
    assert_eq!(totals(&path).unwrap().records, 1);
}

/// A file system of 2 MB, unmounted on drop.
struct SmallDisk(tempfile::TempDir);

impl SmallDisk {
    /// `None` where this user may not mount; with `CI` set that is a failure.
    fn mount() -> Option<Self> {
        let folder = tempfile::tempdir().unwrap();
        let mounted = std::process::Command::new("mount")
            .args(["-t", "tmpfs", "-o", "size=2m", "tmpfs"])
            .arg(folder.path())
            .output()
            .is_ok_and(|output| output.status.success());
        if mounted {
            return Some(Self(folder));
        }
        assert!(std::env::var_os("CI").is_none(), "the full disk cannot be tested: mounting a tmpfs was refused");
        eprintln!("SKIPPED: the full disk, because mounting a tmpfs was refused (needs root)");
        None
    }
}

impl Drop for SmallDisk {
    fn drop(&mut self) {
        let _ = std::process::Command::new("umount").arg(self.0.path()).status();
    }
}

#[test]
fn a_full_disk_is_survived() {
    let Some(disk) = SmallDisk::mount() else { return };
    let path = disk.0.path().join("plant.db");
    let mut store = SqliteStore::open(&path).unwrap();
    let ballast = disk.0.path().join("ballast");
    let mut stored = 0;
    let refused = loop {
        let numbers = stored..stored + 500;
        match store.append(&batch(numbers.map(|number| row(1, number)))) {
            Ok(_) => stored += 500,
            Err(refused) => break refused,
        }
        if stored == 2000 {
            std::fs::write(&ballast, vec![1; 1 << 20]).unwrap();
        }
        assert!(stored < 100_000, "2 MB took more than they can hold");
    };
    assert!(matches!(refused, StoreError::Full { .. }), "{refused}");
    assert_eq!(totals(&path).unwrap().records, u64::from(stored), "all of a batch or nothing");
    std::fs::remove_file(&ballast).unwrap();
    let rest = batch((stored..stored + 500).map(|number| row(1, number)));
    assert_eq!(store.append(&rest).unwrap(), vec![Outcome::Stored; 500], "the same batch, once there is room");
    let sound: String =
        Connection::open(&path).unwrap().query_row("PRAGMA integrity_check", [], |row| row.get(0)).unwrap();
    assert_eq!(sound, "ok");
    drop(store);
}
