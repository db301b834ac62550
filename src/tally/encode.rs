//! A tally as bytes, and back: what the ledger keeps.
//!
//! Equal tallies give equal bytes, whatever the order in which they grew. `src/ledger/LAYOUT.md` describes the
//! bytes; every reader here is total: damaged bytes give a [`DecodeError`], never a panic or a large allocation.

use std::io::{Read, Write};

use flate2::Compression;
use flate2::read::ZlibDecoder;
use flate2::write::ZlibEncoder;
use hdrhistogram::serialization::{Deserializer, Serializer, V2Serializer};
use hdrhistogram::{Counter, Histogram};

use super::ages::{DIGITS, Store};
use super::{Ages, Buckets, EXACT_AGES, MOST_BUCKETS, Side, Tally};
use crate::wait::{Ending, MAX_AGE};

/// Version of the bytes that [`Tally::encode`] writes, their first byte.
pub const TALLY_VERSION: u8 = 1;

/// Why bytes are not a tally.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum DecodeError {
    /// Written by a later version of this program.
    #[error("the tally has layout version {found}, this program reads up to {TALLY_VERSION}")]
    Newer {
        /// The version found.
        found: u8,
    },
    /// The bytes end early.
    #[error("the tally is cut short")]
    Short,
    /// Bytes are left over.
    #[error("the tally is followed by other bytes")]
    Trailing,
    /// A value that no tally holds.
    #[error("the tally holds an impossible {what}")]
    Impossible {
        /// Which part.
        what: &'static str,
    },
}

impl Tally {
    /// Appends the tally's bytes. Equal tallies append equal bytes.
    pub fn encode(&self, out: &mut Vec<u8>) {
        out.push(TALLY_VERSION);
        let (mut flags, retry) = (0, self.retry.as_deref());
        if let Some((from, to)) = self.seen {
            flags |= if from == to { SEEN_ONCE } else { SEEN };
        }
        if retry.is_some() {
            flags |= RETRY;
        }
        out.push(flags);
        if let Some((from, to)) = self.seen {
            out.extend(from.to_le_bytes());
            if from != to {
                out.extend(to.to_le_bytes());
            }
        }
        encode_side(&self.first, out);
        if let Some(retry) = retry {
            encode_side(retry, out);
        }
    }

    /// Reads what [`Tally::encode`] wrote, in this version or an earlier one.
    ///
    /// # Errors
    /// [`DecodeError`]; [`DecodeError::Newer`] for bytes of a later version.
    pub fn decode(bytes: &[u8]) -> Result<Tally, DecodeError> {
        let mut tally = Tally::default();
        tally.merge_encoded(bytes)?;
        Ok(tally)
    }

    /// Adds what [`Tally::encode`] wrote, without making a tally of it first.
    ///
    /// # Errors
    /// As [`Tally::decode`]; a part may be added then.
    pub fn merge_encoded(&mut self, bytes: &[u8]) -> Result<(), DecodeError> {
        let mut bytes = Bytes(bytes);
        match bytes.byte()? {
            1 => decode_1(&mut bytes, self),
            0 => Err(DecodeError::Impossible { what: "version" }),
            found => Err(DecodeError::Newer { found }),
        }
    }

    /// About how many bytes of memory it takes.
    pub fn footprint(&self) -> usize {
        let side = |side: &Side| {
            let ages =
                side.ages.iter().chain([&side.entries, &side.carried]).map(Ages::footprint).sum::<usize>();
            ages + side.buckets.as_ref().map_or(0, |b| 96 * b.counts.len())
        };
        size_of::<Tally>()
            + side(&self.first)
            + self.retry.as_ref().map_or(0, |r| size_of::<Side>() + side(r))
    }
}

impl Ages {
    fn footprint(&self) -> usize {
        let Some(store) = self.0.as_deref() else { return 0 };
        size_of::<Store>()
            + match store {
                Store::Few { grouped, loose } => 16 * grouped.capacity() + 8 * loose.capacity(),
                Store::Narrow(h) => 4 * h.distinct_values(),
                Store::Wide(h) => 8 * h.distinct_values(),
            }
    }
}

fn decode_1(bytes: &mut Bytes<'_>, into: &mut Tally) -> Result<(), DecodeError> {
    let flags = bytes.byte()?;
    if flags & !(SEEN | SEEN_ONCE | RETRY) != 0 || flags & (SEEN | SEEN_ONCE) == SEEN | SEEN_ONCE {
        return Err(DecodeError::Impossible { what: "flag" });
    }
    if flags & (SEEN | SEEN_ONCE) != 0 {
        let from = bytes.float()?;
        let to = if flags & SEEN != 0 { bytes.float()? } else { from };
        if !(from >= 0.0 && from <= to && to.is_finite()) {
            return Err(DecodeError::Impossible { what: "time" });
        }
        into.see(from, to);
    }
    decode_side(bytes, &mut into.first)?;
    if flags & RETRY != 0 {
        decode_side(bytes, into.retry.get_or_insert_default())?;
    }
    if bytes.0.is_empty() { Ok(()) } else { Err(DecodeError::Trailing) }
}

fn encode_side(side: &Side, out: &mut Vec<u8>) {
    let parts = || side.ages.iter().chain([&side.entries, &side.carried]).zip(PARTS);
    let mut mask = 0;
    for (ages, bit) in parts() {
        mask |= if ages.is_empty() { 0 } else { bit };
    }
    if let Some(buckets) = &side.buckets {
        mask |= BUCKETS | if buckets.coarse { COARSE } else { 0 };
    }
    out.push(mask);
    for (ages, _) in parts() {
        encode_ages(ages, out);
    }
    if let Some(buckets) = &side.buckets {
        encode_buckets(buckets, out);
    }
}

fn decode_side(bytes: &mut Bytes<'_>, into: &mut Side) -> Result<(), DecodeError> {
    let mask = bytes.byte()?;
    if mask & (BUCKETS | COARSE) == COARSE {
        return Err(DecodeError::Impossible { what: "mask" });
    }
    for (ages, bit) in into.ages.iter_mut().chain([&mut into.entries, &mut into.carried]).zip(PARTS) {
        if mask & bit != 0 {
            decode_ages(bytes, ages)?;
        }
    }
    if mask & BUCKETS != 0 {
        let buckets = decode_buckets(bytes, mask & COARSE != 0)?;
        match &mut into.buckets {
            Some(mine) => mine.merge(&buckets),
            none => *none = Some(Box::new(buckets)),
        }
    }
    Ok(())
}

fn encode_ages(ages: &Ages, out: &mut Vec<u8>) {
    let Some(store) = ages.0.as_deref() else { return };
    match store.settled().as_ref() {
        Store::Few { grouped, .. } => encode_exact(grouped, out),
        Store::Narrow(h) => encode_histogram(NARROW, h, out),
        Store::Wide(h) => encode_histogram(WIDE, h, out),
    }
}

fn decode_ages(bytes: &mut Bytes<'_>, into: &mut Ages) -> Result<(), DecodeError> {
    let store = match bytes.byte()? {
        form if form & !ALL_ONE <= BITS && !into.is_empty() => {
            return decode_exact(form, bytes, |age, count| into.add(age, count));
        }
        form if form & !ALL_ONE <= BITS => {
            let mut grouped = Vec::new();
            decode_exact(form, bytes, |age, count| grouped.push((age, count)))?;
            Store::Few { grouped, loose: Vec::new() }
        }
        NARROW => Store::Narrow(decode_histogram(bytes)?),
        WIDE => Store::Wide(decode_histogram(bytes)?),
        SPARSE => decode_sparse(bytes)?,
        _ => return Err(DecodeError::Impossible { what: "form" }),
    };
    let ages = Ages(Some(Box::new(store)));
    if into.is_empty() {
        *into = ages;
    } else {
        into.merge(&ages);
    }
    Ok(())
}

/// Clocks tick in decimal fractions, so most ages are whole microseconds or nanoseconds: a gap between two such
/// takes 1 to 3 bytes where the bits of the number take 8.
fn encode_exact(grouped: &[(f64, u64)], out: &mut Vec<u8>) {
    let form =
        (0..BITS).find(|&form| grouped.iter().all(|&(age, _)| code_of(form, age).is_some())).unwrap_or(BITS);
    let all_one = grouped.iter().all(|&(_, count)| count == 1);
    out.push(form | if all_one { ALL_ONE } else { 0 });
    varint(grouped.len() as u64, out);
    let mut last = 0;
    for &(age, count) in grouped {
        let code = code_of(form, age).unwrap_or_default();
        varint(code.wrapping_sub(last), out);
        last = code;
        if !all_one {
            varint(count, out);
        }
    }
}

fn decode_exact(form: u8, bytes: &mut Bytes<'_>, mut take: impl FnMut(f64, u64)) -> Result<(), DecodeError> {
    let (all_one, form) = (form & ALL_ONE != 0, form & !ALL_ONE);
    let length = bytes.length(1)?;
    if length == 0 || length > EXACT_AGES {
        return Err(DecodeError::Impossible { what: "number of ages" });
    }
    let mut code = 0u64;
    for _ in 0..length {
        let gap = bytes.varint()?;
        code = code.checked_add(gap).ok_or(DecodeError::Impossible { what: "age" })?;
        let age = age_of(form, code);
        let count = if all_one { 1 } else { bytes.varint()? };
        if gap == 0 || count == 0 || !(age > 0.0 && age <= MAX_AGE) {
            return Err(DecodeError::Impossible { what: "age" });
        }
        take(age, count);
    }
    Ok(())
}

/// The age as a whole number in the given form, in the same order as the ages; `None` if it would not come back
/// to the last bit.
#[inline]
fn code_of(form: u8, age: f64) -> Option<u64> {
    if form == BITS {
        return Some(age.to_bits());
    }
    let code = (age * TICKS[usize::from(form)]).round();
    // Below 2^53 the whole number is exact and the division correctly rounded.
    (code < 9e15 && code / TICKS[usize::from(form)] == age).then_some(code as u64)
}

#[inline]
fn age_of(form: u8, code: u64) -> f64 {
    match TICKS.get(usize::from(form)) {
        Some(ticks) => code as f64 / ticks,
        None => f64::from_bits(code),
    }
}

/// HdrHistogram's V2+DEFLATE form. The format's own writer compresses at level 6; this one at a lower level, which
/// readers of the format cannot tell.
fn encode_histogram<C: Counter>(form: u8, h: &Histogram<C>, out: &mut Vec<u8>) {
    let start = out.len();
    out.push(form);
    out.extend([0; 8]);
    let mut plain = Vec::new();
    let zipped = V2Serializer::new().serialize(h, &mut plain).is_ok() && {
        // How far the array reaches depends on the order of arrival; what it holds does not.
        plain[24..32].copy_from_slice(&h.max().max(2).to_be_bytes());
        let mut zip = ZlibEncoder::new(&mut *out, Compression::new(ZIP_LEVEL));
        // Writing into memory cannot fail.
        zip.write_all(&plain).and_then(|()| zip.finish()).is_ok()
    };
    if zipped {
        let length = (out.len() - start - 9) as u32;
        out[start + 1..start + 5].copy_from_slice(&V2_DEFLATE.to_be_bytes());
        out[start + 5..start + 9].copy_from_slice(&length.to_be_bytes());
        return;
    }
    // The format has no room for a count above 2^63.
    out.truncate(start);
    out.push(SPARSE);
    varint(h.iter_recorded().count() as u64, out);
    let mut last = 0;
    for bin in h.iter_recorded() {
        let tick = bin.value_iterated_to();
        varint(tick - last, out);
        varint(bin.count_at_value().as_u64(), out);
        last = tick;
    }
}

fn decode_histogram<C: Counter>(bytes: &mut Bytes<'_>) -> Result<Histogram<C>, DecodeError> {
    const BAD: DecodeError = DecodeError::Impossible { what: "histogram" };
    if bytes.take(4)? != V2_DEFLATE.to_be_bytes() {
        return Err(BAD);
    }
    let length = u32::from_be_bytes(bytes.array()?);
    let zipped = bytes.take(length as usize)?;
    let mut plain = Vec::new();
    let most = ZlibDecoder::new(zipped).take(MOST_PLAIN).read_to_end(&mut plain).map_err(|_| BAD)?;
    // The format's reader believes its header, so that is looked at first.
    let mut header = Bytes(&plain);
    let _cookie: [u8; 4] = header.array()?;
    let payload = u32::from_be_bytes(header.array()?);
    let _offset: [u8; 4] = header.array()?;
    let digits = u32::from_be_bytes(header.array()?);
    let (low, high) = (u64::from_be_bytes(header.array()?), u64::from_be_bytes(header.array()?));
    let _ratio: [u8; 8] = header.array()?;
    let whole = most as u64 != MOST_PLAIN && payload as usize == header.0.len();
    if !whole || digits != u32::from(DIGITS) || low != 1 || high > MOST_TICK {
        return Err(BAD);
    }
    // Nine bytes of ones are the one number that it cannot negate.
    if header.0.windows(9).any(|w| w == [0xff; 9]) {
        return Err(BAD);
    }
    let mut h: Histogram<C> = Deserializer::new().deserialize(&mut plain.as_slice()).map_err(|_| BAD)?;
    h.auto(true);
    if h.is_empty() { Err(BAD) } else { Ok(h) }
}

fn decode_sparse(bytes: &mut Bytes<'_>) -> Result<Store, DecodeError> {
    const BAD: DecodeError = DecodeError::Impossible { what: "histogram" };
    let length = bytes.length(2)?;
    let mut h = Histogram::<u64>::new(DIGITS).map_err(|_| BAD)?;
    let mut tick = 0u64;
    for _ in 0..length {
        tick = tick.checked_add(bytes.varint()?).filter(|&t| t <= MOST_TICK).ok_or(BAD)?;
        h.record_n(tick, bytes.varint()?).map_err(|_| BAD)?;
    }
    if h.is_empty() { Err(BAD) } else { Ok(Store::Wide(h)) }
}

fn encode_buckets(buckets: &Buckets, out: &mut Vec<u8>) {
    varint(buckets.counts.len() as u64, out);
    let mut last = 0;
    for (&(over, upto), counts) in &buckets.counts {
        varint(over - last, out);
        varint(upto - over, out);
        last = over;
        let mut mask = 0;
        for (i, &count) in counts.iter().enumerate() {
            mask |= u8::from(count > 0) << i;
        }
        out.push(mask);
        counts.iter().filter(|&&count| count > 0).for_each(|&count| varint(count, out));
    }
}

fn decode_buckets(bytes: &mut Bytes<'_>, coarse: bool) -> Result<Buckets, DecodeError> {
    const BAD: DecodeError = DecodeError::Impossible { what: "bucket" };
    let length = bytes.length(4)?;
    // Coarse bounds may be more: the grid, not the limit, bounds them.
    if length == 0 || (!coarse && length > MOST_BUCKETS) {
        return Err(BAD);
    }
    let mut buckets = Buckets { coarse, ..Buckets::default() };
    let mut last = (0, 0);
    for _ in 0..length {
        let over = bytes.varint()?.checked_add(last.0).ok_or(BAD)?;
        let upto = bytes.varint()?.checked_add(over).ok_or(BAD)?;
        let (low, high) = (f64::from_bits(over), f64::from_bits(upto));
        // A coarse grid may move a bound outward, hence beyond the largest age by a little.
        let in_range =
            (0.0..=MAX_AGE).contains(&low) && low < high && (high <= 1.02 * MAX_AGE || high.is_infinite());
        if !in_range || (over, upto) <= last {
            return Err(BAD);
        }
        last = (over, upto);
        let mask = bytes.byte()?;
        if mask == 0 || mask > 0b1111 {
            return Err(BAD);
        }
        let mut counts = [0; 4];
        for ending in Ending::ALL {
            if mask & 1 << ending as u8 != 0 {
                counts[ending as usize] = bytes.varint()?;
            }
        }
        if (0..4).any(|i| (counts[i] == 0) == (mask & 1 << i != 0)) {
            return Err(BAD);
        }
        buckets.counts.insert((over, upto), counts);
    }
    Ok(buckets)
}

/// Appends a number, seven bits to a byte, the lowest first; the highest bit says that more follow.
#[inline]
pub(crate) fn varint(mut number: u64, out: &mut Vec<u8>) {
    while number >= 0x80 {
        out.push(number as u8 | 0x80);
        number >>= 7;
    }
    out.push(number as u8);
}

/// Bytes still to be read.
pub(crate) struct Bytes<'a>(pub(crate) &'a [u8]);

impl<'a> Bytes<'a> {
    pub(crate) fn take(&mut self, length: usize) -> Result<&'a [u8], DecodeError> {
        let (head, rest) = self.0.split_at_checked(length).ok_or(DecodeError::Short)?;
        self.0 = rest;
        Ok(head)
    }

    pub(crate) fn array<const N: usize>(&mut self) -> Result<[u8; N], DecodeError> {
        let (head, rest) = self.0.split_first_chunk().ok_or(DecodeError::Short)?;
        self.0 = rest;
        Ok(*head)
    }

    fn byte(&mut self) -> Result<u8, DecodeError> {
        self.array::<1>().map(|[byte]| byte)
    }

    fn float(&mut self) -> Result<f64, DecodeError> {
        self.array().map(f64::from_le_bytes)
    }

    #[inline]
    pub(crate) fn varint(&mut self) -> Result<u64, DecodeError> {
        let mut number = 0;
        for shift in (0..64).step_by(7) {
            let byte = self.byte()?;
            number |= u64::from(byte & 0x7f) << shift;
            if byte < 0x80 {
                // The tenth byte has room for one bit, and no number ends in an empty byte.
                let fits = shift < 63 || byte == 1;
                return if fits && (byte != 0 || shift == 0) {
                    Ok(number)
                } else {
                    Err(DecodeError::Impossible { what: "number" })
                };
            }
        }
        Err(DecodeError::Impossible { what: "number" })
    }

    /// A number of things to come that take at least `each` bytes, so that it bounds an allocation.
    fn length(&mut self, each: usize) -> Result<usize, DecodeError> {
        let length = self.varint()?;
        if length > (self.0.len() / each) as u64 { Err(DecodeError::Short) } else { Ok(length as usize) }
    }
}

// Flags of a tally.
const SEEN: u8 = 1;
const SEEN_ONCE: u8 = 2;
const RETRY: u8 = 4;

// Mask of a side: the four endings, the entries, what was carried over; the buckets and whether they are coarse.
const PARTS: [u8; 6] = [1, 1 << 1, 1 << 2, 1 << 3, 1 << 4, 1 << 7];
const BUCKETS: u8 = 1 << 5;
const COARSE: u8 = 1 << 6;

// Forms of ages: whole microseconds, whole nanoseconds, the bits of the number; histograms.
const TICKS: [f64; 2] = [1e6, 1e9];
const BITS: u8 = TICKS.len() as u8;
const NARROW: u8 = 3;
const WIDE: u8 = 4;
const SPARSE: u8 = 5;
/// Added to an exact form whose counts are all 1 and left out.
const ALL_ONE: u8 = 0x80;

/// First four bytes of HdrHistogram's V2+DEFLATE form.
const V2_DEFLATE: u32 = 0x1c84_9304;
/// Level 6 saves 3 to 8% of the bytes for up to twice the time (measured on lognormal ages, 5,000 to 2,000,000).
const ZIP_LEVEL: u32 = 1;
/// More than any histogram of ours takes unzipped: 46 octaves of 1,024 counts, 9 bytes each.
const MOST_PLAIN: u64 = 512 * 1024;
/// Well above [`MAX_AGE`] in microseconds.
const MOST_TICK: u64 = 1 << 55;
