//! `outwait vet`: what a policy means, or what is wrong with it.

use std::path::PathBuf;

use clap::Args;

use super::exit::{Exit, Failure, print};
use super::layout::Page;
use super::options::{self, Output};
use crate::policy;

/// Arguments of `vet`.
#[derive(Debug, Args)]
pub(super) struct Vet {
    /// The policy file; `-` is standard input
    policy: PathBuf,
    /// Say what it means for these streams; for each of its entries if none is named
    #[arg(value_name = "STREAM")]
    streams: Vec<String>,
    /// How to write the answer
    #[arg(long, value_enum, default_value_t)]
    format: Output,
}

impl Vet {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let policy = options::load_policy(&self.policy)?;
        let streams: Vec<&str> = self.streams.iter().map(String::as_str).collect();
        let description = policy::describe(&policy, &streams);
        print(
            &self.format.render(&description, || Page::standard_output().lines(&description.to_string()))?,
        )?;
        Ok(Exit::Well)
    }
}
