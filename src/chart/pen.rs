//! The pen: a backend of plotters that writes SVG. Its unit is a tenth of a pixel, text is escaped, and nothing else
//! gets in.
//!
//! plotters' elements bring a colour and a width, and on their own are drawn so. While the pen is dipped into an
//! [`Ink`] they are written in that instead, and so have its class, its dashes or its hatch.

use std::convert::Infallible;
use std::fmt::{self, Display, Write};

use plotters_backend::text_anchor::{HPos, VPos};
use plotters_backend::{
    BackendColor, BackendCoord, BackendStyle, BackendTextStyle, DrawingBackend, DrawingErrorKind, FontStyle,
    FontTransform,
};

use super::ink::Ink;
use super::text;

/// A pen fails at nothing.
pub(super) type Drawn = Result<(), DrawingErrorKind<Infallible>>;

/// Collects the body of a picture.
pub(super) struct Pen {
    body: String,
    /// Starts every id.
    prefix: String,
    size: (u32, u32),
    ink: Option<Ink>,
}

impl Pen {
    /// A pen for a sheet of a size in tenths of a pixel.
    pub(super) fn new(prefix: &str, size: (u32, u32)) -> Pen {
        Pen { body: String::new(), prefix: prefix.into(), size, ink: None }
    }

    /// What was drawn, without an element round it.
    pub(super) fn take_body(&mut self) -> String {
        std::mem::take(&mut self.body)
    }

    /// Draws in an ink, whatever style comes with what is drawn.
    pub(super) fn dipped(&mut self, ink: Ink, draw: impl FnOnce(&mut Pen) -> Drawn) -> Drawn {
        let before = self.ink.replace(ink);
        let drawn = draw(self);
        self.ink = before;
        drawn
    }

    /// One line of text on its baseline, in the ink the pen is dipped into.
    pub(super) fn words(
        &mut self,
        at: BackendCoord,
        anchor: HPos,
        size: i32,
        bold: bool,
        words: &str,
    ) -> Drawn {
        self.open("text", BLACK, None);
        self.text(at, anchor, size, if bold { " font-weight=\"700\"" } else { "" }, words);
        Ok(())
    }

    /// Slanted lines `step` apart under a name, for grounds in [`Ink::Hatch`].
    pub(super) fn pattern(&mut self, name: &str, ink: Ink, step: i32, rising: bool) {
        let (id, step, slant) = (id(&self.prefix, name), Tenths(step), if rising { 45 } else { 135 });
        let _ = write!(
            self.body,
            "<defs><pattern id=\"{id}\" width=\"{step}\" height=\"{step}\" patternUnits=\"userSpaceOnUse\" \
             patternTransform=\"rotate({slant})\"><line"
        );
        ink.write(&self.prefix, &mut self.body);
        let _ = write!(self.body, " x1=\"0\" y1=\"0\" x2=\"0\" y2=\"{step}\"/></pattern></defs>");
    }

    /// Begins an element in the ink the pen is dipped into, else in a colour: a line of a width, or full without one.
    fn open(&mut self, element: &str, colour: BackendColor, width: Option<u32>) {
        self.body.push('<');
        self.body.push_str(element);
        if let Some(ink) = self.ink {
            return ink.write(&self.prefix, &mut self.body);
        }
        let BackendColor { alpha, rgb: (r, g, b) } = colour;
        let hex = format!("#{r:02x}{g:02x}{b:02x}");
        let _ = match width.map(whole) {
            None => write!(self.body, " fill=\"{hex}\" fill-opacity=\"{alpha}\" stroke=\"none\""),
            Some(width) => write!(
                self.body,
                " fill=\"none\" stroke=\"{hex}\" stroke-opacity=\"{alpha}\" stroke-width=\"{}\"",
                Tenths(width)
            ),
        };
    }

    /// An element that a few lengths make, full or as a line.
    fn shape<const N: usize>(
        &mut self,
        element: &str,
        style: &impl BackendStyle,
        fill: bool,
        lengths: [(&str, i32); N],
    ) -> Drawn {
        self.open(element, style.color(), (!fill).then(|| style.stroke_width()));
        self.lengths(lengths);
        self.body.push_str("/>");
        Ok(())
    }

    fn lengths<const N: usize>(&mut self, lengths: [(&str, i32); N]) {
        for (name, length) in lengths {
            let _ = write!(self.body, " {name}=\"{}\"", Tenths(length));
        }
    }

    fn points(&mut self, places: &[BackendCoord]) {
        self.body.push_str(" points=\"");
        for (i, &(x, y)) in places.iter().enumerate() {
            let _ = write!(self.body, "{}{},{}", if i > 0 { " " } else { "" }, Tenths(x), Tenths(y));
        }
        self.body.push('"');
    }

    fn text(&mut self, (x, y): BackendCoord, anchor: HPos, size: i32, more: &str, words: &str) {
        let anchor = match anchor {
            HPos::Left => "start",
            HPos::Center => "middle",
            HPos::Right => "end",
        };
        self.lengths([("x", x), ("y", y), ("font-size", size)]);
        let _ = write!(self.body, " text-anchor=\"{anchor}\"{more}>{}</text>", escaped(words));
    }
}

impl DrawingBackend for Pen {
    type ErrorType = Infallible;

    fn get_size(&self) -> (u32, u32) {
        self.size
    }

    fn ensure_prepared(&mut self) -> Drawn {
        Ok(())
    }

    fn present(&mut self) -> Drawn {
        Ok(())
    }

    fn draw_pixel(&mut self, (x, y): BackendCoord, colour: BackendColor) -> Drawn {
        self.draw_rect((x, y), (x.saturating_add(1), y.saturating_add(1)), &colour, true)
    }

    fn draw_line<S: BackendStyle>(&mut self, from: BackendCoord, to: BackendCoord, style: &S) -> Drawn {
        self.draw_path([from, to], style)
    }

    fn draw_rect<S: BackendStyle>(
        &mut self,
        (x, y): BackendCoord,
        (right, bottom): BackendCoord,
        style: &S,
        fill: bool,
    ) -> Drawn {
        let (width, height) = (right.saturating_sub(x), bottom.saturating_sub(y));
        self.shape("rect", style, fill, [("x", x), ("y", y), ("width", width), ("height", height)])
    }

    /// A place twice in a row counts once.
    fn draw_path<S: BackendStyle, I: IntoIterator<Item = BackendCoord>>(
        &mut self,
        path: I,
        style: &S,
    ) -> Drawn {
        let mut places: Vec<BackendCoord> = path.into_iter().collect();
        places.dedup();
        match places[..] {
            [] | [_] => return Ok(()),
            [(x1, y1), (x2, y2)] => {
                self.open("line", style.color(), Some(style.stroke_width()));
                self.lengths([("x1", x1), ("y1", y1), ("x2", x2), ("y2", y2)]);
            }
            _ => {
                self.open("polyline", style.color(), Some(style.stroke_width()));
                self.points(&places);
            }
        }
        self.body.push_str("/>");
        Ok(())
    }

    fn draw_circle<S: BackendStyle>(
        &mut self,
        (x, y): BackendCoord,
        radius: u32,
        style: &S,
        fill: bool,
    ) -> Drawn {
        self.shape("circle", style, fill, [("cx", x), ("cy", y), ("r", whole(radius))])
    }

    fn fill_polygon<S: BackendStyle, I: IntoIterator<Item = BackendCoord>>(
        &mut self,
        corners: I,
        style: &S,
    ) -> Drawn {
        let mut places: Vec<BackendCoord> = corners.into_iter().collect();
        places.dedup();
        if places.len() > 1 {
            self.open("polygon", style.color(), None);
            self.points(&places);
            self.body.push_str("/>");
        }
        Ok(())
    }

    /// Which font there is only its reader knows: the heights above and below the baseline are those of common ones.
    fn draw_text<T: BackendTextStyle>(&mut self, words: &str, style: &T, at: BackendCoord) -> Drawn {
        let down = match style.anchor().v_pos {
            VPos::Top => 0.8,
            VPos::Center => 0.3,
            VPos::Bottom => -0.2,
        };
        let turn = match style.transform() {
            FontTransform::None => 0,
            FontTransform::Rotate90 => 90,
            FontTransform::Rotate180 => 180,
            FontTransform::Rotate270 => 270,
        };
        let font = style.style();
        let (weight, slope) = match font {
            FontStyle::Bold => ("bold", "normal"),
            _ => ("normal", font.as_str()),
        };
        let more = format!(
            " dy=\"{down}em\" font-family=\"{}\" font-weight=\"{weight}\" font-style=\"{slope}\" \
             transform=\"rotate({turn} {} {})\"",
            escaped(style.family().as_str()),
            Tenths(at.0),
            Tenths(at.1),
        );
        self.open("text", style.color(), None);
        self.text(at, style.anchor().h_pos, tenths(style.size() / 10.0), &more, words);
        Ok(())
    }

    fn estimate_text_size<T: BackendTextStyle>(
        &self,
        words: &str,
        style: &T,
    ) -> Result<(u32, u32), DrawingErrorKind<Infallible>> {
        Ok((text::width(words, style.size()).ceil() as u32, style.size().ceil() as u32))
    }
}

const BLACK: BackendColor = BackendColor { alpha: 1.0, rgb: (0, 0, 0) };

fn whole(length: u32) -> i32 {
    i32::try_from(length).unwrap_or(i32::MAX)
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

/// A length in px as tenths; 0 for what is not finite, so that no reader meets a `NaN`.
pub(super) fn tenths(px: f64) -> i32 {
    if px.is_finite() { (px * 10.0).round() as i32 } else { 0 }
}

/// Tenths of a pixel, written in px.
pub(super) struct Tenths(pub(super) i32);

impl Display for Tenths {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        let sign = if self.0 < 0 { "-" } else { "" };
        match (self.0.unsigned_abs() / 10, self.0.unsigned_abs() % 10) {
            (whole, 0) => write!(out, "{sign}{whole}"),
            (whole, part) => write!(out, "{sign}{whole}.{part}"),
        }
    }
}

/// A length in px, to a tenth.
pub(super) fn px(length: f64) -> Tenths {
    Tenths(tenths(length))
}

#[cfg(test)]
mod tests {
    use std::cell::RefCell;
    use std::rc::Rc;

    use plotters::element::{Drawable, PointCollection};
    use plotters::prelude::*;

    use super::*;

    #[test]
    fn lengths_ids_and_text() {
        let written = [1.04, -0.04, -0.06, 12.0, f64::NAN].map(|length| px(length).to_string());
        assert_eq!(written, ["1", "0", "-0.1", "12", "0"]);
        assert_eq!(id("7 of <b>", "title"), "ow-7-of--b--title");
        assert_eq!(escaped("<a href=\"x\">&'"), "&lt;a href=&quot;x&quot;&gt;&amp;&#39;");
    }

    /// What plotters draws by itself, without an ink.
    fn drawn<E: Drawable<Pen>>(element: E) -> String
    where
        for<'a> &'a E: PointCollection<'a, BackendCoord>,
    {
        let pen = Rc::new(RefCell::new(Pen::new("p", (1000, 500))));
        DrawingArea::from(&pen).draw(&element).unwrap();
        pen.borrow_mut().take_body()
    }

    #[test]
    fn draws_what_plotters_brings() {
        let thick = ShapeStyle { color: RED.mix(0.5), filled: false, stroke_width: 25 };
        let line = "fill=\"none\" stroke=\"#ff0000\" stroke-opacity=\"0.5\" stroke-width=\"2.5\"";
        let full = "fill=\"#0000ff\" fill-opacity=\"1\" stroke=\"none\"";
        assert_eq!(
            drawn(PathElement::new([(1, 2), (1, 2), (30, 40)], thick)),
            format!("<line {line} x1=\"0.1\" y1=\"0.2\" x2=\"3\" y2=\"4\"/>")
        );
        assert_eq!(
            drawn(PathElement::new([(1, 2), (30, 40), (5000, -1)], thick)),
            format!("<polyline {line} points=\"0.1,0.2 3,4 100,0\"/>"),
            "nothing leaves its area"
        );
        assert_eq!(drawn(PathElement::new([(1, 2), (1, 2)], thick)), "");
        assert_eq!(
            drawn(Rectangle::new([(30, 40), (10, 10)], BLUE.filled())),
            format!("<rect {full} x=\"1\" y=\"1\" width=\"2\" height=\"3\"/>")
        );
        assert_eq!(
            drawn(Circle::new((20, 20), 15, thick)),
            format!("<circle {line} cx=\"2\" cy=\"2\" r=\"1.5\"/>")
        );
        assert_eq!(
            drawn(Polygon::new([(0, 0), (10, 0), (0, 5)], BLUE)),
            format!("<polygon {full} points=\"0,0 1,0 0,0.5\"/>")
        );
        assert_eq!(
            drawn(Pixel::new((7, 8), BLUE)),
            format!("<rect {full} x=\"0.7\" y=\"0.8\" width=\"0.1\" height=\"0.1\"/>")
        );
        let style = ("serif", 120).into_font().style(FontStyle::Bold).color(&BLUE);
        assert_eq!(
            drawn(Text::new("a<b", (100, 200), style)),
            format!(
                "<text {full} x=\"10\" y=\"20\" font-size=\"12\" text-anchor=\"start\" dy=\"0.8em\" \
                 font-family=\"serif\" font-weight=\"bold\" font-style=\"normal\" \
                 transform=\"rotate(0 10 20)\">a&lt;b</text>"
            )
        );
    }
}
