//! What a stream of the scenario truly is, and what would be right to do: exact, since the laws are known.

use super::latent::Latent;
use crate::numeric::integrate;
use crate::outlook::{Grid, Outlook};
use crate::stopping::{Aim, Worth};
use crate::wait::MAX_AGE;

/// One stream of the scenario: its true laws, and what waiting is worth there.
///
/// Of three independent times the first to come ends the wait: `done`, `failed`, or the waiter's `patience`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Stream {
    /// Its name in the records.
    pub name: &'static str,
    /// What waits for what, a sentence.
    pub what: &'static str,
    /// Why the right advice is what it is, sentences.
    pub why: &'static str,
    /// First attempts started per week, on average.
    pub per_week: f64,
    /// How starts spread over the week.
    pub rhythm: Rhythm,
    /// Weeks before the record opens from which starts are still followed, if open then (left truncation).
    pub lead_weeks: u32,
    /// Time to completion.
    pub done: Latent,
    /// The same from the week of the shift on, if it shifts.
    pub shifted: Option<Latent>,
    /// Whether the last part of `done` has its share in proportion to how busy the hour is (on average over
    /// arrivals its share stays as written).
    pub crowds: bool,
    /// Time to failure.
    pub failed: Latent,
    /// Time to giving up.
    pub patience: Latent,
    /// Retries of the given up.
    pub retries: Retries,
    /// Clock ticks per second to which ages are recorded.
    pub ticks: f64,
    /// What the policy says of it.
    pub terms: Terms,
}

/// How starts spread over the week: weight of an hour (UTC) times weight of a day (Monday first), all > 0.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rhythm {
    /// Weights of the hours.
    pub hours: [f64; 24],
    /// Weights of the days.
    pub days: [f64; 7],
}

impl Rhythm {
    /// Share of the week's starts that fall in an hour of the week (0 = Monday 00:00 to 01:00).
    pub fn share(&self, hour_of_week: usize) -> f64 {
        self.weight(hour_of_week) / (self.hours.iter().sum::<f64>() * self.days.iter().sum::<f64>())
    }

    /// How busy an hour of the week is, as a multiple of what an average start meets.
    pub fn crowd(&self, hour_of_week: usize) -> f64 {
        let met = |weights: &[f64]| weights.iter().map(|w| w * w).sum::<f64>() / weights.iter().sum::<f64>();
        self.weight(hour_of_week) / (met(&self.hours) * met(&self.days))
    }

    fn weight(&self, hour_of_week: usize) -> f64 {
        self.hours[hour_of_week % 24] * self.days[hour_of_week / 24 % 7]
    }
}

/// How attempts that were given up are tried again.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Retries {
    /// Most attempts per request; 1: no retry.
    pub attempts: u32,
    /// Between giving up and the next start, s.
    pub pause: f64,
    /// Stickiness φ: probability that the retry meets the very same time to completion (METHODS.md section 6).
    pub sticky: f64,
}

/// What the policy of the scenario says of a stream; the same numbers as in the policy file.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Terms {
    /// Worth, pauses, aim; with the true stickiness.
    pub worth: Worth,
    /// Least give-up time, s.
    pub floor: f64,
    /// Largest give-up time, s.
    pub ceiling: f64,
    /// The give-up time in force, s; infinite for none.
    pub now: f64,
}

/// The right decision under the true law.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Best {
    /// Best give-up time between floor and ceiling, s, on a grid of 400 ages.
    pub give_up_after: f64,
    /// Whether holding on to the ceiling earns as much (to 0.05%).
    pub wait_it_out: bool,
    /// Around the best, the ages that earn at least 99% of it, s.
    pub band: [f64; 2],
    /// What the time in force loses of the best rate, a share.
    pub loss_now: f64,
}

impl Stream {
    /// The true outlook, before the shift of the law or after it.
    pub fn outlook(&self, after_shift: bool) -> TrueOutlook {
        let done = self.shifted.filter(|_| after_shift).unwrap_or(self.done);
        TrueOutlook { done, failed: self.failed }
    }

    /// What a give-up time earns per second (aim `finish`: completions per second); METHODS.md sections 5 and 6.
    /// The scenario has no other aims, and no worth that fades.
    pub fn rate(&self, outlook: &TrueOutlook, give_up_after: f64) -> f64 {
        let (t, w) = (give_up_after, &self.terms.worth);
        let (left, done, failed) = (outlook.survival(t), outlook.done(t), outlook.failed(t));
        let pause = (w.pause.gave_up + w.sticky * t) / (1.0 - w.sticky);
        let time = outlook.restricted_mean(t) + w.pause.failed * failed + pause * left;
        if w.aim == Aim::Finish {
            return done / time;
        }
        let gave_up = (w.gave_up - w.sticky * w.attempt_cost) / (1.0 - w.sticky);
        let earned = w.done * done + w.failed * failed + gave_up * left - w.attempt_cost;
        earned / (time + w.pause.done * done)
    }

    /// The right decision, by trying 400 ages.
    pub fn best(&self, after_shift: bool) -> Best {
        let outlook = self.outlook(after_shift);
        let grid = Grid::new(self.terms.floor, self.terms.floor, self.terms.ceiling);
        let ages = &grid.ages()[grid.decide()];
        let rates: Vec<f64> = ages.iter().map(|&t| self.rate(&outlook, t)).collect();
        let top = (0..rates.len()).fold(0, |best, i| if rates[i] > rates[best] { i } else { best });
        let good = |i: &usize| rates[*i] >= 0.99 * rates[top];
        let low = (0..=top).rev().take_while(good).last().unwrap_or(top);
        let high = (top..rates.len()).take_while(good).last().unwrap_or(top);
        let now = self.rate(&outlook, self.terms.now.min(MAX_AGE));
        Best {
            give_up_after: ages[top],
            wait_it_out: rates.last().is_some_and(|&last| last >= rates[top] * (1.0 - 5e-4)),
            band: [ages[low], ages[high]],
            loss_now: 1.0 - now / rates[top],
        }
    }
}

/// The outlook of a stream whose laws are known: `S = S_d S_f`, incidences by quadrature to a relative 1e-9.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TrueOutlook {
    /// Time to completion, failures aside.
    pub done: Latent,
    /// Time to failure, completions aside.
    pub failed: Latent,
}

impl TrueOutlook {
    /// `∫_0^t f`, split at half powers of ten so that no bulk is overlooked; `t` is cut to [`MAX_AGE`].
    fn integral(&self, f: &dyn Fn(f64) -> f64, t: f64) -> f64 {
        let t = t.min(MAX_AGE);
        let (mut from, mut upto) = (0.0, self.done.scale().min(self.failed.scale()) * 1e-3);
        let mut sum = 0.0;
        while from < t {
            let end = t.min(upto);
            sum += integrate(f, from, end, 1e-10);
            from = end;
            upto *= 10f64.sqrt();
        }
        sum
    }
}

impl Outlook for TrueOutlook {
    fn survival(&self, t: f64) -> f64 {
        self.done.survival(t) * self.failed.survival(t)
    }

    fn done(&self, t: f64) -> f64 {
        (1.0 - self.survival(t) - self.failed(t)).max(0.0)
    }

    fn failed(&self, t: f64) -> f64 {
        if self.failed == Latent::NEVER {
            return 0.0;
        }
        self.integral(&|u| self.failed.density(u) * self.done.survival(u), t)
    }

    fn restricted_mean(&self, t: f64) -> f64 {
        self.integral(&|u| self.survival(u), t)
    }

    fn hazards(&self, t: f64) -> Option<(f64, f64)> {
        let hazard = |law: Latent| law.density(t) / law.survival(t);
        Some((hazard(self.done), hazard(self.failed))).filter(|(d, f)| d.is_finite() && f.is_finite())
    }

    fn faded_done(&self, t: f64, worth: &dyn Fn(f64) -> f64) -> f64 {
        self.integral(&|u| worth(u) * self.done.density(u) * self.failed.survival(u), t)
    }

    fn knots(&self) -> &[f64] {
        &[]
    }

    fn sight(&self) -> f64 {
        f64::INFINITY
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::demo::{Shape, truth};

    #[test]
    fn endings_add_up() {
        for stream in truth() {
            let outlook = stream.outlook(true);
            for t in [stream.terms.floor, 3.0 * stream.terms.floor, stream.terms.ceiling] {
                let done = outlook.faded_done(t, &|_| 1.0);
                assert!((done - outlook.done(t)).abs() < 1e-7, "{} {t}", stream.name);
            }
        }
    }

    /// Exponential completions (mean 1 h) and failures (mean 2 h): `F_f = A/2`, `A = (1 - e^{-1.5 t})/1.5`.
    #[test]
    fn competing_exponentials() {
        let law = |mean: f64| -> Latent {
            let part = [(1.0, Shape::Weibull { shape: 1.0, scale: mean })];
            Latent(Box::leak(Box::new(part)))
        };
        let outlook = TrueOutlook { done: law(3600.0), failed: law(7200.0) };
        for hours in [0.1_f64, 1.0, 20.0] {
            let area = -(-1.5 * hours).exp_m1() / 1.5;
            assert!((outlook.restricted_mean(hours * 3600.0) / (3600.0 * area) - 1.0).abs() < 1e-9);
            assert!((outlook.failed(hours * 3600.0) / (0.5 * area) - 1.0).abs() < 1e-9);
        }
        assert_eq!(outlook.hazards(10.0).map(|(d, _)| (d * 3600.0 * 1e9).round()), Some(1e9));
    }

    #[test]
    fn rhythm_keeps_its_averages() {
        for stream in truth() {
            let hours = 0..168;
            let shares: f64 = hours.clone().map(|h| stream.rhythm.share(h)).sum();
            let crowd: f64 = hours.clone().map(|h| stream.rhythm.share(h) * stream.rhythm.crowd(h)).sum();
            assert!((shares - 1.0).abs() < 1e-12 && (crowd - 1.0).abs() < 1e-12, "{}", stream.name);
            if stream.crowds {
                let last = stream.done.0.last().map_or(0.0, |part| part.0);
                assert!(hours.clone().all(|h| last * stream.rhythm.crowd(h) < 1.0));
            }
        }
    }
}
