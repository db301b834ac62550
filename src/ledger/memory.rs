//! A ledger in memory: for one-shot commands, and as the plain model that the one on disk is tested against.

use std::collections::{BTreeMap, HashMap, HashSet, VecDeque};
use std::convert::Infallible;
use std::ops::Range;
use std::sync::{Arc, PoisonError, RwLock, RwLockReadGuard, RwLockWriteGuard};

use super::batch::{EventKey, Hours};
use super::clock::Clock;
use super::grow::{self, Known};
use super::open::{self, Filed, State};
use super::{
    Batch, BatchError, Damage, Digest, Entry, Extent, Hour, Ledger, LedgerError, OpenWait, Options, Period,
    Position, Reader, Receipt, Record, Records, Shelf, Upkeep,
};
use crate::running::{Mark, SeriesKey};
use crate::tally::{self, Tally};

/// A ledger in memory. Cloning gives another handle on the same one.
#[derive(Clone, Debug)]
pub struct MemoryLedger {
    held: Arc<RwLock<Held>>,
}

#[derive(Debug, Default)]
struct Held {
    options: Options,
    clock: Clock,
    streams: BTreeMap<Box<str>, Stream>,
    keys: HashMap<Box<str>, (Digest, f64)>,
    /// Keys in the order of their filing; one filed again stands here twice.
    key_order: VecDeque<(f64, Box<str>)>,
    events: HashMap<EventKey, Filed>,
    joined_order: VecDeque<(f64, EventKey)>,
    /// With the time of filing.
    marks: HashMap<SeriesKey, (Mark, f64)>,
    singles: usize,
    joined: usize,
    bad_lines: BTreeMap<Hour, BTreeMap<Box<str>, u64>>,
    positions: BTreeMap<Box<str>, Position>,
    records: BTreeMap<(Shelf, Box<str>, i64), Box<str>>,
}

/// Tallies by their first hour and period.
#[derive(Debug, Default)]
struct Stream(BTreeMap<(Hour, Period), Tally>);

impl MemoryLedger {
    /// An empty ledger.
    pub fn new(options: Options) -> MemoryLedger {
        MemoryLedger { held: Arc::new(RwLock::new(Held { options, ..Held::default() })) }
    }

    // No code below panics while it holds the lock; were it so, what is there is still the best there is.
    fn read(&self) -> RwLockReadGuard<'_, Held> {
        self.held.read().unwrap_or_else(PoisonError::into_inner)
    }

    fn write(&self) -> RwLockWriteGuard<'_, Held> {
        self.held.write().unwrap_or_else(PoisonError::into_inner)
    }
}

impl Ledger for MemoryLedger {
    fn commit(&mut self, batches: &[Batch], now: f64) -> Result<Receipt, LedgerError> {
        let held = &mut *self.write();
        let time = held.clock.follow(now);
        Ok(Receipt { batches: batches.iter().map(|batch| held.file(batch, time, now)).collect() })
    }

    fn maintain(&mut self, now: f64) -> Result<Upkeep, LedgerError> {
        let held = &mut *self.write();
        let time = held.clock.follow(now);
        Ok(held.maintain(time))
    }

    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(self.clone()))
    }
}

impl Held {
    fn file(&mut self, batch: &Batch, time: f64, now: f64) -> Result<Entry, BatchError> {
        if let Some((key, digest)) = &batch.key
            && let Some((known, since)) = self.keys.get(key)
            && *since > time - self.options.keys_for
        {
            return if known == digest {
                Ok(Entry { repeated: true, ..Entry::default() })
            } else {
                Err(BatchError::KeyReused { key: key.to_string() })
            };
        }
        let mut noted: HashMap<(Shelf, &str, i64), &str> = HashMap::new();
        for record in &batch.records {
            let (shelf, subject, number) = record.place();
            let held = self.records.get(&(shelf, subject.into(), number)).map(|text| &**text);
            let known = noted.insert(record.place(), &record.text).or(held);
            if shelf.is_final() && known.is_some_and(|known| *known != *record.text) {
                return Err(BatchError::Taken { subject: subject.to_owned(), number });
            }
        }
        let new: HashSet<&str> = batch.streams().filter(|name| !self.streams.contains_key(*name)).collect();
        if !new.is_empty() && self.streams.len() + new.len() > self.options.most_streams {
            return Err(BatchError::TooManyStreams { limit: self.options.most_streams });
        }
        let find = |key: &EventKey| Ok::<_, Infallible>(self.events.get(key).copied());
        let Ok(outcome) = open::settle(&batch.events, time, find);
        if outcome.singles > 0 && self.singles + outcome.singles as usize > self.options.most_open {
            return Err(BatchError::TooManyOpen { limit: self.options.most_open });
        }
        let find = |key: &SeriesKey| {
            Ok::<_, Infallible>(self.marks.get(key).map(|(mark, _)| Known::Mark(mark.clone())))
        };
        let Ok(grown) = grow::settle(&batch.running, now, find);
        if grown.new > 0 && self.marks.len() + grown.new > self.options.most_series {
            return Err(BatchError::TooManySeries { limit: self.options.most_series });
        }
        // Accepted; nothing below can fail.
        for name in new {
            self.streams.insert(name.into(), Stream::default());
        }
        for (name, hours) in &batch.streams {
            let stream = self.streams.entry(name.clone()).or_default();
            for (hour, tally) in &hours.0 {
                stream.at(Period::Hour(*hour)).merge(tally);
            }
        }
        for (name, hours) in &grown.streams {
            let stream = self.streams.entry((*name).into()).or_default();
            for (hour, tally) in &hours.0 {
                stream.at(Period::Hour(*hour)).merge(tally);
            }
        }
        self.marks.extend(grown.marks.into_iter().map(|(key, mark)| (key, (mark, time))));
        for (name, wait) in &outcome.waits {
            let mut hours = Hours::default();
            tally::file(wait, wait.at().unwrap_or(now), &mut hours);
            let stream = self.streams.entry(name.clone()).or_default();
            for (hour, tally) in &hours.0 {
                stream.at(Period::Hour(*hour)).merge(tally);
            }
        }
        self.singles = self.singles.saturating_add_signed(outcome.singles as isize);
        self.joined = self.joined.saturating_add_signed(outcome.joined as isize);
        for (key, filed) in outcome.changed {
            if !filed.state.is_single() {
                self.joined_order.push_back((filed.since, key.clone()));
            }
            self.events.insert(key, filed);
        }
        while self.joined > self.options.most_open && self.forget_joined(f64::INFINITY) {}
        for (reason, lines) in &batch.bad_lines {
            let sum = self.bad_lines.entry(Hour::of(now)).or_default().entry(reason.clone()).or_default();
            *sum = sum.saturating_add(*lines);
        }
        self.positions.extend(batch.positions.iter().map(|(name, position)| (name.clone(), *position)));
        for Record { shelf, subject, number, text } in &batch.records {
            self.records.insert((*shelf, subject.clone(), *number), text.clone());
        }
        if let Some((key, digest)) = &batch.key {
            self.keys.insert(key.clone(), (*digest, time));
            self.key_order.push_back((time, key.clone()));
        }
        while self.keys.len() > self.options.most_keys && self.forget_key(f64::INFINITY) {}
        let (joined, again, refused) = (outcome.waits.len() as u64, outcome.again, outcome.refused);
        Ok(Entry { repeated: false, joined, again, refused, grown: grown.waits, resets: grown.resets })
    }

    /// Forgets the oldest key if it was filed by then; whether there was one to look at.
    fn forget_key(&mut self, by: f64) -> bool {
        let Some((since, key)) = pop_by(&mut self.key_order, by) else { return false };
        if self.keys.get(&key).is_some_and(|(_, filed)| *filed == since) {
            self.keys.remove(&key);
        }
        true
    }

    fn forget_joined(&mut self, by: f64) -> bool {
        let Some((since, key)) = pop_by(&mut self.joined_order, by) else { return false };
        if self.events.get(&key).is_some_and(|filed| filed.since == since && !filed.state.is_single()) {
            self.events.remove(&key);
            self.joined = self.joined.saturating_sub(1);
        }
        true
    }

    fn maintain(&mut self, time: f64) -> Upkeep {
        let mut upkeep = Upkeep::default();
        let Options { hours_for, keep_for, keys_for, open_for, most_bytes, .. } = self.options;
        while self.forget_key(time - keys_for) {}
        while self.forget_joined(time - keys_for) {}
        self.events.retain(|_, filed| {
            let keep = !filed.state.is_single() || filed.since > time - open_for;
            upkeep.expired += u64::from(!keep);
            keep
        });
        self.singles = self.singles.saturating_sub(upkeep.expired as usize);
        self.marks.retain(|_, (_, since)| *since > time - self.options.series_for);
        self.bad_lines = self.bad_lines.split_off(&Hour::of(time - keep_for));
        let oldest = i64::from(Hour::of(time - keep_for).day());
        self.records.retain(|(shelf, _, number), _| shelf.is_final() || *number >= oldest);
        for stream in self.streams.values_mut() {
            upkeep.dropped += stream.drop_before(Hour::of(time - keep_for));
            upkeep.rolled += stream.roll(Hour::of(time - hours_for));
        }
        while most_bytes.is_some_and(|most| self.bytes() > most) {
            let oldest = self.streams.values().filter_map(|s| s.0.keys().next()).min();
            let Some(day) = oldest.map(|(hour, _)| hour.day()) else { break };
            for stream in self.streams.values_mut() {
                upkeep.dropped += stream.drop_before(Hour::first_of(day.saturating_add(1)));
            }
        }
        let awaited: HashSet<&str> = self.events.keys().map(|key| &*key.stream).collect();
        self.streams.retain(|name, stream| !stream.0.is_empty() || awaited.contains(&**name));
        upkeep
    }

    fn bytes(&self) -> u64 {
        self.streams.values().flat_map(|s| s.0.values()).map(|tally| tally.footprint() as u64).sum()
    }
}

/// The first of a queue, if it was filed by then.
fn pop_by<T>(queue: &mut VecDeque<(f64, T)>, by: f64) -> Option<(f64, T)> {
    if queue.front()?.0 <= by { queue.pop_front() } else { None }
}

impl Stream {
    fn at(&mut self, period: Period) -> &mut Tally {
        self.0.entry((period.hours().start, period)).or_default()
    }

    /// Drops what ends before the hour begins.
    fn drop_before(&mut self, hour: Hour) -> u64 {
        let before = self.0.len();
        self.0.retain(|(_, period), _| period.hours().end > hour);
        (before - self.0.len()) as u64
    }

    /// Merges the hours of days that ended before the hour began.
    fn roll(&mut self, hour: Hour) -> u64 {
        let is_old = |period: &Period| match period {
            Period::Hour(own) => Period::Day(own.day()).hours().end <= hour,
            Period::Day(_) => false,
        };
        let old: Vec<(Hour, Period)> = self.0.keys().filter(|(_, period)| is_old(period)).copied().collect();
        for key in &old {
            if let Some(tally) = self.0.remove(key) {
                self.at(Period::Day(key.0.day())).merge(&tally);
            }
        }
        old.len() as u64
    }
}

impl Reader for MemoryLedger {
    fn streams(&self) -> Result<Vec<String>, LedgerError> {
        Ok(self.read().streams.keys().map(|name| name.to_string()).collect())
    }

    fn visit(
        &self,
        stream: &str,
        hours: Range<Hour>,
        take: &mut dyn FnMut(Period, Tally),
    ) -> Result<Vec<Damage>, LedgerError> {
        if let Some(stream) = self.read().streams.get(stream) {
            for ((_, period), tally) in stream.0.iter().filter(|((_, period), _)| period.overlaps(&hours)) {
                take(*period, tally.clone());
            }
        }
        Ok(Vec::new())
    }

    fn open_waits(&self, stream: Option<&str>, most: usize) -> Result<Vec<OpenWait>, LedgerError> {
        let held = self.read();
        let mut open: Vec<(f64, f64, &EventKey)> = held
            .events
            .iter()
            .filter(|(key, _)| stream.is_none_or(|stream| *key.stream == *stream))
            .filter_map(|(key, filed)| match filed.state {
                State::Open { started, entered } => Some((started, entered, key)),
                _ => None,
            })
            .collect();
        open.sort_by(|a, b| a.0.total_cmp(&b.0).then_with(|| a.2.cmp(b.2)));
        open.truncate(most);
        let wait = |(started, entered, key): (f64, f64, &EventKey)| OpenWait {
            stream: key.stream.to_string(),
            id: key.id.to_string(),
            attempt: key.attempt,
            started,
            entered,
        };
        Ok(open.into_iter().map(wait).collect())
    }

    fn bad_lines(&self, hours: Range<Hour>) -> Result<BTreeMap<String, u64>, LedgerError> {
        let mut sums = BTreeMap::<String, u64>::new();
        if hours.is_empty() {
            return Ok(sums);
        }
        for (reason, lines) in self.read().bad_lines.range(hours).flat_map(|(_, reasons)| reasons) {
            let sum = sums.entry(reason.to_string()).or_default();
            *sum = sum.saturating_add(*lines);
        }
        Ok(sums)
    }

    fn position(&self, name: &str) -> Result<Option<Position>, LedgerError> {
        Ok(self.read().positions.get(name).copied())
    }

    fn records(&self, shelf: Shelf, subject: Option<&str>) -> Result<Records, LedgerError> {
        let held = self.read();
        let all = held
            .records
            .iter()
            .filter(|((on, about, _), _)| *on == shelf && subject.is_none_or(|subject| **about == *subject));
        let records = all.map(|((shelf, subject, number), text)| Record {
            shelf: *shelf,
            subject: subject.clone(),
            number: *number,
            text: text.clone(),
        });
        Ok(Records { records: records.collect(), damage: Vec::new() })
    }

    fn extent(&self) -> Result<Extent, LedgerError> {
        let held = self.read();
        Ok(Extent {
            streams: held.streams.len(),
            open: held.singles,
            keys: held.keys.len(),
            live_bytes: held.bytes() as usize,
            ..Extent::default()
        })
    }
}
