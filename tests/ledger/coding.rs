//! Tallies as bytes and as waits: nothing is lost on the way.

use outwait::tally::{DecodeError, EXACT_AGES, MOST_BUCKETS, TALLY_VERSION, Tally};
use outwait::wait::{Ending, Wait};
use proptest::prelude::*;

use crate::made::{any_tally, spread, tally, wait};

fn encoded(tally: &Tally) -> Vec<u8> {
    let mut bytes = Vec::new();
    tally.encode(&mut bytes);
    bytes
}

fn assert_round_trip(tally: &Tally) {
    let bytes = encoded(tally);
    let back = Tally::decode(&bytes).unwrap();
    assert_eq!(&back, tally);
    assert_eq!(encoded(&back), bytes);
    assert_eq!(back.first_attempts(), tally.first_attempts());
    assert_eq!(back.retries(), tally.retries());
    assert_eq!((back.counts(), back.seen()), (tally.counts(), tally.seen()));
    let waits = tally.waits();
    let again = crate::made::tally(&waits);
    assert_eq!(&again, tally, "{} waits", waits.len());
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(48))]

    #[test]
    fn every_tally_comes_back(tally in any_tally()) {
        assert_round_trip(&tally);
    }

    #[test]
    fn equal_tallies_are_equal_bytes_whatever_the_order(
        waits in prop::collection::vec(wait(), 1..40),
        times in prop_oneof![Just(1usize), Just(300)],
    ) {
        let all: Vec<Wait> = waits.iter().flat_map(|w| spread(*w, times)).collect();
        let (forth, back) = (tally(&all), tally(all.iter().rev()));
        let mut parts = tally(&all[all.len() / 2..]);
        parts.merge(&tally(&all[..all.len() / 2]));
        prop_assert_eq!(encoded(&forth), encoded(&back));
        prop_assert_eq!(encoded(&forth), encoded(&parts));
    }

    #[test]
    fn a_read_tally_counts_on_as_the_written_one(tally in any_tally(), more in any_tally()) {
        let mut back = Tally::decode(&encoded(&tally)).unwrap();
        let mut whole = tally.clone();
        back.merge(&more);
        whole.merge(&more);
        prop_assert_eq!(back, whole);
    }

    #[test]
    fn broken_bytes_are_refused_or_read_but_never_panic(
        tally in any_tally(),
        bends in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 1..4),
        cut in prop::option::of(any::<prop::sample::Index>()),
    ) {
        let mut bytes = encoded(&tally);
        for (at, byte) in bends {
            let at = at.index(bytes.len());
            bytes[at] = byte;
        }
        if let Some(cut) = cut {
            bytes.truncate(cut.index(bytes.len()));
        }
        if let Ok(read) = Tally::decode(&bytes) {
            // What passes for a tally is one.
            let _ = (read.first_attempts(), read.retries(), read.counts(), read.waits());
            prop_assert_eq!(&Tally::decode(&encoded(&read)).unwrap(), &read);
        }
    }

    #[test]
    fn noise_is_refused(mut bytes in prop::collection::vec(any::<u8>(), 0..300)) {
        let _ = Tally::decode(&bytes);
        if let Some(first) = bytes.first_mut() {
            *first = TALLY_VERSION;
            let _ = Tally::decode(&bytes);
        }
    }
}

/// The shapes named one by one, so that none is left to chance.
#[test]
fn shapes() {
    let done = |age: f64| Wait::new(age, Ending::Done).unwrap();
    assert_round_trip(&Tally::default());
    // On either side of the change from exact ages to a histogram.
    for distinct in [EXACT_AGES, EXACT_AGES + 1] {
        let ages: Vec<Wait> = (0..distinct).map(|i| done(0.5 + i as f64 * 1e-9)).collect();
        assert_round_trip(&tally(&ages));
    }
    // A histogram of two bins only, of which each must come back as thousands of ages.
    let two: Vec<Wait> =
        (0..5_000).map(|i| done(if i % 2 == 0 { 1.0 } else { 9e9 } + i as f64 * 1e-8)).collect();
    assert_round_trip(&tally(&two));
    // Totals above 32 bits, and counts that HdrHistogram's own form cannot write.
    let mut large = tally(&two);
    large.add(&done(1.0).with_count(1_000_000_000_000_000).unwrap());
    assert_round_trip(&large);
    (0..20_000).for_each(|_| large.add(&done(1.0).with_count(1_000_000_000_000_000).unwrap()));
    assert_eq!(large.counts()[0], u64::MAX);
    let back = Tally::decode(&encoded(&large)).unwrap();
    assert_eq!(back, large);
    // Ages below a microsecond and at the largest age.
    let edges: Vec<Wait> =
        (1..6_000).flat_map(|i| [done(f64::from(i) * 1e-10), done(1e10 - f64::from(i))]).collect();
    assert_round_trip(&tally(&edges));
    // Coarse buckets, also those that reach to 0 and to infinity.
    let bucket = |over: f64, upto: f64| Wait::between(over, upto, Ending::Failed).unwrap();
    let mut coarse: Vec<Wait> = (1..=MOST_BUCKETS)
        .map(|i| bucket(1.0 + 1e-5 * i as f64, if i % 2 == 0 { f64::INFINITY } else { 1e10 }))
        .collect();
    assert_round_trip(&tally(&coarse));
    coarse.extend([bucket(0.0, f64::INFINITY), bucket(0.0, 2.0)]);
    assert_round_trip(&tally(&coarse));
    // More late entries than are kept exactly, one to each wait and only just below it.
    let late: Vec<Wait> = (1..9_000)
        .map(|i| {
            let age = f64::from(i) * 1e-3;
            let wait =
                if i % 3 == 0 { Wait::between(age, age * 2.0, Ending::GaveUp).unwrap() } else { done(age) };
            wait.with_entered(age * (1.0 - 1e-12)).unwrap()
        })
        .collect();
    assert_round_trip(&tally(&late));
    let few_late: Vec<Wait> = (0..9_000)
        .map(|i| done(1.0 + f64::from(i) * 1e-7).with_entered(1.0 - f64::from(i % 10 + 1) * 1e-12).unwrap())
        .collect();
    assert_round_trip(&tally(&few_late));
}

#[test]
fn decimal_ages_take_little_room() {
    let ages: Vec<Wait> =
        (1..=1_000).map(|i| Wait::new(f64::from(i * 37 % 9_999 + 1) / 1e4, Ending::Done).unwrap()).collect();
    let bytes = encoded(&tally(&ages)).len();
    assert!(bytes < 3 * 1_000, "{bytes} bytes");
}

#[test]
fn a_later_version_is_named() {
    let mut bytes = encoded(&Tally::default());
    bytes[0] = TALLY_VERSION + 1;
    assert_eq!(Tally::decode(&bytes), Err(DecodeError::Newer { found: TALLY_VERSION + 1 }));
    assert_eq!(Tally::decode(&[]), Err(DecodeError::Short));
    let mut long = encoded(&Tally::default());
    long.push(0);
    assert_eq!(Tally::decode(&long), Err(DecodeError::Trailing));
}

/// A bucket that names an ending of which it holds none: nothing writes it, so nothing reads it.
#[test]
fn a_bucket_of_none_is_refused() {
    let bytes = [1, 0, 32, 1, 1, 255, 255, 255, 255, 255, 255, 255, 255, 32, 1, 0];
    assert_eq!(Tally::decode(&bytes), Err(DecodeError::Impossible { what: "bucket" }));
}
