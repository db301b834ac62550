//! The nonparametric curves against general-purpose libraries, published tables and slow obvious twins.

// A failed assumption of a test is a failed test, in its helper functions too.
#![allow(clippy::unwrap_used)]

mod support;

use outwait::curve::{
    AalenJohansen, CurveError, Drift, Emphasis, Empirical, KaplanMeier, LifeTable, NelsonAalen,
    RestrictedMean, SmoothedHazard, TopAges, TopError, Turnbull, log_rank, turnbull,
};
use outwait::outlook::Outlook;
use outwait::tally::{Cause, Cells, Sample};
use outwait::wait::{Ending, LEAST_AGE, Wait};
use proptest::prelude::*;
use serde_json::Value;
use support::{SETS, Set, Zeros, expected, set};

/// Relative 1e-9, as the reference answers are meant; below 1e-12 their own rounding is left.
fn agrees(ours: f64, theirs: f64) -> bool {
    (ours - theirs).abs() <= 1e-9 * theirs.abs() + 1e-12
}

fn sample(set: &Set, stream: Option<&str>, zeros: Zeros) -> Sample {
    set.cells(stream, zeros).sample(Cause::Done)
}

#[test]
fn reference_files_hold_what_their_answers_say() {
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        assert_eq!(set.rows.len() as u64, answer["rows"].as_u64().unwrap(), "{name}");
        let zeros = set.rows.len() - set.waits(None, Zeros::Drop).len();
        assert_eq!(zeros as u64, answer["n_zero"].as_u64().unwrap(), "{name}");
        assert_eq!(set.cells(None, Zeros::AsLeast).total(), set.rows.len() as f64, "{name}");
    }
}

/// `expected/*.json`: lifelines 0.30.3 (KaplanMeierFitter, NelsonAalenFitter without smoothing, restricted mean), with
/// Greenwood's sum over its event table. All rows, those of age 0 at the least positive age.
#[test]
fn curves_agree_with_lifelines() {
    let mut checked = 0;
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        checked += check_curves(name, &sample(&set, None, Zeros::AsLeast), &answer["kaplan_meier"]);
        for (stream, part) in answer["streams"].as_object().into_iter().flatten() {
            if part["kaplan_meier"].is_object() {
                let data = sample(&set, Some(stream), Zeros::AsLeast);
                checked += check_curves(&format!("{name}/{stream}"), &data, &part["kaplan_meier"]);
            }
        }
    }
    println!("{checked} ages checked");
    assert!(checked > 300);
}

fn check_curves(name: &str, data: &Sample, answer: &Value) -> usize {
    let table = LifeTable::of_sample(data).unwrap();
    let (curve, hazard, mean) =
        (KaplanMeier::of(&table), NelsonAalen::of(&table), RestrictedMean::of(&table));
    let rows = answer["at"].as_array().unwrap();
    for row in rows {
        let t = row["t"].as_f64().unwrap();
        let number = |key: &str| row[key].as_f64().unwrap();
        assert!(agrees(curve.survival(t), number("survival")), "{name} S({t}): {}", curve.survival(t));
        if let Some(error) = row["greenwood_se"].as_f64() {
            assert!(agrees(curve.variance(t).sqrt(), error), "{name} se({t})");
        }
        assert!(agrees(hazard.cumulative_hazard(t), number("nelson_aalen")), "{name} H({t})");
        let (ours, theirs) = (mean.restricted_mean(t).value, number("restricted_mean"));
        assert!((ours / theirs - 1.0).abs() < 1e-9 || ours == theirs, "{name} A({t}): {ours} for {theirs}");
    }
    for (p, q) in answer["quantiles_of_T"].as_object().unwrap() {
        let ours = curve.quantile(p.parse().unwrap()).map(|t| if t == LEAST_AGE { 0.0 } else { t });
        // Where the curve passes through 1 - p exactly, rounding decides theirs: 15/20 as 0.7500000000000001, say.
        let tie = ours.is_some_and(|t| (curve.survival(t) - (1.0 - p.parse::<f64>().unwrap())).abs() < 1e-12);
        assert!(ours == q.as_f64() || tie, "{name} {p}-quantile: {ours:?} for {q}");
    }
    let last = answer["survival_at_last_time"].as_f64().unwrap();
    assert!(agrees(curve.survival(f64::MAX), last), "{name}: {}", curve.survival(f64::MAX));
    rows.len()
}

/// `expected/*.json`: lifelines 0.30.3, multivariate_logrank_test.
#[test]
fn log_rank_agrees_with_lifelines() {
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        let Some(theirs) = answer["logrank_between_streams"].as_object() else { continue };
        let groups: Vec<Sample> =
            set.streams().iter().map(|s| sample(&set, Some(s), Zeros::AsLeast)).collect();
        let ours = log_rank(&groups.iter().collect::<Vec<_>>(), Emphasis::EVEN).unwrap();
        let chi_squared = theirs["chi2"].as_f64().unwrap();
        assert!((ours.chi_squared / chi_squared - 1.0).abs() < 1e-9, "{name}: {ours:?}");
        assert_eq!(ours.degrees as u64, theirs["df"].as_u64().unwrap(), "{name}");
        let p = theirs["p"].as_f64().unwrap();
        assert!((ours.p_value - p).abs() <= 1e-6 * p, "{name}: {} for {p}", ours.p_value);
    }
}

/// `expected/*.json`: mean log excess over the (k+1)-th largest, k = floor(n/10), numpy.
#[test]
fn hill_agrees_with_the_reference() {
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        let theirs = &answer["hill_top_10_percent"];
        let top = TopAges::tenth(&sample(&set, None, Zeros::Drop), 1.0);
        if theirs.is_null() {
            // Not asked of fewer than 5, or nothing but ties.
            assert!(top.is_err() || top.unwrap().k() < 5.0, "{name}");
            continue;
        }
        let top = top.unwrap();
        let number = |key: &str| theirs[key].as_f64().unwrap();
        assert_eq!(top.k(), number("k"), "{name}");
        assert_eq!(top.threshold(), number("threshold_is_the_(k+1)th_largest"), "{name}");
        assert!(agrees(top.hill().xi, number("gamma")), "{name}: {:?}", top.hill());
        // Of the ages equal to the threshold the reference takes the last in the file into the top, this crate
        // their average: the shares may differ by as many as are taken.
        let equal = set.rows.iter().filter(|r| r.elapsed == top.threshold());
        let mixed = equal.clone().any(|r| r.ending == Ending::Done)
            && equal.clone().any(|r| r.ending != Ending::Done);
        let slack = if mixed { equal.count() as f64 / top.k() } else { 1e-12 };
        assert!((top.ended_share() - number("share_done_in_top_k")).abs() <= slack, "{name}");
        let Some(adjusted) = top.hill_censored() else {
            assert!(theirs["gamma_censoring_adjusted"].is_null(), "{name}");
            continue;
        };
        assert!(
            (adjusted.xi / number("gamma_censoring_adjusted") - 1.0).abs() < 1e-9 + 2.0 * slack,
            "{name}"
        );
    }
}

/// Freireich et al. 1963, as tabulated in Klein & Moeschberger, Survival Analysis, tables 4.1A and 4.2, and Kleinbaum &
/// Klein, Survival Analysis, chapter 2: the printed figures, to half a unit of their last digit.
#[test]
fn leukaemia_remission_as_printed() {
    let (set, published) = (set("leukemia_6mp").unwrap(), expected("published").unwrap());
    let printed = &published["leukemia_6mp.csv"];
    let table = |stream| LifeTable::of_sample(&sample(&set, Some(stream), Zeros::Drop)).unwrap();
    let (treated, control) = (table("6-MP"), table("control"));
    let (curve, hazard) = (KaplanMeier::of(&treated), NelsonAalen::of(&treated));
    for (key, digits, ours) in [
        ("kaplan_meier_6MP", 3, &(|t| curve.survival(t)) as &dyn Fn(f64) -> f64),
        ("greenwood_se_6MP", 4, &|t| curve.variance(t).sqrt()),
        ("nelson_aalen_6MP", 4, &|t| hazard.cumulative_hazard(t)),
        ("kaplan_meier_control", 3, &|t| KaplanMeier::of(&control).survival(t)),
    ] {
        for (t, value) in printed[key].as_object().unwrap() {
            let (t, value) = (t.parse().unwrap(), value.as_f64().unwrap());
            let half = 0.5 * 10f64.powi(-digits) + 1e-9;
            assert!((ours(t) - value).abs() <= half, "{key} {t}: {} for {value}", ours(t));
        }
    }
    assert_eq!(curve.quantile(0.5), Some(23.0));
    assert_eq!(KaplanMeier::of(&control).quantile(0.5), Some(8.0));
    let [a, b] = ["6-MP", "control"].map(|s| sample(&set, Some(s), Zeros::Drop));
    let test = log_rank(&[&a, &b], Emphasis::EVEN).unwrap();
    assert!((test.chi_squared - 16.79).abs() < 0.005, "{test:?}");
}

/// lifelines 0.30.3, load_waltons: its documentation prints 122.25 for the log-rank test; the weighted ones are from
/// `logrank_test(..., weightings="fleming-harrington", p=P, q=Q)` of the same version.
#[test]
fn weighted_log_rank_on_the_fruit_flies() {
    let set = set("waltons_flies").unwrap();
    let groups = ["control", "miR-137"].map(|s| sample(&set, Some(s), Zeros::Drop));
    for (early, late, chi_squared) in [
        (0.0, 0.0, 122.249_125_573_006_37),
        (0.0, 1.0, 21.251_613_647_401_16),
        (1.0, 0.0, 139.843_934_199_433_53),
        (1.0, 1.0, 45.034_706_501_217_31),
    ] {
        let test = log_rank(&[&groups[0], &groups[1]], Emphasis { early, late }).unwrap();
        assert!((test.chi_squared / chi_squared - 1.0).abs() < 1e-9, "G({early},{late}): {test:?}");
    }
    let curves = groups.map(|g| KaplanMeier::of(&LifeTable::of_sample(&g).unwrap()).quantile(0.5));
    assert_eq!(curves, [Some(58.0), Some(26.0)]);
}

/// Woolson 1981, Biometrics 37:687: 26 psychiatric inpatients of Iowa, observed from the age at admission; years.
/// Age at entry, years observed, died. As in lifelines 0.30.3 `load_psychiatric_patients`.
const WOOLSON: [(f64, f64, bool); 26] = [
    (51.0, 1.0, true),
    (58.0, 1.0, true),
    (55.0, 2.0, true),
    (28.0, 22.0, true),
    (21.0, 30.0, false),
    (19.0, 28.0, true),
    (25.0, 32.0, true),
    (48.0, 11.0, true),
    (47.0, 14.0, true),
    (25.0, 36.0, false),
    (31.0, 31.0, false),
    (24.0, 33.0, false),
    (25.0, 33.0, false),
    (30.0, 37.0, false),
    (33.0, 35.0, false),
    (36.0, 25.0, true),
    (30.0, 31.0, false),
    (41.0, 22.0, true),
    (43.0, 26.0, true),
    (45.0, 24.0, true),
    (35.0, 35.0, false),
    (29.0, 34.0, false),
    (35.0, 30.0, false),
    (32.0, 35.0, true),
    (36.0, 40.0, true),
    (32.0, 39.0, false),
];

fn woolson() -> Vec<Wait> {
    WOOLSON
        .iter()
        .map(|&(entry, years, died)| {
            let ending = if died { Ending::Done } else { Ending::Waiting };
            Wait::new(entry + years, ending).unwrap().with_entered(entry).unwrap()
        })
        .collect()
}

/// lifelines 0.30.3, `KaplanMeierFitter().fit(Age + T, C, entry=Age + 1e-9)`: the shift makes it count, as here and in the
/// textbooks, an entry at the age of a death as not yet at risk. Numbers at risk, survival, Greenwood's error.
#[test]
fn late_entry_agrees_with_lifelines() {
    let theirs = [
        (47.0, 21.0, 0.952_380_952_380_952_2, 0.046_471_432_045_168_244),
        (50.0, 22.0, 0.909_090_909_090_908_7, 0.061_290_896_587_567_444),
        (52.0, 21.0, 0.865_800_865_800_865_3, 0.072_056_309_833_461_34),
        (57.0, 21.0, 0.783_343_640_486_497_1, 0.085_592_394_274_847_5),
        (59.0, 18.0, 0.696_305_458_210_219_7, 0.095_684_082_525_944_14),
        (61.0, 16.0, 0.609_267_275_933_942_1, 0.101_606_994_381_507_03),
        (63.0, 11.0, 0.553_879_341_758_129_3, 0.106_400_874_929_347_95),
        (67.0, 8.0, 0.484_644_424_038_363_16, 0.113_410_943_701_016_12),
        (69.0, 5.0, 0.290_786_654_423_017_93, 0.126_113_384_010_130_75),
        (76.0, 1.0, 0.0, 0.0),
    ];
    let curve = KaplanMeier::of(&LifeTable::of(&Cells::from_waits(&woolson())).unwrap());
    assert_eq!(curve.points().len(), theirs.len());
    for (p, (time, at_risk, survival, error)) in curve.points().iter().zip(theirs) {
        assert_eq!((p.time, p.at_risk), (time, at_risk));
        assert!(agrees(p.survival, survival) && agrees(p.variance.sqrt(), error), "{p:?}");
    }
    // 5 left at 69.
    assert_eq!(curve.sight(), 69.0);
}

/// Sixteen waits; lifelines 0.30.3, `AalenJohansenFitter(calculate_variance=True).fit(t, e, event_of_interest=K)`, its
/// `cumulative_density_`, `variance_`, and 95% `confidence_interval_`; the hazard by
/// `NelsonAalenFitter(nelson_aalen_smoothing=False).fit(t, e > 0)`, the curve by `KaplanMeierFitter`.
#[test]
fn competing_endings_agree_with_lifelines() {
    let ages = [0.4, 0.7, 1.1, 1.2, 1.9, 2.3, 2.4, 3.0, 3.1, 3.6, 4.4, 5.2, 6.0, 7.5, 8.1, 9.9];
    let kinds = [1, 0, 2, 1, 1, 0, 2, 1, 0, 1, 2, 1, 0, 1, 2, 0];
    let waits: Vec<Wait> = ages
        .iter()
        .zip(kinds)
        .map(|(&t, k)| Wait::new(t, [Ending::GaveUp, Ending::Done, Ending::Failed][k]).unwrap())
        .collect();
    let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
    let curve = AalenJohansen::of(&table);
    for (cause, t, incidence, variance) in [
        (Cause::Done, 0.4, 0.0625, 0.003_662_109_375),
        (Cause::Done, 1.2, 0.129_464_285_714_285_7, 0.007_321_549_574_070_701),
        (Cause::Done, 3.0, 0.270_089_285_714_285_8, 0.013_486_785_443_809_225),
        (Cause::Done, 5.2, 0.438_456_632_653_061_34, 0.018_747_306_311_230_547),
        (Cause::Done, 7.5, 0.550_701_530_612_245, 0.021_386_781_151_822_742),
        (Cause::Failed, 1.1, 0.066_964_285_714_285_71, 0.004_182_598_681_213_558),
        (Cause::Failed, 2.4, 0.140_625_000_000_000_03, 0.008_530_659_578_284_442),
        (Cause::Failed, 4.4, 0.224_808_673_469_387_8, 0.013_244_611_656_473_59),
        (Cause::Failed, 8.1, 0.337_053_571_428_571_45, 0.019_552_549_600_237_095),
    ] {
        assert!(agrees(curve.cumulative_incidence(cause, t), incidence), "{cause:?} {t}");
        assert!(agrees(curve.variance(cause, t), variance), "{cause:?} {t}: {}", curve.variance(cause, t));
    }
    let interval = curve.interval(Cause::Done, 3.0, 0.95);
    assert!((interval.low - 0.082_747_394_876_162).abs() < 1e-12, "{interval:?}");
    assert!((interval.high - 0.502_778_382_047_201).abs() < 1e-12, "{interval:?}");
    let interval = curve.interval(Cause::Failed, 7.5, 0.95);
    assert!((interval.low - 0.053_755_155_802_463_6).abs() < 1e-12, "{interval:?}");
    assert!((interval.high - 0.466_731_016_155).abs() < 1e-12, "{interval:?}");
    let interval = KaplanMeier::of(&table).interval(7.5, 0.95);
    assert!((interval.low - 0.042_986_950_230_671_1).abs() < 1e-12, "{interval:?}");
    assert!((interval.high - 0.492_028_320_571_978).abs() < 1e-12, "{interval:?}");
    let hazard = NelsonAalen::of(&table);
    assert!((hazard.cumulative_hazard(7.5) - 1.348_153).abs() < 5e-7);
    // Its variance there is the binomial one for ties; METHODS has sum d/n², by hand: at risk were 16, 14, ..., 3.
    let by_hand: f64 =
        [16.0, 14.0, 13.0, 12.0, 10.0, 9.0, 7.0, 6.0, 5.0, 3.0].iter().map(|n: &f64| 1.0 / (n * n)).sum();
    assert!(agrees(hazard.variance(7.5), by_hand), "{}", hazard.variance(7.5));
    let (low, high) = (hazard.interval(7.5, 0.95).low, hazard.interval(7.5, 0.95).high);
    assert!(
        (low * high).sqrt() - 1.348_153 < 5e-7
            && ((high / low).ln() / 2.0 - 1.959_964 * by_hand.sqrt() / 1.348_153).abs() < 1e-5
    );
}

/// Breast retraction after radiotherapy, months: Finkelstein & Wolfe 1985, Biometrics 41:933; 46 women without
/// chemotherapy. Those with no upper bound were free of it when last seen.
const RETRACTION: [(f64, f64); 21] = [
    (6.0, 10.0),
    (0.0, 7.0),
    (7.0, 16.0),
    (7.0, 14.0),
    (37.0, 44.0),
    (0.0, 8.0),
    (4.0, 11.0),
    (11.0, 15.0),
    (25.0, 37.0),
    (26.0, 40.0),
    (27.0, 34.0),
    (36.0, 44.0),
    (36.0, 48.0),
    (17.0, 25.0),
    (11.0, 18.0),
    (5.0, 12.0),
    (0.0, 5.0),
    (5.0, 11.0),
    (19.0, 35.0),
    (17.0, 25.0),
    (19.0, 26.0),
];
const FREE_OF_RETRACTION: [f64; 25] = [
    45.0, 46.0, 46.0, 17.0, 15.0, 22.0, 46.0, 46.0, 46.0, 46.0, 46.0, 37.0, 40.0, 46.0, 38.0, 37.0, 18.0,
    24.0, 36.0, 24.0, 32.0, 33.0, 37.0, 34.0, 36.0,
];

fn retraction() -> Vec<Wait> {
    let bounded = RETRACTION.iter().map(|&(l, u)| Wait::between(l, u, Ending::Done).unwrap());
    bounded.chain(FREE_OF_RETRACTION.iter().map(|&c| Wait::new(c, Ending::Waiting).unwrap())).collect()
}

/// The masses as printed for these data in textbooks (from memory: Klein & Moeschberger 2003, table 5.5; Sun 2006,
/// chapter 3), and to more digits from 200,000 steps of the plain self-consistency algorithm in numpy 2.4.6, whose
/// gradient then proves the maximum to 2e-16.
#[test]
fn turnbull_on_breast_retraction() {
    let t = turnbull(&Cells::from_waits(&retraction()).sample(Cause::Done)).unwrap();
    let wanted = [
        (4.0, 5.0, 0.0463, 0.046_346_773_992_894_115),
        (6.0, 7.0, 0.0334, 0.033_363_370_934_642_15),
        (7.0, 8.0, 0.0887, 0.088_667_368_062_708_18),
        (11.0, 12.0, 0.0708, 0.070_752_921_792_364_21),
        (24.0, 25.0, 0.0926, 0.092_645_836_585_013_02),
        (33.0, 34.0, 0.0818, 0.081_785_764_902_547_26),
        (38.0, 40.0, 0.1209, 0.120_879_827_353_834_68),
        (46.0, 48.0, 0.4656, 0.465_558_136_375_996_47),
    ];
    let held: Vec<_> = t.masses.iter().filter(|s| s.mass > 1e-6).collect();
    assert_eq!(held.len(), wanted.len(), "{t:?}");
    for (s, (over, upto, printed, computed)) in held.iter().zip(wanted) {
        assert_eq!((s.over, s.upto), (over, upto));
        assert!((s.mass - printed).abs() < 6e-5, "{s:?}");
        assert!((s.mass - computed).abs() < 1e-6, "{s:?}");
    }
    assert!((t.log_likelihood + 58.060_021_953_990_98).abs() < 1e-7, "{t:?}");
    assert!(t.beyond < 1e-9 && t.gap < 1e-9, "{t:?}");
}

/// The plain algorithm that [`turnbull`] speeds up: every interval, every wait, many steps. Right-censored and bounded
/// waits only.
fn slow_self_consistency(waits: &[Wait]) -> f64 {
    use outwait::wait::Age;
    let bounds: Vec<(f64, f64)> = waits
        .iter()
        .map(|w| match (w.age(), w.ending().is_censored()) {
            (Age::Exact(c), true) => (c, f64::INFINITY),
            (Age::Exact(t), false) => (t.next_down(), t),
            (Age::Between { over, upto }, _) => (over, upto),
        })
        .collect();
    // Every stretch between neighbouring bounds may hold mass.
    let mut ages: Vec<f64> = bounds.iter().flat_map(|&(l, u)| [l, u]).collect();
    ages.sort_by(f64::total_cmp);
    ages.dedup();
    let stretches: Vec<(f64, f64)> = ages.windows(2).map(|w| (w[0], w[1])).collect();
    let mut mass = vec![1.0 / stretches.len() as f64; stretches.len()];
    let mut log_likelihood = 0.0;
    for _ in 0..5_000 {
        let mut next = vec![0.0; mass.len()];
        log_likelihood = 0.0;
        for &(l, u) in &bounds {
            let inside = |s: &(f64, f64)| l <= s.0 && s.1 <= u;
            let all: f64 = stretches.iter().zip(&mass).filter(|(s, _)| inside(s)).map(|(_, m)| m).sum();
            log_likelihood += all.ln();
            for (i, s) in stretches.iter().enumerate() {
                if inside(s) {
                    next[i] += mass[i] / all / bounds.len() as f64;
                }
            }
        }
        mass = next;
    }
    log_likelihood
}

#[test]
fn overlapping_layouts_far_from_small() {
    // A thousand overlapping buckets of an exponential law, 10^12 waits, with a timeout at 3 that takes 5%.
    let mut waits = Vec::new();
    let mut total = 0.0;
    for i in 0..1_000 {
        let over = 3.0 * f64::from(i) / 1_000.0;
        let upto = over + [0.01, 0.05, 0.2][i as usize % 3];
        let count = (1e12 / 1_000.0 * (-over).exp()).round();
        total += count;
        waits.push(Wait::between(over, upto, Ending::Done).unwrap().with_count(count as u64).unwrap());
    }
    let cut = (total / 19.0).round();
    waits.push(Wait::new(3.0, Ending::GaveUp).unwrap().with_count(cut as u64).unwrap());
    let cells = Cells::from_waits(&waits);
    let table = LifeTable::of(&cells).unwrap();
    println!("{} intervals, {} rounds", table.rows().len(), table.iterations());
    let ended: f64 = table.rows().iter().map(|r| r.done).sum();
    assert!((ended / total - 1.0).abs() < 1e-9);
    let curve = Empirical::of(&table);
    assert!((curve.survival(3.5) - 0.05).abs() < 1e-3, "{}", curve.survival(3.5));
    let t: Turnbull = turnbull(&cells.sample(Cause::Done)).unwrap();
    assert!(t.gap < 1e-6, "{} {}", t.gap, t.iterations);
}

#[test]
fn odd_inputs_have_clear_answers() {
    let done = |age: f64| Wait::new(age, Ending::Done).unwrap();
    let of = |waits: &[Wait]| Empirical::new(&Cells::from_waits(waits));
    assert_eq!(of(&[]).unwrap_err(), CurveError::Empty);

    let one = of(&[done(2.0)]).unwrap();
    assert_eq!((one.survival(1.9), one.survival(2.0), one.done(2.0), one.sight()), (1.0, 0.0, 1.0, 2.0));
    assert_eq!((one.restricted_mean(5.0), one.restricted_mean(f64::INFINITY)), (2.0, 2.0));

    let equal = of(&[done(2.0).with_count(1_000_000_000_000).unwrap()]).unwrap();
    assert_eq!((equal.survival(2.0), equal.knots()), (0.0, &[2.0][..]));

    let open = of(&[Wait::new(3.0, Ending::Waiting).unwrap().with_count(7).unwrap()]).unwrap();
    assert_eq!((open.survival(1e9), open.sight(), open.knots().len()), (1.0, 3.0, 0));
    assert_eq!(open.restricted_mean(f64::INFINITY), f64::INFINITY);

    let bucket = Wait::between(0.0, 1.0, Ending::Done).unwrap().with_count(50).unwrap();
    let endless = Wait::between(0.0, f64::INFINITY, Ending::Done).unwrap();
    assert_eq!(of(&[bucket]).unwrap_err(), CurveError::OneBucket { over: 0.0, upto: 1.0 });
    assert!(matches!(of(&[endless]), Err(CurveError::OneBucket { .. })));
    assert!(of(&[bucket, done(1.5)]).is_ok());

    let mut crossed = Cells::from_waits(&[done(1.0), done(2.0)]);
    crossed.events[0].done = -3.0;
    assert!(matches!(Empirical::new(&crossed), Err(CurveError::Contradictory { weight: -3.0, .. })));

    let table = LifeTable::of(&Cells::from_waits(&[Wait::new(3.0, Ending::GaveUp).unwrap()])).unwrap();
    assert_eq!(SmoothedHazard::of(&table).range(), None);
    assert_eq!(KaplanMeier::of(&table).quantile(0.5), None);
    assert!(matches!(TopAges::tenth(&Sample::default(), 10.0), Err(TopError::TooFew { .. })));
}

#[test]
fn sight_is_where_five_are_left() {
    let ages = (1..=100).map(f64::from);
    let all: Vec<Wait> = ages.clone().map(|t| Wait::new(t, Ending::Done).unwrap()).collect();
    let sight = |waits: &[Wait]| LifeTable::of(&Cells::from_waits(waits)).unwrap().sight();
    assert_eq!(sight(&all), 96.0);
    // Behind a timeout everyone left is cut at once: the data speak up to it, also past the last ending.
    let cut: Vec<Wait> = ages
        .map(|t| Wait::new(t.min(60.5), if t < 60.5 { Ending::Done } else { Ending::GaveUp }).unwrap())
        .collect();
    assert_eq!(sight(&cut), 60.5);
    assert_eq!(sight(&all[..3]), 3.0);
}

#[test]
fn smoothed_hazard_of_the_fruit_flies_rises() {
    // A light tail with a rising hazard (reference data); the kernel estimate must show it, and its integral must
    // give the Nelson-Aalen estimate back.
    let table = LifeTable::of(&set("waltons_flies").unwrap().cells(None, Zeros::Drop)).unwrap();
    let hazard = SmoothedHazard::of(&table);
    let at = |t: f64| hazard.at(t).unwrap().hazard;
    assert!(at(60.0) > at(40.0) && at(40.0) > at(20.0), "{} {} {}", at(20.0), at(40.0), at(60.0));
    // Narrow enough not to smear the steep end (15% to 86% a day at the last ages).
    let narrow = SmoothedHazard::with_bandwidth(&table, 0.05);
    let (from, to) = (25.0, 65.0);
    let n = 4_000;
    let area: f64 = (0..n)
        .map(|i| narrow.at(from + (to - from) * (f64::from(i) + 0.5) / f64::from(n)).unwrap().hazard)
        .sum::<f64>()
        * (to - from)
        / f64::from(n);
    let steps = NelsonAalen::of(&table);
    let rise = steps.cumulative_hazard(to) - steps.cumulative_hazard(from);
    assert!((area / rise - 1.0).abs() < 0.02, "{area} for {rise}");
}

#[test]
fn restricted_means_and_what_is_left_of_them() {
    // Uncensored: the mean of the sample, with the variance of its mean (n in place of n - 1).
    let ages = [1.0, 2.0, 4.0, 7.0, 11.0];
    let waits: Vec<Wait> = ages.iter().map(|&t| Wait::new(t, Ending::Done).unwrap()).collect();
    let mean = RestrictedMean::of(&LifeTable::of(&Cells::from_waits(&waits)).unwrap());
    let all = mean.restricted_mean(20.0);
    let centre = ages.iter().sum::<f64>() / 5.0;
    let spread = ages.iter().map(|t| (t - centre).powi(2)).sum::<f64>() / 5.0;
    assert!((all.value - centre).abs() < 1e-12 && (all.variance - spread / 5.0).abs() < 1e-12, "{all:?}");
    // After 3: of 4, 7 and 11 the mean further wait up to 10 is (1 + 4 + 7) / 3.
    let left = mean.residual(3.0, 10.0).unwrap();
    assert!((left.value - 4.0).abs() < 1e-12, "{left:?}");
    let spread = [1.0, 4.0, 7.0].iter().map(|t| (t - 4.0f64).powi(2)).sum::<f64>() / 3.0;
    assert!((left.variance - spread / 3.0).abs() < 1e-12, "{left:?}");
    assert_eq!(mean.residual(11.0, 20.0), None);
    assert_eq!(mean.residual(5.0, 4.0), None);
}

/// Simulation, fixed seed: 95% intervals must cover the truth in about 95% of samples. 80 exponential waits of rate 1,
/// failing at rate 0.5, given up at 2 or at an age of rate 0.2; the tail from 2000 waits of a Pareto law, a fifth of
/// them cut. With 600 samples the standard error of a coverage of 0.95 is 0.009.
#[test]
fn intervals_cover_the_truth() {
    use rand::{RngExt, SeedableRng};
    let mut random = rand_xoshiro::Xoshiro256PlusPlus::seed_from_u64(20_261_130);
    let mut exponential = |rate: f64| -(1.0 - random.random::<f64>()).ln() / rate;
    let samples = 600;
    let (mut hits, mut smooth) = ([0; 7], (0.0, 0.0));
    for _ in 0..samples {
        let waits: Vec<Wait> = (0..80)
            .map(|_| {
                let (done, failed, gone) = (exponential(1.0), exponential(0.5), exponential(0.2).min(2.0));
                let age = done.min(failed).min(gone);
                let ending = if age == done {
                    Ending::Done
                } else if age == failed {
                    Ending::Failed
                } else {
                    Ending::GaveUp
                };
                Wait::new(age, ending).unwrap()
            })
            .collect();
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        let t = 0.6_f64;
        let (survival, ended) = ((-1.5 * t).exp(), -(-1.5 * t).exp_m1());
        let incidence = AalenJohansen::of(&table);
        let mean = RestrictedMean::of(&table);
        let hazard = SmoothedHazard::of(&table).at(t).unwrap();
        smooth =
            (smooth.0 + hazard.hazard, smooth.1 + f64::from(u8::from(hazard.interval(0.95).contains(1.5))));
        let left = |t: f64| -(-1.5 * t).exp_m1() / 1.5;
        let mut tail = Vec::new();
        for _ in 0..2_000 {
            // ln of a Pareto age of index 2 is exponential of rate 2.
            let (age, gone) = (exponential(2.0).exp(), exponential(0.5).exp());
            let ending = if age <= gone { Ending::Done } else { Ending::Waiting };
            tail.push(Wait::new(age.min(gone), ending).unwrap());
        }
        let top = TopAges::tenth(&Cells::from_waits(&tail).sample(Cause::Done), 10.0).unwrap();
        for (hit, covered) in hits.iter_mut().zip([
            KaplanMeier::of(&table).interval(t, 0.95).contains(survival),
            NelsonAalen::of(&table).interval(t, 0.95).contains(1.5 * t),
            incidence.interval(Cause::Done, t, 0.95).contains(ended / 1.5),
            incidence.interval(Cause::Failed, t, 0.95).contains(ended / 3.0),
            mean.restricted_mean(1.5).interval(0.95).contains(left(1.5)),
            mean.residual(t, 1.5).unwrap().interval(0.95).contains(left(1.5 - t)),
            top.hill_censored().unwrap().interval(0.95).contains(0.5),
        ]) {
            *hit += i32::from(covered);
        }
    }
    for (hit, name) in hits.iter().zip(["S", "H", "F_d", "F_f", "A", "e_L", "Hill"]) {
        let coverage = f64::from(*hit) / f64::from(samples);
        println!("{name}: {coverage}");
        assert!((0.92..=0.98).contains(&coverage), "{name}: {coverage}");
    }
    // The interval of the smoothed hazard leaves out its bias.
    let (mean, coverage) = (smooth.0 / f64::from(samples), smooth.1 / f64::from(samples));
    println!("h: {mean} {coverage}");
    assert!((mean / 1.5 - 1.0).abs() < 0.12 && coverage > 0.9, "{mean} {coverage}");
}

/// A handful of waits of every sort. Ages on a coarse grid, so that ties are common.
fn any_wait() -> impl Strategy<Value = Wait> {
    (1_u32..40, 0_usize..4, 0_u32..40, 1_u64..4).prop_map(|(age, ending, entered, count)| {
        let (age, entered) = (f64::from(age) / 4.0, f64::from(entered) / 4.0);
        let wait = Wait::new(age, Ending::ALL[ending]).unwrap().with_count(count).unwrap();
        if entered < age && entered > 5.0 { wait.with_entered(entered).unwrap() } else { wait }
    })
}

/// Waits in the buckets (0,1], (1,2], (2,4], (4,8], (8,∞), and exact ones.
fn bucketed_wait() -> impl Strategy<Value = Wait> {
    (any_wait(), any::<bool>()).prop_map(|(w, exact)| {
        let outwait::wait::Age::Exact(t) = w.age() else { return w };
        let bounds = [(0.0, 1.0), (1.0, 2.0), (2.0, 4.0), (4.0, 8.0), (8.0, f64::INFINITY)];
        let (over, upto) = bounds.into_iter().find(|&(_, u)| t <= u).unwrap();
        if exact && w.ending().is_censored() {
            Wait::new(t, w.ending()).unwrap()
        } else {
            Wait::between(over, upto, w.ending()).unwrap()
        }
        .with_count(w.count())
        .unwrap()
    })
}

/// The curves by their definitions, wait by wait, for waits with one number at risk at each age with endings.
struct Slow {
    /// over, upto, S, F_d, F_f after it.
    steps: Vec<(f64, f64, f64, f64, f64)>,
}

impl Slow {
    fn of(waits: &[Wait]) -> Slow {
        use outwait::wait::Age;
        let ended = |w: &Wait| !w.ending().is_censored();
        let bounds = |w: &Wait| match w.age() {
            Age::Exact(t) => (t, t),
            Age::Between { over, upto } => (over, upto),
        };
        let mut cells: Vec<(f64, f64)> =
            waits.iter().filter(|w| ended(w)).map(bounds).filter(|b| b.1.is_finite()).collect();
        cells.sort_by(|a, b| a.1.total_cmp(&b.1).then(a.0.total_cmp(&b.0)));
        cells.dedup();
        let last_entry = waits.iter().map(Wait::entered).fold(0.0, f64::max);
        let (mut s, mut f_d, mut f_f) = (1.0, 0.0, 0.0);
        let mut steps = Vec::new();
        for (over, upto) in cells {
            let (mut n, mut done, mut failed) = (0.0, 0.0, 0.0);
            for w in waits {
                let (l, u) = bounds(w);
                let weight = w.count() as f64;
                let here = ended(w) && (l, u) == (over, upto);
                // Still there: ends here, or later, or was last seen at or after an age, or within a bucket.
                let later = if ended(w) && u.is_finite() {
                    here || l >= upto
                } else {
                    l > over || (over == upto && l == over)
                };
                if later && w.entered() < upto {
                    n += weight;
                }
                if here && w.ending() == Ending::Done {
                    done += weight;
                } else if here {
                    failed += weight;
                }
            }
            if n == done + failed && last_entry >= upto {
                continue;
            }
            f_d += s * done / n;
            f_f += s * failed / n;
            s *= 1.0 - (done + failed) / n;
            steps.push((over, upto, s, f_d, f_f));
        }
        Slow { steps }
    }

    fn at(&self, t: f64) -> (f64, f64, f64) {
        let mut last = (1.0, 0.0, 0.0);
        for &(over, upto, s, f_d, f_f) in &self.steps {
            if upto <= t {
                last = (s, f_d, f_f);
            } else if over < t {
                let x = (t - over) / (upto - over);
                let mix = |a: f64, b: f64| a + x * (b - a);
                return (mix(last.0, s), mix(last.1, f_d), mix(last.2, f_f));
            }
        }
        last
    }

    /// Midpoint sums between all the ages where the curve bends or jumps: exact for straight pieces.
    fn area(&self, t: f64) -> f64 {
        let mut ages: Vec<f64> =
            self.steps.iter().flat_map(|s| [s.0, s.1]).chain([0.0, t]).filter(|&a| a <= t).collect();
        ages.sort_by(f64::total_cmp);
        ages.windows(2).map(|w| (w[1] - w[0]) * self.at(0.5 * (w[0] + w[1])).0).sum()
    }
}

fn check_against_slow(waits: &[Wait]) {
    let cells = Cells::from_waits(waits);
    let table = match LifeTable::of(&cells) {
        // Nothing but waits given up in the first bucket, or endings in (0, ∞): no ages at all.
        Err(CurveError::OneBucket { .. }) => return,
        table => table.unwrap(),
    };
    let (fast, slow) = (Empirical::of(&table), Slow::of(waits));
    let (curve, incidence) = (KaplanMeier::of(&table), AalenJohansen::of(&table));
    let mean = RestrictedMean::of(&table);
    let worth = |u: f64| 1.0 / (1.0 + u);
    for i in 0..=48 {
        let t = f64::from(i) * 0.25;
        for t in [t, t + 0.1] {
            let (s, f_d, f_f) = slow.at(t);
            assert!((fast.survival(t) - s).abs() < 1e-12, "S({t}) {} for {s}", fast.survival(t));
            assert!((fast.done(t) - f_d).abs() < 1e-12 && (fast.failed(t) - f_f).abs() < 1e-12, "{t}");
            assert!((fast.survival(t) + fast.done(t) + fast.failed(t) - 1.0).abs() < 1e-12);
            assert!((fast.restricted_mean(t) - slow.area(t)).abs() < 1e-10, "A({t})");
            assert!((mean.restricted_mean(t).value - slow.area(t)).abs() < 1e-10, "A({t})");
            assert!((curve.survival(t) - s).abs() < 1e-12);
            let sum: f64 =
                [Cause::Done, Cause::Failed].map(|c| incidence.cumulative_incidence(c, t)).iter().sum();
            assert!((sum - (1.0 - incidence.survival(t))).abs() < 1e-12);
            // Worth by hand: steps as they are, straight pieces by many small ones.
            let mut faded = 0.0;
            let mut before = 0.0;
            for &(over, upto, _, f_d, _) in &slow.steps {
                let end = upto.min(t);
                if over == upto && upto <= t {
                    faded += (f_d - before) * worth(upto);
                } else if over < end {
                    let share = (end - over) / (upto - over);
                    let mean: f64 = (0..200)
                        .map(|k| worth(over + (end - over) * (f64::from(k) + 0.5) / 200.0))
                        .sum::<f64>()
                        / 200.0;
                    faded += share * (f_d - before) * mean;
                }
                before = f_d;
            }
            assert!(
                (fast.faded_done(t, &worth) - faded).abs() < 2e-3,
                "{t}: {} for {faded}",
                fast.faded_done(t, &worth)
            );
        }
    }
    for (&knot, faded) in fast.knots().iter().zip(fast.faded_done_at_knots(&worth)) {
        assert!((fast.faded_done(knot, &worth) - faded).abs() < 1e-12);
    }
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::with_cases(200) })]

    #[test]
    fn fast_outlook_is_the_slow_one(waits in prop::collection::vec(any_wait(), 1..40)) {
        check_against_slow(&waits);
    }

    #[test]
    fn fast_outlook_is_the_slow_one_in_buckets(waits in prop::collection::vec(bucketed_wait(), 1..40)) {
        check_against_slow(&waits);
    }

    #[test]
    fn uncensored_it_is_the_plain_share(ages in prop::collection::vec(1_u32..60, 1..60)) {
        let waits: Vec<Wait> = ages.iter().map(|&t| Wait::new(f64::from(t), Ending::Done).unwrap()).collect();
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        let (curve, n) = (KaplanMeier::of(&table), ages.len() as f64);
        for t in 0..=61 {
            let left = ages.iter().filter(|&&a| a > t).count() as f64 / n;
            prop_assert!((curve.survival(f64::from(t)) - left).abs() < 1e-13);
            // Greenwood's variance is then the binomial one.
            prop_assert!((curve.variance(f64::from(t)) - left * (1.0 - left) / n).abs() < 1e-13);
            let interval = curve.interval(f64::from(t), 0.9);
            prop_assert!(0.0 <= interval.low && interval.contains(left - 1e-13 * left) && interval.high <= 1.0);
        }
        // And the quantile is the order statistic.
        let mut sorted = ages.clone();
        sorted.sort_unstable();
        for (i, &age) in sorted.iter().enumerate() {
            prop_assert_eq!(curve.quantile((i as f64 + 0.5) / n), Some(f64::from(age)));
        }
    }

    #[test]
    fn counts_may_be_split_joined_and_scaled(waits in prop::collection::vec(any_wait(), 1..30)) {
        let single: Vec<Wait> = waits
            .iter()
            .flat_map(|w| (0..w.count()).map(|_| w.with_count(1).unwrap()))
            .collect();
        let scaled: Vec<Wait> = waits.iter().map(|w| w.with_count(w.count() * 1_000_000_000_000).unwrap()).collect();
        let table = |waits: &[Wait]| LifeTable::of(&Cells::from_waits(waits)).unwrap();
        prop_assert_eq!(table(&waits), table(&single));
        let (plain, large) = (Empirical::of(&table(&waits)), Empirical::of(&table(&scaled)));
        for i in 0..50 {
            let t = f64::from(i) * 0.23;
            prop_assert!((plain.survival(t) - large.survival(t)).abs() < 1e-12);
            prop_assert!((plain.restricted_mean(t) - large.restricted_mean(t)).abs() < 1e-10);
        }
    }

    #[test]
    fn a_wait_may_be_cut_into_windows(
        waits in prop::collection::vec(prop_oneof![any_wait(), bucketed_wait()], 1..30),
        cut in 1_u32..40,
    ) {
        // Everyone still there at `cut` is carried over: seen as waiting, and entering again at the same age.
        let cut = f64::from(cut) / 4.0;
        let whole = LifeTable::of(&Cells::from_waits(&waits));
        let pieces: Vec<Wait> = waits
            .iter()
            .flat_map(|w| {
                let lower = match w.age() {
                    outwait::wait::Age::Exact(t) => t,
                    outwait::wait::Age::Between { over, .. } => over,
                };
                if lower > cut && w.entered() < cut {
                    let before = Wait::new(cut, Ending::Waiting).unwrap().with_count(w.count()).unwrap();
                    let before = if w.entered() > 0.0 { before.with_entered(w.entered()).unwrap() } else { before };
                    vec![before, w.with_entered(cut).unwrap()]
                } else {
                    vec![*w]
                }
            })
            .collect();
        let cells = Cells::from_waits(&pieces);
        prop_assert_eq!(whole.map(|t| t.rows().to_vec()), LifeTable::of(&cells).map(|t| t.rows().to_vec()));
    }

    #[test]
    fn overlapping_bounds_settle_at_the_greatest_likelihood(
        bounds in prop::collection::vec((0_u32..20, 0_u32..8, any::<bool>()), 1..25),
    ) {
        let waits: Vec<Wait> = bounds
            .iter()
            .map(|&(l, width, open)| {
                let l = f64::from(l);
                if open {
                    Wait::new(l + 1.0, Ending::GaveUp).unwrap()
                } else if width == 0 {
                    Wait::new(l + 1.0, Ending::Done).unwrap()
                } else {
                    Wait::between(l, l + f64::from(width), Ending::Done).unwrap()
                }
            })
            .collect();
        let cells = Cells::from_waits(&waits);
        let fast = turnbull(&cells.sample(Cause::Done)).unwrap();
        let mass: f64 = fast.masses.iter().map(|s| s.mass).sum();
        prop_assert!((mass + fast.beyond - 1.0).abs() < 1e-9, "{:?}", fast);
        let slow = slow_self_consistency(&waits);
        // The plain algorithm creeps up from below; the bound says how far ours may lack.
        let n = waits.len() as f64;
        prop_assert!(fast.log_likelihood >= slow - 1e-9 - n * fast.gap, "{} {}", fast.log_likelihood, slow);
        prop_assert!(fast.log_likelihood <= slow + 0.02, "{} {}", fast.log_likelihood, slow);
        let table = LifeTable::of(&cells).unwrap();
        let ended: f64 = table.rows().iter().map(|r| r.ended()).sum();
        let wanted: f64 = cells.totals()[0];
        prop_assert!((ended - wanted).abs() < 1e-6);
    }

    #[test]
    fn every_number_is_a_number(
        waits in prop::collection::vec(
            (prop_oneof![Just(1e-300), 1e-6..1e6, Just(1e10)], 0.0..2.0_f64, 0_usize..4, 1_u64..1_000_000_000_000, any::<bool>()),
            1..30,
        ),
        level in prop_oneof![Just(f64::NAN), -1.0..2.0_f64],
        t in prop_oneof![Just(0.0), Just(1e100), 1e-9..1e9],
    ) {
        let waits: Vec<Wait> = waits
            .into_iter()
            .map(|(age, width, ending, count, wide)| {
                let upto = age * (1.0 + width);
                let wait = if wide && upto > age && upto <= 1e10 {
                    Wait::between(age, upto, Ending::ALL[ending])
                } else {
                    Wait::new(age, Ending::ALL[ending])
                };
                wait.unwrap().with_count(count).unwrap()
            })
            .collect();
        let cells = Cells::from_waits(&waits);
        let table = match LifeTable::of(&cells) {
            Ok(table) => table,
            Err(CurveError::NotSettled { gap, .. }) => { prop_assert!(gap.is_finite()); return Ok(()); }
            // Waits whose watching ended in the first bucket were watched from 0 to 0.
            Err(CurveError::OneBucket { over: 0.0, .. }) if waits.iter().all(|w| matches!(w.ending(), Ending::GaveUp | Ending::Waiting)) => return Ok(()),
            Err(other) => panic!("{other}"),
        };
        let (curve, hazard) = (KaplanMeier::of(&table), NelsonAalen::of(&table));
        let (incidence, mean) = (AalenJohansen::of(&table), RestrictedMean::of(&table));
        let (outlook, smooth) = (Empirical::of(&table), SmoothedHazard::of(&table));
        for t in [t, table.sight(), table.last()] {
            for x in [
                curve.survival(t), curve.variance(t), hazard.cumulative_hazard(t), hazard.variance(t),
                incidence.cumulative_incidence(Cause::Done, t), incidence.variance(Cause::Failed, t),
                mean.restricted_mean(t).value, mean.restricted_mean(t).variance, outlook.restricted_mean(t),
                outlook.faded_done(t, &|_| 1.0), smooth.bandwidth(),
            ] {
                prop_assert!(x >= 0.0 && x.is_finite(), "{x} at {t}");
            }
            for i in [curve.interval(t, level), hazard.interval(t, level), incidence.interval(Cause::Any, t, level)] {
                prop_assert!(0.0 <= i.low && i.low <= i.high && !i.high.is_nan(), "{i:?} at {t}");
            }
            prop_assert!((outlook.survival(t) + outlook.done(t) + outlook.failed(t) - 1.0).abs() < 1e-9);
            if let Some(h) = smooth.at(t) {
                prop_assert!(h.hazard >= 0.0 && h.standard_error >= 0.0 && h.hazard.is_finite(), "{h:?} at {t}");
                let i = h.interval(level);
                prop_assert!(i.low <= i.high, "{i:?}");
            }
            if let Some(e) = mean.residual(t, table.last()) {
                prop_assert!(e.value >= 0.0 && e.variance >= 0.0 && e.interval(level).high <= e.limit);
            }
        }
        if let Ok(top) = TopAges::tenth(&cells.sample(Cause::Done), 2.0) {
            prop_assert!(top.hill().xi > 0.0 && (0.0..=1.0).contains(&top.ended_share()));
            for e in [top.hill_censored(), top.moment(), top.moment_censored()].into_iter().flatten() {
                prop_assert!(e.xi.is_finite() && e.standard_error >= 0.0, "{e:?}");
            }
        }
        let half = waits.len().div_ceil(2);
        let (old, new) = (Cells::from_waits(&waits[..half]), Cells::from_waits(&waits[half..]));
        if let Ok(drift) = Drift::between(&old, &new) {
            prop_assert!((-1.0..=1.0).contains(&drift.gap) && drift.gap_error >= 0.0);
            for test in [&drift.log_rank, &drift.late] {
                prop_assert!(test.chi_squared >= 0.0 && (0.0..=1.0).contains(&test.p_value), "{test:?}");
            }
        }
    }

    #[test]
    fn an_exponential_law_is_recovered(rate in 1e-4..1e4_f64, n in 200_u32..600) {
        // At its own quantiles the error is the step of the sample: 1/(2n).
        let quantile = |p: f64| -(-p).ln_1p() / rate;
        let waits: Vec<Wait> = (0..n)
            .map(|i| Wait::new(quantile((f64::from(i) + 0.5) / f64::from(n)), Ending::Done).unwrap())
            .collect();
        let table = LifeTable::of(&Cells::from_waits(&waits)).unwrap();
        let (curve, hazard) = (KaplanMeier::of(&table), NelsonAalen::of(&table));
        let mean = RestrictedMean::of(&table);
        for p in [0.1, 0.5, 0.9] {
            let t = quantile(p);
            prop_assert!((curve.survival(t) - (1.0 - p)).abs() <= 0.51 / f64::from(n));
            prop_assert!((hazard.cumulative_hazard(t) - rate * t).abs() < 1.0 / (f64::from(n) * (1.0 - p)));
            prop_assert!((mean.restricted_mean(t).value * rate / p - 1.0).abs() < 0.01);
            prop_assert!(curve.interval(t, 0.95).contains(1.0 - p) && hazard.interval(t, 0.95).contains(rate * t));
        }
        // No memory: the remaining wait, far enough from the end, is 1/rate for everyone.
        let limit = table.last();
        for p in [0.1, 0.3] {
            let e = mean.residual(quantile(p), limit).unwrap();
            prop_assert!(e.interval(0.99).contains(1.0 / rate), "{:?} {}", e, 1.0 / rate);
        }
    }

    #[test]
    fn log_rank_does_not_care_for_order(
        a in prop::collection::vec(any_wait(), 1..20),
        b in prop::collection::vec(any_wait(), 1..20),
        c in prop::collection::vec(any_wait(), 1..20),
    ) {
        let groups = [a, b, c].map(|w| Cells::from_waits(&w).sample(Cause::Any));
        for emphasis in [Emphasis::EVEN, Emphasis::LATE] {
            let one = log_rank(&[&groups[0], &groups[1], &groups[2]], emphasis).unwrap();
            let other = log_rank(&[&groups[2], &groups[0], &groups[1]], emphasis).unwrap();
            prop_assert_eq!(one.degrees, other.degrees);
            prop_assert!((one.chi_squared - other.chi_squared).abs() < 1e-7 * (1.0 + one.chi_squared));
            let (seen, due): (f64, f64) =
                one.groups.iter().fold((0.0, 0.0), |s, g| (s.0 + g.observed, s.1 + g.expected));
            prop_assert!((seen - due).abs() < 1e-9 * (1.0 + seen));
        }
    }
}
