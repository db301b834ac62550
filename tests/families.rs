//! Identities that every family must satisfy, whatever its formula; and values from other programs.
#![allow(clippy::expect_used)]

use outwait::numeric::integrate;
use outwait::tail::families::{LogLogistic, ParetoTail, Shifted, WithNever, all, decides, verdicts};
use outwait::tail::{About, Coordinate, Family, Kind, Law, area_by_quadrature};
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

/// Every family of the lists, alone and wrapped.
fn families(about: &About) -> Vec<Box<dyn Family>> {
    let shift = 0.3 * about.low;
    let mut list: Vec<Box<dyn Family>> = all().iter().map(|&f| Box::new(f) as Box<dyn Family>).collect();
    list.push(Box::new(ParetoTail { threshold: 0.0 }));
    list.push(Box::new(ParetoTail { threshold: shift }));
    for &inner in all() {
        list.push(Box::new(WithNever(inner)));
        list.push(Box::new(Shifted { inner, shift }));
        list.push(Box::new(WithNever(Shifted { inner, shift })));
    }
    list
}

/// A law within reach of one of the family's own starts, its coordinates, and what to call it.
struct Member {
    family: Box<dyn Family>,
    x: Vec<f64>,
    law: Box<dyn Law>,
    said: String,
    /// Before this age nothing ends.
    shift: f64,
    /// Place in the list of families.
    index: usize,
}

/// One member of each family (where the nudged coordinates are in range).
fn members(about: &About, start: usize, nudge: &[f64]) -> Vec<Member> {
    let mut members = vec![];
    for (index, family) in families(about).into_iter().enumerate() {
        let starts = family.starts(about);
        let mut x = starts[start % starts.len()].clone();
        for ((at, n), c) in x.iter_mut().zip(nudge).zip(family.coordinates()) {
            *at += n * unit(c, about);
        }
        if let Some(law) = family.law(&x) {
            let said = format!("{} {:?}", family.name(), law.parameters());
            let at = family.parameters().iter().position(|&name| name == "shift" || name == "threshold");
            let shift = at.map_or(0.0, |i| law.parameters()[i]);
            members.push(Member { family, x, law, said, shift, index });
        }
    }
    members
}

/// How far a unit step goes in a coordinate.
fn unit(coordinate: Coordinate, about: &About) -> f64 {
    if coordinate.kind == Kind::Location { about.median } else { 1.0 }
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
    #![proptest_config(ProptestConfig { cases: 100, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn survival_density_hazard_and_quantile_agree(case in cases(1.5)) {
        for Member { family, x, law, said, shift, .. } in members(&case.about, case.start, &case.nudge) {
            let share = case.p * (1.0 - law.never());
            let t = law.quantile(share);
            prop_assert!(t > 0.0 && t.is_finite(), "{said}: quantile {t}");
            if t - shift < 1e-3 * t { continue } // The difference has lost digits before any law sees it.
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
        for Member { family, x, law, said, .. } in members(&case.about, case.start, &case.nudge) {
            let t = law.quantile(case.p * (1.0 - law.never()));
            for t in [t, case.about.low, case.about.high * 3.0] {
                let mut gradient = vec![0.0; x.len()];
                let ln_s = law.log_survival_gradient(t, &mut gradient);
                prop_assert!(close(ln_s, law.log_survival(t), 1e-10, 1e-12), "{said}: ln S {ln_s}");
                agrees(family.as_ref(), &case.about, &x, &gradient, ln_s, &|l| l.log_survival(t))
                    .map_err(|e| TestCaseError::fail(format!("{said}: ln S({t}): {e}")))?;
                let ln_f = law.log_density_gradient(t, &mut gradient);
                if ln_f == f64::NEG_INFINITY { continue }
                prop_assert!(close(ln_f, law.log_density(t), 1e-10, 1e-12), "{said}: ln f {ln_f}");
                agrees(family.as_ref(), &case.about, &x, &gradient, ln_f, &|l| l.log_density(t))
                    .map_err(|e| TestCaseError::fail(format!("{said}: ln f({t}): {e}")))?;
            }
        }
    }

    #[test]
    fn areas_match_quadrature(case in cases(1.5)) {
        for Member { law, said, shift, .. } in members(&case.about, case.start, &case.nudge) {
            let t = law.quantile(case.p * (1.0 - law.never()));
            let area = law.restricted_mean(t);
            let sum = shift + area_by_quadrature(&|u| law.survival(u + shift), law.scale() - shift, t - shift);
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
            for member in members(&case.about, case.start, &case.nudge) {
                let Member { law, family, x, said, shift, index } = member;
                let other = &others[index];
                let t = law.quantile(case.p * (1.0 - law.never()));
                if t - shift < 1e-3 * t { continue } // The difference has lost digits before any law sees it.
                let moved = other.law(&family.rescale(&x, factor)).expect("in range in any unit");
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
            let (mut shares, mut slopes) = (values.clone(), rows.clone());
            law.survival_gradient_on(&ages, &logs, &mut shares, &mut slopes);
            let mut row = vec![0.0; x.len()];
            for (i, &t) in ages.iter().enumerate() {
                let s = law.survival(t);
                prop_assert!(close(shares[i], s, 1e-9, 1e-300), "{said} at {t}: {} and {s}", shares[i]);
                prop_assert!(close(out[i], s, 1e-9, 1e-300), "{said} at {t}: {} and {s}", out[i]);
                prop_assert!(i == 0 || out[i] <= out[i - 1] * (1.0 + 1e-11), "{said} at {t}: S rises");
                let value = law.log_survival_gradient(t, &mut row);
                prop_assert!(close(values[i], value, 1e-9, 1e-9), "{said} at {t}: {} and {value}", values[i]);
                for (a, b) in rows[i * x.len()..].iter().zip(&row) {
                    prop_assert!(close(*a, *b, 1e-7, 1e-7), "{said} at {t}: {a} and {b}");
                }
                for (a, b) in slopes[i * x.len()..].iter().zip(&row).filter(|_| s > 0.0) {
                    prop_assert!(close(*a, s * b, 1e-7, 1e-9), "{said} at {t}: dS {a} and {}", s * b);
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
    about: &About,
    x: &[f64],
    gradient: &[f64],
    value: f64,
    read: &dyn Fn(&dyn Law) -> f64,
) -> Result<(), String> {
    if value < -1e4 {
        return Ok(()); // Differences see nothing but rounding there.
    }
    for (i, coordinate) in family.coordinates().into_iter().enumerate() {
        let unit = unit(coordinate, about);
        let at = |h: f64| {
            let mut y = x.to_vec();
            y[i] += h * unit;
            family.law(&y).map(|law| read(law.as_ref()))
        };
        let slope = |h: f64| {
            let (wide, narrow) = ((at(2.0 * h)? - at(-2.0 * h)?) / (4.0 * h), (at(h)? - at(-h)?) / (2.0 * h));
            Some((4.0 * narrow - wide) / 3.0)
        };
        // A wide step for flat coordinates, a narrow one for steep.
        let slopes = [1e-3, 1e-4, 1e-5, 1e-6].map(slope);
        let formula = gradient[i] * unit;
        let fits = |slope: &f64| close(formula, *slope, 1e-6, 1e-7 * (1.0 + value.abs()));
        if slopes.iter().flatten().count() > 0 && !slopes.iter().flatten().any(fits) {
            return Err(format!("coordinate {i}: {formula} by formula, {slopes:?} by difference"));
        }
    }
    Ok(())
}

/// Family, natural parameters, age, `ln S`, `ln f`.
type Value = (&'static str, &'static [f64], f64, f64, f64);

/// From scipy 1.17.1: expon, weibull_min, gamma, truncnorm, gompertz, invgauss, gengamma, lognorm, fisk, lomax,
/// burr12, genpareto; `logsf` and `logpdf`.
#[rustfmt::skip]
#[allow(clippy::approx_constant)]
const SCIPY: &[Value] = &[
    ("exponential", &[0.25], 0.1, -0.025, -1.4112943611198905),
    ("exponential", &[0.25], 40.0, -10.0, -11.38629436111989),
    ("exponential", &[0.25], 40000.0, -10000.0, -10001.38629436112),
    ("weibull", &[1.7, 606.5], 1.0, -1.8586072682110413e-05, -10.36248837326349),
    ("weibull", &[1.7, 606.5], 500.0, -0.7201726738489093, -6.732416792144183),
    ("weibull", &[1.7, 606.5], 20000.0, -381.01197346813, -384.4420019685455),
    ("weibull", &[0.4, 2.0], 1e-06, -0.0030170881682725806, 7.092739642512158),
    ("weibull", &[0.4, 2.0], 3.0, -1.1760790225246736, -3.0287959998236724),
    ("weibull", &[0.4, 2.0], 1000000.0, -190.3653938715879, -199.8482498104646),
    ("gamma", &[0.3, 5.0], 0.0001, -0.044348745020504544, 4.868588891835022),
    ("gamma", &[0.3, 5.0], 2.0, -1.4978096944982724, -2.463832394940267),
    ("gamma", &[0.3, 5.0], 60.0, -14.88811706586258, -16.444670562103777),
    ("gamma", &[2.5, 1.5], 0.01, -1.0867464966068633e-06, -8.212767586392133),
    ("gamma", &[2.5, 1.5], 3.0, -0.5988994716092456, -1.6504272077411657),
    ("gamma", &[2.5, 1.5], 80.0, -47.62518307196181, -48.05863902206585),
    ("gamma", &[150.0, 0.02], 2.0, -1.8842122411654543e-06, -9.927089837673556),
    ("gamma", &[150.0, 0.02], 3.0, -0.7151029128126082, 0.48721127044276313),
    ("gamma", &[150.0, 0.02], 5.0, -26.419311580167932, -23.39977078842461),
    ("normal", &[2.0, 1.5], 0.1, -0.012652520406146098, -2.0309832867945383),
    ("normal", &[2.0, 1.5], 2.0, -0.5975046038194246, -1.2287610645723164),
    ("normal", &[2.0, 1.5], 9.0, -13.294190697975928, -12.117649953461207),
    ("normal", &[-3.0, 2.0], 0.1, -0.09799864276360767, -0.10739131294072857),
    ("normal", &[-3.0, 2.0], 1.0, -1.077239932858142, -0.9061413129407282),
    ("normal", &[-3.0, 2.0], 9.0, -18.03082454915082, -16.90614131294073),
    ("gompertz", &[0.5, 0.2], 0.1, -0.01025421927520481, -2.2628393122692505),
    ("gompertz", &[0.5, 0.2], 3.0, -0.696337814067613, -1.4989229070616585),
    ("gompertz", &[0.5, 0.2], 12.0, -80.48575869854703, -76.78834379154108),
    ("inverse_gaussian", &[2.0, 3.0], 0.2, -0.0004505834495368874, -4.0304755202194675),
    ("inverse_gaussian", &[2.0, 3.0], 2.0, -1.031899764544878, -1.4093531597105358),
    ("inverse_gaussian", &[2.0, 3.0], 60.0, -26.616466197683337, -27.53614923220377),
    ("inverse_gaussian", &[5.0, 0.5], 0.05, -0.0017307899938602926, -1.672413713153658),
    ("inverse_gaussian", &[5.0, 0.5], 5.0, -1.725377164276717, -3.679668992135796),
    ("inverse_gaussian", &[5.0, 0.5], 400.0, -9.826244453648782, -14.153333944146617),
    ("generalised_gamma", &[2.0, 1.8, 0.9], 0.05, -0.0006381885100023857, -3.785764398248719),
    ("generalised_gamma", &[2.0, 1.8, 0.9], 3.0, -0.548236122155607, -1.914532360919567),
    ("generalised_gamma", &[2.0, 1.8, 0.9], 60.0, -18.2437019878604, -19.42810284463601),
    ("lognormal", &[0.5, 1.2], 0.001, -3.3475685802873664e-10, -13.247268100352501),
    ("lognormal", &[0.5, 1.2], 2.0, -0.82996617901309, -1.8073606849190782),
    ("lognormal", &[0.5, 1.2], 1000000.0, -64.89698924192794, -76.4802503074275),
    ("log_logistic", &[1.5, 3.0], 0.01, -0.0001924315735869409, -3.545423281035222),
    ("log_logistic", &[1.5, 3.0], 3.0, -0.6931471805599453, -2.079441541679836),
    ("log_logistic", &[1.5, 3.0], 100.0, -5.265019544986545, -9.469907321873066),
    ("lomax", &[1.2, 4.0], 0.01, -0.0029962562383046387, -1.2094659407628279),
    ("lomax", &[1.2, 4.0], 4.0, -0.8317766166719344, -2.7288966015578158),
    ("lomax", &[1.2, 4.0], 1000000000.0, -23.204365775791825, -43.74531005994428),
    ("burr", &[2.0, 0.7, 3.0], 0.01, -7.777734568221305e-06, -6.465941415487049),
    ("burr", &[2.0, 0.7, 3.0], 3.0, -0.48520302639196167, -1.9404902589988038),
    ("burr", &[2.0, 0.7, 3.0], 1000000.0, -17.803657577020928, -31.28269589837299),
    ("pareto_tail", &[0.497, 6.98, 0.0], 0.1, -0.014275883067444695, -1.964419913726246),
    ("pareto_tail", &[0.497, 6.98, 0.0], 7.0, -0.8137101307803823, -3.1611729825525137),
    ("pareto_tail", &[0.497, 6.98, 0.0], 100000.0, -17.848796233612127, -28.662696878491634),
    ("pareto_tail", &[-0.3, 2.0, 0.0], 0.1, -0.05037879270016057, -0.7284123354500577),
    ("pareto_tail", &[-0.3, 2.0, 0.0], 3.0, -1.9927900025187348, -2.0881001823230596),
    ("pareto_tail", &[-0.3, 2.0, 0.0], 6.6, -15.350567286626932, -11.438544281198798),
];

/// From mpmath 1.4.1 at 50 digits and more, by the definitions: far tails, near-degenerate laws, mixtures.
#[rustfmt::skip]
const MPMATH: &[Value] = &[
    ("log_logistic", &[1.5, 3.0], 1e7, -22.52922504359963, -38.2418555866141),
    ("lognormal", &[0.5, 0.05], 1000000.0, -35467.06789832114, -35472.30300066922),
    ("lognormal", &[-3.0, 0.2], 1000.0, -1231.8672846787886, -1233.2624392522325),
    ("lognormal", &[0.0, 2.5], 1e-12, -1.0670569485777248e-28, -35.28207438186143),
    ("gamma", &[0.01, 1.0], 0.3, -4.702518835666927, -3.707546801759345),
    ("gamma", &[0.01, 1.0], 7.0, -13.645271763783438, -13.525930925606781),
    ("gamma", &[3.0, 1.0], 40000.0, -39979.49982771437, -39979.49987771437),
    ("gamma", &[900.0, 0.5], 600.0, -44.32070650355213, -45.000898192744614),
    ("gamma", &[900.0, 0.5], 400.0, -0.0002759515120239373, -9.51403038198439),
    ("gamma", &[45.0, 1.0], 44.0, -0.6162250136982645, -2.812927256953404),
    ("gamma", &[30.0, 1.0], 30.0, -0.7429321685793004, -2.622314898965503),
    ("gamma", &[12.0, 1.0], 11.0, -0.5459921770780839, -2.12545984509181),
    ("inverse_gaussian", &[1.0, 1000.0], 1.5, -87.04074909550769, -81.40659188920918),
    ("inverse_gaussian", &[1.0, 0.0001], 5.0, -5.66375190625223, -7.9384255878439145),
    ("inverse_gaussian", &[1.0, 1.0], 3000.0, -1511.2365080958152, -1511.9286565513466),
    ("inverse_gaussian", &[1.0, 200.0], 0.7, -2.3409921651210866e-07, -10.591910291165417),
    ("normal", &[-300.0, 4.0], 0.05, -0.9377447185874569, 1.9937933262510605),
    ("normal", &[-300.0, 4.0], 50.0, -1015.7791035506161, -1012.693628548749),
    ("normal", &[50.0, 1.0], 49.0, -0.17275377902344988, -1.4189385332046727),
    ("hyperexponential", &[0.9, 5.0, 0.1], 0.3, -1.2111260025933717, 0.013695956738317978),
    ("hyperexponential", &[0.9, 5.0, 0.1], 100000.0, -10002.302585092995, -10004.605170185989),
    ("two_lognormals", &[0.7, -1.0, 0.3, 2.0, 0.5], 1.0, -1.2030038044223952, -5.605128130950529),
    ("two_lognormals", &[0.7, -1.0, 0.3, 2.0, 0.5], 10000.0, -108.7743434618692, -114.61812108844612),
    ("two_gammas", &[0.6, 4.0, 0.1, 25.0, 0.2], 1.0, -0.9009056162014357, -3.0922446925026357),
    ("generalised_gamma", &[0.01, 3.0, 0.25], 1.0, -0.00011599948705669357, -8.235369309197882),
    ("generalised_gamma", &[0.01, 3.0, 0.25], 100000000.0, -270.3736966158153, -284.4594961779627),
    ("gompertz", &[1e-07, 3000000.0], 2.0, -0.6000000600000039, -1.80397266432594),
    ("gompertz", &[1.0, 0.001], 17.0, -24154.9517535753, -24144.859508854282),
    ("pareto_tail", &[1e-09, 1.0, 0.0], 20.0, -19.9999998, -19.999999820000003),
    ("pareto_tail", &[-1e-09, 1.0, 0.0], 20.0, -20.000000200000002, -20.000000180000004),
    ("hyperexponential_3", &[0.5, 0.3, 10.0, 1.0, 0.125], 0.5, -0.9856119144563648, -1.4307301296314032),
    ("hyperexponential_3", &[0.5, 0.3, 10.0, 1.0, 0.125], 100.0, -14.1094379124341, -16.188879454113938),
];

/// Means, from the same scipy laws.
#[rustfmt::skip]
const MEANS: &[(&str, &[f64], f64)] = &[
    ("weibull", &[0.4, 2.0], 6.646701940895686),
    ("gamma", &[2.5, 1.5], 3.75),
    ("normal", &[-3.0, 2.0], 0.8773543332450866),
    ("gompertz", &[0.5, 0.2], 2.9866974938510444),
    ("generalised_gamma", &[2.0, 1.8, 0.9], 4.442553488207683),
    ("lognormal", &[0.5, 1.2], 3.3871877336213347),
    ("log_logistic", &[1.5, 3.0], 7.255197456936871),
    ("lomax", &[1.2, 4.0], 20.000000000000004),
    ("burr", &[2.0, 0.7, 3.0], 9.402979686129058),
    ("pareto_tail", &[0.497, 6.98, 0.0], 13.876739562624255),
];

fn named(name: &str, natural: &[f64]) -> Box<dyn Law> {
    let tail: &dyn Family = &ParetoTail { threshold: 0.0 };
    let family = *all().iter().chain([&tail]).find(|f| f.name() == name).expect("a family of this name");
    family.law(&family.free(natural).expect("in range")).expect("a law")
}

#[test]
fn values_of_other_programs() {
    for (table, relative) in [(SCIPY, 1e-9), (MPMATH, 2e-12)] {
        for &(name, natural, t, ln_s, ln_f) in table {
            let law = named(name, natural);
            let (s, f) = (law.log_survival(t), law.log_density(t));
            assert!(close(s, ln_s, relative, 0.0), "{name} {natural:?}: ln S({t}) is {s}, not {ln_s}");
            assert!(close(f, ln_f, relative, 1e-13), "{name} {natural:?}: ln f({t}) is {f}, not {ln_f}");
        }
    }
    for &(name, natural, mean) in MEANS {
        let ours = named(name, natural).mean();
        assert!(close(ours, mean, 1e-9, 0.0), "{name} {natural:?}: mean {ours}, not {mean}");
    }
}

#[test]
fn mixtures_report_in_order_and_names_match_the_contract() {
    let swapped = named("hyperexponential", &[0.2, 0.5, 3.0]).parameters();
    assert!(swapped.iter().zip([0.8, 3.0, 0.5]).all(|(a, b)| close(*a, b, 1e-12, 0.0)), "{swapped:?}");
    let swapped = named("two_lognormals", &[0.2, 5.0, 1.0, -1.0, 0.5]).parameters();
    assert!(
        swapped.iter().zip([0.8, -1.0, 0.5, 5.0, 1.0]).all(|(a, b)| close(*a, b, 1e-12, 0.0)),
        "{swapped:?}"
    );
    let swapped = named("hyperexponential_3", &[0.2, 0.5, 1.0, 3.0, 9.0]).parameters();
    let right = [0.3, 0.5, 9.0, 3.0, 1.0];
    assert!(swapped.iter().zip(right).all(|(a, b)| close(*a, b, 1e-12, 0.0)), "{swapped:?}");
    let family = WithNever(Shifted { inner: LogLogistic, shift: 2.0 });
    assert_eq!(family.parameters(), ["shape", "scale", "shift", "never"]);
    assert_eq!(family.dimension(), 3);
    assert_eq!(family.law(&[0.0, 0.0, -40.0]).map(|l| l.never() > 0.0), Some(true));
    assert_eq!(decides(0.1).len(), 17);
    assert_eq!(verdicts(0.1).len(), 22);
}

#[test]
fn infinite_means_are_said_to_be() {
    for (name, natural) in [
        ("lomax", &[1.0, 2.0][..]),
        ("lomax", &[0.3, 2.0]),
        ("log_logistic", &[1.0, 2.0]),
        ("burr", &[0.5, 2.0, 1.0]),
        ("pareto_tail", &[1.0, 2.0, 0.0]),
    ] {
        let law = named(name, natural);
        assert_eq!(law.mean(), f64::INFINITY, "{name}");
        assert_eq!(law.mean_residual_life(3.0, f64::INFINITY), f64::INFINITY, "{name}");
        assert!(law.restricted_mean(1e9).is_finite(), "{name}");
    }
    // Lomax at 1 in closed form (METHODS.md section 3).
    assert!(close(named("lomax", &[1.0, 2.0]).restricted_mean(6.0), 2.0 * 4f64.ln(), 1e-14, 0.0));
}

#[test]
fn remaining_waits_in_the_far_tail() {
    // Exponential: none the shorter for having waited.
    assert!(close(named("exponential", &[0.5]).mean_residual_life(4000.0, f64::INFINITY), 2.0, 1e-14, 0.0));
    // Gamma and inverse Gaussian: towards that of their exponential limit.
    let gamma = named("gamma", &[3.0, 2.0]).mean_residual_life(1e5, f64::INFINITY);
    assert!(close(gamma, 2.0, 1e-4, 0.0), "{gamma}");
    let walk = named("inverse_gaussian", &[2.0, 4.0]).mean_residual_life(1e4, f64::INFINITY);
    assert!(close(walk, 2.0, 1e-3, 0.0), "{walk}");
    // Lomax: (scale + t)/(shape - 1).
    let lomax = named("lomax", &[3.0, 2.0]).mean_residual_life(1e6, f64::INFINITY);
    assert!(close(lomax, 500_001.0, 1e-12, 0.0), "{lomax}");
    // A finite end leaves (end - t)·|xi|/(1 + |xi|)/|xi|.
    let finite = named("pareto_tail", &[-0.5, 2.0, 0.0]);
    assert!(close(finite.mean_residual_life(3.0, f64::INFINITY), 1.0 / 3.0, 1e-12, 0.0));
    assert_eq!(finite.mean_residual_life(4.5, f64::INFINITY), 0.0);
}

/// Minus the log-likelihood of `ages` seen up to `limit`, per wait, and its gradient; infinite out of range.
fn loss(family: &dyn Family, x: &[f64], ages: &[f64], limit: f64) -> (f64, Vec<f64>) {
    let Some(law) = family.law(x) else { return (f64::INFINITY, vec![0.0; x.len()]) };
    let (mut sum, mut slopes, mut row) = (0.0, vec![0.0; x.len()], vec![0.0; x.len()]);
    for &t in ages {
        sum -= if t < limit {
            law.log_density_gradient(t, &mut row)
        } else {
            law.log_survival_gradient(limit, &mut row)
        };
        slopes.iter_mut().zip(&row).for_each(|(s, g)| *s -= g / ages.len() as f64);
    }
    (sum / ages.len() as f64, slopes)
}

/// A plain BFGS descent, enough to see where a start leads.
fn descend(family: &dyn Family, start: Vec<f64>, ages: &[f64], limit: f64) -> f64 {
    let n = start.len();
    let mut x = start;
    let (mut value, mut slopes) = loss(family, &x, ages, limit);
    let mut inverse = vec![vec![0.0; n]; n];
    (0..n).for_each(|i| inverse[i][i] = 1.0);
    for _ in 0..200 {
        let mut way: Vec<f64> =
            inverse.iter().map(|r| -r.iter().zip(&slopes).map(|(a, b)| a * b).sum::<f64>()).collect();
        let longest = way.iter().fold(0.0_f64, |a, b| a.max(b.abs()));
        if longest > 2.0 {
            way.iter_mut().for_each(|w| *w *= 2.0 / longest);
        }
        let slope: f64 = way.iter().zip(&slopes).map(|(a, b)| a * b).sum();
        let mut step = 1.0;
        let (next, there) = loop {
            let next: Vec<f64> = x.iter().zip(&way).map(|(a, w)| a + step * w).collect();
            let there = loss(family, &next, ages, limit);
            if there.0 <= value + 1e-4 * step * slope {
                break (next, there);
            }
            step *= 0.4;
            if step < 1e-12 {
                return value;
            }
        };
        let moved: Vec<f64> = next.iter().zip(&x).map(|(a, b)| a - b).collect();
        let turned: Vec<f64> = there.1.iter().zip(&slopes).map(|(a, b)| a - b).collect();
        let along: f64 = moved.iter().zip(&turned).map(|(a, b)| a * b).sum();
        if along > 1e-14 {
            let through: Vec<f64> =
                inverse.iter().map(|r| r.iter().zip(&turned).map(|(a, b)| a * b).sum()).collect();
            let bend: f64 = turned.iter().zip(&through).map(|(a, b)| a * b).sum();
            for i in 0..n {
                for j in 0..n {
                    inverse[i][j] += (1.0 + bend / along) * moved[i] * moved[j] / along
                        - (through[i] * moved[j] + moved[i] * through[j]) / along;
                }
            }
        }
        let gained = value - there.0;
        (x, value, slopes) = (next, there.0, there.1);
        if gained < 1e-10 && slope > -1e-9 {
            break;
        }
    }
    value
}

/// From the family's own starts a descent finds a likelihood at least that of the truth, in which the sample was
/// drawn: whole, and cut off at its 75% point.
#[test]
fn starts_lead_to_the_maximum() {
    let truths: [(&str, &[f64]); 24] = [
        ("exponential", &[0.25]),
        ("weibull", &[0.5, 20.0]),
        ("weibull", &[3.0, 0.02]),
        ("gamma", &[0.4, 5.0]),
        ("gamma", &[60.0, 0.01]),
        ("normal", &[5.0, 1.0]),
        ("normal", &[-2.0, 3.0]),
        ("gompertz", &[0.5, 0.05]),
        ("gompertz", &[0.2, 2.0]),
        ("inverse_gaussian", &[2.0, 8.0]),
        ("inverse_gaussian", &[10.0, 1.0]),
        ("generalised_gamma", &[2.0, 4.0, 0.7]),
        ("lognormal", &[-4.0, 0.3]),
        ("lognormal", &[2.0, 1.5]),
        ("log_logistic", &[1.2, 3.0]),
        ("lomax", &[1.2, 4.0]),
        ("lomax", &[4.0, 4.0]),
        ("burr", &[3.0, 0.3, 2.0]),
        ("hyperexponential", &[0.8, 10.0, 0.3]),
        ("hyperexponential", &[0.98, 2.0, 0.02]),
        ("two_lognormals", &[0.9, -2.0, 0.3, 1.0, 0.4]),
        ("two_lognormals", &[0.4, -2.0, 0.3, -0.5, 0.6]),
        ("two_gammas", &[0.7, 9.0, 0.1, 4.0, 2.0]),
        ("hyperexponential_3", &[0.6, 0.3, 20.0, 2.0, 0.1]),
    ];
    for (name, natural) in truths {
        let law = named(name, natural);
        // Evenly spread quantiles in place of chance: the sample looks exactly like its law.
        let ages: Vec<f64> = (0..400).map(|i| law.quantile((f64::from(i) + 0.5) / 400.0)).collect();
        for limit in [f64::INFINITY, law.quantile(0.75)] {
            let done: Vec<f64> = ages.iter().copied().filter(|&t| t < limit).collect();
            let logs: Vec<f64> = done.iter().map(|t| t.ln()).collect();
            let log_mean = logs.iter().sum::<f64>() / logs.len() as f64;
            let spread = logs.iter().map(|u| (u - log_mean).powi(2)).sum::<f64>() / logs.len() as f64;
            let about = About {
                mean: ages.iter().map(|t| t.min(limit)).sum::<f64>() / done.len() as f64,
                low: done[done.len() / 10],
                median: done[done.len() / 2],
                high: done[done.len() * 9 / 10],
                log_mean,
                log_sd: spread.sqrt().max(0.05),
                left: 1.0 - done.len() as f64 / ages.len() as f64,
            };
            let plain = *all().iter().find(|f| f.name() == name).expect("named");
            let never = WithNever(plain);
            let families: [&dyn Family; 2] = [&plain, &never];
            for family in families {
                let mut x = plain.free(natural).expect("in range");
                if family.dimension() > x.len() {
                    x.push(-12.0);
                }
                let truth = loss(family, &x, &ages, limit).0;
                let found = family.starts(&about).into_iter().map(|x| descend(family, x, &ages, limit));
                let found: Vec<f64> = found.collect();
                let best = found.iter().copied().fold(f64::INFINITY, f64::min);
                // A few hundredths of log-likelihood in 400 waits.
                assert!(
                    best <= truth + 1e-4,
                    "{:?} {natural:?} to {limit}: {found:?}, truth {truth}",
                    family.parameters()
                );
            }
        }
    }
}
