//! The gate is shut where a time in force costs more than its slack, or a caller leaves early; and says so to machines.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

#[path = "support/command.rs"]
mod command;
#[path = "support/node.rs"]
mod node;

use std::fs;
use std::io::{Read, Write};
use std::net::TcpListener;
use std::path::Path;
use std::sync::Arc;

use command::run;
use serde_json::Value;
use tempfile::TempDir;

/// 400 waits each: look-ups, log-logistic of scale 50 ms and shape 1.5, whose best time is below 200 ms; and searches of
/// the same law ten times as fast.
fn waits() -> String {
    let line = |stream: &str, scale: f64, i: u32| {
        let u = (f64::from(i) + 0.5) / 400.0;
        let t = scale * (u / (1.0 - u)).powf(1.0 / 1.5);
        let at = 1_764_547_200.25 + f64::from(i * 149 % 400) * 60.0;
        format!("{{\"stream\":\"{stream}\",\"elapsed\":{t:.6},\"ending\":\"done\",\"at\":{at}}}\n")
    };
    (0..400).map(|i| line("catalogue.lookup", 0.05, i) + &line("index.search", 0.005, i)).collect()
}

const POLICY: &str = "\
version: 1
streams:
  - match: \"catalogue.*\"
    aim: rate
    pause: {gave_up: 10ms}
    now: 5s
    retry: {attempts: 3, repeatable: true}
    calls: [index.search]
  - match: \"index.*\"
    aim: rate
    pause: {gave_up: 1ms}
    now: 20ms
    retry: {attempts: 2, repeatable: true}
";

fn folder() -> TempDir {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("waits.ndjson"), waits()).unwrap();
    fs::write(folder.path().join("policy.yaml"), POLICY).unwrap();
    folder
}

const GATE: [&str; 4] = ["gate", "waits.ndjson", "--policy", "policy.yaml"];

fn gate(folder: &Path, more: &[&str]) -> (i32, Value) {
    let (code, out, err) = run(folder, &[&GATE[..], more, &["--format", "json"]].concat());
    assert!(code < 2, "{err}");
    (code, serde_json::from_str(&out).unwrap())
}

fn advised(gate: &Value, stream: &str) -> f64 {
    let found = gate["streams"].as_array().unwrap().iter().find(|s| s["stream"] == stream);
    found.unwrap()["advised_s"].as_f64().unwrap()
}

#[test]
fn shut_by_what_costs_too_much_and_open_at_the_best() {
    let folder = folder();
    let (code, shut) = gate(folder.path(), &[]);
    assert_eq!((code, &shut["open"], &shut["schema"]), (1, &Value::Bool(false), &"outwait/gate/1".into()));
    let worst = &shut["streams"][0];
    assert_eq!((&worst["stream"], &worst["verdict"]), (&"catalogue.lookup".into(), &"costs_too_much".into()));
    assert_eq!((&worst["source"], &worst["in_force_s"]), (&"policy".into(), &5.0.into()));
    assert!(worst["costs"].as_f64().unwrap() > worst["slack"].as_f64().unwrap());
    // At the advised times nothing costs anything.
    let times: Vec<String> = ["catalogue.lookup", "index.search"]
        .iter()
        .map(|stream| format!("{stream}={:.9}s", advised(&shut, stream)))
        .collect();
    let (code, open) = gate(folder.path(), &["--time", &times[0], "--time", &times[1]]);
    assert_eq!((code, &open["open"]), (0, &Value::Bool(true)), "{open}");
    assert!(open["safety"].as_str().unwrap().contains("licensed practice"));
}

#[test]
fn a_caller_that_leaves_early_shuts_it() {
    let folder = folder();
    // Two attempts of 20 ms and a pause: the callee's schedule ends at 41 ms.
    let (_, first) = gate(folder.path(), &[]);
    assert_eq!(first["chains"], serde_json::json!([]));
    let (code, shut) = gate(folder.path(), &["--time", "catalogue.lookup=40ms"]);
    assert_eq!(code, 1);
    assert_eq!(shut["chains"][0]["code"], "caller_leaves_first");
    assert_eq!(shut["chains"][0]["callee"], "index.search");
    let (_, open) = gate(folder.path(), &["--time", "catalogue.lookup=42ms"]);
    assert_eq!(open["chains"], serde_json::json!([]));
}

/// Times from `export`, JSON and YAML, stand before the policy's; `--time` before both.
#[test]
fn times_as_exported() {
    let folder = folder();
    let settled = "schema: outwait/settled/1\nstreams:\n  catalogue.lookup:\n    - {state: pinned, at: 2026-11-02T10:00:00Z, \
                   give_up_after: 100ms, by: Ada, why: x}\n";
    fs::write(folder.path().join("settled.yaml"), settled).unwrap();
    for (form, file) in [("json", "t.json"), ("yaml", "t.yaml")] {
        let export = [
            "export",
            "--settled",
            "settled.yaml",
            "--policy",
            "policy.yaml",
            "--format",
            form,
            "--output",
            file,
        ];
        assert_eq!(run(folder.path(), &export).0, 0);
        let (_, gate) = gate(folder.path(), &["--times", file]);
        let found =
            gate["streams"].as_array().unwrap().iter().find(|s| s["stream"] == "catalogue.lookup").unwrap();
        assert_eq!((&found["source"], &found["in_force_s"]), (&"times".into(), &0.1.into()));
    }
    let (_, by_hand) =
        gate(folder.path(), &["--settled", "settled.yaml", "--time", "catalogue.lookup=never"]);
    let found =
        by_hand["streams"].as_array().unwrap().iter().find(|s| s["stream"] == "catalogue.lookup").unwrap();
    assert_eq!((&found["source"], &found["in_force_s"]), (&"--time".into(), &"never".into()));
}

/// Judged by the published schema (`junit-10.xsd` of the xUnit plugin of the Jenkins project, as the source archive of PyPI's
/// pytest carries it), and its counts by hand.
#[test]
fn junit() {
    let folder = folder();
    let (code, _, err) = run(
        folder.path(),
        &[&GATE[..], &["--junit", "gate.xml", "--time", "catalogue.lookup=40ms", "--time", "gone=1s"]]
            .concat(),
    );
    assert_eq!(code, 1, "{err}");
    let text = fs::read_to_string(folder.path().join("gate.xml")).unwrap();
    let xml = roxmltree::Document::parse(&text).unwrap();
    let suite = xml.descendants().find(|node| node.has_tag_name("testsuite")).unwrap();
    let count = |name: &str| xml.descendants().filter(|node| node.has_tag_name(name)).count().to_string();
    assert_eq!(suite.attribute("tests").unwrap(), count("testcase"));
    assert_eq!(suite.attribute("failures").unwrap(), count("failure"));
    assert_eq!(suite.attribute("skipped").unwrap(), count("skipped"));
    assert!(text.contains("name=\"gone\""), "{text}");
    let script = "const {validateXML} = require('xmllint-wasm');\
                  const schema = readFileSync(folder + '/junit-10.xsd', 'utf8');\
                  const judge = contents => validateXML({xml: [{fileName: 'gate.xml', contents}], schema});\
                  const said = await judge(input);\
                  if (!said.valid) throw new Error(said.rawOutput);\
                  console.log((await judge(input.replace('<testcase', '<case'))).valid ? 'sleeps' : 'sound');";
    let judged = node::asked("junit-10.xsd", script, &text);
    assert!(judged.is_none_or(|said| said.trim() == "sound"));
}

/// A daemon's answer is taken over HTTP, a broken one is told.
#[test]
fn from_a_daemon() {
    let folder = folder();
    let weigh = ["weigh", "waits.ndjson", "--policy", "policy.yaml", "--format", "json"];
    let (_, advice, _) = run(folder.path(), &weigh);
    let listener = TcpListener::bind("127.0.0.1:0").unwrap();
    let from = format!("http://{}", listener.local_addr().unwrap());
    let server = std::thread::spawn(move || {
        let answer = |status: &str, body: &str, length: usize| {
            let (mut stream, _) = listener.accept().unwrap();
            let mut request = [0; 4096];
            let n = stream.read(&mut request).unwrap();
            let head = format!("HTTP/1.1 {status}\r\nContent-Length: {length}\r\n\r\n");
            stream.write_all(head.as_bytes()).unwrap();
            stream.write_all(body.as_bytes()).unwrap();
            String::from_utf8_lossy(&request[..n]).into_owned()
        };
        let first = answer("200 OK", &advice, advice.len());
        assert!(first.starts_with("GET /v1/advice HTTP/1.1\r\n"), "{first}");
        answer("200 OK", &advice, advice.len());
        let asked = answer("200 OK", "{\"expected_regret\":0.25}", 24);
        assert!(asked.starts_with("GET /v1/streams/catalogue.lookup/whatif?give_up_after=9 "), "{asked}");
        answer("302 Found", "", 0);
        answer("200 OK", &advice[..100], advice.len());
        answer("200 OK", "{}", 2);
    });
    let ask = |more: &[&str]| {
        run(folder.path(), &[&["gate", "--from", &from, "--policy", "policy.yaml"], more].concat())
    };
    let (code, out, err) = ask(&[]);
    assert_eq!(code, 1, "{err}");
    assert!(out.contains("shut  catalogue.lookup"), "{out}");
    let (code, out, err) = ask(&["--time", "catalogue.lookup=9s"]);
    assert_eq!(code, 1, "{err}");
    assert!(out.contains("giving up after 9.00 s costs"), "{out}");
    let (code, _, err) = ask(&[]);
    assert!(code == 5 && err.contains("302"), "{err}");
    let (code, _, err) = ask(&[]);
    assert!(code == 5 && err.contains("disconnected"), "{err}");
    assert_eq!(ask(&[]).0, 3);
    server.join().unwrap();
    // Nobody listens any more.
    assert_eq!(ask(&[]).0, 5);
}

/// A daemon behind TLS: trusted by a file or by the system's variable, refused by nobody's word.
#[test]
fn from_a_daemon_over_tls() {
    use tokio_rustls::rustls::{ServerConfig, ServerConnection, StreamOwned, crypto};
    let folder = folder();
    let made = rcgen::generate_simple_self_signed(vec!["localhost".into()]).unwrap();
    fs::write(folder.path().join("root.pem"), made.cert.pem()).unwrap();
    fs::write(folder.path().join("empty.pem"), "").unwrap();
    let key = made.signing_key.serialize_der().try_into().unwrap();
    let config = ServerConfig::builder_with_provider(Arc::new(crypto::ring::default_provider()))
        .with_safe_default_protocol_versions()
        .unwrap()
        .with_no_client_auth()
        .with_single_cert(vec![made.cert.der().clone()], key);
    let config = Arc::new(config.unwrap());
    let weigh = ["weigh", "waits.ndjson", "--policy", "policy.yaml", "--format", "json"];
    let (_, advice, _) = run(folder.path(), &weigh);
    let listener = TcpListener::bind("127.0.0.1:0").unwrap();
    let from = format!("https://localhost:{}", listener.local_addr().unwrap().port());
    let server = std::thread::spawn(move || {
        for _ in 0..3 {
            let session = ServerConnection::new(Arc::clone(&config)).unwrap();
            let mut stream = StreamOwned::new(session, listener.accept().unwrap().0);
            if stream.read(&mut [0; 4096]).is_ok() {
                let head = format!("HTTP/1.1 200 OK\r\nContent-Length: {}\r\n\r\n", advice.len());
                stream.write_all(&[head.as_bytes(), advice.as_bytes()].concat()).unwrap();
                stream.conn.send_close_notify();
                let _ = stream.flush();
            }
        }
    });
    let gate = ["gate", "--from", &from, "--policy", "policy.yaml"];
    let (code, out, err) = run(folder.path(), &[&gate[..], &["--trust", "root.pem"]].concat());
    assert_eq!(code, 1, "{err}");
    assert!(out.contains("shut  catalogue.lookup"), "{out}");
    let by_system = command::outwait(folder.path(), &gate).env("SSL_CERT_FILE", "root.pem").output();
    assert_eq!(command::ended(by_system.unwrap()).0, 1);
    let (code, _, err) = run(folder.path(), &gate);
    assert!(code == 5 && err.contains("certificate"), "{err}");
    server.join().unwrap();
    let (code, _, err) = run(folder.path(), &[&gate[..], &["--trust", "empty.pem"]].concat());
    assert!(code == 3 && err.contains("empty.pem"), "{err}");
}

#[test]
fn usage() {
    let folder = folder();
    for (arguments, code) in [
        (&["gate"][..], 2),
        (&["gate", "waits.ndjson", "--time", "catalogue.lookup"], 2),
        (&["gate", "waits.ndjson", "--time", "a b=1s"], 2),
        (&["gate", "waits.ndjson", "--time", "a=5"], 2),
        (&["gate", "waits.ndjson", "--from", "ftp://a"], 2),
        (&["gate", "none.ndjson"], 3),
        (&["gate", "waits.ndjson", "--times", "policy.yaml"], 3),
        (&["gate", "waits.ndjson", "--junit", "no/where.xml"], 5),
        // Nothing is in force, so nothing is judged.
        (&["gate", "waits.ndjson"], 4),
    ] {
        let (ended, _, err) = run(folder.path(), arguments);
        assert_eq!(ended, code, "{arguments:?}: {err}");
    }
}
