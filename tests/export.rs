//! Exported times are what was settled, in forms that other programs read.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

#[path = "support/command.rs"]
mod command;
#[path = "support/node.rs"]
mod node;

use std::fs;
use std::path::{Path, PathBuf};
use std::process::Command;

use command::run;
use outwait::export::{Export, Stream, environment, metrics, render};
use serde_json::Value;
use tempfile::TempDir;

const POLICY: &str = "\
version: 1
streams:
  - match: \"catalogue.*\"
    aim: rate
    pause: {gave_up: 10ms}
    now: 800ms
    retry: {attempts: 3, repeatable: true, backoff: {factor: 2, jitter: full}}
  - match: \"*\"
    kind: job
    aim: finish
    pause: {gave_up: 60s}
";

const SETTLED: &str = "\
schema: outwait/settled/1
streams:
  catalogue.lookup:
    - {state: accepted, at: 2026-11-23T10:00:00Z, give_up_after: 400ms, by: Ada, why: agreed}
    - {state: refused, at: 2026-11-30T10:00:00Z, by: Ada, why: not now}
  helpdesk.call:
    - {state: pinned, at: 2026-11-23T10:00:00Z, give_up_after: never, by: Bob, why: people}
  index.rebuild:
    - {state: postponed, at: 2026-11-23T10:00:00Z, until: 2026-12-23T10:00:00Z, by: Bob, why: freeze}
  scan.job:
    - {state: accepted, at: 2026-11-23T10:00:00Z, give_up_after: 25min, by: Bob, why: night}
";

fn folder() -> TempDir {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("settled.yaml"), SETTLED).unwrap();
    fs::write(folder.path().join("policy.yaml"), POLICY).unwrap();
    folder
}

const EXPORT: [&str; 5] = ["export", "--settled", "settled.yaml", "--policy", "policy.yaml"];

fn exported(folder: &Path, more: &[&str]) -> String {
    let (code, out, err) = run(folder, &[&EXPORT[..], more].concat());
    assert_eq!((code, err.as_str()), (0, ""), "{more:?}");
    out
}

fn templates() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("examples/templates")
}

fn shipped(folder: &Path, name: &str) -> String {
    exported(folder, &["--template", templates().join(name).to_str().unwrap()])
}

#[test]
fn only_what_was_settled_in_every_form() {
    let folder = folder();
    let json: Export = serde_json::from_str(&exported(folder.path(), &[])).unwrap();
    let yaml: Export = serde_yaml::from_str(&exported(folder.path(), &["--format", "yaml"])).unwrap();
    assert_eq!(json, yaml);
    let told: Vec<(&str, Option<f64>, &str)> =
        json.streams.iter().map(|s| (s.stream.as_str(), s.give_up_after_s, s.status.as_str())).collect();
    // A refusal leaves what was accepted before; what was postponed was never settled.
    let expected = [
        ("catalogue.lookup", Some(0.4), "accepted"),
        ("helpdesk.call", None, "pinned"),
        ("scan.job", Some(1500.0), "accepted"),
    ];
    assert_eq!(told, expected);
    assert_eq!(json.streams[0].attempts, Some(3));
    assert!(json.streams[2].cautions.iter().any(|c| c.code == "work_repeated"));
    assert!(json.safety.contains("licensed practice"));
}

#[test]
fn metrics_text_is_read_by_another_parser() {
    let folder = folder();
    let text = exported(folder.path(), &["--format", "metrics"]);
    let lines = text.lines().map(|line| Ok(line.to_owned()));
    let scrape = prometheus_parse::Scrape::parse(lines).unwrap();
    let value = |stream: &str| {
        let found = scrape.samples.iter().find(|s| {
            s.metric == "outwait_settled_give_up_seconds" && s.labels.get("stream") == Some(stream)
        });
        match found.unwrap().value {
            prometheus_parse::Value::Gauge(value) => value,
            ref other => panic!("{other:?}"),
        }
    };
    assert_eq!((value("catalogue.lookup"), value("scan.job")), (0.4, 1500.0));
    assert_eq!(value("helpdesk.call"), f64::INFINITY);
}

/// The shell itself reads the environment file.
#[cfg(unix)]
#[test]
fn a_shell_reads_the_environment_file() {
    let folder = folder();
    fs::write(folder.path().join("env"), exported(folder.path(), &["--format", "env"])).unwrap();
    let script = ". ./env; echo $CATALOGUE_LOOKUP_GIVE_UP_SECONDS $CATALOGUE_LOOKUP_ATTEMPTS $HELPDESK_CALL_GIVE_UP_SECONDS";
    let output = Command::new("sh").args(["-euc", script]).current_dir(folder.path()).output().unwrap();
    assert_eq!(String::from_utf8(output.stdout).unwrap(), "0.4 3 never\n");
}

#[test]
fn names_that_become_one_are_refused() {
    let stream = |name: &str| Stream {
        stream: name.into(),
        kind: "request".into(),
        give_up_after_s: Some(1.0),
        status: "accepted".into(),
        by: None,
        at: None,
        attempts: None,
        pause_s: 0.0,
        backoff_factor: 1.0,
        jitter: "none".into(),
        repeatable: false,
        retry_budget: None,
        cautions: Vec::new(),
    };
    let export = Export {
        schema: outwait::export::SCHEMA.into(),
        made_at: None,
        safety: String::new(),
        streams: vec![stream("a.b"), stream("a-b")],
    };
    assert_eq!(
        environment(&export).unwrap_err().to_string(),
        "the streams a.b and a-b would both be written as A_B"
    );
    assert!(metrics(&export).contains("a-b"));
}

#[test]
fn check_shows_the_difference_and_writing_keeps_the_mode() {
    let folder = folder();
    let check = [&EXPORT[..], &["--format", "env", "--output", "out.env", "--check"]].concat();
    let write = &check[..check.len() - 1];
    assert_eq!(run(folder.path(), &check).0, 1);
    assert!(!folder.path().join("out.env").exists());
    assert_eq!(run(folder.path(), write), (0, String::new(), String::new()));
    assert_eq!(run(folder.path(), &check), (0, String::new(), String::new()));
    let path = folder.path().join("out.env");
    let text = fs::read_to_string(&path).unwrap();
    fs::write(&path, text.replace("=0.4", "=0.9")).unwrap();
    #[cfg(unix)]
    fs::set_permissions(&path, std::os::unix::fs::PermissionsExt::from_mode(0o600)).unwrap();
    let (code, out, _) = run(folder.path(), &check);
    assert_eq!(code, 1);
    assert!(
        out.contains("-CATALOGUE_LOOKUP_GIVE_UP_SECONDS=0.9\n+CATALOGUE_LOOKUP_GIVE_UP_SECONDS=0.4\n"),
        "{out}"
    );
    assert_eq!(run(folder.path(), write).0, 0);
    assert_eq!(fs::read_to_string(&path).unwrap(), text);
    #[cfg(unix)]
    {
        use std::os::unix::fs::PermissionsExt;
        assert_eq!(fs::metadata(&path).unwrap().permissions().mode() & 0o777, 0o600);
    }
    let (code, _, err) = run(folder.path(), &[&EXPORT[..], &["--output", "no/where.json"]].concat());
    assert_eq!(code, 5, "{err}");
    assert!(err.contains("no/where.json"), "{err}");
}

#[test]
fn a_template_is_strict_and_stands_alone() {
    let folder = folder();
    for (template, place, told) in [
        ("{% for s in streams %}\n  {{ s.give_up }}\n{% endfor %}", ":2:6:", "is not there"),
        ("a\n{{ nothing }}", ":2:4:", "is not there"),
        ("{{ 1 | wonder }}", ":1:", "wonder"),
        ("{{ stream('desk').kind }}", ":1:", "no time of the stream"),
        ("{% include '/etc/passwd' %}", ":1:", "include"),
        ("{% for s in streams %}", ":1:", ""),
        ("{{ stream('helpdesk.call').give_up_after_s | seconds }}", ":1:", "never"),
        (
            "{% for a in range(9999) %}{% for b in range(9999) %}{% endfor %}{% endfor %}",
            ":1:",
            "come to an end",
        ),
        ("{{ 1.5 | round_up('often') }}", ":1:", "not a unit"),
    ] {
        fs::write(folder.path().join("t.j2"), template).unwrap();
        let (code, out, err) = run(folder.path(), &[&EXPORT[..], &["--template", "t.j2"]].concat());
        assert_eq!((code, out.as_str()), (3, ""), "{template}");
        assert!(err.contains(&format!("t.j2{place}")) && err.contains(told), "{template}: {err}");
    }
    let filters = "{% set s = stream('catalogue.lookup') %}{{ s.give_up_after_s | milliseconds }} \
                   {{ 0.0761 | round_up('10ms') | seconds }} {{ 5430.5 | duration }} {{ s | attempts(9) }} \
                   {{ s | backoff | join(' ') }} {{ s.stream | constant }} {{ 'a\"b' | quoted }}";
    fs::write(folder.path().join("t.j2"), filters).unwrap();
    assert_eq!(
        exported(folder.path(), &["--template", "t.j2"]),
        "400 0.08 1h30m30s500ms 3 0.01 0.02 CATALOGUE_LOOKUP \"a\\\"b\""
    );
}

/// Every shipped template works as it is, also over nothing but one stream.
#[test]
fn shipped_templates_work() {
    let folder = folder();
    for entry in fs::read_dir(templates()).unwrap() {
        let name = entry.unwrap().file_name().into_string().unwrap();
        let text = shipped(folder.path(), &name);
        let safe = text.contains("licensed practice") || name.starts_with("grpc");
        assert!(safe && !text.contains("{{"), "{name}: {text}");
    }
}

/// `timeout` and `retryPolicy` as in the service config's own document (gRPC, doc/service_config.md and proposal A6):
/// durations are decimal seconds with `s`, at most 5 attempts, backoffs above 0.
#[test]
fn grpc_service_config() {
    let folder = folder();
    let text = shipped(folder.path(), "grpc-service-config.json.j2");
    let config: Value = serde_json::from_str(&text).unwrap();
    let methods = config["methodConfig"].as_array().unwrap();
    assert_eq!(methods.len(), 3);
    assert_eq!(methods[0]["name"][0], serde_json::json!({"service": "catalogue", "method": "lookup"}));
    // Three attempts of 400 ms, pauses of 10 and 20 ms.
    assert_eq!(methods[0]["timeout"], "1.230000000s");
    assert_eq!(methods[0]["retryPolicy"]["maxAttempts"], 3);
    assert_eq!(methods[0]["retryPolicy"]["maxBackoff"], "0.020000000s");
    assert!(methods[1].get("timeout").is_none());
    assert!(methods[2].get("retryPolicy").is_none(), "work that may not be repeated is not retried");
    read_by_its_own_client(&text);
}

/// The standard's JavaScript client refuses what it does not understand.
fn read_by_its_own_client(config: &str) {
    let script = "const {validateServiceConfig} = require('@grpc/grpc-js/build/src/service-config.js');\
                  const config = validateServiceConfig(JSON.parse(input));\
                  if (config.methodConfig.length !== 3) throw new Error('lost');\
                  console.log(JSON.stringify(config.methodConfig[0].timeout));";
    if let Some(out) = node::asked("node_modules/@grpc/grpc-js", script, config) {
        // google.protobuf.Duration: 1 s and 230 million ns.
        assert_eq!(out.trim(), "{\"seconds\":1,\"nanos\":230000000}");
    }
}

/// Times of the Gateway API are GEP-2257 durations, `^([0-9]{1,5}(h|m|s|ms)){1,4}$`, and `backendRequest` is no longer than
/// `request` (GEP-1742); both from memory of the published documents. Its published schema, as npm's
/// `@kubernetes-models/gateway-api` carries it, judges each route too.
#[test]
fn gateway_api_route() {
    let folder = folder();
    let text = shipped(folder.path(), "httproute.yaml.j2");
    let routes: Vec<Value> = serde_yaml::Deserializer::from_str(&text)
        .map(|document| serde::Deserialize::deserialize(document).unwrap())
        .collect();
    assert_eq!(routes.len(), 3);
    for route in &routes {
        assert_eq!(
            (&route["apiVersion"], &route["kind"]),
            (&"gateway.networking.k8s.io/v1".into(), &"HTTPRoute".into())
        );
        let rule = &route["spec"]["rules"][0];
        let Some(timeouts) = rule.get("timeouts") else { continue };
        let [request, backend] =
            ["request", "backendRequest"].map(|key| gep_2257(timeouts[key].as_str().unwrap()));
        assert!(backend <= request, "{timeouts}");
    }
    assert_eq!(routes[0]["spec"]["rules"][0]["timeouts"]["backendRequest"], "400ms");
    assert_eq!(routes[0]["spec"]["rules"][0]["retry"]["attempts"], 2);
    assert!(routes[1]["spec"]["rules"][0].get("timeouts").is_none());
    assert!(routes[2]["spec"]["rules"][0].get("retry").is_none());
    let script = "const models = folder + '/node_modules/@kubernetes-models/gateway-api/gateway.networking.k8s.io/v1';\
                  const {HTTPRoute} = await import('file://' + models + '/HTTPRoute.js');\
                  const routes = JSON.parse(input); routes.forEach(route => new HTTPRoute(route).validate());\
                  routes[0].spec.rules[0].timeouts.request = '1.5s';\
                  try { new HTTPRoute(routes[0]).validate(); console.log('sleeps'); } catch { console.log('sound'); }";
    let judged =
        node::asked("node_modules/@kubernetes-models/gateway-api", script, &Value::from(routes).to_string());
    assert!(judged.is_none_or(|said| said.trim() == "sound"));
}

/// Seconds of a duration of that form.
fn gep_2257(text: &str) -> f64 {
    let (mut rest, mut sum, mut parts) = (text, 0.0, 0);
    while !rest.is_empty() {
        let digits = rest.find(|c: char| !c.is_ascii_digit()).unwrap();
        assert!((1..=5).contains(&digits), "{text}");
        let end = rest[digits..].find(|c: char| c.is_ascii_digit()).map_or(rest.len(), |n| digits + n);
        let unit = match &rest[digits..end] {
            "h" => 3600.0,
            "m" => 60.0,
            "s" => 1.0,
            "ms" => 1e-3,
            other => panic!("{other} in {text}"),
        };
        sum += rest[..digits].parse::<f64>().unwrap() * unit;
        (rest, parts) = (&rest[end..], parts + 1);
    }
    assert!((1..=4).contains(&parts), "{text}");
    sum
}

#[test]
fn source_constants() {
    let folder = folder();
    let rust = shipped(folder.path(), "timeouts.rs.j2");
    assert!(
        rust.contains("pub const CATALOGUE_LOOKUP: Option<Duration> = Some(Duration::from_millis(400));"),
        "{rust}"
    );
    assert!(rust.contains("pub const HELPDESK_CALL: Option<Duration> = None;"), "{rust}");
    let python = shipped(folder.path(), "timeouts.py.j2");
    fs::write(folder.path().join("timeouts.py"), python).unwrap();
    let script = "import timeouts as t; print(t.CATALOGUE_LOOKUP, t.HELPDESK_CALL, t.SCAN_JOB)";
    match Command::new("python3").args(["-c", script]).current_dir(folder.path()).output() {
        Ok(output) => assert_eq!(String::from_utf8(output.stdout).unwrap(), "0.4 None 1500\n"),
        Err(_) => println!("skipped: there is no python3"),
    }
    let template = templates().join("systemd-job.conf.j2");
    let unit = exported(folder.path(), &["--template", template.to_str().unwrap(), "--stream", "scan.job"]);
    assert!(unit.contains("\nTimeoutStartSec=1500\n") && unit.contains("Restart=no"), "{unit}");
}

#[test]
fn over_nothing() {
    let export = Export {
        schema: outwait::export::SCHEMA.into(),
        made_at: None,
        safety: String::new(),
        streams: Vec::new(),
    };
    assert_eq!(render("{{ streams | length }}", "t", &export).unwrap(), "0");
    let folder = folder();
    let (code, _, err) = run(folder.path(), &["export"]);
    assert_eq!(code, 2);
    assert!(err.contains("--settled"), "{err}");
    let (code, _, _) = run(folder.path(), &["export", "--proposed", "--settled", "settled.yaml"]);
    assert_eq!(code, 2);
}
