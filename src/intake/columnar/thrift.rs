//! Whether what a Parquet file writes in Thrift's compact protocol (github.com/apache/thrift,
//! doc/specs/thrift-compact-protocol.md), its footer and the heads of its pages, is decoded in a time that its length bounds.
//!
//! The decoder passes over what it does not know, and for it truth values in a list take no room: six bytes that speak of two
//! thousand million of them cost it seconds, a few kilobytes hours. Metadata of Parquet have no such list. What the decoder
//! knows it takes for what the standard says, whatever kind is written beside it; so what is known here must be of its kind
//! (github.com/apache/parquet-format, src/main/thrift/parquet.thrift), or the two would not read the same message.

/// How deep values may lie within each other; the decoder passes over nothing deeper.
const DEEPEST: u32 = 64;

/// The fields that the decoder reads of a struct, by number. It passes over others.
pub(super) type Layout = &'static [(i16, Shape)];

/// What a field holds.
#[derive(Clone, Copy)]
pub(super) enum Shape {
    Truth,
    Byte,
    I16,
    I32,
    I64,
    Double,
    Binary,
    List(&'static Shape),
    Struct(Layout),
}

use Shape::{Binary, Byte, Double, I16, I32, I64, List, Struct, Truth};

/// `FileMetaData`.
pub(super) const FOOTER: Layout = &[
    (1, I32),
    (2, List(&Struct(SCHEMA_ELEMENT))),
    (3, I64),
    (4, List(&Struct(ROW_GROUP))),
    (5, List(&Struct(KEY_VALUE))),
    (6, Binary),
    (7, List(&Struct(&[(1, EMPTY), (2, EMPTY), (3, EMPTY)]))),
];

/// `PageHeader`.
pub(super) const PAGE: Layout = &[
    (1, I32),
    (2, I32),
    (3, I32),
    (4, I32),
    (5, Struct(&[(1, I32), (2, I32), (3, I32), (4, I32), (5, Struct(STATISTICS))])),
    (6, EMPTY),
    (7, Struct(&[(1, I32), (2, I32), (3, Truth)])),
    (8, Struct(DATA_PAGE_V2)),
];

const EMPTY: Shape = Struct(&[]);

const SCHEMA_ELEMENT: Layout = &[
    (1, I32),
    (2, I32),
    (3, I32),
    (4, Binary),
    (5, I32),
    (6, I32),
    (7, I32),
    (8, I32),
    (9, I32),
    (10, Struct(LOGICAL_TYPE)),
];

const LOGICAL_TYPE: Layout = &[
    (1, EMPTY),
    (2, EMPTY),
    (3, EMPTY),
    (4, EMPTY),
    (5, Struct(&[(1, I32), (2, I32)])),
    (6, EMPTY),
    (7, Struct(TIME)),
    (8, Struct(TIME)),
    (10, Struct(&[(1, Byte), (2, Truth)])),
    (11, EMPTY),
    (12, EMPTY),
    (13, EMPTY),
    (14, EMPTY),
    (15, EMPTY),
    (16, Struct(&[(1, Byte)])),
    (17, Struct(&[(1, Binary)])),
    (18, Struct(&[(1, Binary), (2, I32)])),
    (19, EMPTY),
];

/// Whether it is in UTC, and the unit.
const TIME: Layout = &[(1, Truth), (2, Struct(&[(1, EMPTY), (2, EMPTY), (3, EMPTY)]))];

const ROW_GROUP: Layout = &[
    (1, List(&Struct(COLUMN_CHUNK))),
    (2, I64),
    (3, I64),
    (4, List(&Struct(&[(1, I32), (2, Truth), (3, Truth)]))),
    (5, I64),
    (6, I64),
    (7, I16),
];

const COLUMN_CHUNK: Layout =
    &[(1, Binary), (2, I64), (3, Struct(COLUMN)), (4, I64), (5, I32), (6, I64), (7, I32)];

const COLUMN: Layout = &[
    (1, I32),
    (2, List(&I32)),
    (3, List(&Binary)),
    (4, I32),
    (5, I64),
    (6, I64),
    (7, I64),
    (8, List(&Struct(KEY_VALUE))),
    (9, I64),
    (10, I64),
    (11, I64),
    (12, Struct(STATISTICS)),
    (13, List(&Struct(&[(1, I32), (2, I32), (3, I32)]))),
    (14, I64),
    (15, I32),
    (16, Struct(&[(1, I64), (2, List(&I64)), (3, List(&I64))])),
    (17, Struct(&[(1, Struct(BOX)), (2, List(&I32))])),
];

const KEY_VALUE: Layout = &[(1, Binary), (2, Binary)];

const STATISTICS: Layout = &[
    (1, Binary),
    (2, Binary),
    (3, I64),
    (4, I64),
    (5, Binary),
    (6, Binary),
    (7, Truth),
    (8, Truth),
    (9, I64),
];

const BOX: Layout =
    &[(1, Double), (2, Double), (3, Double), (4, Double), (5, Double), (6, Double), (7, Double), (8, Double)];

const DATA_PAGE_V2: Layout =
    &[(1, I32), (2, I32), (3, I32), (4, I32), (5, I32), (6, I32), (7, Truth), (8, Struct(STATISTICS))];

impl Shape {
    /// Whether it is written as this kind.
    fn is(self, kind: u8) -> bool {
        match self {
            Truth => matches!(kind, 1 | 2),
            Byte => kind == 3,
            I16 => kind == 4,
            I32 => kind == 5,
            I64 => kind == 6,
            Double => kind == 7,
            Binary => kind == 8,
            List(_) => kind == 9,
            Struct(_) => kind == 12,
        }
    }
}

/// Whether it begins with a whole message of this layout that can be what it says.
pub(super) fn is_message(bytes: &[u8], layout: Layout) -> bool {
    Walk(bytes).fields(layout, DEEPEST).is_some()
}

/// What is left of a message. `None`: it is not what it says.
struct Walk<'a>(&'a [u8]);

impl Walk<'_> {
    fn skip(&mut self, bytes: u64) -> Option<()> {
        self.0 = self.0.get(usize::try_from(bytes).ok()?..)?;
        Some(())
    }

    fn byte(&mut self) -> Option<u8> {
        let (first, rest) = self.0.split_first()?;
        self.0 = rest;
        Some(*first)
    }

    fn varint(&mut self) -> Option<u64> {
        let mut value = 0;
        for shift in (0..64).step_by(7) {
            let byte = self.byte()?;
            value |= u64::from(byte & 0x7f) << shift;
            if byte & 0x80 == 0 {
                return Some(value);
            }
        }
        None
    }

    /// A struct up to its end.
    fn fields(&mut self, layout: Layout, depth: u32) -> Option<()> {
        let depth = depth.checked_sub(1)?;
        let mut last = 0i16;
        loop {
            let head = self.byte()?;
            let (step, kind) = (head >> 4, head & 0x0f);
            if kind == 0 {
                return Some(());
            }
            last = match step {
                // Zigzag: the sign is the last bit.
                0 => {
                    self.varint().and_then(|id| i16::try_from((id >> 1) as i64 ^ -((id & 1) as i64)).ok())?
                }
                _ => last.checked_add(i16::from(step))?,
            };
            match layout.iter().find(|(id, _)| *id == last) {
                Some((_, shape)) => self.known(*shape, kind, depth)?,
                None => self.value(kind, depth)?,
            }
        }
    }

    fn known(&mut self, shape: Shape, kind: u8, depth: u32) -> Option<()> {
        match shape {
            _ if !shape.is(kind) => None,
            Struct(layout) => self.fields(layout, depth),
            List(shape) => {
                let (size, kind) = self.list()?;
                (0..size).try_for_each(|_| self.known(*shape, kind, depth))
            }
            _ => self.value(kind, depth),
        }
    }

    /// What the decoder passes over.
    fn value(&mut self, kind: u8, depth: u32) -> Option<()> {
        match kind {
            // A truth value is in the head of its field.
            1 | 2 => Some(()),
            3 => self.skip(1),
            4..=6 => self.varint().map(|_| ()),
            7 => self.skip(8),
            8 => {
                let length = self.varint()?;
                self.skip(length)
            }
            9 | 10 => {
                let (size, kind) = self.list()?;
                self.elements(size, &[kind], depth)
            }
            11 => match self.varint()? {
                0 => Some(()),
                size => {
                    let kinds = self.byte()?;
                    self.elements(size, &[kinds >> 4, kinds & 0x0f], depth)
                }
            },
            12 => self.fields(&[], depth),
            13 => self.skip(16),
            _ => None,
        }
    }

    /// How many elements a list has, and their kind; some writers give an empty one none.
    fn list(&mut self) -> Option<(u64, u8)> {
        let head = self.byte()?;
        let size = if head >> 4 == 15 { self.varint()? } else { u64::from(head >> 4) };
        Some((size, head & 0x0f))
    }

    /// So many times a value of each of these kinds, of which each takes a byte at least.
    fn elements(&mut self, size: u64, kinds: &[u8], depth: u32) -> Option<()> {
        let depth = depth.checked_sub(1)?;
        if size > 0 && kinds.iter().any(|kind| matches!(kind, 1 | 2)) {
            return None;
        }
        (0..size).try_for_each(|_| kinds.iter().try_for_each(|&kind| self.value(kind, depth)))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A number, a text, a list of two numbers, an empty one, a map, a struct in a struct, a truth value; none of them known.
    const SOUND: [&[u8]; 2] = [
        &[0x15, 0x02, 0x18, 0x02, b'h', b'i', 0x19, 0x25, 0x02, 0x04, 0x19, 0x00],
        &[0x1b, 0x01, 0x55, 0x02, 0x04, 0x1c, 0x1c, 0x00, 0x00, 0x11, 0x00],
    ];

    #[test]
    fn what_is_sound_and_what_is_not() {
        assert!(SOUND.iter().all(|part| is_message(&[part, &[0][..]].concat(), &[])));
        assert!(is_message(&SOUND.concat(), &[]));
        let unsound: [&[u8]; 8] = [
            b"",
            &[0x15],
            // Two thousand million truth values, three of them, and a map of them.
            &[0x19, 0xf1, 0xff, 0xff, 0xff, 0xff, 0x07, 0x00],
            &[0x19, 0x32, 0x01, 0x01, 0x01, 0x00],
            &[0x1b, 0xff, 0xff, 0xff, 0xff, 0x07, 0x15, 0x00],
            // More numbers than there are bytes, a text beyond the end, and no kind at all.
            &[0x19, 0xf5, 0xff, 0xff, 0xff, 0xff, 0x07, 0x00],
            &[0x18, 0x7f, 0x00],
            &[0x1f, 0x00],
        ];
        assert!(unsound.iter().all(|message| !is_message(message, &[])));
        assert!(!is_message(&[0x1c; 100_000], &[]), "as deep as it is long");
    }

    /// What the decoder reads as a number of one byte must not be passed over as eight, which could hide anything.
    #[test]
    fn what_is_known_is_of_its_kind() {
        // Version 2, a schema of one element called `s`, no rows.
        let footer = [0x15, 0x04, 0x19, 0x1c, 0x48, 0x01, b's', 0x00, 0x16, 0x00];
        assert!(is_message(&[&footer[..], &[0x00]].concat(), FOOTER));
        // A field that it does not know comes after.
        assert!(is_message(&[&footer[..], &[0xc7], &[0; 8], &[0x00]].concat(), FOOTER));
        let version = [&[0x17][..], &[0; 8], &[0x00]].concat();
        assert!(is_message(&version, &[]) && !is_message(&version, FOOTER));
        // By its own number, and a list of another kind.
        let version = [&[0x07, 0x02][..], &[0; 8], &[0x00]].concat();
        assert!(is_message(&version, &[]) && !is_message(&version, FOOTER));
        let schema = [0x29, 0x15, 0x00, 0x00];
        assert!(is_message(&schema, &[]) && !is_message(&schema, FOOTER));
        // An empty struct of a union as a truth value, of which the decoder takes a byte.
        let page = [0x61, 0x00];
        assert!(is_message(&page, &[]) && !is_message(&page, PAGE));
    }
}
