//! Pictures as SVG text: data in, markup out, with the same facts in words and as a table. No files, no clock.
//!
//! **The visual idea.** Time lies ahead of one who waits. The axis of ages is a path: it starts at a dot (the one
//! who waits) and ends in an arrow. What is known is drawn firm; what no datum shows is drawn open: a dashed line,
//! a hatched ground, and the words "sight ends" where it begins. Give-up times are posts beside the path, each
//! with its own shape: a diamond for the advised time, a square for the time in force, numbered rings for others.
//!
//! **Titles state the finding.** A caller gives facts, a chart words the sentence, and [`Svg::title`] and
//! [`Svg::summary`] carry it with its numbers to those who do not see the picture.
//!
//! **Scales.** Ages are drawn on a logarithmic axis where the median would fall into the first twentieth of a
//! linear one ([`Ages::is_log`]), else from 0; both have marks where people count (1, 2, 5 in ms and s; 1, 5, 15,
//! 30 min; 1, 6, 12 h; 1, 7, 30 d). Shares are logarithmic where fewer than one in 50 is still waiting at a marked
//! time, remaining waits where they differ by more than a factor of 30; each says so beside its axis. Rates and
//! worth are always linear and always show 0.
//!
//! **Colour is never the only sign**: line styles, hatches, shapes and words differ too, so the pictures survive a
//! grey printer. Light colours are plain attributes, dark ones a style sheet under `prefers-color-scheme`, so that
//! a program which drops style sheets still shows the light picture. The palette is in `ink.rs`.
//!
//! **How it is drawn.** With plotters. A `Scale` is one of its ranges, two of them are the coordinates of a drawing
//! area (`area.rs`), and its elements are put there by ages and values (`element.rs`). The SVG is written by a backend
//! of ours (`pen.rs`): that of plotters knows whole pixels and one fixed colour an element, and neither classes,
//! dashes, hatches nor text alternatives. An element dipped in an `Ink` reaches these. Marks beside an axis are ours
//! too (`scale.rs`): they count in minutes and hours, not in tens.

mod age;
mod area;
mod bars;
mod element;
mod holding;
mod ink;
mod lane;
mod page;
mod panel;
mod pen;
mod rate;
mod remaining;
mod scale;
mod sheet;
mod spark;
mod story;
mod text;
mod trace;
mod waiting;
mod week;
mod words;

pub use age::Ages;
pub use bars::{Bar, Ranking, Replay, Role, ranking, replay};
pub use holding::{Holding, holding};
pub use ink::style;
pub use lane::{Lane, lane, milestones, road};
pub use page::{Figure, Section, page};
pub use rate::{Rate, Rival, rate};
pub use remaining::{Remaining, remaining};
pub use sheet::nothing;
pub use spark::{Spark, spark};
pub use story::Picture;
pub(crate) use story::quantity;
pub use trace::Point;
pub use waiting::{Waiting, waiting};
pub use week::{Week, week};
pub use words::Quantity;

/// One picture at two widths for a page that is read on phones too: [`style`] shows the one that there is room for, and
/// print the wide one. Title, summary and table are those of the wide one.
pub fn at_both_widths(wide: u32, prefix: &str, draw: impl Fn(&Frame<'_>) -> Svg) -> Svg {
    let wide = draw(&Frame { width: wide, prefix, styled: false });
    let narrow =
        draw(&Frame { width: Frame::NARROWEST, prefix: &format!("{prefix}-narrow"), styled: false }).markup;
    let markup =
        format!("<div class=\"ow-wide\">{}</div><div class=\"ow-narrow\">{narrow}</div>", wide.markup);
    Svg { markup, ..wide }
}

/// Where a picture goes.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Frame<'a> {
    /// Width in CSS pixels; brought into [`Frame::NARROWEST`] to [`Frame::WIDEST`]. The height follows.
    pub width: u32,
    /// Starts every id, so that several pictures fit into one page; characters other than ASCII letters, digits,
    /// `-` and `_` become `-`.
    pub prefix: &'a str,
    /// Whether the picture brings its dark colours. Without them, put [`style`] once into the page (or its digest
    /// into a content-security policy).
    pub styled: bool,
}

impl Frame<'_> {
    /// Least width, px.
    pub const NARROWEST: u32 = 320;
    /// Largest width, px.
    pub const WIDEST: u32 = 1600;
}

/// Give-up times to mark, s; infinite for never, `None` for nothing to mark.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Marks {
    /// What is advised; infinite for waiting it out.
    pub advised: Option<f64>,
    /// What is in force.
    pub in_force: Option<f64>,
}

impl Marks {
    /// Without what is no time.
    fn sound(self) -> Marks {
        let time = |age: &f64| *age > 0.0;
        Marks { advised: self.advised.filter(time), in_force: self.in_force.filter(time) }
    }
}

/// A picture with its text.
#[derive(Clone, Debug, PartialEq)]
pub struct Svg {
    /// One `<svg>` element; well-formed XML, and fit for being put into HTML as it is.
    pub markup: String,
    /// The finding, one sentence.
    pub title: String,
    /// The numbers of the picture in sentences, for those who do not see it.
    pub summary: String,
    /// The same as a table, to stand under the picture.
    pub table: Table,
}

/// A table of texts. Every row is as long as the columns.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Table {
    /// Heads.
    pub columns: Vec<&'static str>,
    /// Cells, the first of each row its head.
    pub rows: Vec<Vec<String>>,
}
