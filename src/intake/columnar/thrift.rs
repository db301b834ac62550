//! Whether what a Parquet file writes in Thrift's compact protocol (github.com/apache/thrift,
//! doc/specs/thrift-compact-protocol.md), its footer and the heads of its pages, is decoded in a time that its length bounds.
//!
//! The decoder passes over what it does not know, and for it truth values in a list take no room: six bytes that speak of two
//! thousand million of them cost it seconds, a few kilobytes hours. Metadata of Parquet have no such list.

use std::fs::File;
use std::io::{self, BufRead, BufReader, Read, Seek, SeekFrom};

use bytes::Bytes;
use parquet::errors::ParquetError;
use parquet::file::reader::{ChunkReader, Length};

/// How deep values may lie within each other; the decoder goes no deeper.
const DEEPEST: u32 = 64;

/// The footer's length and the magic word behind it.
const TAIL: u64 = 8;

/// Longest head of a page. It may hold the least and the greatest of its values.
const LONGEST_HEAD: u64 = 16 << 20;

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
    Ok(is_message(&piece(file, start, length)?))
}

/// A file of which a page's head is looked at before it is decoded.
pub(super) struct Checked(pub(super) File);

impl Length for Checked {
    fn len(&self) -> u64 {
        self.0.len()
    }
}

impl ChunkReader for Checked {
    type T = BufReader<File>;

    fn get_read(&self, start: u64) -> Result<Self::T, ParquetError> {
        let mut reader = self.0.get_read(start)?;
        // Nearly all heads lie in what is read at first.
        if is_message(reader.fill_buf()?) {
            return Ok(reader);
        }
        // A copy of an open file shares its place: the first reader is of no use after this.
        if is_message(&piece(&self.0, start, LONGEST_HEAD)?) {
            return self.0.get_read(start);
        }
        Err(ParquetError::General("a page head is false".into()))
    }

    fn get_bytes(&self, start: u64, length: usize) -> Result<Bytes, ParquetError> {
        self.0.get_bytes(start, length)
    }
}

fn piece(mut file: &File, start: u64, length: u64) -> io::Result<Vec<u8>> {
    let mut piece = Vec::new();
    file.seek(SeekFrom::Start(start))?;
    file.take(length).read_to_end(&mut piece)?;
    Ok(piece)
}

/// Whether it begins with a whole message that can be what it says.
fn is_message(bytes: &[u8]) -> bool {
    Walk(bytes).fields(DEEPEST).is_some()
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

    #[test]
    fn what_is_sound_and_what_is_not() {
        // A number, a text, a list of two numbers, an empty one, a map, a struct in a struct, a truth value.
        let sound = [
            &[0x15, 0x02, 0x18, 0x02, b'h', b'i', 0x19, 0x25, 0x02, 0x04, 0x19, 0x00][..],
            &[0x1b, 0x01, 0x55, 0x02, 0x04, 0x1c, 0x1c, 0x00, 0x00, 0x11, 0x00],
        ];
        assert!(sound.iter().all(|part| is_message(&[part, &[0][..]].concat())));
        assert!(is_message(&sound.concat()));
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
        assert!(unsound.iter().all(|message| !is_message(message)));
        assert!(!is_message(&[0x1c; 100_000]), "as deep as it is long");
    }
}
