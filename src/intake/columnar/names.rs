//! The few names that the rows of a column have, each looked up once and not once a row.

/// Names by their places in a list, which holds each at least once and no other.
pub(super) struct Names<'a> {
    places: Vec<usize>,
    list: Vec<&'a str>,
}

impl<'a> Names<'a> {
    /// The place of a row's name; beyond the list if there is no such row.
    #[inline(always)]
    pub(super) fn place(&self, row: usize) -> usize {
        self.places.get(row).copied().unwrap_or(usize::MAX)
    }

    /// The name at a place of the list.
    pub(super) fn name(&self, place: usize) -> Option<&'a str> {
        self.list.get(place).copied()
    }

    pub(super) fn list(&self) -> &[&'a str] {
        &self.list
    }
}

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

/// Lists the names of rows as they are met. One that is driven out of its slot by another is listed again.
#[inline(always)]
pub(super) fn met<'a>(rows: usize, name: impl Fn(usize) -> &'a str) -> Names<'a> {
    let mut slots = [(Outline::default(), usize::MAX); SLOTS];
    let mut list: Vec<&str> = Vec::new();
    let places = (0..rows).map(|row| {
        let name = name(row);
        let outline = Outline::of(name);
        let (known, place) = &mut slots[outline.slot()];
        let same = *known == outline
            && list.get(*place).is_some_and(|listed| outline.length <= 16 || *listed == name);
        if !same {
            (*known, *place) = (outline, list.len());
            list.push(name);
        }
        *place
    });
    let places = places.collect();
    Names { places, list }
}

/// The same of names that come as places in a longer list, of which only those met are looked at.
pub(super) fn met_coded<'a>(codes: &[usize], name: impl Fn(usize) -> &'a str) -> Names<'a> {
    let mut slots = [(usize::MAX, usize::MAX); SLOTS];
    let mut list: Vec<&str> = Vec::new();
    let places = codes.iter().map(|&code| {
        let (known, place) = &mut slots[code % SLOTS];
        if *known != code {
            (*known, *place) = (code, list.len());
            list.push(name(code));
        }
        *place
    });
    let places = places.collect();
    Names { places, list }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_row_has_its_own_name() {
        // Alike at both ends, one in the other, empty, and more than there are slots.
        let mut rows: Vec<String> = (0..400).map(|i| format!("branch.of.the.river-{i:03}.lookup")).collect();
        rows.extend(
            ["", "a", "ab", "ba", "abc", "abcd", "abcde", "aaaa", "aaaaa", "a\0", "\0a"].map(Into::into),
        );
        rows.extend((0..40).map(|length| "x".repeat(length)));
        let order: Vec<&str> = (0..5_000).map(|i| rows[i * i % rows.len()].as_str()).collect();
        let names = met(order.len(), |row| order[row]);
        for (row, name) in order.iter().enumerate() {
            assert_eq!(names.name(names.place(row)), Some(*name));
        }
        let few = met(1_000, |row| ["done", "gave_up"][row % 2]);
        assert_eq!(few.list(), ["done", "gave_up"]);
        assert_eq!(few.name(few.place(1_000)), None);
        // By places in a longer list, more of them than there are slots.
        let codes: Vec<usize> = (0..5_000).map(|i| i * i % 401).collect();
        let coded = met_coded(&codes, |code| rows[code].as_str());
        assert!((0..5_000).all(|row| coded.name(coded.place(row)) == Some(rows[codes[row]].as_str())));
        assert_eq!(met_coded(&[7, 7, 9], |code| rows[code].as_str()).list(), [&rows[7], &rows[9]]);
    }
}
