//! From cells to a judgement: every curve the data leave open, scored, and the choice among give-up times.
//! METHODS.md sections 5 to 8, RECIPE's steps 1 to 5.

use std::sync::Arc;

use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

use super::bounds::Bounds;
use super::{Case, History};
use crate::advice::{Action, Change, Decision, Look, Outcome, Proposal, Rival, SecondCopy, Stickiness};
use crate::curve::{Empirical, KaplanMeier, LifeTable, PiecewiseHazard};
use crate::outlook::{Average, Averaging, Failures, Grid, Sampled};
use crate::policy::{Entry, GiveUp, Jitter, Sticky};
use crate::say;
use crate::stopping::{
    self, Aim, Bootstrap, Choice, Competing, Doubt, Failure, FarTail, GridObjective, Holding, Limits,
    Objective, Odds, Optimum, Reached, Regret, RequestTime, Retry, Rule, Sides, Worth, copy_or_retry,
    flips_at, stickiness,
};
use crate::tail::{self, Draw, Ensemble, LEAST_WEIGHT, RemainingWait, TailClass, Verdict, verdict};
use crate::tally::{Cause, Cells, Mass, Sample, Tally};

/// Replicates of the empirical curve (RECIPE's fourth section).
const REPLICATES: usize = 40;
/// Standard normal deviate of a two-sided 90% interval.
const NINETY: f64 = 1.644_853_626_951_472_2;
/// Ages at which the worth of holding on is reported.
const HOLDING_POINTS: usize = 24;
/// Extra load of a second copy where the policy names no ceiling: the common 5% (Dean & Barroso 2013).
const COPY_LOAD: f64 = 0.05;
/// What a time may lose, a share, to lie a little after the last of a bulk rather than a little before; and the steps in
/// which it is sought.
const NEXT_TO_NOTHING: f64 = 5e-4;
const LATER: i32 = 64;
/// The share of requests that must be over for a total to count as late.
const LATE: f64 = 0.999;
/// How much longer a late total must be with a timer than without.
const LONGER: f64 = 1.05;
/// A look past the edge is planned to take this long, s.
const LOOK: f64 = 7.0 * 86_400.0;
/// Cells beyond this many are joined before they are bootstrapped: about as fine as the ages that are compared.
const MOST_CELLS: usize = 600;

/// Everything that was found out about one stream.
pub(crate) struct Judgement {
    pub(crate) ensemble: Ensemble,
    pub(crate) verdict: Verdict,
    /// Last age about which the data speak, s.
    pub(crate) sight: f64,
    /// Share of all waits that were cut off there or later, and not seen to end.
    pub(crate) unseen: f64,
    /// The ages on which curves are sampled.
    pub(crate) grid: Grid,
    /// Cumulative hazard of failures at those ages; empty where nothing fails.
    pub(crate) failures: Failures,
    /// Replicates of the empirical curve.
    pub(crate) replicates: Vec<Sampled>,
    /// The choice, or why there is none although the evidence suffices.
    pub(crate) outcome: Result<Settled, String>,
}

/// A chosen give-up time with what it does.
pub(crate) struct Settled {
    pub(crate) at: f64,
    pub(crate) wait_it_out: bool,
    pub(crate) choice: Choice,
    pub(crate) regret: Regret,
    /// Regret of the time in force, where one is.
    pub(crate) now: Option<(GiveUp, Regret)>,
    /// The time proposed before, s, with its regret.
    standing: Option<(f64, Regret)>,
    /// Whether the last change is too recent for another.
    resting: bool,
    /// Expected regret of giving up a little sooner, above that of the choice.
    pub(crate) sooner_costs: f64,
    /// How the load ceiling moved the choice.
    pub(crate) load: LoadCeiling,
    pub(crate) sides: Sides,
    pub(crate) sticky: Option<Stickiness>,
    pub(crate) longer_tail: Option<LongerTail>,
    advised: Outcome,
    in_force: Option<Outcome>,
    never: Outcome,
    rivals: Vec<Rival>,
    holding_on: Vec<[f64; 2]>,
    retry_budget: Option<f64>,
    look: Option<Look>,
    second_copy: Option<SecondCopy>,
    schedule: Vec<f64>,
    /// The believed curve, every curve with its scores, and the prices by which both are read.
    pub(super) average: Average,
    pub(super) doubt: Doubt,
    pub(super) worth: Worth,
    pub(super) retry: Retry,
}

/// A timer that shortens the mean total and lengthens its tail. Means in s.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct LongerTail {
    pub(crate) mean: f64,
    pub(crate) mean_never: f64,
    /// What one request in a thousand exceeds, s, with the timer and without; absent where only totals still longer are
    /// more frequent.
    pub(crate) late: Option<[f64; 2]>,
}

/// What the ceiling on attempts per request did.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum LoadCeiling {
    /// There is none, or the choice keeps within it.
    Kept,
    /// It moved the choice up from this age, s.
    Moved(f64),
    /// No give-up time keeps within it.
    Unreachable,
}

impl Judgement {
    /// `None` where no law at all can be fitted and no curve drawn. `open`: every wait that is open, also those that are
    /// not among the cells because nobody is watched at the ages before theirs.
    pub(crate) fn of(
        cells: &Cells,
        open: &[Mass],
        entry: &Entry,
        bounds: &Bounds,
        case: &Case<'_>,
        seed: u64,
    ) -> Option<Judgement> {
        let (tally, history) = (case.tally, case.history);
        let coarse = cells.coarsened(MOST_CELLS);
        let table = LifeTable::of(&coarse).ok()?;
        let curve = KaplanMeier::of(&table);
        let empirical = Empirical::of(&table);
        let sample = cells.sample(Cause::Done);
        let grid = Grid::new(bounds.first, bounds.floor, bounds.ceiling);
        let ensemble = tail::ensemble(&sample, &grid, seed).ok()?;
        let failing = PiecewiseHazard::fit(&coarse.sample(Cause::Failed));
        let failures = failing.as_ref().map_or_else(Failures::default, |hazard| {
            Failures::new(grid.ages().iter().map(|&t| hazard.cumulative(t)).collect())
        });
        let replicates = replicates(&table, &ensemble, &failures, &grid, seed);
        let verdict = verdict(&sample, open, &ensemble, &grid, &replicates);
        let sight = table.sight();
        let mut judgement = Judgement {
            verdict,
            sight,
            unseen: curve.survival(sight) * cut_off_share(&coarse.sample(Cause::Any), sight),
            outcome: Err(String::new()),
            ensemble,
            grid,
            failures,
            replicates,
        };
        let Some((mut worth, retry)) = prices(entry) else { return Some(judgement) };
        let sticky = sticky(cells, &tally.retries(), entry, &curve);
        worth.sticky = sticky.as_ref().map_or(0.0, |s| s.value);
        let (grid, empirical) = (&judgement.grid, &empirical);
        let scene = Scene { entry, bounds, grid, worth, retry, empirical, sight, tally, history };
        judgement.outcome = scene.settle(&judgement, failing.as_ref(), sticky);
        Some(judgement)
    }
}

/// The price list of an entry and what follows an attempt, as they are reckoned with; without an aim none.
pub(crate) fn prices(entry: &Entry) -> Option<(Worth, Retry)> {
    let mut worth = entry.worth?;
    // A deadline brings its own cap.
    let attempts = match worth.aim {
        Aim::Deadline { attempts, .. } => Some(attempts),
        _ => entry.retry.attempts,
    };
    let mut retry = Retry { attempts, growth: entry.retry.backoff.factor, ..Retry::default() };
    if entry.retry.backoff.jitter == Jitter::Full {
        // Drawn evenly from 0 to its full length, a pause lasts half of that on average.
        retry.jitter = true;
        worth.pause.failed *= 0.5;
        worth.pause.gave_up *= 0.5;
    }
    Some((worth, retry))
}

/// Of the waits that reach past an age, the share that was cut off there or later and not seen to end.
fn cut_off_share(sample: &Sample, sight: f64) -> f64 {
    let cut_off: f64 = sample.censored.iter().filter(|m| m.age >= sight).map(|m| m.weight).sum();
    let ended: f64 = sample.events.iter().filter(|e| e.upto > sight).map(|e| e.weight).sum();
    if cut_off > 0.0 { cut_off / (cut_off + ended) } else { 0.0 }
}

/// Bootstrapped empirical curves, each going on past the edge of sight with a draw of a family that is picked by its
/// plain Akaike weight.
fn replicates(
    table: &LifeTable,
    ensemble: &Ensemble,
    failures: &Failures,
    grid: &Grid,
    seed: u64,
) -> Vec<Sampled> {
    let Some(bootstrap) = Bootstrap::of(table) else { return Vec::new() };
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed.wrapping_add(1));
    let tails: Vec<(f64, &Draw)> = ensemble
        .members
        .iter()
        .filter(|m| m.decides && m.fit.weight > LEAST_WEIGHT)
        .flat_map(|m| m.draws.iter().map(|d| (m.fit.weight * d.weight, d)))
        .collect();
    let total: f64 = tails.iter().map(|(weight, _)| weight).sum();
    (0..REPLICATES)
        .map(|_| {
            let mut left = total * random.random::<f64>();
            let picked = tails.iter().find(|(weight, _)| {
                left -= weight;
                left <= 0.0
            });
            let tail = picked.or(tails.last()).map_or_else(Sampled::default, |(_, draw)| {
                Sampled::join(grid, draw.survival.clone(), failures)
            });
            bootstrap.draw(grid, &tail, &mut random)
        })
        .collect()
}

/// Stickiness as the policy wants it known: given, from numbered attempts, or not known and taken as 0.
fn sticky(cells: &Cells, retries: &Cells, entry: &Entry, curve: &KaplanMeier) -> Option<Stickiness> {
    let named = |value: f64, from: &str| {
        Some(Stickiness { value, interval: None, from: from.to_owned(), flips_at: None })
    };
    match entry.retry.sticky {
        Sticky::Given(phi) => named(phi, "policy"),
        Sticky::Unknown => named(0.0, "unknown"),
        Sticky::FromData => {
            let estimate = cut(cells).and_then(|at| {
                let table = LifeTable::of(retries).ok()?;
                let again = KaplanMeier::of(&table);
                stickiness(reached(curve, at, cells.total()), reached(&again, at, retries.total()), NINETY)
            });
            match estimate {
                Some(found) => Some(Stickiness {
                    value: found.value,
                    interval: Some(found.interval),
                    from: "data".to_owned(),
                    flips_at: None,
                }),
                None if cells.gave_up.is_empty() => None,
                None => named(0.0, "unknown"),
            }
        }
    }
}

/// The age at which first attempts are given up, s: where most of them are. Just before the earliest of the crowd, so
/// that the timer's own jitter does not count as waiting.
fn cut(cells: &Cells) -> Option<f64> {
    let total: f64 = cells.gave_up.iter().map(|m| m.weight).sum();
    let mut below = 0.0;
    cells
        .gave_up
        .iter()
        .find(|m| {
            below += m.weight;
            below >= 0.05 * total
        })
        .map(|m| m.age)
        .filter(|_| total > 0.0)
}

/// How many are still open at an age, and on how many attempts that rests.
fn reached(curve: &KaplanMeier, at: f64, total: f64) -> Reached {
    let (survival, variance) = (curve.survival(at), curve.variance(at));
    let attempts = if variance > 0.0 { survival * (1.0 - survival) / variance } else { total };
    Reached { survival, attempts: attempts.min(total) }
}

/// What stays the same while a stream is judged.
struct Scene<'a> {
    entry: &'a Entry,
    bounds: &'a Bounds,
    grid: &'a Grid,
    worth: Worth,
    retry: Retry,
    empirical: &'a Empirical,
    sight: f64,
    tally: &'a Tally,
    history: History,
}

impl Scene<'_> {
    fn settle(
        &self,
        judgement: &Judgement,
        failing: Option<&PiecewiseHazard>,
        sticky: Option<Stickiness>,
    ) -> Result<Settled, String> {
        let Judgement { ensemble, failures, replicates, .. } = judgement;
        let rules = self.rules();
        let now = self.entry.now;
        let mut settings: Vec<f64> = rules.iter().map(|(_, t)| *t).collect();
        settings.extend(now.map(GiveUp::seconds));
        settings.extend(self.history.standing);
        let objective = GridObjective::new(self.grid, &self.worth, &self.retry, &settings)
            .map_err(|error| format!("{error}; {}", error.remedy()))?;
        let mut doubt = Doubt::new(objective);
        let mut believed = Averaging::new(self.grid);
        // What those believe who put the best time past the edge of sight.
        let mut beyond = Averaging::new(self.grid);
        let mut count = |member: usize, curve: &Sampled, weight: f64| {
            if doubt.add(member, curve, weight) {
                believed.add(weight, curve);
                if doubt.bests().last().is_some_and(|b| b.at > self.sight) {
                    beyond.add(weight, curve);
                }
            }
        };
        let upto = self.grid.decide().end;
        for (number, member) in ensemble.members.iter().enumerate().filter(|(_, m)| m.weight > LEAST_WEIGHT) {
            for draw in &member.draws {
                let curve = Sampled::join(self.grid, draw.survival[..upto].to_vec(), failures);
                count(number, &curve, member.weight * draw.weight);
            }
        }
        let share = ensemble.empirical / replicates.len().max(1) as f64;
        for replicate in replicates {
            count(ensemble.members.len(), replicate, share);
        }
        let nothing = "nothing that can happen earns more than an attempt costs, so there is no rate to lose by waiting; \
                       give a completion a worth above the attempt cost, or choose another aim";
        let mut choice = doubt.choose(self.entry.guard.slack).ok_or(nothing)?;
        if ensemble.empirical > 0.5 {
            choice = self.refined(choice, doubt.ages());
        }
        let average = believed.finish(self.grid, self.sight).ok_or(nothing)?;
        let limits = Limits::new(self.bounds.floor, self.bounds.ceiling).map_err(|e| e.to_string())?;
        let objective =
            Objective::new(&average, &self.worth, &self.retry, limits).map_err(|e| e.to_string())?;
        let optimum = stopping::best(&objective).map_err(|e| format!("{e}; {}", e.remedy()))?;

        let (mut at, load) = self.within_load(&average, choice);
        if self.nothing_to_gain(&judgement.verdict, choice) {
            at = self.bounds.ceiling;
        }
        let wait_it_out = at >= self.bounds.ceiling;
        let regrets = doubt.expected();
        let regret_at = |t: f64| interpolate(doubt.ages(), &regrets, t);
        let regret = match load {
            LoadCeiling::Kept if at == choice.at => choice.regret,
            _ => Regret {
                expected: regret_at(at),
                percentile_95: choice.regret.percentile_95.max(regret_at(at)),
            },
        };
        let sides = Sides::of(doubt.bests(), self.sight);
        let rivals = rules
            .iter()
            .enumerate()
            .filter_map(|(i, (rule, t))| {
                Some(Rival {
                    rule: rule.name(),
                    give_up_after_s: t.is_finite().then_some(*t),
                    rate_per_s: finite(objective.score(t.min(self.bounds.ceiling)))?,
                    expected_regret: doubt.regret_of_setting(i)?.expected,
                })
            })
            .collect();
        let ceiling = self.bounds.ceiling;
        let request = |t: f64| RequestTime::new(&average, &self.worth, &self.retry, t.min(ceiling));
        let (with, without) = (request(at), request(ceiling));
        let attempts = |t: f64| self.retry.request(Odds::at(&average, t), &self.worth).attempts;
        Ok(Settled {
            at,
            wait_it_out,
            choice,
            regret,
            standing: self.history.standing.and_then(|t| {
                let number = rules.len() + usize::from(now.is_some());
                Some((t, doubt.regret_of_setting(number)?))
            }),
            resting: self.history.since_change.is_some_and(|t| t < self.entry.guard.cool_down),
            now: now.and_then(|n| Some((n, doubt.regret_of_setting(rules.len())?))),
            sooner_costs: regret_at((at / 1.15).max(self.bounds.floor)) - regret_at(at),
            load,
            longer_tail: self.longer_tail(ensemble, failing, &average, at, [&with, &without]),
            advised: outcome_over(&objective, ceiling, Some(at), &with),
            in_force: now.map(|n| {
                let total = request(n.seconds());
                outcome_over(&objective, ceiling, finite(n.seconds()), &total)
            }),
            never: outcome_over(&objective, ceiling, None, &without),
            rivals,
            holding_on: self.holding_on(&objective, &optimum),
            retry_budget: finite(attempts(at) - 1.0).filter(|_| !wait_it_out),
            look: self.look(&sides, worth_of(&objective, &optimum), beyond),
            second_copy: self.second_copy(&average),
            schedule: objective.deadline().map(|d| d.give_up_times().to_vec()).unwrap_or_default(),
            sticky: sticky.map(|s| Stickiness {
                flips_at: (!wait_it_out)
                    .then(|| flips_at(&average, &self.worth, &self.retry, limits, at).ok().flatten())
                    .flatten(),
                ..s
            }),
            sides,
            worth: self.worth,
            retry: self.retry,
            average,
            doubt,
        })
    }

    /// The rules in common use with the times that they set, s; infinite for never.
    fn rules(&self) -> Vec<(Rule, f64)> {
        let end = self.sight;
        Rule::USUAL
            .into_iter()
            .filter_map(|rule| Some((rule, rule.give_up_after(self.empirical, end)?)))
            .collect()
    }

    /// The choice moved to the best age of the exact curve within a step of the grid, or as much later as costs next to
    /// nothing. Where no family fits, completions may stop at an age that lies between two of the grid, and a time just
    /// before it would cut the last of them.
    fn refined(&self, choice: Choice, ages: &[f64]) -> Choice {
        let i = ages.partition_point(|&t| t < choice.at);
        let (from, upto) = (ages[i.saturating_sub(1)], ages[(i + 1).min(ages.len() - 1)]);
        if choice.wait_it_out || upto > self.sight || matches!(self.worth.aim, Aim::Deadline { .. }) {
            return choice;
        }
        let exact = |limits| {
            let objective = Objective::new(self.empirical, &self.worth, &self.retry, limits).ok()?;
            let best = stopping::best(&objective).ok()?;
            let least = best.score - NEXT_TO_NOTHING * best.score.abs();
            let later = |i: i32| best.at + (upto - best.at) * f64::from(i) / f64::from(LATER);
            (0..LATER).rev().map(later).find(|&t| objective.score(t) >= least)
        };
        let Some(at) = Limits::new(from, upto).ok().and_then(exact) else { return choice };
        let holding = |[from, upto]: [f64; 2]| [from.min(at), upto.max(at)];
        Choice { at, interval: holding(choice.interval), band: holding(choice.band), ..choice }
    }

    /// Whether waiting on is within the slack of the best, and the verdict says that the end comes nearer as one waits.
    /// A give-up time would then rest on nothing but what no wait has shown.
    fn nothing_to_gain(&self, verdict: &Verdict, choice: Choice) -> bool {
        verdict.class == TailClass::Light
            && matches!(verdict.remaining_wait, RemainingWait::Shrinking | RemainingWait::Flat)
            && choice.band[1] >= self.bounds.ceiling
    }

    /// The choice, moved up where attempts per request would exceed the ceiling.
    fn within_load(&self, average: &Average, choice: Choice) -> (f64, LoadCeiling) {
        let Some(load) = self.entry.retry.load_ceiling else { return (choice.at, LoadCeiling::Kept) };
        let Bounds { floor, ceiling, .. } = *self.bounds;
        match self.retry.least_within_load(average, &self.worth, floor, ceiling, load) {
            None => (ceiling, LoadCeiling::Unreachable),
            Some(least) if least > choice.at => (least, LoadCeiling::Moved(choice.at)),
            Some(_) => (choice.at, LoadCeiling::Kept),
        }
    }

    fn holding_on(&self, objective: &Objective<'_>, optimum: &Optimum) -> Vec<[f64; 2]> {
        let mut curve = Holding::new(objective, optimum).curve(HOLDING_POINTS);
        curve.retain(|point| point.iter().all(|v| v.is_finite()));
        curve
    }

    /// A plan for the look past the edge, where the curves disagree on which side the best time lies.
    fn look(&self, sides: &Sides, price: f64, beyond: Averaging) -> Option<Look> {
        let to = sides.median_beyond.filter(|_| sides.disagree())?;
        let beyond = beyond.finish(self.grid, self.sight)?;
        let plan = stopping::Look::plan(&self.worth, price, &beyond, self.sight, to)?;
        let waits: u64 = self.tally.counts().iter().fold(0, |n, c| n.saturating_add(*c));
        let share = self
            .tally
            .seen()
            .filter(|(from, to)| to > from)
            .map(|(from, to)| plan.share_of_traffic(waits as f64 / (to - from), LOOK));
        Some(Look {
            from_s: plan.from,
            to_s: plan.to,
            break_even: plan.break_even,
            waits_needed: plan.waits,
            share,
            worst_cost_each: plan.worst_cost_each,
        })
    }

    /// Only where the work may be repeated.
    fn second_copy(&self, average: &Average) -> Option<SecondCopy> {
        if !self.entry.retry.repeatable {
            return None;
        }
        let load = self.entry.retry.load_ceiling.map_or(COPY_LOAD, |c| c - 1.0);
        let Bounds { floor, ceiling, .. } = *self.bounds;
        let found = copy_or_retry(average, &self.worth, &self.retry, load, floor, ceiling)?;
        Some(SecondCopy {
            start_s: found.start,
            extra_load: found.extra_load,
            p50_s: finite(found.copy.p50),
            p99_s: finite(found.copy.p99),
            p999_s: finite(found.copy.p999),
            retry_p99_s: found.retry.and_then(|points| finite(points.p99)),
        })
    }

    /// Whether the timer shortens the mean total and yet makes long totals more frequent: one in a thousand by the believed
    /// curve, or in the limit by the family that weighs most (Eliazar & Reuveni 2020, 2021). `totals`: of a request with the
    /// timer and without.
    fn longer_tail(
        &self,
        ensemble: &Ensemble,
        failing: Option<&PiecewiseHazard>,
        average: &Average,
        at: f64,
        totals: [&RequestTime<'_>; 2],
    ) -> Option<LongerTail> {
        let ceiling = self.bounds.ceiling;
        let mean = |t: f64| stopping::expected_time(average, &self.worth, &self.retry, t);
        let (mean, mean_never) = (mean(at), mean(ceiling));
        if at >= ceiling || mean.partial_cmp(&mean_never) != Some(std::cmp::Ordering::Less) {
            return None;
        }
        let [with, without] = totals.map(|total| finite(total.quantile(LATE)));
        let late = with.zip(without).map(|(with, without)| [with, without]);
        let late = late.filter(|[with, without]| *with > LONGER * without);
        let far = || {
            let heaviest =
                ensemble.members.iter().filter(|m| m.decides).max_by(|a, b| a.weight.total_cmp(&b.weight))?;
            let failed = failing.map_or(Failure::Never, |f| Failure::Rate(f.last_rate()));
            let law = Competing::new(Arc::clone(&heaviest.fit.law), failed);
            let far = FarTail::new(average, &self.worth, &self.retry, at, ceiling, law.final_hazard());
            (heaviest.weight > LEAST_WEIGHT).then_some(far)
        };
        let longer = late.is_some() || far().is_some_and(|far| far.shorter_but_longer_tailed());
        longer.then_some(LongerTail { mean, mean_never, late })
    }
}

/// What a give-up time does by the objective's outlook; `None` and what is beyond the ceiling count as the ceiling.
pub(super) fn outcome(objective: &Objective<'_>, ceiling: f64, at: Option<f64>) -> Outcome {
    let t = at.unwrap_or(ceiling).min(ceiling);
    let total = RequestTime::new(objective.outlook(), objective.worth(), objective.retry(), t);
    outcome_over(objective, ceiling, at, &total)
}

/// The same where it is known how long a request takes with that time.
fn outcome_over(
    objective: &Objective<'_>,
    ceiling: f64,
    at: Option<f64>,
    total: &RequestTime<'_>,
) -> Outcome {
    let (outlook, worth, retry) = (objective.outlook(), objective.worth(), objective.retry());
    let t = at.unwrap_or(ceiling).min(ceiling);
    Outcome {
        give_up_after_s: at,
        rate_per_s: objective.score(t),
        done_share: outlook.done(t),
        attempts_per_request: finite(retry.request(Odds::at(outlook, t), worth).attempts),
        p50_s: finite(total.quantile(0.5)),
        p99_s: finite(total.quantile(0.99)),
    }
}

/// What a second is worth at the optimum.
fn worth_of(objective: &Objective<'_>, optimum: &Optimum) -> f64 {
    match objective.worth().aim {
        Aim::CarryingCost(cost) => cost,
        _ => optimum.score,
    }
}

pub(super) fn finite(value: f64) -> Option<f64> {
    value.is_finite().then_some(value)
}

/// A curve on sorted ages read at `t`, straight between them.
pub(super) fn interpolate(ages: &[f64], values: &[f64], t: f64) -> f64 {
    let i = ages.partition_point(|&a| a < t).clamp(1, ages.len() - 1);
    let part = ((t - ages[i - 1]) / (ages[i] - ages[i - 1])).clamp(0.0, 1.0);
    values[i - 1] + part * (values[i] - values[i - 1])
}

impl Settled {
    /// Writes the decision.
    pub(crate) fn fill(&self, d: &mut Decision, entry: &Entry, bounds: &Bounds, judgement: &Judgement) {
        d.action = if self.wait_it_out { Action::WaitItOut } else { Action::GiveUpAfter };
        d.because = super::summary::because(self, judgement);
        d.give_up_after_s = (!self.wait_it_out).then_some(self.at);
        d.interval_s = Some(self.choice.interval);
        d.band_s = Some(self.choice.band);
        d.rate_per_s = Some(self.advised.rate_per_s);
        d.rate_never_per_s = Some(self.never.rate_per_s);
        d.rate_now_per_s = self.in_force.map(|o| o.rate_per_s);
        d.expected_regret = Some(self.regret.expected);
        d.regret_95 = Some(self.regret.percentile_95);
        d.regret_now = self.now.map(|(_, regret)| regret.expected);
        d.done_share = Some(self.advised.done_share);
        d.attempts_per_request = self.advised.attempts_per_request;
        d.p50_s = self.advised.p50_s;
        d.p99_s = self.advised.p99_s;
        d.now = self.in_force;
        d.never = Some(self.never);
        d.proposal = self.proposal(entry, bounds, judgement.sight);
        d.rivals.clone_from(&self.rivals);
        d.holding_on.clone_from(&self.holding_on);
        d.retry_budget = self.retry_budget;
        d.sticky.clone_from(&self.sticky);
        d.look.clone_from(&self.look);
        d.second_copy = self.second_copy;
        d.schedule_s.clone_from(&self.schedule);
    }

    /// The next change of the time in force: none below the slack (twice that where it goes past the edge of sight), none
    /// beyond the largest step, and none past the edge while the curves disagree on which side of it the best time lies.
    /// Such a change would be undone by the next week's data as often as not; a look at a share of the waits tells before
    /// all are changed.
    fn proposal(&self, entry: &Entry, bounds: &Bounds, sight: f64) -> Option<Proposal> {
        let (now, regret) = self.now?;
        let keep =
            Proposal { change: Change::Keep, to_s: finite(now.seconds()), step_limited: false, then: None };
        let now = now.seconds();
        // What no wait has shown must promise twice as much.
        let unseen = self.at > sight && now < self.at;
        let needed = entry.guard.slack * if unseen { 2.0 } else { 1.0 };
        if self.resting || regret.expected - self.regret.expected <= needed {
            return Some(keep);
        }
        let standing = self
            .standing
            .filter(|(_, regret)| regret.expected - self.regret.expected <= entry.guard.hysteresis);
        let goal = match self.wait_it_out {
            _ if standing.is_some() => standing.map_or(now, |(t, _)| t),
            _ if unseen && self.sides.disagree() => now.max(sight),
            true => f64::INFINITY,
            false => self.at,
        };
        let step = entry.guard.largest_step;
        let proposal = |change, to: f64, step_limited| {
            let then =
                self.objective(bounds).map(|objective| outcome(&objective, bounds.ceiling, finite(to)));
            Proposal { change, to_s: finite(to), step_limited, then }
        };
        Some(match goal.partial_cmp(&now) {
            Some(std::cmp::Ordering::Greater) => {
                let most = now * (1.0 + step);
                proposal(Change::Raise, goal.min(most), goal > most)
            }
            // From never there is no share to step by: the first step is to the time itself.
            Some(std::cmp::Ordering::Less) if now.is_infinite() => proposal(Change::Lower, goal, false),
            Some(std::cmp::Ordering::Less) => {
                let least = now * (1.0 - step).max(0.0);
                proposal(Change::Lower, goal.max(least), goal < least)
            }
            _ => keep,
        })
    }

    pub(crate) fn advised(&self) -> Outcome {
        self.advised
    }

    pub(crate) fn in_force(&self) -> Option<Outcome> {
        self.in_force
    }

    /// In words, for a sentence.
    pub(crate) fn time(&self) -> String {
        say::duration(self.at)
    }
}
