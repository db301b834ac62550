//! For every age at which waits ended: how many were at risk, and how many ended and how.
//!
//! The one way from cells to curves: whatever can be wrong with the data is found here, and every estimator
//! of this folder is then read off the table without failing. METHODS.md section 2.

use super::turnbull;
use crate::tally::{Cells, EventCell, Mass, Sample};

/// So many at risk are enough to speak of an age: the last age with as many is where sight ends.
pub const ENOUGH: f64 = 5.0;

/// Endings in one age interval `(over, upto]`, or at the one age `upto` when `over == upto`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Row {
    /// Lower bound, s.
    pub over: f64,
    /// Upper bound, s; finite.
    pub upto: f64,
    /// Number at risk, at least `done + failed`.
    pub at_risk: f64,
    /// Number that completed.
    pub done: f64,
    /// Number that failed.
    pub failed: f64,
}

impl Row {
    /// Number that ended either way.
    pub fn ended(&self) -> f64 {
        self.done + self.failed
    }
}

/// A life table: disjoint age intervals in order, with numbers at risk and endings.
///
/// At risk are the waits that entered before and have not left (left truncation). Endings precede censorings
/// at the same age, and inside the same interval: a wait given up within a bucket counts as at risk for it,
/// which is exact where a timeout cuts the bucket, and off by half their share where cuts are spread over it.
/// A wait that enters within a bucket counts half (the actuarial rule; Kalbfleisch & Prentice 2002, section
/// 1.4). In a histogram's bin of 0.1% neither matters.
///
/// Disjoint buckets are taken as they are. Where buckets overlap, endings are shared out among the intervals
/// by the self-consistent estimate ([`super::turnbull()`]); variances read off such a table leave out that
/// sharing and are a little too small.
#[derive(Clone, Debug, PartialEq)]
pub struct LifeTable {
    rows: Vec<Row>,
    total: f64,
    sight: f64,
    last: f64,
    open: [f64; 2],
    left_out: f64,
    intact: f64,
    iterations: usize,
    gap: f64,
}

/// Why there is no life table.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum CurveError {
    /// No waits.
    #[error("there are no waits")]
    Empty,
    /// A cell that cannot be: a negative or infinite count, as buckets whose cumulative counts decrease give,
    /// or bounds out of order.
    #[error("{weight} waits between the ages {over} and {upto} cannot be")]
    Contradictory {
        /// Lower bound, s.
        over: f64,
        /// Upper bound, s.
        upto: f64,
        /// The count.
        weight: f64,
    },
    /// More waits entered late than were seen to end or to leave.
    #[error("{entered} waits entered late, but only {seen} were seen to end or to leave")]
    Entries {
        /// Number entered above age 0.
        entered: f64,
        /// Number seen.
        seen: f64,
    },
    /// Every ending lies in one bucket that begins at 0 or never ends: nothing says when.
    #[error("all endings lie in one bucket from {over} to {upto}: nothing says when in it they fell")]
    OneBucket {
        /// Lower bound, s.
        over: f64,
        /// Upper bound, s; possibly infinite.
        upto: f64,
    },
    /// Overlapping buckets whose self-consistent estimate did not settle within its budget.
    #[error(
        "overlapping buckets did not settle in {iterations} rounds (gap {gap:.1e}); record one bucket layout"
    )]
    NotSettled {
        /// Rounds used.
        iterations: usize,
        /// How far the likelihood may still rise, nats per wait.
        gap: f64,
    },
}

impl LifeTable {
    /// The table of both endings.
    ///
    /// Events in an open last bucket are at risk up to its lower bound and then counted in
    /// [`LifeTable::open`] only. Cost: linear in the number of cells where they are disjoint.
    ///
    /// # Errors
    /// [`CurveError`].
    pub fn of(cells: &Cells) -> Result<LifeTable, CurveError> {
        LifeTable::from_parts(Parts::new(
            cells.events.iter().copied(),
            cells.gave_up.iter().chain(&cells.waiting).copied(),
            &cells.entries,
        )?)
    }

    /// The table of one cause, everything else censored: its events stand in `done`.
    ///
    /// # Errors
    /// [`CurveError`].
    pub fn of_sample(sample: &Sample) -> Result<LifeTable, CurveError> {
        LifeTable::from_parts(Parts::of_sample(sample)?)
    }

    fn from_parts(parts: Parts) -> Result<LifeTable, CurveError> {
        if parts.exits() == 0.0 {
            // All that was counted lies in (0, ∞).
            return Err(CurveError::OneBucket { over: 0.0, upto: f64::INFINITY });
        }
        let (mut rows, iterations, gap) = if parts.is_disjoint() {
            (parts.tabulate(), 0, 0.0)
        } else {
            let solution = turnbull::share_out(&parts)?;
            (solution.rows, solution.iterations, solution.gap)
        };
        let left_out = drop_emptying(&mut rows, &parts.entries);
        let (sight, last) = parts.sight();
        let reach = rows.first().map_or(sight, |r| r.upto);
        Ok(LifeTable {
            intact: parts.intact(reach),
            total: parts.total,
            sight,
            last,
            open: parts.open,
            left_out,
            iterations,
            gap,
            rows,
        })
    }

    /// The intervals with endings, in order of age, disjoint; empty when everything is censored.
    pub fn rows(&self) -> &[Row] {
        &self.rows
    }

    /// Number of waits recorded.
    pub fn total(&self) -> f64 {
        self.total
    }

    /// Last age with [`ENOUGH`] at risk just before it, s: past it the data are next to silent. With fewer
    /// waits than that, the last ending, or where there is none the last age seen.
    pub fn sight(&self) -> f64 {
        self.sight
    }

    /// Greatest age at which a wait ended or was seen, s.
    pub fn last(&self) -> f64 {
        self.last
    }

    /// Number of completions and of failures in a bucket without an upper bound: known to have come, not when.
    pub fn open(&self) -> (f64, f64) {
        (self.open[0], self.open[1])
    }

    /// Endings left out because they emptied the risk set while later waits were still to enter: each would
    /// have set the curve to 0 for good on the word of a handful (Lai & Ying 1991).
    pub fn left_out(&self) -> f64 {
        self.left_out
    }

    /// Rounds that sharing out overlapping buckets took; 0 for disjoint ones.
    pub fn iterations(&self) -> usize {
        self.iterations
    }

    /// Bound on what the likelihood of that still lacked, nats per wait, at most 1e-4; 0 for disjoint buckets.
    pub fn gap(&self) -> f64 {
        self.gap
    }

    /// Number watched from age 0 that reached the first ending.
    pub(super) fn intact(&self) -> f64 {
        self.intact
    }
}

/// The checked input of a table.
#[derive(Clone, Debug)]
pub(super) struct Parts {
    /// Sorted by `upto`, then `over`; finite bounds, some weight.
    pub(super) events: Vec<EventCell>,
    /// Sorted; ages > 0.
    pub(super) censored: Vec<Mass>,
    /// Sorted; ages > 0.
    pub(super) entries: Vec<Mass>,
    open: [f64; 2],
    /// Number recorded, with those that say nothing: events in (0, ∞), censorings at 0.
    total: f64,
}

impl Parts {
    pub(super) fn of_sample(sample: &Sample) -> Result<Parts, CurveError> {
        Parts::new(
            sample.events.iter().map(|e| EventCell {
                over: e.over,
                upto: e.upto,
                done: e.weight,
                failed: 0.0,
            }),
            sample.censored.iter().copied(),
            &sample.entries,
        )
    }

    fn new(
        cells: impl Iterator<Item = EventCell>,
        masses: impl Iterator<Item = Mass>,
        entries: &[Mass],
    ) -> Result<Parts, CurveError> {
        let mut parts = Parts {
            events: Vec::with_capacity(cells.size_hint().0),
            censored: Vec::with_capacity(masses.size_hint().0),
            entries: Vec::with_capacity(entries.len()),
            open: [0.0; 2],
            total: 0.0,
        };
        for e in cells {
            let ordered = e.over >= 0.0 && e.over <= e.upto && e.upto > 0.0 && e.over.is_finite();
            let fair = |w: f64| (0.0..f64::INFINITY).contains(&w);
            if !(ordered && fair(e.done) && fair(e.failed)) {
                let weight = if fair(e.done) { e.failed } else { e.done };
                return Err(CurveError::Contradictory { over: e.over, upto: e.upto, weight });
            }
            if e.done + e.failed == 0.0 {
                continue;
            }
            if e.upto.is_finite() {
                parts.events.push(e);
            } else {
                parts.open[0] += e.done;
                parts.open[1] += e.failed;
                parts.censored.push(Mass { age: e.over, weight: e.done + e.failed });
            }
        }
        for m in masses {
            checked(m)?;
            parts.censored.push(m);
        }
        for &m in entries {
            checked(m)?;
            parts.entries.push(m);
        }
        parts.total = parts.exits();
        parts.events.sort_by(|a, b| a.upto.total_cmp(&b.upto).then(a.over.total_cmp(&b.over)));
        for masses in [&mut parts.censored, &mut parts.entries] {
            masses.retain(|m| m.age > 0.0 && m.weight > 0.0);
            masses.sort_by(|a, b| a.age.total_cmp(&b.age));
        }
        let (seen, entered) = (parts.exits(), weight(&parts.entries));
        if parts.total == 0.0 {
            return Err(CurveError::Empty);
        }
        // The sums of two long columns may differ by rounding.
        if entered > seen * (1.0 + 1e-9) {
            return Err(CurveError::Entries { entered, seen });
        }
        cancel(&mut parts.censored, &mut parts.entries);
        for masses in [&mut parts.censored, &mut parts.entries] {
            masses.retain(|m| m.weight > 0.0);
        }
        Ok(parts)
    }

    /// Number seen to end or to leave.
    fn exits(&self) -> f64 {
        self.events.iter().map(|e| e.done + e.failed).sum::<f64>() + weight(&self.censored)
    }

    fn is_disjoint(&self) -> bool {
        self.events.windows(2).all(|w| w[1].over >= w[0].upto)
    }

    /// One row for each of disjoint cells.
    fn tabulate(&self) -> Vec<Row> {
        let others = Others::new(self, self.events.len(), |i| (self.events[i].over, self.events[i].upto));
        let mut rows: Vec<Row> = self
            .events
            .iter()
            .map(|e| Row { over: e.over, upto: e.upto, at_risk: 0.0, done: e.done, failed: e.failed })
            .collect();
        others.count_at_risk(&mut rows);
        rows
    }

    /// Last age with enough at risk, and last age seen.
    fn sight(&self) -> (f64, f64) {
        let mut events = self.events.iter().rev().peekable();
        let mut censored = self.censored.iter().rev().peekable();
        let mut entries = self.entries.iter().rev().peekable();
        let (mut left, mut entering, mut last) = (0.0, 0.0, 0.0);
        loop {
            let age = match (events.peek(), censored.peek()) {
                (Some(e), Some(c)) => e.upto.max(c.age),
                (Some(e), None) => e.upto,
                (None, Some(c)) => c.age,
                (None, None) => break,
            };
            last = f64::max(last, age);
            while let Some(e) = events.next_if(|e| e.upto == age) {
                left += e.done + e.failed;
            }
            while let Some(c) = censored.next_if(|c| c.age == age) {
                left += c.weight;
            }
            while let Some(e) = entries.next_if(|e| e.age >= age) {
                entering += e.weight;
            }
            if left - entering >= ENOUGH {
                return (age, last);
            }
        }
        (self.events.last().map_or(last, |e| e.upto), last)
    }

    /// Number watched from age 0 and still there at `reach`: at least those there less the late entries.
    fn intact(&self, reach: f64) -> f64 {
        let gone = self.censored.iter().take_while(|m| m.age < reach).map(|m| m.weight).sum::<f64>();
        (self.exits() - gone - weight(&self.entries)).max(0.0)
    }
}

/// Censored waits and late entries, sorted into the gaps between intervals: `left[i]` left after the first
/// `i` intervals, `entered[i]` came then.
#[derive(Clone, Debug)]
pub(super) struct Others {
    pub(super) left: Vec<f64>,
    pub(super) entered: Vec<f64>,
}

impl Others {
    /// `bounds`: disjoint intervals in order of age, `n` of them.
    pub(super) fn new(parts: &Parts, n: usize, bounds: impl Fn(usize) -> (f64, f64)) -> Others {
        let mut others = Others { left: vec![0.0; n + 1], entered: vec![0.0; n + 1] };
        let mut i = 0;
        for m in &parts.censored {
            // Endings precede: an exact age at the same time, an interval begun before.
            while i < n && (bounds(i).0 < m.age || bounds(i) == (m.age, m.age)) {
                i += 1;
            }
            others.left[i] += m.weight;
        }
        i = 0;
        for m in &parts.entries {
            while i < n && bounds(i).1 <= m.age {
                i += 1;
            }
            if i < n && bounds(i).0 < m.age {
                others.entered[i] += 0.5 * m.weight;
                others.entered[i + 1] += 0.5 * m.weight;
            } else {
                others.entered[i] += m.weight;
            }
        }
        others
    }

    /// Fills in the numbers at risk. Summed from the far end, where the numbers are small, so that a tail of
    /// five behind 10^12 is still five.
    pub(super) fn count_at_risk(&self, rows: &mut [Row]) {
        let (mut leaving, mut entering) = (0.0, 0.0);
        for (i, row) in rows.iter_mut().enumerate().rev() {
            leaving += self.left[i + 1] + row.done + row.failed;
            entering += self.entered[i + 1];
            row.at_risk = (leaving - entering).max(row.done + row.failed);
        }
    }
}

/// Takes out the rows after which nobody would be left although others are still to enter.
fn drop_emptying(rows: &mut Vec<Row>, entries: &[Mass]) -> f64 {
    let last_entry = entries.last().map_or(0.0, |m| m.age);
    let mut left_out = 0.0;
    rows.retain(|r| {
        let emptying = r.upto <= last_entry && r.at_risk <= r.ended() * (1.0 + 1e-12);
        left_out += if emptying { r.ended() } else { 0.0 };
        !emptying
    });
    left_out
}

/// A wait carried over from one window into the next leaves the first and enters the second at the same age:
/// the two cancel, so that merging windows counts it at risk once even within a bucket.
fn cancel(censored: &mut [Mass], entries: &mut [Mass]) {
    let mut i = 0;
    for entry in entries.iter_mut() {
        while i < censored.len() && censored[i].age < entry.age {
            i += 1;
        }
        while entry.weight > 0.0 && i < censored.len() && censored[i].age == entry.age {
            let both = entry.weight.min(censored[i].weight);
            entry.weight -= both;
            censored[i].weight -= both;
            if censored[i].weight == 0.0 {
                i += 1;
            }
        }
    }
}

fn checked(m: Mass) -> Result<(), CurveError> {
    let fair = (0.0..f64::INFINITY).contains(&m.weight) && (0.0..f64::INFINITY).contains(&m.age);
    if fair {
        Ok(())
    } else {
        Err(CurveError::Contradictory { over: m.age, upto: f64::INFINITY, weight: m.weight })
    }
}

fn weight(masses: &[Mass]) -> f64 {
    masses.iter().map(|m| m.weight).sum()
}

/// How many intervals end at or before `t`, and which share of the next lies before it.
pub(super) fn place<T>(points: &[T], bounds: impl Fn(&T) -> (f64, f64), t: f64) -> (usize, f64) {
    let passed = points.partition_point(|p| bounds(p).1 <= t);
    let share = points.get(passed).map_or(0.0, |p| {
        let (over, upto) = bounds(p);
        if t > over { (t - over) / (upto - over) } else { 0.0 }
    });
    (passed, share)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tally::{Cause, Interval};
    use crate::wait::{Ending, Wait};

    fn wait(age: f64, ending: Ending, entered: f64) -> Wait {
        Wait::new(age, ending).unwrap().with_entered(entered).unwrap()
    }

    #[test]
    fn at_risk_by_hand() {
        // Entered before, not yet left; endings before censorings at 3; the entry at 3 comes after the ending at 3.
        let waits = [
            wait(1.0, Ending::Done, 0.0),
            wait(3.0, Ending::Done, 2.0),
            wait(3.0, Ending::GaveUp, 0.0),
            wait(5.0, Ending::Failed, 3.0),
            wait(7.0, Ending::Waiting, 0.0),
        ];
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        let at_risk: Vec<_> = table.rows().iter().map(|r| (r.upto, r.at_risk, r.done, r.failed)).collect();
        assert_eq!(at_risk, [(1.0, 3.0, 1.0, 0.0), (3.0, 3.0, 1.0, 0.0), (5.0, 2.0, 0.0, 1.0)]);
        assert_eq!((table.total(), table.sight(), table.last()), (5.0, 5.0, 7.0));
        let done = LifeTable::of_sample(&Cells::from_waits(&waits).sample(Cause::Done)).unwrap();
        assert_eq!(done.rows().len(), 2);
    }

    #[test]
    fn waits_carried_over_cancel() {
        // One wait of 10 s seen in two windows, cut within the bucket of another.
        let whole = [wait(10.0, Ending::Done, 0.0)];
        let parts = [wait(4.5, Ending::Waiting, 0.0), wait(10.0, Ending::Done, 4.5)];
        let bucket = Wait::between(4.0, 5.0, Ending::Done).unwrap();
        let of = |waits: &[Wait]| LifeTable::of(&Cells::from_waits(waits.iter().chain([&bucket]))).unwrap();
        assert_eq!(of(&whole).rows(), of(&parts).rows());
    }

    #[test]
    fn an_emptied_risk_set_does_not_end_the_curve() {
        let waits =
            [wait(1.0, Ending::Done, 0.5), wait(9.0, Ending::Done, 2.0), wait(12.0, Ending::Done, 2.0)];
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        assert_eq!((table.rows().len(), table.left_out()), (2, 1.0));
    }

    #[test]
    fn open_buckets_are_remembered() {
        let waits = [
            Wait::between(1.0, 2.0, Ending::Done).unwrap().with_count(6).unwrap(),
            Wait::between(2.0, f64::INFINITY, Ending::Failed).unwrap().with_count(4).unwrap(),
        ];
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        assert_eq!((table.open(), table.total()), ((0.0, 4.0), 10.0));
        assert_eq!((table.rows().len(), table.rows()[0].at_risk), (1, 10.0));
    }

    #[test]
    fn what_cannot_be() {
        assert_eq!(LifeTable::of(&Cells::default()), Err(CurveError::Empty));
        let cell = |over, upto, weight| Sample {
            events: vec![Interval { over, upto, weight }],
            ..Sample::default()
        };
        for bad in
            [cell(1.0, 2.0, -3.0), cell(2.0, 1.0, 1.0), cell(1.0, 2.0, f64::NAN), cell(f64::NAN, 1.0, 1.0)]
        {
            assert!(matches!(LifeTable::of_sample(&bad), Err(CurveError::Contradictory { .. })), "{bad:?}");
        }
        assert!(matches!(
            LifeTable::of_sample(&cell(0.0, f64::INFINITY, 1.0)),
            Err(CurveError::OneBucket { .. })
        ));
        let late = Sample { entries: vec![Mass { age: 0.5, weight: 2.0 }], ..cell(1.0, 2.0, 1.0) };
        assert_eq!(LifeTable::of_sample(&late), Err(CurveError::Entries { entered: 2.0, seen: 1.0 }));
    }
}
