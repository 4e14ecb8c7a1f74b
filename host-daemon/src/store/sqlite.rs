//! The store in one SQLite file.
//!
//! Write-ahead log with `synchronous = FULL`: a committed batch survives a killed process and, as far as the disk keeps
//! its word about flushing, a power cut. `BEGIN IMMEDIATE` takes the write lock at the start, so a batch either waits
//! its turn or fails whole. Readers of the file (a report, a backup) do not block the writer; a reader that never ends
//! keeps the log from being reset, which `journal_size_limit` cannot help.
//! Times and boot numbers are integers: an unsigned 64-bit boot is kept by its bits, so large ones print negative.

use super::{
    AlarmRow, Batch, BootRow, Gap, JournalEntry, KnownBoot, Outcome, RecordRow, StandingAlarm, Store, StoreError,
    Totals,
};
use crate::alarm::AlarmState;
use offcurve_core::checksum::crc32;
use rusqlite::{Connection, ErrorCode, OpenFlags, OptionalExtension, Transaction, TransactionBehavior, params};
use std::{
    collections::HashMap,
    fs::{File, TryLockError},
    path::{Path, PathBuf},
    sync::Arc,
    time::Duration,
};

const SCHEMA: &str = include_str!("schema.sql");
/// Version of the schema; 0 until it is frozen.
const SCHEMA_VERSION: i64 = 0;
/// "ofcv", so that a file of another program is known at sight.
const APPLICATION: i64 = 0x6f66_6376;
/// How long to wait for another writer.
const BUSY: Duration = Duration::from_millis(1000);
/// The log is cut back to this after each reset, bytes.
const LOG_LIMIT: i64 = 16 << 20;

/// A store in one file.
#[derive(Debug)]
pub struct SqliteStore {
    connection: Connection,
    path: PathBuf,
    controllers: HashMap<Arc<str>, i64>,
    /// Held while the store is open; the system lets go of it however the process ends.
    _lock: File,
}

/// Fingerprint of the tables.
const fn layout() -> u32 {
    crc32(SCHEMA.as_bytes())
}

impl SqliteStore {
    /// Opens a store, or makes a new one in an existing folder.
    ///
    /// # Errors
    /// [`StoreError`]; a file that is no store, or one of another schema, is left as it is.
    pub fn open(path: &Path) -> Result<Self, StoreError> {
        let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty());
        if let Some(folder) = folder.filter(|folder| !folder.is_dir()) {
            return Err(StoreError::NoFolder { folder: folder.to_owned() });
        }
        if path.is_dir() {
            return Err(StoreError::Foreign { path: path.to_owned() });
        }
        let failed = |source: rusqlite::Error| match source.sqlite_error_code() {
            Some(ErrorCode::ReadOnly | ErrorCode::CannotOpen | ErrorCode::PermissionDenied) => {
                StoreError::NotWritable { path: path.to_owned() }
            }
            _ => StoreError::Open { path: path.to_owned(), source },
        };
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE
            | OpenFlags::SQLITE_OPEN_CREATE
            | OpenFlags::SQLITE_OPEN_NO_MUTEX
            | OpenFlags::SQLITE_OPEN_PRIVATE_CACHE;
        let mut connection = Connection::open_with_flags(path, flags).map_err(failed)?;
        connection.busy_timeout(BUSY).map_err(failed)?;
        // Before any setting is made: a file of another program must not be changed, not even its journal mode.
        let fresh = match check(&connection, path) {
            Err(StoreError::Read { source, .. }) if source.sqlite_error_code() == Some(ErrorCode::NotADatabase) => {
                return Err(StoreError::Foreign { path: path.to_owned() });
            }
            // The log of a store is written even by who only reads it.
            Err(StoreError::Read { source, .. }) => return Err(failed(source)),
            other => other?,
        };
        let lock = lock(path)?;
        connection.pragma_update(None, "journal_mode", "WAL").map_err(failed)?;
        connection.pragma_update(None, "synchronous", "FULL").map_err(failed)?;
        connection.pragma_update(None, "journal_size_limit", LOG_LIMIT).map_err(failed)?;
        connection.pragma_update(None, "foreign_keys", true).map_err(failed)?;
        if fresh {
            create(&mut connection).map_err(|source| sort(path, source))?;
        }
        let controllers = read_controllers(&connection).map_err(failed)?;
        Ok(Self { connection, path: path.to_owned(), controllers, _lock: lock })
    }

    /// The file.
    #[must_use]
    pub fn path(&self) -> &Path {
        &self.path
    }

    fn read_failed(&self, source: rusqlite::Error) -> StoreError {
        StoreError::Read { path: self.path.clone(), source }
    }
}

/// Keeps a second daemon off the store: the engine would let both write, and each would take the other's records for
/// conflicts. The lock is on a file beside the store, because the engine has locks of its own on the store itself.
fn lock(path: &Path) -> Result<File, StoreError> {
    let mut name = path.as_os_str().to_owned();
    name.push("-lock");
    let refused = |_| StoreError::NotWritable { path: path.to_owned() };
    let file = File::options().create(true).truncate(false).write(true).open(name).map_err(refused)?;
    match file.try_lock() {
        Ok(()) => Ok(file),
        Err(TryLockError::WouldBlock) => Err(StoreError::InUse { path: path.to_owned() }),
        Err(TryLockError::Error(error)) => Err(refused(error)),
    }
}

/// Whether the file is empty; an error when it is something else than a store of this build.
fn check(connection: &Connection, path: &Path) -> Result<bool, StoreError> {
    let failed = |source| StoreError::Read { path: path.to_owned(), source };
    let number = |name: &str| connection.pragma_query_value(None, name, |row| row.get::<_, i64>(0)).map_err(failed);
    let tables: i64 =
        connection.query_row("SELECT count(*) FROM sqlite_schema", [], |row| row.get(0)).map_err(failed)?;
    let (application, version) = (number("application_id")?, number("user_version")?);
    if tables == 0 && application == 0 && version == 0 {
        return Ok(true);
    }
    if application != APPLICATION {
        return Err(StoreError::Foreign { path: path.to_owned() });
    }
    let other = |found: u32| StoreError::OtherSchema { path: path.to_owned(), version, layout: found, known: layout() };
    if version != SCHEMA_VERSION {
        return Err(other(0));
    }
    let found: u32 = connection.query_row("SELECT layout FROM about", [], |row| row.get(0)).map_err(failed)?;
    if found == layout() { Ok(false) } else { Err(other(found)) }
}

fn create(connection: &mut Connection) -> rusqlite::Result<()> {
    // In one transaction: a daemon killed here leaves an empty file, not half a store.
    let transaction = connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
    transaction.execute_batch(SCHEMA)?;
    transaction.execute("INSERT INTO about (layout) VALUES (?1)", [layout()])?;
    transaction.pragma_update(None, "application_id", APPLICATION)?;
    transaction.pragma_update(None, "user_version", SCHEMA_VERSION)?;
    transaction.commit()
}

fn read_controllers(connection: &Connection) -> rusqlite::Result<HashMap<Arc<str>, i64>> {
    let mut statement = connection.prepare("SELECT name, id FROM controller")?;
    let rows = statement.query_map([], |row| Ok((Arc::from(row.get::<_, String>(0)?), row.get(1)?)))?;
    rows.collect()
}

/// Gives an engine's error the name that says what to do.
fn sort(path: &Path, source: rusqlite::Error) -> StoreError {
    let path = path.to_owned();
    match source.sqlite_error_code() {
        Some(ErrorCode::DiskFull) => StoreError::Full { path },
        Some(ErrorCode::DatabaseBusy | ErrorCode::DatabaseLocked) => {
            StoreError::Busy { path, waited_ms: BUSY.as_millis() as u64 }
        }
        _ => StoreError::Write { path, source },
    }
}

impl Store for SqliteStore {
    fn append(&mut self, batch: &Batch) -> Result<Vec<Outcome>, StoreError> {
        let Self { connection, path, controllers, .. } = self;
        let mut known = controllers.clone();
        let result = (|| {
            let transaction = connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
            let outcomes = write(&transaction, batch, &mut known)?;
            transaction.commit()?;
            Ok(outcomes)
        })();
        let outcomes = result.map_err(|source| sort(path, source))?;
        *controllers = known;
        Ok(outcomes)
    }

    fn boots(&self, controller: &str) -> Result<Vec<KnownBoot>, StoreError> {
        let Some(&id) = self.controllers.get(controller) else { return Ok(Vec::new()) };
        known_boots(&self.connection, id).map_err(|source| self.read_failed(source))
    }

    fn standing_alarms(&self, machine: &str) -> Result<Vec<StandingAlarm>, StoreError> {
        standing(&self.connection, machine).map_err(|source| self.read_failed(source))
    }

    fn close(&mut self) -> Result<(), StoreError> {
        let result = self.connection.query_row("PRAGMA wal_checkpoint(TRUNCATE)", [], |_| Ok(()));
        result.map_err(|source| sort(&self.path, source))
    }
}

fn write(
    transaction: &Transaction<'_>,
    batch: &Batch,
    controllers: &mut HashMap<Arc<str>, i64>,
) -> rusqlite::Result<Vec<Outcome>> {
    let mut id = |name: &Arc<str>| -> rusqlite::Result<i64> {
        if let Some(&id) = controllers.get(name) {
            return Ok(id);
        }
        transaction.execute("INSERT INTO controller (name) VALUES (?1)", [&**name])?;
        let id = transaction.last_insert_rowid();
        controllers.insert(Arc::clone(name), id);
        Ok(id)
    };
    for boot in &batch.boots {
        insert_boot(transaction, id(&boot.controller)?, boot)?;
    }
    let mut outcomes = Vec::with_capacity(batch.records.len());
    // Gaps first: a record that closes one must find it.
    for gap in &batch.gaps {
        insert_gap(transaction, id(&gap.controller)?, gap)?;
    }
    for record in &batch.records {
        let controller = id(&record.controller)?;
        let outcome = insert_record(transaction, controller, record)?;
        count_refused(transaction, controller, outcome)?;
        outcomes.push(outcome);
    }
    for alarm in &batch.alarms {
        insert_alarm(transaction, alarm)?;
    }
    Ok(outcomes)
}

fn insert_boot(transaction: &Transaction<'_>, controller: i64, boot: &BootRow) -> rusqlite::Result<()> {
    // The first sight counts: a later one must not move the times of what is stored.
    let sql = "INSERT INTO boot VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7) ON CONFLICT DO NOTHING";
    transaction.prepare_cached(sql)?.execute(params![
        controller,
        boot.boot.cast_signed(),
        boot.anchor_us,
        boot.seen_us,
        boot.name,
        boot.profile_checksum,
        boot.layout
    ])?;
    Ok(())
}

fn insert_record(transaction: &Transaction<'_>, controller: i64, record: &RecordRow) -> rusqlite::Result<Outcome> {
    let boot = record.boot.cast_signed();
    let sql = "INSERT INTO record VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7) ON CONFLICT DO NOTHING";
    let inserted = transaction.prepare_cached(sql)?.execute(params![
        controller,
        boot,
        record.number,
        record.machine,
        record.received_us,
        record.at_ms,
        record.payload.as_slice()
    ])?;
    if inserted == 1 {
        let filled = close_gap(transaction, controller, boot, record.number)?;
        return Ok(if filled { Outcome::FilledGap } else { Outcome::Stored });
    }
    let sql = "SELECT payload = ?4 FROM record WHERE controller = ?1 AND boot = ?2 AND number = ?3";
    let same: bool = transaction
        .prepare_cached(sql)?
        .query_row(params![controller, boot, record.number, record.payload.as_slice()], |row| row.get(0))?;
    Ok(if same { Outcome::Duplicate } else { Outcome::Conflict })
}

fn count_refused(transaction: &Transaction<'_>, controller: i64, outcome: Outcome) -> rusqlite::Result<()> {
    let (duplicates, conflicts) = match outcome {
        Outcome::Stored | Outcome::FilledGap => return Ok(()),
        Outcome::Duplicate => (1, 0),
        Outcome::Conflict => (0, 1),
    };
    let sql = "INSERT INTO refused VALUES (?1, ?2, ?3) ON CONFLICT DO UPDATE
               SET duplicates = duplicates + excluded.duplicates, conflicts = conflicts + excluded.conflicts";
    transaction.prepare_cached(sql)?.execute(params![controller, duplicates, conflicts])?;
    Ok(())
}

fn insert_gap(transaction: &Transaction<'_>, controller: i64, gap: &Gap) -> rusqlite::Result<()> {
    let sql = "INSERT INTO gap VALUES (?1, ?2, ?3, ?4, ?5) ON CONFLICT DO NOTHING";
    let values = params![controller, gap.boot.cast_signed(), gap.first, gap.last, gap.noticed_us];
    transaction.prepare_cached(sql)?.execute(values)?;
    Ok(())
}

/// Takes a number that came after all out of the gap it was in; whether there was one.
fn close_gap(transaction: &Transaction<'_>, controller: i64, boot: i64, number: u32) -> rusqlite::Result<bool> {
    let sql = "SELECT first, last, noticed_us FROM gap
               WHERE controller = ?1 AND boot = ?2 AND first <= ?3 ORDER BY first DESC LIMIT 1";
    let found: Option<(u32, u32, i64)> = transaction
        .prepare_cached(sql)?
        .query_row(params![controller, boot, number], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?)))
        .optional()?;
    let Some((first, last, noticed_us)) = found.filter(|&(_, last, _)| number <= last) else { return Ok(false) };
    let sql = "DELETE FROM gap WHERE controller = ?1 AND boot = ?2 AND first = ?3";
    transaction.prepare_cached(sql)?.execute(params![controller, boot, first])?;
    let sql = "INSERT INTO gap VALUES (?1, ?2, ?3, ?4, ?5)";
    let mut insert = transaction.prepare_cached(sql)?;
    if first < number {
        insert.execute(params![controller, boot, first, number - 1, noticed_us])?;
    }
    if number < last {
        insert.execute(params![controller, boot, number + 1, last, noticed_us])?;
    }
    Ok(true)
}

fn insert_alarm(transaction: &Transaction<'_>, alarm: &AlarmRow) -> rusqlite::Result<()> {
    let sql = "INSERT INTO alarm (at_us, written_us, machine, kind, state, causes, text)
               VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)";
    transaction.prepare_cached(sql)?.execute(params![
        alarm.at_us,
        alarm.written_us,
        alarm.machine,
        alarm.kind,
        alarm.state,
        alarm.causes,
        alarm.text
    ])?;
    Ok(())
}

fn known_boots(connection: &Connection, controller: i64) -> rusqlite::Result<Vec<KnownBoot>> {
    let mut last = connection.prepare(
        "SELECT number, at_ms, received_us FROM record WHERE controller = ?1 AND boot = ?2 ORDER BY number DESC LIMIT 1",
    )?;
    let mut missing = connection.prepare("SELECT max(last) FROM gap WHERE controller = ?1 AND boot = ?2")?;
    let mut boots = connection.prepare("SELECT boot, anchor_us FROM boot WHERE controller = ?1")?;
    let rows = boots.query_map([controller], |row| Ok((row.get::<_, i64>(0)?, row.get::<_, i64>(1)?)))?;
    let mut known = Vec::new();
    for row in rows {
        let (boot, anchor_us) = row?;
        let newest: Option<(u32, i64, i64)> =
            last.query_row(params![controller, boot], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?))).optional()?;
        let gap: Option<u32> = missing.query_row(params![controller, boot], |row| row.get(0))?;
        let after = |number: u32| u64::from(number) + 1;
        known.push(KnownBoot {
            boot: boot.cast_unsigned(),
            anchor_us,
            next_number: newest.map_or(0, |(number, ..)| after(number)).max(gap.map_or(0, after)),
            last: newest.map(|(_, at_ms, received_us)| (at_ms, received_us)),
        });
    }
    Ok(known)
}

fn standing(connection: &Connection, machine: &str) -> rusqlite::Result<Vec<StandingAlarm>> {
    let mut statement = connection.prepare(
        "SELECT kind, state, causes FROM alarm
         WHERE id IN (SELECT max(id) FROM alarm WHERE machine = ?1 GROUP BY kind) ORDER BY id",
    )?;
    let rows = statement
        .query_map([machine], |row| Ok(StandingAlarm { kind: row.get(0)?, state: row.get(1)?, causes: row.get(2)? }))?;
    let normal = AlarmState::Normal.id();
    rows.filter(|row| row.as_ref().map_or(true, |alarm| alarm.state != normal)).collect()
}

/// See [`super::totals`].
pub(super) fn totals(path: &Path) -> Result<Totals, StoreError> {
    let failed = |source| StoreError::Read { path: path.to_owned(), source };
    let connection = Connection::open_with_flags(path, OpenFlags::SQLITE_OPEN_READ_ONLY)
        .map_err(|source| StoreError::Open { path: path.to_owned(), source })?;
    connection.busy_timeout(BUSY).map_err(failed)?;
    if check(&connection, path)? {
        return Ok(Totals::default()); // made, but nothing was written yet
    }
    read_totals(&connection).map_err(failed)
}

fn read_totals(connection: &Connection) -> rusqlite::Result<Totals> {
    let sql = "SELECT (SELECT count(*) FROM record), (SELECT coalesce(sum(last - first + 1), 0) FROM gap),
                      (SELECT count(*) FROM gap), (SELECT coalesce(sum(duplicates), 0) FROM refused),
                      (SELECT coalesce(sum(conflicts), 0) FROM refused)";
    let [records, lost, gaps, duplicates, conflicts] = connection.query_row(sql, [], |row| {
        let mut counts = [0; 5];
        for (at, count) in counts.iter_mut().enumerate() {
            *count = row.get::<_, i64>(at)?.max(0).unsigned_abs();
        }
        Ok(counts)
    })?;
    let mut statement =
        connection.prepare("SELECT at_us, machine, kind, state, causes, text FROM alarm ORDER BY id")?;
    let journal = statement.query_map([], |row| {
        let state: String = row.get(3)?;
        let state = AlarmState::from_id(&state).ok_or_else(|| {
            let unknown = format!("{state:?} is no state of an alarm in this build");
            rusqlite::Error::FromSqlConversionFailure(3, rusqlite::types::Type::Text, unknown.into())
        })?;
        let (at_us, machine, kind) = (row.get(0)?, row.get(1)?, row.get(2)?);
        Ok(JournalEntry { at_us, machine, kind, state, causes: row.get(4)?, text: row.get(5)? })
    })?;
    Ok(Totals { records, lost, gaps, duplicates, conflicts, journal: journal.collect::<rusqlite::Result<_>>()? })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// `synchronous` belongs to a connection and cannot be seen from another one: without FULL a power cut may take
    /// batches that were acknowledged, and nothing else would show it.
    #[test]
    fn this_connection_flushes_every_commit() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("plant.db");
        for opening in ["new", "opened again"] {
            let store = SqliteStore::open(&path).unwrap();
            let number = |name: &str| -> i64 {
                store.connection.pragma_query_value(None, name, |row| row.get(0)).expect("a setting of the engine")
            };
            assert_eq!(number("synchronous"), 2, "FULL, {opening}");
            assert_eq!(number("foreign_keys"), 1, "{opening}");
        }
    }
}
