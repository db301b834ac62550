//! From a book of many streams to one set of advice: windows, periods, and what only the whole set shows.

use std::collections::HashMap;

use super::pool::{MOST_SIBLINGS, SIBLING_CELLS};
use super::{Before, Case, Past, Study, caution, study};
use crate::advice::{Advice, AdviceSet, Caution, SCHEMA};
use crate::policy::{Entry, GiveUp, Jitter, Policy};
use crate::say;
use crate::stopping::{ChainFinding, Pause, Retry, Station, check_chain};
use crate::tally::{Cells, Day, Days};

/// Days that are held against those before them, to see whether the law has shifted.
const LATEST: i32 = 7;
const DAY: f64 = 86_400.0;

/// Whom and what every stream of a run is advised with.
#[derive(Clone, Copy, Debug)]
pub struct Terms<'a> {
    /// What is asked for; without a policy the assumption of [`Entry::without_policy`].
    pub policy: Option<&'a Policy>,
    /// Last day of the data, from which windows reach back; `None` where no wait carries a time.
    pub newest: Option<i32>,
    /// Seed of everything drawn.
    pub seed: u64,
    /// What was settled before; `None` where nothing is known of it.
    pub past: Option<&'a Past>,
}

impl Terms<'_> {
    /// The entry that speaks for a stream, with the settled time in force; one without an aim where the policy has none
    /// for it.
    pub fn entry(&self, stream: &str) -> Entry {
        let mut entry = self.written(stream);
        entry.now = self.before(stream).now.or(entry.now);
        entry
    }

    /// What was settled of a stream.
    fn before(&self, stream: &str) -> Before {
        self.past.map(|past| past.of(stream)).unwrap_or_default()
    }

    /// The entry as the policy has it.
    fn written(&self, stream: &str) -> Entry {
        match self.policy {
            None => Entry::without_policy(),
            Some(policy) => policy
                .entry_for(stream)
                .map_or_else(|| Entry { worth: None, ..Entry::without_policy() }, |(entry, _)| entry.clone()),
        }
    }

    /// Advice on one stream from its days: those in the window of its entry, counted back from the newest day of all.
    /// Independent of the other streams.
    pub fn advise(&self, stream: &str, days: &Days, suspicion: Option<&str>) -> Advice {
        self.advise_among(stream, days, suspicion, &Lenders::default())
    }

    /// The same, where the stream may borrow from others of its policy entry.
    pub fn advise_among(
        &self,
        stream: &str,
        days: &Days,
        suspicion: Option<&str>,
        lenders: &Lenders,
    ) -> Advice {
        self.study_among(stream, days, suspicion, lenders).into_advice()
    }

    /// The same with what the advice rests on.
    pub fn study_among(
        &self,
        stream: &str,
        days: &Days,
        suspicion: Option<&str>,
        lenders: &Lenders,
    ) -> Study {
        let entry = self.entry(stream);
        let opening = self.opening(&entry);
        let tally = days.since(opening);
        let siblings = lenders.of(entry.number, stream);
        let periods = self.newest.map(|newest| {
            let latest = newest - LATEST + 1;
            let within = |from: i32, to: i32| {
                days.where_day(|day| matches!(day, Day::Number(n) if from <= n && n < to))
            };
            (within(opening, latest), within(latest, newest + 1))
        });
        let case = Case {
            stream,
            tally: &tally,
            periods: periods.as_ref().map(|(earlier, latest)| (earlier, latest)),
            suspicion,
            siblings: &siblings,
            history: self.before(stream).history,
        };
        study(&case, &entry, self.seed ^ name_hash(stream))
    }

    /// First day of an entry's window, days since 1970-01-01.
    pub fn opening(&self, entry: &Entry) -> i32 {
        match self.newest {
            Some(newest) => newest - ((entry.guard.window / DAY).ceil() as i32).max(1) + 1,
            None => i32::MIN,
        }
    }

    /// Which streams can lend to the thin ones of their policy entry; nothing without a policy, and nothing for entries
    /// whose streams all have enough of their own.
    pub fn lenders(&self, streams: &[(&str, &Days)]) -> Lenders {
        let mut lenders = Lenders::default();
        let Some(policy) = self.policy else { return lenders };
        let mut members: HashMap<usize, Vec<(u64, usize)>> = HashMap::new();
        for (i, (stream, days)) in streams.iter().enumerate() {
            if let Some((_, entry)) = policy.entry_for(stream) {
                let done = days.days().iter().map(|(_, tally)| tally.counts()[0]).sum();
                members.entry(entry).or_default().push((done, i));
            }
        }
        for (number, mut of_entry) in members {
            let entry = &policy.entries[number];
            let thin = of_entry.iter().any(|(done, _)| *done < u64::from(entry.guard.evidence));
            if of_entry.len() < 2 || !thin {
                continue;
            }
            of_entry.sort_by_key(|&(done, i)| (std::cmp::Reverse(done), i));
            let opening = self.opening(entry);
            let cells = of_entry.iter().take(MOST_SIBLINGS + 1).map(|&(_, i)| {
                let (stream, days) = streams[i];
                (
                    stream.to_owned(),
                    entry.whole(&days.since(opening).first_attempts()).coarsened(SIBLING_CELLS),
                )
            });
            lenders.by_entry.insert(entry.number, cells.collect());
        }
        lenders
    }

    /// Joins the advice of all streams: in the order of their names, with the cautions that only the whole chain of calls
    /// shows. `made_at`: RFC 3339.
    pub fn set(&self, mut streams: Vec<Advice>, made_at: Option<String>) -> AdviceSet {
        streams.sort_by(|a, b| a.stream.cmp(&b.stream));
        self.check_calls(&mut streams);
        AdviceSet { schema: SCHEMA.to_owned(), made_at, assumed: self.assumed(), streams }
    }

    /// What is assumed for want of a policy.
    pub(crate) fn assumed(&self) -> Vec<String> {
        match self.policy {
            Some(_) => Vec::new(),
            None => vec![
                "no policy: a completion is worth 1, time has another use (aim rate), nothing else costs anything".into(),
                "no give-up time sooner than the 5th percentile of completions is considered, since a free restart would \
                 make the very first look best"
                    .into(),
            ],
        }
    }

    /// A caller that leaves before its callee's schedule ends leaves work running for nobody.
    fn check_calls(&self, streams: &mut [Advice]) {
        let entries: Vec<Entry> = streams.iter().map(|a| self.entry(&a.stream)).collect();
        if entries.iter().all(|entry| entry.calls.is_empty()) {
            return;
        }
        let numbers: HashMap<String, usize> =
            streams.iter().enumerate().map(|(i, a)| (a.stream.clone(), i)).collect();
        let called: Vec<Vec<usize>> = entries
            .iter()
            .map(|entry| entry.calls.iter().filter_map(|name| numbers.get(name).copied()).collect())
            .collect();
        let advised = |i: usize| streams[i].advice.give_up_after_s.unwrap_or(f64::INFINITY);
        // The caller as advised; a callee as it is in force, where that is known.
        let in_force = |i: usize| entries[i].now.map_or(advised(i), GiveUp::seconds);
        let mut found: Vec<(usize, Caution)> = Vec::new();
        for (caller, callee, finding) in early(&entries, &called, &advised, &in_force) {
            if let ChainFinding::LeavesEarly { leaves, ends, attempts, .. } = finding {
                found.push((caller, leaves_first(&streams[callee].stream, leaves, ends, attempts)));
            }
        }
        let all: Vec<Station> =
            (0..streams.len()).map(|i| station(&entries[i], f64::INFINITY, called[i].clone())).collect();
        for finding in check_chain(&all) {
            if let ChainFinding::Circle(path) = finding {
                let names: Vec<&str> = path.iter().map(|&i| streams[i].stream.as_str()).collect();
                found.push((path[0], circle(&names)));
            }
        }
        for (i, caution) in found {
            streams[i].cautions.push(caution);
        }
    }
}

/// A call within which the caller gives up before its callee's schedule has ended.
#[derive(Clone, Debug, PartialEq)]
pub struct EarlyLeave {
    /// Who leaves.
    pub caller: String,
    /// Whom it leaves at work.
    pub callee: String,
    /// What is the matter, and what to do.
    pub caution: Caution,
}

impl Terms<'_> {
    /// The calls among these streams in which the caller, by the times in force, leaves before its callee's schedule ends.
    /// A caller whose time in force is not known is passed over; a callee's is then never.
    pub fn early_leaves(&self, streams: &[&str]) -> Vec<EarlyLeave> {
        let entries: Vec<Entry> = streams.iter().map(|stream| self.entry(stream)).collect();
        let place = |name: &str| streams.iter().position(|stream| *stream == name);
        let called: Vec<Vec<usize>> =
            entries.iter().map(|entry| entry.calls.iter().filter_map(|name| place(name)).collect()).collect();
        let in_force = |i: usize| entries[i].now.map_or(f64::INFINITY, GiveUp::seconds);
        let found = early(&entries, &called, &in_force, &in_force).into_iter().filter_map(
            |(caller, callee, found)| {
                let ChainFinding::LeavesEarly { leaves, ends, attempts, .. } = found else { return None };
                let (caller, callee) = (streams[caller].to_owned(), streams[callee].to_owned());
                Some(EarlyLeave { caution: leaves_first(&callee, leaves, ends, attempts), caller, callee })
            },
        );
        found.collect()
    }
}

fn station(entry: &Entry, give_up_after: f64, calls: Vec<usize>) -> Station {
    Station { give_up_after, retry: retry(entry), pause: mean_pause(entry), calls }
}

/// Callers that leave early, each with its callee. `called`: whom each calls, by place.
fn early(
    entries: &[Entry],
    called: &[Vec<usize>],
    leaves: &dyn Fn(usize) -> f64,
    stays: &dyn Fn(usize) -> f64,
) -> Vec<(usize, usize, ChainFinding)> {
    let mut found = Vec::new();
    for (caller, callees) in called.iter().enumerate().filter(|(_, callees)| !callees.is_empty()) {
        let mut chain = vec![station(&entries[caller], leaves(caller), (1..=callees.len()).collect())];
        chain.extend(callees.iter().map(|&i| station(&entries[i], stays(i), Vec::new())));
        for finding in check_chain(&chain) {
            if let ChainFinding::LeavesEarly { callee, .. } = finding {
                found.push((caller, callees[callee - 1], finding));
            }
        }
    }
    found
}

fn circle(names: &[&str]) -> Caution {
    caution(
        "calls_in_circle",
        format!("the policy's `calls` lead from {} back to where they began", names.join(" to ")),
        "correct `calls`: no chain of waits can end that waits for itself",
    )
}

fn leaves_first(callee: &str, leaves: f64, ends: f64, attempts: u32) -> Caution {
    let until = match ends.is_finite() {
        true => format!("may still be at work until {}", say::duration(ends)),
        false => "may be at work without end".to_owned(),
    };
    let text = format!(
        "it would leave after {} while {callee} {until} (attempt {attempts} of its schedule has begun by then)",
        say::duration(leaves),
    );
    let remedy = format!(
        "shorten the schedule of {callee} below {}, or pass the caller's deadline on to it",
        say::duration(leaves)
    );
    caution("caller_leaves_first", text, remedy)
}

/// Streams with many waits, by policy entry: what its thin ones may borrow from.
#[derive(Clone, Debug, Default)]
pub struct Lenders {
    by_entry: HashMap<usize, Vec<(String, Cells)>>,
}

impl Lenders {
    /// Most streams of an entry from which one borrows.
    pub const MOST: usize = MOST_SIBLINGS;

    /// The siblings of a stream.
    fn of(&self, entry: usize, stream: &str) -> Vec<&Cells> {
        let all = self.by_entry.get(&entry).map(Vec::as_slice).unwrap_or_default();
        all.iter().filter(|(name, _)| name != stream).map(|(_, cells)| cells).take(MOST_SIBLINGS).collect()
    }
}

/// How a stream tries again, from its entry.
fn retry(entry: &Entry) -> Retry {
    Retry {
        attempts: entry.retry.attempts,
        growth: entry.retry.backoff.factor,
        jitter: entry.retry.backoff.jitter == Jitter::Full,
        ..Retry::default()
    }
}

/// The pauses as a schedule counts them: one that is drawn evenly from 0 to its full length lasts half of that on average.
fn mean_pause(entry: &Entry) -> Pause {
    let mut pause = entry.worth.map(|w| w.pause).unwrap_or_default();
    if entry.retry.backoff.jitter == Jitter::Full {
        pause.failed *= 0.5;
        pause.gave_up *= 0.5;
    }
    pause
}

/// FNV-1a of a name: so that a stream's numbers do not depend on which others are there.
pub(crate) fn name_hash(name: &str) -> u64 {
    name.bytes()
        .fold(0xcbf2_9ce4_8422_2325, |hash, byte| (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01b3))
}
