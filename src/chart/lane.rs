//! A stream as a lane on a road of time: as wide as the share still waiting, narrowing as they leave. Lanes of several
//! streams lie on one axis, so that their posts can be compared by eye.

use super::Marks;
use super::ink;
use super::pen::{Anchor, Pen, escaped, id, px};
use super::scale::{Measure, Scale, Tick};
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
    Scale { from, to: to.max(from * 1.01), log: true }
}

/// Draws a lane. `<title>` says it in words.
pub fn lane(input: &Lane<'_>) -> String {
    let marks = input.marks.sound();
    let (width, height) = (f64::from(input.size.0.max(80)), f64::from(input.size.1.max(24)));
    let scale = scale(input.road);
    let x = |age: f64| PAD + scale.part(age) * (width - 2.0 * PAD);
    let (left, right, middle) = (PAD, width - PAD, height / 2.0);
    let half = |share: f64| share * (middle - VERGE);
    let origin = Point::new(0.0, 1.0);
    let points: Vec<Point> = std::iter::once(origin)
        .chain(input.curve.iter().map(|p| Point::new(p[0], p[1].clamp(0.0, 1.0))))
        .collect();
    let trace = Trace::of(&points, false);
    let mut pen = Pen::default();
    pen.line(&ink::GRID, (left, middle), (right, middle));
    let last = trace.points().last().copied().filter(|_| !input.curve.is_empty());
    if let Some(last) = last {
        let seen = last.age.min(scale.to);
        let inner = trace.cut(scale.from, seen).thinned(|age| (x(age) / 2.0) as i64);
        let upper: Vec<_> = inner.points().iter().map(|p| (x(p.age), middle - half(p.value))).collect();
        let lower: Vec<_> = inner.points().iter().map(|p| (x(p.age), middle + half(p.value))).collect();
        let outline: Vec<_> = upper.iter().chain(lower.iter().rev()).copied().collect();
        pen.polygon(&ink::LANE, &outline);
        if last.value > 0.0 && last.age < scale.to {
            // Past the edge of sight: how many are left is known, when they leave is not.
            pen.line(
                &ink::SIGHT,
                (x(last.age), middle - half(last.value)),
                (x(last.age), middle + half(last.value)),
            );
            pen.line(&ink::PATH_OPEN, (x(last.age), middle), (right, middle));
        }
    } else {
        pen.line(&ink::PATH_OPEN, (left, middle), (right, middle));
    }
    pen.circle(&ink::WAITER, (left, middle), 4.0);
    if let Some(age) = marks.in_force {
        let at = x(age);
        pen.line(&ink::IN_FORCE, (at, middle), (at, height - 4.0));
        pen.rect(&ink::IN_FORCE_SHAPE, (at - 4.0, height - 9.0), (at + 4.0, height - 1.0));
    }
    if let Some(age) = marks.advised {
        let at = x(age);
        pen.line(&ink::ADVISED, (at, middle), (at, 6.0));
        pen.polygon(&ink::ADVISED_SHAPE, &[(at, 0.0), (at + 6.0, 6.0), (at, 12.0), (at - 6.0, 6.0)]);
    }
    let mut body = pen.into_body();
    if let Some(asked) = input.ring {
        let mut pen = Pen::default();
        let shown = if asked.is_some() { "" } else { " visibility=\"hidden\"" };
        pen.line(&ink::RIVAL_LEAD, (0.0, 2.0), (0.0, height - 2.0));
        pen.circle(&ink::RIVAL, (0.0, middle), 6.0);
        body += &format!(
            "<g class=\"asked\" data-from=\"{}\" data-to=\"{}\" data-left=\"{}\" data-right=\"{}\" \
             transform=\"translate({},0)\"{shown}>{}</g>",
            scale.from,
            scale.to,
            px(left),
            px(right),
            px(x(asked.unwrap_or(scale.from))),
            pen.into_body()
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
         viewBox=\"0 0 {} {}\"><title id=\"{id}\">{title}</title>{body}</svg>",
        px(width),
        px(height)
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
    let mut pen = Pen::default();
    for tick in scale.ticks(Measure::Time, 24, clear) {
        let at = x(tick.part);
        if let Some(label) = tick.label {
            let half = 0.3 * font * label.chars().count() as f64;
            let within = at.clamp(half.min(width / 2.0), (width - half).max(width / 2.0));
            pen.text(&ink::SOFT, (within, font), Anchor::Middle, font, &label);
            pen.line(&ink::TICK, (at, height - 6.0), (at, height));
        } else {
            pen.line(&ink::TICK, (at, height - 3.0), (at, height));
        }
    }
    let base = height - 0.5;
    pen.line(&ink::PATH, (PAD, base), (width - PAD, base));
    let tip = width - 1.0;
    pen.polygon(&ink::WAITER, &[(tip, base), (tip - 9.0, base - 4.5), (tip - 9.0, base + 4.5)]);
    pen.circle(&ink::WAITER, (PAD, base), 4.5);
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" aria-hidden=\"true\" viewBox=\"0 0 {} {}\" \
         font-family=\"system-ui, sans-serif\">{}</svg>",
        px(width),
        px(height + 5.0),
        pen.into_body()
    )
}
