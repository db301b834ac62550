//! What a whole advice costs: fits, draws, replicates, verdicts, decision, interval, rivals, quantiles of the time of
//! a request.
//!
//! `cargo bench --bench advise`. One stream at 10⁴ and at 10⁷ waits, then many streams on two threads:
//! `OUTWAIT_STREAMS=10000 cargo bench --bench advise -- streams` advises all ten thousand, without it 500 of them
//! stand for the rest. What is read into a tally before is not part of it. Beside criterion's wall clock stands the
//! least time on a core, which a busy machine disturbs less (Linux only).

#![allow(missing_docs)]

use std::hint::black_box;
use std::time::Instant;

use criterion::{Criterion, criterion_group, criterion_main};
use outwait::advise::{Case, Terms, advise};
use outwait::outlook::Grid;
use outwait::policy::{Entry, Sticky};
use outwait::tail::ensemble;
use outwait::tally::{Cause, Days, Tally};
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use rayon::prelude::*;

/// Streams of the large run, and waits in each.
const STREAMS: usize = 10_000;
const WAITS: usize = 2_000;
/// Days over which they lie.
const DAYS: f64 = 20.0;
const DAY: f64 = 86_400.0;

/// Lognormal waits of a median of 20 ms; one in thirty fails at an age of its own, and a timeout cuts the rest at about the 95% point.
struct Law {
    random: Xoshiro256PlusPlus,
    median: f64,
    sigma: f64,
}

impl Law {
    fn new(seed: u64) -> Law {
        Law { random: Xoshiro256PlusPlus::seed_from_u64(seed), median: 0.02, sigma: 1.0 }
    }

    fn age(&mut self) -> f64 {
        let (radius, angle): (f64, f64) = (1.0 - self.random.random::<f64>(), self.random.random());
        let normal = (-2.0 * radius.ln()).sqrt() * (std::f64::consts::TAU * angle).cos();
        self.median * (self.sigma * normal).exp()
    }

    fn wait(&mut self) -> Option<Wait> {
        let timeout = self.median * (1.645 * self.sigma).exp();
        let age = self.age();
        let (age, ending) = match age {
            t if t > timeout => (timeout, Ending::GaveUp),
            t if self.random.random::<f64>() < 1.0 / 30.0 => (t, Ending::Failed),
            t => (t, Ending::Done),
        };
        Wait::new(age.max(1e-6), ending).ok()
    }
}

fn tally(waits: usize) -> Tally {
    let mut law = Law::new(1);
    let mut tally = Tally::default();
    (0..waits).filter_map(|_| law.wait()).for_each(|wait| tally.add(&wait));
    tally
}

fn entry() -> Entry {
    let mut entry = Entry::without_policy();
    if let Some(worth) = &mut entry.worth {
        worth.pause.gave_up = 0.01;
    }
    entry.retry.sticky = Sticky::Given(0.0);
    entry.retry.repeatable = true;
    entry
}

/// Seconds that this thread was on a core.
fn on_core() -> Option<f64> {
    let times = std::fs::read_to_string("/proc/thread-self/schedstat").ok()?;
    Some(times.split(' ').next()?.parse::<f64>().ok()? * 1e-9)
}

/// Runs it 30 times and prints the least time on a core.
fn print_least<T>(name: &str, run: impl Fn() -> T) {
    let least = (0..30)
        .filter_map(|_| {
            let start = on_core()?;
            black_box(run());
            Some(on_core()? - start)
        })
        .fold(f64::INFINITY, f64::min);
    println!("{name}: {:.2} ms of a core", 1e3 * least);
}

fn one_stream(criterion: &mut Criterion) {
    let entry = entry();
    let mut group = criterion.benchmark_group("advise");
    group.sample_size(20);
    for (name, waits) in [("1e4", 10_000), ("1e7", 10_000_000)] {
        let tally = tally(waits);
        group.bench_function(format!("whole/{name}"), |b| {
            b.iter(|| advise(&Case::new("catalogue.lookup", black_box(&tally)), &entry, 1));
        });
        print_least(&format!("advise/whole/{name}"), || {
            advise(&Case::new("catalogue.lookup", &tally), &entry, 1)
        });
        let sample = tally.first_attempts().sample(Cause::Done);
        let grid = Grid::new(1e-4, 5e-3, 1.0);
        group.bench_function(format!("ensemble/{name}"), |b| {
            b.iter(|| ensemble(black_box(&sample), &grid, 1));
        });
        print_least(&format!("advise/ensemble/{name}"), || ensemble(&sample, &grid, 1));
        group.bench_function(format!("cells/{name}"), |b| {
            b.iter(|| black_box(&tally).first_attempts());
        });
    }
    group.finish();
}

/// A stream of its own law, with times.
fn stream(number: usize) -> Days {
    let mut law = Law::new(number as u64);
    law.median = 0.002 * 1e4_f64.powf(number as f64 / STREAMS as f64);
    law.sigma = 0.4 + 1.2 * (number % 7) as f64 / 6.0;
    let mut days = Days::default();
    for i in 0..WAITS {
        let at = DAY * (20_000.0 + DAYS * i as f64 / WAITS as f64);
        let wait = law.wait().and_then(|wait| wait.with_at(at).ok());
        wait.iter().for_each(|wait| days.add(wait));
    }
    days
}

/// Not by criterion: once is long enough.
fn many_streams(criterion: &mut Criterion) {
    let some = std::env::var("OUTWAIT_STREAMS").ok().and_then(|n| n.parse().ok()).unwrap_or(500);
    let mut group = criterion.benchmark_group("streams");
    group.sample_size(10);
    group.bench_function("one", |b| {
        let days = stream(4_321);
        let terms = Terms { policy: None, newest: days.last_day(), seed: 1, past: None };
        b.iter(|| terms.advise("catalogue.lookup", black_box(&days), None));
    });
    group.finish();
    let test = std::env::args().any(|argument| argument == "--test" || argument.starts_with("advise"));
    let Ok(pool) = rayon::ThreadPoolBuilder::new().num_threads(2).build() else { return };
    if test {
        return;
    }
    // Evenly from all ten thousand.
    let streams: Vec<(String, Days)> = (0..some)
        .map(|i| i * STREAMS / some.max(1))
        .map(|number| (format!("stream-{number}"), stream(number)))
        .collect();
    let newest = streams.iter().filter_map(|(_, days)| days.last_day()).max();
    let terms = Terms { policy: None, newest, seed: 1, past: None };
    let start = Instant::now();
    let advised: Vec<_> =
        pool.install(|| streams.par_iter().map(|(name, days)| terms.advise(name, days, None)).collect());
    let set = terms.set(advised, None);
    let seconds = start.elapsed().as_secs_f64();
    let all = seconds * STREAMS as f64 / some.max(1) as f64;
    println!(
        "streams/two_threads: {} streams of {WAITS} waits in {seconds:.1} s; {STREAMS} take {all:.0} s",
        set.streams.len()
    );
}

criterion_group!(benches, one_stream, many_streams);
criterion_main!(benches);
