//! The command line holds its promises: what is read, what is printed where, and how it ends.

// Reading aids outside `#[test]` functions may fail too.
#![allow(clippy::unwrap_used, clippy::panic)]

#[path = "support/command.rs"]
mod command;

use std::fs;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::Stdio;
use std::sync::LazyLock;

use command::{BINARY, ended, fed, folder, outwait, run};
use outwait::advice::{AdviceSet, SCHEMA};
use serde_json::Value;
use tempfile::TempDir;

// ---- aids ----

/// Ages of a law at equal steps of probability: fixed, and smooth enough for every family.
fn ages(n: u32, quantile: impl Fn(f64) -> f64) -> impl Iterator<Item = f64> {
    (0..n).map(move |i| quantile((f64::from(i) + 0.5) / f64::from(n)))
}

/// 400 look-ups, log-logistic of scale 50 ms and shape 1.5, cut off at 2 s.
fn lookups() -> String {
    let line = |t: f64, i: usize| {
        let (elapsed, ending) = if t > 2.0 { (2.0, "gave_up") } else { (t, "done") };
        let at = 1_764_547_200.25 + i as f64 * 60.0;
        format!(
            "{{\"stream\":\"catalogue.lookup\",\"elapsed\":{elapsed:.6},\"ending\":\"{ending}\",\"at\":{at}}}\n"
        )
    };
    let ages = ages(400, |u| 0.05 * (u / (1.0 - u)).powf(1.0 / 1.5));
    // Spread over the hours, so that no hour has only short ones.
    ages.enumerate().map(|(i, t)| line(t, i * 149 % 400)).collect()
}

/// 400 scans of 10 min, give or take: Weibull of shape 4.
fn scans() -> String {
    let rows = ages(400, |u| 600.0 * (-(1.0 - u).ln()).powf(0.25)).map(|t| format!("scan.job,{t:.3},done\n"));
    "stream,elapsed,ending\n".to_owned() + &rows.collect::<String>()
}

const POLICY: &str = "\
version: 1
streams:
  - match: \"catalogue.*\"
    aim: rate
    pause: {gave_up: 10ms}
    now: 2s
    retry: {attempts: 3, repeatable: true}
    guard: {floor: 10ms, ceiling: 10s, evidence: 300}
  - match: \"scan.*\"
    kind: job
    aim: finish
    pause: {gave_up: 60s}
    now: 20m
    guard: {floor: 60s, ceiling: 2h, evidence: 300}
";

/// A folder with two streams in two files and a policy; and what `weigh` says of it as JSON.
static WEIGHED: LazyLock<(TempDir, String)> = LazyLock::new(|| {
    let folder = folder(&[
        ("lookups.ndjson", lookups().as_bytes()),
        ("scans.csv", scans().as_bytes()),
        ("policy.yaml", POLICY.as_bytes()),
    ]);
    let (code, out, err) = run(folder.path(), &[&WEIGH[..], &["--format", "json"]].concat());
    assert_eq!((code, err.as_str()), (0, ""));
    (folder, out)
});

const WEIGH: [&str; 5] = ["weigh", "lookups.ndjson", "scans.csv", "--policy", "policy.yaml"];

fn weighed(more: &[&str]) -> (i32, String, String) {
    run(WEIGHED.0.path(), &[&WEIGH[..], more].concat())
}

fn gzip(bytes: &[u8]) -> Vec<u8> {
    let mut packer = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    packer.write_all(bytes).unwrap();
    packer.finish().unwrap()
}

/// The streams in an advice, by name and number of waits.
fn streams(json: &str) -> Vec<(String, u64)> {
    let set: AdviceSet = serde_json::from_str(json).unwrap();
    set.streams.into_iter().map(|s| (s.stream, s.evidence.waits)).collect()
}

// ---- good input ----

#[test]
fn json_has_the_fields_of_the_contract() {
    let value: Value = serde_json::from_str(&WEIGHED.1).unwrap();
    assert_eq!(value["schema"], SCHEMA);
    assert_eq!(value["made_at"], "2025-12-01T06:39:00Z");
    let [lookup, scan] = &value["streams"].as_array().unwrap()[..] else { panic!("not two streams") };
    for (stream, name, kind) in [(lookup, "catalogue.lookup", "request"), (scan, "scan.job", "job")] {
        assert_eq!((&stream["stream"], &stream["kind"]), (&Value::from(name), &Value::from(kind)));
        assert_eq!(stream["evidence"]["waits"], 400);
        for (part, fields) in [
            ("evidence", &["waits", "done", "failed", "gave_up", "waiting", "sight_s", "from", "to"][..]),
            ("tail", &["class", "heavy_weight", "remaining_wait", "xi"]),
            (
                "advice",
                &[
                    "action",
                    "give_up_after_s",
                    "interval_s",
                    "band_s",
                    "rate_per_s",
                    "rate_never_per_s",
                    "rate_now_per_s",
                    "expected_regret",
                    "done_share",
                    "attempts_per_request",
                    "p50_s",
                    "p99_s",
                ],
            ),
        ] {
            let object = stream[part].as_object().unwrap();
            for field in fields {
                assert!(object.contains_key(*field), "{name}: {part} has no {field}");
            }
        }
        for fit in stream["fits"].as_array().unwrap() {
            for field in ["log_likelihood", "aic", "bic", "weight", "largest_gap"] {
                assert!(fit[field].is_f64(), "{name}: {field} of {}", fit["family"]);
            }
            assert!(fit["parameters"].as_object().unwrap().values().all(Value::is_number), "{fit}");
        }
        for caution in stream["cautions"].as_array().unwrap() {
            assert!(caution["code"].is_string() && caution["text"].is_string(), "{caution}");
        }
    }
    // Plain data: it comes back as it was, so no number in it is a null where one must be.
    let set: AdviceSet = serde_json::from_str(&WEIGHED.1).unwrap();
    assert_eq!(serde_json::to_value(&set).unwrap(), value);
    // A heavy tail against 2 s; a light one against 20 min.
    assert_eq!(lookup["advice"]["action"], "give_up_after");
    assert!(lookup["advice"]["give_up_after_s"].as_f64().unwrap() < 1.0);
    assert_eq!(scan["advice"]["action"], "wait_it_out");
    assert_eq!(scan["tail"]["remaining_wait"], "shrinking");
    let codes = |stream: &Value| -> Vec<String> {
        stream["cautions"].as_array().unwrap().iter().map(|c| c["code"].as_str().unwrap().into()).collect()
    };
    assert!(!codes(scan).contains(&"edge_of_sight".into()), "every scan was seen to its end");
}

#[test]
fn yaml_is_the_same_document() {
    let (code, yaml, err) = weighed(&["--format", "yaml"]);
    assert_eq!((code, err.as_str()), (0, ""));
    let (yaml, json): (Value, Value) =
        (serde_yaml::from_str(&yaml).unwrap(), serde_json::from_str(&WEIGHED.1).unwrap());
    assert_eq!(yaml, json);
}

#[test]
fn same_seed_same_bytes_whatever_the_threads() {
    for more in [&["--threads", "1"][..], &["--threads", "2"], &["--seed", "1"]] {
        assert!(weighed(&[more, &["--format", "json"]].concat()).1 == WEIGHED.1, "{more:?}");
    }
    let (_, other, _) = weighed(&["--seed", "2", "--format", "json"]);
    assert!(other != WEIGHED.1, "the seed is used");
}

#[test]
fn advice_on_a_stream_does_not_depend_on_the_others() {
    let (code, alone, err) = weighed(&["--stream", "scan.*", "--format", "json"]);
    assert_eq!((code, err.as_str()), (0, "outwait: 400 waits of other streams left out\n"));
    let [alone, whole]: [AdviceSet; 2] = [&alone, &WEIGHED.1].map(|json| serde_json::from_str(json).unwrap());
    assert_eq!(alone.streams[..], whole.streams[1..]);
    assert_eq!(alone.made_at, whole.made_at);
}

#[test]
fn text_for_a_person() {
    let (code, text, err) = weighed(&[]);
    assert_eq!((code, err.as_str()), (0, ""));
    assert!(!text.contains('\x1b'), "no colour where there is no terminal");
    assert!(text.starts_with("800 waits in 2 streams: "), "the summary comes first");
    assert!(text.lines().all(|line| line.chars().count() <= 100), "{text}");
    insta::assert_snapshot!("weigh", text);
}

#[test]
fn without_a_policy_it_says_what_it_assumes() {
    let (code, text, err) = run(WEIGHED.0.path(), &["weigh", "scans.csv"]);
    assert_eq!((code, err.as_str()), (0, ""));
    assert!(text.lines().nth(1).unwrap().starts_with("assumed: no policy"), "{text}");
    insta::assert_snapshot!("weigh_without_policy", text);
}

#[test]
fn too_little_evidence() {
    let line = "{\"stream\":\"a\",\"elapsed\":1}\n";
    let (code, text, err) = fed(Path::new("."), &["weigh", "-"], line.repeat(3));
    assert_eq!((code, err.as_str()), (4, ""));
    insta::assert_snapshot!("weigh_too_little", text);
    // Nothing of what was asked for.
    let (code, text, err) = fed(Path::new("."), &["weigh", "-", "--stream", "other"], line);
    assert_eq!(code, 4);
    assert!(text.starts_with("No waits to weigh"), "{text}");
    assert_eq!(err, "outwait: 1 wait of other streams left out\n");
    let (code, json, _) = fed(Path::new("."), &["weigh", "-", "--stream", "other", "--format", "json"], line);
    assert_eq!((code, streams(&json)), (4, vec![]));
}

const SWF: &str = "\
; Version: 2.2
; Computer: Fernhollow
1 0 30 600 4 -1 -1 4 900 -1 1 1 1 -1 7 -1 -1 -1
2 60 45 20 4 -1 -1 4 900 -1 0 1 1 -1 7 -1 -1 -1
3 90 15 -1 4 -1 -1 4 900 -1 5 1 1 -1 7 -1 -1 -1
";

#[test]
fn several_files_of_several_formats_packed_or_not() {
    let lines = "{\"stream\":\"a\",\"elapsed\":\"18.3ms\"}\r\n{\"stream\":\"b\",\"elapsed\":2}\r\n";
    let with_bom = [b"\xef\xbb\xbf", lines.as_bytes()].concat();
    let folder = folder(&[
        ("bom.ndjson", &with_bom),
        ("more.csv.gz", &gzip(b"stream,elapsed,colour\na,1,red\na,2,blue\n")),
        ("packed", &zstd::encode_all(lines.as_bytes(), 3).unwrap()),
        ("cluster.swf", SWF.as_bytes()),
    ]);
    let files = ["weigh", "bom.ndjson", "more.csv.gz", "packed", "cluster.swf", "-", "--format", "json"];
    let (code, json, err) = fed(folder.path(), &files, "stream;elapsed_ms\nb;250\n");
    assert_eq!((code, err.as_str()), (4, ""));
    let found = streams(&json);
    let named = |name: &str| found.iter().find(|(stream, _)| stream == name).map(|(_, waits)| *waits);
    assert_eq!((named("a"), named("b")), (Some(4), Some(3)));
    // Three jobs were submitted; what was cancelled before it started gave up waiting.
    assert_eq!(found.iter().map(|(_, waits)| waits).sum::<u64>(), 10, "{found:?}");
}

#[test]
fn a_job_log_has_two_times() {
    let folder = folder(&[("cluster.swf", SWF.as_bytes())]);
    let counts = |measure| {
        let (_, json, _) =
            run(folder.path(), &["weigh", "cluster.swf", "--measure", measure, "--format", "json"]);
        let set: AdviceSet = serde_json::from_str(&json).unwrap();
        let e = &set.streams[0].evidence;
        [e.done, e.failed, e.gave_up]
    };
    assert_eq!(counts("wait"), [2, 0, 1]);
    assert_eq!(counts("run"), [1, 1, 0]);
}

#[test]
fn starts_and_ends_are_one_wait() {
    let lines = "\
{\"stream\":\"a\",\"id\":\"1\",\"started\":100}
{\"stream\":\"a\",\"id\":\"2\",\"started\":101}
{\"stream\":\"a\",\"id\":\"1\",\"ended\":103,\"ending\":\"failed\"}
";
    let (code, json, err) = fed(Path::new("."), &["weigh", "-", "--format", "json"], lines);
    assert_eq!(code, 4);
    let set: AdviceSet = serde_json::from_str(&json).unwrap();
    assert_eq!((set.streams[0].evidence.failed, set.streams[0].evidence.waiting), (1, 1));
    assert!(err.contains("1 start without an end taken as still waiting"), "{err}");
}

#[test]
fn windows_and_names() {
    let folder = folder(&[("plain.csv", b"elapsed,at\n1,2026-11-29T23:59:59Z\n2,2026-11-30T00:00:00Z\n")]);
    let count = |more: &[&str]| {
        let all = [&["weigh", "plain.csv", "--stream", "courier", "--format", "json"], more].concat();
        streams(&run(folder.path(), &all).1)
    };
    let courier = |waits| vec![("courier".to_owned(), waits)];
    assert_eq!(count(&[]), courier(2), "a plain name names the nameless");
    assert_eq!(count(&["--since", "2026-11-30"]), courier(1));
    assert_eq!(count(&["--until", "2026-11-30"]), courier(1));
    assert_eq!(count(&["--since", "1795996800", "--until", "2026-11-30T00:00:00Z"]), vec![]);
    // A pattern names nothing, so the rows have no stream.
    let (code, out, err) = run(folder.path(), &["weigh", "plain.csv", "--stream", "c*"]);
    assert_eq!((code, out.as_str()), (3, ""));
    assert!(err.contains("--stream NAME"), "{err}");
}

#[test]
fn a_window_reaches_back_from_the_newest_wait_asked_for() {
    let day = |day: u32| format!("{{\"stream\":\"a\",\"elapsed\":1,\"at\":{}}}\n", day * 86_400 + 43_200);
    let lines: String = [1, 20, 100].map(day).concat();
    // 14 days unless a policy says otherwise.
    let (_, json, err) = fed(Path::new("."), &["weigh", "-", "--format", "json"], lines.clone());
    assert_eq!(streams(&json), [("a".to_owned(), 1)]);
    assert!(err.contains("2 waits older than the window"), "{err}");
    // As if the data ended there: days 8 to 21.
    let (_, json, err) =
        fed(Path::new("."), &["weigh", "-", "--format", "json", "--until", "1970-01-22T00:00:00Z"], lines);
    let set: AdviceSet = serde_json::from_str(&json).unwrap();
    assert_eq!(set.streams[0].evidence.waits, 1, "{err}");
    assert_eq!(set.made_at.as_deref(), Some("1970-01-21T23:59:59Z"));
}

#[test]
fn milliseconds_given_as_seconds_bring_a_caution() {
    let lines: String = (0..400)
        .map(|i| {
            let at = 1_764_547_200.0 + f64::from(i) * 1.234;
            format!("{{\"stream\":\"a\",\"elapsed\":{},\"at\":{at}}}\n", 20 + i * 7 % 300)
        })
        .collect();
    let (code, json, _) = fed(Path::new("."), &["weigh", "-", "--format", "json"], lines);
    assert_eq!(code, 0);
    let set: AdviceSet = serde_json::from_str(&json).unwrap();
    let caution = set.streams[0].cautions.first().unwrap();
    assert_eq!(caution.code, "unit_suspicion", "the gravest comes first");
    assert!(caution.text.contains("400 of 400 ages are whole numbers"), "{}", caution.text);
    assert!(caution.remedy.contains("check the unit"), "{}", caution.remedy);
}

// ---- bad input ----

/// Name, content, what standard error must hold.
fn bad_files() -> Vec<(&'static str, Vec<u8>, &'static str)> {
    let line = |elapsed: &str| format!("{{\"stream\":\"a\",\"elapsed\":{elapsed}}}\n").into_bytes();
    let long =
        [b"{\"stream\":\"a\",\"elapsed\":1,\"x\":\"".to_vec(), vec![b'y'; 10 << 20], b"\"}\n".to_vec()];
    vec![
        ("empty.ndjson", vec![], "there are no waits in empty.ndjson: it is empty"),
        ("blank.csv", b"\n\n".to_vec(), "there are no waits in blank.csv"),
        ("only_bad.ndjson", b"{hello\n{world\n".to_vec(), "only_bad.ndjson:2: line: not JSON"),
        (
            "nan.ndjson",
            line("NaN"),
            "nan.ndjson:1: elapsed: not JSON: expected value at column 25; write one JSON",
        ),
        ("infinite.ndjson", line("1e999"), "infinite.ndjson:1: elapsed: not JSON: number out of range"),
        ("word.ndjson", line("\"inf\""), "word.ndjson:1: elapsed: \"inf\" is not a duration; write seconds"),
        ("negative.ndjson", line("-1"), "negative.ndjson:1: elapsed: -1 is not an age in seconds above 0"),
        ("zero.ndjson", line("0"), "zero.ndjson:1: elapsed: 0 is not an age in seconds above 0"),
        ("stamp.ndjson", line("1e12"), "this looks like a time stamp or another unit"),
        (
            "ending.csv",
            b"stream,elapsed,ending\na,1,finished\n".to_vec(),
            "ending.csv:2: ending: \"finished\" is not",
        ),
        (
            "name.csv",
            b"stream,elapsed\na b,1\n".to_vec(),
            "name.csv:2: stream: the stream name holds ' '; use letters",
        ),
        (
            "column.csv",
            b"stream,elapsd\na,1\n".to_vec(),
            "no column `elapsed`; the nearest is \"elapsd\"; call it",
        ),
        ("nameless.ndjson", b"{\"elapsed\":1}\n".to_vec(), "nameless.ndjson:1: stream: it is missing"),
        (
            "long.ndjson",
            long.concat(),
            "long.ndjson:1: line: the line is longer than 1048576 bytes; write one record",
        ),
        (
            "binary",
            (0..=255).cycle().take(50_000).collect(),
            "binary is binary data; waits are read from NDJSON",
        ),
        ("brace", b"\x00\x01\xff\n{\x00\n".to_vec(), "brace is binary data"),
        ("array.json", b"[{\"elapsed\":1}]".to_vec(), "array.json is a JSON array"),
        ("cut.ndjson.gz", gzip(&line("1"))[..20].to_vec(), "cut.ndjson.gz is cut off or damaged"),
    ]
}

#[test]
fn bad_input_ends_with_3_says_why_and_prints_nothing() {
    for (name, bytes, why) in bad_files() {
        let folder = folder(&[(name, &bytes)]);
        let (code, out, err) = run(folder.path(), &["weigh", name]);
        assert_eq!((code, out.as_str()), (3, ""), "{name}: {err}");
        assert!(err.contains(why), "{name}: {err}");
        assert!(err.len() < 4096, "{name}: {} bytes of explanation", err.len());
        for told in err.lines().filter(|line| line.contains(why)) {
            assert_eq!(told.matches(why).count(), 1, "told twice: {told}");
        }
    }
}

#[test]
fn files_that_are_none() {
    let folder = folder(&[]);
    for (name, why) in [
        (
            "missing.ndjson",
            "outwait: cannot open missing.ndjson: No such file or directory (os error 2)\n  name a file",
        ),
        (".", "outwait: . is a directory; name the files in it"),
    ] {
        let (code, out, err) = run(folder.path(), &["weigh", name]);
        assert_eq!((code, out.as_str()), (3, ""), "{name}: {err}");
        assert!(err.starts_with(why), "{name}: {err}");
    }
}

#[test]
fn bad_lines_are_told_and_counted() {
    let lines = "{\"stream\":\"a\",\"elapsed\":1}\n{\"stream\":\"a\",\"elapsed\":-2}\nwhat\n";
    let weigh = |more: &[&str]| fed(Path::new("."), &[&["weigh", "-"], more].concat(), lines);
    let told = "outwait: 2 bad lines:\n\
                outwait:   1 x elapsed: negative\n\
                outwait:   1 x line: not JSON\n\
                outwait:   standard input:2: elapsed: -2 is not an age in seconds above 0 and at most 1e10; ";
    for allowed in ["0", "1"] {
        let (code, out, err) = weigh(&["--bad-lines", allowed]);
        assert_eq!((code, out.as_str()), (3, ""), "{allowed}");
        assert!(err.starts_with(told), "{err}");
        assert!(err.contains("of 3 lines 2 are bad, and"), "{err}");
        assert!(err.ends_with("or leave them out with `--bad-lines N` or `--bad-lines all`\n"), "{err}");
    }
    for allowed in ["2", "all"] {
        let (code, out, err) = weigh(&["--bad-lines", allowed]);
        assert_eq!(code, 4, "{err}");
        assert!(out.starts_with("1 wait in 1 stream: 1 with too little evidence.\n"), "{out}");
        assert!(err.starts_with(told) && !err.contains("nothing was reckoned"), "{err}");
    }
}

#[test]
fn wrong_usage_ends_with_2() {
    for (arguments, why) in [
        (&["weigh"][..], "<FILE>..."),
        (&["wiegh", "x"], "unrecognized subcommand 'wiegh'"),
        (&[], "Usage: outwait <COMMAND>"),
        (&["weigh", "-", "--bad-lines", "-1"], "'-1' for '--bad-lines <N|all>': write a number, or `all`"),
        (&["weigh", "-", "--seed", "-3"], "'-3' for '--seed <N>': write a whole number from 0"),
        (&["weigh", "-", "--threads", "0"], "'0' for '--threads <N>': write a whole number from 1"),
        (&["weigh", "-", "--since", "yesterday"], "\"yesterday\" is not a time; write 2026-11-30T10:00:00Z"),
        (&["weigh", "-", "--input", "xml"], "the formats are ndjson, csv, swf"),
        (&["weigh", "-", "--measure", "walk"], "[possible values: wait, run]"),
        (&["weigh", "-", "--format", "xml"], "[possible values: text, json, yaml]"),
        (&["weigh", "-", "-"], "standard input (`-`) is named more than once"),
        (&["demo", "x", "--since", "2026-11-30"], "say `--weigh` too"),
    ] {
        let (code, out, err) = fed(Path::new("."), arguments, "");
        assert_eq!((code, out.as_str()), (2, ""), "{arguments:?}: {err}");
        assert!(err.contains(why), "{arguments:?}: {err}");
    }
}

// ---- policies ----

const MISSPELT: &str = "version: 1\nstreams:\n  - match: \"a\"\n    aimm: rate\n";

#[test]
fn policies_that_cannot_be_used() {
    let folder = folder(&[
        ("misspelt.yaml", MISSPELT.as_bytes()),
        ("empty.yaml", b""),
        ("waits.csv", b"stream,elapsed\na,1\n"),
        ("big.yaml", &vec![b'#'; 3 << 20]),
    ]);
    for (name, why) in [
        (
            "missing.yaml",
            "cannot read the policy missing.yaml: No such file or directory (os error 2)\n  name a file",
        ),
        (".", "cannot read the policy .: Is a directory (os error 21)\n  name a file"),
        ("misspelt.yaml", "misspelt.yaml:4:5: entry 1: `aimm` is not a key here\n  did you mean `aim`?"),
        ("empty.yaml", "empty.yaml:1:1: the policy is empty\n  begin with `version: 1`"),
        ("big.yaml", "big.yaml:1:1: the policy has"),
    ] {
        let weigh = run(folder.path(), &["weigh", "waits.csv", "--policy", name]);
        let json = run(folder.path(), &["vet", name, "--format", "json"]);
        let vet = run(folder.path(), &["vet", name]);
        assert_eq!(weigh, vet, "{name}");
        assert_eq!(json, vet, "{name}");
        let (code, out, err) = vet;
        assert_eq!((code, out.as_str()), (3, ""), "{name}");
        assert!(err.starts_with(&format!("outwait: {why}")), "{name}: {err}");
    }
}

#[test]
fn vet_says_what_a_policy_means() {
    let folder = folder(&[("policy.yaml", POLICY.as_bytes())]);
    let (code, text, err) = run(folder.path(), &["vet", "policy.yaml", "scan.job", "nowhere"]);
    assert_eq!((code, err.as_str()), (0, ""));
    assert!(text.lines().all(|line| line.chars().count() <= 100), "{text}");
    insta::assert_snapshot!("vet", text);
    // The same from standard input, and as data.
    assert_eq!(fed(folder.path(), &["vet", "-", "scan.job", "nowhere"], POLICY).1, text);
    let [json, yaml] =
        ["json", "yaml"].map(|form| run(folder.path(), &["vet", "policy.yaml", "--format", form]).1);
    let json: Value = serde_json::from_str(&json).unwrap();
    assert_eq!(json["schema"], "outwait/vet/1");
    assert_eq!(json, serde_yaml::from_str::<Value>(&yaml).unwrap());
}

#[test]
fn the_environment_may_name_the_policy() {
    let weigh = |arguments: &[&str], policy: &str| {
        ended(outwait(WEIGHED.0.path(), arguments).env("OUTWAIT_POLICY", policy).output().unwrap())
    };
    let (code, json, _) = weigh(&["weigh", "lookups.ndjson", "scans.csv", "--format", "json"], "policy.yaml");
    assert!(code == 0 && json == WEIGHED.1);
    // What is said at the command line goes first.
    assert_eq!(weigh(&WEIGH, "missing.yaml").0, 0);
    assert_eq!(weigh(&["weigh", "scans.csv"], "missing.yaml").0, 3);
    assert!(weigh(&["weigh", "scans.csv"], "").1.contains("assumed: no policy"), "empty is none");
}

// ---- where it is printed ----

#[test]
fn a_closed_pipe_is_no_error() {
    let folder = WEIGHED.0.path();
    for arguments in [&WEIGH[..], &["vet", "policy.yaml"], &["--help"]] {
        let (reader, writer) = std::io::pipe().unwrap();
        drop(reader);
        let output = std::process::Command::new(BINARY)
            .current_dir(folder)
            .args(arguments)
            .stdout(writer)
            .output()
            .unwrap();
        let (code, _, err) = ended(output);
        assert_eq!((code, err.as_str()), (0, ""), "{arguments:?}");
    }
}

#[cfg(target_os = "linux")]
#[test]
fn output_that_cannot_be_written_ends_with_5() {
    let folder = WEIGHED.0.path();
    for arguments in [&WEIGH[..], &["vet", "policy.yaml"], &["--help"], &["weigh", "--help"], &["--version"]]
    {
        // `/dev/full` answers every write with "no space left on device" (full(4)).
        let full = fs::File::options().write(true).open("/dev/full").unwrap();
        let output = std::process::Command::new(BINARY)
            .current_dir(folder)
            .args(arguments)
            .stdout(full)
            .output()
            .unwrap();
        let (code, _, err) = ended(output);
        assert_eq!(code, 5, "{arguments:?}");
        assert!(
            err.starts_with("outwait: cannot write to standard output: No space left on device"),
            "{err}"
        );
    }
}

/// What a command prints on a terminal of so many columns; `None` (and a printed word) where `script` is not here.
#[cfg(target_os = "linux")]
fn on_a_terminal(columns: u32, environment: &[(&str, &str)]) -> Option<String> {
    let command = format!("stty rows 24 cols {columns}; '{BINARY}' {}", WEIGH.join(" "));
    let mut script = std::process::Command::new("script");
    script.args(["-qec", &command, "/dev/null"]).current_dir(WEIGHED.0.path()).stdin(Stdio::null());
    script.env("TERM", "xterm").env_remove("NO_COLOR").env_remove("OUTWAIT_POLICY");
    script.envs(environment.iter().copied());
    match script.output() {
        Ok(output) => Some(String::from_utf8(output.stdout).unwrap().replace('\r', "")),
        Err(error) => {
            println!("skipped: `script` gives no terminal here ({error})");
            None
        }
    }
}

#[cfg(target_os = "linux")]
#[test]
fn colour_and_width_of_a_terminal() {
    let Some(coloured) = on_a_terminal(64, &[]) else { return };
    assert!(coloured.contains("\x1b[1m") && coloured.contains("\x1b[33m"), "{coloured}");
    for plain in [&[("NO_COLOR", "1")], &[("TERM", "dumb")]] {
        let plain = on_a_terminal(64, plain).unwrap();
        assert!(!plain.contains('\x1b'), "{plain}");
        // Colour is never the only sign: without it the text is the same.
        let bare = ["\x1b[0m", "\x1b[1m", "\x1b[2m", "\x1b[33m"]
            .iter()
            .fold(coloured.clone(), |t, c| t.replace(c, ""));
        assert_eq!(bare, plain);
        assert!(plain.lines().filter(|line| !line.starts_with("  ")).count() > 2);
        let table = ["advised", "in force", "never", "give up at"];
        for line in plain.lines().filter(|line| !table.iter().any(|row| line.trim_start().starts_with(row))) {
            assert!(line.chars().count() <= 64, "{line}");
        }
    }
    // NO_COLOR is heeded when it is present and not empty (no-color.org).
    assert!(on_a_terminal(64, &[("NO_COLOR", "")]).unwrap().contains("\x1b[1m"));
}

#[test]
fn help_reads_well() {
    for (name, arguments) in [
        ("help", &["--help"][..]),
        ("help_weigh", &["weigh", "--help"]),
        ("help_vet", &["vet", "--help"]),
        ("help_demo", &["demo", "--help"]),
    ] {
        let (code, text, err) = run(Path::new("."), arguments);
        assert_eq!((code, err.as_str()), (0, ""));
        assert!(!text.contains('\x1b') && text.lines().all(|line| line.chars().count() <= 100), "{text}");
        insta::assert_snapshot!(name, text);
    }
    let (code, out, _) = run(Path::new("."), &["--version"]);
    assert_eq!((code, out), (0, format!("outwait {}\n", env!("CARGO_PKG_VERSION"))));
}

// ---- demo ----

#[test]
fn the_demo_is_written_once_and_weighed() {
    let home = tempfile::tempdir().unwrap();
    let (code, text, err) = run(home.path(), &["demo", "fern"]);
    assert_eq!((code, err.as_str()), (0, ""));
    assert!(text.ends_with("next: outwait weigh fern/waits.ndjson --policy fern/policy.yaml\n"), "{text}");
    let read = |name: &str| fs::read(home.path().join("fern").join(name)).unwrap();
    let before = ["waits.ndjson", "policy.yaml", "README.md"].map(read);
    // Again: harmless. As data: the same told to a program.
    let (code, json, _) = run(home.path(), &["demo", "fern", "--format", "json"]);
    let told: Value = serde_json::from_str(&json).unwrap();
    assert_eq!(
        (code, &told["schema"], &told["waits"]),
        (0, &"outwait/demo/1".into(), &"fern/waits.ndjson".into())
    );
    // Another seed would be other files.
    let (code, out, err) = run(home.path(), &["demo", "fern", "--seed", "2"]);
    assert_eq!((code, out.as_str()), (3, ""));
    assert!(
        err.starts_with("outwait: the demo was not written: fern/waits.ndjson is there already"),
        "{err}"
    );
    assert!(["waits.ndjson", "policy.yaml", "README.md"].map(read) == before, "nothing was touched");

    // Weighed at once, under its own policy whatever the environment names; one stream, to be quick.
    let arguments = ["demo", "fern", "--weigh", "--stream", "scan.job", "--format", "json"];
    let (code, json, err) =
        ended(outwait(home.path(), &arguments).env("OUTWAIT_POLICY", "missing.yaml").output().unwrap());
    assert_eq!(code, 0, "{err}");
    let set: AdviceSet = serde_json::from_str(&json).unwrap();
    assert_eq!((set.streams.len(), set.streams[0].kind.as_str(), set.assumed.len()), (1, "job", 0));
    let (_, weighed, _) = run(
        home.path(),
        &[
            "weigh",
            "fern/waits.ndjson",
            "--policy",
            "fern/policy.yaml",
            "--stream",
            "scan.job",
            "--format",
            "json",
        ],
    );
    assert!(json == weighed, "as `weigh` says it");
    let (code, text, _) = run(home.path(), &["demo", "fern", "--weigh", "--stream", "scan.job"]);
    assert!(
        code == 0 && text.contains("\n\n4,") && text.contains(" waits in 1 stream: 1 to wait out."),
        "{text}"
    );
}

#[test]
fn the_demo_keeps_out_of_foreign_folders() {
    let folder = folder(&[("mine.txt", b"mine")]);
    for (name, why) in [
        (".", "mine.txt is not the demo's, and lies where the demo was to go\n  name a folder that is empty"),
        (
            "mine.txt",
            "cannot create mine.txt: File exists (os error 17)\n  name a folder; a file is in the way",
        ),
    ] {
        let (code, out, err) = run(folder.path(), &["demo", name]);
        assert_eq!((code, out.as_str()), (3, ""), "{err}");
        assert!(err.contains(why), "{name}: {err}");
    }
    let left: Vec<PathBuf> =
        fs::read_dir(folder.path()).unwrap().map(|entry| entry.unwrap().path()).collect();
    assert_eq!(left, [folder.path().join("mine.txt")]);
}

// ---- library ----

#[test]
fn the_example_gives_advice() {
    // `cargo test` builds the examples beside the tests.
    let tests = std::env::current_exe().unwrap();
    let example = tests
        .ancestors()
        .nth(2)
        .unwrap()
        .join("examples")
        .join(format!("advise{}", std::env::consts::EXE_SUFFIX));
    if !example.is_file() {
        println!("skipped: the example is not built; a plain `cargo test` builds it");
        return;
    }
    let (code, out, err) = ended(std::process::Command::new(example).output().unwrap());
    assert_eq!((code, err.as_str()), (0, ""));
    assert!(out.starts_with("give up after 20.") || out.starts_with("give up after 19."), "{out}");
}
