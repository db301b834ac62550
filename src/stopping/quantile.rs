//! Where a falling curve comes down to a level.

/// Least age in `(0, end]` (s) at which `curve`, which never rises, is at most `level`; `None` if that is not
/// reached by `end`. Bisection to the last bit, so that a step is met exactly.
pub(crate) fn first_at_most(curve: &dyn Fn(f64) -> f64, level: f64, end: f64) -> Option<f64> {
    if curve(end) > level {
        return None;
    }
    let (mut above, mut below) = (0.0, end);
    loop {
        // By halves on the log scale while the bracket spans magnitudes, then on the plain one.
        let middle = if above > 0.25 * below {
            0.5 * (above + below)
        } else if above > 0.0 {
            above.sqrt() * below.sqrt()
        } else {
            1e-3 * below
        };
        if middle <= above || middle >= below {
            return Some(below);
        }
        if curve(middle) <= level { below = middle } else { above = middle }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn meets_steps_and_slopes() {
        assert_eq!(first_at_most(&|t| if t < 0.3 { 1.0 } else { 0.2 }, 0.5, 1e6), Some(0.3));
        let t = first_at_most(&|t: f64| (-t).exp(), 0.01, 1e9).unwrap();
        assert!((t - 100f64.ln()).abs() < 1e-12);
        assert_eq!(first_at_most(&|_| 0.5, 0.1, 10.0), None);
        assert_eq!(first_at_most(&|_| 0.0, 0.1, 1e-3).map(|t| t < 1e-300), Some(true));
    }
}
