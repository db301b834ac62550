//! All families on one sample, each with its doubt as weighted draws, and the weight of each. RECIPE sections 1
//! to 4; METHODS.md sections 3 and 7.

use rand::{RngExt, SeedableRng};
use rand_distr::StandardNormal;
use rand_xoshiro::Xoshiro256PlusPlus;

use super::choice::criterion_weights;
use super::condense::{ENDINGS, ProductLimit, condense, middle};
use super::families;
use super::fit::{COARSE, Evidence, Fit, FitError};
use super::law::{Family, Law};
use crate::outlook::Grid;
use crate::tally::Sample;

/// Draws per family.
pub const DRAWS: usize = 40;

/// A member that weighs less gets no draws and no curves: it could move nothing.
pub const LEAST_WEIGHT: f64 = 0.001;

/// No direction is drawn wider than a standard deviation of 3. A direction in which the likelihood is flat, such
/// as a never share near 0, thus stays wide, which is the guard against "wait for ever".
const LEAST_CURVATURE: f64 = 1.0 / 9.0;

/// A search is given up where it would end so far below the least likelihood with which a family weighs anything, nats.
const FAR_BELOW: f64 = 30.0;

/// Range of the logarithm of an importance weight.
const LOG_WEIGHT: (f64, f64) = (-50.0, 2.0);

/// AIC differences count for a quarter instead of a half: Akaike weights compare fits below the edge of sight,
/// while the decision often lies past it.
const SOFTNESS: f64 = 4.0;

/// Share of the families together when all fit; the rest is the empirical curve's.
const FAMILIES_SHARE: f64 = 0.9;

/// `√n` times the largest gap up to which a family passes: for the decision, for the verdicts.
const PASS_DECISION: f64 = 0.7;
const PASS_VERDICT: f64 = 1.0;

/// Share still waiting at the end of sight from which verdicts ask for more certainty, and read trends by AIC.
pub(crate) const DEEP: f64 = 0.2;

/// Every family's fit to one sample, what it weighs, and draws from its doubt. Ages in seconds.
#[derive(Debug)]
pub struct Ensemble {
    /// The families that could be fitted, in the order of the lists; deciding ones first.
    pub members: Vec<Member>,
    /// Families that could not, and why.
    pub refused: Vec<(&'static str, FitError)>,
    /// Share of the decision left to replicates of the empirical curve: 0.1 where the families fit, 1 where none
    /// does.
    pub empirical: f64,
    /// The age below which the shifted families see no ending, s.
    pub shift: f64,
    pub(crate) curve: ProductLimit,
}

/// One family in an [`Ensemble`].
#[derive(Debug)]
pub struct Member {
    /// Its fit to the condensed sample; the weight in it is the plain Akaike weight among deciding families.
    pub fit: Fit,
    /// Weight in the decision, `W_k`; 0 for a family that serves the verdicts only.
    pub weight: f64,
    /// Whether it is among the deciding families.
    pub decides: bool,
    /// Whether it is among the families of the verdicts.
    pub judges: bool,
    /// Whether it has a never share.
    pub never: bool,
    /// Weight among the verdict families by BIC and by AIC, before `pass`.
    pub(crate) by_bic: f64,
    pub(crate) by_aic: f64,
    /// How well it passes for the verdicts, in [0, 1].
    pub(crate) pass: f64,
    /// Draws from its doubt, the estimate itself first; empty where it weighs nothing anywhere.
    pub draws: Vec<Draw>,
}

/// One law that the data allow.
pub struct Draw {
    /// The law, ages in s.
    pub law: Box<dyn Law>,
    /// Importance weight; those of a member sum to 1.
    pub weight: f64,
    /// Its survival function at the ages of the grid.
    pub survival: Vec<f64>,
}

impl std::fmt::Debug for Draw {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Draw")
            .field("parameters", &self.law.parameters())
            .field("weight", &self.weight)
            .finish_non_exhaustive()
    }
}

/// Fits the families of the decision and of the verdicts to the sample in about 75 cells, weighs them, and draws
/// from the doubt of those that weigh something. `grid`: where the draws' curves are wanted. Same seed, same
/// numbers.
///
/// # Errors
/// [`FitError::NoEvents`] where nothing ended. A family that cannot be fitted is left out and named in
/// [`Ensemble::refused`].
pub fn ensemble(sample: &Sample, grid: &Grid, seed: u64) -> Result<Ensemble, FitError> {
    let curve = ProductLimit::of(sample);
    let cells = condense(sample);
    let mut evidence = Evidence::with_curve(&cells, curve.thinned(ENDINGS), COARSE)?;
    let shift = least_service(sample);
    let root_n = sample.total().sqrt();
    let (mut members, mut families, mut refused) = (vec![], vec![], vec![]);
    let mut plain: Vec<(&'static str, Vec<f64>)> = vec![];
    let deep = curve.end() >= DEEP;
    let mut standing = Standing::new(sample.event_count(), deep);
    for (family, role) in lists(shift) {
        // From the plain ones others start, and they cost little; mixtures come over saddles where nothing promises much.
        evidence.least = match (family.dimension(), role.decides) {
            (..=2, true) | (5.., _) => f64::NEG_INFINITY,
            _ => standing.least(family.as_ref(), role) - FAR_BELOW,
        };
        let without = plain.iter().find(|(name, _)| *name == family.name());
        let fitted = match without.filter(|_| family.parameters().contains(&"never")) {
            Some((_, at)) => evidence.fit_never(family.as_ref(), at),
            None => evidence.fit(family.as_ref()),
        };
        match fitted {
            Ok(fit) => {
                if without.is_none() {
                    plain.push((fit.family, fit.free.clone()));
                }
                standing.note(&fit, role);
                members.push(Member::new(fit, role, root_n));
                families.push(family);
            }
            Err(error) => refused.push((family.name(), error)),
        }
    }
    weigh(&mut members, root_n);
    let log_ages: Vec<f64> = grid.ages().iter().map(|t| t.ln()).collect();
    for (i, (member, family)) in members.iter_mut().zip(&families).enumerate() {
        if member.matters(deep) {
            // A stream of its own for each family: what others weigh changes nothing here.
            let random =
                Xoshiro256PlusPlus::seed_from_u64(seed ^ (i as u64).wrapping_mul(0x9E37_79B9_7F4A_7C15));
            member.draws = draws(&mut evidence, family.as_ref(), &member.fit, random);
            for draw in &mut member.draws {
                draw.survival = vec![0.0; log_ages.len()];
                draw.law.survival_on(grid.ages(), &log_ages, &mut draw.survival);
            }
            member.drop_bent();
        }
    }
    let empirical = 1.0 - members.iter().map(|m| m.weight).sum::<f64>();
    Ok(Ensemble { members, refused, empirical, shift, curve })
}

/// What a family is for.
#[derive(Clone, Copy)]
struct Role {
    decides: bool,
    judges: bool,
}

/// The best criteria so far, from which follows what a further family must reach to weigh anything.
struct Standing {
    ln_n: f64,
    /// Whether verdicts read AIC too.
    deep: bool,
    deciding_aic: f64,
    judging_aic: f64,
    judging_bic: f64,
}

impl Standing {
    fn new(events: f64, deep: bool) -> Standing {
        let none = f64::INFINITY;
        let ln_n = events.max(1.0).ln();
        Standing { ln_n, deep, deciding_aic: none, judging_aic: none, judging_bic: none }
    }

    fn note(&mut self, fit: &Fit, role: Role) {
        if role.decides {
            self.deciding_aic = self.deciding_aic.min(fit.aic);
        }
        if role.judges {
            self.judging_aic = self.judging_aic.min(fit.aic);
            self.judging_bic = self.judging_bic.min(fit.bic);
        }
    }

    /// The log-likelihood with which some weight of the family is [`LEAST_WEIGHT`] of the best one's.
    fn least(&self, family: &dyn Family, role: Role) -> f64 {
        let k = family.parameters().len() as f64;
        let fall = -LEAST_WEIGHT.ln();
        let mut least = f64::INFINITY;
        if role.decides {
            least = least.min(k - 0.5 * (self.deciding_aic + SOFTNESS * fall));
        }
        if role.judges {
            least = least.min(0.5 * (k * self.ln_n - self.judging_bic) - fall);
        }
        if role.judges && self.deep {
            least = least.min(k - 0.5 * self.judging_aic - fall);
        }
        least
    }
}

/// Both lists of families, each family once. Without a shift the shifted ones are the plain ones over again.
fn lists(shift: f64) -> Vec<(Box<dyn Family>, Role)> {
    let same = |a: &dyn Family, b: &dyn Family| a.name() == b.name() && a.parameters() == b.parameters();
    let verdicts = families::verdicts(shift);
    let mut all: Vec<(Box<dyn Family>, Role)> = vec![];
    for family in families::decides(shift) {
        let judges = verdicts.iter().any(|v| same(v.as_ref(), family.as_ref()));
        all.push((family, Role { decides: true, judges }));
    }
    for family in verdicts {
        if !all.iter().any(|(known, _)| same(known.as_ref(), family.as_ref())) {
            all.push((family, Role { decides: false, judges: true }));
        }
    }
    all.retain(|(family, _)| shift > 0.0 || !family.parameters().contains(&"shift"));
    all
}

/// The least service time, `max(0, x_min - (x̄ - x_min)/n)` over the endings (RECIPE's second section), s.
fn least_service(sample: &Sample) -> f64 {
    let n = sample.event_count();
    let first = sample.events.iter().map(|e| e.over).fold(f64::INFINITY, f64::min);
    let mean = sample.events.iter().map(|e| e.weight * middle(e)).sum::<f64>() / n;
    (first - (mean - first) / n).max(0.0)
}

impl Member {
    fn new(fit: Fit, role: Role, root_n: f64) -> Member {
        let misfit = root_n * fit.largest_gap.size;
        Member {
            weight: 0.0,
            decides: role.decides,
            judges: role.judges,
            never: fit.parameter("never").is_some(),
            by_bic: 0.0,
            by_aic: 0.0,
            pass: pass(misfit, PASS_VERDICT),
            draws: vec![],
            fit,
        }
    }

    /// Whether its draws can move the decision, the tail of an empirical replicate, or a verdict; `deep` says that
    /// the last is read by AIC.
    fn matters(&self, deep: bool) -> bool {
        let judged = self.pass * if deep { self.by_bic.max(self.by_aic) } else { self.by_bic };
        [self.weight, self.fit.weight, judged].into_iter().any(|w| w > LEAST_WEIGHT)
    }

    /// Leaves no weight to a draw whose curve is not finite; the rest share it.
    fn drop_bent(&mut self) {
        for draw in &mut self.draws {
            if !draw.survival.iter().all(|s| s.is_finite()) {
                draw.weight = 0.0;
            }
        }
        let sum: f64 = self.draws.iter().map(|d| d.weight).sum();
        if sum > 0.0 {
            self.draws.iter_mut().for_each(|d| d.weight /= sum);
        } else {
            self.draws.clear();
        }
    }
}

/// 1 where a misfit `√n D` is within what chance gives a true family, 0 well above.
fn pass(misfit: f64, allowed: f64) -> f64 {
    (-2.0 * (misfit - allowed).max(0.0).powi(2)).exp()
}

/// Fills in the weights of RECIPE's sections 4 and 6.
fn weigh(members: &mut [Member], root_n: f64) {
    let criteria = |of: &dyn Fn(&Member) -> Option<f64>| -> Vec<f64> {
        members.iter().map(|m| of(m).unwrap_or(f64::INFINITY)).collect()
    };
    let deciding = criteria(&|m| m.decides.then_some(m.fit.aic));
    let soft = criterion_weights(&deciding, SOFTNESS);
    let plain = criterion_weights(&deciding, 2.0);
    let by_bic = criterion_weights(&criteria(&|m| m.judges.then_some(m.fit.bic)), 2.0);
    let by_aic = criterion_weights(&criteria(&|m| m.judges.then_some(m.fit.aic)), 2.0);
    for (i, m) in members.iter_mut().enumerate() {
        m.weight = FAMILIES_SHARE * soft[i] * pass(root_n * m.fit.largest_gap.size, PASS_DECISION);
        m.fit.weight = plain[i];
        m.by_bic = by_bic[i];
        m.by_aic = by_aic[i];
    }
}

/// Draws from the normal law around the estimate that the curvature gives, with importance weights that mend it
/// towards the likelihood; the estimate first.
fn draws(
    evidence: &mut Evidence,
    family: &dyn Family,
    fit: &Fit,
    mut random: Xoshiro256PlusPlus,
) -> Vec<Draw> {
    let peak = &fit.peak;
    let spread = peak.information.eigen();
    let mut draws: Vec<Draw> = Vec::with_capacity(DRAWS);
    for b in 0..DRAWS {
        let z: Vec<f64> =
            peak.at.iter().map(|_| if b == 0 { 0.0 } else { random.sample(StandardNormal) }).collect();
        let step = spread.apply(|v| 1.0 / curvature(v).sqrt(), &z);
        let at: Vec<f64> = peak.at.iter().zip(&step).map(|(x, s)| x + s).collect();
        let Some(law) = family.law(&peak.frame.free(&at)) else { continue };
        let log_likelihood = evidence.log_likelihood(law.as_ref());
        let fall = log_likelihood - peak.value + 0.5 * z.iter().map(|z| z * z).sum::<f64>();
        let weight = if fall.is_nan() { 0.0 } else { fall.clamp(LOG_WEIGHT.0, LOG_WEIGHT.1).exp() };
        draws.push(Draw { law, weight, survival: vec![] });
    }
    draws
}

/// An eigenvalue of the curvature as it is drawn from.
fn curvature(eigenvalue: f64) -> f64 {
    if eigenvalue > LEAST_CURVATURE { eigenvalue } else { LEAST_CURVATURE }
}
