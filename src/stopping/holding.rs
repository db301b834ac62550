//! What holding on is worth to a wait that is open now. METHODS.md section 5, "Value of holding on".

use super::objective::{Objective, Terms};
use super::optimum::{Optimum, Peak, peaks};
use crate::numeric::root;

/// The verdict on one open wait.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Hold {
    /// `V(t)`: worth of holding on above that of giving up now, >= 0. For aim `finish` in completions (times the
    /// expected time until done it is seconds saved), under a deadline in probability.
    pub value: f64,
    /// Hold on (or, if false, let go now).
    pub hold: bool,
    /// When to look again, s of age: where holding on, the age at which `V` reaches 0 and to let go; where
    /// letting go, the age from which a wait that was kept would be worth holding again, if there is one.
    pub look_again: Option<f64>,
}

/// Values of holding on under one objective and its optimum, prepared for any number of ages.
pub struct Holding<'a> {
    objective: &'a Objective<'a>,
    price: f64,
    terms: Terms,
    /// Local maxima of `N - ρ*D`, by age.
    peaks: Vec<Peak>,
    /// For each, the index of the highest at or after it (the first of equals).
    highest: Vec<usize>,
    /// `N - ρ*D` at the objective's nodes.
    surplus: Vec<f64>,
}

impl<'a> Holding<'a> {
    /// Prepares the values. A cap with stickiness and growing pauses enter by their means at the optimum.
    pub fn new(objective: &'a Objective<'a>, optimum: &Optimum) -> Holding<'a> {
        let price = objective.price(optimum.score);
        let terms = objective.terms_at(optimum.at);
        if objective.deadline().is_some() {
            return Holding { objective, price, terms, peaks: vec![], highest: vec![], surplus: vec![] };
        }
        let f = |t: f64| objective.surplus(t, price, &terms);
        let nodes = objective.nodes();
        let surplus: Vec<f64> = nodes.iter().map(|&t| f(t)).collect();
        let mut peaks = peaks(objective, nodes, &surplus, &f, &|t| objective.marginal(t, price));
        // The optimum is one of them; its own digits make the value end where the advice does.
        if let Some(near) = peaks.iter_mut().find(|p| (p.at - optimum.at).abs() <= 1e-6 * optimum.at) {
            *near = Peak { at: optimum.at, value: f(optimum.at), kind: optimum.kind };
        }
        let mut highest: Vec<usize> = (0..peaks.len()).collect();
        for i in (0..peaks.len().saturating_sub(1)).rev() {
            if peaks[highest[i + 1]].value > peaks[i].value {
                highest[i] = highest[i + 1];
            }
        }
        Holding { objective, price, terms, peaks, highest, surplus }
    }

    /// The verdict at an age in s, >= 0. Beyond the ceiling the answer is to let go.
    pub fn at(&self, age: f64) -> Hold {
        let ceiling = self.objective.limits().ceiling();
        let open = self.objective.outlook().survival(age);
        let let_go = Hold { value: 0.0, hold: false, look_again: None };
        if !(age >= 0.0 && age < ceiling && open > 0.0) {
            return let_go;
        }
        if let Some(deadline) = self.objective.deadline() {
            let left = deadline.by() - age;
            let (value, until) = deadline.holding_on(age, left, deadline.attempts() - 1);
            return if until > age { Hold { value, hold: true, look_again: Some(until) } } else { let_go };
        }
        let Some(&next) = self.highest.get(self.peaks.partition_point(|p| p.at <= age)) else {
            return let_go;
        };
        let peak = self.peaks[next];
        let now = self.surplus_at(age);
        if peak.value > now {
            return Hold { value: (peak.value - now) / open, hold: true, look_again: Some(peak.at) };
        }
        Hold { look_again: self.falls_below(peak.value, age, peak.at), ..let_go }
    }

    /// `[age, V(age)]` from 0 to the ceiling: at 0, at the objective's nodes thinned to about `points`, and at
    /// the ages where `V` reaches 0.
    pub fn curve(&self, points: usize) -> Vec<[f64; 2]> {
        let nodes = self.objective.nodes();
        let stride = nodes.len().div_ceil(points.max(2));
        let mut ages: Vec<f64> = nodes.iter().copied().step_by(stride).collect();
        ages.extend(self.peaks.iter().enumerate().filter(|&(i, _)| self.highest[i] == i).map(|(_, p)| p.at));
        ages.extend([0.0, self.objective.limits().ceiling()]);
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        ages.into_iter().map(|t| [t, self.at(t).value]).collect()
    }

    fn surplus_at(&self, t: f64) -> f64 {
        self.objective.surplus(t, self.price, &self.terms)
    }

    /// First age after `from` and before `until` at which the surplus is below `level`.
    fn falls_below(&self, level: f64, from: f64, until: f64) -> Option<f64> {
        let nodes = self.objective.nodes();
        let start = nodes.partition_point(|&t| t <= from);
        let below =
            (start..nodes.len()).take_while(|&i| nodes[i] < until).find(|&i| self.surplus[i] < level)?;
        let before = if below == start { from } else { nodes[below - 1] };
        root(&|t| self.surplus_at(t) - level, before, nodes[below], 1e-12).ok()
    }
}
