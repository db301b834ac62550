//! `GET /stream/{name}`: one stream, from the finding to the evidence, and a give-up time to try.

use std::sync::Arc;

use axum::extract::{Path, State};
use axum::http::{StatusCode, Uri};
use axum::response::Response;
use serde::Serialize;

use super::decide::{Desk, Filled};
use super::list::marks;
use super::past::Past;
use super::what_if::{Earnings, Row, rows};
use super::{Moment, Shell, ago, in_path, page};
use crate::advice::{Action, Advice, Caution, Change};
use crate::advise::{Curves, Terms};
use crate::chart::{Frame, Lane, Picture, Svg, Table, lane, milestones, road};
use crate::policy::GiveUp;
use crate::say;
use crate::serve::adviser::Fresh;
use crate::serve::diary;
use crate::serve::http::{App, away, give_up_after, parameters, study, unknown};
use crate::serve::problem::Problem;
use crate::serve::shared::Shared;
use crate::settle::{proposal, round_up};

/// Widths of a picture, px: on a wide window, and on a telephone.
const WIDE: u32 = 760;
const NARROW: u32 = 360;

#[derive(Serialize)]
struct Drawn {
    name: &'static str,
    wide: String,
    narrow: String,
    title: String,
    summary: String,
    columns: Vec<&'static str>,
    rows: Vec<Vec<String>>,
}

#[derive(Serialize)]
struct Road {
    wide: String,
    narrow: String,
}

/// What may be tried, and what it would do.
#[derive(Serialize)]
struct Trial {
    /// As it was typed, or the advised time.
    value: String,
    /// Why it could not be understood.
    wrong: Option<String>,
    /// Ends of the slider, s.
    from: f64,
    to: f64,
    earnings: Earnings,
    rows: Vec<Row>,
    regret: String,
    past_sight: bool,
}

#[derive(Serialize)]
struct Family {
    name: String,
    weight: String,
    gap: String,
    parameters: String,
    stopped: String,
}

#[derive(Serialize)]
struct Fact {
    name: &'static str,
    value: String,
}

#[derive(Serialize)]
struct Content<'a> {
    name: &'a str,
    finding: String,
    because: String,
    verdict: String,
    reason: String,
    next: String,
    in_path: String,
    made: Option<Moment>,
    made_ago: String,
    road: Road,
    axis: Road,
    trial: Option<Trial>,
    /// Why nothing can be tried.
    untried: String,
    desk: Desk,
    past: Past,
    pictures: Vec<Drawn>,
    facts: Vec<Fact>,
    from: Option<Moment>,
    to: Option<Moment>,
    families: Vec<Family>,
    empirical: String,
    cautions: &'a [Caution],
}

pub(in crate::serve) async fn one(
    State(shared): App,
    Path(stream): Path<String>,
    uri: Uri,
) -> Result<Response, Problem> {
    let asked = parameters(&uri, &["give_up_after"])?;
    let typed = asked.get("give_up_after").map(|text| text.trim().to_owned()).filter(|text| !text.is_empty());
    let fresh = shared.advice(&stream).ok_or_else(|| unknown(&stream))?;
    away(move || show(&shared, &fresh, typed.as_deref(), None)).await
}

/// `refused`: the form by which somebody tried to decide, why it was not taken, and the status that says so.
pub(super) fn show(
    shared: &Arc<Shared>,
    fresh: &Arc<Fresh>,
    typed: Option<&str>,
    refused: Option<(Filled, String, StatusCode)>,
) -> Result<Response, Problem> {
    let advice = &fresh.advice;
    let decision = &advice.advice;
    let policy = shared.policy();
    let past = shared.past();
    let terms = Terms {
        policy: policy.as_deref(),
        newest: Some(shared.today()),
        seed: shared.config.seed,
        past: past.as_ref(),
    };
    let entry = terms.entry(&advice.stream);
    let kept = study(shared, &advice.stream, fresh.tag)?;
    let curves = kept.curves();
    let marks = marks(advice);
    let (asked, wrong) = match typed.map(give_up_after) {
        None => (marks.advised, None),
        Some(Ok(time)) => (Some(time), None),
        Some(Err(problem)) => (None, Some(problem.sentence())),
    };
    let reach = [decision.floor_s, decision.ceiling_s].into_iter().flatten();
    let ends = [fresh.road.first(), fresh.road.last()].into_iter().flatten().map(|point| point[0]);
    let way = road(reach.chain(ends).chain(marks.advised).chain(marks.in_force));
    let sight = curves.sight_s.unwrap_or(0.0);
    let in_sight = curves.points.iter().filter(|point| point.age_s > 0.0 && point.age_s <= sight);
    let seen: Vec<[f64; 2]> = in_sight.map(|point| [point.age_s, point.survival]).collect();
    let judged = matches!(decision.action, Action::GiveUpAfter | Action::WaitItOut);
    let draw = |prefix, size| {
        let ring = judged.then_some(typed.and(asked));
        lane(&Lane { stream: &advice.stream, road: way, curve: &seen, marks, ring, prefix, size })
    };
    let mut untried = String::new();
    let mut trial = None;
    let base = asked.or(marks.advised).unwrap_or(f64::INFINITY);
    match kept.study.what_if(base) {
        Err(error) => untried = error.to_string(),
        Ok(what) => {
            let earnings = Earnings::of(entry.worth.map(|worth| worth.aim), what.advised.rate_per_s);
            trial = Some(Trial {
                value: typed.map_or_else(|| plain(base), str::to_owned),
                wrong: wrong.clone(),
                from: way[0],
                to: way[1],
                earnings,
                rows: rows(&what, earnings),
                regret: say::percent(what.expected_regret),
                past_sight: what.past_sight,
            });
        }
    }
    let evidence = &advice.evidence;
    let days =
        diary::days(shared, fresh).map_err(|error| Problem::ours(format!("{error}; {}", error.remedy())))?;
    let (tried, refused) = match refused {
        Some((filled, why, status)) => (Some(status), Some((filled, why))),
        None => (None, None),
    };
    let proposed = proposal(advice).map(|to| match to {
        GiveUp::After(seconds) => GiveUp::After(round_up(seconds, &entry)),
        GiveUp::Never => GiveUp::Never,
    });
    let content = Content {
        name: &advice.stream,
        finding: finding(advice),
        because: say::capital(&decision.because),
        verdict: say::capital(&format!(
            "{}; {}",
            advice.tail.class.words(),
            advice.tail.remaining_wait.words()
        )),
        reason: say::capital(&advice.tail.reason),
        next: next(advice),
        in_path: in_path(&advice.stream),
        made: Moment::of(fresh.made_at),
        made_ago: ago(shared, fresh.made_at),
        road: Road { wide: draw("road-wide", (1_200, 90)), narrow: draw("road-narrow", (NARROW, 70)) },
        axis: Road { wide: milestones(way, 1_200, 15.0), narrow: milestones(way, NARROW, 12.0) },
        trial,
        untried,
        desk: Desk::of(shared, fresh, entry.now, proposed, refused),
        past: Past::of(&days, &shared.settled(), &advice.stream),
        pictures: Picture::ALL.map(|picture| drawn(picture, curves)).into(),
        facts: facts(advice),
        from: evidence.from.clone().map(Moment::from_iso),
        to: evidence.to.clone().map(Moment::from_iso),
        families: advice.fits.iter().map(family).collect(),
        empirical: say::percent((1.0 - advice.fits.iter().map(|fit| fit.weight).sum::<f64>()).max(0.0)),
        cautions: &advice.cautions,
    };
    let status = if wrong.is_some() { StatusCode::BAD_REQUEST } else { tried.unwrap_or(StatusCode::OK) };
    page(status, "stream.html", Shell::new(shared, "stream", advice.stream.clone()), content)
}

/// A time as it would be typed.
fn plain(seconds: f64) -> String {
    if seconds.is_infinite() {
        "never".into()
    } else {
        say::duration(seconds).replace('µ', "u").replace(' ', "")
    }
}

/// What is to be done, in one sentence.
fn finding(advice: &Advice) -> String {
    let decision = &advice.advice;
    let loses = decision.regret_now.map_or_else(String::new, |share| {
        format!(": that loses {} of what could be earned", say::percent(share))
    });
    let now = decision.now.map(|now| now.give_up_after_s.map_or_else(|| "never".into(), say::duration));
    let change = decision.proposal.map(|proposal| proposal.change);
    match (decision.action, decision.give_up_after_s, now) {
        (Action::GiveUpAfter, Some(t), Some(now)) if change == Some(Change::Keep) => {
            format!(
                "Keep {now}: giving up after {} would earn no more than the slack allows for.",
                say::duration(t)
            )
        }
        (Action::GiveUpAfter, Some(t), Some(now)) if now == "never" => {
            format!("Give up after {}; now one never does{loses}.", say::duration(t))
        }
        (Action::GiveUpAfter, Some(t), Some(now)) => {
            format!("Give up after {}, not after {now}{loses}.", say::duration(t))
        }
        (Action::GiveUpAfter, Some(t), None) => format!("Give up after {}.", say::duration(t)),
        (Action::WaitItOut, _, Some(now)) if now != "never" && change != Some(Change::Keep) => {
            format!("Wait it out; now one gives up after {now}{loses}.")
        }
        (Action::WaitItOut, ..) => "Wait it out.".into(),
        (Action::StateACost, ..) => "Say what time costs: nothing here says when to stop.".into(),
        _ => "Gather evidence: it is too early to say.".into(),
    }
}

/// The next change within the guards.
fn next(advice: &Advice) -> String {
    let Some(proposal) = advice.advice.proposal else { return String::new() };
    let to = proposal.to_s.map_or_else(|| "never".into(), say::duration);
    let limited = if proposal.step_limited { ", the largest step that the guard allows" } else { "" };
    match proposal.change {
        Change::Keep => "Leave the time in force as it is.".into(),
        Change::Raise => format!("Raise the time in force to {to}{limited}."),
        Change::Lower => format!("Lower the time in force to {to}{limited}."),
    }
}

fn drawn(picture: Picture, curves: &Curves) -> Drawn {
    let at = |width, prefix: &str| picture.draw(curves, &Frame { width, prefix, styled: false });
    let Svg { markup, title, summary, table: Table { columns, rows } } = at(WIDE, picture.name());
    let narrow = at(NARROW, &format!("{}-narrow", picture.name())).markup;
    Drawn { name: picture.name(), wide: markup, narrow, title, summary, columns, rows }
}

fn family(fit: &crate::advice::FitSummary) -> Family {
    let parameters: Vec<String> = fit
        .parameters
        .iter()
        .map(|(name, value)| {
            let value = value.as_f64().map_or_else(|| value.to_string(), say::number);
            format!("{name} {value}")
        })
        .collect();
    Family {
        name: fit.family.clone(),
        weight: say::percent(fit.weight),
        gap: say::percent(fit.largest_gap),
        parameters: parameters.join(", "),
        stopped: fit.stopped.clone(),
    }
}

fn facts(advice: &Advice) -> Vec<Fact> {
    let (evidence, decision) = (&advice.evidence, &advice.advice);
    let count = |n: u64| say::count(n as f64);
    let range = |[low, high]: [f64; 2]| format!("{} to {}", say::duration(low), say::duration(high));
    let fact = |name, value| Fact { name, value };
    let mut facts = vec![
        fact("Waits", count(evidence.waits)),
        fact("Done", count(evidence.done)),
        fact("Failed", count(evidence.failed)),
        fact("Given up", count(evidence.gave_up)),
        fact("Still waiting", count(evidence.waiting)),
        fact("Retries among them", count(evidence.retries)),
    ];
    let more = [
        ("Lent by other streams", evidence.borrowed_share.map(say::percent)),
        ("The data speak up to", evidence.sight_s.map(say::duration)),
        ("As good as the advised time", decision.band_s.map(range)),
        ("The best time lies between (90%)", decision.interval_s.map(range)),
        ("The advised time is expected to lose", decision.expected_regret.map(say::percent)),
        ("The time in force loses", decision.regret_now.map(say::percent)),
        ("Retries to let through, per request", decision.retry_budget.map(say::percent)),
        ("A retry meets the same fate", decision.sticky.as_ref().map(|sticky| say::percent(sticky.value))),
        ("Weight of the heavy families", Some(say::percent(advice.tail.heavy_weight))),
    ];
    facts.extend(more.into_iter().filter_map(|(name, value)| Some(fact(name, value?))));
    facts
}
