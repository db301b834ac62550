//! Tables in columns: Parquet and Arrow IPC (file and stream), as the Apache Arrow project specifies them.
//!
//! A Parquet file is read by row groups, each of which any thread may take; those whose statistics say that all their
//! times lie outside the window asked for are not read at all. Arrow batches are decoded one after the other, which
//! takes little, and made into records on all threads. Only the columns that hold fields are touched.

mod arrow;
mod cells;
mod checked;
mod names;
mod parquet;
mod plain;
mod thrift;

use std::fs::File;
use std::io::{Read, Seek, Write};
use std::path::PathBuf;
use std::sync::Arc;

use arrow_array::RecordBatch;
use arrow_schema::Schema;
use tempfile::NamedTempFile;

use self::cells::Column;
use self::plain::Plain;
use super::collect::Collector;
use super::error::{ColumnsError, HeaderError};
use super::header::{self, Used};
use super::record::Fields;
use super::{Format, Options, Sink};
use crate::glob::Glob;

/// Rows looked at at once: few enough to stay near the processor, enough to know their names again.
const ROWS: usize = 2048;

/// An input whose parts are handed out one by one.
pub(super) enum Table {
    Parquet(parquet::Groups),
    Arrow(arrow::Batches),
}

/// A part of an input that can be read by itself.
pub(super) enum Part {
    Group(usize),
    Batch(RecordBatch),
}

/// What is known of all parts of an input.
pub(super) struct Plan {
    /// Where they are read from; a spooled input lies there as long as this lives.
    path: Option<PathBuf>,
    _spool: Option<NamedTempFile>,
    metadata: Option<::parquet::arrow::arrow_reader::ArrowReaderMetadata>,
    used: Vec<Used>,
}

impl Plan {
    fn new(used: Vec<Used>) -> Plan {
        Plan { path: None, _spool: None, metadata: None, used }
    }
}

impl std::fmt::Debug for Plan {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Plan").field("used", &self.used).finish_non_exhaustive()
    }
}

/// What is done next with a table.
pub(super) struct Next {
    pub(super) part: Part,
    /// Rows before it that were not read: all are outside the window.
    pub(super) passed: u64,
    /// Its bytes as they lie there.
    pub(super) bytes: u64,
}

impl Table {
    /// Opens an input: the file of that name if it lies there as it is, else what is read from `reader`.
    pub(super) fn open(
        format: Format,
        path: Option<PathBuf>,
        reader: Box<dyn Read + Send>,
        head: &[u8],
        options: &Options,
        allowance: u64,
    ) -> Result<(Table, Arc<Plan>), ColumnsError> {
        if format == Format::Arrow {
            return arrow::Batches::open(reader, head.starts_with(b"ARROW1"), options);
        }
        let (path, spool) = match path {
            Some(path) => (path, None),
            None => {
                let spool = spool(reader, allowance)?;
                (spool.path().to_owned(), Some(spool))
            }
        };
        parquet::Groups::open(path, spool, options)
    }

    /// The next part; `None` after the last.
    pub(super) fn next(&mut self) -> Result<Option<Next>, ColumnsError> {
        match self {
            Table::Parquet(groups) => Ok(groups.next()),
            Table::Arrow(batches) => batches.next(),
        }
    }

    /// Rows after the last part that were not read, and the oldest and newest time of all that were not.
    pub(super) fn passed(&mut self) -> (u64, Option<(f64, f64)>) {
        match self {
            Table::Parquet(groups) => groups.passed(),
            Table::Arrow(_) => (0, None),
        }
    }
}

/// Makes records of a part. Rows count as lines.
pub(super) fn harvest<S: Sink>(
    part: &Part,
    plan: &Plan,
    collector: &mut Collector<'_, S>,
) -> Result<(), ColumnsError> {
    match part {
        Part::Batch(batch) => {
            for from in (0..batch.num_rows()).step_by(ROWS) {
                let some = batch.slice(from, ROWS.min(batch.num_rows() - from));
                take(&some, &plan.used, from as u64, collector)?;
            }
            Ok(())
        }
        Part::Group(group) => {
            let mut rows = 0;
            let mut batches = guarded(|| parquet::batches(plan, *group))?;
            while let Some(batch) = guarded(|| batches.next().transpose().map_err(ColumnsError::arrow))? {
                rows = take(&batch, &plan.used, rows, collector)?;
            }
            Ok(())
        }
    }
}

fn take<S: Sink>(
    batch: &RecordBatch,
    used: &[Used],
    first: u64,
    collector: &mut Collector<'_, S>,
) -> Result<u64, ColumnsError> {
    // The batch holds the used columns alone, in their order.
    let columns = guarded(|| {
        let columns = used.iter().zip(batch.columns());
        columns
            .map(|((_, field, unit), array)| Column::new(array, *field, *unit))
            .collect::<Result<Vec<_>, _>>()
    })?;
    let rows = batch.num_rows();
    let mut by_field = ByField { columns: &columns, fields: Fields::new() };
    match Plain::of(&columns, rows, collector) {
        None => (first..).zip(0..rows).for_each(|(line, row)| by_field.take(row, line, collector)),
        Some(plain) => match plain.even_rows() {
            Some(even) => collector.many_rows(even),
            None => {
                let (mut plain, mut row) = (plain.rows(), 0);
                loop {
                    row += collector.rows(&mut plain);
                    if row >= rows {
                        break;
                    }
                    by_field.take(row, first + row as u64, collector);
                    row += 1;
                }
            }
        },
    }
    collector.count_lines(rows as u64);
    Ok(first + rows as u64)
}

/// Rows read field by field.
struct ByField<'a> {
    columns: &'a [Column<'a>],
    fields: Fields<'a>,
}

impl ByField<'_> {
    #[inline(never)]
    fn take<S: Sink>(&mut self, row: usize, line: u64, collector: &mut Collector<'_, S>) {
        let ByField { columns, fields } = self;
        fields.clear();
        let set = columns.iter().try_for_each(|column| column.set(row, fields));
        if let Err(flaw) = set.and_then(|()| collector.record(line, fields)) {
            collector.refuse(line, flaw);
        }
    }
}

/// The columns that hold fields, in the order of the table, if all that is needed is there in types that can hold it.
fn find(schema: &Schema, options: &Options) -> Result<Vec<Used>, ColumnsError> {
    let named = options.one_stream.is_some() || options.streams.as_ref().and_then(Glob::literal).is_some();
    let names = schema.fields().iter().map(|field| field.name().as_str());
    let used = header::find(names, named, options.mapping.as_deref())?;
    for &(index, field, _) in &used {
        let column = schema.field(index);
        if !cells::can_hold(column.data_type(), field) {
            return Err(HeaderError::Type {
                column: super::record::excerpt(column.name()),
                field: field.name(),
                found: super::record::excerpt(&column.data_type().to_string()),
            }
            .into());
        }
    }
    Ok(used)
}

/// The decoders are other people's code and meet other people's bytes: should they panic on some, the file is damaged.
fn guarded<T>(decode: impl FnOnce() -> Result<T, ColumnsError>) -> Result<T, ColumnsError> {
    std::panic::catch_unwind(std::panic::AssertUnwindSafe(decode)).unwrap_or(Err(ColumnsError::Panic))
}

/// Puts an input that can only be read once where it can be read in any order.
fn spool(reader: impl Read, allowance: u64) -> Result<NamedTempFile, ColumnsError> {
    let mut spool = NamedTempFile::new().map_err(ColumnsError::Spool)?;
    let copied = std::io::copy(&mut reader.take(allowance.saturating_add(1)), &mut spool);
    if copied.map_err(ColumnsError::Spool)? > allowance {
        return Err(ColumnsError::TooMuch);
    }
    spool.flush().and_then(|()| spool.rewind()).map_err(ColumnsError::Spool)?;
    Ok(spool)
}

fn reopen(path: &std::path::Path) -> Result<File, ColumnsError> {
    File::open(path).map_err(ColumnsError::Read)
}
