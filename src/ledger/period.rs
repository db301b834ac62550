//! The periods under which a ledger files tallies: UTC hours, and the UTC days that old hours are rolled into.

use std::fmt;
use std::ops::Range;

/// Seconds in an hour.
const HOUR: f64 = 3_600.0;

/// A UTC hour, counted from 1970-01-01T00:00Z.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Hour(pub i32);

impl Hour {
    /// The hour of a Unix time in seconds; times beyond what 32 bits hold go to the nearest hour that they do.
    #[inline]
    pub fn of(at: f64) -> Hour {
        Hour((at / HOUR).floor() as i32)
    }

    /// When it begins, Unix seconds.
    pub fn start(self) -> f64 {
        f64::from(self.0) * HOUR
    }

    /// The day it is in, days since 1970-01-01.
    pub fn day(self) -> i32 {
        self.0.div_euclid(24)
    }

    /// The first hour of a day, days since 1970-01-01.
    pub fn first_of(day: i32) -> Hour {
        Hour(day.saturating_mul(24))
    }
}

/// What one stored tally covers.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Period {
    /// One hour.
    Hour(Hour),
    /// A whole day, days since 1970-01-01: what old hours are rolled into.
    Day(i32),
}

impl Period {
    /// The hours it covers.
    pub fn hours(self) -> Range<Hour> {
        match self {
            Period::Hour(hour) => hour..Hour(hour.0.saturating_add(1)),
            Period::Day(day) => Hour::first_of(day)..Hour::first_of(day.saturating_add(1)),
        }
    }

    /// Whether it shares an hour with `window`.
    pub fn overlaps(self, window: &Range<Hour>) -> bool {
        let own = self.hours();
        own.start < window.end && window.start < own.end
    }
}

/// ISO 8601: `2026-11-30` for a day, `2026-11-30T10Z` for an hour.
impl fmt::Display for Period {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let start = i64::from(self.hours().start.0) * 3_600;
        match (jiff::Timestamp::from_second(start), self) {
            (Ok(start), Period::Hour(_)) => write!(f, "{}", start.strftime("%Y-%m-%dT%HZ")),
            (Ok(start), Period::Day(_)) => write!(f, "{}", start.strftime("%Y-%m-%d")),
            // No wait is dated outside the years 1970 to 9999; a damaged file may say so.
            (Err(_), _) => write!(f, "Unix time {start}"),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn hours_and_days() {
        // Unix time 1796032800 is 2026-11-30T10:00:00Z (date -u -d @1796032800).
        let hour = Hour::of(1_796_034_999.5);
        assert_eq!(hour.start(), 1_796_032_800.0);
        assert_eq!(Period::Hour(hour).to_string(), "2026-11-30T10Z");
        let day = Period::Day(hour.day());
        assert_eq!(day.to_string(), "2026-11-30");
        assert_eq!(day.hours().end.0 - day.hours().start.0, 24);
        assert!(day.overlaps(&(hour..Hour(hour.0 + 1))));
        assert!(!day.overlaps(&(day.hours().end..Hour(i32::MAX))));
        assert_eq!(Hour::of(0.0), Hour(0));
        assert!(!Period::Day(i32::MAX).to_string().is_empty());
    }
}
