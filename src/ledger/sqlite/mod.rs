#![doc = include_str!("../LAYOUT.md")]

mod check;
mod commit;
mod entry;
mod fold;
mod live;
mod lock;
mod positions;
mod read;
mod schema;
mod seal;
mod upkeep;
mod wal;

use std::collections::{BTreeMap, VecDeque};
use std::io::Write;
use std::ops::Range;
use std::path::{Path, PathBuf};
use std::sync::{Arc, PoisonError, RwLock, RwLockReadGuard, RwLockWriteGuard};

use rusqlite::{Connection, ErrorCode, OptionalExtension};

use self::live::Live;
use self::lock::FolderLock;
pub use self::read::SqliteReader;
pub use self::schema::LAYOUT_VERSION;
use super::clock::Clock;
use super::{
    Batch, Damage, Extent, Hour, Ledger, LedgerError, OpenWait, Options, Period, Position, Reader, Receipt,
    Records, Shelf, Upkeep,
};
use crate::tally::Tally;

/// A ledger in a folder of its own, for one writer.
#[derive(Debug)]
pub struct SqliteLedger {
    // Closed before `db`: the last connection to close tidies the write-ahead log away, if it may write.
    reader: SqliteReader,
    db: Connection,
    live: Arc<RwLock<Live>>,
    /// The slots that are not merged, the one that has waited longest first.
    queue: VecDeque<Queued>,
    /// The log's entries: number and bytes.
    log: VecDeque<(i64, u64)>,
    /// The last entry's number.
    sequence: i64,
    next_stream: i64,
    /// Histograms that are remembered.
    marks: usize,
    /// Slots that the log's growth has paid for to be merged, below 1.
    credit: f64,
    clock: Clock,
    rounds: upkeep::Rounds,
    damage: Vec<Damage>,
    options: Options,
    path: PathBuf,
    _lock: FolderLock,
}

/// A slot and the log entry that began it.
#[derive(Clone, Copy, Debug)]
struct Queued {
    first: i64,
    stream: i64,
    hour: Hour,
}

impl SqliteLedger {
    /// Opens the ledger in a folder, or makes it. What an earlier process acknowledged is there, however it ended.
    ///
    /// Takes time by what the log holds ([`Options::log_bytes`]), not by what the ledger holds.
    ///
    /// # Errors
    /// [`LedgerError::InUse`] while another writer has it; [`LedgerError::Foreign`], [`LedgerError::Newer`],
    /// [`LedgerError::Damaged`] for a file that this program must not write; those of the file system.
    /// Damage to single tallies is no error, see [`SqliteLedger::damage`].
    pub fn open(folder: &Path, options: Options) -> Result<SqliteLedger, LedgerError> {
        std::fs::create_dir_all(folder).map_err(|error| LedgerError::io("making", folder, error))?;
        let lock = FolderLock::take(folder)?;
        let path = file_in(folder);
        let lost = wal::lost(&path).map_err(|error| LedgerError::io("reading", &path, error))?;
        let db = schema::open_for_writing(&path)?;
        // The names of new files are on disk as well.
        std::fs::File::open(folder)
            .and_then(|folder| folder.sync_all())
            .map_err(|error| LedgerError::io("writing", folder, error))?;
        let recovered = read::recover(&db, false).map_err(|error| fault(&path, error))?;
        let live = Arc::new(RwLock::new(recovered.live));
        let clock = db
            .query_row("SELECT value FROM meta WHERE name = 'clock'", [], |row| row.get(0))
            .optional()
            .map_err(|error| fault(&path, error))?;
        let marks: i64 = db
            .query_row("SELECT count(*) FROM marks", [], |row| row.get(0))
            .map_err(|error| fault(&path, error))?;
        let mut ledger = SqliteLedger {
            marks: usize::try_from(marks).unwrap_or(0),
            reader: SqliteReader::beside(&path, Arc::clone(&live))?,
            db,
            live,
            queue: recovered.queue,
            log: recovered.log,
            sequence: recovered.sequence,
            next_stream: recovered.next_stream,
            credit: 0.0,
            clock: Clock::resume(clock),
            rounds: upkeep::Rounds::default(),
            damage: Vec::new(),
            options,
            path,
            _lock: lock,
        };
        ledger.set_aside(&recovered.broken).map_err(|error| fault(&ledger.path, error))?;
        ledger.damage = recovered.damage;
        ledger.damage.extend(lost.map(|flaw| Damage::File { flaw }));
        Ok(ledger)
    }

    /// What was found broken while opening. A whole search is [`SqliteReader::check`].
    pub fn damage(&self) -> &[Damage] {
        &self.damage
    }

    /// A reader for another thread, with what only this kind of ledger has: check, backup.
    ///
    /// # Errors
    /// [`LedgerError`] if the file cannot be opened once more.
    pub fn sqlite_reader(&self) -> Result<SqliteReader, LedgerError> {
        SqliteReader::beside(&self.path, Arc::clone(&self.live))
    }
}

impl Ledger for SqliteLedger {
    fn commit(&mut self, batches: &[Batch], now: f64) -> Result<Receipt, LedgerError> {
        self.file(batches, now).map_err(|error| fault(&self.path, error))
    }

    fn maintain(&mut self, now: f64) -> Result<Upkeep, LedgerError> {
        self.keep(now).map_err(|error| fault(&self.path, error))
    }

    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(self.sqlite_reader()?))
    }
}

impl Reader for SqliteLedger {
    fn streams(&self) -> Result<Vec<String>, LedgerError> {
        self.reader.streams()
    }

    fn visit(
        &self,
        stream: &str,
        hours: Range<Hour>,
        take: &mut dyn FnMut(Period, Tally),
    ) -> Result<Vec<Damage>, LedgerError> {
        self.reader.visit(stream, hours, take)
    }

    fn open_waits(&self, stream: Option<&str>, most: usize) -> Result<Vec<OpenWait>, LedgerError> {
        self.reader.open_waits(stream, most)
    }

    fn bad_lines(&self, hours: Range<Hour>) -> Result<BTreeMap<String, u64>, LedgerError> {
        self.reader.bad_lines(hours)
    }

    fn position(&self, name: &str) -> Result<Option<Position>, LedgerError> {
        self.reader.position(name)
    }

    fn records(&self, shelf: Shelf, subject: Option<&str>) -> Result<Records, LedgerError> {
        self.reader.records(shelf, subject)
    }

    fn extent(&self) -> Result<Extent, LedgerError> {
        self.reader.extent()
    }
}

/// The ledger's file in its folder.
fn file_in(folder: &Path) -> PathBuf {
    folder.join("ledger.sqlite3")
}

// No code panics while it holds the lock; were it so, what is there is still the best there is.
fn read_lock(live: &RwLock<Live>) -> RwLockReadGuard<'_, Live> {
    live.read().unwrap_or_else(PoisonError::into_inner)
}

fn write_lock(live: &RwLock<Live>) -> RwLockWriteGuard<'_, Live> {
    live.write().unwrap_or_else(PoisonError::into_inner)
}

/// The ledger's name for an error of the store.
fn fault(path: &Path, error: rusqlite::Error) -> LedgerError {
    let owned = path.to_owned();
    match error.sqlite_error_code() {
        Some(ErrorCode::NotADatabase) => LedgerError::Foreign { path: owned },
        _ if is_damage(&error) => LedgerError::Damaged { path: owned, flaw: error.to_string() },
        Some(ErrorCode::DiskFull) => LedgerError::Full { path: owned },
        Some(ErrorCode::ReadOnly | ErrorCode::PermissionDenied) => LedgerError::ReadOnly { path: owned },
        // The store does not say why the system refused; a small file tells.
        Some(ErrorCode::SystemIoFailure | ErrorCode::CannotOpen) => match probe(path) {
            Err(cause @ (LedgerError::Full { .. } | LedgerError::ReadOnly { .. })) => cause,
            _ => LedgerError::Store { path: owned, source: error },
        },
        _ => LedgerError::Store { path: owned, source: error },
    }
}

/// Whether an error tells of broken content rather than of a failing system.
fn is_damage(error: &rusqlite::Error) -> bool {
    use rusqlite::Error::{
        FromSqlConversionFailure, IntegralValueOutOfRange, InvalidColumnType, QueryReturnedNoRows, Utf8Error,
    };
    match error {
        FromSqlConversionFailure(..)
        | IntegralValueOutOfRange(..)
        | InvalidColumnType(..)
        | Utf8Error(..) => true,
        QueryReturnedNoRows => true,
        rusqlite::Error::SqliteFailure(failure, _) => {
            // A file that ends within a page is cut, not out of reach. And the statements are fixed: one that does not
            // fit the tables (`Unknown`) tells of broken tables.
            failure.extended_code == rusqlite::ffi::SQLITE_IOERR_SHORT_READ
                || matches!(
                    failure.code,
                    ErrorCode::DatabaseCorrupt
                        | ErrorCode::NotADatabase
                        | ErrorCode::ConstraintViolation
                        | ErrorCode::Unknown
                )
        }
        _ => false,
    }
}

/// Tries to write a little beside the file.
fn probe(path: &Path) -> Result<(), LedgerError> {
    let beside = path.with_extension("probe");
    let tried = std::fs::File::create(&beside).and_then(|mut file| {
        file.write_all(&[0; 65_536])?;
        file.sync_all()
    });
    let _ = std::fs::remove_file(&beside);
    tried.map_err(|error| LedgerError::io("writing", path, error))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::{Ending, Wait};

    /// The store's own limit of pages stands for a small disk where none may be mounted.
    #[test]
    fn a_full_store_refuses_and_goes_on_when_there_is_room() {
        let folder = tempfile::tempdir().unwrap();
        let options = Options { log_bytes: 50_000, ..Options::default() };
        let mut ledger = SqliteLedger::open(folder.path(), options.clone()).unwrap();
        let batch = |i: i32| {
            let mut batch = Batch::default();
            for j in 0..400 {
                let age = 1.0 + f64::from(i * 400 + j) * std::f64::consts::E;
                batch.add("a", &Wait::new(age, Ending::Done).unwrap(), 0.0).unwrap();
            }
            batch
        };
        let count = |ledger: &SqliteLedger| ledger.window("a", Hour(0)..Hour(1)).unwrap().tally.counts()[0];
        let pages = |ledger: &SqliteLedger, most: i64| {
            ledger.db.query_row(&format!("PRAGMA max_page_count = {most}"), [], |_| Ok(())).unwrap();
        };
        let present: i64 = ledger.db.query_row("PRAGMA page_count", [], |row| row.get(0)).unwrap();
        pages(&ledger, present + 12);
        let mut filed = 0;
        while let Ok(receipt) = ledger.commit(&[batch(filed)], 0.0) {
            assert!(receipt.batches[0].is_ok());
            filed += 1;
            assert!(filed < 1_000);
        }
        assert!(filed > 0);
        for _ in 0..5 {
            assert!(matches!(ledger.commit(&[batch(filed)], 0.0), Err(LedgerError::Full { .. })));
            assert_eq!(count(&ledger), filed as u64 * 400);
        }
        pages(&ledger, 1 << 30);
        for i in filed..filed + 30 {
            ledger.commit(&[batch(i)], 0.0).unwrap();
        }
        assert_eq!(count(&ledger), (filed as u64 + 30) * 400);
        drop(ledger);
        assert_eq!(count(&SqliteLedger::open(folder.path(), options).unwrap()), (filed as u64 + 30) * 400);
    }

    #[test]
    fn every_commit_is_synchronised() {
        let folder = tempfile::tempdir().unwrap();
        let ledger = SqliteLedger::open(folder.path(), Options::default()).unwrap();
        let pragma = |name: &str| {
            let sql = format!("PRAGMA {name}");
            ledger.db.query_row(&sql, [], |row| row.get::<_, rusqlite::types::Value>(0)).unwrap()
        };
        assert_eq!(pragma("synchronous"), rusqlite::types::Value::Integer(2));
        assert_eq!(pragma("journal_mode"), rusqlite::types::Value::Text("wal".to_owned()));
    }
}
