//! Numbers inside sentences: [`crate::say`] without the zeros that a table keeps for its columns.

use super::text;
use crate::say;

/// What a value is, and so how it is written.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Quantity<'a> {
    /// A duration, s.
    Time,
    /// A number with its unit, e.g. `"worth per attempt"`; the unit may be empty.
    Number(&'a str),
    /// So much of this a second, e.g. `"worth"`; written a second, minute, hour or day, whichever is the first to
    /// give numbers from 1 on.
    PerTime(&'a str),
}

impl Quantity<'_> {
    /// How values up to `largest` are spoken of.
    pub(super) fn spoken(self, largest: impl IntoIterator<Item = f64>) -> Spoken {
        let (factor, unit) = match self {
            Quantity::Time => (1.0, None),
            Quantity::Number(unit) => (1.0, Some(text::named(unit))),
            Quantity::PerTime(unit) => {
                let finite = largest.into_iter().map(f64::abs).filter(|v| v.is_finite());
                let largest = finite.fold(0.0, f64::max);
                let enough = |&(_, length): &(&str, f64)| largest * length >= 1.0 || largest == 0.0;
                let (name, length) = PERIODS.into_iter().find(enough).unwrap_or(PERIODS[3]);
                (length, Some(format!("{} per {name}", text::named(unit)).trim().to_owned()))
            }
        };
        Spoken { factor, unit }
    }
}

/// Periods a rate is told by, with their seconds.
const PERIODS: [(&str, f64); 4] = [("second", 1.0), ("minute", 60.0), ("hour", 3_600.0), ("day", 86_400.0)];

/// A quantity whose unit is settled.
pub(super) struct Spoken {
    /// By which the values are multiplied before they are drawn or written.
    pub(super) factor: f64,
    /// `None` for durations.
    unit: Option<String>,
}

impl Spoken {
    /// The value alone: `"3.2 h"`, `"12.3"`.
    pub(super) fn short(&self, value: f64) -> String {
        match self.unit {
            None => duration(value),
            Some(_) => number(value),
        }
    }

    /// With its unit: `"12.3 worth per second"`.
    pub(super) fn long(&self, value: f64) -> String {
        match &self.unit {
            Some(unit) if !unit.is_empty() => format!("{} {unit}", number(value)),
            _ => self.short(value),
        }
    }

    /// The name of its axis after `what`.
    pub(super) fn caption(&self, what: &str) -> String {
        match &self.unit {
            Some(unit) if !unit.is_empty() => format!("{what}, {unit}"),
            _ => what.into(),
        }
    }
}

/// An age or a give-up time: `"80 ms"`, `"2.5 s"`, `"never"`.
pub(super) fn time(seconds: f64) -> String {
    trimmed(&say::duration(seconds))
}

/// A duration that may be endless without being a give-up time.
pub(super) fn duration(seconds: f64) -> String {
    if seconds.is_infinite() { number(seconds) } else { trimmed(&say::duration(seconds)) }
}

/// A number with at most three digits that say something.
pub(super) fn number(value: f64) -> String {
    trimmed(&say::number(value))
}

/// A share: `"42%"`, `"3.1%"`.
pub(super) fn percent(share: f64) -> String {
    trimmed(&say::percent(share))
}

/// A share in two digits, for a title: `"43%"`, `"2.7%"`.
pub(super) fn roughly(share: f64) -> String {
    if share >= 0.1 { format!("{:.0}%", 100.0 * share) } else { percent(share) }
}

/// A rule at its time: `"99th percentile, 600 ms"`.
pub(super) fn rule(name: &str, age: f64) -> String {
    match age.is_infinite() && name == "never" {
        true => name.into(),
        false => format!("{name}, {}", time(age)),
    }
}

/// A share with its size still seen where it is small: `"2.1%"`, `"1 in 4,000"`.
pub(super) fn share(share: f64) -> String {
    if share > 0.0 && share < 0.001 { one_in(share) } else { percent(share) }
}

/// `"1 in 12"`.
fn one_in(share: f64) -> String {
    let n = 1.0 / share;
    if n >= 1e9 {
        return format!("1 in {}", number(n));
    }
    let unit = 10f64.powi((n.log10().floor() as i32 - 1).max(0));
    format!("1 in {}", say::count((n / unit).round() * unit))
}

/// How many are still waiting, with the verb: `"half are"`, `"only 1 in 10 is"`.
pub(super) fn still(share: f64) -> String {
    match share {
        s if s <= 0.0 => "none is".into(),
        s if s <= 0.25 => format!("only {} is", one_in(s)),
        s if (s - 0.5).abs() < 0.02 => "half are".into(),
        s if s < 0.995 => format!("{:.0}% are", 100.0 * s),
        _ => "nearly all are".into(),
    }
}

/// Label of a share on a logarithmic axis: `"all"`, `"1 in 100"`.
pub(super) fn part(share: f64) -> String {
    if share >= 1.0 { "all".into() } else { one_in(share) }
}

/// `"a to b"`.
pub(super) fn range([low, high]: [f64; 2], say: impl Fn(f64) -> String) -> String {
    format!("{} to {}", say(low), say(high))
}

/// A band after its value: `" (a to b)"`, or nothing.
pub(super) fn in_brackets(band: Option<[f64; 2]>, say: impl Fn(f64) -> String) -> String {
    band.map_or(String::new(), |band| format!(" ({})", range(band, say)))
}

/// What stands in brackets, where anything does.
pub(super) fn brackets_hold(any: bool, level: f64, what: &str) -> String {
    if any { format!("In brackets the {} {what}", percent(level)) } else { String::new() }
}

/// Joins what there is to say into sentences.
pub(super) fn sentences(parts: impl IntoIterator<Item = String>) -> String {
    let parts: Vec<String> = parts.into_iter().filter(|p| !p.is_empty()).map(|p| format!("{p}.")).collect();
    parts.join(" ")
}

/// Drops zeros after the point: `"2.50 s"` to `"2.5 s"`, `"1.00e9"` to `"1e9"`.
fn trimmed(written: &str) -> String {
    let end =
        written.find(|c: char| !matches!(c, '0'..='9' | '.' | '-' | '<' | '>')).unwrap_or(written.len());
    let (digits, rest) = written.split_at(end);
    let digits = match digits.contains('.') {
        true => digits.trim_end_matches('0').trim_end_matches('.'),
        false => digits,
    };
    format!("{digits}{rest}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn written_as_people_say_it() {
        assert_eq!([0.08, 2.5, 100.0, 0.01831].map(time), ["80 ms", "2.5 s", "100 s", "18.3 ms"]);
        assert_eq!(time(f64::INFINITY), "never");
        assert_eq!([1.0e9, 1200.0, -0.5, 0.0].map(number), ["1e9", "1200", "-0.5", "0"]);
        assert_eq!([0.421, 0.03, 0.0001, 1.0].map(percent), ["42.1%", "3%", "<0.1%", "100%"]);
        assert_eq!([0.1, 0.0099, 8.2e-5].map(one_in), ["1 in 10", "1 in 100", "1 in 12,000"]);
        assert_eq!([0.021, 2.5e-4, 0.0, 1e-12].map(share), ["2.1%", "1 in 4,000", "0%", "1 in 1e12"]);
        assert_eq!(
            [1.0, 0.63, 0.49, 0.14, 0.0].map(still),
            ["nearly all are", "63% are", "half are", "only 1 in 7 is", "none is"]
        );
        assert_eq!(duration(f64::INFINITY), "∞");
        assert_eq!([0.427, 0.0271].map(roughly), ["43%", "2.7%"]);
        let rate = |largest: f64| Quantity::PerTime("worth").spoken([largest]).caption("earned");
        assert_eq!(rate(25.0), "earned, worth per second");
        assert_eq!(rate(8.6e-5), "earned, worth per day");
        assert_eq!(rate(8.6e-4), "earned, worth per hour");
    }
}
