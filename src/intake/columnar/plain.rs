//! Rows that are plainly sound, found out column by column. Any other is left to be read field by field: what is wrong with
//! a row, and how it is told, is found out in one place.

use std::borrow::Cow;

use super::cells::Column;
use crate::intake::Sink;
use crate::intake::collect::{Collector, Row};
use crate::intake::mapping::Mapping;
use crate::intake::record::{Field, Fields};
use crate::wait::{Ending, Wait, is_age, is_time};

/// The number of no stream.
const NONE: u32 = u32::MAX;

/// What the columns of a part say of each row, if all are of fields and types that plain rows have.
pub(super) struct Plain<'a> {
    /// The number of its stream; [`NONE`] for a row that is not plain.
    streams: Vec<u32>,
    endings: Vec<Option<Ending>>,
    ages: Cow<'a, [f64]>,
    /// Whether the ages have no stated unit.
    bare: bool,
    /// Not a number where there is none.
    times: Cow<'a, [f64]>,
    /// Whether each has one.
    dated: bool,
    attempts: Vec<u32>,
    ids: Option<&'a Column<'a>>,
}

impl<'a> Plain<'a> {
    pub(super) fn of<S: Sink>(
        columns: &'a [Column<'a>],
        rows: usize,
        collector: &mut Collector<'_, S>,
    ) -> Option<Plain<'a>> {
        if !columns.iter().all(|column| is_plain(column.field)) {
            return None;
        }
        let column = |field| columns.iter().find(|column| column.field == field);
        let named = column(Field::Stream).filter(|_| collector.one_stream().is_none());
        let mut streams = match named {
            Some(column) => {
                let mut streams = column.names(|name| number(name, collector))?;
                column.fill_missing(&mut streams, NONE);
                streams
            }
            None => vec![number(collector.nameless()?.as_bytes(), collector); rows],
        };
        let endings = match column(Field::Ending) {
            Some(column) => {
                let mapping = collector.mapping();
                let mut endings = column.names(|text| ending(text, mapping))?;
                column.fill_missing(&mut endings, Some(Ending::Done));
                endings
            }
            None => vec![Some(Ending::Done); rows],
        };
        let elapsed = column(Field::Elapsed)?;
        // Where there is none it is not sound either.
        let ages = elapsed.filled(0.0)?;
        keep(&mut streams, &ages, is_age);
        let times = match column(Field::At) {
            Some(column) => {
                let mut times = column.filled(0.0)?;
                keep(&mut streams, &times, is_time);
                if !column.is_full() {
                    column.fill_missing(times.to_mut(), f64::NAN);
                }
                if collector.is_windowed() {
                    column.fill_missing(&mut streams, NONE);
                }
                times
            }
            None if collector.is_windowed() => return None,
            None => vec![f64::NAN; rows].into(),
        };
        let attempts = match column(Field::Attempt) {
            Some(column) => {
                let attempts = column.filled(1.0)?;
                // Whole, and in range: else it comes out as another number.
                keep(&mut streams, &attempts, |number| number >= 1.0 && f64::from(number as u32) == number);
                attempts.iter().map(|&number| number as u32).collect()
            }
            None => vec![1; rows],
        };
        Some(Plain {
            streams,
            endings,
            ages,
            bare: !elapsed.is_in_seconds(),
            times,
            dated: column(Field::At).is_some_and(Column::is_full),
            attempts,
            ids: column(Field::Id),
        })
    }

    /// The rows, if each is plain and has a time, and none has an identifier.
    #[inline(always)]
    pub(super) fn even_rows(&self) -> Option<impl Iterator<Item = Row<'_>>> {
        // No way out within: many are looked at at once.
        let plain = self.streams.iter().fold(true, |all, &stream| all & (stream != NONE))
            & self.endings.iter().fold(true, |all, ending| all & ending.is_some());
        (plain && self.dated && self.ids.is_none()).then(|| {
            self.values().map(|(stream, ending, age, at, attempt)| {
                let wait = Wait::of_sound(age, ending.unwrap_or(Ending::Done), Some(at), attempt);
                Row { stream: stream as usize, id: None, wait, bare: self.bare }
            })
        })
    }

    /// Each row, if it is plain.
    pub(super) fn rows(&self) -> impl Iterator<Item = Option<Row<'_>>> {
        self.values().enumerate().map(|(row, (stream, ending, age, at, attempt))| {
            if stream == NONE {
                return None;
            }
            let id = match self.ids.map_or(b"".as_slice(), |ids| ids.bytes(row)) {
                b"" => None,
                id => Some(str::from_utf8(id).ok()?),
            };
            let at = if at.is_nan() { None } else { Some(at) };
            let wait = Wait::of_sound(age, ending?, at, attempt);
            Some(Row { stream: stream as usize, id, wait, bare: self.bare })
        })
    }

    #[inline(always)]
    fn values(&self) -> impl Iterator<Item = (u32, Option<Ending>, f64, f64, u32)> {
        let columns =
            self.streams.iter().zip(&self.endings).zip(&*self.ages).zip(&*self.times).zip(&self.attempts);
        columns.map(|((((&stream, &ending), &age), &at), &attempt)| (stream, ending, age, at, attempt))
    }
}

/// Whether a field's columns can be looked at by themselves.
fn is_plain(field: Field) -> bool {
    use Field::*;
    matches!(field, Stream | Ending | Elapsed | At | Attempt | Id)
}

/// Strikes out the rows whose number is not sound.
#[inline(always)]
fn keep(streams: &mut [u32], numbers: &[f64], is_sound: impl Fn(f64) -> bool) {
    // Mostly all are, which is found out without a look at the streams.
    if numbers.iter().fold(true, |all, &number| all & is_sound(number)) {
        return;
    }
    for (stream, &number) in streams.iter_mut().zip(numbers) {
        if !is_sound(number) {
            *stream = NONE;
        }
    }
}

/// The number of the stream of that name, if it is one.
fn number<S: Sink>(name: &[u8], collector: &mut Collector<'_, S>) -> u32 {
    let place = str::from_utf8(name).ok().and_then(|name| collector.enter(name).ok());
    place.and_then(|place| u32::try_from(place).ok()).unwrap_or(NONE)
}

/// What a text in the place of an ending means; `None` if nothing.
fn ending(text: &[u8], mapping: Option<&Mapping>) -> Option<Ending> {
    let text = str::from_utf8(text).ok().filter(|text| !text.is_empty())?;
    let mut fields = Fields::new();
    fields.set_text(Field::Ending, text);
    if let Some(mapping) = mapping {
        mapping.settle(&mut fields).ok()?;
    }
    Ending::parse(fields.as_text(Field::Ending)?)
}
