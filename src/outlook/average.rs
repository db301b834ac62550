//! The weighted average of sampled outlooks: what is believed after all doubt, itself an outlook.

use super::{Grid, Outlook, Sampled};

/// Sampled curves averaged with weights, and straight lines between the ages of the grid.
///
/// The average of laws under their weights is the law of a wait whose law is drawn first; so every number
/// quoted with an advice comes from it and they all agree.
#[derive(Clone, Debug)]
pub struct Average {
    ages: Vec<f64>,
    curve: Sampled,
    sight: f64,
}

/// Sums sampled curves as they are made, so that none need be kept.
#[derive(Clone, Debug)]
pub struct Averaging {
    total: f64,
    sum: Sampled,
}

impl Averaging {
    /// Nothing yet, for curves on `grid` up to its ceiling.
    pub fn new(grid: &Grid) -> Averaging {
        let zero = || vec![0.0; grid.decide().end];
        Averaging {
            total: 0.0,
            sum: Sampled { survival: zero(), area: zero(), done: zero(), failed: zero() },
        }
    }

    /// Adds a curve with its weight. One that is too short, or a weight that is not above 0, adds nothing.
    pub fn add(&mut self, weight: f64, curve: &Sampled) {
        let sum = &mut self.sum;
        if !(weight > 0.0 && curve.survival.len() >= sum.survival.len()) {
            return;
        }
        self.total += weight;
        for (into, from) in [
            (&mut sum.survival, &curve.survival),
            (&mut sum.area, &curve.area),
            (&mut sum.done, &curve.done),
            (&mut sum.failed, &curve.failed),
        ] {
            into.iter_mut().zip(from).for_each(|(a, b)| *a += weight * b);
        }
    }

    /// The average, with the age at which sight ends (s). `None` if nothing was added.
    pub fn finish(self, grid: &Grid, sight: f64) -> Option<Average> {
        let Averaging { total, sum } = self;
        if total <= 0.0 {
            return None;
        }
        // A leading origin makes every age the end of a stretch.
        let with_origin = |first: f64, rest: Vec<f64>| {
            std::iter::once(first).chain(rest.into_iter().map(|v| v / total)).collect()
        };
        let n = sum.survival.len();
        Some(Average {
            ages: std::iter::once(0.0).chain(grid.ages()[..n].iter().copied()).collect(),
            curve: Sampled {
                survival: with_origin(1.0, sum.survival),
                area: with_origin(0.0, sum.area),
                done: with_origin(0.0, sum.done),
                failed: with_origin(0.0, sum.failed),
            },
            sight,
        })
    }
}

impl Average {
    /// Last age it knows: the ceiling. Beyond it the curves stay where they are.
    pub fn end(&self) -> f64 {
        self.ages[self.ages.len() - 1]
    }

    /// Index of the stretch that holds `t`, and how far into it, 0 to 1.
    fn place(&self, t: f64) -> (usize, f64) {
        let n = self.ages.len();
        let i = self.ages.partition_point(|&a| a <= t).clamp(1, n - 1) - 1;
        let (from, to) = (self.ages[i], self.ages[i + 1]);
        (i, ((t - from) / (to - from)).clamp(0.0, 1.0))
    }

    fn read(&self, column: &[f64], t: f64) -> f64 {
        let (i, part) = self.place(t);
        column[i] + part * (column[i + 1] - column[i])
    }
}

impl Outlook for Average {
    fn survival(&self, t: f64) -> f64 {
        self.read(&self.curve.survival, t)
    }

    fn done(&self, t: f64) -> f64 {
        self.read(&self.curve.done, t)
    }

    fn failed(&self, t: f64) -> f64 {
        self.read(&self.curve.failed, t)
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        let beyond = (t - self.end()).max(0.0);
        self.read(&self.curve.area, t) + beyond * self.curve.survival[self.curve.survival.len() - 1]
    }

    fn hazards(&self, t: f64) -> Option<(f64, f64)> {
        let (i, _) = self.place(t);
        let survival = self.survival(t);
        let width = self.ages[i + 1] - self.ages[i];
        let slope = |column: &[f64]| (column[i + 1] - column[i]) / width / survival;
        (survival > 0.0 && t < self.end()).then(|| (slope(&self.curve.done), slope(&self.curve.failed)))
    }

    fn faded_done(&self, t: f64, worth: &dyn Fn(f64) -> f64) -> f64 {
        let (last, part) = self.place(t);
        (0..=last)
            .map(|i| {
                let share = if i == last { part } else { 1.0 };
                let (from, to) = (self.ages[i], self.ages[i] + share * (self.ages[i + 1] - self.ages[i]));
                worth(0.5 * (from + to)) * share * (self.curve.done[i + 1] - self.curve.done[i])
            })
            .sum()
    }

    fn knots(&self) -> &[f64] {
        &self.ages[1..]
    }

    fn sight(&self) -> f64 {
        self.sight
    }
}

#[cfg(test)]
mod tests {
    use super::super::Failures;
    use super::*;

    #[test]
    fn averages_two_exponentials() {
        let grid = Grid::new(1e-3, 0.01, 20.0);
        let curve = |rate: f64| {
            Sampled::join(
                &grid,
                grid.ages().iter().map(|t| (-rate * t).exp()).collect(),
                &Failures::default(),
            )
        };
        let (slow, fast) = (curve(0.5), curve(2.0));
        let mut sum = Averaging::new(&grid);
        sum.add(1.0, &slow);
        sum.add(3.0, &fast);
        sum.add(f64::NAN, &fast);
        let mean = sum.finish(&grid, 5.0).unwrap();
        for t in [0.02_f64, 0.7, 3.0, 19.0] {
            let truth = 0.25 * (-0.5 * t).exp() + 0.75 * (-2.0_f64 * t).exp();
            assert!((mean.survival(t) - truth).abs() < 1e-3, "{t}");
            assert!((mean.survival(t) + mean.done(t) - 1.0).abs() < 1e-12);
        }
        assert!((mean.faded_done(20.0, &|_| 2.0) - 2.0 * mean.done(20.0)).abs() < 1e-12);
        assert_eq!(mean.survival(0.0), 1.0);
        assert!(Averaging::new(&grid).finish(&grid, 5.0).is_none());
    }
}
