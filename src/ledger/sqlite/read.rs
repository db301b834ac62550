//! Reading: after a crash, and at any time beside the writer.

use std::collections::{BTreeMap, HashMap, VecDeque};
use std::ops::Range;
use std::path::{Path, PathBuf};
use std::sync::{Arc, RwLock};

use rusqlite::types::ValueRef;
use rusqlite::{Connection, OptionalExtension, Result, Row, Transaction, TransactionBehavior, params};

use super::live::{Live, Slot};
use super::seal::{checksum, record_seal, unseal};
use super::{Queued, entry, fault, file_in, is_damage, read_lock, schema};
use crate::ledger::{
    Damage, Extent, Hour, LedgerError, OpenWait, Period, Position, Reader, Record, Records, Shelf,
};
use crate::tally::Tally;

/// Reads a ledger on disk: beside its writer, or without one.
#[derive(Debug)]
pub struct SqliteReader {
    pub(super) db: Connection,
    pub(super) live: Arc<RwLock<Live>>,
    pub(super) path: PathBuf,
    /// Read once, when attached; no writer tells of more.
    pub(super) attached: Option<Vec<Damage>>,
}

impl SqliteReader {
    /// A reader that shares the writer's memory.
    pub(super) fn beside(path: &Path, live: Arc<RwLock<Live>>) -> Result<SqliteReader, LedgerError> {
        let db = schema::open_for_reading(path)?;
        Ok(SqliteReader { db, live, path: path.to_owned(), attached: None })
    }

    /// Reads the ledger in a folder as it is now, whether a daemon writes it or none does. Not for long: the
    /// daemon's write-ahead log grows as long as this lives.
    ///
    /// # Errors
    /// [`LedgerError::Missing`], [`LedgerError::Foreign`], [`LedgerError::Newer`]; [`LedgerError::Damaged`] if not
    /// even the names of the streams can be read.
    pub fn attach(folder: &Path) -> Result<SqliteReader, LedgerError> {
        let path = file_in(folder);
        if !path.try_exists().map_err(|error| LedgerError::io("reading", &path, error))? {
            return Err(LedgerError::Missing { folder: folder.to_owned() });
        }
        SqliteReader::attach_file(&path)
    }

    /// Reads a ledger's file that is not in a data folder, such as a backup.
    ///
    /// # Errors
    /// As [`SqliteReader::attach`].
    pub fn attach_file(path: &Path) -> Result<SqliteReader, LedgerError> {
        let (db, flaw) = schema::open_for_rescue(path)?;
        let named = |error| fault(path, error);
        // One view of the file for as long as this lives, so that log and tallies belong together.
        db.execute_batch("BEGIN").map_err(named)?;
        let mut recovered = recover(&db, true).map_err(named)?;
        recovered.damage.extend(flaw.map(|flaw| Damage::File { flaw }));
        Ok(SqliteReader {
            db,
            live: Arc::new(RwLock::new(recovered.live)),
            path: path.to_owned(),
            attached: Some(recovered.damage),
        })
    }

    pub(super) fn fault(&self, error: rusqlite::Error) -> LedgerError {
        fault(&self.path, error)
    }

    /// A view of the file, with a stream's id and those of its slots that belong to the view.
    fn view(&self, stream: &str, hours: &Range<Hour>) -> Result<(Option<Transaction<'_>>, i64, Vec<Slot>)> {
        let live = read_lock(&self.live);
        let mut view = None;
        if self.attached.is_none() {
            // Under the lock, so that the writer is at most one commit ahead: what that commit has merged is told
            // by the tally's `through`.
            let begun = Transaction::new_unchecked(&self.db, TransactionBehavior::Deferred)?;
            begun.query_row("SELECT 1 FROM layout", [], |_| Ok(()))?;
            view = Some(begun);
        }
        // No stream has the id 0.
        let id = live.id(stream).unwrap_or(0);
        let wanted = |slot: &&Slot| Period::Hour(slot.hour).overlaps(hours);
        Ok((view, id, live.slots(id).iter().filter(wanted).cloned().collect()))
    }
}

impl Reader for SqliteReader {
    fn streams(&self) -> Result<Vec<String>, LedgerError> {
        let mut names: Vec<String> = read_lock(&self.live).names().map(str::to_owned).collect();
        names.sort_unstable();
        Ok(names)
    }

    fn visit(
        &self,
        stream: &str,
        hours: Range<Hour>,
        take: &mut dyn FnMut(Period, Tally),
    ) -> Result<Vec<Damage>, LedgerError> {
        let (_view, id, slots) = self.view(stream, &hours).map_err(|error| self.fault(error))?;
        let mut slots = slots.into_iter().peekable();
        let mut damage = Vec::new();
        let read = stored(&self.db, id, &hours, |row| {
            while let Some(slot) = slots.next_if(|slot| slot.hour < row.period.hours().start) {
                take(Period::Hour(slot.hour), slot.tally);
            }
            let mut slot = slots.next_if(|slot| Period::Hour(slot.hour) == row.period);
            slot.take_if(|slot| row.through >= slot.first);
            match row.tally {
                Ok(tally) => take(row.period, tally),
                Err(flaw) => {
                    damage.push(Damage::Tally { stream: stream.to_owned(), period: row.period, flaw })
                }
            }
            if let Some(slot) = slot {
                take(row.period, slot.tally);
            }
        });
        slots.for_each(|slot| take(Period::Hour(slot.hour), slot.tally));
        match read.and_then(|()| set_aside(&self.db, id, stream, &hours, &mut damage)) {
            Ok(()) => {}
            Err(error) if is_damage(&error) => {
                damage.push(Damage::Stream { stream: stream.to_owned(), flaw: error.to_string() });
            }
            Err(error) => return Err(self.fault(error)),
        }
        Ok(damage)
    }

    fn open_waits(&self, stream: Option<&str>, most: usize) -> Result<Vec<OpenWait>, LedgerError> {
        let id = match stream {
            None => None,
            Some(stream) => match read_lock(&self.live).id(stream) {
                None => return Ok(Vec::new()),
                some => some,
            },
        };
        let most = i64::try_from(most).unwrap_or(i64::MAX);
        let read = || -> Result<Vec<OpenWait>> {
            let mut statement = self.db.prepare_cached(
                "SELECT s.name, o.id, o.attempt, o.started, o.entered
                 FROM open_waits o JOIN streams s ON s.id = o.stream
                 WHERE o.joined = 0 AND o.started IS NOT NULL AND (?1 IS NULL OR o.stream = ?1)
                 ORDER BY o.started, s.name, o.id, o.attempt LIMIT ?2",
            )?;
            let wait = |row: &Row<'_>| {
                Ok(OpenWait {
                    stream: row.get(0)?,
                    id: row.get(1)?,
                    attempt: row.get(2)?,
                    started: row.get(3)?,
                    entered: row.get(4)?,
                })
            };
            statement.query_map(params![id, most], wait)?.collect()
        };
        read().map_err(|error| self.fault(error))
    }

    fn bad_lines(&self, hours: Range<Hour>) -> Result<BTreeMap<String, u64>, LedgerError> {
        let read = || -> Result<BTreeMap<String, u64>> {
            let mut sums = BTreeMap::<String, u64>::new();
            let mut statement = self
                .db
                .prepare_cached("SELECT reason, lines FROM bad_lines WHERE hour >= ?1 AND hour < ?2")?;
            let mut rows = statement.query([hours.start.0, hours.end.0])?;
            while let Some(row) = rows.next()? {
                let sum = sums.entry(row.get(0)?).or_default();
                *sum = sum.saturating_add(row.get::<_, i64>(1)? as u64);
            }
            Ok(sums)
        };
        read().map_err(|error| self.fault(error))
    }

    fn position(&self, name: &str) -> Result<Option<Position>, LedgerError> {
        super::positions::read(&self.db, name).map_err(|error| self.fault(error))
    }

    fn records(&self, shelf: Shelf, subject: Option<&str>) -> Result<Records, LedgerError> {
        let mut found = Records::default();
        match records(&self.db, shelf, subject, &mut found) {
            Ok(()) => {}
            Err(error) if is_damage(&error) => {
                found.damage.push(Damage::File { flaw: format!("its records: {error}") });
            }
            Err(error) => return Err(self.fault(error)),
        }
        Ok(found)
    }

    fn extent(&self) -> Result<Extent, LedgerError> {
        let file = std::fs::metadata(&self.path).map_or(0, |file| file.len());
        let keys = key_count(&self.db).map_err(|error| self.fault(error))?;
        let live = read_lock(&self.live);
        Ok(Extent {
            bytes: file + schema::log_length(&self.path),
            streams: live.len(),
            open: live.singles,
            keys,
            log_bytes: live.log_bytes,
            live_bytes: live.bytes,
        })
    }
}

/// Adds the records on a shelf to those that are found.
pub(super) fn records(
    db: &Connection,
    shelf: Shelf,
    subject: Option<&str>,
    found: &mut Records,
) -> Result<()> {
    if !schema::has_records(db)? {
        return Ok(());
    }
    let mut statement = db.prepare_cached(match subject {
        Some(_) => {
            "SELECT subject, number, seal, text FROM records WHERE shelf = ?1 AND subject = ?2 ORDER BY number"
        }
        None => {
            "SELECT subject, number, seal, text FROM records WHERE shelf = ?1 AND ?2 IS NULL ORDER BY subject, number"
        }
    })?;
    let mut rows = statement.query(params![shelf.code(), subject])?;
    while let Some(row) = rows.next()? {
        let bytes = |i: usize| Ok::<_, rusqlite::Error>(row.get_ref(i)?.as_bytes().unwrap_or_default());
        let subject = String::from_utf8_lossy(bytes(0)?).into_owned();
        let (number, seal, text): (i64, i64, &[u8]) = (row.get(1)?, row.get(2)?, bytes(3)?);
        let sound = i64::from(record_seal(shelf.code(), &subject, number, text)) == seal;
        match std::str::from_utf8(text) {
            Ok(text) if sound => {
                found.records.push(Record { shelf, subject: subject.into(), number, text: text.into() });
            }
            _ => {
                let flaw = "its checksum does not match".to_owned();
                found.damage.push(Damage::Record { shelf, subject, number, flaw });
            }
        }
    }
    Ok(())
}

/// How many keys are kept, from the first and last number: a key used again after its time leaves a gap.
pub(super) fn key_count(db: &Connection) -> Result<usize> {
    let mut statement = db.prepare_cached("SELECT (SELECT min(id) FROM keys), (SELECT max(id) FROM keys)")?;
    let (first, last): (Option<i64>, Option<i64>) =
        statement.query_row([], |row| Ok((row.get(0)?, row.get(1)?)))?;
    Ok(first.zip(last).map_or(0, |(first, last)| (last - first + 1) as usize))
}

/// A stored tally.
struct Stored {
    period: Period,
    through: i64,
    tally: Result<Tally, String>,
}

/// Hands out the stored tallies of a stream that share an hour with `hours`, in order of time.
fn stored(db: &Connection, stream: i64, hours: &Range<Hour>, mut take: impl FnMut(Stored)) -> Result<()> {
    let mut statement = db.prepare_cached(
        "SELECT start, hours, through, tally FROM tallies
         WHERE stream = ?1 AND start >= ?2 AND start < ?3 ORDER BY start, hours",
    )?;
    // A day that began before the window may reach into it.
    let mut rows = statement.query(params![stream, i64::from(hours.start.0) - 23, hours.end.0])?;
    while let Some(row) = rows.next()? {
        let (start, length, through) = (row.get(0)?, row.get(1)?, row.get(2)?);
        let period = period(start, length);
        if period.overlaps(hours) {
            take(Stored {
                period,
                through,
                tally: open_tally(stream, start, length, through, row.get_ref(3)?),
            });
        }
    }
    Ok(())
}

/// A stored tally out of its seal.
pub(super) fn open_tally(
    stream: i64,
    start: i64,
    hours: i64,
    through: i64,
    value: ValueRef<'_>,
) -> Result<Tally, String> {
    let ValueRef::Blob(sealed) = value else { return Err("it is no tally".to_owned()) };
    let bytes = unseal(&[stream, start, hours, through], sealed).ok_or("its checksum does not match")?;
    Tally::decode(bytes).map_err(|error| error.to_string())
}

/// The period of a row. A length that is neither an hour's nor a day's is damage, which the seal will tell.
pub(super) fn period(start: i64, hours: i64) -> Period {
    let start = Hour(start.clamp(i64::from(i32::MIN), i64::from(i32::MAX)) as i32);
    if hours == 24 { Period::Day(start.day()) } else { Period::Hour(start) }
}

/// Names the tallies that were broken when they should have been written to.
pub(super) fn set_aside(
    db: &Connection,
    id: i64,
    stream: &str,
    hours: &Range<Hour>,
    damage: &mut Vec<Damage>,
) -> Result<()> {
    let mut statement = db.prepare_cached("SELECT start, hours, flaw FROM damaged WHERE stream = ?1")?;
    let mut rows = statement.query([id])?;
    while let Some(row) = rows.next()? {
        let period = period(row.get(0)?, row.get(1)?);
        if period.overlaps(hours) {
            damage.push(Damage::Tally { stream: stream.to_owned(), period, flaw: row.get(2)? });
        }
    }
    Ok(())
}

/// What is in memory while a ledger is open.
pub(super) struct Recovered {
    pub(super) live: Live,
    pub(super) queue: VecDeque<Queued>,
    pub(super) log: VecDeque<(i64, u64)>,
    pub(super) sequence: i64,
    pub(super) next_stream: i64,
    pub(super) damage: Vec<Damage>,
    /// Log entries that cannot be read, with the reason.
    pub(super) broken: Vec<(i64, String)>,
}

/// Reads names and counts, and counts again what is in the log and not in its hours. If `tolerant`, a log that can
/// only be read in part is no error but damage.
pub(super) fn recover(db: &Connection, tolerant: bool) -> Result<Recovered> {
    let mut found = Recovered {
        live: Live::default(),
        queue: VecDeque::new(),
        log: VecDeque::new(),
        sequence: 0,
        next_stream: 1,
        damage: Vec::new(),
        broken: Vec::new(),
    };
    read_names(db, &mut found)?;
    match read_counts(db, &mut found).and_then(|()| replay(db, &mut found)) {
        Err(error) if tolerant && is_damage(&error) => {
            let flaw = format!("the log of recent batches cannot be read beyond {}: {error}", found.sequence);
            found.damage.push(Damage::File { flaw });
        }
        other => other?,
    }
    Ok(found)
}

fn read_counts(db: &Connection, found: &mut Recovered) -> Result<()> {
    let mut statement = db.prepare_cached("SELECT value FROM meta WHERE name = ?1")?;
    for (name, count) in [("singles", &mut found.live.singles), ("joined", &mut found.live.joined)] {
        let stored: Option<i64> = statement.query_row([name], |row| row.get(0)).optional()?;
        *count = stored.and_then(|count| usize::try_from(count).ok()).unwrap_or(0);
    }
    Ok(())
}

fn replay(db: &Connection, found: &mut Recovered) -> Result<()> {
    let newest: Option<i64> = db.query_row("SELECT max(sequence) FROM log", [], |row| row.get(0))?;
    let mut statement = db.prepare("SELECT sequence, entry FROM log ORDER BY sequence")?;
    let mut rows = statement.query([])?;
    let mut merged = HashMap::new();
    while let Some(row) = rows.next()? {
        let sequence: i64 = row.get(0)?;
        let bytes = match row.get_ref(1)? {
            ValueRef::Blob(bytes) => bytes,
            _ => &[],
        };
        found.sequence = found.sequence.max(sequence);
        found.log.push_back((sequence, entry::cost(bytes)));
        found.live.log_bytes += entry::cost(bytes);
        let Recovered { live, queue, .. } = &mut *found;
        // The store's own errors wait until the entry is through.
        let mut failed = Ok(());
        let read = entry::read(sequence, bytes, |stream, hour, tally| {
            let through = match live.slot(stream, hour) {
                // What is merged lies behind.
                Some(_) => i64::MIN,
                None => *merged.entry((stream, hour)).or_insert_with(|| {
                    // None is merged beyond the newest entry: such a number is damage, as its tally's seal will tell.
                    let through = through(db, stream, hour).unwrap_or_else(|error| {
                        failed = Err(error);
                        None
                    });
                    through.filter(|&t| Some(t) <= newest).unwrap_or(i64::MIN)
                }),
            };
            if sequence > through && live.add_encoded(stream, hour, sequence, tally)? {
                queue.push_back(Queued { first: sequence, stream, hour });
            }
            Ok(())
        });
        failed?;
        if let Err(flaw) = read {
            found.damage.push(Damage::Entry { sequence, flaw: flaw.clone() });
            found.broken.push((sequence, flaw));
        }
    }
    // Without a log that can be believed, only the tallies know how far the count has come.
    if found.log.is_empty() || !found.broken.is_empty() {
        let most: Option<i64> = db.query_row("SELECT max(through) FROM tallies", [], |row| row.get(0))?;
        found.sequence = found.sequence.max(most.unwrap_or(0));
    }
    Ok(())
}

/// The last log entry that is merged into an hour's tally.
fn through(db: &Connection, stream: i64, hour: Hour) -> Result<Option<i64>> {
    db.prepare_cached("SELECT through FROM tallies WHERE stream = ?1 AND start = ?2 AND hours = 1")?
        .query_row(params![stream, hour.0], |row| row.get(0))
        .optional()
}

fn read_names(db: &Connection, found: &mut Recovered) -> Result<()> {
    let mut statement = db.prepare("SELECT id, name, seal FROM streams")?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        let (id, seal): (i64, i64) = (row.get(0)?, row.get(2)?);
        found.next_stream = found.next_stream.max(id.saturating_add(1));
        let name = row.get_ref(1)?.as_bytes().unwrap_or_default();
        let flaw = name_flaw(id, name, seal);
        let mut name = String::from_utf8_lossy(name).into_owned();
        if let Some(flaw) = flaw {
            // Its tallies are whole; under which name is not known for certain.
            found.damage.push(Damage::File { flaw });
            name = format!("{name}:damaged-{id}");
        }
        found.live.insert(name.into(), id);
    }
    Ok(())
}

/// What is wrong with a stream's row.
pub(super) fn name_flaw(id: i64, name: &[u8], seal: i64) -> Option<String> {
    let broken = i64::from(checksum(&[id], name)) != seal;
    broken.then(|| {
        format!("the name of stream {id}, {:?}, does not match its checksum", String::from_utf8_lossy(name))
    })
}
