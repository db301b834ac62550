//! Starts and ends of waits that come in lines of their own, tied by stream, `id` and `attempt`.
//!
//! Either half may come first. Only halves that miss the other are kept, so memory grows with the waits that are
//! open at once, not with the file.

use std::collections::HashMap;

use super::flaw::Flaw;
use super::record::{Field, Half, Record, Side, between_times, excerpt};
use crate::wait::Ending;

/// The halves of one block, in order. Names lie end to end in one text: a vector of owned texts would cost two
/// allocations a line.
#[derive(Debug, Default)]
pub(super) struct Halves {
    text: String,
    halves: Vec<Stored>,
}

#[derive(Clone, Copy, Debug)]
struct Stored {
    line: u64,
    /// Where in the text the stream ends and the id begins, and where the id ends.
    stream_end: usize,
    id_end: usize,
    side: Side,
    time: f64,
    attempt: u32,
    entered: f64,
}

impl Halves {
    pub(super) fn push(&mut self, line: u64, half: &Half<'_>) {
        self.text.push_str(half.stream);
        let stream_end = self.text.len();
        self.text.push_str(half.id);
        let id_end = self.text.len();
        let Half { side, time, attempt, entered, .. } = *half;
        self.halves.push(Stored { line, stream_end, id_end, side, time, attempt, entered });
    }

    fn iter(&self) -> impl Iterator<Item = (u64, Half<'_>)> {
        let mut from = 0;
        self.halves.iter().map(move |stored| {
            let stream = self.text.get(from..stored.stream_end).unwrap_or_default();
            let id = self.text.get(stored.stream_end..stored.id_end).unwrap_or_default();
            from = stored.id_end;
            let Stored { side, time, attempt, entered, .. } = *stored;
            (stored.line, Half { stream, id, side, time, attempt, entered })
        })
    }
}

/// Halves that still miss the other, over all files.
#[derive(Debug, Default)]
pub(super) struct Pairs {
    open: HashMap<Box<str>, Open>,
    key: String,
    arrived: u64,
    /// Pairs that became one wait.
    pub(super) joined: u64,
}

#[derive(Clone, Copy, Debug)]
struct Open {
    side: Side,
    time: f64,
    entered: f64,
    /// Order of arrival, so that what is left comes out in the order of the files.
    arrived: u64,
}

impl Pairs {
    /// Joins the halves of a block with what is open, and hands on each wait that became whole, or why it is none.
    pub(super) fn settle(&mut self, halves: &Halves, mut take: impl FnMut(u64, Result<Record<'_>, Flaw>)) {
        for (line, half) in halves.iter() {
            write_key(&mut self.key, &half);
            let Some(other) = self.open.get(self.key.as_str()).copied() else {
                let open =
                    Open { side: half.side, time: half.time, entered: half.entered, arrived: self.arrived };
                self.open.insert(self.key.as_str().into(), open);
                self.arrived += 1;
                continue;
            };
            let (started, ended, ending) = match (half.side, other.side) {
                (Side::Start, Side::End(ending)) => (half.time, other.time, ending),
                (Side::End(ending), Side::Start) => (other.time, half.time, ending),
                (side, _) => {
                    let field = if side == Side::Start { Field::Started } else { Field::Ended };
                    take(line, Err(Flaw::Again { field, id: excerpt(half.id) }));
                    continue;
                }
            };
            self.open.remove(self.key.as_str());
            self.joined += 1;
            let wait = between_times(started, ended, ending).and_then(|wait| {
                Ok(wait.with_attempt(half.attempt)?.with_entered(half.entered.max(other.entered))?)
            });
            take(line, wait.map(|wait| Record { stream: half.stream, place: 0, id: Some(half.id), wait }));
        }
    }

    /// What is left at the end, in the order of arrival: each start as a wait still open at `seen` (Unix seconds),
    /// `None` where that is not after its start; and the ids of ends that never had one.
    pub(super) fn leave(
        self,
        seen: f64,
        mut start: impl FnMut(Option<Record<'_>>),
        mut end: impl FnMut(&str),
    ) {
        let mut open: Vec<_> = self.open.into_iter().collect();
        open.sort_unstable_by_key(|(_, open)| open.arrived);
        for (key, open) in &open {
            let (stream, attempt, id) = read_key(key);
            match open.side {
                Side::End(_) => end(id),
                Side::Start => {
                    let wait = between_times(open.time, seen, Ending::Waiting)
                        .and_then(|wait| Ok(wait.with_attempt(attempt)?.with_entered(open.entered)?));
                    start(wait.ok().map(|wait| Record { stream, place: 0, id: Some(id), wait }));
                }
            }
        }
    }
}

/// Stream, attempt and id as one text: a look-up then needs no allocation. No stream's name holds a zero byte.
fn write_key(key: &mut String, half: &Half<'_>) {
    key.clear();
    key.push_str(half.stream);
    key.push('\0');
    for shift in [24, 16, 8, 0] {
        // Every byte as a character: shorter to read back than figures.
        key.push(char::from((half.attempt >> shift) as u8));
    }
    key.push_str(half.id);
}

fn read_key(key: &str) -> (&str, u32, &str) {
    let (stream, rest) = key.split_once('\0').unwrap_or((key, ""));
    let mut rest = rest.chars();
    let attempt = rest.by_ref().take(4).fold(0, |attempt, byte| attempt << 8 | u32::from(byte));
    (stream, attempt, rest.as_str())
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn keys_read_back(stream in "[a-z.]{1,9}", id in "\\PC{0,9}", attempt in 1u32..) {
            let mut key = String::new();
            write_key(&mut key, &Half { stream: &stream, id: &id, side: Side::Start, time: 0.0, attempt, entered: 0.0 });
            prop_assert_eq!(read_key(&key), (stream.as_str(), attempt, id.as_str()));
        }
    }
}
