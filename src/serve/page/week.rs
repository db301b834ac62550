//! `GET /week`: the week's recommendations, those to sign first; `POST /week` signs one, some or all of them.

use std::sync::Arc;

use axum::Form;
use axum::extract::State;
use axum::extract::rejection::FormRejection;
use axum::http::{StatusCode, Uri};
use axum::response::Response;
use serde::Serialize;

use super::decide::PATIENCE;
use super::list::{Axis, marks};
use super::{Moment, Shell, address, go, page};
use crate::advice::Caution;
use crate::chart::{Lane, lane, milestones, road};
use crate::policy::GiveUp;
use crate::report::{Row as Recommended, Verdict, Weekly};
use crate::say;
use crate::serve::http::{App, READ_ONLY, Wish, away, parameters, shown, take, week_now};
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;

#[derive(Serialize)]
struct Content {
    /// Whether any stream has waits.
    empty: bool,
    finding: String,
    since: Option<String>,
    made: Option<Moment>,
    open: bool,
    read_only: &'static str,
    sign: Vec<Row>,
    rest: Vec<Row>,
    cautions: [String; 3],
    axis: Axis,
    /// What was signed just now.
    signed: String,
    by: String,
    why: String,
    /// What was not taken, and why.
    wrong: Vec<String>,
}

#[derive(Serialize)]
struct Row {
    name: String,
    href: String,
    /// What is signed, as the form sends it.
    sign: String,
    verdict: &'static str,
    old: String,
    new: String,
    because: String,
    worth: String,
    hours: String,
    loses: String,
    load: String,
    changed: Vec<String>,
    folded: String,
    cautions: Vec<Caution>,
    wide: String,
    narrow: String,
}

/// What was filled in, where it could not be taken.
#[derive(Default)]
struct Left {
    by: String,
    why: String,
    wrong: Vec<String>,
    signed: usize,
}

pub(in crate::serve) async fn week(State(shared): App, uri: Uri) -> Result<Response, Problem> {
    let asked = parameters(&uri, &["signed"])?;
    let signed = asked.get("signed").and_then(|text| text.parse().ok()).unwrap_or(0);
    away(move || show(&shared, StatusCode::OK, Left { signed, ..Left::default() })).await
}

fn show(shared: &Arc<Shared>, status: StatusCode, left: Left) -> Result<Response, Problem> {
    let week = week_now(shared);
    page(status, "week.html", Shell::new(shared, "week", "This week"), content(shared, week, left))
}

fn content(shared: &Shared, week: Weekly, left: Left) -> Content {
    let all: Vec<_> = week.sign.iter().filter_map(|row| shared.advice(&row.stream)).collect();
    let way = road(all.iter().flat_map(|fresh| {
        let ends = [fresh.road.first(), fresh.road.last()].into_iter().flatten().map(|point| point[0]);
        let marks = marks(&fresh.advice);
        ends.chain(marks.advised).chain(marks.in_force).collect::<Vec<_>>()
    }));
    let settled = shared.settled();
    let row = |(number, it): (usize, &Recommended), is_drawn: bool| {
        let draw = |name: &str, size| {
            let Some(fresh) = shared.advice(&it.stream).filter(|_| is_drawn) else { return String::new() };
            let (prefix, marks) = (format!("{name}{number}"), marks(&fresh.advice));
            let (stream, curve) = (it.stream.as_str(), fresh.road.as_slice());
            lane(&Lane { stream, road: way, curve, marks, ring: None, prefix: &prefix, size })
        };
        let seen = settled.history(&it.stream).len();
        Row {
            name: it.stream.clone(),
            href: address(&it.stream),
            sign: it.new_s.map_or_else(String::new, |to| format!("{seen}@{}@{}", shown(to), it.stream)),
            verdict: it.verdict.words(),
            old: it.old_s.map_or_else(String::new, time),
            new: it.new_s.map_or_else(String::new, time),
            because: it.because.clone(),
            worth: it.worth_per_day.map_or_else(String::new, |worth| format!("{} a day", say::amount(worth))),
            hours: it.hours_per_day.filter(|hours| *hours > 0.0).map_or_else(String::new, |hours| {
                format!("{} of waiting a day", say::duration(3_600.0 * hours))
            }),
            loses: it.loses.map_or_else(String::new, say::percent),
            load: match (it.attempts_now, it.attempts_then) {
                (Some(now), Some(then)) => format!("{} to {}", say::number(now), say::number(then)),
                _ => String::new(),
            },
            changed: it.changed.clone(),
            folded: it.folded.clone().unwrap_or_default(),
            cautions: it.cautions.clone(),
            wide: draw("w", (640, 48)),
            narrow: draw("n", (320, 44)),
        }
    };
    Content {
        empty: week.sign.is_empty() && week.rest.is_empty(),
        finding: finding(&week),
        since: week.since.clone(),
        made: week.made_at.clone().map(Moment::from_iso),
        open: shared.config.may_settle(),
        read_only: READ_ONLY,
        sign: week.sign.iter().enumerate().map(|it| row(it, true)).collect(),
        rest: week.rest.iter().enumerate().map(|it| row(it, false)).collect(),
        cautions: week.cautions,
        axis: Axis { wide: milestones(way, 640, 12.0), narrow: milestones(way, 320, 12.0) },
        signed: match left.signed {
            0 => String::new(),
            1 => "One is signed and in force.".into(),
            n => format!("{} are signed and in force.", say::count(n as f64)),
        },
        by: left.by,
        why: left.why,
        wrong: left.wrong,
    }
}

fn time(time: GiveUp) -> String {
    say::duration(time.seconds())
}

fn finding(week: &Weekly) -> String {
    let changes = |verdict| week.sign.iter().filter(|row| row.verdict == verdict).count();
    let all = week.sign.len() + week.rest.len();
    let hours: f64 = week.sign.iter().filter_map(|row| row.hours_per_day).filter(|hours| *hours > 0.0).sum();
    if week.sign.is_empty() {
        return format!(
            "Nothing to sign: of {} streams none has a change that is worth it.",
            say::count(all as f64)
        );
    }
    let parts: Vec<String> =
        [(Verdict::Lower, "to lower"), (Verdict::Raise, "to raise"), (Verdict::Set, "to set")]
            .into_iter()
            .filter_map(|(verdict, words)| Some((changes(verdict), words)).filter(|(n, _)| *n > 0))
            .map(|(n, words)| format!("{n} {words}"))
            .collect();
    let saved = match hours > 0.0 {
        true => format!(", which would save {} of waiting a day", say::duration(3_600.0 * hours)),
        false => String::new(),
    };
    format!(
        "Sign {} of {} give-up times: {}{saved}.",
        week.sign.len(),
        say::count(all as f64),
        parts.join(", ")
    )
}

pub(in crate::serve) async fn sign_week(
    State(shared): App,
    form: Result<Form<Vec<(String, String)>>, FormRejection>,
) -> Result<Response, Problem> {
    let Form(pairs) =
        form.map_err(|error| Problem::parameter("form", error.body_text(), "use the form at /week"))?;
    away(move || sign(&shared, &pairs)).await
}

/// Signs each that was chosen; what is not taken is told, the rest is.
fn sign(shared: &Arc<Shared>, pairs: &[(String, String)]) -> Result<Response, Problem> {
    let all = |name: &str| -> Vec<&str> {
        pairs.iter().filter(|(key, _)| key == name).map(|(_, value)| value.as_str()).collect()
    };
    let first = |name: &str| all(name).first().copied().unwrap_or_default().to_owned();
    let chosen = match (all("one").as_slice(), first("which").as_str()) {
        ([one, ..], _) => vec![*one],
        (_, "all") => all("shown"),
        _ => all("sign"),
    };
    let mut left = Left { by: first("by"), why: first("why"), ..Left::default() };
    let mut status = StatusCode::BAD_REQUEST;
    if chosen.is_empty() {
        left.wrong.push("Nothing is ticked; tick what you sign, or sign all".into());
        return show(shared, status, left);
    }
    let mut signed = Vec::new();
    for one in chosen {
        let mut parts = one.splitn(3, '@');
        let (Some(seen), Some(time), Some(stream)) = (parts.next(), parts.next(), parts.next()) else {
            return Err(Problem::parameter("sign", "not one of the week's", "use the form at /week"));
        };
        let wish = Wish {
            decision: "accept".into(),
            by: left.by.clone(),
            why: left.why.clone(),
            give_up_after: time.to_owned(),
            seen: seen.parse().ok(),
            ..Wish::default()
        };
        match take(shared, stream, &wish) {
            Ok(_) => signed.push(stream),
            Err(problem) => {
                status = problem.status();
                let told = problem.sentence();
                // Who and why are the same for all.
                if !left.wrong.contains(&told) {
                    left.wrong.push(told);
                }
            }
        }
    }
    signed.iter().for_each(|stream| shared.desk.wait_for(stream, PATIENCE / signed.len() as f64));
    if left.wrong.is_empty() {
        return Ok(go(&format!("/week?signed={}", signed.len())));
    }
    left.signed = signed.len();
    show(shared, status, left)
}
