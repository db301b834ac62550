//! The pages: look instead of read. Written on the server, whole without a script; nothing is fetched from elsewhere and
//! nothing in a page can run. Every text is escaped by the templates; only pictures of our own go in as they are.

mod decide;
mod health;
mod list;
mod open;
mod past;
mod sign;
mod stream;
mod week;
mod what_if;

use std::sync::LazyLock;

use axum::extract::Path;
use axum::http::{HeaderMap, HeaderName, HeaderValue, StatusCode, header};
use axum::response::{Html, IntoResponse, Response};
use minijinja::value::Serde;
use minijinja::{Environment, Value, context};
use serde::Serialize;

use super::http::tagged;
use super::problem::Problem;
use super::shared::Shared;
use crate::{chart, say};

pub(super) use decide::settle;
pub(super) use health::how_it_is;
pub(super) use list::streams;
pub(super) use open::{live, open};
pub(super) use sign::{form, session, sign_in, sign_out};
pub(super) use stream::one;
pub(super) use week::{sign_week, week};

/// Nothing from elsewhere, nothing inline, nothing round it.
const POLICY: &str = "default-src 'none'; style-src 'self'; script-src 'self'; img-src 'self' data:; connect-src 'self'; \
    base-uri 'none'; form-action 'self'; frame-ancestors 'none'";

const SCRIPT: &str = include_str!("page.js");
/// The look of the pages, then that of the pictures.
static SHEET: LazyLock<String> = LazyLock::new(|| include_str!("page.css").to_owned() + &chart::style());

static TEMPLATES: LazyLock<Environment<'static>> = LazyLock::new(|| {
    let mut all = Environment::new();
    for (name, text) in [
        ("base.html", include_str!("templates/base.html")),
        ("list.html", include_str!("templates/list.html")),
        ("stream.html", include_str!("templates/stream.html")),
        ("week.html", include_str!("templates/week.html")),
        ("open.html", include_str!("templates/open.html")),
        ("rows.html", include_str!("templates/rows.html")),
        ("health.html", include_str!("templates/health.html")),
        ("sign.html", include_str!("templates/sign.html")),
        ("problem.html", include_str!("templates/problem.html")),
    ] {
        // A fault in one is a fault of the program: `every_template_holds` finds it, and its page says so.
        if let Err(error) = all.add_template(name, text) {
            tracing::error!(name, %error, "a template does not hold");
        }
    }
    all
});

/// A point of time, for people and for the script that moves it into their zone.
#[derive(Clone, Debug, PartialEq, Serialize)]
struct Moment {
    iso: String,
    text: String,
}

impl Moment {
    /// Of Unix seconds.
    fn of(unix: f64) -> Option<Moment> {
        say::time(unix).map(Moment::from_iso)
    }

    fn from_iso(iso: String) -> Moment {
        let text = match iso.strip_suffix('Z').and_then(|plain| plain.split_once('T')) {
            Some((day, clock)) => format!("{day} {clock} UTC"),
            None => iso.clone(),
        };
        Moment { iso, text }
    }
}

/// What all pages have in common.
#[derive(Serialize)]
struct Shell {
    /// Which of them it is.
    page: &'static str,
    title: String,
    /// Whether there is a session to end.
    guarded: bool,
    /// When it was made.
    at: Option<Moment>,
    version: &'static str,
}

impl Shell {
    fn new(shared: &Shared, page: &'static str, title: impl Into<String>) -> Shell {
        Shell {
            page,
            title: title.into(),
            guarded: shared.config.token.is_some(),
            at: Moment::of(shared.now()),
            version: env!("CARGO_PKG_VERSION"),
        }
    }
}

fn text(template: &str, context: Value) -> Result<String, Problem> {
    TEMPLATES
        .get_template(template)
        .and_then(|template| template.render(context))
        .map_err(|error| Problem::ours(format!("{template}: {error:#}")))
}

/// A page.
fn page(
    status: StatusCode,
    template: &str,
    shell: Shell,
    content: impl Serialize,
) -> Result<Response, Problem> {
    let html = text(template, context! { shell => Serde(shell), ..Value::from(Serde(content)) })?;
    let mut response = (status, Html(html)).into_response();
    let headers = response.headers_mut();
    headers.insert(header::CONTENT_SECURITY_POLICY, HeaderValue::from_static(POLICY));
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("private, no-cache"));
    headers.insert(header::REFERRER_POLICY, HeaderValue::from_static("same-origin"));
    headers.insert(
        HeaderName::from_static("cross-origin-opener-policy"),
        HeaderValue::from_static("same-origin"),
    );
    Ok(response)
}

/// The style sheet and the script.
pub(super) async fn asset(Path(file): Path<String>, headers: HeaderMap) -> Result<Response, Problem> {
    let (kind, text) = match file.as_str() {
        "page.css" => ("text/css; charset=utf-8", SHEET.as_str()),
        "page.js" => ("text/javascript; charset=utf-8", SCRIPT),
        "icon.svg" => ("image/svg+xml", include_str!("icon.svg")),
        _ => return Err(Problem::missing(&format!("file {:?}", super::http::excerpt(&file)), "go to /")),
    };
    let [a, b, c, d, e, f, g, h, ..] = crate::ledger::Digest::of(text.as_bytes()).0;
    let tag = format!("\"{:016x}\"", u64::from_be_bytes([a, b, c, d, e, f, g, h]));
    tagged(&tag, &headers, || Ok(([(header::CONTENT_TYPE, kind)], text).into_response()))
}

/// Whether whoever asks reads pages.
pub(super) fn is_browser(headers: &HeaderMap) -> bool {
    let accepts = headers.get(header::ACCEPT).and_then(|value| value.to_str().ok()).unwrap_or_default();
    accepts.split(',').any(|kind| {
        let (kind, quality) = kind.split_once(';').unwrap_or((kind, ""));
        kind.trim().eq_ignore_ascii_case("text/html") && quality.trim().trim_start_matches("q=") != "0"
    })
}

/// The answer to a browser in place of an error's data; it keeps the error's status and what else its head says.
/// `path`: what was asked for, to go back to after signing in.
pub(super) fn worded(shared: &Shared, response: Response, path: &str) -> Response {
    let Some(problem) = response.extensions().get::<Problem>() else { return response };
    let told = problem.told();
    let sign = response.status() == StatusCode::UNAUTHORIZED;
    let shell = Shell::new(shared, "problem", if sign { "Sign in" } else { "Something is wrong" });
    let shown = page(
        response.status(),
        "problem.html",
        shell,
        context! { problem => Serde(told), sign, next => path },
    );
    let Ok(mut shown) = shown else { return response };
    for (name, value) in response.headers() {
        if name != header::CONTENT_TYPE && name != header::CONTENT_LENGTH {
            shown.headers_mut().insert(name, value.clone());
        }
    }
    shown.headers_mut().insert(header::VARY, HeaderValue::from_static("Accept"));
    shown
}

/// To a page of ours, by GET.
fn go(to: &str) -> Response {
    let to = HeaderValue::from_str(to).unwrap_or_else(|_| HeaderValue::from_static("/"));
    (StatusCode::SEE_OTHER, [(header::LOCATION, to)]).into_response()
}

/// Text for a part of an address: letters, digits and `- . _ ~ :` stay, and so do the signs in `keep`.
fn encoded(text: &str, keep: &str) -> String {
    use std::fmt::Write;
    let mut out = String::with_capacity(text.len());
    for byte in text.bytes() {
        let c = char::from(byte);
        if byte.is_ascii_alphanumeric() || "-._~:".contains(c) || (byte.is_ascii() && keep.contains(c)) {
            out.push(c);
        } else {
            let _ = write!(out, "%{byte:02X}");
        }
    }
    out
}

/// A stream's name within a path. A part `..` would be taken as a step up, so there the slashes are hidden.
fn in_path(stream: &str) -> String {
    let steps = stream.split('/').any(|part| part == "." || part == "..");
    encoded(stream, if steps { "" } else { "/" })
}

/// The page of a stream.
fn address(stream: &str) -> String {
    format!("/stream/{}", in_path(stream))
}

/// How long ago, in words.
fn ago(shared: &Shared, then: f64) -> String {
    let age = (shared.now() - then).max(0.0);
    if age < 1.0 { "a moment ago".into() } else { format!("{} ago", say::duration(age)) }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_template_holds() {
        for name in ["base", "list", "stream", "week", "open", "rows", "health", "sign", "problem"] {
            TEMPLATES.get_template(&format!("{name}.html")).unwrap();
        }
        let all = TEMPLATES.templates().map(|(_, template)| template.source().to_owned()).collect::<String>();
        assert!(!all.contains(" style=") && !all.contains(" onclick") && !all.contains("<style"));
        assert!(!all.contains("http:") && !all.contains("https:"), "nothing from elsewhere");
        // Only what the chart module has written goes in unescaped.
        for part in all.rsplit("|safe").skip(1) {
            let name = part.rsplit("{{").next().unwrap().trim();
            assert!(
                [
                    "row.wide",
                    "row.narrow",
                    "road.wide",
                    "road.narrow",
                    "axis.wide",
                    "axis.narrow",
                    "past.wide",
                    "past.narrow",
                    "day.wide",
                    "day.narrow",
                    "picture.wide",
                    "picture.narrow"
                ]
                .iter()
                .any(|n| name.ends_with(n)),
                "{name}"
            );
        }
    }

    #[test]
    fn names_become_addresses() {
        assert_eq!(address("courier/city:north"), "/stream/courier/city:north");
        assert_eq!(address("../../etc"), "/stream/..%2F..%2Fetc");
        assert_eq!(address("küste"), "/stream/k%C3%BCste");
        assert_eq!(Moment::of(0.0).unwrap().text, "1970-01-01 00:00:00 UTC");
    }

    #[test]
    fn browsers_are_told_apart() {
        let is = |accept: &str| {
            let mut headers = HeaderMap::new();
            headers.insert(header::ACCEPT, HeaderValue::from_str(accept).unwrap());
            is_browser(&headers)
        };
        assert!(is("text/html,application/xhtml+xml,*/*;q=0.8") && is("application/json, text/html;q=0.5"));
        assert!(
            !is("*/*") && !is("application/json") && !is("text/html;q=0") && !is_browser(&HeaderMap::new())
        );
    }
}
