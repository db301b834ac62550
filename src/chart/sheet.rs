//! The sheet every picture is drawn on: margins and sizes by its width, the heading, the key, the empty picture.

use plotters::coord::ranged1d::Ranged;
use plotters::element::{Polygon, Rectangle};
use plotters_backend::BackendCoord;
use plotters_backend::text_anchor::HPos;

use super::area::{Area, At, Paper, at};
use super::element::{Inked, around};
use super::ink::{self, Ink};
use super::pen::{escaped, id, px, tenths};
use super::text;
use super::{Frame, Svg, Table};

/// Between the sheet's edge and anything on it, px.
pub(super) const MARGIN: f64 = 12.0;

/// No sheet is longer, px.
const TALLEST: f64 = 1e8;

/// A sheet, filled from the top; `y` is how far.
pub(super) struct Sheet<'a> {
    pub(super) paper: Paper,
    frame: Frame<'a>,
    pub(super) width: f64,
    /// Size of ordinary text, px.
    pub(super) font: f64,
    pub(super) y: f64,
    stream: String,
    title: String,
}

/// What stands in a key before its words.
pub(super) enum Sample {
    Line,
    LineOpen,
    Band,
    Good,
    Haze,
    Number(usize),
    Square(f64),
    Worst(f64),
    OursBar,
    InForceBar,
    RivalBar,
    Span,
}

impl<'a> Sheet<'a> {
    /// A sheet with its heading. `stream` may be empty.
    pub(super) fn open(frame: &Frame<'a>, stream: &str, title: &str) -> Sheet<'a> {
        let width = f64::from(frame.width.clamp(Frame::NARROWEST, Frame::WIDEST));
        let share = (width - 320.0) / 1280.0;
        let font = (2.0 * (11.0 + 4.0 * share)).round() / 2.0;
        let stream = text::plain(stream);
        let mut sheet = Sheet {
            paper: Paper::new(frame.prefix, (width, TALLEST)),
            frame: *frame,
            width,
            font,
            y: MARGIN,
            stream: stream.clone(),
            title: text::plain(title),
        };
        if !stream.is_empty() {
            let name = text::shorten(&stream, font * 1.1, sheet.right() - MARGIN);
            sheet.y += 1.2 * font;
            sheet.paper.put(ink::SOFT.bold((MARGIN, sheet.y), HPos::Left, font, name));
            sheet.y += 0.35 * font;
        }
        let size = 1.3 * font;
        for line in text::wrap(title, size, sheet.right() - MARGIN) {
            sheet.y += 1.25 * size;
            sheet.paper.put(ink::TEXT.bold((MARGIN, sheet.y), HPos::Left, size, line));
        }
        sheet.y += 0.6 * font;
        sheet
    }

    /// Right end of what may be drawn.
    pub(super) fn right(&self) -> f64 {
        self.width - MARGIN
    }

    /// One line of remark, from the left or to the right end.
    pub(super) fn remark(&mut self, side: HPos, words: &str) {
        let at = if matches!(side, HPos::Right) { self.right() } else { MARGIN };
        let words = text::shorten(words, self.font, self.right() - MARGIN);
        self.y += 1.3 * self.font;
        self.paper.put(ink::SOFT.words((at, self.y), side, self.font, words));
    }

    /// A paragraph of remarks.
    pub(super) fn paragraph(&mut self, words: &str) {
        for line in text::wrap(words, self.font, self.right() - MARGIN) {
            self.remark(HPos::Left, &line);
        }
    }

    /// The key: samples with their words, as many a line as fit.
    pub(super) fn key(&mut self, entries: &[(Sample, String)]) {
        if entries.is_empty() {
            return;
        }
        let (font, sample) = (self.font, 2.2 * self.font);
        let mut x = MARGIN;
        self.y += 1.9 * font;
        for (what, words) in entries {
            let lines = text::wrap(&text::plain(words), font, self.right() - MARGIN - sample);
            let width = sample + lines.iter().map(|l| text::width(l, font)).fold(0.0, f64::max);
            if x > MARGIN && x + width > self.right() {
                x = MARGIN;
                self.y += 1.5 * font;
            }
            self.sample(what, (x + 0.8 * font, self.y - 0.35 * font));
            for (i, line) in lines.iter().enumerate() {
                self.y += if i > 0 { 1.3 * font } else { 0.0 };
                self.paper.put(ink::TEXT.words((x + sample, self.y), HPos::Left, font, line.as_str()));
            }
            // Whatever needed more than one line has its lines to itself.
            x = if lines.len() > 1 { self.right() } else { x + width + 1.2 * font };
        }
    }

    fn sample(&self, what: &Sample, place: At) {
        let (w, h) = (0.8 * self.font, 0.4 * self.font);
        let (left, right) = ((place.0 - w, place.1), (place.0 + w, place.1));
        let (low, high) = ((place.0 - w, place.1 + h), (place.0 + w, place.1 - h));
        let paper = &self.paper;
        match *what {
            Sample::Line => paper.put(ink::LINE.path([left, right])),
            Sample::LineOpen => paper.put(ink::LINE_OPEN.path([left, right])),
            Sample::Band => {
                paper.put(ink::BAND.rect([low, high]));
                paper.put(ink::EDGE.path([(low.0, high.1), high]));
                paper.put(ink::EDGE.path([low, (high.0, low.1)]));
            }
            Sample::Good => {
                paper.put(ink::GOOD.rect([low, high]));
                paper.put(Ink::Hatch("good").rect([low, high]));
                paper.put(ink::GOOD_EDGE.path([low, (low.0, high.1)]));
                paper.put(ink::GOOD_EDGE.path([high, (high.0, low.1)]));
            }
            Sample::Haze => {
                paper.put(Ink::Hatch("haze").rect([low, high]));
                paper.put(ink::SIGHT.path([low, (low.0, high.1)]));
            }
            Sample::Number(n) => self.ring(place, n),
            Sample::Square(side) => paper.put(at(place) + square(ink::CELL, side / 2.0)),
            Sample::Worst(side) => worst(paper, place, side),
            Sample::OursBar => paper.put(ink::GOOD_BAR.rect([low, high])),
            Sample::InForceBar => paper.put(ink::IN_FORCE_BAR.rect([low, high])),
            Sample::RivalBar => paper.put(ink::RIVAL_BAR.rect([low, high])),
            Sample::Span => span(paper, [left, right], h),
        }
    }

    /// Radius of a numbered ring.
    pub(super) fn ring_radius(&self) -> f64 {
        0.72 * self.font
    }

    /// A ring with its number.
    pub(super) fn ring(&self, place: At, number: usize) {
        let size = if number < 10 { 0.85 } else { 0.68 } * self.font;
        let below = (0, tenths(0.35 * size));
        let words = ink::RIVAL_TEXT.bold(below, HPos::Center, size, number.to_string());
        self.paper.put(at(place) + ink::RIVAL.circle((0, 0), self.ring_radius()) + words);
    }

    /// Closes the sheet.
    pub(super) fn finish(self, summary: &str, table: Table) -> Svg {
        let named = match self.stream.is_empty() {
            true => self.title.clone(),
            false => format!("{}: {}", self.stream, self.title),
        };
        let summary = text::plain(summary);
        let (width, height) = (self.width, (self.y + MARGIN).ceil());
        let ground = Paper::new("", (width, height));
        ground.put(ink::PAPER.rect([(0.0, 0.0), (width, height)]));
        let (w, h) = (px(width), px(height));
        let (title, desc) = (id(self.frame.prefix, "title"), id(self.frame.prefix, "desc"));
        let style =
            if self.frame.styled { format!("<style>{}</style>", ink::style()) } else { String::new() };
        let markup = format!(
            "<svg xmlns=\"http://www.w3.org/2000/svg\" class=\"ow\" role=\"img\" \
             aria-labelledby=\"{title} {desc}\" width=\"{w}\" height=\"{h}\" viewBox=\"0 0 {w} {h}\" \
             font-family=\"system-ui, sans-serif\">\
             <title id=\"{title}\">{}</title><desc id=\"{desc}\">{}</desc>{style}{}{}</svg>\n",
            escaped(&named),
            escaped(&summary),
            ground.into_body(),
            self.paper.into_body()
        );
        Svg { markup, title: self.title, summary, table }
    }
}

/// The advised time: a full diamond round a place.
pub(super) fn advised_shape(r: f64) -> Inked<Polygon<BackendCoord>> {
    diamond(ink::ADVISED_SHAPE, r)
}

/// The time in force: an open square round a place.
pub(super) fn in_force_shape(r: f64) -> Inked<Rectangle<BackendCoord>> {
    square(ink::IN_FORCE_SHAPE, r)
}

/// A diamond round a place, `r` from its middle to each corner.
pub(super) fn diamond(ink: Ink, r: f64) -> Inked<Polygon<BackendCoord>> {
    ink.polygon(around([(0.0, -r), (r, 0.0), (0.0, r), (-r, 0.0)]))
}

/// A square round a place, `r` from its middle to each side.
pub(super) fn square(ink: Ink, r: f64) -> Inked<Rectangle<BackendCoord>> {
    ink.rect(around([(-r, -r), (r, r)]))
}

/// The worst hour: a full square in a ring.
pub(super) fn worst<X: Ranged, Y: Ranged>(area: &Area<X, Y>, place: (X::ValueType, Y::ValueType), side: f64) {
    let (full, ring) = (side / 2.0, side / 2.0 + 1.8);
    area.put(at(place) + square(ink::IN_FORCE_FULL, full) + square(ink::IN_FORCE_RING, ring));
}

/// An interval with its ends.
pub(super) fn span<X: Ranged<ValueType = f64>, Y: Ranged<ValueType = f64>>(
    area: &Area<X, Y>,
    ends: [At; 2],
    cap: f64,
) {
    area.put(ink::SPAN.path(ends));
    for end in ends {
        area.put(at(end) + ink::SPAN.path(around([(0.0, -cap), (0.0, cap)])));
    }
}

/// The picture of nothing: a path that nobody walked, and why.
///
/// `because`: the rest of the sentence that begins "Nothing to draw:", e.g. `"no wait has ended yet"`.
pub fn nothing(stream: &str, because: &str, frame: &Frame<'_>) -> Svg {
    let title = format!("Nothing to draw: {}", text::plain(because));
    let mut sheet = Sheet::open(frame, stream, &title);
    sheet.y += 3.0 * sheet.font;
    let (from, to) = ((MARGIN + 8.0, sheet.y), (sheet.right() - 8.0, sheet.y));
    sheet.paper.put(ink::PATH_OPEN.path([from, to]));
    sheet.paper.put(at((to.0 + 8.0, to.1)) + arrow());
    sheet.paper.put(ink::NOBODY.circle(from, 4.0));
    sheet.y += 1.5 * sheet.font;
    sheet.finish(&format!("{title}."), Table::default())
}

/// The arrow at the end of the path, from its tip.
pub(super) fn arrow() -> Inked<Polygon<BackendCoord>> {
    ink::WAITER.polygon(around([(0.0, 0.0), (-9.0, -4.5), (-9.0, 4.5)]))
}
