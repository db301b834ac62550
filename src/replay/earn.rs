//! What a rule earns on waits that it has not seen. METHODS.md sections 5 and 9.
//!
//! Where an old timeout hid the end of a wait, those that were seen stand for it: each ending counts with the inverse of
//! its probability of not having been cut off before (Horvitz & Thompson 1952; Robins & Rotnitzky 1992). Added up over
//! the ages, those weights are the product-limit curve (Satten & Datta 2001, *The Kaplan-Meier estimator as an
//! inverse-probability-of-censoring weighted average*, The American Statistician 55:207), and so they are reckoned here.

use crate::curve::{CurveError, LifeTable};
use crate::stopping::{Aim, Odds, Retry, Worth};
use crate::tally::{Cells, EventCell};

/// By what an attempt is judged.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Prices {
    pub(super) worth: Worth,
    pub(super) retry: Retry,
}

/// Attempts that leave the risk set in one age interval, and how many were at risk for it.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct Step {
    pub(super) over: f64,
    pub(super) upto: f64,
    pub(super) at_risk: f64,
    pub(super) done: f64,
    pub(super) failed: f64,
    /// Given up by the rule itself, at a time of its own choosing.
    pub(super) left: f64,
}

/// Waits of a period, by age.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Steps {
    pub(super) steps: Vec<Step>,
    /// Greatest age at which a wait ended or was seen, s: past it nothing is known.
    pub(super) last: f64,
}

impl Steps {
    /// Of waits as they were.
    pub(super) fn of(cells: &Cells) -> Result<Steps, CurveError> {
        let table = LifeTable::of(cells)?;
        let step = |r: &crate::curve::Row| Step {
            over: r.over,
            upto: r.upto,
            at_risk: r.at_risk,
            done: r.done,
            failed: r.failed,
            left: 0.0,
        };
        Ok(Steps { steps: table.rows().iter().map(step).collect(), last: table.last() })
    }

    /// Of waits as a rule would have ended them: what `cells` counts as given up is the rule's doing, an event; what it
    /// counts as open was hidden from it.
    pub(super) fn of_rule(cells: &Cells) -> Result<Steps, CurveError> {
        let with = |swap: bool| -> Result<LifeTable, CurveError> {
            let mut cells = cells.clone();
            let left = std::mem::take(&mut cells.gave_up);
            if swap {
                for e in &mut cells.events {
                    (e.done, e.failed) = (0.0, e.done + e.failed);
                }
            }
            cells.events.extend(left.iter().map(|m| {
                let (done, failed) = if swap { (m.weight, 0.0) } else { (0.0, m.weight) };
                EventCell { over: m.age, upto: m.age, done, failed }
            }));
            cells.tidy();
            LifeTable::of(&cells)
        };
        // The life table tells two endings apart. Asked twice, it tells three: the intervals are the same.
        let (all, left) = (with(false)?, with(true)?);
        let steps = all.rows().iter().zip(left.rows()).map(|(all, left)| Step {
            over: all.over,
            upto: all.upto,
            at_risk: all.at_risk,
            done: all.done,
            failed: (all.failed - left.done).max(0.0),
            left: left.done,
        });
        Ok(Steps { steps: steps.collect(), last: all.last() })
    }
}

/// One attempt under a rule, on average.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Attempt {
    /// How it ends.
    pub(super) odds: Odds,
    /// Worth of the completions.
    completions: f64,
    /// Time spent, s.
    pub(super) spent: f64,
    /// Ages at which the rule gave up, summed over all attempts, s.
    given_up_at: f64,
}

/// What attempts earn and the time they take, per attempt; sums of both make a rate.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct Earned {
    pub(super) gain: f64,
    pub(super) time: f64,
}

impl Earned {
    /// In the unit of the aim.
    pub(super) fn score(self, aim: Aim) -> f64 {
        match aim {
            Aim::CarryingCost(cost) => self.gain - cost * self.time,
            _ if self.time > 0.0 => self.gain / self.time,
            _ => 0.0,
        }
    }
}

/// An attempt that is given up at `give_up_after` (s; infinite where the steps tell when) at the latest; and how many are
/// then still open although nothing more was seen of them.
pub(super) fn attempt(steps: &Steps, give_up_after: f64, worth: &Worth) -> (Attempt, f64) {
    let (mut survival, mut age) = (1.0, 0.0);
    let mut odds = Odds { done: 0.0, failed: 0.0, gave_up: 0.0 };
    let (mut completions, mut spent, mut given_up_at) = (0.0, 0.0, 0.0);
    for step in steps.steps.iter().take_while(|s| s.over < give_up_after || s.upto <= give_up_after) {
        let part = match step.upto <= give_up_after {
            true => 1.0,
            false => (give_up_after - step.over) / (step.upto - step.over),
        };
        let upto = if part < 1.0 { give_up_after } else { step.upto };
        let middle = 0.5 * (step.over + upto);
        let each = part * survival / step.at_risk;
        let after = survival - each * (step.done + step.failed + step.left);
        spent +=
            survival * (step.over - age).max(0.0) + 0.5 * (survival + after) * (upto - step.over.max(age));
        completions += worth.completion(middle) * each * step.done;
        odds.done += each * step.done;
        odds.failed += each * step.failed;
        odds.gave_up += each * step.left;
        given_up_at += middle * each * step.left;
        (survival, age) = (after.max(0.0), upto);
    }
    let seen = give_up_after.min(steps.last.max(age));
    spent += survival * (seen - age);
    if give_up_after <= steps.last {
        odds.gave_up += survival;
        given_up_at += survival * give_up_after;
        survival = 0.0;
    }
    // A product of many factors may end a hair above the 0 that it has in exact arithmetic.
    let hidden = if survival > 1e-12 { survival } else { 0.0 };
    (Attempt { odds, completions, spent, given_up_at }, hidden)
}

impl Attempt {
    fn earned(&self, prices: &Prices) -> Earned {
        let Prices { worth, retry } = prices;
        let request = retry.request(self.odds, worth);
        // Where nobody gives up or fails, a pause without end costs nothing.
        let times = |share: f64, pause: f64| if share > 0.0 { share * pause } else { 0.0 };
        let gave_up = worth.gave_up + request.doomed * (worth.gave_up - worth.attempt_cost);
        Earned {
            gain: self.completions + worth.failed * self.odds.failed + gave_up * self.odds.gave_up
                - worth.attempt_cost,
            time: self.spent
                + worth.pause.done * self.odds.done
                + times(self.odds.failed, request.failed_pause)
                + times(self.odds.gave_up, request.gave_up_pause)
                + request.doomed * self.given_up_at,
        }
    }

    /// What it earns at worst and at best, where a share `hidden` was last seen open at `last` s: they wait until
    /// `give_up_after` for nothing, or are done at once.
    pub(super) fn bounds(&self, hidden: f64, last: f64, give_up_after: f64, prices: &Prices) -> [Earned; 2] {
        if hidden == 0.0 {
            return [self.earned(prices); 2];
        }
        let (mut worst, mut best) = (*self, *self);
        worst.odds.gave_up += hidden;
        worst.given_up_at += hidden * give_up_after.max(last);
        worst.spent += hidden * (give_up_after - last).max(0.0);
        best.odds.done += hidden;
        best.completions += prices.worth.completion(last) * hidden;
        [worst.earned(prices), best.earned(prices)]
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::curve::Empirical;
    use crate::stopping::{Fade, Limits, Objective, Pause};
    use crate::wait::{Ending, Wait};

    fn waits() -> Vec<Wait> {
        let law = |i: u32| (1.0 + f64::from(i * 37 % 101)).powf(1.3) / 100.0;
        (0..101u32)
            .map(|i| {
                let ending = match i % 7 {
                    0 => Ending::Failed,
                    1 | 2 => Ending::GaveUp,
                    3 => Ending::Waiting,
                    _ => Ending::Done,
                };
                Wait::new(law(i), ending).unwrap()
            })
            .collect()
    }

    fn prices(sticky: f64) -> Prices {
        let pause = Pause { done: 0.2, failed: 0.1, gave_up: 0.3 };
        let fade = Fade::HalfLife(3.0);
        let worth =
            Worth { gave_up: 0.1, failed: -0.2, attempt_cost: 0.05, pause, sticky, fade, ..Worth::default() };
        Prices { worth, retry: Retry { attempts: Some(3), growth: 2.0, ..Retry::default() } }
    }

    #[test]
    fn agrees_with_the_objective_on_the_empirical_curve() {
        let cells = Cells::from_waits(&waits());
        let steps = Steps::of(&cells).unwrap();
        let outlook = Empirical::new(&cells).unwrap();
        for sticky in [0.0, 0.3] {
            let prices = prices(sticky);
            let limits = Limits::new(0.01, 100.0).unwrap();
            let objective = Objective::new(&outlook, &prices.worth, &prices.retry, limits).unwrap();
            for t in [0.02, 0.5, 1.0, 2.5, 3.9] {
                let (attempt, hidden) = attempt(&steps, t, &prices.worth);
                let [worst, best] = attempt.bounds(hidden, steps.last, t, &prices);
                assert_eq!((hidden, worst), (0.0, best));
                assert!((worst.gain - objective.gain(t)).abs() < 1e-10, "{t}");
                assert!((worst.time - objective.time(t)).abs() < 1e-10, "{t}");
                assert!((worst.score(Aim::Rate) - objective.score(t)).abs() < 1e-10, "{t}");
            }
        }
    }

    /// The weights themselves, wait by wait: an ending counts `1/G(u-)`, with `G` the product-limit curve of being cut off.
    #[test]
    fn agrees_with_inverse_probability_weights_wait_by_wait() {
        let waits = waits();
        let age = |w: &Wait| match w.age() {
            crate::wait::Age::Exact(t) => t,
            crate::wait::Age::Between { .. } => unreachable!(),
        };
        // Endings precede censorings of the same age.
        let uncensored = |t: f64| -> f64 {
            let mut cuts: Vec<f64> = waits.iter().filter(|w| w.ending().is_censored()).map(age).collect();
            cuts.sort_by(f64::total_cmp);
            let risk = |c: f64| {
                waits.iter().filter(|w| age(w) > c || age(w) == c && w.ending().is_censored()).count()
            };
            cuts.into_iter().filter(|c| *c < t).map(|c| 1.0 - 1.0 / risk(c) as f64).product()
        };
        let n = waits.len() as f64;
        let prices = prices(0.0);
        let steps = Steps::of(&Cells::from_waits(&waits)).unwrap();
        for t in [0.3, 1.0, 2.2] {
            let (mut done, mut failed, mut left, mut spent) = (0.0, 0.0, 0.0, 0.0);
            for w in &waits {
                let u = age(w);
                let weight = |at: f64| 1.0 / (n * uncensored(at));
                match w.ending() {
                    _ if u > t => {
                        left += weight(t);
                        spent += t * weight(t);
                    }
                    Ending::Done => {
                        done += weight(u);
                        spent += u * weight(u);
                    }
                    Ending::Failed => {
                        failed += weight(u);
                        spent += u * weight(u);
                    }
                    Ending::GaveUp | Ending::Waiting => {}
                }
            }
            let (found, _) = attempt(&steps, t, &prices.worth);
            assert!((found.odds.done - done).abs() < 1e-10, "{t}");
            assert!((found.odds.failed - failed).abs() < 1e-10, "{t}");
            assert!((found.odds.gave_up - left).abs() < 1e-10, "{t}");
            assert!((found.spent - spent).abs() < 1e-10, "{t}");
        }
    }

    #[test]
    fn what_a_rule_gave_up_is_an_event_of_its_own() {
        // Given up at 1 s: two of six; one was hidden at 2 s.
        let wait = |t: f64, ending, n| Wait::new(t, ending).unwrap().with_count(n).unwrap();
        let waits = [
            wait(0.5, Ending::Done, 2),
            wait(1.0, Ending::GaveUp, 2),
            wait(2.0, Ending::Waiting, 1),
            wait(2.5, Ending::Failed, 1),
        ];
        let steps = Steps::of_rule(&Cells::from_waits(&waits)).unwrap();
        let prices = prices(0.0);
        let (found, hidden) = attempt(&steps, f64::INFINITY, &prices.worth);
        assert!((found.odds.done - 2.0 / 6.0).abs() < 1e-15);
        assert!((found.odds.gave_up - 2.0 / 6.0).abs() < 1e-15);
        // The one seen stands for the one hidden.
        assert!((found.odds.failed - 2.0 / 6.0).abs() < 1e-15 && hidden == 0.0);
        assert!((found.spent - (2.0 * 0.5 + 2.0 * 1.0 + 2.0 * 2.5) / 6.0).abs() < 1e-15);
        // Past the last wait seen, a rule earns something between two bounds.
        let cut = Steps::of(&Cells::from_waits(&[wait(0.5, Ending::Done, 2), wait(1.0, Ending::GaveUp, 2)]))
            .unwrap();
        let (found, hidden) = attempt(&cut, 3.0, &prices.worth);
        assert_eq!((hidden, found.odds.gave_up, found.spent), (0.5, 0.0, 0.75));
        let [worst, best] = found.bounds(hidden, cut.last, 3.0, &prices);
        assert!(worst.score(Aim::Rate) < best.score(Aim::Rate));
    }
}
