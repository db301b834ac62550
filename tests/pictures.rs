//! `weigh --pictures`: every stream's pictures, whole, in files that neither meet nor escape, and a page of them.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

use std::fmt::Write;
use std::fs;
use std::path::Path;
use std::process::Output;

use assert_cmd::Command;
use roxmltree::Document;
use tempfile::TempDir;

const STREAMS: [&str; 5] = ["desk/lending", "desk.lending", "Desk.lending", "../shelf", "zweigstelle.ü"];

fn waits() -> String {
    let mut lines = String::new();
    for (k, stream) in STREAMS.iter().enumerate() {
        for i in 1..=400 {
            let age = f64::from(i * (k as i32 + 1)) / 100.0;
            let (age, ending) = if age < 9.0 { (age, "done") } else { (9.0, "gave_up") };
            writeln!(lines, r#"{{"stream":"{stream}","elapsed":{age},"ending":"{ending}"}}"#).unwrap();
        }
    }
    writeln!(lines, r#"{{"stream":"attic","elapsed":3,"ending":"waiting"}}"#).unwrap();
    lines
}

fn weigh(folder: &Path, pictures: &Path, more: &[&str]) -> Output {
    let file = folder.join("waits.ndjson");
    fs::write(&file, waits()).unwrap();
    let mut command = Command::cargo_bin("outwait").unwrap();
    command.env_remove("OUTWAIT_POLICY").arg("weigh").arg(&file).arg("--pictures").arg(pictures).args(more);
    command.output().unwrap()
}

fn names(folder: &Path) -> Vec<String> {
    let mut names: Vec<String> =
        fs::read_dir(folder).unwrap().map(|e| e.unwrap().file_name().into_string().unwrap()).collect();
    names.sort();
    names
}

#[test]
fn four_pictures_a_stream_and_a_page() {
    let folder = TempDir::new().unwrap();
    let pictures = folder.path().join("a").join("pictures");
    let output = weigh(folder.path(), &pictures, &["--picture-width", "640"]);
    assert!(output.status.success(), "{output:?}");
    let files = names(&pictures);
    assert_eq!(files.len(), 4 * (STREAMS.len() + 1) + 1, "{files:?}");
    assert_eq!(names(folder.path()), ["a", "waits.ndjson"]);
    let folded: std::collections::HashSet<String> = files.iter().map(|f| f.to_lowercase()).collect();
    assert_eq!(folded.len(), files.len());
    for file in files.iter().filter(|f| f.ends_with(".svg")) {
        let text = fs::read_to_string(pictures.join(file)).unwrap();
        let svg = Document::parse(&text).unwrap();
        assert_eq!(svg.root_element().attribute("width"), Some("640"), "{file}");
        assert!(!text.contains("NaN") && !text.contains("inf\""), "{file}");
    }
    let page = fs::read_to_string(pictures.join("index.html")).unwrap();
    assert!(!page.contains("<script") && !page.contains(" src=") && !page.contains("@import"));
    let links: Vec<&str> =
        page.split("<a href=\"").skip(1).filter_map(|rest| rest.split('"').next()).collect();
    let files_named: Vec<&&str> = links.iter().filter(|link| !link.starts_with('#')).collect();
    assert_eq!(files_named.len(), 4 * (STREAMS.len() + 1));
    assert!(files_named.iter().all(|file| pictures.join(file).is_file()), "{files_named:?}");
    let ids: Vec<&str> = page.split(" id=\"").skip(1).filter_map(|rest| rest.split('"').next()).collect();
    assert_eq!(ids.len(), ids.iter().collect::<std::collections::HashSet<_>>().len(), "ids are unique");
    // The same waits, the same bytes.
    let again = folder.path().join("again");
    assert!(weigh(folder.path(), &again, &["--picture-width", "640"]).status.success());
    for file in files {
        assert_eq!(fs::read(pictures.join(&file)).unwrap(), fs::read(again.join(&file)).unwrap(), "{file}");
    }
}

#[test]
fn the_page_of_many_streams_links_to_their_pictures() {
    let folder = TempDir::new().unwrap();
    let lines: String = (0..61)
        .map(|i| {
            format!("{{\"stream\":\"desk.{i}\",\"elapsed\":1}}\n{{\"stream\":\"desk.{i}\",\"elapsed\":2}}\n")
        })
        .collect();
    let file = folder.path().join("many.ndjson");
    fs::write(&file, lines).unwrap();
    let pictures = folder.path().join("pictures");
    let mut command = Command::cargo_bin("outwait").unwrap();
    command.env_remove("OUTWAIT_POLICY").arg("weigh").arg(&file).arg("--pictures").arg(&pictures);
    // Not enough evidence anywhere, but what is known is drawn.
    assert_eq!(command.output().unwrap().status.code(), Some(4));
    assert_eq!(names(&pictures).len(), 61 * 4 + 1);
    let page = fs::read_to_string(pictures.join("index.html")).unwrap();
    assert!(!page.contains("<svg") && page.contains("desk.60-waiting.svg"));
}

#[test]
fn what_is_in_the_way_is_named() {
    let folder = TempDir::new().unwrap();
    let occupied = folder.path().join("occupied");
    fs::write(&occupied, "a file").unwrap();
    let output = weigh(folder.path(), &occupied, &[]);
    let told = String::from_utf8(output.stderr).unwrap();
    assert!(output.status.code() == Some(3) && told.contains("occupied"), "{told}");
    let pictures = folder.path().join("pictures");
    fs::create_dir_all(pictures.join("desk.lending-rate.svg").join("inside")).unwrap();
    let output = weigh(folder.path(), &pictures, &[]);
    let told = String::from_utf8(output.stderr).unwrap();
    assert!(output.status.code() == Some(3) && told.contains("desk.lending-rate.svg"), "{told}");
    assert!(output.stdout.is_empty(), "nothing is printed where not all is done");
    assert!(names(&pictures).iter().all(|name| !name.ends_with(".partial")));
}
