//! What can be wrong with a policy, where, and what to do about it.

use super::keys::{self, Key, MAX_BYTES, MAX_DEPTH, MAX_ENTRIES, MAX_VALUES, Section};
use super::{GlobError, Kind};
use crate::intake::RuleError;
use crate::say;
use crate::wait::StreamError;
use serde::ser::{Serialize, SerializeStruct, Serializer};
use std::fmt;

/// A place in the file.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Place {
    /// Line, from 1.
    pub line: usize,
    /// Column in characters, from 1.
    pub column: usize,
}

impl Place {
    /// Where the file begins.
    pub(crate) const START: Place = Place { line: 1, column: 1 };
}

/// Something to tell about one place of a policy: [`Problem`] or [`Warning`].
#[derive(Clone, Debug, PartialEq)]
pub struct Finding<What> {
    /// Where.
    pub at: Place,
    /// Number of the entry concerned, from 1; `None` for the file as a whole.
    pub entry: Option<usize>,
    /// Path of the key inside its entry (`guard.slack`) or of the file (`version`); empty for neither.
    pub key: String,
    /// What there is to tell.
    pub what: What,
}

/// What makes a policy unusable.
pub type Problem = Finding<Fault>;

/// What makes a usable policy mean something other than it seems to.
pub type Warning = Finding<Concern>;

/// What to do about a finding.
pub trait Remedy: fmt::Display {
    /// The remedy, one clause without a full stop.
    fn remedy(&self) -> String;
}

impl<What: Remedy> fmt::Display for Finding<What> {
    /// `entry 1, guard.slack: what is wrong`, and the remedy on a line of its own.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match (self.entry, self.key.as_str()) {
            (Some(n), "") => write!(f, "entry {n}: ")?,
            (Some(n), key) => write!(f, "entry {n}, {key}: ")?,
            (None, "") => {}
            (None, key) => write!(f, "{key}: ")?,
        }
        write!(f, "{}\n  {}", self.what, self.what.remedy())
    }
}

impl<What: Remedy> Serialize for Finding<What> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut fields = serializer.serialize_struct("Finding", 6)?;
        fields.serialize_field("line", &self.at.line)?;
        fields.serialize_field("column", &self.at.column)?;
        fields.serialize_field("entry", &self.entry)?;
        fields.serialize_field("key", &self.key)?;
        fields.serialize_field("text", &self.what.to_string())?;
        fields.serialize_field("remedy", &self.what.remedy())?;
        fields.end()
    }
}

/// All that is wrong with one policy, in the order of its lines. Displayed one finding after the other, each as
/// `name:line:column: what is wrong` and its remedy.
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct PolicyError {
    /// The name given for the file.
    pub name: String,
    /// What is wrong; never empty, at most [`super::MAX_PROBLEMS`].
    pub problems: Vec<Problem>,
    /// How many more there are.
    pub unlisted: usize,
}

impl fmt::Display for PolicyError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, problem) in self.problems.iter().enumerate() {
            if i > 0 {
                f.write_str("\n")?;
            }
            write!(f, "{}:{}:{}: {problem}", self.name, problem.at.line, problem.at.column)?;
        }
        match self.unlisted {
            0 => Ok(()),
            n => write!(f, "\nand {n} more"),
        }
    }
}

impl std::error::Error for PolicyError {}

/// Why a policy is refused.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Fault {
    /// Nothing but blanks and comments.
    #[error("the policy is empty")]
    Empty,
    /// Larger than [`MAX_BYTES`].
    #[error("the policy has {bytes} bytes, more than {MAX_BYTES}")]
    Large {
        /// Its size.
        bytes: usize,
    },
    /// Not UTF-8.
    #[error("the byte 0x{byte:02x} is not UTF-8 text")]
    NotText {
        /// The first byte that is not.
        byte: u8,
    },
    /// Not YAML.
    #[error("not YAML: {message}")]
    Syntax {
        /// The parser's words.
        message: String,
        /// What most likely brought it about.
        slip: Slip,
    },
    /// More than one YAML document.
    #[error("a second document begins here")]
    Documents,
    /// Nested deeper than [`MAX_DEPTH`].
    #[error("values are nested more than {MAX_DEPTH} deep")]
    Deep,
    /// More values than [`MAX_VALUES`] once aliases are followed.
    #[error("the policy holds more than {MAX_VALUES} values once its aliases are followed")]
    Expands,
    /// An alias inside the value that it names.
    #[error("the alias stands inside the value it refers to")]
    Circular,
    /// More entries than [`MAX_ENTRIES`].
    #[error("the policy has {entries} entries, more than {MAX_ENTRIES}")]
    Entries {
        /// How many.
        entries: usize,
    },
    /// A YAML tag.
    #[error("the tag `{tag}` means nothing here")]
    Tag {
        /// The tag.
        tag: String,
    },
    /// A list or a map where a key should be.
    #[error("a key must be a single word")]
    KeyShape,
    /// A key that does not exist.
    #[error("`{key}` is not a key here")]
    UnknownKey {
        /// The key, cut to 60 characters.
        key: String,
        /// Where it stands.
        section: Section,
        /// The section to which a key of that name belongs.
        home: Option<Section>,
        /// The nearest key that could stand here.
        nearest: Option<&'static str>,
    },
    /// A key given twice.
    #[error("`{key}` was given before, on line {first}")]
    Duplicate {
        /// The key.
        key: String,
        /// The line on which it stands first.
        first: usize,
    },
    /// A key that must be given.
    #[error("`{}` is missing; wanted: {}", .0.name, .0.takes)]
    Missing(&'static Key),
    /// A value that is not what its key takes.
    #[error("{flaw}; wanted: {}", .key.takes)]
    Unfit {
        /// What is wrong with it.
        flaw: Flaw,
        /// The key.
        key: &'static Key,
    },
    /// A pattern that no stream name could match.
    #[error("`{pattern}` {why}")]
    Pattern {
        /// The pattern, cut to 60 characters.
        pattern: String,
        /// Why.
        why: GlobError,
    },
    /// A name that is no stream's.
    #[error("`{name}` is not a stream name: {why}")]
    Stream {
        /// The name, cut to 60 characters.
        name: String,
        /// Why.
        why: StreamError,
    },
    /// Not exactly one way to fade.
    #[error("the worth fades in {given} ways; wanted: {}", super::keys::FADES.takes)]
    Fades {
        /// How many are given.
        given: usize,
    },
    /// An aim without the key that it needs.
    #[error("`aim: {aim}` needs `{}`", .key.name)]
    AimNeeds {
        /// The aim.
        aim: &'static str,
        /// What it needs.
        key: &'static Key,
    },
    /// A floor that is not below its ceiling.
    #[error("the floor {} is not below the ceiling {}", say::duration(*.floor), say::duration(*.ceiling))]
    NoRoom {
        /// Floor, s.
        floor: f64,
        /// Ceiling, s.
        ceiling: f64,
    },
}

impl Remedy for Fault {
    fn remedy(&self) -> String {
        match self {
            Fault::Empty => "begin with `version: 1`, then `streams:` with an entry `- match: \"*\"`".into(),
            Fault::Large { .. } => "match more streams with fewer entries (`match: \"catalogue.*\"`)".into(),
            Fault::NotText { .. } => "save the file as UTF-8".into(),
            Fault::Syntax { slip: Slip::Tab, .. } => "indent with spaces, not with tabs".into(),
            Fault::Syntax { slip: Slip::Star, .. } => {
                "put quotes around a pattern that begins with * (`match: \"*\"`); unquoted, `*name` is an alias and \
                 needs an anchor `&name` before it"
                    .into()
            }
            Fault::Syntax { slip: Slip::Other, .. } => {
                "check indentation, quotes and brackets here and on the line before".into()
            }
            Fault::Documents => "keep one document a file; remove the `---`".into(),
            Fault::Deep => "remove the inner levels; no key takes them".into(),
            Fault::Expands => "write fewer entries, or match more streams with each".into(),
            Fault::Circular => "refer to a value that ends before this line".into(),
            Fault::Entries { .. } => {
                "match more streams with fewer entries (`match: \"catalogue.*\"`)".into()
            }
            Fault::Tag { .. } => "remove it; what a value is follows from its key".into(),
            Fault::KeyShape => "write `key: value`".into(),
            Fault::UnknownKey { key, .. } if key == "<<" => {
                "keys are not merged; give a whole value an anchor (`guard: &usual {...}`) and refer to it \
                 (`guard: *usual`)"
                    .into()
            }
            Fault::UnknownKey { section: Section::Follow, key, .. } if key == "stream" => {
                format!("write `{}: NAME`, the stream of all its waits", keys::FOLLOW_AS.name)
            }
            Fault::UnknownKey { home: Some(home), key, .. } => match home {
                Section::File => format!("write `{key}` at the top, outside every entry"),
                Section::Entry => format!("write `{key}` in an entry of `streams`"),
                _ => format!("write `{key}` under `{}`", home.path()),
            },
            Fault::UnknownKey { nearest: Some(nearest), .. } => format!("did you mean `{nearest}`?"),
            Fault::UnknownKey { section, .. } => {
                let known: Vec<&str> = section.keys().map(|key| key.name).collect();
                format!("known here: {}", known.join(", "))
            }
            Fault::Duplicate { .. } => "keep one of the two".into(),
            Fault::Missing(key) => format!("add for instance `{}: {}`", key.name, key.example),
            Fault::Unfit { flaw: Flaw::NoUnit { value }, .. } => {
                format!("write {value}ms, {value}s, {value}min, {value}h or {value}d, whichever is meant")
            }
            Fault::Unfit { flaw: Flaw::Choice { nearest: Some(nearest), .. }, .. } => {
                format!("did you mean `{nearest}`?")
            }
            Fault::Unfit { flaw: Flaw::Nothing, key } => {
                format!("write for instance `{}: {}`, or remove the line", key.name, key.example)
            }
            Fault::Unfit { key, .. } => format!("write for instance `{}: {}`", key.name, key.example),
            Fault::Pattern { why: GlobError::Letter { .. }, .. } => {
                "use letters, digits and . _ - / :, with * for any run and ? for one character".into()
            }
            Fault::Pattern { .. } => "write for instance `match: \"catalogue.*\"`".into(),
            Fault::Stream { why: StreamError::Letter { letter: '*' | '?' }, .. } => {
                "name each stream; patterns stand only in `match`".into()
            }
            Fault::Stream { why, .. } => why.remedy().into(),
            Fault::Fades { .. } => "write for instance `fades: {half_life: 4h}`".into(),
            Fault::AimNeeds { key, .. } => format!("add for instance `{}: {}`", key.name, key.example),
            Fault::NoRoom { .. } => "lower the floor or raise the ceiling".into(),
        }
    }
}

/// What most likely brought about a fault of syntax.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Slip {
    /// A tab among the spaces that indent a line.
    Tab,
    /// A pattern that begins with `*`, without quotes; or an alias without its anchor.
    Star,
    /// Not known.
    Other,
}

/// What is wrong with one value.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Flaw {
    /// No value at all.
    #[error("there is no value")]
    Nothing,
    /// A list, a map or a single value where something else should be.
    #[error("{found} stands here")]
    Shape {
        /// What is there, with its article.
        found: &'static str,
    },
    /// A duration without its unit.
    #[error("`{value}` has no unit")]
    NoUnit {
        /// The value.
        value: String,
    },
    /// A text that does not say what the key takes.
    #[error("`{value}` cannot be read")]
    Unreadable {
        /// The value, cut to 60 characters.
        value: String,
    },
    /// A word that is none of the choices.
    #[error("`{value}` is not one of them")]
    Choice {
        /// The value, cut to 60 characters.
        value: String,
        /// The nearest choice.
        nearest: Option<&'static str>,
    },
    /// What stands there already.
    #[error("`{value}` stands there already")]
    Again {
        /// The value, cut to 60 characters.
        value: String,
    },
    /// What the reader of logs says against it.
    #[error("{0}")]
    Log(String),
    /// A rule that cannot be read.
    #[error("`{value}` {error}")]
    Rule {
        /// The rule, cut to 60 characters.
        value: String,
        /// Why.
        error: RuleError,
    },
    /// Out of range.
    #[error("`{value}` is out of range")]
    Range {
        /// The value, cut to 60 characters.
        value: String,
    },
}

/// What a usable policy says that its writer may not have meant.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Concern {
    /// An entry that no stream reaches.
    #[error("no stream reaches this entry: entry {by} (`{pattern}`, line {line}) takes them all")]
    Shadowed {
        /// Number of the earlier entry, from 1.
        by: usize,
        /// Its pattern.
        pattern: String,
        /// Its line.
        line: usize,
    },
    /// A key that the aim does not look at.
    #[error("has no effect with `aim: {aim}`")]
    NoEffect {
        /// The aim.
        aim: &'static str,
    },
    /// A price of time that no aim uses.
    #[error("is given, but no `aim` uses it")]
    NoAim {
        /// The aim that would.
        aim: &'static str,
    },
    /// No aim: nothing says what waiting costs.
    #[error("{}", super::NO_COST_OF_TIME)]
    NoCostOfTime,
    /// Restarting is free, so giving up at once looks best.
    #[error(
        "starting again costs nothing and there is no floor: the 5th percentile of completions will be it"
    )]
    FreeRestart {
        /// The aim.
        aim: &'static str,
    },
    /// Giving up is worth as much as being done.
    #[error("a give-up is worth no less than a completion: giving up at once looks best")]
    PaidToLeave,
    /// The time in force lies outside the guard.
    #[error("the time in force, {}, lies outside the guard", say::duration(*.0))]
    OutsideGuard(f64),
    /// Retries, and nothing says whether the work may be done twice.
    #[error("nothing says whether the {} may be repeated: taken as not", .kind.work())]
    RepeatableUnstated {
        /// What is waited for.
        kind: Kind,
    },
    /// Retries of what must not be repeated.
    #[error("up to {attempts} attempts of what must not be repeated, the {}", .kind.work())]
    Repeated {
        /// The cap on attempts.
        attempts: u32,
        /// What is waited for.
        kind: Kind,
    },
    /// A ceiling on the load that the cap on attempts already keeps.
    #[error("never binds: with at most {attempts} attempts the load stays below it")]
    IdleCeiling {
        /// The cap on attempts.
        attempts: u32,
    },
    /// A deadline without a cap on attempts.
    #[error("`aim: deadline` without a cap on attempts: {0} are assumed")]
    AttemptsAssumed(u32),
    /// A callee that no entry matches.
    #[error("no entry matches the stream `{0}`, so its schedule is not known")]
    UnknownCallee(String),
    /// A stream said to wait for itself.
    #[error("`{0}` is said to wait for itself")]
    CallsItself(String),
}

impl Remedy for Concern {
    fn remedy(&self) -> String {
        match self {
            Concern::Shadowed { by, .. } => format!("move it before entry {by}, or remove it"),
            Concern::NoEffect { .. } => "remove it, or choose an aim that uses it".into(),
            Concern::NoAim { aim } => format!("write `aim: {aim}`, or remove it"),
            Concern::NoCostOfTime => {
                "write `aim: rate` or `aim: finish` if the waiter has something else to do with its time; \
                 `aim: carrying_cost` with `carrying_cost: 0.02/s`; or `aim: deadline` with `deadline: 2s`"
                    .into()
            }
            Concern::FreeRestart { aim: "rate" } => {
                "write what a restart costs (`pause: {gave_up: 10ms}`, `attempt_cost: 0.01`) or `guard: {floor: \
                 20ms}`"
                    .into()
            }
            Concern::FreeRestart { .. } => {
                "write what a restart costs (`pause: {gave_up: 10ms}`) or `guard: {floor: 20ms}`".into()
            }
            Concern::PaidToLeave => "check `worth`: is a completion not worth more?".into(),
            Concern::OutsideGuard(_) => "widen the guard, or expect advice that moves it inside".into(),
            Concern::RepeatableUnstated { .. } => {
                "write `repeatable: true` if doing it twice harms nobody, else `repeatable: false`".into()
            }
            Concern::Repeated { .. } => "write `attempts: 1`, or make it safe to repeat and say so".into(),
            Concern::IdleCeiling { .. } => "lower it, or remove it".into(),
            Concern::AttemptsAssumed(_) => "write for instance `retry: {attempts: 3}`".into(),
            Concern::UnknownCallee(name) => format!("add an entry that matches `{name}`"),
            Concern::CallsItself(_) => "name the streams that it waits for".into(),
        }
    }
}

/// A text from the file as shown in a message: at most 60 characters, what cannot be printed escaped.
pub(crate) fn shown(text: &str) -> String {
    let mut out = String::new();
    for c in text.chars().take(60) {
        match c {
            '"' | '\'' | '\\' => out.push(c),
            _ => out.extend(c.escape_debug()),
        }
    }
    if text.chars().nth(60).is_some() {
        out.push('…');
    }
    out
}
