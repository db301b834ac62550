//! Whether the footer of a Parquet file is decoded in a time that its length bounds. It is written in Thrift's compact
//! protocol (github.com/apache/thrift, doc/specs/thrift-compact-protocol.md).
//!
//! The decoder passes over what it does not know, and for it truth values in a list take no room: six bytes that speak of two
//! thousand million of them cost it seconds, a few kilobytes hours. Metadata of Parquet have no such list.

use std::fs::File;
use std::io::{self, Read, Seek, SeekFrom};

/// How deep values may lie within each other; the decoder goes no deeper.
const DEEPEST: u32 = 64;

/// The footer's length and the magic word behind it.
const TAIL: u64 = 8;

/// Whether the footer is sound. One that is not where it should be is left to the decoder, which says so at once.
pub(super) fn is_sound(mut file: &File) -> io::Result<bool> {
    let size = file.seek(SeekFrom::End(0))?;
    let mut tail = [0; TAIL as usize];
    let Some(start) = size.checked_sub(TAIL) else { return Ok(true) };
    file.seek(SeekFrom::Start(start))?;
    file.read_exact(&mut tail)?;
    let [a, b, c, d, ..] = tail;
    let length = u64::from(u32::from_le_bytes([a, b, c, d]));
    let Some(start) = start.checked_sub(length) else { return Ok(true) };
    file.seek(SeekFrom::Start(start))?;
    let mut footer = Vec::new();
    file.take(length).read_to_end(&mut footer)?;
    Ok(Walk(&footer).fields(DEEPEST).is_some())
}

/// What is left of a message. `None`: it is not what it says.
struct Walk<'a>(&'a [u8]);

impl Walk<'_> {
    fn skip(&mut self, bytes: u64) -> Option<()> {
        self.0 = self.0.get(usize::try_from(bytes).ok()?..)?;
        Some(())
    }

    fn byte(&mut self) -> Option<u8> {
        let (first, rest) = self.0.split_first()?;
        self.0 = rest;
        Some(*first)
    }

    fn varint(&mut self) -> Option<u64> {
        let mut value = 0;
        for shift in (0..64).step_by(7) {
            let byte = self.byte()?;
            value |= u64::from(byte & 0x7f) << shift;
            if byte & 0x80 == 0 {
                return Some(value);
            }
        }
        None
    }

    /// A struct up to its end.
    fn fields(&mut self, depth: u32) -> Option<()> {
        let depth = depth.checked_sub(1)?;
        loop {
            let head = self.byte()?;
            let (step, kind) = (head >> 4, head & 0x0f);
            if kind == 0 {
                return Some(());
            }
            if step == 0 {
                self.varint()?;
            }
            self.value(kind, depth)?;
        }
    }

    fn value(&mut self, kind: u8, depth: u32) -> Option<()> {
        match kind {
            // A truth value is in the head of its field.
            1 | 2 => Some(()),
            3 => self.skip(1),
            4..=6 => self.varint().map(|_| ()),
            7 => self.skip(8),
            8 => {
                let length = self.varint()?;
                self.skip(length)
            }
            // Some writers give an empty list no kind.
            9 | 10 => match self.byte()? {
                0 => Some(()),
                head => {
                    let size = if head >> 4 == 15 { self.varint()? } else { u64::from(head >> 4) };
                    self.elements(size, &[head & 0x0f], depth)
                }
            },
            11 => match self.varint()? {
                0 => Some(()),
                size => {
                    let kinds = self.byte()?;
                    self.elements(size, &[kinds >> 4, kinds & 0x0f], depth)
                }
            },
            12 => self.fields(depth),
            13 => self.skip(16),
            _ => None,
        }
    }

    /// So many times a value of each of these kinds, of which each takes a byte at least.
    fn elements(&mut self, size: u64, kinds: &[u8], depth: u32) -> Option<()> {
        let depth = depth.checked_sub(1)?;
        if size > 0 && kinds.iter().any(|kind| matches!(kind, 1 | 2)) {
            return None;
        }
        for _ in 0..size {
            kinds.iter().try_for_each(|&kind| self.value(kind, depth))?;
        }
        Some(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn is_sound(footer: &[u8]) -> bool {
        Walk(footer).fields(DEEPEST).is_some()
    }

    #[test]
    fn what_is_sound_and_what_is_not() {
        // A number, a text, a list of two numbers, an empty one, a map, a struct in a struct, a truth value.
        let sound = [
            &[0x15, 0x02, 0x18, 0x02, b'h', b'i', 0x19, 0x25, 0x02, 0x04, 0x19, 0x00][..],
            &[0x1b, 0x01, 0x55, 0x02, 0x04, 0x1c, 0x1c, 0x00, 0x00, 0x11, 0x00],
        ];
        assert!(sound.iter().all(|part| is_sound(&[part, &[0][..]].concat())));
        assert!(is_sound(&sound.concat()));
        let unsound: [&[u8]; 8] = [
            b"",
            &[0x15],
            // Two thousand million truth values, three of them, and a map of them.
            &[0x19, 0xf1, 0xff, 0xff, 0xff, 0xff, 0x07, 0x00],
            &[0x19, 0x32, 0x01, 0x01, 0x01, 0x00],
            &[0x1b, 0xff, 0xff, 0xff, 0xff, 0x07, 0x15, 0x00],
            // More numbers than there are bytes, a text beyond the end, and no kind at all.
            &[0x19, 0xf5, 0xff, 0xff, 0xff, 0xff, 0x07, 0x00],
            &[0x18, 0x7f, 0x00],
            &[0x1f, 0x00],
        ];
        assert!(unsound.iter().all(|footer| !is_sound(footer)));
        assert!(!is_sound(&[0x1c; 100_000]), "as deep as it is long");
    }
}
