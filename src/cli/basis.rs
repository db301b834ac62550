//! What recommendations rest on: waits from files, or an advice that was made before, and what was settled.

use std::collections::HashMap;
use std::ffi::OsString;
use std::fs;
use std::path::{Path, PathBuf};
use std::time::{Duration, SystemTime};

use anyhow::{Context, anyhow};
use clap::Args;
use rayon::prelude::*;

use super::exit::{Exit, Failure, OrExit};
use super::options::{Asked, Common, Foreign, JobTime, Reading};
use super::{files, ledger, reading};
use crate::advice::{AdviceSet, SCHEMA};
use crate::advise::{Past, Study, Terms};
use crate::client::{Address, Client};
use crate::intake::Allowed;
use crate::ledger::{Hour, Reader, Shelf, SqliteReader};
use crate::policy::Policy;
use crate::say;
use crate::serve::read_token;
use crate::settle::{self, Settled};
use crate::tally::{Book, Day};

/// Patience with a daemon, over each step.
const PATIENCE: Duration = Duration::from_secs(60);

/// Where the advice comes from besides waits, and what was settled.
#[derive(Clone, Debug, Default, Args)]
pub(super) struct Basis {
    /// Folder of a daemon's ledger, instead of waits: those in it, and what was settled there; the daemon may run
    #[arg(long, value_name = "DIR", conflicts_with_all = ["advice", "from"])]
    pub(super) data: Option<PathBuf>,
    /// Advice that was made before (`weigh --format json`), instead of waits
    #[arg(long, value_name = "FILE", conflicts_with = "from")]
    pub(super) advice: Option<PathBuf>,
    /// Address of a daemon, as https://host:port, instead of waits
    #[arg(long, value_name = "URL")]
    pub(super) from: Option<Address>,
    /// File that holds the daemon's token
    #[arg(long, value_name = "FILE", requires = "from")]
    pub(super) token_file: Option<PathBuf>,
    /// Certificates (PEM) to trust at an https address, instead of the system's
    #[arg(long, value_name = "FILE", requires = "from")]
    pub(super) trust: Option<PathBuf>,
    /// What was settled before; its times are in force, whatever the policy says
    #[arg(long, value_name = "FILE")]
    pub(super) settled: Option<PathBuf>,
    /// How many bad lines are put up with
    #[arg(long, value_name = "N", default_value_t = 0)]
    bad_lines: u64,
}

/// An advice and what each study told besides.
pub(super) struct Weighed<T> {
    pub(super) set: AdviceSet,
    /// By stream; none where the advice was made before.
    pub(super) told: HashMap<String, T>,
}

impl Basis {
    /// The file of decisions: named, or the one in the daemon's folder.
    pub(super) fn settled_file(&self) -> Option<PathBuf> {
        self.settled.clone().or_else(|| Some(self.data.as_ref()?.join(settle::FILE)))
    }

    /// What was settled, by the file and by the ledger; nothing without either.
    pub(super) fn settled(&self) -> Result<Settled, Failure> {
        let mut settled = match (&self.settled, self.settled_file()) {
            (Some(file), _) => read_settled(file)?,
            // The daemon makes it with the first decision.
            (None, Some(file)) => self::settled(&files::read(&file)?, &file)?,
            (None, None) => Settled::default(),
        };
        self.add_kept(&mut settled)?;
        Ok(settled)
    }

    /// Adds what the ledger knows and the file does not.
    pub(super) fn add_kept(&self, settled: &mut Settled) -> Result<(), Failure> {
        let Some(folder) = &self.data else { return Ok(()) };
        let ledger = SqliteReader::attach(folder).map_err(ledger::failure)?;
        let found = ledger.records(Shelf::Decisions, None).map_err(ledger::failure)?;
        for damage in found.damage {
            reading::note(&format!("damaged and left out: {damage}"));
        }
        for record in found.records {
            let one = settle::parse(record.text.as_bytes(), &folder.display().to_string());
            let one = one.or_exit(Exit::BadInput)?;
            let lacking: Vec<_> =
                settled.missing(&one).into_iter().map(|(s, one)| (s.to_owned(), one.clone())).collect();
            lacking.into_iter().for_each(|(stream, one)| settled.add(&stream, one));
        }
        Ok(())
    }

    /// Whether anything says what is advised.
    pub(super) fn advises(&self) -> bool {
        self.advice.is_some() || self.from.is_some() || self.data.is_some()
    }

    /// The advice: of the waits in `waits`, made before, or a daemon's. `tell` asks each study.
    pub(super) fn weigh<T: Send>(
        &self,
        waits: &[OsString],
        policy: Option<&Policy>,
        past: Option<&Past>,
        common: &Common,
        tell: impl Fn(&Study) -> T + Sync,
    ) -> Result<Weighed<T>, Failure> {
        let made = match (&self.advice, &self.from) {
            (Some(file), _) => {
                let text = fs::read(file).with_context(|| format!("cannot read {}", file.display()));
                let text = text.or_exit(Exit::BadInput)?;
                Some(advice(&text, &file.display().to_string())?)
            }
            (None, Some(address)) => Some(advice(&self.ask("/v1/advice")?, &address.to_string())?),
            (None, None) => None,
        };
        if let Some(mut set) = made {
            if !waits.is_empty() || self.data.is_some() {
                return Err(Failure::new(Exit::Usage, anyhow!("both waits and an advice are named"))
                    .with_remedy("name either"));
            }
            set.streams
                .retain(|advice| common.stream.as_ref().is_none_or(|glob| glob.matches(&advice.stream)));
            return Ok(Weighed { set, told: HashMap::new() });
        }
        if let Some(folder) = self.data.as_ref().filter(|_| waits.is_empty()) {
            let (book, newest) = kept(folder, common)?;
            return Ok(weigh(&book, newest, &HashMap::new(), policy, past, common, tell));
        }
        if waits.is_empty() {
            return Err(Failure::new(Exit::Usage, anyhow!("nothing says what the waits are"))
                .with_remedy(
                    "name files of waits, or `--data DIR` of a daemon, or `--from http://host:port`, or `--advice FILE`",
                ));
        }
        let reading = Reading {
            files: waits.to_vec(),
            one_stream: None,
            bad_lines: Allowed::AtMost(self.bad_lines),
            measure: JobTime::Wait,
            asked: Asked::default(),
            foreign: Foreign::default(),
            input: None,
            threads: None,
        };
        let (book, report) = reading::book(&reading, common)?;
        let suspicions = report.suspicions.iter().map(|s| (s.stream.clone(), s.to_string())).collect();
        Ok(weigh(&book, report.newest, &suspicions, policy, past, common, tell))
    }

    /// A question to the daemon.
    pub(super) fn ask(&self, path: &str) -> Result<Vec<u8>, Failure> {
        let Some(address) = &self.from else {
            return Err(Failure::new(Exit::Usage, anyhow!("no daemon is named")));
        };
        let token = self.token_file.as_deref().map(read_token).transpose().or_exit(Exit::BadInput)?;
        let client = Client::new(self.trust.as_deref(), PATIENCE).or_exit(Exit::BadInput)?;
        client.get(address, path, token.as_ref()).with_context(|| format!("{address}{path}")).map_err(
            |error| {
                Failure::new(Exit::System, error)
                    .with_remedy("see that the daemon runs there and takes the token")
            },
        )
    }
}

fn weigh<T: Send>(
    book: &Book,
    newest: Option<f64>,
    suspicions: &HashMap<String, String>,
    policy: Option<&Policy>,
    past: Option<&Past>,
    common: &Common,
    tell: impl Fn(&Study) -> T + Sync,
) -> Weighed<T> {
    let streams = book.streams();
    // Windows are counted back from the newest wait of all that was read.
    let newest = newest.map(|newest| common.until.map_or(newest, |until| newest.min(until.next_down())));
    let day = newest.and_then(|newest| match Day::of(Some(newest)) {
        Day::Number(day) => Some(day),
        Day::Undated => None,
    });
    let terms = Terms { policy, newest: day, seed: common.seed, past };
    let lenders = terms.lenders(&streams);
    let (advice, told): (Vec<_>, Vec<_>) = streams
        .par_iter()
        .map(|(stream, days)| {
            let suspicion = suspicions.get(*stream).map(String::as_str);
            let study = terms.study_among(stream, days, suspicion, &lenders);
            let told = tell(&study);
            (study.into_advice(), ((*stream).to_owned(), told))
        })
        .unzip();
    Weighed { set: terms.set(advice, newest.and_then(say::time)), told: told.into_iter().collect() }
}

/// The waits in a ledger, and the newest time of one.
fn kept(folder: &Path, common: &Common) -> Result<(Book, Option<f64>), Failure> {
    if common.since.is_some() || common.until.is_some() {
        return Err(Failure::new(Exit::Usage, anyhow!("a ledger's waits are taken as whole days"))
            .with_remedy("leave --since and --until out, or name what `outwait ledger export` wrote"));
    }
    let ledger = SqliteReader::attach(folder).map_err(ledger::failure)?;
    let (mut book, mut newest) = (Book::default(), None::<f64>);
    for stream in ledger.streams().map_err(ledger::failure)? {
        if common.stream.as_ref().is_some_and(|glob| !glob.matches(&stream)) {
            continue;
        }
        let damage = ledger.visit(&stream, Hour(i32::MIN)..Hour(i32::MAX), &mut |period, tally| {
            newest = newest.into_iter().chain(tally.seen().map(|(_, last)| last)).reduce(f64::max);
            // The ledger's names were checked when they came.
            let _ = book.merge_day(&stream, Day::Number(period.hours().start.day()), &tally);
        });
        for damage in damage.map_err(ledger::failure)? {
            reading::note(&format!("damaged and left out: {damage}"));
        }
    }
    let now = clock();
    for open in ledger.open_waits(None, usize::MAX).map_err(ledger::failure)? {
        let asked = common.stream.as_ref().is_none_or(|glob| glob.matches(&open.stream));
        if let Some(wait) = open.seen(now).filter(|_| asked) {
            let _ = book.add(&open.stream, &wait);
        }
    }
    Ok((book, newest))
}

fn advice(text: &[u8], name: &str) -> Result<AdviceSet, Failure> {
    let remedy = "give what `outwait weigh --format json` or a daemon's /v1/advice says";
    let set: AdviceSet = serde_json::from_slice(text)
        .with_context(|| format!("{name} holds no advice"))
        .map_err(|error| Failure::new(Exit::BadInput, error).with_remedy(remedy))?;
    if set.schema != SCHEMA {
        let error = anyhow!("{name} is of the schema {:?}, not {SCHEMA:?}", set.schema);
        return Err(Failure::new(Exit::BadInput, error).with_remedy(remedy));
    }
    Ok(set)
}

/// Reads what was settled. A file that is not there is a slip here; `settle` makes it.
pub(super) fn read_settled(path: &Path) -> Result<Settled, Failure> {
    let bytes = fs::read(path).with_context(|| format!("cannot read {}", path.display()));
    let bytes = bytes.map_err(|error| {
        Failure::new(Exit::BadInput, error).with_remedy("name a file that `outwait settle` has written")
    })?;
    settled(&bytes, path)
}

/// The same from bytes.
pub(super) fn settled(bytes: &[u8], path: &Path) -> Result<Settled, Failure> {
    settle::parse(bytes, &path.display().to_string()).or_exit(Exit::BadInput)
}

/// Now, Unix seconds.
pub(super) fn clock() -> f64 {
    SystemTime::now().duration_since(SystemTime::UNIX_EPOCH).map_or(0.0, |since| since.as_secs_f64())
}

/// The document in a file, or on standard output.
pub(super) fn put(text: &str, output: Option<&Path>) -> Result<(), Failure> {
    match output {
        Some(path) if path != Path::new("-") => files::replace(path, text),
        _ => super::exit::print(text),
    }
}
