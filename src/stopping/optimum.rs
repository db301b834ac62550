//! The best give-up time. METHODS.md section 5.

use super::objective::Objective;
use super::worth::{Aim, TimeCost, WorthError};
use crate::numeric::root;

/// What the best give-up time is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// Inside the range: marginal gain falls through price times marginal time.
    Inner,
    /// At an age where the curve or its hazard jumps.
    Kink,
    /// The least allowed.
    Floor,
    /// The largest allowed: wait it out.
    Ceiling,
    /// Every give-up time is as good; the ceiling is returned, since nothing is gained by giving up.
    Flat,
}

/// The best give-up time and what it earns.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Optimum {
    /// The give-up time, s; under a deadline that of the first attempt.
    pub at: f64,
    /// What it is.
    pub kind: Kind,
    /// The aim there, as maximised ([`Objective::score`]).
    pub score: f64,
    /// The aim there, as quoted ([`Objective::value`]).
    pub value: f64,
    /// The aim at the ceiling, as quoted: never giving up.
    pub never: f64,
}

/// A local maximum.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Peak {
    pub(crate) at: f64,
    pub(crate) value: f64,
    pub(crate) kind: Kind,
}

/// Scores closer than this, relatively, are the same: that of every integral behind them.
const SAME: f64 = 1e-10;
/// The ceiling wins against what is better by no more than rounding.
const ROUNDING: f64 = 1e-12;

/// The largest score between floor and ceiling: the best of all local maxima found by scanning
/// [`Objective::nodes`], each polished by its first-order condition (or, where there is none, by golden section),
/// of every knot, the floor and the ceiling.
///
/// On a step curve the candidates are its endings; "at" one means just after it. Good to a relative 1e-9 in the
/// score and, where a first-order condition exists, 1e-6 in the time. A bulk much narrower than the nodes' spacing
/// (a few percent) is seen by what it leaves behind, or as a knot.
///
/// # Errors
/// [`WorthError::NoTimeCost`] where the aim is a rate and none above 0 can be had: time then has no better use.
pub fn best(objective: &Objective<'_>) -> Result<Optimum, WorthError> {
    let limits = objective.limits();
    let optimum = |at: f64, kind: Kind, score: f64, ceiling: f64| Optimum {
        at,
        kind,
        score,
        value: objective.quoted(score),
        never: objective.quoted(ceiling),
    };
    if let Some(deadline) = objective.deadline() {
        let at = deadline.give_up_times().first().copied().unwrap_or(limits.ceiling());
        let kind = match at {
            _ if at >= limits.ceiling() => Kind::Ceiling,
            _ if at <= limits.floor() => Kind::Floor,
            _ => Kind::Inner,
        };
        return Ok(optimum(at, kind, deadline.probability(), deadline.first(limits.ceiling())));
    }
    let nodes = objective.nodes();
    let scores: Vec<f64> = nodes.iter().map(|&t| objective.score(t)).collect();
    let ceiling = scores[scores.len() - 1];
    let top = scores.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let bottom = scores.iter().copied().fold(f64::INFINITY, f64::min);
    if objective.worth().aim == Aim::Rate && top <= 0.0 {
        return Err(WorthError::NoTimeCost { missing: TimeCost::Opportunity });
    }
    if top - bottom <= SAME * top.abs() {
        return Ok(optimum(limits.ceiling(), Kind::Flat, ceiling, ceiling));
    }
    let marginal = |t: f64| objective.marginal(t, objective.price(objective.score(t)));
    let peaks = peaks(objective, nodes, &scores, &|t| objective.score(t), &marginal);
    let best = peaks
        .iter()
        .copied()
        .max_by(|a, b| a.value.total_cmp(&b.value))
        .filter(|peak| ceiling < peak.value - ROUNDING * peak.value.abs())
        .unwrap_or(Peak { at: limits.ceiling(), value: ceiling, kind: Kind::Ceiling });
    Ok(optimum(best.at, best.kind, best.value, ceiling))
}

/// Every local maximum of `f` that the nodes show, in order of age, floor and ceiling among them. `values` are
/// those of `f` at the nodes; `marginal` has the sign of its derivative.
pub(crate) fn peaks(
    objective: &Objective<'_>,
    nodes: &[f64],
    values: &[f64],
    f: &dyn Fn(f64) -> f64,
    marginal: &dyn Fn(f64) -> Option<f64>,
) -> Vec<Peak> {
    let last = nodes.len() - 1;
    let knots = objective.outlook().knots();
    let is_knot = |t: f64| knots.binary_search_by(|k| k.total_cmp(&t)).is_ok();
    let mut peaks = vec![];
    let mut crossed_before = false;
    for i in 0..=last {
        let rises = i == 0 || values[i] > values[i - 1];
        let falls = i == last || values[i] >= values[i + 1];
        let crossing = if i < last { crossing(nodes[i], nodes[i + 1], marginal) } else { None };
        match i {
            0 => peaks.push(Peak { at: nodes[0], value: values[0], kind: Kind::Floor }),
            _ if i == last => peaks.push(Peak { at: nodes[i], value: values[i], kind: Kind::Ceiling }),
            _ if rises && falls && is_knot(nodes[i]) => {
                peaks.push(Peak { at: nodes[i], value: values[i], kind: Kind::Kink });
            }
            _ if rises && falls && crossing.is_none() && !crossed_before => {
                let at = golden(f, nodes[i - 1], nodes[i + 1]);
                let value = f(at);
                let (at, value) = if value >= values[i] { (at, value) } else { (nodes[i], values[i]) };
                peaks.push(Peak { at, value, kind: Kind::Inner });
            }
            _ => {}
        }
        crossed_before = crossing.is_some();
        if let Some(at) = crossing {
            peaks.push(Peak { at, value: f(at), kind: Kind::Inner });
        }
    }
    peaks
}

/// Where `marginal` falls through 0 strictly between two ages.
fn crossing(from: f64, to: f64, marginal: &dyn Fn(f64) -> Option<f64>) -> Option<f64> {
    // A hair inside, since the hazard may jump at either end.
    let hair = 1e-9 * (to - from);
    let (from, to) = (from + hair, to - hair);
    let rising = marginal(from)? > 0.0 && marginal(to)? < 0.0;
    rising.then(|| root(&|t| marginal(t).unwrap_or(0.0), from, to, 1e-13).ok()).flatten()
}

/// Maximum in `[a, b]` by golden section (Kiefer 1953), to a relative 1e-9 in the argument.
fn golden(f: &dyn Fn(f64) -> f64, a: f64, b: f64) -> f64 {
    let ratio = 0.5 * (5f64.sqrt() - 1.0);
    let (mut a, mut b) = (a, b);
    let (mut c, mut d) = (b - ratio * (b - a), a + ratio * (b - a));
    let (mut fc, mut fd) = (f(c), f(d));
    for _ in 0..100 {
        if b - a <= 1e-9 * b.abs() {
            break;
        }
        if fc >= fd {
            (b, d, fd) = (d, c, fc);
            c = b - ratio * (b - a);
            fc = f(c);
        } else {
            (a, c, fc) = (c, d, fd);
            d = a + ratio * (b - a);
            fd = f(d);
        }
    }
    0.5 * (a + b)
}
