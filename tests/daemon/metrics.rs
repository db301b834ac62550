//! `/metrics`: true, and read by others.

use std::collections::{BTreeMap, HashMap, HashSet};
use std::net::TcpListener;
use std::process::{Command, Stdio};

use crate::client::{get, post};
use crate::house::{House, courier, until};

fn weighed() -> House {
    let file = tempfile::NamedTempFile::new().unwrap().into_temp_path().keep().unwrap();
    std::fs::write(
        &file,
        "version: 1\nstreams:\n  - match: \"courier.*\"\n    kind: request\n    aim: rate\n    worth: {done: 1.0}\n    \
         pause: {gave_up: 2s}\n    now: 60s\n    retry: {load_ceiling: 2.5}\n    guard: {floor: 100ms, ceiling: 10m, slack: 1%}\n",
    )
    .unwrap();
    let house = House::with(|config| config.policy = outwait::serve::PolicyFile::at(&file));
    post(house.address, courier("courier.slot", 2_000).as_bytes());
    until("advice", || Some(()).filter(|()| get(house.address, "/v1/advice/courier.slot").status == 200));
    house
}

/// Name, labels, value of each sample; what the text format 0.0.4 asks for is asserted on the way
/// (prometheus.io/docs/instrumenting/exposition_formats).
fn samples(text: &str) -> Vec<(String, BTreeMap<String, String>, f64)> {
    assert!(text.ends_with('\n'));
    let mut types: HashMap<&str, &str> = HashMap::new();
    let (mut all, mut seen) = (Vec::new(), HashSet::new());
    for line in text.lines() {
        if let Some(rest) = line.strip_prefix("# TYPE ") {
            let (name, kind) = rest.split_once(' ').unwrap();
            assert!(["counter", "gauge", "histogram"].contains(&kind));
            assert!(types.insert(name, kind).is_none(), "{name} is described twice");
            continue;
        }
        if line.starts_with('#') {
            assert!(line.starts_with("# HELP "), "{line}");
            continue;
        }
        let (series, value) = line.rsplit_once(' ').unwrap();
        assert!(seen.insert(series), "{series} stands twice");
        let (name, labels) = series
            .split_once('{')
            .map_or((series, ""), |(name, rest)| (name, rest.strip_suffix('}').unwrap()));
        assert!(
            name.starts_with("outwait_")
                && name.bytes().all(|b| b.is_ascii_lowercase() || b.is_ascii_digit() || b == b'_')
        );
        let base = ["_bucket", "_sum", "_count"]
            .iter()
            .find_map(|end| name.strip_suffix(end).filter(|b| types.get(b) == Some(&"histogram")));
        let kind = types[base.unwrap_or(name)];
        assert_eq!(kind == "counter", name.ends_with("_total"), "{name} {kind}");
        let labels = labels
            .split("\",")
            .filter(|pair| !pair.is_empty())
            .map(|pair| pair.split_once("=\"").unwrap())
            .map(|(name, value)| (name.to_owned(), value.trim_end_matches('"').to_owned()))
            .collect();
        all.push((name.to_owned(), labels, value.parse().unwrap()));
    }
    all
}

#[test]
fn the_survival_histogram_is_the_curve() {
    let house = weighed();
    let answer = get(house.address, "/metrics");
    assert_eq!(answer.header("content-type"), Some("text/plain; version=0.0.4; charset=utf-8"));
    let all = samples(answer.text());
    let value = |name: &str, pairs: &[(&str, &str)]| {
        all.iter()
            .find(|(n, labels, _)| {
                n == name && pairs.iter().all(|(k, v)| labels.get(*k).is_some_and(|found| found == v))
            })
            .unwrap_or_else(|| panic!("{name} {pairs:?}"))
            .2
    };
    // Uniform on (0, 20) for half of 2,000, the rest at 90: 10 s is over for 500 of them, 50 s for 1,000.
    assert!((value("outwait_wait_seconds_bucket", &[("le", "10")]) - 500.0).abs() <= 10.0);
    assert_eq!(value("outwait_wait_seconds_bucket", &[("le", "50")]), 1_000.0);
    assert_eq!(value("outwait_wait_seconds_count", &[]), 2_000.0);
    assert_eq!(value("outwait_wait_seconds_bucket", &[("le", "+Inf")]), 2_000.0);
    assert!((value("outwait_wait_seconds_sum", &[]) - 2_000.0 * (0.5 * 10.0 + 0.5 * 90.0)).abs() < 1_000.0);
    let buckets: Vec<f64> =
        all.iter().filter(|(n, ..)| n == "outwait_wait_seconds_bucket").map(|s| s.2).collect();
    assert!(buckets.len() > 8 && buckets.windows(2).all(|w| w[0] <= w[1]));
    assert_eq!(value("outwait_give_up_seconds", &[("at", "present")]), 60.0);
    // Nobody has settled anything here.
    assert!(!all.iter().any(|(_, labels, _)| labels.get("at").is_some_and(|at| at == "settled")));
    let advised = value("outwait_give_up_seconds", &[("at", "advised")]);
    assert!((19.0..23.0).contains(&advised));
    // Half done at 60 s, by hand: (0.5 * 10 + 0.5 * 62) s for half a completion.
    assert!((value("outwait_reward_rate", &[("at", "present")]) - 0.5 / 36.0).abs() < 5e-4);
    assert!((value("outwait_attempts_per_request", &[("at", "present")]) - 2.0).abs() < 0.05);
    assert_eq!(value("outwait_slack_ratio", &[]), 0.01);
    assert_eq!(value("outwait_attempts_ceiling", &[]), 2.5);
    assert_eq!(value("outwait_evidence_waits", &[("ending", "done")]), 2_000.0);
    assert_eq!(value("outwait_action", &[("action", "give_up_after")]), 1.0);
    assert_eq!(value("outwait_waits_total", &[]), 2_000.0);
    assert_eq!(value("outwait_batches_total", &[("outcome", "counted")]), 1.0);
    let shapes: f64 = all.iter().filter(|(n, ..)| n == "outwait_remaining_wait").map(|s| s.2).sum();
    assert_eq!(shapes, 1.0);
}

/// A parser that is not ours: the crate `prometheus-parse`.
#[test]
fn a_general_parser_reads_it() {
    let house = weighed();
    let text = get(house.address, "/metrics");
    let scrape =
        prometheus_parse::Scrape::parse(text.text().lines().map(|line| Ok(line.to_owned()))).unwrap();
    let histogram = scrape
        .samples
        .iter()
        .find_map(|sample| match (&sample.metric[..], &sample.value) {
            ("outwait_wait_seconds", prometheus_parse::Value::Histogram(buckets)) => Some(buckets),
            _ => None,
        })
        .expect("the survival histogram");
    assert!(histogram.iter().any(|bucket| bucket.less_than == 50.0 && bucket.count == 1_000.0));
    for (name, _, value) in samples(text.text()).iter().filter(|(name, ..)| !name.contains("_seconds_")) {
        let theirs = scrape.samples.iter().filter(|sample| sample.metric == *name);
        let same = |sample: &prometheus_parse::Sample| match sample.value {
            prometheus_parse::Value::Counter(v) | prometheus_parse::Value::Gauge(v) => v == *value,
            _ => false,
        };
        assert!(theirs.clone().any(same), "{name} {value}");
    }
}

/// The rules name metrics that there are, and parse as YAML with what each rule needs.
#[test]
fn the_rules_fit_the_metrics() {
    let house = weighed();
    post(house.address, b"nonsense\n");
    let text = get(house.address, "/metrics");
    let names: HashSet<&str> =
        text.text().lines().filter_map(|line| line.strip_prefix("# TYPE ")?.split(' ').next()).collect();
    let rules: serde_yaml::Value =
        serde_yaml::from_str(include_str!("../../examples/alerts/outwait.rules.yaml")).unwrap();
    let mut recorded = HashSet::new();
    let mut alerts = 0;
    for group in rules["groups"].as_sequence().unwrap() {
        for rule in group["rules"].as_sequence().unwrap() {
            let expression = rule["expr"].as_str().unwrap();
            if let Some(name) = rule["record"].as_str() {
                recorded.insert(name.to_owned());
            } else {
                alerts += 1;
                assert!(rule["alert"].as_str().unwrap().starts_with("Outwait"));
                assert!(rule["annotations"]["description"].as_str().is_some_and(|text| !text.is_empty()));
            }
            let words = expression.split(|c: char| !(c.is_ascii_alphanumeric() || "_:".contains(c)));
            for word in words.filter(|word| word.starts_with("outwait")) {
                assert!(names.contains(word) || recorded.contains(word), "{word} in {expression}");
            }
        }
    }
    assert!(alerts >= 4);
}

fn installed(program: &str) -> bool {
    Command::new(program)
        .arg("--version")
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .status()
        .is_ok_and(|status| status.success())
}

/// The metrics server that most distributions carry, its own linter, and its reading of our rules.
#[test]
fn a_metrics_server_scrapes_it_and_reads_the_rules() {
    if !installed("prometheus") || !installed("promtool") {
        println!("skipped: no metrics server is installed (Debian package `prometheus`)");
        return;
    }
    let rules = concat!(env!("CARGO_MANIFEST_DIR"), "/examples/alerts/outwait.rules.yaml");
    let checked = Command::new("promtool").args(["check", "rules", rules]).output().unwrap();
    assert!(checked.status.success(), "{}", String::from_utf8_lossy(&checked.stderr));
    let tests = concat!(env!("CARGO_MANIFEST_DIR"), "/examples/alerts/outwait.rules.test.yaml");
    let tested = Command::new("promtool").args(["test", "rules", tests]).output().unwrap();
    assert!(tested.status.success(), "{}", String::from_utf8_lossy(&tested.stdout));
    let house = weighed();
    let text = get(house.address, "/metrics");
    let mut lint = Command::new("promtool")
        .args(["check", "metrics"])
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    std::io::Write::write_all(&mut lint.stdin.take().unwrap(), &text.body).unwrap();
    let lint = lint.wait_with_output().unwrap();
    assert!(
        lint.status.success(),
        "{}{}",
        String::from_utf8_lossy(&lint.stderr),
        String::from_utf8_lossy(&lint.stdout)
    );
    // Scraped for real.
    let folder = tempfile::tempdir().unwrap();
    let port = TcpListener::bind("127.0.0.1:0").unwrap().local_addr().unwrap().port();
    let config = folder.path().join("server.yaml");
    std::fs::write(&config, format!("global: {{scrape_interval: 1s}}\nscrape_configs:\n  - job_name: outwait\n    static_configs: [{{targets: ['{}']}}]\n", house.address)).unwrap();
    let mut server = Command::new("prometheus")
        .arg(format!("--config.file={}", config.display()))
        .arg(format!("--storage.tsdb.path={}", folder.path().join("data").display()))
        .arg(format!("--web.listen-address=127.0.0.1:{port}"))
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn()
        .unwrap();
    let address = ([127, 0, 0, 1], port).into();
    let found = until("a scrape", || {
        std::net::TcpStream::connect(address).ok()?;
        let answer = get(address, "/api/v1/query?query=histogram_quantile(0.5,outwait_wait_seconds_bucket)");
        // It answers so until it stands.
        if answer.status != 200 {
            return None;
        }
        let value = answer.json()["data"]["result"][0]["value"][1].as_str()?.parse::<f64>().ok()?;
        Some(value)
    });
    server.kill().unwrap();
    server.wait().unwrap();
    // Half are over by 20 s; the bucket that holds the median ends at 20.
    assert!((10.0..=50.0).contains(&found), "{found}");
}
