//! A sampler that waits for each answer before it asks again misses what it did not ask during stalls. The policy's
//! `sampled_every` puts it back, so that the curve is that of one who asks without waiting; and without the key the log's
//! pattern is pointed out.
#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

use std::fmt::Write as _;

use assert_cmd::Command;
use outwait::advise::{Case, study};
use outwait::policy::Entry;
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};

const EVERY: f64 = 0.1;

/// A service that answers within 4 to 11 ms, but stands still for the first 2 s of every 30 s.
fn answered(asked: f64, i: usize) -> f64 {
    let quick = 0.004 + 0.0001 * (i * 37 % 71) as f64;
    let into = asked % 30.0;
    asked + if into < 2.0 { 2.0 - into + quick } else { quick }
}

/// Waits as (when asked, how long, how it ended), one hour, each given up at `timeout`.
fn asked(waits_for_answers: bool, timeout: f64) -> Vec<(f64, f64, Ending)> {
    let (mut waits, mut next) = (Vec::new(), 0.03);
    while next < 3_600.0 {
        let (age, ending) = match answered(next, waits.len()) - next {
            age if age < timeout => (age, Ending::Done),
            _ => (timeout, Ending::GaveUp),
        };
        waits.push((next, age, ending));
        next = if waits_for_answers { (next + EVERY).max(next + age) } else { next + EVERY };
    }
    waits
}

fn survival(waits: &[(f64, f64, Ending)], every: Option<f64>, ages: &[f64]) -> Vec<f64> {
    let mut tally = Tally::default();
    for &(_, age, ending) in waits {
        tally.add(&Wait::new(age, ending).unwrap());
    }
    let mut entry = Entry::without_policy();
    entry.sampled_every = every;
    let study = study(&Case::new("s", &tally), &entry, 1);
    // The evidence is what was asked, whatever is put back.
    assert_eq!(study.advice().evidence.waits, waits.len() as u64);
    study.survival(ages).unwrap().points.iter().map(|[_, share]| *share).collect()
}

#[test]
fn the_corrected_curve_is_that_of_one_who_does_not_wait() {
    let ages = [0.05, 0.25, 0.55, 0.95, 1.45, 1.75];
    let open = survival(&asked(false, f64::INFINITY), None, &ages);
    let closed = survival(&asked(true, f64::INFINITY), None, &ages);
    let corrected = survival(&asked(true, f64::INFINITY), Some(EVERY), &ages);
    for ((open, closed), corrected) in open.iter().zip(&closed).zip(&corrected) {
        assert!((corrected / open - 1.0).abs() < 0.06, "{open} {corrected}");
        assert!(closed / open < 0.5, "{open} {closed}");
    }
    // With a timeout (six intervals): those put back are still waiting at it, and no more is claimed.
    let ages = [0.05, 0.25, 0.45];
    let open = survival(&asked(false, 0.6), None, &ages);
    let corrected = survival(&asked(true, 0.6), Some(EVERY), &ages);
    for (open, corrected) in open.iter().zip(&corrected) {
        assert!((corrected / open - 1.0).abs() < 0.1, "{open} {corrected}");
    }
}

fn cautions(log: &str, policy: Option<&str>) -> Vec<String> {
    let folder = tempfile::tempdir().unwrap();
    let (waits, file) = (folder.path().join("waits.ndjson"), folder.path().join("policy.yaml"));
    std::fs::write(&waits, log).unwrap();
    let mut command = Command::new(env!("CARGO_BIN_EXE_outwait"));
    command.args(["weigh", "--format", "json"]).arg(&waits).env_remove("OUTWAIT_POLICY");
    if let Some(policy) = policy {
        std::fs::write(&file, policy).unwrap();
        command.arg("--policy").arg(&file);
    }
    let output = command.output().unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let set: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    let cautions = set["streams"][0]["cautions"].as_array().unwrap();
    cautions
        .iter()
        .filter(|c| c["code"] == "closed_loop")
        .map(|c| c["text"].as_str().unwrap().to_owned())
        .collect()
}

#[test]
fn the_pattern_is_pointed_out_unless_the_policy_knows() {
    let log = |waits_for_answers| {
        let mut waits = asked(waits_for_answers, f64::INFINITY);
        // A log is written as answers come.
        waits.sort_by(|a, b| (a.0 + a.1).total_cmp(&(b.0 + b.1)));
        waits.iter().fold(String::new(), |mut log, (asked, age, _)| {
            let at = 1_796_040_000.0 + asked + age;
            writeln!(log, "{{\"stream\":\"probe\",\"elapsed\":{age:.6},\"at\":{at:.6}}}").unwrap();
            log
        })
    };
    let found = cautions(&log(true), None);
    assert!(
        found.len() == 1 && found[0].contains("every 100 ms") && found[0].contains("up to 2"),
        "{found:?}"
    );
    let policy = "version: 1\nstreams:\n  - match: probe\n    aim: rate\n    pause: {gave_up: 10ms}\n    sampled_every: 100ms\n";
    assert_eq!(cautions(&log(true), Some(policy)), [""; 0]);
    assert_eq!(cautions(&log(false), None), [""; 0]);
}
