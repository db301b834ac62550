//! Upkeep in small pieces: merging closed hours, rolling hours into days, dropping, forgetting, giving back pages.

use std::time::Duration;

use rusqlite::{Connection, Result, Transaction, TransactionBehavior, params};

use super::commit::{forget, write_count};
use super::fold::put;
use super::live::Live;
use super::read::{open_tally, period};
use super::{SqliteLedger, read_lock, schema, write_lock};
use crate::ledger::{Hour, Period, Shelf, Upkeep};
use crate::tally::Tally;

/// The rounds through all streams, a few at a time.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Rounds {
    /// What the round under way, or the last, works for.
    aim: Option<Aim>,
    /// Streams up to this one are done; `None` when the round is.
    done: Option<i64>,
    clock_filed: Option<f64>,
    /// How long the write-ahead log was when it could not be cut.
    uncut: u64,
}

/// Before which hours things are dropped or rolled.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Aim {
    drop: Hour,
    roll: Hour,
}

impl SqliteLedger {
    pub(super) fn keep(&mut self, now: f64) -> Result<Upkeep> {
        let time = self.clock.follow(now);
        let mut upkeep = Upkeep::default();
        // Two transactions: a reader may be one ahead of memory, and could not tell two steps in one apart.
        self.merge_closed(Hour::of(now), &mut upkeep)?;
        self.forget_and_roll(time, now, &mut upkeep)?;
        self.cut_log()?;
        Ok(upkeep)
    }

    /// Begins the write-ahead log anew when it has grown long. By itself it only does so in a moment without readers,
    /// and readers that come one after the other leave no such moment.
    fn cut_log(&mut self) -> Result<()> {
        let length = schema::log_length(&self.path);
        if length < LONG_LOG {
            self.rounds.uncut = 0;
        }
        if length < self.rounds.uncut + LONG_LOG {
            return Ok(());
        }
        // No reader begins while this is held, and those that have begun need nothing that it guards.
        let _live = write_lock(&self.live);
        self.db.busy_timeout(CUT_PATIENCE)?;
        let busy = self.db.query_row("PRAGMA wal_checkpoint(TRUNCATE)", [], |row| row.get(0));
        self.db.busy_timeout(schema::PATIENCE)?;
        // A long reader in another process (a backup) is none of our business: later, then.
        self.rounds.uncut = if busy? { length } else { 0 };
        Ok(())
    }

    /// Merges slots of hours other than the present one, to which nothing much will be added.
    fn merge_closed(&mut self, current: Hour, upkeep: &mut Upkeep) -> Result<()> {
        let closed = self.queue.iter().take(MERGES).take_while(|queued| queued.hour != current).count();
        if closed == 0 {
            return Ok(());
        }
        let tx = Transaction::new_unchecked(&self.db, TransactionBehavior::Immediate)?;
        self.merge(&tx, closed, None)?;
        tx.commit()?;
        self.merged(closed, None);
        upkeep.merged = closed as u64;
        upkeep.more |= closed == MERGES;
        Ok(())
    }

    fn forget_and_roll(&mut self, time: f64, now: f64, upkeep: &mut Upkeep) -> Result<()> {
        let tx = Transaction::new_unchecked(&self.db, TransactionBehavior::Immediate)?;
        let keys_by = time - self.options.keys_for;
        let keys = tx
            .prepare_cached("DELETE FROM keys WHERE since <= ?1 AND id < (SELECT min(id) FROM keys) + ?2")?
            .execute(params![keys_by, FORGETS as i64])?;
        let marks = tx
            .prepare_cached(
                "DELETE FROM marks WHERE key IN (SELECT key FROM marks WHERE since <= ?1 ORDER BY since LIMIT ?2)",
            )?
            .execute(params![time - self.options.series_for, FORGETS as i64])?;
        let joined = forget(&tx, true, keys_by, FORGETS)?;
        let expired = forget(&tx, false, time - self.options.open_for, FORGETS)?;
        let (singles, all_joined) = {
            let live = read_lock(&self.live);
            (live.singles.saturating_sub(expired), live.joined.saturating_sub(joined))
        };
        if joined + expired > 0 {
            write_count(&tx, "singles", singles)?;
            write_count(&tx, "joined", all_joined)?;
        }
        upkeep.expired = expired as u64;
        upkeep.more |= [keys, marks, joined, expired].contains(&FORGETS);
        tx.prepare_cached("DELETE FROM bad_lines WHERE hour < ?1")?
            .execute([Hour::of(time - self.options.keep_for).0])?;
        tx.prepare_cached("DELETE FROM records WHERE shelf = ?1 AND subject = '' AND number < ?2")?
            .execute(params![Shelf::Weeks.code(), Hour::of(time - self.options.keep_for).day()])?;

        let mut rounds = self.rounds;
        let file_clock = rounds.clock_filed.is_none_or(|filed| (time - filed).abs() >= CLOCK_STEP);
        if file_clock {
            tx.prepare_cached("INSERT OR REPLACE INTO meta VALUES ('clock', ?1)")?.execute([time])?;
            rounds.clock_filed = Some(time);
        }
        // What is still to be merged keeps log entries, and these keep hours from being rolled.
        let gone = match upkeep.merged as usize {
            MERGES => Vec::new(),
            _ => self.round(&tx, &mut rounds, time, now, upkeep)?,
        };
        give_back(&tx)?;
        tx.commit()?;

        self.rounds = rounds;
        self.marks = self.marks.saturating_sub(marks);
        let mut live = write_lock(&self.live);
        (live.singles, live.joined) = (singles, all_joined);
        live.forget(&gone);
        Ok(())
    }

    /// Goes on with the round through the streams; gives the streams of which nothing is left.
    fn round(
        &self,
        db: &Connection,
        rounds: &mut Rounds,
        time: f64,
        now: f64,
        upkeep: &mut Upkeep,
    ) -> Result<Vec<i64>> {
        let mut gone = Vec::new();
        if rounds.done.is_none() {
            let mut aim = Aim {
                drop: Hour::of(time - self.options.keep_for),
                roll: Hour::of(time - self.options.hours_for),
            };
            if let Some(day) = self.day_too_many(db, now)? {
                aim.drop = aim.drop.max(Hour::first_of(day.saturating_add(1)));
            }
            if rounds.aim == Some(aim) {
                return Ok(gone);
            }
            (rounds.aim, rounds.done) = (Some(aim), Some(i64::MIN));
        }
        let (Some(aim), Some(mut done)) = (rounds.aim, rounds.done) else { return Ok(gone) };
        // Entries that are still to be read again after a crash may not find their tallies rolled away.
        let needed = self.queue.front().map_or(i64::MAX, |queued| queued.first);
        let mut next = db.prepare_cached("SELECT id FROM streams WHERE id > ?1 ORDER BY id LIMIT ?2")?;
        let streams: Vec<i64> =
            next.query_map(params![done, STREAMS as i64], |row| row.get(0))?.collect::<Result<_>>()?;
        let (mut finished, mut work) = (streams.len() < STREAMS, 0);
        for stream in streams {
            let dropped = drop_before(db, stream, aim.drop, needed)?;
            drop_days(db, stream, aim.drop)?;
            let (rolled, complete) = roll(db, stream, aim.roll, needed, ROLLS.saturating_sub(work))?;
            upkeep.dropped += dropped;
            upkeep.rolled += rolled;
            work += (dropped + rolled) as usize;
            if !complete {
                finished = false;
                break;
            }
            if is_gone(db, &read_lock(&self.live), stream)? {
                db.prepare_cached("DELETE FROM streams WHERE id = ?1")?.execute([stream])?;
                gone.push(stream);
            }
            done = stream;
        }
        rounds.done = if finished { None } else { Some(done) };
        upkeep.more |= !finished;
        Ok(gone)
    }

    /// The oldest day, if the file is above its limit and that day is not today.
    fn day_too_many(&self, db: &Connection, now: f64) -> Result<Option<i32>> {
        let Some(most) = self.options.most_bytes else { return Ok(None) };
        let pragma = |name: &str| db.query_row(&format!("PRAGMA {name}"), [], |row| row.get::<_, i64>(0));
        let used = (pragma("page_count")? - pragma("freelist_count")?) * pragma("page_size")?;
        if used as u64 <= most {
            return Ok(None);
        }
        let oldest: Option<i64> = db.query_row(
            "SELECT min((SELECT start FROM tallies WHERE stream = streams.id ORDER BY start LIMIT 1)) FROM streams",
            [],
            |row| row.get(0),
        )?;
        Ok(oldest.map(|start| period(start, 1).hours().start.day()).filter(|day| *day < Hour::of(now).day()))
    }
}

/// Drops the tallies of a stream that end by then.
fn drop_before(db: &Connection, stream: i64, hour: Hour, needed: i64) -> Result<u64> {
    let dropped = db
        .prepare_cached(
            "DELETE FROM tallies WHERE stream = ?1 AND start < ?2 AND start + hours <= ?2 AND through < ?3",
        )?
        .execute(params![stream, hour.0, needed])?;
    db.prepare_cached("DELETE FROM damaged WHERE stream = ?1 AND start + hours <= ?2")?
        .execute(params![stream, hour.0])?;
    Ok(dropped as u64)
}

/// Drops what was advised on a stream on days before that hour's.
fn drop_days(db: &Connection, stream: i64, hour: Hour) -> Result<()> {
    db.prepare_cached(
        "DELETE FROM records WHERE shelf = ?1 AND subject = (SELECT name FROM streams WHERE id = ?2) AND number < ?3",
    )?
    .execute(params![Shelf::Days.code(), stream, hour.day()])?;
    Ok(())
}

/// Merges the hours of a stream's days that ended by then into those days, about `most` hours; how many, and whether
/// that was all.
fn roll(db: &Connection, stream: i64, by: Hour, needed: i64, most: usize) -> Result<(u64, bool)> {
    let mut first = db.prepare_cached(
        "SELECT start FROM tallies WHERE stream = ?1 AND hours = 1 AND start >= ?2 AND start < ?3
         AND through < ?4 ORDER BY start LIMIT 1",
    )?;
    let end = Hour::first_of(by.day());
    let (mut rolled, mut from) = (0, i64::from(i32::MIN));
    loop {
        let mut rows = first.query(params![stream, from, end.0, needed])?;
        let Some(start) = rows.next()?.map(|row| row.get(0)).transpose()? else { return Ok((rolled, true)) };
        drop(rows);
        if rolled as usize >= most {
            return Ok((rolled, false));
        }
        let Period::Hour(hour) = period(start, 1) else { return Ok((rolled, true)) };
        rolled += roll_day(db, stream, hour.day(), needed)?;
        from = i64::from(Hour::first_of(hour.day().saturating_add(1)).0);
    }
}

fn roll_day(db: &Connection, stream: i64, day: i32, needed: i64) -> Result<u64> {
    let (mut sum, mut last, mut whole) = (Tally::default(), i64::MIN, Vec::new());
    let hours = Period::Day(day).hours();
    {
        let mut read = db.prepare_cached(
            "SELECT start, hours, through, tally FROM tallies WHERE stream = ?1 AND start >= ?2 AND start < ?3",
        )?;
        let mut rows = read.query(params![stream, hours.start.0, hours.end.0])?;
        while let Some(row) = rows.next()? {
            let (start, length, through): (i64, i64, i64) = (row.get(0)?, row.get(1)?, row.get(2)?);
            match open_tally(stream, start, length, through, row.get_ref(3)?) {
                // What is broken stays where it is, to be named.
                Err(_) if length == 1 => {}
                // A broken day is not written over: its hours stay hours.
                Err(_) => return Ok(0),
                Ok(tally) if length == 24 || through < needed => {
                    sum.merge(&tally);
                    last = last.max(through);
                    if length == 1 {
                        whole.push(start);
                    }
                }
                Ok(_) => {}
            }
        }
    }
    if whole.is_empty() {
        return Ok(0);
    }
    let mut delete =
        db.prepare_cached("DELETE FROM tallies WHERE stream = ?1 AND start = ?2 AND hours = 1")?;
    for start in &whole {
        delete.execute(params![stream, start])?;
    }
    put(db, stream, hours.start, 24, last, &sum)?;
    Ok(whole.len() as u64)
}

/// Whether nothing is kept of a stream.
fn is_gone(db: &Connection, live: &Live, stream: i64) -> Result<bool> {
    let kept: bool = db
        .prepare_cached(
            "SELECT EXISTS (SELECT 1 FROM tallies WHERE stream = ?1)
             OR EXISTS (SELECT 1 FROM open_waits WHERE stream = ?1)
             OR EXISTS (SELECT 1 FROM damaged WHERE stream = ?1)",
        )?
        .query_row([stream], |row| row.get(0))?;
    Ok(!kept && live.slots(stream).is_empty())
}

/// Gives free pages back to the file system when they are many; a few are soon used again.
fn give_back(db: &Connection) -> Result<()> {
    let pragma = |name: &str| db.query_row(&format!("PRAGMA {name}"), [], |row| row.get::<_, i64>(0));
    let (free, pages) = (pragma("freelist_count")?, pragma("page_count")?);
    if free > SPARE_PAGES && free > pages / 4 {
        let mut give = db.prepare_cached(&format!("PRAGMA incremental_vacuum({GIVE_PAGES})"))?;
        let mut rows = give.query([])?;
        while rows.next()?.is_some() {}
    }
    Ok(())
}

// The size of a piece: each bound is some milliseconds of work.
const MERGES: usize = 32;
const FORGETS: usize = 512;
const STREAMS: usize = 64;
const ROLLS: usize = 24;
const SPARE_PAGES: i64 = 4096;
const GIVE_PAGES: i64 = 512;

/// When the write-ahead log is long, bytes; ordinarily it is a quarter of that.
const LONG_LOG: u64 = 16 << 20;

/// How long to wait for readers that have begun.
const CUT_PATIENCE: Duration = Duration::from_millis(50);

/// How far the clock runs before it is filed again, s.
const CLOCK_STEP: f64 = 300.0;
