//! A sink that keeps every record.

use outwait::intake::{Record, Sink};
use outwait::wait::Wait;

/// Stream, id and wait of each.
#[derive(Debug, Default)]
pub(crate) struct Kept(pub(crate) Vec<(String, Option<String>, Wait)>);

impl Sink for Kept {
    fn take(&mut self, record: &Record<'_>) {
        self.0.push((record.stream.into(), record.id.map(String::from), record.wait));
    }
    fn fork(&self) -> Self {
        Kept::default()
    }
    fn absorb(&mut self, other: Self) {
        self.0.extend(other.0);
    }
}
