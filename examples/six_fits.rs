//! Fits six families to right-censored ages and prints what it took: our side of `benches/peers/fits_1m.py`.
//!
//! `cargo run --release --example six_fits -- FILE`, a file of little-endian doubles: ages in s, the censored ones
//! negative.

use std::time::Instant;

use anyhow::{Context, Result};
use outwait::tail::families::{Exponential, Gamma, LogLogistic, Lognormal, Lomax, Weibull};
use outwait::tail::{Family, fit, log_likelihood};
use outwait::tally::{Cause, Cells, Tally};
use outwait::wait::{Ending, Wait};

const SIX: [&dyn Family; 6] = [&Exponential, &Weibull, &Gamma, &Lognormal, &LogLogistic, &Lomax];

fn main() -> Result<()> {
    let file = std::env::args().nth(1).context("name a file of doubles")?;
    let bytes = std::fs::read(&file).with_context(|| format!("cannot read {file}"))?;
    let waits = bytes
        .as_chunks::<8>()
        .0
        .iter()
        .map(|&chunk| {
            let age = f64::from_le_bytes(chunk);
            Wait::new(age.abs(), if age < 0.0 { Ending::GaveUp } else { Ending::Done })
        })
        .collect::<Result<Vec<Wait>, _>>()?;
    let start = Instant::now();
    let mut tally = Tally::default();
    waits.iter().for_each(|wait| tally.add(wait));
    let sample = tally.first_attempts().sample(Cause::Done);
    println!("tally {:.6}", start.elapsed().as_secs_f64());
    // Judged by every wait as it is, not by the bins that were fitted.
    let exact = Cells::from_waits(&waits).sample(Cause::Done);
    for family in SIX {
        let start = Instant::now();
        let found = fit(&sample, family)?;
        let seconds = start.elapsed().as_secs_f64();
        println!("{} {seconds:.6} {:.4}", found.family, log_likelihood(found.law.as_ref(), &exact));
    }
    Ok(())
}
