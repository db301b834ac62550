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
