//! The week's recommendations: what to keep, raise or lower, where to look further, ranked by what it is worth, so that a
//! person can sign the most of it in ten minutes. A view of advice and of what was settled; it estimates nothing of its own.

mod changes;
mod forms;
mod picture;
mod row;
mod schedule;

use std::collections::{HashMap, HashSet};

use jiff::Timestamp;
use serde::Serialize;

pub use changes::{LastWeek, Was};
pub use forms::{FormError, csv, html, markdown};
pub use picture::picture;
pub use row::{Row, Sign, Verdict};
pub use schedule::{Schedule, ScheduleError};

use crate::advice::AdviceSet;
use crate::export::{RETRIES, SAFETY};
use crate::policy::Entry;
use crate::settle::Settled;

/// Version of the JSON form.
pub const SCHEMA: &str = "outwait/weekly/1";
/// Most changes on top: a minute for each.
const TEN_MINUTES: usize = 10;

/// A week's recommendations.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Weekly {
    /// [`SCHEMA`].
    pub schema: &'static str,
    /// Up to when the data reach, RFC 3339.
    pub made_at: Option<String>,
    /// The day of the set that this one was held against, for what changed.
    pub since: Option<String>,
    /// The week's run, where a schedule made it: the day on which it was due.
    pub due: Option<String>,
    /// What was assumed for want of a policy.
    pub assumed: Vec<String>,
    /// Changes to sign, worth the most first; as many as take ten minutes.
    pub sign: Vec<Row>,
    /// Everything else, changes first.
    pub rest: Vec<Row>,
    /// What holds for every change.
    pub cautions: [String; 3],
}

/// Makes the week's recommendations. `entry`: the policy's word on a stream, with the time in force. `now`: when the week is
/// looked at, which decides what was postponed beyond it; the data's end where the answer shall not depend on the clock.
/// `last`: the set before it.
pub fn weekly(
    set: &AdviceSet,
    settled: &Settled,
    entry: impl Fn(&str) -> Entry,
    now: Option<Timestamp>,
    last: Option<&LastWeek>,
) -> Weekly {
    let until = set.made_at.as_deref().and_then(|time| time.parse::<Timestamp>().ok());
    let now = now.or(until);
    let advised = set
        .streams
        .iter()
        .map(|advice| Row::of(advice, &entry(&advice.stream), settled.standing(&advice.stream), now, until));
    let vanished = settled
        .streams()
        .filter(|(stream, _)| set.streams.iter().all(|advice| advice.stream != *stream))
        .filter_map(|(stream, _)| Row::vanished(stream, &entry(stream), settled.standing(stream)));
    let mut rows: Vec<Row> = advised.chain(vanished).collect();
    if let Some(last) = last {
        let before: HashMap<&str, &Was> = last.rows().map(|was| (was.stream.as_str(), was)).collect();
        for row in &mut rows {
            match before.get(row.stream.as_str()) {
                Some(was) => row.changed.extend(changes::since(row, was)),
                None => row.changed.push("it was not in last week's set".into()),
            }
        }
        let known: HashSet<String> = rows.iter().map(|row| row.stream.clone()).collect();
        let gone = last.rows().filter(|was| !known.contains(&was.stream));
        rows.extend(gone.map(|was| Row::gone(was, &entry(&was.stream))));
    }
    rows.sort_by(|a, b| {
        let worth = |row: &Row| row.worth_per_day.unwrap_or(0.0).max(0.0);
        let kind = |row: &Row| (!row.verdict.changes() || row.folded.is_some(), row.verdict);
        kind(a)
            .0
            .cmp(&kind(b).0)
            .then(worth(b).total_cmp(&worth(a)))
            .then(b.loses.unwrap_or(0.0).total_cmp(&a.loses.unwrap_or(0.0)))
            .then(kind(a).1.cmp(&kind(b).1))
            .then(a.stream.cmp(&b.stream))
    });
    let ready = rows.iter().filter(|row| row.verdict.changes() && row.folded.is_none()).count();
    let rest = rows.split_off(ready.min(TEN_MINUTES));
    Weekly {
        schema: SCHEMA,
        made_at: set.made_at.clone(),
        since: last.and_then(LastWeek::day),
        due: None,
        assumed: set.assumed.clone(),
        sign: rows,
        rest,
        cautions: [
            format!("Retries make load: {}; {}.", RETRIES.0, RETRIES.1),
            "Work that must not be done twice: retry only what is idempotent or was cancelled for certain."
                .into(),
            SAFETY.into(),
        ],
    }
}

impl Weekly {
    /// One sentence on the whole.
    pub fn summary(&self) -> String {
        let all = || self.sign.iter().chain(&self.rest);
        let mut parts = Vec::new();
        for verdict in Verdict::ALL {
            match all().filter(|row| row.verdict == verdict).count() {
                0 => {}
                n => parts.push(format!("{n} {}", verdict.words())),
            }
        }
        if parts.is_empty() {
            return "No stream has waits.".into();
        }
        let hours: f64 = self.sign.iter().filter_map(|row| row.hours_per_day).sum();
        let sum = match hours > 0.0 {
            true => format!(
                " What is ready to sign would save {} of waiting a day.",
                crate::say::duration(3600.0 * hours)
            ),
            false => String::new(),
        };
        format!("{} streams: {}.{sum}", all().count(), parts.join(", "))
    }
}
