//! Intervals by the block bootstrap: whole days are drawn again, since what happens on one day hangs together (Künsch
//! 1989, *The jackknife and the bootstrap for general stationary observations*, Annals of Statistics 17:1217; here the
//! blocks are calendar days and do not overlap).

use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

use super::earn::{Step, Steps};
use crate::tally::{Cells, EventCell};

/// Resamples.
pub(super) const RESAMPLES: usize = 200;
/// Age intervals in which a day's waits are kept for it.
const INTERVALS: usize = 128;

/// The days of a period by age, so that any number of each adds up to a table of [`Steps`].
#[derive(Clone, Debug)]
pub(super) struct Sheet {
    bounds: Vec<(f64, f64)>,
    last: f64,
    days: Vec<Vec<Row>>,
}

/// One day's part of a [`Step`].
#[derive(Clone, Copy, Debug, Default, PartialEq)]
struct Row {
    at_risk: f64,
    done: f64,
    failed: f64,
    left: f64,
}

impl Sheet {
    /// Of days that together are `whole`, of which the last was seen at `last` s. With `by_rule`, what was given up is a
    /// rule's doing, an event.
    pub(super) fn of(days: &[Cells], whole: &Cells, last: f64, by_rule: bool) -> Sheet {
        let mut all = Cells { events: whole.events.clone(), ..Cells::default() };
        if by_rule {
            let left = whole.gave_up.iter().filter(|m| m.age > 0.0);
            all.events.extend(left.map(|m| EventCell {
                over: m.age,
                upto: m.age,
                done: 0.0,
                failed: m.weight,
            }));
            all.tidy();
        }
        let mut bounds: Vec<(f64, f64)> = Vec::with_capacity(INTERVALS + 1);
        for e in all.coarsened(INTERVALS).events.iter().filter(|e| e.upto.is_finite()) {
            let before = bounds.last().map_or(0.0, |b| b.1);
            if e.upto > before {
                bounds.push((e.over.max(before), e.upto));
            }
        }
        let days = days.iter().map(|cells| rows(&bounds, cells, by_rule)).collect();
        Sheet { bounds, last, days }
    }

    /// Every day so many times; `None` where nobody is at risk then.
    pub(super) fn steps(&self, times: &[f64]) -> Option<Steps> {
        let mut steps: Vec<Step> =
            self.bounds.iter().map(|&(over, upto)| Step { over, upto, ..Step::default() }).collect();
        for (rows, times) in self.days.iter().zip(times).filter(|(_, times)| **times > 0.0) {
            for (step, row) in steps.iter_mut().zip(rows) {
                step.at_risk += times * row.at_risk;
                step.done += times * row.done;
                step.failed += times * row.failed;
                step.left += times * row.left;
            }
        }
        for step in &mut steps {
            // Late entries may leave fewer at risk than end: as in the life table none may.
            step.at_risk = step.at_risk.max(step.done + step.failed + step.left);
        }
        steps.retain(|step| step.at_risk > 0.0);
        (!steps.is_empty()).then_some(Steps { steps, last: self.last })
    }
}

fn rows(bounds: &[(f64, f64)], cells: &Cells, by_rule: bool) -> Vec<Row> {
    let mut rows = vec![Row::default(); bounds.len()];
    let index = |age: f64| bounds.partition_point(|b| b.1 < age);
    // Who leaves in an interval was at risk for it and for those before.
    let mut leaves = vec![0.0; bounds.len() + 1];
    for e in &cells.events {
        let i = index(e.upto);
        leaves[(i + 1).min(bounds.len())] += e.done + e.failed;
        if let Some(row) = rows.get_mut(i) {
            row.done += e.done;
            row.failed += e.failed;
        }
    }
    // As in the life table: also for the interval in which it was cut off.
    let within = |i: usize, age: f64| bounds.get(i).is_some_and(|b| b.0 < age || b.1 == age);
    for m in &cells.gave_up {
        let i = index(m.age);
        leaves[i + usize::from(within(i, m.age))] += m.weight;
        if let Some(row) = rows.get_mut(i).filter(|_| by_rule) {
            row.left += m.weight;
        }
    }
    // Most of these left for the next day, where they enter at the same age: half here, half there.
    for m in &cells.waiting {
        let i = index(m.age);
        let half =
            if bounds.get(i).is_some_and(|b| b.0 < m.age && m.age < b.1) { 0.5 * m.weight } else { 0.0 };
        leaves[i + usize::from(half == 0.0 && within(i, m.age))] += m.weight - half;
        leaves[(i + 1).min(bounds.len())] += half;
    }
    for m in &cells.entries {
        let i = bounds.partition_point(|b| b.1 <= m.age);
        // For the interval in which it enters it counts half.
        let half = if bounds.get(i).is_some_and(|b| b.0 < m.age) { 0.5 * m.weight } else { 0.0 };
        leaves[i] -= m.weight - half;
        leaves[(i + 1).min(bounds.len())] -= half;
    }
    let mut at_risk = 0.0;
    for (row, leaves) in rows.iter_mut().zip(&leaves[1..]).rev() {
        at_risk += leaves;
        row.at_risk = at_risk;
    }
    rows
}

/// Draws `blocks` blocks with replacement, again and again: how often each was drawn.
pub(super) fn resamples(blocks: usize, seed: u64) -> impl Iterator<Item = Vec<f64>> {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    (0..if blocks > 0 { RESAMPLES } else { 0 }).map(move |_| {
        let mut times = vec![0.0; blocks];
        for _ in 0..blocks {
            times[random.random_range(0..blocks)] += 1.0;
        }
        times
    })
}

/// The stretch that holds `level` of the values, after they are moved so that `centre` comes to lie on `value`. `None`
/// where fewer than half of the resamples have one.
pub(super) fn interval(mut values: Vec<f64>, centre: f64, value: f64, level: f64) -> Option<[f64; 2]> {
    values.retain(|v| v.is_finite());
    if values.len() * 2 < RESAMPLES || !(centre.is_finite() && value.is_finite()) {
        return None;
    }
    values.sort_by(f64::total_cmp);
    let at = |q: f64| values[(q * (values.len() - 1) as f64).round() as usize];
    let tail = 0.5 * (1.0 - level);
    let moved = value - centre;
    Some([(at(tail) + moved).min(value), (at(1.0 - tail) + moved).max(value)])
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::replay::earn::attempt;
    use crate::stopping::Worth;
    use crate::wait::{Ending, Wait};

    #[test]
    fn days_add_up_to_the_table_of_all() {
        let wait = |i: u32| {
            let ending = Ending::ALL[(i % 5).min(3) as usize];
            Wait::new(0.1 * f64::from(1 + i * 7 % 23), ending).unwrap()
        };
        let late = Wait::new(2.0, Ending::Done).unwrap().with_entered(0.75).unwrap();
        let day = |from: u32| -> Vec<Wait> { (from..from + 20).map(wait).chain([late]).collect() };
        let days = [day(0), day(20), day(40)];
        let whole: Vec<Wait> = days.iter().flatten().copied().collect();
        let cells: Vec<Cells> = days.iter().map(Cells::from_waits).collect();
        let whole = Cells::from_waits(&whole);
        for by_rule in [false, true] {
            let exact = if by_rule { Steps::of_rule(&whole) } else { Steps::of(&whole) }.unwrap();
            let sheet = Sheet::of(&cells, &whole, exact.last, by_rule);
            let sum = sheet.steps(&[1.0, 1.0, 1.0]).unwrap();
            assert_eq!(sum.steps.len(), exact.steps.len());
            for (a, b) in sum.steps.iter().zip(&exact.steps) {
                assert!(
                    (a.upto - b.upto).abs() < 1e-12 && (a.at_risk - b.at_risk).abs() < 1e-9,
                    "{a:?} {b:?}"
                );
                assert_eq!((a.done, a.failed, a.left), (b.done, b.failed, b.left));
            }
            // One day three times is that day.
            let (one, thrice) =
                (sheet.steps(&[0.0, 1.0, 0.0]).unwrap(), sheet.steps(&[0.0, 3.0, 0.0]).unwrap());
            let earns = |steps: &Steps| attempt(steps, 1.5, &Worth::default()).0;
            assert!((earns(&one).odds.done - earns(&thrice).odds.done).abs() < 1e-12);
        }
    }

    #[test]
    fn many_ages_are_kept_in_few_intervals() {
        let waits: Vec<Wait> =
            (1..=5000).map(|i| Wait::new(f64::from(i) * 1e-3, Ending::Done).unwrap()).collect();
        let whole = Cells::from_waits(&waits);
        let sheet = Sheet::of(std::slice::from_ref(&whole), &whole, 5.0, false);
        assert!(sheet.bounds.len() <= INTERVALS + 1);
        let (coarse, _) = attempt(&sheet.steps(&[1.0]).unwrap(), 2.5, &Worth::default());
        assert!((coarse.odds.done - 0.5).abs() < 1e-3 && (coarse.spent - 1.875).abs() < 1e-2, "{coarse:?}");
    }

    #[test]
    fn resamples_are_of_the_seed_and_of_equal_number() {
        let all: Vec<Vec<f64>> = resamples(7, 3).collect();
        assert!(all.len() == RESAMPLES && all.iter().all(|times| times.iter().sum::<f64>() == 7.0));
        assert_eq!(all, resamples(7, 3).collect::<Vec<_>>());
        assert_eq!(resamples(0, 3).count(), 0);
        let values: Vec<f64> = (0..200).map(f64::from).collect();
        assert_eq!(interval(values, 100.0, 200.0, 0.9), Some([110.0, 289.0]));
        assert_eq!(interval(vec![f64::NAN; 200], 0.0, 0.0, 0.9), None);
    }
}
