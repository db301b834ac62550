//! A multiset of ages in bounded memory: exact while it holds few distinct values, an HDR histogram after.
//!
//! Which of the two it is depends on the multiset alone, never on the order of arrival, so that merging is
//! associative and commutative to the last bit.

use hdrhistogram::{Counter, Histogram};

/// Distinct ages kept exactly, each 16 bytes: about what a histogram of three digits takes (64 KiB).
pub const EXACT_AGES: usize = 4096;

/// Ages that wait to be grouped, each 8 bytes: as large as a histogram too, and so many more than [`EXACT_AGES`] that many
/// distinct ones show at the first look.
const MOST_LOOSE: usize = 2 * EXACT_AGES;

/// Significant decimal digits of the histogram: bins at most 0.1% wide.
pub(super) const DIGITS: u8 = 3;

/// Ticks per second of the histogram: 1 µs.
pub(super) const TICKS: f64 = 1e6;

/// Counted ages, s. Empty costs one word.
#[derive(Clone, Debug, Default)]
pub struct Ages(pub(super) Option<Box<Store>>);

#[derive(Clone, Debug)]
pub(super) enum Store {
    /// `grouped` is sorted and distinct, at most [`EXACT_AGES`] long; `loose` waits to be grouped, each counting 1.
    Few {
        grouped: Vec<(f64, u64)>,
        loose: Vec<f64>,
    },
    Narrow(Histogram<u32>),
    Wide(Histogram<u64>),
}

/// Ages known to lie in `[low, high]`, with their count; exact when `low == high`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Bin {
    /// Lower edge, s.
    pub low: f64,
    /// Upper edge, s.
    pub high: f64,
    /// How many.
    pub count: u64,
}

impl Ages {
    /// Adds `count` waits of one age (s; a [`crate::wait::Wait`] has checked it).
    #[inline]
    pub fn add(&mut self, age: f64, count: u64) {
        let store =
            self.0.get_or_insert_with(|| Box::new(Store::Few { grouped: Vec::new(), loose: Vec::new() }));
        match &mut **store {
            Store::Few { loose, .. } if count == 1 => {
                loose.push(age);
                if loose.len() >= MOST_LOOSE {
                    store.settle();
                }
            }
            Store::Few { grouped, .. } => {
                match grouped.binary_search_by(|(a, _)| a.total_cmp(&age)) {
                    Ok(i) => grouped[i].1 = grouped[i].1.saturating_add(count),
                    Err(i) => grouped.insert(i, (age, count)),
                }
                if grouped.len() > EXACT_AGES {
                    store.settle();
                }
            }
            _ => store.record(ticks(age), count),
        }
    }

    /// Adds all of `other`.
    pub fn merge(&mut self, other: &Ages) {
        let Some(theirs) = other.0.as_deref() else { return };
        let Some(mine) = self.0.as_deref_mut() else {
            self.0 = other.0.clone();
            return;
        };
        match (&mut *mine, theirs) {
            // Two histograms of one counter add up array to array. Neither can fail: they resize by themselves.
            (Store::Narrow(h), Store::Narrow(other))
                if h.len().saturating_add(other.len()) <= u64::from(u32::MAX) =>
            {
                let _ = h.add(other);
            }
            (Store::Wide(h), Store::Wide(other)) => {
                let _ = h.add(other);
            }
            (_, Store::Narrow(other)) => mine.record_all(other),
            (_, Store::Wide(other)) => mine.record_all(other),
            (_, Store::Few { grouped, loose }) => {
                for &(age, count) in grouped {
                    self.add(age, count);
                }
                for &age in loose {
                    self.add(age, 1);
                }
            }
        }
    }

    /// The ages grouped, in increasing order.
    pub fn bins(&self) -> Vec<Bin> {
        let Some(store) = self.0.as_deref() else { return Vec::new() };
        match store.settled().as_ref() {
            Store::Few { grouped, .. } => {
                grouped.iter().map(|&(age, count)| Bin { low: age, high: age, count }).collect()
            }
            Store::Narrow(h) => histogram_bins(h),
            Store::Wide(h) => histogram_bins(h),
        }
    }

    /// How many ages it holds.
    pub fn count(&self) -> u64 {
        match self.0.as_deref() {
            None => 0,
            Some(Store::Few { grouped, loose }) => {
                grouped.iter().fold(loose.len() as u64, |n, (_, c)| n.saturating_add(*c))
            }
            Some(Store::Narrow(h)) => h.len(),
            Some(Store::Wide(h)) => h.len(),
        }
    }

    /// Whether it holds nothing.
    pub fn is_empty(&self) -> bool {
        self.0.is_none()
    }
}

/// What is left of one multiset of bins without the other, and the other way round: equal ages cancel one by one. Ages
/// are compared exactly while both are kept so, else by the histogram's bins.
pub(super) fn less(mine: Vec<Bin>, theirs: Vec<Bin>) -> (Vec<Bin>, Vec<Bin>) {
    if mine.is_empty() || theirs.is_empty() {
        return (mine, theirs);
    }
    let (mut mine, mut theirs) = alike(mine, theirs);
    let (mut i, mut j) = (0, 0);
    while i < mine.len() && j < theirs.len() {
        match mine[i].low.total_cmp(&theirs[j].low) {
            std::cmp::Ordering::Less => i += 1,
            std::cmp::Ordering::Greater => j += 1,
            std::cmp::Ordering::Equal => {
                let both = mine[i].count.min(theirs[j].count);
                mine[i].count -= both;
                theirs[j].count -= both;
                (i, j) = (i + 1, j + 1);
            }
        }
    }
    mine.retain(|b| b.count > 0);
    theirs.retain(|b| b.count > 0);
    (mine, theirs)
}

/// Equal contents, however they came together.
impl PartialEq for Ages {
    fn eq(&self, other: &Ages) -> bool {
        self.bins() == other.bins()
    }
}

impl Store {
    /// Groups what is loose; becomes a histogram when there are too many distinct ages.
    fn settle(&mut self) {
        let Store::Few { grouped, loose } = self else { return };
        if !surely_many(grouped.iter().map(|(age, _)| age).chain(loose.iter())) {
            *grouped = group(grouped, loose);
            loose.clear();
        }
        if grouped.len() + loose.len() > EXACT_AGES {
            self.widen();
        }
    }

    /// Becomes a histogram, if it is none.
    fn widen(&mut self) {
        let Store::Few { grouped, loose } = self else { return };
        let (grouped, loose) = (std::mem::take(grouped), std::mem::take(loose));
        let Some(histogram) = new_histogram::<u32>() else { return };
        *self = Store::Narrow(histogram);
        for (age, count) in grouped.into_iter().chain(loose.into_iter().map(|age| (age, 1))) {
            self.record(ticks(age), count);
        }
    }

    pub(super) fn settled(&self) -> std::borrow::Cow<'_, Store> {
        match self {
            Store::Few { loose, .. } if !loose.is_empty() => {
                let mut copy = self.clone();
                copy.settle();
                std::borrow::Cow::Owned(copy)
            }
            _ => std::borrow::Cow::Borrowed(self),
        }
    }

    #[inline]
    pub(super) fn record(&mut self, tick: u64, count: u64) {
        if let Store::Narrow(h) = self {
            // No counter can exceed the total, so 32 bits suffice while the total fits them.
            if h.len().saturating_add(count) <= u64::from(u32::MAX) {
                // Auto-resizing histograms refuse no value up to 2^63; ages are at most 1e16 ticks.
                let _ = h.record_n(tick, count as u32);
                return;
            }
            let Some(mut wide) = new_histogram::<u64>() else { return };
            for v in h.iter_recorded() {
                let _ = wide.record_n(v.value_iterated_to(), u64::from(v.count_at_value()));
            }
            *self = Store::Wide(wide);
        }
        match self {
            Store::Wide(h) => {
                let _ = h.record_n(tick, count);
            }
            // Only reached while growing out of the exact form.
            Store::Few { .. } | Store::Narrow(_) => {}
        }
    }

    fn record_all<C: Counter>(&mut self, other: &Histogram<C>) {
        self.widen();
        for v in other.iter_recorded() {
            self.record(v.value_iterated_to(), v.count_at_value().as_u64());
        }
    }
}

/// Whether more than [`EXACT_AGES`] of the ages are distinct, seen without sorting them. It errs towards "no": two ages may
/// share a place.
fn surely_many<'a>(ages: impl Iterator<Item = &'a f64>) -> bool {
    const PLACES: u32 = 17;
    let mut taken = [0u64; 1 << (PLACES - 6)];
    let mut distinct = 0;
    for age in ages {
        // Fibonacci hashing (Knuth, volume 3, section 6.4).
        let place = age.to_bits().wrapping_mul(0x9E37_79B9_7F4A_7C15) >> (64 - PLACES);
        let (word, bit) = (&mut taken[(place >> 6) as usize], 1 << (place & 63));
        distinct += usize::from(*word & bit == 0);
        *word |= bit;
    }
    distinct > EXACT_AGES
}

/// Joins loose ages to sorted, distinct ones.
fn group(grouped: &[(f64, u64)], loose: &mut [f64]) -> Vec<(f64, u64)> {
    // Above 0 numbers sort as their bits do.
    loose.sort_unstable_by_key(|age| age.to_bits());
    let mut joined: Vec<(f64, u64)> = Vec::with_capacity(grouped.len() + 64);
    let mut push = |age: f64, count: u64| match joined.last_mut() {
        Some((last, n)) if *last == age => *n = n.saturating_add(count),
        _ => joined.push((age, count)),
    };
    let mut left = grouped.iter().copied().peekable();
    for &age in loose.iter() {
        while let Some((a, c)) = left.next_if(|(a, _)| *a <= age) {
            push(a, c);
        }
        push(age, 1);
    }
    left.for_each(|(a, c)| push(a, c));
    joined
}

/// An auto-resizing histogram. Creation fails only for more than 5 digits.
fn new_histogram<C: Counter>() -> Option<Histogram<C>> {
    Histogram::new(DIGITS).ok()
}

fn histogram_bins<C: Counter>(h: &Histogram<C>) -> Vec<Bin> {
    h.iter_recorded()
        .map(|v| {
            let tick = v.value_iterated_to();
            Bin {
                low: (h.lowest_equivalent(tick) as f64 - 0.5) / TICKS,
                high: (h.highest_equivalent(tick) as f64 + 0.5) / TICKS,
                count: v.count_at_value().as_u64(),
            }
        })
        .collect()
}

/// Two lists in one form: where only one holds exact ages, those go into the bins of the histogram too. Else an exact
/// age would lie within a bin of the other.
pub(super) fn alike(one: Vec<Bin>, other: Vec<Bin>) -> (Vec<Bin>, Vec<Bin>) {
    if one.is_empty() || other.is_empty() || is_exact(&one) == is_exact(&other) {
        (one, other)
    } else {
        (binned(&one), binned(&other))
    }
}

fn is_exact(bins: &[Bin]) -> bool {
    bins.iter().all(|b| b.low == b.high)
}

/// Bins of the histogram that would hold these.
fn binned(bins: &[Bin]) -> Vec<Bin> {
    let Some(histogram) = new_histogram::<u32>() else { return Vec::new() };
    let mut store = Store::Narrow(histogram);
    for bin in bins {
        store.record(ticks(0.5 * (bin.low + bin.high)), bin.count);
    }
    Ages(Some(Box::new(store))).bins()
}

#[inline]
fn ticks(age: f64) -> u64 {
    let exact = age * TICKS;
    // Half up; a call of `round` would take longer than all else.
    let whole = exact as u64;
    (whole + u64::from(exact - whole as f64 >= 0.5)).max(1)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn of(ages: impl IntoIterator<Item = f64>) -> Ages {
        let mut all = Ages::default();
        ages.into_iter().for_each(|a| all.add(a, 1));
        all
    }

    #[test]
    fn exact_while_few_whatever_the_number() {
        let ages = of((0..100_000).map(|i| f64::from(i % 7) + 0.123_456_789));
        let bins = ages.bins();
        assert_eq!(bins.len(), 7);
        assert_eq!(bins[0], Bin { low: 0.123_456_789, high: 0.123_456_789, count: 14_286 });
        assert_eq!(ages.count(), 100_000);
    }

    #[test]
    fn a_histogram_when_many() {
        let ages = of((1..=20_000).map(|i| f64::from(i) * 1e-3));
        let bins = ages.bins();
        assert_eq!(bins.iter().map(|b| b.count).sum::<u64>(), 20_000);
        assert!(bins.iter().all(|b| b.high / b.low < 1.0015), "bins stay within three digits");
        assert!(bins.windows(2).all(|w| w[0].high <= w[1].low));
    }

    #[test]
    fn what_is_left_of_each() {
        let (left, right) = less(of([1.0, 2.0, 2.0, 3.0]).bins(), of([2.0, 3.0, 4.0]).bins());
        let ages = |bins: &[Bin]| bins.iter().map(|b| (b.low, b.count)).collect::<Vec<_>>();
        assert_eq!((ages(&left), ages(&right)), (vec![(1.0, 1), (2.0, 1)], vec![(4.0, 1)]));
        // A histogram against exact ages: by bins.
        let many = of((1..=6_000).map(|i| f64::from(i) * 1e-3));
        let few = of((1..=3_000).map(|i| f64::from(i) * 1e-3));
        let (left, right) = less(many.bins(), few.bins());
        assert_eq!(left.iter().map(|b| b.count).sum::<u64>(), 3_000);
        assert!(right.is_empty());
    }

    #[test]
    fn counts_beyond_32_bits() {
        let mut ages = of((1..=5_000).map(|i| f64::from(i) * 1e-3));
        ages.add(2.0, 1_000_000_000_000);
        ages.add(2.0, 1);
        assert_eq!(ages.count(), 1_000_000_005_001);
        let most = ages.bins().into_iter().map(|b| b.count).max();
        assert!(most >= Some(1_000_000_000_002));
    }
}
