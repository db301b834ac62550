//! `replay` against a direct count, against known truth under censoring, against RFC 6298, and on bad input.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/command.rs"]
mod command;

use std::fmt::Write;
use std::fs;

use command::run;
use outwait::policy::{self, Policy};
use outwait::replay::{ADVICE, IN_FORCE, Log, ReplaySet, Roll, RuleReplay, SCHEMA, StreamReplay};
use outwait::stopping::RetransmissionTimer;
use outwait::wait::{Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use serde_json::Value;
use tempfile::TempDir;

const DAY: f64 = 86_400.0;
/// A Monday; nothing depends on it.
const START: f64 = 20_000.0 * DAY;
const PAUSE: f64 = 0.05;

const POLICY: &str = "
version: 1
streams:
  - match: '*'
    aim: rate
    worth: {done: 1.0}
    pause: {gave_up: 50ms}
    now: 1s
    retry: {sticky: 0.0}
    guard: {ceiling: 10s, window: 70d}
";

fn policy(text: &str) -> Policy {
    policy::parse_bytes(text.as_bytes(), "policy").unwrap()
}

/// A slow and a fast exponential.
fn age(random: &mut Xoshiro256PlusPlus) -> f64 {
    let mean = if random.random::<f64>() < 0.8 { 0.1 } else { 3.0 };
    (-mean * (1.0 - random.random::<f64>()).ln()).max(1e-9)
}

/// What a give-up time earns in truth.
fn true_rate(t: f64) -> f64 {
    let part = |mean: f64| (-(-t / mean).exp_m1(), mean * -(-t / mean).exp_m1());
    let ((fast, fast_time), (slow, slow_time)) = (part(0.1), part(3.0));
    let done = 0.8 * fast + 0.2 * slow;
    done / (0.8 * fast_time + 0.2 * slow_time + PAUSE * (1.0 - done))
}

/// `(at, age)` over `weeks` weeks, in order.
fn waits(weeks: u32, each: u32, seed: u64) -> Vec<(f64, f64)> {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    let n = weeks * each;
    let step = f64::from(weeks) * 7.0 * DAY / f64::from(n);
    (0..n).map(|i| (START + step * (f64::from(i) + 0.5), age(&mut random))).collect()
}

fn log(waits: impl IntoIterator<Item = Wait>) -> Log {
    let mut log = Log::default();
    for wait in waits {
        log.add("desk", &wait).unwrap();
    }
    log
}

fn done(&(at, age): &(f64, f64)) -> Wait {
    Wait::new(age, Ending::Done).unwrap().with_at(at).unwrap()
}

fn replay(log: &Log, text: &str) -> StreamReplay {
    let policy = policy(text);
    let roll = Roll { policy: Some(&policy), newest: None, seed: 1 };
    finite(&roll.all(log));
    roll.stream(log, "desk")
}

/// Every number is one, and every interval holds its value.
fn finite(set: &ReplaySet) {
    let json = serde_json::to_string(set).unwrap();
    assert_eq!(serde_json::from_str::<ReplaySet>(&json).unwrap(), *set, "no number is lost to JSON");
    for rule in set.streams.iter().flat_map(|s| &s.rules) {
        let holds = |value: Option<f64>, interval: Option<[f64; 2]>| match (value, interval) {
            (Some(v), Some([low, high])) => low <= v && v <= high,
            (None, Some([low, high])) => low <= high,
            _ => true,
        };
        assert!(holds(rule.rate_per_s, rule.interval_per_s), "{rule:?}");
        assert!(holds(rule.advice_ahead_per_s, rule.advice_ahead_interval_per_s), "{rule:?}");
        assert!((0.0..=1.0).contains(&rule.hidden_share) && rule.spent_s >= 0.0, "{rule:?}");
    }
}

fn rule<'a>(stream: &'a StreamReplay, name: &str) -> &'a RuleReplay {
    stream.rules.iter().find(|r| r.rule == name).unwrap_or_else(|| panic!("no {name} in {stream:?}"))
}

fn close(a: f64, b: f64, share: f64) -> bool {
    (a / b - 1.0).abs() <= share
}

/// Waits, done, and seconds, counted one by one.
#[derive(Default)]
struct Count {
    done: f64,
    time: f64,
}

impl Count {
    fn attempt(&mut self, age: f64, give_up_after: f64) {
        if age <= give_up_after {
            self.done += 1.0;
            self.time += age;
        } else {
            self.time += give_up_after + PAUSE;
        }
    }
}

#[test]
fn on_waits_seen_to_their_end_it_is_a_direct_count() {
    let data = waits(5, 2_000, 7);
    let stream = replay(&log(data.iter().map(done)), POLICY);
    assert_eq!((stream.by.as_str(), stream.periods.len()), ("week", 4));
    assert!(stream.periods.iter().all(|p| p.advised && p.waits == 2_000), "{:?}", stream.periods);
    assert_eq!(
        stream.periods.iter().map(|p| p.learnt_from).collect::<Vec<_>>(),
        [2_000, 4_000, 6_000, 8_000]
    );
    let week = |at: f64| ((at - START) / (7.0 * DAY)) as usize;
    for r in stream.rules.iter().filter(|r| r.rule != "RFC 6298") {
        let mut count = Count::default();
        for (at, age) in data.iter().filter(|(at, _)| week(*at) > 0) {
            count.attempt(*age, r.give_up_after_s[week(*at) - 1].unwrap_or(10.0));
        }
        let rate = r.rate_per_s.unwrap_or_else(|| panic!("{r:?}"));
        assert!(close(rate, count.done / count.time, 1e-9), "{}: {rate} {}", r.rule, count.done / count.time);
        assert!(close(r.done_share, count.done / 8_000.0, 1e-9), "{r:?}");
        assert_eq!(r.hidden_share, 0.0);
    }
    // The times of the rules are those of the waits before.
    let mut before: Vec<f64> = data.iter().filter(|(at, _)| week(*at) < 4).map(|(_, age)| *age).collect();
    before.sort_by(f64::total_cmp);
    let p95 = rule(&stream, "p95").give_up_after_s[3].unwrap();
    assert!(close(p95, before[(0.95 * 8_000.0) as usize - 1], 5e-3), "{p95}");
    let mean = before.iter().sum::<f64>() / 8_000.0;
    assert!(close(rule(&stream, "3 x mean").give_up_after_s[3].unwrap(), 3.0 * mean, 0.02));
    assert_eq!(rule(&stream, IN_FORCE).give_up_after_s, [Some(1.0); 4]);
    assert_eq!(rule(&stream, "never").give_up_after_s, [None; 4]);
    // In truth an early time earns most; ours found it.
    assert!(stream.finding.starts_with("the advice earned most"), "{}", stream.finding);
    assert!(rule(&stream, IN_FORCE).advice_ahead_interval_per_s.unwrap()[0] > 0.0);
}

/// RFC 6298 (Paxson, Allman, Chu & Sargent 2011), sections 2.2, 2.3 and 5.5, wait by wait, by its own recurrences.
#[test]
fn rfc_6298_wait_by_wait() {
    let data = waits(3, 1_500, 11);
    let stream = replay(&log(data.iter().map(done)), POLICY);
    let (mut smoothed, mut timeout): (Option<(f64, f64)>, f64) = (None, 1.0);
    let mut timer = RetransmissionTimer::new(0.0).with_bounds(0.0, 1e10);
    let mut count = Count::default();
    for (at, age) in &data {
        if *at >= START + 7.0 * DAY {
            count.attempt(*age, timeout);
        }
        if *age > timeout {
            timeout *= 2.0;
            timer.back_off();
        } else {
            let (srtt, rttvar) = match smoothed {
                None => (*age, age / 2.0),
                Some((srtt, rttvar)) => {
                    (0.875 * srtt + 0.125 * age, 0.75 * rttvar + 0.25 * (srtt - age).abs())
                }
            };
            smoothed = Some((srtt, rttvar));
            timeout = srtt + 4.0 * rttvar;
            timer.observe(*age);
        }
        assert!(close(timer.timeout(), timeout, 1e-12));
    }
    let r = rule(&stream, "RFC 6298");
    assert!(close(r.rate_per_s.unwrap(), count.done / count.time, 1e-9), "{r:?} {}", count.done / count.time);
    assert!(r.give_up_after_s.is_empty() && r.hidden_share == 0.0);
}

/// Each wait is cut off at a time of its own, half of them before 0.5 s. The weights must bring back what would have been
/// earned without that; a count of what is left must not.
#[test]
fn censoring_is_weighed_out() {
    let data = waits(5, 12_000, 5);
    let mut random = Xoshiro256PlusPlus::seed_from_u64(99);
    let mut naive = Count::default();
    let cut: Vec<Wait> = data
        .iter()
        .map(|(at, age)| {
            let cut = if random.random::<f64>() < 0.5 { 0.5 * random.random::<f64>() + 1e-3 } else { 20.0 };
            if *at >= START + 7.0 * DAY && *age <= cut {
                naive.attempt(*age, 1.0);
            }
            let (seen, ending) = if *age <= cut { (*age, Ending::Done) } else { (cut, Ending::GaveUp) };
            Wait::new(seen, ending).unwrap().with_at(*at).unwrap()
        })
        .collect();
    let stream = replay(&log(cut), POLICY);
    for name in [IN_FORCE, "never"] {
        let r = rule(&stream, name);
        let truth = true_rate(r.give_up_after_s[0].unwrap_or(10.0));
        let rate = r.rate_per_s.unwrap();
        assert!(close(rate, truth, 0.02), "{name}: {rate} {truth}");
        let [low, high] = r.interval_per_s.unwrap();
        assert!(low * 0.98 < truth && truth < high * 1.02 && high - low < 0.1 * truth, "{r:?} {truth}");
    }
    assert!(!close(naive.done / naive.time, true_rate(1.0), 0.1), "leaving them out is wrong by far");
    // Ours loses next to nothing against the best there is.
    let best = (1..1000).map(|i| true_rate(f64::from(i) * 0.01)).fold(0.0, f64::max);
    assert!(rule(&stream, ADVICE).rate_per_s.unwrap() > 0.97 * best);
}

#[test]
fn what_a_timeout_hid_is_said_and_bounded() {
    let cut = waits(4, 2_000, 3).into_iter().map(|(at, age)| {
        let (seen, ending) = if age <= 1.0 { (age, Ending::Done) } else { (1.0, Ending::GaveUp) };
        Wait::new(seen, ending).unwrap().with_at(at).unwrap()
    });
    let stream = replay(&log(cut), POLICY);
    let never = rule(&stream, "never");
    assert!(never.rate_per_s.is_none() && never.hidden_share > 0.1, "{never:?}");
    let [worst, best] = never.interval_per_s.unwrap();
    assert!(worst < true_rate(10.0) && true_rate(10.0) < best, "{worst} {best} {}", true_rate(10.0));
    let now = rule(&stream, IN_FORCE);
    assert!(close(now.rate_per_s.unwrap(), true_rate(1.0), 0.1) && now.hidden_share == 0.0);
    assert!(stream.finding.contains("was not seen"), "{}", stream.finding);
}

#[test]
fn another_rule_that_wins_is_named() {
    // Waits turn slow after the first week: what was learnt cuts too early, and never giving up wins.
    let turned = waits(2, 3_000, 13).into_iter().map(|(at, age)| {
        let late = at >= START + 7.0 * DAY;
        done(&(at, if late { 1.5 + 0.01 * age } else { age }))
    });
    let stream = replay(&log(turned), POLICY);
    let never = rule(&stream, "never").rate_per_s.unwrap();
    assert!(never > rule(&stream, ADVICE).rate_per_s.unwrap());
    assert!(
        stream.finding.contains("the advice") && !stream.finding.starts_with("the advice"),
        "{}",
        stream.finding
    );
}

#[test]
fn aims_besides_the_rate() {
    let data = log(waits(4, 1_000, 17).iter().map(done));
    let finish = "version: 1\nstreams: [{match: '*', aim: finish, pause: {gave_up: 50ms}, now: 1s, retry: {sticky: 0.0}}]";
    let stream = replay(&data, finish);
    // Least time until done is the most done a second: the same as the rate of a completion worth 1.
    assert!(close(rule(&stream, IN_FORCE).rate_per_s.unwrap(), true_rate(1.0), 0.1));
    let cost = "version: 1\nstreams: [{match: '*', aim: carrying_cost, carrying_cost: 0.2/s, worth: {done: 1}, now: 1s, \
                retry: {sticky: 0.0}}]";
    let stream = replay(&data, cost);
    let now = rule(&stream, IN_FORCE);
    assert!(close(now.rate_per_s.unwrap(), now.done_share - 0.2 * now.spent_s, 1e-9), "{now:?}");
    let deadline = "version: 1\nstreams: [{match: '*', aim: deadline, deadline: 2s, now: 1s, retry: {attempts: 2, sticky: 0.0}}]";
    let stream = replay(&data, deadline);
    assert!(stream.rules.iter().all(|r| r.rule != "RFC 6298"));
    let now = rule(&stream, IN_FORCE).rate_per_s.unwrap();
    // Two attempts of 1 s each: 1 - S(1)², in truth.
    let left = 0.8 * (-10f64).exp() + 0.2 * (-1.0f64 / 3.0).exp();
    assert!(close(now, 1.0 - left * left, 0.02), "{now}");
    assert!(stream.notes.iter().any(|n| n.code == "deadline"));
    let none = replay(&data, "version: 1\nstreams: [{match: '*', now: 1s}]");
    assert!(none.rules.is_empty() && none.finding.contains("nothing can be earned"), "{}", none.finding);
}

#[test]
fn without_times_parts_take_the_place_of_weeks() {
    let data = waits(5, 2_000, 7);
    let bare = log(data.iter().map(|w| Wait::new(w.1, Ending::Done).unwrap()));
    let stream = replay(&bare, POLICY);
    assert_eq!(stream.by, "part");
    assert!(stream.periods.len() >= 3 && stream.periods.iter().all(|p| p.from.is_none() && p.waits > 1_000));
    assert!(stream.notes.iter().any(|n| n.code == "no_times"));
    let now = rule(&stream, IN_FORCE).rate_per_s.unwrap();
    assert!(close(now, true_rate(1.0), 0.05), "{now}");
}

#[test]
fn odd_data_are_told_and_survived() {
    let has = |stream: &StreamReplay, code: &str| stream.notes.iter().any(|n| n.code == code);
    let data = waits(6, 500, 21);
    // A week without data.
    let gap = |&&(at, _): &&(f64, f64)| !(START + 14.0 * DAY..START + 21.0 * DAY).contains(&at);
    let stream = replay(&log(data.iter().filter(gap).map(done)), POLICY);
    assert!(has(&stream, "weeks_without_data") && stream.periods.len() == 4, "{:?}", stream.notes);
    // A stream that vanished: others go on.
    let mut both = log(data.iter().filter(|(at, _)| *at < START + 21.0 * DAY).map(done));
    data.iter().for_each(|w| both.add("other", &done(w)).unwrap());
    let stream = replay(&both, POLICY);
    assert!(has(&stream, "vanished") && stream.periods.len() == 2, "{:?}", stream.notes);
    // Only open waits.
    let open = data.iter().map(|(at, age)| Wait::new(*age, Ending::Waiting).unwrap().with_at(*at).unwrap());
    let stream = replay(&log(open), POLICY);
    assert!(stream.rules.is_empty() && !stream.finding.is_empty() && has(&stream, "periods_left_out"));
    // A wait from the future.
    let future = data.iter().map(done).chain([done(&(START + 4_000.0 * DAY, 0.1))]);
    let stream = replay(&log(future), POLICY);
    assert!(has(&stream, "lonely_end"), "{:?}", stream.notes);
    assert!(close(rule(&stream, IN_FORCE).rate_per_s.unwrap(), true_rate(1.0), 0.1));
    // Times that run backwards.
    let stream = replay(&log(data.iter().rev().map(done)), POLICY);
    assert!(has(&stream, "times_run_backwards") && stream.periods.len() == 5);
    // One week only, and nothing at all.
    let stream = replay(&log(data.iter().filter(|(at, _)| *at < START + 5.0 * DAY).map(done)), POLICY);
    assert!(stream.rules.is_empty() && stream.finding.contains("one week"), "{}", stream.finding);
    assert!(replay(&Log::default(), POLICY).rules.is_empty());
    // Few waits a week: no advice, ours stays with the time in force.
    let stream = replay(&log(waits(4, 20, 1).iter().map(done)), POLICY);
    assert!(has(&stream, "little_evidence"));
    assert_eq!(rule(&stream, ADVICE).rate_per_s, rule(&stream, IN_FORCE).rate_per_s);
    // Buckets, late entries, long waits, failures and counts, mixed.
    let mixed = data.iter().enumerate().map(|(i, (at, age))| {
        let wait = match i % 5 {
            0 => Wait::between(0.1 * (age / 0.1).floor(), 0.1 * (age / 0.1).floor() + 0.1, Ending::Done)
                .unwrap(),
            1 => Wait::new(age + 1.0, Ending::Done).unwrap().with_entered(0.9).unwrap(),
            2 => Wait::new(3.0 * DAY + age, Ending::Failed).unwrap(),
            3 => Wait::between(5.0, f64::INFINITY, Ending::Done).unwrap().with_count(3).unwrap(),
            _ => Wait::new(*age, Ending::Done).unwrap().with_count(1_000_000).unwrap(),
        };
        wait.with_at(*at).unwrap()
    });
    assert!(!replay(&log(mixed), POLICY).rules.is_empty());
    // Every wait watched only from late on: nobody was seen to begin.
    let late = data.iter().map(|(at, age)| {
        Wait::new(5.0 + age, Ending::Done).unwrap().with_entered(4.9).unwrap().with_at(*at).unwrap()
    });
    assert!(!replay(&log(late), POLICY).rules.is_empty());
    // Nothing but failures: nothing to earn.
    let failed = data.iter().map(|(at, age)| Wait::new(*age, Ending::Failed).unwrap().with_at(*at).unwrap());
    assert_eq!(replay(&log(failed), POLICY).finding, "no rule earned anything");
}

#[test]
fn the_same_seed_gives_the_same_numbers() {
    let data = log(waits(4, 1_000, 2).iter().map(done));
    let policy = policy(POLICY);
    let with = |seed| Roll { policy: Some(&policy), newest: None, seed }.all(&data);
    assert_eq!(with(1), with(1));
    assert_ne!(with(1), with(2));
}

#[test]
fn the_demo_on_the_command_line() {
    let folder = TempDir::new().unwrap();
    assert_eq!(run(folder.path(), &["demo", "demo"]).0, 0);
    let replay = |more: &[&str]| {
        let first = ["replay", "demo/waits.ndjson", "--policy", "demo/policy.yaml"];
        run(folder.path(), &[&first[..], more].concat())
    };
    let (code, text, told) = replay(&["--pictures", "pictures"]);
    assert_eq!((code, told.as_str()), (0, ""));
    assert!(text.starts_with("7 of 7 streams replayed"), "{text}");
    let pictures = fs::read_dir(folder.path().join("pictures")).unwrap().count();
    assert_eq!(pictures, 8);
    let (_, json, _) = replay(&["--format", "json"]);
    let set: ReplaySet = serde_json::from_str(&json).unwrap();
    assert_eq!((set.schema.as_str(), set.streams.len()), (SCHEMA, 7));
    finite(&set);
    // In the catalogue's law the best time earns several times what 800 ms does; so it did on waits not seen.
    let lookup = set.streams.iter().find(|s| s.stream == "catalogue.lookup").unwrap();
    let ahead = rule(lookup, ADVICE).rate_per_s.unwrap() / rule(lookup, IN_FORCE).rate_per_s.unwrap();
    assert!(ahead > 3.0, "{ahead}");
    let (_, yaml, _) = replay(&["--format", "yaml"]);
    assert_eq!(serde_yaml::from_str::<ReplaySet>(&yaml).unwrap(), set);
    let (_, table, _) = replay(&["--format", "csv"]);
    let mut reader = csv::Reader::from_reader(table.as_bytes());
    let columns = reader.headers().unwrap().len();
    let rows: Vec<csv::StringRecord> = reader.records().map(Result::unwrap).collect();
    assert_eq!(rows.len(), set.streams.iter().map(|s| s.rules.len()).sum::<usize>());
    assert!(rows.iter().all(|row| row.len() == columns));
    assert!(replay(&["--format", "json"]).1 == json, "the same bytes");
}

#[test]
fn usage_and_bad_input() {
    let folder = TempDir::new().unwrap();
    let mut lines = String::new();
    for (at, age) in waits(3, 100, 1) {
        writeln!(lines, r#"{{"stream":"desk","at":{at},"elapsed":{age}}}"#).unwrap();
    }
    fs::write(folder.path().join("good.ndjson"), &lines).unwrap();
    fs::write(folder.path().join("bad.ndjson"), lines.clone() + "{\"stream\":\"desk\"}\n").unwrap();
    let first: String = lines.lines().take(50).map(|line| format!("{line}\n")).collect();
    fs::write(folder.path().join("short.ndjson"), first).unwrap();
    let (code, text, _) = run(folder.path(), &["replay", "good.ndjson"]);
    assert!(code == 0 && text.contains("assumed:"), "{text}");
    assert_eq!(run(folder.path(), &["replay", "bad.ndjson"]).0, 3);
    assert_eq!(run(folder.path(), &["replay", "bad.ndjson", "--bad-lines", "1"]).0, 0);
    let (code, text, _) = run(folder.path(), &["replay", "short.ndjson", "--format", "json"]);
    let set: Value = serde_json::from_str(&text).unwrap();
    assert!(code == 4 && set["streams"][0]["rules"] == Value::Array(vec![]), "{text}");
    let (code, _, told) = run(folder.path(), &["replay", "good.ndjson", "--threads", "2"]);
    assert!(code == 2 && told.contains("order"), "{told}");
    // Only replay has a table.
    assert_eq!(run(folder.path(), &["weigh", "good.ndjson", "--format", "csv"]).0, 2);
}
