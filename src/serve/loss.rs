//! What the time in force loses a day: by it the streams are ordered, so that what hurts comes first.

use crate::advice::Advice;
use crate::policy::GiveUp;
use crate::stopping::Aim;

const DAY: f64 = 86_400.0;
/// Data that span less are taken to span this, s: a burst of a minute is no measure of a day.
const LEAST_SPAN: f64 = 3_600.0;

/// A loss, at the pace of the data.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Loss {
    /// How much, at least 0.
    pub(super) per_day: f64,
    /// Of what.
    pub(super) unit: &'static str,
}

impl Loss {
    /// The difference of the two rates, times what it is a rate of: seconds waited a day (aims `rate` and `finish`),
    /// attempts a day (`carrying_cost`), or requests a day (`deadline`). Pauses are left out, so it is rather too little.
    /// `None` without a time in force, without an aim, or where the data carry no times.
    pub(super) fn of(
        advice: &Advice,
        aim: Option<Aim>,
        now: Option<GiveUp>,
        road: &[[f64; 2]],
    ) -> Option<Loss> {
        let difference = (advice.advice.rate_per_s? - advice.advice.rate_now_per_s?).max(0.0);
        let evidence = &advice.evidence;
        let moment = |text: &Option<String>| {
            let time: jiff::Timestamp = text.as_ref()?.parse().ok()?;
            Some(time.as_millisecond() as f64 / 1e3)
        };
        let days = (moment(&evidence.to)? - moment(&evidence.from)?).max(LEAST_SPAN) / DAY;
        let attempts = evidence.waits as f64 / days;
        let (times, unit) = match aim? {
            Aim::Rate => (attempts * mean(road, now?.seconds()), "worth"),
            Aim::Finish => (attempts * mean(road, now?.seconds()), "completions"),
            Aim::CarryingCost(_) => (attempts, "worth"),
            Aim::Deadline { .. } => {
                ((evidence.waits - evidence.retries.min(evidence.waits)) as f64 / days, "requests in time")
            }
        };
        let per_day = difference * times;
        per_day.is_finite().then_some(Loss { per_day, unit })
    }
}

/// Mean length of an attempt that is given up at an age, s: the area under who is still waiting.
fn mean(road: &[[f64; 2]], give_up: f64) -> f64 {
    let mut area = 0.0;
    let [mut age, mut share] = [0.0, 1.0];
    for &[next, waiting] in road {
        let end = next.min(give_up);
        if end > age {
            let part = (end - age) / (next - age);
            area += (end - age) * (share + 0.5 * part * (waiting - share));
        }
        [age, share] = [next, waiting];
    }
    area
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_area_under_the_curve() {
        // Evenly over 0 to 10 s: the mean up to t is t - t²/20.
        let road: Vec<[f64; 2]> =
            (0..=100).map(|i| [f64::from(i) / 10.0, 1.0 - f64::from(i) / 100.0]).collect();
        for (give_up, expected) in [(4.0, 3.2), (4.05, 3.2299), (10.0, 5.0), (f64::INFINITY, 5.0)] {
            assert!((mean(&road, give_up) - expected).abs() < 1e-3, "{give_up}");
        }
        assert_eq!(mean(&[], 5.0), 0.0);
    }
}
