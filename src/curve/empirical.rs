//! The data as an outlook: what everything in [`crate::stopping`] can be asked of them without a model.

use super::life_table::{CurveError, LifeTable, place};
use crate::outlook::Outlook;
use crate::tally::Cells;

/// Three points of Gauss and Legendre on [0, 1] and their weights, for worth that fades within a bucket.
const NODES: [(f64, f64); 3] =
    [(0.112_701_665_379_258_31, 5.0 / 18.0), (0.5, 8.0 / 18.0), (0.887_298_334_620_741_7, 5.0 / 18.0)];

/// The Kaplan-Meier and Aalen-Johansen curves as an [`Outlook`]: jumps at exact ages, straight within intervals.
///
/// Beyond [`Outlook::sight`] the steps of the last few waits are kept, and beyond the last ending `S` stays where it
/// is: that is a way of speaking, not an estimate. Every value is found by binary search among running sums.
/// METHODS.md section 2.
#[derive(Clone, Debug, PartialEq)]
pub struct Empirical {
    steps: Vec<Step>,
    knots: Vec<f64>,
    sight: f64,
}

/// The curves at the end of an interval with endings.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Step {
    over: f64,
    upto: f64,
    survival: f64,
    done: f64,
    failed: f64,
    area: f64,
}

/// Where every curve begins.
const START: Step = Step { over: 0.0, upto: 0.0, survival: 1.0, done: 0.0, failed: 0.0, area: 0.0 };

impl Empirical {
    /// The outlook of these cells. Cost: linear in their number where they are disjoint.
    ///
    /// # Errors
    /// [`CurveError`]; [`CurveError::OneBucket`] also where all endings lie in one bucket that begins at 0, for then
    /// every give-up time would be an invention.
    pub fn new(cells: &Cells) -> Result<Empirical, CurveError> {
        let table = LifeTable::of(cells)?;
        if let [only] = table.rows()
            && only.over == 0.0
        {
            return Err(CurveError::OneBucket { over: only.over, upto: only.upto });
        }
        Ok(Empirical::of(&table))
    }

    /// Reads the outlook off a table of both endings.
    pub fn of(table: &LifeTable) -> Empirical {
        let mut last = START;
        let steps: Vec<Step> = table
            .rows()
            .iter()
            .map(|r| {
                let each = last.survival / r.at_risk;
                let survival = last.survival * ((r.at_risk - r.ended()) / r.at_risk);
                let within = 0.5 * (last.survival + survival) * (r.upto - r.over);
                last = Step {
                    over: r.over,
                    upto: r.upto,
                    survival,
                    done: last.done + each * r.done,
                    failed: last.failed + each * r.failed,
                    area: last.area + last.survival * (r.over - last.upto) + within,
                };
                last
            })
            .collect();
        Empirical { knots: steps.iter().map(|s| s.upto).collect(), steps, sight: table.sight() }
    }

    /// [`Outlook::faded_done`] at every knot, in order, in one pass.
    pub fn faded_done_at_knots(&self, worth: &dyn Fn(f64) -> f64) -> Vec<f64> {
        let (mut sum, mut last) = (0.0, START);
        self.steps
            .iter()
            .map(|s| {
                sum += (s.done - last.done) * mean_worth(worth, s.over, s.upto);
                last = *s;
                sum
            })
            .collect()
    }

    /// The steps passed by age `t`, the last of them, and the share of the next that lies before `t`.
    fn place(&self, t: f64) -> (usize, Step, f64) {
        let (passed, share) = place(&self.steps, |s| (s.over, s.upto), t);
        (passed, if passed == 0 { START } else { self.steps[passed - 1] }, share)
    }

    fn between(&self, t: f64, value: impl Fn(&Step) -> f64) -> f64 {
        let (passed, last, share) = self.place(t);
        let before = value(&last);
        if share > 0.0 { before + share * (value(&self.steps[passed]) - before) } else { before }
    }
}

/// Mean of `worth` over an interval; its value at an exact age.
fn mean_worth(worth: &dyn Fn(f64) -> f64, over: f64, upto: f64) -> f64 {
    if over == upto {
        return worth(upto);
    }
    NODES.iter().map(|&(x, weight)| weight * worth(over + x * (upto - over))).sum()
}

impl Outlook for Empirical {
    fn survival(&self, t: f64) -> f64 {
        self.between(t, |s| s.survival)
    }

    fn done(&self, t: f64) -> f64 {
        self.between(t, |s| s.done)
    }

    fn failed(&self, t: f64) -> f64 {
        self.between(t, |s| s.failed)
    }

    /// Infinite at an infinite age unless the curve has reached 0.
    fn restricted_mean(&self, t: f64) -> f64 {
        let (passed, last, share) = self.place(t);
        if last.survival == 0.0 || t <= 0.0 {
            return last.area;
        }
        let flat = last.area + last.survival * (t - last.upto);
        if share > 0.0 {
            let next = self.steps[passed];
            flat - 0.5 * share * (last.survival - next.survival) * (t - next.over)
        } else {
            flat
        }
    }

    /// None: a step curve has no hazard.
    fn hazards(&self, _: f64) -> Option<(f64, f64)> {
        None
    }

    /// Exact over jumps; within intervals by three-point quadrature. Cost: linear in the endings up to `t`; for many
    /// ages see [`Empirical::faded_done_at_knots`].
    fn faded_done(&self, t: f64, worth: &dyn Fn(f64) -> f64) -> f64 {
        let (passed, last, share) = self.place(t);
        let (mut sum, mut before) = (0.0, 0.0);
        for s in &self.steps[..passed] {
            sum += (s.done - before) * mean_worth(worth, s.over, s.upto);
            before = s.done;
        }
        if share > 0.0 {
            let next = self.steps[passed];
            sum += share * (next.done - last.done) * mean_worth(worth, next.over, t);
        }
        sum
    }

    /// The ages of endings; the upper ends of intervals.
    fn knots(&self) -> &[f64] {
        &self.knots
    }

    fn sight(&self) -> f64 {
        self.sight
    }
}
