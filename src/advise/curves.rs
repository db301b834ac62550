//! The curves behind an advice, as plain data with a stable JSON form (`outwait/curve/1`): what pictures and pages draw.

use serde::{Deserialize, Serialize};

use super::judge::{Judgement, finite, interpolate};
use super::study::Study;
use crate::advice::{Action, RemainingWait, Rival};
use crate::curve::{KaplanMeier, LifeTable, SmoothedHazard};
use crate::outlook::{Outlook, Sampled};
use crate::policy::GiveUp;
use crate::stopping::{self, Aim, Holding, weighted_quantile};
use crate::tail::LEAST_WEIGHT;

/// Version of the JSON form.
pub const CURVE_SCHEMA: &str = "outwait/curve/1";

/// Level of every band.
const LEVEL: f64 = 0.9;
/// Ages spaced evenly, and by equal ratios.
const EVEN: usize = 80;
const BY_RATIO: usize = 160;
/// With at most so many distinct ages the curve shows every one as the step that it is.
const MOST_STEPS: usize = 200;
/// The path begins where this share has ended, and ends where this share is still waiting.
const FIRST: f64 = 0.01;
const TAIL: f64 = 1e-3;
/// How far it shows what is not seen, as a factor of the edge of sight.
const PAST_SIGHT: f64 = 2.5;
/// Air around a marked time, as a factor; and how far a mark may draw the path out.
const AIR: f64 = 1.25;
const FAR: f64 = 1e3;
/// A remaining wait of which more than this share lies past the end of the grid, 1e5 ceilings ahead, is endless.
const ENDLESS: f64 = 0.05;

/// The curves behind the advice on one stream. What cannot be told is absent (`null`), never NaN.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Curves {
    /// [`CURVE_SCHEMA`].
    pub schema: String,
    /// Which waiting process.
    pub stream: String,
    /// Waits of any ending.
    pub waits: u64,
    /// What is maximised, hence the unit of the rate: `rate` (worth per second), `finish` (completions per second),
    /// `carrying_cost` (worth per attempt) or `deadline` (probability of being done in time); absent where the policy names
    /// none.
    pub aim: Option<String>,
    /// What is advised.
    pub action: Action,
    /// The advised time; absent where nothing is.
    pub advised: Option<Mark>,
    /// The time in force; absent where the policy names none.
    pub now: Option<Mark>,
    /// Every give-up time between these is within the slack of the best, s.
    pub band_s: Option<[f64; 2]>,
    /// The rules in common use.
    pub rivals: Vec<Rival>,
    /// Does the remaining wait grow or shrink?
    pub remaining_wait: RemainingWait,
    /// The further wait is counted up to this age, s: the ceiling, where no end is to be expected at some age; absent where
    /// it is counted to its end.
    pub remaining_upto_s: Option<f64>,
    /// Last age about which the data speak, s; past it the curves are assumptions.
    pub sight_s: Option<f64>,
    /// Age by which one in 100 has ended, s.
    pub start_s: Option<f64>,
    /// Age by which half have ended, s.
    pub median_s: Option<f64>,
    /// Level of the bands, 0 to 1.
    pub level: f64,
    /// Whether the survival curve is one of steps at the points' ages (few distinct ages), else it is straight between them.
    pub steps: bool,
    /// The curves, by rising age from 0.
    pub points: Vec<CurvePoint>,
}

/// A give-up time and what it earns.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Mark {
    /// The time, s; absent for never (for waiting it out, up to the ceiling).
    pub give_up_after_s: Option<f64>,
    /// What it earns, in the unit of the aim; absent where no give-up time can be judged.
    pub rate_per_s: Option<f64>,
}

/// Every curve at one age.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct CurvePoint {
    /// Time waited so far, s.
    pub age_s: f64,
    /// Share still waiting: the product-limit estimate up to the edge of sight, the believed laws' course from there on.
    pub survival: f64,
    /// Its band.
    pub survival_band: Option<[f64; 2]>,
    /// Share still waiting by the average of all that the data leave open, on which the rate rests.
    pub believed: Option<f64>,
    /// Share done by then, by the same average.
    pub done: Option<f64>,
    /// Share failed by then, by the same average.
    pub failed: Option<f64>,
    /// Smoothed hazard of any ending, 1/s; up to the edge of sight.
    pub hazard_per_s: Option<f64>,
    /// Its band.
    pub hazard_band_per_s: Option<[f64; 2]>,
    /// Further wait to expect, s: the middle over all that the data leave open. Absent where no end is to be expected, at
    /// or past [`Curves::remaining_upto_s`], and without laws.
    pub remaining_s: Option<f64>,
    /// Its band; an end that is absent is endless.
    pub remaining_band_s: Option<[Option<f64>; 2]>,
    /// What giving up at this age earns, in the unit of the aim; between floor and ceiling.
    pub rate_per_s: Option<f64>,
    /// Its band over all that the data leave open.
    pub rate_band_per_s: Option<[f64; 2]>,
    /// Worth of holding on at this age above giving up now.
    pub holding_on: Option<f64>,
}

impl Study {
    /// The curves behind the advice.
    pub fn curves(&self) -> Curves {
        let advice = &self.advice;
        let decision = &advice.advice;
        let settled = self.settled();
        let advised = settled
            .map(|_| Mark { give_up_after_s: decision.give_up_after_s, rate_per_s: decision.rate_per_s });
        let now = self.entry.now.map(GiveUp::seconds);
        let mut curves = Curves {
            schema: CURVE_SCHEMA.to_owned(),
            stream: advice.stream.clone(),
            waits: advice.evidence.waits,
            aim: self.entry.worth.map(|worth| aim_name(worth.aim).to_owned()),
            action: decision.action,
            advised,
            now: now.map(|t| Mark { give_up_after_s: finite(t), rate_per_s: decision.rate_now_per_s }),
            band_s: decision.band_s,
            rivals: decision.rivals.clone(),
            remaining_wait: advice.tail.remaining_wait,
            remaining_upto_s: None,
            sight_s: None,
            start_s: None,
            median_s: None,
            level: LEVEL,
            steps: false,
            points: Vec::new(),
        };
        let Ok(table) = LifeTable::of(&self.cells) else { return curves };
        let laws = self.judgement.as_ref().map(Laws::of);
        let waiting = Waiting::new(&table, laws.as_ref());
        let marks = [decision.give_up_after_s, now];
        let (ages, steps) = waiting.ages(&table, &marks.map(|mark| mark.filter(|t| t.is_finite())));
        curves.steps = steps;
        curves.sight_s = finite(waiting.sight);
        curves.start_s = waiting.age_of(1.0 - FIRST);
        curves.median_s = waiting.age_of(0.5);
        let hazard = SmoothedHazard::of(&table);
        let endless = |laws: &Laws<'_>| {
            let seen = ages.iter().filter(|age| **age <= waiting.sight);
            seen.filter_map(|&age| laws.remaining(age, f64::INFINITY))
                .any(|[_, middle, _]| middle.is_infinite())
        };
        curves.remaining_upto_s =
            self.bounds.as_ref().map(|b| b.ceiling).filter(|_| laws.as_ref().is_some_and(endless));
        let upto = curves.remaining_upto_s.unwrap_or(f64::INFINITY);
        curves.points = ages
            .into_iter()
            .map(|age| {
                let hazard = hazard.at(age).filter(|h| h.hazard.is_finite());
                let remaining = laws.as_ref().and_then(|laws| laws.remaining(age, upto));
                CurvePoint {
                    age_s: age,
                    survival: waiting.survival(age),
                    survival_band: waiting.band(age),
                    believed: None,
                    done: None,
                    failed: None,
                    hazard_per_s: hazard.map(|h| h.hazard),
                    hazard_band_per_s: hazard.map(|h| h.interval(LEVEL)).map(|i| [i.low, i.high]),
                    remaining_s: remaining.and_then(|[_, middle, _]| finite(middle)),
                    remaining_band_s: remaining.map(|[low, _, high]| [finite(low), finite(high)]),
                    rate_per_s: None,
                    rate_band_per_s: None,
                    holding_on: None,
                }
            })
            .collect();
        self.price(&mut curves.points);
        curves
    }

    /// Fills in what rests on the believed curve and the prices.
    fn price(&self, points: &mut [CurvePoint]) {
        let Some((settled, bounds)) = self.settled() else { return };
        let Some(objective) = settled.objective(bounds) else { return };
        let Ok(optimum) = stopping::best(&objective) else { return };
        let holding = Holding::new(&objective, &optimum);
        let (low, high): (Vec<f64>, Vec<f64>) =
            settled.doubt.band(LEVEL).into_iter().map(|[low, high]| (low, high)).unzip();
        let at = |values: &[f64], age| interpolate(settled.doubt.ages(), values, age);
        for point in points.iter_mut().filter(|p| p.age_s <= settled.average.end()) {
            let age = point.age_s;
            point.believed = finite(settled.average.survival(age));
            point.done = finite(settled.average.done(age));
            point.failed = finite(settled.average.failed(age));
            point.holding_on = finite(holding.at(age).value);
            if age >= bounds.floor
                && age <= bounds.ceiling
                && let Some(rate) = finite(objective.score(age))
            {
                point.rate_per_s = Some(rate);
                point.rate_band_per_s = Some([at(&low, age).min(rate), at(&high, age).max(rate)]);
            }
        }
    }
}

/// The name of an aim in JSON.
pub(crate) fn aim_name(aim: Aim) -> &'static str {
    match aim {
        Aim::Rate => "rate",
        Aim::Finish => "finish",
        Aim::CarryingCost(_) => "carrying_cost",
        Aim::Deadline { .. } => "deadline",
    }
}

/// The survival curves of all that the data leave open, with their weights.
struct Laws<'a> {
    ages: &'a [f64],
    lines: Vec<Line>,
}

struct Line {
    weight: f64,
    survival: Vec<f64>,
    /// Area under it from each age to the end.
    rest: Vec<f64>,
}

impl Line {
    fn new(weight: f64, survival: Vec<f64>, ages: &[f64]) -> Line {
        let mut rest = vec![0.0; survival.len()];
        for i in (1..survival.len()).rev() {
            rest[i - 1] = rest[i] + 0.5 * (survival[i - 1] + survival[i]) * (ages[i] - ages[i - 1]);
        }
        Line { weight, survival, rest }
    }

    /// `S` and the area ahead.
    fn at(&self, ages: &[f64], t: f64) -> (f64, f64) {
        let end = ages.partition_point(|&age| age < t).min(self.survival.len() - 1);
        let (from, before) = if end == 0 { (0.0, 1.0) } else { (ages[end - 1], self.survival[end - 1]) };
        let part = ((t - from) / (ages[end] - from)).clamp(0.0, 1.0);
        let survival = before + part * (self.survival[end] - before);
        let stretch = 0.5 * (survival + self.survival[end]) * (ages[end] - t).max(0.0);
        (survival, self.rest[end] + stretch)
    }
}

impl Laws<'_> {
    fn of(judgement: &Judgement) -> Laws<'_> {
        let Judgement { ensemble, replicates, failures, grid, .. } = judgement;
        let ages = grid.ages();
        let mut lines = Vec::new();
        let mut add = |weight: f64, curve: Sampled| {
            if weight > 0.0 && curve.survival.len() == ages.len() && curve.is_finite() {
                lines.push(Line::new(weight, curve.survival, ages));
            }
        };
        for member in ensemble.members.iter().filter(|m| m.weight > LEAST_WEIGHT) {
            for draw in &member.draws {
                add(member.weight * draw.weight, Sampled::join(grid, draw.survival.clone(), failures));
            }
        }
        let share = ensemble.empirical / replicates.len().max(1) as f64;
        replicates.iter().for_each(|replicate| add(share, replicate.clone()));
        Laws { ages, lines }
    }

    /// Share still waiting at `t` of those that wait at `from`: low, mean and high.
    fn onwards(&self, from: f64, t: f64) -> Option<[f64; 3]> {
        let mut shares: Vec<(f64, f64)> = self
            .lines
            .iter()
            .filter_map(|line| {
                let (before, _) = line.at(self.ages, from);
                (before > 0.0).then(|| (line.at(self.ages, t).0 / before, line.weight))
            })
            .collect();
        let total: f64 = shares.iter().map(|(_, weight)| weight).sum();
        let mean = shares.iter().map(|(share, weight)| share * weight).sum::<f64>() / total;
        let mut quantile = |q| weighted_quantile(&mut shares, q);
        let tail = 0.5 * (1.0 - LEVEL);
        mean.is_finite().then(|| [quantile(tail).min(mean), mean, quantile(1.0 - tail).max(mean)])
    }

    /// The wait still to come at an age, s, as far as it lies before `upto`: low, middle and high; infinite where it is
    /// endless.
    fn remaining(&self, t: f64, upto: f64) -> Option<[f64; 3]> {
        let end = self.ages[self.ages.len() - 1];
        if t >= upto {
            return None;
        }
        let mut waits: Vec<(f64, f64)> = self
            .lines
            .iter()
            .filter_map(|line| {
                let (survival, rest) = line.at(self.ages, t);
                let beyond = line.survival[line.survival.len() - 1] * end;
                let wait = match upto.is_finite() {
                    true => (rest - line.at(self.ages, upto).1) / survival,
                    false if beyond > ENDLESS * rest => f64::INFINITY,
                    false => rest / survival,
                };
                (survival > 0.0 && !wait.is_nan()).then_some((wait, line.weight))
            })
            .collect();
        let tail = 0.5 * (1.0 - LEVEL);
        let quantile = |q| weighted_quantile(&mut waits, q);
        let [low, middle, high] = [tail, 0.5, 1.0 - tail].map(quantile);
        (!middle.is_nan()).then_some([low, middle, high])
    }
}

/// Who is still waiting: the data up to the edge of sight, the laws from there on.
struct Waiting<'a> {
    seen: KaplanMeier,
    sight: f64,
    laws: Option<&'a Laws<'a>>,
}

impl<'a> Waiting<'a> {
    fn new(table: &LifeTable, laws: Option<&'a Laws<'a>>) -> Waiting<'a> {
        Waiting { seen: KaplanMeier::of(table), sight: table.sight(), laws }
    }

    fn onwards(&self, age: f64) -> Option<[f64; 3]> {
        self.laws.filter(|_| age > self.sight).and_then(|laws| laws.onwards(self.sight, age))
    }

    fn survival(&self, age: f64) -> f64 {
        let seen = self.seen.survival(age.min(self.sight));
        self.onwards(age).map_or(seen, |[_, mean, _]| seen * mean)
    }

    fn band(&self, age: f64) -> Option<[f64; 2]> {
        let seen = self.seen.interval(age.min(self.sight), LEVEL);
        let [low, _, high] = if age <= self.sight { Some([1.0; 3]) } else { self.onwards(age) }?;
        let band = [seen.low * low, seen.high * high];
        band.iter().all(|b| b.is_finite()).then_some(band)
    }

    /// Age at which a share is still waiting, s, as far as anything says so.
    fn age_of(&self, share: f64) -> Option<f64> {
        let end = if self.laws.is_some() { PAST_SIGHT * self.sight } else { self.sight };
        if self.survival(end) > share {
            return None;
        }
        let (mut low, mut high) = ((1e-12 * end).ln(), end.ln());
        for _ in 0..64 {
            let middle = 0.5 * (low + high);
            if self.survival(middle.exp()) > share { low = middle } else { high = middle }
        }
        Some(high.exp())
    }

    /// The ages to show, rising from 0, and whether every distinct age of an ending is among them.
    fn ages(&self, table: &LifeTable, marks: &[Option<f64>]) -> (Vec<f64>, bool) {
        let last = self.age_of(TAIL).unwrap_or(match self.laws {
            Some(_) => PAST_SIGHT * self.sight,
            None => self.sight,
        });
        let marks = || marks.iter().flatten().copied().filter(|m| *m > 0.0 && *m <= FAR * last);
        let end = if self.laws.is_some() { marks().map(|m| AIR * m).fold(last, f64::max) } else { last };
        if !(end > 0.0 && end.is_finite()) {
            return (Vec::new(), false);
        }
        let first = self.age_of(1.0 - FIRST).unwrap_or(end);
        let start = marks().map(|m| m / AIR).fold(first, f64::min).clamp(1e-12 * end, 0.5 * end);
        let mut ages: Vec<f64> = (0..=EVEN).map(|i| end * i as f64 / EVEN as f64).collect();
        ages.extend((0..BY_RATIO).map(|i| start * (end / start).powf(i as f64 / BY_RATIO as f64)));
        ages.extend(marks().chain([self.sight]).filter(|t| *t <= end));
        let rows = table.rows();
        let steps = rows.len() <= MOST_STEPS && rows.iter().all(|row| row.over == row.upto);
        if steps {
            ages.extend(rows.iter().map(|row| row.upto).filter(|t| *t <= end));
        }
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        (ages, steps)
    }
}
