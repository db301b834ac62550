//! How often a retry meets the fate of the attempt it replaces. METHODS.md section 6.

use super::objective::{Limits, Objective};
use super::retry::Retry;
use super::worth::{Worth, WorthError};
use crate::numeric::root;
use crate::outlook::Outlook;

/// What is known of one kind of attempt at the give-up time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reached {
    /// Share still open at the give-up time, `S(τ)`, in [0, 1].
    pub survival: f64,
    /// How many attempts that share rests on: those whose state at `τ` is known or, from a curve with Greenwood's
    /// variance `v`, `S(1-S)/v`.
    pub attempts: f64,
}

/// φ with its interval.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stickiness {
    /// `φ̂`, in [0, 1).
    pub value: f64,
    /// Its two-sided interval, in [0, 1).
    pub interval: [f64; 2],
}

/// Largest φ that is reported: below 1, where giving up never pays.
const LARGEST: f64 = 0.999;

/// Estimates φ from first attempts and from retries after a give-up: `φ̂ = (S_2 - S_1)/(1 - S_1)`, so `1 - φ` is
/// the ratio of the shares that were done in time, `p_2/p_1`. Its interval is that of a ratio of two proportions on
/// the log scale by the delta method (Katz, Baptista, Azen & Pike 1978, Biometrics 34:469), a half added to
/// each count so that none is 0. `z`: standard normal deviate, 1.645 for 90%. `None` without attempts of both kinds.
pub fn stickiness(first: Reached, retries: Reached, z: f64) -> Option<Stickiness> {
    let done = |r: Reached| (r.attempts * (1.0 - r.survival.clamp(0.0, 1.0)) + 0.5) / (r.attempts + 1.0);
    if !(first.attempts > 0.0 && retries.attempts > 0.0) {
        return None;
    }
    let (p1, p2) = (done(first), done(retries));
    let spread =
        ((1.0 - p1) / p1 / (first.attempts + 1.0) + (1.0 - p2) / p2 / (retries.attempts + 1.0)).sqrt();
    let within = |log_ratio: f64| (1.0 - log_ratio.exp()).clamp(0.0, LARGEST);
    let log_ratio = p2.ln() - p1.ln();
    Some(Stickiness {
        value: within(log_ratio),
        interval: [within(log_ratio + z * spread), within(log_ratio - z * spread)],
    })
}

/// The φ from which giving up at `at` no longer beats waiting up to the ceiling, all else as in `worth`; `None`
/// where it never beats it, or does so at any φ below 0.999. For aim `deadline` it is `None`.
///
/// # Errors
/// Those of [`Objective::new`].
pub fn flips_at(
    outlook: &dyn Outlook,
    worth: &Worth,
    retry: &Retry,
    limits: Limits,
    at: f64,
) -> Result<Option<f64>, WorthError> {
    let objective = Objective::new(outlook, &Worth { sticky: 0.0, ..*worth }, retry, limits)?;
    if objective.deadline().is_some() {
        return Ok(None);
    }
    let lead =
        |phi: f64| objective.score_if_sticky(at, phi) - objective.score_if_sticky(limits.ceiling(), phi);
    if lead(0.0) <= 0.0 || lead(LARGEST) >= 0.0 {
        return Ok(None);
    }
    Ok(root(&lead, 0.0, LARGEST, 1e-10).ok())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::stopping::{Competing, Failure, Pause};
    use crate::tail::Family;
    use crate::tail::families::Lognormal;

    #[test]
    fn from_two_shares() {
        let first = Reached { survival: 0.2, attempts: 1e9 };
        let retries = Reached { survival: 0.44, attempts: 1e9 };
        let phi = stickiness(first, retries, 1.645).unwrap();
        assert!((phi.value - 0.3).abs() < 1e-6, "{phi:?}");
        assert!(phi.interval[0] < 0.3 && phi.interval[1] > 0.3);
        // Retries that do better than first attempts are not sticky; retries that never end are nearly so.
        assert_eq!(stickiness(retries, first, 1.645).unwrap().value, 0.0);
        let hopeless = Reached { survival: 1.0, attempts: 20.0 };
        let phi = stickiness(first, hopeless, 1.645).unwrap();
        assert!(phi.value > 0.9 && phi.interval[0] > 0.3 && phi.interval[1] <= LARGEST, "{phi:?}");
        assert_eq!(stickiness(first, Reached { survival: 0.0, attempts: 0.0 }, 1.645), None);
    }

    #[test]
    fn the_flip_is_where_both_earn_the_same() {
        let law = Lognormal.law(&[0.0, 1.5_f64.ln()]).unwrap();
        let outlook = Competing::new(law, Failure::Never);
        let worth = Worth { pause: Pause { gave_up: 0.1, ..Pause::default() }, ..Worth::default() };
        let limits = Limits::new(0.01, 200.0).unwrap();
        let phi = flips_at(&outlook, &worth, &Retry::default(), limits, 0.5).unwrap().unwrap();
        let at = |phi: f64, t: f64| {
            let worth = Worth { sticky: phi, ..worth };
            Objective::new(&outlook, &worth, &Retry::default(), limits).unwrap().score(t)
        };
        assert!((at(phi, 0.5) / at(phi, 200.0) - 1.0).abs() < 1e-8, "{phi}");
        assert!(at(phi - 0.01, 0.5) > at(phi - 0.01, 200.0) && at(phi + 0.01, 0.5) < at(phi + 0.01, 200.0));
    }
}
