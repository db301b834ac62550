//! What a parametric family must say of itself. METHODS.md section 3.
//!
//! A [`Family`] knows its parameters, where to start a fit and how to make a [`Law`] from a vector of *free*
//! coordinates (logarithms of positive parameters, logits of shares, locations as they are), in which the
//! likelihood is maximised without bounds. A [`Law`] is one member with its parameters fixed.

use crate::numeric::{integrate, root};

/// One probability law on (0, ∞), parameters fixed. Ages in seconds (or whatever unit the parameters are in).
///
/// Defined by its log survival and log density, both accurate far into the tail; the rest is derived.
pub trait Law: Send + Sync {
    /// `ln S(t)`; 0 for `t <= 0`, `-∞` where no mass is left.
    fn log_survival(&self, t: f64) -> f64;

    /// `ln f(t)` for `t > 0`; `-∞` outside the support.
    fn log_density(&self, t: f64) -> f64;

    /// [`Law::log_survival`], and its gradient in the free coordinates written to `gradient`.
    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64;

    /// [`Law::log_density`], and its gradient in the free coordinates written to `gradient`.
    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64;

    /// The parameters in their natural form, in the order of [`Family::parameters`].
    fn parameters(&self) -> Vec<f64>;

    /// `E[min(T, t)]`, s; closed form where there is one, else by quadrature to a relative 1e-10.
    fn restricted_mean(&self, t: f64) -> f64 {
        area_by_quadrature(&|u| self.survival(u), self.scale(), t)
    }

    /// A typical age (the median or a scale), s: where numerical work on this law should start.
    fn scale(&self) -> f64;

    /// Share that never ends, `lim S(t)`; 0 unless a never share was fitted.
    fn never(&self) -> f64 {
        0.0
    }

    /// Survival function `S(t)`.
    fn survival(&self, t: f64) -> f64 {
        self.log_survival(t).exp()
    }

    /// Cumulative hazard `H(t) = -ln S(t)`.
    fn cumulative_hazard(&self, t: f64) -> f64 {
        -self.log_survival(t)
    }

    /// Density `f(t)`, 1/s.
    fn density(&self, t: f64) -> f64 {
        self.log_density(t).exp()
    }

    /// Hazard `h(t) = f(t)/S(t)`, 1/s.
    fn hazard(&self, t: f64) -> f64 {
        (self.log_density(t) - self.log_survival(t)).exp()
    }

    /// Inverse of the distribution function: least `t` with `1 - S(t) >= p`, s. `p` in [0, 1);
    /// infinite when the never share leaves less than `p`.
    fn quantile(&self, p: f64) -> f64 {
        quantile_by_search(self, p)
    }

    /// Mean residual life `E[T - t given T > t]`, s; infinite when the mean is. `limit` bounds the integral.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        (self.restricted_mean(limit) - self.restricted_mean(t)) / self.survival(t)
    }
}

/// A family of laws: one file each under `families/`.
pub trait Family: Send + Sync {
    /// Name in JSON and text, e.g. `log_logistic`.
    fn name(&self) -> &'static str;

    /// Names of the natural parameters, in their one order; a shift or never share comes last.
    fn parameters(&self) -> Vec<&'static str>;

    /// Number of free coordinates: those the maximiser moves.
    fn dimension(&self) -> usize;

    /// The law at free coordinates `x` (length [`Family::dimension`]); `None` where they are not finite or overflow.
    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>>;

    /// Free coordinates of natural parameters; `None` when they are out of range.
    fn free(&self, natural: &[f64]) -> Option<Vec<f64>>;

    /// Free coordinates of the law of `factor · T`.
    fn rescale(&self, x: &[f64], factor: f64) -> Vec<f64>;

    /// Where to start the search, best guess first. Never empty.
    fn starts(&self, about: &About) -> Vec<Vec<f64>>;

    /// Which side of "heavy or light" this law falls on at free coordinates `x`.
    fn weight_of_tail(&self, x: &[f64]) -> TailWeight;
}

/// Heavy: no exponential moment (METHODS.md section 4).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum TailWeight {
    /// Some exponential moment exists.
    Light,
    /// None does.
    Heavy,
}

/// Rough facts of a sample from which families choose their starts; from a Kaplan-Meier curve, so that
/// censoring does not bias them grossly.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct About {
    /// Exposure divided by events, s: the exponential estimate of the mean.
    pub mean: f64,
    /// Rough 10%, 50% and 90% points of the completions, s; `low <= median <= high`.
    pub low: f64,
    /// See `low`.
    pub median: f64,
    /// See `low`.
    pub high: f64,
    /// Mean of the logarithm of the completions.
    pub log_mean: f64,
    /// Standard deviation of the logarithm of the completions, at least 0.05.
    pub log_sd: f64,
    /// Share still waiting at the end of sight, in [0, 1).
    pub left: f64,
}

/// Relative tolerance of every restricted mean without a closed form.
pub(crate) const AREA_TOLERANCE: f64 = 1e-11;

/// `∫_0^t S`, split at powers of ten of `scale` so that no bulk is overlooked.
pub fn area_by_quadrature(survival: &dyn Fn(f64) -> f64, scale: f64, t: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    let mut from = 0.0;
    let mut area = 0.0;
    let mut upto = scale * 1e-3;
    while from < t {
        let end = if upto.is_finite() && upto > from { upto.min(t) } else { t };
        let piece = integrate(survival, from, end, AREA_TOLERANCE);
        area += piece;
        from = end;
        upto *= 10f64.sqrt();
        // Whatever is left is bounded by S(from) times the rest, for S falls.
        if survival(from) * (t - from) <= AREA_TOLERANCE * 1e-2 * area {
            break;
        }
    }
    area
}

fn quantile_by_search<L: Law + ?Sized>(law: &L, p: f64) -> f64 {
    if p <= 0.0 {
        return 0.0;
    }
    if p.is_nan() || p >= 1.0 - law.never() {
        return f64::INFINITY;
    }
    let goal = (-p).ln_1p();
    let gap = |log_t: f64| law.log_survival(log_t.exp()) - goal;
    let (mut low, mut high) = (law.scale().ln(), law.scale().ln());
    let mut step = 1.0;
    while gap(low) < 0.0 && low > -740.0 {
        low -= step;
        step *= 2.0;
    }
    step = 1.0;
    while gap(high) > 0.0 && high < 709.0 {
        high += step;
        step *= 2.0;
    }
    root(&gap, low.max(-745.0), high.min(709.7), 1e-15).map_or(f64::INFINITY, f64::exp)
}
