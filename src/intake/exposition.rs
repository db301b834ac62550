//! Metrics as text: the Prometheus text format 0.0.4 and OpenMetrics 1.0 (prometheus.io/docs/instrumenting/exposition_formats,
//! prometheus.io/docs/specs/om/open_metrics_spec). Classic histograms of time become readings of histograms that only
//! grow; all else is passed over.
//!
//! Written here because the one parser at hand that is maintained reads into maps and floats what is needed as sums, and a
//! line is read in a page; the tests hold it against that parser and against the client library of another language.

use std::borrow::Cow;
use std::collections::HashMap;

use foldhash::fast::RandomState;

use super::Sink;
use super::collect::Collector;
use super::flaw::Flaw;
use super::rules::{Facts, Rules, Template};
use super::telemetry::TelemetryFlaw;
use crate::running::{Histogram, MAX_BOUNDS, Running, SeriesKey};
use crate::wait::{Ending, MAX_COUNT};

/// How the histograms of a text become waits.
#[derive(Clone, Debug, PartialEq)]
pub struct Exposition {
    /// Which stream and which ending. `name` stands for the metric's name.
    pub rules: Rules,
    /// The unit, in seconds, of histograms whose name does not end in one; without it they are left out.
    pub unit: Option<f64>,
    /// When it was read, Unix seconds, where samples do not say.
    pub at: Option<f64>,
    /// Whether a series that is met for the first time is counted whole: all that stood there was read before.
    pub counts_at_first: bool,
    /// Where it was read, so that two places with the same names are two series.
    pub place: String,
}

impl Default for Exposition {
    fn default() -> Exposition {
        let rules = Rules::named(Template::slot("name"));
        Exposition { rules, unit: None, at: None, counts_at_first: false, place: String::new() }
    }
}

/// Whether a head is that of such a text.
pub(super) fn detect(head: &[u8]) -> bool {
    let first = head.trim_ascii_start();
    [&b"# HELP "[..], b"# TYPE ", b"# UNIT "].iter().any(|start| first.starts_with(start))
}

/// A name with the labels that tell a series from its neighbours, in the order of their names.
type Labels<'a> = Vec<(&'a str, Cow<'a, str>)>;

/// A histogram that is being read: at one time, under one set of labels.
#[derive(Debug, Default)]
struct Open {
    line: u64,
    bounds: Vec<f64>,
    sums: Vec<u64>,
    count: Option<u64>,
    created: Option<f64>,
    flaw: Option<TelemetryFlaw>,
}

type Key<'a> = (&'a str, Labels<'a>, Option<u64>);

/// Reads a whole text.
pub(super) fn harvest<S: Sink>(text: &[u8], collector: &mut Collector<'_, S>) {
    let settings = collector.exposition();
    let Ok(text) = std::str::from_utf8(text) else {
        collector.refuse(0, Flaw::NotText);
        collector.count_lines(1);
        return;
    };
    let mut kinds: HashMap<&str, Kind, RandomState> = HashMap::default();
    let mut places: HashMap<Key<'_>, usize, RandomState> = HashMap::default();
    let mut open: Vec<Open> = Vec::new();
    let (mut number, mut others) = (0, 0);
    // Seconds in OpenMetrics, which ends so; milliseconds before it.
    let is_open_metrics = text.trim_end().ends_with("# EOF");
    for line in text.split('\n') {
        let here = number;
        number += 1;
        let line = line.trim();
        if line.is_empty() {
            continue;
        }
        if let Some(comment) = line.strip_prefix('#') {
            let mut words = comment.split_ascii_whitespace();
            if let (Some("TYPE"), Some(name), Some(kind)) = (words.next(), words.next(), words.next()) {
                let kind = if kind == "histogram" { Kind::Histogram } else { Kind::Other };
                kinds.insert(name, kind);
            }
            continue;
        }
        let sample = match sample(line) {
            Ok(sample) => sample,
            Err(flaw) => {
                collector.refuse(here, flaw.into());
                continue;
            }
        };
        let Some((name, part)) = part(sample.name, &kinds) else {
            others += 1;
            continue;
        };
        let mut labels = sample.labels;
        let le = labels.iter().position(|(name, _)| *name == "le").map(|i| labels.swap_remove(i).1);
        labels.sort();
        let found = (kinds.get(name) == Some(&Kind::Histogram)) || (part == Part::Bucket && le.is_some());
        if !found {
            others += 1;
            continue;
        }
        let next = open.len();
        let place = *places.entry((name, labels, sample.time.map(f64::to_bits))).or_insert(next);
        if place == next {
            open.push(Open { line: here, ..Open::default() });
        }
        let Some(open) = open.get_mut(place) else { continue };
        if let Err(flaw) = open.take(part, le.as_deref(), sample.value) {
            open.flaw.get_or_insert(flaw);
        }
    }
    let mut all: Vec<(Key<'_>, usize)> = places.into_iter().collect();
    all.sort_by_key(|(_, place)| *place);
    let mut name = String::new();
    for ((metric, labels, time), place) in all {
        let Some(open) = open.get_mut(place).map(std::mem::take) else { continue };
        let facts = Sample { name: metric, labels: &labels };
        let unit = unit(metric).or(settings.unit);
        // A `_count` alone may be a summary's.
        let is_histogram = !open.bounds.is_empty() || open.flaw.is_some();
        let (Some(unit), Some(ending), true) = (unit, settings.rules.ending(&facts), is_histogram) else {
            others += 1;
            continue;
        };
        let line = open.line;
        let outcome = open.close(unit).map_err(Flaw::from).and_then(|(histogram, created)| {
            let stream = match collector.one_stream() {
                Some(stream) => stream,
                None => {
                    settings.rules.stream.write(&facts, &mut name);
                    &name
                }
            };
            let second = if is_open_metrics { 1.0 } else { 1e3 };
            let at = time.map(|bits| f64::from_bits(bits) / second).or(settings.at);
            let key = series(&settings.place, metric, &labels);
            let counts_at_first = settings.counts_at_first;
            let stream = stream.into();
            let running =
                Running { stream, ending, attempt: 1, key, at, started: created, counts_at_first, histogram };
            collector.running(line, running)
        });
        if let Err(flaw) = outcome {
            collector.refuse(line, flaw);
        }
    }
    collector.not_waits(others);
    // A text that ends in a newline has no line after it.
    collector.count_lines(number - u64::from(text.ends_with('\n')));
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Kind {
    Histogram,
    Other,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Part {
    Bucket,
    Count,
    Created,
    Sum,
}

/// The metric that a sample belongs to, and as what; `None` if it can be no part of a histogram.
fn part<'a>(name: &'a str, kinds: &HashMap<&str, Kind, RandomState>) -> Option<(&'a str, Part)> {
    let parts = [
        ("_bucket", Part::Bucket),
        ("_count", Part::Count),
        ("_created", Part::Created),
        ("_sum", Part::Sum),
    ];
    let (base, part) = parts.into_iter().find_map(|(end, part)| Some((name.strip_suffix(end)?, part)))?;
    // What is said to be something else is no histogram, whatever it is called.
    (kinds.get(base) != Some(&Kind::Other)).then_some((base, part))
}

impl Open {
    fn take(&mut self, part: Part, le: Option<&str>, value: f64) -> Result<(), TelemetryFlaw> {
        match part {
            Part::Sum => {}
            Part::Created => self.created = Some(value).filter(|created| created.is_finite()),
            Part::Count => self.count = Some(count(value)?),
            Part::Bucket => {
                let le = le.ok_or(TelemetryFlaw::NoBound { found: String::new() })?;
                let bound = number(le).filter(|bound| !bound.is_nan());
                let bound =
                    bound.ok_or_else(|| TelemetryFlaw::NoBound { found: le.chars().take(60).collect() })?;
                if self.bounds.len() > MAX_BOUNDS {
                    return Err(crate::running::HistogramError::Bounds { bounds: self.bounds.len() }.into());
                }
                self.bounds.push(bound);
                self.sums.push(count(value)?);
            }
        }
        Ok(())
    }

    /// The histogram, and when it began. `unit`: s.
    fn close(self, unit: f64) -> Result<(Histogram, Option<f64>), TelemetryFlaw> {
        if let Some(flaw) = self.flaw {
            return Err(flaw);
        }
        let mut buckets: Vec<(f64, u64)> = self.bounds.into_iter().zip(self.sums).collect();
        buckets.sort_by(|a, b| a.0.total_cmp(&b.0));
        let last = buckets.last().copied().filter(|(bound, _)| *bound == f64::INFINITY);
        if last.is_some() {
            buckets.pop();
        }
        let total = match (last, self.count) {
            (Some((_, sum)), Some(count)) if sum != count => {
                return Err(TelemetryFlaw::Sum { buckets: sum, count });
            }
            (Some((_, sum)), _) => sum,
            (None, Some(count)) => count,
            // How many were longer than the last bound nothing says.
            (None, None) => return Err(TelemetryFlaw::NoTotal),
        };
        let bounds: Vec<f64> = buckets.iter().map(|(bound, _)| super::otlp::scaled(*bound, unit)).collect();
        let sums: Vec<u64> = buckets.iter().map(|(_, sum)| *sum).collect();
        Ok((Histogram::from_sums(bounds, sums, total)?, self.created))
    }
}

fn count(value: f64) -> Result<u64, TelemetryFlaw> {
    // Up to here a double holds every whole number.
    let whole = value.fract() == 0.0 && (0.0..=MAX_COUNT as f64).contains(&value);
    if whole { Ok(value as u64) } else { Err(TelemetryFlaw::NoCount { value }) }
}

/// The unit that a name ends in, s; `None` if it names none of time.
fn unit(name: &str) -> Option<f64> {
    Some(match name.rsplit('_').next()? {
        "seconds" => 1.0,
        "milliseconds" | "ms" => 1e-3,
        "microseconds" | "us" => 1e-6,
        "nanoseconds" | "ns" => 1e-9,
        "minutes" => 60.0,
        "hours" => 3_600.0,
        "days" => 86_400.0,
        _ => return None,
    })
}

/// One sample of a text.
#[derive(Debug, PartialEq)]
struct Line<'a> {
    name: &'a str,
    labels: Labels<'a>,
    value: f64,
    time: Option<f64>,
}

/// Most labels of one sample.
const MOST_LABELS: usize = 200;

/// Reads `name{label="value"} value time`, with what may follow in OpenMetrics (an exemplar) passed over.
fn sample(line: &str) -> Result<Line<'_>, TelemetryFlaw> {
    let bad = |what| TelemetryFlaw::Sample { what };
    let end = line.find(|c: char| !is_name(c)).unwrap_or(line.len());
    let (name, mut rest) = line.split_at(end);
    if name.is_empty() || name.starts_with(|c: char| c.is_ascii_digit()) {
        return Err(bad("it does not begin with the name of a metric"));
    }
    let mut labels = Vec::new();
    rest = rest.trim_start();
    if let Some(inside) = rest.strip_prefix('{') {
        rest = inside.trim_start();
        loop {
            if let Some(after) = rest.strip_prefix('}') {
                rest = after;
                break;
            }
            let (label, after) = rest.split_once('=').ok_or(bad("a label has no value"))?;
            let label = label.trim_end();
            if label.is_empty() || !label.chars().all(is_name) || labels.len() >= MOST_LABELS {
                return Err(bad("a label has no name that it may have"));
            }
            let quoted =
                after.trim_start().strip_prefix('"').ok_or(bad("a label's value has no quotation mark"))?;
            let (value, after) =
                text(quoted).ok_or(bad("a label's value is not closed, or holds an escape that is none"))?;
            labels.push((label, value));
            rest = after.trim_start();
            match rest.strip_prefix(',') {
                Some(after) => rest = after.trim_start(),
                None if rest.starts_with('}') => {}
                None => return Err(bad("labels are parted by commas")),
            }
        }
    }
    let mut words = rest.split_ascii_whitespace();
    let value = words.next().and_then(number).ok_or(bad("it has no number"))?;
    let time = match words.next() {
        None => None,
        Some(word) if word.starts_with('#') => None,
        Some(word) => {
            Some(number(word).filter(|time| time.is_finite()).ok_or(bad("its time is not a number"))?)
        }
    };
    Ok(Line { name, labels, value, time })
}

fn is_name(c: char) -> bool {
    c.is_ascii_alphanumeric() || c == '_' || c == ':' || c == '.'
}

/// A text up to its quotation mark, with its escapes undone, and what follows.
fn text(quoted: &str) -> Option<(Cow<'_, str>, &str)> {
    let end = quoted.find(['"', '\\'])?;
    let (plain, rest) = quoted.split_at(end);
    if let Some(after) = rest.strip_prefix('"') {
        return Some((plain.into(), after));
    }
    let mut text = plain.to_owned();
    let mut chars = rest.char_indices();
    while let Some((at, c)) = chars.next() {
        match c {
            '"' => return Some((text.into(), rest.get(at + 1..)?)),
            '\\' => text.push(match chars.next()?.1 {
                'n' => '\n',
                c @ ('"' | '\\') => c,
                _ => return None,
            }),
            c => text.push(c),
        }
    }
    None
}

/// A number as Go writes it: also `+Inf`, `-Inf`, `NaN`.
fn number(word: &str) -> Option<f64> {
    match word {
        "NaN" => Some(f64::NAN),
        // Rust would take these words and others of the kind.
        _ if word.ends_with(|c: char| c.is_ascii_digit() || c == '.') => word.parse().ok(),
        "+Inf" | "Inf" => Some(f64::INFINITY),
        "-Inf" => Some(f64::NEG_INFINITY),
        _ => None,
    }
}

fn series(place: &str, name: &str, labels: &Labels<'_>) -> SeriesKey {
    let mut bytes = Vec::with_capacity(128);
    for word in [place, name].into_iter().chain(labels.iter().flat_map(|(label, value)| [*label, &**value])) {
        bytes.extend((word.len() as u64).to_le_bytes());
        bytes.extend_from_slice(word.as_bytes());
    }
    SeriesKey(twox_hash::XxHash3_128::oneshot(&bytes).to_le_bytes())
}

struct Sample<'f, 'a> {
    name: &'a str,
    labels: &'f Labels<'a>,
}

impl<'a> Facts<'a> for Sample<'_, 'a> {
    fn find(&self, name: &str) -> Option<Cow<'a, str>> {
        let label =
            |name: &str| self.labels.iter().find(|(label, _)| *label == name).map(|(_, value)| value.clone());
        match name {
            "name" => Some(self.name.into()),
            // A dotted attribute has underscores here.
            _ => label(name).or_else(|| label(&name.replace('.', "_"))),
        }
    }

    fn waits(&self) -> bool {
        !self.name.split('_').any(|word| word == "server")
    }

    fn said(&self) -> Option<Ending> {
        None
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn samples() {
        let read = |line: &'static str| sample(line).unwrap();
        let line = read(r#"http_requests_total{method="post",code="200"} 1027 1395066363000"#);
        assert_eq!(
            (line.name, line.value, line.time),
            ("http_requests_total", 1027.0, Some(1_395_066_363_000.0))
        );
        assert_eq!(line.labels, [("method", "post".into()), ("code", "200".into())]);
        // The format's own example of escapes.
        let line = read(
            r#"msdos_file_access_time_seconds{path="C:\\DIR\\FILE.TXT",error="Cannot find file:\n\"FILE.TXT\""} 1.458255915e9"#,
        );
        assert_eq!(line.labels[0].1, r"C:\DIR\FILE.TXT");
        assert_eq!(line.labels[1].1, "Cannot find file:\n\"FILE.TXT\"");
        assert!(read("something_weird{problem=\"division by zero\"} +Inf -3982045").value.is_infinite());
        assert!(read("a NaN").value.is_nan());
        assert_eq!(read("foo_bucket{le=\"0.1\", } 8 # {} 0.054").value, 8.0);
        assert_eq!(read("foo_bucket {} 8 1.5 # {a=\"b\"} 0.054 1").time, Some(1.5));
        for bad in [
            "",
            "1a 5",
            "a",
            "a{",
            "a{b} 1",
            "a{b=c} 1",
            "a{b=\"c} 1",
            "a{b=\"\\x\"} 1",
            "a x",
            "a inf",
            "a 1 x",
            "a{b=\"c\" d=\"e\"} 1",
        ] {
            assert!(sample(bad).is_err(), "{bad}");
        }
    }
}
