//! A stream with few waits borrows from its siblings, the streams of the same policy entry, as far as they are alike.
//!
//! How alike is measured on log hazard ratios: each stream's against the pool of all, from the observed and expected
//! endings of a log-rank test, and the variance between streams by the moment estimator of DerSimonian & Laird (1986,
//! *Controlled Clinical Trials* 7:177). With variance `τ²` between streams, siblings with `O` endings know as much of this
//! stream as `1/(τ² + 1/O)` endings of its own would; with that weight they join it (a power prior; Ibrahim & Chen 2000,
//! *Statistical Science* 15:46). Where a test says that the stream differs from its siblings, nothing is borrowed.

use crate::curve::{Emphasis, log_rank};
use crate::tally::{Cause, Cells, EventCell, Mass, Sample};

/// Most siblings that are asked: those with the most completions.
pub(crate) const MOST_SIBLINGS: usize = 12;
/// Cells a sibling is coarsened to: its curve then still has steps of well under 5%.
pub(crate) const SIBLING_CELLS: usize = 400;
/// Fewest endings of its own with which a stream can be compared at all.
const LEAST: f64 = 10.0;
/// A stream that differs from its siblings with less than this probability by chance borrows nothing.
const DIFFERENT: f64 = 0.01;
/// Borrowed endings at most, as a multiple of the stream's own: one sibling says little about how siblings vary.
const MOST_BORROWED: f64 = 1.0;
/// The same for each sibling beyond the first.
const MORE_BORROWED: f64 = 0.5;

/// A stream's waits with those it borrows.
#[derive(Clone, Debug, PartialEq)]
pub(crate) struct Pooled {
    pub(crate) cells: Cells,
    /// Share of the completions that is borrowed, in (0, 1).
    pub(crate) share: f64,
    /// How many siblings were asked.
    pub(crate) siblings: usize,
}

/// Joins to `own` what it may borrow from `siblings`; `None` where that is nothing.
pub(crate) fn pool(own: &Cells, siblings: &[&Cells]) -> Option<Pooled> {
    let endings = |cells: &Cells| cells.totals()[0] + cells.totals()[1];
    let siblings: Vec<&Cells> = siblings.iter().copied().filter(|c| endings(c) >= LEAST).collect();
    let mine = endings(own);
    if siblings.is_empty() || mine < LEAST {
        return None;
    }
    let samples: Vec<Sample> =
        std::iter::once(own).chain(siblings.iter().copied()).map(|c| c.sample(Cause::Any)).collect();
    let groups: Vec<&Sample> = samples.iter().collect();
    let theirs = sum(&siblings, 1.0);
    let pair = [&samples[0], &theirs.sample(Cause::Any)];
    for emphasis in [Emphasis::EVEN, Emphasis::LATE] {
        if log_rank(&pair, emphasis).ok()?.p_value < DIFFERENT {
            return None;
        }
    }
    let between = between_streams(&log_rank(&groups, Emphasis::EVEN).ok()?.groups)?;
    let known = endings(&theirs);
    let most = mine * (MOST_BORROWED + MORE_BORROWED * (siblings.len() - 1) as f64);
    let borrowed = (1.0 / (between + 1.0 / known)).min(most).min(known);
    // Less than one ending in twenty changes nothing and would only have to be explained.
    if borrowed < 0.05 * mine {
        return None;
    }
    let cells = sum_of(own, &theirs, borrowed / known);
    Some(Pooled { cells, share: borrowed / (borrowed + mine), siblings: siblings.len() })
}

/// Variance between streams of the log hazard ratio to the pool, >= 0; infinite where it cannot be told.
fn between_streams(groups: &[crate::curve::ObservedExpected]) -> Option<f64> {
    let ratios: Vec<(f64, f64)> = groups
        .iter()
        .filter(|g| g.observed > 0.0 && g.expected > 0.0)
        .map(|g| ((g.observed / g.expected).ln(), g.observed))
        .collect();
    if ratios.len() < 2 {
        return None;
    }
    let weight: f64 = ratios.iter().map(|(_, w)| w).sum();
    let mean = ratios.iter().map(|(r, w)| r * w).sum::<f64>() / weight;
    let q: f64 = ratios.iter().map(|(r, w)| w * (r - mean).powi(2)).sum();
    let squares: f64 = ratios.iter().map(|(_, w)| w * w).sum();
    let scale = weight - squares / weight;
    Some(((q - (ratios.len() - 1) as f64) / scale).max(0.0))
}

fn sum(cells: &[&Cells], factor: f64) -> Cells {
    cells.iter().fold(Cells::default(), |sum, more| sum_of(&sum, more, factor))
}

/// `base` and `factor` times `more`.
fn sum_of(base: &Cells, more: &Cells, factor: f64) -> Cells {
    let mut sum = base.clone();
    sum.events.extend(more.events.iter().map(|e| EventCell {
        done: factor * e.done,
        failed: factor * e.failed,
        ..*e
    }));
    let scaled = |masses: &[Mass]| -> Vec<Mass> {
        masses.iter().map(|m| Mass { weight: factor * m.weight, ..*m }).collect()
    };
    sum.gave_up.extend(scaled(&more.gave_up));
    sum.waiting.extend(scaled(&more.waiting));
    sum.entries.extend(scaled(&more.entries));
    sum.tidy();
    sum
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::{Ending, Wait};

    /// `n` waits at the quantiles of an exponential, cut at age 3; `turn` shifts the levels, so that two sets differ.
    fn exponential(n: usize, mean: f64, turn: f64) -> Cells {
        let waits: Vec<Wait> = (0..n)
            .map(|i| {
                let age = -mean * (1.0 - (i as f64 + turn) / n as f64).ln();
                let ending = if age > 3.0 { Ending::GaveUp } else { Ending::Done };
                Wait::new(age.clamp(1e-6, 3.0), ending).unwrap()
            })
            .collect();
        Cells::from_waits(&waits)
    }

    #[test]
    fn alike_streams_lend_and_others_do_not() {
        let own = exponential(40, 1.0, 0.5);
        let alike: Vec<Cells> = [0.3, 0.6, 0.8].map(|turn| exponential(500, 1.0, turn)).into();
        let pooled = pool(&own, &alike.iter().collect::<Vec<_>>()).unwrap();
        // Three alike siblings: twice its own at most.
        assert!((pooled.share - 2.0 / 3.0).abs() < 0.01, "{}", pooled.share);
        let [done, ..] = pooled.cells.totals();
        assert!(done > 2.5 * own.totals()[0], "{done}");
        let others: Vec<Cells> = [0.3, 0.6].map(|turn| exponential(500, 4.0, turn)).into();
        assert_eq!(pool(&own, &others.iter().collect::<Vec<_>>()), None);
        assert_eq!(pool(&own, &[]), None);
        assert_eq!(pool(&exponential(3, 1.0, 0.5), &[&alike[0]]), None);
    }

    #[test]
    fn siblings_that_differ_among_themselves_lend_less() {
        let own = exponential(40, 1.0, 0.5);
        let spread: Vec<Cells> = [0.4, 0.7, 1.3, 2.2].map(|mean| exponential(500, mean, 0.5)).into();
        let lent = pool(&own, &spread.iter().collect::<Vec<_>>()).map_or(0.0, |p| p.share);
        assert!(lent < 0.35, "{lent}");
    }
}
