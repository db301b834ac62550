//! OTLP, the open protocol of telemetry (opentelemetry.io/docs/specs/otlp): spans and histograms become waits.
//!
//! In: the body of a request, as protocol buffers or as JSON. Each span is a wait, from its start to its end. A histogram's
//! data point is waits of which only the bucket is known: at once where it counts since the last point, by what has been
//! added where it counts since a start. A line here is a span or a data point.

mod answer;
mod buckets;
mod json;
mod message;
mod wire;

use std::borrow::Cow;

use serde::Deserialize;

use self::buckets::histogram;
use self::message::{Attribute, Metric, Origin, Point, Span, Take, Value};
use super::Sink;
use super::collect::{Collector, Row};
use super::flaw::Flaw;
use super::record::Record;
use super::rules::{Facts, Rules};
use super::telemetry::TelemetryFlaw;
use crate::running::{CLOCK_STEP, LONGEST_FIRST, Running, SeriesKey};
use crate::wait::{Ending, Wait};

pub(super) use self::buckets::scaled;
pub use answer::{Answer, Encoding};

/// What a body holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Signal {
    Traces,
    Metrics,
}

/// Whether a head is that of a JSON document of one of the two.
pub(super) fn detect(head: &[u8]) -> Option<Signal> {
    let text = head.trim_ascii_start();
    if text.first() != Some(&b'{') {
        return None;
    }
    // The one name that such a document begins with, maybe after others of the kind.
    let place = |name: &[u8]| memchr::memmem::find(text, name).filter(|&at| at < 200);
    match (place(b"\"resourceSpans\""), place(b"\"resourceMetrics\"")) {
        (Some(_), _) => Some(Signal::Traces),
        (None, Some(_)) => Some(Signal::Metrics),
        (None, None) => None,
    }
}

/// Whether a head looks like lines of which each is a document, as collectors write them to files.
pub(super) fn is_lines(head: &[u8]) -> bool {
    let text = head.trim_ascii_start();
    let line = text.split(|&byte| byte == b'\n').next().unwrap_or_default();
    line.len() < text.len() && line.first() == Some(&b'{') && line.trim_ascii_end().ends_with(b"}")
}

/// Reads a whole body: JSON if it begins with a brace, which no message of the standard does, else protocol buffers. One
/// that cannot be decoded is refused once, whatever was taken of it before.
pub(super) fn harvest<S: Sink>(body: &[u8], signal: Signal, collector: &mut Collector<'_, S>) {
    let (rules, before) = (collector.rules(), collector.lines());
    let mut harvest = Harvest { collector, rules, number: before, name: String::new() };
    let outcome = if body.trim_ascii_start().first() == Some(&b'{') {
        harvest.json(body)
    } else {
        match signal {
            Signal::Traces => message::traces(body, &mut harvest),
            Signal::Metrics => message::metrics(body, &mut harvest),
        }
        .map_err(|error| TelemetryFlaw::Malformed { what: error.to_string() })
    };
    let Harvest { collector, mut number, .. } = harvest;
    if let Err(flaw) = outcome {
        collector.refuse(number, flaw.into());
        number += 1;
    }
    collector.count_lines(number - before);
}

/// Reads lines of which each is a whole document.
pub(super) fn harvest_lines<S: Sink>(block: &[u8], signal: Signal, collector: &mut Collector<'_, S>) {
    for line in block.split(|&byte| byte == b'\n').filter(|line| !line.trim_ascii().is_empty()) {
        harvest(line, signal, collector);
    }
}

struct Harvest<'c, 'w, S> {
    collector: &'c mut Collector<'w, S>,
    rules: &'w Rules,
    /// How many spans and data points there were before the next.
    number: u64,
    /// A stream's name being written.
    name: String,
}

impl<S: Sink> Harvest<'_, '_, S> {
    fn json(&mut self, body: &[u8]) -> Result<(), TelemetryFlaw> {
        let objects = memchr::memchr_iter(b'{', body).count();
        if objects > json::MOST_OBJECTS {
            return Err(TelemetryFlaw::Objects { objects });
        }
        let malformed = |what: String| TelemetryFlaw::Malformed { what };
        let text = std::str::from_utf8(body).map_err(|_| malformed("it is not UTF-8 text".into()))?;
        let mut json = serde_json::Deserializer::from_str(text);
        let document =
            json::Document::deserialize(&mut json).map_err(|error| malformed(error.to_string()))?;
        json.end().map_err(|error| malformed(error.to_string()))?;
        document.take(self);
        Ok(())
    }

    fn settle(&mut self, outcome: Result<(), Flaw>) {
        if let Err(flaw) = outcome {
            self.collector.refuse(self.number, flaw);
        }
        self.number += 1;
    }

    fn take_span(&mut self, origin: &Origin<'_>, span: &Span<'_>) -> Result<(), Flaw> {
        let facts = SpanFacts { origin, span };
        let Some(ending) = self.rules.ending(&facts) else {
            self.collector.not_waits(1);
            return Ok(());
        };
        for (time, field) in [(span.start, "startTimeUnixNano"), (span.end, "endTimeUnixNano")] {
            if time == 0 {
                return Err(TelemetryFlaw::Untimed { field }.into());
            }
        }
        let wait = match span.end.checked_sub(span.start) {
            None => return Err(Flaw::Backwards { by: seconds(span.start - span.end) }),
            // Too short for its clock.
            Some(0) => Wait::between(0.0, CLOCK_STEP, ending)?,
            Some(nanoseconds) => Wait::new(seconds(nanoseconds), ending)?,
        };
        let attempt = attempt(&span.attributes, &self.rules.resends)?;
        let wait = wait.with_attempt(attempt)?.with_at(seconds(span.end))?;
        let stream = match self.collector.one_stream() {
            Some(stream) => stream,
            None => {
                self.rules.stream.write(&facts, &mut self.name);
                &self.name
            }
        };
        self.collector.whole(Record { stream, place: 0, id: None, wait }, false)
    }

    fn take_point(
        &mut self,
        origin: &Origin<'_>,
        metric: &Metric<'_>,
        point: &Point<'_>,
    ) -> Result<(), Flaw> {
        let Some(unit) = unit(&metric.unit) else {
            self.collector.not_waits(1);
            return Ok(());
        };
        let facts = PointFacts { origin, metric, point };
        let ending = self.rules.ending(&facts);
        // The standard's first flag: there was nothing to record.
        let Some(ending) = ending.filter(|_| point.flags & 1 == 0) else {
            self.collector.not_waits(1);
            return Ok(());
        };
        if point.time == 0 {
            return Err(TelemetryFlaw::Untimed { field: "timeUnixNano" }.into());
        }
        let at = seconds(point.time);
        let attempt = attempt(&point.attributes, &self.rules.resends)?;
        let histogram = histogram(point, unit)?;
        let stream = match self.collector.one_stream() {
            Some(stream) => stream,
            None => {
                self.rules.stream.write(&facts, &mut self.name);
                &self.name
            }
        };
        match metric.temporality {
            1 => {
                let stream = self.collector.enter(stream)?;
                let like = Wait::between(0.0, f64::INFINITY, ending)?.with_attempt(attempt)?.with_at(at)?;
                let rows = histogram.waits(like).map(|wait| Row { stream, id: None, wait, bare: false });
                self.collector.rows(&mut rows.map(Some));
                Ok(())
            }
            2 => {
                let started = (point.start > 0).then(|| seconds(point.start));
                let counts_at_first = started.is_some_and(|started| at - started <= LONGEST_FIRST);
                let key = series(origin, metric, point);
                let stream = stream.into();
                let at = Some(at);
                let running =
                    Running { stream, ending, attempt, key, at, started, counts_at_first, histogram };
                self.collector.running(self.number, running)
            }
            found => Err(TelemetryFlaw::Temporality { found }.into()),
        }
    }
}

impl<'a, S: Sink> Take<'a> for Harvest<'_, '_, S> {
    fn span(&mut self, origin: &Origin<'a>, span: &Span<'a>) {
        let outcome = self.take_span(origin, span);
        self.settle(outcome);
    }

    fn point(&mut self, origin: &Origin<'a>, metric: &Metric<'a>, point: &Point<'a>) {
        let outcome = self.take_point(origin, metric, point);
        self.settle(outcome);
    }

    fn others(&mut self, points: u64) {
        self.collector.not_waits(points);
        self.number += points;
    }
}

/// Nanoseconds as seconds.
fn seconds(nanoseconds: u64) -> f64 {
    nanoseconds as f64 / 1e9
}

/// Which attempt it was, by how often the request had been sent before.
fn attempt(attributes: &[Attribute<'_>], resends: &str) -> Result<u32, Flaw> {
    let number = attributes.iter().find(|attribute| attribute.key == resends).map(|found| &found.value);
    let before = match number {
        None => return Ok(1),
        Some(Value::Int(number)) => u32::try_from(*number).ok(),
        Some(Value::Text(text)) => text.trim().parse().ok(),
        Some(Value::Double(number)) if number.fract() == 0.0 && (0.0..1e9).contains(number) => {
            Some(*number as u32)
        }
        Some(_) => None,
    };
    let after = before.and_then(|before| before.checked_add(1));
    after.ok_or_else(|| TelemetryFlaw::Resends { attribute: resends.chars().take(60).collect() }.into())
}

/// How many seconds a unit of the standard's (UCUM) is; `None` if it is not one of time.
fn unit(name: &str) -> Option<f64> {
    Some(match name {
        "s" | "seconds" => 1.0,
        "ms" | "milliseconds" => 1e-3,
        "us" | "\u{b5}s" | "\u{3bc}s" | "microseconds" => 1e-6,
        "ns" | "nanoseconds" => 1e-9,
        "min" | "minutes" => 60.0,
        "h" | "hours" => 3_600.0,
        "d" | "days" => 86_400.0,
        _ => return None,
    })
}

/// What tells a series from all others. Attributes count in any order.
fn series(origin: &Origin<'_>, metric: &Metric<'_>, point: &Point<'_>) -> SeriesKey {
    let mut bytes = Vec::with_capacity(256);
    let mut word = |text: &str| {
        bytes.extend((text.len() as u64).to_le_bytes());
        bytes.extend_from_slice(text.as_bytes());
    };
    for attributes in [&origin.resource, &point.attributes] {
        let mut sorted: Vec<(&str, Cow<'_, str>)> =
            attributes.iter().map(|a| (&*a.key, a.value.words().unwrap_or_default())).collect();
        sorted.sort();
        for (key, value) in sorted {
            word(key);
            word(&value);
        }
        word("");
    }
    word(&origin.scope);
    word(&metric.name);
    word(&metric.unit);
    bytes.extend(point.start.to_le_bytes());
    SeriesKey(twox_hash::XxHash3_128::oneshot(&bytes).to_le_bytes())
}

fn find<'a>(attributes: &[Attribute<'a>], name: &str) -> Option<Cow<'a, str>> {
    attributes.iter().find(|attribute| attribute.key == name)?.value.words()
}

struct SpanFacts<'f, 'a> {
    origin: &'f Origin<'a>,
    span: &'f Span<'a>,
}

impl<'a> Facts<'a> for SpanFacts<'_, 'a> {
    fn find(&self, name: &str) -> Option<Cow<'a, str>> {
        match name {
            "name" => Some(self.span.name.clone()),
            "scope" => Some(self.origin.scope.clone()),
            "kind" => Some(Cow::Borrowed(match self.span.kind {
                2 => "server",
                3 => "client",
                4 => "producer",
                5 => "consumer",
                _ => "internal",
            })),
            "status" => Some(Cow::Borrowed(match self.span.status {
                1 => "ok",
                2 => "error",
                _ => "unset",
            })),
            _ => find(&self.span.attributes, name).or_else(|| find(&self.origin.resource, name)),
        }
    }

    fn waits(&self) -> bool {
        // A server does not wait for itself, nor a consumer for what it was sent.
        !matches!(self.span.kind, 2 | 5)
    }

    fn said(&self) -> Option<Ending> {
        match self.span.status {
            1 => Some(Ending::Done),
            2 => Some(Ending::Failed),
            _ => None,
        }
    }
}

struct PointFacts<'f, 'a> {
    origin: &'f Origin<'a>,
    metric: &'f Metric<'a>,
    point: &'f Point<'a>,
}

impl<'a> Facts<'a> for PointFacts<'_, 'a> {
    fn find(&self, name: &str) -> Option<Cow<'a, str>> {
        match name {
            "name" => Some(self.metric.name.clone()),
            "scope" => Some(self.origin.scope.clone()),
            _ => find(&self.point.attributes, name).or_else(|| find(&self.origin.resource, name)),
        }
    }

    fn waits(&self) -> bool {
        // By the conventions a server's histogram has it in its name: `http.server.request.duration`.
        !self.metric.name.split('.').any(|word| word == "server")
    }

    fn said(&self) -> Option<Ending> {
        None
    }
}
