//! What is kept word for word beside the counts: what people decided, what was advised day by day, the sets of past weeks.
//!
//! A ledger does not know what its records say. Whoever writes one reads it again.

use super::Damage;

/// Longest text of a record, bytes: 32 MiB.
pub const MAX_RECORD_BYTES: usize = 32 << 20;
/// Longest subject of a record, bytes.
pub const MAX_SUBJECT_BYTES: usize = 200;

/// What a record is about, and how long it stays.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Shelf {
    /// Decisions of people, numbered as they came, stream by stream. Kept for ever; a number that is taken stays taken.
    Decisions,
    /// What was advised on a stream, by UTC day (days since 1970-01-01); a later record of a day takes the place of an
    /// earlier. Kept as long as waits.
    Days,
    /// The sets of past weeks, by the day on which each was due, under an empty subject; replaced and kept like days.
    Weeks,
}

impl Shelf {
    /// All of them.
    pub const ALL: [Shelf; 3] = [Shelf::Decisions, Shelf::Days, Shelf::Weeks];

    /// How a file names it.
    pub(super) fn code(self) -> i64 {
        self as i64 + 1
    }

    /// Whether a record is never written over.
    pub fn is_final(self) -> bool {
        self == Shelf::Decisions
    }

    fn name(self) -> &'static str {
        match self {
            Shelf::Decisions => "decision",
            Shelf::Days => "day",
            Shelf::Weeks => "week",
        }
    }
}

/// One record.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Record {
    /// What it is about.
    pub shelf: Shelf,
    /// The stream; empty where it is about all.
    pub subject: Box<str>,
    /// Which of its subject: see [`Shelf`].
    pub number: i64,
    /// What it says.
    pub text: Box<str>,
}

impl Record {
    /// Its place among all.
    pub(super) fn place(&self) -> (Shelf, &str, i64) {
        (self.shelf, &self.subject, self.number)
    }

    /// Its name for a person.
    pub(super) fn name(shelf: Shelf, subject: &str, number: i64) -> String {
        format!("{subject}{}{} {number}", if subject.is_empty() { "" } else { ", " }, shelf.name())
    }
}

/// Records that were read.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Records {
    /// By subject, then by number.
    pub records: Vec<Record>,
    /// What is broken and therefore missing.
    pub damage: Vec<Damage>,
}

/// Why a record was not taken into a batch.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum RecordError {
    /// Above [`MAX_RECORD_BYTES`].
    #[error("a record has at most {MAX_RECORD_BYTES} bytes, not {bytes}")]
    Long {
        /// Its length.
        bytes: usize,
    },
    /// Above [`MAX_SUBJECT_BYTES`].
    #[error("the subject of a record has at most {MAX_SUBJECT_BYTES} bytes, not {bytes}")]
    Subject {
        /// Its length.
        bytes: usize,
    },
}
