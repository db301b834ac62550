//! The ages a stream's pictures share: where the path starts, where it ends, how far one sees.

use super::Marks;
use super::scale::{Measure, Scale};
use super::trace::Trace;
use super::words;
use crate::outlook::Outlook;

/// From this ratio of the last age to the median on, ages are logarithmic: a linear axis would press one half of
/// the waits into its first twentieth.
const LOG_FROM: f64 = 20.0;
/// Share still waiting at which a picture may end.
const TAIL: f64 = 1e-3;
/// How far a picture shows what is not seen, as a factor of the edge of sight.
const PAST_SIGHT: f64 = 2.5;
/// A mark further than this factor past the end is named at the end of the path, not reached.
const FAR: f64 = 1e3;
/// Air past the last mark, as a factor.
const AIR: f64 = 1.2;
/// Ages an axis can have, s.
const POSSIBLE: (f64, f64) = (1e-12, 1e15);

/// The axis of ages, the same for all pictures of a stream. s.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Ages {
    /// Where a logarithmic axis starts: about the age at which one in 100 has ended.
    pub start: f64,
    /// Median wait; decides between linear and logarithmic.
    pub middle: f64,
    /// Last age to show.
    pub end: f64,
    /// Last age about which the data speak; at or past `end` where everything shown is seen.
    pub sight: f64,
}

impl Ages {
    /// Ages for an outlook: up to where one in 1000 is still waiting or to 2.5 times the edge of sight, whichever
    /// is less, but past the marked times.
    pub fn of(outlook: &dyn Outlook, marks: &Marks) -> Ages {
        let sight = outlook.sight();
        let last_knot = outlook.knots().last().copied().unwrap_or(POSSIBLE.1);
        let limit = if sight.is_finite() && sight > 0.0 { PAST_SIGHT * sight } else { last_knot };
        let age_at = |share: f64| {
            let (mut low, mut high) = (POSSIBLE.0.ln(), limit.clamp(POSSIBLE.0, POSSIBLE.1).ln());
            for _ in 0..64 {
                let middle = 0.5 * (low + high);
                if outlook.survival(middle.exp()) > share { low = middle } else { high = middle }
            }
            high.exp()
        };
        let end = with_marks(age_at(TAIL), marks);
        Ages { start: age_at(0.99), middle: age_at(0.5), end, sight }
    }

    /// Whether ages are logarithmic: the end lies 20 medians ahead or further.
    pub fn is_log(&self) -> bool {
        self.end / self.middle >= LOG_FROM && self.start > 0.0
    }

    /// `count` ages at which to read a curve, spaced as on the axis, with the edge of sight and the marks among
    /// them; rising.
    pub fn sample(&self, count: usize, marks: &Marks) -> Vec<f64> {
        let Some(road) = Road::of(self, marks, None) else {
            return Vec::new();
        };
        let Scale { from, to, log, .. } = road.scale;
        let steps = count.max(2) - 1;
        let at = |i: usize| match i as f64 / steps as f64 {
            part if log => from * (to / from).powf(part),
            part => from + part * (to - from),
        };
        let extra = [Some(self.sight), marks.advised, marks.in_force].into_iter().flatten();
        let extra = extra.filter(|age| (from..=to).contains(age));
        let mut ages: Vec<f64> = (0..=steps).map(at).chain(extra).collect();
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        ages
    }
}

/// An [`Ages`] that can be drawn.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Road {
    pub(super) scale: Scale,
    /// Edge of sight; infinite past the end.
    pub(super) sight: f64,
}

impl Road {
    /// Brings ages into order, widens them by the marks, and falls back on the curve's own ages. `None` where
    /// there is no age above 0 at all.
    pub(super) fn of(ages: &Ages, marks: &Marks, trace: Option<&Trace>) -> Option<Road> {
        let sound = |age: f64| (age.is_finite() && age > 0.0).then(|| age.clamp(POSSIBLE.0, POSSIBLE.1));
        let of_trace = |read: fn(&Trace) -> Option<f64>| trace.and_then(read).and_then(sound);
        let end = with_marks(sound(ages.end).or_else(|| of_trace(Trace::last_age))?, marks);
        let middle = sound(ages.middle).unwrap_or(end);
        let start = sound(ages.start).or_else(|| of_trace(Trace::first_age)).unwrap_or(middle);
        let marked = [marks.advised, marks.in_force].into_iter().flatten().filter_map(sound);
        let start = marked.map(|m| m / AIR).fold(start.min(middle), f64::min).max(end * 1e-14);
        let log = Ages { start, middle, end, sight: 0.0 }.is_log();
        let scale = Scale { from: if log { start } else { 0.0 }, to: end, log, measure: Measure::Time };
        let sight = if ages.sight < end { ages.sight.max(0.0) } else { f64::INFINITY };
        Some(Road { scale, sight })
    }
}

impl Road {
    /// Whether a curve runs on past the edge of sight.
    pub(super) fn assumes(&self, trace: &Trace) -> bool {
        trace.last_age().is_some_and(|last| last > self.sight)
    }

    /// The sentence that says so, without its full stop; empty where everything shown is seen.
    pub(super) fn past_sight(&self, trace: &Trace) -> String {
        if !self.sight.is_finite() {
            return String::new();
        }
        let assumed = if self.assumes(trace) { "; the curve there is an assumption" } else { "" };
        format!("Past {} nothing is seen{assumed}", words::time(self.sight))
    }
}

fn with_marks(end: f64, marks: &Marks) -> f64 {
    let near = [marks.advised, marks.in_force].into_iter().flatten().filter(|m| *m > 0.0 && *m <= FAR * end);
    near.map(|m| AIR * m).fold(end, f64::max)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn ages(start: f64, middle: f64, end: f64) -> Ages {
        Ages { start, middle, end, sight: f64::INFINITY }
    }

    #[test]
    fn logarithmic_where_the_tail_asks_for_it() {
        let none = Marks::default();
        assert!(!Road::of(&ages(0.01, 0.7, 7.0), &none, None).unwrap().scale.log);
        assert!(Road::of(&ages(0.01, 0.7, 70.0), &none, None).unwrap().scale.log);
        let far = Marks { advised: None, in_force: Some(30.0) };
        let road = Road::of(&ages(0.01, 0.7, 7.0), &far, None).unwrap();
        assert!(road.scale.log && road.scale.to == 36.0);
        let never = Marks { advised: Some(1e-3), in_force: Some(f64::INFINITY) };
        assert!(Road::of(&ages(0.01, 0.7, 70.0), &never, None).unwrap().scale.from < 1e-3);
        assert!(Road::of(&ages(f64::NAN, -1.0, f64::INFINITY), &none, None).is_none());
    }

    #[test]
    fn ages_of_a_step_curve() {
        let steps = Steps(vec![0.1, 0.2, 0.2, 0.4]);
        let ages = Ages::of(&steps, &Marks { advised: Some(0.2), in_force: Some(2.0) });
        assert!((ages.middle - 0.2).abs() < 1e-9 && (ages.end - 2.4).abs() < 1e-9, "{ages:?}");
        let sample = ages.sample(50, &Marks { advised: Some(0.2), in_force: Some(2.0) });
        assert!(sample.contains(&0.2) && sample.contains(&0.4) && sample.windows(2).all(|w| w[0] < w[1]));
    }

    /// Waits of equal weight, all completed.
    struct Steps(Vec<f64>);

    impl Outlook for Steps {
        fn survival(&self, t: f64) -> f64 {
            self.0.iter().filter(|x| **x > t).count() as f64 / self.0.len() as f64
        }
        fn done(&self, t: f64) -> f64 {
            1.0 - self.survival(t)
        }
        fn failed(&self, _: f64) -> f64 {
            0.0
        }
        fn restricted_mean(&self, t: f64) -> f64 {
            self.0.iter().map(|x| x.min(t)).sum::<f64>() / self.0.len() as f64
        }
        fn hazards(&self, _: f64) -> Option<(f64, f64)> {
            None
        }
        fn faded_done(&self, t: f64, worth: &dyn Fn(f64) -> f64) -> f64 {
            self.0.iter().filter(|x| **x <= t).map(|x| worth(*x)).sum::<f64>() / self.0.len() as f64
        }
        fn knots(&self) -> &[f64] {
            &self.0
        }
        fn sight(&self) -> f64 {
            self.0.last().copied().unwrap_or(0.0)
        }
    }
}
