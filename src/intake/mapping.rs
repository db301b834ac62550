//! How records that were not written for us say what ours say: other names, other endings, other times.

use jiff::fmt::strtime::{self, BrokenDownTime};
use jiff::tz::Offset;

use super::flaw::Flaw;
use super::record::{Field, Fields, excerpt};
use crate::glob::Glob;
use crate::wait::Ending;

/// Most columns, and most rules of endings, that one mapping may hold.
const MOST: usize = 64;

/// Longest text that a mapping is read from, bytes.
const MOST_BYTES: usize = 4096;

/// What stands for what in an input whose names, endings or times are not ours.
///
/// ```
/// use outwait::intake::Mapping;
/// let mapping = Mapping::default()
///     .with_columns("elapsed=duration_ms:ms,at=ts,stream=service")?
///     .with_endings("499=gave_up,5??=failed,*=done")?
///     .with_time_format("%d/%b/%Y:%H:%M:%S %z")?;
/// assert!(Mapping::default().with_columns("elapsed=took:parsecs").is_err());
/// # let _ = mapping;
/// # Ok::<(), outwait::intake::MappingError>(())
/// ```
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Mapping {
    columns: Vec<Column>,
    endings: Vec<(Glob, Ending)>,
    time_format: Option<Box<str>>,
}

#[derive(Clone, Debug, PartialEq)]
struct Column {
    name: Box<str>,
    field: Field,
    per_second: Option<f64>,
}

impl Mapping {
    /// Columns by the fields they hold: `FIELD=COLUMN[:UNIT],…`, with a unit s, ms, us or ns for ages and times in
    /// figures. A column that is not named keeps its meaning if it is called like a field.
    ///
    /// # Errors
    /// [`MappingError`] for a text of another form, an unknown field or unit, or a field named twice.
    pub fn with_columns(mut self, text: &str) -> Result<Mapping, MappingError> {
        for part in parts(text)? {
            let refuse = || MappingError::Column { text: excerpt(part) };
            let (field, column) = part.split_once('=').ok_or_else(refuse)?;
            let field = field.trim();
            let field = Field::of(field).ok_or_else(|| MappingError::Field { name: excerpt(field) })?;
            let (name, per_second) = match column.rsplit_once(':') {
                None => (column, None),
                Some((name, unit)) => {
                    let per_second = field.per_second(unit.trim());
                    let refuse = || MappingError::Unit { unit: excerpt(unit), field: field.name() };
                    (name, Some(per_second.ok_or_else(refuse)?))
                }
            };
            let name = name.trim();
            if name.is_empty() {
                return Err(refuse());
            }
            if self.claims(field) {
                return Err(MappingError::Twice { field: field.name() });
            }
            self.columns.push(Column { name: name.into(), field, per_second });
        }
        Ok(self)
    }

    /// Endings by what stands in their place, a status for instance: `GLOB=ENDING,…`; the first that matches counts.
    ///
    /// # Errors
    /// [`MappingError`] for a text of another form, or an unknown ending.
    pub fn with_endings(mut self, text: &str) -> Result<Mapping, MappingError> {
        for part in parts(text)? {
            let refuse = || MappingError::Ending { text: excerpt(part) };
            let (glob, ending) = part.split_once('=').ok_or_else(refuse)?;
            let glob = Glob::new(glob.trim()).map_err(|_| refuse())?;
            self.endings.push((glob, Ending::parse(ending.trim()).ok_or_else(refuse)?));
        }
        Ok(self)
    }

    /// How times in words are written, in the letters of `strftime`; those without an offset are UTC.
    ///
    /// # Errors
    /// [`MappingError::TimeFormat`] unless it tells a day and a time of day, and can be read back.
    pub fn with_time_format(mut self, format: &str) -> Result<Mapping, MappingError> {
        // Written and read back once, so that what can never be read is refused before the first line.
        let sample = jiff::Timestamp::UNIX_EPOCH.to_zoned_datetime(jiff::tz::TimeZone::UTC);
        let sound = format.len() <= MOST_BYTES
            && strtime::format(format, &sample).is_ok_and(|text| moment(format, &text) == Some(0.0));
        if !sound {
            return Err(MappingError::TimeFormat { format: excerpt(format) });
        }
        self.time_format = Some(format.into());
        Ok(self)
    }

    /// Both together; where both tell the form of times, the other's counts.
    pub fn and(mut self, other: Mapping) -> Mapping {
        self.columns.extend(other.columns);
        self.endings.extend(other.endings);
        self.time_format = other.time_format.or(self.time_format);
        self
    }

    /// The field that a column holds, and how many of its units make a second if that is said.
    pub(super) fn field(&self, column: &str) -> Option<(Field, Option<f64>)> {
        match self.columns.iter().find(|mapped| *mapped.name == *column) {
            Some(mapped) => Some((mapped.field, mapped.per_second)),
            None => Field::with_unit(column).filter(|&(field, _)| !self.claims(field)),
        }
    }

    /// Whether a field has a column here.
    fn claims(&self, field: Field) -> bool {
        self.columns.iter().any(|mapped| mapped.field == field)
    }

    /// The columns it names.
    pub(super) fn columns(&self) -> impl Iterator<Item = &str> {
        self.columns.iter().map(|mapped| &*mapped.name)
    }

    /// Puts our ending in the place of another's, and numbers in the place of times.
    pub(super) fn settle(&self, fields: &mut Fields<'_>) -> Result<(), Flaw> {
        if !self.endings.is_empty()
            && let Some(text) = fields.plain(Field::Ending)
        {
            match self.endings.iter().find(|(glob, _)| glob.matches(&text)) {
                Some((_, ending)) => fields.set_text(Field::Ending, ending.name()),
                None => return Err(Flaw::Ending { text: excerpt(&text) }),
            }
        }
        if let Some(format) = &self.time_format {
            for field in [Field::At, Field::Started, Field::Ended] {
                if let Some(text) = fields.as_text(field) {
                    let time = moment(format, text.trim());
                    let time = time.ok_or_else(|| Flaw::Time { field, text: excerpt(text) })?;
                    fields.turn_into_number(field, time);
                }
            }
        }
        Ok(())
    }
}

fn parts(text: &str) -> Result<impl Iterator<Item = &str>, MappingError> {
    let parts = || text.split(',').map(str::trim).filter(|part| !part.is_empty());
    match parts().count() {
        0 => Err(MappingError::Empty),
        1..=MOST if text.len() <= MOST_BYTES => Ok(parts()),
        _ => Err(MappingError::Long),
    }
}

/// Unix seconds.
fn moment(format: &str, text: &str) -> Option<f64> {
    let parsed = BrokenDownTime::parse(format, text).ok()?;
    let time = match parsed.to_timestamp() {
        Ok(time) => time,
        Err(_) if parsed.offset().is_none() => Offset::UTC.to_timestamp(parsed.to_datetime().ok()?).ok()?,
        Err(_) => return None,
    };
    Some(time.as_second() as f64 + f64::from(time.subsec_nanosecond()) / 1e9)
}

/// Why a mapping cannot be used.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum MappingError {
    /// Nothing stands there.
    #[error("it is empty; write FIELD=COLUMN, several with commas between them")]
    Empty,
    /// Too many rules, or too long a text.
    #[error("it is too long: at most {MOST} rules in {MOST_BYTES} bytes")]
    Long,
    /// Not of the form FIELD=COLUMN.
    #[error("{text:?} is not FIELD=COLUMN or FIELD=COLUMN:UNIT")]
    Column {
        /// The part at fault.
        text: String,
    },
    /// No such field.
    #[error(
        "{name:?} is not a field; the fields are stream, elapsed, ending, at, attempt, id, entered, count, over, upto, started and ended"
    )]
    Field {
        /// What stands there.
        name: String,
    },
    /// No such unit, or a field that has none.
    #[error("{unit:?} is not a unit of `{field}`; ages and times have s, ms, us and ns, other fields none")]
    Unit {
        /// What stands there.
        unit: String,
        /// The field.
        field: &'static str,
    },
    /// A field has two columns.
    #[error("the field `{field}` has two columns; keep one of them")]
    Twice {
        /// The field.
        field: &'static str,
    },
    /// Not of the form GLOB=ENDING.
    #[error(
        "{text:?} is not GLOB=ENDING; endings are done, failed, gave_up and waiting, and in a glob `*` is any run of characters and `?` one"
    )]
    Ending {
        /// The part at fault.
        text: String,
    },
    /// A form of time that cannot be read.
    #[error(
        "{format:?} is not a form of time: write a day and a time of day in the letters of strftime, such as %d/%b/%Y:%H:%M:%S %z"
    )]
    TimeFormat {
        /// What stands there.
        format: String,
    },
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn times_in_the_common_log_format() {
        // The example of the Apache HTTP Server's documentation of its common log format: 10/Oct/2000:13:55:36 -0700.
        // `date -u -d '2000-10-10T13:55:36-07:00' +%s` gives 971211336.
        assert_eq!(moment("%d/%b/%Y:%H:%M:%S %z", "10/Oct/2000:13:55:36 -0700"), Some(971_211_336.0));
        assert_eq!(moment("%Y-%m-%d %H:%M:%S%.f", "2000-10-10 20:55:36.25"), Some(971_211_336.25));
        for wrong in ["%H:%M", "%Q", "noon", ""] {
            assert!(Mapping::default().with_time_format(wrong).is_err(), "{wrong}");
        }
    }

    #[test]
    fn what_cannot_be_meant_is_refused() {
        let columns = |text| Mapping::default().with_columns(text).map(|_| ());
        assert_eq!(columns("elapsed"), Err(MappingError::Column { text: "elapsed".into() }));
        assert_eq!(columns("took=a"), Err(MappingError::Field { name: "took".into() }));
        assert_eq!(columns("id=a:ms"), Err(MappingError::Unit { unit: "ms".into(), field: "id" }));
        assert_eq!(columns("at=a,at=b"), Err(MappingError::Twice { field: "at" }));
        assert_eq!(columns(" , "), Err(MappingError::Empty));
        assert_eq!(columns(&"at=a,".repeat(2_000)), Err(MappingError::Long));
        assert!(Mapping::default().with_endings("5??=broken").is_err());
        let mapping = Mapping::default().with_columns("elapsed=t:ms,at=elapsed").unwrap();
        assert_eq!(mapping.field("t"), Some((Field::Elapsed, Some(1e3))));
        assert_eq!(mapping.field("elapsed"), Some((Field::At, None)));
        assert_eq!(mapping.field("elapsed_us"), None);
        assert_eq!(mapping.field("stream"), Some((Field::Stream, None)));
    }
}
