//! The JSON form of the same messages: names in lowerCamelCase, 64-bit numbers as texts or as numbers, unknown names
//! passed over.

use std::borrow::Cow;
use std::fmt;
use std::marker::PhantomData;

use serde::de::{Error, IgnoredAny, SeqAccess, Visitor};
use serde::{Deserialize, Deserializer};

use super::message::{Attribute, Buckets, MOST_ATTRIBUTES, Metric, Origin, Point, Shape, Span, Take, Value};
use crate::running::MAX_BOUNDS;

/// Most objects in one document, so that what it becomes in memory is bounded: about 50,000 spans of ten attributes.
pub(super) const MOST_OBJECTS: usize = 1_000_000;

/// A request of either kind. What it is called by is what it is.
#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
pub(super) struct Document<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    resource_spans: Vec<ResourceSpans<'a>>,
    #[serde(borrow, deserialize_with = "or_default")]
    resource_metrics: Vec<ResourceMetrics<'a>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct ResourceSpans<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    resource: Resource<'a>,
    #[serde(borrow, deserialize_with = "or_default")]
    scope_spans: Vec<ScopeSpans<'a>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct ResourceMetrics<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    resource: Resource<'a>,
    #[serde(borrow, deserialize_with = "or_default")]
    scope_metrics: Vec<ScopeMetrics<'a>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default)]
struct Resource<'a> {
    #[serde(borrow, deserialize_with = "attributes")]
    attributes: Vec<Attribute<'a>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default)]
struct Scope<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    name: Text<'a>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default)]
struct ScopeSpans<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    scope: Scope<'a>,
    #[serde(borrow, deserialize_with = "or_default")]
    spans: Vec<SpanJson<'a>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default)]
struct ScopeMetrics<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    scope: Scope<'a>,
    #[serde(borrow, deserialize_with = "or_default")]
    metrics: Vec<MetricJson<'a>>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct SpanJson<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    name: Text<'a>,
    #[serde(deserialize_with = "or_default")]
    kind: i32,
    #[serde(deserialize_with = "or_default")]
    start_time_unix_nano: Unsigned,
    #[serde(deserialize_with = "or_default")]
    end_time_unix_nano: Unsigned,
    #[serde(borrow, deserialize_with = "attributes")]
    attributes: Vec<Attribute<'a>>,
    #[serde(deserialize_with = "or_default")]
    status: Status,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default)]
struct Status {
    #[serde(deserialize_with = "or_default")]
    code: i32,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct MetricJson<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    name: Text<'a>,
    #[serde(borrow, deserialize_with = "or_default")]
    unit: Text<'a>,
    #[serde(borrow, deserialize_with = "or_default")]
    histogram: Option<Data<'a>>,
    #[serde(borrow, deserialize_with = "or_default")]
    exponential_histogram: Option<Data<'a>>,
    #[serde(deserialize_with = "or_default")]
    gauge: Others,
    #[serde(deserialize_with = "or_default")]
    sum: Others,
    #[serde(deserialize_with = "or_default")]
    summary: Others,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct Data<'a> {
    #[serde(borrow, deserialize_with = "or_default")]
    data_points: Vec<PointJson<'a>>,
    #[serde(deserialize_with = "or_default")]
    aggregation_temporality: i32,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct Others {
    #[serde(deserialize_with = "or_default")]
    data_points: Vec<IgnoredAny>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct PointJson<'a> {
    #[serde(deserialize_with = "or_default")]
    start_time_unix_nano: Unsigned,
    #[serde(deserialize_with = "or_default")]
    time_unix_nano: Unsigned,
    #[serde(deserialize_with = "or_default")]
    count: Unsigned,
    #[serde(deserialize_with = "or_default")]
    flags: Unsigned,
    #[serde(borrow, deserialize_with = "attributes")]
    attributes: Vec<Attribute<'a>>,
    #[serde(deserialize_with = "or_default")]
    bucket_counts: Bounded<Unsigned>,
    #[serde(deserialize_with = "or_default")]
    explicit_bounds: Bounded<Double>,
    #[serde(deserialize_with = "or_default")]
    scale: i32,
    #[serde(deserialize_with = "or_default")]
    zero_count: Unsigned,
    #[serde(deserialize_with = "or_default")]
    zero_threshold: Double,
    #[serde(deserialize_with = "or_default")]
    positive: BucketsJson,
    #[serde(deserialize_with = "or_default")]
    negative: BucketsJson,
}

#[derive(Debug, Default, Deserialize)]
#[serde(default, rename_all = "camelCase")]
struct BucketsJson {
    #[serde(deserialize_with = "or_default")]
    offset: i32,
    #[serde(deserialize_with = "or_default")]
    bucket_counts: Bounded<Unsigned>,
}

impl<'a> Document<'a> {
    /// Hands on all that it holds.
    pub(super) fn take(self, take: &mut impl Take<'a>) {
        for ResourceSpans { resource, scope_spans } in self.resource_spans {
            let mut origin = Origin { resource: resource.attributes, scope: "".into() };
            for ScopeSpans { scope, spans } in scope_spans {
                origin.scope = scope.name.0;
                spans.into_iter().for_each(|span| take.span(&origin, &span.into()));
            }
        }
        for ResourceMetrics { resource, scope_metrics } in self.resource_metrics {
            let mut origin = Origin { resource: resource.attributes, scope: "".into() };
            for ScopeMetrics { scope, metrics } in scope_metrics {
                origin.scope = scope.name.0;
                metrics.into_iter().for_each(|metric| metric.take(&origin, take));
            }
        }
    }
}

impl<'a> From<SpanJson<'a>> for Span<'a> {
    fn from(span: SpanJson<'a>) -> Span<'a> {
        Span {
            name: span.name.0,
            kind: span.kind,
            start: span.start_time_unix_nano.0,
            end: span.end_time_unix_nano.0,
            attributes: span.attributes,
            status: span.status.code,
        }
    }
}

impl<'a> MetricJson<'a> {
    fn take(self, origin: &Origin<'a>, take: &mut impl Take<'a>) {
        let others = [self.gauge, self.sum, self.summary];
        take.others(others.iter().map(|data| data.data_points.len() as u64).sum());
        let mut metric = Metric { name: self.name.0, unit: self.unit.0, temporality: 0 };
        for (data, exponential) in [(self.histogram, false), (self.exponential_histogram, true)] {
            let Some(data) = data else { continue };
            metric.temporality = data.aggregation_temporality;
            data.data_points
                .into_iter()
                .for_each(|point| take.point(origin, &metric, &point.point(exponential)));
        }
    }
}

impl<'a> PointJson<'a> {
    fn point(self, exponential: bool) -> Point<'a> {
        let numbers = |list: Bounded<Unsigned>| list.0.into_iter().map(|n| n.0).collect();
        let buckets = |b: BucketsJson| Buckets { offset: b.offset, counts: numbers(b.bucket_counts) };
        let shape = if exponential {
            Shape::Exponential {
                scale: self.scale,
                zeros: self.zero_count.0,
                zero_upto: self.zero_threshold.0,
                positive: buckets(self.positive),
                negative: buckets(self.negative),
            }
        } else {
            let bounds = self.explicit_bounds.0.into_iter().map(|n| n.0).collect();
            Shape::Explicit { bounds, counts: numbers(self.bucket_counts) }
        };
        Point {
            start: self.start_time_unix_nano.0,
            time: self.time_unix_nano.0,
            count: self.count.0,
            flags: self.flags.0,
            attributes: self.attributes,
            shape,
        }
    }
}

/// A value, or what it is when absent for `null`, which the JSON mapping of protocol buffers takes as absence.
fn or_default<'de, D: Deserializer<'de>, T: Default + Deserialize<'de>>(
    deserializer: D,
) -> Result<T, D::Error> {
    Option::deserialize(deserializer).map(Option::unwrap_or_default)
}

/// A text, borrowed where it has no escapes.
#[derive(Debug, Default)]
struct Text<'a>(Cow<'a, str>);

impl<'de: 'a, 'a> Deserialize<'de> for Text<'a> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Text<'a>, D::Error> {
        #[derive(Deserialize)]
        struct Borrowed<'b>(#[serde(borrow)] Cow<'b, str>);
        Borrowed::deserialize(deserializer).map(|text| Text(text.0))
    }
}

/// A whole number from 0, written as a number or as a text.
#[derive(Clone, Copy, Debug, Default)]
struct Unsigned(u64);

impl<'de> Deserialize<'de> for Unsigned {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Unsigned, D::Error> {
        struct Read;
        impl Visitor<'_> for Read {
            type Value = Unsigned;
            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("a whole number from 0 of 64 bits")
            }
            fn visit_u64<E: Error>(self, number: u64) -> Result<Unsigned, E> {
                Ok(Unsigned(number))
            }
            fn visit_f64<E: Error>(self, number: f64) -> Result<Unsigned, E> {
                // 2^64, which a double tells from all below it.
                if number.fract() == 0.0 && (0.0..18_446_744_073_709_551_616.0).contains(&number) {
                    return Ok(Unsigned(number as u64));
                }
                Err(E::invalid_value(serde::de::Unexpected::Float(number), &self))
            }
            fn visit_str<E: Error>(self, text: &str) -> Result<Unsigned, E> {
                text.trim()
                    .parse()
                    .map(Unsigned)
                    .map_err(|_| E::invalid_value(serde::de::Unexpected::Str(text), &self))
            }
        }
        deserializer.deserialize_any(Read)
    }
}

/// A number; JSON has no word for those that are none, so that they come as texts.
#[derive(Clone, Copy, Debug, Default)]
struct Double(f64);

impl<'de> Deserialize<'de> for Double {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Double, D::Error> {
        struct Read;
        impl Visitor<'_> for Read {
            type Value = Double;
            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("a number")
            }
            fn visit_u64<E: Error>(self, number: u64) -> Result<Double, E> {
                Ok(Double(number as f64))
            }
            fn visit_i64<E: Error>(self, number: i64) -> Result<Double, E> {
                Ok(Double(number as f64))
            }
            fn visit_f64<E: Error>(self, number: f64) -> Result<Double, E> {
                Ok(Double(number))
            }
            fn visit_str<E: Error>(self, text: &str) -> Result<Double, E> {
                text.trim()
                    .parse()
                    .map(Double)
                    .map_err(|_| E::invalid_value(serde::de::Unexpected::Str(text), &self))
            }
        }
        deserializer.deserialize_any(Read)
    }
}

/// A list of no more than a histogram may have.
#[derive(Debug)]
struct Bounded<T>(Vec<T>);

impl<T> Default for Bounded<T> {
    fn default() -> Bounded<T> {
        Bounded(Vec::new())
    }
}

impl<'de, T: Deserialize<'de>> Deserialize<'de> for Bounded<T> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Bounded<T>, D::Error> {
        deserializer.deserialize_seq(List(MAX_BOUNDS + 1, PhantomData)).map(Bounded)
    }
}

struct List<T>(usize, PhantomData<T>);

impl<'de, T: Deserialize<'de>> Visitor<'de> for List<T> {
    type Value = Vec<T>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "a list of at most {} parts", self.0)
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut seq: A) -> Result<Vec<T>, A::Error> {
        let mut all = Vec::new();
        while let Some(one) = seq.next_element()? {
            if all.len() >= self.0 {
                return Err(A::Error::invalid_length(all.len() + 1, &self));
            }
            all.push(one);
        }
        Ok(all)
    }
}

fn attributes<'de: 'a, 'a, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<Attribute<'a>>, D::Error> {
    struct Nullable<'a>(Vec<Attribute<'a>>);
    impl<'de: 'a, 'a> Deserialize<'de> for Nullable<'a> {
        fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Nullable<'a>, D::Error> {
            deserializer.deserialize_seq(List(MOST_ATTRIBUTES, PhantomData)).map(Nullable)
        }
    }
    Ok(Option::<Nullable<'a>>::deserialize(deserializer)?.map(|list| list.0).unwrap_or_default())
}

impl<'de: 'a, 'a> Deserialize<'de> for Attribute<'a> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Attribute<'a>, D::Error> {
        #[derive(Default, Deserialize)]
        #[serde(default)]
        struct Pair<'b> {
            #[serde(borrow, deserialize_with = "or_default")]
            key: Text<'b>,
            #[serde(borrow, deserialize_with = "or_default")]
            value: Any<'b>,
        }
        #[derive(Default, Deserialize)]
        #[serde(default, rename_all = "camelCase")]
        struct Any<'b> {
            #[serde(borrow, deserialize_with = "or_default")]
            string_value: Option<Text<'b>>,
            #[serde(deserialize_with = "or_default")]
            bool_value: Option<bool>,
            #[serde(deserialize_with = "or_default")]
            int_value: Option<Signed>,
            #[serde(deserialize_with = "or_default")]
            double_value: Option<Double>,
        }
        let Pair { key, value } = Pair::deserialize(deserializer)?;
        let value = match value {
            Any { string_value: Some(text), .. } => Value::Text(text.0),
            Any { bool_value: Some(flag), .. } => Value::Bool(flag),
            Any { int_value: Some(number), .. } => Value::Int(number.0),
            Any { double_value: Some(number), .. } => Value::Double(number.0),
            _ => Value::Other,
        };
        Ok(Attribute { key: key.0, value })
    }
}

/// A whole number, written as a number or as a text.
#[derive(Clone, Copy, Debug, Default)]
struct Signed(i64);

impl<'de> Deserialize<'de> for Signed {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Signed, D::Error> {
        struct Read;
        impl Visitor<'_> for Read {
            type Value = Signed;
            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("a whole number of 64 bits")
            }
            fn visit_i64<E: Error>(self, number: i64) -> Result<Signed, E> {
                Ok(Signed(number))
            }
            fn visit_u64<E: Error>(self, number: u64) -> Result<Signed, E> {
                let refuse = |_| E::invalid_value(serde::de::Unexpected::Unsigned(number), &self);
                i64::try_from(number).map(Signed).map_err(refuse)
            }
            fn visit_str<E: Error>(self, text: &str) -> Result<Signed, E> {
                text.trim()
                    .parse()
                    .map(Signed)
                    .map_err(|_| E::invalid_value(serde::de::Unexpected::Str(text), &self))
            }
        }
        deserializer.deserialize_any(Read)
    }
}
