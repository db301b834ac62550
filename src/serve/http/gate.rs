//! What every request passes: an id, the token, a limit of time; and what is written down of it.

use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Instant;

use axum::extract::{MatchedPath, Request, State};
use axum::http::{HeaderMap, HeaderName, HeaderValue, Method, StatusCode, header};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};

use super::otlp;
use crate::serve::page;
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

const ID: HeaderName = HeaderName::from_static("x-request-id");
/// Longest id that is taken over from a client.
const LONGEST_ID: usize = 64;

/// Paths that tell nothing of the data and need no token.
const FREE: [&str; 4] = ["/healthz", "/readyz", "/page/:file", "/sign-in"];

pub(super) async fn pass(State(shared): State<Arc<Shared>>, request: Request, next: Next) -> Response {
    let began = Instant::now();
    let id = request_id(request.headers(), &shared);
    let path = request.extensions().get::<MatchedPath>().map_or("other", MatchedPath::as_str);
    // Braces in a label's value confuse some readers of the text format.
    let path = path.replace("{*", ":").replace('}', "");
    let method = request.method().clone();
    let time = shared.config.limits.request + shared.config.limits.body;
    let browser = page::is_browser(request.headers());
    let target = request.uri().path_and_query().map_or("/", |target| target.as_str()).to_owned();
    // What an answer's form is chosen by, where the request is gone by then.
    let speech = request.headers().get(header::CONTENT_TYPE).cloned();
    let speech = speech.into_iter().map(|kind| (header::CONTENT_TYPE, kind)).collect::<HeaderMap>();
    let mut response = match admit(&shared, &path, &method, request.headers()) {
        Err(problem) => problem.into_response(),
        Ok(()) => match tokio::time::timeout(time, next.run(request)).await {
            Ok(response) => response,
            Err(_) => Problem::new(
                StatusCode::SERVICE_UNAVAILABLE,
                "slow",
                "It takes too long",
                format!("no answer within {} s", time.as_secs()),
                "ask again later",
            )
            .retry_after(5)
            .into_response(),
        },
    };
    if otlp::PATHS.contains(&path.as_str()) {
        response = otlp::worded(response, &speech);
    } else if browser {
        response = page::worded(&shared, response, &target);
    }
    let headers = response.headers_mut();
    headers.insert(ID, id.clone());
    headers.insert(header::X_CONTENT_TYPE_OPTIONS, HeaderValue::from_static("nosniff"));
    let status = response.status();
    shared.metrics.requests.with_label_values(&[path.as_str(), status.as_str()]).inc();
    let (id, millis) = (id.to_str().unwrap_or_default(), began.elapsed().as_secs_f64() * 1e3);
    let status = status.as_u16();
    if status < 400 {
        tracing::debug!(%method, path, status, millis, request = id, "answered");
    } else {
        tracing::info!(%method, path, status, millis, request = id, "refused");
    }
    response
}

/// The client's own id if it is a plain word, else a new one.
fn request_id(headers: &HeaderMap, shared: &Shared) -> HeaderValue {
    static NEXT: AtomicU64 = AtomicU64::new(1);
    let is_plain = |value: &&HeaderValue| {
        (1..=LONGEST_ID).contains(&value.len())
            && value.as_bytes().iter().all(|byte| byte.is_ascii_alphanumeric() || b"-_.".contains(byte))
    };
    headers.get(ID).filter(is_plain).cloned().unwrap_or_else(|| {
        let (time, number) = (shared.now() as u64, NEXT.fetch_add(1, Ordering::Relaxed));
        HeaderValue::from_str(&format!("{time:x}-{number:x}"))
            .unwrap_or_else(|_| HeaderValue::from_static("none"))
    })
}

fn admit(shared: &Shared, path: &str, method: &Method, headers: &HeaderMap) -> Result<(), Problem> {
    let shown = headers.get(header::AUTHORIZATION).map(HeaderValue::as_bytes).and_then(|value| {
        let (scheme, shown) = value.split_at_checked(7)?;
        scheme.eq_ignore_ascii_case(b"Bearer ").then_some(shown)
    });
    let writes = !method.is_safe();
    let Some(token) = &shared.config.token else {
        return if writes && origin(headers) == Origin::Other { Err(foreign()) } else { Ok(()) };
    };
    if let Some(shown) = shown {
        // No other site can make a browser send this.
        return match token.is(shown.trim_ascii()) || FREE.contains(&path) {
            true => Ok(()),
            false => Err(unauthorised("the token is not the one that is asked for")),
        };
    }
    // A browser sends its cookie whoever has made the form, so a write has to come from a page of ours.
    let signed_in = page::session(shared, headers).is_some();
    match origin(headers) {
        Origin::Other if writes => Err(foreign()),
        Origin::Unknown if writes && signed_in => Err(foreign()),
        _ if signed_in || FREE.contains(&path) => Ok(()),
        _ => Err(unauthorised("no token was shown")),
    }
}

/// Where a request was made, as far as its browser says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Origin {
    /// On a page of ours.
    Ours,
    /// On a page of others.
    Other,
    /// It does not say: no browser, or an old one.
    Unknown,
}

/// By `Sec-Fetch-Site`, else by `Origin` against `Host`.
fn origin(headers: &HeaderMap) -> Origin {
    let text = |name: HeaderName| headers.get(name).map(|value| value.to_str().unwrap_or("null"));
    match (text(HeaderName::from_static("sec-fetch-site")), text(header::ORIGIN), text(header::HOST)) {
        (Some("same-origin" | "none"), ..) => Origin::Ours,
        (Some(_), ..) => Origin::Other,
        (None, Some(origin), Some(host)) => {
            let named = origin.split_once("://").map(|(_, named)| named);
            if named.is_some_and(|named| named.eq_ignore_ascii_case(host)) {
                Origin::Ours
            } else {
                Origin::Other
            }
        }
        (None, Some(_), None) => Origin::Other,
        (None, None, _) => Origin::Unknown,
    }
}

fn foreign() -> Problem {
    Problem::new(
        StatusCode::FORBIDDEN,
        "origin",
        "Not from another site",
        "a page of another site, or a browser that does not say which, asked for a change",
        "open the page here and do it there; programs show the token as `Authorization: Bearer TOKEN`",
    )
}

fn unauthorised(detail: &str) -> Problem {
    Problem::new(
        StatusCode::UNAUTHORIZED,
        "token",
        "A token is needed",
        detail,
        "send it as `Authorization: Bearer TOKEN`; in a browser, sign in at /sign-in",
    )
}
