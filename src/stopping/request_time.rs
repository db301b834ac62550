//! How long a whole request takes with its retries. METHODS.md section 6.

use super::quantile::first_at_most;
use super::retry::{Odds, Retry};
use super::worth::Worth;
use crate::outlook::Outlook;
use crate::wait::MAX_AGE;

/// Cells of the lattice on which starts of retries are kept where they are not at fixed times.
const CELLS: usize = 2048;
/// Retries that are followed at fixed times.
const MOST_STARTS: usize = 20_000;
/// Share of requests below which what is left is not followed.
const NEGLIGIBLE: f64 = 1e-13;

/// The law of the time from a request's start until it is over: done, or out of attempts.
///
/// The first attempt starts at 0. Where nothing fails and pauses are not drawn, every retry starts at a known time
/// and all is exact: `S_tot(t) = S(τ)^n S(r)` for `t = n(τ+d_g) + r`, flat during a pause, and its counterparts
/// with a cap, growing pauses and stickiness. Else the starts of retries are kept on a lattice of 2048 cells, each
/// mass split between its two neighbours so that means are kept; quantiles are then good to about a cell.
pub struct RequestTime<'a> {
    outlook: &'a dyn Outlook,
    give_up_after: f64,
    /// Fresh attempts that start at known times, in order: time and share of requests.
    starts: Vec<(f64, f64)>,
    /// Requests that run out of attempts at known times.
    over: Vec<(f64, f64)>,
    lattice: Option<Starts>,
    /// Equal cycles without end, in place of all starts after the first.
    cycle: Option<Cycle>,
    end: f64,
    done: f64,
}

/// Attempts at equal distances: `S_tot` shrinks by one factor from each to the next.
struct Cycle {
    length: f64,
    /// Share of first attempts given up.
    gave_up: f64,
    /// Share of later attempts given up, `φ + (1-φ)S(τ)`.
    gave_up_again: f64,
    sticky: f64,
}

/// Starts of retries by cell, and what an attempt does by cell.
struct Starts {
    step: f64,
    /// Share of requests that start a fresh retry at `i * step`.
    fresh: Vec<f64>,
    /// Share out of attempts by `i * step`.
    over: Vec<f64>,
    /// `F_d(i * step)` up to the give-up time, where the last entry is.
    done: Vec<f64>,
    /// Share of requests started by `i * step`.
    started: Vec<f64>,
}

impl<'a> RequestTime<'a> {
    /// Requests whose attempts are given up at `give_up_after` (s, > 0), with the pauses and stickiness of `worth`.
    pub fn new(
        outlook: &'a dyn Outlook,
        worth: &Worth,
        retry: &Retry,
        give_up_after: f64,
    ) -> RequestTime<'a> {
        let give_up_after = give_up_after.min(MAX_AGE);
        let odds = Odds::at(outlook, give_up_after);
        let mut time = RequestTime {
            outlook,
            give_up_after,
            starts: vec![(0.0, 1.0)],
            over: vec![],
            lattice: None,
            cycle: None,
            end: give_up_after,
            done: retry.request(odds, worth).done,
        };
        if retry.attempts == Some(1) {
            if odds.failed > 0.0 {
                time.fill_lattice(worth, retry, odds);
            } else {
                time.over.push((give_up_after, odds.gave_up));
            }
        } else if odds.failed > 0.0 || (retry.jitter && worth.pause.gave_up > 0.0) {
            time.fill_lattice(worth, retry, odds);
        } else if retry.attempts.is_none() && retry.pause(worth.pause.gave_up, 2) == worth.pause.gave_up {
            time.cycle = Some(Cycle {
                length: give_up_after + worth.pause.gave_up,
                gave_up: odds.gave_up,
                gave_up_again: worth.sticky + (1.0 - worth.sticky) * odds.gave_up,
                sticky: worth.sticky,
            });
        } else {
            time.fill_fixed(worth, retry, odds);
        }
        time
    }

    /// Share of requests that are done in the end.
    pub fn done_share(&self) -> f64 {
        self.done
    }

    /// Share of requests not over at `t` s after their start.
    pub fn survival(&self, t: f64) -> f64 {
        if let Some(cycle) = &self.cycle {
            let number = (t / cycle.length).floor().max(0.0);
            return cycle.left(number) * self.in_cycle(cycle, number, t - number * cycle.length);
        }
        let mut over = 0.0;
        let whole = self.outlook.done(self.give_up_after);
        // Attempts that have run out by t count by their sum; the few that have not, one by one.
        let run_out = self.starts.partition_point(|s| s.0 + self.give_up_after <= t);
        let started = self.starts.partition_point(|s| s.0 <= t);
        over += whole * self.starts[..run_out].iter().map(|s| s.1).sum::<f64>();
        over += self.starts[run_out..started].iter().map(|s| s.1 * self.outlook.done(t - s.0)).sum::<f64>();
        over += self.over.iter().take_while(|s| s.0 <= t).map(|s| s.1).sum::<f64>();
        if let Some(starts) = &self.lattice {
            over += starts.over_by(t);
        }
        (1.0 - over).max(0.0)
    }

    /// Least time by which a share `q` (in (0, 1)) of the requests is over, s; infinite where that is never so or,
    /// where pauses grow, only after more than 20,000 attempts.
    pub fn quantile(&self, q: f64) -> f64 {
        // Rounding in the sum of many starts must not hide a share that is reached exactly.
        let most = (1.0 - q) * (1.0 + 1e-14);
        let Some(cycle) = &self.cycle else {
            return first_at_most(&|t| self.survival(t), most, self.end).unwrap_or(f64::INFINITY);
        };
        // The cycle at whose end few enough are left: gave_up · gave_up_again^number <= most.
        let number = ((most / cycle.gave_up).ln() / cycle.gave_up_again.ln()).ceil().max(0.0);
        let number = if cycle.gave_up <= most { 0.0 } else { number };
        let within = |number: f64| {
            let level = most / cycle.left(number);
            first_at_most(&|r| self.in_cycle(cycle, number, r), level, self.give_up_after)
                .map(|r| number * cycle.length + r)
        };
        // One sooner or later where the logarithms round.
        [number - 1.0, number, number + 1.0]
            .into_iter()
            .filter(|n| *n >= 0.0 && n.is_finite())
            .find_map(within)
            .unwrap_or(f64::INFINITY)
    }

    /// Share of the requests that came to cycle `number` (from 0) not over `r` s into it.
    fn in_cycle(&self, cycle: &Cycle, number: f64, r: f64) -> f64 {
        let open = self.outlook.survival(r.min(self.give_up_after));
        if number == 0.0 { open } else { cycle.sticky + (1.0 - cycle.sticky) * open }
    }

    fn fill_fixed(&mut self, worth: &Worth, retry: &Retry, odds: Odds) {
        let cap = retry.attempts.map_or(MOST_STARTS, |k| k as usize);
        self.starts.clear();
        let (mut start, mut free, mut stuck) = (0.0, 1.0, 0.0);
        for number in 1..=cap.min(MOST_STARTS) {
            let fresh = free + (1.0 - worth.sticky) * stuck;
            stuck = fresh * odds.gave_up + worth.sticky * stuck;
            free = 0.0;
            self.starts.push((start, fresh));
            self.end = start + self.give_up_after;
            if number == cap && retry.attempts.is_some() {
                self.over.push((self.end, stuck));
            }
            if stuck < NEGLIGIBLE || self.end > MAX_AGE {
                break;
            }
            start = self.end + retry.pause(worth.pause.gave_up, number as u32);
        }
    }

    fn fill_lattice(&mut self, worth: &Worth, retry: &Retry, odds: Odds) {
        let drawn = if retry.jitter { 2.0 } else { 1.0 };
        let pauses = |number: usize| {
            let number = number as u32;
            (retry.pause(worth.pause.failed, number), retry.pause(worth.pause.gave_up, number))
        };
        // How many attempts matter, and the longest they can take.
        let (mut free, mut stuck, mut attempts, mut end) = (1.0, 0.0, 0, 0.0);
        let cap = retry.attempts.map_or(400, |k| k as usize);
        while attempts < cap && free + stuck > 1e-6 {
            attempts += 1;
            let fresh = free + (1.0 - worth.sticky) * stuck;
            (free, stuck) = (fresh * odds.failed, fresh * odds.gave_up + worth.sticky * stuck);
            let (failed, gave_up) = pauses(attempts);
            end += self.give_up_after + if attempts < cap { drawn * failed.max(gave_up) } else { 0.0 };
        }
        let step = end / (CELLS - 2) as f64;
        let attempt = Lengths::of_failures(self.outlook, self.give_up_after, step);
        let mut total = vec![0.0; CELLS];
        let mut over = vec![0.0; CELLS];
        let mut free = vec![0.0; CELLS];
        let mut stuck = vec![0.0; CELLS];
        free[0] = 1.0;
        for number in 1..=attempts {
            let last = retry.attempts.is_some() && number == attempts;
            let (failed, gave_up) = if last { (0.0, 0.0) } else { pauses(number) };
            let after_failure = attempt.then_pause(failed, retry.jitter);
            let after_give_up = Lengths::at(self.give_up_after, step).then_pause(gave_up, retry.jitter);
            let (mut next_free, mut next_stuck) = (vec![0.0; CELLS], vec![0.0; CELLS]);
            for cell in 0..CELLS {
                let fresh = free[cell] + (1.0 - worth.sticky) * stuck[cell];
                let left = fresh * odds.gave_up + worth.sticky * stuck[cell];
                if fresh + left <= NEGLIGIBLE {
                    continue;
                }
                total[cell] += fresh;
                // What would start after the last one that matters is not followed.
                if number == attempts && !last {
                    continue;
                }
                after_failure.add(&mut next_free, cell, fresh);
                after_give_up.add(&mut next_stuck, cell, left);
            }
            if last {
                for (o, (f, s)) in over.iter_mut().zip(next_free.iter().zip(&next_stuck)) {
                    *o += f + s;
                }
            }
            (free, stuck) = (next_free, next_stuck);
        }
        // The first attempt starts at 0 exactly and stays apart.
        total[0] -= 1.0;
        let cumulated = |mut shares: Vec<f64>| {
            let mut sum = 0.0;
            shares.iter_mut().for_each(|s| {
                sum += *s;
                *s = sum;
            });
            shares
        };
        let cells = (self.give_up_after / step).floor() as usize;
        let mut done: Vec<f64> = (0..=cells).map(|i| self.outlook.done(step * i as f64)).collect();
        done.push(odds.done);
        self.end = step * CELLS as f64;
        self.lattice = Some(Starts {
            step,
            fresh: total.clone(),
            over: cumulated(over),
            done,
            started: cumulated(total),
        });
    }
}

impl Cycle {
    /// Share of requests that come to cycle `number`, from 0.
    fn left(&self, number: f64) -> f64 {
        if number == 0.0 { 1.0 } else { self.gave_up * self.gave_up_again.powf(number - 1.0) }
    }
}

impl Starts {
    /// Share of requests over by `t` through a retry.
    fn over_by(&self, t: f64) -> f64 {
        let place = t / self.step;
        let (cell, part) = ((place as usize).min(CELLS - 1), place.fract());
        // Out of attempts: straight lines between cells.
        let next = self.over[(cell + 1).min(CELLS - 1)];
        let mut over =
            self.over[cell] + if place < CELLS as f64 { part * (next - self.over[cell]) } else { 0.0 };
        let whole = self.done[self.done.len() - 1];
        let reach = self.done.len() - 2;
        if cell > reach {
            over += whole * self.started[cell - reach - 1];
        }
        for i in cell.saturating_sub(reach)..=cell {
            let age = cell - i;
            let (low, high) = (self.done[age], self.done[age + 1]);
            over += self.fresh[i] * (low + part * (high - low)).min(whole);
        }
        over
    }
}

/// A law of lengths on the lattice: share by number of cells, from `first` on.
struct Lengths {
    step: f64,
    first: usize,
    share: Vec<f64>,
}

impl Lengths {
    fn at(length: f64, step: f64) -> Lengths {
        let mut lengths = Lengths { step, first: (length / step) as usize, share: vec![] };
        lengths.put(length, 1.0);
        lengths
    }

    /// The age at which an attempt fails, by cells' middles; the shares add up to `F_f(τ)`.
    fn of_failures(outlook: &dyn Outlook, give_up_after: f64, step: f64) -> Lengths {
        let mut lengths = Lengths { step, first: 0, share: vec![] };
        let (mut from, mut before) = (0.0, 0.0);
        let any = outlook.failed(give_up_after) > 0.0;
        while any && from < give_up_after {
            let to = (from + step).min(give_up_after);
            let after = outlook.failed(to);
            lengths.put(0.5 * (from + to), after - before);
            (from, before) = (if to <= from { give_up_after } else { to }, after);
        }
        lengths
    }

    /// Splits a share between the two nearest cells, so that the mean is kept.
    fn put(&mut self, length: f64, share: f64) {
        let place = (length / self.step - self.first as f64).max(0.0);
        let (cell, part) = (place as usize, place.fract());
        if self.share.len() < cell + 2 {
            self.share.resize(cell + 2, 0.0);
        }
        self.share[cell] += share * (1.0 - part);
        self.share[cell + 1] += share * part;
    }

    /// This length and a pause after it, fixed or uniform between 0 and twice its length.
    fn then_pause(&self, pause: f64, jitter: bool) -> Lengths {
        let pieces = if jitter { (4.0 * pause / self.step).ceil().max(1.0) as usize } else { 1 };
        let shift = if jitter { 0.0 } else { pause };
        let first = self.first + (shift / self.step) as usize;
        let mut pauses = Lengths { step: self.step, first: first - self.first, share: vec![] };
        for piece in 0..pieces {
            let length = if jitter { 2.0 * pause * (piece as f64 + 0.5) / pieces as f64 } else { pause };
            pauses.put(length, 1.0 / pieces as f64);
        }
        let mut sum =
            Lengths { step: self.step, first, share: vec![0.0; self.share.len() + pauses.share.len()] };
        for (i, a) in self.share.iter().enumerate().filter(|(_, a)| **a > 0.0) {
            for (j, b) in pauses.share.iter().enumerate() {
                sum.share[i + j] += a * b;
            }
        }
        sum
    }

    /// Adds `weight` times this law to `cells`, counted from `start`; what lies beyond them is dropped.
    fn add(&self, cells: &mut [f64], start: usize, weight: f64) {
        let from = (start + self.first).min(cells.len());
        for (cell, share) in cells[from..].iter_mut().zip(&self.share) {
            *cell += weight * share;
        }
    }
}
