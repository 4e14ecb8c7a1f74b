//! Where records go for good: a trait for engines ([`Store`]), SQLite behind it ([`sqlite`]), and the one thread that
//! writes ([`writer`]).
//!
//! A record's name is (controller, boot, number); storing it twice is storing it once. What is kept is the payload as
//! it came over the line, so nothing about it can be lost by a later reading of it. Numbers that never came are written
//! down as gaps; alarm changes are only ever added.
//!
//! Schema version 0: one store belongs to one layout of these tables, another is refused and left as it is.

pub mod sqlite;
pub mod writer;

pub use sqlite::SqliteStore;
pub use writer::Writer;

use offcurve_core::link::message::Payload;
use std::{
    path::{Path, PathBuf},
    sync::Arc,
};

/// The first sight of one start of a controller.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct BootRow {
    /// Name of the controller in the configuration.
    pub controller: Arc<str>,
    /// Number of the controller's start.
    pub boot: u64,
    /// UTC of the boot's time zero, µs since 1970. Fixed here: the time of every record of the boot hangs on it.
    pub anchor_us: i64,
    /// When its hello came, µs since 1970 UTC.
    pub seen_us: i64,
    /// What the controller calls itself.
    pub name: String,
    /// Checksum of the profile it runs with; 0 for none.
    pub profile_checksum: u32,
    /// Layout of the payloads of this boot ([`offcurve_core::link::LAYOUT`]).
    pub layout: u32,
}

/// One record.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct RecordRow {
    /// Name of the controller in the configuration.
    pub controller: Arc<str>,
    /// Number of the controller's start.
    pub boot: u64,
    /// Number of the record within it.
    pub number: u32,
    /// Machine tag.
    pub machine: u8,
    /// When it was read, µs since 1970 UTC.
    pub received_us: i64,
    /// Its time, ms after the boot's time zero; does not wrap.
    pub at_ms: i64,
    /// Its bytes as they came.
    pub payload: Payload,
}

/// Numbers that never came, both ends included.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Gap {
    /// Name of the controller in the configuration.
    pub controller: Arc<str>,
    /// Number of the controller's start.
    pub boot: u64,
    /// First number missing.
    pub first: u32,
    /// Last number missing.
    pub last: u32,
    /// When the jump was seen, µs since 1970 UTC.
    pub noticed_us: i64,
}

impl Gap {
    /// How many numbers are missing.
    #[must_use]
    pub const fn count(&self) -> u64 {
        (self.last as u64).saturating_sub(self.first as u64) + 1
    }
}

/// One line of the alarm journal.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct AlarmRow {
    /// Plant time of the change, µs since 1970 UTC.
    pub at_us: i64,
    /// When it was written, µs since 1970 UTC by the computer's clock.
    pub written_us: i64,
    /// Name of the machine.
    pub machine: String,
    /// [`AlarmKind::id`](crate::alarm::AlarmKind::id).
    pub kind: String,
    /// [`AlarmState::id`](crate::alarm::AlarmState::id).
    pub state: String,
    /// A line for each cause, most likely first: weight, a space, words.
    pub causes: String,
    /// For a person.
    pub text: String,
}

/// What one transaction writes: all of it or nothing.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Batch {
    /// Boots seen for the first time.
    pub boots: Vec<BootRow>,
    /// Records, in the order they came.
    pub records: Vec<RecordRow>,
    /// Gaps noticed.
    pub gaps: Vec<Gap>,
    /// Alarm changes.
    pub alarms: Vec<AlarmRow>,
}

impl Batch {
    /// Nothing to write.
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.boots.is_empty() && self.records.is_empty() && self.gaps.is_empty() && self.alarms.is_empty()
    }
}

/// What became of one record.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Outcome {
    /// New, and stored.
    Stored,
    /// New, and stored; its number had been written down as missing, and no longer is.
    FilledGap,
    /// The same record was there already.
    Duplicate,
    /// A record of this name with other bytes was there already, and stays: two controllers count alike. Not stored.
    Conflict,
}

/// A boot as the store knows it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct KnownBoot {
    /// Number of the controller's start.
    pub boot: u64,
    /// UTC of its time zero, µs since 1970.
    pub anchor_us: i64,
    /// The number that would come next: one more than the highest stored or written down as missing.
    pub next_number: u64,
    /// Time of the last record, ms after time zero, and when it was read; `None` without records.
    pub last: Option<(i64, i64)>,
}

/// An alarm that the journal leaves in another state than normal.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct StandingAlarm {
    /// [`AlarmKind::id`](crate::alarm::AlarmKind::id).
    pub kind: String,
    /// [`AlarmState::id`](crate::alarm::AlarmState::id).
    pub state: String,
    /// Causes, as in [`AlarmRow::causes`].
    pub causes: String,
}

/// What a store holds, added up.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Totals {
    /// Records.
    pub records: u64,
    /// Record numbers written down as missing.
    pub lost: u64,
    /// Gaps they are in.
    pub gaps: u64,
    /// Records that came again and were stored once, over all runs.
    pub duplicates: u64,
    /// Records refused because their number was taken by another record, over all runs.
    pub conflicts: u64,
    /// The alarm journal, oldest first.
    pub journal: Vec<JournalEntry>,
}

/// A line of the alarm journal, as read back.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct JournalEntry {
    /// Plant time of the change, µs since 1970 UTC.
    pub at_us: i64,
    /// Name of the machine.
    pub machine: String,
    /// [`AlarmKind::id`](crate::alarm::AlarmKind::id).
    pub kind: String,
    /// The state from then on.
    pub state: crate::alarm::AlarmState,
    /// Causes, as in [`AlarmRow::causes`].
    pub causes: String,
    /// For a person.
    pub text: String,
}

/// Adds up the store in a file, also while a daemon writes it.
///
/// # Errors
/// [`StoreError`]: no store of this build, or it cannot be read.
pub fn totals(path: &Path) -> Result<Totals, StoreError> {
    sqlite::totals(path)
}

/// Why a store could not be opened or written.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum StoreError {
    /// The folder of the store does not exist.
    #[error("the folder {folder} of the store does not exist; make it, or correct `store` in the plant file")]
    NoFolder {
        /// The folder.
        folder: PathBuf,
    },
    /// The file cannot be opened.
    #[error("cannot open the store {path}")]
    Open {
        /// The file.
        path: PathBuf,
        /// What the engine said.
        #[source]
        source: rusqlite::Error,
    },
    /// The file or its folder may not be written by this user, or cannot be made there.
    #[error(
        "cannot write the store {path}: the daemon's user needs the right to write the file and its folder, where the \
         engine keeps its log beside it"
    )]
    NotWritable {
        /// The file.
        path: PathBuf,
    },
    /// Another daemon has the store open.
    #[error("the store {path} is in use by another daemon; one store has one writer, name another file")]
    InUse {
        /// The file.
        path: PathBuf,
    },
    /// A file of something else.
    #[error("{path} is not an offcurve store; nothing was changed in it, name another file")]
    Foreign {
        /// The file.
        path: PathBuf,
    },
    /// A store with other tables.
    #[error(
        "{path} has schema version {version}, layout {layout:08x}; this build knows version 0, layout {known:08x}. \
         Nothing was changed in it. While the version is 0 a store belongs to one build: keep the file, and name a new one"
    )]
    OtherSchema {
        /// The file.
        path: PathBuf,
        /// Its schema version.
        version: i64,
        /// Its layout.
        layout: u32,
        /// The layout of this build.
        known: u32,
    },
    /// No room left. Worth another try: nothing of the batch was written.
    #[error("the disk of {path} is full; records wait in memory, make room")]
    Full {
        /// The file.
        path: PathBuf,
    },
    /// Another program holds the store's lock. Worth another try: nothing of the batch was written.
    #[error("{path} is locked by another program for longer than {waited_ms} ms; records wait in memory")]
    Busy {
        /// The file.
        path: PathBuf,
        /// How long the engine waited, ms.
        waited_ms: u64,
    },
    /// Anything else the engine says. Nothing of the batch was written.
    #[error("cannot write to the store {path}")]
    Write {
        /// The file.
        path: PathBuf,
        /// What the engine said.
        #[source]
        source: rusqlite::Error,
    },
    /// Reading failed.
    #[error("cannot read the store {path}")]
    Read {
        /// The file.
        path: PathBuf,
        /// What the engine said.
        #[source]
        source: rusqlite::Error,
    },
    /// The daemon was told to stop before a batch could be written.
    #[error("{records} records and {alarms} lines of the alarm journal could not be stored before the stop")]
    GaveUp {
        /// How many records of the batch under way.
        records: usize,
        /// How many lines of the journal in it.
        alarms: usize,
        /// Why they could not be stored.
        #[source]
        source: Box<StoreError>,
    },
    /// The writing thread could not be started or has died.
    #[error("the thread that writes the store is gone")]
    NoWriter,
}

/// An engine that keeps records.
pub trait Store: Send {
    /// Writes a batch durably, all or nothing; what became of each record, in order.
    ///
    /// # Errors
    /// [`StoreError`]; nothing was written and the same batch may be offered again.
    fn append(&mut self, batch: &Batch) -> Result<Vec<Outcome>, StoreError>;

    /// The boots of a controller. Empty when it was never seen.
    ///
    /// # Errors
    /// [`StoreError::Read`].
    fn boots(&self, controller: &str) -> Result<Vec<KnownBoot>, StoreError>;

    /// The alarms of a machine that are not normal.
    ///
    /// # Errors
    /// [`StoreError::Read`].
    fn standing_alarms(&self, machine: &str) -> Result<Vec<StandingAlarm>, StoreError>;

    /// Tidies up before the end; everything is durable already.
    ///
    /// # Errors
    /// [`StoreError::Write`].
    fn close(&mut self) -> Result<(), StoreError>;
}
