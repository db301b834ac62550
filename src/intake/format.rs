//! Which format an input is in: by its content, then by the ending of its name.

use std::path::Path;

use serde::Serialize;

use super::exposition;
use super::journal;
use super::otlp::{self, Signal};
use super::record::Field;

/// A format of waits.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
#[non_exhaustive]
pub enum Format {
    /// One JSON object a line.
    Ndjson,
    /// Comma-, semicolon- or tab-separated cells under a header.
    Csv,
    /// The Standard Workload Format, version 2.2, of job logs.
    Swf,
    /// A journal's JSON export, an entry a line.
    Journal,
    /// Lines of a log, read by a [`super::Pattern`].
    Pattern,
    /// Apache Parquet.
    Parquet,
    /// Apache Arrow IPC, a file or a stream.
    Arrow,
    /// Rows that a database answers to a query.
    Sql,
    /// Spans by OTLP: a request as protocol buffers or JSON, or lines of which each is one in JSON.
    OtlpTraces,
    /// Metrics by OTLP, likewise.
    OtlpMetrics,
    /// Metrics as text: the Prometheus text format 0.0.4 or OpenMetrics 1.0.
    MetricsText,
}

impl Format {
    /// Every format that can be asked for by its name alone.
    pub const ALL: [Format; 9] = [
        Format::Ndjson,
        Format::Csv,
        Format::Swf,
        Format::Journal,
        Format::Parquet,
        Format::Arrow,
        Format::OtlpTraces,
        Format::OtlpMetrics,
        Format::MetricsText,
    ];

    /// The name: `ndjson`, `csv`, `swf`, `journal`, `parquet`, `arrow`, `pattern`, `sql`, `otlp_traces`, `otlp_metrics`, `metrics_text`.
    pub fn name(self) -> &'static str {
        match self {
            Format::Ndjson => "ndjson",
            Format::Csv => "csv",
            Format::Swf => "swf",
            Format::Journal => "journal",
            Format::Pattern => "pattern",
            Format::Parquet => "parquet",
            Format::Arrow => "arrow",
            Format::Sql => "sql",
            Format::OtlpTraces => "otlp_traces",
            Format::OtlpMetrics => "otlp_metrics",
            Format::MetricsText => "metrics_text",
        }
    }

    /// The inverse of [`Format::name`].
    pub fn parse(name: &str) -> Option<Format> {
        Format::ALL.into_iter().find(|format| format.name() == name)
    }

    /// Whether it is a table in columns.
    pub(super) fn is_columnar(self) -> bool {
        matches!(self, Format::Parquet | Format::Arrow)
    }

    /// The format of an input that begins with `head` (decompressed, without a byte order mark) and is called
    /// `name`; otherwise what it looks like.
    pub(super) fn detect(head: &[u8], name: &str) -> Result<Format, String> {
        match head {
            [b'P', b'A', b'R', b'1', ..] => return Ok(Format::Parquet),
            [b'A', b'R', b'R', b'O', b'W', b'1', ..] => return Ok(Format::Arrow),
            // The continuation mark of a stream's first message, whose length is not negative.
            [0xff, 0xff, 0xff, 0xff, _, _, _, 0..=0x7f, ..] => return Ok(Format::Arrow),
            _ => {}
        }
        let mut lines =
            head.split(|&byte| byte == b'\n').map(<[u8]>::trim_ascii).filter(|line| !line.is_empty());
        let first = lines.next().unwrap_or_default();
        match otlp::detect(head) {
            Some(Signal::Traces) => return Ok(Format::OtlpTraces),
            Some(Signal::Metrics) => return Ok(Format::OtlpMetrics),
            None => {}
        }
        if exposition::detect(head) {
            return Ok(Format::MetricsText);
        }
        match first.first() {
            Some(b'{') if journal::is_entry(first) => return Ok(Format::Journal),
            Some(b'{') => return Ok(Format::Ndjson),
            Some(b';') => return Ok(Format::Swf),
            _ => {}
        }
        if let Some((_, what)) = FOREIGN.into_iter().find(|(magic, _)| head.starts_with(magic)) {
            return Err(what.into());
        }
        // Not a log whose lines begin with a time in brackets.
        if let [b'[', within @ ..] = head
            && matches!(within.trim_ascii_start().first(), None | Some(b'{' | b'[' | b']'))
        {
            return Err("a JSON array".into());
        }
        if let Ok(first) = std::str::from_utf8(first) {
            let cells = || first.split(DELIMITERS.map(char::from)).map(|cell| cell.trim().trim_matches('"'));
            if cells().any(|cell| Field::with_unit(&cell.to_ascii_lowercase()).is_some()) {
                return Ok(Format::Csv);
            }
            let mut numbers = first.split_ascii_whitespace().map(str::parse::<f64>);
            if numbers.clone().count() == 18 && numbers.all(|number| number.is_ok()) {
                return Ok(Format::Swf);
            }
        }
        if head.contains(&0) {
            return Err("binary data".into());
        }
        // A few lines of something else at the head of a log.
        if lines.take(20).any(|line| line.starts_with(b"{")) {
            return Ok(Format::Ndjson);
        }
        let name = name.trim_end_matches(".gz").trim_end_matches(".zst");
        match Path::new(name).extension().and_then(|ending| ending.to_str()) {
            Some("ndjson" | "jsonl" | "json") => return Ok(Format::Ndjson),
            Some("csv" | "tsv") => return Ok(Format::Csv),
            Some("swf") => return Ok(Format::Swf),
            _ => {}
        }
        match std::str::from_utf8(first) {
            Ok(first) if first.contains(DELIMITERS.map(char::from)) => Ok(Format::Csv),
            Ok(first) => Err(format!("a text that begins {:?}", super::record::excerpt(first))),
            Err(_) => Err("binary data".into()),
        }
    }
}

/// What may stand between the cells of a row.
pub(super) const DELIMITERS: [u8; 3] = [b',', b';', b'\t'];

/// Things that are often at hand in place of a file of waits.
const FOREIGN: [(&[u8], &str); 6] = [
    (b"\xff\xfe", "UTF-16 text"),
    (b"\xfe\xff", "UTF-16 text"),
    (b"PK\x03\x04", "a zip archive"),
    (b"BZh", "bzip2"),
    (b"\xfd7zXZ\0", "xz"),
    (b"SQLite format 3\0", "a SQLite database, which is asked by `--from` and `--sql`"),
];

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn content_speaks_before_the_name() {
        let detect = |head: &str, name| Format::detect(head.as_bytes(), name);
        assert_eq!(detect("\n {\"elapsed\":1}", "waits.csv"), Ok(Format::Ndjson));
        assert_eq!(detect("starting\n{\"elapsed\":1}", "-"), Ok(Format::Ndjson));
        assert_eq!(detect("; Version: 2.2\n", "waits.csv"), Ok(Format::Swf));
        assert_eq!(detect("1 0 5 9 1 -1 -1 1 -1 -1 1 1 1 -1 1 -1 -1 -1\n", "-"), Ok(Format::Swf));
        assert_eq!(detect("stream;Elapsed_MS\n", "-"), Ok(Format::Csv));
        assert_eq!(detect("elapsed\n1\n", "-"), Ok(Format::Csv));
        assert_eq!(detect("what\n", "waits.csv.gz"), Ok(Format::Csv));
        assert_eq!(detect("who,what\n", "-"), Ok(Format::Csv));
        assert_eq!(detect("[{\"elapsed\":1}]", "waits.ndjson"), Err("a JSON array".into()));
        assert_eq!(detect("[12:00] hello", "-"), Err("a text that begins \"[12:00] hello\"".into()));
        assert_eq!(detect("\u{1}\0\u{2}", "waits.ndjson"), Err("binary data".into()));
        assert_eq!(detect("\u{1}\0\n{\u{2}", "waits"), Err("binary data".into()));
        assert_eq!(detect("{\"__REALTIME_TIMESTAMP\":\"1\"}\n", "-"), Ok(Format::Journal));
        assert_eq!(detect("hello", "-"), Err("a text that begins \"hello\"".into()));
    }
}
