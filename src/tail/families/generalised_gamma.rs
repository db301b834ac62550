//! Generalised gamma (Stacy 1962): a gamma raised to a power. Holds the exponential, Weibull and gamma, and the
//! lognormal as a limit.

use statrs::function::gamma::ln_gamma;

use super::gamma::shape_of_log_sd;
use super::prelude::*;
use crate::numeric::UpperGamma;

/// `S(t) = Q(d/p, (t/a)^p)`: `a` a scale, `d` the power of age near 0, `p` that in the tail.
pub struct GeneralisedGamma;

const COORDINATES: [Coordinate; 3] =
    [Coordinate::new("a", Kind::Scale), Coordinate::new("d", Kind::Shape), Coordinate::new("p", Kind::Shape)];

impl Family for GeneralisedGamma {
    fn name(&self) -> &'static str {
        "generalised_gamma"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[ln_a, ln_d, ln_p] = x else { return None };
        COORDINATES[0].natural(ln_a)?;
        let (d, p) = (COORDINATES[1].natural(ln_d)?, COORDINATES[2].natural(ln_p)?);
        let shape = COORDINATES[1].natural(ln_d - ln_p)?;
        Some(Box::new(GeneralisedGammaLaw { tail: UpperGamma::new(shape), shape, ln_a, d, p, ln_p }))
    }

    /// A Weibull, a gamma, and one on the way to the lognormal, each by the moments of `ln T`.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let (place, sd) = (about.log_mean, about.log_sd);
        // In ln T = ln a + ln X/p the shape of X sets both moments of ln X.
        let of_shape = |shape: f64| {
            let p = (1.0 / shape + 0.5 / (shape * shape)).sqrt() / sd;
            let mean_ln_x = statrs::function::gamma::digamma(shape);
            vec![place - mean_ln_x / p, (shape * p).ln(), p.ln()]
        };
        vec![of_shape(1.0), of_shape(shape_of_log_sd(sd)), of_shape(12.0)]
    }

    fn weight_of_tail(&self, x: &[f64]) -> TailWeight {
        if x[2] < 0.0 { TailWeight::Heavy } else { TailWeight::Light }
    }
}

struct GeneralisedGammaLaw {
    tail: UpperGamma,
    /// `d/p`.
    shape: f64,
    ln_a: f64,
    d: f64,
    p: f64,
    ln_p: f64,
}

impl GeneralisedGammaLaw {
    /// `ln (t/a)^p`.
    fn ln_x(&self, ln_t: f64) -> f64 {
        self.p * (ln_t - self.ln_a)
    }

    fn slopes(&self, ln_x: f64, slope: f64, hazard: f64, gradient: &mut [f64]) {
        gradient[0] = self.p * hazard;
        gradient[1] = self.shape * slope;
        gradient[2] = -self.shape * slope - times(hazard, ln_x);
    }

    /// `ln E[T] = ln a + ln Γ(shape + 1/p) - ln Γ(shape)`.
    fn ln_mean(&self) -> f64 {
        self.ln_a + ln_gamma(self.shape + 1.0 / self.p) - ln_gamma(self.shape)
    }
}

impl Law for GeneralisedGammaLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 { 0.0 } else { self.tail.ln_upper(self.ln_x(t.ln())) }
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return f64::NEG_INFINITY;
        }
        let u = t.ln();
        let ln_x = self.ln_x(u);
        self.ln_p + self.tail.ln_power(ln_x, ln_x.exp()) - u
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        let ln_x = self.ln_x(t.ln());
        let (ln_s, slope, hazard) = self.tail.ln_upper_gradient(ln_x);
        self.slopes(ln_x, slope, hazard, gradient);
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let u = t.ln();
        let ln_x = self.ln_x(u);
        let x = ln_x.exp();
        let by_shape = self.shape * (ln_x - self.tail.digamma());
        gradient[0] = self.p * (x - self.shape);
        gradient[1] = by_shape;
        gradient[2] = 1.0 - by_shape + times(ln_x, self.shape - x);
        self.ln_p + self.tail.ln_power(ln_x, x) - u
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.ln_a.exp(), self.d, self.p]
    }

    /// `a·Γ((d+1)/p)/Γ(d/p)`.
    fn mean(&self) -> f64 {
        self.ln_mean().exp()
    }

    /// `t·S(t) + mean·P((d+1)/p, (t/a)^p)`.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let ln_x = self.ln_x(t.ln());
        let ended = UpperGamma::new(self.shape + 1.0 / self.p).ln_lower(ln_x);
        t * self.tail.ln_upper(ln_x).exp() + (self.ln_mean() + ended).exp()
    }

    fn scale(&self) -> f64 {
        // ln X has mean ψ(shape).
        (self.ln_a + self.tail.digamma() / self.p).clamp(-690.0, 690.0).exp()
    }

    fn survival_on(&self, _: &[f64], log_ages: &[f64], out: &mut [f64]) {
        self.tail.upper_on(log_ages.len(), |i| self.ln_x(log_ages[i]), |i, s| out[i] = s);
    }

    fn log_survival_gradient_on(&self, _: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        let mut put = |i: usize, (ln_s, slope, hazard): (f64, f64, f64)| {
            values[i] = ln_s;
            self.slopes(self.ln_x(logs[i]), slope, hazard, &mut gradients[3 * i..3 * i + 3]);
        };
        self.tail.ln_upper_gradient_on(logs.len(), |i| self.ln_x(logs[i]), &mut put);
    }
}
