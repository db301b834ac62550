//! Waits held against the advice: what was waited too long, what was given up too early, which open waits to let go of now;
//! and the queue behind waits that end served or abandoned. METHODS.md sections 5, 9 and 10.
//!
//! In two steps. A [`Subject`] is one stream with its advice, made from its tally. An [`Audit`] of all of them then takes the
//! waits themselves, one by one, into [`Sums`] of bounded size that can be merged in any order, and makes an [`AuditSet`]
//! of them. No files, no clock, no threads.
//!
//! ```
//! use outwait::advise::{Lenders, Terms};
//! use outwait::audit::{Audit, Question, Subject};
//! use outwait::tally::Book;
//! use outwait::wait::{Ending, Wait};
//! // Half of the waits are over before 20 s, the other half at 90 s.
//! let ages = || (1..=600).map(|i| if i % 2 == 0 { f64::from(i) / 30.0 } else { 90.0 });
//! let mut book = Book::default();
//! for age in ages() {
//!     book.add("courier", &Wait::new(age, Ending::Done)?)?;
//! }
//! let terms = Terms { policy: None, newest: None, seed: 1, past: None };
//! let days = book.stream("courier").unwrap();
//! let subject = Subject::new(&terms, "courier", days, None, &Lenders::default());
//! let audit = Audit::new(vec![subject], Question::default(), None);
//! let mut sums = audit.sums();
//! for age in ages() {
//!     sums.add("courier", &Wait::new(age, Ending::Done)?, None);
//! }
//! sums.add("courier", &Wait::new(30.0, Ending::Waiting)?, Some("crate 7"));
//! let set = audit.report(sums, Vec::new(), None);
//! assert_eq!(set.streams[0].closed.total.waits, 600);
//! assert!(set.streams[0].closed.total.over.waits >= 300);
//! # Ok::<(), Box<dyn std::error::Error>>(())
//! ```

mod calendar;
pub mod queue;
mod report;
mod rule;
mod sums;
mod yardstick;

use std::collections::HashMap;

use foldhash::fast::RandomState;

use crate::advice::{Action, Advice, Caution};
use crate::advise::{Lenders, Terms};
use crate::policy::Entry;
use crate::say;
use crate::tally::{Cells, Day, Days};
use crate::wait::{Ending, Wait};

pub use queue::{QueueReport, Sizing};
pub use report::{
    AuditSet, ByHour, ByRule, Closed, DAYS, Lost, Measure, OpenCounts, OpenList, OpenWait, OverLost, SCHEMA,
    StreamAudit, UnderLost,
};
pub use rule::{Cut, Rule, RuleFrom};
pub use yardstick::{Over, Prospect, Under, Unit, Verdict, Yardstick};

use calendar::caution;
use sums::{Against, Candidate, Shortlist, StreamSums};

/// Cautions of an advice that concern the judgement of single waits; the others concern a change of the time in force.
const SHARED_CAUTIONS: [&str; 6] =
    ["unit_suspicion", "edge_of_sight", "open_waits_hang", "law_shifted", "few_waits", "borrowed_evidence"];

/// What is asked of an audit besides.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Question {
    /// Chances are told for the next so many seconds; `None`: for as long as the wait has lasted so far.
    pub within: Option<f64>,
    /// How many open waits are listed.
    pub list: usize,
    /// What is known of a queue from elsewhere.
    pub queue: queue::Known,
}

impl Default for Question {
    /// Chances for as long again, 20 waits, nothing known from elsewhere.
    fn default() -> Question {
        Question { within: None, list: 20, queue: queue::Known::default() }
    }
}

/// One stream with what its waits are held against.
pub struct Subject {
    advice: Advice,
    entry: Entry,
    yardstick: Yardstick,
    rule: Option<Rule>,
    /// First day of the window, since the epoch.
    opening: i32,
    /// First attempts in the window, where they are a queue's, with the first and last time of all waits.
    queue: Option<Cells>,
    seen: Option<(f64, f64)>,
    /// Everything that its days, and whoever read its waits, show.
    cautions: Vec<Caution>,
    /// Days with waits, and how many.
    counts: Vec<(i32, u64)>,
}

impl Subject {
    /// Advises on a stream and prepares its measure. Independent of the other streams but for what `lenders` lend.
    pub fn new(
        terms: &Terms<'_>,
        stream: &str,
        days: &Days,
        suspicion: Option<&str>,
        lenders: &Lenders,
    ) -> Subject {
        let entry = terms.entry(stream);
        let (advice, believed) = terms.study_among(stream, days, suspicion, lenders).into_believed();
        let opening = terms.opening(&entry);
        let tally = days.since(opening);
        let cells = tally.first_attempts();
        let rule = Rule::of(entry.now, &cells.gave_up);
        let yardstick = Yardstick::new(believed, &advice.advice, &entry, &entry.whole(&cells));
        let timer = rule.is_some_and(|r| r.is_timer());
        Subject {
            yardstick,
            opening,
            queue: (!timer && queue::is_queue(&cells)).then_some(cells),
            seen: tally.seen(),
            cautions: calendar::cautions(days, opening, terms.newest),
            counts: calendar::counts(days),
            advice,
            entry,
            rule,
        }
    }

    /// Adds to what is to be minded of its waits.
    pub fn warn(&mut self, caution: Caution) {
        self.cautions.push(caution);
    }

    /// What is advised.
    pub fn advice(&self) -> &Advice {
        &self.advice
    }
}

/// All streams, ready to take the waits themselves.
pub struct Audit {
    subjects: Vec<Subject>,
    /// Looked up for every wait, hence the fast hash; it is seeded, so no writer of names can aim at it.
    places: HashMap<String, usize, RandomState>,
    question: Question,
    newest: Option<f64>,
}

/// What has been added up so far.
pub struct Sums<'a> {
    audit: &'a Audit,
    streams: Vec<Option<Box<StreamSums>>>,
    open: Shortlist,
    open_total: u64,
    /// Waits older than the window of their stream.
    older: u64,
}

impl Audit {
    /// Joins the streams. `newest`: the newest time of all, Unix seconds.
    pub fn new(mut subjects: Vec<Subject>, question: Question, newest: Option<f64>) -> Audit {
        subjects.sort_by(|a, b| a.advice.stream.cmp(&b.advice.stream));
        let places = subjects.iter().enumerate().map(|(i, s)| (s.advice.stream.clone(), i)).collect();
        Audit { subjects, places, question, newest }
    }

    /// Sums of nothing yet.
    pub fn sums(&self) -> Sums<'_> {
        Sums {
            audit: self,
            streams: (0..self.subjects.len()).map(|_| None).collect(),
            open: Shortlist::new(self.question.list),
            open_total: 0,
            older: 0,
        }
    }

    /// The answer. `assumed` and `made_at` as in a set of advice.
    pub fn report(&self, sums: Sums<'_>, assumed: Vec<String>, made_at: Option<String>) -> AuditSet {
        let Sums { streams, open, open_total, older, .. } = sums;
        let streams: Vec<StreamAudit> = self
            .subjects
            .iter()
            .zip(streams)
            .map(|(subject, sums)| self.stream(subject, &sums.unwrap_or_default()))
            .collect();
        let waits = open.finish().into_iter().map(|c| self.open_wait(c)).collect();
        let mut cautions = Vec::new();
        cautions.extend(calendar::from_the_future(self.subjects.iter().map(|s| s.counts.as_slice())));
        if streams.iter().any(|s| s.open.let_go > 0) {
            cautions.push(caution(
                "safety_first",
                "a verdict weighs worth against time and knows nothing of safety",
                "where alarms, interlocks, emergency calls or legal deadlines wait, local codes and licensed practice come \
                 first",
            ));
        }
        AuditSet {
            schema: SCHEMA.to_owned(),
            made_at,
            assumed,
            cautions,
            streams,
            older,
            open: OpenList { total: open_total, within_s: self.question.within, waits },
        }
    }

    fn stream(&self, subject: &Subject, sums: &StreamSums) -> StreamAudit {
        let Subject { advice, yardstick, rule, .. } = subject;
        let open = sums.open.counts();
        let by_rule = Cut::ALL
            .into_iter()
            .zip(&sums.by_cut)
            .map(|(cut, cell)| ByRule { cut, lost: cell.lost(yardstick) })
            .filter(|row| row.lost.waits > 0)
            .collect();
        let by_hour = sums
            .hours
            .iter()
            .map(|(hour, cell)| ByHour {
                day: DAYS[hour / 24].to_owned(),
                hour: (hour % 24) as u32,
                lost: cell.lost(yardstick),
            })
            .collect();
        let queue = subject.queue.as_ref().and_then(|cells| {
            let window = subject.seen.filter(|(from, to)| to > from);
            queue::report(cells, &sums.flow, window, &self.question.queue)
        });
        StreamAudit {
            stream: advice.stream.clone(),
            kind: advice.kind.clone(),
            evidence: advice.evidence.clone(),
            advice: Measure {
                action: advice.advice.action,
                because: advice.advice.because.clone(),
                give_up_after_s: advice.advice.give_up_after_s,
                band_s: advice.advice.band_s,
                unit: yardstick.unit(),
                worth_per_hour: yardstick.price().map(|price| 3600.0 * price),
            },
            rule: *rule,
            closed: Closed { total: sums.closed().lost(yardstick), undated: sums.undated, by_rule, by_hour },
            open,
            queue,
            cautions: cautions(subject, &open, sums.endless),
        }
    }

    fn open_wait(&self, candidate: Candidate) -> OpenWait {
        let subject = &self.subjects[candidate.stream];
        let age = candidate.age;
        let step = self.question.within.unwrap_or(age);
        let Prospect { verdict, value, next_step, look_again, chance, remaining } =
            subject.yardstick.prospect(age, step);
        OpenWait {
            stream: subject.advice.stream.clone(),
            id: candidate.id.map(String::from),
            attempt: candidate.attempt,
            count: candidate.count,
            age_s: age,
            seen: candidate.at.and_then(say::time),
            verdict,
            value,
            next_step,
            step_s: step,
            chance_done: chance.map(|[done, _]| done),
            chance_ended: chance.map(|[_, ended]| ended),
            remaining_s: remaining,
            look_again_at_s: look_again,
            look_again_in_s: look_again.map(|at| at - age),
        }
    }
}

impl Sums<'_> {
    /// Takes a wait. One of a stream that is not audited, or older than its window, is left out.
    #[inline]
    pub fn add(&mut self, stream: &str, wait: &Wait, id: Option<&str>) {
        let audit = self.audit;
        let Some(&place) = audit.places.get(stream) else { return };
        let subject = &audit.subjects[place];
        if let Day::Number(day) = Day::of(wait.at())
            && day < subject.opening
        {
            self.older = self.older.saturating_add(wait.count());
            return;
        }
        let against = Against {
            yardstick: &subject.yardstick,
            rule: subject.rule.as_ref(),
            window: if subject.queue.is_some() { subject.seen } else { None },
            newest: audit.newest,
        };
        let sums = self.streams[place].get_or_insert_default();
        if wait.ending() != Ending::Waiting {
            return sums.close(wait, &against);
        }
        let (verdict, urgency) = sums.open(wait, audit.question.within, &against);
        self.open_total = self.open_total.saturating_add(wait.count());
        let candidate = Candidate {
            verdict,
            urgency,
            age: sums::age(wait),
            stream: place,
            id: None,
            attempt: wait.attempt(),
            count: wait.count(),
            at: wait.at(),
        };
        self.open.push(candidate, id);
    }

    /// Empty sums of the same audit, for another thread.
    pub fn fork(&self) -> Self {
        self.audit.sums()
    }

    /// Adds all of `other`.
    pub fn merge(&mut self, other: Self) {
        for (mine, theirs) in self.streams.iter_mut().zip(other.streams) {
            match (mine.as_deref_mut(), theirs) {
                (Some(mine), Some(theirs)) => mine.merge(&theirs),
                (None, theirs) => *mine = theirs,
                (Some(_), None) => {}
            }
        }
        self.open.merge(other.open);
        self.open_total = self.open_total.saturating_add(other.open_total);
        self.older = self.older.saturating_add(other.older);
    }
}

fn cautions(subject: &Subject, open: &OpenCounts, endless: u64) -> Vec<Caution> {
    let mut found: Vec<Caution> = subject
        .advice
        .cautions
        .iter()
        .filter(|c| SHARED_CAUTIONS.contains(&c.code.as_str()))
        .cloned()
        .collect();
    found.extend(subject.cautions.iter().cloned());
    // An advice to wait it out needs no such word, but a wait that is let go of does.
    if open.let_go > 0 && !subject.entry.retry.repeatable {
        found.push(caution(
            "work_repeated",
            "letting go of a wait does not stop the work behind it, and trying again does it twice; the policy does not say \
             that it may be repeated",
            "let go only of what is idempotent or was cancelled for certain; then say `repeatable: true`",
        ));
    }
    // A wait that was put back is nobody's: it can shape the yardstick, and not be held against it.
    if let Some(every) = subject.entry.sampled_every {
        found.push(caution(
            "sampled",
            format!(
                "the advice counts what a sampler that asks every {} did not ask while it waited; the sums here hold the \
                 waits that were made and no others, so slow stretches are in them too rarely",
                say::duration(every)
            ),
            "read the sums as those of the sampler; whoever asks without waiting meets each slow stretch more often",
        ));
    }
    if endless > 0 {
        found.push(caution(
            "endless_buckets",
            format!(
                "{} waits ended in a bucket without an upper bound and are counted at its lower one: they were longer, and \
                 more was lost than is said",
                say::count(endless as f64)
            ),
            "give single waits, or buckets that reach further",
        ));
    }
    if open.stale > 0 {
        found.push(caution(
            "stale_open_waits",
            format!(
                "{} of {} open waits were last seen so long before the newest record that they have more than doubled \
                 their age since, or ended",
                say::count(open.stale as f64),
                say::count(open.waits as f64)
            ),
            "look up whether they are still open; their ages are those at which they were last seen",
        ));
    }
    if subject.advice.advice.action == Action::GatherEvidence && open.waits > 0 {
        found.push(caution(
            "no_verdict",
            "too few of its waits have ended to say what holding on is worth",
            "gather waits that ended; until then judge the open ones by their age alone",
        ));
    }
    found
}
