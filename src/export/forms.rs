//! An environment file, and metrics text.

use std::collections::BTreeMap;
use std::fmt::Write;

use super::{Export, SAFETY};

/// Two streams whose names become one.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("the streams {a} and {b} would both be written as {name}")]
pub struct ClashError {
    /// One.
    pub a: String,
    /// The other.
    pub b: String,
    /// The name of both.
    pub name: String,
}

/// A stream as a constant's name: capitals, digits and `_`, no digit first.
pub(super) fn constant(stream: &str) -> String {
    let letter = |c: char| if c.is_ascii_alphanumeric() { c.to_ascii_uppercase() } else { '_' };
    let name: String = stream.chars().map(letter).collect();
    if name.starts_with(|c: char| c.is_ascii_digit()) { format!("_{name}") } else { name }
}

/// Lines of `NAME_GIVE_UP_SECONDS=0.4` (`never` where none is set) and `NAME_ATTEMPTS=3` where they are capped, as a shell
/// or a service manager reads them.
///
/// # Errors
/// [`ClashError`]: letters other than `a-z`, `0-9` all become `_`.
pub fn environment(export: &Export) -> Result<String, ClashError> {
    let mut text = format!("# {SAFETY}\n");
    let mut names: BTreeMap<String, &str> = BTreeMap::new();
    for one in &export.streams {
        let name = constant(&one.stream);
        if let Some(other) = names.insert(name.clone(), &one.stream) {
            return Err(ClashError { a: other.to_owned(), b: one.stream.clone(), name });
        }
        let _ = writeln!(text, "\n# {}: {}", one.stream, one.status);
        for caution in &one.cautions {
            let _ = writeln!(text, "# {}: {}", caution.code, caution.text);
        }
        match one.give_up_after_s {
            Some(seconds) => _ = writeln!(text, "{name}_GIVE_UP_SECONDS={seconds}"),
            None => _ = writeln!(text, "{name}_GIVE_UP_SECONDS=never"),
        }
        if let Some(attempts) = one.attempts {
            let _ = writeln!(text, "{name}_ATTEMPTS={attempts}");
        }
    }
    Ok(text)
}

/// Metrics in the text format 0.0.4: `outwait_settled_give_up_seconds` (`+Inf` for never) and
/// `outwait_settled_attempts`, by stream and status.
pub fn metrics(export: &Export) -> String {
    let mut text = format!("# {SAFETY}\n");
    let mut family = |name: &str, help: &str, value: &dyn Fn(&super::Stream) -> Option<String>| {
        let _ = writeln!(text, "# HELP {name} {help}\n# TYPE {name} gauge");
        for one in &export.streams {
            if let Some(value) = value(one) {
                // Names of streams need no escape (letters, digits and . _ - / :), texts of a file may.
                let label = |text: &str| text.replace('\\', "\\\\").replace('"', "\\\"").replace('\n', "\\n");
                let (stream, status) = (label(&one.stream), label(&one.status));
                let _ = writeln!(text, "{name}{{stream=\"{stream}\",status=\"{status}\"}} {value}");
            }
        }
    };
    family("outwait_settled_give_up_seconds", "When an attempt is given up, as settled.", &|one| {
        Some(one.give_up_after_s.map_or("+Inf".into(), |seconds| seconds.to_string()))
    });
    family("outwait_settled_attempts", "Most attempts of one request.", &|one| {
        one.attempts.map(|attempts| attempts.to_string())
    });
    text
}
