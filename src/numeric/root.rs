//! Bracketed root search.

/// Why no root was found.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum RootError {
    /// The function has the same sign at both ends, or is NaN there.
    #[error("no change of sign between {a} and {b}")]
    NoBracket {
        /// Lower end.
        a: f64,
        /// Upper end.
        b: f64,
    },
}

/// Budget: enough halvings for any pair of doubles.
const MAX_STEPS: usize = 200;

/// Root of `f` in `[a, b]`, where it changes sign, to a relative `tolerance` in the argument (Brent 1973, ch. 4).
///
/// # Errors
/// [`RootError::NoBracket`] without a change of sign. The budget (200 steps) suffices for any bracket; were it
/// to end, the middle of the last bracket is returned, which still holds the change of sign.
pub fn root(f: &dyn Fn(f64) -> f64, a: f64, b: f64, tolerance: f64) -> Result<f64, RootError> {
    let (mut a, mut b) = (a, b);
    let (mut fa, mut fb) = (f(a), f(b));
    if fa == 0.0 {
        return Ok(a);
    }
    if fb == 0.0 {
        return Ok(b);
    }
    if fa.is_nan() || fb.is_nan() || (fa > 0.0) == (fb > 0.0) {
        return Err(RootError::NoBracket { a, b });
    }
    if fa.abs() < fb.abs() {
        (a, b, fa, fb) = (b, a, fb, fa);
    }
    let (mut c, mut fc) = (a, fa);
    let mut last_step = b - a;
    let mut bisected = true;
    for _ in 0..MAX_STEPS {
        let small = tolerance * b.abs() + f64::MIN_POSITIVE;
        if fb == 0.0 || (b - a).abs() <= small {
            return Ok(b);
        }
        let mut s = if fa != fc && fb != fc {
            a * fb * fc / ((fa - fb) * (fa - fc))
                + b * fa * fc / ((fb - fa) * (fb - fc))
                + c * fa * fb / ((fc - fa) * (fc - fb))
        } else {
            b - fb * (b - a) / (fb - fa)
        };
        let (low, high) = if a < b { ((3.0 * a + b) / 4.0, b) } else { (b, (3.0 * a + b) / 4.0) };
        let previous = if bisected { (b - c).abs() } else { last_step.abs() };
        if !(s > low && s < high) || (s - b).abs() >= previous / 2.0 || previous < small {
            s = 0.5 * (a + b);
            bisected = true;
        } else {
            bisected = false;
        }
        let fs = f(s);
        last_step = b - c;
        (c, fc) = (b, fb);
        if (fa > 0.0) == (fs > 0.0) {
            (a, fa) = (s, fs);
        } else {
            (b, fb) = (s, fs);
        }
        if fa.abs() < fb.abs() {
            (a, b, fa, fb) = (b, a, fb, fa);
        }
    }
    Ok(0.5 * (a + b))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn finds_and_refuses() {
        let r = root(&|x| x * x - 2.0, 0.0, 2.0, 1e-15).unwrap();
        assert!((r - 2.0_f64.sqrt()).abs() < 1e-14);
        let steep = root(&|x| (x - 1e-9).powi(3), 0.0, 1e6, 1e-12).unwrap();
        assert!((steep - 1e-9).abs() < 1e-12, "{steep}");
        assert!(matches!(root(&|x| x * x + 1.0, -1.0, 1.0, 1e-9), Err(RootError::NoBracket { .. })));
    }
}
