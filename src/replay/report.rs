//! What a replay found, as plain data with a stable JSON form (`outwait/replay/1`). A number that cannot be told is absent
//! (`null`), never NaN.

use serde::{Deserialize, Serialize};

use crate::advice::Caution;

/// Version of the JSON form.
pub const SCHEMA: &str = "outwait/replay/1";

/// The replay of every stream of a run.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct ReplaySet {
    /// [`SCHEMA`].
    pub schema: String,
    /// RFC 3339: the newest time in the data.
    pub made_at: Option<String>,
    /// What was assumed for want of a policy, in sentences; empty with one.
    pub assumed: Vec<String>,
    /// Level of the intervals, 0 to 1.
    pub level: f64,
    /// One entry a stream, by name.
    pub streams: Vec<StreamReplay>,
}

/// The replay of one stream.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct StreamReplay {
    /// Which waiting process.
    pub stream: String,
    /// What is maximised, hence the unit of the rate: `rate` (worth per second), `finish` (completions per second),
    /// `carrying_cost` (worth per attempt) or `deadline` (probability of being done in time); absent where the policy names
    /// none.
    pub aim: Option<String>,
    /// `week`, or `part` where the waits carry no times: equal parts in the order of the files.
    pub by: String,
    /// The periods on which rules earned; each learnt on those before it.
    pub periods: Vec<Period>,
    /// The rules, ours first; empty where nothing could be replayed.
    pub rules: Vec<RuleReplay>,
    /// What came of it, in one sentence.
    pub finding: String,
    /// What to mind.
    pub notes: Vec<Note>,
}

/// A period on which the rules earned.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Period {
    /// Its first instant, RFC 3339; absent for parts.
    pub from: Option<String>,
    /// The first instant after it.
    pub to: Option<String>,
    /// First attempts that ended or were last seen in it.
    pub waits: u64,
    /// First attempts before it, within the window of the policy, on which the rules learnt.
    pub learnt_from: u64,
    /// Whether these sufficed for an advice; else ours stayed with the time in force, or waited.
    pub advised: bool,
}

/// How one rule did.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct RuleReplay {
    /// `advice`, `in force`, or the name of a common rule.
    pub rule: String,
    /// Its give-up time in each period, s; absent for never (waiting up to the ceiling). Empty for RFC 6298, whose time
    /// changes with every wait.
    pub give_up_after_s: Vec<Option<f64>>,
    /// What it earned over all periods, in the unit of the aim; absent where too much of it was hidden.
    pub rate_per_s: Option<f64>,
    /// Its interval by the block bootstrap; where the rate is absent, between what it earned at worst and at best.
    pub interval_per_s: Option<[f64; 2]>,
    /// Share of attempts of which was not seen what the rule would have made of them.
    pub hidden_share: f64,
    /// Share of attempts done.
    pub done_share: f64,
    /// Mean time of an attempt, s.
    pub spent_s: f64,
    /// By how much the advice earned more, in the unit of the aim; absent for the advice, and where either is not known.
    pub advice_ahead_per_s: Option<f64>,
    /// Its interval, from the same resamples.
    pub advice_ahead_interval_per_s: Option<[f64; 2]>,
}

/// Something to mind, with a stable code.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Note {
    /// Stable, e.g. `no_times`.
    pub code: String,
    /// What is the matter.
    pub text: String,
}

impl Note {
    /// A caution as a note.
    pub(crate) fn of(caution: Caution) -> Note {
        Note { code: caution.code, text: format!("{}; {}", caution.text, caution.remedy) }
    }
}

/// Name of our rule.
pub const ADVICE: &str = "advice";
/// Name of the time in force among the rules.
pub const IN_FORCE: &str = "in force";
