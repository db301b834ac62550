//! When waits ended: hours of the week, and what the days of a stream show: gaps, a stream that fell silent, waits from
//! the future. All times are UTC.

use std::collections::BTreeMap;

use crate::advice::Caution;
use crate::say;
use crate::tally::{Day, Days};

/// Hours in a week.
pub(super) const HOURS: usize = 168;
const DAY: f64 = 86_400.0;

/// Days without a wait that are worth a word.
const SILENT_DAYS: i32 = 7;
/// A stream has fallen silent when it has been so for this many days, and for twice its longest silence before.
const VANISHED_DAYS: i32 = 3;
/// Days by which waits must be ahead of all others to be taken for a wrong clock.
const AHEAD_DAYS: i32 = 30;
/// The largest share of all waits that can be.
const FEW: f64 = 0.01;

/// The hour of the week of a Unix time, Monday 00:00 to 01:00 UTC being 0.
#[inline]
pub(super) fn hour_of_week(at: f64) -> usize {
    // 1970-01-01 was a Thursday.
    ((at / 3600.0).floor() as i64 + 72).rem_euclid(HOURS as i64) as usize
}

/// Days with waits, and how many.
pub(super) fn counts(days: &Days) -> Vec<(i32, u64)> {
    let counted = days.days().iter().filter_map(|(day, tally)| match day {
        Day::Number(n) => Some((*n, tally.counts().into_iter().fold(0, u64::saturating_add))),
        Day::Undated => None,
    });
    // Waits that only carry over from day to day are none of that day.
    counted.filter(|(_, n)| *n > 0).collect()
}

/// What the days of one stream from `opening` on show, `newest` being the last day of all streams.
pub(super) fn cautions(days: &Days, opening: i32, newest: Option<i32>) -> Vec<Caution> {
    let mut found = Vec::new();
    let Some(newest) = newest else { return found };
    let with_waits: Vec<i32> =
        counts(days).into_iter().map(|(day, _)| day).filter(|&day| day <= newest).collect();
    let Some(&last) = with_waits.last() else { return found };
    let within: Vec<i32> = with_waits.iter().copied().filter(|&day| day >= opening).collect();
    let longest = within.windows(2).map(|w| (w[1] - w[0] - 1, w[0] + 1)).max_by_key(|(n, _)| *n);
    if let Some((silent, from)) = longest.filter(|(n, _)| *n >= SILENT_DAYS) {
        found.push(caution(
            "days_without_data",
            format!("no wait of the stream ended from {} to {}", date(from), date(from + silent - 1)),
            "find out whether nothing happened or nothing was recorded; sums and hours lack those days",
        ));
    }
    let silent = newest - last;
    let usual = with_waits.windows(2).map(|w| w[1] - w[0]).max().unwrap_or(1);
    if silent >= VANISHED_DAYS && silent >= 2 * usual {
        found.push(caution(
            "stream_vanished",
            format!("its last wait ended on {}, {silent} days before the newest of all streams", date(last)),
            "find out whether the stream is gone, renamed, or no longer recorded; what is advised on it is as old",
        ));
    }
    found
}

/// Whether a few waits are far ahead of all others: then windows, which are counted back from the newest, hold little else.
/// For each stream its [`counts`].
pub(super) fn from_the_future<'a>(streams: impl IntoIterator<Item = &'a [(i32, u64)]>) -> Option<Caution> {
    let mut all: BTreeMap<i32, u64> = BTreeMap::new();
    for (day, n) in streams.into_iter().flatten() {
        let sum = all.entry(*day).or_default();
        *sum = sum.saturating_add(*n);
    }
    let total: f64 = all.values().map(|n| *n as f64).sum();
    let days: Vec<(i32, f64)> = all.into_iter().map(|(day, n)| (day, n as f64)).collect();
    let mut ahead = 0.0;
    for pair in days.windows(2).rev() {
        ahead += pair[1].1;
        if ahead > FEW * total {
            return None;
        }
        if pair[1].0 - pair[0].0 > AHEAD_DAYS {
            return Some(caution(
                "waits_from_the_future",
                format!(
                    "{} of {} waits ended on {} or later, more than {AHEAD_DAYS} days after all others: a clock may be \
                     wrong, and windows that are counted back from them leave the rest out",
                    say::count(ahead),
                    say::count(total),
                    date(pair[1].0)
                ),
                format!("leave them out with `--until {}`, or correct their times", date(pair[0].0 + 1)),
            ));
        }
    }
    None
}

/// A day as a date.
fn date(day: i32) -> String {
    let text = say::time(f64::from(day) * DAY).unwrap_or_default();
    text.split('T').next().unwrap_or_default().to_owned()
}

pub(super) fn caution(code: &str, text: impl Into<String>, remedy: impl Into<String>) -> Caution {
    Caution { code: code.to_owned(), text: text.into(), remedy: remedy.into() }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::wait::{Ending, Wait};

    fn days(on: &[(i32, u64)]) -> Days {
        let mut days = Days::default();
        for &(day, n) in on {
            let wait = Wait::new(1.0, Ending::Done).unwrap().with_count(n).unwrap();
            days.add(&wait.with_at(f64::from(day) * DAY + 5.0).unwrap());
        }
        days
    }

    #[test]
    fn hours_of_the_week() {
        // 2026-11-30 was a Monday.
        assert_eq!(hour_of_week(1_795_996_800.0), 0);
        assert_eq!(hour_of_week(1_795_996_800.0 - 1.0), 167);
        assert_eq!(hour_of_week(1_795_996_800.0 + 25.5 * 3600.0), 25);
        assert_eq!(hour_of_week(0.0), 72);
    }

    #[test]
    fn silences() {
        let codes = |on: &[(i32, u64)], newest| {
            let found = cautions(&days(on), i32::MIN, Some(newest));
            found.into_iter().map(|c| c.code).collect::<Vec<_>>()
        };
        assert_eq!(codes(&[(1, 5), (2, 5), (3, 5)], 3), Vec::<String>::new());
        assert_eq!(codes(&[(1, 5), (2, 5), (10, 5)], 10), ["days_without_data"]);
        assert_eq!(codes(&[(1, 5), (2, 5), (3, 5)], 7), ["stream_vanished"]);
        // Once a week: four days of silence are usual.
        assert_eq!(codes(&[(1, 5), (8, 5), (15, 5)], 19), Vec::<String>::new());
    }

    #[test]
    fn a_few_far_ahead() {
        let found = from_the_future([&[(100, 400), (101, 400)][..], &[(101, 400), (9_000, 2)][..]]).unwrap();
        assert_eq!(found.code, "waits_from_the_future");
        assert!(found.remedy.contains("1970-04-13"), "{}", found.remedy);
        // A fair share, or not far, or nothing.
        assert_eq!(from_the_future([&[(100, 400), (9_000, 100)][..]]), None);
        assert_eq!(from_the_future([&[(100, 400), (110, 2)][..]]), None);
        assert_eq!(from_the_future([&[][..]]), None);
    }
}
