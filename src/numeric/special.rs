//! Special functions in the form survival work needs them: logarithms of tails, never 0 by underflow.
//!
//! `erfc` is libm's, true to the last bit: that of statrs 0.19 is off by 1e-10 and jumps by as much at the seams of
//! its pieces, which the difference of two nearby tails (the mass of a narrow cell) does not forgive.

use std::f64::consts::{FRAC_1_SQRT_2, PI};

use libm::erfc;

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

/// `e^x E₁(x)` for `x > 0`: series below 1 (Abramowitz & Stegun 5.1.11), continued fraction above (5.1.22).
pub fn scaled_exponential_integral(x: f64) -> f64 {
    const EULER: f64 = 0.577_215_664_901_532_9;
    if x < 1.0 {
        let (mut sum, mut term) = (0.0, 1.0);
        for n in 1..=25 {
            let n = f64::from(n);
            term *= -x / n;
            sum -= term / n;
        }
        return x.exp() * (sum - EULER - x.ln());
    }
    // Lentz's evaluation of 1/(x + 1 - 1/(x + 3 - 4/(x + 5 - …))).
    let mut b = x + 1.0;
    let (mut c, mut d) = (1e300, 1.0 / b);
    let mut value = d;
    for n in 1..=300 {
        let a = -f64::from(n * n);
        b += 2.0;
        d = 1.0 / (a * d + b);
        c = b + a / c;
        value *= c * d;
        if (c * d - 1.0).abs() < 1e-16 {
            break;
        }
    }
    value
}

#[cfg(test)]
mod tests {
    use super::*;

    fn same(a: f64, b: f64) -> bool {
        (a - b).abs() <= 4e-14 * b.abs()
    }

    /// From mpmath 1.4.1.
    #[test]
    #[rustfmt::skip]
    #[allow(clippy::approx_constant)]
    fn normal_tails() {
        for (z, ln_tail) in [
            (-40.0, 0.0),
            (-8.0, -6.220_960_574_271_786e-16),
            (-1.0, -0.172_753_779_023_449_88),
            (0.0, -0.693_147_180_559_945_3),
            (1.0, -1.841_021_645_009_263_6),
            (3.0, -6.607_726_221_510_349),
            (10.0, -53.231_285_150_512_47),
            (15.9, -130.094_174_808_884_82),
            (16.1, -133.306_579_162_303_73),
            (37.0, -689.030_585_576_890_6),
            (40.0, -804.608_442_013_753_8),
            (1000.0, -500_007.826_694_812_16),
        ] {
            assert!(same(ln_normal_tail(z), ln_tail), "{z}: {}", ln_normal_tail(z));
            if z > -6.0 {
                assert!(same(mills(z).ln() + ln_normal_density(z), ln_tail), "{z}: {}", mills(z));
            }
        }
    }

    /// Abramowitz & Stegun table 26.1, from memory.
    #[test]
    fn published_normal_tails() {
        for (z, tail) in
            [(1.0, 0.158_655_253_931_46), (2.0, 0.022_750_131_948_18), (3.0, 0.001_349_898_031_63)]
        {
            assert!((normal_tail(z) - tail).abs() < 1e-14, "{z}");
        }
    }

    #[test]
    fn mills_deficit_is_smooth_where_the_series_takes_over() {
        for z in [15.9_f64, 15.999_999, 16.0, 16.1] {
            let deficit = mills_deficit(z);
            let y = 1.0 / (z * z);
            let series = y * (1.0 - 3.0 * y * (1.0 - 5.0 * y * (1.0 - 7.0 * y * (1.0 - 9.0 * y))));
            assert!((deficit / series - 1.0).abs() < 1e-8, "{z}: {deficit} {series}");
        }
    }

    /// From mpmath 1.4.1; at 1, Abramowitz & Stegun table 5.1 has E₁ = 0.219383934 (from memory).
    #[test]
    #[rustfmt::skip]
    fn exponential_integral() {
        for (x, scaled) in [
            (1e-08, 17.843_465_267_485_485),
            (0.01, 4.078_511_443_456_426),
            (0.5, 0.922_910_632_483_730_5),
            (0.999, 0.596_751_313_368_685_8),
            (1.0, 0.596_347_362_323_194_1),
            (2.0, 0.361_328_616_888_222_6),
            (10.0, 0.091_563_333_939_788_08),
            (500.0, 0.001_996_015_904_760_411),
        ] {
            assert!(same(scaled_exponential_integral(x), scaled), "{x}: {}", scaled_exponential_integral(x));
        }
        assert!((scaled_exponential_integral(1.0) * (-1.0f64).exp() - 0.219_383_934).abs() < 1e-9);
    }

    #[test]
    fn softplus_at_both_ends() {
        assert_eq!(softplus(800.0), 800.0);
        assert!(same(softplus(-50.0), (-50.0f64).exp()));
        assert!(same(softplus(0.0), std::f64::consts::LN_2));
    }
}
