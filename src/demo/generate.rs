//! A seed -> the waits of the scenario, in the order in which they ended. No clock: the weeks end when told.

use super::fernhollow::truth;
use super::truth::Stream;
use crate::wait::{Ending, Wait, WaitError};
use jiff::Timestamp;
use rand::{Rng, RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use std::fmt;

/// When the weeks end unless told otherwise: 2026-11-30T00:00:00Z, a Monday, in Unix seconds.
pub const END: f64 = 1_795_996_800.0;

/// Most weeks a scenario may have.
pub const MAX_WEEKS: u32 = 104;

const HOUR: f64 = 3_600.0;
const WEEK: f64 = 168.0 * HOUR;

/// One wait of the scenario. Ages and times are rounded as a recorder would: see [`Stream::ticks`].
///
/// Its `Display` is its line of NDJSON, without the fields that would say what is assumed anyway.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DemoRecord {
    /// Name of its stream.
    pub stream: &'static str,
    /// When it ended or was last seen, Unix seconds.
    pub at: f64,
    /// How long it had waited then, s.
    pub elapsed: f64,
    /// How it ended.
    pub ending: Ending,
    /// Which attempt of its request it was, from 1.
    pub attempt: u32,
    /// Ties the attempts of one request, in streams with retries.
    pub id: Option<u64>,
    /// Age at which watching began, s.
    pub entered: f64,
}

impl DemoRecord {
    /// The same as a [`Wait`].
    ///
    /// # Errors
    /// [`WaitError`] if a field was changed to what is no wait; never as generated.
    pub fn wait(&self) -> Result<Wait, WaitError> {
        Wait::new(self.elapsed, self.ending)?
            .with_entered(self.entered)?
            .with_attempt(self.attempt)?
            .with_at(self.at)
    }
}

impl fmt::Display for DemoRecord {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let at = Timestamp::from_millisecond((self.at * 1e3).round() as i64).unwrap_or_default();
        let DemoRecord { stream, elapsed, ending, .. } = self;
        write!(f, r#"{{"stream":"{stream}","at":"{at}","elapsed":{elapsed},"ending":"{}""#, ending.name())?;
        if let Some(id) = self.id {
            write!(f, r#","attempt":{},"id":"r-{id}""#, self.attempt)?;
        }
        if self.entered > 0.0 {
            write!(f, r#","entered":{}"#, self.entered)?;
        }
        f.write_str("}")
    }
}

/// Why there is no such scenario.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum ScenarioError {
    /// Too few or too many weeks.
    #[error("{weeks} is not a number of weeks from 1 to {MAX_WEEKS}")]
    Weeks {
        /// The refused number.
        weeks: u32,
    },
    /// An end so early or late that not every time stamp would be one.
    #[error("{end} is not an end in Unix seconds between the years 1975 and 9999")]
    End {
        /// The refused end.
        end: f64,
    },
}

/// A scenario: which seed, how many weeks, where the law of `catalogue.lookup` shifts, and when it all ends.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Scenario {
    seed: u64,
    weeks: u32,
    shift_week: u32,
    end: f64,
}

impl Scenario {
    /// Four weeks up to [`END`], with the shift in the last.
    pub fn new(seed: u64) -> Scenario {
        Scenario { seed, weeks: 4, shift_week: 4, end: END }
    }

    /// `weeks` (1 to [`MAX_WEEKS`]) up to `end` (Unix seconds); `shift_week` is the first week under the new
    /// law, counted from 1; beyond `weeks` nothing shifts.
    ///
    /// # Errors
    /// [`ScenarioError`] for a number out of its range.
    pub fn spanning(seed: u64, weeks: u32, shift_week: u32, end: f64) -> Result<Scenario, ScenarioError> {
        if !(1..=MAX_WEEKS).contains(&weeks) {
            return Err(ScenarioError::Weeks { weeks });
        }
        // The years 1975 to 9999: even the longest scenario begins after 1970.
        if !(157_766_400.0..=253_402_300_799.0).contains(&end) {
            return Err(ScenarioError::End { end });
        }
        Ok(Scenario { seed, weeks, shift_week, end })
    }

    /// What everything is drawn from.
    pub fn seed(&self) -> u64 {
        self.seed
    }

    /// When the last week ends, Unix seconds.
    pub fn end(&self) -> f64 {
        self.end
    }

    /// When the first week begins, Unix seconds.
    pub fn begin(&self) -> f64 {
        self.end - f64::from(self.weeks) * WEEK
    }

    /// When the law shifts, Unix seconds.
    pub fn shift(&self) -> f64 {
        self.begin() + (f64::from(self.shift_week) - 1.0) * WEEK
    }

    /// The waits of all streams, in order of `at`: about 50,000 a week. Same scenario, same waits.
    ///
    /// What is open at the end is `waiting`. Kept in memory for the sorting, 64 bytes each.
    pub fn waits(&self) -> impl Iterator<Item = DemoRecord> + use<> {
        let mut all = Vec::new();
        let mut rng = Xoshiro256PlusPlus::seed_from_u64(self.seed);
        for stream in truth() {
            // Each stream draws from its own stretch, so that a change to one leaves the others as they were.
            rng.jump();
            self.follow(stream, &mut rng.clone(), &mut all);
        }
        all.sort_by(|a, b| a.at.total_cmp(&b.at));
        all.into_iter()
    }

    fn follow(&self, stream: &Stream, rng: &mut impl Rng, out: &mut Vec<DemoRecord>) {
        let tied = stream.retries.attempts > 1;
        for (request, (mut start, hour)) in (1..).zip(self.starts(stream, rng)) {
            let law = stream.shifted.filter(|_| start >= self.shift()).unwrap_or(stream.done);
            let crowd = if stream.crowds { stream.rhythm.crowd(hour) } else { 1.0 };
            let mut done = law.draw(crowd, rng);
            for attempt in 1..=stream.retries.attempts {
                let failed = stream.failed.draw(1.0, rng);
                let gave_up = stream.patience.draw(1.0, rng);
                let (age, ending) =
                    first([(done, Ending::Done), (failed, Ending::Failed), (gave_up, Ending::GaveUp)]);
                let id = tied.then_some(request);
                out.extend(self.record(stream, start, age, ending).map(|r| DemoRecord { attempt, id, ..r }));
                if ending != Ending::GaveUp {
                    break;
                }
                start += age + stream.retries.pause;
                if rng.random::<f64>() >= stream.retries.sticky {
                    done = law.draw(crowd, rng);
                }
            }
        }
    }

    /// Starts as a Poisson process whose rate is constant within each hour: unit-rate gaps, spent on the hours.
    fn starts(&self, stream: &Stream, rng: &mut impl Rng) -> Vec<(f64, usize)> {
        let begin = self.begin() - f64::from(stream.lead_weeks) * WEEK;
        let hours = (self.weeks + stream.lead_weeks) * 168;
        let mut starts = Vec::new();
        let mut gap = unit_gap(rng);
        for opening in (0..hours).map(|hour| begin + f64::from(hour) * HOUR) {
            // 1970 began on a Thursday.
            let hour_of_week = ((opening / HOUR).floor() as usize + 72) % 168;
            let expected = stream.per_week * stream.rhythm.share(hour_of_week);
            let mut spent = gap;
            while spent < expected {
                starts.push((opening + spent / expected * HOUR, hour_of_week));
                spent += unit_gap(rng);
            }
            gap = spent - expected;
        }
        starts
    }

    /// What a recorder that runs from the first week to the end notes of a wait; nothing if it was over before,
    /// or begins after.
    fn record(&self, stream: &Stream, start: f64, age: f64, ending: Ending) -> Option<DemoRecord> {
        let (age, ending) =
            if start + age < self.end { (age, ending) } else { (self.end - start, Ending::Waiting) };
        let tick = |seconds: f64, per_second: f64| (seconds * per_second).round() / per_second;
        let elapsed = tick(age, stream.ticks).max(1.0 / stream.ticks);
        let entered = tick((self.begin() - start).max(0.0), stream.ticks);
        let at = tick(start + age, stream.ticks.min(1e3));
        (age > 0.0 && elapsed > entered).then_some(DemoRecord {
            stream: stream.name,
            at,
            elapsed,
            ending,
            attempt: 1,
            id: None,
            entered,
        })
    }
}

/// The waits of `weeks` weeks up to `end` (Unix seconds, [`END`] for the usual), with the shift in the last week.
///
/// # Errors
/// [`ScenarioError`] for a number out of its range.
pub fn waits(seed: u64, weeks: u32, end: f64) -> Result<impl Iterator<Item = DemoRecord>, ScenarioError> {
    Ok(Scenario::spanning(seed, weeks, weeks, end)?.waits())
}

fn first(times: [(f64, Ending); 3]) -> (f64, Ending) {
    times.into_iter().fold((f64::INFINITY, Ending::Waiting), |best, t| if t.0 < best.0 { t } else { best })
}

fn unit_gap(rng: &mut impl Rng) -> f64 {
    -(1.0 - rng.random::<f64>()).ln()
}
