//! The reading itself: blocks to threads, their outcomes settled in the order of the input.

use std::collections::BTreeMap;
use std::num::NonZeroUsize;
use std::sync::Mutex;
use std::sync::mpsc::{Receiver, Sender, channel, sync_channel};
use std::thread;

use super::blocks::Found;
use super::collect::{Collector, Flaws, Outcome};
use super::error::IntakeError;
use super::feed::{Feed, Layout, Part, Task};
use super::flaw::Flaw;
use super::pairs::Pairs;
use super::record::Record;
use super::report::{BadCount, BadLine, COMMENTS, Comment, EXAMPLES, FileReport, LeftOut, Report};
use super::source::Source;
use super::streams::Streams;
use super::{Allowed, Format, Options, Sink, csv, exposition, journal, ndjson, otlp, pattern, sql, swf};
use crate::running::{Histogram, Mark, Running, SeriesKey};

/// How far a reading is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
pub struct Progress {
    /// Bytes read of all inputs, as they lie there (packed or not).
    pub bytes: u64,
    /// Bytes of all inputs, where that is known.
    pub total: Option<u64>,
    /// Lines read.
    pub lines: u64,
}

/// Reads all waits of all sources into `sink`. `progress` is called after each block of about 256 KiB, on this
/// thread.
///
/// # Errors
/// [`IntakeError`] when a source cannot be read as a whole, when more lines are bad than `options` allows (the
/// sources are read to their end all the same, so that the report has every reason), and when there is not one
/// wait.
pub fn read<S: Sink>(
    sources: Vec<Source>,
    options: &Options,
    sink: S,
    progress: &mut dyn FnMut(Progress),
) -> Result<(S, Report), IntakeError> {
    let total = sources.iter().map(Source::bytes).sum();
    let mut settler = Settler::new(&sources, options, sink);
    let mut tell = |bytes, lines| progress(Progress { bytes, total, lines });
    let feed = Feed::new(sources, options);
    let threads =
        options.threads.or_else(|| thread::available_parallelism().ok()).map_or(1, NonZeroUsize::get);
    if threads == 1 {
        read_here(feed, options, &mut settler, &mut tell)?;
    } else {
        read_on_threads(feed, options, &mut settler, threads, &mut tell)?;
    }
    settler.finish()
}

/// Parses one block.
fn parse<S: Sink>(task: &Task, options: &Options, sink: &mut S, streams: &mut Streams) -> Outcome {
    let mut collector = Collector::new(options, sink, streams);
    match task.found {
        Found::Records => match &*task.layout {
            Layout::Ndjson => ndjson::harvest(&task.bytes, &mut collector),
            Layout::Csv(columns) => csv::harvest(&task.bytes, columns, &mut collector),
            Layout::Swf { unix_start } => {
                swf::harvest(&task.bytes, *unix_start, options.measure, &mut collector);
            }
            Layout::Journal(pattern) => journal::harvest(&task.bytes, pattern.as_deref(), &mut collector),
            Layout::Pattern(lines) => pattern::harvest(&task.bytes, lines, &mut collector),
            #[cfg(feature = "columnar")]
            Layout::Columns(_, plan) => {
                if let Some(Part::Columns(part)) = &task.part
                    && let Err(error) = super::columnar::harvest(part, plan, &mut collector)
                {
                    collector.fail(error);
                }
            }
            Layout::Rows(used) => {
                if let Some(Part::Rows(rows)) = &task.part {
                    sql::harvest(rows, used, &mut collector);
                }
            }
            Layout::Otlp { signal, lines: true } => {
                otlp::harvest_lines(&task.bytes, *signal, &mut collector);
            }
            Layout::MetricsText => exposition::harvest(&task.bytes, &mut collector),
            Layout::Otlp { signal, lines: false } => otlp::harvest(&task.bytes, *signal, &mut collector),
        },
        Found::Long => {
            collector.refuse(0, Flaw::Long { limit: options.line_bytes });
            collector.count_lines(1);
        }
        Found::OpenQuote { lines } => {
            (0..lines).for_each(|line| collector.refuse(line, Flaw::OpenQuote));
            collector.count_lines(lines);
        }
    }
    collector.finish()
}

fn read_here<S: Sink>(
    mut feed: Feed<'_>,
    options: &Options,
    settler: &mut Settler<'_, S>,
    tell: &mut dyn FnMut(u64, u64),
) -> Result<(), IntakeError> {
    let mut buffer = Vec::new();
    while let Some(task) = feed.next(buffer)? {
        let outcome = parse(&task, options, &mut settler.sink, &mut settler.streams);
        settler.settle(&task, outcome)?;
        tell(task.bytes_read, settler.report.lines);
        buffer = task.bytes;
    }
    Ok(())
}

/// What comes back to the thread that settles.
enum Message {
    Parsed(u64, Box<(Task, Outcome)>),
    Failed(IntakeError),
    /// A parsing thread panicked; its block will never come.
    Lost,
}

/// One thread reads and unpacks, `threads` parse, this one settles. Plain threads, not a work-stealing pool: the
/// reader spends its time blocked.
fn read_on_threads<S: Sink>(
    mut feed: Feed<'_>,
    options: &Options,
    settler: &mut Settler<'_, S>,
    threads: usize,
    tell: &mut dyn FnMut(u64, u64),
) -> Result<(), IntakeError> {
    // Buffers come back only when settled: a slow thread holds up the reader, and memory stays bounded.
    let depth = 2 * threads + 2;
    let (free, buffers) = channel::<Vec<u8>>();
    let (send_task, tasks) = sync_channel::<(u64, Task)>(depth);
    let (report, messages) = channel::<Message>();
    let tasks = Mutex::new(tasks);
    for _ in 0..depth {
        let _ = free.send(Vec::new());
    }
    thread::scope(|scope| {
        let tasks = &tasks;
        let reader = report.clone();
        scope.spawn(move || {
            let mut number = 0;
            while let Ok(buffer) = buffers.recv() {
                match feed.next(buffer) {
                    Ok(Some(task)) => match send_task.send((number, task)) {
                        Ok(()) => number += 1,
                        Err(_) => return,
                    },
                    Ok(None) => return,
                    Err(error) => {
                        let _ = reader.send(Message::Failed(error));
                        return;
                    }
                }
            }
        });
        let parsers: Vec<_> = (0..threads)
            .map(|_| {
                let (sink, report) = (settler.sink.fork(), report.clone());
                scope.spawn(move || parse_tasks(tasks, options, sink, &report))
            })
            .collect();
        drop(report);
        let outcome = settle_in_order(&messages, &free, settler, tell);
        // Wakes whoever waits for this thread.
        drop((free, messages));
        for parser in parsers {
            match parser.join() {
                Ok((sink, streams)) => {
                    settler.sink.absorb(sink);
                    settler.streams.absorb(streams);
                }
                Err(panic) => std::panic::resume_unwind(panic),
            }
        }
        outcome
    })
}

fn parse_tasks<S: Sink>(
    tasks: &Mutex<Receiver<(u64, Task)>>,
    options: &Options,
    mut sink: S,
    report: &Sender<Message>,
) -> (S, Streams) {
    struct Alarm<'r>(&'r Sender<Message>);
    impl Drop for Alarm<'_> {
        fn drop(&mut self) {
            if thread::panicking() {
                let _ = self.0.send(Message::Lost);
            }
        }
    }
    let _alarm = Alarm(report);
    let mut streams = Streams::default();
    loop {
        // The lock is held while waiting, and nothing can panic under it.
        let Ok(Ok((number, task))) = tasks.lock().map(|tasks| tasks.recv()) else { break };
        let outcome = parse(&task, options, &mut sink, &mut streams);
        if report.send(Message::Parsed(number, Box::new((task, outcome)))).is_err() {
            break;
        }
    }
    (sink, streams)
}

fn settle_in_order<S: Sink>(
    messages: &Receiver<Message>,
    free: &Sender<Vec<u8>>,
    settler: &mut Settler<'_, S>,
    tell: &mut dyn FnMut(u64, u64),
) -> Result<(), IntakeError> {
    let mut early = BTreeMap::new();
    let mut next = 0;
    for message in messages {
        match message {
            Message::Parsed(number, parsed) => {
                early.insert(number, *parsed);
            }
            Message::Failed(error) => return Err(error),
            Message::Lost => return Ok(()),
        }
        while let Some(parsed) = early.remove(&next) {
            let (task, outcome) = parsed;
            settler.settle(&task, outcome)?;
            tell(task.bytes_read, settler.report.lines);
            // The reader may have finished.
            let _ = free.send(task.bytes);
            next += 1;
        }
    }
    Ok(())
}

/// A histogram that only grows, as far as it was read.
enum Series {
    /// Read once, and nothing of it counted.
    Once(Box<Running>),
    /// Counted up to here.
    Upto(Mark),
}

/// Puts the outcomes of blocks together, in the order of the input.
struct Settler<'o, S> {
    options: &'o Options,
    sink: S,
    streams: Streams,
    pairs: Pairs,
    series: BTreeMap<SeriesKey, Series>,
    counts: BTreeMap<(&'static str, &'static str), u64>,
    report: Report,
}

impl<'o, S: Sink> Settler<'o, S> {
    fn new(sources: &[Source], options: &'o Options, sink: S) -> Settler<'o, S> {
        let files = sources
            .iter()
            .map(|source| FileReport { name: source.name().into(), ..FileReport::default() })
            .collect();
        Settler {
            options,
            sink,
            streams: Streams::default(),
            pairs: Pairs::new(options.most_open),
            series: BTreeMap::new(),
            counts: BTreeMap::new(),
            report: Report { files, ..Report::default() },
        }
    }

    fn settle(&mut self, task: &Task, outcome: Outcome) -> Result<(), IntakeError> {
        let Settler { options, sink, streams, report, .. } = self;
        let Some(file) = report.files.get_mut(task.file) else { return Ok(()) };
        if let Some(source) = outcome.failure {
            return Err(IntakeError::Columns { file: file.name.clone(), source });
        }
        if let Some((oldest, newest)) = task.passed {
            report.oldest = Some(report.oldest.map_or(oldest, |time| time.min(oldest)));
            report.newest = Some(report.newest.map_or(newest, |time| time.max(newest)));
        }
        if task.layout.format().is_columnar() {
            // Only rows outside the window are passed over.
            report.left_out.outside_window += task.lines_before;
        }
        file.format = Some(task.layout.format());
        let mut flaws = outcome.flaws;
        let (waits, left_out) = (&mut report.waits, &mut report.left_out);
        self.pairs.settle(&outcome.halves, |line, record| {
            let taken = record.and_then(|record| {
                match options.is_in_window(record.wait.at())? {
                    true => {
                        sink.take(&Record { place: streams.place(record.stream), ..record });
                        *waits += 1;
                    }
                    false => left_out.outside_window += 1,
                }
                Ok(())
            });
            if let Err(flaw) = taken {
                flaws.add(line, flaw);
            }
        });
        for (line, running) in outcome.running {
            // A series whose start is known stands in the file with all that it ever counted. Without it the first
            // reading is what the later ones are compared with.
            let whole = file.format == Some(Format::OtlpMetrics) && running.started.is_some();
            let mark = Series::Upto(running.mark());
            let growth = match self.series.get(&running.key) {
                None if !whole => {
                    self.series.insert(running.key, Series::Once(Box::new(running)));
                    continue;
                }
                None => Running { counts_at_first: true, ..running.clone() }.growth(None),
                Some(Series::Once(first)) => running.growth(Some(&first.mark())),
                Some(Series::Upto(last)) => running.growth(Some(last)),
            };
            let Some(counts) = growth.counts else { continue };
            self.series.insert(running.key, mark);
            let place = streams.place(&running.stream);
            if let Err(flaw) = grown(&running, &counts, options, sink, place, waits, left_out) {
                flaws.add(line, flaw);
            }
        }
        report.waits += outcome.waits;
        report.running_handed_on += outcome.running_taken;
        report.left_out.not_waits += outcome.not_waits;
        report.pairs.handed_on += outcome.halves_taken;
        report.left_out.other_streams += outcome.other_streams;
        report.left_out.outside_window += outcome.outside_window;
        report.left_out.unmeasured += outcome.unmeasured;
        report.left_out.partial += outcome.partial;
        report.left_out.other_messages += outcome.other_messages;
        let room = COMMENTS.saturating_sub(report.comments.len());
        let comments = outcome.comments.into_iter().take(room);
        report.comments.extend(comments.map(|text| Comment { file: file.name.clone(), text }));
        // Lines are numbered within their file, from 1.
        let first = file.lines + task.lines_before + 1;
        file.lines += task.lines_before + outcome.lines;
        report.lines += task.lines_before + outcome.lines;
        file.bad += flaws.counts.values().sum::<u64>();
        add_flaws(&mut self.counts, &mut report.bad.examples, flaws, &file.name, first);
        Ok(())
    }

    fn finish(self) -> Result<(S, Report), IntakeError> {
        let Settler { options, mut sink, mut streams, pairs, series, counts, mut report } = self;
        if let Some((oldest, newest)) = streams.span() {
            report.oldest = Some(report.oldest.map_or(oldest, |time| time.min(oldest)));
            report.newest = Some(report.newest.map_or(newest, |time| time.max(newest)));
        }
        report.pairs.joined = pairs.joined;
        (report.pairs.dropped, report.pairs.let_go) = (pairs.dropped, pairs.let_go);
        report.pairs.ends_alone += pairs.dropped;
        report.pairs.open_unseen += pairs.unseen;
        for series in series.into_values() {
            let Series::Once(running) = series else { continue };
            let place = streams.place(&running.stream);
            let (waits, left_out) = (&mut report.waits, &mut report.left_out);
            // What could be wrong with it was looked for when it was read.
            let _ = grown(&running, &running.histogram, options, &mut sink, place, waits, left_out);
        }
        // No half is without a time, so where there are any there is a newest.
        let seen = report.newest.unwrap_or_default();
        pairs.leave(
            seen,
            |open| match open {
                None => report.pairs.open_unseen += 1,
                Some(record) if options.is_in_window(Some(seen)) == Ok(true) => {
                    sink.take(&Record { place: streams.place(record.stream), ..record });
                    report.waits += 1;
                    report.pairs.open += 1;
                }
                Some(_) => report.left_out.outside_window += 1,
            },
            |id| {
                report.pairs.ends_alone += 1;
                if report.pairs.ends_alone_ids.len() < EXAMPLES {
                    report.pairs.ends_alone_ids.push(super::record::excerpt(id));
                }
            },
        );
        report.pairs.seen = (report.pairs.open > 0).then_some(seen);
        report.suspicions = streams.suspicions();
        report.closed_loops = streams.closed_loops();
        report.bad.count = counts.values().sum();
        report.bad.by_reason =
            counts.into_iter().map(|((field, reason), lines)| BadCount { field, reason, lines }).collect();
        report.bad.by_reason.sort_by_key(|count| std::cmp::Reverse(count.lines));
        match options.bad_lines {
            Allowed::AtMost(allowed) if report.bad.count > allowed => {
                Err(IntakeError::BadLines { report: Box::new(report), allowed })
            }
            _ if report.waits
                + report.pairs.handed_on
                + report.running_handed_on
                + report.left_out.other_streams
                + report.left_out.outside_window
                == 0 =>
            {
                Err(IntakeError::NoWaits { report: Box::new(report) })
            }
            _ => Ok((sink, report)),
        }
    }
}

/// Hands on what a series has grown by.
fn grown<S: Sink>(
    running: &Running,
    counts: &Histogram,
    options: &Options,
    sink: &mut S,
    place: usize,
    waits: &mut u64,
    left_out: &mut LeftOut,
) -> Result<(), Flaw> {
    if !options.is_in_window(running.at)? {
        left_out.outside_window += counts.total();
        return Ok(());
    }
    for wait in running.waits(counts)? {
        sink.take(&Record { stream: &running.stream, place, id: None, wait });
        *waits += 1;
    }
    Ok(())
}

fn add_flaws(
    counts: &mut BTreeMap<(&'static str, &'static str), u64>,
    examples: &mut Vec<BadLine>,
    flaws: Flaws,
    file: &str,
    first_line: u64,
) {
    let room = EXAMPLES.saturating_sub(examples.len());
    examples.extend(flaws.first.into_iter().take(room).map(|(line, flaw)| BadLine {
        file: file.into(),
        line: first_line + line,
        field: flaw.field(),
        kind: flaw.kind(),
        reason: flaw.to_string(),
        remedy: flaw.remedy().into_owned(),
    }));
    for (reason, lines) in flaws.counts {
        *counts.entry(reason).or_default() += lines;
    }
}
