//! The cumulative hazard, step by step. METHODS.md section 2.

use super::interval::{ConfidenceInterval, least_when_all};
use super::life_table::{LifeTable, place};

/// The Nelson-Aalen estimate `H(t) = Σ_{t_j <= t} d_j / n_j` (Nelson 1969; Aalen 1978); straight within intervals.
///
/// Of any ending, or of one cause where the table is of one ([`LifeTable::of_sample`]).
#[derive(Clone, Debug, PartialEq)]
pub struct NelsonAalen {
    points: Vec<HazardPoint>,
    sight: f64,
    intact: f64,
}

/// The cumulative hazard just after one age (interval) with endings.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct HazardPoint {
    /// Where the interval begins, s; equal to `time` for an exact age.
    pub over: f64,
    /// The age, s; the interval's end.
    pub time: f64,
    /// What it adds, `d / n`.
    pub step: f64,
    /// What it adds to the variance, `d / n²`.
    pub step_variance: f64,
    /// `H(time)`.
    pub cumulative_hazard: f64,
    /// Its variance, `Σ d / n²`.
    pub variance: f64,
}

impl NelsonAalen {
    /// Reads the estimate off a table.
    pub fn of(table: &LifeTable) -> NelsonAalen {
        let (mut cumulative_hazard, mut variance) = (0.0, 0.0);
        let points = table
            .rows()
            .iter()
            .map(|r| {
                let step = r.ended() / r.at_risk;
                let step_variance = step / r.at_risk;
                cumulative_hazard += step;
                variance += step_variance;
                HazardPoint { over: r.over, time: r.upto, step, step_variance, cumulative_hazard, variance }
            })
            .collect();
        NelsonAalen { points, sight: table.sight(), intact: table.intact() }
    }

    /// The estimate after each age with endings, in order.
    pub fn points(&self) -> &[HazardPoint] {
        &self.points
    }

    /// Last age with enough at risk, s ([`LifeTable::sight`]).
    pub fn sight(&self) -> f64 {
        self.sight
    }

    /// `H(t)`, >= 0.
    pub fn cumulative_hazard(&self, t: f64) -> f64 {
        self.between(t, |p| p.cumulative_hazard)
    }

    /// Variance of `H(t)`.
    pub fn variance(&self, t: f64) -> f64 {
        self.between(t, |p| p.variance)
    }

    /// Confidence interval of `H(t)` on the log scale (Kalbfleisch & Prentice 2002, section 1.4); before the
    /// first ending from 0 to the exact bound for no ending among those watched from their start up to it.
    pub fn interval(&self, t: f64, level: f64) -> ConfidenceInterval {
        let (passed, share) = place(&self.points, |p| (p.over, p.time), t);
        let before = self.interval_after(passed, level);
        if share > 0.0 { before.towards(self.interval_after(passed + 1, level), share) } else { before }
    }

    fn interval_after(&self, passed: usize, level: f64) -> ConfidenceInterval {
        if passed == 0 {
            return ConfidenceInterval {
                low: 0.0,
                high: -least_when_all(self.intact, level).max(f64::MIN_POSITIVE).ln(),
            };
        }
        let p = self.points[passed - 1];
        ConfidenceInterval::log(p.cumulative_hazard, p.variance.sqrt(), level)
    }

    fn between(&self, t: f64, value: impl Fn(&HazardPoint) -> f64) -> f64 {
        let (passed, share) = place(&self.points, |p| (p.over, p.time), t);
        let before = if passed == 0 { 0.0 } else { value(&self.points[passed - 1]) };
        if share > 0.0 { before + share * (value(&self.points[passed]) - before) } else { before }
    }
}
