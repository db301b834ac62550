//! Outlooks sampled on a grid of ages: what the doubt of METHODS.md section 7 is computed on, where thousands
//! of curves are compared. RECIPE's grid: 400 ages where a decision may fall, 160 below, 150 above.

use std::ops::Range;

/// Ages below the floor, for the integral from 0.
const BELOW: usize = 160;
/// Ages from floor to ceiling.
const DECIDE: usize = 400;
/// Ages above the ceiling, for the remaining wait only.
const ABOVE: usize = 150;
/// How far the grid runs past the ceiling, as a factor.
const REACH: f64 = 1e5;

/// Ages in seconds, strictly increasing, log-spaced in three stretches.
#[derive(Clone, Debug, PartialEq)]
pub struct Grid {
    ages: Vec<f64>,
    decide: Range<usize>,
}

impl Grid {
    /// A grid that decides between `floor` and `ceiling` (s, `0 < floor < ceiling`); `first` is the least age seen.
    pub fn new(first: f64, floor: f64, ceiling: f64) -> Grid {
        let start = first.min(floor) / 50.0;
        let mut ages = Vec::with_capacity(BELOW + DECIDE + ABOVE);
        let stretch = |from: f64, to: f64, n: usize, last: usize| {
            let ratio = (to / from).ln();
            (0..n).map(move |i| from * (ratio * i as f64 / last as f64).exp())
        };
        ages.extend(stretch(start, floor, BELOW, BELOW));
        ages.extend(stretch(floor, ceiling, DECIDE, DECIDE - 1));
        // The ends are the caller's own numbers, not their logarithm's exponential.
        ages[BELOW] = floor;
        ages[BELOW + DECIDE - 1] = ceiling;
        ages.extend(stretch(ceiling, ceiling * REACH, ABOVE + 1, ABOVE).skip(1));
        Grid { ages, decide: BELOW..BELOW + DECIDE }
    }

    /// Every age.
    pub fn ages(&self) -> &[f64] {
        &self.ages
    }

    /// The indices between floor and ceiling, both included.
    pub fn decide(&self) -> Range<usize> {
        self.decide.clone()
    }
}

/// One outlook on a [`Grid`]: four curves of the grid's length (or of a leading part of it).
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Sampled {
    /// `S`, any ending.
    pub survival: Vec<f64>,
    /// `A`, s.
    pub area: Vec<f64>,
    /// `F_d`.
    pub done: Vec<f64>,
    /// `F_f`.
    pub failed: Vec<f64>,
}

/// Failures on a [`Grid`], as [`Sampled::join`] needs them: reckoned once for the many curves they are joined with.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Failures {
    /// Cumulative hazard.
    hazard: Vec<f64>,
    /// What it leaves, `e^-H`.
    spared: Vec<f64>,
}

impl Failures {
    /// From the cumulative hazard at the ages of the grid.
    pub fn new(hazard: Vec<f64>) -> Failures {
        Failures { spared: hazard.iter().map(|h| (-h).exp()).collect(), hazard }
    }
}

impl Sampled {
    /// Joins the latent survival of `done` with the cumulative hazard of `failed`, both at the first
    /// `latent.len()` ages of the grid (METHODS.md section 3: `dF = h S dt`). Integrals by the trapezoid rule.
    ///
    /// `failures`: of no age where there are none, else of at least as many as `latent`.
    pub fn join(grid: &Grid, latent: Vec<f64>, failures: &Failures) -> Sampled {
        let n = latent.len();
        let mut survival = latent;
        for (s, spared) in survival.iter_mut().zip(&failures.spared) {
            *s *= spared;
        }
        let (mut area, mut done, mut failed) =
            (Vec::with_capacity(n), Vec::with_capacity(n), Vec::with_capacity(n));
        let (mut age, mut s, mut h, mut a, mut f) = (0.0, 1.0, 0.0, 0.0, 0.0);
        for (i, &s_next) in survival.iter().enumerate() {
            let middle = 0.5 * (s + s_next);
            a += middle * (grid.ages[i] - age);
            if let Some(&h_next) = failures.hazard.get(i) {
                f += middle * (h_next - h);
                h = h_next;
            }
            age = grid.ages[i];
            s = s_next;
            area.push(a);
            failed.push(f);
            done.push((1.0 - s - f).max(0.0));
        }
        Sampled { survival, area, done, failed }
    }

    /// Whether every value is finite.
    pub fn is_finite(&self) -> bool {
        self.survival.iter().chain(&self.area).all(|v| v.is_finite())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exponential_with_failures() {
        let grid = Grid::new(1e-3, 0.01, 20.0);
        let latent: Vec<f64> = grid.ages().iter().map(|t| (-t).exp()).collect();
        let failures = Failures::new(grid.ages().iter().map(|t| 0.5 * t).collect());
        let joined = Sampled::join(&grid, latent, &failures);
        for i in grid.decide() {
            let t = grid.ages()[i];
            let area = -(-1.5 * t).exp_m1() / 1.5;
            assert!((joined.area[i] / area - 1.0).abs() < 2e-3, "{t}");
            assert!((joined.failed[i] / (0.5 * area) - 1.0).abs() < 2e-3);
            assert!((joined.done[i] + joined.failed[i] + joined.survival[i] - 1.0).abs() < 1e-12);
        }
        assert!(grid.ages().windows(2).all(|w| w[0] < w[1]));
        assert_eq!(grid.ages()[grid.decide().start], 0.01);
        assert_eq!(grid.ages()[grid.decide().end - 1], 20.0);
    }
}
