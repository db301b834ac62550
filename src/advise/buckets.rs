//! What it costs that waits are known by buckets only, which bounds would help most, and layouts that cannot answer.
//! METHODS.md sections 1, 2 and 5.
//!
//! A bucket says `l < T <= u`. Two readings of the same waits hold all that it leaves open: every ending at the lower
//! end of its bucket, every ending at the upper end. Whatever the ages were, as long as nobody is cut off inside a bucket
//! and a completion is worth more than a give-up, `F_d(τ)` is largest and `A(τ)` least under the first reading, and the
//! reverse under the second, so that `ρ(τ)` lies between the two. The best rate then lies between the two best rates; and a
//! `τ` whose better reading is below the best of the worse readings cannot be the best one.

use super::bounds::Bounds;
use super::caution;
use crate::advice::{Blind, BucketCost, Caution};
use crate::curve::{Empirical, LifeTable};
use crate::policy::Entry;
use crate::say;
use crate::stopping::{Limits, Objective, Retry, Worth};
use crate::tally::{Cells, EventCell, Mass};

/// A cell is a bucket if it is wider than this, as a ratio of its ends; a tally's own bins are a thousandth wide.
const WIDE: f64 = 1.05;
/// Below this an age is as good as exact, s: a few steps of a tally's clock.
const SHORT: f64 = 1e-5;
/// Share of endings in buckets from which their width is spoken of.
const SPOKEN: f64 = 0.05;
/// Share of endings in one open bucket from which a layout cannot answer.
const BLIND: f64 = 0.95;
/// Bounds that are proposed at most, and buckets that are looked at for them.
const ADDED: usize = 3;
const LOOKED_AT: usize = 12;
/// Cells beyond this many are not searched for better bounds: the layout is fine enough.
const MOST_CELLS: usize = 400;
/// The least age that an ending at the lower end of a first bucket has, as a share of its upper end.
const LEAST: f64 = 1e-6;

/// What the buckets among these endings leave open; `None` where hardly any ending is known by one. `advised`: the time to
/// give up after, or to hold on until, s.
pub(super) fn read(
    cells: &Cells,
    entry: &Entry,
    bounds: Option<&Bounds>,
    prices: Option<(Worth, Retry)>,
    advised: Option<f64>,
) -> Option<BucketCost> {
    let weight = |e: &EventCell| e.done + e.failed;
    let all: f64 = cells.events.iter().map(weight).sum();
    let wide: f64 = cells.events.iter().filter(|e| is_wide(e)).map(weight).sum();
    if all <= 0.0 || wide < SPOKEN * all {
        return None;
    }
    let entry = &with_floor(entry, bounds);
    let mut cost = BucketCost {
        share: wide / all,
        cost: None,
        best_between_s: None,
        rate_between_per_s: None,
        add_bounds_s: Vec::new(),
        blind: blind(cells),
    };
    match cost.blind {
        Some(Blind::First { upto_s }) => cost.add_bounds_s = ladder(upto_s * 1e-3, upto_s),
        Some(Blind::Last { over_s }) => cost.add_bounds_s = ladder(over_s, over_s * 1e3),
        None => {
            let (worth, retry) = prices?;
            let between = Between::of(cells, entry, &worth, &retry)?;
            cost.cost = advised.and_then(|t| between.loss(t));
            cost.best_between_s = Some(between.times);
            // Under a carrying cost a reading in which nothing completes is endlessly bad.
            cost.rate_between_per_s = Some(between.rates).filter(|rates| rates.iter().all(|r| r.is_finite()));
            cost.add_bounds_s = added(cells, entry, &worth, &retry, &between);
        }
    }
    Some(cost)
}

/// The same entry, with the floor that was assumed for want of any cost of a restart. That floor is no question to the data:
/// without it, a first bucket whose endings may all lie at 0 would make the earliest give-up endlessly good.
fn with_floor(entry: &Entry, bounds: Option<&Bounds>) -> Entry {
    let mut entry = entry.clone();
    if let Some(bounds) = bounds.filter(|bounds| bounds.free_restart) {
        entry.guard.floor = Some(bounds.floor);
    }
    entry
}

/// A bucket that holds all, and of which one end is open.
pub(super) fn blind(cells: &Cells) -> Option<Blind> {
    let all: f64 = cells.events.iter().map(|e| e.done + e.failed).sum();
    let share = |holds: &dyn Fn(&EventCell) -> bool| {
        cells.events.iter().filter(|e| holds(e)).map(|e| e.done + e.failed).sum::<f64>() / all
    };
    let first = |e: &EventCell| e.over == 0.0 && is_wide(e) && e.upto.is_finite();
    if share(&first) >= BLIND {
        let upto_s = cells.events.iter().filter(|e| first(e)).map(|e| e.upto).fold(0.0, f64::max);
        return Some(Blind::First { upto_s });
    }
    let last = |e: &EventCell| e.upto.is_infinite();
    if share(&last) >= BLIND {
        let over_s = cells.events.iter().filter(|e| last(e)).map(|e| e.over).fold(0.0, f64::max);
        return Some(Blind::Last { over_s });
    }
    None
}

/// Whether it is a bucket and no age.
fn is_wide(cell: &EventCell) -> bool {
    cell.upto > SHORT && cell.upto > WIDE * cell.over
}

/// 1, 2 and 5 in each decade strictly between two ages, s.
fn ladder(from: f64, to: f64) -> Vec<f64> {
    let (first, last) = (from.log10().floor() as i32, to.log10().ceil() as i32);
    (first..=last)
        .flat_map(|decade| [1, 2, 5].map(|step| format!("{step}e{decade}").parse::<f64>().unwrap_or(0.0)))
        .filter(|bound| *bound > from * (1.0 + 1e-9) && *bound < to * (1.0 - 1e-9))
        .collect()
}

/// Which end of its bucket every ending lies at.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum End {
    Lower,
    Upper,
}

/// The same waits with every ending at one end of its bucket.
fn at(cells: &Cells, end: End) -> Cells {
    let mut read = Cells { events: Vec::with_capacity(cells.events.len()), ..cells.clone() };
    for e in &cells.events {
        let age = match end {
            _ if !is_wide(e) => {
                read.events.push(*e);
                continue;
            }
            End::Lower if e.over > 0.0 => e.over,
            // As soon as can be, at the first bucket's.
            End::Lower if e.upto.is_finite() => e.upto * LEAST,
            End::Lower => continue,
            End::Upper => e.upto,
        };
        if age.is_finite() {
            read.events.push(EventCell { over: age, upto: age, ..*e });
        } else {
            // It may end at any later time: as good as never.
            read.waiting.push(Mass { age: e.over, weight: e.done + e.failed });
        }
    }
    read.tidy();
    read
}

/// What both readings leave open.
struct Between {
    /// The readings' best scores, the worse one first.
    rates: [f64; 2],
    /// Between which give-up times the best one lies, s.
    times: [f64; 2],
    lower: Empirical,
    upper: Empirical,
    worth: Worth,
    retry: Retry,
    limits: Limits,
    /// Ages at which a reading jumps, with floor and ceiling.
    edges: Vec<f64>,
}

impl Between {
    fn of(cells: &Cells, entry: &Entry, worth: &Worth, retry: &Retry) -> Option<Between> {
        let [lower, upper] = [End::Lower, End::Upper].map(|end| at(cells, end));
        let bounds = [&lower, &upper].map(|read| Bounds::of(read, entry));
        let [Some(low), Some(high)] = bounds else { return None };
        let limits = Limits::new(low.floor.min(high.floor), low.ceiling.max(high.ceiling)).ok()?;
        let curve = |read: &Cells| Some(Empirical::of(&LifeTable::of(read).ok()?));
        let (lower, upper) = (curve(&lower)?, curve(&upper)?);
        let ends = cells.events.iter().flat_map(|e| if is_wide(e) { [e.over, e.upto] } else { [e.upto; 2] });
        let mut edges: Vec<f64> = ends.filter(|t| *t > limits.floor() && *t < limits.ceiling()).collect();
        edges.extend([limits.floor(), limits.ceiling()]);
        edges.sort_by(f64::total_cmp);
        edges.dedup();
        let (worth, retry) = (*worth, *retry);
        let mut between =
            Between { rates: [0.0; 2], times: [0.0; 2], lower, upper, worth, retry, limits, edges };
        let scores = between.scores()?;
        let best = |pick: fn(&[f64; 2]) -> f64| scores.iter().map(pick).fold(f64::NEG_INFINITY, f64::max);
        let (worse, better) = (best(|s| s[0].min(s[1])), best(|s| s[0].max(s[1])));
        between.rates = [worse, better];
        // From one edge to just before the next a reading's score only falls.
        let kept = |i: usize| scores.get(i).is_some_and(|s| s[0].max(s[1]) >= worse);
        let first = (0..scores.len()).find(|&i| kept(i))?;
        let last = (0..scores.len()).rfind(|&i| kept(i))?;
        let next = (last + 1).min(between.edges.len() - 1);
        between.times = [between.edges[first], between.edges[next]];
        Some(between)
    }

    fn objectives(&self) -> Option<[Objective<'_>; 2]> {
        let of = |curve| Objective::new(curve, &self.worth, &self.retry, self.limits).ok();
        Some([of(&self.lower)?, of(&self.upper)?])
    }

    /// The scores at the edges under both readings.
    fn scores(&self) -> Option<Vec<[f64; 2]>> {
        let [lower, upper] = self.objectives()?;
        Some(self.edges.iter().map(|&t| [lower.score(t), upper.score(t)]).collect())
    }

    /// The share of its best score that a give-up time loses under the reading that is worse for it.
    fn loss(&self, t: f64) -> Option<f64> {
        let [lower, upper] = self.objectives()?;
        let loss = |objective: &Objective<'_>| {
            let best = self.edges.iter().map(|&e| objective.score(e)).fold(f64::NEG_INFINITY, f64::max);
            (best > 0.0).then(|| (1.0 - objective.score(t) / best).clamp(0.0, 1.0))
        };
        Some(loss(&lower)?.max(loss(&upper)?))
    }

    /// How far the best score is left open, as a share.
    fn open(&self) -> f64 {
        let [worse, better] = self.rates;
        if better > 0.0 { (better - worse) / better } else { 0.0 }
    }
}

/// Bounds that would leave least open, one after the other, if the endings of a parted bucket lie half on either side.
fn added(cells: &Cells, entry: &Entry, worth: &Worth, retry: &Retry, between: &Between) -> Vec<f64> {
    let mut found = Vec::new();
    if cells.events.len() > MOST_CELLS {
        return found;
    }
    let (mut now, mut open) = (cells.clone(), between.open());
    while found.len() < ADDED {
        let mut buckets: Vec<&EventCell> = now.events.iter().filter(|e| is_wide(e)).collect();
        buckets.sort_by(|a, b| (b.done + b.failed).total_cmp(&(a.done + a.failed)));
        let best = buckets
            .into_iter()
            .take(LOOKED_AT)
            .map(|bucket| {
                let bound = middle(bucket);
                let parted = parted(&now, bucket, bound);
                let left = Between::of(&parted, entry, worth, retry).map_or(f64::INFINITY, |b| b.open());
                (left, bound, parted)
            })
            .min_by(|a, b| a.0.total_cmp(&b.0));
        // What helps by less than a hundredth of what is open is not worth a series more.
        match best {
            Some((left, bound, parted)) if left < 0.99 * open => {
                found.push(bound);
                (now, open) = (parted, left);
            }
            _ => break,
        }
    }
    found.sort_by(f64::total_cmp);
    found
}

/// Where a bucket is best parted without a further thought: half-way by ratio; a first one at a half, a last one at twice
/// its bound. Two figures suffice.
fn middle(bucket: &EventCell) -> f64 {
    let exact = match (bucket.over, bucket.upto) {
        (0.0, upto) if upto.is_finite() => 0.5 * upto,
        (over, upto) if upto.is_finite() => (over * upto).sqrt(),
        (over, _) => 2.0 * over.max(SHORT),
    };
    let rounded = format!("{exact:.1e}").parse().unwrap_or(exact);
    if rounded > bucket.over && rounded < bucket.upto { rounded } else { exact }
}

/// The cells with one bucket parted, half of its endings on either side.
fn parted(cells: &Cells, bucket: &EventCell, bound: f64) -> Cells {
    let mut parted = cells.clone();
    parted.events.retain(|e| (e.over, e.upto) != (bucket.over, bucket.upto));
    let half = EventCell { done: 0.5 * bucket.done, failed: 0.5 * bucket.failed, ..*bucket };
    parted.events.extend([EventCell { upto: bound, ..half }, EventCell { over: bound, ..half }]);
    parted.tidy();
    parted
}

/// Why a layout leaves no choice, for the action's reason.
pub(super) fn because(blind: Blind) -> String {
    match blind {
        Blind::First { upto_s } => format!(
            "nearly all endings lie in one bucket up to {}, and nothing says where in it",
            say::duration(upto_s)
        ),
        Blind::Last { over_s } => format!(
            "nearly all endings lie above the last bound of {}, and nothing says how far",
            say::duration(over_s)
        ),
    }
}

/// What the buckets call for, if they do. `slack`: the loss that the policy does not mind.
pub(super) fn cautions(cost: &BucketCost, slack: f64) -> Option<Caution> {
    let list = |bounds: &[f64]| bounds.iter().map(|b| say::duration(*b)).collect::<Vec<_>>().join(", ");
    if let Some(blind) = cost.blind {
        return Some(caution(
            "buckets_cannot_tell",
            because(blind),
            format!("record the waits in buckets with the bounds {}", list(&cost.add_bounds_s)),
        ));
    }
    let (loss, [from, to]) = (cost.cost?, cost.best_between_s?);
    if loss <= slack {
        return None;
    }
    let remedy = match &cost.add_bounds_s[..] {
        [] => "record the ages themselves, or in finer buckets around the advised time".to_owned(),
        bounds => format!("add bounds where they help most: {}", list(bounds)),
    };
    Some(caution(
        "wide_buckets",
        format!(
            "{} of the endings are known by their bucket only: the advised time may lose {} for that, and the best time lies \
             somewhere between {} and {}",
            say::percent(cost.share),
            say::percent(loss),
            say::duration(from),
            say::duration(to)
        ),
        remedy,
    ))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::advice::Action;
    use crate::advise::{Case, advise};
    use crate::tally::Tally;
    use crate::wait::{Ending, Wait};

    /// Half of the waits at the quantiles of a fast exponential law, half of a slow one.
    fn ages(n: u32) -> Vec<f64> {
        let age = |i: u32| {
            let mean = if i.is_multiple_of(2) { 0.1 } else { 5.0 };
            -mean * (1.0 - (f64::from(i) + 0.5) / f64::from(n)).ln()
        };
        (0..n).map(age).collect()
    }

    fn entry() -> Entry {
        let mut entry = Entry::without_policy();
        entry.worth.as_mut().unwrap().pause.gave_up = 0.05;
        entry.guard.floor = Some(0.001);
        entry.guard.ceiling = Some(60.0);
        entry
    }

    fn bucketed(ages: &[f64], bounds: &[f64]) -> Vec<Wait> {
        let bucket = |age: f64| {
            let place = bounds.partition_point(|b| *b < age);
            let over = place.checked_sub(1).map_or(0.0, |i| bounds[i]);
            Wait::between(over, bounds.get(place).copied().unwrap_or(f64::INFINITY), Ending::Done).unwrap()
        };
        ages.iter().map(|&age| bucket(age)).collect()
    }

    fn cost(waits: &[Wait], advised: Option<f64>) -> BucketCost {
        let entry = entry();
        let prices = super::super::judge::prices(&entry);
        read(&Cells::from_waits(waits), &entry, None, prices, advised).unwrap()
    }

    /// The best give-up time of the exact ages and its rate, by trying all of them.
    fn exact(ages: &[f64]) -> (f64, f64) {
        let waits: Vec<Wait> = ages.iter().map(|&t| Wait::new(t, Ending::Done).unwrap()).collect();
        let curve = Empirical::new(&Cells::from_waits(&waits)).unwrap();
        let (worth, retry) = super::super::judge::prices(&entry()).unwrap();
        let objective = Objective::new(&curve, &worth, &retry, Limits::new(0.001, 60.0).unwrap()).unwrap();
        let scored = ages.iter().map(|&t| (t, objective.score(t)));
        scored.max_by(|a, b| a.1.total_cmp(&b.1)).unwrap()
    }

    /// The layout that many servers have by default (prometheus.io, client libraries), and a fine one of 5% steps.
    #[test]
    fn two_layouts_bracket_the_advice_from_exact_samples() {
        let ages = ages(2_000);
        let (best, rate) = exact(&ages);
        let coarse = [0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0];
        let fine: Vec<f64> = (0..180).map(|i| 0.005 * 1.06f64.powi(i)).collect();
        let mut widths = Vec::new();
        for bounds in [&coarse[..], &fine] {
            let waits = bucketed(&ages, bounds);
            let mut tally = Tally::default();
            waits.iter().for_each(|wait| tally.add(wait));
            let advice = advise(&Case::new("desk", &tally), &entry(), 1);
            let found = advice.advice.buckets.unwrap();
            let [from, to] = found.best_between_s.unwrap();
            let [low, high] = found.rate_between_per_s.unwrap();
            assert!(from <= best && best <= to, "{best} is not in {from}..{to}");
            assert!(low <= rate && rate <= high, "{rate} is not in {low}..{high}");
            assert!(found.share > 0.99 && found.blind.is_none());
            // The advice from the buckets lies within the bracket, or loses nothing worth a word.
            let advised = advice.advice.give_up_after_s.unwrap();
            assert!((from..=to).contains(&advised), "{advised} is not in {from}..{to}");
            widths.push(((high - low) / high, to / from));
        }
        assert!(widths[1].0 < 0.5 * widths[0].0 && widths[1].1 < widths[0].1, "{widths:?}");
    }

    #[test]
    fn the_proposed_bounds_help() {
        let ages = ages(2_000);
        let mut bounds = vec![0.05, 0.5, 5.0];
        let left = |bounds: &[f64]| {
            let found = cost(&bucketed(&ages, bounds), None);
            let [low, high] = found.rate_between_per_s.unwrap();
            ((high - low) / high, found.add_bounds_s)
        };
        let (before, proposed) = left(&bounds);
        assert!(!proposed.is_empty() && proposed.len() <= ADDED, "{proposed:?}");
        bounds.extend(&proposed);
        bounds.sort_by(f64::total_cmp);
        let (after, _) = left(&bounds);
        assert!(after < 0.9 * before, "{before} to {after} by {proposed:?}");
        // No bound elsewhere does as much: far above all ages it does nothing.
        let (idle, _) = left(&[0.05, 0.5, 5.0, 1_000.0, 2_000.0, 3_000.0]);
        assert!(after < idle, "{after} {idle}");
    }

    #[test]
    fn layouts_that_cannot_answer_are_named() {
        let ages = ages(2_000);
        for (bounds, blind) in [
            (vec![60.0, 120.0], Blind::First { upto_s: 60.0 }),
            (vec![1e-6, 2e-6], Blind::Last { over_s: 2e-6 }),
        ] {
            let mut tally = Tally::default();
            bucketed(&ages, &bounds).iter().for_each(|wait| tally.add(wait));
            let advice = advise(&Case::new("desk", &tally), &entry(), 1);
            assert_eq!(advice.advice.action, Action::GatherEvidence);
            let found = advice.advice.buckets.unwrap();
            assert_eq!(found.blind, Some(blind));
            assert!(advice.cautions.iter().any(|c| c.code == "buckets_cannot_tell"), "{:?}", advice.cautions);
            // A layout that would answer: one with these bounds does.
            let mut tally = Tally::default();
            bucketed(&ages, &found.add_bounds_s).iter().for_each(|wait| tally.add(wait));
            if let Blind::First { .. } = blind {
                let advice = advise(&Case::new("desk", &tally), &entry(), 1);
                assert_eq!(advice.advice.action, Action::GiveUpAfter);
            }
        }
    }

    /// Without a policy a restart is free, and the advice may be to hold on. Of both the width is told, and bounds that help.
    #[test]
    fn free_restarts_and_holding_on_have_their_width_told() {
        for (counts, action) in
            [([1_000, 1_000, 1_000, 0], Action::WaitItOut), ([1_100, 1_080, 1_040, 10], Action::GiveUpAfter)]
        {
            let buckets = [(0.0, 0.05), (0.05, 0.1), (0.1, 0.5), (0.5, f64::INFINITY)];
            let mut tally = Tally::default();
            for ((over, upto), count) in buckets.into_iter().zip(counts) {
                (0..count).for_each(|_| tally.add(&Wait::between(over, upto, Ending::Done).unwrap()));
            }
            let advice = advise(&Case::new("desk", &tally), &Entry::without_policy(), 1);
            assert_eq!(advice.advice.action, action);
            let floor = advice.advice.floor_s.unwrap();
            let found = advice.advice.buckets.unwrap();
            let [from, _] = found.best_between_s.unwrap();
            // Nobody asks for times below the floor, so what the buckets hide there costs nothing.
            assert!(from >= floor, "{from} is below {floor}");
            assert!(found.cost.is_some_and(|cost| cost > 0.0 && cost < 0.9), "{found:?}");
            assert!(!found.add_bounds_s.is_empty(), "{found:?}");
            assert!(advice.cautions.iter().any(|c| c.code == "wide_buckets"), "{:?}", advice.cautions);
        }
    }

    #[test]
    fn exact_ages_cost_nothing() {
        let waits: Vec<Wait> = ages(500).iter().map(|&t| Wait::new(t, Ending::Done).unwrap()).collect();
        let prices = super::super::judge::prices(&entry());
        assert_eq!(read(&Cells::from_waits(&waits), &entry(), None, prices, Some(1.0)), None);
        let mut tally = Tally::default();
        ages(20_000).iter().for_each(|&t| tally.add(&Wait::new(t, Ending::Done).unwrap()));
        assert_eq!(
            read(&tally.first_attempts(), &entry(), None, prices, Some(1.0)),
            None,
            "a tally's own bins"
        );
    }
}
