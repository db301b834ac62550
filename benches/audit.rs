//! What holding every wait against the advice costs, beside counting the same waits into a book: the second pass beside the
//! first, both without reading.
//!
//! `cargo bench --bench audit`. A million waits in 100 streams over four weeks, cut by a timeout; ten million cost ten times
//! that, since each wait is taken on its own. `open` takes them all as open waits, the dearest case. The whole process, with
//! reading, is measured by `benches/peers/weigh_10m.py`.

#![allow(missing_docs)]

use std::hint::black_box;

use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use outwait::advise::{Lenders, Terms};
use outwait::audit::{Audit, Question, Subject};
use outwait::tally::Book;
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use rayon::prelude::*;

const STREAMS: usize = 100;
const WAITS: usize = 1_000_000;
const WEEKS: f64 = 4.0 * 7.0 * 86_400.0;
/// A Monday.
const BEGIN: f64 = 1_795_996_800.0;

/// Lognormal waits of a median of 20 ms, cut at 0.1 s.
fn waits() -> Vec<(usize, Wait)> {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(7);
    (0..WAITS)
        .filter_map(|i| {
            let (u, v): (f64, f64) = (random.random(), random.random());
            let z = (-2.0 * (1.0 - u).ln()).sqrt() * (std::f64::consts::TAU * v).cos();
            let age = 0.02 * (1.2 * z).exp();
            let (age, ending) = if age > 0.1 { (0.1, Ending::GaveUp) } else { (age, Ending::Done) };
            let at = BEGIN + WEEKS * i as f64 / WAITS as f64;
            Some((random.random_range(0..STREAMS), Wait::new(age, ending).ok()?.with_at(at).ok()?))
        })
        .collect()
}

fn audit(c: &mut Criterion) {
    let waits = waits();
    let names: Vec<String> = (0..STREAMS).map(|i| format!("branch-{i}.lookup")).collect();
    let counted = || {
        let mut book = Book::default();
        for (stream, wait) in &waits {
            let _ = book.add(&names[*stream], wait);
        }
        book
    };
    let book = counted();
    let newest = BEGIN + WEEKS - 1.0;
    let terms = Terms { policy: None, newest: Some((newest / 86_400.0) as i32), seed: 1, past: None };
    let subjects = book
        .streams()
        .par_iter()
        .map(|(stream, days)| Subject::new(&terms, stream, days, None, &Lenders::default()))
        .collect();
    let audit = Audit::new(subjects, Question::default(), Some(newest));
    let mut group = c.benchmark_group("audit");
    group.throughput(Throughput::Elements(waits.len() as u64)).sample_size(10);
    group.bench_function("count", |b| b.iter(|| black_box(counted())));
    group.bench_function("hold", |b| {
        b.iter(|| {
            let mut sums = audit.sums();
            for (stream, wait) in &waits {
                sums.add(&names[*stream], wait, Some("r-8831"));
            }
            black_box(audit.report(sums, Vec::new(), None))
        });
    });
    let open: Vec<(usize, Wait)> = waits
        .iter()
        .filter_map(|(stream, wait)| {
            let outwait::wait::Age::Exact(age) = wait.age() else { return None };
            Some((*stream, Wait::new(age, Ending::Waiting).ok()?.with_at(wait.at()?).ok()?))
        })
        .collect();
    group.bench_function("open", |b| {
        b.iter(|| {
            let mut sums = audit.sums();
            for (stream, wait) in &open {
                sums.add(&names[*stream], wait, Some("r-8831"));
            }
            black_box(audit.report(sums, Vec::new(), None))
        });
    });
    group.finish();
}

criterion_group!(benches, audit);
criterion_main!(benches);
