//! Looking at the write-ahead log that a crash has left, before the store does: the store ends its reading at the first
//! frame that is broken, and says nothing of what came after.

use std::fs::File;
use std::io::{BufReader, ErrorKind, Read, Result};
use std::path::Path;

/// What is lost of the log that a process which no longer runs has left beside the file; `None` if nothing is, as far
/// as can be told.
///
/// A crash of the machine may leave the last transaction half written, in any order, and that one was not acknowledged.
/// So a broken frame is damage only if two transactions or more were to end after it: of these the first was on disk
/// before the second began. Format: SQLite, "WAL-mode File Format", sections 2 to 4.
pub(super) fn lost(path: &Path) -> Result<Option<String>> {
    let mut name = path.as_os_str().to_owned();
    name.push("-wal");
    let file = match File::open(&name) {
        Ok(file) => file,
        Err(error) if error.kind() == ErrorKind::NotFound => return Ok(None),
        Err(error) => return Err(error),
    };
    let length = file.metadata()?.len();
    let mut file = BufReader::with_capacity(1 << 16, file);
    let mut header = [0; 32];
    if length < 32 {
        return Ok(None);
    }
    file.read_exact(&mut header)?;
    let (magic, page_size) = (word(&header, 0), word(&header, 8) as usize);
    let mut sum = Sum { big_endian: magic & 1 == 1, ..Sum::default() };
    sum.add(&header[..24]);
    let whole = magic & !1 == MAGIC && sum.is(&header[24..]);
    if !whole || !page_size.is_power_of_two() || !(512..=65_536).contains(&page_size) {
        let unwritten = header == [0; 32];
        let flaw = "the head of its write-ahead log is broken: what was filed last may be lost";
        return Ok((!unwritten).then(|| flaw.to_owned()));
    }
    let mut frame = vec![0; 24 + page_size];
    let (mut broken, mut ends, mut at) = (None, 0, 32);
    while at + frame.len() as u64 <= length {
        file.read_exact(&mut frame)?;
        let ours = frame[8..16] == header[16..24];
        if broken.is_none() {
            sum.add(&frame[..8]);
            sum.add(&frame[24..]);
            if !ours || !sum.is(&frame[16..24]) {
                broken = Some(at);
            }
        }
        if broken.is_some() && ours && word(&frame, 4) != 0 {
            ends += 1;
        }
        at += frame.len() as u64;
    }
    Ok(broken.filter(|_| ends >= 2).map(|at| {
        format!("its write-ahead log is broken at byte {at}: up to {ends} commits after that are lost")
    }))
}

fn word(bytes: &[u8], at: usize) -> u32 {
    bytes.get(at..).and_then(|bytes| bytes.first_chunk()).map_or(0, |word| u32::from_be_bytes(*word))
}

/// The format's running checksum.
#[derive(Default)]
struct Sum {
    big_endian: bool,
    first: u32,
    second: u32,
}

impl Sum {
    fn add(&mut self, bytes: &[u8]) {
        let number = |word: &[u8; 4]| {
            if self.big_endian { u32::from_be_bytes(*word) } else { u32::from_le_bytes(*word) }
        };
        let (words, _) = bytes.as_chunks::<4>();
        for pair in words.chunks_exact(2) {
            self.first = self.first.wrapping_add(number(&pair[0])).wrapping_add(self.second);
            self.second = self.second.wrapping_add(number(&pair[1])).wrapping_add(self.first);
        }
    }

    fn is(&self, stored: &[u8]) -> bool {
        (word(stored, 0), word(stored, 4)) == (self.first, self.second)
    }
}

const MAGIC: u32 = 0x377f_0682;
