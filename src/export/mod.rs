//! Settled times in the forms that other systems read: JSON, YAML, an environment file, metrics text, or a template of the
//! user's own. A view: what is exported was settled, or proposed where that is asked for. No files, no clock.

mod forms;
mod template;

use serde::{Deserialize, Serialize};

pub use forms::{ClashError, environment, metrics};
pub use template::{TemplateError, render};

use crate::advice::{AdviceSet, Caution};
use crate::policy::{Entry, GiveUp, Jitter};
use crate::settle::{Settled, State};

/// Version of the JSON form.
pub const SCHEMA: &str = "outwait/export/1";

/// What is exported. Times in s.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Export {
    /// [`SCHEMA`].
    pub schema: String,
    /// Time of the newest decision in it, or of the advice: the same input gives the same bytes. RFC 3339.
    pub made_at: Option<String>,
    /// What no export knows of.
    pub safety: String,
    /// By name.
    pub streams: Vec<Stream>,
}

/// One stream's time, and what goes with it.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Stream {
    /// Which waiting process.
    pub stream: String,
    /// `request`, `job` or `reply`.
    pub kind: String,
    /// When an attempt is given up, s; absent for never.
    pub give_up_after_s: Option<f64>,
    /// `accepted`, `pinned`, or `proposed` where nobody has settled it.
    pub status: String,
    /// Who settled it.
    pub by: Option<String>,
    /// When, RFC 3339.
    pub at: Option<String>,
    /// Most attempts of one request, the first included; absent without a cap.
    pub attempts: Option<u32>,
    /// Pause after the first give-up, s.
    pub pause_s: f64,
    /// Each pause is this many times the one before.
    pub backoff_factor: f64,
    /// Whether a pause is drawn evenly between 0 and its full length: `none` or `full`.
    pub jitter: String,
    /// Whether doing the work twice harms nobody.
    pub repeatable: bool,
    /// Share of retries to requests that a throttle must let through; known where an advice was at hand.
    pub retry_budget: Option<f64>,
    /// What to mind.
    pub cautions: Vec<Caution>,
}

/// Joins what was settled, and what is proposed where `advice` is given and nothing is settled, with the policy's retries.
/// `entry`: the policy's word on a stream.
pub fn export(settled: &Settled, advice: Option<&AdviceSet>, entry: impl Fn(&str) -> Entry) -> Export {
    let mut streams: Vec<Stream> = Vec::new();
    for (stream, _) in settled.streams() {
        let standing = settled.standing(stream);
        let Some(decision) = standing.in_force else { continue };
        let Some(time) = decision.state.in_force() else { continue };
        let status = match decision.state {
            State::Pinned { .. } => "pinned",
            _ => "accepted",
        };
        let mut one = Stream::new(stream, time, status, &entry(stream));
        (one.by, one.at) = (Some(decision.by.clone()), Some(decision.at.to_string()));
        streams.push(one);
    }
    for advice in advice.iter().flat_map(|set| &set.streams) {
        let place = streams.iter().position(|one| one.stream == advice.stream);
        let one = match (place, crate::settle::proposal(advice)) {
            (Some(place), _) => &mut streams[place],
            (None, Some(time)) => {
                let entry = entry(&advice.stream);
                let time = match time {
                    GiveUp::After(seconds) => GiveUp::After(crate::settle::round_up(seconds, &entry)),
                    GiveUp::Never => GiveUp::Never,
                };
                streams.push(Stream::new(&advice.stream, time, "proposed", &entry));
                let Some(one) = streams.last_mut() else { continue };
                one
            }
            (None, None) => continue,
        };
        one.retry_budget = advice.advice.retry_budget;
        for caution in &advice.cautions {
            if one.cautions.iter().all(|known| known.code != caution.code) {
                one.cautions.push(on_a_line(caution));
            }
        }
    }
    streams.sort_by(|a, b| a.stream.cmp(&b.stream));
    let newest = settled.newest().map(|time| time.to_string());
    let made_at = advice.and_then(|set| set.made_at.clone()).into_iter().chain(newest).max();
    Export { schema: SCHEMA.to_owned(), made_at, safety: SAFETY.to_owned(), streams }
}

impl Stream {
    fn new(stream: &str, time: GiveUp, status: &str, entry: &Entry) -> Stream {
        let (retry, pause) = (entry.retry, entry.worth.map(|worth| worth.pause.gave_up).unwrap_or_default());
        Stream {
            stream: stream.to_owned(),
            kind: entry.kind.name().to_owned(),
            give_up_after_s: Some(time.seconds()).filter(|seconds| seconds.is_finite()),
            status: status.to_owned(),
            by: None,
            at: None,
            attempts: retry.attempts,
            pause_s: pause,
            backoff_factor: retry.backoff.factor,
            jitter: if retry.backoff.jitter == Jitter::Full { "full" } else { "none" }.to_owned(),
            repeatable: retry.repeatable,
            retry_budget: None,
            cautions: standing_cautions(entry, time),
        }
    }

    /// Pauses between the attempts, s, at most `attempts - 1` of them.
    pub fn backoff(&self, attempts: u32) -> Vec<f64> {
        (1..attempts).map(|number| self.pause_s * self.backoff_factor.powi(number as i32 - 1)).collect()
    }
}

/// Without line breaks, so that it stays within a comment: an advice may come from a file.
fn on_a_line(caution: &Caution) -> Caution {
    let line = |text: &str| text.replace(|c: char| c.is_control(), " ");
    Caution { code: line(&caution.code), text: line(&caution.text), remedy: line(&caution.remedy) }
}

/// What holds for a give-up time whatever the data say.
fn standing_cautions(entry: &Entry, time: GiveUp) -> Vec<Caution> {
    let mut cautions = Vec::new();
    let mut add = |code: &str, text: &str, remedy: &str| {
        cautions.push(Caution { code: code.into(), text: text.into(), remedy: remedy.into() });
    };
    if time != GiveUp::Never && !entry.retry.repeatable {
        add(
            "work_repeated",
            "giving up does not stop the work behind the wait, and a retry does it again; the policy does not say that it \
             may be repeated",
            "retry only what is idempotent or was cancelled for certain; then say `repeatable: true`",
        );
    }
    if time != GiveUp::Never && entry.retry.attempts != Some(1) {
        add("retries_add_load", RETRIES.0, RETRIES.1);
    }
    cautions
}

/// What every document that recommends says of retries.
pub(crate) const RETRIES: (&str, &str) = (
    "abandoned work may go on behind the wait, and its retry comes on top: a busy system can collapse at loads that look safe",
    "change a time in steps, cap the retries by a budget, and watch the load of the other side",
);

/// What every document that recommends says of safety.
pub(crate) const SAFETY: &str = "Where safety, health or a legal duty depends on a wait, local codes and licensed practice \
                                 decide how long to wait, not these times.";
