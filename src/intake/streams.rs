//! What is remembered of each stream while reading: that its name is sound, whether it is wanted, and the facts
//! that tell milliseconds from seconds.

use std::hash::{BuildHasher, Hasher};

use foldhash::fast::RandomState;
use hashbrown::HashTable;

use super::pace::{ClosedLoop, Pace};
use super::report::{Because, Suspicion};
use super::short::same;
use crate::glob::Glob;
use crate::wait::{Age, Ending, StreamError, Wait, check_stream};

/// Streams seen by one worker. Merging is exact and commutative.
#[derive(Debug, Default)]
pub(super) struct Streams {
    /// Where in `streams` a name is. Looked up for every line, hence the fast hash; it is seeded, so no writer of names
    /// can aim at it.
    places: HashTable<usize>,
    hash: RandomState,
    streams: Vec<Stream>,
    /// The number of the present block, from 1.
    block: u64,
}

#[derive(Debug)]
pub(super) struct Stream {
    pub(super) name: Box<str>,
    pub(super) wanted: bool,
    /// Ages of completions in whole seconds, from 1 s.
    whole: Ages,
    /// Ages of completions with a fraction of a second.
    broken: Ages,
    /// How many times have a fraction of a second, less those that have none.
    broken_times: i64,
    oldest: f64,
    newest: f64,
    pace: Pace,
}

/// Ages on a scale of powers of two: enough to tell thousandfold differences, and exact to add up.
#[derive(Clone, Copy, Debug, Default)]
struct Ages {
    number: u64,
    /// As they stand in a double, 1023 too large.
    exponents: u64,
}

impl Ages {
    /// The geometric mean, s, to about a tenth.
    fn typical(&self) -> f64 {
        // An exponent rounds the logarithm down by about half on average.
        (self.exponents as f64 / self.number as f64 - 1022.5).exp2()
    }
}

impl Streams {
    /// The number of the stream of that name, which is checked when first met.
    #[inline]
    pub(super) fn enter(&mut self, name: &str, selector: Option<&Glob>) -> Result<usize, StreamError> {
        match self.find(name) {
            Some(place) => Ok(place),
            None => {
                check_stream(name)?;
                let wanted = selector.is_none_or(|selector| selector.matches(name));
                Ok(self.add(Stream::new(name, wanted)))
            }
        }
    }

    /// A stream that was entered.
    #[inline]
    pub(super) fn at(&mut self, place: usize) -> &mut Stream {
        &mut self.streams[place]
    }

    #[inline]
    fn find(&self, name: &str) -> Option<usize> {
        let named = |&place: &usize| same(self.streams[place].name.as_bytes(), name.as_bytes());
        self.places.find(hash(&self.hash, name), named).copied()
    }

    /// Begins another block: its first record is no neighbour of the last.
    pub(super) fn begin_block(&mut self) {
        self.block += 1;
    }

    /// The number of the present block.
    pub(super) fn block(&self) -> u64 {
        self.block
    }

    /// Streams that look like closed loops, by name.
    pub(super) fn closed_loops(&self) -> Vec<ClosedLoop> {
        let paces = self.streams.iter().filter_map(|stream| stream.pace.finding(&stream.name));
        let mut found: Vec<_> = paces.collect();
        found.sort_by(|a, b| a.stream.cmp(&b.stream));
        found
    }

    /// The number of a stream that is checked and wanted.
    pub(super) fn place(&mut self, name: &str) -> usize {
        match self.find(name) {
            Some(place) => place,
            None => self.add(Stream::new(name, true)),
        }
    }

    #[cold]
    fn add(&mut self, stream: Stream) -> usize {
        let place = self.streams.len();
        let again = |&place: &usize| hash(&self.hash, &self.streams[place].name);
        self.places.insert_unique(hash(&self.hash, &stream.name), place, again);
        self.streams.push(stream);
        place
    }

    pub(super) fn absorb(&mut self, other: Streams) {
        for theirs in other.streams {
            match self.find(&theirs.name) {
                Some(place) => self.streams[place].absorb(&theirs),
                None => {
                    self.add(theirs);
                }
            }
        }
    }

    /// The oldest and the newest time seen in any stream, Unix seconds.
    pub(super) fn span(&self) -> Option<(f64, f64)> {
        let oldest = self.streams.iter().map(|stream| stream.oldest).fold(f64::INFINITY, f64::min);
        let newest = self.streams.iter().map(|stream| stream.newest).fold(f64::NEG_INFINITY, f64::max);
        (oldest <= newest).then_some((oldest, newest))
    }

    /// Streams whose ages look like milliseconds, by name.
    pub(super) fn suspicions(&self) -> Vec<Suspicion> {
        let mut found: Vec<_> = self.streams.iter().filter_map(Stream::suspicion).collect();
        found.sort_by(|a, b| a.stream.cmp(&b.stream));
        found
    }
}

#[inline]
fn hash(state: &RandomState, name: &str) -> u64 {
    let mut hasher = state.build_hasher();
    hasher.write(name.as_bytes());
    hasher.finish()
}

impl Stream {
    fn new(name: &str, wanted: bool) -> Stream {
        Stream {
            name: name.into(),
            wanted,
            whole: Ages::default(),
            broken: Ages::default(),
            broken_times: 0,
            oldest: f64::INFINITY,
            newest: f64::NEG_INFINITY,
            pace: Pace::default(),
        }
    }

    #[inline]
    pub(super) fn note_time(&mut self, at: f64) {
        self.broken_times += if is_whole(at) { -1 } else { 1 };
        // It is a number, of which nothing need be asked but which is less.
        if at < self.oldest {
            self.oldest = at;
        }
        if at > self.newest {
            self.newest = at;
        }
    }

    /// Notes a wait that is taken. `bare`: its age came as a number without a unit.
    #[inline(always)]
    pub(super) fn note(&mut self, wait: &Wait, block: u64, bare: bool) {
        self.pace.note(wait, block);
        if bare {
            self.note_age(wait);
        }
    }

    /// Notes an age given as a number without a unit. Only completions count: a time-out is often a whole number.
    #[inline]
    fn note_age(&mut self, wait: &Wait) {
        let (Age::Exact(age), Ending::Done) = (wait.age(), wait.ending()) else { return };
        let ages = if is_whole(age) { &mut self.whole } else { &mut self.broken };
        ages.number += 1;
        ages.exponents += age.to_bits() >> 52;
    }

    fn absorb(&mut self, other: &Stream) {
        for (mine, theirs) in [(&mut self.whole, other.whole), (&mut self.broken, other.broken)] {
            mine.number += theirs.number;
            mine.exponents += theirs.exponents;
        }
        self.broken_times += other.broken_times;
        self.oldest = self.oldest.min(other.oldest);
        self.newest = self.newest.max(other.newest);
        self.pace.absorb(&other.pace);
    }

    /// Milliseconds given as seconds are whole numbers, mostly from 10 to a minute's worth. Whole seconds of that
    /// size are common too (queues, jobs), so one more sign is asked for:
    /// times that are finer than the ages; or more waits open at once than any of the whole-second sources would
    /// have (number x age / span, Little's law); or other ages, with fractions, about a thousand times shorter.
    fn suspicion(&self) -> Option<Suspicion> {
        let ages = self.whole.number + self.broken.number;
        let typical = self.whole.typical();
        if self.whole.number < LEAST_AGES || !(10.0..60_000.0).contains(&typical) {
            return None;
        }
        let share = self.whole.number as f64 / ages as f64;
        let open = self.whole.number as f64 * typical / (self.newest - self.oldest);
        let because = if share >= 0.99 {
            if self.broken_times > 0 {
                Because::TimesAreFiner
            } else if open >= CROWD && open.is_finite() {
                Because::Crowded { open }
            } else {
                return None;
            }
        } else if share >= 0.05
            && self.broken.number >= LEAST_AGES
            && (250.0..4000.0).contains(&(typical / self.broken.typical()))
        {
            Because::OthersAreShorter { typical: self.broken.typical() }
        } else {
            return None;
        };
        Some(Suspicion { stream: self.name.to_string(), ages, whole: self.whole.number, typical, because })
    }
}

/// Fewest ages to found a suspicion on.
const LEAST_AGES: u64 = 50;

/// Waits of one stream open at once that call for a second look.
const CROWD: f64 = 1000.0;

/// Whether a number from 0 to 2^52, which no age and no time exceeds, is whole: between there and 2^53 only whole ones are.
#[inline]
fn is_whole(number: f64) -> bool {
    const ONLY_WHOLE: f64 = 4_503_599_627_370_496.0;
    number + ONLY_WHOLE - ONLY_WHOLE == number
}

#[cfg(test)]
mod tests {
    use super::*;

    fn suspicion(waits: impl Iterator<Item = (f64, f64)>) -> Option<Because> {
        let mut streams = Streams::default();
        for (age, at) in waits {
            let place = streams.enter("s", None).unwrap();
            let stream = streams.at(place);
            stream.note_time(at);
            stream.note_age(&Wait::new(age, Ending::Done).unwrap());
        }
        streams.suspicions().first().map(|suspicion| suspicion.because)
    }

    #[test]
    fn milliseconds_are_suspected_and_whole_seconds_are_not() {
        let number = |i: u32| f64::from(i);
        // Look-ups in whole milliseconds, times in milliseconds.
        let fine = (0..200).map(|i| (number(20 + i * 7 % 300), 1e9 + number(i) * 1.234));
        assert_eq!(suspicion(fine), Some(Because::TimesAreFiner));
        // The same, a hundred a second, times in seconds.
        let many = (0..20_000).map(|i| (number(20 + i * 7 % 300), 1e9 + (number(i) / 100.0).floor()));
        assert!(matches!(suspicion(many), Some(Because::Crowded { .. })));
        // Callers in a queue, whole seconds, one a minute.
        let callers = (0..2000).map(|i| (number(20 + i * 7 % 300), 1e9 + number(i) * 60.0));
        assert_eq!(suspicion(callers), None);
        // A part of the writers in seconds, the rest in milliseconds.
        let mixed = (0..2000).map(|i| {
            let milliseconds = number(20 + i * 7 % 300);
            (if i % 3 == 0 { milliseconds } else { milliseconds / 1000.0 }, 1e9 + number(i) * 60.0)
        });
        assert!(matches!(suspicion(mixed), Some(Because::OthersAreShorter { .. })));
        // Seconds with fractions.
        assert_eq!(suspicion((0..2000).map(|i| (number(i + 1) / 7.3, 1e9 + number(i) * 1.5))), None);
    }
}
