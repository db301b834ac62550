//! `outwait weekly`: the week's recommendations, ready to be signed.

use std::collections::HashMap;
use std::ffi::OsString;
use std::path::{Path, PathBuf};

use anyhow::Context;
use clap::{Args, ValueEnum};

use super::basis::{self, Basis};
use super::exit::{Exit, Failure, OrExit};
use super::files::Folder;
use super::options::Common;
use crate::advice::{Action, Change};
use crate::advise::{Study, Terms, name_hash};
use crate::chart::{Picture, at_both_widths};
use crate::report::{self, Weekly, weekly};

const EXAMPLES: &str = "\
Examples:
  outwait weekly waits.ndjson --policy policy.yaml --settled settled.yaml --format html --output weekly.html
  outwait weekly waits.ndjson --policy policy.yaml --format markdown
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
    /// Files of waits (NDJSON, CSV, SWF, OTLP, metrics as text; plain, gzip or zstd); `-` is standard input
    #[arg(value_name = "FILE", conflicts_with_all = ["advice", "from"])]
    waits: Vec<OsString>,
    /// Where to write it; standard output unless said
    #[arg(long, value_name = "FILE")]
    output: Option<PathBuf>,
    /// Write all forms into this folder (made if need be)
    #[arg(long, value_name = "DIR", conflicts_with_all = ["output", "format"])]
    folder: Option<PathBuf>,
    #[command(flatten)]
    basis: Basis,
    #[command(flatten)]
    common: Common<Form>,
}

impl WeeklyArguments {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let common = self.common.without_form();
        let policy = common.load_policy()?;
        let settled = self.basis.settled()?;
        let past = settled.past(basis::clock());
        let weighed = self.basis.weigh(&self.waits, policy.as_ref(), Some(&past), &common, picture)?;
        let terms =
            Terms { policy: policy.as_ref(), newest: None, seed: self.common.seed, past: Some(&past) };
        let mut week = weekly(&weighed.set, &settled, |stream| terms.entry(stream), None);
        if let Some(glob) = &self.common.stream {
            week.rest.retain(|row| glob.matches(&row.stream));
        }
        let pictures: HashMap<String, String> =
            weighed.told.into_iter().filter_map(|(stream, svg)| Some((stream, svg?))).collect();
        match &self.folder {
            Some(folder) => all(folder, &week, &pictures)?,
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
}

/// What is drawn of a stream: what each give-up time earns, where a change is proposed.
fn picture(study: &Study) -> Option<String> {
    let decision = &study.advice().advice;
    let changes = match decision.proposal {
        Some(proposal) => proposal.change != Change::Keep,
        None => decision.give_up_after_s.is_some(),
    };
    changes.then(|| {
        let curves = study.curves();
        let prefix = format!("w{:016x}", name_hash(&curves.stream));
        at_both_widths(720, &prefix, |frame| Picture::Rate.draw(&curves, frame)).markup
    })
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
    folder.put("weekly.json", &json(week)?)
}
