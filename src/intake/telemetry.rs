//! What can be wrong with a span, a data point or a sample.

use crate::running::HistogramError;

#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub(super) enum TelemetryFlaw {
    #[error("it cannot be decoded: {what}")]
    Malformed { what: String },
    #[error("the document has {objects} objects")]
    Objects { objects: usize },
    #[error("it is 0 or missing")]
    Untimed { field: &'static str },
    #[error("`{attribute}` is not a whole number from 0")]
    Resends { attribute: String },
    #[error("{counts} buckets are counted, and {bounds} bounds part them")]
    Buckets { counts: usize, bounds: usize },
    #[error("the buckets hold {buckets} waits, and the count says {count}")]
    Sum { buckets: u64, count: u64 },
    #[error("{found} is neither 1 (since the last point) nor 2 (since the start)")]
    Temporality { found: i32 },
    #[error("the scale {scale} is out of range")]
    Scale { scale: i32 },
    #[error("{zero_upto} is not an age")]
    ZeroThreshold { zero_upto: f64 },
    #[error("{0}")]
    Histogram(#[from] HistogramError),
}

impl TelemetryFlaw {
    pub(super) fn field(&self) -> &'static str {
        match self {
            TelemetryFlaw::Malformed { .. } | TelemetryFlaw::Objects { .. } => "body",
            TelemetryFlaw::Untimed { field } => field,
            TelemetryFlaw::Resends { .. } => "attempt",
            TelemetryFlaw::Buckets { .. } | TelemetryFlaw::Sum { .. } => "count",
            TelemetryFlaw::Temporality { .. } => "aggregationTemporality",
            TelemetryFlaw::Scale { .. } => "scale",
            TelemetryFlaw::ZeroThreshold { .. } => "zeroThreshold",
            TelemetryFlaw::Histogram(HistogramError::Order { .. } | HistogramError::Bounds { .. }) => {
                "bounds"
            }
            TelemetryFlaw::Histogram(_) => "buckets",
        }
    }

    pub(super) fn kind(&self) -> &'static str {
        match self {
            TelemetryFlaw::Malformed { .. } => super::UNDECODABLE,
            TelemetryFlaw::Objects { .. } => "too large",
            TelemetryFlaw::Untimed { .. } => "missing",
            TelemetryFlaw::Resends { .. } => "not a whole number",
            TelemetryFlaw::Buckets { .. } => "not as many buckets as bounds",
            TelemetryFlaw::Sum { .. } => "not the sum of the buckets",
            TelemetryFlaw::Temporality { .. } => "not known",
            TelemetryFlaw::Scale { .. } => "out of range",
            TelemetryFlaw::ZeroThreshold { .. } => "not an age",
            TelemetryFlaw::Histogram(error) => match error {
                HistogramError::Order { .. } => "not increasing",
                HistogramError::Sinks { .. } => "sinking",
                HistogramError::Negative { .. } => "negative",
                HistogramError::Count => "too many waits",
                HistogramError::Bounds { .. } => "too many bounds",
            },
        }
    }

    pub(super) fn remedy(&self) -> &'static str {
        match self {
            TelemetryFlaw::Malformed { .. } => {
                "send the request message of the standard, as protocol buffers or as its JSON"
            }
            TelemetryFlaw::Objects { .. } => "send it in smaller parts",
            TelemetryFlaw::Untimed { .. } => "give the time in Unix nanoseconds",
            TelemetryFlaw::Resends { .. } => "write how often it had been sent before, or leave it out",
            TelemetryFlaw::Buckets { .. } => "count one bucket more than there are bounds",
            TelemetryFlaw::Sum { .. } => "look for an exporter that reads while it is written to",
            TelemetryFlaw::Temporality { .. } => "set the metric's temporality",
            TelemetryFlaw::Scale { .. } => "use a scale from -11 to 52",
            TelemetryFlaw::ZeroThreshold { .. } => "give a number from 0",
            TelemetryFlaw::Histogram(HistogramError::Count) => "look for a counter that has run over",
            TelemetryFlaw::Histogram(HistogramError::Negative { .. }) => "look for a clock that was set back",
            TelemetryFlaw::Histogram(HistogramError::Bounds { .. }) => "use fewer and wider buckets",
            TelemetryFlaw::Histogram(_) => "give increasing bounds, and counts that do not sink",
        }
    }
}
