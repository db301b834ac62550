//! What a sampler that waits for each answer before it asks again did not see, put back.
//!
//! Such a sampler means to ask every so often. While an answer takes longer than that, it does not ask, and just the
//! slow stretch is seen once instead of many times ("coordinated omission"). The published correction (G. Tene;
//! HdrHistogram's `recordValueWithExpectedInterval`) adds for an answer at age `v` those of the questions left out, which
//! would have been answered at the same moment: at ages `v - I`, `v - 2 I`, … down to `I`.
//!
//! Of a wait that was *not* answered by age `v` (given up, still open) it is only known that the questions left out were
//! not answered by then either: each is still waiting at its age, and no more is said of it. Were it called given up, the
//! answer to when waits are given up would be changed by the sampler's own timeout.

use super::{Cells, EventCell, Mass};

/// Most groups that are added; beyond, neighbours are joined, and stand at the middle of their ages.
const MOST: usize = 32_768;

/// Bins no wider than this share of their age are taken as ages: a histogram's are.
const NARROW: f64 = 0.002;

impl Cells {
    /// With the samples that a closed loop with this interval (s, above 0) left out. All weights are then brought down so
    /// that together they weigh what the samples taken weigh: those put back are no evidence of their own, since one
    /// stall made them all.
    pub(crate) fn with_omitted(&self, every: f64) -> Cells {
        let mut whole = self.put_back(every);
        whole.scale(self.total() / whole.total());
        whole
    }

    /// Parts of these samples likewise, all brought down alike, so that together they are about what
    /// [`Cells::with_omitted`] makes of the whole: a part with a stall weighs more than it did, the others less.
    pub(crate) fn parts_with_omitted(&self, parts: &[Cells], every: f64) -> Vec<Cells> {
        let share = self.total() / self.put_back(every).total();
        let part = |part: &Cells| {
            let mut whole = part.put_back(every);
            whole.scale(share);
            whole
        };
        parts.iter().map(part).collect()
    }

    /// With the samples left out, each with the weight of that which left it out.
    fn put_back(&self, every: f64) -> Cells {
        // How many questions were left out during a wait of so long.
        // A timeout is often a whole number of intervals, and neither is a double to the last bit.
        let left_out = |age: f64| match (age / every + 1e-3).floor() {
            times if times >= 2.0 && times.is_finite() => times - 1.0,
            _ => 0.0,
        };
        // A narrow bin stands at its middle: shifted bins would overlap others by a part, and say no more.
        let event = |event: &EventCell| match event.upto - event.over <= NARROW * event.upto {
            true => {
                let middle = 0.5 * (event.over + event.upto);
                EventCell { over: middle, upto: middle, ..*event }
            }
            false => *event,
        };
        let known = |event: &EventCell| if event.upto.is_finite() { event.upto } else { event.over };
        let events: Vec<EventCell> = self.events.iter().map(event).collect();
        let stalls = events.iter().map(known).chain(self.gave_up.iter().chain(&self.waiting).map(|m| m.age));
        let stalled = stalls.filter(|&age| left_out(age) > 0.0).count();
        if stalled == 0 {
            return self.clone();
        }
        let most = (MOST / stalled).max(8) as f64;
        let mut whole = Cells { events, ..self.clone() };
        for place in 0..whole.events.len() {
            let event = whole.events[place];
            for (first, last) in runs(left_out(known(&event)), most) {
                let (weight, back) = (last - first + 1.0, 0.5 * (first + last) * every);
                let (over, upto) = match event.over == event.upto {
                    true => (event.over - back, event.upto - back),
                    false => ((event.over - last * every).max(0.0), event.upto - first * every),
                };
                let (done, failed) = (event.done * weight, event.failed * weight);
                whole.events.push(EventCell { over, upto, done, failed });
            }
        }
        for mass in self.gave_up.iter().chain(&self.waiting) {
            for (first, last) in runs(left_out(mass.age), most) {
                let weight = mass.weight * (last - first + 1.0);
                // All of a run had waited at least as long as its youngest.
                whole.waiting.push(Mass { age: mass.age - last * every, weight });
            }
        }
        whole.tidy();
        whole
    }

    fn scale(&mut self, share: f64) {
        // Nothing was put back, or there is nothing at all.
        if share == 1.0 || share.is_nan() {
            return;
        }
        for event in &mut self.events {
            event.done *= share;
            event.failed *= share;
        }
        for mass in [&mut self.gave_up, &mut self.waiting, &mut self.entries].into_iter().flatten() {
            mass.weight *= share;
        }
    }
}

/// The numbers from 1 to `upto` in at most `most` runs of neighbours: first and last of each.
fn runs(upto: f64, most: f64) -> impl Iterator<Item = (f64, f64)> {
    let length = (upto / most).ceil().max(1.0);
    (0u32..)
        .map(move |run| f64::from(run) * length + 1.0)
        .take_while(move |&first| first <= upto)
        .map(move |first| (first, (first + length - 1.0).min(upto)))
}

#[cfg(test)]
mod tests {
    use hdrhistogram::Histogram;

    use super::*;
    use crate::wait::{Ending, Wait};

    fn cells(waits: &[(f64, Ending)]) -> Cells {
        let waits: Vec<Wait> = waits.iter().map(|&(age, ending)| Wait::new(age, ending).unwrap()).collect();
        Cells::from_waits(&waits)
    }

    /// The correction of the HdrHistogram library is the reference: shares below every age are the same.
    #[test]
    fn answers_are_corrected_as_the_histogram_library_does() {
        let every = 0.1;
        let ages: Vec<f64> = (0..500)
            .map(|i| if i % 50 == 0 { 0.7 + f64::from(i) / 70.0 } else { 0.001 * f64::from(1 + i % 90) })
            .collect();
        let mut histogram = Histogram::<u64>::new(5).unwrap();
        for age in &ages {
            histogram.record_correct((age * 1e6).round() as u64, (every * 1e6) as u64).unwrap();
        }
        let done: Vec<_> = ages.iter().map(|&age| (age, Ending::Done)).collect();
        let corrected = cells(&done).with_omitted(every);
        assert!((corrected.total() - 500.0).abs() < 1e-9);
        for age in [0.00051, 0.0507, 0.0907, 0.1507, 0.2507, 0.5507, 1.0507, 2.0507, 5.0507, 7.8007] {
            let below: f64 = corrected.events.iter().filter(|e| e.upto <= age).map(|e| e.done).sum();
            let theirs = histogram.count_between(0, (age * 1e6) as u64) as f64 / histogram.len() as f64;
            assert!((below / 500.0 - theirs).abs() < 1e-3, "{age}: {} {theirs}", below / 500.0);
        }
    }

    /// A stall of 10 s in a log of a sampler that asks every 0.1 s and gives up at 1 s: an open loop would have had ten
    /// questions open at each time-out, and seen none of them answered before.
    #[test]
    fn what_was_not_answered_is_still_waiting_and_no_more() {
        let corrected =
            cells(&[(0.05, Ending::Done), (1.0, Ending::GaveUp), (0.35, Ending::Waiting)]).with_omitted(0.1);
        let share = 3.0 / 14.0;
        assert_eq!(
            corrected.totals().map(|total| (total / share * 1e9).round() / 1e9),
            [1.0, 0.0, 1.0, 12.0]
        );
        let ages: Vec<f64> = corrected.waiting.iter().map(|m| (m.age * 1e9).round() / 1e9).collect();
        assert_eq!(ages, [0.1, 0.15, 0.2, 0.25, 0.3, 0.35, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9]);
    }

    /// A day with a stall and one without: together they weigh what was taken, and more of it lies on the first.
    #[test]
    fn parts_make_up_the_whole() {
        let days = [
            cells(&[(0.05, Ending::Done), (2.0, Ending::Done), (1.0, Ending::GaveUp)]),
            cells(&[(0.04, Ending::Done), (0.06, Ending::Failed)]),
        ];
        let taken = cells(&[
            (0.05, Ending::Done),
            (2.0, Ending::Done),
            (1.0, Ending::GaveUp),
            (0.04, Ending::Done),
            (0.06, Ending::Failed),
        ]);
        let (whole, parts) = (taken.with_omitted(0.1), taken.parts_with_omitted(&days, 0.1));
        for (ending, whole) in whole.totals().into_iter().enumerate() {
            let parts: f64 = parts.iter().map(|part| part.totals()[ending]).sum();
            assert!((parts - whole).abs() < 1e-9, "{ending}: {parts} {whole}");
        }
        assert!(parts[0].total() > 3.0 && parts[1].total() < 2.0);
        let quick = [days[1].clone()];
        assert_eq!(days[1].parts_with_omitted(&quick, 0.1), quick);
    }

    #[test]
    fn nothing_is_put_back_where_nothing_was_left_out() {
        let kept = cells(&[(0.05, Ending::Done), (0.19, Ending::Failed), (0.1, Ending::GaveUp)]);
        assert_eq!(kept.with_omitted(0.1), kept);
    }

    /// An hour seen every microsecond: billions of samples in bounded groups, all between their bounds.
    #[test]
    fn groups_are_bounded() {
        let corrected = cells(&[(3_600.0, Ending::Done), (1_800.0, Ending::GaveUp)]).with_omitted(1e-6);
        assert!(corrected.events.len() + corrected.waiting.len() <= MOST + 2);
        assert!((corrected.total() - 2.0).abs() < 1e-6);
        assert!(corrected.events.iter().all(|e| 0.0 <= e.over && e.over <= e.upto && e.upto <= 3_600.0));
        // Half of the answer's are younger than half an hour.
        let young: f64 = corrected.events.iter().filter(|e| e.upto <= 1_800.0).map(|e| e.done).sum();
        let all: f64 = corrected.events.iter().map(|e| e.done).sum();
        assert!((young / all - 0.5).abs() < 1e-3, "{young} {all}");
    }
}
