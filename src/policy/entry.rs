//! A policy as the rest of the program sees it: validated, every default filled in, times in seconds.

use super::keys::{
    DEFAULT_BACKOFF_FACTOR, DEFAULT_COOL_DOWN, DEFAULT_EVIDENCE, DEFAULT_HYSTERESIS, DEFAULT_KIND,
    DEFAULT_LARGEST_STEP, DEFAULT_SLACK, DEFAULT_WINDOW,
};
use super::{Glob, Warning};
use crate::intake::{Options, Rules};
use crate::stopping::{Aim, Worth};
use serde::de::Error as _;
use serde::{Deserialize, Deserializer, Serialize, Serializer};
use std::path::PathBuf;

/// Why an entry without an aim gets no give-up time (METHODS.md section 5, "No cost of time").
pub const NO_COST_OF_TIME: &str = "nothing says what the waiting time costs (no other use for it, no carrying \
                                   cost, no deadline), and without one of the three the best is never to give up";

/// What an operator asks for, stream by stream.
#[derive(Clone, Debug, PartialEq)]
pub struct Policy {
    /// Version of the schema; 1.
    pub version: u32,
    /// The entries in the order of the file; never empty.
    pub entries: Vec<Entry>,
    /// When the daemon makes the week's recommendations; `None`: not by itself.
    pub weekly: Option<Weekly>,
    /// How spans and histograms of telemetry become waits.
    pub telemetry: Rules,
    /// Pages of metrics that the daemon reads.
    pub scrapes: Vec<Scrape>,
    /// Logs that the daemon follows.
    pub followed: Vec<Followed>,
    /// What its writer may not have meant, in the order of the lines.
    pub warnings: Vec<Warning>,
}

impl Policy {
    /// The entry that speaks for a stream, and its place in [`Policy::entries`] from 0: the first that matches.
    /// `None` when no entry does; such a stream has no aim, as an entry without one.
    pub fn entry_for(&self, stream: &str) -> Option<(&Entry, usize)> {
        self.entries.iter().enumerate().find(|(_, e)| e.matches.matches(stream)).map(|(i, e)| (e, i))
    }
}

/// A log that the daemon follows, and how its lines become records.
#[derive(Clone, Debug, PartialEq)]
pub struct Followed {
    /// The file's name, under which it is looked for again after each rotation.
    pub path: PathBuf,
    /// Format, pattern, mapping and stream; what else stands here is not looked at.
    pub options: Options,
}

/// A page of metrics that the daemon reads on a schedule.
#[derive(Clone, Debug, PartialEq)]
pub struct Scrape {
    /// Where it is.
    pub url: String,
    /// How often it is read, s; from 1 to a day.
    pub every: f64,
    /// Patience with each step, s; above 0 to 300.
    pub timeout: f64,
    /// The certificates to trust; the system's unless named.
    pub trust: Option<PathBuf>,
    /// A file with a header to show.
    pub header_file: Option<PathBuf>,
    /// The unit of histograms whose names end in none, s.
    pub unit: Option<f64>,
    /// Which stream and which ending.
    pub rules: Rules,
}

/// When the week's recommendations are made: once a week by the clock of a place.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Weekly {
    /// Day of the week, 0 for Monday to 6 for Sunday.
    pub day: u8,
    /// Hour of the day, 0 to 23.
    pub hour: u8,
    /// A name of the tz database.
    pub time_zone: String,
}

/// What is asked for the streams of one pattern.
#[derive(Clone, Debug, PartialEq)]
pub struct Entry {
    /// The streams that it speaks for.
    pub matches: Glob,
    /// Its number in the file, from 1; 0 without a file.
    pub number: usize,
    /// The line on which it begins, from 1; 0 without a file.
    pub line: usize,
    /// What is waited for.
    pub kind: Kind,
    /// The aim and the prices; `None` without an aim: the answer is `state_a_cost`, because of
    /// [`NO_COST_OF_TIME`]. Its `sticky` is the given φ, and 0 where [`Retry::sticky`] leaves it to the data.
    pub worth: Option<Worth>,
    /// The give-up time in force, if stated.
    pub now: Option<GiveUp>,
    /// What happens after giving up.
    pub retry: Retry,
    /// What the advice must keep to.
    pub guard: Guard,
    /// How often a sampler that waits for each answer means to ask, s; `None`: the waits are as they come.
    pub sampled_every: Option<f64>,
    /// Streams that this one waits for in its turn; checked names.
    pub calls: Vec<String>,
}

impl Entry {
    /// What is assumed where there is no policy at all: aim `rate`, a completion worth 1, no pause, every stream.
    /// The floor is then the 5th percentile of completions ([`Entry::restart_is_free`]).
    pub fn without_policy() -> Entry {
        Entry {
            matches: Glob::any(),
            number: 0,
            line: 0,
            kind: DEFAULT_KIND,
            worth: Some(Worth::default()),
            now: None,
            retry: Retry::default(),
            guard: Guard::default(),
            sampled_every: None,
            calls: Vec::new(),
        }
    }

    /// Whether restarting costs nothing, so that the best give-up time may be the least one (METHODS.md section
    /// 5, "The edge at 0"): aim `rate` or `finish` with neither a pause nor a cost of giving up, and no floor. The
    /// 5th percentile of completions must then serve as the floor.
    pub fn restart_is_free(&self) -> bool {
        self.guard.floor.is_none()
            && self.worth.is_some_and(|w| {
                w.pause.gave_up == 0.0
                    && match w.aim {
                        Aim::Rate => w.gave_up >= w.attempt_cost,
                        Aim::Finish => true,
                        Aim::CarryingCost(_) | Aim::Deadline { .. } => false,
                    }
            })
    }
}

/// What is waited for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Kind {
    /// A service's answer.
    Request,
    /// A piece of work: a batch job, a lease, a build.
    Job,
    /// A person or a partner: a reply, a delivery, a place in a queue.
    Reply,
}

impl Kind {
    /// Every kind, in the order of the schema.
    pub const ALL: [Kind; 3] = [Kind::Request, Kind::Job, Kind::Reply];

    /// Its name in the policy.
    pub fn name(self) -> &'static str {
        match self {
            Kind::Request => "request",
            Kind::Job => "job",
            Kind::Reply => "reply",
        }
    }

    /// What one of them is called in a sentence.
    pub(super) fn work(self) -> &'static str {
        match self {
            Kind::Request => "request",
            Kind::Job => "job",
            Kind::Reply => "enquiry",
        }
    }
}

/// When a waiter gives up.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum GiveUp {
    /// After this many seconds, above 0.
    After(f64),
    /// Never.
    Never,
}

impl GiveUp {
    /// The age in seconds; infinite for never.
    pub fn seconds(self) -> f64 {
        match self {
            GiveUp::After(seconds) => seconds,
            GiveUp::Never => f64::INFINITY,
        }
    }
}

impl Serialize for GiveUp {
    /// Seconds, or `"never"`.
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        match self {
            GiveUp::After(seconds) => serializer.serialize_f64(*seconds),
            GiveUp::Never => serializer.serialize_str("never"),
        }
    }
}

impl<'de> Deserialize<'de> for GiveUp {
    /// The same back.
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<GiveUp, D::Error> {
        #[derive(Deserialize)]
        #[serde(untagged)]
        enum Written {
            Seconds(f64),
            Word(String),
        }
        match Written::deserialize(deserializer)? {
            Written::Seconds(seconds) if seconds > 0.0 && seconds.is_finite() => Ok(GiveUp::After(seconds)),
            Written::Word(word) if word == "never" => Ok(GiveUp::Never),
            _ => Err(D::Error::custom("a give-up time is a number of seconds above 0, or \"never\"")),
        }
    }
}

/// Whether a retry meets the same slow cause as the attempt it replaces (METHODS.md section 6, stickiness φ).
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Sticky {
    /// To be estimated from numbered attempts.
    FromData,
    /// Not known and not to be estimated.
    Unknown,
    /// φ, in [0, 1).
    Given(f64),
}

impl Serialize for Sticky {
    /// `"from_data"`, `"unknown"`, or φ.
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        match self {
            Sticky::FromData => serializer.serialize_str("from_data"),
            Sticky::Unknown => serializer.serialize_str("unknown"),
            Sticky::Given(phi) => serializer.serialize_f64(*phi),
        }
    }
}

/// What happens after giving up.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Retry {
    /// Most attempts of one request, the first included, 1 to [`super::MAX_ATTEMPTS`]; `None`: no cap.
    pub attempts: Option<u32>,
    /// Most attempts a request on average, 1 to 100; `None`: no ceiling.
    pub load_ceiling: Option<f64>,
    /// Stickiness.
    pub sticky: Sticky,
    /// Whether doing the work twice harms nobody; false unless stated.
    pub repeatable: bool,
    /// How the pause after giving up grows.
    pub backoff: Backoff,
}

impl Default for Retry {
    fn default() -> Retry {
        Retry {
            attempts: None,
            load_ceiling: None,
            sticky: Sticky::FromData,
            repeatable: false,
            backoff: Backoff::default(),
        }
    }
}

/// How the pause after giving up grows from attempt to attempt.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Backoff {
    /// Ratio of one pause to the one before, 1 to 10.
    pub factor: f64,
    /// How a pause is drawn.
    pub jitter: Jitter,
}

impl Default for Backoff {
    fn default() -> Backoff {
        Backoff { factor: DEFAULT_BACKOFF_FACTOR, jitter: Jitter::None }
    }
}

/// How a pause is drawn.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Jitter {
    /// Always its full length.
    None,
    /// Evenly between 0 and its full length.
    Full,
}

/// What the advice must keep to.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Guard {
    /// Least give-up time, s, above 0 and below the ceiling; `None`: none.
    pub floor: Option<f64>,
    /// Largest give-up time, s, above 0; `None`: none.
    pub ceiling: Option<f64>,
    /// Largest change in one step, share of the time in force, above 0 to 10.
    pub largest_step: f64,
    /// Completions needed before advice is given, at least 1.
    pub evidence: u32,
    /// How far back waits count, s, above 0.
    pub window: f64,
    /// Gain below which no change is proposed, share of the rate, in [0, 1).
    pub slack: f64,
    /// Gain below which a standing proposal is not replaced, share of the rate, in [0, 1).
    pub hysteresis: f64,
    /// Rest after a change before the next is proposed, s, 0 or more.
    pub cool_down: f64,
}

impl Default for Guard {
    fn default() -> Guard {
        Guard {
            floor: None,
            ceiling: None,
            largest_step: DEFAULT_LARGEST_STEP,
            evidence: DEFAULT_EVIDENCE,
            window: DEFAULT_WINDOW,
            slack: DEFAULT_SLACK,
            hysteresis: DEFAULT_HYSTERESIS,
            cool_down: DEFAULT_COOL_DOWN,
        }
    }
}

/// The name of an aim in the policy.
pub(super) fn aim_name(aim: Aim) -> &'static str {
    match aim {
        Aim::Rate => "rate",
        Aim::Finish => "finish",
        Aim::CarryingCost(_) => "carrying_cost",
        Aim::Deadline { .. } => "deadline",
    }
}
