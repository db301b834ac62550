//! Looking for damage, and copying a ledger while it is written.

use std::path::Path;

use rusqlite::backup::{Backup, StepResult};
use rusqlite::types::ValueRef;
use rusqlite::{Connection, Result};

use super::read::{name_flaw, open_tally, period, set_aside};
use super::{entry, fault, is_damage, read_lock};
use crate::ledger::{Damage, Hour, LedgerError, Reader, Shelf, SqliteReader};
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
        // An attached reader has read names and log already.
        let log = match self.attached {
            None => check_names(&self.db, &mut damage).and_then(|()| check_log(&self.db, &mut damage)),
            Some(_) => Ok(()),
        };
        if let Err(error) = log.and_then(|()| entries_set_aside(&self.db, &mut damage)) {
            damage.push(Damage::File { flaw: kept(error)? });
        }
        for shelf in Shelf::ALL {
            damage.extend(self.records(shelf, None)?.damage);
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
        part.push(format!(".{}.part", std::process::id()));
        let part = Path::new(&part);
        let copied = self.copy(part).and_then(|()| {
            std::fs::File::open(part).and_then(|file| file.sync_all()).map_err(taken)?;
            std::fs::rename(part, to).map_err(taken)?;
            // The name is on disk as well.
            let folder =
                to.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."));
            std::fs::File::open(folder).and_then(|folder| folder.sync_all()).map_err(taken)
        });
        if copied.is_err() {
            let _ = std::fs::remove_file(part);
        }
        copied
    }

    fn copy(&self, to: &Path) -> Result<(), LedgerError> {
        let mut target = Connection::open(to).map_err(|error| fault(to, error))?;
        // In one step, so that a busy writer cannot make it begin again and again. Readers do not block writers.
        let step = Backup::new(&self.db, &mut target).and_then(|backup| backup.step(-1));
        match step.map_err(|error| fault(to, error))? {
            StepResult::Done => {}
            _ => return Err(LedgerError::io("backing up to", to, std::io::ErrorKind::ResourceBusy.into())),
        }
        // The copy is one file; its write-ahead log comes back when it is opened for writing.
        target.query_row("PRAGMA journal_mode = DELETE", [], |_| Ok(())).map_err(|error| fault(to, error))
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

fn check_names(db: &Connection, damage: &mut Vec<Damage>) -> Result<()> {
    let mut read = db.prepare("SELECT id, name, seal FROM streams")?;
    let mut rows = read.query([])?;
    while let Some(row) = rows.next()? {
        let name = row.get_ref(1)?.as_bytes().unwrap_or_default();
        damage.extend(name_flaw(row.get(0)?, name, row.get(2)?).map(|flaw| Damage::File { flaw }));
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

/// Log entries that could not be read when the ledger was opened for writing.
fn entries_set_aside(db: &Connection, damage: &mut Vec<Damage>) -> Result<()> {
    let mut read = db.prepare("SELECT sequence, flaw FROM damaged WHERE sequence IS NOT NULL")?;
    let mut rows = read.query([])?;
    while let Some(row) = rows.next()? {
        damage.push(Damage::Entry { sequence: row.get(0)?, flaw: row.get(1)? });
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
    set_aside(db, id, stream, &(Hour(i32::MIN)..Hour(i32::MAX)), damage)
}
