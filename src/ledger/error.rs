//! What can go wrong with a ledger, and what is broken in one.

use std::io;
use std::path::{Path, PathBuf};

use super::{Period, Record, Shelf};

/// Why a ledger did not do as it was asked. Nothing of the call was counted, and nothing counted before is lost;
/// after a remedy the same ledger goes on.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum LedgerError {
    /// Another process, or another part of this one, keeps the ledger.
    #[error("{} is in use by {}", folder.display(), holder(*pid))]
    InUse {
        /// The data folder.
        folder: PathBuf,
        /// The holder's process id, if its lock file says.
        pid: Option<u32>,
    },
    /// No room on the disk, or the file has reached its limit.
    #[error("no room is left for {}", path.display())]
    Full {
        /// The file or folder.
        path: PathBuf,
    },
    /// The folder or a file in it may not be written.
    #[error("{} may not be written", path.display())]
    ReadOnly {
        /// The file or folder.
        path: PathBuf,
    },
    /// There is no ledger in the folder.
    #[error("{} holds no ledger", folder.display())]
    Missing {
        /// The data folder.
        folder: PathBuf,
    },
    /// The file is something else than a ledger.
    #[error("{} is not a ledger", path.display())]
    Foreign {
        /// The file.
        path: PathBuf,
    },
    /// A later version of this program wrote it.
    #[error("{} has layout version {found}, this program reads up to {known}", path.display())]
    Newer {
        /// The file.
        path: PathBuf,
        /// Its version.
        found: i64,
        /// The highest version known here.
        known: i64,
    },
    /// The file is broken where it must be whole.
    #[error("{} is damaged: {flaw}", path.display())]
    Damaged {
        /// The file.
        path: PathBuf,
        /// What was found.
        flaw: String,
    },
    /// This ledger was opened for reading.
    #[error("the ledger was opened for reading only")]
    ReadingOnly,
    /// The system failed.
    #[error("{doing} {}: {source}", path.display())]
    Io {
        /// What was being done.
        doing: &'static str,
        /// To which file or folder.
        path: PathBuf,
        /// Why it failed.
        source: io::Error,
    },
    /// The store failed in a way that has no name above.
    #[error("the store at {} failed: {source}", path.display())]
    Store {
        /// The file.
        path: PathBuf,
        /// The store's error.
        source: rusqlite::Error,
    },
}

fn holder(pid: Option<u32>) -> String {
    pid.map_or_else(|| "another process".to_owned(), |pid| format!("process {pid}"))
}

impl LedgerError {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            LedgerError::InUse { .. } => "stop that process, or give this one a folder of its own",
            LedgerError::Full { .. } => {
                "make room on the disk, or keep less; then send again what was not acknowledged"
            }
            LedgerError::ReadOnly { .. } => "let this user write the folder and the files in it",
            LedgerError::Missing { .. } => "name the folder that the daemon keeps its data in",
            LedgerError::Foreign { .. } => "name a folder of its own for the ledger",
            LedgerError::Newer { .. } => "use the version of this program that wrote it, or a later one",
            LedgerError::Damaged { .. } => {
                "check the ledger to see what is broken; restore a backup, or export what is readable into a new one"
            }
            LedgerError::ReadingOnly => "open it for writing",
            LedgerError::Io { .. } | LedgerError::Store { .. } => "see the system's message",
        }
    }

    /// Names an error of the file system.
    pub(super) fn io(doing: &'static str, path: &Path, source: io::Error) -> LedgerError {
        let path = path.to_owned();
        match source.kind() {
            io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => LedgerError::Full { path },
            io::ErrorKind::PermissionDenied | io::ErrorKind::ReadOnlyFilesystem => {
                LedgerError::ReadOnly { path }
            }
            _ => LedgerError::Io { doing, path, source },
        }
    }
}

/// Why one batch of several was not counted. The others were.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum BatchError {
    /// The key has been used for another content.
    #[error("the idempotency key {key:?} has been used for another batch")]
    KeyReused {
        /// The key.
        key: String,
    },
    /// A record's number is taken for good by another: somebody else was first.
    #[error("{subject}: number {number} of its records is taken")]
    Taken {
        /// What the record is about.
        subject: String,
        /// Its number.
        number: i64,
    },
    /// Too many waits would be open.
    #[error("{limit} waits are open, no more are kept")]
    TooManyOpen {
        /// How many may be open.
        limit: usize,
    },
    /// Too many histograms would be remembered.
    #[error("{limit} histograms that only grow are read, no more are kept")]
    TooManySeries {
        /// How many may be read.
        limit: usize,
    },
    /// Too many streams would be counted.
    #[error("{limit} streams are counted, no more are kept")]
    TooManyStreams {
        /// How many may be counted.
        limit: usize,
    },
}

impl BatchError {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            BatchError::KeyReused { .. } => {
                "use a fresh key for each batch; repeat one only to send the same again"
            }
            BatchError::Taken { .. } => "see what was written meanwhile, and write after it",
            BatchError::TooManyOpen { .. } => "send the ends of waits, send fewer starts, or raise the limit",
            BatchError::TooManySeries { .. } => {
                "send the counts since the last point (delta temporality), use fewer attributes, or raise the limit"
            }
            BatchError::TooManyStreams { .. } => {
                "put what varies without bound elsewhere than in the stream's name, or raise the limit"
            }
        }
    }
}

/// Something broken in a ledger. The rest stays readable.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Damage {
    /// One stored tally.
    #[error("{stream} in {period}: {flaw}")]
    Tally {
        /// The stream.
        stream: String,
        /// The period.
        period: Period,
        /// What was found.
        flaw: String,
    },
    /// Pages that hold tallies of a stream; which periods is not to be seen.
    #[error("{stream}: {flaw}")]
    Stream {
        /// The stream.
        stream: String,
        /// What was found.
        flaw: String,
    },
    /// One entry of the log of recent batches: all streams may miss waits of that moment.
    #[error("log entry {sequence}: {flaw}")]
    Entry {
        /// Its number.
        sequence: i64,
        /// What was found.
        flaw: String,
    },
    /// One record.
    #[error("{}: {flaw}", Record::name(*shelf, subject, *number))]
    Record {
        /// Where it stands.
        shelf: Shelf,
        /// What it is about.
        subject: String,
        /// Its number.
        number: i64,
        /// What was found.
        flaw: String,
    },
    /// The file, outside of the tallies.
    #[error("{flaw}")]
    File {
        /// What was found.
        flaw: String,
    },
}
