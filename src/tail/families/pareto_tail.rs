//! Generalised Pareto tail: what excesses over a high threshold look like, whatever the body (Pickands 1975).

use super::prelude::*;

/// Of a wait that has outlived `threshold` (s, fixed): `S(t) = (1 + xi·(t - threshold)/sigma)^(-1/xi)`, through
/// `exp(-(t - threshold)/sigma)` at `xi = 0`; for `xi < 0` it ends at `threshold - sigma/xi`.
///
/// 1 up to the threshold. The natural parameter `threshold` comes last and is no free coordinate.
pub struct ParetoTail {
    /// Where the tail begins, s.
    pub threshold: f64,
}

const COORDINATES: [Coordinate; 2] =
    [Coordinate::new("xi", Kind::Index), Coordinate::new("sigma", Kind::Scale)];

impl Family for ParetoTail {
    fn name(&self) -> &'static str {
        "pareto_tail"
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        COORDINATES.to_vec()
    }

    fn parameters(&self) -> Vec<&'static str> {
        vec!["xi", "sigma", "threshold"]
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let &[xi, ln_sigma] = x else { return None };
        let (xi, sigma) = (COORDINATES[0].natural(xi)?, COORDINATES[1].natural(ln_sigma)?);
        Some(Box::new(ParetoTailLaw { xi, sigma, ln_sigma, threshold: self.threshold.max(0.0) }))
    }

    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        let &[xi, sigma, threshold] = natural else { return None };
        if threshold != self.threshold.max(0.0) {
            return None;
        }
        Some(vec![COORDINATES[0].free(xi)?, COORDINATES[1].free(sigma)?])
    }

    /// From the excesses' mean and median: exponential, a power tail, a finite end.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let left = |t: f64| (t - self.threshold.max(0.0)).max(0.1 * t);
        let (mean, median, high) = (left(about.mean), left(about.median), left(about.high));
        vec![
            vec![0.1, (median / 0.72).ln()],
            // S(median) = 1/2 at xi = 1/2.
            vec![0.5, (median / 0.828).ln()],
            vec![-0.2, (0.2 * high.max(mean) * 2.0).ln()],
        ]
    }

    fn weight_of_tail(&self, x: &[f64]) -> TailWeight {
        if x[0] > 0.0 { TailWeight::Heavy } else { TailWeight::Light }
    }
}

struct ParetoTailLaw {
    xi: f64,
    sigma: f64,
    ln_sigma: f64,
    threshold: f64,
}

impl ParetoTailLaw {
    /// Excess in units of `sigma`.
    fn excess(&self, t: f64) -> f64 {
        ((t - self.threshold) / self.sigma).max(0.0)
    }

    /// Cumulative hazard `ln(1 + xi·q)/xi`, infinite past a finite end.
    fn hazard_sum(&self, q: f64) -> f64 {
        let y = self.xi * q;
        if y <= -1.0 { f64::INFINITY } else { q * relative_ln_1p(y) }
    }

    /// The hazard sum's derivatives in `xi` and in `-ln sigma`; 0 past a finite end, where there is none.
    fn slopes(&self, q: f64) -> (f64, f64) {
        let y = self.xi * q;
        if y <= -1.0 { (0.0, 0.0) } else { (q * q * relative_ln_1p_slope(y), q / (1.0 + y)) }
    }
}

impl Law for ParetoTailLaw {
    fn log_survival(&self, t: f64) -> f64 {
        -self.hazard_sum(self.excess(t))
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= self.threshold {
            return f64::NEG_INFINITY;
        }
        let q = self.excess(t);
        if self.xi * q <= -1.0 {
            return f64::NEG_INFINITY;
        }
        -self.ln_sigma - self.hazard_sum(q) - (self.xi * q).ln_1p()
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let q = self.excess(t);
        let (by_xi, by_sigma) = self.slopes(q);
        gradient[0] = -by_xi;
        gradient[1] = by_sigma;
        -self.hazard_sum(q)
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let ln_f = self.log_density(t);
        if ln_f == f64::NEG_INFINITY {
            gradient.fill(0.0);
            return ln_f;
        }
        let (by_xi, by_sigma) = self.slopes(self.excess(t));
        gradient[0] = -by_xi - by_sigma;
        gradient[1] = (1.0 + self.xi) * by_sigma - 1.0;
        ln_f
    }

    fn parameters(&self) -> Vec<f64> {
        vec![self.xi, self.sigma, self.threshold]
    }

    fn mean(&self) -> f64 {
        if self.xi < 1.0 { self.threshold + self.sigma / (1.0 - self.xi) } else { f64::INFINITY }
    }

    /// `threshold + sigma/(1-xi)·(1 - (1 + xi·q)^(1-1/xi))`, through its limits at `xi` 0 and 1.
    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= self.threshold {
            return t.max(0.0);
        }
        if t == f64::INFINITY {
            return self.mean();
        }
        let sum = self.hazard_sum(self.excess(t));
        if sum == f64::INFINITY {
            return self.mean();
        }
        // ∫_0^H e^((xi-1)h) dh over the cumulative hazard h.
        self.threshold + self.sigma * sum * relative_exp_m1((self.xi - 1.0) * sum)
    }

    fn scale(&self) -> f64 {
        self.quantile(0.5)
    }

    fn quantile(&self, p: f64) -> f64 {
        if p <= 0.0 {
            return 0.0;
        }
        if p >= 1.0 && self.xi < 0.0 {
            return self.threshold - self.sigma / self.xi;
        }
        quantile_of_log(p, |ln_s| self.threshold - self.sigma * ln_s * relative_exp_m1(-self.xi * ln_s))
    }

    /// Past the threshold the rest is a tail again, of `sigma + xi·(t - threshold)`.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if t >= limit {
            return 0.0;
        }
        if t <= self.threshold {
            return self.restricted_mean(limit) - t.max(0.0);
        }
        let sigma = self.sigma + self.xi * (t - self.threshold);
        if sigma <= 0.0 {
            return 0.0;
        }
        ParetoTailLaw { xi: self.xi, sigma, ln_sigma: sigma.ln(), threshold: 0.0 }.restricted_mean(limit - t)
    }
}

/// `ln(1 + y)/y`, 1 at 0.
fn relative_ln_1p(y: f64) -> f64 {
    if y == 0.0 { 1.0 } else { y.ln_1p() / y }
}

/// Slope of [`relative_ln_1p`]: `(y/(1+y) - ln(1+y))/y²`, near 0 by its series `-1/2 + 2y/3 - 3y²/4 …`.
fn relative_ln_1p_slope(y: f64) -> f64 {
    if y.abs() > 0.04 {
        return (y / (1.0 + y) - y.ln_1p()) / (y * y);
    }
    -(1..=10).rev().fold(0.0, |sum, n| {
        let n = f64::from(n);
        n / (n + 1.0) - y * sum
    })
}
