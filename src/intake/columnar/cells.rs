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
use arrow_array::{Array, ArrayRef, ArrowPrimitiveType, LargeStringArray, StringArray, StringViewArray};
use arrow_buffer::NullBuffer;
use arrow_schema::{DataType, TimeUnit};
use foldhash::fast::RandomState;

use super::ColumnsError;
use super::names;
use crate::intake::record::{Field, Fields};

/// Whether values of a type can be those of a field.
pub(super) fn can_hold(kind: &DataType, field: Field) -> bool {
    use DataType::*;
    match kind {
        Null | Utf8 | LargeUtf8 | Utf8View => true,
        Dictionary(_, values) => matches!(**values, Utf8 | LargeUtf8 | Utf8View),
        Int8 | Int16 | Int32 | Int64 | UInt8 | UInt16 | UInt32 | UInt64 => true,
        Float32 | Float64 | Decimal128(..) => field.is_number(),
        Timestamp(..) | Date32 | Date64 => field.is_time(),
        Duration(_) => field.is_duration(),
        Boolean => field == Field::Ending,
        _ => false,
    }
}

/// Seconds of a time or duration in whole numbers of a unit. Later is never less, so bounds become bounds.
pub(super) fn seconds(value: i64, unit: TimeUnit) -> f64 {
    match unit {
        TimeUnit::Second => value as f64,
        TimeUnit::Millisecond => parts::<1_000>(value),
        TimeUnit::Microsecond => parts::<1_000_000>(value),
        TimeUnit::Nanosecond => parts::<1_000_000_000>(value),
    }
}

/// Seconds of so many parts of one. The compiler knows the divisor, and need not divide.
#[inline(always)]
fn parts<const PER_SECOND: i64>(value: i64) -> f64 {
    value.div_euclid(PER_SECOND) as f64 + value.rem_euclid(PER_SECOND) as f64 / PER_SECOND as f64
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
    Text(&'a StringArray),
    LargeText(&'a LargeStringArray),
    TextView(&'a StringViewArray),
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

    /// Puts a row's value into the fields; nothing where there is none.
    #[inline]
    pub(super) fn set(&'a self, row: usize, fields: &mut Fields<'a>) {
        if self.is_missing(row) {
            return;
        }
        match &self.values {
            Values::Nothing => {}
            Values::Numbers(numbers) => fields.set_number(self.field, numbers[row]),
            Values::Seconds(seconds) => fields.set_number_in_unit(self.field, seconds[row], 1.0),
            texts => match texts.text(row) {
                Some(text) if !text.is_empty() => match self.unit {
                    None => fields.set_figures(self.field, text),
                    Some(per_second) => fields.set_text_in_unit(self.field, text, per_second),
                },
                _ => {}
            },
        }
    }

    /// The numbers of all rows, those of missing ones too, and whether their unit is known.
    pub(super) fn numbers(&self) -> Option<(&[f64], bool)> {
        match &self.values {
            Values::Numbers(numbers) => Some((numbers, false)),
            Values::Seconds(seconds) => Some((seconds, true)),
            _ => None,
        }
    }

    /// What the text of each row stands for, those of missing ones too.
    pub(super) fn names<T: Copy>(&'a self, find: impl FnMut(&'a str) -> T) -> Option<Vec<T>> {
        Some(match &self.values {
            Values::Nothing | Values::Numbers(_) | Values::Seconds(_) => return None,
            Values::Text(texts) => names::of_each(texts.len(), |row| texts.value(row), find),
            Values::LargeText(texts) => names::of_each(texts.len(), |row| texts.value(row), find),
            Values::TextView(texts) => names::of_each(texts.len(), |row| texts.value(row), find),
            Values::Coded(places, texts) => {
                names::of_each_place(places, |place| texts.text(place).unwrap_or_default(), find)
            }
            texts @ Values::Figures(figures) => {
                names::of_each(figures.len(), |row| texts.text(row).unwrap_or_default(), find)
            }
            texts @ Values::Flags(flags) => {
                names::of_each(flags.len(), |row| texts.text(row).unwrap_or_default(), find)
            }
        })
    }

    /// The text of a row.
    #[inline]
    pub(super) fn text(&self, row: usize) -> Option<&str> {
        self.values.text(row)
    }
}

impl<'a> Values<'a> {
    /// `None` for a type that [`can_hold`] refuses.
    fn of(array: &'a dyn Array, field: Field) -> Option<Values<'a>> {
        use TimeUnit::*;
        Some(match array.data_type() {
            DataType::Null => Values::Nothing,
            DataType::Utf8 => Values::Text(array.as_string_opt()?),
            DataType::LargeUtf8 => Values::LargeText(array.as_string_opt()?),
            DataType::Utf8View => Values::TextView(array.as_string_view_opt()?),
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
    fn text(&self, row: usize) -> Option<&str> {
        match self {
            Values::Text(texts) => Some(texts.value(row)),
            Values::LargeText(texts) => Some(texts.value(row)),
            Values::TextView(texts) => Some(texts.value(row)),
            Values::Coded(places, texts) => texts.text(*places.get(row)?),
            Values::Figures(figures) => figures.get(row).map(String::as_str),
            Values::Flags(flags) => flags.get(row).map(|flag| if *flag { "true" } else { "false" }),
            Values::Nothing | Values::Numbers(_) | Values::Seconds(_) => None,
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
