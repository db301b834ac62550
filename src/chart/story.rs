//! The four pictures of a stream, from the curves behind its advice.

use super::{
    Ages, Frame, Holding, Marks, Point, Quantity, Rate, Remaining, Rival, Svg, Waiting, holding, rate,
    remaining, waiting,
};
use crate::advise::{CurvePoint, Curves, Mark};

/// One of the pictures that tell a stream's story.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Picture {
    /// Who is still waiting.
    Waiting,
    /// How much longer there is to wait.
    Remaining,
    /// What each give-up time earns.
    Rate,
    /// What holding on is worth.
    Holding,
}

impl Picture {
    /// In the order in which they are told.
    pub const ALL: [Picture; 4] = [Picture::Waiting, Picture::Remaining, Picture::Rate, Picture::Holding];

    /// Its name in file names and addresses.
    pub fn name(self) -> &'static str {
        match self {
            Picture::Waiting => "waiting",
            Picture::Remaining => "remaining",
            Picture::Rate => "rate",
            Picture::Holding => "holding",
        }
    }

    /// The inverse of [`Picture::name`].
    pub fn parse(name: &str) -> Option<Picture> {
        Picture::ALL.into_iter().find(|picture| picture.name() == name)
    }

    /// Draws it. Where the curves do not say enough, the picture says why.
    pub fn draw(self, curves: &Curves, frame: &Frame<'_>) -> Svg {
        let (stream, level) = (curves.stream.as_str(), curves.level);
        let marks = Marks { advised: time(curves.advised), in_force: time(curves.now) };
        let ages = ages(curves, &marks);
        let points = |value: fn(&CurvePoint) -> Option<Point>| -> Vec<Point> {
            curves.points.iter().filter_map(value).collect()
        };
        match self {
            Picture::Waiting => {
                let curve = points(|p| Some(banded(p.age_s, p.survival, p.survival_band)));
                let Curves { waits, steps, .. } = *curves;
                waiting(&Waiting { stream, waits, ages, curve: &curve, steps, level, marks }, frame)
            }
            Picture::Remaining => {
                let curve = points(|p| {
                    let band = p.remaining_band_s?.map(endless);
                    Some(banded(p.age_s, endless(p.remaining_s), Some(band)))
                });
                let (trend, upto) = (curves.remaining_wait, endless(curves.remaining_upto_s));
                remaining(&Remaining { stream, ages, curve: &curve, level, marks, trend, upto }, frame)
            }
            Picture::Rate => {
                let curve = points(|p| Some(banded(p.age_s, p.rate_per_s?, p.rate_band_per_s)));
                let rivals: Vec<Rival<'_>> = curves
                    .rivals
                    .iter()
                    .map(|r| Rival { name: &r.rule, age: endless(r.give_up_after_s), rate: r.rate_per_s })
                    .collect();
                let input = Rate {
                    stream,
                    ages,
                    curve: &curve,
                    level,
                    marks,
                    earned: [curves.advised, curves.now].map(|mark| mark?.rate_per_s),
                    as_good: curves.band_s,
                    rivals: &rivals,
                    quantity: quantity(curves.aim.as_deref()),
                };
                rate(&input, frame)
            }
            Picture::Holding => {
                let curve: Vec<[f64; 2]> =
                    curves.points.iter().filter_map(|p| Some([p.age_s, p.holding_on?])).collect();
                let unit = match curves.aim.as_deref() {
                    Some("finish") => "completions",
                    Some("deadline") => "probability",
                    _ => "worth",
                };
                holding(&Holding { stream, ages, curve: &curve, marks, unit }, frame)
            }
        }
    }
}

/// What the rate of an aim ([`Curves::aim`]) is.
pub(crate) fn quantity(aim: Option<&str>) -> Quantity<'static> {
    match aim {
        Some("finish") => Quantity::PerTime("completions"),
        Some("carrying_cost") => Quantity::Number("worth per attempt"),
        Some("deadline") => Quantity::Number("probability of being done in time"),
        _ => Quantity::PerTime("worth"),
    }
}

/// Where a post would stand in the first twentieth of the path it counts as the middle, so that the path is logarithmic.
fn ages(curves: &Curves, marks: &Marks) -> Ages {
    let end = curves.points.last().map_or(f64::NAN, |p| p.age_s);
    let posts = [marks.advised, marks.in_force].into_iter().flatten();
    let middle = posts.fold(curves.median_s.unwrap_or(end), f64::min);
    Ages { start: curves.start_s.unwrap_or(end), middle, end, sight: curves.sight_s.unwrap_or(f64::INFINITY) }
}

fn time(mark: Option<Mark>) -> Option<f64> {
    mark.map(|mark| endless(mark.give_up_after_s))
}

fn endless(time: Option<f64>) -> f64 {
    time.unwrap_or(f64::INFINITY)
}

fn banded(age: f64, value: f64, band: Option<[f64; 2]>) -> Point {
    Point { age, value, band }
}
