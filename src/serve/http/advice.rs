//! `GET /v1/advice` and `GET /v1/advice/{stream}`: the last advice, at once, with its age.

use std::sync::Arc;

use axum::extract::{Path, State};
use axum::http::{HeaderMap, Uri};
use axum::response::Response;
use serde::Serialize;

use super::{App, excerpt, json, parameters, tagged};
use crate::advice::Advice;
use crate::glob::Glob;
use crate::serve::adviser::Fresh;
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

/// An advice with its age.
#[derive(Serialize)]
struct Aged<'a> {
    #[serde(flatten)]
    advice: &'a Advice,
    /// When it was made, RFC 3339.
    made_at: Option<String>,
    /// How long ago, s.
    age_s: f64,
    /// When what it says last changed.
    changed_at: Option<String>,
}

/// The document of INTERFACE with the age of each advice.
#[derive(Serialize)]
struct Document<'a> {
    schema: &'a str,
    made_at: Option<&'a str>,
    assumed: &'a [String],
    streams: Vec<Aged<'a>>,
}

pub(super) async fn all(State(shared): App, uri: Uri, headers: HeaderMap) -> Result<Response, Problem> {
    let asked = parameters(&uri, &["since", "stream"])?;
    let since = asked.get("since").map(|text| moment(text)).transpose()?;
    let glob = asked
        .get("stream")
        .map(|text| {
            Glob::new(text).map_err(|error| {
                Problem::parameter(
                    "stream",
                    error.to_string(),
                    "use letters, digits and . _ - / : with * and ?",
                )
            })
        })
        .transpose()?;
    let some: Vec<Arc<Fresh>> = shared
        .all_advice()
        .into_iter()
        .filter(|fresh| since.is_none_or(|since| fresh.changed_at > since))
        .filter(|fresh| glob.as_ref().is_none_or(|glob| glob.matches(&fresh.advice.stream)))
        .collect();
    let tags: Vec<u64> = some.iter().map(|fresh| fresh.tag).collect();
    tagged(&tag_of(&tags), &headers, || document(&shared, &some))
}

fn document(shared: &Shared, some: &[Arc<Fresh>]) -> Result<Response, Problem> {
    let set = shared.set_of(some);
    let now = shared.now();
    json(&Document {
        schema: &set.schema,
        made_at: set.made_at.as_deref(),
        assumed: &set.assumed,
        streams: set.streams.iter().zip(some).map(|(advice, fresh)| aged(advice, fresh, now)).collect(),
    })
}

pub(super) async fn one(
    State(shared): App,
    Path(stream): Path<String>,
    uri: Uri,
    headers: HeaderMap,
) -> Result<Response, Problem> {
    parameters(&uri, &[])?;
    let fresh = shared.advice(&stream).ok_or_else(|| unknown(&stream))?;
    tagged(&tag_of(&[fresh.tag]), &headers, || json(&aged(&fresh.advice, &fresh, shared.now())))
}

fn aged<'a>(advice: &'a Advice, fresh: &Fresh, now: f64) -> Aged<'a> {
    Aged {
        advice,
        made_at: crate::say::time(fresh.made_at),
        age_s: (now - fresh.made_at).max(0.0),
        changed_at: crate::say::time(fresh.changed_at),
    }
}

/// No such stream, or none with advice so far.
pub(in crate::serve) fn unknown(stream: &str) -> Problem {
    Problem::missing(
        &format!("advice on the stream {:?}", excerpt(stream)),
        "GET /v1/advice lists those there are; a new stream has its advice within seconds of its first waits",
    )
}

/// A weak tag: the same for documents that say the same, whatever their age.
fn tag_of(tags: &[u64]) -> String {
    let all: Vec<u8> = tags.iter().flat_map(|tag| tag.to_le_bytes()).collect();
    let [a, b, c, d, e, f, g, h, ..] = crate::ledger::Digest::of(&all).0;
    format!("W/\"{:016x}\"", u64::from_be_bytes([a, b, c, d, e, f, g, h]))
}

fn moment(text: &str) -> Result<f64, Problem> {
    let unix = text.parse::<f64>().ok().filter(|time| time.is_finite());
    let stamp = || text.parse::<jiff::Timestamp>().ok().map(|time| time.as_millisecond() as f64 / 1e3);
    unix.or_else(stamp).ok_or_else(|| {
        Problem::parameter("since", "not a time", "write 2026-11-30T10:00:00Z or Unix seconds")
    })
}
