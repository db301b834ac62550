//! `GET /how-it-is`: whether what the advice rests on is sound.

use axum::extract::State;
use axum::http::{StatusCode, Uri};
use axum::response::Response;
use serde::Serialize;

use super::{Moment, Shell, ago, page};
use crate::intake::BadLine;
use crate::ledger::Reader;
use crate::say;
use crate::serve::http::{App, away, parameters};
use crate::serve::problem::Problem;
use crate::serve::settling;
use crate::serve::shared::Shared;

#[derive(Serialize)]
struct Check {
    name: &'static str,
    sound: bool,
    says: String,
    remedy: String,
}

#[derive(Serialize)]
struct Bad {
    field: String,
    reason: String,
    lines: String,
    example: Option<BadLine>,
}

#[derive(Serialize)]
struct Fact {
    name: &'static str,
    value: String,
}

#[derive(Serialize)]
struct Content {
    sound: bool,
    checks: Vec<Check>,
    facts: Vec<Fact>,
    bad: Vec<Bad>,
    last_filed: Option<Moment>,
    oldest: Option<Moment>,
}

pub(in crate::serve) async fn how_it_is(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    parameters(&uri, &[])?;
    away(move || {
        let content = content(&shared);
        page(StatusCode::OK, "health.html", Shell::new(&shared, "health", "How it is"), content)
    })
    .await
}

fn content(shared: &Shared) -> Content {
    let checks = checks(shared);
    let examples = shared.examples();
    let all = shared.all_advice();
    let metrics = &shared.metrics;
    let mut facts = vec![
        Fact { name: "Lines read since the start", value: say::count(metrics.lines.get() as f64) },
        Fact { name: "Waits taken since the start", value: say::count(metrics.waits.get() as f64) },
    ];
    match shared.ask(Reader::extent) {
        Ok(extent) => facts.extend([
            Fact {
                name: "Size of the ledger",
                value: format!("{} MB", say::number(extent.bytes as f64 / 1e6)),
            },
            Fact { name: "Streams in it", value: say::count(extent.streams as f64) },
            Fact { name: "Waits open", value: say::count(extent.open as f64) },
            Fact { name: "Idempotency keys kept", value: say::count(extent.keys as f64) },
        ]),
        Err(error) => facts.push(Fact { name: "The ledger cannot be read", value: error.to_string() }),
    }
    facts.push(Fact { name: "Streams with advice", value: say::count(all.len() as f64) });
    Content {
        sound: checks.iter().all(|check| check.sound),
        checks,
        facts,
        bad: metrics
            .bad_counts()
            .into_iter()
            .map(|(field, reason, lines)| Bad {
                example: examples.iter().find(|bad| bad.field == field && bad.kind == reason).cloned(),
                lines: say::count(lines as f64),
                field,
                reason,
            })
            .collect(),
        last_filed: shared.last_filed().and_then(Moment::of),
        oldest: all.iter().map(|fresh| fresh.made_at).reduce(f64::min).and_then(Moment::of),
    }
}

/// Whether the file of decisions and the ledger say the same.
fn settled(shared: &Shared) -> Check {
    let book = shared.settling.book();
    let file = settling::path(shared).display().to_string();
    match book.trouble {
        None => {
            let streams = book.settled.streams().count();
            let says = match streams {
                0 => "nothing so far".into(),
                1 => format!("one stream; {file} says the same"),
                n => format!("{} streams; {file} says the same", say::count(n as f64)),
            };
            Check { name: "Decisions", sound: true, says, remedy: String::new() }
        }
        Some((what, remedy)) => Check {
            name: "Decisions",
            sound: false,
            says: format!("the ledger's stand, and the file is not in step with them: {what}"),
            remedy: remedy.into(),
        },
    }
}

fn checks(shared: &Shared) -> Vec<Check> {
    let sound = |name, says: String| Check { name, sound: true, says, remedy: String::new() };
    let ledger = match shared.in_trouble() {
        None => sound("Ledger", "takes batches".into()),
        Some(error) => Check {
            name: "Ledger",
            sound: false,
            says: error.to_string(),
            remedy: error.remedy().to_string(),
        },
    };
    let standing = shared.standing();
    let policy = match (standing.refused, standing.policy) {
        (Some(why), _) => Check {
            name: "Policy",
            sound: false,
            says: format!("the file as it lies there is refused, the last sound one stands: {why}"),
            remedy: "correct the file; it is read again when it changes".into(),
        },
        (None, Some(policy)) => sound("Policy", format!("in force, with {} entries", policy.entries.len())),
        (None, None) => Check {
            name: "Policy",
            sound: false,
            says: "there is none, so what waiting costs is assumed".into(),
            remedy: "start it with --policy FILE; policies/ has one for each kind of wait".into(),
        },
    };
    let intake = match shared.last_filed() {
        Some(at) => sound("Intake", format!("filed last {}", ago(shared, at))),
        None => Check {
            name: "Intake",
            sound: false,
            says: "nothing has come since the start".into(),
            remedy: "send a batch to /v1/waits; see the page of streams for how".into(),
        },
    };
    let (waiting, since) = shared.desk.backlog();
    let late = 10.0 * shared.config.refresh.max(6.0);
    let advice = match waiting {
        0 => sound("Advice", "up to date".into()),
        n if since <= late => sound(
            "Advice",
            format!(
                "{} streams have changed since theirs, the first {} ago",
                say::count(n as f64),
                say::duration(since)
            ),
        ),
        n => Check {
            name: "Advice",
            sound: false,
            says: format!(
                "{} streams wait for theirs, the first for {}",
                say::count(n as f64),
                say::duration(since)
            ),
            remedy: "give it a larger --advice-share, or advise less often by --refresh".into(),
        },
    };
    vec![intake, ledger, advice, policy, settled(shared)]
}
