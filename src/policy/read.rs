//! Reading keys from the tree. A fault is told and reading goes on, so that one run shows all that is wrong.

use super::PolicyError;
use super::entry::Policy;
use super::finding::{Concern, Fault, Finding, Flaw, Place, Problem, Warning, shown};
use super::keys::{KEYS, Key, MAX_PROBLEMS, Section};
use super::scalar::nearest;
use super::tree::{Node, Pair, Value};
use std::collections::BTreeSet;
use std::rc::Rc;

/// Faults kept before the rest is only counted; some come out of order, and all are sorted in the end.
const KEPT: usize = 20 * MAX_PROBLEMS;

/// Collects what there is to tell.
#[derive(Default)]
pub(super) struct Reader {
    problems: Vec<Problem>,
    warnings: Vec<Warning>,
    unlisted: usize,
    /// Number of the entry being read, from 1.
    pub(super) entry: Option<usize>,
}

/// A map of the file, its keys checked against those of its section.
pub(super) struct Fields<'t> {
    pub(super) at: Place,
    section: Section,
    pairs: &'t [Pair],
}

impl<'t> Fields<'t> {
    pub(super) fn get(&self, key: &'static Key) -> Option<&'t Pair> {
        debug_assert_eq!(key.section, self.section, "{}", key.name);
        self.pairs.iter().find(|pair| pair.key == key.name)
    }

    /// Where the value of a key stands; where the map does, if the key is absent.
    pub(super) fn place(&self, key: &'static Key) -> Place {
        self.get(key).map_or(self.at, |pair| pair.value.at)
    }
}

impl Reader {
    pub(super) fn finish(mut self, policy: Option<Policy>, name: &str) -> Result<Policy, PolicyError> {
        match policy {
            Some(mut policy) if self.problems.is_empty() => {
                self.warnings.sort_by_key(|warning| (warning.at.line, warning.at.column));
                policy.warnings = self.warnings;
                Ok(policy)
            }
            _ => {
                self.problems.sort_by_key(|problem| (problem.at.line, problem.at.column));
                let unlisted = self.unlisted + self.problems.len().saturating_sub(MAX_PROBLEMS);
                self.problems.truncate(MAX_PROBLEMS);
                Err(PolicyError { name: name.to_owned(), problems: self.problems, unlisted })
            }
        }
    }

    pub(super) fn is_faultless(&self) -> bool {
        self.problems.is_empty()
    }

    pub(super) fn fault(&mut self, at: Place, key: impl Into<String>, what: Fault) {
        if self.problems.len() < KEPT {
            self.problems.push(Finding { at, entry: self.entry, key: key.into(), what });
        } else {
            self.unlisted += 1;
        }
    }

    pub(super) fn concern(&mut self, at: Place, key: &'static Key, what: Concern) {
        self.warnings.push(Finding { at, entry: self.entry, key: key.path(), what });
    }

    /// The keys of a map, each known to its section; `holder` is the key whose value the map is.
    pub(super) fn fields<'t>(
        &mut self,
        node: &'t Node,
        section: Section,
        holder: &'static Key,
    ) -> Option<Fields<'t>> {
        let Value::Map(pairs) = &node.value else {
            self.fault(node.at, section.path(), Fault::Unfit { flaw: misshapen(node), key: holder });
            return None;
        };
        for pair in pairs {
            if !section.keys().any(|key| key.name == pair.key) {
                self.unknown_key(pair, section);
            }
        }
        Some(Fields { at: node.at, section, pairs })
    }

    fn unknown_key(&mut self, pair: &Pair, section: Section) {
        // The search for the nearest key is not worth its time once nothing more is shown.
        let searched = self.problems.len() < KEPT;
        let what = Fault::UnknownKey {
            key: shown(&pair.key),
            section,
            // Keys of a page or a log have common names; who writes one elsewhere does not mean these.
            home: KEYS
                .iter()
                .find(|key| key.name == pair.key && !matches!(key.section, Section::Scrape | Section::Follow))
                .map(|key| key.section),
            nearest: searched.then(|| nearest(&pair.key, section.keys().map(|key| key.name))).flatten(),
        };
        self.fault(pair.at, section.path(), what);
    }

    /// The map under a key.
    pub(super) fn map<'t>(
        &mut self,
        fields: &Fields<'t>,
        key: &'static Key,
        section: Section,
    ) -> Option<Fields<'t>> {
        let pair = fields.get(key)?;
        if pair.value.is_null() {
            self.unfit(pair.at, key, Flaw::Nothing);
            return None;
        }
        self.fields(&pair.value, section, key)
    }

    /// The items of the list under a key.
    pub(super) fn items<'t>(&mut self, fields: &Fields<'t>, key: &'static Key) -> Option<&'t [Rc<Node>]> {
        let pair = fields.get(key)?;
        match &pair.value.value {
            Value::List(items) => Some(items),
            _ if pair.value.is_null() => {
                self.unfit(pair.at, key, Flaw::Nothing);
                None
            }
            _ => {
                self.unfit(pair.value.at, key, misshapen(&pair.value));
                None
            }
        }
    }

    /// The sources under a key, at most `most`; of two by one name (by `key` of theirs) the first, since both would count
    /// the same waits.
    pub(super) fn sources<T>(
        &mut self,
        fields: &Fields<'_>,
        (list, most): (&'static Key, usize),
        one: impl Fn(&mut Reader, &Node) -> Option<T>,
        (key, name): (&'static Key, impl Fn(&T) -> String),
    ) -> Vec<T> {
        let items = self.items(fields, list).unwrap_or_default();
        if items.len() > most {
            let flaw = Flaw::Range { value: format!("{} entries", items.len()) };
            self.unfit(fields.place(list), list, flaw);
            return Vec::new();
        }
        let (mut all, mut names) = (Vec::with_capacity(items.len()), BTreeSet::new());
        for node in items {
            let Some(source) = one(self, node) else { continue };
            let name = name(&source);
            match names.insert(name.clone()) {
                true => all.push(source),
                false => self.unfit(node.at, key, Flaw::Again { value: shown(&name) }),
            }
        }
        all
    }

    /// The single value under a key, if it is there and fit.
    pub(super) fn value<T>(
        &mut self,
        fields: &Fields<'_>,
        key: &'static Key,
        read: impl FnOnce(&str) -> Result<T, Flaw>,
    ) -> Option<T> {
        let pair = fields.get(key)?;
        self.scalar(&pair.value, pair.at, key, read)
    }

    /// As [`Reader::value`], for a key that must be there.
    pub(super) fn required<T>(
        &mut self,
        fields: &Fields<'_>,
        key: &'static Key,
        read: impl FnOnce(&str) -> Result<T, Flaw>,
    ) -> Option<T> {
        if fields.get(key).is_none() {
            self.fault(fields.at, key.section.path(), Fault::Missing(key));
        }
        self.value(fields, key, read)
    }

    /// A single value; `at` is where to point if nothing is written.
    pub(super) fn scalar<T>(
        &mut self,
        node: &Node,
        at: Place,
        key: &'static Key,
        read: impl FnOnce(&str) -> Result<T, Flaw>,
    ) -> Option<T> {
        let (at, flaw) = match &node.value {
            _ if node.is_null() => (at, Flaw::Nothing),
            Value::Scalar { text, .. } => match read(text) {
                Ok(value) => return Some(value),
                Err(flaw) => (node.at, flaw),
            },
            _ => (node.at, misshapen(node)),
        };
        self.unfit(at, key, flaw);
        None
    }

    pub(super) fn unfit(&mut self, at: Place, key: &'static Key, flaw: Flaw) {
        self.fault(at, key.path(), Fault::Unfit { flaw, key });
    }
}

fn misshapen(node: &Node) -> Flaw {
    match &node.value {
        Value::Scalar { text, .. } => Flaw::Unreadable { value: shown(text) },
        Value::List(_) => Flaw::Shape { found: "a list" },
        Value::Map(_) => Flaw::Shape { found: "a map" },
    }
}
