//! `outwait weekly`: the week's recommendations, ready to be signed.

use std::collections::HashMap;
use std::ffi::OsString;
use std::path::{Path, PathBuf};

use anyhow::{Context, anyhow};
use clap::{Args, ValueEnum};

use super::basis::{self, Basis};
use super::exit::{Exit, Failure, OrExit};
use super::files::{self, Folder};
use super::options::Common;
use crate::advice::Action;
use crate::advise::{Study, Terms};
use crate::report::{self, LastWeek, Weekly, weekly};

const EXAMPLES: &str = "\
Examples:
  outwait weekly waits.ndjson --policy policy.yaml --settled settled.yaml --format html --output weekly.html
  outwait weekly waits.ndjson --policy policy.yaml --format markdown
  outwait weekly --data /var/lib/outwait --policy policy.yaml --last-week last.json --format html
  outwait weekly --from http://127.0.0.1:7071 --policy policy.yaml --folder reports

What is ready to be signed stands on top, worth the most first; sign it with `outwait settle`.
Exit codes: 0 well, 2 wrong usage, 3 bad input, 4 not enough evidence anywhere, 5 the system failed.";

/// A form of the week.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum Form {
    /// For a merge request, or a terminal
    #[default]
    #[value(alias = "text")]
    Markdown,
    /// One self-contained page
    Html,
    /// One JSON document
    Json,
    /// A row a stream
    Csv,
}

/// Arguments of `weekly`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct WeeklyArguments {
    /// Files of waits (NDJSON, CSV, SWF, OTLP; plain, gzip or zstd); `-` is standard input
    #[arg(value_name = "FILE", conflicts_with_all = ["advice", "from", "data"])]
    waits: Vec<OsString>,
    /// Where to write it; standard output unless said
    #[arg(long, value_name = "FILE")]
    output: Option<PathBuf>,
    /// Write all forms into this folder (made if need be)
    #[arg(long, value_name = "DIR", conflicts_with_all = ["output", "format"])]
    folder: Option<PathBuf>,
    /// The last weekly set (JSON), to say what changed since; the one in --folder unless said
    #[arg(long, value_name = "FILE")]
    last_week: Option<PathBuf>,
    #[command(flatten)]
    basis: Basis,
    #[command(flatten)]
    common: Common<Form>,
}

/// The present set and the one before it, in a folder.
const PRESENT: &str = "weekly.json";
const BEFORE: &str = "weekly-before.json";

impl WeeklyArguments {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let common = self.common.without_form();
        let policy = common.load_policy()?;
        let settled = self.basis.settled()?;
        let past = settled.past(basis::clock());
        let picture = |study: &Study| report::picture(study.advice(), || study.curves());
        let weighed = self.basis.weigh(&self.waits, policy.as_ref(), Some(&past), &common, picture)?;
        let terms =
            Terms { policy: policy.as_ref(), newest: None, seed: self.common.seed, past: Some(&past) };
        let last = self.last(weighed.set.made_at.as_deref())?;
        let mut week = weekly(&weighed.set, &settled, |stream| terms.entry(stream), None, last.as_ref());
        if let Some(glob) = &self.common.stream {
            week.rest.retain(|row| glob.matches(&row.stream));
        }
        let pictures: HashMap<String, String> =
            weighed.told.into_iter().filter_map(|(stream, svg)| Some((stream, svg?))).collect();
        match &self.folder {
            Some(folder) => {
                // The same data again are the same week.
                if let Some(last) = &last
                    && kept(&folder.join(PRESENT))?.is_some_and(|present| present == *last)
                {
                    let text = files::read(&folder.join(PRESENT))?;
                    Folder::open(folder)?.put(BEFORE, &String::from_utf8_lossy(&text))?;
                }
                all(folder, &week, &pictures)?;
            }
            None => {
                let text = match self.common.format {
                    Form::Markdown => report::markdown(&week),
                    Form::Html => report::html(&week, &pictures).or_exit(Exit::System)?,
                    Form::Json => json(&week)?,
                    Form::Csv => report::csv(&week).or_exit(Exit::System)?,
                };
                basis::put(&text, self.output.as_deref())?;
            }
        }
        let dark = weighed.set.streams.iter().all(|advice| advice.advice.action == Action::GatherEvidence);
        Ok(if dark { Exit::NoEvidence } else { Exit::Well })
    }

    /// The set that this one is held against: named, or in the folder and of older data.
    fn last(&self, made_at: Option<&str>) -> Result<Option<LastWeek>, Failure> {
        if let Some(file) = &self.last_week {
            let missing = || {
                let error = anyhow!("there is no {}", file.display());
                Failure::new(Exit::BadInput, error).with_remedy(REMEDY)
            };
            return kept(file)?.ok_or_else(missing).map(Some);
        }
        let Some(folder) = &self.folder else { return Ok(None) };
        let older = |last: &LastWeek| last.made_at.as_deref() < made_at;
        match kept(&folder.join(PRESENT))?.filter(older) {
            None => Ok(kept(&folder.join(BEFORE))?.filter(older)),
            last => Ok(last),
        }
    }
}

const REMEDY: &str = "name what `outwait weekly --format json` wrote, or remove it from the folder";

/// A weekly set from its file, if there is one.
fn kept(file: &Path) -> Result<Option<LastWeek>, Failure> {
    let bytes = files::read(file)?;
    if bytes.is_empty() {
        return Ok(None);
    }
    let read: LastWeek = serde_json::from_slice(&bytes)
        .with_context(|| format!("{} holds no weekly set", file.display()))
        .map_err(|error| Failure::new(Exit::BadInput, error).with_remedy(REMEDY))?;
    if read.schema != report::SCHEMA {
        let error =
            anyhow!("{} is of the schema {:?}, not {:?}", file.display(), read.schema, report::SCHEMA);
        return Err(Failure::new(Exit::BadInput, error).with_remedy(REMEDY));
    }
    Ok(Some(read))
}

fn json(week: &Weekly) -> Result<String, Failure> {
    serde_json::to_string_pretty(week)
        .map(|json| json + "\n")
        .context("cannot write JSON")
        .or_exit(Exit::System)
}

fn all(folder: &Path, week: &Weekly, pictures: &HashMap<String, String>) -> Result<(), Failure> {
    let folder = Folder::open(folder)?;
    folder.put("weekly.md", &report::markdown(week))?;
    folder.put("weekly.html", &report::html(week, pictures).or_exit(Exit::System)?)?;
    folder.put("weekly.csv", &report::csv(week).or_exit(Exit::System)?)?;
    folder.put(PRESENT, &json(week)?)
}
