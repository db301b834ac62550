//! Past the edge of sight: whether to look there, how many waits that takes and what it may cost. METHODS.md section 8.

use super::doubt::BestOfCurve;
use super::objective::Terms;
use super::worth::{Aim, Worth};
use crate::outlook::Outlook;

/// Weight from which an opinion is not negligible.
const NOTABLE: f64 = 0.05;

/// On which side of the present timeout the curves put the optimum.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Sides {
    /// Share of the weight beyond the edge.
    pub beyond: f64,
    /// Weighted median of the best times beyond it, s, where there are any.
    pub median_beyond: Option<f64>,
}

impl Sides {
    /// Splits the curves' best times at `edge` (s).
    pub fn of(bests: &[BestOfCurve], edge: f64) -> Sides {
        let total: f64 = bests.iter().map(|b| b.weight).sum();
        let mut over: Vec<(f64, f64)> =
            bests.iter().filter(|b| b.at > edge).map(|b| (b.at, b.weight)).collect();
        over.sort_by(|a, b| a.0.total_cmp(&b.0));
        let beyond: f64 = over.iter().map(|b| b.1).sum();
        let mut sum = 0.0;
        let median = over.iter().find(|b| {
            sum += b.1;
            sum >= 0.5 * beyond
        });
        Sides { beyond: if total > 0.0 { beyond / total } else { 0.0 }, median_beyond: median.map(|b| b.0) }
    }

    /// Whether curves of notable weight (5%) put the optimum on either side: the data do not tell, and a look would.
    pub fn disagree(&self) -> bool {
        (NOTABLE..=1.0 - NOTABLE).contains(&self.beyond)
    }
}

/// A plan to let some waits run past the edge.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Look {
    /// The edge `τ0`, s.
    pub from: f64,
    /// How far to let them run, `τ1`, s.
    pub to: f64,
    /// Share that must be done in between, of those open at the edge, for it to pay: `p0`.
    pub break_even: f64,
    /// The share expected by those who believe that it pays: `p1`.
    pub expected: f64,
    /// Waits that must be open at the edge and run on, to tell `p1` from `p0`.
    pub waits: f64,
    /// Share of waits that are open at the edge.
    pub open: f64,
    /// What one such wait costs at worst: it runs to `τ1` in vain. In the unit of worth.
    pub worst_cost_each: f64,
}

/// Standard normal 95% point: one-sided level 5%.
const LEVEL: f64 = 1.644_853_626_951_472_2;
/// Standard normal 80% point: power 80%.
const POWER: f64 = 0.841_621_233_572_914_3;

impl Look {
    /// Plans a look from `from` to `to` (s), as `beyond` sees what lies there, when a second is worth `price` (ρ*, or
    /// `1/m*` for aim `finish`; a carrying cost is its own price).
    ///
    /// `p0 = price·E[time in (τ0,τ1] | T>τ0] / (w - w_g - price·(d_d - d_g))`, `w` averaged over the completions there,
    /// sticky retries counted as in METHODS.md section 6. The number of waits is that of a one-sided test of one
    /// proportion by the normal approximation, `((z_α √(p0 q0) + z_β √(p1 q1))/(p1 - p0))²` (Fleiss, Levin & Paik 2003,
    /// *Statistical Methods for Rates and Proportions*, ch. 2; from memory), level 5% and power 80%. `None` where
    /// `beyond` does not expect it to pay, or under a deadline.
    pub fn plan(worth: &Worth, price: f64, beyond: &dyn Outlook, from: f64, to: f64) -> Option<Look> {
        let worth = worth.as_rate();
        let price = match worth.aim {
            Aim::CarryingCost(cost) => cost,
            Aim::Deadline { .. } => return None,
            Aim::Rate | Aim::Finish => price,
        };
        let open = beyond.survival(from);
        let done = beyond.done(to) - beyond.done(from);
        if !(to > from && open > 0.0 && done > 0.0 && price > 0.0) {
            return None;
        }
        let share = |t: f64| worth.fade.share(t);
        let completion =
            worth.done * (beyond.faded_done(to, &share) - beyond.faded_done(from, &share)) / done;
        let time = (beyond.restricted_mean(to) - beyond.restricted_mean(from)) / open;
        let terms = Terms::plain(&worth);
        let gain = completion - terms.gave_up() - price * (worth.pause.done - terms.after_give_up(from));
        let (p0, p1) = (price * time / gain, done / open);
        if !(gain > 0.0 && p0 > 0.0 && p0 < 1.0 && p1 > p0) {
            return None;
        }
        let spread = LEVEL * (p0 * (1.0 - p0)).sqrt() + POWER * (p1 * (1.0 - p1)).max(0.0).sqrt();
        let delay = terms.after_give_up(to) - terms.after_give_up(from);
        Some(Look {
            from,
            to,
            break_even: p0,
            expected: p1,
            waits: (spread / (p1 - p0)).powi(2).ceil().max(1.0),
            open,
            worst_cost_each: price * (to - from + delay),
        })
    }

    /// What the whole look costs at worst, in the unit of worth.
    pub fn worst_cost(&self) -> f64 {
        self.waits * self.worst_cost_each
    }

    /// Share of traffic that must be let run for the look to take `duration` s when `per_second` waits start each
    /// second; 1 where even all of it takes longer.
    pub fn share_of_traffic(&self, per_second: f64, duration: f64) -> f64 {
        let reach = per_second * duration * self.open;
        if reach > self.waits { self.waits / reach } else { 1.0 }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::stopping::{Competing, Failure, Limits, Objective, Retry, best};
    use crate::tail::Family;
    use crate::tail::families::Exponential;

    /// `P(X >= k)` of a binomial, summed.
    fn at_least(k: u32, n: u32, p: f64) -> f64 {
        let (mut term, mut sum) = ((f64::from(n) * (1.0 - p).ln()).exp(), 0.0);
        for i in 0..=n {
            if i >= k {
                sum += term;
            }
            term *= f64::from(n - i) / f64::from(i + 1) * p / (1.0 - p);
        }
        sum
    }

    #[test]
    fn the_number_has_the_power_it_claims() {
        let law = Exponential.law(&[0.2_f64.ln()]).unwrap();
        let beyond = Competing::new(law, Failure::Never);
        let look = Look::plan(&Worth::default(), 0.1, &beyond, 1.0, 3.0).unwrap();
        // p1 = 1 - e^{-0.4}; E[time] = p1/0.2; p0 = 0.1 E[time].
        assert!((look.expected - (1.0 - (-0.4_f64).exp())).abs() < 1e-12);
        assert!((look.break_even - 0.5 * look.expected).abs() < 1e-12);
        assert!((look.worst_cost_each - 0.2).abs() < 1e-12);
        let n = look.waits as u32;
        let critical = (0..=n).find(|&k| at_least(k, n, look.break_even) <= 0.05).unwrap();
        let power = at_least(critical, n, look.expected);
        // The exact test is a little more cautious than its normal approximation.
        assert!((0.68..0.86).contains(&power), "{n} {critical} {power}");
        assert!((look.share_of_traffic(1.0, 1e6) - look.waits / (1e6 * look.open)).abs() < 1e-15);
        assert_eq!(look.share_of_traffic(1.0, 1.0), 1.0);
    }

    #[test]
    fn break_even_is_where_both_earn_the_same() {
        // Giving up at τ1 earns as much as at τ0 when the share done in between is p0 at the rate of τ0.
        let law = Exponential.law(&[0.2_f64.ln()]).unwrap();
        let outlook = Competing::new(law, Failure::Never);
        let mut worth = Worth { gave_up: 0.1, attempt_cost: 0.05, ..Worth::default() };
        (worth.pause.done, worth.pause.gave_up) = (0.3, 0.4);
        let limits = Limits::new(0.1, 10.0).unwrap();
        let objective = Objective::new(&outlook, &worth, &Retry::default(), limits).unwrap();
        let price = best(&objective).unwrap().score;
        let look = Look::plan(&worth, price, &outlook, 1.0, 4.0).unwrap();
        let extra =
            (objective.gain(4.0) - objective.gain(1.0)) - price * (objective.time(4.0) - objective.time(1.0));
        let per_done = 1.0 - 0.1 - price * (0.3 - 0.4);
        assert!((extra / look.open - (look.expected - look.break_even) * per_done).abs() < 1e-12);
    }

    #[test]
    fn sides_and_disagreement() {
        let curve = |at, weight| BestOfCurve { member: 0, weight, at, score: 1.0 };
        let split = Sides::of(&[curve(1.0, 0.6), curve(3.0, 0.1), curve(9.0, 0.3)], 2.0);
        assert!((split.beyond - 0.4).abs() < 1e-15 && split.median_beyond == Some(9.0) && split.disagree());
        let none = Sides::of(&[curve(1.0, 1.0)], 2.0);
        assert_eq!((none.beyond, none.median_beyond, none.disagree()), (0.0, None, false));
        assert!(!Sides::of(&[], 2.0).disagree());
    }
}
