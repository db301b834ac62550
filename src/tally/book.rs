//! The tallies of many streams, filed by the UTC day in which a wait ended or was last seen (DESIGN: windows).

use std::collections::HashMap;

use foldhash::fast::RandomState;

use super::Tally;
use super::carry::{self, DAY, Periods};
use crate::wait::{StreamError, Wait, check_stream};

/// Days since 1970-01-01 UTC; waits without a time are filed apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Day {
    /// No `at` was given.
    Undated,
    /// Days since the epoch.
    Number(i32),
}

impl Day {
    /// The day of a Unix time in seconds.
    pub fn of(at: Option<f64>) -> Day {
        at.map_or(Day::Undated, |at| Day::Number((at / DAY).floor() as i32))
    }
}

/// Every stream of a one-shot command, or of one ledger read.
#[derive(Clone, Debug, Default)]
pub struct Book {
    /// Looked up for every wait, hence the fast hash; it is seeded, so no writer of names can aim at it.
    streams: HashMap<String, Days, RandomState>,
}

/// The tallies of one stream by day.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Days {
    /// Sorted by day.
    days: Vec<(Day, Tally)>,
}

impl Book {
    /// Counts one wait.
    ///
    /// # Errors
    /// [`StreamError`] if the name is new and not allowed; nothing is counted then.
    #[inline]
    pub fn add(&mut self, stream: &str, wait: &Wait) -> Result<(), StreamError> {
        match self.streams.get_mut(stream) {
            Some(days) => days.add(wait),
            None => {
                check_stream(stream)?;
                self.streams.entry(stream.to_owned()).or_default().add(wait);
            }
        }
        Ok(())
    }

    /// Adds all of `other`.
    pub fn merge(&mut self, other: Book) {
        if self.streams.is_empty() {
            self.streams = other.streams;
            return;
        }
        for (stream, days) in other.streams {
            match self.streams.get_mut(&stream) {
                Some(mine) => mine.merge(&days),
                None => {
                    self.streams.insert(stream, days);
                }
            }
        }
    }

    /// Files what was counted of a stream on a day.
    ///
    /// # Errors
    /// [`StreamError`] if the name is new and not allowed; nothing is filed then.
    pub fn merge_day(&mut self, stream: &str, day: Day, tally: &Tally) -> Result<(), StreamError> {
        if !self.streams.contains_key(stream) {
            check_stream(stream)?;
        }
        self.streams.entry(stream.to_owned()).or_default().merge_day(day, tally);
        Ok(())
    }

    /// Streams in the order of their names.
    pub fn streams(&self) -> Vec<(&str, &Days)> {
        let mut all: Vec<_> = self.streams.iter().map(|(name, days)| (name.as_str(), days)).collect();
        all.sort_unstable_by_key(|(name, _)| *name);
        all
    }

    /// One stream.
    pub fn stream(&self, name: &str) -> Option<&Days> {
        self.streams.get(name)
    }

    /// Whether nothing was counted.
    pub fn is_empty(&self) -> bool {
        self.streams.is_empty()
    }
}

/// Of streams by name; the names are the caller's to check.
impl FromIterator<(String, Days)> for Book {
    fn from_iter<I: IntoIterator<Item = (String, Days)>>(streams: I) -> Book {
        Book { streams: streams.into_iter().collect() }
    }
}

impl Days {
    /// Counts one wait under the day in which it ended; one that spans days also enters and leaves those before.
    #[inline]
    pub fn add(&mut self, wait: &Wait) {
        match wait.at() {
            Some(at) => carry::file(wait, at, self),
            None => self.at(Day::Undated).add(wait),
        }
    }

    /// The tally of a day, empty where it has none yet.
    #[inline]
    pub(crate) fn at(&mut self, day: Day) -> &mut Tally {
        // Records come roughly in order of time, so the day is nearly always the last.
        let i = match self.days.last() {
            Some((last, _)) if *last == day => self.days.len() - 1,
            _ => self.days.binary_search_by_key(&day, |(d, _)| *d).unwrap_or_else(|i| {
                self.days.insert(i, (day, Tally::default()));
                i
            }),
        };
        &mut self.days[i].1
    }

    /// Adds a tally to a day's.
    pub fn merge_day(&mut self, day: Day, tally: &Tally) {
        self.at(day).merge(tally);
    }

    /// Adds all of `other`.
    pub fn merge(&mut self, other: &Days) {
        for (day, tally) in &other.days {
            self.at(*day).merge(tally);
        }
    }

    /// The tallies with their days, sorted.
    pub fn days(&self) -> &[(Day, Tally)] {
        &self.days
    }

    /// Everything together.
    pub fn whole(&self) -> Tally {
        self.where_day(|_| true)
    }

    /// The days for which `keep` holds, together. Undated waits are asked about like the others.
    pub fn where_day(&self, keep: impl Fn(Day) -> bool) -> Tally {
        let mut sum = Tally::default();
        for (_, tally) in self.days.iter().filter(|(day, _)| keep(*day)) {
            sum.merge(tally);
        }
        sum
    }

    /// The days from `opening` on (days since the epoch) and everything undated: a window as a policy means it.
    pub fn since(&self, opening: i32) -> Tally {
        self.where_day(|day| match day {
            Day::Undated => true,
            Day::Number(n) => n >= opening,
        })
    }

    /// The last dated day, if any.
    pub fn last_day(&self) -> Option<i32> {
        match self.days.last() {
            Some((Day::Number(n), _)) => Some(*n),
            _ => None,
        }
    }
}

impl Periods for Days {
    fn closing(&mut self, day: i32) -> &mut Tally {
        self.at(Day::Number(day))
    }

    fn opening(&mut self, day: i32) -> &mut Tally {
        self.at(Day::Number(day))
    }

    #[inline]
    fn during(&mut self, at: f64) -> &mut Tally {
        self.at(Day::of(Some(at)))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::Ending;

    #[test]
    fn a_window_sees_long_waits_from_its_opening_on() {
        let at = |day: f64| day * DAY;
        let long =
            |days: f64, end: f64, ending| Wait::new(at(days), ending).unwrap().with_at(at(end)).unwrap();
        let mut days = Days::default();
        days.add(&long(5.0, 12.5, Ending::Done));
        days.add(&long(1.0, 20.0, Ending::Waiting));
        days.add(&Wait::new(7.0, Ending::Done).unwrap().with_at(at(9.9)).unwrap());
        // Begun on day 7.5: it had waited 2.5 days when the window opened on day 10.
        let window = days.since(10).first_attempts();
        let ages: Vec<(f64, f64)> = window.entries.iter().map(|m| (m.age / DAY, m.weight)).collect();
        assert_eq!(ages, [(2.5, 1.0)]);
        assert_eq!(window.totals(), [1.0, 0.0, 0.0, 1.0]);
        // All days together: entries and exits by carrying over cancel.
        let whole = days.whole().first_attempts();
        assert_eq!((whole.entries.len(), whole.totals()), (0, [2.0, 0.0, 0.0, 1.0]));
        // A window that closes on day 11: the long wait is open when last seen.
        let before = days.where_day(|d| d <= Day::Number(11)).first_attempts();
        assert_eq!(before.totals(), [1.0, 0.0, 0.0, 1.0]);
        assert_eq!(before.waiting[0].age, at(4.5));
    }

    #[test]
    fn days_split_and_join() {
        let mut book = Book::default();
        for day in [3.0, 1.0, 2.0, 1.5] {
            let wait = Wait::new(day, Ending::Done).unwrap().with_at(day * DAY).unwrap();
            book.add("a", &wait).unwrap();
        }
        book.add("a", &Wait::new(9.0, Ending::Waiting).unwrap()).unwrap();
        let days = book.stream("a").unwrap();
        assert_eq!(days.days().len(), 4);
        assert_eq!(days.last_day(), Some(3));
        assert_eq!(days.whole().counts().iter().sum::<u64>(), 5);
        assert_eq!(days.where_day(|d| d == Day::Number(1)).counts()[0], 2);
        assert!(book.add("no good", &Wait::new(1.0, Ending::Done).unwrap()).is_err());
        assert_eq!(book.streams().len(), 1);
    }
}
