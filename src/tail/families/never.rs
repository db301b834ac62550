//! A never share: a part of the waits hangs for good. METHODS.md section 3, RECIPE section 2.

use super::prelude::*;
use crate::tail::law::logistic;

/// `S = π + (1-π)·S₀` over any family `S₀`. Adds the natural parameter `never` (`π`), last; its free coordinate is
/// `z = logit π`, held in [-12, 6] (the law is flat in `z` beyond).
pub struct WithNever<F>(pub F);

/// Bounds of `z`: from 6 in a million to all but 0.25%.
const LOGIT_RANGE: (f64, f64) = (-12.0, 6.0);

/// A start at a small share, 0.7%.
const SMALL: f64 = -5.0;

impl<F: Family> Family for WithNever<F> {
    fn name(&self) -> &'static str {
        self.0.name()
    }

    fn coordinates(&self) -> Vec<Coordinate> {
        let mut coordinates = self.0.coordinates();
        coordinates.push(Coordinate::new("never", Kind::Share));
        coordinates
    }

    fn parameters(&self) -> Vec<&'static str> {
        let mut names = self.0.parameters();
        names.push("never");
        names
    }

    fn law(&self, x: &[f64]) -> Option<Box<dyn Law>> {
        let (&logit, inner) = x.split_last()?;
        if !logit.is_finite() {
            return None;
        }
        let held = logit.clamp(LOGIT_RANGE.0, LOGIT_RANGE.1);
        let never = logistic(held);
        let slope = if held == logit { 1.0 } else { 0.0 };
        Some(Box::new(NeverLaw { inner: self.0.law(inner)?, never, ending: logistic(-held), slope }))
    }

    fn free(&self, natural: &[f64]) -> Option<Vec<f64>> {
        let (&never, inner) = natural.split_last()?;
        if !(0.0..1.0).contains(&never) {
            return None;
        }
        let mut x = self.0.free(inner)?;
        x.push((never.ln() - (-never).ln_1p()).clamp(LOGIT_RANGE.0, LOGIT_RANGE.1));
        Some(x)
    }

    fn rescale(&self, x: &[f64], factor: f64) -> Vec<f64> {
        let Some((&logit, inner)) = x.split_last() else { return vec![] };
        let mut moved = self.0.rescale(inner, factor);
        moved.push(logit);
        moved
    }

    /// The inner family's, once with most of what is left at the end taken as never ending, once with hardly any.
    fn starts(&self, about: &About) -> Vec<Vec<f64>> {
        let share = (0.6 * about.left).clamp(1e-3, 0.9);
        // Waits that never end inflate exposure per event; the completions' own logarithms do not know them.
        const EULER: f64 = 0.577_215_664_901_532_9;
        let ended = About { mean: about.mean.min((about.log_mean + EULER).exp()), ..*about };
        let with = |mut x: Vec<f64>, logit: f64| {
            x.push(logit);
            x
        };
        let mut starts = vec![];
        if let Some(first) = self.0.starts(&ended).into_iter().next() {
            starts.push(with(first, (share / (1.0 - share)).ln()));
        }
        starts.extend(self.0.starts(about).into_iter().take(2).map(|x| with(x, SMALL)));
        starts
    }

    /// That of the part that ends; what never ends is a matter of [`Law::never`].
    fn weight_of_tail(&self, x: &[f64]) -> TailWeight {
        self.0.weight_of_tail(&x[..x.len().saturating_sub(1)])
    }
}

struct NeverLaw {
    inner: Box<dyn Law>,
    /// `π`.
    never: f64,
    /// `1 - π`.
    ending: f64,
    /// Derivative of the held logit in the free one: 0 beyond the bounds.
    slope: f64,
}

impl NeverLaw {
    fn ln_mix(&self, ln_inner: f64) -> f64 {
        if ln_inner > -1.0 {
            (self.ending * ln_inner.exp_m1()).ln_1p()
        } else {
            (self.never + self.ending * ln_inner.exp()).ln()
        }
    }

    /// Turns the inner gradient (all but the last entry of `row`) into that of `ln S`.
    fn mix_gradient(&self, ln_inner: f64, row: &mut [f64]) -> f64 {
        let ln_s = self.ln_mix(ln_inner);
        // Share of those still waiting that will end.
        let ends = self.ending * (ln_inner - ln_s).exp();
        if let Some((last, inner)) = row.split_last_mut() {
            for g in inner {
                *g = times(ends, *g);
            }
            *last = -self.slope * self.never * self.ending * ln_inner.exp_m1() * (-ln_s).exp();
        }
        ln_s
    }
}

impl Law for NeverLaw {
    fn log_survival(&self, t: f64) -> f64 {
        self.ln_mix(self.inner.log_survival(t))
    }

    fn log_density(&self, t: f64) -> f64 {
        self.ending.ln() + self.inner.log_density(t)
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let inner = gradient.len() - 1;
        let ln_inner = self.inner.log_survival_gradient(t, &mut gradient[..inner]);
        self.mix_gradient(ln_inner, gradient)
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let inner = gradient.len() - 1;
        let ln_f = self.inner.log_density_gradient(t, &mut gradient[..inner]);
        gradient[inner] = -self.slope * self.never;
        self.ending.ln() + ln_f
    }

    fn parameters(&self) -> Vec<f64> {
        let mut natural = self.inner.parameters();
        natural.push(self.never);
        natural
    }

    fn mean(&self) -> f64 {
        f64::INFINITY
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        if t <= 0.0 { 0.0 } else { self.never * t + self.ending * self.inner.restricted_mean(t) }
    }

    fn scale(&self) -> f64 {
        self.inner.scale()
    }

    fn never(&self) -> f64 {
        self.never
    }

    fn quantile(&self, p: f64) -> f64 {
        if p >= self.ending { f64::INFINITY } else { self.inner.quantile(p / self.ending) }
    }

    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        if t >= limit {
            return 0.0;
        }
        if limit == f64::INFINITY {
            return f64::INFINITY;
        }
        let ln_inner = self.inner.log_survival(t);
        let ends = self.ending * (ln_inner - self.ln_mix(ln_inner)).exp();
        ends * self.inner.mean_residual_life(t, limit) + (1.0 - ends) * (limit - t)
    }

    fn survival_on(&self, ages: &[f64], log_ages: &[f64], out: &mut [f64]) {
        self.inner.survival_on(ages, log_ages, out);
        for s in out {
            *s = self.never + self.ending * *s;
        }
    }

    fn log_survival_gradient_on(
        &self,
        ages: &[f64],
        logs: &[f64],
        values: &mut [f64],
        gradients: &mut [f64],
    ) {
        let width = gradients.len() / ages.len().max(1);
        let mut inner = vec![0.0; ages.len() * (width - 1)];
        self.inner.log_survival_gradient_on(ages, logs, values, &mut inner);
        for (i, (value, row)) in values.iter_mut().zip(gradients.chunks_exact_mut(width)).enumerate() {
            row[..width - 1].copy_from_slice(&inner[i * (width - 1)..(i + 1) * (width - 1)]);
            *value = self.mix_gradient(*value, row);
        }
    }

    fn survival_gradient_on(&self, ages: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        let width = gradients.len() / ages.len().max(1);
        let mut inner = vec![0.0; ages.len() * (width - 1)];
        self.inner.survival_gradient_on(ages, logs, values, &mut inner);
        let rows = gradients.chunks_exact_mut(width).zip(inner.chunks_exact((width - 1).max(1)));
        for (value, (row, inner)) in values.iter_mut().zip(rows) {
            for (g, inner) in row.iter_mut().zip(inner) {
                *g = self.ending * inner;
            }
            row[width - 1] = self.slope * self.never * self.ending * (1.0 - *value);
            *value = self.never + self.ending * *value;
        }
    }
}
