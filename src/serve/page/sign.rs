//! Signing in: a browser shows the token once and gets a cookie, which no script can read and no other site can use.

use axum::Form;
use axum::extract::State;
use axum::extract::rejection::FormRejection;
use axum::http::{HeaderMap, HeaderValue, StatusCode, Uri, header};
use axum::response::Response;
use minijinja::context;
use serde::Deserialize;

use super::{Shell, go, page};
use crate::serve::http::{App, parameters};
use crate::serve::problem::Problem;
use crate::serve::sessions;
use crate::serve::shared::Shared;

/// Over TLS the name binds the cookie to this host and to TLS (RFC 6265bis, section 4.1.3).
fn name(shared: &Shared) -> &'static str {
    if shared.config.tls.is_some() { "__Host-outwait" } else { "outwait" }
}

/// The session whose cookie the request carries.
pub(in crate::serve) fn session<'h>(shared: &Shared, headers: &'h HeaderMap) -> Option<&'h str> {
    let cookies = headers.get_all(header::COOKIE).iter().filter_map(|value| value.to_str().ok());
    let pairs = cookies.flat_map(|value| value.split(';')).filter_map(|pair| pair.trim().split_once('='));
    pairs
        .filter(|(key, _)| *key == name(shared))
        .map(|(_, value)| value)
        .find(|value| shared.sessions.is_open(value, shared.now()))
}

#[derive(Deserialize)]
pub(in crate::serve) struct Shown {
    token: String,
    #[serde(default)]
    next: String,
}

/// A page of ours to go to; nothing else.
fn within(next: &str) -> &str {
    let is_ours = next.starts_with('/')
        && !next.starts_with("//")
        && next.bytes().all(|byte| byte.is_ascii_graphic() && byte != b'\\');
    if is_ours && !next.starts_with("/sign-") { next } else { "/" }
}

pub(in crate::serve) async fn form(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    let asked = parameters(&uri, &["next"])?;
    if shared.config.token.is_none() {
        return Ok(go("/"));
    }
    let next = within(asked.get("next").map_or("/", String::as_str));
    page(
        StatusCode::OK,
        "sign.html",
        Shell::new(&shared, "sign", "Sign in"),
        context! { next, wrong => false },
    )
}

pub(in crate::serve) async fn sign_in(
    State(shared): App,
    shown: Result<Form<Shown>, FormRejection>,
) -> Result<Response, Problem> {
    let Some(token) = &shared.config.token else { return Ok(go("/")) };
    let Form(shown) =
        shown.map_err(|error| Problem::parameter("form", error.body_text(), "use the form at /sign-in"))?;
    let next = within(&shown.next);
    if !token.is(shown.token.trim().as_bytes()) {
        let shell = Shell::new(&shared, "sign", "Sign in");
        return page(StatusCode::FORBIDDEN, "sign.html", shell, context! { next, wrong => true });
    }
    let session =
        shared.sessions.open(shared.now()).ok_or_else(|| Problem::ours("the system gives no random bits"))?;
    let mut response = go(next);
    set_cookie(&shared, &mut response, &session, sessions::LASTS);
    Ok(response)
}

pub(in crate::serve) async fn sign_out(State(shared): App, headers: HeaderMap) -> Response {
    if let Some(session) = session(&shared, &headers) {
        shared.sessions.close(session);
    }
    let mut response = go("/sign-in");
    set_cookie(&shared, &mut response, "", 0.0);
    response
}

fn set_cookie(shared: &Shared, response: &mut Response, value: &str, lasts: f64) {
    let secure = if shared.config.tls.is_some() { "; Secure" } else { "" };
    let cookie =
        format!("{}={value}; Path=/; HttpOnly; SameSite=Strict; Max-Age={lasts:.0}{secure}", name(shared));
    if let Ok(cookie) = HeaderValue::from_str(&cookie) {
        response.headers_mut().insert(header::SET_COOKIE, cookie);
    }
}

#[cfg(test)]
mod tests {
    use super::within;

    #[test]
    fn one_stays_here() {
        for (next, to) in [
            ("/stream/a?give_up_after=2s", "/stream/a?give_up_after=2s"),
            ("//elsewhere", "/"),
            ("/\\elsewhere", "/"),
            ("elsewhere", "/"),
            ("", "/"),
            ("/a\r\nSet-Cookie: b", "/"),
            ("/sign-out", "/"),
        ] {
            assert_eq!(within(next), to, "{next:?}");
        }
    }
}
