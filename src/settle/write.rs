//! The file as text: canonical, and with one decision put into a text that somebody may have edited.

use std::fmt::Write;

use super::{Grounds, SCHEMA, Settled, Settlement, State, parse};
use crate::policy::GiveUp;
use crate::say;

const HEAD: &str = "\
# Give-up times that somebody has settled, stream by stream, the newest decision last.
# `outwait settle` adds to it; a decision is taken back by another, not by removing it.
";

impl Settled {
    /// The whole file, streams by name.
    pub fn text(&self) -> String {
        let mut text = format!("{HEAD}schema: {SCHEMA}\nstreams:");
        if self.streams.is_empty() {
            return text + " {}\n";
        }
        text.push('\n');
        for (stream, history) in &self.streams {
            let _ = writeln!(text, "  {}:", name(stream));
            history.iter().for_each(|settlement| text.push_str(&item(settlement)));
        }
        text
    }
}

/// One decision as a file of its own.
pub fn one(stream: &str, settlement: &Settlement) -> String {
    format!("schema: {SCHEMA}\nstreams:\n  {}:\n{}", name(stream), item(settlement))
}

/// A file's text with one more decision. What stands there stays as it is, comments and order included, where it has the
/// usual shape; else it is written anew, with the same decisions.
pub fn insert(text: &str, settled: &Settled, stream: &str, settlement: &Settlement) -> String {
    let mut whole = settled.clone();
    whole.add(stream, settlement.clone());
    let anew = whole.text();
    // Only what reads back as meant is kept.
    let meant = parse(anew.as_bytes(), "");
    let put = put_in(text, settled, stream, settlement);
    put.filter(|put| parse(put.as_bytes(), "") == meant).unwrap_or(anew)
}

/// Where the file has one key a line, two spaces in.
fn put_in(text: &str, settled: &Settled, stream: &str, settlement: &Settlement) -> Option<String> {
    let lines: Vec<&str> = text.split_inclusive('\n').collect();
    let key = |line: &str| {
        let rest = line.strip_prefix("  ").filter(|rest| !rest.starts_with([' ', '#', '-']))?;
        let rest = rest.trim_end().strip_suffix(':')?;
        Some(rest.trim_matches(['"', '\'']).to_owned())
    };
    let keys: Vec<(usize, String)> =
        lines.iter().enumerate().filter_map(|(i, line)| Some((i, key(line)?))).collect();
    let after = match settled.history(stream).is_empty() {
        // At the end of its own list.
        false => keys.iter().position(|(_, name)| name == stream)? + 1,
        true => keys.iter().position(|(_, name)| name.as_str() > stream).unwrap_or(keys.len()),
    };
    let mut at = keys.get(after).map_or(lines.len(), |(line, _)| *line);
    // One that is older than others of its stream goes before them.
    let younger = settled.history(stream).iter().filter(|known| known.at > settlement.at).count();
    if younger > 0 {
        let own = keys.get(after.checked_sub(1)?)?.0;
        let items = (own..at).filter(|&line| lines[line].starts_with("    - "));
        at = items.rev().nth(younger - 1)?;
        return Some(lines[..at].concat() + &item(settlement) + &lines[at..].concat());
    }
    // Comments and empty lines above a stream are its own.
    while at > 0 && matches!(lines[at - 1].trim_start().chars().next(), None | Some('#')) && at > 2 {
        at -= 1;
    }
    let mut put: String = lines[..at].concat();
    if !put.is_empty() && !put.ends_with('\n') {
        put.push('\n');
    }
    if settled.history(stream).is_empty() {
        let _ = writeln!(put, "  {}:", name(stream));
    }
    Some(put + &item(settlement) + &lines[at..].concat())
}

/// One decision.
fn item(settlement: &Settlement) -> String {
    let Settlement { state, at, by, why, grounds } = settlement;
    let mut text = format!("    - state: {}\n      at: {at}\n", state.name());
    match state {
        State::Accepted { give_up_after } | State::Pinned { give_up_after } => {
            let _ = writeln!(text, "      give_up_after: {}", time(*give_up_after));
        }
        State::Postponed { until } => _ = writeln!(text, "      until: {until}"),
        State::Refused | State::Undone => {}
    }
    let _ = writeln!(text, "      by: {}\n      why: {}", quoted(by), quoted(why));
    if let Some(grounds) = grounds {
        text.push_str("      grounds:\n");
        for (key, value) in fields(grounds) {
            let _ = writeln!(text, "        {key}: {value}");
        }
    }
    text
}

fn fields(grounds: &Grounds) -> Vec<(&'static str, String)> {
    let Grounds { waits, done, from, to, in_force, advised, proposed, band, loses } = grounds;
    let mut fields = vec![("waits", waits.to_string()), ("done", done.to_string())];
    fields.extend(from.clone().map(|from| ("from", from)));
    fields.extend(to.clone().map(|to| ("to", to)));
    for (key, value) in [("in_force", in_force), ("advised", advised), ("proposed", proposed)] {
        fields.extend(value.map(|value| (key, rough(value.seconds()))));
    }
    fields.extend(band.map(|[low, high]| ("band", format!("[{}, {}]", rough(low), rough(high)))));
    fields.extend(loses.map(|loses| ("loses", format!("{loses:.4}"))));
    fields
}

fn time(time: GiveUp) -> String {
    say::exact_duration(time.seconds())
}

/// Four significant digits: what was the case need not be exact.
fn rough(seconds: f64) -> String {
    let unit = if seconds > 0.0 { 10f64.powi(seconds.log10().floor() as i32 - 3) } else { 1.0 };
    say::exact_duration(if seconds.is_finite() { (seconds / unit).round() * unit } else { seconds })
}

/// A stream as a key.
fn name(stream: &str) -> String {
    let plain = stream.starts_with(|c: char| c.is_ascii_alphabetic())
        && stream.chars().all(|c| c.is_ascii_alphanumeric() || matches!(c, '.' | '_' | '-' | '/'))
        && !matches!(
            stream.to_ascii_lowercase().as_str(),
            "true" | "false" | "null" | "yes" | "no" | "on" | "off" | "y" | "n"
        );
    if plain { stream.to_owned() } else { quoted(stream) }
}

/// A text between double quotes: a JSON string is one in YAML too, once what YAML does not take for printable is escaped.
fn quoted(text: &str) -> String {
    let mut quoted = String::with_capacity(text.len() + 2);
    for c in serde_json::Value::from(text).to_string().chars() {
        match c {
            '\u{7f}'..='\u{9f}' | '\u{2028}' | '\u{2029}' | '\u{feff}' | '\u{fffe}' | '\u{ffff}' => {
                let _ = write!(quoted, "\\u{:04x}", u32::from(c));
            }
            c => quoted.push(c),
        }
    }
    quoted
}
