//! The incomplete gamma function at one shape: logarithms of both tails and the derivative in the shape.
//!
//! Written here because statrs 0.19 has no logarithm of the tail (0 past `x` of about 700), no derivative in the
//! shape, and recomputes `ln Γ(a)` at every call.

use statrs::function::gamma::{digamma, ln_gamma};

use super::special::HALF_LN_TWO_PI;

/// `P(a, ·)` and `Q(a, ·)` at one shape `a > 0`, everything that depends on `a` alone computed once.
///
/// Arguments are `ln x`, of which laws have the more accurate value. Relative accuracy about 1e-13 of `P`
/// where `x < 4` or `x < a`, of `Q` elsewhere; the derivative in `a` about 1e-12 of the tail. (Where `x < 4` and
/// `Q` is small all the same, which needs a shape below 1, `Q` is relative to 1e-16/Q.)
#[derive(Clone, Copy, Debug)]
pub struct UpperGamma {
    a: f64,
    ln_a: f64,
    digamma: f64,
    /// `-ln Γ(a)` for a small shape, else `½ ln(a/2π) - (Stirling's remainder)`.
    constant: f64,
}

/// From this shape on `ln Γ` is taken by Stirling's series, whose large terms cancel analytically.
const STIRLING_FROM: f64 = 12.0;

impl UpperGamma {
    /// At the shape `a > 0`.
    pub fn new(a: f64) -> UpperGamma {
        let constant = if a < STIRLING_FROM {
            -ln_gamma(a)
        } else {
            let (r, y) = (1.0 / a, 1.0 / (a * a));
            // Abramowitz & Stegun 6.1.41.
            let rest =
                r * (1.0 / 12.0 - y * (1.0 / 360.0 - y * (1.0 / 1260.0 - y * (1.0 / 1680.0 - y / 1188.0))));
            0.5 * a.ln() - HALF_LN_TWO_PI - rest
        };
        UpperGamma { a, ln_a: a.ln(), digamma: digamma(a), constant }
    }

    /// The shape.
    pub fn shape(&self) -> f64 {
        self.a
    }

    /// `ψ(a)`.
    pub fn digamma(&self) -> f64 {
        self.digamma
    }

    /// `ln(x^a e^{-x}/Γ(a))`: the density of `ln X`.
    pub fn ln_power(&self, ln_x: f64, x: f64) -> f64 {
        if self.a < STIRLING_FROM {
            return self.a * ln_x - x + self.constant;
        }
        let off = (x - self.a) / self.a;
        let ln_ratio = if off.abs() < 0.5 { off.ln_1p() } else { ln_x - self.ln_a };
        if off == f64::INFINITY { f64::NEG_INFINITY } else { self.constant - self.a * (off - ln_ratio) }
    }

    /// `ln Q(a, x)`.
    pub fn ln_upper(&self, ln_x: f64) -> f64 {
        let tail = self.tail::<false>(ln_x);
        if tail.upper { tail.ln } else { ln_complement(tail.ln) }
    }

    /// `ln P(a, x)`.
    pub fn ln_lower(&self, ln_x: f64) -> f64 {
        let tail = self.tail::<false>(ln_x);
        if tail.upper { ln_complement(tail.ln) } else { tail.ln }
    }

    /// `ln Q(a, x)`, its derivative in `a`, and its derivative in `-ln x` (the hazard of `ln X`).
    pub fn ln_upper_gradient(&self, ln_x: f64) -> (f64, f64, f64) {
        let tail = self.tail::<true>(ln_x);
        let (ln_q, slope) = if tail.upper {
            (tail.ln, tail.slope)
        } else {
            let ln_q = ln_complement(tail.ln);
            (ln_q, -tail.slope * (tail.ln - ln_q).exp())
        };
        let hazard = if tail.ln_power == f64::NEG_INFINITY { 0.0 } else { (tail.ln_power - ln_q).exp() };
        (ln_q, if ln_q == 0.0 { 0.0 } else { slope }, hazard)
    }

    fn tail<const SLOPE: bool>(&self, ln_x: f64) -> Tail {
        let x = ln_x.exp();
        let ln_power = self.ln_power(ln_x, x);
        if ln_power == f64::NEG_INFINITY {
            let upper = x > self.a;
            return Tail { upper, ln: f64::NEG_INFINITY, slope: 0.0, ln_power };
        }
        if x < SERIES_BELOW || (x < self.a && self.a < SERIES_SHAPE) {
            let (sum, weighted) = series::<SLOPE>(self.a, x);
            let slope = if SLOPE { ln_x - self.digamma - 1.0 / self.a - weighted / sum } else { 0.0 };
            return Tail { upper: false, ln: ln_power - self.ln_a + sum.ln(), slope, ln_power };
        }
        let upper = x >= self.a;
        let (sum, mean) =
            if x >= 2.0 * self.a { fraction::<SLOPE>(self.a, x) } else { ray::<SLOPE>(self.a, x, upper) };
        let slope = if SLOPE { ln_x - self.digamma + mean } else { 0.0 };
        Tail { upper, ln: ln_power + sum.ln(), slope, ln_power }
    }

    /// `Q(a, x)` at ascending `ln x`, to a relative 1e-10.
    ///
    /// From right to left `Q` grows by `∫ t^{a-1}e^{-t}dt/Γ(a)` over the step, which two-point Hermite quadrature
    /// gives from values and derivatives already at hand: one exponential per age instead of a series.
    pub fn upper_on(&self, count: usize, ln_x: impl Fn(usize) -> f64, mut put: impl FnMut(usize, f64)) {
        let mut right: Option<(Node, f64)> = None;
        for i in (0..count).rev() {
            let node = self.node(ln_x(i));
            let q = match &right {
                Some((next, q)) if node.reaches(next, self.a, *q) => (q + node.step(next)).min(1.0),
                // The density underflows first.
                _ if node.g[0] == 0.0 && node.x > self.a => 0.0,
                _ => self.ln_upper(node.u).exp(),
            };
            put(i, q);
            right = Some((node, q));
        }
    }

    /// [`UpperGamma::ln_upper_gradient`] at ascending `ln x`; the derivative in `a` to 1e-10 of the largest `Q`.
    pub fn ln_upper_gradient_on(
        &self,
        count: usize,
        ln_x: impl Fn(usize) -> f64,
        mut put: impl FnMut(usize, (f64, f64, f64)),
    ) {
        // The right neighbour, its Q, and dQ/da there.
        let mut right: Option<(Node, f64, f64)> = None;
        for i in (0..count).rev() {
            let node = self.node(ln_x(i));
            let stepped = match &right {
                Some((next, q, slope)) if node.reaches(next, self.a, *q) => {
                    let q = (q + node.step(next)).min(1.0);
                    Some((q, slope + node.tilted(self.digamma).step(&next.tilted(self.digamma))))
                }
                _ => None,
            };
            let (q, slope) = match stepped {
                Some((q, slope)) => {
                    put(i, (q.ln(), slope / q, node.g[0] / q));
                    (q, slope)
                }
                None => {
                    let (ln_q, relative, hazard) = self.ln_upper_gradient(node.u);
                    put(i, (ln_q, relative, hazard));
                    let q = ln_q.exp();
                    (q, q * relative)
                }
            };
            right = Some((node, q, slope));
        }
    }

    fn node(&self, u: f64) -> Node {
        let x = u.exp();
        let g = self.ln_power(u, x).exp();
        let c = self.a - x;
        let g = if g > 0.0 { [g, g * c, g * (c * c - x), g * (c * (c * c - 3.0 * x) - x)] } else { [0.0; 4] };
        Node { u, x, g }
    }
}

/// Below this the series for `P` is short; above it quadrature along the tail is exact to rounding.
const SERIES_BELOW: f64 = 4.0;
/// Likewise in the shape, for `x < a`.
const SERIES_SHAPE: f64 = 40.0;

struct Tail {
    /// Whether `ln` is that of `Q` (else of `P`).
    upper: bool,
    ln: f64,
    /// Derivative of `ln` in the shape.
    slope: f64,
    ln_power: f64,
}

/// The density of `ln X` and its first three derivatives at `u = ln x`.
struct Node {
    u: f64,
    x: f64,
    g: [f64; 4],
}

impl Node {
    /// Whether the step to `next` is short enough for a relative 1e-11 of what is right of it.
    fn reaches(&self, next: &Node, a: f64, q: f64) -> bool {
        let h = next.u - self.u;
        let steepness = (a - self.x).abs().max((a - next.x).abs()) + 2.0 * next.x.sqrt();
        let (squared, step) = (steepness * steepness, h * h);
        // Error of the rule: h⁹ times the eighth derivative of g, over 25401600; that is about g·(steepness⁸ + x).
        let eighth = squared * squared * squared * squared + next.x;
        let error = step * step * step * step * h * eighth * self.g[0].max(next.g[0]);
        q > 1e-300 && h >= 0.0 && error <= 2.5e-4 * q
    }

    /// `∫ g` from here to `next`.
    fn step(&self, next: &Node) -> f64 {
        let h = next.u - self.u;
        h * (0.5 * (self.g[0] + next.g[0])
            + h * (3.0 / 28.0 * (self.g[1] - next.g[1])
                + h * ((self.g[2] + next.g[2]) / 84.0 + h * (self.g[3] - next.g[3]) / 1680.0)))
    }

    /// `(u - ψ(a))·g(u)`, whose integral is the derivative of `Q` in the shape.
    fn tilted(&self, digamma: f64) -> Node {
        let v = self.u - digamma;
        let [g0, g1, g2, g3] = self.g;
        Node { u: self.u, x: self.x, g: [v * g0, v * g1 + g0, v * g2 + 2.0 * g1, v * g3 + 3.0 * g2] }
    }
}

/// `ln(1 - e^ln_p)`.
fn ln_complement(ln_p: f64) -> f64 {
    if ln_p > -std::f64::consts::LN_2 { (-ln_p.exp_m1()).ln() } else { (-ln_p.exp()).ln_1p() }
}

/// `Σ x^n/((a+1)…(a+n))` from `n = 0` (Abramowitz & Stegun 6.5.29), which is `P(a, x)·a·Γ(a)·e^x/x^a`.
pub fn rising_series(a: f64, x: f64) -> f64 {
    series::<false>(a, x).0
}

/// The series, and (if asked) the sum of its terms each times `Σ 1/(a+k)`.
fn series<const SLOPE: bool>(a: f64, x: f64) -> (f64, f64) {
    let (mut sum, mut weighted, mut term, mut harmonic, mut below) = (1.0, 0.0, 1.0, 0.0, a);
    loop {
        below += 1.0;
        let inverse = 1.0 / below;
        term *= x * inverse;
        sum += term;
        if SLOPE {
            harmonic += inverse;
            weighted += term * harmonic;
        }
        // x < below always holds from some term on, after which the terms shrink faster than a geometric series.
        if term <= sum * (f64::EPSILON * 0.1) || term.is_nan() {
            return (sum, weighted);
        }
    }
}

/// `Q(a, x)·Γ(a)/(x^a e^{-x})` for `x >= max(4, 2a)` by Legendre's continued fraction (Abramowitz & Stegun 6.5.31),
/// and (if asked) its logarithmic derivative in `a`. The number of terms, found by trial against mpmath, makes the
/// last bit right over that region.
fn fraction<const SLOPE: bool>(a: f64, x: f64) -> (f64, f64) {
    let mut n = (4.0 + (100.0 + 16.0 * a) / x).floor();
    let (mut f, mut by_a) = (x + 2.0 * n + 1.0 - a, -1.0);
    while n > 0.0 {
        let inverse = 1.0 / f;
        let part = n * (n - a) * inverse;
        if SLOPE {
            by_a = (n + part * by_a) * inverse - 1.0;
        }
        f = x + 2.0 * n - 1.0 - a - part;
        n -= 1.0;
    }
    (1.0 / f, -by_a / f)
}

/// `∫_0^∞ exp(∓…) ds` along `ln t = ln x ± s`: the tail divided by `x^a e^{-x}/Γ(a)`, and (if asked) the mean of
/// `±s` under the integrand, which is what differentiating in the shape brings down.
fn ray<const SLOPE: bool>(a: f64, x: f64, upper: bool) -> (f64, f64) {
    let sign = if upper { 1.0 } else { -1.0 };
    let slope = (x - a).abs();
    // Exponent at distance s, convex and increasing: the integrand is its negative exponential.
    let fall = |s: f64| slope * s + x * ((sign * s).exp_m1() - sign * s);
    // Where the integrand is e^-37: Newton from the quadratic that bounds (or nearly bounds) the exponent.
    let mut width = 2.0 * DEPTH / (slope + (slope * slope + 2.0 * DEPTH * x).sqrt());
    for _ in 0..2 {
        let steep = slope + x * sign * (sign * width).exp_m1();
        width += (DEPTH - fall(width)) / steep;
    }
    let (mut sum, mut moment) = (0.0, 0.0);
    for (node, weight) in GAUSS_20 {
        let s = width * node;
        let y = weight * (-fall(s)).exp();
        sum += y;
        if SLOPE {
            moment += y * s;
        }
    }
    (sum * width, sign * moment / sum)
}

/// `-ln` of what the integrand is cut at.
const DEPTH: f64 = 37.0;

/// Gauss-Legendre nodes and weights of order 20 on [0, 1], from mpmath 1.4.1 at 30 digits.
#[rustfmt::skip]
const GAUSS_20: [(f64, f64); 20] = [
    (0.003_435_700_407_452_537_7, 0.008_807_003_569_576_059),
    (0.018_014_036_361_043_102, 0.020_300_714_900_193_47),
    (0.043_882_785_874_337_05, 0.031_336_024_167_054_534),
    (0.080_441_514_088_890_58, 0.041_638_370_788_352_38),
    (0.126_834_046_769_924_6, 0.050_965_059_908_620_22),
    (0.181_973_159_636_742_5, 0.059_097_265_980_759_206),
    (0.244_566_499_024_586_44, 0.065_844_319_224_588_32),
    (0.313_146_955_642_290_2, 0.071_048_054_659_191_02),
    (0.386_107_074_429_177_47, 0.074_586_493_236_301_87),
    (0.461_736_739_433_251_33, 0.076_376_693_565_362_92),
    (0.538_263_260_566_748_7, 0.076_376_693_565_362_92),
    (0.613_892_925_570_822_5, 0.074_586_493_236_301_87),
    (0.686_853_044_357_709_8, 0.071_048_054_659_191_02),
    (0.755_433_500_975_413_5, 0.065_844_319_224_588_32),
    (0.818_026_840_363_257_5, 0.059_097_265_980_759_206),
    (0.873_165_953_230_075_4, 0.050_965_059_908_620_22),
    (0.919_558_485_911_109_4, 0.041_638_370_788_352_38),
    (0.956_117_214_125_663, 0.031_336_024_167_054_534),
    (0.981_985_963_638_956_8, 0.020_300_714_900_193_47),
    (0.996_564_299_592_547_4, 0.008_807_003_569_576_059),
];

#[cfg(test)]
mod tests {
    use super::*;

    fn same(a: f64, b: f64, relative: f64) -> bool {
        (a - b).abs() <= relative * b.abs() + 1e-40
    }

    /// `a, x, ln Q, ln P, ∂ln Q/∂a` from mpmath 1.4.1 at 50 digits.
    #[rustfmt::skip]
    const TABLE: [(f64, f64, f64, f64, f64); 19] = [
        (0.01, 4.0, -10.1620331681494, -3.860_943_568_787_213e-5, 102.125_941_224_295_99),
        (0.1, 4.5, -8.26444747845036, -0.000_257_544_326_983_416_05, 12.093_127_204_007_486),
        (3.3, 7.0, -3.180_769_067_773_723_7, -0.042_441_727_693_677_24, 1.074_524_270_394_305),
        (20.5, 41.0, -8.807_165_041_706_504, -0.000_149_668_125_970_664_77, 0.759_551_970_357_819_2),
        (20.5, 100.0, -50.816_685_890_617_386, -8.523_024_347_735_773e-23, 1.621_536_507_286_257_5),
        (100.5, 202.0, -34.593_589_770_845_84, -9.466_618_013_424_888e-16, 0.712_587_994_939_638_6),
        (60.0, 70.0, -2.278_896_404_357_140_7, -0.108_027_568_450_569_6, 0.219_840_919_022_552_3),
        (0.1, 0.05, -1.494_051_682_160_214, -0.254_197_477_553_612_6, 9.02793523585795),
        (0.5, 1.0, -1.849_605_509_933_248_2, -0.171_143_315_241_040_96, 2.478_316_780_095_961),
        (1.0, 3.0, -3.0, -0.051_069_180_942_701_59, 1.937_911_693_824_961),
        (3.0, 2.9, -0.807_518_844_812_360_6, -0.590_524_165_843_987_9, 0.539139712245061),
        (10.0, 9.5, -0.650_421_037_386_517_9, -0.737_780_642_496_724_7, 0.246_878_530_754_349_37),
        (39.0, 38.0, -0.610_646_099_941_176_8, -0.783_071_720_681_206_6, 0.117_888_101_952_565_45),
        (41.0, 39.0, -0.503_187_173_784_765_3, -0.927_858_932_274_774_8, 0.100_657_645_610_885_05),
        (41.0, 60.0, -5.525_767_803_625_882, -0.003_990_762_010_612_417, 0.434_878_646_924_567_96),
        (10000.0, 10000.0, -0.69581034030382, -0.690_491_094_401_972_3, 0.0080001895364409),
        (10000.0, 9700.0, -0.001_234_937_806_363_452_5, -6.697_352_074_748_682, 4.108_985_317_239_72e-5),
        (1000000.0, 1002000.0, -3.780_815_114_473_027, -0.0230681310714884, 0.002_371_541_510_285_659),
        (2.0, 500.0, -493.783_393_898_915_1, 0.0, 5.793_823_755_371_439),
    ];

    #[test]
    fn both_tails_and_the_slope_in_the_shape() {
        for (a, x, ln_q, ln_p, slope) in TABLE {
            let gamma = UpperGamma::new(a);
            let ln_x = x.ln();
            // For a large shape the argument's own rounding counts times √a.
            let relative = 2e-13 * (1.0 + a.sqrt());
            assert!(same(gamma.ln_upper(ln_x), ln_q, relative), "{a} {x}: Q {}", gamma.ln_upper(ln_x));
            assert!(same(gamma.ln_lower(ln_x), ln_p, relative), "{a} {x}: P {}", gamma.ln_lower(ln_x));
            let (again, by_shape, hazard) = gamma.ln_upper_gradient(ln_x);
            assert!(same(again, ln_q, relative), "{a} {x}: Q {again}");
            assert!(
                same(by_shape, slope, 1e-11 * (1.0 + a.sqrt())),
                "{a} {x}: slope {by_shape}, not {slope}"
            );
            let power = gamma.ln_power(ln_x, x);
            assert!(same(hazard, (power - ln_q).exp(), 1e-11), "{a} {x}: hazard {hazard}");
        }
    }

    /// Chi-square tails, Abramowitz & Stegun table 26.7, from memory: `Q(ν/2, χ²/2)`.
    #[test]
    fn published_chi_square_tails() {
        for (nu, chi, tail) in [(1.0, 1.0, 0.317_31), (2.0, 2.0, 0.367_88), (4.0, 4.0, 0.406_01)] {
            let q = UpperGamma::new(0.5 * nu).ln_upper(f64::ln(0.5 * chi)).exp();
            assert!((q - tail).abs() < 6e-6, "{nu} {chi}: {q}");
        }
    }
}
