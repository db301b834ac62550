//! Waits longer than a period, in pieces: so that any union of periods has the right waits at risk at every age.
//!
//! A wait that crosses from one period to the next leaves the first by carrying over at the age it has there and enters
//! the second at that same age. Where both periods are in a window the two cancel; where only the second is, what is
//! left is a wait that joined the risk set when the window opened (left truncation, METHODS.md section 2). Waits shorter
//! than a period need no splitting: what they lack is less than a period's edge.

use super::Tally;
use crate::wait::{Age, Wait};

/// Length of the periods between which long waits are carried over, s.
pub(crate) const DAY: f64 = 86_400.0;

/// The tallies of a stream by period; a period lies within one day (UTC).
pub(crate) trait Periods {
    /// The tally of the last period of a day, days since 1970-01-01.
    fn closing(&mut self, day: i32) -> &mut Tally;
    /// The tally of the first period of a day.
    fn opening(&mut self, day: i32) -> &mut Tally;
    /// The tally of the period in which a time lies, Unix seconds.
    fn during(&mut self, at: f64) -> &mut Tally;
}

/// Counts a wait that ended or was last seen at `at`, its own time. One that spans days also leaves and enters those
/// before.
#[inline]
pub(crate) fn file(wait: &Wait, at: f64, periods: &mut impl Periods) {
    match wait.age() {
        Age::Exact(age) if age >= DAY => file_long(wait, at, periods),
        _ => periods.during(at).add(wait),
    }
}

fn file_long(wait: &Wait, at: f64, periods: &mut impl Periods) {
    periods.during(at).end(wait);
    let mut first = None;
    for crossing in crossings(wait, DAY) {
        let into = crossing.into as i32;
        periods.opening(into).enter(wait, crossing.age);
        periods.closing(into - 1).carry(wait, crossing.age);
        first = Some(into - 1);
    }
    if wait.entered() > 0.0 {
        let began = match first {
            Some(day) => periods.closing(day),
            None => periods.during(at),
        };
        began.enter(wait, wait.entered());
    }
}

/// Pieces of one wait at most: beyond it the wait enters at the age it had so many periods before its end.
const MOST_PIECES: i64 = 400;

/// A wait's passage from one period to the next.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Crossing {
    /// Number of the period that it enters; it leaves the one before.
    into: i64,
    /// The age it has there, s.
    age: f64,
}

/// Where a dated wait of an exact age of at least `period` s crossed from one period to the next while it was watched,
/// latest first; nothing for any other wait.
fn crossings(wait: &Wait, period: f64) -> impl Iterator<Item = Crossing> {
    let (age, end) = match (wait.age(), wait.at()) {
        (Age::Exact(age), Some(at)) if age >= period => (age, at),
        _ => (0.0, 0.0),
    };
    let last = (end / period).floor() as i64;
    let entered = wait.entered();
    (0..MOST_PIECES)
        .map(move |back| Crossing { into: last - back, age: age - (end - (last - back) as f64 * period) })
        .take_while(move |crossing| crossing.age > entered && crossing.age > 0.0)
        // At the very end of a wait there is nothing left to enter.
        .filter(move |crossing| crossing.age < age)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::Ending;

    fn wait(age: f64, entered: f64, at: f64) -> Wait {
        let wait = Wait::new(age, Ending::Done).unwrap().with_at(at).unwrap();
        wait.with_entered(entered).unwrap()
    }

    #[test]
    fn crosses_each_boundary_once() {
        // From 7.5 to 10.25, periods of 1: it crosses at 8, 9 and 10.
        let found: Vec<Crossing> = crossings(&wait(2.75, 0.0, 10.25), 1.0).collect();
        let expected = [(10, 2.5), (9, 1.5), (8, 0.5)].map(|(into, age)| Crossing { into, age });
        assert_eq!(found, expected);
        // Watched from age 1 on, that is from 8.5.
        assert_eq!(crossings(&wait(2.75, 1.0, 10.25), 1.0).count(), 2);
        assert_eq!(crossings(&wait(0.5, 0.0, 10.25), 1.0).count(), 0);
        assert!(crossings(&wait(1e6, 0.0, 2e6), 1.0).count() as i64 <= MOST_PIECES);
        // It ends where a period ends.
        assert_eq!(crossings(&wait(2.0, 0.0, 10.0), 1.0).count(), 1);
    }
}
