//! Offered wait and patience from one set of waits that end served or abandoned. METHODS.md section 10.
//!
//! Whoever is served had more patience than that; whoever leaves would have had to wait longer than that. So the same waits
//! give two product-limit curves, each with the other ending as censoring (Brown et al. 2005, *JASA* 100:36, section 6).

use serde::{Deserialize, Serialize};

use crate::curve::{AalenJohansen, CurveError, KaplanMeier, LifeTable, RestrictedMean};
use crate::tail::families::{Exponential, Gamma, Hyperexponential, LogLogistic, Lognormal, Weibull};
use crate::tail::{Family, Fit, Law, akaike_weights, fit};
use crate::tally::{Cause, Cells, EventCell, Mass};

/// Cells that a fit of patience is made on: steps of a few percent.
const FIT_CELLS: usize = 120;
/// Steps of a thinned curve at most.
const STEPS: f64 = 80.0;

/// Both curves of a queue.
#[derive(Clone, Debug)]
pub struct TwoCurves {
    /// How long one would wait for service if nobody left: served (done or failed) are events.
    pub offered: KaplanMeier,
    /// How long one would wait before leaving if nobody were served: those who gave up are events.
    pub patience: KaplanMeier,
    /// The shares served (`done`) and abandoned (`failed`) by an age, as they compete.
    pub outcomes: AalenJohansen,
    means: [RestrictedMean; 2],
}

impl TwoCurves {
    /// Reads them off the waits of a queue; open ones are censored in both.
    ///
    /// # Errors
    /// [`CurveError`] where no curve can be drawn.
    pub fn of(cells: &Cells) -> Result<TwoCurves, CurveError> {
        let served = LifeTable::of_sample(&cells.sample(Cause::Any))?;
        let left = LifeTable::of(&turned(cells))?;
        // Those who left as the competing ending.
        let mut both = Cells { gave_up: Vec::new(), ..cells.clone() };
        for e in &mut both.events {
            (e.done, e.failed) = (e.done + e.failed, 0.0);
        }
        both.events.extend(cells.gave_up.iter().filter(|m| m.age > 0.0).map(|m| EventCell {
            over: m.age,
            upto: m.age,
            done: 0.0,
            failed: m.weight,
        }));
        both.tidy();
        Ok(TwoCurves {
            offered: KaplanMeier::of(&served),
            patience: KaplanMeier::of(&left),
            outcomes: AalenJohansen::of(&LifeTable::of(&both)?),
            means: [RestrictedMean::of(&served), RestrictedMean::of(&left)],
        })
    }

    /// What is worth quoting of the offered wait.
    pub fn offered_summary(&self) -> CurveSummary {
        CurveSummary::of(&self.offered, &self.means[0])
    }

    /// What is worth quoting of patience.
    pub fn patience_summary(&self) -> CurveSummary {
        CurveSummary::of(&self.patience, &self.means[1])
    }
}

/// The waits with the two endings exchanged: those who gave up are events, those who were served are censored.
pub fn turned(cells: &Cells) -> Cells {
    let mut turned =
        Cells { waiting: cells.waiting.clone(), entries: cells.entries.clone(), ..Cells::default() };
    turned.events = cells
        .gave_up
        .iter()
        .filter(|m| m.age > 0.0)
        .map(|m| EventCell { over: m.age, upto: m.age, done: m.weight, failed: 0.0 })
        .collect();
    turned.gave_up = cells
        .events
        .iter()
        .map(|e| {
            let age = if e.upto.is_finite() { 0.5 * (e.over + e.upto) } else { e.over };
            Mass { age, weight: e.done + e.failed }
        })
        .filter(|m| m.age > 0.0)
        .collect();
    turned.tidy();
    turned
}

/// A survival curve in a few numbers.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct CurveSummary {
    /// The age by which half have ended, s; absent where the curve does not fall so far.
    pub p50_s: Option<f64>,
    /// The same for 90%.
    pub p90_s: Option<f64>,
    /// Mean, counted up to `sight_s`, s.
    pub mean_s: f64,
    /// Last age with enough at risk, s: past it the data are silent.
    pub sight_s: f64,
    /// The curve up to there: ages in s and the shares that last longer, thinned to about as many as a picture shows.
    pub curve: Vec<[f64; 2]>,
}

impl CurveSummary {
    fn of(curve: &KaplanMeier, mean: &RestrictedMean) -> CurveSummary {
        CurveSummary {
            p50_s: curve.quantile(0.5),
            p90_s: curve.quantile(0.9),
            mean_s: mean.restricted_mean(curve.sight()).value,
            sight_s: curve.sight(),
            curve: thinned(curve),
        }
    }
}

/// Points of a curve up to its sight, a step of at least one part in [`STEPS`] between them, and the last.
fn thinned(curve: &KaplanMeier) -> Vec<[f64; 2]> {
    let mut kept: Vec<[f64; 2]> = Vec::new();
    let seen = curve.points().iter().take_while(|p| p.time <= curve.sight());
    let mut last = None;
    for p in seen {
        let point = [p.time, p.survival];
        let before = kept.last().map_or(1.0, |k| k[1]);
        last = Some(point);
        if before - p.survival >= 1.0 / STEPS {
            kept.push(point);
            last = None;
        }
    }
    kept.extend(last);
    kept
}

/// Patience as it was fitted, beside the exponential one that Erlang A assumes.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct PatienceFit {
    /// The family of least AIC.
    pub family: String,
    /// Its Akaike weight among those compared.
    pub weight: f64,
    /// By how much its AIC is less than that of the exponential.
    pub ahead_by: f64,
    /// Mean of the exponential, s: all time waited over the number who left.
    pub exponential_mean_s: f64,
    /// Largest distance of the exponential from the product-limit curve, a share.
    pub exponential_gap: f64,
    /// Where that is, s.
    pub gap_at_s: f64,
    /// Share that would have left by a quarter of the exponential's mean: by the family of least AIC, and by the exponential
    /// (always 22.1%). Where waits are short, only early impatience counts (Zeltyn & Mandelbaum 2005).
    pub left_early: [f64; 2],
}

/// Fits patience. `None` where no family can be fitted.
pub fn fit_patience(cells: &Cells) -> Option<PatienceFit> {
    let mut coarse = turned(cells).coarsened(FIT_CELLS);
    coarse.gave_up = joined(&coarse.gave_up);
    let sample = coarse.sample(Cause::Done);
    let exponential = fit(&sample, &Exponential).ok()?;
    let mean = 1.0 / exponential.parameter("rate")?.value;
    let families: [&dyn Family; 5] = [&Weibull, &Gamma, &Lognormal, &LogLogistic, &Hyperexponential];
    let mut fits: Vec<Fit> = families.into_iter().filter_map(|family| fit(&sample, family).ok()).collect();
    fits.push(exponential.clone());
    akaike_weights(&mut fits);
    let best = fits.iter().min_by(|a, b| a.aic.total_cmp(&b.aic))?;
    let early = 0.25 * mean;
    let left = |law: &dyn Law| 1.0 - law.survival(early);
    let found = PatienceFit {
        family: best.family.to_owned(),
        weight: best.weight,
        ahead_by: exponential.aic - best.aic,
        exponential_mean_s: mean,
        exponential_gap: exponential.largest_gap.size,
        gap_at_s: exponential.largest_gap.at,
        left_early: [left(&*best.law), left(&*exponential.law)],
    };
    (mean.is_finite() && found.left_early.iter().all(|v| v.is_finite())).then_some(found)
}

/// Censored ages joined into steps of 2%, at their means.
fn joined(masses: &[Mass]) -> Vec<Mass> {
    let mut out: Vec<(f64, Mass)> = Vec::new();
    for m in masses {
        match out.last_mut() {
            Some((first, kept)) if m.age <= *first * 1.02 => {
                let weight = kept.weight + m.weight;
                kept.age = (kept.age * kept.weight + m.age * m.weight) / weight;
                kept.weight = weight;
            }
            _ => out.push((m.age, *m)),
        }
    }
    out.into_iter().map(|(_, m)| m).collect()
}
