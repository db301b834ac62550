//! What is brought to a ledger at once: counted waits, starts and ends of open waits, counts of bad lines, records.

use std::collections::{BTreeMap, HashMap};
use std::fmt;

use super::{Hour, MAX_RECORD_BYTES, MAX_SUBJECT_BYTES, Position, Record, RecordError};
use crate::running::Running;
use crate::tally::{self, Periods, Tally};
use crate::wait::{Ending, StreamError, Wait, check_stream};

/// Longest idempotency key, in bytes.
pub const MAX_KEY_BYTES: usize = 255;

/// Longest id of an open wait, in bytes.
pub const MAX_ID_BYTES: usize = 255;

/// Longest reason under which bad lines are counted, in bytes.
pub const MAX_REASON_BYTES: usize = 64;

/// Waits that belong together: all of them are counted, or none.
#[derive(Clone, Debug, Default)]
pub struct Batch {
    pub(super) key: Option<(Box<str>, Digest)>,
    pub(super) streams: HashMap<Box<str>, Hours>,
    pub(super) events: Vec<Event>,
    pub(super) running: Vec<Running>,
    pub(super) bad_lines: BTreeMap<Box<str>, u64>,
    pub(super) positions: BTreeMap<Box<str>, Position>,
    pub(super) records: Vec<Record>,
}

/// The tallies of one stream by hour.
#[derive(Clone, Debug, Default)]
pub(super) struct Hours(pub(super) Vec<(Hour, Tally)>);

impl Batch {
    /// A batch that may be brought twice: the key tells it from others, `content` tells whether it is still the
    /// same (a digest of the bytes as the client sent them).
    ///
    /// # Errors
    /// [`KeyError`] for an empty key or one above [`MAX_KEY_BYTES`].
    pub fn keyed(key: &str, content: Digest) -> Result<Batch, KeyError> {
        match key.len() {
            0 => Err(KeyError::Empty),
            1..=MAX_KEY_BYTES => Ok(Batch { key: Some((key.into(), content)), ..Batch::default() }),
            bytes => Err(KeyError::Long { bytes }),
        }
    }

    /// Counts one wait under the hour in which it ended or was last seen; `now` (Unix seconds) stands for the time
    /// of a wait that carries none. A wait of a day or more also leaves and enters, at the age it had, each day that
    /// it spans.
    ///
    /// # Errors
    /// [`StreamError`] if the stream's name is not allowed; nothing is counted then.
    #[inline]
    pub fn add(&mut self, stream: &str, wait: &Wait, now: f64) -> Result<(), StreamError> {
        match wait.at() {
            Some(at) => self.hours(stream, |hours| tally::file(wait, at, hours)),
            None => {
                let dated = wait.with_at(now).unwrap_or(*wait);
                self.hours(stream, |hours| tally::file(&dated, now, hours))
            }
        }
    }

    /// Adds waits that are counted already.
    ///
    /// # Errors
    /// [`StreamError`] if the stream's name is not allowed; nothing is counted then.
    pub fn merge(&mut self, stream: &str, hour: Hour, tally: &Tally) -> Result<(), StreamError> {
        self.hours(stream, |hours| hours.at(hour).merge(tally))
    }

    /// Adds all of another batch, whatever its key.
    pub fn absorb(&mut self, other: Batch) {
        for (stream, hours) in other.streams {
            let mine = self.streams.entry(stream).or_default();
            hours.0.iter().for_each(|(hour, tally)| mine.at(*hour).merge(tally));
        }
        self.events.extend(other.events);
        self.running.extend(other.running);
        for (reason, lines) in other.bad_lines {
            self.bad_lines(&reason, lines);
        }
        self.records.extend(other.records);
        self.positions.extend(other.positions);
    }

    /// Files how far a followed file was read, if and only if the rest of the batch is filed.
    pub fn reached(&mut self, name: &str, position: Position) {
        self.positions.insert(name.into(), position);
    }

    #[inline]
    fn hours(&mut self, stream: &str, count: impl FnOnce(&mut Hours)) -> Result<(), StreamError> {
        match self.streams.get_mut(stream) {
            Some(hours) => count(hours),
            None => {
                check_stream(stream)?;
                count(self.streams.entry(stream.into()).or_default());
            }
        }
        Ok(())
    }

    /// Files a reading of a histogram that only grows: what it has grown by since the last one is counted.
    ///
    /// # Errors
    /// [`StreamError`] if the stream's name is not allowed; nothing is filed then.
    pub fn running(&mut self, running: Running) -> Result<(), StreamError> {
        check_stream(&running.stream)?;
        self.running.push(running);
        Ok(())
    }

    /// Files that a wait has started: it is open until its end is filed.
    ///
    /// # Errors
    /// [`EventError`] for a name, id, attempt or time that is not allowed.
    pub fn start(&mut self, tie: Tie<'_>, started: f64, entered: f64) -> Result<(), EventError> {
        if !(entered >= 0.0 && entered.is_finite()) {
            return Err(EventError::Entered { entered });
        }
        self.event(tie, started, Half::Start { started, entered })
    }

    /// Files that a wait has ended. Together with its start, filed before or after, it makes one wait.
    ///
    /// # Errors
    /// [`EventError`] for a name, id, attempt or time that is not allowed.
    pub fn end(&mut self, tie: Tie<'_>, ended: f64, ending: Ending) -> Result<(), EventError> {
        self.event(tie, ended, Half::End { ended, ending })
    }

    /// Files that a wait, counted by [`Batch::add`], is no longer open, if it was. Nothing more is counted.
    ///
    /// # Errors
    /// [`EventError`] for a name, id, attempt or time that is not allowed.
    pub fn close(&mut self, tie: Tie<'_>, ended: f64) -> Result<(), EventError> {
        self.event(tie, ended, Half::Close { ended })
    }

    fn event(&mut self, tie: Tie<'_>, time: f64, half: Half) -> Result<(), EventError> {
        let Tie { stream, id, attempt } = tie;
        check_stream(stream)?;
        if id.is_empty() || id.len() > MAX_ID_BYTES {
            return Err(EventError::Id { bytes: id.len() });
        }
        if attempt == 0 {
            return Err(EventError::Attempt);
        }
        if !(0.0..=MAX_TIME).contains(&time) {
            return Err(EventError::Time { time });
        }
        self.events.push(Event { key: EventKey { stream: stream.into(), id: id.into(), attempt }, half });
        Ok(())
    }

    /// Counts lines that could not be read, by reason. Reasons come from a small set of the program's own; one above
    /// [`MAX_REASON_BYTES`] is cut.
    pub fn bad_lines(&mut self, reason: &str, lines: u64) {
        let end = (0..=MAX_REASON_BYTES.min(reason.len())).rfind(|&i| reason.is_char_boundary(i));
        let sum = self.bad_lines.entry(reason[..end.unwrap_or(0)].into()).or_default();
        *sum = sum.saturating_add(lines);
    }

    /// Keeps a record. One whose number is taken for good by another refuses the batch ([`super::BatchError::Taken`]); the
    /// same brought again changes nothing.
    ///
    /// # Errors
    /// [`RecordError`] for one that is too long; nothing is kept then.
    pub fn note(&mut self, record: Record) -> Result<(), RecordError> {
        let (subject, bytes) = (record.subject.len(), record.text.len());
        if subject > MAX_SUBJECT_BYTES {
            return Err(RecordError::Subject { bytes: subject });
        }
        if bytes > MAX_RECORD_BYTES {
            return Err(RecordError::Long { bytes });
        }
        self.records.push(record);
        Ok(())
    }

    /// The streams it names, some more than once: those that change with it.
    pub fn streams(&self) -> impl Iterator<Item = &str> {
        let awaited = self.events.iter().map(|event| &*event.key.stream);
        let running = self.running.iter().map(|running| &*running.stream);
        self.streams.keys().map(|name| &**name).chain(awaited).chain(running)
    }

    /// Whether a wait may be open because of it.
    pub fn ties(&self) -> bool {
        !self.events.is_empty()
    }

    /// How many waits it counts, not those that its events and readings may make.
    pub fn waits(&self) -> u64 {
        self.streams
            .values()
            .flat_map(|hours| &hours.0)
            .flat_map(|(_, tally)| tally.counts())
            .fold(0, u64::saturating_add)
    }

    /// Whether there is nothing in it.
    pub fn is_empty(&self) -> bool {
        self.streams.is_empty()
            && self.events.is_empty()
            && self.bad_lines.is_empty()
            && self.records.is_empty()
            && self.running.is_empty()
            && self.positions.is_empty()
    }
}

impl Hours {
    #[inline]
    pub(super) fn at(&mut self, hour: Hour) -> &mut Tally {
        // Waits come roughly in order of time, so the hour is nearly always the last.
        let i = match self.0.last() {
            Some((last, _)) if *last == hour => self.0.len() - 1,
            _ => match self.0.binary_search_by_key(&hour, |(h, _)| *h) {
                Ok(i) => i,
                Err(i) => {
                    self.0.insert(i, (hour, Tally::default()));
                    i
                }
            },
        };
        &mut self.0[i].1
    }
}

impl Periods for Hours {
    fn closing(&mut self, day: i32) -> &mut Tally {
        self.at(Hour(Hour::first_of(day.saturating_add(1)).0.saturating_sub(1)))
    }

    fn opening(&mut self, day: i32) -> &mut Tally {
        self.at(Hour::first_of(day))
    }

    #[inline]
    fn during(&mut self, at: f64) -> &mut Tally {
        self.at(Hour::of(at))
    }
}

/// A digest of a batch as the client sent it, to tell a repeat from another batch under the same key.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Digest(pub [u8; 16]);

impl Digest {
    /// XXH3 with 128 bits: quick enough for every body; it guards against mistakes, not against an adversary, who
    /// could only spoil his own key.
    pub fn of(bytes: &[u8]) -> Digest {
        Digest(twox_hash::XxHash3_128::oneshot(bytes).to_le_bytes())
    }
}

/// What ties the start of a wait to its end.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Tie<'a> {
    /// The stream.
    pub stream: &'a str,
    /// The wait's id, 1 to [`MAX_ID_BYTES`] bytes.
    pub id: &'a str,
    /// Which attempt of its request, from 1.
    pub attempt: u32,
}

/// A start or an end.
#[derive(Clone, Debug)]
pub(super) struct Event {
    pub(super) key: EventKey,
    pub(super) half: Half,
}

#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(super) struct EventKey {
    pub(super) stream: Box<str>,
    pub(super) id: Box<str>,
    pub(super) attempt: u32,
}

#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Half {
    Start {
        started: f64,
        entered: f64,
    },
    End {
        ended: f64,
        ending: Ending,
    },
    /// It was counted as a whole wait, so that it is open no longer.
    Close {
        ended: f64,
    },
}

/// Why an idempotency key was refused.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum KeyError {
    /// Nothing in it.
    #[error("the idempotency key is empty")]
    Empty,
    /// Above [`MAX_KEY_BYTES`].
    #[error("the idempotency key has {bytes} bytes, more than {MAX_KEY_BYTES}")]
    Long {
        /// Its length.
        bytes: usize,
    },
}

/// Why a start or an end was refused.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum EventError {
    /// The stream's name is not allowed.
    #[error(transparent)]
    Stream(#[from] StreamError),
    /// No id, or one above [`MAX_ID_BYTES`].
    #[error("an id has 1 to {MAX_ID_BYTES} bytes, not {bytes}")]
    Id {
        /// Its length.
        bytes: usize,
    },
    /// Attempts count from 1.
    #[error("attempts count from 1")]
    Attempt,
    /// A time outside the years 1970 to 9999.
    #[error("{time} is not a time in Unix seconds between the years 1970 and 9999")]
    Time {
        /// The refused time.
        time: f64,
    },
    /// Watching cannot begin at such an age.
    #[error("{entered} is not an age in seconds at which watching began")]
    Entered {
        /// The refused age, s.
        entered: f64,
    },
}

impl fmt::Display for Tie<'_> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{} in {}, attempt {}", self.id, self.stream, self.attempt)
    }
}

/// The end of the year 9999, Unix seconds.
const MAX_TIME: f64 = 253_402_300_799.0;
