//! `POST /v1/waits`: answered when the batch is on disk.

use std::sync::Arc;
use std::sync::atomic::Ordering;

use axum::body::{Body, Bytes};
use axum::extract::State;
use axum::http::{HeaderMap, StatusCode, Uri, header};
use axum::response::Response;
use http_body_util::BodyExt;
use serde::Serialize;
use tokio::time::timeout;

use super::{App, away, excerpt, json, parameters};
use crate::intake::{BadCount, BadLine, Format, IntakeError};
use crate::ledger::{Entry, LedgerError, MAX_KEY_BYTES};
use crate::say;
use crate::serve::body::{CountError, Reading, count};
use crate::serve::keeper::Refusal;
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

/// What was made of a batch.
#[derive(Debug, Serialize)]
struct Receipt<'a> {
    schema: &'static str,
    /// Whether the batch had been counted before under its key, and so was not counted again.
    repeated: bool,
    lines: u64,
    /// Waits counted; a record with a `count` is one.
    waits: u64,
    /// Starts and ends filed, and open waits with an id.
    events: u64,
    /// Waits that became whole with them.
    joined: u64,
    /// Starts and ends that were known already.
    again: u64,
    /// Starts and ends of which no wait can be made.
    refused: u64,
    bad_lines: u64,
    bad_by_reason: &'a [BadCount],
    bad_examples: &'a [BadLine],
}

pub(super) async fn take(
    State(shared): App,
    uri: Uri,
    headers: HeaderMap,
    body: Body,
) -> Result<Response, Problem> {
    counted(&shared, try_take(&shared, &uri, &headers, body).await)
}

/// Counts a batch by what became of it; whether it is one that was counted before comes with it.
pub(super) fn counted(
    shared: &Shared,
    outcome: Result<(Response, bool), Problem>,
) -> Result<Response, Problem> {
    let label = match &outcome {
        Ok((_, true)) => "repeated",
        Ok((_, false)) => "counted",
        Err(_) => "refused",
    };
    shared.metrics.batches.with_label_values(&[label]).inc();
    outcome.map(|(response, _)| response)
}

async fn try_take(
    shared: &Arc<Shared>,
    uri: &Uri,
    headers: &HeaderMap,
    body: Body,
) -> Result<(Response, bool), Problem> {
    parameters(uri, &[])?;
    let format = format(headers)?;
    encoding(headers)?;
    let key = key(headers)?;
    let (bytes, held) = gather(body, headers, shared).await?;
    let app = Arc::clone(shared);
    let counted = away(move || {
        let _held = held;
        let now = app.now();
        let any_open = app.any_open.load(Ordering::Relaxed);
        let reading = Reading { key: key.as_deref(), now, any_open };
        count(bytes, format, reading, &app.config.limits).map_err(|error| uncounted(&app, error))
    })
    .await?;
    shared.note(&counted.report);
    if counted.events > 0 {
        shared.any_open.store(true, Ordering::Relaxed);
    }
    let answer = shared.counter.hand_in(counted.batch, shared).map_err(refusal)?;
    let entry = answer.await.map_err(|_| refusal(Refusal::Stopping))?.map_err(refusal)?;
    if !entry.repeated {
        shared.metrics.waits.inc_by(counted.report.waits + entry.joined);
    }
    let Entry { repeated, joined, again, refused, .. } = entry;
    let report = &counted.report;
    let receipt = Receipt {
        schema: "outwait/receipt/1",
        repeated,
        lines: report.lines,
        waits: report.waits,
        events: counted.events,
        joined,
        again,
        refused: refused + counted.refused,
        bad_lines: report.bad.count,
        bad_by_reason: &report.bad.by_reason,
        bad_examples: &report.bad.examples,
    };
    Ok((json(&receipt)?, repeated))
}

/// Bytes of a body that count against the limit of all bodies, until this is dropped.
pub(super) struct Held {
    shared: Arc<Shared>,
    bytes: usize,
}

impl Held {
    fn more(&mut self, bytes: usize) -> Result<(), Problem> {
        let most = self.shared.config.limits.bodies_bytes;
        if self.shared.bodies.fetch_add(bytes, Ordering::Relaxed) + bytes > most {
            self.shared.bodies.fetch_sub(bytes, Ordering::Relaxed);
            return Err(Problem::new(
                StatusCode::SERVICE_UNAVAILABLE,
                "crowded",
                "Too much at once",
                format!("bodies of {most} bytes are being read already"),
                "send the same again a little later",
            )
            .retry_after(1));
        }
        self.bytes += bytes;
        Ok(())
    }
}

impl Drop for Held {
    fn drop(&mut self) {
        self.shared.bodies.fetch_sub(self.bytes, Ordering::Relaxed);
    }
}

/// The whole body, as long as it is within the limits.
pub(super) async fn gather(
    body: Body,
    headers: &HeaderMap,
    shared: &Arc<Shared>,
) -> Result<(Bytes, Held), Problem> {
    let limits = shared.config.limits;
    let length =
        headers.get(header::CONTENT_LENGTH).and_then(|value| value.to_str().ok()?.parse::<usize>().ok());
    if length.is_some_and(|length| length > limits.body_bytes) {
        return Err(too_long(limits.body_bytes));
    }
    timeout(limits.body, read_whole(body, length.unwrap_or(0), shared)).await.map_err(|_| {
        Problem::new(
            StatusCode::REQUEST_TIMEOUT,
            "slow-body",
            "The body takes too long",
            format!("it was not complete within {} s", limits.body.as_secs()),
            "send smaller batches, or over a faster line",
        )
    })?
}

async fn read_whole(mut body: Body, expected: usize, shared: &Arc<Shared>) -> Result<(Bytes, Held), Problem> {
    let most = shared.config.limits.body_bytes;
    let mut held = Held { shared: Arc::clone(shared), bytes: 0 };
    held.more(expected)?;
    let mut all = Vec::with_capacity(expected);
    while let Some(frame) = body.frame().await {
        let frame = frame.map_err(|error| {
            Problem::new(
                StatusCode::BAD_REQUEST,
                "broken-body",
                "The body broke off",
                error.to_string(),
                "send the same again; nothing of it was counted",
            )
        })?;
        let Ok(data) = frame.into_data() else { continue };
        if all.len() + data.len() > most {
            return Err(too_long(most));
        }
        held.more((all.len() + data.len()).saturating_sub(held.bytes))?;
        all.extend_from_slice(&data);
    }
    Ok((all.into(), held))
}

fn too_long(most: usize) -> Problem {
    Problem::new(
        StatusCode::PAYLOAD_TOO_LARGE,
        "body",
        "The body is too long",
        format!("a body has at most {most} bytes"),
        "send it in several batches, packed by gzip or zstd",
    )
}

fn format(headers: &HeaderMap) -> Result<Option<Format>, Problem> {
    let Some(named) = headers.get(header::CONTENT_TYPE) else { return Ok(None) };
    let named = named.to_str().unwrap_or_default();
    match named.split(';').next().unwrap_or_default().trim().to_ascii_lowercase().as_str() {
        "application/x-ndjson" | "application/ndjson" | "application/jsonl" | "application/json" => {
            Ok(Some(Format::Ndjson))
        }
        "text/csv" => Ok(Some(Format::Csv)),
        // What clients send unless told otherwise says nothing.
        "" | "application/octet-stream" | "text/plain" | "application/x-www-form-urlencoded" => Ok(None),
        _ => Err(Problem::new(
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
            "media-type",
            "Waits are not read from this",
            format!("Content-Type: {}", excerpt(named)),
            "send application/x-ndjson or text/csv",
        )),
    }
}

/// Packed bodies are known by their content; the header only must not name something else.
pub(super) fn encoding(headers: &HeaderMap) -> Result<(), Problem> {
    let Some(named) = headers.get(header::CONTENT_ENCODING) else { return Ok(()) };
    let named = named.to_str().unwrap_or_default().trim().to_ascii_lowercase();
    match named.as_str() {
        "" | "identity" | "gzip" | "x-gzip" | "zstd" => Ok(()),
        _ => Err(Problem::new(
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
            "encoding",
            "The body is packed in a way that is not read",
            format!("Content-Encoding: {}", excerpt(&named)),
            "pack it by gzip or zstd, or not at all",
        )),
    }
}

pub(super) fn key(headers: &HeaderMap) -> Result<Option<String>, Problem> {
    let Some(key) = headers.get("idempotency-key") else { return Ok(None) };
    match key.to_str() {
        Ok(key) => Ok(Some(key.to_owned())),
        Err(_) => Err(Problem::parameter(
            "Idempotency-Key",
            "not printable ASCII",
            format!("use 1 to {MAX_KEY_BYTES} letters, digits and signs"),
        )),
    }
}

pub(super) fn uncounted(shared: &Shared, error: CountError) -> Problem {
    let bad = |code, title, remedy: &str, detail: String| {
        Problem::new(StatusCode::BAD_REQUEST, code, title, detail, remedy)
    };
    match error {
        CountError::Key(error) => {
            bad("key", "The key is not one", "use 1 to 255 letters, digits and signs", error.to_string())
        }
        CountError::Undecodable { reason } => {
            bad("body", "The body cannot be decoded", "send the standard's own request message", reason)
        }
        CountError::Intake(IntakeError::NoWaits { report } | IntakeError::BadLines { report, .. }) => {
            shared.note(&report);
            bad(
                "no-waits",
                "There is no wait in the body",
                "see bad_examples: each line is a JSON object with stream and elapsed",
                format!("{} lines, {} of them bad", report.lines, report.bad.count),
            )
            .with("bad_examples", &report.bad.examples)
        }
        CountError::Intake(error @ IntakeError::TooMuch { .. }) => Problem::new(
            StatusCode::PAYLOAD_TOO_LARGE,
            "unpacked",
            "The body is too long when unpacked",
            error.to_string(),
            "send it in several batches",
        ),
        CountError::Intake(error) => bad(
            "body",
            "The body cannot be read",
            "send NDJSON or CSV, plain or packed by gzip or zstd",
            say::chain(&error),
        ),
    }
}

pub(in crate::serve) fn refusal(refusal: Refusal) -> Problem {
    let detail = refusal.to_string();
    match refusal {
        Refusal::Batch(error) => {
            let (status, code) = match &error {
                crate::ledger::BatchError::KeyReused { .. } => {
                    (StatusCode::UNPROCESSABLE_ENTITY, "key-reused")
                }
                crate::ledger::BatchError::Taken { .. } => (StatusCode::CONFLICT, "taken"),
                _ => (StatusCode::INSUFFICIENT_STORAGE, "limit"),
            };
            Problem::new(status, code, "The batch was not counted", detail, error.remedy())
        }
        Refusal::Ledger(error) => {
            let (status, code) = match &*error {
                LedgerError::Full { .. } => (StatusCode::INSUFFICIENT_STORAGE, "disk-full"),
                LedgerError::ReadOnly { .. } => (StatusCode::SERVICE_UNAVAILABLE, "read-only"),
                _ => (StatusCode::SERVICE_UNAVAILABLE, "ledger"),
            };
            let remedy = format!(
                "nothing of the batch was counted: send it again. For the operator: {}",
                error.remedy()
            );
            Problem::new(status, code, "The batch could not be put on disk", detail, remedy).retry_after(10)
        }
        Refusal::Busy(_) => Problem::new(
            StatusCode::SERVICE_UNAVAILABLE,
            "busy",
            "Too many batches wait for the disk",
            detail,
            "send the same again a little later, or fewer and larger batches",
        )
        .retry_after(1),
        Refusal::Stopping => Problem::new(
            StatusCode::SERVICE_UNAVAILABLE,
            "stopping",
            "The daemon is stopping",
            detail,
            "send the same again with its Idempotency-Key once it is back",
        )
        .retry_after(5),
    }
}
