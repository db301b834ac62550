//! Row groups of a Parquet file, and which of them the window leaves out.

use std::path::PathBuf;
use std::sync::Arc;

use arrow_schema::{DataType, Schema, TimeUnit};
use parquet::arrow::ProjectionMask;
use parquet::arrow::arrow_reader::{
    ArrowReaderMetadata, ArrowReaderOptions, ParquetRecordBatchReader, ParquetRecordBatchReaderBuilder,
};
use parquet::basic::Encoding;
use parquet::file::metadata::RowGroupMetaData;
use parquet::file::statistics::Statistics;
use tempfile::NamedTempFile;

use super::cells::seconds;
use super::{ColumnsError, Next, Options, Part, Plan, ROWS, Table, checked, find, guarded, reopen};
use crate::intake::record::Field;

/// The groups that are read, and what is passed over between them.
pub(in crate::intake) struct Groups {
    groups: std::vec::IntoIter<Group>,
    passed: u64,
    span: Option<(f64, f64)>,
}

struct Group {
    number: usize,
    rows: u64,
    bytes: u64,
    /// The oldest and newest of its times, if they all lie outside the window.
    outside: Option<(f64, f64)>,
}

impl Groups {
    pub(super) fn open(
        path: PathBuf,
        spool: Option<NamedTempFile>,
        options: &Options,
    ) -> Result<(Table, Arc<Plan>), ColumnsError> {
        let file = reopen(&path)?;
        if !checked::has_sound_footer(&file).map_err(ColumnsError::Read)? {
            return Err(ColumnsError::Damaged { reason: "its footer does not hold what it says".into() });
        }
        let metadata = guarded(|| {
            ArrowReaderMetadata::load(&file, ArrowReaderOptions::new()).map_err(ColumnsError::parquet)
        })?;
        let used = find(metadata.schema(), options)?;
        let times = Times::of(&metadata, &used);
        let groups: Vec<Group> = (0..)
            .zip(metadata.metadata().row_groups())
            .map(|(number, group)| {
                let span = times.as_ref().and_then(|times| times.span(group));
                let outside = |&(oldest, newest): &(f64, f64)| {
                    options.since.is_some_and(|since| newest < since)
                        || options.until.is_some_and(|until| oldest >= until)
                };
                Group {
                    number,
                    rows: u64::try_from(group.num_rows()).unwrap_or(0),
                    bytes: u64::try_from(group.compressed_size()).unwrap_or(0),
                    outside: span.filter(outside),
                }
            })
            .collect();
        let groups = Groups { groups: groups.into_iter(), passed: 0, span: None };
        let metadata = guarded(|| Ok(coded(&metadata, &used)))?.unwrap_or(metadata);
        let plan = Plan { path: Some(path), _spool: spool, metadata: Some(metadata), used };
        Ok((Table::Parquet(groups), Arc::new(plan)))
    }

    pub(super) fn next(&mut self) -> Option<Next> {
        let group = loop {
            let group = self.groups.next()?;
            let Some((oldest, newest)) = group.outside else { break group };
            self.passed += group.rows;
            let (low, high) = self.span.unwrap_or((f64::INFINITY, f64::NEG_INFINITY));
            self.span = Some((low.min(oldest), high.max(newest)));
        };
        let passed = std::mem::take(&mut self.passed);
        Some(Next { part: Part::Group(group.number), passed, bytes: group.bytes })
    }

    pub(super) fn passed(&mut self) -> (u64, Option<(f64, f64)>) {
        (std::mem::take(&mut self.passed), self.span.take())
    }
}

/// The same, with names and endings that lie there as places in a list left as such; `None` if there are none, or
/// they cannot be had so.
fn coded(metadata: &ArrowReaderMetadata, used: &[super::Used]) -> Option<ArrowReaderMetadata> {
    let schema = metadata.schema();
    let mut fields = Vec::from_iter(schema.fields().iter().cloned());
    let mut any = false;
    for &(index, field, _) in used {
        let column = schema.fields().get(index)?;
        let is_text = matches!(column.data_type(), DataType::Utf8 | DataType::LargeUtf8 | DataType::Utf8View);
        if is_text && matches!(field, Field::Stream | Field::Ending) && is_listed(metadata, column.name()) {
            let kind = DataType::Dictionary(Box::new(DataType::Int32), Box::new(DataType::Utf8));
            any = true;
            *fields.get_mut(index)? = Arc::new(column.as_ref().clone().with_data_type(kind));
        }
    }
    let schema = Arc::new(Schema::new_with_metadata(fields, schema.metadata().clone()));
    let options = ArrowReaderOptions::new().with_schema(schema);
    any.then(|| ArrowReaderMetadata::try_new(Arc::clone(metadata.metadata()), options).ok())?
}

/// Whether all values of a column lie there as places in a list. Where that is not sure, a list would have to be made.
fn is_listed(metadata: &ArrowReaderMetadata, name: &str) -> bool {
    let Some(leaf) = leaf(metadata, name) else { return false };
    let mut groups = metadata.metadata().row_groups().iter();
    groups.all(|group| {
        group.columns().get(leaf).is_some_and(|column| {
            let plain = column.page_encoding_stats_mask().is_some_and(|pages| pages.is_set(Encoding::PLAIN));
            column.dictionary_page_offset().is_some() && !plain
        })
    })
}

/// The place of a column among those that hold values.
fn leaf(metadata: &ArrowReaderMetadata, name: &str) -> Option<usize> {
    let leaves = metadata.parquet_schema().columns();
    leaves.iter().position(|leaf| matches!(leaf.path().parts(), [only] if only == name))
}

/// Decodes the used columns of a group.
pub(super) fn batches(plan: &Plan, group: usize) -> Result<ParquetRecordBatchReader, ColumnsError> {
    let (Some(path), Some(metadata)) = (&plan.path, &plan.metadata) else { return Err(ColumnsError::Panic) };
    let wanted = plan.used.iter().map(|&(index, ..)| index);
    let mask = ProjectionMask::roots(metadata.parquet_schema(), wanted);
    // A file of its own for each group: a copy of an open one would share its place.
    let builder =
        ParquetRecordBatchReaderBuilder::new_with_metadata(checked::Checked(reopen(path)?), metadata.clone());
    let builder = builder.with_projection(mask).with_row_groups(vec![group]).with_batch_size(ROWS);
    builder.build().map_err(ColumnsError::parquet)
}

/// The column of the time at which waits ended, and how its statistics become seconds.
struct Times {
    leaf: usize,
    unit: TimeUnit,
}

impl Times {
    /// Only where the time of a row is that column and nothing else, and lies there as a whole number of a known unit.
    fn of(metadata: &ArrowReaderMetadata, used: &[super::Used]) -> Option<Times> {
        let column = |field| used.iter().find(|&&(_, other, _)| other == field);
        let &(index, ..) = column(Field::At)?;
        let arrow = metadata.schema().field(index);
        let DataType::Timestamp(unit, _) = arrow.data_type() else { return None };
        Some(Times { leaf: leaf(metadata, arrow.name())?, unit: *unit })
    }

    /// The oldest and the newest time of a group, Unix seconds; `None` where some rows have none, or it is not said.
    fn span(&self, group: &RowGroupMetaData) -> Option<(f64, f64)> {
        let statistics = group.columns().get(self.leaf)?.statistics()?;
        if statistics.null_count_opt() != Some(0) {
            return None;
        }
        match statistics {
            Statistics::Int64(times) => {
                Some((seconds(*times.min_opt()?, self.unit), seconds(*times.max_opt()?, self.unit)))
            }
            _ => None,
        }
    }
}
