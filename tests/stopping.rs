//! Optimal give-up times against a truth table computed with 40 digits (`tests/reference/stopping.json`, made by
//! `make_stopping.py` beside it with mpmath, our own computation), and the identities of METHODS.md section 5.

use std::sync::Arc;

use outwait::outlook::Outlook;
use outwait::stopping::{
    Aim, Competing, Fade, Failure, Holding, Kind, Limits, Objective, Odds, Pause, RequestTime, Retry, Worth,
    band, best,
};
use outwait::tail::families::{Gamma, Lognormal, Lomax, Shifted, Weibull, WithNever, all};
use outwait::tail::{Family, Law};
use proptest::prelude::*;
use serde_json::Value;

/// Uniform on `(low, high)`.
struct Uniform {
    low: f64,
    high: f64,
}

impl Law for Uniform {
    fn log_survival(&self, t: f64) -> f64 {
        (1.0 - (t - self.low) / (self.high - self.low)).clamp(0.0, 1.0).ln()
    }
    fn log_density(&self, t: f64) -> f64 {
        if t > self.low && t <= self.high { -(self.high - self.low).ln() } else { f64::NEG_INFINITY }
    }
    fn log_survival_gradient(&self, _: f64, _: &mut [f64]) -> f64 {
        unreachable!("not fitted")
    }
    fn log_density_gradient(&self, _: f64, _: &mut [f64]) -> f64 {
        unreachable!("not fitted")
    }
    fn parameters(&self) -> Vec<f64> {
        vec![self.low, self.high]
    }
    fn mean(&self) -> f64 {
        0.5 * (self.low + self.high)
    }
    fn restricted_mean(&self, t: f64) -> f64 {
        let inside = (t.min(self.high) - self.low).max(0.0);
        t.min(self.low) + inside - inside * inside / (2.0 * (self.high - self.low))
    }
    fn scale(&self) -> f64 {
        self.high
    }
}

/// A share uniform on `(0, high)`, the rest at exactly `at`.
struct HalfUniform {
    share: f64,
    high: f64,
    at: f64,
}

impl Law for HalfUniform {
    fn log_survival(&self, t: f64) -> f64 {
        if t >= self.at { f64::NEG_INFINITY } else { (-self.share * (t / self.high).clamp(0.0, 1.0)).ln_1p() }
    }
    fn log_density(&self, t: f64) -> f64 {
        if t > 0.0 && t <= self.high { (self.share / self.high).ln() } else { f64::NEG_INFINITY }
    }
    fn log_survival_gradient(&self, _: f64, _: &mut [f64]) -> f64 {
        unreachable!("not fitted")
    }
    fn log_density_gradient(&self, _: f64, _: &mut [f64]) -> f64 {
        unreachable!("not fitted")
    }
    fn parameters(&self) -> Vec<f64> {
        vec![self.share, self.high, self.at]
    }
    fn mean(&self) -> f64 {
        self.restricted_mean(self.at)
    }
    fn restricted_mean(&self, t: f64) -> f64 {
        let u = t.min(self.high);
        u - self.share * u * u / (2.0 * self.high) + (1.0 - self.share) * (t.min(self.at) - u).max(0.0)
    }
    fn scale(&self) -> f64 {
        self.high
    }
}

fn number(value: &Value) -> f64 {
    value.as_f64().unwrap_or(0.0)
}

fn law(family: &dyn Family, natural: &[f64]) -> Arc<dyn Law> {
    family.law(&family.free(natural).unwrap()).unwrap().into()
}

fn done_law(spec: &Value) -> (Arc<dyn Law>, Vec<f64>) {
    let name = spec["family"].as_str().unwrap();
    let at = |key: &str| number(&spec["parameters"][key]);
    match name {
        "uniform" => return (Arc::new(Uniform { low: at("low"), high: at("high") }), vec![at("high")]),
        "half_uniform" => {
            let law = HalfUniform { share: at("share"), high: at("high"), at: at("at") };
            return (Arc::new(law), vec![at("high"), at("at")]);
        }
        _ => {}
    }
    let family: &dyn Family = *all().iter().find(|f| f.name() == name).unwrap();
    let mut natural: Vec<f64> = family.parameters().iter().map(|p| at(p)).collect();
    if let Some(never) = spec["never"].as_f64() {
        natural.push(never);
        return (law(&WithNever(family), &natural), vec![]);
    }
    if let Some(shift) = spec["shift"].as_f64() {
        natural.push(shift);
        return (law(&Shifted { inner: family, shift }, &natural), vec![shift]);
    }
    (law(family, &natural), vec![])
}

struct Case {
    id: String,
    outlook: Competing,
    worth: Worth,
    limits: Limits,
    expect: Value,
    failed_rate: f64,
}

fn case(row: &Value) -> Case {
    let (law, knots) = done_law(&row["done"]);
    let failed_rate = number(&row["failed_rate"]);
    let outlook = Competing::new(law, Failure::Rate(failed_rate)).with_knots(knots);
    let worth = &row["worth"];
    let pause = &row["pause"];
    let fades = &worth["fades"];
    let fade = if let Some(half) = fades["half_life"].as_f64() {
        Fade::HalfLife(half)
    } else if let Some(zero) = fades["zero_at"].as_f64() {
        Fade::ZeroAt(zero)
    } else if let Some(k) = fades["hyperbolic"].as_f64() {
        Fade::HalfAt(1.0 / k)
    } else {
        Fade::Stays
    };
    let aim = match row["aim"].as_str().unwrap() {
        "rate" => Aim::Rate,
        "finish" => Aim::Finish,
        "carrying_cost" => Aim::CarryingCost(number(&row["carrying_cost"])),
        _ => Aim::Deadline {
            by: number(&row["deadline"]),
            attempts: u32::try_from(row["attempts"].as_u64().unwrap()).unwrap(),
        },
    };
    Case {
        id: row["id"].as_str().unwrap().into(),
        outlook,
        worth: Worth {
            aim,
            done: number(&worth["done"]),
            failed: number(&worth["failed"]),
            gave_up: number(&worth["gave_up"]),
            attempt_cost: number(&worth["attempt_cost"]),
            fade,
            pause: Pause {
                done: number(&pause["done"]),
                failed: number(&pause["failed"]),
                gave_up: number(&pause["gave_up"]),
            },
            sticky: number(&row["sticky"]),
        },
        limits: Limits::new(number(&row["floor"]), number(&row["ceiling"])).unwrap(),
        expect: row["expect"].clone(),
        failed_rate,
    }
}

fn cases() -> Vec<Case> {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/reference/stopping.json");
    let table: Value = serde_json::from_str(&std::fs::read_to_string(path).unwrap()).unwrap();
    table["cases"].as_array().unwrap().iter().map(case).collect()
}

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
        for (end, (stretch, truth)) in
            stretch.iter().zip(expect["band"].as_array().unwrap()).enumerate().map(|(i, p)| (i, p))
        {
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
