//! What one block of a file gives: waits to the sink, and the rest to be settled in the order of the file.

use std::collections::BTreeMap;

use super::error::ColumnsError;
use super::exposition::Exposition;
use super::flaw::Flaw;
use super::mapping::Mapping;
use super::pairs::Halves;
use super::record::{Fields, Made, Record, make};
use super::report::EXAMPLES;
use super::rules::Rules;
use super::streams::Streams;
use super::{Options, Sink};
use crate::glob::Glob;
use crate::running::Running;
use crate::wait::{StreamError, Wait};

/// What a block leaves behind once its waits are in the sink.
#[derive(Debug)]
pub(super) struct Outcome {
    pub(super) lines: u64,
    pub(super) waits: u64,
    pub(super) halves_taken: u64,
    pub(super) running: Vec<(u64, Running)>,
    pub(super) running_taken: u64,
    pub(super) not_waits: u64,
    pub(super) other_streams: u64,
    pub(super) outside_window: u64,
    pub(super) unmeasured: u64,
    pub(super) partial: u64,
    pub(super) other_messages: u64,
    pub(super) flaws: Flaws,
    pub(super) halves: Halves,
    pub(super) comments: Vec<String>,
    /// Why the rest of the part cannot be read, if it cannot.
    pub(super) failure: Option<ColumnsError>,
}

/// Refused lines: counted by field and reason, the first few kept.
#[derive(Debug, Default)]
pub(super) struct Flaws {
    pub(super) counts: BTreeMap<(&'static str, &'static str), u64>,
    pub(super) first: Vec<(u64, Flaw)>,
}

impl Flaws {
    pub(super) fn add(&mut self, line: u64, flaw: Flaw) {
        *self.counts.entry((flaw.field(), flaw.kind())).or_default() += 1;
        // Halves of waits are settled after the other lines of their block, so not all come in order.
        let place = self.first.partition_point(|&(earlier, _)| earlier <= line);
        if place < EXAMPLES {
            self.first.insert(place, (line, flaw));
            self.first.truncate(EXAMPLES);
        }
    }
}

/// Where the formats bring what they read. Numbers of lines count from 0 at the start of the block.
pub(super) struct Collector<'w, S> {
    options: &'w Options,
    sink: &'w mut S,
    streams: &'w mut Streams,
    outcome: Outcome,
}

impl<'w, S: Sink> Collector<'w, S> {
    pub(super) fn new(options: &'w Options, sink: &'w mut S, streams: &'w mut Streams) -> Collector<'w, S> {
        let outcome = Outcome {
            lines: 0,
            waits: 0,
            halves_taken: 0,
            running: Vec::new(),
            running_taken: 0,
            not_waits: 0,
            other_streams: 0,
            outside_window: 0,
            unmeasured: 0,
            partial: 0,
            other_messages: 0,
            flaws: Flaws::default(),
            halves: Halves::default(),
            comments: Vec::new(),
            failure: None,
        };
        streams.begin_block();
        Collector { options, sink, streams, outcome }
    }

    pub(super) fn finish(self) -> Outcome {
        self.outcome
    }

    pub(super) fn line_limit(&self) -> usize {
        self.options.line_bytes
    }

    pub(super) fn nameless(&self) -> Option<&'w str> {
        self.one_stream().or_else(|| self.options.streams.as_ref().and_then(Glob::literal))
    }

    /// The stream of every record, where one was asked for.
    pub(super) fn one_stream(&self) -> Option<&'w str> {
        self.options.one_stream.as_deref()
    }

    pub(super) fn count_lines(&mut self, lines: u64) {
        self.outcome.lines += lines;
    }

    /// Lines counted so far, those before the block not among them.
    pub(super) fn lines(&self) -> u64 {
        self.outcome.lines
    }

    pub(super) fn refuse(&mut self, line: u64, flaw: Flaw) {
        self.outcome.flaws.add(line, flaw);
    }

    pub(super) fn comment(&mut self, text: &str) {
        if !text.is_empty() {
            self.outcome.comments.push(text.into());
        }
    }

    /// A record that carries no value of the measure asked for.
    pub(super) fn unmeasured(&mut self) {
        self.outcome.unmeasured += 1;
    }

    /// A record of a part of a job that another record has as a whole.
    pub(super) fn partial(&mut self) {
        self.outcome.partial += 1;
    }

    /// The rest of the part cannot be read.
    #[cfg(feature = "columnar")]
    pub(super) fn fail(&mut self, error: ColumnsError) {
        self.outcome.failure = Some(error);
    }

    /// A message of a log that is no record.
    pub(super) fn other_message(&mut self) {
        self.outcome.other_messages += 1;
    }

    /// What stands for what, where the input's words are not ours.
    pub(super) fn mapping(&self) -> Option<&'w Mapping> {
        self.options.mapping.as_deref()
    }

    /// Spans and data points that are no waits.
    pub(super) fn not_waits(&mut self, number: u64) {
        self.outcome.not_waits += number;
    }

    /// How telemetry becomes waits.
    pub(super) fn rules(&self) -> &'w Rules {
        &self.options.rules
    }

    /// How metrics as text become waits.
    pub(super) fn exposition(&self) -> &'w Exposition {
        &self.options.exposition
    }

    /// A reading of a histogram that only grows.
    pub(super) fn running(&mut self, line: u64, running: Running) -> Result<(), Flaw> {
        let place = self.enter(&running.stream)?;
        let stream = self.streams.at(place);
        if let Some(at) = running.at {
            stream.note_time(at);
        }
        // Without a time it cannot be told whether it lies in the window; that it does is looked at when it is counted.
        self.options.is_in_window(running.at)?;
        if !stream.wanted {
            self.outcome.other_streams += 1;
        } else if self.sink.take_running(&running) {
            self.outcome.running_taken += 1;
        } else {
            self.outcome.running.push((line, running));
        }
        Ok(())
    }

    #[inline]
    pub(super) fn record(&mut self, line: u64, fields: &Fields<'_>) -> Result<(), Flaw> {
        match self.mapping() {
            None => self.made(line, fields),
            Some(mapping) => {
                let mut own = fields.clone();
                mapping.settle(&mut own)?;
                self.made(line, &own)
            }
        }
    }

    #[inline(always)]
    fn made(&mut self, line: u64, fields: &Fields<'_>) -> Result<(), Flaw> {
        match make(fields, self.nameless(), self.one_stream().is_some())? {
            Made::Whole(record) => self.whole(record, fields.is_bare()),
            Made::Half(half) => {
                let place = self.enter(half.stream)?;
                let stream = self.streams.at(place);
                stream.note_time(half.time);
                if !stream.wanted {
                    self.outcome.other_streams += 1;
                } else if self.sink.take_half(&half) {
                    self.outcome.halves_taken += 1;
                } else {
                    self.outcome.halves.push(line, &half);
                }
                Ok(())
            }
        }
    }

    /// Takes a wait. `bare`: its age came as a number without a unit.
    #[inline(always)]
    pub(super) fn whole(&mut self, record: Record<'_>, bare: bool) -> Result<(), Flaw> {
        let stream = self.enter(record.stream)?;
        let Record { id, wait, .. } = record;
        if wait.at().is_none() && self.options.is_windowed() && self.streams.at(stream).wanted {
            return Err(Flaw::Undated);
        }
        self.rows(&mut std::iter::once(Some(Row { stream, id, wait, bare })));
        Ok(())
    }

    /// The number of a stream, whose name is checked when first met.
    #[inline]
    pub(super) fn enter(&mut self, stream: &str) -> Result<usize, StreamError> {
        self.streams.enter(stream, self.options.streams.as_ref())
    }

    /// Takes waits of streams that were entered, up to one that is none, and says how many it took.
    #[inline(always)]
    pub(super) fn rows<'r>(&mut self, rows: &mut impl Iterator<Item = Option<Row<'r>>>) -> usize {
        let tally = take_rows(self.options, self.sink, self.streams, rows);
        self.count(tally);
        tally.taken as usize
    }

    /// Takes many waits of streams that were entered.
    #[cfg(feature = "columnar")]
    pub(super) fn many_rows<'r>(&mut self, rows: impl Iterator<Item = Row<'r>>) {
        let tally = take_many_rows(self.options, self.sink, self.streams, rows);
        self.count(tally);
    }

    #[inline(always)]
    fn count(&mut self, Tally { taken, other_streams, outside_window }: Tally) {
        let outcome = &mut self.outcome;
        outcome.other_streams += other_streams;
        outcome.outside_window += outside_window;
        outcome.waits += taken - other_streams - outside_window;
    }

    /// Whether each wait needs a time.
    #[cfg(feature = "columnar")]
    pub(super) fn is_windowed(&self) -> bool {
        self.options.is_windowed()
    }
}

/// Rows as they went.
#[derive(Clone, Copy, Default)]
struct Tally {
    taken: u64,
    other_streams: u64,
    outside_window: u64,
}

/// Not inlined: of an argument of its own the compiler knows that nothing else lies in it, and may keep a small sink in
/// registers.
#[cfg(feature = "columnar")]
#[inline(never)]
fn take_many_rows<'r, S: Sink>(
    options: &Options,
    sink: &mut S,
    streams: &mut Streams,
    rows: impl Iterator<Item = Row<'r>>,
) -> Tally {
    take_rows(options, sink, streams, &mut rows.map(Some))
}

/// Takes rows up to one that is none.
#[inline(always)]
fn take_rows<'r, S: Sink>(
    options: &Options,
    sink: &mut S,
    streams: &mut Streams,
    rows: &mut impl Iterator<Item = Option<Row<'r>>>,
) -> Tally {
    let (block, windowed) = (streams.block(), options.is_windowed());
    let mut tally = Tally::default();
    for row in rows.map_while(|row| row) {
        let stream = streams.at(row.stream);
        if let Some(at) = row.wait.at() {
            stream.note_time(at);
        }
        tally.taken += 1;
        if !stream.wanted {
            tally.other_streams += 1;
        } else if windowed && options.is_in_window(row.wait.at()) != Ok(true) {
            tally.outside_window += 1;
        } else {
            stream.note(&row.wait, block, row.bare);
            sink.take(&Record { stream: &stream.name, place: row.stream, id: row.id, wait: row.wait });
        }
    }
    tally
}

/// A wait of a stream that was entered.
pub(super) struct Row<'a> {
    /// Its stream's number.
    pub(super) stream: usize,
    pub(super) id: Option<&'a str>,
    /// It has a time if there is a window.
    pub(super) wait: Wait,
    /// Whether its age has no stated unit.
    pub(super) bare: bool,
}

impl Options {
    fn is_windowed(&self) -> bool {
        self.since.is_some() || self.until.is_some()
    }

    /// Whether a wait that ended or was last seen then is wanted.
    #[inline]
    pub(super) fn is_in_window(&self, at: Option<f64>) -> Result<bool, Flaw> {
        if !self.is_windowed() {
            return Ok(true);
        }
        let at = at.ok_or(Flaw::Undated)?;
        Ok(self.since.is_none_or(|since| at >= since) && self.until.is_none_or(|until| at < until))
    }
}
