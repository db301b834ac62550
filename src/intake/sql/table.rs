//! Rows of an answer, and the records that they make.

use crate::intake::Sink;
use crate::intake::collect::Collector;
use crate::intake::header::Used;
use crate::intake::record::Fields;

/// Most rows in one table, and most bytes of its texts: about what a block of a file holds.
const ROWS: usize = 4096;
const BYTES: usize = 256 * 1024;

/// Some rows, cell by cell; texts lie end to end.
#[derive(Debug, Default)]
pub(in crate::intake) struct Table {
    width: usize,
    cells: Vec<Cell>,
    text: String,
}

/// A value of a row.
#[derive(Clone, Copy, Debug)]
enum Cell {
    Nothing,
    Number(f64),
    Whole(i64),
    /// A time or an interval by the column's own type: Unix seconds, or seconds.
    #[cfg_attr(not(feature = "postgres"), allow(dead_code))] // only a typed database has them
    Seconds(f64),
    /// Up to where in the text it reaches; it begins where the one before ends.
    Text(usize, usize),
}

impl Table {
    pub(super) fn new(width: usize) -> Table {
        Table { width, ..Table::default() }
    }

    pub(super) fn nothing(&mut self) {
        self.cells.push(Cell::Nothing);
    }

    pub(super) fn number(&mut self, number: f64) {
        self.cells.push(Cell::Number(number));
    }

    pub(super) fn whole(&mut self, number: i64) {
        self.cells.push(Cell::Whole(number));
    }

    #[cfg(feature = "postgres")]
    pub(super) fn seconds(&mut self, seconds: f64) {
        self.cells.push(Cell::Seconds(seconds));
    }

    pub(super) fn text(&mut self, text: &str) {
        let from = self.text.len();
        self.text.push_str(text);
        self.cells.push(Cell::Text(from, self.text.len()));
    }

    /// Whether it is time to hand it over.
    pub(super) fn is_full(&self) -> bool {
        self.cells.len() >= ROWS * self.width.max(1) || self.text.len() >= BYTES
    }

    pub(super) fn is_empty(&self) -> bool {
        self.cells.is_empty()
    }

    /// Its bytes, for the progress told.
    pub(in crate::intake) fn bytes(&self) -> u64 {
        (self.cells.len() * 8 + self.text.len()) as u64
    }
}

/// Makes records of the rows, which count as lines.
pub(in crate::intake) fn harvest<S: Sink>(table: &Table, used: &[Used], collector: &mut Collector<'_, S>) {
    let mut rows = 0;
    for (row, line) in table.cells.chunks_exact(table.width.max(1)).zip(0..) {
        // A name may come as a whole number, and is then its figures.
        let mut figures: [String; crate::intake::record::Field::NUMBER] = Default::default();
        for (slot, &(index, field, _)) in figures.iter_mut().zip(used) {
            if let (Some(Cell::Whole(number)), false) = (row.get(index), field.is_number()) {
                *slot = number.to_string();
            }
        }
        let mut fields = Fields::new();
        for (figures, &(index, field, unit)) in figures.iter().zip(used) {
            match (row.get(index).copied().unwrap_or(Cell::Nothing), unit) {
                (Cell::Nothing, _) => {}
                (Cell::Whole(_), _) if !field.is_number() => fields.set_text(field, figures),
                (Cell::Whole(number), None) => fields.set_number(field, number as f64),
                (Cell::Whole(number), Some(unit)) => fields.set_number_in_unit(field, number as f64, unit),
                (Cell::Number(number), None) => fields.set_number(field, number),
                (Cell::Number(number), Some(unit)) => fields.set_number_in_unit(field, number, unit),
                (Cell::Seconds(seconds), _) => fields.set_number_in_unit(field, seconds, 1.0),
                (Cell::Text(from, upto), unit) => {
                    match (table.text.get(from..upto).unwrap_or_default(), unit) {
                        ("", _) => {}
                        (text, None) => fields.set_figures(field, text),
                        (text, Some(unit)) => fields.set_text_in_unit(field, text, unit),
                    }
                }
            }
        }
        if let Err(flaw) = collector.record(line, &fields) {
            collector.refuse(line, flaw);
        }
        rows += 1;
    }
    collector.count_lines(rows);
}
