//! The judgement in the words and plain data of an advice.

use std::fmt::Write;

use serde_json::{Map, Value};

use super::judge::{Judgement, LoadCeiling, Settled};
use crate::advice::{self, Estimate, FitSummary, Tail};
use crate::policy::{Entry, NO_COST_OF_TIME};
use crate::say;
use crate::tail::{Ensemble, RemainingWait, Stop, TailClass, Verdict};

/// Whether the policy says what time costs; the reason if it does not.
pub(crate) fn cost_of_time(entry: &Entry) -> Result<(), String> {
    match &entry.worth {
        None => Err(format!(
            "{NO_COST_OF_TIME}; give the entry an aim: rate or finish (the time has another use), carrying_cost, or \
             deadline"
        )),
        Some(worth) => worth.check().map_err(|error| format!("{error}; {}", error.remedy())),
    }
}

pub(super) fn tail(verdict: &Verdict) -> Tail {
    let t = verdict.trends;
    Tail {
        class: match verdict.class {
            TailClass::Heavy => advice::TailClass::Heavy,
            TailClass::Light => advice::TailClass::Light,
            TailClass::Undecided => advice::TailClass::Undecided,
        },
        heavy_weight: verdict.heavy,
        light_weight: verdict.light,
        remaining_wait: match verdict.remaining_wait {
            RemainingWait::Growing => advice::RemainingWait::Growing,
            RemainingWait::Shrinking => advice::RemainingWait::Shrinking,
            RemainingWait::Flat => advice::RemainingWait::Flat,
            RemainingWait::Mixed => advice::RemainingWait::Mixed,
            RemainingWait::Undecided => advice::RemainingWait::Undecided,
        },
        remaining_weights: [t.growing, t.shrinking, t.flat, t.mixed],
        reason: reason(verdict),
        xi: verdict.xi.as_ref().and_then(|(xi, _)| {
            let interval = [xi.interval.0, xi.interval.1];
            (xi.value.is_finite() && interval.iter().all(|v| v.is_finite()))
                .then_some(Estimate { value: xi.value, interval })
        }),
    }
}

fn reason(verdict: &Verdict) -> String {
    if verdict.hanging {
        return "open waits are many times older than the longest completion: some never end".into();
    }
    let mut reason = format!(
        "weight on heavy laws {}, on light ones {}; a verdict needs more than {}",
        say::percent(verdict.heavy),
        say::percent(verdict.light),
        say::percent(verdict.bound)
    );
    if verdict.unread > 0.5 {
        reason.push_str("; no family fits well");
        if let Some(moment) = verdict.moment {
            reason.push_str(&format!(
                ", so the largest completions decide: moment estimate of the tail index {} ± {}",
                say::number(moment.xi),
                say::number(moment.standard_error)
            ));
        }
    }
    if let Some((xi, threshold)) = &verdict.xi {
        let _ = write!(
            reason,
            "; a generalised Pareto tail fits best from {} on, with a tail index of {}",
            say::duration(*threshold),
            say::number(xi.value)
        );
    }
    if verdict.depth >= 0.05 {
        reason.push_str(&format!(
            "; {} of the waits are still open where the data end, so the tail itself is unseen",
            say::percent(verdict.depth)
        ));
    }
    reason
}

/// Every deciding family that weighs something, the heaviest first.
pub(super) fn fits(ensemble: &Ensemble) -> Vec<FitSummary> {
    let mut fits: Vec<FitSummary> = ensemble
        .members
        .iter()
        .filter(|m| m.fit.log_likelihood.is_finite())
        .map(|m| {
            let object = |value: &dyn Fn(&crate::tail::Parameter) -> Option<f64>| -> Map<String, Value> {
                let of = |p| value(p).filter(|v| v.is_finite()).map_or(Value::Null, Value::from);
                m.fit.parameters.iter().map(|p| (p.name.to_owned(), of(p))).collect()
            };
            FitSummary {
                family: m.fit.family.to_owned(),
                parameters: object(&|p| Some(p.value)),
                standard_errors: object(&|p| p.standard_error),
                log_likelihood: m.fit.log_likelihood,
                aic: m.fit.aic,
                aicc: Some(m.fit.aicc).filter(|v| v.is_finite()),
                bic: m.fit.bic,
                weight: m.weight,
                largest_gap: m.fit.largest_gap.size,
                stopped: stopped(&m.fit),
            }
        })
        .collect();
    // By AIC where neither decides, so that the order says which fits better.
    fits.sort_by(|a, b| b.weight.total_cmp(&a.weight).then(a.aic.total_cmp(&b.aic)));
    fits
}

fn stopped(fit: &crate::tail::Fit) -> String {
    match fit.stop {
        Stop::Converged => "converged".into(),
        Stop::Boundary { .. } => {
            format!("at a limit of the family: {}", fit.boundary.unwrap_or("a parameter"))
        }
        Stop::Stalled => "stalled short of a maximum".into(),
        Stop::Hopeless => "given up far below the best".into(),
        Stop::NotFinite => "the likelihood is not finite".into(),
    }
}

/// One sentence on why this is the advice.
pub(super) fn because(settled: &Settled, judgement: &Judgement) -> String {
    let mut because = match (settled.wait_it_out, judgement.verdict.remaining_wait) {
        (true, RemainingWait::Shrinking) => {
            "the longer one has waited, the nearer the end: starting again only loses".into()
        }
        (true, RemainingWait::Flat) => {
            "a new attempt would wait as long as this one still does, and starting it costs".into()
        }
        (true, _) => "over all that the data leave open, no earlier time earns more than holding on".into(),
        (false, RemainingWait::Growing) => {
            format!("past {} the wait still to come is longer than a fresh attempt's", settled.time())
        }
        (false, _) => {
            format!("past {} the next completions come too slowly to be worth the time", settled.time())
        }
    };
    match settled.load {
        LoadCeiling::Kept => {}
        LoadCeiling::Moved(from) => {
            because.push_str(&format!("; without the load ceiling it would be {}", say::duration(from)))
        }
        LoadCeiling::Unreachable => {
            because.push_str("; no time keeps within the load ceiling, so this is the one that comes nearest")
        }
    }
    because
}
