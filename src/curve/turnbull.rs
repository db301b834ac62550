//! Endings known to lie between bounds that overlap: the self-consistent estimate. METHODS.md section 2.

use super::life_table::{CurveError, Others, Parts, Row};
use crate::tally::{Mass, Sample};

/// When the iteration stops. A round is three steps of the algorithm, each linear in cells and intervals.
#[derive(Clone, Copy)]
struct Stop {
    /// Settled: by the concavity of the likelihood it can rise by no more than this, in nats per wait.
    gap: f64,
    /// Rounds at most.
    budget: usize,
    /// A gap that will still do when the budget ends.
    tolerable: f64,
}

/// For the estimate itself.
const STRICT: Stop = Stop { gap: 1e-10, budget: 3_000, tolerable: 1e-6 };

/// For a life table. A gap of 1e-6 moves a share of waits by at most 0.0007, one of 1e-4 by 0.007 (Pinsker's
/// inequality). Layouts that interlock finely do not determine the curve between their bounds: on the last
/// digits of the likelihood it would only sharpen into spikes there.
const TABLE: Stop = Stop { gap: 1e-6, budget: 3_000, tolerable: 1e-4 };

/// The nonparametric maximum likelihood estimate where endings are known only to lie in intervals.
#[derive(Clone, Debug, PartialEq)]
pub struct Turnbull {
    /// The intervals that can hold mass, in order of age, with the probability of each; those of no mass are
    /// left out. Where in its interval the mass lies, the data do not say.
    pub masses: Vec<Support>,
    /// Probability of outlasting all of them.
    pub beyond: f64,
    /// Log-likelihood, nats.
    pub log_likelihood: f64,
    /// Rounds used.
    pub iterations: usize,
    /// Bound on what the log-likelihood still lacks, nats per wait.
    pub gap: f64,
}

/// One interval `(over, upto]` (exact where equal) and its probability.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Support {
    /// Lower bound, s.
    pub over: f64,
    /// Upper bound, s.
    pub upto: f64,
    /// Probability that a wait ends in it.
    pub mass: f64,
}

impl Turnbull {
    /// `S(t)`; straight within an interval, where it is not determined.
    pub fn survival(&self, t: f64) -> f64 {
        let mut survival = 1.0;
        for s in &self.masses {
            if s.upto <= t {
                survival -= s.mass;
            } else if s.over < t {
                survival -= s.mass * (t - s.over) / (s.upto - s.over);
            }
        }
        survival.max(0.0)
    }
}

/// Turnbull's estimate (Turnbull 1976, *JRSS B* 38:290), with the mass on his innermost intervals, those with a
/// lower bound and an upper bound and no bound between. Censored ages are lower bounds; late entries are upper
/// bounds (Frydman 1994, *JRSS B* 56:71).
///
/// Solved by expectation-maximisation in the hazards, where right-censoring and late entry need no sharing
/// out, with the extrapolation of Varadhan & Roland (2008, *Scand. J. Statist.* 35:335, scheme S3). It has
/// settled when the gradient proves the likelihood within 1e-10 nats per wait of its greatest (Böhning 1995);
/// with late entries, where the likelihood may have several maxima, when it is a stationary point to that
/// tolerance. The budget is 3000 rounds; what they end with is taken if the gap is below 1e-6.
///
/// # Errors
/// [`CurveError`]; [`CurveError::NotSettled`] when the budget ends above that gap.
pub fn turnbull(sample: &Sample) -> Result<Turnbull, CurveError> {
    let parts = Parts::of_sample(sample)?;
    if parts.events.is_empty() {
        return Ok(Turnbull {
            masses: Vec::new(),
            beyond: 1.0,
            log_likelihood: 0.0,
            iterations: 0,
            gap: 0.0,
        });
    }
    let solution = settle(&parts, &innermost(&parts, &parts.censored, &parts.entries), STRICT)?;
    let mut survival = 1.0;
    let mut masses = Vec::with_capacity(solution.rows.len());
    for r in &solution.rows {
        let mass = survival * r.ended() / r.at_risk;
        masses.push(Support { over: r.over, upto: r.upto, mass });
        survival *= 1.0 - r.ended() / r.at_risk;
    }
    Ok(Turnbull {
        masses,
        beyond: survival,
        log_likelihood: solution.log_likelihood,
        iterations: solution.iterations,
        gap: solution.gap,
    })
}

/// What the iteration ends with.
#[derive(Clone, Debug)]
pub(super) struct Solution {
    pub(super) rows: Vec<Row>,
    pub(super) iterations: usize,
    pub(super) gap: f64,
    log_likelihood: f64,
}

/// Shares the endings of overlapping cells out among disjoint intervals, for a life table.
///
/// The intervals are bounded by endings alone. Turnbull's would be cut by censored ages too, and then put all
/// mass after the cut: a timeout inside a bucket would make the last waits that ended in it end after it,
/// and be followed by everyone else. Here, as in any life table, endings precede the censorings in their
/// interval.
pub(super) fn share_out(parts: &Parts) -> Result<Solution, CurveError> {
    settle(parts, &innermost(parts, &[], &[]), TABLE)
}

/// A bound, ordered so that an exact ending at an age comes before a closed upper bound there, and that before
/// an open lower bound.
type Key = (f64, u8);
const EXACT: u8 = 0;
const UPPER: u8 = 1;
const LOWER: u8 = 2;

fn lower_key(over: f64, upto: f64) -> Key {
    (over, if over == upto { EXACT } else { LOWER })
}

fn before(a: Key, b: Key) -> bool {
    a.0 < b.0 || (a.0 == b.0 && a.1 < b.1)
}

/// The intervals from a lower bound to an upper bound with no bound between, that some event can lie in.
fn innermost(parts: &Parts, lower: &[Mass], upper: &[Mass]) -> Vec<(f64, f64)> {
    let mut bounds: Vec<Key> = Vec::with_capacity(2 * parts.events.len() + lower.len() + upper.len());
    for e in &parts.events {
        bounds.push(lower_key(e.over, e.upto));
        bounds.push((e.upto, UPPER));
    }
    bounds.extend(lower.iter().map(|m| (m.age, LOWER)));
    bounds.extend(upper.iter().map(|m| (m.age, UPPER)));
    bounds.sort_by(|a, b| a.0.total_cmp(&b.0).then(a.1.cmp(&b.1)));
    let mut intervals: Vec<(f64, f64)> =
        bounds.windows(2).filter(|w| w[0].1 != UPPER && w[1].1 == UPPER).map(|w| (w[0].0, w[1].0)).collect();
    let mut covered = vec![0_i64; intervals.len() + 1];
    for e in &parts.events {
        let (from, to) = range(&intervals, e.over, e.upto);
        covered[from] += 1;
        covered[to] -= 1;
    }
    let mut depth = 0;
    let mut cover = covered.iter().map(|step| {
        depth += step;
        depth > 0
    });
    intervals.retain(|_| cover.next().unwrap_or(false));
    intervals
}

/// The intervals that lie inside `(over, upto]`, as a range of indices.
fn range(intervals: &[(f64, f64)], over: f64, upto: f64) -> (usize, usize) {
    let key = lower_key(over, upto);
    let from = intervals.partition_point(|&(o, u)| before(lower_key(o, u), key));
    let to = intervals.partition_point(|&(_, u)| u <= upto);
    (from, to.max(from))
}

/// One cell of events as seen by the iteration.
struct Seen {
    from: usize,
    to: usize,
    weight: [f64; 2],
}

struct Problem<'a> {
    intervals: &'a [(f64, f64)],
    seen: Vec<Seen>,
    others: Others,
    /// Number of waits, and of those watched from age 0.
    total: f64,
    from_zero: f64,
}

/// Probability of each interval, by ending, and of outlasting them all.
#[derive(Clone)]
struct Masses {
    each: Vec<[f64; 2]>,
    beyond: f64,
}

fn settle(parts: &Parts, intervals: &[(f64, f64)], stop: Stop) -> Result<Solution, CurveError> {
    let seen: Vec<Seen> = parts
        .events
        .iter()
        .map(|e| {
            let (from, to) = range(intervals, e.over, e.upto);
            Seen { from, to, weight: [e.done, e.failed] }
        })
        .collect();
    let others = Others::new(parts, intervals.len(), |i| intervals[i]);
    let events: f64 = seen.iter().map(|s| s.weight[0] + s.weight[1]).sum();
    let total = events + others.left.iter().sum::<f64>();
    let from_zero = total - others.entered.iter().sum::<f64>();
    let problem = Problem { intervals, seen, others, total, from_zero };

    let mut masses = problem.maximise(&problem.start());
    let mut iterations = 0;
    let (mut log_likelihood, mut gap) = problem.judge(&masses);
    while gap > stop.gap && iterations < stop.budget {
        iterations += 1;
        let once = problem.maximise(&masses);
        let twice = problem.maximise(&once);
        let leap = problem.maximise(&extrapolate(&masses, &once, &twice));
        let (leap_likelihood, leap_gap) = problem.judge(&leap);
        (masses, log_likelihood, gap) = if leap_likelihood >= log_likelihood {
            (leap, leap_likelihood, leap_gap)
        } else {
            let (likelihood, gap) = problem.judge(&twice);
            (twice, likelihood, gap)
        };
    }
    if gap.is_nan() || gap > stop.tolerable {
        return Err(CurveError::NotSettled { iterations, gap });
    }
    Ok(Solution { rows: problem.rows(&masses), iterations, log_likelihood, gap })
}

/// Where two steps of the iteration point to (Varadhan & Roland 2008, S3); an interval that would be left with
/// nothing keeps what the second step gave it.
fn extrapolate(zero: &Masses, once: &Masses, twice: &Masses) -> Masses {
    let (mut first, mut second) = (0.0, 0.0);
    for ((a, b), c) in zero.each.iter().zip(&once.each).zip(&twice.each) {
        for k in [0, 1] {
            let (r, v) = (b[k] - a[k], c[k] - 2.0 * b[k] + a[k]);
            // In the metric of the likelihood, where a share of 1e-6 counts by its own size.
            let scale = 1.0 / c[k].max(f64::MIN_POSITIVE);
            first += scale * r * r;
            second += scale * v * v;
        }
    }
    let stride = if second > 0.0 { (first / second).sqrt().max(1.0) } else { 1.0 };
    let mut out = twice.clone();
    for (i, target) in out.each.iter_mut().enumerate() {
        for k in [0, 1] {
            let (a, b, c) = (zero.each[i][k], once.each[i][k], twice.each[i][k]);
            let far = a + 2.0 * stride * (b - a) + stride * stride * (c - 2.0 * b + a);
            if far > 0.0 && far.is_finite() {
                target[k] = far;
            }
        }
    }
    out
}

impl Problem<'_> {
    /// Equal masses wherever an event of that ending can lie.
    fn start(&self) -> Masses {
        let share = 1.0 / self.intervals.len() as f64;
        let mut cover = vec![[0.0; 2]; self.intervals.len() + 1];
        for s in &self.seen {
            for k in [0, 1] {
                if s.weight[k] > 0.0 {
                    cover[s.from][k] += 1.0;
                    cover[s.to][k] -= 1.0;
                }
            }
        }
        let mut depth = [0.0; 2];
        let each = cover[..self.intervals.len()]
            .iter()
            .map(|step| {
                depth = [depth[0] + step[0], depth[1] + step[1]];
                depth.map(|d| if d > 0.0 { share } else { 0.0 })
            })
            .collect();
        Masses { each, beyond: 0.0 }
    }

    /// `Σ weight / P(cell)` over the cells that hold each interval: times its mass, the events it gets.
    fn pull(&self, masses: &Masses) -> Vec<[f64; 2]> {
        let n = masses.each.len();
        let sums = masses.running_sums();
        let mut pull = vec![[0.0; 2]; n + 1];
        for s in &self.seen {
            for k in [0, 1] {
                if s.weight[k] > 0.0 {
                    let share = s.weight[k] / cell_mass(masses, &sums, s, k);
                    pull[s.from][k] += share;
                    pull[s.to][k] -= share;
                }
            }
        }
        let mut sum = [0.0; 2];
        for p in &mut pull {
            sum = [sum[0] + p[0], sum[1] + p[1]];
            *p = sum;
        }
        pull.pop();
        pull
    }

    /// The events that each interval gets under these masses, with the numbers at risk.
    fn rows(&self, masses: &Masses) -> Vec<Row> {
        let mut rows = self.table(masses);
        // What is left of an interval that loses its mass is noise of the iteration.
        let least =
            1e-9 * self.seen.iter().flat_map(|s| s.weight).filter(|&w| w > 0.0).fold(f64::INFINITY, f64::min);
        rows.retain(|r| r.ended() > least);
        rows
    }

    fn table(&self, masses: &Masses) -> Vec<Row> {
        let pull = self.pull(masses);
        let mut rows: Vec<Row> = self
            .intervals
            .iter()
            .zip(masses.each.iter().zip(&pull))
            .map(|(&(over, upto), (mass, pull))| Row {
                over,
                upto,
                at_risk: 0.0,
                done: (mass[0] * pull[0]).max(0.0),
                failed: (mass[1] * pull[1]).max(0.0),
            })
            .collect();
        self.others.count_at_risk(&mut rows);
        rows
    }

    /// One step: share the events out, then the product-limit estimate of what that gives.
    fn maximise(&self, masses: &Masses) -> Masses {
        let mut survival = 1.0;
        let each = self
            .table(masses)
            .iter()
            .map(|r| {
                if r.at_risk <= 0.0 {
                    return [0.0; 2];
                }
                let share = survival / r.at_risk;
                survival *= 1.0 - r.ended() / r.at_risk;
                [share * r.done, share * r.failed]
            })
            .collect();
        Masses { each, beyond: survival }
    }

    /// Log-likelihood, and the bound on its shortfall per wait: `max_j ∂ℓ/∂p_j - n_0` over `n`, where `n_0` of
    /// the `n` waits were watched from age 0.
    fn judge(&self, masses: &Masses) -> (f64, f64) {
        let n = masses.each.len();
        let sums = masses.running_sums();
        // From the far end, where it is small: one less the running sum would lose the last few of many waits.
        let mut survival = vec![masses.beyond; n + 1];
        for i in (0..n).rev() {
            survival[i] = survival[i + 1] + masses.each[i][0] + masses.each[i][1];
        }
        let mut likelihood = 0.0;
        for s in &self.seen {
            for k in [0, 1] {
                if s.weight[k] > 0.0 {
                    likelihood += s.weight[k] * cell_mass(masses, &sums, s, k).ln();
                }
            }
        }
        let pull = self.pull(masses);
        let (mut slope, mut gap) = (0.0, 0.0_f64);
        for i in 0..=n {
            let net = self.others.left[i] - self.others.entered[i];
            if net != 0.0 {
                let survival = survival[i].max(f64::MIN_POSITIVE);
                likelihood += net * survival.ln();
                slope += net / survival;
            }
            if i < n {
                for (mass, pull) in masses.each[i].iter().zip(&pull[i]) {
                    if *mass > 0.0 {
                        gap = gap.max((pull + slope - self.from_zero) / self.total);
                    }
                }
            }
        }
        (likelihood, gap)
    }
}

impl Masses {
    fn running_sums(&self) -> Vec<[f64; 2]> {
        let mut sum = [0.0; 2];
        let mut sums = Vec::with_capacity(self.each.len() + 1);
        sums.push(sum);
        for p in &self.each {
            sum = [sum[0] + p[0], sum[1] + p[1]];
            sums.push(sum);
        }
        sums
    }
}

/// `P(cell)`: few terms are added, many taken as a difference of running sums.
fn cell_mass(masses: &Masses, sums: &[[f64; 2]], s: &Seen, k: usize) -> f64 {
    let mass = if s.to - s.from <= 16 {
        masses.each[s.from..s.to].iter().map(|p| p[k]).sum()
    } else {
        sums[s.to][k] - sums[s.from][k]
    };
    f64::max(mass, f64::MIN_POSITIVE)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tally::{Cause, Cells};
    use crate::wait::{Ending, Wait};

    fn sample(bounds: &[(f64, f64)], censored: &[f64]) -> Sample {
        let waits: Vec<Wait> = bounds
            .iter()
            .map(|&(l, u)| {
                if l == u { Wait::new(u, Ending::Done) } else { Wait::between(l, u, Ending::Done) }.unwrap()
            })
            .chain(censored.iter().map(|&c| Wait::new(c, Ending::GaveUp).unwrap()))
            .collect();
        Cells::from_waits(&waits).sample(Cause::Done)
    }

    #[test]
    fn two_overlapping_intervals_by_hand() {
        // (0,2] and (1,3] both hold the innermost (1,2]: all mass there. With (2,3] too: 2/3 on (1,2] would give
        // 2/3·2/3·1/3; sharing (1,3] gives p²... the greatest of p·1·(1-p) is at 1/2.
        let t = turnbull(&sample(&[(0.0, 2.0), (1.0, 3.0)], &[])).unwrap();
        assert_eq!(t.masses, [Support { over: 1.0, upto: 2.0, mass: 1.0 }]);
        let t = turnbull(&sample(&[(0.0, 2.0), (1.0, 3.0), (2.0, 3.0)], &[])).unwrap();
        assert_eq!(t.masses.len(), 2);
        assert!((t.masses[0].mass - 0.5).abs() < 1e-9 && t.beyond.abs() < 1e-12, "{t:?}");
        assert!((t.log_likelihood - 2.0 * 0.5f64.ln()).abs() < 1e-9);
        assert!((t.survival(1.5) - 0.75).abs() < 1e-9 && (t.survival(2.0) - 0.5).abs() < 1e-9);
    }

    #[test]
    fn exact_ages_and_censored_ones_are_kaplan_meier() {
        let t = turnbull(&sample(&[(1.0, 1.0), (3.0, 3.0), (4.0, 4.0)], &[2.0, 3.0])).unwrap();
        let masses: Vec<f64> = t.masses.iter().map(|s| s.mass).collect();
        for (got, wanted) in masses.iter().zip([0.2, 0.8 / 3.0, 0.8 / 3.0 * 2.0]) {
            assert!((got - wanted).abs() < 1e-12, "{masses:?}");
        }
    }

    #[test]
    fn a_timeout_in_a_bucket_does_not_move_the_endings_past_it() {
        // 500 ended in (0.5, 1], 500 were given up at 0.8, and another layout says 100 ended in (0.6, 0.7].
        let cells = {
            let waits = [
                Wait::between(0.5, 1.0, Ending::Done).unwrap().with_count(500).unwrap(),
                Wait::between(0.6, 0.7, Ending::Done).unwrap().with_count(100).unwrap(),
                Wait::new(0.8, Ending::GaveUp).unwrap().with_count(500).unwrap(),
            ];
            Cells::from_waits(&waits)
        };
        let table = super::super::LifeTable::of(&cells).unwrap();
        let ended: f64 = table.rows().iter().map(Row::ended).sum();
        assert!((ended - 600.0).abs() < 1e-6);
        assert_eq!(table.rows().last().unwrap().at_risk, 1100.0);
    }
}
