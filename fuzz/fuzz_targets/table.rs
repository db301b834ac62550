//! Tables in columns: Parquet, Arrow files and streams. A start with the files of tests/reference/columns helps.
#![no_main]

use std::num::NonZeroUsize;

use libfuzzer_sys::fuzz_target;
use outwait::intake::{Allowed, Format, Options, Record, Sink, Source, read};

struct Nothing;

impl Sink for Nothing {
    fn take(&mut self, _: &Record<'_>) {}
    fn fork(&self) -> Self {
        Nothing
    }
    fn absorb(&mut self, _: Self) {}
}

fuzz_target!(|bytes: &[u8]| {
    for format in [Format::Parquet, Format::Arrow] {
        let options = Options {
            format: Some(format),
            bad_lines: Allowed::All,
            threads: NonZeroUsize::new(1),
            total_bytes: 1 << 20,
            ..Options::default()
        };
        let source = Source::reader("table", std::io::Cursor::new(bytes.to_vec()));
        let _ = read(vec![source], &options, Nothing, &mut |_| ());
    }
});
