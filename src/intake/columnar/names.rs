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
    fn of(name: &str) -> Outline {
        let (bytes, length) = (name.as_bytes(), name.len());
        let (front, back) = match (bytes.first_chunk::<8>(), bytes.last_chunk::<8>()) {
            (Some(front), Some(back)) => (u64::from_le_bytes(*front), u64::from_le_bytes(*back)),
            _ => match (bytes.first_chunk::<4>(), bytes.last_chunk::<4>()) {
                (Some(front), Some(back)) => {
                    (u32::from_le_bytes(*front).into(), u32::from_le_bytes(*back).into())
                }
                _ => (bytes.iter().fold(0, |sum, &byte| sum << 8 | u64::from(byte)), 0),
            },
        };
        Outline { front, back, length }
    }

    #[inline(always)]
    fn slot(self) -> usize {
        // Fibonacci hashing (D. E. Knuth, The Art of Computer Programming 3, section 6.4).
        let mixed =
            (self.front ^ self.back.rotate_left(29) ^ self.length as u64).wrapping_mul(0x9e37_79b9_7f4a_7c15);
        (mixed >> 57) as usize % SLOTS
    }
}

/// What the name of each row stands for. It is found out again for a name that another drove out of its slot.
#[inline(always)]
pub(super) fn of_each<'a, T: Copy>(
    rows: usize,
    name: impl Fn(usize) -> &'a str,
    mut find: impl FnMut(&'a str) -> T,
) -> Vec<T> {
    let mut slots = [(Outline::default(), "", find("")); SLOTS];
    let found = (0..rows).map(|row| {
        let name = name(row);
        let outline = Outline::of(name);
        let slot = &mut slots[outline.slot()];
        if slot.0 != outline || (outline.length > 16 && slot.1 != name) {
            *slot = (outline, name, find(name));
        }
        slot.2
    });
    found.collect()
}

/// The same of names that come as places in a list, of which only those met are looked at.
pub(super) fn of_each_place<'a, T: Copy>(
    places: &[usize],
    name: impl Fn(usize) -> &'a str,
    mut find: impl FnMut(&'a str) -> T,
) -> Vec<T> {
    let mut slots = [(usize::MAX, find("")); SLOTS];
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
        let order: Vec<&str> = places.iter().map(|&place| names[place].as_str()).collect();
        assert_eq!(of_each(order.len(), |row| order[row], |name| name), order);
        assert_eq!(of_each_place(&places, |place| &names[place], |name| name), order);
        // Each of a few is looked up once.
        let mut looked_up = Vec::new();
        of_each(1_000, |row| ["done", "gave_up"][row % 2], |name| looked_up.push(name));
        assert_eq!(looked_up, ["", "done", "gave_up"]);
    }
}
