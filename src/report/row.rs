//! One stream of the week.

use jiff::Timestamp;
use serde::{Deserialize, Serialize};

use super::Was;
use crate::advice::{Action, Advice, Caution, Change, Outcome, RemainingWait, TailClass};
use crate::policy::{Entry, GiveUp};
use crate::say;
use crate::settle::{Settlement, Standing, State};
use crate::stopping::Aim;

const DAY: f64 = 86_400.0;
const WEEK: f64 = 7.0 * DAY;

/// What to do about a stream.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Verdict {
    /// Hold on longer.
    Raise,
    /// Give up sooner.
    Lower,
    /// A time is advised where nothing says which is in force.
    Set,
    /// The best time may lie where no wait was watched: let some run on.
    LookFurther,
    /// Nothing that a change would win is worth it.
    Keep,
    /// Too few waits.
    NotEnoughEvidence,
    /// The policy does not say what waiting costs.
    StateACost,
}

impl Verdict {
    /// All of them.
    pub const ALL: [Verdict; 7] = [
        Verdict::Raise,
        Verdict::Lower,
        Verdict::Set,
        Verdict::LookFurther,
        Verdict::Keep,
        Verdict::NotEnoughEvidence,
        Verdict::StateACost,
    ];

    /// Whether it puts another time in force.
    pub fn changes(self) -> bool {
        matches!(self, Verdict::Raise | Verdict::Lower | Verdict::Set)
    }

    /// In words, for a list.
    pub fn words(self) -> &'static str {
        match self {
            Verdict::Raise => "raise",
            Verdict::Lower => "lower",
            Verdict::Set => "set",
            Verdict::LookFurther => "look further",
            Verdict::Keep => "keep",
            Verdict::NotEnoughEvidence => "not enough evidence",
            Verdict::StateACost => "no cost of time stated",
        }
    }
}

/// What stands from before.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Sign {
    /// `accepted`, `pinned`, `postponed` or `refused`.
    pub state: &'static str,
    /// When, RFC 3339.
    pub at: String,
    /// Who.
    pub by: String,
    /// Why.
    pub why: String,
}

impl Sign {
    fn of(last: &Settlement) -> Sign {
        Sign { state: last.state.name(), at: last.at.to_string(), by: last.by.clone(), why: last.why.clone() }
    }
}

/// One stream's week. Times in s; absent where they cannot be told, `never` where nobody gives up.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Row {
    /// Which waiting process.
    pub stream: String,
    /// `request`, `job` or `reply`.
    pub kind: String,
    /// What to do.
    pub verdict: Verdict,
    /// Why, in a sentence.
    pub because: String,
    /// The time in force.
    pub old_s: Option<GiveUp>,
    /// What to put in force.
    pub new_s: Option<GiveUp>,
    /// The best time, towards which `new_s` is a step.
    pub advised_s: Option<GiveUp>,
    /// 90% interval of the best time.
    pub interval_s: Option<[f64; 2]>,
    /// Every time between these is about as good.
    pub band_s: Option<[f64; 2]>,
    /// What the change is worth, in the unit of worth a day: the difference of the rates times the time waited a day (of
    /// the score times the attempts a day, for aims that are counted by the attempt).
    pub worth_per_day: Option<f64>,
    /// Hours of waiting a day that the same earnings would no longer take.
    pub hours_per_day: Option<f64>,
    /// Share of the best rate that the time in force loses.
    pub loses: Option<f64>,
    /// Share of the best rate that the advised time is expected to lose.
    pub expected_regret: Option<f64>,
    /// Its 95th percentile.
    pub regret_95: Option<f64>,
    /// Load on the other side: attempts per request now.
    pub attempts_now: Option<f64>,
    /// And after the change.
    pub attempts_then: Option<f64>,
    /// Waits in the window.
    pub waits: u64,
    /// Of these, completed.
    pub done: u64,
    /// Heavy or light; absent for a stream without waits.
    pub tail: Option<TailClass>,
    /// Whether the remaining wait grows or shrinks.
    pub remaining_wait: Option<RemainingWait>,
    /// What changed since last week, in sentences.
    pub changed: Vec<String>,
    /// What somebody settled before.
    pub settled: Option<Sign>,
    /// Why it is not to be signed now, although a change is proposed.
    pub folded: Option<String>,
    /// What to mind, the gravest first.
    pub cautions: Vec<Caution>,
}

impl Row {
    pub(super) fn of(
        advice: &Advice,
        entry: &Entry,
        standing: Standing<'_>,
        now: Option<Timestamp>,
        until: Option<Timestamp>,
    ) -> Row {
        let (evidence, decision) = (&advice.evidence, &advice.advice);
        let time = |t: Option<f64>| t.map_or(GiveUp::Never, GiveUp::After);
        let advised = match decision.action {
            Action::GiveUpAfter => decision.give_up_after_s.map(GiveUp::After),
            Action::WaitItOut => Some(GiveUp::Never),
            Action::GatherEvidence | Action::StateACost => None,
        };
        let verdict = match (decision.action, decision.proposal.map(|p| p.change)) {
            (Action::GatherEvidence, _) => Verdict::NotEnoughEvidence,
            (Action::StateACost, _) => Verdict::StateACost,
            (_, Some(Change::Raise)) => Verdict::Raise,
            (_, Some(Change::Lower)) => Verdict::Lower,
            (_, Some(Change::Keep)) if decision.look.is_some() => Verdict::LookFurther,
            (_, Some(Change::Keep)) => Verdict::Keep,
            (_, None) => Verdict::Set,
        };
        let proposed = match verdict {
            Verdict::Raise | Verdict::Lower => decision.proposal.map(|p| time(p.to_s)),
            Verdict::Set => advised,
            _ => None,
        };
        let proposed = proposed.map(|to| match to {
            GiveUp::After(seconds) => GiveUp::After(crate::settle::round_up(seconds, entry)),
            GiveUp::Never => GiveUp::Never,
        });
        let now_does = decision.now;
        let then = decision.proposal.and_then(|p| p.then);
        let (worth_per_day, hours_per_day) = match (now_does, then) {
            (Some(now), Some(then)) => gains(advice, entry, &now, &then),
            _ => (None, None),
        };
        let mut changed: Vec<String> =
            advice.cautions.iter().filter(|c| c.code == "law_shifted").map(|c| c.text.clone()).collect();
        changed.extend(silent(advice, until));
        changed.extend(moved(standing, advised, decision.band_s));
        Row {
            stream: advice.stream.clone(),
            kind: advice.kind.clone(),
            verdict,
            because: decision.because.clone(),
            old_s: now_does.map(|o| time(o.give_up_after_s)).or(entry.now),
            new_s: proposed,
            advised_s: advised,
            interval_s: decision.interval_s,
            band_s: decision.band_s,
            worth_per_day,
            hours_per_day,
            loses: decision.regret_now,
            expected_regret: decision.expected_regret,
            regret_95: decision.regret_95,
            attempts_now: now_does.and_then(|o| o.attempts_per_request),
            attempts_then: then
                .map_or(decision.attempts_per_request, |o| o.attempts_per_request)
                .filter(|_| verdict.changes()),
            waits: evidence.waits,
            done: evidence.done,
            changed,
            tail: Some(advice.tail.class),
            remaining_wait: Some(advice.tail.remaining_wait),
            settled: standing.last.map(Sign::of),
            folded: if verdict.changes() { folded(standing, advised, now) } else { None },
            cautions: advice.cautions.clone(),
        }
    }

    /// A stream with a settled time and no waits.
    pub(super) fn vanished(stream: &str, entry: &Entry, standing: Standing<'_>) -> Option<Row> {
        let last = standing.last?;
        Some(Row {
            because: "a time was settled for it, and there are no waits of it any more".into(),
            old_s: standing.give_up_after(),
            changed: vec![
                "the stream has vanished: was it renamed, or does nothing record it any more?".into(),
            ],
            settled: Some(Sign::of(last)),
            ..Row::empty(stream, entry)
        })
    }

    /// A stream that was there last week.
    pub(super) fn gone(was: &Was, entry: &Entry) -> Row {
        Row {
            because: "there are no waits of it any more".into(),
            old_s: entry.now.or(was.old_s),
            changed: vec!["it was in last week's set, and has vanished".into()],
            ..Row::empty(&was.stream, entry)
        }
    }

    /// A stream of which nothing is known.
    fn empty(stream: &str, entry: &Entry) -> Row {
        Row {
            stream: stream.to_owned(),
            kind: entry.kind.name().to_owned(),
            verdict: Verdict::NotEnoughEvidence,
            because: String::new(),
            old_s: None,
            new_s: None,
            advised_s: None,
            interval_s: None,
            band_s: None,
            worth_per_day: None,
            hours_per_day: None,
            loses: None,
            expected_regret: None,
            regret_95: None,
            attempts_now: None,
            attempts_then: None,
            waits: 0,
            done: 0,
            tail: None,
            remaining_wait: None,
            changed: Vec::new(),
            settled: None,
            folded: None,
            cautions: Vec::new(),
        }
    }
}

/// What a change is worth a day, and the hours that the same earnings would no longer take.
///
/// A rate says what a second spent in this process earns, so the time that is spent in it a day, times the difference of two
/// rates, is the difference of a day's earnings; to earn the same at the better rate takes less of it.
fn gains(advice: &Advice, entry: &Entry, now: &Outcome, then: &Outcome) -> (Option<f64>, Option<f64>) {
    let evidence = &advice.evidence;
    let time = |text: &Option<String>| text.as_deref().and_then(|t| t.parse::<Timestamp>().ok());
    let (Some(from), Some(to)) = (time(&evidence.from), time(&evidence.to)) else { return (None, None) };
    // Waits of an hour say nothing of a day's.
    let days = ((to.as_second() - from.as_second()) as f64 / DAY).max(1.0);
    let sound = |value: f64| Some(value).filter(|value| value.is_finite());
    let difference = then.rate_per_s - now.rate_per_s;
    match entry.worth.map_or(Aim::Rate, |worth| worth.aim) {
        Aim::Rate | Aim::Finish => {
            let waited = evidence.waited_s / days;
            let saved = if then.rate_per_s > 0.0 { waited * difference / then.rate_per_s } else { f64::NAN };
            (sound(waited * difference), sound(saved / 3_600.0))
        }
        Aim::CarryingCost(_) => (sound(evidence.waits as f64 / days * difference), None),
        Aim::Deadline { .. } => {
            let requests = evidence.waits.saturating_sub(evidence.retries);
            (sound(requests as f64 / days * difference), None)
        }
    }
}

/// Whether the last week of the data holds nothing of a stream.
fn silent(advice: &Advice, until: Option<Timestamp>) -> Option<String> {
    let last = advice.evidence.to.as_deref()?.parse::<Timestamp>().ok()?;
    let gap = (until?.as_second() - last.as_second()) as f64;
    (gap >= WEEK).then(|| format!("no waits of it for {}: the week has no data", say::duration(gap)))
}

/// How the best time has moved since somebody looked.
fn moved(standing: Standing<'_>, advised: Option<GiveUp>, band: Option<[f64; 2]>) -> Option<String> {
    let last = standing.last?;
    let then = last.grounds.as_ref()?.advised?;
    let (advised, [low, high]) = (advised?, band?);
    let outside = !(low..=high).contains(&then.seconds()) && then != advised;
    outside.then(|| {
        format!(
            "the best time was {} when it was {} ({})",
            say::duration(then.seconds()),
            last.state.name(),
            last.at.strftime("%Y-%m-%d")
        )
    })
}

/// Why a proposed change is not to be signed now.
fn folded(standing: Standing<'_>, advised: Option<GiveUp>, now: Option<Timestamp>) -> Option<String> {
    let last = standing.last?;
    match last.state {
        State::Pinned { give_up_after } => Some(format!(
            "{} is pinned by {}: {}",
            say::exact_duration(give_up_after.seconds()),
            last.by,
            last.why
        )),
        State::Postponed { until } if now.is_none_or(|now| now < until) => {
            Some(format!("postponed until {until} by {}: {}", last.by, last.why))
        }
        State::Refused => {
            let grounds = last.grounds.as_ref()?;
            let at = advised?.seconds();
            let same = grounds.band.is_some_and(|[low, high]| (low..=high).contains(&at))
                || grounds.advised.is_some_and(|then| then.seconds() == at);
            same.then(|| format!("refused by {}: {}", last.by, last.why))
        }
        _ => None,
    }
}
