//! The process killed at any moment under load: what it acknowledged is there, once.

use std::collections::HashMap;
use std::net::{SocketAddr, TcpStream};
use std::path::Path;
use std::process::Command;
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::time::Duration;

use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

use crate::client::{get, read_answer, write_request};
use crate::process::Process;

/// Batch `number` holds 1 to 20 waits of one age of its own, so that it is known again among all others; a thousand of
/// them go to one stream, few enough for its tally to keep every age exactly.
fn batch(number: u64) -> (String, u64) {
    let waits = 1 + number % 20;
    let line = format!("{{\"stream\":\"stream-{}\",\"elapsed\":{}}}\n", number / 1_000, age(number));
    (line.repeat(waits as usize), waits)
}

pub(crate) fn age(number: u64) -> f64 {
    (number + 1) as f64 * 1e-3
}

fn send(to: SocketAddr, number: u64) -> Option<u64> {
    let (body, waits) = batch(number);
    let mut stream = TcpStream::connect(to).ok()?;
    stream.set_read_timeout(Some(Duration::from_secs(30))).ok()?;
    let key = format!("batch-{number}");
    write_request(&mut stream, "POST", "/v1/waits", &[("Idempotency-Key", &key)], body.as_bytes()).ok()?;
    let answer = read_answer(&mut stream).ok()?;
    (answer.status == 200 && answer.json()["waits"] == waits).then_some(waits)
}

/// How often each age was counted, by the program's own export.
pub(crate) fn counted(folder: &Path) -> HashMap<u64, u64> {
    let output = Command::new(env!("CARGO_BIN_EXE_outwait"))
        .args(["ledger", "export", "--data"])
        .arg(folder)
        .output()
        .unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let mut counts = HashMap::new();
    for line in output.stdout.split(|byte| *byte == b'\n').filter(|line| !line.is_empty()) {
        let wait: serde_json::Value = serde_json::from_slice(line).unwrap();
        let number = (wait["elapsed"].as_f64().unwrap() * 1e3).round() as u64 - 1;
        *counts.entry(number).or_default() += wait["count"].as_u64().unwrap_or(1);
    }
    counts
}

/// `OUTWAIT_KILLS=50 cargo test --release --test daemon killed -- --nocapture` for a long run.
#[test]
fn killed_at_any_moment_under_load_it_counts_once() {
    let kills = std::env::var("OUTWAIT_KILLS").map_or(3, |kills| kills.parse().unwrap());
    let folder = tempfile::tempdir().unwrap();
    let mut random = Xoshiro256PlusPlus::seed_from_u64(17);
    let next = AtomicU64::new(0);
    let mut unsure: Vec<u64> = Vec::new();
    let mut acknowledged: HashMap<u64, u64> = HashMap::new();
    for _ in 0..kills {
        let process = Process::start(folder.path());
        let (address, over) = (process.address, AtomicBool::new(false));
        // What was on its way at the last kill is sent again first: a client cannot know what became of it.
        let again = std::mem::take(&mut unsure);
        let outcomes: Vec<(u64, Option<u64>)> = std::thread::scope(|scope| {
            let senders: Vec<_> = (0..4)
                .map(|i| {
                    let (next, over, again) = (&next, &over, &again);
                    scope.spawn(move || {
                        let mut mine: Vec<(u64, Option<u64>)> =
                            again.iter().skip(i).step_by(4).map(|n| (*n, send(address, *n))).collect();
                        while !over.load(Ordering::SeqCst) {
                            let number = next.fetch_add(1, Ordering::SeqCst);
                            mine.push((number, send(address, number)));
                        }
                        mine
                    })
                })
                .collect();
            std::thread::sleep(Duration::from_millis(random.random_range(100..600)));
            process.kill();
            over.store(true, Ordering::SeqCst);
            senders.into_iter().flat_map(|sender| sender.join().unwrap()).collect()
        });
        for (number, outcome) in outcomes {
            match outcome {
                Some(waits) => drop(acknowledged.insert(number, waits)),
                None => unsure.push(number),
            }
        }
    }
    // Sending all of it again counts nothing twice.
    let process = Process::start(folder.path());
    for number in 0..next.load(Ordering::SeqCst).min(200) {
        assert!(send(process.address, number).is_some());
        acknowledged.insert(number, batch(number).1);
    }
    assert_eq!(get(process.address, "/readyz").status, 200);
    process.kill();
    let counted = counted(folder.path());
    for (number, waits) in &acknowledged {
        assert_eq!(counted.get(number), Some(waits), "batch {number} was acknowledged");
    }
    for (number, waits) in &counted {
        assert_eq!(*waits, batch(*number).1, "batch {number} is whole or not there");
    }
    println!("{kills} kills, {} batches acknowledged, {} unsure", acknowledged.len(), unsure.len());
    assert!(acknowledged.len() > 20);
}

/// A signal ends it, and what was acknowledged is there.
#[test]
fn it_ends_gracefully_when_asked() {
    let folder = tempfile::tempdir().unwrap();
    let process = Process::start(folder.path());
    assert_eq!(send(process.address, 4), Some(5));
    assert_eq!(process.stop().code(), Some(0));
    assert_eq!(counted(folder.path()), HashMap::from([(4, 5)]));
    let check = Command::new(env!("CARGO_BIN_EXE_outwait"))
        .args(["ledger", "check", "--data"])
        .arg(folder.path())
        .output()
        .unwrap();
    assert_eq!(String::from_utf8_lossy(&check.stdout), "the ledger is sound\n");
    // A copy of it is a ledger too.
    let copy = tempfile::tempdir().unwrap();
    let target = copy.path().join("ledger.sqlite3");
    let backup = Command::new(env!("CARGO_BIN_EXE_outwait"))
        .args(["ledger", "backup", "--data"])
        .arg(folder.path())
        .arg(&target)
        .output()
        .unwrap();
    assert!(backup.status.success(), "{}", String::from_utf8_lossy(&backup.stderr));
    assert_eq!(counted(copy.path()), HashMap::from([(4, 5)]));
}

/// Two on one folder: the second says who has it, and changes nothing.
#[test]
fn a_second_one_on_the_same_folder_refuses() {
    let folder = tempfile::tempdir().unwrap();
    let first = Process::start(folder.path());
    let second = Command::new(env!("CARGO_BIN_EXE_outwait"))
        .args(["serve", "--listen", "127.0.0.1:0", "--data"])
        .arg(folder.path())
        .output()
        .unwrap();
    assert_eq!(second.status.code(), Some(5));
    let error = String::from_utf8_lossy(&second.stderr);
    assert!(error.contains(&first.id().to_string()) && error.contains("in use"), "{error}");
    assert_eq!(send(first.address, 1), Some(2));
    first.kill();
}
