//! A stream as a lane on a road of time: as wide as the share still waiting, narrowing as they leave. Lanes of several
//! streams lie on one axis, so that their posts can be compared by eye.

use plotters_backend::text_anchor::HPos;

use super::Marks;
use super::area::{Paper, at};
use super::element::around;
use super::ink;
use super::pen::{escaped, id, px};
use super::scale::{Measure, Scale, Tick};
use super::sheet::{advised_shape, arrow, in_force_shape};
use super::trace::{Point, Trace};
use super::words::{percent, still, time};

/// Between an end of the picture and the road, px.
const PAD: f64 = 10.0;
/// Above and below the widest lane, px.
const VERGE: f64 = 7.0;

/// What [`lane`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Lane<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// First and last age of the road, s; logarithmic.
    pub road: [f64; 2],
    /// Share still waiting at an age, as far as is seen.
    pub curve: &'a [[f64; 2]],
    /// Times to mark: the advised one by a full diamond above, the one in force by an open square below.
    pub marks: Marks,
    /// A place for a ring that a reader moves: shown at an age, or not yet; without a place there is none.
    pub ring: Option<Option<f64>>,
    /// Starts every id.
    pub prefix: &'a str,
    /// Width and height, px.
    pub size: (u32, u32),
}

/// A road that holds these ages, s, with a little air; one from 1 ms to 1 min where there are none.
pub fn road(ages: impl IntoIterator<Item = f64>) -> [f64; 2] {
    let sound = |age: &f64| (1e-9..1e12).contains(age);
    let (low, high) =
        ages.into_iter().filter(sound).fold((f64::INFINITY, 0.0f64), |(l, h), a| (l.min(a), h.max(a)));
    if high == 0.0 {
        return [1e-3, 60.0];
    }
    [low / 1.3, high * 1.6]
}

fn scale([from, to]: [f64; 2]) -> Scale {
    Scale { from, to: to.max(from * 1.01), log: true, measure: Measure::Time }
}

/// Draws a lane. `<title>` says it in words.
pub fn lane(input: &Lane<'_>) -> String {
    let marks = input.marks.sound();
    let (width, height) = (f64::from(input.size.0.max(80)), f64::from(input.size.1.max(24)));
    let scale = scale(input.road);
    let middle = height / 2.0;
    let paper = Paper::new(input.prefix, (width, height));
    // A share counts up and down from the middle.
    let shares = Scale::linear(-1.0, 1.0);
    let lane = paper.plot((PAD, VERGE), (width - PAD, height - VERGE), scale, shares);
    let x = |age: f64| lane.at(age, 0.0).0;
    let onward = |age: f64| [(age, 0.0), (scale.to, 0.0)];
    let origin = Point::new(0.0, 1.0);
    let points: Vec<Point> = std::iter::once(origin)
        .chain(input.curve.iter().map(|p| Point::new(p[0], p[1].clamp(0.0, 1.0))))
        .collect();
    let trace = Trace::of(&points, false);
    lane.put(ink::GRID.path(onward(scale.from)));
    let last = trace.points().last().copied().filter(|_| !input.curve.is_empty());
    if let Some(last) = last {
        let seen = last.age.min(scale.to);
        let inner = trace.cut(scale.from, seen);
        let inner = inner.thinned(|age| (scale.part(age) * (width - 2.0 * PAD) / 2.0) as i64);
        let (upper, lower) = (inner.line(|p| p.value), inner.line(|p| -p.value));
        lane.put(ink::LANE.polygon([upper, lower.into_iter().rev().collect()].concat()));
        if last.value > 0.0 && last.age < scale.to {
            // Past the edge of sight: how many are left is known, when they leave is not.
            lane.put(ink::SIGHT.path([(last.age, last.value), (last.age, -last.value)]));
            lane.put(ink::PATH_OPEN.path(onward(last.age)));
        }
    } else {
        lane.put(ink::PATH_OPEN.path(onward(scale.from)));
    }
    lane.put(ink::WAITER.circle((scale.from, 0.0), 4.0));
    if let Some(age) = marks.in_force {
        let foot = (x(age), height - 5.0);
        paper.put(ink::IN_FORCE.path([(foot.0, middle), (foot.0, height - 4.0)]));
        paper.put(at(foot) + in_force_shape(4.0));
    }
    if let Some(age) = marks.advised {
        let head = (x(age), 6.0);
        paper.put(ink::ADVISED.path([(head.0, middle), head]));
        paper.put(at(head) + advised_shape(6.0));
    }
    let mut group = String::new();
    if let Some(asked) = input.ring {
        let ring = Paper::new(input.prefix, (width, height));
        let shown = if asked.is_some() { "" } else { " visibility=\"hidden\"" };
        ring.put(ink::RIVAL_LEAD.path([(0.0, 2.0), (0.0, height - 2.0)]));
        ring.put(ink::RIVAL.circle((0.0, middle), 6.0));
        group = format!(
            "<g class=\"asked\" data-from=\"{}\" data-to=\"{}\" data-left=\"{}\" data-right=\"{}\" \
             transform=\"translate({},0)\"{shown}>{}</g>",
            scale.from,
            scale.to,
            px(PAD),
            px(width - PAD),
            px(x(asked.unwrap_or(scale.from))),
            ring.into_body()
        );
    }
    let share_at = |age: f64| trace.at(age).map(|p| format!(" with {} still waiting", percent(p.value)));
    let said = |name: &str, age: f64| {
        let share = Some(age).filter(|a| a.is_finite() && last.is_some()).and_then(share_at);
        format!("{name} {}{}", time(age), share.unwrap_or_default())
    };
    let words: Vec<String> = [("advised", marks.advised), ("in force", marks.in_force)]
        .into_iter()
        .filter_map(|(name, age)| Some(said(name, age?)))
        .collect();
    let words = match (words.is_empty(), last) {
        (false, _) => words.join("; "),
        (true, Some(last)) => format!("{} still waiting after {}", still(last.value), time(last.age)),
        (true, None) => "no wait has been seen to end".into(),
    };
    let (id, title) = (id(input.prefix, "lane"), escaped(&format!("{}: {words}", input.stream)));
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" class=\"lane\" role=\"img\" aria-labelledby=\"{id}\" \
         viewBox=\"0 0 {} {}\"><title id=\"{id}\">{title}</title>{}{group}</svg>",
        px(width),
        px(height),
        paper.into_body()
    )
}

/// The axis of a road, for those who see it: every lane says its times in words.
pub fn milestones(road: [f64; 2], width: u32, font: f64) -> String {
    let width = f64::from(width.max(80));
    let scale = scale(road);
    let x = |part: f64| PAD + part * (width - 2.0 * PAD);
    let clear = |ticks: &[Tick]| {
        let mut end = f64::NEG_INFINITY;
        ticks.iter().all(|tick| {
            let half = tick.label.as_ref().map_or(0.0, |label| 0.3 * font * label.chars().count() as f64);
            let fits = x(tick.part) - half >= end;
            end = x(tick.part) + half + font;
            fits
        })
    };
    let height = 2.0 * font;
    let paper = Paper::new("", (width, height + 5.0));
    let path = paper.plot((PAD, 0.0), (width - PAD, height), scale, Scale::linear(0.0, 1.0));
    for tick in scale.ticks(24, clear) {
        let mut long = 3.0;
        if let Some(label) = tick.label {
            long = 6.0;
            let half = 0.3 * font * label.chars().count() as f64;
            let centre = path.at(tick.value, 0.0).0;
            let within = centre.clamp(half.min(width / 2.0), (width - half).max(width / 2.0));
            paper.put(ink::SOFT.words((within, font), HPos::Center, font, label));
        }
        path.put(at((tick.value, 0.0)) + ink::TICK.path(around([(0.0, -long), (0.0, 0.0)])));
    }
    let base = height - 0.5;
    paper.put(ink::PATH.path([(PAD, base), (width - PAD, base)]));
    paper.put(at((width - 1.0, base)) + arrow());
    paper.put(ink::WAITER.circle((PAD, base), 4.5));
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" aria-hidden=\"true\" viewBox=\"0 0 {} {}\" \
         font-family=\"system-ui, sans-serif\">{}</svg>",
        px(width),
        px(height + 5.0),
        paper.into_body()
    )
}
