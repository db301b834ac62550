//! How a stream's give-up time and its law went: day by day and week by week on one road, with what people decided between.

use jiff::Timestamp;
use serde::Serialize;

use super::Moment;
use crate::advice::Action;
use crate::chart::{Lane, Marks, lane, milestones, road};
use crate::diary::Day;
use crate::policy::GiveUp;
use crate::say;
use crate::serve::diary::date;
use crate::settle::{Grounds, Settled, Settlement};

/// Days of which each has its lane; of those before, one a week has.
const EACH: i32 = 7;

/// What the page shows of it.
#[derive(Serialize)]
pub(super) struct Past {
    pub(super) finding: String,
    pub(super) items: Vec<Item>,
    pub(super) wide: String,
    pub(super) narrow: String,
    pub(super) columns: [&'static str; 11],
    pub(super) rows: Vec<Vec<String>>,
}

/// A day, or a decision.
#[derive(Serialize)]
pub(super) struct Item {
    date: String,
    decision: Option<Decided>,
    day: Option<Shown>,
}

#[derive(Serialize)]
struct Decided {
    at: Option<Moment>,
    words: String,
    grounds: String,
}

#[derive(Serialize)]
struct Shown {
    law: String,
    shifted: String,
    afterwards: bool,
    advised: String,
    in_force: String,
    loses: String,
    wide: String,
    narrow: String,
}

impl Past {
    /// `days`: the newest first.
    pub(super) fn of(days: &[(i32, Day)], settled: &Settled, stream: &str) -> Past {
        let lanes = chosen(days);
        let times = |day: &Day| {
            let marks = marks(day);
            let ends = [day.road.first(), day.road.last()].into_iter().flatten().map(|point| point[0]);
            ends.chain(marks.advised).chain(marks.in_force).collect::<Vec<_>>()
        };
        let way = road(lanes.iter().flat_map(|(_, day)| times(day)));
        let decisions = settled.history(stream);
        let mut items: Vec<(i64, Item)> =
            decisions.iter().map(|one| (one.at.as_second(), decided(one))).collect();
        for (number, what) in &lanes {
            // A day counts from its end, so that what was decided on it comes after it in a list that goes back.
            let end = (i64::from(*number) + 1) * 86_400 - 1;
            items.push((end, shown(*number, what, way)));
        }
        items.sort_by_key(|(at, _)| std::cmp::Reverse(*at));
        Past {
            finding: finding(days, decisions),
            items: items.into_iter().map(|(_, item)| item).collect(),
            wide: milestones(way, 640, 12.0),
            narrow: milestones(way, 320, 12.0),
            columns: [
                "day",
                "advised",
                "about as good",
                "in force",
                "proposed",
                "in force loses",
                "tail",
                "heavy families",
                "remaining wait",
                "waits",
                "done",
            ],
            rows: days.iter().map(|(day, what)| row(*day, what)).collect(),
        }
    }
}

/// Each of the last days, then the newest of each week.
fn chosen(days: &[(i32, Day)]) -> Vec<(i32, &Day)> {
    let Some((newest, _)) = days.first() else { return Vec::new() };
    let mut weeks = std::collections::HashSet::new();
    let keep = |day: i32| newest - day < EACH || weeks.insert((newest - day) / 7);
    let mut keep = keep;
    days.iter().filter(|(day, _)| keep(*day)).map(|(day, what)| (*day, what)).collect()
}

fn marks(day: &Day) -> Marks {
    Marks { advised: day.advised_s.map(GiveUp::seconds), in_force: day.in_force_s.map(GiveUp::seconds) }
}

fn shown(number: i32, day: &Day, way: [f64; 2]) -> Item {
    let date = date(number);
    let draw = |name: &str, size| {
        let prefix = format!("past-{name}-{date}");
        lane(&Lane {
            stream: &date,
            road: way,
            curve: &day.road,
            marks: marks(day),
            ring: None,
            prefix: &prefix,
            size,
        })
    };
    let (wide, narrow) = (draw("w", (640, 44)), draw("n", (320, 44)));
    let shown = Shown {
        law: format!("{}; {}", day.tail.words(), day.remaining_wait.words()),
        shifted: day.shifted.clone().unwrap_or_default(),
        afterwards: day.afterwards,
        advised: advised(day),
        in_force: day.in_force_s.map_or_else(|| "not known".into(), time),
        loses: day.loses.map_or_else(String::new, say::percent),
        wide,
        narrow,
    };
    Item { date, decision: None, day: Some(shown) }
}

fn advised(day: &Day) -> String {
    match (day.action, day.advised_s) {
        (Action::WaitItOut, _) => "wait it out".into(),
        (Action::GatherEvidence, _) => "gather evidence".into(),
        (Action::StateACost, _) => "say what time costs".into(),
        (Action::GiveUpAfter, advised) => advised.map_or_else(String::new, time),
    }
}

fn decided(one: &Settlement) -> Item {
    let iso = one.at.to_string();
    let at = Timestamp::from_second(one.at.as_second()).map_or(iso.clone(), |whole| whole.to_string());
    let grounds = one.grounds.as_ref().map_or_else(String::new, grounds);
    let decision = Decided { at: Some(Moment::from_iso(at)), words: words(one), grounds };
    Item { date: iso.get(..10).unwrap_or_default().to_owned(), decision: Some(decision), day: None }
}

/// A decision in a sentence, without when.
pub(super) fn words(one: &Settlement) -> String {
    use crate::settle::State;
    let what = match one.state {
        State::Accepted { give_up_after } => format!("accepted {}", time(give_up_after)),
        State::Pinned { give_up_after } => format!("pinned {}", time(give_up_after)),
        State::Postponed { until } => format!("postponed until {}", until.strftime("%Y-%m-%d")),
        State::Refused => "said no to what was proposed".into(),
        State::Undone => "took the last decision back".into(),
    };
    format!("{} {what}: {}", one.by, one.why)
}

fn grounds(grounds: &Grounds) -> String {
    let mut parts =
        vec![format!("{} waits, {} done", say::count(grounds.waits as f64), say::count(grounds.done as f64))];
    for (name, at) in
        [("in force", grounds.in_force), ("best", grounds.advised), ("proposed", grounds.proposed)]
    {
        parts.extend(at.map(|at| format!("{name} {}", time(at))));
    }
    parts.extend(grounds.loses.map(|loses| format!("the one in force lost {}", say::percent(loses))));
    parts.join("; ")
}

fn time(time: GiveUp) -> String {
    say::duration(time.seconds())
}

/// The history in a sentence.
fn finding(days: &[(i32, Day)], decisions: &[Settlement]) -> String {
    let (Some((_, now)), Some((first, then))) = (days.first(), days.last()) else { return String::new() };
    let decided = match decisions.len() {
        0 => "nobody has decided anything".to_owned(),
        1 => "one decision was made".into(),
        n => format!("{n} decisions were made"),
    };
    if days.len() < 2 {
        return format!("The history begins today; {decided}.");
    }
    let since = date(*first);
    let law = if (now.tail, now.remaining_wait) == (then.tail, then.remaining_wait) {
        "the verdict on the law is the same".to_owned()
    } else {
        format!("the verdict on the law was: {}; {}", then.tail.words(), then.remaining_wait.words())
    };
    format!("On {since} {} was advised, now {}; {law}; {decided}.", advised(then), advised(now))
}

fn row(number: i32, day: &Day) -> Vec<String> {
    let or = |time: Option<String>| time.unwrap_or_default();
    vec![
        date(number) + if day.afterwards { " (worked out later)" } else { "" },
        advised(day),
        or(day.band_s.map(|[low, high]| format!("{} to {}", say::duration(low), say::duration(high)))),
        or(day.in_force_s.map(time)),
        or(day.proposed_s.map(time)),
        or(day.loses.map(say::percent)),
        day.tail.words().into(),
        say::percent(day.heavy_weight),
        day.remaining_wait.name().into(),
        say::count(day.waits as f64),
        say::count(day.done as f64),
    ]
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::advice::{RemainingWait, TailClass};

    fn day(advised: f64) -> Day {
        Day {
            waits: 10,
            done: 8,
            action: Action::GiveUpAfter,
            advised_s: Some(GiveUp::After(advised)),
            band_s: None,
            in_force_s: Some(GiveUp::Never),
            proposed_s: None,
            loses: Some(0.5),
            tail: TailClass::Heavy,
            heavy_weight: 1.0,
            remaining_wait: RemainingWait::Growing,
            shifted: None,
            road: vec![[0.1, 0.9], [1.0, 0.5]],
            afterwards: false,
        }
    }

    #[test]
    fn days_then_weeks_with_decisions_between() {
        let days: Vec<(i32, Day)> = (0..30).map(|back| (20_000 - back, day(1.0 + f64::from(back)))).collect();
        let mut settled = Settled::default();
        let at: Timestamp = "2024-10-03T10:00:00Z".parse().unwrap();
        let state = crate::settle::State::Refused;
        settled.add("desk", Settlement { state, at, by: "Ada".into(), why: "no".into(), grounds: None });
        let past = Past::of(&days, &settled, "desk");
        // 20,000 days after 1970-01-01 is 4 October 2024 (`date -u -d '1970-01-01 20000 days'`).
        let dates: Vec<&str> = past.items.iter().map(|item| item.date.as_str()).collect();
        assert_eq!(dates[..3], ["2024-10-04", "2024-10-03", "2024-10-03"]);
        assert!(past.items[2].decision.is_some() && past.items[1].day.is_some());
        // Seven days, then the newest of four more weeks.
        assert_eq!(past.items.len(), 1 + 7 + 4);
        assert_eq!(dates.last(), Some(&"2024-09-06"));
        assert_eq!(past.rows.len(), 30);
        assert!(past.finding.starts_with("On 2024-09-05 30.0 s was advised, now 1.00 s"), "{}", past.finding);
    }
}
