//! A tally as waits again: fewer than were counted, but counting up to an equal tally.
//!
//! What a tally has forgotten is made up so that it does not matter. A histogram's bin becomes ages inside the bin, as
//! many distinct ones as it takes to make a histogram of them again; entries are tied to waits that are old enough.

use super::ages::{Store, TICKS};
use super::{Ages, EXACT_AGES, MOST_BUCKETS, Side, Tally};
use crate::wait::{Ending, MAX_AGE, MAX_COUNT, Wait, WaitError};

impl Tally {
    /// Waits that, counted, give an equal tally. At most some ten thousand, however many were counted. Retries are
    /// numbered 2. What was carried over into the next day comes back as `waiting`: the same waits at risk at every
    /// age, though not an equal tally.
    pub fn waits(&self) -> Vec<Wait> {
        let mut waits = side_waits(&self.first, 1);
        if let Some(retry) = &self.retry {
            waits.extend(side_waits(retry, 2));
        }
        let Some((from, to)) = self.seen else { return waits };
        // Times were kept as a span only; two waits suffice to span it.
        if from != to
            && let Some(last) = waits.pop()
        {
            let (count, parted) = (last.count(), waits.is_empty() && last.count() > 1);
            if parted {
                waits.extend(last.with_count(count - 1));
            }
            waits.extend(if parted { last.with_count(1) } else { Ok(last) });
        }
        let last = waits.len().saturating_sub(1);
        for (i, wait) in waits.iter_mut().enumerate() {
            let at = if i == last { to } else { from };
            *wait = wait.with_at(at).unwrap_or(*wait);
        }
        waits
    }
}

/// Values of which `count` are alike: one value, or some value of an open range.
#[derive(Clone, Copy, Debug)]
struct Lot<T> {
    low: f64,
    high: f64,
    /// Where between low and high, when they differ: in (0, 1), another one for each lot of a bin.
    part: f64,
    count: u64,
    what: T,
}

/// What an age stands for.
#[derive(Clone, Copy, Debug)]
enum What {
    Age(Ending),
    /// A bucket, of which only the lower bound limits the age at entry.
    Bucket {
        over: f64,
        upto: f64,
        ending: Ending,
    },
}

fn side_waits(side: &Side, attempt: u32) -> Vec<Wait> {
    let mut lots = Vec::new();
    for (ending, ages) in Ending::ALL.into_iter().zip(&side.ages) {
        age_lots(ages, What::Age(ending), &mut lots);
    }
    // What left for the next day and is not met there comes back as a wait that was open then: the same risk set.
    age_lots(&side.carried, What::Age(Ending::Waiting), &mut lots);
    bucket_lots(side, &mut lots);
    let mut entries = Vec::new();
    age_lots(&side.entries, (), &mut entries);
    // The latest entries go with the oldest ages. If any pairing works, and the true one did, then this one does.
    lots.sort_by(|a, b| b.high.total_cmp(&a.high));
    entries.sort_by(|a, b| b.low.total_cmp(&a.low));
    let mut waits = Vec::new();
    let mut emit = |lot: &Lot<What>, entry: Option<&Lot<()>>, mut count: u64| {
        while count > 0 {
            let some = count.min(MAX_COUNT);
            waits.extend(wait(lot, entry).and_then(|wait| wait.with_attempt(attempt)?.with_count(some)));
            count -= some;
        }
    };
    let mut entries = entries.into_iter().peekable();
    for mut lot in lots {
        while let Some(entry) = entries.peek_mut()
            && lot.count > 0
        {
            let count = entry.count.min(lot.count);
            emit(&lot, Some(entry), count);
            lot.count -= count;
            entry.count -= count;
            if entry.count == 0 {
                entries.next();
            }
        }
        emit(&lot, None, lot.count);
    }
    waits
}

fn wait(lot: &Lot<What>, entry: Option<&Lot<()>>) -> Result<Wait, WaitError> {
    let entered = entry.map_or(0.0, |entry| entry.within(0.0, lot.high));
    let wait = match lot.what {
        What::Age(ending) => Wait::new(lot.within(entered, f64::INFINITY), ending)?,
        What::Bucket { over, upto, ending } => Wait::between(over, upto, ending)?,
    };
    // A tally that was counted from waits always leaves room; a made-up one loses the entry, not the wait.
    wait.with_entered(entered).or(Ok(wait))
}

impl<T> Lot<T> {
    /// The value of the lot, or one of its range that is above `above` and below `below`.
    fn within(&self, above: f64, below: f64) -> f64 {
        let (low, high) = (self.low.max(above), self.high.min(below));
        if self.low == self.high { self.low } else { low + (high - low) * self.part }
    }
}

fn age_lots<T: Copy>(ages: &Ages, what: T, lots: &mut Vec<Lot<T>>) {
    let Some(store) = ages.0.as_deref() else { return };
    if let Store::Few { grouped, .. } = store.settled().as_ref() {
        lots.extend(grouped.iter().map(|&(age, count)| Lot { low: age, high: age, part: 0.5, count, what }));
        return;
    }
    let bins = ages.bins();
    let mut more = (EXACT_AGES + 1).saturating_sub(bins.len()) as u64;
    for bin in bins {
        // Everything below a tick and a half counts as one tick.
        let low = if bin.low * TICKS < 0.75 { 0.0 } else { bin.low };
        let high = bin.high.min(MAX_AGE);
        part(bin.count, &mut more, |part, count| lots.push(Lot { low, high, part, count, what }));
    }
}

/// Parts a count into one group and as many more as are still wanted.
fn part(count: u64, more: &mut u64, mut group: impl FnMut(f64, u64)) {
    let groups = 1 + (count - 1).min(*more);
    *more -= groups - 1;
    for i in 0..groups {
        let part = (i + 1) as f64 / (groups + 1) as f64;
        group(part, if i == 0 { count - (groups - 1) } else { 1 });
    }
}

fn bucket_lots(side: &Side, lots: &mut Vec<Lot<What>>) {
    let Some(buckets) = &side.buckets else { return };
    // A coarse set comes back as one only if it is made of too many finer ones.
    let mut more =
        if buckets.coarse { (MOST_BUCKETS + 1).saturating_sub(buckets.iter().count()) as u64 } else { 0 };
    for (over, upto, counts) in buckets.iter() {
        for (ending, &count) in Ending::ALL.into_iter().zip(counts).filter(|(_, count)| **count > 0) {
            part(count, &mut more, |part, count| {
                // Half a step of the coarse grid inward stays in the same cell of it.
                let (over_in, upto_in) = match (buckets.coarse, upto.is_finite()) {
                    (false, _) => (over, upto),
                    (true, true) => (over, upto.min(MAX_AGE) * (-0.005 * part).exp()),
                    (true, false) => (over * (0.005 * part).exp(), upto),
                };
                let what = What::Bucket { over: over_in, upto: upto_in, ending };
                lots.push(Lot { low: over, high: over, part: 0.5, count, what });
            });
        }
    }
}
