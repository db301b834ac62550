//! A plan for when nothing is known of the law. METHODS.md section 6.

/// Term `i` (from 1) of the universal sequence 1, 1, 2, 1, 1, 2, 4, 1, ...: the expected time until done by these
/// give-up times is within a logarithmic factor of the best, whatever the law (Luby, Sinclair & Zuckerman 1993,
/// *Optimal speedup of Las Vegas algorithms*, Information Processing Letters 47:173). 0 counts as 1.
pub fn luby(i: u64) -> u64 {
    let mut i = i.max(1);
    loop {
        // The largest block 2^k - 1 that fits into what is left.
        let block = if i == u64::MAX { 64 } else { (i + 1).ilog2() };
        let length = if block == 64 { u64::MAX } else { (1 << block) - 1 };
        if i == length {
            return 1 << (block - 1);
        }
        i -= length;
    }
}

/// The first `attempts` give-up times of the universal sequence times `base` (s), none above `ceiling` (s): a
/// stop-gap while evidence is gathered. `base` is whatever is known of a quick completion: a floor, a median.
pub fn universal_schedule(base: f64, ceiling: f64, attempts: usize) -> Vec<f64> {
    (1..=attempts as u64).map(|i| (base * luby(i) as f64).min(ceiling)).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_sequence_of_the_paper() {
        let first: Vec<u64> = (1..=31).map(luby).collect();
        let eight = [1, 1, 2, 1, 1, 2, 4];
        let mut truth = [eight.as_slice(), &eight, &[8]].concat();
        truth = [truth.as_slice(), &truth, &[16]].concat();
        assert_eq!(first, truth);
        // The recursive definition of the paper: t_i = 2^(k-1) if i = 2^k - 1, else t_(i - 2^(k-1) + 1).
        fn by_definition(i: u64) -> u64 {
            let k = 64 - i.leading_zeros();
            if i == (1 << k) - 1 { 1 << (k - 1) } else { by_definition(i - (1 << (k - 1)) + 1) }
        }
        assert!((1..5000).all(|i| luby(i) == by_definition(i)));
        assert_eq!((luby(0), luby(u64::MAX)), (1, 1 << 63));
        assert_eq!(universal_schedule(0.2, 0.5, 7), [0.2, 0.2, 0.4, 0.2, 0.2, 0.4, 0.5]);
    }
}
