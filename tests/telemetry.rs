//! Spans and histograms of telemetry become waits: OTLP as protocol buffers and as JSON, whole or in lines.
//!
//! Outside checks: the examples that the standards print (opentelemetry-proto, the text format's documentation, OpenMetrics 1.0),
//! requests that prost wrote, the standard's data model for exponential buckets. The SDK of another language sends in `tests/daemon`.
#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/clients.rs"]
mod clients;
#[path = "support/otlp.rs"]
mod otlp;

use std::collections::BTreeMap;
use std::num::NonZeroUsize;

use otlp::{
    Buckets, Data, Exponential, ExponentialPoint, Gauge, HistogramPoint, Metric, NOON_NANO, NumberPoint,
    attribute, histogram, metrics, point, span, traces,
};
use outwait::intake::{
    Allowed, Condition, Exposition, Format, IntakeError, Options, Record, Report, Rules, Sink, Source,
    Template, read,
};
use outwait::wait::{Age, Ending, Wait};
use proptest::prelude::*;
use prost::Message;

#[derive(Default)]
struct All(Vec<(String, Wait)>);

impl Sink for All {
    fn take(&mut self, record: &Record<'_>) {
        self.0.push((record.stream.into(), record.wait));
    }
    fn fork(&self) -> Self {
        All::default()
    }
    fn absorb(&mut self, other: Self) {
        self.0.extend(other.0);
    }
}

fn options(format: Option<Format>) -> Options {
    Options { format, bad_lines: Allowed::All, threads: NonZeroUsize::new(1), ..Options::default() }
}

fn took(bodies: Vec<Vec<u8>>, options: &Options) -> (Vec<(String, Wait)>, Report) {
    let sources = bodies.into_iter().map(|body| Source::reader("body", std::io::Cursor::new(body))).collect();
    match read(sources, options, All::default(), &mut |_| ()) {
        Ok((all, report)) => (all.0, report),
        Err(IntakeError::NoWaits { report }) => (Vec::new(), *report),
        Err(error) => panic!("{error}"),
    }
}

fn spans(request: &impl Message) -> (Vec<(String, Wait)>, Report) {
    took(vec![request.encode_to_vec()], &options(Some(Format::OtlpTraces)))
}

fn points(request: &impl Message) -> (Vec<(String, Wait)>, Report) {
    took(vec![request.encode_to_vec()], &options(Some(Format::OtlpMetrics)))
}

/// Buckets of all waits: bounds in seconds and how many.
fn buckets(waits: &[(String, Wait)]) -> Vec<(f64, f64, u64)> {
    waits
        .iter()
        .map(|(_, wait)| match wait.age() {
            Age::Between { over, upto } => (over, upto, wait.count()),
            Age::Exact(age) => panic!("{age} is exact"),
        })
        .collect()
}

fn reasons(report: &Report) -> Vec<(&'static str, &'static str)> {
    report.bad.by_reason.iter().map(|bad| (bad.field, bad.reason)).collect()
}

/// The examples that the standards print, as they stand there (`tests/reference/SOURCES.md`).
macro_rules! standard {
    ($name:literal) => {
        include_str!(concat!("reference/standards/", $name))
    };
}

/// A span, with its numbers as numbers.
const TRACE_JSON: &str = standard!("trace.json");

/// A sum, a gauge and two histograms whose unit is not one of time.
const METRICS_JSON: &str = standard!("metrics.json");

#[test]
fn the_standards_own_trace() {
    // Found out by its content, whole and as a line among lines.
    let line = TRACE_JSON.replace('\n', " ");
    for bodies in [vec![TRACE_JSON.as_bytes().to_vec()], vec![format!("{line}\n").into_bytes()]] {
        let (waits, report) = took(bodies, &options(None));
        assert_eq!(report.files[0].format, Some(Format::OtlpTraces));
        let expected = Wait::new(1.0, Ending::Done).unwrap().with_at(1_544_712_661.0).unwrap();
        assert_eq!(waits, [("my.service.I_m_a_server_span".to_owned(), expected)]);
        assert_eq!((report.lines, report.bad.count), (1, 0));
    }
}

#[test]
fn the_standards_own_metrics() {
    let (waits, report) = took(vec![METRICS_JSON.into()], &options(None));
    assert_eq!(report.files[0].format, Some(Format::OtlpMetrics));
    assert_eq!((waits.len(), report.left_out.not_waits, report.bad.count), (0, 4, 0));
    // With a unit of time both histograms are read. What the exponential one has at zero is above nothing.
    let timed = METRICS_JSON.replace(r#""unit": "1""#, r#""unit": "s""#);
    let (waits, report) = took(vec![timed.clone().into()], &options(None));
    assert_eq!((report.left_out.not_waits, report.bad.count), (2, 0), "{:?}", report.bad);
    let of = |waits: &[(String, Wait)], name: &str| {
        let stream = format!("my.service.{name}");
        buckets(&waits.iter().filter(|(of, _)| *of == stream).cloned().collect::<Vec<_>>())
    };
    assert_eq!(of(&waits, "my.histogram"), [(0.0, 1.0, 1), (1.0, f64::INFINITY, 1)]);
    assert_eq!(of(&waits, "my.exponential.histogram"), [(0.0, 1e-9, 1), (4.0, 8.0, 2)]);
    // The first edition of the file had three counts for two buckets. That is refused, and mended it is read.
    let first = timed
        .replace("\"bucketCounts\": [1,1]", "\"bucketCounts\": [1,1,1]")
        .replace("\"count\": 2", "\"count\": 3");
    let (waits, report) = took(vec![first.clone().into()], &options(None));
    assert_eq!((waits.len(), reasons(&report)), (2, vec![("count", "not as many buckets as bounds")]));
    let mended = first.replace(r#""explicitBounds": [1]"#, r#""explicitBounds": [1, 2]"#);
    let (waits, _) = took(vec![mended.into()], &options(None));
    assert_eq!(of(&waits, "my.histogram"), [(0.0, 1.0, 1), (1.0, 2.0, 1), (2.0, f64::INFINITY, 1)]);
}

/// Endings by the published conventions for `error.type`, gRPC status and span kinds.
#[test]
fn spans_end_as_the_conventions_say() {
    let error = |kind: &str| vec![attribute("error.type", kind)];
    let mut server = span("loan", 5_000_000, error("timeout"), 2);
    server.kind = 2;
    let request = traces(
        "desk",
        vec![
            span("loan", 18_300_000, vec![], 0),
            span("loan", 18_300_000, vec![], 1),
            span("loan", 1_000_000, vec![], 2),
            span("loan", 800_000_000, error("timeout"), 2),
            span("loan", 800_000_000, vec![attribute("rpc.grpc.status_code", 4)], 2),
            span("loan", 300_000_000, vec![attribute("rpc.grpc.status_code", 1)], 2),
            span("loan", 300_000_000, vec![attribute("rpc.grpc.status_code", 14)], 2),
            server,
            span("loan", 200_000_000, vec![attribute("http.request.resend_count", 2)], 0),
        ],
    );
    let (waits, report) = spans(&request);
    assert_eq!((report.lines, report.bad.count), (9, 0), "{:?}", report.bad);
    use Ending::{Done, Failed, GaveUp};
    let endings: Vec<Ending> = waits.iter().map(|(_, wait)| wait.ending()).collect();
    assert_eq!(endings, [Done, Done, Failed, GaveUp, GaveUp, GaveUp, Failed, Failed, Done]);
    assert!(waits.iter().all(|(stream, wait)| stream == "desk.loan" && wait.at() == Some(1_796_040_000.0)));
    assert_eq!(waits[0].1.age(), Age::Exact(0.0183));
    assert_eq!(waits.last().unwrap().1.attempt(), 3);
}

#[test]
fn the_policys_rules_come_first() {
    let condition = |text: &str| vec![Condition::new(text).unwrap()];
    let rules = Rules {
        stream: Template::new("{region}/{http.route|name}").unwrap(),
        resends: "tries".into(),
        left_out: condition("kind=internal"),
        done: condition("error.type=404"),
        ..Rules::default()
    };
    let mut inner = span("inner", 1_000, vec![], 0);
    inner.kind = 1;
    let attributes =
        vec![attribute("http.route", "/items/{id}"), attribute("error.type", "404"), attribute("tries", 1)];
    let request = traces("desk", vec![inner, span("GET", 2_000_000, attributes, 2)]);
    let options = Options { rules, ..options(Some(Format::OtlpTraces)) };
    let (waits, report) = took(vec![request.encode_to_vec()], &options);
    let expected =
        Wait::new(0.002, Ending::Done).unwrap().with_attempt(2).unwrap().with_at(1_796_040_000.0).unwrap();
    assert_eq!(waits, [("unknown//items/_id_".to_owned(), expected)]);
    assert_eq!(report.left_out.not_waits, 1);
}

#[test]
fn bad_spans_are_told_and_the_rest_is_read() {
    let sound = || span("a", 5_000, vec![], 0);
    let mut backwards = sound();
    backwards.start_time_unix_nano = NOON_NANO + 1;
    let mut unended = sound();
    unended.end_time_unix_nano = 0;
    let resent = span("a", 5_000, vec![attribute("http.request.resend_count", "often")], 0);
    let instant = span("a", 0, vec![], 0);
    let mut far = sound();
    (far.start_time_unix_nano, far.end_time_unix_nano) = (1, u64::MAX);
    let (waits, report) =
        spans(&traces("desk", vec![sound(), backwards, unended, resent, instant, far, sound()]));
    let mut told = reasons(&report);
    told.sort();
    assert_eq!(
        told,
        [
            ("attempt", "not a whole number"),
            ("elapsed", "too long for an age in seconds"),
            ("endTimeUnixNano", "missing"),
            ("ended", "before the start")
        ]
    );
    assert_eq!(report.bad.examples.iter().map(|bad| bad.line).collect::<Vec<_>>(), [2, 3, 4, 6]);
    assert_eq!(waits.len(), 3);
    // Start and end at one moment: shorter than the clock's step of a nanosecond.
    assert_eq!(waits[1].1.age(), Age::Between { over: 0.0, upto: 1e-9 });
}

#[test]
fn what_cannot_be_decoded_is_refused_once() {
    let whole = traces("desk", vec![span("a", 5_000, vec![], 0)]).encode_to_vec();
    for cut in 1..whole.len() {
        let (_, report) = took(vec![whole[..cut].to_vec()], &options(Some(Format::OtlpTraces)));
        assert!(reasons(&report).iter().all(|bad| *bad == ("body", "not to be decoded")), "{cut}");
        assert_eq!(report.bad.count, 1, "{cut}");
    }
    let deep = format!("{{\"resourceSpans\":{}", "[".repeat(100_000));
    let wrong = TRACE_JSON.replace("\"kind\": 2", "\"kind\": {}");
    let negative = TRACE_JSON.replace("1544712660000000000", "-5");
    for body in [deep, wrong, negative, TRACE_JSON[..300].to_owned(), "{\"resourceSpans\":7}".into()] {
        let (waits, report) = took(vec![body.into()], &options(Some(Format::OtlpTraces)));
        assert_eq!((waits.len(), reasons(&report)), (0, vec![("body", "not to be decoded")]));
    }
    let crowd = format!("{{\"resourceSpans\":[{}{{}}]}}", "{},".repeat(1_000_000));
    let (_, report) = took(vec![crowd.into()], &options(Some(Format::OtlpTraces)));
    assert_eq!(reasons(&report), [("body", "too large")]);
    // A field with more attributes than any writer has.
    let many = traces("desk", vec![span("a", 5_000, vec![attribute("k", 1); 2_000], 0)]);
    assert_eq!(reasons(&spans(&many).1), [("body", "not to be decoded")]);
}

#[test]
fn histograms_since_the_last_point() {
    // The default bounds of the SDKs begin at 0: what lies there lasted exactly 0.
    let bounds = [0.0, 5.0, 10.0];
    let (waits, report) =
        points(&metrics("desk", vec![histogram("wait", 1, point(0, &bounds, &[2, 7, 0, 1]))]));
    assert_eq!(report.bad.count, 0, "{:?}", report.bad);
    assert_eq!(buckets(&waits), [(0.0, 1e-9, 2), (0.0, 0.005, 7), (0.01, f64::INFINITY, 1)]);
    assert!(waits.iter().all(|(stream, wait)| stream == "desk.wait" && wait.at() == Some(1_796_040_000.0)));
    // Units, and an ending by an attribute.
    for (unit, bound) in [("s", 5.0), ("us", 5e-6), ("ns", 5e-9), ("min", 300.0)] {
        let mut failed = histogram("wait", 1, point(0, &[5.0], &[1, 0]));
        failed.unit = unit.into();
        let Some(Data::Histogram(data)) = &mut failed.data else { panic!() };
        data.data_points[0].attributes = vec![attribute("error.type", "500")];
        let (waits, _) = points(&metrics("desk", vec![failed]));
        assert_eq!((buckets(&waits), waits[0].1.ending()), (vec![(0.0, bound, 1)], Ending::Failed), "{unit}");
    }
}

#[test]
fn histograms_since_the_start() {
    let read_at = |after, counts: &[u64]| {
        let request = metrics("desk", vec![histogram("wait", 2, point(after, &[5.0, 10.0], counts))]);
        request.encode_to_vec()
    };
    let bodies = vec![
        read_at(0, &[3, 1, 0]),
        read_at(60, &[5, 1, 1]),
        read_at(30, &[4, 1, 0]),
        read_at(90, &[1, 0, 0]),
    ];
    let (waits, _) = took(bodies, &options(Some(Format::OtlpMetrics)));
    let inf = f64::INFINITY;
    // All of the first; what the second has more; the third is older than the second; the fourth has begun anew.
    assert_eq!(
        buckets(&waits),
        [(0.0, 0.005, 3), (0.005, 0.01, 1), (0.0, 0.005, 2), (0.01, inf, 1), (0.0, 0.005, 1)]
    );
    // A later start is another series, whatever its counts.
    let mut anew = point(120, &[5.0, 10.0], &[9, 9, 9]);
    anew.start_time_unix_nano = NOON_NANO + 100_000_000_000;
    let anew = metrics("desk", vec![histogram("wait", 2, anew)]).encode_to_vec();
    let (waits, _) = took(vec![read_at(0, &[3, 1, 0]), anew], &options(Some(Format::OtlpMetrics)));
    assert_eq!(waits.iter().map(|(_, wait)| wait.count()).sum::<u64>(), 4 + 27);
}

fn exponential(scale: i32, zero: (u64, f64), offset: i32, counts: &[u64]) -> Metric {
    let point = ExponentialPoint {
        time_unix_nano: NOON_NANO,
        count: zero.0 + counts.iter().sum::<u64>(),
        scale,
        zero_count: zero.0,
        zero_threshold: zero.1,
        positive: Some(Buckets { offset, bucket_counts: counts.to_vec() }),
        ..ExponentialPoint::default()
    };
    let data = Exponential { data_points: vec![point], aggregation_temporality: 1 };
    Metric { name: "wait".into(), unit: "s".into(), data: Some(Data::Exponential(data)), ..Metric::default() }
}

/// The standard's data model ("ExponentialHistogram"): bucket i is (base^i, base^(i+1)], base = 2^(2^-scale).
#[test]
fn exponential_histograms() {
    let read = |metric: Metric| buckets(&points(&metrics("desk", vec![metric])).0);
    assert_eq!(read(exponential(0, (0, 0.0), 0, &[1, 0, 2])), [(1.0, 2.0, 1), (4.0, 8.0, 2)]);
    assert_eq!(read(exponential(0, (3, 0.0), -2, &[1])), [(0.0, 1e-9, 3), (0.25, 0.5, 1)]);
    assert_eq!(read(exponential(-1, (0, 0.0), 0, &[1, 1])), [(1.0, 4.0, 1), (4.0, 16.0, 1)]);
    let root = 2f64.sqrt();
    let halves = read(exponential(1, (0, 0.0), 0, &[1, 1]));
    assert!((halves[0].1 - root).abs() < 1e-15 && halves[1] == (halves[0].1, 2.0, 1));
    // The zero region may be wide, and take in buckets.
    assert_eq!(read(exponential(0, (4, 1.5), 0, &[1, 1])), [(0.0, 1.5, 4), (1.5, 2.0, 1), (2.0, 4.0, 1)]);
    assert_eq!(read(exponential(0, (4, 2.0), 0, &[1, 1])), [(0.0, 2.0, 5), (2.0, 4.0, 1)]);
    // Further than any age: nothing is known but that it is longer than the last bound.
    assert_eq!(read(exponential(0, (0, 0.0), 33, &[1, 5])), [(8_589_934_592.0, f64::INFINITY, 6)]);
}

#[test]
fn hostile_histograms() {
    let refused = |metric: Metric| reasons(&points(&metrics("desk", vec![metric])).1)[0];
    let explicit = |point: HistogramPoint| refused(histogram("wait", 1, point));
    assert_eq!(explicit(point(0, &[5.0, 5.0], &[1, 1, 1])), ("bounds", "not increasing"));
    assert_eq!(explicit(point(0, &[f64::NAN], &[1, 1])), ("bounds", "not increasing"));
    assert_eq!(explicit(point(0, &[-5.0, 1.0], &[1, 0, 0])), ("buckets", "negative"));
    assert_eq!(explicit(point(0, &[5.0], &[1 << 63, 1])), ("buckets", "too many waits"));
    assert_eq!(explicit(point(0, &[5.0], &[u64::MAX, u64::MAX])), ("buckets", "too many waits"));
    assert_eq!(
        explicit(HistogramPoint { count: 7, ..point(0, &[5.0], &[1, 1]) }),
        ("count", "not the sum of the buckets")
    );
    assert_eq!(
        explicit(HistogramPoint { count: 3, ..point(0, &[], &[]) }),
        ("count", "not as many buckets as bounds")
    );
    assert_eq!(
        explicit(HistogramPoint { time_unix_nano: 0, ..point(0, &[5.0], &[1, 1]) }),
        ("timeUnixNano", "missing")
    );
    assert_eq!(
        refused(histogram("wait", 0, point(0, &[5.0], &[1, 1]))),
        ("aggregationTemporality", "not known")
    );
    assert_eq!(explicit(point(0, &vec![1.0; 20_000], &vec![0; 20_001])), ("body", "not to be decoded"));
    assert_eq!(refused(exponential(60, (0, 0.0), 0, &[1])), ("scale", "out of range"));
    assert_eq!(refused(exponential(0, (1, f64::NAN), 0, &[1])), ("zeroThreshold", "not an age"));
    let mut below = exponential(0, (0, 0.0), 0, &[1]);
    let Some(Data::Exponential(data)) = &mut below.data else { panic!() };
    data.data_points[0].negative = Some(Buckets { offset: 0, bucket_counts: vec![2] });
    assert_eq!(refused(below), ("buckets", "negative"));
    // The sum is not looked at, so that it may be anything; a count without buckets is no evidence.
    let (waits, _) = points(&metrics(
        "desk",
        vec![histogram("wait", 1, HistogramPoint { sum: Some(f64::NAN), ..point(0, &[5.0], &[1, 1]) })],
    ));
    assert_eq!(waits.len(), 2);
    for (scale, offset) in [(52, i32::MAX), (52, i32::MIN), (-11, i32::MAX), (-11, i32::MIN), (0, i32::MAX)] {
        let _ = points(&metrics("desk", vec![exponential(scale, (1, 0.0), offset, &[1, 2, 3])]));
    }
    // What is no histogram of time is left out, and so is a point that says that it has no value.
    let gauge = Data::Gauge(Gauge { data_points: vec![NumberPoint::default(); 3] });
    let gauge = Metric { name: "g".into(), unit: "s".into(), data: Some(gauge), ..Metric::default() };
    let bytes = Metric { unit: "By".into(), ..histogram("size", 1, point(0, &[5.0], &[1, 1])) };
    let none = histogram("wait", 1, HistogramPoint { flags: 1, ..point(0, &[5.0], &[1, 1]) });
    let (waits, report) = points(&metrics("desk", vec![gauge, bytes, none]));
    assert_eq!((waits.len(), report.left_out.not_waits, report.bad.count), (0, 5, 0));
}

/// The JSON of a request, by the standard's rules: numbers of 64 bits as texts, ids in hex.
fn json(request: &otlp::ExportTraceServiceRequest) -> String {
    let attributes = |list: &[otlp::KeyValue]| -> serde_json::Value {
        list.iter()
            .map(|pair| {
                let value = match pair.value.clone().and_then(|value| value.value) {
                    Some(otlp::Value::Text(text)) => serde_json::json!({"stringValue": text}),
                    Some(otlp::Value::Int(number)) => serde_json::json!({"intValue": number.to_string()}),
                    Some(otlp::Value::Bool(flag)) => serde_json::json!({"boolValue": flag}),
                    Some(otlp::Value::Double(number)) => serde_json::json!({"doubleValue": number}),
                    _ => serde_json::json!({"arrayValue": {"values": []}}),
                };
                serde_json::json!({"key": pair.key, "value": value, "unknown": [{}]})
            })
            .collect()
    };
    let hex = |bytes: &[u8]| -> String { bytes.iter().map(|byte| format!("{byte:02X}")).collect() };
    let spans = |spans: &[otlp::Span]| -> serde_json::Value {
        spans
            .iter()
            .map(|span| {
                serde_json::json!({
                    "traceId": hex(&span.trace_id), "spanId": hex(&span.span_id), "name": span.name, "kind": span.kind,
                    "startTimeUnixNano": span.start_time_unix_nano.to_string(),
                    "endTimeUnixNano": span.end_time_unix_nano.to_string(),
                    "attributes": attributes(&span.attributes), "events": null,
                    "status": {"code": span.status.clone().map_or(0, |status| status.code), "message": "x"},
                })
            })
            .collect()
    };
    let of = &request.resource_spans[0];
    serde_json::json!({"resourceSpans": [{
        "scopeSpans": [{"spans": spans(&of.scope_spans[0].spans), "scope": {"name": "fernhollow.http"}}],
        "resource": {"attributes": attributes(&of.resource.clone().unwrap().attributes)},
    }]})
    .to_string()
}

fn any_span() -> impl Strategy<Value = otlp::Span> {
    let value = prop_oneof![
        "[a-z ]{0,12}".prop_map(otlp::Value::Text),
        any::<i64>().prop_map(otlp::Value::Int),
        any::<bool>().prop_map(otlp::Value::Bool),
        Just(otlp::Value::Array(otlp::ArrayValue::default())),
    ];
    let name = prop_oneof![
        Just("error.type".to_owned()),
        Just("rpc.grpc.status_code".to_owned()),
        Just("http.request.resend_count".to_owned()),
        "\\PC{1,8}",
    ];
    let attribute = (name, value).prop_map(|(key, value)| attribute(&key, value));
    let attributes = prop::collection::vec(attribute, 0..4);
    ("\\PC{0,20}", 0..10_000_000_000u64, attributes, 0..4i32, 0..7i32).prop_map(
        |(name, lasts, attributes, status, kind)| otlp::Span {
            kind,
            ..span(&name, lasts, attributes, status)
        },
    )
}

proptest! {
    /// Both forms of a request say the same, and every span is counted, refused or left out.
    #[test]
    fn both_forms_agree(list in prop::collection::vec(any_span(), 0..12)) {
        let request = traces("desk", list);
        let number = request.resource_spans[0].scope_spans[0].spans.len() as u64;
        let (waits, report) = spans(&request);
        let (others, other) = took(vec![json(&request).into()], &options(Some(Format::OtlpTraces)));
        prop_assert_eq!(&waits, &others);
        prop_assert_eq!(reasons(&report), reasons(&other));
        prop_assert_eq!(report.waits + report.bad.count + report.left_out.not_waits, number);
    }

    /// Nothing panics, and what is taken of a mangled body holds.
    #[test]
    fn mangled_bodies(list in prop::collection::vec(any_span(), 1..4), at in any::<prop::sample::Index>(), byte: u8) {
        let mut body = traces("desk", list).encode_to_vec();
        let at = at.index(body.len());
        body[at] = byte;
        for format in [Format::OtlpTraces, Format::OtlpMetrics] {
            let _ = took(vec![body.clone()], &options(Some(format)));
        }
    }
}

/// Lines of documents among which some are broken: each is told by its number, the others are read on any number of threads.
#[test]
fn lines_of_documents() {
    let line = TRACE_JSON.replace('\n', " ");
    let text = format!("{line}\n{{\"resourceSpans\":[\n\n{line}\n{{}}\n{line}");
    for threads in 1..4 {
        let options = Options { threads: NonZeroUsize::new(threads), ..options(None) };
        let (waits, report) = took(vec![text.clone().into()], &options);
        let mut streams = BTreeMap::new();
        waits.iter().for_each(|(stream, _)| *streams.entry(stream.clone()).or_insert(0) += 1);
        assert_eq!((waits.len(), streams.len()), (3, 1));
        assert_eq!(report.bad.examples[0].line, 2);
        assert_eq!(report.bad.count, 1);
    }
}

/// A whole page in the text format.
const TEXT: &str = standard!("text_format.txt");

fn scraped(texts: &[&str]) -> (Vec<(String, Wait)>, Report) {
    let bodies = texts.iter().map(|text| text.as_bytes().to_vec()).collect();
    took(bodies, &options(Some(Format::MetricsText)))
}

/// The parsers of `prometheus_client` read the same counts of a page, if it is there.
fn by_library(page: &str, expected: &[(f64, f64, u64)]) {
    let Some(read) = clients::buckets_by_library(page) else { return };
    let (mut counts, mut last) = (Vec::new(), (0.0, 0.0));
    for (bound, count) in read {
        if count > last.1 {
            counts.push((last.0, bound, (count - last.1) as u64));
        }
        last = (bound, count);
    }
    assert_eq!(counts, expected);
}

#[test]
fn the_text_formats_own_histogram() {
    let (waits, report) = took(vec![TEXT.into()], &options(None));
    assert_eq!((report.files[0].format, report.bad.count, report.lines), (Some(Format::MetricsText), 0, 36));
    let inf = f64::INFINITY;
    let expected = [
        (0.0, 0.05, 24_054),
        (0.05, 0.1, 9_390),
        (0.1, 0.2, 66_948),
        (0.2, 0.5, 28_997),
        (0.5, 1.0, 4_599),
        (1.0, inf, 10_332),
    ];
    assert_eq!(buckets(&waits), expected);
    assert!(
        waits.iter().all(|(stream, wait)| stream == "http_request_duration_seconds" && wait.at().is_none())
    );
    // The parser prometheus-parse 0.2 reads the same counts.
    let scrape = prometheus_parse::Scrape::parse(TEXT.lines().map(|line| Ok(line.to_owned()))).unwrap();
    let histogram = scrape.samples.iter().find_map(|sample| match &sample.value {
        prometheus_parse::Value::Histogram(counts) => Some(counts),
        _ => None,
    });
    by_library(TEXT, &expected);
    let mut sum = 0;
    for (count, (_, upto, more)) in histogram.unwrap().iter().zip(expected) {
        sum += more;
        assert_eq!((count.less_than, count.count), (upto, sum as f64));
    }
}

/// Examples of the OpenMetrics specification. Their histograms have no unit, which whoever reads them has to say.
#[test]
fn the_histograms_of_open_metrics() {
    let inf = f64::INFINITY;
    let seconds = Exposition { unit: Some(1.0), ..Exposition::default() };
    let seconds = Options { exposition: seconds, ..options(Some(Format::MetricsText)) };
    let read = |text: &str| {
        let (waits, report) = took(vec![text.into()], &seconds);
        assert_eq!(report.bad.count, 0, "{:?}", report.bad);
        (buckets(&waits), report.left_out.not_waits)
    };
    // A wide variety of bounds; of two that are beyond all ages there is nothing to tell.
    let histogram = standard!("open_metrics_histogram.txt");
    let expected =
        [(1e-5, 1e-4, 5), (1e-4, 0.1, 3), (0.1, 1.0, 2), (1.0, 10.0, 1), (1e5, 1e6, 4), (1e6, inf, 2)];
    assert_eq!(read(histogram), (expected.into(), 0));
    assert_eq!(took(vec![histogram.into()], &options(None)).0, [], "without a unit");
    let exemplars = standard!("open_metrics_exemplars.txt");
    assert_eq!(read(exemplars).0, [(0.01, 0.1, 8), (0.1, 1.0, 3), (1.0, 10.0, 6)]);
    by_library(exemplars, &read(exemplars).0);
    // Values that are there, not waits that have ended; summaries; counters.
    assert_eq!(read(standard!("open_metrics_gauge_histogram.txt")), (vec![], 7));
    assert_eq!(read(standard!("open_metrics_complete.txt")), (vec![], 8));
}

/// The same as a whole page with a unit and with times, which are seconds; bounds in the form that the standard wants of them, and
/// one blank between words, neither of which its own example has.
#[test]
fn times_of_open_metrics() {
    let timed = |line: &str| match line {
        "# TYPE foo histogram" => "# TYPE foo_seconds histogram\n# UNIT foo_seconds seconds\n".to_owned(),
        line => {
            let (sample, exemplar) = line.split_once(" #").unwrap_or((line, ""));
            let sample = sample.replacen("foo", "foo_seconds", 1).replace("  ", " ");
            let sample = sample.replace("le=\"1\"", "le=\"1.0\"").replace("le=\"10\"", "le=\"10.0\"");
            let exemplar = if exemplar.is_empty() { String::new() } else { format!(" #{exemplar}") };
            format!("{sample} 1520879607.5{exemplar}\n")
        }
    };
    let text: String = standard!("open_metrics_exemplars.txt").lines().map(timed).collect();
    let text = format!("{text}# EOF\n");
    let (waits, report) = took(vec![text.clone().into()], &options(None));
    assert_eq!(report.bad.count, 0, "{:?}", report.bad);
    assert_eq!(buckets(&waits), [(0.01, 0.1, 8), (0.1, 1.0, 3), (1.0, 10.0, 6)]);
    by_library(&text, &buckets(&waits));
    assert!(waits.iter().all(|(_, wait)| wait.at() == Some(1_520_879_607.5)));
}

#[test]
fn two_scrapes_are_their_difference() {
    let page = |counts: [u64; 4], more: &str| {
        let [a, b, inf, count] = counts;
        format!(
            "# TYPE w_seconds histogram\nw_seconds_bucket{{route=\"a\",le=\"1\"}} {a}\n\
             w_seconds_bucket{{le=\"2\",route=\"a\"}} {b}\nw_seconds_bucket{{route=\"a\",le=\"+Inf\"}} {inf}\n\
             w_seconds_count{{route=\"a\"}} {count}\n{more}"
        )
    };
    let inf = f64::INFINITY;
    let (one, _) = scraped(&[&page([5, 8, 9, 9], "")]);
    assert_eq!(buckets(&one), [(0.0, 1.0, 5), (1.0, 2.0, 3), (2.0, inf, 1)], "alone: since the start");
    let (two, _) = scraped(&[&page([5, 8, 9, 9], ""), &page([6, 9, 12, 12], "")]);
    assert_eq!(buckets(&two), [(0.0, 1.0, 1), (2.0, inf, 2)]);
    let (reset, _) = scraped(&[&page([5, 8, 9, 9], ""), &page([1, 1, 1, 1], "")]);
    assert_eq!(buckets(&reset), [(0.0, 1.0, 1)]);
    // A layout that has changed: what both can tell.
    let finer = "# TYPE w_seconds histogram\nw_seconds_bucket{route=\"a\",le=\"1\"} 6\n\
                 w_seconds_bucket{route=\"a\",le=\"1.5\"} 8\nw_seconds_bucket{route=\"a\",le=\"2\"} 10\n\
                 w_seconds_bucket{route=\"a\",le=\"+Inf\"} 12\n";
    let (changed, _) = scraped(&[&page([5, 8, 9, 9], ""), finer]);
    assert_eq!(buckets(&changed), [(0.0, 1.0, 1), (1.0, 2.0, 1), (2.0, inf, 1)]);
    // Another series is another, and one that only the later page has is counted since its start.
    let other = "w_seconds_bucket{route=\"b\",le=\"1\"} 4\nw_seconds_bucket{route=\"b\",le=\"+Inf\"} 4\n";
    let (more, _) = scraped(&[&page([5, 8, 9, 9], ""), &page([5, 8, 9, 9], other)]);
    assert_eq!(buckets(&more), [(0.0, 1.0, 4)]);
    // A bucket up to +Inf is missing, but not the count.
    let text = "# TYPE w_ms histogram\nw_ms_bucket{le=\"1\"} 5\nw_ms_count 9\n";
    assert_eq!(buckets(&scraped(&[text]).0), [(0.0, 0.001, 5), (0.001, inf, 4)]);
}

#[test]
fn bad_pages_are_told_and_the_rest_is_read() {
    let told = |text: &str| reasons(&scraped(&[text]).1).first().copied();
    let of = |lines: &str| format!("# TYPE w_seconds histogram\n{lines}\n");
    assert_eq!(told(&of("w_seconds_bucket{le=\"1\"} 5")), Some(("buckets", "without a total")));
    assert_eq!(told(&of("w_seconds_bucket{le=\"x\"} 5")), Some(("le", "not a number")));
    assert_eq!(told(&of("w_seconds_bucket 5")), Some(("le", "not a number")));
    for count in ["NaN", "-1", "0.5", "9223372036854775808", "+Inf"] {
        assert_eq!(
            told(&of(&format!("w_seconds_bucket{{le=\"+Inf\"}} {count}"))),
            Some(("count", "not a whole number"))
        );
    }
    let sinks = "w_seconds_bucket{le=\"1\"} 5\nw_seconds_bucket{le=\"2\"} 3\nw_seconds_bucket{le=\"+Inf\"} 9";
    assert_eq!(told(&of(sinks)), Some(("buckets", "sinking")));
    let twice =
        "w_seconds_bucket{le=\"1\"} 5\nw_seconds_bucket{le=\"1.0\"} 5\nw_seconds_bucket{le=\"+Inf\"} 9";
    assert_eq!(told(&of(twice)), Some(("bounds", "not increasing")));
    let differs = "w_seconds_bucket{le=\"+Inf\"} 9\nw_seconds_count 8";
    assert_eq!(told(&of(differs)), Some(("count", "not the sum of the buckets")));
    assert_eq!(told("w_seconds_bucket{le=\"1} 5"), Some(("line", "not a sample")));
    assert_eq!(told("\u{0}"), Some(("line", "not a sample")));
    // A sum that is none does no harm, and a bad line costs itself.
    let text = of(
        "w_seconds_bucket{le=\"1\"} 5\n!\nw_seconds_bucket{le=\"+Inf\"} 9\nw_seconds_sum NaN\nw_seconds_count 9",
    );
    let (waits, report) = scraped(&[&text]);
    assert_eq!((waits.len(), report.bad.examples[0].line, report.bad.count), (2, 3, 1));
    // Histograms of bytes, gauges of histograms and summaries are none of ours.
    let text = "# TYPE size_bytes histogram\nsize_bytes_bucket{le=\"+Inf\"} 9\n# TYPE g_seconds gaugehistogram\n\
                g_seconds_bucket{le=\"+Inf\"} 9\n# TYPE s_seconds summary\ns_seconds_count 9\n";
    assert_eq!((scraped(&[text]).0.len(), scraped(&[text]).1.bad.count), (0, 0));
    let buckets: String = (0..20_000).map(|i| format!("w_seconds_bucket{{le=\"{i}\"}} 1\n")).collect();
    assert_eq!(told(&of(&buckets)), Some(("bounds", "too many bounds")));
}

proptest! {
    /// Any text is read without a panic, and every histogram that another library writes is read whole.
    #[test]
    fn pages_of_a_library(waits in prop::collection::vec(0.0..100.0f64, 0..50), noise in "\\PC{0,40}") {
        use prometheus::Encoder;
        let opts = prometheus::HistogramOpts::new("w_seconds", "Waits.\nIn two lines.").const_label("route", "a\"b\\c\n");
        let histogram = prometheus::Histogram::with_opts(opts).unwrap();
        waits.iter().for_each(|wait| histogram.observe(*wait));
        let registry = prometheus::Registry::new();
        registry.register(Box::new(histogram)).unwrap();
        let mut text = Vec::new();
        prometheus::TextEncoder::new().encode(&registry.gather(), &mut text).unwrap();
        let (read, report) = took(vec![text.clone()], &options(None));
        prop_assert_eq!(report.bad.count, 0);
        prop_assert_eq!(read.iter().map(|(_, wait)| wait.count()).sum::<u64>(), waits.len() as u64);
        for wait in &waits {
            let holds = |(_, one): &(String, Wait)| match one.age() {
                Age::Between { over, upto } => over < *wait && *wait <= upto,
                Age::Exact(_) => false,
            };
            prop_assert!(*wait == 0.0 || read.iter().any(holds), "{} is in no bucket", wait);
        }
        text.extend_from_slice(noise.as_bytes());
        let _ = took(vec![text], &options(Some(Format::MetricsText)));
    }
}
