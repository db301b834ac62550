//! `outwait audit`: waits held against the advice, and what to do with those that are open.

mod html;
mod table;
mod text;

use std::collections::HashMap;

use anyhow::Context;
use clap::{Args, ValueEnum};
use rayon::prelude::*;

use super::exit::{Exit, Failure, OrExit, print};
use super::layout::Page;
use super::options::{Common, Output, Reading};
use super::text::counted;
use super::twice::Twice;
use super::{reading, weigh};
use crate::advice::Action;
use crate::advise::Terms;
use crate::audit::queue::{Goal, Known};
use crate::audit::{Audit, AuditSet, Question, Subject, Sums};
use crate::intake::{Record, Report, Sink};
use crate::policy::Policy;
use crate::say;
use crate::tally::Book;

const EXAMPLES: &str = "\
Examples:
  outwait audit waits.ndjson --policy policy.yaml
  outwait audit waits.csv.gz --policy policy.yaml --format html > audit.html
  outwait audit calls.csv --stream helpdesk.call --service-time 4m --queue-length 3.2

The inputs are read twice: once to learn when to give up, once to hold every wait against that. Standard input and
pipes are copied into a temporary file for it. Without --policy, OUTWAIT_POLICY may name one.
Exit codes: 0 well, 2 wrong usage, 3 bad input, 4 not enough evidence anywhere, 5 the system failed.";

/// Arguments of `audit`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Command {
    #[command(flatten)]
    reading: Reading,
    #[command(flatten)]
    common: Common<Form>,
    /// Chances of open waits within the next so long, instead of as long again as each has waited
    #[arg(long, value_name = "TIME", value_parser = duration, allow_negative_numbers = true)]
    within: Option<f64>,
    /// How many open waits are listed, the most urgent first
    #[arg(long, value_name = "N", default_value_t = 20, allow_negative_numbers = true)]
    list: usize,
    /// Mean number waiting in the queue over the whole time, as something else counted it: shows how many records are missing
    #[arg(long, value_name = "N", value_parser = positive, allow_negative_numbers = true)]
    queue_length: Option<f64>,
    /// Mean time that a server of the queue is busy with one: gives a first sizing
    #[arg(long, value_name = "TIME", value_parser = duration, allow_negative_numbers = true)]
    service_time: Option<f64>,
    /// Arrivals an hour, where the records lack those that were served at once
    #[arg(long, value_name = "N", value_parser = positive, allow_negative_numbers = true)]
    arrivals_per_hour: Option<f64>,
    /// What service the sizing aims at: a share, served within a time
    #[arg(long, value_name = "SHARE/TIME", value_parser = goal, default_value = "80%/20s")]
    goal: Goal,
}

/// How an audit is written.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum Form {
    /// For a person at a terminal
    #[default]
    Text,
    /// One JSON document
    Json,
    /// The same document as YAML
    Yaml,
    /// What was lost, a row a stream and group: all, by rule, by hour of the week
    Csv,
    /// The open waits that are listed, a row each
    OpenCsv,
    /// One page to look at, to send and to print
    Html,
}

/// Holds every wait against the advice.
struct Held<'a>(Sums<'a>);

impl Sink for Held<'_> {
    #[inline]
    fn take(&mut self, record: &Record<'_>) {
        self.0.add(record.stream, &record.wait, record.id);
    }

    fn fork(&self) -> Self {
        Held(self.0.fork())
    }

    fn absorb(&mut self, other: Self) {
        self.0.merge(other.0);
    }
}

impl Command {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let common = self.common.without_form();
        let policy = common.load_policy()?;
        reading::once(&self.reading, &common)?;
        let (twice, sources) = Twice::new(&self.reading)?;
        let (book, report) = reading::counted(sources, &self.reading, &common)?;
        let audit = self.prepare(&book, &report, policy.as_ref(), &common);
        drop(book);
        let (Held(sums), again) = reading::read(twice.again()?, Held(audit.sums()), &self.reading, &common)?;
        if (again.lines, again.waits) != (report.lines, report.waits) {
            reading::note(
                "the inputs changed between the two readings; the audit is of the second, by the advice of the first",
            );
        }
        let (newest, _) = weigh::newest(&report, &common);
        let set = audit.report(sums, assumed(policy.as_ref()), newest.and_then(say::time));
        if set.older > 0 {
            reading::note(&format!(
                "{} older than the window of their stream (`guard: window`, in days before the newest wait) left out",
                counted(set.older, "wait")
            ));
        }
        print(&self.render(&set)?)?;
        let in_the_dark = set.streams.iter().all(|s| s.advice.action == Action::GatherEvidence);
        Ok(if in_the_dark { Exit::NoEvidence } else { Exit::Well })
    }

    /// Advises on every stream.
    fn prepare(&self, book: &Book, report: &Report, policy: Option<&Policy>, common: &Common) -> Audit {
        let streams = book.streams();
        let (newest, day) = weigh::newest(report, common);
        let terms = Terms { policy, newest: day, seed: common.seed, past: None };
        let suspicions: HashMap<&str, String> =
            report.suspicions.iter().map(|s| (s.stream.as_str(), s.to_string())).collect();
        let lenders = terms.lenders(&streams);
        let subjects: Vec<Subject> = streams
            .par_iter()
            .map(|(stream, days)| {
                let suspicion = suspicions.get(stream).map(String::as_str);
                let mut subject = Subject::new(&terms, stream, days, suspicion, &lenders);
                reading::closed_loop(report, &terms, stream)
                    .into_iter()
                    .for_each(|caution| subject.warn(caution));
                subject
            })
            .collect();
        let question = Question {
            within: self.within,
            list: self.list,
            queue: Known {
                queue_length: self.queue_length,
                service_time: self.service_time,
                arrivals: self.arrivals_per_hour.map(|n| n / 3600.0),
                goal: self.goal,
            },
        };
        Audit::new(subjects, question, newest)
    }

    fn render(&self, set: &AuditSet) -> Result<String, Failure> {
        match self.common.format {
            Form::Text => Ok(text::audit_set(set, Page::standard_output())),
            Form::Json => Output::Json.render(set, String::new),
            Form::Yaml => Output::Yaml.render(set, String::new),
            Form::Csv => table::lost(set).context("cannot write CSV").or_exit(Exit::System),
            Form::OpenCsv => table::open(set).context("cannot write CSV").or_exit(Exit::System),
            Form::Html => html::page(set).context("cannot write the page").or_exit(Exit::System),
        }
    }
}

fn assumed(policy: Option<&Policy>) -> Vec<String> {
    Terms { policy, newest: None, seed: 0, past: None }.assumed()
}

fn duration(text: &str) -> Result<f64, String> {
    let seconds = say::parse_duration(text).map_err(|error| error.to_string())?;
    if seconds > 0.0 && seconds <= crate::wait::MAX_AGE {
        Ok(seconds)
    } else {
        Err("it must be above 0 and at most 1e10 s".into())
    }
}

fn positive(text: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(number) if number > 0.0 && number.is_finite() => Ok(number),
        _ => Err("write a number above 0".into()),
    }
}

/// `80%/20s`, `0.8/20s`.
fn goal(text: &str) -> Result<Goal, String> {
    let explain = || "write a share and a time, as in 80%/20s".to_owned();
    let (share, within) = text.split_once('/').ok_or_else(explain)?;
    let share = match share.trim().strip_suffix('%') {
        Some(percent) => percent.parse::<f64>().map(|p| p / 100.0),
        None => share.trim().parse::<f64>(),
    };
    let share = share.map_err(|_| explain())?;
    if !(share > 0.0 && share < 1.0) {
        return Err("the share must be above 0 and below 100%".into());
    }
    Ok(Goal { share, within_s: duration(within)? })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn goals() {
        assert_eq!(goal("80%/20s"), Ok(Goal { share: 0.8, within_s: 20.0 }));
        assert_eq!(goal("0.95/1m"), Ok(Goal { share: 0.95, within_s: 60.0 }));
        for bad in ["80%", "0/20s", "100%/20s", "x/20s", "80%/never", "80%/-1s", "NaN/1s"] {
            assert!(goal(bad).is_err(), "{bad}");
        }
        assert!(positive("NaN").is_err() && positive("0").is_err() && duration("1e300").is_err());
    }
}
