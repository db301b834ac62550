//! Whether the waits of a stream look like those of a sampler that waits for each answer before it asks again.
//!
//! What can be seen: the records of such a sampler come in order and never overlap; after a quick answer the next
//! question comes an interval after the last, and the intervals are alike; after a slow one it comes at once. What cannot
//! be seen: several samplers in one stream overlap and hide each other; times in whole seconds hide short intervals; and a
//! program that happens to work at a steady pace, one request after the other, looks the same. So it is a finding to look
//! into, and nothing is corrected because of it.

use std::f64::consts::LN_2;

use serde::Serialize;

use crate::wait::{Age, Ending, Wait};

/// Fewest steady steps, and fewest slow answers, to found a finding on.
const STEADY: u64 = 100;
const SLOW: u64 = 3;
/// Largest standard deviation of the natural logarithm of steady steps.
const SPREAD: f64 = 0.2;
/// A binary logarithm as a whole number of these parts: sums are then the same in any order.
const PARTS: f64 = 1_048_576.0;

/// What is remembered of one stream. Merging is exact and commutative.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Pace {
    /// The block that the last record was in.
    block: u64,
    started: f64,
    ended: f64,
    overlaps: u64,
    /// Steps from start to start after quick answers: number, sum and sum of squares of their logarithms, in parts.
    steady: u64,
    sum: i64,
    squares: i128,
    /// Answers after which the next question came at once, and the longest of them, s.
    slow: u64,
    longest: f64,
}

/// A stream that looks like a closed loop.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[non_exhaustive]
pub struct ClosedLoop {
    /// The stream.
    pub stream: String,
    /// How often it asks while answers are quick, s.
    pub every: f64,
    /// The longest answer that held up the next question, s.
    pub longest: f64,
}

impl Pace {
    /// Notes a record of the stream; `block` numbers the block that it is in.
    #[inline]
    pub(super) fn note(&mut self, wait: &Wait, block: u64) {
        // One overlap decides, and most streams have one soon.
        if self.overlaps > 0 {
            return;
        }
        let fresh = self.block != block;
        let (Some(ended), Age::Exact(age)) = (wait.at(), wait.age()) else { return };
        self.follow(ended - age, ended, wait.ending() == Ending::Waiting, fresh);
        self.block = block;
    }

    #[inline]
    fn follow(&mut self, started: f64, ended: f64, open: bool, fresh: bool) {
        if !fresh {
            let (age, step) = (self.ended - self.started, started - self.started);
            // A millisecond is what clocks and roundings of logs differ by.
            if started < self.ended - 1e-3 || open {
                self.overlaps += 1;
            } else if step > 2.0 * age {
                let parts = (rough_log2(step) * PARTS) as i64;
                self.steady += 1;
                self.sum += parts;
                self.squares += i128::from(parts) * i128::from(parts);
            } else if step < 1.1 * age + 2e-3 {
                self.slow += 1;
                self.longest = self.longest.max(age);
            }
        }
        (self.started, self.ended) = (started, ended);
    }

    pub(super) fn absorb(&mut self, other: &Pace) {
        self.overlaps += other.overlaps;
        self.steady += other.steady;
        self.sum += other.sum;
        self.squares += other.squares;
        self.slow += other.slow;
        self.longest = self.longest.max(other.longest);
    }

    /// The finding, if there is one.
    pub(super) fn finding(&self, stream: &str) -> Option<ClosedLoop> {
        if self.overlaps > 0 || self.steady < STEADY || self.slow < SLOW {
            return None;
        }
        let mean = self.sum as f64 / PARTS / self.steady as f64;
        let variance = self.squares as f64 / (PARTS * PARTS) / self.steady as f64 - mean * mean;
        let every = mean.exp2();
        // Only an answer that took twice the interval or more held a question up.
        (variance * LN_2.powi(2) < SPREAD * SPREAD && self.longest >= 2.0 * every).then(|| ClosedLoop {
            stream: stream.into(),
            every,
            longest: self.longest,
        })
    }
}

/// The binary logarithm to 0.01, of a number above 0: the exponent, and a parabola through the powers of two. Steps of a
/// sampler are told to a tenth, and every record of a log asks for one.
#[inline]
fn rough_log2(number: f64) -> f64 {
    const MANTISSA: u64 = (1 << 52) - 1;
    let bits = number.to_bits();
    let part = (bits & MANTISSA) as f64 / (MANTISSA + 1) as f64;
    (bits >> 52) as f64 - 1023.0 + part + 0.344 * part * (1.0 - part)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Answers with the ages given, asked by `next` (the start, and when the last question was started and answered).
    fn found(ages: impl Iterator<Item = f64>, next: impl Fn(f64, f64, usize) -> f64) -> Option<ClosedLoop> {
        let (mut pace, mut started, mut ended) = (Pace::default(), 1.8e9, 1.8e9);
        for (i, age) in ages.enumerate() {
            started = next(started, ended, i);
            ended = started + age;
            pace.note(&Wait::new(age, Ending::Done).unwrap().with_at(ended).unwrap(), 1 + i as u64 / 50);
        }
        pace.finding("s")
    }

    fn ages() -> impl Iterator<Item = f64> {
        (0..2_000).map(|i| if i % 100 == 37 { 1.5 } else { 0.004 + 0.0001 * f64::from(i % 70) })
    }

    #[test]
    fn logarithms_are_right_to_a_hundredth() {
        for i in 1..40_000 {
            let number = 1e-3 * f64::from(i);
            assert!((rough_log2(number) - number.log2()).abs() < 0.01, "{number}");
        }
    }

    #[test]
    fn a_sampler_that_waits_is_found_and_others_are_not() {
        let every = 0.1;
        let sampler =
            found(ages(), |started, ended, i| (started + every + 0.001 * (i % 7) as f64).max(ended)).unwrap();
        assert!(
            (sampler.every / 0.103 - 1.0).abs() < 0.02 && (sampler.longest - 1.5).abs() < 1e-6,
            "{sampler:?}"
        );
        // One that does not wait: questions overlap the slow answers.
        assert_eq!(found(ages(), |started, _, _| started + every), None);
        // One after the other with pauses of every length.
        assert_eq!(found(ages(), |_, ended, i| ended + 0.01 * (1 + i * i % 97) as f64), None);
        // No answer slow enough to hold a question up.
        assert_eq!(found((0..2_000).map(|_| 0.004), |started, ended, _| (started + every).max(ended)), None);
    }
}
