//! The demo scenario as live traffic: four weeks of it at once, then each wait when it ends.

use std::sync::Arc;
use std::thread::{Builder, JoinHandle};
use std::time::Duration;

use super::ServeError;
use super::keeper::Refusal;
use super::shared::Shared;
use crate::demo::{DemoRecord, Scenario};
use crate::ledger::{Batch, Tie};
use crate::wait::Ending;

/// Waits in one batch of the past.
const LOT: usize = 20_000;
/// How often the present is filed.
const STEP: Duration = Duration::from_secs(1);
/// Weeks of the scenario; the last begins at the start of the daemon.
const WEEKS: u32 = 5;
const WEEK: f64 = 604_800.0;
/// Waits at least so long, s, are seen open before they end.
const SEEN_OPEN: f64 = 30.0;

/// What was filed of the past.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Fed {
    /// Waits.
    pub waits: usize,
}

/// Files what lies before now, and starts the thread that files the rest as time goes by.
pub(super) fn feed(shared: &Arc<Shared>, seed: u64) -> Result<(Fed, JoinHandle<()>), ServeError> {
    let now = shared.now();
    let scenario = Scenario::spanning(seed, WEEKS, WEEKS - 1, (now + WEEK).floor());
    let records: Vec<DemoRecord> = scenario.map(|scenario| scenario.waits().collect()).unwrap_or_default();
    let (past, to_come): (Vec<_>, Vec<_>) = records.into_iter().partition(|record| record.at <= now);
    for lot in past.chunks(LOT) {
        let mut batch = Batch::default();
        for record in lot {
            if let Ok(wait) = record.wait() {
                let _ = batch.add(record.stream, &wait, now);
            }
        }
        if let Err(error) = file(shared, batch) {
            tracing::error!(%error, "the demo could not be filed");
        }
    }
    let shared = Arc::clone(shared);
    let thread = Builder::new().name("demo".into()).spawn(move || live(&shared, &to_come));
    let thread = thread.map_err(|source| ServeError::System { what: "a thread", source })?;
    Ok((Fed { waits: past.len() }, thread))
}

/// Something that happens to a wait.
enum Turn {
    Starts,
    Ends,
    /// Too short to be seen open: counted when it is over.
    Passes,
}

fn live(shared: &Shared, to_come: &[DemoRecord]) {
    let mut turns: Vec<(f64, usize, Turn)> = Vec::new();
    for (i, record) in to_come.iter().enumerate() {
        if record.elapsed < SEEN_OPEN {
            turns.push((record.at, i, Turn::Passes));
        } else {
            turns.push((record.at - record.elapsed, i, Turn::Starts));
            if record.ending != Ending::Waiting {
                turns.push((record.at, i, Turn::Ends));
            }
        }
    }
    turns.sort_by(|a, b| a.0.total_cmp(&b.0));
    let mut rest = turns.as_slice();
    while !shared.is_stopping() && !rest.is_empty() {
        let now = shared.now();
        let (due, later) = rest.split_at(rest.partition_point(|turn| turn.0 <= now));
        rest = later;
        let mut batch = Batch::default();
        for (at, i, turn) in due {
            let record = &to_come[*i];
            let id = format!("f-{i}");
            let tie = Tie { stream: record.stream, id: &id, attempt: record.attempt };
            // The scenario's names, ids and times are all allowed.
            let _ = match turn {
                Turn::Starts => batch.start(tie, *at, record.entered),
                Turn::Ends => batch.end(tie, *at, record.ending),
                Turn::Passes => {
                    if let Ok(wait) = record.wait() {
                        let _ = batch.add(record.stream, &wait, now);
                    }
                    Ok(())
                }
            };
        }
        if !batch.is_empty()
            && let Err(error) = file(shared, batch)
        {
            tracing::warn!(%error, "a moment of the demo was not filed");
        }
        std::thread::sleep(STEP);
    }
}

fn file(shared: &Shared, batch: Batch) -> Result<(), Refusal> {
    let waits = batch.waits();
    let answer = shared.counter.hand_in(batch, shared)?;
    answer.blocking_recv().map_err(|_| Refusal::Stopping)??;
    shared.metrics.waits.inc_by(waits);
    Ok(())
}
