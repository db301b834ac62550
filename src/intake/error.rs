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
        "{file} is {looks}; waits are read from NDJSON (one object a line), CSV or SWF text, plain or packed by \
         gzip or zstd"
    )]
    Unrecognised {
        /// The input.
        file: String,
        /// What it looks like.
        looks: String,
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

/// What is wrong with the header of a CSV file.
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
    /// Two columns for one field.
    #[error("the field `{field}` has two columns; keep one of them")]
    Twice {
        /// The field.
        field: &'static str,
    },
    /// The header is not UTF-8 text.
    #[error("it is not UTF-8 text")]
    NotText,
    /// The header's line is too long.
    #[error("it is longer than {limit} bytes")]
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
