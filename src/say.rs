//! One way to say a thing: durations in and out, numbers, shares. Pure text.

use jiff::{Span, SpanRelativeTo, Timestamp, Unit};

/// Why a text is not a duration.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{text:?} is not a duration; write seconds (0.25) or units of a fixed length (\"250ms\", \"2d 4h\")")]
pub struct DurationError {
    /// The refused text, cut to 60 characters.
    pub text: String,
}

/// Reads a duration in seconds: a plain number, or units from nanoseconds to weeks (`"18.3ms"`, `"2d 4h"`).
///
/// A day is 24 hours, a week 7 days; months and years have no fixed length and are refused. The sign and the
/// range are the caller's to judge.
///
/// # Errors
/// [`DurationError`] with the text.
///
/// ```
/// assert_eq!(outwait::say::parse_duration("18.3ms").unwrap(), 0.0183);
/// assert_eq!(outwait::say::parse_duration("2d 4h").unwrap(), 187_200.0);
/// assert_eq!(outwait::say::parse_duration("0.25").unwrap(), 0.25);
/// assert!(outwait::say::parse_duration("1 month").is_err());
/// ```
pub fn parse_duration(text: &str) -> Result<f64, DurationError> {
    let text = text.trim();
    let refuse = || DurationError { text: text.chars().take(60).collect() };
    if let Ok(seconds) = text.parse::<f64>() {
        return if seconds.is_finite() { Ok(seconds) } else { Err(refuse()) };
    }
    let span: Span = text.parse().map_err(|_| refuse())?;
    if span.get_years() != 0 || span.get_months() != 0 {
        return Err(refuse());
    }
    let relative = SpanRelativeTo::days_are_24_hours();
    let nanoseconds = span.total((Unit::Nanosecond, relative)).map_err(|_| refuse())?;
    Ok(nanoseconds / 1e9)
}

/// Units for people, largest first: name, seconds, and from how many of them the unit is used.
const UNITS: [(&str, f64, f64); 6] = [
    ("d", 86_400.0, 2.0),
    ("h", 3_600.0, 2.0),
    ("min", 60.0, 2.0),
    ("s", 1.0, 1.0),
    ("ms", 1e-3, 1.0),
    ("µs", 1e-6, 0.0),
];

/// An error and what lies behind it, in one line.
pub(crate) fn chain(error: &dyn std::error::Error) -> String {
    let mut text = error.to_string();
    let mut next = error.source();
    while let Some(error) = next {
        text += &format!(": {error}");
        next = error.source();
    }
    text
}

/// Words with their first letter capital.
pub fn capital(words: &str) -> String {
    let mut letters = words.chars();
    letters.next().map_or_else(String::new, |first| first.to_uppercase().chain(letters).collect())
}

/// A duration for people, three significant digits: `"18.3 ms"`, `"2.50 s"`, `"3.2 h"`; `"never"` if infinite.
pub fn duration(seconds: f64) -> String {
    if seconds.is_infinite() {
        return "never".into();
    }
    if seconds == 0.0 {
        return "0 s".into();
    }
    // Rounded first, so that 0.9999 s reads 1.00 s and not 1000 ms.
    let size = rounded(seconds.abs(), 3);
    let (unit, length, _) =
        UNITS.into_iter().find(|&(_, length, from)| size >= length * from).unwrap_or(UNITS[5]);
    format!("{} {unit}", number(seconds / length))
}

/// A duration that reads back ([`parse_duration`]) as the same to the nanosecond: `"76.5ms"`, `"1.5h"`, `"14d"`;
/// `"never"` if infinite.
pub fn exact_duration(seconds: f64) -> String {
    if seconds.is_infinite() {
        return "never".into();
    }
    let all = (seconds.max(0.0) * 1e9).round() as u128;
    // Only whole days, since a share of a day is not read; no more than three decimals of the rest.
    let day = 86_400_000_000_000;
    if all >= 2 * day && all.is_multiple_of(day) {
        return format!("{}d", all / day);
    }
    let units = [
        ("h", 3_600_000_000_000),
        ("min", 60_000_000_000),
        ("s", 1_000_000_000),
        ("ms", 1_000_000),
        ("us", 1_000),
    ];
    for (unit, length) in units {
        if all >= length && (1_000 * all).is_multiple_of(length) {
            let (whole, part) = (all / length, 1_000 * (all % length) / length);
            let text = format!("{whole}.{part:03}");
            return format!("{}{unit}", text.trim_end_matches('0').trim_end_matches('.'));
        }
    }
    format!("{all}ns")
}

/// A number with three significant digits, without an exponent between 0.001 and a million.
pub fn number(value: f64) -> String {
    if value == 0.0 {
        return "0".into();
    }
    if !value.is_finite() {
        return if value.is_nan() {
            "unknown".into()
        } else {
            format!("{}∞", if value < 0.0 { "-" } else { "" })
        };
    }
    let value = rounded(value, 3);
    let magnitude = value.abs().log10().floor() as i32;
    if !(-3..6).contains(&magnitude) {
        return format!("{value:.2e}");
    }
    format!("{value:.*}", (2 - magnitude).max(0) as usize)
}

/// A Unix time in seconds as RFC 3339 in UTC, to the second; `None` outside the years that has.
pub fn time(unix: f64) -> Option<String> {
    let time = Timestamp::from_second(unix.floor() as i64).ok()?;
    Some(time.to_string())
}

/// A share as a percentage: `"3.1%"`, `"<0.1%"`, `"99.95%"`, `">99.99%"`: all and nothing are said only of all and
/// nothing.
pub fn percent(share: f64) -> String {
    let p = 100.0 * share;
    match p {
        _ if p.is_nan() => "unknown".into(),
        _ if p != 0.0 && p.abs() < 0.05 => format!("{}0.1%", if p < 0.0 { ">-" } else { "<" }),
        _ if p > 99.99 && p < 100.0 => ">99.99%".into(),
        _ if p > 99.0 && p < 100.0 => format!("{p:.2}%"),
        _ if p.abs() >= 1000.0 => format!("{}%", number(p)),
        _ => format!("{p:.1}%"),
    }
}

/// A count with thousands apart: `"1,204,311"`.
pub fn count(value: f64) -> String {
    let digits = format!("{:.0}", value.max(0.0));
    let mut out = String::with_capacity(digits.len() * 4 / 3);
    for (i, digit) in digits.chars().enumerate() {
        if i > 0 && (digits.len() - i).is_multiple_of(3) {
            out.push(',');
        }
        out.push(digit);
    }
    out
}

/// As [`number`], with the thousands set apart: `"2,360"`.
pub fn amount(value: f64) -> String {
    let rounded = rounded(value, 3);
    match rounded.abs() {
        much @ 1e3..1e15 => format!("{}{}", if rounded < 0.0 { "-" } else { "" }, count(much)),
        _ => number(value),
    }
}

fn rounded(value: f64, digits: i32) -> f64 {
    if value == 0.0 {
        return 0.0;
    }
    let unit = 10f64.powi(value.abs().log10().floor() as i32 + 1 - digits);
    (value / unit).round() * unit
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn durations_both_ways() {
        for (seconds, text) in [
            (0.0183, "18.3 ms"),
            (0.9999, "1.00 s"),
            (1.5e-6, "1.50 µs"),
            (90.0, "90.0 s"),
            (187_200.0, "2.17 d"),
            (7_200.0, "2.00 h"),
            (f64::INFINITY, "never"),
        ] {
            assert_eq!(duration(seconds), text);
        }
        for bad in ["", "fast", "NaN", "1e999", "1 year", "5 parsecs"] {
            assert!(parse_duration(bad).is_err(), "{bad}");
        }
        for (seconds, text) in [
            (0.0765, "76.5ms"),
            (5_400.0, "1.5h"),
            (1_209_600.0, "14d"),
            (129_600.0, "36h"),
            (0.4, "400ms"),
            (0.076_512_345, "76512.345us"),
            (1e-9, "1ns"),
            (100_000.123_456_7, "100000123456.7us"),
        ] {
            let exact = exact_duration(seconds);
            assert!((parse_duration(&exact).unwrap() - seconds).abs() < 1e-9, "{exact}");
            assert_eq!(exact, text);
        }
        assert_eq!(parse_duration(" 1h 30m ").unwrap(), 5_400.0);
        assert_eq!(parse_duration("-2s").unwrap(), -2.0);
    }

    #[test]
    fn numbers() {
        assert_eq!(number(1234.5), "1230");
        assert_eq!(number(0.012345), "0.0123");
        assert_eq!(number(9.999), "10.0");
        assert_eq!(number(1.0e9), "1.00e9");
        assert_eq!(
            [amount(999.6), amount(-2_361.2), amount(7_130_400.0)],
            ["1,000", "-2,360", "7,130,000"].map(str::to_owned)
        );
        assert_eq!(count(1_204_311.0), "1,204,311");
        assert_eq!(time(1_764_547_200.25).as_deref(), Some("2025-12-01T00:00:00Z"));
        assert_eq!(time(1e300), None);
        assert_eq!(percent(0.0312), "3.1%");
        assert_eq!(percent(0.0001), "<0.1%");
        assert_eq!(percent(0.999_99), ">99.99%");
        assert_eq!(percent(1.0), "100.0%");
    }
}
