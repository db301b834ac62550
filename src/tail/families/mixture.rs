//! Finite mixtures of laws of one kind: `S = Σ pᵢ Sᵢ`.

use super::prelude::*;

/// `N` laws with their shares. Free coordinates: `ln(pᵢ/p_N)` for `i < N`, then those of each part in turn.
pub(crate) struct Mixture<L, const N: usize> {
    parts: [L; N],
    shares: [f64; N],
    ln_shares: [f64; N],
    /// Parts in the order in which they are reported.
    order: [usize; N],
}

impl<L: Law, const N: usize> Mixture<L, N> {
    /// `rank` orders the parts for the report, least first; the free coordinates know no order.
    pub(crate) fn new(
        x: &[f64],
        part: impl Fn(&[f64]) -> Option<L>,
        rank: impl Fn(&L) -> f64,
    ) -> Option<Mixture<L, N>> {
        let (odds, rest) = x.split_at_checked(N - 1)?;
        if !odds.iter().all(|z| z.abs() <= 700.0) || rest.len() % N != 0 {
            return None;
        }
        let mut ln_shares = [0.0; N];
        ln_shares[..N - 1].copy_from_slice(odds);
        let total = ln_sum(&ln_shares);
        ln_shares.iter_mut().for_each(|l| *l -= total);
        let parts: Vec<L> = rest.chunks_exact(rest.len() / N).map(part).collect::<Option<_>>()?;
        let parts: [L; N] = parts.try_into().ok()?;
        let mut order: [usize; N] = std::array::from_fn(|i| i);
        order.sort_by(|&i, &j| rank(&parts[i]).total_cmp(&rank(&parts[j])));
        Some(Mixture { parts, shares: ln_shares.map(f64::exp), ln_shares, order })
    }

    /// Turns the parts' own gradients (already in `gradient`) into the mixture's.
    fn combine(&self, logs: [f64; N], gradient: &mut [f64]) -> f64 {
        let (total, weights) = ln_sum_and_weights(&logs);
        let (odds, rest) = gradient.split_at_mut(N - 1);
        let width = rest.len() / N;
        for (i, own) in rest.chunks_exact_mut(width).enumerate() {
            for g in own {
                *g = times(weights[i], *g);
            }
            if i < N - 1 {
                odds[i] = if total == f64::NEG_INFINITY { 0.0 } else { weights[i] - self.shares[i] };
            }
        }
        total
    }

    fn logs(&self, each: impl Fn(&L) -> f64) -> [f64; N] {
        std::array::from_fn(|i| self.ln_shares[i] + each(&self.parts[i]))
    }

    fn logs_with(&self, gradient: &mut [f64], each: impl Fn(&L, &mut [f64]) -> f64) -> [f64; N] {
        let own = &mut gradient[N - 1..];
        let width = own.len() / N;
        std::array::from_fn(|i| {
            self.ln_shares[i] + each(&self.parts[i], &mut own[i * width..(i + 1) * width])
        })
    }

    fn average(&self, each: impl Fn(&L) -> f64) -> f64 {
        self.parts.iter().zip(self.shares).map(|(part, share)| times(share, each(part))).sum()
    }
}

impl<L: Law, const N: usize> Law for Mixture<L, N> {
    fn log_survival(&self, t: f64) -> f64 {
        ln_sum(&self.logs(|part| part.log_survival(t))).min(0.0)
    }

    fn log_density(&self, t: f64) -> f64 {
        ln_sum(&self.logs(|part| part.log_density(t)))
    }

    fn log_survival_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let logs = self.logs_with(gradient, |part, own| part.log_survival_gradient(t, own));
        self.combine(logs, gradient).min(0.0)
    }

    fn log_density_gradient(&self, t: f64, gradient: &mut [f64]) -> f64 {
        let logs = self.logs_with(gradient, |part, own| part.log_density_gradient(t, own));
        self.combine(logs, gradient)
    }

    /// The first `N - 1` shares, then the parts' own parameters, both in the reported order.
    fn parameters(&self) -> Vec<f64> {
        let shares = self.order.iter().take(N - 1).map(|&i| self.shares[i]);
        shares.chain(self.order.iter().flat_map(|&i| self.parts[i].parameters())).collect()
    }

    fn mean(&self) -> f64 {
        self.average(|part| part.mean())
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        self.average(|part| part.restricted_mean(t))
    }

    /// The weighted geometric mean of the parts'.
    fn scale(&self) -> f64 {
        self.average(|part| part.scale().ln()).exp()
    }

    /// The parts' own, weighted by what is left of each at `t`.
    fn mean_residual_life(&self, t: f64, limit: f64) -> f64 {
        let (_, left) = ln_sum_and_weights(&self.logs(|part| part.log_survival(t)));
        self.parts.iter().zip(left).map(|(part, w)| times(w, part.mean_residual_life(t, limit))).sum()
    }

    fn survival_on(&self, ages: &[f64], log_ages: &[f64], out: &mut [f64]) {
        self.parts[0].survival_on(ages, log_ages, out);
        out.iter_mut().for_each(|s| *s *= self.shares[0]);
        let mut own = vec![0.0; out.len()];
        for (part, share) in self.parts.iter().zip(self.shares).skip(1) {
            part.survival_on(ages, log_ages, &mut own);
            for (s, own) in out.iter_mut().zip(&own) {
                *s += share * own;
            }
        }
        // The shares add up to 1 but for rounding.
        out.iter_mut().for_each(|s| *s = s.min(1.0));
    }

    fn log_survival_gradient_on(
        &self,
        ages: &[f64],
        logs: &[f64],
        values: &mut [f64],
        gradients: &mut [f64],
    ) {
        let count = ages.len();
        let width = gradients.len() / count.max(1);
        let own = (width - (N - 1)) / N;
        let mut part_values = vec![0.0; N * count];
        let mut part_rows = vec![0.0; N * count * own];
        for (i, part) in self.parts.iter().enumerate() {
            part.log_survival_gradient_on(
                ages,
                logs,
                &mut part_values[i * count..(i + 1) * count],
                &mut part_rows[i * count * own..(i + 1) * count * own],
            );
        }
        for (j, (value, row)) in values.iter_mut().zip(gradients.chunks_exact_mut(width)).enumerate() {
            for i in 0..N {
                let from = (i * count + j) * own;
                row[N - 1 + i * own..N - 1 + (i + 1) * own].copy_from_slice(&part_rows[from..from + own]);
            }
            let logs = std::array::from_fn(|i| self.ln_shares[i] + part_values[i * count + j]);
            *value = self.combine(logs, row).min(0.0);
        }
    }

    fn survival_gradient_on(&self, ages: &[f64], logs: &[f64], values: &mut [f64], gradients: &mut [f64]) {
        let count = ages.len();
        let width = gradients.len() / count.max(1);
        let own = (width - (N - 1)) / N;
        let (mut part_values, mut part_rows) = (vec![0.0; count], vec![0.0; count * own]);
        values.fill(0.0);
        for (i, (part, share)) in self.parts.iter().zip(self.shares).enumerate() {
            part.survival_gradient_on(ages, logs, &mut part_values, &mut part_rows);
            let rows = gradients.chunks_exact_mut(width).zip(part_rows.chunks_exact(own));
            for ((value, s), (row, part_row)) in values.iter_mut().zip(&part_values).zip(rows) {
                *value += share * s;
                if i < N - 1 {
                    row[i] = share * s;
                }
                for (g, own) in row[N - 1 + i * own..].iter_mut().zip(part_row) {
                    *g = share * own;
                }
            }
        }
        for (value, row) in values.iter_mut().zip(gradients.chunks_exact_mut(width)) {
            // The shares add up to 1 but for rounding.
            *value = value.min(1.0);
            for (g, share) in row.iter_mut().zip(self.shares).take(N - 1) {
                *g -= share * *value;
            }
        }
    }
}

/// Free coordinates of natural ones, for `N` parts: shares `p_1 … p_{N-1}` above 0 that leave something to the
/// last, then each part's own.
pub(crate) fn free_mixture<const N: usize>(natural: &[f64], parts: &[Coordinate]) -> Option<Vec<f64>> {
    let (shares, rest) = natural.split_at_checked(N - 1)?;
    let last = 1.0 - shares.iter().sum::<f64>();
    let in_range = last > 0.0 && shares.iter().all(|&p| p > 0.0);
    if rest.len() != parts.len() || !in_range {
        return None;
    }
    let odds = shares.iter().map(|p| Some(p.ln() - last.ln()));
    odds.chain(parts.iter().zip(rest).map(|(c, &value)| c.free(value))).collect()
}

/// `ln Σ e^xᵢ`.
fn ln_sum<const N: usize>(x: &[f64; N]) -> f64 {
    ln_sum_and_weights(x).0
}

/// `ln Σ e^xᵢ`, and what share of the sum each has; none has one where nothing is.
fn ln_sum_and_weights<const N: usize>(x: &[f64; N]) -> (f64, [f64; N]) {
    let mut top = 0;
    for i in 1..N {
        if x[i] > x[top] {
            top = i;
        }
    }
    if x[top] == f64::NEG_INFINITY {
        return (f64::NEG_INFINITY, [0.0; N]);
    }
    let mut weights = [1.0; N];
    let mut rest = 0.0;
    for i in 0..N {
        if i != top {
            weights[i] = (x[i] - x[top]).exp();
            rest += weights[i];
        }
    }
    (x[top] + rest.ln_1p(), weights.map(|w| w / (1.0 + rest)))
}
