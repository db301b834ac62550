//! What was settled, as the daemon keeps it. The ledger's record leads: a decision is taken when it is on disk there. The
//! plain file (named by `--settled`, else beside the ledger) is its copy for people and version control, and people may add
//! to it: what either has and the other has not, it gets, once. Neither ever loses a decision; one is taken back by
//! another. A file with a mistake is left alone until it is mended, and how it is says so.

use std::collections::{BTreeSet, HashMap};
use std::fs;
use std::path::PathBuf;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError, RwLock};
use std::time::SystemTime;

use jiff::{SignedDuration, Timestamp};

use super::keeper::Refusal;
use super::shared::Shared;
use crate::advise::Terms;
use crate::ledger::{Batch, BatchError, Damage, LedgerError, Reader, Record, Shelf};
use crate::settle::{self, Decide, Refused, SettledError, Settlement, decide, insert};
use crate::settle::{Settled, one};
use crate::whole::{self, FileError};

/// What stands, and what is wrong with the file.
#[derive(Clone, Debug, Default)]
pub(super) struct Book {
    pub(super) settled: Arc<Settled>,
    /// Why the file as it lies there is not taken, or could not be written: what, and what to do.
    pub(super) trouble: Option<(Arc<str>, &'static str)>,
}

/// The decisions, and whose turn it is to make one.
pub(super) struct Settling {
    book: RwLock<Book>,
    turn: Mutex<Turn>,
}

#[derive(Default)]
struct Turn {
    /// The state in which the file was read or written last.
    seen: Seen,
    /// The file was looked at, and lacks nothing.
    in_step: bool,
    /// The number of the next decision in the ledger, by stream.
    next: HashMap<String, i64>,
}

type Seen = Option<(SystemTime, u64)>;

/// Why a decision was not taken.
#[derive(Debug, thiserror::Error)]
pub(super) enum Unsettled {
    #[error("{stream} was decided on meanwhile: {words}")]
    Meanwhile { stream: String, words: String },
    #[error(transparent)]
    Refused(#[from] Refused),
    #[error(transparent)]
    Ledger(#[from] Refusal),
}

#[derive(Debug, thiserror::Error)]
enum FileTrouble {
    #[error(transparent)]
    File(#[from] FileError),
    #[error(transparent)]
    Mistake(#[from] SettledError),
}

impl FileTrouble {
    fn remedy(&self) -> &'static str {
        match self {
            FileTrouble::File(_) => {
                "let this user read and write it; what is decided here is in the ledger meanwhile"
            }
            FileTrouble::Mistake(_) => {
                "mend that line; the file is read again when it changes, and nothing in it is lost"
            }
        }
    }
}

/// A person's word on a stream.
#[derive(Clone, Debug)]
pub(super) struct Word<'a> {
    pub(super) stream: &'a str,
    pub(super) what: Decide,
    pub(super) by: &'a str,
    pub(super) why: &'a str,
    /// How many decisions on the stream whoever speaks has seen; one that came since refuses this one.
    pub(super) seen: Option<usize>,
}

impl Settling {
    /// Reads what the ledger holds.
    pub(super) fn open(ledger: &dyn Reader) -> Result<Settling, LedgerError> {
        let found = ledger.records(Shelf::Decisions, None)?;
        let (mut settled, mut turn) = (Settled::default(), Turn::default());
        for Record { subject, number, text, .. } in found.records {
            match settle::parse(text.as_bytes(), &subject) {
                Ok(read) => read.streams().for_each(|(stream, history)| {
                    history.iter().for_each(|one| settled.add(stream, one.clone()));
                }),
                Err(error) => tracing::error!(%error, number, "a decision in the ledger cannot be read"),
            }
            let next = turn.next.entry(subject.into()).or_default();
            *next = (*next).max(number + 1);
        }
        for damage in found.damage {
            tracing::error!(%damage, "a decision in the ledger is broken; the file of them may have it still");
            if let Damage::Record { subject, number, .. } = damage {
                let next = turn.next.entry(subject).or_default();
                *next = (*next).max(number + 1);
            }
        }
        let book = Book { settled: Arc::new(settled), trouble: None };
        Ok(Settling { book: RwLock::new(book), turn: Mutex::new(turn) })
    }

    /// What stands.
    pub(super) fn book(&self) -> Book {
        self.book.read().unwrap_or_else(PoisonError::into_inner).clone()
    }

    fn turn(&self) -> MutexGuard<'_, Turn> {
        self.turn.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn set_trouble(&self, trouble: Option<FileTrouble>) {
        let mut book = self.book.write().unwrap_or_else(PoisonError::into_inner);
        let told = trouble.map(|trouble| (Arc::from(trouble.to_string()), trouble.remedy()));
        if let Some((what, _)) = told.as_ref().filter(|_| told != book.trouble) {
            tracing::error!(%what, "the file of what was settled is not in step with the ledger");
        }
        book.trouble = told;
    }

    fn set_settled(&self, settled: Settled) {
        self.book.write().unwrap_or_else(PoisonError::into_inner).settled = Arc::new(settled);
    }
}

/// The file of a daemon's decisions.
pub(super) fn path(shared: &Shared) -> PathBuf {
    let config = &shared.config;
    config.weekly.settled.clone().unwrap_or_else(|| config.data.join(settle::FILE))
}

/// Brings file and ledger to the same decisions, where the file has changed or lacks some. Blocks.
pub(super) fn keep_in_step(shared: &Shared) {
    let mut turn = shared.settling.turn();
    step(shared, &mut turn);
}

fn step(shared: &Shared, turn: &mut Turn) {
    let path = path(shared);
    let seen = || fs::metadata(&path).ok().and_then(|it| Some((it.modified().ok()?, it.len())));
    let now = seen();
    if turn.in_step && now == turn.seen {
        return;
    }
    let outcome = (|| {
        let name = path.display().to_string();
        let file = settle::parse(&whole::read(&path)?, &name)?;
        let known = shared.settling.book().settled;
        let new = known.missing(&file);
        if !new.is_empty() {
            let streams: BTreeSet<&str> = new.iter().map(|(stream, _)| *stream).collect();
            tracing::info!(
                decisions = new.len(),
                ?streams,
                "decisions from the file are taken into the ledger"
            );
            if let Err(error) = keep(shared, turn, &new) {
                tracing::error!(%error, "they could not be; they are tried again");
                return Ok(false);
            }
        }
        let all = shared.settling.book().settled;
        if !file.missing(&all).is_empty() {
            // Others may write it too; whatever they have put there stays.
            whole::change::<_, FileTrouble>(&path, |bytes| {
                let mut there = settle::parse(bytes, &name)?;
                let mut text = String::from_utf8_lossy(bytes).into_owned();
                let lacking: Vec<(String, Settlement)> = there
                    .missing(&all)
                    .into_iter()
                    .map(|(stream, one)| (stream.to_owned(), one.clone()))
                    .collect();
                for (stream, one) in &lacking {
                    text = insert(&text, &there, stream, one);
                    there.add(stream, one.clone());
                }
                Ok(((), (!lacking.is_empty()).then_some(text)))
            })?;
        }
        Ok::<_, FileTrouble>(true)
    })();
    match outcome {
        // Read again at the next look if somebody has written meanwhile: what they wrote was not seen.
        Ok(in_step) => {
            turn.seen = seen();
            turn.in_step = in_step && (turn.seen == now || file_is(&path, shared));
            shared.settling.set_trouble(None);
        }
        Err(trouble) => {
            // A mistake is not read again before the file changes; a file that could not be written is tried again.
            (turn.seen, turn.in_step) = (now, matches!(trouble, FileTrouble::Mistake(_)));
            shared.settling.set_trouble(Some(trouble));
        }
    }
}

/// Whether the file holds what stands and no more.
fn file_is(path: &std::path::Path, shared: &Shared) -> bool {
    let there = whole::read(path).ok().and_then(|bytes| settle::parse(&bytes, "").ok());
    let all = shared.settling.book().settled;
    there.is_some_and(|there| there.missing(&all).is_empty() && all.missing(&there).is_empty())
}

/// Files decisions in the ledger; from then on they stand.
fn keep(shared: &Shared, turn: &mut Turn, new: &[(&str, &Settlement)]) -> Result<(), Refusal> {
    let mut next: HashMap<&str, i64> = HashMap::new();
    let mut batch = Batch::default();
    for (stream, settlement) in new {
        let number =
            next.entry(stream).or_insert_with(|| turn.next.get(*stream).copied().unwrap_or_default());
        let text = one(stream, settlement).into();
        let record = Record { shelf: Shelf::Decisions, subject: (*stream).into(), number: *number, text };
        // Names and words have limits far below a record's.
        if let Err(error) = batch.note(record) {
            tracing::error!(%error, stream, "a decision is too long to be kept");
            continue;
        }
        *number += 1;
    }
    let answer = shared.counter.hand_in(batch, shared)?;
    match answer.blocking_recv().map_err(|_| Refusal::Stopping)? {
        Ok(_) => {}
        Err(refusal) => {
            // Nobody else writes this ledger; were it so, the next try goes on after what stands there.
            if let Refusal::Batch(BatchError::Taken { subject, number }) = &refusal {
                turn.next.insert(subject.clone(), number + 1);
            }
            return Err(refusal);
        }
    }
    let streams: Vec<String> = next.keys().map(|stream| (*stream).to_owned()).collect();
    next.into_iter().for_each(|(stream, number)| _ = turn.next.insert(stream.to_owned(), number));
    let mut settled = Settled::clone(&shared.settling.book().settled);
    new.iter().for_each(|(stream, one)| settled.add(stream, (*one).clone()));
    shared.settling.set_settled(settled);
    shared.studies.forget();
    shared.desk.at_once(streams);
    Ok(())
}

/// Takes a decision: held against the guards, then on disk in the ledger, then in the file. Blocks.
pub(super) fn settle(shared: &Shared, word: &Word<'_>) -> Result<Settlement, Unsettled> {
    let mut turn = shared.settling.turn();
    // What somebody has written into the file by hand is the past of this.
    step(shared, &mut turn);
    let settled = shared.settling.book().settled;
    let history = settled.history(word.stream);
    if word.seen.is_some_and(|seen| seen != history.len()) {
        let words = history.last().map_or_else(|| "what was decided is gone".into(), Settlement::words);
        return Err(Unsettled::Meanwhile { stream: word.stream.to_owned(), words });
    }
    let unix = shared.now();
    let clock = Timestamp::from_millisecond((unix * 1e3) as i64).unwrap_or_default();
    // The clock may have been put back: the newest decision is still the newest. At the end of all time two may be at once.
    let after = history.last().map(|last| {
        let next = last.at.checked_add(SignedDuration::from_millis(1));
        next.unwrap_or(last.at)
    });
    let at = after.map_or(clock, |after| clock.max(after));
    let policy = shared.policy();
    let past = settled.past(unix);
    let terms = Terms { policy: policy.as_deref(), newest: None, seed: 0, past: Some(&past) };
    let fresh = shared.advice(word.stream);
    let advice = fresh.as_deref().map(|fresh| &fresh.advice);
    let entry = terms.entry(word.stream);
    let who = (word.by, word.why);
    let settlement = decide(word.what, word.stream, advice, &entry, &settled, at, who)?;
    // As it is read back: what was the case is kept in few digits.
    let text = one(word.stream, &settlement);
    let settlement = settle::parse(text.as_bytes(), "")
        .ok()
        .and_then(|read| read.history(word.stream).first().cloned())
        .unwrap_or(settlement);
    keep(shared, &mut turn, &[(word.stream, &settlement)])?;
    tracing::info!(stream = word.stream, decision = %settlement.words(), "settled");
    turn.in_step = false;
    step(shared, &mut turn);
    Ok(settlement)
}
