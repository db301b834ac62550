//! The answer of an audit: plain data with a stable JSON form (`outwait/audit/1`). Text, tables and pages are views of it;
//! none computes. Times in seconds or, where the name says so, in hours; a number that cannot be told is absent (`null`).

use serde::{Deserialize, Serialize};

use super::queue::QueueReport;
use super::rule::{Cut, Rule};
use super::yardstick::{Unit, Verdict};
use crate::advice::{Action, Caution, Evidence};

/// Version of the JSON form.
pub const SCHEMA: &str = "outwait/audit/1";

/// The audit of every stream of a run.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct AuditSet {
    /// [`SCHEMA`].
    pub schema: String,
    /// RFC 3339: the newest time in the data, so that the same data give the same bytes.
    pub made_at: Option<String>,
    /// What was assumed for want of a policy, in sentences; empty with one.
    pub assumed: Vec<String>,
    /// What concerns all streams.
    pub cautions: Vec<Caution>,
    /// One entry a stream, by name.
    pub streams: Vec<StreamAudit>,
    /// Waits older than the window of their stream's policy entry, left out.
    pub older: u64,
    /// The waits that are open.
    pub open: OpenList,
}

/// The audit of one stream.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct StreamAudit {
    /// Which waiting process.
    pub stream: String,
    /// `request`, `job` or `reply`.
    pub kind: String,
    /// What it rests on.
    pub evidence: Evidence,
    /// What is advised.
    pub advice: Measure,
    /// The time in force, where one is known.
    pub rule: Option<Rule>,
    /// Waits that ended.
    pub closed: Closed,
    /// Waits that are open, counted.
    pub open: OpenCounts,
    /// Served or abandoned: the queue behind the waits. Absent where give-ups are a timer's, or too few ended either way.
    pub queue: Option<QueueReport>,
    /// What to mind, the gravest first.
    pub cautions: Vec<Caution>,
}

/// The advice that waits are held against.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Measure {
    /// What to do.
    pub action: Action,
    /// One sentence on why.
    pub because: String,
    /// Advised give-up time, s; absent unless the action is `give_up_after`.
    pub give_up_after_s: Option<f64>,
    /// Give-up times between these are about as good, s; a wait that ended there is neither over nor under.
    pub band_s: Option<[f64; 2]>,
    /// What worth is counted in here; absent without advice.
    pub unit: Option<Unit>,
    /// Worth of an hour of waiting; absent without advice and where a deadline is the aim.
    pub worth_per_hour: Option<f64>,
}

/// Waits that ended, against the advice.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Closed {
    /// All of them.
    pub total: Lost,
    /// Of these, how many had no time (`at`) and so no hour.
    pub undated: u64,
    /// By how they ended, as the time in force sees it; cases without a wait are left out.
    pub by_rule: Vec<ByRule>,
    /// By the hour of the week (UTC) in which they ended, Monday 00:00 first; hours without a wait are left out.
    pub by_hour: Vec<ByHour>,
}

/// Time and worth lost by a group of waits.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Lost {
    /// Waits of the group.
    pub waits: u64,
    /// Hours that they waited.
    pub hours: f64,
    /// Those that went on past the advised time.
    pub over: OverLost,
    /// Those given up although holding on was worth more.
    pub under: UnderLost,
}

/// Waiting past the advised time.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct OverLost {
    /// How many waits.
    pub waits: u64,
    /// Hours past it.
    pub hours: f64,
    /// What that time was worth; absent where it has no price (a deadline, no advice).
    pub cost: Option<f64>,
    /// What came of it: late completions, above what giving up in time would have given.
    pub won_back: Option<f64>,
    /// The one less the other: what was lost.
    pub lost: Option<f64>,
}

/// Giving up before the advised time.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct UnderLost {
    /// How many waits.
    pub waits: u64,
    /// Hours that holding on would have taken, expected.
    pub further_hours: f64,
    /// What holding on would have been worth above giving up, expected; absent without advice.
    pub lost: Option<f64>,
    /// Of the waits, those given up just before a bulk: at their age, one in two or more is done within half as long again.
    pub before_bulk: u64,
}

/// Waits of one way of ending.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct ByRule {
    /// How they ended.
    pub cut: Cut,
    /// What they lost.
    #[serde(flatten)]
    pub lost: Lost,
}

/// Waits of one hour of the week.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct ByHour {
    /// `Mon` to `Sun`.
    pub day: String,
    /// The hour it begins with, 0 to 23.
    pub hour: u32,
    /// What they lost.
    #[serde(flatten)]
    pub lost: Lost,
}

/// Names of the days.
pub const DAYS: [&str; 7] = ["Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun"];

/// Open waits of one stream.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct OpenCounts {
    /// How many.
    pub waits: u64,
    /// To hold.
    pub hold: u64,
    /// To let go.
    pub let_go: u64,
    /// Without a verdict, for want of advice.
    pub unknown: u64,
    /// Hours past the advised time so far, of those that are past it.
    pub hours_past: f64,
    /// Last seen so long before the newest record that they have more than doubled their age since, or ended.
    pub stale: u64,
}

/// The open waits to look at, the most urgent first.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct OpenList {
    /// Open waits of all streams.
    pub total: u64,
    /// The step of the chances, s; absent where it is the wait's own age so far.
    pub within_s: Option<f64>,
    /// The first of them.
    pub waits: Vec<OpenWait>,
}

/// One open wait.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct OpenWait {
    /// Its stream.
    pub stream: String,
    /// Its id, where it has one.
    pub id: Option<String>,
    /// Which attempt.
    pub attempt: u32,
    /// How many equal waits it stands for.
    pub count: u64,
    /// Age when last seen, s.
    pub age_s: f64,
    /// When it was last seen, RFC 3339.
    pub seen: Option<String>,
    /// What to do.
    pub verdict: Verdict,
    /// Worth of holding on above giving up now; at least 0.
    pub value: Option<f64>,
    /// Expected worth of holding on for the step and giving up then, above giving up now; below 0 it is a loss.
    pub next_step: Option<f64>,
    /// The step, s: its own age so far, unless it was given.
    pub step_s: f64,
    /// Chance to complete within the step.
    pub chance_done: Option<f64>,
    /// Chance to end at all within the step.
    pub chance_ended: Option<f64>,
    /// Expected remaining wait if held to the last age that the outlook knows of, s.
    pub remaining_s: Option<f64>,
    /// The next age at which the verdict changes, s; absent where it never does.
    pub look_again_at_s: Option<f64>,
    /// The same from when it was last seen, s.
    pub look_again_in_s: Option<f64>,
}
