//! The one place where tally, curve, tail, stopping and policy meet: a tally and a policy entry give an advice.
//! Pure: no clock, no files; the same seed gives the same numbers. METHODS.md sections 4 to 8, RECIPE.

mod believed;
mod bounds;
mod buckets;
mod cautions;
mod curves;
mod judge;
mod omission;
mod past;
mod pool;
mod shift;
mod streams;
mod study;
mod summary;

pub use believed::Believed;
pub(crate) use curves::aim_name;
pub use curves::{CURVE_SCHEMA, CurvePoint, Curves, Mark};
pub(crate) use judge::prices;
pub use past::{Before, Past};
pub use shift::Shift;
pub(crate) use streams::name_hash;
pub use streams::{EarlyLeave, Lenders, Terms};
pub use study::{Study, Survival, WHAT_IF_SCHEMA, WhatIf, WhatIfError};
pub(crate) use summary::cost_of_time;

use crate::advice::{Action, Advice, Blind, Caution, Decision, Evidence, RemainingWait, Tail, TailClass};
use crate::curve::ENOUGH;
use crate::policy::Entry;
use crate::say;
use crate::stopping::universal_schedule;
use crate::tally::{Cells, Tally};

use bounds::Bounds;
use judge::Judgement;
use pool::pool;

/// Fewer completions than this, and no tail is fitted at all.
const LEAST_COMPLETIONS: f64 = 5.0;
/// Attempts of the stop-gap that is offered while evidence is gathered.
const STOP_GAP_ATTEMPTS: usize = 8;

/// What is asked: one stream, its waits, and what is known around them.
#[derive(Clone, Copy, Debug)]
pub struct Case<'a> {
    /// Name of the stream.
    pub stream: &'a str,
    /// Its waits.
    pub tally: &'a Tally,
    /// Earlier and latest waits of the same window, to be held against each other; absent where they carry no times.
    pub periods: Option<(&'a Tally, &'a Tally)>,
    /// Why the ages may be in another unit, if something speaks for it.
    pub suspicion: Option<&'a str>,
    /// First attempts of streams of the same policy entry, from which a stream with few waits may borrow.
    pub siblings: &'a [&'a Cells],
    /// What was proposed and changed before.
    pub history: History,
}

/// What is remembered of a stream's give-up time; nothing unless said.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct History {
    /// The time that was proposed last, s, infinite for never: another replaces it only for more than the guard's
    /// `hysteresis`.
    pub standing: Option<f64>,
    /// How long ago the time in force was changed, s: no change is proposed before the guard's `cool_down` is over.
    pub since_change: Option<f64>,
}

impl<'a> Case<'a> {
    /// A stream and its waits, nothing else.
    pub fn new(stream: &'a str, tally: &'a Tally) -> Case<'a> {
        Case { stream, tally, periods: None, suspicion: None, siblings: &[], history: History::default() }
    }
}

/// The advice on one stream.
///
/// Never fails: what stands in the way is an action of its own (`gather_evidence`, `state_a_cost`) with its reason.
///
/// ```
/// use outwait::{advise::{advise, Case}, policy::Entry, tally::Tally, wait::{Ending, Wait}};
/// let mut tally = Tally::default();
/// for i in 1..=600 {
///     // Half of the waits are over before 20 s, the other half at 90 s.
///     let age = if i % 2 == 0 { f64::from(i) / 30.0 } else { 90.0 };
///     tally.add(&Wait::new(age, Ending::Done)?);
/// }
/// let mut entry = Entry::without_policy();
/// entry.worth.as_mut().unwrap().pause.gave_up = 2.0;
/// let advice = advise(&Case::new("courier", &tally), &entry, 1);
/// let give_up = advice.advice.give_up_after_s.unwrap();
/// assert!((19.0..23.0).contains(&give_up), "{give_up}");
/// # Ok::<(), outwait::wait::WaitError>(())
/// ```
pub fn advise(case: &Case<'_>, entry: &Entry, seed: u64) -> Advice {
    study(case, entry, seed).into_advice()
}

/// The curves behind the advice on one stream, over a grid of ages.
pub fn curves(case: &Case<'_>, entry: &Entry, seed: u64) -> Curves {
    study(case, entry, seed).curves()
}

/// What a give-up time (s, infinite for never) would do, set against the time in force and the advised one.
///
/// # Errors
/// [`WhatIfError`]: no time, or no curve to judge it by.
pub fn what_if(case: &Case<'_>, entry: &Entry, seed: u64, give_up_after: f64) -> Result<WhatIf, WhatIfError> {
    study(case, entry, seed).what_if(give_up_after)
}

/// The advice on one stream with what it rests on, for more than one question about it.
pub fn study(case: &Case<'_>, entry: &Entry, seed: u64) -> Study {
    let taken = case.tally.first_attempts();
    // Before the data are cut where nobody is watched: what hangs is older than that.
    let open = taken.waiting.clone();
    let whole = entry.whole(&taken);
    let own: &Cells = &whole;
    let thin = taken.totals()[0] < f64::from(entry.guard.evidence);
    let pooled = if thin { pool(own, case.siblings) } else { None };
    let cells = pooled.as_ref().map_or(own, |p| &p.cells).clone().before_gap(ENOUGH);
    let mut advice = Advice {
        stream: case.stream.to_owned(),
        kind: entry.kind.name().to_owned(),
        evidence: evidence(case.tally, &taken),
        tail: unread("too few waits have ended to say"),
        fits: Vec::new(),
        advice: nothing_yet(),
        cautions: Vec::new(),
    };
    advice.evidence.borrowed_share = pooled.as_ref().map(|p| p.share);
    let bounds = Bounds::of(&cells, entry);
    let judgement = match &bounds {
        Some(bounds) if cells.totals()[0] >= LEAST_COMPLETIONS => {
            Judgement::of(&cells, &open, entry, bounds, case, seed)
        }
        _ => None,
    };
    if let Some(judgement) = &judgement {
        advice.evidence.sight_s = Some(judgement.sight);
        advice.tail = summary::tail(&judgement.verdict);
        advice.fits = summary::fits(&judgement.ensemble);
    }
    let blind = buckets::blind(&cells);
    advice.advice = decide(&cells, entry, bounds.as_ref(), judgement.as_ref(), blind);
    let prices = match judgement.as_ref().and_then(|j| j.outcome.as_ref().ok()) {
        Some(settled) => Some((settled.worth, settled.retry)),
        None => judge::prices(entry),
    };
    let held = match advice.advice.action {
        Action::WaitItOut => advice.advice.ceiling_s,
        _ => advice.advice.give_up_after_s,
    };
    advice.advice.buckets = buckets::read(&cells, entry, bounds.as_ref(), prices, held);
    let shift = case.periods.and_then(|(earlier, latest)| {
        let bounds = bounds.as_ref()?;
        // Most windows have one period only.
        if earlier.counts()[0] == 0 || latest.counts()[0] == 0 {
            return None;
        }
        let whole = |tally: &Tally| entry.whole(&tally.first_attempts()).into_owned();
        Shift::between(&whole(earlier), &whole(latest), entry, bounds)
    });
    advice.cautions =
        cautions::all(case, entry, bounds.as_ref(), judgement.as_ref(), shift.as_ref(), &advice);
    advice
        .cautions
        .extend(advice.advice.buckets.as_ref().and_then(|cost| buckets::cautions(cost, entry.guard.slack)));
    if let Some(pooled) = &pooled {
        advice.cautions.push(cautions::borrowed(pooled));
    }
    Study { advice, cells, entry: entry.clone(), bounds, judgement }
}

/// The action, and everything that goes with it.
fn decide(
    cells: &Cells,
    entry: &Entry,
    bounds: Option<&Bounds>,
    judgement: Option<&Judgement>,
    blind: Option<Blind>,
) -> Decision {
    let mut decision = nothing_yet();
    if let Some(bounds) = bounds {
        (decision.floor_s, decision.ceiling_s) = (Some(bounds.floor), Some(bounds.ceiling));
    }
    if let Err(reason) = summary::cost_of_time(entry) {
        decision.action = Action::StateACost;
        decision.because = reason;
        return decision;
    }
    let done = cells.totals()[0];
    let needed = f64::from(entry.guard.evidence);
    // A time that no wait has shown would be an invention.
    let Some(judgement) = judgement.filter(|_| done >= needed && blind.is_none()) else {
        decision.because = if done < LEAST_COMPLETIONS {
            format!(
                "{} completions; no law can be read from fewer than {LEAST_COMPLETIONS}",
                say::count(done)
            )
        } else if let Some(blind) = blind {
            buckets::because(blind)
        } else if done >= needed {
            "the completions all have the same age or cannot be told apart, so no tail can be read".into()
        } else {
            format!("{} of the {} completions that the guard asks for", say::count(done), say::count(needed))
        };
        if let Some(bounds) = bounds {
            let base = bounds.typical.unwrap_or(bounds.floor).max(bounds.floor);
            let attempts = entry.retry.attempts.map_or(STOP_GAP_ATTEMPTS, |k| k as usize);
            decision.stop_gap_s = universal_schedule(base, bounds.ceiling, attempts.min(STOP_GAP_ATTEMPTS));
        }
        return decision;
    };
    match &judgement.outcome {
        Ok(settled) => {
            if let Some(bounds) = bounds {
                settled.fill(&mut decision, entry, bounds, judgement);
            }
        }
        Err(reason) => {
            decision.action = Action::StateACost;
            decision.because.clone_from(reason);
        }
    }
    decision
}

fn evidence(tally: &Tally, first: &Cells) -> Evidence {
    let [done, failed, gave_up, waiting] = tally.counts();
    let (seen, retries) = (tally.seen(), tally.retries());
    Evidence {
        waits: [done, failed, gave_up, waiting].into_iter().fold(0, u64::saturating_add),
        done,
        failed,
        gave_up,
        waiting,
        retries: retries.total() as u64,
        waited_s: first.waited() + retries.waited(),
        borrowed_share: None,
        sight_s: None,
        from: seen.and_then(|(from, _)| say::time(from)),
        to: seen.and_then(|(_, to)| say::time(to)),
    }
}

fn unread(reason: &str) -> Tail {
    Tail {
        class: TailClass::Undecided,
        heavy_weight: 0.0,
        light_weight: 0.0,
        remaining_wait: RemainingWait::Undecided,
        remaining_weights: [0.0; 4],
        reason: reason.to_owned(),
        xi: None,
    }
}

fn nothing_yet() -> Decision {
    Decision {
        action: Action::GatherEvidence,
        because: String::new(),
        give_up_after_s: None,
        interval_s: None,
        band_s: None,
        floor_s: None,
        ceiling_s: None,
        rate_per_s: None,
        rate_never_per_s: None,
        rate_now_per_s: None,
        expected_regret: None,
        regret_95: None,
        regret_now: None,
        done_share: None,
        attempts_per_request: None,
        p50_s: None,
        p99_s: None,
        now: None,
        never: None,
        proposal: None,
        rivals: Vec::new(),
        holding_on: Vec::new(),
        retry_budget: None,
        sticky: None,
        look: None,
        second_copy: None,
        schedule_s: Vec::new(),
        stop_gap_s: Vec::new(),
        buckets: None,
    }
}

/// A caution by its parts.
fn caution(code: &str, text: impl Into<String>, remedy: impl Into<String>) -> Caution {
    Caution { code: code.to_owned(), text: text.into(), remedy: remedy.into() }
}
