//! The file's text -> decisions. Every mistake names its line and what to do; a file with one is left as it is.

use std::fmt;
use std::rc::Rc;

use jiff::Timestamp;

use super::{Grounds, SCHEMA, Settled, Settlement, State};
use crate::policy::scalar::{self, nearest};
use crate::policy::tree::{self, Node, Pair, Value};
use crate::policy::{GiveUp, Place, Remedy, shown};
use crate::wait::check_stream;

/// Largest file, bytes: 16 MiB.
pub const MAX_BYTES: usize = 16 << 20;
/// Most mistakes that one [`SettledError`] lists.
const MOST: usize = 20;

/// One mistake in the file.
#[derive(Clone, Debug, PartialEq)]
pub struct Mistake {
    /// Where.
    pub at: Place,
    /// What is wrong.
    pub what: String,
    /// What to do.
    pub remedy: String,
}

/// All that is wrong with one file, in the order of its lines; each displayed as `name:line:column: what is wrong` and its
/// remedy.
#[derive(Clone, Debug, PartialEq)]
pub struct SettledError {
    /// The name given for the file.
    pub name: String,
    /// What is wrong; never empty.
    pub mistakes: Vec<Mistake>,
}

impl fmt::Display for SettledError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, Mistake { at, what, remedy }) in self.mistakes.iter().take(MOST).enumerate() {
            let line = if i > 0 { "\n" } else { "" };
            write!(f, "{line}{}:{}:{}: {what}\n  {remedy}", self.name, at.line, at.column)?;
        }
        match self.mistakes.len().saturating_sub(MOST) {
            0 => Ok(()),
            n => write!(f, "\nand {n} more"),
        }
    }
}

impl std::error::Error for SettledError {}

/// Reads the file from its bytes; an empty one holds nothing. `name`: what it is called in messages.
///
/// # Errors
/// [`SettledError`] with every mistake.
pub fn parse(bytes: &[u8], name: &str) -> Result<Settled, SettledError> {
    let mut reader = Reader::default();
    let settled = match std::str::from_utf8(bytes) {
        _ if bytes.len() > MAX_BYTES => {
            reader.told(Place::START, "it is larger than 16 MiB", "keep older decisions in another file");
            None
        }
        Ok(text) => reader.file(text),
        Err(error) => {
            let line = bytes[..error.valid_up_to()].iter().filter(|b| **b == b'\n').count() + 1;
            reader.told(Place { line, column: 1 }, "it is not text in UTF-8", "save the file as UTF-8");
            None
        }
    };
    match settled {
        Some(settled) if reader.0.is_empty() => Ok(settled),
        _ => {
            reader.0.sort_by_key(|mistake| (mistake.at.line, mistake.at.column));
            Err(SettledError { name: name.to_owned(), mistakes: reader.0 })
        }
    }
}

#[derive(Default)]
struct Reader(Vec<Mistake>);

const FILE: [&str; 2] = ["schema", "streams"];
const DECISION: [&str; 7] = ["state", "at", "give_up_after", "until", "by", "why", "grounds"];
const GROUNDS: [&str; 9] =
    ["waits", "done", "from", "to", "in_force", "advised", "proposed", "band", "loses"];
const STATES: [&str; 5] = ["accepted", "pinned", "postponed", "refused", "undone"];

impl Reader {
    fn told(&mut self, at: Place, what: impl Into<String>, remedy: impl Into<String>) {
        self.0.push(Mistake { at, what: what.into(), remedy: remedy.into() });
    }

    fn file(&mut self, text: &str) -> Option<Settled> {
        let root = tree::read(text, &mut |at, fault| self.told(at, fault.to_string(), fault.remedy()));
        let Some(root) = root.filter(|root| !root.is_null()) else {
            return self.0.is_empty().then(Settled::default);
        };
        let pairs = self.map(&root, &FILE, "the file")?;
        match self.text(pairs, root.at, "schema") {
            Some((_, schema)) if schema == SCHEMA => {}
            Some((at, schema)) => self.told(
                at,
                format!("`{}` is not a schema known here", shown(schema)),
                format!("write `schema: {SCHEMA}`, or use the version of outwait that wrote the file"),
            ),
            None => {}
        }
        let mut settled = Settled::default();
        let Some(streams) = find(pairs, "streams") else {
            self.told(root.at, "`streams` is missing", "write `streams: {}` where nothing is settled yet");
            return None;
        };
        let streams = match &streams.value.value {
            Value::Map(streams) => streams.as_slice(),
            _ if streams.value.is_null() => &[],
            _ => {
                self.told(
                    streams.value.at,
                    "`streams` holds no map",
                    "write a stream's name and its list below it",
                );
                return None;
            }
        };
        for Pair { at, key, value } in streams {
            if let Err(error) = check_stream(key) {
                self.told(*at, format!("`{}` names no stream: {error}", shown(key)), error.remedy());
            }
            let Value::List(items) = &value.value else {
                self.told(
                    value.at,
                    format!("`{key}` holds no list of decisions"),
                    "write `- state: accepted` and its keys below it",
                );
                continue;
            };
            let history: Vec<Settlement> = items.iter().filter_map(|item| self.decision(item)).collect();
            if let Some(pair) = history.windows(2).position(|pair| pair[1].at < pair[0].at) {
                let at = items.get(pair + 1).map_or(value.at, |item| item.at);
                self.told(at, "it is older than the decision above it", "put the newest decision last");
            }
            settled.streams.insert(key.clone(), history);
        }
        Some(settled)
    }

    fn map<'t>(&mut self, node: &'t Node, keys: &[&'static str], what: &str) -> Option<&'t [Pair]> {
        let Value::Map(pairs) = &node.value else {
            self.told(
                node.at,
                format!("{what} holds no map of keys"),
                format!("write keys below it: {}", keys.join(", ")),
            );
            return None;
        };
        for pair in pairs.iter().filter(|pair| !keys.contains(&pair.key.as_str())) {
            let remedy = match nearest(&pair.key, keys.iter().copied()) {
                Some(nearest) => format!("did you mean `{nearest}`?"),
                None => format!("the keys are {}", keys.join(", ")),
            };
            self.told(pair.at, format!("`{}` is not a key here", shown(&pair.key)), remedy);
        }
        Some(pairs)
    }

    /// A text that must be there.
    fn text<'t>(&mut self, pairs: &'t [Pair], at: Place, key: &str) -> Option<(Place, &'t str)> {
        match find(pairs, key).map(|pair| &*pair.value) {
            Some(Node { at, value: Value::Scalar { text, .. }, .. }) => Some((*at, text)),
            Some(node) => {
                self.told(node.at, format!("`{key}` holds no single value"), "write one value");
                None
            }
            None => {
                self.told(at, format!("`{key}` is missing"), format!("add `{key}: ...`"));
                None
            }
        }
    }

    fn time(&mut self, pairs: &[Pair], at: Place, key: &str) -> Option<Timestamp> {
        let (at, text) = self.text(pairs, at, key)?;
        let time = text.parse().ok();
        if time.is_none() {
            self.told(
                at,
                format!("`{}` is not a time", shown(text)),
                format!("write for instance `{key}: 2026-11-30T10:00:00Z`"),
            );
        }
        time
    }

    fn give_up(&mut self, pairs: &[Pair], at: Place, key: &str) -> Option<GiveUp> {
        let (at, text) = self.text(pairs, at, key)?;
        self.duration(at, text, key)
    }

    fn duration(&mut self, at: Place, text: &str, key: &str) -> Option<GiveUp> {
        scalar::give_up(text)
            .map_err(|flaw| {
                self.told(
                    at,
                    format!("{key}: {flaw}"),
                    format!("write for instance `{key}: 800ms`, or `never`"),
                )
            })
            .ok()
    }

    fn decision(&mut self, item: &Node) -> Option<Settlement> {
        let pairs = self.map(item, &DECISION, "a decision")?;
        let at = self.time(pairs, item.at, "at");
        let by = self.text(pairs, item.at, "by").map(|(_, by)| by.to_owned());
        let why = self.text(pairs, item.at, "why").map(|(_, why)| why.to_owned());
        let grounds = find(pairs, "grounds").map(|pair| self.grounds(&pair.value));
        let (place, state) = self.text(pairs, item.at, "state")?;
        let (uses_time, uses_until) = (matches!(state, "accepted" | "pinned"), state == "postponed");
        for (key, used) in [("give_up_after", uses_time), ("until", uses_until)] {
            if let Some(pair) = find(pairs, key).filter(|_| !used) {
                self.told(
                    pair.at,
                    format!("`{key}` says nothing where the state is {}", shown(state)),
                    "remove it, or correct the state",
                );
            }
        }
        let state = match state {
            "accepted" => State::Accepted { give_up_after: self.give_up(pairs, item.at, "give_up_after")? },
            "pinned" => State::Pinned { give_up_after: self.give_up(pairs, item.at, "give_up_after")? },
            "postponed" => State::Postponed { until: self.time(pairs, item.at, "until")? },
            "refused" => State::Refused,
            "undone" => State::Undone,
            other => {
                let remedy = nearest(other, STATES.into_iter())
                    .map_or(format!("the states are {}", STATES.join(", ")), |near| {
                        format!("did you mean `{near}`?")
                    });
                self.told(place, format!("`{}` is not a state", shown(other)), remedy);
                return None;
            }
        };
        Some(Settlement { state, at: at?, by: by?, why: why?, grounds: grounds.unwrap_or_default() })
    }

    fn grounds(&mut self, node: &Node) -> Option<Grounds> {
        let pairs = self.map(node, &GROUNDS, "`grounds`")?;
        let mut count = |key| {
            let (at, text) = self.text(pairs, node.at, key)?;
            let number = text.parse().ok();
            if number.is_none() {
                self.told(
                    at,
                    format!("`{}` is not a number of waits", shown(text)),
                    format!("write `{key}` as a whole number"),
                );
            }
            number
        };
        let (waits, done) = (count("waits"), count("done"));
        let text = |key| match find(pairs, key).map(|pair| &pair.value.value) {
            Some(Value::Scalar { text, .. }) => Some(text.clone()),
            _ => None,
        };
        let mut time = |key: &str| find(pairs, key).and_then(|_| self.give_up(pairs, node.at, key));
        let (in_force, advised, proposed) = (time("in_force"), time("advised"), time("proposed"));
        let band = find(pairs, "band").and_then(|pair| self.band(&pair.value));
        let loses =
            find(pairs, "loses").and_then(|_| self.text(pairs, node.at, "loses")).and_then(|(at, text)| {
                let share = text.parse::<f64>().ok().filter(|share| share.is_finite());
                if share.is_none() {
                    self.told(
                        at,
                        format!("`{}` is not a share", shown(text)),
                        "write for instance `loses: 0.05`",
                    );
                }
                share
            });
        let (from, to) = (text("from"), text("to"));
        Some(Grounds { waits: waits?, done: done?, from, to, in_force, advised, proposed, band, loses })
    }

    fn band(&mut self, node: &Node) -> Option<[f64; 2]> {
        let ends: Vec<f64> = match &node.value {
            Value::List(items) => items.iter().filter_map(|item| self.end(item)).collect(),
            _ => Vec::new(),
        };
        let band = <[f64; 2]>::try_from(ends).ok();
        if band.is_none() {
            self.told(node.at, "`band` is not two times", "write for instance `band: [69ms, 84ms]`");
        }
        band
    }

    fn end(&mut self, item: &Rc<Node>) -> Option<f64> {
        let Value::Scalar { text, .. } = &item.value else { return None };
        self.duration(item.at, text, "band").map(GiveUp::seconds)
    }
}

fn find<'t>(pairs: &'t [Pair], key: &str) -> Option<&'t Pair> {
    pairs.iter().find(|pair| pair.key == key)
}
