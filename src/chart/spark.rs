//! Who is still waiting, as small as a word, for lists. Takes the colour of the text round it.

use super::age::Road;
use super::area::{Paper, at};
use super::ink::Ink;
use super::pen::{escaped, id, px};
use super::scale::Scale;
use super::sheet::{diamond, square};
use super::trace::Point;
use super::waiting::shares;
use super::words::{percent, still, time};
use super::{Ages, Marks};

/// Round the line, px.
const PAD: f64 = 4.0;
const FIRM: Ink = Ink::Plain("");
const OPEN: Ink = Ink::Plain(" stroke-dasharray=\"3 2\"");
const FULL: Ink = Ink::Plain(" fill=\"currentColor\"");

/// What [`spark`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Spark<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// The axis.
    pub ages: Ages,
    /// Share still waiting at an age.
    pub curve: &'a [Point],
    /// Whether the curve stays where it is between two points.
    pub steps: bool,
    /// Times to mark: the advised one by a full diamond, the one in force by an open square.
    pub marks: Marks,
    /// Starts every id.
    pub prefix: &'a str,
    /// Width and height, px; brought into 40 to 400 and 12 to 100.
    pub size: (u32, u32),
}

/// Draws a line without axes: firm where seen, dashed beyond. `<title>` says it in words.
pub fn spark(input: &Spark<'_>) -> String {
    let input = &Spark { marks: input.marks.sound(), ..*input };
    let (width, height) = (f64::from(input.size.0.clamp(40, 400)), f64::from(input.size.1.clamp(12, 100)));
    let paper = Paper::new(input.prefix, (width, height));
    let mut words = String::new();
    if let Some((trace, Road { scale, sight })) = shares(input.curve, input.steps, &input.ages, &input.marks)
    {
        let inner = (width - PAD, height - PAD);
        let plot = paper.plot((PAD, PAD), inner, scale, Scale::linear(0.0, 1.0));
        let seen = sight.min(scale.to);
        for (from, to, ink) in [(scale.from, seen, FIRM), (seen.max(scale.from), scale.to, OPEN)] {
            let part = trace.cut(from, to).thinned(|age| (scale.part(age) * width) as i64);
            plot.put(ink.path(part.line(|p| p.value)));
        }
        let on_curve = |age: Option<f64>| {
            let age = age.filter(|a| *a <= scale.to)?;
            Some((age, trace.at(age).or(trace.points().last().copied())?.value))
        };
        if let Some(place) = on_curve(input.marks.in_force) {
            plot.put(at(place) + square(FIRM, 2.5));
        }
        if let Some((age, share)) = on_curve(input.marks.advised) {
            plot.put(at((age, share)) + diamond(FULL, 3.5));
            words = format!("after the advised {} {} still waiting", time(age), still(share));
        } else if let Some(p) = trace.at(seen).or(trace.points().last().copied()) {
            words = format!("{} still waiting after {}", percent(p.value), time(p.age));
        }
    } else {
        paper.put(OPEN.path([(PAD, height / 2.0), (width - PAD, height / 2.0)]));
        words.push_str("no wait has been seen");
    }
    let (id, title) = (id(input.prefix, "spark"), escaped(&format!("{}: {words}", input.stream)));
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" role=\"img\" aria-labelledby=\"{id}\" width=\"{w}\" height=\"{h}\" \
         viewBox=\"0 0 {w} {h}\" fill=\"none\" stroke=\"currentColor\" stroke-width=\"1.5\">\
         <title id=\"{id}\">{title}</title>{body}</svg>",
        w = px(width),
        h = px(height),
        body = paper.into_body(),
    )
}
