//! `GET /v1/streams/{stream}/curve`, `/curve.svg`, `/whatif` and `/history`: questions about one stream. Names may hold slashes, so
//! the question is what comes last.

use std::sync::Arc;

use axum::extract::{Path, State};
use axum::http::{HeaderMap, HeaderValue, Uri, header};
use axum::response::{IntoResponse, Response};

use super::advice::unknown;
use super::{App, away, excerpt, json, parameters, tagged};
use crate::advise::{Lenders, Terms, WhatIfError};
use crate::chart::{Frame, Picture};
use crate::diary::Day;
use crate::serve::diary;
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;
use crate::serve::studies::Kept;
use crate::settle::Settlement;
use serde::Serialize;

pub(super) async fn ask(
    State(shared): App,
    Path(question): Path<String>,
    uri: Uri,
    headers: HeaderMap,
) -> Result<Response, Problem> {
    let (stream, question) = question.rsplit_once('/').unwrap_or((&question, ""));
    let stream = stream.to_owned();
    let fresh = match question {
        "history" => {
            parameters(&uri, &[])?;
            return history(shared, stream).await;
        }
        "curve" | "curve.svg" | "whatif" => shared.advice(&stream).ok_or_else(|| unknown(&stream))?,
        _ => {
            return Err(Problem::missing(
                &format!("question {:?} about a stream", excerpt(question)),
                "ask /v1/streams/{stream}/curve, /curve.svg, /history or /whatif?give_up_after=2s",
            ));
        }
    };
    // The curve changes when the advice does.
    let tag = format!("W/\"{:016x}-{:x}\"", fresh.tag, fresh.made_at.to_bits());
    match question {
        "whatif" => {
            let asked = parameters(&uri, &["give_up_after"])?;
            let text = asked.get("give_up_after").ok_or_else(|| {
                Problem::parameter(
                    "give_up_after",
                    "missing",
                    "ask ?give_up_after=800ms, a number of seconds, or never",
                )
            })?;
            let after = give_up_after(text)?;
            let answer = away(move || {
                // A minute's waits do not change it by much, and whoever drags a slider wants it at once.
                let kept =
                    shared.studies.recent(&stream).map_or_else(|| study(&shared, &stream, fresh.tag), Ok)?;
                kept.study.what_if(after).map_err(unjudged)
            })
            .await?;
            json(&answer)
        }
        "curve" => {
            parameters(&uri, &[])?;
            let kept = away(move || study(&shared, &stream, fresh.tag)).await?;
            tagged(&tag, &headers, || json(kept.curves()))
        }
        _ => {
            let asked = parameters(&uri, &["picture", "width"])?;
            let picture = asked.get("picture").map_or("waiting", String::as_str);
            let width = match asked.get("width") {
                None => 720,
                Some(text) => text
                    .parse()
                    .ok()
                    .filter(|width| (Frame::NARROWEST..=Frame::WIDEST).contains(width))
                    .ok_or_else(|| {
                        Problem::parameter(
                            "width",
                            "not a width",
                            "write a number of pixels from 320 to 1600",
                        )
                    })?,
            };
            let which = Picture::parse(picture).ok_or_else(|| {
                Problem::parameter(
                    "picture",
                    "not one of them",
                    "ask for waiting, remaining, rate or holding",
                )
            })?;
            let svg = away(move || {
                let frame = Frame { width, prefix: "outwait", styled: true };
                Ok(which.draw(study(&shared, &stream, fresh.tag)?.curves(), &frame).markup)
            })
            .await?;
            tagged(&tag, &headers, || {
                let mut response = svg.into_response();
                response
                    .headers_mut()
                    .insert(header::CONTENT_TYPE, HeaderValue::from_static("image/svg+xml"));
                Ok(response)
            })
        }
    }
}

/// What was decided of a stream and what was advised day by day.
#[derive(Serialize)]
struct History<'a> {
    schema: &'static str,
    stream: &'a str,
    /// The oldest first.
    decisions: &'a [Settlement],
    /// The newest first.
    days: Vec<Dated>,
}

#[derive(Serialize)]
struct Dated {
    /// The UTC day.
    day: String,
    #[serde(flatten)]
    what: Day,
}

async fn history(shared: Arc<Shared>, stream: String) -> Result<Response, Problem> {
    away(move || {
        let (settled, fresh) = (shared.settled(), shared.advice(&stream));
        let decisions = settled.history(&stream);
        let days = match &fresh {
            Some(fresh) => diary::days(&shared, fresh)
                .map_err(|error| Problem::ours(format!("{error}; {}", error.remedy())))?,
            None if decisions.is_empty() => return Err(unknown(&stream)),
            None => Vec::new(),
        };
        let days = days.into_iter().map(|(day, what)| Dated { day: diary::date(day), what }).collect();
        json(&History { schema: "outwait/history/1", stream: &stream, decisions, days })
    })
    .await
}

/// What the advice of this tag rests on: kept from the last question, or weighed anew from what the ledger holds now.
pub(in crate::serve) fn study(shared: &Arc<Shared>, stream: &str, tag: u64) -> Result<Arc<Kept>, Problem> {
    if let Some(kept) = shared.studies.exact(stream, tag) {
        return Ok(kept);
    }
    let policy = shared.policy();
    let past = shared.past();
    let terms = Terms {
        policy: policy.as_deref(),
        newest: Some(shared.today()),
        seed: shared.config.seed,
        past: past.as_ref(),
    };
    let opening = terms.opening(&terms.entry(stream));
    let days = shared
        .ask(|reader| shared.days(reader, stream, opening))
        .map_err(|error| Problem::ours(format!("{error}; {}", error.remedy())))?;
    Ok(shared.studies.keep(tag, terms.study_among(stream, &days, None, &Lenders::default())))
}

pub(in crate::serve) fn give_up_after(text: &str) -> Result<f64, Problem> {
    if text == "never" {
        return Ok(f64::INFINITY);
    }
    let seconds = text.parse::<f64>().ok().or_else(|| crate::say::parse_duration(text).ok());
    seconds.filter(|seconds| *seconds > 0.0 && !seconds.is_nan()).ok_or_else(|| {
        Problem::parameter(
            "give_up_after",
            format!("{:?} is not a time above 0", excerpt(text)),
            "write 800ms, 2s, a number of seconds, or never",
        )
    })
}

fn unjudged(error: WhatIfError) -> Problem {
    Problem::new(
        axum::http::StatusCode::CONFLICT,
        "no-curve",
        "It cannot be judged yet",
        error.to_string(),
        "see the stream's advice for what is missing",
    )
}
