//! The one thread that writes. A batch that cannot be written (disk full, file locked) is kept and tried again until it
//! can be, or until the daemon stops: nothing that was read is given up while there is hope, and what is given up is
//! counted and said.
//!
//! Only one batch is under way: while it waits, the daemon reads no further, the lines' buffers fill, and what they lose
//! shows as gaps once writing works again.

use super::{Batch, Outcome, Store, StoreError};
use std::{
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
        mpsc,
    },
    thread::JoinHandle,
    time::{Duration, Instant},
};
use tokio::sync::oneshot;
use tracing::{error, info, warn};

/// Time between two tries to write the same batch.
const TRY_AGAIN: Duration = Duration::from_millis(500);
/// How often the log repeats that writing still fails.
const REMIND: Duration = Duration::from_secs(60);

/// What a write comes back with: the batch, and what became of its records.
pub type Written = Result<(Batch, Vec<Outcome>), StoreError>;

struct Job {
    batch: Batch,
    answer: oneshot::Sender<Written>,
}

/// Owner of the writing thread.
#[derive(Debug)]
pub struct Writer {
    jobs: Option<mpsc::SyncSender<Job>>,
    hurry: Arc<AtomicBool>,
    thread: Option<JoinHandle<()>>,
}

impl Writer {
    /// Starts the thread.
    ///
    /// # Errors
    /// [`StoreError::NoWriter`] when the system has no thread left.
    pub fn start(store: Box<dyn Store>) -> Result<Self, StoreError> {
        let (jobs, incoming) = mpsc::sync_channel::<Job>(1);
        let hurry = Arc::new(AtomicBool::new(false));
        let shared = Arc::clone(&hurry);
        let thread = std::thread::Builder::new()
            .name("store".into())
            .spawn(move || run(store, &incoming, &shared))
            .map_err(|_| StoreError::NoWriter)?;
        Ok(Self { jobs: Some(jobs), hurry, thread: Some(thread) })
    }

    /// Writes a batch; returns once it is durable, however long that takes.
    ///
    /// # Errors
    /// [`StoreError::GaveUp`] after [`Hurry::now`], when one more try failed.
    pub async fn write(&self, batch: Batch) -> Written {
        let (answer, written) = oneshot::channel();
        let jobs = self.jobs.as_ref().ok_or(StoreError::NoWriter)?;
        // One batch at a time is awaited, so the queue of one has room.
        jobs.try_send(Job { batch, answer }).map_err(|_| StoreError::NoWriter)?;
        written.await.map_err(|_| StoreError::NoWriter)?
    }

    /// A handle to say that the daemon is stopping, usable while a batch is being written.
    #[must_use]
    pub fn hurry(&self) -> Hurry {
        Hurry(Arc::clone(&self.hurry))
    }

    /// Closes the store and ends the thread.
    pub fn close(mut self) {
        self.jobs = None;
        if let Some(thread) = self.thread.take() {
            // A panic in it has been printed already, and every batch it took got no answer.
            let _ = thread.join();
        }
    }
}

/// See [`Writer::hurry`].
#[derive(Clone, Debug)]
pub struct Hurry(Arc<AtomicBool>);

impl Hurry {
    /// From now on a batch that cannot be written is given up after one try.
    pub fn now(&self) {
        self.0.store(true, Ordering::Relaxed);
    }
}

fn run(mut store: Box<dyn Store>, jobs: &mpsc::Receiver<Job>, hurry: &AtomicBool) {
    while let Ok(Job { batch, answer }) = jobs.recv() {
        let written = match persist(store.as_mut(), &batch, hurry) {
            Ok(outcomes) => Ok((batch, outcomes)),
            Err(error) => Err(error),
        };
        // Nobody waits any more: the daemon is gone, what was written stays.
        let _ = answer.send(written);
    }
    if let Err(error) = store.close() {
        // Everything is durable without it; the next start reads the log instead.
        warn!(%error, "the store could not be tidied up");
    }
}

fn persist(store: &mut dyn Store, batch: &Batch, hurry: &AtomicBool) -> Result<Vec<Outcome>, StoreError> {
    let mut said: Option<(String, Instant)> = None;
    loop {
        let failed = match store.append(batch) {
            Ok(outcomes) => {
                if said.is_some() {
                    info!(records = batch.records.len(), "the store takes records again");
                }
                return Ok(outcomes);
            }
            Err(failed) => failed,
        };
        if hurry.load(Ordering::Relaxed) {
            let (records, alarms) = (batch.records.len(), batch.alarms.len());
            return Err(StoreError::GaveUp { records, alarms, source: Box::new(failed) });
        }
        let words = match std::error::Error::source(&failed) {
            Some(source) => format!("{failed}: {source}"),
            None => failed.to_string(),
        };
        if said.as_ref().is_none_or(|(before, at)| *before != words || at.elapsed() >= REMIND) {
            error!(waiting = batch.records.len(), "{words}; trying again every {} ms", TRY_AGAIN.as_millis());
            said = Some((words, Instant::now()));
        }
        let until = Instant::now() + TRY_AGAIN;
        while Instant::now() < until && !hurry.load(Ordering::Relaxed) {
            std::thread::sleep(Duration::from_millis(20));
        }
    }
}
