//! Every policy file that is shipped, on waits of the kind it is meant for: the advice is of use, keeps to the guards, and
//! moves the right way when a price changes.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

use outwait::advice::{Action, Advice};
use outwait::advise::Terms;
use outwait::policy::{Entry, Policy, parse};
use outwait::stopping::Aim;
use outwait::tally::{Book, Days};
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

const MINUTE: f64 = 60.0;
const HOUR: f64 = 3_600.0;
const DAY: f64 = 86_400.0;

/// Standard normal deviate below which a share `u` lies.
fn deviate(u: f64) -> f64 {
    -std::f64::consts::SQRT_2 * statrs::function::erf::erfc_inv(2.0 * u)
}

fn lognormal(median: f64, sigma: f64, u: f64) -> f64 {
    median * (sigma * deviate(u)).exp()
}

/// Waits of a law given by its quantiles, given up at `cut` s.
fn waits(n: usize, cut: f64, quantile: impl Fn(f64) -> f64) -> Days {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(12);
    let mut book = Book::default();
    for _ in 0..n {
        let age = quantile(1.0 - random.random::<f64>());
        let (age, ending) = if age > cut { (cut, Ending::GaveUp) } else { (age, Ending::Done) };
        book.add("s", &Wait::new(age, ending).unwrap()).unwrap();
    }
    book.stream("s").unwrap().clone()
}

/// A stretch of a law that is a mixture: the part of `u` within it, or the next.
fn mix(u: f64, share: f64, first: impl Fn(f64) -> f64, second: impl Fn(f64) -> f64) -> f64 {
    if u < share { first(u / share) } else { second((u - share) / (1.0 - share)) }
}

fn never(_: f64) -> f64 {
    f64::INFINITY
}

/// What a policy with one entry says, with the entry changed.
fn ask(policy: &Policy, days: &Days, change: impl Fn(&mut Entry)) -> Advice {
    let mut policy = policy.clone();
    change(&mut policy.entries[0]);
    Terms { policy: Some(&policy), newest: None, seed: 1, past: None }.advise("s", days, None)
}

/// The advised time; the ceiling where one waits it out.
fn time(advice: &Advice) -> f64 {
    let d = &advice.advice;
    assert!(matches!(d.action, Action::GiveUpAfter | Action::WaitItOut), "{d:?}");
    let at = d.give_up_after_s.or(d.ceiling_s).unwrap();
    assert!(d.floor_s.unwrap() <= at && at <= d.ceiling_s.unwrap(), "{d:?}");
    at
}

fn worth(entry: &mut Entry) -> &mut outwait::stopping::Worth {
    entry.worth.as_mut().unwrap()
}

/// The first list of changes makes one hold on longer, the second give up sooner.
fn moves(policy: &Policy, days: &Days, longer: &[fn(&mut Entry)], sooner: &[fn(&mut Entry)]) -> Advice {
    let advice = ask(policy, days, |_| ());
    assert_eq!(advice.advice.action, Action::GiveUpAfter, "{:?}", advice.advice);
    let at = time(&advice);
    for (i, change) in longer.iter().enumerate() {
        let moved = time(&ask(policy, days, change));
        assert!(moved > 1.01 * at, "longer {i}: {moved} from {at}");
    }
    for (i, change) in sooner.iter().enumerate() {
        let moved = time(&ask(policy, days, change));
        assert!(moved < at / 1.01, "sooner {i}: {moved} from {at}");
    }
    advice
}

/// Dead workers are the share that never ends, a double the negative worth of giving up.
#[test]
fn a_job_lease() {
    let policy = parse(include_str!("../policies/job-lease.yaml"), "job-lease.yaml").unwrap();
    let leases = |dead: f64| {
        waits(6_000, 15.0 * MINUTE, move |u| mix(u, 1.0 - dead, |v| lognormal(3.0 * MINUTE, 0.5, v), never))
    };
    let days = leases(0.04);
    let advice = moves(
        &policy,
        &days,
        &[|e| worth(e).gave_up = -2.0, |e| worth(e).pause.gave_up = 10.0 * MINUTE],
        &[|e| worth(e).gave_up = 0.0],
    );
    // Nearly all of the living are done by then, and no dead worker is waited for as long as today.
    assert!((6.0 * MINUTE..15.0 * MINUTE).contains(&time(&advice)), "{:?}", advice.advice);
    assert!(advice.advice.done_share.unwrap() > 0.9, "{:?}", advice.advice);
    // The more workers die, the sooner one looks.
    assert!(time(&ask(&policy, &leases(0.15), |_| ())) < time(&advice));
    // A step is at most a quarter.
    let to = advice.advice.proposal.unwrap().to_s.unwrap();
    assert!(to >= 0.75 * 15.0 * MINUTE * (1.0 - 1e-9), "{to}");
}

/// Jobs that run for three quarters of an hour, and a few that hang.
#[test]
fn a_batch_job() {
    let policy = parse(include_str!("../policies/batch-job.yaml"), "batch-job.yaml").unwrap();
    let run = |v: f64| 50.0 * MINUTE * (-(1.0 - v).ln()).sqrt();
    let days = waits(2_000, 6.0 * HOUR, |u| mix(u, 0.97, run, never));
    let advice = moves(
        &policy,
        &days,
        &[|e| worth(e).gave_up = -30.0],
        &[|e| worth(e).aim = Aim::CarryingCost(15.0 / HOUR), |e| worth(e).done = 4.0],
    );
    assert!((2.0 * HOUR..6.0 * HOUR).contains(&time(&advice)), "{:?}", advice.advice);
    // Without those that hang: a rising hazard is waited out.
    let sound = ask(&policy, &waits(2_000, f64::INFINITY, run), |_| ());
    assert_eq!(sound.advice.action, Action::WaitItOut, "{:?}", sound.advice);
}

#[test]
fn a_call_with_a_fallback() {
    let policy =
        parse(include_str!("../policies/call-with-fallback.yaml"), "call-with-fallback.yaml").unwrap();
    let days = waits(6_000, f64::INFINITY, |u| lognormal(0.06, 1.0, u));
    let advice = moves(&policy, &days, &[|e| worth(e).gave_up = 0.3], &[|e| worth(e).gave_up = 0.8]);
    // One attempt a request, however it ends.
    assert_eq!(advice.advice.attempts_per_request, Some(1.0));
    // A fallback that is worth nothing, and harm where it is negative: hold on as long as the page allows.
    assert_eq!(time(&ask(&policy, &days, |e| worth(e).gave_up = -1.0)), 0.5);
}

#[test]
fn a_place_in_a_queue() {
    let policy = parse(include_str!("../policies/queue-place.yaml"), "queue-place.yaml").unwrap();
    // Most are served in a minute, the others stand behind a rush.
    let queue = |u: f64| mix(u, 0.7, |v| -45.0 * (1.0 - v).ln(), |v| -45.0 * MINUTE * (1.0 - v).ln());
    let days = waits(4_000, 2.0 * HOUR, queue);
    let advice = moves(
        &policy,
        &days,
        &[|e| worth(e).pause.gave_up = 30.0 * MINUTE, |e| worth(e).attempt_cost = 0.2],
        &[|e| worth(e).pause.gave_up = 3.0 * MINUTE, |e| worth(e).gave_up = 0.3],
    );
    assert!(time(&advice) < 20.0 * MINUTE, "{:?}", advice.advice);
}

#[test]
fn a_reply() {
    let policy = parse(include_str!("../policies/reply.yaml"), "reply.yaml").unwrap();
    // A quarter never answers; of the others half within two and a half days.
    let reply = |v: f64| 2.5 * DAY * (v / (1.0 - v)).powf(1.0 / 1.5);
    let days = waits(800, 60.0 * DAY, |u| mix(u, 0.75, reply, never));
    let advice = moves(
        &policy,
        &days,
        &[|e| worth(e).attempt_cost = 0.4, |e| worth(e).pause.gave_up = 7.0 * DAY],
        &[|e| worth(e).gave_up = 0.3],
    );
    assert!((DAY..10.0 * DAY).contains(&time(&advice)), "{:?}", advice.advice);
    // From never there is no share to step by.
    let proposal = advice.advice.proposal.unwrap();
    assert!(!proposal.step_limited && proposal.to_s == advice.advice.give_up_after_s, "{proposal:?}");
}

#[test]
fn a_request_to_a_service() {
    let policy = parse(include_str!("../policies/service-request.yaml"), "service-request.yaml").unwrap();
    let days = waits(6_000, 1.0, |u| mix(u, 0.95, |v| lognormal(0.04, 0.4, v), |v| lognormal(2.0, 0.5, v)));
    let advice = moves(&policy, &days, &[|e| worth(e).pause.gave_up = 0.1], &[]);
    assert!((0.06..0.5).contains(&time(&advice)), "{:?}", advice.advice);
    assert!(advice.advice.attempts_per_request.unwrap() <= 1.2);
    let budget = advice.advice.retry_budget.unwrap();
    assert!((budget - (advice.advice.attempts_per_request.unwrap() - 1.0)).abs() < 1e-9);
    // A ceiling of 5% more moves it up.
    assert!(time(&ask(&policy, &days, |e| e.retry.load_ceiling = Some(1.06))) >= time(&advice));
}

/// The reference names every key; each of its entries gives an advice.
#[test]
fn the_reference() {
    let policy = parse(include_str!("../policies/reference.yaml"), "reference.yaml").unwrap();
    let terms = Terms { policy: Some(&policy), newest: None, seed: 1, past: None };
    let quick = waits(2_000, f64::INFINITY, |u| lognormal(0.05, 1.5, u));
    let slow = waits(2_000, f64::INFINITY, |u| lognormal(2.0 * HOUR, 1.0, u));
    let letters = waits(2_000, f64::INFINITY, |u| lognormal(3.0 * DAY, 1.5, u));
    for (stream, days) in [
        ("catalogue.lookup", &quick),
        ("index.rebuild", &slow),
        ("gate.open", &quick),
        ("letter.loan", &letters),
        ("x", &slow),
    ] {
        let advice = terms.advise(stream, days, None);
        time(&advice);
        assert_eq!(advice.advice.schedule_s.is_empty(), stream != "gate.open", "{:?}", advice.advice);
    }
    // Backoff with full jitter: half of each pause on average.
    assert!(terms.entry("catalogue.lookup").worth.is_some());
}

/// Without a cost of time nothing can be said; with too little evidence, not yet.
#[test]
fn nothing_to_go_by() {
    for text in [include_str!("../policies/job-lease.yaml"), include_str!("../policies/service-request.yaml")]
    {
        let policy = parse(text, "p.yaml").unwrap();
        let enough = waits(1_000, f64::INFINITY, |u| lognormal(2.0, 1.0, u));
        let advice = ask(&policy, &enough, |e| e.worth = None);
        assert_eq!(advice.advice.action, Action::StateACost);
        assert!(
            advice.advice.because.contains("nothing says what the waiting time costs"),
            "{}",
            advice.advice.because
        );
        // The tail is read all the same.
        assert!(!advice.fits.is_empty());

        let few = waits(200, f64::INFINITY, |u| lognormal(90.0, 0.5, u));
        let advice = ask(&policy, &few, |e| e.retry.attempts = None);
        assert_eq!(advice.advice.action, Action::GatherEvidence);
        assert!(advice.advice.because.contains("200 of the "), "{}", advice.advice.because);
        // Luby, Sinclair & Zuckerman 1993: 1, 1, 2, 1, 1, 2, 4, 1 times a base, here the median so far.
        let stop_gap = &advice.advice.stop_gap_s;
        let base = stop_gap[0];
        let ceiling = advice.advice.ceiling_s.unwrap();
        let luby = [1.0, 1.0, 2.0, 1.0, 1.0, 2.0, 4.0, 1.0].map(|k| f64::min(k * base, ceiling));
        assert_eq!(stop_gap[..], luby, "{stop_gap:?}");
        assert!(base >= advice.advice.floor_s.unwrap() && base <= 100.0, "{base}");
    }
}
