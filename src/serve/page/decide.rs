//! The form on a stream's page by which somebody decides, and what becomes of it.

use axum::Form;
use axum::extract::rejection::FormRejection;
use axum::extract::{Path, State};
use axum::response::Response;
use serde::{Deserialize, Serialize};

use super::past::words;
use super::{ago, go, in_path};
use crate::policy::GiveUp;
use crate::say;
use crate::serve::adviser::Fresh;
use crate::serve::http::{App, READ_ONLY, Wish, away, shown, take, unknown};
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

/// For how long the page may wait for the advice that follows a decision, s.
pub(super) const PATIENCE: f64 = 2.0;

/// The form as it is sent.
#[derive(Clone, Debug, Default, Deserialize, Serialize)]
#[serde(default)]
pub(in crate::serve) struct Filled {
    decision: String,
    by: String,
    why: String,
    /// The proposal that was shown.
    proposed: String,
    pin: String,
    until: String,
    seen: Option<usize>,
}

impl Filled {
    fn wish(&self) -> Wish {
        let time = if self.decision == "accept" { &self.proposed } else { &self.pin };
        Wish {
            decision: self.decision.clone(),
            by: self.by.clone(),
            why: self.why.clone(),
            give_up_after: if matches!(self.decision.as_str(), "accept" | "pin") {
                time.clone()
            } else {
                String::new()
            },
            until: self.until.clone(),
            seen: self.seen,
        }
    }
}

/// What the page shows of it.
#[derive(Serialize)]
pub(super) struct Desk {
    /// What stands, in a sentence.
    stands: String,
    /// Whether there is a form.
    open: bool,
    read_only: &'static str,
    /// What would be accepted: as it is sent back, and for people.
    proposed: Option<[String; 2]>,
    /// Whether there is a decision to take back.
    undo: bool,
    /// How many decisions there are.
    seen: usize,
    /// As it was filled in, and why it was not taken.
    filled: Filled,
    wrong: String,
}

impl Desk {
    pub(super) fn of(
        shared: &Shared,
        fresh: &Fresh,
        in_force: Option<GiveUp>,
        proposed: Option<GiveUp>,
        refused: Option<(Filled, String)>,
    ) -> Desk {
        let stream = fresh.advice.stream.as_str();
        let settled = shared.settled();
        let standing = settled.standing(stream);
        let time = |time: GiveUp| say::duration(time.seconds());
        let (filled, wrong) = refused.unwrap_or_default();
        let stands = match (standing.in_force, in_force) {
            (Some(one), _) => format!(
                "In force: {}. {}",
                one.state.in_force().map_or_else(String::new, time),
                told(shared, one)
            ),
            (None, Some(now)) => format!("In force by the policy: {}.", time(now)),
            (None, None) => "No time is known to be in force.".into(),
        };
        let later = standing.last.filter(|last| standing.in_force.is_none_or(|one| !one.is(last)));
        let later = later.map_or_else(String::new, |last| format!(" {}", told(shared, last)));
        Desk {
            stands: stands + &later,
            open: shared.config.may_settle(),
            read_only: READ_ONLY,
            proposed: proposed.map(|to| [shown(to), time(to)]),
            undo: standing.last.is_some(),
            seen: settled.history(stream).len(),
            filled,
            wrong,
        }
    }
}

fn told(shared: &Shared, one: &crate::settle::Settlement) -> String {
    let then = one.at.as_millisecond() as f64 / 1e3;
    format!("{}, {}.", words(one).trim_end_matches('.'), ago(shared, then))
}

pub(in crate::serve) async fn settle(
    State(shared): App,
    Path(stream): Path<String>,
    form: Result<Form<Filled>, FormRejection>,
) -> Result<Response, Problem> {
    let fresh = shared.advice(&stream).ok_or_else(|| unknown(&stream))?;
    let Form(filled) = form.map_err(|error| {
        Problem::parameter("form", error.body_text(), "use the form on the stream's page")
    })?;
    away(move || match take(&shared, &stream, &filled.wish()) {
        Ok(_) => {
            shared.desk.wait_for(&stream, PATIENCE);
            Ok(go(&format!("/stream/{}#settle-it", in_path(&stream))))
        }
        Err(problem) => {
            // Whoever is late decides on what stands now.
            super::stream::show(&shared, &fresh, None, Some((filled, problem.sentence(), problem.status())))
        }
    })
    .await
}
