//! Optimal give-up times against a truth table computed with 40 digits (`tests/reference/stopping.json`, made by
//! `make_stopping.py` beside it with mpmath, our own computation), and the identities of METHODS.md section 5.

// What the scene needs is there, or the test stops.
#![allow(clippy::unwrap_used)]

#[path = "support/truth_table.rs"]
mod truth_table;

use std::sync::Arc;

use outwait::curve::Empirical;
use outwait::outlook::Outlook;
use outwait::outlook::{Grid, Sampled};
use outwait::stopping::{
    Aim, Competing, Fade, Failure, FarTail, GridObjective, Holding, Kind, Limits, Look, Objective, Odds,
    Pause, RequestTime, Retry, SecondCopy, TailEffect, TimeCost, Worth, WorthError, band, best,
    copy_or_retry, flips_at,
};
use outwait::tail::Law;
use outwait::tail::families::{Exponential, Gamma, Lognormal, Lomax, Weibull, WithNever};
use outwait::tally::Cells;
use outwait::wait::{Ending, Wait};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;

use truth_table::{HalfUniform, Uniform, cases, law, number};

/// Collects every gap of a table, so that one run shows them all.
#[derive(Default)]
struct Gaps(Vec<String>);

impl Gaps {
    fn compare(&mut self, what: &str, found: f64, truth: f64, relative: f64, absolute: f64) {
        let close = (found - truth).abs() <= absolute + relative * truth.abs();
        if !close {
            self.0.push(format!("{what}: {found} for {truth}, off by {:.1e}", (found - truth) / truth.abs()));
        }
    }

    fn none(self) {
        assert!(self.0.is_empty(), "{} gaps:\n{}", self.0.len(), self.0.join("\n"));
    }
}

#[test]
fn every_case_of_the_truth_table() {
    let mut gaps = Gaps::default();
    let cases = cases();
    assert_eq!(cases.len(), 52);
    for c in &cases {
        let (id, expect) = (&c.id, &c.expect);
        let objective = Objective::new(&c.outlook, &c.worth, &Retry::default(), c.limits).unwrap();
        let found = best(&objective).unwrap();
        let kind = expect["optimum"].as_str().unwrap();
        let tau = number(&expect["tau"]);
        gaps.compare(&format!("{id} objective"), found.value, number(&expect["objective"]), 1e-9, 0.0);
        gaps.compare(&format!("{id} never"), found.never, number(&expect["objective_ceiling"]), 1e-9, 0.0);
        let expected_kind = match kind {
            "inner" => Kind::Inner,
            "kink" => Kind::Kink,
            "floor" => Kind::Floor,
            "ceiling" => Kind::Ceiling,
            _ => Kind::Flat,
        };
        if found.kind != expected_kind {
            gaps.0.push(format!("{id}: {:?} for {kind}", found.kind));
        }
        gaps.compare(&format!("{id} tau"), found.at, tau, 1e-6, 0.0);

        let stretch = band(&objective, found.at, 0.01);
        // Where every time is as good, the stretch is the range; a kink may end it on the jump.
        for (end, (stretch, truth)) in stretch.iter().zip(expect["band"].as_array().unwrap()).enumerate() {
            gaps.compare(&format!("{id} band {end}"), *stretch, number(truth), 1e-6, 0.0);
        }
        let odds = Odds::at(&c.outlook, tau);
        gaps.compare(&format!("{id} S"), odds.gave_up, number(&expect["S"]), 1e-9, 1e-15);
        gaps.compare(&format!("{id} F_d"), odds.done, number(&expect["F_d"]), 1e-9, 0.0);
        gaps.compare(&format!("{id} F_f"), odds.failed, number(&expect["F_f"]), 1e-9, 0.0);
        gaps.compare(&format!("{id} A"), c.outlook.restricted_mean(tau), number(&expect["A"]), 1e-10, 0.0);
        if let (Some(truth), Some((done, failed))) = (expect["h"].as_f64(), c.outlook.hazards(tau)) {
            gaps.compare(&format!("{id} h"), done + failed, truth, 1e-9, 0.0);
        }
        if let (Some(truth), None) = (expect["foc"].as_f64(), objective.deadline()) {
            let price = match c.worth.aim {
                Aim::CarryingCost(cost) => cost,
                _ => found.score,
            };
            let marginal = objective.marginal(tau, price).unwrap();
            let (size, _) = c.outlook.hazards(tau).unwrap();
            gaps.compare(
                &format!("{id} first-order condition"),
                marginal,
                truth,
                1e-6,
                1e-9 * (size + found.score.abs()),
            );
        }
        for point in expect["curve"].as_array().unwrap() {
            let t = number(&point[0]);
            gaps.compare(&format!("{id} at {t}"), objective.value(t), number(&point[1]), 1e-9, 0.0);
        }
        if let Some(values) = expect["value"].as_array() {
            let holding = Holding::new(&objective, &found);
            let size = values.iter().map(|v| number(&v[1]).abs()).fold(0.0, f64::max);
            for point in values {
                let t = number(&point[0]);
                gaps.compare(
                    &format!("{id} V({t})"),
                    holding.at(t).value,
                    number(&point[1]),
                    1e-6,
                    1e-9 * size,
                );
            }
        }
        if let Some(uncapped) = expect["attempts"]["uncapped"].as_f64() {
            let request = Retry::default().request(odds, &c.worth);
            gaps.compare(&format!("{id} attempts"), request.attempts, uncapped, 1e-9, 0.0);
        }
        if let Some(capped) = expect["attempts"]["cap_3"].as_f64() {
            let request = Retry { attempts: Some(3), ..Retry::default() }.request(odds, &c.worth);
            gaps.compare(&format!("{id} attempts of at most 3"), request.attempts, capped, 1e-9, 0.0);
        }
        if let Some(total) = expect["total"].as_object() {
            assert_eq!(c.failed_rate, 0.0);
            let time = RequestTime::new(&c.outlook, &c.worth, &Retry::default(), tau);
            gaps.compare(&format!("{id} p50"), time.quantile(0.5), number(&total["p50"]), 1e-9, 0.0);
            gaps.compare(&format!("{id} p99"), time.quantile(0.99), number(&total["p99"]), 1e-9, 0.0);
        }
        if let Some(schedule) = expect["schedule"].as_array() {
            let deadline = objective.deadline().unwrap();
            let found = deadline.give_up_times();
            if found.len() == schedule.len() {
                for (i, (found, truth)) in found.iter().zip(schedule).enumerate() {
                    gaps.compare(&format!("{id} attempt {i}"), *found, number(truth), 1e-6, 0.0);
                }
            } else {
                gaps.0.push(format!("{id}: schedule {found:?}"));
            }
        }
    }
    gaps.none();
}

/// An outlook whose hazard falls, at least in the end.
fn heavy() -> impl Strategy<Value = Competing> {
    (0..3, 0.0..1.0_f64, 0.0..1.0_f64, prop_oneof![Just(0.0), 0.01..0.3_f64]).prop_map(
        |(which, a, b, failed)| {
            let law = match which {
                0 => law(&Lognormal, &[4.0 * a - 2.0, 0.6 + 1.8 * b]),
                1 => law(&Lomax, &[0.7 + 2.5 * a, 0.1 + 5.0 * b]),
                _ => law(&Weibull, &[0.4 + 0.5 * a, 0.1 + 5.0 * b]),
            };
            Competing::new(law, Failure::Rate(failed))
        },
    )
}

fn prices() -> impl Strategy<Value = Worth> {
    (
        0.01..1.0_f64,
        0.0..0.5_f64,
        0.0..0.5_f64,
        -0.2..0.2_f64,
        0.0..0.1_f64,
        prop_oneof![Just(0.0), 0.0..0.5_f64],
    )
        .prop_map(|(gave_up, done, failed, worth, cost, sticky)| Worth {
            gave_up: worth,
            failed: -worth.abs(),
            attempt_cost: cost,
            pause: Pause { done, failed, gave_up },
            sticky,
            ..Worth::default()
        })
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: 48,
        rng_seed: RngSeed::Fixed(20_250_701),
        failure_persistence: None,
        ..ProptestConfig::default()
    })]

    #[test]
    fn no_age_beats_the_optimum(outlook in heavy(), worth in prices()) {
        let limits = Limits::new(1e-3, 300.0).unwrap();
        let objective = Objective::new(&outlook, &worth, &Retry::default(), limits).unwrap();
        let Ok(found) = best(&objective) else { return Ok(()) };
        if found.kind == Kind::Inner {
            let (done, failed) = outlook.hazards(found.at).unwrap();
            let size = (done + failed) * (1.0 + found.score * 2.0) + found.score;
            let marginal = objective.marginal(found.at, found.score).unwrap();
            prop_assert!(marginal.abs() < 1e-7 * size, "{marginal} of {size}");
        }
        for i in 0..=1500 {
            let t = 1e-3 * 3e5_f64.powf(f64::from(i) / 1500.0);
            prop_assert!(objective.score(t) <= found.score + 1e-9 * found.score.abs(), "{t} beats {found:?}");
        }
    }

    #[test]
    fn the_value_of_holding_on(outlook in heavy(), worth in prices()) {
        let limits = Limits::new(1e-3, 300.0).unwrap();
        let objective = Objective::new(&outlook, &worth, &Retry::default(), limits).unwrap();
        let Ok(found) = best(&objective) else { return Ok(()) };
        let holding = Holding::new(&objective, &found);
        // V(0) = c - w_g' + ρ* d_g'(0).
        let phi = worth.sticky;
        let gave_up = (worth.gave_up - phi * worth.attempt_cost) / (1.0 - phi);
        let start = worth.attempt_cost - gave_up + found.score * worth.pause.gave_up / (1.0 - phi);
        let at_0 = holding.at(0.0);
        if found.kind == Kind::Inner && outlook.survival(found.at) > 1e-6 {
            prop_assert!((at_0.value - start.max(0.0)).abs() < 1e-8 * (1.0 + start.abs()), "{} {start}", at_0.value);
            let just_before = holding.at(found.at * (1.0 - 1e-4));
            prop_assert!(just_before.hold && just_before.look_again == Some(found.at), "{just_before:?} {found:?}");
            let at = holding.at(found.at);
            prop_assert!(at.value < 1e-9 && (!at.hold || at.look_again > Some(found.at)), "{at:?}");
        }
        // Against its definition, by brute force.
        for t in [0.01, 0.3, 2.0, 40.0, 299.0] {
            if outlook.survival(t) < 1e-6 {
                continue;
            }
            let excess = |u: f64| {
                objective.gain(u) - objective.gain(t) - found.score * (objective.time(u) - objective.time(t))
            };
            let most = (0..=800).map(|i| excess(t * (300.0 / t).powf(f64::from(i) / 800.0))).fold(0.0, f64::max);
            let value = holding.at(t).value;
            let size = (1.0 + found.score) / outlook.survival(t);
            prop_assert!(value >= most / outlook.survival(t) - 1e-9 * size, "{t}: {value} {most}");
            prop_assert!(value <= most / outlook.survival(t) + 1e-4 * size, "{t}: {value} {most}");
        }
        prop_assert_eq!(holding.at(300.0).hold, false);
        for [t, v] in holding.curve(60) {
            prop_assert!(v >= 0.0 && v.is_finite(), "{} {}", t, v);
        }
    }

    /// Restarting at τ beats waiting iff e(τ) > E[T] + d_g, and h(τ*) = 1/(m(τ*) + d_g) inside.
    #[test]
    fn restarting_pays_where_the_remaining_wait_is_long(
        which in 0..2, a in 0.0..1.0_f64, pause in 0.01..3.0_f64, p in 0.05..0.98_f64,
    ) {
        let law = if which == 0 { law(&Lomax, &[1.3 + 3.0 * a, 2.0]) } else { law(&Lognormal, &[0.0, 0.3 + 1.5 * a]) };
        let (mean, t) = (law.mean(), law.quantile(p));
        let remaining = law.mean_residual_life(t, f64::INFINITY);
        let outlook = Competing::new(law, Failure::Never);
        let worth = Worth {
            aim: Aim::Finish,
            pause: Pause { gave_up: pause, ..Pause::default() },
            ..Worth::default()
        };
        let objective = Objective::new(&outlook, &worth, &Retry::default(), Limits::new(1e-3, 1e4).unwrap()).unwrap();
        let gap = remaining - mean - pause;
        if gap.abs() > 1e-6 * mean {
            prop_assert_eq!(objective.value(t) < mean, gap > 0.0, "{} {}", objective.value(t), mean);
        }
        let found = best(&objective).unwrap();
        if found.kind == Kind::Inner {
            let hazard = outlook.hazards(found.at).unwrap().0;
            prop_assert!((hazard * (found.value + pause) - 1.0).abs() < 1e-7);
        }
    }

    #[test]
    fn a_rising_hazard_is_waited_out(which in 0..3, a in 1.05..5.0_f64, failed in 0.0..0.5_f64, pause in 0.0..2.0_f64) {
        let law = match which {
            0 => law(&Weibull, &[a, 1.0]),
            1 => law(&Gamma, &[a, 1.0]),
            _ => Arc::new(Uniform { low: 0.0, high: a }),
        };
        let outlook = Competing::new(law, Failure::Rate(failed));
        let worth = Worth { pause: Pause { gave_up: pause, ..Pause::default() }, ..Worth::default() };
        let objective = Objective::new(&outlook, &worth, &Retry::default(), Limits::new(0.01, 8.0).unwrap()).unwrap();
        prop_assert_eq!(best(&objective).unwrap().kind, Kind::Ceiling);
    }

    /// Caps and growing pauses: what the program averages is the chain, attempt by attempt.
    #[test]
    fn retries_that_are_not_plain(
        outlook in heavy(), worth in prices(), cap in 1_u32..6, growth in 1.0..3.0_f64, t in 0.05..20.0_f64,
    ) {
        let retry = Retry { attempts: Some(cap), growth, longest_pause: 3.0, jitter: false };
        let objective = Objective::new(&outlook, &worth, &retry, Limits::new(1e-3, 300.0).unwrap()).unwrap();
        let odds = Odds::at(&outlook, t);
        let (mut free, mut stuck, mut gain, mut time) = (1.0, 0.0, 0.0, 0.0);
        for number in 1..=cap {
            let (fresh, doomed) = (free + (1.0 - worth.sticky) * stuck, worth.sticky * stuck);
            gain += fresh * (odds.done + worth.failed * odds.failed + worth.gave_up * odds.gave_up)
                + doomed * worth.gave_up
                - (fresh + doomed) * worth.attempt_cost;
            let gave_up = fresh * odds.gave_up + doomed;
            time += fresh * (outlook.restricted_mean(t) + worth.pause.done * odds.done)
                + doomed * t
                + gave_up * retry.pause(worth.pause.gave_up, number)
                + fresh * odds.failed * retry.pause(worth.pause.failed, number);
            (free, stuck) = (fresh * odds.failed, gave_up);
        }
        let rate = gain / time;
        prop_assert!((objective.score(t) - rate).abs() < 1e-9 * (1.0 + rate.abs()), "{} {rate}", objective.score(t));
        if let Ok(found) = best(&objective) {
            prop_assert!(found.score >= objective.score(t) - 1e-9 * found.score.abs());
        }
    }

    #[test]
    fn the_grid_says_what_the_curve_says(outlook in heavy(), worth in prices(), aim in 0..4, cap in 1_u32..4) {
        let aim = match aim {
            0 => Aim::Rate,
            1 => Aim::Finish,
            2 => Aim::CarryingCost(0.2),
            _ => Aim::Deadline { by: 6.0, attempts: cap },
        };
        let fade = if cap == 2 { Fade::HalfLife(2.0) } else { Fade::Stays };
        let worth = Worth { aim, fade, ..worth };
        let retry = Retry { attempts: (cap == 3).then_some(3), growth: f64::from(cap), longest_pause: 9.0, jitter: false };
        let grid = Grid::new(0.01, 0.1, 20.0);
        let columns = |f: &dyn Fn(f64) -> f64| grid.ages().iter().map(|&t| f(t)).collect();
        let sampled = Sampled {
            survival: columns(&|t| outlook.survival(t)),
            area: columns(&|t| outlook.restricted_mean(t)),
            done: columns(&|t| outlook.done(t)),
            failed: columns(&|t| outlook.failed(t)),
        };
        let settings = [0.05, 3.3, f64::INFINITY];
        let on_grid = GridObjective::new(&grid, &worth, &retry, &settings).unwrap();
        let objective = Objective::new(&outlook, &worth, &retry, Limits::new(0.1, 20.0).unwrap()).unwrap();
        let mut scores = vec![];
        prop_assert!(on_grid.scores(&sampled, &mut scores));
        prop_assert_eq!(scores.len(), 403);
        let ages = on_grid.ages().iter().copied().chain([0.05, 3.3, 20.0]);
        let size = scores.iter().fold(0.0_f64, |m, s| m.max(s.abs()));
        for (t, score) in ages.zip(scores).step_by(7) {
            let truth = objective.score(t);
            // The grid's deadline has 128 steps: coarse for the little that is left just before it.
            let allowed = if objective.deadline().is_some() { 0.03 } else { 0.005 };
            prop_assert!((score - truth).abs() < allowed * size, "{t}: {score} {truth}");
        }
    }

    #[test]
    fn nothing_is_ever_nan(
        never in 0.0..0.9_f64, sigma in 0.05..4.0_f64, failed in prop_oneof![Just(0.0), 1e-6..10.0_f64],
        gave_up in -100.0..100.0_f64, cost in 0.0..10.0_f64, pause in prop_oneof![Just(0.0), 0.0..1e4_f64],
        sticky in prop_oneof![Just(0.0), 0.0..0.999_f64], floor in prop_oneof![Just(0.0), 1e-9..1.0_f64],
        aim in 0..4, growth in prop_oneof![Just(1.0), 1.0..50.0_f64], cap in prop_oneof![Just(None), (1_u32..9).prop_map(Some)],
        jitter in any::<bool>(),
    ) {
        let law = law(&WithNever(Lognormal), &[0.0, sigma, never.max(1e-5)]);
        let outlook = Competing::new(law, Failure::Rate(failed));
        let aim = match aim {
            0 => Aim::Rate,
            1 => Aim::Finish,
            2 => Aim::CarryingCost(0.01),
            _ => Aim::Deadline { by: 7.0, attempts: cap.unwrap_or(2) },
        };
        let worth = Worth {
            aim, gave_up, attempt_cost: cost, sticky,
            pause: Pause { done: pause, failed: pause, gave_up: pause },
            ..Worth::default()
        };
        let longest_pause = if jitter { 1e3 } else { f64::INFINITY };
        let retry = Retry { attempts: cap, growth, longest_pause, jitter };
        let limits = Limits::new(floor, 1e3).unwrap();
        let Ok(objective) = Objective::new(&outlook, &worth, &retry, limits) else {
            return Ok(());
        };
        for t in [0.0, 1e-12, 0.5, 3.0, 1e3, 1e9, f64::INFINITY] {
            prop_assert!(!objective.score(t).is_nan() && !objective.value(t).is_nan(), "{t}");
        }
        if let Ok(found) = best(&objective) {
            prop_assert!(!found.value.is_nan() && found.at.is_finite(), "{found:?}");
            let stretch = band(&objective, found.at, 0.01);
            prop_assert!(stretch[0] <= found.at && found.at <= stretch[1], "{stretch:?} {found:?}");
            let holding = Holding::new(&objective, &found);
            for t in [0.0, 0.5, 3.0, 1e3, 1e9] {
                prop_assert!(holding.at(t).value >= 0.0, "{t}");
            }
            let total = RequestTime::new(&outlook, &worth, &retry, found.at);
            prop_assert!(total.quantile(0.5) <= total.quantile(0.99), "{} {}", total.quantile(0.5), total.quantile(0.99));
            let tail = FarTail::new(&outlook, &worth, &retry, found.at, 1e3, outlook.final_hazard());
            prop_assert!(!(tail.decay + tail.mean).is_nan() && tail.mean_never > 0.0 && tail.decay >= 0.0, "{tail:?}");
            if let Some(flip) = flips_at(&outlook, &worth, &retry, limits, found.at).unwrap() {
                prop_assert!((0.0..1.0).contains(&flip), "{flip}");
            }
            if let Some(both) = copy_or_retry(&outlook, &worth, &retry, 0.2, floor.max(1e-6), 1e3) {
                prop_assert!(both.copy.p50 <= both.copy.p999 && both.extra_load <= 0.2, "{both:?}");
                prop_assert!(both.retry.is_none_or(|r| r.p50 <= r.p999), "{both:?}");
            }
            if let Some(look) = Look::plan(&worth, found.score, &outlook, 0.5, 5.0) {
                prop_assert!(look.waits >= 1.0 && look.worst_cost_each > 0.0, "{look:?}");
            }
        }
    }
}

/// Common practice, no source: waits uniform on (0, b) are never given up.
#[test]
fn uniform_waits_are_never_given_up() {
    for b in [0.01, 1.0, 3600.0] {
        let outlook = Competing::new(Arc::new(Uniform { low: 0.0, high: b }) as Arc<dyn Law>, Failure::Never);
        for pause in [0.0, b, 10.0 * b] {
            let worth = Worth { pause: Pause { gave_up: pause, ..Pause::default() }, ..Worth::default() };
            let limits = Limits::new(b / 100.0, b).unwrap();
            let objective = Objective::new(&outlook, &worth, &Retry::default(), limits).unwrap();
            assert_eq!(best(&objective).unwrap().kind, Kind::Ceiling);
        }
    }
}

/// Common practice, no source: half of the waits over before 20 s, uniformly, the other half at exactly 90 s, 2 s
/// pause: give up at 20 s.
#[test]
fn half_before_20_s_and_half_at_90_s() {
    let law = HalfUniform { share: 0.5, high: 20.0, at: 90.0 };
    let outlook = Competing::new(Arc::new(law) as Arc<dyn Law>, Failure::Never).with_knots(vec![20.0, 90.0]);
    let worth = Worth { pause: Pause { gave_up: 2.0, ..Pause::default() }, ..Worth::default() };
    let objective =
        Objective::new(&outlook, &worth, &Retry::default(), Limits::new(0.1, 90.0).unwrap()).unwrap();
    let found = best(&objective).unwrap();
    assert_eq!((found.at, found.kind), (20.0, Kind::Kink));
    // Just before the second bulk it is worth holding on again, if one is still there.
    let holding = Holding::new(&objective, &found);
    let at_30 = holding.at(30.0);
    assert!(!at_30.hold && at_30.look_again.is_some_and(|t| t > 30.0 && t < 90.0), "{at_30:?}");
    let again = at_30.look_again.unwrap();
    assert!(!holding.at(again - 0.1).hold && holding.at(again + 0.1).hold);
    assert_eq!(holding.at(89.0).look_again, Some(90.0));
}

/// Is it dead or slow? A lease whose workers die in a never share, and whose early end costs a double.
#[test]
fn a_lease() {
    let at = |never: f64, double: f64| {
        let outlook = Competing::new(law(&WithNever(Lognormal), &[3.0, 0.5, never]), Failure::Never);
        let worth = Worth { gave_up: -double, ..Worth::default() };
        let objective =
            Objective::new(&outlook, &worth, &Retry::default(), Limits::new(1.0, 3600.0).unwrap()).unwrap();
        best(&objective).unwrap().at
    };
    let usual = at(0.02, 1.0);
    assert!(usual > 40.0 && usual < 200.0, "{usual}");
    assert!(at(0.02, 4.0) > usual, "a dearer double is waited for longer");
    assert!(at(0.10, 1.0) < usual, "more dead workers are found sooner");
}

#[test]
fn nothing_to_earn_is_no_cost_of_time() {
    let outlook = Competing::new(law(&Lomax, &[1.5, 1.0]), Failure::Never);
    // A completion earns 1, but most waits are given up and each give-up costs 50.
    let worth = Worth { gave_up: -50.0, ..Worth::default() };
    let objective =
        Objective::new(&outlook, &worth, &Retry::default(), Limits::new(0.1, 2.0).unwrap()).unwrap();
    assert_eq!(best(&objective), Err(WorthError::NoTimeCost { missing: TimeCost::Opportunity }));
    let free = Worth { aim: Aim::CarryingCost(0.0), ..Worth::default() };
    let refused = Objective::new(&outlook, &free, &Retry::default(), Limits::new(0.1, 2.0).unwrap()).err();
    assert_eq!(refused, Some(WorthError::NoTimeCost { missing: TimeCost::Carrying }));
}

/// Kaplan-Meier of a few waits, some failed, some cut off.
fn steps(seed: u64) -> Empirical {
    let mut state = seed;
    let waits: Vec<Wait> = (0..120)
        .map(|_| {
            // SplitMix64.
            state = state.wrapping_add(0x9E37_79B9_7F4A_7C15);
            let mut z = state;
            z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
            z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
            let u = ((z ^ (z >> 31)) >> 11) as f64 / (1_u64 << 53) as f64;
            let ending = match (z >> 3) % 10 {
                0 => Ending::Failed,
                1 => Ending::GaveUp,
                _ => Ending::Done,
            };
            Wait::new((0.05 / (1.0 - u)).min(9.0), ending).unwrap()
        })
        .collect();
    Empirical::new(&Cells::from_waits(&waits)).unwrap()
}

#[test]
fn a_step_curve_is_searched_at_its_endings() {
    let worth = Worth {
        fade: Fade::ZeroAt(6.0),
        failed: -0.2,
        attempt_cost: 0.01,
        pause: Pause { done: 0.01, failed: 0.1, gave_up: 0.05 },
        ..Worth::default()
    };
    for seed in 0..8 {
        let outlook = steps(seed);
        let objective =
            Objective::new(&outlook, &worth, &Retry::default(), Limits::new(0.06, 8.0).unwrap()).unwrap();
        let found = best(&objective).unwrap();
        let rate = |t: f64| {
            let odds = Odds::at(&outlook, t);
            let gain = outlook.faded_done(t, &|u| (1.0 - u / 6.0_f64).max(0.0)) - 0.2 * odds.failed - 0.01;
            gain / (outlook.restricted_mean(t) + 0.01 * odds.done + 0.1 * odds.failed + 0.05 * odds.gave_up)
        };
        let candidates =
            outlook.knots().iter().copied().filter(|&t| (0.06..=8.0).contains(&t)).chain([0.06, 8.0]);
        let top = candidates.map(rate).fold(f64::NEG_INFINITY, f64::max);
        assert!((found.score / top - 1.0).abs() < 1e-12, "{seed}: {} {top}", found.score);
        assert!((rate(found.at) / top - 1.0).abs() < 1e-12);
        // Within the band nothing is worse than the slack, just outside something is.
        let [low, high] = band(&objective, found.at, 0.05);
        let need = 0.95 * top;
        for i in 0..=500 {
            let t = low + (high - low) * f64::from(i) / 500.0;
            assert!(rate(t) >= need - 1e-9 * top, "{seed}: {t} in {low} {high}");
        }
        assert!(low <= 0.06 || rate(low * (1.0 - 1e-6)) < need, "{seed}: {low}");
        assert!(high >= 8.0 || rate(high * (1.0 + 1e-6)) < need, "{seed}: {high}");
        // Holding on, by its definition.
        let holding = Holding::new(&objective, &found);
        for t in [0.0, 0.055, 0.1, 0.4, 1.0, 5.0].into_iter().filter(|&t| outlook.survival(t) > 0.0) {
            let excess = |u: f64| {
                objective.gain(u) - objective.gain(t) - found.score * (objective.time(u) - objective.time(t))
            };
            let later = outlook.knots().iter().copied().filter(|&u| u > t && u <= 8.0);
            let most = later.map(excess).fold(0.0, f64::max) / outlook.survival(t);
            let hold = holding.at(t);
            assert!((hold.value - most).abs() < 1e-9, "{seed} {t}: {} {most}", hold.value);
        }
    }
}

#[test]
fn a_deadline_on_a_step_curve() {
    for seed in 0..4 {
        let outlook = steps(seed);
        let worth = Worth {
            aim: Aim::Deadline { by: 2.0, attempts: 2 },
            pause: Pause { done: 0.0, failed: 0.1, gave_up: 0.05 },
            ..Worth::default()
        };
        let objective =
            Objective::new(&outlook, &worth, &Retry::default(), Limits::new(0.0, 2.0).unwrap()).unwrap();
        let knots = outlook.knots();
        let chance = |t: f64| {
            let mut before = 0.0;
            let mut rescued = 0.0;
            for &u in knots.iter().filter(|&&u| u <= t) {
                rescued += (outlook.failed(u) - before) * outlook.done(2.0 - u - 0.1);
                before = outlook.failed(u);
            }
            outlook.done(t) + outlook.survival(t) * outlook.done(2.0 - t - 0.05) + rescued
        };
        let candidates = knots.iter().flat_map(|&u| [u, 2.0 - 0.05 - u]).filter(|t| (0.0..=2.0).contains(t));
        let top = candidates.chain([2.0]).map(chance).fold(0.0, f64::max);
        let found = best(&objective).unwrap();
        assert!((found.score - top).abs() < 1e-9, "{seed}: {} {top}", found.score);
        assert!((objective.score(0.3) - chance(0.3)).abs() < 1e-12);
    }
}

#[test]
fn a_deadline_in_parts() {
    let outlook = Competing::new(law(&Lognormal, &[-0.5, 1.4]), Failure::Rate(0.1));
    let solve = |attempts: u32, sticky: f64| {
        let worth = Worth {
            aim: Aim::Deadline { by: 4.0, attempts },
            pause: Pause { done: 0.0, failed: 0.1, gave_up: 0.2 },
            sticky,
            ..Worth::default()
        };
        let limits = Limits::new(0.0, 4.0).unwrap();
        let retry = Retry { growth: 2.0, ..Retry::default() };
        (Objective::new(&outlook, &worth, &retry, limits).unwrap(), worth)
    };
    let (one, _) = solve(1, 0.0);
    assert!((one.score(4.0) - outlook.done(4.0)).abs() < 1e-12);
    let (three, _) = solve(3, 0.0);
    let deadline = three.deadline().unwrap();
    let found = best(&three).unwrap();
    assert!((three.score(found.at) - found.score).abs() < 1e-9);
    assert_eq!(deadline.next(4.0, 3, false).give_up_after, deadline.give_up_times()[0]);
    // More attempts never hurt; sticky ones help less; no first attempt beats the best.
    let mut last = 0.0;
    for attempts in 1..=6 {
        let (objective, _) = solve(attempts, 0.0);
        let now = best(&objective).unwrap().score;
        assert!(now >= last - 1e-9, "{attempts}: {now} {last}");
        last = now;
    }
    let sticky = best(&solve(3, 0.3).0).unwrap().score;
    assert!(sticky < found.score && sticky > outlook.done(4.0), "{sticky}");
    for i in 1..80 {
        let t = 0.05 * f64::from(i);
        assert!(three.score(t) <= found.score + 1e-9, "{t}");
    }
    // Holding on to a young first attempt is worth it, to one past its time it is not.
    let holding = Holding::new(&three, &found);
    assert!(holding.at(0.5 * found.at).hold && !holding.at(1.02 * found.at).hold);
    let (value, until) = deadline.holding_on(0.5 * found.at, 4.0 - 0.5 * found.at, 2);
    assert!(value > 0.0 && (until / found.at - 1.0).abs() < 0.01, "{until} {}", found.at);
}

#[test]
fn a_load_ceiling_moves_the_advice() {
    let outlook = Competing::new(law(&Lomax, &[1.2, 1.0]), Failure::Never);
    let worth = Worth { pause: Pause { gave_up: 0.05, ..Pause::default() }, ..Worth::default() };
    let retry = Retry { attempts: Some(3), ..Retry::default() };
    let free = Objective::new(&outlook, &worth, &retry, Limits::new(0.01, 100.0).unwrap()).unwrap();
    let free = best(&free).unwrap();
    let attempts = |t: f64| retry.request(Odds::at(&outlook, t), &worth).attempts;
    assert!(attempts(free.at) > 1.2);
    let least = retry.least_within_load(&outlook, &worth, 0.01, 100.0, 1.2).unwrap();
    assert!((attempts(least) - 1.2).abs() < 1e-7 && attempts(least) <= 1.2 && least > free.at);
    let bound = Objective::new(&outlook, &worth, &retry, Limits::new(least, 100.0).unwrap()).unwrap();
    let bound = best(&bound).unwrap();
    assert_eq!((bound.at, bound.kind), (least, Kind::Floor));
    assert!((retry.request(Odds::at(&outlook, least), &worth).retries() - 0.2).abs() < 1e-7);
    assert_eq!(retry.least_within_load(&outlook, &worth, 0.01, 0.1, 1.2), None);
    // On a step curve: from an ending on.
    let steps = steps(1);
    let least = retry.least_within_load(&steps, &worth, 0.01, 8.0, 1.5).unwrap();
    assert!(steps.knots().contains(&least));
}

/// The lattice of failures and drawn pauses against the exact course without them.
#[test]
fn the_total_time_on_the_lattice_and_exactly() {
    let law = law(&Lognormal, &[0.0, 1.0]);
    let exact = Competing::new(law.clone(), Failure::Never);
    let nearly = Competing::new(law, Failure::Rate(1e-9));
    let worth =
        Worth { pause: Pause { gave_up: 0.3, failed: 0.1, done: 0.0 }, sticky: 0.2, ..Worth::default() };
    for attempts in [None, Some(1), Some(2), Some(4)] {
        let retry =
            Retry { attempts, growth: if attempts == Some(4) { 2.0 } else { 1.0 }, ..Retry::default() };
        let (a, b) =
            (RequestTime::new(&exact, &worth, &retry, 1.5), RequestTime::new(&nearly, &worth, &retry, 1.5));
        assert!((a.done_share() - b.done_share()).abs() < 1e-7);
        for q in [0.1, 0.5, 0.9, 0.95, 0.99] {
            let (x, y) = (a.quantile(q), b.quantile(q));
            assert!((x - y).abs() < 0.004 * x.max(1.5), "{attempts:?} {q}: {x} {y}");
        }
        for t in [0.2, 1.4, 1.6, 2.5, 4.0, 7.7] {
            assert!(
                (a.survival(t) - b.survival(t)).abs() < 2e-3,
                "{attempts:?} {t}: {} {}",
                a.survival(t),
                b.survival(t)
            );
        }
    }
}

#[test]
fn an_exponential_hangs_on_nothing() {
    // Memoryless: without pauses the total time is the law itself, whatever the timer.
    let outlook = Competing::new(law(&Exponential, &[0.5]), Failure::Never);
    let total = RequestTime::new(&outlook, &Worth::default(), &Retry::default(), 0.7);
    for q in [0.01_f64, 0.5, 0.99, 0.9999] {
        assert!((total.quantile(q) / (-2.0 * (-q).ln_1p()) - 1.0).abs() < 1e-10, "{q}");
    }
}

/// A timer can shorten the mean and yet make very long totals more frequent, and the reverse (Eliazar & Reuveni 2021).
#[test]
fn mean_and_far_tail_can_part() {
    let pause = |d: f64| Worth { pause: Pause { gave_up: d, ..Pause::default() }, ..Worth::default() };
    let tail = |outlook: &Competing, worth: &Worth, t: f64, ceiling: f64| {
        FarTail::new(outlook, worth, &Retry::default(), t, ceiling, outlook.final_hazard())
    };
    // Half at exactly 90 s: never longer without a timer, without bound with one.
    let bounded = HalfUniform { share: 0.5, high: 20.0, at: 90.0 };
    let bounded =
        Competing::new(Arc::new(bounded) as Arc<dyn Law>, Failure::Never).with_knots(vec![20.0, 90.0]);
    let found = tail(&bounded, &pause(2.0), 20.0, 90.0);
    assert!(found.shorter_but_longer_tailed(), "{found:?}");
    // (15 + 2/2)/0.5 against 0.5*10 + 0.5*90; H/(τ+d) = ln 2/22.
    assert!((found.mean - 32.0).abs() < 1e-9 && (found.mean_never - 50.0).abs() < 1e-9);
    assert!((found.decay - std::f64::consts::LN_2 / 22.0).abs() < 1e-12);
    // A heavy law is thinned by any timer.
    let heavy = Competing::new(law(&Lomax, &[1.5, 2.0]), Failure::Never);
    assert_eq!(tail(&heavy, &pause(0.5), 1.9, 1e9).effect, TailEffect::Thinned);
    // Memoryless: the same without a pause, longer with one.
    let flat = Competing::new(law(&Exponential, &[2.0]), Failure::Never);
    assert_eq!(tail(&flat, &pause(0.0), 0.7, 1e3).effect, TailEffect::Same);
    assert_eq!(tail(&flat, &pause(0.1), 0.7, 1e3).effect, TailEffect::Lengthened);
    // With failures that cost nothing the chain of attempts only stretches the completions: two exponentials.
    let failing = Competing::new(law(&Exponential, &[2.0]), Failure::Rate(0.5));
    let found = tail(&failing, &pause(0.0), 0.7, 1e3);
    assert!((found.decay - 2.0).abs() < 1e-5 && (found.mean - 0.5).abs() < 1e-9, "{found:?}");
}

/// The copy at the 95th percentile adds 5% (Dean & Barroso 2013), and beats the retry that adds as much.
#[test]
fn a_second_copy_beside_a_retry() {
    let outlook = Competing::new(law(&Lognormal, &[-3.0, 1.2]), Failure::Never);
    let worth = Worth { pause: Pause { gave_up: 0.01, ..Pause::default() }, ..Worth::default() };
    let once = Retry { attempts: Some(2), ..Retry::default() };
    let found = copy_or_retry(&outlook, &worth, &once, 0.05, 1e-3, 100.0).unwrap();
    let p95 = outlook.law().quantile(0.95);
    assert!((found.start / p95 - 1.0).abs() < 1e-9 && (found.extra_load - 0.05).abs() < 1e-12);
    // With one retry the same share is tried again, at the same age.
    assert!((found.retry_after.unwrap() / p95 - 1.0).abs() < 1e-6);
    let retry = found.retry.unwrap();
    assert!((found.copy.p50 / retry.p50 - 1.0).abs() < 1e-9);
    assert!(found.copy.p99 < retry.p99 && found.copy.p999 < retry.p999, "{found:?}");
    // S_2(t) = S(t) S(t-h).
    let copy = SecondCopy::new(&outlook, found.start);
    let s = |t: f64| outlook.survival(t);
    assert!((copy.not_done(0.9) / (s(0.9) * s(0.9 - found.start)) - 1.0).abs() < 1e-12);
    assert!((copy.not_done(found.copy.p999) - 0.001).abs() < 1e-12);
    // An earlier copy shortens every quantile and costs more.
    let sooner = SecondCopy::within_load(&outlook, 0.2, 100.0).unwrap();
    assert!(sooner.start() < found.start && sooner.points(100.0).p99 < found.copy.p99);
    assert!(SecondCopy::within_load(&outlook, 0.05, 0.1).is_none());
}
