//! How thick the far tail is: the Hill and the moment estimator. METHODS.md sections 2 and 4.
//!
//! They serve the verdict on the tail, not the decision. `xi` is the extreme-value index: larger is heavier, 0 is
//! exponential, below 0 the tail ends; `alpha = 1/xi` where `xi > 0`.

use super::interval::ConfidenceInterval;
use crate::tally::Sample;

/// The logarithms of the top ages over a threshold, summed up.
///
/// Every wait counts with the age it had, ended or not; an age in a bin counts as the bin's middle, in an open bucket
/// as its lower bound.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TopAges {
    k: f64,
    threshold: f64,
    ended: f64,
    mean: f64,
    mean_square: f64,
}

/// Why a sample has no top to speak of.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum TopError {
    /// Not more than `k` waits, or fewer than one asked for.
    #[error("the top {k} of {waits} waits leave no threshold")]
    TooFew {
        /// Top waits asked for.
        k: f64,
        /// Waits there are.
        waits: f64,
    },
    /// The top ages are all equal: there is no tail in sight.
    #[error("the top ages are all {age} s: no tail is in sight")]
    AllEqual {
        /// The one age, s.
        age: f64,
    },
}

/// An estimate of `xi` with its standard error.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TailIndex {
    /// The estimate.
    pub xi: f64,
    /// Its asymptotic standard error.
    pub standard_error: f64,
}

impl TailIndex {
    /// Confidence interval `xi ± z·se`.
    pub fn interval(&self, level: f64) -> ConfidenceInterval {
        ConfidenceInterval::plain(self.xi, self.standard_error, level, f64::MIN, f64::MAX)
    }
}

impl TopAges {
    /// The top `k` waits (a number of waits, >= 1, by weight) over the age of the next one below.
    ///
    /// # Errors
    /// [`TopError`].
    pub fn new(sample: &Sample, k: f64) -> Result<TopAges, TopError> {
        // Age, number ended, number censored; from the greatest age down.
        let ended = sample.events.iter().map(|e| {
            let age = if e.upto.is_finite() { 0.5 * (e.over + e.upto) } else { e.over };
            (age, e.weight, 0.0)
        });
        let mut ages: Vec<(f64, f64, f64)> =
            ended.chain(sample.censored.iter().map(|m| (m.age, 0.0, m.weight))).collect();
        ages.retain(|&(age, done, open)| age > 0.0 && done + open > 0.0);
        ages.sort_by(|a, b| b.0.total_cmp(&a.0));
        let waits: f64 = ages.iter().map(|&(_, done, open)| done + open).sum();
        if !(1.0 <= k && k < waits) {
            return Err(TopError::TooFew { k, waits });
        }
        let mut top: Vec<(f64, f64)> = Vec::new();
        let (mut above, mut above_ended, mut threshold) = (0.0, 0.0, 0.0);
        for equal in ages.chunk_by(|a, b| a.0 == b.0) {
            let (done, open) = equal.iter().fold((0.0, 0.0), |s, e| (s.0 + e.1, s.1 + e.2));
            threshold = equal[0].0;
            if above + done + open > k {
                // The (k+1)-th is of this age; only some of its equals are among the top, at random.
                above_ended += done / (done + open) * (k - above);
                break;
            }
            above += done + open;
            above_ended += done;
            top.push((threshold, done + open));
        }
        let (mut mean, mut mean_square) = (0.0, 0.0);
        for (age, weight) in top {
            let excess = age.ln() - threshold.ln();
            mean += weight * excess / k;
            mean_square += weight * excess * excess / k;
        }
        if mean <= 0.0 {
            return Err(TopError::AllEqual { age: threshold });
        }
        Ok(TopAges { k, threshold, ended: above_ended, mean, mean_square })
    }

    /// The top tenth, `k = ⌊n/10⌋`, but at least `least` waits.
    ///
    /// # Errors
    /// [`TopError`].
    pub fn tenth(sample: &Sample, least: f64) -> Result<TopAges, TopError> {
        TopAges::new(sample, (0.1 * sample.total()).floor().max(least))
    }

    /// Number of waits in the top.
    pub fn k(&self) -> f64 {
        self.k
    }

    /// The age they exceed, s.
    pub fn threshold(&self) -> f64 {
        self.threshold
    }

    /// Share of them that ended, in [0, 1]; the rest is censored.
    pub fn ended_share(&self) -> f64 {
        self.ended / self.k
    }

    /// Hill's estimator (Hill 1975), `xi = mean ln(X_i / X_(k+1))`, always > 0; standard error `xi/√k` (Hall 1982).
    /// Takes every age as an ending: with censoring in the top use [`TopAges::hill_censored`].
    pub fn hill(&self) -> TailIndex {
        TailIndex { xi: self.mean, standard_error: self.mean / self.k.sqrt() }
    }

    /// Hill's estimator divided by the share that ended (Einmahl, Fils-Villetard & Guillou 2008, *Bernoulli* 14:207);
    /// standard error `xi/√(k·share)`. `None` if none of the top ended.
    pub fn hill_censored(&self) -> Option<TailIndex> {
        self.adjusted(self.hill())
    }

    /// The moment estimator (Dekkers, Einmahl & de Haan 1989, *Ann. Statist.* 17:1833), of any sign:
    /// `M1 + 1 - ½ / (1 - M1²/M2)`, with its asymptotic standard error. `None` where all the
    /// excesses are equal.
    pub fn moment(&self) -> Option<TailIndex> {
        let spread = 1.0 - self.mean * self.mean / self.mean_square;
        // Equal excesses leave rounding only.
        if spread <= 1e-12 {
            return None;
        }
        let xi = self.mean + 1.0 - 0.5 / spread;
        Some(TailIndex { xi, standard_error: (moment_variance(xi) / self.k).sqrt() })
    }

    /// The moment estimator divided by the share that ended (Einmahl, Fils-Villetard & Guillou 2008). `None` if none
    /// of the top ended, or where [`TopAges::moment`] has no value.
    pub fn moment_censored(&self) -> Option<TailIndex> {
        self.adjusted(self.moment()?)
    }

    /// Index and error under censoring: with `p` the share ended, `xi = x/p` and variance
    /// `(σ²(x) + xi² p (1 - p)) / p²`, the second part for the doubt about `p`.
    fn adjusted(&self, all: TailIndex) -> Option<TailIndex> {
        let p = self.ended_share();
        if p <= 0.0 {
            return None;
        }
        let xi = all.xi / p;
        let variance = all.standard_error * all.standard_error + xi * xi * p * (1.0 - p).max(0.0) / self.k;
        Some(TailIndex { xi, standard_error: variance.sqrt() / p })
    }
}

/// Asymptotic variance of `√k` times the error of the moment estimator (Dekkers, Einmahl & de Haan 1989).
fn moment_variance(xi: f64) -> f64 {
    if xi >= 0.0 {
        return 1.0 + xi * xi;
    }
    let (a, b, c, d) = (1.0 - xi, 1.0 - 2.0 * xi, 1.0 - 3.0 * xi, 1.0 - 4.0 * xi);
    a * a * b * (4.0 - 8.0 * b / c + (5.0 - 11.0 * xi) * b / (c * d))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tally::{Cause, Cells};
    use crate::wait::{Ending, Wait};

    fn sample(ages: impl IntoIterator<Item = f64>, censored: impl IntoIterator<Item = f64>) -> Sample {
        let waits: Vec<Wait> = ages
            .into_iter()
            .map(|t| Wait::new(t, Ending::Done).unwrap())
            .chain(censored.into_iter().map(|t| Wait::new(t, Ending::GaveUp).unwrap()))
            .collect();
        Cells::from_waits(&waits).sample(Cause::Done)
    }

    /// Quantiles of a law, evenly spread.
    fn quantiles(n: u32, quantile: impl Fn(f64) -> f64) -> impl Iterator<Item = f64> {
        (0..n).map(move |i| quantile((f64::from(i) + 0.5) / f64::from(n)))
    }

    #[test]
    fn by_hand() {
        // Excesses ln 2 and ln 4 over 1: xi = 1.5 ln 2, M2 = 2.5 ln²2, 1 - M1²/M2 = 0.1.
        let top = TopAges::new(&sample([4.0, 1.0], [2.0, 0.5]), 2.0).unwrap();
        let ln2 = std::f64::consts::LN_2;
        assert!((top.hill().xi - 1.5 * ln2).abs() < 1e-15);
        assert_eq!((top.threshold(), top.ended_share()), (1.0, 0.5));
        assert!((top.moment().unwrap().xi - (1.5 * ln2 + 1.0 - 5.0)).abs() < 1e-12);
        let adjusted = top.hill_censored().unwrap();
        assert!((adjusted.xi - 3.0 * ln2).abs() < 1e-15);
        // Hill under censoring: xi / √(k p).
        assert!((adjusted.standard_error - 3.0 * ln2).abs() < 1e-12);
    }

    #[test]
    fn known_laws() {
        let pareto = TopAges::tenth(&sample(quantiles(20_000, |p| (1.0 - p).powf(-0.5)), []), 10.0).unwrap();
        assert!(pareto.hill().interval(0.95).contains(0.5), "{:?}", pareto.hill());
        assert!(pareto.moment().unwrap().interval(0.95).contains(0.5));
        let uniform = TopAges::tenth(&sample(quantiles(20_000, |p| p + 1e-9), []), 10.0).unwrap();
        assert!(uniform.moment().unwrap().interval(0.95).contains(-1.0), "{:?}", uniform.moment());
        let exponential = TopAges::tenth(&sample(quantiles(200_000, |p| -(1.0 - p).ln()), []), 10.0).unwrap();
        let moment = exponential.moment().unwrap().xi;
        assert!(moment.abs() < 0.15, "{moment}");
    }

    #[test]
    fn no_top() {
        assert!(matches!(TopAges::new(&sample([1.0], []), 1.0), Err(TopError::TooFew { .. })));
        assert!(matches!(TopAges::new(&Sample::default(), 0.0), Err(TopError::TooFew { .. })));
        assert!(matches!(TopAges::new(&sample([3.0; 50], []), 5.0), Err(TopError::AllEqual { .. })));
        let censored = TopAges::new(&sample([1.0, 1.5], [3.0, 4.0, 5.0]), 2.0).unwrap();
        assert_eq!(censored.hill_censored(), None);
    }
}
