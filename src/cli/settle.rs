//! `outwait settle`: a person's decision on what is proposed, kept in a file.

use std::ffi::OsString;
use std::fmt::Write;

use anyhow::anyhow;
use clap::{ArgGroup, Args};
use jiff::Timestamp;

use super::basis::{self, Basis};
use super::exit::{Exit, Failure, print};
use super::files;
use super::options::Common;
use super::reading;
use crate::advice::Advice;
use crate::advise::Terms;
use crate::glob::Glob;
use crate::policy::GiveUp;
use crate::say;
use crate::settle::{self, Decide, Document, Grounds, Refused, Settled, Settlement, Told, decide, insert};
use crate::whole;

const EXAMPLES: &str = "\
Examples:
  outwait settle catalogue.lookup --accept --by Ada --why 'agreed on Monday' \\
      --waits waits.ndjson --policy policy.yaml --settled settled.yaml
  outwait settle scan.job --pin 20m --by Ada --why 'the night shift ends then' --settled settled.yaml
  outwait settle catalogue.lookup --postpone 14d --by Ada --why 'freeze' --settled settled.yaml
  outwait settle catalogue.lookup --undo --by Ada --why 'too many retries' --settled settled.yaml
  outwait settle 'catalogue.*' --history --settled settled.yaml
  outwait settle catalogue.lookup --accept --by Ada --why agreed --data /var/lib/outwait --policy policy.yaml

With --data the decision goes into the settled.yaml of that folder; a daemon that runs there takes it in at once, one that
does not when it starts.

A decision that is against a guard of the policy is refused, and then none of the run is taken.
Exit codes: 0 well, 2 wrong usage, 3 bad input or a decision refused, 5 the system failed.";

/// Arguments of `settle`.
#[derive(Debug, Args)]
#[command(
    after_help = EXAMPLES,
    group(ArgGroup::new("decision").required(true).args(["accept", "pin", "postpone", "refuse", "undo", "history"]))
)]
pub(super) struct Settle {
    /// Streams to decide on (`*` any run of characters, `?` one)
    #[arg(required = true, value_name = "STREAM", value_parser = pattern)]
    streams: Vec<Glob>,
    /// Put what is proposed in force
    #[arg(long)]
    accept: bool,
    /// Put a time of your own in force, whatever is proposed
    #[arg(long, value_name = "TIME", value_parser = give_up)]
    pin: Option<GiveUp>,
    /// Look again then: a time, a date, or a duration from now
    #[arg(long, value_name = "UNTIL")]
    postpone: Option<String>,
    /// Say no to what is proposed; it comes back once the best time has moved
    #[arg(long)]
    refuse: bool,
    /// Take the last decision back
    #[arg(long)]
    undo: bool,
    /// Show what was decided, and on what evidence
    #[arg(long)]
    history: bool,
    /// Who decides
    #[arg(long, value_name = "WHO", default_value = "", hide_default_value = true)]
    by: String,
    /// Why
    #[arg(long, value_name = "WHY", default_value = "", hide_default_value = true)]
    why: String,
    /// When, if not now: RFC 3339
    #[arg(long, value_name = "TIME")]
    at: Option<Timestamp>,
    /// Files of waits, which are weighed first
    #[arg(long, value_name = "FILE", num_args = 1.., conflicts_with_all = ["advice", "from", "data"])]
    waits: Vec<OsString>,
    #[command(flatten)]
    basis: Basis,
    #[command(flatten)]
    common: Common,
}

impl Settle {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        let file = self.basis.settled_file().ok_or_else(|| {
            let at_it = match &self.basis.from {
                Some(daemon) => format!("; at the daemon itself one decides on {daemon}/ or by POST /v1/settle/STREAM"),
                None => String::new(),
            };
            Failure::new(Exit::Usage, anyhow!("--settled FILE or --data DIR is needed")).with_remedy(format!(
                "name the file that keeps decisions, for instance settled.yaml (it is made if need be), or the folder of \
                 a daemon{at_it}",
            ))
        })?;
        let file = file.as_path();
        if self.history {
            return self.show();
        }
        if self.by.trim().is_empty() || self.why.trim().is_empty() {
            return Err(Failure::new(Exit::Usage, anyhow!("a decision needs --by WHO and --why WHY")));
        }
        let at = match self.at {
            Some(at) => at,
            None => Timestamp::from_second(basis::clock() as i64)
                .map_err(|error| Failure::new(Exit::System, error))?,
        };
        let what = self.decision(at)?;
        let mut before = basis::settled(&files::read(file)?, file)?;
        // What only the ledger knows is the past of this as well.
        self.basis.add_kept(&mut before)?;
        let policy = self.common.load_policy()?;
        let past = before.past(at.as_second() as f64);
        let looks = self.accept || !self.waits.is_empty() || self.basis.advises();
        let advised = if looks {
            self.basis.weigh(&self.waits, policy.as_ref(), Some(&past), &self.common, |_| ())?.set.streams
        } else {
            Vec::new()
        };
        let streams = self.matched(&advised, &before)?;
        let taken = whole::change(file, |bytes| {
            // Perhaps others have settled meanwhile: what they decided is the past of this.
            let mut there = basis::settled(bytes, file)?;
            let mut settled = there.clone();
            let lacking: Vec<_> =
                settled.missing(&before).into_iter().map(|(s, one)| (s.to_owned(), one.clone())).collect();
            lacking.into_iter().for_each(|(stream, one)| settled.add(&stream, one));
            for (stream, other) in before.missing(&settled) {
                if streams.iter().any(|own| own == stream) {
                    reading::note(&format!("{stream} was decided on meanwhile: {}", other.words()));
                }
            }
            let mut text = String::from_utf8_lossy(bytes).into_owned();
            let mut taken = Vec::new();
            for stream in &streams {
                let past = settled.past(at.as_second() as f64);
                let terms = Terms { policy: policy.as_ref(), newest: None, seed: 0, past: Some(&past) };
                let advice = advised.iter().find(|advice| advice.stream == *stream);
                let entry = terms.entry(stream);
                let settlement = decide(what, stream, advice, &entry, &settled, at, (&self.by, &self.why))
                    .map_err(|refused| told(&refused))?;
                text = insert(&text, &there, stream, &settlement);
                there.add(stream, settlement.clone());
                settled.add(stream, settlement.clone());
                taken.push((stream.clone(), settlement));
            }
            Ok::<_, Failure>((taken, Some(text)))
        })?;
        let mut after = basis::settled(&files::read(file)?, file)?;
        self.basis.add_kept(&mut after)?;
        self.say(&taken, &advised, &after)?;
        Ok(Exit::Well)
    }

    fn decision(&self, at: Timestamp) -> Result<Decide, Failure> {
        Ok(match (&self.pin, &self.postpone) {
            (Some(time), _) => Decide::Pin(*time),
            (_, Some(until)) => Decide::Postpone(ahead(until, at)?),
            _ if self.accept => Decide::Accept,
            _ if self.refuse => Decide::Refuse,
            _ => Decide::Undo,
        })
    }

    /// The streams that are meant, by name; each pattern must mean one.
    fn matched(&self, advised: &[Advice], settled: &Settled) -> Result<Vec<String>, Failure> {
        let known: Vec<&str> = advised
            .iter()
            .map(|a| a.stream.as_str())
            .chain(settled.streams().map(|(stream, _)| stream))
            .collect();
        let mut streams = Vec::new();
        for glob in &self.streams {
            let before = streams.len();
            match glob.literal().filter(|name| advised.is_empty() || known.contains(name)) {
                Some(name) => streams.push(name.to_owned()),
                None => streams
                    .extend(known.iter().filter(|name| glob.matches(name)).map(|name| (*name).to_owned())),
            }
            if streams.len() == before {
                return Err(Failure::new(
                    Exit::BadInput,
                    anyhow!("no stream is called {:?}", glob.to_string()),
                )
                .with_remedy("see `outwait weigh` for the streams that have waits"));
            }
        }
        streams.sort_unstable();
        streams.dedup();
        Ok(streams)
    }

    fn show(&self) -> Result<Exit, Failure> {
        let settled = self.basis.settled()?;
        let told: Vec<Told<'_>> = settled
            .streams()
            .filter(|(stream, _)| self.streams.iter().any(|glob| glob.matches(stream)))
            .map(|(stream, decisions)| Told { stream, decisions, cautions: &[] })
            .collect();
        let document = Document::of(told);
        let text = || {
            let mut text = String::new();
            for Told { stream, decisions, .. } in &document.settled {
                let standing = settled.standing(stream);
                let now = standing.give_up_after().map_or("nothing settled is in force".into(), |time| {
                    format!("{} is in force", say::exact_duration(time.seconds()))
                });
                let _ = writeln!(text, "{stream}: {now}");
                decisions.iter().for_each(|decision| line(&mut text, decision));
            }
            if text.is_empty() { "Nothing was decided on these.\n".into() } else { text }
        };
        print(&self.common.format.render(&document, text)?)?;
        Ok(Exit::Well)
    }

    fn say(
        &self,
        taken: &[(String, Settlement)],
        advised: &[Advice],
        after: &Settled,
    ) -> Result<(), Failure> {
        let cautions = |stream: &str, decision: &Settlement| {
            let advice = advised.iter().find(|advice| advice.stream == stream);
            advice
                .filter(|_| decision.state.in_force().is_some())
                .map(|a| a.cautions.as_slice())
                .unwrap_or_default()
        };
        let settled = taken.iter().map(|(stream, decision)| Told {
            stream,
            decisions: std::slice::from_ref(decision),
            cautions: cautions(stream, decision),
        });
        let document = Document::of(settled.collect());
        let text = || {
            let mut text = String::new();
            for Told { stream, decisions, cautions } in &document.settled {
                let now = after.standing(stream).give_up_after();
                let now = now.map_or("the policy's time is in force".into(), |time| {
                    format!("{} is in force", say::exact_duration(time.seconds()))
                });
                let _ = writeln!(text, "{stream}: {}; {now}", decisions[0].state.name());
                for caution in *cautions {
                    let _ =
                        writeln!(text, "  ! {}: {}\n    -> {}", caution.code, caution.text, caution.remedy);
                }
            }
            text
        };
        print(&self.common.format.render(&document, text)?)
    }
}

fn line(text: &mut String, decision: &Settlement) {
    let _ = writeln!(text, "  {}", decision.words());
    if let Some(Grounds { waits, done, in_force, advised, proposed, loses, .. }) = &decision.grounds {
        let mut parts =
            vec![format!("{} waits, {} done", say::count(*waits as f64), say::count(*done as f64))];
        for (name, time) in [("in force", in_force), ("best", advised), ("proposed", proposed)] {
            parts.extend(time.map(|time| format!("{name} {}", say::duration(time.seconds()))));
        }
        parts.extend(loses.map(|loses| format!("the one in force lost {}", say::percent(loses))));
        let _ = writeln!(text, "    {}", parts.join("; "));
    }
}

fn told(refused: &Refused) -> Failure {
    Failure::new(Exit::BadInput, refused.clone()).with_remedy(refused.remedy())
}

fn pattern(text: &str) -> Result<Glob, String> {
    Glob::new(text).map_err(|error| format!("it {error}; use letters, digits and . _ - / : with `*` and `?`"))
}

/// A time above 0, or never.
pub(super) fn give_up(text: &str) -> Result<GiveUp, String> {
    crate::policy::scalar::give_up(text).map_err(|flaw| format!("{flaw}; write for instance 800ms, or never"))
}

/// A time, a date, or a duration from now.
fn ahead(text: &str, now: Timestamp) -> Result<Timestamp, Failure> {
    settle::ahead(text, now).ok_or_else(|| {
        Failure::new(Exit::Usage, anyhow!("{text:?} is no time to look again"))
            .with_remedy("write 2026-12-14, 2026-12-14T10:00:00Z or 14d")
    })
}
