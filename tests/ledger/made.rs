//! Made waits, tallies and batches.

use outwait::tally::Tally;
use outwait::wait::{Age, Ending, Wait};
use proptest::prelude::*;

/// Noon of 30 November 2026 UTC (`date -u -d 2026-11-30T12:00Z +%s`).
pub(crate) const NOON: f64 = 1_796_040_000.0;

pub(crate) const HOUR: f64 = 3_600.0;

pub(crate) const DAY: f64 = 24.0 * HOUR;

/// Any wait that intake may hand on.
pub(crate) fn wait() -> impl Strategy<Value = Wait> {
    let age = prop_oneof![
        3 => (1u32..50).prop_map(|i| f64::from(i) * 0.25),
        3 => (1u32..2_000_000).prop_map(|i| f64::from(i) / 1e6),
        2 => (1u64..9_000_000_000).prop_map(|i| i as f64 / 1e9),
        5 => (-20.0..23.0f64).prop_map(f64::exp),
    ];
    let ending = (0usize..4).prop_map(|i| Ending::ALL[i]);
    let count = prop_oneof![9 => Just(1u64), 1 => 1u64..1_000_000_000_000_000];
    // Most are dated a day or two ago, so that upkeep finds hours that are old enough for it.
    let at = prop_oneof![1 => Just(None), 2 => (0.0..2.0 * DAY).prop_map(|t| Some(NOON - DAY + t))];
    (age, ending, count, 1u32..4, 0.0..1.0f64, 0u8..4, at).prop_map(
        |(age, ending, count, attempt, entered, bucket, at)| {
            let wait = match bucket {
                0 => Wait::between(age, (age * 1.5).min(1e10), ending).unwrap(),
                1 if age > 1e6 => Wait::between(age, f64::INFINITY, ending).unwrap(),
                2 if age > 1e6 => Wait::between(0.0, age, ending).unwrap(),
                _ => Wait::new(age, ending).unwrap(),
            };
            let ceiling = match wait.age() {
                Age::Exact(age) => age,
                Age::Between { over, .. } => over,
            };
            let entered = if entered < 0.3 { entered * ceiling } else { 0.0 };
            let wait = wait.with_count(count).unwrap().with_attempt(attempt).unwrap();
            let wait = wait.with_entered(entered).unwrap();
            at.map_or(wait, |at| wait.with_at(at).unwrap())
        },
    )
}

/// The wait `times` times, each with another age in the same thousandth, entry or bucket.
pub(crate) fn spread(wait: Wait, times: usize) -> impl Iterator<Item = Wait> {
    (0..times).map(move |i| {
        let by = 1.0 - 4e-3 * i as f64 / times as f64;
        let other = match wait.age() {
            Age::Exact(age) => Wait::new(age * by, wait.ending()).unwrap(),
            Age::Between { over, upto } => {
                Wait::between(over * by, if upto.is_finite() { upto * by } else { upto }, wait.ending())
                    .unwrap()
            }
        };
        let other = other.with_count(wait.count()).unwrap().with_attempt(wait.attempt()).unwrap();
        let other = other.with_entered(wait.entered() * by).unwrap();
        wait.at().map_or(other, |at| other.with_at(at).unwrap())
    })
}

pub(crate) fn tally<'a>(waits: impl IntoIterator<Item = &'a Wait>) -> Tally {
    let mut sum = Tally::default();
    waits.into_iter().for_each(|w| sum.add(w));
    sum
}

/// Tallies of every shape: few exact ages, so many that they become histograms, buckets up to the coarse grid, large
/// counts, retries, late entries.
pub(crate) fn any_tally() -> impl Strategy<Value = Tally> {
    let waits = prop::collection::vec(wait(), 0..60);
    let times = prop_oneof![3 => Just(1usize), 1 => Just(7), 2 => 60usize..400];
    (waits, times).prop_map(|(waits, times)| {
        let all: Vec<Wait> = waits.iter().flat_map(|w| spread(*w, times)).collect();
        tally(&all)
    })
}
