//! `outwait replay`: rules side by side on waits that they have not seen.

use std::fmt::Write;
use std::num::NonZeroUsize;

use anyhow::{Context, anyhow};
use clap::Args;
use rayon::prelude::*;

use super::exit::{Exit, Failure, OrExit, print};
use super::layout::{Dressed, Page};
use super::options::{Common, Output, Reading};
use super::pictures::{Album, Pictures};
use super::{reading, text};
use crate::chart::{self, Bar, Role, Section, quantity};
use crate::intake::{Record, Sink};
use crate::replay::{ADVICE, IN_FORCE, Log, Note, ReplaySet, Roll, RuleReplay, StreamReplay};
use crate::say;
use crate::tally::Day;

const EXAMPLES: &str = "\
Examples:
  outwait replay waits.ndjson --policy policy.yaml
  outwait replay year.csv.gz --stream 'catalogue.*' --format csv
  outwait replay waits.ndjson --pictures pictures

Every week but the first is earned on with what was learnt on the weeks before it. Waits need a time (`at`);
without it they are taken in the order of the files, in equal parts.
Exit codes: 0 well, 2 wrong usage, 3 bad input, 4 nothing to replay anywhere, 5 the system failed.";

/// Arguments of `replay`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES, mut_arg("format", Output::with_csv))]
pub(super) struct Replay {
    #[command(flatten)]
    reading: Reading,
    #[command(flatten)]
    common: Common,
    #[command(flatten)]
    pictures: Pictures,
}

/// Counts what is read, in its order.
#[derive(Default)]
struct InOrder(Log);

impl Sink for InOrder {
    #[inline]
    fn take(&mut self, record: &Record<'_>) {
        // The reader has checked the name.
        let _ = self.0.add(record.stream, &record.wait);
    }

    /// Never asked for: one thread reads.
    fn fork(&self) -> Self {
        InOrder::default()
    }

    fn absorb(&mut self, _: Self) {}
}

impl Replay {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        if self.reading.threads.is_some_and(|threads| threads.get() > 1) {
            return Err(Failure::new(
                Exit::Usage,
                anyhow!("the order of the waits counts, so one thread reads them"),
            )
            .with_remedy("leave out --threads"));
        }
        let policy = self.common.load_policy()?;
        let reading = Reading { threads: Some(NonZeroUsize::MIN), ..self.reading.clone() };
        let (InOrder(log), report) = reading::into(InOrder::default(), &reading, &self.common)?;
        let newest = report.newest.map(|t| self.common.until.map_or(t, |until| t.min(until.next_down())));
        let newest = newest.and_then(|t| match Day::of(Some(t)) {
            Day::Number(day) => Some(day),
            Day::Undated => None,
        });
        let roll = Roll { policy: policy.as_ref(), newest, seed: self.common.seed };
        let names = log.names();
        let replayed = |stream: &&str| {
            let mut replay = roll.stream(&log, stream);
            replay.notes.extend(reading::closed_loop(&report, &roll.terms(None), stream).map(Note::of));
            replay
        };
        let streams = names.par_iter().map(replayed).collect();
        let set = roll.set(&log, streams);
        if let Some(album) = self.pictures.open(set.streams.len())? {
            draw(&album, &set)?;
        }
        let page = || text(&set, Page::standard_output());
        let out = match self.common.format {
            Output::Csv => csv(&set)?,
            format => format.render(&set, page)?,
        };
        print(&out)?;
        let nothing = set.streams.iter().all(|s| s.rules.is_empty());
        Ok(if nothing { Exit::NoEvidence } else { Exit::Well })
    }
}

fn draw(album: &Album, set: &ReplaySet) -> Result<(), Failure> {
    let sections = set.streams.par_iter().enumerate().map(|(number, stream)| {
        let picture = |frame: &chart::Frame<'_>| picture(stream, set.level, frame);
        let figure = album.figure(&stream.stream, "replay", number, &picture)?;
        Ok(Section {
            heading: stream.stream.clone(),
            note: say::capital(&stream.finding) + ".",
            figures: vec![figure],
        })
    });
    let sections = sections.collect::<Result<Vec<Section>, Failure>>()?;
    album.page("What each rule earned on waits that it had not seen", &summary(set), &sections)
}

fn picture(stream: &StreamReplay, level: f64, frame: &chart::Frame<'_>) -> chart::Svg {
    if stream.rules.is_empty() {
        return chart::nothing(&stream.stream, &stream.finding, frame);
    }
    let bars: Vec<Bar<'_>> = stream
        .rules
        .iter()
        .map(|rule| Bar {
            name: &rule.rule,
            value: rule.rate_per_s.unwrap_or(f64::NAN),
            interval: rule.interval_per_s,
            role: match rule.rule.as_str() {
                ADVICE => Role::Ours,
                IN_FORCE => Role::InForce,
                _ => Role::Other,
            },
        })
        .collect();
    let over = format!("{} not seen before", periods(stream));
    let input = chart::Replay {
        stream: &stream.stream,
        over: &over,
        quantity: quantity(stream.aim.as_deref()),
        level,
        bars: &bars,
    };
    chart::replay(&input, frame)
}

/// "3 weeks".
fn periods(stream: &StreamReplay) -> String {
    text::counted(stream.periods.len() as u64, &stream.by)
}

/// How often the advice came out best.
fn summary(set: &ReplaySet) -> String {
    let replayed = set.streams.iter().filter(|s| !s.rules.is_empty());
    let rate = |rule: &RuleReplay| rule.rate_per_s.unwrap_or(f64::NEG_INFINITY);
    let beaten = |s: &&StreamReplay| {
        let ours = s.rules.iter().find(|r| r.rule == ADVICE).map_or(f64::NAN, rate);
        // Half a percent is no difference.
        s.rules.iter().any(|r| rate(r) > ours + 0.005 * rate(r).abs())
    };
    let known = |s: &&StreamReplay| s.rules.iter().any(|r| r.rule == ADVICE && r.rate_per_s.is_some());
    let (all, count) = (set.streams.len(), replayed.clone().count());
    let seen = replayed.clone().filter(known).count();
    let lost = replayed.filter(known).filter(beaten).count();
    let mut line = format!("{count} of {} replayed", text::counted(all as u64, "stream"));
    if seen > 0 {
        let _ = write!(line, "; another rule earned more than the advice in {lost} of {seen}");
    }
    line + "."
}

fn text(set: &ReplaySet, page: Page) -> String {
    let mut out = String::new();
    page.paragraph(&mut out, Dressed("", Page::plain), Dressed(&summary(set), Page::strong), 0);
    for line in &set.assumed {
        page.paragraph(&mut out, Dressed("assumed: ", Page::warn), Dressed(line, Page::plain), 2);
    }
    for stream in &set.streams {
        out.push('\n');
        let head = match stream.periods.as_slice() {
            [] => String::new(),
            all => {
                format!("{}, {}", periods(stream), text::counted(all.iter().map(|p| p.waits).sum(), "wait"))
            }
        };
        let name = format!("{}  ", stream.stream);
        page.paragraph(&mut out, Dressed(&name, Page::strong), Dressed(&head, Page::faint), 2);
        let finding = say::capital(&stream.finding);
        page.paragraph(&mut out, Dressed("  ", Page::plain), Dressed(&finding, Page::plain), 2);
        table(&mut out, stream, set.level);
        for note in &stream.notes {
            let code = format!("  ! {}: ", note.code);
            page.paragraph(&mut out, Dressed(&code, Page::warn), Dressed(&note.text, Page::plain), 4);
        }
    }
    out
}

fn table(out: &mut String, stream: &StreamReplay, level: f64) {
    if stream.rules.is_empty() {
        return;
    }
    let aim = stream.aim.as_deref();
    let per_time = !matches!(aim, Some("carrying_cost" | "deadline"));
    let rates = stream.rules.iter().filter_map(|r| r.rate_per_s);
    let largest = rates.fold(0.0, |m: f64, r| m.max(r.abs()));
    let (factor, unit) = if per_time { text::period(largest) } else { (1.0, "") };
    let rate = |r: f64| format!("{}{unit}", say::number(factor * r));
    let range = |[low, high]: [f64; 2]| format!("{} to {}", rate(low), rate(high));
    let head = [
        String::new(),
        "give up at".into(),
        "earned".into(),
        say::percent(level).replace(".0%", "%"),
        "advice ahead".into(),
        "done".into(),
    ];
    let rows = stream.rules.iter().map(|r| {
        [
            r.rule.clone(),
            times(&r.give_up_after_s),
            r.rate_per_s.map_or("not seen".into(), rate),
            match (r.rate_per_s, r.interval_per_s) {
                (None, Some(bounds)) => format!("between {}", range(bounds).replace(" to ", " and ")),
                (_, interval) => interval.map_or("-".into(), range),
            },
            ahead(r, &rate),
            say::percent(r.done_share),
        ]
    });
    text::columns(out, &std::iter::once(head).chain(rows).collect::<Vec<_>>(), 4);
}

/// By how much the advice earned more, with its interval: as a share where the other earned something.
fn ahead(rule: &RuleReplay, say: &dyn Fn(f64) -> String) -> String {
    let (Some(ahead), Some(rate)) = (rule.advice_ahead_per_s, rule.rate_per_s) else { return "-".into() };
    let share = |v: f64| if rate > 0.0 { say::percent(v / rate) } else { say(v) };
    let interval = rule.advice_ahead_interval_per_s;
    let range = interval.map_or(String::new(), |[low, high]| format!(" ({} to {})", share(low), share(high)));
    share(ahead) + &range
}

/// The times of a rule over the periods: the last, and between which they lay.
fn times(times: &[Option<f64>]) -> String {
    let Some(last) = times.last() else { return "by the wait".into() };
    let say = |t: f64| say::duration(t);
    let seconds = |t: &Option<f64>| t.unwrap_or(f64::INFINITY);
    let low = times.iter().map(seconds).fold(f64::INFINITY, f64::min);
    let high = times.iter().map(seconds).fold(0.0, f64::max);
    match say(low) == say(high) {
        true => say(seconds(last)),
        false => format!("{} to {}", say(low), say(high)),
    }
}

/// A row a rule.
fn csv(set: &ReplaySet) -> Result<String, Failure> {
    let mut writer = csv::Writer::from_writer(Vec::new());
    let head = [
        "stream",
        "aim",
        "by",
        "periods",
        "rule",
        "give_up_after_s",
        "rate_per_s",
        "rate_low_per_s",
        "rate_high_per_s",
        "advice_ahead_per_s",
        "advice_ahead_low_per_s",
        "advice_ahead_high_per_s",
        "hidden_share",
        "done_share",
        "spent_s",
    ];
    let number = |value: Option<f64>| value.map_or(String::new(), |v| v.to_string());
    let rows = set.streams.iter().flat_map(|stream| {
        stream.rules.iter().map(move |r| {
            let end = |interval: Option<[f64; 2]>, i: usize| number(interval.map(|ends| ends[i]));
            let last = match r.give_up_after_s.last() {
                None => String::new(),
                Some(time) => time.map_or("never".into(), |t| t.to_string()),
            };
            [
                stream.stream.clone(),
                stream.aim.clone().unwrap_or_default(),
                stream.by.clone(),
                stream.periods.len().to_string(),
                r.rule.clone(),
                last,
                number(r.rate_per_s),
                end(r.interval_per_s, 0),
                end(r.interval_per_s, 1),
                number(r.advice_ahead_per_s),
                end(r.advice_ahead_interval_per_s, 0),
                end(r.advice_ahead_interval_per_s, 1),
                r.hidden_share.to_string(),
                r.done_share.to_string(),
                r.spent_s.to_string(),
            ]
        })
    });
    let written = writer
        .write_record(head)
        .and_then(|()| rows.into_iter().try_for_each(|row| writer.write_record(row)));
    written.context("cannot write CSV").or_exit(Exit::System)?;
    let bytes = writer.into_inner().map_err(|e| anyhow!("cannot write CSV: {e}")).or_exit(Exit::System)?;
    String::from_utf8(bytes).context("cannot write CSV").or_exit(Exit::System)
}
