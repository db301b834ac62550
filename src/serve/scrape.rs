//! Reading pages of metrics on the policy's schedule. What a page's histograms have grown by since they were read last is
//! filed as waits; the ledger remembers the last reading, so that nothing is counted twice over a restart.
//!
//! One thread asks one page after the other, those first that are due longest. Where it cannot keep up, pages are read less
//! often and nothing is lost: a histogram holds what came meanwhile.

use std::collections::HashMap;
use std::fs::File;
use std::io::{self, Read};
use std::num::NonZeroUsize;
use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::Ordering;
use std::thread::{Builder, JoinHandle};
use std::time::{Duration, Instant};

use super::body::{CountError, Reading, count_with};
use super::shared::Shared;
use crate::client::{CallError, Client};
use crate::intake::{Allowed, Exposition, Format, IntakeError, Options};
use crate::ledger::{Batch, Entry};
use crate::policy::{Policy, Scrape};
use crate::running::LONGEST_FIRST;

/// How often the schedule is looked at.
const NAP: Duration = Duration::from_millis(100);
/// Largest page, bytes.
const MOST_BYTES: u64 = 64 << 20;
/// Longest header, bytes.
const MOST_HEADER: u64 = 8_192;
/// What is asked for, the better form first.
const ACCEPT: &str = "application/openmetrics-text;version=1.0.0,text/plain;version=0.0.4;q=0.5";

/// Why a page was not read.
#[derive(Debug, thiserror::Error)]
enum ScrapeError {
    #[error(transparent)]
    Trust(#[from] super::TlsError),
    #[error("cannot read the header in {path}: {source}")]
    HeaderFile { path: String, source: io::Error },
    #[error(
        "{path} holds no header: one line `Name: value` is needed, in a file that others may not read (mode 600)"
    )]
    Header { path: String },
    #[error(transparent)]
    Call(CallError),
    #[error("{0}; name the file of the certificates to trust in the page's `trust`")]
    Distrust(CallError),
    #[error(transparent)]
    Count(#[from] CountError),
    #[error("the ledger does not take it: {0}")]
    Refused(String),
}

impl From<CallError> for ScrapeError {
    fn from(error: CallError) -> ScrapeError {
        if error.is_distrust() { ScrapeError::Distrust(error) } else { ScrapeError::Call(error) }
    }
}

/// Starts the thread.
pub(super) fn start(shared: Arc<Shared>) -> io::Result<JoinHandle<()>> {
    Builder::new().name("scraper".into()).spawn(move || {
        let mut scraper = Scraper { shared, policy: None, pages: Vec::new() };
        while !scraper.shared.is_stopping() {
            std::thread::sleep(NAP);
            scraper.look();
        }
    })
}

struct Scraper {
    shared: Arc<Shared>,
    /// The policy from which `pages` was made.
    policy: Option<Arc<Policy>>,
    pages: Vec<Page>,
}

struct Page {
    scrape: Scrape,
    due: Instant,
    /// When it was read last, in this process: a histogram that is new on it since has begun since.
    seen: Option<Instant>,
    client: Option<Client>,
    /// The last trouble told, so that it is told once.
    told: String,
}

impl Scraper {
    fn look(&mut self) {
        self.follow_policy();
        let now = Instant::now();
        let due = self.pages.iter_mut().filter(|page| page.due <= now).min_by_key(|page| page.due);
        let Some(page) = due else { return };
        let every = Duration::from_secs_f64(page.scrape.every);
        // The schedule goes on from when it was due, unless that is long over.
        page.due = (page.due + every).max(now);
        let outcome = page.read(&self.shared);
        let label = if outcome.is_ok() { "read" } else { "failed" };
        self.shared.metrics.scrapes.with_label_values(&[label]).inc();
        match outcome {
            Ok(()) if !page.told.is_empty() => {
                tracing::info!(url = page.scrape.url, "the page can be read again");
                page.told.clear();
            }
            Ok(()) => {}
            Err(error) => {
                let error = error.to_string();
                if page.told != error {
                    tracing::warn!(
                        url = page.scrape.url,
                        error,
                        "a page of metrics cannot be read; it is tried again"
                    );
                    page.told = error;
                }
            }
        }
    }

    /// Takes over the pages of a changed policy; what stays as it was keeps its schedule.
    fn follow_policy(&mut self) {
        let policy = self.shared.policy();
        let same = match (&self.policy, &policy) {
            (None, None) => true,
            (Some(mine), Some(theirs)) => Arc::ptr_eq(mine, theirs),
            _ => false,
        };
        if same {
            return;
        }
        let mut old: HashMap<String, Page> =
            self.pages.drain(..).map(|page| (page.scrape.url.clone(), page)).collect();
        for scrape in policy.iter().flat_map(|policy| &policy.scrapes) {
            let page = old.remove(&scrape.url).filter(|page| page.scrape == *scrape);
            let new = || Page {
                scrape: scrape.clone(),
                due: Instant::now(),
                seen: None,
                client: None,
                told: String::new(),
            };
            self.pages.push(page.unwrap_or_else(new));
        }
        self.policy = policy;
    }
}

impl Page {
    fn read(&mut self, shared: &Shared) -> Result<(), ScrapeError> {
        let text = self.fetch()?;
        let now = shared.now();
        let exposition = Exposition {
            rules: self.scrape.rules.clone(),
            unit: self.scrape.unit,
            at: Some(now),
            // After a long silence the ledger may have forgotten what stood there.
            counts_at_first: self.seen.is_some_and(|seen| seen.elapsed().as_secs_f64() < LONGEST_FIRST),
            place: self.scrape.url.clone(),
        };
        let options = Options {
            format: Some(Format::MetricsText),
            bad_lines: Allowed::All,
            threads: NonZeroUsize::new(1),
            total_bytes: MOST_BYTES,
            exposition,
            ..Options::default()
        };
        let reading = Reading { key: None, now, any_open: shared.any_open.load(Ordering::Relaxed) };
        let counted = match count_with(text.into(), reading, options) {
            // There need be no histogram on a page, nor one of time.
            Err(CountError::Intake(IntakeError::NoWaits { report })) => {
                shared.note(&report);
                self.seen = Some(Instant::now());
                return Ok(());
            }
            counted => counted?,
        };
        shared.note(&counted.report);
        let entry = file(counted.batch, shared)?;
        shared.metrics.grown(&entry);
        self.seen = Some(Instant::now());
        Ok(())
    }

    fn fetch(&mut self) -> Result<Vec<u8>, ScrapeError> {
        let client = match &self.client {
            Some(client) => client.clone(),
            None => {
                let timeout = Duration::from_secs_f64(self.scrape.timeout);
                let client = Client::new(self.scrape.trust.as_deref(), timeout)?;
                self.client.insert(client).clone()
            }
        };
        let header = self.scrape.header_file.as_deref().map(header).transpose()?;
        let mut headers = vec![("Accept", ACCEPT)];
        headers.extend(header.as_ref().map(|(name, value)| (name.as_str(), value.as_str())));
        Ok(client.fetch(&self.scrape.url, &headers, MOST_BYTES)?)
    }
}

/// Hands a batch in and waits until it is on disk.
fn file(batch: Batch, shared: &Shared) -> Result<Entry, ScrapeError> {
    let refused = |error: String| ScrapeError::Refused(error);
    let answer = shared.counter.hand_in(batch, shared).map_err(|error| refused(error.to_string()))?;
    let entry = answer.blocking_recv().map_err(|error| refused(error.to_string()))?;
    entry.map_err(|error| refused(error.to_string()))
}

/// A header from a file that only its owner may read, which is read anew each time so that it may be changed.
fn header(path: &Path) -> Result<(String, String), ScrapeError> {
    let name = path.display().to_string();
    let unread = |source| ScrapeError::HeaderFile { path: name.clone(), source };
    let none = || ScrapeError::Header { path: name.clone() };
    let file = File::open(path).map_err(unread)?;
    #[cfg(unix)]
    {
        use std::os::unix::fs::PermissionsExt;
        if file.metadata().map_err(unread)?.permissions().mode() & 0o007 != 0 {
            return Err(none());
        }
    }
    let mut text = String::new();
    file.take(MOST_HEADER).read_to_string(&mut text).map_err(unread)?;
    let line = text.lines().next().unwrap_or_default();
    let (header, value) = line.split_once(':').ok_or_else(none)?;
    let (header, value) = (header.trim(), value.trim());
    let is_token = |byte: u8| byte.is_ascii_alphanumeric() || b"-_.".contains(&byte);
    let fits = !header.is_empty()
        && header.bytes().all(is_token)
        && !value.is_empty()
        && value.bytes().all(|byte| byte == b' ' || byte.is_ascii_graphic());
    if fits { Ok((header.to_owned(), value.to_owned())) } else { Err(none()) }
}
