//! What everything statistical reads: waits grouped by age and ending, with weights.
//!
//! An exact age is a cell of width 0, a histogram bin or a coarse bucket a cell of its width. The cost of all
//! that follows depends on the number of cells, not on the number of waits.

use crate::wait::{Age, Ending, Wait};

/// Endings that are known to lie in one age interval `(over, upto]`, or exactly at `upto` when `over == upto`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct EventCell {
    /// Lower bound, s.
    pub over: f64,
    /// Upper bound, s; infinite for the last bucket of a histogram.
    pub upto: f64,
    /// Number that completed.
    pub done: f64,
    /// Number that failed.
    pub failed: f64,
}

/// A weight at an age.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Mass {
    /// Age, s.
    pub age: f64,
    /// Number of waits.
    pub weight: f64,
}

/// The waits of one stream (first attempts, or retries), grouped.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Cells {
    /// Events, sorted by `upto`, then `over`; no two with equal bounds.
    pub events: Vec<EventCell>,
    /// Waits that were given up, at the age they had; sorted, ages distinct.
    pub gave_up: Vec<Mass>,
    /// Waits still open when last seen, at the age they had; sorted, ages distinct.
    pub waiting: Vec<Mass>,
    /// Ages above 0 at which watching began (left truncation); sorted, ages distinct.
    pub entries: Vec<Mass>,
}

impl Cells {
    /// Groups waits as they are: exact ages stay exact. For small samples and for the tests of the mathematics;
    /// a [`crate::tally::Tally`] does the same in bounded memory.
    pub fn from_waits<'a>(waits: impl IntoIterator<Item = &'a Wait>) -> Cells {
        let mut cells = Cells::default();
        for wait in waits {
            let weight = wait.count() as f64;
            let (over, upto) = match wait.age() {
                Age::Exact(t) => (t, t),
                Age::Between { over, upto } => (over, upto),
            };
            cells.push(over, upto, wait.ending(), weight);
            if wait.entered() > 0.0 {
                cells.entries.push(Mass { age: wait.entered(), weight });
            }
        }
        cells.tidy();
        cells
    }

    /// Adds one group without keeping order; call [`Cells::tidy`] once after the last.
    pub(crate) fn push(&mut self, over: f64, upto: f64, ending: Ending, weight: f64) {
        match ending {
            Ending::Done => self.events.push(EventCell { over, upto, done: weight, failed: 0.0 }),
            Ending::Failed => self.events.push(EventCell { over, upto, done: 0.0, failed: weight }),
            // All that a censored wait says is T > its lower bound.
            Ending::GaveUp => self.gave_up.push(Mass { age: over, weight }),
            Ending::Waiting => self.waiting.push(Mass { age: over, weight }),
        }
    }

    /// Sorts and joins equal groups.
    pub(crate) fn tidy(&mut self) {
        self.events.sort_by(|a, b| a.upto.total_cmp(&b.upto).then(a.over.total_cmp(&b.over)));
        self.events.dedup_by(|next, kept| {
            let same = next.upto == kept.upto && next.over == kept.over;
            if same {
                kept.done += next.done;
                kept.failed += next.failed;
            }
            same
        });
        for masses in [&mut self.gave_up, &mut self.waiting, &mut self.entries] {
            tidy_masses(masses);
        }
    }

    /// The same with neighbouring events joined until there are at most about `most` cells of them, by steps of equal
    /// ratio; for what is costly by the cell and needs no finer ages. Buckets without an upper bound stay apart, and so
    /// do cells wider than a step.
    pub fn coarsened(&self, most: usize) -> Cells {
        let positive = |t: f64| t > 0.0 && t.is_finite();
        let ages = || self.events.iter().map(|e| e.upto).filter(|&t| positive(t));
        let (first, last) = (ages().fold(f64::INFINITY, f64::min), ages().fold(0.0, f64::max));
        if self.events.len() <= most || last <= first {
            return self.clone();
        }
        let step = (last / first).ln() / most as f64;
        let key = |e: &EventCell| ((e.upto / first).ln() / step).floor();
        let joins = |e: &EventCell| positive(e.upto) && e.over > 0.0 && (e.upto / e.over).ln() <= step;
        let mut joined: Vec<EventCell> = Vec::with_capacity(most + 1);
        // Of the cell that is being filled; none where nothing may join it.
        let mut filling = None;
        for e in &self.events {
            let place = joins(e).then(|| key(e));
            match joined.last_mut() {
                Some(kept) if place.is_some() && place == filling && e.over >= kept.over => {
                    kept.upto = e.upto;
                    kept.done += e.done;
                    kept.failed += e.failed;
                }
                _ => {
                    joined.push(*e);
                    filling = place;
                }
            }
        }
        Cells { events: joined, ..self.clone() }
    }

    /// Total weight of each ending, in the order of [`Ending::ALL`].
    pub fn totals(&self) -> [f64; 4] {
        [
            self.events.iter().map(|e| e.done).sum(),
            self.events.iter().map(|e| e.failed).sum(),
            self.gave_up.iter().map(|m| m.weight).sum(),
            self.waiting.iter().map(|m| m.weight).sum(),
        ]
    }

    /// Number of waits of any ending.
    pub fn total(&self) -> f64 {
        self.totals().iter().sum()
    }

    /// The data of one cause: its events, everything else right-censored (METHODS.md section 3).
    pub fn sample(&self, cause: Cause) -> Sample {
        let mut sample = Sample { entries: self.entries.clone(), ..Sample::default() };
        for e in &self.events {
            let (mine, other) = match cause {
                Cause::Done => (e.done, e.failed),
                Cause::Failed => (e.failed, e.done),
                Cause::Any => (e.done + e.failed, 0.0),
            };
            if mine > 0.0 {
                sample.events.push(Interval { over: e.over, upto: e.upto, weight: mine });
            }
            if other > 0.0 {
                // In a bin of 0.1% the middle is as good as any age; in a coarse bucket it is the least biased.
                let age = if e.upto.is_finite() { 0.5 * (e.over + e.upto) } else { e.over };
                sample.censored.push(Mass { age, weight: other });
            }
        }
        sample.censored.extend(self.gave_up.iter().chain(&self.waiting));
        sample.censored.retain(|m| m.age > 0.0);
        tidy_masses(&mut sample.censored);
        sample
    }
}

fn tidy_masses(masses: &mut Vec<Mass>) {
    masses.sort_by(|a, b| a.age.total_cmp(&b.age));
    masses.dedup_by(|next, kept| {
        let same = next.age == kept.age;
        if same {
            kept.weight += next.weight;
        }
        same
    });
}

/// Which ending counts as the event; the others are right-censored.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Cause {
    /// Completions.
    Done,
    /// Failures.
    Failed,
    /// Both.
    Any,
}

/// Events in an age interval `(over, upto]`, exact when `over == upto`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Interval {
    /// Lower bound, s.
    pub over: f64,
    /// Upper bound, s; may be infinite.
    pub upto: f64,
    /// Number of events.
    pub weight: f64,
}

/// Data of a single cause: what a likelihood reads.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Sample {
    /// Events, sorted by `upto`, then `over`.
    pub events: Vec<Interval>,
    /// Right-censored ages, sorted, distinct.
    pub censored: Vec<Mass>,
    /// Entry ages above 0 (left truncation), sorted, distinct.
    pub entries: Vec<Mass>,
}

impl Sample {
    /// Number of events.
    pub fn event_count(&self) -> f64 {
        self.events.iter().map(|e| e.weight).sum()
    }

    /// Number of events and censored waits.
    pub fn total(&self) -> f64 {
        self.event_count() + self.censored.iter().map(|m| m.weight).sum::<f64>()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn coarse_cells_hold_the_same_waits() {
        let waits: Vec<Wait> =
            (1..=5000).map(|i| Wait::new(f64::from(i) * 1e-3, Ending::Done).unwrap()).collect();
        let cells = Cells::from_waits(&waits);
        let coarse = cells.coarsened(300);
        assert!(coarse.events.len() <= 301 && coarse.events.len() > 100, "{}", coarse.events.len());
        assert_eq!(coarse.totals(), cells.totals());
        assert!(coarse.events.windows(2).all(|w| w[0].upto < w[1].over || w[0].upto <= w[1].over));
        assert_eq!(cells.coarsened(5000), cells);
    }

    #[test]
    fn causes_split_the_same_waits() {
        let waits = [
            Wait::new(1.0, Ending::Done).unwrap(),
            Wait::new(1.0, Ending::Failed).unwrap(),
            Wait::new(2.0, Ending::GaveUp).unwrap(),
            Wait::between(0.5, 2.5, Ending::Done).unwrap().with_count(3).unwrap(),
        ];
        let cells = Cells::from_waits(&waits);
        assert_eq!(cells.totals(), [4.0, 1.0, 1.0, 0.0]);
        let done = cells.sample(Cause::Done);
        assert_eq!((done.event_count(), done.total()), (4.0, 6.0));
        assert_eq!(cells.sample(Cause::Failed).event_count(), 1.0);
    }
}
