//! The palette and what is drawn with it. Text has at least 4.5:1 against the paper and every line or shape that
//! carries meaning at least 3:1 (WCAG 2.2, 1.4.3 and 1.4.11), light and dark; `tests/charts.rs` computes it.
//! Classes that start with `ow-faint` are grounds and guides: what they say is said again by a firm line or a word.

use std::fmt::Write;

use super::pen::id;

/// One colour on light paper and its twin on dark.
pub(super) struct Colour {
    light: &'static str,
    dark: &'static str,
}

/// What an element is drawn with.
#[derive(Clone, Copy)]
pub(super) enum Ink {
    /// By its class, with colours for light and dark.
    Look(&'static Look),
    /// The hatch laid out under this name ([`Hatching`](super::element::Hatching)).
    Hatch(&'static str),
    /// The colours of the text round the picture; with these attributes, each after a space.
    Plain(&'static str),
}

/// How one kind of element looks.
pub(super) struct Look {
    class: &'static str,
    fill: Option<&'static Colour>,
    stroke: Option<&'static Colour>,
    /// Attributes besides colour: line width, dashes, ends.
    more: &'static str,
}

impl Ink {
    /// Writes class, colours on light paper, and the rest, as attributes with a leading space. `prefix`: of ids.
    pub(super) fn write(self, prefix: &str, out: &mut String) {
        let light = |colour: Option<&Colour>| colour.map_or("none", |c| c.light);
        let _ = match self {
            Ink::Look(Look { class, fill, stroke, more }) => write!(
                out,
                " class=\"{class}\" fill=\"{}\" stroke=\"{}\"{more}",
                light(*fill),
                light(*stroke)
            ),
            Ink::Hatch(name) => write!(out, " fill=\"url(#{})\" stroke=\"none\"", id(prefix, name)),
            Ink::Plain(attributes) => write!(out, "{attributes}"),
        };
    }
}

/// The style sheet of all pictures: they shrink with their container, and are dark where the reader's system is.
///
/// It is the same text each time, without `<`, `&` or quotes. Paper stays light.
pub fn style() -> String {
    let mut sheet = String::from(
        ".ow{max-width:100%;height:auto}.ow-wide{display:none}\
         @media print,(min-width:40rem){.ow-wide{display:block}.ow-narrow{display:none}}\
         @media screen and (prefers-color-scheme:dark){",
    );
    for look in ALL {
        let _ = write!(sheet, ".{}{{", look.class);
        for (property, colour) in [("fill", look.fill), ("stroke", look.stroke)] {
            if let Some(colour) = colour {
                let _ = write!(sheet, "{property}:{};", colour.dark);
            }
        }
        sheet.push('}');
    }
    sheet.push('}');
    sheet
}

const PAPER_: Colour = Colour { light: "#fbfaf5", dark: "#12181c" };
const TEXT_: Colour = Colour { light: "#1b2529", dark: "#e8ecea" };
const SOFT_: Colour = Colour { light: "#55626a", dark: "#a7b3b8" };
const GRID_: Colour = Colour { light: "#e3e2d9", dark: "#283136" };
const HAZE_: Colour = Colour { light: "#848b89", dark: "#76848a" };
const CURVE_: Colour = Colour { light: "#1d4e79", dark: "#85bff0" };
const CURVE_TINT: Colour = Colour { light: "#d9e5ee", dark: "#1e3547" };
const ADVISED_: Colour = Colour { light: "#00684f", dark: "#58d1a9" };
const ADVISED_TINT: Colour = Colour { light: "#d5ece2", dark: "#173b31" };
const IN_FORCE_: Colour = Colour { light: "#a63d0c", dark: "#f39a6d" };
const IN_FORCE_TINT: Colour = Colour { light: "#f7e3d7", dark: "#46291b" };
const RIVAL_: Colour = Colour { light: "#5f4380", dark: "#c7aae6" };

macro_rules! inks {
    ($($(#[$doc:meta])* $name:ident = $class:literal, $fill:expr, $stroke:expr, $more:literal;)*) => {
        $($(#[$doc])* pub(super) const $name: Ink =
            Ink::Look(&Look { class: $class, fill: $fill, stroke: $stroke, more: $more });)*
        const ALL: &[Look] = &[$(Look { class: $class, fill: $fill, stroke: $stroke, more: $more }),*];
    };
}

inks! {
    /// The sheet.
    PAPER = "ow-faint-paper", Some(&PAPER_), None, "";
    /// Titles and values.
    TEXT = "ow-text", Some(&TEXT_), None, "";
    /// Axes and remarks.
    SOFT = "ow-soft", Some(&SOFT_), None, "";
    /// Lines to read values along.
    GRID = "ow-faint-grid", None, Some(&GRID_), " stroke-width=\"1\"";
    /// Marks on the path, and where zero is.
    TICK = "ow-tick", None, Some(&TEXT_), " stroke-width=\"1\"";
    /// The path as far as it is seen.
    PATH = "ow-path", None, Some(&TEXT_), " stroke-width=\"3\"";
    /// The path past the edge of sight.
    PATH_OPEN = "ow-path-open", None, Some(&TEXT_), " stroke-width=\"1.5\" stroke-dasharray=\"3 4\"";
    /// The one who waits, the arrow ahead.
    WAITER = "ow-waiter", Some(&TEXT_), None, "";
    /// Nobody waits.
    NOBODY = "ow-nobody", Some(&PAPER_), Some(&TEXT_), " stroke-width=\"1.5\"";
    /// Hatch of what is not seen.
    HAZE = "ow-haze", None, Some(&HAZE_), " stroke-width=\"0.7\"";
    /// Edge of sight.
    SIGHT = "ow-sight", None, Some(&SOFT_), " stroke-width=\"1.5\" stroke-dasharray=\"1.5 3\"";
    /// A curve, seen.
    LINE = "ow-line", None, Some(&CURVE_), " stroke-width=\"2.5\" stroke-linejoin=\"round\"";
    /// A curve past the edge of sight.
    LINE_OPEN = "ow-line-open", None, Some(&CURVE_),
        " stroke-width=\"1.5\" stroke-dasharray=\"7 5\" stroke-linejoin=\"round\"";
    /// Ground of a band.
    BAND = "ow-faint-band", Some(&CURVE_TINT), None, " fill-opacity=\"0.75\"";
    /// Edges of a band.
    EDGE = "ow-edge", None, Some(&CURVE_), " stroke-width=\"0.8\"";
    /// Edges of a band past the edge of sight.
    EDGE_OPEN = "ow-edge-open", None, Some(&CURVE_), " stroke-width=\"0.8\" stroke-dasharray=\"2 3\"";
    /// A lane: a band whose outline says what its ground does.
    LANE = "ow-lane", Some(&CURVE_TINT), Some(&CURVE_), " stroke-width=\"0.8\"";
    /// Post of the advised time.
    ADVISED = "ow-advised", None, Some(&ADVISED_), " stroke-width=\"2\"";
    /// Its shape.
    ADVISED_SHAPE = "ow-advised-shape", Some(&ADVISED_), Some(&PAPER_), " stroke-width=\"1\"";
    /// Its words.
    ADVISED_TEXT = "ow-advised-text", Some(&ADVISED_), None, "";
    /// Ground of what is as good as the advised time.
    GOOD = "ow-faint-good", Some(&ADVISED_TINT), None, "";
    /// Edges of it.
    GOOD_EDGE = "ow-good-edge", None, Some(&ADVISED_), " stroke-width=\"1\"";
    /// Hatch of it.
    GOOD_HATCH = "ow-faint-good-hatch", None, Some(&ADVISED_), " stroke-width=\"0.6\" stroke-opacity=\"0.6\"";
    /// A bar of ours.
    GOOD_BAR = "ow-ours-bar", Some(&ADVISED_TINT), Some(&ADVISED_), " stroke-width=\"2\"";
    /// Post of the time in force.
    IN_FORCE = "ow-in-force", None, Some(&IN_FORCE_), " stroke-width=\"2\" stroke-dasharray=\"8 3 2 3\"";
    /// Its shape: open, where the advised one is full.
    IN_FORCE_SHAPE = "ow-in-force-shape", Some(&PAPER_), Some(&IN_FORCE_), " stroke-width=\"2\"";
    /// Its words.
    IN_FORCE_TEXT = "ow-in-force-text", Some(&IN_FORCE_), None, "";
    /// Full, for the worst hour.
    IN_FORCE_FULL = "ow-in-force-full", Some(&IN_FORCE_), None, "";
    /// Round it.
    IN_FORCE_RING = "ow-in-force-ring", None, Some(&IN_FORCE_), " stroke-width=\"1.5\"";
    /// A bar of the time in force.
    IN_FORCE_BAR = "ow-in-force-bar", Some(&IN_FORCE_TINT), Some(&IN_FORCE_),
        " stroke-width=\"1.5\" stroke-dasharray=\"8 3 2 3\"";
    /// Ring of another rule.
    RIVAL = "ow-rival", Some(&PAPER_), Some(&RIVAL_), " stroke-width=\"1.5\"";
    /// Its number.
    RIVAL_TEXT = "ow-rival-text", Some(&RIVAL_), None, "";
    /// From a ring that had to move to its place on the curve.
    RIVAL_LEAD = "ow-rival-lead", None, Some(&RIVAL_), " stroke-width=\"1\"";
    /// A bar of another rule.
    RIVAL_BAR = "ow-rival-bar", Some(&PAPER_), Some(&RIVAL_), " stroke-width=\"1.2\"";
    /// An hour.
    CELL = "ow-cell", Some(&CURVE_), None, "";
    /// An interval.
    SPAN = "ow-span", None, Some(&TEXT_), " stroke-width=\"1.5\"";
}
