//! What the future of a wait looks like, whatever it was learnt from. METHODS.md sections 1 and 5.
//!
//! An empirical curve, a fitted law, and the splice of both are outlooks; everything in
//! [`crate::stopping`] takes an outlook and knows no more. Ages are seconds since the wait began.

mod average;
mod grid;

pub use average::{Average, Averaging};
pub use grid::{Failures, Grid, Sampled};

/// The two curves of one wait with their integral.
pub trait Outlook: Send + Sync {
    /// Survival function `S(t) = P(T > t)` of any ending; 1 for `t <= 0`, non-increasing, right-continuous.
    fn survival(&self, t: f64) -> f64;

    /// Cumulative incidence of `done`, `F_d(t)`; the other ending competes.
    fn done(&self, t: f64) -> f64;

    /// Cumulative incidence of `failed`, `F_f(t)`; `S + F_d + F_f = 1`.
    fn failed(&self, t: f64) -> f64;

    /// Restricted mean `A(t) = E[min(T, t)]`, s: time spent on an attempt given up at `t`.
    fn restricted_mean(&self, t: f64) -> f64;

    /// Cause-specific hazards `(h_d, h_f)`, 1/s; `None` where the curve has no density (a step curve).
    fn hazards(&self, t: f64) -> Option<(f64, f64)>;

    /// `∫_0^t w(u) dF_d(u)`: what completions up to `t` are worth when worth fades.
    fn faded_done(&self, t: f64, worth: &dyn Fn(f64) -> f64) -> f64;

    /// Ages in `(0, ∞)`, sorted, at which the curve jumps or its hazard does: candidates for a best
    /// give-up time that no smooth search would find.
    fn knots(&self) -> &[f64];

    /// Last age about which data speak, s; infinite for a law taken as true.
    fn sight(&self) -> f64;

    /// Mean residual life restricted to `limit`: `∫_t^limit S / S(t)`, s; NaN where `S(t) = 0`.
    fn residual(&self, t: f64, limit: f64) -> f64 {
        (self.restricted_mean(limit) - self.restricted_mean(t)) / self.survival(t)
    }
}
