//! Has the law changed inside the window, and does it matter? METHODS.md section 2 for the curves, 5 for the loss.

use super::bounds::Bounds;
use crate::curve::{Drift, Empirical};
use crate::policy::Entry;
use crate::stopping::{self, Limits, Objective, Retry};
use crate::tally::Cells;

/// A gap between the curves of two periods that is worth a word.
const GAP: f64 = 0.05;
/// How sure it must be: 4 standard errors, since the place of the gap was chosen after seeing it.
const SURE: f64 = 4.0;
/// Fewer completions in either period say nothing.
const LEAST: f64 = 50.0;

/// Two periods of one stream that differ.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Shift {
    /// Largest gap between the survival functions, > 0 where waits became longer.
    pub gap: f64,
    /// Where it is, s.
    pub at: f64,
    /// Share of the best rate under the latest law that the best time of the earlier one loses; absent where it cannot
    /// be told.
    pub loses: Option<f64>,
}

impl Shift {
    /// Compares an earlier and the latest period; `None` where they do not differ enough to matter.
    pub(crate) fn between(earlier: &Cells, latest: &Cells, entry: &Entry, bounds: &Bounds) -> Option<Shift> {
        if earlier.totals()[0] < LEAST || latest.totals()[0] < LEAST {
            return None;
        }
        let drift = Drift::between(earlier, latest).ok()?;
        if drift.gap.abs() < GAP || drift.gap.abs() < SURE * drift.gap_error {
            return None;
        }
        Some(Shift { gap: drift.gap, at: drift.at, loses: loses(earlier, latest, entry, bounds) })
    }
}

/// What the best time under the earlier curve loses under the latest.
fn loses(earlier: &Cells, latest: &Cells, entry: &Entry, bounds: &Bounds) -> Option<f64> {
    let worth = entry.worth?;
    let limits = Limits::new(bounds.floor, bounds.ceiling).ok()?;
    let (old, new) = (Empirical::new(earlier).ok()?, Empirical::new(latest).ok()?);
    let retry = Retry { attempts: entry.retry.attempts, ..Retry::default() };
    let before = stopping::best(&Objective::new(&old, &worth, &retry, limits).ok()?).ok()?;
    let objective = Objective::new(&new, &worth, &retry, limits).ok()?;
    let best = stopping::best(&objective).ok()?;
    (best.score > 0.0).then(|| (1.0 - objective.score(before.at) / best.score).max(0.0))
}
