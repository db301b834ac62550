//! Lines of a log by a pattern, a journal's entries, and other people's names: the first line is the pattern, the second
//! the mapping, the rest the log.
#![no_main]

use std::num::NonZeroUsize;

use libfuzzer_sys::fuzz_target;
use outwait::intake::{Allowed, Mapping, Options, Pattern, Record, Sink, Source, read};

struct Nothing;

impl Sink for Nothing {
    fn take(&mut self, _: &Record<'_>) {}
    fn fork(&self) -> Self {
        Nothing
    }
    fn absorb(&mut self, _: Self) {}
}

fuzz_target!(|text: &str| {
    let mut parts = text.splitn(3, '\n');
    let (pattern, mapping) = (parts.next().unwrap_or_default(), parts.next().unwrap_or_default());
    let options = Options {
        pattern: Pattern::new(pattern).ok().map(Into::into),
        mapping: Mapping::default().with_columns(mapping).ok().map(Into::into),
        bad_lines: Allowed::All,
        threads: NonZeroUsize::new(1),
        line_bytes: 4_096,
        most_open: 8,
        ..Options::default()
    };
    let log = parts.next().unwrap_or_default().as_bytes().to_vec();
    let _ = read(vec![Source::reader("log", std::io::Cursor::new(log))], &options, Nothing, &mut |_| ());
});
