//! A second copy, started while the first goes on. METHODS.md section 6.

use super::quantile::first_at_most;
use super::request_time::RequestTime;
use super::retry::Retry;
use super::worth::Worth;
use crate::numeric::integrate;
use crate::outlook::Outlook;

/// A request with a second copy started at a fixed age if the first is still open then; whichever is done first
/// counts. For work that may be repeated only.
#[derive(Clone, Copy)]
pub struct SecondCopy<'a> {
    outlook: &'a dyn Outlook,
    start: f64,
}

/// Quantiles of a total time, s; infinite where that share is never done.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Points {
    /// Median.
    pub p50: f64,
    /// 99% point.
    pub p99: f64,
    /// 99.9% point.
    pub p999: f64,
}

impl<'a> SecondCopy<'a> {
    /// Starts the second copy `start` s (>= 0) after the first.
    pub fn new(outlook: &'a dyn Outlook, start: f64) -> SecondCopy<'a> {
        SecondCopy { outlook, start }
    }

    /// The earliest start that adds at most `load` attempts per request: the least `h` with `S(h) <= load`. The
    /// earlier the copy, the shorter every quantile, so this is the best start at that load. `None` where it lies
    /// past `end` (s). At 0.05 it is the rule of Dean & Barroso 2013, *The tail at scale*, CACM 56(2):74.
    pub fn within_load(outlook: &'a dyn Outlook, load: f64, end: f64) -> Option<SecondCopy<'a>> {
        if load >= 1.0 {
            return Some(SecondCopy::new(outlook, 0.0));
        }
        first_at_most(&|t| outlook.survival(t), load, end).map(|start| SecondCopy::new(outlook, start))
    }

    /// When the second copy starts, s.
    pub fn start(&self) -> f64 {
        self.start
    }

    /// Attempts it adds per request, `S(h)`.
    pub fn extra_load(&self) -> f64 {
        self.outlook.survival(self.start)
    }

    /// Share of requests not done by `t` s: `S(t)` before the start and `S(t) S(t-h)` after. A first copy that
    /// failed before the start gets no second, and a request both of whose copies fail is never done.
    pub fn not_done(&self, t: f64) -> f64 {
        if t < self.start {
            return 1.0 - self.outlook.done(t);
        }
        let alone = self.outlook.failed(self.start);
        alone + (1.0 - self.outlook.done(t) - alone).max(0.0) * (1.0 - self.outlook.done(t - self.start))
    }

    /// Quantiles of the time until done; infinite where the share is not done by `end` s.
    pub fn points(&self, end: f64) -> Points {
        let point = |q: f64| {
            first_at_most(&|t| self.not_done(t), (1.0 - q) * (1.0 + 1e-14), end).unwrap_or(f64::INFINITY)
        };
        Points { p50: point(0.5), p99: point(0.99), p999: point(0.999) }
    }

    /// Time that servers spend per request when the slower copy is stopped as soon as one is done, up to `end` s.
    pub fn server_time(&self, end: f64) -> f64 {
        let both = |t: f64| self.outlook.survival(t) * self.outlook.survival(t - self.start);
        let mut sum = self.outlook.restricted_mean(self.start.min(end));
        // Both run from the start on; stretches by magnitude, so that no bulk is overlooked.
        let (mut from, mut length) = (self.start, 1e-6 * end);
        while from < end {
            let to = (from + length).min(end);
            sum += 2.0 * integrate(&both, from, to, 1e-9);
            (from, length) = (to, 2.0 * length);
        }
        sum
    }
}

/// A second copy beside the retry that adds the same load.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct CopyOrRetry {
    /// When to start the second copy, s.
    pub start: f64,
    /// Attempts it adds per request.
    pub extra_load: f64,
    /// What the second copy reaches.
    pub copy: Points,
    /// The give-up time whose retries add no more, s, where there is one in the range.
    pub retry_after: Option<f64>,
    /// What that retry reaches.
    pub retry: Option<Points>,
}

/// Compares a second copy with a retry on equal load: at most `load` extra attempts per request each, give-up times
/// from `floor` to `ceiling` s. `None` where even a copy at the ceiling adds more.
pub fn copy_or_retry(
    outlook: &dyn Outlook,
    worth: &Worth,
    retry: &Retry,
    load: f64,
    floor: f64,
    ceiling: f64,
) -> Option<CopyOrRetry> {
    let copy = SecondCopy::within_load(outlook, load, ceiling)?;
    let retry_after = retry.least_within_load(outlook, worth, floor, ceiling, 1.0 + load);
    Some(CopyOrRetry {
        start: copy.start(),
        extra_load: copy.extra_load(),
        copy: copy.points(ceiling),
        retry_after,
        retry: retry_after.map(|t| {
            let total = RequestTime::new(outlook, worth, retry, t);
            Points { p50: total.quantile(0.5), p99: total.quantile(0.99), p999: total.quantile(0.999) }
        }),
    })
}
