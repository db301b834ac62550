//! Maximum of a smooth function of a few coordinates by the BFGS method, finished by a Newton step, with an
//! account of why it stopped. Nocedal & Wright, *Numerical Optimization* (2006), chapters 3 and 6.

use super::likelihood::MAX_DIMENSION;
use super::symmetric::{Eigen, Symmetric, dot};

/// A point in free coordinates; entries past the dimension are 0.
pub(crate) type Point = [f64; MAX_DIMENSION];

/// Why a maximiser stopped. Checked, not believed: see [`Stop::Converged`].
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stop {
    /// The gradient is negligible and the curvature says that this is a maximum, with room on every side.
    Converged,
    /// The likelihood has no maximum inside: it is flat or rising as this coordinate runs off, so that the law is
    /// at a limit of its family. The value is right to the tolerance, the coordinate is not an estimate.
    Boundary {
        /// Index of the coordinate in the family's order.
        coordinate: usize,
    },
    /// The budget ended, or no step made progress, away from a maximum.
    Stalled,
    /// The search was given up far below what would have counted: the family is out of the question.
    Hopeless,
    /// The function has no finite value near the start.
    NotFinite,
}

/// What the search found.
#[derive(Clone, Debug)]
pub(crate) struct Maximum {
    pub(crate) at: Point,
    pub(crate) value: f64,
    /// Minus the matrix of second derivatives.
    pub(crate) information: Symmetric,
    pub(crate) stop: Stop,
    /// Evaluations spent.
    pub(crate) evaluations: usize,
}

/// What is to be maximised: its value, with the gradient written to the slice; `-∞` outside its domain.
pub(crate) trait Objective {
    fn evaluate(&mut self, at: &[f64], gradient: &mut [f64]) -> f64;
}

impl<F: FnMut(&[f64], &mut [f64]) -> f64> Objective for F {
    fn evaluate(&mut self, at: &[f64], gradient: &mut [f64]) -> f64 {
        self(at, gradient)
    }
}

/// What a further Newton step may still promise at a maximum, nats: the coordinates are then within a
/// thousandth of their standard errors.
const CONVERGED: f64 = 1e-6;
/// What a long step along directions without curvature may still promise at a limit of the family, in units of
/// [`Terrain::gain`].
const LEVEL: f64 = 20.0;
/// Newton steps go on to this promise, since one costs a single evaluation.
const POLISHED: f64 = 1e-10;
/// Relative rounding of a sum over cells, allowed for when values are compared.
const ROUNDING: f64 = 1e-14;
/// Below this curvature (nats per unit squared: a standard error above 30) a coordinate is not determined.
pub(crate) const FLAT: f64 = 1e-3;
/// Most evaluations in one search.
const BUDGET: usize = 400;
/// A climb from a second start is given up after so many evaluations, when so many times its promise would not
/// bring it to the first's height.
const PATIENCE: usize = 15;
const HOPE: f64 = 10.0;
/// The same for any climb that would not come to [`Terrain::least`]. In simulation one fit in a
/// thousand that would have come there was lost.
const PATIENCE_AT_ALL: usize = 8;
const HOPE_AT_ALL: f64 = 100.0;
/// Steps in a row that may gain less than [`Terrain::gain`], for all their promise.
const MOST_IDLE: usize = 2;
/// Newton steps after a climb, and climbs in all.
const NEWTON_STEPS: usize = 4;
const ROUNDS: usize = 3;
/// Longest step in any coordinate, or half of the way from 0 to where it is.
const LONGEST: f64 = 2.0;
/// Sufficient increase, and the share of its slope that a step may leave (weak Wolfe conditions).
const ARMIJO: f64 = 1e-4;
const CURVATURE: f64 = 0.9;
/// Step of the central differences, in units of the width that one observation leaves a coordinate; the error
/// of the curvature is about its square, relative.
const DIFFERENCE: f64 = 1e-4;

/// What is known of a search beforehand.
#[derive(Clone, Debug)]
pub(crate) struct Terrain {
    /// Walls of each coordinate; the search may slide along them.
    pub(crate) walls: Vec<(f64, f64)>,
    /// Curvature to expect of each coordinate: the number of events for the logarithm of a parameter. It sets the
    /// first step only.
    pub(crate) curvature: Vec<f64>,
    /// The climb ends when a further step promises less than this, nats. Where there is a maximum inside, Newton
    /// steps finish the rest; at a limit of the family this is how near the limit it gets.
    pub(crate) gain: f64,
    /// A value below this is of no use.
    pub(crate) least: f64,
}

/// Climbs from `start`. A climb that is well under way and far below `bar`, a value found from another start, is
/// given up.
pub(crate) fn maximise(objective: &mut dyn Objective, start: &[f64], terrain: &Terrain, bar: f64) -> Maximum {
    let mut search = Search::new(objective, start, terrain, bar);
    if !search.value.is_finite() {
        return search.leave(Stop::NotFinite);
    }
    let mut inverse = Symmetric::zero(search.n);
    for (i, curvature) in terrain.curvature.iter().enumerate() {
        inverse.set(i, i, 1.0 / curvature);
    }
    let mut scaled = false;
    loop {
        let done = match search.climb(&mut inverse, scaled) {
            End::Hopeless => return search.leave(Stop::Hopeless),
            end => end == End::Top,
        };
        let mut information = search.information(&inverse);
        let eigen = information.eigen();
        let gain = if eigen.least().0 > FLAT { search.polish(&eigen) } else { search.slope_of_flats(&eigen) };
        let arrived = gain <= if eigen.least().0 > FLAT { CONVERGED } else { LEVEL * terrain.gain };
        if arrived || gain.is_nan() || search.evaluations >= BUDGET || search.rounds >= ROUNDS {
            let stop = search.judge(&eigen, done, arrived);
            if stop == Stop::Converged && terrain.gain <= CONVERGED {
                // The last steps were long enough to show in the standard errors' fifth digit.
                information = search.information(&inverse);
            }
            let Search { at, value, evaluations, .. } = search;
            return Maximum { at, value, information, stop, evaluations };
        }
        // The climb believed too early that it had arrived: go on with the curvature as it is, upwards in any case.
        inverse = eigen.rebuild(|v| 1.0 / v.abs().max(FLAT));
        scaled = true;
        search.rounds += 1;
    }
}

/// How a climb ended.
#[derive(Clone, Copy, PartialEq)]
enum End {
    /// A further step promises nothing.
    Top,
    /// No step makes progress, or the budget is spent.
    Stuck,
    /// It will not reach the bar, or nothing of use.
    Hopeless,
}

struct Search<'a> {
    objective: &'a mut dyn Objective,
    terrain: &'a Terrain,
    bar: f64,
    n: usize,
    at: Point,
    value: f64,
    gradient: Point,
    evaluations: usize,
    rounds: usize,
}

impl<'a> Search<'a> {
    fn new(objective: &'a mut dyn Objective, start: &[f64], terrain: &'a Terrain, bar: f64) -> Search<'a> {
        let n = start.len();
        let mut at = [0.0; MAX_DIMENSION];
        for (i, (x, &s)) in at.iter_mut().zip(start).enumerate() {
            *x = s.clamp(terrain.walls[i].0, terrain.walls[i].1);
        }
        let mut search = Search {
            objective,
            terrain,
            bar,
            n,
            at,
            value: 0.0,
            gradient: [0.0; MAX_DIMENSION],
            evaluations: 0,
            rounds: 0,
        };
        (search.value, search.gradient) = search.evaluate(&at);
        search
    }

    fn evaluate(&mut self, at: &Point) -> (f64, Point) {
        self.evaluations += 1;
        let mut gradient = [0.0; MAX_DIMENSION];
        let value = self.objective.evaluate(&at[..self.n], &mut gradient[..self.n]);
        (if value.is_nan() { f64::NEG_INFINITY } else { value }, gradient)
    }

    /// Whether the coordinate is at a wall and would go through it.
    fn walled(&self, i: usize) -> bool {
        let (low, high) = self.terrain.walls[i];
        (self.at[i] <= low && self.gradient[i] < 0.0) || (self.at[i] >= high && self.gradient[i] > 0.0)
    }

    /// The gradient with what points through a wall left out.
    fn free_gradient(&self) -> Point {
        let mut gradient = self.gradient;
        for (i, g) in gradient.iter_mut().enumerate().take(self.n) {
            if self.walled(i) {
                *g = 0.0;
            }
        }
        gradient
    }

    /// BFGS until a further step promises nothing. `scaled` says that `inverse` is a
    /// measured curvature and not just a unit.
    fn climb(&mut self, inverse: &mut Symmetric, mut scaled: bool) -> End {
        let fresh = inverse.clone();
        let start = scaled;
        let mut idle = 0;
        while self.evaluations < BUDGET {
            let gradient = self.free_gradient();
            let mut step = inverse.times(&gradient[..self.n]);
            for (i, s) in step.iter_mut().enumerate().take(self.n) {
                if self.walled(i) {
                    *s = 0.0;
                }
            }
            let mut slope = dot(&gradient, &step);
            let promise = 0.5 * slope;
            if promise == 0.0 || (scaled && promise <= self.terrain.gain.max(ROUNDING * self.value.abs())) {
                return End::Top;
            }
            let below = |bar: f64, patience, hope: f64| {
                self.evaluations >= patience && self.value + hope * promise < bar
            };
            if below(self.bar, PATIENCE, HOPE) || below(self.terrain.least, PATIENCE_AT_ALL, HOPE_AT_ALL) {
                return End::Hopeless;
            }
            // Long steps are for coordinates that are far out already.
            let length = |(s, x): (&f64, &f64)| s.abs() / LONGEST.max(0.5 * x.abs());
            let longest = step.iter().zip(&self.at).map(length).fold(1.0, f64::max);
            step.iter_mut().for_each(|s| *s /= longest);
            slope /= longest;
            let Some((at, value, next)) = self.line(&step, slope) else {
                if scaled == start {
                    return End::Stuck;
                }
                inverse.clone_from(&fresh);
                scaled = start;
                continue;
            };
            idle = if value - self.value > self.terrain.gain { 0 } else { idle + 1 };
            let (mut moved, mut turned) = ([0.0; MAX_DIMENSION], [0.0; MAX_DIMENSION]);
            for i in 0..self.n {
                moved[i] = at[i] - self.at[i];
                turned[i] = self.gradient[i] - next[i];
            }
            (self.at, self.value, self.gradient) = (at, value, next);
            scaled |= update(inverse, &moved, &turned, !scaled);
            if idle > MOST_IDLE {
                return End::Top;
            }
        }
        End::Stuck
    }

    /// The search as it stands, without a look at the curvature.
    fn leave(self, stop: Stop) -> Maximum {
        let Search { at, value, evaluations, n, .. } = self;
        Maximum { at, value, information: Symmetric::zero(n), stop, evaluations }
    }

    /// A step along `step` that meets the weak Wolfe conditions, by bisection and doubling (Lewis & Overton
    /// 2013); the best point seen when they cannot be met; `None` without progress.
    fn line(&mut self, step: &Point, slope: f64) -> Option<(Point, f64, Point)> {
        let noise = ROUNDING * self.value.abs();
        let (mut low, mut high, mut t) = (0.0, f64::INFINITY, 1.0);
        let mut best: Option<(Point, f64, Point)> = None;
        for _ in 0..40 {
            let mut at = self.at;
            for i in 0..self.n {
                at[i] = (self.at[i] + t * step[i]).clamp(self.terrain.walls[i].0, self.terrain.walls[i].1);
            }
            if at == self.at {
                break;
            }
            let (value, gradient) = self.evaluate(&at);
            let after = dot(&gradient, step);
            if value >= self.value + ARMIJO * t * slope - noise && value.is_finite() {
                let better = best.as_ref().is_none_or(|b| value >= b.1);
                if better {
                    best = Some((at, value, gradient));
                }
                if after <= CURVATURE * slope || !better || t >= 16.0 {
                    break;
                }
                low = t;
                t = if high.is_finite() { 0.5 * (low + high) } else { 2.0 * t };
            } else {
                if best.is_some() {
                    break;
                }
                high = t;
                // Top of the parabola through both values and the slope, kept away from the ends.
                let drop = self.value + t * slope - value;
                let vertex = if drop.is_finite() { 0.5 * slope * t * t / drop } else { 0.0 };
                t = vertex.clamp(low + 0.1 * (high - low), low + 0.5 * (high - low));
            }
        }
        best
    }

    /// Newton steps with a fixed curvature; what a further one would still gain.
    fn polish(&mut self, information: &Eigen) -> f64 {
        let mut gain = f64::INFINITY;
        for _ in 0..NEWTON_STEPS {
            let gradient = self.free_gradient();
            let step = information.apply(|v| 1.0 / v, &gradient[..self.n]);
            gain = 0.5 * dot(&gradient, &step);
            if gain <= POLISHED || step.iter().any(|s| s.abs() > 1.0) {
                break;
            }
            let mut at = self.at;
            for i in 0..self.n {
                at[i] = (at[i] + step[i]).clamp(self.terrain.walls[i].0, self.terrain.walls[i].1);
            }
            let (value, next) = self.evaluate(&at);
            if value < self.value - ROUNDING * self.value.abs() {
                break;
            }
            (self.at, self.value, self.gradient) = (at, value, next);
        }
        gain
    }

    /// What a step of [`LONGEST`] along the directions without curvature would gain.
    fn slope_of_flats(&self, information: &Eigen) -> f64 {
        let gradient = self.free_gradient();
        let along = information.apply(|v| if v > FLAT { 0.0 } else { LONGEST }, &gradient[..self.n]);
        dot(&along, &along).sqrt()
    }

    fn judge(&self, information: &Eigen, climbed: bool, arrived: bool) -> Stop {
        if let Some(coordinate) = (0..self.n).find(|&i| self.walled(i)) {
            return Stop::Boundary { coordinate };
        }
        let (least, coordinate) = information.least();
        let rounding = !arrived && self.promise(information) <= ROUNDING * self.value.abs();
        match (arrived || rounding, least > FLAT) {
            (true, true) => Stop::Converged,
            // Flat where a law reaches its limit; curved upwards where the search was left at a saddle.
            (true, false) if climbed && least > -1.0 => Stop::Boundary { coordinate },
            _ => Stop::Stalled,
        }
    }

    /// What a Newton step would gain, directions without curvature left out.
    fn promise(&self, information: &Eigen) -> f64 {
        let gradient = self.free_gradient();
        let step = information.apply(|v| if v > FLAT { 1.0 / v } else { 0.0 }, &gradient[..self.n]);
        0.5 * dot(&gradient, &step)
    }

    /// Minus the second derivatives, by differences of the gradient: central ones, or one-sided where the climb is a
    /// coarse one, whose curvature need not be known to more than [`DIFFERENCE`], relative.
    fn information(&mut self, inverse: &Symmetric) -> Symmetric {
        let (n, coarse) = (self.n, self.terrain.gain > CONVERGED);
        let rows: Vec<Point> = (0..n)
            .map(|i| {
                let width = (inverse.get(i, i).max(0.0) * self.terrain.curvature[i]).sqrt();
                let step = DIFFERENCE * width.clamp(0.01, 10.0);
                let (mut up, mut down) = (self.at, self.at);
                up[i] += step;
                down[i] -= step;
                // Beyond a wall the function is not what it is inside.
                let (low, high) = self.terrain.walls[i];
                let mut beside = |x: &Point| {
                    let (value, gradient) = self.evaluate(x);
                    (value.is_finite() && low <= x[i] && x[i] <= high).then_some(gradient)
                };
                let above = beside(&up);
                let below = if coarse && above.is_some() { None } else { beside(&down) };
                std::array::from_fn(|j| match (above, below) {
                    (Some(above), Some(below)) => (below[j] - above[j]) / (2.0 * step),
                    (Some(above), None) => (self.gradient[j] - above[j]) / step,
                    (None, Some(below)) => (below[j] - self.gradient[j]) / step,
                    (None, None) => f64::NAN,
                })
            })
            .collect();
        let mut information = Symmetric::zero(n);
        for (i, row) in rows.iter().enumerate() {
            for (j, other) in rows.iter().enumerate().take(i + 1) {
                information.set(i, j, 0.5 * (row[j] + other[i]));
            }
        }
        information
    }
}

/// The BFGS update of the inverse curvature, for a step `s` and the change `y` of minus the gradient; skipped
/// (`false`) where the function is not concave along the step.
fn update(inverse: &mut Symmetric, s: &Point, y: &Point, first: bool) -> bool {
    let n = inverse.size();
    let (sy, yy) = (dot(s, y), dot(y, y));
    if sy.is_nan() || sy <= 1e-12 * (dot(s, s) * yy).sqrt() {
        return false;
    }
    let mut hy = inverse.times(&y[..n]);
    if first {
        // The guess had the shape of the inverse; now its size is known.
        let size = sy / dot(y, &hy);
        for i in 0..n {
            for j in 0..=i {
                inverse.set(i, j, size * inverse.get(i, j));
            }
        }
        hy = inverse.times(&y[..n]);
    }
    let factor = (1.0 + dot(y, &hy) / sy) / sy;
    for i in 0..n {
        for j in 0..=i {
            let value = inverse.get(i, j) + factor * s[i] * s[j] - (hy[i] * s[j] + s[i] * hy[j]) / sy;
            inverse.set(i, j, value);
        }
    }
    true
}

#[cfg(test)]
mod tests {
    use super::*;

    fn terrain(n: usize) -> Terrain {
        Terrain {
            walls: vec![(-13.8, 13.8); n],
            curvature: vec![1.0; n],
            gain: 1e-6,
            least: f64::NEG_INFINITY,
        }
    }

    #[test]
    fn gives_up_where_the_top_is_of_no_use() {
        let mut valley = |x: &[f64], g: &mut [f64]| {
            let (a, b) = (1.0 - x[0], x[1] - x[0] * x[0]);
            (g[0], g[1]) = (2.0 * a + 400.0 * x[0] * b, -200.0 * b);
            -a * a - 100.0 * b * b
        };
        let low =
            maximise(&mut valley, &[-1.2, 1.0], &Terrain { least: 1e5, ..terrain(2) }, f64::NEG_INFINITY);
        assert_eq!(low.stop, Stop::Hopeless);
        let enough = Terrain { least: -30.0, ..terrain(2) };
        assert_eq!(maximise(&mut valley, &[-1.2, 1.0], &enough, f64::NEG_INFINITY).stop, Stop::Converged);
    }

    /// Minus Rosenbrock's valley (1960): the classic of curved ridges.
    #[test]
    fn climbs_a_curved_ridge() {
        let mut f = |x: &[f64], g: &mut [f64]| {
            let (a, b) = (1.0 - x[0], x[1] - x[0] * x[0]);
            g[0] = 2.0 * a + 400.0 * x[0] * b;
            g[1] = -200.0 * b;
            -(a * a + 100.0 * b * b)
        };
        let top = maximise(&mut f, &[-1.2, 1.0], &terrain(2), f64::NEG_INFINITY);
        assert_eq!(top.stop, Stop::Converged, "{top:?}");
        assert!(top.value > -1e-8 && (top.at[0] - 1.0).abs() < 1e-4, "{top:?}");
        // Second derivatives by hand: 802, -400, 200.
        assert!(
            (top.information.get(0, 0) - 802.0).abs() < 0.2
                && (top.information.get(0, 1) + 400.0).abs() < 0.1
        );
        assert!(top.evaluations < 80, "{}", top.evaluations);
    }

    #[test]
    fn names_what_is_not_a_maximum() {
        // Rises to a limit: the coordinate runs off.
        let mut limit = |x: &[f64], g: &mut [f64]| {
            g[0] = (-x[0]).exp();
            g[1] = -2.0 * (x[1] - 1.0);
            -g[0] - (x[1] - 1.0).powi(2)
        };
        let top = maximise(&mut limit, &[0.0, 0.0], &terrain(2), f64::NEG_INFINITY);
        assert_eq!(top.stop, Stop::Boundary { coordinate: 0 }, "{top:?}");
        assert!(top.value > -1e-4 && (top.at[1] - 1.0).abs() < 1e-3);
        // A wall in the way.
        let walled = Terrain {
            walls: vec![(-1.0, 0.5); 1],
            curvature: vec![1.0],
            gain: 1e-6,
            least: f64::NEG_INFINITY,
        };
        let mut hill = |x: &[f64], g: &mut [f64]| {
            g[0] = -(x[0] - 2.0);
            -0.5 * (x[0] - 2.0).powi(2)
        };
        let top = maximise(&mut hill, &[0.0], &walled, f64::NEG_INFINITY);
        assert_eq!((top.stop, top.at[0]), (Stop::Boundary { coordinate: 0 }, 0.5));
        // No value at all; a saddle, exactly.
        let mut nothing = |_: &[f64], _: &mut [f64]| f64::NAN;
        assert_eq!(maximise(&mut nothing, &[0.0], &terrain(1), f64::NEG_INFINITY).stop, Stop::NotFinite);
        let mut saddle = |x: &[f64], g: &mut [f64]| {
            (g[0], g[1]) = (-2.0 * x[0], 10.0 * x[1]);
            5.0 * x[1] * x[1] - x[0] * x[0]
        };
        assert_eq!(maximise(&mut saddle, &[0.3, 0.0], &terrain(2), f64::NEG_INFINITY).stop, Stop::Stalled);
    }

    /// A second start far below the first's height is given up soon.
    #[test]
    fn gives_up_a_hopeless_start() {
        let mut slow = |x: &[f64], g: &mut [f64]| {
            g[0] = -4.0 * (x[0] - 5.0).powi(3);
            -(x[0] - 5.0).powi(4)
        };
        let alone = maximise(&mut slow, &[-5.0], &terrain(1), f64::NEG_INFINITY);
        let beaten = maximise(&mut slow, &[-5.0], &terrain(1), 1e9);
        assert!(
            (alone.at[0] - 5.0).abs() < 0.1 && beaten.evaluations <= PATIENCE + 2,
            "{alone:?} {beaten:?}"
        );
    }
}
