//! The daemon's order of work: read, store durably, acknowledge, judge, tell. Never another order: what was judged or
//! acknowledged can be looked up afterwards, whatever happens to the process.
//!
//! Batches: what has come within a tenth of a second goes into one transaction, so a slow disk costs delay, not records. While a
//! batch is being written the next one collects in a bounded channel.

pub mod clock;
mod station;

use crate::{
    alarm::{AlarmChange, AlarmKind, AlarmState},
    config::PlantConfig,
    link::{Heard, LinkError, SerialLink, SerialSettings},
    live::Board,
    store::{Batch, SqliteStore, Store, StoreError, Writer},
    watch::WatchSettings,
};
use offcurve_core::machine::Profile;
use station::{Judged, Pending, Station};
use std::{
    fmt,
    path::PathBuf,
    pin::Pin,
    sync::Arc,
    time::{Duration, Instant},
};
use tokio::sync::mpsc::{self, Receiver};
use tracing::{info, warn};

/// How long records are gathered for one transaction, at most.
const GATHER: Duration = Duration::from_millis(100);
/// The most records of one transaction.
const BATCH: usize = 1000;
/// Reads that wait while a batch is written; about one record each at usual rates, never more than 1 KiB.
const CHANNEL: usize = 4096;
/// How long the lines get to hand over what they have read, at the stop.
const DRAIN: Duration = Duration::from_millis(800);

/// What to watch.
#[derive(Clone, Debug)]
pub struct Plant {
    /// The store's file.
    pub store: PathBuf,
    /// Controllers with their machines.
    pub lines: Vec<Line>,
}

/// One controller and its machine.
#[derive(Clone, Debug)]
pub struct Line {
    /// Where the controller is.
    pub serial: SerialSettings,
    /// Name of the machine.
    pub machine: String,
    /// The machine's profile, the same as in the controller.
    pub profile: Profile,
    /// How it is watched.
    pub watch: WatchSettings,
}

impl Plant {
    /// A board for the plant's machines.
    #[must_use]
    pub fn board(&self) -> Board {
        let interval = |line: &Line| {
            let schedule = line.profile.schedule;
            Duration::from_millis(u64::from(schedule.step_ms()) * u64::from(schedule.steps_per_record))
        };
        Board::new(self.lines.iter().map(|line| (line.machine.clone(), interval(line))))
    }
}

impl From<PlantConfig> for Plant {
    fn from(config: PlantConfig) -> Self {
        let lines = config.controllers.into_iter().map(|controller| Line {
            serial: SerialSettings { name: controller.name, port: controller.port, baud: controller.baud },
            machine: controller.machine.name,
            profile: controller.machine.profile,
            watch: controller.machine.watch,
        });
        Self { store: config.store, lines: lines.collect() }
    }
}

/// Is told the machine's name and what changed.
pub type OnAlarm = Box<dyn FnMut(&str, &AlarmChange) + Send>;

/// Who else wants to know.
#[derive(Default)]
pub struct Listeners {
    /// Shows the present state; see [`Plant::board`].
    pub board: Option<Arc<Board>>,
    /// Called at each change of an alarm.
    pub on_alarm: Option<OnAlarm>,
}

impl fmt::Debug for Listeners {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        out.debug_struct("Listeners").field("board", &self.board).field("on_alarm", &self.on_alarm.is_some()).finish()
    }
}

/// Why the daemon did not start, or did not end well. Nothing that a line or a disk does while it runs ends it.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum RuntimeError {
    /// The store.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// A line.
    #[error(transparent)]
    Link(#[from] LinkError),
    /// At the stop something could not be stored. The next start shows lost records as gaps.
    #[error("stopped before everything was stored; {records} records that were read are lost")]
    Unstored {
        /// How many.
        records: u64,
        /// Why.
        #[source]
        source: StoreError,
    },
}

/// What one run amounted to.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[non_exhaustive]
pub struct Summary {
    /// Records received, all controllers together.
    pub received: u64,
    /// Records stored by this run.
    pub stored: u64,
    /// Records that were stored already.
    pub duplicates: u64,
    /// Records refused because their number was taken by another record.
    pub conflicts: u64,
    /// Record numbers that never came.
    pub lost: u64,
    /// Frames that were no message.
    pub bad_frames: u64,
    /// Records whose estimate came out differently here.
    pub mismatches: u64,
    /// Alarms raised.
    pub alarms: u64,
}

impl fmt::Display for Summary {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(
            out,
            "received {}, stored {}, duplicates {}, lost {}, bad frames {}, estimate mismatches {}, alarms raised {}",
            self.received, self.stored, self.duplicates, self.lost, self.bad_frames, self.mismatches, self.alarms
        )?;
        if self.conflicts > 0 {
            write!(out, ", refused because their number was taken {}", self.conflicts)?;
        }
        Ok(())
    }
}

/// Watches a plant until `stop` is ready, then stores what has been read and ends within two seconds.
///
/// # Errors
/// [`RuntimeError`]: the store cannot be opened, or at the end not everything could be stored.
pub async fn run(
    plant: Plant,
    listeners: Listeners,
    stop: impl Future<Output = ()> + Send + 'static,
) -> Result<Summary, RuntimeError> {
    let begun = Instant::now();
    let store = SqliteStore::open(&plant.store)?;
    let mut stations = Vec::with_capacity(plant.lines.len());
    for (place, line) in plant.lines.iter().enumerate() {
        let standing = store.standing_alarms(&line.machine)?;
        for alarm in standing.iter().filter(|alarm| alarm.state == AlarmState::Unacknowledged.id()) {
            warn!(machine = %line.machine, "alarm {} still stands from before this start", alarm.kind);
            if let Some(board) = listeners.board.as_ref().filter(|_| alarm.kind == AlarmKind::OffCurve.id()) {
                // A line of the journal is "weight cause".
                let first = alarm.causes.lines().next().and_then(|line| line.split_once(' '));
                board.set_cause(place, first.map(|(_, cause)| cause));
            }
        }
        let known = store.boots(&line.serial.name)?;
        let names = (line.serial.name.as_str(), line.machine.as_str());
        stations.push(Station::new(names, &line.profile, line.watch, &known, &standing));
    }
    info!(store = %plant.store.display(), controllers = stations.len(), "store open after {:?}", begun.elapsed());
    let writer = Writer::start(Box::new(store))?;
    let (into, heard) = mpsc::channel(CHANNEL);
    let mut links = Vec::with_capacity(stations.len());
    for (place, line) in plant.lines.into_iter().enumerate() {
        links.push(SerialLink::start(place, line.serial, into.clone())?);
    }
    drop(into); // the channel is to close when the last line ends
    let mut daemon = Daemon { stations, links, writer, listeners };
    let ended = daemon.work(heard, Stop { future: Box::pin(stop), done: false }).await;
    let summary = daemon.end();
    info!("stopped: {summary}");
    ended.map(|()| summary)
}

/// Ready once, and remembers it.
struct Stop {
    future: Pin<Box<dyn Future<Output = ()> + Send>>,
    done: bool,
}

impl Stop {
    /// Ready when told to stop; never again after that, so that it can stand in a `select!` for good.
    async fn told(&mut self) {
        if self.done {
            std::future::pending::<()>().await;
        }
        self.future.as_mut().await;
        self.done = true;
    }
}

struct Daemon {
    stations: Vec<Station>,
    links: Vec<SerialLink>,
    writer: Writer,
    listeners: Listeners,
}

/// What one transaction is about to write, and the records in it.
#[derive(Default)]
struct Round {
    batch: Batch,
    pending: Vec<Pending>,
}

impl Daemon {
    async fn work(&mut self, mut heard: Receiver<Heard>, mut stop: Stop) -> Result<(), RuntimeError> {
        let mut incoming = Vec::with_capacity(BATCH);
        while !stop.done {
            tokio::select! {
                biased;
                () = stop.told() => break,
                count = heard.recv_many(&mut incoming, BATCH) => if count == 0 { break }, // every line has ended
            }
            let until = tokio::time::Instant::now() + GATHER;
            while incoming.len() < BATCH && !stop.done {
                let room = BATCH - incoming.len();
                tokio::select! {
                    biased;
                    () = stop.told() => {}
                    count = heard.recv_many(&mut incoming, room) => if count == 0 { break },
                    () = tokio::time::sleep_until(until) => break,
                }
            }
            let round = self.gather(&mut incoming);
            let hurry = self.writer.hurry();
            let settled = {
                let mut settle = std::pin::pin!(self.settle(round));
                tokio::select! {
                    biased;
                    settled = &mut settle => settled,
                    () = stop.told() => {
                        hurry.now();
                        settle.await
                    }
                }
            };
            if let Err(failed) = settled {
                return Err(self.give_up(heard, failed).await);
            }
        }
        self.writer.hurry().now();
        for link in &self.links {
            link.stop();
        }
        let until = tokio::time::Instant::now() + DRAIN;
        while let Ok(Some(last)) = tokio::time::timeout_at(until, heard.recv()).await {
            incoming.push(last);
        }
        let round = self.gather(&mut incoming);
        match self.settle(round).await {
            Ok(()) => Ok(()),
            Err(failed) => Err(self.give_up(heard, failed).await),
        }
    }

    /// Counts what is lost with a store that cannot be written at the stop.
    async fn give_up(&mut self, mut heard: Receiver<Heard>, failed: StoreError) -> RuntimeError {
        for link in &self.links {
            link.stop();
        }
        let mut incoming = Vec::new();
        let until = tokio::time::Instant::now() + DRAIN;
        while let Ok(Some(last)) = tokio::time::timeout_at(until, heard.recv()).await {
            incoming.push(last);
        }
        self.gather(&mut incoming);
        let tally = self.stations.iter().map(|station| station.tally);
        let records = tally.map(|tally| tally.received - tally.stored - tally.duplicates - tally.conflicts).sum();
        RuntimeError::Unstored { records, source: failed }
    }

    fn gather(&mut self, incoming: &mut Vec<Heard>) -> Round {
        let mut round = Round::default();
        for Heard { controller, received_us, events } in incoming.drain(..) {
            let Some(station) = self.stations.get_mut(controller) else { continue };
            for event in events {
                station.take(controller, received_us, event, &mut round.batch, &mut round.pending);
            }
        }
        round
    }

    /// Store, acknowledge, judge, tell.
    async fn settle(&mut self, Round { batch, pending }: Round) -> Result<(), StoreError> {
        if batch.is_empty() {
            return Ok(());
        }
        let (_, outcomes) = self.writer.write(batch).await?;
        let mut acknowledge: Vec<Option<(u64, u32)>> = vec![None; self.stations.len()];
        let mut to_judge = Vec::new();
        for (pending, outcome) in pending.iter().zip(outcomes) {
            let Some(station) = self.stations.get_mut(pending.station) else { continue };
            let standing = station.count(pending, outcome);
            if let (Some(slot), true) = (acknowledge.get_mut(pending.station), standing.durable) {
                *slot = Some((pending.record().boot, pending.record().number));
            }
            if standing.to_judge {
                to_judge.push(pending);
            }
        }
        for (link, durable) in self.links.iter().zip(acknowledge) {
            if let Some((boot, number)) = durable {
                link.acknowledge(boot, number);
            }
        }
        let mut judged = Vec::new();
        for pending in to_judge {
            let Some(station) = self.stations.get_mut(pending.station) else { continue };
            let Judged { at_us, estimate, changes } = station.judge(pending);
            if let Some(board) = &self.listeners.board {
                for change in changes.iter().filter(|change| change.kind == AlarmKind::OffCurve) {
                    board.set_cause(pending.station, change.causes.first().map(|cause| cause.cause));
                }
                board.update(pending.station, at_us, pending.record(), &estimate, station.active());
            }
            judged.extend(changes.into_iter().map(|change| (pending.station, change)));
        }
        self.tell(judged).await
    }

    async fn tell(&mut self, changes: Vec<(usize, AlarmChange)>) -> Result<(), StoreError> {
        if changes.is_empty() {
            return Ok(());
        }
        for (place, change) in &changes {
            let Some(station) = self.stations.get(*place) else { continue };
            let (machine, state) = (&station.machine, change.state.id());
            if change.state.is_active() {
                warn!(machine = %machine, "ALARM {}, {state}: {}", change.kind, change.text);
            } else {
                info!(machine = %machine, "alarm {}, {state}: {}", change.kind, change.text);
            }
            if let Some(listener) = &mut self.listeners.on_alarm {
                listener(machine, change);
            }
        }
        // After the log: with a full disk the journal may have to wait, a person must not.
        let row = |(place, change): &(usize, AlarmChange)| {
            self.stations.get(*place).map(|station| station.journal_row(change))
        };
        let alarms = changes.iter().filter_map(row).collect();
        self.writer.write(Batch { alarms, ..Batch::default() }).await.map(|_| ())
    }

    /// Ends the threads and adds up.
    fn end(self) -> Summary {
        let mut summary = Summary::default();
        for link in self.links {
            link.stop();
            summary.bad_frames += link.counts().bad_frames();
            link.join();
        }
        for tally in self.stations.iter().map(|station| station.tally) {
            summary.received += tally.received;
            summary.stored += tally.stored;
            summary.duplicates += tally.duplicates;
            summary.conflicts += tally.conflicts;
            summary.lost += tally.lost;
            summary.mismatches += tally.mismatches;
            summary.alarms += tally.alarms;
        }
        self.writer.close();
        summary
    }
}
