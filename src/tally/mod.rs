//! How waits are counted: per stream and day, mergeable, in bounded memory; and the cells statistics read.
//!
//! In: [`crate::wait::Wait`]. Out: [`Cells`]. No files, no clock.

mod ages;
mod book;
mod buckets;
mod carry;
mod cells;
mod encode;
mod omission;
mod waits;

pub use ages::{Ages, Bin, EXACT_AGES};
pub use book::{Book, Day, Days};
pub use buckets::{Buckets, MOST_BUCKETS};
pub(crate) use carry::{Periods, file};
pub use cells::{Cause, Cells, EventCell, Interval, Mass, Sample};
pub(crate) use encode::{Bytes, varint};
pub use encode::{DecodeError, TALLY_VERSION};

use crate::wait::{Age, Ending, Wait};

/// The waits of one stream and period, counted. [`Tally::merge`] is associative, commutative and exact.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Tally {
    first: Side,
    // Most streams number no attempts.
    retry: Option<Box<Side>>,
    seen: Option<(f64, f64)>,
}

/// First attempts, or retries: retries are drawn from those whose first attempt was slow, so the two never mix.
#[derive(Clone, Debug, Default, PartialEq)]
struct Side {
    ages: [Ages; 4],
    entries: Ages,
    /// Exits by carrying over into the next period; they cancel with the entries there ([`carry`]).
    carried: Ages,
    buckets: Option<Box<Buckets>>,
}

impl Tally {
    /// Counts one wait.
    #[inline]
    pub fn add(&mut self, wait: &Wait) {
        self.end(wait);
        if wait.entered() > 0.0 {
            self.side(wait).entries.add(wait.entered(), wait.count());
        }
    }

    /// Counts how a wait ended, not where watching it began.
    #[inline]
    fn end(&mut self, wait: &Wait) {
        let side = self.side(wait);
        match wait.age() {
            Age::Exact(age) => side.ages[wait.ending() as usize].add(age, wait.count()),
            Age::Between { over, upto } => {
                side.buckets.get_or_insert_default().add(over, upto, wait.ending(), wait.count());
            }
        }
        if let Some(at) = wait.at() {
            self.see(at, at);
        }
    }

    /// A wait enters the risk set at an age, s.
    fn enter(&mut self, wait: &Wait, age: f64) {
        self.side(wait).entries.add(age, wait.count());
    }

    /// A wait leaves for the next period at an age, s.
    fn carry(&mut self, wait: &Wait, age: f64) {
        self.side(wait).carried.add(age, wait.count());
    }

    #[inline]
    fn side(&mut self, wait: &Wait) -> &mut Side {
        if wait.attempt() == 1 { &mut self.first } else { self.retry.get_or_insert_default() }
    }

    /// Adds all of `other`.
    pub fn merge(&mut self, other: &Tally) {
        self.first.merge(&other.first);
        if let Some(theirs) = &other.retry {
            self.retry.get_or_insert_default().merge(theirs);
        }
        if let Some((from, to)) = other.seen {
            self.see(from, to);
        }
    }

    fn see(&mut self, from: f64, to: f64) {
        let (a, b) = self.seen.unwrap_or((from, to));
        self.seen = Some((a.min(from), b.max(to)));
    }

    /// The first attempts: what shapes every curve.
    pub fn first_attempts(&self) -> Cells {
        self.first.cells()
    }

    /// The later attempts: what shows stickiness.
    pub fn retries(&self) -> Cells {
        self.retry.as_ref().map(|side| side.cells()).unwrap_or_default()
    }

    /// Number of waits by ending, first attempts and retries together, in the order of [`Ending::ALL`].
    pub fn counts(&self) -> [u64; 4] {
        let mut counts = self.first.counts();
        if let Some(side) = &self.retry {
            for (n, more) in counts.iter_mut().zip(side.counts()) {
                *n = n.saturating_add(more);
            }
        }
        counts
    }

    /// First and last time of the waits that carried one, Unix seconds.
    pub fn seen(&self) -> Option<(f64, f64)> {
        self.seen
    }
}

impl Side {
    fn merge(&mut self, other: &Side) {
        for (mine, theirs) in self.ages.iter_mut().zip(&other.ages) {
            mine.merge(theirs);
        }
        self.entries.merge(&other.entries);
        self.carried.merge(&other.carried);
        if let Some(theirs) = &other.buckets {
            self.buckets.get_or_insert_default().merge(theirs);
        }
    }

    fn counts(&self) -> [u64; 4] {
        let mut counts = self.buckets.as_ref().map(|b| b.counts()).unwrap_or_default();
        for (n, ages) in counts.iter_mut().zip(&self.ages) {
            *n = n.saturating_add(ages.count());
        }
        counts
    }

    fn cells(&self) -> Cells {
        let mut cells = Cells::default();
        let [done, failed, gave_up, waiting] = self.ages.each_ref().map(Ages::bins);
        let (entered, left) = ages::less(self.entries.bins(), self.carried.bins());
        // A wait last seen at an age and one that enters at it are one at every age; files written from a ledger hold
        // long waits so.
        let (entered, waiting) = ages::less(entered, waiting);
        let (done, failed) = ages::alike(done, failed);
        for (ending, bins) in Ending::ALL.into_iter().zip([done, failed, gave_up, waiting]) {
            for bin in bins {
                cells.push(bin.low, bin.high, ending, bin.count as f64);
            }
        }
        for (over, upto, counts) in self.buckets.iter().flat_map(|b| b.iter()) {
            for (ending, &count) in Ending::ALL.into_iter().zip(counts) {
                if count > 0 {
                    cells.push(over, upto, ending, count as f64);
                }
            }
        }
        let mass = |bin: &Bin| Mass { age: bin.low, weight: bin.count as f64 };
        cells.entries = entered.iter().map(mass).collect();
        // Carried over out of the window: open when last seen.
        cells.waiting.extend(left.iter().map(mass));
        cells.tidy();
        cells
    }
}
