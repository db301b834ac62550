//! Laws with known truth, written out here and not taken from the library: what is tested must not judge itself.

use std::f64::consts::LN_2;

use rand::RngExt;
use rand_xoshiro::Xoshiro256PlusPlus;

/// What the two verdicts should be, where the question has an answer in the observed range.
#[derive(Clone, Copy, PartialEq, Eq, Debug)]
pub(crate) enum Trend {
    Growing,
    Shrinking,
    Flat,
    Mixed,
}

pub(crate) struct Law {
    pub(crate) name: &'static str,
    /// Latent survival function of the completion; median near 1.
    pub(crate) survival: fn(f64) -> f64,
    /// Constant hazard of failures.
    pub(crate) failing: f64,
    /// Pause after giving up, in medians.
    pub(crate) pause: f64,
    pub(crate) heavy: bool,
}

fn normal_tail(z: f64) -> f64 {
    0.5 * statrs::function::erf::erfc(z / std::f64::consts::SQRT_2)
}

fn gamma_tail(a: f64, x: f64) -> f64 {
    if x <= 0.0 { 1.0 } else { statrs::function::gamma::checked_gamma_ur(a, x).unwrap() }
}

fn lognormal(t: f64, median: f64, sigma: f64) -> f64 {
    normal_tail((t / median).ln() / sigma)
}

/// Sixteen laws: light and heavy, one bulk and two, with a share that never ends, with a least time, with failures, and one
/// that is in no fitted family (Fréchet).
pub(crate) const LAWS: [Law; 16] = [
    Law { name: "exponential", survival: |t| (-LN_2 * t).exp(), failing: 0.0, pause: 0.2, heavy: false },
    Law {
        name: "weibull 0.5",
        survival: |t| (-LN_2 * t.sqrt()).exp(),
        failing: 0.0,
        pause: 0.2,
        heavy: true,
    },
    Law { name: "weibull 2", survival: |t| (-LN_2 * t * t).exp(), failing: 0.0, pause: 0.3, heavy: false },
    Law {
        name: "gamma 0.5",
        survival: |t| gamma_tail(0.5, 0.227_468 * t),
        failing: 0.0,
        pause: 0.2,
        heavy: false,
    },
    Law {
        name: "gamma 3",
        survival: |t| gamma_tail(3.0, 2.674_060 * t),
        failing: 0.0,
        pause: 0.3,
        heavy: false,
    },
    Law {
        name: "lognormal 0.6",
        survival: |t| lognormal(t, 1.0, 0.6),
        failing: 0.0,
        pause: 0.1,
        heavy: true,
    },
    Law { name: "lognormal 1", survival: |t| lognormal(t, 1.0, 1.0), failing: 0.0, pause: 0.1, heavy: true },
    Law { name: "lognormal 2", survival: |t| lognormal(t, 1.0, 2.0), failing: 0.0, pause: 0.3, heavy: true },
    Law {
        name: "log-logistic 1.5",
        survival: |t| 1.0 / (1.0 + t.powf(1.5)),
        failing: 0.0,
        pause: 0.2,
        heavy: true,
    },
    Law {
        name: "lomax 1.5",
        survival: |t| (1.0 + 0.587_401 * t).powf(-1.5),
        failing: 0.0,
        pause: 0.2,
        heavy: true,
    },
    Law {
        name: "hyperexponential",
        survival: |t| 0.7 * (-1.2 * t).exp() + 0.3 * (-0.08 * t).exp(),
        failing: 0.0,
        pause: 0.2,
        heavy: false,
    },
    Law {
        name: "two lognormals",
        survival: |t| 0.8 * lognormal(t, 0.8, 0.4) + 0.2 * lognormal(t, 20.0, 0.5),
        failing: 0.0,
        pause: 0.3,
        heavy: true,
    },
    Law {
        name: "gamma 4, 8% never",
        survival: |t| 0.08 + 0.92 * gamma_tail(4.0, 3.672_061 * t),
        failing: 0.0,
        pause: 0.3,
        heavy: true,
    },
    Law {
        name: "shifted lognormal 0.8",
        survival: |t| if t <= 0.4 { 1.0 } else { lognormal(t - 0.4, 0.6, 0.8) },
        failing: 0.0,
        pause: 0.1,
        heavy: true,
    },
    Law {
        name: "lognormal 1.2, failures",
        survival: |t| lognormal(t, 1.0, 1.2),
        failing: 0.1,
        pause: 0.2,
        heavy: true,
    },
    Law {
        name: "frechet 2",
        survival: |t| -(-LN_2 / (t * t)).exp_m1(),
        failing: 0.0,
        pause: 0.2,
        heavy: true,
    },
];

/// Ages searched, in medians.
pub(crate) const FLOOR: f64 = 0.05;
pub(crate) const CEILING: f64 = 60.0;

impl Law {
    /// Latent quantile of the completion; infinite where the never share is drawn.
    fn quantile(&self, u: f64) -> f64 {
        let (mut low, mut high) = (1e-9_f64.ln(), 1e12_f64.ln());
        if (self.survival)(high.exp()) > 1.0 - u {
            return f64::INFINITY;
        }
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if (self.survival)(middle.exp()) > 1.0 - u { low = middle } else { high = middle }
        }
        low.exp()
    }

    /// Time to completion and to failure of one attempt; either may be infinite.
    pub(crate) fn draw(&self, rng: &mut Xoshiro256PlusPlus) -> (f64, f64) {
        let done = self.quantile(rng.random::<f64>());
        let failed =
            if self.failing > 0.0 { -(1.0 - rng.random::<f64>()).ln() / self.failing } else { f64::INFINITY };
        (done, failed)
    }

    /// Age by which this share of attempts has ended.
    pub(crate) fn point(&self, share: f64) -> f64 {
        let (mut low, mut high) = (1e-9_f64.ln(), 1e9_f64.ln());
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            let t = middle.exp();
            if (self.survival)(t) * (-self.failing * t).exp() > 1.0 - share {
                low = middle
            } else {
                high = middle
            }
        }
        low.exp()
    }

    /// Whether the mean residual life rises, falls, stays or does both between the 0.1% point and the 99% point, or
    /// `upto` where that comes first: by more than 8% of its running extreme. `None` where 5% and 12% would answer
    /// otherwise, and with a never share, which no mean residual life has: there the question has no clear answer.
    pub(crate) fn trend(&self, upto: f64) -> Option<Trend> {
        let both = |t: f64| (self.survival)(t) * (-self.failing * t).exp();
        if both(1e9) > 1e-3 {
            return None;
        }
        const STEPS: usize = 4_000;
        let (first, last) = (self.point(0.001), self.point(0.99).min(upto));
        let age = |i: usize| first * ((1e8 / first).ln() * i as f64 / STEPS as f64).exp();
        // Backwards, so that what lies ahead is a sum.
        let (mut ahead, mut values) = (0.0, Vec::new());
        for i in (0..STEPS).rev() {
            ahead += 0.5 * (both(age(i)) + both(age(i + 1))) * (age(i + 1) - age(i));
            if age(i) <= last {
                values.push(ahead / both(age(i)));
            }
        }
        values.reverse();
        let answer = |change: f64| {
            let (mut least, mut most, mut rise, mut fall) = (f64::INFINITY, 0.0_f64, 0.0_f64, 0.0_f64);
            for &e in &values {
                (least, most) = (least.min(e), most.max(e));
                (rise, fall) = (rise.max(e / least - 1.0), fall.max(1.0 - e / most));
            }
            match (rise > change, fall > change) {
                (true, true) => Trend::Mixed,
                (true, false) => Trend::Growing,
                (false, true) => Trend::Shrinking,
                (false, false) => Trend::Flat,
            }
        };
        (answer(0.05) == answer(0.12)).then(|| answer(0.08))
    }

    /// True reward rate on a fine grid of give-up times (worth 1, no pause but after giving up), by the trapezoid
    /// rule: the definition of METHODS.md section 5 and nothing else.
    pub(crate) fn truth(&self) -> Truth {
        const STEPS: usize = 6_000;
        let first = FLOOR * 1e-3;
        let ratio = (CEILING / first).ln() / STEPS as f64;
        let mut ages = Vec::with_capacity(STEPS + 1);
        let mut rates = Vec::with_capacity(STEPS + 1);
        let (mut age, mut s, mut area) = (0.0, 1.0, 0.0);
        for i in 0..=STEPS {
            let t = first * (ratio * i as f64).exp();
            let next = (self.survival)(t) * (-self.failing * t).exp();
            area += 0.5 * (s + next) * (t - age);
            (age, s) = (t, next);
            if t >= FLOOR * (1.0 - 1e-12) {
                let failed = self.failing * area;
                ages.push(t);
                rates.push((1.0 - s - failed) / (area + self.pause * s));
            }
        }
        let best = rates.iter().copied().fold(0.0, f64::max);
        Truth { ages, rates, best }
    }
}

pub(crate) struct Truth {
    pub(crate) ages: Vec<f64>,
    pub(crate) rates: Vec<f64>,
    pub(crate) best: f64,
}

impl Truth {
    /// Share of the best rate lost by giving up at `t`.
    pub(crate) fn regret(&self, t: f64) -> f64 {
        let i = self.ages.partition_point(|&a| a < t).clamp(1, self.ages.len() - 1);
        let part = ((t - self.ages[i - 1]) / (self.ages[i] - self.ages[i - 1])).clamp(0.0, 1.0);
        1.0 - (self.rates[i - 1] + part * (self.rates[i] - self.rates[i - 1])) / self.best
    }

    /// The best give-up time.
    pub(crate) fn optimum(&self) -> f64 {
        let i = (0..self.rates.len()).max_by(|&a, &b| self.rates[a].total_cmp(&self.rates[b])).unwrap_or(0);
        self.ages[i]
    }
}
