//! Lognormal: the logarithm of the wait is normal. Hazard rises, then falls; heavy, yet without a power tail.

use super::prelude::*;
use crate::numeric::special::{HALF_LN_TWO_PI, ln_normal_density, ln_normal_tail, mills, normal_tail};

/// `S(t) = Φ((mu - ln t)/sigma)`.
pub struct Lognormal;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("mu", Kind::LogLocation), Coordinate::new("sigma", Kind::Shape)];

impl Family for Lognormal {
    fn name(&self) -> &'static str {
        "lognormal"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(LognormalLaw::new(x))
    }

    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        vec![vec![about.log_mean, about.log_sd.ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Heavy
    }
}

/// One lognormal law.
pub(crate) struct LognormalLaw {
    mu: f64,
    sigma: f64,
    inverse_sigma: f64,
    ln_sigma: f64,
}

impl LognormalLaw {
    pub(crate) fn new(x: &[f64]) -> Option<LognormalLaw> {
        let &[mu, ln_sigma] = x else { return None };
        let (mu, sigma) = (COORDINATES[0].natural(mu)?, COORDINATES[1].natural(ln_sigma)?);
        Some(LognormalLaw { mu, sigma, inverse_sigma: 1.0 / sigma, ln_sigma })
    }

    fn z(&self, ln_t: f64) -> f64 {
        (ln_t - self.mu) * self.inverse_sigma
    }

    fn tail_gradient(&self, z: f64, gradient: &mut [f64]) -> f64 {
        let ln_s = ln_normal_tail(z);
        // Hazard of the standard normal.
        let pull = (ln_normal_density(z) - ln_s).exp();
        gradient[0] = pull * self.inverse_sigma;
        gradient[1] = pull * z;
        ln_s
    }
}

impl Law for LognormalLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 { 0.0 } else { ln_normal_tail(self.z(t.ln())) }
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return f64::NEG_INFINITY;
        }
        let u = t.ln();
        let z = self.z(u);
        -u - self.ln_sigma - HALF_LN_TWO_PI - 0.5 * z * z
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        self.tail_gradient(self.z(t.ln()), gradient)
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let u = t.ln();
        let z = self.z(u);
        gradient[0] = z * self.inverse_sigma;
        gradient[1] = z * z - 1.0;
        -u - self.ln_sigma - HALF_LN_TWO_PI - 0.5 * z * z
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.mu, self.sigma]
    }

    fn mean(&self) -> f64 {
        (self.mu + 0.5 * self.sigma * self.sigma).exp()
    }

    /// `t·S(t) + mean·Φ((ln t - mu - sigma²)/sigma)`.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let z = self.z(t.ln());
        let ended = self.mu + 0.5 * self.sigma * self.sigma + ln_normal_tail(self.sigma - z);
        t * ln_normal_tail(z).exp() + ended.exp()
    }

    fn scale(&self) -> f64 {
        self.mu.exp()
    }

    /// For an infinite limit `t·(M(z - sigma)/M(z) - 1)` with the Mills ratio `M`.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if limit == f64::INFINITY && t > 0.0 {
            let z = self.z(t.ln());
            if z > self.sigma && self.sigma > 0.01 {
                return t * (mills(z - self.sigma) / mills(z) - 1.0);
            }
        }
        residual_by_quadrature(self, t, limit)
    }

    fn survival_on(&self, _: &[f64], log_ages: &[f64], out: &mut [f64]) {
        for (s, &u) in out.iter_mut().zip(log_ages) {
            *s = normal_tail(self.z(u));
        }
    }

    fn log_survival_gradient_on(&self, _: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        for ((value, row), &u) in values.iter_mut().zip(gradients.chunks_exact_mut(2)).zip(logs) {
            *value = self.tail_gradient(self.z(u), row);
        }
    }

    fn survival_gradient_on(&self, _: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        for ((value, row), &u) in values.iter_mut().zip(gradients.chunks_exact_mut(2)).zip(logs) {
            let z = self.z(u);
            let density = ln_normal_density(z).exp();
            row[0] = density * self.inverse_sigma;
            row[1] = times(density, z);
            *value = normal_tail(z);
        }
    }
}
