//! Telemetry against the bare decoders of its formats, on the same bytes in the same run.
//!
//! `cargo bench --bench telemetry`. On a busy machine compare the lines of one run with each other, not with another run's.
//! prost decodes whole messages, serde_json its own tree, prometheus-parse its own samples; ours goes on to waits in a
//! sink that adds up their weights.

#![allow(clippy::unwrap_used, missing_docs)]

#[path = "../tests/support/otlp.rs"]
mod otlp;

use std::fmt::Write;
use std::hint::black_box;
use std::io::Cursor;
use std::num::NonZeroUsize;
use std::time::Duration;

use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use otlp::{
    Buckets, Data, Exponential, ExponentialPoint, Metric, NOON_NANO, attribute, histogram, metrics, point,
    span, traces,
};
use outwait::intake::{Format, Options, Record, Sink, Source, read};
use prost::Message;

#[derive(Default)]
struct Sum(u64);

impl Sink for Sum {
    fn take(&mut self, record: &Record<'_>) {
        self.0 += record.wait.count();
    }
    fn fork(&self) -> Self {
        Sum::default()
    }
    fn absorb(&mut self, other: Self) {
        self.0 += other.0;
    }
}

/// Spans as an HTTP client's instrumentation makes them.
fn spans() -> otlp::ExportTraceServiceRequest {
    let one = |i: u64| {
        let attributes = vec![
            attribute("http.request.method", "GET"),
            attribute("server.address", "catalogue.fernhollow.example"),
            attribute("server.port", 443),
            attribute("url.full", "https://catalogue.fernhollow.example/items/8831?shelf=north"),
            attribute("http.response.status_code", 200),
            attribute("network.protocol.version", "1.1"),
        ];
        span("GET /items/{id}", 1_000_000 + i * 7_919, attributes, 0)
    };
    traces("catalogue", (0..8_192).map(one).collect())
}

/// The default layout of the SDKs, in milliseconds.
fn points() -> otlp::ExportMetricsServiceRequest {
    let bounds = [0.0, 5.0, 10.0, 25.0, 50.0, 75.0, 100.0, 250.0, 500.0, 750.0, 1e3, 2.5e3, 5e3, 7.5e3, 1e4];
    let one = |i: u64| {
        let counts: Vec<u64> = (0..=bounds.len() as u64).map(|bucket| (i * 31 + bucket * 17) % 97).collect();
        let mut point = point(0, &bounds, &counts);
        point.attributes = vec![
            attribute("http.route", format!("/items/{i}").as_str()),
            attribute("http.request.method", "GET"),
        ];
        histogram("http.client.request.duration", 1, point)
    };
    metrics("catalogue", (0..2_048).map(one).collect())
}

/// The most buckets that the SDKs keep, from 13 ms to 13 s.
fn exponential() -> otlp::ExportMetricsServiceRequest {
    let one = |i: u64| {
        let bucket_counts: Vec<u64> = (0..160).map(|bucket| (i * 31 + bucket * 17) % 97).collect();
        let point = ExponentialPoint {
            attributes: vec![attribute("http.route", format!("/items/{i}").as_str())],
            start_time_unix_nano: NOON_NANO - 60_000_000_000,
            time_unix_nano: NOON_NANO,
            count: bucket_counts.iter().sum(),
            scale: 4,
            positive: Some(Buckets { offset: -100, bucket_counts }),
            ..ExponentialPoint::default()
        };
        let data = Exponential { data_points: vec![point], aggregation_temporality: 1 };
        Metric {
            name: "loan".into(),
            unit: "s".into(),
            data: Some(Data::Exponential(data)),
            ..Metric::default()
        }
    };
    metrics("catalogue", (0..256).map(one).collect())
}

fn page() -> String {
    let mut text = String::from("# HELP http_seconds Waits.\n# TYPE http_seconds histogram\n");
    for route in 0..512 {
        for (i, le) in ["0.005", "0.01", "0.025", "0.05", "0.1", "0.25", "0.5", "1", "2.5", "5", "10", "+Inf"]
            .iter()
            .enumerate()
        {
            let count = 12_000 + i * 1_000;
            writeln!(
                text,
                "http_seconds_bucket{{method=\"GET\",route=\"/items/{route}\",le=\"{le}\"}} {count}"
            )
            .unwrap();
        }
        writeln!(text, "http_seconds_sum{{method=\"GET\",route=\"/items/{route}\"}} 6.7").unwrap();
        writeln!(text, "http_seconds_count{{method=\"GET\",route=\"/items/{route}\"}} 23000").unwrap();
    }
    text
}

fn ours(bytes: &[u8], format: Format) -> u64 {
    let options = Options { format: Some(format), threads: NonZeroUsize::new(1), ..Options::default() };
    let source = Source::reader("body", Cursor::new(bytes.to_vec()));
    read(vec![source], &options, Sum::default(), &mut |_| ()).unwrap().0.0
}

/// Attributes in JSON.
fn json_of(attributes: &[otlp::KeyValue]) -> Vec<serde_json::Value> {
    let one = |pair: &otlp::KeyValue| match pair.value.clone().and_then(|value| value.value) {
        Some(otlp::Value::Text(text)) => serde_json::json!({"key": pair.key, "value": {"stringValue": text}}),
        Some(otlp::Value::Int(number)) => {
            serde_json::json!({"key": pair.key, "value": {"intValue": number.to_string()}})
        }
        _ => serde_json::json!({"key": pair.key}),
    };
    attributes.iter().map(one).collect()
}

/// The histograms in JSON, likewise.
fn json_points(request: &otlp::ExportMetricsServiceRequest) -> String {
    let one = |metric: &Metric| {
        let Some(Data::Histogram(data)) = &metric.data else { return serde_json::json!({}) };
        let points = data.data_points.iter().map(|point| {
            let counts: Vec<String> = point.bucket_counts.iter().map(u64::to_string).collect();
            serde_json::json!({
                "startTimeUnixNano": point.start_time_unix_nano.to_string(), "timeUnixNano": point.time_unix_nano.to_string(),
                "count": point.count.to_string(), "sum": point.sum, "bucketCounts": counts,
                "explicitBounds": point.explicit_bounds, "attributes": json_of(&point.attributes),
            })
        });
        let points: Vec<_> = points.collect();
        serde_json::json!({"name": metric.name, "unit": metric.unit, "histogram": {
            "aggregationTemporality": data.aggregation_temporality, "dataPoints": points,
        }})
    };
    let metrics: Vec<_> = request.resource_metrics[0].scope_metrics[0].metrics.iter().map(one).collect();
    serde_json::json!({"resourceMetrics": [{
        "resource": {"attributes": [{"key": "service.name", "value": {"stringValue": "catalogue"}}]},
        "scopeMetrics": [{"metrics": metrics}],
    }]})
    .to_string()
}

/// The spans in JSON, with numbers of 64 bits as texts.
fn json(request: &otlp::ExportTraceServiceRequest) -> String {
    let spans: Vec<serde_json::Value> = request.resource_spans[0].scope_spans[0]
        .spans
        .iter()
        .map(|span| {
            serde_json::json!({
                "traceId": "5b8efff798038103d269b633813fc60c", "spanId": "eee19b7ec3c1b174", "name": span.name,
                "kind": span.kind, "startTimeUnixNano": span.start_time_unix_nano.to_string(),
                "endTimeUnixNano": span.end_time_unix_nano.to_string(),
                "attributes": json_of(&span.attributes), "status": {},
            })
        })
        .collect();
    serde_json::json!({"resourceSpans": [{
        "resource": {"attributes": [{"key": "service.name", "value": {"stringValue": "catalogue"}}]},
        "scopeSpans": [{"spans": spans}],
    }]})
    .to_string()
}

fn telemetry(c: &mut Criterion) {
    let (spans, points, page) = (spans(), points(), page());
    let (trace, metric, json) = (spans.encode_to_vec(), points.encode_to_vec(), json(&spans));
    let (exponential, json_points) = (exponential().encode_to_vec(), json_points(&points));
    let mut group = c.benchmark_group("telemetry");
    group.sample_size(20).measurement_time(Duration::from_secs(3)).warm_up_time(Duration::from_secs(1));
    group.throughput(Throughput::Bytes(trace.len() as u64));
    group.bench_function("spans by prost", |b| {
        b.iter(|| otlp::ExportTraceServiceRequest::decode(black_box(&trace[..])).unwrap());
    });
    group.bench_function("spans to waits", |b| b.iter(|| ours(black_box(&trace), Format::OtlpTraces)));
    group.throughput(Throughput::Bytes(json.len() as u64));
    group.bench_function("spans in JSON by serde_json", |b| {
        b.iter(|| serde_json::from_str::<serde_json::Value>(black_box(&json)).unwrap());
    });
    group.bench_function("spans in JSON to waits", |b| {
        b.iter(|| ours(black_box(json.as_bytes()), Format::OtlpTraces));
    });
    group.throughput(Throughput::Bytes(metric.len() as u64));
    group.bench_function("histograms by prost", |b| {
        b.iter(|| otlp::ExportMetricsServiceRequest::decode(black_box(&metric[..])).unwrap());
    });
    group.bench_function("histograms to waits", |b| b.iter(|| ours(black_box(&metric), Format::OtlpMetrics)));
    group.throughput(Throughput::Bytes(json_points.len() as u64));
    group.bench_function("histograms in JSON by serde_json", |b| {
        b.iter(|| serde_json::from_str::<serde_json::Value>(black_box(&json_points)).unwrap());
    });
    group.bench_function("histograms in JSON to waits", |b| {
        b.iter(|| ours(black_box(json_points.as_bytes()), Format::OtlpMetrics));
    });
    group.throughput(Throughput::Bytes(exponential.len() as u64));
    group.bench_function("exponential histograms by prost", |b| {
        b.iter(|| otlp::ExportMetricsServiceRequest::decode(black_box(&exponential[..])).unwrap());
    });
    group.bench_function("exponential histograms to waits", |b| {
        b.iter(|| ours(black_box(&exponential), Format::OtlpMetrics));
    });
    group.throughput(Throughput::Bytes(page.len() as u64));
    group.bench_function("text by prometheus-parse", |b| {
        b.iter(|| {
            let lines = black_box(&page).lines().map(|line| Ok(line.to_owned()));
            prometheus_parse::Scrape::parse(lines).unwrap()
        });
    });
    group.bench_function("text to waits", |b| {
        b.iter(|| ours(black_box(page.as_bytes()), Format::MetricsText))
    });
    group.finish();
}

criterion_group!(benches, telemetry);
criterion_main!(benches);
