//! Writes elements. Coordinates are rounded to a tenth of a pixel, text is escaped, and nothing else gets in.

use std::fmt::Write;

use super::Frame;
use super::ink::{self, Ink};
use super::text;

/// A place, px from the left and from the top.
pub(super) type At = (f64, f64);

/// Which part of a text stands at its place.
#[derive(Clone, Copy, PartialEq)]
pub(super) enum Anchor {
    /// Its beginning.
    Start,
    /// Its middle.
    Middle,
    /// Its end.
    End,
}

/// Collects the body of a picture.
#[derive(Default)]
pub(super) struct Pen {
    body: String,
}

impl Pen {
    /// A straight line.
    pub(super) fn line(&mut self, ink: &Ink, from: At, to: At) {
        let (x1, y1, x2, y2) = (px(from.0), px(from.1), px(to.0), px(to.1));
        let _ =
            write!(self.body, "<line{} x1=\"{x1}\" y1=\"{y1}\" x2=\"{x2}\" y2=\"{y2}\"/>", ink.attributes());
    }

    /// A line through places.
    pub(super) fn polyline(&mut self, ink: &Ink, places: &[At]) {
        self.through("polyline", ink, places);
    }

    /// A closed shape.
    pub(super) fn polygon(&mut self, ink: &Ink, places: &[At]) {
        self.through("polygon", ink, places);
    }

    fn through(&mut self, element: &str, ink: &Ink, places: &[At]) {
        if places.len() < 2 {
            return;
        }
        let points: Vec<String> = places.iter().map(|p| format!("{},{}", px(p.0), px(p.1))).collect();
        let _ = write!(self.body, "<{element}{} points=\"{}\"/>", ink.attributes(), points.join(" "));
    }

    /// A rectangle from one corner to the opposite one.
    pub(super) fn rect(&mut self, ink: &Ink, from: At, to: At) {
        let attributes = ink.attributes();
        self.rectangle(&attributes, from, to);
    }

    /// A rectangle filled with a pattern, by the pattern's id.
    pub(super) fn hatched(&mut self, id: &str, from: At, to: At) {
        self.rectangle(&format!(" fill=\"url(#{id})\" stroke=\"none\""), from, to);
    }

    fn rectangle(&mut self, attributes: &str, from: At, to: At) {
        let (x, y) = (px(from.0.min(to.0)), px(from.1.min(to.1)));
        let (width, height) = (px((to.0 - from.0).abs()), px((to.1 - from.1).abs()));
        let _ = write!(
            self.body,
            "<rect{attributes} x=\"{x}\" y=\"{y}\" width=\"{width}\" height=\"{height}\"/>"
        );
    }

    /// A circle.
    pub(super) fn circle(&mut self, ink: &Ink, at: At, radius: f64) {
        let (x, y, r) = (px(at.0), px(at.1), px(radius));
        let _ = write!(self.body, "<circle{} cx=\"{x}\" cy=\"{y}\" r=\"{r}\"/>", ink.attributes());
    }

    /// One line of text on its baseline.
    pub(super) fn text(&mut self, ink: &Ink, at: At, anchor: Anchor, size: f64, words: &str) {
        self.words(ink, at, anchor, size, "", words);
    }

    /// The same in bold.
    pub(super) fn bold(&mut self, ink: &Ink, at: At, anchor: Anchor, size: f64, words: &str) {
        self.words(ink, at, anchor, size, " font-weight=\"700\"", words);
    }

    fn words(&mut self, ink: &Ink, at: At, anchor: Anchor, size: f64, weight: &str, words: &str) {
        let (x, y, size) = (px(at.0), px(at.1), px(size));
        let anchor = match anchor {
            Anchor::Start => "start",
            Anchor::Middle => "middle",
            Anchor::End => "end",
        };
        let (attributes, words) = (ink.attributes(), escaped(words));
        let _ = write!(
            self.body,
            "<text{attributes} x=\"{x}\" y=\"{y}\" font-size=\"{size}\" text-anchor=\"{anchor}\"{weight}>{words}</text>"
        );
    }

    /// Slanted lines for grounds, as a pattern under an id.
    pub(super) fn pattern(&mut self, id: &str, ink: &Ink, step: f64, rising: bool) {
        let (step, slant) = (px(step), if rising { 45 } else { 135 });
        let _ = write!(
            self.body,
            "<defs><pattern id=\"{id}\" width=\"{step}\" height=\"{step}\" patternUnits=\"userSpaceOnUse\" \
             patternTransform=\"rotate({slant})\"><line{} x1=\"0\" y1=\"0\" x2=\"0\" y2=\"{step}\"/></pattern></defs>",
            ink.attributes()
        );
    }

    /// What was drawn, without an element round it.
    pub(super) fn into_body(self) -> String {
        self.body
    }

    /// The whole element: paper, title and description before what was drawn.
    pub(super) fn finish(self, frame: &Frame<'_>, size: At, title: &str, summary: &str) -> String {
        let (width, height) = (px(size.0), px(size.1.ceil()));
        let (prefix, title, summary) = (id(frame.prefix, ""), escaped(title), escaped(summary));
        let mut paper = Pen::default();
        paper.rect(&ink::PAPER, (0.0, 0.0), (size.0, size.1.ceil()));
        let style = if frame.styled { format!("<style>{}</style>", ink::style()) } else { String::new() };
        format!(
            "<svg xmlns=\"http://www.w3.org/2000/svg\" class=\"ow\" role=\"img\" \
             aria-labelledby=\"{prefix}title {prefix}desc\" width=\"{width}\" height=\"{height}\" \
             viewBox=\"0 0 {width} {height}\" font-family=\"system-ui, sans-serif\">\
             <title id=\"{prefix}title\">{title}</title><desc id=\"{prefix}desc\">{summary}</desc>{style}{}{}</svg>\n",
            paper.body, self.body
        )
    }
}

/// An id from a caller's prefix; never starts with a digit.
pub(super) fn id(prefix: &str, name: &str) -> String {
    let mut id: String = prefix
        .chars()
        .map(|c| if c.is_ascii_alphanumeric() || c == '_' || c == '-' { c } else { '-' })
        .collect();
    if !id.starts_with(|c: char| c.is_ascii_alphabetic()) {
        id.insert_str(0, "ow-");
    }
    format!("{id}-{name}")
}

/// Text for XML, quotes included.
pub(super) fn escaped(words: &str) -> String {
    let mut out = String::with_capacity(words.len());
    for c in text::plain(words).chars() {
        match c {
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '&' => out.push_str("&amp;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&#39;"),
            c => out.push(c),
        }
    }
    out
}

/// A length in px to a tenth; 0 for what is not finite, so that no reader meets a `NaN`.
pub(super) fn px(value: f64) -> String {
    let tenths = if value.is_finite() { (value * 10.0).round() as i64 } else { 0 };
    let sign = if tenths < 0 { "-" } else { "" };
    match (tenths.unsigned_abs() / 10, tenths.unsigned_abs() % 10) {
        (whole, 0) => format!("{sign}{whole}"),
        (whole, part) => format!("{sign}{whole}.{part}"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn lengths_ids_and_text() {
        assert_eq!([1.04, -0.04, -0.06, 12.0, f64::NAN].map(px), ["1", "0", "-0.1", "12", "0"]);
        assert_eq!(id("7 of <b>", "title"), "ow-7-of--b--title");
        assert_eq!(escaped("<a href=\"x\">&'"), "&lt;a href=&quot;x&quot;&gt;&amp;&#39;");
    }
}
