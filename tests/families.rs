//! Identities that every family must satisfy, whatever its formula.

use outwait::numeric::integrate;
use outwait::tail::families::all;
use outwait::tail::{About, Family, Law, area_by_quadrature};
use proptest::prelude::*;

/// Rough facts of an invented sample whose ages have the unit `unit` seconds.
fn about(unit: f64, log_sd: f64, left: f64) -> About {
    About {
        mean: unit * (0.5 * log_sd * log_sd).exp(),
        low: unit * (-1.2816 * log_sd).exp(),
        median: unit,
        high: unit * (1.2816 * log_sd).exp(),
        log_mean: unit.ln(),
        log_sd,
        left,
    }
}

/// Every family of the list.
fn families(_about: &About) -> Vec<Box<dyn Family>> {
    all().iter().map(|&family| Box::new(family) as Box<dyn Family>).collect()
}

/// A law within reach of one of the family's own starts, its coordinates, and what to call it.
struct Member {
    family: Box<dyn Family>,
    x: Vec<f64>,
    law: Box<dyn Law>,
    said: String,
}

/// One member of each family (where the nudged coordinates are in range).
fn members(about: &About, start: usize, nudge: &[f64]) -> Vec<Member> {
    let mut members = vec![];
    for family in families(about) {
        let starts = family.starts(about);
        let mut x = starts[start % starts.len()].clone();
        for (c, n) in x.iter_mut().zip(nudge) {
            *c += n;
        }
        if let Some(law) = family.law(&x) {
            let said = format!("{} {:?}", family.name(), law.parameters());
            members.push(Member { family, x, law, said });
        }
    }
    members
}

fn close(a: f64, b: f64, relative: f64, absolute: f64) -> bool {
    a == b || (a - b).abs() <= absolute + relative * a.abs().max(b.abs())
}

#[derive(Clone, Debug)]
struct Case {
    about: About,
    start: usize,
    nudge: Vec<f64>,
    p: f64,
}

fn cases(reach: f64) -> impl Strategy<Value = Case> {
    (
        -6.0..6.0_f64,
        0.05..2.5_f64,
        0.0..0.6_f64,
        0..3_usize,
        prop::collection::vec(-reach..reach, 8),
        0.001..0.999_f64,
    )
        .prop_map(|(unit, sd, left, start, nudge, p)| Case {
            about: about(10f64.powf(unit), sd, left),
            start,
            nudge,
            p,
        })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 150, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn survival_density_hazard_and_quantile_agree(case in cases(1.5)) {
        for Member { family, x, law, said } in members(&case.about, case.start, &case.nudge) {
            let share = case.p * (1.0 - law.never());
            let t = law.quantile(share);
            prop_assert!(t > 0.0 && t.is_finite(), "{said}: quantile {t}");
            let s = law.survival(t);
            prop_assert!(close(1.0 - s, share, 1e-8, 1e-11), "{said}: {s} at {t}");
            prop_assert!(close(law.cumulative_hazard(t), -s.ln(), 1e-9, 1e-12), "{said}");
            prop_assert!(close(law.density(t), law.hazard(t) * s, 1e-9, 0.0), "{said}");
            let wider = law.survival(t * 1.01);
            prop_assert!(wider <= s, "{said}: S rises from {s} to {wider}");
            // The density is the slope of the distribution function.
            let (from, upto) = (t * (1.0 - 1e-4), t * (1.0 + 1e-4));
            let mass = integrate(&|u| law.density(u), from, upto, 1e-12);
            let fall = law.survival(from) - law.survival(upto);
            prop_assert!(close(mass, fall, 1e-7, 1e-13), "{said}: mass {mass}, fall {fall} at {t}");
            // Natural parameters and free coordinates are two spellings of one law.
            let back = family.free(&law.parameters()).expect("its own parameters are in range");
            let again = family.law(&back).expect("and give a law");
            prop_assert!(close(again.log_survival(t), law.log_survival(t), 1e-7, 1e-9), "{said}: {x:?} {back:?}");
            prop_assert_eq!(family.parameters().len(), law.parameters().len());
            prop_assert_eq!(family.dimension(), x.len());
        }
    }

    #[test]
    fn gradients_match_differences(case in cases(1.5)) {
        for Member { family, x, law, said } in members(&case.about, case.start, &case.nudge) {
            let t = law.quantile(case.p * (1.0 - law.never()));
            for t in [t, case.about.low, case.about.high * 3.0] {
                let mut gradient = vec![0.0; x.len()];
                let ln_s = law.log_survival_gradient(t, &mut gradient);
                prop_assert!(close(ln_s, law.log_survival(t), 1e-10, 1e-12), "{said}: ln S {ln_s}");
                agrees(family.as_ref(), &x, &gradient, ln_s, &|l| l.log_survival(t))
                    .map_err(|e| TestCaseError::fail(format!("{said}: ln S({t}): {e}")))?;
                let ln_f = law.log_density_gradient(t, &mut gradient);
                if ln_f == f64::NEG_INFINITY { continue }
                prop_assert!(close(ln_f, law.log_density(t), 1e-10, 1e-12), "{said}: ln f {ln_f}");
                agrees(family.as_ref(), &x, &gradient, ln_f, &|l| l.log_density(t))
                    .map_err(|e| TestCaseError::fail(format!("{said}: ln f({t}): {e}")))?;
            }
        }
    }

    #[test]
    fn areas_match_quadrature(case in cases(1.5)) {
        for Member { law, said, .. } in members(&case.about, case.start, &case.nudge) {
            let t = law.quantile(case.p * (1.0 - law.never()));
            let area = law.restricted_mean(t);
            let sum = area_by_quadrature(&|u| law.survival(u), law.scale(), t);
            prop_assert!(close(area, sum, 1e-9, 0.0), "{said}: {area} by formula, {sum} by quadrature to {t}");
            let far = law.quantile((1.0 - 0.01 * (1.0 - case.p)) * (1.0 - law.never()));
            let residual = law.mean_residual_life(t, far) * law.survival(t);
            let rest = law.restricted_mean(far) - area;
            prop_assert!(close(residual, rest, 1e-8, 1e-9 * area), "{said}: {residual} and {rest}");
            let whole = law.mean();
            prop_assert!(whole >= area * (1.0 - 1e-12), "{said}: mean {whole} below {area}");
            prop_assert_eq!(law.restricted_mean(f64::INFINITY), whole);
            let rest = law.mean_residual_life(t, f64::INFINITY) * law.survival(t);
            prop_assert!(close(area + rest, whole, 1e-8, 0.0), "{said}: {area} + {rest} is not {whole}");
        }
    }

    #[test]
    fn the_unit_of_time_changes_nothing(case in cases(1.5)) {
        // Microseconds, hours, weeks.
        for factor in [1e6, 1.0 / 3600.0, 1.0 / 604_800.0] {
            let there = About {
                mean: case.about.mean * factor,
                low: case.about.low * factor,
                median: case.about.median * factor,
                high: case.about.high * factor,
                log_mean: case.about.log_mean + factor.ln(),
                ..case.about
            };
            let others = families(&there);
            for (member, other) in members(&case.about, case.start, &case.nudge).iter().zip(others) {
                let Member { law, family, x, said } = member;
                let t = law.quantile(case.p * (1.0 - law.never()));
                let moved = other.law(&family.rescale(x, factor)).expect("in range in any unit");
                let (a, b) = (law.log_survival(t), moved.log_survival(t * factor));
                prop_assert!(close(a, b, 1e-9, 1e-9), "{said} times {factor}: {a} and {b}");
                let (a, b) = (law.log_density(t), moved.log_density(t * factor) + factor.ln());
                prop_assert!(close(a, b, 1e-9, 1e-8), "{said} times {factor}: {a} and {b}");
                let (a, b) = (law.restricted_mean(t), moved.restricted_mean(t * factor) / factor);
                prop_assert!(close(a, b, 1e-8, 0.0), "{said} times {factor}: {a} and {b}");
            }
        }
    }

    #[test]
    fn many_ages_at_once_are_as_one_by_one(case in cases(1.5)) {
        let sd = case.about.log_sd;
        let logs: Vec<f64> = (0..700).map(|i| case.about.log_mean + sd * (f64::from(i) - 300.0) * 0.02).collect();
        let ages: Vec<f64> = logs.iter().map(|u| u.exp()).collect();
        for Member { x, law, said, .. } in members(&case.about, case.start, &case.nudge) {
            let mut out = vec![f64::NAN; ages.len()];
            law.survival_on(&ages, &logs, &mut out);
            let mut values = vec![f64::NAN; ages.len()];
            let mut rows = vec![f64::NAN; ages.len() * x.len()];
            law.log_survival_gradient_on(&ages, &logs, &mut values, &mut rows);
            let mut row = vec![0.0; x.len()];
            for (i, &t) in ages.iter().enumerate() {
                let s = law.survival(t);
                prop_assert!(close(out[i], s, 1e-9, 1e-300), "{said} at {t}: {} and {s}", out[i]);
                prop_assert!(i == 0 || out[i] <= out[i - 1] * (1.0 + 1e-11), "{said} at {t}: S rises");
                let value = law.log_survival_gradient(t, &mut row);
                prop_assert!(close(values[i], value, 1e-9, 1e-9), "{said} at {t}: {} and {value}", values[i]);
                for (a, b) in rows[i * x.len()..].iter().zip(&row) {
                    prop_assert!(close(*a, *b, 1e-7, 1e-7), "{said} at {t}: {a} and {b}");
                }
            }
        }
    }

    #[test]
    fn nothing_is_ever_not_a_number(case in cases(30.0)) {
        for Member { x, law, said, .. } in members(&case.about, case.start, &case.nudge) {
            let mut gradient = vec![0.0; x.len()];
            let mut last = 1.0;
            for t in (-9..=12).map(|e| 10f64.powi(e)) {
                let s = law.survival(t);
                prop_assert!((0.0..=1.0).contains(&s), "{said}: S({t}) = {s}");
                prop_assert!(s <= last * (1.0 + 1e-9), "{said}: S rises from {last} to {s} at {t}");
                last = s;
                prop_assert!(!law.log_density(t).is_nan(), "{said}: density at {t}");
                prop_assert!(!law.hazard(t).is_nan(), "{said}: hazard at {t}");
                law.log_survival_gradient(t, &mut gradient);
                prop_assert!(gradient.iter().all(|g| !g.is_nan()), "{said}: ln S at {t}: {gradient:?}");
                law.log_density_gradient(t, &mut gradient);
                prop_assert!(gradient.iter().all(|g| !g.is_nan()), "{said}: ln f at {t}: {gradient:?}");
            }
            prop_assert!(!law.mean().is_nan() && !law.scale().is_nan(), "{said}");
        }
    }
}

/// Compares an analytic gradient with central differences (one Richardson step).
fn agrees(
    family: &dyn Family,
    x: &[f64],
    gradient: &[f64],
    value: f64,
    read: &dyn Fn(&dyn Law) -> f64,
) -> Result<(), String> {
    if value < -1e4 {
        return Ok(()); // Differences see nothing but rounding there.
    }
    for i in 0..x.len() {
        let at = |h: f64| {
            let mut y = x.to_vec();
            y[i] += h;
            family.law(&y).map(|law| read(law.as_ref()))
        };
        let h = 1e-4 * x[i].abs().clamp(1.0, 10.0);
        let (Some(a), Some(b), Some(c), Some(d)) = (at(2.0 * h), at(-2.0 * h), at(h), at(-h)) else {
            continue;
        };
        let slope = (4.0 * (c - d) / (2.0 * h) - (a - b) / (4.0 * h)) / 3.0;
        if !close(gradient[i], slope, 1e-5, 1e-6 * (1.0 + value.abs())) {
            return Err(format!("coordinate {i}: {} by formula, {slope} by difference", gradient[i]));
        }
    }
    Ok(())
}
