//! What the policy says time, completion, failure and giving up are worth. METHODS.md sections 1, 5 and 6.

/// What is maximised.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Aim {
    /// Worth per second in the long run, `N/D`.
    Rate,
    /// Least expected time until done, retrying: `1/m` is maximised.
    Finish,
    /// `N - κD` of one attempt; κ in worth per second.
    CarryingCost(f64),
    /// Probability of being done by `by` seconds with at most `attempts` attempts.
    Deadline {
        /// The deadline `L`, s.
        by: f64,
        /// The cap `K` on attempts, at least 1.
        attempts: u32,
    },
}

/// Most attempts that a deadline or a cap may name.
pub const MAX_ATTEMPTS: u32 = 100;

/// How the worth of a completion depends on its age.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Fade {
    /// It stays.
    Stays,
    /// `2^{-t/H}`, H in s.
    HalfLife(f64),
    /// Straight line to 0 at this age, s.
    ZeroAt(f64),
    /// Hyperbolic `1/(1 + t/h)`: half at this age, s.
    HalfAt(f64),
}

impl Fade {
    /// Share of the worth left at age `t`.
    pub fn share(self, t: f64) -> f64 {
        match self {
            Fade::Stays => 1.0,
            Fade::HalfLife(half) => (-std::f64::consts::LN_2 * t / half).exp(),
            Fade::ZeroAt(zero) => (1.0 - t / zero).max(0.0),
            Fade::HalfAt(half) => 1.0 / (1.0 + t / half),
        }
    }

    /// Derivative of [`Fade::share`], 1/s, never above 0; its left value at a kink.
    pub fn slope(self, t: f64) -> f64 {
        match self {
            Fade::Stays => 0.0,
            Fade::HalfLife(half) => -std::f64::consts::LN_2 / half * self.share(t),
            Fade::ZeroAt(zero) => {
                if t <= zero {
                    -1.0 / zero
                } else {
                    0.0
                }
            }
            Fade::HalfAt(half) => -self.share(t).powi(2) / half,
        }
    }

    /// Age at which the share has a kink, s.
    pub(crate) fn kink(self) -> Option<f64> {
        match self {
            Fade::ZeroAt(zero) => Some(zero),
            _ => None,
        }
    }
}

/// Pauses before the waiter can start again, s.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Pause {
    /// After a completion.
    pub done: f64,
    /// After a failure.
    pub failed: f64,
    /// After giving up.
    pub gave_up: f64,
}

/// The price list of one waiting process, validated by [`Worth::check`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Worth {
    /// What is maximised.
    pub aim: Aim,
    /// Worth of a completion at age 0, `w`.
    pub done: f64,
    /// Worth of a failure, `w_f`.
    pub failed: f64,
    /// Worth of giving up (a fallback answer > 0, a cancellation cost < 0), `w_g`.
    pub gave_up: f64,
    /// Cost of starting an attempt, `c` >= 0.
    pub attempt_cost: f64,
    /// How the worth of a completion fades.
    pub fade: Fade,
    /// Pauses before the next start.
    pub pause: Pause,
    /// Stickiness φ in [0, 1): the retry after a give-up meets the same fate with this probability.
    pub sticky: f64,
}

impl Default for Worth {
    /// Aim `rate`, a completion worth 1, all else free.
    fn default() -> Worth {
        Worth {
            aim: Aim::Rate,
            done: 1.0,
            failed: 0.0,
            gave_up: 0.0,
            attempt_cost: 0.0,
            fade: Fade::Stays,
            pause: Pause::default(),
            sticky: 0.0,
        }
    }
}

impl Worth {
    /// Checks every number, and that something says what waiting time costs.
    ///
    /// # Errors
    /// [`WorthError::OutOfRange`] for a number that is not finite or not in its range;
    /// [`WorthError::NoTimeCost`] where the aim names a cost of time that is not there: a rate with nothing to
    /// earn, a carrying cost of 0, no deadline (METHODS.md section 5, "No cost of time, no reason to stop").
    pub fn check(&self) -> Result<(), WorthError> {
        within("worth.done", self.done, f64::NEG_INFINITY, "a finite number")?;
        within("worth.failed", self.failed, f64::NEG_INFINITY, "a finite number")?;
        within("worth.gave_up", self.gave_up, f64::NEG_INFINITY, "a finite number")?;
        within("attempt_cost", self.attempt_cost, 0.0, "0 or more")?;
        within("pause.done", self.pause.done, 0.0, "0 s or more")?;
        within("pause.failed", self.pause.failed, 0.0, "0 s or more")?;
        within("pause.gave_up", self.pause.gave_up, 0.0, "0 s or more")?;
        if let Fade::HalfLife(age) | Fade::ZeroAt(age) | Fade::HalfAt(age) = self.fade {
            within("fades", age, f64::MIN_POSITIVE, "an age above 0 s")?;
        }
        if !(0.0..1.0).contains(&self.sticky) {
            return Err(out_of_range("sticky", self.sticky, "from 0 to below 1"));
        }
        match self.aim {
            // Something must be worth starting for, else another second has no better use.
            Aim::Rate if self.done.max(self.failed).max(self.gave_up) <= self.attempt_cost => {
                Err(WorthError::NoTimeCost { missing: TimeCost::Opportunity })
            }
            Aim::Rate | Aim::Finish => Ok(()),
            Aim::CarryingCost(0.0) => Err(WorthError::NoTimeCost { missing: TimeCost::Carrying }),
            Aim::CarryingCost(cost) => within("carrying_cost", cost, 0.0, "above 0 per second"),
            Aim::Deadline { by: f64::INFINITY, .. } => {
                Err(WorthError::NoTimeCost { missing: TimeCost::Deadline })
            }
            Aim::Deadline { by, attempts } => {
                within("deadline", by, f64::MIN_POSITIVE, "above 0 s")?;
                if attempts == 0 || attempts > MAX_ATTEMPTS {
                    return Err(out_of_range("attempts", f64::from(attempts), "from 1 to 100"));
                }
                Ok(())
            }
        }
    }

    /// Worth of a completion at age `t`, `w(t)`.
    pub fn completion(&self, t: f64) -> f64 {
        self.done * self.fade.share(t)
    }

    /// The same price list as the rate `N/D` reads it: for `finish` a completion counts 1 and time after it
    /// nothing, since `m = D/N` then (METHODS.md section 5).
    pub(crate) fn as_rate(&self) -> Worth {
        match self.aim {
            Aim::Finish => Worth {
                aim: Aim::Finish,
                pause: Pause { done: 0.0, ..self.pause },
                sticky: self.sticky,
                ..Worth::default()
            },
            _ => *self,
        }
    }
}

/// The three things that make waiting cost something (METHODS.md section 5).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum TimeCost {
    /// What the waiter would earn elsewhere: a positive rate.
    Opportunity,
    /// A cost for each second of waiting.
    Carrying,
    /// A time after which a completion is worth nothing.
    Deadline,
}

/// Why a price list cannot be used.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum WorthError {
    /// A number is not finite or not in its range.
    #[error("{field} is {value}; it must be {allowed}")]
    OutOfRange {
        /// The policy's name of the field.
        field: &'static str,
        /// The refused value.
        value: f64,
        /// The range, in words.
        allowed: &'static str,
    },
    /// Waiting costs nothing, so nothing is gained by giving up.
    #[error("waiting costs nothing here, so never giving up is best: {}", .missing.absent())]
    NoTimeCost {
        /// Which cost of time the aim needs.
        missing: TimeCost,
    },
}

impl TimeCost {
    fn absent(self) -> &'static str {
        match self {
            TimeCost::Opportunity => "no ending earns more than an attempt costs",
            TimeCost::Carrying => "the carrying cost is 0",
            TimeCost::Deadline => "there is no deadline",
        }
    }
}

impl WorthError {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            WorthError::OutOfRange { .. } => "correct it in the policy",
            WorthError::NoTimeCost { missing: TimeCost::Opportunity } => {
                "give a completion a worth above the attempt cost, or choose aim finish, carrying_cost or deadline"
            }
            WorthError::NoTimeCost { missing: TimeCost::Carrying } => {
                "say what a second of waiting costs (carrying_cost: 0.02/s), or choose another aim"
            }
            WorthError::NoTimeCost { missing: TimeCost::Deadline } => {
                "say by when it must be done (deadline: 2s), or choose another aim"
            }
        }
    }
}

pub(crate) fn out_of_range(field: &'static str, value: f64, allowed: &'static str) -> WorthError {
    WorthError::OutOfRange { field, value, allowed }
}

/// Finite and at least `least`.
pub(crate) fn within(
    field: &'static str,
    value: f64,
    least: f64,
    allowed: &'static str,
) -> Result<(), WorthError> {
    if value.is_finite() && value >= least { Ok(()) } else { Err(out_of_range(field, value, allowed)) }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn refuses_numbers_out_of_range() {
        let good = Worth::default();
        assert_eq!(good.check(), Ok(()));
        for bad in [
            Worth { done: f64::NAN, ..good },
            Worth { gave_up: f64::INFINITY, ..good },
            Worth { attempt_cost: -0.1, ..good },
            Worth { pause: Pause { failed: -1.0, ..good.pause }, ..good },
            Worth { fade: Fade::HalfLife(0.0), ..good },
            Worth { sticky: 1.0, ..good },
            Worth { sticky: f64::NAN, ..good },
            Worth { aim: Aim::CarryingCost(-1.0), ..good },
            Worth { aim: Aim::Deadline { by: 0.0, attempts: 2 }, ..good },
            Worth { aim: Aim::Deadline { by: 1.0, attempts: 0 }, ..good },
        ] {
            assert!(matches!(bad.check(), Err(WorthError::OutOfRange { .. })), "{bad:?}");
        }
    }

    #[test]
    fn says_which_cost_of_time_is_missing() {
        let good = Worth::default();
        for (bad, missing) in [
            (Worth { done: 0.0, ..good }, TimeCost::Opportunity),
            (Worth { attempt_cost: 1.0, ..good }, TimeCost::Opportunity),
            (Worth { aim: Aim::CarryingCost(0.0), ..good }, TimeCost::Carrying),
            (Worth { aim: Aim::Deadline { by: f64::INFINITY, attempts: 2 }, ..good }, TimeCost::Deadline),
        ] {
            assert_eq!(bad.check(), Err(WorthError::NoTimeCost { missing }));
        }
    }

    #[test]
    fn fades_fall_at_their_slope() {
        for fade in [Fade::Stays, Fade::HalfLife(3.0), Fade::ZeroAt(5.0), Fade::HalfAt(2.0)] {
            assert_eq!(fade.share(0.0), 1.0);
            for t in [0.5, 2.0, 4.0, 7.0] {
                let slope = (fade.share(t + 1e-6) - fade.share(t - 1e-6)) / 2e-6;
                assert!((fade.slope(t) - slope).abs() < 1e-8, "{fade:?} {t}");
            }
        }
        assert_eq!(Fade::HalfLife(3.0).share(3.0), 0.5);
        assert_eq!(Fade::HalfAt(3.0).share(3.0), 0.5);
        assert_eq!(Fade::ZeroAt(3.0).share(4.0), 0.0);
    }
}
