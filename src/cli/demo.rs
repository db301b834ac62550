//! `outwait demo`: writes the Fernhollow scenario, and weighs it at once if asked.

use std::io::ErrorKind;
use std::path::PathBuf;

use anyhow::anyhow;
use clap::Args;
use serde::Serialize;

use super::exit::{Exit, Failure, print};
use super::options::{Asked, Common, Foreign, JobTime, Output, Reading};
use super::pictures::Pictures;
use super::{reading, weigh};
use crate::demo::{self, DemoError};
use crate::intake::Allowed;
use crate::say;

/// Arguments of `demo`.
#[derive(Debug, Args)]
pub(super) struct Demo {
    /// The folder to write into; made if it does not exist
    folder: PathBuf,
    /// Weigh the waits at once, under the demo's own policy if no other is named
    #[arg(long)]
    weigh: bool,
    #[command(flatten)]
    common: Common,
}

/// What was written, as data.
#[derive(Debug, Serialize)]
struct Told {
    schema: &'static str,
    count: usize,
    waits: String,
    policy: String,
    readme: String,
}

impl Demo {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let Common { format, seed, .. } = self.common;
        if !self.weigh && self.common.narrows() {
            return Err(Failure::new(Exit::Usage, anyhow!("nothing is weighed, so nothing can be chosen"))
                .with_remedy("say `--weigh` too, or leave out --policy, --since, --until and --stream"));
        }
        let written = demo::write(&self.folder, seed).map_err(failure)?;
        let [waits, policy, readme] = written.files.map(|path| path.display().to_string());
        let text = format!(
            "{} waits of Fernhollow, an invented network of lending libraries, are in {waits}\n\
             what waiting is worth there is in {policy}\n\
             which advice to expect, and why, is in {readme}\n",
            say::count(written.waits as f64)
        );
        if !self.weigh {
            let next = format!("next: outwait weigh {waits} --policy {policy}\n");
            let told = Told { schema: "outwait/demo/1", count: written.waits, waits, policy, readme };
            print(&format.render(&told, || text + &next)?)?;
            return Ok(Exit::Well);
        }
        // The demo's own policy, whatever the environment names; another only if it was asked for here.
        let policy = self.common.policy.clone().unwrap_or_else(|| policy.into());
        let common = Common { policy: Some(policy), ..self.common.clone() };
        let reading = Reading {
            files: vec![waits.into()],
            one_stream: None,
            bad_lines: Allowed::AtMost(0),
            measure: JobTime::Wait,
            asked: Asked::default(),
            foreign: Foreign::default(),
            input: None,
            threads: None,
        };
        let policy = common.load_policy()?;
        let (book, report) = reading::book(&reading, &common)?;
        if format == Output::Text {
            print(&(text + "\n"))?;
        }
        weigh::answer(&book, &report, policy.as_ref(), &common, &Pictures::default())
    }
}

fn failure(error: DemoError) -> Failure {
    let exit = match &error {
        // Not the system's fault: a file was named where a folder is needed.
        DemoError::System { source, .. } if in_the_way(source.kind()) => Exit::BadInput,
        DemoError::System { .. } => Exit::System,
        DemoError::Occupied { .. } | DemoError::Differs { .. } => Exit::BadInput,
    };
    let remedy = error.remedy();
    Failure::new(exit, anyhow::Error::new(error).context("the demo was not written")).with_remedy(remedy)
}

fn in_the_way(kind: ErrorKind) -> bool {
    matches!(kind, ErrorKind::NotADirectory | ErrorKind::AlreadyExists)
}
