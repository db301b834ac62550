//! Have the waits of one period a different law from those of another? METHODS.md section 2.
//!
//! With many waits every difference is significant, so the size comes first: how far apart the curves are, and what
//! that is in waiting time. What the give-up time of the old period loses under the new law is a question of worth
//! and is answered in [`crate::stopping`].

use super::interval::ConfidenceInterval;
use super::kaplan_meier::KaplanMeier;
use super::life_table::{CurveError, LifeTable};
use super::log_rank::{Emphasis, LogRank, log_rank};
use super::residual::{MeanTime, RestrictedMean};
use crate::tally::{Cause, Cells};

/// Two periods compared, up to the age that both have sight of.
#[derive(Clone, Debug, PartialEq)]
pub struct Drift {
    /// The lesser of the two ends of sight, s.
    pub sight: f64,
    /// The largest gap `S_new - S_old` in absolute value, with its sign, in [-1, 1]: > 0 where waits became longer.
    pub gap: f64,
    /// The age of it, s; 0 where there is no gap.
    pub at: f64,
    /// Standard error of the gap at that age, had the age been chosen beforehand.
    pub gap_error: f64,
    /// Expected time spent by [`Drift::sight`] in the old period.
    pub mean_old: MeanTime,
    /// The same in the new period.
    pub mean_new: MeanTime,
    /// The log-rank test of both endings.
    pub log_rank: LogRank,
    /// The test that looks at the tail ([`Emphasis::LATE`]).
    pub late: LogRank,
}

impl Drift {
    /// Compares the waits of an old and a new period, both endings together.
    ///
    /// # Errors
    /// [`CurveError`] of the first bad period.
    pub fn between(old: &Cells, new: &Cells) -> Result<Drift, CurveError> {
        let tables = [LifeTable::of(old)?, LifeTable::of(new)?];
        let [curve_old, curve_new] = [KaplanMeier::of(&tables[0]), KaplanMeier::of(&tables[1])];
        let sight = tables[0].sight().min(tables[1].sight());
        let (mut gap, mut at) = (0.0_f64, 0.0);
        // Both curves are straight between the ends of their intervals: the gap is largest at one of those, or just
        // before a jump.
        for p in curve_old.points().iter().chain(curve_new.points()).filter(|p| p.time <= sight) {
            for age in [p.over, p.over.next_down(), p.time, p.time.next_down()] {
                let here = curve_new.survival(age) - curve_old.survival(age);
                if here.abs() > gap.abs() {
                    (gap, at) = (here, age);
                }
            }
        }
        let samples = [old.sample(Cause::Any), new.sample(Cause::Any)];
        let test = |emphasis| log_rank(&[&samples[0], &samples[1]], emphasis);
        Ok(Drift {
            sight,
            gap,
            at,
            gap_error: (curve_old.variance(at) + curve_new.variance(at)).sqrt(),
            mean_old: RestrictedMean::of(&tables[0]).restricted_mean(sight),
            mean_new: RestrictedMean::of(&tables[1]).restricted_mean(sight),
            log_rank: test(Emphasis::EVEN)?,
            late: test(Emphasis::LATE)?,
        })
    }

    /// How much longer a wait lasts in the new period, up to [`Drift::sight`], s (negative: shorter), with its
    /// confidence interval.
    pub fn longer(&self, level: f64) -> (f64, ConfidenceInterval) {
        let difference = self.mean_new.value - self.mean_old.value;
        let error = (self.mean_new.variance + self.mean_old.variance).sqrt();
        (difference, ConfidenceInterval::plain(difference, error, level, -self.sight, self.sight))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::{Ending, Wait};

    fn cells(ages: impl IntoIterator<Item = f64>) -> Cells {
        Cells::from_waits(&ages.into_iter().map(|t| Wait::new(t, Ending::Done).unwrap()).collect::<Vec<_>>())
    }

    #[test]
    fn a_slow_mode_appears() {
        let old = cells((1..=100).map(f64::from));
        let new = cells((1..=100).map(|i| f64::from(i) + if i > 80 { 500.0 } else { 0.0 }));
        let drift = Drift::between(&old, &new).unwrap();
        // Both curves agree up to 80; at the old end of sight (96, with 5 left) the new one is still at 0.20.
        assert_eq!((drift.sight, drift.at), (96.0, 96.0));
        assert!((drift.gap - 0.16).abs() < 1e-12, "{drift:?}");
        assert!(drift.late.p_value < drift.log_rank.p_value && drift.late.p_value < 0.01, "{drift:?}");
        let (longer, interval) = drift.longer(0.95);
        assert!(longer > 0.0 && interval.contains(longer));
        let same = Drift::between(&old, &old).unwrap();
        assert_eq!((same.gap, same.longer(0.9).0), (0.0, 0.0));
        assert!(same.log_rank.p_value > 0.999);
    }
}
