//! The families, a file each, and the one list of them. METHODS.md section 3.
//!
//! A new family is a file beside these and a line in [`all`] (and in [`decides`] or [`verdicts`] if it is to
//! take part there).

mod exponential;
mod lognormal;
mod weibull;

pub use exponential::Exponential;
pub use lognormal::Lognormal;
pub use weibull::Weibull;

use super::Family;

/// Every family that can be fitted to whole waits, without shift or never share.
pub fn all() -> &'static [&'static dyn Family] {
    &[&Exponential, &Weibull, &Lognormal]
}

/// What a family's file needs.
mod prelude {
    pub(super) use super::super::law::residual_by_quadrature;
    pub(super) use super::super::{About, Coordinate, Family, Kind, Law, TailWeight};

    /// A law made is a law boxed.
    pub(super) fn boxed<L: Law + 'static>(law: Option<L>) -> Option<Box<dyn Law>> {
        law.map(|law| Box::new(law) as Box<dyn Law>)
    }

    /// A quantile from the inverse of `ln S`.
    pub(super) fn quantile_of_log(p: f64, inverse: impl Fn(f64) -> f64) -> f64 {
        if p <= 0.0 {
            0.0
        } else if p >= 1.0 || p.is_nan() {
            f64::INFINITY
        } else {
            inverse((-p).ln_1p())
        }
    }

    /// `a·b`, where 0 beats infinity: a limit in which a factor vanishes exponentially.
    pub(super) fn times(a: f64, b: f64) -> f64 {
        if a == 0.0 { 0.0 } else { a * b }
    }
}
