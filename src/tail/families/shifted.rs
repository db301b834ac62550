//! A shift: a least service time before which nothing ends. METHODS.md section 3, RECIPE section 2.

use super::prelude::*;

/// Any family, begun at the age `shift` (s, at least 0, fixed: not searched). Adds the natural parameter `shift`,
/// last, which counts as one for AIC and BIC, but no free coordinate.
pub struct Shifted<F> {
    /// What the wait beyond the shift follows.
    pub inner: F,
    /// The least age, s.
    pub shift: f64,
}

impl<F: Family> Family for Shifted<F> {
    fn name(&self) -> &'static str {
        self.inner.name()
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        self.inner.coordinates()
    }

    fn parameters(&self) -> Vec<&'static str> {
        let mut names = self.inner.parameters();
        names.push("shift");
        names
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        Some(Box::new(ShiftedLaw { inner: self.inner.law(x)?, shift: self.shift.max(0.0) }))
    }

    /// `None` too when the last parameter is not this family's own shift.
    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        let (&shift, inner) = natural.split_last()?;
        if shift == self.shift.max(0.0) { self.inner.free(inner) } else { None }
    }

    fn rescale(&self, x: &[f64], factor: f64) -> Vec<f64> {
        self.inner.rescale(x, factor)
    }

    /// The inner family's for the sample moved to the left; its spread in logarithms grows by the move.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        // Never move a point below a tenth of itself: rough facts may lie left of the shift.
        let left = |t: f64| (t - self.shift.max(0.0)).max(0.1 * t);
        let (low, median, high) = (left(about.low), left(about.median), left(about.high));
        let stretch = (high.ln() - low.ln()) / (about.high.ln() - about.low.ln()).max(0.05);
        let moved = About {
            mean: left(about.mean),
            low,
            median,
            high,
            log_mean: about.log_mean + (median.ln() - about.median.ln()),
            log_sd: about.log_sd * stretch.clamp(1.0, 20.0),
            left: about.left,
        };
        self.inner.starts(&moved)
    }

    fn weight_of_tail(&self, x: &[f64]) -> TailWeight {
        self.inner.weight_of_tail(x)
    }
}

struct ShiftedLaw {
    inner: Box<dyn Law>,
    shift: f64,
}

impl ShiftedLaw {
    /// Index of the first age beyond the shift, and the ages from there on counted from it, with logarithms.
    fn beyond(&self, ages: &[f64]) -> (usize, Vec<f64>, Vec<f64>) {
        let first = ages.partition_point(|&t| t <= self.shift);
        let moved: Vec<f64> = ages[first..].iter().map(|t| t - self.shift).collect();
        let logs = moved.iter().map(|t| t.ln()).collect();
        (first, moved, logs)
    }
}

impl Law for ShiftedLaw {
    fn log_survival(&self, t: f64) -> f64 {
        if t <= self.shift { 0.0 } else { self.inner.log_survival(t - self.shift) }
    }

    fn log_density(&self, t: f64) -> f64 {
        if t <= self.shift { f64::NEG_INFINITY } else { self.inner.log_density(t - self.shift) }
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= self.shift {
            gradient.fill(0.0);
            return 0.0;
        }
        self.inner.log_survival_gradient(t - self.shift, gradient)
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        if t <= self.shift {
            gradient.fill(0.0);
            return f64::NEG_INFINITY;
        }
        self.inner.log_density_gradient(t - self.shift, gradient)
    }

    fn parameters(&self) -> Vec<f64> {
        let mut natural = self.inner.parameters();
        natural.push(self.shift);
        natural
    }

    fn mean(&self) -> f64 {
        self.shift + self.inner.mean()
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= self.shift { t.max(0.0) } else { self.shift + self.inner.restricted_mean(t - self.shift) }
    }

    fn scale(&self) -> f64 {
        self.shift + self.inner.scale()
    }

    fn never(&self) -> f64 {
        self.inner.never()
    }

    fn quantile(&self, p: f64) -> f64 {
        if p <= 0.0 { 0.0 } else { self.shift + self.inner.quantile(p) }
    }

    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if t >= limit {
            return 0.0;
        }
        let beyond = (t - self.shift).max(0.0);
        let before = (self.shift.min(limit) - t.max(0.0)).max(0.0);
        before + self.inner.mean_residual_life(beyond, (limit - self.shift).max(0.0))
    }

    fn survival_on(&self, ages: &[f64], _: &[f64], out: &mut [f64]) {
        let (first, ages, logs) = self.beyond(ages);
        out[..first].fill(1.0);
        self.inner.survival_on(&ages, &logs, &mut out[first..]);
    }

    fn log_survival_gradient_on(&self, ages: &[f64], _: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        let width = gradients.len() / ages.len().max(1);
        let (first, ages, logs) = self.beyond(ages);
        values[..first].fill(0.0);
        gradients[..first * width].fill(0.0);
        self.inner.log_survival_gradient_on(
            &ages,
            &logs,
            &mut values[first..],
            &mut gradients[first * width..],
        );
    }

    fn survival_gradient_on(&self, ages: &[f64], _: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        let width = gradients.len() / ages.len().max(1);
        let (first, ages, logs) = self.beyond(ages);
        values[..first].fill(1.0);
        gradients[..first * width].fill(0.0);
        let (values, gradients) = (&mut values[first..], &mut gradients[first * width..]);
        self.inner.survival_gradient_on(&ages, &logs, values, gradients);
    }
}
