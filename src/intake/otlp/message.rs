//! Spans and data points as the standard defines them (opentelemetry-proto 1.x), as far as they matter here, and how they
//! are read from protocol buffers. The same structs are read from JSON in `json`.

use std::borrow::Cow;

use super::wire::{Malformed, Message, Wire};
use crate::running::MAX_BOUNDS;

/// Most attributes of one span, data point or resource; SDKs cut at 128 unless told otherwise.
pub(super) const MOST_ATTRIBUTES: usize = 1_000;

/// An attribute's value. Arrays, maps and bytes are no words to tell one wait from another by.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) enum Value<'a> {
    #[default]
    Other,
    Text(Cow<'a, str>),
    Bool(bool),
    Int(i64),
    Double(f64),
}

impl<'a> Value<'a> {
    pub(super) fn words(&self) -> Option<Cow<'a, str>> {
        Some(match self {
            Value::Other => return None,
            Value::Text(text) => text.clone(),
            Value::Bool(true) => "true".into(),
            Value::Bool(false) => "false".into(),
            Value::Int(number) => number.to_string().into(),
            Value::Double(number) => number.to_string().into(),
        })
    }
}

#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Attribute<'a> {
    pub(super) key: Cow<'a, str>,
    pub(super) value: Value<'a>,
}

/// Where something comes from.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Origin<'a> {
    pub(super) resource: Vec<Attribute<'a>>,
    pub(super) scope: Cow<'a, str>,
}

#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Span<'a> {
    pub(super) name: Cow<'a, str>,
    pub(super) kind: i32,
    /// Unix nanoseconds; 0: not given.
    pub(super) start: u64,
    pub(super) end: u64,
    pub(super) attributes: Vec<Attribute<'a>>,
    pub(super) status: i32,
}

/// What stands over the data points of a metric.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Metric<'a> {
    pub(super) name: Cow<'a, str>,
    pub(super) unit: Cow<'a, str>,
    /// 1: since the last point; 2: since the start.
    pub(super) temporality: i32,
}

/// A data point of a histogram.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Point<'a> {
    /// Unix nanoseconds; 0: not given.
    pub(super) start: u64,
    pub(super) time: u64,
    pub(super) count: u64,
    pub(super) flags: u64,
    pub(super) attributes: Vec<Attribute<'a>>,
    pub(super) shape: Shape,
}

#[derive(Clone, Debug, PartialEq)]
pub(super) enum Shape {
    Explicit { bounds: Vec<f64>, counts: Vec<u64> },
    Exponential { scale: i32, zeros: u64, zero_upto: f64, positive: Buckets, negative: Buckets },
}

impl Default for Shape {
    fn default() -> Shape {
        Shape::Explicit { bounds: Vec::new(), counts: Vec::new() }
    }
}

/// Buckets that follow one another, from a first number on.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Buckets {
    pub(super) offset: i32,
    pub(super) counts: Vec<u64>,
}

/// What takes the things that a body holds, in their order.
pub(super) trait Take<'a> {
    fn span(&mut self, origin: &Origin<'a>, span: &Span<'a>);
    fn point(&mut self, origin: &Origin<'a>, metric: &Metric<'a>, point: &Point<'a>);
    /// Data points that are no histograms.
    fn others(&mut self, points: u64);
}

/// Reads an `ExportTraceServiceRequest`, which is laid out as `TracesData` is.
pub(super) fn traces<'a>(body: &'a [u8], take: &mut impl Take<'a>) -> Result<(), Malformed> {
    let mut span = Span::default();
    each(Message(body), 1, |resource_spans| {
        let mut origin = Origin { resource: resource(resource_spans)?, ..Origin::default() };
        each(resource_spans, 2, |scope_spans| {
            origin.scope = scope(scope_spans)?;
            each(scope_spans, 2, |message| {
                read_span(message, &mut span)?;
                take.span(&origin, &span);
                Ok(())
            })
        })
    })
}

/// Reads an `ExportMetricsServiceRequest`, which is laid out as `MetricsData` is.
pub(super) fn metrics<'a>(body: &'a [u8], take: &mut impl Take<'a>) -> Result<(), Malformed> {
    each(Message(body), 1, |resource_metrics| {
        let mut origin = Origin { resource: resource(resource_metrics)?, ..Origin::default() };
        each(resource_metrics, 2, |scope_metrics| {
            origin.scope = scope(scope_metrics)?;
            each(scope_metrics, 2, |message| read_metric(message, &origin, take))
        })
    })
}

/// Every message under a number.
fn each<'a>(
    mut message: Message<'a>,
    wanted: u32,
    mut take: impl FnMut(Message<'a>) -> Result<(), Malformed>,
) -> Result<(), Malformed> {
    while let Some((number, wire)) = message.next()? {
        if number == wanted {
            take(wire.message(number)?)?;
        }
    }
    Ok(())
}

/// The attributes of the resource, wherever it stands.
fn resource(outer: Message<'_>) -> Result<Vec<Attribute<'_>>, Malformed> {
    let mut attributes = Vec::new();
    each(outer, 1, |resource| each(resource, 1, |pair| push(&mut attributes, pair)))?;
    Ok(attributes)
}

/// The name of the instrumentation scope.
fn scope(outer: Message<'_>) -> Result<Cow<'_, str>, Malformed> {
    let mut name = "";
    each(outer, 1, |mut scope| {
        while let Some((number, wire)) = scope.next()? {
            if number == 1 {
                name = wire.text(number)?;
            }
        }
        Ok(())
    })?;
    Ok(name.into())
}

fn push<'a>(attributes: &mut Vec<Attribute<'a>>, mut pair: Message<'a>) -> Result<(), Malformed> {
    if attributes.len() >= MOST_ATTRIBUTES {
        return Err(Malformed::TooMany("a list of attributes", MOST_ATTRIBUTES));
    }
    let mut attribute = Attribute::default();
    while let Some((number, wire)) = pair.next()? {
        match number {
            1 => attribute.key = wire.text(number)?.into(),
            2 => attribute.value = value(wire.message(number)?)?,
            _ => {}
        }
    }
    attributes.push(attribute);
    Ok(())
}

fn value(mut message: Message<'_>) -> Result<Value<'_>, Malformed> {
    let mut value = Value::Other;
    while let Some((number, wire)) = message.next()? {
        value = match number {
            1 => Value::Text(wire.text(number)?.into()),
            2 => Value::Bool(wire.varint(number)? != 0),
            3 => Value::Int(wire.varint(number)? as i64),
            4 => Value::Double(wire.double(number)?),
            _ => Value::Other,
        };
    }
    Ok(value)
}

fn read_span<'a>(mut message: Message<'a>, span: &mut Span<'a>) -> Result<(), Malformed> {
    let mut attributes = std::mem::take(&mut span.attributes);
    attributes.clear();
    *span = Span { attributes, ..Span::default() };
    while let Some((number, wire)) = message.next()? {
        match number {
            5 => span.name = wire.text(number)?.into(),
            6 => span.kind = wire.varint(number)? as i32,
            7 => span.start = wire.fixed64(number)?,
            8 => span.end = wire.fixed64(number)?,
            9 => push(&mut span.attributes, wire.message(number)?)?,
            15 => {
                let mut status = wire.message(number)?;
                while let Some((number, wire)) = status.next()? {
                    if number == 3 {
                        span.status = wire.varint(number)? as i32;
                    }
                }
            }
            _ => {}
        }
    }
    Ok(())
}

fn read_metric<'a>(
    mut message: Message<'a>,
    origin: &Origin<'a>,
    take: &mut impl Take<'a>,
) -> Result<(), Malformed> {
    let mut metric = Metric::default();
    let mut data = Vec::new();
    while let Some((number, wire)) = message.next()? {
        match number {
            1 => metric.name = wire.text(number)?.into(),
            3 => metric.unit = wire.text(number)?.into(),
            // A metric has data of one kind; where there are several the last counts, as for every choice.
            5 | 7 | 9 | 10 | 11 => data = vec![(number, wire.message(number)?)],
            _ => {}
        }
    }
    let Some(&(kind, data)) = data.first() else { return Ok(()) };
    if !matches!(kind, 9 | 10) {
        let mut points = 0;
        each(data, 1, |_| {
            points += 1;
            Ok(())
        })?;
        take.others(points);
        return Ok(());
    }
    let mut rest = data;
    while let Some((number, wire)) = rest.next()? {
        if number == 2 {
            metric.temporality = wire.varint(number)? as i32;
        }
    }
    each(data, 1, |message| {
        let point = if kind == 9 { explicit(message)? } else { exponential(message)? };
        take.point(origin, &metric, &point);
        Ok(())
    })
}

fn explicit(mut message: Message<'_>) -> Result<Point<'_>, Malformed> {
    let mut point = Point::default();
    let (mut counts, mut bounds) = (Vec::new(), Vec::new());
    while let Some((number, wire)) = message.next()? {
        match number {
            6 => wire.fixed64s(number, MAX_BOUNDS + 1, &mut counts)?,
            7 => wire.fixed64s(number, MAX_BOUNDS, &mut bounds)?,
            9 => push(&mut point.attributes, wire.message(number)?)?,
            _ => common(number, wire, &mut point)?,
        }
    }
    point.shape = Shape::Explicit { bounds: bounds.into_iter().map(f64::from_bits).collect(), counts };
    Ok(point)
}

fn exponential(mut message: Message<'_>) -> Result<Point<'_>, Malformed> {
    let mut point = Point::default();
    let (mut scale, mut zeros, mut zero_upto) = (0, 0, 0.0);
    let (mut positive, mut negative) = (Buckets::default(), Buckets::default());
    while let Some((number, wire)) = message.next()? {
        match number {
            1 => push(&mut point.attributes, wire.message(number)?)?,
            6 => scale = wire.signed(number)?,
            7 => zeros = wire.fixed64(number)?,
            8 => buckets(wire.message(number)?, &mut positive)?,
            9 => buckets(wire.message(number)?, &mut negative)?,
            14 => zero_upto = wire.double(number)?,
            _ => common(number, wire, &mut point)?,
        }
    }
    point.shape = Shape::Exponential { scale, zeros, zero_upto, positive, negative };
    Ok(point)
}

/// The fields that both kinds have under the same numbers.
fn common(number: u32, wire: Wire<'_>, point: &mut Point<'_>) -> Result<(), Malformed> {
    match number {
        2 => point.start = wire.fixed64(number)?,
        3 => point.time = wire.fixed64(number)?,
        4 => point.count = wire.fixed64(number)?,
        10 => point.flags = wire.varint(number)?,
        _ => {}
    }
    Ok(())
}

fn buckets(mut message: Message<'_>, buckets: &mut Buckets) -> Result<(), Malformed> {
    while let Some((number, wire)) = message.next()? {
        match number {
            1 => buckets.offset = wire.signed(number)?,
            2 => wire.varints(number, MAX_BOUNDS, &mut buckets.counts)?,
            _ => {}
        }
    }
    Ok(())
}
