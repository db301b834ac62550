//! Being done by a deadline: the best schedule of attempts by dynamic programming. METHODS.md section 5.
//!
//! With `k` attempts and `r` seconds left, and φ the stickiness,
//!
//! ```text
//! P_k(r) = max_τ  F_d(τ) + S(τ) Q_{k-1}(r-τ-d_g) + ∫_0^τ P_{k-1}(r-u-d_f) dF_f(u)
//! Q_k(r) = max_τ  (1-φ) [the same] + φ Q_{k-1}(r-τ-d_g)          after a give-up
//! ```
//!
//! both 0 without attempts or time. The tables stand on a lattice of equal steps, since all the time there is may
//! be used and so nothing finer than a step can be lost; the choices made from them are then polished on the
//! outlook itself by their first-order condition.

use super::objective::Limits;
use super::retry::Retry;
use super::worth::Worth;
use crate::numeric::root;
use crate::outlook::Outlook;

/// Steps of the lattice between now and the deadline.
const STEPS: usize = 1000;

/// The curves of one wait at the ages of a lattice, from 0 on.
pub(crate) struct Lattice {
    pub(crate) done: Vec<f64>,
    pub(crate) survival: Vec<f64>,
    /// `F_f`; empty where nothing fails.
    pub(crate) failed: Vec<f64>,
}

/// `P_k` and, where retries are sticky, `Q_k` at the ages of a lattice.
#[derive(Clone, Debug, Default)]
pub(crate) struct Level {
    pub(crate) fresh: Vec<f64>,
    stuck: Vec<f64>,
}

impl Level {
    /// What is left to win after a give-up.
    pub(crate) fn stuck(&self) -> &[f64] {
        if self.stuck.is_empty() { &self.fresh } else { &self.stuck }
    }
}

/// One step of the recursion: the level above one whose values `d_g` and `d_f` earlier are `after_give_up` and
/// `after_failure` (by time left; `after_failure` is read only where something fails). Give-up times are the lattice's ages `least..=most`, or all
/// the time left where that is less. On smooth curves a parabola through the best three finds the top between.
pub(crate) fn level_above(
    lattice: &Lattice,
    after_give_up: &[f64],
    after_failure: &[f64],
    sticky: f64,
    (least, most): (usize, usize),
    smooth: bool,
) -> Level {
    let n = lattice.done.len();
    let mut level = Level { fresh: Vec::with_capacity(n), stuck: vec![] };
    level.fresh.push(0.0);
    if sticky > 0.0 {
        level.stuck.push(0.0);
    }
    let (mut fresh, mut stuck) = (vec![0.0; n], vec![0.0; if sticky > 0.0 { n } else { 0 }]);
    for left in 1..n {
        let (low, high) = (least.clamp(1, left), most.clamp(1, left));
        let low = low.min(high);
        let columns = lattice.done[..=high]
            .iter()
            .zip(&lattice.survival)
            .zip(after_give_up[left - high..=left].iter().rev());
        for (value, ((done, survival), rest)) in fresh.iter_mut().zip(columns) {
            *value = done + survival * rest;
        }
        if !lattice.failed.is_empty() {
            let mut sum = 0.0;
            for j in 1..=high {
                let middle = 0.5 * (after_failure[left - j] + after_failure[left - j + 1]);
                sum += middle * (lattice.failed[j] - lattice.failed[j - 1]);
                fresh[j] += sum;
            }
        }
        level.fresh.push(top(&fresh[low..=high], smooth));
        if sticky > 0.0 {
            for j in low..=high {
                stuck[j] = (1.0 - sticky) * fresh[j] + sticky * after_give_up[left - j];
            }
            level.stuck.push(top(&stuck[low..=high], smooth));
        }
    }
    level
}

/// The largest value, or the top of the parabola through it and its neighbours.
fn top(values: &[f64], smooth: bool) -> f64 {
    let (mut best, mut at) = (f64::NEG_INFINITY, 0);
    for (i, &v) in values.iter().enumerate() {
        if v > best {
            (best, at) = (v, i);
        }
    }
    if smooth && at > 0 && at + 1 < values.len() {
        let (before, after) = (values[at - 1], values[at + 1]);
        let bend = before - 2.0 * best + after;
        if bend < 0.0 {
            return best - (before - after).powi(2) / (8.0 * bend);
        }
    }
    best
}

/// What to do next: until when to let an attempt run, and the probability of being done in time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct NextAttempt {
    /// Its give-up time, s.
    pub give_up_after: f64,
    /// Probability of being done by the deadline.
    pub probability: f64,
}

/// A solved deadline.
pub struct Deadline<'a> {
    outlook: &'a dyn Outlook,
    by: f64,
    attempts: u32,
    worth: Worth,
    retry: Retry,
    limits: Limits,
    step: f64,
    smooth: bool,
    lattice: Lattice,
    /// Shares that fail, two to each step of the lattice; empty where nothing fails or the curve has steps.
    failures: Vec<(f64, f64)>,
    /// With one attempt left, two, ...
    levels: Vec<Level>,
    schedule: Vec<f64>,
    probability: f64,
}

impl<'a> Deadline<'a> {
    /// Numbers checked by the caller, who also cut the limits to the deadline.
    pub(crate) fn solve(
        outlook: &'a dyn Outlook,
        by: f64,
        attempts: u32,
        worth: &Worth,
        retry: &Retry,
        limits: Limits,
    ) -> Deadline<'a> {
        let step = by / STEPS as f64;
        let ages = || (0..=STEPS).map(|i| step * i as f64);
        let mut lattice = Lattice {
            done: ages().map(|t| outlook.done(t)).collect(),
            survival: ages().map(|t| outlook.survival(t)).collect(),
            failed: vec![],
        };
        if outlook.failed(by) > 0.0 {
            lattice.failed = ages().map(|t| outlook.failed(t)).collect();
        }
        let smooth = (0..16).all(|i| outlook.hazards(by * (f64::from(i) + 0.5) / 16.0).is_some());
        let failures = if smooth && !lattice.failed.is_empty() {
            ages().zip(ages().skip(1)).flat_map(|(a, b)| failures(outlook, a, b)).collect()
        } else {
            vec![]
        };
        let mut deadline = Deadline {
            outlook,
            by,
            attempts,
            worth: *worth,
            retry: *retry,
            limits,
            step,
            smooth,
            lattice,
            failures,
            levels: vec![],
            schedule: vec![],
            probability: 0.0,
        };
        deadline.fill();
        deadline.schedule();
        deadline
    }

    /// The deadline, s.
    pub fn by(&self) -> f64 {
        self.by
    }

    /// The cap on attempts.
    pub fn attempts(&self) -> u32 {
        self.attempts
    }

    /// Largest probability of being done by the deadline.
    pub fn probability(&self) -> f64 {
        self.probability
    }

    /// Give-up times of the attempts in turn, s, as long as none fails; after a failure ask
    /// [`Deadline::next`] with the time left. Where nothing fails or sticks their order does not matter, and the
    /// longest comes first. May hold fewer than the attempts allowed.
    pub fn give_up_times(&self) -> &[f64] {
        &self.schedule
    }

    /// The best next attempt with `left` seconds (at most the deadline) and `attempts` attempts left, at the
    /// start, or after a failure, or (`after_give_up`) after a give-up.
    pub fn next(&self, left: f64, attempts: u32, after_give_up: bool) -> NextAttempt {
        let attempts = attempts.min(self.attempts) as usize;
        self.choose(attempts, left.min(self.by), after_give_up && self.worth.sticky > 0.0)
    }

    /// Probability of being done in time when the first attempt is given up at `t` and all is best after it.
    pub fn first(&self, t: f64) -> f64 {
        self.probability_of(self.attempts as usize, self.by, t.clamp(0.0, self.by), false)
    }

    /// The gain in probability from holding on to an attempt of this age (s) against giving it up now, with
    /// `left` seconds and `attempts` further attempts left; and the age until which to hold on.
    pub fn holding_on(&self, age: f64, left: f64, attempts: u32) -> (f64, f64) {
        let (k, left) = (attempts.min(self.attempts.saturating_sub(1)) as usize, left.min(self.by));
        let open = self.outlook.survival(age);
        if left <= 0.0 || open <= 0.0 {
            return (0.0, age);
        }
        let (pause, _) = self.pauses(k + 1);
        let let_go = self.rest(k, left - pause, true);
        let end = self.limits.ceiling().min(age + left).max(age);
        let ages = self.candidates(age, end);
        let chances = self.chances(k, left + age, &ages);
        let done = self.outlook.done(age);
        let mut best = (let_go, age);
        for (&t, chance) in ages.iter().zip(chances) {
            let chance = (chance - done) / open;
            if chance > best.0 {
                best = (chance, t);
            }
        }
        (best.0 - let_go, best.1)
    }

    /// For give-up times `ages`, sorted: `F_d(t) + S(t) Q_k(left-t-d_g) + ∫ P_k(left-u-d_f) dF_f(u)`, the integral from
    /// the first of the ages on by the trapezoid rule. Good enough to say where a top lies.
    fn chances(&self, k: usize, left: f64, ages: &[f64]) -> Vec<f64> {
        let (pause, pause_failed) = self.pauses(k + 1);
        let fails = k > 0 && !self.lattice.failed.is_empty();
        let (mut sum, mut before) = (0.0, None);
        ages.iter()
            .map(|&t| {
                if fails {
                    let now = (self.outlook.failed(t), self.rest(k, left - t - pause_failed, false));
                    if let Some((failed, rest)) = before.replace(now) {
                        sum += 0.5 * (rest + now.1) * (now.0 - failed);
                    }
                }
                self.outlook.done(t) + self.outlook.survival(t) * self.rest(k, left - t - pause, true) + sum
            })
            .collect()
    }

    /// Pauses after the attempt that is made with `k` attempts left, s: after a give-up, after a failure.
    fn pauses(&self, k: usize) -> (f64, f64) {
        let number = self.attempts + 1 - (k as u32).clamp(1, self.attempts);
        (
            self.retry.pause(self.worth.pause.gave_up, number),
            self.retry.pause(self.worth.pause.failed, number),
        )
    }

    fn fill(&mut self) {
        let range = (
            (self.limits.floor() / self.step).ceil() as usize,
            ((self.limits.ceiling() / self.step) * (1.0 + 1e-12)).floor() as usize,
        );
        for k in 1..=self.attempts as usize {
            let (after_give_up, after_failure) = self.pauses(k);
            let earlier = |pause: f64, stuck: bool| -> Vec<f64> {
                (0..=STEPS).map(|i| self.rest(k - 1, self.step * i as f64 - pause, stuck)).collect()
            };
            let level = level_above(
                &self.lattice,
                &earlier(after_give_up, true),
                &earlier(after_failure, false),
                self.worth.sticky,
                range,
                self.smooth,
            );
            self.levels.push(level);
        }
    }

    /// `P_k(r)`, or `Q_k(r)` if `stuck`: on the outlook itself for one attempt, else from the table.
    fn rest(&self, k: usize, left: f64, stuck: bool) -> f64 {
        if k == 0 || left <= 0.0 {
            return 0.0;
        }
        if k == 1 {
            let fresh = if stuck { 1.0 - self.worth.sticky } else { 1.0 };
            return fresh * self.outlook.done(left.min(self.limits.ceiling()));
        }
        let level = &self.levels[k - 1];
        let table = if stuck { level.stuck() } else { &level.fresh };
        if self.smooth {
            cubic(table, left / self.step).0
        } else {
            // What can surely be had: the value at the lattice's age before.
            table[(((left / self.step) * (1.0 + 1e-12)) as usize).min(STEPS)]
        }
    }

    /// Derivative of [`Deadline::rest`] by the time left; smooth curves only.
    fn rest_slope(&self, k: usize, left: f64, stuck: bool) -> f64 {
        if k == 0 || left <= 0.0 {
            return 0.0;
        }
        if k == 1 {
            let fresh = if stuck { 1.0 - self.worth.sticky } else { 1.0 };
            let inside = left < self.limits.ceiling();
            let hazard = self.outlook.hazards(left).filter(|_| inside).map_or(0.0, |h| h.0);
            return fresh * hazard * self.outlook.survival(left);
        }
        let level = &self.levels[k - 1];
        let table = if stuck { level.stuck() } else { &level.fresh };
        cubic(table, left / self.step).1 / self.step
    }

    /// `∫ P_k(r-u-d_f) dF_f(u)` over `from..to`, `r` counted from the attempt's start.
    fn after_failures(&self, k: usize, left: f64, from: f64, to: f64) -> f64 {
        if k == 0 || self.lattice.failed.is_empty() {
            return 0.0;
        }
        let (_, pause) = self.pauses(k + 1);
        let to = to.min(left - pause);
        if to <= from {
            return 0.0;
        }
        if self.smooth {
            // From the tables even for one attempt: sums of many cells need no more, and a table carries no noise.
            let table = &self.levels[k - 1].fresh;
            let rest = |&(u, share): &(f64, f64)| {
                let left = (left - u - pause) / self.step;
                if left > 0.0 { share * cubic(table, left).0 } else { 0.0 }
            };
            let piece = |a: f64, b: f64| failures(self.outlook, a, b).iter().map(rest).sum::<f64>();
            let (first, last) = ((from / self.step).ceil() as usize, (to / self.step).floor() as usize);
            if first > last {
                return piece(from, to);
            }
            let whole: f64 = self.failures[2 * first..2 * last].iter().map(rest).sum();
            return piece(from, self.step * first as f64) + whole + piece(self.step * last as f64, to);
        }
        let knots = self.outlook.knots();
        let inside = knots.partition_point(|&u| u <= from)..knots.partition_point(|&u| u <= to);
        let mut before = self.outlook.failed(from);
        knots[inside]
            .iter()
            .map(|&u| {
                let after = self.outlook.failed(u);
                let step = after - before;
                before = after;
                step * self.rest(k, left - u - pause, false)
            })
            .sum()
    }

    /// Probability with `k` attempts and `left` seconds when the next one is given up at `t`.
    fn probability_of(&self, k: usize, left: f64, t: f64, stuck: bool) -> f64 {
        let (pause, _) = self.pauses(k);
        let rest = left - t - pause;
        // Two attempts without failures can be had exactly.
        let after = if self.smooth && k == 3 && self.lattice.failed.is_empty() {
            self.choose(2, rest, self.worth.sticky > 0.0).probability
        } else {
            self.rest(k - 1, rest, true)
        };
        let fresh = self.outlook.done(t)
            + self.outlook.survival(t) * after
            + self.after_failures(k - 1, left, 0.0, t);
        if stuck { (1.0 - self.worth.sticky) * fresh + self.worth.sticky * after } else { fresh }
    }

    /// Derivative of [`Deadline::probability_of`] by `t`.
    fn slope_of(&self, k: usize, left: f64, t: f64, stuck: bool) -> f64 {
        let (pause, pause_failed) = self.pauses(k);
        let rest = left - t - pause;
        let Some((done, failed)) = self.outlook.hazards(t) else { return f64::NAN };
        let later = self.rest_slope(k - 1, rest, true);
        let fresh = self.outlook.survival(t)
            * (done - (done + failed) * self.rest(k - 1, rest, true) - later
                + failed * self.rest(k - 1, left - t - pause_failed, false));
        if stuck { (1.0 - self.worth.sticky) * fresh - self.worth.sticky * later } else { fresh }
    }

    /// Ages to look at between two, both included.
    fn candidates(&self, from: f64, to: f64) -> Vec<f64> {
        let first = (from / self.step).ceil().max(1.0) as usize;
        let mut ages: Vec<f64> =
            (first..=STEPS).map(|i| self.step * i as f64).take_while(|&t| t < to).collect();
        if !self.smooth {
            let knots = self.outlook.knots();
            ages.extend(&knots[knots.partition_point(|&u| u < from)..knots.partition_point(|&u| u < to)]);
        }
        ages.extend([from, to]);
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        ages
    }

    /// The best next attempt with `k` attempts and `left` seconds.
    fn choose(&self, k: usize, left: f64, stuck: bool) -> NextAttempt {
        if k == 0 || left <= 0.0 {
            return NextAttempt { give_up_after: 0.0, probability: 0.0 };
        }
        let end = left.min(self.limits.ceiling());
        let start = self.limits.floor().min(end);
        if k == 1 {
            return NextAttempt { give_up_after: end, probability: self.rest(1, left, stuck) };
        }
        let (pause, _) = self.pauses(k);
        let mut ages = self.candidates(start, end);
        if !self.smooth && k == 2 {
            // So that the last attempt ends on an ending.
            let before_endings = self.outlook.knots().iter().map(|u| left - pause - u);
            ages.extend(before_endings.filter(|&t| t >= start && t <= end));
            ages.sort_by(f64::total_cmp);
        }
        let phi = if stuck { self.worth.sticky } else { 0.0 };
        let rough: Vec<f64> = ages
            .iter()
            .zip(self.chances(k - 1, left, &ages))
            .map(|(&t, fresh)| (1.0 - phi) * fresh + phi * self.rest(k - 1, left - t - pause, true))
            .collect();
        let peak = rough.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        // Of equal tops the last: the longest attempt goes first.
        let at = rough.iter().rposition(|&p| p >= peak - 1e-13).unwrap_or(0);
        let mut best = NextAttempt {
            give_up_after: ages[at],
            probability: self.probability_of(k, left, ages[at], stuck),
        };
        if self.smooth {
            let (a, b) = (ages[at.saturating_sub(1)], ages[(at + 1).min(ages.len() - 1)]);
            let slope = |t: f64| self.slope_of(k, left, t, stuck);
            if slope(a) > 0.0
                && slope(b) < 0.0
                && let Ok(t) = root(&slope, a, b, 1e-14)
            {
                let probability = self.probability_of(k, left, t, stuck);
                if probability >= best.probability {
                    best = NextAttempt { give_up_after: t, probability };
                }
            }
        }
        best
    }

    fn schedule(&mut self) {
        let (mut left, mut schedule) = (self.by, vec![]);
        for k in (1..=self.attempts as usize).rev() {
            let next = self.choose(k, left, !schedule.is_empty() && self.worth.sticky > 0.0);
            if k == self.attempts as usize {
                self.probability = next.probability;
            }
            if next.give_up_after <= 0.0 {
                break;
            }
            schedule.push(next.give_up_after);
            left -= next.give_up_after + self.pauses(k).0;
            if left <= 0.0 {
                break;
            }
        }
        if self.lattice.failed.is_empty() && self.worth.sticky == 0.0 {
            schedule.sort_by(|a, b| b.total_cmp(a));
            if self.smooth {
                self.equalise(&mut schedule);
                schedule.sort_by(|a, b| b.total_cmp(a));
            }
            let log_survival: f64 = schedule.iter().map(|&t| (-self.outlook.done(t)).ln_1p()).sum();
            self.probability = self.probability.max(-log_survival.exp_m1());
        }
        self.schedule = schedule;
    }

    /// Without failures `Π S(τ_i)` is least, over a fixed sum, where all hazards are equal: pair by pair.
    fn equalise(&self, schedule: &mut [f64]) {
        let hazard = |t: f64| self.outlook.hazards(t).map_or(f64::NAN, |h| h.0);
        let held = |t: f64| (-self.outlook.done(t)).ln_1p();
        for _ in 0..100 {
            let mut moved: f64 = 0.0;
            for i in 0..schedule.len() {
                for j in 0..i {
                    let (first, sum) = (schedule[i], schedule[i] + schedule[j]);
                    let reach = 2.0 * self.step;
                    let low = self.limits.floor().max(first - reach).max(sum - self.limits.ceiling());
                    let high = (first + reach).min(self.limits.ceiling()).min(sum - self.limits.floor());
                    let gap = |t: f64| hazard(t) - hazard(sum - t);
                    if !(low > 0.0 && high < sum && gap(low) > 0.0 && gap(high) < 0.0) {
                        continue;
                    }
                    let Ok(t) = root(&gap, low, high, 1e-15) else { continue };
                    if held(t) + held(sum - t) <= held(first) + held(schedule[j]) {
                        moved = moved.max((t - first).abs() / first);
                        (schedule[i], schedule[j]) = (t, sum - t);
                    }
                }
            }
            if moved < 1e-13 {
                break;
            }
        }
    }
}

/// The failures between two ages as shares at the two points of Gauss and Legendre, in proportion to the density there
/// and adding up to what fails.
fn failures(outlook: &dyn Outlook, from: f64, to: f64) -> [(f64, f64); 2] {
    let (middle, reach) = (0.5 * (from + to), 0.5 * (to - from) / 3f64.sqrt());
    let share = (outlook.failed(to) - outlook.failed(from)).max(0.0);
    let density = |u: f64| outlook.hazards(u).map_or(0.0, |h| h.1 * outlook.survival(u));
    let (early, late) = (density(middle - reach), density(middle + reach));
    let part = if (early + late).is_normal() { early / (early + late) } else { 0.5 };
    [(middle - reach, share * part), (middle + reach, share * (1.0 - part))]
}

/// Value and slope (per step) at `x` steps of the cubic through the four nearest entries, kept between the two
/// nearest since the table never falls.
pub(crate) fn cubic(table: &[f64], x: f64) -> (f64, f64) {
    let last = table.len() - 1;
    if x >= last as f64 {
        return (table[last], 0.0);
    }
    let i = (x as usize).clamp(1, last - 2);
    let s = x - i as f64;
    let (a, b, c, d) = (table[i - 1], table[i], table[i + 1], table[i + 2]);
    // Newton's form about b.
    let (first, second, third) = (b - a, (a - 2.0 * b + c) / 2.0, (d - 3.0 * c + 3.0 * b - a) / 6.0);
    let value = b + s * (first + (s + 1.0) * (second + (s - 1.0) * third));
    let slope = first + (2.0 * s + 1.0) * second + (3.0 * s * s - 1.0) * third;
    let near = x as usize;
    // Rounding may leave neighbours in the wrong order.
    let (low, high) = (table[near].min(table[near + 1]), table[near].max(table[near + 1]));
    (value.max(low).min(high), slope)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_cubic_is_exact_on_cubics() {
        let f = |x: f64| 1.0 + x + 0.5 * x * x + 0.1 * x * x * x;
        let table: Vec<f64> = (0..10).map(|i| f(f64::from(i))).collect();
        for x in [0.3, 1.0, 4.75, 8.6] {
            let (value, slope) = cubic(&table, x);
            assert!((value - f(x)).abs() < 1e-10, "{x}: {value} {}", f(x));
            assert!((slope - (1.0 + x + 0.3 * x * x)).abs() < 1e-10, "{x}");
        }
    }
}
