//! Histograms that only grow: what a reading adds to the one before, which the ledger remembers as a mark.

use std::collections::HashMap;

use super::batch::Hours;
use crate::running::{Mark, Running, SeriesKey};
use crate::tally;

/// What is remembered of a series.
#[derive(Clone, Debug, PartialEq)]
pub(super) enum Known {
    /// Its last reading.
    Mark(Mark),
    /// Something that cannot be read. The next reading is a base: nothing is counted twice.
    Broken,
}

/// What readings lead to.
#[derive(Debug, Default)]
pub(super) struct Grown<'r> {
    /// The new waits, by stream and hour.
    pub(super) streams: HashMap<&'r str, Hours>,
    /// The marks that the readings leave.
    pub(super) marks: HashMap<SeriesKey, Mark>,
    /// Series that had no mark.
    pub(super) new: usize,
    /// Waits.
    pub(super) waits: u64,
    /// Series that have begun anew.
    pub(super) resets: u64,
}

/// Compares readings with what is remembered of their series. `now` (Unix seconds) stands for the time of one that has none.
pub(super) fn settle<E>(
    readings: &[Running],
    now: f64,
    mut find: impl FnMut(&SeriesKey) -> Result<Option<Known>, E>,
) -> Result<Grown<'_>, E> {
    let mut grown = Grown::default();
    for running in readings {
        let growth = match grown.marks.get(&running.key) {
            Some(mark) => running.growth(Some(mark)),
            None => match find(&running.key)? {
                Some(Known::Mark(mark)) => running.growth(Some(&mark)),
                Some(Known::Broken) => Running { counts_at_first: false, ..running.clone() }.growth(None),
                None => {
                    grown.new += 1;
                    running.growth(None)
                }
            },
        };
        let Some(counts) = growth.counts else { continue };
        grown.resets += u64::from(growth.reset);
        grown.marks.insert(running.key, running.mark());
        if counts.total() == 0 {
            continue;
        }
        grown.waits = grown.waits.saturating_add(counts.total());
        let hours = grown.streams.entry(&running.stream).or_default();
        // A histogram's buckets are waits, and its time was checked with it.
        for wait in running.waits(&counts).into_iter().flatten() {
            tally::file(&wait, wait.at().unwrap_or(now), hours);
        }
    }
    Ok(grown)
}
