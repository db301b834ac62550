//! The domain: one wait, how it ended, and the name of the stream it belongs to. No I/O.

use serde::{Deserialize, Serialize};

/// Largest age accepted, in seconds (about 317 years). Beyond it a value is a time stamp or another unit.
pub const MAX_AGE: f64 = 1e10;

/// Shortest age that is told from none, in seconds: a picosecond, below any clock's step. A shorter one counts as this.
pub const LEAST_AGE: f64 = 1e-12;

/// Largest number of equal waits that one record may stand for.
pub const MAX_COUNT: u64 = 1_000_000_000_000_000;

/// Longest stream name, in bytes.
pub const MAX_STREAM_BYTES: usize = 200;

/// How a wait ended, or that it has not.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Ending {
    /// It completed: an event.
    Done,
    /// It ended without success: the competing event.
    Failed,
    /// The waiter left: right-censored.
    GaveUp,
    /// Still open when last seen: right-censored.
    Waiting,
}

impl Ending {
    /// Every ending, in the order used for storage and printing.
    pub const ALL: [Ending; 4] = [Ending::Done, Ending::Failed, Ending::GaveUp, Ending::Waiting];

    /// The name used in records: `done`, `failed`, `gave_up`, `waiting`.
    pub fn name(self) -> &'static str {
        match self {
            Ending::Done => "done",
            Ending::Failed => "failed",
            Ending::GaveUp => "gave_up",
            Ending::Waiting => "waiting",
        }
    }

    /// The inverse of [`Ending::name`].
    pub fn parse(name: &str) -> Option<Ending> {
        Some(match name.as_bytes() {
            b"done" => Ending::Done,
            b"failed" => Ending::Failed,
            b"gave_up" => Ending::GaveUp,
            b"waiting" => Ending::Waiting,
            _ => return None,
        })
    }

    /// Whether the age is only a lower bound of the wait.
    pub fn is_censored(self) -> bool {
        matches!(self, Ending::GaveUp | Ending::Waiting)
    }
}

/// What is known of the age at the end, in seconds.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Age {
    /// The age itself; from [`LEAST_AGE`] to [`MAX_AGE`].
    Exact(f64),
    /// Only that `over < T <= upto`; `over` is 0 or from [`LEAST_AGE`], `upto` > `over` and possibly infinite.
    Between {
        /// Exclusive lower bound, s.
        over: f64,
        /// Inclusive upper bound, s; may be infinite.
        upto: f64,
    },
}

/// One observation, checked once when made.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Wait {
    age: Age,
    ending: Ending,
    entered: f64,
    attempt: u32,
    count: u64,
    at: Option<f64>,
}

impl Wait {
    /// A first attempt of the given age (s, > 0) that ended so, watched from its start.
    ///
    /// # Errors
    /// [`WaitError::Age`] unless the age is > 0 and at most [`MAX_AGE`].
    #[inline(always)]
    pub fn new(elapsed: f64, ending: Ending) -> Result<Wait, WaitError> {
        if !is_age(elapsed) {
            return Err(WaitError::Age { field: "elapsed", value: elapsed });
        }
        let age = Age::Exact(elapsed.max(LEAST_AGE));
        Ok(Wait { age, ending, entered: 0.0, attempt: 1, count: 1, at: None })
    }

    /// A wait watched from its start of which each value was looked at already, a column at a time: [`is_age`],
    /// [`is_time`], and an attempt from 1.
    #[cfg(feature = "columnar")]
    #[inline(always)]
    pub(crate) fn of_sound(elapsed: f64, ending: Ending, at: Option<f64>, attempt: u32) -> Wait {
        debug_assert!(is_age(elapsed) && at.is_none_or(is_time) && attempt > 0);
        Wait { age: Age::Exact(elapsed.max(LEAST_AGE)), ending, entered: 0.0, attempt, count: 1, at }
    }

    /// A first attempt of which only `over < T <= upto` is known (s; `upto` may be infinite).
    ///
    /// # Errors
    /// [`WaitError::Age`] for a bound out of range, [`WaitError::EmptyBucket`] unless `over < upto`.
    pub fn between(over: f64, upto: f64, ending: Ending) -> Result<Wait, WaitError> {
        if !(0.0..=MAX_AGE).contains(&over) {
            return Err(WaitError::Age { field: "over", value: over });
        }
        if upto.is_nan() || (upto > MAX_AGE && upto.is_finite()) || upto <= 0.0 {
            return Err(WaitError::Age { field: "upto", value: upto });
        }
        if over >= upto {
            return Err(WaitError::EmptyBucket { over, upto });
        }
        let age = Age::Between { over: or_none(over), upto: upto.max(LEAST_AGE) };
        Ok(Wait { age, ending, entered: 0.0, attempt: 1, count: 1, at: None })
    }

    /// As many waits like this one, of each of which only `over < T <= upto` is known: bounds that [`Wait::between`] would take,
    /// and a number that [`Wait::with_count`] would.
    #[inline]
    pub(crate) fn in_bucket(self, over: f64, upto: f64, count: u64) -> Wait {
        debug_assert!(
            Wait::between(over, upto, self.ending).is_ok_and(|wait| wait.with_count(count).is_ok())
        );
        Wait { age: Age::Between { over: or_none(over), upto: upto.max(LEAST_AGE) }, count, ..self }
    }

    /// Sets the age at which watching began (left truncation), s, from 0 to below the age at the end.
    ///
    /// # Errors
    /// [`WaitError::Entered`] when it is negative, not finite, or not below the age.
    #[inline]
    pub fn with_entered(mut self, entered: f64) -> Result<Wait, WaitError> {
        let ceiling = match self.age {
            Age::Exact(t) => t,
            // Entered above the lower bound would condition on part of a bucket that cannot be told apart.
            Age::Between { over, .. } => over.max(f64::MIN_POSITIVE),
        };
        if entered != 0.0 && !(entered > 0.0 && entered < ceiling) {
            return Err(WaitError::Entered { entered, age: ceiling });
        }
        self.entered = or_none(entered);
        Ok(self)
    }

    /// Sets which attempt of its request this was, counted from 1.
    ///
    /// # Errors
    /// [`WaitError::Attempt`] for 0.
    #[inline]
    pub fn with_attempt(mut self, attempt: u32) -> Result<Wait, WaitError> {
        if attempt == 0 {
            return Err(WaitError::Attempt);
        }
        self.attempt = attempt;
        Ok(self)
    }

    /// Sets how many equal waits this stands for, 1 to [`MAX_COUNT`].
    ///
    /// # Errors
    /// [`WaitError::Count`] out of that range.
    #[inline]
    pub fn with_count(mut self, count: u64) -> Result<Wait, WaitError> {
        if count == 0 || count > MAX_COUNT {
            return Err(WaitError::Count { count });
        }
        self.count = count;
        Ok(self)
    }

    /// Sets when it ended or was last seen, Unix seconds from 0 (1970) to 253402300799 (9999).
    ///
    /// # Errors
    /// [`WaitError::At`] out of that range.
    #[inline(always)]
    pub fn with_at(mut self, at: f64) -> Result<Wait, WaitError> {
        if !is_time(at) {
            return Err(WaitError::At { at });
        }
        self.at = Some(at);
        Ok(self)
    }

    /// What is known of the age at the end.
    #[inline]
    pub fn age(&self) -> Age {
        self.age
    }

    /// How it ended.
    #[inline]
    pub fn ending(&self) -> Ending {
        self.ending
    }

    /// Age at which watching began, s; 0 unless left-truncated.
    #[inline]
    pub fn entered(&self) -> f64 {
        self.entered
    }

    /// Which attempt of its request this was, from 1.
    #[inline]
    pub fn attempt(&self) -> u32 {
        self.attempt
    }

    /// How many equal waits this stands for.
    #[inline]
    pub fn count(&self) -> u64 {
        self.count
    }

    /// When it ended or was last seen, Unix seconds.
    #[inline]
    pub fn at(&self) -> Option<f64> {
        self.at
    }
}

/// An age that something lies above: none if it is too short to be told from none.
#[inline]
fn or_none(age: f64) -> f64 {
    if age < LEAST_AGE { 0.0 } else { age }
}

/// Whether a number can be the age of a wait, s.
#[inline(always)]
pub(crate) fn is_age(seconds: f64) -> bool {
    // Both are looked at, not one after the other: a column of them goes four at a time.
    (seconds > 0.0) & (seconds <= MAX_AGE)
}

/// Whether a number can be the time of a wait, Unix seconds: from 1970 to 9999.
#[inline(always)]
pub(crate) fn is_time(at: f64) -> bool {
    (0.0..=253_402_300_799.0).contains(&at)
}

/// Why a wait was refused. [`WaitError::field`] and [`WaitError::remedy`] say where and what to do.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum WaitError {
    /// An age is not in (0, [`MAX_AGE`]].
    #[error("{value} is not an age in seconds above 0 and at most 1e10")]
    Age {
        /// The field's name.
        field: &'static str,
        /// The refused value.
        value: f64,
    },
    /// A bucket without room.
    #[error("the bucket from {over} to {upto} is empty")]
    EmptyBucket {
        /// Lower bound, s.
        over: f64,
        /// Upper bound, s.
        upto: f64,
    },
    /// Watching began after the end.
    #[error("watching cannot begin at age {entered} when the wait ended at {age}")]
    Entered {
        /// The refused entry age, s.
        entered: f64,
        /// The age at the end, s.
        age: f64,
    },
    /// Attempts count from 1.
    #[error("attempts count from 1")]
    Attempt,
    /// A count of nothing, or too large to be one.
    #[error("{count} is not a count from 1 to 1e15")]
    Count {
        /// The refused count.
        count: u64,
    },
    /// A time stamp outside the years 1970 to 9999.
    #[error("{at} is not a time in Unix seconds between the years 1970 and 9999")]
    At {
        /// The refused time.
        at: f64,
    },
}

impl WaitError {
    /// The record field at fault.
    pub fn field(&self) -> &'static str {
        match self {
            WaitError::Age { field, .. } => field,
            WaitError::EmptyBucket { .. } => "upto",
            WaitError::Entered { .. } => "entered",
            WaitError::Attempt => "attempt",
            WaitError::Count { .. } => "count",
            WaitError::At { .. } => "at",
        }
    }

    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            WaitError::Age { value, .. } if *value > MAX_AGE => {
                "give the age in seconds, or with its unit (\"18ms\"); this looks like a time stamp or another unit"
            }
            WaitError::Age { .. } => "give the time waited in seconds, above 0, or with its unit (\"18ms\")",
            WaitError::EmptyBucket { .. } => "give `over` below `upto`",
            WaitError::Entered { .. } => {
                "give an `entered` from 0 to below the age at the end, or leave it out"
            }
            WaitError::Attempt => "number the first try 1, its retry 2",
            WaitError::Count { .. } => "give how many equal waits the line stands for, or leave it out",
            WaitError::At { .. } => "give RFC 3339 (2026-11-30T10:00:00Z) or Unix seconds, not milliseconds",
        }
    }
}

/// Checks a stream name: letters, digits and `. _ - / :`, 1 to [`MAX_STREAM_BYTES`] bytes.
///
/// # Errors
/// [`StreamError`] with the offending part.
pub fn check_stream(name: &str) -> Result<(), StreamError> {
    if name.is_empty() {
        return Err(StreamError::Empty);
    }
    if name.len() > MAX_STREAM_BYTES {
        return Err(StreamError::Long { bytes: name.len() });
    }
    let allowed = |c: char| c.is_alphanumeric() || matches!(c, '.' | '_' | '-' | '/' | ':');
    match name.chars().find(|&c| !allowed(c)) {
        Some(c) => Err(StreamError::Letter { letter: c }),
        None => Ok(()),
    }
}

/// Why a stream name was refused.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum StreamError {
    /// No name at all.
    #[error("the stream has no name")]
    Empty,
    /// Longer than [`MAX_STREAM_BYTES`].
    #[error("the stream name has {bytes} bytes, more than 200")]
    Long {
        /// Its length.
        bytes: usize,
    },
    /// A character that is not allowed.
    #[error("the stream name holds {letter:?}")]
    Letter {
        /// The first refused character.
        letter: char,
    },
}

impl StreamError {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            StreamError::Empty => "name it in the record's `stream`, or for all records with --stream NAME",
            StreamError::Long { .. } => "shorten it; put high-cardinality parts elsewhere",
            StreamError::Letter { .. } => "use letters, digits and . _ - / :",
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn refuses_what_is_not_an_age() {
        for bad in [0.0, -1.0, f64::NAN, f64::INFINITY, 1e12] {
            assert!(Wait::new(bad, Ending::Done).is_err(), "{bad}");
        }
        assert!(Wait::new(1e-6, Ending::Done).is_ok());
    }

    #[test]
    fn entry_lies_before_the_end() {
        let w = Wait::new(2.0, Ending::Done).unwrap();
        assert!(w.with_entered(2.0).is_err());
        assert_eq!(w.with_entered(1.0).unwrap().entered(), 1.0);
    }

    #[test]
    fn stream_names() {
        assert!(check_stream("catalogue.lookup/v2:eu-1_a").is_ok());
        assert_eq!(check_stream("a b"), Err(StreamError::Letter { letter: ' ' }));
        assert!(check_stream(&"x".repeat(201)).is_err());
        assert_eq!(check_stream(""), Err(StreamError::Empty));
    }
}
