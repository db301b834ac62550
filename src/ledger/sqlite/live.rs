//! What is acknowledged and in the log, but not yet merged into its hours: kept counted in memory, shared between
//! the writer and its readers.

use std::cmp::Ordering;
use std::collections::HashMap;

use crate::ledger::Hour;
use crate::tally::{DecodeError, Tally};

/// The streams, and their slots.
#[derive(Debug, Default)]
pub(super) struct Live {
    /// Places by name, and by the number under which the file knows the stream.
    names: HashMap<Box<str>, Place>,
    ids: HashMap<i64, Place>,
    streams: Vec<Stream>,
    /// Places that are free again.
    free: Vec<Place>,
    /// Bytes of memory that the slots take.
    pub(super) bytes: usize,
    pub(super) log_bytes: u64,
    pub(super) singles: usize,
    pub(super) joined: usize,
}

/// Where a stream is kept, until it is removed.
pub(super) type Place = u32;

#[derive(Debug, Default)]
struct Stream {
    id: i64,
    /// In order of time.
    slots: Vec<Slot>,
}

/// The waits of one stream and hour since they were last merged.
#[derive(Clone, Debug)]
pub(super) struct Slot {
    pub(super) hour: Hour,
    /// The log entry that began it. A stored tally that goes through it has these waits in it already.
    pub(super) first: i64,
    pub(super) tally: Tally,
    /// Bytes of memory that it takes.
    pub(super) footprint: usize,
}

/// What a slot takes besides its tally: its places in tables and queue.
const SLOT_BYTES: usize = size_of::<Slot>() + 128;

impl Live {
    /// How many streams there are.
    pub(super) fn len(&self) -> usize {
        self.names.len()
    }

    /// Their names, in no order.
    pub(super) fn names(&self) -> impl Iterator<Item = &str> {
        self.names.keys().map(|name| &**name)
    }

    /// A stream by its name: its place and id.
    pub(super) fn find(&self, name: &str) -> Option<(Place, i64)> {
        self.names.get(name).map(|place| (*place, self.streams[*place as usize].id))
    }

    /// A stream's id by its name.
    pub(super) fn id(&self, name: &str) -> Option<i64> {
        self.find(name).map(|(_, id)| id)
    }

    /// Takes up a stream.
    pub(super) fn insert(&mut self, name: Box<str>, id: i64) -> Place {
        let place = self.place(id);
        self.names.insert(name, place);
        place
    }

    /// The place of an id, a new one if it has none: entries may tell of a stream whose row is broken.
    pub(super) fn place(&mut self, id: i64) -> Place {
        let Live { ids, streams, free, .. } = self;
        *ids.entry(id).or_insert_with(|| {
            let stream = Stream { id, slots: Vec::new() };
            match free.pop() {
                Some(place) => {
                    streams[place as usize] = stream;
                    place
                }
                None => {
                    streams.push(stream);
                    (streams.len() - 1) as Place
                }
            }
        })
    }

    /// Forgets streams that have no slots.
    pub(super) fn forget(&mut self, gone: &[i64]) {
        for id in gone {
            if let Some(place) = self.ids.remove(id) {
                self.names.retain(|_, other| *other != place);
                self.free.push(place);
            }
        }
    }

    /// Adds waits of one log entry; whether they began a slot.
    pub(super) fn add(&mut self, place: Place, hour: Hour, sequence: i64, tally: &Tally) -> bool {
        let (slot, began) = self.slot_for(place, hour, sequence);
        slot.tally.merge(tally);
        let (old, new) = slot.weigh();
        self.bytes = self.bytes + new - old;
        began
    }

    /// The same for a stream by its id, and for a tally that is still in bytes.
    pub(super) fn add_encoded(
        &mut self,
        id: i64,
        hour: Hour,
        sequence: i64,
        tally: &[u8],
    ) -> Result<bool, DecodeError> {
        let place = self.place(id);
        let (slot, began) = self.slot_for(place, hour, sequence);
        slot.tally.merge_encoded(tally)?;
        let (old, new) = slot.weigh();
        self.bytes = self.bytes + new - old;
        Ok(began)
    }

    fn slot_for(&mut self, place: Place, hour: Hour, sequence: i64) -> (&mut Slot, bool) {
        let slots = &mut self.streams[place as usize].slots;
        let (i, began) = match position(slots, hour) {
            Ok(i) => (i, false),
            Err(i) => {
                slots.insert(i, Slot { hour, first: sequence, tally: Tally::default(), footprint: 0 });
                (i, true)
            }
        };
        (&mut slots[i], began)
    }

    /// The slots of a stream in order of time.
    pub(super) fn slots(&self, id: i64) -> &[Slot] {
        self.ids.get(&id).map_or(&[], |place| &self.streams[*place as usize].slots)
    }

    pub(super) fn slot(&self, id: i64, hour: Hour) -> Option<&Slot> {
        let slots = self.slots(id);
        position(slots, hour).ok().map(|i| &slots[i])
    }

    pub(super) fn remove(&mut self, id: i64, hour: Hour) {
        let Some(place) = self.ids.get(&id) else { return };
        let slots = &mut self.streams[*place as usize].slots;
        if let Ok(i) = position(slots, hour) {
            self.bytes -= slots.remove(i).footprint;
        }
        if slots.is_empty() {
            *slots = Vec::new();
        }
    }
}

/// Where the slot of an hour is, or belongs. Waits come in order of time, so it is nearly always the last.
fn position(slots: &[Slot], hour: Hour) -> Result<usize, usize> {
    match slots.last().map(|last| last.hour.cmp(&hour)) {
        None | Some(Ordering::Less) => Err(slots.len()),
        Some(Ordering::Equal) => Ok(slots.len() - 1),
        Some(Ordering::Greater) => slots.binary_search_by_key(&hour, |slot| slot.hour),
    }
}

impl Slot {
    /// Weighs it again: the bytes it took and those it takes.
    fn weigh(&mut self) -> (usize, usize) {
        let old = self.footprint;
        self.footprint = SLOT_BYTES + self.tally.footprint();
        (old, self.footprint)
    }
}
