//! Why nothing could be read.

use std::io;

use super::report::Report;

/// Why a reading as a whole failed. Single bad lines are in the [`Report`] and fail it only in number.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum IntakeError {
    /// The input cannot be opened: it is missing, or may not be read.
    #[error("cannot open {file}")]
    Open {
        /// The input.
        file: String,
        /// The system's reason.
        source: io::Error,
    },
    /// A directory in place of a file.
    #[error("{file} is a directory; name the files in it")]
    Directory {
        /// The input.
        file: String,
    },
    /// Reading failed midway.
    #[error("cannot read on in {file}")]
    Read {
        /// The input.
        file: String,
        /// The system's reason.
        source: io::Error,
    },
    /// Compressed data are cut off or damaged.
    #[error("{file} is cut off or damaged: its {compression} data do not unpack to their end; copy it again")]
    Damaged {
        /// The input.
        file: String,
        /// `gzip` or `zstd`.
        compression: &'static str,
        /// The decompressor's reason.
        source: io::Error,
    },
    /// Neither content nor name tells the format.
    #[error(
        "{file} is {looks}; waits are read from NDJSON (one object a line), CSV, SWF, journal text, OTLP in JSON or metrics \
         text, plain or packed by gzip or zstd, from Parquet and Arrow IPC, and from the lines of a log by `--pattern`"
    )]
    Unrecognised {
        /// The input.
        file: String,
        /// What it looks like.
        looks: String,
    },
    /// Lines are to be read by a pattern, and there is none.
    #[error("{file} is to be read by a pattern, and none is given; give a `pattern`")]
    NoPattern {
        /// The input.
        file: String,
    },
    /// A database cannot be asked.
    #[error("{file}: {source}")]
    Query {
        /// The database, without a password.
        file: String,
        /// Why.
        source: super::QueryError,
    },
    /// A table in columns, where none is taken.
    #[error(
        "{file} is a table in columns, and none is taken here; weigh it with `outwait weigh`, or send its rows"
    )]
    Table {
        /// The input.
        file: String,
    },
    /// A table in columns cannot be read.
    #[error("{file}: {source}")]
    Columns {
        /// The input.
        file: String,
        /// What is wrong with it.
        source: ColumnsError,
    },
    /// The header of a CSV file cannot be used.
    #[error("the header of {file}: {source}")]
    Header {
        /// The input.
        file: String,
        /// What is wrong with it.
        source: HeaderError,
    },
    /// More decompressed data than the limit.
    #[error("{file} takes the data beyond the limit of {limit} bytes; split it")]
    TooMuch {
        /// The input in which the limit was reached.
        file: String,
        /// The limit, bytes.
        limit: u64,
    },
    /// More bad lines than allowed.
    #[error("{} of {} lines are bad, and {allowed} are allowed{}", .report.bad.count, .report.lines, first(.report))]
    BadLines {
        /// Everything that was found.
        report: Box<Report>,
        /// How many were allowed.
        allowed: u64,
    },
    /// There is not a single wait in the input.
    #[error("there are no waits in {}: {}", files(.report), no_waits(.report))]
    NoWaits {
        /// Everything that was found.
        report: Box<Report>,
    },
}

/// Why a table in columns cannot be read.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ColumnsError {
    /// Its columns do not hold what is needed.
    #[error("the columns: {0}")]
    Header(#[from] HeaderError),
    /// It is cut off or damaged.
    #[error("it is cut off or damaged ({reason}); write it again")]
    Damaged {
        /// What the decoder says.
        reason: String,
    },
    /// The decoder gave up in a way that it should not.
    #[error("it is damaged in a way that its decoder does not name; write it again")]
    Panic,
    /// It cannot be opened again.
    #[error("it cannot be read: {0}")]
    Read(#[source] io::Error),
    /// What came from standard input or packed cannot be put aside to be read in any order.
    #[error(
        "it cannot be put aside to be read in any order ({0}); make room for temporary files, or name the file itself"
    )]
    Spool(#[source] io::Error),
    /// Above the limit of all inputs.
    #[error("it takes the data beyond their limit; split it")]
    TooMuch,
    /// This program was built without the formats.
    #[error("this program was built without Parquet and Arrow; build it with the feature `columnar`")]
    Absent,
}

#[cfg(feature = "columnar")]
impl ColumnsError {
    pub(super) fn arrow(error: arrow_schema::ArrowError) -> ColumnsError {
        ColumnsError::Damaged { reason: super::record::excerpt(&error.to_string()) }
    }

    pub(super) fn parquet(error: parquet::errors::ParquetError) -> ColumnsError {
        ColumnsError::Damaged { reason: super::record::excerpt(&error.to_string()) }
    }
}

/// What is wrong with the header of a CSV file, or with the columns of another table.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum HeaderError {
    /// A needed column is missing.
    #[error("there is no column `{field}`{}{}", but(.nearest), instead(.field))]
    Missing {
        /// The needed column.
        field: &'static str,
        /// The column whose name is most like it.
        nearest: Option<String>,
    },
    /// A column that a mapping names is not there.
    #[error("there is no column {column:?}{}, and a field was to be read from it; map one that is there", but(.nearest))]
    Unmapped {
        /// The column.
        column: String,
        /// The column whose name is most like it.
        nearest: Option<String>,
    },
    /// Two columns for one field.
    #[error("the field `{field}` has two columns; keep one of them")]
    Twice {
        /// The field.
        field: &'static str,
    },
    /// A column of a type that its field cannot have.
    #[error(
        "the column {column:?} is {found}, which is no `{field}`; map another one to it by `columns`, or cast it"
    )]
    Type {
        /// The column.
        column: String,
        /// The field.
        field: &'static str,
        /// Its type.
        found: String,
    },
    /// The header is not UTF-8 text.
    #[error("it is not UTF-8 text; save the file as UTF-8")]
    NotText,
    /// The header's line is too long.
    #[error("it is longer than {limit} bytes; see whether this is a table of waits")]
    Long {
        /// The limit, bytes.
        limit: usize,
    },
}

fn but(nearest: &Option<String>) -> String {
    nearest.as_ref().map_or_else(String::new, |name| format!("; the nearest is {name:?}"))
}

fn instead(field: &str) -> &'static str {
    match field {
        "stream" => "; name the stream of all rows with --stream NAME",
        _ => {
            "; call it `elapsed` (seconds), `elapsed_ms`, `elapsed_us` or `elapsed_ns`, or give `over` and `upto`"
        }
    }
}

fn first(report: &Report) -> String {
    report.bad.examples.first().map_or_else(String::new, |bad| format!("; the first is {bad}"))
}

fn files(report: &Report) -> String {
    match &report.files[..] {
        [file] => file.name.clone(),
        files => format!("{} inputs", files.len()),
    }
}

fn no_waits(report: &Report) -> String {
    let left_out = &report.left_out;
    if report.bad.count > 0 {
        format!("all {} lines with a record are bad{}", report.bad.count, first(report))
    } else if left_out.other_messages > 0 {
        "none of its messages is a record; write waits as NDJSON, or give a pattern for the messages that tell of one"
            .into()
    } else if left_out.unmeasured + left_out.partial > 0 {
        "its jobs lack the time that was asked for; ask for the other with --measure wait or --measure run"
            .into()
    } else if report.pairs.ends_alone + report.pairs.open_unseen > 0 {
        "its starts and ends do not make a single pair".into()
    } else if report.lines == 0 {
        "it is empty".into()
    } else {
        "it has no records".into()
    }
}
