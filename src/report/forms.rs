//! The week as a page, as Markdown for a merge request, and as a table.

use std::collections::HashMap;
use std::fmt::Write;

use minijinja::value::Serde;
use minijinja::{AutoEscape, Environment, Value, context};

use super::{Row, Weekly};
use crate::chart;
use crate::policy::GiveUp;
use crate::say;

const PAGE: &str = include_str!("weekly.html");

/// A form could not be written; a fault of the program.
#[derive(Debug, thiserror::Error)]
pub enum FormError {
    /// The page.
    #[error("the page cannot be made: {0:#}")]
    Page(#[from] minijinja::Error),
    /// The table.
    #[error("the table cannot be made: {0}")]
    Table(#[from] csv::Error),
}

/// One self-contained page: no script, nothing fetched. `pictures`: by stream, `<svg>` elements.
///
/// # Errors
/// [`FormError`].
pub fn html(week: &Weekly, pictures: &HashMap<String, String>) -> Result<String, FormError> {
    let mut environment = Environment::new();
    environment.set_auto_escape_callback(|_| AutoEscape::Html);
    environment.add_function("picture", {
        let pictures = pictures.clone();
        move |stream: String| pictures.get(&stream).map(|svg| Value::from_safe_string(svg.clone()))
    });
    let rows = |rows: &[Row]| -> Vec<Value> { rows.iter().map(shown).collect() };
    let page = environment.render_named_str(
        "weekly.html",
        PAGE,
        context! {
            title => title(week),
            summary => week.summary(),
            made_at => week.made_at.clone(),
            since => week.since.clone(),
            assumed => Value::from(Serde(&week.assumed)),
            cautions => Value::from(Serde(&week.cautions)),
            sign => rows(&week.sign),
            rest => rows(&week.rest),
            style => Value::from_safe_string(chart::style()),
        },
    )?;
    Ok(page)
}

fn title(week: &Weekly) -> String {
    let day = week.due.as_deref().or(week.made_at.as_deref()).map(|time| time.get(..10).unwrap_or(time));
    day.map_or("Give-up times".into(), |day| format!("Give-up times, week to {day}"))
}

/// A row in words.
fn shown(row: &Row) -> Value {
    let fields: Vec<[String; 2]> =
        details(row).into_iter().map(|(name, value)| [name.to_owned(), value]).collect();
    context! {
        stream => row.stream.clone(),
        kind => row.kind.clone(),
        verdict => row.verdict.words(),
        because => row.because.clone(),
        old => time(row.old_s),
        new => time(row.new_s),
        worth => worth(row),
        hours => hours(row),
        fields => Value::from(Serde(&fields)),
        changed => Value::from(Serde(&row.changed)),
        folded => row.folded.clone(),
        cautions => Value::from(Serde(&row.cautions)),
    }
}

fn time(time: Option<GiveUp>) -> String {
    time.map_or("-".into(), |time| say::duration(time.seconds()))
}

fn worth(row: &Row) -> String {
    row.worth_per_day.map_or("-".into(), |worth| format!("{}{} a day", plus(worth), say::amount(worth)))
}

fn hours(row: &Row) -> String {
    row.hours_per_day.map_or("-".into(), |hours| format!("{} a day", say::duration(3600.0 * hours)))
}

fn plus(value: f64) -> &'static str {
    if value > 0.0 { "+" } else { "" }
}

/// What is known of a row, a line each.
fn details(row: &Row) -> Vec<(&'static str, String)> {
    let span = |[low, high]: [f64; 2]| format!("{} to {}", say::duration(low), say::duration(high));
    let mut lines = vec![(
        "Evidence",
        format!("{} waits, {} done", say::count(row.waits as f64), say::count(row.done as f64)),
    )];
    if let Some(best) = row.advised_s {
        let best = match best {
            GiveUp::After(seconds) => say::duration(seconds),
            GiveUp::Never => "waiting it out".into(),
        };
        let interval = row.interval_s.map(|i| format!("; 90% {}", span(i))).unwrap_or_default();
        let band = row.band_s.map(|b| format!("; about as good {}", span(b))).unwrap_or_default();
        lines.push(("Best time", format!("{best}{interval}{band}")));
    }
    if let Some(loses) = row.loses {
        lines.push(("Time in force loses", say::percent(loses)));
    }
    if let (Some(mean), Some(high)) = (row.expected_regret, row.regret_95) {
        lines.push((
            "Expected loss of the best",
            format!("{} (95%: {})", say::percent(mean), say::percent(high)),
        ));
    }
    if let (Some(now), Some(then)) = (row.attempts_now, row.attempts_then) {
        lines.push(("Attempts per request", format!("{} now, {} then", say::number(now), say::number(then))));
    }
    if let Some(sign) = &row.settled {
        let day = sign.at.get(..10).unwrap_or(&sign.at);
        lines.push(("Settled", format!("{} by {} on {day}: {}", sign.state, sign.by, sign.why)));
    }
    lines
}

/// For a merge request.
pub fn markdown(week: &Weekly) -> String {
    let mut text = format!("# {}\n\n{}\n", title(week), week.summary());
    if let Some(day) = &week.since {
        let _ = writeln!(text, "\nWhat changed is told against the set of {}.", plain(day));
    }
    for line in &week.assumed {
        let _ = writeln!(text, "\nAssumed: {}", plain(line));
    }
    text += "\n## To sign\n";
    if week.sign.is_empty() {
        text += "\nNothing this week.\n";
    } else {
        table(&mut text, &week.sign);
    }
    week.sign.iter().for_each(|row| section(&mut text, row));
    if !week.rest.is_empty() {
        let _ = write!(text, "\n<details>\n<summary>The other {} streams</summary>\n", week.rest.len());
        table(&mut text, &week.rest);
        week.rest
            .iter()
            .filter(|row| !row.cautions.is_empty() || !row.changed.is_empty())
            .for_each(|row| section(&mut text, row));
        text += "\n</details>\n";
    }
    text += "\n## Before you sign\n\n";
    for line in &week.cautions {
        let _ = writeln!(text, "- {}", plain(line));
    }
    text
}

fn table(text: &mut String, rows: &[Row]) {
    text.push_str(
        "\n| stream | do | from | to | worth | saves | loses now |\n|---|---|---:|---:|---:|---:|---:|\n",
    );
    for row in rows {
        let loses = row.loses.map_or("-".into(), say::percent);
        let _ = writeln!(
            text,
            "| {} | {} | {} | {} | {} | {} | {loses} |",
            code(&row.stream),
            row.verdict.words(),
            time(row.old_s),
            time(row.new_s),
            worth(row),
            hours(row)
        );
    }
}

fn section(text: &mut String, row: &Row) {
    let _ =
        writeln!(text, "\n### {}\n\n{}: {}.", code(&row.stream), row.verdict.words(), plain(&row.because));
    text.push('\n');
    for (name, value) in details(row) {
        let _ = writeln!(text, "- {name}: {}", plain(&value));
    }
    row.folded.iter().for_each(|why| _ = writeln!(text, "- Not to be signed now: {}", plain(why)));
    row.changed.iter().for_each(|line| _ = writeln!(text, "- Changed: {}", plain(line)));
    for caution in &row.cautions {
        let _ = writeln!(
            text,
            "- **{}**: {}; {}",
            code(&caution.code),
            plain(&caution.text),
            plain(&caution.remedy)
        );
    }
}

/// Between backticks, of which a stream's name has none.
fn code(text: &str) -> String {
    format!("`{}`", text.replace(['`', '\n', '|'], " "))
}

/// Without what Markdown or HTML would take for markup.
fn plain(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '&' => out.push_str("&amp;"),
            '\\' | '`' | '*' | '[' | ']' | '|' | '#' | '!' => out.extend(['\\', c]),
            c if c.is_control() => out.push(' '),
            c => out.push(c),
        }
    }
    out
}

/// A row a stream; times in s.
///
/// # Errors
/// [`FormError`].
pub fn csv(week: &Weekly) -> Result<String, FormError> {
    let mut table = csv::Writer::from_writer(Vec::new());
    table.write_record([
        "stream",
        "kind",
        "verdict",
        "sign",
        "old_s",
        "new_s",
        "advised_s",
        "worth_per_day",
        "hours_per_day",
        "loses",
        "expected_regret",
        "attempts_now",
        "attempts_then",
        "waits",
        "done",
        "cautions",
    ])?;
    let rows = week.sign.iter().map(|row| (true, row)).chain(week.rest.iter().map(|row| (false, row)));
    for (sign, row) in rows {
        let time = |time: Option<GiveUp>| match time {
            Some(GiveUp::After(seconds)) => seconds.to_string(),
            Some(GiveUp::Never) => "never".into(),
            None => String::new(),
        };
        let number = |value: Option<f64>| value.map_or(String::new(), |value| value.to_string());
        let codes: Vec<&str> = row.cautions.iter().map(|caution| caution.code.as_str()).collect();
        table.write_record([
            row.stream.as_str(),
            &row.kind,
            row.verdict.words(),
            if sign { "yes" } else { "no" },
            &time(row.old_s),
            &time(row.new_s),
            &time(row.advised_s),
            &number(row.worth_per_day),
            &number(row.hours_per_day),
            &number(row.loses),
            &number(row.expected_regret),
            &number(row.attempts_now),
            &number(row.attempts_then),
            &row.waits.to_string(),
            &row.done.to_string(),
            &codes.join(" "),
        ])?;
    }
    let bytes = table.into_inner().map_err(|error| csv::Error::from(error.into_error()))?;
    Ok(String::from_utf8_lossy(&bytes).into_owned())
}
