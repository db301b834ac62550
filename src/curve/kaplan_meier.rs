//! The survival curve by the product-limit estimate. METHODS.md section 2.

use super::interval::{ConfidenceInterval, least_when_all};
use super::life_table::{LifeTable, place};

/// The Kaplan-Meier estimate with left truncation: `S(t) = Π_{t_j <= t} (1 - d_j / n_j)`, of any ending (of one
/// cause, where the table is of one) (Kaplan & Meier 1958; Kalbfleisch & Prentice 2002, section 1.4).
///
/// At the ends of intervals it is the life-table estimate; within them it is drawn straight. Past the last
/// ending it stays where it is, which is the estimate up to [`KaplanMeier::sight`] and a way of speaking beyond.
#[derive(Clone, Debug, PartialEq)]
pub struct KaplanMeier {
    points: Vec<Point>,
    sight: f64,
    intact: f64,
}

/// The curve just after one age (interval) with endings.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Point {
    /// Where the interval begins, s; equal to `time` for an exact age.
    pub over: f64,
    /// The age, s; the interval's end.
    pub time: f64,
    /// Number at risk.
    pub at_risk: f64,
    /// Number that ended.
    pub events: f64,
    /// `S(time)`.
    pub survival: f64,
    /// Greenwood's variance of it, `S² Σ d / (n (n - d))`; 0 where `S` is 0.
    pub variance: f64,
}

impl KaplanMeier {
    /// Reads the curve off a table.
    pub fn of(table: &LifeTable) -> KaplanMeier {
        let (mut survival, mut greenwood) = (1.0, 0.0);
        let points = table
            .rows()
            .iter()
            .map(|r| {
                let (at_risk, events) = (r.at_risk, r.ended());
                survival *= (at_risk - events) / at_risk;
                greenwood += events / (at_risk * (at_risk - events));
                let variance = if survival > 0.0 { survival * survival * greenwood } else { 0.0 };
                Point { over: r.over, time: r.upto, at_risk, events, survival, variance }
            })
            .collect();
        KaplanMeier { points, sight: table.sight(), intact: table.intact() }
    }

    /// The curve after each age with endings, in order.
    pub fn points(&self) -> &[Point] {
        &self.points
    }

    /// Last age with enough at risk, s ([`LifeTable::sight`]).
    pub fn sight(&self) -> f64 {
        self.sight
    }

    /// `S(t)`, in [0, 1]; 1 for `t <= 0`.
    pub fn survival(&self, t: f64) -> f64 {
        let (passed, share) = self.place(t);
        let before = self.before(passed);
        if share > 0.0 { before + share * (self.points[passed].survival - before) } else { before }
    }

    /// Greenwood's variance of `S(t)`; within an interval, between those of its ends.
    pub fn variance(&self, t: f64) -> f64 {
        let (passed, share) = self.place(t);
        let before = if passed == 0 { 0.0 } else { self.points[passed - 1].variance };
        if share > 0.0 { before + share * (self.points[passed].variance - before) } else { before }
    }

    /// Confidence interval of `S(t)` on the log(-log) scale (Kalbfleisch & Prentice 2002, section 1.4).
    ///
    /// Where that has no value: before the first ending, from the exact bound for no ending among those watched
    /// from their start up to it, to 1; after the curve has reached 0, from 0 to the upper end just before.
    pub fn interval(&self, t: f64, level: f64) -> ConfidenceInterval {
        let (passed, share) = self.place(t);
        let before = self.interval_after(passed, level);
        if share > 0.0 { before.towards(self.interval_after(passed + 1, level), share) } else { before }
    }

    /// The least age by which a share `p` has ended, `S(t) <= 1 - p`, s; straight within an interval. `None`
    /// where the curve does not fall so far, or for `p` outside `[0, 1]`.
    pub fn quantile(&self, p: f64) -> Option<f64> {
        if !(0.0..=1.0).contains(&p) {
            return None;
        }
        if p == 0.0 {
            return Some(0.0);
        }
        // A product of many factors may end a hair above the value it has in exact arithmetic.
        let goal = (1.0 - p) * (1.0 + 1e-12);
        let after = self.points.partition_point(|q| q.survival > goal);
        let point = self.points.get(after)?;
        let before = self.before(after);
        let share = ((before - goal) / (before - point.survival)).clamp(0.0, 1.0);
        Some(point.over + share * (point.time - point.over))
    }

    fn place(&self, t: f64) -> (usize, f64) {
        place(&self.points, |p| (p.over, p.time), t)
    }

    /// `S` after the first `passed` points.
    fn before(&self, passed: usize) -> f64 {
        if passed == 0 { 1.0 } else { self.points[passed - 1].survival }
    }

    fn interval_after(&self, passed: usize, level: f64) -> ConfidenceInterval {
        if passed == 0 {
            return ConfidenceInterval { low: least_when_all(self.intact, level), high: 1.0 };
        }
        let p = self.points[passed - 1];
        if p.survival > 0.0 && p.survival < 1.0 {
            ConfidenceInterval::log_log(p.survival, p.variance.sqrt() / p.survival, level)
        } else if p.survival > 0.0 {
            ConfidenceInterval { low: least_when_all(p.at_risk, level), high: 1.0 }
        } else {
            ConfidenceInterval { low: 0.0, high: self.interval_after(passed - 1, level).high }
        }
    }
}
