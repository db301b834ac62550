//! The daemon under load over loopback: how many waits a second it makes durable, how long an acknowledgement takes at half
//! that, and what memory it takes. Beside it the same bytes parsed and counted in memory with no server.
//!
//! `cargo bench --bench load` (a minute); `-- SECONDS` for another length of each part. `-- soak MINUTES RATE` sends so many
//! waits a second, each stamped with its own minute, and reads the daemon's memory every minute.
#![allow(clippy::unwrap_used, clippy::expect_used)] // a benchmark may fail

use std::io::{Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::num::NonZeroUsize;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{Duration, Instant, SystemTime, UNIX_EPOCH};

#[path = "../tests/support/process.rs"]
mod process;

use outwait::intake::{Options, Record, Sink, Source, read};
use outwait::tally::Book;
use process::Process;

/// Lines in one batch.
const LINES: usize = 20_000;
/// Bodies that the senders take in turn.
const BODIES: usize = 32;
/// Connections that send at once.
const SENDERS: usize = 4;
const STREAMS: usize = 100;

fn main() {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let number = |i: usize| arguments.iter().filter_map(|argument| argument.parse::<f64>().ok()).nth(i);
    if arguments.iter().any(|argument| argument == "soak") {
        return soak(number(0).unwrap_or(60.0) as usize, number(1).unwrap_or(250_000.0));
    }
    let (seconds, now) = (number(0).unwrap_or(10.0), now());
    let bodies = bodies(now);
    let bytes: usize = bodies.iter().map(Vec::len).sum();
    println!(
        "{} lines, {:.0} bytes each, {STREAMS} streams",
        BODIES * LINES,
        bytes as f64 / (BODIES * LINES) as f64
    );
    for threads in [1, 2] {
        println!("in memory, no server, {threads} thread(s): {:.0} waits/s", in_memory(&bodies, threads));
    }
    let folder = tempfile::tempdir().expect("a folder");
    let daemon = Process::start(folder.path());
    let before = daemon.memory();
    let whole = load(daemon.address, &bodies, seconds, None);
    println!(
        "durable, {SENDERS} connections: {:.0} waits/s; acknowledged after {}",
        whole.rate,
        whole.times()
    );
    let half = load(daemon.address, &bodies, seconds, Some(250_000.0));
    println!("at {:.0} waits/s: acknowledged after {}", half.rate, half.times());
    println!("memory: {before:.0} MiB at the start, {:.0} MiB after", daemon.memory());
    let sent = whole.acknowledged + half.acknowledged;
    println!("{sent} waits acknowledged, {} in the daemon's own count", counted(daemon.address));
    drop(daemon);
    let began = Instant::now();
    let daemon = Process::start(folder.path());
    println!("started again on it after {:.2} s", began.elapsed().as_secs_f64());
    drop(daemon);
    many_streams(now);
}

/// Ten thousand streams over fourteen days, live; then a start on what they left.
fn many_streams(now: f64) {
    let folder = tempfile::tempdir().expect("a folder");
    let daemon = Process::start(folder.path());
    for day in 0..14 {
        for lot in 0..10 {
            let mut text = String::new();
            for i in 0..1_000 {
                for k in 0..5 {
                    let (stream, age) = (1_000 * lot + i, 0.01 * f64::from(1 + (i * 7 + k * 13 + day) % 500));
                    let at = now - 86_400.0 * f64::from(13 - day) - 60.0 * f64::from(k);
                    text +=
                        &format!("{{\"stream\":\"live.{stream}\",\"elapsed\":{age:.4},\"at\":{at:.3}}}\n");
                }
            }
            assert!(post(&mut TcpStream::connect(daemon.address).expect("a connection"), text.as_bytes()));
        }
    }
    std::thread::sleep(Duration::from_secs(5));
    println!("10,000 streams x 14 days: {:.0} MiB of memory while advice is made", daemon.memory());
    drop(daemon);
    let began = Instant::now();
    let _daemon = Process::start(folder.path());
    println!("started on them after {:.2} s", began.elapsed().as_secs_f64());
}

/// A minute's waits after the other; memory after each.
fn soak(minutes: usize, rate: f64) {
    let folder = tempfile::tempdir().expect("a folder");
    let daemon = Process::start(folder.path());
    let mut memory = vec![daemon.memory()];
    let mut acknowledged = 0;
    for minute in 1..=minutes {
        acknowledged += load(daemon.address, &bodies(now()), 60.0, Some(rate)).acknowledged;
        memory.push(daemon.memory());
        println!("minute {minute}: {acknowledged} waits acknowledged, {:.0} MiB", daemon.memory());
    }
    println!("{acknowledged} waits acknowledged, {} in the daemon's own count", counted(daemon.address));
    for (part, chunk) in memory.chunks(memory.len().div_ceil(6)).enumerate() {
        println!("memory, sixth {}: up to {:.0} MiB", part + 1, chunk.iter().copied().fold(0.0, f64::max));
    }
}

fn now() -> f64 {
    SystemTime::now().duration_since(UNIX_EPOCH).map_or(0.0, |t| t.as_secs_f64())
}

fn bodies(now: f64) -> Vec<Vec<u8>> {
    (0..BODIES).map(|i| body(i, now, STREAMS)).collect()
}

fn body(number: usize, now: f64, streams: usize) -> Vec<u8> {
    let mut text = String::with_capacity(LINES * 90);
    let mut state = number as u64 + 1;
    for line in 0..LINES {
        // A linear congruential generator (Knuth, MMIX): the ages only need to differ.
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        let u = (state >> 11) as f64 / (1u64 << 53) as f64;
        let age = 0.02 * (-(1.0 - u).ln()).powf(1.7) + 1e-4;
        let (stream, at) = (state as usize % streams, now - (line % 600) as f64 * 0.1);
        let ending = if age > 0.8 { "gave_up" } else { "done" };
        text += &format!(
            "{{\"stream\":\"catalogue.lookup-{stream}\",\"elapsed\":{:.4},\"ending\":\"{ending}\",\"at\":{at:.2}}}\n",
            age.min(0.8)
        );
    }
    text.into_bytes()
}

#[derive(Default)]
struct Counting(Book);

impl Sink for Counting {
    fn take(&mut self, record: &Record<'_>) {
        let _ = self.0.add(record.stream, &record.wait);
    }
    fn fork(&self) -> Self {
        Counting::default()
    }
    fn absorb(&mut self, other: Self) {
        self.0.merge(other.0);
    }
}

fn in_memory(bodies: &[Vec<u8>], threads: usize) -> f64 {
    let began = Instant::now();
    let text: Vec<u8> = bodies.concat();
    let copied = began.elapsed();
    let options = Options { threads: NonZeroUsize::new(threads), ..Options::default() };
    let source = Source::reader("bodies", std::io::Cursor::new(text));
    let outcome = read(vec![source], &options, Counting::default(), &mut |_| ());
    assert!(outcome.is_ok_and(|(_, report)| report.waits == (BODIES * LINES) as u64));
    (BODIES * LINES) as f64 / (began.elapsed() - copied).as_secs_f64()
}

/// The waits that the daemon says it has taken.
fn counted(to: SocketAddr) -> String {
    let mut stream = TcpStream::connect(to).expect("a connection");
    stream.write_all(b"GET /metrics HTTP/1.1\r\nHost: l\r\nConnection: close\r\n\r\n").expect("a request");
    let mut text = String::new();
    stream.read_to_string(&mut text).expect("an answer");
    let line = text.lines().find_map(|line| line.strip_prefix("outwait_waits_total "));
    line.unwrap_or("none").to_owned()
}

/// Sends a batch; whether it was acknowledged. Keeps the connection.
fn post(stream: &mut TcpStream, body: &[u8]) -> bool {
    let head = format!("POST /v1/waits HTTP/1.1\r\nHost: l\r\nContent-Length: {}\r\n\r\n", body.len());
    if stream.write_all(head.as_bytes()).and_then(|()| stream.write_all(body)).is_err() {
        return false;
    }
    let mut answer = Vec::new();
    let mut part = [0; 4096];
    loop {
        let Ok(n) = stream.read(&mut part) else { return false };
        answer.extend_from_slice(&part[..n]);
        let Some(end) = answer.windows(4).position(|w| w == b"\r\n\r\n") else {
            if n == 0 {
                return false;
            }
            continue;
        };
        let head = String::from_utf8_lossy(&answer[..end]).to_ascii_lowercase();
        let length = head
            .split("content-length: ")
            .nth(1)
            .and_then(|rest| rest.split("\r\n").next()?.parse::<usize>().ok());
        if answer.len() >= end + 4 + length.unwrap_or(0) {
            return head.starts_with("http/1.1 200");
        }
        if n == 0 {
            return false;
        }
    }
}

struct Outcome {
    acknowledged: u64,
    rate: f64,
    seconds: Vec<f64>,
}

impl Outcome {
    fn times(&self) -> String {
        let at = |share: f64| {
            let i = ((self.seconds.len() as f64 * share) as usize).min(self.seconds.len().saturating_sub(1));
            1e3 * self.seconds.get(i).copied().unwrap_or(f64::NAN)
        };
        format!("{:.1} ms (p50), {:.1} ms (p99), {:.1} ms (longest)", at(0.5), at(0.99), at(1.0))
    }
}

/// All senders for so long, as fast as they may or at a rate.
fn load(to: SocketAddr, bodies: &[Vec<u8>], seconds: f64, rate: Option<f64>) -> Outcome {
    let lines = if rate.is_some() { 2_000 } else { LINES };
    // Smaller batches where the time to the answer is what counts.
    let parts: Vec<&[u8]> = bodies.iter().flat_map(|body| split(body, lines)).collect();
    let (next, began) = (AtomicU64::new(0), Instant::now());
    let mut seconds_each: Vec<f64> = std::thread::scope(|scope| {
        let senders: Vec<_> = (0..SENDERS)
            .map(|_| {
                let (next, parts) = (&next, &parts);
                scope.spawn(move || {
                    let mut stream = TcpStream::connect(to).expect("a connection");
                    let _ = stream.set_nodelay(true);
                    let mut times = Vec::new();
                    loop {
                        let number = next.fetch_add(1, Ordering::Relaxed);
                        if let Some(rate) = rate {
                            let due = number as f64 * lines as f64 / rate;
                            if due > seconds {
                                return times;
                            }
                            let wait = due - began.elapsed().as_secs_f64();
                            std::thread::sleep(Duration::from_secs_f64(wait.max(0.0)));
                        } else if began.elapsed().as_secs_f64() > seconds {
                            return times;
                        }
                        let sent = Instant::now();
                        assert!(post(&mut stream, parts[number as usize % parts.len()]), "not acknowledged");
                        times.push(sent.elapsed().as_secs_f64());
                    }
                })
            })
            .collect();
        senders.into_iter().flat_map(|sender| sender.join().expect("a sender")).collect()
    });
    let took = began.elapsed().as_secs_f64();
    seconds_each.sort_by(f64::total_cmp);
    let acknowledged = (seconds_each.len() * lines) as u64;
    Outcome { acknowledged, rate: acknowledged as f64 / took, seconds: seconds_each }
}

fn split(body: &[u8], lines: usize) -> Vec<&[u8]> {
    let ends: Vec<usize> =
        body.iter().enumerate().filter(|(_, byte)| **byte == b'\n').map(|(i, _)| i + 1).collect();
    let mut from = 0;
    ends.chunks(lines)
        .filter_map(|chunk| {
            let to = *chunk.last()?;
            Some(&body[std::mem::replace(&mut from, to)..to])
        })
        .collect()
}
