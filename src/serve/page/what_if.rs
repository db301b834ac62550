//! What another give-up time would do, in words: a row for the time asked about and those it is held against.

use serde::Serialize;

use crate::advice::Outcome;
use crate::advise::WhatIf;
use crate::say;
use crate::stopping::Aim;

/// How a rate is spoken of: per second, minute, hour or day, so that the number says something.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub(super) struct Earnings {
    /// What the rate is multiplied by.
    pub(super) factor: f64,
    /// What it then is.
    pub(super) unit: &'static str,
}

impl Earnings {
    /// For an aim, where about so much is earned.
    pub(super) fn of(aim: Option<Aim>, rate: f64) -> Earnings {
        const PER: [(f64, &str, &str); 4] = [
            (1.0, "worth per second", "completions per second"),
            (60.0, "worth per minute", "completions per minute"),
            (3_600.0, "worth per hour", "completions per hour"),
            (86_400.0, "worth per day", "completions per day"),
        ];
        let unit = match aim {
            Some(Aim::CarryingCost(_)) => return Earnings { factor: 1.0, unit: "worth per attempt" },
            Some(Aim::Deadline { .. }) => {
                return Earnings { factor: 1.0, unit: "probability of being in time" };
            }
            Some(Aim::Finish) => |per: &(f64, &'static str, &'static str)| per.2,
            _ => |per: &(f64, &'static str, &'static str)| per.1,
        };
        let per = PER.iter().find(|per| rate * per.0 >= 0.5).unwrap_or(&PER[3]);
        Earnings { factor: per.0, unit: unit(per) }
    }
}

/// A give-up time and what it does.
#[derive(Serialize)]
pub(super) struct Row {
    /// Which of them.
    pub(super) who: &'static str,
    pub(super) key: &'static str,
    pub(super) after: String,
    pub(super) earns: String,
    pub(super) done: String,
    pub(super) attempts: String,
    pub(super) half: String,
    pub(super) most: String,
    /// What is asked about, as a share of this one: what it earns and the load.
    pub(super) against: String,
    pub(super) load: String,
    /// For the script: the rate and the attempts.
    pub(super) rate: f64,
    pub(super) load_is: Option<f64>,
}

/// The rows, that of the time asked about first.
pub(super) fn rows(what: &WhatIf, earnings: Earnings) -> Vec<Row> {
    let held = [
        ("asked about", "asked", Some(what.asked)),
        ("advised", "advised", Some(what.advised)),
        ("in force", "now", what.now),
        ("never", "never", Some(what.never)),
    ];
    held.into_iter()
        .filter_map(|(who, key, outcome)| Some(row(who, key, outcome?, &what.asked, earnings)))
        .collect()
}

fn row(who: &'static str, key: &'static str, it: Outcome, asked: &Outcome, earnings: Earnings) -> Row {
    let time = |time: Option<f64>| time.map_or_else(|| "fewer are ever done".into(), say::duration);
    let ratio = |a: f64, b: f64| if b > 0.0 { format!("{}×", say::number(a / b)) } else { String::new() };
    let load = asked.attempts_per_request.zip(it.attempts_per_request);
    let is_other = key != "asked";
    Row {
        who,
        key,
        after: it.give_up_after_s.map_or_else(|| "never".into(), say::duration),
        earns: say::number(it.rate_per_s * earnings.factor),
        done: say::percent(it.done_share),
        attempts: it.attempts_per_request.map_or_else(|| "unknown".into(), say::number),
        half: time(it.p50_s),
        most: time(it.p99_s),
        against: if is_other { ratio(asked.rate_per_s, it.rate_per_s) } else { String::new() },
        load: load.filter(|_| is_other).map_or_else(String::new, |(a, b)| ratio(a, b)),
        rate: it.rate_per_s,
        load_is: it.attempts_per_request,
    }
}
