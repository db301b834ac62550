//! The week's recommendations from what the daemon knows: for its page, its interface and its scheduled runs.

use std::collections::HashMap;
use std::sync::Arc;

use jiff::Timestamp;
use jiff::civil::Date;

use super::http::study;
use super::keeper::Refusal;
use super::shared::Shared;
use crate::advise::Terms;
use crate::ledger::{Batch, Reader, Record, Shelf};
use crate::report::{self, LastWeek, Weekly, weekly};

/// The week as of now. `due`: the run that it is, so that an earlier one is what it is held against.
pub(super) fn at(shared: &Shared, now: Timestamp, due: Option<Date>) -> Weekly {
    let settled = shared.settled();
    let set = shared.advice_set();
    let policy = shared.policy();
    let past = settled.past(shared.now());
    let terms = Terms { policy: policy.as_deref(), newest: None, seed: 0, past: Some(&past) };
    let last = last(shared, due);
    weekly(&set, &settled, |stream| terms.entry(stream), Some(now), last.as_ref())
}

/// The newest set that was kept, of those before a run.
fn last(shared: &Shared, due: Option<Date>) -> Option<LastWeek> {
    let kept = shared.ask(|reader| reader.records(Shelf::Weeks, Some("")));
    let kept = kept.inspect_err(|error| tracing::error!(%error, "last week's set cannot be read")).ok()?;
    for damage in kept.damage {
        tracing::error!(%damage, "a week's set is broken");
    }
    let before = |record: &Record| due.is_none_or(|due| record.number < number(due));
    let newest = kept.records.into_iter().rev().find(before)?;
    let read = serde_json::from_str(&newest.text);
    read.inspect_err(|error| tracing::error!(%error, "last week's set cannot be read")).ok()
}

/// Keeps a run's rows, for the next to be held against.
pub(super) fn keep(shared: &Shared, due: Date, week: &Weekly) -> Result<(), Refusal> {
    let text = serde_json::to_string(&LastWeek::of(week)).unwrap_or_default().into();
    let mut batch = Batch::default();
    let record = Record { shelf: Shelf::Weeks, subject: "".into(), number: number(due), text };
    if let Err(error) = batch.note(record) {
        tracing::error!(%error, "the week is too large to be kept");
        return Ok(());
    }
    shared.counter.hand_in(batch, shared)?.blocking_recv().map_err(|_| Refusal::Stopping)??;
    Ok(())
}

/// A day as days since 1970-01-01.
fn number(date: Date) -> i64 {
    let epoch = Date::constant(1970, 1, 1);
    epoch.until(date).map_or(0, |span| i64::from(span.get_days()))
}

/// What each give-up time earns, as a picture, for the streams that are to be signed.
pub(super) fn pictures(shared: &Arc<Shared>, week: &Weekly) -> HashMap<String, String> {
    let drawn = week.sign.iter().filter_map(|row| {
        let fresh = shared.advice(&row.stream)?;
        let kept = study(shared, &row.stream, fresh.tag).ok()?;
        Some((row.stream.clone(), report::picture(kept.study.advice(), || kept.curves().clone())?))
    });
    drawn.collect()
}
