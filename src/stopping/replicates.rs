//! Replicates of the empirical curve, by which it takes part in the doubt. RECIPE section 4.

use rand::Rng;
use rand_distr::{Distribution, Gamma};

use crate::curve::{LifeTable, Row};
use crate::outlook::{Grid, Sampled};

/// The Bayesian bootstrap of a Kaplan-Meier curve (Rubin 1981; for censored data Lo 1993, *A Bayesian bootstrap
/// for censored data*, Annals of Statistics 21:100).
///
/// An Exp(1) weight for every wait makes the share that ends in each interval of a life table, among those at risk, a
/// Beta of the numbers that end and that go on, independent of all others (ratios of independent Gamma sums). So drawn
/// it costs by the interval, not by the wait, and late entries need no weights of their own. Failures compete: what
/// ends is shared between the endings by another Beta.
///
/// A Gamma sum is independent of the ratios of its parts (Lukacs 1955), so the sum at risk in one interval serves as
/// a part of the sum that went on from the one before.
#[derive(Clone, Debug)]
pub struct Bootstrap {
    rows: Vec<Row>,
    /// How the number that goes on from a row is made up.
    onwards: Vec<Onwards>,
    sight: f64,
}

/// Those who go on from a row.
#[derive(Clone, Copy, Debug)]
enum Onwards {
    /// Those at risk in the next row, and so many who left between.
    Next(f64),
    /// So many, fewer than are at risk in the next row: some entered.
    Fresh(f64),
}

/// The weights drawn for a row.
#[derive(Clone, Copy)]
struct Weights {
    done: f64,
    failed: f64,
    onwards: f64,
}

/// Where a curve stands at the end of an interval.
#[derive(Clone, Copy)]
struct Stand {
    age: f64,
    survival: f64,
    done: f64,
    failed: f64,
    area: f64,
}

impl Bootstrap {
    /// Prepares the table's intervals up to the age where sight ends; `None` where none ends by then.
    pub fn of(table: &LifeTable) -> Option<Bootstrap> {
        let sight = table.sight();
        let rows: Vec<Row> = table.rows().iter().copied().filter(|r| r.upto <= sight).collect();
        let last = rows.last()?.upto;
        let next = rows[1..].iter().map(|row| row.at_risk).chain([0.0]);
        let onwards = rows.iter().zip(next).map(|(row, next)| Onwards::of(row, next)).collect();
        Some(Bootstrap { onwards, sight: sight.min(table.last()).max(last), rows })
    }

    /// The weights of all rows, the last row's first.
    fn weights(&self, random: &mut impl Rng) -> Vec<Weights> {
        let mut at_risk = 0.0;
        let rows = self.rows.iter().zip(&self.onwards).rev();
        rows.map(|(row, onwards)| {
            let weights = Weights {
                done: gamma(row.done, random),
                failed: gamma(row.failed, random),
                onwards: match *onwards {
                    Onwards::Next(left) => at_risk + gamma(left, random),
                    Onwards::Fresh(number) => gamma(number, random),
                },
            };
            at_risk = weights.done + weights.failed + weights.onwards;
            weights
        })
        .collect()
    }

    /// The age `L` beyond which a replicate follows the tail it is given, s.
    pub fn sight(&self) -> f64 {
        self.sight
    }

    /// One replicate on the ages of `grid`: up to [`Bootstrap::sight`] a draw of the curve, beyond it the course of
    /// `tail` given that a wait is open there, as far as `tail` reaches. Where the tail leaves nobody at that age the
    /// replicate stays where it is.
    pub fn draw(&self, grid: &Grid, tail: &Sampled, random: &mut impl Rng) -> Sampled {
        let ages = grid.ages();
        let seen = ages.partition_point(|&a| a <= self.sight);
        let n = tail.survival.len().min(ages.len()).max(seen);
        let mut curve = Sampled {
            survival: Vec::with_capacity(n),
            area: Vec::with_capacity(n),
            done: Vec::with_capacity(n),
            failed: Vec::with_capacity(n),
        };
        let mut put = |s: Stand| {
            curve.survival.push(s.survival);
            curve.area.push(s.area);
            curve.done.push(s.done);
            curve.failed.push(s.failed);
        };
        let weights = self.weights(random);
        let mut stand = Stand { age: 0.0, survival: 1.0, done: 0.0, failed: 0.0, area: 0.0 };
        let mut rest = ages[..seen].iter().peekable();
        for (row, weights) in self.rows.iter().zip(weights.iter().rev()) {
            let next = stand.after(row, weights);
            while let Some(&age) = rest.next_if(|&&a| a < row.upto) {
                put(stand.within(row, &next, age));
            }
            stand = next;
        }
        rest.for_each(|&age| put(stand.flat(age)));
        let edge = stand.flat(self.sight);
        let from = Stand::of_tail(ages, tail, self.sight);
        for (i, &age) in ages.iter().enumerate().take(n).skip(seen) {
            let to = Stand {
                age,
                survival: tail.survival[i],
                done: tail.done[i],
                failed: tail.failed[i],
                area: tail.area[i],
            };
            put(if from.survival > 0.0 { edge.follow(&from, &to) } else { edge.flat(age) });
        }
        curve
    }
}

impl Stand {
    /// After the endings of a row.
    fn after(&self, row: &Row, weights: &Weights) -> Stand {
        let at_risk = weights.done + weights.failed + weights.onwards;
        let part = |weight: f64| if at_risk > 0.0 { self.survival * (weight / at_risk) } else { 0.0 };
        let (done, failed) = (part(weights.done), part(weights.failed));
        let survival = (self.survival - (done + failed)).max(0.0);
        Stand {
            age: row.upto,
            survival,
            done: self.done + done,
            failed: self.failed + failed,
            area: self.flat(row.over).area + 0.5 * (self.survival + survival) * (row.upto - row.over),
        }
    }

    /// Before the end of a row: flat up to its beginning, straight within it.
    fn within(&self, row: &Row, next: &Stand, age: f64) -> Stand {
        if age <= row.over {
            return self.flat(age);
        }
        let part = (age - row.over) / (row.upto - row.over);
        let mix = |a: f64, b: f64| a + part * (b - a);
        let survival = mix(self.survival, next.survival);
        Stand {
            age,
            survival,
            done: mix(self.done, next.done),
            failed: mix(self.failed, next.failed),
            area: self.flat(row.over).area + 0.5 * (self.survival + survival) * (age - row.over),
        }
    }

    fn flat(&self, age: f64) -> Stand {
        Stand { age, area: self.area + self.survival * (age - self.age), ..*self }
    }

    /// Onwards as the tail goes from `from` to `to`.
    fn follow(&self, from: &Stand, to: &Stand) -> Stand {
        let factor = self.survival / from.survival;
        let survival = factor * to.survival;
        // Where hardly any of the tail is left the factor is huge, and so would be the rounding of what is near 1.
        let ended = (self.survival - survival).max(0.0);
        let failed = (factor * (to.failed - from.failed)).max(0.0).min(ended);
        Stand {
            age: to.age,
            survival,
            done: self.done + (ended - failed),
            failed: self.failed + failed,
            area: self.area + factor * (to.area - from.area),
        }
    }

    /// Where a sampled tail stands at an age, on straight lines between those of the grid.
    fn of_tail(ages: &[f64], tail: &Sampled, age: f64) -> Stand {
        let end = ages.partition_point(|&a| a < age);
        let Some(&to) = ages[..tail.survival.len().min(ages.len())].get(end) else {
            return Stand { age, survival: 0.0, done: 0.0, failed: 0.0, area: 0.0 };
        };
        let from = if end == 0 { 0.0 } else { ages[end - 1] };
        let part = (age - from) / (to - from);
        let read = |column: &[f64], origin: f64| {
            let before = if end == 0 { origin } else { column[end - 1] };
            before + part * (column[end] - before)
        };
        Stand {
            age,
            survival: read(&tail.survival, 1.0),
            done: read(&tail.done, 0.0),
            failed: read(&tail.failed, 0.0),
            area: read(&tail.area, 0.0),
        }
    }
}

impl Onwards {
    /// `next`: the number at risk in the row after.
    fn of(row: &Row, next: f64) -> Onwards {
        let number = (row.at_risk - row.ended()).max(0.0);
        let left = number - next;
        // Numbers at risk are sums of counts, equal up to their rounding where nobody left.
        if left.abs() <= 1e-9 * number {
            Onwards::Next(0.0)
        } else if left > 0.0 {
            Onwards::Next(left)
        } else {
            Onwards::Fresh(number)
        }
    }
}

/// A sum of so many Exp(1) weights.
fn gamma(number: f64, random: &mut impl Rng) -> f64 {
    Gamma::new(number, 1.0).map_or(0.0, |gamma| gamma.sample(random))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::outlook::Failures;
    use crate::tally::Cells;
    use crate::wait::{Ending, Wait};
    use rand::{RngExt, SeedableRng};
    use rand_xoshiro::Xoshiro256PlusPlus;

    fn mean_and_variance(values: &[f64]) -> (f64, f64) {
        let n = values.len() as f64;
        let mean = values.iter().sum::<f64>() / n;
        (mean, values.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / (n - 1.0))
    }

    /// Replicates by their definition: an Exp(1) weight for every wait, then Kaplan-Meier and Aalen-Johansen.
    fn by_definition(waits: &[(f64, Ending)], at: f64, random: &mut Xoshiro256PlusPlus) -> [f64; 2] {
        let mut weighted: Vec<(f64, Ending, f64)> =
            waits.iter().map(|w| (w.0, w.1, -(1.0 - random.random::<f64>()).ln())).collect();
        weighted.sort_by(|a, b| a.0.total_cmp(&b.0).then((a.1).cmp(&b.1)));
        let mut left: f64 = weighted.iter().map(|w| w.2).sum();
        let (mut survival, mut done) = (1.0, 0.0);
        for (age, ending, weight) in weighted {
            if age > at {
                break;
            }
            if ending == Ending::Done {
                done += survival * weight / left;
            }
            if !ending.is_censored() {
                survival *= 1.0 - weight / left;
            }
            left -= weight;
        }
        [survival, done]
    }

    #[test]
    fn a_draw_is_the_bootstrap_by_definition() {
        let waits: Vec<(f64, Ending)> = (0..60)
            .map(|i| {
                let ending = match i % 5 {
                    0 => Ending::GaveUp,
                    1 => Ending::Failed,
                    _ => Ending::Done,
                };
                (0.1 + 0.05 * f64::from(i * 7 % 60), ending)
            })
            .collect();
        let all: Vec<Wait> = waits.iter().map(|&(t, e)| Wait::new(t, e).unwrap()).collect();
        let table = LifeTable::of(&Cells::from_waits(&all)).unwrap();
        let bootstrap = Bootstrap::of(&table).unwrap();
        let grid = Grid::new(0.1, 0.2, 2.0);
        let flat = Sampled::join(&grid, vec![1.0; grid.ages().len()], &Failures::default());
        let mut random = Xoshiro256PlusPlus::seed_from_u64(7);
        let rounds = 6000;
        let i = grid.decide().end - 60;
        let at = grid.ages()[i];
        let (mut ours, mut theirs) = (vec![], vec![]);
        for _ in 0..rounds {
            let curve = bootstrap.draw(&grid, &flat, &mut random);
            assert!((curve.survival[i] + curve.done[i] + curve.failed[i] - 1.0).abs() < 1e-12);
            ours.push([curve.survival[i], curve.done[i]]);
            theirs.push(by_definition(&waits, at, &mut random));
        }
        for k in 0..2 {
            let column = |v: &[[f64; 2]]| mean_and_variance(&v.iter().map(|x| x[k]).collect::<Vec<_>>());
            let ((m1, v1), (m2, v2)) = (column(&ours), column(&theirs));
            assert!((m1 - m2).abs() < 4.0 * ((v1 + v2) / f64::from(rounds)).sqrt(), "{k}: {m1} {m2}");
            assert!((v1 / v2 - 1.0).abs() < 4.0 * (4.0 / f64::from(rounds)).sqrt(), "{k}: {v1} {v2}");
        }
    }

    #[test]
    fn the_area_is_exact_and_the_tail_follows() {
        let waits: Vec<Wait> =
            (1..=40)
                .map(|i| {
                    if i < 30 {
                        Wait::new(f64::from(i), Ending::Done)
                    } else {
                        Wait::new(30.0, Ending::GaveUp)
                    }
                })
                .map(Result::unwrap)
                .collect();
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        let bootstrap = Bootstrap::of(&table).unwrap();
        assert_eq!(bootstrap.sight(), 30.0);
        let grid = Grid::new(0.5, 0.7, 300.0);
        let latent: Vec<f64> = grid.ages().iter().map(|t| (-0.02 * t).exp()).collect();
        let failures = Failures::new(grid.ages().iter().map(|t| 0.01 * t).collect());
        let tail = Sampled::join(&grid, latent, &failures);
        let curve = bootstrap.draw(&grid, &tail, &mut Xoshiro256PlusPlus::seed_from_u64(3));
        let at = |age: f64| grid.ages().partition_point(|&a| a < age);
        let (edge, far) = (at(30.0) - 1, at(200.0));
        let given = |c: &Sampled| c.survival[far] / c.survival[edge];
        assert!((given(&curve) / given(&tail) - 1.0).abs() < 0.03);
        // Steps at 1, 2, ..., 29: the area up to 29.5 from the steps alone.
        let (mut area, mut last) = (0.0, 1.0);
        for k in 1..=29 {
            area += last;
            last = curve.survival[at(f64::from(k) + 0.4)];
        }
        let i = at(29.5);
        area += last * (grid.ages()[i] - 29.0);
        assert!((curve.area[i] - area).abs() < 1e-9, "{} {area}", curve.area[i]);
        for i in 0..grid.ages().len() {
            assert!((curve.survival[i] + curve.done[i] + curve.failed[i] - 1.0).abs() < 1e-9);
            assert!(
                i == 0 || curve.survival[i] <= curve.survival[i - 1] && curve.area[i] >= curve.area[i - 1]
            );
        }
        assert!(curve.failed[far] > 0.0 && curve.failed[edge] == 0.0);
    }
}
