//! What an advice rests on, kept: the curves behind it, what another give-up time would do, and what holding on is worth.

use serde::{Deserialize, Serialize};

use super::bounds::Bounds;
use super::judge::{self, Judgement, Settled, finite, interpolate};
use crate::advice::{Action, Advice, Outcome};
use crate::curve::Empirical;
use crate::outlook::Outlook;
use crate::policy::Entry;
use crate::stopping::{self, Hold, Holding, Limits, Objective};
use crate::tally::Cells;

/// Version of the JSON form of [`WhatIf`].
pub const WHAT_IF_SCHEMA: &str = "outwait/whatif/1";

/// A stream's advice with everything it was worked out from ([`super::study()`]). It holds every curve that the data leave
/// open, a few megabytes: ask it and let it go.
pub struct Study {
    pub(super) advice: Advice,
    pub(super) cells: Cells,
    pub(super) entry: Entry,
    pub(super) bounds: Option<Bounds>,
    pub(super) judgement: Option<Judgement>,
}

/// What a give-up time would do, by the curve that the advice believes. METHODS.md sections 5 to 7.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct WhatIf {
    /// [`WHAT_IF_SCHEMA`].
    pub schema: String,
    /// Which waiting process.
    pub stream: String,
    /// The time asked about: what it earns, the share done, attempts per request (the load), the time of a request.
    pub asked: Outcome,
    /// Expected share of the best rate that it loses.
    pub expected_regret: f64,
    /// Whether it lies past the last age about which the data speak.
    pub past_sight: bool,
    /// The advised time, judged the same way; `give_up_after_s` is absent for waiting it out.
    pub advised: Outcome,
    /// The time in force, where the policy names one; `give_up_after_s` is absent for never.
    pub now: Option<Outcome>,
    /// Never giving up (waiting up to the ceiling).
    pub never: Outcome,
}

/// Who is still waiting, at some ages.
#[derive(Clone, Debug, PartialEq)]
pub struct Survival {
    /// Waits it rests on.
    pub waits: f64,
    /// Last age about which the data speak, s.
    pub sight_s: f64,
    /// Mean wait up to there, s.
    pub restricted_mean_s: f64,
    /// Age, s, and share still waiting; up to the edge of sight.
    pub points: Vec<[f64; 2]>,
}

/// Why a give-up time cannot be judged.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum WhatIfError {
    /// It is no time.
    #[error("a give-up time must be above 0 s (or never), not {0}")]
    Time(f64),
    /// The stream has no judged curve.
    #[error("no give-up time can be judged yet: {0}")]
    NoCurve(String),
}

impl Study {
    /// The advice.
    pub fn advice(&self) -> &Advice {
        &self.advice
    }

    /// The advice, without the rest.
    pub fn into_advice(self) -> Advice {
        self.advice
    }

    /// What a give-up time of this many seconds would do; infinite for never.
    ///
    /// # Errors
    /// [`WhatIfError`].
    pub fn what_if(&self, give_up_after: f64) -> Result<WhatIf, WhatIfError> {
        if give_up_after.is_nan() || give_up_after <= 0.0 {
            return Err(WhatIfError::Time(give_up_after));
        }
        let none = || WhatIfError::NoCurve(self.advice.advice.because.clone());
        let (settled, bounds) = self.settled().ok_or_else(none)?;
        let objective = settled.objective(bounds).ok_or_else(none)?;
        let outcome = |at| judge::outcome(&objective, bounds.ceiling, at);
        let advised = settled.advised();
        Ok(WhatIf {
            schema: WHAT_IF_SCHEMA.to_owned(),
            stream: self.advice.stream.clone(),
            asked: outcome(finite(give_up_after)),
            expected_regret: interpolate(settled.doubt.ages(), &settled.doubt.expected(), give_up_after),
            past_sight: self.judgement.as_ref().is_some_and(|j| give_up_after > j.sight),
            advised: Outcome {
                give_up_after_s: advised.give_up_after_s.filter(|_| !settled.wait_it_out),
                ..advised
            },
            now: settled.in_force(),
            never: outcome(None),
        })
    }

    /// For waits that are open now at these ages (s): what holding on is worth, and when to look again. `None` where no
    /// give-up time can be judged.
    pub fn holding(&self, ages: &[f64]) -> Option<Vec<Hold>> {
        let (settled, bounds) = self.settled()?;
        let objective = settled.objective(bounds)?;
        let optimum = stopping::best(&objective).ok()?;
        let holding = Holding::new(&objective, &optimum);
        Some(ages.iter().map(|&age| holding.at(age)).collect())
    }

    /// Who is still waiting at these ages (s, rising), by the product-limit estimate alone (METHODS.md section 2). `None`
    /// while no wait has ended.
    pub fn survival(&self, ages: &[f64]) -> Option<Survival> {
        let curve = Empirical::new(&self.cells).ok()?;
        let sight = curve.sight();
        Some(Survival {
            waits: self.cells.total(),
            sight_s: sight,
            restricted_mean_s: curve.restricted_mean(sight),
            points: ages
                .iter()
                .take_while(|age| **age <= sight)
                .map(|&age| [age, curve.survival(age)])
                .collect(),
        })
    }

    /// What was settled, where the evidence suffices to act on it.
    pub(super) fn settled(&self) -> Option<(&Settled, &Bounds)> {
        if !matches!(self.advice.advice.action, Action::GiveUpAfter | Action::WaitItOut) {
            return None;
        }
        Some((self.judgement.as_ref()?.outcome.as_ref().ok()?, self.bounds.as_ref()?))
    }
}

impl Settled {
    /// The aim on the believed curve.
    pub(super) fn objective(&self, bounds: &Bounds) -> Option<Objective<'_>> {
        let limits = Limits::new(bounds.floor, bounds.ceiling).ok()?;
        Objective::new(&self.average, &self.worth, &self.retry, limits).ok()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::advise::{Case, Curves, study};
    use crate::policy::GiveUp;
    use crate::tally::Tally;
    use crate::wait::{Ending, Wait};

    /// Half of the waits at the quantiles of a fast exponential law, half of a slow one, cut at `cut` s.
    fn waits(n: u32, cut: f64) -> Tally {
        let mut tally = Tally::default();
        for i in 0..n {
            let mean = if i % 2 == 0 { 0.1 } else { 5.0 };
            let age = -mean * (1.0 - (f64::from(i) + 0.5) / f64::from(n)).ln();
            let ending = if age < cut { Ending::Done } else { Ending::GaveUp };
            tally.add(&Wait::new(age.min(cut), ending).unwrap());
        }
        tally
    }

    fn entry() -> Entry {
        let mut entry = Entry::without_policy();
        entry.worth.as_mut().unwrap().pause.gave_up = 0.05;
        entry.now = Some(GiveUp::After(2.0));
        entry
    }

    fn curves_hold(curves: &Curves) {
        assert!(curves.points.windows(2).all(|p| p[0].age_s < p[1].age_s));
        assert!(curves.points.windows(2).all(|p| p[0].survival >= p[1].survival - 1e-12));
        for p in &curves.points {
            assert!((0.0..=1.0).contains(&p.survival), "{p:?}");
            let [low, high] = p.survival_band.unwrap();
            assert!(low <= p.survival + 1e-12 && p.survival <= high + 1e-12, "{p:?}");
        }
        let json = serde_json::to_string(curves).unwrap();
        assert_eq!(serde_json::from_str::<Curves>(&json).unwrap(), *curves);
    }

    #[test]
    fn the_curves_agree_with_the_advice() {
        let tally = waits(2000, f64::INFINITY);
        let study = study(&Case::new("desk", &tally), &entry(), 1);
        let curves = study.curves();
        curves_hold(&curves);
        let advised = study.advice().advice.give_up_after_s.unwrap();
        let point = curves.points.iter().find(|p| p.age_s == advised).unwrap();
        assert_eq!(point.rate_per_s, study.advice().advice.rate_per_s);
        let [low, high] = point.rate_band_per_s.unwrap();
        assert!(low <= point.rate_per_s.unwrap() && point.rate_per_s.unwrap() <= high);
        let now = curves.points.iter().find(|p| p.age_s == 2.0).unwrap();
        assert_eq!(now.rate_per_s, curves.now.unwrap().rate_per_s);
        let truth = |t: f64| 0.5 * (-10.0 * t).exp() + 0.5 * (-0.2 * t).exp();
        for p in curves.points.iter().filter(|p| p.age_s < 10.0) {
            assert!((p.survival - truth(p.age_s)).abs() < 0.02, "{p:?}");
            // Mean residual life of the mixture: the area ahead over what is left.
            let ahead = 0.05 * (-10.0 * p.age_s).exp() + 2.5 * (-0.2 * p.age_s).exp();
            let wait = p.remaining_s.unwrap();
            assert!((wait / (ahead / truth(p.age_s)) - 1.0).abs() < 0.15, "{p:?}");
        }
        // The longest holding on is worth, it is worth at the start; at the best time it is worth nothing.
        assert!(point.holding_on.unwrap() < 0.1 * curves.points[0].holding_on.unwrap());
    }

    #[test]
    fn another_time_is_set_against_the_advised_one() {
        let tally = waits(2000, f64::INFINITY);
        let study = study(&Case::new("desk", &tally), &entry(), 1);
        let decision = &study.advice().advice;
        let advised = decision.give_up_after_s.unwrap();
        let same = study.what_if(advised).unwrap();
        assert_eq!(same.asked, same.advised);
        assert_eq!(Some(same.asked.rate_per_s), decision.rate_per_s);
        let now = study.what_if(2.0).unwrap();
        assert_eq!((Some(now.asked), now.now), (now.now, decision.now));
        assert!((now.expected_regret - decision.regret_now.unwrap()).abs() < 1e-3, "{now:?}");
        let never = study.what_if(f64::INFINITY).unwrap();
        assert_eq!((never.asked, Some(never.asked)), (never.never, decision.never));
        assert!(never.past_sight && !same.past_sight && never.expected_regret > same.expected_regret);
        assert!(matches!(study.what_if(0.0), Err(WhatIfError::Time(_))));
        assert!(matches!(study.what_if(f64::NAN), Err(WhatIfError::Time(_))));
        let holds = study.holding(&[0.0, 0.9 * advised, 3.0]).unwrap();
        assert!(holds[0].hold && !holds[2].hold && holds[2].value == 0.0);
    }

    #[test]
    fn without_a_price_or_with_few_waits_what_is_known_is_shown() {
        let tally = waits(2000, 1.0);
        let priceless = Entry { worth: None, ..entry() };
        let curves = study(&Case::new("desk", &tally), &priceless, 1).curves();
        curves_hold(&curves);
        assert!(curves.points.iter().all(|p| p.rate_per_s.is_none() && p.holding_on.is_none()));
        assert!(curves.points.iter().any(|p| p.age_s > 1.0 && p.remaining_s.is_some()));
        assert_eq!(curves.sight_s, Some(1.0));
        // Enough to fit a law, not enough to act on it.
        let some = waits(60, f64::INFINITY);
        let study = study(&Case::new("desk", &some), &entry(), 1);
        let curves = study.curves();
        assert_eq!((curves.action, curves.advised), (Action::GatherEvidence, None));
        assert!(curves.points.iter().all(|p| p.rate_per_s.is_none()));
        assert!(study.what_if(1.0).is_err() && study.holding(&[1.0]).is_none());
        let few = waits(4, 1.0);
        let study = super::super::study(&Case::new("desk", &few), &entry(), 1);
        curves_hold(&study.curves());
        assert!(study.curves().steps && study.curves().points.len() > 4);
        assert!(matches!(study.what_if(1.0), Err(WhatIfError::NoCurve(_))));
        let none = Tally::default();
        let nothing = super::super::study(&Case::new("desk", &none), &entry(), 1).curves();
        assert_eq!((nothing.points.len(), nothing.sight_s), (0, None));
    }
}
