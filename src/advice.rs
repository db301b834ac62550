//! The answer: plain data with a stable JSON form (`outwait/advice/1`). Text, pages, metrics and exports are views
//! of it; none computes. Times in seconds; a number that cannot be told is absent (`null`), never NaN.

use serde::{Deserialize, Serialize};

/// Version of the JSON form.
pub const SCHEMA: &str = "outwait/advice/1";

/// Advice on every stream of a run.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct AdviceSet {
    /// [`SCHEMA`].
    pub schema: String,
    /// RFC 3339. A one-shot command gives the newest time in the data, so that the same data give the same bytes.
    pub made_at: Option<String>,
    /// What was assumed for want of a policy, in sentences; empty with one.
    pub assumed: Vec<String>,
    /// One entry a stream, by name.
    pub streams: Vec<Advice>,
}

/// Advice on one stream.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Advice {
    /// Which waiting process.
    pub stream: String,
    /// `request`, `job` or `reply`.
    pub kind: String,
    /// What it rests on.
    pub evidence: Evidence,
    /// Heavy or light, growing or shrinking.
    pub tail: Tail,
    /// Fitted families, the heaviest weight first.
    pub fits: Vec<FitSummary>,
    /// What to do.
    pub advice: Decision,
    /// What to mind, the gravest first.
    pub cautions: Vec<Caution>,
}

/// Counts and range of the data behind an advice.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Evidence {
    /// Waits of any ending, first attempts and retries.
    pub waits: u64,
    /// Of these, completed.
    pub done: u64,
    /// Failed.
    pub failed: u64,
    /// Given up.
    pub gave_up: u64,
    /// Still open.
    pub waiting: u64,
    /// Waits that were retries (attempt 2 and later).
    pub retries: u64,
    /// Time waited in all of them together, s; a wait counts from where watching it began.
    #[serde(default)]
    pub waited_s: f64,
    /// Share of the completions behind the advice that other streams of the same policy entry lent, 0 to 1; absent where
    /// none did.
    pub borrowed_share: Option<f64>,
    /// Last age about which the data speak, s.
    pub sight_s: Option<f64>,
    /// First time in the data, RFC 3339.
    pub from: Option<String>,
    /// Last time in the data, RFC 3339.
    pub to: Option<String>,
}

/// The two questions of METHODS.md section 4.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Tail {
    /// Heavy, light or undecided.
    pub class: TailClass,
    /// Weight of the families without an exponential moment, 0 to 1.
    pub heavy_weight: f64,
    /// Weight of the families with one.
    pub light_weight: f64,
    /// Does the remaining wait grow or shrink as one waits?
    pub remaining_wait: RemainingWait,
    /// Weight on each answer, in the order growing, shrinking, flat, mixed.
    pub remaining_weights: [f64; 4],
    /// Why, in one sentence.
    pub reason: String,
    /// Tail index ξ of the generalised Pareto tail, where one could be fitted.
    pub xi: Option<Estimate>,
}

/// Heavy: no exponential moment exists.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum TailClass {
    /// No exponential moment.
    Heavy,
    /// Some exponential moment.
    Light,
    /// The data do not tell.
    Undecided,
}

impl TailClass {
    /// All of them.
    pub const ALL: [TailClass; 3] = [TailClass::Heavy, TailClass::Light, TailClass::Undecided];

    /// The name in JSON.
    pub fn name(self) -> &'static str {
        match self {
            TailClass::Heavy => "heavy",
            TailClass::Light => "light",
            TailClass::Undecided => "undecided",
        }
    }

    /// For a person.
    pub fn words(self) -> &'static str {
        match self {
            TailClass::Heavy => "heavy tail",
            TailClass::Light => "light tail",
            TailClass::Undecided => "tail undecided",
        }
    }
}

/// Trend of the mean residual life over the observed ages.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum RemainingWait {
    /// The longer one has waited, the longer there is to wait.
    Growing,
    /// The longer one has waited, the sooner it ends.
    Shrinking,
    /// What was waited says nothing.
    Flat,
    /// Now one, now the other.
    Mixed,
    /// The data do not tell.
    Undecided,
}

impl RemainingWait {
    /// All of them.
    pub const ALL: [RemainingWait; 5] = [
        RemainingWait::Growing,
        RemainingWait::Shrinking,
        RemainingWait::Flat,
        RemainingWait::Mixed,
        RemainingWait::Undecided,
    ];

    /// The name in JSON.
    pub fn name(self) -> &'static str {
        match self {
            RemainingWait::Growing => "growing",
            RemainingWait::Shrinking => "shrinking",
            RemainingWait::Flat => "flat",
            RemainingWait::Mixed => "mixed",
            RemainingWait::Undecided => "undecided",
        }
    }

    /// For a person.
    pub fn words(self) -> &'static str {
        match self {
            RemainingWait::Growing => "the longer one has waited, the longer there is to wait",
            RemainingWait::Shrinking => "the longer one has waited, the sooner it ends",
            RemainingWait::Flat => "what was waited says nothing about the rest",
            RemainingWait::Mixed => "the remaining wait first falls, then grows, or the reverse",
            RemainingWait::Undecided => "the data do not tell whether the remaining wait grows or shrinks",
        }
    }
}

/// A value with an interval.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Estimate {
    /// Best value.
    pub value: f64,
    /// 90% interval.
    pub interval: [f64; 2],
}

/// One fitted family.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct FitSummary {
    /// Its name.
    pub family: String,
    /// Natural parameters in their order; `shift` and `never` where fitted.
    pub parameters: serde_json::Map<String, serde_json::Value>,
    /// Standard errors by the same names; `null` where the likelihood is flat.
    pub standard_errors: serde_json::Map<String, serde_json::Value>,
    /// Natural logarithm of the likelihood of the ages as grouped for the fit (about 75 cells), hence of probabilities and
    /// not of densities: it compares the families here, not with another program's.
    pub log_likelihood: f64,
    /// Akaike's criterion.
    pub aic: f64,
    /// Akaike's criterion corrected for small samples; `null` where it does not exist.
    pub aicc: Option<f64>,
    /// Bayesian criterion.
    pub bic: f64,
    /// Weight in the decision, 0 to 1. The rest is the empirical curve's.
    pub weight: f64,
    /// Largest distance to the empirical survival function.
    pub largest_gap: f64,
    /// Why the search stopped: `converged`, or what went wrong.
    pub stopped: String,
}

/// What to do.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Action {
    /// Leave after the given time.
    GiveUpAfter,
    /// Waiting on is best up to the ceiling.
    WaitItOut,
    /// Too little evidence.
    GatherEvidence,
    /// The policy names no cost of time.
    StateACost,
}

impl Action {
    /// All of them.
    pub const ALL: [Action; 4] =
        [Action::GiveUpAfter, Action::WaitItOut, Action::GatherEvidence, Action::StateACost];

    /// The name in JSON.
    pub fn name(self) -> &'static str {
        match self {
            Action::GiveUpAfter => "give_up_after",
            Action::WaitItOut => "wait_it_out",
            Action::GatherEvidence => "gather_evidence",
            Action::StateACost => "state_a_cost",
        }
    }
}

/// The advised time with its doubt and what it changes.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Decision {
    /// What to do.
    pub action: Action,
    /// One sentence for a person.
    pub because: String,
    /// Advised give-up time, s; absent unless the action is `give_up_after`.
    pub give_up_after_s: Option<f64>,
    /// 90% interval of the best give-up time, s; its upper end is the ceiling where waiting on may be best.
    pub interval_s: Option<[f64; 2]>,
    /// Every give-up time between these is within the slack of the best, s.
    pub band_s: Option<[f64; 2]>,
    /// Least give-up time considered, s.
    pub floor_s: Option<f64>,
    /// Largest, s.
    pub ceiling_s: Option<f64>,
    /// Worth per second in the long run at the advised time (aim `finish`: 1 over the expected time until done).
    pub rate_per_s: Option<f64>,
    /// The same without ever giving up (waiting up to the ceiling).
    pub rate_never_per_s: Option<f64>,
    /// The same at the time in force.
    pub rate_now_per_s: Option<f64>,
    /// Expected share of the best rate that the advised time loses, for want of knowledge.
    pub expected_regret: Option<f64>,
    /// Its 95th percentile.
    pub regret_95: Option<f64>,
    /// Expected share of the best rate that the time in force loses.
    pub regret_now: Option<f64>,
    /// Share of attempts that complete.
    pub done_share: Option<f64>,
    /// Attempts per request: the load on the other side.
    pub attempts_per_request: Option<f64>,
    /// Median time of a whole request with its retries, s.
    pub p50_s: Option<f64>,
    /// 99% point of it, s.
    pub p99_s: Option<f64>,
    /// The time in force, judged the same way.
    pub now: Option<Outcome>,
    /// Never giving up (waiting up to the ceiling), judged the same way.
    pub never: Option<Outcome>,
    /// The next change of the time in force, within the guards; absent without a time in force.
    pub proposal: Option<Proposal>,
    /// Common rules on the same evidence.
    pub rivals: Vec<Rival>,
    /// Worth of holding on at an age, above giving up now: `[age in s, worth]`, first 0 where it ends.
    pub holding_on: Vec<[f64; 2]>,
    /// Share of retries to requests that a throttle must let through at the advised time.
    pub retry_budget: Option<f64>,
    /// Probability that a retry meets the fate of the attempt it replaces.
    pub sticky: Option<Stickiness>,
    /// How to see past the present timeout, where the answer may lie there.
    pub look: Option<Look>,
    /// A second copy instead of a retry, where the work may be repeated.
    pub second_copy: Option<SecondCopy>,
    /// Give-up times of the attempts in turn under a deadline, s.
    pub schedule_s: Vec<f64>,
    /// A stop-gap while evidence is gathered, s per attempt in turn; labelled as one.
    pub stop_gap_s: Vec<f64>,
    /// What it costs that endings are known by buckets only; absent where hardly any is.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub buckets: Option<BucketCost>,
}

/// What the width of buckets leaves open: all endings at their lower ends and all at their upper ends are the two readings
/// between which the truth lies.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct BucketCost {
    /// Share of endings that are known by a bucket only.
    pub share: f64,
    /// Share of the best rate that the advised time (or waiting it out) loses under the reading that is worse for it; absent
    /// without either.
    pub cost: Option<f64>,
    /// Between which ages the best give-up time of these waits lies, wherever in their buckets they ended, s.
    pub best_between_s: Option<[f64; 2]>,
    /// Between which rates the best one lies, per second; absent where nothing may complete at all and waiting has its price.
    pub rate_between_per_s: Option<[f64; 2]>,
    /// Bounds to add to the layout, those that help most, s; with `blind` a whole layout.
    pub add_bounds_s: Vec<f64>,
    /// Why the layout cannot answer at all, if it cannot.
    pub blind: Option<Blind>,
}

/// A bucket that holds nearly all endings and of which nothing more is known.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Blind {
    /// The first one: wider than the whole law.
    First {
        /// Its bound, s.
        upto_s: f64,
    },
    /// The last one: above all bounds.
    Last {
        /// The last bound, s.
        over_s: f64,
    },
}

/// Which way to move the time in force.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Change {
    /// What a change would win is below the slack.
    Keep,
    /// Hold on longer.
    Raise,
    /// Give up sooner.
    Lower,
}

/// The next change of the time in force.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Proposal {
    /// Which way.
    pub change: Change,
    /// To what, s; absent for never.
    pub to_s: Option<f64>,
    /// Whether the largest step of the guard keeps it short of the advised time.
    pub step_limited: bool,
    /// What that time does; absent where nothing is changed.
    #[serde(default)]
    pub then: Option<Outcome>,
}

/// What a give-up time does.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Outcome {
    /// The give-up time, s; absent for never.
    pub give_up_after_s: Option<f64>,
    /// Worth per second.
    pub rate_per_s: f64,
    /// Share of attempts that complete.
    pub done_share: f64,
    /// Attempts per request.
    pub attempts_per_request: Option<f64>,
    /// Median time of a whole request, s.
    pub p50_s: Option<f64>,
    /// 99% point of it, s.
    pub p99_s: Option<f64>,
}

/// A common rule, its time and what it earns on the same evidence.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Rival {
    /// Which rule.
    pub rule: String,
    /// Its give-up time, s; absent for never.
    pub give_up_after_s: Option<f64>,
    /// Worth per second.
    pub rate_per_s: f64,
    /// Expected share of the best rate that it loses.
    pub expected_regret: f64,
}

/// Stickiness φ and where it comes from.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Stickiness {
    /// φ used in the advice.
    pub value: f64,
    /// 90% interval, when it was estimated.
    pub interval: Option<[f64; 2]>,
    /// `data`, `policy` or `unknown`.
    pub from: String,
    /// The φ from which the advice would no longer be to give up; absent where none is.
    pub flips_at: Option<f64>,
}

/// A look past the edge of sight.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Look {
    /// The present edge τ0, s.
    pub from_s: f64,
    /// How far to let a share of waits run, s.
    pub to_s: f64,
    /// Break-even share that must end by then.
    pub break_even: f64,
    /// How many waits must run past the edge.
    pub waits_needed: f64,
    /// Share of traffic, so that it takes about a week; absent where the data carry no times.
    pub share: Option<f64>,
    /// Worst cost of the look: worth lost per wait that runs on and does not end.
    pub worst_cost_each: f64,
}

/// A second copy started while the first goes on.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct SecondCopy {
    /// When to start it, s.
    pub start_s: f64,
    /// Extra attempts per request.
    pub extra_load: f64,
    /// Median with it, s.
    pub p50_s: Option<f64>,
    /// 99% point with it, s.
    pub p99_s: Option<f64>,
    /// 99.9% point with it, s.
    pub p999_s: Option<f64>,
    /// 99% point of the retry that adds the same load, s.
    pub retry_p99_s: Option<f64>,
}

/// A caution: a stable code, what is the matter, what to do.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Caution {
    /// Stable, e.g. `edge_of_sight`.
    pub code: String,
    /// What is the matter.
    pub text: String,
    /// What to do.
    pub remedy: String,
}
