//! What fits cost: six families on a sample as it is, and the whole ensemble with its verdicts.
//!
//! `cargo bench --bench fit`. Two samples of one lognormal law cut at its 90% point: 10,000 exact ages, and ten
//! million waits in histogram bins of 0.1%. The ensemble works on about 75 cells of either.

use std::hint::black_box;

use criterion::{Criterion, criterion_group, criterion_main};
use outwait::outlook::Grid;
use outwait::tail::families::{Exponential, Gamma, LogLogistic, Lognormal, Lomax, Weibull};
use outwait::tail::{Family, Law, ensemble, fit, verdict};
use outwait::tally::{Interval, Mass, Sample};

const SIX: [&dyn Family; 6] = [&Exponential, &Weibull, &Gamma, &Lognormal, &LogLogistic, &Lomax];

/// Share of the waits that the timeout lets end.
const SEEN: f64 = 0.9;

/// The law's own quantiles as ages.
fn exact(law: &dyn Law, n: u32) -> Sample {
    let age = |i: u32| law.quantile(SEEN * (f64::from(i) + 0.5) / f64::from(n));
    let events = (0..n).map(|i| Interval { over: age(i), upto: age(i), weight: 1.0 }).collect();
    Sample { events, censored: cut(law, f64::from(n) / SEEN), entries: vec![] }
}

/// Its expected counts in bins of 0.1%.
fn binned(law: &dyn Law, n: f64) -> Sample {
    let (first, last) = (law.quantile(1e-6), law.quantile(SEEN));
    let mut events = vec![];
    let mut over = first;
    while over < last {
        let upto = (over * 1.001).min(last);
        let weight = (n * (law.survival(over) - law.survival(upto))).round();
        if weight > 0.0 {
            events.push(Interval { over, upto, weight });
        }
        over = upto;
    }
    Sample { events, censored: cut(law, n), entries: vec![] }
}

fn cut(law: &dyn Law, n: f64) -> Vec<Mass> {
    vec![Mass { age: law.quantile(SEEN), weight: (n * (1.0 - SEEN)).round() }]
}

fn fits(criterion: &mut Criterion) {
    let Some(law) = Lognormal.law(&[0.0, 0.0]) else { return };
    let mut group = criterion.benchmark_group("fit");
    group.sample_size(20);
    for (name, sample) in
        [("1e4_exact", exact(law.as_ref(), 10_000)), ("1e7_binned", binned(law.as_ref(), 1e7))]
    {
        let grid = Grid::new(sample.events[0].upto, law.quantile(0.05), 3.0 * law.quantile(0.99));
        group.bench_function(format!("six_families/{name}"), |b| {
            b.iter(|| SIX.map(|family| fit(black_box(&sample), family).map(|f| f.log_likelihood)));
        });
        group.bench_function(format!("ensemble/{name}"), |b| {
            b.iter(|| ensemble(black_box(&sample), &grid, 1))
        });
        if let Ok(found) = ensemble(&sample, &grid, 1) {
            group.bench_function(format!("verdict/{name}"), |b| {
                b.iter(|| verdict(black_box(&sample), &[], &found, &grid, &[]));
            });
        }
    }
    group.finish();
}

criterion_group!(benches, fits);
criterion_main!(benches);
