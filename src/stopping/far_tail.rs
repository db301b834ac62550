//! What a timer does to very long totals, which can move against the mean. METHODS.md section 6.

use super::objective::Terms;
use super::retry::{Odds, Retry};
use super::worth::Worth;
use crate::numeric::{integrate, root};
use crate::outlook::Outlook;

/// What the timer does to the far tail of the total time.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum TailEffect {
    /// Very long totals become rarer.
    Thinned,
    /// Very long totals become more frequent.
    Lengthened,
    /// Neither, within a part in a million.
    Same,
}

/// Mean and far tail of the total time under a timer and without one.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FarTail {
    /// `lim -ln P(total > t) / t` with the timer, 1/s.
    pub decay: f64,
    /// The same without: the law's own final hazard, 1/s; 0 for a heavy law.
    pub decay_never: f64,
    /// Expected time until done with the timer, s.
    pub mean: f64,
    /// Expected time until done when given up only at the ceiling, s.
    pub mean_never: f64,
    /// Which way the far tail moves.
    pub effect: TailEffect,
}

impl FarTail {
    /// Compares a timer of `give_up_after` with one at `ceiling` (s) for the mean, and with `final_hazard`
    /// (1/s, see [`crate::stopping::Competing::final_hazard`]) for the far tail (Eliazar & Reuveni 2020, 2021).
    pub fn new(
        outlook: &dyn Outlook,
        worth: &Worth,
        retry: &Retry,
        give_up_after: f64,
        ceiling: f64,
        final_hazard: f64,
    ) -> FarTail {
        let decay = decay(outlook, worth, retry, give_up_after);
        let same = (decay - final_hazard).abs() <= 1e-6 * decay.max(final_hazard) || decay == final_hazard;
        FarTail {
            decay,
            decay_never: final_hazard,
            mean: expected_time(outlook, worth, retry, give_up_after),
            mean_never: expected_time(outlook, worth, retry, ceiling),
            effect: match () {
                _ if same => TailEffect::Same,
                _ if decay > final_hazard => TailEffect::Thinned,
                _ => TailEffect::Lengthened,
            },
        }
    }

    /// Whether the timer shortens the mean and yet makes very long totals more frequent.
    pub fn shorter_but_longer_tailed(&self) -> bool {
        self.mean < self.mean_never && self.effect == TailEffect::Lengthened
    }
}

/// Expected time until done, retrying without a cap, s; infinite where nothing is ever done.
pub fn expected_time(outlook: &dyn Outlook, worth: &Worth, retry: &Retry, give_up_after: f64) -> f64 {
    let odds = Odds::at(outlook, give_up_after);
    if odds.done <= 0.0 {
        return f64::INFINITY;
    }
    let mut worth = *worth;
    worth.pause.done = 0.0;
    let terms = Terms::averaged(&worth, &Retry { attempts: None, ..*retry }, odds);
    terms.time(&worth, odds, outlook.restricted_mean(give_up_after), give_up_after) / odds.done
}

/// `lim -ln P(total > t) / t` under a timer, retrying without a cap, 1/s: without failures and stickiness
/// `H(τ)/(τ + d_g)`.
///
/// In general the θ at which the moment generating functions of the stretches that end undone make the chain of
/// attempts critical (the Cramér-Lundberg equation). Pauses that grow count at their longest; if they grow for ever
/// the far tail is heavier than exponential and the answer 0. Infinite where the total is bounded.
pub fn decay(outlook: &dyn Outlook, worth: &Worth, retry: &Retry, give_up_after: f64) -> f64 {
    let odds = Odds::at(outlook, give_up_after);
    let phi = worth.sticky;
    let (pause_failed, pause) =
        (retry.pause(worth.pause.failed, 10_000), retry.pause(worth.pause.gave_up, 10_000));
    if pause.is_infinite() && odds.gave_up > 0.0 || pause_failed.is_infinite() && odds.failed > 0.0 {
        return 0.0;
    }
    // Moment generating function of a pause.
    let paused = |theta: f64, pause: f64| {
        let x = 2.0 * theta * pause;
        if !retry.jitter {
            (0.5 * x).exp()
        } else if x < 1e-8 {
            1.0 + 0.5 * x
        } else {
            x.exp_m1() / x
        }
    };
    if odds.failed <= 0.0 && !retry.jitter {
        return -(phi + (1.0 - phi) * odds.gave_up).ln() / (give_up_after + pause);
    }
    let failures = Failures::upto(outlook, give_up_after);
    // det(1 - M(θ)) of the two states; above 0 below the critical θ, and below 0 just after it.
    let surplus = |theta: f64| {
        let stay = (theta * give_up_after).exp() * paused(theta, pause);
        let fail = if odds.failed > 0.0 { failures.moment(theta) * paused(theta, pause_failed) } else { 0.0 };
        let leave = odds.gave_up * stay;
        (1.0 - fail) * (1.0 - phi * stay - (1.0 - phi) * leave) - leave * (1.0 - phi) * fail
    };
    let (mut low, mut high) = (0.0, 1e-3 / give_up_after);
    for _ in 0..40 {
        let at = surplus(high);
        if !at.is_finite() {
            return f64::INFINITY;
        }
        if at < 0.0 {
            return root(&surplus, low, high, 1e-10).unwrap_or(high);
        }
        (low, high) = (high, 1.5 * high);
    }
    f64::INFINITY
}

/// Widest stretch between knots, as a share of the give-up time, over which `F_f` is taken as straight.
const STRETCH: f64 = 0.1;

/// When failures come, up to the give-up time.
enum Failures<'a> {
    /// By a density, to be integrated.
    Density(&'a dyn Outlook, f64),
    /// Middle and half width of a stretch in which they come evenly (a step has no width), and their share.
    Stretches(Vec<[f64; 3]>),
}

impl<'a> Failures<'a> {
    /// A curve whose knots lie close together, as a sampled one's do, is straight between them, which makes its
    /// moments sums. A step curve jumps at its knots.
    fn upto(outlook: &'a dyn Outlook, upto: f64) -> Failures<'a> {
        let steps = outlook.hazards(0.5 * upto).is_none();
        let knots = outlook.knots();
        let ends: Vec<f64> =
            knots[..knots.partition_point(|&u| u < upto)].iter().copied().chain([upto]).collect();
        let close = |ends: &[f64]| {
            ends[0] <= STRETCH * upto && ends.windows(2).all(|w| w[1] - w[0] <= STRETCH * upto)
        };
        if !steps && !close(&ends) {
            return Failures::Density(outlook, upto);
        }
        let (mut from, mut before) = (0.0, 0.0);
        let stretch = |to: f64| {
            let after = outlook.failed(to);
            let share = after - before;
            let part = if steps { [to, 0.0, share] } else { [0.5 * (from + to), 0.5 * (to - from), share] };
            (from, before) = (to, after);
            part
        };
        Failures::Stretches(ends.into_iter().map(stretch).collect())
    }

    /// `∫ e^{θu} dF_f(u)`.
    fn moment(&self, theta: f64) -> f64 {
        match self {
            Failures::Density(outlook, upto) => {
                let density = |u: f64| {
                    let hazard = outlook.hazards(u).map_or(0.0, |h| h.1);
                    (theta * u).exp() * hazard * outlook.survival(u)
                };
                integrate(&density, 0.0, *upto, 1e-9)
            }
            Failures::Stretches(stretches) => stretches
                .iter()
                .map(|&[middle, half, share]| {
                    let x = theta * half;
                    let spread = if x < 1e-4 { 1.0 + x * x / 6.0 } else { x.sinh() / x };
                    share * (theta * middle).exp() * spread
                })
                .sum(),
        }
    }
}
