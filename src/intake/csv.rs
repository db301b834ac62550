//! CSV (RFC 4180): the fields of a record as columns under a header; `elapsed_ms` and the like carry a unit.

use super::Sink;
use super::collect::Collector;
use super::error::HeaderError;
use super::flaw::Flaw;
use super::format::DELIMITERS;
use super::header::{self, Used};
use super::mapping::Mapping;
use super::record::Fields;
use super::{blocks, decimal};

/// Where each field stands in a row.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Columns {
    pub(super) delimiter: u8,
    width: usize,
    /// Column, field, and how many of its units make a second if the header says.
    used: Vec<Used>,
}

impl Columns {
    /// Understands a header. `named` says whether records without a stream have a name all the same.
    pub(super) fn from_header(
        header: &[u8],
        delimiter: u8,
        named: bool,
        mapping: Option<&Mapping>,
    ) -> Result<Columns, HeaderError> {
        let mut names = ::csv::ByteRecord::new();
        let mut reader = reader(header, delimiter);
        reader.read_byte_record(&mut names).map_err(|_| HeaderError::NotText)?;
        let names = ::csv::StringRecord::from_byte_record(names).map_err(|_| HeaderError::NotText)?;
        let used = header::find(names.iter(), named, mapping)?;
        Ok(Columns { delimiter, width: names.len(), used })
    }
}

/// The delimiter that the first line has most of; a comma if it has none.
pub(super) fn delimiter(head: &[u8]) -> u8 {
    let header = head.split(|&byte| byte == b'\n').next().unwrap_or_default();
    let count = |delimiter: u8| memchr::memchr_iter(delimiter, header).count();
    // The last of equals wins, so the comma comes last.
    DELIMITERS.into_iter().rev().max_by_key(|&delimiter| count(delimiter)).unwrap_or(b',')
}

fn reader(bytes: &[u8], delimiter: u8) -> ::csv::Reader<&[u8]> {
    ::csv::ReaderBuilder::new().has_headers(false).flexible(true).delimiter(delimiter).from_reader(bytes)
}

/// Reads a block of whole rows, without the header.
pub(super) fn harvest<S: Sink>(block: &[u8], columns: &Columns, collector: &mut Collector<'_, S>) {
    let limit = collector.line_limit();
    let mut reader = reader(block, columns.delimiter);
    let mut row = ::csv::ByteRecord::new();
    // Reading from memory cannot fail, and rows of any width and bytes are let through.
    while let Ok(true) = reader.read_byte_record(&mut row) {
        let line = row.position().map_or(0, |position| first_line(block, position));
        let bytes = row.as_slice().len();
        let outcome = if bytes > limit {
            Err(Flaw::Long { limit })
        } else {
            take(&row, columns).and_then(|fields| collector.record(line, &fields))
        };
        if let Err(flaw) = outcome {
            collector.refuse(line, flaw);
        }
    }
    collector.count_lines(blocks::count_lines(block));
}

/// The number of a row's first line, from 0. The reader's position is before the blank lines that it skipped.
fn first_line(block: &[u8], position: &::csv::Position) -> u64 {
    let bytes = usize::try_from(position.byte()).ok().and_then(|at| block.get(at..)).unwrap_or_default();
    let blank = bytes.iter().take_while(|byte| matches!(byte, b'\n' | b'\r'));
    position.line() - 1 + blank.filter(|&&byte| byte == b'\n').count() as u64
}

fn take<'a>(row: &'a ::csv::ByteRecord, columns: &Columns) -> Result<Fields<'a>, Flaw> {
    if row.len() != columns.width {
        return Err(Flaw::Cells { found: row.len(), expected: columns.width });
    }
    let mut fields = Fields::new();
    for &(index, field, unit) in &columns.used {
        let cell = row.get(index).unwrap_or_default().trim_ascii();
        if cell.is_empty() {
            continue;
        }
        let number = match field.is_number().then(|| decimal::json_number(cell)) {
            Some(Some((number, length))) if length == cell.len() => Some(number),
            _ => None,
        };
        let text = || std::str::from_utf8(cell).map_err(|_| Flaw::NotText);
        match (number, unit) {
            (Some(number), None) => fields.set_number(field, number),
            (Some(number), Some(per_second)) => fields.set_number_in_unit(field, number, per_second),
            (None, None) => fields.set_text(field, text()?),
            (None, Some(per_second)) => fields.set_text_in_unit(field, text()?, per_second),
        }
    }
    Ok(fields)
}
