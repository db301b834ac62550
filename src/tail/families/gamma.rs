//! Gamma: a sum of exponential stages when the shape is whole. Hazard tends to a constant.

use super::prelude::*;
use crate::numeric::UpperGamma;

/// `S(t) = Q(shape, t/scale)`.
pub struct Gamma;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("shape", Kind::Shape), Coordinate::new("scale", Kind::Scale)];

impl Family for Gamma {
    fn name(&self) -> &'static str {
        "gamma"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(GammaLaw::new(x))
    }

    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let shape = shape_of_log_sd(about.log_sd);
        vec![vec![shape.ln(), (about.mean / shape).ln()], vec![0.0, about.mean.ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}

/// The shape whose `ln T` has this standard deviation: `sd² = ψ'(a) ≈ 1/a + 1/(2a²)`.
pub(crate) fn shape_of_log_sd(sd: f64) -> f64 {
    (1.0 + (1.0 + 2.0 * sd * sd).sqrt()) / (2.0 * sd * sd)
}

/// One gamma law.
pub(crate) struct GammaLaw {
    tail: UpperGamma,
    shape: f64,
    scale: f64,
    ln_scale: f64,
}

impl GammaLaw {
    pub(crate) fn new(x: &[f64]) -> Option<GammaLaw> {
        let &[ln_shape, ln_scale] = x else { return None };
        let (shape, scale) = (COORDINATES[0].natural(ln_shape)?, COORDINATES[1].natural(ln_scale)?);
        Some(GammaLaw { tail: UpperGamma::new(shape), shape, scale, ln_scale })
    }
}

impl Law for GammaLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 { 0.0 } else { self.tail.ln_upper(t.ln() - self.ln_scale) }
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return f64::NEG_INFINITY;
        }
        let u = t.ln();
        let ln_x = u - self.ln_scale;
        self.tail.ln_power(ln_x, ln_x.exp()) - u
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        let (ln_s, slope, hazard) = self.tail.ln_upper_gradient(t.ln() - self.ln_scale);
        gradient[0] = self.shape * slope;
        gradient[1] = hazard;
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let u = t.ln();
        let ln_x = u - self.ln_scale;
        let x = ln_x.exp();
        gradient[0] = self.shape * (ln_x - self.tail.digamma());
        gradient[1] = x - self.shape;
        self.tail.ln_power(ln_x, x) - u
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.shape, self.scale]
    }

    fn mean(&self) -> f64 {
        self.shape * self.scale
    }

    /// `t·S(t) + shape·scale·P(shape + 1, t/scale)`.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let ln_x = t.ln() - self.ln_scale;
        let ended = UpperGamma::new(self.shape + 1.0).ln_lower(ln_x);
        t * self.tail.ln_upper(ln_x).exp() + self.mean() * ended.exp()
    }

    fn scale(&self) -> f64 {
        // Wilson & Hilferty 1931 for the median; for a small shape, from P(a, x) ≈ x^a/Γ(a+1).
        if self.shape < 0.3 {
            let ln_x =
                (-std::f64::consts::LN_2 + statrs::function::gamma::ln_gamma(self.shape + 1.0)) / self.shape;
            return (ln_x + self.ln_scale).exp().max(f64::MIN_POSITIVE);
        }
        self.mean() * (1.0 - 1.0 / (9.0 * self.shape)).powi(3)
    }

    fn survival_on(&self, _: &[f64], log_ages: &[f64], out: &mut [f64]) {
        self.tail.upper_on(log_ages.len(), |i| log_ages[i] - self.ln_scale, |i, s| out[i] = s);
    }

    fn log_survival_gradient_on(&self, _: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        self.tail.ln_upper_gradient_on(
            logs.len(),
            |i| logs[i] - self.ln_scale,
            |i, (ln_s, slope, hazard)| {
                values[i] = ln_s;
                gradients[2 * i] = self.shape * slope;
                gradients[2 * i + 1] = hazard;
            },
        );
    }
}
