//! What was advised on a stream on a day, in few words: the history of its give-up time and of its law. Plain data, made
//! from an advice; where it is kept is not its business.

use serde::{Deserialize, Serialize};

use crate::advice::{Action, Advice, Change, RemainingWait, TailClass};
use crate::policy::GiveUp;

/// Shares still waiting at which a day's curve is kept: enough to see the law move.
const SHARES: [f64; 18] =
    [0.99, 0.97, 0.95, 0.9, 0.85, 0.8, 0.7, 0.6, 0.5, 0.4, 0.3, 0.25, 0.2, 0.15, 0.1, 0.05, 0.02, 0.01];

/// One day of a stream. Times in s, `never` where nobody gives up, absent where they cannot be told.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Day {
    /// Waits in the window that reaches up to that day.
    pub waits: u64,
    /// Of these, completed.
    pub done: u64,
    /// What was advised.
    pub action: Action,
    /// The best time.
    pub advised_s: Option<GiveUp>,
    /// Every time between these was about as good.
    pub band_s: Option<[f64; 2]>,
    /// The time in force.
    pub in_force_s: Option<GiveUp>,
    /// The step that was proposed.
    pub proposed_s: Option<GiveUp>,
    /// Share of the best rate that the time in force was expected to lose.
    pub loses: Option<f64>,
    /// Heavy or light.
    pub tail: TailClass,
    /// Weight of the families without an exponential moment.
    pub heavy_weight: f64,
    /// Whether the remaining wait grew or shrank.
    pub remaining_wait: RemainingWait,
    /// How the law of the last week differed from that of the weeks before, where it did.
    pub shifted: Option<String>,
    /// Who was still waiting: `[age in s, share]`.
    pub road: Vec<[f64; 2]>,
    /// Whether it was worked out later, from waits that had been kept.
    #[serde(default)]
    pub afterwards: bool,
}

impl Day {
    /// From an advice; `road`: who is still waiting, by rising age.
    pub fn of(advice: &Advice, road: &[[f64; 2]]) -> Day {
        let decision = &advice.advice;
        let proposal = decision.proposal.filter(|proposal| proposal.change != Change::Keep);
        let time = |time: Option<f64>| time.map_or(GiveUp::Never, GiveUp::After);
        Day {
            waits: advice.evidence.waits,
            done: advice.evidence.done,
            action: decision.action,
            advised_s: match decision.action {
                Action::GiveUpAfter => decision.give_up_after_s.map(GiveUp::After),
                Action::WaitItOut => Some(GiveUp::Never),
                Action::GatherEvidence | Action::StateACost => None,
            },
            band_s: decision.band_s.filter(|band| band.iter().all(|end| end.is_finite())),
            in_force_s: decision.now.map(|now| time(now.give_up_after_s)),
            proposed_s: proposal.map(|proposal| time(proposal.to_s)),
            loses: decision.regret_now,
            tail: advice.tail.class,
            heavy_weight: advice.tail.heavy_weight,
            remaining_wait: advice.tail.remaining_wait,
            shifted: advice.cautions.iter().find(|c| c.code == "law_shifted").map(|c| c.text.clone()),
            road: thinned(road),
            afterwards: false,
        }
    }
}

/// The curve at [`SHARES`], and where it ends.
fn thinned(road: &[[f64; 2]]) -> Vec<[f64; 2]> {
    let mut kept = Vec::new();
    let mut rest = SHARES.iter().peekable();
    for pair in road.windows(2) {
        let ([from, more], [to, less]) = (pair[0], pair[1]);
        while let Some(&&share) = rest.peek().filter(|share| less <= ***share) {
            let part = if more > less { ((more - share) / (more - less)).clamp(0.0, 1.0) } else { 1.0 };
            // Four digits are more than a picture shows.
            kept.push([rounded(from + part * (to - from)), share]);
            rest.next();
        }
    }
    if let Some(&[age, share]) = road.last().filter(|last| kept.last().is_none_or(|kept| last[0] > kept[0])) {
        kept.push([rounded(age), rounded(share)]);
    }
    kept
}

fn rounded(value: f64) -> f64 {
    if value <= 0.0 || !value.is_finite() {
        return 0.0;
    }
    let unit = 10f64.powi(3 - value.log10().floor() as i32);
    (value * unit).round() / unit
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_curve_is_kept_where_it_falls() {
        // Evenly over 0 to 100 s.
        let road: Vec<[f64; 2]> = (0..=100).map(|i| [f64::from(i), 1.0 - f64::from(i) / 100.0]).collect();
        let kept = thinned(&road);
        assert_eq!(kept.len(), SHARES.len() + 1);
        for [age, share] in &kept {
            assert!((age - 100.0 * (1.0 - share)).abs() < 0.05, "{age} {share}");
        }
        // Cut off at 50 s: half of them are seen to go.
        assert_eq!(thinned(&road[..51]).last(), Some(&[50.0, 0.5]));
        assert!(thinned(&[]).is_empty());
    }
}
