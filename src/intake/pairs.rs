//! Starts and ends of waits that come in lines of their own, tied by stream, `id` and `attempt`.
//!
//! Either half may come first, and the other as late as it likes. Only halves that miss the other are kept, so memory
//! grows with the waits that are open at once, not with the file; and of these there are at most so many. Above that
//! the oldest end without a start goes first, since it says nothing by itself; without one the oldest start becomes
//! what it is so far, a wait still open. Both are counted.

use std::collections::{HashMap, VecDeque};
use std::rc::Rc;

use super::flaw::Flaw;
use super::record::{Field, Half, Record, Side, between_times, excerpt};
use crate::wait::{Ending, Wait};

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
#[derive(Debug)]
pub(super) struct Pairs {
    open: HashMap<Rc<str>, Open>,
    /// The same in the order of their arrival, starts and ends apart; those that have met the other half since stand
    /// here until they come to the front, or until there are as many as of those that have not.
    starts: Order,
    ends: Order,
    key: String,
    arrived: u64,
    most: usize,
    /// The newest time of any half so far, Unix seconds.
    newest: f64,
    /// Pairs that became one wait.
    pub(super) joined: u64,
    /// Ends dropped for want of room, and starts that became waits still open.
    pub(super) dropped: u64,
    pub(super) let_go: u64,
    /// Starts that had to go when they were the newest time of all, and so say nothing.
    pub(super) unseen: u64,
}

type Order = VecDeque<(u64, Rc<str>)>;

#[derive(Clone, Copy, Debug)]
struct Open {
    side: Side,
    time: f64,
    entered: f64,
    /// Order of arrival, so that what is left comes out in the order of the files.
    arrived: u64,
}

impl Pairs {
    /// With room for so many halves that miss the other.
    pub(super) fn new(most: usize) -> Pairs {
        Pairs {
            open: HashMap::new(),
            starts: Order::new(),
            ends: Order::new(),
            key: String::new(),
            arrived: 0,
            most,
            newest: f64::NEG_INFINITY,
            joined: 0,
            dropped: 0,
            let_go: 0,
            unseen: 0,
        }
    }

    /// Joins the halves of a block with what is open, and hands on each wait that became whole, or why it is none.
    pub(super) fn settle(&mut self, halves: &Halves, mut take: impl FnMut(u64, Result<Record<'_>, Flaw>)) {
        for (line, half) in halves.iter() {
            write_key(&mut self.key, &half);
            self.newest = self.newest.max(half.time);
            let Some(other) = self.open.get(self.key.as_str()).copied() else {
                let open =
                    Open { side: half.side, time: half.time, entered: half.entered, arrived: self.arrived };
                let key: Rc<str> = self.key.as_str().into();
                let place = (self.arrived, Rc::clone(&key));
                self.order(half.side).push_back(place);
                self.open.insert(key, open);
                self.arrived += 1;
                if self.open.len() > self.most {
                    self.make_room(&mut |record| take(line, Ok(record)));
                }
                self.sweep();
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

    fn order(&mut self, side: Side) -> &mut Order {
        match side {
            Side::Start => &mut self.starts,
            Side::End(_) => &mut self.ends,
        }
    }

    /// Parts with one half: the oldest end, or else the oldest start.
    fn make_room(&mut self, take: &mut dyn FnMut(Record<'_>)) {
        if let Some((key, _)) = oldest(&mut self.ends, &self.open) {
            self.open.remove(&key);
            self.dropped += 1;
        } else if let Some((key, open)) = oldest(&mut self.starts, &self.open) {
            self.open.remove(&key);
            let (stream, attempt, id) = read_key(&key);
            if let Some(wait) = open.still_waiting(self.newest, attempt) {
                self.let_go += 1;
                take(Record { stream, place: 0, id: Some(id), wait });
            } else {
                self.unseen += 1;
            }
        }
    }

    /// Forgets the places of halves that have met the other, before they outnumber the rest.
    fn sweep(&mut self) {
        if self.starts.len() + self.ends.len() > 2 * self.open.len() + 1024 {
            let open = &self.open;
            for order in [&mut self.starts, &mut self.ends] {
                order.retain(|(arrived, key)| stands(open, *arrived, key));
            }
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
                    let wait = open.still_waiting(seen, attempt);
                    start(wait.map(|wait| Record { stream, place: 0, id: Some(id), wait }));
                }
            }
        }
    }
}

impl Open {
    /// A start as a wait still open at `seen`, Unix seconds; `None` where that is not after its start.
    fn still_waiting(&self, seen: f64, attempt: u32) -> Option<Wait> {
        let wait = between_times(self.time, seen, Ending::Waiting).ok()?;
        wait.with_attempt(attempt).ok()?.with_entered(self.entered).ok()
    }
}

/// Takes from the front of an order until there is a half that has not met the other.
fn oldest(order: &mut Order, open: &HashMap<Rc<str>, Open>) -> Option<(Rc<str>, Open)> {
    loop {
        let (arrived, key) = order.pop_front()?;
        if stands(open, arrived, &key) {
            return open.get(&key).map(|open| (key, *open));
        }
    }
}

/// Whether the half that arrived then still misses the other.
fn stands(open: &HashMap<Rc<str>, Open>, arrived: u64, key: &Rc<str>) -> bool {
    open.get(key).is_some_and(|open| open.arrived == arrived)
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
