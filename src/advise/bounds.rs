//! Between which give-up times the best is sought, and why.

use crate::policy::Entry;
use crate::stopping::Aim;
use crate::tally::Cells;
use crate::wait::MAX_AGE;

/// Without a ceiling in the policy: this many times the longest age seen, though no more than [`MAX_AGE`].
const CEILING: f64 = 10.0;
/// Without a floor although restarts cost something: this share of the least completion.
const FLOOR: f64 = 0.5;
/// Where a restart is free, the floor is this percentile of completions (METHODS.md section 5, "The edge at 0").
const FREE_RESTART: f64 = 0.05;

/// Floor and ceiling in s, `0 < floor < ceiling`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Bounds {
    pub(crate) floor: f64,
    pub(crate) ceiling: f64,
    /// Whether the floor is the 5th percentile of completions, for want of any cost of a restart.
    pub(crate) free_restart: bool,
    /// Whether the policy named the ceiling (or the deadline did).
    pub(crate) ceiling_given: bool,
    /// Least age seen, s.
    pub(crate) first: f64,
    /// Median completion, s, where there is one.
    pub(crate) typical: Option<f64>,
}

impl Bounds {
    /// `None` where no age at all is known.
    pub(crate) fn of(cells: &Cells, entry: &Entry) -> Option<Bounds> {
        let completions = || cells.events.iter().filter(|e| e.done > 0.0);
        let finite = |over: f64, upto: f64| if upto.is_finite() { upto } else { over };
        let ages = || {
            let ended = cells.events.iter().map(|e| finite(e.upto, e.over).max(e.over));
            let censored = cells.gave_up.iter().chain(&cells.waiting).map(|m| m.age);
            ended.chain(censored).filter(|&age| age > 0.0)
        };
        let longest = ages().fold(0.0, f64::max);
        if longest <= 0.0 {
            return None;
        }
        let first = completions()
            .map(|e| finite(e.upto, e.over))
            .filter(|&age| age > 0.0)
            .fold(f64::INFINITY, f64::min)
            .min(longest);
        let percentile = |share: f64| {
            let goal = share * cells.totals()[0];
            let mut below = 0.0;
            let at = completions().find(|e| {
                below += e.done;
                below >= goal
            })?;
            Some(finite(at.upto, at.over)).filter(|&t| t > 0.0)
        };
        let by = entry.worth.and_then(|w| if let Aim::Deadline { by, .. } = w.aim { Some(by) } else { None });
        let given = match (entry.guard.ceiling, by) {
            (Some(ceiling), Some(by)) => Some(ceiling.min(by)),
            (ceiling, by) => ceiling.or(by),
        };
        let free_restart = entry.restart_is_free();
        let floor = entry.guard.floor.unwrap_or_else(|| {
            if free_restart { percentile(FREE_RESTART).unwrap_or(first) } else { FLOOR * first }
        });
        // No further than a wait may be long.
        let ceiling = given.unwrap_or_else(|| (CEILING * longest).max(2.0 * floor).min(MAX_AGE));
        Some(Bounds {
            // A ceiling below all that was seen leaves the floor nowhere to go but under it.
            floor: floor.min(0.5 * ceiling).max(ceiling * 1e-9),
            ceiling,
            free_restart,
            ceiling_given: given.is_some(),
            first,
            typical: percentile(0.5),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::{Ending, Wait};

    fn cells(ages: &[f64]) -> Cells {
        let waits: Vec<Wait> = ages.iter().map(|&t| Wait::new(t, Ending::Done).unwrap()).collect();
        Cells::from_waits(&waits)
    }

    #[test]
    fn a_free_restart_puts_the_floor_at_the_fifth_percentile() {
        let ages: Vec<f64> = (1..=100).map(f64::from).collect();
        let bounds = Bounds::of(&cells(&ages), &Entry::without_policy()).unwrap();
        assert_eq!((bounds.floor, bounds.ceiling, bounds.typical), (5.0, 1000.0, Some(50.0)));
        assert!(bounds.free_restart && !bounds.ceiling_given);
    }

    #[test]
    fn the_policy_goes_first() {
        let mut entry = Entry::without_policy();
        (entry.guard.floor, entry.guard.ceiling) = (Some(0.2), Some(3.0));
        let bounds = Bounds::of(&cells(&[1.0, 2.0]), &entry).unwrap();
        assert_eq!((bounds.floor, bounds.ceiling), (0.2, 3.0));
        assert_eq!(Bounds::of(&Cells::default(), &entry), None);
        // A ceiling below everything seen still leaves a range.
        entry.guard = Default::default();
        entry.guard.ceiling = Some(0.1);
        let bounds = Bounds::of(&cells(&[1.0, 2.0]), &entry).unwrap();
        assert!(bounds.floor < bounds.ceiling);
    }
}
