//! What a request of the protocol is answered with: how much was rejected and why, or why nothing could be done
//! (opentelemetry.io/docs/specs/otlp, "OTLP/HTTP Response").

use serde_json::json;

use super::wire::Writer;

/// How a body is written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Encoding {
    /// Protocol buffers.
    Protobuf,
    /// Their JSON.
    Json,
}

impl Encoding {
    /// The media type.
    pub fn media_type(self) -> &'static str {
        match self {
            Encoding::Protobuf => "application/x-protobuf",
            Encoding::Json => "application/json",
        }
    }
}

/// An answer.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Answer {
    /// All was taken but so many spans or data points; the message says why, or warns although all was taken.
    Export {
        /// Whether they were spans.
        spans: bool,
        /// How many were rejected.
        rejected: u64,
        /// Why; nothing if there is nothing to say.
        message: String,
    },
    /// Nothing was done (`google.rpc.Status`).
    Failure {
        /// The canonical code of gRPC.
        code: u32,
        /// What is wrong and what to do.
        message: String,
        /// Whether the request is at fault, so that the standard's `BadRequest` says so again.
        bad_request: bool,
    },
}

impl Answer {
    /// As bytes.
    pub fn encode(&self, encoding: Encoding) -> Vec<u8> {
        match encoding {
            Encoding::Protobuf => self.protobuf(),
            Encoding::Json => self.json().to_string().into_bytes(),
        }
    }

    fn protobuf(&self) -> Vec<u8> {
        let mut writer = Writer::default();
        match self {
            Answer::Export { rejected: 0, message, .. } if message.is_empty() => {}
            Answer::Export { rejected, message, .. } => {
                let mut partial = Writer::default();
                if *rejected > 0 {
                    partial.varint(1, (*rejected).min(i64::MAX as u64));
                }
                partial.bytes(2, message.as_bytes());
                writer.bytes(1, &partial.0);
            }
            Answer::Failure { code, message, bad_request } => {
                writer.varint(1, u64::from(*code));
                writer.bytes(2, message.as_bytes());
                if *bad_request {
                    let (mut violation, mut details, mut any) =
                        (Writer::default(), Writer::default(), Writer::default());
                    violation.bytes(2, message.as_bytes());
                    details.bytes(1, &violation.0);
                    any.bytes(1, BAD_REQUEST.as_bytes());
                    any.bytes(2, &details.0);
                    writer.bytes(3, &any.0);
                }
            }
        }
        writer.0
    }

    fn json(&self) -> serde_json::Value {
        match self {
            Answer::Export { rejected: 0, message, .. } if message.is_empty() => json!({}),
            Answer::Export { spans, rejected, message } => {
                let name = if *spans { "rejectedSpans" } else { "rejectedDataPoints" };
                // Numbers of 64 bits are texts there.
                json!({"partialSuccess": {name: rejected.to_string(), "errorMessage": message}})
            }
            Answer::Failure { code, message, bad_request: false } => {
                json!({"code": code, "message": message})
            }
            Answer::Failure { code, message, bad_request: true } => json!({
                "code": code,
                "message": message,
                "details": [{"@type": BAD_REQUEST, "fieldViolations": [{"description": message}]}],
            }),
        }
    }
}

const BAD_REQUEST: &str = "type.googleapis.com/google.rpc.BadRequest";
