//! From values to the length of an axis, for plotters to lay them out by, and the marks beside it where people count.

use std::ops::Range;

use plotters::coord::ranged1d::{KeyPointHint, NoDefaultFormatting, Ranged};

use super::words;

/// A linear or logarithmic axis. `from < to`, both finite; above 0 if logarithmic.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Scale {
    pub(super) from: f64,
    pub(super) to: f64,
    pub(super) log: bool,
    pub(super) measure: Measure,
}

/// What the marks of an axis count in.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum Measure {
    /// Seconds.
    Time,
    /// Shares, 0 to 1.
    Share,
    /// Anything else.
    Number,
}

/// A mark: where, 0 to 1 along the axis, and its label, absent for a small one.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Tick {
    pub(super) value: f64,
    pub(super) part: f64,
    pub(super) label: Option<String>,
}

impl Ranged for Scale {
    type FormatOption = NoDefaultFormatting;
    type ValueType = f64;

    /// Never outside the ends, whatever the value.
    fn map(&self, value: &f64, (start, end): (i32, i32)) -> i32 {
        let (start, end) = (f64::from(start), f64::from(end));
        (start + self.part(*value) * (end - start)).round() as i32
    }

    /// The marks of [`Scale::ticks`], whose labels are the bold points.
    fn key_points<H: KeyPointHint>(&self, hint: H) -> Vec<f64> {
        let ticks = self.ticks(hint.bold_points(), |_| true);
        let small = hint.weight().allow_light_points() && ticks.len() <= hint.max_num_points();
        ticks.into_iter().filter(|t| small || t.label.is_some()).map(|t| t.value).collect()
    }

    fn range(&self) -> Range<f64> {
        self.from..self.to
    }
}

impl Scale {
    /// A linear axis of plain numbers.
    pub(super) fn linear(from: f64, to: f64) -> Scale {
        Scale { from, to, log: false, measure: Measure::Number }
    }

    /// Where a value lies, 0 to 1; what lies outside, and what is no number, is at an end.
    pub(super) fn part(self, value: f64) -> f64 {
        let part = match self.log {
            _ if value.is_nan() => 0.0,
            true if value <= 0.0 => 0.0,
            true => (value / self.from).ln() / (self.to / self.from).ln(),
            false => (value - self.from) / (self.to - self.from),
        };
        part.clamp(0.0, 1.0)
    }

    /// A linear axis over values and 0, with a little air.
    pub(super) fn with_zero(measure: Measure, values: impl IntoIterator<Item = f64>) -> Scale {
        let finite = values.into_iter().filter(|v| v.is_finite()).map(|v| v.clamp(-HUGE, HUGE));
        let (low, high) = finite.fold((0.0f64, 0.0f64), |(low, high), v| (low.min(v), high.max(v)));
        let air = 0.06 * (high - low);
        let (from, to) = (if low < 0.0 { low - air } else { 0.0 }, if high > 0.0 { high + air } else { 0.0 });
        let to = if to - from < f64::MIN_POSITIVE * 1e3 { from + 1.0 } else { to };
        Scale { from, to, log: false, measure }
    }

    fn holds(self, value: f64) -> bool {
        let slack = 1e-9 * if self.log { value } else { self.to - self.from };
        value >= self.from - slack && value <= self.to + slack
    }

    fn tick(self, value: f64, label: Option<String>) -> Tick {
        Tick { value, part: self.part(value), label }
    }

    /// The densest labels of which `clear` says that they fit, at most `most` of them, and small marks between.
    /// Only ages, waits and shares have logarithmic axes.
    pub(super) fn ticks(self, most: usize, clear: impl Fn(&[Tick]) -> bool) -> Vec<Tick> {
        let candidates = if self.log { self.log_candidates() } else { self.linear_candidates() };
        let mut best: Vec<Tick> = Vec::new();
        for ticks in candidates.into_iter().filter(|ticks| ticks.len() <= most && clear(ticks)) {
            if ticks.len() > best.len() {
                best = ticks;
            }
            if best.len() >= ENOUGH {
                break;
            }
        }
        if self.log && self.measure == Measure::Time {
            let labelled: Vec<f64> = best.iter().map(|t| t.value).collect();
            let small = ladder().filter(|(age, _)| self.holds(*age) && !labelled.contains(age));
            best.extend(small.map(|(age, _)| self.tick(age, None)));
        }
        best
    }

    fn linear_candidates(self) -> Vec<Vec<Tick>> {
        let range = self.to - self.from;
        let steps: Vec<f64> = match self.measure {
            Measure::Time => time_steps().filter(|s| *s <= range && *s >= range / 20.0).collect(),
            Measure::Share => vec![0.1, 0.25, 0.5, 1.0],
            Measure::Number => {
                let k = range.log10().floor() as i32;
                (k - 2..=k).flat_map(|k| [1.0, 2.0, 5.0].map(|m| m * 10f64.powi(k))).collect()
            }
        };
        let largest = self.to.abs().max(self.from.abs());
        let label = |value: f64, step: f64| match self.measure {
            Measure::Time if value == 0.0 => "0".into(),
            // The unit of the last age, unless the step is an odd part of it (20 s of a minute).
            Measure::Time => in_unit(value, unit(largest.min(4.0 * step), 2.0)),
            Measure::Share => words::percent(value),
            Measure::Number => words::number(value),
        };
        let at_steps = |step: f64| {
            let (first, last) = ((self.from / step).ceil(), (self.to / step * (1.0 + 1e-12)).floor());
            let count = (last - first).clamp(-1.0, 64.0) as i64;
            (0..=count)
                .map(|i| (first + i as f64) * step)
                .map(|value| self.tick(value, Some(label(value, step))))
                .collect::<Vec<_>>()
        };
        steps.into_iter().filter(|step| *step > 0.0 && step.is_finite()).map(at_steps).collect()
    }

    fn log_candidates(self) -> Vec<Vec<Tick>> {
        let rungs: Vec<(f64, u8, String)> = match self.measure {
            Measure::Time => {
                ladder().map(|(age, level)| (age, level, in_unit(age, unit(age, 1.0)))).collect()
            }
            Measure::Share | Measure::Number => {
                (-15..=0).map(|k| (10f64.powi(k), 0, words::part(10f64.powi(k)))).collect()
            }
        };
        let rungs: Vec<_> = rungs.into_iter().filter(|(value, ..)| self.holds(*value)).collect();
        let every = |level: u8, stride: usize| {
            // From the far end, so that a thinned axis of shares keeps "all".
            let kept = rungs.iter().filter(|rung| rung.1 <= level).rev().step_by(stride);
            let mut ticks: Vec<Tick> =
                kept.map(|(value, _, label)| self.tick(*value, Some(label.clone()))).collect();
            ticks.reverse();
            ticks
        };
        let whole = [2, 1, 0].map(|level| every(level, 1));
        let thinned =
            [0, 1, 2].into_iter().flat_map(|level| (2..=rungs.len().max(2)).map(move |n| (level, n)));
        whole.into_iter().chain(thinned.map(|(level, n)| every(level, n))).collect()
    }
}

/// Labels an axis is content with.
const ENOUGH: usize = 3;
/// Largest value an axis reaches to.
pub(super) const HUGE: f64 = 1e300;

const MINUTE: f64 = 60.0;
const HOUR: f64 = 3_600.0;
const DAY: f64 = 86_400.0;

/// Units, largest first, with their seconds.
const UNITS: [(&str, f64); 6] =
    [("d", DAY), ("h", HOUR), ("min", MINUTE), ("s", 1.0), ("ms", 1e-3), ("µs", 1e-6)];

/// The unit in which `size` seconds are at least `from` units (1 unit from a second down).
fn unit(size: f64, from: f64) -> (&'static str, f64) {
    let enough = |length: f64| if length > 1.0 { from * length } else { length };
    UNITS.into_iter().find(|&(_, length)| size >= enough(length) * (1.0 - 1e-9)).unwrap_or(UNITS[5])
}

fn in_unit(seconds: f64, (name, length): (&str, f64)) -> String {
    format!("{} {name}", words::number(seconds / length))
}

/// Steps of a linear axis of ages, rising.
fn time_steps() -> impl Iterator<Item = f64> {
    let parts = (-12..=0).flat_map(|k| [1.0, 2.0, 5.0].map(|m| m * 10f64.powi(k)));
    let seconds = [10.0, 20.0, 30.0];
    let minutes = [1.0, 2.0, 5.0, 10.0, 15.0, 30.0].map(|m| m * MINUTE);
    let hours = [1.0, 2.0, 3.0, 6.0, 12.0].map(|h| h * HOUR);
    let days = [1.0, 2.0, 7.0, 14.0, 30.0].map(|d| d * DAY);
    let more = (2..=14).flat_map(|k| [1.0, 2.0, 5.0].map(|m| m * 10f64.powi(k) * DAY));
    parts.chain(seconds).chain(minutes).chain(hours).chain(days).chain(more)
}

/// Ages people name, rising, with how much they matter (0 most).
fn ladder() -> impl Iterator<Item = (f64, u8)> {
    let parts = (-12..=0).flat_map(|k| {
        let level = if k % 3 == 0 { 0 } else { 1 };
        [(10f64.powi(k), level), (2.0 * 10f64.powi(k), 2), (5.0 * 10f64.powi(k), 2)]
    });
    let named = [
        (10.0, 1),
        (30.0, 2),
        (MINUTE, 0),
        (5.0 * MINUTE, 1),
        (15.0 * MINUTE, 2),
        (30.0 * MINUTE, 2),
        (HOUR, 0),
        (6.0 * HOUR, 1),
        (12.0 * HOUR, 2),
        (DAY, 0),
        (7.0 * DAY, 1),
        (30.0 * DAY, 0),
    ];
    let more = (2..=12).flat_map(|k| {
        let days = 10f64.powi(k) * DAY;
        [(days, if k % 3 == 0 { 0 } else { 1 }), (3.0 * days, 2)]
    });
    parts.chain(named).chain(more)
}

#[cfg(test)]
mod tests {
    use plotters::coord::ranged1d::{BoldPoints, LightPoints};

    use super::*;

    fn labels((from, to): (f64, f64), log: bool, measure: Measure, most: usize) -> Vec<String> {
        let scale = Scale { from, to, log, measure };
        scale.ticks(most, |_| true).into_iter().filter_map(|t| t.label).collect()
    }

    #[test]
    fn counts_as_people_do() {
        let linear = |to: f64| labels((0.0, to), false, Measure::Time, 7);
        assert_eq!(linear(0.055), ["0", "10 ms", "20 ms", "30 ms", "40 ms", "50 ms"]);
        assert_eq!(linear(2.4), ["0", "0.5 s", "1 s", "1.5 s", "2 s"]);
        assert_eq!(linear(3_700.0), ["0", "10 min", "20 min", "30 min", "40 min", "50 min", "60 min"]);
        assert_eq!(linear(14.0 * HOUR), ["0", "3 h", "6 h", "9 h", "12 h"]);
        assert_eq!(linear(40.0 * DAY), ["0", "7 d", "14 d", "21 d", "28 d", "35 d"]);
        assert_eq!(linear(130.0), ["0", "20 s", "40 s", "60 s", "80 s", "100 s", "120 s"]);
        assert_eq!(linear(330.0), ["0", "1 min", "2 min", "3 min", "4 min", "5 min"]);
        let log = |from: f64, to: f64, most| labels((from, to), true, Measure::Time, most);
        assert_eq!(log(8e-4, 20.0, 7), ["1 ms", "10 ms", "100 ms", "1 s", "10 s"]);
        assert_eq!(
            log(30.0, 40.0 * DAY, 12),
            ["30 s", "1 min", "5 min", "15 min", "30 min", "1 h", "6 h", "12 h", "1 d", "7 d", "30 d"]
        );
        assert_eq!(log(1e-6, 40.0 * DAY, 7), ["1 µs", "1 ms", "1 s", "1 min", "1 h", "1 d", "30 d"]);
    }

    #[test]
    fn numbers_and_shares() {
        assert_eq!(labels((0.0, 11.0), false, Measure::Number, 6), ["0", "2", "4", "6", "8", "10"]);
        assert_eq!(labels((-0.5, 1.1), false, Measure::Number, 6), ["-0.5", "0", "0.5", "1"]);
        assert_eq!(labels((0.0, 1.0), false, Measure::Share, 6), ["0%", "25%", "50%", "75%", "100%"]);
        assert_eq!(
            labels((1e-4, 1.0), true, Measure::Share, 6),
            ["1 in 10,000", "1 in 1,000", "1 in 100", "1 in 10", "all"]
        );
    }

    #[test]
    fn places_everything_inside() {
        for log in [false, true] {
            let scale = Scale { from: 1e-3, to: 10.0, log, measure: Measure::Time };
            for value in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY, -1.0, 0.0, 5.0, 1e300] {
                assert!((0.0..=1.0).contains(&scale.part(value)));
                assert!((-7..=90).contains(&scale.map(&value, (90, -7))));
            }
        }
        let with_zero = |values: &[f64]| Scale::with_zero(Measure::Number, values.iter().copied());
        assert_eq!(with_zero(&[]), Scale::linear(0.0, 1.0));
        assert_eq!(with_zero(&[0.0, f64::NAN, f64::INFINITY]).to, 1.0);
        assert!(with_zero(&[-2.0, -1.0]).to == 0.0);
    }

    #[test]
    fn tells_plotters_its_marks() {
        let ages = Scale { from: 8e-3, to: 20.0, log: true, measure: Measure::Time };
        assert_eq!(ages.key_points(BoldPoints(4)), [0.01, 0.1, 1.0, 10.0]);
        assert_eq!(ages.key_points(LightPoints::new(4, 10)).len(), 10);
        assert_eq!(ages.key_points(LightPoints::new(4, 9)).len(), 4);
        assert_eq!((ages.map(&0.4, (0, 1000)), ages.range()), (500, 8e-3..20.0));
    }
}
