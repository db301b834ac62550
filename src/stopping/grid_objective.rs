//! The aim on a grid of ages, for thousands of sampled curves. METHODS.md sections 5 and 7.

use super::deadline::{Lattice, level_above};
use super::objective::{Terms, score};
use super::retry::{Odds, Retry};
use super::worth::{Aim, Fade, Worth, WorthError};
use crate::outlook::{Grid, Sampled};

/// Steps of the deadline's lattice. Its tables are coarse beside [`crate::stopping::Deadline`]'s; what they decide
/// lies within a slack of 1%.
const STEPS: usize = 128;

/// [`crate::stopping::Objective::score`] at every age of a [`Grid`] where a decision may fall, and at some settings
/// of interest; a whole curve in one pass.
pub struct GridObjective {
    grid: Grid,
    worth: Worth,
    retry: Retry,
    plain: Option<Terms>,
    /// Mean share of the worth left in each stretch of the grid; empty where it stays.
    share: Vec<f64>,
    settings: Vec<Place>,
    deadline: Option<GridDeadline>,
}

/// An age between two of the grid, or before the first.
#[derive(Clone, Copy)]
struct Place {
    age: f64,
    /// Index of the grid's age at its end.
    end: usize,
    /// How far into the stretch, 0 to 1.
    part: f64,
}

struct GridDeadline {
    by: f64,
    attempts: u32,
    lattice: Vec<Place>,
}

/// The four curves at one age.
#[derive(Clone, Copy)]
struct Reading {
    odds: Odds,
    area: f64,
    completions: f64,
}

impl GridObjective {
    /// The aim of `worth` on `grid`, and at `settings` (s, > 0; beyond the ceiling, or infinite for never, they
    /// count as the ceiling).
    ///
    /// # Errors
    /// Those of [`Worth::check`] and [`Retry::check`].
    pub fn new(
        grid: &Grid,
        worth: &Worth,
        retry: &Retry,
        settings: &[f64],
    ) -> Result<GridObjective, WorthError> {
        worth.check()?;
        retry.check()?;
        let worth = worth.as_rate();
        let ages = &grid.ages()[..grid.decide().end];
        let share = match worth.fade {
            Fade::Stays => vec![],
            fade => (0..ages.len())
                .map(|i| {
                    let from = if i == 0 { 0.0 } else { ages[i - 1] };
                    0.5 * (fade.share(from) + fade.share(ages[i]))
                })
                .collect(),
        };
        let settings = settings.iter().map(|&t| place(ages, t)).collect();
        let deadline = match worth.aim {
            Aim::Deadline { by, attempts } => {
                let at = |i: usize| place(ages, by * i as f64 / STEPS as f64);
                Some(GridDeadline { by, attempts, lattice: (0..=STEPS).map(at).collect() })
            }
            _ => None,
        };
        let plain = retry.is_plain(&worth).then(|| Terms::plain(&worth));
        Ok(GridObjective { grid: grid.clone(), worth, retry: *retry, plain, share, settings, deadline })
    }

    /// The ages of the scores, s: those of the grid from floor to ceiling.
    pub fn ages(&self) -> &[f64] {
        &self.grid.ages()[self.grid.decide()]
    }

    /// How many settings are judged beside the ages.
    pub fn settings(&self) -> usize {
        self.settings.len()
    }

    /// Whether a score is a share of what could be had, so that only curves with a score above 0 can be compared.
    pub(crate) fn is_relative(&self) -> bool {
        !matches!(self.worth.aim, Aim::CarryingCost(_))
    }

    /// What an attempt has at stake, in the unit of worth.
    pub(crate) fn stake(&self) -> f64 {
        self.worth.done.abs().max(self.worth.failed.abs()).max(self.worth.gave_up.abs())
    }

    /// Appends the scores of `curve` at [`GridObjective::ages`], then at the settings, to `out`. False, and nothing
    /// appended, where the curve is shorter than the grid up to its ceiling.
    pub fn scores(&self, curve: &Sampled, out: &mut Vec<f64>) -> bool {
        let decide = self.grid.decide();
        if curve.survival.len() < decide.end {
            return false;
        }
        if let Some(deadline) = &self.deadline {
            self.deadline_scores(deadline, curve, out);
            return true;
        }
        let ages = &self.grid.ages()[..decide.end];
        let mut faded = Vec::with_capacity(self.share.len());
        let (mut sum, mut before) = (0.0, 0.0);
        for (share, &done) in self.share.iter().zip(&curve.done) {
            sum += share * (done - before);
            before = done;
            faded.push(sum);
        }
        let read = |i: usize| Reading {
            odds: Odds { done: curve.done[i], failed: curve.failed[i], gave_up: curve.survival[i] },
            area: curve.area[i],
            completions: self.worth.done * if faded.is_empty() { curve.done[i] } else { faded[i] },
        };
        match self.plain {
            Some(terms) => out.extend(decide.map(|i| self.score(&terms, ages[i], read(i)))),
            None => out.extend(decide.map(|i| self.score_at(ages[i], read(i)))),
        }
        out.extend(self.settings.iter().map(|place| {
            let origin =
                Reading { odds: Odds { done: 0.0, failed: 0.0, gave_up: 1.0 }, area: 0.0, completions: 0.0 };
            let from = if place.end == 0 { origin } else { read(place.end - 1) };
            self.score_at(place.age, from.towards(read(place.end), place.part))
        }));
        true
    }

    fn score(&self, terms: &Terms, t: f64, at: Reading) -> f64 {
        let gain = terms.gain(&self.worth, at.odds, at.completions);
        score(self.worth.aim, gain, terms.time(&self.worth, at.odds, at.area, t))
    }

    fn score_at(&self, t: f64, at: Reading) -> f64 {
        let terms = self.plain.unwrap_or_else(|| Terms::averaged(&self.worth, &self.retry, at.odds));
        self.score(&terms, t, at)
    }

    fn deadline_scores(&self, deadline: &GridDeadline, curve: &Sampled, out: &mut Vec<f64>) {
        let column = |values: &[f64], origin: f64, place: &Place| {
            let from = if place.end == 0 { origin } else { values[place.end - 1] };
            from + place.part * (values[place.end] - from)
        };
        let lattice = Lattice {
            done: deadline.lattice.iter().map(|p| column(&curve.done, 0.0, p)).collect(),
            survival: deadline.lattice.iter().map(|p| column(&curve.survival, 1.0, p)).collect(),
            failed: if column(&curve.failed, 0.0, &deadline.lattice[STEPS]) > 0.0 {
                deadline.lattice.iter().map(|p| column(&curve.failed, 0.0, p)).collect()
            } else {
                vec![]
            },
        };
        let step = deadline.by / STEPS as f64;
        let (floor, ceiling) = (self.ages()[0], self.ages()[self.ages().len() - 1]);
        let range = ((floor / step).ceil() as usize, (ceiling / step) as usize);
        let read = |table: &[f64], left: f64| {
            if left <= 0.0 {
                return 0.0;
            }
            let x = (left / step).min(STEPS as f64 - 1e-9);
            let i = x as usize;
            table[i] + (x - i as f64) * (table[i + 1] - table[i])
        };
        let shifted = |table: &[f64], pause: f64| -> Vec<f64> {
            (0..=STEPS).map(|i| read(table, step * i as f64 - pause)).collect()
        };
        let pauses = |left: u32| {
            let number = deadline.attempts + 1 - left;
            let pause = self.worth.pause;
            (self.retry.pause(pause.gave_up, number), self.retry.pause(pause.failed, number))
        };
        let none = vec![0.0; STEPS + 1];
        let (mut fresh, mut stuck) = (none.clone(), none);
        for left in 1..deadline.attempts {
            let (after_give_up, after_failure) = pauses(left);
            let level = level_above(
                &lattice,
                &shifted(&stuck, after_give_up),
                &shifted(&fresh, after_failure),
                self.worth.sticky,
                range,
                true,
            );
            stuck = level.stuck().to_vec();
            fresh = level.fresh;
        }
        let (after_give_up, after_failure) = pauses(deadline.attempts);
        // What failures of the first attempt leave, summed up to each age of the lattice.
        let later = shifted(&fresh, after_failure);
        let mut rescued = vec![0.0; STEPS + 1];
        if !lattice.failed.is_empty() {
            for j in 1..=STEPS {
                let middle = 0.5 * (later[STEPS - j] + later[STEPS - j + 1]);
                rescued[j] = rescued[j - 1] + middle * (lattice.failed[j] - lattice.failed[j - 1]);
            }
        }
        let whole = lattice.done[STEPS] + rescued[STEPS];
        let first = |t: f64, done: f64, survival: f64| {
            if t >= deadline.by {
                whole
            } else {
                done + survival * read(&stuck, deadline.by - t - after_give_up) + read(&rescued, t)
            }
        };
        let decide = self.grid.decide();
        out.extend(decide.map(|i| first(self.grid.ages()[i], curve.done[i], curve.survival[i])));
        out.extend(
            self.settings
                .iter()
                .map(|p| first(p.age, column(&curve.done, 0.0, p), column(&curve.survival, 1.0, p))),
        );
    }
}

impl Reading {
    fn towards(self, to: Reading, part: f64) -> Reading {
        let mix = |a: f64, b: f64| a + part * (b - a);
        Reading {
            odds: Odds {
                done: mix(self.odds.done, to.odds.done),
                failed: mix(self.odds.failed, to.odds.failed),
                gave_up: mix(self.odds.gave_up, to.odds.gave_up),
            },
            area: mix(self.area, to.area),
            completions: mix(self.completions, to.completions),
        }
    }
}

fn place(ages: &[f64], t: f64) -> Place {
    let last = ages[ages.len() - 1];
    let age = t.clamp(0.0, last);
    let end = ages.partition_point(|&a| a < age).min(ages.len() - 1);
    let from = if end == 0 { 0.0 } else { ages[end - 1] };
    Place { age, end, part: ((age - from) / (ages[end] - from)).clamp(0.0, 1.0) }
}
