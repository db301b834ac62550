//! Telemetry by OTLP over HTTP: what is answered, what is filed, and that nothing is counted twice.
//!
//! The status codes, media types and messages are those of the standard (opentelemetry.io/docs/specs/otlp). The SDK for
//! Python and its exporter, where they are installed under `target/clients`, send what the last test reads.

#[path = "../support/clients.rs"]
pub(crate) mod clients;
#[path = "../support/otlp.rs"]
mod messages;

use std::io::Write;
use std::path::Path;
use std::process::Command;

use clients::python;

use prost::Message;
use serde_json::Value;

use self::messages::{
    ExportResponse, HistogramPoint, RpcStatus, attribute, histogram, metrics, point, span, traces,
};
use crate::client::{Answer, ask, get, post};
use crate::house::{House, NOON, until};

fn send(house: &House, path: &str, kind: &str, body: &[u8]) -> Answer {
    ask(house.address, "POST", path, &[("Content-Type", kind)], body)
}

fn send_spans(house: &House, spans: Vec<messages::Span>) -> Answer {
    send(house, "/v1/traces", "application/x-protobuf", &traces("catalogue", spans).encode_to_vec())
}

/// Waits of a stream by ending: done, failed, gave_up; zeros while there is no advice on it.
fn evidence(house: &House, stream: &str) -> Option<[u64; 3]> {
    let advice = get(house.address, &format!("/v1/advice/{stream}"));
    let json = (advice.status == 200).then(|| advice.json())?;
    Some(["done", "failed", "gave_up"].map(|ending| json["evidence"][ending].as_u64().unwrap()))
}

pub(crate) fn counted(house: &House, stream: &str, wanted: [u64; 3]) {
    until(&format!("{wanted:?} in {stream}"), || evidence(house, stream).filter(|found| *found == wanted));
}

#[test]
fn spans_are_counted_once() {
    let house = House::new();
    let timeout = vec![attribute("error.type", "timeout")];
    let spans = vec![
        span("lookup", 18_300_000, vec![], 0),
        span("lookup", 20_000_000, vec![], 1),
        span("lookup", 5_000_000, vec![], 2),
        span("lookup", 800_000_000, timeout, 2),
    ];
    let body = traces("catalogue", spans).encode_to_vec();
    let answer = send(&house, "/v1/traces", "application/x-protobuf", &body);
    // Full success is the empty message.
    assert_eq!((answer.status, answer.header("content-type")), (200, Some("application/x-protobuf")));
    assert!(answer.body.is_empty());
    counted(&house, "catalogue.lookup", [2, 1, 1]);
    // An exporter that has lost the answer sends the same again, packed anew.
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::best());
    gzip.write_all(&body).unwrap();
    let headers = [("Content-Type", "application/x-protobuf"), ("Content-Encoding", "gzip")];
    let again = ask(house.address, "POST", "/v1/traces", &headers, &gzip.finish().unwrap());
    assert_eq!((again.status, again.body.len()), (200, 0));
    let text = get(house.address, "/metrics").text().to_owned();
    assert!(text.contains("outwait_batches_total{outcome=\"repeated\"} 1"), "{text}");
    assert!(text.contains("outwait_waits_total 4"), "{text}");
    // Waits of records and of spans are one stream.
    post(
        house.address,
        format!("{{\"stream\":\"catalogue.lookup\",\"elapsed\":1,\"at\":{NOON}}}\n").as_bytes(),
    );
    counted(&house, "catalogue.lookup", [3, 1, 1]);
}

#[test]
fn what_is_rejected_is_told() {
    let house = House::new();
    let mut backwards = span("lookup", 1, vec![], 0);
    backwards.start_time_unix_nano = u64::MAX;
    let mut unended = span("lookup", 1, vec![], 0);
    unended.end_time_unix_nano = 0;
    let answer = send_spans(&house, vec![span("lookup", 1_000, vec![], 0), backwards, unended]);
    assert_eq!(answer.status, 200);
    let partial = ExportResponse::decode(&answer.body[..]).unwrap().partial_success.unwrap();
    assert_eq!(partial.rejected, 2);
    assert!(partial.error_message.contains("endTimeUnixNano"), "{}", partial.error_message);
    counted(&house, "catalogue.lookup", [1, 0, 0]);
    // In JSON the same, with a text for a number of 64 bits.
    let body = r#"{"resourceSpans":[{"scopeSpans":[{"spans":[{"name":"a","startTimeUnixNano":"5"}]}]}]}"#;
    let answer = send(&house, "/v1/traces", "application/json", body.as_bytes());
    assert_eq!((answer.status, answer.header("content-type")), (200, Some("application/json")));
    assert_eq!(answer.json()["partialSuccess"]["rejectedSpans"], "1");
    let body = r#"{"resourceMetrics":[{"scopeMetrics":[{"metrics":[{"name":"a","unit":"s","histogram":{"aggregationTemporality":1,
        "dataPoints":[{"timeUnixNano":"5","count":"2","bucketCounts":["1","1"],"explicitBounds":["NaN"]}]}}]}]}]}"#;
    let answer = send(&house, "/v1/metrics", "application/json", body.as_bytes());
    assert_eq!(answer.json()["partialSuccess"]["rejectedDataPoints"], "1");
    // An empty request is a success.
    for (kind, body, empty) in
        [("application/x-protobuf", &b""[..], &b""[..]), ("application/json", b"{}", b"{}")]
    {
        for path in ["/v1/traces", "/v1/metrics"] {
            let answer = send(&house, path, kind, body);
            assert_eq!((answer.status, &answer.body[..]), (200, empty), "{path} {kind}");
        }
    }
}

#[test]
fn failures_in_the_protocols_own_form() {
    let house = House::with(|config| {
        config.limits.body_bytes = 10_000;
        config.limits.unpacked_bytes = 100_000;
    });
    let answer = send(&house, "/v1/traces", "application/x-protobuf", b"\x0a\x05no");
    let status = RpcStatus::decode(&answer.body[..]).unwrap();
    assert_eq!((answer.status, status.code), (400, 3), "{}", status.message);
    assert_eq!(status.details[0].type_url, "type.googleapis.com/google.rpc.BadRequest");
    let answer = send(&house, "/v1/metrics", "application/json", b"{\"resourceMetrics\":7}");
    assert_eq!((answer.status, &answer.json()["code"]), (400, &Value::from(3)));
    let answer = send(&house, "/v1/metrics", "application/json", b"resourceMetrics");
    assert_eq!((answer.status, &answer.json()["code"]), (400, &Value::from(3)));
    assert!(answer.text().contains("no JSON object"), "{}", answer.text());
    // Too long as sent, and unpacked.
    let answer = send(&house, "/v1/traces", "application/x-protobuf", &[0; 10_001]);
    assert_eq!((answer.status, RpcStatus::decode(&answer.body[..]).unwrap().code), (413, 8));
    let bomb = zeros(1_000_000);
    let headers = [("Content-Type", "application/x-protobuf"), ("Content-Encoding", "gzip")];
    let answer = ask(house.address, "POST", "/v1/traces", &headers, &bomb);
    assert_eq!((answer.status, RpcStatus::decode(&answer.body[..]).unwrap().code), (413, 8));
    assert!(answer.header("retry-after").is_none());
    // Cut off within its packing.
    let short = zeros(50_000);
    let answer = ask(house.address, "POST", "/v1/traces", &headers, &short[..short.len() / 2]);
    assert_eq!(answer.status, 400);
    let answer = send(&house, "/v1/traces", "text/plain", b"hello");
    assert_eq!((answer.status, answer.header("content-type")), (415, Some("application/json")));
    let answer = ask(house.address, "GET", "/v1/traces", &[], b"");
    assert_eq!(
        (answer.status, answer.header("allow"), &answer.json()["code"]),
        (405, Some("POST"), &Value::from(12))
    );
}

fn zeros(number: usize) -> Vec<u8> {
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::best());
    gzip.write_all(&vec![0; number]).unwrap();
    gzip.finish().unwrap()
}

#[test]
fn who_is_busy_says_when_to_come_again() {
    let house = House::with(|config| config.limits.bodies_bytes = 10);
    let answer = send_spans(&house, vec![span("lookup", 1_000, vec![], 0)]);
    assert_eq!((answer.status, answer.header("retry-after")), (503, Some("1")));
    assert_eq!(RpcStatus::decode(&answer.body[..]).unwrap().code, 14);
}

#[test]
fn histograms_that_only_grow_are_counted_once_over_a_restart() {
    let folder = tempfile::tempdir().unwrap();
    let bounds = [5.0, 10.0, 25.0];
    let read_at =
        |after, counts: &[u64]| metrics("desk", vec![histogram("wait", 2, point(after, &bounds, counts))]);
    let export = |house: &House, request: &messages::ExportMetricsServiceRequest| {
        let answer = send(house, "/v1/metrics", "application/x-protobuf", &request.encode_to_vec());
        assert_eq!(
            (answer.status, answer.body.len()),
            (200, 0),
            "{:?}",
            ExportResponse::decode(&answer.body[..])
        );
    };
    let mut house = House::on(folder.path(), |_| {}).unwrap();
    export(&house, &read_at(0, &[3, 1, 0, 0]));
    counted(&house, "desk.wait", [4, 0, 0]);
    export(&house, &read_at(60, &[5, 1, 1, 0]));
    // Late, and the same once more under another packing of its fields.
    export(&house, &read_at(30, &[4, 1, 0, 0]));
    export(&house, &read_at(60, &[5, 1, 1, 0]));
    counted(&house, "desk.wait", [7, 0, 0]);
    house.stop();
    let house = House::on(folder.path(), |_| {}).unwrap();
    export(&house, &read_at(120, &[6, 1, 1, 0]));
    counted(&house, "desk.wait", [8, 0, 0]);
    // The writer has begun anew, and says since when.
    let start_time_unix_nano = messages::NOON_NANO + 130_000_000_000;
    let anew = HistogramPoint { start_time_unix_nano, ..point(180, &bounds, &[2, 0, 0, 0]) };
    export(&house, &metrics("desk", vec![histogram("wait", 2, anew)]));
    counted(&house, "desk.wait", [10, 0, 0]);
    // One that has counted for more than a day tells nothing of when: it is a base.
    let old = HistogramPoint { start_time_unix_nano: 1, ..point(180, &bounds, &[100, 0, 0, 0]) };
    export(&house, &metrics("desk", vec![histogram("other", 2, old.clone())]));
    let next = HistogramPoint { start_time_unix_nano: 1, ..point(240, &bounds, &[103, 0, 0, 0]) };
    export(&house, &metrics("desk", vec![histogram("other", 2, next)]));
    counted(&house, "desk.other", [3, 0, 0]);
}

#[test]
fn a_limit_of_series_refuses_the_batch() {
    let house = House::with(|config| config.ledger.most_series = 2);
    let named = |name: &str| histogram(name, 2, point(0, &[5.0], &[1, 0]));
    let request = metrics("desk", vec![named("a"), named("b"), named("c")]);
    let answer = send(&house, "/v1/metrics", "application/x-protobuf", &request.encode_to_vec());
    let status = RpcStatus::decode(&answer.body[..]).unwrap();
    assert_eq!((answer.status, status.code), (507, 8), "{}", status.message);
    let request = metrics("desk", vec![named("a"), named("b")]);
    let answer = send(&house, "/v1/metrics", "application/x-protobuf", &request.encode_to_vec());
    assert_eq!(answer.status, 200);
    counted(&house, "desk.a", [1, 0, 0]);
}

#[test]
fn the_policys_rules() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("policy.yaml");
    let policy = "version: 1\nstreams: [{match: '*', aim: rate, pause: {gave_up: 1s}}]\n\
                  telemetry: {stream: 'spans/{name}', gave_up: ['outcome=left']}\n";
    std::fs::write(&file, policy).unwrap();
    let house = House::with(|config| config.policy = outwait::serve::PolicyFile::at(&file));
    send_spans(&house, vec![span("loan", 5_000_000, vec![attribute("outcome", "left")], 0)]);
    counted(&house, "spans/loan", [0, 0, 1]);
}

/// The OpenTelemetry SDK for Python with its OTLP exporter over HTTP: spans of every ending and histograms of both kinds
/// and both temporalities, packed and not.
#[test]
fn an_sdk_sends() {
    let Some(python) = python() else { return };
    let house = House::with(|config| config.clock = outwait::serve::Config::new("").clock);
    let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/daemon/sdk.py");
    let output = Command::new(python).arg(script).arg(format!("http://{}", house.address)).output().unwrap();
    let told = String::from_utf8_lossy(&output.stderr);
    assert!(output.status.success(), "{told}");
    // The exporter logs what is rejected or fails.
    assert_eq!(told.trim(), "");
    counted(&house, "fernhollow.desk.loan", [3, 1, 2]);
    // Each histogram held 0, 3, 20 and 700 ms, then 4 and 5 ms.
    for kind in ["explicit", "exponential"] {
        for temporality in ["delta", "cumulative"] {
            counted(&house, &format!("fernhollow.desk.{kind}.{temporality}"), [6, 0, 0]);
        }
    }
    let curve = get(house.address, "/v1/streams/fernhollow.desk.explicit.cumulative/curve");
    assert_eq!(curve.status, 200, "{}", curve.text());
}
