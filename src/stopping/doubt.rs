//! The give-up time of least expected regret over every curve that the data leave open. METHODS.md section 7,
//! RECIPE section 5.

use super::grid_objective::GridObjective;
use crate::outlook::Sampled;

/// What [`Doubt::choose`] may lose against the least expected regret by waiting up to the ceiling instead, since
/// not to give up is the simpler advice.
const SIMPLER: f64 = 0.005;
/// Smallest share of the average best score by which a curve's regret is divided: a curve that hardly earns
/// anything must not outvote all others.
const SMALLEST_SCALE: f64 = 0.05;

/// One curve's best give-up time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BestOfCurve {
    /// The member (a family, or the bootstrapped curve) it came from, as the caller numbers them.
    pub member: usize,
    /// Its weight.
    pub weight: f64,
    /// Its best give-up time on the grid, s.
    pub at: f64,
    /// Its best score.
    pub score: f64,
}

/// Regret of one give-up time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Regret {
    /// Weighted mean over the curves.
    pub expected: f64,
    /// Weighted 95th percentile.
    pub percentile_95: f64,
}

/// The choice with its doubt.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Choice {
    /// The give-up time of least expected regret, s; the ceiling where waiting it out is as good.
    pub at: f64,
    /// Whether it is the ceiling.
    pub wait_it_out: bool,
    /// Its regret.
    pub regret: Regret,
    /// Weighted 5% and 95% points of the curves' best times, half a step of the grid wider at each end and stretched
    /// to hold the choice, s.
    pub interval: [f64; 2],
    /// The stretch around the choice whose expected regret is at most the slack above the choice's, s.
    pub band: [f64; 2],
}

/// Curves with weights, scored on one grid.
///
/// The regret of `τ` under curve `b` is the share of its best score that `τ` loses,
/// `(g_b* - g_b(τ)) / max(g_b*, ḡ/20)`, with `g` the score (a rate, `1/m`, a probability) and `ḡ` the weighted mean of
/// the `g_b*`; curves that can earn nothing (`g_b* <= 0`) weigh nothing. Under a carrying cost scores may be of
/// either sign and add up, so every curve is divided by the same scale, `max(mean |g_b*|, stake/20)` with the stake the
/// largest worth of an ending: the least expected regret is then the largest expected gain.
pub struct Doubt {
    objective: GridObjective,
    bests: Vec<BestOfCurve>,
    /// Row by row: at the ages of the grid, then at the settings.
    scores: Vec<f64>,
}

impl Doubt {
    /// No curves yet.
    pub fn new(objective: GridObjective) -> Doubt {
        Doubt { objective, bests: vec![], scores: vec![] }
    }

    /// Adds a curve of a member with its weight. False where it weighs nothing: a weight that is not above 0, a curve
    /// that is not finite or too short, or (unless the aim is a carrying cost) none that earns anything.
    pub fn add(&mut self, member: usize, curve: &Sampled, weight: f64) -> bool {
        let before = self.scores.len();
        if !(weight > 0.0 && weight.is_finite() && self.objective.scores(curve, &mut self.scores)) {
            return false;
        }
        let ages = self.objective.ages();
        let row = &self.scores[before..];
        let (mut best, mut at) = (f64::NEG_INFINITY, 0);
        for (i, &score) in row[..ages.len()].iter().enumerate() {
            if score > best {
                (best, at) = (score, i);
            }
        }
        let counts = row.iter().all(|s| s.is_finite()) && (best > 0.0 || !self.objective.is_relative());
        if counts {
            self.bests.push(BestOfCurve { member, weight, at: ages[at], score: best });
        } else {
            self.scores.truncate(before);
        }
        counts
    }

    /// The best time of every curve that counts, in the order they were added.
    pub fn bests(&self) -> &[BestOfCurve] {
        &self.bests
    }

    /// The ages that were compared, s.
    pub fn ages(&self) -> &[f64] {
        self.objective.ages()
    }

    /// Expected regret at every age of the grid; empty without curves.
    pub fn expected(&self) -> Vec<f64> {
        let ages = self.ages().len();
        let total = self.total();
        let mut expected = vec![0.0; if self.bests.is_empty() { 0 } else { ages }];
        for ((best, scale), row) in self.bests.iter().zip(self.scales()).zip(self.rows()) {
            let factor = best.weight / (total * scale);
            for (sum, score) in expected.iter_mut().zip(row) {
                *sum += factor * (best.score - score);
            }
        }
        expected
    }

    /// The stretch that holds this share of the curves' weight, half of the rest on either side, of the scores at every age
    /// of the grid; empty without curves.
    pub fn band(&self, level: f64) -> Vec<[f64; 2]> {
        let ages = if self.bests.is_empty() { 0 } else { self.ages().len() };
        let tail = 0.5 * (1.0 - level);
        (0..ages)
            .map(|column| {
                let weights = self.bests.iter().map(|b| b.weight);
                let mut scores: Vec<(f64, f64)> = self.rows().map(|row| row[column]).zip(weights).collect();
                [weighted_quantile(&mut scores, tail), weighted_quantile(&mut scores, 1.0 - tail)]
            })
            .collect()
    }

    /// The choice. `slack`: what the band may lose, as a share. `None` without curves.
    pub fn choose(&self, slack: f64) -> Option<Choice> {
        let expected = self.expected();
        let ages = self.ages();
        let last = ages.len() - 1;
        let mut at = (0..expected.len()).min_by(|&a, &b| expected[a].total_cmp(&expected[b]))?;
        if expected[last] <= expected[at] + SIMPLER {
            at = last;
        }
        Some(Choice {
            at: ages[at],
            wait_it_out: at == last,
            regret: self.regret_in(at),
            interval: self.interval(ages[at]),
            band: band(ages, &expected, at, slack),
        })
    }

    /// Regret of the setting of this number ([`GridObjective::new`]); `None` without curves or without that setting.
    pub fn regret_of_setting(&self, number: usize) -> Option<Regret> {
        let counts = !self.bests.is_empty() && number < self.objective.settings();
        counts.then(|| self.regret_in(self.ages().len() + number))
    }

    /// Weight of the curves whose best time lies beyond an age, as a share of all; 0 without curves.
    pub fn share_beyond(&self, age: f64) -> f64 {
        let beyond: f64 = self.bests.iter().filter(|b| b.at > age).map(|b| b.weight).sum();
        if self.bests.is_empty() { 0.0 } else { beyond / self.total() }
    }

    fn total(&self) -> f64 {
        self.bests.iter().map(|b| b.weight).sum()
    }

    fn width(&self) -> usize {
        self.ages().len() + self.objective.settings()
    }

    fn rows(&self) -> impl Iterator<Item = &[f64]> {
        self.scores.chunks_exact(self.width())
    }

    /// What each curve's regret is divided by.
    fn scales(&self) -> impl Iterator<Item = f64> {
        let mean = self.bests.iter().map(|b| b.weight * b.score.abs()).sum::<f64>() / self.total();
        let relative = self.objective.is_relative();
        let common = mean.max(SMALLEST_SCALE * self.objective.stake()).max(f64::MIN_POSITIVE);
        self.bests.iter().map(move |b| if relative { b.score.max(SMALLEST_SCALE * mean) } else { common })
    }

    fn regret_in(&self, column: usize) -> Regret {
        let mut regrets: Vec<(f64, f64)> = self
            .bests
            .iter()
            .zip(self.scales())
            .zip(self.rows())
            .map(|((best, scale), row)| ((best.score - row[column]) / scale, best.weight))
            .collect();
        let expected = regrets.iter().map(|(r, w)| r * w).sum::<f64>() / self.total();
        Regret { expected, percentile_95: weighted_quantile(&mut regrets, 0.95) }
    }

    fn interval(&self, at: f64) -> [f64; 2] {
        let ages = self.ages();
        let (floor, ceiling) = (ages[0], ages[ages.len() - 1]);
        let half_step = ((ceiling / floor).ln() / (ages.len() - 1) as f64 / 2.0).exp();
        let mut bests: Vec<(f64, f64)> = self.bests.iter().map(|b| (b.at, b.weight)).collect();
        let low = weighted_quantile(&mut bests, 0.05) / half_step;
        let high = weighted_quantile(&mut bests, 0.95) * half_step;
        [low.min(at).max(floor), high.max(at).min(ceiling)]
    }
}

/// Least value at which the weight of what is not above it reaches a share `q` of all.
pub(crate) fn weighted_quantile(values: &mut [(f64, f64)], q: f64) -> f64 {
    values.sort_by(|a, b| a.0.total_cmp(&b.0));
    let goal = q * values.iter().map(|v| v.1).sum::<f64>();
    let mut sum = 0.0;
    for &(value, weight) in values.iter() {
        sum += weight;
        if sum >= goal {
            return value;
        }
    }
    values.last().map_or(f64::NAN, |v| v.0)
}

/// The connected stretch around `at` where a curve of regrets is at most `slack` above its value there; straight lines
/// between ages.
fn band(ages: &[f64], regrets: &[f64], at: usize, slack: f64) -> [f64; 2] {
    let most = regrets[at] + slack;
    let cross = |inner: usize, outer: usize| {
        let part = (most - regrets[inner]) / (regrets[outer] - regrets[inner]);
        ages[inner] + part * (ages[outer] - ages[inner])
    };
    let mut low = at;
    while low > 0 && regrets[low - 1] <= most {
        low -= 1;
    }
    let mut high = at;
    while high + 1 < ages.len() && regrets[high + 1] <= most {
        high += 1;
    }
    [
        if low > 0 { cross(low, low - 1) } else { ages[0] },
        if high + 1 < ages.len() { cross(high, high + 1) } else { ages[high] },
    ]
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::outlook::{Failures, Grid};
    use crate::stopping::{Aim, Fade, Pause, Retry, Worth};

    fn grid() -> Grid {
        Grid::new(1e-3, 0.02, 50.0)
    }

    fn exponential_mixture(grid: &Grid, p: f64, fast: f64, slow: f64) -> Sampled {
        let law = |t: &f64| p * (-fast * t).exp() + (1.0 - p) * (-slow * t).exp();
        Sampled::join(grid, grid.ages().iter().map(law).collect(), &Failures::default())
    }

    fn worth() -> Worth {
        Worth { pause: Pause { gave_up: 0.05, ..Pause::default() }, ..Worth::default() }
    }

    #[test]
    fn one_curve_is_chosen_at_its_best() {
        let grid = grid();
        let curve = exponential_mixture(&grid, 0.9, 10.0, 0.1);
        let objective =
            GridObjective::new(&grid, &worth(), &Retry::default(), &[0.1, f64::INFINITY]).unwrap();
        let mut doubt = Doubt::new(objective);
        assert_eq!(doubt.choose(0.01), None);
        assert!(doubt.add(0, &curve, 2.0) && !doubt.add(0, &curve, 0.0) && !doubt.add(0, &curve, f64::NAN));
        let choice = doubt.choose(0.01).unwrap();
        assert_eq!((choice.at, choice.wait_it_out), (doubt.bests()[0].at, false));
        assert_eq!(choice.regret, Regret { expected: 0.0, percentile_95: 0.0 });
        assert!(choice.interval[0] < choice.at && choice.interval[1] > choice.at);
        assert!(choice.band[0] < choice.at && choice.band[1] > choice.at);
        assert!(doubt.band(0.9).iter().all(|[low, high]| low == high), "one curve leaves no doubt");
        let never = doubt.regret_of_setting(1).unwrap().expected;
        assert!((never - doubt.expected()[399]).abs() < 1e-12 && never > 0.5, "{never}");
        assert!(doubt.regret_of_setting(0).unwrap().expected < 0.2);
        assert_eq!(doubt.regret_of_setting(2), None);
    }

    #[test]
    fn what_earns_nothing_weighs_nothing() {
        let grid = grid();
        let never = Sampled::join(&grid, vec![1.0; grid.ages().len()], &Failures::default());
        let mut doubt = Doubt::new(GridObjective::new(&grid, &worth(), &Retry::default(), &[]).unwrap());
        assert!(!doubt.add(0, &never, 1.0));
        let mut short = exponential_mixture(&grid, 0.9, 10.0, 0.1);
        short.survival.truncate(100);
        assert!(!doubt.add(0, &short, 1.0));
        assert_eq!((doubt.choose(0.01), doubt.share_beyond(1.0)), (None, 0.0));
    }

    #[test]
    fn a_carrying_cost_maximises_the_expected_gain() {
        let grid = grid();
        let worth = Worth { aim: Aim::CarryingCost(0.3), ..worth() };
        let objective = || GridObjective::new(&grid, &worth, &Retry::default(), &[]).unwrap();
        let curves = [
            (0.5, exponential_mixture(&grid, 0.9, 2.0, 0.1)),
            (0.2, exponential_mixture(&grid, 0.5, 1.0, 0.05)),
            (0.3, exponential_mixture(&grid, 0.1, 8.0, 0.01)),
        ];
        let mut doubt = Doubt::new(objective());
        let mut mean = vec![0.0; 400];
        for (weight, curve) in &curves {
            assert!(doubt.add(0, curve, *weight));
            let mut scores = vec![];
            objective().scores(curve, &mut scores);
            mean.iter_mut().zip(&scores).for_each(|(m, s)| *m += weight * s);
        }
        let best = (0..400).max_by(|&a, &b| mean[a].total_cmp(&mean[b])).unwrap();
        let choice = doubt.choose(0.01).unwrap();
        assert_eq!(choice.at, doubt.ages()[best]);
        assert!(choice.regret.expected.is_finite() && choice.regret.expected > 0.0);
    }

    #[test]
    fn faded_worth_on_the_grid() {
        let grid = grid();
        let curve = exponential_mixture(&grid, 0.0, 1.0, 0.5);
        let worth = Worth { fade: Fade::HalfLife(3.0), ..worth() };
        let mut scores = vec![];
        GridObjective::new(&grid, &worth, &Retry::default(), &[]).unwrap().scores(&curve, &mut scores);
        // ∫ 2^{-t/3} 0.5 e^{-t/2} dt over the time A + d_g S.
        let rate = 0.5 + std::f64::consts::LN_2 / 3.0;
        for (i, t) in grid.decide().zip(&grid.ages()[grid.decide()]) {
            let gain = -0.5 * (-rate * t).exp_m1() / rate;
            let time = -2.0 * (-0.5 * t).exp_m1() + 0.05 * (-0.5 * t).exp();
            let score = scores[i - grid.decide().start];
            assert!((score / (gain / time) - 1.0).abs() < 2e-3, "{t}: {score} {}", gain / time);
        }
    }
}
