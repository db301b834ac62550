//! What to mind before acting, each with a stable code and what to do. METHODS.md sections 6, 8 and 11.

use super::bounds::Bounds;
use super::caution;
use super::judge::{Judgement, LoadCeiling, LongerTail, Settled};
use super::pool::Pooled;
use super::{Case, Shift};
use crate::advice::{Action, Advice, Caution, Change};
use crate::policy::{Entry, GiveUp, Kind};
use crate::say;
use crate::stopping::Aim;

/// Completions below which the advice is called thin, as a multiple of what the guard asks for.
const THIN: f64 = 2.0;
/// A rise of the expected regret just below the advised time that makes a cliff of it.
const CLIFF: f64 = 0.05;
/// Attempts per request above those of the time in force that are worth a word.
const HEAVIER: f64 = 1.02;
/// Stickiness from which it is worth a word.
const STICKY: f64 = 0.1;

/// Every caution that applies, the gravest first.
pub(super) fn all(
    case: &Case<'_>,
    entry: &Entry,
    bounds: Option<&Bounds>,
    judgement: Option<&Judgement>,
    shift: Option<&Shift>,
    advice: &Advice,
) -> Vec<Caution> {
    let mut found = Vec::new();
    if let Some(why) = case.suspicion {
        found.push(caution(
            "unit_suspicion",
            format!("the ages may be in another unit: {why}"),
            "check the unit before anything else; give ages in seconds or with their unit",
        ));
    }
    let decided = judgement.and_then(|j| Some((j, j.outcome.as_ref().ok()?)));
    if let Some((judgement, settled)) =
        decided.filter(|_| matches!(advice.advice.action, Action::GiveUpAfter | Action::WaitItOut))
    {
        found.extend(edge_of_sight(judgement, settled, advice));
        found.extend(not_repeatable(entry, settled));
        found.extend(heavier_load(settled));
        found.extend(load_ceiling(entry, settled));
        found.extend(sticky(settled));
        found.extend(tail_lengthened(settled));
        found.extend(near_a_bulk(settled));
        found.extend(shift.map(law_shifted));
        found.extend(few_waits(entry, advice, settled));
        found.extend(step_limited(entry, advice));
        found.extend(deadline(entry, settled));
    } else if let Some(shift) = shift {
        found.push(law_shifted(shift));
    }
    if judgement.is_some_and(|j| j.verdict.hanging) {
        found.push(caution(
            "open_waits_hang",
            "some waits are open far longer than any completion took: they may never end",
            "look at them one by one; what hangs for good is a fault to mend, not a tail to wait for",
        ));
    }
    if bounds.is_some_and(|b| b.free_restart) && decided.is_some() {
        found.push(caution(
            "free_restart",
            "the policy names no pause, no cost of an attempt and no floor, so a restart looks free and the earliest \
             give-up looks best; the floor is therefore the 5th percentile of completions",
            "state the pause after a give-up or the cost of an attempt; every real restart has one",
        ));
    }
    found
}

/// What was lent by other streams is said.
pub(super) fn borrowed(pooled: &Pooled) -> Caution {
    caution(
        "borrowed_evidence",
        format!(
            "the stream has few waits of its own: {} of the completions behind this advice are lent by {} of the same \
             policy entry, which look alike so far",
            say::percent(pooled.share),
            if pooled.siblings == 1 {
                "another stream".to_owned()
            } else {
                format!("{} streams", pooled.siblings)
            }
        ),
        "weigh again when it has enough of its own, or give it an entry of its own if it is another kind of wait",
    )
}

/// Whether the optimum may lie where a timeout hides the data, or where too few waits lead.
fn edge_of_sight(judgement: &Judgement, settled: &Settled, advice: &Advice) -> Option<Caution> {
    let reaches_past = settled.at > judgement.sight || settled.sides.beyond > 0.05;
    if judgement.unseen < 0.005 || !reaches_past {
        return None;
    }
    let (unseen, sight) = (say::percent(judgement.unseen), say::duration(judgement.sight));
    let beyond = format!(
        "{} of the weight puts the best time past that, where the stated loss covers what the fitted laws differ in but \
         not what no wait has shown",
        say::percent(settled.sides.beyond)
    );
    if advice.evidence.gave_up + advice.evidence.waiting == 0 {
        return Some(caution(
            "edge_of_sight",
            format!(
                "{unseen} of the waits lasted longer than {sight}, too few to say what comes after, and {beyond}"
            ),
            "weigh again with more waits",
        ));
    }
    let remedy = match settled.sides.median_beyond {
        Some(to) if settled.sides.disagree() => format!(
            "let a share of the waits run to {} and weigh again before trusting either side",
            say::duration(to)
        ),
        _ => "let a share of the waits run on past it for a while, and weigh again".into(),
    };
    Some(caution(
        "edge_of_sight",
        format!(
            "{unseen} of the waits are still open at {sight}, past which hardly any were watched, and {beyond}"
        ),
        remedy,
    ))
}

fn not_repeatable(entry: &Entry, settled: &Settled) -> Option<Caution> {
    if entry.retry.repeatable || settled.wait_it_out {
        return None;
    }
    let (text, remedy) = match entry.kind {
        Kind::Reply => (
            "who was asked may still answer after one has given up, and then two answers arrive",
            "withdraw the first enquiry when giving up, or make sure that a second answer does no harm; then say \
             `repeatable: true`",
        ),
        Kind::Request | Kind::Job => (
            "giving up does not stop the work behind the wait, and a retry does it again; the policy does not say that it \
             may be repeated",
            "retry only what is idempotent or was cancelled for certain; then say `repeatable: true`",
        ),
    };
    Some(caution("work_repeated", text, remedy))
}

/// Any advice that gives up sooner puts more attempts on the other side.
fn heavier_load(settled: &Settled) -> Option<Caution> {
    let (advised, now) = settled.attempts();
    let (advised, now) = (advised?, now?);
    if settled.wait_it_out || advised <= now * HEAVIER {
        return None;
    }
    Some(caution(
        "heavier_load",
        format!(
            "attempts per request go from {} to {}; abandoned work may go on behind the wait, and a busy system can \
             collapse at loads that look safe",
            say::number(now),
            say::number(advised)
        ),
        "lower the time in steps, cap the retries by a budget, and watch the load of the other side at each step",
    ))
}

fn load_ceiling(entry: &Entry, settled: &Settled) -> Option<Caution> {
    let ceiling = say::number(entry.retry.load_ceiling?);
    match settled.load {
        LoadCeiling::Kept => None,
        LoadCeiling::Moved(from) => Some(caution(
            "load_ceiling_binds",
            format!(
                "the ceiling of {ceiling} attempts per request moved the advice from {} to {}",
                say::duration(from),
                settled.time()
            ),
            "raise the ceiling only if the other side bears it",
        )),
        LoadCeiling::Unreachable => Some(caution(
            "load_ceiling_unreachable",
            format!("no give-up time keeps attempts per request at or below {ceiling}"),
            "raise the ceiling, cap the attempts, or find out why so many attempts end undone",
        )),
    }
}

fn sticky(settled: &Settled) -> Option<Caution> {
    let sticky = settled.sticky.as_ref()?;
    let high = sticky.interval.map_or(sticky.value, |i| i[1]);
    let flips = sticky.flips_at.filter(|_| !settled.wait_it_out);
    let unknown = sticky.from == "unknown";
    if let Some(flip) = flips.filter(|&flip| unknown && flip < 0.5) {
        return Some(caution(
            "stickiness_unknown",
            format!(
                "nothing tells how often a retry meets the fate of the attempt it replaces; from a probability of {} on, \
                 waiting it out would be best",
                say::number(flip)
            ),
            "number the attempts in the data (`attempt`), or state `sticky` in the policy",
        ));
    }
    (high >= STICKY).then(|| {
        caution(
            "sticky_failures",
            format!(
                "a retry meets the fate of the attempt it replaces with probability {}: the same cause, the same wait; the \
                 advice counts it",
                say::number(sticky.value)
            ),
            "look for the common cause; send retries elsewhere if there is an elsewhere",
        )
    })
}

fn tail_lengthened(settled: &Settled) -> Option<Caution> {
    let LongerTail { mean, mean_never, late } = settled.longer_tail?;
    let yet = match late {
        Some([with, without]) => format!(
            "and yet one request in a thousand then takes over {} instead of {}",
            say::duration(with),
            say::duration(without)
        ),
        None => "and yet makes very long totals more frequent".to_owned(),
    };
    Some(caution(
        "tail_lengthened",
        format!(
            "giving up shortens the mean total from {} to {} {yet}",
            say::duration(mean_never),
            say::duration(mean)
        ),
        "if the slowest requests are what hurts, hold on longer or cap the attempts",
    ))
}

/// Giving up just before a bulk of completions costs far more than just after.
fn near_a_bulk(settled: &Settled) -> Option<Caution> {
    (!settled.wait_it_out && settled.sooner_costs > CLIFF).then(|| {
        caution(
            "bulk_just_before",
            format!(
                "a bulk of completions comes just before the advised time: giving up an eighth sooner loses {} more",
                say::percent(settled.sooner_costs)
            ),
            "round the time up, never down, and look again when the service becomes slower",
        )
    })
}

fn law_shifted(shift: &Shift) -> Caution {
    let (way, more) = if shift.gap > 0.0 { ("longer", "more") } else { ("shorter", "fewer") };
    let loses = shift
        .loses
        .map(|l| format!("; the best time of before would lose {} under the latest law", say::percent(l)));
    caution(
        "law_shifted",
        format!(
            "waits of the latest week are {way} than before: {} {more} of them are still open at {}{}",
            say::percent(shift.gap.abs()),
            say::duration(shift.at),
            loses.unwrap_or_default()
        ),
        "weigh the latest week alone (`--since`), and find out what changed before signing",
    )
}

fn few_waits(entry: &Entry, advice: &Advice, settled: &Settled) -> Option<Caution> {
    let done = advice.evidence.done as f64;
    let thin = done < THIN * f64::from(entry.guard.evidence);
    let bucketed = !thin && advice.advice.buckets.as_ref().is_some_and(|buckets| buckets.share > 0.5);
    let (little, more) = if bucketed {
        ("known by their buckets leave much open", "with more waits or narrower buckets")
    } else {
        ("are few", "with more waits")
    };
    (thin || settled.regret.percentile_95 > 0.1).then(|| {
        caution(
            "few_waits",
            format!(
                "{} completions {little}: what the advised time loses may come to {} of what could be earned",
                say::count(done),
                say::percent(settled.regret.percentile_95)
            ),
            format!("move in the advised direction by part of the way, and weigh again {more}"),
        )
    })
}

fn step_limited(entry: &Entry, advice: &Advice) -> Option<Caution> {
    let proposal = advice.advice.proposal.filter(|p| p.step_limited && p.change != Change::Keep)?;
    let now = entry.now.map_or(f64::INFINITY, GiveUp::seconds);
    Some(caution(
        "largest_step",
        format!(
            "the guard allows {} at a time, so this change goes from {} to {}",
            say::percent(entry.guard.largest_step),
            say::duration(now),
            proposal.to_s.map_or("never".into(), say::duration)
        ),
        "take the step, watch, weigh again",
    ))
}

fn deadline(entry: &Entry, settled: &Settled) -> Option<Caution> {
    let within = entry.worth.is_some_and(|w| matches!(w.aim, Aim::Deadline { attempts: 2.., .. }));
    (within && !settled.wait_it_out && !entry.retry.repeatable).then(|| {
        caution(
            "deadline_retries",
            "the schedule starts several attempts of one piece of work before the deadline",
            "use it only where an abandoned attempt is cancelled for certain",
        )
    })
}

impl Settled {
    /// Attempts per request at the advised time and at the time in force.
    fn attempts(&self) -> (Option<f64>, Option<f64>) {
        (self.advised().attempts_per_request, self.in_force().and_then(|o| o.attempts_per_request))
    }
}
