//! An audit as CSV: what was lost, a row a stream and group; or the open waits that are listed. A view.

use crate::audit::{AuditSet, Cut, Lost, OpenWait, StreamAudit, Unit, Verdict};

/// Columns of [`lost`].
const LOST: [&str; 16] = [
    "stream",
    "kind",
    "advised_s",
    "unit",
    "by",
    "group",
    "waits",
    "hours",
    "over_waits",
    "over_hours",
    "over_cost",
    "over_won_back",
    "over_lost",
    "under_waits",
    "under_further_hours",
    "under_lost",
];

/// Columns of [`open`].
const OPEN: [&str; 14] = [
    "stream",
    "id",
    "attempt",
    "count",
    "age_s",
    "seen",
    "verdict",
    "value",
    "next_step",
    "step_s",
    "chance_done",
    "chance_ended",
    "remaining_s",
    "look_again_in_s",
];

/// What was lost: for each stream all waits (`by` is `all`), by rule (`rule`), and by hour of the week (`hour`).
pub(super) fn lost(set: &AuditSet) -> csv::Result<String> {
    let mut rows = vec![[&LOST[..], &["under_before_bulk"]].concat().into_iter().map(String::from).collect()];
    for stream in &set.streams {
        rows.push(lost_row(stream, "all", "", &stream.closed.total));
        let by_rule = stream.closed.by_rule.iter();
        rows.extend(by_rule.map(|row| lost_row(stream, "rule", cut_name(row.cut), &row.lost)));
        for row in &stream.closed.by_hour {
            rows.push(lost_row(stream, "hour", &format!("{} {:02}", row.day, row.hour), &row.lost));
        }
    }
    written(rows)
}

fn lost_row(stream: &StreamAudit, by: &str, group: &str, lost: &Lost) -> Vec<String> {
    let unit = match stream.advice.unit {
        Some(Unit::Worth) => "worth",
        Some(Unit::Seconds) => "seconds",
        Some(Unit::Probability) => "probability",
        None => "",
    };
    vec![
        stream.stream.clone(),
        stream.kind.clone(),
        number(stream.advice.give_up_after_s),
        unit.to_owned(),
        by.to_owned(),
        group.to_owned(),
        lost.waits.to_string(),
        lost.hours.to_string(),
        lost.over.waits.to_string(),
        lost.over.hours.to_string(),
        number(lost.over.cost),
        number(lost.over.won_back),
        number(lost.over.lost),
        lost.under.waits.to_string(),
        lost.under.further_hours.to_string(),
        number(lost.under.lost),
        lost.under.before_bulk.to_string(),
    ]
}

/// The open waits that are listed, the most urgent first.
pub(super) fn open(set: &AuditSet) -> csv::Result<String> {
    let mut rows = vec![OPEN.map(String::from).to_vec()];
    rows.extend(set.open.waits.iter().map(open_row));
    written(rows)
}

fn open_row(wait: &OpenWait) -> Vec<String> {
    let verdict = match wait.verdict {
        Verdict::Hold => "hold",
        Verdict::LetGo => "let_go",
        Verdict::Unknown => "unknown",
    };
    vec![
        wait.stream.clone(),
        wait.id.as_deref().map(harmless).unwrap_or_default(),
        wait.attempt.to_string(),
        wait.count.to_string(),
        wait.age_s.to_string(),
        wait.seen.clone().unwrap_or_default(),
        verdict.to_owned(),
        number(wait.value),
        number(wait.next_step),
        wait.step_s.to_string(),
        number(wait.chance_done),
        number(wait.chance_ended),
        number(wait.remaining_s),
        number(wait.look_again_in_s),
    ]
}

fn cut_name(cut: Cut) -> &'static str {
    match cut {
        Cut::Ended => "ended",
        Cut::ByRule => "by_rule",
        Cut::Before => "before",
        Cut::After => "after",
        Cut::NoRule => "no_rule",
    }
}

fn number(value: Option<f64>) -> String {
    value.map(|v| v.to_string()).unwrap_or_default()
}

/// A text that a spreadsheet will not take for a formula.
fn harmless(text: &str) -> String {
    match text.starts_with(['=', '+', '-', '@', '\t', '\r']) {
        true => format!("'{text}"),
        false => text.to_owned(),
    }
}

fn written(rows: Vec<Vec<String>>) -> csv::Result<String> {
    let mut writer = csv::Writer::from_writer(Vec::new());
    for row in rows {
        writer.write_record(row)?;
    }
    let bytes = writer.into_inner().map_err(|error| error.into_error())?;
    Ok(String::from_utf8_lossy(&bytes).into_owned())
}
