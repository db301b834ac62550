//! What a policy means, in sentences for people and as data for programs.

use super::entry::{
    Entry, GiveUp, Guard, Jitter, Kind, NO_COST_OF_TIME, Policy, Retry, Sticky, Weekly, aim_name,
};
use super::finding::Warning;
use super::{follow, scrape, telemetry};
use crate::intake::Rules;
use crate::say;
use crate::stopping::{Aim, Fade, Worth};
use serde::Serialize;
use std::collections::HashSet;
use std::fmt;

/// The caution wherever people act on a wait.
const DUTY: &str = "Where safety, health or a legal duty depends on a wait, local codes and licensed practice \
                    decide how long to wait, not this policy.";

/// What a policy means. Its display is the text for a terminal, its serialisation the JSON.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Description {
    /// `outwait/vet/1`.
    pub schema: &'static str,
    /// Version of the policy's schema.
    pub version: u32,
    /// One for each stream asked about, in that order; for each entry where none was.
    pub subjects: Vec<Subject>,
    /// What the writer may not have meant, in the order of the lines.
    pub warnings: Vec<Warning>,
    /// What else to know: entries that match none of the streams, callees without waits, cautions.
    pub notes: Vec<String>,
}

/// What a policy means for one stream, or for all streams of an entry.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Subject {
    /// The stream; `None` for the streams of the entry.
    pub stream: Option<String>,
    /// Pattern of the entry that speaks for it; `None` if none does.
    pub matches: Option<String>,
    /// Number of that entry, from 1; `None` without a policy.
    pub entry: Option<usize>,
    /// Its line.
    pub line: Option<usize>,
    /// What is waited for.
    pub kind: Option<Kind>,
    /// What it means, a sentence each.
    pub says: Vec<String>,
    /// The same as numbers.
    pub settings: Option<Settings>,
}

/// The settings of an entry, every default filled in. Times in seconds.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Settings {
    /// Name of the aim; `None`: the advice is `state_a_cost`. So are all prices then.
    pub aim: Option<&'static str>,
    /// What each ending is worth.
    pub worth: Option<Endings>,
    /// How the worth of a completion fades: `half_life`, `zero_at` or `half_at`.
    pub fades: Option<&'static str>,
    /// The time that belongs to it, s.
    pub fades_s: Option<f64>,
    /// Cost of an attempt, in the unit of worth.
    pub attempt_cost: Option<f64>,
    /// Pauses after each ending, s.
    pub pause_s: Option<Endings>,
    /// Cost of waiting, worth per second; with `aim: carrying_cost`.
    pub carrying_cost_per_s: Option<f64>,
    /// Deadline, s; with `aim: deadline`.
    pub deadline_s: Option<f64>,
    /// Most attempts before the deadline; with `aim: deadline`.
    pub deadline_attempts: Option<u32>,
    /// Time in force, s or `"never"`.
    pub now_s: Option<GiveUp>,
    /// What happens after giving up.
    pub retry: Retry,
    /// Least give-up time, s.
    pub floor_s: Option<f64>,
    /// Largest give-up time, s.
    pub ceiling_s: Option<f64>,
    /// Largest change in one step, share of the time in force.
    pub largest_step: f64,
    /// Completions needed.
    pub evidence: u32,
    /// How far back waits count, s.
    pub window_s: f64,
    /// Gain below which no change is proposed, share of the rate.
    pub slack: f64,
    /// Gain below which a standing proposal is not replaced, share of the rate.
    pub hysteresis: f64,
    /// Rest after a change, s.
    pub cool_down_s: f64,
    /// How often a sampler that waits for each answer means to ask, s.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub sampled_every_s: Option<f64>,
    /// Streams that this one waits for.
    pub calls: Vec<String>,
}

/// One number for each ending.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Endings {
    /// Completion.
    pub done: f64,
    /// Failure.
    pub failed: f64,
    /// Give-up.
    pub gave_up: f64,
}

/// Says what a policy means for each of `streams`; for each of its entries if there are none.
pub fn describe(policy: &Policy, streams: &[&str]) -> Description {
    let subjects: Vec<Subject> = if streams.is_empty() {
        policy.entries.iter().map(|entry| Subject::of(None, entry)).collect()
    } else {
        streams.iter().map(|stream| Subject::of_stream(policy, stream)).collect()
    };
    Description {
        schema: "outwait/vet/1",
        version: policy.version,
        notes: notes(policy, streams, &subjects),
        warnings: policy.warnings.clone(),
        subjects,
    }
}

fn notes(policy: &Policy, streams: &[&str], subjects: &[Subject]) -> Vec<String> {
    let mut notes: Vec<String> = policy.weekly.iter().map(Weekly::words).collect();
    notes.extend(telemetry::sentences(&policy.telemetry, &Rules::default(), "spans and histograms"));
    notes.extend(policy.scrapes.iter().map(scrape::sentence));
    notes.extend(policy.followed.iter().map(follow::sentence));
    if !streams.is_empty() {
        let used: HashSet<usize> = subjects.iter().filter_map(|s| s.entry).collect();
        for entry in policy.entries.iter().filter(|e| !used.contains(&e.number)) {
            let (number, glob, line) = (entry.number, &entry.matches, entry.line);
            notes.push(format!("Entry {number} (`{glob}`, line {line}) speaks for none of these streams."));
        }
        let known: HashSet<&str> = streams.iter().copied().collect();
        for subject in subjects {
            let (Some(stream), Some(settings)) = (&subject.stream, &subject.settings) else { continue };
            for callee in settings.calls.iter().filter(|callee| !known.contains(callee.as_str())) {
                notes.push(format!("`{stream}` waits for `{callee}`, which is none of these streams."));
            }
        }
    }
    if subjects.iter().any(|s| matches!(s.kind, Some(Kind::Job | Kind::Reply))) {
        notes.push(DUTY.into());
    }
    notes
}

impl Weekly {
    /// What it means, in a sentence.
    fn words(&self) -> String {
        let days = ["Monday", "Tuesday", "Wednesday", "Thursday", "Friday", "Saturday", "Sunday"];
        let day = days[usize::from(self.day.min(6))];
        format!(
            "A daemon makes the week's recommendations every {day} at {:02}:00 by the clock of {}, once; an hour that summer \
             time skips is taken an hour later, one that comes twice the first time.",
            self.hour, self.time_zone
        )
    }
}

impl Subject {
    /// What an entry means, for one stream or for all of its streams.
    pub fn of(stream: Option<&str>, entry: &Entry) -> Subject {
        Subject {
            stream: stream.map(Into::into),
            matches: Some(entry.matches.to_string()),
            entry: (entry.number > 0).then_some(entry.number),
            line: (entry.line > 0).then_some(entry.line),
            kind: Some(entry.kind),
            says: sentences(entry),
            settings: Some(Settings::of(entry)),
        }
    }

    fn of_stream(policy: &Policy, stream: &str) -> Subject {
        match policy.entry_for(stream) {
            Some((entry, _)) => Subject::of(Some(stream), entry),
            None => Subject {
                stream: Some(stream.into()),
                matches: None,
                entry: None,
                line: None,
                kind: None,
                says: vec![format!("No entry matches it, so there is no aim: {NO_COST_OF_TIME}.")],
                settings: None,
            },
        }
    }
}

impl Settings {
    /// The settings of an entry.
    pub fn of(entry: &Entry) -> Settings {
        let Guard { floor, ceiling, largest_step, evidence, window, slack, hysteresis, cool_down } =
            entry.guard;
        let worth = entry.worth;
        let fade = worth.and_then(|w| match w.fade {
            Fade::Stays => None,
            Fade::HalfLife(s) => Some(("half_life", s)),
            Fade::ZeroAt(s) => Some(("zero_at", s)),
            Fade::HalfAt(s) => Some(("half_at", s)),
        });
        let (carrying_cost_per_s, deadline_s, deadline_attempts) = match worth.map(|w| w.aim) {
            Some(Aim::CarryingCost(cost)) => (Some(cost), None, None),
            Some(Aim::Deadline { by, attempts }) => (None, Some(by), Some(attempts)),
            _ => (None, None, None),
        };
        Settings {
            aim: worth.map(|w| aim_name(w.aim)),
            worth: worth.map(|w| Endings { done: w.done, failed: w.failed, gave_up: w.gave_up }),
            fades: fade.map(|(name, _)| name),
            fades_s: fade.map(|(_, s)| s),
            attempt_cost: worth.map(|w| w.attempt_cost),
            pause_s: worth.map(|w| Endings {
                done: w.pause.done,
                failed: w.pause.failed,
                gave_up: w.pause.gave_up,
            }),
            carrying_cost_per_s,
            deadline_s,
            deadline_attempts,
            now_s: entry.now,
            retry: entry.retry,
            floor_s: floor,
            ceiling_s: ceiling,
            largest_step,
            evidence,
            window_s: window,
            slack,
            hysteresis,
            cool_down_s: cool_down,
            sampled_every_s: entry.sampled_every,
            calls: entry.calls.clone(),
        }
    }
}

fn sentences(entry: &Entry) -> Vec<String> {
    let mut says = Vec::new();
    match &entry.worth {
        Some(worth) => aim(worth, entry, &mut says),
        None => says.push(format!("No aim, so no advice: {NO_COST_OF_TIME}.")),
    }
    says.push(match entry.now {
        Some(GiveUp::After(seconds)) => format!("Gives up now after {}.", say::duration(seconds)),
        Some(GiveUp::Never) => "Never gives up now.".into(),
        None => "The give-up time in force is not stated.".into(),
    });
    retry(entry, &mut says);
    guard(entry, &mut says);
    if let Some(every) = entry.sampled_every {
        says.push(format!(
            "Its waits come from a sampler that asks every {} and waits for each answer: what it did not ask during \
             slow answers is put back into the curves; the evidence stays what was asked.",
            say::duration(every)
        ));
    }
    if !entry.calls.is_empty() {
        says.push(format!("Waits in its turn for `{}`.", entry.calls.join("`, `")));
    }
    says
}

fn aim(worth: &Worth, entry: &Entry, says: &mut Vec<String>) {
    says.push(match worth.aim {
        Aim::Rate => "Seeks the most worth per second in the long run.".into(),
        Aim::Finish => "Seeks the least time until done, starting again after each give-up.".into(),
        Aim::CarryingCost(cost) => {
            format!("Seeks the most worth less the cost of waiting, {}.", per_time(cost))
        }
        Aim::Deadline { by, attempts } => format!(
            "Seeks the best chance of being done within {} of the first start, in at most {}.",
            say::duration(by),
            counted(attempts, "attempt")
        ),
    });
    if matches!(worth.aim, Aim::Rate | Aim::CarryingCost(_)) {
        let Worth { done, failed, gave_up, attempt_cost: cost, .. } = worth;
        says.push(format!(
            "A completion is worth {done}, a failure {failed}, a give-up {gave_up}; an attempt costs {cost}."
        ));
        match worth.fade {
            Fade::Stays => {}
            Fade::HalfLife(s) => {
                says.push(format!("The worth of a completion halves every {}.", say::duration(s)));
            }
            Fade::ZeroAt(s) => says.push(format!(
                "The worth of a completion falls in a straight line to 0 at {}.",
                say::duration(s)
            )),
            Fade::HalfAt(s) => says.push(format!(
                "The worth of a completion is halved at {}, a third of it is left at {}.",
                say::duration(s),
                say::duration(2.0 * s)
            )),
        }
    }
    let pause = worth.pause;
    if pause.done == 0.0 && pause.failed == 0.0 && pause.gave_up == 0.0 {
        says.push("No pause before the next start.".into());
    } else {
        says.push(format!(
            "Pauses before the next start: {} after a completion, {} after a failure, {} after a give-up.",
            say::duration(pause.done),
            say::duration(pause.failed),
            say::duration(pause.gave_up)
        ));
    }
    if entry.restart_is_free() {
        says.push("Starting again is free: the 5th percentile of completions will be the floor.".into());
    }
}

fn retry(entry: &Entry, says: &mut Vec<String>) {
    let (retry, work) = (&entry.retry, entry.kind.work());
    let cap = match retry.attempts {
        Some(n) => format!("At most {} for each {work}", counted(n, "attempt")),
        None => format!("No cap on the attempts for each {work}"),
    };
    let load = retry.load_ceiling.map_or(String::new(), |load| format!(", at most {load} on average"));
    says.push(format!("{cap}{load}."));
    if retry.attempts == Some(1) {
        return;
    }
    says.push(match retry.sticky {
        Sticky::FromData => {
            "How often a retry meets the same slow cause is learnt from numbered attempts.".into()
        }
        Sticky::Unknown => "How often a retry meets the same slow cause is not known.".into(),
        Sticky::Given(0.0) => "A retry does not meet the slow cause of the attempt it replaces.".into(),
        Sticky::Given(phi) => format!("A retry meets the same slow cause in {} of cases.", say::percent(phi)),
    });
    let (factor, jitter) = (retry.backoff.factor, retry.backoff.jitter);
    let drawn = "drawn evenly between 0 and its full length";
    match (factor > 1.0, jitter) {
        (true, Jitter::None) => {
            says.push(format!("Each pause is {factor} times the one before."));
        }
        (true, Jitter::Full) => {
            says.push(format!("Each pause is {factor} times the one before, {drawn}."));
        }
        (false, Jitter::Full) => says.push(format!("Each pause is {drawn}.")),
        (false, Jitter::None) => {}
    }
    says.push(if retry.repeatable {
        format!("Doing the {work} twice harms nobody.")
    } else {
        format!("No second copy is advised: nothing says that doing the {work} twice harms nobody.")
    });
    if entry.kind == Kind::Job {
        says.push(
            "A job that was given up may still be running: see that it stops before the next starts.".into(),
        );
    }
}

fn guard(entry: &Entry, says: &mut Vec<String>) {
    let guard = &entry.guard;
    says.push(match (guard.floor, guard.ceiling) {
        (Some(floor), Some(ceiling)) => {
            format!("Advice stays between {} and {}.", say::duration(floor), say::duration(ceiling))
        }
        (Some(floor), None) => format!("Advice stays above {}.", say::duration(floor)),
        (None, Some(ceiling)) => format!("Advice stays below {}.", say::duration(ceiling)),
        (None, None) => "Advice has neither floor nor ceiling.".into(),
    });
    says.push(format!(
        "It needs {} of the last {} and moves the time in force by at most {} in one step.",
        counted(guard.evidence, "completion"),
        say::duration(guard.window),
        say::percent(guard.largest_step)
    ));
    says.push(format!(
        "A change must gain at least {} of the rate, a standing proposal is replaced for {} more, and {}.",
        say::percent(guard.slack),
        say::percent(guard.hysteresis),
        if guard.cool_down > 0.0 {
            format!("the next change waits {}", say::duration(guard.cool_down))
        } else {
            "the next change may follow at once".into()
        }
    ));
}

/// A cost per second in the unit of time in which it is not tiny.
fn per_time(cost: f64) -> String {
    let units = [("a second", 1.0), ("a minute", 60.0), ("an hour", 3_600.0)];
    let (unit, length) =
        units.into_iter().find(|(_, length)| cost * length >= 0.01).unwrap_or(("a day", 86_400.0));
    format!("{} {unit}", say::number(cost * length))
}

fn counted(n: u32, what: &str) -> String {
    format!("{} {what}{}", say::count(f64::from(n)), if n == 1 { "" } else { "s" })
}

impl fmt::Display for Description {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, subject) in self.subjects.iter().enumerate() {
            if i > 0 {
                writeln!(f)?;
            }
            write!(f, "{subject}")?;
        }
        if !self.warnings.is_empty() {
            writeln!(f, "\nLook again at:")?;
            for warning in &self.warnings {
                writeln!(f, "line {}: {warning}", warning.at.line)?;
            }
        }
        if !self.notes.is_empty() {
            writeln!(f)?;
        }
        self.notes.iter().try_for_each(|note| writeln!(f, "{note}"))
    }
}

impl fmt::Display for Subject {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let name = self.stream.as_ref().or(self.matches.as_ref()).map_or("", String::as_str);
        write!(f, "`{name}`")?;
        match (self.entry, self.line) {
            (Some(entry), Some(line)) => write!(f, " (entry {entry}, line {line})")?,
            _ if self.matches.is_some() => write!(f, " (no policy)")?,
            _ => write!(f, " (no entry)")?,
        }
        match self.kind {
            Some(Kind::Request) => writeln!(f, ": requests")?,
            Some(Kind::Job) => writeln!(f, ": jobs")?,
            Some(Kind::Reply) => writeln!(f, ": replies")?,
            None => writeln!(f)?,
        }
        self.says.iter().try_for_each(|sentence| writeln!(f, "  {sentence}"))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_schedule_is_told() {
        let text =
            "version: 1\nweekly: {day: sunday, hour: 2, time_zone: Europe/Paris}\nstreams:\n  - match: a\n";
        let policy = crate::policy::parse(text, "policy.yaml").unwrap();
        let told = describe(&policy, &[]).to_string();
        assert!(told.contains("every Sunday at 02:00 by the clock of Europe/Paris, once"), "{told}");
    }
}
