//! The few names that the rows of a column have, each looked up once and not once a row.

use arrow_array::OffsetSizeTrait;

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
    let mut known = Known::new(find(b""));
    names.map(|name| known.get(name, &mut find)).collect()
}

/// The same of names that lie one behind the other: where the first begins, and where each ends.
#[inline(always)]
pub(super) fn of_each_packed<'a, O: OffsetSizeTrait, T: Copy>(
    offsets: &[O],
    bytes: &'a [u8],
    mut find: impl FnMut(&'a [u8]) -> T,
) -> Vec<T> {
    let Some((&from, ends)) = offsets.split_first() else { return Vec::new() };
    let mut last = Last { from, length: O::zero(), meaning: find(b"") };
    let mut known = Known::new(last.meaning);
    let mut found = vec![last.meaning; ends.len()];
    let ((groups, rest), (of_groups, of_rest)) = (ends.as_chunks::<GROUP>(), found.as_chunks_mut::<GROUP>());
    for (ends, meanings) in groups.iter().zip(of_groups) {
        // Endings come in runs.
        if last.again(ends, bytes) {
            *meanings = [last.meaning; GROUP];
        } else {
            for (meaning, &end) in meanings.iter_mut().zip(ends) {
                *meaning = last.next(end, bytes, &mut known, &mut find);
            }
        }
    }
    for (meaning, &end) in of_rest.iter_mut().zip(rest) {
        *meaning = last.next(end, bytes, &mut known, &mut find);
    }
    found
}

/// The text of a place that is none, which the decoder lets nobody have. A call, so that the place of each text does not
/// hang on whether the last was one.
#[cold]
#[inline(never)]
fn nowhere() -> &'static [u8] {
    b""
}

/// Names looked at together.
const GROUP: usize = 8;

/// The name before.
struct Last<O, T> {
    /// Where the next begins.
    from: O,
    length: O,
    meaning: T,
}

impl<O: OffsetSizeTrait, T: Copy> Last<O, T> {
    /// Goes on to the next, which ends there.
    #[inline(always)]
    fn next<'a>(
        &mut self,
        end: O,
        bytes: &'a [u8],
        known: &mut Known<'a, T>,
        find: &mut impl FnMut(&'a [u8]) -> T,
    ) -> T {
        let name = bytes.get(self.from.as_usize()..end.as_usize()).unwrap_or_else(|| nowhere());
        *self = Last { from: end, length: end - self.from, meaning: known.get(name, find) };
        self.meaning
    }

    /// Whether it comes again and again, and then passes over that. Each is then as long, and their bytes are those that lie
    /// one length before.
    #[inline(always)]
    fn again(&mut self, ends: &[O; GROUP], bytes: &[u8]) -> bool {
        let &Last { from, length, .. } = &*self;
        let upto = ends[GROUP - 1];
        if (upto - from).as_usize() != length.as_usize() * GROUP {
            return false;
        }
        let mut end = from;
        let even = ends.iter().fold(true, |even, &this| {
            end += length;
            even & (this == end)
        });
        let bytes = |from: O, upto: O| bytes.get(from.as_usize()..upto.as_usize());
        let again = even && bytes(from - length, upto - length) == bytes(from, upto);
        if again {
            self.from = upto;
        }
        again
    }
}

/// Names, and what they stand for. Most are known by their outlines alone, so these lie close together.
struct Known<'a, T> {
    slots: [(Outline, T); SLOTS],
    names: [&'a [u8]; SLOTS],
}

impl<'a, T: Copy> Known<'a, T> {
    /// With what an empty name stands for.
    fn new(nothing: T) -> Known<'a, T> {
        Known { slots: [(Outline::default(), nothing); SLOTS], names: [b""; SLOTS] }
    }

    #[inline(always)]
    fn get(&mut self, name: &'a [u8], find: &mut impl FnMut(&'a [u8]) -> T) -> T {
        let outline = Outline::of(name);
        let slot = outline.slot();
        let (known, meaning) = self.slots[slot];
        if known != outline || (outline.length > 16 && self.names[slot] != name) {
            return self.again(name, find);
        }
        meaning
    }

    #[cold]
    #[inline(never)]
    fn again(&mut self, name: &'a [u8], find: &mut impl FnMut(&'a [u8]) -> T) -> T {
        let outline = Outline::of(name);
        let meaning = find(name);
        self.slots[outline.slot()] = (outline, meaning);
        self.names[outline.slot()] = name;
        meaning
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
    use proptest::collection::vec;
    use proptest::prelude::*;
    use proptest::sample::select;

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
        assert_eq!(packed(&order, |name| name), order);
        assert_eq!(of_each_place(&places, |place| names[place].as_bytes(), |name| name), order);
        // Each of a few is looked up once.
        let (mut looked_up, mut packed_up) = (Vec::new(), Vec::new());
        let few: Vec<_> = (0..1_000).map(|row| [b"done".as_slice(), b"gave_up"][row % 2]).collect();
        of_each(few.iter().copied(), |name| looked_up.push(name));
        packed(&few, |name| packed_up.push(name.to_vec()));
        assert_eq!(looked_up, [b"".as_slice(), b"done", b"gave_up"]);
        assert_eq!(packed_up, looked_up);
    }

    /// With something before and behind, as in a part of a column.
    fn packed<T: Copy>(names: &[&[u8]], find: impl FnMut(&'static [u8]) -> T) -> Vec<T> {
        let bytes = [b"before", names.concat().as_slice(), b"behind"].concat();
        let mut end = 6;
        let ends = names.iter().map(|name| {
            end += name.len() as i32;
            end
        });
        let offsets: Vec<i32> = std::iter::once(6).chain(ends).collect();
        of_each_packed(&offsets, bytes.leak(), find)
    }

    proptest! {
        /// Runs, names that go on as the last ended, and empty ones.
        #[test]
        fn runs_are_what_they_stand_for(runs in vec((select(vec!["", "a", "aa", "aaa", "ab", "aba", "done", "gave_up"]), 1..30usize), 0..30)) {
            let names: Vec<&[u8]> =
                runs.iter().flat_map(|&(name, times)| vec![name.as_bytes(); times]).collect();
            prop_assert_eq!(packed(&names, |name| name), names);
        }
    }
}
