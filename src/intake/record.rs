//! A record, whatever its format: named fields with values, and the wait (or half of one) that they make.

use std::borrow::Cow;

use super::decimal;
use super::flaw::Flaw;
use crate::say;
use crate::wait::{Ending, Wait, WaitError};

/// One wait as a format yields it, borrowed from the line it was read from.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Record<'a> {
    /// The stream's name, checked.
    pub stream: &'a str,
    /// The stream's number, the same for all records of it that a [`crate::intake::Sink`] is handed: a look-up of the name is
    /// done once already. From 0; some may be missing, and another thread's sink knows it by another.
    pub place: usize,
    /// What ties it to the other attempts of its request, if the record says.
    pub id: Option<&'a str>,
    /// The wait.
    pub wait: Wait,
}

/// The fields of a record, in the order of their numbers.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[repr(u8)]
pub(super) enum Field {
    Stream,
    Elapsed,
    Ending,
    At,
    Attempt,
    Id,
    Entered,
    Count,
    Over,
    Upto,
    Started,
    Ended,
}

/// Units that a field's name may end in, and how many make a second.
const UNITS: [(&str, f64); 4] = [("_s", 1.0), ("_ms", 1e3), ("_us", 1e6), ("_ns", 1e9)];

impl Field {
    pub(super) const NUMBER: usize = 12;

    pub(super) fn name(self) -> &'static str {
        match self {
            Field::Stream => "stream",
            Field::Elapsed => "elapsed",
            Field::Ending => "ending",
            Field::At => "at",
            Field::Attempt => "attempt",
            Field::Id => "id",
            Field::Entered => "entered",
            Field::Count => "count",
            Field::Over => "over",
            Field::Upto => "upto",
            Field::Started => "started",
            Field::Ended => "ended",
        }
    }

    #[inline]
    pub(super) fn of(name: &str) -> Option<Field> {
        Some(match name.as_bytes() {
            b"stream" => Field::Stream,
            b"elapsed" => Field::Elapsed,
            b"ending" => Field::Ending,
            b"at" => Field::At,
            b"attempt" => Field::Attempt,
            b"id" => Field::Id,
            b"entered" => Field::Entered,
            b"count" => Field::Count,
            b"over" => Field::Over,
            b"upto" => Field::Upto,
            b"started" => Field::Started,
            b"ended" => Field::Ended,
            _ => return None,
        })
    }

    /// A field by its name or its name with a unit (`elapsed_ms`), and how many units make a second.
    #[inline]
    pub(super) fn with_unit(name: &str) -> Option<(Field, Option<f64>)> {
        if let Some(field) = Field::of(name) {
            return Some((field, None));
        }
        UNITS.into_iter().find_map(|(ending, per_second)| {
            let field = Field::of(name.strip_suffix(ending)?)?;
            (field.is_duration() || field.is_time()).then_some((field, Some(per_second)))
        })
    }

    /// How many of a unit make a second, for a field that may carry one.
    pub(super) fn per_second(self, unit: &str) -> Option<f64> {
        let unit = UNITS.into_iter().find(|(ending, _)| ending.strip_prefix('_') == Some(unit));
        unit.filter(|_| self.is_duration() || self.is_time()).map(|(_, per_second)| per_second)
    }

    pub(super) fn is_duration(self) -> bool {
        matches!(self, Field::Elapsed | Field::Entered | Field::Over | Field::Upto)
    }

    pub(super) fn is_time(self) -> bool {
        matches!(self, Field::At | Field::Started | Field::Ended)
    }

    /// Whether a value in figures is a number (and not a name made of digits).
    pub(super) fn is_number(self) -> bool {
        !matches!(self, Field::Stream | Field::Ending | Field::Id)
    }

    #[inline]
    fn bit(self) -> u16 {
        1 << self as u8
    }
}

/// A field's value before it is understood.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Value<'a> {
    Number(f64),
    Text(&'a str),
}

/// The fields of one record. Made once and refilled for each line.
///
/// Numbers and texts lie apart: an array of [`Value`] would be written in parts and read whole, for which a
/// processor waits.
#[derive(Clone, Debug)]
pub(super) struct Fields<'a> {
    /// Which fields the present line has, a bit each, and which of them are texts.
    seen: u16,
    texts_seen: u16,
    /// Whether a unit stood in the name of `elapsed`.
    unit_given: bool,
    numbers: [f64; Field::NUMBER],
    texts: [&'a str; Field::NUMBER],
}

impl<'a> Fields<'a> {
    pub(super) fn new() -> Fields<'a> {
        Fields {
            seen: 0,
            texts_seen: 0,
            unit_given: false,
            numbers: [0.0; Field::NUMBER],
            texts: [""; Field::NUMBER],
        }
    }

    #[inline]
    pub(super) fn clear(&mut self) {
        self.seen = 0;
        self.texts_seen = 0;
        self.unit_given = false;
    }

    #[inline]
    pub(super) fn has(&self, field: Field) -> bool {
        self.seen & field.bit() != 0
    }

    #[inline]
    pub(super) fn set_number(&mut self, field: Field, number: f64) {
        self.seen |= field.bit();
        self.numbers[field as usize] = number;
    }

    #[inline]
    pub(super) fn set_text(&mut self, field: Field, text: &'a str) {
        self.seen |= field.bit();
        self.texts_seen |= field.bit();
        self.texts[field as usize] = text;
    }

    /// Sets a field whose name carried a unit.
    pub(super) fn set_number_in_unit(&mut self, field: Field, number: f64, per_second: f64) {
        self.unit_given |= field == Field::Elapsed;
        self.set_number(field, number / per_second);
    }

    /// Sets a field whose name carried a unit; the text may all the same bring its own.
    pub(super) fn set_text_in_unit(&mut self, field: Field, text: &'a str, per_second: f64) {
        self.unit_given |= field == Field::Elapsed;
        match text.trim().parse::<f64>() {
            Ok(number) if number.is_finite() => self.set_number(field, number / per_second),
            _ => self.set_text(field, text),
        }
    }

    /// Sets a field from a text that is a number if it looks like one and the field takes numbers.
    pub(super) fn set_figures(&mut self, field: Field, text: &'a str) {
        match field.is_number().then(|| decimal::json_number(text.as_bytes())) {
            Some(Some((number, length))) if length == text.len() => self.set_number(field, number),
            _ => self.set_text(field, text),
        }
    }

    /// The value of a field as text, in figures if it is a number.
    pub(super) fn plain(&self, field: Field) -> Option<Cow<'a, str>> {
        match self.get(field)? {
            Value::Text(text) => Some(Cow::Borrowed(text)),
            Value::Number(number) => Some(Cow::Owned(number.to_string())),
        }
    }

    /// The text of a field that is one.
    pub(super) fn as_text(&self, field: Field) -> Option<&'a str> {
        match self.get(field)? {
            Value::Text(text) => Some(text),
            Value::Number(_) => None,
        }
    }

    /// Puts a number in the place of a text.
    pub(super) fn turn_into_number(&mut self, field: Field, number: f64) {
        self.texts_seen &= !field.bit();
        self.set_number(field, number);
    }

    #[inline]
    fn get(&self, field: Field) -> Option<Value<'a>> {
        match field.bit() {
            bit if self.seen & bit == 0 => None,
            bit if self.texts_seen & bit == 0 => Some(Value::Number(self.numbers[field as usize])),
            _ => Some(Value::Text(self.texts[field as usize])),
        }
    }

    /// Every field with its value, numbers to the last bit.
    #[cfg(test)]
    pub(super) fn told(&self) -> Vec<(Field, String)> {
        use Field::*;
        [Stream, Elapsed, Ending, At, Attempt, Id, Entered, Count, Over, Upto, Started, Ended]
            .into_iter()
            .filter_map(|field| Some((field, format!("{:?} {}", self.get(field)?, self.unit_given))))
            .collect()
    }

    #[inline]
    fn text(&self, field: Field) -> Result<Option<&'a str>, Flaw> {
        match self.get(field) {
            None => Ok(None),
            Some(Value::Text(text)) => Ok(Some(text)),
            Some(Value::Number(_)) => Err(Flaw::Kind { field, found: "a number" }),
        }
    }

    #[inline]
    fn duration(&self, field: Field) -> Result<Option<f64>, Flaw> {
        match self.get(field) {
            None => Ok(None),
            Some(Value::Number(seconds)) => Ok(Some(seconds)),
            Some(Value::Text(text)) => duration(field, text).map(Some),
        }
    }

    #[inline]
    fn time(&self, field: Field) -> Result<Option<f64>, Flaw> {
        match self.get(field) {
            None => Ok(None),
            Some(Value::Number(seconds)) => Ok(Some(seconds)),
            Some(Value::Text(text)) => time(field, text).map(Some),
        }
    }

    /// A time of start or end, which other than `at` is checked nowhere else.
    fn end_time(&self, field: Field) -> Result<Option<f64>, Flaw> {
        let Some(time) = self.time(field)? else { return Ok(None) };
        match Wait::new(1.0, Ending::Done)?.with_at(time) {
            Ok(_) => Ok(Some(time)),
            Err(_) => Err(Flaw::Time { field, text: time.to_string() }),
        }
    }

    fn whole(&self, field: Field) -> Result<Option<u64>, Flaw> {
        let number = match self.get(field) {
            None => return Ok(None),
            Some(Value::Number(number)) => number,
            Some(Value::Text(text)) => text.trim().parse().map_err(|_| Flaw::NotWhole { field })?,
        };
        // 2^53: above it a double no longer tells neighbouring whole numbers apart.
        if number.fract() != 0.0 || !(0.0..=9_007_199_254_740_992.0).contains(&number) {
            return Err(Flaw::NotWhole { field });
        }
        Ok(Some(number as u64))
    }

    #[inline]
    fn ending(&self) -> Result<Option<Ending>, Flaw> {
        let Some(name) = self.text(Field::Ending)? else { return Ok(None) };
        match Ending::parse(name) {
            None => Err(Flaw::Ending { text: excerpt(name) }),
            some => Ok(some),
        }
    }

    fn attempt(&self) -> Result<Option<u32>, Flaw> {
        let Some(number) = self.whole(Field::Attempt)? else { return Ok(None) };
        u32::try_from(number).map(Some).map_err(|_| Flaw::NotWhole { field: Field::Attempt })
    }

    /// Whether `elapsed` was a number of no stated unit, hence taken as seconds.
    #[inline]
    pub(super) fn is_bare(&self) -> bool {
        !self.unit_given && matches!(self.get(Field::Elapsed), Some(Value::Number(_)))
    }
}

/// What a record says.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Made<'a> {
    Whole(Record<'a>),
    Half(Half<'a>),
}

/// A start without its end, or the reverse.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Half<'a> {
    /// The stream.
    pub stream: &'a str,
    /// What ties it to its other half.
    pub id: &'a str,
    /// Which half it is.
    pub side: Side,
    /// When it started or ended, Unix seconds.
    pub time: f64,
    /// Which attempt of its request, from 1.
    pub attempt: u32,
    /// Age at which watching began, s.
    pub entered: f64,
}

/// Which half, and how it ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Side {
    /// It has started.
    Start,
    /// It has ended, and how.
    End(Ending),
}

/// Understands a record's fields. `nameless` is the stream of records that have none, or of all (`one_stream`). The stream's name is the
/// caller's to check, once for each stream.
#[inline(always)]
pub(super) fn make<'a>(
    fields: &Fields<'a>,
    nameless: Option<&'a str>,
    one_stream: bool,
) -> Result<Made<'a>, Flaw> {
    let named = if one_stream { None } else { fields.text(Field::Stream)? };
    let stream = named.or(nameless).ok_or(Flaw::Missing { field: Field::Stream })?;
    let id = fields.text(Field::Id)?;
    let ending = fields.ending()?;
    const PLAIN: u16 = 1 << Field::Stream as u8
        | 1 << Field::Elapsed as u8
        | 1 << Field::Ending as u8
        | 1 << Field::At as u8
        | 1 << Field::Id as u8;
    if fields.seen & !PLAIN != 0 {
        return make_rare(fields, stream, id, ending);
    }
    let Some(elapsed) = fields.duration(Field::Elapsed)? else {
        return Err(Flaw::Missing { field: Field::Elapsed });
    };
    let mut wait = Wait::new(elapsed, ending.unwrap_or(Ending::Done))?;
    if let Some(at) = fields.time(Field::At)? {
        wait = wait.with_at(at)?;
    }
    Ok(Made::Whole(Record { stream, place: 0, id, wait }))
}

fn make_rare<'a>(
    fields: &Fields<'a>,
    stream: &'a str,
    id: Option<&'a str>,
    ending: Option<Ending>,
) -> Result<Made<'a>, Flaw> {
    let elapsed = fields.duration(Field::Elapsed)?;
    let (over, upto) = (fields.duration(Field::Over)?, fields.duration(Field::Upto)?);
    let (started, ended) = (fields.end_time(Field::Started)?, fields.end_time(Field::Ended)?);
    let at = fields.time(Field::At)?;
    let attempt = fields.attempt()?.unwrap_or(1);
    let entered = fields.duration(Field::Entered)?.unwrap_or(0.0);
    let count = fields.whole(Field::Count)?;
    let (wait, ended) = match (elapsed, over, upto) {
        (Some(elapsed), None, None) => {
            let wait = Wait::new(elapsed, ending.unwrap_or(Ending::Done))?;
            (wait, ended.or(started.map(|started| started + elapsed)))
        }
        (Some(_), Some(_), _) => return Err(Flaw::Clash { field: Field::Over, with: Field::Elapsed }),
        (Some(_), None, Some(_)) => return Err(Flaw::Clash { field: Field::Upto, with: Field::Elapsed }),
        (None, Some(over), Some(upto)) => (Wait::between(over, upto, ending.unwrap_or(Ending::Done))?, ended),
        (None, Some(_), None) => return Err(Flaw::Missing { field: Field::Upto }),
        (None, None, Some(_)) => return Err(Flaw::Missing { field: Field::Over }),
        (None, None, None) => match (started, ended) {
            (Some(started), Some(ended)) => {
                let wait = between_times(started, ended, ending.unwrap_or(Ending::Done))?;
                (wait, Some(ended))
            }
            (None, None) => return Err(Flaw::Missing { field: Field::Elapsed }),
            (Some(time), None) | (None, Some(time)) => {
                let (side, field) = match started {
                    Some(_) => (Side::Start, Field::Started),
                    None => (Side::End(ending.unwrap_or(Ending::Done)), Field::Ended),
                };
                let id = id.filter(|id| !id.is_empty()).ok_or(Flaw::Untied { field })?;
                if count.is_some_and(|count| count != 1) {
                    return Err(Flaw::Clash { field: Field::Count, with: field });
                }
                if attempt == 0 {
                    return Err(WaitError::Attempt.into());
                }
                return Ok(Made::Half(Half { stream, id, side, time, attempt, entered }));
            }
        },
    };
    let mut wait = wait.with_attempt(attempt)?.with_entered(entered)?.with_count(count.unwrap_or(1))?;
    if let Some(at) = at.or(ended) {
        wait = wait.with_at(at)?;
    }
    Ok(Made::Whole(Record { stream, place: 0, id, wait }))
}

/// The wait from one time to another, Unix seconds.
pub(super) fn between_times(started: f64, ended: f64, ending: Ending) -> Result<Wait, Flaw> {
    if ended < started {
        return Err(Flaw::Backwards { by: started - ended });
    }
    Ok(Wait::new(ended - started, ending)?.with_at(ended)?)
}

fn duration(field: Field, text: &str) -> Result<f64, Flaw> {
    let infinite = matches!(text.trim().trim_start_matches('+'), "inf" | "Inf");
    if infinite && field == Field::Upto {
        return Ok(f64::INFINITY);
    }
    say::parse_duration(text).map_err(|error| Flaw::Duration { field, text: error.text })
}

/// RFC 3339, or Unix seconds in figures. A double holds the present to about a quarter of a microsecond.
fn time(field: Field, text: &str) -> Result<f64, Flaw> {
    let text = text.trim();
    if let Ok(time) = text.parse::<jiff::Timestamp>() {
        return Ok(time.as_second() as f64 + f64::from(time.subsec_nanosecond()) / 1e9);
    }
    match text.parse::<f64>() {
        Ok(seconds) if seconds.is_finite() => Ok(seconds),
        _ => Err(Flaw::Time { field, text: excerpt(text) }),
    }
}

/// The first 60 characters.
pub(super) fn excerpt(text: &str) -> String {
    text.chars().take(60).collect()
}
