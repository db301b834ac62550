//! Merging tallies is associative, commutative and exact, whatever the order of arrival.

#![allow(clippy::unwrap_used)] // a test may fail

use outwait::tally::{EXACT_AGES, Tally};
use outwait::wait::{Ending, Wait};
use proptest::prelude::*;

fn wait() -> impl Strategy<Value = Wait> {
    let age = prop_oneof![
        3 => (1u32..50).prop_map(|i| f64::from(i) * 0.25),
        5 => (-13.0..16.0f64).prop_map(f64::exp),
    ];
    let ending = (0usize..4).prop_map(|i| Ending::ALL[i]);
    let count = prop_oneof![9 => Just(1u64), 1 => 1u64..1_000_000_000_000];
    (age, ending, count, 1u32..4, 0.0..1.0f64, any::<bool>(), 0.0..3e6f64).prop_map(
        |(age, ending, count, attempt, entered, bucket, at)| {
            let wait = if bucket && age > 1.0 {
                Wait::between(age, age * 1.5, ending).unwrap()
            } else {
                Wait::new(age, ending).unwrap()
            };
            let entered = if entered < 0.3 { entered * age } else { 0.0 };
            wait.with_count(count)
                .unwrap()
                .with_attempt(attempt)
                .unwrap()
                .with_entered(entered)
                .unwrap()
                .with_at(at)
                .unwrap()
        },
    )
}

fn tally(waits: &[Wait]) -> Tally {
    let mut sum = Tally::default();
    waits.iter().for_each(|w| sum.add(w));
    sum
}

fn merged(parts: &[&Tally]) -> Tally {
    let mut sum = Tally::default();
    parts.iter().for_each(|p| sum.merge(p));
    sum
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(40))]

    #[test]
    fn merge_is_associative_commutative_and_exact(
        waits in prop::collection::vec(wait(), 0..400),
        cut in prop::array::uniform2(0.0..1.0f64),
        // Repeats each wait with a slightly different age, to cross from exact ages to histograms.
        spread in prop_oneof![Just(1usize), Just(40)],
    ) {
        let waits: Vec<Wait> = waits.iter().flat_map(|w| {
            (0..spread).map(move |i| match w.age() {
                outwait::wait::Age::Exact(t) => Wait::new(t * (1.0 + i as f64 * 1e-3), w.ending()).unwrap()
                    .with_count(w.count()).unwrap().with_attempt(w.attempt()).unwrap()
                    .with_entered(w.entered()).unwrap().with_at(w.at().unwrap()).unwrap(),
                outwait::wait::Age::Between { .. } => *w,
            })
        }).collect();
        let n = waits.len() as f64;
        let (mut i, mut j) = ((cut[0] * n) as usize, (cut[1] * n) as usize);
        if i > j { std::mem::swap(&mut i, &mut j); }
        let (a, b, c) = (tally(&waits[..i]), tally(&waits[i..j]), tally(&waits[j..]));
        let whole = tally(&waits);
        let left = merged(&[&merged(&[&a, &b]), &c]);
        let right = merged(&[&a, &merged(&[&b, &c])]);
        let back = merged(&[&c, &b, &a]);
        prop_assert_eq!(&left, &whole);
        prop_assert_eq!(&right, &whole);
        prop_assert_eq!(&back, &whole);
        prop_assert_eq!(left.first_attempts(), whole.first_attempts());
        prop_assert_eq!(whole.counts().iter().sum::<u64>(), waits.iter().map(Wait::count).sum::<u64>());
        let mut turned = waits.clone();
        turned.reverse();
        prop_assert_eq!(&tally(&turned), &whole);
    }

    #[test]
    fn cells_hold_every_wait_and_its_age(waits in prop::collection::vec(wait(), 1..200)) {
        let sum = tally(&waits);
        let (first, retry) = (sum.first_attempts(), sum.retries());
        let total: f64 = waits.iter().map(|w| w.count() as f64).sum();
        prop_assert!((first.total() + retry.total() - total).abs() <= 1e-9 * total);
        // Few distinct ages: exact to the last bit.
        let exact = outwait::tally::Cells::from_waits(waits.iter().filter(|w| w.attempt() == 1));
        prop_assert!(waits.len() <= EXACT_AGES);
        prop_assert_eq!(first, exact);
    }
}
