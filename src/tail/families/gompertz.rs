//! Gompertz: hazard grows exponentially with age.

use super::prelude::*;
use crate::numeric::special::scaled_exponential_integral;

/// `S(t) = exp(-shape·(e^(rate·t) - 1))`.
pub struct Gompertz;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("rate", Kind::Rate), Coordinate::new("shape", Kind::Shape)];

impl Family for Gompertz {
    fn name(&self) -> &'static str {
        "gompertz"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[ln_rate, ln_shape] = x else { return None };
        let (rate, shape) = (COORDINATES[0].natural(ln_rate)?, COORDINATES[1].natural(ln_shape)?);
        Some(Box::new(GompertzLaw { rate, shape, ln_product: ln_rate + ln_shape }))
    }

    /// Through the median and the 90% point where that is possible, and near its exponential limit.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let mut starts = vec![];
        let ratio = about.high / about.median;
        // (e^(bh) - 1)/(e^(bm) - 1) grows with b from h/m; at the two points it is ln 10/ln 2.
        let goal = std::f64::consts::LN_10 / std::f64::consts::LN_2;
        if ratio < goal {
            let (mut low, mut high) = (1e-4, 200.0);
            for _ in 0..40 {
                let b: f64 = 0.5 * (low + high);
                // Quotient of e^(bh) - 1 and e^(bm) - 1 with h counted in m, without overflow.
                let quotient = (b * (ratio - 1.0)).exp() * (-b * ratio).exp_m1() / (-b).exp_m1();
                if quotient < goal { low = b } else { high = b }
            }
            let ln_shape = (std::f64::consts::LN_2 / low.exp_m1()).ln().max(-17.0);
            starts.push(vec![(low / about.median).ln(), ln_shape]);
        }
        starts.push(vec![(0.2 / about.mean).ln(), 5f64.ln()]);
        starts
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}

struct GompertzLaw {
    rate: f64,
    shape: f64,
    /// `ln(rate·shape)`: the hazard at age 0.
    ln_product: f64,
}

impl Law for GompertzLaw {
    fn log_survival(&self, t: f64) -> f64 {
        -self.shape * (self.rate * t.max(0.0)).exp_m1()
    }

    fn log_density(&self, t: f64) -> f64 {
        if t < 0.0 { f64::NEG_INFINITY } else { self.ln_product + self.rate * t + self.log_survival(t) }
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let age = self.rate * t.max(0.0);
        let ln_s = -self.shape * age.exp_m1();
        gradient[0] = -self.shape * times(age, age.exp());
        gradient[1] = ln_s;
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let age = self.rate * t;
        let ln_s = -self.shape * age.exp_m1();
        gradient[0] = 1.0 + age - self.shape * times(age, age.exp());
        gradient[1] = 1.0 + ln_s;
        self.ln_product + age + ln_s
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.rate, self.shape]
    }

    /// `e^shape·E₁(shape)/rate`.
    fn mean(&self) -> f64 {
        scaled_exponential_integral(self.shape) / self.rate
    }

    fn scale(&self) -> f64 {
        self.quantile(0.5)
    }

    fn quantile(&self, p: f64) -> f64 {
        quantile_of_log(p, |ln_s| (-ln_s / self.shape).ln_1p() / self.rate)
    }

    /// Given survival to `t` the rest is Gompertz again, its shape `e^(rate·t)` times as large.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if t >= limit {
            return 0.0;
        }
        let rest = GompertzLaw { shape: self.shape * (self.rate * t.max(0.0)).exp(), ..*self };
        if rest.shape == f64::INFINITY { 0.0 } else { rest.restricted_mean(limit - t) }
    }
}
