//! Once a week by the clock of a place: which run is due. Pure: the time is passed in.
//!
//! A run is named by the day on which it is due, not by an instant, so that a clock that is put back makes no second one. An
//! hour that summer time skips is taken an hour later, one that comes twice the first time.

use jiff::civil::{Date, Weekday};
use jiff::tz::{TimeZone, TimeZoneDatabase};
use jiff::{Span, Timestamp};

use crate::policy;

/// A schedule whose time zone is known.
#[derive(Clone, Debug, PartialEq)]
pub struct Schedule {
    day: Weekday,
    hour: i8,
    zone: TimeZone,
}

/// Why a schedule cannot be followed.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("the time zone {0:?} is not known here")]
pub struct ScheduleError(String);

impl Schedule {
    /// From the policy: the system's tz database first, which may be newer, then the one that is built in.
    ///
    /// # Errors
    /// [`ScheduleError`] if neither knows the zone.
    pub fn new(weekly: &policy::Weekly) -> Result<Schedule, ScheduleError> {
        let name = &weekly.time_zone;
        let zone = match name.as_str() {
            "UTC" => TimeZone::UTC,
            _ => TimeZone::get(name)
                .or_else(|_| TimeZoneDatabase::bundled().get(name))
                .map_err(|_| ScheduleError(name.clone()))?,
        };
        let day = Weekday::from_monday_zero_offset(weekly.day.min(6) as i8).unwrap_or(Weekday::Monday);
        Ok(Schedule { day, hour: weekly.hour.min(23) as i8, zone })
    }

    /// The instant of the run that is due on a day.
    fn instant(&self, date: Date) -> Option<Timestamp> {
        let clock = date.at(self.hour, 0, 0, 0);
        self.zone.to_ambiguous_zoned_datetime(clock).compatible().ok().map(|zoned| zoned.timestamp())
    }

    /// The day of the newest run that is due by now.
    pub fn latest(&self, now: Timestamp) -> Option<Date> {
        let today = self.zone.to_datetime(now).date();
        let back = self.day.until(today.weekday());
        let date = today.checked_sub(Span::new().days(i64::from(back))).ok()?;
        match self.instant(date) {
            Some(instant) if instant <= now => Some(date),
            _ => date.checked_sub(Span::new().weeks(1)).ok(),
        }
    }

    /// The run to make now, if the last one that was made was that of `last`. After a time away it is the newest alone:
    /// what the others would have said is in its data.
    pub fn due(&self, now: Timestamp, last: Date) -> Option<Date> {
        self.latest(now).filter(|latest| *latest > last)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn schedule(day: u8, hour: u8, zone: &str) -> Schedule {
        Schedule::new(&policy::Weekly { day, hour, time_zone: zone.into() }).unwrap()
    }

    fn at(text: &str) -> Timestamp {
        text.parse().unwrap()
    }

    fn date(text: &str) -> Date {
        text.parse().unwrap()
    }

    /// How often a run is made when the clock is looked at every ten minutes.
    fn runs(schedule: &Schedule, from: &str, to: &str) -> Vec<Timestamp> {
        let (mut now, end) = (at(from), at(to));
        let mut last = schedule.latest(now).unwrap();
        let mut runs = Vec::new();
        while now < end {
            now += jiff::SignedDuration::from_mins(10);
            if let Some(run) = schedule.due(now, last) {
                runs.push(now);
                last = run;
            }
        }
        runs
    }

    /// In Paris clocks go from 02:00 to 03:00 on 29 March 2026 and from 03:00 to 02:00 on 25 October 2026, at 01:00 UTC
    /// each (tz database, rule EU: last Sundays of March and October).
    #[test]
    fn summer_time_neither_loses_nor_doubles_a_run() {
        let sunday = schedule(6, 2, "Europe/Paris");
        // 02:00 does not exist: an hour later by the old clock, 03:00 by the new.
        let spring = runs(&sunday, "2026-03-25T00:00:00Z", "2026-04-01T00:00:00Z");
        assert_eq!(spring, [at("2026-03-29T01:00:00Z")]);
        // 02:00 comes twice: the first, still by summer time.
        let autumn = runs(&sunday, "2026-10-21T00:00:00Z", "2026-10-28T00:00:00Z");
        assert_eq!(autumn, [at("2026-10-25T00:00:00Z")]);
        let year = runs(&sunday, "2025-12-31T00:00:00Z", "2026-12-31T00:00:00Z");
        assert_eq!(year.len(), 52);
        let monday = schedule(0, 6, "Europe/Paris");
        assert_eq!(
            runs(&monday, "2026-10-18T00:00:00Z", "2026-10-27T00:00:00Z"),
            [at("2026-10-19T04:00:00Z"), at("2026-10-26T05:00:00Z")]
        );
    }

    /// Samoa had no 30 December 2011 (tz database, Pacific/Apia: from UTC-10 to UTC+14), a Friday.
    #[test]
    fn a_day_that_a_place_skipped() {
        let friday = schedule(4, 6, "Pacific/Apia");
        let runs = runs(&friday, "2011-12-20T00:00:00Z", "2012-01-10T00:00:00Z");
        assert_eq!(runs.len(), 3, "{runs:?}");
    }

    #[test]
    fn away_and_put_back() {
        let monday = schedule(0, 6, "UTC");
        let last = monday.latest(at("2026-11-02T06:00:00Z")).unwrap();
        assert_eq!(last, date("2026-11-02"));
        assert_eq!(monday.due(at("2026-11-09T05:59:59Z"), last), None);
        // Three weeks away: one run.
        assert_eq!(monday.due(at("2026-11-25T00:00:00Z"), last), Some(date("2026-11-23")));
        // The clock is put back by a month after it: none.
        assert_eq!(monday.due(at("2026-10-20T00:00:00Z"), date("2026-11-23")), None);
        assert!(Schedule::new(&policy::Weekly { day: 0, hour: 0, time_zone: "Mars/Base".into() }).is_err());
    }
}
