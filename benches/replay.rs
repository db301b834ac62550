//! What a replay costs: counting waits in their order with the timer of RFC 6298 running along, and the roll over the weeks.
//!
//! `cargo bench --bench replay`. 10^7 waits of eight streams over twelve weeks; `OUTWAIT_WAITS=1000000` for fewer. Filling
//! the log is the one pass beyond reading; the roll no longer depends on the number of waits.

#![allow(clippy::unwrap_used, missing_docs)]

use std::hint::black_box;
use std::time::{Duration, Instant};

use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use outwait::policy::{self, Policy};
use outwait::replay::{Log, Roll};
use outwait::tally::Book;
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

const WAITS: u64 = 10_000_000;
const STREAMS: u64 = 8;
const WEEK: f64 = 7.0 * 86_400.0;
const WEEKS: f64 = 12.0;

fn waits() -> u64 {
    std::env::var("OUTWAIT_WAITS").ok().and_then(|n| n.parse().ok()).unwrap_or(WAITS)
}

fn policy() -> Policy {
    let text =
        "version: 1\nstreams: [{match: '*', aim: rate, worth: {done: 1}, pause: {gave_up: 10ms}, now: 1s}]";
    policy::parse_bytes(text.as_bytes(), "policy").unwrap()
}

/// Log-logistic waits of a median of 30 ms, cut off at 1 s; made one by one, so that none need be kept.
fn each(n: u64, mut take: impl FnMut(&str, &Wait)) {
    let names: Vec<String> = (0..STREAMS).map(|i| format!("branch-{i}.lookup")).collect();
    let mut random = Xoshiro256PlusPlus::seed_from_u64(1);
    for i in 0..n {
        let share: f64 = random.random();
        let age = (0.03 * (share / (1.0 - share)).powf(0.8)).max(1e-6);
        let (age, ending) = if age < 1.0 { (age, Ending::Done) } else { (1.0, Ending::GaveUp) };
        let at = 1.7e9 + WEEKS * WEEK * i as f64 / n as f64;
        take(&names[(i % STREAMS) as usize], &Wait::new(age, ending).unwrap().with_at(at).unwrap());
    }
}

fn bench(criterion: &mut Criterion) {
    let n = waits();
    let policy = policy();
    let mut group = criterion.benchmark_group("replay");
    group.sample_size(10).measurement_time(Duration::from_secs(1));
    group.throughput(Throughput::Elements(n));
    let once = |run: &dyn Fn()| {
        let start = Instant::now();
        run();
        start.elapsed()
    };
    let times = |iterations: u64, run: &dyn Fn()| (0..iterations).map(|_| once(run)).sum::<Duration>();
    group.bench_function("make the waits", |b| {
        b.iter_custom(|i| {
            times(i, &|| {
                each(n, |name, wait| {
                    black_box((name, wait));
                })
            })
        });
    });
    group.bench_function("count them as weigh does", |b| {
        b.iter_custom(|i| {
            times(i, &|| {
                let mut book = Book::default();
                each(n, |name, wait| book.add(name, wait).unwrap());
                black_box(book);
            })
        });
    });
    group.bench_function("count them in order", |b| {
        b.iter_custom(|i| {
            times(i, &|| {
                let mut log = Log::default();
                each(n, |name, wait| log.add(name, wait).unwrap());
                black_box(log);
            })
        });
    });
    let mut log = Log::default();
    each(n, |name, wait| log.add(name, wait).unwrap());
    group.throughput(Throughput::Elements(STREAMS));
    group.bench_function("roll eight streams over eleven weeks", |b| {
        b.iter(|| Roll { policy: Some(&policy), newest: None, seed: 1 }.all(&log));
    });
    group.finish();
}

criterion_group!(benches, bench);
criterion_main!(benches);
