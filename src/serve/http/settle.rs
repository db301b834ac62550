//! `POST /v1/settle/{stream}`: a person's decision, by a program or from a form; `GET /v1/weekly`: the week's set.

use std::sync::Arc;

use axum::body::Bytes;
use axum::extract::{Path, State};
use axum::http::{HeaderValue, StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};
use jiff::Timestamp;
use serde::Deserialize;

use super::waits::refusal;
use super::{App, away, excerpt, json, parameters, unknown};
use crate::policy::GiveUp;
use crate::report;
use crate::serve::problem::Problem;
use crate::serve::settling::{Unsettled, Word, settle};
use crate::serve::shared::Shared;
use crate::serve::week;
use crate::settle::{self, Decide, Refused, Settlement, Told};

/// Longest body of a decision, bytes.
const MOST: usize = 64 << 10;
/// Longest name of whoever decides, and longest reason, letters.
const LONGEST_NAME: usize = 100;
const LONGEST_WHY: usize = 2_000;

/// A decision as it is asked for, in JSON or by a form. What is empty is as good as absent.
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub(in crate::serve) struct Wish {
    /// `accept`, `pin`, `postpone`, `refuse` or `undo`.
    pub(in crate::serve) decision: String,
    pub(in crate::serve) by: String,
    pub(in crate::serve) why: String,
    /// The time to pin; for `accept`, the proposal that was shown.
    pub(in crate::serve) give_up_after: String,
    /// When to look again.
    pub(in crate::serve) until: String,
    /// How many decisions on the stream were known; refused if there are more by now.
    pub(in crate::serve) seen: Option<usize>,
}

impl Wish {
    fn decide(&self, now: Timestamp) -> Result<Decide, Problem> {
        let (time, until) = (self.give_up_after.trim(), self.until.trim());
        let give_up = || {
            crate::policy::scalar::give_up(time).map_err(|flaw| {
                let told = if time.is_empty() { "missing".to_owned() } else { flaw.to_string() };
                Problem::parameter("give_up_after", told, "write 800ms, 2s, 20m, or never")
            })
        };
        Ok(match self.decision.as_str() {
            "accept" if time.is_empty() => Decide::Accept,
            "accept" => Decide::AcceptShown(give_up()?),
            "pin" => Decide::Pin(give_up()?),
            "postpone" => Decide::Postpone(settle::ahead(until, now).ok_or_else(|| {
                Problem::parameter(
                    "until",
                    "no time to look again",
                    "write 14d, 2026-12-14 or 2026-12-14T10:00:00Z",
                )
            })?),
            "refuse" => Decide::Refuse,
            "undo" => Decide::Undo,
            other => {
                let told = format!("{:?} is no decision", excerpt(other));
                let remedy = "accept, pin, postpone, refuse or undo";
                return Err(Problem::parameter("decision", told, remedy));
            }
        })
    }
}

/// Takes a decision, or says why not. Blocks.
pub(in crate::serve) fn take(shared: &Shared, stream: &str, wish: &Wish) -> Result<Settlement, Problem> {
    may_settle(shared)?;
    let settled = shared.settled();
    if shared.advice(stream).is_none() && settled.history(stream).is_empty() {
        return Err(unknown(stream));
    }
    let (by, why) = (wish.by.trim(), wish.why.trim());
    for (name, text, most, remedy) in [
        ("by", by, LONGEST_NAME, "say who decides"),
        ("why", why, LONGEST_WHY, "give the reason in a few words: whoever reads the history will ask"),
    ] {
        if text.is_empty() {
            return Err(Problem::parameter(name, "missing", remedy));
        }
        if text.chars().count() > most {
            return Err(Problem::parameter(name, "too long", format!("use at most {most} letters")));
        }
    }
    let now = Timestamp::from_second(shared.now() as i64).unwrap_or_default();
    let what = wish.decide(now)?;
    settle(shared, &Word { stream, what, by, why, seen: wish.seen }).map_err(unsettled)
}

/// Whether this daemon takes decisions over HTTP.
pub(in crate::serve) fn may_settle(shared: &Shared) -> Result<(), Problem> {
    if shared.config.may_settle() {
        return Ok(());
    }
    Err(Problem::new(
        StatusCode::FORBIDDEN,
        "read-only",
        "Nothing is settled here",
        "this daemon takes no decisions over HTTP",
        READ_ONLY,
    ))
}

/// How one settles where that cannot be done over HTTP.
pub(in crate::serve) const READ_ONLY: &str = "settle with `outwait settle STREAM --data DIR` on its machine, or start it with a \
                                              --token-file and without --read-only";

fn unsettled(error: Unsettled) -> Problem {
    let detail = error.to_string();
    let problem =
        |status, code: &str, title, remedy: &str| Problem::new(status, code, title, detail.clone(), remedy);
    match &error {
        Unsettled::Meanwhile { .. } => problem(
            StatusCode::CONFLICT,
            "meanwhile",
            "Somebody else was first",
            "look at what was decided, and decide again if it still needs it",
        ),
        Unsettled::Refused(refused) => {
            let (status, code) = match refused {
                Refused::NothingProposed { .. } => (StatusCode::CONFLICT, "nothing-proposed"),
                Refused::Moved { .. } => (StatusCode::CONFLICT, "moved"),
                Refused::NothingToUndo { .. } => (StatusCode::CONFLICT, "nothing-to-undo"),
                Refused::Guard { .. } => (StatusCode::UNPROCESSABLE_ENTITY, "guard"),
                Refused::Past { .. } => (StatusCode::UNPROCESSABLE_ENTITY, "past"),
            };
            problem(status, code, "The decision is not taken", refused.remedy())
        }
        Unsettled::Ledger(_) => match error {
            Unsettled::Ledger(error) => refusal(error),
            _ => Problem::ours(detail),
        },
    }
}

pub(super) async fn post(
    State(shared): App,
    Path(stream): Path<String>,
    uri: Uri,
    body: Bytes,
) -> Result<Response, Problem> {
    parameters(&uri, &[])?;
    if body.len() > MOST {
        return Err(Problem::parameter("body", "too long", format!("send at most {MOST} bytes")));
    }
    let wish: Wish = serde_json::from_slice(&body).map_err(|error| {
        Problem::parameter(
            "body",
            error.to_string(),
            r#"send {"decision":"accept","by":"Ada","why":"agreed"}; see /v1/openapi.json"#,
        )
    })?;
    away(move || {
        let settlement = take(&shared, &stream, &wish)?;
        let fresh = shared.advice(&stream);
        let in_force = settlement.state.in_force().is_some();
        let cautions = fresh.as_deref().filter(|_| in_force).map(|fresh| fresh.advice.cautions.as_slice());
        let told = Told {
            stream: &stream,
            decisions: std::slice::from_ref(&settlement),
            cautions: cautions.unwrap_or_default(),
        };
        json(&settle::Document::of(vec![told]))
    })
    .await
}

pub(super) async fn weekly(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    let asked = parameters(&uri, &["form"])?;
    let form = asked.get("form").map_or("json", String::as_str).to_owned();
    away(move || {
        let now = Timestamp::from_second(shared.now() as i64).unwrap_or_default();
        let week = week::at(&shared, now, None);
        let (kind, name, text) = match form.as_str() {
            "json" => return json(&week),
            "html" => {
                let html = report::html(&week, &week::pictures(&shared, &week)).map_err(ours)?;
                ("text/html; charset=utf-8", "weekly.html", html)
            }
            "markdown" => ("text/markdown; charset=utf-8", "weekly.md", report::markdown(&week)),
            "csv" => ("text/csv; charset=utf-8", "weekly.csv", report::csv(&week).map_err(ours)?),
            _ => {
                return Err(Problem::parameter(
                    "form",
                    "not one of them",
                    "ask for json, html, markdown or csv",
                ));
            }
        };
        let mut response = text.into_response();
        let headers = response.headers_mut();
        headers.insert(header::CONTENT_TYPE, HeaderValue::from_static(kind));
        // To be kept as a file; never a page of this site.
        let save = format!("attachment; filename=\"{name}\"");
        if let Ok(save) = HeaderValue::from_str(&save) {
            headers.insert(header::CONTENT_DISPOSITION, save);
        }
        Ok(response)
    })
    .await
}

fn ours(error: report::FormError) -> Problem {
    Problem::ours(error.to_string())
}

/// What is shown as a proposal, as a form sends it back.
pub(in crate::serve) fn shown(time: GiveUp) -> String {
    crate::say::exact_duration(time.seconds())
}

/// The week as the pages ask for it.
pub(in crate::serve) fn week_now(shared: &Arc<Shared>) -> report::Weekly {
    week::at(shared, Timestamp::from_second(shared.now() as i64).unwrap_or_default(), None)
}
