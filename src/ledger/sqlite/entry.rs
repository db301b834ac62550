//! Log entries: the tallies of one group of batches as they came, end to end.

use super::seal::{seal, unseal};
use crate::ledger::Hour;
use crate::tally::{Bytes, DecodeError, Tally, varint};

/// First byte of an entry.
const ENTRY_VERSION: u8 = 1;

/// Room left for an entry's length.
const LENGTH_BYTES: usize = 4;

/// What an entry of so many bytes counts for in the log: its place on a page and the time to read it again come on
/// top.
pub(super) fn cost(bytes: &[u8]) -> u64 {
    bytes.len() as u64 + 256
}

/// An entry being written.
#[derive(Debug)]
pub(super) struct Writer {
    bytes: Vec<u8>,
}

impl Writer {
    pub(super) fn new() -> Writer {
        Writer { bytes: vec![ENTRY_VERSION] }
    }

    pub(super) fn add(&mut self, stream: i64, hour: Hour, tally: &Tally) {
        varint(stream as u64, &mut self.bytes);
        // Hours before 1970 take five bytes, and none come.
        varint(u64::from(hour.0 as u32), &mut self.bytes);
        let at = self.bytes.len();
        self.bytes.extend([0; LENGTH_BYTES]);
        tally.encode(&mut self.bytes);
        let length = (self.bytes.len() - at - LENGTH_BYTES) as u32;
        self.bytes[at..at + LENGTH_BYTES].copy_from_slice(&length.to_le_bytes());
    }

    pub(super) fn is_empty(&self) -> bool {
        self.bytes.len() == 1
    }

    /// The sealed entry.
    pub(super) fn finish(mut self, sequence: i64) -> Vec<u8> {
        seal(&[sequence], &mut self.bytes);
        self.bytes
    }
}

/// Hands out what an entry holds: stream, hour and the bytes of a tally.
///
/// # Errors
/// What is wrong with it. Nothing has been handed out if its checksum does not match; `take` may find fault as well.
pub(super) fn read(
    sequence: i64,
    entry: &[u8],
    mut take: impl FnMut(i64, Hour, &[u8]) -> Result<(), DecodeError>,
) -> Result<(), String> {
    let bytes = unseal(&[sequence], entry).ok_or("its checksum does not match")?;
    let mut parse = |mut bytes: Bytes<'_>| {
        match bytes.array()? {
            [ENTRY_VERSION] => {}
            [found] => return Err(DecodeError::Newer { found }),
        }
        while !bytes.0.is_empty() {
            let stream = bytes.varint()? as i64;
            let hour = Hour(bytes.varint()? as u32 as i32);
            let length = u32::from_le_bytes(bytes.array()?);
            take(stream, hour, bytes.take(length as usize)?)?;
        }
        Ok(())
    };
    parse(Bytes(bytes)).map_err(|error| error.to_string())
}
