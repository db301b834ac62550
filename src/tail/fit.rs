//! One family fitted to one sample by maximum likelihood, with what is known of how well. METHODS.md section 3.

use std::sync::Arc;

use super::condense::{ProductLimit, median};
use super::law::{About, Coordinate, Family, Kind, Law, TailWeight};
use super::likelihood::{Likelihood, MAX_DIMENSION};
use super::maximise::{FLAT, Maximum, Objective, Stop, Terrain, maximise};
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
    /// The parameter that ran off to a limit of the family, where one did.
    pub boundary: Option<&'static str>,
    /// Which side of "heavy or light" the law falls on.
    pub tail: TailWeight,
    /// Weight of the events.
    pub events: f64,
    /// The law.
    pub law: Arc<dyn Law>,
    /// Likelihoods evaluated, over all starts.
    pub evaluations: usize,
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
/// ```
/// use outwait::tail::{families::Weibull, fit};
/// use outwait::tally::{Cause, Cells};
/// use outwait::wait::{Ending, Wait};
///
/// // Hours to failure of 20 units, the test stopped at 500 (NIST/SEMATECH e-Handbook, section 8.4.1.3).
/// let failed = [54.0, 187.0, 216.0, 240.0, 244.0, 335.0, 361.0, 373.0, 375.0, 386.0];
/// let mut waits: Vec<Wait> = failed.iter().map(|&t| Wait::new(t, Ending::Done)).collect::<Result<_, _>>()?;
/// waits.push(Wait::new(500.0, Ending::GaveUp)?.with_count(10)?);
/// let weibull = fit(&Cells::from_waits(&waits).sample(Cause::Done), &Weibull)?;
/// assert_eq!(format!("{:.4}", weibull.parameters[0].value), "1.7208");
/// # Ok::<(), Box<dyn std::error::Error>>(())
/// ```
///
/// # Errors
/// [`FitError`] where there is no maximum to speak of. A maximum at a limit of the family is not an error: see
/// [`Fit::stop`].
pub fn fit(sample: &Sample, family: &dyn Family) -> Result<Fit, FitError> {
    Evidence::new(sample)?.fit(family)
}

/// When a climb ends, nats: where the fit is the answer, and where it is one of many to be weighed.
pub(crate) const FINE: f64 = 1e-6;
pub(crate) const COARSE: f64 = 1e-3;

/// A sample prepared for many fits.
pub(crate) struct Evidence {
    likelihood: Likelihood,
    curve: ProductLimit,
    log_ages: Vec<f64>,
    about: About,
    /// Median ending, s: the unit in which coordinates are near 0.
    unit: f64,
    events: f64,
    /// When a climb ends, nats.
    gain: f64,
    /// A likelihood below this is of no use.
    pub(crate) least: f64,
    /// Distinct ages of events, if all are exact.
    exact_ages: Option<usize>,
}

impl Evidence {
    pub(crate) fn new(sample: &Sample) -> Result<Evidence, FitError> {
        Evidence::with_curve(sample, ProductLimit::of(sample), FINE)
    }

    /// The same with gaps measured against a curve that may be finer than the sample, and climbs that end at `gain`.
    pub(crate) fn with_curve(sample: &Sample, curve: ProductLimit, gain: f64) -> Result<Evidence, FitError> {
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
            gain,
            least: f64::NEG_INFINITY,
            exact_ages: exact.then_some(sample.events.len()),
        })
    }

    pub(crate) fn fit(&mut self, family: &dyn Family) -> Result<Fit, FitError> {
        self.fit_from(family, &family.starts(&self.about))
    }

    /// The fit of a family with a never share, which comes last among its coordinates, once the family without is
    /// fitted at `plain`. From there without a share, or with a small one if the likelihood rises that way; and from
    /// the family's own first start where waits are left at the end.
    pub(crate) fn fit_never(&mut self, family: &dyn Family, plain: &[f64]) -> Result<Fit, FitError> {
        let frame = Frame::new(family, self.unit);
        let mut near = plain.to_vec();
        near.push(NEVER.0);
        let mut slopes = vec![0.0; near.len()];
        self.climb(family, &frame).evaluate(&family.rescale(&near, 1.0 / frame.unit), &mut slopes);
        if slopes.last().is_some_and(|&s| s > 0.0) {
            near.pop();
            near.push(NEVER_START);
        }
        let mut starts = vec![near];
        if self.about.left > 1e-3 {
            starts.extend(family.starts(&self.about).into_iter().take(1));
        }
        self.fit_from(family, &starts)
    }

    /// [`Evidence::fit`] from given starts.
    pub(crate) fn fit_from(&mut self, family: &dyn Family, starts: &[Vec<f64>]) -> Result<Fit, FitError> {
        let (name, dimension) = (family.name(), family.dimension());
        if let Some(distinct) = self.exact_ages.filter(|&d| d < dimension) {
            return Err(FitError::TooFewAges { family: name, distinct, needed: dimension });
        }
        let frame = Frame::new(family, self.unit);
        let terrain = self.terrain(family, None);
        let mut climb = self.climb(family, &frame);
        let mut starts: Vec<(f64, Vec<f64>)> = starts
            .iter()
            .map(|start| {
                let near = family.rescale(start, 1.0 / frame.unit);
                (if starts.len() > 1 { climb.evaluate(&near, &mut near.clone()) } else { 0.0 }, near)
            })
            .collect();
        // Best first; the family's own order where they tie.
        starts.sort_by(|a, b| b.0.total_cmp(&a.0));
        let mut best: Option<Maximum> = None;
        let mut evaluations = 0;
        for (_, start) in &starts {
            let bar = best.as_ref().map_or(f64::NEG_INFINITY, |b| b.value);
            let found = maximise(&mut climb, start, &terrain, bar);
            evaluations += found.evaluations;
            if best.as_ref().is_none_or(|b| found.value > b.value) {
                best = Some(found);
            }
            // With two coordinates there is one hill; a second start is for when the first lost its way.
            let arrived = |b: &Maximum| matches!(b.stop, Stop::Converged | Stop::Boundary { .. });
            if dimension <= 2 && best.as_ref().is_some_and(arrived) {
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
        let (parameters, boundary) = parameters(family, &frame, &best, law.as_ref());
        let room = self.events - k - 1.0;
        Ok(Fit {
            family: name,
            parameters,
            log_likelihood,
            aic,
            aicc: if room > 0.0 { aic + 2.0 * k * (k + 1.0) / room } else { f64::INFINITY },
            bic: k * self.events.max(1.0).ln() - 2.0 * log_likelihood,
            weight: 0.0,
            largest_gap: largest_gap(&self.curve, &self.log_ages, law.as_ref()),
            stop: best.stop,
            boundary,
            tail: family.weight_of_tail(&free),
            events: self.events,
            free,
            law,
            evaluations,
            peak: Peak {
                at: best.at[..dimension].to_vec(),
                value: best.value,
                information: best.information,
                frame,
            },
        })
    }

    /// The likelihood as a function of scaled coordinates.
    pub(crate) fn climb<'a>(&'a mut self, family: &'a dyn Family, frame: &'a Frame) -> Climb<'a> {
        Climb { family, frame, likelihood: &mut self.likelihood, quick: self.gain >= COARSE }
    }

    /// Log-likelihood of any law, to the accuracy that weighing it needs.
    pub(crate) fn log_likelihood(&mut self, law: &dyn Law) -> f64 {
        self.likelihood.quick_value(law)
    }
}

/// The maximum in coordinates scaled to the data's median, with its curvature: what draws are made from.
#[derive(Clone, Debug)]
pub(crate) struct Peak {
    pub(crate) at: Vec<f64>,
    pub(crate) value: f64,
    pub(crate) information: Symmetric,
    pub(crate) frame: Frame,
}

/// Turns coordinates in units of the data's median into those in seconds: `offset + slope · x`, for each.
#[derive(Clone, Debug)]
pub(crate) struct Frame {
    unit: f64,
    offset: Vec<f64>,
    slope: Vec<f64>,
}

impl Frame {
    fn new(family: &dyn Family, unit: f64) -> Frame {
        let n = family.dimension();
        let offset = family.rescale(&vec![0.0; n], unit);
        let slope = family.rescale(&vec![1.0; n], unit).iter().zip(&offset).map(|(b, a)| b - a).collect();
        Frame { unit, offset, slope }
    }

    pub(crate) fn free(&self, at: &[f64]) -> Vec<f64> {
        (0..at.len()).map(|i| self.free_at(i, at[i])).collect()
    }

    /// One coordinate of [`Frame::free`].
    pub(crate) fn free_at(&self, i: usize, x: f64) -> f64 {
        self.offset[i] + self.slope[i] * x
    }
}

/// Walls of the logit of a never share: one below six in a million, or above all but 0.25%, cannot be told from
/// none or all (RECIPE's second section).
const NEVER: (f64, f64) = (-12.0, 6.0);
/// Where the search for a small share starts: 0.7%.
const NEVER_START: f64 = -5.0;

/// See [`Evidence::climb`].
pub(crate) struct Climb<'a> {
    family: &'a dyn Family,
    frame: &'a Frame,
    likelihood: &'a mut Likelihood,
    /// Whether a likelihood right to the seventh digit of a nat will do.
    quick: bool,
}

impl Objective for Climb<'_> {
    fn evaluate(&mut self, at: &[f64], gradient: &mut [f64]) -> f64 {
        let mut free = [0.0; MAX_DIMENSION];
        for (i, &x) in at.iter().enumerate() {
            free[i] = self.frame.free_at(i, x);
        }
        let Some(law) = self.family.law(&free[..at.len()]) else { return f64::NEG_INFINITY };
        let value = if self.quick {
            self.likelihood.quick_gradient(law.as_ref(), gradient)
        } else {
            self.likelihood.gradient(law.as_ref(), gradient)
        };
        gradient.iter_mut().zip(&self.frame.slope).for_each(|(g, slope)| *g *= slope);
        value
    }
}

impl Evidence {
    /// Walls of the search in units of the data's median (a fit that ends at one is at a limit of its family), and
    /// the curvature to expect; of all coordinates but one, if one is held.
    pub(crate) fn terrain(&self, family: &dyn Family, held: Option<usize>) -> Terrain {
        let coordinates = family.coordinates();
        let free = || coordinates.iter().enumerate().filter(|(i, _)| Some(*i) != held).map(|(_, c)| c);
        let curvature =
            free().map(|c| if c.kind == Kind::Share { SHARE_CURVATURE * self.events } else { self.events });
        Terrain {
            walls: free().map(|c| self.walls(c)).collect(),
            curvature: curvature.collect(),
            gain: self.gain,
            least: self.least,
        }
    }

    /// Walls of one coordinate.
    ///
    /// A part of a mixture holds a few events and is no spike on a few equal ages, where the likelihood of a
    /// mixture has no bound (Hathaway 1985). A tail index below -1 makes the density infinite at the end of its
    /// range (Smith 1985). Elsewhere a factor of a million from 1 is a limit, but scales may lie as far from the
    /// median as ages do.
    pub(crate) fn walls(&self, coordinate: &Coordinate) -> (f64, f64) {
        let narrowest = (NARROWEST_PART * self.about.log_sd).ln();
        let reach = match (coordinate.name, coordinate.kind) {
            ("never", _) => return NEVER,
            ("xi", _) => return (-1.0, 1e3),
            ("sigma_1" | "sigma_2", _) => return (narrowest, FAR_OUT),
            ("shape_1" | "shape_2", _) => return (-FAR_OUT, -2.0 * narrowest),
            (_, Kind::Share) => (self.events / FEWEST_IN_PART).ln().clamp(1.0, FAR_OUT),
            (_, Kind::Shape) => FAR_OUT,
            (_, Kind::Scale | Kind::Rate | Kind::LogLocation) => 40.0,
            (_, Kind::Location | Kind::Index) => 1e3,
        };
        (-reach, reach)
    }
}

/// Curvature of a logit, per event, when both shares are in evidence.
const SHARE_CURVATURE: f64 = 0.1;

/// Logarithm of a million.
const FAR_OUT: f64 = 13.8;

/// Least spread of a part of a mixture, in units of the whole sample's (standard deviations of logarithms; that of
/// a gamma is about one over the root of its shape).
const NARROWEST_PART: f64 = 0.02;

/// Fewest events in a part of a mixture.
const FEWEST_IN_PART: f64 = 5.0;

/// Natural parameters with standard errors by the delta method, and which of them a boundary concerns.
fn parameters(
    family: &dyn Family,
    frame: &Frame,
    best: &Maximum,
    law: &dyn Law,
) -> (Vec<Parameter>, Option<&'static str>) {
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
        let slopes = slopes.as_ref().filter(|_| !matches!(best.stop, Stop::Stalled | Stop::Hopeless))?;
        let slope: Vec<f64> = slopes.iter().map(|s| s[k]).collect();
        // What leans on a direction that the likelihood leaves open has no standard error.
        let open = norm(&eigen.apply(|v| if v > FLAT { 0.0 } else { 1.0 }, &slope));
        let spread = norm(&eigen.apply(|v| if v > FLAT { 1.0 / v.sqrt() } else { 0.0 }, &slope));
        (open <= 1e-2 * norm(&slope) && spread > 0.0 && spread.is_finite()).then_some(spread)
    };
    let names = family.parameters();
    let values = law.parameters();
    let boundary = match best.stop {
        Stop::Boundary { coordinate } => slopes.as_ref().and_then(|slopes| {
            let weight = |k: &usize| match slopes[coordinate][*k] {
                0.0 => 0.0,
                slope => (slope / values[*k]).abs(),
            };
            let most = (0..values.len()).max_by(|a, b| weight(a).total_cmp(&weight(b)))?;
            Some(names[most])
        }),
        _ => None,
    };
    let parameters = names
        .into_iter()
        .zip(values)
        .enumerate()
        .map(|(k, (name, value))| Parameter { name, value, standard_error: error(k) })
        .collect();
    (parameters, boundary)
}

fn norm(v: &[f64]) -> f64 {
    v.iter().map(|x| x * x).sum::<f64>().sqrt()
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
