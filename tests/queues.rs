//! Queues against outside truth: a bank's calls against reference curves, Little's law on a job log against a count of its own,
//! Erlang's formulas against a simulation, and fitted patience against the law it was drawn from.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

mod support;

#[path = "support/command.rs"]
mod command;

use std::collections::VecDeque;
use std::path::Path;

use outwait::audit::AuditSet;
use outwait::audit::queue::{ErlangA, ErlangC, TwoCurves, fit_patience};
use outwait::tally::{Cause, Cells};
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use support::{Row, Zeros, close};

const BANK: &str = "bank_calls_1999_feb_first_half";

/// The product-limit curve by its definition: `event` ends, everything else is censored; events first among equals.
fn product_limit(rows: &[Row], event: Ending) -> Vec<(f64, f64)> {
    let mut ages: Vec<(f64, bool)> = rows.iter().map(|r| (r.elapsed, r.ending == event)).collect();
    ages.sort_by(|a, b| a.0.total_cmp(&b.0));
    let (mut at_risk, mut survival, mut curve, mut i) = (ages.len() as f64, 1.0, Vec::new(), 0);
    while i < ages.len() {
        let t = ages[i].0;
        let here = ages[i..].iter().take_while(|a| a.0 == t);
        let (n, d) = here.fold((0, 0.0), |(n, d), a| (n + 1, d + f64::from(u8::from(a.1))));
        survival *= 1.0 - d / at_risk;
        at_risk -= n as f64;
        curve.push((t, survival));
        i += n;
    }
    curve
}

// ---- two curves ----

#[test]
fn offered_wait_and_patience_of_a_banks_calls() {
    let (Some(set), Some(expected)) = (support::set(BANK), support::expected(BANK)) else { return };
    let curves = TwoCurves::of(&set.cells(None, Zeros::Drop)).unwrap();
    // The offered wait: lifelines' curve of `done`, in the reference.
    let at = expected["kaplan_meier"]["at"].as_array().unwrap();
    assert!(at.len() > 5);
    for point in at {
        let (t, s) = (point["t"].as_f64().unwrap(), point["survival"].as_f64().unwrap());
        assert!(close(curves.offered.survival(t), s, 1e-12), "{t}");
    }
    for (p, t) in expected["kaplan_meier"]["quantiles_of_T"].as_object().unwrap() {
        assert_eq!(curves.offered.quantile(p.parse().unwrap()), t.as_f64(), "{p}");
    }
    // Patience: the same with the endings exchanged, by the definition.
    for (t, s) in product_limit(&set.rows, Ending::GaveUp) {
        assert!(close(curves.patience.survival(t), s, 1e-10), "{t}");
    }
    // What came of them by an age, without censoring, is a plain count.
    let n = set.rows.len() as f64;
    for t in [10.0, 60.0, 200.0, 500.0] {
        let by = |e: Ending| set.rows.iter().filter(|r| r.ending == e && r.elapsed <= t).count() as f64 / n;
        assert!(close(curves.outcomes.cumulative_incidence(Cause::Done, t), by(Ending::Done), 1e-10));
        assert!(close(curves.outcomes.cumulative_incidence(Cause::Failed, t), by(Ending::GaveUp), 1e-10));
    }
}

fn run(folder: &Path, arguments: &[&str]) -> (i32, String, String) {
    command::run(folder, &[&["audit"], arguments].concat())
}

#[test]
fn the_command_tells_of_a_banks_queue() {
    let Some(path) = support::reference_path("data", &format!("{BANK}.csv")) else { return };
    let folder = tempfile::tempdir().unwrap();
    std::fs::copy(path, folder.path().join("calls.csv")).unwrap();
    let arguments = ["calls.csv", "--as", "bank.call", "--service-time", "3m", "--format", "json"];
    let (code, out, err) = run(folder.path(), &arguments);
    assert_eq!((code, err.as_str()), (0, ""), "{out}");
    let set: AuditSet = serde_json::from_str(&out).unwrap();
    let queue = set.streams[0].queue.as_ref().unwrap();
    assert_eq!((queue.served, queue.abandoned), (6_986.0, 1_868.0));
    assert_eq!((queue.offered.p50_s, queue.offered.p90_s), (Some(57.0), Some(202.0)));
    assert!(queue.by_age.iter().all(|a| (a.waiting + a.served + a.abandoned - 1.0).abs() < 1e-9));
    assert!((queue.by_age.last().unwrap().abandoned - 0.211).abs() < 0.01);
    // Exponential patience is all time waited over those who left: 63.7 s over a share of 0.211.
    let fit = queue.patience_fit.as_ref().unwrap();
    let rows = support::set(BANK).unwrap().rows;
    let mean = rows.iter().map(|r| r.elapsed).sum::<f64>() / 1_868.0;
    assert!((fit.exponential_mean_s / mean - 1.0).abs() < 0.01, "{} {mean}", fit.exponential_mean_s);
    // Nearly 9,000 calls tell the exponential from others.
    assert!(fit.family != "exponential" && fit.ahead_by > 10.0, "{fit:?}");
    let sizing = queue.sizing.as_ref().unwrap();
    assert!(sizing.least_a.unwrap() <= sizing.least_c.unwrap());
    assert_eq!(sizing.assumptions.len(), 4);
    // In text as well.
    let (_, text, _) = run(folder.path(), &["calls.csv", "--as", "bank.call", "--service-time", "3m"]);
    for words in ["Patience", "Complete", "Sizing", "Erlang C: nobody ever leaves", "will leave yet"] {
        assert!(text.contains(words), "{words}: {text}");
    }
    // A queue elsewhere seen a tenth longer than the records say: a tenth of them is missing.
    let law = queue.little.unwrap();
    let longer = format!("{}", law.by_count * 1.1);
    let (_, out, _) = run(folder.path(), &[&arguments[..], &["--queue-length", &longer]].concat());
    let set: AuditSet = serde_json::from_str(&out).unwrap();
    let missing = set.streams[0].queue.as_ref().unwrap().little.unwrap().missing.unwrap();
    assert!((missing / 885.4 - 1.0).abs() < 0.02, "{missing}");
}

#[test]
fn a_timers_give_ups_are_no_queue() {
    let folder = tempfile::tempdir().unwrap();
    let rows: String = (1..=500)
        .map(|i| {
            if i % 5 == 0 { "a,30,gave_up\n".to_owned() } else { format!("a,{},done\n", f64::from(i) * 0.06) }
        })
        .collect();
    std::fs::write(folder.path().join("w.csv"), "stream,elapsed,ending\n".to_owned() + &rows).unwrap();
    let (_, out, _) = run(folder.path(), &["w.csv", "--format", "json"]);
    let set: AuditSet = serde_json::from_str(&out).unwrap();
    assert_eq!(set.streams[0].queue, None);
    assert!(set.streams[0].rule.unwrap().is_timer());
}

// ---- Little's law ----

/// Arrivals and departures of a job log's queue, counted one by one: time-averaged number waiting from the first to the last
/// departure, and the number of departures.
fn counted_queue(log: &str, drop_every: Option<usize>) -> (f64, usize) {
    let mut steps: Vec<(f64, f64)> = Vec::new();
    let jobs = log.lines().filter(|l| !l.trim_start().starts_with(';') && !l.trim().is_empty());
    for (i, line) in jobs.enumerate() {
        let field: Vec<f64> = line.split_whitespace().map(|f| f.parse().unwrap()).collect();
        // The log's waits of 0 s say only that they were shorter than one: half a second.
        let (submit, wait) = (field[1], if field[2] == 0.0 { 0.5 } else { field[2] });
        if drop_every.is_none_or(|n| i % n != 0) {
            let end = if field[2] == 0.0 { submit } else { submit + wait };
            steps.extend([(end - wait, 1.0), (end, -1.0)]);
        }
    }
    steps.sort_by(|a, b| a.0.total_cmp(&b.0));
    let departures: Vec<f64> = steps.iter().filter(|s| s.1 < 0.0).map(|s| s.0).collect();
    let (from, to) = (departures[0], departures[departures.len() - 1]);
    let (mut waiting, mut area, mut now) = (0.0, 0.0, f64::NEG_INFINITY);
    for (time, change) in steps {
        let stretch = time.clamp(from, to) - now.clamp(from, to);
        area += waiting * stretch.max(0.0);
        waiting += change;
        now = time;
    }
    (area / (to - from), departures.len())
}

#[test]
fn littles_law_on_a_job_log() {
    let Some(path) = support::reference_path("data", "hpc2n_2002_first_jobs.swf") else { return };
    let log = std::fs::read_to_string(&path).unwrap();
    let folder = tempfile::tempdir().unwrap();
    let audit = |text: &str, more: &[&str]| {
        std::fs::write(folder.path().join("jobs.swf"), text).unwrap();
        let arguments =
            [&["jobs.swf", "--as", "cluster.queue", "--format", "json", "--policy", "p.yaml"], more].concat();
        // The whole log in one window.
        let policy = "version: 1\nstreams: [{match: '*', kind: job, aim: rate, pause: {gave_up: 60s}, guard: {window: 400d}}]\n";
        std::fs::write(folder.path().join("p.yaml"), policy).unwrap();
        let (code, out, err) = run(folder.path(), &arguments);
        assert_eq!(code, 0, "{err}");
        serde_json::from_str::<AuditSet>(&out).unwrap().streams[0].queue.as_ref().unwrap().little.unwrap()
    };
    let (length, departures) = counted_queue(&log, None);
    let law = audit(&log, &[]);
    assert_eq!((law.rate_per_s * law.window_s).round() as usize, departures);
    assert!(close(law.by_count, length, 1e-6), "{} {length}", law.by_count);
    // λW and L differ only by what reaches over the edges of the window.
    assert!((law.by_law / length - 1.0).abs() < 0.05, "{} {length}", law.by_law);
    assert_eq!(law.missing, None);
    // One record in ten is lost; the scheduler's own gauge of the queue length tells how many.
    let mut i = 0;
    let kept: Vec<&str> = log
        .lines()
        .filter(|l| {
            let job = !l.trim_start().starts_with(';') && !l.trim().is_empty();
            i += usize::from(job);
            !(job && (i - 1) % 10 == 0)
        })
        .collect();
    let law = audit(&kept.join("\n"), &["--queue-length", &length.to_string()]);
    let (short, kept) = counted_queue(&log, Some(10));
    assert!(close(law.by_count, short, 1e-6));
    let missing = law.missing.unwrap();
    let truly = (departures - kept) as f64;
    // As good as the lost ones are like the others.
    assert!((missing / truly - 1.0).abs() < 0.25, "{missing} of {truly}");
}

#[test]
fn open_waits_left_out_are_missed() {
    let folder = tempfile::tempdir().unwrap();
    // One caller a second, each waiting 60 s to 140 s, evenly; leaving 1 in 10: 100 wait at a time.
    let mut random = Xoshiro256PlusPlus::seed_from_u64(5);
    let mut closed = String::from("stream,at,elapsed,ending\n");
    let mut open = String::new();
    let (begin, end) = (1_795_996_800.0, 1_795_996_800.0 + 20_000.0);
    for i in 0..20_000 {
        let (start, age) = (begin + f64::from(i), 60.0 + 80.0 * random.random::<f64>());
        let ending = if i % 10 == 0 { "gave_up" } else { "done" };
        if start + age < end {
            closed += &format!("q,{},{age},{ending}\n", start + age);
        } else {
            open += &format!("q,{end},{},waiting\n", (end - start).max(0.1));
        }
    }
    let law = |text: &str| {
        std::fs::write(folder.path().join("w.csv"), text).unwrap();
        let (_, out, _) = run(folder.path(), &["w.csv", "--format", "json"]);
        serde_json::from_str::<AuditSet>(&out).unwrap().streams[0].queue.as_ref().unwrap().little.unwrap()
    };
    let whole = law(&(closed.clone() + &open));
    assert!(whole.open_missing.is_none() && (95..=105).contains(&whole.open), "{whole:?}");
    assert!((whole.by_count - 100.0).abs() < 1.0, "{whole:?}");
    let missing = law(&closed).open_missing.unwrap();
    assert!((missing - 100.0).abs() < 2.0, "{missing}");
}

// ---- Erlang ----

/// Shares of those who came: waited, abandoned, served within `goal`; and the mean wait of all.
fn simulate(
    servers: usize,
    arrivals: f64,
    service: f64,
    patience: Option<f64>,
    goal: f64,
    seed: u64,
) -> [f64; 4] {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    let mut exponential = |mean: f64| -mean * (1.0 - random.random::<f64>()).ln();
    // When each server is free; those who wait in the order of arrival are served by the one free first.
    let mut free: VecDeque<f64> = vec![0.0; servers].into();
    let (mut now, warm, n) = (0.0, 20_000, 420_000);
    let mut sums = [0.0; 4];
    for i in 0..n {
        now += exponential(1.0 / arrivals);
        let offered = (free[0] - now).max(0.0);
        let stays = patience.map_or(f64::INFINITY, &mut exponential);
        let served = offered <= stays;
        if served {
            free.pop_front();
            let end = now + offered + exponential(service);
            let place = free.partition_point(|&t| t <= end);
            free.insert(place, end);
        }
        if i >= warm {
            let wait = offered.min(stays);
            let counts = [offered > 0.0, !served, served && wait <= goal];
            sums.iter_mut().zip(counts).for_each(|(sum, c)| *sum += f64::from(u8::from(c)));
            sums[3] += wait;
        }
    }
    sums.map(|sum| sum / f64::from(n - warm))
}

#[test]
fn erlang_a_and_c_against_a_simulation() {
    for (servers, arrivals, service, patience) in
        [(10u32, 0.05, 180.0, 120.0), (30, 0.2, 160.0, 300.0), (4, 0.03, 180.0, 60.0)]
    {
        let a = ErlangA::new(servers, arrivals, service, patience).unwrap();
        let truth = simulate(servers as usize, arrivals, service, Some(patience), 20.0, 11);
        let s = a.service();
        for (theory, seen) in [s.waits, s.abandons, a.within(20.0)].into_iter().zip(truth) {
            assert!((theory - seen).abs() < 0.012, "{servers}: {theory} {seen}");
        }
        assert!((s.mean_wait / truth[3] - 1.0).abs() < 0.05, "{servers}: {} {}", s.mean_wait, truth[3]);
    }
    let c = ErlangC::new(10, 0.045, 180.0).unwrap();
    let truth = simulate(10, 0.045, 180.0, None, 20.0, 12);
    assert!((c.service().waits - truth[0]).abs() < 0.015, "{} {}", c.service().waits, truth[0]);
    assert!((c.within(20.0) - truth[2]).abs() < 0.015);
    assert!((c.service().mean_wait / truth[3] - 1.0).abs() < 0.06, "{} {}", c.service().mean_wait, truth[3]);
}

// ---- patience ----

/// Waits of a queue with a drawn patience and an exponential offered wait.
fn queue(patience: impl Fn(f64) -> f64, offered: f64, n: u32) -> Cells {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(3);
    let waits: Vec<Wait> = (0..n)
        .map(|_| {
            let (p, o) = (patience(random.random()), -offered * (1.0 - random.random::<f64>()).ln());
            Wait::new(p.min(o).max(1e-6), if o <= p { Ending::Done } else { Ending::GaveUp }).unwrap()
        })
        .collect();
    Cells::from_waits(&waits)
}

#[test]
fn fitted_patience_beside_the_exponential() {
    let exponential = fit_patience(&queue(|u| -200.0 * (1.0 - u).ln(), 100.0, 6_000)).unwrap();
    assert!((exponential.exponential_mean_s / 200.0 - 1.0).abs() < 0.06, "{exponential:?}");
    assert!(exponential.ahead_by < 6.0 && exponential.exponential_gap < 0.05, "{exponential:?}");
    assert!((exponential.left_early[0] - 0.221).abs() < 0.03, "{exponential:?}");
    // Weibull of shape 2: hardly anybody leaves early, which the exponential gets wrong.
    let patient = fit_patience(&queue(|u| 200.0 * (-(1.0 - u).ln()).sqrt(), 100.0, 6_000)).unwrap();
    assert!(patient.family != "exponential" && patient.ahead_by > 50.0, "{patient:?}");
    let truly = 1.0 - (-(0.25 * patient.exponential_mean_s / 200.0).powi(2)).exp();
    assert!((patient.left_early[0] / truly - 1.0).abs() < 0.1, "{patient:?} {truly}");
    assert!(patient.left_early[0] < 0.75 * patient.left_early[1], "{patient:?}");
    // Both curves from the same waits are the laws they were drawn from.
    let curves = TwoCurves::of(&queue(|u| 200.0 * (-(1.0 - u).ln()).sqrt(), 100.0, 6_000)).unwrap();
    for t in [30.0_f64, 100.0, 200.0] {
        assert!((curves.offered.survival(t) - (-t / 100.0).exp()).abs() < 0.03);
        assert!((curves.patience.survival(t) - (-(t / 200.0).powi(2)).exp()).abs() < 0.05);
    }
}
