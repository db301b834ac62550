//! What was proposed and changed before steadies what is proposed next: hysteresis and cool-down of the guard.

// A test may fail.
#![allow(clippy::unwrap_used)]

use outwait::advice::{Change, Proposal};
use outwait::advise::{Case, History, advise};
use outwait::policy::{Entry, GiveUp};
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};

/// Half of the waits end evenly before 20 s, the other half at 90 s; a restart costs 2 s; 60 s are in force.
fn proposal(history: History, hysteresis: f64) -> Proposal {
    let mut tally = Tally::default();
    for i in 1..=2_000 {
        let age = if i % 2 == 0 { f64::from(i) / 100.0 } else { 90.0 };
        tally.add(&Wait::new(age, Ending::Done).unwrap());
    }
    let mut entry = Entry::without_policy();
    entry.worth.as_mut().unwrap().pause.gave_up = 2.0;
    entry.now = Some(GiveUp::After(60.0));
    entry.guard.largest_step = 1.0;
    entry.guard.hysteresis = hysteresis;
    advise(&Case { history, ..Case::new("courier", &tally) }, &entry, 1).advice.proposal.unwrap()
}

#[test]
fn a_standing_proposal_is_replaced_only_for_more_than_the_hysteresis() {
    let standing = History { standing: Some(24.0), ..History::default() };
    let fresh = proposal(History::default(), 0.005);
    assert_eq!(fresh.change, Change::Lower);
    assert!((fresh.to_s.unwrap() - 20.0).abs() < 1.0, "{fresh:?}");
    // 24 s lose about a ninth: within a wide hysteresis they stand, within a narrow one they do not.
    assert_eq!(proposal(standing, 0.3).to_s, Some(24.0));
    assert_eq!(proposal(standing, 0.005), fresh);
}

#[test]
fn no_change_before_the_rest_is_over() {
    let after = |days: f64| History { since_change: Some(days * 86_400.0), ..History::default() };
    assert_eq!(proposal(after(3.0), 0.005).change, Change::Keep);
    assert_eq!(proposal(after(8.0), 0.005).change, Change::Lower);
}
