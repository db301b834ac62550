//! What a policy says without fault that its writer may not have meant.

use super::Glob;
use super::entry::{Entry, Kind, Retry, aim_name};
use super::finding::Concern;
use super::keys::{self, Key};
use super::read::{Fields, Reader};
use super::tree::Node;
use crate::stopping::{Aim, Worth};
use std::collections::{HashMap, HashSet};
use std::rc::Rc;

impl Reader {
    /// Prices that the aim does not look at (METHODS.md section 5), or that turn it on its head.
    pub(super) fn check_prices(&mut self, entry: &Fields<'_>, worth: &Worth) {
        let idle: &[&'static Key] = match worth.aim {
            Aim::Rate => &[&keys::CARRYING_COST, &keys::DEADLINE],
            Aim::Finish => {
                &[&keys::WORTH, &keys::FADES, &keys::ATTEMPT_COST, &keys::CARRYING_COST, &keys::DEADLINE]
            }
            Aim::CarryingCost(_) => &[&keys::ATTEMPT_COST, &keys::DEADLINE],
            Aim::Deadline { .. } => &[&keys::WORTH, &keys::FADES, &keys::ATTEMPT_COST, &keys::CARRYING_COST],
        };
        for &key in idle {
            if let Some(pair) = entry.get(key) {
                self.concern(pair.at, key, Concern::NoEffect { aim: aim_name(worth.aim) });
            }
        }
        if worth.gave_up >= worth.done && matches!(worth.aim, Aim::Rate | Aim::CarryingCost(_)) {
            self.concern(entry.place(&keys::WORTH), &keys::WORTH, Concern::PaidToLeave);
        }
    }

    /// An entry without an aim, and prices of time that only an aim would use.
    pub(super) fn check_aimless(&mut self, entry: &Fields<'_>) {
        self.concern(entry.at, &keys::AIM, Concern::NoCostOfTime);
        for key in [&keys::CARRYING_COST, &keys::DEADLINE] {
            if let Some(pair) = entry.get(key) {
                self.concern(pair.at, key, Concern::NoAim { aim: key.name });
            }
        }
    }

    /// Retries of what may not be repeated, and a ceiling that cannot bind.
    pub(super) fn check_retry(&mut self, map: &Fields<'_>, retry: &Retry, kind: Kind) {
        if retry.attempts != Some(1) && !retry.repeatable {
            match (map.get(&keys::REPEATABLE), retry.attempts) {
                (None, _) => self.concern(map.at, &keys::REPEATABLE, Concern::RepeatableUnstated { kind }),
                (Some(pair), Some(attempts)) => {
                    self.concern(pair.at, &keys::REPEATABLE, Concern::Repeated { attempts, kind });
                }
                (Some(_), None) => {}
            }
        }
        if let (Some(ceiling), Some(attempts)) = (retry.load_ceiling, retry.attempts)
            && ceiling >= f64::from(attempts)
        {
            let at = map.place(&keys::LOAD_CEILING);
            self.concern(at, &keys::LOAD_CEILING, Concern::IdleCeiling { attempts });
        }
    }

    /// Entries that no stream reaches, and callees that no entry speaks for. `nodes`: the entries' own.
    pub(super) fn check_together(&mut self, entries: &[Entry], nodes: &[Rc<Node>]) {
        let mut literals: HashMap<&str, usize> = HashMap::new();
        let mut wild: Vec<(&Glob, usize)> = Vec::new();
        for (i, entry) in entries.iter().enumerate() {
            let literal = entry.matches.literal();
            let by = literal
                .and_then(|name| literals.get(name).copied())
                .into_iter()
                .chain(wild.iter().find(|(glob, _)| glob.covers(&entry.matches)).map(|&(_, by)| by))
                .min();
            if let Some(by) = by {
                let earlier = &entries[by];
                let what = Concern::Shadowed {
                    by: by + 1,
                    pattern: earlier.matches.to_string(),
                    line: earlier.line,
                };
                self.entry = Some(i + 1);
                self.concern(nodes[i].place(keys::MATCH.name), &keys::MATCH, what);
            }
            match literal {
                Some(name) => _ = literals.entry(name).or_insert(i),
                None => wild.push((&entry.matches, i)),
            }
        }
        let named: HashSet<&str> = literals.into_keys().collect();
        for (i, entry) in entries.iter().enumerate() {
            self.entry = Some(i + 1);
            let at = nodes[i].place(keys::CALLS.name);
            for callee in &entry.calls {
                if entry.matches.literal() == Some(callee) {
                    self.concern(at, &keys::CALLS, Concern::CallsItself(callee.clone()));
                } else if !named.contains(callee.as_str())
                    && !wild.iter().any(|(glob, _)| glob.matches(callee))
                {
                    self.concern(at, &keys::CALLS, Concern::UnknownCallee(callee.clone()));
                }
            }
        }
        self.entry = None;
    }
}
