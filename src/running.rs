//! Histograms of telemetry: counts of waits by bucket, over a time or since a start, and what came between two readings.
//!
//! A histogram that only grows (cumulative) is read again and again; the waits are the differences. A series that has
//! lost counts has begun anew. No I/O, no clock.

use crate::wait::{Ending, MAX_AGE, MAX_COUNT, Wait, WaitError};

/// What a wait of exactly 0 may have lasted, s: the step of clocks that count nanoseconds.
pub const CLOCK_STEP: f64 = 1e-9;

/// Most bounds of one histogram; the largest layouts in use have a few hundred.
pub const MAX_BOUNDS: usize = 10_000;

/// How far back a series may reach that is met for the first time and counted whole, s. Beyond, nothing says in which part
/// of that time its waits were, so that it is only a base for what follows.
pub const LONGEST_FIRST: f64 = 86_400.0;

/// How many waits were no longer than each bound, and how many there were.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Histogram {
    /// Strictly increasing, s, from 0 to [`MAX_AGE`]. Waits up to 0 are those of exactly 0.
    bounds: Vec<f64>,
    /// Never decreasing.
    upto: Vec<u64>,
    total: u64,
}

/// Why counts are not a histogram.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum HistogramError {
    /// Bounds that do not increase, or are not numbers.
    #[error("the bound {bound} does not lie above the one before it")]
    Order {
        /// The first such bound.
        bound: f64,
    },
    /// Counts below a bound that sink with the bound.
    #[error("fewer waits are counted up to {bound} than up to the bound before it")]
    Sinks {
        /// The first such bound, s.
        bound: f64,
    },
    /// A wait below 0.
    #[error("{count} waits are counted below 0")]
    Negative {
        /// How many.
        count: u64,
    },
    /// More waits than [`MAX_COUNT`].
    #[error("more than 1e15 waits")]
    Count,
    /// More bounds than [`MAX_BOUNDS`].
    #[error("it has {bounds} bounds, more than {MAX_BOUNDS}")]
    Bounds {
        /// How many.
        bounds: usize,
    },
}

impl Histogram {
    /// From the counts of buckets: bucket `i` holds the waits above bound `i - 1` and up to bound `i` (s), the last those
    /// above all bounds. Bounds below 0 may only stand under empty buckets; those above [`MAX_AGE`] are as good as none.
    ///
    /// # Errors
    /// [`HistogramError`].
    pub fn from_buckets(
        bounds: Vec<f64>,
        counts: impl IntoIterator<Item = u64>,
    ) -> Result<Histogram, HistogramError> {
        let mut upto = 0u64;
        let mut sums = Vec::with_capacity(bounds.len() + 1);
        for count in counts {
            upto = upto.checked_add(count).ok_or(HistogramError::Count)?;
            sums.push(upto);
        }
        Histogram::from_sums(bounds, sums, upto)
    }

    /// From how many waits were no longer than each bound (s), and how many there were. Fewer sums than bounds: the rest
    /// are the total.
    ///
    /// # Errors
    /// [`HistogramError`].
    pub fn from_sums(
        mut bounds: Vec<f64>,
        mut sums: Vec<u64>,
        total: u64,
    ) -> Result<Histogram, HistogramError> {
        if bounds.len() > MAX_BOUNDS {
            return Err(HistogramError::Bounds { bounds: bounds.len() });
        }
        if total > MAX_COUNT {
            return Err(HistogramError::Count);
        }
        sums.resize(bounds.len(), total);
        let (mut last, mut before) = (f64::NEG_INFINITY, 0);
        for (&bound, &sum) in bounds.iter().zip(&sums) {
            if bound.is_nan() || bound <= last {
                return Err(HistogramError::Order { bound });
            }
            if sum < before || sum > total {
                return Err(HistogramError::Sinks { bound });
            }
            if bound < 0.0 && sum > 0 {
                return Err(HistogramError::Negative { count: sum });
            }
            (last, before) = (bound, sum);
        }
        // They increase, so that those which are ages stand together.
        let ages = bounds.partition_point(|bound| *bound <= MAX_AGE);
        let negative = bounds.partition_point(|bound| *bound < 0.0);
        bounds.truncate(ages);
        sums.truncate(ages);
        bounds.drain(..negative);
        sums.drain(..negative);
        Ok(Histogram { bounds, upto: sums, total })
    }

    /// How many waits there are.
    pub fn total(&self) -> u64 {
        self.total
    }

    /// The buckets that hold waits: above, up to (s; the last may be infinite), how many.
    pub fn buckets(&self) -> impl Iterator<Item = (f64, f64, u64)> + '_ {
        let mut from = (0.0, 0);
        (0..=self.bounds.len()).filter_map(move |place| {
            let upto = self.bounds.get(place).copied().unwrap_or(f64::INFINITY);
            let sum = self.upto.get(place).copied().unwrap_or(self.total);
            let (over, before) = std::mem::replace(&mut from, (upto, sum));
            (sum > before).then_some((over, upto, sum - before))
        })
    }

    /// The waits, a bucket each, in all else like the one given. A wait of exactly 0 lasted at most [`CLOCK_STEP`].
    pub fn waits(&self, like: Wait) -> impl Iterator<Item = Wait> + '_ {
        let least = self.bounds.iter().copied().find(|bound| *bound > 0.0).unwrap_or(CLOCK_STEP);
        self.buckets().map(move |(over, upto, count)| {
            let upto = if upto > 0.0 { upto } else { CLOCK_STEP.min(least) };
            like.in_bucket(over, upto, count)
        })
    }

    /// How many waits were no longer than `bound`, where that can be told: at a bound, or inside a bucket that is empty.
    fn at(&self, bound: f64) -> Option<u64> {
        let place = self.bounds.partition_point(|b| *b < bound);
        let before = place.checked_sub(1).and_then(|i| self.upto.get(i)).copied().unwrap_or(0);
        let after = self.upto.get(place).copied().unwrap_or(self.total);
        let is_bound = self.bounds.get(place) == Some(&bound);
        (is_bound || before == after).then_some(after)
    }

    /// What has come since an earlier reading of the same series, on the bounds that both can tell; `None` if counts
    /// have gone back, so that the series has begun anew.
    pub fn since(&self, earlier: &Histogram) -> Option<Histogram> {
        let total = self.total.checked_sub(earlier.total)?;
        let mut all: Vec<f64> = self.bounds.iter().chain(&earlier.bounds).copied().collect();
        all.sort_by(f64::total_cmp);
        all.dedup();
        let mut made = Histogram { bounds: Vec::new(), upto: Vec::new(), total };
        let mut before = 0;
        for bound in all {
            let (Some(now), Some(then)) = (self.at(bound), earlier.at(bound)) else { continue };
            let sum = now.checked_sub(then)?;
            if sum < before || sum > total {
                return None;
            }
            before = sum;
            made.bounds.push(bound);
            made.upto.push(sum);
        }
        Some(made)
    }

    fn encode(&self, bytes: &mut Vec<u8>) {
        bytes.extend(self.total.to_le_bytes());
        for (bound, sum) in self.bounds.iter().zip(&self.upto) {
            bytes.extend(bound.to_bits().to_le_bytes());
            bytes.extend(sum.to_le_bytes());
        }
    }

    fn decode(bytes: &[u8]) -> Option<Histogram> {
        let (total, rest) = bytes.split_first_chunk()?;
        let (pairs, []) = rest.as_chunks::<16>() else { return None };
        let (mut bounds, mut sums) = (Vec::with_capacity(pairs.len()), Vec::with_capacity(pairs.len()));
        for pair in pairs {
            let (bound, sum) = pair.split_first_chunk::<8>()?;
            bounds.push(f64::from_bits(u64::from_le_bytes(*bound)));
            sums.push(u64::from_le_bytes(*sum.first_chunk()?));
        }
        Histogram::from_sums(bounds, sums, u64::from_le_bytes(*total)).ok()
    }
}

/// What tells a series from all others: a digest of its labels, its name, where it comes from, and when it started if that is
/// known, so that two writers under one name are two series.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct SeriesKey(pub [u8; 16]);

/// One reading of a histogram that only grows.
#[derive(Clone, Debug, PartialEq)]
pub struct Running {
    /// The stream that its waits belong to.
    pub stream: Box<str>,
    /// How its waits ended.
    pub ending: Ending,
    /// Which attempt they were, from 1.
    pub attempt: u32,
    /// Which series.
    pub key: SeriesKey,
    /// When it was read, Unix seconds, where that is known.
    pub at: Option<f64>,
    /// When it began at 0, Unix seconds, where that is known.
    pub started: Option<f64>,
    /// Whether all that it holds is counted where the series is met for the first time. It is only a base otherwise.
    pub counts_at_first: bool,
    /// Since its start.
    pub histogram: Histogram,
}

/// What is kept of a series from one reading to the next.
#[derive(Clone, Debug, PartialEq)]
pub struct Mark {
    /// When it was read last, Unix seconds.
    pub at: Option<f64>,
    started: Option<f64>,
    histogram: Histogram,
}

/// What a reading brings.
#[derive(Clone, Debug, PartialEq)]
pub struct Growth {
    /// The waits that are new; `None` where the reading is not newer than the last.
    pub counts: Option<Histogram>,
    /// Whether the series has begun anew.
    pub reset: bool,
}

impl Running {
    /// The mark that this reading leaves.
    pub fn mark(&self) -> Mark {
        Mark { at: self.at, started: self.started, histogram: self.histogram.clone() }
    }

    /// What is new since the last reading, if there was one.
    pub fn growth(&self, last: Option<&Mark>) -> Growth {
        let Some(last) = last else {
            let counts = self.counts_at_first.then(|| self.histogram.clone());
            return Growth { counts: Some(counts.unwrap_or_default()), reset: false };
        };
        if self.at.zip(last.at).is_some_and(|(at, last)| at <= last) {
            return Growth { counts: None, reset: false };
        }
        let restarted = self.started.zip(last.started).is_some_and(|(started, last)| started > last);
        match self.histogram.since(&last.histogram) {
            Some(counts) if !restarted => Growth { counts: Some(counts), reset: false },
            _ => Growth { counts: Some(self.histogram.clone()), reset: true },
        }
    }

    /// Counts as waits that ended when the series was read.
    ///
    /// # Errors
    /// [`WaitError`] for a time or an attempt that no wait has.
    pub fn waits<'h>(
        &self,
        counts: &'h Histogram,
    ) -> Result<impl Iterator<Item = Wait> + use<'h>, WaitError> {
        let like = Wait::between(0.0, f64::INFINITY, self.ending)?.with_attempt(self.attempt)?;
        let like = self.at.map_or(Ok(like), |at| like.with_at(at))?;
        Ok(counts.waits(like))
    }
}

impl Mark {
    /// As bytes: when it was read and when it began (NaN: not known), the total, then each bound and how many waits were no
    /// longer; little-endian, 8 bytes each.
    pub fn encode(&self) -> Vec<u8> {
        let mut bytes = Vec::with_capacity(24 + 16 * self.histogram.bounds.len());
        for time in [self.at, self.started] {
            bytes.extend(time.unwrap_or(f64::NAN).to_bits().to_le_bytes());
        }
        self.histogram.encode(&mut bytes);
        bytes
    }

    /// The inverse of [`Mark::encode`]; `None` for anything else.
    pub fn decode(bytes: &[u8]) -> Option<Mark> {
        let (at, rest) = bytes.split_first_chunk()?;
        let (started, rest) = rest.split_first_chunk()?;
        let time = |bytes: &[u8; 8]| {
            Some(f64::from_bits(u64::from_le_bytes(*bytes))).filter(|time| time.is_finite())
        };
        Some(Mark { at: time(at), started: time(started), histogram: Histogram::decode(rest)? })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn made(bounds: &[f64], counts: &[u64]) -> Histogram {
        Histogram::from_buckets(bounds.to_vec(), counts.iter().copied()).unwrap()
    }

    fn running(at: f64, histogram: Histogram) -> Running {
        let key = SeriesKey([0; 16]);
        let ending = Ending::Done;
        let at = Some(at);
        Running {
            stream: "s".into(),
            ending,
            attempt: 1,
            key,
            at,
            started: None,
            counts_at_first: false,
            histogram,
        }
    }

    #[test]
    fn differences_on_one_layout_and_on_a_changed_one() {
        let then = made(&[1.0, 2.0, 4.0], &[1, 2, 3, 0]);
        let now = made(&[1.0, 2.0, 4.0], &[2, 2, 5, 1]);
        let buckets = |h: &Histogram| h.buckets().collect::<Vec<_>>();
        let new = now.since(&then).unwrap();
        assert_eq!(buckets(&new), [(0.0, 1.0, 1), (2.0, 4.0, 2), (4.0, f64::INFINITY, 1)]);
        // A layout that has lost a bound and gained another: what was up to 3 then is not known, so they are joined.
        let other = made(&[1.0, 3.0, 4.0], &[2, 4, 5, 1]);
        let new = other.since(&then).unwrap();
        assert_eq!(buckets(&new), [(0.0, 1.0, 1), (1.0, 4.0, 4), (4.0, f64::INFINITY, 1)]);
        // Where the old one had nothing, a new bound is known.
        let new = made(&[1.0, 2.0, 4.0, 8.0], &[1, 2, 3, 5, 0]).since(&then).unwrap();
        assert_eq!(buckets(&new), [(4.0, 8.0, 5)]);
    }

    #[test]
    fn a_series_begins_is_read_again_and_begins_anew() {
        let first = running(10.0, made(&[1.0], &[3, 1]));
        assert_eq!(first.growth(None).counts.unwrap().total(), 0);
        let mark = Mark::decode(&first.mark().encode()).unwrap();
        assert_eq!(mark, first.mark());
        let later = running(20.0, made(&[1.0], &[5, 1]));
        assert_eq!(later.growth(Some(&mark)).counts.unwrap().total(), 2);
        assert_eq!(first.growth(Some(&later.mark())).counts, None, "older than the last");
        let anew = running(30.0, made(&[1.0], &[4, 0])).growth(Some(&later.mark()));
        assert!(anew.reset && anew.counts.unwrap().total() == 4);
        // It has grown beyond what it was, but since a later start.
        let begun =
            |at, started, count| Running { started: Some(started), ..running(at, made(&[1.0], &[count, 0])) };
        let anew = begun(20.0, 15.0, 9).growth(Some(&begun(10.0, 5.0, 4).mark()));
        assert!(anew.reset && anew.counts.unwrap().total() == 9);
    }

    #[test]
    fn what_is_no_histogram() {
        let no = |bounds: &[f64], counts: &[u64]| {
            Histogram::from_buckets(bounds.to_vec(), counts.iter().copied()).unwrap_err()
        };
        assert!(matches!(no(&[2.0, 2.0], &[1, 1, 1]), HistogramError::Order { .. }));
        assert!(matches!(no(&[f64::NAN], &[1, 1]), HistogramError::Order { .. }));
        assert!(matches!(no(&[-1.0, 1.0], &[1, 1, 0]), HistogramError::Negative { count: 1 }));
        assert_eq!(no(&[1.0], &[u64::MAX, 1]), HistogramError::Count);
        assert_eq!(no(&[1.0], &[1 << 63, 0]), HistogramError::Count);
        assert!(matches!(
            Histogram::from_sums(vec![1.0, 2.0], vec![3, 2], 5),
            Err(HistogramError::Sinks { .. })
        ));
        assert!(matches!(Histogram::from_sums(vec![1.0], vec![6], 5), Err(HistogramError::Sinks { .. })));
        // The usual layout of one open SDK begins at 0: what lies there was exactly 0.
        let zero = made(&[0.0, 5.0], &[2, 1, 0]);
        let like = Wait::new(1.0, Ending::Done).unwrap();
        let waits: Vec<Wait> = zero.waits(like).collect();
        assert_eq!(waits[0], Wait::between(0.0, CLOCK_STEP, Ending::Done).unwrap().with_count(2).unwrap());
        // Beyond the largest age a bound says nothing.
        assert_eq!(made(&[1.0, 1e300], &[0, 0, 1]).buckets().last(), Some((1.0, f64::INFINITY, 1)));
    }

    proptest! {
        /// Readings of one series, whatever their layouts, add up to its last reading.
        #[test]
        fn differences_add_up(
            steps in prop::collection::vec((prop::collection::btree_set(1u32..40, 1..8), prop::collection::vec(0u64..50, 41)), 1..6)
        ) {
            let mut fine = [0u64; 41];
            let (mut last, mut sum) = (None, 0);
            for (i, (bounds, more)) in steps.iter().enumerate() {
                for (count, more) in fine.iter_mut().zip(more) {
                    *count += more;
                }
                let bounds: Vec<f64> = bounds.iter().map(|b| f64::from(*b)).collect();
                let sums: Vec<u64> = bounds.iter().map(|b| fine[..*b as usize].iter().sum()).collect();
                let whole = Histogram::from_sums(bounds, sums, fine.iter().sum()).unwrap();
                let read = Running { counts_at_first: true, ..running(1.0 + i as f64, whole) };
                let growth = read.growth(last.as_ref());
                prop_assert!(!growth.reset);
                let counts = growth.counts.unwrap();
                let buckets: u64 = counts.buckets().map(|b| b.2).sum();
                prop_assert_eq!(buckets, counts.total());
                sum += counts.total();
                last = Some(read.mark());
            }
            prop_assert_eq!(sum, fine.iter().sum::<u64>());
        }

        #[test]
        fn bytes_of_a_mark_do_not_panic(bytes in prop::collection::vec(any::<u8>(), 0..200)) {
            let _ = Mark::decode(&bytes);
        }
    }
}
