//! Each stream's advice day by day, as the ledger keeps it; and what it would have been on days that nobody wrote down.

use std::collections::{BTreeMap, HashMap};
use std::sync::Arc;

use jiff::Timestamp;

use super::adviser::Fresh;
use super::keeper::Refusal;
use super::road;
use super::shared::Shared;
use crate::advise::{Lenders, Terms};
use crate::diary::Day;
use crate::ledger::{Batch, Hour, LedgerError, Reader, Record, Shelf};
use crate::say;
use crate::tally::{self, Days};

/// How old what is written of a day must be before it is written anew, s.
const HOUR: f64 = 3_600.0;
/// Most records in one batch.
const LOT: usize = 1_000;
/// Weeks that are worked out afterwards, at most: three months.
const WEEKS: i32 = 13;

/// What was written last of each stream: the day, when, and the advice's tag.
#[derive(Default)]
pub(super) struct Diary(HashMap<Arc<str>, (i32, f64, u64)>);

impl Diary {
    /// Writes down what is new: of each stream the first advice of a day, and later ones that say something else.
    pub(super) fn write(&mut self, shared: &Shared) {
        let due: Vec<Arc<Fresh>> =
            shared.all_advice().into_iter().filter(|fresh| self.is_due(fresh)).collect();
        for lot in due.chunks(LOT) {
            let days = lot.iter().map(|fresh| {
                let stream = fresh.advice.stream.as_str();
                (stream, day_of(fresh.made_at), Day::of(&fresh.advice, &fresh.road))
            });
            if let Err(error) = keep(shared, days) {
                tracing::warn!(%error, "the day's advice could not be written down; it is tried again");
                return;
            }
            for fresh in lot {
                let written = (day_of(fresh.made_at), fresh.made_at, fresh.tag);
                self.0.insert(fresh.advice.stream.as_str().into(), written);
            }
        }
    }

    fn is_due(&self, fresh: &Fresh) -> bool {
        self.0.get(fresh.advice.stream.as_str()).is_none_or(|(day, at, tag)| {
            *day != day_of(fresh.made_at) || (fresh.made_at - at >= HOUR && *tag != fresh.tag)
        })
    }
}

fn day_of(unix: f64) -> i32 {
    Hour::of(unix).day()
}

fn keep<'a>(shared: &Shared, days: impl Iterator<Item = (&'a str, i32, Day)>) -> Result<(), Refusal> {
    let mut batch = Batch::default();
    for (stream, day, what) in days {
        let text = serde_json::to_string(&what).unwrap_or_default().into();
        let record = Record { shelf: Shelf::Days, subject: stream.into(), number: day.into(), text };
        // A day has a few hundred bytes.
        let _ = batch.note(record);
    }
    if batch.is_empty() {
        return Ok(());
    }
    shared.counter.hand_in(batch, shared)?.blocking_recv().map_err(|_| Refusal::Stopping)??;
    Ok(())
}

/// A stream's days, the newest first: those written down, today's as it is now, and one a week of those before, worked out
/// from the waits that are kept still and then written down. Blocks.
pub(super) fn days(shared: &Shared, fresh: &Fresh) -> Result<Vec<(i32, Day)>, LedgerError> {
    let stream = fresh.advice.stream.as_str();
    let found = shared.ask(|reader| reader.records(Shelf::Days, Some(stream)))?;
    for damage in found.damage {
        tracing::error!(%damage, "a day of the history is broken and left out");
    }
    let read =
        |record: Record| Some((i32::try_from(record.number).ok()?, serde_json::from_str(&record.text).ok()?));
    let mut days: BTreeMap<i32, Day> = found.records.into_iter().filter_map(read).collect();
    days.insert(day_of(fresh.made_at), Day::of(&fresh.advice, &fresh.road));
    let older = worked_out(shared, stream, &days)?;
    if let Err(error) = keep(shared, older.iter().map(|(day, what)| (stream, *day, what.clone()))) {
        tracing::warn!(%error, "what was advised on earlier days is worked out again the next time");
    }
    days.extend(older);
    Ok(days.into_iter().rev().collect())
}

/// The ends of past weeks of which nothing is written down.
fn worked_out(
    shared: &Shared,
    stream: &str,
    known: &BTreeMap<i32, Day>,
) -> Result<Vec<(i32, Day)>, LedgerError> {
    let today = shared.today();
    let missing: Vec<i32> = (1..=WEEKS)
        .map(|week| today - 7 * week)
        .filter(|end| known.range(end - 3..=end + 3).next().is_none())
        .collect();
    if missing.is_empty() {
        return Ok(Vec::new());
    }
    let all = shared.ask(|reader| shared.days(reader, stream, i32::MIN))?;
    let Some(first) = all.days().iter().filter_map(|(day, _)| number(*day)).min() else {
        return Ok(Vec::new());
    };
    let (policy, settled) = (shared.policy(), shared.settled());
    let end_of = |day: i32| Hour::first_of(day.saturating_add(1)).start();
    let week = |end: i32| {
        let mut before = Days::default();
        let days = all.days().iter().filter(|(day, _)| number(*day).is_some_and(|day| day <= end));
        days.for_each(|(day, tally)| before.merge_day(*day, tally));
        let then = Timestamp::from_second(end_of(end) as i64).unwrap_or_default();
        let past = settled.by(then).past(end_of(end));
        let terms = Terms {
            policy: policy.as_deref(),
            newest: Some(end),
            seed: shared.config.seed,
            past: Some(&past),
        };
        let study = terms.study_among(stream, &before, None, &Lenders::default());
        let road = study.survival(&road::ages()).map(|fine| road::trimmed(&fine)).unwrap_or_default();
        let day = Day { afterwards: true, ..Day::of(study.advice(), &road) };
        (day.waits > 0).then_some((end, day))
    };
    Ok(missing.into_iter().filter(|end| *end >= first).filter_map(week).collect())
}

fn number(day: tally::Day) -> Option<i32> {
    match day {
        tally::Day::Number(day) => Some(day),
        tally::Day::Undated => None,
    }
}

/// A day, as it is written.
pub(super) fn date(day: i32) -> String {
    let time = say::time(Hour::first_of(day).start()).unwrap_or_default();
    time.get(..10).unwrap_or_default().to_owned()
}
