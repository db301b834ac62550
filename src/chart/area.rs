//! Where elements are put: drawing areas of plotters, of a whole sheet in pixels or of a part of it in what is shown.

use std::cell::RefCell;
use std::ops::Range;
use std::rc::Rc;

use plotters::coord::cartesian::Cartesian2d;
use plotters::coord::ranged1d::{KeyPointHint, NoDefaultFormatting, Ranged};
use plotters::drawing::DrawingArea;
use plotters::element::{Drawable, EmptyElement, PointCollection};

use super::pen::{Pen, tenths};
use super::scale::Scale;

/// A place on a sheet, px from the left and from the top.
pub(super) type At = (f64, f64);

/// A part of a sheet; `X` counts to the right.
pub(super) struct Area<X: Ranged, Y: Ranged> {
    pen: Rc<RefCell<Pen>>,
    area: DrawingArea<Pen, Cartesian2d<X, Y>>,
}

/// A whole sheet; counts down.
pub(super) type Paper = Area<Pixels, Pixels>;

/// A part of a sheet that shows values; counts up.
pub(super) type Plot = Area<Scale, Scale>;

impl Paper {
    /// An empty sheet whose ids start with `prefix`.
    pub(super) fn new(prefix: &str, (width, height): At) -> Paper {
        let (width, height) = (tenths(width).max(0), tenths(height).max(0));
        let pen = Pen::new(prefix, (width.unsigned_abs(), height.unsigned_abs()));
        let pen = Rc::new(RefCell::new(pen));
        let pixels = Cartesian2d::new(Pixels, Pixels, (0..width, 0..height));
        Area { area: DrawingArea::from(&pen).apply_coord_spec(pixels), pen }
    }

    /// The part between two corners, upper left and lower right, with scales along it.
    pub(super) fn plot(&self, from: At, to: At, x: Scale, y: Scale) -> Plot {
        let ((left, top), (right, bottom)) = (self.area.map_coordinate(&from), self.area.map_coordinate(&to));
        let size = (right.saturating_sub(left), bottom.saturating_sub(top));
        let part = self.area.use_screen_coord().shrink((left, top), size);
        let (across, down) = part.get_pixel_range();
        let up = down.end..down.start;
        Area { pen: self.pen.clone(), area: part.apply_coord_spec(Cartesian2d::new(x, y, (across, up))) }
    }

    /// What was drawn, without an element round it.
    pub(super) fn into_body(self) -> String {
        self.pen.try_borrow_mut().map_or(String::new(), |mut pen| pen.take_body())
    }
}

impl<X: Ranged, Y: Ranged> Area<X, Y> {
    /// Draws an element.
    pub(super) fn put<E>(&self, element: E)
    where
        E: Drawable<Pen>,
        for<'a> &'a E: PointCollection<'a, (X::ValueType, Y::ValueType)>,
    {
        // A pen fails at nothing, and nothing else holds it meanwhile.
        let _ = self.area.draw(&element);
    }
}

impl Plot {
    /// Where values lie on the sheet.
    pub(super) fn at(&self, x: f64, y: f64) -> At {
        let (x, y) = self.area.map_coordinate(&(x, y));
        (f64::from(x) / 10.0, f64::from(y) / 10.0)
    }

    /// Its upper left and lower right corner.
    pub(super) fn corners(&self) -> (At, At) {
        let (x, y) = self.area.get_pixel_range();
        let px = |tenths: i32| f64::from(tenths) / 10.0;
        ((px(x.start), px(y.start)), (px(x.end), px(y.end)))
    }
}

/// The place around which an element of a few strokes is drawn.
pub(super) fn at<C>(place: C) -> EmptyElement<C, Pen> {
    EmptyElement::at(place)
}

/// Pixels along a sheet.
#[derive(Clone, Copy)]
pub(super) struct Pixels;

impl Ranged for Pixels {
    type FormatOption = NoDefaultFormatting;
    type ValueType = f64;

    fn map(&self, px: &f64, (from, _): (i32, i32)) -> i32 {
        from.saturating_add(tenths(*px))
    }

    fn key_points<H: KeyPointHint>(&self, _: H) -> Vec<f64> {
        Vec::new()
    }

    fn range(&self) -> Range<f64> {
        0.0..f64::from(i32::MAX) / 10.0
    }
}
