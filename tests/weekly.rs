//! The week's recommendations: what is to be signed on top, in every form, and with what was settled.

// A test may fail.
#![allow(clippy::unwrap_used, clippy::panic)]

#[path = "support/command.rs"]
mod command;

use std::fs;
use std::path::Path;

use command::run;
use serde_json::Value;
use tempfile::TempDir;

/// The demo scenario.
fn folder() -> TempDir {
    let folder = tempfile::tempdir().unwrap();
    let (code, _, err) = run(folder.path(), &["demo", "."]);
    assert_eq!(code, 0, "{err}");
    folder
}

const WEEKLY: [&str; 4] = ["weekly", "waits.ndjson", "--policy", "policy.yaml"];

fn weekly(folder: &Path, more: &[&str]) -> String {
    let (code, out, err) = run(folder, &[&WEEKLY[..], more].concat());
    assert_eq!(code, 0, "{err}");
    out
}

fn settled(folder: &Path, stream: &str, decision: &str) {
    let text = format!(
        "schema: outwait/settled/1\nstreams:\n  {stream}:\n    - {{{decision}, at: 2026-11-02T10:00:00Z, by: Ada, why: '<b>'}}\n"
    );
    fs::write(folder.join("settled.yaml"), text).unwrap();
}

fn row<'a>(week: &'a Value, stream: &str) -> (bool, &'a Value) {
    let find = |part: &str| week[part].as_array().unwrap().iter().find(|row| row["stream"] == stream);
    match find("sign") {
        Some(row) => (true, row),
        None => (false, find("rest").unwrap_or_else(|| panic!("no {stream}"))),
    }
}

#[test]
fn every_form_says_the_same() {
    let folder = folder();
    assert_eq!(weekly(folder.path(), &["--folder", "week"]), "");
    let read = |form: &str| fs::read_to_string(folder.path().join(format!("week/weekly.{form}"))).unwrap();
    let week: Value = serde_json::from_str(&read("json")).unwrap();
    assert_eq!(week["schema"], "outwait/weekly/1");
    let sign = week["sign"].as_array().unwrap();
    assert!(!sign.is_empty());
    // Ranked by worth.
    let worth: Vec<f64> = sign.iter().map(|row| row["worth_per_day"].as_f64().unwrap()).collect();
    assert!(worth.is_sorted_by(|a, b| a >= b), "{worth:?}");
    let (markdown, html) = (read("md"), read("html"));
    let mut table = csv::Reader::from_reader(fs::File::open(folder.path().join("week/weekly.csv")).unwrap());
    let rows: Vec<csv::StringRecord> = table.records().map(Result::unwrap).collect();
    assert_eq!(rows.len(), sign.len() + week["rest"].as_array().unwrap().len());
    for (row, cells) in sign.iter().zip(&rows) {
        let stream = row["stream"].as_str().unwrap();
        assert_eq!((&cells[0], &cells[3]), (stream, "yes"));
        assert!(
            markdown.contains(&format!("### `{stream}`")) && html.contains(&format!("<h3>{stream}</h3>"))
        );
        for caution in row["cautions"].as_array().unwrap() {
            let code = caution["code"].as_str().unwrap();
            assert!(markdown.contains(code) && html.contains(code), "{code}");
        }
    }
    for text in [&markdown, &html] {
        assert!(
            text.contains("licensed practice")
                && text.contains("idempotent")
                && text.contains("Retries make load")
        );
    }
    self_contained(&html);
    assert_eq!(
        weekly(folder.path(), &["--format", "json"]),
        read("json"),
        "the same data give the same bytes"
    );
}

/// No script, nothing fetched, every element closed, ids distinct; whole pictures inside.
fn self_contained(html: &str) {
    assert!(html.starts_with("<!DOCTYPE html>") && !html.contains("<script") && html.contains("<svg"));
    // A hatch refers to its own page.
    let elsewhere = html.replace("url(#", "");
    for fetched in ["src=", "url(", "@import", "<link", "href=\"http"] {
        assert!(!elsewhere.contains(fetched), "{fetched}");
    }
    let body = html.split_once("<body>").unwrap().1.split_once("</body>").unwrap().0;
    let xml = roxmltree::Document::parse_with_options(
        &format!("<body>{body}</body>"),
        roxmltree::ParsingOptions::default(),
    )
    .map(|xml| xml.descendants().filter_map(|n| n.attribute("id").map(str::to_owned)).collect::<Vec<_>>());
    let mut ids = xml.unwrap();
    let all = ids.len();
    ids.sort();
    ids.dedup();
    assert_eq!(ids.len(), all);
    assert!(html.contains("prefers-color-scheme:dark") && html.contains("@page{size:A4"));
}

/// The worth of a change is the difference of the rates times the time waited a day.
#[test]
fn worth_is_rate_times_time() {
    let folder = folder();
    let week: Value = serde_json::from_str(&weekly(folder.path(), &["--format", "json"])).unwrap();
    let weigh = ["weigh", "waits.ndjson", "--policy", "policy.yaml", "--format", "json"];
    let advice: Value = serde_json::from_str(&run(folder.path(), &weigh).1).unwrap();
    let stream =
        advice["streams"].as_array().unwrap().iter().find(|a| a["stream"] == "courier.slot").unwrap();
    let (decision, evidence) = (&stream["advice"], &stream["evidence"]);
    let time =
        |key: &str| evidence[key].as_str().unwrap().parse::<jiff::Timestamp>().unwrap().as_second() as f64;
    let waited = evidence["waited_s"].as_f64().unwrap() * 86_400.0 / (time("to") - time("from"));
    let (now, then) = (&decision["now"]["rate_per_s"], &decision["proposal"]["then"]["rate_per_s"]);
    let (now, then) = (now.as_f64().unwrap(), then.as_f64().unwrap());
    let (_, row) = row(&week, "courier.slot");
    let near = |a: f64, b: f64| (a - b).abs() <= 1e-9 * b.abs();
    assert!(near(row["worth_per_day"].as_f64().unwrap(), waited * (then - now)), "{row}");
    assert!(near(row["hours_per_day"].as_f64().unwrap(), waited * (1.0 - now / then) / 3_600.0), "{row}");
    // The waits of the window, added up by hand.
    let mut sum = 0.0;
    for line in fs::read_to_string(folder.path().join("waits.ndjson")).unwrap().lines() {
        let wait: Value = serde_json::from_str(line).unwrap();
        let at = wait["at"].as_f64().or_else(|| {
            Some(wait["at"].as_str()?.parse::<jiff::Timestamp>().ok()?.as_millisecond() as f64 / 1e3)
        });
        if wait["stream"] == "courier.slot"
            && at.unwrap() >= (time("to") / 86_400.0).floor() * 86_400.0 - 13.0 * 86_400.0
        {
            sum += wait["elapsed"].as_f64().unwrap() - wait["entered"].as_f64().unwrap_or(0.0);
        }
    }
    let told = evidence["waited_s"].as_f64().unwrap();
    assert!((told / sum - 1.0).abs() < 0.2, "{told} {sum}");
}

#[test]
fn what_was_settled_counts() {
    let folder = folder();
    let path = folder.path();
    let week = |more: &[&str]| -> Value {
        serde_json::from_str(&weekly(
            path,
            &[&["--settled", "settled.yaml", "--format", "json"], more].concat(),
        ))
        .unwrap()
    };
    settled(path, "courier.slot", "state: pinned, give_up_after: 6h");
    let pinned = week(&[]);
    let (sign, courier) = row(&pinned, "courier.slot");
    assert!(!sign && courier["settled"]["state"] == "pinned", "{courier}");
    settled(path, "courier.slot", "state: postponed, until: 2027-01-01T00:00:00Z");
    let postponed = week(&[]);
    assert!(!row(&postponed, "courier.slot").0);
    settled(path, "courier.slot", "state: postponed, until: 2026-11-10T00:00:00Z");
    let over = week(&[]);
    assert!(row(&over, "courier.slot").0, "what was postponed comes back");
    // Markup in what people write stays text.
    let html = weekly(path, &["--settled", "settled.yaml", "--format", "html"]);
    assert!(html.contains("&lt;b&gt;") && !html.contains("<b>"));
    settled(path, "gone.desk", "state: accepted, give_up_after: 5s");
    let vanished = week(&[]);
    let (sign, gone) = row(&vanished, "gone.desk");
    assert!(!sign && gone["verdict"] == "not_enough_evidence", "{gone}");
    assert!(gone["changed"][0].as_str().unwrap().contains("vanished"));
}

#[test]
fn a_week_without_data_and_bad_input() {
    let folder = folder();
    let path = folder.path();
    // The courier's waits end ten days before all others'.
    let waits = fs::read_to_string(path.join("waits.ndjson")).unwrap();
    let time = |line: &str| {
        let wait: Value = serde_json::from_str(line).unwrap();
        let text = wait["at"].as_str().map(|at| at.parse::<jiff::Timestamp>().unwrap().as_second() as f64);
        text.or(wait["at"].as_f64()).unwrap()
    };
    let newest = waits.lines().map(time).fold(0.0, f64::max);
    let kept: Vec<&str> = waits
        .lines()
        .filter(|line| !line.contains("courier.slot") || time(line) < newest - 10.0 * 86_400.0)
        .collect();
    fs::write(path.join("silent.ndjson"), kept.join("\n")).unwrap();
    let (code, out, err) =
        run(path, &["weekly", "silent.ndjson", "--policy", "policy.yaml", "--format", "json"]);
    assert_eq!(code, 0, "{err}");
    let week: Value = serde_json::from_str(&out).unwrap();
    let (_, courier) = row(&week, "courier.slot");
    assert!(courier["changed"].to_string().contains("the week has no data"), "{courier}");
    fs::write(path.join("file"), "").unwrap();
    for (arguments, code) in [
        (&["weekly"][..], 2),
        (&["weekly", "none.ndjson"], 3),
        (&["weekly", "waits.ndjson", "--settled", "none.yaml"], 3),
        (&["weekly", "waits.ndjson", "--folder", "file/week"], 3),
        (&["weekly", "waits.ndjson", "--output", "no/where.md"], 5),
        (&["weekly", "waits.ndjson", "--folder", "a", "--output", "b"], 2),
    ] {
        let (ended, _, err) = run(path, arguments);
        assert_eq!(ended, code, "{arguments:?}: {err}");
    }
}
