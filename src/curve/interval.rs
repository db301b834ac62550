//! Confidence intervals that keep to the range of what they bound.

use statrs::function::erf::erfc_inv;

/// Highest level honoured; beyond it an interval says nothing that its range does not.
const MAX_LEVEL: f64 = 1.0 - 1e-12;

/// A two-sided interval, `low <= high`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ConfidenceInterval {
    /// Lower end.
    pub low: f64,
    /// Upper end.
    pub high: f64,
}

impl ConfidenceInterval {
    /// `value ± z · error`, cut to `[floor, ceiling]`.
    pub(super) fn plain(value: f64, error: f64, level: f64, floor: f64, ceiling: f64) -> ConfidenceInterval {
        let reach = quantile(level) * error;
        ConfidenceInterval {
            low: (value - reach).clamp(floor, ceiling),
            high: (value + reach).clamp(floor, ceiling),
        }
    }

    /// On the log scale, for a positive value: `value · exp(±z · error / value)`.
    pub(super) fn log(value: f64, error: f64, level: f64) -> ConfidenceInterval {
        let factor = (quantile(level) * error / value).min(700.0).exp();
        ConfidenceInterval { low: value / factor, high: value * factor }
    }

    /// On the log(-log) scale, for a probability `p` strictly between 0 and 1 with the standard error `error`
    /// of `ln p` (Kalbfleisch & Prentice 2002, section 1.4): `p^{exp(±z · error / |ln p|)}`.
    pub(super) fn log_log(p: f64, error: f64, level: f64) -> ConfidenceInterval {
        let log = p.ln();
        let factor = (quantile(level) * error / -log).min(700.0).exp();
        ConfidenceInterval { low: (log * factor).exp(), high: (log / factor).exp() }
    }

    /// The point between two intervals, each end by itself: `share` of the way from `self` to `next`.
    pub(super) fn towards(self, next: ConfidenceInterval, share: f64) -> ConfidenceInterval {
        ConfidenceInterval {
            low: self.low + share * (next.low - self.low),
            high: self.high + share * (next.high - self.high),
        }
    }

    /// Whether the value lies inside, ends included.
    pub fn contains(&self, value: f64) -> bool {
        self.low <= value && value <= self.high
    }
}

/// Least probability of an outcome that none of `n` independent trials missed (Clopper & Pearson 1934, the
/// case of no failure): `(α/2)^{1/n}`; 0 for `n = 0`.
pub(super) fn least_when_all(n: f64, level: f64) -> f64 {
    if n > 0.0 { ((0.5 * (1.0 - bounded(level))).ln() / n).exp() } else { 0.0 }
}

/// The `1 - α/2` quantile of the standard normal law, for an interval of level `1 - α`.
fn quantile(level: f64) -> f64 {
    std::f64::consts::SQRT_2 * erfc_inv(1.0 - bounded(level))
}

/// The level, brought into `[0, 1)`; 0 for NaN.
fn bounded(level: f64) -> f64 {
    if level > 0.0 { level.min(MAX_LEVEL) } else { 0.0 }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn quantiles_and_rule_of_three() {
        // NIST/SEMATECH e-Handbook, section 1.3.6.7.1: the upper 2.5% point is 1.960, the upper 0.5% point 2.576.
        assert!((quantile(0.95) - 1.959_963_984_540_054).abs() < 1e-12);
        assert!((quantile(0.99) - 2.575_829_303_548_901).abs() < 1e-12);
        assert!((least_when_all(100.0, 0.9) - 0.05f64.powf(0.01)).abs() < 1e-15);
        for level in [-1.0, 0.0, 1.0, 7.0, f64::NAN] {
            assert!(quantile(level).is_finite(), "{level}");
        }
    }

    #[test]
    fn ends_stay_in_range() {
        for p in [1e-300, 1e-9, 0.5, 1.0 - 1e-12] {
            for error in [0.0, 1e-3, 1e6] {
                let i = ConfidenceInterval::log_log(p, error, 0.95);
                assert!(0.0 <= i.low && i.low <= i.high && i.high <= 1.0, "{p} {error} {i:?}");
            }
        }
    }
}
