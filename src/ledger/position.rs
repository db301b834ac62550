//! How far a followed file was read: kept by the ledger in the same commit as the counts, so that neither can be there
//! without the other.

use super::Digest;

/// A place in a file, and what tells the file again after it was renamed, copied or packed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Position {
    /// The device and the number of the file on it.
    pub file: (u64, u64),
    /// Bytes read, unpacked.
    pub offset: u64,
    /// Lines read.
    pub lines: u64,
    /// Digest of the last bytes before it, at most [`Position::TAIL`] of them.
    pub before: Digest,
}

impl Position {
    /// How many bytes before a position tell its file from others.
    pub const TAIL: usize = 4096;
}
