//! The demo scenario: what is written can be read back, and is what its stated truth says.

// Reading aids outside `#[test]` functions may fail too.
#![allow(clippy::unwrap_used, clippy::panic)]

use outwait::demo::{self, DemoError, DemoRecord, END, Latent, Scenario, ScenarioError, Stream};
use outwait::outlook::Outlook;
use outwait::say::parse_duration;
use outwait::stopping::Aim;
use outwait::wait::{Ending, Wait, check_stream};
use serde_json::Value;
use std::collections::BTreeMap;
use std::fs;
use std::path::Path;
use std::sync::LazyLock;

const DAY: f64 = 86_400.0;
const WEEK: f64 = 7.0 * DAY;

/// One scenario serves most tests.
static RECORDS: LazyLock<Vec<DemoRecord>> = LazyLock::new(|| Scenario::new(7).waits().collect());

fn stream(name: &str) -> &'static Stream {
    demo::truth().iter().find(|s| s.name == name).unwrap()
}

fn of(name: &str) -> impl Iterator<Item = &'static DemoRecord> {
    RECORDS.iter().filter(move |r| r.stream == name)
}

/// Asserts that `seen` of `n` is what a chance `p` gives, to four standard errors.
fn assert_share(what: &str, seen: usize, n: usize, p: f64) {
    let p = p.clamp(0.0, 1.0);
    let (share, error) = (seen as f64 / n as f64, (p * (1.0 - p) / n as f64).sqrt());
    assert!((share - p).abs() <= 4.0 * error + 1e-12, "{what}: {share} of {n}, not {p} ± {error}");
}

// ---- files ----

#[test]
fn same_seed_same_bytes() {
    let (one, two) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let written = demo::write(one.path(), 7).unwrap();
    let inner = two.path().join("a/new/folder");
    demo::write(&inner, 7).unwrap();
    let names = ["waits.ndjson", "policy.yaml", "README.md"];
    for (file, name) in written.files.iter().zip(names) {
        assert_eq!(file, &one.path().join(name));
        assert!(fs::read(file).unwrap() == fs::read(inner.join(name)).unwrap(), "{name}");
    }
    assert_eq!(fs::read_dir(&inner).unwrap().count(), 3, "nothing temporary stays");
    assert!(Scenario::new(8).waits().ne(RECORDS.iter().copied()));
}

#[test]
fn never_overwrites() {
    let folder = tempfile::tempdir().unwrap();
    let at = |name: &str| folder.path().join(name);
    demo::write(folder.path(), 7).unwrap();
    // Its own, untouched: nothing to do. A missing one is put back.
    fs::remove_file(at("README.md")).unwrap();
    fs::write(at(".README.md.partial"), "left by a killed run").unwrap();
    demo::write(folder.path(), 7).unwrap();
    assert!(at("README.md").exists() && !at(".README.md.partial").exists());

    let before = fs::read(at("waits.ndjson")).unwrap();
    let other_seed = demo::write(folder.path(), 8).unwrap_err();
    assert!(
        matches!(&other_seed, DemoError::Differs { path } if *path == at("waits.ndjson")),
        "{other_seed:?}"
    );
    assert!(other_seed.remedy().contains("another folder"));
    assert!(fs::read(at("waits.ndjson")).unwrap() == before);

    fs::write(at("policy.yaml"), "version: 1 # edited").unwrap();
    assert!(matches!(demo::write(folder.path(), 7), Err(DemoError::Differs { .. })));
    assert_eq!(fs::read_to_string(at("policy.yaml")).unwrap(), "version: 1 # edited");
}

#[test]
fn refuses_what_is_in_the_way() {
    let folder = tempfile::tempdir().unwrap();
    let stranger = folder.path().join("thesis.txt");
    fs::write(&stranger, "years of work").unwrap();
    let error = demo::write(folder.path(), 7).unwrap_err();
    assert!(matches!(&error, DemoError::Occupied { path } if *path == stranger));
    assert!(error.to_string().contains("thesis.txt") && error.remedy().contains("empty"));
    assert_eq!(fs::read_dir(folder.path()).unwrap().count(), 1);

    for path in [stranger.clone(), stranger.join("below")] {
        let error = demo::write(&path, 7).unwrap_err();
        assert!(matches!(&error, DemoError::System { path: named, .. } if *named == path), "{error:?}");
        assert_eq!(error.remedy(), "name a folder; a file is in the way");
    }
    assert_eq!(fs::read_to_string(&stranger).unwrap(), "years of work");

    let holder = tempfile::tempdir().unwrap();
    fs::create_dir(holder.path().join("README.md")).unwrap();
    assert!(matches!(demo::write(holder.path(), 7), Err(DemoError::Differs { .. })));
}

#[cfg(unix)]
#[test]
fn a_dangling_link_is_not_replaced() {
    let folder = tempfile::tempdir().unwrap();
    let link = folder.path().join("policy.yaml");
    std::os::unix::fs::symlink("nowhere", &link).unwrap();
    assert!(demo::write(folder.path(), 7).is_err());
    assert_eq!(fs::read_link(&link).unwrap(), Path::new("nowhere"));
    assert_eq!(fs::read_dir(folder.path()).unwrap().count(), 1);
}

/// Reads a line the strict way: every field known, of its type, and accepted by the constructors.
fn read(line: &str) -> (String, Option<String>, Wait, f64) {
    let record: BTreeMap<String, Value> = serde_json::from_str(line).unwrap();
    let known = ["stream", "at", "elapsed", "ending", "attempt", "id", "entered"];
    assert!(record.keys().all(|key| known.contains(&key.as_str())), "{line}");
    let text = |key: &str| record[key].as_str().unwrap().to_owned();
    let stream = text("stream");
    check_stream(&stream).unwrap();
    let at = text("at").parse::<jiff::Timestamp>().unwrap().as_millisecond() as f64 / 1e3;
    let wait = Wait::new(record["elapsed"].as_f64().unwrap(), Ending::parse(&text("ending")).unwrap())
        .and_then(|w| w.with_entered(record.get("entered").map_or(0.0, |e| e.as_f64().unwrap())))
        .and_then(|w| w.with_attempt(record.get("attempt").map_or(1, |a| a.as_u64().unwrap() as u32)))
        .and_then(|w| w.with_at(at))
        .unwrap();
    (stream, record.get("id").map(|id| id.as_str().unwrap().to_owned()), wait, at)
}

#[test]
fn every_line_is_a_wait() {
    let folder = tempfile::tempdir().unwrap();
    let written = demo::write(folder.path(), 7).unwrap();
    let text = fs::read_to_string(&written.files[0]).unwrap();
    assert!(text.ends_with('\n'));
    assert_eq!(text.lines().count(), written.waits);
    assert_eq!(written.waits, RECORDS.len());
    let mut last = END - 4.0 * WEEK;
    for (line, record) in text.lines().zip(RECORDS.iter()) {
        let (stream, id, wait, at) = read(line);
        assert!(at >= last && at <= END, "{line}");
        last = at;
        assert_eq!((stream.as_str(), wait), (record.stream, record.wait().unwrap()));
        assert_eq!(id, record.id.map(|id| format!("r-{id}")));
    }

    let readme = fs::read_to_string(&written.files[2]).unwrap();
    assert!(readme.contains("made up"));
    for stream in demo::truth() {
        assert!(readme.contains(&format!("### {}\n", stream.name)));
    }
    assert_eq!(readme.matches("wait it out").count(), 2);
    for advice in ["66.7 ms", "80.9 ms", "3.84 d", "10.4 min", "2.08 min", "86.2 min"] {
        assert!(readme.contains(&format!("give up after {advice}")), "{advice}\n{readme}");
    }
}

#[test]
fn the_policy_says_what_the_truth_assumes() {
    let policy: serde_yaml::Value = serde_yaml::from_str(demo::POLICY).unwrap();
    let entries = policy["streams"].as_sequence().unwrap();
    assert_eq!(entries.len(), demo::truth().len());
    for (stream, entry) in demo::truth().iter().zip(entries) {
        let seconds = |text: &serde_yaml::Value| match text.as_str() {
            Some("never") => f64::INFINITY,
            Some(text) => parse_duration(text).unwrap(),
            None => 0.0,
        };
        let matched = entry["match"].as_str().unwrap();
        assert!(stream.name == matched || stream.name.starts_with(matched.strip_suffix('*').unwrap_or("?")));
        let (terms, guard) = (&stream.terms, &entry["guard"]);
        assert_eq!(seconds(&guard["floor"]), terms.floor, "{matched}");
        assert_eq!(seconds(&guard["ceiling"]), terms.ceiling, "{matched}");
        assert_eq!(seconds(&entry["now"]), terms.now, "{matched}");
        let pause = terms.worth.pause;
        for (name, value) in [("done", pause.done), ("failed", pause.failed), ("gave_up", pause.gave_up)] {
            assert_eq!(seconds(&entry["pause"][name]), value, "{matched} {name}");
        }
        let aim = match terms.worth.aim {
            Aim::Rate => "rate",
            Aim::Finish => "finish",
            other => panic!("{other:?}"),
        };
        assert_eq!(entry["aim"].as_str(), Some(aim));
        let worth = &entry["worth"];
        assert_eq!(worth["done"].as_f64().unwrap_or(1.0), terms.worth.done);
        assert_eq!(worth["failed"].as_f64().unwrap_or(0.0), terms.worth.failed);
        assert_eq!(worth["gave_up"].as_f64().unwrap_or(0.0), terms.worth.gave_up);
        assert_eq!(entry["attempt_cost"].as_f64().unwrap_or(0.0), terms.worth.attempt_cost);
        if stream.retries.attempts > 1 {
            assert_eq!(entry["retry"]["attempts"].as_u64(), Some(u64::from(stream.retries.attempts)));
        }
    }
}

// ---- what was generated ----

#[test]
fn how_many() {
    assert!((190_000..210_000).contains(&RECORDS.len()), "{}", RECORDS.len());
    assert!((110_000..130_000).contains(&of("catalogue.lookup").count()));
    for stream in demo::truth() {
        let started = of(stream.name).filter(|r| r.attempt == 1 && r.entered == 0.0).count() as f64;
        let expected = 4.0 * stream.per_week;
        // Waits below half a tick aside, every start of the four weeks is recorded once; a Poisson number.
        assert!((started - expected).abs() < 4.0 * expected.sqrt(), "{}: {started}", stream.name);
    }
}

/// Chances of `done`, `failed`, `gave_up` by `horizon`, from the three laws alone, on 10,000 log-spaced ages.
fn endings(done: Latent, failed: Latent, patience: Latent, horizon: f64) -> [f64; 3] {
    let laws = [done, failed, patience];
    let age = |i: i32| horizon * 1e-9_f64.powf(1.0 - f64::from(i) / 10_000.0);
    let mut chances = [0.0; 3];
    for i in 0..10_000 {
        let (from, upto) = (if i == 0 { 0.0 } else { age(i) }, age(i + 1));
        for (k, chance) in chances.iter_mut().enumerate() {
            let others: f64 =
                (0..3).filter(|j| *j != k).map(|j| laws[j].survival(0.5 * (from + upto))).product();
            *chance += (laws[k].survival(from) - laws[k].survival(upto)) * others;
        }
    }
    chances
}

#[test]
fn endings_are_those_of_the_laws() {
    let shift = Scenario::new(7).shift();
    assert_eq!(shift, END - WEEK);
    for stream in demo::truth() {
        // Only waits that began early enough to be followed for as long as the horizon.
        let horizon = if stream.name == "lender.reply" { 16.0 * DAY } else { DAY };
        for after in [false, true] {
            let started = |r: &DemoRecord| r.at - r.elapsed;
            let waits: Vec<_> = of(stream.name)
                .filter(|r| r.attempt == 1 && r.entered == 0.0 && started(r) < END - horizon)
                .filter(|r| (started(r) >= shift) == after)
                .collect();
            if waits.is_empty() {
                continue;
            }
            let done = if after { stream.shifted.unwrap_or(stream.done) } else { stream.done };
            // By the floor of the policy and multiples of it, and in the end.
            for age in
                [1.0, 2.0, 3.0, 10.0, 30.0].map(|f| f * stream.terms.floor).into_iter().chain([horizon])
            {
                let age = age.min(horizon);
                let expected = endings(done, stream.failed, stream.patience, age);
                for (ending, p) in Ending::ALL.into_iter().zip(expected) {
                    let seen = waits.iter().filter(|r| r.ending == ending && r.elapsed <= age).count();
                    assert_share(&format!("{} {after} {ending:?} {age}", stream.name), seen, waits.len(), p);
                }
            }
        }
    }
}

#[test]
fn open_at_the_end_are_waiting() {
    for record in RECORDS.iter() {
        assert!(record.ending != Ending::Waiting || record.at == END, "{record}");
    }
    assert!(of("lender.reply").filter(|r| r.ending == Ending::Waiting).count() > 1_000);
    let oldest = of("lender.reply").map(|r| r.elapsed).fold(0.0, f64::max);
    assert!(oldest > 80.0 * DAY && oldest <= 84.0 * DAY, "{oldest}");
}

/// Those watched from a later age must end as the law says given that they had come so far.
#[test]
fn late_entries_follow_the_conditional_law() {
    let (law, horizon) = (stream("lender.reply").done, 13.9 * DAY);
    let entered: Vec<_> = of("lender.reply").filter(|r| r.entered > 0.0 && r.entered < 13.0 * DAY).collect();
    let expected: f64 = entered.iter().map(|r| 1.0 - law.survival(horizon) / law.survival(r.entered)).sum();
    let seen = entered.iter().filter(|r| r.ending == Ending::Done && r.elapsed <= horizon).count() as f64;
    assert!(entered.len() > 1_000);
    assert!((seen - expected).abs() < 4.0 * (entered.len() as f64 * 0.25).sqrt(), "{seen} {expected}");
    assert!(RECORDS.iter().all(|r| r.entered == 0.0 || r.stream == "lender.reply"));
}

#[test]
fn the_timeout_censors() {
    for record in of("catalogue.lookup").filter(|r| r.ending != Ending::Waiting) {
        match record.ending {
            Ending::GaveUp => assert!((0.8..=0.802).contains(&record.elapsed), "{record}"),
            _ => assert!(record.elapsed <= 0.802, "{record}"),
        }
    }
}

fn requests() -> BTreeMap<u64, Vec<&'static DemoRecord>> {
    let mut requests = BTreeMap::<u64, Vec<_>>::new();
    for record in of("catalogue.lookup") {
        requests.entry(record.id.unwrap()).or_default().push(record);
    }
    requests
}

#[test]
fn attempts_of_a_request_follow_each_other() {
    let mut longest = 0;
    for tries in requests().values() {
        longest = longest.max(tries.len());
        for (i, record) in tries.iter().enumerate() {
            assert_eq!(record.attempt as usize, i + 1, "{record}");
        }
        for pair in tries.windows(2) {
            assert_eq!(pair[0].ending, Ending::GaveUp);
            let pause = pair[1].at - pair[1].elapsed - pair[0].at;
            // The stamps are rounded to a millisecond.
            assert!((pause - 0.01).abs() < 0.0011, "{pause}");
        }
        let last = tries.last().unwrap();
        // Given up for good only after the third; the next try may have begun after the end.
        assert!(last.ending != Ending::GaveUp || tries.len() == 3 || last.at > END - 0.02, "{last}");
    }
    assert_eq!(longest, 3);
    assert!(RECORDS.iter().all(|r| r.stream == "catalogue.lookup" || (r.id.is_none() && r.attempt == 1)));
}

/// METHODS.md section 6: `φ̂ = (P(T_2>τ | T_1>τ) - S(τ))/(1 - S(τ))`, `S` from first attempts.
#[test]
fn stickiness_is_recovered() {
    let shift = Scenario::new(7).shift();
    for after in [false, true] {
        let requests = requests();
        let mine = || requests.values().filter(|tries| (tries[0].at >= shift) == after);
        let given_up = |attempt: usize| {
            let tried: Vec<_> = mine().filter_map(|tries| tries.get(attempt - 1)).collect();
            let gave_up = tried.iter().filter(|r| r.ending == Ending::GaveUp).count();
            (gave_up as f64 / tried.len() as f64, tried.len() as f64)
        };
        let (left, _) = given_up(1);
        for attempt in [2, 3] {
            let (again, n) = given_up(attempt);
            let sticky = (again - left) / (1.0 - left);
            let error = (again * (1.0 - again) / n).sqrt() / (1.0 - left);
            assert!((sticky - 0.35).abs() < 4.0 * error, "{after} {attempt}: {sticky} ± {error}");
        }
    }
    assert_eq!(stream("catalogue.lookup").retries.sticky, 0.35);
}

/// Median of the completions and share given up of first look-ups, in each week.
fn weekly(records: &[DemoRecord], weeks: u32) -> Vec<(f64, f64)> {
    (0..weeks)
        .map(|week| {
            let from = END - f64::from(weeks - week) * WEEK;
            let mine = || {
                records
                    .iter()
                    .filter(|r| r.stream == "catalogue.lookup" && r.attempt == 1)
                    .filter(|r| r.at >= from && r.at < from + WEEK)
            };
            let mut done: Vec<f64> = mine().filter(|r| r.ending == Ending::Done).map(|r| r.elapsed).collect();
            done.sort_by(f64::total_cmp);
            let gave_up = mine().filter(|r| r.ending == Ending::GaveUp).count() as f64;
            (done[done.len() / 2], gave_up / mine().count() as f64)
        })
        .collect()
}

#[test]
fn the_law_shifts_in_its_week() {
    let long: Vec<DemoRecord> = Scenario::spanning(11, 12, 9, END).unwrap().waits().collect();
    for (records, weeks, shift) in [(&RECORDS[..], 4, 4), (&long, 12, 9)] {
        for (week, (median, gave_up)) in (1..).zip(weekly(records, weeks)) {
            // 26,000 a week: the median is off by 0.2%, the share by 0.2 points, one standard error each.
            let (m, g) = if week < shift { (0.035, 0.1035) } else { (0.0455, 0.1645) };
            assert!((median / m - 1.0).abs() < 0.012, "week {week} of {weeks}: {median}");
            assert!((gave_up - g).abs() < 0.01, "week {week} of {weeks}: {gave_up}");
        }
    }
    // Beyond the last week: no shift at all.
    let calm: Vec<DemoRecord> = Scenario::spanning(11, 2, 3, END).unwrap().waits().collect();
    assert!(weekly(&calm, 2).iter().all(|(median, _)| *median < 0.037));
    assert!(demo::waits(7, 4, END).unwrap().eq(RECORDS.iter().copied()));
}

#[test]
fn the_week_has_its_rhythm() {
    for name in ["catalogue.lookup", "helpdesk.call", "index.rebuild"] {
        let stream = stream(name);
        let mut hours = [0_usize; 168];
        for record in of(name).filter(|r| r.attempt == 1) {
            // 2026-11-30 is a Monday.
            let from_monday = (record.at - record.elapsed - END).rem_euclid(WEEK);
            hours[(from_monday / 3_600.0) as usize] += 1;
        }
        let n: usize = hours.iter().sum();
        let chi: f64 = (0..168)
            .map(|hour| (n as f64 * stream.rhythm.share(hour), hours[hour] as f64))
            .map(|(expected, seen)| (seen - expected).powi(2) / expected)
            .sum();
        // Chi-squared with 167 degrees: mean 167, standard deviation 18.
        assert!((95.0..245.0).contains(&chi), "{name}: {chi}");
    }
    let calls = |busy: bool| {
        of("helpdesk.call").filter(move |r| {
            let hour = ((r.at - r.elapsed - END).rem_euclid(WEEK) / 3_600.0) as usize;
            (stream("helpdesk.call").rhythm.crowd(hour) > 1.0) == busy
        })
    };
    let quick = |busy: bool| {
        let quick = calls(busy).filter(|r| r.ending == Ending::Done && r.elapsed < 60.0).count() as f64;
        quick / calls(busy).count() as f64
    };
    assert!(quick(false) > quick(true) + 0.05, "{} {}", quick(false), quick(true));
}

// ---- the truth ----

/// Best give-up times, s, found apart from this program by a trapezoid scan of 8,000 log-spaced ages.
#[test]
fn the_right_decision_is_known() {
    let scanned = [
        ("catalogue.lookup", false, Some(0.066_66)),
        ("catalogue.lookup", true, Some(0.081_3)),
        ("index.search", false, None),
        ("scan.job", false, None),
        ("lender.reply", false, Some(331_680.0)),
        ("courier.slot", false, Some(624.7)),
        ("helpdesk.call", false, Some(124.05)),
        ("index.rebuild", false, Some(5_173.7)),
    ];
    for (name, after, expected) in scanned {
        let best = stream(name).best(after);
        assert_eq!(best.wait_it_out, expected.is_none(), "{name}");
        if let Some(age) = expected {
            // The grid has 400 ages; its coarsest step is 1.7%.
            assert!((best.give_up_after / age - 1.0_f64).abs() < 0.017, "{name}: {best:?}");
            assert!(best.band[0] < age && age < best.band[1] && best.loss_now > 0.05, "{name}: {best:?}");
        }
    }
}

/// METHODS.md sections 5 and 6: at an inner optimum the marginal gain falls through ρ* times the marginal time,
/// `w h_d + w_f h_f - w_g h = ρ*(1/(1-φ) + d_f h_f - d_g' h)`, and nowhere else is better.
#[test]
fn the_first_order_condition_holds() {
    for stream in demo::truth().iter().filter(|s| !s.best(false).wait_it_out) {
        let (outlook, best, w) = (stream.outlook(false), stream.best(false), &stream.terms.worth);
        let rate = stream.rate(&outlook, best.give_up_after);
        let surplus = |t: f64| {
            let (done, failed) = outlook.hazards(t).unwrap();
            let pause = (w.pause.gave_up + w.sticky * t) / (1.0 - w.sticky);
            let time = 1.0 / (1.0 - w.sticky) + w.pause.failed * failed - pause * (done + failed);
            w.done * done - rate * time
        };
        let around = [0.97, 1.03].map(|f| surplus(f * best.give_up_after));
        assert!(around[0] > 0.0 && around[1] < 0.0, "{} {around:?}", stream.name);
    }
}

#[test]
fn scenarios_out_of_range() {
    for weeks in [0, 105, u32::MAX] {
        assert_eq!(Scenario::spanning(1, weeks, 1, END), Err(ScenarioError::Weeks { weeks }));
    }
    for end in [f64::NAN, f64::INFINITY, -1.0, 0.0, 1e12] {
        assert!(demo::waits(1, 4, end).is_err(), "{end}");
    }
    // An end within an hour and within a week, before any shift: still in order, still waits.
    let odd = Scenario::spanning(1, 1, 0, 1_000_000_123.4).unwrap();
    assert!(odd.waits().all(|r| r.wait().is_ok() && r.at <= 1_000_000_124.0));
}
