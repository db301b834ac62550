//! The rule in force that waits were cut by: stated in the policy, or seen in the ages at which most gave up.

use serde::{Deserialize, Serialize};

use crate::policy::GiveUp;
use crate::tally::Mass;
use crate::wait::Ending;

/// A timer fires a little before or much after its time: give-ups between these multiples of it were its work.
const AROUND: [f64; 2] = [0.95, 1.1];
/// The share of give-ups that must lie together for a rule to be seen in them.
const MOST: f64 = 0.5;
/// Fewer give-ups than this show no rule.
const LEAST: f64 = 10.0;

/// The time in force.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Rule {
    /// After how long it gives up, s; absent for never.
    pub at_s: Option<f64>,
    /// Where it is known from.
    pub from: RuleFrom,
    /// Share of the give-ups that are its work, 0 to 1; absent where nobody gave up.
    pub share: Option<f64>,
}

/// Where a rule is known from.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum RuleFrom {
    /// The policy states it (`now`).
    Policy,
    /// Half of the give-ups or more lie together.
    Data,
}

/// How a closed wait ended, as the rule sees it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Cut {
    /// By itself: done or failed.
    Ended,
    /// Given up at the time in force.
    ByRule,
    /// Given up earlier.
    Before,
    /// Given up later.
    After,
    /// Given up, where no rule is known.
    NoRule,
}

impl Cut {
    /// Every case, in the order of tables.
    pub const ALL: [Cut; 5] = [Cut::Ended, Cut::ByRule, Cut::Before, Cut::After, Cut::NoRule];
}

impl Rule {
    /// The rule that the policy states, else the one seen in the ages at which waits were given up (sorted).
    pub fn of(now: Option<GiveUp>, gave_up: &[Mass]) -> Option<Rule> {
        let total: f64 = gave_up.iter().map(|m| m.weight).sum();
        let around = |at: f64| gave_up.iter().filter(|m| is_around(m.age, at)).map(|m| m.weight).sum::<f64>();
        match now {
            Some(GiveUp::After(at)) => Some(Rule {
                at_s: Some(at),
                from: RuleFrom::Policy,
                share: (total > 0.0).then(|| around(at) / total),
            }),
            Some(GiveUp::Never) => {
                Some(Rule { at_s: None, from: RuleFrom::Policy, share: (total > 0.0).then_some(0.0) })
            }
            None => {
                let (at, share) = densest(gave_up, total)?;
                Some(Rule { at_s: Some(at), from: RuleFrom::Data, share: Some(share) })
            }
        }
    }

    /// Whether most of the give-ups were a timer's, so that they tell nothing of anybody's patience.
    pub fn is_timer(&self) -> bool {
        self.at_s.is_some() && self.share.is_some_and(|share| share >= MOST)
    }
}

/// What ended a wait of an age.
#[inline]
pub(super) fn cut(rule: Option<&Rule>, age: f64, ending: Ending) -> Cut {
    match (ending, rule) {
        (Ending::Done | Ending::Failed, _) => Cut::Ended,
        (_, None) => Cut::NoRule,
        // Under a rule of never, whoever gives up does so before it.
        (_, Some(Rule { at_s: None, .. })) => Cut::Before,
        (_, Some(Rule { at_s: Some(at), .. })) if is_around(age, *at) => Cut::ByRule,
        (_, Some(Rule { at_s: Some(at), .. })) if age < *at => Cut::Before,
        _ => Cut::After,
    }
}

fn is_around(age: f64, at: f64) -> bool {
    (AROUND[0] * at..=AROUND[1] * at).contains(&age)
}

/// The age from which the most give-ups lie within a tenth, with their share; `None` where that is less than half.
fn densest(gave_up: &[Mass], total: f64) -> Option<(f64, f64)> {
    if total < LEAST {
        return None;
    }
    let (mut best, mut within, mut end) = ((0.0, 0.0), 0.0, 0);
    for first in gave_up {
        while end < gave_up.len() && gave_up[end].age <= AROUND[1] * first.age {
            within += gave_up[end].weight;
            end += 1;
        }
        if within > best.1 {
            best = (first.age, within);
        }
        within -= first.weight;
    }
    (best.1 >= MOST * total).then_some((best.0, best.1 / total))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(ages: &[f64]) -> Vec<Mass> {
        ages.iter().map(|&age| Mass { age, weight: 10.0 }).collect()
    }

    #[test]
    fn seen_where_most_gave_up() {
        let rule = Rule::of(None, &at(&[0.3, 2.0, 2.001, 2.01, 9.0])).unwrap();
        assert_eq!((rule.at_s, rule.share), (Some(2.0), Some(0.6)));
        assert!(rule.is_timer());
        assert_eq!(cut(Some(&rule), 2.05, Ending::GaveUp), Cut::ByRule);
        assert_eq!(cut(Some(&rule), 1.0, Ending::GaveUp), Cut::Before);
        assert_eq!(cut(Some(&rule), 9.0, Ending::GaveUp), Cut::After);
        assert_eq!(cut(Some(&rule), 9.0, Ending::Done), Cut::Ended);
        // Spread out, or too few to tell.
        assert_eq!(Rule::of(None, &at(&[1.0, 2.0, 4.0, 8.0])), None);
        assert_eq!(Rule::of(None, &[Mass { age: 2.0, weight: 3.0 }]), None);
        assert_eq!(Rule::of(None, &[]), None);
    }

    #[test]
    fn stated_goes_first() {
        let ages = at(&[2.0, 2.0, 2.0, 5.0]);
        let rule = Rule::of(Some(GiveUp::After(5.0)), &ages).unwrap();
        assert_eq!((rule.from, rule.share), (RuleFrom::Policy, Some(0.25)));
        assert!(!rule.is_timer());
        let never = Rule::of(Some(GiveUp::Never), &ages).unwrap();
        assert_eq!(cut(Some(&never), 2.0, Ending::GaveUp), Cut::Before);
        assert!(!never.is_timer());
    }
}
