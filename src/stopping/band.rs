//! The stretch of give-up times that are as good as the best. METHODS.md section 7.

use super::objective::Objective;

/// The stretch around `at` (s) in which the score stays within a share `slack` of its value there,
/// `score >= best - slack·|best|`, cut to floor and ceiling; its two ends, s.
///
/// A dip narrower than the spacing of [`Objective::nodes`] is passed over; on a step curve the score just before an
/// ending counts, so that the stretch may start at `at` itself.
pub fn band(objective: &Objective<'_>, at: f64, slack: f64) -> [f64; 2] {
    let best = objective.score(at);
    let need = best - slack * best.abs();
    let inside = |t: f64| objective.score(t) >= need;
    let nodes = objective.nodes();
    // The end of the stretch between one age inside and one not.
    let end = |inner: f64, outer: f64| {
        let (mut inner, mut outer) = (inner, outer);
        while (outer - inner).abs() > 1e-12 * inner.max(outer) {
            let middle = 0.5 * (inner + outer);
            if middle == inner || middle == outer {
                break;
            }
            if inside(middle) { inner = middle } else { outer = middle }
        }
        inner
    };
    let limits = objective.limits();
    let mut low = at;
    for &node in nodes[..nodes.partition_point(|&t| t < at)].iter().rev() {
        // Just before an ending the score of a step curve is at its lowest.
        let just_before = low - 1e-10 * (low - node);
        if !inside(just_before) {
            break;
        }
        if !inside(node) {
            low = end(just_before, node);
            break;
        }
        low = node;
    }
    let mut high = at;
    for &node in &nodes[nodes.partition_point(|&t| t <= at)..] {
        let just_before = node - 1e-10 * (node - high);
        if !inside(just_before) {
            high = end(high, just_before);
            break;
        }
        if !inside(node) {
            high = just_before;
            break;
        }
        high = node;
    }
    [low.max(limits.floor()), high]
}
