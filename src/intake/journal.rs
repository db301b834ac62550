//! The journal's JSON export, an object a line (`journalctl --output=json`; systemd, "Journal Export Formats", section
//! "Journal JSON Format"): the message is a record, or a line for the pattern; its time and unit stand in where the
//! record has none.
//!
//! A journal holds everything that was said. A message that is no record is therefore left out and counted, and not a
//! bad line.

use std::borrow::Cow;

use serde::Deserialize;

use super::collect::Collector;
use super::flaw::Flaw;
use super::lines::Lines;
use super::pattern::Pattern;
use super::record::{Field, Fields};
use super::{Sink, ndjson};
use crate::wait::MAX_STREAM_BYTES;

/// The key by which a line is known.
const REALTIME: &str = "\"__REALTIME_TIMESTAMP\"";

/// Whether a line is an entry of a journal.
pub(super) fn is_entry(line: &[u8]) -> bool {
    line.starts_with(b"{") && memchr::memmem::find(line, REALTIME.as_bytes()).is_some()
}

#[derive(Deserialize)]
struct Entry<'a> {
    #[serde(rename = "__REALTIME_TIMESTAMP", borrow, default)]
    realtime: Value<'a>,
    #[serde(rename = "_SYSTEMD_UNIT", borrow, default)]
    unit: Value<'a>,
    #[serde(rename = "SYSLOG_IDENTIFIER", borrow, default)]
    identifier: Value<'a>,
    #[serde(rename = "MESSAGE", borrow, default)]
    message: Value<'a>,
}

/// What the journal writes for a field: a text; its bytes if it is not one; all of them if it stands there more than
/// once; `null` if it is too large.
#[derive(Default, Deserialize)]
#[serde(untagged)]
enum Value<'a> {
    Text(#[serde(borrow)] Cow<'a, str>),
    Bytes(Vec<u8>),
    Several(Vec<Value<'a>>),
    #[default]
    Nothing,
}

impl Value<'_> {
    fn text(&self) -> Option<Cow<'_, str>> {
        match self {
            Value::Text(text) => Some(Cow::Borrowed(text)),
            Value::Bytes(bytes) => Some(String::from_utf8_lossy(bytes)),
            Value::Several(values) => values.first()?.text(),
            Value::Nothing => None,
        }
    }
}

/// Reads a block of whole lines.
pub(super) fn harvest<S: Sink>(block: &[u8], pattern: Option<&Pattern>, collector: &mut Collector<'_, S>) {
    let mut lines = Lines::new(block, collector.line_limit());
    for (number, line) in lines.by_ref() {
        let outcome = line.and_then(|line| match serde_json::from_str::<Entry<'_>>(line) {
            Ok(entry) => take(number, &entry, pattern, collector),
            Err(error) => Err(Flaw::NotJson { field: None, reason: ndjson::reason(&error) }),
        });
        if let Err(flaw) = outcome {
            collector.refuse(number, flaw);
        }
    }
    collector.count_lines(lines.number());
}

fn take<S: Sink>(
    number: u64,
    entry: &Entry<'_>,
    pattern: Option<&Pattern>,
    collector: &mut Collector<'_, S>,
) -> Result<(), Flaw> {
    let message = entry.message.text().unwrap_or_default();
    let message = message.trim();
    let entries = match message.starts_with('{') {
        true => ndjson::careful(message, collector.mapping()).ok(),
        false => None,
    };
    let mut fields = match &entries {
        Some(entries) => ndjson::gather(entries)?,
        None => Fields::new(),
    };
    if let (None, Some(pattern)) = (&entries, pattern) {
        // A message that does not match leaves no field.
        let _ = pattern.read(message, &mut pattern.locations(), &mut fields);
    }
    let ages = [Field::Elapsed, Field::Over, Field::Upto, Field::Started, Field::Ended];
    if !ages.into_iter().any(|field| fields.has(field)) {
        collector.other_message();
        return Ok(());
    }
    let dated = [Field::At, Field::Started, Field::Ended].into_iter().any(|field| fields.has(field));
    if !dated && let Some(microseconds) = entry.realtime.text().and_then(|text| text.parse::<f64>().ok()) {
        fields.set_number(Field::At, microseconds / 1e6);
    }
    let unit = entry.unit.text().or_else(|| entry.identifier.text());
    let name = unit.as_deref().map(stream_name);
    if let (false, None, Some(name)) = (fields.has(Field::Stream), collector.nameless(), &name) {
        fields.set_text(Field::Stream, name);
    }
    collector.record(number, &fields)
}

/// A unit as a stream's name: without `.service`, and with `-` for what a name cannot hold.
fn stream_name(unit: &str) -> String {
    let letters = unit.strip_suffix(".service").unwrap_or(unit).chars();
    let allowed = |c: char| c.is_ascii_alphanumeric() || matches!(c, '.' | '_' | '-' | '/' | ':');
    letters.map(|c| if allowed(c) { c } else { '-' }).take(MAX_STREAM_BYTES).collect()
}
