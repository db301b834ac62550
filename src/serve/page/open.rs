//! `GET /open`: what to let go of now; `GET /open/live`: the same rows again and again, as server-sent events
//! (HTML Standard, section 9.2).

use std::sync::Arc;
use std::sync::atomic::Ordering;
use std::time::Duration;

use axum::body::{Body, Bytes};
use axum::extract::State;
use axum::http::{HeaderValue, StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};
use http_body_util::channel::Channel;
use minijinja::Value;
use minijinja::value::Serde;
use serde::Serialize;

use super::{Moment, Shell, address, page, text};
use crate::advice::Advice;
use crate::ledger::Reader;
use crate::say;
use crate::serve::http::{App, away, judge, parameters};
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

/// Waits on the page.
const MOST: usize = 200;
/// How often they are told anew.
const PACE: Duration = Duration::from_secs(2);
/// Pages that are told at once.
const LISTENERS: usize = 32;

#[derive(Serialize)]
struct Rows {
    total: usize,
    let_go: usize,
    total_words: String,
    let_go_words: String,
    shown: usize,
    made: Option<Moment>,
    rows: Vec<Row>,
}

#[derive(Serialize)]
struct Row {
    stream: String,
    href: String,
    id: String,
    attempt: u32,
    started: Option<Moment>,
    age: String,
    verdict: &'static str,
    words: &'static str,
    /// What holding on has cost or is worth.
    cost: String,
    again: Option<Moment>,
    again_in: String,
}

/// A wait as it is judged, before it is worded.
struct Judged {
    wait: crate::ledger::OpenWait,
    age: f64,
    verdict: &'static str,
    worth: Option<f64>,
    again: Option<f64>,
    /// What was lost by holding on past the advised time.
    cost: Option<f64>,
}

/// The open waits: those to let go of first, by what holding on has cost so far; then those that are worth least.
fn rows(shared: &Shared) -> Result<Rows, Problem> {
    let now = shared.now();
    let open = shared.ask(|reader| reader.open_waits(None, usize::MAX));
    let open = open.map_err(|error| Problem::ours(format!("{error}; {}", error.remedy())))?;
    let total = open.len();
    let mut all: Vec<Judged> = open
        .into_iter()
        .filter(|wait| wait.started <= now)
        .map(|wait| {
            let age = now - wait.started;
            let fresh = shared.advice(&wait.stream);
            let advice = fresh.as_deref().map(|fresh| &fresh.advice);
            let (verdict, worth, again) = judge(advice, age);
            let cost = advice.filter(|_| verdict == "let_go").and_then(|advice| cost(advice, age));
            Judged { wait, age, verdict, worth, again, cost }
        })
        .collect();
    let rank = |it: &Judged| match it.verdict {
        "let_go" => (0, -it.cost.unwrap_or(0.0)),
        "hold" => (1, it.worth.unwrap_or(f64::INFINITY)),
        _ => (2, 0.0),
    };
    all.sort_by(|a, b| {
        let (a_rank, b_rank) = (rank(a), rank(b));
        a_rank.0.cmp(&b_rank.0).then(a_rank.1.total_cmp(&b_rank.1)).then(b.age.total_cmp(&a.age))
    });
    let let_go = all.iter().filter(|it| it.verdict == "let_go").count();
    all.truncate(MOST);
    Ok(Rows {
        total,
        let_go,
        total_words: say::count(total as f64),
        let_go_words: say::count(let_go as f64),
        shown: all.len(),
        made: Moment::of(now),
        rows: all.into_iter().map(|it| worded(it, now)).collect(),
    })
}

/// What the time since the advised one would have earned elsewhere, where the aim is a rate.
fn cost(advice: &Advice, age: f64) -> Option<f64> {
    let decision = &advice.advice;
    let since = age - decision.give_up_after_s.or(decision.ceiling_s)?;
    Some(since.max(0.0) * decision.rate_per_s?)
}

fn worded(it: Judged, now: f64) -> Row {
    let again = it.again.map(|age| it.wait.started + age);
    Row {
        href: address(&it.wait.stream),
        words: match it.verdict {
            "let_go" => "let go",
            "hold" => "hold on",
            _ => "not known",
        },
        cost: match (it.verdict, it.cost, it.worth) {
            ("let_go", Some(cost), _) => format!("{} lost so far", say::number(cost)),
            ("hold", _, Some(worth)) => format!("{} ahead", say::number(worth)),
            _ => String::new(),
        },
        verdict: it.verdict,
        attempt: it.wait.attempt,
        started: Moment::of(it.wait.started),
        age: say::duration(it.age),
        again: again.and_then(Moment::of),
        again_in: again.map_or_else(String::new, |at| say::duration((at - now).max(0.0))),
        stream: it.wait.stream,
        id: it.wait.id,
    }
}

pub(in crate::serve) async fn open(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    parameters(&uri, &[])?;
    away(move || page(StatusCode::OK, "open.html", Shell::new(&shared, "open", "Open waits"), rows(&shared)?))
        .await
}

/// A place among those that are told; it is free again when this is dropped.
struct Listener(Arc<Shared>);

impl Listener {
    fn new(shared: &Arc<Shared>) -> Option<Listener> {
        let listener = Listener(Arc::clone(shared));
        (shared.live.fetch_add(1, Ordering::Relaxed) < LISTENERS).then_some(listener)
    }
}

impl Drop for Listener {
    fn drop(&mut self) {
        self.0.live.fetch_sub(1, Ordering::Relaxed);
    }
}

pub(in crate::serve) async fn live(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    parameters(&uri, &[])?;
    let listener = Listener::new(&shared).ok_or_else(|| {
        Problem::new(
            StatusCode::SERVICE_UNAVAILABLE,
            "listeners",
            "Too many pages are kept up to date",
            format!("{LISTENERS} are told at once"),
            "reload the page for what is new, or close one that nobody reads",
        )
        .retry_after(60)
    })?;
    let (mut sender, body) = Channel::<Bytes>::new(1);
    tokio::spawn(async move {
        let _listener = listener;
        loop {
            let asked = Arc::clone(&shared);
            let Ok(event) =
                away(move || Ok(event(&text("rows.html", Value::from(Serde(rows(&asked)?)))?))).await
            else {
                return;
            };
            tokio::select! {
                sent = sender.send_data(event) => if sent.is_err() { return },
                () = shared.closed() => return,
            }
            tokio::select! {
                () = tokio::time::sleep(PACE) => {}
                () = shared.closed() => return,
            }
        }
    });
    let mut response = Body::new(body).into_response();
    let headers = response.headers_mut();
    headers.insert(header::CONTENT_TYPE, HeaderValue::from_static("text/event-stream"));
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("no-store"));
    Ok(response)
}

/// A text as an event.
fn event(text: &str) -> Bytes {
    let mut event = String::with_capacity(text.len() + 1_024);
    for line in text.lines() {
        event.push_str("data: ");
        event.push_str(line);
        event.push('\n');
    }
    event.push('\n');
    event.into()
}

#[cfg(test)]
mod tests {
    #[test]
    fn an_event_keeps_its_lines() {
        assert_eq!(super::event("<tr>\n<td>a\n"), "data: <tr>\ndata: <td>a\n\n");
    }
}
