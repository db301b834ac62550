//! Buckets of the standard's histograms as bounds in seconds.

use std::sync::LazyLock;

use super::super::telemetry::TelemetryFlaw;
use super::message::{Buckets, Point, Shape};
use crate::running::{Histogram, HistogramError};
use crate::wait::MAX_AGE;

pub(super) fn histogram(point: &Point<'_>, unit: f64) -> Result<Histogram, TelemetryFlaw> {
    let made = match &point.shape {
        Shape::Explicit { bounds, counts } => {
            let fits = counts.len() == bounds.len() + 1 || (counts.is_empty() && point.count == 0);
            if !fits {
                return Err(TelemetryFlaw::Buckets { counts: counts.len(), bounds: bounds.len() });
            }
            let bounds: Vec<f64> = bounds.iter().map(|bound| scaled(*bound, unit)).collect();
            Histogram::from_buckets(bounds, counts.iter().copied())?
        }
        Shape::Exponential { scale, zeros, zero_upto, positive, negative } => {
            let below: u128 = negative.counts.iter().map(|&count| u128::from(count)).sum();
            if below > 0 {
                let count = u64::try_from(below).unwrap_or(u64::MAX);
                return Err(HistogramError::Negative { count }.into());
            }
            exponential(*scale, *zeros, *zero_upto, positive, unit)?
        }
    };
    if made.total() != point.count {
        return Err(TelemetryFlaw::Sum { buckets: made.total(), count: point.count });
    }
    Ok(made)
}

/// A bound in seconds. Units are whole powers of ten of each other, and a quotient is rounded once: 5 ms is 0.005 s.
pub(in crate::intake) fn scaled(bound: f64, unit: f64) -> f64 {
    if unit < 1.0 { bound / (1.0 / unit).round() } else { bound * unit }
}

/// Bucket `i` holds what is above `base^i` and up to `base^(i+1)`, with `base = 2^(2^-scale)` (the standard's data model,
/// "ExponentialHistogram").
fn exponential(
    scale: i32,
    zeros: u64,
    zero_upto: f64,
    positive: &Buckets,
    unit: f64,
) -> Result<Histogram, TelemetryFlaw> {
    // Beyond these a bucket is finer than a double can tell, or wider than all that it can.
    if !(-11..=52).contains(&scale) {
        return Err(TelemetryFlaw::Scale { scale });
    }
    if !(0.0..=MAX_AGE).contains(&zero_upto) {
        return Err(TelemetryFlaw::ZeroThreshold { zero_upto });
    }
    let zero = scaled(zero_upto, unit);
    let (from, number) = (i64::from(positive.offset), positive.counts.len());
    let ends: Vec<f64> = (from + 1..).take(number).map(|index| scaled(power(index, scale), unit)).collect();
    // More than can be counted are more than are taken.
    let mut total = zeros;
    let upto = positive.counts.iter().map(|&count| {
        total = total.saturating_add(count);
        total
    });
    let upto: Vec<u64> = upto.collect();
    // Before these a bucket lies inside the zero region; beyond, above all ages.
    let first = ends.partition_point(|end| *end <= zero);
    let last = ends.partition_point(|end| *end <= MAX_AGE);
    let before = first.checked_sub(1).and_then(|place| upto.get(place)).copied();
    let (mut bounds, mut sums) = (Vec::with_capacity(number + 2), Vec::with_capacity(number + 2));
    bounds.push(zero);
    sums.push(before.unwrap_or(zeros));
    let begin = scaled(power(from, scale), unit);
    if number > 0 && begin > zero && begin <= MAX_AGE {
        bounds.push(begin);
        sums.push(zeros);
    }
    bounds.extend_from_slice(&ends[first..last]);
    sums.extend_from_slice(&upto[first..last]);
    if scale > DISTINCT {
        (bounds, sums) = joined(&bounds, &sums);
    }
    Ok(Histogram::from_sums(bounds, sums, total)?)
}

/// Up to this scale a bound differs from its neighbours, also in seconds.
const DISTINCT: i32 = 48;

/// Buckets of which those that no double can tell apart are one.
fn joined(bounds: &[f64], sums: &[u64]) -> (Vec<f64>, Vec<u64>) {
    let next = bounds.iter().skip(1).map(Some).chain([None]);
    let pairs = bounds.iter().zip(sums).zip(next).filter(|((bound, _), next)| Some(*bound) != *next);
    pairs.map(|((bound, sum), _)| (bound, sum)).unzip()
}

/// `2^(index / 2^scale)`, for scales up to 52. The same number on every scale that has it, so that a series may change its scale.
#[inline]
fn power(index: i64, scale: i32) -> f64 {
    /// The finest scale whose powers between 1 and 2 are kept at hand.
    const KEPT: i32 = 8;
    static ROOTS: LazyLock<[f64; 1 << KEPT]> =
        LazyLock::new(|| std::array::from_fn(|i| (i as f64 / f64::from(1 << KEPT)).exp2()));
    if scale <= KEPT {
        let index = index << (KEPT - scale);
        ROOTS[(index & ((1 << KEPT) - 1)) as usize] * whole_power(index >> KEPT)
    } else {
        let part = (index & ((1 << scale) - 1)) as f64 / (1i64 << scale) as f64;
        part.exp2() * whole_power(index >> scale)
    }
}

/// `2^exponent`.
#[inline]
fn whole_power(exponent: i64) -> f64 {
    match exponent {
        -1022..=1023 => f64::from_bits(((exponent + 1023) as u64) << 52),
        _ => (exponent as f64).exp2(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Against the power function of the system's library, and bit for bit between scales.
    /// The finest scales, which doubles cannot follow.
    #[test]
    fn buckets_too_fine_are_joined() {
        for scale in [47, 50, 52] {
            let positive = Buckets { offset: 1 << 30, counts: vec![1; 100] };
            for unit in [1.0, 1e-3, 60.0] {
                let made = exponential(scale, 2, 0.5, &positive, unit).unwrap();
                let parts: Vec<_> = made.buckets().collect();
                assert_eq!((made.total(), parts.iter().map(|part| part.2).sum::<u64>()), (102, 102));
                assert_eq!(parts.len() == 101, scale < 52, "{scale} {unit}");
            }
        }
    }

    #[test]
    fn powers_on_all_scales() {
        for scale in -11..=52 {
            for index in [i32::MIN, -70_000, -257, -1, 0, 1, 3, 64, 255, 256, 1_000, 40_000, i32::MAX] {
                let index = i64::from(index);
                let (found, expected) =
                    (power(index, scale), (index as f64 * f64::from(-scale).exp2()).exp2());
                assert!(
                    found == expected || (found / expected - 1.0).abs() < 4e-16,
                    "{index} at {scale}: {found:e}"
                );
                if scale < 52 {
                    assert_eq!(found, power(2 * index, scale + 1), "{index} at {scale}");
                }
            }
        }
    }
}
