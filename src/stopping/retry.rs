//! What becomes of a request whose attempts are given up and tried again. METHODS.md section 6.
//!
//! A request starts with a *fresh* attempt: done, failed or given up as the outlook says. After a failure the
//! next attempt is fresh. After a give-up it is *doomed* with probability φ (the same slow cause: it runs to the
//! give-up time and is given up), else fresh. Everything below follows from this chain of two states.

use super::worth::{MAX_ATTEMPTS, Worth, WorthError, out_of_range};
use crate::outlook::Outlook;

/// How a request goes on after an attempt that was not done.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Retry {
    /// The cap `K` on attempts, 1 to [`MAX_ATTEMPTS`]; `None` goes on until done. After the last one the request
    /// is over and, after the pause, the next one starts fresh.
    pub attempts: Option<u32>,
    /// Factor by which the pauses after a failure or a give-up grow from one attempt to the next, 1 to 100.
    pub growth: f64,
    /// What a growing pause does not exceed, s; may be infinite. A pause that is longer from the start stays.
    pub longest_pause: f64,
    /// Full jitter: a pause is uniform between 0 and twice its length, so that [`Worth`]'s pauses and everything
    /// in long-run averages hold as expectations. (A client that draws from 0 to `b` has a pause of `b/2`.)
    pub jitter: bool,
}

impl Default for Retry {
    /// Until done, with equal pauses.
    fn default() -> Retry {
        Retry { attempts: None, growth: 1.0, longest_pause: f64::INFINITY, jitter: false }
    }
}

/// What can become of one fresh attempt; the three add up to 1.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Odds {
    /// `F_d(τ)`.
    pub done: f64,
    /// `F_f(τ)`.
    pub failed: f64,
    /// `S(τ)`.
    pub gave_up: f64,
}

impl Odds {
    /// Of an attempt that is given up at `t`.
    pub fn at(outlook: &dyn Outlook, t: f64) -> Odds {
        Odds { done: outlook.done(t), failed: outlook.failed(t), gave_up: outlook.survival(t) }
    }
}

/// Expectations over one request.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Request {
    /// Fresh attempts; infinite when none is ever done and no cap ends it.
    pub fresh: f64,
    /// Doomed attempts per fresh attempt that is given up.
    pub doomed: f64,
    /// Pause per give-up of a fresh attempt, those of the doomed ones that follow it included, s.
    pub gave_up_pause: f64,
    /// Pause per failure, s.
    pub failed_pause: f64,
    /// Attempts, fresh and doomed: the load on the other side, `E[N]`.
    pub attempts: f64,
    /// Probability that the request is done in the end.
    pub done: f64,
}

impl Request {
    /// Retries per request: the budget that a throttle must let through.
    pub fn retries(&self) -> f64 {
        self.attempts - 1.0
    }
}

impl Retry {
    /// Checks the ranges named at the fields.
    ///
    /// # Errors
    /// [`WorthError::OutOfRange`].
    pub fn check(&self) -> Result<(), WorthError> {
        if let Some(attempts) = self.attempts.filter(|k| !(1..=MAX_ATTEMPTS).contains(k)) {
            return Err(out_of_range("retry.attempts", f64::from(attempts), "from 1 to 100"));
        }
        if !(1.0..=100.0).contains(&self.growth) {
            return Err(out_of_range("retry.growth", self.growth, "from 1 to 100"));
        }
        if self.longest_pause.is_nan() || self.longest_pause < 0.0 {
            return Err(out_of_range("retry.longest_pause", self.longest_pause, "0 s or more"));
        }
        Ok(())
    }

    /// The pause after attempt `number` (from 1) whose first length is `pause`, s.
    pub fn pause(&self, pause: f64, number: u32) -> f64 {
        let grown = pause * self.growth.powi(number.saturating_sub(1).min(10_000) as i32);
        if pause == 0.0 { 0.0 } else { grown.min(self.longest_pause.max(pause)) }
    }

    /// Whether every attempt counts the same, so that an attempt can stand for the request.
    pub(crate) fn is_plain(&self, worth: &Worth) -> bool {
        let pauses = worth.pause.failed > 0.0 || worth.pause.gave_up > 0.0;
        (self.attempts.is_none() || worth.sticky == 0.0) && (self.growth == 1.0 || !pauses)
    }

    /// Expectations over a request whose fresh attempts have these odds, with the pauses and the stickiness of
    /// `worth`. Closed forms where there are; else a sum over at most [`MAX_ATTEMPTS`] attempts, or over those
    /// until the pauses stop growing.
    pub fn request(&self, odds: Odds, worth: &Worth) -> Request {
        let phi = worth.sticky;
        let (base_failed, base_gave_up) = (worth.pause.failed, worth.pause.gave_up);
        let mut sum = Sum::default();
        // Shares of requests that make the next attempt fresh after a failure or at the start, or after a give-up.
        let (mut free, mut stuck) = (1.0, 0.0);
        let cap = self.attempts.unwrap_or(u32::MAX);
        let mut number = 1;
        while number <= cap && free + stuck > 0.0 {
            let (failed_pause, gave_up_pause) =
                (self.pause(base_failed, number), self.pause(base_gave_up, number));
            let (next_failed, next_gave_up) =
                (self.pause(base_failed, number + 1), self.pause(base_gave_up, number + 1));
            let grows = next_failed > failed_pause || next_gave_up > gave_up_pause;
            if self.attempts.is_none() && (!grows || number > 1000) {
                // From here every pause has one length: fresh attempts to come are a geometric series.
                if odds.done < HOPELESS {
                    let for_ever = |pause: f64| if grows { f64::INFINITY } else { pause };
                    return Request {
                        fresh: f64::INFINITY,
                        doomed: phi / (1.0 - phi),
                        gave_up_pause: for_ever(gave_up_pause) / (1.0 - phi),
                        failed_pause: for_ever(failed_pause),
                        attempts: f64::INFINITY,
                        done: 0.0,
                    };
                }
                let fresh = (free + stuck) / odds.done;
                // Each give-up, old or new, is followed by φ/(1-φ) doomed attempts.
                let doomed = (fresh * odds.gave_up + stuck) * phi / (1.0 - phi);
                sum.fresh += fresh;
                sum.doomed += doomed;
                sum.gave_up_pause += gave_up_pause * (fresh * odds.gave_up + doomed);
                sum.failed_pause += failed_pause * fresh * odds.failed;
                free = 0.0;
                stuck = 0.0;
                break;
            }
            if self.attempts.is_none() && self.longest_pause == f64::INFINITY && number == 1 {
                return self.growing_for_ever(odds, worth);
            }
            let fresh = free + (1.0 - phi) * stuck;
            let doomed = phi * stuck;
            let gave_up = fresh * odds.gave_up + doomed;
            sum.fresh += fresh;
            sum.doomed += doomed;
            sum.gave_up_pause += gave_up_pause * gave_up;
            sum.failed_pause += failed_pause * fresh * odds.failed;
            free = fresh * odds.failed;
            stuck = gave_up;
            number += 1;
        }
        sum.request(odds, 1.0 - free - stuck)
    }

    /// No cap and no longest pause: `Σ g^{i-1} M^{i-1}` over the chain's matrix `M`, finite while `g` times its
    /// largest eigenvalue is below 1.
    fn growing_for_ever(&self, odds: Odds, worth: &Worth) -> Request {
        let (g, phi) = (self.growth, worth.sticky);
        let plain = Retry::default().request(odds, worth);
        // Expected weights of the states, weighted by g^(i-1): solve x = e + g Mᵀ x.
        let (ff, fs) = (odds.failed, odds.gave_up);
        let (sf, ss) = ((1.0 - phi) * odds.failed, phi + (1.0 - phi) * odds.gave_up);
        let determinant = (1.0 - g * ff) * (1.0 - g * ss) - g * g * fs * sf;
        let converges = g * ff < 1.0 && g * ss < 1.0 && determinant > 0.0;
        if !converges || plain.fresh.is_infinite() {
            return Request { gave_up_pause: f64::INFINITY, failed_pause: f64::INFINITY, ..plain };
        }
        let free = (1.0 - g * ss) / determinant;
        let stuck = g * fs / determinant;
        let fresh = free + (1.0 - phi) * stuck;
        let sum = Sum {
            fresh: plain.fresh,
            doomed: plain.attempts - plain.fresh,
            gave_up_pause: worth.pause.gave_up * (fresh * odds.gave_up + phi * stuck),
            failed_pause: worth.pause.failed * fresh * odds.failed,
        };
        sum.request(odds, plain.done)
    }

    /// Least give-up time in `[floor, ceiling]` (s) whose attempts per request are at most `load`; `None` when
    /// even the ceiling's are more. Attempts fall as the give-up time grows. To a relative 1e-9.
    pub fn least_within_load(
        &self,
        outlook: &dyn Outlook,
        worth: &Worth,
        floor: f64,
        ceiling: f64,
        load: f64,
    ) -> Option<f64> {
        let within = |t: f64| self.request(Odds::at(outlook, t), worth).attempts <= load;
        if !within(ceiling) {
            return None;
        }
        if within(floor) {
            return Some(floor);
        }
        let (mut below, mut above) = (floor, ceiling);
        while above - below > 1e-9 * above {
            let middle = if above > 4.0 * below {
                (below.max(above * 1e-9) * above).sqrt()
            } else {
                0.5 * (below + above)
            };
            if within(middle) { above = middle } else { below = middle }
        }
        // A step curve allows it from an ending on, not from a hair after it.
        let knots = outlook.knots();
        let at = knots.partition_point(|&k| k <= below);
        Some(knots.get(at).copied().filter(|&k| k <= above && within(k)).unwrap_or(above))
    }
}

/// A share done that is as good as none: its inverse times a pause must stay finite.
const HOPELESS: f64 = 1e-200;

/// Sums over the attempts of a request.
#[derive(Default)]
struct Sum {
    fresh: f64,
    doomed: f64,
    gave_up_pause: f64,
    failed_pause: f64,
}

impl Sum {
    fn request(&self, odds: Odds, done: f64) -> Request {
        let per = |sum: f64, times: f64| if times > 0.0 { sum / times } else { 0.0 };
        let gave_up = self.fresh * odds.gave_up;
        Request {
            fresh: self.fresh,
            doomed: per(self.doomed, gave_up),
            gave_up_pause: per(self.gave_up_pause, gave_up),
            failed_pause: per(self.failed_pause, self.fresh * odds.failed),
            attempts: self.fresh + self.doomed,
            done,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::stopping::Pause;

    const ODDS: Odds = Odds { done: 0.6, failed: 0.1, gave_up: 0.3 };

    fn worth(sticky: f64) -> Worth {
        Worth { sticky, pause: Pause { done: 0.0, failed: 0.5, gave_up: 2.0 }, ..Worth::default() }
    }

    /// The chain itself, attempt by attempt, for as long as it matters.
    fn by_hand(retry: &Retry, odds: Odds, worth: &Worth) -> [f64; 4] {
        let (mut free, mut stuck) = (1.0, 0.0);
        let mut sums = [0.0; 4];
        for number in 1..=retry.attempts.unwrap_or(400) {
            let fresh = free + (1.0 - worth.sticky) * stuck;
            let gave_up = fresh * odds.gave_up + worth.sticky * stuck;
            sums[0] += free + stuck;
            sums[1] += gave_up * retry.pause(worth.pause.gave_up, number);
            sums[2] += fresh * odds.failed * retry.pause(worth.pause.failed, number);
            sums[3] += fresh * odds.done;
            (free, stuck) = (fresh * odds.failed, gave_up);
        }
        sums
    }

    #[test]
    fn closed_forms_are_the_chain() {
        let capped = Retry { attempts: Some(3), ..Retry::default() };
        let growing = Retry { growth: 1.3, ..Retry::default() };
        let bounded = Retry { growth: 2.0, longest_pause: 30.0, ..Retry::default() };
        let both = Retry { attempts: Some(5), growth: 2.0, longest_pause: 7.0, jitter: true };
        for retry in [Retry::default(), capped, growing, bounded, both] {
            for phi in [0.0, 0.2, 0.45] {
                let (worth, close) = (worth(phi), |a: f64, b: f64| (a - b).abs() < 1e-9 * (1.0 + a.abs()));
                let request = retry.request(ODDS, &worth);
                let sums = by_hand(&retry, ODDS, &worth);
                assert!(
                    close(request.attempts, sums[0]),
                    "{retry:?} {phi}: {} {}",
                    request.attempts,
                    sums[0]
                );
                assert!(
                    close(request.gave_up_pause * request.fresh * ODDS.gave_up, sums[1]),
                    "{retry:?} {phi}"
                );
                assert!(
                    close(request.failed_pause * request.fresh * ODDS.failed, sums[2]),
                    "{retry:?} {phi}"
                );
                assert!(close(request.done, sums[3]), "{retry:?} {phi}");
            }
        }
    }

    #[test]
    fn the_formulas_of_the_notation() {
        let (p, q): (f64, f64) = (ODDS.done, 1.0 - ODDS.done);
        let capped = Retry { attempts: Some(4), ..Retry::default() };
        assert!((capped.request(ODDS, &worth(0.0)).attempts - (1.0 - q.powi(4)) / (1.0 - q)).abs() < 1e-14);
        let sticky = Retry::default().request(ODDS, &worth(0.25));
        assert!((sticky.attempts - (1.0 + ODDS.gave_up * 0.25 / 0.75) / p).abs() < 1e-14);
        assert!((sticky.gave_up_pause - 2.0 / 0.75).abs() < 1e-14);
    }

    #[test]
    fn pauses_without_end() {
        let slow = Odds { done: 0.1, failed: 0.0, gave_up: 0.9 };
        let growing = Retry { growth: 2.0, ..Retry::default() };
        assert_eq!(growing.request(slow, &worth(0.0)).gave_up_pause, f64::INFINITY);
        let hopeless = Odds { done: 0.0, failed: 0.0, gave_up: 1.0 };
        let request = Retry::default().request(hopeless, &worth(0.0));
        assert_eq!((request.attempts, request.done), (f64::INFINITY, 0.0));
        assert!(!request.gave_up_pause.is_nan());
        let capped = Retry { attempts: Some(3), ..growing };
        assert_eq!(capped.request(hopeless, &worth(0.0)).attempts, 3.0);
    }
}
