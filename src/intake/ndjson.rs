//! NDJSON: one JSON object a line.
//!
//! Nearly every line is a flat object of plain texts and numbers, laid out like one a few lines before. Such a line
//! is read by the [`Shape`] of the other in one pass. Whatever a shape does not understand goes to serde_json, whose
//! word is final. Where both read a line they agree (tested).

use std::borrow::Cow;
use std::fmt;

use serde::Deserializer as _;
use serde::de::{DeserializeSeed, Error, IgnoredAny, MapAccess, Visitor};

use super::Sink;
use super::collect::Collector;
use super::decimal;
use super::flaw::Flaw;
use super::lines::Lines;
use super::mapping::Mapping;
use super::record::{Field, Fields};
use super::short::same;

/// Reads a block of whole lines.
pub(super) fn harvest<S: Sink>(block: &[u8], collector: &mut Collector<'_, S>) {
    let mut fields = Fields::new();
    let mut shapes = Shapes::default();
    let mut lines = Lines::new(block, collector.line_limit());
    let mapping = collector.mapping();
    // Shapes know our names only.
    let ours = mapping.is_none_or(|mapping| mapping.columns().next().is_none());
    loop {
        // Most lines need not be searched for their end before they are read.
        if ours
            && let Some(text) = lines.rest()
            && let Some(length) = shapes.read(text, &mut fields)
            && let Some(number) = lines.pass(length)
        {
            if let Err(flaw) = collector.record(number, &fields) {
                collector.refuse(number, flaw);
            }
            continue;
        }
        let Some((number, line)) = lines.next() else { break };
        let outcome = line.and_then(|line| collector.record(number, &gather(&careful(line, mapping)?)?));
        if let Err(flaw) = outcome {
            collector.refuse(number, flaw);
        }
    }
    collector.count_lines(lines.number());
}

/// The shapes of recent lines. A writer has few.
#[derive(Default)]
struct Shapes {
    shapes: Vec<Shape>,
    /// The one that fitted last.
    last: usize,
}

impl Shapes {
    /// Reads the line at the head of `text` and gives its length without the newline; `None` if no shape can.
    #[inline]
    fn read<'a>(&mut self, text: &'a str, fields: &mut Fields<'a>) -> Option<usize> {
        let length = self.shapes.get(self.last).and_then(|shape| shape.read(text, fields));
        length.or_else(|| self.read_unlike(text, fields))
    }

    fn read_unlike<'a>(&mut self, text: &'a str, fields: &mut Fields<'a>) -> Option<usize> {
        const MOST: usize = 4;
        for (place, shape) in self.shapes.iter().enumerate() {
            if let Some(length) = shape.read(text, fields) {
                self.last = place;
                return Some(length);
            }
        }
        let shape = Shape::of(text)?;
        let length = shape.read(text, fields);
        if self.shapes.len() < MOST {
            self.last = self.shapes.len();
            self.shapes.push(shape);
        } else {
            self.last = (self.last + 1) % MOST;
            self.shapes[self.last] = shape;
        }
        length
    }
}

/// How a flat object of texts and numbers is laid out: everything but the values.
struct Shape {
    /// What stands around the values, quotation marks included, one after the other.
    around: Vec<u8>,
    slots: Vec<Slot>,
}

/// The place of a value.
struct Slot {
    /// Where in `around` that ends which stands before it.
    before_upto: usize,
    is_text: bool,
    /// Its field, if it has a name that means something, and how many of the name's units make a second.
    named: Option<(Field, Option<f64>)>,
}

impl Shape {
    /// The shape of the line at the head of `text`; `None` unless it is a flat object of texts and numbers.
    fn of(text: &str) -> Option<Shape> {
        let bytes = text.as_bytes();
        let mut shape = Shape { around: Vec::new(), slots: Vec::new() };
        let mut at = expect(bytes, skip_space(bytes, 0), b'{')?;
        // Up to where the text is in `around` or is a value.
        let mut known = 0;
        loop {
            at = expect(bytes, skip_space(bytes, at), b'"')?;
            let key_upto = plain_text_upto(bytes, at);
            let named = Field::with_unit(text.get(at..key_upto)?);
            let twice = shape.slots.iter().any(|slot| match (slot.named, named) {
                (Some((one, _)), Some((other, _))) => one == other,
                _ => false,
            });
            at = expect(bytes, key_upto, b'"')?;
            at = expect(bytes, skip_space(bytes, at), b':')?;
            at = skip_space(bytes, at);
            let is_text = bytes.get(at) == Some(&b'"');
            // An `id` in figures keeps its figures, which is not for us.
            if twice || (!is_text && matches!(named, Some((Field::Id, _)))) {
                return None;
            }
            let value_at = at + usize::from(is_text);
            shape.around.extend_from_slice(bytes.get(known..value_at)?);
            shape.slots.push(Slot { before_upto: shape.around.len(), is_text, named });
            if is_text {
                known = plain_text_upto(bytes, value_at);
                at = expect(bytes, known, b'"')?;
            } else {
                at += decimal::json_number(bytes.get(at..)?)?.1;
                known = at;
            }
            at = skip_space(bytes, at);
            match bytes.get(at)? {
                b',' => at += 1,
                b'}' => break,
                _ => return None,
            }
        }
        at = skip_space(bytes, at + 1);
        shape.around.extend_from_slice(bytes.get(known..at)?);
        Some(shape)
    }

    /// Reads the line at the head of `text` and gives its length without the newline; `None` if it has another
    /// shape.
    #[inline]
    fn read<'a>(&self, text: &'a str, fields: &mut Fields<'a>) -> Option<usize> {
        fields.clear();
        let bytes = text.as_bytes();
        let (mut at, mut from) = (0, 0);
        for slot in &self.slots {
            at = expect_all(bytes, at, self.around.get(from..slot.before_upto)?)?;
            from = slot.before_upto;
            if slot.is_text {
                let upto = plain_text_upto(bytes, at);
                let value = text.get(at..upto)?;
                at = upto;
                match slot.named {
                    Some((field, None)) => fields.set_text(field, value),
                    Some((field, Some(per_second))) => fields.set_text_in_unit(field, value, per_second),
                    None => {}
                }
            } else {
                let (number, length) = decimal::json_number(bytes.get(at..)?)?;
                at += length;
                match slot.named {
                    Some((field, None)) => fields.set_number(field, number),
                    Some((field, Some(per_second))) => fields.set_number_in_unit(field, number, per_second),
                    None => {}
                }
            }
        }
        at = expect_all(bytes, at, self.around.get(from..)?)?;
        matches!(bytes.get(at), None | Some(b'\n')).then_some(at)
    }
}

#[inline]
fn skip_space(bytes: &[u8], mut at: usize) -> usize {
    while let Some(b' ' | b'\t' | b'\r') = bytes.get(at) {
        at += 1;
    }
    at
}

#[inline]
fn expect(bytes: &[u8], at: usize, byte: u8) -> Option<usize> {
    (bytes.get(at) == Some(&byte)).then_some(at + 1)
}

#[inline]
fn expect_all(bytes: &[u8], at: usize, wanted: &[u8]) -> Option<usize> {
    let upto = at + wanted.len();
    same(bytes.get(at..upto)?, wanted).then_some(upto)
}

/// The first place from `at` on whose byte a JSON text cannot hold as it is: a quotation mark, a backslash, a
/// control; or the end.
#[inline]
fn plain_text_upto(bytes: &[u8], mut at: usize) -> usize {
    // Two words at once, so that names of either length take one way.
    while let Some(words) = bytes.get(at..).and_then(<[u8]>::first_chunk) {
        let words = u128::from_le_bytes(*words);
        let (low, high) = (stops(words as u64), stops((words >> 64) as u64));
        if low | high != 0 {
            let place = if low != 0 { low.trailing_zeros() } else { 64 + high.trailing_zeros() };
            return at + place as usize / 8;
        }
        at += 16;
    }
    while bytes.get(at).is_some_and(|&byte| byte != b'"' && byte != b'\\' && byte >= b' ') {
        at += 1;
    }
    at
}

/// Marks such bytes in a word by their highest bit. The lowest mark is right; one above it may be there by a carry
/// (Mycroft's test for a zero byte, 1987).
#[inline]
fn stops(word: u64) -> u64 {
    const ONES: u64 = u64::MAX / 255;
    let zeros = |word: u64| word.wrapping_sub(ONES) & !word;
    let controls = word.wrapping_sub(ONES * 0x20) & !word;
    let quotes = zeros(word ^ (ONES * u64::from(b'"')));
    let slashes = zeros(word ^ (ONES * u64::from(b'\\')));
    (controls | quotes | slashes) & (ONES * 0x80)
}

/// A known field of an object, how many of its units make a second if its name says, and its value.
pub(super) type Entry<'a> = (Field, Option<f64>, Seen<'a>);

/// Reads any line, and says what is wrong with its syntax.
pub(super) fn careful<'a>(line: &'a str, mapping: Option<&Mapping>) -> Result<Vec<Entry<'a>>, Flaw> {
    let mut scan = Scan { entries: Vec::new(), present: None, mapping };
    let mut json = serde_json::Deserializer::from_str(line);
    match json.deserialize_map(&mut scan).and_then(|()| json.end()) {
        Ok(()) => Ok(scan.entries),
        Err(error) => Err(Flaw::NotJson { field: scan.present, reason: reason(&error) }),
    }
}

/// The fields of an object, or what is wrong with one.
pub(super) fn gather<'e>(entries: &'e [Entry<'_>]) -> Result<Fields<'e>, Flaw> {
    let mut fields = Fields::new();
    for (field, per_second, seen) in entries {
        let field = *field;
        if fields.has(field) {
            return Err(Flaw::Twice { field });
        }
        match (seen, *per_second) {
            (Seen::Nothing, _) => {}
            (Seen::Number(number), None) => fields.set_number(field, *number),
            (Seen::Number(number), Some(per_second)) => fields.set_number_in_unit(field, *number, per_second),
            (Seen::Text(text), None) => fields.set_text(field, text),
            (Seen::Text(text), Some(per_second)) => fields.set_text_in_unit(field, text, per_second),
            (Seen::Other(found), _) => return Err(Flaw::Kind { field, found }),
        }
    }
    Ok(fields)
}

/// The message without "at line 1", which would contradict the line number beside it.
pub(super) fn reason(error: &serde_json::Error) -> String {
    let text = error.to_string();
    let what = text.split(" at line ").next().unwrap_or(&text);
    format!("{what} at column {}", error.column())
}

struct Scan<'a, 'm> {
    entries: Vec<Entry<'a>>,
    /// The field being read, for an error of syntax.
    present: Option<Field>,
    mapping: Option<&'m Mapping>,
}

impl<'a> Visitor<'a> for &mut Scan<'a, '_> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a JSON object")
    }

    fn visit_map<A: MapAccess<'a>>(self, mut map: A) -> Result<(), A::Error> {
        while let Some(Text(key)) = map.next_key()? {
            let found = match self.mapping {
                Some(mapping) => mapping.field(&key),
                None => Field::with_unit(&key),
            };
            match found {
                None => {
                    map.next_value::<IgnoredAny>()?;
                }
                Some((field, per_second)) => {
                    self.present = Some(field);
                    let seen = map.next_value_seed(Any { keep_figures: field == Field::Id })?;
                    self.entries.push((field, per_second, seen));
                    self.present = None;
                }
            }
        }
        Ok(())
    }
}

/// A text, borrowed where it has no escapes.
struct Text<'a>(Cow<'a, str>);

impl<'a> serde::Deserialize<'a> for Text<'a> {
    fn deserialize<D: serde::Deserializer<'a>>(deserializer: D) -> Result<Text<'a>, D::Error> {
        struct Take;
        impl<'a> Visitor<'a> for Take {
            type Value = Text<'a>;
            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("a text")
            }
            fn visit_borrowed_str<E: Error>(self, text: &'a str) -> Result<Text<'a>, E> {
                Ok(Text(Cow::Borrowed(text)))
            }
            fn visit_str<E: Error>(self, text: &str) -> Result<Text<'a>, E> {
                Ok(Text(Cow::Owned(text.into())))
            }
        }
        deserializer.deserialize_str(Take)
    }
}

/// Any JSON value.
pub(super) enum Seen<'a> {
    /// `null`: as good as absent.
    Nothing,
    Number(f64),
    Text(Cow<'a, str>),
    /// A type that no field has.
    Other(&'static str),
}

struct Any {
    keep_figures: bool,
}

impl<'a> DeserializeSeed<'a> for Any {
    type Value = Seen<'a>;

    fn deserialize<D: serde::Deserializer<'a>>(self, deserializer: D) -> Result<Seen<'a>, D::Error> {
        deserializer.deserialize_any(self)
    }
}

impl<'a> Visitor<'a> for Any {
    type Value = Seen<'a>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a JSON value")
    }

    fn visit_unit<E>(self) -> Result<Seen<'a>, E> {
        Ok(Seen::Nothing)
    }

    fn visit_bool<E>(self, _: bool) -> Result<Seen<'a>, E> {
        Ok(Seen::Other("true or false"))
    }

    fn visit_f64<E>(self, number: f64) -> Result<Seen<'a>, E> {
        Ok(if self.keep_figures { Seen::Other("a broken number") } else { Seen::Number(number) })
    }

    fn visit_u64<E>(self, number: u64) -> Result<Seen<'a>, E> {
        Ok(if self.keep_figures {
            Seen::Text(number.to_string().into())
        } else {
            Seen::Number(number as f64)
        })
    }

    fn visit_i64<E>(self, number: i64) -> Result<Seen<'a>, E> {
        Ok(if self.keep_figures {
            Seen::Text(number.to_string().into())
        } else {
            Seen::Number(number as f64)
        })
    }

    fn visit_borrowed_str<E>(self, text: &'a str) -> Result<Seen<'a>, E> {
        Ok(Seen::Text(Cow::Borrowed(text)))
    }

    fn visit_str<E>(self, text: &str) -> Result<Seen<'a>, E> {
        Ok(Seen::Text(Cow::Owned(text.into())))
    }

    fn visit_seq<A: serde::de::SeqAccess<'a>>(self, mut seq: A) -> Result<Seen<'a>, A::Error> {
        while seq.next_element::<IgnoredAny>()?.is_some() {}
        Ok(Seen::Other("an array"))
    }

    fn visit_map<A: MapAccess<'a>>(self, mut map: A) -> Result<Seen<'a>, A::Error> {
        while map.next_entry::<IgnoredAny, IgnoredAny>()?.is_some() {}
        Ok(Seen::Other("an object"))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    /// What serde_json makes of a line.
    fn by_serde(line: &str) -> Option<Vec<(Field, String)>> {
        Some(gather(&careful(line, None).ok()?).ok()?.told())
    }

    fn by_shape(shape: &Shape, text: &str) -> Option<(usize, Vec<(Field, String)>)> {
        let mut fields = Fields::new();
        let length = shape.read(text, &mut fields)?;
        Some((length, fields.told()))
    }

    #[test]
    fn a_shape_reads_lines_like_its_own_and_no_other() {
        let shape = Shape::of(r#"{"stream":"a","elapsed":1.5,"at":"2026-11-30T10:00:00Z"}"#).unwrap();
        let like = "{\"stream\":\"b\",\"elapsed\":-20e3,\"at\":\"\"}\nnext";
        assert_eq!(by_shape(&shape, like).unwrap().0, like.len() - 5);
        for unlike in [
            r#"{"stream":"b","elapsed":2,"at":1}"#,
            r#"{"stream":"b","elapsed":02,"at":""}"#,
            r#"{"stream":"b\n","elapsed":2,"at":""}"#,
            r#"{"stream":"b","elapsed":2,"at":""}}"#,
            r#"{"stream":"b","elapsed":2,"at":""#,
            "{\"stream\":\"b\n\",\"elapsed\":2,\"at\":\"\"}",
            "",
        ] {
            assert_eq!(by_shape(&shape, unlike), None, "{unlike}");
        }
        for none in ["{}", "[]", r#"{"elapsed":1,"elapsed":2}"#, r#"{"id":7,"elapsed":1}"#, r#"{"at":null}"#]
        {
            assert!(Shape::of(none).is_none(), "{none}");
        }
    }

    /// Lines that are nearly right, or right.
    fn line() -> impl Strategy<Value = String> {
        let key = prop_oneof![
            4 => prop::sample::select(&["stream", "elapsed", "at", "ending", "id", "elapsed_ms", "over_ns", "host"][..])
                .prop_map(String::from),
            1 => "[a-z_\\\\\"é\n]{0,10}",
        ];
        let value = prop_oneof![
            3 => "-?[0-9]{1,9}(\\.[0-9]{1,20})?",
            1 => "-?[0-9.eE+-]{0,8}",
            3 => "\"[a-z:. 0-9é]{0,20}\"",
            1 => "\"[a-z\\\\\"\u{1}\t]{0,10}\"",
            1 => prop::sample::select(&["null", "true", "[1]", "{\"a\":1}", ""][..]).prop_map(String::from),
        ];
        let space = prop_oneof![8 => Just(""), 1 => Just(" "), 1 => Just("\t\r ")];
        let member = (space.clone(), key, space.clone(), value, space)
            .prop_map(|(a, key, b, value, c)| format!("{a}\"{key}\"{b}:{b}{value}{c}"));
        (prop::collection::vec(member, 0..5), prop::sample::select(&["}", "} ", "}\r", "", "}x"][..]))
            .prop_map(|(members, end)| format!("{{{}{end}", members.join(",")))
    }

    proptest! {
        #![proptest_config(ProptestConfig::with_cases(4000))]
        #[test]
        fn shapes_and_serde_agree(one in line(), other in line()) {
            let Some(shape) = Shape::of(&one) else { return Ok(()) };
            for text in [&one, &other] {
                if let Some((length, told)) = by_shape(&shape, text) {
                    prop_assert_eq!(length, text.len());
                    prop_assert_eq!(by_serde(text), Some(told), "{}", text);
                }
            }
        }

        #[test]
        fn a_changed_byte_fools_no_shape(one in line(), at in any::<prop::sample::Index>(), new in any::<char>()) {
            let Some(shape) = Shape::of(&one) else { return Ok(()) };
            let mut other: Vec<char> = one.chars().collect();
            let at = at.index(other.len());
            other[at] = new;
            let other: String = other.into_iter().collect();
            if let Some((length, told)) = by_shape(&shape, &other) {
                // A newline ends the line.
                prop_assert_eq!(by_serde(&other[..length]), Some(told), "{}", other);
            }
        }

        #[test]
        fn texts_end_where_a_slow_look_finds(bytes in prop::collection::vec(any::<u8>(), 0..40)) {
            let slow = bytes.iter().position(|&byte| byte == b'"' || byte == b'\\' || byte < b' ');
            prop_assert_eq!(plain_text_upto(&bytes, 0), slow.unwrap_or(bytes.len()));
        }
    }
}
