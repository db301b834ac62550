//! `outwait weigh`: waits in, a give-up time for each stream out.

use std::collections::HashMap;

use clap::Args;
use rayon::prelude::*;

use super::exit::{Exit, Failure, print};
use super::layout::Page;
use super::options::{Common, Reading};
use super::pictures::{Album, Pictures};
use super::{reading, text};
use crate::advice::{Action, Advice, AdviceSet};
use crate::advise::Terms;
use crate::chart::Section;
use crate::intake::Report;
use crate::policy::Policy;
use crate::say;
use crate::tally::{Book, Day, Days};

const EXAMPLES: &str = "\
Examples:
  outwait weigh waits.ndjson more.csv.gz --policy policy.yaml
  outwait weigh cluster.swf --measure run --stream 'cluster.*' --since 2026-11-01
  zcat waits.csv.gz | outwait weigh - --stream catalogue.lookup --format json

A wait is a line like {\"stream\":\"catalogue.lookup\",\"elapsed\":0.0183,\"ending\":\"done\"};
endings are done, failed, gave_up and waiting. Without --policy, OUTWAIT_POLICY may name one.
Exit codes: 0 well, 2 wrong usage, 3 bad input, 4 not enough evidence anywhere, 5 the system failed.";

/// Arguments of `weigh`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Weigh {
    #[command(flatten)]
    reading: Reading,
    #[command(flatten)]
    common: Common,
    #[command(flatten)]
    pictures: Pictures,
}

impl Weigh {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let policy = self.common.load_policy()?;
        let (book, report) = reading::book(&self.reading, &self.common)?;
        answer(&book, &report, policy.as_ref(), &self.common, &self.pictures)
    }
}

/// Advises on a book, draws it if asked, and prints it.
pub(super) fn answer(
    book: &Book,
    report: &Report,
    policy: Option<&Policy>,
    common: &Common,
    pictures: &Pictures,
) -> Result<Exit, Failure> {
    let set = advise(book, report, policy, common, pictures)?;
    let counted: u64 = set.streams.iter().map(|s| s.evidence.waits).sum();
    let read: u64 = book.streams().iter().map(|(_, days)| waits(days)).sum();
    if counted < read {
        reading::note(&format!(
            "{} older than the window of their stream (`guard: window`, in days before the newest wait) left out",
            text::counted(read - counted, "wait")
        ));
    }
    let text = || text::advice_set(&set, Page::standard_output());
    print(&common.format.render(&set, text)?)?;
    let in_the_dark = set.streams.iter().all(|s| s.advice.action == Action::GatherEvidence);
    Ok(if in_the_dark { Exit::NoEvidence } else { Exit::Well })
}

/// The newest time of all that was read, asked for or not, so that what is said of a stream does not depend on which others
/// are asked for; but nothing after `--until`, as if the data ended there. With its day.
pub(super) fn newest(report: &Report, common: &Common) -> (Option<f64>, Option<i32>) {
    let newest =
        report.newest.map(|newest| common.until.map_or(newest, |until| newest.min(until.next_down())));
    let day = newest.and_then(|newest| match Day::of(Some(newest)) {
        Day::Number(day) => Some(day),
        Day::Undated => None,
    });
    (newest, day)
}

/// All waits of a stream.
fn waits(days: &Days) -> u64 {
    days.days().iter().flat_map(|(_, tally)| tally.counts()).fold(0, u64::saturating_add)
}

fn advise(
    book: &Book,
    report: &Report,
    policy: Option<&Policy>,
    common: &Common,
    pictures: &Pictures,
) -> Result<AdviceSet, Failure> {
    let streams = book.streams();
    let album = pictures.open(streams.len())?;
    let (newest, day) = newest(report, common);
    let terms = Terms { policy, newest: day, seed: common.seed, past: None };
    let suspicions: HashMap<&str, String> =
        report.suspicions.iter().map(|s| (s.stream.as_str(), s.to_string())).collect();
    let lenders = terms.lenders(&streams);
    let weighed: Vec<(Advice, Option<Section>)> = streams
        .par_iter()
        .enumerate()
        .map(|(number, (stream, days))| {
            let suspicion = suspicions.get(stream).map(String::as_str);
            let study = terms.study_among(stream, days, suspicion, &lenders);
            let draw = |album: &Album| album.stream(&study.curves(), number, text::headline(study.advice()));
            let section = album.as_ref().map(draw).transpose()?;
            let mut advice = study.into_advice();
            advice.cautions.extend(reading::closed_loop(report, &terms, stream));
            Ok((advice, section))
        })
        .collect::<Result<_, Failure>>()?;
    let (advice, sections): (Vec<Advice>, Vec<Option<Section>>) = weighed.into_iter().unzip();
    let set = terms.set(advice, newest.and_then(say::time));
    if let Some(album) = album {
        let sections: Vec<Section> = sections.into_iter().flatten().collect();
        album.page("How long to wait before giving up", &text::summary(&set), &sections)?;
    }
    Ok(set)
}
