//! The families, a file each, and the one list of them. METHODS.md section 3.
//!
//! A new family is a file beside these and a line in [`all`] (and in [`decides`] or [`verdicts`] if it is to
//! take part there).

mod burr;
mod exponential;
mod gamma;
mod generalised_gamma;
mod gompertz;
mod hyperexponential;
mod inverse_gaussian;
mod log_logistic;
mod lognormal;
mod lomax;
mod mixture;
mod never;
mod normal;
mod pareto_tail;
mod shifted;
mod two_gammas;
mod two_lognormals;
mod weibull;

pub use burr::Burr;
pub use exponential::Exponential;
pub use gamma::Gamma;
pub use generalised_gamma::GeneralisedGamma;
pub use gompertz::Gompertz;
pub use hyperexponential::{Hyperexponential, Hyperexponential3};
pub use inverse_gaussian::InverseGaussian;
pub use log_logistic::LogLogistic;
pub use lognormal::Lognormal;
pub use lomax::Lomax;
pub use never::WithNever;
pub use normal::Normal;
pub use pareto_tail::ParetoTail;
pub use shifted::Shifted;
pub use two_gammas::TwoGammas;
pub use two_lognormals::TwoLognormals;
pub use weibull::Weibull;

use super::Family;

/// Every family that can be fitted to whole waits, without shift or never share. ([`ParetoTail`] is for what lies
/// over a threshold.)
pub fn all() -> &'static [&'static dyn Family] {
    &[
        &Exponential,
        &Weibull,
        &Gamma,
        &Normal,
        &Gompertz,
        &InverseGaussian,
        &GeneralisedGamma,
        &Lognormal,
        &LogLogistic,
        &Lomax,
        &Burr,
        &Hyperexponential,
        &TwoLognormals,
        &TwoGammas,
        &Hyperexponential3,
    ]
}

/// The families that decide (RECIPE section 2, list `D`); `shift` is the least age of those that carry one, s.
pub fn decides(shift: f64) -> Vec<Box<dyn Family>> {
    let mut list: Vec<Box<dyn Family>> = vec![Box::new(Burr)];
    list.extend(both(shift));
    list
}

/// The families that give the verdicts (RECIPE section 2, list `V`). Burr is not among them: its limit is
/// Weibull, so it would call Weibull data heavy.
pub fn verdicts(shift: f64) -> Vec<Box<dyn Family>> {
    let mut list = both(shift);
    list.extend([
        Box::new(InverseGaussian) as Box<dyn Family>,
        Box::new(Normal),
        Box::new(Gompertz),
        Box::new(TwoLognormals),
        Box::new(TwoGammas),
        Box::new(Hyperexponential3),
    ]);
    list
}

/// Share of the shift of the others that a shifted lognormal has.
const LOGNORMAL_SHIFT: f64 = 0.85;

/// What both lists hold.
fn both(shift: f64) -> Vec<Box<dyn Family>> {
    vec![
        Box::new(Exponential),
        Box::new(Weibull),
        Box::new(Gamma),
        Box::new(Lognormal),
        Box::new(LogLogistic),
        Box::new(Lomax),
        Box::new(Hyperexponential),
        Box::new(WithNever(Exponential)),
        Box::new(WithNever(Weibull)),
        Box::new(WithNever(Gamma)),
        Box::new(WithNever(Lognormal)),
        Box::new(WithNever(LogLogistic)),
        Box::new(Shifted { inner: Exponential, shift }),
        Box::new(Shifted { inner: Weibull, shift }),
        Box::new(Shifted { inner: Gamma, shift }),
        // Beyond RECIPE: without a heavy law with a least service time, one behind it is called light. A lognormal has
        // hardly anything near its own least age, so its shift lies further below the first ending.
        Box::new(Shifted { inner: Lognormal, shift: LOGNORMAL_SHIFT * shift }),
    ]
}

/// What a family's file needs.
mod prelude {
    pub(super) use super::super::law::{AREA_TOLERANCE, residual_by_quadrature, times};
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

    /// `(e^x - 1)/x`, 1 at 0.
    pub(super) fn relative_exp_m1(x: f64) -> f64 {
        if x == 0.0 { 1.0 } else { x.exp_m1() / x }
    }
}
