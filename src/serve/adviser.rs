//! Advice kept fresh: only where something changed, off the runtime, on a bounded share of the processors.

use std::collections::{HashMap, HashSet};
use std::io;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::sync::{Arc, Condvar, Mutex, MutexGuard, PoisonError};
use std::thread::{Builder, JoinHandle};
use std::time::{Duration, Instant};

use super::loss::Loss;
use super::metrics;
use super::road;
use super::shared::Shared;
use crate::advice::Advice;
use crate::advise::{Lenders, Survival, Terms};
use crate::ledger::{Digest, LedgerError, Reader};
use crate::tally::Days;

/// How often streams are looked through for advice that time alone has made stale: their window moves with the days.
const SWEEP: f64 = 3_600.0;
/// How long an adviser sleeps at most, so that it sees a stop.
const NAP: Duration = Duration::from_millis(200);
/// For how long what one stream may borrow from its siblings is taken as it was read.
const LENT_FOR: f64 = 600.0;

/// An advice with its age.
#[derive(Debug)]
pub(super) struct Fresh {
    pub(super) advice: Advice,
    /// Who is still waiting, at the ages that matter; nothing while no wait has ended.
    pub(super) survival: Option<Survival>,
    /// The same at ages close enough to draw, `[age in s, share]`.
    pub(super) road: Vec<[f64; 2]>,
    /// What the time in force loses a day, where that can be told.
    pub(super) loss: Option<Loss>,
    /// When it was made, Unix seconds.
    pub(super) made_at: f64,
    /// When what it says last changed, Unix seconds.
    pub(super) changed_at: f64,
    /// A digest of what it says, apart from when.
    pub(super) tag: u64,
}

/// Which streams await advice.
pub(super) struct Desk {
    waiting: Mutex<Waiting>,
    woken: Condvar,
    at_work: AtomicUsize,
    refresh: Duration,
}

#[derive(Default)]
struct Waiting {
    /// When each changed first since its last advice.
    changed: HashMap<Box<str>, Instant>,
    /// When each was advised last.
    advised: HashMap<Box<str>, Instant>,
    stopped: bool,
}

impl Desk {
    pub(super) fn new(refresh: f64) -> Desk {
        Desk {
            waiting: Mutex::default(),
            woken: Condvar::new(),
            at_work: AtomicUsize::new(0),
            refresh: Duration::try_from_secs_f64(refresh.clamp(0.0, 86_400.0)).unwrap_or_default(),
        }
    }

    fn lock(&self) -> MutexGuard<'_, Waiting> {
        self.waiting.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// These streams have changed.
    pub(super) fn changed(&self, streams: HashSet<&str>) {
        if streams.is_empty() {
            return;
        }
        let now = Instant::now();
        let mut waiting = self.lock();
        for stream in streams {
            if !waiting.changed.contains_key(stream) {
                waiting.changed.insert(stream.into(), now);
            }
        }
        drop(waiting);
        self.woken.notify_one();
    }

    /// These streams need advice at once, whenever they had it last: all at the start and under another policy, one when
    /// somebody has decided on it.
    pub(super) fn at_once(&self, streams: Vec<String>) {
        let now = Instant::now();
        let mut waiting = self.lock();
        for stream in streams {
            waiting.advised.remove(stream.as_str());
            waiting.changed.entry(stream.into()).or_insert(now);
        }
        drop(waiting);
        self.woken.notify_all();
    }

    pub(super) fn stop(&self) {
        self.lock().stopped = true;
        self.woken.notify_all();
    }

    /// How many streams await advice, and for how long the first of them has, s.
    pub(super) fn backlog(&self) -> (usize, f64) {
        let waiting = self.lock();
        let oldest = waiting.changed.values().map(|since| since.elapsed().as_secs_f64()).fold(0.0, f64::max);
        (waiting.changed.len(), oldest)
    }

    /// The next stream to advise: never advised before others, then the one that has waited longest; those that were
    /// advised a moment ago rest.
    fn next(&self) -> Option<Box<str>> {
        let mut waiting = self.lock();
        if waiting.stopped {
            return None;
        }
        let due = |stream: &str, since: Instant| match waiting.advised.get(stream) {
            None => Some((false, since)),
            Some(advised) => (advised.elapsed() >= self.refresh).then_some((true, since)),
        };
        let next = waiting
            .changed
            .iter()
            .filter_map(|(stream, since)| Some((due(stream, *since)?, stream)))
            .min()
            .map(|(_, stream)| stream.clone())?;
        waiting.changed.remove(&next);
        waiting.advised.insert(next.clone(), Instant::now());
        self.at_work.fetch_add(1, Ordering::SeqCst);
        Some(next)
    }

    /// An adviser is done with a stream. Where it found nothing to advise on, the next change is looked at at once.
    fn done(&self, stream: &str, advised: bool) {
        if !advised {
            self.lock().advised.remove(stream);
        }
        self.at_work.fetch_sub(1, Ordering::SeqCst);
        self.woken.notify_all();
    }

    fn rest(&self, time: Duration) -> bool {
        let waiting = self.lock();
        if waiting.stopped {
            return false;
        }
        let (waiting, _) = self.woken.wait_timeout(waiting, time).unwrap_or_else(PoisonError::into_inner);
        !waiting.stopped
    }

    /// Waits until a stream has its advice, or until the time (s) is over.
    pub(super) fn wait_for(&self, stream: &str, at_most: f64) {
        self.wait(at_most, |waiting| waiting.changed.contains_key(stream));
    }

    /// Waits until nothing that is due is left, or until the time (s) is over.
    pub(super) fn wait_until_idle(&self, at_most: f64) {
        self.wait(at_most, |waiting| {
            waiting.changed.keys().any(|stream| !waiting.advised.contains_key(stream))
        });
    }

    fn wait(&self, at_most: f64, is_due: impl Fn(&Waiting) -> bool) {
        let end = Duration::try_from_secs_f64(at_most).ok().and_then(|rest| Instant::now().checked_add(rest));
        loop {
            let waiting = self.lock();
            if !(is_due(&waiting) || self.at_work.load(Ordering::SeqCst) > 0)
                || end.is_some_and(|end| Instant::now() >= end)
            {
                return;
            }
            let _ = self.woken.wait_timeout(waiting, NAP);
        }
    }
}

/// Starts an adviser.
pub(super) fn start(
    number: usize,
    reader: Box<dyn Reader>,
    shared: Arc<Shared>,
) -> io::Result<JoinHandle<()>> {
    let share = shared.config.adviser_share();
    let mut adviser = Adviser { reader, shared, lent: HashMap::new(), swept: Instant::now() };
    Builder::new().name(format!("adviser-{number}")).spawn(move || {
        loop {
            let Some(stream) = adviser.shared.desk.next() else {
                if !adviser.shared.desk.rest(NAP) {
                    return;
                }
                if number == 0 {
                    adviser.sweep();
                }
                continue;
            };
            let began = Instant::now();
            let advised = adviser.advise(&stream).unwrap_or_else(|error| {
                let remedy = error.remedy();
                tracing::error!(%stream, %error, remedy, "no advice could be made; the last one stands");
                true
            });
            adviser.shared.desk.done(&stream, advised);
            // What it took, and as much rest as its share leaves the others.
            let rest = began.elapsed().mul_f64((1.0 - share) / share);
            let end = Instant::now() + rest;
            while Instant::now() < end {
                if adviser.shared.is_stopping() {
                    return;
                }
                std::thread::sleep((end - Instant::now()).min(NAP));
            }
        }
    })
}

struct Adviser {
    reader: Box<dyn Reader>,
    shared: Arc<Shared>,
    /// What the streams of a policy entry may borrow, and when it was read.
    lent: HashMap<usize, (Instant, Lenders)>,
    swept: Instant,
}

impl Adviser {
    /// Whether there was anything to advise on.
    fn advise(&mut self, stream: &str) -> Result<bool, LedgerError> {
        let shared = Arc::clone(&self.shared);
        let policy = shared.policy();
        let past = shared.past();
        let terms = Terms {
            policy: policy.as_deref(),
            newest: Some(shared.today()),
            seed: shared.config.seed,
            past: past.as_ref(),
        };
        let entry = terms.entry(stream);
        let days = shared.days(&*self.reader, stream, terms.opening(&entry))?;
        if days.days().is_empty() {
            return Ok(false);
        }
        let done: u64 = days.days().iter().map(|(_, tally)| tally.counts()[0]).sum();
        let lenders = if policy.is_some() && done < u64::from(entry.guard.evidence) {
            self.lenders(&terms, stream, entry.number)?
        } else {
            Lenders::default()
        };
        let study = terms.study_among(stream, &days, None, &lenders);
        let survival = study.survival(&metrics::ladder());
        let road = study.survival(&road::ages()).map(|fine| road::trimmed(&fine)).unwrap_or_default();
        let advice = study.into_advice();
        let now = shared.now();
        let tag = tag(&advice);
        let before = shared.advice(stream).filter(|before| before.tag == tag);
        let changed_at = before.map_or(now, |before| before.changed_at);
        let loss = Loss::of(&advice, entry.worth.map(|worth| worth.aim), entry.now, &road);
        shared.advised(Fresh { advice, survival, road, loss, made_at: now, changed_at, tag });
        Ok(true)
    }

    /// What a thin stream may borrow: from those of its entry that have the most waits, as their advice tells.
    fn lenders(&mut self, terms: &Terms<'_>, stream: &str, entry: usize) -> Result<Lenders, LedgerError> {
        let old = self.lent.get(&entry).is_none_or(|(read, _)| read.elapsed().as_secs_f64() > LENT_FOR);
        if old {
            let mut members: Vec<(u64, String)> = self
                .shared
                .all_advice()
                .iter()
                .filter(|fresh| terms.entry(&fresh.advice.stream).number == entry)
                .map(|fresh| (fresh.advice.evidence.done, fresh.advice.stream.clone()))
                .collect();
            members.sort_unstable_by(|a, b| b.cmp(a));
            members.truncate(Lenders::MOST);
            if members.iter().all(|(_, name)| name != stream) {
                members.push((0, stream.to_owned()));
            }
            let opening = terms.opening(&terms.entry(stream));
            let days = members
                .iter()
                .map(|(_, name)| self.shared.days(&*self.reader, name, opening))
                .collect::<Result<Vec<Days>, _>>()?;
            let streams: Vec<(&str, &Days)> =
                members.iter().map(|(_, name)| name.as_str()).zip(&days).collect();
            self.lent.insert(entry, (Instant::now(), terms.lenders(&streams)));
        }
        Ok(self.lent.get(&entry).map(|(_, lenders)| lenders.clone()).unwrap_or_default())
    }

    /// Puts on the desk what has not been advised for long.
    fn sweep(&mut self) {
        if self.swept.elapsed().as_secs_f64() < SWEEP {
            return;
        }
        self.swept = Instant::now();
        self.lent.clear();
        let now = self.shared.now();
        let stale = self.shared.all_advice();
        let stale = stale.iter().filter(|fresh| (now - fresh.made_at).abs() >= SWEEP);
        self.shared.desk.changed(stale.map(|fresh| fresh.advice.stream.as_str()).collect());
    }
}

/// A digest of what an advice says.
fn tag(advice: &Advice) -> u64 {
    let Digest([a, b, c, d, e, f, g, h, ..]) = Digest::of(&serde_json::to_vec(advice).unwrap_or_default());
    u64::from_le_bytes([a, b, c, d, e, f, g, h])
}
