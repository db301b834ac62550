//! The ledger's own clock: ages of keys, of open waits and of tallies are told by it.
//!
//! It is never ahead of the caller's clock and, when behind, runs at most [`HASTE`] times as fast as the caller's
//! does from call to call. So a clock that leaps years ahead ages nothing at once, one that falls back only keeps
//! things longer, and after a night's standstill it has caught up in minutes.

/// How many times faster than the caller's clock it may run to catch up.
const HASTE: f64 = 60.0;

/// Longest time between two calls that counts as running, s. What is above may be a leap.
const STEP: f64 = 60.0;

#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Clock {
    /// Unix seconds; `None` before the first call.
    time: Option<f64>,
    last_call: Option<f64>,
}

impl Clock {
    /// Starts where it stood when the ledger was last kept.
    pub(super) fn resume(time: Option<f64>) -> Clock {
        Clock { time: time.filter(|t| t.is_finite()), last_call: None }
    }

    /// Follows the caller's clock and gives the ledger's time, Unix seconds.
    pub(super) fn follow(&mut self, now: f64) -> f64 {
        let step = (now - self.last_call.unwrap_or(now)).clamp(0.0, STEP);
        self.last_call = Some(now);
        let time = self.time.map_or(now, |time| now.min(time + HASTE * step));
        self.time = Some(time);
        time
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn follows_but_does_not_leap() {
        let mut clock = Clock::default();
        for now in [1000.0, 1010.0, 1100.0, 1200.0] {
            assert_eq!(clock.follow(now), now);
        }
        assert!(clock.follow(1e9) <= 1200.0 + HASTE * STEP);
        assert_eq!(clock.follow(1201.0), 1201.0);
        assert_eq!(clock.follow(900.0), 900.0);
        // A night off: caught up within minutes of running.
        let mut clock = Clock::resume(Some(0.0));
        let mut now = 30_000.0;
        while clock.follow(now) < now {
            now += 10.0;
        }
        assert!(now - 30_000.0 < 600.0);
    }

    #[test]
    fn a_damaged_time_ages_nothing() {
        assert_eq!(Clock::resume(Some(1e300)).follow(5.0), 5.0);
        assert_eq!(Clock::resume(Some(f64::NAN)).follow(5.0), 5.0);
    }
}
