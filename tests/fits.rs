//! Fits against general-purpose libraries, published tables, and simulated data whose law is known.
// A bad reference file or a failed fit should stop the test.
#![allow(clippy::unwrap_used, clippy::panic)]

mod support;

use outwait::tail::families::{
    self, Burr, Exponential, Gamma, InverseGaussian, LogLogistic, Lognormal, Lomax, ParetoTail, Shifted,
    Weibull, WithNever,
};
use outwait::tail::{
    About, Family, Fit, FitError, Law, Stop, fit, likelihood_ratio, log_likelihood, log_likelihood_gradient,
    profile_interval, splice, tail_above, vuong,
};
use outwait::tally::{Cause, Interval, Mass, Sample};
use proptest::prelude::*;
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use serde_json::Value;
use support::{SETS, Zeros, close, expected, set};

/// Completions of a reference set, everything else right-censored, rows of age 0 left out.
fn sample(name: &str) -> Option<Sample> {
    Some(set(name)?.cells(None, Zeros::Drop).sample(Cause::Done))
}

fn exact(ages: &[f64]) -> Vec<Interval> {
    let mut ages = ages.to_vec();
    ages.sort_by(f64::total_cmp);
    ages.iter().map(|&t| Interval { over: t, upto: t, weight: 1.0 }).collect()
}

fn mass(age: f64, weight: f64) -> Mass {
    Mass { age, weight }
}

fn value(fit: &Fit, name: &str) -> f64 {
    fit.parameter(name).unwrap().value
}

/// A family with the pairs of parameter names: the reference's, ours.
type Known = (&'static dyn Family, &'static [(&'static str, &'static str)]);

/// Our family of the reference's name.
fn family(name: &str) -> Known {
    match name {
        "exponential" => (&Exponential, &[("rate", "rate")]),
        "weibull" => (&Weibull, &[("shape", "shape"), ("scale", "scale")]),
        "lognormal" => (&Lognormal, &[("mu", "mu"), ("sigma", "sigma")]),
        "loglogistic" => (&LogLogistic, &[("shape", "shape"), ("scale", "scale")]),
        "gamma" => (&Gamma, &[("shape", "shape"), ("scale", "scale")]),
        "lomax" => (&Lomax, &[("alpha", "shape"), ("scale", "scale")]),
        "inverse_gaussian" => (&InverseGaussian, &[("mean", "mu"), ("lambda", "lambda")]),
        "burr_xii" => (&Burr, &[("c", "c"), ("k", "k"), ("scale", "scale")]),
        "generalized_pareto" => (&ParetoTail { threshold: 0.0 }, &[("xi", "xi"), ("sigma", "sigma")]),
        other => panic!("no family for {other}"),
    }
}

/// scipy 1.17.1 (checked there against lifelines 0.30.3), nine families on every reference set. Our likelihood is
/// never below theirs by more than 2e-7 of itself. Where both have a maximum inside, parameters agree to 1e-3, or
/// to a hundredth of a standard error where the likelihood is flatter than that.
#[test]
fn agrees_with_general_purpose_libraries() {
    for name in SETS {
        let (Some(sample), Some(answer)) = (sample(name), expected(name)) else { continue };
        for (model, truth) in answer["fits"].as_object().unwrap() {
            compare(&format!("{name} {model}"), &sample, family(model), truth);
        }
    }
}

fn compare(label: &str, sample: &Sample, (family, names): Known, truth: &Value) {
    let fit = fit(sample, family).unwrap();
    let goal = truth["log_likelihood"].as_f64().unwrap();
    assert!(fit.log_likelihood >= goal - 2e-7 * goal.abs(), "{label}: {} < {goal}", fit.log_likelihood);
    let own = log_likelihood(fit.law.as_ref(), sample);
    assert!(close(fit.log_likelihood, own, 1e-9), "{label}: {} is not {own}", fit.log_likelihood);
    if truth["boundary"] == true || fit.stop != Stop::Converged {
        return;
    }
    for (theirs, ours) in names {
        let (p, truth) = (fit.parameter(ours).unwrap(), truth["parameters"][theirs].as_f64().unwrap());
        let allowed = (1e-3 * truth.abs()).max(0.01 * p.standard_error.unwrap());
        assert!((p.value - truth).abs() <= allowed, "{label} {ours}: {} against {truth}", p.value);
    }
}

/// NIST/SEMATECH e-Handbook of Statistical Methods, section 8.4.1.3: Weibull 606.5280 / 1.7208, log-likelihood
/// -75.135, AIC 154.27 (lognormal 154.39). Standard errors: mpmath 1.3 with 40 digits on the same data.
#[test]
fn weibull_of_the_nist_handbook() {
    let sample = sample("nist_weibull_type1").unwrap();
    let weibull = fit(&sample, &Weibull).unwrap();
    assert_eq!(weibull.stop, Stop::Converged);
    assert!((value(&weibull, "scale") - 606.528).abs() < 5e-3);
    assert!((value(&weibull, "shape") - 1.7208).abs() < 5e-5);
    assert!((weibull.log_likelihood + 75.135).abs() < 5e-4);
    assert!((weibull.aic - 154.27).abs() < 5e-3);
    let error = |name| weibull.parameter(name).unwrap().standard_error.unwrap();
    assert!(close(error("shape"), 0.502_150_603, 1e-5), "{}", error("shape"));
    assert!(close(error("scale") / 124.910_656, 1.0, 1e-5), "{}", error("scale"));
    assert!((fit(&sample, &Lognormal).unwrap().aic - 154.39).abs() < 5e-3);

    // scipy 1.17.1, root of the profile with the scale in closed form.
    let (low, high) = profile_interval(&sample, &Weibull, &weibull, "shape", 0.95).unwrap().unwrap();
    assert!((low - 0.905_645).abs() < 1e-4 && (high - 2.885_738).abs() < 1e-4, "{low} {high}");
}

/// Greene, Econometric Analysis, table of duration models of the strike data (Kennan 1985); the printed figures
/// come from an older optimiser, hence the 1e-4.
#[test]
fn strikes_of_greene_s_table() {
    let sample = sample("strike_durations").unwrap();
    let fit = |family: &dyn Family| fit(&sample, family).unwrap();
    let (weibull, logistic, normal) = (fit(&Weibull), fit(&LogLogistic), fit(&Lognormal));
    for (ours, printed) in [
        (value(&fit(&Exponential), "rate"), 0.02344),
        (1.0 / value(&weibull, "scale"), 0.02439),
        (value(&weibull, "shape"), 0.92083),
        (1.0 / value(&logistic, "scale"), 0.04153),
        (value(&logistic, "shape"), 1.33148),
        ((-value(&normal, "mu")).exp(), 0.04514),
        (1.0 / value(&normal, "sigma"), 0.77206),
    ] {
        assert!((ours / printed - 1.0).abs() < 3e-4, "{ours} {printed}");
    }
}

/// McNeil 1997, ASTIN Bulletin 27:117: 109 fire losses above 10 million kroner, ξ 0.497, σ 6.98. Its figure 7 holds
/// ξ to be between 0.4 and 0.7 for thresholds from 5 to 15 (read off, from memory).
#[test]
fn pareto_tail_of_fire_losses() {
    let Some(sample) = sample("danish_fire_losses") else { return };
    let at_ten = tail_above(&sample, 10.0).unwrap();
    assert_eq!(at_ten.exceedances, 109.0);
    assert!((at_ten.xi.value - 0.497).abs() < 5e-4 && (at_ten.sigma.value - 6.98).abs() < 5e-3);
    assert!(at_ten.xi.interval.0 > 0.2 && at_ten.xi.interval.1 < 0.9, "{at_ten:?}");

    let automatic = splice(&sample).unwrap();
    assert!((0.4..0.75).contains(&automatic.xi.value), "{automatic:?}");
    assert!(automatic.xi.interval.0 > 0.0 && automatic.tried.len() >= 8);
    for t in [1.5, automatic.threshold, 20.0, 100.0] {
        let empirical = sample.events.iter().filter(|e| e.upto > t).map(|e| e.weight).sum::<f64>() / 2167.0;
        assert!((automatic.survival(t) - empirical).abs() < 0.01, "{t}");
    }
}

/// scipy 1.17.1: peaks over the 90% point of every set, censored excesses included.
#[test]
fn peaks_over_threshold() {
    for name in SETS {
        let (Some(sample), Some(answer)) = (sample(name), expected(name)) else { continue };
        let truth = &answer["gpd_peaks_over_threshold_90"];
        let Some(threshold) = truth["threshold_u"].as_f64() else { continue };
        let tail = tail_above(&sample, threshold).unwrap();
        assert_eq!(tail.exceedances, truth["n_exceedances_done"].as_f64().unwrap(), "{name}");
        let goal = truth["log_likelihood"].as_f64().unwrap();
        assert!(tail.fit.log_likelihood >= goal - 2e-7 * goal.abs(), "{name}");
        if tail.fit.stop == Stop::Converged {
            assert!(close(tail.xi.value, truth["parameters"]["xi"].as_f64().unwrap(), 1e-3), "{name}");
            let sigma = truth["parameters"]["sigma"].as_f64().unwrap();
            assert!(close(tail.sigma.value / sigma, 1.0, 1e-3), "{name}");
            let (low, high) = tail.xi.interval;
            assert!(low < tail.xi.value && tail.xi.value < high, "{name} {tail:?}");
        }
    }
}

/// Exact, interval-censored and right-censored together: scipy 1.17.1, Nelder-Mead on its own log-densities.
#[test]
fn buckets_and_exact_ages_together() {
    let mut events = exact(&[0.3, 1.7, 2.2]);
    for (over, upto, weight) in [(0.5, 1.0, 1.0), (1.0, 2.0, 2.0), (2.0, 5.0, 1.0)] {
        events.push(Interval { over, upto, weight });
    }
    events.sort_by(|a, b| a.upto.total_cmp(&b.upto));
    let sample = Sample { events, censored: vec![mass(3.0, 2.0), mass(5.0, 1.0)], entries: vec![] };
    let fit = fit(&sample, &Weibull).unwrap();
    assert!(close(value(&fit, "shape"), 1.237_308_08, 1e-6), "{fit:?}");
    assert!(close(value(&fit, "scale"), 3.088_233_68, 1e-6));
    assert!(close(fit.log_likelihood, -14.508_780_248, 1e-9));
}

/// Late entries: scipy 1.17.1 likewise; and the exponential, whose rate is events over exposure.
#[test]
fn late_entries_are_conditioned_on() {
    let mut sample = Sample {
        events: exact(&[1.2, 2.5, 3.1, 0.9, 4.4, 2.0]),
        censored: vec![mass(3.0, 1.0), mass(6.0, 1.0)],
        entries: [0.5, 1.0, 1.9, 2.0, 3.5].map(|t| mass(t, 1.0)).to_vec(),
    };
    let lognormal = fit(&sample, &Lognormal).unwrap();
    assert!(close(value(&lognormal, "mu"), 0.690_989_738, 1e-6), "{lognormal:?}");
    assert!(close(value(&lognormal, "sigma"), 0.754_564_426, 1e-6));
    assert!(close(lognormal.log_likelihood, -10.473_206_699, 1e-9));
    let exposure: f64 = 14.1 + 9.0 - 8.9;
    let exponential = fit(&sample, &Exponential).unwrap();
    assert!(close(value(&exponential, "rate"), 6.0 / exposure, 1e-9));

    // Everybody entered at the same age: the memoryless law does not notice, a common start of others does.
    sample.entries = vec![mass(0.8, 8.0)];
    let shifted: Vec<f64> = [1.2, 2.5, 3.1, 0.9, 4.4, 2.0].iter().map(|t| t - 0.8).collect();
    let moved =
        Sample { events: exact(&shifted), censored: vec![mass(2.2, 1.0), mass(5.2, 1.0)], entries: vec![] };
    let (late, early) = (fit(&sample, &Exponential).unwrap(), fit(&moved, &Exponential).unwrap());
    assert!(close(late.log_likelihood, early.log_likelihood, 1e-10));
    let pareto = fit(&sample, &ParetoTail { threshold: 0.8 }).unwrap();
    assert!(close(
        pareto.log_likelihood,
        fit(&moved, &ParetoTail { threshold: 0.0 }).unwrap().log_likelihood,
        1e-8
    ));
}

/// One bucket in closed form: `λ = -ln(1 - p)/u`; an open last bucket is "T > over" for a law without never share.
#[test]
fn one_bucket_in_closed_form() {
    let interval = |over, upto, weight| Interval { over, upto, weight };
    let sample =
        Sample { events: vec![interval(0.0, 2.0, 30.0)], censored: vec![mass(2.0, 70.0)], entries: vec![] };
    let one = fit(&sample, &Exponential).unwrap();
    assert!(close(value(&one, "rate"), -(0.7_f64.ln()) / 2.0, 1e-8));
    let open = Sample {
        events: vec![interval(0.0, 2.0, 30.0), interval(2.0, f64::INFINITY, 70.0)],
        ..Sample::default()
    };
    assert!(close(value(&fit(&open, &Exponential).unwrap(), "rate"), -(0.7_f64.ln()) / 2.0, 1e-8));

    // With a never share an event in the open bucket is known to have ended: S(over) - π.
    let family = WithNever(Exponential);
    let law = family.law(&family.free(&[0.3, 0.2]).unwrap()).unwrap();
    let exact = 30.0 * (0.8 * (1.0 - (-0.6_f64).exp())).ln() + 70.0 * (0.8 * (-0.6_f64).exp()).ln();
    assert!(close(log_likelihood(law.as_ref(), &open), exact, 1e-12));
    check_gradient(&family, &[0.3_f64.ln(), -1.4], &open);
}

/// Every family's log-likelihood of a sample with observations of all kinds, against central differences.
#[test]
fn gradients_of_the_likelihood() {
    let mut events = exact(&[0.31, 0.9, 1.4]);
    for (over, upto, weight) in [(0.0, 0.4, 2.0), (0.4, 1.0, 5.0), (1.0, 2.5, 3.0), (1.2, 1.2 + 1e-7, 2.0)] {
        events.push(Interval { over, upto, weight });
    }
    events.push(Interval { over: 2.5, upto: f64::INFINITY, weight: 2.0 });
    events.sort_by(|a, b| a.upto.total_cmp(&b.upto));
    let sample =
        Sample { events, censored: vec![mass(1.5, 3.0), mass(2.0, 4.0)], entries: vec![mass(0.35, 2.0)] };
    let about = About::of(&sample).unwrap();
    for family in every_family(0.05) {
        for start in family.starts(&about) {
            check_gradient(family.as_ref(), &start, &sample);
        }
    }
}

fn check_gradient(family: &dyn Family, x: &[f64], sample: &Sample) {
    let value = |x: &[f64]| log_likelihood(family.law(x).unwrap().as_ref(), sample);
    let mut gradient = vec![0.0; x.len()];
    let at = log_likelihood_gradient(family.law(x).unwrap().as_ref(), sample, &mut gradient);
    assert!(close(at, value(x), 1e-9), "{} {at} {}", family.name(), value(x));
    for i in 0..x.len() {
        let step = 1e-5;
        let mut near = x.to_vec();
        near[i] = x[i] + step;
        let above = value(&near);
        near[i] = x[i] - step;
        let difference = (above - value(&near)) / (2.0 * step);
        let size = 1.0 + at.abs() + gradient[i].abs();
        assert!(
            (gradient[i] - difference).abs() < 1e-6 * size,
            "{} {i}: {gradient:?} {difference}",
            family.name()
        );
    }
}

/// Every family of both lists, the generalised gamma among them, each once.
fn every_family(shift: f64) -> Vec<Box<dyn Family>> {
    let mut list: Vec<Box<dyn Family>> = families::decides(shift);
    list.extend(families::verdicts(shift).into_iter().skip(15));
    list.push(Box::new(families::GeneralisedGamma));
    list
}

/// Inverse transform of a seeded uniform sequence, cut at `limit`; `never` of them never end.
fn simulate(law: &dyn Law, n: usize, seed: u64, limit: f64) -> Sample {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    let ages: Vec<f64> = (0..n).map(|_| law.quantile(random.random())).collect();
    let seen: Vec<f64> = ages.iter().copied().filter(|&t| t <= limit).collect();
    let cut = n - seen.len();
    let censored = if cut > 0 { vec![mass(limit, cut as f64)] } else { vec![] };
    Sample { events: exact(&seen), censored, entries: vec![] }
}

/// Every family recovers its own law from 5000 waits, seen whole or cut at the 80% point: within four standard
/// errors, and nowhere further from the true curve than chance allows.
#[test]
fn recovers_every_family() {
    let truths: [(&dyn Family, &[f64]); 15] = [
        (&Exponential, &[0.5]),
        (&Weibull, &[0.6, 2.0]),
        (&Weibull, &[3.0, 2.0]),
        (&Gamma, &[2.5, 0.4]),
        (&Lognormal, &[-1.0, 0.8]),
        (&LogLogistic, &[1.8, 3.0]),
        (&Lomax, &[2.5, 3.0]),
        (&Burr, &[2.0, 1.5, 1.0]),
        (&InverseGaussian, &[2.0, 3.0]),
        (&families::Normal, &[3.0, 1.0]),
        (&families::Gompertz, &[0.8, 0.5]),
        (&families::GeneralisedGamma, &[1.0, 2.0, 1.5]),
        (&families::Hyperexponential, &[0.7, 3.0, 0.2]),
        (&families::TwoLognormals, &[0.6, -1.0, 0.4, 1.5, 0.5]),
        (&WithNever(Weibull), &[1.3, 2.0, 0.15]),
    ];
    for (i, (family, natural)) in truths.into_iter().enumerate() {
        let law = family.law(&family.free(natural).unwrap()).unwrap();
        for limit in [f64::INFINITY, law.quantile(0.8)] {
            let limit = if law.never() > 0.0 { limit.min(1e3) } else { limit };
            let sample = simulate(law.as_ref(), 5000, 100 + i as u64, limit);
            let fit = fit(&sample, family).unwrap();
            let reach = limit.min(law.quantile(0.8));
            for j in 1..=50 {
                let t = reach * f64::from(j) / 50.0;
                let off = (fit.law.survival(t) - law.survival(t)).abs();
                assert!(off < 0.03, "{fit:?} at {t}: {off}");
            }
            let truth = log_likelihood(law.as_ref(), &sample);
            assert!(fit.log_likelihood >= truth - 1e-6, "{fit:?}: below the truth's {truth}");
            if fit.stop == Stop::Converged {
                for (p, &truth) in fit.parameters.iter().zip(natural) {
                    let error = p.standard_error.unwrap();
                    assert!((p.value - truth).abs() < 4.0 * error, "{} {p:?} {truth}", fit.family);
                }
            }
        }
    }
}

/// A shift is not searched: it is taken as given, counts as a parameter, and has no standard error.
#[test]
fn a_given_shift_counts() {
    let inner = Gamma.law(&Gamma.free(&[2.0, 0.5]).unwrap()).unwrap();
    let mut sample = simulate(inner.as_ref(), 2000, 7, f64::INFINITY);
    sample.events.iter_mut().for_each(|e| (e.over, e.upto) = (e.over + 3.0, e.upto + 3.0));
    let fit = fit(&sample, &Shifted { inner: Gamma, shift: 3.0 }).unwrap();
    assert_eq!(value(&fit, "shift"), 3.0);
    assert_eq!(fit.parameter("shift").unwrap().standard_error, None);
    assert!(close(fit.aic, 6.0 - 2.0 * fit.log_likelihood, 1e-12));
    assert!((value(&fit, "shape") - 2.0).abs() < 0.25);
}

/// Known nestings only; scipy 1.17.1 for the probability.
#[test]
fn likelihood_ratios_of_nested_families() {
    let sample = sample("nist_weibull_type1").unwrap();
    let fit = |family: &dyn Family| fit(&sample, family).unwrap();
    let (exponential, weibull) = (fit(&Exponential), fit(&Weibull));
    let test = likelihood_ratio(&exponential, &weibull).unwrap();
    assert!((test.statistic - 2.842_144_5).abs() < 1e-5 && test.degrees == 1 && !test.at_limit);
    assert!((test.p_value - 0.091_821_59).abs() < 1e-6);
    // Lomax meets the exponential at a limit: half the probability of a plain test.
    let lomax = likelihood_ratio(&exponential, &fit(&Lomax)).unwrap();
    assert!(lomax.at_limit && lomax.statistic < 1e-3);
    assert!(likelihood_ratio(&weibull, &fit(&Lognormal)).is_none());
    assert!(likelihood_ratio(&weibull, &exponential).is_none());
    assert!(likelihood_ratio(&weibull, &fit(&WithNever(Weibull))).unwrap().at_limit);
}

/// Vuong's statistic from scipy 1.17.1 densities at the reference's estimates: strikes (lognormal against gamma,
/// equally many parameters), flies (lognormal against exponential, one more, 7 censored).
#[test]
fn vuong_s_test() {
    let strikes = sample("strike_durations").unwrap();
    let of = |sample: &Sample, family: &dyn Family| fit(sample, family).unwrap();
    let test = vuong(&strikes, &of(&strikes, &Lognormal), &of(&strikes, &Gamma)).unwrap();
    assert!((test.z + 0.835_594_6).abs() < 1e-4 && (test.p_value - 0.403_383).abs() < 1e-4, "{test:?}");
    let back = vuong(&strikes, &of(&strikes, &Gamma), &of(&strikes, &Lognormal)).unwrap();
    assert!((back.z + test.z).abs() < 1e-12);
    let flies = sample("waltons_flies").unwrap();
    let test = vuong(&flies, &of(&flies, &Lognormal), &of(&flies, &Exponential)).unwrap();
    assert!((test.z - 4.486_016_7).abs() < 1e-4 && (test.advantage - 0.326_498_3).abs() < 1e-5, "{test:?}");
    let same = of(&flies, &Weibull);
    assert!(vuong(&flies, &same, &same).is_none());
}

/// Samples that say next to nothing, or strangely: a typed error or a sane fit, for every family.
#[test]
fn degenerate_samples() {
    let one = |over, upto, weight| Interval { over, upto, weight };
    let plain = |events| Sample { events, ..Sample::default() };
    let samples = [
        ("nothing", Sample::default()),
        ("one wait", plain(exact(&[3.0]))),
        ("all equal", plain(vec![one(2.0, 2.0, 500.0)])),
        ("all censored", Sample { censored: vec![mass(1.0, 9.0), mass(2.0, 1.0)], ..Sample::default() }),
        ("two ages", plain(vec![one(1.0, 1.0, 3.0), one(4.0, 4.0, 2.0)])),
        ("huge counts", plain((1..=9).map(|i| one(f64::from(i), f64::from(i), 1e12)).collect())),
        ("1 µs to 30 days", plain(exact(&[1e-6, 1e-3, 0.2, 1.0, 7.0, 3600.0, 2_592_000.0]))),
        ("one bucket", plain(vec![one(0.0, 5.0, 80.0)])),
        ("one bucket and beyond", plain(vec![one(0.0, 5.0, 80.0), one(5.0, f64::INFINITY, 20.0)])),
        ("all beyond", plain(vec![one(5.0, f64::INFINITY, 20.0)])),
        (
            "cut before the first ending",
            Sample { events: exact(&[10.0]), censored: vec![mass(1e-3, 1e6)], entries: vec![] },
        ),
        (
            "everybody entered late",
            Sample { events: exact(&[2.0, 2.5, 3.0]), censored: vec![], entries: vec![mass(1.9, 3.0)] },
        ),
        ("no weight", plain(vec![one(1.0, 1.0, 0.0)])),
    ];
    for (label, sample) in &samples {
        for family in every_family(0.0) {
            match fit(sample, family.as_ref()) {
                Ok(fit) => check_sane(label, &fit),
                Err(error) => assert!(!error.to_string().is_empty() && !error.remedy().is_empty()),
            }
        }
        match splice(sample) {
            Ok(tail) => assert!(tail.xi.value.is_finite(), "{label}"),
            Err(error) => assert!(!error.to_string().is_empty()),
        }
    }
    assert!(matches!(fit(&samples[3].1, &Weibull), Err(FitError::NoEvents { waits: 10.0 })));
    assert!(matches!(fit(&samples[2].1, &Weibull), Err(FitError::TooFewAges { distinct: 1, needed: 2, .. })));
    assert!(close(value(&fit(&samples[5].1, &Exponential).unwrap(), "rate"), 0.2, 1e-9));
}

fn check_sane(label: &str, fit: &Fit) {
    let numbers = [fit.log_likelihood, fit.aic, fit.bic, fit.largest_gap.size, fit.largest_gap.at];
    let parameters = fit.parameters.iter().flat_map(|p| [p.value, p.standard_error.unwrap_or(1.0)]);
    for number in numbers.into_iter().chain(parameters).chain(fit.free.iter().copied()) {
        assert!(number.is_finite(), "{label}: {fit:?}");
    }
    assert!(!fit.aicc.is_nan() && (0.0..=1.0).contains(&fit.largest_gap.size));
    for t in [1e-9, 1e-3, 1.0, 4.9, 1e4, 1e9] {
        assert!((0.0..=1.0).contains(&fit.law.survival(t)), "{label}: {fit:?} at {t}");
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    /// The fit of a sample in another unit is the fit in that unit.
    #[test]
    fn fits_follow_the_unit(exponent in -6.0..6.0_f64, seed in 0u64..1000, cut in 0.5..1.0_f64) {
        let factor = 10f64.powf(exponent);
        let law = Gamma.law(&Gamma.free(&[1.7, 0.8]).unwrap()).unwrap();
        let sample = simulate(law.as_ref(), 300, seed, law.quantile(cut));
        let mut moved = sample.clone();
        moved.events.iter_mut().for_each(|e| (e.over, e.upto) = (e.over * factor, e.upto * factor));
        moved.censored.iter_mut().for_each(|m| m.age *= factor);
        for family in [&Weibull as &dyn Family, &Gamma, &Lognormal, &LogLogistic, &families::Gompertz] {
            let (here, there) = (fit(&sample, family).unwrap(), fit(&moved, family).unwrap());
            prop_assert_eq!(here.stop, there.stop);
            let same_unit = here.log_likelihood - here.events * factor.ln();
            prop_assert!(close(there.log_likelihood, same_unit, 1e-8), "{} {same_unit}", there.log_likelihood);
            for (a, b) in family.rescale(&here.free, factor).iter().zip(&there.free) {
                prop_assert!((a - b).abs() < 1e-4, "{here:?} {there:?}");
            }
            prop_assert!((here.largest_gap.size - there.largest_gap.size).abs() < 1e-5);
        }
    }
}
