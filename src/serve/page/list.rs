//! `GET /`: the streams as lanes on one road, those that hurt first.

use std::collections::HashMap;
use std::sync::Arc;

use axum::extract::State;
use axum::http::{StatusCode, Uri, header};
use axum::response::Response;
use serde::Serialize;

use super::{Shell, address, encoded, page};
use crate::advice::{Action, Advice, Change, RemainingWait};
use crate::advise::Terms;
use crate::chart::{Lane, Marks, lane, milestones, road};
use crate::glob::Glob;
use crate::say;
use crate::serve::adviser::Fresh;
use crate::serve::http::{App, parameters};
use crate::serve::loss::Loss;
use crate::serve::problem::Problem;

/// Streams on one page.
const MOST: usize = 50;

/// What is asked of the list.
#[derive(Clone, Debug, Default)]
struct Asked {
    name: String,
    glob: Option<Glob>,
    verdict: Option<RemainingWait>,
    sort: Sort,
    page: usize,
}

/// In which order.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
enum Sort {
    #[default]
    Loss,
    Share,
    Name,
    Waits,
    Cautions,
}

impl Sort {
    const ALL: [(Sort, &'static str, &'static str); 5] = [
        (Sort::Loss, "loss", "what is lost a day"),
        (Sort::Share, "share", "share that is lost"),
        (Sort::Waits, "waits", "number of waits"),
        (Sort::Cautions, "cautions", "number of cautions"),
        (Sort::Name, "name", "name"),
    ];
}

impl Asked {
    fn of(pairs: &HashMap<String, String>) -> Result<Asked, Problem> {
        let get = |name: &str| pairs.get(name).map(|text| text.trim()).filter(|text| !text.is_empty());
        let name = get("name").unwrap_or_default().to_owned();
        let glob = match name.as_str() {
            "" => None,
            text => {
                // A plain word is looked for anywhere.
                let pattern = if text.contains(['*', '?']) { text.to_owned() } else { format!("*{text}*") };
                let remedy = "use letters, digits and . _ - / : with * and ?";
                Some(Glob::new(&pattern).map_err(|e| Problem::parameter("name", e.to_string(), remedy))?)
            }
        };
        let verdict = get("verdict").map(|text| {
            RemainingWait::ALL.into_iter().find(|verdict| verdict.name() == text).ok_or_else(|| {
                Problem::parameter(
                    "verdict",
                    "not one of them",
                    "growing, shrinking, flat, mixed or undecided",
                )
            })
        });
        let sort = get("sort").map(|text| {
            Sort::ALL.into_iter().find(|sort| sort.1 == text).map(|sort| sort.0).ok_or_else(|| {
                Problem::parameter("sort", "not one of them", "loss, share, waits, cautions or name")
            })
        });
        let page = get("page").map(|text| {
            text.parse::<usize>()
                .ok()
                .filter(|page| *page > 0)
                .ok_or_else(|| Problem::parameter("page", "not the number of a page", "pages count from 1"))
        });
        Ok(Asked {
            name,
            glob,
            verdict: verdict.transpose()?,
            sort: sort.transpose()?.unwrap_or_default(),
            page: page.transpose()?.unwrap_or(1),
        })
    }

    /// The same on another page, as an address.
    fn address(&self, page: usize) -> String {
        let mut parts = Vec::new();
        if !self.name.is_empty() {
            parts.push(format!("name={}", encoded(&self.name, "*/")));
        }
        if let Some(verdict) = self.verdict {
            parts.push(format!("verdict={}", verdict.name()));
        }
        if let Some((_, name, _)) =
            Sort::ALL.into_iter().find(|sort| sort.0 == self.sort && self.sort != Sort::Loss)
        {
            parts.push(format!("sort={name}"));
        }
        if page > 1 {
            parts.push(format!("page={page}"));
        }
        if parts.is_empty() { "/".into() } else { format!("/?{}", parts.join("&")) }
    }
}

/// Something to choose.
#[derive(Serialize)]
struct Choice {
    value: &'static str,
    words: &'static str,
    chosen: bool,
}

#[derive(Serialize)]
pub(super) struct Axis {
    pub(super) wide: String,
    pub(super) narrow: String,
}

/// What the page shows.
#[derive(Serialize)]
struct List {
    /// The worst, in a sentence.
    finding: String,
    assumed: Vec<String>,
    total: usize,
    matching: usize,
    first: usize,
    last: usize,
    page: usize,
    pages: usize,
    previous: Option<String>,
    next: Option<String>,
    name: String,
    verdicts: Vec<Choice>,
    sorts: Vec<Choice>,
    rows: Vec<Row>,
    axis: Axis,
    /// Where a batch is to be sent.
    host: String,
}

/// One stream.
#[derive(Serialize)]
struct Row {
    name: String,
    href: String,
    kind: String,
    verdict: &'static str,
    advised: String,
    in_force: String,
    /// What is lost a day, with its unit; empty where it cannot be told.
    loss: String,
    share: String,
    /// What to do next, in two words.
    change: &'static str,
    waits: String,
    cautions: usize,
    /// Its lane, for a wide window and for a telephone.
    wide: String,
    narrow: String,
}

pub(in crate::serve) async fn streams(
    State(shared): App,
    uri: Uri,
    headers: axum::http::HeaderMap,
) -> Result<Response, Problem> {
    let asked = Asked::of(&parameters(&uri, &["name", "verdict", "sort", "page"])?)?;
    let policy = shared.policy();
    let past = shared.past();
    let terms = Terms {
        policy: policy.as_deref(),
        newest: Some(shared.today()),
        seed: shared.config.seed,
        past: past.as_ref(),
    };
    let host = headers.get(header::HOST).and_then(|host| host.to_str().ok()).unwrap_or("127.0.0.1:7071");
    let scheme = if shared.config.tls.is_some() { "https" } else { "http" };
    let mut list = list(shared.all_advice(), &asked);
    list.assumed = terms.assumed();
    list.host = format!("{scheme}://{host}");
    page(StatusCode::OK, "list.html", Shell::new(&shared, "streams", "Streams"), list)
}

/// Sorts all, and words and draws one page of them.
fn list(all: Vec<Arc<Fresh>>, asked: &Asked) -> List {
    let total = all.len();
    let finding = finding(&all);
    let mut some: Vec<Arc<Fresh>> = all
        .into_iter()
        .filter(|fresh| asked.glob.as_ref().is_none_or(|glob| glob.matches(&fresh.advice.stream)))
        .filter(|fresh| asked.verdict.is_none_or(|verdict| fresh.advice.tail.remaining_wait == verdict))
        .collect();
    // They come by name, and sorting keeps that among equals.
    let by = |key: fn(&Fresh) -> f64| move |a: &Arc<Fresh>, b: &Arc<Fresh>| key(b).total_cmp(&key(a));
    let share = |fresh: &Fresh| fresh.advice.advice.regret_now.unwrap_or(-1.0);
    match asked.sort {
        Sort::Loss => some.sort_by(|a, b| by(loss)(a, b).then_with(|| by(share)(a, b))),
        Sort::Share => some.sort_by(by(share)),
        Sort::Waits => some.sort_by(by(|fresh| fresh.advice.evidence.waits as f64)),
        Sort::Cautions => some.sort_by(by(|fresh| fresh.advice.cautions.len() as f64)),
        Sort::Name => {}
    }
    let matching = some.len();
    let pages = matching.div_ceil(MOST).max(1);
    let number = asked.page.min(pages);
    let first = (number - 1) * MOST;
    let shown = &some[first.min(matching)..(first + MOST).min(matching)];
    let ages = shown.iter().flat_map(|fresh| {
        let ends = [fresh.road.first(), fresh.road.last()].into_iter().flatten().map(|point| point[0]);
        let Marks { advised, in_force } = marks(&fresh.advice);
        ends.chain(advised).chain(in_force).collect::<Vec<_>>()
    });
    let road = road(ages);
    let rows = shown.iter().enumerate().map(|(i, fresh)| row(fresh, first + i, road)).collect();
    List {
        finding,
        assumed: Vec::new(),
        total,
        matching,
        first: first + usize::from(matching > 0),
        last: first + shown.len(),
        page: number,
        pages,
        previous: (number > 1).then(|| asked.address(number - 1)),
        next: (number < pages).then(|| asked.address(number + 1)),
        name: asked.name.clone(),
        verdicts: RemainingWait::ALL
            .map(|v| Choice { value: v.name(), words: v.words(), chosen: asked.verdict == Some(v) })
            .into(),
        sorts: Sort::ALL
            .map(|(sort, value, words)| Choice { value, words, chosen: asked.sort == sort })
            .into(),
        rows,
        axis: Axis { wide: milestones(road, 640, 12.0), narrow: milestones(road, 320, 12.0) },
        host: String::new(),
    }
}

fn loss(fresh: &Fresh) -> f64 {
    fresh.loss.map_or(-1.0, |loss| loss.per_day)
}

/// The worst stream in a sentence.
fn finding(all: &[Arc<Fresh>]) -> String {
    let hurts = |fresh: &&Arc<Fresh>| fresh.advice.advice.proposal.is_some_and(|p| p.change != Change::Keep);
    let count = all.iter().filter(hurts).count();
    let worst = all.iter().filter(hurts).max_by(|a, b| loss(a).total_cmp(&loss(b)));
    match worst {
        None if all.is_empty() => String::new(),
        None => "No time in force is known to lose more than its policy puts up with.".into(),
        Some(fresh) => {
            let decision = &fresh.advice.advice;
            let share = decision.regret_now.map_or_else(String::new, |share| {
                format!(" and loses {} of what could be earned", say::percent(share))
            });
            let now = decision.now.map_or(f64::INFINITY, |now| now.give_up_after_s.unwrap_or(f64::INFINITY));
            let verb = if count == 1 { "stream is" } else { "streams are" };
            format!(
                "{} of {} {verb} given up at the wrong time. Worst is {}: {}{share}.",
                say::count(count as f64),
                say::count(all.len() as f64),
                fresh.advice.stream,
                if now.is_infinite() {
                    "it never gives up".into()
                } else {
                    format!("it gives up after {}", say::duration(now))
                }
            )
        }
    }
}

/// The times to mark; infinite for never.
pub(super) fn marks(advice: &Advice) -> Marks {
    let decision = &advice.advice;
    let advised = match decision.action {
        Action::WaitItOut => Some(f64::INFINITY),
        Action::GiveUpAfter => decision.give_up_after_s,
        _ => None,
    };
    Marks { advised, in_force: decision.now.map(|now| now.give_up_after_s.unwrap_or(f64::INFINITY)) }
}

fn words(loss: Loss) -> String {
    match loss.per_day {
        0.0 => "nothing".into(),
        some => format!("{} {} a day", say::amount(some), loss.unit),
    }
}

fn row(fresh: &Fresh, number: usize, road: [f64; 2]) -> Row {
    let (advice, decision) = (&fresh.advice, &fresh.advice.advice);
    let marks = marks(advice);
    let draw = |name, size| {
        let prefix = format!("{name}{number}");
        let (stream, curve) = (advice.stream.as_str(), fresh.road.as_slice());
        lane(&Lane { stream, road, curve, marks, ring: None, prefix: &prefix, size })
    };
    Row {
        wide: draw("w", (640, 48)),
        narrow: draw("n", (320, 44)),
        name: advice.stream.clone(),
        href: address(&advice.stream),
        kind: advice.kind.clone(),
        verdict: advice.tail.remaining_wait.words(),
        advised: match decision.action {
            Action::WaitItOut => "wait it out".into(),
            Action::GatherEvidence => "gather evidence".into(),
            Action::StateACost => "say what time costs".into(),
            Action::GiveUpAfter => marks.advised.map_or_else(String::new, say::duration),
        },
        in_force: marks.in_force.map_or_else(|| "not known".into(), say::duration),
        loss: fresh.loss.map_or_else(String::new, words),
        share: decision.regret_now.map_or_else(String::new, say::percent),
        change: match decision.proposal.map(|proposal| proposal.change) {
            Some(Change::Lower) => "give up sooner",
            Some(Change::Raise) => "hold on longer",
            Some(Change::Keep) => "keep it",
            None => "",
        },
        waits: say::count(advice.evidence.waits as f64),
        cautions: advice.cautions.len(),
    }
}

#[cfg(test)]
mod tests {
    use std::time::Instant;

    use minijinja::value::Serde;
    use minijinja::{Value, context};

    use super::super::text;
    use super::*;
    use crate::policy::Entry;
    use crate::tally::Tally;
    use crate::wait::{Ending, Wait};

    /// As many advices as asked for, all different in name and in loss.
    fn many(count: u32) -> Vec<Arc<Fresh>> {
        let mut tally = Tally::default();
        for i in 0..400 {
            tally.add(&Wait::new(0.01 + f64::from(i) / 100.0, Ending::Done).unwrap());
        }
        let advice =
            crate::advise::advise(&crate::advise::Case::new("a", &tally), &Entry::without_policy(), 1);
        let road: Vec<[f64; 2]> =
            (0..60).map(|i| [0.01 * 1.1f64.powi(i), 1.0 - f64::from(i) / 60.0]).collect();
        (0..count)
            .map(|i| {
                let advice = Advice { stream: format!("branch.{i:05}"), ..advice.clone() };
                let per_day = f64::from(i.wrapping_mul(2_654_435_761) % 100_003);
                let loss = Some(Loss { per_day, unit: "worth" });
                Arc::new(Fresh {
                    advice,
                    survival: None,
                    road: road.clone(),
                    loss,
                    made_at: 0.0,
                    changed_at: 0.0,
                    tag: 1,
                })
            })
            .collect()
    }

    fn asked(query: &[(&str, &str)]) -> Result<Asked, Problem> {
        Asked::of(&query.iter().map(|(name, value)| ((*name).into(), (*value).into())).collect())
    }

    #[test]
    fn ten_thousand_streams_are_paged() {
        let all = many(10_000);
        let mut seen = std::collections::HashSet::new();
        let mut last = f64::INFINITY;
        for number in [1, 2, 100, 200] {
            let shown = list(all.clone(), &asked(&[("page", &number.to_string())]).unwrap());
            assert_eq!(
                (shown.total, shown.matching, shown.pages, shown.rows.len()),
                (10_000, 10_000, 200, 50)
            );
            for row in &shown.rows {
                let value =
                    all.iter().find(|fresh| fresh.advice.stream == row.name).unwrap().loss.unwrap().per_day;
                assert!(value <= last && seen.insert(row.name.clone()), "{}", row.name);
                last = value;
            }
            assert_eq!((shown.previous.is_some(), shown.next.is_some()), (number > 1, number < 200));
        }
        // Past the end is the end.
        assert_eq!(list(all.clone(), &asked(&[("page", "999")]).unwrap()).page, 200);
        // Once to read the templates; then as a page is made, with the advice staying where it is.
        let shell =
            serde_json::json!({"page": "streams", "title": "Streams", "guarded": false, "version": "0"});
        let make = || {
            let began = Instant::now();
            let shown = list(all.clone(), &Asked { page: 1, ..Asked::default() });
            let sorted = began.elapsed().as_secs_f64();
            let html =
                text("list.html", context! { shell => Serde(&shell), ..Value::from(Serde(shown)) }).unwrap();
            println!(
                "10,000 streams: {} bytes, sorted and drawn in {:.1} ms, worded in {:.1} ms",
                html.len(),
                1e3 * sorted,
                1e3 * (began.elapsed().as_secs_f64() - sorted)
            );
            html
        };
        make();
        let html = make();
        assert!((50_000..400_000).contains(&html.len()), "{}", html.len());
        assert_eq!(html.matches("class=\"lane\"").count(), 100);
    }

    #[test]
    fn the_list_is_asked_by_its_address() {
        let all = many(200);
        let shown = list(all.clone(), &asked(&[("name", "001"), ("sort", "name")]).unwrap());
        assert_eq!((shown.rows[0].name.as_str(), shown.matching), ("branch.00001", 111));
        assert_eq!(list(all.clone(), &asked(&[("name", "*.00012")]).unwrap()).matching, 1);
        let none = list(all.clone(), &asked(&[("name", "x"), ("page", "2")]).unwrap());
        assert_eq!((none.matching, none.first, none.last, none.pages), (0, 0, 0, 1));
        let page = asked(&[("name", "b*/?"), ("verdict", "flat"), ("sort", "waits"), ("page", "")]).unwrap();
        assert_eq!(page.address(3), "/?name=b*/%3F&verdict=flat&sort=waits&page=3");
        assert_eq!(list(all, &asked(&[]).unwrap()).next.as_deref(), Some("/?page=2"));
        for bad in [("verdict", "heavy"), ("sort", "size"), ("page", "0"), ("page", "two"), ("name", "a b")] {
            assert!(asked(&[bad]).is_err(), "{bad:?}");
        }
    }
}
