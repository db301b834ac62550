//! The tables, their version, and how a file is opened. `LAYOUT.md` describes them.

use std::path::{Path, PathBuf};
use std::time::Duration;

use rusqlite::{Connection, OpenFlags, Result};

use super::fault;
use crate::ledger::LedgerError;

/// Version of the tables that this program writes and the highest that it reads.
pub const LAYOUT_VERSION: i64 = 2;

/// How long to wait for another connection.
pub(super) const PATIENCE: Duration = Duration::from_secs(5);

/// "outw": marks the file as a ledger among SQLite files.
const APPLICATION: i64 = 0x6f75_7477;

/// Who makes or changes a file.
const PROGRAM: &str = concat!("outwait ", env!("CARGO_PKG_VERSION"));

const TABLES: &str = "
CREATE TABLE layout (version INTEGER PRIMARY KEY, program TEXT NOT NULL);
CREATE TABLE meta (name TEXT PRIMARY KEY, value) WITHOUT ROWID;
CREATE TABLE streams (id INTEGER PRIMARY KEY, name TEXT NOT NULL, seal INTEGER NOT NULL);
CREATE TABLE log (sequence INTEGER PRIMARY KEY, entry BLOB NOT NULL);
CREATE TABLE tallies (
  stream INTEGER NOT NULL, start INTEGER NOT NULL, hours INTEGER NOT NULL,
  through INTEGER NOT NULL, tally BLOB NOT NULL,
  PRIMARY KEY (stream, start, hours)
) WITHOUT ROWID;
CREATE TABLE damaged (
  stream INTEGER, start INTEGER, hours INTEGER, sequence INTEGER, flaw TEXT NOT NULL, bytes BLOB NOT NULL
);
CREATE TABLE keys (id INTEGER PRIMARY KEY, key TEXT NOT NULL UNIQUE, digest BLOB NOT NULL, since REAL NOT NULL);
CREATE TABLE open_waits (
  stream INTEGER NOT NULL, id TEXT NOT NULL, attempt INTEGER NOT NULL,
  joined INTEGER NOT NULL, since REAL NOT NULL,
  started REAL, entered REAL, ended REAL, ending INTEGER,
  PRIMARY KEY (stream, id, attempt)
) WITHOUT ROWID;
CREATE INDEX open_waits_by_age ON open_waits (joined, since);
CREATE TABLE bad_lines (
  hour INTEGER NOT NULL, reason TEXT NOT NULL, lines INTEGER NOT NULL, PRIMARY KEY (hour, reason)
) WITHOUT ROWID;
";

/// What layout 2 has more than layout 1.
const SECOND: &str = "
CREATE TABLE records (
  shelf INTEGER NOT NULL, subject TEXT NOT NULL, number INTEGER NOT NULL, seal INTEGER NOT NULL, text TEXT NOT NULL,
  PRIMARY KEY (shelf, subject, number)
);
CREATE TABLE marks (key BLOB PRIMARY KEY, since REAL NOT NULL, seal INTEGER NOT NULL, mark BLOB NOT NULL) WITHOUT ROWID;
CREATE INDEX marks_by_age ON marks (since);
CREATE TABLE positions (
  name TEXT PRIMARY KEY, device INTEGER NOT NULL, file INTEGER NOT NULL,
  offset INTEGER NOT NULL, lines INTEGER NOT NULL, before BLOB NOT NULL
) WITHOUT ROWID;
";

/// Opens the file for writing, makes it if there is none, and brings it to the present layout.
pub(super) fn open_for_writing(path: &Path) -> Result<Connection, LedgerError> {
    let named = |error| fault(path, error);
    let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_CREATE;
    let db = open(path, flags).map_err(named)?;
    if is_empty(&db).map_err(named)? {
        create(&db).map_err(named)?;
    } else {
        let found = check_layout(&db, path)?;
        upgrade(&db, found).map_err(named)?;
    }
    let durable = || -> Result<bool> {
        let mode: String = db.query_row("PRAGMA journal_mode = WAL", [], |row| row.get(0))?;
        // Each commit is on disk before it is acknowledged, not only after the next checkpoint.
        db.execute_batch(
            "PRAGMA synchronous = FULL; PRAGMA wal_autocheckpoint = 1024;
             PRAGMA journal_size_limit = 16777216;",
        )?;
        Ok(mode.eq_ignore_ascii_case("wal"))
    };
    if !durable().map_err(named)? {
        let flaw = "the file system has no write-ahead log for it".to_owned();
        return Err(LedgerError::Damaged { path: path.to_owned(), flaw });
    }
    Ok(db)
}

/// Opens an existing file for reading.
pub(super) fn open_for_reading(path: &Path) -> Result<Connection, LedgerError> {
    let db = open(path, OpenFlags::SQLITE_OPEN_READ_ONLY).map_err(|error| fault(path, error))?;
    check_layout(&db, path)?;
    Ok(db)
}

/// Opens for reading what can be read at all: also a file where nothing may be written, which is then taken to stand
/// still, and also one that has lost its end. What was wrong comes along.
pub(super) fn open_for_rescue(path: &Path) -> Result<(Connection, Option<String>), LedgerError> {
    match open_for_reading(path) {
        Err(LedgerError::ReadOnly { .. }) if log_length(path) == 0 => {
            let db = open(&still(path), OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_URI)
                .map_err(|error| fault(path, error))?;
            check_layout(&db, path)?;
            Ok((db, None))
        }
        Err(LedgerError::Damaged { flaw, .. }) => {
            // The store reads a file that is shorter than it says only where the schema could be mended. Nothing can be
            // written here.
            let db = Connection::open_with_flags(path, OpenFlags::SQLITE_OPEN_READ_ONLY)
                .and_then(|db| db.execute_batch("PRAGMA writable_schema = ON").and(settings(&db)).and(Ok(db)))
                .map_err(|error| fault(path, error))?;
            check_layout(&db, path)?;
            Ok((db, Some(flaw)))
        }
        other => Ok((other?, None)),
    }
}

/// The length of the write-ahead log beside the file, 0 if there is none.
pub(super) fn log_length(path: &Path) -> u64 {
    let mut log = path.as_os_str().to_owned();
    log.push("-wal");
    std::fs::metadata(log).map_or(0, |log| log.len())
}

/// The file's name as the store takes it for a file that nobody changes.
fn still(path: &Path) -> PathBuf {
    let mut uri = String::from("file:");
    for &byte in path.as_os_str().as_encoded_bytes() {
        match byte {
            b'/' | b'.' | b'-' | b'_' => uri.push(char::from(byte)),
            _ if byte.is_ascii_alphanumeric() => uri.push(char::from(byte)),
            _ => uri.push_str(&format!("%{byte:02x}")),
        }
    }
    uri.push_str("?immutable=1");
    uri.into()
}

fn open(path: &Path, flags: OpenFlags) -> Result<Connection> {
    let db = Connection::open_with_flags(path, flags | OpenFlags::SQLITE_OPEN_NO_MUTEX)?;
    settings(&db)?;
    Ok(db)
}

fn settings(db: &Connection) -> Result<()> {
    db.set_prepared_statement_cache_capacity(64);
    db.busy_timeout(PATIENCE)?;
    // `cell_size_check` finds broken pages before they mislead; 16 MiB of cache.
    db.execute_batch(
        "PRAGMA cell_size_check = ON; PRAGMA trusted_schema = OFF; PRAGMA temp_store = MEMORY;
         PRAGMA cache_size = -16384; PRAGMA mmap_size = 0;",
    )
}

fn is_empty(db: &Connection) -> Result<bool> {
    db.query_row("SELECT count(*) = 0 FROM sqlite_schema", [], |row| row.get(0))
}

fn create(db: &Connection) -> Result<()> {
    // These two only take on a file without tables.
    db.execute_batch(
        "PRAGMA auto_vacuum = INCREMENTAL; PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL;",
    )?;
    db.execute_batch(&format!(
        "BEGIN IMMEDIATE;
         {TABLES}
         {SECOND}
         INSERT INTO layout VALUES ({LAYOUT_VERSION}, '{PROGRAM}');
         PRAGMA application_id = {APPLICATION};
         PRAGMA user_version = {LAYOUT_VERSION};
         COMMIT;"
    ))
}

/// Brings an older file to the present layout, one transaction a step; what it holds stays as it is.
fn upgrade(db: &Connection, found: i64) -> Result<()> {
    if found < 2 {
        db.execute_batch(&format!(
            "BEGIN IMMEDIATE;
             {SECOND}
             INSERT INTO layout VALUES (2, '{PROGRAM}');
             PRAGMA user_version = 2;
             COMMIT;"
        ))?;
    }
    Ok(())
}

/// Whether the file has a table for records: one of layout 1 that is only read has none.
pub(super) fn has_records(db: &Connection) -> Result<bool> {
    db.query_row("PRAGMA user_version", [], |row| row.get::<_, i64>(0)).map(|version| version >= 2)
}

/// The layout that a file has. What is older than the present one is brought there when it is opened for writing.
fn check_layout(db: &Connection, path: &Path) -> Result<i64, LedgerError> {
    let pragma = |name: &str| -> Result<i64, LedgerError> {
        db.query_row(&format!("PRAGMA {name}"), [], |row| row.get(0)).map_err(|error| fault(path, error))
    };
    if pragma("application_id")? != APPLICATION {
        return Err(LedgerError::Foreign { path: path.to_owned() });
    }
    let found = pragma("user_version")?;
    if found > LAYOUT_VERSION {
        return Err(LedgerError::Newer { path: path.to_owned(), found, known: LAYOUT_VERSION });
    }
    // Layout 1 is the first.
    if found < 1 {
        return Err(LedgerError::Foreign { path: path.to_owned() });
    }
    Ok(found)
}
