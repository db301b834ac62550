//! One family fitted to one sample by maximum likelihood, with what is known of how well. METHODS.md section 3.

use std::sync::Arc;

use super::condense::{ProductLimit, median};
use super::law::{About, Family, Law, TailWeight};
use super::likelihood::{Likelihood, MAX_DIMENSION};
use super::maximise::{Maximum, Objective, Stop, maximise};
use super::symmetric::Symmetric;
use crate::tally::Sample;

/// A family's best law for a sample. Ages in the sample's unit, seconds unless it was scaled.
#[derive(Clone)]
pub struct Fit {
    /// The family's name in JSON and text. A shift or never share shows among the parameters.
    pub family: &'static str,
    /// Natural parameters, in the family's order.
    pub parameters: Vec<Parameter>,
    /// Free coordinates, in the family's order.
    pub free: Vec<f64>,
    /// Natural logarithm of the likelihood. Exact ages enter by densities per second, intervals by probabilities.
    pub log_likelihood: f64,
    /// Akaike's criterion, `2k - 2ℓ`.
    pub aic: f64,
    /// The same corrected for small samples (Hurvich & Tsai 1989), `n` the number of events; infinite where they
    /// are no more than the parameters plus one.
    pub aicc: f64,
    /// Schwarz's criterion, `k ln n - 2ℓ`, `n` the number of events (Volinsky & Raftery 2000).
    pub bic: f64,
    /// Akaike weight among the families that it was compared with; 0 until [`super::akaike_weights`] fills it.
    pub weight: f64,
    /// Largest distance between the product-limit curve and the law at the endings, and where.
    pub largest_gap: Gap,
    /// Why the search stopped.
    pub stop: Stop,
    /// Which side of "heavy or light" the law falls on.
    pub tail: TailWeight,
    /// Weight of the events.
    pub events: f64,
    /// The law.
    pub law: Arc<dyn Law>,
    pub(crate) peak: Peak,
}

impl std::fmt::Debug for Fit {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Fit")
            .field("family", &self.family)
            .field("parameters", &self.parameters)
            .field("log_likelihood", &self.log_likelihood)
            .field("largest_gap", &self.largest_gap)
            .field("stop", &self.stop)
            .finish_non_exhaustive()
    }
}

impl Fit {
    /// The parameter of this name.
    pub fn parameter(&self, name: &str) -> Option<Parameter> {
        self.parameters.iter().copied().find(|p| p.name == name)
    }

    /// Name of the parameter that ran off to a limit of the family, if one did.
    pub fn boundary(&self) -> Option<&'static str> {
        match self.stop {
            Stop::Boundary { coordinate } => self.parameters.get(coordinate).map(|p| p.name),
            _ => None,
        }
    }
}

/// A natural parameter of a fitted law.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Parameter {
    /// Its name.
    pub name: &'static str,
    /// Its value at the maximum.
    pub value: f64,
    /// Standard error from the observed information; `None` where the likelihood does not determine it (at a
    /// limit of the family), and for a shift, which is not searched.
    pub standard_error: Option<f64>,
}

/// A distance between two survival curves.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Gap {
    /// Size, in [0, 1].
    pub size: f64,
    /// Age at which it is found, s.
    pub at: f64,
}

/// Why no law was fitted.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum FitError {
    /// Nothing ended: no law can be told from any other.
    #[error("none of the {waits} waits has ended")]
    NoEvents {
        /// How many waits there are.
        waits: f64,
    },
    /// Fewer distinct exact ages than parameters: the likelihood has no bound.
    #[error("{family} has {needed} parameters, and the endings have {distinct} distinct ages")]
    TooFewAges {
        /// The family.
        family: &'static str,
        /// Distinct ages at hand.
        distinct: usize,
        /// Free parameters of the family.
        needed: usize,
    },
    /// The likelihood is not finite anywhere near the starting points.
    #[error("{family} cannot produce these ages")]
    NotFinite {
        /// The family.
        family: &'static str,
    },
}

impl FitError {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            FitError::NoEvents { .. } => "gather waits until some have ended",
            FitError::TooFewAges { .. } => "gather more waits, or give ages with more digits",
            FitError::NotFinite { .. } => "check the ages and their unit, or leave the family out",
        }
    }
}

/// Fits one family to the observations as they are; the cost grows with the number of distinct ages.
///
/// # Errors
/// [`FitError`] where there is no maximum to speak of. A maximum at a limit of the family is not an error: see
/// [`Fit::stop`].
pub fn fit(sample: &Sample, family: &dyn Family) -> Result<Fit, FitError> {
    Evidence::new(sample)?.fit(family)
}

/// A sample prepared for many fits.
pub(crate) struct Evidence {
    likelihood: Likelihood,
    curve: ProductLimit,
    log_ages: Vec<f64>,
    about: About,
    /// Median ending, s: the unit in which coordinates are near 0.
    unit: f64,
    events: f64,
    /// Distinct ages of events, if all are exact.
    exact_ages: Option<usize>,
}

impl Evidence {
    pub(crate) fn new(sample: &Sample) -> Result<Evidence, FitError> {
        Evidence::with_curve(sample, ProductLimit::of(sample))
    }

    /// The same, gaps measured against a curve that may be finer than the sample.
    pub(crate) fn with_curve(sample: &Sample, curve: ProductLimit) -> Result<Evidence, FitError> {
        let none = FitError::NoEvents { waits: sample.total() };
        let (Some(about), Some(unit)) = (About::with(sample, &curve), median(sample)) else {
            return Err(none);
        };
        if unit <= 0.0 {
            return Err(none);
        }
        let exact = sample.events.iter().all(|e| e.over == e.upto);
        Ok(Evidence {
            likelihood: Likelihood::new(sample),
            log_ages: curve.ages.iter().map(|t| t.ln()).collect(),
            curve,
            about,
            unit,
            events: sample.event_count(),
            exact_ages: exact.then_some(sample.events.len()),
        })
    }

    pub(crate) fn fit(&mut self, family: &dyn Family) -> Result<Fit, FitError> {
        let (name, dimension) = (family.name(), family.dimension());
        if let Some(distinct) = self.exact_ages.filter(|&d| d < dimension) {
            return Err(FitError::TooFewAges { family: name, distinct, needed: dimension });
        }
        let frame = Frame::new(family, self.unit);
        let events = self.events;
        let bounds: Vec<(f64, f64)> = family.coordinates().iter().map(|c| bounds(c.name)).collect();
        let mut best: Option<Maximum> = None;
        for start in family.starts(&self.about) {
            let near = family.rescale(&start, 1.0 / self.unit);
            let mut climb = self.climb(family, &frame);
            let found = maximise(&mut climb, &near, &bounds, events);
            if best.as_ref().is_none_or(|b| found.value > b.value) {
                best = Some(found);
            }
            // With two coordinates there is one hill; a second start is for when the first lost its way.
            if dimension <= 2 && best.as_ref().is_some_and(|b| b.stop == Stop::Converged) {
                break;
            }
        }
        let failed = FitError::NotFinite { family: name };
        let best = best.filter(|b| b.value.is_finite()).ok_or(failed.clone())?;
        let free = frame.free(&best.at[..dimension]);
        let law: Arc<dyn Law> = family.law(&free).ok_or(failed)?.into();
        let k = family.parameters().len() as f64;
        let log_likelihood = best.value;
        let aic = 2.0 * (k - log_likelihood);
        let room = self.events - k - 1.0;
        Ok(Fit {
            family: name,
            parameters: parameters(family, &frame, &best, law.as_ref()),
            log_likelihood,
            aic,
            aicc: if room > 0.0 { aic + 2.0 * k * (k + 1.0) / room } else { f64::INFINITY },
            bic: k * self.events.max(1.0).ln() - 2.0 * log_likelihood,
            weight: 0.0,
            largest_gap: largest_gap(&self.curve, &self.log_ages, law.as_ref()),
            stop: best.stop,
            tail: family.weight_of_tail(&free),
            events: self.events,
            free,
            law,
            peak: Peak {
                at: best.at[..dimension].to_vec(),
                value: best.value,
                information: best.information,
                unit: self.events,
                frame,
            },
        })
    }

    /// The likelihood as a function of scaled coordinates.
    pub(crate) fn climb<'a>(&'a mut self, family: &'a dyn Family, frame: &'a Frame) -> Climb<'a> {
        Climb { family, frame, likelihood: &mut self.likelihood }
    }

    /// Log-likelihood of any law.
    pub(crate) fn log_likelihood(&mut self, law: &dyn Law) -> f64 {
        self.likelihood.value(law)
    }
}

/// The maximum in coordinates scaled to the data's median, with its curvature: what draws are made from.
#[derive(Clone, Debug)]
pub(crate) struct Peak {
    pub(crate) at: Vec<f64>,
    pub(crate) value: f64,
    pub(crate) information: Symmetric,
    /// Curvature to expect of each coordinate: the number of events.
    pub(crate) unit: f64,
    pub(crate) frame: Frame,
}

/// Turns coordinates in units of the data's median into those in seconds: `offset + slope · x`, for each.
#[derive(Clone, Debug)]
pub(crate) struct Frame {
    offset: Vec<f64>,
    slope: Vec<f64>,
}

impl Frame {
    fn new(family: &dyn Family, unit: f64) -> Frame {
        let n = family.dimension();
        let offset = family.rescale(&vec![0.0; n], unit);
        let slope = family.rescale(&vec![1.0; n], unit).iter().zip(&offset).map(|(b, a)| b - a).collect();
        Frame { offset, slope }
    }

    pub(crate) fn free(&self, at: &[f64]) -> Vec<f64> {
        (0..at.len()).map(|i| self.free_at(i, at[i])).collect()
    }

    /// One coordinate of [`Frame::free`].
    pub(crate) fn free_at(&self, i: usize, x: f64) -> f64 {
        self.offset[i] + self.slope[i] * x
    }
}

/// See [`Evidence::climb`].
pub(crate) struct Climb<'a> {
    family: &'a dyn Family,
    frame: &'a Frame,
    likelihood: &'a mut Likelihood,
}

impl Objective for Climb<'_> {
    fn evaluate(&mut self, at: &[f64], gradient: &mut [f64]) -> f64 {
        let mut free = [0.0; MAX_DIMENSION];
        for (i, &x) in at.iter().enumerate() {
            free[i] = self.frame.free_at(i, x);
        }
        let Some(law) = self.family.law(&free[..at.len()]) else { return f64::NEG_INFINITY };
        let value = self.likelihood.gradient(law.as_ref(), gradient);
        gradient.iter_mut().zip(&self.frame.slope).for_each(|(g, slope)| *g *= slope);
        value
    }
}

/// Walls of the search. A never share below `logistic(-12)`, six in a million, or above `logistic(6)` cannot be
/// told from none or all (RECIPE's second section). A tail index below -1 makes the density infinite at the
/// end of its range (Smith 1985).
pub(crate) fn bounds(coordinate: &str) -> (f64, f64) {
    match coordinate {
        "never" => (-12.0, 6.0),
        "xi" => (-1.0, f64::INFINITY),
        _ => (f64::NEG_INFINITY, f64::INFINITY),
    }
}

/// Natural parameters with standard errors by the delta method.
fn parameters(family: &dyn Family, frame: &Frame, best: &Maximum, law: &dyn Law) -> Vec<Parameter> {
    const STEP: f64 = 1e-5;
    let n = family.dimension();
    let eigen = best.information.eigen();
    let at = |x: &[f64]| family.law(&frame.free(x)).map(|law| law.parameters());
    let slopes: Option<Vec<Vec<f64>>> = (0..n)
        .map(|i| {
            let (mut up, mut down) = (best.at, best.at);
            up[i] += STEP;
            down[i] -= STEP;
            let (up, down) = (at(&up[..n])?, at(&down[..n])?);
            Some(up.iter().zip(&down).map(|(a, b)| (a - b) / (2.0 * STEP)).collect())
        })
        .collect();
    let error = |k: usize| {
        let slopes = slopes.as_ref().filter(|_| best.stop == Stop::Converged)?;
        let slope: Vec<f64> = slopes.iter().map(|s| s[k]).collect();
        let spread = eigen.apply(|v| 1.0 / v.sqrt(), &slope);
        let error = spread.iter().map(|s| s * s).sum::<f64>().sqrt();
        (error > 0.0 && error.is_finite()).then_some(error)
    };
    let names = family.parameters();
    let values = law.parameters();
    names
        .into_iter()
        .zip(values)
        .enumerate()
        .map(|(k, (name, value))| Parameter { name, value, standard_error: error(k) })
        .collect()
}

fn largest_gap(curve: &ProductLimit, log_ages: &[f64], law: &dyn Law) -> Gap {
    let mut survival = vec![0.0; curve.ages.len()];
    law.survival_on(&curve.ages, log_ages, &mut survival);
    let mut gap = Gap::default();
    for (i, (law, data)) in survival.iter().zip(&curve.survival).enumerate() {
        let size = (law - data).abs();
        if size > gap.size {
            gap = Gap { size, at: curve.ages[i] };
        }
    }
    gap
}
