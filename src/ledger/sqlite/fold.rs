//! Merging what is in the log into the tallies of its hours, and cutting the log behind it.

use rusqlite::{Connection, OptionalExtension, Result, params};

use super::live::Live;
use super::read::open_tally;
use super::seal::seal;
use super::{Queued, SqliteLedger, entry, read_lock, write_lock};
use crate::ledger::Hour;
use crate::tally::Tally;

impl SqliteLedger {
    /// How many slots to merge with a commit that adds `appended` bytes to the log.
    ///
    /// Enough that all slots have their turn while half the log's limit is written, which spreads the work evenly;
    /// and more while log or memory are above their limits. The second value is the credit left.
    pub(super) fn due(&self, appended: u64) -> (usize, f64) {
        let waiting = self.queue.len();
        let turn = self.options.log_bytes.max(2) as f64 / 2.0;
        let credit = self.credit + waiting as f64 * appended as f64 / turn;
        let mut due = (credit.floor() as usize).min(waiting);
        let credit = (credit - due as f64).clamp(0.0, 1.0);
        let live = read_lock(&self.live);
        let (mut log_bytes, mut live_bytes) = (live.log_bytes + appended, live.bytes);
        let mut log = self.log.iter().peekable();
        for i in 0..waiting {
            if i >= due && log_bytes <= self.options.log_bytes && live_bytes <= self.options.live_bytes {
                break;
            }
            due = due.max(i + 1);
            let Queued { stream, hour, .. } = self.queue[i];
            live_bytes -= live.slot(stream, hour).map_or(0, |slot| slot.footprint);
            let first = self.queue.get(i + 1).map_or(i64::MAX, |next| next.first);
            while let Some((_, bytes)) = log.next_if(|(sequence, _)| *sequence < first) {
                log_bytes = log_bytes.saturating_sub(*bytes);
            }
        }
        (due, credit)
    }

    /// Merges the first `due` slots into their hours, and cuts the log to what is still needed: the entries from
    /// the next slot's first one, and the newest, which holds the count.
    pub(super) fn merge(&self, db: &Connection, due: usize, appended: Option<i64>) -> Result<()> {
        let live = read_lock(&self.live);
        for queued in self.queue.iter().take(due) {
            merge_slot(db, &live, queued, self.sequence)?;
        }
        let newest = appended.unwrap_or(self.sequence);
        let needed = self.queue.get(due).map_or(newest, |next| next.first);
        if self.log.front().is_some_and(|(sequence, _)| *sequence < needed) {
            db.prepare_cached("DELETE FROM log WHERE sequence < ?1")?.execute([needed])?;
        }
        if appended.is_none() && due == self.queue.len() && due > 0 {
            // All is merged; the newest entry must not count again, only its number is kept.
            let empty = entry::Writer::new().finish(newest);
            db.prepare_cached("UPDATE log SET entry = ?2 WHERE sequence = ?1")?
                .execute(params![newest, empty])?;
        }
        Ok(())
    }

    /// Brings memory to where [`SqliteLedger::merge`] has brought the file.
    pub(super) fn merged(&mut self, due: usize, appended: Option<i64>) {
        let mut live = write_lock(&self.live);
        for Queued { stream, hour, .. } in self.queue.drain(..due) {
            live.remove(stream, hour);
        }
        let newest = appended.unwrap_or(self.sequence);
        let needed = self.queue.front().map_or(newest, |next| next.first);
        while let Some((sequence, bytes)) = self.log.front().copied()
            && sequence < needed
        {
            live.log_bytes = live.log_bytes.saturating_sub(bytes);
            self.log.pop_front();
        }
        if appended.is_none() && self.queue.is_empty() && due > 0 {
            live.log_bytes = 0;
            self.log.iter_mut().for_each(|(_, bytes)| *bytes = 0);
        }
    }

    /// Moves log entries that cannot be read out of the way.
    pub(super) fn set_aside(&mut self, broken: &[(i64, String)]) -> Result<()> {
        if broken.is_empty() {
            return Ok(());
        }
        let tx = self.db.transaction()?;
        for (sequence, flaw) in broken {
            tx.execute(
                "INSERT INTO damaged (sequence, flaw, bytes)
                 SELECT sequence, ?2, entry FROM log WHERE sequence = ?1",
                params![sequence, flaw],
            )?;
            let empty = entry::Writer::new().finish(*sequence);
            tx.execute("UPDATE log SET entry = ?2 WHERE sequence = ?1", params![sequence, empty])?;
        }
        tx.commit()
    }
}

fn merge_slot(db: &Connection, live: &Live, queued: &Queued, through: i64) -> Result<()> {
    let Queued { stream, hour, .. } = *queued;
    let Some(slot) = live.slot(stream, hour) else { return Ok(()) };
    let mut tally = take_whole(db, stream, i64::from(hour.0), 1)?.unwrap_or_default();
    tally.merge(&slot.tally);
    put(db, stream, hour, 1, through, &tally)
}

/// The tally stored there, if any. A broken one is moved out of the way, where it is still named and kept.
pub(super) fn take_whole(db: &Connection, stream: i64, start: i64, hours: i64) -> Result<Option<Tally>> {
    let mut statement = db.prepare_cached(
        "SELECT through, tally FROM tallies WHERE stream = ?1 AND start = ?2 AND hours = ?3",
    )?;
    let stored = statement
        .query_row([stream, start, hours], |row| {
            Ok(open_tally(stream, start, hours, row.get(0)?, row.get_ref(1)?))
        })
        .optional()?;
    match stored {
        None => Ok(None),
        Some(Ok(tally)) => Ok(Some(tally)),
        Some(Err(flaw)) => {
            db.execute(
                "INSERT INTO damaged (stream, start, hours, flaw, bytes)
                 SELECT stream, start, hours, ?4, tally FROM tallies
                 WHERE stream = ?1 AND start = ?2 AND hours = ?3",
                params![stream, start, hours, flaw],
            )?;
            Ok(None)
        }
    }
}

/// Stores a tally in its place.
pub(super) fn put(
    db: &Connection,
    stream: i64,
    start: Hour,
    hours: i64,
    through: i64,
    tally: &Tally,
) -> Result<()> {
    let mut bytes = Vec::new();
    tally.encode(&mut bytes);
    seal(&[stream, i64::from(start.0), hours, through], &mut bytes);
    db.prepare_cached(
        "INSERT INTO tallies (stream, start, hours, through, tally) VALUES (?1, ?2, ?3, ?4, ?5)
         ON CONFLICT (stream, start, hours) DO UPDATE SET through = excluded.through, tally = excluded.tally",
    )?
    .execute(params![stream, start.0, hours, through, bytes])?;
    Ok(())
}
