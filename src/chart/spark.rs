//! Who is still waiting, as small as a word, for lists. Takes the colour of the text round it.

use std::fmt::Write;

use super::age::Road;
use super::pen::{escaped, id, px};
use super::scale::Scale;
use super::trace::Point;
use super::waiting::shares;
use super::words::{percent, still, time};
use super::{Ages, Marks};

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
    let pad = 4.0;
    let mut body = String::new();
    let mut words = String::new();
    if let Some((trace, Road { scale, sight })) = shares(input.curve, input.steps, &input.ages, &input.marks)
    {
        let place = |age: f64, share: f64| {
            let y = Scale { from: 0.0, to: 1.0, log: false }.part(share);
            (pad + scale.part(age) * (width - 2.0 * pad), height - pad - y * (height - 2.0 * pad))
        };
        let seen = sight.min(scale.to);
        for (from, to, dashes) in
            [(scale.from, seen, ""), (seen.max(scale.from), scale.to, " stroke-dasharray=\"3 2\"")]
        {
            let part = trace.cut(from, to).thinned(|age| (scale.part(age) * width) as i64);
            let points: Vec<String> =
                part.line(|p| p.value, place).iter().map(|p| format!("{},{}", px(p.0), px(p.1))).collect();
            if points.len() > 1 {
                let _ = write!(body, "<polyline{dashes} points=\"{}\"/>", points.join(" "));
            }
        }
        let at = |age: Option<f64>| {
            let age = age.filter(|a| *a <= scale.to)?;
            let share = trace.at(age).or(trace.points().last().copied())?.value;
            Some((place(age, share), share))
        };
        if let Some(((x, y), _)) = at(input.marks.in_force) {
            let (x, y) = (px(x - 2.5), px(y - 2.5));
            let _ = write!(body, "<rect x=\"{x}\" y=\"{y}\" width=\"5\" height=\"5\"/>");
        }
        if let Some(((x, y), share)) = at(input.marks.advised) {
            let [top, right, bottom, left] = [(x, y - 3.5), (x + 3.5, y), (x, y + 3.5), (x - 3.5, y)]
                .map(|p| format!("{},{}", px(p.0), px(p.1)));
            let _ = write!(body, "<polygon fill=\"currentColor\" points=\"{top} {right} {bottom} {left}\"/>");
            let age = input.marks.advised.unwrap_or(0.0);
            words = format!("after the advised {} {} still waiting", time(age), still(share));
        } else if let Some(p) = trace.at(seen).or(trace.points().last().copied()) {
            words = format!("{} still waiting after {}", percent(p.value), time(p.age));
        }
    } else {
        let (left, right, y) = (px(pad), px(width - pad), px(height / 2.0));
        let _ = write!(
            body,
            "<line x1=\"{left}\" y1=\"{y}\" x2=\"{right}\" y2=\"{y}\" stroke-dasharray=\"3 2\"/>"
        );
        words.push_str("no wait has been seen");
    }
    let (id, title) = (id(input.prefix, "spark"), escaped(&format!("{}: {words}", input.stream)));
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" role=\"img\" aria-labelledby=\"{id}\" width=\"{w}\" height=\"{h}\" \
         viewBox=\"0 0 {w} {h}\" fill=\"none\" stroke=\"currentColor\" stroke-width=\"1.5\">\
         <title id=\"{id}\">{title}</title>{body}</svg>",
        w = px(width),
        h = px(height),
    )
}
