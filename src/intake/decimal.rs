//! Decimal figures to the nearest double.

/// The powers of ten that a double holds exactly.
const POWERS: [f64; 23] = [
    1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18,
    1e19, 1e20, 1e21, 1e22,
];

/// A number in JSON's grammar (RFC 8259, section 6) at the head of `bytes`, correctly rounded, and its length in
/// bytes. `None` if there is none, or if it is too large for a double.
#[inline(always)]
pub(super) fn json_number(bytes: &[u8]) -> Option<(f64, usize)> {
    let negative = bytes.first() == Some(&b'-');
    let mut at = usize::from(negative);
    let mut mantissa = 0u64;
    let whole_from = at;
    (mantissa, at) = figures(bytes, mantissa, at);
    let mut digits = at - whole_from;
    if digits == 0 || (digits > 1 && bytes[whole_from] == b'0') {
        return None;
    }
    let mut places = 0;
    if bytes.get(at) == Some(&b'.') {
        at += 1;
        let from = at;
        (mantissa, at) = figures(bytes, mantissa, at);
        places = at - from;
        if places == 0 {
            return None;
        }
        digits += places;
    }
    let mut exact = digits <= 19 && mantissa <= 1 << 53 && places < POWERS.len();
    if let Some(b'e' | b'E') = bytes.get(at) {
        at += 1;
        at += usize::from(matches!(bytes.get(at), Some(b'+' | b'-')));
        let from = at;
        while let Some(b'0'..=b'9') = bytes.get(at) {
            at += 1;
        }
        if at == from {
            return None;
        }
        exact = false;
    }
    if exact {
        // Both are exact, so the quotient is rounded once (Clinger 1990).
        let size = mantissa as f64 / POWERS[places];
        return Some((if negative { -size } else { size }, at));
    }
    by_the_book(&bytes[..at]).map(|number| (number, at))
}

/// Appends the figures of `bytes` from `at` on to a whole number, which wraps when there are too many, and gives the place
/// after them. Eight at a time: half of the time of a parse was spent going from one figure to the next.
#[inline(always)]
fn figures(bytes: &[u8], mut number: u64, mut at: usize) -> (u64, usize) {
    const ONES: u64 = u64::MAX / 255;
    const TENS: [u64; 9] = [1, 10, 100, 1_000, 10_000, 100_000, 1_000_000, 10_000_000, 100_000_000];
    while let Some(word) = bytes.get(at..).and_then(<[u8]>::first_chunk) {
        let word = u64::from_le_bytes(*word) ^ (ONES * u64::from(b'0'));
        // Figures are 0 to 9 now; the first byte that is not has its highest bit set here.
        let others = (word.wrapping_add(ONES * (0x80 - 10)) | word) & (ONES * 0x80);
        let digits = others.trailing_zeros() / 8;
        if digits == 0 {
            return (number, at);
        }
        number = number.wrapping_mul(TENS[digits as usize]).wrapping_add(eight(word << (64 - 8 * digits)));
        at += digits as usize;
        if digits < 8 {
            return (number, at);
        }
    }
    while let Some(digit @ b'0'..=b'9') = bytes.get(at) {
        number = number.wrapping_mul(10).wrapping_add(u64::from(digit - b'0'));
        at += 1;
    }
    (number, at)
}

/// The number whose eight figures are the bytes of a word, the lowest first: pairs, then fours, then all (Lemire 2021,
/// *Software: Practice and Experience* 51:1700).
#[inline(always)]
fn eight(word: u64) -> u64 {
    const EVERY_FOURTH: u64 = 0x0000_00FF_0000_00FF;
    let pairs = word.wrapping_mul(10).wrapping_add(word >> 8);
    let high = (pairs & EVERY_FOURTH).wrapping_mul(100 + (1_000_000 << 32));
    let low = (pairs >> 16 & EVERY_FOURTH).wrapping_mul(1 + (10_000 << 32));
    high.wrapping_add(low) >> 32
}

#[cold]
fn by_the_book(figures: &[u8]) -> Option<f64> {
    std::str::from_utf8(figures).ok()?.parse().ok().filter(|number: &f64| number.is_finite())
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn reads_the_grammar_and_nothing_else() {
        for (text, value, length) in [
            ("0", 0.0, 1),
            ("-0.5,", -0.5, 4),
            ("1764547200.25}", 1764547200.25, 13),
            ("1e3", 1000.0, 3),
            ("9007199254740993", 9007199254740992.0, 16),
            ("0.1234567890123456789012345", 0.123_456_789_012_345_68, 27),
            ("123456789012345678901234567890", 123456789012345678901234567890.0, 30),
        ] {
            assert_eq!(json_number(text.as_bytes()), Some((value, length)), "{text}");
        }
        for bad in ["", "-", ".5", "1.", "01", "1e", "1e+", "1e999", "NaN", "+1"] {
            assert_eq!(json_number(bad.as_bytes()), None, "{bad}");
        }
    }

    proptest! {
        // The standard library's parser is correctly rounded; ours must give the same bits.
        #[test]
        fn agrees_with_the_standard_library(digits in "(0|[1-9][0-9]{0,20})(\\.[0-9]{1,25})?(e-?[0-9]{1,2})?") {
            let (ours, length) = json_number(digits.as_bytes()).unwrap();
            prop_assert_eq!(length, digits.len());
            prop_assert_eq!(ours.to_bits(), digits.parse::<f64>().unwrap().to_bits());
        }
    }
}
