//! What a give-up time earns: `N(τ)`, `D(τ)` and the aim made of them. METHODS.md sections 5 and 6.

use super::deadline::Deadline;
use super::retry::{Odds, Retry};
use super::worth::{Aim, Fade, Pause, Worth, WorthError, out_of_range};
use crate::numeric::integrate;
use crate::outlook::Outlook;
use crate::wait::MAX_AGE;

/// Between which ages a give-up time may lie.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limits {
    floor: f64,
    ceiling: f64,
}

impl Limits {
    /// From `floor` to `ceiling`, s; `0 <= floor <= ceiling`, `0 < ceiling <=` [`MAX_AGE`].
    ///
    /// # Errors
    /// [`WorthError::OutOfRange`] naming the bound.
    pub fn new(floor: f64, ceiling: f64) -> Result<Limits, WorthError> {
        if !(ceiling > 0.0 && ceiling <= MAX_AGE) {
            return Err(out_of_range("guard.ceiling", ceiling, "above 0 s and at most 1e10 s"));
        }
        if !(0.0..=ceiling).contains(&floor) {
            return Err(out_of_range("guard.floor", floor, "from 0 s to the ceiling"));
        }
        Ok(Limits { floor, ceiling })
    }

    /// Least give-up time, s.
    pub fn floor(&self) -> f64 {
        self.floor
    }

    /// Largest give-up time, s.
    pub fn ceiling(&self) -> f64 {
        self.ceiling
    }

    /// Where a search on the log scale starts: the floor, or a millionth of the ceiling.
    pub(crate) fn start(&self) -> f64 {
        self.floor.max(self.ceiling * 1e-6)
    }
}

/// Worth and pauses of one attempt, with what follows its ending folded in: stickiness, a cap, growing pauses.
///
/// For plain retries `w_g' = (w_g - φc)/(1-φ)` and `d_g'(τ) = (d_g + φτ)/(1-φ)`, the same at every give-up time.
/// A cap with stickiness, and pauses that grow, enter by their means over a request, which depend on it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Terms {
    gave_up: f64,
    failed_pause: f64,
    gave_up_pause: f64,
    /// Of the pause after a give-up, the part in proportion to the give-up time.
    doomed: f64,
}

impl Terms {
    pub(crate) fn plain(worth: &Worth) -> Terms {
        let fresh = 1.0 - worth.sticky;
        Terms::with(worth, worth.sticky / fresh, worth.pause.gave_up / fresh, worth.pause.failed)
    }

    pub(crate) fn averaged(worth: &Worth, retry: &Retry, odds: Odds) -> Terms {
        let request = retry.request(odds, worth);
        Terms::with(worth, request.doomed, request.gave_up_pause, request.failed_pause)
    }

    fn with(worth: &Worth, doomed: f64, gave_up_pause: f64, failed_pause: f64) -> Terms {
        Terms {
            gave_up: worth.gave_up + doomed * (worth.gave_up - worth.attempt_cost),
            failed_pause,
            gave_up_pause,
            doomed,
        }
    }

    /// Worth of a give-up, `w_g'`.
    pub(crate) fn gave_up(&self) -> f64 {
        self.gave_up
    }

    /// Time that follows a give-up at `t`, s.
    pub(crate) fn after_give_up(&self, t: f64) -> f64 {
        self.gave_up_pause + self.doomed * t
    }

    /// `N`, given `∫ w dF_d`.
    pub(crate) fn gain(&self, worth: &Worth, odds: Odds, completions: f64) -> f64 {
        completions + worth.failed * odds.failed + self.gave_up * odds.gave_up - worth.attempt_cost
    }

    /// `D`, given `A`.
    pub(crate) fn time(&self, worth: &Worth, odds: Odds, area: f64, t: f64) -> f64 {
        // Where nobody gives up or fails, a pause without end costs nothing.
        let times = |share: f64, pause: f64| if share > 0.0 { share * pause } else { 0.0 };
        area + worth.pause.done * odds.done
            + times(odds.failed, self.failed_pause)
            + times(odds.gave_up, self.after_give_up(t))
    }
}

/// The aim as it is maximised, from `N` and `D`.
pub(crate) fn score(aim: Aim, gain: f64, time: f64) -> f64 {
    match aim {
        Aim::CarryingCost(cost) => gain - cost * time,
        // An attempt of no length and no pause earns nothing: there is no such rate.
        _ if time > 0.0 => gain / time,
        _ => 0.0,
    }
}

/// The aim of a price list on an outlook, as a function of the give-up time.
pub struct Objective<'a> {
    outlook: &'a dyn Outlook,
    worth: Worth,
    retry: Retry,
    limits: Limits,
    plain: Option<Terms>,
    faded: Option<Faded>,
    deadline: Option<Deadline<'a>>,
    nodes: Vec<f64>,
}

/// Ages of the scan between floor and ceiling, before knots are added.
const NODES: usize = 512;

impl<'a> Objective<'a> {
    /// Joins an outlook, a price list, what happens on retries, and the range of give-up times.
    ///
    /// A deadline is solved here (METHODS.md section 5); its attempts are those of the aim, and a ceiling past
    /// it is cut to it. For aim `finish` only the pauses after a failure and a give-up, and the stickiness, count.
    ///
    /// # Errors
    /// Those of [`Worth::check`] and [`Retry::check`].
    pub fn new(
        outlook: &'a dyn Outlook,
        worth: &Worth,
        retry: &Retry,
        limits: Limits,
    ) -> Result<Objective<'a>, WorthError> {
        worth.check()?;
        retry.check()?;
        let worth = worth.as_rate();
        let mut limits = limits;
        let mut deadline = None;
        if let Aim::Deadline { by, attempts } = worth.aim {
            limits.ceiling = limits.ceiling.min(by);
            limits.floor = limits.floor.min(limits.ceiling);
            let retry = Retry { attempts: Some(attempts), ..*retry };
            deadline = Some(Deadline::solve(outlook, by, attempts, &worth, &retry, limits));
        }
        let nodes = nodes(outlook, &worth, limits);
        let faded = (worth.fade != Fade::Stays && deadline.is_none())
            .then(|| Faded::new(outlook, worth.fade, &nodes));
        let plain = retry.is_plain(&worth).then(|| Terms::plain(&worth));
        Ok(Objective { outlook, worth, retry: *retry, limits, plain, faded, deadline, nodes })
    }

    /// What the future looks like.
    pub fn outlook(&self) -> &'a dyn Outlook {
        self.outlook
    }

    /// What time and endings are worth, as the rate reads it.
    pub fn worth(&self) -> &Worth {
        &self.worth
    }

    /// What happens on retries.
    pub fn retry(&self) -> &Retry {
        &self.retry
    }

    /// The range of give-up times.
    pub fn limits(&self) -> Limits {
        self.limits
    }

    /// The solved deadline, where that is the aim.
    pub fn deadline(&self) -> Option<&Deadline<'a>> {
        self.deadline.as_ref()
    }

    /// Ages from floor to ceiling that a search looks at: log-spaced, and every knot. Sorted, distinct.
    pub fn nodes(&self) -> &[f64] {
        &self.nodes
    }

    /// `N(τ)`: what an attempt given up at `t` earns, with what stickiness adds to a give-up.
    pub fn gain(&self, t: f64) -> f64 {
        let odds = Odds::at(self.outlook, t);
        self.terms(odds).gain(&self.worth, odds, self.completions(t, odds))
    }

    /// `D(τ)`: the time it takes with the pauses after it, s.
    pub fn time(&self, t: f64) -> f64 {
        let odds = Odds::at(self.outlook, t);
        self.terms(odds).time(&self.worth, odds, self.outlook.restricted_mean(t), t)
    }

    /// What is maximised over the give-up time: ρ, `1/m`, `N - κD`, or the probability of meeting the deadline
    /// when the first attempt is given up at `t`. Never NaN. A `t` beyond [`MAX_AGE`] counts as that: never.
    pub fn score(&self, t: f64) -> f64 {
        let t = t.min(MAX_AGE);
        if let Some(deadline) = &self.deadline {
            return deadline.first(t);
        }
        let odds = Odds::at(self.outlook, t);
        let terms = self.terms(odds);
        let gain = terms.gain(&self.worth, odds, self.completions(t, odds));
        score(self.worth.aim, gain, terms.time(&self.worth, odds, self.outlook.restricted_mean(t), t))
    }

    /// The aim as it is quoted: [`Objective::score`], and for `finish` its inverse, the expected time until
    /// done `m(τ)`, s (infinite where nothing is ever done).
    pub fn value(&self, t: f64) -> f64 {
        self.quoted(self.score(t))
    }

    /// [`Objective::score`] if retries were sticky with `phi`; not under a deadline.
    pub(crate) fn score_if_sticky(&self, t: f64, phi: f64) -> f64 {
        let worth = Worth { sticky: phi, ..self.worth };
        let odds = Odds::at(self.outlook, t);
        let terms = Terms::averaged(&worth, &self.retry, odds);
        let gain = terms.gain(&worth, odds, self.completions(t, odds));
        score(worth.aim, gain, terms.time(&worth, odds, self.outlook.restricted_mean(t), t))
    }

    pub(crate) fn quoted(&self, score: f64) -> f64 {
        match self.worth.aim {
            Aim::Finish if score > 0.0 => 1.0 / score,
            Aim::Finish => f64::INFINITY,
            _ => score,
        }
    }

    /// What a second is worth when the best score is `best`: ρ*, `1/m*`, or κ.
    pub(crate) fn price(&self, best: f64) -> f64 {
        match self.worth.aim {
            Aim::CarryingCost(cost) => cost,
            _ => best,
        }
    }

    /// `N - price·D` with fixed terms: what [`crate::stopping::Holding`] compares.
    pub(crate) fn surplus(&self, t: f64, price: f64, terms: &Terms) -> f64 {
        let odds = Odds::at(self.outlook, t);
        terms.gain(&self.worth, odds, self.completions(t, odds))
            - price * terms.time(&self.worth, odds, self.outlook.restricted_mean(t), t)
    }

    /// The first-order condition at `t`: marginal gain less `price` times marginal time, per second of an attempt
    /// that is still open. `None` where the outlook has no density, or the retries are not plain.
    pub fn marginal(&self, t: f64, price: f64) -> Option<f64> {
        let terms = self.plain?;
        let (done, failed) = self.outlook.hazards(t)?;
        let any = done + failed;
        let gain = self.worth.completion(t) * done + self.worth.failed * failed - terms.gave_up * any;
        let Pause { done: after_done, .. } = self.worth.pause;
        let time = 1.0 + terms.doomed + after_done * done + terms.failed_pause * failed
            - terms.after_give_up(t) * any;
        let marginal = gain - price * time;
        marginal.is_finite().then_some(marginal)
    }

    /// The terms of a give-up at `t`.
    pub(crate) fn terms_at(&self, t: f64) -> Terms {
        self.terms(Odds::at(self.outlook, t))
    }

    fn terms(&self, odds: Odds) -> Terms {
        self.plain.unwrap_or_else(|| Terms::averaged(&self.worth, &self.retry, odds))
    }

    fn completions(&self, t: f64, odds: Odds) -> f64 {
        match &self.faded {
            None => self.worth.done * odds.done,
            Some(faded) => self.worth.done * faded.at(self.outlook, t),
        }
    }
}

fn nodes(outlook: &dyn Outlook, worth: &Worth, limits: Limits) -> Vec<f64> {
    let (start, ceiling) = (limits.start(), limits.ceiling);
    let step = (ceiling / start).ln() / (NODES - 1) as f64;
    let mut nodes: Vec<f64> = (0..NODES).map(|i| start * (step * i as f64).exp()).collect();
    let knots = outlook.knots();
    nodes.extend(&knots[knots.partition_point(|&k| k <= start)..]);
    nodes.extend(worth.fade.kink());
    nodes.retain(|t| *t > start && *t < ceiling);
    nodes.extend([start, ceiling]);
    nodes.sort_by(f64::total_cmp);
    nodes.dedup();
    nodes
}

/// `∫_0^t share dF_d`, cumulated over the nodes by parts, `share·F - ∫ share' F`, which no infinite density
/// disturbs; on an empirical curve the whole step lies on the second node, or is spread evenly between the two.
struct Faded {
    fade: Fade,
    ages: Vec<f64>,
    sums: Vec<f64>,
}

impl Faded {
    fn new(outlook: &dyn Outlook, fade: Fade, nodes: &[f64]) -> Faded {
        let knots = outlook.knots();
        let mut ages = vec![0.0];
        ages.extend(&knots[..knots.partition_point(|&k| k < nodes[0])]);
        ages.extend(fade.kink().filter(|&k| k < nodes[0]));
        ages.extend(nodes);
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        let mut faded = Faded { fade, sums: vec![0.0], ages };
        for i in 1..faded.ages.len() {
            let sum = faded.sums[i - 1] + faded.between(outlook, faded.ages[i - 1], faded.ages[i]);
            faded.sums.push(sum);
        }
        faded
    }

    fn at(&self, outlook: &dyn Outlook, t: f64) -> f64 {
        let i = self.ages.partition_point(|&a| a <= t).max(1) - 1;
        self.sums[i] + self.between(outlook, self.ages[i], t)
    }

    fn between(&self, outlook: &dyn Outlook, from: f64, to: f64) -> f64 {
        if to <= from {
            return 0.0;
        }
        let (before, after) = (outlook.done(from), outlook.done(to));
        let middle = outlook.done(0.5 * (from + to));
        if outlook.hazards(0.5 * (from + to)).is_none() {
            if middle == before {
                return self.fade.share(to) * (after - before);
            }
            if (middle - 0.5 * (before + after)).abs() <= 1e-9 * (after - before) {
                return (after - before) * self.mean_share(from, to);
            }
        }
        let lost = integrate(&|t| self.fade.slope(t) * outlook.done(t), from, to, 1e-11);
        self.fade.share(to) * after - self.fade.share(from) * before - lost
    }

    /// Mean share over a stretch in which completions are spread evenly, by three points of Gauss and Legendre.
    fn mean_share(&self, from: f64, to: f64) -> f64 {
        let (middle, reach) = (0.5 * (from + to), 0.5 * (to - from) * 0.6f64.sqrt());
        let share = |t: f64| self.fade.share(t);
        (5.0 * (share(middle - reach) + share(middle + reach)) + 8.0 * share(middle)) / 18.0
    }
}
