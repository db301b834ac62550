//! An outlook from laws taken as true: a law of completion and one of failure that compete. METHODS.md section 3.

use std::sync::{Arc, OnceLock};

use crate::numeric::integrate;
use crate::outlook::Outlook;
use crate::tail::Law;

/// How failures compete with completions; both are independent given their cause-specific hazards.
#[derive(Clone)]
pub enum Failure {
    /// There are none.
    Never,
    /// At a constant hazard, 1/s, above 0; then `F_f = λA`.
    Rate(f64),
    /// At the hazard of this law.
    Law(Arc<dyn Law>),
}

/// Two laws joined by their cause-specific hazards: `S = S_d S_f`, `dF_f = h_f S dt`, `F_d = 1 - S - F_f`.
///
/// Integrals without a closed form are cumulated once over stretches of a quarter of a decade and completed by
/// Gauss-Kronrod quadrature, to a relative 1e-10.
#[derive(Clone)]
pub struct Competing {
    done: Arc<dyn Law>,
    failed: Failure,
    knots: Vec<f64>,
    table: OnceLock<Table>,
}

/// `A` and `F_f` at the ends of the stretches.
#[derive(Clone)]
struct Table {
    ages: Vec<f64>,
    area: Vec<f64>,
    failed: Vec<f64>,
}

impl std::fmt::Debug for Failure {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Failure::Never => f.write_str("Never"),
            Failure::Rate(rate) => f.debug_tuple("Rate").field(rate).finish(),
            Failure::Law(law) => f.debug_tuple("Law").field(&law.parameters()).finish(),
        }
    }
}

impl std::fmt::Debug for Competing {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Competing")
            .field("done", &self.done.parameters())
            .field("failed", &self.failed)
            .field("knots", &self.knots)
            .finish_non_exhaustive()
    }
}

const TOLERANCE: f64 = 1e-12;

impl Competing {
    /// Completions by `done`, failures by `failed`. A rate that is not above 0 means none.
    pub fn new(done: impl Into<Arc<dyn Law>>, failed: Failure) -> Competing {
        let failed = match failed {
            Failure::Rate(rate) if !(rate > 0.0 && rate.is_finite()) => Failure::Never,
            other => other,
        };
        Competing { done: done.into(), failed, knots: vec![], table: OnceLock::new() }
    }

    /// Names ages (s, > 0) at which a law or its hazard jumps; quadrature and the search for an optimum respect them.
    pub fn with_knots(mut self, mut knots: Vec<f64>) -> Competing {
        knots.retain(|k| k.is_finite() && *k > 0.0);
        knots.sort_by(f64::total_cmp);
        knots.dedup();
        self.knots = knots;
        self.table = OnceLock::new();
        self
    }

    /// The law of completions.
    pub fn law(&self) -> &dyn Law {
        &*self.done
    }

    /// Hazard of any ending in the far tail, `lim h(t)`, 1/s: 0 for a heavy law, infinite for one that stops
    /// short or whose hazard grows for ever. Read off `H` over the last doubling within reach of doubles.
    pub fn final_hazard(&self) -> f64 {
        let log_survival = |t: f64| self.done.log_survival(t) + self.log_survived_failure(t);
        let mut age = self.done.scale();
        let (mut last, mut now) = (f64::NAN, f64::NAN);
        for _ in 0..60 {
            let (near, far) = (log_survival(age), log_survival(2.0 * age));
            if far == f64::NEG_INFINITY {
                return f64::INFINITY;
            }
            if far < -1e14 {
                break;
            }
            (last, now) = (now, (near - far) / age);
            age *= 2.0;
        }
        // A limit that is reached stays; one that is 0 keeps falling with the age, one without bound keeps growing.
        match now / last {
            change if change < 0.99 => 0.0,
            change if change > 1.01 => f64::INFINITY,
            _ => now,
        }
    }

    fn log_survived_failure(&self, t: f64) -> f64 {
        match &self.failed {
            Failure::Never => 0.0,
            Failure::Rate(rate) => -rate * t.max(0.0),
            Failure::Law(law) => law.log_survival(t),
        }
    }

    fn table(&self) -> &Table {
        self.table.get_or_init(|| {
            let scale = self.done.scale();
            let mut ages: Vec<f64> = (-32..=64).map(|i| scale * 10f64.powf(f64::from(i) / 4.0)).collect();
            ages.extend(&self.knots);
            ages.retain(|a| a.is_finite() && *a > 0.0);
            ages.push(0.0);
            ages.sort_by(f64::total_cmp);
            ages.dedup();
            let (mut area, mut failed) = (vec![0.0], vec![0.0]);
            for (i, stretch) in ages.windows(2).enumerate() {
                area.push(area[i] + self.area_between(stretch[0], stretch[1]));
                failed.push(failed[i] + self.failed_between(stretch[0], stretch[1]));
            }
            Table { ages, area, failed }
        })
    }

    fn area_between(&self, from: f64, to: f64) -> f64 {
        integrate(&|t| self.survival(t), from, to, TOLERANCE)
    }

    fn failed_between(&self, from: f64, to: f64) -> f64 {
        match &self.failed {
            Failure::Law(law) => {
                integrate(&|t| (law.log_density(t) + self.done.log_survival(t)).exp(), from, to, TOLERANCE)
            }
            _ => 0.0,
        }
    }
}

impl Table {
    /// Index of the last end at or below `t`.
    fn place(&self, t: f64) -> usize {
        self.ages.partition_point(|&a| a <= t).max(1) - 1
    }
}

impl Outlook for Competing {
    fn survival(&self, t: f64) -> f64 {
        (self.done.log_survival(t) + self.log_survived_failure(t)).exp()
    }

    fn done(&self, t: f64) -> f64 {
        match self.failed {
            Failure::Never => -self.done.log_survival(t).exp_m1(),
            _ => (1.0 - self.survival(t) - self.failed(t)).max(0.0),
        }
    }

    fn failed(&self, t: f64) -> f64 {
        match &self.failed {
            Failure::Never => 0.0,
            Failure::Rate(rate) => rate * self.restricted_mean(t),
            Failure::Law(_) if t <= 0.0 => 0.0,
            Failure::Law(_) => {
                let table = self.table();
                let i = table.place(t);
                table.failed[i] + self.failed_between(table.ages[i], t)
            }
        }
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        match self.failed {
            Failure::Never => self.done.restricted_mean(t),
            _ => {
                let table = self.table();
                let i = table.place(t);
                table.area[i] + self.area_between(table.ages[i], t)
            }
        }
    }

    fn hazards(&self, t: f64) -> Option<(f64, f64)> {
        let failed = match &self.failed {
            Failure::Never => 0.0,
            Failure::Rate(rate) => *rate,
            Failure::Law(law) => law.hazard(t),
        };
        Some((self.done.hazard(t), failed))
    }

    fn faded_done(&self, t: f64, worth: &dyn Fn(f64) -> f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        let table = self.table();
        let density = |u: f64| (self.done.log_density(u) + self.log_survived_failure(u)).exp();
        // A density may be infinite at 0, so the first stretch (a part in 1e8 of the scale) goes by parts, with
        // the worth as a straight line: ∫ w dF = w F - w' ∫ F.
        let first = table.ages[1].min(t);
        let (start, end) = (worth(0.0), worth(first));
        let mut sum = end * self.done(first) - (end - start) * (1.0 - self.restricted_mean(first) / first);
        for stretch in table.ages[1..].windows(2) {
            if stretch[0] >= t {
                break;
            }
            sum += integrate(&|u| worth(u) * density(u), stretch[0], stretch[1].min(t), TOLERANCE);
        }
        sum
    }

    fn knots(&self) -> &[f64] {
        &self.knots
    }

    fn sight(&self) -> f64 {
        f64::INFINITY
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tail::Family;
    use crate::tail::families::{Exponential, Gamma, Hyperexponential, InverseGaussian, Lognormal, Weibull};

    fn law(family: &dyn Family, natural: &[f64]) -> Arc<dyn Law> {
        family.law(&family.free(natural).unwrap()).unwrap().into()
    }

    fn close(a: f64, b: f64) -> bool {
        (a - b).abs() <= 1e-10 * a.abs().max(b.abs())
    }

    #[test]
    fn two_exponentials() {
        for failed in [Failure::Rate(0.5), Failure::Law(law(&Exponential, &[0.5]))] {
            let both = Competing::new(law(&Exponential, &[2.0]), failed);
            for t in [1e-6_f64, 0.01, 0.3, 1.0, 7.0, 200.0] {
                let ended = -(-2.5 * t).exp_m1();
                assert!(close(both.restricted_mean(t), ended / 2.5), "{t}");
                assert!((both.failed(t) - ended * 0.2).abs() < 1e-12, "{t}");
                assert!((both.done(t) - ended * 0.8).abs() < 1e-12, "{t}");
                assert_eq!(
                    both.hazards(t).map(|h| (h.0 - 2.0).abs() + (h.1 - 0.5).abs() < 1e-12),
                    Some(true)
                );
            }
            // ∫_0^t u 2 e^{-2.5u} du
            let t = 1.7_f64;
            let truth = 2.0 * (1.0 / 6.25 - (-2.5 * t).exp() * (t / 2.5 + 1.0 / 6.25));
            assert!((both.faded_done(t, &|u| u) - truth).abs() < 1e-11);
            assert!(close(both.final_hazard(), 2.5));
        }
    }

    #[test]
    fn a_constant_rate_is_the_exponential_law() {
        let done = law(&Lognormal, &[0.3, 1.4]);
        let fast = Competing::new(done.clone(), Failure::Rate(0.07));
        let slow = Competing::new(done, Failure::Law(law(&Exponential, &[0.07])));
        for t in [1e-3, 0.4, 3.0, 90.0, 1e5] {
            assert!(close(fast.failed(t), slow.failed(t)), "{t}");
            assert!(close(fast.restricted_mean(t), slow.restricted_mean(t)), "{t}");
        }
    }

    #[test]
    fn a_density_without_bound_at_zero() {
        // Weibull failures of shape 0.4 against Weibull completions of the same shape: a fixed split.
        let both = Competing::new(law(&Weibull, &[0.4, 1.0]), Failure::Law(law(&Weibull, &[0.4, 1.0])));
        for t in [1e-9, 1e-3, 1.0, 50.0] {
            let half = 0.5 * (1.0 - both.survival(t));
            assert!((both.failed(t) / half - 1.0).abs() < 1e-9, "{t}: {} {half}", both.failed(t));
            assert!((both.faded_done(t, &|_| 3.0) / (3.0 * half) - 1.0).abs() < 1e-9, "{t}");
        }
    }

    #[test]
    fn hazards_in_the_far_tail() {
        let alone = |l| Competing::new(l, Failure::Never).final_hazard();
        assert_eq!(alone(law(&Lognormal, &[0.0, 1.0])), 0.0);
        assert_eq!(alone(law(&Weibull, &[0.5, 1.0])), 0.0);
        assert_eq!(alone(law(&Weibull, &[2.0, 1.0])), f64::INFINITY);
        assert!(close(alone(law(&Exponential, &[3.0])), 3.0));
        assert!(close(alone(law(&Hyperexponential, &[0.9, 10.0, 0.1])), 0.1));
        assert!((alone(law(&Gamma, &[3.0, 0.5])) - 2.0).abs() < 1e-6);
        assert!((alone(law(&InverseGaussian, &[2.0, 3.0])) - 3.0 / 8.0).abs() < 1e-6);
        let failing = Competing::new(law(&Lognormal, &[0.0, 1.0]), Failure::Rate(0.25));
        assert!((failing.final_hazard() - 0.25).abs() < 1e-9);
    }
}
