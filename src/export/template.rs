//! The user's own template. It sees the export and nothing else: no files, no other templates, no clock; a name that is not
//! there is an error with its line and column, and so is a template that would run for ever.

use std::collections::BTreeMap;

use minijinja::syntax::SyntaxConfig;
use minijinja::value::Serde;
use minijinja::{AutoEscape, Environment, Error, ErrorKind, UndefinedBehavior, Value};

use super::forms::constant;
use super::{Export, SAFETY, Stream};
use crate::say;

/// Steps of one rendering: thousands of streams, and an endless template ends within a second.
const FUEL: u64 = 5_000_000;
/// Largest template, bytes.
const MAX_BYTES: usize = 1 << 20;

/// What is wrong with a template, and where.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{name}:{line}:{column}: {what}")]
pub struct TemplateError {
    /// The template's name.
    pub name: String,
    /// Line, from 1.
    pub line: usize,
    /// Column in characters, from 1.
    pub column: usize,
    /// What is wrong.
    pub what: String,
    /// What to do.
    pub remedy: String,
}

/// Renders a template over an export.
///
/// Names: `streams`, `made_at`, `safety`, and `stream("catalogue.lookup")`. Filters: `seconds` (a decimal number; `seconds(9)` with so many
/// decimals),
/// `milliseconds` (whole, rounded up), `round_up("10ms")`, `duration` (`1m30s500ms`, whole milliseconds, rounded up),
/// `constant` (`CATALOGUE_LOOKUP`), `quoted` (a JSON string); of a stream, `attempts(default)` and `backoff(attempts)`.
///
/// # Errors
/// [`TemplateError`].
pub fn render(template: &str, name: &str, export: &Export) -> Result<String, TemplateError> {
    if template.len() > MAX_BYTES {
        return Err(TemplateError {
            name: name.to_owned(),
            line: 1,
            column: 1,
            what: "it is larger than 1 MiB".into(),
            remedy: "shorten it; loop over `streams`".into(),
        });
    }
    let mut environment = Environment::empty();
    environment.set_undefined_behavior(UndefinedBehavior::Strict);
    environment.set_auto_escape_callback(|_| AutoEscape::None);
    let mut syntax = SyntaxConfig::builder();
    syntax.trim_blocks(true).lstrip_blocks(true).keep_trailing_newline(true);
    if let Ok(syntax) = syntax.build() {
        environment.set_syntax(syntax);
    }
    environment.set_debug(true);
    environment.set_fuel(Some(FUEL));
    add(&mut environment, export);
    let refused = |error: &Error| refusal(error, template, name, export);
    let whole = Value::from(Serde(export.clone()));
    let made_at = export.made_at.as_deref();
    let context = minijinja::context! {
        streams => whole.get_attr("streams").unwrap_or_default(),
        made_at => made_at,
        safety => SAFETY,
    };
    environment.render_named_str(name, template, context).map_err(|error| refused(&error))
}

fn add(environment: &mut Environment<'_>, export: &Export) {
    use minijinja::filters;
    environment.add_filter("seconds", |value: Value, decimals: Option<usize>| {
        seconds(&value).map(|s| decimals.map_or_else(|| decimal(s), |n| format!("{s:.*}", n.min(9))))
    });
    environment.add_filter("milliseconds", |value: Value| Ok::<_, Error>(whole_ms(seconds(&value)?)));
    environment.add_filter("round_up", round_up);
    environment.add_filter("duration", |value: Value| Ok::<_, Error>(duration(seconds(&value)?)));
    environment.add_filter("constant", |text: String| constant(&text));
    environment.add_filter("quoted", |text: String| serde_json::Value::from(text).to_string());
    environment.add_filter("attempts", attempts);
    environment.add_filter("backoff", backoff);
    environment.add_filter("upper", filters::upper);
    environment.add_filter("lower", filters::lower);
    environment.add_filter("replace", filters::replace);
    environment.add_filter("default", filters::default);
    environment.add_filter("join", filters::join);
    environment.add_filter("split", filters::split);
    environment.add_filter("list", filters::list);
    environment.add_filter("length", filters::length);
    environment.add_filter("first", filters::first);
    environment.add_filter("last", filters::last);
    environment.add_filter("sort", filters::sort);
    environment.add_filter("min", filters::min);
    environment.add_filter("max", filters::max);
    environment.add_filter("sum", filters::sum);
    environment.add_filter("round", filters::round);
    environment.add_filter("int", filters::int);
    environment.add_filter("selectattr", filters::selectattr);
    environment.add_filter("rejectattr", filters::rejectattr);
    environment.add_filter("indent", filters::indent);
    environment.add_filter("trim", filters::trim);
    environment.add_test("defined", minijinja::tests::is_defined);
    environment.add_test("none", minijinja::tests::is_none);
    environment.add_test("startingwith", minijinja::tests::is_startingwith);
    environment.add_test("eq", minijinja::tests::is_eq);
    environment.add_test("in", minijinja::tests::is_in);
    environment.add_function("range", minijinja::functions::range);
    let by_name: BTreeMap<String, Value> =
        export.streams.iter().map(|one| (one.stream.clone(), Value::from(Serde(one.clone())))).collect();
    environment.add_function("stream", move |name: String| {
        by_name.get(&name).cloned().ok_or_else(|| {
            let known: Vec<&str> = by_name.keys().map(String::as_str).take(10).collect();
            let known = if known.is_empty() { "none".to_owned() } else { known.join(", ") };
            refuse(format!("no time of the stream {name:?} is exported; there are {known}"))
        })
    });
}

fn refuse(what: impl Into<String>) -> Error {
    Error::new(ErrorKind::InvalidOperation, what.into())
}

/// A time in seconds. Never is no number.
fn seconds(value: &Value) -> Result<f64, Error> {
    if value.is_none() {
        return Err(refuse(
            "never giving up is no number; guard it with {% if one.give_up_after_s is not none %}",
        ));
    }
    let number = f64::try_from(value.clone()).ok().filter(|s| s.is_finite() && *s >= 0.0);
    number.ok_or_else(|| refuse(format!("{value} is not a time in seconds")))
}

/// Without an exponent, as every reader takes it.
fn decimal(seconds: f64) -> String {
    let text = format!("{seconds:.9}");
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}

/// Rounded up, and not by what is rounding error.
fn whole_ms(seconds: f64) -> u64 {
    (seconds * 1e3 - 1e-6).ceil().max(0.0) as u64
}

fn round_up(value: Value, unit: String) -> Result<f64, Error> {
    let length = say::parse_duration(&unit).ok().filter(|length| *length > 0.0);
    let length = length
        .ok_or_else(|| refuse(format!("{unit:?} is not a unit to round up to; write round_up(\"10ms\")")))?;
    let times = (seconds(&value)? / length - 1e-9).ceil();
    // By division where the unit is a share of a second, so that 0.3 is 3 tenths and not 0.30000000000000004.
    let per_second = (1.0 / length).round();
    let exact = length < 1.0 && (1.0 / per_second - length).abs() < 1e-15;
    Ok(if exact { times / per_second } else { times * length })
}

/// Hours, minutes, seconds and milliseconds, each of at most five digits: what Go reads and the Gateway API allows
/// (GEP-2257).
fn duration(seconds: f64) -> String {
    let ms = whole_ms(seconds);
    let parts = [(ms / 3_600_000, "h"), (ms / 60_000 % 60, "m"), (ms / 1_000 % 60, "s"), (ms % 1_000, "ms")];
    let text: String = parts.iter().filter(|(n, _)| *n > 0).map(|(n, unit)| format!("{n}{unit}")).collect();
    if text.is_empty() { "0s".into() } else { text }
}

fn one(value: &Value) -> Result<Stream, Error> {
    let json = serde_json::to_value(value).ok();
    json.and_then(|json| serde_json::from_value(json).ok())
        .ok_or_else(|| refuse("this takes a stream: `one | backoff` within `{% for one in streams %}`"))
}

/// The cap on attempts, or what is given where there is none.
fn attempts(value: Value, most: Option<u32>) -> Result<u32, Error> {
    let one = one(&value)?;
    one.attempts.or(most).ok_or_else(|| {
        refuse(format!(
            "{} has no cap on attempts; write `attempts(3)` for one where there is none",
            one.stream
        ))
    })
}

/// Pauses between the attempts, s.
fn backoff(value: Value, most: Option<u32>) -> Result<Vec<f64>, Error> {
    let one = one(&value)?;
    let attempts = one.attempts.or(most).unwrap_or(3).min(crate::policy::MAX_ATTEMPTS);
    Ok(one.backoff(attempts))
}

fn refusal(error: &Error, template: &str, name: &str, export: &Export) -> TemplateError {
    let line = error.line().unwrap_or(1);
    let start = error.range().map(|range| range.start).filter(|start| template.is_char_boundary(*start));
    let column = match start {
        Some(start) => template[..start].rsplit('\n').next().map_or(0, |before| before.chars().count()) + 1,
        None => 1,
    };
    let detail = error.detail().map(str::to_owned);
    let names = || {
        "the names are streams, made_at, safety and stream(\"NAME\"); of a stream, those of `outwait export`"
            .into()
    };
    let (what, remedy) = match error.kind() {
        ErrorKind::UndefinedError => {
            let word = error.range().and_then(|range| template.get(range)).unwrap_or("a name");
            (format!("`{}` is not there", word.chars().take(60).collect::<String>()), names())
        }
        ErrorKind::UnknownFilter => (
            detail.unwrap_or_else(|| "no such filter".into()),
            "the filters are seconds, milliseconds, round_up, duration, constant, quoted, attempts, backoff and the usual ones"
                .into(),
        ),
        ErrorKind::OutOfFuel => ("it does not come to an end".into(), "shorten its loops".into()),
        ErrorKind::SyntaxError => (
            detail.unwrap_or_else(|| "it cannot be read".into()),
            "mend it here; a template stands alone, without include, import or extends".into(),
        ),
        _ => {
            let what = detail.unwrap_or_else(|| error.kind().to_string());
            (what, format!("{} exported; see `outwait export --format json`", count(export)))
        }
    };
    TemplateError { name: name.to_owned(), line, column, what, remedy }
}

fn count(export: &Export) -> String {
    match export.streams.len() {
        1 => "one stream is".into(),
        n => format!("{n} streams are"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn units() {
        assert_eq!(decimal(0.0765), "0.0765");
        assert_eq!(decimal(400.0), "400");
        assert_eq!((whole_ms(0.4), whole_ms(0.0761)), (400, 77));
        assert_eq!(round_up(Value::from(0.0761), "10ms".into()).unwrap(), 0.08);
        assert_eq!(round_up(Value::from(0.3), "100ms".into()).unwrap(), 0.3);
        assert_eq!(round_up(Value::from(61.0), "1min".into()).unwrap(), 120.0);
        assert!(round_up(Value::from(1.0), "0s".into()).is_err());
        assert_eq!(duration(5_430.5), "1h30m30s500ms");
        assert_eq!((duration(0.4), duration(0.0)), ("400ms".into(), "0s".into()));
        assert_eq!(constant("1st/a-b.c:d"), "_1ST_A_B_C_D");
    }
}
