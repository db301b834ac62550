//! An audit as text for a person at a terminal. A view; it computes nothing but sums for the first line.

use std::fmt::Write;

use crate::advice::{Action, Caution};
use crate::audit::queue::{QueueReport, Sizing};
use crate::audit::{
    AuditSet, ByHour, Closed, Cut, Lost, OpenList, OpenWait, Rule, RuleFrom, StreamAudit, Unit, Verdict,
};
use crate::cli::layout::{Dressed, Page};
use crate::cli::text::counted;
use crate::say;

/// Where the text of a field begins.
const FIELD: usize = 11;
/// Hours of the week that are named.
const WORST_HOURS: usize = 3;

/// The whole of a run.
pub(super) fn audit_set(set: &AuditSet, page: Page) -> String {
    let mut out = String::new();
    page.paragraph(&mut out, Dressed("", Page::plain), Dressed(&summary(set), Page::strong), 0);
    for line in &set.assumed {
        page.paragraph(&mut out, Dressed("assumed: ", Page::warn), Dressed(line, Page::plain), 2);
    }
    cautions(&mut out, &set.cautions, page);
    for stream in &set.streams {
        out.push('\n');
        block(&mut out, stream, page);
    }
    open_waits(&mut out, &set.open, page);
    out
}

/// What was lost in all, and where most.
pub(super) fn summary(set: &AuditSet) -> String {
    let closed: u64 = set.streams.iter().map(|s| s.closed.total.waits).sum();
    if set.streams.is_empty() {
        return "No waits to audit: every one was left out.".into();
    }
    let mut line =
        format!("{} in {}", counted(closed, "closed wait"), counted(set.streams.len() as u64, "stream"));
    let most = |of: &dyn Fn(&Lost) -> f64| {
        let worst = set.streams.iter().max_by(|a, b| of(&a.closed.total).total_cmp(&of(&b.closed.total)));
        // Of one stream alone it goes without saying.
        worst.filter(|_| set.streams.len() > 1).map_or(String::new(), |s| format!(", most in {}", s.stream))
    };
    let hours: f64 = set.streams.iter().map(|s| s.closed.total.over.hours).sum();
    let _ = match hours > 0.0 {
        true => write!(line, ": {} waited past the advice{}", long(hours), most(&|lost| lost.over.hours)),
        false => write!(line, ": none waited past the advice"),
    };
    let early: u64 = set.streams.iter().map(|s| s.closed.total.under.waits).sum();
    if early > 0 {
        let worst = most(&|lost| lost.under.waits as f64);
        let _ = write!(line, "; {} given up too early{worst}", say::count(early as f64));
    }
    line.push('.');
    if set.open.total > 0 {
        let let_go: u64 = set.streams.iter().map(|s| s.open.let_go).sum();
        let _ = write!(
            line,
            " {} open, {} to let go of now.",
            say::count(set.open.total as f64),
            if let_go == 0 { "none".into() } else { say::count(let_go as f64) }
        );
    }
    line
}

/// Hours as a duration.
pub(super) fn long(hours: f64) -> String {
    say::duration(3600.0 * hours)
}

fn block(out: &mut String, stream: &StreamAudit, page: Page) {
    let name = format!("{}  ", stream.stream);
    page.paragraph(out, Dressed(&name, Page::strong), Dressed(&head(stream), Page::faint), 2);
    for (name, text) in fields(stream) {
        field(out, page, name, &text);
        if name == "In force" {
            table(out, page, std::iter::once("").chain(LOST_HEADS), rule_rows(stream));
        }
    }
    // Without a rule the table has no sentence to follow.
    if stream.rule.is_none() {
        table(out, page, std::iter::once("").chain(LOST_HEADS), rule_rows(stream));
    }
    if let Some(queue) = &stream.queue {
        queue_lines(out, queue, page);
    }
    cautions(out, &stream.cautions, page);
}

/// What the audit of a stream rests on.
pub(super) fn head(stream: &StreamAudit) -> String {
    let e = &stream.evidence;
    let endings = [(e.done, "done"), (e.failed, "failed"), (e.gave_up, "given up"), (e.waiting, "open")];
    let named: Vec<String> = endings
        .into_iter()
        .filter(|(n, _)| *n > 0)
        .map(|(n, what)| format!("{} {what}", say::count(n as f64)))
        .collect();
    if named.is_empty() {
        return format!("{}, no wait in its window", stream.kind);
    }
    format!("{}, {}: {}", stream.kind, counted(e.waits, "wait"), named.join(", "))
}

/// What is said of a stream, by name; not of the queue behind it.
pub(super) fn fields(stream: &StreamAudit) -> Vec<(&'static str, String)> {
    let mut fields = vec![("Advice", measure(stream))];
    if stream.closed.total.waits > 0 && stream.advice.unit.is_some() {
        fields.extend([("Too long", too_long(stream)), ("Too soon", too_soon(stream))]);
    }
    fields.extend(stream.rule.as_ref().map(|rule| ("In force", in_force(rule))));
    fields.extend(worst_hours(&stream.closed).map(|text| ("Hours", text)));
    if stream.open.waits > 0 {
        fields.push(("Open", open(stream)));
    }
    fields
}

/// A table, heads first; nothing without rows.
fn table<'a>(out: &mut String, page: Page, heads: impl IntoIterator<Item = &'a str>, rows: Vec<Vec<String>>) {
    if !rows.is_empty() {
        let heads = heads.into_iter().map(String::from).collect();
        let all: Vec<Vec<String>> = std::iter::once(heads).chain(rows).collect();
        page.table(out, &all, FIELD);
    }
}

fn field(out: &mut String, page: Page, name: &str, text: &str) {
    page.paragraph(out, Dressed(&format!("  {name:<9}"), Page::plain), Dressed(text, Page::plain), FIELD);
}

fn cautions(out: &mut String, cautions: &[Caution], page: Page) {
    for caution in cautions {
        let code = format!("  ! {}: ", caution.code);
        page.paragraph(out, Dressed(&code, Page::warn), Dressed(&caution.text, Page::plain), 4);
        page.paragraph(out, Dressed("    -> ", Page::plain), Dressed(&caution.remedy, Page::plain), 7);
    }
}

/// What the waits are held against.
pub(super) fn measure(stream: &StreamAudit) -> String {
    let advice = &stream.advice;
    match (advice.action, advice.give_up_after_s) {
        (Action::GiveUpAfter, Some(at)) => {
            let mut line = format!("give up after {}", say::duration(at));
            if let Some([low, high]) = advice.band_s {
                let _ = write!(line, "; {} to {} is about as good", say::duration(low), say::duration(high));
            }
            line
        }
        (Action::GiveUpAfter | Action::WaitItOut, _) => "wait it out".into(),
        (Action::GatherEvidence, _) => format!("none yet, so nothing is held against it: {}", advice.because),
        (Action::StateACost, _) => {
            format!("none without a cost of time, so nothing is held against it: {}", advice.because)
        }
    }
}

/// An amount of worth in its unit.
pub(super) fn amount(value: f64, unit: Option<Unit>) -> String {
    match unit {
        Some(Unit::Seconds) => format!("{} of requests' time", say::duration(value)),
        Some(Unit::Probability) => format!("{} requests in time", say::number(value)),
        _ => format!("{} of worth", say::number(value)),
    }
}

/// Waiting past the advice.
pub(super) fn too_long(stream: &StreamAudit) -> String {
    let Lost { waits, hours, over, .. } = stream.closed.total;
    if over.waits == 0 {
        return "no wait went on past it".into();
    }
    let mut line = format!(
        "{} ({} of all) went on past it for {}, {} of all time waited",
        counted(over.waits, "wait"),
        say::percent(over.waits as f64 / waits as f64),
        long(over.hours),
        say::percent(over.hours / hours)
    );
    let unit = stream.advice.unit;
    let (Some(cost), Some(back), Some(lost)) = (over.cost, over.won_back, over.lost) else { return line };
    // Time is worth itself where worth is counted in it.
    let (cost, back) = match unit {
        Some(Unit::Seconds) => (String::new(), say::duration(back)),
        _ => (format!(": time worth {}", say::number(cost)), say::number(back)),
    };
    let sep = if cost.is_empty() { "; " } else { ", of which " };
    let _ = write!(
        line,
        "{cost}{sep}late endings brought back {back}; {} {}",
        if lost < 0.0 { "gained" } else { "lost" },
        amount(lost.abs(), unit)
    );
    line
}

/// Giving up before the advice.
pub(super) fn too_soon(stream: &StreamAudit) -> String {
    let Lost { under, .. } = stream.closed.total;
    if under.waits == 0 {
        return "none was given up although holding on was worth more".into();
    }
    let mut line = format!(
        "{} given up although holding on was worth more: {} longer in all would have brought {}",
        counted(under.waits, "wait"),
        long(under.further_hours),
        amount(under.lost.unwrap_or(0.0), stream.advice.unit)
    );
    if under.before_bulk > 0 {
        let _ = write!(
            line,
            "; {} of them just before a bulk, when one in two or more is done within half as long again",
            say::count(under.before_bulk as f64)
        );
    }
    line
}

/// The time in force and where it is known from.
pub(super) fn in_force(rule: &Rule) -> String {
    let at = rule.at_s.map_or("never to give up".to_owned(), say::duration);
    let from = match rule.from {
        RuleFrom::Policy => "by the policy",
        RuleFrom::Data => "as most give-ups show",
    };
    match rule.share.filter(|_| rule.at_s.is_some()) {
        Some(share) => format!("{at}, {from}; {} of the give-ups lie there", say::percent(share)),
        None => format!("{at}, {from}"),
    }
}

/// How waits ended, in words.
pub(super) fn cut_name(cut: Cut) -> &'static str {
    match cut {
        Cut::Ended => "ended by themselves",
        Cut::ByRule => "given up at that time",
        Cut::Before => "given up earlier",
        Cut::After => "given up later",
        Cut::NoRule => "given up",
    }
}

/// Heads of the tables of losses.
pub(super) const LOST_HEADS: [&str; 6] =
    ["waits", "too long", "time past", "lost by it", "too soon", "lost by it"];

/// The cells under [`LOST_HEADS`].
pub(super) fn lost_cells(lost: &Lost, unit: Option<Unit>) -> [String; 6] {
    let says = if unit == Some(Unit::Seconds) { say::duration } else { say::number };
    let or_dash = |value: Option<f64>| value.map_or("-".to_owned(), says);
    [
        say::count(lost.waits as f64),
        say::count(lost.over.waits as f64),
        long(lost.over.hours),
        or_dash(lost.over.lost),
        say::count(lost.under.waits as f64),
        or_dash(lost.under.lost),
    ]
}

/// The rows of a table by the time in force; none where all would be one.
pub(super) fn rule_rows(stream: &StreamAudit) -> Vec<Vec<String>> {
    let rows = &stream.closed.by_rule;
    if stream.advice.unit.is_none() || rows.len() < 2 {
        return Vec::new();
    }
    let row = |row: &crate::audit::ByRule| {
        let name = std::iter::once(cut_name(row.cut).to_owned());
        name.chain(lost_cells(&row.lost, stream.advice.unit)).collect()
    };
    rows.iter().map(row).collect()
}

/// The hours in which the most was lost.
fn worst_hours(closed: &Closed) -> Option<String> {
    let mut hours: Vec<&ByHour> = closed.by_hour.iter().filter(|h| h.lost.over.hours > 0.0).collect();
    if hours.len() < 2 {
        return None;
    }
    hours.sort_by(|a, b| b.lost.over.hours.total_cmp(&a.lost.over.hours));
    let named: Vec<String> = hours
        .iter()
        .take(WORST_HOURS)
        .map(|h| format!("{} {:02}:00 ({})", h.day, h.hour, long(h.lost.over.hours)))
        .collect();
    Some(format!("most was waited past the advice in the hours from {} UTC", named.join(", ")))
}

/// Open waits in a sentence.
pub(super) fn open(stream: &StreamAudit) -> String {
    let open = &stream.open;
    let mut parts = Vec::new();
    for (n, what) in [(open.let_go, "to let go"), (open.hold, "to hold"), (open.unknown, "without a verdict")]
    {
        if n > 0 {
            parts.push(format!("{} {what}", say::count(n as f64)));
        }
    }
    let mut line = format!("{}: {}", counted(open.waits, "wait"), parts.join(", "));
    if open.hours_past > 0.0 {
        let _ = write!(line, "; past the advice so far: {}", long(open.hours_past));
    }
    line
}

fn queue_lines(out: &mut String, queue: &QueueReport, page: Page) {
    for (name, text) in queue_fields(queue) {
        field(out, page, name, &text);
        if name == "Patience" {
            let rows = queue.by_age.iter().map(|row| queue_cells(row).to_vec()).collect();
            table(out, page, QUEUE_HEADS, rows);
        }
    }
    if let Some(sizing) = &queue.sizing {
        field(out, page, "Sizing", &sizing_line(sizing));
        table(out, page, SIZING_HEADS, sizing_cells(sizing));
        for (i, line) in sizing.assumptions.iter().enumerate() {
            field(out, page, if i == 0 { "Assumed" } else { "" }, line);
        }
    }
}

/// What is said of a queue, by name.
pub(super) fn queue_fields(queue: &QueueReport) -> Vec<(&'static str, String)> {
    let times = |p50: Option<f64>, p90: Option<f64>, sight: f64| {
        let by = |share: &str, t: Option<f64>| t.map(|t| format!("{share} by {}", say::duration(t)));
        let told: Vec<String> = [by("half", p50), by("90%", p90)].into_iter().flatten().collect();
        if told.is_empty() { format!("fewer than half by {}", say::duration(sight)) } else { told.join(", ") }
    };
    let (o, p) = (&queue.offered, &queue.patience);
    let mut fields = vec![
        (
            "Queue",
            format!(
                "{} served, {} left ({}). If nobody left, service would come to {}",
                say::count(queue.served),
                say::count(queue.abandoned),
                say::percent(queue.abandoned / (queue.served + queue.abandoned)),
                times(o.p50_s, o.p90_s, o.sight_s)
            ),
        ),
        (
            "Patience",
            format!("if nobody were served, they would leave: {}", times(p.p50_s, p.p90_s, p.sight_s)),
        ),
    ];
    if let Some(fit) = &queue.patience_fit {
        let [best, exponential] = fit.left_early.map(say::percent);
        fields[1].1 += &if fit.family == "exponential" {
            format!("; exponential, mean {}, fits best", say::duration(fit.exponential_mean_s))
        } else {
            format!(
                "; {} fits better than the exponential of mean {} (AIC by {}; the exponential is off by {} at {}): by {} it has \
                 {best} gone, the exponential {exponential}",
                fit.family.replace('_', "-"),
                say::duration(fit.exponential_mean_s),
                say::number(fit.ahead_by),
                say::percent(fit.exponential_gap),
                say::duration(fit.gap_at_s),
                say::duration(0.25 * fit.exponential_mean_s),
            )
        };
    }
    if let Some(law) = &queue.little {
        let mut line = format!(
            "{} an hour x {} waited on average = {} waiting at a time (counted wait by wait: {})",
            say::number(3600.0 * law.rate_per_s),
            say::duration(law.mean_wait_s),
            say::number(law.by_law),
            say::number(law.by_count)
        );
        if let (Some(observed), Some(missing)) = (law.observed, law.missing) {
            let _ = if missing.abs() < 0.5 {
                write!(
                    line,
                    "; {} were counted elsewhere: no record seems to be missing",
                    say::number(observed)
                )
            } else if missing > 0.0 {
                write!(
                    line,
                    "; {} were counted elsewhere: about {} seem to be missing",
                    say::number(observed),
                    counted(missing.round() as u64, "record")
                )
            } else {
                write!(
                    line,
                    "; only {} were counted elsewhere: about {} too many, counted twice or of another queue",
                    say::number(observed),
                    counted((-missing).round() as u64, "record")
                )
            };
        }
        if let Some(missing) = law.open_missing {
            let _ = write!(
                line,
                "; {} open at the end: unless it was a quiet hour, about {} of open waits seem to be missing",
                if law.open == 0 {
                    "none is".to_owned()
                } else {
                    format!("{} are", say::count(law.open as f64))
                },
                counted(missing.round() as u64, "record")
            );
        }
        fields.push(("Complete", line));
    }
    fields
}

pub(super) const QUEUE_HEADS: [&str; 5] = ["after", "waiting", "served", "left", "will leave yet"];

/// The cells under [`QUEUE_HEADS`].
pub(super) fn queue_cells(row: &crate::audit::queue::ByAge) -> [String; 5] {
    [
        say::duration(row.age_s),
        say::percent(row.waiting),
        say::percent(row.served),
        say::percent(row.abandoned),
        row.will_abandon.map_or("-".into(), say::percent),
    ]
}

/// How many servers, in a sentence.
pub(super) fn sizing_line(sizing: &Sizing) -> String {
    let goal = format!("{} within {}", say::percent(sizing.goal.share), say::duration(sizing.goal.within_s));
    let by =
        |n: Option<u32>| n.map_or("no number of servers".to_owned(), |n| counted(u64::from(n), "server"));
    let mut line = format!(
        "{} an hour x {} of service = {} erlangs. {goal}: {} by Erlang A, {} by Erlang C",
        say::number(3600.0 * sizing.arrivals_per_s),
        say::duration(sizing.service_time_s),
        say::number(sizing.load),
        by(sizing.least_a),
        by(sizing.least_c)
    );
    if let Some(n) = sizing.as_seen {
        let _ = write!(
            line,
            "; the share that left is nearest to Erlang A's with {}",
            counted(u64::from(n), "server")
        );
    }
    line
}

pub(super) const SIZING_HEADS: [&str; 7] =
    ["servers", "A: in time", "leave", "mean wait", "busy", "C: in time", "mean wait"];

/// The cells under [`SIZING_HEADS`].
pub(super) fn sizing_cells(sizing: &Sizing) -> Vec<Vec<String>> {
    let row = |row: &crate::audit::queue::SizingRow| {
        let endless = || "endless".to_owned();
        vec![
            say::count(f64::from(row.servers)),
            say::percent(row.a.within),
            say::percent(row.a.abandons),
            say::duration(row.a.mean_wait_s),
            say::percent(row.a.busy),
            row.c.map_or_else(|| "-".to_owned(), |c| say::percent(c.within)),
            row.c.map_or_else(endless, |c| say::duration(c.mean_wait_s)),
        ]
    };
    sizing.rows.iter().map(row).collect()
}

fn open_waits(out: &mut String, open: &OpenList, page: Page) {
    if open.waits.is_empty() {
        return;
    }
    out.push('\n');
    page.paragraph(out, Dressed("", Page::plain), Dressed(&open_head(open), Page::strong), 2);
    page.table(out, &open_rows(open), 2);
    page.paragraph(out, Dressed("  ", Page::plain), Dressed(&open_note(open), Page::faint), 2);
}

/// The open waits as a table, heads first; without ids where none has one.
pub(super) fn open_rows(open: &OpenList) -> Vec<Vec<String>> {
    let mut rows = vec![OPEN_HEADS.map(String::from).to_vec()];
    rows.extend(open.waits.iter().map(|wait| open_cells(wait).to_vec()));
    if open.waits.iter().all(|wait| wait.id.is_none() && wait.count == 1) {
        rows.iter_mut().for_each(|row| drop(row.remove(1)));
    }
    rows
}

/// The head of the list of open waits.
pub(super) fn open_head(open: &OpenList) -> String {
    let listed = open.waits.iter().fold(0, |n: u64, wait| n.saturating_add(wait.count));
    match open.total > listed {
        true => format!(
            "Open waits, the {} most urgent of {}",
            say::count(listed as f64),
            say::count(open.total as f64)
        ),
        false => "Open waits, the most urgent first".to_owned(),
    }
}

/// What its columns mean.
pub(super) fn open_note(open: &OpenList) -> String {
    let step = match open.within_s {
        Some(step) => format!("within the next {}", say::duration(step)),
        None => "within as long again as it has waited".to_owned(),
    };
    format!(
        "done: chance of it {step}; rest: expected remaining wait if held to the end; worth: of holding on above giving up \
         now; again: when the verdict changes, from when it was last seen"
    )
}

const OPEN_HEADS: [&str; 8] = ["stream", "id", "age", "verdict", "done", "rest", "worth", "again"];

/// The beginning of an id, without what a terminal would obey.
fn printable(id: &str) -> String {
    id.chars().take(24).map(|c| if c.is_control() { char::REPLACEMENT_CHARACTER } else { c }).collect()
}

/// The cells under [`OPEN_HEADS`].
fn open_cells(wait: &OpenWait) -> [String; 8] {
    let verdict = match wait.verdict {
        Verdict::Hold => "hold",
        Verdict::LetGo => "let go",
        Verdict::Unknown => "-",
    };
    let id = match (&wait.id, wait.count) {
        (Some(id), _) => printable(id),
        (None, 1) => "-".to_owned(),
        (None, n) => format!("{} alike", say::count(n as f64)),
    };
    [
        wait.stream.clone(),
        id,
        say::duration(wait.age_s),
        verdict.to_owned(),
        wait.chance_done.map_or("-".into(), say::percent),
        wait.remaining_s.map_or("-".into(), say::duration),
        wait.value.map_or("-".into(), say::number),
        wait.look_again_in_s.map_or("-".into(), |t| format!("in {}", say::duration(t))),
    ]
}
