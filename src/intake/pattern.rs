//! Lines of a log by a regular expression: its named captures are the fields of a record (`elapsed_ms` carries a unit).
//!
//! The expression runs in time linear in the line (no backtracking), and its automata are bounded in size, so that
//! neither the one who writes the pattern nor the one who writes the lines can make it slow.

use std::fmt;

use regex::{CaptureLocations, Regex, RegexBuilder};

use super::Sink;
use super::collect::Collector;
use super::flaw::Flaw;
use super::lines::Lines;
use super::record::{Field, Fields, excerpt};

/// Longest expression, bytes.
const MOST_BYTES: usize = 4096;

/// Most memory of a compiled expression, and of what it remembers while it searches, bytes.
const MOST_MEMORY: usize = 4 << 20;

/// A regular expression whose captures are named after the fields of a record.
///
/// ```
/// use outwait::intake::Pattern;
/// let pattern = Pattern::new(r#""(?:GET|POST) /(?<stream>[a-z.]+) [^"]*" (?<ending>\d{3}) (?<elapsed_ms>\S+)$"#)?;
/// assert_eq!(Pattern::new("(?<took>.*)").unwrap_err().to_string(), "a capture is called \"took\", which is no field");
/// # let _ = pattern;
/// # Ok::<(), outwait::intake::PatternError>(())
/// ```
#[derive(Clone)]
pub struct Pattern {
    regex: Regex,
    /// Group, field, and how many of its units make a second if the name says.
    captures: Vec<(usize, Field, Option<f64>)>,
}

impl Pattern {
    /// Compiles an expression and looks at the names of its captures.
    ///
    /// # Errors
    /// [`PatternError`] if it is none, too large, or its captures make no record.
    pub fn new(expression: &str) -> Result<Pattern, PatternError> {
        if expression.len() > MOST_BYTES {
            return Err(PatternError::Long);
        }
        let regex = RegexBuilder::new(expression).size_limit(MOST_MEMORY).dfa_size_limit(MOST_MEMORY).build();
        let regex = regex.map_err(|error| PatternError::Expression { reason: error.to_string() })?;
        let mut captures: Vec<(usize, Field, Option<f64>)> = Vec::new();
        for (group, name) in regex.capture_names().enumerate() {
            let Some(name) = name else { continue };
            let found =
                Field::with_unit(name).ok_or_else(|| PatternError::Capture { name: excerpt(name) })?;
            if captures.iter().any(|&(_, field, _)| field == found.0) {
                return Err(PatternError::Twice { field: found.0.name() });
            }
            captures.push((group, found.0, found.1));
        }
        let ages = [Field::Elapsed, Field::Over, Field::Upto, Field::Started, Field::Ended];
        if captures.iter().all(|(_, field, _)| !ages.contains(field)) {
            return Err(PatternError::NoAge);
        }
        Ok(Pattern { regex, captures })
    }

    /// Where captures will stand; made once and refilled for each line.
    pub(super) fn locations(&self) -> CaptureLocations {
        self.regex.capture_locations()
    }

    /// Puts the captures of a line into `fields`; `false` if it does not match. A capture that is empty or `-`, as
    /// access logs write what is missing, is absent.
    pub(super) fn read<'a>(&self, line: &'a str, at: &mut CaptureLocations, fields: &mut Fields<'a>) -> bool {
        fields.clear();
        if self.regex.captures_read(at, line).is_none() {
            return false;
        }
        for &(group, field, unit) in &self.captures {
            let text = at.get(group).and_then(|(from, upto)| line.get(from..upto)).map(str::trim);
            let Some(text) = text.filter(|text| !matches!(*text, "" | "-")) else { continue };
            match unit {
                None => fields.set_figures(field, text),
                Some(per_second) => fields.set_text_in_unit(field, text, per_second),
            }
        }
        true
    }
}

impl PartialEq for Pattern {
    fn eq(&self, other: &Pattern) -> bool {
        self.regex.as_str() == other.regex.as_str()
    }
}

impl fmt::Debug for Pattern {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "Pattern({:?})", self.regex.as_str())
    }
}

/// Reads a block of whole lines.
pub(super) fn harvest<S: Sink>(block: &[u8], pattern: &Pattern, collector: &mut Collector<'_, S>) {
    let mut lines = Lines::new(block, collector.line_limit());
    let (mut fields, mut at) = (Fields::new(), pattern.locations());
    for (number, line) in lines.by_ref() {
        let outcome = line.and_then(|line| match pattern.read(line.trim_end(), &mut at, &mut fields) {
            true => collector.record(number, &fields),
            false => Err(Flaw::Unlike { text: excerpt(line) }),
        });
        if let Err(flaw) = outcome {
            collector.refuse(number, flaw);
        }
    }
    collector.count_lines(lines.number());
}

/// Why a pattern cannot be used.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum PatternError {
    /// Above 4096 bytes.
    #[error("it is longer than {MOST_BYTES} bytes")]
    Long,
    /// Not a regular expression, or one that takes too much memory.
    #[error("{reason}")]
    Expression {
        /// What the compiler says.
        reason: String,
    },
    /// A capture with a name that no field has.
    #[error("a capture is called {name:?}, which is no field")]
    Capture {
        /// The name.
        name: String,
    },
    /// Two captures for one field.
    #[error("two captures are for the field `{field}`; keep one of them")]
    Twice {
        /// The field.
        field: &'static str,
    },
    /// Nothing tells how long the wait was.
    #[error(
        "no capture tells how long the wait was; name one (?<elapsed>…), (?<elapsed_ms>…), (?<started>…) or (?<ended>…)"
    )]
    NoAge,
}
