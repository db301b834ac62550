//! Clients of the open formats of telemetry, in another language.

// Each binary compiles its own copy and uses a part of it; what goes wrong should stop the caller.
#![allow(dead_code, clippy::unwrap_used)]

use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};

/// A Python with the clients in it, made by the checks that run everything.
pub(crate) fn python() -> Option<PathBuf> {
    let python = Path::new(env!("CARGO_MANIFEST_DIR")).join("target/clients/bin/python");
    if !python.exists() {
        println!("skipped: target/clients has no Python with the clients");
        return None;
    }
    Some(python)
}

/// What `prometheus_client` reads of a page's buckets, by its parser of the form that the page is in: bound and count, in the order
/// of the page.
pub(crate) fn buckets_by_library(page: &str) -> Option<Vec<(f64, f64)>> {
    let script = "import sys\n\
        from prometheus_client import parser as text\n\
        from prometheus_client.openmetrics import parser as open_metrics\n\
        page = sys.stdin.read()\n\
        read = open_metrics if page.endswith('# EOF\\n') else text\n\
        for family in read.text_string_to_metric_families(page):\n \
        [print(s.labels['le'], s.value) for s in family.samples if s.name.endswith('_bucket')]\n";
    let mut child = Command::new(python()?)
        .args(["-c", script])
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .spawn()
        .unwrap();
    child.stdin.take().unwrap().write_all(page.as_bytes()).unwrap();
    let output = child.wait_with_output().unwrap();
    assert!(output.status.success());
    let number = |text: &str| text.trim_start_matches('+').parse::<f64>().unwrap();
    let lines = String::from_utf8(output.stdout).unwrap();
    Some(
        lines
            .lines()
            .map(|line| line.split_once(' ').unwrap())
            .map(|(le, n)| (number(le), number(n)))
            .collect(),
    )
}
