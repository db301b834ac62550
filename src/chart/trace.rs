//! A curve as points: made sound, cut to an axis, thinned to what a screen can show, read at an age.

use super::scale::HUGE;

/// A curve at one age.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Point {
    /// Time waited so far, s. A point at no finite age is left out.
    pub age: f64,
    /// What the curve is there; may be infinite; a point that is no number is left out.
    pub value: f64,
    /// Its band, low and high; either may be infinite.
    pub band: Option<[f64; 2]>,
}

impl Point {
    /// A point without a band.
    pub fn new(age: f64, value: f64) -> Point {
        Point { age, value, band: None }
    }

    /// The same with a band.
    pub fn between(self, low: f64, high: f64) -> Point {
        Point { band: Some([low, high]), ..self }
    }
}

/// Points by age that can be drawn, as a curve of straight lines or of steps.
pub(super) struct Trace {
    points: Vec<Point>,
    steps: bool,
}

impl Trace {
    /// Keeps what can be drawn, in order of age.
    pub(super) fn of(points: &[Point], steps: bool) -> Trace {
        let sound = |p: &&Point| p.age.is_finite() && p.age >= 0.0 && !p.value.is_nan();
        let mut points: Vec<Point> = points.iter().filter(sound).copied().collect();
        points.sort_by(|a, b| a.age.total_cmp(&b.age));
        for p in &mut points {
            p.value = within(p.value);
            p.band = p
                .band
                .filter(|band| !band.iter().any(|b| b.is_nan()))
                .map(|[a, b]| if a <= b { [a, b] } else { [b, a] }.map(within));
        }
        Trace { points, steps }
    }

    pub(super) fn points(&self) -> &[Point] {
        &self.points
    }

    /// Whether there is a line to draw: two ages at least.
    pub(super) fn is_line(&self) -> bool {
        matches!((self.points.first(), self.points.last()), (Some(a), Some(b)) if a.age < b.age)
    }

    /// Whether any point past the first has a band.
    pub(super) fn has_band(&self) -> bool {
        self.points.iter().skip(1).any(|p| p.band.is_some())
    }

    /// The least age above 0.
    pub(super) fn first_age(&self) -> Option<f64> {
        self.points.iter().map(|p| p.age).find(|a| *a > 0.0)
    }

    /// The largest age.
    pub(super) fn last_age(&self) -> Option<f64> {
        self.points.last().map(|p| p.age)
    }

    /// The curve at an age between its first and its last.
    pub(super) fn at(&self, age: f64) -> Option<Point> {
        let after = self.points.partition_point(|p| p.age <= age);
        let left = *self.points.get(after.checked_sub(1)?)?;
        let Some(right) = self.points.get(after) else {
            return (left.age == age).then_some(left);
        };
        if self.steps || left.age == age {
            return Some(Point { age, ..left });
        }
        let part = (age - left.age) / (right.age - left.age);
        let mix = |a: f64, b: f64| match (a.is_finite(), b.is_finite()) {
            (true, true) => a + part * (b - a),
            (false, _) => a,
            (_, false) => b,
        };
        let band = left.band.zip(right.band).map(|([a, b], [c, d])| [mix(a, c), mix(b, d)]);
        Some(Point { age, value: mix(left.value, right.value), band })
    }

    /// The stretch between two ages, its ends included.
    pub(super) fn cut(&self, from: f64, to: f64) -> Trace {
        let inside = self.points.iter().filter(|p| p.age > from && p.age < to);
        let points = self.at(from).into_iter().chain(inside.copied()).chain(self.at(to)).collect();
        Trace { points: if from < to { points } else { Vec::new() }, steps: self.steps }
    }

    /// At most four points a column (first, last, lowest, highest): what a screen can show of any number.
    pub(super) fn thinned(&self, column: impl Fn(f64) -> i64) -> Trace {
        let mut points: Vec<Point> = Vec::new();
        let columns = self.points.chunk_by(|a, b| column(a.age) == column(b.age));
        for same in columns {
            let by_value = |a: &(usize, &Point), b: &(usize, &Point)| a.1.value.total_cmp(&b.1.value);
            let at = |found: Option<(usize, &Point)>| found.map_or(0, |(i, _)| i);
            let mut kept = [
                0,
                at(same.iter().enumerate().min_by(by_value)),
                at(same.iter().enumerate().max_by(by_value)),
                same.len() - 1,
            ];
            kept.sort_unstable();
            for (i, &k) in kept.iter().enumerate() {
                if i == 0 || kept[i - 1] != k {
                    points.push(same[k]);
                }
            }
        }
        Trace { points, steps: self.steps }
    }

    /// The line through a reading of the points: ages and values.
    pub(super) fn line(&self, read: impl Fn(&Point) -> f64) -> Vec<(f64, f64)> {
        let mut line: Vec<(f64, f64)> = Vec::with_capacity(self.points.len());
        for p in &self.points {
            let value = read(p);
            if let Some(&(_, last)) = line.last().filter(|_| self.steps) {
                line.push((p.age, last));
            }
            line.push((p.age, value));
        }
        line
    }

    /// Runs of neighbouring points that have a band.
    pub(super) fn banded(&self) -> impl Iterator<Item = Trace> + '_ {
        let runs = self.points.chunk_by(|a, b| a.band.is_some() == b.band.is_some());
        runs.filter(|run| run.len() > 1 && run[0].band.is_some())
            .map(|run| Trace { points: run.to_vec(), steps: self.steps })
    }
}

/// Finite values stay where their differences are finite too.
fn within(value: f64) -> f64 {
    if value.is_finite() { value.clamp(-HUGE, HUGE) } else { value }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn reads_between_and_cuts() {
        let wild = [
            Point::new(2.0, 10.0).between(12.0, 8.0),
            Point::new(f64::NAN, 1.0),
            Point::new(1.0, 0.0).between(0.0, f64::INFINITY),
            Point::new(3.0, f64::NAN),
        ];
        let trace = Trace::of(&wild, false);
        let middle = trace.at(1.5).unwrap();
        assert_eq!((middle.value, middle.band), (5.0, Some([4.0, f64::INFINITY])));
        assert!(trace.at(0.5).is_none() && trace.at(2.5).is_none());
        assert_eq!(trace.cut(0.0, 1.5).last_age(), Some(1.5));
        assert_eq!(Trace::of(&wild, true).at(1.5).unwrap().value, 0.0);
        assert!(Trace::of(&[], false).at(1.0).is_none());
    }

    #[test]
    fn thins_without_losing_the_extremes() {
        let many: Vec<Point> =
            (0..100_000).map(|i| Point::new(f64::from(i), if i == 54_321 { 9.0 } else { 1.0 })).collect();
        let thin = Trace::of(&many, false).thinned(|age| (age / 1000.0) as i64);
        assert!(thin.points().len() <= 400);
        assert!(thin.points().iter().any(|p| p.value == 9.0));
        assert_eq!(thin.last_age(), Some(99_999.0));
    }
}
