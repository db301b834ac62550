//! `outwait gate`: for build pipelines, exit code 1 where a time in force costs more than its slack.

use std::collections::{BTreeMap, BTreeSet};
use std::ffi::OsString;
use std::fs;
use std::path::PathBuf;

use anyhow::{Context, anyhow};
use clap::Args;
use serde::Deserialize;

use super::basis::{self, Basis};
use super::exit::{Exit, Failure, OrExit, print};
use super::options::Common;
use super::{files, settle};
use crate::advise::Terms;
use crate::export::{Export, SCHEMA};
use crate::gate::{Gate, Judged, judge};
use crate::policy::GiveUp;
use crate::say;

const EXAMPLES: &str = "\
Examples:
  outwait gate waits.ndjson --policy policy.yaml
  outwait gate waits.ndjson --policy policy.yaml --times timeouts.json --junit gate.xml
  outwait gate --from http://127.0.0.1:7071 --policy policy.yaml --time catalogue.lookup=800ms

A time comes from --time, else from --times (what `export` wrote), else from --settled, else from the policy's `now`.
A caller that leaves before its callee's schedule ends (`calls` in the policy) shuts the gate too.
Exit codes: 0 open, 1 shut, 2 wrong usage, 3 bad input, 4 nothing could be judged, 5 the system failed.";

/// Arguments of `gate`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct GateArguments {
    /// Files of waits (NDJSON, CSV, SWF, OTLP; plain, gzip or zstd); `-` is standard input
    #[arg(value_name = "FILE", conflicts_with_all = ["advice", "from", "data"])]
    waits: Vec<OsString>,
    /// A time in force
    #[arg(long = "time", value_name = "STREAM=TIME", value_parser = stream_time)]
    time: Vec<(String, GiveUp)>,
    /// Times in force as `outwait export` writes them (JSON or YAML)
    #[arg(long, value_name = "FILE")]
    times: Option<PathBuf>,
    /// Write the judgement as JUnit XML too
    #[arg(long, value_name = "FILE")]
    junit: Option<PathBuf>,
    #[command(flatten)]
    basis: Basis,
    #[command(flatten)]
    common: Common,
}

/// What is needed of a daemon's answer.
#[derive(Deserialize)]
struct WhatIf {
    expected_regret: f64,
}

impl GateArguments {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let policy = self.common.load_policy()?;
        let settled = self.basis.settled()?;
        let mut past = settled.past(basis::clock());
        let mut times: BTreeMap<String, (GiveUp, &str)> = BTreeMap::new();
        for (stream, _) in settled.streams() {
            if let Some(time) = settled.standing(stream).give_up_after() {
                times.insert(stream.to_owned(), (time, "settled"));
            }
        }
        times.extend(self.exported()?.into_iter().map(|(stream, time)| (stream, (time, "times"))));
        times.extend(self.time.iter().map(|(stream, time)| (stream.clone(), (*time, "--time"))));
        times.iter().for_each(|(stream, (time, _))| past.put_in_force(stream, *time));
        let terms =
            Terms { policy: policy.as_ref(), newest: None, seed: self.common.seed, past: Some(&past) };
        let weighed = self.basis.weigh(&self.waits, policy.as_ref(), Some(&past), &self.common, |_| ())?;
        let advice = |stream: &str| weighed.set.streams.iter().find(|advice| advice.stream == stream);
        let chosen = |stream: &str| self.common.stream.as_ref().is_none_or(|glob| glob.matches(stream));
        let names: BTreeSet<&str> = weighed
            .set
            .streams
            .iter()
            .map(|advice| advice.stream.as_str())
            .chain(times.keys().map(String::as_str).filter(|stream| chosen(stream)))
            .collect();
        let names: Vec<&str> = names.into_iter().collect();
        let judged = names.iter().map(|stream| {
            let entry = terms.entry(stream);
            let in_force = times.get(*stream).copied().or(entry.now.map(|now| (now, "policy")));
            let advice = advice(stream);
            let in_force = in_force.or_else(|| Some((judged_time(advice?)?, "advice")));
            let regret = match (advice, in_force) {
                (Some(advice), Some((time, _))) => self.regret(advice, time)?,
                _ => None,
            };
            Ok(judge(stream, in_force, advice, regret, &entry))
        });
        let judged: Vec<Judged> = judged.collect::<Result<_, Failure>>()?;
        let gate = Gate::of(judged, terms.early_leaves(&names));
        if let Some(path) = &self.junit {
            files::replace(path, &gate.junit())?;
        }
        print(&self.common.format.render(&gate, || gate.text())?)?;
        Ok(match (gate.open, gate.judged_any()) {
            (false, _) => Exit::Shut,
            (true, false) => Exit::NoEvidence,
            (true, true) => Exit::Well,
        })
    }

    /// What a time loses: by the advice where that judged it, else by the daemon's word.
    fn regret(&self, advice: &crate::advice::Advice, time: GiveUp) -> Result<Option<f64>, Failure> {
        let seconds = time.seconds();
        let same = judged_time(advice)
            .is_some_and(|judged| judged == time || (judged.seconds() - seconds).abs() <= 1e-9 * seconds);
        if same || self.basis.from.is_none() || advice.advice.expected_regret.is_none() {
            return Ok(advice.advice.regret_now.filter(|_| same));
        }
        let asked = if seconds.is_finite() { seconds.to_string() } else { "never".into() };
        let answer =
            self.basis.ask(&format!("/v1/streams/{}/whatif?give_up_after={asked}", advice.stream))?;
        let answer: WhatIf = serde_json::from_slice(&answer)
            .context("the daemon's answer is no judgement")
            .or_exit(Exit::System)?;
        Ok(Some(answer.expected_regret))
    }

    fn exported(&self) -> Result<Vec<(String, GiveUp)>, Failure> {
        let Some(path) = &self.times else { return Ok(Vec::new()) };
        let text = fs::read_to_string(path).with_context(|| format!("cannot read {}", path.display()));
        let text = text.or_exit(Exit::BadInput)?;
        let remedy = "name a file that `outwait export` wrote as JSON or YAML";
        let export: Export = serde_yaml::from_str(&text)
            .with_context(|| format!("{} holds no exported times", path.display()))
            .map_err(|error| Failure::new(Exit::BadInput, error).with_remedy(remedy))?;
        let times = export.streams.iter().map(|one| {
            let time = match one.give_up_after_s {
                Some(seconds) if seconds > 0.0 && seconds.is_finite() => GiveUp::After(seconds),
                None => GiveUp::Never,
                Some(bad) => return Err(anyhow!("{}: {bad} is no time for {}", path.display(), one.stream)),
            };
            Ok((one.stream.clone(), time))
        });
        let times: anyhow::Result<Vec<_>> = match export.schema == SCHEMA {
            true => times.collect(),
            false => Err(anyhow!("{} is of the schema {:?}, not {SCHEMA:?}", path.display(), export.schema)),
        };
        times.map_err(|error| Failure::new(Exit::BadInput, error).with_remedy(remedy))
    }
}

/// The time in force that an advice has judged.
fn judged_time(advice: &crate::advice::Advice) -> Option<GiveUp> {
    advice.advice.now.map(|now| now.give_up_after_s.map_or(GiveUp::Never, GiveUp::After))
}

fn stream_time(text: &str) -> Result<(String, GiveUp), String> {
    let (stream, time) =
        text.split_once('=').ok_or("write STREAM=TIME, for instance catalogue.lookup=800ms")?;
    crate::wait::check_stream(stream).map_err(|error| format!("{error}; {}", error.remedy()))?;
    let time = if say::parse_duration(time).is_err() && time != "never" {
        return Err(format!("{time:?} is no time; write 800ms, 2s or never"));
    } else {
        settle::give_up(time)?
    };
    Ok((stream.to_owned(), time))
}
