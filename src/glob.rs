//! The one pattern matcher for stream names: `*` stands for any run of characters, `?` for one.

use crate::wait::{MAX_STREAM_BYTES, StreamError, check_stream};
use std::fmt;

/// A checked pattern of stream names. At most [`MAX_STREAM_BYTES`] bytes.
///
/// ```
/// use outwait::glob::Glob;
/// let glob = Glob::new("catalogue.*").unwrap();
/// assert!(glob.matches("catalogue.lookup"));
/// assert!(!glob.matches("scan.job"));
/// assert!(Glob::new("*").unwrap().covers(&glob));
/// ```
#[derive(Clone, Debug, PartialEq, Eq, Hash)]
pub struct Glob {
    pattern: String,
    /// Bytes before the first wildcard; all of them if there is none.
    plain: usize,
}

impl Glob {
    /// Checks a pattern: the characters of stream names, `*` and `?`.
    ///
    /// # Errors
    /// [`GlobError`], for a pattern that no stream name could match.
    pub fn new(pattern: &str) -> Result<Glob, GlobError> {
        if pattern.is_empty() {
            return Err(GlobError::Empty);
        }
        if pattern.len() > MAX_STREAM_BYTES {
            return Err(GlobError::Long { bytes: pattern.len() });
        }
        let letters: String = pattern.chars().filter(|c| !matches!(c, '*' | '?')).collect();
        match check_stream(&letters) {
            Err(StreamError::Letter { letter }) => Err(GlobError::Letter { letter }),
            _ => Ok(Glob::checked(pattern)),
        }
    }

    /// The pattern that matches every name.
    pub fn any() -> Glob {
        Glob::checked("*")
    }

    fn checked(pattern: &str) -> Glob {
        let plain = pattern.find(['*', '?']).unwrap_or(pattern.len());
        Glob { pattern: pattern.to_owned(), plain }
    }

    /// The pattern as written.
    pub fn as_str(&self) -> &str {
        &self.pattern
    }

    /// The one name that it matches, if it has no wildcard.
    pub fn literal(&self) -> Option<&str> {
        (self.plain == self.pattern.len()).then_some(&self.pattern)
    }

    /// Whether the whole of `name` fits. Linear in the name for a pattern with one `*`, and never more than the
    /// product of the two lengths.
    pub fn matches(&self, name: &str) -> bool {
        let (plain, rest) = self.pattern.split_at(self.plain);
        name.strip_prefix(plain).is_some_and(|name| fits(rest, name))
    }

    /// Whether it matches all that `other` matches. A `true` is certain; a `false` may be wrong for patterns that
    /// mix `*` and `?` side by side (`*?` against `?*`).
    pub fn covers(&self, other: &Glob) -> bool {
        // The other's `*` is a letter that only a `*` can take: no stream name contains it.
        self.matches(&other.pattern)
    }
}

impl fmt::Display for Glob {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.pattern)
    }
}

/// Greedy match that only ever goes back to the last `*`: what an earlier one took need not be reconsidered,
/// since the last can take any run that follows.
pub(crate) fn fits(pattern: &str, name: &str) -> bool {
    let (mut pattern, mut name) = (pattern.chars(), name.chars());
    // What follows the last `*`, and the rest of the name at which it was last tried.
    let mut last = None;
    loop {
        let mut after = name.clone();
        match (pattern.next(), after.next()) {
            (Some('*'), _) => {
                last = Some((pattern.clone(), name.clone()));
                continue;
            }
            (Some(want), Some(have)) if want == have || (want == '?' && have != '*') => {
                name = after;
                continue;
            }
            (None, None) => return true,
            _ => {}
        }
        let Some((rest, from)) = &mut last else { return false };
        if from.next().is_none() {
            return false;
        }
        (pattern, name) = (rest.clone(), from.clone());
    }
}

/// Why a pattern was refused.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum GlobError {
    /// No pattern at all.
    #[error("is empty and matches no stream")]
    Empty,
    /// Longer than any stream name.
    #[error("has {bytes} bytes, more than the 200 of the longest stream name")]
    Long {
        /// Its length.
        bytes: usize,
    },
    /// A character that no stream name holds.
    #[error("holds {letter:?}, which no stream name does")]
    Letter {
        /// The first such character.
        letter: char,
    },
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn whole_names() {
        for (pattern, name, fit) in [
            ("*", "", true),
            ("a", "a", true),
            ("a", "ab", false),
            ("a*", "a", true),
            ("a*b*c", "a1b2b3c", true),
            ("a*b*c", "a1b2b3", false),
            ("?", "", false),
            ("?", "é", true),
            ("c?t.*", "cat.x", true),
            ("*.job", "scan.job.old", false),
            ("**", "x", true),
        ] {
            assert_eq!(Glob::new(pattern).unwrap().matches(name), fit, "{pattern} {name}");
        }
        assert_eq!(Glob::new(""), Err(GlobError::Empty));
        assert_eq!(Glob::new("[ab]"), Err(GlobError::Letter { letter: '[' }));
        assert!(Glob::new(&"?".repeat(201)).is_err());
        assert_eq!(Glob::new("scan.job").unwrap().literal(), Some("scan.job"));
        assert_eq!(Glob::new("scan.?").unwrap().literal(), None);
    }

    /// The definition, by recursion over every run that a `*` could take.
    fn plain(pattern: &[char], name: &[char]) -> bool {
        match (pattern, name) {
            ([], []) => true,
            (['*', rest @ ..], _) => (0..=name.len()).any(|n| plain(rest, &name[n..])),
            (['?', p @ ..], [_, n @ ..]) => plain(p, n),
            ([a, p @ ..], [b, n @ ..]) => a == b && plain(p, n),
            _ => false,
        }
    }

    proptest! {
        #[test]
        fn agrees_with_the_definition(pattern in "[ab*?]{1,8}", name in "[ab]{0,10}") {
            let (p, n): (Vec<char>, Vec<char>) = (pattern.chars().collect(), name.chars().collect());
            prop_assert_eq!(Glob::new(&pattern).unwrap().matches(&name), plain(&p, &n));
        }

        #[test]
        fn covers_is_never_wrongly_true(a in "[ab*?]{1,5}", b in "[ab*?]{1,5}", name in "[ab]{0,7}") {
            let (a, b) = (Glob::new(&a).unwrap(), Glob::new(&b).unwrap());
            prop_assert!(!(a.covers(&b) && b.matches(&name)) || a.matches(&name));
        }
    }
}
