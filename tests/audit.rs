//! Closed waits held against the advice by direct count, open waits judged as the theory says, and the command that does it:
//! any order, any number of threads, any input.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/command.rs"]
mod command;

use std::fmt::Write;
use std::fs;
use std::path::Path;

use outwait::advise::{Lenders, Terms};
use outwait::audit::{Audit, AuditSet, Cut, Question, RuleFrom, Subject, Unit, Verdict};
use outwait::policy::{self, Policy};
use outwait::tally::Book;
use outwait::wait::{Ending, Wait};
use proptest::prelude::*;
use serde_json::Value;

// ---- aids ----

/// Monday 2026-11-30 00:00 UTC.
const MONDAY: f64 = 1_795_996_800.0;
const HOUR: f64 = 3_600.0;
const DAY: f64 = 86_400.0;

fn wait(age: f64, ending: Ending) -> Wait {
    Wait::new(age, ending).unwrap()
}

fn policy(entry: &str) -> Policy {
    policy::parse(&format!("version: 1\nstreams:\n  - {{match: '*', {entry}}}\n"), "p.yaml").unwrap()
}

/// Audits waits of one stream as the command does.
fn audit(waits: &[Wait], policy: &Policy, question: Question) -> AuditSet {
    let mut book = Book::default();
    for wait in waits {
        book.add("s", wait).unwrap();
    }
    let newest = waits.iter().filter_map(Wait::at).reduce(f64::max);
    let terms = Terms { policy: Some(policy), newest: newest.map(|t| (t / DAY) as i32), seed: 1, past: None };
    let subject = Subject::new(&terms, "s", book.stream("s").unwrap(), None, &Lenders::default());
    let audit = Audit::new(vec![subject], question, newest);
    let mut sums = audit.sums();
    for (i, wait) in waits.iter().enumerate() {
        sums.add("s", wait, Some(&format!("w{i}")));
    }
    audit.report(sums, Vec::new(), None)
}

const RATE: &str =
    "kind: reply, aim: rate, pause: {gave_up: 2s}, guard: {floor: 1s, ceiling: 200s, evidence: 100}";

/// Half of the waits end evenly before 20 s, the other half at 90 s; of those still open at `cut`, one in `every` is given up
/// there.
fn courier(cut: f64, every: usize) -> Vec<Wait> {
    (0..4_000)
        .map(|i| {
            let age = if i % 2 == 0 { (i as f64 + 1.0) / 200.0 } else { 90.0 };
            if age > cut && i / 2 % every == 0 { wait(cut, Ending::GaveUp) } else { wait(age, Ending::Done) }
        })
        .collect()
}

// ---- closed waits ----

#[test]
fn over_waits_are_a_direct_count() {
    let waits = courier(60.0, 3);
    let set = audit(&waits, &policy(RATE), Question::default());
    let stream = &set.streams[0];
    let at = stream.advice.give_up_after_s.unwrap();
    assert!((19.0..24.0).contains(&at), "{at}");
    let band = stream.advice.band_s.unwrap();
    let age = |w: &Wait| if let outwait::wait::Age::Exact(t) = w.age() { t } else { panic!() };
    let past: Vec<f64> = waits.iter().map(age).filter(|&t| t > at.max(band[1])).map(|t| t - at).collect();
    let over = stream.closed.total.over;
    assert_eq!((over.waits, stream.closed.total.waits), (past.len() as u64, 4_000));
    let hours = past.iter().sum::<f64>() / HOUR;
    assert!((over.hours - hours).abs() < 1e-9 * hours, "{} {hours}", over.hours);
    // The price: half done in a mean of 15 s with 2 s after each give-up is 0.5/16 a second.
    let price = stream.advice.worth_per_hour.unwrap() / HOUR;
    assert!((price / (0.5 / 16.0) - 1.0).abs() < 0.03, "{price}");
    assert!((over.cost.unwrap() / (hours * HOUR * price) - 1.0).abs() < 1e-9);
    // Each that was done at 90 s brought a worth of 1, and spared the pause after a give-up.
    let late = waits.iter().filter(|w| age(w) == 90.0).count() as f64;
    let back = over.won_back.unwrap();
    assert!((back / (late * (1.0 + 2.0 * price)) - 1.0).abs() < 1e-6, "{back}");
    assert!((over.lost.unwrap() - (over.cost.unwrap() - back)).abs() < 1e-9);
    assert_eq!(stream.closed.total.under.waits, 0);
}

#[test]
fn under_waits_cost_what_holding_on_was_worth() {
    // Given up at 15 s by one in three. With F even to 1/2 at 20 s and ρ* = 1/32: N(20) - N(15) = 1/8, D(20) - D(15) =
    // 2.8125 - 2/8, S(15) = 5/8, so V(15) = (1/8 - 2.5625/32)/(5/8) = 0.0719 by hand.
    let waits = courier(15.0, 3);
    let set = audit(&waits, &policy(RATE), Question::default());
    let stream = &set.streams[0];
    let under = stream.closed.total.under;
    let gave_up = waits.iter().filter(|w| w.ending() == Ending::GaveUp).count() as u64;
    assert_eq!(under.waits, gave_up);
    let each = under.lost.unwrap() / gave_up as f64;
    assert!((each - 0.071_9).abs() < 0.012, "{each}");
    // Expected further wait up to 20 s: 2.8125/(5/8) = 4.5 s.
    let further = under.further_hours * HOUR / gave_up as f64;
    assert!((further / 4.5 - 1.0).abs() < 0.1, "{further}");
    // One in five is done within half as long again: no bulk.
    assert_eq!(under.before_bulk, 0);
    assert!(stream.closed.total.over.waits > 0, "those at 90 s");
    // By rule: nothing is stated, and all give-ups lie together.
    let rule = stream.rule.unwrap();
    assert_eq!((rule.from, rule.at_s, rule.share), (RuleFrom::Data, Some(15.0), Some(1.0)));
    let cuts: Vec<(Cut, u64)> = stream.closed.by_rule.iter().map(|r| (r.cut, r.lost.waits)).collect();
    assert_eq!(cuts, [(Cut::Ended, 4_000 - gave_up), (Cut::ByRule, gave_up)]);
    assert_eq!(stream.closed.by_rule[1].lost.under, under);
}

#[test]
fn a_bulk_just_after_the_give_up_is_named() {
    // Four in five end between 9 and 11 s, one in five at 300 s; a timer of 8 s, on one in ten, cuts just before the bulk.
    let waits: Vec<Wait> = (0..3_000)
        .map(|i| match i % 10 {
            0 => wait(8.0, Ending::GaveUp),
            1 | 6 => wait(300.0, Ending::Done),
            _ => wait(9.0 + 2.0 * f64::from(i) / 3_000.0, Ending::Done),
        })
        .collect();
    let entry = "aim: rate, now: 8s, pause: {gave_up: 2s}, guard: {floor: 1s, ceiling: 500s, evidence: 100}";
    let stream = &audit(&waits, &policy(entry), Question::default()).streams[0];
    assert_eq!(stream.closed.total.under.before_bulk, 300);
    assert_eq!(stream.rule.unwrap().from, RuleFrom::Policy);
    assert!((11.0..12.5).contains(&stream.advice.give_up_after_s.unwrap()));
}

#[test]
fn hours_of_the_week_add_up() {
    // One wait of some 5 s an hour for four weeks, but on Tuesdays from 09:00 a dozen of 90 s.
    let waits: Vec<Wait> = (0..28 * 24)
        .map(|hour| {
            let slow = hour % 168 == 33;
            let age = if slow { 90.0 } else { 5.0 + f64::from(hour % 50) / 10.0 };
            let wait = wait(age, Ending::Done).with_at(MONDAY + HOUR * (f64::from(hour) + 0.5)).unwrap();
            wait.with_count(if slow { 12 } else { 1 }).unwrap()
        })
        .collect();
    let entry =
        "aim: rate, pause: {gave_up: 2s}, guard: {floor: 1s, ceiling: 200s, evidence: 100, window: 28d}";
    let set = audit(&waits, &policy(entry), Question::default());
    let closed = &set.streams[0].closed;
    assert_eq!((closed.by_hour.len(), closed.undated), (168, 0));
    let worst: Vec<_> = closed.by_hour.iter().filter(|h| h.lost.over.waits > 0).collect();
    let [tuesday] = worst[..] else { panic!("{worst:?} {:?}", set.streams[0].advice) };
    assert_eq!((tuesday.day.as_str(), tuesday.hour, tuesday.lost.over.waits), ("Tue", 9, 48));
    assert!((tuesday.lost.over.hours - closed.total.over.hours).abs() < 1e-12);
    // Without times there are no hours.
    let bare: Vec<Wait> = (0..600).map(|i| wait(5.0 + f64::from(i % 50) / 10.0, Ending::Done)).collect();
    let closed = &audit(&bare, &policy(entry), Question::default()).streams[0].closed;
    assert_eq!((closed.by_hour.len(), closed.undated), (0, 600));
}

#[test]
fn counts_and_buckets_weigh_as_many() {
    let mut waits = courier(60.0, 3);
    let one = audit(&waits, &policy(RATE), Question::default()).streams[0].closed.total;
    waits.push(wait(90.0, Ending::Done).with_count(1_000).unwrap());
    waits.push(Wait::between(80.0, 120.0, Ending::Done).unwrap().with_count(10).unwrap());
    waits.push(Wait::between(200.0, f64::INFINITY, Ending::Done).unwrap());
    let set = audit(&waits, &policy(RATE), Question::default());
    let many = set.streams[0].closed.total;
    assert_eq!(many.waits, one.waits + 1_011);
    assert_eq!(many.over.waits, one.over.waits + 1_011);
    assert_eq!(set.streams[0].cautions.iter().filter(|c| c.code == "endless_buckets").count(), 1);
}

// ---- open waits ----

#[test]
fn verdicts_change_at_the_advised_age() {
    let mut waits = courier(60.0, 3);
    let ages = [4.0, 10.0, 30.0, 85.0, 150.0];
    waits.extend(ages.map(|age| wait(age, Ending::Waiting)));
    let set = audit(&waits, &policy(RATE), Question::default());
    let at = set.streams[0].advice.give_up_after_s.unwrap();
    let of = |age: f64| set.open.waits.iter().find(|w| w.age_s == age).unwrap();
    for age in [4.0, 10.0] {
        let open = of(age);
        assert_eq!((open.verdict, open.look_again_at_s), (Verdict::Hold, Some(at)), "{age}");
        assert!(open.value.unwrap() > 0.0 && (open.look_again_in_s.unwrap() - (at - age)).abs() < 1e-12);
    }
    // At 85 s all that are left come within 5 s: worth waiting for, as V is 1 less 5 s at the rate. At 30 s they are an hour
    // of pauses away: 60 s cost more than the completion brings.
    assert_eq!(of(30.0).verdict, Verdict::LetGo);
    assert_eq!(of(85.0).verdict, Verdict::Hold);
    assert!(of(85.0).value.unwrap() > 0.7, "{:?}", of(85.0));
    let back = of(30.0).look_again_at_s.unwrap();
    assert!((40.0..70.0).contains(&back), "worth holding again from {back}");
    assert!(of(30.0).next_step.unwrap() < 0.0);
    // Evenly to 20 s: of those open at 10 s (3/4), a third is done within 10 s more; at 4 s, 4/40 of 0.9.
    assert!((of(10.0).chance_done.unwrap() - 1.0 / 3.0).abs() < 0.03, "{:?}", of(10.0));
    assert!((of(4.0).chance_done.unwrap() - 0.1 / 0.9).abs() < 0.02, "{:?}", of(4.0));
    // Beyond everything seen.
    assert_eq!(of(150.0).verdict, Verdict::LetGo);
    // Let go first, the greatest loss first; then what is to be looked at soonest.
    let order: Vec<Verdict> = set.open.waits.iter().map(|w| w.verdict).collect();
    assert_eq!(order, [Verdict::LetGo, Verdict::LetGo, Verdict::Hold, Verdict::Hold, Verdict::Hold]);
    assert_eq!(set.streams[0].open.let_go, 2);
    assert!(set.cautions.iter().any(|c| c.code == "safety_first"));
    assert!(set.streams[0].cautions.iter().any(|c| c.code == "work_repeated"));
}

#[test]
fn a_given_step_and_a_capped_list() {
    let mut waits = courier(60.0, 3);
    waits.extend((1..=500).map(|i| wait(f64::from(i) / 10.0, Ending::Waiting)));
    let question = Question { within: Some(5.0), list: 7, ..Question::default() };
    let set = audit(&waits, &policy(RATE), question);
    assert_eq!((set.open.total, set.open.waits.len(), set.open.within_s), (500, 7, Some(5.0)));
    assert!(set.open.waits.iter().all(|w| w.step_s == 5.0 && w.verdict == Verdict::LetGo));
    let open = set.streams[0].open;
    assert_eq!(open.hold + open.let_go, 500);
    let at = set.streams[0].advice.give_up_after_s.unwrap();
    assert_eq!(open.hold, (at * 10.0).ceil() as u64 - 1);
    // A list of none.
    let set = audit(&waits, &policy(RATE), Question { list: 0, ..Question::default() });
    assert_eq!((set.open.total, set.open.waits.len()), (500, 0));
}

#[test]
fn each_aim_in_its_unit() {
    let mut waits = courier(60.0, 3);
    waits.push(wait(10.0, Ending::Waiting));
    let guard = "guard: {floor: 1s, ceiling: 200s, evidence: 100}";
    for (aim, unit, priced) in [
        ("aim: finish, pause: {gave_up: 2s}", Unit::Seconds, true),
        ("aim: carrying_cost, carrying_cost: 0.03/s", Unit::Worth, true),
        ("aim: deadline, deadline: 100s", Unit::Probability, false),
        (
            "aim: rate, pause: {gave_up: 2s}, fades: {half_life: 60s}, worth: {done: 1, gave_up: 0.01}",
            Unit::Worth,
            true,
        ),
    ] {
        let set = audit(&waits, &policy(&format!("{aim}, {guard}")), Question::default());
        let stream = &set.streams[0];
        assert_eq!(
            (stream.advice.unit, stream.advice.worth_per_hour.is_some()),
            (Some(unit), priced),
            "{aim}"
        );
        assert_eq!(stream.closed.total.over.cost.is_some(), priced, "{aim}");
        assert_eq!(set.open.waits[0].verdict, Verdict::Hold, "{aim}");
        if unit == Unit::Seconds {
            // A second is worth a second.
            assert!((stream.advice.worth_per_hour.unwrap() - HOUR).abs() < 1e-6);
            assert!(
                (stream.closed.total.over.cost.unwrap() - HOUR * stream.closed.total.over.hours).abs() < 1e-6
            );
        }
    }
    // No cost of time: nothing is held against anything, and what was seen still tells chances.
    let set = audit(&waits, &policy("kind: job"), Question::default());
    let (stream, open) = (&set.streams[0], &set.open.waits[0]);
    assert_eq!((stream.advice.unit, stream.closed.total.over.waits, stream.open.unknown), (None, 0, 1));
    assert_eq!((open.verdict, open.value), (Verdict::Unknown, None));
    assert!((open.chance_done.unwrap() - 1.0 / 3.0).abs() < 0.03 && open.remaining_s.is_some());
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    /// Whatever the order and however the sums are split, the answer is the same to the last byte, and holds no NaN.
    #[test]
    fn any_order_any_split(seed in 0u64..1_000, parts in 1usize..5) {
        let mut waits = courier(15.0, 3);
        waits.extend((1..=40).map(|i| wait(f64::from(i) * 2.3, Ending::Waiting)));
        let policy = policy(RATE);
        let mut book = Book::default();
        waits.iter().for_each(|w| book.add("s", w).unwrap());
        let terms = Terms { policy: Some(&policy), newest: None, seed: 1, past: None };
        let subject = Subject::new(&terms, "s", book.stream("s").unwrap(), None, &Lenders::default());
        let audit = Audit::new(vec![subject], Question::default(), None);
        let report = |order: &[usize], parts: usize| {
            let mut all: Vec<_> = (0..parts).map(|_| audit.sums()).collect();
            for (i, &w) in order.iter().enumerate() {
                all[i % parts].add("s", &waits[w], Some(&format!("w{w}")));
            }
            let whole = all.into_iter().reduce(|mut a, b| { a.merge(b); a }).unwrap();
            serde_json::to_string(&audit.report(whole, vec![], None)).unwrap()
        };
        let order: Vec<usize> = (0..waits.len()).collect();
        let mut mixed = order.clone();
        mixed.sort_by_key(|&i| (i as u64 ^ seed).wrapping_mul(0x9E37_79B9_7F4A_7C15));
        let straight = report(&order, 1);
        prop_assert_eq!(&straight, &report(&mixed, parts));
        prop_assert!(!straight.contains("NaN") && !straight.contains("inf"));
    }
}

// ---- the command ----

fn run(folder: &Path, arguments: &[&str], input: Option<&str>) -> (i32, String, String) {
    let arguments = [&["audit"], arguments].concat();
    match input {
        Some(input) => command::fed(folder, &arguments, input),
        None => command::run(folder, &arguments),
    }
}

/// Courier waits as lines, an hour apart or so, with some open.
fn lines(shift: impl Fn(usize) -> f64) -> String {
    let mut text = String::new();
    for (i, w) in courier(15.0, 3).iter().take(1_200).enumerate() {
        let outwait::wait::Age::Exact(age) = w.age() else { panic!() };
        let at = MONDAY + shift(i);
        writeln!(
            text,
            "{{\"stream\":\"courier.slot\",\"elapsed\":{age},\"ending\":\"{}\",\"at\":{at},\"id\":\"c{i}\"}}",
            w.ending().name()
        )
        .unwrap();
    }
    for (id, age) in [("crate-7", 40.0), ("crate-8", 3.0)] {
        let at = MONDAY + shift(1_199);
        writeln!(
            text,
            "{{\"stream\":\"courier.slot\",\"elapsed\":{age},\"ending\":\"waiting\",\"at\":{at},\"id\":\"{id}\"}}"
        )
        .unwrap();
    }
    text
}

fn folder(waits: &str) -> tempfile::TempDir {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("waits.ndjson"), waits).unwrap();
    let policy = format!("version: 1\nstreams:\n  - {{match: '*', {RATE}}}\n");
    fs::write(folder.path().join("p.yaml"), policy).unwrap();
    folder
}

const FILES: [&str; 3] = ["waits.ndjson", "--policy", "p.yaml"];

fn json(folder: &Path, more: &[&str]) -> (i32, Value) {
    let (code, out, err) = run(folder, &[&FILES[..], &["--format", "json"], more].concat(), None);
    (code, serde_json::from_str(&out).unwrap_or_else(|e| panic!("{e}: {out}{err}")))
}

#[test]
fn files_pipes_threads_and_orders_give_the_same_bytes() {
    let by_minute = |i: usize| 600.0 * i as f64;
    let waits = lines(by_minute);
    let folder = folder(&waits);
    let arguments = [&FILES[..], &["--format", "json"]].concat();
    let (code, from_file, err) = run(folder.path(), &arguments, None);
    assert_eq!((code, err.as_str()), (0, ""));
    let piped = ["-", "--policy", "p.yaml", "--format", "json"];
    assert_eq!(run(folder.path(), &piped, Some(&waits)).1, from_file);
    assert_eq!(run(folder.path(), &[&arguments[..], &["--threads", "1"]].concat(), None).1, from_file);
    // Times that run backwards.
    let backwards: Vec<&str> = waits.lines().rev().collect();
    fs::write(folder.path().join("waits.ndjson"), backwards.join("\n")).unwrap();
    assert_eq!(run(folder.path(), &arguments, None).1, from_file);
    let value: Value = serde_json::from_str(&from_file).unwrap();
    assert_eq!(value["schema"], "outwait/audit/1");
    assert_eq!(value["open"]["waits"][0]["id"], "crate-7");
    assert_eq!(value["open"]["waits"][0]["verdict"], "let_go");
    let set: AuditSet = serde_json::from_str(&from_file).unwrap();
    assert_eq!(serde_json::to_value(&set).unwrap(), value);
    // The advice is that of `weigh`.
    let weigh = assert_cmd::Command::new(env!("CARGO_BIN_EXE_outwait"))
        .current_dir(folder.path())
        .args(["weigh", "waits.ndjson", "--policy", "p.yaml", "--format", "json"])
        .output()
        .unwrap();
    let weighed: Value = serde_json::from_slice(&weigh.stdout).unwrap();
    assert_eq!(
        weighed["streams"][0]["advice"]["give_up_after_s"],
        value["streams"][0]["advice"]["give_up_after_s"]
    );
}

#[test]
fn the_text_reads_well() {
    let folder = folder(&lines(|i| 600.0 * i as f64));
    let (code, text, err) = run(folder.path(), &FILES, None);
    assert_eq!((code, err.as_str()), (0, ""));
    insta::assert_snapshot!("audit_text", text);
}

fn codes(value: &Value) -> Vec<String> {
    let list = |cautions: &Value| -> Vec<String> {
        cautions.as_array().unwrap().iter().map(|c| c["code"].as_str().unwrap().to_owned()).collect()
    };
    let mut all = list(&value["cautions"]);
    value["streams"].as_array().unwrap().iter().for_each(|s| all.extend(list(&s["cautions"])));
    all
}

#[test]
fn a_week_without_data_is_told() {
    let folder = folder(&lines(|i| if i < 600 { 300.0 * i as f64 } else { 9.0 * DAY + 300.0 * i as f64 }));
    let (code, value) = json(folder.path(), &[]);
    assert_eq!(code, 0);
    assert!(codes(&value).contains(&"days_without_data".to_owned()), "{:?}", codes(&value));
}

#[test]
fn a_stream_that_vanished_is_told() {
    let mut waits = lines(|i| 300.0 * i as f64);
    let later = MONDAY + 12.0 * DAY;
    writeln!(waits, "{{\"stream\":\"other\",\"elapsed\":1,\"at\":{later}}}").unwrap();
    let folder = folder(&waits);
    let (code, value) = json(folder.path(), &[]);
    assert_eq!(code, 0);
    assert!(codes(&value).contains(&"stream_vanished".to_owned()), "{:?}", codes(&value));
    // Its open waits were last seen a week ago.
    assert!(codes(&value).contains(&"stale_open_waits".to_owned()));
}

#[test]
fn waits_from_the_future_are_told() {
    let mut waits = lines(|i| 300.0 * i as f64);
    let future = MONDAY + 3_000.0 * DAY;
    writeln!(waits, "{{\"stream\":\"courier.slot\",\"elapsed\":1,\"at\":{future}}}").unwrap();
    let folder = folder(&waits);
    let (_, value) = json(folder.path(), &[]);
    let caution = value["cautions"].as_array().unwrap().iter().find(|c| c["code"] == "waits_from_the_future");
    let remedy = caution.unwrap()["remedy"].as_str().unwrap();
    assert!(remedy.contains("--until 2026-12-05"), "{remedy}");
    // As it says.
    let (code, value) = json(folder.path(), &["--until", "2026-12-05"]);
    assert_eq!(code, 0);
    assert!(!codes(&value).contains(&"waits_from_the_future".to_owned()));
    assert_eq!(value["streams"][0]["closed"]["total"]["waits"], 1_200);
}

#[test]
fn only_open_waits_have_no_verdict() {
    let waits: String = (1..=30)
        .map(|i| format!("{{\"stream\":\"lender.reply\",\"elapsed\":{i},\"ending\":\"waiting\"}}\n"))
        .collect();
    let folder = folder(&waits);
    let (code, value) = json(folder.path(), &[]);
    assert_eq!(code, 4);
    let stream = &value["streams"][0];
    assert_eq!((&stream["open"]["unknown"], &stream["closed"]["total"]["waits"]), (&30.into(), &0.into()));
    assert_eq!(value["open"]["waits"][0]["age_s"], 30.0);
    assert_eq!(value["open"]["waits"][0]["value"], Value::Null);
    assert_eq!(codes(&value), ["no_verdict"]);
    let (code, text, _) = run(folder.path(), &FILES, None);
    assert_eq!(code, 4);
    assert!(text.contains("30 without a verdict"), "{text}");
}

#[test]
fn starts_without_end_are_open_waits() {
    let mut waits = lines(|i| 600.0 * i as f64);
    let start = MONDAY + 600.0 * 1_199.0 - 55.0;
    writeln!(waits, "{{\"stream\":\"courier.slot\",\"started\":{start},\"id\":\"begun\"}}").unwrap();
    let folder = folder(&waits);
    let (_, value) = json(folder.path(), &[]);
    assert_eq!(value["open"]["total"], 3);
    let begun = value["open"]["waits"].as_array().unwrap().iter().find(|w| w["id"] == "begun").unwrap();
    assert_eq!(begun["age_s"], 55.0);
}

#[test]
fn bad_lines_and_bad_options() {
    let folder = folder("{\"stream\":\"a\",\"elapsed\":-1}\n");
    let (code, out, err) = run(folder.path(), &FILES, None);
    assert_eq!((code, out.as_str()), (3, ""));
    assert!(err.contains("waits.ndjson:1: elapsed"), "{err}");
    for bad in [["--within", "-1s"], ["--goal", "80%"], ["--service-time", "0"], ["--queue-length", "NaN"]] {
        assert_eq!(run(folder.path(), &[&FILES[..], &bad].concat(), None).0, 2, "{bad:?}");
    }
    assert_eq!(run(folder.path(), &["-", "-"], None).0, 2);
    assert_eq!(run(folder.path(), &["missing.csv"], None).0, 3);
    assert_eq!(run(folder.path(), &["."], None).0, 3);
}

#[test]
fn an_id_cannot_command_the_terminal() {
    let mut waits = lines(|i| 600.0 * i as f64);
    let at = MONDAY + 600.0 * 1_199.0;
    writeln!(
        waits,
        "{{\"stream\":\"courier.slot\",\"elapsed\":70,\"ending\":\"waiting\",\"at\":{at},\"id\":\"\\u001b[2J<b>=1\"}}"
    )
    .unwrap();
    let folder = folder(&waits);
    let (_, text, _) = run(folder.path(), &FILES, None);
    assert!(text.contains("[2J<b>=1") && !text.contains('\u{1b}'), "{text}");
}

// ---- other forms ----

#[test]
fn a_page_that_needs_nothing_else() {
    let mut waits = lines(|i| 600.0 * i as f64);
    let at = MONDAY + 600.0 * 1_199.0;
    writeln!(
        waits,
        "{{\"stream\":\"courier.slot\",\"elapsed\":70,\"ending\":\"waiting\",\"at\":{at},\"id\":\"<script>alert('&')\"}}"
    )
    .unwrap();
    let folder = folder(&waits);
    let (code, page, err) = run(folder.path(), &[&FILES[..], &["--format", "html"]].concat(), None);
    assert_eq!((code, err.as_str()), (0, ""));
    assert!(page.starts_with("<!doctype html>") && page.trim_end().ends_with("</html>"));
    // Nothing is run or fetched, and what an id says stays text.
    for bad in ["<script", "<link", "<img", "<iframe", " on", "src=", "@import", "url(http", "javascript:"] {
        let found = page.find(bad).filter(|&i| bad != " on" || page[i..].starts_with(" onload"));
        assert_eq!(found, None, "{bad}");
    }
    assert!(page.contains("&lt;script&gt;alert("), "{page}");
    assert!(page.contains("default-src 'none'") && page.contains("prefers-color-scheme:dark"));
    assert!(page.contains("Most waited past the advice") && page.contains("<svg"));
    // Ids are unique, and the pictures well-formed.
    let mut ids: Vec<&str> =
        page.split(" id=\"").skip(1).map(|rest| rest.split('"').next().unwrap()).collect();
    let all = ids.len();
    ids.sort_unstable();
    ids.dedup();
    assert_eq!(ids.len(), all);
    for picture in page.split("<svg").skip(1) {
        let markup = format!("<svg{}", &picture[..picture.find("</svg>").unwrap() + 6]);
        roxmltree::Document::parse(&markup).unwrap();
    }
}

#[test]
fn rows_for_a_spreadsheet() {
    let mut waits = lines(|i| 600.0 * i as f64);
    let at = MONDAY + 600.0 * 1_199.0;
    writeln!(
        waits,
        "{{\"stream\":\"courier.slot\",\"elapsed\":70,\"ending\":\"waiting\",\"at\":{at},\"id\":\"=1+1, \\\"x\\\"\"}}"
    )
    .unwrap();
    let folder = folder(&waits);
    let rows = |form: &str| {
        let (code, out, _) = run(folder.path(), &[&FILES[..], &["--format", form]].concat(), None);
        assert_eq!(code, 0);
        let mut reader = csv::Reader::from_reader(out.as_bytes());
        let heads = reader.headers().unwrap().clone();
        let rows: Vec<csv::StringRecord> = reader.records().map(Result::unwrap).collect();
        (heads, rows)
    };
    let (heads, lost) = rows("csv");
    let column = |name: &str| heads.iter().position(|h| h == name).unwrap();
    let sum = |by: &str, name: &str| -> f64 {
        let of = lost.iter().filter(|r| &r[column("by")] == by);
        of.map(|r| r[column(name)].parse::<f64>().unwrap()).sum()
    };
    assert_eq!(sum("all", "waits"), 1_200.0);
    for name in ["waits", "over_hours", "over_lost", "under_waits"] {
        for by in ["rule", "hour"] {
            assert!(
                (sum(by, name) - sum("all", name)).abs() < 1e-6 * sum("all", name).abs().max(1.0),
                "{by} {name}"
            );
        }
    }
    let (heads, open) = rows("open-csv");
    assert_eq!((&heads[1], open.len()), ("id", 3));
    // Not a formula.
    assert_eq!(&open.iter().find(|r| &r[4] == "70").unwrap()[1], "'=1+1, \"x\"");
    assert_eq!(&open[0][6], "let_go");
}

#[test]
fn yaml_is_the_same_document() {
    let folder = folder(&lines(|i| 600.0 * i as f64));
    let (_, yaml, _) = run(folder.path(), &[&FILES[..], &["--format", "yaml"]].concat(), None);
    let (_, value) = json(folder.path(), &[]);
    let set: AuditSet = serde_yaml::from_str(&yaml).unwrap();
    let same: AuditSet = serde_json::from_value(value).unwrap();
    assert_eq!(set, same);
}
