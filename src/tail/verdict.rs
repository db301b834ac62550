//! Heavy or light? Does the remaining wait grow or shrink? Both answered from the same fits, or left undecided.
//! METHODS.md section 4, RECIPE's sixth section; the constants were measured there in simulation.

use statrs::function::erf::erfc;

use super::condense::middle;
use super::ensemble::{DEEP, Ensemble, Member};
use super::law::TailWeight;
use super::splice::{Estimate, splice};
use crate::curve::{TailIndex, TopAges, TopError};
use crate::outlook::{Grid, Sampled};
use crate::tally::{Mass, Sample};

/// Whether some exponential moment exists.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum TailClass {
    /// None does, or some waits never end.
    Heavy,
    /// One does.
    Light,
    /// The data do not say.
    Undecided,
}

/// How the mean remaining wait changes as one waits.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum RemainingWait {
    /// It grows: the longer one has waited, the longer it still takes.
    Growing,
    /// It shrinks.
    Shrinking,
    /// It stays.
    Flat,
    /// It does both, at different ages.
    Mixed,
    /// The data do not say.
    Undecided,
}

/// Both answers with their evidence.
#[derive(Clone, Debug, PartialEq)]
pub struct Verdict {
    /// Heavy or light.
    pub class: TailClass,
    /// Growing or shrinking.
    pub remaining_wait: RemainingWait,
    /// Share still waiting at the end of sight, `s`; taken as 0 where open waits hang.
    pub depth: f64,
    /// Whether at least three open waits are older than four times the longest completion: they hang for good.
    pub hanging: bool,
    /// Weight of the heavy laws, in [0, 1].
    pub heavy: f64,
    /// Weight of the light laws.
    pub light: f64,
    /// Weight that can be read neither way: of families that do not fit, and of never shares.
    pub unread: f64,
    /// What `heavy` or `light` had to exceed.
    pub bound: f64,
    /// Weight of laws whose remaining wait grows, shrinks, stays, does both; they sum to at most 1.
    pub trends: Trends,
    /// Whether the trend was read off replicates of the empirical curve, because no family fits.
    pub from_replicates: bool,
    /// Tail index of a generalised Pareto tail, by maximum likelihood, and its threshold, s; where there is one.
    pub xi: Option<(Estimate, f64)>,
    /// Tail index by the moment estimator on the top tenth of the completions, where it was consulted; its standard error is
    /// `√((1 + ξ²)/k)`.
    pub moment: Option<TailIndex>,
}

/// Weight of each trend.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Trends {
    /// Of laws whose remaining wait grows.
    pub growing: f64,
    /// Shrinks.
    pub shrinking: f64,
    /// Stays.
    pub flat: f64,
    /// Does both.
    pub mixed: f64,
}

/// Open waits that must be older than this many times the longest completion, and how many of them.
const HANGING: (f64, f64) = (4.0, 3.0);
/// Fewest completions at the top from which a moment estimate is made.
const FEWEST_AT_TOP: f64 = 10.0;
/// Depth at which certainty is first asked to rise; [`DEEP`] is the second.
const SHALLOW: f64 = 0.05;
/// Fewer completions than this ask for `FEW_BOUND` in any case.
const FEW: f64 = 500.0;
const FEW_BOUND: f64 = 0.9;
/// A trend counts from this relative change on; on replicates, which are rough, from the second.
const CHANGE: f64 = 0.08;
const ROUGH_CHANGE: f64 = 0.15;
/// Where a law's trend is judged: up to its 99% point; that of a replicate to its 95% point with 30 at risk.
const LAW_END: f64 = 0.01;
const ROUGH_END: f64 = 0.05;
const ROUGH_AT_RISK: f64 = 30.0;
const ROUGH_BOUND: f64 = 0.9;

/// Reads both verdicts.
///
/// `sample`: what the ensemble was fitted to. `waiting`: those of its censored waits that are still open.
/// `grid`: the ages of the draws' curves. `replicates`: bootstrapped empirical curves on the same grid (or on a
/// leading part of it), used where no family fits; may be empty.
pub fn verdict(
    sample: &Sample,
    waiting: &[Mass],
    ensemble: &Ensemble,
    grid: &Grid,
    replicates: &[Sampled],
) -> Verdict {
    let longest = sample.events.iter().map(|e| if e.upto.is_finite() { e.upto } else { e.over });
    let longest = longest.fold(0.0, f64::max);
    let open: f64 = waiting.iter().filter(|m| m.age > HANGING.0 * longest).map(|m| m.weight).sum();
    let hanging = open >= HANGING.1;
    let depth = if hanging { 0.0 } else { ensemble.curve.end() };

    let mut weights = Weights::of(ensemble);
    let bound = match depth {
        s if s < SHALLOW => 0.7,
        s if s < DEEP => 0.85,
        _ => 0.95,
    };
    let bound = if sample.event_count() < FEW { f64::max(bound, FEW_BOUND) } else { bound };
    let mut moment = None;
    let class = if hanging || weights.heavy > bound {
        TailClass::Heavy
    } else if weights.light > bound {
        TailClass::Light
    } else if weights.unread > 0.5 && depth < SHALLOW {
        let completions = Sample { events: sample.events.clone(), ..Sample::default() };
        match TopAges::tenth(&completions, FEWEST_AT_TOP) {
            // They end at one age.
            Err(TopError::AllEqual { .. }) => TailClass::Light,
            Err(TopError::TooFew { .. }) => TailClass::Undecided,
            Ok(top) => {
                let error = |xi: f64| ((1.0 + xi * xi) / top.k()).sqrt();
                moment = top.moment().map(|m| TailIndex { standard_error: error(m.xi), ..m });
                read_moment(moment)
            }
        }
    } else {
        TailClass::Undecided
    };
    if hanging {
        // What never ends is read as heavy, and so is the weight of the families that say so.
        weights.heavy += weights.never;
        weights.unread -= weights.never;
    }

    let from = first_age(sample);
    let deep = depth >= DEEP;
    let mut trends = Trends::default();
    for m in ensemble.members.iter().filter(|m| m.judges) {
        let weight = m.pass * if deep { m.by_aic } else { m.by_bic };
        for draw in &m.draws {
            trends.add(trend(grid, &draw.survival, (from, longest), LAW_END, CHANGE), weight * draw.weight);
        }
    }
    let bound_of_trend = match depth {
        s if s < SHALLOW => 0.7,
        s if s < DEEP => 0.9,
        _ => 0.99,
    };
    let mut remaining_wait = trends.largest(bound_of_trend);
    let from_replicates = remaining_wait == RemainingWait::Undecided
        && weights.unread > 0.5
        && depth < DEEP
        && !replicates.is_empty();
    if from_replicates {
        trends = Trends::default();
        let upto = ensemble.curve.last_with(ROUGH_AT_RISK).unwrap_or(0.0);
        let share = 1.0 / replicates.len() as f64;
        for replicate in replicates {
            trends.add(trend(grid, &replicate.survival, (from, upto), ROUGH_END, ROUGH_CHANGE), share);
        }
        remaining_wait = match trends.largest(ROUGH_BOUND) {
            RemainingWait::Flat => RemainingWait::Undecided,
            answer => answer,
        };
    }
    Verdict {
        class,
        remaining_wait,
        depth,
        hanging,
        heavy: weights.heavy,
        light: weights.light,
        unread: weights.unread,
        bound,
        trends,
        from_replicates,
        xi: splice(sample).ok().map(|s| (s.xi, s.threshold)),
        moment,
    }
}

/// Weight on either side of "heavy or light".
struct Weights {
    heavy: f64,
    light: f64,
    unread: f64,
    /// The part of `unread` that belongs to never shares.
    never: f64,
}

impl Weights {
    fn of(ensemble: &Ensemble) -> Weights {
        let mut weights = Weights { heavy: 0.0, light: 0.0, unread: 1.0, never: 0.0 };
        for m in ensemble.members.iter().filter(|m| m.judges) {
            let weight = m.by_bic * m.pass;
            if m.never {
                weights.never += weight;
                continue;
            }
            let heavy = share_of_heavy(m);
            weights.heavy += weight * heavy;
            weights.light += weight * (1.0 - heavy);
            weights.unread -= weight;
        }
        weights.unread = weights.unread.clamp(0.0, 1.0);
        weights
    }
}

/// 0 or 1, but for a Weibull the probability that its shape is below 1.
fn share_of_heavy(member: &Member) -> f64 {
    let side = if member.fit.tail == TailWeight::Heavy { 1.0 } else { 0.0 };
    if member.fit.family != "weibull" {
        return side;
    }
    let shape = member.fit.parameter("shape");
    let z = shape.and_then(|p| Some(p.value.ln() * p.value / p.standard_error?));
    z.map_or(side, |z| 0.5 * erfc(z / std::f64::consts::SQRT_2))
}

/// What the moment estimate of the tail index says (Dekkers, Einmahl & de Haan 1989).
fn read_moment(top: Option<TailIndex>) -> TailClass {
    match top {
        Some(t) if t.xi + 2.0 * t.standard_error < 0.0 => TailClass::Light,
        Some(t) if t.xi - 2.0 * t.standard_error > 0.1 => TailClass::Heavy,
        _ => TailClass::Undecided,
    }
}

/// The age that one completion in a thousand does not exceed, s.
fn first_age(sample: &Sample) -> f64 {
    let goal = 1e-3 * sample.event_count();
    let mut below = 0.0;
    let at = sample.events.iter().find(|e| {
        below += e.weight;
        below >= goal
    });
    at.map_or(0.0, middle)
}

/// How the mean remaining wait changes along one curve between two ages, or to where `end` of the waits are left;
/// `None` where the grid has fewer than three ages in that range. The integral runs to the end of the curve.
fn trend(
    grid: &Grid,
    survival: &[f64],
    (from, upto): (f64, f64),
    end: f64,
    change: f64,
) -> Option<RemainingWait> {
    let ages = &grid.ages()[..survival.len()];
    let first = ages.partition_point(|&t| t < from);
    let last = ages.partition_point(|&t| t <= upto).min(survival.partition_point(|&s| s > end));
    if last < first + 3 {
        return None;
    }
    let mut rest: f64 =
        (last..ages.len()).map(|i| 0.5 * (survival[i - 1] + survival[i]) * (ages[i] - ages[i - 1])).sum();
    // Backwards, so that the remaining area is a sum and not a difference.
    let (mut rise, mut fall) = (0.0_f64, 0.0_f64);
    let (mut least, mut most) = (f64::INFINITY, 0.0_f64);
    for i in (first..last).rev() {
        let e = rest / survival[i];
        // Seen from the end, a rise is what lies ahead above this value, a fall what lies ahead below it.
        rise = rise.max(most / e - 1.0);
        fall = fall.max(1.0 - least / e);
        least = least.min(e);
        most = most.max(e);
        if i > 0 {
            rest += 0.5 * (survival[i - 1] + survival[i]) * (ages[i] - ages[i - 1]);
        }
    }
    Some(match (rise > change, fall > change) {
        (true, true) => RemainingWait::Mixed,
        (true, false) => RemainingWait::Growing,
        (false, true) => RemainingWait::Shrinking,
        (false, false) => RemainingWait::Flat,
    })
}

impl Trends {
    fn add(&mut self, trend: Option<RemainingWait>, weight: f64) {
        match trend {
            Some(RemainingWait::Growing) => self.growing += weight,
            Some(RemainingWait::Shrinking) => self.shrinking += weight,
            Some(RemainingWait::Flat) => self.flat += weight,
            Some(RemainingWait::Mixed) => self.mixed += weight,
            Some(RemainingWait::Undecided) | None => {}
        }
    }

    fn largest(&self, bound: f64) -> RemainingWait {
        let masses = [
            (self.growing, RemainingWait::Growing),
            (self.shrinking, RemainingWait::Shrinking),
            (self.flat, RemainingWait::Flat),
            (self.mixed, RemainingWait::Mixed),
        ];
        let found = masses.into_iter().find(|(mass, _)| *mass > bound);
        found.map_or(RemainingWait::Undecided, |(_, trend)| trend)
    }
}
