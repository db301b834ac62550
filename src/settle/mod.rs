//! What people decided about give-up times: accepted, pinned, postponed or refused; by whom, when, why, and what the data
//! said that day.
//!
//! In: an advice and a person's word. Out: an entry in a history that only grows; an undo is an entry too. The plain file
//! that holds it ([`parse`], [`Settled::text`], [`insert`]) is made to be read, edited and compared in version control. No
//! files, no clock: the time of a decision is passed in.

mod decide;
mod read;
mod write;

use std::collections::BTreeMap;

use jiff::Timestamp;
use serde::{Serialize, Serializer};

pub use decide::{Decide, Refused, ahead, decide};
pub(crate) use decide::{proposal, round_up};
pub use read::{MAX_BYTES, Mistake, SettledError, parse};
pub use write::{insert, one};

use crate::advice::Caution;
use crate::advise::{Before, History, Past};
use crate::policy::GiveUp;
use crate::say;

/// Name of the file in a daemon's data folder.
pub const FILE: &str = "settled.yaml";
/// Version of the file's form.
pub const SCHEMA: &str = "outwait/settled/1";

/// What was decided.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case", tag = "state")]
pub enum State {
    /// The proposal is put in force.
    Accepted {
        /// The time.
        give_up_after: GiveUp,
    },
    /// A time of somebody's own is put in force, and stays whatever is proposed.
    Pinned {
        /// The time.
        give_up_after: GiveUp,
    },
    /// Not now; the proposal comes back then.
    Postponed {
        /// When.
        #[serde(serialize_with = "written")]
        until: Timestamp,
    },
    /// No; it comes back once the best time has left the band of that day.
    Refused,
    /// The last decision that was not undone counts no more.
    Undone,
}

fn written<S: Serializer>(time: &Timestamp, serializer: S) -> Result<S::Ok, S::Error> {
    serializer.collect_str(time)
}

impl State {
    /// Its name in the file.
    pub fn name(&self) -> &'static str {
        match self {
            State::Accepted { .. } => "accepted",
            State::Pinned { .. } => "pinned",
            State::Postponed { .. } => "postponed",
            State::Refused => "refused",
            State::Undone => "undone",
        }
    }

    /// The time that it puts in force.
    pub fn in_force(&self) -> Option<GiveUp> {
        match self {
            State::Accepted { give_up_after } | State::Pinned { give_up_after } => Some(*give_up_after),
            _ => None,
        }
    }
}

/// What the data said on the day of a decision. Times in s, infinite for never.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Grounds {
    /// Waits in the window.
    pub waits: u64,
    /// Of these, completed.
    pub done: u64,
    /// First time in the data, RFC 3339.
    pub from: Option<String>,
    /// Last time in the data, RFC 3339.
    pub to: Option<String>,
    /// The time in force before.
    pub in_force: Option<GiveUp>,
    /// The best time.
    pub advised: Option<GiveUp>,
    /// The step that was proposed.
    pub proposed: Option<GiveUp>,
    /// Every time between these was within the slack of the best, s.
    pub band: Option<[f64; 2]>,
    /// Share of the best rate that the time in force was expected to lose.
    pub loses: Option<f64>,
}

/// One decision.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Settlement {
    /// What.
    #[serde(flatten)]
    pub state: State,
    /// When.
    #[serde(serialize_with = "written")]
    pub at: Timestamp,
    /// Who.
    pub by: String,
    /// Why.
    pub why: String,
    /// What the data said; absent where nobody looked.
    pub grounds: Option<Grounds>,
}

impl Settlement {
    /// Whether it is the same decision: of the same person, moment and content.
    pub fn is(&self, other: &Settlement) -> bool {
        (self.at, self.state, &self.by) == (other.at, other.state, &other.by)
    }

    /// In words: what, by whom, when and why.
    pub fn words(&self) -> String {
        let what = match self.state {
            State::Accepted { give_up_after } | State::Pinned { give_up_after } => {
                format!("{} {}", self.state.name(), say::exact_duration(give_up_after.seconds()))
            }
            State::Postponed { until } => format!("postponed until {until}"),
            state => state.name().to_owned(),
        };
        let why = if self.why.trim().is_empty() { String::new() } else { format!(": {}", self.why) };
        format!("{what}, by {} at {}{why}", self.by, self.at)
    }
}

/// What was decided, as a command or the daemon tells it.
#[derive(Clone, Debug, Serialize)]
pub struct Document<'a> {
    /// `outwait/settle/1`.
    pub schema: &'static str,
    /// A stream each.
    pub settled: Vec<Told<'a>>,
}

/// A stream with what was decided.
#[derive(Clone, Debug, Serialize)]
pub struct Told<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// The decisions, the oldest first.
    pub decisions: &'a [Settlement],
    /// What to mind about what was put in force.
    pub cautions: &'a [Caution],
}

impl<'a> Document<'a> {
    /// With its schema.
    pub fn of(settled: Vec<Told<'a>>) -> Document<'a> {
        Document { schema: "outwait/settle/1", settled }
    }
}

/// What stands for a stream.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Standing<'a> {
    /// The decision that put the present time in force.
    pub in_force: Option<&'a Settlement>,
    /// The last decision that was not undone.
    pub last: Option<&'a Settlement>,
}

impl Standing<'_> {
    /// The settled time.
    pub fn give_up_after(&self) -> Option<GiveUp> {
        self.in_force.and_then(|settlement| settlement.state.in_force())
    }
}

/// Every decision on every stream, the oldest first.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Settled {
    streams: BTreeMap<String, Vec<Settlement>>,
}

impl Settled {
    /// The streams with a history, by name.
    pub fn streams(&self) -> impl Iterator<Item = (&str, &[Settlement])> {
        self.streams.iter().map(|(stream, history)| (stream.as_str(), history.as_slice()))
    }

    /// The history of a stream, the oldest first.
    pub fn history(&self, stream: &str) -> &[Settlement] {
        self.streams.get(stream).map(Vec::as_slice).unwrap_or_default()
    }

    /// Adds a decision, after those that are not younger.
    pub fn add(&mut self, stream: &str, settlement: Settlement) {
        let history = self.streams.entry(stream.to_owned()).or_default();
        let place = history.partition_point(|known| known.at <= settlement.at);
        history.insert(place, settlement);
    }

    /// Whether a decision is in it: of the same person, moment and content. Other words for why make no other decision.
    pub fn knows(&self, stream: &str, settlement: &Settlement) -> bool {
        self.history(stream).iter().any(|known| known.is(settlement))
    }

    /// What another has and this has not, streams by name, the oldest first.
    pub fn missing<'a>(&self, other: &'a Settled) -> Vec<(&'a str, &'a Settlement)> {
        let all = other.streams().flat_map(|(stream, history)| history.iter().map(move |one| (stream, one)));
        all.filter(|(stream, one)| !self.knows(stream, one)).collect()
    }

    /// What had been decided by then.
    pub fn by(&self, then: Timestamp) -> Settled {
        let mut before = self.clone();
        before.streams.values_mut().for_each(|history| history.retain(|one| one.at <= then));
        before
    }

    /// What stands for a stream.
    pub fn standing(&self, stream: &str) -> Standing<'_> {
        let mut stack: Vec<&Settlement> = Vec::new();
        for settlement in self.history(stream) {
            match settlement.state {
                State::Undone => _ = stack.pop(),
                _ => stack.push(settlement),
            }
        }
        Standing {
            in_force: stack.iter().rev().find(|s| s.state.in_force().is_some()).copied(),
            last: stack.last().copied(),
        }
    }

    /// The time of the newest decision of all.
    pub fn newest(&self) -> Option<Timestamp> {
        self.streams.values().flatten().map(|settlement| settlement.at).max()
    }

    /// The same as an advice takes it: the settled times are in force, and what was proposed last stands. `now`: Unix
    /// seconds, from which the rest after a change is counted.
    pub fn past(&self, now: f64) -> Past {
        let before = |stream: &String| {
            let standing = self.standing(stream);
            let seconds = |at: Timestamp| at.as_millisecond() as f64 / 1e3;
            let last = standing.last.and_then(|last| last.grounds.as_ref());
            let history = History {
                standing: last.and_then(|grounds| grounds.advised).map(GiveUp::seconds),
                since_change: standing.in_force.map(|change| (now - seconds(change.at)).max(0.0)),
            };
            (stream.clone(), Before { now: standing.give_up_after(), history })
        };
        self.streams.keys().map(before).collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn settlement(state: State, at: &str) -> Settlement {
        let grounds = Grounds { advised: Some(GiveUp::After(2.0)), ..Grounds::default() };
        Settlement {
            state,
            at: at.parse().unwrap(),
            by: "Ada".into(),
            why: "".into(),
            grounds: Some(grounds),
        }
    }

    #[test]
    fn an_undo_takes_back_the_last_decision_that_stands() {
        let mut settled = Settled::default();
        let four = State::Accepted { give_up_after: GiveUp::After(4.0) };
        let pinned = State::Pinned { give_up_after: GiveUp::Never };
        settled.add("desk", settlement(four, "2026-11-02T10:00:00Z"));
        settled.add("desk", settlement(pinned, "2026-11-09T10:00:00Z"));
        assert_eq!(settled.standing("desk").give_up_after(), Some(GiveUp::Never));
        settled.add("desk", settlement(State::Undone, "2026-11-09T11:00:00Z"));
        assert_eq!(settled.standing("desk").give_up_after(), Some(GiveUp::After(4.0)));
        settled.add("desk", settlement(State::Refused, "2026-11-16T10:00:00Z"));
        let standing = settled.standing("desk");
        assert_eq!(
            (standing.give_up_after(), standing.last.unwrap().state),
            (Some(GiveUp::After(4.0)), State::Refused)
        );
        let ten_days_later = "2026-11-12T10:00:00Z".parse::<Timestamp>().unwrap().as_second() as f64;
        let before = settled.past(ten_days_later).of("desk");
        assert_eq!(before.history, History { standing: Some(2.0), since_change: Some(864_000.0) });
        assert_eq!(before.now, Some(GiveUp::After(4.0)));
        settled.add("desk", settlement(State::Undone, "2026-11-17T10:00:00Z"));
        settled.add("desk", settlement(State::Undone, "2026-11-17T10:00:01Z"));
        settled.add("desk", settlement(State::Undone, "2026-11-17T10:00:02Z"));
        assert_eq!(settled.standing("desk"), Standing::default());
        assert_eq!(settled.history("desk").len(), 7);
    }
}
