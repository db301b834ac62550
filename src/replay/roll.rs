//! The roll: learn on what came before a period, earn on the period, go on to the next. METHODS.md section 9.

use super::earn::{Attempt, Earned, Prices, Steps, attempt};
use super::gather::{Course, Log};
use super::report::{ADVICE, IN_FORCE, Note, Period, ReplaySet, RuleReplay, SCHEMA, StreamReplay};
use super::resample::{RESAMPLES, Sheet, interval, resamples};
use super::words;
use crate::advice::Action;
use crate::advise::{self, Case, Terms, name_hash};
use crate::curve::{ENOUGH, Empirical, LifeTable};
use crate::outlook::Outlook;
use crate::policy::{Entry, GiveUp, Policy};
use crate::say;
use crate::stopping::{Aim, Limits, Objective, Rule};
use crate::tally::{Cells, Day, Days};

/// Level of the intervals.
const LEVEL: f64 = 0.9;
/// Days of a period; parts of waits without times likewise.
const PERIOD: i32 = 7;
const DAY: f64 = 86_400.0;
/// What a rule earns is known where what was hidden moves it by less than this share.
const KNOWN: f64 = 0.01;
/// Attempts that last longer on average, s, hang together from day to day.
const LONG: f64 = 0.25 * DAY;
/// Periods without data before the last from which a wrong clock is likelier than a pause.
const PAUSE: i32 = 8;
/// Where the policy names no ceiling and nothing was advised: this many times the longest age seen.
const CEILING: f64 = 10.0;

/// How every stream of a run is replayed.
#[derive(Clone, Copy, Debug)]
pub struct Roll<'a> {
    /// What is asked for; without a policy the assumption of [`Entry::without_policy`].
    pub policy: Option<&'a Policy>,
    /// Last day of the data, from which weeks are counted back; `None` for the last day in the log.
    pub newest: Option<i32>,
    /// Seed of everything drawn.
    pub seed: u64,
}

/// Who is replayed.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Contender {
    Advice,
    InForce(GiveUp),
    Rule(Rule),
    /// RFC 6298, wait by wait.
    Timer,
}

impl Contender {
    /// Ours, the time in force, and the rules in common use.
    fn all(entry: &Entry, aim: Aim) -> Vec<Contender> {
        // It moves with every wait, so what a sampler did not ask cannot be put back into what it did.
        let timer = !matches!(aim, Aim::Deadline { .. }) && entry.sampled_every.is_none();
        let rules = [Rule::Percentile(0.95), Rule::Percentile(0.99), Rule::TimesMean(3.0)];
        std::iter::once(Contender::Advice)
            .chain(entry.now.map(Contender::InForce))
            .chain(rules.map(Contender::Rule))
            .chain(timer.then_some(Contender::Timer))
            .chain([Contender::Rule(Rule::Never)])
            .collect()
    }

    fn name(self) -> String {
        match self {
            Contender::Advice => ADVICE.to_owned(),
            Contender::InForce(_) => IN_FORCE.to_owned(),
            Contender::Rule(rule) => rule.name(),
            Contender::Timer => Rule::Rfc6298.name(),
        }
    }
}

/// A period with what every contender did on it.
struct Fold {
    period: Period,
    /// Attempts that were over in it.
    over: f64,
    prices: Prices,
    ceiling: f64,
    /// Give-up times, s; infinite for the timer's.
    times: Vec<f64>,
    did: Vec<Did>,
    /// Attempts that were over on each of its days.
    days: Vec<f64>,
    sheet: Sheet,
    timed: Option<Sheet>,
}

/// What one contender did on a period, per attempt.
#[derive(Clone, Copy)]
struct Did {
    /// At worst and at best.
    earned: [Earned; 2],
    attempt: Attempt,
    hidden: f64,
}

impl Roll<'_> {
    /// Replays every stream; see [`Roll::stream`].
    pub fn all(&self, log: &Log) -> ReplaySet {
        let streams = log.names().into_iter().map(|stream| self.stream(log, stream)).collect();
        self.set(log, streams)
    }

    /// Joins streams that were replayed one by one.
    pub fn set(&self, log: &Log, streams: Vec<StreamReplay>) -> ReplaySet {
        let made_at = log.latest().and_then(say::time);
        let assumed = self.terms(None).assumed();
        ReplaySet { schema: SCHEMA.to_owned(), made_at, assumed, level: LEVEL, streams }
    }

    /// Replays one stream: on every week but the first with data, every rule earns with the time that it learnt on what lies
    /// before, as far back as the window of the policy. Waits without times are parted by the order in which they came.
    pub fn stream(&self, log: &Log, stream: &str) -> StreamReplay {
        let entry = self.terms(None).entry(stream);
        let aim = entry.worth.map(|worth| worth.aim);
        let mut replay = StreamReplay {
            stream: stream.to_owned(),
            aim: aim.map(|aim| advise::aim_name(aim).to_owned()),
            by: "week".to_owned(),
            periods: Vec::new(),
            rules: Vec::new(),
            finding: String::new(),
            notes: Vec::new(),
        };
        let Some(course) = log.stream(stream) else {
            replay.finding = "it has no waits".to_owned();
            return replay;
        };
        if let Err(reason) = advise::cost_of_time(&entry) {
            replay.finding = format!("nothing can be earned: {reason}");
            return replay;
        }
        let (Some(aim), Some(newest)) = (aim, self.newest.or(log.newest()).or(Some(0))) else {
            return replay;
        };
        let parts = course.dated == 0;
        if parts {
            replay.by = "part".to_owned();
        }
        let of_parts = parts.then(|| course.parts.as_days());
        let (days, timed) = of_parts.as_ref().map_or((&course.days, &course.timed), |(a, b)| (a, b));
        let calendar =
            if parts { Calendar { end: 0, dated: false } } else { Calendar { end: newest + 1, dated: true } };
        let contenders = Contender::all(&entry, aim);
        let mut periods: Vec<i32> = days.days().iter().filter_map(|(day, _)| calendar.period(*day)).collect();
        periods.dedup();
        let folds: Vec<Fold> = periods
            .iter()
            .skip(1)
            .filter_map(|&period| self.fold(stream, &entry, &contenders, days, timed, calendar, period))
            .collect();
        replay.notes = notes(course, &periods, &folds, aim, calendar);
        if entry.sampled_every.is_some() && !matches!(aim, Aim::Deadline { .. }) {
            replay.notes.push(Note {
                code: "sampler".to_owned(),
                text: "what the sampler did not ask is put back into every week; RFC 6298 is left out, since it moves with \
                       every wait and nobody knows how with those that were never made"
                    .to_owned(),
            });
        }
        if folds.is_empty() {
            replay.finding = words::nothing(periods.len(), calendar.dated);
            return replay;
        }
        replay.rules = self.judge(stream, aim, &contenders, &folds);
        replay.finding = words::finding(&replay.rules);
        replay.periods = folds.into_iter().map(|fold| fold.period).collect();
        replay
    }

    /// What the replay of a stream is held to.
    pub(crate) fn terms(&self, newest: Option<i32>) -> Terms<'_> {
        Terms { policy: self.policy, newest, seed: self.seed, past: None }
    }

    /// One period; `None` where nothing ended in it, or before it nothing that a rule could learn from.
    #[expect(clippy::too_many_arguments, reason = "what is replayed, on what, and when")]
    fn fold(
        &self,
        stream: &str,
        entry: &Entry,
        contenders: &[Contender],
        days: &Days,
        timed: &Days,
        calendar: Calendar,
        period: i32,
    ) -> Option<Fold> {
        let first = calendar.first(period);
        let opening = match calendar.dated {
            true => self.terms(Some(first - 1)).opening(entry),
            false => i32::MIN,
        };
        let learning = days.where_day(|day| matches!(day, Day::Number(n) if opening <= n && n < first));
        let within = |day: Day| calendar.period(day) == Some(period);
        let taken = days.where_day(within).first_attempts();
        let whole = entry.whole(&taken).into_owned().before_gap(ENOUGH);
        let steps = Steps::of(&whole).ok().filter(|steps| !steps.steps.is_empty() && over(&whole) > 0.0)?;
        let lesson = Lesson::of(stream, entry, &learning, self.seed)?;
        let ceiling = lesson.ceiling;
        let prices = lesson.prices;

        let timed_whole = timed.where_day(within).first_attempts().before_gap(ENOUGH);
        let timed_steps = Steps::of_rule(&timed_whole).ok().filter(|steps| !steps.steps.is_empty());
        let times: Vec<f64> = contenders.iter().map(|c| lesson.time(*c)).collect();
        let outlook = matches!(prices.worth.aim, Aim::Deadline { .. })
            .then(|| LifeTable::of(&whole).ok().map(|table| Empirical::of(&table)))
            .flatten();
        let did = contenders
            .iter()
            .zip(&times)
            .map(|(contender, &time)| match contender {
                Contender::Timer => Some(did(timed_steps.as_ref()?, time, ceiling, &prices)),
                _ => {
                    let did = did(&steps, time, ceiling, &prices);
                    Some(match &outlook {
                        Some(outlook) => Did { earned: in_time(outlook, time, did.hidden, &prices)?, ..did },
                        None => did,
                    })
                }
            })
            .collect::<Option<Vec<Did>>>()?;

        let of_days = |days: &Days| -> Vec<(Day, Cells)> {
            let days = days.days().iter().filter(|(day, _)| within(*day));
            days.map(|(day, tally)| (*day, tally.first_attempts())).collect()
        };
        let each = of_days(days);
        let of_timer = of_days(timed);
        // In the same order; what the timer ended on another day than it ended counts on none.
        let timed_each: Vec<Cells> = each
            .iter()
            .map(|(day, _)| {
                of_timer.iter().find(|(d, _)| d == day).map(|(_, c)| c.clone()).unwrap_or_default()
            })
            .collect();
        let each: Vec<Cells> = each.into_iter().map(|(_, cells)| cells).collect();
        let (days_over, over) = (each.iter().map(over).collect(), over(&taken.clone().before_gap(ENOUGH)));
        let waits = whole.total();
        Some(Fold {
            period: Period {
                from: calendar.instant(period),
                to: calendar.instant(period + 1),
                waits: waits as u64,
                learnt_from: learning.first_attempts().total() as u64,
                advised: lesson.advice.is_some(),
            },
            over,
            prices,
            ceiling,
            times,
            did,
            days: days_over,
            sheet: Sheet::of(&entry.whole_parts(&taken, each), &whole, steps.last, false),
            timed: timed_steps.map(|steps| Sheet::of(&timed_each, &timed_whole, steps.last, true)),
        })
    }

    /// Adds up the periods, with the doubt of both each rule and the lead of ours.
    fn judge(&self, stream: &str, aim: Aim, contenders: &[Contender], folds: &[Fold]) -> Vec<RuleReplay> {
        let rates: Vec<[f64; 2]> = (0..contenders.len())
            .map(|c| pooled(folds.iter().map(|fold| (fold.over, fold.did[c].earned)), aim))
            .collect();
        let known: Vec<Option<f64>> = rates.iter().map(|r| known(*r)).collect();
        let (centres, draws) = redraw(aim, contenders, folds, self.seed ^ name_hash(stream));
        let over: f64 = folds.iter().map(|fold| fold.over).sum();
        let mean = |read: &dyn Fn(&Fold) -> f64| folds.iter().map(|f| f.over * read(f)).sum::<f64>() / over;
        contenders
            .iter()
            .enumerate()
            .map(|(c, contender)| {
                let values =
                    |read: &dyn Fn(&[f64]) -> f64| draws.iter().map(|d| read(d)).collect::<Vec<f64>>();
                let rate = known[c];
                let interval_per_s = match rate {
                    Some(rate) => interval(values(&|d| d[c]), centres[c], rate, LEVEL),
                    None => Some(rates[c]).filter(|r| r.iter().all(|v| v.is_finite())),
                };
                let ahead = known[0].zip(rate).filter(|_| c > 0).map(|(ours, rate)| ours - rate);
                let timer = *contender == Contender::Timer;
                let time = |f: &Fold| Some(f.times[c]).filter(|t| *t < f.ceiling || !never(*contender));
                RuleReplay {
                    rule: contender.name(),
                    give_up_after_s: folds.iter().filter(|_| !timer).map(time).collect(),
                    rate_per_s: rate,
                    interval_per_s,
                    hidden_share: mean(&|f| f.did[c].hidden),
                    done_share: mean(&|f| f.did[c].attempt.odds.done),
                    spent_s: mean(&|f| f.did[c].attempt.spent),
                    advice_ahead_per_s: ahead,
                    advice_ahead_interval_per_s: ahead.and_then(|ahead| {
                        interval(values(&|d| d[0] - d[c]), centres[0] - centres[c], ahead, LEVEL)
                    }),
                }
            })
            .collect()
    }
}

/// Whether a time at the ceiling means never.
fn never(contender: Contender) -> bool {
    matches!(contender, Contender::Advice | Contender::InForce(_) | Contender::Rule(Rule::Never))
}

/// Attempts that were over in a period. How many began is not known where watching began late; in the long run they are as
/// many.
fn over(cells: &Cells) -> f64 {
    cells.totals()[..3].iter().sum()
}

fn did(steps: &Steps, time: f64, ceiling: f64, prices: &Prices) -> Did {
    let (attempt, hidden) = attempt(steps, time, &prices.worth);
    Did { earned: attempt.bounds(hidden, steps.last, time.min(ceiling), prices), attempt, hidden }
}

/// The probability of being done in time; a share that was hidden may have been, or not.
fn in_time(outlook: &dyn Outlook, time: f64, hidden: f64, prices: &Prices) -> Option<[Earned; 2]> {
    let limits = Limits::new(0.0, time).ok()?;
    let objective = Objective::new(outlook, &prices.worth, &prices.retry, limits).ok()?;
    let worst = objective.score(time);
    Some([worst, (worst + hidden).min(1.0)].map(|gain| Earned { gain, time: 1.0 }))
}

/// The rate of all periods together, each weighed by its attempts; at worst and at best.
fn pooled(folds: impl Iterator<Item = (f64, [Earned; 2])>, aim: Aim) -> [f64; 2] {
    let (mut over, mut sums) = (0.0, [Earned::default(); 2]);
    for (weight, earned) in folds {
        over += weight;
        for (sum, earned) in sums.iter_mut().zip(earned) {
            sum.gain += weight * earned.gain;
            sum.time += weight * earned.time;
        }
    }
    let each = sums.map(|s| Earned { gain: s.gain / over, time: s.time / over }.score(aim));
    [each[0].min(each[1]), each[0].max(each[1])]
}

/// The rate, where the worst and the best hardly differ.
fn known([worst, best]: [f64; 2]) -> Option<f64> {
    let size = worst.abs().max(best.abs());
    (worst.is_finite() && best.is_finite() && best - worst <= KNOWN * size).then_some(0.5 * (worst + best))
}

/// Whether whole periods are drawn again and not days: a schedule under a deadline is not a sum over days, and what hangs
/// together is longer than a day where the waits are.
fn by_periods(aim: Aim, folds: &[Fold]) -> bool {
    let spent = folds.iter().flat_map(|fold| &fold.did).map(|did| did.attempt.spent).fold(0.0, f64::max);
    matches!(aim, Aim::Deadline { .. }) || spent > LONG
}

/// Every contender's rate with all days once, and on the resamples.
fn redraw(aim: Aim, contenders: &[Contender], folds: &[Fold], seed: u64) -> (Vec<f64>, Vec<Vec<f64>>) {
    let middle = |[worst, best]: [f64; 2]| 0.5 * (worst + best);
    if by_periods(aim, folds) {
        let rates = |times: &[f64]| -> Vec<f64> {
            let of = |c: usize| folds.iter().zip(times).map(move |(f, n)| (n * f.over, f.did[c].earned));
            (0..contenders.len()).map(|c| middle(pooled(of(c), aim))).collect()
        };
        let draws = resamples(folds.len(), seed).map(|times| rates(&times)).collect();
        return (rates(&vec![1.0; folds.len()]), draws);
    }
    let rates = |times: &[f64]| -> Vec<f64> {
        let mut rest = times;
        let mut of_folds: Vec<(f64, Vec<[Earned; 2]>)> = Vec::with_capacity(folds.len());
        for fold in folds {
            let (own, others) = rest.split_at(fold.days.len());
            rest = others;
            let over: f64 = own.iter().zip(&fold.days).map(|(n, over)| n * over).sum();
            if let Some(earned) = fold.earned(own, contenders).filter(|_| over > 0.0) {
                of_folds.push((over, earned));
            }
        }
        (0..contenders.len())
            .map(|c| middle(pooled(of_folds.iter().map(|(over, earned)| (*over, earned[c])), aim)))
            .collect()
    };
    let blocks: usize = folds.iter().map(|fold| fold.days.len()).sum();
    let draws: Vec<Vec<f64>> = resamples(blocks, seed).map(|times| rates(&times)).collect();
    debug_assert!(draws.len() <= RESAMPLES);
    (rates(&vec![1.0; blocks]), draws)
}

impl Fold {
    /// What every contender earns per attempt where each day comes so many times.
    fn earned(&self, times: &[f64], contenders: &[Contender]) -> Option<Vec<[Earned; 2]>> {
        let steps = self.sheet.steps(times)?;
        let timed = self.timed.as_ref().and_then(|sheet| sheet.steps(times));
        let earned = contenders.iter().zip(&self.times).map(|(contender, &time)| {
            let steps = if *contender == Contender::Timer { timed.as_ref()? } else { &steps };
            Some(did(steps, time, self.ceiling, &self.prices).earned)
        });
        earned.collect()
    }
}

/// What was learnt before a period.
struct Lesson {
    prices: Prices,
    ceiling: f64,
    /// The advised time, s; the ceiling for waiting it out; `None` where the evidence did not suffice.
    advice: Option<f64>,
    in_force: Option<GiveUp>,
    empirical: Empirical,
}

impl Lesson {
    fn of(stream: &str, entry: &Entry, learning: &crate::tally::Tally, seed: u64) -> Option<Lesson> {
        let cells = entry.whole(&learning.first_attempts()).into_owned().before_gap(ENOUGH);
        let table = LifeTable::of(&cells).ok().filter(|table| !table.rows().is_empty())?;
        let advice = advise::advise(&Case::new(stream, learning), entry, seed ^ name_hash(stream)).advice;
        let ceiling = advice.ceiling_s.unwrap_or(CEILING * table.last());
        let (mut worth, retry) = advise::prices(entry)?;
        worth.sticky = advice.sticky.as_ref().map_or(0.0, |s| s.value);
        Some(Lesson {
            prices: Prices { worth: worth.as_rate(), retry },
            ceiling,
            advice: match advice.action {
                Action::GiveUpAfter => advice.give_up_after_s,
                Action::WaitItOut => Some(ceiling),
                Action::GatherEvidence | Action::StateACost => None,
            },
            in_force: entry.now,
            empirical: Empirical::of(&table),
        })
    }

    /// A contender's give-up time, s, at most the ceiling; infinite for the timer's own.
    fn time(&self, contender: Contender) -> f64 {
        let in_force = || self.in_force.map_or(self.ceiling, GiveUp::seconds);
        let time = match contender {
            Contender::Timer => return f64::INFINITY,
            // Without an advice everything stays as it is.
            Contender::Advice => self.advice.unwrap_or_else(in_force),
            Contender::InForce(time) => time.seconds(),
            Contender::Rule(rule) => {
                let time = rule.give_up_after(&self.empirical, self.empirical.sight());
                time.unwrap_or(f64::INFINITY)
            }
        };
        time.min(self.ceiling)
    }
}

/// How days make periods.
#[derive(Clone, Copy)]
struct Calendar {
    /// The day after the last (of parts, the first part).
    end: i32,
    dated: bool,
}

impl Calendar {
    fn period(self, day: Day) -> Option<i32> {
        match day {
            Day::Number(n) => Some((n - self.end).div_euclid(PERIOD)),
            Day::Undated => None,
        }
    }

    /// First day of a period.
    fn first(self, period: i32) -> i32 {
        self.end + PERIOD * period
    }

    fn instant(self, period: i32) -> Option<String> {
        let unix = f64::from(self.first(period)) * DAY;
        if self.dated { say::time(unix) } else { None }
    }
}

fn notes(course: &Course, periods: &[i32], folds: &[Fold], aim: Aim, calendar: Calendar) -> Vec<Note> {
    let mut notes = Vec::new();
    let mut note = |code: &str, text: String| notes.push(Note { code: code.to_owned(), text });
    if !calendar.dated {
        note(
            "no_times",
            "the waits carry no times (`at`): they are taken in the order of the files, in equal parts in place of weeks"
                .to_owned(),
        );
    } else if !course.parts.is_empty() {
        note("some_without_times", "waits without a time (`at`) were left out".to_owned());
    }
    if course.backwards > 0 && !matches!(aim, Aim::Deadline { .. }) {
        note(
            "times_run_backwards",
            format!(
                "{} of {} waits come after one that ended later; RFC 6298 met them in the order of the files",
                say::count(course.backwards as f64),
                say::count(course.dated as f64)
            ),
        );
    }
    let missing = periods.windows(2).map(|p| p[1] - p[0] - 1).sum::<i32>();
    if missing > 0 {
        note("weeks_without_data", format!("{missing} weeks between the first and the last have no waits"));
    }
    if let [.., before, last] = periods
        && last - before > PAUSE
    {
        note(
            "lonely_end",
            format!("the last waits come {} weeks after the others: is a clock wrong?", last - before),
        );
    }
    if let Some(last) = periods.last().filter(|p| calendar.dated && **p < -1) {
        note("vanished", format!("it has no waits in the last {} weeks of the data", -1 - last));
    }
    let left_out = periods.len().saturating_sub(1) - folds.len();
    if left_out > 0 {
        note(
            "periods_left_out",
            format!(
                "{left_out} {} left out: nothing ended in them, or nothing in the window before them",
                if calendar.dated { "weeks" } else { "parts" }
            ),
        );
    }
    let unadvised = folds.iter().filter(|fold| !fold.period.advised).count();
    if unadvised > 0 {
        note(
            "little_evidence",
            format!(
                "before {unadvised} of {} the evidence did not suffice for an advice; ours then stayed with the time in \
                 force, or waited",
                folds.len()
            ),
        );
    }
    if matches!(aim, Aim::Deadline { .. }) {
        note(
            "deadline",
            "RFC 6298 is left out: under a deadline a schedule is judged, and its time is not one for all attempts"
                .to_owned(),
        );
    }
    if !folds.is_empty() && by_periods(aim, folds) {
        let unit = if calendar.dated { "weeks" } else { "parts" };
        note(
            "few_blocks",
            format!("the intervals rest on {} {unit} drawn again as wholes: take them as rough", folds.len()),
        );
    }
    notes
}
