//! Advice as text for a person at a terminal: a summary line, then one block a stream. A view; it computes nothing.

use std::fmt::Write;

use crate::advice::{Action, Advice, AdviceSet, Change, Outcome};
use crate::say;

use super::layout::{Dressed, Page};

/// Where the text of a field begins.
const FIELD: usize = 11;

/// The whole of a run.
pub(super) fn advice_set(set: &AdviceSet, page: Page) -> String {
    let mut out = String::new();
    page.paragraph(&mut out, Dressed("", Page::plain), Dressed(&summary(set), Page::strong), 0);
    for line in &set.assumed {
        page.paragraph(&mut out, Dressed("assumed: ", Page::warn), Dressed(line, Page::plain), 2);
    }
    for advice in &set.streams {
        out.push('\n');
        block(&mut out, advice, page);
    }
    out
}

/// How many streams get which advice, and where most is lost.
pub(super) fn summary(set: &AdviceSet) -> String {
    let waits: u64 = set.streams.iter().map(|s| s.evidence.waits).sum();
    let n = set.streams.len();
    if n == 0 {
        return "No waits to weigh: every one was left out.".into();
    }
    let count = |action: Action| set.streams.iter().filter(|s| s.advice.action == action).count();
    let mut parts = Vec::new();
    for (action, words) in [
        (Action::GiveUpAfter, "to give up after a time"),
        (Action::WaitItOut, "to wait out"),
        (Action::GatherEvidence, "with too little evidence"),
        (Action::StateACost, "without a cost of time"),
    ] {
        match count(action) {
            0 => {}
            n => parts.push(format!("{n} {words}")),
        }
    }
    let mut line =
        format!("{} in {}: {}.", counted(waits, "wait"), counted(n as u64, "stream"), parts.join(", "));
    let worst = set
        .streams
        .iter()
        .filter_map(|s| s.advice.regret_now.map(|r| (s, r)))
        .max_by(|a, b| a.1.total_cmp(&b.1))
        .filter(|(_, regret)| *regret > 0.0);
    if let Some((stream, regret)) = worst {
        let _ = write!(line, " The time in force loses most in {}: {}.", stream.stream, say::percent(regret));
    }
    line
}

/// `1 wait`, `2,000 waits`.
pub(super) fn counted(n: u64, what: &str) -> String {
    format!("{} {what}{}", say::count(n as f64), if n == 1 { "" } else { "s" })
}

fn block(out: &mut String, advice: &Advice, page: Page) {
    let e = &advice.evidence;
    let mut head =
        format!("{}, {}: {} done", advice.kind, counted(e.waits, "wait"), say::count(e.done as f64));
    for (n, what) in [(e.failed, "failed"), (e.gave_up, "given up"), (e.waiting, "open")] {
        if n > 0 {
            let _ = write!(head, ", {} {what}", say::count(n as f64));
        }
    }
    let name = format!("{}  ", advice.stream);
    page.paragraph(out, Dressed(&name, Page::strong), Dressed(&head, Page::faint), 2);
    field(out, page, "Verdict", &verdict(advice));
    styled_field(out, page, "Advice", Dressed(&headline(advice), Page::strong));
    field(out, page, "Why", &advice.advice.because);
    outcomes(out, advice, page);
    change(out, advice, page);
    doubt(out, advice, page);
    extras(out, advice, page);
    for caution in &advice.cautions {
        let code = format!("  ! {}: ", caution.code);
        page.paragraph(out, Dressed(&code, Page::warn), Dressed(&caution.text, Page::plain), 4);
        page.paragraph(out, Dressed("    -> ", Page::plain), Dressed(&caution.remedy, Page::plain), 7);
    }
}

fn field(out: &mut String, page: Page, name: &str, text: &str) {
    styled_field(out, page, name, Dressed(text, Page::plain));
}

fn styled_field(out: &mut String, page: Page, name: &str, text: Dressed<'_>) {
    page.paragraph(out, Dressed(&format!("  {name:<9}"), Page::plain), text, FIELD);
}

fn verdict(advice: &Advice) -> String {
    format!("{}; {}", advice.tail.class.words(), advice.tail.remaining_wait.words())
}

/// What to do, in a line.
pub(super) fn headline(advice: &Advice) -> String {
    let d = &advice.advice;
    match d.action {
        Action::GiveUpAfter => match d.give_up_after_s {
            Some(t) => {
                let mut line = format!("give up after {}", say::duration(t));
                if let Some([low, high]) = d.band_s {
                    let _ = write!(
                        line,
                        "; anything from {} to {} is about as good",
                        say::duration(low),
                        say::duration(high)
                    );
                }
                line
            }
            None => "give up".into(),
        },
        Action::WaitItOut => match d.ceiling_s {
            Some(c) => format!("wait it out, up to the ceiling of {}", say::duration(c)),
            None => "wait it out".into(),
        },
        Action::GatherEvidence => "gather evidence before changing anything".into(),
        Action::StateACost => "state what waiting costs; without it there is no reason to stop".into(),
    }
}

/// The table of what the advised time, the one in force and never giving up do.
fn outcomes(out: &mut String, advice: &Advice, page: Page) {
    let d = &advice.advice;
    let advised = d.rate_per_s.map(|rate| Outcome {
        give_up_after_s: d.give_up_after_s.or(d.ceiling_s),
        rate_per_s: rate,
        done_share: d.done_share.unwrap_or(f64::NAN),
        attempts_per_request: d.attempts_per_request,
        p50_s: d.p50_s,
        p99_s: d.p99_s,
    });
    let rows: Vec<(&str, Outcome)> = [("advised", advised), ("in force", d.now), ("never", d.never)]
        .into_iter()
        .filter_map(|(name, outcome)| outcome.map(|o| (name, o)))
        .collect();
    if rows.is_empty() {
        return;
    }
    let cells: Vec<[String; 7]> = std::iter::once(
        ["", "give up at", "rate", "done", "attempts", "half by", "99% by"].map(String::from),
    )
    .chain(rows.iter().map(|(name, o)| {
        [
            (*name).to_owned(),
            o.give_up_after_s.map_or("never".into(), say::duration),
            per_second(o.rate_per_s),
            say::percent(o.done_share),
            o.attempts_per_request.map_or("-".into(), say::number),
            o.p50_s.map_or("-".into(), say::duration),
            o.p99_s.map_or("-".into(), say::duration),
        ]
    }))
    .collect();
    // Under the texts of the fields, where there is room.
    let indent = if FIELD + width(&cells) <= page.columns { FIELD } else { 2 };
    columns(out, &cells, indent);
}

/// Columns of a table with two spaces between them, names to the left, figures to the right.
pub(super) fn columns<const N: usize>(out: &mut String, rows: &[[String; N]], indent: usize) {
    let widths = widths(rows);
    for row in rows {
        let mut line = " ".repeat(indent);
        for (i, (cell, width)) in row.iter().zip(widths).enumerate() {
            let pad = " ".repeat(width - cell.chars().count());
            let _ = if i == 0 { write!(line, "{cell}{pad}") } else { write!(line, "  {pad}{cell}") };
        }
        let _ = writeln!(out, "{}", line.trim_end());
    }
}

fn widths<const N: usize>(rows: &[[String; N]]) -> [usize; N] {
    let mut widths = [0; N];
    for row in rows {
        for (width, cell) in widths.iter_mut().zip(row) {
            *width = (*width).max(cell.chars().count());
        }
    }
    widths
}

/// Of a table, the indent apart.
fn width<const N: usize>(rows: &[[String; N]]) -> usize {
    widths(rows).iter().sum::<usize>() + 2 * (N - 1)
}

/// A rate in the unit that keeps it readable: per second, minute, hour or day.
fn per_second(rate: f64) -> String {
    let (factor, unit) = period(rate);
    format!("{}{unit}", say::number(factor * rate))
}

/// The unit that keeps a rate readable, and its length in s.
pub(super) fn period(rate: f64) -> (f64, &'static str) {
    match rate.abs() {
        r if r >= 0.1 || r == 0.0 => (1.0, "/s"),
        r if r >= 0.1 / 60.0 => (60.0, "/min"),
        r if r >= 0.1 / 3600.0 => (3600.0, "/h"),
        _ => (86_400.0, "/d"),
    }
}

/// The next change of the time in force.
fn change(out: &mut String, advice: &Advice, page: Page) {
    let d = &advice.advice;
    let (Some(proposal), Some(now)) = (&d.proposal, &d.now) else { return };
    let time = |t: Option<f64>| say::duration(t.unwrap_or(f64::INFINITY));
    let text = match proposal.change {
        Change::Keep => {
            format!("keep {}: what a change would gain is less than the slack", time(now.give_up_after_s))
        }
        change => format!(
            "{} the time in force from {} to {}{}",
            if change == Change::Raise { "raise" } else { "lower" },
            time(now.give_up_after_s),
            time(proposal.to_s),
            if proposal.step_limited { ", the largest step that the guard allows" } else { "" }
        ),
    };
    field(out, page, "Change", &text);
}

fn doubt(out: &mut String, advice: &Advice, page: Page) {
    let d = &advice.advice;
    let mut parts = Vec::new();
    if let Some([low, high]) = d.interval_s {
        parts.push(format!(
            "best time between {} and {} (90%)",
            say::duration(low),
            if Some(high) == d.ceiling_s { "the ceiling".into() } else { say::duration(high) }
        ));
    }
    if let (Some(mean), Some(high)) = (d.expected_regret, d.regret_95) {
        parts.push(format!("expected loss {} (95%: {})", say::percent(mean), say::percent(high)));
    }
    if let Some(regret) = d.regret_now {
        parts.push(format!("the time in force loses {}", say::percent(regret)));
    }
    if !parts.is_empty() {
        field(out, page, "Doubt", &parts.join("; "));
    }
}

fn extras(out: &mut String, advice: &Advice, page: Page) {
    let d = &advice.advice;
    if let Some(sticky) = &d.sticky {
        let phi = say::percent(sticky.value);
        let mut line = match (sticky.from.as_str(), sticky.interval) {
            ("unknown", _) => {
                "nothing tells how often a retry meets the fate of the attempt it replaces; taken as never"
                    .to_owned()
            }
            (_, Some([low, high])) => format!(
                "in the data, one meets the fate of the attempt it replaces {phi} of the time ({} to {})",
                say::percent(low),
                say::percent(high)
            ),
            _ => format!("by the policy, one meets the fate of the attempt it replaces {phi} of the time"),
        };
        if let Some(flip) = sticky.flips_at {
            let _ = write!(line, "; from {} on, waiting it out would be best", say::percent(flip));
        }
        field(out, page, "Retries", &line);
    }
    if let Some(budget) = d.retry_budget.filter(|&b| b > 0.0) {
        let text = format!("a throttle must let through {} retries a request", say::number(budget));
        field(out, page, "Budget", &text);
    }
    if !d.schedule_s.is_empty() {
        field(out, page, "Schedule", &list(&d.schedule_s));
    }
    if let Some(copy) = &d.second_copy {
        let mut line = format!(
            "a second copy started at {} adds {} attempts a request",
            say::duration(copy.start_s),
            say::number(copy.extra_load)
        );
        let by = |t: Option<f64>| {
            t.map_or("fewer than 99% are ever done".to_owned(), |t| {
                format!("99% are done by {}", say::duration(t))
            })
        };
        let _ = write!(line, ": {}; with a retry of equal load {}", by(copy.p99_s), by(copy.retry_p99_s));
        field(out, page, "Copy", &line);
    }
    if let Some(look) = &d.look {
        let share = look.share.map(|s| format!(", {} of the traffic for a week", say::percent(s)));
        field(
            out,
            page,
            "Look",
            &format!(
                "past the edge of sight: let {} waits{} run from {} to {}; worth it if more than {} of them end by then; \
                 each that does not costs {} of worth",
                say::count(look.waits_needed),
                share.unwrap_or_default(),
                say::duration(look.from_s),
                say::duration(look.to_s),
                say::percent(look.break_even),
                say::number(look.worst_cost_each)
            ),
        );
    }
    if !d.stop_gap_s.is_empty() {
        field(
            out,
            page,
            "Stop-gap",
            &format!("until there is evidence, give up in turn after {}", list(&d.stop_gap_s)),
        );
    }
}

fn list(times: &[f64]) -> String {
    times.iter().map(|&t| say::duration(t)).collect::<Vec<_>>().join(", ")
}
