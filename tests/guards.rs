//! Week by week through twelve weeks of the demo scenario: the time in force follows the proposals, does not flap, keeps to
//! its guards, and follows a shift of the law.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

use outwait::advice::{Advice, Change};
use outwait::advise::Terms;
use outwait::demo::{self, DemoRecord, Scenario};
use outwait::policy::{GiveUp, Policy, parse};
use outwait::settle::{Decide, Settled, decide};
use outwait::tally::{Day, Days};
use outwait::wait::{Ending, Wait};
use rayon::prelude::*;

const WEEK: f64 = 7.0 * 86_400.0;
const WEEKS: u32 = 12;
/// First week under the new law, from 1.
const SHIFT: u32 = 9;

/// What was known of a wait at a time: nothing before it began to be watched, open until it ended.
fn known(record: &DemoRecord, at: f64) -> Option<Wait> {
    if record.at <= at {
        return Some(record.wait().unwrap());
    }
    let elapsed = at - (record.at - record.elapsed);
    (elapsed > record.entered.max(0.0)).then(|| {
        let wait = Wait::new(elapsed, Ending::Waiting).unwrap().with_entered(record.entered).unwrap();
        wait.with_attempt(record.attempt).unwrap().with_at(at - 1e-3).unwrap()
    })
}

/// The record as it would have been with a timer of `timer` s: cut off there, and a first attempt that was cut has no
/// retries that anyone knows of.
fn cut_at(record: &DemoRecord, timer: f64) -> Option<DemoRecord> {
    if record.elapsed <= timer {
        return (record.attempt == 1 || timer.is_infinite()).then_some(*record);
    }
    let at = record.at - record.elapsed + timer;
    let cut = DemoRecord { elapsed: timer, ending: Ending::GaveUp, at, ..*record };
    (record.attempt == 1 && timer > record.entered).then_some(cut)
}

/// One week's end: what was in force, what is advised.
struct Step {
    week: u32,
    now: f64,
    advice: Advice,
}

impl Step {
    /// What is put in force after it, s.
    fn next(&self) -> f64 {
        match self.advice.advice.proposal {
            Some(p) if p.change != Change::Keep => p.to_s.unwrap_or(f64::INFINITY),
            _ => self.now,
        }
    }
}

/// Every week's advice for one stream, each proposal put in force for the next. `closed`: the time in force cuts off
/// the waits of its week, as it would in truth; otherwise only the scenario's own timer does. `signed`: each proposal is put
/// in force by a decision that is kept, and the next week starts from it, with hysteresis and cool-down; otherwise the policy
/// is changed.
fn follow(
    policy: &Policy,
    scenario: &Scenario,
    records: &[DemoRecord],
    stream: &str,
    closed: bool,
    signed: bool,
) -> Vec<Step> {
    let mut policy = policy.clone();
    let mut settled = Settled::default();
    let mut steps: Vec<Step> = Vec::new();
    for week in 1..=WEEKS {
        let end = scenario.begin() + f64::from(week) * WEEK;
        let mut days = Days::default();
        for record in records.iter().filter(|r| r.stream == stream) {
            // The timer of the week in which it began; before the first change only the scenario's own.
            let began = ((record.at - record.elapsed - scenario.begin()) / WEEK).floor().max(0.0) as usize;
            let timer = if closed && began > 0 { steps.get(began).map(|s| s.now) } else { None };
            let timer = timer.or(steps.last().filter(|_| closed && began > 0).map(Step::next));
            let seen = cut_at(record, timer.unwrap_or(f64::INFINITY));
            if let Some(wait) = seen.and_then(|r| known(&r, end)) {
                days.add(&wait);
            }
        }
        let Day::Number(newest) = Day::of(Some(end - 1.0)) else { unreachable!() };
        let past = settled.past(end);
        let terms = Terms { policy: Some(&policy), newest: Some(newest), seed: 1, past: Some(&past) };
        let entry = terms.entry(stream);
        let now = entry.now.unwrap();
        let advice = terms.advise(stream, &days, None);
        let step = Step { week, now: now.seconds(), advice };
        let (_, i) = policy.entry_for(stream).unwrap();
        let next = if step.next().is_finite() { GiveUp::After(step.next()) } else { GiveUp::Never };
        if !signed {
            policy.entries[i].now = Some(next);
        } else if next != now {
            let at = jiff::Timestamp::from_second(end as i64).unwrap();
            let accept =
                decide(Decide::Accept, stream, Some(&step.advice), &entry, &settled, at, ("Ada", "weekly"));
            settled.add(stream, accept.unwrap());
        }
        steps.push(step);
    }
    steps
}

/// Share of the best rate that a time in force truly loses.
fn truly_loses(stream: &demo::Stream, at: f64, after_shift: bool) -> f64 {
    let outlook = stream.outlook(after_shift);
    let best = stream.best(after_shift);
    1.0 - stream.rate(&outlook, at.min(stream.terms.ceiling)) / stream.rate(&outlook, best.give_up_after)
}

/// What goes wrong in a replay, in sentences.
fn faults(stream: &demo::Stream, policy: &Policy, steps: &[Step]) -> Vec<String> {
    let guard = policy.entry_for(stream.name).unwrap().0.guard;
    let mut faults = Vec::new();
    // Only this stream's law shifts.
    let shifts = stream.shifted.is_some();
    let calm = |week: u32| !shifts || week < SHIFT;
    let mut settled = false;
    let (mut way, mut changes) = (None, 0);
    for step in steps {
        let Step { week, now, advice } = step;
        let next = step.next();
        if let Some(proposal) = advice.advice.proposal.filter(|p| p.change != Change::Keep) {
            if calm(*week) {
                if way.is_some_and(|w| w != proposal.change) {
                    faults.push(format!("week {week} turns round: {now} to {next}"));
                }
                way = Some(proposal.change);
                changes += u32::from(settled);
            }
            settled |= !proposal.step_limited;
            let within =
                guard.floor.unwrap() <= next && (next <= guard.ceiling.unwrap() || next.is_infinite());
            let step = (1.0 - guard.largest_step) * now <= next * (1.0 + 1e-9)
                && (next <= (1.0 + guard.largest_step) * now * (1.0 + 1e-9));
            if !within || !(step || now.is_infinite()) {
                faults.push(format!("week {week} goes from {now} to {next} against its guards"));
            }
        } else {
            settled |= advice.advice.proposal.is_some();
        }
    }
    if changes > 1 {
        faults.push(format!("{changes} changes once settled"));
    }
    let in_force = |week: u32| steps.iter().find(|s| s.week == week).map_or(f64::NAN, Step::next);
    for (week, after) in [(SHIFT - 1, false), (SHIFT + 1, true), (WEEKS, true)] {
        // Twice the slack: what is in force may be a slack from what is advised, which has its own sampling error.
        let loses = truly_loses(stream, in_force(week), after && shifts);
        if loses.is_nan() || loses >= 2.0 * guard.slack {
            faults.push(format!("after week {week} {} s is in force and loses {loses}", in_force(week)));
        }
    }
    faults
}

fn replay(seed: u64, closed: bool, signed: bool) {
    let policy = parse(include_str!("../policies/fernhollow.yaml"), "fernhollow.yaml").unwrap();
    let scenario = Scenario::spanning(seed, WEEKS, SHIFT, demo::END).unwrap();
    let records: Vec<DemoRecord> = scenario.waits().collect();
    let faults: Vec<String> = demo::truth()
        .par_iter()
        .flat_map(|stream| {
            let steps = follow(&policy, &scenario, &records, stream.name, closed, signed);
            let times: Vec<String> = steps.iter().map(|s| format!("{:.5}", s.next())).collect();
            println!("{} {}", stream.name, times.join(" "));
            faults(stream, &policy, &steps)
                .into_iter()
                .map(|f| format!("{}: {f}", stream.name))
                .collect::<Vec<_>>()
        })
        .collect();
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}

#[test]
fn twelve_weeks_without_flapping() {
    replay(20, false, false);
}

/// The same with the time in force cutting off what is seen, as it would.
#[test]
fn twelve_weeks_behind_its_own_timer() {
    replay(21, true, false);
}

/// The same where every change is signed, and the next week starts from what was signed.
#[test]
fn twelve_weeks_of_signed_changes() {
    replay(20, false, true);
}
