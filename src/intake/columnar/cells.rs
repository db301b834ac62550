//! The values of a column, whatever its type, as the fields of records.

use std::borrow::Cow;
use std::collections::HashMap;

use arrow_array::cast::AsArray;
use arrow_array::types::{
    Date32Type, Date64Type, Decimal128Type, DurationMicrosecondType, DurationMillisecondType,
    DurationNanosecondType, DurationSecondType, Float32Type, Float64Type, Int8Type, Int16Type, Int32Type,
    Int64Type, TimestampMicrosecondType, TimestampMillisecondType, TimestampNanosecondType,
    TimestampSecondType, UInt8Type, UInt16Type, UInt32Type, UInt64Type,
};
use arrow_array::{Array, ArrayRef, ArrowPrimitiveType, BinaryArray, BinaryViewArray, LargeBinaryArray};
use arrow_buffer::NullBuffer;
use arrow_schema::{DataType, TimeUnit};
use foldhash::fast::RandomState;

use super::ColumnsError;
use super::names;
use crate::intake::flaw::Flaw;
use crate::intake::record::{Field, Fields};

/// Whether values of a type can be those of a field.
pub(super) fn can_hold(kind: &DataType, field: Field) -> bool {
    use DataType::*;
    match kind {
        Null => true,
        Dictionary(_, values) => is_text(values),
        kind if is_text(kind) => true,
        Int8 | Int16 | Int32 | Int64 | UInt8 | UInt16 | UInt32 | UInt64 => true,
        Float32 | Float64 | Decimal128(..) => field.is_number(),
        Timestamp(..) | Date32 | Date64 => field.is_time(),
        Duration(_) => field.is_duration(),
        Boolean => field == Field::Ending,
        _ => false,
    }
}

/// Texts, and bytes, which some writers give them as.
fn is_text(kind: &DataType) -> bool {
    use DataType::*;
    matches!(kind, Utf8 | LargeUtf8 | Utf8View | Binary | LargeBinary | BinaryView)
}

/// A type with bytes in the place of texts. They lie there alike, and only those that are met need be looked at.
pub(super) fn unlettered(kind: &DataType) -> DataType {
    match kind {
        DataType::Utf8 => DataType::Binary,
        DataType::LargeUtf8 => DataType::LargeBinary,
        DataType::Utf8View => DataType::BinaryView,
        DataType::Dictionary(places, values) => {
            DataType::Dictionary(places.clone(), Box::new(unlettered(values)))
        }
        other => other.clone(),
    }
}

/// Seconds of a time or duration in whole numbers of a unit. Later is never less, so bounds become bounds.
#[inline(always)]
pub(super) fn seconds(value: i64, unit: TimeUnit) -> f64 {
    const BILLION: i64 = 1_000_000_000;
    match unit {
        TimeUnit::Second => value as f64,
        // Up to the year 2255 the nearest number that there is.
        TimeUnit::Millisecond => value as f64 / 1e3,
        TimeUnit::Microsecond => value as f64 / 1e6,
        // Today's are too many for a double. The compiler knows the divisor, and need not divide.
        TimeUnit::Nanosecond => value.div_euclid(BILLION) as f64 + value.rem_euclid(BILLION) as f64 / 1e9,
    }
}

/// A column of one part.
pub(super) struct Column<'a> {
    pub(super) field: Field,
    /// How many of its units make a second if its name says and its values are texts.
    unit: Option<f64>,
    /// Which rows have a value, if not all have.
    present: Option<&'a NullBuffer>,
    values: Values<'a>,
}

enum Values<'a> {
    Nothing,
    Numbers(Cow<'a, [f64]>),
    /// Seconds, by the column's own type or name.
    Seconds(Vec<f64>),
    /// Texts as bytes, which may be none.
    Text(BinaryArray),
    LargeText(LargeBinaryArray),
    TextView(BinaryViewArray),
    /// Texts by their places in a list of each once.
    Coded(Vec<usize>, Box<Values<'a>>),
    /// Whole numbers where a field is a name: in figures.
    Figures(Vec<String>),
    Flags(Vec<bool>),
}

impl<'a> Column<'a> {
    pub(super) fn new(
        array: &'a ArrayRef,
        field: Field,
        unit: Option<f64>,
    ) -> Result<Column<'a>, ColumnsError> {
        let values = Values::of(array.as_ref(), field).ok_or(ColumnsError::Panic)?;
        let values = match (values, unit) {
            (Values::Numbers(numbers), Some(per_second)) => {
                Values::Seconds(numbers.iter().map(|number| number / per_second).collect())
            }
            (values, _) => values,
        };
        let present = array.nulls().filter(|nulls| nulls.null_count() > 0);
        Ok(Column { field, unit, present, values })
    }

    /// Whether a row has no value here.
    #[inline(always)]
    pub(super) fn is_missing(&self, row: usize) -> bool {
        self.present.is_some_and(|present| present.is_null(row))
    }

    /// Whether every row has a value.
    pub(super) fn is_full(&self) -> bool {
        self.present.is_none()
    }

    /// Puts something in the place of what the rows without a value have.
    pub(super) fn fill_missing<T: Copy>(&self, of_rows: &mut [T], filling: T) {
        if let Some(present) = self.present {
            let rows = of_rows.iter_mut().zip(present);
            rows.filter(|(_, is_there)| !is_there).for_each(|(row, _)| *row = filling);
        }
    }

    /// Puts a row's value into the fields; nothing where there is none.
    ///
    /// # Errors
    /// [`Flaw::NotText`] for bytes that are no text.
    #[inline]
    pub(super) fn set(&'a self, row: usize, fields: &mut Fields<'a>) -> Result<(), Flaw> {
        if self.is_missing(row) {
            return Ok(());
        }
        match &self.values {
            Values::Nothing => {}
            Values::Numbers(numbers) => fields.set_number(self.field, numbers[row]),
            Values::Seconds(seconds) => fields.set_number_in_unit(self.field, seconds[row], 1.0),
            texts => match (str::from_utf8(texts.bytes(row)).map_err(|_| Flaw::NotText)?, self.unit) {
                ("", _) => {}
                (text, None) => fields.set_figures(self.field, text),
                (text, Some(per_second)) => fields.set_text_in_unit(self.field, text, per_second),
            },
        }
        Ok(())
    }

    /// Whether its numbers are of a stated unit, and have become seconds.
    pub(super) fn is_in_seconds(&self) -> bool {
        matches!(self.values, Values::Seconds(_))
    }

    /// The number of each row, and a filling where it has none; `None` if they are no numbers.
    pub(super) fn filled(&self, filling: f64) -> Option<Cow<'_, [f64]>> {
        let numbers = match &self.values {
            Values::Numbers(numbers) => numbers,
            Values::Seconds(seconds) => seconds.as_slice(),
            _ => return None,
        };
        let mut numbers = Cow::Borrowed(numbers);
        if !self.is_full() {
            self.fill_missing(numbers.to_mut(), filling);
        }
        Some(numbers)
    }

    /// What the text of each row stands for, those of missing ones too.
    pub(super) fn names<T: Copy>(&self, find: impl FnMut(&[u8]) -> T) -> Option<Vec<T>> {
        Some(match &self.values {
            Values::Nothing | Values::Numbers(_) | Values::Seconds(_) => return None,
            Values::Text(texts) => names::of_each_packed(texts.value_offsets(), texts.value_data(), find),
            Values::LargeText(texts) => {
                names::of_each_packed(texts.value_offsets(), texts.value_data(), find)
            }
            Values::TextView(texts) => names::of_each((0..texts.len()).map(|row| texts.value(row)), find),
            Values::Coded(places, texts) => names::of_each_place(places, |place| texts.bytes(place), find),
            Values::Figures(figures) => names::of_each(figures.iter().map(String::as_bytes), find),
            Values::Flags(flags) => names::of_each(flags.iter().map(|&flag| word(flag)), find),
        })
    }

    /// The text of a row, as bytes; empty where there is none.
    #[inline]
    pub(super) fn bytes(&self, row: usize) -> &[u8] {
        if self.is_missing(row) { b"" } else { self.values.bytes(row) }
    }
}

fn word(flag: bool) -> &'static [u8] {
    if flag { b"true" } else { b"false" }
}

impl<'a> Values<'a> {
    /// `None` for a type that [`can_hold`] refuses.
    fn of(array: &'a dyn Array, field: Field) -> Option<Values<'a>> {
        use TimeUnit::*;
        Some(match array.data_type() {
            DataType::Null => Values::Nothing,
            DataType::Binary => Values::Text(array.as_binary_opt()?.clone()),
            DataType::LargeBinary => Values::LargeText(array.as_binary_opt()?.clone()),
            DataType::BinaryView => Values::TextView(array.as_binary_view_opt()?.clone()),
            DataType::Utf8 => Values::Text(array.as_string_opt::<i32>()?.clone().into()),
            DataType::LargeUtf8 => Values::LargeText(array.as_string_opt::<i64>()?.clone().into()),
            DataType::Utf8View => Values::TextView(array.as_string_view_opt()?.clone().to_binary_view()),
            DataType::Dictionary(..) => {
                let coded = array.as_any_dictionary_opt()?;
                let texts = Values::of(coded.values().as_ref(), field)?;
                let places = if coded.values().is_empty() { Vec::new() } else { coded.normalized_keys() };
                Values::Coded(places, Box::new(texts))
            }
            DataType::Int8 => whole::<Int8Type>(array, field)?,
            DataType::Int16 => whole::<Int16Type>(array, field)?,
            DataType::Int32 => whole::<Int32Type>(array, field)?,
            DataType::Int64 => whole::<Int64Type>(array, field)?,
            DataType::UInt8 => whole::<UInt8Type>(array, field)?,
            DataType::UInt16 => whole::<UInt16Type>(array, field)?,
            DataType::UInt32 => whole::<UInt32Type>(array, field)?,
            DataType::UInt64 => whole::<UInt64Type>(array, field)?,
            DataType::Float32 => Values::Numbers(each::<Float32Type>(array, f64::from)?.into()),
            DataType::Float64 => {
                Values::Numbers(Cow::Borrowed(array.as_primitive_opt::<Float64Type>()?.values()))
            }
            DataType::Decimal128(_, scale) => {
                let scale = 10f64.powi(i32::from(*scale));
                Values::Numbers(each::<Decimal128Type>(array, |number| number as f64 / scale)?.into())
            }
            DataType::Timestamp(Second, _) => in_unit::<TimestampSecondType>(array, Second)?,
            DataType::Timestamp(Millisecond, _) => in_unit::<TimestampMillisecondType>(array, Millisecond)?,
            DataType::Timestamp(Microsecond, _) => in_unit::<TimestampMicrosecondType>(array, Microsecond)?,
            DataType::Timestamp(Nanosecond, _) => in_unit::<TimestampNanosecondType>(array, Nanosecond)?,
            DataType::Duration(Second) => in_unit::<DurationSecondType>(array, Second)?,
            DataType::Duration(Millisecond) => in_unit::<DurationMillisecondType>(array, Millisecond)?,
            DataType::Duration(Microsecond) => in_unit::<DurationMicrosecondType>(array, Microsecond)?,
            DataType::Duration(Nanosecond) => in_unit::<DurationNanosecondType>(array, Nanosecond)?,
            DataType::Date32 => Values::Seconds(each::<Date32Type>(array, |day| f64::from(day) * 86_400.0)?),
            DataType::Date64 => in_unit::<Date64Type>(array, Millisecond)?,
            DataType::Boolean => {
                let flags = array.as_boolean_opt()?;
                Values::Flags((0..flags.len()).map(|row| flags.value(row)).collect())
            }
            _ => return None,
        })
    }

    #[inline]
    fn bytes(&self, row: usize) -> &[u8] {
        match self {
            Values::Text(texts) => texts.value(row),
            Values::LargeText(texts) => texts.value(row),
            Values::TextView(texts) => texts.value(row),
            Values::Coded(places, texts) => places.get(row).map_or(b"", |&place| texts.bytes(place)),
            Values::Figures(figures) => figures.get(row).map_or(b"", String::as_bytes),
            Values::Flags(flags) => flags.get(row).map_or(b"", |&flag| word(flag)),
            Values::Nothing | Values::Numbers(_) | Values::Seconds(_) => b"",
        }
    }
}

/// Every value, those of missing ones too, which nobody looks at.
fn each<T: ArrowPrimitiveType>(array: &dyn Array, make: impl Fn(T::Native) -> f64) -> Option<Vec<f64>> {
    Some(array.as_primitive_opt::<T>()?.values().iter().map(|&value| make(value)).collect())
}

fn in_unit<'a, T: ArrowPrimitiveType<Native = i64>>(array: &dyn Array, unit: TimeUnit) -> Option<Values<'a>> {
    // A loop of its own for each unit.
    Some(Values::Seconds(match unit {
        TimeUnit::Second => each::<T>(array, |value| seconds(value, TimeUnit::Second))?,
        TimeUnit::Millisecond => each::<T>(array, |value| seconds(value, TimeUnit::Millisecond))?,
        TimeUnit::Microsecond => each::<T>(array, |value| seconds(value, TimeUnit::Microsecond))?,
        TimeUnit::Nanosecond => each::<T>(array, |value| seconds(value, TimeUnit::Nanosecond))?,
    }))
}

/// Whole numbers: of a field that takes numbers, or in figures.
fn whole<'a, T: ArrowPrimitiveType>(array: &dyn Array, field: Field) -> Option<Values<'a>>
where
    T::Native: std::fmt::Display + std::hash::Hash + Eq + num_as::ToF64,
{
    let values = array.as_primitive_opt::<T>()?.values();
    Some(match field {
        _ if field.is_number() => {
            Values::Numbers(values.iter().map(|&value| num_as::ToF64::to_f64(value)).collect())
        }
        Field::Id => Values::Figures(values.iter().map(ToString::to_string).collect()),
        // A status, or the number of a queue: few, and each is written once.
        _ => {
            let (mut known, mut figures) = (HashMap::with_hasher(RandomState::default()), Vec::new());
            let place = |&value: &T::Native| {
                *known.entry(value).or_insert_with(|| {
                    figures.push(value.to_string());
                    figures.len() - 1
                })
            };
            let places = values.iter().map(place).collect();
            Values::Coded(places, Box::new(Values::Figures(figures)))
        }
    })
}

/// Whole numbers as the nearest double.
mod num_as {
    pub(super) trait ToF64 {
        fn to_f64(self) -> f64;
    }

    macro_rules! to_f64 {
        ($($kind:ty)*) => {
            $(impl ToF64 for $kind {
                fn to_f64(self) -> f64 {
                    self as f64
                }
            })*
        };
    }

    to_f64!(i8 i16 i32 i64 u8 u16 u32 u64);
}
