//! A sample reduced to about 75 cells, so that a fit costs the same whatever was counted; and the rough facts
//! of a sample from which fits start. RECIPE's first section; METHODS.md section 3.

use super::law::About;
use crate::curve::{KaplanMeier, LifeTable};
use crate::tally::{Interval, Mass, Sample};

/// Quantile levels spaced evenly on the logit scale: they resolve both tails.
const LOGIT_LEVELS: usize = 50;
/// Quantile levels spaced evenly: they resolve the bulk.
const EVEN_LEVELS: usize = 24;
/// Intervals, censored ages and entries are left as they are while there are at most this many.
const FEW: usize = 100;
/// A cell reaches this far, as a share, below its first and above its last exact age. It also keeps the
/// likelihood bounded where a mixture would put a spike on one age.
const MARGIN: f64 = 1e-3;
/// Fewest events in which a gap means anything.
const CROWD: f64 = 8.0;
/// A gap or overlap below this share of the narrower neighbour is none.
const CRACK: f64 = 0.05;
/// Endings at which a gap is sought, at most about so many: between two of them the curve drops by less than
/// half a percent.
pub(crate) const ENDINGS: usize = 256;
/// Least spread assumed for logarithms, so that starts stay in reach when all ages are equal.
const LEAST_LOG_SD: f64 = 0.05;

/// The sample in about 75 cells of events, with few censored ages and entries.
pub(crate) fn condense(sample: &Sample) -> Sample {
    Sample {
        events: condense_events(&sample.events),
        censored: condense_masses(&sample.censored),
        entries: condense_masses(&sample.entries),
    }
}

/// Median of the events, s: the age that half of their weight does not exceed. `None` without events.
pub(crate) fn median(sample: &Sample) -> Option<f64> {
    let half = 0.5 * sample.event_count();
    let mut below = 0.0;
    let at = sample.events.iter().find(|e| {
        below += e.weight;
        e.weight > 0.0 && below >= half
    })?;
    Some(middle(at))
}

/// An age that stands for an interval: its middle, or its lower end where it has no upper one.
pub(crate) fn middle(cell: &Interval) -> f64 {
    if cell.upto.is_finite() { 0.5 * (cell.over + cell.upto) } else { cell.over }
}

/// The levels at which a sample of weight `n` is cut, sorted.
fn levels(n: f64) -> Vec<f64> {
    let reach = n.max(2.0).ln();
    let logit = (0..LOGIT_LEVELS)
        .map(|i| 1.0 / (1.0 + (-reach * (2.0 * i as f64 / (LOGIT_LEVELS - 1) as f64 - 1.0)).exp()));
    let even = (1..=EVEN_LEVELS).map(|i| i as f64 / (EVEN_LEVELS + 1) as f64);
    let mut levels: Vec<f64> = logit.chain(even).collect();
    levels.sort_by(f64::total_cmp);
    levels
}

/// Splits weights, in order of age, into runs between levels; gives the run of each.
fn runs(weights: impl Iterator<Item = f64>, n: f64) -> impl Iterator<Item = usize> {
    let levels = levels(n);
    let (mut below, mut run) = (0.0, 0);
    weights.map(move |weight| {
        let rank = (below + 0.5 * weight) / n;
        below += weight;
        while run < levels.len() && levels[run] < rank {
            run += 1;
        }
        run
    })
}

/// Joins neighbouring events into cells, each shrunk to what it holds: gaps must be seen as empty.
fn condense_events(events: &[Interval]) -> Vec<Interval> {
    let widen = |e: &Interval| {
        if e.over == e.upto {
            Interval { over: e.upto * (1.0 - MARGIN), upto: e.upto * (1.0 + MARGIN), weight: e.weight }
        } else {
            *e
        }
    };
    // Endings in the last, open bucket stay apart.
    let (closed, open): (Vec<Interval>, Vec<Interval>) =
        events.iter().filter(|e| e.weight > 0.0).map(widen).partition(|e| e.upto.is_finite());
    if events.len() <= FEW && events.iter().all(|e| e.over < e.upto) {
        return closed.into_iter().chain(open).collect();
    }
    let n = closed.iter().map(|e| e.weight).sum();
    let mut cells = Vec::with_capacity(LOGIT_LEVELS + EVEN_LEVELS + 1);
    let run: Vec<usize> = runs(closed.iter().map(|e| e.weight), n).collect();
    let mut from = 0;
    for upto in 1..=closed.len() {
        if upto == closed.len() || run[upto] != run[from] {
            join(&closed[from..upto], &mut cells);
            from = upto;
        }
    }
    close_cracks(&mut cells);
    cells.extend(open);
    cells
}

/// Joins a run of events into one cell, or into two where a gap takes up more than half of it: that many
/// events of one bulk leave such a gap once in twenty times or less.
fn join(run: &[Interval], cells: &mut Vec<Interval>) {
    let weight: f64 = run.iter().map(|e| e.weight).sum();
    let (mut over, mut upto) = (f64::INFINITY, 0.0_f64);
    let (mut widest, mut at) = (1.0, 0);
    for (i, e) in run.iter().enumerate() {
        if i > 0 && e.over / upto > widest {
            (widest, at) = (e.over / upto, i);
        }
        over = over.min(e.over);
        upto = upto.max(e.upto);
    }
    if at > 0 && weight >= CROWD && widest * widest > upto / over {
        join(&run[..at], cells);
        join(&run[at..], cells);
    } else {
        cells.push(Interval { over, upto, weight });
    }
}

/// Where neighbouring cells all but touch, as they do in the bulk of a large sample, gives them one common bound:
/// the crack is no gap, and half as many survivals are wanted.
fn close_cracks(cells: &mut [Interval]) {
    for i in 1..cells.len() {
        let (before, after) = (cells[i - 1], cells[i]);
        let crack = (after.over - before.upto).abs();
        if crack <= CRACK * (before.upto - before.over).min(after.upto - after.over) {
            let bound = 0.5 * (before.upto + after.over);
            cells[i - 1].upto = bound;
            cells[i].over = bound;
        }
    }
}

/// Joins neighbouring masses at their mean age, which is exact to first order.
fn condense_masses(masses: &[Mass]) -> Vec<Mass> {
    if masses.len() <= FEW {
        return masses.to_vec();
    }
    let n = masses.iter().map(|m| m.weight).sum();
    let mut groups: Vec<Mass> = Vec::with_capacity(LOGIT_LEVELS + EVEN_LEVELS + 1);
    let mut last = usize::MAX;
    for (m, run) in masses.iter().zip(runs(masses.iter().map(|m| m.weight), n)) {
        match groups.last_mut() {
            Some(group) if run == last => {
                group.weight += m.weight;
                group.age += (m.age - group.age) * (m.weight / group.weight);
            }
            _ => groups.push(*m),
        }
        last = run;
    }
    groups
}

/// Product-limit curve of a sample just after its endings, as plain columns: what fits are held against.
#[derive(Clone, Debug, Default)]
pub(crate) struct ProductLimit {
    /// Ages of endings, s; an interval counts at its upper end.
    pub(crate) ages: Vec<f64>,
    /// `Ŝ` just after each.
    pub(crate) survival: Vec<f64>,
    /// Weight at risk just before each.
    pub(crate) at_risk: Vec<f64>,
}

impl ProductLimit {
    /// The Kaplan-Meier curve; empty where the sample allows none (all endings in one bucket).
    pub(crate) fn of(sample: &Sample) -> ProductLimit {
        let mut curve = ProductLimit::default();
        if let Ok(table) = LifeTable::of_sample(sample) {
            for point in KaplanMeier::of(&table).points() {
                curve.push(point.time, point.survival, point.at_risk);
            }
        }
        curve
    }

    fn push(&mut self, age: f64, survival: f64, at_risk: f64) {
        self.ages.push(age);
        self.survival.push(survival);
        self.at_risk.push(at_risk);
    }

    /// The curve of the waits that outlive `threshold`.
    pub(crate) fn beyond(&self, threshold: f64) -> ProductLimit {
        let first = self.ages.partition_point(|&age| age <= threshold);
        let kept = self.at(threshold);
        ProductLimit {
            ages: self.ages[first..].to_vec(),
            survival: self.survival[first..].iter().map(|s| s / kept).collect(),
            at_risk: self.at_risk[first..].to_vec(),
        }
    }

    /// The same curve at about `n` of its endings, or all if there are no more; the last is kept.
    pub(crate) fn thinned(&self, n: usize) -> ProductLimit {
        if self.ages.len() <= n {
            return self.clone();
        }
        let step = (1.0 - self.end()) / n as f64;
        let mut thin = ProductLimit::default();
        let mut goal = 1.0;
        for i in 0..self.ages.len() {
            if self.survival[i] <= goal || i + 1 == self.ages.len() {
                thin.push(self.ages[i], self.survival[i], self.at_risk[i]);
                goal = self.survival[i] - step;
            }
        }
        thin
    }

    /// Last age with at least `n` at risk just before it; `None` where there never are.
    pub(crate) fn last_with(&self, n: f64) -> Option<f64> {
        self.at_risk.iter().rposition(|&r| r >= n).map(|i| self.ages[i])
    }

    /// `Ŝ(t)`, right-continuous.
    pub(crate) fn at(&self, t: f64) -> f64 {
        match self.ages.partition_point(|&age| age <= t) {
            0 => 1.0,
            i => self.survival[i - 1],
        }
    }

    /// `Ŝ` after the last ending.
    pub(crate) fn end(&self) -> f64 {
        self.survival.last().copied().unwrap_or(1.0)
    }

    /// The share of those that end within sight that has ended is at least `p` from this age on, s.
    fn completion_quantile(&self, p: f64) -> f64 {
        let goal = 1.0 - p * (1.0 - self.end());
        let i = self.survival.partition_point(|&s| s > goal);
        self.ages.get(i).or(self.ages.last()).copied().unwrap_or(0.0)
    }
}

impl About {
    /// Rough facts of a sample, in its unit. `None` without events.
    pub fn of(sample: &Sample) -> Option<About> {
        About::with(sample, &ProductLimit::of(sample))
    }

    pub(crate) fn with(sample: &Sample, curve: &ProductLimit) -> Option<About> {
        let events = sample.event_count();
        let typical = median(sample).filter(|_| events > 0.0)?;
        let masses = |m: &[Mass]| m.iter().map(|m| m.age * m.weight).sum::<f64>();
        let exposure = sample.events.iter().map(|e| middle(e) * e.weight).sum::<f64>()
            + masses(&sample.censored)
            - masses(&sample.entries);
        // All events may lie in one open bucket.
        let point = |p: f64| Some(curve.completion_quantile(p)).filter(|&t| t > 0.0).unwrap_or(typical);
        let (mut weight, mut log_mean, mut square, mut before) = (0.0, 0.0, 0.0, 1.0);
        for (&age, &survival) in curve.ages.iter().zip(&curve.survival) {
            let mass = before - survival;
            before = survival;
            if mass > 0.0 && age > 0.0 {
                weight += mass;
                let step = age.ln() - log_mean;
                log_mean += step * mass / weight;
                square += mass * step * (age.ln() - log_mean);
            }
        }
        let (log_mean, log_sd) =
            if weight > 0.0 { (log_mean, (square / weight).sqrt()) } else { (typical.ln(), 0.0) };
        Some(About {
            mean: if exposure > 0.0 { exposure / events } else { typical },
            low: point(0.1),
            median: point(0.5),
            high: point(0.9),
            log_mean,
            log_sd: log_sd.max(LEAST_LOG_SD),
            left: curve.end().min(1.0 - f64::EPSILON),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn exact(ages: impl IntoIterator<Item = f64>) -> Sample {
        let events = ages.into_iter().map(|t| Interval { over: t, upto: t, weight: 1.0 }).collect();
        Sample { events, ..Sample::default() }
    }

    #[test]
    fn condenses_to_about_75_cells_and_keeps_every_wait() {
        let sample = exact((1..=10_000).map(|i| (f64::from(i) / 1000.0).exp()));
        let condensed = condense(&sample);
        let cells = &condensed.events;
        assert!((60..=75).contains(&cells.len()), "{}", cells.len());
        assert_eq!(condensed.event_count(), 10_000.0);
        let first = cells[0];
        assert!((first.over / (0.001_f64.exp() * 0.999) - 1.0).abs() < 1e-12);
        // The thinnest cells, at both ends, hold single waits.
        assert!(first.weight <= 2.0 && cells[cells.len() - 1].weight <= 2.0);
    }

    #[test]
    fn gaps_are_empty() {
        let sample = exact(
            (0..500).map(|i| 1.0 + f64::from(i) / 1e4).chain((0..500).map(|i| 100.0 + f64::from(i) / 1e2)),
        );
        let condensed = condense(&sample);
        let covers = |t: f64| condensed.events.iter().any(|e| e.over < t && t < e.upto);
        assert!(covers(1.02) && covers(104.0) && !covers(50.0) && !covers(1.2) && !covers(90.0));
    }

    #[test]
    fn many_censored_ages_keep_their_exposure() {
        let censored: Vec<Mass> =
            (1..=5000).map(|i| Mass { age: f64::from(i), weight: f64::from(i % 7) + 1.0 }).collect();
        let few = condense_masses(&censored);
        assert!(few.len() <= 75);
        let exposure = |m: &[Mass]| m.iter().map(|m| m.age * m.weight).sum::<f64>();
        assert!((exposure(&few) / exposure(&censored) - 1.0).abs() < 1e-12);
        assert!(few.windows(2).all(|w| w[0].age < w[1].age));
    }

    #[test]
    fn product_limit_of_a_textbook_sample() {
        // Remission under 6-MP (Freireich et al. 1963; Klein & Moeschberger, Survival Analysis, table 4.1).
        let mut sample = exact([6.0, 7.0, 10.0, 13.0, 16.0, 22.0, 23.0]);
        sample.events[0].weight = 3.0;
        sample.censored = [6.0, 9.0, 10.0, 11.0, 17.0, 19.0, 20.0, 25.0, 32.0, 34.0, 35.0]
            .iter()
            .map(|&age| Mass { age, weight: if age == 32.0 { 2.0 } else { 1.0 } })
            .collect();
        let curve = ProductLimit::of(&sample);
        for (t, s) in [(6.0, 0.857), (10.0, 0.753), (16.0, 0.627), (23.0, 0.448), (40.0, 0.448)] {
            assert!((curve.at(t) - s).abs() < 5e-4, "{t}: {}", curve.at(t));
        }
        assert_eq!(curve.at(5.9), 1.0);
        let about = About::of(&sample).unwrap();
        assert!((about.mean - 359.0 / 9.0).abs() < 1e-12);
        assert!((about.left - 0.448).abs() < 5e-4);
    }

    #[test]
    fn late_entries_join_the_risk_set() {
        let mut sample = exact([1.0, 2.0, 3.0]);
        sample.entries = vec![Mass { age: 1.5, weight: 1.0 }];
        let curve = ProductLimit::of(&sample);
        assert_eq!(curve.at_risk, [2.0, 2.0, 1.0]);
    }
}
