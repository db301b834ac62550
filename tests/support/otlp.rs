//! The messages of OTLP (opentelemetry-proto 1.9, field numbers of its `.proto` files) for prost, which writes what the
//! tests send and reads what comes back: not our own encoder or decoder.

#![allow(dead_code)] // each test binary uses a part

use prost::Message;

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ExportTraceServiceRequest {
    #[prost(message, repeated, tag = "1")]
    pub(crate) resource_spans: Vec<ResourceSpans>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ResourceSpans {
    #[prost(message, optional, tag = "1")]
    pub(crate) resource: Option<Resource>,
    #[prost(message, repeated, tag = "2")]
    pub(crate) scope_spans: Vec<ScopeSpans>,
    #[prost(string, tag = "3")]
    pub(crate) schema_url: String,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Resource {
    #[prost(message, repeated, tag = "1")]
    pub(crate) attributes: Vec<KeyValue>,
    #[prost(uint32, tag = "2")]
    pub(crate) dropped_attributes_count: u32,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct KeyValue {
    #[prost(string, tag = "1")]
    pub(crate) key: String,
    #[prost(message, optional, tag = "2")]
    pub(crate) value: Option<AnyValue>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct AnyValue {
    #[prost(oneof = "Value", tags = "1, 2, 3, 4, 5, 7")]
    pub(crate) value: Option<Value>,
}

#[derive(Clone, PartialEq, prost::Oneof)]
pub(crate) enum Value {
    #[prost(string, tag = "1")]
    Text(String),
    #[prost(bool, tag = "2")]
    Bool(bool),
    #[prost(int64, tag = "3")]
    Int(i64),
    #[prost(double, tag = "4")]
    Double(f64),
    #[prost(message, tag = "5")]
    Array(ArrayValue),
    #[prost(bytes, tag = "7")]
    Bytes(Vec<u8>),
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ArrayValue {
    #[prost(message, repeated, tag = "1")]
    pub(crate) values: Vec<AnyValue>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Scope {
    #[prost(string, tag = "1")]
    pub(crate) name: String,
    #[prost(string, tag = "2")]
    pub(crate) version: String,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ScopeSpans {
    #[prost(message, optional, tag = "1")]
    pub(crate) scope: Option<Scope>,
    #[prost(message, repeated, tag = "2")]
    pub(crate) spans: Vec<Span>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Span {
    #[prost(bytes = "vec", tag = "1")]
    pub(crate) trace_id: Vec<u8>,
    #[prost(bytes = "vec", tag = "2")]
    pub(crate) span_id: Vec<u8>,
    #[prost(string, tag = "3")]
    pub(crate) trace_state: String,
    #[prost(bytes = "vec", tag = "4")]
    pub(crate) parent_span_id: Vec<u8>,
    #[prost(string, tag = "5")]
    pub(crate) name: String,
    #[prost(int32, tag = "6")]
    pub(crate) kind: i32,
    #[prost(fixed64, tag = "7")]
    pub(crate) start_time_unix_nano: u64,
    #[prost(fixed64, tag = "8")]
    pub(crate) end_time_unix_nano: u64,
    #[prost(message, repeated, tag = "9")]
    pub(crate) attributes: Vec<KeyValue>,
    #[prost(message, repeated, tag = "11")]
    pub(crate) events: Vec<Event>,
    #[prost(message, optional, tag = "15")]
    pub(crate) status: Option<Status>,
    #[prost(fixed32, tag = "16")]
    pub(crate) flags: u32,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Event {
    #[prost(fixed64, tag = "1")]
    pub(crate) time_unix_nano: u64,
    #[prost(string, tag = "2")]
    pub(crate) name: String,
    #[prost(message, repeated, tag = "3")]
    pub(crate) attributes: Vec<KeyValue>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Status {
    #[prost(string, tag = "2")]
    pub(crate) message: String,
    #[prost(int32, tag = "3")]
    pub(crate) code: i32,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ExportMetricsServiceRequest {
    #[prost(message, repeated, tag = "1")]
    pub(crate) resource_metrics: Vec<ResourceMetrics>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ResourceMetrics {
    #[prost(message, optional, tag = "1")]
    pub(crate) resource: Option<Resource>,
    #[prost(message, repeated, tag = "2")]
    pub(crate) scope_metrics: Vec<ScopeMetrics>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ScopeMetrics {
    #[prost(message, optional, tag = "1")]
    pub(crate) scope: Option<Scope>,
    #[prost(message, repeated, tag = "2")]
    pub(crate) metrics: Vec<Metric>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Metric {
    #[prost(string, tag = "1")]
    pub(crate) name: String,
    #[prost(string, tag = "2")]
    pub(crate) description: String,
    #[prost(string, tag = "3")]
    pub(crate) unit: String,
    #[prost(oneof = "Data", tags = "5, 9, 10")]
    pub(crate) data: Option<Data>,
}

#[derive(Clone, PartialEq, prost::Oneof)]
pub(crate) enum Data {
    #[prost(message, tag = "5")]
    Gauge(Gauge),
    #[prost(message, tag = "9")]
    Histogram(Histogram),
    #[prost(message, tag = "10")]
    Exponential(Exponential),
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Gauge {
    #[prost(message, repeated, tag = "1")]
    pub(crate) data_points: Vec<NumberPoint>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct NumberPoint {
    #[prost(fixed64, tag = "3")]
    pub(crate) time_unix_nano: u64,
    #[prost(double, tag = "4")]
    pub(crate) value: f64,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Histogram {
    #[prost(message, repeated, tag = "1")]
    pub(crate) data_points: Vec<HistogramPoint>,
    #[prost(int32, tag = "2")]
    pub(crate) aggregation_temporality: i32,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct HistogramPoint {
    #[prost(fixed64, tag = "2")]
    pub(crate) start_time_unix_nano: u64,
    #[prost(fixed64, tag = "3")]
    pub(crate) time_unix_nano: u64,
    #[prost(fixed64, tag = "4")]
    pub(crate) count: u64,
    #[prost(double, optional, tag = "5")]
    pub(crate) sum: Option<f64>,
    #[prost(fixed64, repeated, tag = "6")]
    pub(crate) bucket_counts: Vec<u64>,
    #[prost(double, repeated, tag = "7")]
    pub(crate) explicit_bounds: Vec<f64>,
    #[prost(message, repeated, tag = "9")]
    pub(crate) attributes: Vec<KeyValue>,
    #[prost(uint32, tag = "10")]
    pub(crate) flags: u32,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Exponential {
    #[prost(message, repeated, tag = "1")]
    pub(crate) data_points: Vec<ExponentialPoint>,
    #[prost(int32, tag = "2")]
    pub(crate) aggregation_temporality: i32,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct ExponentialPoint {
    #[prost(message, repeated, tag = "1")]
    pub(crate) attributes: Vec<KeyValue>,
    #[prost(fixed64, tag = "2")]
    pub(crate) start_time_unix_nano: u64,
    #[prost(fixed64, tag = "3")]
    pub(crate) time_unix_nano: u64,
    #[prost(fixed64, tag = "4")]
    pub(crate) count: u64,
    #[prost(double, optional, tag = "5")]
    pub(crate) sum: Option<f64>,
    #[prost(sint32, tag = "6")]
    pub(crate) scale: i32,
    #[prost(fixed64, tag = "7")]
    pub(crate) zero_count: u64,
    #[prost(message, optional, tag = "8")]
    pub(crate) positive: Option<Buckets>,
    #[prost(message, optional, tag = "9")]
    pub(crate) negative: Option<Buckets>,
    #[prost(uint32, tag = "10")]
    pub(crate) flags: u32,
    #[prost(double, tag = "14")]
    pub(crate) zero_threshold: f64,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Buckets {
    #[prost(sint32, tag = "1")]
    pub(crate) offset: i32,
    #[prost(uint64, repeated, tag = "2")]
    pub(crate) bucket_counts: Vec<u64>,
}

/// The answer to either request.
#[derive(Clone, PartialEq, Message)]
pub(crate) struct ExportResponse {
    #[prost(message, optional, tag = "1")]
    pub(crate) partial_success: Option<PartialSuccess>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct PartialSuccess {
    #[prost(int64, tag = "1")]
    pub(crate) rejected: i64,
    #[prost(string, tag = "2")]
    pub(crate) error_message: String,
}

/// `google.rpc.Status`.
#[derive(Clone, PartialEq, Message)]
pub(crate) struct RpcStatus {
    #[prost(int32, tag = "1")]
    pub(crate) code: i32,
    #[prost(string, tag = "2")]
    pub(crate) message: String,
    #[prost(message, repeated, tag = "3")]
    pub(crate) details: Vec<Any>,
}

#[derive(Clone, PartialEq, Message)]
pub(crate) struct Any {
    #[prost(string, tag = "1")]
    pub(crate) type_url: String,
    #[prost(bytes = "vec", tag = "2")]
    pub(crate) value: Vec<u8>,
}

/// Noon of 30 November 2026 UTC, Unix nanoseconds.
pub(crate) const NOON_NANO: u64 = 1_796_040_000_000_000_000;

pub(crate) fn attribute(key: &str, value: impl Into<Value>) -> KeyValue {
    KeyValue { key: key.into(), value: Some(AnyValue { value: Some(value.into()) }) }
}

impl From<&str> for Value {
    fn from(text: &str) -> Value {
        Value::Text(text.into())
    }
}

impl From<i64> for Value {
    fn from(number: i64) -> Value {
        Value::Int(number)
    }
}

pub(crate) fn service(name: &str) -> Option<Resource> {
    Some(Resource { attributes: vec![attribute("service.name", name)], ..Resource::default() })
}

/// A client's span that ends at noon.
pub(crate) fn span(name: &str, nanoseconds: u64, attributes: Vec<KeyValue>, status: i32) -> Span {
    Span {
        trace_id: vec![7; 16],
        span_id: vec![9; 8],
        name: name.into(),
        kind: 3,
        start_time_unix_nano: NOON_NANO - nanoseconds,
        end_time_unix_nano: NOON_NANO,
        attributes,
        events: vec![Event { name: "retry".into(), time_unix_nano: NOON_NANO, ..Event::default() }],
        status: Some(Status { code: status, message: "it says".into() }),
        flags: 1,
        ..Span::default()
    }
}

pub(crate) fn traces(service_name: &str, spans: Vec<Span>) -> ExportTraceServiceRequest {
    let scope = Some(Scope { name: "fernhollow.http".into(), version: "1.0".into() });
    let scope_spans = vec![ScopeSpans { scope, spans }];
    let resource = service(service_name);
    ExportTraceServiceRequest {
        resource_spans: vec![ResourceSpans {
            resource,
            scope_spans,
            schema_url: "https://x.invalid/1".into(),
        }],
    }
}

pub(crate) fn metrics(service_name: &str, metrics: Vec<Metric>) -> ExportMetricsServiceRequest {
    let scope_metrics = vec![ScopeMetrics { scope: None, metrics }];
    ExportMetricsServiceRequest {
        resource_metrics: vec![ResourceMetrics { resource: service(service_name), scope_metrics }],
    }
}

/// A histogram in milliseconds of one data point. `temporality`: 1 since the last point, 2 since the start.
pub(crate) fn histogram(name: &str, temporality: i32, point: HistogramPoint) -> Metric {
    let data = Histogram { data_points: vec![point], aggregation_temporality: temporality };
    Metric { name: name.into(), unit: "ms".into(), data: Some(Data::Histogram(data)), ..Metric::default() }
}

/// A data point that was read so many seconds after noon, since a start an hour before noon.
pub(crate) fn point(after: u64, bounds: &[f64], counts: &[u64]) -> HistogramPoint {
    HistogramPoint {
        start_time_unix_nano: NOON_NANO - 3_600_000_000_000,
        time_unix_nano: NOON_NANO + after * 1_000_000_000,
        count: counts.iter().fold(0, |sum: u64, count| sum.wrapping_add(*count)),
        sum: Some(1.0),
        bucket_counts: counts.to_vec(),
        explicit_bounds: bounds.to_vec(),
        ..HistogramPoint::default()
    }
}
