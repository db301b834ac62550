//! An advice as the measure of single waits: what holding on is worth at an age, what time past it costs.
//! METHODS.md section 5 ("Value of holding on") and 10 ("Time lost").

use serde::{Deserialize, Serialize};

use crate::advice::Decision;
use crate::advise::Believed;
use crate::curve::Empirical;
use crate::outlook::{Average, Outlook};
use crate::policy::Entry;
use crate::stopping::{self, Aim, Holding, Objective, Worth};
use crate::tally::Cells;
use crate::wait::Ending;

/// How much longer, as a share of the age at a give-up, counts as "just before".
const JUST_BEFORE: f64 = 0.5;
/// The least chance of a completion within that, for a bulk.
const BULK: f64 = 0.5;
/// Parts of the largest worth at stake that a sum can tell apart. Sums are whole numbers of them: the same for any order.
const PARTS: f64 = (1u64 << 40) as f64;

/// What worth is counted in.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Unit {
    /// The unit of the policy's worth.
    Worth,
    /// Seconds of a request's expected time until done (aim `finish`).
    Seconds,
    /// Probability of meeting the deadline (aim `deadline`), added up.
    Probability,
}

/// What to do with a wait of some age that is open.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Verdict {
    /// No advice, so no verdict.
    Unknown,
    /// It is worth more than giving up now.
    Hold,
    /// Giving up now is worth more.
    LetGo,
}

/// The measure that one stream's waits are held against.
pub struct Yardstick {
    /// What is known of a wait's future, if anything; up to `reach`, s.
    outlook: Option<Future>,
    reach: f64,
    advised: Option<Advised>,
}

enum Future {
    Believed(Average),
    /// Where nothing is advised: what was seen.
    Seen(Empirical),
}

/// The advised time with what holding on is worth, prepared by age.
struct Advised {
    at: f64,
    /// Give-up times that are about as good.
    band: [f64; 2],
    unit: Unit,
    /// Worth of a second in `unit`; `None` under a deadline.
    price: Option<f64>,
    /// From the objective's own unit to `unit`.
    factor: f64,
    worth: Worth,
    /// Worth of a give-up, and the time after one at age 0 and for each second of age.
    gave_up: f64,
    pause: f64,
    doomed: f64,
    /// Holding on past the advised time must be worth more than this.
    least: f64,
    /// The value of one part of a sum.
    part: f64,
    rows: Vec<Row>,
}

/// What holding on means at one age.
#[derive(Clone, Copy, Debug)]
struct Row {
    age: f64,
    /// Share of attempts that are still open.
    open: f64,
    /// Worth above giving up now.
    value: f64,
    /// `N - ρD`.
    surplus: f64,
    /// Expected further wait until the advised time, s.
    further: f64,
    /// Chance of a completion within half as long again, up to the advised time.
    soon: f64,
}

/// A wait that was given up too early.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Under {
    /// Expected further wait until it would have ended or been given up as advised, s.
    pub further: f64,
    /// What holding on would have been worth above giving up, in parts ([`Yardstick::worth`]).
    pub parts: i128,
    /// Whether a bulk of completions came just after.
    pub bulk: bool,
}

/// A wait that went on past the advice.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Over {
    /// Time past the advised age, s.
    pub past: f64,
    /// What came of it above a give-up at the advised age, the time not counted, in parts; may be negative.
    pub back: i128,
}

/// What can be said of an open wait.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Prospect {
    /// What to do.
    pub verdict: Verdict,
    /// Worth of holding on above giving up now; `None` without advice.
    pub value: Option<f64>,
    /// Expected worth of holding on for the next step and then giving up, above giving up now.
    pub next_step: Option<f64>,
    /// The next age at which the verdict changes, s.
    pub look_again: Option<f64>,
    /// Chance to complete within the step, and to end at all.
    pub chance: Option<[f64; 2]>,
    /// Expected remaining wait, s, counted up to the last age known of.
    pub remaining: Option<f64>,
}

impl Yardstick {
    /// From what is believed; where nothing is advised, what was seen serves for chances and remaining waits.
    pub fn new(believed: Option<Believed>, decision: &Decision, entry: &Entry, seen: &Cells) -> Yardstick {
        if let Some(believed) = believed {
            let advised = Advised::of(&believed, decision, entry);
            let reach = believed.limits.ceiling();
            return Yardstick { outlook: Some(Future::Believed(believed.outlook)), reach, advised };
        }
        // A handful of endings says nothing of the next.
        let enough = seen.totals()[0] + seen.totals()[1] >= 20.0;
        let curve = Empirical::new(seen).ok().filter(|_| enough);
        let reach = curve.as_ref().map_or(0.0, Outlook::sight);
        Yardstick { outlook: curve.map(Future::Seen), reach, advised: None }
    }

    /// The advised time, s, if there is one.
    pub fn advised_at(&self) -> Option<f64> {
        self.advised.as_ref().map(|a| a.at)
    }

    /// What worth is counted in, if anything is advised.
    pub fn unit(&self) -> Option<Unit> {
        self.advised.as_ref().map(|a| a.unit)
    }

    /// Worth of a second; `None` without advice and under a deadline.
    pub fn price(&self) -> Option<f64> {
        self.advised.as_ref().and_then(|a| a.price)
    }

    /// The worth of so many parts.
    pub fn worth(&self, parts: i128) -> f64 {
        self.advised.as_ref().map_or(0.0, |a| parts as f64 * a.part)
    }

    /// Whether a wait that ended so at an age went on past the advice; not where that age is about as good.
    #[inline]
    pub fn over(&self, age: f64, ending: Ending) -> Option<Over> {
        let a = self.advised.as_ref()?;
        (age > a.at && age > a.band[1]).then(|| Over { past: age - a.at, back: a.back(age, ending) })
    }

    /// Whether a wait that was given up at an age was given up too early; not where that age is about as good.
    #[inline]
    pub fn under(&self, age: f64) -> Option<Under> {
        let a = self.advised.as_ref()?;
        if !(age < a.at && age < a.band[0]) {
            return None;
        }
        let row = a.row(age);
        (row.value > 0.0).then(|| Under {
            further: row.further,
            parts: a.parts(row.value),
            bulk: row.soon >= BULK,
        })
    }

    /// The verdict, and how urgent it is to act on it: higher comes first among equal verdicts. `step`: how long it would
    /// go on before somebody looks again, s.
    pub fn urgency(&self, age: f64, step: f64) -> (Verdict, f64) {
        let Some(a) = &self.advised else { return (Verdict::Unknown, age) };
        if a.holds(age) {
            // The sooner it is to be looked at.
            let until = if age < a.at { Some(a.at) } else { a.changes_after(age, true) };
            return (Verdict::Hold, age - until.unwrap_or(f64::MAX));
        }
        (Verdict::LetGo, a.step(age, step, self.reach).map_or(age - a.at, |gain| -gain))
    }

    /// Everything that can be said of an open wait.
    pub fn prospect(&self, age: f64, step: f64) -> Prospect {
        let mut prospect = Prospect {
            verdict: Verdict::Unknown,
            value: None,
            next_step: None,
            look_again: None,
            chance: None,
            remaining: None,
        };
        if let Some(a) = &self.advised {
            let hold = a.holds(age);
            prospect.verdict = if hold { Verdict::Hold } else { Verdict::LetGo };
            prospect.value = Some(a.value(age));
            prospect.next_step = a.step(age, step, self.reach);
            prospect.look_again = if age < a.at { Some(a.at) } else { a.changes_after(age, hold) };
        }
        let Some(outlook) = self.outlook.as_ref().map(Future::curve) else { return prospect };
        let open = outlook.survival(age);
        if age < self.reach && open > 0.0 {
            let then = (age + step).min(self.reach);
            let share = |more: f64| (more / open).clamp(0.0, 1.0);
            let done = share(outlook.done(then) - outlook.done(age));
            prospect.chance = Some([done, share(open - outlook.survival(then)).max(done)]);
            let further = outlook.residual(age, self.reach);
            prospect.remaining = Some(further).filter(|t| t.is_finite()).map(|t| t.max(0.0));
        }
        prospect
    }
}

impl Future {
    fn curve(&self) -> &dyn Outlook {
        match self {
            Future::Believed(average) => average,
            Future::Seen(curve) => curve,
        }
    }
}

impl Advised {
    /// `None` where the terms allow no objective, which an advice has shown they do.
    fn of(believed: &Believed, decision: &Decision, entry: &Entry) -> Option<Advised> {
        let Believed { outlook, worth, retry, limits, at } = believed;
        let objective = Objective::new(outlook, worth, retry, *limits).ok()?;
        let optimum = stopping::best(&objective).ok()?;
        let (at, ceiling) = (*at, objective.limits().ceiling());
        let price = objective.price(optimum.score);
        let terms = objective.terms_at(at);
        let (unit, factor, price) = match worth.aim {
            Aim::Deadline { .. } => (Unit::Probability, 1.0, None),
            Aim::Finish if price > 0.0 => (Unit::Seconds, 1.0 / price, Some(price)),
            _ => (Unit::Worth, 1.0, Some(price)),
        };
        let holding = Holding::new(&objective, &optimum);
        let mut ages = vec![0.0, at, optimum.at, ceiling];
        ages.extend(outlook.knots().iter().copied().filter(|&t| t < ceiling));
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        let rows: Vec<Row> = ages
            .into_iter()
            .map(|age| {
                let open = outlook.survival(age);
                let soon = (age * (1.0 + JUST_BEFORE)).min(at);
                let share = |more: f64| if open > 0.0 { (more / open).max(0.0) } else { 0.0 };
                Row {
                    age,
                    open,
                    value: factor * holding.at(age).value,
                    surplus: price.map_or(0.0, |price| factor * objective.surplus(age, price, &terms)),
                    further: share(outlook.restricted_mean(at) - outlook.restricted_mean(age)),
                    soon: share(outlook.done(soon) - outlook.done(age)),
                }
            })
            .collect();
        if rows.iter().any(|r| !(r.value.is_finite() && r.surplus.is_finite() && r.further.is_finite())) {
            return None;
        }
        let most = rows.iter().map(|r| r.value).fold(0.0, f64::max);
        let pause = terms.after_give_up(0.0);
        let worth = *objective.worth();
        let at_stake = [worth.done, worth.failed, terms.gave_up(), worth.attempt_cost];
        let largest = at_stake.iter().map(|w| factor * w.abs()).fold(most, f64::max);
        let earned = if price.is_some() { objective.gain(at) } else { objective.score(at) };
        Some(Advised {
            at,
            band: decision.band_s.unwrap_or([at, at]),
            unit,
            price: price.map(|price| factor * price),
            factor,
            worth,
            gave_up: terms.gave_up(),
            pause,
            doomed: terms.after_give_up(1.0) - pause,
            least: entry.guard.slack * factor * earned.abs(),
            part: if largest > 0.0 { largest / PARTS } else { 1.0 },
            rows,
        })
    }

    /// The rows on both sides of an age, and how far it is from the first to the second.
    fn place(&self, age: f64) -> (&Row, &Row, f64) {
        let i = self.rows.partition_point(|r| r.age <= age).clamp(1, self.rows.len() - 1);
        let (from, to) = (&self.rows[i - 1], &self.rows[i]);
        (from, to, ((age - from.age) / (to.age - from.age)).clamp(0.0, 1.0))
    }

    fn row(&self, age: f64) -> Row {
        let (from, to, part) = self.place(age);
        let between = |a: f64, b: f64| a + part * (b - a);
        Row {
            age,
            open: between(from.open, to.open),
            value: between(from.value, to.value),
            surplus: between(from.surplus, to.surplus),
            further: between(from.further, to.further),
            soon: between(from.soon, to.soon),
        }
    }

    fn ceiling(&self) -> f64 {
        self.rows[self.rows.len() - 1].age
    }

    fn value(&self, age: f64) -> f64 {
        if age < self.ceiling() { self.row(age).value.max(0.0) } else { 0.0 }
    }

    fn holds(&self, age: f64) -> bool {
        age < self.at || self.value(age) > self.least
    }

    /// The next age past the advised one at which holding on begins or ceases to be worth it.
    fn changes_after(&self, age: f64, hold: bool) -> Option<f64> {
        let start = self.rows.partition_point(|r| r.age <= age);
        let i = (start..self.rows.len()).find(|&i| (self.rows[i].value > self.least) != hold)?;
        let (before, after) =
            if i == start { (self.row(age), self.rows[i]) } else { (self.rows[i - 1], self.rows[i]) };
        let fall = before.value - after.value;
        let part = if fall == 0.0 { 1.0 } else { ((before.value - self.least) / fall).clamp(0.0, 1.0) };
        Some(before.age + part * (after.age - before.age)).filter(|t| *t > age)
    }

    /// What holding on for a step and then giving up is worth above giving up now. Past the last age known of only time
    /// passes. `None` under a deadline.
    fn step(&self, age: f64, step: f64, reach: f64) -> Option<f64> {
        let price = self.price?;
        let known = (reach - age).min(step).max(0.0);
        let passes = -price * (1.0 + self.doomed) * (step - known);
        if known == 0.0 {
            return Some(passes);
        }
        // The surplus of an attempt counts from its start; an open wait is among those that have come so far.
        let (now, then) = (self.row(age), self.row(age + known));
        let known = if now.open > 0.0 { (then.surplus - now.surplus) / now.open } else { 0.0 };
        Some(known + passes)
    }

    /// What an ending at `age` brought, above a give-up at the advised age; the time between is not counted, nor is what a
    /// later give-up adds to doomed retries, whose waits are counted themselves.
    fn back(&self, age: f64, ending: Ending) -> i128 {
        let Some(price) = self.price else { return 0 };
        let price = price / self.factor;
        let came = match ending {
            Ending::Done => self.worth.completion(age) - price * self.worth.pause.done,
            Ending::Failed => self.worth.failed - price * self.worth.pause.failed,
            Ending::GaveUp | Ending::Waiting => return 0,
        };
        let gave_up = self.gave_up - price * (self.pause + self.doomed * self.at);
        self.parts(self.factor * (came - gave_up))
    }

    #[inline]
    fn parts(&self, worth: f64) -> i128 {
        (worth / self.part).round() as i128
    }
}
