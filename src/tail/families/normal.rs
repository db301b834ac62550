//! Normal cut at 0: waits around a typical length, hazard rising without bound; exponential in the limit of a
//! very negative `mu`.

use super::prelude::*;
use crate::numeric::integrate;
use crate::numeric::special::{HALF_LN_TWO_PI, ln_normal_tail, mills, mills_deficit, normal_tail};

/// `S(t) = Φ((mu - t)/sigma)/Φ(mu/sigma)`.
pub struct Normal;

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("mu", Kind::Location), Coordinate::new("sigma", Kind::Scale)];

/// Largest `-mu/sigma`: there the law is exponential to 1e-10.
const MAX_CUT: f64 = 1e5;

impl Family for Normal {
    fn name(&self) -> &'static str {
        "normal"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        boxed(NormalLaw::new(x))
    }

    /// A bell around the median, and half-way to the exponential.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        // The 10% and 90% points of a bell lie 2.563 standard deviations apart.
        let sigma = ((about.high - about.low) / 2.563).max(0.02 * about.median);
        vec![vec![about.median, sigma.ln()], vec![-4.0 * about.mean, (2.2 * about.mean).ln()]]
    }

    fn weight_of_tail(&self, _: &[f64]) -> TailWeight {
        TailWeight::Light
    }
}

struct NormalLaw {
    mu: f64,
    sigma: f64,
    ln_sigma: f64,
    /// Where age 0 lies: `-mu/sigma`.
    cut: f64,
    ln_kept: f64,
    /// `φ(cut)/Φ(-cut)`.
    pull: f64,
    ln_mills: f64,
}

impl NormalLaw {
    fn new(x: &[f64]) -> Option<NormalLaw> {
        let &[mu, ln_sigma] = x else { return None };
        let (mu, sigma) = (COORDINATES[0].natural(mu)?, COORDINATES[1].natural(ln_sigma)?);
        let cut = -mu / sigma;
        if !(cut.abs() < 1e150 && cut <= MAX_CUT) {
            return None;
        }
        let ln_kept = ln_normal_tail(cut);
        // Below the cut the normal's density underflows before its mass matters.
        let ln_mills = ln_kept + 0.5 * cut * cut + HALF_LN_TWO_PI;
        let ln_mills = if cut > 0.0 { mills(cut).ln() } else { ln_mills };
        Some(NormalLaw { mu, sigma, ln_sigma, cut, ln_kept, pull: (-ln_mills).exp(), ln_mills })
    }

    /// `ln S` at `z` standard deviations from `mu`, with `y = t/sigma = z - cut`.
    fn ln_tail(&self, z: f64, y: f64) -> f64 {
        let ln_s = if self.cut > 0.0 {
            // The squares cancel; what is left is a ratio of Mills ratios.
            -y * (self.cut + 0.5 * y) + mills(z).ln() - self.ln_mills
        } else {
            ln_normal_tail(z) - self.ln_kept
        };
        ln_s.min(0.0)
    }

    /// `∫_t^∞ S / S(t)` at `z`: `sigma·(1/mills(z) - z)`.
    fn residual(&self, z: f64) -> f64 {
        if z < -8.0 { -self.sigma * z } else { self.sigma * mills_deficit(z) / mills(z) }
    }
}

impl Law for NormalLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        let y = t / self.sigma;
        self.ln_tail(self.cut + y, y)
    }

    fn log_density(&self, t: f64) -> f64 {
        if t < 0.0 {
            return f64::NEG_INFINITY;
        }
        let y = t / self.sigma;
        if self.cut > 0.0 {
            -y * (self.cut + 0.5 * y) - self.ln_sigma - self.ln_mills
        } else {
            let z = self.cut + y;
            -0.5 * z * z - HALF_LN_TWO_PI - self.ln_sigma - self.ln_kept
        }
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let t = t.max(0.0);
        let y = t / self.sigma;
        let z = self.cut + y;
        let ln_s = self.ln_tail(z, y);
        let pull = if z > -38.0 { 1.0 / mills(z) } else { 0.0 };
        gradient[0] = (pull - self.pull) / self.sigma;
        gradient[1] = times(pull, z) - times(self.pull, self.cut);
        ln_s
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let y = t / self.sigma;
        let z = self.cut + y;
        gradient[0] = (z - self.pull) / self.sigma;
        gradient[1] = z * z - 1.0 - times(self.pull, self.cut);
        self.log_density(t)
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.mu, self.sigma]
    }

    fn mean(&self) -> f64 {
        self.residual(self.cut)
    }

    /// `mean - S(t)·e(t)`; by quadrature where that is a small difference.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let mean = self.mean();
        let area = mean - self.survival(t) * self.residual(self.cut + t / self.sigma);
        if area > 0.1 * mean { area } else { integrate(&|u| self.survival(u), 0.0, t, AREA_TOLERANCE) }
    }

    fn scale(&self) -> f64 {
        // Between the exponential's and the bell's.
        self.mean()
    }

    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if limit == f64::INFINITY && t >= 0.0 {
            return self.residual(self.cut + t / self.sigma);
        }
        residual_by_quadrature(self, t, limit)
    }

    fn survival_on(&self, ages: &[f64], _: &[f64], out: &mut [f64]) {
        let per_sigma = 1.0 / self.sigma;
        if self.cut > 0.0 {
            for (s, t) in out.iter_mut().zip(ages) {
                let y = t * per_sigma;
                *s = ((-y * (self.cut + 0.5 * y)).exp() * mills(self.cut + y) * self.pull).min(1.0);
            }
        } else {
            let per_kept = (-self.ln_kept).exp();
            for (s, t) in out.iter_mut().zip(ages) {
                *s = (normal_tail(self.cut + t * per_sigma) * per_kept).min(1.0);
            }
        }
    }
}
