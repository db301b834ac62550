//! Whatever is counted, an advice is a clear action with its reason, in numbers that are numbers, and never a panic.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

use outwait::advice::{Action, Advice};
use outwait::advise::{Case, advise};
use outwait::policy::{Backoff, Entry, GiveUp, Guard, Jitter, LEAST_WORTH, MAX_ATTEMPTS, MAX_WORTH, Sticky};
use outwait::stopping::{Aim, Fade, Pause, Worth};
use outwait::tally::Tally;
use outwait::wait::{Ending, LEAST_AGE, MAX_AGE, Wait};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;

/// What every advice keeps.
#[track_caller]
fn sound(advice: &Advice, what: &str) {
    let text = serde_json::to_string(advice).unwrap();
    // NaN and infinities are written as null: they would come back as nothing, or not at all.
    let back: Advice = serde_json::from_str(&text).unwrap_or_else(|e| panic!("{what}: {e}: {text}"));
    assert!(back == *advice, "{what}: a number is none\n{back:?}\n{advice:?}");
    let d = &advice.advice;
    assert!(d.because.len() > 10 && !d.because.contains("NaN"), "{what}: {d:?}");
    if let (Some(floor), Some(ceiling)) = (d.floor_s, d.ceiling_s) {
        assert!(0.0 < floor && floor < ceiling, "{what}: {d:?}");
    }
    let advised = matches!(d.action, Action::GiveUpAfter | Action::WaitItOut);
    assert_eq!(d.give_up_after_s.is_some(), d.action == Action::GiveUpAfter, "{what}: {d:?}");
    if advised {
        let (floor, ceiling) = (d.floor_s.unwrap(), d.ceiling_s.unwrap());
        let within = |t: f64| (floor * (1.0 - 1e-9)..=ceiling * (1.0 + 1e-9)).contains(&t);
        let at = d.give_up_after_s.unwrap_or(ceiling);
        assert!(within(at), "{what}: {d:?}");
        for [from, to] in [d.interval_s.unwrap(), d.band_s.unwrap()] {
            assert!(from <= to && within(from) && within(to), "{what}: {d:?}");
        }
        for number in [d.rate_per_s, d.rate_never_per_s, d.expected_regret, d.regret_95, d.done_share] {
            assert!(number.is_some(), "{what}: {d:?}");
        }
        assert!((-1e-9..=1.0 + 1e-9).contains(&d.done_share.unwrap()), "{what}: {d:?}");
        assert!(d.expected_regret.unwrap() >= -1e-9, "{what}: {d:?}");
        assert!(d.never.is_some() && d.stop_gap_s.is_empty(), "{what}: {d:?}");
        assert_eq!(d.now.is_some(), d.proposal.is_some(), "{what}: {d:?}");
    } else {
        assert!(d.rate_per_s.is_none() && d.interval_s.is_none(), "{what}: {d:?}");
    }
    if d.action == Action::GatherEvidence && d.ceiling_s.is_some() {
        assert!(!d.stop_gap_s.is_empty(), "{what}: {d:?}");
        assert!(d.stop_gap_s.iter().all(|&t| t > 0.0 && t <= d.ceiling_s.unwrap()), "{what}: {d:?}");
    }
    let shares = [advice.tail.heavy_weight, advice.tail.light_weight];
    assert!(
        shares.iter().chain(&advice.tail.remaining_weights).all(|w| (0.0..=1.0 + 1e-9).contains(w)),
        "{what}"
    );
}

fn waits(list: &[(f64, Ending, u64)]) -> Tally {
    let mut tally = Tally::default();
    for &(age, ending, count) in list {
        tally.add(&Wait::new(age, ending).unwrap().with_count(count).unwrap());
    }
    tally
}

fn eager() -> Entry {
    let mut entry = Entry::without_policy();
    entry.guard.evidence = 1;
    entry
}

fn ask(tally: &Tally, entry: &Entry, what: &str) -> Advice {
    let advice = advise(&Case::new("s", tally), entry, 1);
    sound(&advice, what);
    advice
}

#[test]
fn too_little_or_all_alike() {
    use Ending::{Done, Failed, GaveUp, Waiting};
    let all = |ending| waits(&[(1.0, ending, 200), (2.0, ending, 300), (5.0, ending, 200)]);
    let cases = [
        ("nothing at all", Tally::default(), Action::GatherEvidence),
        ("one wait", waits(&[(3.0, Done, 1)]), Action::GatherEvidence),
        ("only given up", all(GaveUp), Action::GatherEvidence),
        ("only open", all(Waiting), Action::GatherEvidence),
        ("only failures", all(Failed), Action::GatherEvidence),
        ("four completions", waits(&[(1.0, Done, 4), (9.0, GaveUp, 4000)]), Action::GatherEvidence),
    ];
    for (what, tally, action) in cases {
        for mut entry in [Entry::without_policy(), eager()] {
            let advice = ask(&tally, &entry, what);
            assert_eq!(advice.advice.action, action, "{what}: {:?}", advice.advice);
            assert!(
                !advice.advice.because.contains("all have the same age"),
                "{what}: {}",
                advice.advice.because
            );
            entry.worth = None;
            assert_eq!(ask(&tally, &entry, what).advice.action, Action::StateACost, "{what}");
        }
    }
}

/// Where all take as long, nothing is gained by leaving: before, one loses; after, no one is left.
#[test]
fn all_at_one_age() {
    for n in [10, 1_000, 1_000_000_000_000] {
        let advice = ask(&waits(&[(3.0, Ending::Done, n)]), &eager(), "all at 3 s");
        match advice.advice.action {
            Action::WaitItOut | Action::GatherEvidence => {}
            _ => assert!(advice.advice.give_up_after_s.unwrap() >= 3.0, "{n}: {:?}", advice.advice),
        }
        // Some cut off at the same age or before.
        let tally = waits(&[(3.0, Ending::Done, n), (3.0, Ending::GaveUp, 5), (1.0, Ending::GaveUp, 50)]);
        ask(&tally, &eager(), "all at 3 s, some given up");
    }
}

#[test]
fn two_ages() {
    for (near, far) in [(1.0, 100.0), (1.0, 1.001), (1e-6, 2_592_000.0)] {
        for n in [50, 1_000_000_000_000] {
            let tally = waits(&[(near, Ending::Done, n), (far, Ending::Done, n)]);
            let mut entry = eager();
            entry.worth.as_mut().unwrap().pause.gave_up = 0.1 * near;
            let advice = ask(&tally, &entry, "two ages");
            if far > 2.0 * near {
                assert_eq!(advice.advice.action, Action::GiveUpAfter, "{near} {far}: {:?}", advice.advice);
                let at = advice.advice.give_up_after_s.unwrap();
                assert!(near <= at && at < far, "{at} between {near} and {far}");
            }
        }
    }
}

/// Ages from a microsecond to a month in one stream, and as many as can be counted.
#[test]
fn from_a_microsecond_to_a_month() {
    let mut list = Vec::new();
    for step in 0..600 {
        let age = 1e-6 * 10f64.powf(12.4 * f64::from(step) / 600.0);
        list.push((age, Ending::ALL[step as usize % 4], 1_000_000_000_000));
    }
    ask(&waits(&list), &eager(), "twelve decades");
    let done: Vec<_> = list.iter().map(|&(age, _, n)| (age, Ending::Done, n)).collect();
    ask(&waits(&done), &eager(), "twelve decades, done");
}

#[test]
fn buckets() {
    let bucket = |over: f64, upto: f64, ending, n: u64| {
        Wait::between(over, upto, ending).unwrap().with_count(n).unwrap()
    };
    use Ending::{Done, Failed, Waiting};
    let inf = f64::INFINITY;
    let layouts: [(&str, Vec<Wait>); 8] = [
        ("a single bucket", vec![bucket(0.0, 1.0, Done, 5_000)]),
        ("a single bucket off 0", vec![bucket(0.5, 1.0, Done, 5_000)]),
        ("all in the last", vec![bucket(10.0, inf, Done, 5_000)]),
        ("all in the only one", vec![bucket(0.0, inf, Done, 5_000)]),
        ("nearly all in the last", vec![bucket(0.0, 0.1, Done, 3), bucket(10.0, inf, Done, 5_000)]),
        (
            "overlapping",
            vec![
                bucket(0.0, 1.0, Done, 400),
                bucket(0.5, 2.0, Done, 400),
                bucket(0.0, 8.0, Done, 300),
                bucket(1.0, 4.0, Failed, 300),
                bucket(2.0, inf, Done, 100),
            ],
        ),
        (
            "as a scrape gives them",
            vec![
                bucket(0.0, 0.1, Done, 4_000),
                bucket(0.1, 0.2, Done, 3_000),
                bucket(0.2, 0.5, Done, 1_500),
                bucket(0.5, 1.0, Done, 700),
                bucket(1.0, inf, Done, 300),
            ],
        ),
        (
            "open and failed",
            vec![bucket(0.0, 1.0, Failed, 500), bucket(1.0, 2.0, Waiting, 500), bucket(0.0, 1.0, Done, 900)],
        ),
    ];
    for (what, layout) in layouts {
        let mut tally = Tally::default();
        for wait in &layout {
            tally.add(wait);
        }
        for mut entry in [eager(), Entry::without_policy()] {
            ask(&tally, &entry, what);
            entry.worth.as_mut().unwrap().pause = Pause { done: 0.0, failed: 0.1, gave_up: 0.1 };
            let advice = ask(&tally, &entry, what);
            if what == "as a scrape gives them" {
                assert_ne!(advice.advice.action, Action::GatherEvidence, "{:?}", advice.advice);
            }
        }
    }
}

/// No one is watched from the start: every wait was already old when it was first seen.
#[test]
fn late_entries_only() {
    let mut tally = Tally::default();
    for i in 1..=500 {
        let age = 10.0 + f64::from(i) / 50.0;
        tally.add(&Wait::new(age, Ending::Done).unwrap().with_entered(9.0).unwrap());
    }
    ask(&tally, &eager(), "late entries");
}

fn ending() -> impl Strategy<Value = Ending> {
    prop_oneof![6 => Just(Ending::Done), 1 => Just(Ending::Failed), 2 => Just(Ending::GaveUp), 1 => Just(Ending::Waiting)]
}

fn wait() -> impl Strategy<Value = Wait> {
    let age = prop_oneof![
        8 => (-2.0..3.0_f64).prop_map(|x| 10f64.powf(x)),
        2 => (-6.0..7.0_f64).prop_map(|x| 10f64.powf(x)),
        4 => Just(1.0),
        // The least and the most that an age can be, and what comes of other units.
        1 => prop::sample::select(vec![f64::from_bits(1), f64::MIN_POSITIVE, 1e-300, 1e-15, 1e-9, 1e9, MAX_AGE]),
    ];
    let count = prop_oneof![6 => Just(1_u64), 2 => 1..300_u64, 1 => Just(1_000_000_000_000)];
    (age, ending(), count, 1..4_u32, prop_oneof![5 => Just(0.0), 1 => 0.0..1.0_f64], 0..12_u32).prop_map(
        |(age, ending, count, attempt, entered, kind)| {
            let wait = match kind {
                0 => Wait::between(0.5 * age, 2.0 * age, ending),
                1 => Wait::between(age, f64::INFINITY, ending),
                2 => Wait::between(0.0, age, ending),
                _ => Wait::new(age, ending).and_then(|w| w.with_entered(entered * age).or(Ok(w))),
            };
            // Of the least age there is no half.
            wait.or_else(|_| Wait::new(age, ending))
                .unwrap()
                .with_count(count)
                .unwrap()
                .with_attempt(attempt)
                .unwrap()
        },
    )
}

fn worth() -> impl Strategy<Value = Option<Worth>> {
    let aim = prop_oneof![
        9 => Just(Aim::Rate),
        3 => Just(Aim::Finish),
        3 => (1e-6..10.0_f64).prop_map(Aim::CarryingCost),
        3 => (0.01..100.0_f64, 1..6_u32).prop_map(|(by, attempts)| Aim::Deadline { by, attempts }),
        // The ends of what a policy may say.
        1 => prop::sample::select(vec![LEAST_WORTH, 1e-9, MAX_WORTH]).prop_map(Aim::CarryingCost),
        1 => (prop::sample::select(vec![LEAST_AGE, 1e-9, MAX_AGE]), prop::sample::select(vec![1, 2, MAX_ATTEMPTS]))
            .prop_map(|(by, attempts)| Aim::Deadline { by, attempts }),
    ];
    let fade = prop_oneof![
        4 => Just(Fade::Stays),
        1 => (0.01..100.0_f64).prop_map(Fade::HalfLife),
        1 => (0.01..100.0_f64).prop_map(Fade::ZeroAt),
        1 => (0.01..100.0_f64).prop_map(Fade::HalfAt),
        1 => (prop::sample::select(vec![LEAST_AGE, 1e-9, MAX_AGE]), prop::sample::select(vec![Fade::HalfLife as fn(f64) -> Fade, Fade::ZeroAt, Fade::HalfAt]))
            .prop_map(|(age, fade)| fade(age)),
    ];
    let pause = prop_oneof![2 => Just(0.0), 4 => 0.0..5.0_f64, 2 => 0.0..1e5_f64, 1 => Just(MAX_AGE)];
    let done = prop_oneof![6 => 0.01..100.0_f64, 1 => prop::sample::select(vec![LEAST_WORTH, MAX_WORTH])];
    let other = || prop_oneof![6 => -2.0..2.0_f64, 1 => prop::sample::select(vec![-MAX_WORTH, MAX_WORTH])];
    let worth = (
        aim,
        fade,
        pause,
        done,
        other(),
        other(),
        prop_oneof![3 => Just(0.0), 3 => 0.0..1.0_f64, 1 => Just(MAX_WORTH)],
    )
        .prop_map(|(aim, fade, pause, done, failed, gave_up, attempt_cost)| Worth {
            aim,
            done,
            failed,
            gave_up,
            attempt_cost,
            fade,
            pause: Pause { done: 0.1 * pause, failed: pause, gave_up: pause },
            sticky: 0.0,
        });
    prop_oneof![1 => Just(None), 12 => worth.prop_map(Some)]
}

fn entry() -> impl Strategy<Value = Entry> {
    let sticky = prop_oneof![
        2 => Just(Sticky::FromData),
        1 => Just(Sticky::Unknown),
        1 => (0.0..0.95_f64).prop_map(Sticky::Given)
    ];
    let now = prop_oneof![
        2 => Just(None),
        1 => Just(Some(GiveUp::Never)),
        2 => (-3.0..4.0_f64).prop_map(|x| Some(GiveUp::After(10f64.powf(x))))
    ];
    let floor = prop_oneof![2 => Just(None), 1 => (-4.0..2.0_f64).prop_map(|x| Some(10f64.powf(x)))];
    let above = prop_oneof![2 => Just(None), 1 => (0.1..4.0_f64).prop_map(|x| Some(10f64.powf(x)))];
    let retry = (
        prop_oneof![Just(None), (1..5_u32).prop_map(Some)],
        prop_oneof![2 => Just(None), 1 => (1.0..3.0_f64).prop_map(Some)],
        any::<bool>(),
        prop_oneof![Just(1.0), 1.0..3.0_f64],
        any::<bool>(),
    );
    (worth(), sticky, now, floor, above, retry, 1..50_u32).prop_map(
        |(worth, sticky, now, floor, above, (attempts, load_ceiling, repeatable, factor, full), evidence)| {
            let mut entry = Entry { worth, now, ..Entry::without_policy() };
            if let (Some(worth), Sticky::Given(phi)) = (&mut entry.worth, sticky) {
                worth.sticky = phi;
            }
            entry.retry.sticky = sticky;
            entry.retry.attempts = attempts;
            entry.retry.load_ceiling = load_ceiling;
            entry.retry.repeatable = repeatable;
            entry.retry.backoff = Backoff { factor, jitter: if full { Jitter::Full } else { Jitter::None } };
            let ceiling = above.map(|a| floor.unwrap_or(0.1) * (1.0 + a));
            entry.guard = Guard { floor, ceiling, evidence, ..Guard::default() };
            entry
        },
    )
}

/// A number from the environment, for longer searches (DEVELOPERS.md names the command).
fn from_outside<T: std::str::FromStr>(name: &str, usual: T) -> T {
    std::env::var(name).ok().and_then(|text| text.parse().ok()).unwrap_or(usual)
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: from_outside("OUTWAIT_CASES", 60),
        rng_seed: RngSeed::Fixed(from_outside("OUTWAIT_SEED", 11)),
        max_shrink_iters: 60,
        failure_persistence: None,
        ..ProptestConfig::default()
    })]

    /// Any waits under any entry.
    #[test]
    fn never_a_panic(list in prop::collection::vec(wait(), 0..60), entry in entry()) {
        let mut tally = Tally::default();
        for wait in &list {
            tally.add(wait);
        }
        let advice = advise(&Case::new("s", &tally), &entry, 1);
        sound(&advice, &format!("{entry:?}\n{list:?}"));
        for caution in &advice.cautions {
            prop_assert!(!caution.text.contains("NaN"), "{caution:?}");
        }
        // The same again, to the last bit.
        prop_assert!(advice == advise(&Case::new("s", &tally), &entry, 1));
    }
}

/// Hardly any wait is left where sight ends, and beyond it replicates follow a tail of which hardly any is left either.
/// Found by a longer search: a share of completions above 1.
#[test]
fn shares_add_up_where_nearly_all_have_ended() {
    let mut tally = Tally::default();
    let exact = |age: f64, ending, entered: f64, count| {
        Wait::new(age, ending).unwrap().with_entered(entered).unwrap().with_count(count).unwrap()
    };
    tally.add(&exact(2.8633473665232523, Ending::Done, 0.0, 187));
    tally.add(&exact(1.0, Ending::Done, 0.6405762361203525, 1));
    tally.add(&exact(1.0, Ending::Done, 0.0, 1));
    tally.add(
        &Wait::between(1.4691377705408297, 5.876551082163319, Ending::Done)
            .unwrap()
            .with_count(1000000000000)
            .unwrap(),
    );
    tally.add(&exact(88.99857229461279, Ending::Failed, 69.95231907157543, 1));
    tally.add(&exact(1.0521532803606926, Ending::Done, 0.0, 285));
    tally.add(&exact(61847.547652856614, Ending::Waiting, 13939.294227985885, 1));
    let mut entry = Entry::without_policy();
    entry.worth = Some(Worth {
        aim: Aim::CarryingCost(2.6356998900755464),
        done: 81.05126474658817,
        failed: -0.25065173698499144,
        gave_up: -0.5826335116815125,
        attempt_cost: 0.09045768905824203,
        fade: Fade::Stays,
        pause: Pause { done: 1e9, failed: 1e10, gave_up: 1e10 },
        sticky: 0.0,
    });
    entry.now = Some(GiveUp::Never);
    entry.retry.sticky = Sticky::Unknown;
    entry.retry.repeatable = true;
    entry.retry.backoff = Backoff { factor: 1.0, jitter: Jitter::Full };
    entry.guard.evidence = 47;
    sound(&advise(&Case::new("s", &tally), &entry, 1), "");
}
