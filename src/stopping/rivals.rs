//! The rules that are in common use, to be compared with. METHODS.md section 6.

use super::quantile::first_at_most;
use crate::outlook::Outlook;

/// A rule of thumb for a give-up time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Rule {
    /// This many times the mean of the completions.
    TimesMean(f64),
    /// The age by which this share of the completions has come.
    Percentile(f64),
    /// Mean plus four mean deviations: what the estimator of RFC 6298 settles at ([`RetransmissionTimer`]).
    Rfc6298,
    /// Never give up.
    Never,
}

impl Rule {
    /// The usual ones.
    pub const USUAL: [Rule; 6] = [
        Rule::TimesMean(3.0),
        Rule::Percentile(0.95),
        Rule::Percentile(0.99),
        Rule::Percentile(0.999),
        Rule::Rfc6298,
        Rule::Never,
    ];

    /// Its name in text and JSON.
    pub fn name(self) -> String {
        match self {
            Rule::TimesMean(factor) => format!("{factor} x mean"),
            Rule::Percentile(share) => format!("p{}", (share * 1e5).round() / 1e3),
            Rule::Rfc6298 => "RFC 6298".into(),
            Rule::Never => "never".into(),
        }
    }

    /// The give-up time it sets, s; infinite for never. Like those who use it, it looks at completions up to `end`
    /// s only. `None` where there are none.
    pub fn give_up_after(self, outlook: &dyn Outlook, end: f64) -> Option<f64> {
        let all = outlook.done(end);
        if self == Rule::Never {
            return Some(f64::INFINITY);
        }
        if all <= 0.0 {
            return None;
        }
        let mean = outlook.faded_done(end, &|t| t) / all;
        match self {
            Rule::TimesMean(factor) => Some(factor * mean),
            Rule::Percentile(share) => {
                first_at_most(&|t| all - outlook.done(t), all * (1.0 - share) * (1.0 + 1e-12), end)
            }
            Rule::Rfc6298 => {
                let deviation = outlook.faded_done(end, &|t| (t - mean).abs()) / all;
                Some(mean + 4.0 * deviation)
            }
            Rule::Never => None,
        }
    }
}

/// The retransmission timer of RFC 6298 (Paxson, Allman, Chu & Sargent 2011), step by step. Times in s.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RetransmissionTimer {
    smoothed: Option<(f64, f64)>,
    timeout: f64,
    granularity: f64,
    least: f64,
    most: f64,
}

impl RetransmissionTimer {
    /// The timer of the standard before any measurement: 1 s, a clock of `granularity`, never below 1 s (2.4), never
    /// above 60 s (2.5).
    pub fn new(granularity: f64) -> RetransmissionTimer {
        RetransmissionTimer { smoothed: None, timeout: 1.0, granularity, least: 1.0, most: 60.0 }
    }

    /// The same with other bounds, s, for waits that are not round trips.
    pub fn with_bounds(mut self, least: f64, most: f64) -> RetransmissionTimer {
        (self.least, self.most) = (least, most);
        self
    }

    /// The timeout now, RTO.
    pub fn timeout(&self) -> f64 {
        self.timeout
    }

    /// Takes a measurement (of a segment that was not retransmitted) and gives the new timeout (2.2, 2.3).
    pub fn observe(&mut self, round_trip: f64) -> f64 {
        let (mean, deviation) = match self.smoothed {
            None => (round_trip, round_trip / 2.0),
            // The deviation first: it uses the mean from before.
            Some((mean, deviation)) => (
                (1.0 - 1.0 / 8.0) * mean + round_trip / 8.0,
                (1.0 - 1.0 / 4.0) * deviation + (mean - round_trip).abs() / 4.0,
            ),
        };
        self.smoothed = Some((mean, deviation));
        self.timeout = (mean + self.granularity.max(4.0 * deviation)).max(self.least).min(self.most);
        self.timeout
    }

    /// The timer ran out: it doubles (5.5).
    pub fn back_off(&mut self) -> f64 {
        self.timeout = (2.0 * self.timeout).min(self.most);
        self.timeout
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::stopping::{Competing, Failure};
    use crate::tail::Family;
    use crate::tail::families::Exponential;

    #[test]
    fn rules_on_an_exponential() {
        let outlook = Competing::new(Exponential.law(&[0.5_f64.ln()]).unwrap(), Failure::Never);
        let at = |rule: Rule| rule.give_up_after(&outlook, 1e4).unwrap();
        assert!((at(Rule::TimesMean(3.0)) - 6.0).abs() < 1e-8);
        assert!((at(Rule::Percentile(0.99)) - 2.0 * 100f64.ln()).abs() < 1e-9);
        // Mean deviation of an exponential of mean m: 2m/e.
        assert!((at(Rule::Rfc6298) - (2.0 + 4.0 * 4.0 / 1f64.exp())).abs() < 1e-6);
        assert_eq!(at(Rule::Never), f64::INFINITY);
        assert_eq!(Rule::USUAL.map(Rule::name).join(" "), "3 x mean p95 p99 p99.9 RFC 6298 never");
    }

    #[test]
    fn the_timer_of_the_standard() {
        let mut timer = RetransmissionTimer::new(0.001).with_bounds(0.0, 60.0);
        assert_eq!(timer.timeout(), 1.0);
        // RFC 6298 (2.2): SRTT = R, RTTVAR = R/2, RTO = SRTT + 4 RTTVAR.
        assert!((timer.observe(0.2) - (0.2 + 4.0 * 0.1)).abs() < 1e-15);
        // (2.3): RTTVAR = 3/4 0.1 + 1/4 |0.2 - 0.3|, SRTT = 7/8 0.2 + 1/8 0.3.
        let (rttvar, srtt) = (0.75 * 0.1 + 0.25 * 0.1, 0.875 * 0.2 + 0.125 * 0.3);
        assert!((timer.observe(0.3) - (srtt + 4.0 * rttvar)).abs() < 1e-15);
        let rttvar = 0.75 * rttvar + 0.25 * (srtt - 0.1_f64).abs();
        let srtt = 0.875 * srtt + 0.125 * 0.1;
        assert!((timer.observe(0.1) - (srtt + 4.0 * rttvar)).abs() < 1e-15);
        assert!((timer.back_off() - 2.0 * (srtt + 4.0 * rttvar)).abs() < 1e-15);
        // A clock coarser than the deviation counts in its place; equal measurements wear the deviation out.
        let mut coarse = RetransmissionTimer::new(0.1).with_bounds(0.0, 60.0);
        for _ in 0..200 {
            coarse.observe(0.5);
        }
        assert!((coarse.timeout() - 0.6).abs() < 1e-9);
        // (2.4) and (2.5): at least a second, at most a minute.
        let mut standard = RetransmissionTimer::new(0.001);
        assert_eq!(standard.observe(0.05), 1.0);
        assert_eq!((0..9).map(|_| standard.back_off()).last(), Some(60.0));
    }
}
