//! Every caution has a scene in which it appears and one, as near as can be, in which it does not.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

use outwait::advice::{Action, Advice, Caution};
use outwait::advise::{Case, Terms, advise};
use outwait::policy::{Entry, GiveUp, Kind, Sticky, parse};
use outwait::stopping::Aim;
use outwait::tally::{Book, Tally};
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

/// Draws of a law by the inverse of its distribution function.
struct Draws<F>(F, u64);

impl<F: Fn(f64) -> f64> Draws<F> {
    fn take(&self, n: usize) -> Vec<f64> {
        let mut random = Xoshiro256PlusPlus::seed_from_u64(self.1);
        (0..n).map(|_| self.0(1.0 - random.random::<f64>())).collect()
    }
}

/// Standard normal deviate below which a share `u` lies.
fn deviate(u: f64) -> f64 {
    -std::f64::consts::SQRT_2 * statrs::function::erf::erfc_inv(2.0 * u)
}

fn lognormal(median: f64, sigma: f64) -> impl Fn(f64) -> f64 {
    move |u| median * (sigma * deviate(u)).exp()
}

fn weibull(shape: f64, scale: f64) -> impl Fn(f64) -> f64 {
    move |u| scale * (-u.ln()).powf(1.0 / shape)
}

/// Given up at `cut` s where they last longer.
fn tally(ages: &[f64], cut: f64) -> Tally {
    let mut tally = Tally::default();
    for &age in ages {
        let (age, ending) = if age > cut { (cut, Ending::GaveUp) } else { (age, Ending::Done) };
        tally.add(&Wait::new(age, ending).unwrap());
    }
    tally
}

/// Aim rate, a pause after giving up, repeatable work, nothing sticky: few reasons to warn.
fn entry(pause: f64) -> Entry {
    let mut entry = Entry::without_policy();
    entry.worth.as_mut().unwrap().pause.gave_up = pause;
    entry.retry.repeatable = true;
    entry.retry.sticky = Sticky::Given(0.0);
    entry
}

fn ask(tally: &Tally, entry: &Entry) -> Advice {
    let advice = advise(&Case::new("lookup", tally), entry, 1);
    advice.cautions.iter().for_each(reads_well);
    advice
}

fn find<'a>(advice: &'a Advice, code: &str) -> Option<&'a Caution> {
    advice.cautions.iter().find(|c| c.code == code)
}

#[track_caller]
fn appears(code: &str, advice: &Advice) {
    assert!(find(advice, code).is_some(), "{code} is missing: {:?}\n{:?}", advice.cautions, advice.advice);
}

#[track_caller]
fn does_not(code: &str, advice: &Advice) {
    let found = find(advice, code);
    assert!(found.is_none(), "{found:?}\n{:?}", advice.advice);
    // Not for want of an advice.
    assert!(matches!(advice.advice.action, Action::GiveUpAfter | Action::WaitItOut), "{:?}", advice.advice);
}

/// One sentence each, without a stop at its end, and every number in it known.
fn reads_well(caution: &Caution) {
    let Caution { code, text, remedy } = caution;
    assert!(code.chars().all(|c| c.is_ascii_lowercase() || c == '_'), "{code}");
    for sentence in [text, remedy] {
        let whole = sentence.len() > 10 && !sentence.ends_with(['.', ';', ',', ' ']);
        let one = !sentence.contains(". ") && !sentence.contains("  ");
        let known = !["NaN", "inf", "unknown", "∞", "until never"].iter().any(|w| {
            sentence.split(|c: char| c.is_whitespace() || c == ',').any(|word| word == *w)
                || (w.contains(' ') && sentence.contains(w))
        });
        assert!(whole && one && known, "{code}: {sentence}");
    }
    assert_ne!(text, remedy);
}

#[test]
fn the_edge_of_sight() {
    // A fixed pause of five medians: one would hold on far longer than the timer lets anyone.
    let ages = Draws(lognormal(1.0, 1.2), 1).take(3_000);
    let entry = entry(5.0);
    let cut = ask(&tally(&ages, 1.5), &entry);
    appears("edge_of_sight", &cut);
    assert!(cut.advice.give_up_after_s.is_none_or(|t| t > 1.5), "{:?}", cut.advice);
    does_not("edge_of_sight", &ask(&tally(&ages, f64::INFINITY), &entry));
    // Cut as hard, but with a free hand to start again the best lies well before the cut.
    let ages = Draws(lognormal(1.0, 2.0), 2).take(3_000);
    does_not("edge_of_sight", &ask(&tally(&ages, 4.0), &self::entry(0.05)));
}

#[test]
fn a_look_is_planned_where_the_sides_disagree() {
    // Some laws that fit up to the timer put the best time before it, others after.
    let ages: Vec<f64> = Draws(lognormal(1.0, 1.2), 3).take(2_000);
    let advice = ask(&tally(&ages, 1.2), &entry(0.05));
    appears("edge_of_sight", &advice);
    let look = advice.advice.look.as_ref().unwrap();
    assert!(look.from_s < look.to_s && look.waits_needed >= 1.0);
    assert!((0.0..=1.0).contains(&look.break_even) && look.worst_cost_each >= 0.0);
}

#[test]
fn heavier_load() {
    let ages = Draws(lognormal(1.0, 2.0), 1).take(3_000);
    let waits = tally(&ages, f64::INFINITY);
    let mut entry = entry(0.2);
    entry.now = Some(GiveUp::After(30.0));
    appears("heavier_load", &ask(&waits, &entry));
    entry.now = Some(GiveUp::Never);
    appears("heavier_load", &ask(&waits, &entry));
    entry.now = Some(GiveUp::After(0.1));
    does_not("heavier_load", &ask(&waits, &entry));
    entry.now = None;
    does_not("heavier_load", &ask(&waits, &entry));
}

#[test]
fn work_repeated() {
    let waits = tally(&Draws(lognormal(1.0, 2.0), 1).take(3_000), f64::INFINITY);
    let mut entry = entry(0.2);
    does_not("work_repeated", &ask(&waits, &entry));
    entry.retry.repeatable = false;
    for kind in [Kind::Request, Kind::Job, Kind::Reply] {
        entry.kind = kind;
        let advice = ask(&waits, &entry);
        appears("work_repeated", &advice);
        assert!(advice.advice.second_copy.is_none(), "a copy of what must not be done twice");
    }
    // Who waits it out repeats nothing.
    let light = tally(&Draws(weibull(3.0, 1.0), 1).take(2_000), f64::INFINITY);
    let advice = ask(&light, &entry);
    assert_eq!(advice.advice.action, Action::WaitItOut);
    does_not("work_repeated", &advice);
}

/// First attempts and retries, given up at 2 s; with probability `phi` the retry takes as long as the first would have.
fn with_retries(phi: f64, seed: u64) -> Tally {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    let law = lognormal(1.0, 1.2);
    let mut tally = Tally::default();
    for _ in 0..6_000 {
        let mut age = law(1.0 - random.random::<f64>());
        for attempt in 1..=3 {
            let (seen, ending) = if age > 2.0 { (2.0, Ending::GaveUp) } else { (age, Ending::Done) };
            tally.add(&Wait::new(seen, ending).unwrap().with_attempt(attempt).unwrap());
            if ending == Ending::Done {
                break;
            }
            if random.random::<f64>() >= phi {
                age = law(1.0 - random.random::<f64>());
            }
        }
    }
    tally
}

#[test]
fn sticky_failures() {
    let mut entry = entry(0.05);
    entry.retry.sticky = Sticky::FromData;
    for phi in [0.3, 0.6] {
        let advice = ask(&with_retries(phi, 5), &entry);
        appears("sticky_failures", &advice);
        let found = advice.advice.sticky.as_ref().unwrap();
        assert_eq!(found.from, "data");
        assert!((found.value - phi).abs() < 0.04, "{found:?}");
        let interval = found.interval.unwrap();
        assert!(interval[0] <= phi && phi <= interval[1] + 0.01, "{found:?}");
    }
    does_not("sticky_failures", &ask(&with_retries(0.0, 5), &entry));
    entry.retry.sticky = Sticky::Given(0.3);
    entry.worth.as_mut().unwrap().sticky = 0.3;
    appears("sticky_failures", &ask(&with_retries(0.0, 5), &entry));
}

#[test]
fn stickiness_unknown() {
    // Giving up gains little here, and nothing any more if two retries in ten meet the same fate.
    let ages = Draws(lognormal(1.0, 1.0), 8).take(4_000);
    let mut entry = entry(0.3);
    entry.retry.sticky = Sticky::Unknown;
    let advice = ask(&tally(&ages, f64::INFINITY), &entry);
    appears("stickiness_unknown", &advice);
    let sticky = advice.advice.sticky.as_ref().unwrap();
    assert!(sticky.flips_at.unwrap() < 0.5 && sticky.from == "unknown", "{sticky:?}");
    entry.retry.sticky = Sticky::Given(0.0);
    does_not("stickiness_unknown", &ask(&tally(&ages, f64::INFINITY), &entry));
    // Where giving up gains as much as this, no doubt about the retries matters.
    entry.retry.sticky = Sticky::Unknown;
    let ages = Draws(lognormal(1.0, 3.0), 8).take(4_000);
    does_not("stickiness_unknown", &ask(&tally(&ages, f64::INFINITY), &entry));
}

#[test]
fn tail_lengthened() {
    // Half take 1 s and the others 10 s, never more. A timer after 1 s and a pause of 1 s shorten the mean from 5.5 s to
    // 3 s; but one request in a thousand then needs ten attempts, 19 s, and without the timer no one waits that long.
    let law = |u: f64| if u < 0.5 { 1.0 + 0.1 * deviate(2.0 * u).clamp(-3.0, 3.0) } else { 10.0 + (u - 0.5) };
    let advice = ask(&tally(&Draws(law, 4).take(4_000), f64::INFINITY), &entry(1.0));
    assert_eq!(advice.advice.action, Action::GiveUpAfter);
    appears("tail_lengthened", &advice);
    // A hyperexponential's tail is thinned by the timer that shortens its mean.
    let ages =
        Draws(|u: f64| if u < 0.3 { -20.0 * (u / 0.3).ln() } else { -((u - 0.3) / 0.7).ln() }, 4).take(4_000);
    let advice = ask(&tally(&ages, f64::INFINITY), &entry(0.05));
    assert_eq!(advice.advice.action, Action::GiveUpAfter);
    does_not("tail_lengthened", &advice);
}

#[test]
fn bulk_just_before() {
    // Seven in ten come at 10 s, give or take a quarter of a second, the rest far later.
    let law = |u: f64| if u < 0.7 { 10.0 + 0.25 * deviate(u / 0.7) } else { 1e3 * (1.0 + (u - 0.7)) };
    let bulk = Draws(law, 6).take(3_000);
    let advice = ask(&tally(&bulk, f64::INFINITY), &entry(2.0));
    appears("bulk_just_before", &advice);
    assert!((10.3..12.5).contains(&advice.advice.give_up_after_s.unwrap()), "{:?}", advice.advice);
    let smooth = Draws(lognormal(1.0, 2.0), 6).take(3_000);
    does_not("bulk_just_before", &ask(&tally(&smooth, f64::INFINITY), &entry(0.2)));
}

#[test]
fn law_shifted() {
    let before = tally(&Draws(lognormal(1.0, 1.5), 7).take(2_000), f64::INFINITY);
    let slower = tally(&Draws(lognormal(2.0, 1.5), 8).take(1_000), f64::INFINITY);
    let same = tally(&Draws(lognormal(1.0, 1.5), 9).take(1_000), f64::INFINITY);
    let faster = tally(&Draws(lognormal(0.5, 1.5), 9).take(1_000), f64::INFINITY);
    let advice = |latest: &Tally, entry: &Entry| {
        let mut whole = before.clone();
        whole.merge(latest);
        let case = Case { periods: Some((&before, latest)), ..Case::new("lookup", &whole) };
        let advice = advise(&case, entry, 1);
        advice.cautions.iter().for_each(reads_well);
        advice
    };
    let entry = entry(0.3);
    let longer = advice(&slower, &entry);
    appears("law_shifted", &longer);
    assert!(find(&longer, "law_shifted").unwrap().text.contains("longer"));
    let shorter = advice(&faster, &entry);
    assert!(find(&shorter, "law_shifted").unwrap().text.contains("shorter"));
    does_not("law_shifted", &advice(&same, &entry));
    // It is said even where there is nothing to advise.
    let silent = Entry { worth: None, ..entry.clone() };
    appears("law_shifted", &advice(&slower, &silent));
}

#[test]
fn few_waits() {
    let entry = entry(0.2);
    appears("few_waits", &ask(&tally(&Draws(lognormal(1.0, 2.0), 1).take(400), f64::INFINITY), &entry));
    does_not("few_waits", &ask(&tally(&Draws(lognormal(1.0, 2.0), 1).take(5_000), f64::INFINITY), &entry));
}

#[test]
fn unit_suspicion() {
    let waits = tally(&Draws(lognormal(180.0, 1.0), 1).take(1_000), f64::INFINITY);
    let why = "lookup: 990 of 1,000 ages are whole numbers, typically 180";
    let advice = advise(&Case { suspicion: Some(why), ..Case::new("lookup", &waits) }, &entry(20.0), 1);
    assert_eq!(advice.cautions[0].code, "unit_suspicion", "the gravest goes first: {:?}", advice.cautions);
    assert!(advice.cautions[0].text.contains(why));
    advice.cautions.iter().for_each(reads_well);
    does_not("unit_suspicion", &ask(&waits, &entry(20.0)));
}

#[test]
fn a_caller_that_leaves_first() {
    let policy = |now: &str, attempts: u32, jitter: &str| {
        parse(
            &format!(
                "version: 1\nstreams:\n  - match: front\n    aim: rate\n    pause: {{gave_up: 200ms}}\n    calls: \
                 [back]\n  - match: back\n    aim: rate\n    pause: {{gave_up: 200ms}}\n    now: {now}\n    retry: \
                 {{attempts: {attempts}, sticky: 0, backoff: {{factor: 1, jitter: {jitter}}}}}\n"
            ),
            "p.yaml",
        )
        .unwrap()
    };
    let mut book = Book::default();
    for age in Draws(lognormal(1.0, 2.0), 1).take(2_000) {
        for stream in ["front", "back"] {
            book.add(stream, &Wait::new(age, Ending::Done).unwrap()).unwrap();
        }
    }
    let front = |now: &str, attempts: u32, jitter: &str| {
        let policy = policy(now, attempts, jitter);
        let terms = Terms { policy: Some(&policy), newest: None, seed: 1, past: None };
        let all = book.streams().into_iter().map(|(name, days)| terms.advise(name, days, None)).collect();
        let set = terms.set(all, None);
        assert!(find(&set.streams[0], "caller_leaves_first").is_none(), "who calls nobody leaves nobody");
        set.streams[1].cautions.iter().for_each(reads_well);
        set.streams[1].clone()
    };
    let leaves = front("100ms", 1, "none").advice.give_up_after_s.unwrap();
    let millis = |seconds: f64| format!("{:.0}ms", seconds * 1e3);
    does_not("caller_leaves_first", &front("100ms", 1, "none"));
    appears("caller_leaves_first", &front("10s", 3, "none"));
    appears("caller_leaves_first", &front("never", 3, "none"));
    // Two tries and a pause of 200 ms between: it is over just before the caller leaves, or just after. A pause that
    // is drawn between 0 and 200 ms is at most 200 ms.
    for jitter in ["none", "full"] {
        does_not("caller_leaves_first", &front(&millis(0.5 * (leaves - 0.2) - 0.01), 2, jitter));
        appears("caller_leaves_first", &front(&millis(0.5 * (leaves - 0.2) + 0.01), 2, jitter));
    }
}

#[test]
fn load_ceilings() {
    let waits = tally(&Draws(lognormal(1.0, 2.0), 1).take(3_000), f64::INFINITY);
    let mut entry = entry(0.2);
    let free = ask(&waits, &entry);
    for (ceiling, code) in [(1.1, "load_ceiling_binds"), (20.0, "")] {
        entry.retry.load_ceiling = Some(ceiling);
        let advice = ask(&waits, &entry);
        if code.is_empty() {
            does_not("load_ceiling_binds", &advice);
        } else {
            appears(code, &advice);
            assert!(
                advice.advice.attempts_per_request.unwrap() <= ceiling * (1.0 + 1e-9),
                "{:?}",
                advice.advice
            );
            assert!(advice.advice.give_up_after_s.unwrap() > free.advice.give_up_after_s.unwrap());
        }
        does_not("load_ceiling_unreachable", &advice);
    }
    // Three in ten fail whatever one does: no time keeps to 1.1 attempts a request.
    let mut failing = waits.clone();
    for _ in 0..1_300 {
        failing.add(&Wait::new(0.01, Ending::Failed).unwrap());
    }
    entry.retry.load_ceiling = Some(1.1);
    let advice = ask(&failing, &entry);
    appears("load_ceiling_unreachable", &advice);
    does_not("load_ceiling_binds", &advice);
}

#[test]
fn largest_step() {
    let waits = tally(&Draws(lognormal(1.0, 2.0), 1).take(3_000), f64::INFINITY);
    let mut entry = entry(0.2);
    for (now, to) in [(40.0, 20.0), (0.05, 0.075)] {
        entry.now = Some(GiveUp::After(now));
        let advice = ask(&waits, &entry);
        appears("largest_step", &advice);
        let proposal = advice.advice.proposal.unwrap();
        assert!(proposal.step_limited && (proposal.to_s.unwrap() - to).abs() < 1e-9, "{proposal:?}");
    }
    entry.guard.largest_step = 10.0;
    does_not("largest_step", &ask(&waits, &entry));
    entry.guard.largest_step = 0.5;
    entry.now = None;
    does_not("largest_step", &ask(&waits, &entry));
}

#[test]
fn open_waits_hang() {
    let waits = tally(&Draws(weibull(2.0, 1.0), 1).take(1_000), f64::INFINITY);
    does_not("open_waits_hang", &ask(&waits, &entry(0.2)));
    let open = |age: f64, n: u64| {
        let mut waits = waits.clone();
        waits.add(&Wait::new(age, Ending::Waiting).unwrap().with_count(n).unwrap());
        ask(&waits, &entry(0.2))
    };
    appears("open_waits_hang", &open(100.0, 5));
    // Open, but not longer than others took.
    does_not("open_waits_hang", &open(1.5, 5));
    // Given up at that age is not open.
    let mut gave_up = waits.clone();
    gave_up.add(&Wait::new(100.0, Ending::GaveUp).unwrap().with_count(5).unwrap());
    does_not("open_waits_hang", &ask(&gave_up, &entry(0.2)));
}

#[test]
fn free_restart() {
    let waits = tally(&Draws(lognormal(1.0, 2.0), 1).take(1_000), f64::INFINITY);
    appears("free_restart", &ask(&waits, &Entry::without_policy()));
    does_not("free_restart", &ask(&waits, &entry(0.2)));
    let mut floor = Entry::without_policy();
    floor.guard.floor = Some(0.1);
    does_not("free_restart", &ask(&waits, &floor));
}

#[test]
fn deadline_retries() {
    let waits = tally(&Draws(lognormal(1.0, 2.0), 1).take(1_000), f64::INFINITY);
    let mut entry = entry(0.2);
    entry.worth.as_mut().unwrap().aim = Aim::Deadline { by: 8.0, attempts: 3 };
    does_not("deadline_retries", &ask(&waits, &entry));
    entry.retry.repeatable = false;
    appears("deadline_retries", &ask(&waits, &entry));
    // One attempt is no retry.
    entry.worth.as_mut().unwrap().aim = Aim::Deadline { by: 8.0, attempts: 1 };
    does_not("deadline_retries", &ask(&waits, &entry));
}

/// Draws of a law as a histogram with these bounds sees them.
fn histogram(ages: &[f64], bounds: &[f64]) -> Tally {
    let mut tally = Tally::default();
    for age in ages {
        let place = bounds.partition_point(|bound| bound < age);
        let over = place.checked_sub(1).map_or(0.0, |before| bounds[before]);
        let upto = bounds.get(place).copied().unwrap_or(f64::INFINITY);
        tally.add(&Wait::between(over, upto, Ending::Done).unwrap());
    }
    tally
}

#[test]
fn wide_buckets() {
    let ages = Draws(lognormal(0.1, 1.5), 1).take(5_000);
    let fine: Vec<f64> = (0..700).map(|i| 1e-4 * 1.02f64.powi(i)).collect();
    let entry = entry(0.05);
    does_not("wide_buckets", &ask(&histogram(&ages, &fine), &entry));
    let advice = ask(&histogram(&ages, &[0.01, 0.1, 1.0, 10.0]), &entry);
    appears("wide_buckets", &advice);
    assert!(!advice.advice.buckets.unwrap().add_bounds_s.is_empty());
    does_not("wide_buckets", &ask(&tally(&ages, f64::INFINITY), &entry));
}

#[test]
fn buckets_cannot_tell() {
    let ages = Draws(lognormal(0.1, 0.5), 1).take(2_000);
    let entry = entry(0.05);
    does_not("buckets_cannot_tell", &ask(&histogram(&ages, &[0.05, 0.1, 0.2]), &entry));
    for bounds in [[5.0, 10.0], [1e-4, 1e-3]] {
        let advice = ask(&histogram(&ages, &bounds), &entry);
        appears("buckets_cannot_tell", &advice);
        assert_eq!(advice.advice.action, Action::GatherEvidence);
        assert!(advice.advice.buckets.unwrap().add_bounds_s.len() > 3);
    }
}
