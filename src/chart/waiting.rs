//! Who is still waiting: the survival function with its band.

use super::age::Road;
use super::panel::{Level, Panel, posts};
use super::scale::{Measure, Scale};
use super::sheet::{Sample, Sheet, nothing};
use super::trace::{Point, Trace};
use super::words::{brackets_hold, in_brackets, percent, range, sentences, share, still, time};
use super::{Ages, Frame, Marks, Svg, Table};
use crate::say;

/// Below this share at a marked time the axis is logarithmic: the post would stand on the ground.
const LOG_BELOW: f64 = 0.02;
/// Least share a logarithmic axis shows.
const LEAST: f64 = 1e-6;

/// What [`waiting`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Waiting<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// How many waits the curve rests on.
    pub waits: u64,
    /// The axis.
    pub ages: Ages,
    /// Share still waiting at an age, 0 to 1. That all wait at 0 need not be said.
    pub curve: &'a [Point],
    /// Whether the curve stays where it is between two points (an empirical curve), instead of running straight.
    pub steps: bool,
    /// Level of the band, e.g. 0.9.
    pub level: f64,
    /// Times to mark.
    pub marks: Marks,
}

/// Draws who is still waiting.
pub fn waiting(input: &Waiting<'_>, frame: &Frame<'_>) -> Svg {
    let input = &Waiting { marks: input.marks.sound(), ..*input };
    let Some((trace, road)) = shares(input.curve, input.steps, &input.ages, &input.marks) else {
        return nothing(input.stream, "no wait has been seen", frame);
    };
    let facts = Facts { input, trace: &trace, road };
    let panel = Panel::open(
        Sheet::open(frame, input.stream, &facts.title()),
        road,
        Level { scale: facts.scale(), caption: "share still waiting".into() },
        posts(&input.marks, &road),
    );
    facts.draw(panel)
}

/// The curve from 1 at age 0, within 0 and 1; one of steps stays where it is as far as one sees.
pub(super) fn shares(curve: &[Point], steps: bool, ages: &Ages, marks: &Marks) -> Option<(Trace, Road)> {
    let within = |s: f64| s.clamp(0.0, 1.0);
    let sound = |p: &Point| Point { value: within(p.value), band: p.band.map(|b| b.map(within)), ..*p };
    let origin = Point::new(0.0, 1.0).between(1.0, 1.0);
    let trace = Trace::of(&std::iter::once(origin).chain(curve.iter().map(sound)).collect::<Vec<_>>(), steps);
    let road = Road::of(ages, marks, Some(&trace)).filter(|_| trace.is_line())?;
    let last = trace.points().last().copied().filter(|_| steps);
    let held = last.map(|p| Point { age: road.sight.min(road.scale.to).max(p.age), ..p });
    let points: Vec<Point> = trace.points().iter().copied().chain(held).collect();
    Some((Trace::of(&points, steps), road))
}

struct Facts<'a> {
    input: &'a Waiting<'a>,
    trace: &'a Trace,
    road: Road,
}

impl Facts<'_> {
    /// The curve at an age; past its end it stays.
    fn at(&self, age: f64) -> Option<Point> {
        self.trace.at(age).or_else(|| self.trace.points().last().copied()).filter(|_| age.is_finite())
    }

    /// The first age at which at most a share is still waiting, as far as is seen.
    fn age_of(&self, share: f64) -> Option<f64> {
        let points = self.trace.points();
        let right = points.iter().position(|p| p.value <= share)?;
        let (a, b) = (points[right.checked_sub(1)?], points[right]);
        let part = if self.input.steps { 1.0 } else { (a.value - share) / (a.value - b.value) };
        Some(a.age + part * (b.age - a.age)).filter(|age| *age <= self.road.sight)
    }

    fn scale(&self) -> Scale {
        let marks = [self.input.marks.advised, self.input.marks.in_force];
        let at_marks =
            marks.into_iter().flatten().filter(|m| *m <= self.road.scale.to).filter_map(|m| self.at(m));
        let least = at_marks.map(|p| p.value).filter(|s| *s > 0.0).fold(1.0, f64::min);
        if least < LOG_BELOW {
            let floor = 10f64.powf((0.5 * least).log10().floor()).max(LEAST);
            return Scale { from: floor, to: 1.0, log: true, measure: Measure::Share };
        }
        Scale { from: 0.0, to: 1.0, log: false, measure: Measure::Share }
    }

    fn title(&self) -> String {
        let Marks { advised, in_force } = self.input.marks;
        let reached = |age: &f64| age.is_finite();
        let first = advised
            .filter(reached)
            .or(self.age_of(0.1))
            .or(in_force.filter(reached))
            .or(self.trace.last_age().filter(|age| *age <= self.road.sight))
            .unwrap_or(self.road.sight);
        let share = self.at(first).map_or(1.0, |p| p.value);
        let known = if first > self.road.sight { " (not seen)" } else { "" };
        let start = format!("After {} {} still waiting{known}", time(first), still(share));
        match in_force {
            None => start,
            Some(now) if now == first => {
                format!("After {}, the time in force, {} still waiting{known}", time(first), still(share))
            }
            Some(now) if now.is_infinite() => format!("{start}; none is ever given up"),
            Some(now) => format!("{start}; the time in force is {}", time(now)),
        }
    }

    fn summary(&self) -> String {
        let Waiting { waits, marks, level, .. } = *self.input;
        let steps =
            [(0.9, "90%"), (0.5, "half"), (0.1, "1 in 10"), (0.01, "1 in 100"), (0.001, "1 in 1,000")];
        let steps =
            steps.map(|(share, name)| self.age_of(share).map(|age| format!("{name} after {}", time(age))));
        let steps: Vec<String> = steps.into_iter().flatten().collect();
        let mark = |age: Option<f64>, name: &str| {
            let Some(age) = age else { return String::new() };
            let Some(p) = self.at(age) else { return format!("The {name} is {}", time(age)) };
            let band = in_brackets(p.band, share);
            let unseen = if age > self.road.sight { ", which is not seen" } else { "" };
            format!("At the {name} of {}, {}{band} still wait{unseen}", time(age), share(p.value))
        };
        sentences([
            format!(
                "Share still waiting against time waited, {} {}",
                say::count(waits as f64),
                if waits == 1 { "wait" } else { "waits" }
            ),
            match steps.is_empty() {
                true => String::new(),
                false => format!("Still waiting: {}", steps.join(", ")),
            },
            mark(marks.advised, "advised time"),
            mark(marks.in_force, "time in force"),
            brackets_hold(self.trace.has_band(), level, "band"),
            self.road.past_sight(self.trace),
        ])
    }

    fn draw(&self, mut panel: Panel<'_>) -> Svg {
        panel.band(self.trace);
        panel.posts();
        panel.curve(self.trace);
        panel.stations(self.trace);
        let level = percent(self.input.level);
        let mut key = vec![(Sample::Line, "still waiting".into())];
        if self.trace.has_band() {
            key.push((Sample::Band, format!("{level} band")));
        }
        if self.road.assumes(self.trace) {
            key.push((Sample::LineOpen, "assumed".into()));
        }
        let rows = panel.told().into_iter().filter_map(|age| {
            let p = self.at(age)?;
            let band = p.band.map_or(String::new(), |b| range(b, share));
            Some(vec![time(age), share(p.value), band, panel.remark(age)])
        });
        let table = Table { columns: vec!["after", "still waiting", "band", "remark"], rows: rows.collect() };
        panel.close(key, &self.summary(), table)
    }
}
