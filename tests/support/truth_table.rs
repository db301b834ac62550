//! The cases of `tests/reference/stopping.json` (made by `make_stopping.py` beside it with mpmath, our own computation)
//! as outlooks, price lists and limits of the library.

// Each test binary compiles its own copy and uses a part of it; a bad reference file should stop the test.
#![allow(dead_code, clippy::unwrap_used, clippy::panic)]

use std::sync::Arc;

use outwait::stopping::{Aim, Competing, Fade, Failure, Limits, Pause, Worth};
use outwait::tail::families::{Shifted, WithNever, all};
use outwait::tail::{Family, Law};
use serde_json::Value;

/// Uniform on `(low, high)`.
pub(crate) struct Uniform {
    pub(crate) low: f64,
    pub(crate) high: f64,
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
pub(crate) struct HalfUniform {
    pub(crate) share: f64,
    pub(crate) high: f64,
    pub(crate) at: f64,
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

pub(crate) fn number(value: &Value) -> f64 {
    value.as_f64().unwrap_or(0.0)
}

pub(crate) fn law(family: &dyn Family, natural: &[f64]) -> Arc<dyn Law> {
    family.law(&family.free(natural).unwrap()).unwrap().into()
}

pub(crate) fn done_law(spec: &Value) -> (Arc<dyn Law>, Vec<f64>) {
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

pub(crate) struct Case {
    pub(crate) id: String,
    pub(crate) outlook: Competing,
    pub(crate) worth: Worth,
    pub(crate) limits: Limits,
    pub(crate) expect: Value,
    pub(crate) failed_rate: f64,
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

pub(crate) fn cases() -> Vec<Case> {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/reference/stopping.json");
    let table: Value = serde_json::from_str(&std::fs::read_to_string(path).unwrap()).unwrap();
    table["cases"].as_array().unwrap().iter().map(case).collect()
}
