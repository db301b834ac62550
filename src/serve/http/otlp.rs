//! `POST /v1/traces` and `POST /v1/metrics`: telemetry by OTLP over HTTP, answered when the waits are on disk.
//!
//! Exporters send the same again when an answer is lost. A body is therefore its own key: one whose bytes, unpacked, were
//! filed before is not counted again.

use std::sync::Arc;
use std::sync::atomic::Ordering;

use axum::body::Body;
use axum::extract::State;
use axum::http::{HeaderMap, HeaderValue, StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};

use super::waits::{counted, encoding, gather, key, refusal, uncounted};
use super::{App, away, parameters};
use crate::intake::{Answer, Encoding, Format, Report};
use crate::serve::body::{Reading, count_whole};
use crate::serve::keeper::Refusal;
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

/// Where telemetry comes in.
pub(super) const PATHS: [&str; 2] = ["/v1/traces", "/v1/metrics"];

pub(super) async fn traces(
    State(shared): App,
    uri: Uri,
    headers: HeaderMap,
    body: Body,
) -> Result<Response, Problem> {
    take(&shared, &uri, &headers, body, Format::OtlpTraces).await
}

pub(super) async fn metrics(
    State(shared): App,
    uri: Uri,
    headers: HeaderMap,
    body: Body,
) -> Result<Response, Problem> {
    take(&shared, &uri, &headers, body, Format::OtlpMetrics).await
}

async fn take(
    shared: &Arc<Shared>,
    uri: &Uri,
    headers: &HeaderMap,
    body: Body,
    format: Format,
) -> Result<Response, Problem> {
    counted(shared, try_take(shared, uri, headers, body, format).await)
}

async fn try_take(
    shared: &Arc<Shared>,
    uri: &Uri,
    headers: &HeaderMap,
    body: Body,
    format: Format,
) -> Result<(Response, bool), Problem> {
    parameters(uri, &[])?;
    let form = form(headers).ok_or_else(|| {
        Problem::new(
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
            "media-type",
            "Telemetry is not read from this",
            "the Content-Type is not one of OTLP over HTTP",
            "send application/x-protobuf or application/json",
        )
    })?;
    encoding(headers)?;
    let key = key(headers)?;
    let (bytes, held) = gather(body, headers, shared).await?;
    let app = Arc::clone(shared);
    let counted = away(move || {
        let _held = held;
        let rules = app.policy().map(|policy| policy.telemetry.clone()).unwrap_or_default();
        let any_open = app.any_open.load(Ordering::Relaxed);
        let reading = Reading { key: key.as_deref(), now: app.now(), any_open };
        count_whole(bytes, form, format, rules, reading, &app.config.limits)
            .map_err(|error| uncounted(&app, error))
    })
    .await?;
    shared.note(&counted.report);
    let answer = answer(&counted.report, format);
    let mut repeated = false;
    if !counted.batch.is_empty() {
        let filed = shared.counter.hand_in(counted.batch, shared).map_err(refusal)?;
        let entry = filed.await.map_err(|_| refusal(Refusal::Stopping))?.map_err(refusal)?;
        shared.metrics.grown(&entry);
        if !entry.repeated {
            shared.metrics.waits.inc_by(counted.report.waits);
        }
        repeated = entry.repeated;
    }
    Ok((respond(&answer, StatusCode::OK, form), repeated))
}

/// How a request is written, and therefore its answer.
fn form(headers: &HeaderMap) -> Option<Encoding> {
    let named = headers.get(header::CONTENT_TYPE)?.to_str().ok()?;
    match named.split(';').next()?.trim().to_ascii_lowercase().as_str() {
        "application/x-protobuf" | "application/protobuf" => Some(Encoding::Protobuf),
        "application/json" => Some(Encoding::Json),
        _ => None,
    }
}

/// What was rejected, and why.
fn answer(report: &Report, format: Format) -> Answer {
    let reasons: Vec<String> = report
        .bad
        .by_reason
        .iter()
        .map(|bad| format!("{} times {} is {}", bad.lines, bad.field, bad.reason))
        .collect();
    let message = match report.bad.examples.first() {
        None => String::new(),
        Some(first) => format!(
            "{}; the first is number {}: {}: {}; {}",
            reasons.join(", "),
            first.line,
            first.field,
            first.reason,
            first.remedy
        ),
    };
    Answer::Export { spans: format == Format::OtlpTraces, rejected: report.bad.count, message }
}

fn respond(answer: &Answer, status: StatusCode, form: Encoding) -> Response {
    let kind = HeaderValue::from_static(form.media_type());
    (status, [(header::CONTENT_TYPE, kind)], answer.encode(form)).into_response()
}

/// A problem in the protocol's own form, for those who speak it. What passes by itself is told by a status that its clients
/// take as a reason to come again.
pub(super) fn worded(response: Response, headers: &HeaderMap) -> Response {
    let Some(problem) = response.extensions().get::<Problem>() else { return response };
    let status = match response.status() {
        status if response.headers().contains_key(header::RETRY_AFTER) && !is_retried(status) => {
            StatusCode::SERVICE_UNAVAILABLE
        }
        status => status,
    };
    let answer = Answer::Failure {
        code: code(status),
        message: problem.sentence(),
        bad_request: status == StatusCode::BAD_REQUEST,
    };
    let mut told = respond(&answer, status, form(headers).unwrap_or(Encoding::Json));
    for name in [header::RETRY_AFTER, header::ALLOW, header::WWW_AUTHENTICATE] {
        if let Some(value) = response.headers().get(&name) {
            told.headers_mut().insert(name, value.clone());
        }
    }
    told
}

/// The statuses after which an exporter tries again.
fn is_retried(status: StatusCode) -> bool {
    matches!(status.as_u16(), 429 | 502..=504)
}

/// The canonical code of gRPC that goes with a status.
fn code(status: StatusCode) -> u32 {
    match status.as_u16() {
        401 => 16,
        403 => 7,
        404 => 5,
        405 => 12,
        408 => 4,
        413 | 429 | 507 => 8,
        500 => 13,
        502..=504 => 14,
        _ => 3,
    }
}
