//! Log-likelihood of a law over exact, interval-censored, right-censored and left-truncated observations
//! together. METHODS.md section 3.

use super::law::Law;
use crate::tally::{Interval, Sample};

/// Most free coordinates a law may have; fixes the size of the small arrays of the fit.
pub(crate) const MAX_DIMENSION: usize = 8;

/// An interval narrower than this share of its age is read as a point with a density. There the difference of
/// two survivals has lost half its digits, while the middle of the interval is good to the square of its width.
const NARROW: f64 = 1e-6;

/// Below this share of the waits a cell in the lower tail is read by its density too: next to 1 a survival has no
/// finer steps than 1e-16. Cells as unlikely hold outliers, for which the middle is as good as any age.
const FAINT: f64 = 1e-9;

/// A law with a never share is far from any ending here, in units of its own scale.
const FAR: f64 = 1e12;

/// `Σ_exact ln f(x) + Σ_interval ln(S(over) - S(upto)) + Σ_right ln S(c) - Σ ln S(entry)`, in nats.
///
/// Densities are per unit of the sample's ages. `-∞` where an observation is impossible under the law; never
/// NaN, whatever the weights (which may reach 1e12 and more).
pub fn log_likelihood(law: &dyn Law, sample: &Sample) -> f64 {
    Likelihood::new(sample).value(law)
}

/// [`log_likelihood`] with its gradient in the law's free coordinates, written to `gradient`, whose length is
/// the law's dimension (at most 8). Where the value is `-∞` the gradient means nothing.
pub fn log_likelihood_gradient(law: &dyn Law, sample: &Sample, gradient: &mut [f64]) -> f64 {
    Likelihood::new(sample).gradient(law, gradient)
}

/// What one group of equal observations adds to a log-likelihood.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Term {
    /// Nats per observation.
    pub(crate) value: f64,
    pub(crate) weight: f64,
}

/// The terms of [`log_likelihood`] one by one: events, censored, entries.
pub(crate) fn terms<'a>(law: &'a dyn Law, sample: &'a Sample) -> impl Iterator<Item = Term> + 'a {
    let events = sample.events.iter().map(move |e| {
        let value = if narrow(e) {
            let width = e.upto - e.over;
            law.log_density(0.5 * (e.over + e.upto)) + if width > 0.0 { width.ln() } else { 0.0 }
        } else {
            let end = if e.upto.is_finite() { law.log_survival(e.upto) } else { never(law).ln() };
            let start = law.log_survival(e.over);
            start - odds(start, end).ln_1p()
        };
        Term { value, weight: e.weight }
    });
    let censored = sample.censored.iter().map(|m| Term { value: law.log_survival(m.age), weight: m.weight });
    let entries = sample.entries.iter().map(|m| Term { value: -law.log_survival(m.age), weight: m.weight });
    events.chain(censored).chain(entries)
}

/// A sample laid out for many evaluations: every age at which a survival is needed stands once, in order.
#[derive(Clone, Debug, Default)]
pub(crate) struct Likelihood {
    /// Distinct positive ages, ascending, and their logarithms.
    ages: Vec<f64>,
    log_ages: Vec<f64>,
    /// Weight of `ln S` at each age: censored waits, less entries.
    tails: Vec<f64>,
    /// Events between two of the ages.
    between: Vec<Between>,
    /// Events some time after one of the ages (the last bucket of a histogram): its index, and the weight.
    open: Vec<(Option<usize>, f64)>,
    /// Exact events: age and weight.
    points: Vec<(f64, f64)>,
    /// What the widths of narrow intervals add.
    constant: f64,
    /// Scratch: `ln S` and its gradient at each age, and the weight with which each gradient counts.
    values: Vec<f64>,
    gradients: Vec<f64>,
    pulls: Vec<f64>,
    /// Scratch: faint cells as points with a width.
    faint: Vec<(f64, f64, f64)>,
}

#[derive(Clone, Copy, Debug)]
struct Between {
    /// Index of the lower age; `None` for 0.
    over: Option<usize>,
    upto: usize,
    weight: f64,
}

impl Likelihood {
    pub(crate) fn new(sample: &Sample) -> Likelihood {
        let mut l = Likelihood::default();
        let bounds = sample.events.iter().filter(|e| !narrow(e)).flat_map(|e| [e.over, e.upto]);
        let masses = sample.censored.iter().chain(&sample.entries).map(|m| m.age);
        l.ages = bounds.chain(masses).filter(|&t| t > 0.0 && t.is_finite()).collect();
        l.ages.sort_by(f64::total_cmp);
        l.ages.dedup();
        l.log_ages = l.ages.iter().map(|t| t.ln()).collect();
        let place = |ages: &[f64], t: f64| ages.binary_search_by(|a| a.total_cmp(&t)).ok();
        l.tails = vec![0.0; l.ages.len()];
        for (masses, sign) in [(&sample.censored, 1.0), (&sample.entries, -1.0)] {
            for m in masses {
                if let Some(i) = place(&l.ages, m.age) {
                    l.tails[i] += sign * m.weight;
                }
            }
        }
        for e in sample.events.iter().filter(|e| e.weight > 0.0) {
            if narrow(e) {
                l.points.push((0.5 * (e.over + e.upto), e.weight));
                if e.over < e.upto {
                    l.constant += e.weight * (e.upto - e.over).ln();
                }
            } else if let Some(upto) = place(&l.ages, e.upto) {
                l.between.push(Between { over: place(&l.ages, e.over), upto, weight: e.weight });
            } else {
                l.open.push((place(&l.ages, e.over), e.weight));
            }
        }
        l.values = vec![0.0; l.ages.len()];
        l.pulls = vec![0.0; l.ages.len()];
        l
    }

    /// The log-likelihood; `-∞` where the law cannot be.
    pub(crate) fn value(&mut self, law: &dyn Law) -> f64 {
        for (value, &t) in self.values.iter_mut().zip(&self.ages) {
            *value = law.log_survival(t);
        }
        let far = if self.open.is_empty() { 0.0 } else { never(law) };
        let mut total = self.constant + self.weigh(far);
        total += self.points.iter().map(|&(t, weight)| weight * law.log_density(t)).sum::<f64>();
        for &(t, width, weight) in &self.faint {
            total += weight * (law.log_density(t) + width.ln());
        }
        proper(total)
    }

    /// The log-likelihood from survivals computed together, several times faster: right to about 1e-9 of each
    /// cell's weight over its probability, which is plenty to weigh a draw. Falls back to [`Likelihood::value`]
    /// where that is not enough.
    pub(crate) fn quick_value(&mut self, law: &dyn Law) -> f64 {
        law.survival_on(&self.ages, &self.log_ages, &mut self.values);
        let at = |index| self.share_at(index);
        let mut total = self.constant;
        for (value, &weight) in self.values.iter().zip(&self.tails) {
            if weight != 0.0 {
                total += weight * value.ln();
            }
        }
        for b in &self.between {
            let share = at(b.over) - self.values[b.upto];
            total += b.weight
                * if share < FAINT && at(b.over) > 0.5 {
                    let (middle, width) = self.point(b);
                    law.log_density(middle) + width.ln()
                } else {
                    share.ln()
                };
        }
        for &(over, weight) in &self.open {
            total += weight * (at(over) - never(law)).ln();
        }
        total += self.points.iter().map(|&(t, weight)| weight * law.log_density(t)).sum::<f64>();
        if total.is_finite() { total } else { self.value(law) }
    }

    /// The log-likelihood and its gradient.
    pub(crate) fn gradient(&mut self, law: &dyn Law, gradient: &mut [f64]) -> f64 {
        let n = gradient.len();
        let mut row = [0.0; MAX_DIMENSION];
        gradient.fill(0.0);
        let mut total = self.constant;
        for &(t, weight) in &self.points {
            total += weight * law.log_density_gradient(t, &mut row[..n]);
            add(gradient, weight, &row);
        }
        self.gradients.resize(n * self.ages.len(), 0.0);
        if !self.ages.is_empty() {
            law.log_survival_gradient_on(&self.ages, &self.log_ages, &mut self.values, &mut self.gradients);
        }
        let far = if self.open.is_empty() { 0.0 } else { never(law) };
        total += self.weigh(far);
        for &(t, width, weight) in &self.faint {
            total += weight * (law.log_density_gradient(t, &mut row[..n]) + width.ln());
            add(gradient, weight, &row);
        }
        for (row, &pull) in self.gradients.chunks_exact(n.max(1)).zip(&self.pulls) {
            // Where S has vanished its gradient may be infinite, and weighs nothing.
            if pull != 0.0 {
                add(gradient, pull, row);
            }
        }
        if far > 0.0 {
            law.log_survival_gradient(FAR * law.scale(), &mut row[..n]);
            for &(over, weight) in &self.open {
                add(gradient, -weight * odds(self.at(over), far.ln()), &row);
            }
        }
        if gradient.iter().all(|g| g.is_finite()) { proper(total) } else { f64::NEG_INFINITY }
    }

    /// [`Likelihood::gradient`] from survivals instead of their logarithms, which takes one logarithm a cell instead of
    /// several functions an age: right to about 1e-7 of a nat, which is plenty to find a maximum to
    /// [`super::fit::COARSE`]. Falls back to the other where a cell has lost too many digits.
    pub(crate) fn quick_gradient(&mut self, law: &dyn Law, gradient: &mut [f64]) -> f64 {
        let n = gradient.len();
        self.gradients.resize(n * self.ages.len(), 0.0);
        law.survival_gradient_on(&self.ages, &self.log_ages, &mut self.values, &mut self.gradients);
        let far = if self.open.is_empty() { 0.0 } else { never(law) };
        let Some(mut total) = self.weigh_shares(far) else { return self.gradient(law, gradient) };
        gradient.fill(0.0);
        let mut row = [0.0; MAX_DIMENSION];
        for &(t, weight) in &self.points {
            total += weight * law.log_density_gradient(t, &mut row[..n]);
            add(gradient, weight, &row);
        }
        for (row, &pull) in self.gradients.chunks_exact(n.max(1)).zip(&self.pulls) {
            add(gradient, pull, row);
        }
        if far > 0.0 {
            law.log_survival_gradient(FAR * law.scale(), &mut row[..n]);
            for &(over, weight) in &self.open {
                add(gradient, -weight * far / (self.share_at(over) - far), &row);
            }
        }
        let sound = total.is_finite() && gradient.iter().all(|g| g.is_finite());
        if sound { proper(self.constant + total) } else { self.gradient(law, gradient) }
    }

    /// [`Likelihood::weigh`] where `values` holds survivals: `pulls` then are derivatives by those. Nothing where a
    /// difference of two has lost too many digits.
    fn weigh_shares(&mut self, never: f64) -> Option<f64> {
        let mut total = 0.0;
        for ((pull, s), &weight) in self.pulls.iter_mut().zip(&self.values).zip(&self.tails) {
            *pull = 0.0;
            if weight != 0.0 {
                total += weight * s.ln();
                *pull = weight / s;
            }
        }
        for i in 0..self.between.len() {
            let Between { over, upto, weight } = self.between[i];
            let from = self.share_at(over);
            let share = from - self.values[upto];
            if share <= FAINT * from {
                return None;
            }
            let pull = weight / share;
            total += weight * share.ln();
            self.pulls[upto] -= pull;
            if let Some(over) = over {
                self.pulls[over] += pull;
            }
        }
        for &(over, weight) in &self.open {
            let share = over.map_or(1.0, |i| self.values[i]) - never;
            total += weight * share.ln();
            if let Some(over) = over {
                self.pulls[over] += weight / share;
            }
        }
        Some(total)
    }

    fn share_at(&self, index: Option<usize>) -> f64 {
        index.map_or(1.0, |i| self.values[i])
    }

    /// Middle and width of a cell.
    fn point(&self, cell: &Between) -> (f64, f64) {
        let (from, to) = (cell.over.map_or(0.0, |i| self.ages[i]), self.ages[cell.upto]);
        (0.5 * (from + to), to - from)
    }

    fn at(&self, index: Option<usize>) -> f64 {
        index.map_or(0.0, |i| self.values[i])
    }

    /// The terms in `ln S`, from `values`; leaves in `pulls` the derivative by each of them, and in `faint` the cells
    /// that it left out.
    fn weigh(&mut self, never: f64) -> f64 {
        self.pulls.copy_from_slice(&self.tails);
        self.faint.clear();
        let mut total = 0.0;
        for (value, &weight) in self.values.iter().zip(&self.tails) {
            if weight != 0.0 {
                total += weight * value;
            }
        }
        for i in 0..self.between.len() {
            let Between { over, upto, weight } = self.between[i];
            let (from, to) = (self.at(over), self.values[upto]);
            if from > -0.5 && from - to < FAINT {
                let (middle, width) = self.point(&self.between[i]);
                self.faint.push((middle, width, weight));
                continue;
            }
            let odds = odds(from, to);
            total += weight * (from - odds.ln_1p());
            self.pulls[upto] -= weight * odds;
            if let Some(over) = over {
                self.pulls[over] += weight * (1.0 + odds);
            }
        }
        for &(over, weight) in &self.open {
            let (from, to) = (over.map_or(0.0, |i| self.values[i]), never.ln());
            let odds = odds(from, to);
            total += weight * (from - odds.ln_1p());
            if let Some(over) = over {
                self.pulls[over] += weight * (1.0 + odds);
            }
        }
        total
    }
}

/// Share that never ends, 0 for most laws.
fn never(law: &dyn Law) -> f64 {
    law.never().max(0.0)
}

/// No observation is certain to infinity, and none is NaN.
fn proper(log_likelihood: f64) -> f64 {
    if log_likelihood < f64::INFINITY { log_likelihood } else { f64::NEG_INFINITY }
}

/// Whether an event is as good as exact.
fn narrow(e: &Interval) -> bool {
    e.upto.is_finite() && e.upto - e.over <= NARROW * e.upto
}

fn add(sum: &mut [f64], weight: f64, term: &[f64]) {
    for (s, t) in sum.iter_mut().zip(term) {
        *s += weight * t;
    }
}

/// `S_u/(S_l - S_u)` from the logarithms. It gives both the value and the slope of an interval's term:
/// `ln(S_l - S_u) = ln S_l - ln(1 + odds)` and `∇ ln(S_l - S_u) = (1 + odds) ∇ln S_l - odds ∇ln S_u`.
fn odds(from: f64, to: f64) -> f64 {
    1.0 / (from - to).exp_m1()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tail::Family;
    use crate::tail::families::{Lognormal, TwoLognormals, WithNever};
    use crate::tally::Mass;

    fn mixed() -> Sample {
        let one = |over, upto, weight| Interval { over, upto, weight };
        let events = vec![
            one(0.0, 0.2, 3.0),
            one(0.2, 0.7, 8.0),
            one(0.9, 0.9, 1.0),
            one(0.7, 1.1, 1e12),
            one(1.3, 1.3 + 1e-8, 2.0),
            one(2.0, f64::INFINITY, 4.0),
        ];
        let mass = |age, weight| Mass { age, weight };
        Sample { events, censored: vec![mass(0.7, 2.0), mass(3.0, 5.0)], entries: vec![mass(0.2, 4.0)] }
    }

    /// The layout against the plain sum of terms.
    #[test]
    fn all_ways_agree() {
        let sample = mixed();
        let cases: [(&dyn Family, &[f64]); 3] = [
            (&Lognormal, &[0.1, -0.2]),
            (&TwoLognormals, &[0.3, -0.5, -0.4, 0.5, 0.2]),
            (&WithNever(Lognormal), &[0.1, -0.2, -3.0]),
        ];
        for (family, x) in cases {
            let law = family.law(x).unwrap();
            let slow: f64 = terms(law.as_ref(), &sample).map(|t| t.weight * t.value).sum();
            let mut fast = Likelihood::new(&sample);
            let mut gradient = vec![0.0; x.len()];
            for value in [fast.value(law.as_ref()), fast.gradient(law.as_ref(), &mut gradient)] {
                assert!((value / slow - 1.0).abs() < 1e-12, "{} {value} {slow}", family.name());
            }
            let mut quickly = vec![0.0; x.len()];
            for quick in [fast.quick_value(law.as_ref()), fast.quick_gradient(law.as_ref(), &mut quickly)] {
                assert!((quick / slow - 1.0).abs() < 1e-8, "{} {quick} {slow}", family.name());
            }
            for (a, b) in quickly.iter().zip(&gradient) {
                assert!(
                    (a - b).abs() <= 1e-8 * (1.0 + b.abs()),
                    "{} {quickly:?} {gradient:?}",
                    family.name()
                );
            }
        }
    }

    /// Where a survival cannot be told from 1, a cell is read by its density: the value goes on smoothly.
    #[test]
    fn outliers_far_below_the_bulk() {
        let sample = Sample {
            events: vec![Interval { over: 0.99e-9, upto: 1.01e-9, weight: 1.0 }],
            ..Sample::default()
        };
        for (mu, sd) in [(0.0, 3.0), (0.0, 1.5), (0.0, 0.8)] {
            let law = TwoLognormals.law(&[0.3, mu, f64::ln(sd), mu, f64::ln(sd)]).unwrap();
            let exact = law.log_density(1e-9) + f64::ln(0.02e-9);
            let value = log_likelihood(law.as_ref(), &sample);
            assert!((value - exact).abs() < 2e-3 * exact.abs(), "{value} {exact}");
        }
    }

    #[test]
    fn impossible_is_minus_infinity() {
        let law = crate::tail::families::ParetoTail { threshold: 1.0 }.law(&[-0.5, 0.0]).unwrap();
        let event =
            |t: f64| Sample { events: vec![Interval { over: t, upto: t, weight: 1.0 }], ..Sample::default() };
        for t in [0.5, 4.0] {
            assert_eq!(log_likelihood(law.as_ref(), &event(t)), f64::NEG_INFINITY);
            assert_eq!(log_likelihood_gradient(law.as_ref(), &event(t), &mut [0.0; 2]), f64::NEG_INFINITY);
        }
    }
}
