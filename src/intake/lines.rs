//! Lines of a block, numbered, checked for length and for being text.

use super::flaw::Flaw;

/// The lines of a block that are not blank.
pub(super) struct Lines<'a> {
    block: &'a [u8],
    /// The same as text, if it is: checked as a whole, which is much faster than line by line.
    text: Option<&'a str>,
    limit: usize,
    at: usize,
    number: u64,
}

impl<'a> Lines<'a> {
    pub(super) fn new(block: &'a [u8], limit: usize) -> Lines<'a> {
        Lines { block, text: std::str::from_utf8(block).ok(), limit, at: 0, number: 0 }
    }

    /// Lines so far.
    pub(super) fn number(&self) -> u64 {
        self.number
    }

    /// All lines to come, if all are text.
    #[inline]
    pub(super) fn rest(&self) -> Option<&'a str> {
        self.text?.get(self.at..)
    }

    /// Goes beyond a line of so many bytes, and gives its number from 0; `None`, and does not, if it is too long.
    #[inline]
    pub(super) fn pass(&mut self, length: usize) -> Option<u64> {
        if length > self.limit {
            return None;
        }
        self.at += length + 1;
        self.number += 1;
        Some(self.number - 1)
    }
}

impl<'a> Iterator for Lines<'a> {
    /// The number of the line from 0, and its text.
    type Item = (u64, Result<&'a str, Flaw>);

    #[inline]
    fn next(&mut self) -> Option<(u64, Result<&'a str, Flaw>)> {
        while self.at < self.block.len() {
            let (from, number) = (self.at, self.number);
            let bytes = self.block.get(from..)?;
            let bytes = bytes.get(..memchr::memchr(b'\n', bytes).unwrap_or(bytes.len()))?;
            let upto = from + bytes.len();
            self.at = upto + 1;
            self.number += 1;
            if bytes.len() > self.limit {
                return Some((number, Err(Flaw::Long { limit: self.limit })));
            }
            let line = match self.text {
                Some(text) => text.get(from..upto),
                None => std::str::from_utf8(bytes).ok(),
            };
            match line {
                Some(line) if line.bytes().all(|byte| matches!(byte, b' ' | b'\t' | b'\r')) => {}
                line => return Some((number, line.ok_or(Flaw::NotText))),
            }
        }
        None
    }
}
