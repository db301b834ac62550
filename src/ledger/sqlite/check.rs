//! Looking for damage, and copying a ledger while it is written.

use std::path::Path;

use rusqlite::backup::{Backup, StepResult};
use rusqlite::types::ValueRef;
use rusqlite::{Connection, Result};

use super::read::{open_tally, period};
use super::{entry, fault, is_damage, read_lock};
use crate::ledger::{Damage, Hour, LedgerError, Reader, SqliteReader};
use crate::tally::Tally;

impl SqliteReader {
    /// Looks at everything: the file's structure by the store's own check, every tally's and log entry's checksum and
    /// content. Gives what is broken; nothing if all is well. Reads the whole file.
    ///
    /// # Errors
    /// [`LedgerError`] if the system failed; damage is no error.
    pub fn check(&self) -> Result<Vec<Damage>, LedgerError> {
        let mut damage = self.attached.clone().unwrap_or_default();
        let kept = |error: rusqlite::Error| {
            if is_damage(&error) { Ok(error.to_string()) } else { Err(self.fault(error)) }
        };
        if let Err(error) = check_file(&self.db, &mut damage) {
            damage.push(Damage::File { flaw: kept(error)? });
        }
        if self.attached.is_none()
            && let Err(error) = check_log(&self.db, &mut damage)
        {
            damage.push(Damage::File { flaw: kept(error)? });
        }
        for stream in self.streams()? {
            let id = read_lock(&self.live).id(&stream);
            let Some(id) = id else { continue };
            match check_stream(&self.db, id, &stream, &mut damage) {
                Ok(()) => {}
                Err(error) => damage.push(Damage::Stream { stream, flaw: kept(error)? }),
            }
        }
        Ok(damage)
    }

    /// Copies the ledger as it is now into a file of its own, while it may be written. The copy is a whole ledger: put
    /// it into an empty folder under the ledger's file name, and it opens.
    ///
    /// # Errors
    /// [`LedgerError::Io`] if the target exists; those of the store and of the file system.
    pub fn backup(&self, to: &Path) -> Result<(), LedgerError> {
        let taken = |error| LedgerError::io("backing up to", to, error);
        if to.try_exists().map_err(taken)? {
            return Err(taken(std::io::ErrorKind::AlreadyExists.into()));
        }
        let mut part = to.as_os_str().to_owned();
        part.push(".part");
        let part = Path::new(&part);
        let copied = self.copy(part).and_then(|()| {
            std::fs::File::open(part).and_then(|file| file.sync_all()).map_err(taken)?;
            std::fs::rename(part, to).map_err(taken)
        });
        if copied.is_err() {
            let _ = std::fs::remove_file(part);
        }
        copied
    }

    fn copy(&self, to: &Path) -> Result<(), LedgerError> {
        let _ = std::fs::remove_file(to);
        let mut target = Connection::open(to).map_err(|error| fault(to, error))?;
        let copy = || -> Result<bool> {
            // In one step, so that a busy writer cannot make it begin again and again. Readers do not block writers.
            let whole = matches!(Backup::new(&self.db, &mut target)?.step(-1)?, StepResult::Done);
            // The copy is one file: its write-ahead log comes back when it is opened for writing.
            target.query_row("PRAGMA journal_mode = DELETE", [], |_| Ok(()))?;
            Ok(whole)
        };
        let mut copy = copy;
        match copy() {
            Ok(true) => Ok(()),
            Ok(false) => Err(LedgerError::io("backing up to", to, std::io::ErrorKind::ResourceBusy.into())),
            Err(error) => Err(fault(to, error)),
        }
    }
}

/// The store's own check of pages, tables and indexes.
fn check_file(db: &Connection, damage: &mut Vec<Damage>) -> Result<()> {
    let mut check = db.prepare("PRAGMA integrity_check")?;
    let mut rows = check.query([])?;
    while let Some(row) = rows.next()? {
        let line: String = row.get(0)?;
        if line != "ok" {
            damage.push(Damage::File { flaw: line });
        }
    }
    Ok(())
}

fn check_log(db: &Connection, damage: &mut Vec<Damage>) -> Result<()> {
    let mut read = db.prepare("SELECT sequence, entry FROM log ORDER BY sequence")?;
    let mut rows = read.query([])?;
    while let Some(row) = rows.next()? {
        let sequence = row.get(0)?;
        let bytes = match row.get_ref(1)? {
            ValueRef::Blob(bytes) => bytes,
            _ => &[],
        };
        if let Err(flaw) = entry::read(sequence, bytes, |_, _, tally| Tally::decode(tally).map(drop)) {
            damage.push(Damage::Entry { sequence, flaw });
        }
    }
    Ok(())
}

fn check_stream(db: &Connection, id: i64, stream: &str, damage: &mut Vec<Damage>) -> Result<()> {
    let mut read = db.prepare_cached("SELECT start, hours, through, tally FROM tallies WHERE stream = ?1")?;
    let mut rows = read.query([id])?;
    while let Some(row) = rows.next()? {
        let (start, hours, through) = (row.get(0)?, row.get(1)?, row.get(2)?);
        if let Err(flaw) = open_tally(id, start, hours, through, row.get_ref(3)?) {
            damage.push(Damage::Tally { stream: stream.to_owned(), period: period(start, hours), flaw });
        }
    }
    drop(rows);
    super::read::set_aside(db, id, stream, &(Hour(i32::MIN)..Hour(i32::MAX)), damage)
}
