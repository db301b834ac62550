//! Files written by the first version of the layout, which every later version reads.
//!
//! `OUTWAIT_WRITE_GOLDEN=1 cargo test --test ledger golden` writes those of the present version anew; a file that has
//! been released is never written again.

use std::path::{Path, PathBuf};

use outwait::ledger::{
    Batch, Digest, Hour, Ledger, Options, Period, Reader, Record, Records, Shelf, SqliteLedger, SqliteReader,
    Tie,
};
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};

use crate::made::{DAY, HOUR, NOON, tally};
use crate::suite::EVER;

fn golden(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/golden").join(name)
}

fn write_anew() -> bool {
    std::env::var("OUTWAIT_WRITE_GOLDEN").is_ok()
}

/// One tally for each form that the layout has.
fn shapes() -> Vec<Tally> {
    let wait = |age: f64| Wait::new(age, Ending::Done).unwrap();
    let many = |scale: f64| (1..=5_000).map(move |i| wait(f64::from(i) * scale));
    let ladder = [(0.0, 0.005), (0.005, 0.01), (0.01, 0.025), (1.0, f64::INFINITY)];
    let buckets = ladder
        .iter()
        .zip(Ending::ALL)
        .map(|(&(over, upto), ending)| Wait::between(over, upto, ending).unwrap().with_count(7).unwrap());
    let late = (1..=5).map(|i| {
        let wait = wait(f64::from(i)).with_entered(0.25).unwrap().with_attempt(1 + i as u32 % 2).unwrap();
        wait.with_at(NOON + f64::from(i)).unwrap()
    });
    let mut sums = vec![
        Tally::default(),
        tally(&[wait(0.018_3), wait(0.25), wait(7.0).with_count(3).unwrap()]),
        tally(&[wait(1.5e-9), wait(0.123_456_789)]),
        tally(&[wait(std::f64::consts::PI), wait(std::f64::consts::E).with_at(NOON).unwrap()]),
        tally(&many(1e-4).collect::<Vec<_>>()),
        tally(&many(1e-4).chain([wait(2.0).with_count(1 << 40).unwrap()]).collect::<Vec<_>>()),
        tally(&buckets.collect::<Vec<_>>()),
        tally(&late.collect::<Vec<_>>()),
    ];
    let mut large = tally(&many(1e3).collect::<Vec<_>>());
    (0..15).for_each(|_| {
        let double = large.clone();
        large.merge(&double);
    });
    (0..10_000).for_each(|_| large.add(&wait(5e5).with_count(1_000_000_000_000_000).unwrap()));
    sums.push(large);
    sums
}

#[test]
fn tallies_of_version_1() {
    let path = golden("tallies-1.bin");
    if write_anew() {
        let mut bytes = Vec::new();
        for tally in shapes() {
            let mut one = Vec::new();
            tally.encode(&mut one);
            bytes.extend((one.len() as u32).to_le_bytes());
            bytes.extend(one);
        }
        std::fs::write(&path, bytes).unwrap();
    }
    let bytes = std::fs::read(&path).unwrap();
    let (mut rest, mut read) = (&bytes[..], Vec::new());
    while let Some((length, after)) = rest.split_first_chunk() {
        let (one, after) = after.split_at(u32::from_le_bytes(*length) as usize);
        assert_eq!(one[0], 1);
        read.push(Tally::decode(one).unwrap());
        rest = after;
    }
    assert_eq!(read, shapes());
}

fn book() -> Vec<(f64, Batch)> {
    let mut batches = Vec::new();
    for i in 0..30 {
        let at = NOON + f64::from(i) * 2.0 * HOUR;
        let mut batch = Batch::keyed(&format!("key-{i}"), Digest::of(&[i as u8])).unwrap();
        for (stream, age) in [("desk.loan", 0.25), ("catalogue.lookup", 0.018)] {
            batch.add(stream, &Wait::new(age * f64::from(i + 1), Ending::Done).unwrap(), at).unwrap();
        }
        batches.push((at, batch));
    }
    let mut last = Batch::default();
    let tie = |id| Tie { stream: "desk.loan", id, attempt: 2 };
    last.start(tie("open"), NOON, 0.5).unwrap();
    last.start(tie("met"), NOON, 0.0).unwrap();
    last.end(tie("met"), NOON + 3.0, Ending::Failed).unwrap();
    last.end(tie("early"), NOON + 3.0, Ending::Failed).unwrap();
    last.bad_lines("not an age", 3);
    batches.push((NOON + 2.5 * DAY, last));
    batches
}

#[test]
fn a_ledger_of_version_1() {
    let path = golden("ledger-1.sqlite3");
    let folder = tempfile::tempdir().unwrap();
    let options = Options { hours_for: DAY, ..Options::default() };
    if write_anew() {
        let mut ledger = SqliteLedger::open(folder.path(), options.clone()).unwrap();
        for (now, batch) in book() {
            ledger.commit(&[batch], now).unwrap();
            // Three calls, since the ledger's clock takes large steps slowly; the last hours stay in the log.
            for ago in [120.0, 60.0, 0.0].into_iter().filter(|_| now < NOON + 2.0 * DAY) {
                while ledger.maintain(now - ago).unwrap().more {}
            }
        }
        drop(ledger);
        std::fs::copy(folder.path().join("ledger.sqlite3"), &path).unwrap();
    }
    let mut model = outwait::ledger::MemoryLedger::new(options.clone());
    for (now, batch) in book() {
        model.commit(&[batch], now).unwrap();
    }
    let assert_same = |ledger: &dyn Reader| {
        assert_eq!(ledger.streams().unwrap(), ["catalogue.lookup", "desk.loan"]);
        for stream in ledger.streams().unwrap() {
            let read = ledger.window(&stream, EVER).unwrap();
            assert_eq!(read.damage, []);
            assert_eq!(read.tally, model.window(&stream, EVER).unwrap().tally);
        }
        assert_eq!(ledger.open_waits(None, 9).unwrap(), model.open_waits(None, 9).unwrap());
        assert_eq!(ledger.bad_lines(EVER).unwrap(), model.bad_lines(EVER).unwrap());
    };
    std::fs::copy(&path, folder.path().join("ledger.sqlite3")).unwrap();
    let reader = SqliteReader::attach(folder.path()).unwrap();
    assert_same(&reader);
    assert_eq!(reader.check().unwrap(), []);
    // It knows of no records, until it is opened for writing.
    assert_eq!(reader.records(Shelf::Decisions, None).unwrap(), Records::default());
    drop(reader);
    let mut ledger = SqliteLedger::open(folder.path(), options).unwrap();
    assert_same(&ledger);
    // It holds days, hours, and waits that only the log has; and it knows its keys.
    let mut periods = Vec::new();
    ledger.visit("desk.loan", Hour::of(NOON)..EVER.end, &mut |period, _| periods.push(period)).unwrap();
    assert!(matches!(periods[0], Period::Day(_)) && matches!(periods.last(), Some(Period::Hour(_))));
    assert!(ledger.extent().unwrap().log_bytes > 600);
    let again: Vec<Batch> = book().into_iter().take(30).map(|(_, batch)| batch).collect();
    let receipt = ledger.commit(&again, NOON + 2.5 * DAY).unwrap();
    assert!(receipt.batches.iter().all(|batch| batch.as_ref().unwrap().repeated));
    assert_same(&ledger);
    let mut batch = Batch::default();
    let record = Record { shelf: Shelf::Decisions, subject: "desk.loan".into(), number: 0, text: "x".into() };
    batch.note(record.clone()).unwrap();
    assert!(ledger.commit(&[batch], NOON + 2.5 * DAY).unwrap().batches[0].is_ok());
    drop(ledger);
    let reader = SqliteReader::attach(folder.path()).unwrap();
    assert_same(&reader);
    assert_eq!(reader.records(Shelf::Decisions, None).unwrap().records, [record]);
    assert_eq!(reader.check().unwrap(), []);
}
