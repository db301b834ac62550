//! Rows that are plainly sound, taken column by column. Any other is left to be read field by field: what is wrong with a
//! row, and how it is told, is found out in one place.

use super::cells::Column;
use crate::intake::Sink;
use crate::intake::collect::Collector;
use crate::intake::mapping::Mapping;
use crate::intake::record::{Field, Fields, Record};
use crate::wait::{Ending, Wait};

/// The columns of a part, if all are of fields and types that plain rows have.
pub(super) struct Plain<'a> {
    /// The column and the place of each row's name in `names`; `None`: all rows are of one stream.
    streams: Option<(&'a Column<'a>, Vec<u32>)>,
    names: Vec<&'a str>,
    /// The streams that were entered: name and number, by the place of the name.
    entered: Vec<Option<(&'a str, usize)>>,
    /// The column and what each row's text means.
    endings: Option<(&'a Column<'a>, Vec<Option<Ending>>)>,
    elapsed: (&'a Column<'a>, &'a [f64]),
    /// Whether `elapsed` has no stated unit.
    bare: bool,
    at: Option<(&'a Column<'a>, &'a [f64])>,
    attempts: Option<(&'a Column<'a>, &'a [f64])>,
    ids: Option<&'a Column<'a>>,
}

impl<'a> Plain<'a> {
    pub(super) fn of<'o: 'a, S: Sink>(
        columns: &'a [Column<'a>],
        collector: &mut Collector<'o, S>,
    ) -> Option<Plain<'a>> {
        let (mut streams, mut endings, mut elapsed, mut at, mut attempts, mut ids) =
            (None, None, None, None, None, None);
        let mut names = Vec::new();
        for column in columns {
            let place = match column.field {
                Field::Stream if collector.one_stream().is_some() => continue,
                Field::Stream => {
                    let list = |name| {
                        names.push(name);
                        // A part has far fewer rows.
                        u32::try_from(names.len() - 1).unwrap_or(u32::MAX)
                    };
                    streams = Some((column, column.names(list)?));
                    continue;
                }
                Field::Ending => {
                    let mapping = collector.mapping();
                    endings = Some((column, column.names(|text| ending(text, mapping))?));
                    continue;
                }
                Field::Id => {
                    ids = Some(column);
                    continue;
                }
                Field::Elapsed => &mut elapsed,
                Field::At => &mut at,
                Field::Attempt => &mut attempts,
                _ => return None,
            };
            *place = Some((column, column.numbers()?));
        }
        let number = |(column, (numbers, _))| (column, numbers);
        let entered = match &streams {
            Some(_) => vec![None; names.len()],
            None => {
                let name = collector.nameless()?;
                vec![Some((name, collector.enter(name).ok()?))]
            }
        };
        let (column, (ages, known_unit)) = elapsed?;
        Some(Plain {
            streams,
            names,
            entered,
            endings,
            elapsed: (column, ages),
            bare: !known_unit,
            at: at.map(number),
            attempts: attempts.map(number),
            ids,
        })
    }

    /// Takes a row if it is sound.
    #[inline(always)]
    pub(super) fn take<S: Sink>(&mut self, row: usize, line: u64, collector: &mut Collector<'_, S>) -> bool {
        let Some((stream, place, wait)) = self.row(row, collector) else { return false };
        let id = self.ids.filter(|ids| !ids.is_missing(row)).and_then(|ids| ids.text(row));
        let id = id.filter(|id| !id.is_empty());
        if let Err(flaw) = collector.entered(Record { stream, place, id, wait }, self.bare) {
            collector.refuse(line, flaw);
        }
        true
    }

    #[inline(always)]
    fn row<S: Sink>(
        &mut self,
        row: usize,
        collector: &mut Collector<'_, S>,
    ) -> Option<(&'a str, usize, Wait)> {
        let ending = match &self.endings {
            Some((column, known)) if !column.is_missing(row) => known.get(row).copied().flatten()?,
            _ => Ending::Done,
        };
        let value = |(column, numbers): (&Column<'_>, &[f64])| {
            if column.is_missing(row) { None } else { numbers.get(row).copied() }
        };
        let mut wait = Wait::new(value(self.elapsed)?, ending).ok()?;
        if let Some(at) = self.at.and_then(value) {
            wait = wait.with_at(at).ok()?;
        }
        if let Some(attempt) = self.attempts.and_then(value) {
            // Whole, and in range: else it comes out as another number.
            let whole = attempt as u32;
            if f64::from(whole) != attempt {
                return None;
            }
            wait = wait.with_attempt(whole).ok()?;
        }
        let place = match &self.streams {
            None => 0,
            Some((column, _)) if column.is_missing(row) => return None,
            Some((_, places)) => *places.get(row)? as usize,
        };
        let (name, number) = match self.entered.get(place)? {
            Some(entered) => *entered,
            None => self.enter(place, collector)?,
        };
        Some((name, number, wait))
    }

    #[cold]
    fn enter<S: Sink>(&mut self, place: usize, collector: &mut Collector<'_, S>) -> Option<(&'a str, usize)> {
        let name = self.names.get(place).copied().filter(|name| !name.is_empty())?;
        let entered = (name, collector.enter(name).ok()?);
        *self.entered.get_mut(place)? = Some(entered);
        Some(entered)
    }
}

/// What a text in the place of an ending means; `None` if nothing.
fn ending(text: &str, mapping: Option<&Mapping>) -> Option<Ending> {
    let mut fields = Fields::new();
    if text.is_empty() {
        return None;
    }
    fields.set_text(Field::Ending, text);
    if let Some(mapping) = mapping {
        mapping.settle(&mut fields).ok()?;
    }
    Ending::parse(fields.as_text(Field::Ending)?)
}
