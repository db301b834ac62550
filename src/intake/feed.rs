//! The inputs, one after the other, as blocks that can be read on their own.

use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::vec;

use super::blocks::{Blocks, Found, Records, count_lines};
use super::csv::Columns;
use super::error::{HeaderError, IntakeError};
use super::otlp::Signal;
use super::source::{Packing, Source, Unpacked};
use super::{Format, Options, csv, otlp, swf};
use crate::glob::Glob;

/// One block of one input.
pub(super) struct Task {
    /// The number of the input.
    pub(super) file: usize,
    pub(super) layout: Arc<Layout>,
    pub(super) found: Found,
    pub(super) bytes: Vec<u8>,
    /// Lines between the block before and this one (a header).
    pub(super) lines_before: u64,
    /// Bytes read so far of all inputs, as they lie there.
    pub(super) bytes_read: u64,
}

/// How to read the blocks of one input.
#[derive(Debug)]
pub(super) enum Layout {
    Ndjson,
    Csv(Columns),
    Swf {
        unix_start: Option<f64>,
    },
    /// `lines`: each line is a document of its own. Otherwise the input is one.
    Otlp {
        signal: Signal,
        lines: bool,
    },
    /// One text.
    MetricsText,
}

impl Layout {
    pub(super) fn format(&self) -> Format {
        match self {
            Layout::Ndjson => Format::Ndjson,
            Layout::Csv(_) => Format::Csv,
            Layout::Swf { .. } => Format::Swf,
            Layout::Otlp { signal: Signal::Traces, .. } => Format::OtlpTraces,
            Layout::Otlp { signal: Signal::Metrics, .. } => Format::OtlpMetrics,
            Layout::MetricsText => Format::MetricsText,
        }
    }

    /// Whether the input must be read as a whole.
    fn is_whole(&self) -> bool {
        matches!(self, Layout::Otlp { lines: false, .. } | Layout::MetricsText)
    }

    fn records(&self) -> Records {
        match self {
            Layout::Csv(columns) => Records::Rows { delimiter: columns.delimiter },
            _ => Records::Lines,
        }
    }
}

/// Most bytes of an input that must be read as a whole.
const LONGEST_WHOLE: u64 = 1 << 30;

pub(super) struct Feed<'o> {
    options: &'o Options,
    sources: std::iter::Enumerate<vec::IntoIter<Source>>,
    open: Option<Open>,
    bytes_read: Arc<AtomicU64>,
    /// Bytes left before the limit, unpacked.
    allowance: u64,
}

struct Open {
    number: usize,
    file: String,
    packing: Option<Packing>,
    blocks: Blocks<'static>,
    layout: Arc<Layout>,
    lines_before: u64,
    /// Unpacked bytes that the allowance has paid for.
    paid: u64,
}

impl<'o> Feed<'o> {
    pub(super) fn new(sources: Vec<Source>, options: &'o Options) -> Feed<'o> {
        Feed {
            options,
            sources: sources.into_iter().enumerate(),
            open: None,
            bytes_read: Arc::default(),
            allowance: options.total_bytes,
        }
    }

    /// The next block, in a buffer that is no longer needed; `None` after the last.
    pub(super) fn next(&mut self, mut buffer: Vec<u8>) -> Result<Option<Task>, IntakeError> {
        loop {
            let Some(open) = &mut self.open else {
                let Some((number, source)) = self.sources.next() else { return Ok(None) };
                self.open = open(number, source, self.options, &self.bytes_read, self.allowance)?;
                continue;
            };
            let damaged = |error| Unpacked::error(&open.file, open.packing, error);
            let found = if open.layout.is_whole() {
                let limit = self.allowance.saturating_add(open.paid).min(LONGEST_WHOLE);
                buffer.clear();
                loop {
                    let part = open.blocks.peek().map_err(damaged)?;
                    let length = part.len();
                    if length == 0 {
                        break;
                    }
                    buffer.extend_from_slice(part);
                    open.blocks.skip(length);
                    if buffer.len() as u64 > limit {
                        return Err(IntakeError::TooMuch { file: open.file.clone(), limit });
                    }
                }
                (!buffer.is_empty()).then_some(Found::Records)
            } else {
                open.blocks.next(&mut buffer, open.layout.records()).map_err(damaged)?
            };
            let unpaid = open.blocks.read - std::mem::replace(&mut open.paid, open.blocks.read);
            if open.packing.is_none() {
                // Not counted one by one: in between, a file is read into a block without clearing the block first.
                self.bytes_read.fetch_add(unpaid, Ordering::Relaxed);
            }
            self.allowance = self.allowance.checked_sub(unpaid).ok_or_else(|| IntakeError::TooMuch {
                file: open.file.clone(),
                limit: self.options.total_bytes,
            })?;
            match found {
                // A header with nothing under it is told of in a block without lines.
                None if open.lines_before == 0 => self.open = None,
                found => {
                    let found = found.unwrap_or(Found::Records);
                    return Ok(Some(Task {
                        file: open.number,
                        layout: Arc::clone(&open.layout),
                        found,
                        bytes: buffer,
                        lines_before: std::mem::take(&mut open.lines_before),
                        bytes_read: self.bytes_read.load(Ordering::Relaxed),
                    }));
                }
            }
        }
    }
}

/// Opens an input and finds out its format; `None` if there is nothing in it.
fn open(
    number: usize,
    source: Source,
    options: &Options,
    bytes_read: &Arc<AtomicU64>,
    allowance: u64,
) -> Result<Option<Open>, IntakeError> {
    let unpacked = source.open(Arc::clone(bytes_read))?;
    let (packing, file) = (unpacked.packing(), unpacked.file);
    let mut blocks = Blocks::new(unpacked.reader, options.line_bytes);
    let damaged = |error| Unpacked::error(&file, packing, error);
    if blocks.peek().map_err(damaged)?.starts_with(b"\xef\xbb\xbf") {
        blocks.skip(3);
    }
    let (mut lines_before, mut blank) = (0, 0);
    let is_binary = matches!(options.format, Some(Format::OtlpTraces | Format::OtlpMetrics));
    let head = loop {
        let head = blocks.peek().map_err(damaged)?;
        let (length, lines) = (head.len(), count_lines(head));
        if length == 0 {
            return Ok(None);
        }
        // A message may begin, and even end, with bytes that would be blanks in a text.
        if is_binary || !head.trim_ascii().is_empty() {
            break blocks.peek().map_err(damaged)?;
        }
        blocks.skip(length);
        lines_before += lines;
        blank += length as u64;
        if blank > allowance {
            return Err(IntakeError::TooMuch { file, limit: options.total_bytes });
        }
    };
    let format = match options.format {
        Some(format) => format,
        None => match Format::detect(head, &file) {
            Ok(format) => format,
            Err(looks) => return Err(IntakeError::Unrecognised { file, looks }),
        },
    };
    let layout = match format {
        Format::Ndjson => Layout::Ndjson,
        Format::Swf => Layout::Swf { unix_start: swf::unix_start(head) },
        Format::MetricsText => Layout::MetricsText,
        Format::OtlpTraces | Format::OtlpMetrics => {
            let signal = if format == Format::OtlpTraces { Signal::Traces } else { Signal::Metrics };
            Layout::Otlp { signal, lines: otlp::is_lines(head) }
        }
        Format::Csv => {
            // Blank lines before the header count as lines all the same.
            let blank = head.iter().take_while(|byte| byte.is_ascii_whitespace()).count();
            lines_before += memchr::memchr_iter(b'\n', &head[..blank]).count() as u64;
            let delimiter = csv::delimiter(&head[blank..]);
            blocks.skip(blank);
            let header = blocks.first_record(Records::Rows { delimiter }).unwrap_or_default();
            let length = header.len();
            let columns = if (1..=options.line_bytes).contains(&length) {
                let named = options.one_stream.is_some()
                    || options.streams.as_ref().and_then(Glob::literal).is_some();
                Columns::from_header(header, delimiter, named)
            } else {
                Err(HeaderError::Long { limit: options.line_bytes })
            };
            let columns = match columns {
                Ok(columns) => columns,
                Err(source) => return Err(IntakeError::Header { file, source }),
            };
            lines_before += count_lines(header);
            blocks.skip(length);
            Layout::Csv(columns)
        }
    };
    Ok(Some(Open { number, file, packing, blocks, layout: Arc::new(layout), lines_before, paid: 0 }))
}
