//! Which of several fits to believe: Akaike weights, tests between pairs, residuals, and the size of a misfit.
//! METHODS.md section 3.
//!
//! With many waits every family is rejected by every test, so the tests are for small samples; [`Agreement`]
//! judges a fit by how far it is off.

use statrs::function::erf::erfc;

use super::fit::Fit;
use super::law::Law;
use super::likelihood::terms;
use crate::numeric::special::chi_squared_tail;
use crate::tally::Sample;

/// Weights that sum to 1 and fall by a factor e for each `softness` by which a criterion exceeds the least:
/// Akaike weights for AIC and a softness of 2 (Burnham & Anderson 2002, section 2.9). Criteria that are not
/// finite weigh nothing.
pub fn criterion_weights(criteria: &[f64], softness: f64) -> Vec<f64> {
    let least = criteria.iter().copied().filter(|c| c.is_finite()).fold(f64::INFINITY, f64::min);
    let raw = |c: f64| if c.is_finite() { (-(c - least) / softness).exp() } else { 0.0 };
    let sum: f64 = criteria.iter().map(|&c| raw(c)).sum();
    criteria.iter().map(|&c| if sum > 0.0 { raw(c) / sum } else { 0.0 }).collect()
}

/// Fills in the Akaike weights of fits to the same sample.
pub fn akaike_weights(fits: &mut [Fit]) {
    let criteria: Vec<f64> = fits.iter().map(|f| f.aic).collect();
    for (fit, weight) in fits.iter_mut().zip(criterion_weights(&criteria, 2.0)) {
        fit.weight = weight;
    }
}

/// Judgement of a fit by the size of its misfit, whatever the number of waits.
///
/// Bounds are common practice, no source: a gap of one wait in fifty moves no decision that the data could
/// support, one in twenty shows in every picture.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Agreement {
    /// The largest gap is at most 0.02, or no more than chance leaves between a curve and its own law.
    Close,
    /// The largest gap is at most 0.05.
    Fair,
    /// It is larger.
    Poor,
}

impl Agreement {
    /// `√n` times the largest gap of a fitted law that is true is rarely above this (RECIPE's fourth section).
    const CHANCE: f64 = 0.9;

    /// Of a fit to `waits` waits.
    pub fn of(fit: &Fit, waits: f64) -> Agreement {
        let gap = fit.largest_gap.size;
        if gap <= 0.02 || gap * waits.sqrt() <= Agreement::CHANCE {
            Agreement::Close
        } else if gap <= 0.05 {
            Agreement::Fair
        } else {
            Agreement::Poor
        }
    }
}

/// Likelihood-ratio test of a family against one that contains it (Wilks 1938).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LikelihoodRatio {
    /// `2(ℓ_larger - ℓ_smaller)`, at least 0.
    pub statistic: f64,
    /// Difference in the number of parameters.
    pub degrees: u32,
    /// The smaller family lies at a limit of the larger, so that the statistic is 0 half of the time (Self &
    /// Liang 1987).
    pub at_limit: bool,
    /// Probability of a statistic as large if the smaller family is true.
    pub p_value: f64,
}

/// Tests `smaller` against `larger`; `None` unless the first is known to be nested in the second in a way that
/// the test allows. Mixtures are left out: under one component the other has no parameters (Davies 1987). So
/// are shifts, whose likelihood is not regular.
pub fn likelihood_ratio(smaller: &Fit, larger: &Fit) -> Option<LikelihoodRatio> {
    let (never, more) = (smaller.parameter("never").is_some(), larger.parameter("never").is_some());
    if (never && !more) || [smaller, larger].iter().any(|f| f.parameter("shift").is_some()) {
        return None;
    }
    let within = nesting(smaller.family, larger.family)?;
    let (degrees, at_limit) = match (within, more && !never) {
        (Nesting::Same, true) => (1, true),
        (Nesting::Inside(degrees), false) => (degrees, false),
        (Nesting::AtLimit, false) => (1, true),
        // The same family twice, or two limits at once, whose distribution is no simple mixture.
        _ => return None,
    };
    let statistic = (2.0 * (larger.log_likelihood - smaller.log_likelihood)).max(0.0);
    let tail = chi_squared_tail(statistic, f64::from(degrees));
    let p_value = if at_limit && statistic > 0.0 { 0.5 * tail } else { tail };
    Some(LikelihoodRatio { statistic, degrees, at_limit, p_value })
}

enum Nesting {
    Same,
    /// By fixing so many parameters inside their range.
    Inside(u32),
    /// By letting one run to the end of its range.
    AtLimit,
}

fn nesting(smaller: &str, larger: &str) -> Option<Nesting> {
    Some(match (smaller, larger) {
        (a, b) if a == b => Nesting::Same,
        ("exponential", "weibull" | "gamma") => Nesting::Inside(1),
        ("exponential", "generalised_gamma") => Nesting::Inside(2),
        ("exponential", "lomax" | "gompertz") => Nesting::AtLimit,
        ("weibull" | "gamma", "generalised_gamma") => Nesting::Inside(1),
        ("log_logistic" | "lomax", "burr") => Nesting::Inside(1),
        ("weibull", "burr") | ("lognormal", "generalised_gamma") => Nesting::AtLimit,
        _ => return None,
    })
}

/// Vuong's test of two families of which neither contains the other (Vuong 1989), with Schwarz's correction for
/// the number of parameters.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Vuong {
    /// Mean log-likelihood of the first above that of the second, per observation, nats, corrected.
    pub advantage: f64,
    /// Standard normal where both are equally far from the truth; positive in favour of the first.
    pub z: f64,
    /// Two-sided probability of a `z` as large where both are equally far from the truth.
    pub p_value: f64,
}

/// Compares two fits to the same sample, exact or in cells. Late entries count as observations of their own.
///
/// `None` where the laws say the same of every observation, so that there is nothing to test.
pub fn vuong(sample: &Sample, first: &Fit, second: &Fit) -> Option<Vuong> {
    let (mut weight, mut mean, mut square) = (0.0, 0.0, 0.0);
    for (a, b) in terms(first.law.as_ref(), sample).zip(terms(second.law.as_ref(), sample)) {
        let step = (a.value - b.value) - mean;
        weight += a.weight;
        mean += step * a.weight / weight;
        square += a.weight * step * ((a.value - b.value) - mean);
    }
    let deviation = (square / weight).sqrt();
    let correction = 0.5 * (first.parameters.len() as f64 - second.parameters.len() as f64) * weight.ln();
    let advantage = mean - correction / weight;
    let z = weight.sqrt() * advantage / deviation;
    // Laws that differ by rounding differ by nothing.
    let same = deviation.is_nan() || deviation <= 1e-9 * (1.0 + mean.abs());
    (!same && z.is_finite()).then(|| Vuong {
        advantage,
        z,
        p_value: erfc(z.abs() / std::f64::consts::SQRT_2),
    })
}

/// Cox-Snell residual `H(t)` of a group of equal observations: under a true law a sample from the exponential
/// with mean 1, censored where the waits are (Cox & Snell 1968).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Residual {
    /// Cumulative hazard at the age; for an interval its mean over it, given that the wait ended there.
    pub residual: f64,
    /// Number of observations.
    pub weight: f64,
    /// Whether it ended, or is censored.
    pub ended: bool,
}

/// Residuals of a sample under a law, events first. Their number is that of the sample's cells.
pub fn cox_snell(sample: &Sample, law: &dyn Law) -> Vec<Residual> {
    let hazard = |t: f64| if t > 0.0 { law.cumulative_hazard(t) } else { 0.0 };
    let events = sample.events.iter().map(|e| {
        let (a, b) = (hazard(e.over), if e.upto.is_finite() { hazard(e.upto) } else { f64::INFINITY });
        // Mean of an exponential between a and b: a + 1 - d/(e^d - 1).
        let d = b - a;
        let residual = if d > 1e-8 { a + 1.0 - d.min(700.0) / d.exp_m1() } else { 0.5 * (a + b) };
        Residual { residual, weight: e.weight, ended: true }
    });
    let censored =
        sample.censored.iter().map(|m| Residual { residual: hazard(m.age), weight: m.weight, ended: false });
    events.chain(censored).filter(|r| r.residual.is_finite()).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tail::families::{Exponential, Weibull};
    use crate::tail::{Family, Gap, fit};
    use crate::tally::{Interval, Mass};

    fn sample() -> Sample {
        let ages = [0.2, 0.5, 0.9, 1.4, 1.6, 2.5, 4.0];
        let events = ages.iter().map(|&t| Interval { over: t, upto: t, weight: 1.0 }).collect();
        Sample { events, censored: vec![Mass { age: 2.0, weight: 3.0 }], entries: vec![] }
    }

    #[test]
    fn weights_by_hand() {
        // 1, e^-0.6, e^-0.95, e^-1.75, e^-6.9 over their sum 2.1103.
        let weights = criterion_weights(&[100.0, 101.2, 101.9, 103.5, 113.8, f64::INFINITY], 2.0);
        for (ours, printed) in weights.iter().zip([0.4739, 0.2601, 0.1833, 0.0823, 0.0005, 0.0]) {
            assert!((ours - printed).abs() < 1e-4, "{weights:?}");
        }
        assert!((weights.iter().sum::<f64>() - 1.0).abs() < 1e-15);
        assert_eq!(criterion_weights(&[f64::INFINITY], 2.0), [0.0]);
    }

    /// At the maximum the residuals of a scale family sum to the number of events, exactly.
    #[test]
    fn residuals_sum_to_the_events() {
        let sample = sample();
        for fit in [fit(&sample, &Exponential).unwrap(), fit(&sample, &Weibull).unwrap()] {
            let residuals = cox_snell(&sample, fit.law.as_ref());
            let sum: f64 = residuals.iter().map(|r| r.residual * r.weight).sum();
            assert!((sum - 7.0).abs() < 1e-6, "{sum}");
            assert_eq!(residuals.iter().filter(|r| r.ended).count(), 7);
        }
    }

    /// An interval's residual is the mean of an exponential between its ends; the whole line's is 1.
    #[test]
    fn residuals_of_intervals() {
        let law = Exponential.law(&[0.0]).unwrap();
        let residual = |over, upto| {
            let events = vec![Interval { over, upto, weight: 1.0 }];
            cox_snell(&Sample { events, ..Sample::default() }, law.as_ref())[0].residual
        };
        assert!((residual(0.0, f64::INFINITY) - 1.0).abs() < 1e-12);
        assert!((residual(2.0, f64::INFINITY) - 3.0).abs() < 1e-12);
        // ∫_0^1 x e^-x dx / (1 - 1/e) = (1 - 2/e)/(1 - 1/e)
        let e = std::f64::consts::E;
        assert!((residual(0.0, 1.0) - (1.0 - 2.0 / e) / (1.0 - 1.0 / e)).abs() < 1e-12);
        assert!((residual(1.0, 1.0 + 1e-9) - 1.0).abs() < 1e-8);
    }

    #[test]
    fn agreement_is_judged_by_size() {
        let mut fit = fit(&sample(), &Exponential).unwrap();
        for (gap, waits, agreement) in [
            (0.25, 10.0, Agreement::Close),
            (0.25, 1000.0, Agreement::Poor),
            (0.03, 1e6, Agreement::Fair),
            (0.019, 1e12, Agreement::Close),
        ] {
            fit.largest_gap = Gap { size: gap, at: 1.0 };
            assert_eq!(Agreement::of(&fit, waits), agreement, "{gap} {waits}");
        }
    }
}
