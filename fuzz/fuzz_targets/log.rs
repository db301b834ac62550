//! Lines of a log by a pattern, a journal's entries, and other people's names: the first line is the pattern, the second
//! the mapping, the rest the log.
#![no_main]

use libfuzzer_sys::fuzz_target;
use outwait::intake::{Mapping, Options, Pattern};

#[path = "../counting.rs"]
mod counting;

fuzz_target!(|text: &str| {
    let mut parts = text.splitn(3, '\n');
    let (pattern, mapping) = (parts.next().unwrap_or_default(), parts.next().unwrap_or_default());
    let options = Options {
        pattern: Pattern::new(pattern).ok().map(Into::into),
        mapping: Mapping::default().with_columns(mapping).ok().map(Into::into),
        line_bytes: 4_096,
        most_open: 8,
        ..Options::default()
    };
    counting::count(parts.next().unwrap_or_default().as_bytes(), options);
});
