//! Adaptive Gauss-Kronrod quadrature.

/// Nodes of the 15-point Kronrod rule on [0, 1] side, outermost first; every second is a Gauss node.
/// Kronrod 1965; values as tabulated in QUADPACK (Piessens et al. 1983), routine QK15.
const NODES: [f64; 8] = [
    0.991_455_371_120_812_6,
    0.949_107_912_342_758_5,
    0.864_864_423_359_769_1,
    0.741_531_185_599_394_4,
    0.586_087_235_467_691_1,
    0.405_845_151_377_397_2,
    0.207_784_955_007_898_47,
    0.0,
];
const KRONROD: [f64; 8] = [
    0.022_935_322_010_529_224,
    0.063_092_092_629_978_55,
    0.104_790_010_322_250_18,
    0.140_653_259_715_525_92,
    0.169_004_726_639_267_9,
    0.190_350_578_064_785_41,
    0.204_432_940_075_298_89,
    0.209_482_141_084_727_83,
];
const GAUSS: [f64; 4] =
    [0.129_484_966_168_869_7, 0.279_705_391_489_276_64, 0.381_830_050_505_118_9, 0.417_959_183_673_469_4];

/// Deepest halving of the interval. A singular end costs one level per factor of two, so this is generous.
const MAX_DEPTH: u32 = 100;

/// Most halvings in all: a function that is noise at the scale of the tolerance must not be halved for ever.
const MAX_HALVINGS: u32 = 10_000;

/// No tolerance is tighter than what rounding leaves of the difference of two rules.
const TIGHTEST: f64 = 1e-14;

/// `∫_a^b f`, to a relative error of about `tolerance` of the integral of `|f|`.
///
/// `a <= b`, both finite; `f` finite inside (the ends are never evaluated, so an integrable singularity
/// there is allowed). A piece stops once its error is small against the whole integral or against the piece
/// itself, or when it has been halved 100 times, or has no width left, or 10,000 halvings are used up; its estimate is
/// then taken as it is.
pub fn integrate(f: &dyn Fn(f64) -> f64, a: f64, b: f64, tolerance: f64) -> f64 {
    if a >= b {
        return 0.0;
    }
    let whole = panel(f, a, b);
    let tolerance = tolerance.max(TIGHTEST);
    let mut rule = Rule { f, tolerance, allowed: tolerance * whole.size, halvings: MAX_HALVINGS };
    rule.refine(a, b, whole, MAX_DEPTH)
}

struct Rule<'a> {
    f: &'a dyn Fn(f64) -> f64,
    tolerance: f64,
    /// Error that no piece needs to go below.
    allowed: f64,
    halvings: u32,
}

#[derive(Clone, Copy)]
struct Panel {
    value: f64,
    size: f64,
    error: f64,
}

impl Rule<'_> {
    fn refine(&mut self, a: f64, b: f64, whole: Panel, depth: u32) -> f64 {
        let middle = 0.5 * (a + b);
        // Also relative to what the piece turned out to hold, so that a peak missed at first tightens nothing.
        if whole.error <= self.allowed.max(self.tolerance * whole.size)
            || depth == 0
            || self.halvings == 0
            || middle <= a
            || middle >= b
        {
            return whole.value;
        }
        self.halvings -= 1;
        let (left, right) = (panel(self.f, a, middle), panel(self.f, middle, b));
        self.allowed = self.allowed.max(0.1 * self.tolerance * (left.size + right.size));
        self.refine(a, middle, left, depth - 1) + self.refine(middle, b, right, depth - 1)
    }
}

fn panel(f: &dyn Fn(f64) -> f64, a: f64, b: f64) -> Panel {
    let (centre, half) = (0.5 * (a + b), 0.5 * (b - a));
    let middle = f(centre);
    let (mut kronrod, mut size, mut gauss) =
        (middle * KRONROD[7], middle.abs() * KRONROD[7], middle * GAUSS[3]);
    for (i, &node) in NODES[..7].iter().enumerate() {
        let (low, high) = (f(centre - half * node), f(centre + half * node));
        kronrod += KRONROD[i] * (low + high);
        size += KRONROD[i] * (low.abs() + high.abs());
        if i % 2 == 1 {
            gauss += GAUSS[i / 2] * (low + high);
        }
    }
    Panel { value: kronrod * half, size: size * half, error: ((kronrod - gauss) * half).abs() }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn closed_forms() {
        assert!((integrate(&|x| x.exp(), 0.0, 1.0, 1e-12) - 1.0_f64.exp_m1()).abs() < 1e-14);
        assert!((integrate(&|x| 1.0 / x.sqrt(), 0.0, 1.0, 1e-11) - 2.0).abs() < 1e-9);
        let peak = integrate(&|x| (-(x - 0.3_f64).powi(2) / 2e-6).exp(), 0.0, 1.0, 1e-12);
        assert!((peak - (2.0 * std::f64::consts::PI * 1e-6).sqrt()).abs() < 1e-12, "{peak}");
        assert_eq!(integrate(&|x| x, 1.0, 1.0, 1e-10), 0.0);
        // A peak that the first panel misses, and noise that no halving smooths: both end, the first in the truth.
        let needle = |x: f64| (-((x - 0.300_123) / 1e-5_f64).powi(2)).exp();
        let found = integrate(&|x| needle(x), 0.3, 0.3003, 1e-12);
        assert!((found - 1e-5 * std::f64::consts::PI.sqrt()).abs() < 1e-15, "{found}");
        let noise = integrate(&|x| 1.0 + 1e-3 * (1e9 * x).sin(), 0.0, 1.0, 1e-13);
        assert!((noise - 1.0).abs() < 1e-3);
    }
}
