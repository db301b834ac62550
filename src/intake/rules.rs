//! How spans, data points and samples of telemetry become waits: which stream, which attempt, which ending.
//!
//! Defaults follow the published semantic conventions for telemetry (opentelemetry.io/docs/specs/semconv): `error.type` is
//! there where something went wrong, `http.request.resend_count` numbers resends, a gRPC status of CANCELLED or
//! DEADLINE_EXCEEDED and an `error.type` that speaks of a timeout or a cancellation mean, on the side that waits, that the
//! waiter left. It has given up then; the call has not failed.

use std::borrow::Cow;
use std::fmt;

use crate::glob;
use crate::wait::{Ending, MAX_STREAM_BYTES};

/// Longest template, attribute name or pattern, bytes.
pub const MAX_RULE_BYTES: usize = 1_000;

/// Most conditions of one kind.
pub const MAX_CONDITIONS: usize = 100;

/// What tells one thing from others.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Rules {
    /// How streams are called.
    pub stream: Template,
    /// The attribute that counts how often a request had been sent before.
    pub resends: String,
    /// What is no wait of interest.
    pub left_out: Vec<Condition>,
    /// When the waiter has left.
    pub gave_up: Vec<Condition>,
    /// When it has failed.
    pub failed: Vec<Condition>,
    /// When it is done.
    pub done: Vec<Condition>,
}

impl Default for Rules {
    fn default() -> Rules {
        Rules::named(Template(vec![
            Part::slot(&["service.name"]),
            Part::Text(".".into()),
            Part::slot(&["name"]),
        ]))
    }
}

impl Rules {
    /// The default rules with streams called so.
    pub fn named(stream: Template) -> Rules {
        let (left_out, gave_up, failed, done) = Default::default();
        Rules { stream, resends: "http.request.resend_count".into(), left_out, gave_up, failed, done }
    }
}

/// Names with gaps: `{service.name}.{http.route|name}`. In a gap stands the first of the attributes that is there.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Template(Vec<Part>);

#[derive(Clone, Debug, PartialEq, Eq)]
enum Part {
    Text(String),
    Slot(Vec<String>),
}

impl Part {
    fn slot(names: &[&str]) -> Part {
        Part::Slot(names.iter().map(|name| (*name).to_owned()).collect())
    }
}

/// Why a rule is not one.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum RuleError {
    /// Longer than [`MAX_RULE_BYTES`], or nothing.
    #[error("has no or more than {MAX_RULE_BYTES} bytes")]
    Length,
    /// A brace without its other.
    #[error("has a brace without its other")]
    Brace,
    /// A gap without a name.
    #[error("has a gap without a name of an attribute")]
    Nameless,
    /// A character that no stream's name can hold.
    #[error("holds {letter:?}, which no stream's name can")]
    Letter {
        /// The first such character.
        letter: char,
    },
    /// No `=`.
    #[error("has no `=` between an attribute and a pattern")]
    NoSign,
}

impl Template {
    /// Reads a template.
    ///
    /// # Errors
    /// [`RuleError`].
    pub fn new(text: &str) -> Result<Template, RuleError> {
        if text.is_empty() || text.len() > MAX_RULE_BYTES {
            return Err(RuleError::Length);
        }
        let mut parts = Vec::new();
        let mut rest = text;
        while !rest.is_empty() {
            let open = rest.find('{').unwrap_or(rest.len());
            let (before, after) = rest.split_at(open);
            if before.contains('}') {
                return Err(RuleError::Brace);
            }
            if let Some(letter) = before.chars().find(|c| !is_named(*c)) {
                return Err(RuleError::Letter { letter });
            }
            if !before.is_empty() {
                parts.push(Part::Text(before.to_owned()));
            }
            let Some(inside) = after.strip_prefix('{') else { break };
            let (names, after) = inside.split_once('}').ok_or(RuleError::Brace)?;
            let names: Vec<String> = names.split('|').map(|name| name.trim().to_owned()).collect();
            if names.iter().any(|name| name.is_empty() || name.contains('{')) {
                return Err(RuleError::Nameless);
            }
            parts.push(Part::Slot(names));
            rest = after;
        }
        Ok(Template(parts))
    }

    /// Writes the name of a stream: what it cannot hold becomes `_`, one for a run of such characters; what is too long
    /// is cut. Where nothing is there for a gap, `unknown` stands in it.
    pub fn write<'a>(&self, facts: &impl Facts<'a>, name: &mut String) {
        name.clear();
        for part in &self.0 {
            match part {
                Part::Text(text) => clean(text, name),
                Part::Slot(names) => {
                    let found =
                        names.iter().find_map(|name| facts.find(name).filter(|value| !value.is_empty()));
                    clean(found.as_deref().unwrap_or("unknown"), name);
                }
            }
        }
        if name.is_empty() {
            name.push('_');
        }
    }
}

impl fmt::Display for Template {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for part in &self.0 {
            match part {
                Part::Text(text) => f.write_str(text)?,
                Part::Slot(names) => write!(f, "{{{}}}", names.join("|"))?,
            }
        }
        Ok(())
    }
}

/// Whether a stream's name can hold it.
fn is_named(c: char) -> bool {
    c.is_alphanumeric() || matches!(c, '.' | '_' | '-' | '/' | ':')
}

fn clean(text: &str, name: &mut String) {
    for c in text.chars() {
        if is_named(c) {
            if name.len() + c.len_utf8() > MAX_STREAM_BYTES {
                return;
            }
            name.push(c);
        } else if !name.ends_with('_') && name.len() < MAX_STREAM_BYTES {
            name.push('_');
        }
    }
}

/// `attribute=pattern`, with `*` for any run of characters and `?` for one: whether the attribute is there and fits.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Condition {
    attribute: String,
    pattern: String,
}

impl Condition {
    /// Reads a condition.
    ///
    /// # Errors
    /// [`RuleError`].
    pub fn new(text: &str) -> Result<Condition, RuleError> {
        if text.len() > MAX_RULE_BYTES {
            return Err(RuleError::Length);
        }
        let (attribute, pattern) = text.split_once('=').ok_or(RuleError::NoSign)?;
        if attribute.trim().is_empty() {
            return Err(RuleError::Nameless);
        }
        Ok(Condition { attribute: attribute.trim().to_owned(), pattern: pattern.trim().to_owned() })
    }

    fn holds<'a>(&self, facts: &impl Facts<'a>) -> bool {
        facts.find(&self.attribute).is_some_and(|value| glob::fits(&self.pattern, &value))
    }
}

impl fmt::Display for Condition {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}={}", self.attribute, self.pattern)
    }
}

/// What is known of a span, a data point or a sample, by name.
pub trait Facts<'a> {
    /// The value of an attribute, the nearest first: of the thing itself, then of where it comes from.
    fn find(&self, name: &str) -> Option<Cow<'a, str>>;

    /// Whether it is on the side that waits, so that a timeout or a cancellation is the waiter's own.
    fn waits(&self) -> bool;

    /// What its writer says of its ending, where he does.
    fn said(&self) -> Option<Ending>;
}

impl Rules {
    /// How it ended; `None` if it is left out. The policy's own rules come first, in the order `left_out`, `gave_up`,
    /// `failed`, `done`.
    pub fn ending<'a>(&self, facts: &impl Facts<'a>) -> Option<Ending> {
        let any = |conditions: &[Condition]| conditions.iter().any(|condition| condition.holds(facts));
        if any(&self.left_out) {
            return None;
        }
        for (conditions, ending) in
            [(&self.gave_up, Ending::GaveUp), (&self.failed, Ending::Failed), (&self.done, Ending::Done)]
        {
            if any(conditions) {
                return Some(ending);
            }
        }
        let said = facts.said();
        if said == Some(Ending::Done) {
            return said;
        }
        let error = facts.find("error.type").filter(|kind| !kind.is_empty());
        if said.is_none() && error.is_none() && !has_grpc_status(facts) {
            return Some(Ending::Done);
        }
        if facts.waits() && (error.as_deref().is_some_and(is_departure) || is_grpc_departure(facts)) {
            return Some(Ending::GaveUp);
        }
        Some(if said.is_some() || error.is_some() { Ending::Failed } else { Ending::Done })
    }
}

/// Attributes in which a gRPC or Connect call's status stands, as a number or a word, old names and new.
const GRPC_STATUS: [&str; 3] =
    ["rpc.response.status_code", "rpc.grpc.status_code", "rpc.connect_rpc.error_code"];

fn has_grpc_status<'a>(facts: &impl Facts<'a>) -> bool {
    GRPC_STATUS.iter().any(|name| facts.find(name).is_some())
}

fn is_grpc_departure<'a>(facts: &impl Facts<'a>) -> bool {
    GRPC_STATUS.iter().filter_map(|name| facts.find(name)).any(|status| {
        let is = |words: &[&str]| words.iter().any(|word| status.eq_ignore_ascii_case(word));
        is(&["1", "CANCELLED", "CANCELED"]) || is(&["4", "DEADLINE_EXCEEDED"])
    })
}

/// Whether an `error.type` speaks of a timeout or a cancellation: `timeout`, `java.net.SocketTimeoutException`,
/// `context.deadlineExceededError`, `System.Threading.Tasks.TaskCanceledException`.
fn is_departure(kind: &str) -> bool {
    let kind: String = kind.chars().take(200).flat_map(char::to_lowercase).collect();
    ["timeout", "timed_out", "timedout", "cancel", "deadlineexceeded", "deadline_exceeded"]
        .iter()
        .any(|word| kind.contains(word))
}

#[cfg(test)]
mod tests {
    use super::*;

    struct Of(&'static [(&'static str, &'static str)], Option<Ending>, bool);

    impl<'a> Facts<'a> for Of {
        fn find(&self, name: &str) -> Option<Cow<'a, str>> {
            self.0.iter().find(|(n, _)| *n == name).map(|(_, value)| Cow::Borrowed(*value))
        }
        fn waits(&self) -> bool {
            self.2
        }
        fn said(&self) -> Option<Ending> {
            self.1
        }
    }

    #[test]
    fn names() {
        let facts =
            Of(&[("service.name", "catalogue"), ("name", "GET /items/{id}"), ("empty", "")], None, true);
        let named = |text: &str| {
            let mut name = String::new();
            Template::new(text).unwrap().write(&facts, &mut name);
            crate::wait::check_stream(&name).unwrap();
            name
        };
        assert_eq!(named("{service.name}.{name}"), "catalogue.GET_/items/_id_");
        assert_eq!(named("{http.route|name}"), "GET_/items/_id_");
        assert_eq!(named("{empty|service.name}"), "catalogue");
        assert_eq!(named("{nothing}"), "unknown");
        assert_eq!(Template::new("a %"), Err(RuleError::Letter { letter: ' ' }));
        assert_eq!(named(&"é".repeat(300)).len(), 200);
        assert_eq!(Template::new("{a|b}.c").unwrap().to_string(), "{a|b}.c");
        for (text, error) in [
            ("", RuleError::Length),
            ("a}", RuleError::Brace),
            ("{a", RuleError::Brace),
            ("{}", RuleError::Nameless),
        ] {
            assert_eq!(Template::new(text), Err(error), "{text}");
        }
    }

    #[test]
    fn endings() {
        let rules = Rules::default();
        let ending = |facts, said, waits| rules.ending(&Of(facts, said, waits)).unwrap();
        let failed = Some(Ending::Failed);
        assert_eq!(ending(&[], None, true), Ending::Done);
        assert_eq!(ending(&[], failed, true), Ending::Failed);
        assert_eq!(ending(&[("error.type", "500")], None, true), Ending::Failed);
        assert_eq!(ending(&[("error.type", "timeout")], failed, true), Ending::GaveUp);
        assert_eq!(ending(&[("error.type", "timeout")], failed, false), Ending::Failed, "the server's own");
        assert_eq!(
            ending(&[("error.type", "timeout")], Some(Ending::Done), true),
            Ending::Done,
            "it says so"
        );
        assert_eq!(
            ending(&[("error.type", "System.OperationCanceledException")], failed, true),
            Ending::GaveUp
        );
        assert_eq!(ending(&[("rpc.grpc.status_code", "4")], failed, true), Ending::GaveUp);
        assert_eq!(ending(&[("rpc.grpc.status_code", "14")], failed, true), Ending::Failed);
        assert_eq!(ending(&[("rpc.grpc.status_code", "0")], None, true), Ending::Done);
        assert_eq!(ending(&[("rpc.response.status_code", "DEADLINE_EXCEEDED")], None, true), Ending::GaveUp);
        let own = Rules {
            left_out: vec![Condition::new("kind=internal").unwrap()],
            failed: vec![Condition::new("code = 5*").unwrap()],
            ..Rules::default()
        };
        assert_eq!(own.ending(&Of(&[("kind", "internal")], None, true)), None);
        assert_eq!(own.ending(&Of(&[("code", "503")], None, true)), Some(Ending::Failed));
        assert_eq!(own.ending(&Of(&[("code", "200")], None, true)), Some(Ending::Done));
        assert_eq!(Condition::new("code"), Err(RuleError::NoSign));
    }
}
