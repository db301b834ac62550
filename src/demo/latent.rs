//! Latent times of the scenario: mixtures of a few shapes, drawn by inverse transform.

use crate::say;
use rand::{Rng, RngExt};
use statrs::function::erf::{erfc, erfc_inv};
use std::f64::consts::{SQRT_2, TAU};
use std::fmt;

/// One probability law on (0, ∞]; ages in s, every parameter > 0. Formulas: METHODS.md section 3.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Shape {
    /// `S = exp(-(t/scale)^shape)`; shape 1 is the exponential.
    Weibull {
        /// Hazard rises above 1, falls below.
        shape: f64,
        /// The 63.2% point, s.
        scale: f64,
    },
    /// `S = Φ(ln(median/t)/sigma)`.
    Lognormal {
        /// Median, s.
        median: f64,
        /// Standard deviation of the logarithm.
        sigma: f64,
    },
    /// `S = 1/(1 + (t/median)^shape)`.
    LogLogistic {
        /// Tail index: `S` falls like `t^-shape`.
        shape: f64,
        /// Median, s.
        median: f64,
    },
    /// Even between two ages, s; `from < upto`.
    Uniform {
        /// Least age, s.
        from: f64,
        /// Largest age, s.
        upto: f64,
    },
    /// Does not happen.
    Never,
}

impl Shape {
    /// Survival function `P(T > t)`, `t` in s.
    pub fn survival(self, t: f64) -> f64 {
        if t <= 0.0 {
            return 1.0;
        }
        match self {
            Shape::Weibull { shape, scale } => (-(t / scale).powf(shape)).exp(),
            Shape::Lognormal { median, sigma } => 0.5 * erfc((t / median).ln() / (sigma * SQRT_2)),
            Shape::LogLogistic { shape, median } => 1.0 / (1.0 + (t / median).powf(shape)),
            Shape::Uniform { from, upto } => ((upto - t) / (upto - from)).clamp(0.0, 1.0),
            Shape::Never => 1.0,
        }
    }

    /// Density, 1/s; 0 for `t <= 0`.
    pub fn density(self, t: f64) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        match self {
            Shape::Weibull { shape, scale } => {
                shape / scale * (t / scale).powf(shape - 1.0) * self.survival(t)
            }
            Shape::Lognormal { median, sigma } => {
                let z = (t / median).ln() / sigma;
                (-0.5 * z * z).exp() / (t * sigma * TAU.sqrt())
            }
            Shape::LogLogistic { shape, .. } => {
                let s = self.survival(t);
                shape / t * s * (1.0 - s)
            }
            Shape::Uniform { from, upto } if t > from && t <= upto => 1.0 / (upto - from),
            Shape::Uniform { .. } | Shape::Never => 0.0,
        }
    }

    /// The age whose survival is `s`, in (0, 1]; infinite for [`Shape::Never`].
    fn inverse_survival(self, s: f64) -> f64 {
        match self {
            Shape::Weibull { shape, scale } => scale * (-s.ln()).powf(1.0 / shape),
            Shape::Lognormal { median, sigma } => median * (sigma * SQRT_2 * erfc_inv(2.0 * s)).exp(),
            Shape::LogLogistic { shape, median } => median * ((1.0 - s) / s).powf(1.0 / shape),
            Shape::Uniform { from, upto } => upto - s * (upto - from),
            Shape::Never => f64::INFINITY,
        }
    }

    /// A typical age, s; infinite for [`Shape::Never`].
    fn scale(self) -> f64 {
        match self {
            Shape::Weibull { scale, .. } => scale,
            Shape::Lognormal { median, .. } | Shape::LogLogistic { median, .. } => median,
            Shape::Uniform { upto, .. } => upto,
            Shape::Never => f64::INFINITY,
        }
    }
}

/// A mixture: with each share, its shape. Shares are > 0 and add up to 1.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Latent(pub &'static [(f64, Shape)]);

impl Latent {
    /// Does not happen.
    pub const NEVER: Latent = Latent(&[(1.0, Shape::Never)]);

    /// Survival function `P(T > t)`, `t` in s.
    pub fn survival(self, t: f64) -> f64 {
        self.0.iter().map(|(share, shape)| share * shape.survival(t)).sum()
    }

    /// Density, 1/s.
    pub fn density(self, t: f64) -> f64 {
        self.0.iter().map(|(share, shape)| share * shape.density(t)).sum()
    }

    /// The least typical age of its shapes, s: where numerical work should start.
    pub(super) fn scale(self) -> f64 {
        self.0.iter().map(|(_, shape)| shape.scale()).fold(f64::INFINITY, f64::min)
    }

    /// Draws a time, s, with the last shape's share multiplied by `crowd` (0 to 1/share; 1 leaves the law as
    /// it is).
    pub(super) fn draw(self, crowd: f64, rng: &mut impl Rng) -> f64 {
        let pick: f64 = rng.random();
        // In (0, 1], where every inverse is defined.
        let survival = 1.0 - rng.random::<f64>();
        let Some((&(last_share, last), others)) = self.0.split_last() else { return f64::INFINITY };
        let last_share = if others.is_empty() { 1.0 } else { last_share * crowd };
        if pick < last_share {
            return last.inverse_survival(survival);
        }
        let total: f64 = others.iter().map(|(share, _)| share).sum();
        let mut left = (pick - last_share) / (1.0 - last_share) * total;
        let chosen = others.iter().find(|(share, _)| {
            left -= share;
            left < 0.0
        });
        chosen.map_or(last, |(_, shape)| *shape).inverse_survival(survival)
    }
}

impl fmt::Display for Latent {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, &(share, shape)) in self.0.iter().enumerate() {
            if i > 0 {
                f.write_str(", ")?;
            }
            if self.0.len() > 1 {
                write!(f, "{} ", say::percent(share))?;
            }
            match shape {
                Shape::Weibull { shape: 1.0, scale } => {
                    write!(f, "exponential (mean {})", say::duration(scale))
                }
                Shape::Weibull { shape, scale } => {
                    write!(f, "Weibull (shape {shape}, scale {})", say::duration(scale))
                }
                Shape::Lognormal { median, sigma } => {
                    write!(f, "lognormal (median {}, sigma {sigma})", say::duration(median))
                }
                Shape::LogLogistic { shape, median } => {
                    write!(f, "log-logistic (shape {shape}, scale {})", say::duration(median))
                }
                Shape::Uniform { from, upto } => {
                    write!(f, "even from {} to {}", say::duration(from), say::duration(upto))
                }
                Shape::Never => f.write_str("never"),
            }?;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::numeric::integrate;
    use rand::SeedableRng;
    use rand_xoshiro::Xoshiro256PlusPlus;

    const SHAPES: [Shape; 4] = [
        Shape::Weibull { shape: 2.5, scale: 3.0 },
        Shape::Lognormal { median: 2.0, sigma: 0.7 },
        Shape::LogLogistic { shape: 1.5, median: 2.0 },
        Shape::Uniform { from: 1.0, upto: 4.0 },
    ];

    #[test]
    fn survival_density_and_inverse_agree() {
        for shape in SHAPES {
            for s in [0.999, 0.7, 0.5, 0.1, 1e-4] {
                let t = shape.inverse_survival(s);
                assert!((shape.survival(t) / s - 1.0).abs() < 1e-8, "{shape:?} {s}");
            }
            let mass = integrate(&|t| shape.density(t), 1.2, 3.3, 1e-10);
            assert!((mass - (shape.survival(1.2) - shape.survival(3.3))).abs() < 1e-8, "{shape:?}");
        }
        assert_eq!(Shape::Never.inverse_survival(0.3), f64::INFINITY);
    }

    #[test]
    fn draws_follow_the_mixture() {
        let law = Latent(&[
            (0.6, Shape::Weibull { shape: 1.0, scale: 1.0 }),
            (0.1, Shape::Never),
            (0.3, Shape::LogLogistic { shape: 1.5, median: 5.0 }),
        ]);
        let n = 100_000.0;
        for (crowd, weights) in [(1.0, [0.6, 0.1, 0.3]), (2.0, [0.4 * 0.6 / 0.7, 0.4 * 0.1 / 0.7, 0.6])] {
            let mut rng = Xoshiro256PlusPlus::seed_from_u64(3);
            let drawn: Vec<f64> = (0..n as usize).map(|_| law.draw(crowd, &mut rng)).collect();
            for t in [0.5, 2.0, 10.0, 1e9] {
                let p: f64 = weights.iter().zip(law.0).map(|(w, (_, shape))| w * shape.survival(t)).sum();
                let seen = drawn.iter().filter(|&&x| x > t).count() as f64 / n;
                assert!((seen - p).abs() < 4.0 * (p * (1.0 - p) / n).sqrt(), "{crowd} {t}: {seen} {p}");
            }
        }
    }
}
