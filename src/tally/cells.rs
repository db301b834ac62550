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

    /// Time waited in all of them together, s, each from where watching it began. An event in a bucket counts at its middle,
    /// at its lower end where it has no upper one.
    pub fn waited(&self) -> f64 {
        let event = |e: &EventCell| {
            let age = if e.upto.is_finite() { 0.5 * (e.over + e.upto) } else { e.over };
            age * (e.done + e.failed)
        };
        let mass = |masses: &[Mass]| masses.iter().map(|m| m.age * m.weight).sum::<f64>();
        let ended: f64 = self.events.iter().map(event).sum();
        (ended + mass(&self.gave_up) + mass(&self.waiting) - mass(&self.entries)).max(0.0)
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

    /// The same up to the first age at which fewer than `enough` are at risk although late entries make them `enough`
    /// again further on; all of it where there is no such age, or where less than half of the completions lie before.
    ///
    /// In between nobody is watched, and a product-limit curve runs level through it as if nothing could end there. That
    /// happens where a timer was set lately: old waits are still open, new ones are all cut off, none is between.
    pub(crate) fn before_gap(self, enough: f64) -> Cells {
        if self.entries.is_empty() {
            return self;
        }
        let ended = self.events.iter().map(|e| (e.upto, -(e.done + e.failed)));
        let censored = self.gave_up.iter().chain(&self.waiting).map(|m| (m.age, -m.weight));
        let entered = self.entries.iter().map(|m| (m.age, m.weight));
        let mut steps: Vec<(f64, f64)> = ended.chain(censored).chain(entered).collect();
        // Who leaves at an age was at risk there, who enters is so only after it.
        steps.sort_by(|a, b| a.0.total_cmp(&b.0).then(a.1.total_cmp(&b.1)));
        let mut at_risk = -steps.iter().map(|(_, change)| change).sum::<f64>();
        let mut gap = None;
        for (age, change) in steps {
            let before = at_risk;
            at_risk += change;
            match gap {
                None if before >= enough && at_risk < enough => gap = Some((age, at_risk)),
                Some((from, left)) if at_risk >= enough => {
                    if age > from {
                        return self.upto(from, left);
                    }
                    gap = None;
                }
                Some((from, _)) if age == from => gap = Some((from, at_risk)),
                _ => {}
            }
        }
        self
    }

    /// What is known up to an age at which `left` are still open.
    fn upto(self, age: f64, left: f64) -> Cells {
        let done: f64 = self.events.iter().filter(|e| e.upto <= age).map(|e| e.done).sum();
        if done < 0.5 * self.totals()[0] {
            return self;
        }
        let mut cells = self;
        cells.events.retain(|e| e.upto <= age);
        for masses in [&mut cells.gave_up, &mut cells.waiting] {
            masses.retain(|m| m.age <= age);
        }
        cells.entries.retain(|m| m.age < age);
        if left > 0.0 {
            cells.waiting.push(Mass { age, weight: left });
            tidy_masses(&mut cells.waiting);
        }
        cells
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
    fn where_nobody_is_watched_the_data_end() {
        let wait = |age: f64, ending, entered: f64, n| {
            Wait::new(age, ending).unwrap().with_entered(entered).unwrap().with_count(n).unwrap()
        };
        let mut waits = vec![
            wait(1.0, Ending::Done, 0.0, 60),
            wait(2.0, Ending::Done, 0.5, 40),
            wait(2.0, Ending::GaveUp, 0.0, 97),
            wait(3.0, Ending::GaveUp, 0.0, 3),
        ];
        let young = Cells::from_waits(&waits);
        assert_eq!(young.clone().before_gap(5.0), young);
        // Old waits, from before the timer of 2 s.
        waits.extend([wait(40.0, Ending::Waiting, 30.0, 50), wait(35.0, Ending::Done, 28.0, 8)]);
        let cells = Cells::from_waits(&waits).before_gap(5.0);
        assert_eq!(cells.totals(), [100.0, 0.0, 97.0, 3.0]);
        assert_eq!((cells.waiting[0].age, cells.entries.len()), (2.0, 1));
        // Carried over without a gap: as it was.
        let whole = [wait(4.0, Ending::Waiting, 0.0, 50), wait(9.0, Ending::Done, 4.0, 50)];
        assert_eq!(Cells::from_waits(&whole).before_gap(5.0), Cells::from_waits(&whole));
        // Late entries only: nothing comes before a gap.
        let late = [wait(9.0, Ending::Done, 8.0, 50)];
        assert_eq!(Cells::from_waits(&late).before_gap(5.0), Cells::from_waits(&late));
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
