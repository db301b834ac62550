//! The policy file: what is read, what is refused and how, what it is said to mean, and the files shipped.
#![allow(clippy::unwrap_used, clippy::panic)]

use insta::assert_snapshot;
use outwait::policy::{
    Backoff, Concern, Entry, GiveUp, Guard, Jitter, KEYS, Kind, MAX_BYTES, MAX_PROBLEMS, Policy, Retry,
    Section, Sticky, describe, parse, parse_bytes,
};
use outwait::stopping::{Aim, Fade, Pause, Worth};
use proptest::prelude::*;
use std::fmt::Write as _;
use std::path::PathBuf;

fn policies() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("policies")
}

fn shipped(name: &str) -> String {
    std::fs::read_to_string(policies().join(name)).unwrap()
}

fn read(text: &str) -> Policy {
    parse(text, "policy.yaml").unwrap_or_else(|error| panic!("{text}\n{error}"))
}

/// One entry that matches everything, with these keys.
fn entry(keys: &str) -> Entry {
    read(&format!("version: 1\nstreams:\n- {{match: '*', {keys}}}\n")).entries.remove(0)
}

#[test]
fn the_schema_of_the_contract() {
    let policy = read(
        r#"
version: 1
streams:
  - match: "catalogue.*"
    kind: request              # request | job | reply
    aim: rate                  # rate | finish | carrying_cost | deadline
    worth: {done: 1.0, failed: 0.0, gave_up: 0.0}
    fades: {half_life: 4h}
    attempt_cost: 0.0
    pause: {done: 0s, failed: 10ms, gave_up: 10ms}
    carrying_cost: 0.02/s
    deadline: 2s
    now: 800ms
    retry: {attempts: 3, load_ceiling: 1.2, sticky: from_data, repeatable: true}
    guard: {floor: 20ms, ceiling: 5s, largest_step: 50%, evidence: 300, window: 14d, slack: 1%}
    calls: [index.search]
"#,
    );
    let expected = Worth {
        aim: Aim::Rate,
        fade: Fade::HalfLife(14_400.0),
        pause: Pause { done: 0.0, failed: 0.01, gave_up: 0.01 },
        ..Worth::default()
    };
    let entry = &policy.entries[0];
    assert_eq!((policy.version, entry.number, entry.line), (1, 1, 4));
    assert_eq!(entry.kind, Kind::Request);
    assert_eq!(entry.worth, Some(expected));
    assert_eq!(entry.now, Some(GiveUp::After(0.8)));
    assert_eq!(
        entry.retry,
        Retry { attempts: Some(3), load_ceiling: Some(1.2), repeatable: true, ..Retry::default() }
    );
    assert_eq!(entry.guard, Guard { floor: Some(0.02), ceiling: Some(5.0), ..Guard::default() });
    assert_eq!(entry.calls, ["index.search"]);
    let idle: Vec<&str> = policy.warnings.iter().map(|w| w.key.as_str()).collect();
    assert_eq!(idle, ["carrying_cost", "deadline", "calls"]);
}

#[test]
fn every_way_to_write_a_value() {
    assert_eq!(entry("aim: finish").worth.unwrap().aim, Aim::Finish);
    for (text, per_second) in
        [("0.02/s", 0.02), ("6 / min", 0.1), ("36/h", 0.01), ("864/d", 0.01), ("'1e-3/s'", 1e-3)]
    {
        let aim = entry(&format!("aim: carrying_cost, carrying_cost: {text}")).worth.unwrap().aim;
        let Aim::CarryingCost(cost) = aim else { panic!("{aim:?}") };
        assert!((cost / per_second - 1.0).abs() < 1e-12, "{text}");
    }
    assert_eq!(
        entry("aim: deadline, deadline: 1min 30s, retry: {attempts: 5}").worth.unwrap().aim,
        Aim::Deadline { by: 90.0, attempts: 5 }
    );
    assert_eq!(entry("aim: rate, fades: {zero_at: 8h}").worth.unwrap().fade, Fade::ZeroAt(28_800.0));
    assert_eq!(entry("aim: rate, fades: {half_at: 1h}").worth.unwrap().fade, Fade::HalfAt(3_600.0));
    assert_eq!(entry("now: never").now, Some(GiveUp::Never));
    assert_eq!(entry("now: \"never\"").now, Some(GiveUp::Never));
    assert_eq!(entry("now: 2d 4h").now.unwrap().seconds(), 187_200.0);
    for (text, sticky) in [
        ("from_data", Sticky::FromData),
        ("unknown", Sticky::Unknown),
        ("0.25", Sticky::Given(0.25)),
        ("25%", Sticky::Given(0.25)),
        ("0", Sticky::Given(0.0)),
    ] {
        let entry = entry(&format!("aim: rate, retry: {{sticky: {text}}}"));
        assert_eq!(entry.retry.sticky, sticky);
        let phi = if let Sticky::Given(phi) = sticky { phi } else { 0.0 };
        assert_eq!(entry.worth.unwrap().sticky, phi);
    }
    assert_eq!(
        entry("retry: {backoff: {factor: 2, jitter: full}}").retry.backoff,
        Backoff { factor: 2.0, jitter: Jitter::Full }
    );
    let guard = entry("guard: {largest_step: 0.2, slack: 0, hysteresis: 2 %, cool_down: 0}").guard;
    assert_eq!((guard.largest_step, guard.slack, guard.hysteresis, guard.cool_down), (0.2, 0.0, 0.02, 0.0));
    // Anchors are followed; the second entry has the first one's guard.
    let policy =
        read("version: 1\nstreams:\n- {match: a, guard: &usual {floor: 1s}}\n- {match: b, guard: *usual}\n");
    assert_eq!(policy.entries[0].guard, policy.entries[1].guard);
    // A byte-order mark, other line ends, and JSON, which is YAML.
    assert!(parse("\u{feff}version: 1\r\nstreams:\r\n- match: a\r\n", "p").is_ok());
    assert!(parse(r#"{"version": 1, "streams": [{"match": "a", "aim": "rate"}]}"#, "p").is_ok());
}

#[test]
fn defaults() {
    assert_eq!(
        entry("kind: request"),
        Entry { number: 1, line: 3, worth: None, ..Entry::without_policy() },
        "an entry without an aim differs from no policy in its aim alone"
    );
    // The defaults written in the table of keys are those that apply.
    for key in KEYS.iter().filter(|key| matches!(key.section, Section::Guard | Section::Backoff)) {
        if key.default.starts_with("none") && key.name != "jitter" {
            continue;
        }
        let keys = match key.section {
            Section::Guard => format!("guard: {{{}: {}}}", key.name, key.default),
            _ => format!("retry: {{backoff: {{{}: {}}}}}", key.name, key.default),
        };
        assert_eq!(entry(&keys), entry(""), "{}", key.path());
    }
    assert_eq!(entry("kind: request, retry: {sticky: from_data, repeatable: false}"), entry(""));
    let priced = "aim: rate, worth: {done: 1, failed: 0, gave_up: 0}, attempt_cost: 0, \
                  pause: {done: 0s, failed: 0s, gave_up: 0s}";
    assert_eq!(entry(priced), entry("aim: rate"));
}

#[test]
fn the_first_match_speaks() {
    let policy = read("version: 1\nstreams:\n- match: 'a.?'\n- match: 'a.*'\n- match: b\n");
    for (stream, index) in [("a.x", Some(0)), ("a.xy", Some(1)), ("b", Some(2)), ("c", None)] {
        assert_eq!(policy.entry_for(stream).map(|(_, i)| i), index, "{stream}");
    }
}

#[test]
fn where_a_restart_is_free_the_data_give_the_floor() {
    for (keys, free) in [
        ("aim: rate", true),
        ("aim: finish", true),
        ("aim: rate, pause: {gave_up: 1ms}", false),
        ("aim: rate, pause: {failed: 1ms}", true),
        ("aim: rate, attempt_cost: 0.1", false),
        ("aim: finish, attempt_cost: 0.1", true),
        ("aim: rate, worth: {gave_up: -1}", false),
        ("aim: rate, worth: {gave_up: 0.2}, attempt_cost: 0.1", true),
        ("aim: rate, guard: {floor: 1ms}", false),
        ("aim: deadline, deadline: 1s", false),
        ("kind: job", false),
    ] {
        assert_eq!(entry(keys).restart_is_free(), free, "{keys}");
    }
    assert!(Entry::without_policy().restart_is_free());
}

/// Every message, beside the text that brings it about.
#[test]
fn refusals() {
    let long_list = format!("calls: [{}]", "a, ".repeat(101));
    let deep = format!("guard: {}1{}", "[".repeat(20), "]".repeat(20));
    let bomb = "- &a [x, x, x, x, x, x, x, x, x, x]\n".to_owned()
        + &(b'b'..b'i')
            .map(|c| {
                let before = (c - 1) as char;
                format!("- &{} [{}]\n", c as char, vec![format!("*{before}"); 10].join(", "))
            })
            .collect::<String>();
    let whole: Vec<(&str, String)> = vec![
        ("empty", String::new()),
        ("only a comment", "# nothing yet\n".into()),
        ("only a document mark", "---\n".into()),
        ("not a map", "- version: 1\n".into()),
        ("no version", "streams: [{match: a}]\n".into()),
        ("a later version", "version: 2\nstreams: [{match: a}]\n".into()),
        ("no streams", "version: 1\n".into()),
        ("no entries", "version: 1\nstreams: []\n".into()),
        ("streams without value", "version: 1\nstreams:\n".into()),
        ("streams as a map", "version: 1\nstreams: {match: a}\n".into()),
        ("an entry that is no map", "version: 1\nstreams: [catalogue]\n".into()),
        ("a key of an entry at the top", "version: 1\naim: rate\nstreams: [{match: a}]\n".into()),
        ("a tab", "version: 1\nstreams:\n- match: a\n\tkind: job\n".into()),
        ("a tab before a key", "version: 1\nstreams:\n\t- match: a\n".into()),
        ("a star without quotes", "version: 1\nstreams:\n- match: *\n".into()),
        ("a pattern without quotes", "version: 1\nstreams:\n- match: *.lookup\n".into()),
        ("an open quote", "version: 1\nstreams:\n- match: \"a\n".into()),
        ("a closing bracket too many", "version: 1\nstreams: [{match: a}]]\n".into()),
        ("two documents", "version: 1\nstreams: [{match: a}]\n---\nversion: 1\n".into()),
        ("an unknown anchor", "version: 1\nstreams: *all\n".into()),
        ("an alias in itself", "version: 1\nstreams: &all [*all]\n".into()),
        ("a bomb of aliases", bomb),
        ("merge keys", "version: 1\nstreams:\n- &a {match: a}\n- {<<: *a, match: b}\n".into()),
        ("a list as a key", "version: 1\nstreams: [{[a, b]: c}]\n".into()),
        ("a tag", "version: !!str 1\nstreams: [{match: a}]\n".into()),
        (
            "several at once",
            "version: one\nstreams:\n- match: a\n  aim: rates\n  now: 5\n- kind: job\n  gaurd: {}\n".into(),
        ),
    ];
    let keys = [
        "match: b",
        "gaurd: {floor: 1s}",
        "timeout: 1s",
        "attempts: 3",
        "guard: {flor: 1s}",
        "guard: {done: 1s}",
        "guard: 5s",
        "guard:",
        "guard: {slack: 1}",
        "guard: {slack: -1%}",
        "guard: {slack: small}",
        "guard: {largest_step: 50}",
        "guard: {largest_step: 0%}",
        "guard: {floor: 0s}",
        "guard: {floor: 5s, ceiling: 2s}",
        "guard: {floor: 2s, ceiling: 2000ms}",
        "guard: {evidence: 0}",
        "guard: {evidence: 12.5}",
        "guard: {window: 1 month}",
        "kind: requests",
        "kind: [job]",
        "aim: speed",
        "aim: rat",
        "aim: deadline",
        "aim: carrying_cost",
        "aim: carrying_cost, carrying_cost: 0.02",
        "aim: carrying_cost, carrying_cost: 0.02/week",
        "aim: carrying_cost, carrying_cost: -1/h",
        "worth: 1",
        "worth: {done: .nan}",
        "worth: {done: NaN}",
        "worth: {done: 0}",
        "worth: {done: 1e13}",
        "worth: {gave_up: much}",
        "fades: {}",
        "fades: {half_life: 1h, zero_at: 2h}",
        "fades: {half_life: 0h}",
        "attempt_cost: -0.1",
        "pause: 10ms",
        "pause: {gave_up: -5ms}",
        "pause: {gave_up: 5 parsecs}",
        "pause: {gave_up: 5}",
        "now: 800",
        "now: 0s",
        "now: Never",
        "now: 400y",
        "now: 20000000000s",
        "retry: {attempts: 0}",
        "retry: {attempts: 1000}",
        "retry: {attempts: -1}",
        "retry: {load_ceiling: 0.5}",
        "retry: {sticky: 1}",
        "retry: {sticky: 100%}",
        "retry: {sticky: sometimes}",
        "retry: {sticky: form_data}",
        "retry: {repeatable: yes}",
        "retry: {backoff: {factor: 0.5}}",
        "retry: {backoff: {jitter: equal}}",
        "retry: {backoff: {ceiling: 10s}}",
        "calls: index.search",
        "calls: [index search]",
        "calls: ['index.*']",
        "calls: [[a]]",
        "now: \"a\\e[31m\\u202e very long value that goes on and on and on and on and on until it is cut off\"",
        &long_list,
        &deep,
    ];
    let mut gallery = String::new();
    let patterns = ["''", "catalogue lookup", "'[ab]'", "'{a,b}'", "~", "'a/**/b c'"];
    for pattern in patterns {
        let text = format!("version: 1\nstreams:\n- match: {pattern}\n");
        writeln!(gallery, "# match: {pattern}\n{}\n", parse(&text, "p.yaml").unwrap_err()).unwrap();
    }
    for key in keys {
        let text = format!("version: 1\nstreams:\n- match: a\n  {key}\n");
        // Keys that belong together stand on lines of their own.
        let text = if key.starts_with("aim") { text.replace(", ", "\n  ") } else { text };
        writeln!(gallery, "# {key}\n{}\n", parse(&text, "p.yaml").unwrap_err()).unwrap();
    }
    for (name, text) in whole {
        writeln!(gallery, "# {name}\n{}\n", parse(&text, "p.yaml").unwrap_err()).unwrap();
    }
    assert_snapshot!(gallery);
}

#[test]
fn refusals_as_data() {
    let error = parse("version: 1\nstreams:\n- match: a\n  guard: {slack: 3}\n", "p.yaml").unwrap_err();
    assert_snapshot!(serde_json::to_string_pretty(&error).unwrap());
}

/// Every warning, beside the text that brings it about.
#[test]
fn warnings() {
    let mut gallery = String::new();
    for keys in [
        "kind: job",
        "deadline: 1s",
        "carrying_cost: 1/h",
        "aim: rate",
        "aim: rate\n  carrying_cost: 1/h\n  deadline: 1s\n  pause: {gave_up: 1s}",
        "aim: finish\n  worth: {done: 2}\n  fades: {zero_at: 1h}\n  attempt_cost: 1\n  pause: {gave_up: 1s}",
        "aim: deadline\n  deadline: 1s\n  worth: {done: 2}",
        "aim: rate\n  worth: {gave_up: 1}\n  guard: {floor: 1s}",
        "aim: finish\n  now: 10s\n  guard: {floor: 1s, ceiling: 5s}",
        "aim: finish\n  now: never\n  guard: {floor: 1s, ceiling: 5s}",
        "aim: finish\n  guard: {floor: 1s}\n  retry: {attempts: 3}",
        "aim: finish\n  guard: {floor: 1s}\n  kind: job\n  retry: {attempts: 3, repeatable: false}",
        "aim: finish\n  guard: {floor: 1s}\n  retry: {attempts: 2, load_ceiling: 2.5, repeatable: true}",
        "aim: finish\n  calls: [a, b.c]",
    ] {
        let policy = read(&format!("version: 1\nstreams:\n- match: a\n  {keys}\n"));
        writeln!(gallery, "# {}", keys.replace("\n ", ",")).unwrap();
        for warning in &policy.warnings {
            writeln!(gallery, "line {}: {warning}", warning.at.line).unwrap();
        }
        gallery.push('\n');
    }
    assert_snapshot!(gallery);
}

#[test]
fn entries_that_no_stream_reaches() {
    let shadowed = |patterns: &[&str]| -> Vec<(usize, usize)> {
        let list: String = patterns.iter().map(|p| format!("- {{match: '{p}'}}\n")).collect();
        let policy = read(&format!("version: 1\nstreams:\n{list}"));
        let by = policy.warnings.iter().filter_map(|w| match w.what {
            Concern::Shadowed { by, .. } => Some((w.entry.unwrap(), by)),
            _ => None,
        });
        by.collect()
    };
    assert_eq!(shadowed(&["a.*", "a.b", "*", "c"]), [(2, 1), (4, 3)]);
    assert_eq!(shadowed(&["a", "b", "a"]), [(3, 1)]);
    assert_eq!(shadowed(&["a.b", "a.?", "a.*", "a.??"]), [(4, 3)]);
    assert!(shadowed(&["*.a", "b.*", "a?", "?"]).is_empty());
}

#[test]
fn limits() {
    let huge = parse(&" ".repeat(MAX_BYTES + 1), "p").unwrap_err();
    assert!(huge.to_string().starts_with("p:1:1: the policy has 1048577 bytes"), "{huge}");
    let wrong: String = (0..200).map(|i| format!("  key{i}: 1\n")).collect();
    let many = parse(&format!("version: 1\nstreams:\n- match: a\n{wrong}"), "p").unwrap_err();
    assert_eq!((many.problems.len(), many.unlisted), (MAX_PROBLEMS, 200 - MAX_PROBLEMS));
    assert!(many.to_string().ends_with("and 150 more"));
    let endless: String = (0..60_000).map(|i| format!("? k{i}\n")).collect();
    let many = parse(&endless, "p").unwrap_err();
    assert_eq!(many.problems.len() + many.unlisted, 60_002);
    let entries: String = (0..20_001).map(|i| format!("- match: s{i}\n")).collect();
    let many = parse(&format!("version: 1\nstreams:\n{entries}"), "p").unwrap_err();
    assert!(many.to_string().contains("20001 entries"), "{many}");

    let latin = parse_bytes(b"version: 1\nstreams:\n- match: caf\xe9\n", "p").unwrap_err();
    assert_eq!(latin.to_string(), "p:3:13: the byte 0xe9 is not UTF-8 text\n  save the file as UTF-8");
    assert!(parse_bytes(b"version: 1\nstreams: [{match: a}]", "p").is_ok());
}

#[test]
fn shipped_policies_are_faultless() {
    let mut names: Vec<String> = std::fs::read_dir(policies())
        .unwrap()
        .map(|file| file.unwrap().file_name().into_string().unwrap())
        .collect();
    names.sort();
    assert_eq!(
        names,
        [
            "batch-job.yaml",
            "call-with-fallback.yaml",
            "fernhollow.yaml",
            "job-lease.yaml",
            "queue-place.yaml",
            "reference.yaml",
            "reply.yaml",
            "service-request.yaml",
        ]
    );
    let mut said = String::new();
    for name in names {
        let policy = parse(&shipped(&name), &name).unwrap_or_else(|error| panic!("{error}"));
        assert_eq!(policy.warnings, [], "{name}");
        writeln!(said, "# {name}\n{}", describe(&policy, &[])).unwrap();
    }
    assert_snapshot!(said);
}

/// Logs to follow: what is read of an entry, and what is said of one that cannot be meant.
#[test]
fn logs_to_follow() {
    let with = |follow: &str| {
        format!("version: 1\nstreams: [{{match: a, aim: finish, pause: {{gave_up: 1s}}}}]\nfollow:\n{follow}")
    };
    let policy = parse(
        &with(
            "  - {file: waits.ndjson, as: desk.north}\n  - {file: access.log, pattern: '(?<elapsed_ms>\\d+) (?<ending>\\d+)', ending_of: '*=done'}\n",
        ),
        "p",
    )
    .unwrap();
    let [one, two] = &policy.followed[..] else { panic!("{policy:?}") };
    assert_eq!(
        (one.path.to_str(), one.options.one_stream.as_deref()),
        (Some("waits.ndjson"), Some("desk.north"))
    );
    assert!(one.options.pattern.is_none() && two.options.pattern.is_some() && two.options.mapping.is_some());
    let said = describe(&policy, &[]).to_string();
    assert!(
        said.contains("The log waits.ndjson is followed. All of its waits are of the stream `desk.north`."),
        "{said}"
    );
    for (follow, told) in [
        ("  - {file: a, patern: x}", "p:4:15: follow: `patern` is not a key here\n  did you mean `pattern`?"),
        (
            "  - {file: a, stream: x}",
            "p:4:15: follow: `stream` is not a key here\n  write `as: NAME`, the stream of all its waits",
        ),
        ("  - {pattern: x}", "`file` is missing"),
        ("  - {file: a}\n  - {file: a}", "p:5:5: follow.file: `a` stands there already"),
        ("  - {file: a, pattern: '(x'}", "p:4:"),
        ("  - {file: a, pattern: '(?<stream>x)'}", "no capture tells how long the wait was"),
        ("  - {file: a, columns: 'took=x'}", "\"took\" is not a field"),
        ("  - {file: a, as: 'two words'}", "the stream name holds ' '"),
        ("  - {file: a, input: parquet}", "wanted: ndjson, csv, journal or pattern"),
        ("  a", "a list of entries"),
    ] {
        let error = parse(&with(follow), "p").unwrap_err().to_string();
        assert!(error.contains(told), "{follow}:\n{error}");
    }
}

/// The reference names every key, and above one occurrence of it says what the table of keys says.
#[test]
fn the_reference_names_every_key() {
    let mut told: Vec<(String, String)> = Vec::new();
    let mut comment = String::new();
    for line in shipped("reference.yaml").lines() {
        match line.trim().strip_prefix('#') {
            Some(text) => comment = format!("{} {}", comment, text.trim()),
            None => {
                let name = line.trim().trim_start_matches("- ").split(':').next().unwrap().to_owned();
                told.push((name, std::mem::take(&mut comment)));
            }
        }
    }
    for key in KEYS {
        let text = format!("{} Takes {}. Default: {}.", key.about, key.takes, key.default);
        assert!(
            told.iter().any(|(name, comment)| name == key.name && comment.ends_with(&text)),
            "policies/reference.yaml lacks this above `{}`:\n{text}",
            key.name
        );
        assert!(!key.example.is_empty() && key.about.ends_with('.'));
    }
}

/// A key in the table that no line of the program reads would take anything.
#[test]
fn every_key_is_read() {
    for key in KEYS {
        let text = match key.section {
            Section::File => format!("{}: '%'\n", key.name),
            Section::Entry => format!("version: 1\nstreams: [{{{}: '%'}}]\n", key.name),
            Section::Backoff => {
                format!("version: 1\nstreams: [{{retry: {{backoff: {{{}: '%'}}}}}}]\n", key.name)
            }
            Section::Scrape => {
                let url = if key.name == "url" { "" } else { "url: 'http://a/', " };
                format!("version: 1\nstreams: [{{match: a}}]\nscrape: [{{{url}{}: '%'}}]\n", key.name)
            }
            Section::Follow => {
                let file = if key.name == "file" { "" } else { "file: a, " };
                format!("version: 1\nstreams: [{{match: a}}]\nfollow: [{{{file}{}: '%'}}]\n", key.name)
            }
            section @ (Section::Weekly | Section::Telemetry) => {
                let path = section.path();
                format!("version: 1\nstreams: [{{match: a}}]\n{path}: {{{}: '%'}}\n", key.name)
            }
            section => format!("version: 1\nstreams: [{{{}: {{{}: '%'}}}}]\n", section.path(), key.name),
        };
        let error = parse(&text, "p").unwrap_err();
        assert!(error.problems.iter().any(|p| p.key == key.path()), "{}:\n{error}", key.path());
        assert!(
            !error.problems.iter().any(|p| p.what.to_string().contains("is not a key here")),
            "{}:\n{error}",
            key.path()
        );
    }
}

/// The example in a message must be what the key takes.
#[test]
fn every_example_is_fit() {
    for key in KEYS {
        let (name, example) = (key.name, key.example);
        let mut entry = match key.section {
            Section::File => continue,
            Section::Scrape => {
                let url = if name == "url" { "" } else { "url: 'http://a/', " };
                read(&format!("version: 1\nstreams: [{{match: a}}]\nscrape: [{{{url}{name}: {example}}}]\n"));
                continue;
            }
            Section::Follow => {
                let file = if name == "file" { "" } else { "file: a, " };
                read(&format!(
                    "version: 1\nstreams: [{{match: a}}]\nfollow: [{{{file}{name}: {example}}}]\n"
                ));
                continue;
            }
            section @ (Section::Weekly | Section::Telemetry) => {
                let path = section.path();
                read(&format!("version: 1\nstreams: [{{match: a}}]\n{path}: {{{name}: {example}}}\n"));
                continue;
            }
            Section::Entry => format!("{name}: {example}"),
            Section::Backoff => format!("retry: {{backoff: {{{name}: {example}}}}}"),
            section => format!("{}: {{{name}: {example}}}", section.path()),
        };
        if name != "match" {
            entry += ", match: a";
        }
        read(&format!("version: 1\nstreams: [{{{entry}}}]\n"));
    }
}

#[test]
fn said_stream_by_stream() {
    let policy = read(&shipped("fernhollow.yaml"));
    let said = describe(&policy, &["catalogue.lookup", "scan.job", "unheard.of"]);
    assert_snapshot!("said_of_streams", said.to_string());
    let json = serde_json::to_value(&said).unwrap();
    assert_snapshot!("said_as_data", serde_json::to_string_pretty(&json["subjects"][0]).unwrap());
    let policy = read("version: 1\nstreams:\n- {match: a, aim: rate, calls: [b]}\n- {match: b}\n");
    assert_snapshot!("said_with_warnings", describe(&policy, &["a"]).to_string());
    assert_snapshot!(
        "said_without_policy",
        outwait::policy::Subject::of(Some("a"), &Entry::without_policy()).to_string()
    );
}

proptest! {
    /// Whatever is done to a good policy, reading it neither panics nor runs away, and every finding has its place.
    #[test]
    fn mutations_of_the_reference(
        cuts in prop::collection::vec((any::<prop::sample::Index>(), 0usize..12, mutation()), 1..6)
    ) {
        let mut bytes = shipped("reference.yaml").into_bytes();
        for (at, length, new) in cuts {
            let from = at.index(bytes.len());
            let upto = (from + length).min(bytes.len());
            bytes.splice(from..upto, new);
        }
        check_findings(&bytes)?;
    }

    #[test]
    fn random_bytes(bytes in prop::collection::vec(any::<u8>(), 0..300)) {
        check_findings(&bytes)?;
    }

    #[test]
    fn random_yaml(pieces in prop::collection::vec(piece(), 0..60)) {
        check_findings(pieces.concat().as_bytes())?;
        check_findings(format!("version: 1\nstreams:\n- match: a\n  {}", pieces.concat()).as_bytes())?;
    }
}

fn check_findings(bytes: &[u8]) -> Result<(), TestCaseError> {
    let lines = bytes.iter().filter(|&&b| b == b'\n' || b == b'\r').count() + 2;
    match parse_bytes(bytes, "p") {
        Ok(policy) => {
            prop_assert!(!policy.entries.is_empty());
            for warning in &policy.warnings {
                prop_assert!((1..=lines).contains(&warning.at.line) && warning.at.column >= 1);
            }
            let said = describe(&policy, &["catalogue.lookup", ""]);
            prop_assert!(!said.to_string().is_empty());
            for Entry { worth, guard, .. } in &policy.entries {
                let worth = worth.unwrap_or_default();
                let numbers = [worth.done, worth.failed, worth.gave_up, worth.attempt_cost, worth.pause.done];
                let guards =
                    [guard.largest_step, guard.window, guard.slack, guard.hysteresis, guard.cool_down];
                prop_assert!(numbers.iter().chain(&guards).all(|number| number.is_finite()));
            }
            prop_assert!(serde_json::to_string(&said).is_ok());
        }
        Err(error) => {
            prop_assert!(!error.problems.is_empty());
            for problem in &error.problems {
                prop_assert!((1..=lines).contains(&problem.at.line), "{}", problem);
                prop_assert!(problem.at.column >= 1);
            }
        }
    }
    Ok(())
}

fn mutation() -> impl Strategy<Value = Vec<u8>> {
    prop_oneof![prop::collection::vec(any::<u8>(), 0..6), piece().prop_map(|piece| piece.as_bytes().to_vec()),]
}

fn piece() -> impl Strategy<Value = &'static str> {
    prop::sample::select(vec![
        "a", ": ", ":\n", "\n", "\n  ", "\n- ", "- ", "? ", ", ", "{", "}", "[", "]", "&a ", "*a", "!t ",
        "|\n", ">-\n", "\"", "'", "# ", "---\n", "...\n", "\t", "\r", "~", "<<: ", "-1", "1e400", ".inf",
        "NaN", "0", "1%", "5s", "never", "guard", "retry", "worth", "match", "aim", "rate", "deadline",
        "streams", "version", "calls", "*", "é", "\u{2028}", "\0",
    ])
}
