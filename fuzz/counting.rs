//! What the targets that read waits do with them.

use std::num::NonZeroUsize;

use outwait::intake::{Allowed, Options, Record, Sink, Source, read};
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

/// Reads bytes on one thread, passing over what is wrong, and counts the rest.
pub fn count(bytes: &[u8], options: Options) {
    let options = Options { bad_lines: Allowed::All, threads: NonZeroUsize::new(1), ..options };
    let source = Source::reader("input", std::io::Cursor::new(bytes.to_vec()));
    let _ = read(vec![source], &options, Counting(Book::default()), &mut |_| ());
}
