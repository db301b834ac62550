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

/// What a command says of a log as JSON.
fn told(arguments: &[&str], log: &str, policy: Option<&str>) -> serde_json::Value {
    let folder = tempfile::tempdir().unwrap();
    let (waits, file) = (folder.path().join("waits.ndjson"), folder.path().join("policy.yaml"));
    std::fs::write(&waits, log).unwrap();
    let mut command = Command::new(env!("CARGO_BIN_EXE_outwait"));
    command.args(arguments).args(["--format", "json"]).arg(&waits).env_remove("OUTWAIT_POLICY");
    if let Some(policy) = policy {
        std::fs::write(&file, policy).unwrap();
        command.arg("--policy").arg(&file);
    }
    let output = command.output().unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    serde_json::from_slice(&output.stdout).unwrap()
}

/// The texts of what is to be minded under a code.
fn texts(minded: &serde_json::Value, code: &str) -> Vec<String> {
    let minded = minded.as_array().unwrap().iter();
    minded.filter(|c| c["code"] == code).map(|c| c["text"].as_str().unwrap().to_owned()).collect()
}

/// A log as it is written when answers come, all times so many times as long.
fn log(mut waits: Vec<(f64, f64, Ending)>, times: f64) -> String {
    waits.sort_by(|a, b| (a.0 + a.1).total_cmp(&(b.0 + b.1)));
    waits.iter().fold(String::new(), |mut log, (asked, age, ending)| {
        let (age, at) = (times * age, 1_796_040_000.0 + times * (asked + age));
        let ending = ending.name();
        writeln!(log, "{{\"stream\":\"probe\",\"elapsed\":{age:.6},\"at\":{at:.6},\"ending\":\"{ending}\"}}")
            .unwrap();
        log
    })
}

fn policy(every: &str) -> String {
    format!(
        "version: 1\nstreams:\n  - match: probe\n    aim: rate\n    pause: {{gave_up: 10ms}}\n    sampled_every: {every}\n"
    )
}

fn cautions(log: &str, policy: Option<&str>) -> Vec<String> {
    texts(&told(&["weigh"], log, policy)["streams"][0]["cautions"], "closed_loop")
}

#[test]
fn the_pattern_is_pointed_out_unless_the_policy_knows() {
    let log = |waits_for_answers| log(asked(waits_for_answers, f64::INFINITY), 1.0);
    let found = cautions(&log(true), None);
    assert!(
        found.len() == 1 && found[0].contains("every 100 ms") && found[0].contains("up to 2"),
        "{found:?}"
    );
    let policy = &policy("100ms");
    assert_eq!(cautions(&log(true), Some(policy)), [""; 0]);
    assert_eq!(cautions(&log(false), None), [""; 0]);
}

/// Six weeks of an hour each (a week is 168 times as long as an hour), so that the sampler asks every 100.8 s: what each rule
/// earns on its log with the key is what it earns on the log of one who does not wait, and without it is not.
#[test]
fn a_replay_earns_as_on_the_log_of_one_who_does_not_wait() {
    let rates = |waits_for_answers, policy: &str| -> Vec<(String, f64)> {
        // An hour stands for six weeks.
        let set = told(&["replay"], &log(asked(waits_for_answers, f64::INFINITY), 1_008.0), Some(policy));
        let stream = &set["streams"][0];
        let left_out = texts(&stream["notes"], "sampler").len();
        assert_eq!(left_out, usize::from(policy.contains("sampled_every")), "{set}");
        let rules = stream["rules"].as_array().unwrap().iter();
        rules
            .filter(|rule| rule["rule"] == "never" || rule["rule"] == "p95")
            .map(|rule| (rule["rule"].as_str().unwrap().to_owned(), rule["rate_per_s"].as_f64().unwrap()))
            .collect()
    };
    let known = policy("100.8s");
    let plain = known.lines().filter(|line| !line.contains("sampled_every")).collect::<Vec<_>>().join("\n");
    let (open, closed, corrected) = (rates(false, &plain), rates(true, &plain), rates(true, &known));
    println!("{open:?} {closed:?} {corrected:?}");
    assert!(open.len() == 2 && corrected.len() == 2);
    let never = |rates: &[(String, f64)]| rates.iter().find(|(rule, _)| rule == "never").unwrap().1;
    assert!((never(&corrected) / never(&open) - 1.0).abs() < 0.1, "{open:?} {corrected:?}");
    assert!((never(&closed) / never(&open) - 1.0).abs() > 0.5, "{open:?} {closed:?}");
}

/// A wait that was put back is nobody's: an audit judges by the corrected curve, adds up the waits that were made, and says so.
#[test]
fn an_audit_adds_up_only_waits_that_were_made() {
    let log = log(asked(true, f64::INFINITY), 1.0);
    let known = policy("100ms");
    let plain = known.lines().filter(|line| !line.contains("sampled_every")).collect::<Vec<_>>().join("\n");
    let audit = |policy: &str| told(&["audit"], &log, Some(policy))["streams"][0].clone();
    let (with, without) = (audit(&known), audit(&plain));
    assert_eq!(with["closed"]["total"]["waits"], without["closed"]["total"]["waits"]);
    assert_eq!(texts(&with["cautions"], "sampled").len(), 1, "{with}");
    assert_eq!(texts(&with["cautions"], "closed_loop"), [""; 0]);
    assert_eq!(texts(&without["cautions"], "closed_loop").len(), 1, "{without}");
    // What is advised is the same as by weighing.
    let advised = &told(&["weigh"], &log, Some(&known))["streams"][0]["advice"]["give_up_after_s"];
    assert_eq!(&with["advice"]["give_up_after_s"], advised);
}
