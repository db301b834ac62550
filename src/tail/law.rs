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

    /// `E[T]`, s; infinite when the integral diverges or something never ends.
    fn mean(&self) -> f64;

    /// `E[min(T, t)]`, s, and the mean for an infinite `t`; closed form where there is one, else by quadrature
    /// to a relative 1e-10.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t == f64::INFINITY {
            return self.mean();
        }
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

    /// Hazard `h(t) = f(t)/S(t)`, 1/s; infinite where no mass is left.
    fn hazard(&self, t: f64) -> f64 {
        let log_survival = self.log_survival(t);
        if log_survival == f64::NEG_INFINITY {
            return f64::INFINITY;
        }
        (self.log_density(t) - log_survival).exp()
    }

    /// Inverse of the distribution function: least `t` with `1 - S(t) >= p`, s. `p` in [0, 1);
    /// infinite when the never share leaves less than `p`.
    fn quantile(&self, p: f64) -> f64 {
        quantile_by_search(self, p)
    }

    /// Mean residual life `E[min(T, limit) - t given T > t]`, s. `limit` may be infinite; the answer then is
    /// infinite when the mean is. 0 where no mass is left.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        residual_by_quadrature(self, t, limit)
    }

    /// `S` at many ages at once, to a relative 1e-9 where `S > 1e-300`.
    ///
    /// `ages` are positive and ascending, `log_ages` their logarithms; all three slices have one length.
    fn survival_on(&self, ages: &[f64], log_ages: &[f64], out: &mut [f64]) {
        let _ = log_ages;
        for (s, &t) in out.iter_mut().zip(ages) {
            *s = self.survival(t);
        }
    }

    /// [`Law::log_survival_gradient`] at many ages at once: `values[i]`, and row `i` of `gradients` (as wide as
    /// the family has free coordinates), belong to `ages[i]`. Same conditions as [`Law::survival_on`].
    fn log_survival_gradient_on(
        &self,
        ages: &[f64],
        log_ages: &[f64],
        values: &mut [f64],
        gradients: &mut [f64],
    ) {
        let _ = log_ages;
        let width = gradients.len() / ages.len().max(1);
        for ((value, row), &t) in values.iter_mut().zip(gradients.chunks_exact_mut(width.max(1))).zip(ages) {
            *value = self.log_survival_gradient(t, row);
        }
    }

    /// [`Law::survival_on`] and its gradient, laid out as by [`Law::log_survival_gradient_on`]: several times cheaper for
    /// laws that are sums, whose logarithms are not.
    fn survival_gradient_on(
        &self,
        ages: &[f64],
        log_ages: &[f64],
        values: &mut [f64],
        gradients: &mut [f64],
    ) {
        self.log_survival_gradient_on(ages, log_ages, values, gradients);
        let width = gradients.len() / ages.len().max(1);
        for (value, row) in values.iter_mut().zip(gradients.chunks_exact_mut(width.max(1))) {
            *value = value.exp();
            row.iter_mut().for_each(|g| *g = times(*value, *g));
        }
    }
}

/// `a·b`, where 0 beats infinity: a limit in which a factor vanishes exponentially.
pub(super) fn times(a: f64, b: f64) -> f64 {
    if a == 0.0 { 0.0 } else { a * b }
}

/// A family of laws: one file each under `families/`.
///
/// Most say only [`Family::name`], [`Family::coordinates`], [`Family::law`], [`Family::starts`] and
/// [`Family::weight_of_tail`]; the rest follows from the coordinates.
pub trait Family: Send + Sync {
    /// Name in JSON and text, e.g. `log_logistic`; a shift or never share shows among the parameters only.
    fn name(&self) -> &'static str;

    /// What the maximiser moves, in order.
    fn coordinates(&self) -> Vec<Coordinate>;

    /// The law at free coordinates `x` (length [`Family::dimension`]); `None` where they are not finite or a
    /// parameter leaves the range of [`Coordinate::natural`].
    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>>;

    /// Where to start the search, best guess first. Never empty.
    fn starts(&self, about: &About) -> Vec<Vec<f64>>;

    /// Which side of "heavy or light" this law falls on at free coordinates `x`.
    fn weight_of_tail(&self, x: &[f64]) -> TailWeight;

    /// Names of the natural parameters, in their one order; a shift or never share comes last. Their number is
    /// what AIC and BIC count.
    fn parameters(&self) -> Vec<&'static str> {
        self.coordinates().iter().map(|c| c.name).collect()
    }

    /// Number of free coordinates.
    fn dimension(&self) -> usize {
        self.coordinates().len()
    }

    /// Free coordinates of natural parameters; `None` when they are out of range.
    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        let coordinates = self.coordinates();
        if coordinates.len() != natural.len() {
            return None;
        }
        coordinates.iter().zip(natural).map(|(c, &value)| c.free(value)).collect()
    }

    /// Free coordinates of the law of `factor · T`, `factor > 0`. A family with a fixed shift moves it too: the
    /// coordinates are then those in the family whose shift is `factor` times as long.
    fn rescale(&self, x: &[f64], factor: f64) -> Vec<f64> {
        self.coordinates().iter().zip(x).map(|(c, &at)| c.rescale(at, factor)).collect()
    }
}

impl<F: Family + ?Sized> Family for &F {
    fn name(&self) -> &'static str {
        (**self).name()
    }
    fn coordinates(&self) -> Vec<Coordinate> {
        (**self).coordinates()
    }
    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        (**self).law(x)
    }
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        (**self).starts(about)
    }
    fn weight_of_tail(&self, x: &[f64]) -> TailWeight {
        (**self).weight_of_tail(x)
    }
    fn parameters(&self) -> Vec<&'static str> {
        (**self).parameters()
    }
    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        (**self).free(natural)
    }
    fn rescale(&self, x: &[f64], factor: f64) -> Vec<f64> {
        (**self).rescale(x, factor)
    }
}

/// One free coordinate: the name of its natural parameter, and how the two are tied.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Coordinate {
    /// Name of the natural parameter.
    pub name: &'static str,
    /// Its range and unit.
    pub kind: Kind,
}

/// Range and unit of a natural parameter; they fix the free coordinate, its bounds and its change with the unit.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// Above 0, a number without unit: its logarithm. 1e-8 to 1e8.
    Shape,
    /// Above 0, in s: its logarithm. 1e-150 to 1e150.
    Scale,
    /// Above 0, in 1/s: its logarithm. 1e-150 to 1e150.
    Rate,
    /// Real, in s: as it is. Up to 1e150.
    Location,
    /// Real, the logarithm of an age in s: as it is. Up to 350.
    LogLocation,
    /// Real, a number without unit: as it is. Up to 1e8.
    Index,
    /// Between 0 and 1: its logit. Up to 700.
    Share,
}

impl Coordinate {
    /// A coordinate of this name and kind.
    pub const fn new(name: &'static str, kind: Kind) -> Coordinate {
        Coordinate { name, kind }
    }

    /// The natural value at a free one; `None` when it is not finite or out of the kind's range.
    pub fn natural(self, free: f64) -> Option<f64> {
        let (bound, natural) = match self.kind {
            Kind::Shape => (LOG_SHAPE_BOUND, free.exp()),
            Kind::Scale | Kind::Rate => (LOG_SCALE_BOUND, free.exp()),
            Kind::Location => (1e150, free),
            Kind::LogLocation => (350.0, free),
            Kind::Index => (1e8, free),
            Kind::Share => (700.0, logistic(free)),
        };
        (free.abs() <= bound).then_some(natural)
    }

    /// The free value of a natural one; `None` when it is out of range.
    pub fn free(self, natural: f64) -> Option<f64> {
        let free = match self.kind {
            Kind::Shape | Kind::Scale | Kind::Rate => natural.ln(),
            Kind::Location | Kind::LogLocation | Kind::Index => natural,
            Kind::Share => natural.ln() - (-natural).ln_1p(),
        };
        self.natural(free).map(|_| free)
    }

    /// The free value when every age is multiplied by `factor`.
    pub fn rescale(self, free: f64, factor: f64) -> f64 {
        match self.kind {
            Kind::Scale | Kind::LogLocation => free + factor.ln(),
            Kind::Rate => free - factor.ln(),
            Kind::Location => free * factor,
            Kind::Shape | Kind::Index | Kind::Share => free,
        }
    }
}

/// `ln 1e8`, with a hair of room for the round trip.
const LOG_SHAPE_BOUND: f64 = 18.420_681;
/// `ln 1e150`, likewise.
const LOG_SCALE_BOUND: f64 = 345.387_764;

/// `1/(1 + e^-x)`.
pub(crate) fn logistic(x: f64) -> f64 {
    if x >= 0.0 {
        1.0 / (1.0 + (-x).exp())
    } else {
        let e = x.exp();
        e / (1.0 + e)
    }
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

/// `∫_t^limit S / S(t)`: in the bulk as a difference of areas, further out as an integral of ratios, which loses
/// nothing however small `S(t)` is.
pub(crate) fn residual_by_quadrature<L: Law + ?Sized>(law: &L, t: f64, limit: f64) -> f64 {
    let start = law.log_survival(t);
    if t >= limit || start == f64::NEG_INFINITY {
        return 0.0;
    }
    let whole = law.restricted_mean(limit);
    let rest = whole - law.restricted_mean(t);
    if whole == f64::INFINITY || rest > 0.01 * whole {
        return rest / start.exp();
    }
    let ratio = |u: f64| (law.log_survival(u) - start).exp();
    let hazard = law.hazard(t);
    let mut width = if hazard > 0.0 && hazard.is_finite() { 1.0 / hazard } else { law.scale() };
    let (mut from, mut area) = (t, 0.0);
    while from < limit {
        let end = (from + width).min(limit);
        let end = if end > from { end } else { limit };
        if end == f64::INFINITY {
            break;
        }
        let piece = integrate(&ratio, from, end, AREA_TOLERANCE);
        area += piece;
        if piece <= AREA_TOLERANCE * 1e-2 * area && ratio(end) * (limit - end).min(width) <= piece {
            break;
        }
        from = end;
        width *= 2.0;
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
