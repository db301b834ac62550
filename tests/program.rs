//! Outside truth through the whole program: samples of a known law in, advice out.
//!
//! The optima are those of `tests/reference/stopping.json`, computed with 40 digits (mpmath) apart from this program;
//! what an advised time is truly worth is read off the true law, not off the sample.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

#[path = "support/truth_table.rs"]
mod truth_table;

use outwait::advice::{Action, Advice};
use outwait::advise::{Case, Terms, advise};
use outwait::policy::{Entry, Sticky};
use outwait::stopping::{Aim, Objective, Retry, Worth};
use outwait::tail::Law;
use outwait::tally::Book;
use outwait::wait::{Age, Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use rayon::prelude::*;

use truth_table::{HalfUniform, Uniform, cases, number};

const WAITS: usize = 20_000;

/// The age at which a share `u` of the law is still open, s; infinite where more than that never ends.
fn age_at(law: &dyn Law, u: f64) -> f64 {
    let goal = u.ln();
    let (mut low, mut high) = (1e-9_f64.ln(), 1e9_f64.ln());
    if law.log_survival(high.exp()) >= goal {
        return f64::INFINITY;
    }
    for _ in 0..52 {
        let middle = 0.5 * (low + high);
        if law.log_survival(middle.exp()) >= goal { low = middle } else { high = middle }
    }
    high.exp()
}

/// Attempts under a law and a constant hazard of failures, each watched until it ends or up to `upto` s.
fn waits(law: &dyn Law, failed_rate: f64, upto: f64, n: usize, seed: u64) -> Vec<Wait> {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    let mut uniform = move || 1.0 - random.random::<f64>();
    (0..n)
        .map(|_| {
            let done = age_at(law, uniform());
            let failed = -uniform().ln() / failed_rate;
            let (age, ending) = if done.min(failed) > upto {
                (upto, Ending::Waiting)
            } else if done <= failed {
                (done, Ending::Done)
            } else {
                (failed, Ending::Failed)
            };
            Wait::new(age, ending).unwrap()
        })
        .collect()
}

/// Through a book, as the program counts them.
fn through(waits: &[Wait], entry: &Entry) -> Advice {
    let mut book = Book::default();
    for wait in waits {
        book.add("stream", wait).unwrap();
    }
    let tally = book.stream("stream").unwrap().whole();
    advise(&Case::new("stream", &tally), entry, 1)
}

fn entry(worth: Worth) -> Entry {
    let mut entry = Entry { worth: Some(worth), ..Entry::without_policy() };
    entry.retry.sticky = Sticky::Given(worth.sticky);
    entry
}

/// The truth table with samples of 20,000 waits instead of the laws.
#[test]
fn samples_in_advice_out() {
    let cases = cases();
    let judged: Vec<(String, Vec<String>)> = cases
        .par_iter()
        .enumerate()
        .map(|(number_of_case, c)| {
            let mut gaps = Vec::new();
            let (floor, ceiling) = (c.limits.floor(), c.limits.ceiling());
            let mut entry = entry(c.worth);
            entry.guard.floor = Some(floor).filter(|&f| f > 0.0);
            entry.guard.ceiling = Some(ceiling);
            let seed = 1_000 + number_of_case as u64;
            // Nobody gives up: what lies past the ceiling is of no use, but is seen.
            let advice = through(&waits(c.outlook.law(), c.failed_rate, 20.0 * ceiling, WAITS, seed), &entry);
            let decision = &advice.advice;

            let objective = Objective::new(&c.outlook, &c.worth, &Retry::default(), c.limits).unwrap();
            let tau = number(&c.expect["tau"]);
            let best = objective.score(tau);
            let regret = |t: f64| (best - objective.score(t)) / best.abs();
            let at = decision.give_up_after_s.unwrap_or(ceiling);
            let either = c.expect["optimum"] == "flat" || regret(ceiling) < 0.01;
            if !either && decision.action.name() != c.expect["action"] {
                gaps.push(format!("{} for {}", decision.action.name(), c.expect["action"]));
            }
            if !matches!(decision.action, Action::GiveUpAfter | Action::WaitItOut) {
                gaps.push(format!("{}: {}", decision.action.name(), decision.because));
            }
            if !(floor..=ceiling).contains(&at) {
                gaps.push(format!("{at} s is out of bounds"));
            }
            if regret(at) > 0.01 {
                gaps.push(format!("loses {:.4} at {at} s, best {tau} s", regret(at)));
            }
            let rate = decision.rate_per_s.unwrap_or(f64::NAN);
            let off = (rate - best).abs() / best.abs();
            // Where the best comes early, few completions speak for it, and the best of many such rates looks better than
            // it is: three standard errors of their number.
            let completions = WAITS as f64 * decision.done_share.unwrap_or(0.0);
            if off.is_nan() || off > f64::max(0.03, 3.0 / completions.sqrt()) {
                gaps.push(format!("earns {rate} for {best}"));
            }
            println!(
                "{:34} {:14} {:>12.5} best {:>12.5} loses {:.5} rate off {:.4}",
                c.id,
                decision.action.name(),
                at,
                tau,
                regret(at),
                off
            );
            (c.id.clone(), gaps)
        })
        .collect();
    let gaps: Vec<String> =
        judged.iter().flat_map(|(id, gaps)| gaps.iter().map(move |gap| format!("{id}: {gap}"))).collect();
    assert!(gaps.is_empty(), "{} gaps:\n{}", gaps.len(), gaps.join("\n"));
}

/// Common practice, no source: who knows that a wait is over within `b`, evenly, holds on.
#[test]
fn uniform_waits_are_waited_out() {
    for (seed, high) in [(1, 10.0), (2, 0.3), (3, 3_600.0)] {
        let law = Uniform { low: 0.0, high };
        let mut entry = entry(Worth::default());
        entry.worth.as_mut().unwrap().pause.gave_up = 0.05 * high;
        let advice = through(&waits(&law, 0.0, f64::INFINITY, 2_000, seed), &entry);
        assert_eq!(advice.advice.action, Action::WaitItOut, "{high}: {:?}", advice.advice);
    }
}

/// Common practice, no source: half of the waits are over before 20 s, evenly, the other half end at exactly 90 s, and
/// a new start takes 2 s. Who was not served by 20 s leaves: a little after, and before it only by the last gap between
/// completions that the sample happens to have (two in a thousand and one at most come in it).
#[test]
fn half_before_20_s_and_half_at_90_s() {
    for (seed, n) in [(1, 1_000), (2, 5_000), (3, 20_000)] {
        let law = HalfUniform { share: 0.5, high: 20.0, at: 90.0 };
        let mut entry = entry(Worth::default());
        entry.worth.as_mut().unwrap().pause.gave_up = 2.0;
        let sample = waits(&law, 0.0, f64::INFINITY, n, seed);
        let at = through(&sample, &entry).advice.give_up_after_s.unwrap();
        let late = |w: &&Wait| matches!(w.age(), Age::Exact(t) if at < t && t <= 20.0);
        let cut = sample.iter().filter(late).count();
        assert!(at < 20.5 && cut <= 1 + n / 1_000, "{n}: {cut} come between {at} and 20 s");
    }
}

/// The same through a policy file and the days of a book, for a stream that no one names.
#[test]
fn a_policy_is_found_by_name() {
    let policy = outwait::policy::parse(
        "version: 1\nstreams:\n  - match: \"a.*\"\n    aim: rate\n    pause: {gave_up: 2s}\n  - match: \"b.*\"\n    kind: job\n",
        "p.yaml",
    )
    .unwrap();
    let law = HalfUniform { share: 0.5, high: 20.0, at: 90.0 };
    let mut book = Book::default();
    for wait in waits(&law, 0.0, f64::INFINITY, 1_000, 7) {
        for stream in ["a.x", "b.x", "c.x"] {
            book.add(stream, &wait).unwrap();
        }
    }
    let terms = Terms { policy: Some(&policy), newest: None, seed: 1, past: None };
    let all = book.streams().into_iter().map(|(stream, days)| terms.advise(stream, days, None)).collect();
    let set = terms.set(all, None);
    let actions: Vec<Action> = set.streams.iter().map(|a| a.advice.action).collect();
    assert_eq!(actions, [Action::GiveUpAfter, Action::StateACost, Action::StateACost]);
    assert_eq!(set.streams[1].kind, "job");
    assert!(set.streams[1].advice.because.contains("nothing says what the waiting time costs"));
}

/// The deadline's cap is an attempt count, never below one.
#[test]
fn a_deadline_gives_a_schedule_that_fits() {
    for c in cases().iter().filter(|c| matches!(c.worth.aim, Aim::Deadline { .. })).take(3) {
        let Aim::Deadline { by, attempts } = c.worth.aim else { continue };
        let advice =
            through(&waits(c.outlook.law(), c.failed_rate, f64::INFINITY, 3_000, 5), &entry(c.worth));
        let schedule = &advice.advice.schedule_s;
        assert!(!schedule.is_empty() && schedule.len() <= attempts as usize, "{}: {schedule:?}", c.id);
        let pauses = c.worth.pause.gave_up * (schedule.len() - 1) as f64;
        assert!(schedule.iter().sum::<f64>() + pauses <= by * (1.0 + 1e-9), "{}: {schedule:?}", c.id);
    }
}
