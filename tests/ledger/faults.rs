//! Full disks, folders that may not be written, files that are damaged or none of ours.

use std::collections::BTreeMap;
use std::path::Path;
use std::process::Command;

use outwait::ledger::{
    Batch, Damage, Digest, Hour, LAYOUT_VERSION, Ledger, LedgerError, Options, Period, Reader, SqliteLedger,
    SqliteReader,
};
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

use crate::made::{HOUR, NOON};
use crate::suite::{EVER, House, done};

fn numbered(number: u64, waits: u64) -> Batch {
    let mut batch = Batch::keyed(&number.to_string(), Digest::of(&number.to_le_bytes())).unwrap();
    for i in 0..waits {
        let age = 1.0 + (number * waits + i) as f64 * std::f64::consts::E;
        batch.add(&format!("stream-{}", i % 4), &done(age, NOON), NOON).unwrap();
    }
    batch
}

fn count(ledger: &dyn Reader) -> u64 {
    let streams = ledger.streams().unwrap();
    streams.iter().flat_map(|s| ledger.window(s, EVER).unwrap().tally.counts()).sum()
}

#[test]
fn a_second_writer_is_refused_by_name() {
    let house = House::disk(Options::default());
    let again = SqliteLedger::open(house.folder(), Options::default());
    let Err(error @ LedgerError::InUse { pid, .. }) = again else { panic!("{again:?}") };
    assert_eq!(pid, Some(std::process::id()));
    assert!(error.to_string().contains(&format!("process {}", std::process::id())), "{error}");
    // Reading beside it is not refused.
    SqliteReader::attach(house.folder()).unwrap();
}

#[test]
fn what_is_no_ledger_is_left_alone() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("ledger.sqlite3");
    assert!(matches!(SqliteReader::attach(folder.path()), Err(LedgerError::Missing { .. })));
    let text = "the accounts of 1907\n".repeat(500);
    std::fs::write(&path, &text).unwrap();
    assert!(matches!(
        SqliteLedger::open(folder.path(), Options::default()),
        Err(LedgerError::Foreign { .. })
    ));
    assert!(matches!(SqliteReader::attach(folder.path()), Err(LedgerError::Foreign { .. })));
    assert_eq!(std::fs::read_to_string(&path).unwrap(), text);
    std::fs::remove_file(&path).unwrap();
    let other = rusqlite::Connection::open(&path).unwrap();
    other.execute_batch("CREATE TABLE books (title TEXT)").unwrap();
    drop(other);
    assert!(matches!(
        SqliteLedger::open(folder.path(), Options::default()),
        Err(LedgerError::Foreign { .. })
    ));
}

#[test]
fn a_later_layout_is_refused() {
    let mut house = House::disk(Options::default());
    let House::Disk { ledger, folder, .. } = &mut house else { unreachable!() };
    drop(ledger.take());
    let path = folder.path().join("ledger.sqlite3");
    let db = rusqlite::Connection::open(&path).unwrap();
    db.execute_batch(&format!("PRAGMA user_version = {}", LAYOUT_VERSION + 1)).unwrap();
    drop(db);
    for error in [
        SqliteLedger::open(folder.path(), Options::default()).unwrap_err(),
        SqliteReader::attach(folder.path()).unwrap_err(),
    ] {
        assert!(
            matches!(error, LedgerError::Newer { found, known: LAYOUT_VERSION, .. } if found == LAYOUT_VERSION + 1)
        );
        assert!(error.to_string().contains(&format!("layout version {}", LAYOUT_VERSION + 1)), "{error}");
    }
}

#[test]
fn a_backup_taken_while_writing_is_a_whole_ledger() {
    let mut house = House::disk(Options { log_bytes: 20_000, ..Options::default() });
    for number in 0..50 {
        house.ledger().commit(&[numbered(number, 40)], NOON).unwrap();
    }
    let to = tempfile::tempdir().unwrap();
    let file = to.path().join("ledger.sqlite3");
    let House::Disk { ledger, .. } = &house else { unreachable!() };
    let reader = ledger.as_ref().unwrap().sqlite_reader().unwrap();
    reader.backup(&file).unwrap();
    assert!(matches!(reader.backup(&file), Err(LedgerError::Io { .. })), "it writes over nothing");
    house.ledger().commit(&[numbered(50, 40)], NOON).unwrap();
    assert_eq!(count(&SqliteReader::attach_file(&file).unwrap()), 50 * 40);
    let mut copy = SqliteLedger::open(to.path(), Options::default()).unwrap();
    assert_eq!(copy.damage(), []);
    // Its keys are there as well.
    copy.commit(&[numbered(49, 40), numbered(50, 40)], NOON).unwrap();
    assert_eq!(count(&copy), 51 * 40);
    assert_eq!(copy.sqlite_reader().unwrap().check().unwrap(), []);
    let names: Vec<_> = std::fs::read_dir(to.path()).unwrap().map(|f| f.unwrap().file_name()).collect();
    assert!(!names.iter().any(|name| name.to_string_lossy().contains("part")), "{names:?}");
}

/// Runs one test of this program alone, in a mount namespace of its own where `script` has prepared `$0`; `None` if this
/// system does not let us.
fn in_a_namespace(test: &str, script: &str) -> Option<String> {
    let folder = tempfile::tempdir().unwrap();
    let output = Command::new("unshare")
        .args(["--user", "--map-root-user", "--mount", "sh", "-c"])
        .arg(format!("{script} || exit 99; exec \"$1\" --exact {test} --nocapture"))
        .arg(folder.path())
        .arg(std::env::current_exe().unwrap())
        .env("OUTWAIT_LEDGER_MOUNT", folder.path())
        .output();
    let output = output.ok().filter(|output| ![Some(1), Some(99)].contains(&output.status.code()))?;
    let said =
        format!("{}{}", String::from_utf8_lossy(&output.stdout), String::from_utf8_lossy(&output.stderr));
    assert!(output.status.success(), "{said}");
    Some(said)
}

#[test]
fn a_full_disk_refuses_and_goes_on_when_there_is_room() {
    let Ok(folder) = std::env::var("OUTWAIT_LEDGER_MOUNT") else {
        let script = "mount -t tmpfs -o size=2m none \"$0\"";
        match in_a_namespace("faults::a_full_disk_refuses_and_goes_on_when_there_is_room", script) {
            Some(said) => assert!(said.contains("recovered from a full disk"), "{said}"),
            None => println!("skipped: no small disk may be mounted here; the page limit stands for it"),
        }
        return;
    };
    let folder = Path::new(&folder);
    let options = Options { log_bytes: 200_000, ..Options::default() };
    let ballast = folder.join("ballast");
    std::fs::write(&ballast, vec![7; 600_000]).unwrap();
    let mut ledger = SqliteLedger::open(folder, options.clone()).unwrap();
    let mut filed = 0;
    let refused = loop {
        match ledger.commit(&[numbered(filed, 400)], NOON) {
            Ok(_) => filed += 1,
            Err(error) => break error,
        }
    };
    assert!(filed > 3, "{filed}");
    for _ in 0..20 {
        assert!(matches!(refused, LedgerError::Full { .. }), "{refused:?}");
        let again = ledger.commit(&[numbered(filed, 400)], NOON);
        assert!(matches!(again, Err(LedgerError::Full { .. })), "{again:?}");
        assert_eq!(count(&ledger), filed * 400, "what was acknowledged is still read");
    }
    // A crash now, and a start on the full disk: either it opens, or it says what is the matter.
    std::fs::write(folder.join("filler"), vec![7; 4_000_000]).unwrap_err();
    drop(ledger);
    match SqliteLedger::open(folder, options.clone()) {
        Ok(ledger) => assert_eq!(count(&ledger), filed * 400),
        Err(error) => assert!(matches!(error, LedgerError::Full { .. }), "{error:?}"),
    }
    std::fs::remove_file(folder.join("filler")).unwrap();
    std::fs::remove_file(&ballast).unwrap();
    let mut ledger = SqliteLedger::open(folder, options).unwrap();
    for number in 0..filed + 3 {
        ledger.commit(&[numbered(number, 400)], NOON).unwrap();
    }
    assert_eq!(count(&ledger), (filed + 3) * 400);
    assert_eq!(ledger.sqlite_reader().unwrap().check().unwrap(), []);
    println!("recovered from a full disk after {filed} batches");
}

#[test]
fn a_folder_that_may_not_be_written_is_named() {
    let Ok(folder) = std::env::var("OUTWAIT_LEDGER_MOUNT") else {
        let script = "mount -t tmpfs -o size=8m none \"$0\"";
        match in_a_namespace("faults::a_folder_that_may_not_be_written_is_named", script) {
            Some(said) => assert!(said.contains("refused a read-only folder"), "{said}"),
            None => println!("skipped: nothing may be mounted here"),
        }
        return;
    };
    let folder = Path::new(&folder);
    let remount = |how: &str| {
        let done = Command::new("mount").args(["-o", how]).arg(folder).status().unwrap();
        assert!(done.success());
    };
    let mut ledger = SqliteLedger::open(folder, Options::default()).unwrap();
    ledger.commit(&[numbered(0, 40)], NOON).unwrap();
    drop(ledger);
    remount("remount,ro");
    let refused = SqliteLedger::open(folder, Options::default());
    assert!(matches!(refused, Err(LedgerError::ReadOnly { .. })), "{refused:?}");
    let refused = SqliteLedger::open(&folder.join("below"), Options::default());
    assert!(matches!(refused, Err(LedgerError::ReadOnly { .. })), "{refused:?}");
    // Reading needs no leave to write.
    assert_eq!(count(&SqliteReader::attach(folder).unwrap()), 40);
    remount("remount,rw");
    assert_eq!(count(&SqliteLedger::open(folder, Options::default()).unwrap()), 40);
    println!("refused a read-only folder");
}

type Contents = BTreeMap<String, BTreeMap<(Hour, Period), Tally>>;

/// All that can be read, and what is said to be missing.
fn contents(reader: &dyn Reader) -> (Contents, Vec<Damage>) {
    let (mut all, mut damage) = (Contents::new(), Vec::new());
    for stream in reader.streams().unwrap() {
        let periods = all.entry(stream.clone()).or_default();
        let found = reader.visit(&stream, EVER, &mut |period, tally| {
            periods.entry((period.hours().start, period)).or_default().merge(&tally);
        });
        match found {
            Ok(found) => damage.extend(found),
            Err(error) => damage.push(Damage::Stream { stream, flaw: error.to_string() }),
        }
    }
    (all, damage)
}

/// Twenty streams, twenty hours, all merged, the last few commits in the log.
fn sample() -> House {
    let mut house = House::disk(Options::default());
    for round in 0..2 {
        for hour in 0..20 {
            let mut batch = Batch::default();
            for stream in 0..20 {
                for i in 0..60 {
                    let at = NOON + f64::from(hour) * HOUR + f64::from(i);
                    let age = f64::from(i * 7919 % 1009 + stream) * 1e-3 + 1e-3;
                    let wait =
                        Wait::new(age, if i % 5 == 0 { Ending::GaveUp } else { Ending::Done }).unwrap();
                    batch.add(&format!("branch-{stream}"), &wait.with_at(at).unwrap(), at).unwrap();
                }
            }
            house.ledger().commit(&[batch], NOON).unwrap();
        }
        if round == 0 {
            house.maintain(NOON + 21.0 * HOUR);
        }
    }
    house
}

/// The file with one wound.
fn wound(bytes: &mut Vec<u8>, random: &mut Xoshiro256PlusPlus, round: u64) {
    match round % 4 {
        0 | 1 => {
            let bit = random.random_range(0..8 * bytes.len());
            bytes[bit / 8] ^= 1 << (bit % 8);
        }
        2 => {
            let from = random.random_range(0..bytes.len());
            let to = (from + random.random_range(1..600)).min(bytes.len());
            random.fill(&mut bytes[from..to]);
        }
        _ => bytes.truncate(random.random_range(0..bytes.len())),
    }
}

#[test]
fn damage_is_named_and_the_rest_stays_readable() {
    let mut house = sample();
    let (whole, none) = contents(house.ledger());
    assert_eq!(none, []);
    let House::Disk { ledger, folder, .. } = &mut house else { unreachable!() };
    drop(ledger.take());
    let sound = std::fs::read(folder.path().join("ledger.sqlite3")).unwrap();
    let rounds = std::env::var("OUTWAIT_WOUNDS").map_or(160, |rounds| rounds.parse().unwrap());
    let mut random = Xoshiro256PlusPlus::seed_from_u64(23);
    let (mut unread, mut harmed, mut unharmed) = (0, 0, 0);
    for round in 0..rounds {
        let mut bytes = sound.clone();
        wound(&mut bytes, &mut random, round);
        let copy = tempfile::tempdir().unwrap();
        std::fs::write(copy.path().join("ledger.sqlite3"), &bytes).unwrap();
        match SqliteReader::attach(copy.path()) {
            Err(LedgerError::Damaged { .. } | LedgerError::Foreign { .. } | LedgerError::Newer { .. }) => {
                unread += 1;
            }
            Err(error) => panic!("round {round}: {error:?}"),
            Ok(reader) => {
                let (read, named) = contents(&reader);
                let checked = reader.check().unwrap();
                let mut complete = true;
                for (stream, periods) in &whole {
                    let found = read.get(stream);
                    complete &= found == Some(periods);
                    // Less may be read than there was, in whole log entries; never anything else.
                    for (period, tally) in found.into_iter().flatten() {
                        let [was, is]: [u64; 2] =
                            [&periods[period], tally].map(|tally| tally.counts().iter().sum());
                        assert!(tally == &periods[period] || is < was, "round {round}: {stream} {period:?}");
                    }
                }
                assert!(
                    complete || !checked.is_empty(),
                    "round {round}: waits are missing and nobody says so"
                );
                assert!(named.len() <= checked.len(), "round {round}: {named:?} {checked:?}");
                if complete {
                    unharmed += 1
                } else {
                    harmed += 1
                }
                let most = whole.keys().filter(|stream| read.get(*stream) != whole.get(*stream)).count();
                if round % 4 < 2 && checked.iter().all(|d| matches!(d, Damage::Tally { .. })) {
                    assert!(most <= 1, "round {round}: one bit harms one stream: {checked:?}");
                }
            }
        }
        // For writing it opens or refuses, and what it then acknowledges it counts.
        if let Ok(mut ledger) = SqliteLedger::open(copy.path(), Options::default()) {
            let _ = ledger.commit(&[numbered(0, 4)], NOON).and_then(|_| ledger.maintain(NOON + HOUR));
            let _ = contents(&ledger);
        }
    }
    println!("{rounds} wounds: {unread} files not readable at all, {harmed} in part, {unharmed} whole");
    assert!(harmed > 0 && unharmed > 0);
}

/// A stored tally that is broken is moved aside when its hour is written to again; it stays named.
#[test]
fn a_broken_tally_does_not_stop_its_hour() {
    let mut house = sample();
    house.maintain(NOON + 21.0 * HOUR);
    let House::Disk { ledger, folder, .. } = &mut house else { unreachable!() };
    drop(ledger.take());
    let db = rusqlite::Connection::open(folder.path().join("ledger.sqlite3")).unwrap();
    let noon = Hour::of(NOON);
    let wound = "UPDATE tallies SET tally = zeroblob(30) WHERE start = ?1 AND stream =
                 (SELECT id FROM streams WHERE name = 'branch-3')";
    assert_eq!(db.execute(wound, [noon.0]).unwrap(), 1);
    drop(db);
    house.reopen();
    let named = |house: &mut House| {
        let window = house.ledger().window("branch-3", noon..Hour(noon.0 + 1)).unwrap();
        let [Damage::Tally { stream, period, .. }] = &window.damage[..] else {
            panic!("{:?}", window.damage)
        };
        assert_eq!((stream.as_str(), *period), ("branch-3", Period::Hour(noon)));
        window.tally.counts().iter().sum::<u64>()
    };
    assert_eq!(named(&mut house), 0);
    let mut batch = Batch::default();
    batch.add("branch-3", &done(1.0, NOON), NOON).unwrap();
    house.ledger().commit(&[batch], NOON).unwrap();
    assert_eq!(named(&mut house), 1);
    house.maintain(NOON + 22.0 * HOUR);
    house.reopen();
    assert_eq!(named(&mut house), 1);
    assert!(house.ledger().window("branch-4", EVER).unwrap().damage.is_empty());
    // Its neighbours roll into their day, and it stays named.
    house.maintain(NOON + 22.0 * HOUR);
    let House::Disk { ledger, .. } = &house else { unreachable!() };
    assert_eq!(ledger.as_ref().unwrap().sqlite_reader().unwrap().check().unwrap().len(), 1);
}

/// A log entry that is broken is moved aside when the ledger is opened; it stays named, and the count goes on.
#[test]
fn a_broken_entry_does_not_stop_the_ledger() {
    let mut house = House::disk(Options::default());
    for number in 0..5 {
        house.ledger().commit(&[numbered(number, 4)], NOON).unwrap();
    }
    let House::Disk { ledger, folder, .. } = &mut house else { unreachable!() };
    drop(ledger.take());
    let db = rusqlite::Connection::open(folder.path().join("ledger.sqlite3")).unwrap();
    assert_eq!(db.execute("UPDATE log SET entry = zeroblob(99) WHERE sequence IN (3, 5)", []).unwrap(), 2);
    assert_eq!(db.execute("UPDATE streams SET name = 'stream-x' WHERE name = 'stream-1'", []).unwrap(), 1);
    drop(db);
    let broken = |damage: &[Damage]| {
        damage.iter().filter(|d| matches!(d, Damage::Entry { sequence: 3 | 5, .. })).count()
    };
    let read = SqliteReader::attach(folder.path()).unwrap();
    assert_eq!((broken(&read.check().unwrap()), count(&read)), (2, 3 * 4));
    house.reopen();
    let House::Disk { ledger, .. } = &house else { unreachable!() };
    let found = ledger.as_ref().unwrap().damage();
    assert_eq!((broken(found), found.len()), (2, 3), "two entries and a name: {found:?}");
    for number in 5..9 {
        house.ledger().commit(&[numbered(number, 4)], NOON).unwrap();
    }
    house.maintain(NOON + HOUR);
    house.reopen();
    assert_eq!(count(house.ledger()), 7 * 4);
    let names = house.ledger().streams().unwrap();
    assert!(names.contains(&"stream-1".to_owned()), "counted anew under its name: {names:?}");
    assert!(names.iter().any(|name| name.starts_with("stream-x:damaged-")), "{names:?}");
    let House::Disk { ledger, .. } = &house else { unreachable!() };
    let checked = ledger.as_ref().unwrap().sqlite_reader().unwrap().check().unwrap();
    assert_eq!((broken(&checked), checked.len()), (2, 3), "{checked:?}");
}
