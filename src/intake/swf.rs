//! The Standard Workload Format, version 2.2, of job logs (Feitelson, Parallel Workloads Archive; Chapin et al.
//! 1999): a line a job of 18 numbers, -1 where one is missing, after header comments that begin with a semicolon.
//!
//! Times are whole seconds, so a time of 0 says only that it was shorter than one.

use std::fmt::Write as _;

use super::collect::Collector;
use super::flaw::Flaw;
use super::lines::Lines;
use super::record::{Field, Record, excerpt};
use super::{Measure, Sink};
use crate::wait::{Ending, Wait};

/// Fields of a line, counted from 0, that are read here.
const JOB: usize = 0;
const SUBMIT: usize = 1;
const WAIT: usize = 2;
const RUN: usize = 3;
const STATUS: usize = 10;
const QUEUE: usize = 14;
const PARTITION: usize = 15;
const FIELDS: usize = 18;

/// `UnixStartTime` of a file's header: the Unix time of its second 0. `None` where the header does not say, or
/// says 0 because it is not known.
pub(super) fn unix_start(head: &[u8]) -> Option<f64> {
    head.split(|&byte| byte == b'\n')
        .map_while(|line| {
            line.trim_ascii().strip_prefix(b";").or(line.trim_ascii().is_empty().then_some(b""))
        })
        .filter_map(|comment| std::str::from_utf8(comment).ok()?.trim().strip_prefix("UnixStartTime:"))
        .find_map(|value| value.trim().parse().ok())
        .filter(|&start| start > 0.0)
}

/// Reads a block of whole lines.
pub(super) fn harvest<S: Sink>(
    block: &[u8],
    unix_start: Option<f64>,
    measure: Measure,
    collector: &mut Collector<'_, S>,
) {
    let mut stream = String::new();
    let mut lines = Lines::new(block, collector.line_limit());
    for (number, line) in lines.by_ref() {
        let outcome = line.and_then(|line| match line.trim_start().strip_prefix(';') {
            Some(comment) => {
                collector.comment(comment.trim());
                Ok(())
            }
            None => take(line, unix_start, measure, &mut stream, collector),
        });
        if let Err(flaw) = outcome {
            collector.refuse(number, flaw);
        }
    }
    collector.count_lines(lines.number());
}

fn take<S: Sink>(
    line: &str,
    unix_start: Option<f64>,
    measure: Measure,
    stream: &mut String,
    collector: &mut Collector<'_, S>,
) -> Result<(), Flaw> {
    match job(line, unix_start, measure)? {
        Job::Unmeasured => collector.unmeasured(),
        Job::Partial => collector.partial(),
        Job::Wait { id, place, wait } => {
            stream.clear();
            let stream = match place {
                Some((kind, number)) if collector.one_stream().is_none() => {
                    // Writing to a text cannot fail.
                    let _ = write!(stream, "{kind}-{number}");
                    stream
                }
                _ => collector.nameless().ok_or(Flaw::Missing { field: Field::Stream })?,
            };
            collector.whole(Record { stream, place: 0, id: Some(id), wait }, false)?;
        }
    }
    Ok(())
}

enum Job<'a> {
    /// The time asked for is missing.
    Unmeasured,
    /// A stretch of a job that was checkpointed or swapped out; another line has the whole job.
    Partial,
    Wait {
        id: &'a str,
        place: Option<(&'static str, i64)>,
        wait: Wait,
    },
}

fn job(line: &str, unix_start: Option<f64>, measure: Measure) -> Result<Job<'_>, Flaw> {
    let mut texts = [""; FIELDS];
    let mut found = 0;
    for text in line.split_ascii_whitespace() {
        if let Some(slot) = texts.get_mut(found) {
            *slot = text;
        }
        found += 1;
    }
    if found != FIELDS {
        return Err(Flaw::SwfFields { found });
    }
    let number = |field: usize, name: &'static str| match texts[field].parse::<f64>() {
        Ok(number) if number.is_finite() => Ok(number),
        _ => Err(Flaw::SwfNumber { field: name, text: excerpt(texts[field]) }),
    };
    let whole = |field: usize, name: &'static str| {
        texts[field].parse::<i64>().map_err(|_| Flaw::SwfNumber { field: name, text: excerpt(texts[field]) })
    };
    // Anything below 0 is missing.
    let given = |number: f64| (number >= 0.0).then_some(number);
    let (submit, wait) = (given(number(SUBMIT, "submit time")?), given(number(WAIT, "wait time")?));
    let run = given(number(RUN, "run time")?);
    let status = whole(STATUS, "status")?;
    let (queue, partition) = (whole(QUEUE, "queue")?, whole(PARTITION, "partition")?);
    if matches!(status, 2..=4) {
        return Ok(Job::Partial);
    }
    // A job cancelled in the queue has no run time, or one of 0.
    let ran = match run {
        Some(run) => run > 0.0 || status != CANCELLED,
        None => matches!(status, FAILED | COMPLETED),
    };
    let (elapsed, ending) = match measure {
        Measure::Wait => (wait, if ran { Ending::Done } else { Ending::GaveUp }),
        Measure::Run => {
            let ending = match status {
                FAILED => Ending::Failed,
                CANCELLED => Ending::GaveUp,
                _ => Ending::Done,
            };
            (run.filter(|_| ran), ending)
        }
    };
    let Some(elapsed) = elapsed else { return Ok(Job::Unmeasured) };
    let mut made =
        if elapsed == 0.0 { Wait::between(0.0, 1.0, ending)? } else { Wait::new(elapsed, ending)? };
    let before_run = match measure {
        Measure::Wait => Some(0.0),
        Measure::Run => wait,
    };
    if let (Some(start), Some(submit), Some(before_run)) = (unix_start, submit, before_run) {
        made = made.with_at(start + submit + before_run + elapsed)?;
    }
    let place = match (queue, partition) {
        (0.., _) => Some(("queue", queue)),
        (_, 0..) => Some(("partition", partition)),
        _ => None,
    };
    Ok(Job::Wait { id: texts[JOB], place, wait: made })
}

const FAILED: i64 = 0;
const COMPLETED: i64 = 1;
const CANCELLED: i64 = 5;
