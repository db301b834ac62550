//! Reading the named files into a book, with a progress bar where someone watches.

use std::io::{self, IsTerminal, Write};
use std::time::Duration;

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use super::exit::{Exit, Failure};
use super::options::{Common, Reading};
use crate::intake::{self, IntakeError, Record, Report, Sink, Source};
use crate::tally::Book;

/// Counts what is read.
#[derive(Default)]
struct Counting(Book);

impl Sink for Counting {
    #[inline]
    fn take(&mut self, record: &Record<'_>) {
        // The reader has checked the name.
        let _ = self.0.add(record.stream, &record.wait);
    }

    fn fork(&self) -> Self {
        Counting::default()
    }

    fn absorb(&mut self, other: Self) {
        self.0.merge(other.0);
    }
}

/// Reads all files and tells on standard error what was left out.
pub(super) fn book(reading: &Reading, common: &Common) -> Result<(Book, Report), Failure> {
    let sources: Vec<Source> = reading.files.iter().map(|file| Source::argument(file)).collect();
    let bar = bar();
    let outcome = intake::read(sources, &reading.options(common), Counting::default(), &mut |progress| {
        if let Some(total) = progress.total {
            bar.set_length(total);
        }
        bar.set_position(progress.bytes);
    });
    bar.finish_and_clear();
    match outcome {
        Ok((Counting(book), report)) => {
            tell(&report);
            Ok((book, report))
        }
        Err(error) => {
            if let IntakeError::BadLines { report, .. } | IntakeError::NoWaits { report } = &error {
                tell(report);
            }
            let exit = match error {
                IntakeError::Read { .. } => Exit::System,
                _ => Exit::BadInput,
            };
            Err(Failure { exit, error: error.into() })
        }
    }
}

/// Hidden unless standard error is a terminal and the reading lasts.
fn bar() -> ProgressBar {
    if !io::stderr().is_terminal() {
        return ProgressBar::hidden();
    }
    let bar = ProgressBar::with_draw_target(None, ProgressDrawTarget::stderr_with_hz(5));
    if let Ok(style) = ProgressStyle::with_template("reading {bytes} of {total_bytes} {wide_bar} {eta}") {
        bar.set_style(style);
    }
    bar.enable_steady_tick(Duration::from_millis(500));
    bar
}

/// What was read and left out; nothing if all is well.
fn tell(report: &Report) {
    let mut lines = Vec::new();
    if report.bad.count > 0 {
        lines.push(format!("{} bad lines left out:", report.bad.count));
        lines.extend(
            report.bad.by_reason.iter().map(|b| format!("  {} x {}: {}", b.lines, b.field, b.reason)),
        );
        lines.extend(report.bad.examples.iter().map(|bad| format!("  {bad}")));
        let more = report.bad.count.saturating_sub(report.bad.examples.len() as u64);
        if more > 0 {
            lines.push(format!("  and {more} more"));
        }
    }
    let left = &report.left_out;
    for (count, what) in [
        (left.other_streams, "waits of other streams left out"),
        (left.outside_window, "waits outside the asked time left out"),
        (left.unmeasured, "jobs without the asked time left out"),
        (left.partial, "records of parts of a job left out"),
        (report.pairs.ends_alone, "ends without a start left out: how long they waited is not known"),
        (report.pairs.open_unseen, "starts at the newest time left out: they say nothing yet"),
    ] {
        if count > 0 {
            lines.push(format!("{count} {what}"));
        }
    }
    if report.pairs.open > 0 {
        lines.push(format!(
            "{} starts without an end taken as still waiting at the newest time",
            report.pairs.open
        ));
    }
    let mut err = io::stderr().lock();
    for line in lines {
        let _ = writeln!(err, "outwait: {line}");
    }
}
