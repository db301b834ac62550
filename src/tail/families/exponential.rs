//! Exponential: constant hazard, the law without memory.

use super::prelude::*;

/// `S(t) = exp(-rate·t)`.
pub struct Exponential;

const COORDINATES: [Coordinate; 1] = [Coordinate::new("rate", Kind::Rate)];

impl Family for Exponential {
    fn name(&self) -> &'static str {
        "exponential"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(ExponentialLaw::new(x))
    }

    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        vec![vec![-about.mean.ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}

/// One exponential law.
pub(crate) struct ExponentialLaw {
    rate: f64,
    ln_rate: f64,
}

impl ExponentialLaw {
    pub(crate) fn new(x: &[f64]) -> Option<ExponentialLaw> {
        let &[ln_rate] = x else { return None };
        Some(ExponentialLaw { rate: COORDINATES[0].natural(ln_rate)?, ln_rate })
    }
}

impl Law for ExponentialLaw {
    fn log_survival(&self, t: f64) -> f64 {
        -self.rate * t.max(0.0)
    }

    fn log_density(&self, t: f64) -> f64 {
        if t < 0.0 { f64::NEG_INFINITY } else { self.ln_rate - self.rate * t }
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        gradient[0] = -self.rate * t.max(0.0);
        gradient[0]
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        gradient[0] = 1.0 - self.rate * t;
        self.ln_rate - self.rate * t
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.rate]
    }

    fn mean(&self) -> f64 {
        1.0 / self.rate
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        -(-self.rate * t.max(0.0)).exp_m1() / self.rate
    }

    fn scale(&self) -> f64 {
        std::f64::consts::LN_2 / self.rate
    }

    fn quantile(&self, p: f64) -> f64 {
        quantile_of_log(p, |ln_s| -ln_s / self.rate)
    }

    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        self.restricted_mean(limit - t)
    }
}
