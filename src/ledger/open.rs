//! Open waits: a start is kept until its end comes, and the two make one wait.
//!
//! Either half may come first, and either may come twice. That takes a memory: after the two have met, what they
//! were is kept for a while, so that a repeated half is known as a repeat and not taken for a new wait.

use std::collections::HashMap;

use super::batch::{Event, EventKey, Half};
use crate::wait::{Ending, Wait};

/// What is known under one stream, id and attempt.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum State {
    /// It started and is open.
    Open { started: f64, entered: f64 },
    /// Its end came before its start.
    Ended { ended: f64, ending: Ending },
    /// Both came; it is counted.
    Joined { started: f64, ended: f64 },
}

/// A state with the time since when it stands, Unix seconds.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Filed {
    pub(super) state: State,
    pub(super) since: f64,
}

impl State {
    /// Whether it awaits its other half.
    pub(super) fn is_single(&self) -> bool {
        !matches!(self, State::Joined { .. })
    }
}

/// What one half leads to.
#[derive(Debug, PartialEq)]
enum Step {
    /// A new state.
    Keep(State),
    /// A whole wait.
    Join(State, Wait),
    /// Nothing to close.
    Nothing,
    /// Known already; nothing changes.
    Again,
    /// No wait can be made of it; nothing changes.
    Refused,
}

fn step(state: Option<State>, half: Half, attempt: u32) -> Step {
    match (state, half) {
        (Some(State::Open { started, .. }), Half::Close { ended }) if ended >= started => {
            Step::Keep(State::Joined { started, ended })
        }
        (_, Half::Close { .. }) => Step::Nothing,
        (None, Half::Start { started, entered }) => Step::Keep(State::Open { started, entered }),
        (None, Half::End { ended, ending }) => Step::Keep(State::Ended { ended, ending }),
        (Some(State::Open { .. }), Half::Start { .. }) | (Some(State::Ended { .. }), Half::End { .. }) => {
            Step::Again
        }
        (Some(State::Open { started, entered }), Half::End { ended, ending }) => {
            join(started, entered, ended, ending, attempt)
        }
        (Some(State::Ended { ended, ending }), Half::Start { started, entered }) => {
            // An end from before this start belonged to another use of the id, whose start was lost.
            if started >= ended {
                return Step::Keep(State::Open { started, entered });
            }
            join(started, entered, ended, ending, attempt)
        }
        // Only a start after the end can begin another wait under the same id; everything else is a late repeat.
        (Some(State::Joined { ended, .. }), Half::Start { started, entered }) if started >= ended => {
            Step::Keep(State::Open { started, entered })
        }
        (Some(State::Joined { started, ended }), half) => {
            let same = match half {
                Half::Start { started: again, .. } => again == started,
                Half::End { ended: again, .. } | Half::Close { ended: again } => again == ended,
            };
            if same { Step::Again } else { Step::Refused }
        }
    }
}

fn join(started: f64, entered: f64, ended: f64, ending: Ending, attempt: u32) -> Step {
    let wait = Wait::new(ended - started, ending)
        .and_then(|wait| wait.with_at(ended)?.with_attempt(attempt)?.with_entered(entered));
    match wait {
        Ok(wait) => Step::Join(State::Joined { started, ended }, wait),
        Err(_) => Step::Refused,
    }
}

/// What the events of one batch lead to.
#[derive(Debug, Default)]
pub(super) struct Outcome {
    /// New states.
    pub(super) changed: HashMap<EventKey, Filed>,
    /// Waits that became whole, with their streams.
    pub(super) waits: Vec<(Box<str>, Wait)>,
    pub(super) again: u64,
    pub(super) refused: u64,
    /// How many more await their other half, and how many more are joined.
    pub(super) singles: i64,
    pub(super) joined: i64,
}

/// Takes a batch's events in their order. `find` gives what was known before the batch; `now` is filed with what is
/// new.
pub(super) fn settle<E>(
    events: &[Event],
    now: f64,
    mut find: impl FnMut(&EventKey) -> Result<Option<Filed>, E>,
) -> Result<Outcome, E> {
    let mut outcome = Outcome::default();
    for Event { key, half } in events {
        let before = match outcome.changed.get(key) {
            Some(filed) => Some(filed.state),
            None => find(key)?.map(|filed| filed.state),
        };
        let after = match step(before, *half, key.attempt) {
            Step::Keep(state) => state,
            Step::Join(state, wait) => {
                outcome.waits.push((key.stream.clone(), wait));
                state
            }
            Step::Nothing => continue,
            Step::Again => {
                outcome.again += 1;
                continue;
            }
            Step::Refused => {
                outcome.refused += 1;
                continue;
            }
        };
        for (state, sign) in [(before, -1), (Some(after), 1)] {
            match state {
                None => {}
                Some(state) if state.is_single() => outcome.singles += sign,
                Some(_) => outcome.joined += sign,
            }
        }
        outcome.changed.insert(key.clone(), Filed { state: after, since: now });
    }
    Ok(outcome)
}

#[cfg(test)]
mod tests {
    use super::*;

    const START: Half = Half::Start { started: 10.0, entered: 0.0 };
    const END: Half = Half::End { ended: 12.5, ending: Ending::Failed };

    /// Takes halves one after the other; the waits they make.
    fn take(halves: &[Half]) -> (Option<State>, Vec<Wait>) {
        let (mut state, mut waits) = (None, Vec::new());
        for half in halves {
            match step(state, *half, 2) {
                Step::Keep(next) => state = Some(next),
                Step::Join(next, wait) => {
                    state = Some(next);
                    waits.push(wait);
                }
                Step::Nothing | Step::Again | Step::Refused => {}
            }
        }
        (state, waits)
    }

    #[test]
    fn either_order_any_repeats_one_wait() {
        let wait = Wait::new(2.5, Ending::Failed).unwrap().with_at(12.5).unwrap().with_attempt(2).unwrap();
        for halves in [
            &[START, END][..],
            &[END, START],
            &[START, START, END, END],
            &[END, END, START, START, END],
            &[START, END, START, END],
        ] {
            assert_eq!(take(halves).1, [wait], "{halves:?}");
        }
    }

    #[test]
    fn an_id_may_be_used_again_later() {
        let (later, end) =
            (Half::Start { started: 20.0, entered: 0.0 }, Half::End { ended: 21.0, ending: Ending::Done });
        let (_, waits) = take(&[START, END, later, END, end, later, START]);
        assert_eq!(waits.len(), 2);
        assert_eq!(waits[1].at(), Some(21.0));
    }

    #[test]
    fn a_whole_wait_closes_and_counts_nothing() {
        let close = Half::Close { ended: 12.5 };
        let (state, waits) = take(&[START, close, START]);
        assert_eq!((state, waits.len()), (Some(State::Joined { started: 10.0, ended: 12.5 }), 0));
        assert_eq!(take(&[close]).0, None);
        assert_eq!(take(&[START, Half::Close { ended: 9.0 }]).0, take(&[START]).0);
    }

    #[test]
    fn what_makes_no_wait_changes_nothing() {
        let early = Half::End { ended: 9.0, ending: Ending::Done };
        let (state, waits) = take(&[START, early]);
        assert_eq!((state, waits.len()), (Some(State::Open { started: 10.0, entered: 0.0 }), 0));
        assert_eq!(step(state, early, 1), Step::Refused);
        // An end left over from another use of the id does not hide a new start.
        assert_eq!(take(&[early, START]).0, state);
    }
}
