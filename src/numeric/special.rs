//! Special functions in the form survival work needs them: logarithms of tails, never 0 by underflow.
//!
//! `erfc` is true to the last digits: that of statrs 0.19 is off by 1e-10 and jumps by as much at the seams of
//! its pieces, which the difference of two nearby tails (the mass of a narrow cell) does not forgive.

use std::f64::consts::{FRAC_1_SQRT_2, FRAC_2_SQRT_PI, PI};

use statrs::function::gamma::checked_gamma_ur;

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

/// Upper tail `P(X > x)` of the chi-squared law of so many degrees of freedom (> 0); NaN for NaN.
pub fn chi_squared_tail(x: f64, degrees: f64) -> f64 {
    // At 0, where half of `x` is 0, and at infinity it has no answer.
    let tail = checked_gamma_ur(0.5 * degrees, 0.5 * x);
    tail.map_or(if x <= 1.0 { 1.0 } else { 0.0 }, |tail| tail.clamp(0.0, 1.0))
}

/// `ln(1 + e^x)` without overflow.
pub fn softplus(x: f64) -> f64 {
    if x > 0.0 { x + (-x).exp().ln_1p() } else { x.exp().ln_1p() }
}

/// `2/√π ∫_x^∞ e^(-u²) du`, by the rational approximations of Cody (1969, *Mathematics of Computation* 23:631), each good to
/// 1e-18; what is left is the rounding of `x²`, `x² 2^-53`. A third of the time that libm takes for the last bit.
#[allow(clippy::excessive_precision)]
fn erfc(x: f64) -> f64 {
    /// The last coefficients lead; that of the denominator is 1.
    fn ratio<const N: usize>(x: f64, above: [f64; N], below: [f64; N]) -> f64 {
        let (mut top, mut bottom) = (0.0, 0.0);
        for (a, b) in above.into_iter().zip(below) {
            (top, bottom) = (top * x + a, bottom * x + b);
        }
        top / bottom
    }
    let y = x.abs();
    if y <= 0.468_75 {
        let above = [
            1.857_777_061_846_031_53e-1,
            3.161_123_743_870_565_60,
            1.138_641_541_510_501_56e2,
            3.774_852_376_853_020_21e2,
            3.209_377_589_138_469_47e3,
        ];
        let below = [
            1.0,
            2.360_129_095_234_412_09e1,
            2.440_246_379_344_441_73e2,
            1.282_616_526_077_372_28e3,
            2.844_236_833_439_170_62e3,
        ];
        return 1.0 - x * ratio(x * x, above, below);
    }
    let scaled = if y <= 4.0 {
        let above = [
            2.153_115_354_744_038_46e-8,
            5.641_884_969_886_700_89e-1,
            8.883_149_794_388_375_94,
            6.611_919_063_714_162_95e1,
            2.986_351_381_974_001_31e2,
            8.819_522_212_417_690_90e2,
            1.712_047_612_634_070_58e3,
            2.051_078_377_826_071_47e3,
            1.230_339_354_797_997_25e3,
        ];
        let below = [
            1.0,
            1.574_492_611_070_983_47e1,
            1.176_939_508_913_124_99e2,
            5.371_811_018_620_098_58e2,
            1.621_389_574_566_690_19e3,
            3.290_799_235_733_459_63e3,
            4.362_619_090_143_247_16e3,
            3.439_367_674_143_721_64e3,
            1.230_339_354_803_749_42e3,
        ];
        ratio(y, above, below)
    } else {
        let above = [
            1.631_538_713_730_209_78e-2,
            3.053_266_349_612_323_44e-1,
            3.603_448_999_498_044_39e-1,
            1.257_817_261_112_292_46e-1,
            1.608_378_514_874_227_66e-2,
            6.587_491_615_298_378_03e-4,
        ];
        let below = [
            1.0,
            2.568_520_192_289_822_42,
            1.872_952_849_923_467_25,
            5.279_051_029_514_284_12e-1,
            6.051_834_131_244_131_91e-2,
            2.335_204_976_268_691_85e-3,
        ];
        let z = 1.0 / (y * y);
        (0.5 * FRAC_2_SQRT_PI - z * ratio(z, above, below)) / y
    };
    let tail = scaled * (-y * y).exp();
    if x < 0.0 { 2.0 - tail } else { tail }
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
    /// Upper 5% points (NIST/SEMATECH e-Handbook of Statistical Methods, section 1.3.6.7.4), and the ends.
    #[test]
    fn chi_squared_tails() {
        assert!((chi_squared_tail(3.841, 1.0) - 0.05).abs() < 1e-4);
        assert!((chi_squared_tail(11.070, 5.0) - 0.05).abs() < 1e-4);
        for (x, tail) in
            [(-1.0, 1.0), (0.0, 1.0), (5e-324, 1.0), (1e5, 0.0), (f64::MAX, 0.0), (f64::INFINITY, 0.0)]
        {
            assert_eq!(chi_squared_tail(x, 1.0), tail, "{x}");
        }
        assert!(chi_squared_tail(f64::NAN, 1.0).is_nan());
    }

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

    /// libm's is true to the last bit.
    #[test]
    fn erfc_against_libm() {
        for i in -60_000..=270_000 {
            let x = f64::from(i) * 1e-4 + 1.3e-5;
            let (ours, theirs) = (erfc(x), libm::erfc(x));
            let rounding = (4.0 + x.max(0.0) * x) * f64::EPSILON;
            assert!((ours - theirs).abs() <= rounding * theirs + f64::MIN_POSITIVE, "{x}: {ours} {theirs}");
        }
        assert_eq!((erfc(f64::INFINITY), erfc(f64::NEG_INFINITY)), (0.0, 2.0));
        assert!(erfc(f64::NAN).is_nan());
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
