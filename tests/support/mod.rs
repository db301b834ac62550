//! What the integration tests share: where reference data lie, and how a reference file becomes waits.

// Each test binary compiles its own copy and uses a part of it; a bad reference file should stop the test.
#![allow(dead_code, clippy::unwrap_used, clippy::panic)]

use std::path::{Path, PathBuf};

use outwait::tally::Cells;
use outwait::wait::{Ending, LEAST_AGE, Wait};

/// Path of `tests/reference/{kind}/{name}`, or of the same file in a `shared/reference` folder beside the
/// repository or one level higher. Where there is none, says so and gives `None`: the caller skips its check.
pub(crate) fn reference_path(kind: &str, name: &str) -> Option<PathBuf> {
    let home = Path::new(env!("CARGO_MANIFEST_DIR"));
    let folders = ["tests/reference", "../shared/reference", "../../shared/reference"];
    let found = folders.iter().map(|f| home.join(f).join(kind).join(name)).find(|p| p.is_file());
    if found.is_none() {
        println!("skipped: {name} is not here");
    }
    found
}

/// Names (without `.csv`) of every reference set, here or only in a shared folder.
pub(crate) const SETS: [&str; 13] = [
    "azure_vm_launch_program",
    "bank_calls_1999_feb_first_half",
    "college_message_replies",
    "danish_fire_losses",
    "helpdesk_tickets",
    "hpc2n_2002_waits",
    "leukemia_6mp",
    "nasa_ipsc_1993_runtimes",
    "nist_weibull_type1",
    "seattle_rtt",
    "strike_durations",
    "unemployment_spells",
    "waltons_flies",
];

/// One row of a reference file.
#[derive(Clone, Debug)]
pub(crate) struct Row {
    /// `elapsed_s` as printed; 0 in a few real logs.
    pub(crate) elapsed: f64,
    pub(crate) ending: Ending,
    /// Empty where the file has no such column.
    pub(crate) stream: String,
    pub(crate) at: Option<f64>,
}

/// A reference file, read whole.
#[derive(Clone, Debug)]
pub(crate) struct Set {
    pub(crate) rows: Vec<Row>,
}

/// How to treat the rows of age 0, which a [`Wait`] refuses (99 in `hpc2n_2002_waits`, 173 in
/// `nasa_ipsc_1993_runtimes`, 2 in `college_message_replies`, none elsewhere).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Zeros {
    /// Leave them out, as the reference fits and the Hill estimates do.
    Drop,
    /// Give them the least positive age, so that a curve of all rows, as the reference's, drops at once.
    AsLeast,
}

impl Set {
    /// The waits of one stream, or of all rows for `None`.
    pub(crate) fn waits(&self, stream: Option<&str>, zeros: Zeros) -> Vec<Wait> {
        self.rows
            .iter()
            .filter(|r| stream.is_none_or(|s| s == r.stream))
            .filter(|r| r.elapsed > 0.0 || zeros == Zeros::AsLeast)
            .map(|r| {
                let wait = Wait::new(r.elapsed.max(LEAST_AGE), r.ending).unwrap();
                r.at.map_or(wait, |at| wait.with_at(at).unwrap())
            })
            .collect()
    }

    /// The same, grouped.
    pub(crate) fn cells(&self, stream: Option<&str>, zeros: Zeros) -> Cells {
        Cells::from_waits(&self.waits(stream, zeros))
    }

    /// The distinct stream names, sorted.
    pub(crate) fn streams(&self) -> Vec<String> {
        let mut names: Vec<String> = self.rows.iter().map(|r| r.stream.clone()).collect();
        names.sort();
        names.dedup();
        names
    }
}

/// Reads `data/{name}.csv`; `None` (and a printed word) where it is not here.
pub(crate) fn set(name: &str) -> Option<Set> {
    let path = reference_path("data", &format!("{name}.csv"))?;
    let mut reader = csv::Reader::from_path(path).unwrap();
    let header = reader.headers().unwrap().clone();
    let column = |name: &str| header.iter().position(|h| h == name);
    let (elapsed, ending) = (column("elapsed_s").unwrap(), column("ending").unwrap());
    let (stream, at) = (column("stream"), column("at"));
    let rows = reader
        .records()
        .map(|record| {
            let record = record.unwrap();
            Row {
                elapsed: record[elapsed].parse().unwrap(),
                ending: Ending::parse(&record[ending]).unwrap(),
                stream: stream.map(|c| record[c].to_owned()).unwrap_or_default(),
                at: at.map(|c| record[c].parse().unwrap()),
            }
        })
        .collect();
    Some(Set { rows })
}

/// Reads `expected/{name}.json`; `None` (and a printed word) where it is not here.
pub(crate) fn expected(name: &str) -> Option<serde_json::Value> {
    let path = reference_path("expected", &format!("{name}.json"))?;
    Some(serde_json::from_str(&std::fs::read_to_string(path).unwrap()).unwrap())
}

/// Whether two numbers agree to a relative tolerance, or to the same absolute one below 1.
pub(crate) fn close(a: f64, b: f64, tolerance: f64) -> bool {
    (a - b).abs() <= tolerance * b.abs().max(1.0)
}
