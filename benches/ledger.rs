//! What the ledger costs: commits on one core with the disk's own speed, and opening a large one.
//!
//! ```sh
//! cargo bench --bench ledger                              # commits, and a ledger of a day
//! OUTWAIT_BENCH_HOURS=336 cargo bench --bench ledger open # a ledger of 14 days: some minutes, 2 GB in the temporary folder
//! ```
//!
//! Batches are made before the clock runs; what it measures is `commit`, with the store's synchronisation.

#![allow(clippy::unwrap_used)] // a bench may fail

use std::io::Write;
use std::path::Path;
use std::process::Command;
use std::time::{Duration, Instant};

use outwait::ledger::{Batch, Digest, Hour, Ledger, Options, Reader, SqliteLedger};
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

const NOON: f64 = 1_796_040_000.0;
const HOUR: f64 = 3_600.0;

fn main() {
    let wanted: Vec<String> = std::env::args().skip(1).filter(|arg| !arg.starts_with('-')).collect();
    if let [reopened, folder] = &wanted[..]
        && reopened == "reopen"
    {
        return reopen(Path::new(folder));
    }
    let asked = |name: &str| wanted.is_empty() || wanted.iter().any(|w| w == name);
    if asked("commit") {
        println!(
            " streams  batches    waits      waits/s  batches/s   p50 ms   p99 ms   max ms   cpu ns  log MiB file MiB peak MiB"
        );
        for streams in [1, 100, 10_000] {
            for (batches, waits) in [(1, 1), (1, 1_000), (8, 1_000), (1, 10_000)] {
                if wanted.len() < 4 || wanted[1..4] == [streams, batches, waits].map(|n| n.to_string()) {
                    commits(streams, batches, waits, false);
                }
            }
        }
        println!("with idempotency keys:");
        commits(100, 8, 1_000, true);
    }
    if asked("open") {
        let hours = std::env::var("OUTWAIT_BENCH_HOURS").map_or(24, |hours| hours.parse().unwrap());
        open(10_000, hours);
    }
}

/// Ages as a parser hands them on: microseconds, lognormal about 20 ms; some cut off.
fn wait(random: &mut Xoshiro256PlusPlus, at: f64) -> Wait {
    let normal: f64 = (0..12).map(|_| random.random::<f64>()).sum::<f64>() - 6.0;
    let age = ((0.02f64.ln() + 0.8 * normal).exp() * 1e6).round().max(1.0) / 1e6;
    let ending = if random.random_range(0..20) == 0 { Ending::GaveUp } else { Ending::Done };
    Wait::new(age, ending).unwrap().with_at(at).unwrap()
}

/// Commits groups of batches for some seconds of its own time.
fn commits(streams: usize, batches: usize, waits: usize, keys: bool) {
    let folder = tempfile::tempdir().unwrap();
    let mut ledger = SqliteLedger::open(folder.path(), Options::default()).unwrap();
    let names: Vec<String> = (0..streams).map(|i| format!("branch-{i}.lookup")).collect();
    let mut random = Xoshiro256PlusPlus::seed_from_u64(1);
    let (mut spent, mut worked, mut filed, mut times) = (Duration::ZERO, 0, 0u64, Vec::new());
    let mut now = NOON;
    while spent < Duration::from_secs(8) && filed < 12_000_000 {
        let group: Vec<Batch> = (0..batches)
            .map(|i| {
                let mut batch = match keys {
                    true => Batch::keyed(&format!("{filed}-{i}"), Digest::of(b"the body")).unwrap(),
                    false => Batch::default(),
                };
                for _ in 0..waits {
                    let name = &names[random.random_range(0..streams)];
                    batch.add(name, &wait(&mut random, now), now).unwrap();
                }
                batch
            })
            .collect();
        let (start, work) = (Instant::now(), cpu_ns());
        ledger.commit(&group, now).unwrap();
        times.push(start.elapsed());
        spent += start.elapsed();
        worked += cpu_ns() - work;
        filed += (batches * waits) as u64;
        now += 0.01;
    }
    times.sort_unstable();
    let part = |p: f64| times[((times.len() - 1) as f64 * p) as usize].as_secs_f64() * 1e3;
    let extent = ledger.extent().unwrap();
    println!(
        "{streams:>8} {batches:>8} {waits:>8} {:>12.0} {:>10.0} {:>8.2} {:>8.2} {:>8.2} {:>8.0} {:>8.1} {:>8.1} {:>8.1}",
        filed as f64 / spent.as_secs_f64(),
        (times.len() * batches) as f64 / spent.as_secs_f64(),
        part(0.5),
        part(0.99),
        part(1.0),
        worked as f64 / filed as f64,
        extent.log_bytes as f64 / 1048576.0,
        extent.bytes as f64 / 1048576.0,
        peak_mib()
    );
}

/// Opens a ledger of so many streams and hours: closed well, and as a crash leaves it with a full log.
fn open(streams: usize, hours: i32) {
    let folder = tempfile::tempdir().unwrap();
    let options = Options { hours_for: 1e9, keep_for: 1e9, ..Options::default() };
    let names: Vec<String> = (0..streams).map(|i| format!("branch-{i}.lookup")).collect();
    let mut random = Xoshiro256PlusPlus::seed_from_u64(1);
    let mut ledger = SqliteLedger::open(folder.path(), options.clone()).unwrap();
    let start = Instant::now();
    for hour in 0..hours {
        let at = NOON + HOUR * f64::from(hour);
        let mut batch = Batch::default();
        for name in &names {
            for _ in 0..20 {
                batch.add(name, &wait(&mut random, at), at).unwrap();
            }
        }
        ledger.commit(&[batch], at).unwrap();
    }
    println!("filed {streams} streams of {hours} hours in {:.0} s", start.elapsed().as_secs_f64());
    drop(ledger);
    // In a process of its own, as a daemon starts.
    let timed = |what: &str, folder: &Path| {
        print!("open {what}: ");
        std::io::stdout().flush().unwrap();
        let program = std::env::current_exe().unwrap();
        assert!(Command::new(program).arg("reopen").arg(folder).status().unwrap().success());
    };
    timed("after a clean end", folder.path());
    // Fill the log, and leave as a crash would: the files as they are.
    let mut ledger = SqliteLedger::open(folder.path(), options.clone()).unwrap();
    let at = NOON + HOUR * f64::from(hours);
    for _ in 0..options.log_bytes / 400_000 {
        let mut batch = Batch::default();
        for _ in 0..20_000 {
            batch.add(&names[random.random_range(0..streams)], &wait(&mut random, at), at).unwrap();
        }
        ledger.commit(&[batch], at).unwrap();
    }
    let crashed = tempfile::tempdir().unwrap();
    for name in ["ledger.sqlite3", "ledger.sqlite3-wal"] {
        std::fs::copy(folder.path().join(name), crashed.path().join(name)).unwrap();
    }
    drop(ledger);
    timed("after a crash", crashed.path());
}

fn reopen(folder: &Path) {
    let (start, work) = (Instant::now(), cpu_ns());
    let ledger = SqliteLedger::open(folder, Options::default()).unwrap();
    let (opened, worked) = (start.elapsed(), cpu_ns() - work);
    let start = Instant::now();
    let window = ledger.window("branch-77.lookup", Hour(0)..Hour(i32::MAX)).unwrap();
    let read = start.elapsed();
    let extent = ledger.extent().unwrap();
    println!(
        "{:.0} ms, of a core {:.0} ms; {:.0} MiB on disk, {:.1} MiB in the log; window of {} waits in {:.1} ms; peak {:.0} MiB",
        opened.as_secs_f64() * 1e3,
        worked as f64 / 1e6,
        extent.bytes as f64 / 1048576.0,
        extent.log_bytes as f64 / 1048576.0,
        window.tally.counts().iter().sum::<u64>(),
        read.as_secs_f64() * 1e3,
        peak_mib()
    );
}

/// What this thread has had of a core, ns: what a busy machine does not inflate. 0 where the system does not tell.
fn cpu_ns() -> u64 {
    let stat = std::fs::read_to_string("/proc/thread-self/schedstat").unwrap_or_default();
    stat.split_whitespace().next().and_then(|ns| ns.parse().ok()).unwrap_or(0)
}

/// The process's high-water mark, MiB; 0 where the system does not tell.
fn peak_mib() -> f64 {
    let status = std::fs::read_to_string("/proc/self/status").unwrap_or_default();
    let line = status.lines().find(|line| line.starts_with("VmHWM"));
    line.and_then(|line| line.split_whitespace().nth(1)?.parse::<f64>().ok()).unwrap_or(0.0) / 1024.0
}
