//! A file that is read from a place on, and what shows that it is still the same file.

use std::fs::File;
use std::io::{self, BufReader, Read, Seek, SeekFrom};
use std::path::{Path, PathBuf};
use std::time::Duration;

use crate::ledger::{Digest, Position};

/// How much of a file's start is kept to tell its format and header.
const HEAD: usize = 64 * 1024;

pub(super) struct Opened {
    bytes: Bytes,
    /// Its name when it was opened.
    pub(super) path: PathBuf,
    /// Device and number.
    pub(super) file: (u64, u64),
    /// Bytes and lines that are filed.
    pub(super) offset: u64,
    pub(super) lines: u64,
    /// The last bytes before the place.
    tail: Vec<u8>,
    /// Read from the place on, but not filed.
    pub(super) pending: Vec<u8>,
    /// The file's first bytes, unless they are in `pending`.
    head: Vec<u8>,
    /// In a line that was refused for its length before its end was seen.
    skipping: bool,
}

enum Bytes {
    Plain(File),
    Packed(Box<dyn Read + Send>),
}

/// Device and number of the file under a name.
pub(super) fn identity(path: &Path) -> io::Result<(u64, u64)> {
    Ok(numbers(&path.metadata()?))
}

#[cfg(unix)]
fn numbers(metadata: &std::fs::Metadata) -> (u64, u64) {
    use std::os::unix::fs::MetadataExt;
    (metadata.dev(), metadata.ino())
}

/// Elsewhere the bytes before the place alone tell a file.
#[cfg(not(unix))]
fn numbers(_: &std::fs::Metadata) -> (u64, u64) {
    (0, 0)
}

impl Opened {
    /// Opens a file at its start.
    pub(super) fn start(path: &Path) -> io::Result<Opened> {
        let (bytes, file) = open(path)?;
        Ok(Opened {
            bytes,
            path: path.to_owned(),
            file,
            offset: 0,
            lines: 0,
            tail: Vec::new(),
            pending: Vec::new(),
            head: Vec::new(),
            skipping: false,
        })
    }

    /// Opens a file at a place; `None` if the bytes before it are not those that were read, or if it is asked to be the
    /// very file (`same`) and is not.
    pub(super) fn resume(path: &Path, position: &Position, same: bool) -> io::Result<Option<Opened>> {
        let mut opened = Opened::start(path)?;
        if same && opened.file != position.file {
            return Ok(None);
        }
        let reach = position.offset.min(Position::TAIL as u64);
        match &mut opened.bytes {
            Bytes::Plain(file) => {
                file.take(HEAD as u64).read_to_end(&mut opened.head)?;
                file.seek(SeekFrom::Start(position.offset - reach))?;
                file.take(reach).read_to_end(&mut opened.tail)?;
            }
            Bytes::Packed(reader) => {
                reader.take((HEAD as u64).min(position.offset)).read_to_end(&mut opened.head)?;
                let skip = (position.offset - opened.head.len() as u64).saturating_sub(reach);
                io::copy(&mut reader.take(skip), &mut io::sink())?;
                let from_head = opened.head.len() as u64 + skip;
                // What of the last bytes is in the head already.
                let known = reach.saturating_sub(position.offset - from_head) as usize;
                opened
                    .tail
                    .extend_from_slice(&opened.head[opened.head.len() - known.min(opened.head.len())..]);
                reader.take(position.offset - from_head).read_to_end(&mut opened.tail)?;
            }
        }
        if opened.tail.len() as u64 != reach || Digest::of(&opened.tail) != position.before {
            return Ok(None);
        }
        (opened.offset, opened.lines) = (position.offset, position.lines);
        Ok(Some(opened))
    }

    pub(super) fn is_packed(&self) -> bool {
        matches!(self.bytes, Bytes::Packed(_))
    }

    /// For how long nobody has written to it, by the system's clock; no time where that cannot be told.
    pub(super) fn untouched(&self) -> Duration {
        let Bytes::Plain(file) = &self.bytes else { return Duration::ZERO };
        let written = file.metadata().and_then(|metadata| metadata.modified());
        written.ok().and_then(|written| written.elapsed().ok()).unwrap_or_default()
    }

    /// The file's first bytes.
    pub(super) fn head(&self) -> &[u8] {
        if self.offset == 0 { &self.pending } else { &self.head }
    }

    /// Reads at most so many bytes more; how many there were.
    pub(super) fn fill(&mut self, bytes: usize) -> io::Result<usize> {
        let before = self.pending.len();
        match &mut self.bytes {
            Bytes::Plain(file) => {
                file.seek(SeekFrom::Start(self.offset + before as u64))?;
                file.take(bytes as u64).read_to_end(&mut self.pending)
            }
            Bytes::Packed(reader) => reader.take(bytes as u64).read_to_end(&mut self.pending),
        }
    }

    /// Whether what was read still stands before the place reached.
    pub(super) fn is_unchanged(&mut self) -> io::Result<bool> {
        let Bytes::Plain(file) = &mut self.bytes else { return Ok(true) };
        if file.metadata()?.len() < self.offset + self.pending.len() as u64 {
            return Ok(false);
        }
        // What was read and is not filed must be there as well: it may be all there is before the place.
        let (from, known) =
            (self.offset - self.tail.len() as u64, self.tail.len() + self.pending.len().min(64));
        let mut there = Vec::with_capacity(known);
        file.seek(SeekFrom::Start(from))?;
        file.take(known as u64).read_to_end(&mut there)?;
        let (tail, pending) = there.split_at(self.tail.len().min(there.len()));
        Ok(tail == self.tail && self.pending.starts_with(pending))
    }

    /// The length of the first line that was read, or of all if none has an end.
    pub(super) fn first_line(&self) -> usize {
        memchr::memchr(b'\n', &self.pending).map_or(self.pending.len(), |at| at + 1)
    }

    pub(super) fn is_skipping(&self) -> bool {
        self.skipping
    }

    /// Goes to the end of the line, as far as it is read.
    pub(super) fn skip_line(&mut self) {
        let length = self.first_line();
        let ends = self.pending[..length].ends_with(b"\n");
        self.consume(length, 0);
        self.skipping = !ends;
    }

    pub(super) fn position(&self) -> Position {
        Position { file: self.file, offset: self.offset, lines: self.lines, before: Digest::of(&self.tail) }
    }

    /// Where it will be once so many bytes and lines are filed.
    pub(super) fn position_after(&self, bytes: usize, lines: u64) -> Position {
        let (offset, lines) = (self.offset + bytes as u64, self.lines + lines);
        Position { file: self.file, offset, lines, before: Digest::of(&self.tail_after(bytes)) }
    }

    fn tail_after(&self, bytes: usize) -> Vec<u8> {
        let new = &self.pending[..bytes];
        let old = Position::TAIL.saturating_sub(new.len()).min(self.tail.len());
        let new = &new[new.len().saturating_sub(Position::TAIL)..];
        [&self.tail[self.tail.len() - old..], new].concat()
    }

    /// Takes away bytes that are filed.
    pub(super) fn consume(&mut self, bytes: usize, lines: u64) {
        if self.offset == 0 {
            self.head = self.pending[..self.pending.len().min(HEAD)].to_vec();
        }
        self.tail = self.tail_after(bytes);
        self.skipping = bytes > 0 && !self.pending[..bytes].ends_with(b"\n");
        self.pending.drain(..bytes);
        self.offset += bytes as u64;
        self.lines += lines;
    }
}

fn open(path: &Path) -> io::Result<(Bytes, (u64, u64))> {
    let mut file = File::open(path)?;
    let numbers = numbers(&file.metadata()?);
    let mut magic = Vec::with_capacity(4);
    file.by_ref().take(4).read_to_end(&mut magic)?;
    file.seek(SeekFrom::Start(0))?;
    let bytes = match &magic[..] {
        [0x1f, 0x8b, ..] => {
            Bytes::Packed(Box::new(flate2::bufread::MultiGzDecoder::new(BufReader::new(file))))
        }
        [0x28, 0xb5, 0x2f, 0xfd] => Bytes::Packed(Box::new(zstd::Decoder::new(file)?)),
        _ => Bytes::Plain(file),
    };
    Ok((bytes, numbers))
}
