//! What a ledger keeps and for how long, and how much it takes on.

/// Seconds in a day.
const DAY: f64 = 86_400.0;

/// How long things are kept, and how many. Times are in seconds by the ledger's own clock, which follows the
/// caller's but never leaps (see [`crate::ledger`]).
#[derive(Clone, Debug, PartialEq)]
pub struct Options {
    /// Hours older than this are rolled into days, s; > 0. Default 3 days.
    pub hours_for: f64,
    /// What is older than this is dropped, s; > 0. Default 92 days.
    pub keep_for: f64,
    /// Above this size the oldest days are dropped, bytes; none by default.
    pub most_bytes: Option<u64>,
    /// How long a repeated idempotency key, start or end is known as such, s; > 0. Default 48 hours.
    pub keys_for: f64,
    /// Above this number the oldest keys are forgotten before their time; > 0. Default two million.
    pub most_keys: usize,
    /// A start without its end is forgotten after this time, s; > 0. Default 30 days.
    pub open_for: f64,
    /// Most waits open at once; as many again that have ended are remembered. Default one million.
    pub most_open: usize,
    /// A histogram that only grows is forgotten if it has not been read for this time, s; > 0, and well above the longest
    /// pause between two readings. Default 2 days.
    pub series_for: f64,
    /// Most such histograms at once. Default a hundred thousand.
    pub most_series: usize,
    /// Most streams. Default a hundred thousand.
    pub most_streams: usize,
    /// Most bytes in the log of batches that are not yet merged into their hours: bounds the time to open. Default
    /// 64 MiB.
    pub log_bytes: u64,
    /// Most bytes of memory for the same batches. Default 128 MiB.
    pub live_bytes: usize,
}

impl Default for Options {
    fn default() -> Options {
        Options {
            hours_for: 3.0 * DAY,
            keep_for: 92.0 * DAY,
            most_bytes: None,
            keys_for: 2.0 * DAY,
            most_keys: 2_000_000,
            open_for: 30.0 * DAY,
            most_open: 1_000_000,
            series_for: 2.0 * DAY,
            most_series: 100_000,
            most_streams: 100_000,
            log_bytes: 64 << 20,
            live_bytes: 128 << 20,
        }
    }
}
