//! What changed since the last weekly set: row against row.

use serde::{Deserialize, Serialize};

use super::{Row, Verdict, Weekly};
use crate::advice::{RemainingWait, TailClass};
use crate::policy::GiveUp;
use crate::say;

/// A weekly set as the next is held against it: what of its JSON form is needed for that.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct LastWeek {
    /// Version of the JSON form.
    pub schema: String,
    /// Up to when its data reached, RFC 3339.
    pub made_at: Option<String>,
    /// The day on which it was due.
    #[serde(default)]
    pub due: Option<String>,
    /// What was to sign.
    pub sign: Vec<Was>,
    /// The rest.
    pub rest: Vec<Was>,
}

/// One stream of it. Times in s.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Was {
    /// Which waiting process.
    pub stream: String,
    /// What was to be done.
    pub verdict: Verdict,
    /// The time in force.
    #[serde(default)]
    pub old_s: Option<GiveUp>,
    /// The best time.
    #[serde(default)]
    pub advised_s: Option<GiveUp>,
    /// Every time between these was about as good.
    #[serde(default)]
    pub band_s: Option<[f64; 2]>,
    /// Heavy or light.
    #[serde(default)]
    pub tail: Option<TailClass>,
    /// Whether the remaining wait grew or shrank.
    #[serde(default)]
    pub remaining_wait: Option<RemainingWait>,
}

impl LastWeek {
    /// What of a set is kept.
    pub fn of(week: &Weekly) -> LastWeek {
        let was = |rows: &[Row]| rows.iter().map(Was::of).collect();
        LastWeek {
            schema: week.schema.to_owned(),
            made_at: week.made_at.clone(),
            due: week.due.clone(),
            sign: was(&week.sign),
            rest: was(&week.rest),
        }
    }

    /// Its day, for a person.
    pub(super) fn day(&self) -> Option<String> {
        let time = self.due.as_ref().or(self.made_at.as_ref())?;
        Some(time.get(..10).unwrap_or(time).to_owned())
    }

    pub(super) fn rows(&self) -> impl Iterator<Item = &Was> {
        self.sign.iter().chain(&self.rest)
    }
}

impl Was {
    fn of(row: &Row) -> Was {
        Was {
            stream: row.stream.clone(),
            verdict: row.verdict,
            old_s: row.old_s,
            advised_s: row.advised_s,
            band_s: row.band_s,
            tail: row.tail,
            remaining_wait: row.remaining_wait,
        }
    }
}

/// What is new of a stream since its last row, in sentences.
pub(super) fn since(row: &Row, was: &Was) -> Vec<String> {
    let mut changed = Vec::new();
    if let (Some(then), Some(now)) = (was.tail, row.tail)
        && then != now
    {
        changed.push(format!("last week: {}; now: {}", then.words(), now.words()));
    }
    if let (Some(then), Some(now)) = (was.remaining_wait, row.remaining_wait)
        && then != now
    {
        changed.push(format!("last week {}; now {}", then.words(), now.words()));
    }
    if let (Some(then), Some(now)) = (was.advised_s, row.advised_s)
        && then != now
    {
        let seconds = then.seconds();
        let same = row.band_s.is_some_and(|[low, high]| (low..=high).contains(&seconds));
        if !same {
            changed.push(format!("the best time went from {} to {}", time(then), time(now)));
        }
    }
    if let (Some(then), Some(now)) = (was.old_s, row.old_s)
        && then != now
    {
        changed.push(format!("the time in force went from {} to {}", time(then), time(now)));
    }
    if was.verdict != row.verdict {
        changed.push(format!("last week it said: {}", was.verdict.words()));
    }
    changed
}

fn time(time: GiveUp) -> String {
    say::duration(time.seconds())
}
