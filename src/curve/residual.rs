//! Time to expect: the restricted mean, and the restricted mean residual life. METHODS.md section 2.

use super::interval::ConfidenceInterval;
use super::kaplan_meier::KaplanMeier;
use super::life_table::{LifeTable, place};

/// Areas under the Kaplan-Meier curve: the time spent by age `t`, and the time still to spend up to a limit.
#[derive(Clone, Debug, PartialEq)]
pub struct RestrictedMean {
    steps: Vec<Step>,
    sight: f64,
}

#[derive(Clone, Copy, Debug, PartialEq)]
struct Step {
    over: f64,
    upto: f64,
    /// `S(upto)`.
    survival: f64,
    /// `A(upto)`.
    area: f64,
    /// `d / (n (n - d))`; 0 where that empties the curve.
    greenwood: f64,
}

/// An expected time with its variance.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MeanTime {
    /// The estimate, s.
    pub value: f64,
    /// Its variance, s².
    pub variance: f64,
    /// What it cannot exceed, s.
    pub limit: f64,
}

impl MeanTime {
    /// Confidence interval `value ± z·se` within `[0, limit]`, s.
    pub fn interval(&self, level: f64) -> ConfidenceInterval {
        ConfidenceInterval::plain(self.value, self.variance.sqrt(), level, 0.0, self.limit)
    }
}

impl RestrictedMean {
    /// Adds up the areas under the curve of a table.
    pub fn of(table: &LifeTable) -> RestrictedMean {
        let (mut before, mut area, mut age) = (1.0, 0.0, 0.0);
        let steps = KaplanMeier::of(table)
            .points()
            .iter()
            .map(|p| {
                area += before * (p.over - age) + 0.5 * (before + p.survival) * (p.time - p.over);
                (before, age) = (p.survival, p.time);
                let left = p.at_risk - p.events;
                let greenwood = if left > 0.0 { p.events / (p.at_risk * left) } else { 0.0 };
                Step { over: p.over, upto: p.time, survival: p.survival, area, greenwood }
            })
            .collect();
        RestrictedMean { steps, sight: table.sight() }
    }

    /// Last age with enough at risk, s ([`LifeTable::sight`]): the limit to use.
    pub fn sight(&self) -> f64 {
        self.sight
    }

    /// `A(t) = ∫_0^t S = E[min(T, t)]` and its variance `Σ_{t_j <= t} (∫_{t_j}^t S)² d_j / (n_j (n_j - d_j))` (Klein &
    /// Moeschberger 2003, section 4.5). `t` in s, >= 0, finite. Cost: linear in the number of steps up to `t`.
    pub fn restricted_mean(&self, t: f64) -> MeanTime {
        let t = t.clamp(0.0, f64::MAX);
        let value = self.area(t);
        MeanTime { value, variance: self.variance(0.0, t, value), limit: t }
    }

    /// Mean residual life restricted to `limit`, `e_L(t) = ∫_t^L S / S(t)`, with its variance given that the wait
    /// has lasted `t`. `None` where nobody lasts so long, or unless `0 <= t <= limit`, both finite.
    pub fn residual(&self, t: f64, limit: f64) -> Option<MeanTime> {
        let survival = self.survival(t);
        if !(0.0 <= t && t <= limit && limit.is_finite() && survival > 0.0) {
            return None;
        }
        let end = self.area(limit);
        Some(MeanTime {
            value: ((end - self.area(t)) / survival).clamp(0.0, limit - t),
            variance: self.variance(t, limit, end) / (survival * survival),
            limit: limit - t,
        })
    }

    /// `Σ (∫_{t_j}^{limit} S)² d_j / (n_j (n_j - d_j))` over the steps in `(from, limit]`; `end` is `A(limit)`.
    fn variance(&self, from: f64, limit: f64, end: f64) -> f64 {
        let first = self.steps.partition_point(|s| s.upto <= from);
        self.steps[first..]
            .iter()
            .take_while(|s| s.upto <= limit)
            .map(|s| {
                // An ending within an interval also takes away the later half of the interval.
                let after = end - s.area + 0.5 * (s.upto - s.over.max(from)) * s.survival;
                after * after * s.greenwood
            })
            .sum()
    }

    fn survival(&self, t: f64) -> f64 {
        let (passed, share) = place(&self.steps, |s| (s.over, s.upto), t);
        let before = if passed == 0 { 1.0 } else { self.steps[passed - 1].survival };
        if share > 0.0 { before + share * (self.steps[passed].survival - before) } else { before }
    }

    fn area(&self, t: f64) -> f64 {
        let (passed, share) = place(&self.steps, |s| (s.over, s.upto), t);
        let (age, area, before) = if passed == 0 {
            (0.0, 0.0, 1.0)
        } else {
            let s = self.steps[passed - 1];
            (s.upto, s.area, s.survival)
        };
        if before == 0.0 {
            return area;
        }
        let fallen = if share > 0.0 {
            // The triangle cut off a straight fall within the interval.
            let next = self.steps[passed];
            0.5 * share * (before - next.survival) * (t - next.over)
        } else {
            0.0
        };
        area + before * (t - age) - fallen
    }
}
