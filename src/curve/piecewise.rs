//! Piecewise-constant hazard of one cause: failures as the ending that competes with completion. METHODS.md section 3.

use crate::tally::Sample;

/// Events a piece should hold; fewer make one constant hazard.
const EVENTS_A_PIECE: f64 = 25.0;
/// Most pieces.
const MOST_PIECES: usize = 40;

/// Hazard that is constant between knots; the last piece runs on for ever.
///
/// Maximum likelihood within each piece: events over exposure (Friedman 1982, *Piecewise exponential models for
/// survival data with covariates*, Annals of Statistics 10:101). With few events it is one constant.
#[derive(Clone, Debug, PartialEq)]
pub struct PiecewiseHazard {
    /// Where pieces begin, s; the first is 0.
    starts: Vec<f64>,
    /// Hazard in each, 1/s.
    rates: Vec<f64>,
}

impl PiecewiseHazard {
    /// Fits a sample whose events are those of the cause. `None` without events.
    pub fn fit(sample: &Sample) -> Option<PiecewiseHazard> {
        let events = sample.event_count();
        if events <= 0.0 {
            return None;
        }
        let pieces = ((events / EVENTS_A_PIECE) as usize).clamp(1, MOST_PIECES);
        let mut starts = vec![0.0];
        let mut seen = 0.0;
        for event in &sample.events {
            if seen >= events * starts.len() as f64 / pieces as f64
                && event.over > starts[starts.len() - 1]
                && starts.len() < pieces
            {
                starts.push(event.over);
            }
            seen += event.weight;
        }
        // The last event closes its piece: what no failure reached has a piece of its own, when it is long enough
        // to say something.
        let last = sample.events.iter().rev().map(|e| finite_or(e.upto, e.over)).fold(0.0, f64::max);
        let after = exposure(sample, last, f64::INFINITY);
        let before = exposure(sample, 0.0, last);
        if pieces > 1 && after * events / before.max(f64::MIN_POSITIVE) > EVENTS_A_PIECE {
            starts.push(last);
        }
        let rates = (0..starts.len())
            .map(|i| {
                let end = starts.get(i + 1).copied().unwrap_or(f64::INFINITY);
                let inside: f64 = sample
                    .events
                    .iter()
                    .filter(|e| {
                        let at = 0.5 * (e.over + finite_or(e.upto, e.over));
                        at > starts[i] && at <= end || (i == 0 && at == 0.0)
                    })
                    .map(|e| e.weight)
                    .sum();
                let exposed = exposure(sample, starts[i], end);
                if exposed > 0.0 { inside / exposed } else { 0.0 }
            })
            .collect();
        Some(PiecewiseHazard { starts, rates })
    }

    /// Hazard of the last piece, 1/s, which runs on for ever.
    pub fn last_rate(&self) -> f64 {
        self.rates[self.rates.len() - 1]
    }

    /// Cumulative hazard at an age in s.
    pub fn cumulative(&self, age: f64) -> f64 {
        let mut sum = 0.0;
        for (i, (&start, &rate)) in self.starts.iter().zip(&self.rates).enumerate() {
            let end = self.starts.get(i + 1).copied().unwrap_or(f64::INFINITY).min(age);
            if end <= start {
                break;
            }
            sum += rate * (end - start);
        }
        sum
    }
}

/// Time spent at risk between two ages, s, over all waits.
fn exposure(sample: &Sample, from: f64, to: f64) -> f64 {
    let inside = |age: f64| (age.min(to) - from).max(0.0);
    let left: f64 = sample
        .events
        .iter()
        .map(|e| e.weight * inside(0.5 * (e.over + finite_or(e.upto, e.over))))
        .sum::<f64>()
        + sample.censored.iter().map(|m| m.weight * inside(m.age)).sum::<f64>();
    left - sample.entries.iter().map(|m| m.weight * inside(m.age)).sum::<f64>()
}

fn finite_or(value: f64, instead: f64) -> f64 {
    if value.is_finite() { value } else { instead }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tally::{Interval, Mass};

    fn exact(ages: impl Iterator<Item = f64>) -> Vec<Interval> {
        ages.map(|t| Interval { over: t, upto: t, weight: 1.0 }).collect()
    }

    #[test]
    fn few_events_make_one_constant() {
        let sample = Sample {
            events: exact([1.0, 2.0].into_iter()),
            censored: vec![Mass { age: 3.0, weight: 1.0 }],
            entries: vec![Mass { age: 1.0, weight: 1.0 }],
        };
        let hazard = PiecewiseHazard::fit(&sample).unwrap();
        // Two events in 1 + 2 + 3 - 1 seconds at risk.
        assert!((hazard.cumulative(10.0) - 10.0 * 2.0 / 5.0).abs() < 1e-12);
        assert_eq!(PiecewiseHazard::fit(&Sample::default()), None);
    }

    #[test]
    fn early_failures_do_not_go_on_for_ever() {
        // A hundred failures within the first second, ten thousand waits that run to 100 s.
        let sample = Sample {
            events: exact((1..=100).map(|i| f64::from(i) * 0.01)),
            censored: vec![Mass { age: 100.0, weight: 10_000.0 }],
            entries: vec![],
        };
        let hazard = PiecewiseHazard::fit(&sample).unwrap();
        assert!((hazard.cumulative(1.0) - 0.01).abs() < 5e-4, "{}", hazard.cumulative(1.0));
        assert!(hazard.cumulative(50.0) < 0.011, "{}", hazard.cumulative(50.0));
    }
}
