//! What is added up while the waits are read: bounded memory, and the same sums for any order and grouping, since all of them
//! are whole numbers (nanoseconds, and parts of worth).

use std::cmp::Ordering;

use super::calendar::{HOURS, hour_of_week};
use super::report::{Lost, OpenCounts, OverLost, UnderLost};
use super::rule::{Cut, Rule, cut};
use super::yardstick::{Verdict, Yardstick};
use crate::wait::{Age, Ending, Wait};

/// Nanoseconds in a second.
const NANO: f64 = 1e9;
/// Nanoseconds in an hour.
const NANO_HOUR: f64 = 3.6e12;
/// No hour of the week has been seen.
const NONE: u8 = u8::MAX;
/// A wait seen last less than this before the newest record is not stale, s.
const FRESH: f64 = 60.0;

/// Sums of a group of closed waits.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct Cell {
    waits: u64,
    waited: u128,
    over: u64,
    past: u128,
    back: i128,
    under: u64,
    further: u128,
    worth: i128,
    bulk: u64,
}

impl Cell {
    #[inline]
    fn add(&mut self, more: &Cell) {
        self.waits = self.waits.saturating_add(more.waits);
        self.waited = self.waited.saturating_add(more.waited);
        self.over = self.over.saturating_add(more.over);
        self.past = self.past.saturating_add(more.past);
        self.back = self.back.saturating_add(more.back);
        self.under = self.under.saturating_add(more.under);
        self.further = self.further.saturating_add(more.further);
        self.worth = self.worth.saturating_add(more.worth);
        self.bulk = self.bulk.saturating_add(more.bulk);
    }

    /// In hours and worth.
    pub(super) fn lost(&self, by: &Yardstick) -> Lost {
        let past_s = self.past as f64 / NANO;
        let cost = by.price().map(|price| price * past_s);
        let back = cost.map(|_| by.worth(self.back));
        Lost {
            waits: self.waits,
            hours: hours(self.waited),
            over: OverLost {
                waits: self.over,
                hours: hours(self.past),
                cost,
                won_back: back,
                lost: cost.zip(back).map(|(cost, back)| cost - back),
            },
            under: UnderLost {
                waits: self.under,
                further_hours: hours(self.further),
                lost: by.unit().map(|_| by.worth(self.worth)),
                before_bulk: self.bulk,
            },
        }
    }
}

pub(super) fn hours(nanoseconds: u128) -> f64 {
    nanoseconds as f64 / NANO_HOUR
}

#[inline]
fn nano(seconds: f64) -> u128 {
    // Ages are at most 1e10 s, so this fits 64 bits, whose conversion is one instruction.
    u128::from((seconds.max(0.0) * NANO).round() as u64)
}

/// Sums of one stream.
#[derive(Clone, Debug)]
pub(super) struct StreamSums {
    pub(super) by_cut: [Cell; Cut::ALL.len()],
    pub(super) hours: Hours,
    pub(super) undated: u64,
    /// Ended in a bucket without an upper bound, and counted at its lower one.
    pub(super) endless: u64,
    pub(super) open: OpenSums,
    pub(super) flow: Flow,
}

impl Default for StreamSums {
    fn default() -> StreamSums {
        StreamSums {
            by_cut: Default::default(),
            hours: Hours { places: [NONE; HOURS], cells: Vec::new() },
            undated: 0,
            endless: 0,
            open: OpenSums::default(),
            flow: Flow::default(),
        }
    }
}

/// Sums by hour of the week; only hours that occur take room.
#[derive(Clone, Debug)]
pub(super) struct Hours {
    places: [u8; HOURS],
    cells: Vec<Cell>,
}

impl Hours {
    #[inline]
    fn cell(&mut self, hour: usize) -> &mut Cell {
        if self.places[hour] == NONE {
            // At most 168 of them.
            self.places[hour] = self.cells.len() as u8;
            self.cells.push(Cell::default());
        }
        &mut self.cells[usize::from(self.places[hour])]
    }

    /// The hours seen, in the order of the week.
    pub(super) fn iter(&self) -> impl Iterator<Item = (usize, &Cell)> {
        let seen = self.places.iter().enumerate().filter(|(_, place)| **place != NONE);
        seen.map(|(hour, place)| (hour, &self.cells[usize::from(*place)]))
    }
}

/// Open waits of one stream.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct OpenSums {
    hold: u64,
    let_go: u64,
    unknown: u64,
    past: u128,
    stale: u64,
}

impl OpenSums {
    pub(super) fn counts(&self) -> OpenCounts {
        OpenCounts {
            waits: self.hold.saturating_add(self.let_go).saturating_add(self.unknown),
            hold: self.hold,
            let_go: self.let_go,
            unknown: self.unknown,
            hours_past: hours(self.past),
            stale: self.stale,
        }
    }
}

/// Arrivals and waiting inside the window of a queue, for Little's law.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct Flow {
    /// Waits that ended inside, with their whole time.
    pub(super) ended: u64,
    pub(super) waited: u128,
    /// Waits that began inside.
    pub(super) arrived: u64,
    /// Time spent waiting inside, by all.
    pub(super) inside: u128,
    /// Open waits seen inside.
    pub(super) open: u64,
}

/// What a stream's waits are held against.
pub(super) struct Against<'a> {
    pub(super) yardstick: &'a Yardstick,
    pub(super) rule: Option<&'a Rule>,
    /// First and last time of its waits, Unix seconds; only for queues.
    pub(super) window: Option<(f64, f64)>,
    /// The newest time of all streams.
    pub(super) newest: Option<f64>,
}

impl StreamSums {
    /// Counts a wait that has ended.
    #[inline]
    pub(super) fn close(&mut self, wait: &Wait, against: &Against<'_>) {
        let (age, count) = (age(wait), wait.count());
        let n = u128::from(count);
        let ending = wait.ending();
        let mut cell = Cell { waits: count, waited: nano(age) * n, ..Cell::default() };
        if let Some(over) = against.yardstick.over(age, ending) {
            cell.over = count;
            cell.past = nano(over.past) * n;
            cell.back = over.back.saturating_mul(n as i128);
        } else if ending == Ending::GaveUp
            && let Some(under) = against.yardstick.under(age)
        {
            cell.under = count;
            cell.further = nano(under.further) * n;
            cell.worth = under.parts.saturating_mul(n as i128);
            cell.bulk = if under.bulk { count } else { 0 };
        }
        if !ending.is_censored() && matches!(wait.age(), Age::Between { upto: f64::INFINITY, .. }) {
            self.endless = self.endless.saturating_add(count);
        }
        self.by_cut[cut(against.rule, age, ending) as usize].add(&cell);
        match wait.at() {
            Some(at) => self.hours.cell(hour_of_week(at)).add(&cell),
            None => self.undated = self.undated.saturating_add(count),
        }
        self.flow(wait, age, against);
    }

    /// Counts a wait that is open; its verdict and urgency.
    pub(super) fn open(&mut self, wait: &Wait, step: Option<f64>, against: &Against<'_>) -> (Verdict, f64) {
        let (age, count) = (age(wait), wait.count());
        let (verdict, urgency) = against.yardstick.urgency(age, step.unwrap_or(age));
        let of_verdict = match verdict {
            Verdict::Hold => &mut self.open.hold,
            Verdict::LetGo => &mut self.open.let_go,
            Verdict::Unknown => &mut self.open.unknown,
        };
        *of_verdict = of_verdict.saturating_add(count);
        if let Some(at) = against.yardstick.advised_at() {
            self.open.past += nano(age - at) * u128::from(count);
        }
        if let (Some(seen), Some(newest)) = (wait.at(), against.newest)
            && newest - seen > age.max(FRESH)
        {
            self.open.stale = self.open.stale.saturating_add(count);
        }
        self.flow(wait, age, against);
        (verdict, urgency)
    }

    #[inline]
    fn flow(&mut self, wait: &Wait, age: f64, against: &Against<'_>) {
        let (Some((from, to)), Some(at)) = (against.window, wait.at()) else { return };
        let (count, n) = (wait.count(), u128::from(wait.count()));
        let began = at - age;
        if wait.ending() == Ending::Waiting {
            self.flow.open = self.flow.open.saturating_add(count);
        } else {
            self.flow.ended = self.flow.ended.saturating_add(count);
            self.flow.waited += nano(age) * n;
        }
        if began >= from {
            self.flow.arrived = self.flow.arrived.saturating_add(count);
        }
        self.flow.inside += nano(at.min(to) - began.max(from)) * n;
    }

    pub(super) fn merge(&mut self, other: &StreamSums) {
        for (mine, theirs) in self.by_cut.iter_mut().zip(&other.by_cut) {
            mine.add(theirs);
        }
        for (hour, cell) in other.hours.iter() {
            self.hours.cell(hour).add(cell);
        }
        self.undated = self.undated.saturating_add(other.undated);
        self.endless = self.endless.saturating_add(other.endless);
        let (mine, theirs) = (&mut self.open, &other.open);
        mine.hold = mine.hold.saturating_add(theirs.hold);
        mine.let_go = mine.let_go.saturating_add(theirs.let_go);
        mine.unknown = mine.unknown.saturating_add(theirs.unknown);
        mine.past += theirs.past;
        mine.stale = mine.stale.saturating_add(theirs.stale);
        let (mine, theirs) = (&mut self.flow, &other.flow);
        mine.ended = mine.ended.saturating_add(theirs.ended);
        mine.waited += theirs.waited;
        mine.arrived = mine.arrived.saturating_add(theirs.arrived);
        mine.inside += theirs.inside;
        mine.open = mine.open.saturating_add(theirs.open);
    }

    /// All closed waits.
    pub(super) fn closed(&self) -> Cell {
        let mut all = Cell::default();
        self.by_cut.iter().for_each(|cell| all.add(cell));
        all
    }
}

/// The age that counts, s: of a bucket its middle, or its lower end where there is no upper, or where it is open or was given
/// up.
#[inline]
pub(super) fn age(wait: &Wait) -> f64 {
    match wait.age() {
        Age::Exact(age) => age,
        Age::Between { over, upto } if upto.is_finite() && !wait.ending().is_censored() => {
            0.5 * (over + upto)
        }
        Age::Between { over, .. } => over,
    }
}

/// An open wait that may be listed.
#[derive(Clone, Debug)]
pub(super) struct Candidate {
    pub(super) verdict: Verdict,
    pub(super) urgency: f64,
    pub(super) age: f64,
    /// Number of its stream.
    pub(super) stream: usize,
    pub(super) id: Option<Box<str>>,
    pub(super) attempt: u32,
    pub(super) count: u64,
    pub(super) at: Option<f64>,
}

impl Candidate {
    /// The most urgent first. Nothing is left to chance, so that a list does not depend on the order of the waits.
    pub(super) fn order(&self, other: &Candidate) -> Ordering {
        self.rank(other)
            .then_with(|| self.stream.cmp(&other.stream))
            .then_with(|| self.id.cmp(&other.id))
            .then_with(|| self.attempt.cmp(&other.attempt))
            .then_with(|| self.at.unwrap_or(-1.0).total_cmp(&other.at.unwrap_or(-1.0)))
            .then_with(|| self.count.cmp(&other.count))
    }

    fn rank(&self, other: &Candidate) -> Ordering {
        other
            .verdict
            .cmp(&self.verdict)
            .then_with(|| other.urgency.total_cmp(&self.urgency))
            .then_with(|| other.age.total_cmp(&self.age))
    }
}

/// The most urgent open waits so far: at most `most`, and as many again before they are sorted.
#[derive(Clone, Debug)]
pub(super) struct Shortlist {
    most: usize,
    kept: Vec<Candidate>,
    /// Whether the first `most` are sorted and nothing after them can be listed unless it goes before the last of them.
    full: bool,
}

impl Shortlist {
    pub(super) fn new(most: usize) -> Shortlist {
        Shortlist { most, kept: Vec::new(), full: false }
    }

    /// Lists a wait; `id` is only asked for if it may stay.
    pub(super) fn push(&mut self, mut candidate: Candidate, id: Option<&str>) {
        if self.most == 0 || (self.full && candidate.rank(&self.kept[self.most - 1]) == Ordering::Greater) {
            return;
        }
        candidate.id = id.map(Box::from);
        self.kept.push(candidate);
        if self.kept.len() >= 2 * self.most {
            self.cut();
        }
    }

    fn cut(&mut self) {
        self.kept.sort_by(Candidate::order);
        self.kept.truncate(self.most);
        self.full = self.kept.len() == self.most;
    }

    pub(super) fn merge(&mut self, other: Shortlist) {
        self.kept.extend(other.kept);
        self.cut();
    }

    /// The list, the most urgent first.
    pub(super) fn finish(mut self) -> Vec<Candidate> {
        if self.most > 0 {
            self.cut();
        }
        self.kept
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn candidate(verdict: Verdict, urgency: f64) -> Candidate {
        let (stream, id, attempt, count, at) = (0, None, 1, 1, None);
        Candidate { verdict, urgency, age: urgency.abs(), stream, id, attempt, count, at }
    }

    #[test]
    fn a_shortlist_is_the_same_for_any_order() {
        let all: Vec<Candidate> = (0..500u32)
            .map(|i| {
                let verdict = [Verdict::Unknown, Verdict::Hold, Verdict::LetGo][i as usize % 3];
                candidate(verdict, f64::from(i * 7_919 % 1_000))
            })
            .collect();
        let list = |order: &mut dyn Iterator<Item = &Candidate>| {
            let (mut one, mut two) = (Shortlist::new(10), Shortlist::new(10));
            for (i, c) in order.enumerate() {
                if i % 3 == 0 { &mut one } else { &mut two }.push(c.clone(), None);
            }
            one.merge(two);
            one.finish().iter().map(|c| (c.verdict, c.urgency)).collect::<Vec<_>>()
        };
        let forward = list(&mut all.iter());
        assert_eq!(forward.len(), 10);
        assert!(forward.iter().all(|(v, _)| *v == Verdict::LetGo));
        assert!(forward.windows(2).all(|w| w[0].1 >= w[1].1));
        assert_eq!(forward, list(&mut all.iter().rev()));
        assert!(Shortlist::new(0).finish().is_empty());
    }
}
