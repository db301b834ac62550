//! The few names that the rows of a column have, each looked up once and not once a row.

/// Slots for names that may come again, a power of two.
const SLOTS: usize = 128;

/// A name, at its ends and by its length: up to 16 bytes that is all of it.
#[derive(Clone, Copy, Default, PartialEq)]
struct Outline {
    front: u64,
    back: u64,
    length: usize,
}

impl Outline {
    #[inline(always)]
    fn of(name: &[u8]) -> Outline {
        let (front, back) = match (name.first_chunk::<8>(), name.last_chunk::<8>()) {
            (Some(front), Some(back)) => (u64::from_le_bytes(*front), u64::from_le_bytes(*back)),
            _ => match (name.first_chunk::<4>(), name.last_chunk::<4>()) {
                (Some(front), Some(back)) => {
                    (u32::from_le_bytes(*front).into(), u32::from_le_bytes(*back).into())
                }
                _ => (name.iter().fold(0, |sum, &byte| sum << 8 | u64::from(byte)), 0),
            },
        };
        Outline { front, back, length: name.len() }
    }

    #[inline(always)]
    fn slot(self) -> usize {
        // Fibonacci hashing (D. E. Knuth, The Art of Computer Programming 3, section 6.4).
        let mixed = (self.front ^ self.back.rotate_left(29)).wrapping_mul(0x9e37_79b9_7f4a_7c15);
        (mixed >> 57) as usize % SLOTS
    }
}

/// What the name of each row stands for. It is found out again for a name that another drove out of its slot.
#[inline(always)]
pub(super) fn of_each<'a, T: Copy>(
    names: impl Iterator<Item = &'a [u8]>,
    mut find: impl FnMut(&'a [u8]) -> T,
) -> Vec<T> {
    let mut known = Known { slots: [(Outline::default(), find(b"")); SLOTS], names: [b""; SLOTS] };
    let mut last = known.slots[0];
    let found = names.map(|name| {
        let outline = Outline::of(name);
        // Endings come in runs.
        if last.0 == outline && outline.length <= 16 {
            return last.1;
        }
        let slot = outline.slot();
        last = known.slots[slot];
        if last.0 != outline || (outline.length > 16 && known.names[slot] != name) {
            last = known.again(name, &mut find);
        }
        last.1
    });
    found.collect()
}

/// Names, and what they stand for. Most are known by their outlines alone, so these lie close together.
struct Known<'a, T> {
    slots: [(Outline, T); SLOTS],
    names: [&'a [u8]; SLOTS],
}

impl<'a, T: Copy> Known<'a, T> {
    #[cold]
    #[inline(never)]
    fn again(&mut self, name: &'a [u8], find: &mut impl FnMut(&'a [u8]) -> T) -> (Outline, T) {
        let outline = Outline::of(name);
        let slot = (outline, find(name));
        self.slots[outline.slot()] = slot;
        self.names[outline.slot()] = name;
        slot
    }
}

/// The same of names that come as places in a list, of which only those met are looked at.
pub(super) fn of_each_place<'a, T: Copy>(
    places: &[usize],
    name: impl Fn(usize) -> &'a [u8],
    mut find: impl FnMut(&'a [u8]) -> T,
) -> Vec<T> {
    let mut slots = [(usize::MAX, find(b"")); SLOTS];
    let found = places.iter().map(|&place| {
        let slot = &mut slots[place % SLOTS];
        if slot.0 != place {
            *slot = (place, find(name(place)));
        }
        slot.1
    });
    found.collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_row_has_its_own_name() {
        // Alike at both ends, one in the other, empty, and more than there are slots.
        let mut names: Vec<String> = (0..400).map(|i| format!("branch.of.the.river-{i:03}.lookup")).collect();
        names.extend(
            ["", "a", "ab", "ba", "abc", "abcd", "abcde", "aaaa", "aaaaa", "a\0", "\0a"].map(Into::into),
        );
        names.extend((0..40).map(|length| "x".repeat(length)));
        let places: Vec<usize> = (0..5_000).map(|i| i * i % names.len()).collect();
        let order: Vec<&[u8]> = places.iter().map(|&place| names[place].as_bytes()).collect();
        assert_eq!(of_each(order.iter().copied(), |name| name), order);
        assert_eq!(of_each_place(&places, |place| names[place].as_bytes(), |name| name), order);
        // Each of a few is looked up once.
        let mut looked_up = Vec::new();
        of_each((0..1_000).map(|row| [b"done".as_slice(), b"gave_up"][row % 2]), |name| looked_up.push(name));
        assert_eq!(looked_up, [b"".as_slice(), b"done", b"gave_up"]);
    }
}
