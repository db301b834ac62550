//! One value of a policy, from its text: durations, numbers, shares, choices. Every refusal says what is wrong.

use super::finding::{Flaw, shown};
use super::{GiveUp, Sticky};
use crate::say;
use crate::wait::{LEAST_AGE, MAX_AGE};
use std::path::PathBuf;

/// A duration with its unit, s; 0 needs none. Its range is the caller's to judge with [`within`].
pub(super) fn duration(text: &str) -> Result<f64, Flaw> {
    match (text.trim().parse::<f64>(), say::parse_duration(text)) {
        // A bare number would be seconds to one reader and milliseconds to another.
        (Ok(bare), Ok(_)) if bare != 0.0 => Err(Flaw::NoUnit { value: shown(text.trim()) }),
        (_, Ok(seconds)) => Ok(seconds + 0.0),
        (_, Err(_)) => Err(unreadable(text)),
    }
}

/// A duration above 0, s. As with waits, one below [`LEAST_AGE`] is as long as that.
pub(crate) fn span(text: &str) -> Result<f64, Flaw> {
    duration(text).and_then(|s| within(s.max(LEAST_AGE), s > 0.0 && s <= MAX_AGE, text))
}

/// A duration of 0 or more, s.
pub(super) fn pause(text: &str) -> Result<f64, Flaw> {
    duration(text).and_then(|s| within(s, (0.0..=MAX_AGE).contains(&s), text))
}

/// A duration above 0, or `never`.
pub(crate) fn give_up(text: &str) -> Result<GiveUp, Flaw> {
    if text.trim() == "never" { Ok(GiveUp::Never) } else { span(text).map(GiveUp::After) }
}

/// A name of the tz database, by the copy that is built in.
pub(super) fn time_zone(text: &str) -> Result<String, Flaw> {
    let name = text.trim();
    let known = name == "UTC" || jiff::tz::TimeZoneDatabase::bundled().get(name).is_ok();
    if known { Ok(name.to_owned()) } else { Err(unreadable(text)) }
}

/// A name of a file.
pub(super) fn file_name(text: &str) -> Result<PathBuf, Flaw> {
    // A name that cannot be one of a file that somebody made for this.
    let name = text.trim();
    let fits = !name.is_empty() && name.len() <= 4_096 && !name.contains(['\0', '\n', '%']);
    if fits { Ok(name.into()) } else { Err(unreadable(text)) }
}

/// A number between two bounds, both included.
pub(super) fn number(text: &str, low: f64, high: f64) -> Result<f64, Flaw> {
    let value = finite(text.trim(), text)?;
    within(value, (low..=high).contains(&value), text)
}

/// A whole number between two bounds, both included.
pub(super) fn whole(text: &str, low: u32, high: u32) -> Result<u32, Flaw> {
    match text.trim().parse::<u32>() {
        Ok(value) => within(value, (low..=high).contains(&value), text),
        // A number that is merely not whole or too large is out of range rather than unreadable.
        Err(_) => finite(text.trim(), text).and(Err(Flaw::Range { value: shown(text) })),
    }
}

/// A share: `1%` or `0.01`.
pub(super) fn share(text: &str) -> Result<f64, Flaw> {
    match text.trim().strip_suffix('%') {
        Some(percent) => finite(percent.trim_end(), text).map(|p| p / 100.0),
        None => finite(text.trim(), text),
    }
}

/// A share in [0, 1).
pub(super) fn part(text: &str) -> Result<f64, Flaw> {
    share(text).and_then(|s| within(s, (0.0..1.0).contains(&s), text))
}

/// A share above 0 and at most 10: how far one step may go.
pub(super) fn step(text: &str) -> Result<f64, Flaw> {
    share(text).and_then(|s| within(s, s > 0.0 && s <= 10.0, text))
}

/// Worth per time (`0.02/s`, also `/min`, `/h`, `/d`), in worth per second, from [`super::LEAST_WORTH`].
pub(super) fn cost_of_time(text: &str) -> Result<f64, Flaw> {
    let Some((amount, unit)) = text.split_once('/') else {
        return Err(unreadable(text));
    };
    let seconds = match unit.trim() {
        "s" => 1.0,
        "min" => 60.0,
        "h" => 3_600.0,
        "d" => 86_400.0,
        _ => return Err(unreadable(text)),
    };
    let amount = finite(amount.trim(), text)?;
    let value = amount / seconds;
    within(value, value >= super::LEAST_WORTH && amount <= super::MAX_WORTH, text)
}

/// `true` or `false`.
pub(super) fn flag(text: &str) -> Result<bool, Flaw> {
    choice(text, &[("true", true), ("false", false)])
}

/// `from_data`, `unknown`, or a share in [0, 1).
pub(super) fn sticky(text: &str) -> Result<Sticky, Flaw> {
    if share(text).is_ok() {
        return part(text).map(Sticky::Given);
    }
    choice(text, &[("from_data", Sticky::FromData), ("unknown", Sticky::Unknown)])
}

/// One of a few words.
pub(super) fn choice<T: Copy>(text: &str, among: &[(&'static str, T)]) -> Result<T, Flaw> {
    let word = text.trim();
    among.iter().find(|(name, _)| *name == word).map(|&(_, value)| value).ok_or_else(|| Flaw::Choice {
        value: shown(text),
        nearest: nearest(word, among.iter().map(|&(name, _)| name)),
    })
}

/// The name that a mistyped word most likely stands for: fewest slips (a letter more, less, other, or two swapped),
/// at most a third of its letters, rounded up.
pub(crate) fn nearest(word: &str, among: impl Iterator<Item = &'static str>) -> Option<&'static str> {
    // No name is so long that a longer word could be near it.
    let word: String = word.chars().take(40).flat_map(char::to_lowercase).collect();
    among
        .map(|name| (strsim::osa_distance(&word, name), name))
        .filter(|&(slips, name)| slips <= name.len().div_ceil(3))
        .min_by_key(|&(slips, _)| slips)
        .map(|(_, name)| name)
}

fn finite(digits: &str, text: &str) -> Result<f64, Flaw> {
    // 0 is added so that -0 is 0.
    digits.parse::<f64>().ok().filter(|v| v.is_finite()).map(|v| v + 0.0).ok_or_else(|| unreadable(text))
}

pub(super) fn within<T>(value: T, inside: bool, text: &str) -> Result<T, Flaw> {
    if inside { Ok(value) } else { Err(Flaw::Range { value: shown(text) }) }
}

fn unreadable(text: &str) -> Flaw {
    Flaw::Unreadable { value: shown(text) }
}
