//! Logs that are followed: what is written to them is counted, over rotations and restarts, once.
//!
//! How far a file was read is filed with what was counted up to there, in one commit; so a crash at any moment loses
//! nothing and counts nothing twice. A rotation is told by the file's number and by the bytes before the place reached:
//! they must still be there. If they are not, the file that has them (renamed, copied, packed) is read to its end first,
//! then those that came after it, then the present one.

mod opened;
mod policy;
mod trail;

pub(super) use policy::start as follow_policy;

use std::io;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::{Builder, JoinHandle};
use std::time::{Duration, Instant};

use self::opened::Opened;
use super::body::count_part;
use super::keeper::Refusal;
use super::shared::Shared;
use crate::intake::{Allowed, Format, IntakeError, Options, Outline};
use crate::ledger::{Batch, LedgerError, Position, Reader};
use crate::policy::Followed;

/// How often a file is looked at that has nothing new.
const NAP: Duration = Duration::from_millis(200);
/// How long to rest after trouble.
const REST: Duration = Duration::from_secs(2);
/// How long a rotated file must be quiet before the next is read: a writer may hold it a while longer.
const QUIET: Duration = Duration::from_secs(1);
/// Most bytes read at once.
const PART: usize = 1 << 20;
/// How often a vanished rest is looked for: a rotation takes more than one step.
const LOOKS: u32 = 5;

/// What keeps a file from being read on. Nothing is lost; it is tried again.
#[derive(Debug, thiserror::Error)]
enum Trouble {
    #[error("it cannot be read: {0}")]
    Read(#[from] io::Error),
    #[error("{0}")]
    Intake(#[from] IntakeError),
    #[error("only NDJSON, CSV, journal entries and lines for a pattern can be followed, not {}", .0.name())]
    Format(Format),
    #[error("the ledger cannot tell how far it was read: {0}")]
    Position(#[from] LedgerError),
    #[error("what was read cannot be filed: {0}")]
    Refused(Refusal),
}

/// Starts the thread that follows a file. It ends when the daemon is stopping, or when `left` is set.
pub(super) fn start(
    followed: Followed,
    shared: Arc<Shared>,
    left: Arc<AtomicBool>,
) -> io::Result<JoinHandle<()>> {
    // The same file under the same name, wherever the daemon is started from.
    let path = std::path::absolute(&followed.path)?;
    let name = path.display().to_string();
    let options = Options {
        bad_lines: Allowed::All,
        threads: Some(std::num::NonZeroUsize::MIN),
        line_bytes: shared.config.limits.line_bytes,
        since: None,
        until: None,
        ..followed.options
    };
    let follower = Follower { path, name, options, shared, left, open: None, at: None, looks: 0, told: None };
    Builder::new().name("follower".into()).spawn(move || follower.run())
}

struct Follower {
    path: PathBuf,
    name: String,
    options: Options,
    shared: Arc<Shared>,
    /// Set once nobody wants this file followed any more.
    left: Arc<AtomicBool>,
    open: Option<Open>,
    /// Where to go on, while no file is open.
    at: Option<Position>,
    /// How often the file to go on in was looked for in vain.
    looks: u32,
    /// What was said last, so that it is not said again and again.
    told: Option<String>,
}

/// The file that is read.
struct Open {
    file: Opened,
    outline: Option<Outline>,
    /// Whether it had the followed name when it was opened; else it was rotated before.
    present: bool,
    /// When something was read last.
    last: Instant,
    /// Packed and damaged: there is nothing more to be had.
    broken: bool,
}

impl Open {
    fn new(file: Opened, present: bool) -> Open {
        Open { file, outline: None, present, last: Instant::now(), broken: false }
    }
}

impl Follower {
    fn run(mut self) {
        let mut known = false;
        while !self.is_over() {
            if !known {
                match self.shared.ask(|reader| reader.position(&self.name)) {
                    Ok(position) => {
                        (self.at, known) = (position, true);
                        let from = position.map_or(0, |position| position.offset);
                        tracing::info!(file = self.name, from, "following");
                    }
                    Err(error) => self.rest(&Trouble::from(error)),
                }
                continue;
            }
            match self.step() {
                Ok(true) => {}
                Ok(false) => std::thread::sleep(NAP),
                Err(trouble) => self.rest(&trouble),
            }
        }
    }

    fn is_over(&self) -> bool {
        self.shared.is_stopping() || self.left.load(Ordering::Relaxed)
    }

    fn rest(&mut self, trouble: &Trouble) {
        self.say(trouble.to_string());
        let until = Instant::now() + REST;
        while !self.is_over() && Instant::now() < until {
            std::thread::sleep(NAP);
        }
    }

    fn say(&mut self, what: String) {
        if self.told.as_ref() != Some(&what) {
            tracing::warn!(file = self.name, "{what}");
            self.told = Some(what);
        }
    }

    /// Reads and files a part; whether there may be more at once.
    fn step(&mut self) -> Result<bool, Trouble> {
        let Some(open) = &mut self.open else { return self.begin() };
        let before = open.file.pending.len();
        if !open.file.is_unchanged()? {
            return Ok(self.begin_again());
        }
        let got = match open.file.fill(PART) {
            _ if open.broken => 0,
            Err(error) if open.file.is_packed() => return self.reopen(&error),
            got => got?,
        };
        if got > 0 {
            open.last = Instant::now();
            // It may have been cut down while it was read; then what was read may be of what stands there now.
            if !open.file.is_unchanged()? {
                open.file.pending.truncate(before);
                return Ok(self.begin_again());
            }
        }
        if open.file.is_skipping() {
            open.file.skip_line();
        }
        if open.outline.is_none() {
            open.outline = Outline::of(open.file.head(), &self.name, &self.options)?;
        }
        if let Some(outline) = &open.outline {
            if matches!(outline.format, Format::Swf | Format::Parquet | Format::Arrow) {
                return Err(Trouble::Format(outline.format));
            }
            let mut cut = outline.whole(&open.file.pending);
            if cut == 0 && open.file.pending.len() > self.options.line_bytes {
                // A line without an end, or a quotation mark that is never closed; the reader refuses it.
                cut = open.file.first_line();
            }
            if cut > 0 {
                self.told = None;
                return self.file(cut);
            }
        }
        Ok(got == PART || self.at_end()?)
    }

    /// Nothing whole is left to be read: waits, or goes on to the next file.
    fn at_end(&mut self) -> Result<bool, Trouble> {
        let Some(open) = &mut self.open else { return Ok(true) };
        if open.present {
            match opened::identity(&self.path) {
                Ok(file) if file == open.file.file => return Ok(false),
                Ok(_) => open.present = false,
                // It comes back, or it does not.
                Err(_) => return Ok(false),
            }
        }
        // By its own time as well, so that one that is long done with keeps nobody waiting after a restart.
        if open.last.elapsed().max(open.file.untouched()) < QUIET && !open.file.is_packed() {
            return Ok(false);
        }
        // The last line may have no newline; there will be no more of it.
        let rest = open.file.pending.len();
        if rest > 0 && open.outline.is_none() {
            let mut head = open.file.head().to_vec();
            head.push(b'\n');
            open.outline = Outline::of(&head, &self.name, &self.options).unwrap_or_default();
        }
        if rest > 0 && open.outline.is_some() {
            return self.file(rest);
        }
        let position = open.file.position();
        let next = trail::after(&self.path, &position);
        let (path, present) = match next {
            Some(path) => (path, false),
            None => (self.path.clone(), true),
        };
        match Opened::start(&path) {
            Ok(file) => {
                tracing::info!(file = self.name, next = %path.display(), "the rotated file is read to its end");
                self.open = Some(Open::new(file, present));
                Ok(true)
            }
            // The next is not there yet.
            Err(error) if error.kind() == io::ErrorKind::NotFound => Ok(false),
            Err(error) => Err(error.into()),
        }
    }

    /// A packed file breaks off: it may be on its way still, so it is opened again, but not for ever.
    fn reopen(&mut self, error: &io::Error) -> Result<bool, Trouble> {
        let Some(open) = &mut self.open else { return Ok(true) };
        self.looks += 1;
        if self.looks >= LOOKS {
            let path = open.file.path.display().to_string();
            (open.broken, self.looks) = (true, 0);
            self.say(format!("{path} is damaged ({error}): what of it was not read is lost"));
            return Ok(true);
        }
        std::thread::sleep(NAP);
        if let Some(file) = Opened::resume(&open.file.path, &open.file.position(), false)? {
            open.file = file;
        }
        Ok(true)
    }

    /// The open file is not what it was: it was cut down or written over.
    fn begin_again(&mut self) -> bool {
        let open = self.open.take();
        self.at = open.map(|open| open.file.position()).filter(|position| position.offset > 0);
        self.looks = 0;
        true
    }

    /// Opens the file that goes on from where reading stopped, or the present one.
    fn begin(&mut self) -> Result<bool, Trouble> {
        if let Some(position) = &self.at {
            if let Some((file, present)) = trail::find(&self.path, position) {
                self.open = Some(Open::new(file, present));
                (self.at, self.looks) = (None, 0);
                return Ok(true);
            }
            self.looks += 1;
            if self.looks < LOOKS {
                return Ok(false);
            }
        }
        match Opened::start(&self.path) {
            Ok(file) => {
                if let Some(position) = self.at.take() {
                    self.say(format!(
                        "the file that was read up to byte {} is neither here nor among the rotated ones: what of it \
                         was not read is lost; the present one is read from its start",
                        position.offset
                    ));
                }
                self.open = Some(Open::new(file, true));
                self.looks = 0;
                Ok(true)
            }
            Err(error) if error.kind() == io::ErrorKind::NotFound => {
                self.say("it is not there; it is waited for".into());
                Ok(false)
            }
            Err(error) => Err(error.into()),
        }
    }

    /// Counts the first bytes of what is read and files them with the place reached. Does not give up while the daemon
    /// runs: nothing behind them can be filed before them.
    fn file(&mut self, cut: usize) -> Result<bool, Trouble> {
        let Some(Open { file, outline: Some(outline), .. }) = &mut self.open else { return Ok(true) };
        let header = if file.offset > 0 { &outline.header[..] } else { &[] };
        let header_lines = memchr::memchr_iter(b'\n', header).count() as u64;
        let part = [header, &file.pending[..cut]].concat();
        let options = Options { format: Some(outline.format), ..self.options.clone() };
        let (now, any_open) = (self.shared.now(), self.shared.any_open.load(Ordering::Relaxed));
        let mut counted = count_part(part, &self.name, &options, now, any_open)?;
        let report = &mut counted.report;
        report.lines = report.lines.saturating_sub(header_lines);
        for bad in &mut report.bad.examples {
            bad.line = (bad.line + file.lines).saturating_sub(header_lines);
        }
        let lines = report.lines;
        self.shared.note(report);
        if counted.events > 0 {
            self.shared.any_open.store(true, Ordering::Relaxed);
        }
        counted.batch.reached(&self.name, file.position_after(cut, lines));
        let Some(joined) = self.hand_in(&counted.batch) else { return Ok(true) };
        self.shared.metrics.waits.inc_by(counted.report.waits + joined);
        if let Some(open) = &mut self.open {
            open.file.consume(cut, lines);
        }
        Ok(true)
    }

    /// Hands in a batch until it is on disk; `None` if the daemon stops before.
    fn hand_in(&mut self, batch: &Batch) -> Option<u64> {
        loop {
            let outcome = match self.shared.counter.hand_in(batch.clone(), &self.shared) {
                Ok(answer) => answer.blocking_recv().unwrap_or(Err(Refusal::Stopping)),
                Err(refusal) => Err(refusal),
            };
            match outcome {
                Ok(entry) => return Some(entry.joined),
                Err(Refusal::Busy(_)) => std::thread::sleep(NAP),
                Err(Refusal::Stopping) => return None,
                Err(refusal) => self.rest(&Trouble::Refused(refusal)),
            }
            if self.is_over() {
                return None;
            }
        }
    }
}
