//! Reading the named files into a book, with a progress bar where someone watches.

use std::collections::HashMap;
use std::ffi::OsStr;
use std::io::{self, IsTerminal, Write};
use std::time::{Duration, Instant};

use anyhow::anyhow;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use rayon::prelude::*;

use super::exit::{Exit, Failure};
use super::options::{Common, Reading};
use super::text;
use crate::advice::Caution;
use crate::advise::Terms;
use crate::intake::{self, IntakeError, Record, Report, Sink, Source};
use crate::say;
use crate::tally::{Book, Days};

/// How long the reading lasts before a bar shows.
const PATIENCE: Duration = Duration::from_millis(500);

/// Counts what is read.
#[derive(Default)]
struct Counting {
    /// By the reader's number.
    streams: Vec<Option<(String, Days)>>,
    /// What other threads counted.
    others: Vec<Option<(String, Days)>>,
}

impl Sink for Counting {
    #[inline]
    fn take(&mut self, record: &Record<'_>) {
        match self.streams.get_mut(record.place) {
            Some(Some((_, days))) => days.add(&record.wait),
            _ => self.open(record),
        }
    }

    fn fork(&self) -> Self {
        Counting::default()
    }

    fn absorb(&mut self, other: Self) {
        self.others.extend(other.others);
        self.others.extend(other.streams);
    }
}

impl Counting {
    #[cold]
    fn open(&mut self, record: &Record<'_>) {
        if self.streams.len() <= record.place {
            self.streams.resize_with(record.place + 1, || None);
        }
        let days =
            &mut self.streams[record.place].get_or_insert((record.stream.to_owned(), Days::default())).1;
        days.add(&record.wait);
    }

    /// Everything together; streams are joined on all cores.
    fn book(self) -> Book {
        let mut parts: HashMap<String, Vec<Days>> = HashMap::new();
        for (name, days) in self.others.into_iter().chain(self.streams).flatten() {
            parts.entry(name).or_default().push(days);
        }
        let join = |(name, parts): (String, Vec<Days>)| {
            let whole = parts.into_iter().reduce(|mut whole, part| {
                whole.merge(&part);
                whole
            });
            (name, whole.unwrap_or_default())
        };
        parts.into_par_iter().map(join).collect::<Vec<_>>().into_iter().collect()
    }
}

/// Reads all files and tells on standard error what was left out.
pub(super) fn book(reading: &Reading, common: &Common) -> Result<(Book, Report), Failure> {
    let (counting, report) = into(Counting::default(), reading, common)?;
    Ok((counting.book(), report))
}

/// The same into any sink.
pub(super) fn into<S: Sink>(sink: S, reading: &Reading, common: &Common) -> Result<(S, Report), Failure> {
    once(reading, common)?;
    let sources = sources(reading)?;
    let (sink, report) = read(sources, sink, reading, common)?;
    tell(&report);
    Ok((sink, report))
}

/// Counts what the sources hold and tells on standard error what was left out.
pub(super) fn counted(
    sources: Vec<Source>,
    reading: &Reading,
    common: &Common,
) -> Result<(Book, Report), Failure> {
    let (counting, report) = read(sources, Counting::default(), reading, common)?;
    tell(&report);
    Ok((counting.book(), report))
}

/// The files that are named, and what a database answers.
pub(super) fn sources(reading: &Reading) -> Result<Vec<Source>, Failure> {
    let files = reading.files.iter().map(|file| Source::argument(file));
    Ok(files.chain(reading.asked.source()?).collect())
}

/// Standard input can be read only once, so it can be named only once.
pub(super) fn once(reading: &Reading, common: &Common) -> Result<(), Failure> {
    let standard_input = |name: &OsStr| name == "-";
    let named = reading.files.iter().filter(|file| standard_input(file)).count();
    let policy = common.policy_file().is_some_and(|file| standard_input(file.as_os_str()));
    if named + usize::from(policy) > 1 {
        return Err(Failure::new(Exit::Usage, anyhow!("standard input (`-`) is named more than once"))
            .with_remedy("name it once; it can be read only once"));
    }
    Ok(())
}

/// Reads the sources into a sink, under a progress bar. Tells of what was left out only if that is why it fails.
pub(super) fn read<S: Sink>(
    sources: Vec<Source>,
    sink: S,
    reading: &Reading,
    common: &Common,
) -> Result<(S, Report), Failure> {
    let mut bar = Bar::new();
    let outcome = intake::read(sources, &reading.options(common), sink, &mut |progress| {
        bar.show(progress.bytes, progress.total);
    });
    bar.0.finish_and_clear();
    outcome.map_err(failure)
}

fn failure(error: IntakeError) -> Failure {
    match error {
        // Told line by line above it, so that the last line need not repeat the first.
        IntakeError::BadLines { report, allowed } => {
            tell(&report);
            let be = |n: u64| format!("{} {}", say::count(n as f64), if n == 1 { "is" } else { "are" });
            let told = anyhow!(
                "of {} {} bad, and {} allowed; nothing was reckoned",
                text::counted(report.lines, "line"),
                be(report.bad.count),
                be(allowed)
            );
            Failure::new(Exit::BadInput, told)
                .with_remedy("mend them, or leave them out with `--bad-lines N` or `--bad-lines all`")
        }
        IntakeError::NoWaits { report } => {
            tell(&report);
            Failure::new(Exit::BadInput, IntakeError::NoWaits { report })
        }
        IntakeError::Open { .. } => {
            Failure::new(Exit::BadInput, error).with_remedy("name a file that exists and may be read")
        }
        IntakeError::Read { .. } => {
            Failure::new(Exit::System, error).with_remedy("see to the disk or the pipe, and start again")
        }
        IntakeError::Query { ref source, .. } => match source.remedy() {
            Some(remedy) => Failure::new(Exit::BadInput, error).with_remedy(remedy),
            None => Failure::new(Exit::BadInput, error),
        },
        _ => Failure::new(Exit::BadInput, error),
    }
}

/// A word about a stream whose log looks like that of a sampler.
pub(super) fn closed_loop(report: &Report, terms: &Terms<'_>, stream: &str) -> Option<Caution> {
    let found = report.closed_loops.iter().find(|found| found.stream == stream)?;
    terms.closed_loop(stream, found.every, found.longest)
}

/// Hidden unless standard error is a terminal and the reading lasts.
struct Bar(ProgressBar, Instant);

impl Bar {
    fn new() -> Bar {
        Bar(ProgressBar::hidden(), Instant::now())
    }

    fn show(&mut self, bytes: u64, total: Option<u64>) {
        let Bar(bar, begun) = self;
        if bar.is_hidden() && begun.elapsed() > PATIENCE && io::stderr().is_terminal() {
            bar.set_draw_target(ProgressDrawTarget::stderr_with_hz(5));
            if let Ok(style) =
                ProgressStyle::with_template("reading {bytes} of {total_bytes} {wide_bar} {eta}")
            {
                bar.set_style(style);
            }
        }
        if let Some(total) = total {
            bar.set_length(total);
        }
        bar.set_position(bytes);
    }
}

/// What was read and left out; nothing if all is well.
fn tell(report: &Report) {
    let mut lines = Vec::new();
    if report.bad.count > 0 {
        lines.push(format!("{}:", text::counted(report.bad.count, "bad line")));
        lines.extend(
            report
                .bad
                .by_reason
                .iter()
                .map(|b| format!("  {} x {}: {}", say::count(b.lines as f64), b.field, b.reason)),
        );
        lines.extend(report.bad.examples.iter().map(|bad| format!("  {bad}")));
        let more = report.bad.count.saturating_sub(report.bad.examples.len() as u64);
        if more > 0 {
            lines.push(format!("  and {} more", say::count(more as f64)));
        }
    }
    let left = &report.left_out;
    for (count, noun, what) in [
        (left.other_streams, "wait", "of other streams left out"),
        (left.outside_window, "wait", "outside the asked time left out"),
        (left.unmeasured, "job", "without the asked time left out"),
        (left.partial, "record", "of parts of a job left out"),
        (left.other_messages, "message", "that are no records left out"),
        (
            report.pairs.dropped,
            "end",
            "without a start dropped early: too many halves of waits were open at once",
        ),
        (
            report.pairs.let_go,
            "start",
            "taken as still waiting early: too many halves of waits were open at once",
        ),
        (report.pairs.ends_alone, "end", "without a start left out: how long they waited is not known"),
        (report.pairs.open_unseen, "start", "at the newest time left out: they say nothing yet"),
    ] {
        if count > 0 {
            lines.push(format!("{} {what}", text::counted(count, noun)));
        }
    }
    if report.pairs.open > 0 {
        lines.push(format!(
            "{} without an end taken as still waiting at the newest time",
            text::counted(report.pairs.open, "start")
        ));
    }
    for line in lines {
        note(&line);
    }
}

/// A line on standard error beside the answer.
pub(super) fn note(line: &str) {
    let _ = writeln!(io::stderr(), "outwait: {line}");
}
