//! `outwait weigh`: waits in, a give-up time for each stream out.

use std::collections::HashMap;

use clap::Args;
use rayon::prelude::*;

use super::exit::{Exit, Failure, print};
use super::options::{self, Common, Reading};
use super::{reading, text};
use crate::advice::{Action, Advice, AdviceSet};
use crate::advise::Terms;
use crate::intake::Report;
use crate::policy::Policy;
use crate::say;
use crate::tally::Book;

/// Arguments of `weigh`.
#[derive(Debug, Args)]
pub(super) struct Weigh {
    #[command(flatten)]
    reading: Reading,
    #[command(flatten)]
    common: Common,
}

impl Weigh {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let policy = self.common.load_policy()?;
        let (book, report) = reading::book(&self.reading, &self.common)?;
        answer(&book, &report, policy.as_ref(), &self.common)
    }
}

/// Advises on a book and prints it.
pub(super) fn answer(
    book: &Book,
    report: &Report,
    policy: Option<&Policy>,
    common: &Common,
) -> Result<Exit, Failure> {
    let set = advise(book, report, policy, common.seed);
    let text = || text::advice_set(&set, options::style());
    print(&common.format.render(&set, text)?)?;
    let in_the_dark = set.streams.iter().all(|s| s.advice.action == Action::GatherEvidence);
    Ok(if in_the_dark { Exit::NoEvidence } else { Exit::Well })
}

fn advise(book: &Book, report: &Report, policy: Option<&Policy>, seed: u64) -> AdviceSet {
    let streams = book.streams();
    let newest = streams.iter().filter_map(|(_, days)| days.last_day()).max();
    let terms = Terms { policy, newest, seed };
    let suspicions: HashMap<&str, String> =
        report.suspicions.iter().map(|s| (s.stream.as_str(), s.to_string())).collect();
    let advice: Vec<Advice> = streams
        .par_iter()
        .map(|(stream, days)| terms.advise(stream, days, suspicions.get(stream).map(String::as_str)))
        .collect();
    terms.set(advice, report.newest.and_then(say::time))
}
