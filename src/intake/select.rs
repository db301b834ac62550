//! Which streams are wanted, and the name of records that have none.

use crate::wait::{StreamError, check_stream};

/// The streams asked for: a plain name, or a pattern with `*` (any characters) and `?` (one character).
///
/// Either way only matching streams are read. A plain name is also the stream of records that have none.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Selector {
    pattern: String,
    plain: bool,
}

impl Selector {
    /// Checks and keeps a name or pattern.
    ///
    /// # Errors
    /// [`StreamError`] when it is empty, longer than [`crate::wait::MAX_STREAM_BYTES`], or holds a character that no name has.
    pub fn new(pattern: &str) -> Result<Selector, StreamError> {
        let plain = !pattern.contains(['*', '?']);
        // A wildcard is checked as if it were a letter.
        check_stream(&pattern.replace(['*', '?'], "x"))?;
        Ok(Selector { pattern: pattern.into(), plain })
    }

    /// The name for records that have none; `None` for a pattern.
    pub fn name(&self) -> Option<&str> {
        self.plain.then_some(&self.pattern)
    }

    /// Whether a stream is wanted.
    pub fn admits(&self, stream: &str) -> bool {
        if self.plain { stream == self.pattern } else { glob(&self.pattern, stream) }
    }
}

/// Whether the pattern covers the whole name: `*` stands for any characters or none, `?` for exactly one.
/// Time at most the product of the lengths.
pub fn glob(pattern: &str, name: &str) -> bool {
    let mut pattern = pattern.chars();
    let mut name = name.chars();
    // Where to take up again after a `*` that has to swallow one character more.
    let mut again = None;
    loop {
        let name_here = name.clone();
        match (pattern.next(), name.next()) {
            (None, None) => return true,
            (Some('*'), _) => {
                name = name_here;
                again = Some((pattern.clone(), name.clone()));
            }
            (Some('?'), Some(_)) => {}
            (Some(wanted), Some(found)) if wanted == found => {}
            _ => {
                let Some((after_star, mut swallowed)) = again else { return false };
                if swallowed.next().is_none() {
                    return false;
                }
                again = Some((after_star.clone(), swallowed.clone()));
                (pattern, name) = (after_star, swallowed);
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn patterns() {
        for (pattern, name, covers) in [
            ("", "", true),
            ("*", "", true),
            ("catalogue.*", "catalogue.lookup", true),
            ("catalogue.*", "catalogue", false),
            ("*.lookup", "catalogue.lookup", true),
            ("*o*o*", "lookout", true),
            ("a*b*c", "abcbc", true),
            ("a*b*c", "abcb", false),
            ("?", "é", true),
            ("??", "a", false),
            ("a?c", "abc", true),
        ] {
            assert_eq!(glob(pattern, name), covers, "{pattern} {name}");
        }
    }

    #[test]
    fn only_a_plain_name_names() {
        let plain = Selector::new("courier.slots").unwrap();
        assert_eq!(plain.name(), Some("courier.slots"));
        assert!(plain.admits("courier.slots") && !plain.admits("courier"));
        assert_eq!(Selector::new("courier.*").unwrap().name(), None);
        assert!(Selector::new("").is_err() && Selector::new("a b*").is_err());
    }

    /// The definition, one branch a character: slow and obvious.
    fn covers(pattern: &[char], name: &[char]) -> bool {
        match (pattern, name) {
            ([], []) => true,
            (['*', rest @ ..], _) => (0..=name.len()).any(|taken| covers(rest, &name[taken..])),
            (['?', p @ ..], [_, n @ ..]) => covers(p, n),
            ([a, p @ ..], [b, n @ ..]) if a == b => covers(p, n),
            _ => false,
        }
    }

    proptest! {
        #[test]
        fn agrees_with_the_definition(pattern in "[ab*?]{0,8}", name in "[ab]{0,10}") {
            let chars = |text: &str| text.chars().collect::<Vec<_>>();
            prop_assert_eq!(glob(&pattern, &name), covers(&chars(&pattern), &chars(&name)));
        }
    }
}
