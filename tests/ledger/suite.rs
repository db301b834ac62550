//! What every ledger does, asked of both: the one in memory and the one on disk.

use std::ops::Range;
use std::path::Path;

use outwait::ledger::{
    Batch, BatchError, Digest, Entry, Hour, Ledger, MAX_ID_BYTES, MAX_KEY_BYTES, MemoryLedger, Options,
    Period, Record, Shelf, SqliteLedger, Tie, export,
};
use outwait::running::{Histogram, Running, SeriesKey};
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};
use tempfile::TempDir;

use crate::made::{DAY, HOUR, NOON};

pub(crate) const EVER: Range<Hour> = Hour(i32::MIN)..Hour(i32::MAX);

/// A ledger that can be closed and opened again.
pub(crate) enum House {
    Memory(MemoryLedger),
    Disk { ledger: Option<Box<SqliteLedger>>, folder: TempDir, options: Options },
}

impl House {
    pub(crate) fn disk(options: Options) -> House {
        let folder = tempfile::tempdir().unwrap();
        let ledger = Some(Box::new(SqliteLedger::open(folder.path(), options.clone()).unwrap()));
        House::Disk { ledger, folder, options }
    }

    fn both(options: &Options) -> [House; 2] {
        [House::Memory(MemoryLedger::new(options.clone())), House::disk(options.clone())]
    }

    pub(crate) fn ledger(&mut self) -> &mut dyn Ledger {
        match self {
            House::Memory(ledger) => ledger,
            House::Disk { ledger, .. } => &mut **ledger.as_mut().unwrap(),
        }
    }

    /// Forgets all that is in memory, if there is a disk to read it from again.
    pub(crate) fn reopen(&mut self) {
        if let House::Disk { ledger, folder, options } = self {
            drop(ledger.take());
            *ledger = Some(Box::new(SqliteLedger::open(folder.path(), options.clone()).unwrap()));
        }
    }

    pub(crate) fn folder(&self) -> &Path {
        match self {
            House::Memory(_) => panic!("a ledger in memory has no folder"),
            House::Disk { folder, .. } => folder.path(),
        }
    }

    fn commit(&mut self, batch: Batch, now: f64) -> Result<Entry, BatchError> {
        self.ledger().commit(&[batch], now).unwrap().batches.remove(0)
    }

    /// Upkeep until there is no more to do.
    pub(crate) fn maintain(&mut self, now: f64) {
        while self.ledger().maintain(now).unwrap().more {}
    }

    /// Runs from one time to another with the upkeep of a daemon, once in ten minutes.
    fn run(&mut self, from: f64, to: f64) {
        let mut now = from;
        while now < to {
            now = (now + 600.0).min(to);
            self.ledger().maintain(now).unwrap();
        }
        self.maintain(to);
    }

    fn count(&mut self, stream: &str) -> u64 {
        self.ledger().window(stream, EVER).unwrap().tally.counts().iter().sum()
    }
}

pub(crate) fn done(age: f64, at: f64) -> Wait {
    Wait::new(age, Ending::Done).unwrap().with_at(at).unwrap()
}

fn one(stream: &str, age: f64, at: f64) -> Batch {
    let mut batch = Batch::default();
    batch.add(stream, &done(age, at), at).unwrap();
    batch
}

fn keyed(key: &str, content: &str, stream: &str) -> Batch {
    let mut batch = Batch::keyed(key, Digest::of(content.as_bytes())).unwrap();
    batch.add(stream, &done(1.0, NOON), NOON).unwrap();
    batch
}

const LOAN: Tie<'_> = Tie { stream: "branch.loan", id: "l-1", attempt: 1 };

fn start(tie: Tie<'_>, at: f64) -> Batch {
    let mut batch = Batch::default();
    batch.start(tie, at, 0.0).unwrap();
    batch
}

fn end(tie: Tie<'_>, at: f64) -> Batch {
    let mut batch = Batch::default();
    batch.end(tie, at, Ending::Done).unwrap();
    batch
}

#[test]
fn waits_are_filed_by_stream_and_hour() {
    for mut house in House::both(&Options::default()) {
        let mut batch = one("a", 1.0, NOON);
        batch.add("a", &done(2.0, NOON + HOUR), NOON).unwrap();
        // Without a time of its own a wait is filed under the present.
        batch.add("b", &Wait::new(3.0, Ending::GaveUp).unwrap(), NOON).unwrap();
        assert_eq!(batch.waits(), 3);
        house.commit(batch, NOON).unwrap();
        for _ in 0..2 {
            let ledger = house.ledger();
            assert_eq!(ledger.streams().unwrap(), ["a", "b"]);
            let noon = Hour::of(NOON);
            let first = ledger.window("a", noon..Hour(noon.0 + 1)).unwrap();
            assert_eq!((first.tally.counts()[0], first.lag_s), (1, 0.0));
            assert_eq!(first.hours, noon..Hour(noon.0 + 1));
            assert_eq!(ledger.window("a", noon..Hour(noon.0 + 2)).unwrap().tally.counts()[0], 2);
            assert_eq!(ledger.window("a", Hour(noon.0 + 2)..EVER.end).unwrap().tally, Tally::default());
            assert_eq!(ledger.window("b", EVER).unwrap().tally.seen(), Some((NOON, NOON)));
            assert_eq!(ledger.window("unknown", EVER).unwrap().tally, Tally::default());
            assert!(ledger.window("a", noon..noon).unwrap().tally.seen().is_none());
            house.reopen();
        }
    }
}

#[test]
fn a_key_counts_once() {
    for mut house in House::both(&Options::default()) {
        let group = [keyed("k", "x", "a"), keyed("k", "x", "a"), keyed("k", "y", "a"), keyed("l", "x", "a")];
        let receipt = house.ledger().commit(&group, NOON).unwrap();
        let counted = Ok(Entry::default());
        let repeated = Ok(Entry { repeated: true, ..Entry::default() });
        let reused = Err(BatchError::KeyReused { key: "k".to_owned() });
        assert_eq!(receipt.batches, [counted.clone(), repeated.clone(), reused.clone(), counted]);
        for _ in 0..2 {
            assert_eq!(house.commit(keyed("k", "x", "a"), NOON), repeated);
            assert_eq!(house.commit(keyed("k", "y", "a"), NOON), reused);
            assert_eq!(house.count("a"), 2);
            house.reopen();
        }
    }
}

#[test]
fn keys_are_kept_for_their_time_and_no_more_than_their_number() {
    let options = Options { keys_for: 10.0 * HOUR, most_keys: 3, ..Options::default() };
    for mut house in House::both(&options) {
        house.commit(keyed("k", "x", "a"), NOON).unwrap();
        house.run(NOON, NOON + 9.0 * HOUR);
        assert!(house.commit(keyed("k", "x", "a"), NOON + 9.0 * HOUR).unwrap().repeated);
        house.run(NOON + 9.0 * HOUR, NOON + 11.0 * HOUR);
        let now = NOON + 11.0 * HOUR;
        assert!(!house.commit(keyed("k", "y", "a"), now).unwrap().repeated);
        assert_eq!(house.count("a"), 2);
        for key in ["l", "m", "n"] {
            house.commit(keyed(key, "x", "a"), now).unwrap();
        }
        assert_eq!(house.ledger().extent().unwrap().keys, 3);
        assert!(house.commit(keyed("l", "x", "a"), now).unwrap().repeated);
        assert!(!house.commit(keyed("k", "y", "a"), now).unwrap().repeated);
    }
}

#[test]
fn keys_and_ids_have_a_length() {
    assert!(Batch::keyed("", Digest::of(b"")).is_err());
    assert!(Batch::keyed(&"k".repeat(MAX_KEY_BYTES), Digest::of(b"")).is_ok());
    assert!(Batch::keyed(&"k".repeat(MAX_KEY_BYTES + 1), Digest::of(b"")).is_err());
    let mut batch = Batch::default();
    let long = "i".repeat(MAX_ID_BYTES + 1);
    for tie in [
        Tie { id: &long, ..LOAN },
        Tie { id: "", ..LOAN },
        Tie { attempt: 0, ..LOAN },
        Tie { stream: "a b", ..LOAN },
    ] {
        assert!(batch.start(tie, NOON, 0.0).is_err());
        assert!(batch.end(tie, NOON, Ending::Done).is_err());
    }
    assert!(batch.start(LOAN, f64::NAN, 0.0).is_err());
    assert!(batch.start(LOAN, NOON, -1.0).is_err());
    assert!(batch.is_empty());
}

#[test]
fn starts_meet_their_ends() {
    for mut house in House::both(&Options::default()) {
        let other = Tie { id: "l-2", ..LOAN };
        let retry = Tie { attempt: 2, ..LOAN };
        for batch in
            [start(LOAN, NOON), start(retry, NOON + 5.0), start(other, NOON - 5.0), start(LOAN, NOON)]
        {
            house.commit(batch, NOON).unwrap();
        }
        house.reopen();
        let open = house.ledger().open_waits(Some("branch.loan"), 9).unwrap();
        let order: Vec<_> = open.iter().map(|wait| (&*wait.id, wait.attempt)).collect();
        assert_eq!(order, [("l-2", 1), ("l-1", 1), ("l-1", 2)]);
        assert_eq!(house.ledger().open_waits(None, 1).unwrap(), open[..1]);
        assert_eq!(house.ledger().extent().unwrap().open, 3);
        assert_eq!(open[0].seen(NOON).unwrap().ending(), Ending::Waiting);
        assert_eq!(open[0].seen(NOON - 6.0), None);
        // Nothing is counted before the end is known.
        assert_eq!(house.count("branch.loan"), 0);
        let entry = house.commit(end(LOAN, NOON + 2.0 * HOUR), NOON).unwrap();
        assert_eq!(entry.joined, 1);
        house.reopen();
        let again = house.commit(end(LOAN, NOON + 2.0 * HOUR), NOON).unwrap();
        assert_eq!((again.joined, again.again), (0, 1));
        assert_eq!(house.commit(start(LOAN, NOON), NOON).unwrap().again, 1);
        assert_eq!(house.commit(end(other, NOON - 9.0), NOON).unwrap().refused, 1);
        let hour = Hour::of(NOON + 2.0 * HOUR);
        let tally = house.ledger().window("branch.loan", hour..Hour(hour.0 + 1)).unwrap().tally;
        assert_eq!(tally.first_attempts().events[0].upto, 2.0 * HOUR);
        assert_eq!(house.ledger().open_waits(None, 9).unwrap().len(), 2);
        // Both halves in one batch, the end first.
        let mut both = Batch::default();
        both.end(Tie { id: "l-3", ..LOAN }, NOON + 9.0, Ending::Failed).unwrap();
        both.start(Tie { id: "l-3", ..LOAN }, NOON, 4.0).unwrap();
        assert_eq!(house.commit(both, NOON).unwrap().joined, 1);
        let cells = house.ledger().window("branch.loan", EVER).unwrap().tally.first_attempts();
        assert_eq!((cells.total(), cells.entries[0].age), (2.0, 4.0));
    }
}

#[test]
fn open_waits_are_bounded_and_expire() {
    let options = Options { most_open: 2, open_for: 5.0 * HOUR, keys_for: HOUR, ..Options::default() };
    for mut house in House::both(&options) {
        let tie = |id| Tie { id, ..LOAN };
        house.commit(start(tie("1"), NOON), NOON).unwrap();
        let mut two = one("branch.other", 1.0, NOON);
        two.start(tie("2"), NOON, 0.0).unwrap();
        two.start(tie("3"), NOON, 0.0).unwrap();
        let group = [two, end(tie("1"), NOON + 1.0)];
        let receipt = house.ledger().commit(&group, NOON).unwrap();
        assert_eq!(receipt.batches[0], Err(BatchError::TooManyOpen { limit: 2 }));
        assert_eq!(receipt.batches[1].as_ref().unwrap().joined, 1);
        // The refused batch left nothing, not even its stream.
        assert_eq!(house.ledger().streams().unwrap(), ["branch.loan"]);
        for id in ["4", "5"] {
            house.commit(start(tie(id), NOON), NOON).unwrap();
        }
        house.reopen();
        assert!(house.commit(start(tie("6"), NOON), NOON).is_err());
        // An end without its start takes a place as well.
        assert!(house.commit(end(tie("7"), NOON), NOON).is_err());
        house.run(NOON, NOON + 6.0 * HOUR);
        assert_eq!(house.ledger().open_waits(None, 9).unwrap(), []);
        house.commit(start(tie("6"), NOON), NOON).unwrap();
        assert_eq!(house.ledger().extent().unwrap().open, 1);
        assert_eq!(house.count("branch.loan"), 1);
    }
}

#[test]
fn joined_waits_are_forgotten_when_too_many() {
    let options = Options { most_open: 3, ..Options::default() };
    for mut house in House::both(&options) {
        for i in 0..20 {
            let id = i.to_string();
            let tie = Tie { id: &id, ..LOAN };
            house.commit(start(tie, NOON + f64::from(i)), NOON + f64::from(i)).unwrap();
            house.commit(end(tie, NOON + f64::from(i) + 0.5), NOON + f64::from(i)).unwrap();
        }
        assert_eq!(house.count("branch.loan"), 20);
        // The last ones are known still, the first is not.
        assert_eq!(house.commit(start(Tie { id: "19", ..LOAN }, NOON + 19.0), NOON).unwrap().again, 1);
        assert_eq!(house.commit(start(Tie { id: "0", ..LOAN }, NOON), NOON).unwrap().again, 0);
    }
}

#[test]
fn bad_lines_are_counted_by_reason_and_hour() {
    for mut house in House::both(&Options::default()) {
        for (lines, now) in [(2, NOON), (3, NOON), (7, NOON + HOUR), (u64::MAX, NOON + 2.0 * HOUR)] {
            let mut batch = Batch::default();
            batch.bad_lines("not an age", lines);
            batch.bad_lines(&"é".repeat(99), 1);
            house.commit(batch, now).unwrap();
        }
        house.reopen();
        let noon = Hour::of(NOON);
        let first = house.ledger().bad_lines(noon..Hour(noon.0 + 1)).unwrap();
        assert_eq!(first["not an age"], 5);
        assert_eq!(first.len(), 2);
        assert!(first.keys().all(|reason| reason.len() <= 64));
        assert_eq!(house.ledger().bad_lines(noon..Hour(noon.0 + 2)).unwrap()["not an age"], 12);
        assert!(house.ledger().bad_lines(EVER).unwrap()["not an age"] >= i64::MAX as u64);
        assert!(house.ledger().bad_lines(noon..noon).unwrap().is_empty());
    }
}

#[test]
fn streams_are_bounded() {
    let options = Options { most_streams: 2, ..Options::default() };
    for mut house in House::both(&options) {
        let mut wide = keyed("k", "x", "a");
        wide.start(Tie { stream: "b", ..LOAN }, NOON, 0.0).unwrap();
        wide.start(Tie { stream: "c", ..LOAN }, NOON, 0.0).unwrap();
        let full = BatchError::TooManyStreams { limit: 2 };
        assert_eq!(house.commit(wide, NOON), Err(full.clone()));
        let receipt =
            house.ledger().commit(&[one("a", 1.0, NOON), one("b", 1.0, NOON), one("c", 1.0, NOON)], NOON);
        assert_eq!(receipt.unwrap().batches[2], Err(full));
        // The key of the refused batch is free.
        assert!(!house.commit(keyed("k", "y", "a"), NOON).unwrap().repeated);
        assert_eq!(house.count("a"), 2);
    }
}

#[test]
fn old_hours_become_days_without_changing_a_sum() {
    for mut house in House::both(&Options { hours_for: DAY, ..Options::default() }) {
        let mut whole = Tally::default();
        for i in 0..96 {
            let wait = done(1.0 + f64::from(i % 7), NOON + f64::from(i) * 0.5 * HOUR);
            whole.add(&wait);
            let mut batch = Batch::default();
            batch.add("a", &wait, NOON).unwrap();
            house.commit(batch, NOON + f64::from(i) * 0.5 * HOUR).unwrap();
        }
        let periods = |house: &mut House| {
            let mut all = Vec::new();
            house.ledger().visit("a", EVER, &mut |period, _| all.push(period)).unwrap();
            all.dedup();
            all
        };
        assert_eq!(periods(&mut house).len(), 48);
        let now = NOON + 2.2 * DAY;
        house.maintain(now);
        house.reopen();
        let days = Hour::of(NOON).day();
        // The first day began at noon and ended twelve hours later; the second ended 1.7 days after noon.
        let kept = periods(&mut house);
        assert_eq!(kept.len(), 1 + 24 + 12, "{kept:?}");
        assert_eq!(kept[0], Period::Day(days));
        assert_eq!(house.ledger().window("a", EVER).unwrap().tally, whole);
        // A window into the day covers it whole and says so.
        let noon = Hour::of(NOON);
        let window = house.ledger().window("a", noon..Hour(noon.0 + 1)).unwrap();
        assert_eq!(window.hours, Hour::first_of(days)..Hour::first_of(days + 1));
        assert_eq!(window.tally.counts()[0], 24);
        // A late wait joins its day at the next upkeep.
        house.commit(one("a", 9.0, NOON), now).unwrap();
        whole.add(&done(9.0, NOON));
        assert_eq!(house.ledger().window("a", EVER).unwrap().tally, whole);
        house.run(now, now + 2.0 * HOUR);
        assert_eq!(periods(&mut house).len(), kept.len());
        assert_eq!(house.ledger().window("a", EVER).unwrap().tally, whole);
    }
}

#[test]
fn what_is_older_than_is_kept_is_dropped() {
    let options = Options { hours_for: DAY, keep_for: 5.0 * DAY, ..Options::default() };
    for mut house in House::both(&options) {
        for day in 0..10 {
            let now = NOON + f64::from(day) * DAY;
            let mut batch = one("a", 1.0, now);
            batch.bad_lines("short", 1);
            house.commit(batch, now).unwrap();
            house.commit(one(&format!("only-{day}"), 1.0, now), now).unwrap();
            house.run(now, now + DAY - 1.0);
        }
        house.reopen();
        // The clock stands just before noon of the tenth day; the day that ended five days before is gone.
        assert_eq!(house.count("a"), 5);
        assert_eq!(house.ledger().bad_lines(EVER).unwrap()["short"], 5);
        assert_eq!(house.ledger().streams().unwrap().len(), 1 + 5);
    }
}

#[test]
fn what_is_more_than_is_kept_is_dropped() {
    let options = Options { most_bytes: Some(400_000), log_bytes: 1, ..Options::default() };
    for mut house in House::both(&options) {
        for day in 0..8 {
            let now = NOON + f64::from(day) * DAY;
            let mut batch = Batch::default();
            for i in 0..4_000 {
                let age = 1.0 + f64::from(i) * std::f64::consts::PI;
                for stream in ["a", "b", "c"] {
                    batch.add(stream, &done(age, now + f64::from(i)), now).unwrap();
                }
            }
            house.commit(batch, now).unwrap();
            house.run(now, now + HOUR);
        }
        let days = |house: &mut House| {
            let mut days = Vec::new();
            let mut see = |period: Period, _| days.push(period.hours().start.day());
            house.ledger().visit("a", EVER, &mut see).unwrap();
            days.dedup();
            days
        };
        let kept = days(&mut house);
        let last = Hour::of(NOON).day() + 7;
        assert!(kept.len() < 8, "{kept:?}");
        assert_eq!(kept.last(), Some(&last));
        assert!(kept.windows(2).all(|w| w[1] == w[0] + 1), "the oldest go first: {kept:?}");
    }
}

#[test]
fn a_clock_that_leaps_ages_nothing() {
    for mut house in House::both(&Options::default()) {
        let mut batch = keyed("k", "x", "a");
        batch.start(LOAN, NOON, 0.0).unwrap();
        house.commit(batch, NOON).unwrap();
        for leap in [NOON + 20.0 * 365.0 * DAY, 0.0, NOON + 400.0 * DAY, NOON] {
            for i in 0..50 {
                house.ledger().maintain(leap + f64::from(i)).unwrap();
            }
            assert!(house.commit(keyed("k", "x", "a"), leap).unwrap().repeated, "{leap}");
            assert_eq!(house.count("a"), 1);
            assert_eq!(house.ledger().open_waits(None, 9).unwrap().len(), 1);
            house.reopen();
        }
    }
}

/// What waits to be merged stays within its limits of memory and log, also where a few bytes unpack to much.
#[test]
fn what_is_not_merged_yet_is_bounded() {
    let options = Options { live_bytes: 2_000_000, log_bytes: 300_000, ..Options::default() };
    let mut house = House::disk(options);
    let mut most = 0;
    for i in 0..120 {
        let mut batch = Batch::default();
        for j in 0..5_000 {
            batch
                .add(&format!("s-{}", i % 90), &done(1.0 + f64::from(j) * 1e-3 + f64::from(i), NOON), NOON)
                .unwrap();
        }
        house.ledger().commit(&[batch], NOON).unwrap();
        let extent = house.ledger().extent().unwrap();
        assert!(extent.live_bytes <= 2_000_000 + 200_000, "{extent:?}");
        assert!(extent.log_bytes <= 300_000 + 20_000, "{extent:?}");
        most = most.max(extent.live_bytes);
    }
    assert!(most > 1_000_000, "the limit was reached: {most}");
    assert_eq!((0..90).map(|i| house.count(&format!("s-{i}"))).sum::<u64>(), 120 * 5_000);
}

#[test]
fn nothing_is_a_commit_too() {
    for mut house in House::both(&Options::default()) {
        assert_eq!(house.ledger().commit(&[], NOON).unwrap().batches, []);
        assert_eq!(house.commit(Batch::default(), NOON), Ok(Entry::default()));
        house.maintain(NOON);
        assert!(house.ledger().streams().unwrap().is_empty());
    }
}

/// Reads exported lines the way the records' description says, without the program's own reader.
fn read_back(text: &str) -> Vec<(String, Wait)> {
    let mut waits = Vec::new();
    for line in text.lines() {
        let field = |name: &str| {
            let at = line.find(&format!("\"{name}\":"))? + name.len() + 3;
            let value = line[at..].trim_start_matches('"');
            value.find(['"', ',', '}']).map(|end| &value[..end])
        };
        let number = |name: &str| field(name).map(|value| value.parse::<f64>().unwrap());
        if number("started").is_some() {
            continue;
        }
        let ending = Ending::parse(field("ending").unwrap()).unwrap();
        let wait = match number("elapsed") {
            Some(elapsed) => Wait::new(elapsed, ending).unwrap(),
            None => Wait::between(number("over").unwrap(), number("upto").unwrap(), ending).unwrap(),
        };
        let wait = wait.with_attempt(number("attempt").unwrap_or(1.0) as u32).unwrap();
        let wait = wait.with_entered(number("entered").unwrap_or(0.0)).unwrap();
        let wait = wait.with_count(field("count").map_or(1, |count| count.parse().unwrap())).unwrap();
        let wait = number("at").map_or(wait, |at| wait.with_at(at).unwrap());
        waits.push((field("stream").unwrap().to_owned(), wait));
    }
    waits
}

#[test]
fn an_export_reads_back_to_equal_tallies() {
    for mut house in House::both(&Options { hours_for: DAY, ..Options::default() }) {
        for hour in 0..50 {
            let now = NOON + f64::from(hour) * HOUR;
            let mut batch = Batch::default();
            for i in 0..200 {
                let wait = done(1.0 + f64::from(i * 31 % 97) / f64::from(hour + 3), now + f64::from(i));
                let wait =
                    wait.with_attempt(1 + i % 2).unwrap().with_entered(f64::from(i % 3) * 0.25).unwrap();
                batch.add(["a", "b:2/c_d-e.f"][i as usize % 2], &wait, now).unwrap();
                batch
                    .add("b:2/c_d-e.f", &Wait::between(0.5, f64::INFINITY, Ending::GaveUp).unwrap(), now)
                    .unwrap();
            }
            batch.start(Tie { id: &format!("\"\\\u{1}é{hour}"), ..LOAN }, now, 0.5).unwrap();
            house.commit(batch, now).unwrap();
        }
        house.maintain(NOON + 50.0 * HOUR);
        let mut text = Vec::new();
        let reader = house.ledger().reader().unwrap();
        let exported = export(&*reader, &mut text).unwrap();
        let text = String::from_utf8(text).unwrap();
        assert_eq!((exported.lines, exported.open), (text.lines().count() as u64, 50));
        assert_eq!((exported.waits, exported.damage.len()), (50 * 400, 0));
        for line in text.lines() {
            serde_json::from_str::<serde_json::Value>(line).unwrap();
        }
        let mut again = Batch::default();
        for (stream, wait) in read_back(&text) {
            again.add(&stream, &wait, 0.0).unwrap();
        }
        let mut other = MemoryLedger::new(Options::default());
        other.commit(&[again], NOON).unwrap();
        for stream in ["a", "b:2/c_d-e.f"] {
            let read = house.ledger().window(stream, EVER).unwrap().tally;
            assert_eq!(outwait::ledger::Reader::window(&other, stream, EVER).unwrap().tally, read);
        }
    }
}

/// A window that opens while a wait goes on sees it from the age it had then; all periods together see one wait.
#[test]
fn long_waits_are_at_risk_in_every_day_they_span() {
    let wait = Wait::new(2.5 * DAY, Ending::Done).unwrap().with_at(NOON).unwrap();
    for mut house in House::both(&Options::default()) {
        let mut batch = Batch::default();
        batch.add("lender.reply", &wait, NOON).unwrap();
        house.commit(batch, NOON).unwrap();
        house.reopen();
        let today = Hour::of(NOON).day();
        let whole = house.ledger().window("lender.reply", EVER).unwrap().tally.first_attempts();
        assert_eq!((whole.totals(), whole.entries.len()), ([1.0, 0.0, 0.0, 0.0], 0));
        let late =
            house.ledger().window("lender.reply", Hour::first_of(today)..Hour(i32::MAX)).unwrap().tally;
        let late = late.first_attempts();
        assert_eq!(late.entries[0].age, 2.0 * DAY);
        let early = house.ledger().window("lender.reply", EVER.start..Hour::first_of(today)).unwrap().tally;
        assert_eq!(early.first_attempts().waiting[0].age, 2.0 * DAY);
        // Exported and read again, the same waits are at risk.
        let reader = house.ledger().reader().unwrap();
        let mut text = Vec::new();
        export(&*reader, &mut text).unwrap();
        assert!(String::from_utf8(text).unwrap().lines().count() >= 3);
    }
}

fn record(shelf: Shelf, subject: &str, number: i64, text: &str) -> Record {
    Record { shelf, subject: subject.into(), number, text: text.into() }
}

fn noted(records: &[Record]) -> Batch {
    let mut batch = Batch::default();
    records.iter().for_each(|record| batch.note(record.clone()).unwrap());
    batch
}

#[test]
fn records_are_kept_word_for_word_and_decisions_for_good() {
    for mut house in House::both(&Options::default()) {
        let first = record(Shelf::Decisions, "desk", 0, "accepted\n\u{1f512}");
        let other = record(Shelf::Decisions, "desk", 1, "pinned");
        let elsewhere = record(Shelf::Decisions, "desk/b", 0, "");
        house.commit(noted(&[first.clone(), elsewhere.clone()]), NOON).unwrap();
        // The same again is the same; another in its place is refused, and all that came with it.
        house.commit(noted(std::slice::from_ref(&first)), NOON).unwrap();
        let mut taken = noted(&[other.clone(), record(Shelf::Decisions, "desk", 0, "refused")]);
        taken.merge("desk", Hour::of(NOON), &Tally::default()).unwrap();
        let refused = house.commit(taken, NOON);
        assert_eq!(refused, Err(BatchError::Taken { subject: "desk".into(), number: 0 }));
        // Of two in one group the first is taken.
        let rival = record(Shelf::Decisions, "desk", 1, "refused");
        let group = [noted(std::slice::from_ref(&other)), noted(&[rival])];
        let outcome = house.ledger().commit(&group, NOON).unwrap().batches;
        assert_eq!((outcome[0].is_ok(), outcome[1].is_ok()), (true, false));
        // Days and weeks give way to later ones.
        let day = Hour::of(NOON).day();
        house.commit(noted(&[record(Shelf::Days, "desk", day.into(), "a")]), NOON).unwrap();
        let later = record(Shelf::Days, "desk", day.into(), "b");
        house.commit(noted(&[later.clone(), record(Shelf::Weeks, "", day.into(), "w")]), NOON).unwrap();
        for _ in 0..2 {
            let ledger = house.ledger();
            let read = |shelf, subject| ledger.records(shelf, subject).unwrap();
            assert_eq!(read(Shelf::Decisions, Some("desk")).records, [first.clone(), other.clone()]);
            assert_eq!(
                read(Shelf::Decisions, None).records,
                [first.clone(), other.clone(), elsewhere.clone()]
            );
            assert_eq!(read(Shelf::Days, None).records, std::slice::from_ref(&later));
            assert_eq!(read(Shelf::Weeks, Some("")).records.len(), 1);
            assert_eq!(read(Shelf::Days, Some("none")), Default::default());
            house.reopen();
        }
    }
}

#[test]
fn days_and_weeks_go_with_the_waits_and_decisions_stay() {
    for mut house in House::both(&Options { keep_for: 3.0 * DAY, ..Options::default() }) {
        let day = i64::from(Hour::of(NOON).day());
        let mut batch = one("desk", 1.0, NOON);
        for (shelf, subject) in [(Shelf::Decisions, "desk"), (Shelf::Days, "desk"), (Shelf::Weeks, "")] {
            for number in [day, day + 3] {
                batch.note(record(shelf, subject, number, "x")).unwrap();
            }
        }
        house.commit(batch, NOON).unwrap();
        house.commit(one("desk", 1.0, NOON + 3.0 * DAY), NOON).unwrap();
        house.run(NOON, NOON + 4.5 * DAY);
        let ledger = house.ledger();
        let numbers = |shelf| {
            let read = ledger.records(shelf, None).unwrap();
            read.records.iter().map(|record| record.number - day).collect::<Vec<_>>()
        };
        assert_eq!(numbers(Shelf::Decisions), [0, 3]);
        assert_eq!((numbers(Shelf::Days), numbers(Shelf::Weeks)), (vec![3], vec![3]));
    }
}

#[test]
fn records_have_limits() {
    let long = "x".repeat(outwait::ledger::MAX_SUBJECT_BYTES + 1);
    assert!(Batch::default().note(record(Shelf::Days, &long, 0, "")).is_err());
    let text = "x".repeat(outwait::ledger::MAX_RECORD_BYTES + 1);
    let mut batch = Batch::default();
    assert!(batch.note(record(Shelf::Days, "a", 0, &text)).is_err());
    assert!(batch.is_empty());
}

/// A reading of a histogram with one bound of 1 s: so many up to it, so many above.
fn reading(key: u8, at: f64, counts: [u64; 2]) -> Running {
    Running {
        stream: "a".into(),
        ending: Ending::Done,
        attempt: 1,
        key: SeriesKey([key; 16]),
        at: Some(at),
        started: None,
        counts_at_first: true,
        histogram: Histogram::from_buckets(vec![1.0], counts).unwrap(),
    }
}

fn readings(all: impl IntoIterator<Item = Running>) -> Batch {
    let mut batch = Batch::default();
    all.into_iter().for_each(|running| batch.running(running).unwrap());
    batch
}

#[test]
fn histograms_that_only_grow_are_counted_once() {
    let options = Options { most_series: 2, series_for: 10.0 * HOUR, ..Options::default() };
    for mut house in House::both(&options) {
        let first = house.commit(readings([reading(1, NOON, [3, 1])]), NOON).unwrap();
        assert_eq!((first.grown, first.resets), (4, 0));
        house.reopen();
        // Two in one batch, the second after the first; a late one; and one that has begun anew.
        let two = readings([reading(1, NOON + 1.0, [4, 1]), reading(1, NOON + 2.0, [4, 2])]);
        assert_eq!(house.commit(two, NOON + 2.0).unwrap().grown, 2);
        assert_eq!(house.commit(readings([reading(1, NOON + 1.0, [9, 9])]), NOON + 3.0).unwrap().grown, 0);
        let group = [readings([reading(1, NOON + 4.0, [5, 2])]), readings([reading(1, NOON + 5.0, [1, 0])])];
        let receipt = house.ledger().commit(&group, NOON + 5.0).unwrap();
        let grown: Vec<(u64, u64)> =
            receipt.batches.iter().flatten().map(|entry| (entry.grown, entry.resets)).collect();
        assert_eq!(grown, [(1, 0), (1, 1)]);
        assert_eq!(house.count("a"), 8);
        // Beyond the limit nothing of the batch is counted, and no mark is left.
        let above = readings([
            reading(1, NOON + 6.0, [7, 0]),
            reading(2, NOON + 6.0, [1, 0]),
            reading(3, NOON, [1, 0]),
        ]);
        let refused = house.commit(above, NOON + 6.0);
        assert_eq!(refused, Err(BatchError::TooManySeries { limit: 2 }));
        assert_eq!(house.count("a"), 8);
        house.reopen();
        let both = readings([reading(1, NOON + 7.0, [7, 0]), reading(2, NOON + 7.0, [1, 0])]);
        assert_eq!(house.commit(both, NOON + 7.0).unwrap().grown, 7);
        assert!(house.commit(readings([reading(3, NOON + 8.0, [1, 0])]), NOON + 8.0).is_err());
        // What was not read for its time is forgotten, and makes room.
        house.run(NOON + 8.0, NOON + 12.0 * HOUR);
        assert_eq!(
            house
                .commit(readings([reading(3, NOON + 12.0 * HOUR, [1, 0])]), NOON + 12.0 * HOUR)
                .unwrap()
                .grown,
            1
        );
        assert_eq!(house.count("a"), 16);
    }
}

/// A mark that cannot be read makes the next reading a base: what it stood for is not counted again.
#[test]
fn a_broken_mark_counts_nothing_twice() {
    let mut house = House::disk(Options::default());
    house.commit(readings([reading(1, NOON, [3, 1])]), NOON).unwrap();
    let file = house.folder().join("ledger.sqlite3");
    let House::Disk { ledger, .. } = &mut house else { unreachable!() };
    drop(ledger.take());
    let db = rusqlite::Connection::open(file).unwrap();
    db.execute("UPDATE marks SET seal = seal + 1", []).unwrap();
    drop(db);
    house.reopen();
    assert_eq!(house.commit(readings([reading(1, NOON + 1.0, [5, 1])]), NOON + 1.0).unwrap().grown, 0);
    assert_eq!(house.commit(readings([reading(1, NOON + 2.0, [6, 1])]), NOON + 2.0).unwrap().grown, 1);
    assert_eq!(house.count("a"), 5);
}
