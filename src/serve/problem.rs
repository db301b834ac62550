//! Errors as clients see them: `application/problem+json` (RFC 9457), each with its remedy.

use axum::http::{HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;

/// An error on its way to a client. Boxed: it is rare, and would make every answer as large.
#[derive(Clone, Debug)]
pub(super) struct Problem(Box<Parts>);

/// What a page says of an error.
#[derive(Debug, Serialize)]
pub(super) struct Told<'a> {
    title: &'static str,
    status: u16,
    detail: &'a str,
    remedy: &'a str,
}

#[derive(Clone, Debug, Serialize)]
struct Parts {
    #[serde(rename = "type")]
    kind: String,
    title: &'static str,
    status: u16,
    detail: String,
    remedy: String,
    #[serde(flatten)]
    more: serde_json::Map<String, serde_json::Value>,
    #[serde(skip)]
    retry_after: Option<u32>,
    #[serde(skip)]
    allow: Option<&'static str>,
}

impl Problem {
    /// `code` is stable and names the kind; `title` says it in words and is the same for all of the kind.
    pub(super) fn new(
        status: StatusCode,
        code: &str,
        title: &'static str,
        detail: impl Into<String>,
        remedy: impl Into<String>,
    ) -> Problem {
        Problem(Box::new(Parts {
            kind: format!("urn:outwait:problem:{code}"),
            title,
            status: status.as_u16(),
            detail: detail.into(),
            remedy: remedy.into(),
            more: serde_json::Map::new(),
            retry_after: None,
            allow: None,
        }))
    }

    /// Tells the client when to come again, s.
    pub(super) fn retry_after(mut self, seconds: u32) -> Problem {
        self.0.retry_after = Some(seconds);
        self
    }

    /// Tells which methods there are.
    pub(super) fn allow(mut self, methods: &'static str) -> Problem {
        self.0.allow = Some(methods);
        self
    }

    /// A member of its own.
    pub(super) fn with(mut self, name: &str, value: impl Serialize) -> Problem {
        if let Ok(value) = serde_json::to_value(value) {
            self.0.more.insert(name.to_owned(), value);
        }
        self
    }

    /// Its status.
    pub(super) fn status(&self) -> StatusCode {
        StatusCode::from_u16(self.0.status).unwrap_or(StatusCode::INTERNAL_SERVER_ERROR)
    }

    /// What is wrong and what to do, in a line.
    pub(super) fn sentence(&self) -> String {
        format!("{}; {}", self.0.detail, self.0.remedy)
    }

    /// Its words.
    pub(super) fn told(&self) -> Told<'_> {
        Told { title: self.0.title, status: self.0.status, detail: &self.0.detail, remedy: &self.0.remedy }
    }

    /// What is not there.
    pub(super) fn missing(what: &str, remedy: impl Into<String>) -> Problem {
        Problem::new(
            StatusCode::NOT_FOUND,
            "not-found",
            "There is nothing here",
            format!("no {what}"),
            remedy,
        )
    }

    /// A parameter that cannot be understood.
    pub(super) fn parameter(name: &str, reason: impl Into<String>, remedy: impl Into<String>) -> Problem {
        Problem::new(
            StatusCode::BAD_REQUEST,
            "parameter",
            "A parameter cannot be understood",
            format!("{name}: {}", reason.into()),
            remedy,
        )
    }

    /// Something of ours went wrong.
    pub(super) fn ours(detail: impl Into<String>) -> Problem {
        Problem::new(
            StatusCode::INTERNAL_SERVER_ERROR,
            "internal",
            "The server failed",
            detail,
            "see the server's log under this request's id",
        )
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response {
        let told = self.clone();
        let Problem(parts) = self;
        let status = StatusCode::from_u16(parts.status).unwrap_or(StatusCode::INTERNAL_SERVER_ERROR);
        let (retry_after, allow) = (parts.retry_after, parts.allow);
        let body = serde_json::to_string(&parts).unwrap_or_default();
        let mut response =
            (status, [(header::CONTENT_TYPE, "application/problem+json")], body + "\n").into_response();
        // Whoever passes it on may word it as a page.
        response.extensions_mut().insert(told);
        let headers = response.headers_mut();
        if let Some(seconds) = retry_after {
            headers.insert(header::RETRY_AFTER, HeaderValue::from(seconds));
        }
        if let Some(methods) = allow {
            headers.insert(header::ALLOW, HeaderValue::from_static(methods));
        }
        if status == StatusCode::UNAUTHORIZED {
            headers.insert(header::WWW_AUTHENTICATE, HeaderValue::from_static("Bearer realm=\"outwait\""));
        }
        response
    }
}
