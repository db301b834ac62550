//! A generalised Pareto tail spliced on the product-limit body: `S(t) = Ŝ(u)(1 + ξ(t-u)/σ)^{-1/ξ}` above the
//! threshold `u`. METHODS.md sections 3 and 4.
//!
//! Why a generalised Pareto: whatever the law, its excesses over a high threshold tend to one (Balkema & de Haan
//! 1974, Pickands 1975). ξ > 0 is a power tail, ξ = 0 exponential, ξ < 0 ends at a finite age.

use super::condense::{ENDINGS, ProductLimit, condense, median, middle};
use super::families::ParetoTail;
use super::fit::{COARSE, Evidence, FINE, Fit, FitError};
use super::law::Family;
use super::profile::interval;
use crate::tally::{Interval, Mass, Sample};

/// Confidence of the intervals.
pub const INTERVAL_LEVEL: f64 = 0.95;

/// Fewest endings above a threshold from which a tail is estimated. Common practice, no source.
const FEWEST: f64 = 30.0;

/// Largest share of the endings above the lowest threshold tried: a quarter, or half where that is no more than
/// 60. A tail that reaches into the bulk describes the bulk.
const MOST: f64 = 0.25;
const MOST_OF_FEW: f64 = 0.5;

/// Largest share of the waits above a threshold that may be left at the end: of a tail that is mostly cut off the
/// nearest part fits anything.
const MOST_UNSEEN: f64 = 0.5;

/// Most thresholds tried.
const CANDIDATES: usize = 16;

/// An estimate with its interval at confidence [`INTERVAL_LEVEL`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Estimate {
    /// The maximum-likelihood estimate.
    pub value: f64,
    /// Lower and upper end, by the profile likelihood.
    pub interval: (f64, f64),
}

/// A generalised Pareto tail and the body that it continues.
#[derive(Clone)]
pub struct Splice {
    /// Where the tail begins, `u`, s.
    pub threshold: f64,
    /// `Ŝ(u)`.
    pub survival: f64,
    /// Tail index ξ: larger is heavier.
    pub xi: Estimate,
    /// Scale σ of the excesses, s.
    pub sigma: Estimate,
    /// Number of endings above the threshold.
    pub exceedances: f64,
    /// The law of the waits that outlive the threshold, with its largest gap from their product-limit curve.
    pub fit: Fit,
    /// The thresholds that were tried, with the ξ and the gap found at each, lowest first.
    pub tried: Vec<Tried>,
    body: ProductLimit,
}

/// What a threshold gave.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Tried {
    /// The threshold, s.
    pub threshold: f64,
    /// Tail index found above it.
    pub xi: f64,
    /// Largest gap between the excesses and their law.
    pub gap: f64,
}

impl std::fmt::Debug for Splice {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Splice")
            .field("threshold", &self.threshold)
            .field("survival", &self.survival)
            .field("xi", &self.xi)
            .field("sigma", &self.sigma)
            .field("exceedances", &self.exceedances)
            .finish_non_exhaustive()
    }
}

impl Splice {
    /// Survival function: the product-limit curve up to the threshold, the tail beyond.
    pub fn survival(&self, t: f64) -> f64 {
        if t < self.threshold { self.body.at(t) } else { self.survival * self.fit.law.survival(t) }
    }
}

/// Why there is no tail.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum SpliceError {
    /// Too few endings to tell a tail from.
    #[error("{endings} waits ended beyond {threshold} s; a tail needs {FEWEST}")]
    TooFew {
        /// Lowest threshold possible, s.
        threshold: f64,
        /// Endings above it.
        endings: f64,
    },
    /// More than half of the waits that outlive any high threshold are cut off.
    #[error("most waits that outlive any high threshold are cut off: the tail is out of sight")]
    OutOfSight,
    /// The excesses allow no fit.
    #[error("no tail fits the ages beyond {threshold} s: {source}")]
    Unfit {
        /// The threshold, s.
        threshold: f64,
        /// What went wrong.
        source: FitError,
    },
}

/// The tail above an automatic threshold: of up to 16 candidates that leave between a quarter of the endings and
/// 30 of them and of which at least half is in sight, the one where the largest gap between the product-limit curve of the excesses and their fitted law
/// is least (Clauset, Shalizi & Newman 2009, section 3.3, with the product-limit curve for the empirical one, so
/// that censored excesses count). Lower thresholds have more waits and a smaller gap by chance, until the bulk
/// begins to show.
///
/// Works on about 75 cells, whatever the sample's size.
///
/// # Errors
/// [`SpliceError`] where too few waits have ended.
pub fn splice(sample: &Sample) -> Result<Splice, SpliceError> {
    let cells = condense(sample);
    let curve = ProductLimit::of(sample).thinned(ENDINGS);
    let total = cells.event_count();
    let mut above = total;
    let most = (MOST * total).max((2.0 * FEWEST).min(MOST_OF_FEW * total));
    let mut candidates: Vec<f64> = vec![];
    let mut out_of_sight = false;
    for e in cells.events.iter().filter(|e| e.upto.is_finite()) {
        above -= e.weight;
        let seen = curve.end() <= MOST_UNSEEN * curve.at(e.upto);
        out_of_sight |= above <= most && above >= FEWEST && !seen;
        if above <= most && above >= FEWEST && seen && candidates.last().is_none_or(|&c| e.upto > c) {
            candidates.push(e.upto);
        }
    }
    let none = || {
        let threshold = median(&cells).unwrap_or(0.0);
        if out_of_sight {
            SpliceError::OutOfSight
        } else {
            SpliceError::TooFew { threshold, endings: most.floor() }
        }
    };
    let mut tried: Vec<Tried> = vec![];
    // Above a higher threshold a generalised Pareto tail has the same ξ and σ + ξ(u' - u): the next one starts there.
    let mut start: Option<(f64, f64)> = None;
    for i in 0..candidates.len().min(CANDIDATES) {
        let threshold = candidates[i * candidates.len() / candidates.len().min(CANDIDATES)];
        let family = ParetoTail { threshold };
        let outlived = beyond(&cells, threshold);
        let Ok(mut evidence) = Evidence::with_curve(&outlived, curve.beyond(threshold), COARSE) else {
            continue;
        };
        let natural = start.map(|(xi, sigma)| [xi, sigma + xi * (threshold - last(&tried)), threshold]);
        let warm = natural.and_then(|n| family.free(&n)).and_then(|x| evidence.fit_from(&family, &[x]).ok());
        if let Some(fit) = warm.or_else(|| evidence.fit(&family).ok()) {
            let (xi, sigma) = (fit.parameters[0].value, fit.parameters[1].value);
            tried.push(Tried { threshold, xi, gap: fit.largest_gap.size });
            start = Some((xi, sigma));
        }
    }
    let best = tried.iter().min_by(|a, b| a.gap.total_cmp(&b.gap)).ok_or_else(none)?;
    Ok(Splice { tried: tried.clone(), ..tail_on(&cells, curve, best.threshold)? })
}

/// The threshold tried last.
fn last(tried: &[Tried]) -> f64 {
    tried.last().map_or(0.0, |t| t.threshold)
}

/// The tail above a given threshold `u` (s, at least 0), from the observations as they are; excesses are strict.
/// An interval that straddles the threshold counts as above it where its middle is.
///
/// # Errors
/// [`SpliceError::Unfit`] with fewer than two distinct excesses, or none.
pub fn tail_above(sample: &Sample, threshold: f64) -> Result<Splice, SpliceError> {
    tail_on(sample, ProductLimit::of(sample), threshold)
}

fn tail_on(sample: &Sample, body: ProductLimit, threshold: f64) -> Result<Splice, SpliceError> {
    let unfit = |source| SpliceError::Unfit { threshold, source };
    let family = ParetoTail { threshold };
    let outlived = beyond(sample, threshold);
    let mut evidence = Evidence::with_curve(&outlived, body.beyond(threshold), FINE).map_err(unfit)?;
    let fit = evidence.fit(&family).map_err(unfit)?;
    let mut estimate = |index: usize| {
        let p = fit.parameters[index];
        let ends = interval(&mut evidence, &family, &fit, p.name, INTERVAL_LEVEL);
        Estimate { value: p.value, interval: ends.unwrap_or((f64::NEG_INFINITY, f64::INFINITY)) }
    };
    let (xi, sigma) = (estimate(0), estimate(1));
    Ok(Splice {
        threshold,
        survival: body.at(threshold),
        xi,
        sigma,
        exceedances: outlived.event_count(),
        fit,
        tried: vec![],
        body,
    })
}

/// What the sample says of the waits that outlive the threshold.
fn beyond(sample: &Sample, threshold: f64) -> Sample {
    let masses =
        |masses: &[Mass]| -> Vec<Mass> { masses.iter().filter(|m| m.age > threshold).copied().collect() };
    let events = sample
        .events
        .iter()
        .filter(|e| middle(e) > threshold)
        .map(|e| Interval { over: e.over.max(threshold), ..*e })
        .collect();
    Sample { events, censored: masses(&sample.censored), entries: masses(&sample.entries) }
}
