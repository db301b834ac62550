//! What can be put on an [`Area`](super::area::Area): plotters' own shapes in one of our inks, words on a baseline, and
//! the hatches of grounds. Places are in whatever the area counts in, lengths round a place in tenths of a pixel.

use std::iter::{Empty, Once, empty, once};

use plotters::element::{Circle, Drawable, PathElement, PointCollection, Polygon, Rectangle};
use plotters::style::{BLACK, RGBColor};
use plotters_backend::BackendCoord;
use plotters_backend::text_anchor::HPos;

use super::ink::Ink;
use super::pen::{Drawn, Pen, tenths};

/// An element of plotters in an ink in place of its style.
pub(super) struct Inked<E> {
    ink: Ink,
    element: E,
}

/// The style that an ink covers.
const COVERED: RGBColor = BLACK;

impl Ink {
    /// A line through places.
    pub(super) fn path<C>(self, places: impl Into<Vec<C>>) -> Inked<PathElement<C>> {
        Inked { ink: self, element: PathElement::new(places, COVERED) }
    }

    /// A closed shape.
    pub(super) fn polygon<C>(self, places: impl Into<Vec<C>>) -> Inked<Polygon<C>> {
        Inked { ink: self, element: Polygon::new(places, COVERED) }
    }

    /// A rectangle from one corner to the opposite one.
    pub(super) fn rect<C>(self, corners: [C; 2]) -> Inked<Rectangle<C>> {
        Inked { ink: self, element: Rectangle::new(corners, COVERED) }
    }

    /// A circle; its radius in px.
    pub(super) fn circle<C>(self, centre: C, radius: f64) -> Inked<Circle<C, i32>> {
        Inked { ink: self, element: Circle::new(centre, tenths(radius), COVERED) }
    }

    /// One line of text, a side of it at a place on its baseline; its size in px.
    pub(super) fn words<C>(self, at: C, side: HPos, size: f64, words: impl Into<String>) -> Words<C> {
        Words { ink: self, at, side, size, bold: false, words: words.into() }
    }

    /// The same in bold.
    pub(super) fn bold<C>(self, at: C, side: HPos, size: f64, words: impl Into<String>) -> Words<C> {
        Words { bold: true, ..self.words(at, side, size, words) }
    }
}

macro_rules! inked {
    ($($element:ty),*) => {
        $(impl<'a, C> PointCollection<'a, C> for &'a Inked<$element> {
            type Point = &'a C;
            type IntoIter = <&'a $element as PointCollection<'a, C>>::IntoIter;

            fn point_iter(self) -> Self::IntoIter {
                self.element.point_iter()
            }
        })*
    };
}

// One by one: for any element at once, the compiler would look for inks in inks without end.
inked!(PathElement<C>, Polygon<C>, Rectangle<C>, Circle<C, i32>);

impl<E: Drawable<Pen>> Drawable<Pen> for Inked<E> {
    fn draw<I: Iterator<Item = BackendCoord>>(&self, places: I, pen: &mut Pen, size: (u32, u32)) -> Drawn {
        pen.dipped(self.ink, |pen| self.element.draw(places, pen, size))
    }
}

/// A line of text. plotters' own stands by its box, which only a font could tell; ours stands on its baseline.
pub(super) struct Words<C> {
    ink: Ink,
    at: C,
    side: HPos,
    size: f64,
    bold: bool,
    words: String,
}

impl<'a, C: 'a> PointCollection<'a, C> for &'a Words<C> {
    type Point = &'a C;
    type IntoIter = Once<&'a C>;

    fn point_iter(self) -> Self::IntoIter {
        once(&self.at)
    }
}

impl<C> Drawable<Pen> for Words<C> {
    fn draw<I: Iterator<Item = BackendCoord>>(&self, mut at: I, pen: &mut Pen, _: (u32, u32)) -> Drawn {
        let Some(at) = at.next() else { return Ok(()) };
        let Words { ink, side, size, bold, ref words, .. } = *self;
        pen.dipped(ink, |pen| pen.words(at, side, tenths(size), bold, words))
    }
}

/// Slanted lines, laid out once under a name for [`Ink::Hatch`].
pub(super) struct Hatching {
    /// Its name in this picture.
    pub(super) name: &'static str,
    /// What its lines are drawn with.
    pub(super) ink: Ink,
    /// From line to line, px.
    pub(super) step: f64,
    /// Whether they rise to the right.
    pub(super) rising: bool,
}

impl<'a, C: 'a> PointCollection<'a, C> for &'a Hatching {
    type Point = &'a C;
    type IntoIter = Empty<&'a C>;

    fn point_iter(self) -> Self::IntoIter {
        empty()
    }
}

impl Drawable<Pen> for Hatching {
    fn draw<I: Iterator<Item = BackendCoord>>(&self, _: I, pen: &mut Pen, _: (u32, u32)) -> Drawn {
        pen.pattern(self.name, self.ink, tenths(self.step), self.rising);
        Ok(())
    }
}

/// A shape of which each corner is so far from a place, px.
pub(super) fn around<const N: usize>(corners: [(f64, f64); N]) -> [BackendCoord; N] {
    corners.map(|(x, y)| (tenths(x), tenths(y)))
}
