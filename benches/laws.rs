//! What one evaluation of a law costs: `ln S` at single ages, its gradient, and `S` and the gradient on grids.
//!
//! `cargo bench --bench laws`. Figures are per call for `single`, per grid for the rest: 700 ages as the curves
//! use them, 76 as the likelihood's cells do.

use std::hint::black_box;

use criterion::{Criterion, criterion_group, criterion_main};
use outwait::tail::families::{Shifted, Weibull, WithNever, all};
use outwait::tail::{About, Family};

const ABOUT: About =
    About { mean: 1.5, low: 0.3, median: 1.0, high: 3.2, log_mean: 0.0, log_sd: 0.9, left: 0.1 };

/// Log-spaced ages around the median.
fn ages(count: u32, below: f64, above: f64) -> (Vec<f64>, Vec<f64>) {
    let logs: Vec<f64> =
        (0..count).map(|i| below + (above - below) * f64::from(i) / f64::from(count - 1)).collect();
    (logs.iter().map(|u| u.exp()).collect(), logs)
}

fn laws(criterion: &mut Criterion) {
    let mut list: Vec<(String, Box<dyn Family>)> =
        all().iter().map(|&f| (f.name().to_string(), Box::new(f) as Box<dyn Family>)).collect();
    list.push(("weibull_never".into(), Box::new(WithNever(Weibull))));
    list.push(("weibull_shift".into(), Box::new(Shifted { inner: Weibull, shift: 0.1 })));
    let (few, few_logs) = ages(76, -2.5, 2.0);
    let (many, many_logs) = ages(700, -6.0, 9.0);
    for (name, family) in list {
        let x = family.starts(&ABOUT).swap_remove(0);
        let Some(law) = family.law(&x) else { continue };
        let mut row = vec![0.0; x.len()];
        let (mut values, mut rows) = (vec![0.0; 76], vec![0.0; 76 * x.len()]);
        let mut out = vec![0.0; 700];
        let mut group = criterion.benchmark_group(&name);
        group.sample_size(20);
        let mut next = few.iter().cycle();
        group.bench_function("single", |b| b.iter(|| next.next().map(|&t| law.log_survival(black_box(t)))));
        group.bench_function("single_gradient", |b| {
            b.iter(|| next.next().map(|&t| law.log_survival_gradient(black_box(t), &mut row)));
        });
        group.bench_function("gradient_on_76", |b| {
            b.iter(|| law.log_survival_gradient_on(&few, &few_logs, &mut values, &mut rows));
        });
        group.bench_function("survival_on_700", |b| {
            b.iter(|| law.survival_on(&many, &many_logs, &mut out));
        });
        group.finish();
    }
}

criterion_group!(benches, laws);
criterion_main!(benches);
