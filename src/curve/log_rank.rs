//! Do several groups of waits follow one curve? METHODS.md section 2.

use super::life_table::{CurveError, Others, Parts, Row};
use crate::numeric::special::chi_squared_tail;
use crate::tally::Sample;

/// Which differences between curves weigh most: `S(t-)^early (1 - S(t-))^late` with the pooled `S` (Fleming &
/// Harrington 1991, section 7.2).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Emphasis {
    /// Power of `S`, >= 0.
    pub early: f64,
    /// Power of `1 - S`, >= 0.
    pub late: f64,
}

impl Emphasis {
    /// The log-rank test: best where the hazards are proportional.
    pub const EVEN: Emphasis = Emphasis { early: 0.0, late: 0.0 };
    /// `G(0,1)`: sensitive to differences in the tail.
    pub const LATE: Emphasis = Emphasis { early: 0.0, late: 1.0 };
}

/// The outcome of a log-rank test.
#[derive(Clone, Debug, PartialEq)]
pub struct LogRank {
    /// The statistic, >= 0; 0 where the groups have nothing to compare.
    pub chi_squared: f64,
    /// Its degrees of freedom: groups that can be compared, less one.
    pub degrees: usize,
    /// Probability of so large a statistic under one common curve, in [0, 1].
    pub p_value: f64,
    /// Weighted number of events in each group, and the number that a common curve would give it.
    pub groups: Vec<ObservedExpected>,
}

/// Events of one group, in the weights of the test.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct ObservedExpected {
    /// Seen.
    pub observed: f64,
    /// To be expected under one common curve.
    pub expected: f64,
}

/// The k-sample log-rank test with weights (Mantel 1966; Fleming & Harrington 1991), left truncation included;
/// ties by the hypergeometric variance.
///
/// Groups recorded in different buckets are compared on the finest intervals that respect both: buckets that overlap
/// are joined. With one layout, or exact ages, nothing is lost. Cost: linear in cells times groups squared.
///
/// # Errors
/// [`CurveError`] of the first bad group; [`CurveError::Empty`] for a group without waits, or no groups.
pub fn log_rank(groups: &[&Sample], emphasis: Emphasis) -> Result<LogRank, CurveError> {
    let parts = groups.iter().map(|g| Parts::of_sample(g)).collect::<Result<Vec<_>, _>>()?;
    if parts.is_empty() {
        return Err(CurveError::Empty);
    }
    let bounds = joined_bounds(&parts);
    let tables: Vec<Vec<Row>> = parts.iter().map(|p| table_on(p, &bounds)).collect();

    let k = parts.len();
    let mut sums = vec![ObservedExpected::default(); k];
    let mut covariance = vec![0.0; k * k];
    let mut pooled = 1.0;
    for j in 0..bounds.len() {
        let at_risk: f64 = tables.iter().map(|t| t[j].at_risk).sum();
        let events: f64 = tables.iter().map(|t| t[j].done).sum();
        let weight = power(pooled, emphasis.early) * power(1.0 - pooled, emphasis.late);
        pooled *= ((at_risk - events) / at_risk).max(0.0);
        // Of a single wait at risk there is no doubt whose it is.
        let ties = if at_risk > 1.0 { (at_risk - events) / (at_risk - 1.0) } else { 0.0 };
        let scale = weight * weight * events * ties.max(0.0);
        for a in 0..k {
            let share = tables[a][j].at_risk / at_risk;
            sums[a].observed += weight * tables[a][j].done;
            sums[a].expected += weight * events * share;
            for b in 0..=a {
                let other = tables[b][j].at_risk / at_risk;
                let own = if a == b { 1.0 } else { 0.0 };
                covariance[a * k + b] += scale * share * (own - other);
            }
        }
    }
    let excess: Vec<f64> = sums.iter().map(|s| s.observed - s.expected).collect();
    let (chi_squared, degrees) = quadratic_form(&mut covariance, excess);
    let p_value = if degrees == 0 { 1.0 } else { chi_squared_tail(chi_squared, degrees as f64) };
    Ok(LogRank { chi_squared, degrees, p_value, groups: sums })
}

/// `x^p` with `0^0 = 1`, for `x` in [0, 1].
fn power(x: f64, p: f64) -> f64 {
    if p == 0.0 { 1.0 } else { x.max(0.0).powf(p) }
}

/// The cells of all groups, those that overlap joined: disjoint, in order.
fn joined_bounds(parts: &[Parts]) -> Vec<(f64, f64)> {
    let mut bounds: Vec<(f64, f64)> =
        parts.iter().flat_map(|p| p.events.iter().map(|e| (e.over, e.upto))).collect();
    // By lower bound, exact ages first: one at a bucket's open lower end lies before the bucket.
    bounds.sort_by(|a, b| a.0.total_cmp(&b.0).then(a.1.total_cmp(&b.1)));
    let mut joined: Vec<(f64, f64)> = Vec::with_capacity(bounds.len());
    for (over, upto) in bounds {
        match joined.last_mut() {
            // An exact age at a bucket's closed upper end lies in it.
            Some(last) if over < last.1 || (over == upto && over == last.1) => last.1 = last.1.max(upto),
            _ => joined.push((over, upto)),
        }
    }
    joined
}

/// At risk and events of one group in given intervals, each of its cells inside one.
fn table_on(parts: &Parts, bounds: &[(f64, f64)]) -> Vec<Row> {
    let mut rows: Vec<Row> =
        bounds.iter().map(|&(over, upto)| Row { over, upto, at_risk: 0.0, done: 0.0, failed: 0.0 }).collect();
    let mut i = 0;
    for e in &parts.events {
        while i + 1 < rows.len() && rows[i].upto < e.upto {
            i += 1;
        }
        rows[i].done += e.done + e.failed;
    }
    Others::new(parts, bounds.len(), |i| bounds[i]).count_at_risk(&mut rows);
    rows
}

/// `z' V⁻ z` and the rank of `V` (its lower triangle given), by Cholesky's method; directions without variance are
/// left out.
fn quadratic_form(v: &mut [f64], mut z: Vec<f64>) -> (f64, usize) {
    let k = z.len();
    let largest = (0..k).map(|a| v[a * k + a]).fold(0.0, f64::max);
    let (mut form, mut rank) = (0.0, 0);
    for a in 0..k {
        let pivot = v[a * k + a];
        // The rows of V add up to 0: the last direction is what rounding leaves.
        if pivot <= 1e-10 * largest {
            continue;
        }
        form += z[a] * z[a] / pivot;
        rank += 1;
        for b in a + 1..k {
            let factor = v[b * k + a] / pivot;
            z[b] -= factor * z[a];
            for c in a + 1..=b {
                v[b * k + c] -= factor * v[c * k + a];
            }
        }
    }
    (form, rank)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tally::{Cause, Cells};
    use crate::wait::{Ending, Wait};

    fn sample(waits: impl IntoIterator<Item = Wait>) -> Sample {
        Cells::from_waits(&waits.into_iter().collect::<Vec<_>>()).sample(Cause::Done)
    }

    fn done(age: f64) -> Wait {
        Wait::new(age, Ending::Done).unwrap()
    }

    #[test]
    fn equal_groups_do_not_differ() {
        let one = sample([1.0, 2.0, 2.0, 5.0].map(done));
        let test = log_rank(&[&one, &one, &one], Emphasis::EVEN).unwrap();
        assert!(test.chi_squared < 1e-20 && test.degrees == 2 && test.p_value > 0.999, "{test:?}");
        let alone = log_rank(&[&one], Emphasis::LATE).unwrap();
        assert_eq!((alone.degrees, alone.p_value), (0, 1.0));
        let never = sample([Wait::new(9.0, Ending::Waiting).unwrap()]);
        assert_eq!(log_rank(&[&never, &never], Emphasis::EVEN).unwrap().p_value, 1.0);
        assert_eq!(log_rank(&[], Emphasis::EVEN), Err(CurveError::Empty));
    }

    #[test]
    fn layouts_are_joined() {
        // The same waits exact and in buckets: compared in the buckets, where they agree.
        let exact = sample([0.3, 0.6, 1.0, 1.4, 2.7].map(done));
        let buckets = sample(
            [(0.0, 0.5, 1), (0.5, 1.0, 2), (1.0, 2.5, 1), (2.5, 5.0, 1)]
                .map(|(l, u, n)| Wait::between(l, u, Ending::Done).unwrap().with_count(n).unwrap()),
        );
        let test = log_rank(&[&exact, &buckets], Emphasis::EVEN).unwrap();
        assert!(test.chi_squared < 1e-20 && test.degrees == 1, "{test:?}");
        assert_eq!(
            joined_bounds(&[Parts::of_sample(&exact).unwrap(), Parts::of_sample(&buckets).unwrap()]).len(),
            4
        );
    }

    #[test]
    fn only_late_differences_move_the_late_test() {
        let ages = |stretch: f64| {
            (1..=400).map(move |i| {
                let age = f64::from(i) / 100.0;
                done(if age > 3.0 { 3.0 + stretch * (age - 3.0) } else { age })
            })
        };
        let (near, far) = (sample(ages(1.0)), sample(ages(3.0)));
        let even = log_rank(&[&near, &far], Emphasis::EVEN).unwrap();
        let late = log_rank(&[&near, &far], Emphasis::LATE).unwrap();
        assert!(late.chi_squared > 1.5 * even.chi_squared, "{} {}", late.chi_squared, even.chi_squared);
    }
}
