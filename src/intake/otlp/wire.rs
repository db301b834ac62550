//! The wire format of protocol buffers (protobuf.dev/programming-guides/encoding): the fields of a message, one after the
//! other, borrowed from its bytes.
//!
//! Written here because it is a page, and because nothing is built of a message but what is asked for: what a hostile
//! body holds cannot grow in memory, and nothing nests deeper than the walk over it. The tests hold it against the library
//! that others generate their code for.

/// A field's value.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Wire<'a> {
    Varint(u64),
    Fixed64(u64),
    Bytes(&'a [u8]),
    Fixed32(u32),
}

/// Why bytes are not a message that is known here.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub(super) enum Malformed {
    #[error("it breaks off within a field")]
    Cut,
    #[error("a number has more than 64 bits")]
    Varint,
    #[error("a field has the number {0}, which none can have")]
    Number(u64),
    #[error("a field has the wire type {0}, which is not in use")]
    Type(u8),
    #[error("the field {0} has another type than the standard gives it")]
    Kind(u32),
    #[error("a text is not UTF-8")]
    Text,
    #[error("{0} has more than {1} parts")]
    TooMany(&'static str, usize),
}

/// The fields of a message.
#[derive(Clone, Copy, Debug)]
pub(super) struct Message<'a>(pub(super) &'a [u8]);

impl<'a> Message<'a> {
    /// The next field: its number and value; `None` at the end.
    #[inline]
    pub(super) fn next(&mut self) -> Result<Option<(u32, Wire<'a>)>, Malformed> {
        if self.0.is_empty() {
            return Ok(None);
        }
        let key = varint(&mut self.0)?;
        let number = u32::try_from(key >> 3).ok().filter(|number| (1..1 << 29).contains(number));
        let number = number.ok_or(Malformed::Number(key >> 3))?;
        let value = match key & 7 {
            0 => Wire::Varint(varint(&mut self.0)?),
            1 => Wire::Fixed64(u64::from_le_bytes(*self.chunk()?)),
            2 => {
                let length = varint(&mut self.0)?;
                let length = usize::try_from(length).map_err(|_| Malformed::Cut)?;
                let (bytes, rest) = self.0.split_at_checked(length).ok_or(Malformed::Cut)?;
                self.0 = rest;
                Wire::Bytes(bytes)
            }
            5 => Wire::Fixed32(u32::from_le_bytes(*self.chunk()?)),
            // Groups (3 and 4) have not been written since the first version of the format.
            other => return Err(Malformed::Type(other as u8)),
        };
        Ok(Some((number, value)))
    }

    #[inline]
    fn chunk<const N: usize>(&mut self) -> Result<&'a [u8; N], Malformed> {
        let (chunk, rest) = self.0.split_first_chunk().ok_or(Malformed::Cut)?;
        self.0 = rest;
        Ok(chunk)
    }
}

/// A number in groups of seven bits, the lowest first; at most ten bytes.
#[inline]
pub(super) fn varint(bytes: &mut &[u8]) -> Result<u64, Malformed> {
    if let [byte @ ..0x80, rest @ ..] = bytes {
        *bytes = rest;
        return Ok(u64::from(*byte));
    }
    let mut number = 0;
    for (i, &byte) in bytes.iter().take(10).enumerate() {
        number |= u64::from(byte & 0x7f) << (7 * i);
        if byte < 0x80 {
            if i == 9 && byte > 1 {
                return Err(Malformed::Varint);
            }
            *bytes = bytes.get(i + 1..).unwrap_or_default();
            return Ok(number);
        }
    }
    Err(if bytes.len() < 10 { Malformed::Cut } else { Malformed::Varint })
}

impl<'a> Wire<'a> {
    pub(super) fn bytes(self, number: u32) -> Result<&'a [u8], Malformed> {
        match self {
            Wire::Bytes(bytes) => Ok(bytes),
            _ => Err(Malformed::Kind(number)),
        }
    }

    pub(super) fn text(self, number: u32) -> Result<&'a str, Malformed> {
        std::str::from_utf8(self.bytes(number)?).map_err(|_| Malformed::Text)
    }

    pub(super) fn message(self, number: u32) -> Result<Message<'a>, Malformed> {
        self.bytes(number).map(Message)
    }

    pub(super) fn varint(self, number: u32) -> Result<u64, Malformed> {
        match self {
            Wire::Varint(value) => Ok(value),
            _ => Err(Malformed::Kind(number)),
        }
    }

    pub(super) fn fixed64(self, number: u32) -> Result<u64, Malformed> {
        match self {
            Wire::Fixed64(value) => Ok(value),
            _ => Err(Malformed::Kind(number)),
        }
    }

    pub(super) fn double(self, number: u32) -> Result<f64, Malformed> {
        self.fixed64(number).map(f64::from_bits)
    }

    /// A signed number in zigzag form.
    pub(super) fn signed(self, number: u32) -> Result<i32, Malformed> {
        // Of a longer number the lower half counts, as for every 32-bit field.
        let value = self.varint(number)? as u32;
        Ok((value >> 1) as i32 ^ -((value & 1) as i32))
    }

    /// Adds numbers of eight bytes: many in one field, or one a field.
    pub(super) fn fixed64s(self, number: u32, most: usize, take: &mut Vec<u64>) -> Result<(), Malformed> {
        match self {
            Wire::Fixed64(value) => push(take, value, most),
            Wire::Bytes(bytes) => {
                let (chunks, []) = bytes.as_chunks::<8>() else { return Err(Malformed::Cut) };
                chunks.iter().try_for_each(|chunk| push(take, u64::from_le_bytes(*chunk), most))
            }
            _ => Err(Malformed::Kind(number)),
        }
    }

    /// Adds numbers of varying length: many in one field, or one a field.
    pub(super) fn varints(self, number: u32, most: usize, take: &mut Vec<u64>) -> Result<(), Malformed> {
        match self {
            Wire::Varint(value) => push(take, value, most),
            Wire::Bytes(mut bytes) => {
                take.reserve(bytes.len().min(most));
                while !bytes.is_empty() {
                    // Most are below 128, a byte each.
                    if let Some((eight, rest)) = bytes.split_first_chunk::<8>()
                        && u64::from_le_bytes(*eight) & 0x8080_8080_8080_8080 == 0
                        && take.len() + 8 <= most
                    {
                        take.extend(eight.map(u64::from));
                        bytes = rest;
                    } else {
                        push(take, varint(&mut bytes)?, most)?;
                    }
                }
                Ok(())
            }
            _ => Err(Malformed::Kind(number)),
        }
    }
}

fn push(take: &mut Vec<u64>, value: u64, most: usize) -> Result<(), Malformed> {
    if take.len() >= most {
        return Err(Malformed::TooMany("a histogram", most));
    }
    take.push(value);
    Ok(())
}

/// Writes messages: what the answers need.
#[derive(Debug, Default)]
pub(super) struct Writer(pub(super) Vec<u8>);

impl Writer {
    pub(super) fn varint(&mut self, number: u32, value: u64) {
        self.raw(u64::from(number) << 3);
        self.raw(value);
    }

    pub(super) fn bytes(&mut self, number: u32, bytes: &[u8]) {
        self.raw(u64::from(number) << 3 | 2);
        self.raw(bytes.len() as u64);
        self.0.extend_from_slice(bytes);
    }

    fn raw(&mut self, mut value: u64) {
        while value >= 0x80 {
            self.0.push(value as u8 | 0x80);
            value >>= 7;
        }
        self.0.push(value as u8);
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[derive(Clone, PartialEq, prost::Message)]
    struct Sample {
        #[prost(uint64, tag = "1")]
        number: u64,
        #[prost(sint32, tag = "2")]
        signed: i32,
        #[prost(string, tag = "3")]
        text: String,
        #[prost(double, tag = "4")]
        double: f64,
        #[prost(fixed64, repeated, tag = "5")]
        fixed: Vec<u64>,
        #[prost(uint64, repeated, tag = "600000")]
        packed: Vec<u64>,
    }

    proptest! {
        /// What prost 0.14 writes is read as it was meant.
        #[test]
        fn agrees_with_a_library(
            number: u64, signed: i32, text: String, double: f64, fixed: Vec<u64>, packed: Vec<u64>,
        ) {
            let sample = Sample { number, signed, text, double, fixed, packed };
            let bytes = prost::Message::encode_to_vec(&sample);
            let mut read = Sample::default();
            let mut message = Message(&bytes);
            while let Some((number, wire)) = message.next().unwrap() {
                match number {
                    1 => read.number = wire.varint(1).unwrap(),
                    2 => read.signed = wire.signed(2).unwrap(),
                    3 => read.text = wire.text(3).unwrap().to_owned(),
                    4 => read.double = wire.double(4).unwrap(),
                    5 => wire.fixed64s(5, 1000, &mut read.fixed).unwrap(),
                    _ => wire.varints(number, 1000, &mut read.packed).unwrap(),
                }
            }
            // The library leaves out a zero of either sign.
            prop_assert!(read.double == double || (read.double.is_nan() && double.is_nan()));
            read.double = double;
            prop_assert!(read == sample || double.is_nan());
        }

        /// Whatever it takes, prost takes.
        #[test]
        fn is_no_more_lenient(bytes in prop::collection::vec(any::<u8>(), 0..40)) {
            let mut message = Message(&bytes);
            let sound = loop {
                match message.next() {
                    Ok(Some((1..=5 | 600_000, _))) => break false,
                    Ok(Some(_)) => {}
                    Ok(None) => break true,
                    Err(_) => break false,
                }
            };
            if sound {
                prop_assert!(<Sample as prost::Message>::decode(&bytes[..]).is_ok());
            }
        }
    }

    #[test]
    fn a_varint_has_64_bits() {
        let read = |bytes: &[u8]| varint(&mut &*bytes);
        assert_eq!(read(&[0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0x01]), Ok(u64::MAX));
        assert_eq!(
            read(&[0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0x02]),
            Err(Malformed::Varint)
        );
        assert_eq!(read(&[0x80]), Err(Malformed::Cut));
        // The standard's own example: 150 is 96 01.
        assert_eq!(read(&[0x96, 0x01]), Ok(150));
    }
}
