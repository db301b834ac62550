//! Where tallies live and survive.
//!
//! In: [`Batch`]es of counted waits, of starts and ends of open waits, of readings of histograms that only grow, of counts
//! of bad lines, of [`Record`]s. Out: the tally of any stream and window of UTC hours ([`Reader::window`]), the waits that
//! are open now, the records, what is broken.
//!
//! # The promise
//!
//! What was acknowledged is counted once, whatever crashes. [`Ledger::commit`] acknowledges by returning; before it
//! returns, the batches are on disk as far as the ledger has a disk. A call that fails has counted nothing and lost
//! nothing. Reads may lag, and say by how much ([`Window::lag_s`]): those of the ledgers here do not.
//!
//! A batch with an idempotency key may be sent again after a lost answer: it is counted once as long as the key is
//! kept ([`Options::keys_for`], [`Options::most_keys`]). Without a key nothing is guessed.
//!
//! # Time
//!
//! No ledger reads a clock; the caller says what time it is. Waits are filed under the UTC hour in which they ended
//! or were last seen, and old hours are merged into days without changing any sum. How long things are kept is told
//! by a clock that follows the caller's without its leaps, so that a system clock set wrong by years for an hour
//! deletes nothing.
//!
//! # An example
//!
//! ```
//! use outwait::ledger::{Batch, Hour, Ledger, MemoryLedger, Options, Reader};
//! use outwait::wait::{Ending, Wait};
//!
//! # fn main() -> Result<(), Box<dyn std::error::Error>> {
//! let mut ledger = MemoryLedger::new(Options::default());
//! let now = 1_796_040_000.0;
//! let mut batch = Batch::default();
//! batch.add("catalogue.lookup", &Wait::new(0.018, Ending::Done)?, now)?;
//! ledger.commit(&[batch], now)?;
//! let hour = Hour::of(now);
//! let window = ledger.window("catalogue.lookup", hour..Hour(hour.0 + 1))?;
//! assert_eq!(window.tally.counts(), [1, 0, 0, 0]);
//! # Ok(())
//! # }
//! ```
//!
//! # Two ledgers, one behaviour
//!
//! [`MemoryLedger`] for one-shot commands and tests, [`SqliteLedger`] for a daemon. They pass the same tests. Both
//! work without threads or a runtime of their own; a [`Reader`] taken from one may move to another thread and does
//! not block the writer.

mod batch;
mod clock;
mod error;
mod export;
mod grow;
mod memory;
mod open;
mod options;
mod period;
mod position;
mod record;
pub mod sqlite;

use std::collections::BTreeMap;
use std::ops::Range;

pub use batch::{Batch, Digest, EventError, KeyError, MAX_ID_BYTES, MAX_KEY_BYTES, MAX_REASON_BYTES, Tie};
pub use error::{BatchError, Damage, LedgerError};
pub use export::{ExportError, Exported, export};
pub use memory::MemoryLedger;
pub use options::Options;
pub use period::{Hour, Period};
pub use position::Position;
pub use record::{MAX_RECORD_BYTES, MAX_SUBJECT_BYTES, Record, RecordError, Records, Shelf};
pub use sqlite::{LAYOUT_VERSION, SqliteLedger, SqliteReader};

use crate::tally::Tally;
use crate::wait::{Ending, Wait};

/// A ledger that is written and read by one owner. Times are Unix seconds.
pub trait Ledger: Reader {
    /// Files batches together and acknowledges them by returning. Each batch is counted whole or not at all; one
    /// that is refused does not touch the others.
    ///
    /// # Errors
    /// [`LedgerError`] if none of them was filed.
    fn commit(&mut self, batches: &[Batch], now: f64) -> Result<Receipt, LedgerError>;

    /// Does a bounded piece (some milliseconds) of the upkeep: rolls old hours into days, drops what is older or
    /// more than is kept, forgets what has expired. To be called now and then, and again soon while
    /// [`Upkeep::more`]. No sum over what is kept changes, whenever it is interrupted.
    ///
    /// # Errors
    /// [`LedgerError`]; the piece is then undone.
    fn maintain(&mut self, now: f64) -> Result<Upkeep, LedgerError>;

    /// A reader for another thread. It sees what was acknowledged before each of its calls.
    ///
    /// # Errors
    /// [`LedgerError`] if the store cannot be opened once more.
    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError>;
}

/// Reads a ledger.
pub trait Reader: Send {
    /// The streams by name.
    ///
    /// # Errors
    /// [`LedgerError`] of the store.
    fn streams(&self) -> Result<Vec<String>, LedgerError>;

    /// Hands out every tally of a stream that shares an hour with `hours`, in order of time; gives what of it is
    /// broken and therefore missing. The same period may come more than once; an unknown stream has none.
    ///
    /// # Errors
    /// [`LedgerError`] of the store; broken tallies are no error.
    fn visit(
        &self,
        stream: &str,
        hours: Range<Hour>,
        take: &mut dyn FnMut(Period, Tally),
    ) -> Result<Vec<Damage>, LedgerError>;

    /// The waits open now, those that started first at the front, `most` at most; of one stream or of all.
    ///
    /// # Errors
    /// [`LedgerError`] of the store.
    fn open_waits(&self, stream: Option<&str>, most: usize) -> Result<Vec<OpenWait>, LedgerError>;

    /// Bad lines by reason, by the hours in which they were filed.
    ///
    /// # Errors
    /// [`LedgerError`] of the store.
    fn bad_lines(&self, hours: Range<Hour>) -> Result<BTreeMap<String, u64>, LedgerError>;

    /// How far the file followed under a name was read; `None` if nothing of it was counted yet.
    ///
    /// # Errors
    /// [`LedgerError`] of the store.
    fn position(&self, name: &str) -> Result<Option<Position>, LedgerError>;

    /// The records on a shelf, of one subject or of all.
    ///
    /// # Errors
    /// [`LedgerError`] of the store; a broken record is no error.
    fn records(&self, shelf: Shelf, subject: Option<&str>) -> Result<Records, LedgerError>;

    /// How large it is.
    ///
    /// # Errors
    /// [`LedgerError`] of the store.
    fn extent(&self) -> Result<Extent, LedgerError>;

    /// By how much reads lag behind what was acknowledged, s.
    fn lag_s(&self) -> f64 {
        0.0
    }

    /// The tally of a stream over a window of hours. Where hours have been rolled into days, the window widens to
    /// whole days and says so.
    ///
    /// # Errors
    /// [`LedgerError`] of the store.
    fn window(&self, stream: &str, hours: Range<Hour>) -> Result<Window, LedgerError> {
        let (mut tally, mut wide) = (Tally::default(), hours.clone());
        let damage = self.visit(stream, hours, &mut |period, part| {
            if let Period::Day(_) = period {
                let day = period.hours();
                wide = wide.start.min(day.start)..wide.end.max(day.end);
            }
            tally.merge(&part);
        })?;
        Ok(Window { tally, hours: wide, lag_s: self.lag_s(), damage })
    }
}

/// A tally read from a ledger.
#[derive(Clone, Debug)]
pub struct Window {
    /// The waits, counted.
    pub tally: Tally,
    /// The hours it covers: those asked for, or more where only whole days are kept.
    pub hours: Range<Hour>,
    /// How long ago, s, a wait may have been acknowledged that is not in it yet.
    pub lag_s: f64,
    /// What is broken and therefore missing from it.
    pub damage: Vec<Damage>,
}

/// What became of the batches of one [`Ledger::commit`].
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Receipt {
    /// One for each batch, in their order.
    pub batches: Vec<Result<Entry, BatchError>>,
}

/// A batch that is filed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Entry {
    /// Its key was known and its content the same: it had been counted before and was not counted again.
    pub repeated: bool,
    /// Waits that became whole with it: starts that met their ends.
    pub joined: u64,
    /// Starts and ends that were known already; they change nothing.
    pub again: u64,
    /// Starts and ends of which no wait can be made, such as an end before its start.
    pub refused: u64,
    /// Waits by which histograms have grown since they were read last.
    pub grown: u64,
    /// Histograms that have begun anew since.
    pub resets: u64,
}

/// What one [`Ledger::maintain`] did.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Upkeep {
    /// Hours that were merged from the log into their tallies.
    pub merged: u64,
    /// Hours rolled into days.
    pub rolled: u64,
    /// Hours and days dropped for their age or for the ledger's size.
    pub dropped: u64,
    /// Starts and ends forgotten because their other half never came.
    pub expired: u64,
    /// There is more to do.
    pub more: bool,
}

/// How large a ledger is.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Extent {
    /// Bytes on disk, 0 for a ledger without one.
    pub bytes: u64,
    /// Streams.
    pub streams: usize,
    /// Waits open now, with ends that await their start.
    pub open: usize,
    /// Idempotency keys kept, or a few more.
    pub keys: usize,
    /// Batches acknowledged and not yet merged into their hours: bytes in the log, bytes of memory.
    pub log_bytes: u64,
    /// Bytes of memory for the same.
    pub live_bytes: usize,
}

/// A wait that is open.
#[derive(Clone, Debug, PartialEq)]
pub struct OpenWait {
    /// Its stream.
    pub stream: String,
    /// Its id.
    pub id: String,
    /// Which attempt of its request, from 1.
    pub attempt: u32,
    /// When it started, Unix seconds.
    pub started: f64,
    /// Age at which watching began, s.
    pub entered: f64,
}

impl OpenWait {
    /// It as a wait last seen at `now` (Unix seconds); `None` if it starts later.
    pub fn seen(&self, now: f64) -> Option<Wait> {
        let wait = Wait::new(now - self.started, Ending::Waiting).ok()?;
        wait.with_at(now).ok()?.with_attempt(self.attempt).ok()?.with_entered(self.entered).ok()
    }
}
