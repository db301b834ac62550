//! Lomax (Pareto II): hazard `shape/(scale + t)`; a power tail. An exponential whose rate varies as a gamma.

use super::prelude::*;

/// `S(t) = (1 + t/scale)^(-shape)`.
pub struct Lomax;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("shape", Kind::Shape), Coordinate::new("scale", Kind::Scale)];

impl Family for Lomax {
    fn name(&self) -> &'static str {
        "lomax"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[ln_shape, ln_scale] = x else { return None };
        let (shape, scale) = (COORDINATES[0].natural(ln_shape)?, COORDINATES[1].natural(ln_scale)?);
        Some(Box::new(LomaxLaw { shape, ln_shape, scale, ln_scale }))
    }

    /// A heavy one through the median, and one near its exponential limit through the mean.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        vec![vec![1.5_f64.ln(), (about.median / 0.587).ln()], vec![8f64.ln(), (7.0 * about.mean).ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Heavy
    }
}

struct LomaxLaw {
    shape: f64,
    ln_shape: f64,
    scale: f64,
    ln_scale: f64,
}

impl LomaxLaw {
    fn tail_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let ln_s = self.log_survival(t);
        gradient[0] = ln_s;
        gradient[1] = self.shape * (t / (self.scale + t));
        ln_s
    }
}

impl Law for LomaxLaw {
    fn log_survival(&self, t: f64) -> f64 {
        -self.shape * (t.max(0.0) / self.scale).ln_1p()
    }

    fn log_density(&self, t: f64) -> f64 {
        if t < 0.0 {
            return f64::NEG_INFINITY;
        }
        self.ln_shape - self.ln_scale - (self.shape + 1.0) * (t / self.scale).ln_1p()
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        self.tail_gradient(t.max(0.0), gradient)
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let growth = (t / self.scale).ln_1p();
        gradient[0] = 1.0 - self.shape * growth;
        gradient[1] = (self.shape + 1.0) * (t / (self.scale + t)) - 1.0;
        self.ln_shape - self.ln_scale - (self.shape + 1.0) * growth
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.shape, self.scale]
    }

    fn mean(&self) -> f64 {
        if self.shape > 1.0 { self.scale / (self.shape - 1.0) } else { f64::INFINITY }
    }

    /// `scale/(shape-1)·(1 - (1 + t/scale)^(1-shape))`, through the limit `scale·ln(1 + t/scale)` at 1.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t == f64::INFINITY {
            return self.mean();
        }
        let growth = (t.max(0.0) / self.scale).ln_1p();
        let excess = 1.0 - self.shape;
        self.scale * growth * relative_exp_m1(excess * growth)
    }

    fn scale(&self) -> f64 {
        self.quantile(0.5)
    }

    fn quantile(&self, p: f64) -> f64 {
        quantile_of_log(p, |ln_s| self.scale * (-ln_s / self.shape).exp_m1())
    }

    /// Given survival to `t` the rest is a Lomax of the scale `scale + t`.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if t >= limit {
            return 0.0;
        }
        let scale = self.scale + t.max(0.0);
        LomaxLaw { shape: self.shape, ln_shape: self.ln_shape, scale, ln_scale: scale.ln() }
            .restricted_mean(limit - t)
    }

    fn survival_on(&self, ages: &[f64], _: &[f64], out: &mut [f64]) {
        let inverse = 1.0 / self.scale;
        for (s, t) in out.iter_mut().zip(ages) {
            *s = (-self.shape * (t * inverse).ln_1p()).exp();
        }
    }
}
