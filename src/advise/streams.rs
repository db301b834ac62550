//! From a book of many streams to one set of advice: windows, periods, and what only the whole set shows.

use super::{Case, advise, caution};
use crate::advice::{Advice, AdviceSet, SCHEMA};
use crate::policy::{Entry, GiveUp, Jitter, Policy};
use crate::say;
use crate::stopping::{ChainFinding, Retry, Station, check_chain};
use crate::tally::{Day, Days};

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
}

impl Terms<'_> {
    /// The entry that speaks for a stream; one without an aim where the policy has none for it.
    pub fn entry(&self, stream: &str) -> Entry {
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
        let entry = self.entry(stream);
        let opening = match self.newest {
            Some(newest) => newest - ((entry.guard.window / DAY).ceil() as i32).max(1) + 1,
            None => i32::MIN,
        };
        let tally = days.since(opening);
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
        };
        advise(&case, &entry, self.seed ^ name_hash(stream))
    }

    /// Joins the advice of all streams: in the order of their names, with the cautions that only the whole chain of calls
    /// shows. `made_at`: RFC 3339.
    pub fn set(&self, mut streams: Vec<Advice>, made_at: Option<String>) -> AdviceSet {
        streams.sort_by(|a, b| a.stream.cmp(&b.stream));
        self.check_calls(&mut streams);
        AdviceSet { schema: SCHEMA.to_owned(), made_at, assumed: self.assumed(), streams }
    }

    fn assumed(&self) -> Vec<String> {
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
        let number = |name: &String| streams.iter().position(|a| a.stream == *name);
        let stations: Vec<Station> = streams
            .iter()
            .zip(&entries)
            .map(|(advice, entry)| Station {
                // The caller as advised; the callee as it is in force, where that is known.
                give_up_after: advice.advice.give_up_after_s.unwrap_or(f64::INFINITY),
                retry: retry(entry),
                pause: entry.worth.map(|w| w.pause).unwrap_or_default(),
                calls: entry.calls.iter().filter_map(number).collect(),
            })
            .collect();
        let in_force: Vec<Station> = stations
            .iter()
            .zip(&entries)
            .map(|(station, entry)| Station {
                give_up_after: entry.now.map_or(station.give_up_after, GiveUp::seconds),
                ..station.clone()
            })
            .collect();
        for caller in 0..stations.len() {
            if stations[caller].give_up_after.is_infinite() {
                continue;
            }
            let mut chain = in_force.clone();
            chain[caller].give_up_after = stations[caller].give_up_after;
            for finding in check_chain(&chain) {
                let ChainFinding::LeavesEarly { caller: who, callee, leaves, ends, attempts } = finding
                else {
                    continue;
                };
                if who != caller {
                    continue;
                }
                let callee = streams[callee].stream.clone();
                let text = format!(
                    "it would leave after {} while {callee} may still be at work until {} (attempt {attempts} of its \
                     schedule has begun by then)",
                    say::duration(leaves),
                    say::duration(ends),
                );
                let remedy = format!(
                    "shorten the schedule of {callee} below {}, or pass the caller's deadline on to it",
                    say::duration(leaves)
                );
                streams[caller].cautions.push(caution("caller_leaves_first", text, remedy));
            }
        }
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

/// FNV-1a of a name: so that a stream's numbers do not depend on which others are there.
fn name_hash(name: &str) -> u64 {
    name.bytes()
        .fold(0xcbf2_9ce4_8422_2325, |hash, byte| (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01b3))
}
