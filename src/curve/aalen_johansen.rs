//! Two ways to end that compete: the cumulative incidence of each. METHODS.md section 2.

use super::interval::{ConfidenceInterval, least_when_all};
use super::life_table::{LifeTable, place};
use crate::tally::Cause;

/// The Aalen-Johansen estimate `F_k(t) = Σ_{t_j <= t} S(t_j-) d_kj / n_j` (Aalen & Johansen 1978); with `S` it adds
/// up to 1. Straight within intervals.
#[derive(Clone, Debug, PartialEq)]
pub struct AalenJohansen {
    points: Vec<IncidencePoint>,
    sight: f64,
    intact: f64,
}

/// The three shares just after one age (interval) with endings, and the variances of the two incidences.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct IncidencePoint {
    /// Where the interval begins, s; equal to `time` for an exact age.
    pub over: f64,
    /// The age, s; the interval's end.
    pub time: f64,
    /// Number at risk.
    pub at_risk: f64,
    /// `S(time)`.
    pub survival: f64,
    /// `F_d(time)`.
    pub done: f64,
    /// `F_f(time)`.
    pub failed: f64,
    /// Variance of `S(time)`.
    pub survival_variance: f64,
    /// Variance of `F_d(time)`.
    pub done_variance: f64,
    /// Variance of `F_f(time)`.
    pub failed_variance: f64,
}

impl AalenJohansen {
    /// Reads the estimate off a table of both endings ([`LifeTable::of`]).
    ///
    /// The variance is of Greenwood's type: each step carries the covariance of `(S, F_d, F_f)` on and adds the
    /// multinomial one of its own (Andersen, Borgan, Gill & Keiding 1993, section IV.4.1.3); the same as the sum
    /// in Marubini & Valsecchi 1995, section 10.
    pub fn of(table: &LifeTable) -> AalenJohansen {
        let (mut survival, mut done, mut failed) = (1.0, 0.0, 0.0);
        let mut v = Covariance::default();
        let points = table
            .rows()
            .iter()
            .map(|r| {
                let (n, h_d, h_f) = (r.at_risk, r.done / r.at_risk, r.failed / r.at_risk);
                let stay = (n - r.ended()) / n;
                v = v.step(h_d, h_f, stay, survival * survival / n);
                done += survival * h_d;
                failed += survival * h_f;
                survival *= stay;
                IncidencePoint {
                    over: r.over,
                    time: r.upto,
                    at_risk: n,
                    survival,
                    done,
                    failed,
                    survival_variance: v.ss.max(0.0),
                    done_variance: v.dd.max(0.0),
                    failed_variance: v.ff.max(0.0),
                }
            })
            .collect();
        AalenJohansen { points, sight: table.sight(), intact: table.intact() }
    }

    /// The estimate after each age with endings, in order.
    pub fn points(&self) -> &[IncidencePoint] {
        &self.points
    }

    /// Last age with enough at risk, s ([`LifeTable::sight`]).
    pub fn sight(&self) -> f64 {
        self.sight
    }

    /// `S(t)`.
    pub fn survival(&self, t: f64) -> f64 {
        1.0 - self.cumulative_incidence(Cause::Any, t)
    }

    /// `F_d(t)`, `F_f(t)`, or their sum, in [0, 1].
    pub fn cumulative_incidence(&self, cause: Cause, t: f64) -> f64 {
        self.between(t, |p| p.share(cause).0)
    }

    /// Variance of the cumulative incidence.
    pub fn variance(&self, cause: Cause, t: f64) -> f64 {
        self.between(t, |p| p.share(cause).1)
    }

    /// Confidence interval of the cumulative incidence on the log(-log) scale (Marubini & Valsecchi 1995, section
    /// 10; Kalbfleisch & Prentice 2002, section 8.2). Where that has no value (none of this kind yet, or all):
    /// the exact bound for none, or all, of those at risk at the last ending so far.
    pub fn interval(&self, cause: Cause, t: f64, level: f64) -> ConfidenceInterval {
        let (passed, share) = place(&self.points, |p| (p.over, p.time), t);
        let before = self.interval_after(cause, passed, level);
        if share > 0.0 {
            before.towards(self.interval_after(cause, passed + 1, level), share)
        } else {
            before
        }
    }

    fn interval_after(&self, cause: Cause, passed: usize, level: f64) -> ConfidenceInterval {
        if passed == 0 {
            return ConfidenceInterval { low: 0.0, high: 1.0 - least_when_all(self.intact, level) };
        }
        let p = self.points[passed - 1];
        let (share, variance) = p.share(cause);
        if share <= 0.0 {
            ConfidenceInterval { low: 0.0, high: 1.0 - least_when_all(p.at_risk, level) }
        } else if share < 1.0 {
            ConfidenceInterval::log_log(share, variance.sqrt() / share, level)
        } else {
            ConfidenceInterval { low: least_when_all(self.points[0].at_risk, level), high: 1.0 }
        }
    }

    fn between(&self, t: f64, value: impl Fn(&IncidencePoint) -> f64) -> f64 {
        let (passed, share) = place(&self.points, |p| (p.over, p.time), t);
        let before = if passed == 0 { 0.0 } else { value(&self.points[passed - 1]) };
        if share > 0.0 { before + share * (value(&self.points[passed]) - before) } else { before }
    }
}

impl IncidencePoint {
    /// The incidence of a cause and its variance.
    fn share(&self, cause: Cause) -> (f64, f64) {
        match cause {
            Cause::Done => (self.done, self.done_variance),
            Cause::Failed => (self.failed, self.failed_variance),
            Cause::Any => (1.0 - self.survival, self.survival_variance),
        }
    }
}

/// Covariances of `(S, F_d, F_f)` that are needed: those of the two incidences with each other are not.
#[derive(Clone, Copy, Debug, Default)]
struct Covariance {
    ss: f64,
    sd: f64,
    sf: f64,
    dd: f64,
    ff: f64,
}

impl Covariance {
    /// After a step with the hazards `h_d`, `h_f` and `stay = 1 - h_d - h_f`; `scale` is `S² / n` before it.
    fn step(self, h_d: f64, h_f: f64, stay: f64, scale: f64) -> Covariance {
        let gone = h_d + h_f;
        Covariance {
            ss: stay * stay * self.ss + scale * gone * stay,
            sd: stay * (self.sd + h_d * self.ss) - scale * h_d * stay,
            sf: stay * (self.sf + h_f * self.ss) - scale * h_f * stay,
            dd: self.dd + h_d * (2.0 * self.sd + h_d * self.ss) + scale * h_d * (1.0 - h_d),
            ff: self.ff + h_f * (2.0 * self.sf + h_f * self.ss) + scale * h_f * (1.0 - h_f),
        }
    }
}
