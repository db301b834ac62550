//! Who answers what. Every answer carries its request's id; every error is a problem with its remedy.

mod advice;
mod gate;
mod health;
mod open;
mod otlp;
mod settle;
mod stream;
mod waits;

use std::sync::Arc;

use axum::body::Body;
use axum::extract::State;
use axum::http::{HeaderValue, StatusCode, Uri, header};
use axum::response::{IntoResponse, Response};
use axum::routing::{MethodRouter, get, post};
use axum::{Router, middleware};

use super::page;
use super::problem::Problem;
use super::shared::Shared;

pub(super) use advice::unknown;
pub(super) use open::judge;
pub(super) use settle::{READ_ONLY, Wish, shown, take, week_now};
pub(super) use stream::{give_up_after, study};

/// The description of everything below, OpenAPI 3.1.
pub const OPENAPI: &str = include_str!("openapi.json");

pub(super) type App = State<Arc<Shared>>;

/// Path, methods in words, handlers.
fn routes() -> Vec<(&'static str, &'static str, MethodRouter<Arc<Shared>>)> {
    vec![
        ("/v1/waits", "POST", post(waits::take)),
        ("/v1/traces", "POST", post(otlp::traces)),
        ("/v1/metrics", "POST", post(otlp::metrics)),
        ("/v1/advice", "GET, HEAD", get(advice::all)),
        ("/v1/advice/{*stream}", "GET, HEAD", get(advice::one)),
        ("/v1/streams/{*question}", "GET, HEAD", get(stream::ask)),
        ("/v1/settle/{*stream}", "POST", post(settle::post)),
        ("/v1/weekly", "GET, HEAD", get(settle::weekly)),
        ("/v1/open", "GET, HEAD", get(open::list)),
        ("/v1/openapi.json", "GET, HEAD", get(openapi)),
        ("/metrics", "GET, HEAD", get(health::metrics)),
        ("/v1/health", "GET, HEAD", get(health::whole)),
        ("/healthz", "GET, HEAD", get(health::alive)),
        ("/readyz", "GET, HEAD", get(health::ready)),
        ("/", "GET, HEAD", get(page::streams)),
        ("/stream/{*name}", "GET, HEAD, POST", get(page::one).post(page::settle)),
        ("/week", "GET, HEAD, POST", get(page::week).post(page::sign_week)),
        ("/open", "GET, HEAD", get(page::open)),
        ("/open/live", "GET, HEAD", get(page::live)),
        ("/how-it-is", "GET, HEAD", get(page::how_it_is)),
        ("/sign-in", "GET, HEAD, POST", get(page::form).post(page::sign_in)),
        ("/sign-out", "POST", post(page::sign_out)),
        ("/page/{*file}", "GET, HEAD", get(page::asset)),
    ]
}

pub(super) fn router(shared: &Arc<Shared>) -> Router {
    let mut router = Router::new();
    for (path, methods, handlers) in routes() {
        let wrong = move |uri: Uri| async move {
            Problem::new(
                StatusCode::METHOD_NOT_ALLOWED,
                "method",
                "Not with this method",
                format!("{} takes {methods}", uri.path()),
                "see /v1/openapi.json",
            )
            .allow(methods)
        };
        router = router.route(path, handlers.fallback(wrong));
    }
    router
        .fallback(|uri: Uri| async move {
            Problem::missing(
                &format!("page {:?}", excerpt(uri.path())),
                "what there is stands in /v1/openapi.json",
            )
        })
        .layer(middleware::from_fn_with_state(Arc::clone(shared), gate::pass))
        .with_state(Arc::clone(shared))
}

async fn openapi() -> Response {
    json_text(Body::from(OPENAPI))
}

/// A JSON document that is text already.
fn json_text(body: impl Into<Body>) -> Response {
    let mut response = body.into().into_response();
    response.headers_mut().insert(header::CONTENT_TYPE, HeaderValue::from_static("application/json"));
    response
}

/// A JSON document.
fn json<T: serde::Serialize>(document: &T) -> Result<Response, Problem> {
    let mut text = serde_json::to_string(document).map_err(|error| Problem::ours(error.to_string()))?;
    text.push('\n');
    Ok(json_text(text))
}

/// A document under a tag; nothing but the tag if the client has it already (RFC 9110, section 13).
pub(super) fn tagged(
    tag: &str,
    headers: &axum::http::HeaderMap,
    document: impl FnOnce() -> Result<Response, Problem>,
) -> Result<Response, Problem> {
    let tag = HeaderValue::from_str(tag).map_err(|error| Problem::ours(error.to_string()))?;
    let known =
        headers.get_all(header::IF_NONE_MATCH).iter().filter_map(|value| value.to_str().ok()).any(|value| {
            let opaque = |tag: &str| tag.trim().trim_start_matches("W/").to_owned();
            value
                .split(',')
                .any(|known| known.trim() == "*" || Some(opaque(known)) == tag.to_str().ok().map(opaque))
        });
    let mut response = if known { StatusCode::NOT_MODIFIED.into_response() } else { document()? };
    response.headers_mut().insert(header::ETAG, tag);
    response.headers_mut().insert(header::CACHE_CONTROL, HeaderValue::from_static("no-cache"));
    Ok(response)
}

/// Parameters of a request's address by name; the last wins. One that is not known is an error.
pub(super) fn parameters(
    uri: &Uri,
    known: &[&str],
) -> Result<std::collections::HashMap<String, String>, Problem> {
    let mut found = std::collections::HashMap::new();
    let axum::extract::Query(pairs) = axum::extract::Query::<Vec<(String, String)>>::try_from_uri(uri)
        .map_err(|error| {
            Problem::parameter("query", error.body_text(), "write name=value pairs, joined by &")
        })?;
    for (name, value) in pairs {
        if !known.contains(&name.as_str()) {
            let remedy = match known {
                [] => "leave it out".to_owned(),
                some => format!("the parameters here are {}", some.join(", ")),
            };
            return Err(Problem::parameter(&excerpt(&name), "not known here", remedy));
        }
        found.insert(name, value);
    }
    Ok(found)
}

/// As much of a client's text as is told back.
pub(super) fn excerpt(text: &str) -> String {
    let mut short: String = text.chars().take(100).collect();
    if short.len() < text.len() {
        short.push('…');
    }
    short
}

/// Runs what blocks away from the threads that serve.
pub(super) async fn away<T: Send + 'static>(
    work: impl FnOnce() -> Result<T, Problem> + Send + 'static,
) -> Result<T, Problem> {
    tokio::task::spawn_blocking(work).await.map_err(|error| Problem::ours(error.to_string()))?
}
