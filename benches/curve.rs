//! What the nonparametric curves cost, by number of cells. `cargo bench --bench curve`.
//!
//! The cost depends on cells, not on waits: every cell here stands for about a thousand.

use std::hint::black_box;

use criterion::{BenchmarkId, Criterion, Throughput, criterion_group, criterion_main};
use outwait::curve::{AalenJohansen, Empirical, KaplanMeier, LifeTable};
use outwait::outlook::Outlook;
use outwait::tally::{Cells, EventCell, Mass};

/// Disjoint cells from 1 ms on, one in ten with failures too; a timeout at the far end and a few given up between.
fn disjoint(n: usize) -> Cells {
    let age = |i: usize| 1e-3 * (12.0 * i as f64 / n as f64).exp();
    let events = (0..n)
        .map(|i| EventCell {
            over: age(i),
            upto: age(i + 1),
            done: 1_000.0 + (i % 97) as f64,
            failed: if i % 10 == 0 { 13.0 } else { 0.0 },
        })
        .collect();
    let gave_up = (1..=50).map(|i| Mass { age: age(i * n / 50), weight: 500.0 * i as f64 }).collect();
    Cells { events, gave_up, ..Cells::default() }
}

/// Two bucket layouts recorded side by side: every bucket of one overlaps two of the other.
fn overlapping(n: usize) -> Cells {
    let mut cells = disjoint(n / 2);
    let shifted = disjoint(n / 2);
    cells.events.extend(shifted.events.iter().map(|e| {
        let step = (12.0 / n as f64).exp();
        EventCell { over: e.over * step, upto: e.upto * step, ..*e }
    }));
    cells.events.sort_by(|a, b| a.upto.total_cmp(&b.upto));
    cells
}

fn construction(c: &mut Criterion) {
    let mut group = c.benchmark_group("outlook from cells");
    for n in [1_000, 10_000, 100_000, 1_000_000] {
        let cells = disjoint(n);
        group.sample_size(if n < 100_000 { 50 } else { 10 });
        group.throughput(Throughput::Elements(n as u64));
        group.bench_with_input(BenchmarkId::from_parameter(n), &cells, |b, cells| {
            b.iter(|| Empirical::new(black_box(cells)).map(|e| e.survival(1.0)));
        });
    }
    group.finish();

    let mut group = c.benchmark_group("curves with variances from a table");
    for n in [1_000, 100_000] {
        let Ok(table) = LifeTable::of(&disjoint(n)) else { continue };
        group.throughput(Throughput::Elements(n as u64));
        group.bench_with_input(BenchmarkId::new("kaplan-meier", n), &table, |b, table| {
            b.iter(|| KaplanMeier::of(black_box(table)).survival(1.0));
        });
        group.bench_with_input(BenchmarkId::new("aalen-johansen", n), &table, |b, table| {
            b.iter(|| AalenJohansen::of(black_box(table)).survival(1.0));
        });
    }
    group.finish();

    let mut group = c.benchmark_group("overlapping buckets");
    group.sample_size(10);
    for n in [100, 1_000] {
        let cells = overlapping(n);
        group.bench_with_input(BenchmarkId::from_parameter(n), &cells, |b, cells| {
            b.iter(|| LifeTable::of(black_box(cells)).map(|t| t.iterations()));
        });
    }
    group.finish();
}

fn evaluation(c: &mut Criterion) {
    let mut group = c.benchmark_group("one evaluation of S, F_d and A");
    for n in [1_000, 1_000_000] {
        let Ok(outlook) = Empirical::new(&disjoint(n)) else { continue };
        let ages: Vec<f64> =
            (0..1_024).map(|i| 1e-3 * (12.0 * f64::from(i * 37 % 1_024) / 1_024.0).exp()).collect();
        group.throughput(Throughput::Elements(ages.len() as u64));
        group.bench_with_input(BenchmarkId::from_parameter(n), &outlook, |b, outlook| {
            b.iter(|| {
                ages.iter()
                    .map(|&t| outlook.survival(t) + outlook.done(t) + outlook.restricted_mean(t))
                    .sum::<f64>()
            });
        });
    }
    group.finish();
}

criterion_group!(benches, construction, evaluation);
criterion_main!(benches);
