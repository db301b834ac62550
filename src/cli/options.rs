//! Options that commands share, and how their texts are read.

use std::fs::File;
use std::io::{self, Read};
use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::sync::{Arc, OnceLock};

use anyhow::Context;
use clap::builder::{PossibleValue, PossibleValuesParser, TypedValueParser};
use clap::{Args, ValueEnum};

use super::exit::{Exit, Failure, OrExit};
use crate::glob::Glob;
use crate::intake::{
    Access, Allowed, Database, Format, Mapping, MappingError, Measure, Options, Pattern, Rules, Source,
};
use crate::policy::{self, Policy};

/// How output is written.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
pub(super) enum Output {
    /// For a person at a terminal
    #[default]
    Text,
    /// One JSON document
    Json,
    /// The same document as YAML
    Yaml,
    /// A table of comma-separated values, where a command has one ([`Output::with_csv`])
    #[value(skip)]
    Csv,
}

impl Output {
    /// The option of a command that writes tables too.
    pub(super) fn with_csv(option: clap::Arg) -> clap::Arg {
        let parse = |name: String| match name.as_str() {
            "csv" => Ok(Output::Csv),
            name => Output::from_str(name, false),
        };
        let table = PossibleValue::new("csv").help("A table, a row a rule");
        let values = Output::value_variants().iter().filter_map(ValueEnum::to_possible_value).chain([table]);
        option.value_parser(PossibleValuesParser::new(values).try_map(parse))
    }

    /// A document in JSON or YAML; `text` makes the other form (or the table).
    pub(super) fn render<T: serde::Serialize>(
        self,
        document: &T,
        text: impl FnOnce() -> String,
    ) -> Result<String, Failure> {
        match self {
            Output::Text | Output::Csv => Ok(text()),
            Output::Json => serde_json::to_string_pretty(document)
                .map(|json| json + "\n")
                .context("cannot write JSON")
                .or_exit(Exit::System),
            Output::Yaml => {
                serde_yaml::to_string(document).context("cannot write YAML").or_exit(Exit::System)
            }
        }
    }
}

/// The ways in which a command can write its answer; [`Output`] for most.
pub(super) trait Form: ValueEnum + Default + Send + Sync + 'static {}

impl<F: ValueEnum + Default + Send + Sync + 'static> Form for F {}

/// What every command takes.
#[derive(Clone, Debug, Args)]
pub(super) struct Common<F: Form = Output> {
    /// Policy file: what waiting is worth, stream by stream
    #[arg(long, value_name = "FILE")]
    pub(super) policy: Option<PathBuf>,
    /// How to write the answer
    #[arg(long, value_enum, default_value_t)]
    pub(super) format: F,
    /// Only waits that ended or were last seen then or later: RFC 3339, a date, or Unix seconds
    #[arg(long, value_name = "TIME", value_parser = moment, allow_negative_numbers = true)]
    pub(super) since: Option<f64>,
    /// Only waits that ended or were last seen before then
    #[arg(long, value_name = "TIME", value_parser = moment, allow_negative_numbers = true)]
    pub(super) until: Option<f64>,
    /// Only these streams (`*` any run of characters, `?` one); a plain name also names records that have none
    #[arg(long, value_name = "GLOB", value_parser = selector)]
    pub(super) stream: Option<Glob>,
    /// Seed of everything drawn: the same seed gives the same bytes
    #[arg(long, value_name = "N", default_value_t = 1, value_parser = seed, allow_negative_numbers = true)]
    pub(super) seed: u64,
    /// How telemetry becomes waits, by the policy that was loaded.
    #[arg(skip)]
    pub(super) telemetry: OnceLock<Rules>,
}

impl<F: Form> Common<F> {
    /// All but the form of the answer.
    pub(super) fn without_form(&self) -> Common {
        let Common { policy, since, until, stream, seed, .. } = self;
        let (policy, stream, telemetry) = (policy.clone(), stream.clone(), self.telemetry.clone());
        let (since, until, seed) = (*since, *until, *seed);
        Common { policy, format: Output::default(), since, until, stream, seed, telemetry }
    }
}

impl Common {
    /// With a policy and a choice of streams, all else as it is unless said.
    pub(super) fn of(policy: Option<PathBuf>, stream: Option<Glob>) -> Common {
        let telemetry = OnceLock::new();
        Common { policy, format: Output::Text, since: None, until: None, stream, seed: 1, telemetry }
    }

    /// The policy file that was named here or in the environment.
    pub(super) fn policy_file(&self) -> Option<PathBuf> {
        let named = || std::env::var_os("OUTWAIT_POLICY").filter(|name| !name.is_empty());
        self.policy.clone().or_else(|| named().map(PathBuf::from))
    }

    /// Whether something is named that only matters where waits are weighed.
    pub(super) fn narrows(&self) -> bool {
        self.policy.is_some() || self.since.is_some() || self.until.is_some() || self.stream.is_some()
    }

    /// Reads the policy, if one was named.
    pub(super) fn load_policy(&self) -> Result<Option<Policy>, Failure> {
        let policy = self.policy_file().as_deref().map(load_policy).transpose()?;
        if let Some(policy) = &policy {
            // A policy that is loaded again is the same.
            let _ = self.telemetry.set(policy.telemetry.clone());
        }
        Ok(policy)
    }
}

/// What commands that read waits take besides.
#[derive(Clone, Debug, Args)]
pub(super) struct Reading {
    /// Files of waits (NDJSON, CSV, SWF, OTLP, metrics as text, journal, Parquet, Arrow; plain, gzip or zstd); `-` is standard input
    #[arg(required_unless_present = "from", value_name = "FILE")]
    pub(super) files: Vec<std::ffi::OsString>,
    #[command(flatten)]
    pub(super) asked: Asked,
    /// One stream for all waits, whatever their records call theirs
    #[arg(long = "as", value_name = "NAME", value_parser = stream_name)]
    pub(super) one_stream: Option<String>,
    /// How many bad lines are put up with: a number, or `all`
    #[arg(
        long,
        value_name = "N|all",
        default_value = "0",
        value_parser = bad_lines,
        allow_negative_numbers = true
    )]
    pub(super) bad_lines: Allowed,
    /// Which time of a job log is the wait
    #[arg(long, value_name = "wait|run", value_enum, default_value_t)]
    pub(super) measure: JobTime,
    #[command(flatten)]
    pub(super) foreign: Foreign,
    /// Format of every file (ndjson, csv, swf, journal, parquet, arrow, otlp_traces, otlp_metrics, metrics_text), instead of finding it out
    #[arg(long, value_name = "FORMAT", value_parser = format)]
    pub(super) input: Option<Format>,
    /// Threads that read; as many as there are cores unless said
    #[arg(long, value_name = "N", value_parser = threads, allow_negative_numbers = true)]
    pub(super) threads: Option<NonZeroUsize>,
}

/// Waits by a query to a database.
#[derive(Clone, Debug, Default, Args)]
pub(super) struct Asked {
    /// Database to ask: postgres://USER@HOST/DATABASE, sqlite:FILE, or a SQLite file
    #[arg(long, value_name = "DATABASE", requires = "sql")]
    from: Option<String>,
    /// The query; its columns are called like fields, or mapped by --columns
    #[arg(long, value_name = "SELECT", requires = "from")]
    sql: Option<String>,
    /// File that holds the password for the database (else PGPASSWORD)
    #[arg(long, value_name = "FILE", requires = "from")]
    password_file: Option<PathBuf>,
    /// Certificates (PEM) by which a PostgreSQL server is known; with them nothing but TLS is spoken
    #[arg(long, value_name = "FILE", requires = "from")]
    authorities: Option<PathBuf>,
}

impl Asked {
    /// The database's answer as a source, if one is to be asked.
    pub(super) fn source(&self) -> Result<Option<Source>, Failure> {
        let Asked { from: Some(address), sql: Some(query), password_file, authorities } = self else {
            return Ok(None);
        };
        let password = match password_file {
            None => None,
            Some(file) => {
                let text = std::fs::read_to_string(file)
                    .with_context(|| format!("cannot read the password in {}", file.display()))
                    .or_exit(Exit::BadInput)?;
                Some(text.lines().next().unwrap_or_default().to_owned())
            }
        };
        let access = Access { password, authorities: authorities.clone() };
        let database = Database::at(address, access).or_exit(Exit::BadInput)?;
        Ok(Some(Source::query(database, query)))
    }
}

/// How inputs that were not written for this program are read.
#[derive(Clone, Debug, Default, Args)]
pub(super) struct Foreign {
    /// Regular expression for the lines of a log, with captures named after fields: (?<elapsed_ms>\d+)
    #[arg(long, value_name = "REGEX", value_parser = pattern)]
    pattern: Option<Arc<Pattern>>,
    /// Which column or key holds which field: elapsed=duration_ms:ms,at=ts,stream=service
    #[arg(long, value_name = "FIELD=COLUMN,..", value_parser = |text: &str| mapped(Mapping::default().with_columns(text)))]
    columns: Option<Mapping>,
    /// Which ending a status stands for, the first that matches: 499=gave_up,5??=failed,*=done
    #[arg(long, value_name = "GLOB=ENDING,..", value_parser = |text: &str| mapped(Mapping::default().with_endings(text)))]
    ending_of: Option<Mapping>,
    /// How times in words are written, in the letters of strftime: %d/%b/%Y:%H:%M:%S %z
    #[arg(long, value_name = "FORMAT", value_parser = |text: &str| mapped(Mapping::default().with_time_format(text)))]
    time_format: Option<Mapping>,
}

impl Foreign {
    /// The same for the reader's options.
    pub(super) fn apply(&self, options: &mut Options) {
        let Foreign { pattern, columns, ending_of, time_format } = self;
        let mapping = [columns, ending_of, time_format].into_iter().flatten().cloned().reduce(Mapping::and);
        options.mapping = mapping.map(Arc::new);
        options.pattern = pattern.clone();
    }
}

fn pattern(text: &str) -> Result<Arc<Pattern>, String> {
    Pattern::new(text).map(Arc::new).map_err(|error| error.to_string())
}

fn mapped(mapping: Result<Mapping, MappingError>) -> Result<Mapping, String> {
    mapping.map_err(|error| error.to_string())
}

/// A time of a job log.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
pub(super) enum JobTime {
    /// From submission to start
    #[default]
    Wait,
    /// From start to end
    Run,
}

impl Reading {
    /// The same as the reader takes it.
    pub(super) fn options(&self, common: &Common) -> Options {
        let mut options = Options {
            format: self.input,
            streams: common.stream.clone(),
            one_stream: self.one_stream.clone(),
            measure: match self.measure {
                JobTime::Wait => Measure::Wait,
                JobTime::Run => Measure::Run,
            },
            bad_lines: self.bad_lines,
            since: common.since,
            until: common.until,
            threads: self.threads,
            rules: common.telemetry.get().cloned().unwrap_or_default(),
            ..Options::default()
        };
        self.foreign.apply(&mut options);
        options
    }
}

/// Reads a policy file; `-` is standard input.
pub(super) fn load_policy(path: &Path) -> Result<Policy, Failure> {
    let standard_input = path == Path::new("-");
    let name = if standard_input { "standard input".to_owned() } else { path.display().to_string() };
    let bytes = if standard_input { some(io::stdin().lock()) } else { File::open(path).and_then(some) };
    let bytes = bytes.map_err(|error| {
        Failure::new(
            Exit::BadInput,
            anyhow::Error::new(error).context(format!("cannot read the policy {name}")),
        )
        .with_remedy("name a file that exists and may be read")
    })?;
    policy::parse_bytes(&bytes, &name).or_exit(Exit::BadInput)
}

/// As much as a policy may have, and a byte more, so that too much is seen without being read whole.
fn some(reader: impl Read) -> io::Result<Vec<u8>> {
    let mut bytes = Vec::new();
    reader.take(policy::MAX_BYTES as u64 + 1).read_to_end(&mut bytes)?;
    Ok(bytes)
}

fn moment(text: &str) -> Result<f64, String> {
    let explain = || {
        format!(
            "{text:?} is not a time; write 2026-11-30T10:00:00Z, 2026-11-30 (midnight UTC) or Unix seconds"
        )
    };
    if let Ok(seconds) = text.parse::<f64>() {
        return if seconds.is_finite() { Ok(seconds) } else { Err(explain()) };
    }
    if let Ok(time) = text.parse::<jiff::Timestamp>() {
        return Ok(time.as_second() as f64 + f64::from(time.subsec_nanosecond()) / 1e9);
    }
    let date: jiff::civil::Date = text.parse().map_err(|_| explain())?;
    let midnight = date.to_datetime(jiff::civil::Time::midnight());
    let time = jiff::tz::Offset::UTC.to_timestamp(midnight).map_err(|_| explain())?;
    Ok(time.as_second() as f64)
}

pub(super) fn stream_name(text: &str) -> Result<String, String> {
    match crate::wait::check_stream(text) {
        Ok(()) => Ok(text.to_owned()),
        Err(error) => Err(format!("{error}; {}", error.remedy())),
    }
}

pub(super) fn selector(text: &str) -> Result<Glob, String> {
    Glob::new(text).map_err(|error| format!("it {error}; use letters, digits and . _ - / : with `*` and `?`"))
}

fn bad_lines(text: &str) -> Result<Allowed, String> {
    match text {
        "all" => Ok(Allowed::All),
        _ => text.parse().map(Allowed::AtMost).map_err(|_| "write a number, or `all`".into()),
    }
}

fn seed(text: &str) -> Result<u64, String> {
    text.parse().map_err(|_| format!("write a whole number from 0 to {}", u64::MAX))
}

fn threads(text: &str) -> Result<NonZeroUsize, String> {
    text.parse().map_err(|_| "write a whole number from 1".into())
}

pub(super) fn format(text: &str) -> Result<Format, String> {
    Format::parse(text).ok_or_else(|| {
        let names: Vec<&str> = Format::ALL.iter().map(|f| f.name()).collect();
        format!("the formats are {}", names.join(", "))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn times() {
        assert_eq!(moment("2026-11-30"), Ok(1_795_996_800.0));
        assert_eq!(moment("2026-11-30T00:00:00Z"), Ok(1_795_996_800.0));
        assert_eq!(moment("1795996800.5"), Ok(1_795_996_800.5));
        assert!(moment("yesterday").is_err() && moment("NaN").is_err());
        assert_eq!(bad_lines("all"), Ok(Allowed::All));
        assert!(bad_lines("-1").is_err() && format("xml").is_err());
    }
}
