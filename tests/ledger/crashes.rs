//! Crashes: whatever the moment, what was acknowledged is there and is there once.

use std::collections::BTreeMap;
use std::io::{BufRead, BufReader, Write};
use std::path::Path;
use std::process::{Command, Stdio};
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::time::Duration;

use outwait::ledger::{Batch, Digest, Hour, Ledger, MemoryLedger, Options, Reader, SqliteLedger, Tie};
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};
use proptest::prelude::*;
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

use crate::made::{HOUR, NOON, spread, wait};
use crate::suite::EVER;

const STREAMS: [&str; 3] = ["desk.loan", "desk.return", "search"];

/// Limits so small that every commit merges something and the log is cut all the time. Nothing expires: after a crash
/// the ledger's clock stands a little behind, on purpose, and the model's does not.
fn tight() -> Options {
    let never = 1e9;
    let times =
        Options { hours_for: HOUR, keep_for: never, keys_for: never, open_for: never, ..Options::default() };
    Options { log_bytes: 4_000, live_bytes: 60_000, ..times }
}

#[derive(Clone, Debug)]
struct Spec {
    key: Option<u8>,
    waits: Vec<(usize, Wait, bool)>,
    events: Vec<(usize, u8, bool, u8)>,
    bad: Option<u8>,
}

#[derive(Clone, Debug)]
enum Step {
    Commit(Vec<Spec>),
    /// Upkeep once an hour, for so many hours.
    Maintain(u8),
    Reopen,
    /// The files as they lie there, without a word to the process that writes them.
    Crash,
}

fn spec() -> impl Strategy<Value = Spec> {
    let waits = prop::collection::vec((0usize..3, wait(), prop::bool::weighted(0.1)), 0..6);
    let events = prop::collection::vec((0usize..3, 0u8..6, any::<bool>(), 0u8..40), 0..5);
    (prop::option::of(0u8..8), waits, events, prop::option::of(0u8..3))
        .prop_map(|(key, waits, events, bad)| Spec { key, waits, events, bad })
}

fn steps() -> impl Strategy<Value = Vec<Step>> {
    let step = prop_oneof![
        8 => prop::collection::vec(spec(), 0..4).prop_map(Step::Commit),
        3 => (1u8..9).prop_map(Step::Maintain),
        1 => Just(Step::Reopen),
        2 => Just(Step::Crash),
    ];
    prop::collection::vec(step, 1..25)
}

fn batch(spec: &Spec, now: f64) -> Batch {
    let mut batch = match spec.key {
        Some(key) => {
            let content = format!("{:?}", (&spec.waits, &spec.events));
            Batch::keyed(&format!("key-{key}"), Digest::of(content.as_bytes())).unwrap()
        }
        None => Batch::default(),
    };
    for (stream, wait, many) in &spec.waits {
        for wait in spread(*wait, if *many { 300 } else { 1 }) {
            batch.add(STREAMS[*stream], &wait, now).unwrap();
        }
    }
    for (stream, id, is_start, minute) in &spec.events {
        let tie = Tie { stream: STREAMS[*stream], id: &id.to_string(), attempt: 1 };
        let at = NOON + 60.0 * f64::from(*minute);
        if *is_start {
            batch.start(tie, at, f64::from(*minute % 3)).unwrap();
        } else {
            batch.end(tie, at, Ending::Done).unwrap();
        }
    }
    if let Some(lines) = spec.bad {
        batch.bad_lines("no age", u64::from(lines));
    }
    batch
}

/// The files of a ledger as another process would find them after this one was killed.
fn image(from: &Path, to: &Path) {
    for name in ["ledger.sqlite3", "ledger.sqlite3-wal"] {
        if from.join(name).exists() {
            std::fs::copy(from.join(name), to.join(name)).unwrap();
        }
    }
}

fn assert_same(disk: &dyn Reader, memory: &dyn Reader) {
    assert_eq!(disk.streams().unwrap(), memory.streams().unwrap());
    for stream in STREAMS {
        let (disk, memory) = (disk.window(stream, EVER).unwrap(), memory.window(stream, EVER).unwrap());
        assert_eq!(disk.damage, []);
        assert_eq!(disk.tally, memory.tally, "{stream}");
    }
    assert_eq!(disk.open_waits(None, 99).unwrap(), memory.open_waits(None, 99).unwrap());
    assert_eq!(disk.bad_lines(EVER).unwrap(), memory.bad_lines(EVER).unwrap());
    let (disk, memory) = (disk.extent().unwrap(), memory.extent().unwrap());
    assert_eq!((disk.open, disk.keys), (memory.open, memory.keys));
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(60))]

    /// The ledger in memory, which is never interrupted, is the model.
    #[test]
    fn a_ledger_that_crashes_is_one_that_does_not(steps in steps()) {
        let mut memory = MemoryLedger::new(tight());
        let mut folder = tempfile::tempdir().unwrap();
        let mut disk = Some(SqliteLedger::open(folder.path(), tight()).unwrap());
        let mut now = NOON;
        for step in steps {
            match step {
                Step::Commit(specs) => {
                    let batches: Vec<Batch> = specs.iter().map(|spec| batch(spec, now)).collect();
                    let receipt = disk.as_mut().unwrap().commit(&batches, now).unwrap();
                    prop_assert_eq!(receipt, memory.commit(&batches, now).unwrap());
                }
                Step::Maintain(hours) => {
                    for _ in 0..hours {
                        now += HOUR;
                        disk.as_mut().unwrap().maintain(now).unwrap();
                        memory.maintain(now).unwrap();
                    }
                }
                Step::Reopen => {
                    drop(disk.take());
                    disk = Some(SqliteLedger::open(folder.path(), tight()).unwrap());
                }
                Step::Crash => {
                    let next = tempfile::tempdir().unwrap();
                    image(folder.path(), next.path());
                    drop(disk.take());
                    folder = next;
                    disk = Some(SqliteLedger::open(folder.path(), tight()).unwrap());
                    prop_assert_eq!(disk.as_ref().unwrap().damage(), &[]);
                }
            }
            assert_same(disk.as_ref().unwrap(), &memory);
        }
        let reader = disk.as_ref().unwrap().sqlite_reader().unwrap();
        prop_assert_eq!(reader.check().unwrap(), []);
    }
}

/// A batch of its own for each number.
fn numbered(number: u64) -> Batch {
    let mut batch = Batch::keyed(&number.to_string(), Digest::of(&number.to_le_bytes())).unwrap();
    let stream = format!("stream-{}", number % 10);
    let at = NOON + (number % 5) as f64 * HOUR;
    let wait = Wait::new((number + 1) as f64 * 1e-3, Ending::Done).unwrap().with_at(at).unwrap();
    batch.add(&stream, &wait, at).unwrap();
    batch
}

/// How often each number is in the ledger.
fn numbers(ledger: &dyn Reader) -> BTreeMap<u64, u64> {
    let mut found = BTreeMap::new();
    for stream in ledger.streams().unwrap() {
        let window = ledger.window(&stream, EVER).unwrap();
        assert_eq!(window.damage, []);
        for cell in window.tally.first_attempts().events {
            assert_eq!(cell.over, cell.upto, "few enough to be exact");
            *found.entry((cell.upto * 1e3).round() as u64 - 1).or_default() += cell.done as u64;
        }
    }
    found
}

/// A power cut leaves any part of the last writes. Every commit up to the cut is there, none after it, and sending all
/// again counts none twice.
#[test]
fn a_log_cut_anywhere_keeps_what_was_written_before() {
    let folder = tempfile::tempdir().unwrap();
    let mut ledger = SqliteLedger::open(folder.path(), tight()).unwrap();
    let wal = folder.path().join("ledger.sqlite3-wal");
    let length = || std::fs::metadata(&wal).unwrap().len();
    let mut lengths = vec![length()];
    for number in 0..40 {
        let receipt = ledger.commit(&[numbered(2 * number), numbered(2 * number + 1)], NOON).unwrap();
        assert!(receipt.batches.iter().all(Result::is_ok));
        lengths.push(length());
    }
    assert!(lengths.windows(2).all(|w| w[0] < w[1]), "no checkpoint in between");
    let mut random = Xoshiro256PlusPlus::seed_from_u64(7);
    for round in 0..40 {
        let cut = random.random_range(lengths[0]..=lengths[40]);
        let copy = tempfile::tempdir().unwrap();
        image(folder.path(), copy.path());
        let mut bytes = std::fs::read(&wal).unwrap();
        bytes.truncate(cut as usize);
        if round % 2 == 0 {
            // Room that was given to the file and never written.
            bytes.resize(bytes.len() + random.random_range(0..9_000), 0);
        }
        std::fs::write(copy.path().join("ledger.sqlite3-wal"), bytes).unwrap();
        let mut ledger = SqliteLedger::open(copy.path(), tight()).unwrap();
        assert_eq!(ledger.damage(), [], "a cut is no damage");
        let whole = lengths.iter().filter(|length| **length <= cut).count() as u64 - 1;
        let once = |upto: u64| (0..upto).map(|number| (number, 1)).collect::<BTreeMap<_, _>>();
        assert_eq!(numbers(&ledger), once(2 * whole), "cut at {cut}");
        let all: Vec<Batch> = (0..80).map(numbered).collect();
        ledger.commit(&all, NOON).unwrap();
        assert_eq!(numbers(&ledger), once(80));
    }
}

/// The store itself would pass over a broken log in silence.
#[test]
fn a_broken_log_is_named() {
    let folder = tempfile::tempdir().unwrap();
    let mut ledger = SqliteLedger::open(folder.path(), tight()).unwrap();
    let wal = folder.path().join("ledger.sqlite3-wal");
    let mut lengths = Vec::new();
    for number in 0..40 {
        ledger.commit(&[numbered(number)], NOON).unwrap();
        lengths.push(std::fs::metadata(&wal).unwrap().len() as usize);
    }
    let mut random = Xoshiro256PlusPlus::seed_from_u64(5);
    for _ in 0..60 {
        let copy = tempfile::tempdir().unwrap();
        image(folder.path(), copy.path());
        let mut bytes = std::fs::read(&wal).unwrap();
        let bit = random.random_range(0..8 * lengths[37]);
        bytes[bit / 8] ^= 1 << (bit % 8);
        std::fs::write(copy.path().join("ledger.sqlite3-wal"), bytes).unwrap();
        let Ok(ledger) = SqliteLedger::open(copy.path(), tight()) else { panic!("bit {bit}") };
        let found = numbers(&ledger);
        assert!(found.values().all(|count| *count == 1));
        assert_eq!(found.len() < 40, !ledger.damage().is_empty(), "bit {bit}: {found:?}");
    }
}

/// Set for the process that is to be killed: its folder, and the first number that is not acknowledged.
const VICTIM: &str = "OUTWAIT_LEDGER_VICTIM";

/// Not a test of its own: what the killed process does. Commits in a loop and says what is acknowledged.
#[test]
fn victim() {
    let Ok(task) = std::env::var(VICTIM) else { return };
    let (folder, first) = task.split_once('|').unwrap();
    let mut ledger = SqliteLedger::open(Path::new(folder), tight()).unwrap();
    let mut next: u64 = first.parse().unwrap();
    let mut now = NOON;
    loop {
        let group: Vec<Batch> = (next..next + 1 + next % 4).map(numbered).collect();
        let receipt = ledger.commit(&group, now).unwrap();
        assert!(receipt.batches.iter().all(Result::is_ok));
        next += group.len() as u64;
        writeln!(std::io::stdout().lock(), "acknowledged {next}").unwrap();
        if next % 16 < 2 {
            now += 120.0;
            ledger.maintain(now).unwrap();
        }
    }
}

/// `OUTWAIT_KILLS=50 cargo test --test ledger killed` for a long run.
#[test]
fn killed_at_any_moment_it_counts_once() {
    let kills = std::env::var("OUTWAIT_KILLS").map_or(4, |kills| kills.parse().unwrap());
    let folder = tempfile::tempdir().unwrap();
    let mut random = Xoshiro256PlusPlus::seed_from_u64(11);
    let mut acknowledged = 0;
    for _ in 0..kills {
        let mut child = Command::new(std::env::current_exe().unwrap())
            .args(["--exact", "crashes::victim", "--nocapture"])
            .env(VICTIM, format!("{}|{acknowledged}", folder.path().display()))
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .unwrap();
        let lines = BufReader::new(child.stdout.take().unwrap());
        let reading = std::thread::spawn(move || {
            let said = |line: String| line.strip_prefix("acknowledged ")?.parse::<u64>().ok();
            lines.lines().map_while(Result::ok).filter_map(said).last()
        });
        std::thread::sleep(Duration::from_millis(random.random_range(50..400)));
        child.kill().unwrap();
        child.wait().unwrap();
        let before = acknowledged;
        acknowledged = reading.join().unwrap().unwrap_or(acknowledged).max(before);
        let ledger = SqliteLedger::open(folder.path(), tight()).unwrap();
        assert_eq!(ledger.damage(), []);
        let found = numbers(&ledger);
        assert!(found.values().all(|count| *count == 1), "counted twice after {acknowledged}");
        let missing: Vec<u64> = (0..acknowledged).filter(|number| !found.contains_key(number)).collect();
        assert_eq!(missing, Vec::<u64>::new(), "acknowledged up to {acknowledged}");
        assert!(found.len() as u64 <= acknowledged + 4, "at most one group was on its way");
    }
    println!("{kills} kills, {acknowledged} batches acknowledged");
    let reader = SqliteLedger::open(folder.path(), tight()).unwrap().sqlite_reader().unwrap();
    assert_eq!(reader.check().unwrap(), []);
}

/// Set when it goes out of sight, also by a panic, so that no thread waits for ever for a test that has failed.
struct Over<'a>(&'a AtomicBool);

impl Drop for Over<'_> {
    fn drop(&mut self) {
        self.0.store(true, Ordering::SeqCst);
    }
}

/// A reader on another thread sees each commit whole, all that were acknowledged, and none twice, while the writer
/// merges and rolls under its eyes.
#[test]
fn a_reader_beside_a_busy_writer() {
    let folder = tempfile::tempdir().unwrap();
    let mut ledger = SqliteLedger::open(folder.path(), tight()).unwrap();
    let (acknowledged, begun, over) = (AtomicU64::new(0), AtomicU64::new(0), AtomicBool::new(false));
    let reader = ledger.reader().unwrap();
    let total = 400;
    std::thread::scope(|scope| {
        let (acknowledged, begun, ended, order) = (&acknowledged, &begun, Over(&over), Ordering::SeqCst);
        let over = &over;
        let reading = scope.spawn(move || {
            let mut reads = 0;
            while !over.load(order) {
                let least = acknowledged.load(order);
                let count: u64 = reader.window("a", EVER).unwrap().tally.counts().iter().sum();
                let most = begun.load(order);
                assert!((least..=most).contains(&count), "{count} is not from {least} to {most}");
                reads += 1;
            }
            reads
        });
        let mut now = NOON;
        for i in 0..total {
            begun.store(i + 1, order);
            let mut batch = Batch::default();
            let wait = Wait::new(1.0 + i as f64, Ending::Done).unwrap();
            batch.add("a", &wait, NOON + (i % 30) as f64 * HOUR).unwrap();
            ledger.commit(&[batch], now).unwrap();
            acknowledged.store(i + 1, order);
            now += 0.05 * HOUR;
            ledger.maintain(now).unwrap();
        }
        drop(ended);
        assert!(reading.join().unwrap() > 0);
    });
    let mut periods = Vec::new();
    ledger.visit("a", EVER, &mut |period, _: Tally| periods.push(period)).unwrap();
    assert!(periods.iter().any(|p| p.hours().end.0 - p.hours().start.0 == 24), "hours were rolled meanwhile");
    assert!(periods[0].hours().start >= Hour::first_of(Hour::of(NOON).day()));
}

/// Readers that leave no pause between them do not make the write-ahead log grow without end.
#[test]
fn readers_without_a_pause_do_not_keep_the_log() {
    let folder = tempfile::tempdir().unwrap();
    let mut ledger = SqliteLedger::open(folder.path(), Options::default()).unwrap();
    let over = AtomicBool::new(false);
    let readers: Vec<_> = (0..3).map(|_| ledger.reader().unwrap()).collect();
    let mut most = 0;
    std::thread::scope(|scope| {
        let _ended = Over(&over);
        for reader in readers {
            let over = &over;
            scope.spawn(move || {
                while !over.load(Ordering::SeqCst) {
                    // Slow readers: each holds its view for a while.
                    let slow = &mut |_, _| std::thread::sleep(Duration::from_millis(2));
                    reader.visit("a", EVER, slow).unwrap();
                }
            });
        }
        for i in 0..400 {
            let mut batch = Batch::default();
            for j in 0..10_000 {
                let wait =
                    Wait::new(1.0 + f64::from(i * 10_000 + j) * std::f64::consts::PI * 1e-3, Ending::Done)
                        .unwrap();
                batch
                    .add(["a", "b", "c", "d"][j as usize % 4], &wait, NOON + f64::from(i % 5) * HOUR)
                    .unwrap();
            }
            ledger.commit(&[batch], NOON).unwrap();
            ledger.maintain(NOON + 24.0 * HOUR).unwrap();
            most = most.max(std::fs::metadata(folder.path().join("ledger.sqlite3-wal")).unwrap().len());
        }
    });
    println!("longest log: {:.1} MiB", most as f64 / f64::from(1 << 20));
    assert!(most < 20 << 20, "{most} bytes");
}
