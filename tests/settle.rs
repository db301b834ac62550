//! What somebody settles is kept: nothing is lost, mistakes are named by line, guards hold, two at once lose nothing.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

#[path = "support/command.rs"]
mod command;

use std::fs;
use std::path::Path;
use std::sync::LazyLock;

use command::run;
use outwait::policy::GiveUp;
use outwait::settle::{Grounds, Settled, Settlement, State, insert, parse};
use proptest::prelude::*;
use serde_json::Value;
use tempfile::TempDir;

/// 400 look-ups, log-logistic of scale 50 ms and shape 1.5, cut off at 2 s: the best time is far below the one in force.
fn lookups() -> String {
    let line = |i: u32| {
        let u = (f64::from(i) + 0.5) / 400.0;
        let t = 0.05 * (u / (1.0 - u)).powf(1.0 / 1.5);
        let (elapsed, ending) = if t > 2.0 { (2.0, "gave_up") } else { (t, "done") };
        let at = 1_764_547_200.25 + f64::from(i * 149 % 400) * 60.0;
        format!(
            "{{\"stream\":\"catalogue.lookup\",\"elapsed\":{elapsed:.6},\"ending\":\"{ending}\",\"at\":{at}}}\n"
        )
    };
    (0..400).map(line).collect()
}

const POLICY: &str = "\
version: 1
streams:
  - match: \"catalogue.*\"
    aim: rate
    pause: {gave_up: 10ms}
    now: 2s
    retry: {attempts: 3, repeatable: true}
    guard: {floor: 10ms, ceiling: 10s}
  - match: \"scan.*\"
    kind: job
    aim: finish
    pause: {gave_up: 60s}
    now: 20m
    guard: {floor: 60s, ceiling: 2h}
";

/// A folder with the waits' advice, made once.
static ADVICE: LazyLock<String> = LazyLock::new(|| {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("waits.ndjson"), lookups()).unwrap();
    fs::write(folder.path().join("policy.yaml"), POLICY).unwrap();
    let (code, out, err) =
        run(folder.path(), &["weigh", "waits.ndjson", "--policy", "policy.yaml", "--format", "json"]);
    assert_eq!(code, 0, "{err}");
    out
});

fn folder() -> TempDir {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("advice.json"), &*ADVICE).unwrap();
    fs::write(folder.path().join("policy.yaml"), POLICY).unwrap();
    folder
}

const BY: [&str; 8] =
    ["--by", "Ada", "--why", "agreed", "--policy", "policy.yaml", "--settled", "settled.yaml"];

fn settle(folder: &Path, arguments: &[&str]) -> (i32, String, String) {
    run(folder, &[&["settle"], arguments, &BY].concat())
}

fn read(folder: &Path) -> Settled {
    parse(&fs::read(folder.join("settled.yaml")).unwrap(), "settled.yaml").unwrap()
}

#[test]
fn what_is_proposed_is_accepted_with_its_evidence_and_cautions() {
    let folder = folder();
    let accept = ["catalogue.lookup", "--accept", "--advice", "advice.json", "--at", "2026-11-30T10:00:00Z"];
    let (code, out, err) = settle(folder.path(), &accept);
    assert_eq!(code, 0, "{err}");
    assert!(out.starts_with("catalogue.lookup: accepted; 1s is in force"), "{out}");
    assert!(out.contains("largest_step"), "{out}");
    let settled = read(folder.path());
    let standing = settled.standing("catalogue.lookup");
    // Half of the 2 s in force: the guard's largest step.
    assert_eq!(standing.give_up_after(), Some(GiveUp::After(1.0)));
    let grounds = standing.last.unwrap().grounds.as_ref().unwrap();
    assert_eq!((grounds.waits, grounds.in_force), (400, Some(GiveUp::After(2.0))));
    let (_, json, _) =
        run(folder.path(), &["settle", "*", "--history", "--settled", "settled.yaml", "--format", "json"]);
    let json: Value = serde_json::from_str(&json).unwrap();
    assert_eq!(json["settled"][0]["decisions"][0]["state"], "accepted");
    assert_eq!(json["settled"][0]["decisions"][0]["by"], "Ada");
    // The general-purpose YAML reader sees the same.
    let yaml: Value = serde_yaml::from_slice(&fs::read(folder.path().join("settled.yaml")).unwrap()).unwrap();
    assert_eq!(yaml["streams"]["catalogue.lookup"][0]["give_up_after"], "1s");
    assert_eq!(yaml["streams"]["catalogue.lookup"][0]["why"], "agreed");
}

#[test]
fn an_undo_is_a_decision_too() {
    let folder = folder();
    for (arguments, code) in [
        (&["scan.job", "--undo"][..], 3),
        (&["scan.job", "--pin", "25m"], 0),
        (&["scan.job", "--postpone", "14d"], 0),
        (&["scan.job", "--undo"], 0),
        (&["scan.job", "--undo"], 0),
        (&["scan.job", "--undo"], 3),
    ] {
        let (ended, _, err) = settle(folder.path(), arguments);
        assert_eq!(ended, code, "{arguments:?} {err}");
    }
    let settled = read(folder.path());
    assert_eq!(settled.standing("scan.job").give_up_after(), None);
    assert_eq!(settled.history("scan.job").len(), 4);
}

#[test]
fn what_is_against_a_guard_is_refused_by_its_name() {
    let folder = folder();
    for (pin, guard) in
        [("30s", "floor: 1min"), ("3h", "ceiling: 2h"), ("40m", "largest_step"), ("never", "ceiling")]
    {
        let (code, out, err) = settle(folder.path(), &["scan.job", "--pin", pin]);
        assert_eq!((code, out.as_str()), (3, ""));
        assert!(err.contains("guard: ") && err.contains(guard), "{err}");
    }
    assert!(!folder.path().join("settled.yaml").exists());
}

#[test]
fn usage() {
    let folder = folder();
    for (arguments, code, told) in [
        (&["settle", "scan.job", "--settled", "s.yaml"][..], 2, "required"),
        (
            &["settle", "scan.job", "--pin", "5", "--settled", "s.yaml", "--by", "A", "--why", "b"],
            2,
            "no unit",
        ),
        (&["settle", "scan.job", "--refuse", "--settled", "s.yaml"], 2, "--by"),
        (&["settle", "scan.job", "--refuse", "--by", "A", "--why", "b"], 2, "--settled"),
        (&["settle", "scan.job", "--accept", "--by", "A", "--why", "b", "--settled", "s.yaml"], 2, "waits"),
        (
            &["settle", "*.nothing", "--refuse", "--by", "A", "--why", "b", "--settled", "s.yaml"],
            3,
            "no stream",
        ),
        (&["settle", "a", "--postpone", "soon", "--by", "A", "--why", "b", "--settled", "s.yaml"], 2, "14d"),
        (
            &["settle", "a", "--postpone", "2020-01-01", "--by", "A", "--why", "b", "--settled", "s.yaml"],
            3,
            "ahead",
        ),
        (&["settle", "a", "--history", "--settled", "none.yaml"], 3, "none.yaml"),
        (
            &["settle", "a", "--refuse", "--by", "A", "--why", "b", "--settled", "no/where.yaml"],
            5,
            "no/where.yaml",
        ),
    ] {
        let (ended, _, err) = run(folder.path(), arguments);
        assert_eq!(ended, code, "{arguments:?}: {err}");
        assert!(err.contains(told), "{arguments:?}: {err}");
    }
}

/// A file that somebody has edited, with comments and an order of their own.
const EDITED: &str = "\
# Reviewed by the night desk.
schema: outwait/settled/1
streams:
  # The scanner is old.
  scan.job:
    - state: pinned # for now
      at: 2026-11-02T10:00:00Z
      give_up_after: 25m
      by: Bob
      why: the night shift ends then

  # Ask Ada.
  zebra/desk:
    - {state: refused, at: 2026-11-02T10:00:00Z, by: Ada, why: ''}
";

#[test]
fn nothing_that_somebody_wrote_is_lost() {
    let folder = folder();
    let file = folder.path().join("settled.yaml");
    fs::write(&file, EDITED).unwrap();
    let (code, _, err) = settle(folder.path(), &["scan.job", "--undo", "--at", "2026-11-03T10:00:00Z"]);
    assert_eq!(code, 0, "{err}");
    let (code, _, err) = settle(folder.path(), &["courier", "--refuse", "--at", "2026-11-03T10:00:00Z"]);
    assert_eq!(code, 0, "{err}");
    let text = fs::read_to_string(&file).unwrap();
    let mut lines = text.lines();
    for line in EDITED.lines() {
        assert!(lines.any(|kept| kept == line), "{line:?} is lost or moved:\n{text}");
    }
    let settled = read(folder.path());
    let names: Vec<&str> = settled.streams().map(|(name, _)| name).collect();
    assert_eq!(names, ["courier", "scan.job", "zebra/desk"]);
    assert!(text.find("courier").unwrap() < text.find("scan.job").unwrap());
    assert_eq!(settled.standing("scan.job").give_up_after(), None);
}

#[test]
fn a_slip_of_the_hand_is_named_by_line_and_the_file_left_alone() {
    let item = |text: &str| format!("schema: outwait/settled/1\nstreams:\n  desk:\n    - {{{text}}}\n");
    let good = "state: pinned, at: 2026-11-02T10:00:00Z, give_up_after: 25m, by: Bob, why: x";
    let cases: [(String, &str, &str); 12] = [
        (item(&good.replace("pinned", "pined")), ":4:", "did you mean `pinned`?"),
        (item(&good.replace("give_up_after", "giveup_after")), ":4:", "did you mean `give_up_after`?"),
        (item(&good.replace("25m", "25")), ":4:", "has no unit"),
        (item(&good.replace("2026-11-02T10:00:00Z", "Monday")), ":4:", "is not a time"),
        (item(&good.replace(", by: Bob", "")), ":4:", "`by` is missing"),
        (item(&good.replace("pinned", "refused")), ":4:", "says nothing where the state is refused"),
        ("streams: {}\n".into(), ":1:", "`schema` is missing"),
        ("schema: outwait/settled/9\nstreams: {}\n".into(), ":1:", "not a schema"),
        ("schema: outwait/settled/1\nstreams:\n  a b: []\n".into(), ":3:", "names no stream"),
        ("schema: outwait/settled/1\nstreams:\n  a: {}\n".into(), ":3:", "no list"),
        ("schema: outwait/settled/1\nstreams:\n  a: []\n  a: []\n".into(), ":4:", "a"),
        ("schema: outwait/settled/1\nstreams:\n\ta: []\n".into(), ":3:", "tab"),
    ];
    let folder = folder();
    let file = folder.path().join("settled.yaml");
    for (text, line, told) in cases {
        fs::write(&file, &text).unwrap();
        let (code, out, err) = settle(folder.path(), &["scan.job", "--pin", "25m"]);
        assert_eq!((code, out.as_str()), (3, ""), "{text}");
        assert!(err.contains(&format!("settled.yaml{line}")) && err.contains(told), "{text}\n{err}");
        assert_eq!(fs::read_to_string(&file).unwrap(), text);
    }
    fs::write(&file, [0xff, 0xfe]).unwrap();
    assert_eq!(settle(folder.path(), &["scan.job", "--pin", "25m"]).0, 3);
}

/// Twelve at once: every one of their entries is there in the end.
#[test]
fn two_who_settle_at_once_lose_nothing() {
    let folder = folder();
    let path = folder.path();
    std::thread::scope(|scope| {
        for i in 0..12 {
            scope.spawn(move || {
                let stream = format!("desk.{}", i % 3);
                let (code, _, err) = settle(path, &[&stream, "--refuse", "--at", "2026-11-03T10:00:00Z"]);
                assert_eq!(code, 0, "{err}");
            });
        }
    });
    let settled = read(path);
    let counts: Vec<usize> = settled.streams().map(|(_, history)| history.len()).collect();
    assert_eq!(counts, [4, 4, 4]);
    // Nothing else is left in the folder.
    let mut names: Vec<_> =
        fs::read_dir(path).unwrap().map(|e| e.unwrap().file_name().into_string().unwrap()).collect();
    names.sort();
    assert_eq!(names, ["advice.json", "policy.yaml", "settled.yaml"]);
}

#[cfg(unix)]
#[test]
fn mode_and_link_are_kept() {
    use std::os::unix::fs::PermissionsExt;
    let folder = folder();
    fs::write(folder.path().join("real.yaml"), EDITED).unwrap();
    fs::set_permissions(folder.path().join("real.yaml"), PermissionsExt::from_mode(0o640)).unwrap();
    std::os::unix::fs::symlink("real.yaml", folder.path().join("settled.yaml")).unwrap();
    assert_eq!(settle(folder.path(), &["scan.job", "--undo"]).0, 0);
    let link = fs::symlink_metadata(folder.path().join("settled.yaml")).unwrap();
    assert!(link.file_type().is_symlink());
    let real = fs::metadata(folder.path().join("real.yaml")).unwrap();
    assert_eq!(real.permissions().mode() & 0o777, 0o640);
    assert!(fs::read_to_string(folder.path().join("real.yaml")).unwrap().contains("undone"));
}

fn state() -> impl Strategy<Value = State> {
    let time =
        prop_oneof![Just(GiveUp::Never), (1u32..5_000_000).prop_map(|ms| GiveUp::After(f64::from(ms) / 1e3))];
    prop_oneof![
        time.clone().prop_map(|give_up_after| State::Accepted { give_up_after }),
        time.prop_map(|give_up_after| State::Pinned { give_up_after }),
        Just(State::Postponed { until: "2027-01-01T00:00:00Z".parse().unwrap() }),
        Just(State::Refused),
        Just(State::Undone),
    ]
}

proptest! {
    /// Whatever is written is read back the same, put into the text one by one or written anew.
    #[test]
    fn written_is_read(
        decisions in prop::collection::vec(("[a-z1:][a-z./:-]{0,6}|yes|null|1", state(), any::<String>(), ".*"), 0..12)
    ) {
        let mut settled = Settled::default();
        let mut text = String::new();
        for (i, (stream, state, by, why)) in decisions.into_iter().enumerate() {
            let at = jiff::Timestamp::from_second(1_764_547_200 + i as i64).unwrap();
            let grounds = Grounds { waits: i as u64, loses: Some(0.25), ..Grounds::default() };
            let settlement = Settlement { state, at, by, why, grounds: Some(grounds) };
            text = insert(&text, &settled, &stream, &settlement);
            settled.add(&stream, settlement);
        }
        prop_assert_eq!(&parse(settled.text().as_bytes(), "").unwrap(), &settled);
        prop_assert_eq!(&parse(text.as_bytes(), "").unwrap(), &settled);
        // Another reader takes it too.
        let yaml: Value = serde_yaml::from_str(&settled.text()).unwrap();
        for (stream, history) in settled.streams() {
            prop_assert_eq!(yaml["streams"][stream].as_array().unwrap().len(), history.len());
            prop_assert_eq!(yaml["streams"][stream][0]["why"].as_str().unwrap(), &history[0].why);
        }
    }

    #[test]
    fn no_text_panics(bytes in prop::collection::vec(any::<u8>(), 0..200), cut in 0..EDITED.len()) {
        let _ = parse(&bytes, "");
        let mut text = EDITED.as_bytes().to_vec();
        text.splice(cut..cut, bytes.into_iter().take(3));
        let _ = parse(&text, "");
    }
}
