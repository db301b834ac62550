//! Little's law as a check of completeness. METHODS.md section 10.
//!
//! Over a closed window the time that all spend waiting is the mean number waiting times the window's length, and also the
//! number of arrivals times their mean wait: an identity of complete data (Little 1961, *Operations Research* 9:383). So
//! the mean number waiting as something else counted it (a gauge, a switchboard) must be that of the records; what it has
//! more is the time of waits that were not recorded.

use serde::{Deserialize, Serialize};

/// Standard errors by which the open waits at the end must fall short to be missed.
const SURE: f64 = 2.0;

/// Both sides of the law, and what they say is missing.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Little {
    /// The window: from the first to the last time of a record, s.
    pub window_s: f64,
    /// λ: waits that ended in the window, per second.
    pub rate_per_s: f64,
    /// W: their mean wait, s.
    pub mean_wait_s: f64,
    /// λW.
    pub by_law: f64,
    /// L of the records: the mean number waiting over the window, each wait counted while it lay inside.
    pub by_count: f64,
    /// L from elsewhere, where it was given.
    pub observed: Option<f64>,
    /// Records that seem to be missing to explain it; below 0: more was recorded than was there.
    pub missing: Option<f64>,
    /// Open waits on record at the end.
    pub open: u64,
    /// How many open waits seem not to be on record: those that λW has more, where that is more than chance. At an hour that
    /// is busier or quieter than usual it is no sign.
    pub open_missing: Option<f64>,
}

/// What went through a queue within a window.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Passed {
    /// Length of the window, s, above 0.
    pub window: f64,
    /// Waits that ended in it, above 0.
    pub ended: u64,
    /// Their waits together, s.
    pub waited: f64,
    /// Time that all waits on record spent inside the window, s.
    pub inside: f64,
    /// Waits on record as open at its end.
    pub open: u64,
}

impl Little {
    /// Both sides; `observed`: the mean number waiting over the window as something else counted it. `None` for an empty
    /// window.
    pub fn of(passed: &Passed, observed: Option<f64>) -> Option<Little> {
        let Passed { window, ended, waited, inside, open } = *passed;
        if !(window > 0.0 && window.is_finite() && ended > 0 && waited > 0.0) {
            return None;
        }
        let (rate, mean) = (ended as f64 / window, waited / ended as f64);
        let (by_law, by_count) = (rate * mean, inside / window);
        let short = by_law - open as f64;
        Some(Little {
            window_s: window,
            rate_per_s: rate,
            mean_wait_s: mean,
            by_law,
            by_count,
            observed,
            missing: observed.map(|l| (l - by_count) * window / mean),
            open,
            // The number waiting at one moment varies about as a Poisson count does.
            open_missing: (short > SURE * by_law.sqrt()).then_some(short),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn both_sides_and_the_missing() {
        // 100 waits of 6 s in 200 s; a gauge saw 3.6 waiting on average: 20 records are missing.
        let passed = Passed { window: 200.0, ended: 100, waited: 600.0, inside: 600.0, open: 0 };
        let law = Little::of(&passed, Some(3.6)).unwrap();
        assert_eq!((law.by_law, law.by_count), (3.0, 3.0));
        assert!((law.missing.unwrap() - 20.0).abs() < 1e-9);
        // Three open waits would be expected: within chance.
        assert_eq!(law.open_missing, None);
        assert_eq!(Little::of(&Passed { window: 20.0, ..passed }, None).unwrap().open_missing, Some(30.0));
        assert_eq!(
            Little::of(&Passed { window: 20.0, open: 28, ..passed }, None).unwrap().open_missing,
            None
        );
        assert_eq!(Little::of(&Passed { window: 0.0, ..passed }, None), None);
        assert_eq!(Little::of(&Passed { ended: 0, ..passed }, None), None);
    }
}
