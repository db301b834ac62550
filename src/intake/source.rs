//! Where bytes come from: a file, standard input, or any reader; and their decompression.

use std::ffi::OsStr;
use std::fmt;
use std::fs::File;
use std::io::{self, Cursor, Read};
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use super::error::IntakeError;
use super::sql::Database;

/// One input.
pub struct Source {
    name: String,
    origin: Origin,
}

enum Origin {
    Path(PathBuf),
    StandardInput,
    Reader(Box<dyn Read + Send>),
    Query(Database, String),
}

impl Source {
    /// A file. The ending of its name helps where its content does not tell the format.
    pub fn path(path: impl Into<PathBuf>) -> Source {
        let path = path.into();
        Source { name: path.display().to_string(), origin: Origin::Path(path) }
    }

    /// Standard input.
    pub fn standard_input() -> Source {
        Source { name: "standard input".into(), origin: Origin::StandardInput }
    }

    /// As on a command line: `-` is standard input, anything else a file.
    pub fn argument(argument: &OsStr) -> Source {
        if argument == "-" { Source::standard_input() } else { Source::path(argument) }
    }

    /// Anything that can be read, under a name for messages.
    pub fn reader(name: impl Into<String>, reader: impl Read + Send + 'static) -> Source {
        Source { name: name.into(), origin: Origin::Reader(Box::new(reader)) }
    }

    /// What a database answers to a query, a row a record.
    pub fn query(database: Database, query: impl Into<String>) -> Source {
        Source { name: database.to_string(), origin: Origin::Query(database, query.into()) }
    }

    /// The database and the query, if it is one.
    pub(super) fn as_query(&self) -> Option<(&Database, &str)> {
        match &self.origin {
            Origin::Query(database, query) => Some((database, query)),
            _ => None,
        }
    }

    /// Its name in messages.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// The file that it is, if it can be opened again.
    pub(super) fn as_path(&self) -> Option<PathBuf> {
        match &self.origin {
            Origin::Path(path) if path.is_file() => Some(path.clone()),
            _ => None,
        }
    }

    /// Size in bytes as it lies there, packed or not; `None` where that cannot be known.
    pub(super) fn bytes(&self) -> Option<u64> {
        let Origin::Path(path) = &self.origin else { return None };
        path.metadata().ok().filter(|metadata| metadata.is_file()).map(|metadata| metadata.len())
    }

    /// Opens it and finds out how it is compressed. If it is, bytes are counted as they lie there.
    pub(super) fn open(self, counter: Arc<AtomicU64>) -> Result<Unpacked, IntakeError> {
        let file = self.name;
        let mut reader: Box<dyn Read + Send> = match self.origin {
            Origin::Reader(reader) => reader,
            Origin::StandardInput => Box::new(io::stdin()),
            // Asked by whoever opens it.
            Origin::Query(..) => Box::new(io::empty()),
            Origin::Path(path) => match File::open(&path) {
                Ok(opened) if opened.metadata().is_ok_and(|metadata| metadata.is_dir()) => {
                    return Err(IntakeError::Directory { file });
                }
                Ok(opened) => Box::new(opened),
                Err(_) if path.is_dir() => return Err(IntakeError::Directory { file }),
                Err(source) => return Err(IntakeError::Open { file, source }),
            },
        };
        let mut magic = Vec::with_capacity(4);
        if let Err(source) = reader.by_ref().take(4).read_to_end(&mut magic) {
            return Err(IntakeError::Read { file, source });
        }
        let packing = Packing::of(&magic);
        if packing.is_some() {
            counter.fetch_add(magic.len() as u64, Ordering::Relaxed);
            reader = Box::new(Counted { reader, counter });
        }
        let whole = Cursor::new(magic).chain(reader);
        let reader: Box<dyn Read + Send> = match packing {
            None => Box::new(whole),
            Some(Packing::Gzip) => Box::new(flate2::bufread::MultiGzDecoder::new(
                io::BufReader::with_capacity(PACKED_BLOCK, whole),
            )),
            Some(Packing::Zstd) => match zstd::Decoder::new(whole) {
                Ok(decoder) => Box::new(decoder),
                Err(source) => return Err(IntakeError::Read { file, source }),
            },
        };
        Ok(Unpacked { file, packing, reader })
    }
}

impl fmt::Debug for Source {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Source").field("name", &self.name).finish_non_exhaustive()
    }
}

const PACKED_BLOCK: usize = 64 * 1024;

/// An opened input.
pub(super) struct Unpacked {
    pub(super) file: String,
    packing: Option<Packing>,
    pub(super) reader: Box<dyn Read + Send>,
}

impl Unpacked {
    /// What a failure to read means: damage if there is a decompressor that could complain.
    pub(super) fn error(file: &str, packing: Option<Packing>, source: io::Error) -> IntakeError {
        let file = file.into();
        let complaint =
            !matches!(source.kind(), io::ErrorKind::PermissionDenied | io::ErrorKind::IsADirectory)
                && source.raw_os_error().is_none();
        match packing {
            Some(packing) if complaint => IntakeError::Damaged { file, compression: packing.name(), source },
            _ => IntakeError::Read { file, source },
        }
    }

    pub(super) fn packing(&self) -> Option<Packing> {
        self.packing
    }
}

/// A compression, known by its first bytes (RFC 1952; RFC 8878).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Packing {
    Gzip,
    Zstd,
}

impl Packing {
    pub(crate) fn of(head: &[u8]) -> Option<Packing> {
        match head {
            [0x1f, 0x8b, ..] => Some(Packing::Gzip),
            [0x28, 0xb5, 0x2f, 0xfd, ..] => Some(Packing::Zstd),
            // A frame to be skipped, which some writers put first.
            [0x50..=0x5f, 0x2a, 0x4d, 0x18, ..] => Some(Packing::Zstd),
            _ => None,
        }
    }

    pub(crate) fn name(self) -> &'static str {
        match self {
            Packing::Gzip => "gzip",
            Packing::Zstd => "zstd",
        }
    }
}

struct Counted<R> {
    reader: R,
    counter: Arc<AtomicU64>,
}

impl<R: Read> Read for Counted<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let bytes = self.reader.read(buffer)?;
        self.counter.fetch_add(bytes as u64, Ordering::Relaxed);
        Ok(bytes)
    }
}
