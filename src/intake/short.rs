//! Comparing short byte strings without a call: of `memcmp` it takes longer than the work.

/// Whether two byte strings are equal.
#[inline]
pub(super) fn same(one: &[u8], other: &[u8]) -> bool {
    if one.len() != other.len() {
        return false;
    }
    // The last word may overlap the one before.
    let (words, others) = (one.as_chunks::<8>().0, other.as_chunks::<8>().0);
    let alike = words.iter().zip(others).all(|(a, b)| u64::from_ne_bytes(*a) == u64::from_ne_bytes(*b));
    if let (Some(a), Some(b)) = (one.last_chunk(), other.last_chunk()) {
        return alike && u64::from_ne_bytes(*a) == u64::from_ne_bytes(*b);
    }
    let halves = |bytes: &[u8]| {
        Some((u32::from_ne_bytes(*bytes.first_chunk()?), u32::from_ne_bytes(*bytes.last_chunk()?)))
    };
    match (halves(one), halves(other)) {
        (Some(a), Some(b)) => a == b,
        _ => one.iter().zip(other).all(|(a, b)| a == b),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_byte_counts() {
        let text: Vec<u8> = (0..40).collect();
        for length in 0..=text.len() {
            let one = &text[..length];
            assert!(same(one, one.to_owned().as_slice()));
            assert!(!same(one, &text[..length.saturating_sub(1)]) || length == 0);
            for place in 0..length {
                let mut other = one.to_vec();
                other[place] ^= 1;
                assert!(!same(one, &other), "{length} {place}");
            }
        }
    }
}
