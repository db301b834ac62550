//! Waits as a replay keeps them: counted by stream and day, once as they were and once as the timer of RFC 6298 would
//! have ended them, for which alone the order counts. Memory does not grow with their number.

use std::collections::HashMap;

use foldhash::fast::RandomState;

use crate::stopping::RetransmissionTimer;
use crate::tally::{Day, Days, Tally};
use crate::wait::{Age, Ending, MAX_AGE, StreamError, Wait, check_stream};

/// Waits without a time are kept in between half as many and as many parts as this, all but the last equal.
const MOST_PARTS: usize = 56;
/// A record may stand for many equal waits; after so many the timer hardly moves.
const SETTLED: u64 = 64;

/// Every stream of a run, in the order in which its waits came.
#[derive(Clone, Debug, Default)]
pub struct Log {
    streams: HashMap<String, Course, RandomState>,
}

impl Log {
    /// Counts one wait. The order in which waits come is the order in which RFC 6298 meets them, and by which waits
    /// without a time are parted.
    ///
    /// # Errors
    /// [`StreamError`] if the name is new and not allowed; nothing is counted then.
    pub fn add(&mut self, stream: &str, wait: &Wait) -> Result<(), StreamError> {
        match self.streams.get_mut(stream) {
            Some(course) => course.add(wait),
            None => {
                check_stream(stream)?;
                self.streams.entry(stream.to_owned()).or_default().add(wait);
            }
        }
        Ok(())
    }

    /// The streams, in the order of their names.
    pub fn names(&self) -> Vec<&str> {
        let mut names: Vec<&str> = self.streams.keys().map(String::as_str).collect();
        names.sort_unstable();
        names
    }

    /// One stream.
    pub(super) fn stream(&self, name: &str) -> Option<&Course> {
        self.streams.get(name)
    }

    /// The newest time in any wait, Unix seconds.
    pub(super) fn latest(&self) -> Option<f64> {
        self.streams.values().map(|course| course.latest).filter(|t| t.is_finite()).reduce(f64::max)
    }

    /// The last day of all, if any wait carries a time.
    pub(super) fn newest(&self) -> Option<i32> {
        self.streams.values().filter_map(|course| course.days.last_day()).max()
    }
}

/// One stream.
#[derive(Clone, Debug)]
pub(super) struct Course {
    /// Waits with a time, as they were.
    pub(super) days: Days,
    /// The same as RFC 6298 would have ended them.
    pub(super) timed: Days,
    /// Waits without a time.
    pub(super) parts: Parts,
    timer: RetransmissionTimer,
    latest: f64,
    /// Waits that ended before one that came before them.
    pub(super) backwards: u64,
    /// Waits with a time, first attempts and retries.
    pub(super) dated: u64,
}

impl Default for Course {
    fn default() -> Course {
        Course {
            days: Days::default(),
            timed: Days::default(),
            parts: Parts::default(),
            // Waits are of any length: neither the second nor the minute of the standard is right for them.
            timer: RetransmissionTimer::new(0.0).with_bounds(0.0, MAX_AGE),
            latest: f64::NEG_INFINITY,
            backwards: 0,
            dated: 0,
        }
    }
}

impl Course {
    fn add(&mut self, wait: &Wait) {
        match wait.at() {
            Some(at) => {
                self.days.add(wait);
                self.dated = self.dated.saturating_add(wait.count());
                if at < self.latest {
                    self.backwards = self.backwards.saturating_add(wait.count());
                }
                self.latest = self.latest.max(at);
            }
            None => self.parts.next().0.add(wait),
        }
        // Only of attempts that were not repeated is it known what they measure (Karn's rule, section 3).
        if wait.attempt() == 1 {
            self.time(wait);
        }
    }

    /// Meets the timer.
    fn time(&mut self, wait: &Wait) {
        let one_by_one = wait.count().min(SETTLED);
        (0..one_by_one).for_each(|_| self.meet(wait, 1));
        if wait.count() > one_by_one {
            self.meet(wait, wait.count() - one_by_one);
        }
    }

    /// Meets `count` equal waits with the timeout as it is now.
    fn meet(&mut self, wait: &Wait, count: u64) {
        let timeout = self.timer.timeout();
        let age = match wait.age() {
            Age::Exact(age) => age,
            Age::Between { over, upto } if upto.is_finite() => 0.5 * (over + upto),
            Age::Between { over, .. } => over,
        };
        let (age, ending) = match wait.ending() {
            _ if age > timeout => {
                self.timer.back_off();
                (timeout, Ending::GaveUp)
            }
            Ending::Done => {
                self.timer.observe(age);
                (age, Ending::Done)
            }
            Ending::Failed => (age, Ending::Failed),
            // What would have come of it by the timeout was not seen.
            Ending::GaveUp | Ending::Waiting => (age, Ending::Waiting),
        };
        match met(wait, age, ending, count) {
            Some(met) if wait.at().is_some() => self.timed.add(&met),
            Some(met) => self.parts.last().1.add(&met),
            None => {}
        }
    }
}

/// The wait as it ended under the timer; nothing of one that was over before watching began.
fn met(wait: &Wait, age: f64, ending: Ending, count: u64) -> Option<Wait> {
    let whole = match wait.age() {
        Age::Exact(whole) => whole,
        Age::Between { over, .. } => over.max(age),
    };
    let met = Wait::new(age, ending).ok()?.with_count(count).ok()?;
    let met = if wait.entered() > 0.0 { met.with_entered(wait.entered()).ok()? } else { met };
    match wait.at() {
        // It ends sooner by what it is shorter.
        Some(at) => met.with_at(at - (whole - age)).ok(),
        None => Some(met),
    }
}

/// Waits in the order they came, in parts of equal numbers of records: as they were, and as the timer ended them.
#[derive(Clone, Debug)]
pub(super) struct Parts {
    size: u64,
    in_last: u64,
    parts: Vec<(Tally, Tally)>,
}

impl Default for Parts {
    fn default() -> Parts {
        Parts { size: 1, in_last: 0, parts: Vec::new() }
    }
}

impl Parts {
    /// The part into which the next record goes.
    fn next(&mut self) -> &mut (Tally, Tally) {
        if self.in_last == self.size || self.parts.is_empty() {
            if self.parts.len() == MOST_PARTS {
                self.halve();
            }
            if self.in_last == self.size || self.parts.is_empty() {
                self.parts.push(Default::default());
                self.in_last = 0;
            }
        }
        self.in_last += 1;
        self.last()
    }

    /// The part of the last record.
    fn last(&mut self) -> &mut (Tally, Tally) {
        if self.parts.is_empty() {
            self.parts.push(Default::default());
        }
        let last = self.parts.len() - 1;
        &mut self.parts[last]
    }

    /// Joins each two.
    fn halve(&mut self) {
        let parts = std::mem::take(&mut self.parts);
        let mut parts = parts.into_iter();
        while let Some((mut tally, mut timed)) = parts.next() {
            if let Some((more, more_timed)) = parts.next() {
                tally.merge(&more);
                timed.merge(&more_timed);
            }
            self.parts.push((tally, timed));
        }
        self.size *= 2;
        self.in_last = self.size;
    }

    /// Whether there is none.
    pub(super) fn is_empty(&self) -> bool {
        self.parts.is_empty()
    }

    /// The parts as if each were a day.
    pub(super) fn as_days(&self) -> (Days, Days) {
        let (mut days, mut timed) = (Days::default(), Days::default());
        for (number, (tally, of_timer)) in (0..).zip(&self.parts) {
            days.at(Day::Number(number)).merge(tally);
            timed.at(Day::Number(number)).merge(of_timer);
        }
        (days, timed)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn done(age: f64) -> Wait {
        Wait::new(age, Ending::Done).unwrap()
    }

    #[test]
    fn parts_are_equal_however_many_waits_come() {
        for n in [1u64, 40, 57, 1000, 4097] {
            let mut log = Log::default();
            for i in 0..n {
                log.add("a", &done(1.0 + i as f64 * 1e-6)).unwrap();
            }
            let (days, timed) = log.streams["a"].parts.as_days();
            let sizes: Vec<u64> = days.days().iter().map(|(_, t)| t.counts().iter().sum()).collect();
            assert_eq!(sizes.iter().sum::<u64>(), n);
            assert!(sizes.len() <= MOST_PARTS && (n < 56 || sizes.len() >= MOST_PARTS / 2), "{sizes:?}");
            let (last, whole) = sizes.split_last().unwrap();
            assert!(whole.iter().all(|size| *size == sizes[0]) && *last <= sizes[0], "{sizes:?}");
            assert_eq!(timed.whole().counts().iter().sum::<u64>(), n);
        }
    }

    /// RFC 6298, sections 2 and 5, reckoned by hand: before a measurement 1 s; then SRTT = R, RTTVAR = R/2, RTO = SRTT + 4
    /// RTTVAR; a timeout doubles it until the next measurement.
    #[test]
    fn the_timer_step_by_step() {
        let mut log = Log::default();
        for (age, ending) in [
            (3.0, Ending::Done),    // RTO 1: given up at 1; RTO 2
            (1.6, Ending::Done),    // done; SRTT 1.6, RTTVAR 0.8, RTO 4.8
            (2.4, Ending::Failed),  // failed; no measurement
            (0.8, Ending::Done),    // done; RTTVAR 0.75 0.8 + 0.25 0.8 = 0.8, SRTT 1.5, RTO 4.7
            (2.0, Ending::GaveUp),  // hidden from it at 2
            (9.0, Ending::Waiting), // given up at 4.7; RTO 9.4
            (9.2, Ending::Done),    // done
        ] {
            log.add("a", &Wait::new(age, ending).unwrap()).unwrap();
        }
        let (_, timed) = log.streams["a"].parts.as_days();
        let cells = timed.whole().first_attempts();
        let near = |a: f64, b: f64| (a - b).abs() < 1e-12;
        assert_eq!(cells.totals(), [3.0, 1.0, 2.0, 1.0]);
        assert!(near(cells.gave_up[0].age, 1.0) && near(cells.gave_up[1].age, 4.7), "{:?}", cells.gave_up);
        assert_eq!(cells.waiting[0].age, 2.0);
        // (2.3) with R' = 9.2: RTTVAR = 0.75 0.8 + 0.25 |1.5 - 9.2|, SRTT = 0.875 1.5 + 0.125 9.2.
        let rto = 0.875 * 1.5 + 0.125 * 9.2 + 4.0 * (0.75 * 0.8 + 0.25 * 7.7);
        assert!(near(log.streams["a"].timer.timeout(), rto));
        // A retry measures nothing.
        log.add("a", &done(50.0).with_attempt(2).unwrap()).unwrap();
        assert!(near(log.streams["a"].timer.timeout(), rto));
    }

    #[test]
    fn equal_waits_meet_the_timer_one_by_one() {
        let (mut one, mut many) = (Log::default(), Log::default());
        for i in 0..20 {
            let age = 0.5 + f64::from(i % 3);
            for _ in 0..40 {
                one.add("a", &done(age)).unwrap();
            }
            many.add("a", &done(age).with_count(40).unwrap()).unwrap();
        }
        let whole = |log: &Log| log.streams["a"].parts.as_days().1.whole().first_attempts();
        assert_eq!(whole(&one), whole(&many));
        assert_eq!(one.streams["a"].timer, many.streams["a"].timer);
    }

    #[test]
    fn times_that_run_backwards_are_counted() {
        let mut log = Log::default();
        for at in [10.0, 20.0, 15.0, 30.0] {
            log.add("a", &done(1.0).with_at(at).unwrap()).unwrap();
        }
        assert_eq!((log.streams["a"].backwards, log.newest()), (1, Some(0)));
        assert!(log.add("no good", &done(1.0)).is_err());
    }
}
