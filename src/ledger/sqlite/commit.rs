//! Filing a group of batches in one transaction.

use std::borrow::Cow;
use std::collections::{BTreeMap, HashMap, HashSet};

use rusqlite::{Connection, OptionalExtension, Result, Row, Transaction, TransactionBehavior, params};

use super::live::{Live, Place};
use super::read::key_count;
use super::seal::{checksum, record_seal};
use super::{Queued, SqliteLedger, entry, positions, read_lock, write_lock};
use crate::ledger::batch::{EventKey, Hours};
use crate::ledger::grow::{self, Known};
use crate::ledger::open::{self, Filed, State};
use crate::ledger::{Batch, BatchError, Digest, Entry, Hour, Options, Position, Receipt, Record, Shelf};
use crate::running::{Mark, SeriesKey};
use crate::tally::{self, Tally};
use crate::wait::Ending;

/// What a group of batches comes to, before any of it is written.
#[derive(Default)]
struct Plan<'b> {
    outcomes: Vec<Result<Entry, BatchError>>,
    /// New streams with their ids.
    names: HashMap<&'b str, i64>,
    tallies: Vec<(Target, Hour, Cow<'b, Tally>)>,
    events: HashMap<EventKey, Filed>,
    singles: usize,
    joined: usize,
    bad_lines: BTreeMap<&'b str, u64>,
    positions: BTreeMap<&'b str, Position>,
    marks: HashMap<SeriesKey, Mark>,
    /// Of these, those of series that had none.
    new_marks: usize,
    keys: HashMap<&'b str, Digest>,
    key_order: Vec<&'b str>,
    records: HashMap<(Shelf, &'b str, i64), &'b str>,
}

/// A stream that waits go to: its id, and its place if it has one already.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
struct Target {
    id: i64,
    place: Option<Place>,
}

/// What the ledger holds before a group is filed.
#[derive(Clone, Copy)]
struct Held<'l> {
    live: &'l Live,
    next_stream: i64,
    marks: usize,
}

impl SqliteLedger {
    pub(super) fn file(&mut self, batches: &[Batch], now: f64) -> Result<Receipt> {
        let time = self.clock.follow(now);
        let tx = Transaction::new_unchecked(&self.db, TransactionBehavior::Immediate)?;
        let mut plan = {
            let live = read_lock(&self.live);
            let mut plan = Plan { singles: live.singles, joined: live.joined, ..Plan::default() };
            for batch in batches {
                let held = Held { live: &live, next_stream: self.next_stream, marks: self.marks };
                let outcome = plan.admit(&tx, held, batch, &self.options, time, now)?;
                plan.outcomes.push(outcome);
            }
            plan
        };
        plan.join_tallies();
        plan.write_names(&tx)?;
        plan.write_keys(&tx, time, self.options.most_keys)?;
        plan.write_events(&tx, &read_lock(&self.live), self.options.most_open)?;
        plan.write_bad_lines(&tx, Hour::of(now))?;
        positions::write(&tx, &plan.positions)?;
        plan.write_records(&tx)?;
        plan.write_marks(&tx, time)?;
        let (mut due, mut credit, mut appended) = (0, self.credit, None);
        let mut entry = entry::Writer::new();
        plan.tallies.iter().for_each(|(target, hour, tally)| entry.add(target.id, *hour, tally));
        if !entry.is_empty() {
            let sequence = self.sequence.saturating_add(1);
            let bytes = entry.finish(sequence);
            tx.prepare_cached("INSERT INTO log VALUES (?1, ?2)")?.execute(params![sequence, bytes])?;
            let length = entry::cost(&bytes);
            (due, credit) = self.due(length);
            appended = Some((sequence, length));
        }
        let sequence = appended.map(|(sequence, _)| sequence);
        if appended.is_some() {
            self.merge(&tx, due, sequence)?;
        }
        tx.commit()?;

        // It is on disk. From here on nothing can fail, so that memory and file stay together.
        self.credit = credit;
        if let Some((sequence, length)) = appended {
            self.merged(due, Some(sequence));
            self.log.push_back((sequence, length));
            self.sequence = sequence;
        }
        let mut live = write_lock(&self.live);
        live.log_bytes += appended.map_or(0, |(_, length)| length);
        (live.singles, live.joined) = (plan.singles, plan.joined);
        self.next_stream = self.next_stream.saturating_add(plan.names.len() as i64);
        self.marks += plan.new_marks;
        for (name, id) in plan.names {
            live.insert(name.into(), id);
        }
        for (Target { id, place }, hour, tally) in plan.tallies {
            let place = place.unwrap_or_else(|| live.place(id));
            let began = live.add(place, hour, self.sequence, &tally);
            if began {
                self.queue.push_back(Queued { first: self.sequence, stream: id, hour });
            }
        }
        Ok(Receipt { batches: plan.outcomes })
    }
}

impl<'b> Plan<'b> {
    /// Takes a batch into the plan, or refuses it and leaves the plan as it was.
    fn admit(
        &mut self,
        db: &Connection,
        held: Held<'_>,
        batch: &'b Batch,
        options: &Options,
        time: f64,
        now: f64,
    ) -> Result<Result<Entry, BatchError>> {
        let Held { live, next_stream, marks } = held;
        if let Some((key, digest)) = &batch.key {
            let known = match self.keys.get(&**key) {
                Some(known) => Some(*known),
                None => find_key(db, key, time - options.keys_for)?,
            };
            match known {
                None => {}
                Some(known) if known == *digest => {
                    return Ok(Ok(Entry { repeated: true, ..Entry::default() }));
                }
                Some(_) => return Ok(Err(BatchError::KeyReused { key: key.to_string() })),
            }
        }
        let mut noted: HashMap<_, &str> = HashMap::new();
        for record in &batch.records {
            let (shelf, subject, number) = record.place();
            let earlier = noted.get(&record.place()).or(self.records.get(&record.place())).copied();
            let is_taken = shelf.is_final()
                && match earlier {
                    Some(text) => *text != *record.text,
                    None => is_taken(db, record)?,
                };
            if is_taken {
                return Ok(Err(BatchError::Taken { subject: subject.to_owned(), number }));
            }
            noted.insert(record.place(), &record.text);
        }
        // One look-up for each stream: with many streams each is a walk through cold memory.
        let known: Vec<_> =
            batch.streams.iter().map(|(name, hours)| (name, hours, live.find(name))).collect();
        let unknown = known.iter().filter(|(_, _, found)| found.is_none()).map(|(name, _, _)| &***name);
        let awaited = batch.events.iter().map(|event| &*event.key.stream);
        let awaited = awaited.chain(batch.running.iter().map(|running| &*running.stream));
        let new: HashSet<&str> = unknown
            .chain(awaited.filter(|name| live.find(name).is_none()))
            .filter(|name| !self.names.contains_key(name))
            .collect();
        if !new.is_empty() && live.len() + self.names.len() + new.len() > options.most_streams {
            return Ok(Err(BatchError::TooManyStreams { limit: options.most_streams }));
        }
        let outcome = open::settle(&batch.events, time, |key| match self.events.get(key) {
            Some(filed) => Ok(Some(*filed)),
            None => find_event(db, live, key),
        })?;
        if outcome.singles > 0 && self.singles + outcome.singles as usize > options.most_open {
            return Ok(Err(BatchError::TooManyOpen { limit: options.most_open }));
        }
        let grown = grow::settle(&batch.running, now, |key| match self.marks.get(key) {
            Some(mark) => Ok(Some(Known::Mark(mark.clone()))),
            None => find_mark(db, key),
        })?;
        if grown.new > 0 && marks + self.new_marks + grown.new > options.most_series {
            return Ok(Err(BatchError::TooManySeries { limit: options.most_series }));
        }
        let first = self.names.len() as i64;
        let ids = (first..).map(|i| next_stream.saturating_add(i));
        self.names.extend(new.into_iter().zip(ids));
        for (name, hours, found) in known {
            let Some(target) = self.target(found, name) else { continue };
            self.tallies.extend(hours.0.iter().map(|(hour, tally)| (target, *hour, Cow::Borrowed(tally))));
        }
        let mut joined: HashMap<Target, Hours> = HashMap::new();
        for (name, wait) in &outcome.waits {
            if let (Some(target), Some(at)) = (self.target(live.find(name), name), wait.at()) {
                tally::file(wait, at, joined.entry(target).or_default());
            }
        }
        for (name, hours) in grown.streams {
            let Some(target) = self.target(live.find(name), name) else { continue };
            self.tallies.extend(hours.0.into_iter().map(|(hour, tally)| (target, hour, Cow::Owned(tally))));
        }
        self.marks.extend(grown.marks);
        self.new_marks += grown.new;
        for (target, hours) in joined {
            self.tallies.extend(hours.0.into_iter().map(|(hour, tally)| (target, hour, Cow::Owned(tally))));
        }
        self.singles = self.singles.saturating_add_signed(outcome.singles as isize);
        self.joined = self.joined.saturating_add_signed(outcome.joined as isize);
        self.events.extend(outcome.changed);
        self.records.extend(noted);
        for (reason, lines) in &batch.bad_lines {
            let sum = self.bad_lines.entry(reason).or_default();
            *sum = sum.saturating_add(*lines);
        }
        self.positions.extend(batch.positions.iter().map(|(name, position)| (&**name, *position)));
        if let Some((key, digest)) = &batch.key {
            self.keys.insert(key, *digest);
            self.key_order.push(key);
        }
        let joined = outcome.waits.len() as u64;
        let (again, refused) = (outcome.again, outcome.refused);
        Ok(Ok(Entry { repeated: false, joined, again, refused, grown: grown.waits, resets: grown.resets }))
    }

    /// Puts the tallies in the order of their streams, in which memory is walked through fastest, now and when the
    /// entry is read again; and makes one of those for the same hour.
    fn join_tallies(&mut self) {
        self.tallies.sort_unstable_by_key(|(target, hour, _)| (target.id, *hour));
        self.tallies.dedup_by(|next, kept| {
            let same = (next.0.id, next.1) == (kept.0.id, kept.1);
            if same {
                kept.2.to_mut().merge(&next.2);
            }
            same
        });
    }

    fn target(&self, found: Option<(Place, i64)>, name: &str) -> Option<Target> {
        match found {
            Some((place, id)) => Some(Target { id, place: Some(place) }),
            None => self.names.get(name).map(|id| Target { id: *id, place: None }),
        }
    }

    fn write_names(&self, db: &Connection) -> Result<()> {
        let mut insert = db.prepare_cached("INSERT INTO streams VALUES (?1, ?2, ?3)")?;
        for (name, id) in &self.names {
            insert.execute(params![id, name, checksum(&[*id], name.as_bytes())])?;
        }
        Ok(())
    }

    fn write_keys(&self, db: &Connection, time: f64, most: usize) -> Result<()> {
        if self.keys.is_empty() {
            return Ok(());
        }
        // A key that stands there still is one whose time is over.
        let mut insert =
            db.prepare_cached("INSERT OR REPLACE INTO keys (key, digest, since) VALUES (?1, ?2, ?3)")?;
        for key in &self.key_order {
            insert.execute(params![key, self.keys.get(key).map(|digest| digest.0), time])?;
        }
        let above = key_count(db)?.saturating_sub(most);
        if above > 0 {
            db.prepare_cached("DELETE FROM keys WHERE id < (SELECT min(id) FROM keys) + ?1")?
                .execute([above as i64])?;
        }
        Ok(())
    }

    fn write_events(&mut self, db: &Connection, live: &Live, most: usize) -> Result<()> {
        if self.events.is_empty() {
            return Ok(());
        }
        let mut insert = db.prepare_cached(
            "INSERT OR REPLACE INTO open_waits
             (stream, id, attempt, joined, since, started, entered, ended, ending)
             VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9)",
        )?;
        for (key, filed) in &self.events {
            let Some(Target { id, .. }) = self.target(live.find(&key.stream), &key.stream) else { continue };
            let (started, entered, ended, ending) = match filed.state {
                State::Open { started, entered } => (Some(started), Some(entered), None, None),
                State::Ended { ended, ending } => (None, None, Some(ended), Some(ending as u8)),
                State::Joined { started, ended } => (Some(started), None, Some(ended), None),
            };
            let joined = !filed.state.is_single();
            insert.execute(params![
                id,
                key.id,
                key.attempt,
                joined,
                filed.since,
                started,
                entered,
                ended,
                ending
            ])?;
        }
        let above = self.joined.saturating_sub(most);
        if above > 0 {
            self.joined -= forget(db, true, f64::INFINITY, above)?;
        }
        write_count(db, "singles", self.singles)?;
        write_count(db, "joined", self.joined)
    }

    fn write_records(&self, db: &Connection) -> Result<()> {
        let mut insert = db.prepare_cached(
            "INSERT INTO records (shelf, subject, number, seal, text) VALUES (?1, ?2, ?3, ?4, ?5)
             ON CONFLICT (shelf, subject, number) DO UPDATE SET seal = excluded.seal, text = excluded.text",
        )?;
        for ((shelf, subject, number), text) in &self.records {
            let seal = record_seal(shelf.code(), subject, *number, text.as_bytes());
            insert.execute(params![shelf.code(), subject, number, seal, text])?;
        }
        Ok(())
    }

    fn write_marks(&self, db: &Connection, time: f64) -> Result<()> {
        if self.marks.is_empty() {
            return Ok(());
        }
        let mut insert = db.prepare_cached("INSERT OR REPLACE INTO marks VALUES (?1, ?2, ?3, ?4)")?;
        for (key, mark) in &self.marks {
            let bytes = mark.encode();
            insert.execute(params![key.0, time, checksum(&place(key), &bytes), bytes])?;
        }
        Ok(())
    }

    fn write_bad_lines(&self, db: &Connection, hour: Hour) -> Result<()> {
        let mut insert = db.prepare_cached(
            "INSERT INTO bad_lines VALUES (?1, ?2, ?3) ON CONFLICT (hour, reason) DO UPDATE SET lines =
             iif(lines > 9223372036854775807 - excluded.lines, 9223372036854775807, lines + excluded.lines)",
        )?;
        for (reason, lines) in &self.bad_lines {
            insert.execute(params![hour.0, reason, i64::try_from(*lines).unwrap_or(i64::MAX)])?;
        }
        Ok(())
    }
}

/// Whether another record stands there.
fn is_taken(db: &Connection, record: &Record) -> Result<bool> {
    let (shelf, subject, number) = record.place();
    db.prepare_cached(
        "SELECT EXISTS (SELECT 1 FROM records WHERE shelf = ?1 AND subject = ?2 AND number = ?3 AND text != ?4)",
    )?
    .query_row(params![shelf.code(), subject, number, record.text], |row| row.get(0))
}

/// The digest of a key that was filed after `since`.
fn find_key(db: &Connection, key: &str, since: f64) -> Result<Option<Digest>> {
    db.prepare_cached("SELECT digest FROM keys WHERE key = ?1 AND since > ?2")?
        .query_row(params![key, since], |row| row.get(0).map(Digest))
        .optional()
}

/// A series' key as the numbers of its place.
fn place(key: &SeriesKey) -> [i64; 2] {
    let bits = u128::from_le_bytes(key.0);
    [bits as i64, (bits >> 64) as i64]
}

/// What is remembered of a series.
fn find_mark(db: &Connection, key: &SeriesKey) -> Result<Option<Known>> {
    db.prepare_cached("SELECT seal, mark FROM marks WHERE key = ?1")?
        .query_row([key.0], |row| {
            let (seal, bytes): (i64, Vec<u8>) = (row.get(0)?, row.get(1)?);
            let sound = i64::from(checksum(&place(key), &bytes)) == seal;
            Ok(Mark::decode(&bytes).filter(|_| sound).map_or(Known::Broken, Known::Mark))
        })
        .optional()
}

fn find_event(db: &Connection, live: &Live, key: &EventKey) -> Result<Option<Filed>> {
    let Some(stream) = live.id(&key.stream) else { return Ok(None) };
    let filed = |row: &Row<'_>| {
        let (started, ended): (Option<f64>, Option<f64>) = (row.get(2)?, row.get(4)?);
        let ending = row.get::<_, Option<u8>>(5)?.and_then(|i| Ending::ALL.get(usize::from(i)).copied());
        let state = match (row.get(0)?, started, ended) {
            (true, Some(started), Some(ended)) => State::Joined { started, ended },
            (false, Some(started), None) => State::Open { started, entered: row.get(3)? },
            (_, _, Some(ended)) => State::Ended { ended, ending: ending.unwrap_or(Ending::Done) },
            (_, started, None) => State::Open { started: started.unwrap_or_default(), entered: row.get(3)? },
        };
        Ok(Filed { state, since: row.get(1)? })
    };
    db.prepare_cached(
        "SELECT joined, since, started, entered, ended, ending FROM open_waits
         WHERE stream = ?1 AND id = ?2 AND attempt = ?3",
    )?
    .query_row(params![stream, key.id, key.attempt], filed)
    .optional()
}

/// Forgets the open waits, or the joined ones, that were filed by then, the oldest first; how many.
pub(super) fn forget(db: &Connection, joined: bool, by: f64, most: usize) -> Result<usize> {
    db.prepare_cached(
        "DELETE FROM open_waits WHERE (stream, id, attempt) IN
         (SELECT stream, id, attempt FROM open_waits WHERE joined = ?1 AND since <= ?2 ORDER BY since LIMIT ?3)",
    )?
    .execute(params![joined, by, most as i64])
}

pub(super) fn write_count(db: &Connection, name: &str, count: usize) -> Result<()> {
    db.prepare_cached("INSERT OR REPLACE INTO meta VALUES (?1, ?2)")?.execute(params![name, count as i64])?;
    Ok(())
}
