//! Whether it is alive, whether it is ready, how it is; and the metrics.

use axum::extract::State;
use axum::http::{HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;

use super::{App, away, json};
use crate::intake::BadLine;
use crate::serve::problem::Problem;

/// It answers, so it is alive.
pub(super) async fn alive() -> &'static str {
    "alive\n"
}

/// Ready means that a batch sent now would be taken.
pub(super) async fn ready(State(shared): App) -> Result<&'static str, Problem> {
    let not = |code, detail: String, remedy: &str| {
        Problem::new(StatusCode::SERVICE_UNAVAILABLE, code, "Not ready", detail, remedy).retry_after(5)
    };
    if shared.is_stopping() {
        return Err(not(
            "stopping",
            "the daemon is stopping".into(),
            "ask another one, or wait for this one",
        ));
    }
    match shared.in_trouble() {
        Some(error) => Err(not("ledger", error.to_string(), error.remedy())),
        None => Ok("ready\n"),
    }
}

#[derive(Serialize)]
struct Health {
    schema: &'static str,
    version: &'static str,
    ready: bool,
    /// What keeps the ledger from taking batches.
    ledger_trouble: Option<String>,
    /// Why the policy file as it lies there is not in force; the last sound one is.
    policy_refused: Option<String>,
    /// Why the file of decisions is not in step with the ledger's, which stand.
    settled_refused: Option<String>,
    /// When waits were filed last.
    last_filed: Option<String>,
    streams: usize,
    /// Streams that changed since their last advice, and how long the first has waited, s.
    advice_backlog: (usize, f64),
    ledger: Option<Ledger>,
    /// One example for each reason for which lines were refused.
    bad_examples: Vec<BadLine>,
}

#[derive(Serialize)]
struct Ledger {
    bytes: u64,
    streams: usize,
    open_waits: usize,
    keys: usize,
}

pub(super) async fn whole(State(shared): App) -> Result<Response, Problem> {
    let health = away(move || {
        let trouble = shared.in_trouble().map(|error| format!("{error}; {}", error.remedy()));
        let extent = shared.ask(crate::ledger::Reader::extent).ok();
        Ok(Health {
            schema: "outwait/health/1",
            version: env!("CARGO_PKG_VERSION"),
            ready: trouble.is_none() && !shared.is_stopping(),
            ledger_trouble: trouble,
            policy_refused: shared.standing().refused.map(|why| why.to_string()),
            settled_refused: shared.settling.book().trouble.map(|(what, remedy)| format!("{what}; {remedy}")),
            last_filed: shared.last_filed().and_then(crate::say::time),
            streams: shared.all_advice().len(),
            advice_backlog: shared.desk.backlog(),
            ledger: extent.map(|extent| Ledger {
                bytes: extent.bytes,
                streams: extent.streams,
                open_waits: extent.open,
                keys: extent.keys,
            }),
            bad_examples: shared.examples(),
        })
    })
    .await?;
    json(&health)
}

pub(super) async fn metrics(State(shared): App) -> Result<Response, Problem> {
    let text =
        away(move || shared.metrics.text(&shared).map_err(|error| Problem::ours(error.to_string()))).await?;
    let kind = HeaderValue::from_static("text/plain; version=0.0.4; charset=utf-8");
    Ok(([(header::CONTENT_TYPE, kind)], text).into_response())
}
