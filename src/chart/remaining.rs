//! How much longer: the remaining wait (mean residual life) against the age.

use super::age::Road;
use super::panel::{Level, Panel, posts};
use super::scale::{Measure, Scale};
use super::sheet::{Sample, Sheet, nothing};
use super::trace::{Point, Trace};
use super::words::{brackets_hold, duration, in_brackets, percent, range, sentences, time};
use super::{Ages, Frame, Marks, Svg, Table};
use crate::advice::RemainingWait;

/// From this ratio of the longest to the shortest remaining wait on, they are logarithmic.
const LOG_FROM: f64 = 30.0;
/// Least remaining wait a logarithmic axis shows: in s, and as a part of the longest.
const LEAST: (f64, f64) = (1e-12, 1e-9);
/// How far past the longest remaining wait its band is followed.
const BAND: f64 = 2.0;

/// What [`remaining`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Remaining<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// The axis.
    pub ages: Ages,
    /// Remaining wait to expect at an age, s; infinite where no end is to be expected.
    pub curve: &'a [Point],
    /// Level of the band, e.g. 0.9.
    pub level: f64,
    /// Times to mark.
    pub marks: Marks,
    /// The verdict.
    pub trend: RemainingWait,
    /// The age up to which the further wait is counted, s; infinite where it is counted to its end.
    pub upto: f64,
}

/// Draws how much longer there is to wait.
pub fn remaining(input: &Remaining<'_>, frame: &Frame<'_>) -> Svg {
    let input = &Remaining { marks: input.marks.sound(), ..*input };
    let trace = Trace::of(input.curve, false);
    let road = Road::of(&input.ages, &input.marks, Some(&trace)).filter(|_| trace.is_line());
    let Some(road) = road else {
        return nothing(input.stream, "too few waits have ended to tell how much longer", frame);
    };
    let shown = trace.cut(road.scale.from, road.scale.to);
    if !shown.points().iter().any(|p| p.value.is_finite()) {
        return nothing(input.stream, "no end of the wait is to be expected at any age", frame);
    }
    let title = title(input, &trace, &road);
    let level = Level { scale: scale(&shown), caption: caption(input.upto) };
    let mut panel =
        Panel::open(Sheet::open(frame, input.stream, &title), road, level, posts(&input.marks, &road));
    panel.band(&trace);
    panel.posts();
    panel.curve(&trace);
    panel.stations(&trace);
    let mut key = vec![(Sample::Line, "further wait".into())];
    if trace.has_band() {
        key.push((Sample::Band, format!("{} band", percent(input.level))));
    }
    if road.assumes(&trace) {
        key.push((Sample::LineOpen, "assumed".into()));
    }
    let rows = panel.told().into_iter().filter_map(|age| {
        let p = trace.at(age)?;
        let band = p.band.map_or(String::new(), |b| range(b, duration));
        Some(vec![time(age), duration(p.value), band, panel.remark(age)])
    });
    let table = Table { columns: vec!["after", "further wait", "band", "remark"], rows: rows.collect() };
    panel.close(key, &summary(input, &trace, &road), table)
}

fn caption(upto: f64) -> String {
    match upto.is_finite() {
        true => format!("further wait to expect, up to an age of {}", time(upto)),
        false => "further wait to expect".into(),
    }
}

fn scale(shown: &Trace) -> Scale {
    let values = || shown.points().iter().map(|p| p.value).filter(|v| v.is_finite());
    let positive = || values().filter(|v| *v > LEAST.0);
    let (least, most) = (positive().fold(f64::INFINITY, f64::min), values().fold(0.0, f64::max));
    let bands = shown.points().iter().filter_map(|p| p.band).map(|b| b[1]);
    let top = bands.filter(|b| b.is_finite()).fold(most, f64::max).min(BAND * most);
    if most / least > LOG_FROM {
        let lows = shown.points().iter().filter_map(|p| p.band).map(|b| b[0]).filter(|b| *b > 0.0);
        let bottom = lows.fold(least, f64::min).max(least / BAND).max(LEAST.1 * top);
        return Scale { from: bottom / 1.2, to: top * 1.2, log: true, measure: Measure::Time };
    }
    Scale::with_zero(Measure::Time, [top])
}

/// Ages worth a sentence: the start, and a later one: the time in force where it is seen, else the last one seen.
fn told(input: &Remaining<'_>, trace: &Trace, road: &Road) -> Vec<Point> {
    let last = trace.last_age().unwrap_or(0.0).min(road.sight).min(road.scale.to);
    let later = input.marks.in_force.filter(|age| *age <= last).unwrap_or(last);
    let start = trace.points().iter().find(|p| p.age >= road.scale.from).map_or(0.0, |p| p.age);
    [start, later].into_iter().filter_map(|age| trace.at(age)).collect()
}

fn title(input: &Remaining<'_>, trace: &Trace, road: &Road) -> String {
    let verdict = match input.trend {
        RemainingWait::Growing => "The longer it has waited, the longer there is to wait",
        RemainingWait::Shrinking => "The longer it has waited, the sooner it ends",
        RemainingWait::Flat => "What was waited says nothing about what is left",
        RemainingWait::Mixed => "The remaining wait both grows and shrinks",
        RemainingWait::Undecided => "The data do not tell whether the remaining wait grows or shrinks",
    };
    let more = |p: &Point| match p.value.is_finite() {
        true => format!("{} more", time(p.value)),
        false => "no end".into(),
    };
    match told(input, trace, road).as_slice() {
        [start, later] if later.age > start.age => {
            format!("{verdict}: {} at the start, {} after {}", more(start), more(later), time(later.age))
        }
        [at, ..] => format!("{verdict}: {} after {}", more(at), time(at.age)),
        [] => verdict.into(),
    }
}

fn summary(input: &Remaining<'_>, trace: &Trace, road: &Road) -> String {
    let mut ages: Vec<f64> = told(input, trace, road).iter().map(|p| p.age).collect();
    ages.extend([input.marks.advised, input.marks.in_force].into_iter().flatten());
    ages.sort_by(f64::total_cmp);
    ages.dedup();
    let each = ages.into_iter().filter_map(|age| trace.at(age)).map(|p| {
        let band = in_brackets(p.band, duration);
        format!("after {}, {}{band}", time(p.age), duration(p.value))
    });
    let each: Vec<String> = each.collect();
    let mark = |age: Option<f64>, name: &str| match age {
        Some(age) => format!("The {name} is {}", time(age)),
        None => String::new(),
    };
    sentences([
        format!("F{} against time waited", &caption(input.upto)[1..]),
        match each.is_empty() {
            true => String::new(),
            false => format!("Expected further wait: {}", each.join("; ")),
        },
        mark(input.marks.advised, "advised time"),
        mark(input.marks.in_force, "time in force"),
        brackets_hold(trace.has_band(), input.level, "band"),
        road.past_sight(trace),
    ])
}
