//! Which columns of a table hold which fields, whatever format the table is in.

use super::error::HeaderError;
use super::mapping::Mapping;
use super::record::{Field, excerpt};

/// A column that is used: its place, its field, and how many of its units make a second if its name says.
pub(super) type Used = (usize, Field, Option<f64>);

/// Finds the fields among the names of columns. `named` says whether records without a stream have a name all the same.
///
/// # Errors
/// [`HeaderError`] if a field has two columns, a needed one has none, or a mapped column is not there.
pub(super) fn find<'n>(
    names: impl Iterator<Item = &'n str> + Clone,
    named: bool,
    mapping: Option<&Mapping>,
) -> Result<Vec<Used>, HeaderError> {
    let names = names.map(str::trim);
    let mut used: Vec<Used> = Vec::new();
    for (index, name) in names.clone().enumerate() {
        let lower = name.to_ascii_lowercase();
        let found = match mapping {
            Some(mapping) => mapping.field(name).or_else(|| mapping.field(&lower)),
            None => Field::with_unit(&lower),
        };
        let Some((field, unit)) = found else { continue };
        if used.iter().any(|&(_, other, _)| other == field) {
            return Err(HeaderError::Twice { field: field.name() });
        }
        used.push((index, field, unit));
    }
    let has = |field| used.iter().any(|&(_, other, _)| other == field);
    // The column most like a name, of those that mean nothing else.
    let nearest = |wanted: &str| {
        let likeness = |name: &str| strsim::jaro_winkler(wanted, &name.to_ascii_lowercase());
        names
            .clone()
            .enumerate()
            .filter(|&(index, _)| used.iter().all(|&(other, ..)| other != index))
            .map(|(_, name)| (likeness(name), name))
            .max_by(|a, b| a.0.total_cmp(&b.0))
            .filter(|&(likeness, _)| likeness > 0.0)
            .map(|(_, name)| excerpt(name))
    };
    let there = |column: &str| names.clone().any(|name| name == column);
    if let Some(column) = mapping.and_then(|mapping| mapping.columns().find(|column| !there(column))) {
        return Err(HeaderError::Unmapped { column: excerpt(column), nearest: nearest(column) });
    }
    let needed = match [Field::Over, Field::Upto].map(has) {
        _ if [Field::Elapsed, Field::Started, Field::Ended].into_iter().any(has) => None,
        [true, true] => None,
        [true, false] => Some(Field::Upto),
        [false, true] => Some(Field::Over),
        [false, false] => Some(Field::Elapsed),
    };
    let stream = (!named && !has(Field::Stream)).then_some(Field::Stream);
    match needed.or(stream) {
        Some(field) => Err(HeaderError::Missing { field: field.name(), nearest: nearest(field.name()) }),
        None => Ok(used),
    }
}
