//! Profile-likelihood intervals: the values of one parameter that the data do not contradict, whatever the
//! others are. Right where the likelihood is lopsided, as it is in a tail index (Venzon & Moolgavkar 1988;
//! Coles 2001, section 2.6.6). METHODS.md section 4.

use statrs::function::erf::erfc_inv;

use super::fit::{Evidence, Fit, FitError, Peak};
use super::law::{Family, Kind};
use super::maximise::{Objective, Terrain, maximise};
use crate::numeric::root;
use crate::tally::Sample;

/// Interval of the natural parameter `name` at confidence `level` (in (0, 1), e.g. 0.95), from a fit of `family`
/// to `sample`.
///
/// An end is at the limit of the parameter's range (0, infinity, -1 for a tail index) where the likelihood never
/// falls far enough on that side. `None` for a name or level that is not one, or a parameter that is not
/// searched (a shift).
///
/// # Errors
/// [`FitError`] as for [`super::fit()`].
pub fn profile_interval(
    sample: &Sample,
    family: &dyn Family,
    fit: &Fit,
    name: &str,
    level: f64,
) -> Result<Option<(f64, f64)>, FitError> {
    Evidence::new(sample).map(|mut evidence| interval(&mut evidence, family, fit, name, level))
}

/// [`profile_interval`] on prepared data.
pub(crate) fn interval(
    evidence: &mut Evidence,
    family: &dyn Family,
    fit: &Fit,
    name: &str,
    level: f64,
) -> Option<(f64, f64)> {
    let coordinates = family.coordinates();
    let index = coordinates.iter().position(|c| c.name == name)?;
    if !(0.0..1.0).contains(&level) {
        return None;
    }
    // Half the quantile of chi-squared with one degree, which is half a squared normal quantile.
    let fall = erfc_inv(1.0 - level).powi(2);
    let (least, most) = match coordinates[index].kind {
        Kind::Shape | Kind::Scale | Kind::Rate => (0.0, f64::INFINITY),
        Kind::Share => (0.0, 1.0),
        Kind::Index if name == "xi" => (-1.0, f64::INFINITY),
        Kind::Index | Kind::Location | Kind::LogLocation => (f64::NEG_INFINITY, f64::INFINITY),
    };
    let terrain = evidence.terrain(family, Some(index));
    let bounds = evidence.walls(&coordinates[index]);
    let mut profile =
        Profile { evidence, family, peak: &fit.peak, index, others: without(&fit.peak.at, index), terrain };
    let mut side = |direction: f64| {
        let x = profile.end(direction, fall, bounds)?;
        coordinates[index].natural(profile.peak.frame.free_at(index, x))
    };
    Some((side(-1.0).unwrap_or(least), side(1.0).unwrap_or(most)))
}

/// The likelihood as a function of one coordinate, the others at their best.
struct Profile<'a> {
    evidence: &'a mut Evidence,
    family: &'a dyn Family,
    peak: &'a Peak,
    index: usize,
    /// Where the others were best last time.
    others: Vec<f64>,
    terrain: Terrain,
}

/// Doublings of the first step before a side counts as open: a million standard errors.
const DOUBLINGS: usize = 20;
/// Relative accuracy of the distance from the maximum to an end.
const ACCURACY: f64 = 1e-5;

impl Profile<'_> {
    /// How far the best log-likelihood at `x` lies below the maximum, nats, at most 1e6.
    fn fall(&mut self, x: f64) -> f64 {
        let (index, terrain) = (self.index, &self.terrain);
        let mut climb = self.evidence.climb(self.family, &self.peak.frame);
        let mut whole = vec![x; self.peak.at.len()];
        let mut slopes = whole.clone();
        let mut objective = |others: &[f64], gradient: &mut [f64]| {
            let place = |i: usize| if i < index { i } else { i + 1 };
            others.iter().enumerate().for_each(|(i, &other)| whole[place(i)] = other);
            let value = climb.evaluate(&whole, &mut slopes);
            gradient.iter_mut().enumerate().for_each(|(i, g)| *g = slopes[place(i)]);
            value
        };
        let best = if self.others.is_empty() {
            objective(&[], &mut [])
        } else {
            let found = maximise(&mut objective, &self.others, terrain, f64::NEG_INFINITY);
            if found.value.is_finite() {
                let n = self.others.len();
                self.others.copy_from_slice(&found.at[..n]);
            }
            found.value
        };
        (self.peak.value - best).min(1e6)
    }

    /// Where the fall reaches `goal`, going up or down; `None` where it never does.
    fn end(&mut self, direction: f64, goal: f64, bounds: (f64, f64)) -> Option<f64> {
        let middle = self.peak.at[self.index];
        self.others = without(&self.peak.at, self.index);
        let variance =
            self.peak.information.eigen().rebuild(|v| 1.0 / v.max(1e-2)).get(self.index, self.index);
        let room = if direction > 0.0 { bounds.1 - middle } else { middle - bounds.0 };
        let (mut near, mut far) = (0.0, (2.0 * goal * variance).sqrt().min(room));
        for _ in 0..DOUBLINGS {
            if self.fall(middle + direction * far) >= goal {
                let this = std::cell::RefCell::new(self);
                // At the maximum itself nothing has fallen, whatever rounding says there.
                let fall =
                    |d: f64| if d > 0.0 { this.borrow_mut().fall(middle + direction * d) } else { 0.0 };
                let excess = |d: f64| fall(d) - goal;
                return root(&excess, near, far, ACCURACY).ok().map(|d| middle + direction * d);
            }
            if far >= room {
                return None;
            }
            (near, far) = (far, (2.0 * far).min(room));
        }
        None
    }
}

fn without(x: &[f64], index: usize) -> Vec<f64> {
    let mut rest = x.to_vec();
    rest.remove(index);
    rest
}
