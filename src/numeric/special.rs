//! Special functions in the form survival work needs them: logarithms of tails, never 0 by underflow.
//!
//! [`statrs`] supplies `erfc`, `ln Γ` and digamma. Written here is what it lacks: logarithms past the underflow
//! of `erfc`, and the incomplete gamma function with its derivative in the shape.

use std::f64::consts::{FRAC_1_SQRT_2, PI};

use statrs::function::erf::erfc;

/// `½ ln 2π`.
pub const HALF_LN_TWO_PI: f64 = 0.918_938_533_204_672_8;

/// From here on the asymptotic series of the Mills ratio is exact to double precision.
const MILLS_SERIES_FROM: f64 = 16.0;

/// `ln P(Z > z)` of a standard normal `Z`, for any `z`; `-z²/2 - …` beyond the underflow of `erfc`.
pub fn ln_normal_tail(z: f64) -> f64 {
    if z < -1.0 {
        (-0.5 * erfc(-z * FRAC_1_SQRT_2)).ln_1p()
    } else if z < MILLS_SERIES_FROM {
        (0.5 * erfc(z * FRAC_1_SQRT_2)).ln()
    } else {
        -0.5 * z * z - HALF_LN_TWO_PI + mills_series(z).ln()
    }
}

/// `ln φ(z)`, the logarithm of the standard normal density.
pub fn ln_normal_density(z: f64) -> f64 {
    -0.5 * z * z - HALF_LN_TWO_PI
}

/// Mills ratio `P(Z > z)/φ(z)`; infinite below about -38.
pub fn mills(z: f64) -> f64 {
    if z < MILLS_SERIES_FROM {
        0.5 * erfc(z * FRAC_1_SQRT_2) * (2.0 * PI).sqrt() * (0.5 * z * z).exp()
    } else {
        mills_series(z)
    }
}

/// `1 - z·mills(z)`, without the cancellation at large `z` (where it is about `1/z²`).
pub fn mills_deficit(z: f64) -> f64 {
    if z < MILLS_SERIES_FROM { 1.0 - z * mills(z) } else { -asymptotic(z, 0.0) }
}

fn mills_series(z: f64) -> f64 {
    asymptotic(z, 1.0) / z
}

/// `1 - 1/z² + 3/z⁴ - 15/z⁶ …` (Abramowitz & Stegun 26.2.12), the leading 1 replaced by `first`, sign kept so
/// that `first = 0` gives the rest alone.
fn asymptotic(z: f64, first: f64) -> f64 {
    let y = 1.0 / (z * z);
    let mut sum = 0.0;
    for n in (1..=9).rev() {
        sum = -f64::from(2 * n - 1) * y * (1.0 + sum);
    }
    first + sum
}

/// `ln(1 + e^x)` without overflow.
pub fn softplus(x: f64) -> f64 {
    if x > 0.0 { x + (-x).exp().ln_1p() } else { x.exp().ln_1p() }
}

/// `P(Z > z)`; 0 past the underflow at about 38.
pub fn normal_tail(z: f64) -> f64 {
    0.5 * erfc(z * FRAC_1_SQRT_2)
}
