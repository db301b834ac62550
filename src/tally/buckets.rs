//! Interval-censored counts: waits of which only a bucket `(over, upto]` is known.

use std::collections::BTreeMap;

use crate::wait::Ending;

/// Distinct buckets kept as they are. Beyond it all bounds move outward to a grid of 1%, which keeps every
/// statement true (`over < T <= upto`) and the number of buckets bounded.
pub const MOST_BUCKETS: usize = 4096;

/// Steps of the coarse grid per factor e: 1% each.
const GRID: f64 = 100.0;

/// Counts by bucket and ending.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Buckets {
    pub(super) counts: BTreeMap<(Bound, Bound), [u64; 4]>,
    pub(super) coarse: bool,
}

/// A bound as its bits: for numbers >= 0 these sort as the numbers do.
pub(super) type Bound = u64;

impl Buckets {
    /// Adds `count` waits of one bucket (s; `upto` may be infinite).
    pub fn add(&mut self, over: f64, upto: f64, ending: Ending, count: u64) {
        let mut counts = [0; 4];
        counts[ending as usize] = count;
        self.put((over.to_bits(), upto.to_bits()), &counts);
        self.bound();
    }

    /// Adds all of `other`.
    pub fn merge(&mut self, other: &Buckets) {
        self.coarse |= other.coarse;
        for (&bounds, counts) in &other.counts {
            self.put(bounds, counts);
        }
        self.bound();
    }

    /// Each bucket with its counts by ending, in increasing order of the lower bound.
    pub fn iter(&self) -> impl Iterator<Item = (f64, f64, &[u64; 4])> {
        self.counts.iter().map(|(&(over, upto), counts)| (f64::from_bits(over), f64::from_bits(upto), counts))
    }

    /// Number of waits by ending.
    pub fn counts(&self) -> [u64; 4] {
        let mut sum = [0; 4];
        self.counts.values().for_each(|counts| add(&mut sum, counts));
        sum
    }

    fn put(&mut self, bounds: (Bound, Bound), counts: &[u64; 4]) {
        let bounds = if self.coarse { outward(bounds) } else { bounds };
        add(self.counts.entry(bounds).or_default(), counts);
    }

    fn bound(&mut self) {
        let fresh = !self.coarse && self.counts.len() > MOST_BUCKETS;
        // A merge may have turned `coarse` on while finer buckets were in.
        if fresh || (self.coarse && self.counts.keys().any(|&b| outward(b) != b)) {
            self.coarse = true;
            for (bounds, counts) in std::mem::take(&mut self.counts) {
                self.put(bounds, &counts);
            }
        }
    }
}

fn add(sum: &mut [u64; 4], more: &[u64; 4]) {
    for (n, m) in sum.iter_mut().zip(more) {
        *n = n.saturating_add(*m);
    }
}

/// The bucket with its bounds on the grid, outside of what it was; a bucket on the grid stays.
fn outward((over, upto): (Bound, Bound)) -> (Bound, Bound) {
    let step = |t: f64| t.ln() * GRID;
    let on_grid = |i: f64| (i / GRID).exp();
    let (over, upto) = (f64::from_bits(over), f64::from_bits(upto));
    let low = if over > 0.0 {
        let near = step(over).round();
        // A point of the grid must map to itself although its logarithm is rounded.
        if on_grid(near) == over { over } else { on_grid(step(over).floor()).min(over) }
    } else {
        0.0
    };
    let high = if upto.is_finite() {
        let near = step(upto).round();
        if on_grid(near) == upto { upto } else { on_grid(step(upto).ceil()).max(upto) }
    } else {
        upto
    };
    (low.to_bits(), high.to_bits())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn too_many_buckets_become_coarse_and_stay_true() {
        let mut buckets = Buckets::default();
        for i in 0..10_000 {
            let over = f64::from(i) * 1e-3;
            buckets.add(over, over + 1e-3, Ending::Done, 1);
        }
        assert!(buckets.iter().count() <= MOST_BUCKETS);
        assert_eq!(buckets.counts()[0], 10_000);
        let (over, upto) = (0.5_f64.to_bits(), 0.7_f64.to_bits());
        let wider = outward((over, upto));
        assert!(f64::from_bits(wider.0) <= 0.5 && f64::from_bits(wider.1) >= 0.7);
        assert_eq!(outward(wider), wider);
    }
}
