//! A person's word on one advice, held against the guards of the policy.

use jiff::Timestamp;

use super::{Grounds, Settled, Settlement, State};
use crate::advice::{Action, Advice, Change};
use crate::policy::{Entry, GiveUp};
use crate::say;

/// What somebody wants.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Decide {
    /// Put the proposal in force.
    Accept,
    /// Put in force what was shown as the proposal. It is still one if the proposal has moved by less than a hundredth, or
    /// the best time's band holds it.
    AcceptShown(GiveUp),
    /// Put this time in force, whatever is proposed.
    Pin(GiveUp),
    /// Look again then.
    Postpone(Timestamp),
    /// No.
    Refuse,
    /// Take the last decision back.
    Undo,
}

/// Why a decision is not taken.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Refused {
    /// The advice proposes no change.
    #[error("{stream}: nothing is proposed: {why}")]
    NothingProposed {
        /// The stream.
        stream: String,
        /// What is advised instead.
        why: String,
    },
    /// The time is against a guard.
    #[error("{stream}: {} is against `guard: {guard}: {bound}` of the policy{at}", say::exact_duration(*time))]
    Guard {
        /// The stream.
        stream: String,
        /// The time, s.
        time: f64,
        /// The guard's key.
        guard: &'static str,
        /// Its value as the policy would have it.
        bound: String,
        /// Where the policy says so; may be empty.
        at: String,
    },
    /// What was shown is no longer what is proposed.
    #[error("{stream}: {} was shown, and {} is proposed by now", say::exact_duration(*shown), say::exact_duration(*proposed))]
    Moved {
        /// The stream.
        stream: String,
        /// The time shown, s.
        shown: f64,
        /// The time proposed, s.
        proposed: f64,
    },
    /// Nothing has been decided yet.
    #[error("{stream}: there is no decision to undo")]
    NothingToUndo {
        /// The stream.
        stream: String,
    },
    /// The time to look again is not ahead.
    #[error("{stream}: {until} is not ahead")]
    Past {
        /// The stream.
        stream: String,
        /// The time named.
        until: Timestamp,
    },
}

impl Refused {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            Refused::NothingProposed { .. } => {
                "accept it when a change is proposed, or `--pin` a time of your own"
            }
            Refused::Guard { guard: "largest_step", .. } => {
                "take a step within it and another later, or widen the guard in the policy"
            }
            Refused::Guard { .. } => "choose a time within it, or widen the guard in the policy",
            Refused::Moved { .. } => "look at what is proposed now, and decide on that",
            Refused::NothingToUndo { .. } => "see `outwait settle STREAM --history`",
            Refused::Past { .. } => "name a later time, or a duration from now (`14d`)",
        }
    }
}

/// The entry that a decision makes. `entry`: the policy's, with the time in force; `at`: now.
///
/// An accepted time is rounded up to three significant digits, and not above the ceiling: the band makes more of them
/// worthless, and a bulk of completions may come just before (METHODS.md section 8).
///
/// # Errors
/// [`Refused`], which names the guard.
pub fn decide(
    what: Decide,
    stream: &str,
    advice: Option<&Advice>,
    entry: &Entry,
    settled: &Settled,
    at: Timestamp,
    (by, why): (&str, &str),
) -> Result<Settlement, Refused> {
    let grounds = advice.map(|advice| grounds(advice, entry));
    let state = match what {
        Decide::Accept | Decide::AcceptShown(_) => {
            let time = proposed(stream, advice)?;
            let mut time = match time {
                GiveUp::After(seconds) => GiveUp::After(round_up(seconds, entry)),
                GiveUp::Never => GiveUp::Never,
            };
            if let Decide::AcceptShown(shown) = what {
                let (shown, proposed) = (shown.seconds(), time.seconds());
                let band = advice.and_then(|advice| advice.advice.band_s);
                let good = shown == proposed
                    || (shown / proposed - 1.0).abs() < 0.01
                    || band.is_some_and(|[low, high]| (low..=high).contains(&shown));
                if !good {
                    return Err(Refused::Moved { stream: stream.to_owned(), shown, proposed });
                }
                if shown.is_finite() {
                    time = GiveUp::After(shown);
                }
            }
            within_guards(stream, time, entry, true)?;
            State::Accepted { give_up_after: time }
        }
        Decide::Pin(time) => {
            within_guards(stream, time, entry, false)?;
            State::Pinned { give_up_after: time }
        }
        Decide::Postpone(until) if until <= at => {
            return Err(Refused::Past { stream: stream.to_owned(), until });
        }
        Decide::Postpone(until) => State::Postponed { until },
        Decide::Refuse => State::Refused,
        Decide::Undo => {
            if settled.standing(stream).last.is_none() {
                return Err(Refused::NothingToUndo { stream: stream.to_owned() });
            }
            State::Undone
        }
    };
    Ok(Settlement { state, at, by: by.to_owned(), why: why.to_owned(), grounds })
}

/// A time to look again at: a time, a date (its beginning, UTC), or a duration from now.
pub fn ahead(text: &str, now: Timestamp) -> Option<Timestamp> {
    let span = || {
        let seconds = say::parse_duration(text).ok().filter(|s| text.parse::<f64>().is_err() && *s > 0.0)?;
        now.checked_add(jiff::SignedDuration::try_from_secs_f64(seconds).ok()?).ok()
    };
    let date = || {
        let date: jiff::civil::Date = text.parse().ok()?;
        jiff::tz::Offset::UTC.to_timestamp(date.to_datetime(jiff::civil::Time::midnight())).ok()
    };
    text.parse().ok().or_else(span).or_else(date)
}

/// What an advice puts forward: the next step, or the advised time where none is in force.
pub(crate) fn proposal(advice: &Advice) -> Option<GiveUp> {
    let decision = &advice.advice;
    let time = |t: Option<f64>| t.map_or(GiveUp::Never, GiveUp::After);
    match (decision.proposal, decision.action) {
        (Some(proposal), _) if proposal.change == Change::Keep => None,
        (Some(proposal), _) => Some(time(proposal.to_s)),
        (None, Action::GiveUpAfter | Action::WaitItOut) => Some(time(decision.give_up_after_s)),
        (None, _) => None,
    }
}

fn proposed(stream: &str, advice: Option<&Advice>) -> Result<GiveUp, Refused> {
    let nothing = |why: &str| Refused::NothingProposed { stream: stream.to_owned(), why: why.to_owned() };
    let advice = advice.ok_or_else(|| nothing("there are no waits of it"))?;
    let kept = advice.advice.proposal.is_some_and(|p| p.change == Change::Keep);
    let why = if kept { "the time in force is kept" } else { &advice.advice.because };
    proposal(advice).ok_or_else(|| nothing(why))
}

fn grounds(advice: &Advice, entry: &Entry) -> Grounds {
    let (evidence, decision) = (&advice.evidence, &advice.advice);
    let advised = match decision.action {
        Action::GiveUpAfter => decision.give_up_after_s.map(GiveUp::After),
        Action::WaitItOut => Some(GiveUp::Never),
        Action::GatherEvidence | Action::StateACost => None,
    };
    Grounds {
        waits: evidence.waits,
        done: evidence.done,
        from: evidence.from.clone(),
        to: evidence.to.clone(),
        in_force: entry.now,
        advised,
        proposed: proposal(advice),
        band: decision.band_s,
        loses: decision.regret_now,
    }
}

/// Three significant digits, upwards; not above the ceiling.
pub(crate) fn round_up(seconds: f64, entry: &Entry) -> f64 {
    let unit = 10f64.powi(seconds.log10().floor() as i32 - 2);
    // A little less than a whole unit more is rounding error of the division.
    let rounded = (seconds / unit - 1e-9).ceil() * unit;
    // To the nanosecond, as it is written.
    let rounded = (rounded * 1e9).round() / 1e9;
    let step = entry.now.map_or(f64::INFINITY, |now| now.seconds() * (1.0 + entry.guard.largest_step));
    rounded.min(entry.guard.ceiling.unwrap_or(f64::INFINITY)).min(step)
}

/// Refuses what is against a guard. An accepted `never` is waiting it out up to the ceiling.
fn within_guards(stream: &str, time: GiveUp, entry: &Entry, accepted: bool) -> Result<(), Refused> {
    let (guard, seconds) = (&entry.guard, time.seconds());
    let against = |name: &'static str, bound: String| {
        let at = if entry.line > 0 { format!(" (line {})", entry.line) } else { String::new() };
        Err(Refused::Guard { stream: stream.to_owned(), time: seconds, guard: name, bound, at })
    };
    let slightly = 1e-9;
    if let Some(floor) = guard.floor.filter(|floor| seconds < floor * (1.0 - slightly)) {
        return against("floor", say::exact_duration(floor));
    }
    let endless = accepted && seconds.is_infinite();
    if let Some(ceiling) = guard.ceiling.filter(|ceiling| seconds > ceiling * (1.0 + slightly) && !endless) {
        return against("ceiling", say::exact_duration(ceiling));
    }
    // From never there is no share to step by.
    if let Some(now) = entry.now.map(GiveUp::seconds).filter(|now| now.is_finite()) {
        let up = seconds > now * (1.0 + guard.largest_step) * (1.0 + slightly);
        let down = seconds < now * (1.0 - guard.largest_step) * (1.0 - slightly);
        if up || down {
            let bound = format!("{} from {}", say::percent(guard.largest_step), say::exact_duration(now));
            return against("largest_step", bound);
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn up_never_down() {
        let entry = Entry::without_policy();
        for (seconds, rounded) in
            [(0.076_512, 0.0766), (0.4, 0.4), (1.0, 1.0), (1234.5, 1240.0), (0.0999, 0.0999)]
        {
            assert!(
                (round_up(seconds, &entry) - rounded).abs() < 1e-9,
                "{seconds} {}",
                round_up(seconds, &entry)
            );
        }
        let mut entry = entry;
        entry.guard.ceiling = Some(0.0765);
        assert_eq!(round_up(0.076_45, &entry), 0.0765);
    }

    #[test]
    fn guards_are_named() {
        let mut entry = Entry::without_policy();
        (entry.guard.floor, entry.guard.ceiling) = (Some(0.1), Some(4.0));
        entry.now = Some(GiveUp::After(1.0));
        let refused = |time| match within_guards("desk", time, &entry, false) {
            Err(Refused::Guard { guard, .. }) => Some(guard),
            _ => None,
        };
        assert_eq!(refused(GiveUp::After(0.05)), Some("floor"));
        assert_eq!(refused(GiveUp::After(5.0)), Some("ceiling"));
        assert_eq!(refused(GiveUp::Never), Some("ceiling"));
        assert_eq!(refused(GiveUp::After(1.6)), Some("largest_step"));
        assert_eq!(refused(GiveUp::After(0.4)), Some("largest_step"));
        assert_eq!(refused(GiveUp::After(1.5)), None);
        let told = within_guards("desk", GiveUp::After(5.0), &entry, false).unwrap_err().to_string();
        assert_eq!(told, "desk: 5s is against `guard: ceiling: 4s` of the policy");
    }
}
