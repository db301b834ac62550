//! `outwait demo`: writes the Fernhollow scenario, and weighs it at once if asked.

use std::path::PathBuf;

use clap::Args;

use super::exit::{Exit, Failure, print};
use super::options::{Common, JobTime, Reading};
use super::{reading, weigh};
use crate::demo::{self, DemoError};
use crate::intake::Allowed;
use crate::say;

/// Arguments of `demo`.
#[derive(Debug, Args)]
pub(super) struct Demo {
    /// The folder to write into; made if it does not exist
    folder: PathBuf,
    /// Weigh the waits at once, under the demo's policy
    #[arg(long)]
    weigh: bool,
    #[command(flatten)]
    common: Common,
}

impl Demo {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let written = demo::write(&self.folder, self.common.seed).map_err(failure)?;
        let [waits, policy, readme] = written.files.map(|path| path.display().to_string());
        let count = say::count(written.waits as f64);
        let told = format!(
            "{count} waits of Fernhollow, an invented network of lending libraries, are in {waits}\n\
             what waiting is worth there is in {policy}\n\
             which advice to expect, and why, is in {readme}\n"
        );
        if !self.weigh {
            let next = format!("next: outwait weigh {waits} --policy {policy}\n");
            print(&(told + &next))?;
            return Ok(Exit::Well);
        }
        let common = Common { policy: Some(policy.into()), ..self.common.clone() };
        let reading = Reading {
            files: vec![waits.into()],
            bad_lines: Allowed::AtMost(0),
            measure: JobTime::Wait,
            input: None,
            threads: None,
        };
        if common.format == super::options::Output::Text {
            print(&(told + "\n"))?;
        }
        let policy = common.load_policy()?;
        let (book, report) = reading::book(&reading, &common)?;
        weigh::answer(&book, &report, policy.as_ref(), &common)
    }
}

fn failure(error: DemoError) -> Failure {
    let exit = match error {
        DemoError::System { .. } => Exit::System,
        DemoError::Occupied { .. } | DemoError::Differs { .. } => Exit::BadInput,
    };
    let remedy = error.remedy();
    Failure { exit, error: anyhow::Error::new(error).context(format!("the demo was not written ({remedy})")) }
}
