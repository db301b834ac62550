//! `outwait ledger`: shows, checks, backs up and exports what a daemon keeps. Works beside a daemon that runs.

use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::{Path, PathBuf};

use anyhow::Context;
use clap::{Args, Subcommand};
use serde::Serialize;

use super::exit::{Exit, Failure, OrExit, print};
use super::options::Output;
use crate::ledger::{ExportError, Hour, LedgerError, Reader, SqliteReader, export};
use crate::say;

/// Arguments of `ledger`.
#[derive(Debug, Args)]
pub(super) struct Ledger {
    #[command(subcommand)]
    question: Question,
}

#[derive(Debug, Subcommand)]
enum Question {
    /// Say what is in it: streams, waits, days, size
    Show(Folder),
    /// Search it for damage; exit code 3 if there is any
    Check(Folder),
    /// Copy it whole into a file, while a daemon may go on writing
    Backup {
        #[command(flatten)]
        folder: Folder,
        /// The file to write; it must not exist
        target: PathBuf,
    },
    /// Write its waits as NDJSON that every command reads; to standard output unless a file is named
    Export {
        #[command(flatten)]
        folder: Folder,
        /// The file to write
        #[arg(long, value_name = "FILE")]
        to: Option<PathBuf>,
    },
}

#[derive(Debug, Args)]
struct Folder {
    /// Folder of the ledger
    #[arg(long, value_name = "DIR")]
    data: PathBuf,
    /// How to write the answer
    #[arg(long, value_enum, default_value_t)]
    format: Output,
}

#[derive(Debug, Serialize)]
struct Shown {
    schema: &'static str,
    bytes: u64,
    streams: Vec<Stream>,
    open_waits: usize,
    keys: usize,
    damage: Vec<String>,
}

#[derive(Debug, Serialize)]
struct Stream {
    stream: String,
    waits: u64,
    done: u64,
    failed: u64,
    gave_up: u64,
    waiting: u64,
    /// First and last time of a wait, RFC 3339.
    from: Option<String>,
    to: Option<String>,
    periods: usize,
}

#[derive(Debug, Serialize)]
struct Checked {
    schema: &'static str,
    sound: bool,
    damage: Vec<String>,
}

impl Ledger {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        match &self.question {
            Question::Show(folder) => show(folder),
            Question::Check(folder) => check(folder),
            Question::Backup { folder, target } => {
                let reader = open(folder)?;
                reader.backup(target).map_err(failure)?;
                print(&format!("the ledger is in {}\n", target.display()))?;
                Ok(Exit::Well)
            }
            Question::Export { folder, to } => write(folder, to.as_deref()),
        }
    }
}

fn open(folder: &Folder) -> Result<SqliteReader, Failure> {
    SqliteReader::attach(&folder.data).map_err(failure)
}

pub(super) fn failure(error: LedgerError) -> Failure {
    let exit = match error {
        LedgerError::Missing { .. }
        | LedgerError::Foreign { .. }
        | LedgerError::Newer { .. }
        | LedgerError::Damaged { .. } => Exit::BadInput,
        _ => Exit::System,
    };
    let remedy = error.remedy();
    Failure::new(exit, error).with_remedy(remedy)
}

fn show(folder: &Folder) -> Result<Exit, Failure> {
    let reader = open(folder)?;
    let extent = reader.extent().map_err(failure)?;
    let (mut streams, mut damage) = (Vec::new(), Vec::new());
    for stream in reader.streams().map_err(failure)? {
        let mut sum = crate::tally::Tally::default();
        let mut periods = 0;
        let broken = reader.visit(&stream, Hour(i32::MIN)..Hour(i32::MAX), &mut |_, tally| {
            periods += 1;
            sum.merge(&tally);
        });
        damage.extend(broken.map_err(failure)?.iter().map(ToString::to_string));
        let [done, failed, gave_up, waiting] = sum.counts();
        let seen = sum.seen();
        streams.push(Stream {
            waits: [done, failed, gave_up, waiting].into_iter().fold(0, u64::saturating_add),
            done,
            failed,
            gave_up,
            waiting,
            from: seen.and_then(|(from, _)| say::time(from)),
            to: seen.and_then(|(_, to)| say::time(to)),
            periods,
            stream,
        });
    }
    let shown = Shown {
        schema: "outwait/ledger/1",
        bytes: extent.bytes,
        streams,
        open_waits: extent.open,
        keys: extent.keys,
        damage,
    };
    print(&folder.format.render(&shown, || told(&shown))?)?;
    Ok(if shown.damage.is_empty() { Exit::Well } else { Exit::BadInput })
}

fn told(shown: &Shown) -> String {
    let count = |n: u64| say::count(n as f64);
    let mut text = format!(
        "{} streams, {:.1} MB on disk, {} waits open, {} idempotency keys\n",
        count(shown.streams.len() as u64),
        shown.bytes as f64 / 1e6,
        count(shown.open_waits as u64),
        count(shown.keys as u64),
    );
    let width = shown.streams.iter().map(|stream| stream.stream.len()).max().unwrap_or(0).min(60);
    for stream in &shown.streams {
        let span = match (&stream.from, &stream.to) {
            (Some(from), Some(to)) => format!("  {from} to {to}"),
            _ => String::new(),
        };
        text += &format!("{:width$}  {:>14} waits{span}\n", stream.stream, count(stream.waits));
    }
    for damage in &shown.damage {
        text += &format!("damaged: {damage}\n");
    }
    text
}

fn check(folder: &Folder) -> Result<Exit, Failure> {
    let damage = open(folder)?.check().map_err(failure)?;
    let damage: Vec<String> = damage.iter().map(ToString::to_string).collect();
    let checked = Checked { schema: "outwait/ledger-check/1", sound: damage.is_empty(), damage };
    let text = || match checked.damage.as_slice() {
        [] => "the ledger is sound\n".to_owned(),
        damage => damage.iter().map(|line| format!("damaged: {line}\n")).collect(),
    };
    print(&folder.format.render(&checked, text)?)?;
    Ok(if checked.sound { Exit::Well } else { Exit::BadInput })
}

fn write(folder: &Folder, to: Option<&Path>) -> Result<Exit, Failure> {
    let reader = open(folder)?;
    let named = to.map_or_else(|| "standard output".to_owned(), |path| path.display().to_string());
    let written = match to {
        None => export(&reader, &mut BufWriter::new(std::io::stdout().lock())),
        Some(path) => {
            let file = File::create_new(path)
                .with_context(|| format!("cannot make {named}"))
                .or_exit(Exit::System)?;
            let mut out = BufWriter::new(file);
            export(&reader, &mut out).and_then(|exported| {
                out.flush().and_then(|()| out.get_ref().sync_all()).map_err(ExportError::from)?;
                Ok(exported)
            })
        }
    };
    let exported = written.map_err(|error| match error {
        ExportError::Ledger(error) => failure(error),
        error @ ExportError::Write(_) => Failure::new(Exit::System, error),
    })?;
    for damage in &exported.damage {
        super::reading::note(&format!("damaged and left out: {damage}"));
    }
    super::reading::note(&format!(
        "{} waits in {} lines, {} of them open",
        say::count(exported.waits as f64),
        say::count(exported.lines as f64),
        say::count(exported.open as f64)
    ));
    Ok(if exported.damage.is_empty() { Exit::Well } else { Exit::BadInput })
}
