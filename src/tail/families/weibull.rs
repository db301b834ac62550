//! Weibull: hazard a power of age, rising for a shape above 1, falling below.

use super::prelude::*;
use crate::numeric::{UpperGamma, rising_series};

/// `S(t) = exp(-(t/scale)^shape)`.
pub struct Weibull;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("shape", Kind::Shape), Coordinate::new("scale", Kind::Scale)];

/// Euler's constant: mean of `-ln E` for `E` exponential.
const EULER: f64 = 0.577_215_664_901_532_9;

impl Family for Weibull {
    fn name(&self) -> &'static str {
        "weibull"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(WeibullLaw::new(x))
    }

    /// Moments of `ln T`: mean `ln scale - γ/shape`, standard deviation `π/(√6·shape)`; then the exponential.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let shape = std::f64::consts::PI / (6f64.sqrt() * about.log_sd);
        vec![vec![shape.ln(), about.log_mean + EULER / shape], vec![0.0, about.mean.ln()]]
    }

    fn weight_of_tail(&self, x: &[f64]) -> TailWeight {
        if x[0] < 0.0 { TailWeight::Heavy } else { TailWeight::Light }
    }
}

struct WeibullLaw {
    shape: f64,
    ln_shape: f64,
    scale: f64,
    ln_scale: f64,
}

impl WeibullLaw {
    fn new(x: &[f64]) -> Option<WeibullLaw> {
        let &[ln_shape, ln_scale] = x else { return None };
        let (shape, scale) = (COORDINATES[0].natural(ln_shape)?, COORDINATES[1].natural(ln_scale)?);
        Some(WeibullLaw { shape, ln_shape, scale, ln_scale })
    }

    /// `ln H(t)` from `ln t`.
    fn ln_hazard_sum(&self, ln_t: f64) -> f64 {
        self.shape * (ln_t - self.ln_scale)
    }
}

impl Law for WeibullLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        -self.ln_hazard_sum(t.ln()).exp()
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return f64::NEG_INFINITY;
        }
        let w = self.ln_hazard_sum(t.ln());
        self.ln_shape + w - t.ln() - w.exp()
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        let w = self.ln_hazard_sum(t.ln());
        let h = w.exp();
        gradient[0] = -times(h, w);
        gradient[1] = h * self.shape;
        -h
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let u = t.ln();
        let w = self.ln_hazard_sum(u);
        let h = w.exp();
        gradient[0] = 1.0 + w * (1.0 - h);
        gradient[1] = self.shape * (h - 1.0);
        self.ln_shape + w - u - h
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.shape, self.scale]
    }

    fn mean(&self) -> f64 {
        (self.ln_scale + statrs::function::gamma::ln_gamma(1.0 + 1.0 / self.shape)).exp()
    }

    /// `(scale/shape) γ(1/shape, (t/scale)^shape)`.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let power = 1.0 / self.shape;
        let w = self.ln_hazard_sum(t.ln());
        let h = w.exp();
        if h < power + 1.0 {
            // scale·h^(1/shape) = t, so that nothing overflows for a small shape.
            return t * (-h).exp() * rising_series(power, h);
        }
        self.mean() * UpperGamma::new(power).ln_lower(w).exp()
    }

    fn scale(&self) -> f64 {
        self.quantile(0.5)
    }

    fn quantile(&self, p: f64) -> f64 {
        quantile_of_log(p, |ln_s| (self.ln_scale + (-ln_s).ln() / self.shape).exp())
    }

    fn survival_on(&self, _: &[f64], log_ages: &[f64], out: &mut [f64]) {
        for (s, &u) in out.iter_mut().zip(log_ages) {
            *s = (-self.ln_hazard_sum(u).exp()).exp();
        }
    }

    fn log_survival_gradient_on(&self, _: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        for ((value, row), &u) in values.iter_mut().zip(gradients.chunks_exact_mut(2)).zip(logs) {
            let w = self.ln_hazard_sum(u);
            let h = w.exp();
            row[0] = -times(h, w);
            row[1] = h * self.shape;
            *value = -h;
        }
    }
}
