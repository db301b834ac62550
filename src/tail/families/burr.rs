//! Burr XII and, as its member `k = 1`, the log-logistic: power laws of a power. Hazard falls or humps.

use statrs::function::beta::checked_beta_reg;
use statrs::function::gamma::ln_gamma;

use super::prelude::*;
use crate::numeric::integrate;
use crate::numeric::special::softplus;
use crate::tail::law::logistic;

/// `S(t) = (1 + (t/scale)^c)^(-k)`.
pub struct Burr;

const COORDINATES: [Coordinate; 3] = [
    Coordinate::new("c", Kind::Shape),
    Coordinate::new("k", Kind::Shape),
    Coordinate::new("scale", Kind::Scale),
];

impl Family for Burr {
    fn name(&self) -> &'static str {
        "burr"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[ln_c, ln_k, ln_scale] = x else { return None };
        let (c, k) = (COORDINATES[0].natural(ln_c)?, COORDINATES[1].natural(ln_k)?);
        COORDINATES[2].natural(ln_scale)?;
        Some(Box::new(BurrLaw { c, ln_c, k, ln_k, ln_scale }))
    }

    /// Through the median: log-logistic, near its Weibull limit, and with a heavier tail than the body shows.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let through = |k: f64, c: f64| {
            let ln_half = ((std::f64::consts::LN_2 / k).exp_m1()).ln();
            vec![c.ln(), k.ln(), about.median.ln() - ln_half / c]
        };
        let c = std::f64::consts::PI / (3f64.sqrt() * about.log_sd);
        vec![through(1.0, c), through(10.0, 0.72 * c), through(0.3, 1.7 * c)]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Heavy
    }
}

/// One Burr law.
pub(crate) struct BurrLaw {
    c: f64,
    ln_c: f64,
    k: f64,
    ln_k: f64,
    ln_scale: f64,
}

impl BurrLaw {
    /// The log-logistic of this shape and scale.
    pub(crate) fn log_logistic(shape: f64, ln_shape: f64, ln_scale: f64) -> BurrLaw {
        BurrLaw { c: shape, ln_c: ln_shape, k: 1.0, ln_k: 0.0, ln_scale }
    }

    /// `∫_t^∞ S / S(t)` for `excess = k - 1/c > 0`, by the series in `rest = 1 - v = S^(1/k) <= 1/2`.
    fn residual(&self, t: f64, excess: f64, rest: f64) -> f64 {
        t / (self.c * excess) * ratio_series(self.k, 1.0 + excess, rest)
    }

    /// `ln (t/scale)^c`.
    pub(crate) fn w(&self, ln_t: f64) -> f64 {
        self.c * (ln_t - self.ln_scale)
    }

    /// `ln S` and its derivatives in `ln c`, `ln k`, `ln scale`, at `ln t`.
    pub(crate) fn tail(&self, ln_t: f64) -> (f64, [f64; 3]) {
        let w = self.w(ln_t);
        let ln_s = -self.k * softplus(w);
        let pull = self.k * logistic(w);
        (ln_s, [-times(pull, w), ln_s, pull * self.c])
    }

    /// `ln f` and its derivatives, likewise.
    pub(crate) fn body(&self, ln_t: f64) -> (f64, [f64; 3]) {
        let w = self.w(ln_t);
        let growth = softplus(w);
        let pull = (self.k + 1.0) * logistic(w);
        let ln_f = self.ln_k + self.ln_c + w - ln_t - (self.k + 1.0) * growth;
        (ln_f, [1.0 + w - times(pull, w), 1.0 - self.k * growth, (pull - 1.0) * self.c])
    }
}

impl Law for BurrLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 { 0.0 } else { -self.k * softplus(self.w(t.ln())) }
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= 0.0 { f64::NEG_INFINITY } else { self.body(t.ln()).0 }
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        let (ln_s, slopes) = self.tail(t.ln());
        gradient.copy_from_slice(&slopes);
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let (ln_f, slopes) = self.body(t.ln());
        gradient.copy_from_slice(&slopes);
        ln_f
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.c, self.k, self.ln_scale.exp()]
    }

    /// `scale·k·B(k - 1/c, 1 + 1/c)`; infinite for `ck <= 1`.
    fn mean(&self) -> f64 {
        let power = 1.0 / self.c;
        if self.k <= power {
            return f64::INFINITY;
        }
        (self.ln_scale + ln_gamma(self.k - power) + ln_gamma(1.0 + power) - ln_gamma(self.k)).exp()
    }

    /// `mean·I_v(1/c, k - 1/c)` with `v = 1 - S^(1/k)`; near 0 by the series that holds for any `ck`.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let power = 1.0 / self.c;
        let w = self.w(t.ln());
        let v = logistic(w);
        if v <= 0.5 && self.k * v <= 2.0 {
            return t * self.survival(t) * ratio_series(self.k, 1.0 + power, v);
        }
        let excess = self.k - power;
        if excess > 0.01 * power && w > 0.0 {
            return self.mean() - self.survival(t) * self.residual(t, excess, logistic(-w));
        }
        if excess > 0.01 * power && self.k.max(power) < 1e3 {
            return checked_beta_reg(power, excess, v).map_or(f64::NAN, |share| self.mean() * share);
        }
        // Up to here by the series, then by quadrature in the logarithm of age.
        let edge = f64::min(0.5, 2.0 / self.k) * (1.0 - 1e-9);
        let ln_edge = self.ln_scale + power * (edge / (1.0 - edge)).ln();
        let ln_t = t.ln();
        let mut area = self.restricted_mean(ln_edge.exp());
        let mut from = ln_edge;
        while from < ln_t {
            let upto = (from + 1.0f64.min(8.0 * power)).min(ln_t);
            let piece = integrate(&|u| u.exp() * self.survival(u.exp()), from, upto, AREA_TOLERANCE);
            area += piece;
            if piece <= 1e-18 * area {
                break;
            }
            from = upto;
        }
        area
    }

    /// For an infinite limit by the series in `1 - v`, out of the bulk.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if limit == f64::INFINITY && t > 0.0 {
            let rest = logistic(-self.w(t.ln()));
            let excess = self.k - 1.0 / self.c;
            if excess <= 0.0 {
                return f64::INFINITY;
            }
            if rest <= 0.5 {
                return self.residual(t, excess, rest);
            }
        }
        residual_by_quadrature(self, t, limit)
    }

    fn scale(&self) -> f64 {
        self.quantile(0.5)
    }

    fn quantile(&self, p: f64) -> f64 {
        quantile_of_log(p, |ln_s| (self.ln_scale + (-ln_s / self.k).exp_m1().ln() / self.c).exp())
    }

    fn survival_on(&self, _: &[f64], log_ages: &[f64], out: &mut [f64]) {
        for (s, &u) in out.iter_mut().zip(log_ages) {
            *s = (-self.k * softplus(self.w(u))).exp();
        }
    }
}

/// `Σ (a)_n/(b)_n x^n` from `n = 0`, which is `₂F₁(a, 1; b; x)`; positive terms, for `0 <= x <= 1/2`.
fn ratio_series(a: f64, b: f64, x: f64) -> f64 {
    let (mut sum, mut term, mut n) = (1.0, 1.0, 0.0);
    loop {
        term *= x * (a + n) / (b + n);
        sum += term;
        n += 1.0;
        if term <= sum * 1e-17 || term.is_nan() {
            return sum;
        }
    }
}
