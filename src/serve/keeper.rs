//! The one thread that writes the ledger: what has come in while the last commit went to disk is the next commit.

use std::collections::HashSet;
use std::io::{self, Write};
use std::sync::Arc;
use std::sync::atomic::Ordering;
use std::sync::mpsc::{Receiver, RecvTimeoutError, SyncSender, TrySendError, sync_channel};
use std::thread::{Builder, JoinHandle};
use std::time::{Duration, Instant};

use tokio::sync::oneshot;

use super::shared::Shared;
use crate::ledger::{Batch, BatchError, Entry, Ledger, LedgerError, SqliteLedger};

/// Most batches in one commit, so that none waits long for those that came with it.
const GROUP: usize = 256;
/// How long to wait for a batch before looking after the ledger.
const PAUSE: Duration = Duration::from_millis(250);
/// Bytes that must find room before a disk counts as no longer full.
const PROBE: usize = 1 << 20;
/// How long upkeep may keep a batch waiting.
const UPKEEP: Duration = Duration::from_millis(20);

/// A batch on its way to the disk.
pub(super) struct Job {
    batch: Batch,
    answer: oneshot::Sender<Result<Entry, Refusal>>,
}

/// Why a batch was not counted. Nothing of it was.
#[derive(Clone, Debug, thiserror::Error)]
pub(super) enum Refusal {
    #[error(transparent)]
    Batch(#[from] BatchError),
    #[error(transparent)]
    Ledger(Arc<LedgerError>),
    #[error("{0} batches wait for the disk already")]
    Busy(usize),
    #[error("the daemon is stopping")]
    Stopping,
}

/// Where batches are handed in.
#[derive(Debug)]
pub(super) struct Counter(SyncSender<Job>, usize);

/// Where the keeper takes them from.
pub(super) struct Queue(Receiver<Job>);

/// Both ends, with room for so many batches.
pub(super) fn queue(room: usize) -> (Counter, Queue) {
    let (sender, receiver) = sync_channel(room);
    (Counter(sender, room), Queue(receiver))
}

impl Counter {
    /// Hands in a batch; the answer comes when it is on disk.
    pub(super) fn hand_in(
        &self,
        batch: Batch,
        shared: &Shared,
    ) -> Result<oneshot::Receiver<Result<Entry, Refusal>>, Refusal> {
        let (answer, receiver) = oneshot::channel();
        shared.metrics.queue.inc();
        match self.0.try_send(Job { batch, answer }) {
            Ok(()) => Ok(receiver),
            Err(error) => {
                shared.metrics.queue.dec();
                Err(match error {
                    TrySendError::Full(_) => Refusal::Busy(self.1),
                    TrySendError::Disconnected(_) => Refusal::Stopping,
                })
            }
        }
    }
}

/// Starts the thread. It ends when nobody is left who could hand in a batch and nothing is left to be filed.
pub(super) fn start(ledger: SqliteLedger, queue: Queue, shared: Arc<Shared>) -> io::Result<JoinHandle<()>> {
    Builder::new()
        .name("keeper".into())
        .spawn(move || Keeper { ledger, shared, upkeep: Instant::now() }.keep(&queue.0))
}

struct Keeper {
    ledger: SqliteLedger,
    shared: Arc<Shared>,
    /// When to look after the ledger next.
    upkeep: Instant,
}

impl Keeper {
    fn keep(mut self, queue: &Receiver<Job>) {
        self.measure();
        loop {
            match queue.recv_timeout(PAUSE) {
                Ok(first) => {
                    let mut group = vec![first];
                    group.extend(queue.try_iter().take(GROUP - 1));
                    self.commit(group);
                }
                Err(RecvTimeoutError::Timeout) if self.shared.is_all_handed_in() => break,
                Err(RecvTimeoutError::Timeout) => {}
                Err(RecvTimeoutError::Disconnected) => break,
            }
            self.look_after();
        }
    }

    fn commit(&mut self, group: Vec<Job>) {
        let (shared, now) = (Arc::clone(&self.shared), self.shared.now());
        shared.metrics.queue.sub(group.len() as i64);
        let (batches, answers): (Vec<Batch>, Vec<_>) =
            group.into_iter().map(|job| (job.batch, job.answer)).unzip();
        let began = Instant::now();
        let outcome = self.ledger.commit(&batches, now);
        shared.metrics.commit.observe(began.elapsed().as_secs_f64());
        match outcome {
            Ok(receipt) => {
                shared.trouble(None);
                // Whoever is answered may end at once what he has started.
                if batches.iter().any(Batch::ties) {
                    shared.any_open.store(true, Ordering::Relaxed);
                }
                // What is only noted is no sign that waits come in.
                if batches.iter().any(|batch| batch.streams().next().is_some()) {
                    shared.filed(now);
                }
                let changed: HashSet<&str> = batches
                    .iter()
                    .zip(&receipt.batches)
                    .filter(|(_, entry)| entry.as_ref().is_ok_and(|entry| !entry.repeated))
                    .flat_map(|(batch, _)| batch.streams())
                    .collect();
                shared.desk.changed(changed);
                for (answer, outcome) in answers.into_iter().zip(receipt.batches) {
                    // A client that has gone will send the batch again; its key makes that harmless.
                    let _ = answer.send(outcome.map_err(Refusal::Batch));
                }
            }
            Err(error) => {
                tracing::error!(%error, remedy = error.remedy(), batches = batches.len(), "nothing could be filed");
                let error = Arc::new(error);
                shared.trouble(Some(Arc::clone(&error)));
                for answer in answers {
                    let _ = answer.send(Err(Refusal::Ledger(Arc::clone(&error))));
                }
            }
        }
    }

    /// Upkeep in small pieces; what it is about is in [`Ledger::maintain`].
    fn look_after(&mut self) {
        let now = Instant::now();
        if now < self.upkeep {
            return;
        }
        self.upkeep = now + 4 * PAUSE;
        self.probe();
        while now.elapsed() < UPKEEP {
            match self.ledger.maintain(self.shared.now()) {
                Ok(upkeep) if upkeep.more => self.upkeep = now,
                Ok(_) => {
                    self.upkeep = now + 4 * PAUSE;
                    break;
                }
                Err(error) => {
                    tracing::warn!(%error, remedy = error.remedy(), "upkeep of the ledger is put off");
                    self.shared.trouble(Some(Arc::new(error)));
                    break;
                }
            }
        }
        self.measure();
    }

    /// Whether what kept the ledger from being written is over. Nobody may send a batch to find out while the daemon says
    /// that it is not ready.
    fn probe(&self) {
        let full_or_shut = |error: Arc<LedgerError>| {
            matches!(*error, LedgerError::Full { .. } | LedgerError::ReadOnly { .. } | LedgerError::Io { .. })
        };
        if !self.shared.in_trouble().is_some_and(full_or_shut) {
            return;
        }
        let written = tempfile::tempfile_in(&self.shared.config.data).and_then(|mut file| {
            file.write_all(&[0; PROBE])?;
            file.sync_all()
        });
        if written.is_ok() {
            tracing::info!("the ledger can be written again");
            self.shared.trouble(None);
        }
    }

    fn measure(&self) {
        use crate::ledger::Reader;
        if let Ok(extent) = self.ledger.extent() {
            self.shared.any_open.store(extent.open > 0, Ordering::Relaxed);
            self.shared.metrics.extent(&extent);
        }
    }
}
