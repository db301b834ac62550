//! `GET /v1/open`: the waits open now, each with its value of holding on.

use axum::extract::State;
use axum::http::Uri;
use axum::response::Response;
use serde::Serialize;

use super::{App, away, json, parameters};
use crate::advice::{Action, Advice};
use crate::ledger::Reader;
use crate::serve::problem::Problem;

/// Most waits in one answer, unless asked for fewer.
const MOST: usize = 1_000;

#[derive(Serialize)]
struct Document {
    schema: &'static str,
    made_at: Option<String>,
    /// Waits open in all.
    total: usize,
    waits: Vec<Open>,
}

/// A wait that is open.
#[derive(Serialize)]
struct Open {
    stream: String,
    id: String,
    attempt: u32,
    started: Option<String>,
    /// How long it has waited, s.
    age_s: f64,
    /// Worth of holding on above letting go now; absent where no give-up time can be judged.
    holding_on: Option<f64>,
    /// `hold`, `let_go`, or `unknown`.
    verdict: &'static str,
    /// When to look again if nothing comes, RFC 3339; absent where there is nothing to look out for.
    look_again: Option<String>,
}

pub(super) async fn list(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    let asked = parameters(&uri, &["stream", "most"])?;
    let most = match asked.get("most") {
        None => MOST,
        Some(text) => text.parse().ok().filter(|most| (1..=MOST).contains(most)).ok_or_else(|| {
            Problem::parameter("most", "not a number of waits", format!("write a number from 1 to {MOST}"))
        })?,
    };
    let stream = asked.get("stream").cloned();
    let document = away(move || {
        let now = shared.now();
        let open = shared.ask(|reader| reader.open_waits(stream.as_deref(), usize::MAX));
        let open = open.map_err(|error| Problem::ours(format!("{error}; {}", error.remedy())))?;
        let total = open.len();
        let mut waits: Vec<Open> = open
            .into_iter()
            .filter(|wait| wait.started <= now)
            .map(|wait| {
                let age = now - wait.started;
                let advice = shared.advice(&wait.stream);
                let (verdict, holding_on, again) = judge(advice.as_deref().map(|fresh| &fresh.advice), age);
                Open {
                    verdict,
                    holding_on,
                    look_again: again.and_then(|at_age| crate::say::time(wait.started + at_age)),
                    started: crate::say::time(wait.started),
                    age_s: age,
                    stream: wait.stream,
                    id: wait.id,
                    attempt: wait.attempt,
                }
            })
            .collect();
        // What is to be let go of first, then what is worth least.
        waits.sort_by(|a, b| {
            let rank = |open: &Open| (open.verdict != "let_go", open.holding_on.unwrap_or(f64::INFINITY));
            let ((a_last, a_worth), (b_last, b_worth)) = (rank(a), rank(b));
            a_last.cmp(&b_last).then(a_worth.total_cmp(&b_worth)).then(b.age_s.total_cmp(&a.age_s))
        });
        waits.truncate(most);
        Ok(Document { schema: "outwait/open/1", made_at: crate::say::time(now), total, waits })
    })
    .await?;
    json(&document)
}

/// What an advice says of a wait of this age: the verdict, the worth of holding on, and the age at which it changes.
pub(in crate::serve) fn judge(advice: Option<&Advice>, age: f64) -> (&'static str, Option<f64>, Option<f64>) {
    let Some(decision) = advice.map(|advice| &advice.advice) else { return ("unknown", None, None) };
    let worth = value_at(&decision.holding_on, age);
    match (decision.action, decision.give_up_after_s) {
        (Action::WaitItOut, _) => {
            let ceiling = decision.ceiling_s.filter(|ceiling| ceiling.is_finite());
            match ceiling {
                Some(ceiling) if age >= ceiling => ("let_go", Some(0.0), None),
                ceiling => ("hold", worth, ceiling),
            }
        }
        (Action::GiveUpAfter, Some(give_up)) if age >= give_up => ("let_go", Some(0.0), None),
        (Action::GiveUpAfter, Some(give_up)) => ("hold", worth, Some(give_up)),
        _ => ("unknown", None, None),
    }
}

/// A curve of points by rising age, read at one; `None` outside.
fn value_at(curve: &[[f64; 2]], age: f64) -> Option<f64> {
    let next = curve.partition_point(|point| point[0] < age);
    let (upper, lower) = (curve.get(next)?, curve.get(next.checked_sub(1).unwrap_or(next))?);
    if upper[0] == lower[0] {
        return Some(upper[1]);
    }
    Some(lower[1] + (upper[1] - lower[1]) * (age - lower[0]) / (upper[0] - lower[0]))
}
