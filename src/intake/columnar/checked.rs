//! A Parquet file of which no part is decoded before it was looked at, where the decoder's time could be without bounds.

use std::fs::File;
use std::io::{self, BufRead, BufReader, Read, Seek, SeekFrom};

use bytes::Bytes;
use parquet::errors::ParquetError;
use parquet::file::reader::{ChunkReader, Length};

use super::thrift::{FOOTER, PAGE, is_message};

/// The footer's length and the magic word behind it.
const TAIL: u64 = 8;

/// Longest head of a page. It may hold the least and the greatest of its values.
const LONGEST_HEAD: u64 = 16 << 20;

/// Whether the footer is sound. One that is not where it should be is left to the decoder, which says so at once.
pub(super) fn has_sound_footer(mut file: &File) -> io::Result<bool> {
    let size = file.seek(SeekFrom::End(0))?;
    let mut tail = [0; TAIL as usize];
    let Some(start) = size.checked_sub(TAIL) else { return Ok(true) };
    file.seek(SeekFrom::Start(start))?;
    file.read_exact(&mut tail)?;
    let [a, b, c, d, ..] = tail;
    let length = u64::from(u32::from_le_bytes([a, b, c, d]));
    let Some(start) = start.checked_sub(length) else { return Ok(true) };
    Ok(is_message(&piece(file, start, length)?, FOOTER))
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
        if is_message(reader.fill_buf()?, PAGE) {
            return Ok(reader);
        }
        // A copy of an open file shares its place: the first reader is of no use after this.
        if is_message(&piece(&self.0, start, LONGEST_HEAD)?, PAGE) {
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
