//! `GET /`: the streams at a glance, in HTML that needs no script.

use std::fmt::Write;

use axum::extract::State;
use axum::http::{HeaderName, HeaderValue, header};
use axum::response::{Html, IntoResponse, Response};

use super::App;
use crate::advice::{Action, Advice};
use crate::say;
use crate::serve::problem::Problem;

/// Streams on the page, those that lose most by the time in force first.
const MOST: usize = 200;

/// Nothing is loaded from elsewhere, and nothing is run.
const POLICY: &str = "default-src 'none'; style-src 'unsafe-inline'; img-src 'self'; base-uri 'none'; \
    form-action 'none'; frame-ancestors 'none'";

const HEAD: &str = "<!doctype html>\n<html lang=\"en\"><head><meta charset=\"utf-8\">\
    <meta name=\"viewport\" content=\"width=device-width\"><title>outwait</title><style>\
    :root{color-scheme:light dark;font:16px/1.5 system-ui,sans-serif}body{max-width:64rem;margin:2rem auto;padding:0 1rem}\
    table{border-collapse:collapse;width:100%}th,td{text-align:left;padding:.35rem .6rem;border-bottom:1px solid #8886}\
    td.n,th.n{text-align:right;font-variant-numeric:tabular-nums}img{max-width:100%}</style></head><body>\n";

pub(super) async fn front(State(shared): App) -> Result<Response, Problem> {
    let mut all = shared.all_advice();
    let total = all.len();
    let loss = |advice: &Advice| advice.advice.regret_now.unwrap_or(0.0);
    all.sort_by(|a, b| {
        loss(&b.advice).total_cmp(&loss(&a.advice)).then_with(|| a.advice.stream.cmp(&b.advice.stream))
    });
    all.truncate(MOST);
    let mut page = String::from(HEAD);
    page += "<h1>How long to wait</h1>\n";
    if total == 0 {
        page += "<p>No waits have come so far. Send some: <code>curl --data-binary @waits.ndjson \
            http://this-address/v1/waits</code>, a JSON object a line with <code>stream</code> and <code>elapsed</code>.</p>\n";
    } else {
        let _ = writeln!(
            page,
            "<p>{} streams; those that lose most by the time in force come first. Read the cautions of a stream before \
             changing anything.</p>\n<table><thead><tr><th>stream</th><th>advice</th><th class=\"n\">in force loses</th>\
             <th>remaining wait</th><th>cautions</th></tr></thead><tbody>",
            say::count(total as f64)
        );
        for fresh in &all {
            let advice = &fresh.advice;
            let name = escaped(&advice.stream);
            let loses = advice.advice.regret_now.map_or_else(String::new, say::percent);
            let _ = writeln!(
                page,
                "<tr><td><a href=\"/v1/streams/{name}/curve.svg?picture=rate\">{name}</a></td><td>{}</td><td class=\"n\">\
                 {loses}</td><td>{}</td><td>{}</td></tr>",
                said(advice),
                advice.tail.remaining_wait.name(),
                advice.cautions.len()
            );
        }
        page += "</tbody></table>\n";
    }
    page += "<p><a href=\"/v1/advice\">advice as data</a> · <a href=\"/v1/open\">open waits</a> · \
        <a href=\"/v1/health\">health</a> · <a href=\"/metrics\">metrics</a> · \
        <a href=\"/v1/openapi.json\">the interface</a></p>\n</body></html>\n";
    let mut response = Html(page).into_response();
    let headers = response.headers_mut();
    headers.insert(header::CONTENT_SECURITY_POLICY, HeaderValue::from_static(POLICY));
    headers.insert(HeaderName::from_static("referrer-policy"), HeaderValue::from_static("no-referrer"));
    Ok(response)
}

fn said(advice: &Advice) -> String {
    match (advice.advice.action, advice.advice.give_up_after_s) {
        (Action::GiveUpAfter, Some(after)) => format!("give up after {}", say::duration(after)),
        (Action::WaitItOut, _) => "wait it out".to_owned(),
        (Action::StateACost, _) => "say what time costs".to_owned(),
        _ => "gather evidence".to_owned(),
    }
}

/// Names are letters, digits and `. _ - / :` only; escaped all the same.
fn escaped(text: &str) -> String {
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;").replace('"', "&quot;")
}
