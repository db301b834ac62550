//! The sheet every picture is drawn on: margins and sizes by its width, the heading, the key, the empty picture.

use super::ink;
use super::pen::{Anchor, At, Pen, id};
use super::text;
use super::{Frame, Svg, Table};

/// Between the sheet's edge and anything on it, px.
pub(super) const MARGIN: f64 = 12.0;

/// A sheet, filled from the top; `y` is how far.
pub(super) struct Sheet<'a> {
    pub(super) pen: Pen,
    pub(super) frame: Frame<'a>,
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
            pen: Pen::default(),
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
            sheet.pen.bold(&ink::SOFT, (MARGIN, sheet.y), Anchor::Start, font, &name);
            sheet.y += 0.35 * font;
        }
        let size = 1.3 * font;
        for line in text::wrap(title, size, sheet.right() - MARGIN) {
            sheet.y += 1.25 * size;
            sheet.pen.bold(&ink::TEXT, (MARGIN, sheet.y), Anchor::Start, size, &line);
        }
        sheet.y += 0.6 * font;
        sheet
    }

    /// Right end of what may be drawn.
    pub(super) fn right(&self) -> f64 {
        self.width - MARGIN
    }

    /// The id of a part of this picture.
    pub(super) fn id(&self, name: &str) -> String {
        id(self.frame.prefix, name)
    }

    /// One line of remark, from the left or to the right end.
    pub(super) fn remark(&mut self, anchor: Anchor, words: &str) {
        let at = if anchor == Anchor::End { self.right() } else { MARGIN };
        let words = text::shorten(words, self.font, self.right() - MARGIN);
        self.y += 1.3 * self.font;
        self.pen.text(&ink::SOFT, (at, self.y), anchor, self.font, &words);
    }

    /// A paragraph of remarks.
    pub(super) fn paragraph(&mut self, words: &str) {
        for line in text::wrap(words, self.font, self.right() - MARGIN) {
            self.remark(Anchor::Start, &line);
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
                self.pen.text(&ink::TEXT, (x + sample, self.y), Anchor::Start, font, line);
            }
            // Whatever needed more than one line has its lines to itself.
            x = if lines.len() > 1 { self.right() } else { x + width + 1.2 * font };
        }
    }

    fn sample(&mut self, what: &Sample, at: At) {
        let (w, h) = (0.8 * self.font, 0.4 * self.font);
        let (left, right) = ((at.0 - w, at.1), (at.0 + w, at.1));
        let (low, high) = ((at.0 - w, at.1 + h), (at.0 + w, at.1 - h));
        match *what {
            Sample::Line => self.pen.line(&ink::LINE, left, right),
            Sample::LineOpen => self.pen.line(&ink::LINE_OPEN, left, right),
            Sample::Band => {
                self.pen.rect(&ink::BAND, low, high);
                self.pen.line(&ink::EDGE, (low.0, high.1), high);
                self.pen.line(&ink::EDGE, low, (high.0, low.1));
            }
            Sample::Good => {
                self.pen.rect(&ink::GOOD, low, high);
                self.pen.hatched(&self.id("good"), low, high);
                self.pen.line(&ink::GOOD_EDGE, low, (low.0, high.1));
                self.pen.line(&ink::GOOD_EDGE, high, (high.0, low.1));
            }
            Sample::Haze => {
                self.pen.hatched(&self.id("haze"), low, high);
                self.pen.line(&ink::SIGHT, low, (low.0, high.1));
            }
            Sample::Number(n) => self.ring(at, n),
            Sample::Square(side) => {
                self.pen.rect(
                    &ink::CELL,
                    (at.0 - side / 2.0, at.1 - side / 2.0),
                    (at.0 + side / 2.0, at.1 + side / 2.0),
                );
            }
            Sample::Worst(side) => worst(&mut self.pen, at, side),
            Sample::OursBar => self.pen.rect(&ink::GOOD_BAR, low, high),
            Sample::InForceBar => self.pen.rect(&ink::IN_FORCE_BAR, low, high),
            Sample::RivalBar => self.pen.rect(&ink::RIVAL_BAR, low, high),
            Sample::Span => span(&mut self.pen, left, right, h),
        }
    }

    /// Radius of a numbered ring.
    pub(super) fn ring_radius(&self) -> f64 {
        0.72 * self.font
    }

    /// A ring with its number.
    pub(super) fn ring(&mut self, at: At, number: usize) {
        let size = if number < 10 { 0.85 } else { 0.68 } * self.font;
        self.pen.circle(&ink::RIVAL, at, self.ring_radius());
        self.pen.bold(
            &ink::RIVAL_TEXT,
            (at.0, at.1 + 0.35 * size),
            Anchor::Middle,
            size,
            &number.to_string(),
        );
    }

    /// Closes the sheet.
    pub(super) fn finish(self, summary: &str, table: Table) -> Svg {
        let named = match self.stream.is_empty() {
            true => self.title.clone(),
            false => format!("{}: {}", self.stream, self.title),
        };
        let summary = text::plain(summary);
        let size = (self.width, self.y + MARGIN);
        Svg {
            markup: self.pen.finish(&self.frame, size, &named, &summary),
            title: self.title,
            summary,
            table,
        }
    }
}

/// The advised time: a full diamond.
pub(super) fn advised_shape(pen: &mut Pen, (x, y): At, r: f64) {
    pen.polygon(&ink::ADVISED_SHAPE, &[(x, y - r), (x + r, y), (x, y + r), (x - r, y)]);
}

/// The time in force: an open square.
pub(super) fn in_force_shape(pen: &mut Pen, (x, y): At, r: f64) {
    pen.rect(&ink::IN_FORCE_SHAPE, (x - r, y - r), (x + r, y + r));
}

/// The worst hour: a full square in a ring.
pub(super) fn worst(pen: &mut Pen, (x, y): At, side: f64) {
    let (half, ring) = (side / 2.0, side / 2.0 + 1.8);
    pen.rect(&ink::IN_FORCE_FULL, (x - half, y - half), (x + half, y + half));
    pen.rect(&ink::IN_FORCE_RING, (x - ring, y - ring), (x + ring, y + ring));
}

/// An interval with its ends.
pub(super) fn span(pen: &mut Pen, from: At, to: At, cap: f64) {
    pen.line(&ink::SPAN, from, to);
    for (x, y) in [from, to] {
        pen.line(&ink::SPAN, (x, y - cap), (x, y + cap));
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
    sheet.pen.line(&ink::PATH_OPEN, from, to);
    arrow(&mut sheet.pen, (to.0 + 8.0, to.1));
    sheet.pen.circle(&ink::NOBODY, from, 4.0);
    sheet.y += 1.5 * sheet.font;
    sheet.finish(&format!("{title}."), Table::default())
}

/// The arrow at the end of the path; its tip is at a place.
pub(super) fn arrow(pen: &mut Pen, (x, y): At) {
    pen.polygon(&ink::WAITER, &[(x, y), (x - 9.0, y - 4.5), (x - 9.0, y + 4.5)]);
}
