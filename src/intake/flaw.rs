//! Why a line was refused: the field, the reason, the remedy.

use std::borrow::Cow;

use super::record::Field;
use super::telemetry::TelemetryFlaw;
use crate::say;
use crate::wait::{StreamError, WaitError};

#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub(super) enum Flaw {
    #[error("the line is not UTF-8 text")]
    NotText,
    #[error("the line is longer than {limit} bytes")]
    Long { limit: usize },
    #[error("a quotation mark is never closed")]
    OpenQuote,
    #[error("not JSON: {reason}")]
    NotJson { field: Option<Field>, reason: String },
    #[error("the row has {found} cells, the header {expected}")]
    Cells { found: usize, expected: usize },
    #[error("the pattern does not match {text:?}")]
    Unlike { text: String },
    #[error("the line has {found} fields, not 18")]
    SwfFields { found: usize },
    #[error("{text:?} is not a number")]
    SwfNumber { field: &'static str, text: String },
    #[error("it is missing")]
    Missing { field: Field },
    #[error("it stands there twice")]
    Twice { field: Field },
    #[error("it is {found}")]
    Kind { field: Field, found: &'static str },
    #[error("{text:?} is not a duration")]
    Duration { field: Field, text: String },
    #[error("{text:?} is not a time")]
    Time { field: Field, text: String },
    #[error("{text:?} is not an ending")]
    Ending { text: String },
    #[error("it is not a whole number from 0")]
    NotWhole { field: Field },
    #[error("it contradicts `{}`", with.name())]
    Clash { field: Field, with: Field },
    #[error("`{}` stands alone, and nothing ties it to the other half of the wait", field.name())]
    Untied { field: Field },
    #[error("a wait with the id {id:?} has {} already, and is still without the other half", field.name())]
    Again { field: Field, id: String },
    #[error("it lies {} before the start", say::duration(*by))]
    Backwards { by: f64 },
    #[error("it is missing, and a window of time was asked for")]
    Undated,
    #[error("{0}")]
    Wait(#[from] WaitError),
    #[error("{0}")]
    Stream(#[from] StreamError),
    #[error("{0}")]
    Telemetry(#[from] TelemetryFlaw),
}

impl Flaw {
    /// The field at fault; `line` where it is the line as a whole.
    pub(super) fn field(&self) -> &'static str {
        match self {
            Flaw::NotText | Flaw::Long { .. } | Flaw::OpenQuote => "line",
            Flaw::Cells { .. } | Flaw::Unlike { .. } | Flaw::SwfFields { .. } => "line",
            Flaw::NotJson { field, .. } => field.map_or("line", Field::name),
            Flaw::SwfNumber { field, .. } => field,
            Flaw::Missing { field }
            | Flaw::Twice { field }
            | Flaw::Kind { field, .. }
            | Flaw::Duration { field, .. }
            | Flaw::Time { field, .. }
            | Flaw::NotWhole { field }
            | Flaw::Again { field, .. }
            | Flaw::Clash { field, .. } => field.name(),
            Flaw::Ending { .. } => Field::Ending.name(),
            Flaw::Untied { .. } => Field::Id.name(),
            Flaw::Backwards { .. } => Field::Ended.name(),
            Flaw::Undated => Field::At.name(),
            Flaw::Wait(error) => error.field(),
            Flaw::Stream(_) => Field::Stream.name(),
            Flaw::Telemetry(flaw) => flaw.field(),
        }
    }

    /// The reason without the value, so that lines can be counted by it.
    pub(super) fn kind(&self) -> &'static str {
        match self {
            Flaw::NotText => "not UTF-8 text",
            Flaw::Long { .. } => "too long",
            Flaw::OpenQuote => "a quotation mark never closed",
            Flaw::NotJson { .. } => "not JSON",
            Flaw::Cells { .. } => "not as many cells as the header",
            Flaw::Unlike { .. } => "not like the pattern",
            Flaw::SwfFields { .. } => "not 18 fields",
            Flaw::SwfNumber { .. } => "not a number",
            Flaw::Missing { .. } => "missing",
            Flaw::Twice { .. } => "given twice",
            Flaw::Kind { .. } => "of the wrong type",
            Flaw::Duration { .. } => "not a duration",
            Flaw::Time { .. } => "not a time",
            Flaw::Ending { .. } => "not an ending",
            Flaw::NotWhole { .. } => "not a whole number",
            Flaw::Clash { .. } => "contradicts another field",
            Flaw::Untied { .. } => "missing in half a wait",
            Flaw::Again { .. } => "the same half of a wait again",
            Flaw::Backwards { .. } => "before the start",
            Flaw::Undated => "missing, and a window was asked for",
            Flaw::Wait(WaitError::Age { value, .. }) if *value == 0.0 => "zero",
            Flaw::Wait(WaitError::Age { value, .. }) if *value < 0.0 => "negative",
            Flaw::Wait(WaitError::Age { .. }) => "too long for an age in seconds",
            Flaw::Wait(WaitError::EmptyBucket { .. }) => "an empty bucket",
            Flaw::Wait(WaitError::Entered { .. }) => "not before the end",
            Flaw::Wait(WaitError::Attempt | WaitError::Count { .. }) => "out of range",
            Flaw::Wait(WaitError::At { .. }) => "not a time in Unix seconds",
            Flaw::Stream(StreamError::Empty) => "empty",
            Flaw::Stream(StreamError::Long { .. }) => "too long",
            Flaw::Stream(StreamError::Letter { .. }) => "a character that a name cannot have",
            Flaw::Telemetry(flaw) => flaw.kind(),
        }
    }

    /// What to do about it.
    pub(super) fn remedy(&self) -> Cow<'static, str> {
        Cow::Borrowed(match self {
            Flaw::NotText => "save the file as UTF-8",
            Flaw::Long { .. } => {
                "write one record a line; a record of a wait needs no more than a few hundred bytes"
            }
            Flaw::OpenQuote => "close the quotation mark, and double those inside a quoted cell",
            Flaw::NotJson { .. } => "write one JSON object a line; JSON has no NaN and no infinity",
            Flaw::Cells { .. } => {
                "give every row as many cells as the header; quote a cell that holds a comma"
            }
            Flaw::Unlike { .. } => {
                "widen the pattern, or put up with such lines by `--bad-lines`; lines of waits that it misses bend the advice"
            }
            Flaw::SwfFields { .. } => {
                "a line of the Standard Workload Format has 18 numbers, -1 where one is missing"
            }
            Flaw::SwfNumber { .. } => "write a number, -1 if it is missing",
            Flaw::Missing { field: Field::Stream } => StreamError::Empty.remedy(),
            Flaw::Missing { field: Field::Elapsed } => {
                "give `elapsed`, or `over` and `upto`, or `started` and `ended`"
            }
            Flaw::Missing { field: Field::Upto } => "give `upto` beside `over`; it may be \"inf\"",
            Flaw::Missing { .. } => "give it",
            Flaw::Twice { .. } => "keep one of them",
            Flaw::Kind { field, .. } if field.is_time() => WaitError::At { at: 0.0 }.remedy(),
            Flaw::Kind { field: Field::Attempt | Field::Count, .. } => {
                "write a whole number, or leave it out"
            }
            Flaw::Kind { field: Field::Stream | Field::Ending | Field::Id, .. } => {
                "write a text in quotation marks"
            }
            Flaw::Kind { .. } | Flaw::Duration { .. } => {
                "write seconds (0.25) or units of a fixed length (\"250ms\", \"2d 4h\")"
            }
            Flaw::Time { .. } => WaitError::At { at: 0.0 }.remedy(),
            Flaw::Ending { .. } => {
                "write done, failed, gave_up or waiting, or say what it stands for by `--ending-of`"
            }
            Flaw::NotWhole { .. } => "write a whole number, or leave it out",
            Flaw::Clash { field: Field::Count, .. } => "write a start and an end for each wait",
            Flaw::Clash { .. } => "give either `elapsed`, or `over` and `upto`",
            Flaw::Untied { .. } => "give start and end the same `id`, or write both in one line",
            Flaw::Again { .. } => {
                "give each wait its own `id`, or number the `attempt` in its start and in its end"
            }
            Flaw::Backwards { .. } => "look for two clocks that disagree, or for an `id` used twice",
            Flaw::Undated => "give the time in `at`, or ask for no window",
            Flaw::Wait(WaitError::Age { value, field }) if *value == 0.0 && *field != "upto" => {
                "a wait too short for the clock is \"over\":0 and \"upto\": the clock's step, in place of `elapsed`"
            }
            Flaw::Wait(error) => error.remedy(),
            Flaw::Stream(error) => error.remedy(),
            Flaw::Telemetry(flaw) => flaw.remedy(),
        })
    }
}
