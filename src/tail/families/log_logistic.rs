//! Log-logistic: the odds of having ended grow as a power of age. Hazard falls, or humps for a shape above 1.

use super::burr::BurrLaw;
use super::prelude::*;

/// `S(t) = 1/(1 + (t/scale)^shape)`.
pub struct LogLogistic;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("shape", Kind::Shape), Coordinate::new("scale", Kind::Scale)];

impl Family for LogLogistic {
    fn name(&self) -> &'static str {
        "log_logistic"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[ln_shape, ln_scale] = x else { return None };
        let shape = COORDINATES[0].natural(ln_shape)?;
        COORDINATES[1].natural(ln_scale)?;
        Some(Box::new(LogLogisticLaw(BurrLaw::log_logistic(shape, ln_shape, ln_scale))))
    }

    /// Moments of `ln T`: mean `ln scale`, standard deviation `π/(√3·shape)`.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        vec![vec![(std::f64::consts::PI / (3f64.sqrt() * about.log_sd)).ln(), about.median.ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Heavy
    }
}

/// The Burr law whose `k` is 1.
struct LogLogisticLaw(BurrLaw);

impl Law for LogLogisticLaw {
    fn log_survival(&self, t: f64) -> f64 {
        self.0.log_survival(t)
    }

    fn log_density(&self, t: f64) -> f64 {
        self.0.log_density(t)
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        let (ln_s, [shape, _, scale]) = self.0.tail(t.ln());
        gradient.copy_from_slice(&[shape, scale]);
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let (ln_f, [shape, _, scale]) = self.0.body(t.ln());
        gradient.copy_from_slice(&[shape, scale]);
        ln_f
    }

    fn parameters(&self) -> Vec<f64> {
        let natural = self.0.parameters();
        vec![natural[0], natural[2]]
    }

    fn mean(&self) -> f64 {
        self.0.mean()
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        self.0.restricted_mean(t)
    }

    fn scale(&self) -> f64 {
        self.0.scale()
    }

    fn quantile(&self, p: f64) -> f64 {
        self.0.quantile(p)
    }

    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        self.0.mean_residual_life(t, limit)
    }

    fn survival_on(&self, _: &[f64], log_ages: &[f64], out: &mut [f64]) {
        for (s, &u) in out.iter_mut().zip(log_ages) {
            *s = 1.0 / (1.0 + self.0.w(u).exp());
        }
    }

    fn survival_gradient_on(&self, _: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        let shape = self.0.parameters()[0];
        for ((value, row), &u) in values.iter_mut().zip(gradients.chunks_exact_mut(2)).zip(logs) {
            let w = self.0.w(u);
            let s = 1.0 / (1.0 + w.exp());
            let slope = s * (1.0 - s);
            row[0] = -times(slope, w);
            row[1] = slope * shape;
            *value = s;
        }
    }
}
