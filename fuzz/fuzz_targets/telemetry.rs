//! Telemetry: the first byte says in which form the rest is.
#![no_main]

use std::num::NonZeroUsize;

use libfuzzer_sys::fuzz_target;
use outwait::intake::{Allowed, Format, Options, Record, Sink, Source, read};
use outwait::tally::Book;

struct Counting(Book);

impl Sink for Counting {
    fn take(&mut self, record: &Record<'_>) {
        self.0.add(record.stream, &record.wait).expect("the reader checks names");
    }
    fn fork(&self) -> Self {
        Counting(Book::default())
    }
    fn absorb(&mut self, other: Self) {
        self.0.merge(other.0);
    }
}

fuzz_target!(|bytes: &[u8]| {
    let Some((form, body)) = bytes.split_first() else { return };
    let options = Options {
        format: Some([Format::OtlpTraces, Format::OtlpMetrics, Format::MetricsText][usize::from(form % 3)]),
        bad_lines: Allowed::All,
        threads: NonZeroUsize::new(1),
        total_bytes: 1 << 20,
        ..Options::default()
    };
    let source = Source::reader("body", std::io::Cursor::new(body.to_vec()));
    let _ = read(vec![source], &options, Counting(Book::default()), &mut |_| ());
});
