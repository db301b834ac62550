//! Inverse Gaussian: the first time a drifting random walk reaches a level. Hazard rises, then falls to
//! `lambda/(2 mu²)`. Chhikara & Folks, *The Inverse Gaussian Distribution*, 1989.

use super::prelude::*;
use crate::numeric::special::{HALF_LN_TWO_PI, ln_normal_tail, mills, mills_deficit, normal_tail};

/// With `r = √(lambda/t)`, `a = r(t/mu - 1)`, `b = r(t/mu + 1)`: `S(t) = Φ(-a) - e^(2 lambda/mu)·Φ(-b)`.
pub struct InverseGaussian;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("mu", Kind::Scale), Coordinate::new("lambda", Kind::Scale)];

impl Family for InverseGaussian {
    fn name(&self) -> &'static str {
        "inverse_gaussian"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[ln_mu, ln_lambda] = x else { return None };
        let (mu, lambda) = (COORDINATES[0].natural(ln_mu)?, COORDINATES[1].natural(ln_lambda)?);
        // Further apart the law is a point, or has all its mass at 0, as far as doubles can tell.
        let concentration = lambda / mu;
        if !(1e-8..=1e8).contains(&concentration) {
            return None;
        }
        Some(Box::new(InverseGaussianLaw { mu, lambda, ln_lambda, concentration }))
    }

    /// Mean as it is, spread as that of a lognormal: `mu/lambda = e^(sd²) - 1`; and a plain one.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let spread = (about.log_sd * about.log_sd).exp_m1().clamp(1e-4, 1e3);
        let mu = about.mean.ln();
        vec![vec![mu, mu - spread.ln()], vec![mu, about.median.ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}

struct InverseGaussianLaw {
    mu: f64,
    lambda: f64,
    ln_lambda: f64,
    /// `lambda/mu`.
    concentration: f64,
}

impl InverseGaussianLaw {
    /// `(r, a, b, t/mu)`.
    fn at(&self, t: f64) -> (f64, f64, f64, f64) {
        let r = (self.lambda / t).sqrt();
        let q = t / self.mu;
        (r, r * (q - 1.0), r * (q + 1.0), q)
    }

    /// `e^(2 lambda/mu)·Φ(-b)`.
    fn reflected(&self, b: f64) -> f64 {
        (2.0 * self.concentration + ln_normal_tail(b)).exp()
    }

    /// `ln S`.
    fn ln_tail(&self, r: f64, a: f64, b: f64) -> f64 {
        if a < 0.0 {
            return (-normal_tail(-a) - self.reflected(b)).ln_1p();
        }
        // Since φ(a) = e^(2 lambda/mu)·φ(b), S = φ(a)·(M(a) - M(b)) with the Mills ratio M.
        let difference = if r < 0.25 { mills_step(a, b) } else { mills(a) - mills(b) };
        -0.5 * a * a - HALF_LN_TWO_PI + difference.ln()
    }
}

impl Law for InverseGaussianLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        let (r, a, b, _) = self.at(t);
        self.ln_tail(r, a, b)
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return f64::NEG_INFINITY;
        }
        let (_, a, _, _) = self.at(t);
        0.5 * self.ln_lambda - 1.5 * t.ln() - HALF_LN_TWO_PI - 0.5 * a * a
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= 0.0 {
            gradient.fill(0.0);
            return 0.0;
        }
        let (r, a, b, _) = self.at(t);
        let ln_s = self.ln_tail(r, a, b);
        // φ(a)/S, the common factor of both derivatives.
        let pull = (-0.5 * a * a - HALF_LN_TWO_PI - ln_s).exp();
        let reflected = 2.0 * self.concentration * mills(b);
        gradient[0] = times(pull, reflected);
        gradient[1] = times(pull, r - reflected);
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let (r, a, _, q) = self.at(t);
        gradient[0] = a * r * q;
        gradient[1] = 0.5 - 0.5 * a * a;
        0.5 * self.ln_lambda - 1.5 * t.ln() - HALF_LN_TWO_PI - 0.5 * a * a
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.mu, self.lambda]
    }

    fn mean(&self) -> f64 {
        self.mu
    }

    /// `t·S(t) + mu·(Φ(a) - e^(2 lambda/mu)·Φ(-b))`, integrating `S` by parts.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mu;
        }
        let (r, a, b, _) = self.at(t);
        t * self.ln_tail(r, a, b).exp() + self.mu * (normal_tail(-a) - self.reflected(b)).max(0.0)
    }

    fn scale(&self) -> f64 {
        // A bulk near mu when concentrated, else near the mode lambda/3.
        self.mu.min(self.lambda)
    }

    fn survival_on(&self, ages: &[f64], _: &[f64], out: &mut [f64]) {
        let doubled = (2.0 * self.concentration).exp();
        for (s, &t) in out.iter_mut().zip(ages) {
            let (r, a, b, _) = self.at(t);
            // The definition, unless it overflows or cancels more than three digits.
            let whole = normal_tail(a);
            *s = if self.concentration < 100.0 { whole - doubled * normal_tail(b) } else { 0.0 };
            if *s < 1e-3 * whole || *s < 1e-200 {
                *s = self.ln_tail(r, a, b).exp();
            }
        }
    }
}

/// `M(a) - M(b)` for a small step `b - a`, of the Mills ratio `M` whose slope is `zM(z) - 1`: 5-point Gauss rule.
fn mills_step(a: f64, b: f64) -> f64 {
    // Abramowitz & Stegun, table 25.4.
    const RULE: [(f64, f64); 3] = [
        (0.0, 0.568_888_888_888_888_9),
        (0.538_469_310_105_683_1, 0.478_628_670_499_366_47),
        (0.906_179_845_938_664, 0.236_926_885_056_189_08),
    ];
    let (middle, half) = (0.5 * (a + b), 0.5 * (b - a));
    let sides = RULE[1..].iter().map(|&(node, weight)| {
        weight * (mills_deficit(middle - half * node) + mills_deficit(middle + half * node))
    });
    half * (RULE[0].1 * mills_deficit(middle) + sides.sum::<f64>())
}
