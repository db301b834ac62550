//! What a reading found: how much, what was refused and why, what was left out, and what looks odd.

use std::fmt;

use serde::Serialize;

use super::pace::ClosedLoop;
use crate::say;

/// How many bad lines are spelled out, and how many ids of ends without a start.
pub const EXAMPLES: usize = 20;

/// How many header comments are kept.
pub const COMMENTS: usize = 1000;

/// The account of one reading.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
#[non_exhaustive]
pub struct Report {
    /// The inputs, in the order given.
    pub files: Vec<FileReport>,
    /// Lines read, blank ones and header included.
    pub lines: u64,
    /// Waits handed on. A start and its end are one; a record with a `count` is one.
    pub waits: u64,
    /// Lines refused.
    pub bad: BadLines,
    /// Sound records that were not asked for or carry no value.
    pub left_out: LeftOut,
    /// Starts and ends that came in lines of their own.
    pub pairs: PairsReport,
    /// Readings of histograms that only grow which the sink took as they were ([`super::Sink::take_running`]).
    #[serde(skip)]
    pub running_handed_on: u64,
    /// Oldest time in any record, Unix seconds.
    pub oldest: Option<f64>,
    /// Newest time in any record, Unix seconds.
    pub newest: Option<f64>,
    /// Header comments of the Standard Workload Format, without their semicolon; at most [`COMMENTS`].
    pub comments: Vec<Comment>,
    /// Streams whose ages look like milliseconds given as seconds.
    pub suspicions: Vec<Suspicion>,
    /// Streams that look like those of a sampler that waits for each answer before it asks again.
    pub closed_loops: Vec<ClosedLoop>,
}

/// One input.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize)]
#[non_exhaustive]
pub struct FileReport {
    /// Its name as given; `standard input` for `-`.
    pub name: String,
    /// Its format; `None` if it was empty.
    pub format: Option<super::Format>,
    /// Lines read.
    pub lines: u64,
    /// Lines refused.
    pub bad: u64,
}

/// Refused lines.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize)]
#[non_exhaustive]
pub struct BadLines {
    /// How many.
    pub count: u64,
    /// How many by field and reason, the commonest first.
    pub by_reason: Vec<BadCount>,
    /// The first of them, at most [`EXAMPLES`].
    pub examples: Vec<BadLine>,
}

/// How many lines were refused for one reason.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
#[non_exhaustive]
pub struct BadCount {
    /// The field at fault, or `line`.
    pub field: &'static str,
    /// The reason, without values.
    pub reason: &'static str,
    /// How many lines.
    pub lines: u64,
}

/// One refused line.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
#[non_exhaustive]
pub struct BadLine {
    /// The input.
    pub file: String,
    /// The line, from 1.
    pub line: u64,
    /// The field at fault, or `line`.
    pub field: &'static str,
    /// What is wrong, without values: the reason of its [`BadCount`].
    #[serde(skip)]
    pub kind: &'static str,
    /// What is wrong, with the value.
    pub reason: String,
    /// What to do about it.
    pub remedy: String,
}

impl fmt::Display for BadLine {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let BadLine { file, line, field, reason, remedy, .. } = self;
        write!(f, "{file}:{line}: {field}: {reason}; {remedy}")
    }
}

/// Sound records that did not become waits.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[non_exhaustive]
pub struct LeftOut {
    /// Of streams that were not asked for.
    pub other_streams: u64,
    /// Ended or last seen outside the window that was asked for.
    pub outside_window: u64,
    /// Jobs without the time that was asked for (-1, or a run time of a job that never ran).
    pub unmeasured: u64,
    /// Records of a part of a job that another record has as a whole (SWF status 2, 3, 4).
    pub partial: u64,
    /// Messages of a journal that are no records.
    pub other_messages: u64,
    /// Spans and data points that are no waits: of another unit than time, without buckets, or left out by a rule.
    #[serde(skip_serializing_if = "is_zero")]
    pub not_waits: u64,
}

fn is_zero(number: &u64) -> bool {
    *number == 0
}

/// Starts and ends in lines of their own.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
#[non_exhaustive]
pub struct PairsReport {
    /// Starts and ends that the sink took as they were ([`super::Sink::take_half`]).
    #[serde(skip)]
    pub handed_on: u64,
    /// Pairs that became one wait.
    pub joined: u64,
    /// Starts without an end that became waits still open, seen last at `seen`.
    pub open: u64,
    /// The newest time in the data, Unix seconds, when there are such starts.
    pub seen: Option<f64>,
    /// Starts without an end that are not older than the newest time, and so say nothing.
    pub open_unseen: u64,
    /// Ends without a start: how long they waited is not known, and they are left out.
    pub ends_alone: u64,
    /// Ids of the first of these, at most [`EXAMPLES`].
    pub ends_alone_ids: Vec<String>,
    /// Ends without a start that were dropped because too many halves were open at once
    /// ([`super::Options::most_open`]); they are among `ends_alone`.
    pub dropped: u64,
    /// Starts that became waits still open before the input's end, for the same reason, seen last at the newest time
    /// of any start or end until then; they are not among `open`.
    pub let_go: u64,
}

/// A comment of a file's header.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
#[non_exhaustive]
pub struct Comment {
    /// The input.
    pub file: String,
    /// The text, trimmed.
    pub text: String,
}

/// A stream whose ages look like milliseconds given as seconds. A finding to check, not an error.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[non_exhaustive]
pub struct Suspicion {
    /// The stream.
    pub stream: String,
    /// Ages of completions, given as numbers without a unit.
    pub ages: u64,
    /// How many of them are whole numbers.
    pub whole: u64,
    /// Geometric mean of the whole ones, s, to about a tenth.
    pub typical: f64,
    /// The sign that goes with it.
    pub because: Because,
}

/// The second sign, beside ages in whole numbers.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
#[non_exhaustive]
pub enum Because {
    /// Most times have fractions of a second, the ages have none.
    TimesAreFiner,
    /// In seconds, about this many waits of the stream would have been open at any time.
    Crowded {
        /// Waits open at once.
        open: f64,
    },
    /// The other ages of the stream have fractions and are about a thousand times shorter.
    OthersAreShorter {
        /// Geometric mean of the others, s.
        typical: f64,
    },
}

impl fmt::Display for Suspicion {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Suspicion { stream, ages, whole, typical, because } = self;
        write!(
            f,
            "{stream}: {} of {} ages are whole numbers, typically {}",
            say::count(*whole as f64),
            say::count(*ages as f64),
            say::number(*typical),
        )?;
        match because {
            Because::TimesAreFiner => write!(f, ", while the times have fractions of a second")?,
            Because::Crowded { open } => {
                write!(f, "; as seconds they would mean about {} waits open at once", say::count(*open))?;
            }
            Because::OthersAreShorter { typical } => {
                write!(f, ", while the others are typically {}", say::duration(*typical))?;
            }
        }
        write!(
            f,
            "; if they are milliseconds, give them as `elapsed_ms` or as \"{}ms\"",
            say::number(*typical)
        )
    }
}
