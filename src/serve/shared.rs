//! What the daemon's threads have in common.

use std::collections::BTreeMap;
use std::sync::atomic::{AtomicBool, AtomicU64, AtomicUsize, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError, RwLock};

use super::adviser::{Desk, Fresh};
use super::config::Config;
use super::keeper::{self, Counter, Queue};
use super::metrics::Metrics;
use super::reload::Standing;
use super::sessions::Sessions;
use super::settling::Settling;
use super::studies::Studies;
use crate::advice::AdviceSet;
use crate::advise::{Past, Terms};
use crate::intake::{BadLine, Report};
use crate::ledger::{Hour, LedgerError, Reader, SqliteReader};
use crate::policy::Policy;
use crate::say;
use crate::settle::Settled;
use crate::tally::{Day, Days};

/// Examples of bad lines that are kept, one for each reason.
const EXAMPLES: usize = 64;

pub(super) struct Shared {
    pub(super) config: Config,
    pub(super) metrics: Metrics,
    pub(super) desk: Desk,
    pub(super) counter: Counter,
    /// Whether a wait is open, so that whole waits with an id may close one.
    pub(super) any_open: AtomicBool,
    /// Bytes of bodies in memory.
    pub(super) bodies: AtomicUsize,
    /// Browsers that have shown the token.
    pub(super) sessions: Sessions,
    /// The curves that were asked for last.
    pub(super) studies: Studies,
    /// Pages that are kept up to date now.
    pub(super) live: AtomicUsize,
    /// Becomes true when no more requests are taken, so that answers without an end find one.
    closing: tokio::sync::watch::Sender<bool>,
    policy: RwLock<Standing>,
    /// What was settled.
    pub(super) settling: Settling,
    advice: RwLock<BTreeMap<Arc<str>, Arc<Fresh>>>,
    reader: Mutex<SqliteReader>,
    trouble: RwLock<Option<Arc<LedgerError>>>,
    examples: Mutex<BTreeMap<(&'static str, &'static str), BadLine>>,
    /// When something was filed last, Unix seconds as bits.
    filed: AtomicU64,
    stopping: AtomicBool,
    /// Whether the last batch has been handed in.
    all_handed_in: AtomicBool,
}

// No code panics while it holds one of these locks; were it so, what is there is still the best there is.
fn locked<T>(mutex: &Mutex<T>) -> MutexGuard<'_, T> {
    mutex.lock().unwrap_or_else(PoisonError::into_inner)
}

impl Shared {
    pub(super) fn new(
        config: Config,
        policy: Standing,
        reader: SqliteReader,
        settling: Settling,
    ) -> Result<(Arc<Shared>, Queue), prometheus::Error> {
        let (counter, queue) = keeper::queue(config.limits.queue);
        let shared = Shared {
            metrics: Metrics::new()?,
            desk: Desk::new(config.refresh),
            counter,
            any_open: AtomicBool::new(false),
            bodies: AtomicUsize::new(0),
            sessions: Sessions::default(),
            studies: Studies::default(),
            live: AtomicUsize::new(0),
            closing: tokio::sync::watch::Sender::new(false),
            policy: RwLock::new(policy),
            settling,
            advice: RwLock::default(),
            reader: Mutex::new(reader),
            trouble: RwLock::default(),
            examples: Mutex::default(),
            filed: AtomicU64::new(0),
            stopping: AtomicBool::new(false),
            all_handed_in: AtomicBool::new(false),
            config,
        };
        Ok((Arc::new(shared), queue))
    }

    /// Unix seconds.
    pub(super) fn now(&self) -> f64 {
        (self.config.clock)()
    }

    pub(super) fn is_stopping(&self) -> bool {
        self.stopping.load(Ordering::SeqCst)
    }

    /// Ends the answers that would go on for ever.
    pub(super) fn close(&self) {
        self.closing.send_replace(true);
    }

    /// Until [`Shared::close`].
    pub(super) async fn closed(&self) {
        // The sender lives as long as this.
        let _ = self.closing.subscribe().wait_for(|closing| *closing).await;
    }

    pub(super) fn stop(&self) {
        self.stopping.store(true, Ordering::SeqCst);
        self.desk.stop();
    }

    /// Whether the keeper may end when it has filed what it has.
    pub(super) fn is_all_handed_in(&self) -> bool {
        self.all_handed_in.load(Ordering::SeqCst)
    }

    /// Nobody but the keeper is left.
    pub(super) fn all_handed_in(&self) {
        self.all_handed_in.store(true, Ordering::SeqCst);
    }

    /// The policy in force and how it stands.
    pub(super) fn standing(&self) -> Standing {
        self.policy.read().unwrap_or_else(PoisonError::into_inner).clone()
    }

    /// The policy in force.
    pub(super) fn policy(&self) -> Option<Arc<Policy>> {
        self.standing().policy
    }

    /// What was settled.
    pub(super) fn settled(&self) -> Arc<Settled> {
        self.settling.book().settled
    }

    /// The same as an advice takes it; all advice starts from it.
    pub(super) fn past(&self) -> Option<Past> {
        Some(self.settled().past(self.now()))
    }

    /// Takes another policy, or notes what is wrong with it.
    pub(super) fn set_standing(&self, standing: Standing) {
        self.metrics.policy_sound.set(i64::from(standing.refused.is_none()));
        self.studies.forget();
        *self.policy.write().unwrap_or_else(PoisonError::into_inner) = standing;
    }

    /// What keeps the ledger from taking batches, if something does.
    pub(super) fn trouble(&self, trouble: Option<Arc<LedgerError>>) {
        *self.trouble.write().unwrap_or_else(PoisonError::into_inner) = trouble;
    }

    pub(super) fn in_trouble(&self) -> Option<Arc<LedgerError>> {
        self.trouble.read().unwrap_or_else(PoisonError::into_inner).clone()
    }

    /// Notes when something was filed.
    pub(super) fn filed(&self, now: f64) {
        self.filed.store(now.to_bits(), Ordering::Relaxed);
        self.metrics.last_filed.set(now);
    }

    /// When something was filed last, Unix seconds.
    pub(super) fn last_filed(&self) -> Option<f64> {
        Some(f64::from_bits(self.filed.load(Ordering::Relaxed))).filter(|at| *at > 0.0)
    }

    /// Counts what was read, whatever becomes of it.
    pub(super) fn note(&self, report: &Report) {
        self.metrics.left_out_of_telemetry.inc_by(report.left_out.not_waits);
        self.metrics.lines.inc_by(report.lines);
        for bad in &report.bad.by_reason {
            self.metrics.bad(bad.field, bad.reason, bad.lines);
        }
        self.bad_lines(&report.bad.examples);
    }

    /// Keeps one example for each reason.
    fn bad_lines(&self, examples: &[BadLine]) {
        let mut kept = locked(&self.examples);
        for bad in examples {
            let key = (bad.field, bad.kind);
            if kept.len() < EXAMPLES || kept.contains_key(&key) {
                kept.insert(key, bad.clone());
            }
        }
    }

    /// The examples kept.
    pub(super) fn examples(&self) -> Vec<BadLine> {
        locked(&self.examples).values().cloned().collect()
    }

    /// Asks the ledger. Blocks; not for the runtime's threads.
    pub(super) fn ask<T>(
        &self,
        question: impl FnOnce(&SqliteReader) -> Result<T, LedgerError>,
    ) -> Result<T, LedgerError> {
        question(&locked(&self.reader))
    }

    /// The streams of the ledger; none if it cannot be read.
    pub(super) fn streams(&self) -> Vec<String> {
        self.ask(|reader| reader.streams()).unwrap_or_default()
    }

    /// A stream's waits by day, those that are open among them as last seen now; from a day on.
    pub(super) fn days(&self, reader: &dyn Reader, stream: &str, from: i32) -> Result<Days, LedgerError> {
        let mut days = Days::default();
        let hours = Hour::first_of(from)..Hour(i32::MAX);
        let damage = reader.visit(stream, hours, &mut |period, tally| {
            days.merge_day(Day::Number(period.hours().start.day()), &tally);
        })?;
        for damage in damage {
            tracing::error!(%damage, "part of the ledger is broken; advice is given without it");
        }
        let now = self.now();
        for open in reader.open_waits(Some(stream), self.config.ledger.most_open)? {
            open.seen(now).iter().for_each(|wait| days.add(wait));
        }
        Ok(days)
    }

    /// The day up to which windows reach.
    pub(super) fn today(&self) -> i32 {
        Hour::of(self.now()).day()
    }

    /// Files an advice.
    pub(super) fn advised(&self, fresh: Fresh) {
        let mut all = self.advice.write().unwrap_or_else(PoisonError::into_inner);
        all.insert(fresh.advice.stream.as_str().into(), Arc::new(fresh));
    }

    /// The advice on one stream.
    pub(super) fn advice(&self, stream: &str) -> Option<Arc<Fresh>> {
        self.advice.read().unwrap_or_else(PoisonError::into_inner).get(stream).cloned()
    }

    /// The advice on all streams, in the order of their names.
    pub(super) fn all_advice(&self) -> Vec<Arc<Fresh>> {
        self.advice.read().unwrap_or_else(PoisonError::into_inner).values().cloned().collect()
    }

    /// All advice as one document.
    pub(super) fn advice_set(&self) -> AdviceSet {
        let all = self.all_advice();
        self.set_of(&all)
    }

    /// Some advice as one document, with the cautions that only the chain of calls shows.
    pub(super) fn set_of(&self, some: &[Arc<Fresh>]) -> AdviceSet {
        let policy = self.policy();
        let past = self.past();
        let terms = Terms {
            policy: policy.as_deref(),
            newest: Some(self.today()),
            seed: self.config.seed,
            past: past.as_ref(),
        };
        let newest = some.iter().map(|fresh| fresh.made_at).reduce(f64::max);
        terms.set(some.iter().map(|fresh| fresh.advice.clone()).collect(), newest.and_then(say::time))
    }
}
