//! From the body of a request to a batch for the ledger. No I/O: bytes in, batch out.

use std::io::Read;
use std::num::NonZeroUsize;

use axum::body::Bytes;

use super::config::Limits;
use crate::intake::{
    Allowed, BadLine, Encoding, Format, Half, IntakeError, Options, Packing, Record, Report, Rules, Side,
    Sink, Source, UNDECODABLE, read,
};
use crate::ledger::{Batch, Digest, KeyError, Tie};
use crate::running::Running;
use crate::wait::{Age, Ending};

/// What a body holds.
pub(super) struct Counted {
    pub(super) batch: Batch,
    pub(super) report: Report,
    /// Starts, ends and open waits.
    pub(super) events: u64,
    /// Of these, those that the ledger cannot take (an id that is too long).
    pub(super) refused: u64,
}

/// How a body is read.
#[derive(Clone, Copy, Debug)]
pub(super) struct Reading<'a> {
    /// A key that makes a repeat harmless.
    pub(super) key: Option<&'a str>,
    /// For waits without a time, Unix seconds.
    pub(super) now: f64,
    /// Whether any wait is open anywhere, so that a whole wait may close one.
    pub(super) any_open: bool,
}

/// Counts a body of telemetry. It is counted whole or not at all if it cannot be decoded, and its own bytes, unpacked,
/// are its key unless the client gives one.
pub(super) fn count_whole(
    body: Bytes,
    form: Encoding,
    format: Format,
    rules: Rules,
    reading: Reading<'_>,
    limits: &Limits,
) -> Result<Counted, CountError> {
    let body = unpack(body, limits.unpacked_bytes)?;
    // What is no JSON would be taken for protocol buffers, and told of in their words.
    if form == Encoding::Json && body.trim_ascii_start().first() != Some(&b'{') {
        return Err(CountError::Undecodable { reason: "it cannot be decoded: it is no JSON object".into() });
    }
    let Digest(digest) = Digest::of(&body);
    let own: String = digest.iter().map(|byte| format!("{byte:02x}")).collect();
    let own = format!("content:{own}");
    let reading = Reading { key: Some(reading.key.unwrap_or(&own)), ..reading };
    let counted = match count_with(body, reading, Options { rules, ..options(Some(format), limits) }) {
        // An empty request is a sound one.
        Err(CountError::Intake(IntakeError::NoWaits { report })) => {
            Counted { batch: Batch::default(), report: *report, events: 0, refused: 0 }
        }
        counted => counted?,
    };
    if !counted.report.bad.by_reason.iter().any(|bad| bad.reason == UNDECODABLE) {
        return Ok(counted);
    }
    let undecodable = |bad: &&BadLine| bad.kind == UNDECODABLE;
    let told = counted.report.bad.examples.iter().find(undecodable).map(|bad| bad.reason.clone());
    Err(CountError::Undecodable { reason: told.unwrap_or_else(|| UNDECODABLE.to_owned()) })
}

/// A body as it was before it was packed.
fn unpack(body: Bytes, limit: u64) -> Result<Bytes, CountError> {
    let mut unpacked = Vec::new();
    let read = match Packing::of(&body) {
        None => return Ok(body),
        Some(Packing::Gzip) => flate2::bufread::MultiGzDecoder::new(&body[..])
            .take(limit.saturating_add(1))
            .read_to_end(&mut unpacked),
        Some(Packing::Zstd) => zstd::Decoder::new(&body[..])
            .and_then(|decoder| decoder.take(limit.saturating_add(1)).read_to_end(&mut unpacked)),
    };
    let file = "body".to_owned();
    match (Packing::of(&body), read) {
        (_, Ok(_)) if unpacked.len() as u64 > limit => Err(IntakeError::TooMuch { file, limit }.into()),
        (Some(packing), Err(source)) => {
            Err(IntakeError::Damaged { file, compression: packing.name(), source }.into())
        }
        _ => Ok(unpacked.into()),
    }
}

/// Counts a body. Bad lines are counted and told of, not an error, as long as there is something else. `format`: if the client
/// named one.
pub(super) fn count(
    body: Bytes,
    format: Option<Format>,
    reading: Reading<'_>,
    limits: &Limits,
) -> Result<Counted, CountError> {
    count_with(body, reading, options(format, limits))
}

fn options(format: Option<Format>, limits: &Limits) -> Options {
    Options {
        format,
        bad_lines: Allowed::All,
        threads: NonZeroUsize::new(1),
        // What anyone may send must not be able to keep a thread for hours.
        tables: false,
        line_bytes: limits.line_bytes,
        total_bytes: limits.unpacked_bytes,
        ..Options::default()
    }
}

/// The same with all said of how it is to be read.
pub(super) fn count_with(body: Bytes, reading: Reading<'_>, options: Options) -> Result<Counted, CountError> {
    let batch = match reading.key {
        Some(key) => Batch::keyed(key, Digest::of(&body))?,
        None => Batch::default(),
    };
    let source = Source::reader("body", std::io::Cursor::new(body));
    Ok(count_into(batch, source, &options, reading.now, reading.any_open)?)
}

/// Counts a part of a followed file. That there is no wait in it is no error.
pub(super) fn count_part(
    part: Vec<u8>,
    name: &str,
    options: &Options,
    now: f64,
    any_open: bool,
) -> Result<Counted, IntakeError> {
    let source = Source::reader(name, std::io::Cursor::new(part));
    match count_into(Batch::default(), source, options, now, any_open) {
        Err(IntakeError::NoWaits { report }) => {
            let mut batch = Batch::default();
            note_bad(&mut batch, &report);
            Ok(Counted { batch, report: *report, events: 0, refused: 0 })
        }
        counted => counted,
    }
}

fn count_into(
    batch: Batch,
    source: Source,
    options: &Options,
    now: f64,
    any_open: bool,
) -> Result<Counted, IntakeError> {
    let sink = Counting { batch, now, any_open, events: 0, refused: 0 };
    let (sink, report) = read(vec![source], options, sink, &mut |_| ())?;
    let Counting { mut batch, events, refused, .. } = sink;
    note_bad(&mut batch, &report);
    Ok(Counted { batch, report, events, refused })
}

fn note_bad(batch: &mut Batch, report: &Report) {
    for bad in &report.bad.by_reason {
        batch.bad_lines(&format!("{}: {}", bad.field, bad.reason), bad.lines);
    }
}

/// Why nothing of a body was counted.
#[derive(Debug, thiserror::Error)]
pub(super) enum CountError {
    #[error(transparent)]
    Key(#[from] KeyError),
    #[error(transparent)]
    Intake(#[from] IntakeError),
    #[error("{reason}")]
    Undecodable { reason: String },
}

struct Counting {
    batch: Batch,
    now: f64,
    any_open: bool,
    events: u64,
    refused: u64,
}

impl Sink for Counting {
    #[inline]
    fn take(&mut self, record: &Record<'_>) {
        let Record { stream, wait, .. } = record;
        if let Some(id) = record.id {
            let tie = Tie { stream, id, attempt: wait.attempt() };
            let at = wait.at().unwrap_or(self.now);
            match (wait.ending(), wait.age()) {
                // It is open under its id from when it started; what it comes to is counted once it has ended.
                (Ending::Waiting, Age::Exact(age)) => {
                    let filed = self.batch.start(tie, (at - age).max(0.0), wait.entered());
                    self.any_open = true;
                    return self.note(filed.is_ok());
                }
                _ if self.any_open => {
                    let _ = self.batch.close(tie, at);
                }
                _ => {}
            }
        }
        // The reader has checked the name.
        let _ = self.batch.add(stream, wait, self.now);
    }

    fn take_half(&mut self, half: &Half<'_>) -> bool {
        let tie = Tie { stream: half.stream, id: half.id, attempt: half.attempt };
        let filed = match half.side {
            Side::Start => {
                self.any_open = true;
                self.batch.start(tie, half.time, half.entered)
            }
            Side::End(ending) => self.batch.end(tie, half.time, ending),
        };
        self.note(filed.is_ok());
        true
    }

    fn take_running(&mut self, running: &Running) -> bool {
        // The reader has checked the name.
        self.batch.running(running.clone()).is_ok()
    }

    fn fork(&self) -> Counting {
        Counting { batch: Batch::default(), events: 0, refused: 0, ..*self }
    }

    fn absorb(&mut self, other: Counting) {
        self.batch.absorb(other.batch);
        self.events += other.events;
        self.refused += other.refused;
    }
}

impl Counting {
    fn note(&mut self, filed: bool) {
        self.events += 1;
        self.refused += u64::from(!filed);
    }
}
