//! What stopping costs: the rate curve by the bin, the doubt of a whole stream, a deadline, replicates.
//!
//! `cargo bench --bench stopping`

// A bench that cannot set its scene should stop.
#![allow(clippy::expect_used)]

use std::hint::black_box;
use std::sync::Arc;

use criterion::{BenchmarkId, Criterion, Throughput, criterion_group, criterion_main};
use outwait::curve::{Empirical, LifeTable};
use outwait::outlook::{Failures, Grid, Sampled};
use outwait::stopping::{
    Aim, Bootstrap, Competing, Doubt, Fade, Failure, GridObjective, Holding, Limits, Objective, Pause,
    RequestTime, Retry, Worth, band, best,
};
use outwait::tail::families::Lognormal;
use outwait::tail::{Family, Law};
use outwait::tally::{Cells, EventCell, Mass};
use rand::SeedableRng;
use rand_xoshiro::Xoshiro256PlusPlus;

fn lognormal(mu: f64, sigma: f64) -> Arc<dyn Law> {
    Lognormal.law(&[mu, sigma.ln()]).expect("in range").into()
}

/// Bins of equal logarithmic width holding a million lognormal waits, the slowest 2% given up.
fn bins(count: usize) -> Cells {
    let law = lognormal(-3.0, 1.0);
    let (low, high) = (law.quantile(1e-6), law.quantile(0.98));
    let edge = |i: usize| low * (high / low).powf(i as f64 / count as f64);
    let mut cells = Cells::default();
    for i in 0..count {
        let ended = 1e6 * (law.survival(edge(i)) - law.survival(edge(i + 1)));
        cells.events.push(EventCell {
            over: edge(i),
            upto: edge(i + 1),
            done: 0.99 * ended,
            failed: 0.01 * ended,
        });
    }
    cells.gave_up.push(Mass { age: high, weight: 2e4 });
    cells
}

fn prices() -> Worth {
    Worth { pause: Pause { gave_up: 0.01, failed: 0.01, done: 0.0 }, ..Worth::default() }
}

fn rate_curve(c: &mut Criterion) {
    let mut group = c.benchmark_group("rate curve and optimum of a step curve");
    for count in [300, 3_000, 30_000] {
        let outlook = Empirical::new(&bins(count)).expect("endings");
        let limits = Limits::new(0.005, 0.38).expect("in order");
        group.throughput(Throughput::Elements(count as u64));
        for (name, fade) in [("constant worth", Fade::Stays), ("half-life", Fade::HalfLife(0.2))] {
            let worth = Worth { fade, ..prices() };
            group.bench_with_input(BenchmarkId::new(name, count), &outlook, |b, outlook| {
                b.iter(|| {
                    let objective =
                        Objective::new(outlook, &worth, &Retry::default(), limits).expect("valid");
                    black_box(best(&objective)).expect("earns")
                });
            });
        }
    }
    group.finish();
}

fn law_by_law(c: &mut Criterion) {
    let limits = Limits::new(0.01, 100.0).expect("in order");
    for (name, failed) in [("lognormal", 0.0), ("lognormal with failures", 0.05)] {
        let outlook = Competing::new(lognormal(0.0, 1.2), Failure::Rate(failed));
        c.bench_function(&format!("optimum, band and 100 values of holding on: {name}"), |b| {
            b.iter(|| {
                let objective =
                    Objective::new(&outlook, &prices(), &Retry::default(), limits).expect("valid");
                let found = best(&objective).expect("earns");
                let values = Holding::new(&objective, &found).curve(100);
                black_box((band(&objective, found.at, 0.01), values))
            });
        });
        c.bench_function(&format!("three quantiles of a request's time: {name}"), |b| {
            let retry = Retry { attempts: Some(3), ..Retry::default() };
            b.iter(|| {
                let total = RequestTime::new(&outlook, &prices(), &retry, 2.0);
                black_box([0.5, 0.99, 0.999].map(|q| total.quantile(q)))
            });
        });
    }
}

fn doubt(c: &mut Criterion) {
    let grid = Grid::new(0.005, 0.01, 10.0);
    let failures = Failures::new(grid.ages().iter().map(|t| 0.02 * t).collect());
    let curves: Vec<Sampled> = (0..16 * 40)
        .map(|i| {
            let law = lognormal(-2.0 + 0.01 * (i % 40) as f64, 0.8 + 0.05 * (i / 40) as f64);
            Sampled::join(&grid, grid.ages().iter().map(|&t| law.survival(t)).collect(), &failures)
        })
        .collect();
    let deadline = Aim::Deadline { by: 5.0, attempts: 3 };
    for (name, worth) in [
        ("rate", prices()),
        ("rate, half-life", Worth { fade: Fade::HalfLife(1.0), ..prices() }),
        ("deadline of 3 attempts", Worth { aim: deadline, ..prices() }),
    ] {
        c.bench_function(&format!("doubt of 16 x 40 curves at 400 ages: {name}"), |b| {
            b.iter(|| {
                let objective = GridObjective::new(&grid, &worth, &Retry::default(), &[0.8]).expect("valid");
                let mut doubt = Doubt::new(objective);
                for (i, curve) in curves.iter().enumerate() {
                    doubt.add(i / 40, curve, 1.0);
                }
                black_box((doubt.choose(0.01), doubt.regret_of_setting(0)))
            });
        });
    }
}

fn deadlines(c: &mut Criterion) {
    for (name, failed) in [("", 0.0), (" with failures", 0.05)] {
        let outlook = Competing::new(lognormal(-0.5, 1.4), Failure::Rate(failed));
        let worth = Worth { aim: Aim::Deadline { by: 4.0, attempts: 5 }, ..prices() };
        let limits = Limits::new(0.0, 4.0).expect("in order");
        c.bench_function(&format!("deadline, 5 attempts{name}"), |b| {
            b.iter(|| {
                let objective = Objective::new(&outlook, &worth, &Retry::default(), limits).expect("valid");
                black_box(best(&objective)).expect("earns")
            });
        });
    }
}

fn replicates(c: &mut Criterion) {
    let grid = Grid::new(0.005, 0.01, 10.0);
    let law = lognormal(-3.0, 1.0);
    let tail =
        Sampled::join(&grid, grid.ages().iter().map(|&t| law.survival(t)).collect(), &Failures::default());
    let table = LifeTable::of(&bins(1_000)).expect("endings");
    c.bench_function("40 replicates of 1,000 bins", |b| {
        b.iter(|| {
            let bootstrap = Bootstrap::of(&table).expect("endings");
            let mut random = Xoshiro256PlusPlus::seed_from_u64(1);
            for _ in 0..40 {
                black_box(bootstrap.draw(&grid, &tail, &mut random));
            }
        });
    });
}

criterion_group!(benches, rate_curve, law_by_law, doubt, deadlines, replicates);
criterion_main!(benches);
