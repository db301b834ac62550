//! `outwait serve`: the daemon.

use std::io::{self, IsTerminal};
use std::net::SocketAddr;
use std::path::PathBuf;

use anyhow::{Context, anyhow};
use clap::{Args, ValueEnum};
use tokio::net::TcpListener;
use tracing_subscriber::filter::LevelFilter;

use super::exit::{Exit, Failure, OrExit, print};
use super::layout::Page;
use super::options::Foreign;
use super::{options, text};
use crate::client::Address;
use crate::demo;
use crate::intake::{Format, Options};
use crate::ledger::LedgerError;
use crate::say;
use crate::serve::{
    Config, Daemon, Followed, PolicyFile, Runs, ServeError, Signing, Webhook, is_open_to_others, read_tls,
    read_token,
};

const EXAMPLES: &str = "\
Examples:
  outwait serve --demo
  outwait serve --data /var/lib/outwait --policy policy.yaml
  outwait serve --data data --follow /var/log/waits.ndjson
  outwait serve --data data --listen 0.0.0.0:7071 --token-file token --certificate tls.crt --key tls.key

Send waits with
  curl --data-binary @waits.ndjson http://127.0.0.1:7071/v1/waits
and ask for advice at /v1/advice. SIGTERM and SIGINT end it without loss; SIGHUP reads the policy again, which also
happens when the file changes.
Exit codes: 0 well, 2 wrong usage, 3 bad input, 5 the system failed.";

/// How long the demo's first advice may take, s.
const PATIENCE: f64 = 120.0;

/// Arguments of `serve`.
#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Serve {
    /// Folder of the ledger; made if it does not exist
    #[arg(long, value_name = "DIR", required_unless_present = "demo", conflicts_with = "demo")]
    data: Option<PathBuf>,
    /// Serve the demo scenario as live traffic, from a folder that is removed at the end
    #[arg(long)]
    demo: bool,
    /// Policy file: what waiting is worth, stream by stream
    #[arg(long, value_name = "FILE", env = "OUTWAIT_POLICY")]
    policy: Option<PathBuf>,
    /// Address to listen on
    #[arg(long, value_name = "ADDRESS", default_value = "127.0.0.1:7071")]
    listen: SocketAddr,
    /// File that holds the token which clients must show
    #[arg(long, value_name = "FILE")]
    token_file: Option<PathBuf>,
    /// Let nobody settle over HTTP: pages without forms. Without a token that is so anyway, but for the demo
    #[arg(long)]
    read_only: bool,
    /// Certificate chain (PEM), for HTTPS
    #[arg(long, value_name = "FILE", requires = "key")]
    certificate: Option<PathBuf>,
    /// Its private key (PEM)
    #[arg(long, value_name = "FILE", requires = "certificate")]
    key: Option<PathBuf>,
    /// How to write the log
    #[arg(long, value_enum, default_value_t)]
    log: LogForm,
    /// How much to write into it
    #[arg(long, value_enum, default_value_t)]
    log_level: LogLevel,
    /// Share of the processors that advice may take, in percent
    #[arg(long, value_name = "PERCENT", default_value_t = 25, value_parser = clap::value_parser!(u8).range(1..=100))]
    advice_share: u8,
    /// Least time between two advices on one stream
    #[arg(long, value_name = "DURATION", default_value = "10s", value_parser = duration)]
    refresh: f64,
    /// Days for which waits are kept
    #[arg(long, value_name = "DAYS", default_value_t = 92, value_parser = clap::value_parser!(u16).range(1..))]
    keep: u16,
    /// Megabytes above which the oldest days are dropped; no limit unless said
    #[arg(long, value_name = "MB")]
    keep_mb: Option<u64>,
    /// Most streams; records of more are refused
    #[arg(long, value_name = "N", default_value_t = 100_000, value_parser = at_least_one)]
    most_streams: usize,
    /// Most waits open at once
    #[arg(long, value_name = "N", default_value_t = 1_000_000, value_parser = at_least_one)]
    most_open: usize,
    /// Most connections at once
    #[arg(long, value_name = "N", default_value_t = 1_024, value_parser = at_least_one)]
    most_connections: usize,
    /// Most streams in the metrics
    #[arg(long, value_name = "N", default_value_t = 1_000, value_parser = at_least_one)]
    metric_streams: usize,
    /// Longest body, megabytes as sent; unpacked it may be eight times as long
    #[arg(long, value_name = "MB", default_value_t = 32, value_parser = clap::value_parser!(u16).range(1..=1_024))]
    body_mb: u16,
    /// Folder for the week's recommendations (`weekly:` in the policy); beside the ledger unless said
    #[arg(long, value_name = "DIR")]
    weekly_folder: Option<PathBuf>,
    /// File of what was settled, kept in step with the ledger; settled.yaml beside it unless said
    #[arg(long, value_name = "FILE")]
    settled: Option<PathBuf>,
    /// Address to which the week's recommendations are posted too
    #[arg(long, value_name = "URL", requires = "webhook_secret")]
    webhook: Option<Address>,
    /// File that holds the secret by which they are signed (HMAC-SHA256)
    #[arg(long, value_name = "FILE", requires = "webhook")]
    webhook_secret: Option<PathBuf>,
    /// A log to follow over rotations and restarts; may be given more than once; `follow:` in the policy names more
    #[arg(long, value_name = "FILE")]
    follow: Vec<PathBuf>,
    #[command(flatten)]
    foreign: Foreign,
    /// Format of the followed files (ndjson, csv, journal), instead of finding it out
    #[arg(long, value_name = "FORMAT", value_parser = options::format, requires = "follow")]
    input: Option<Format>,
    /// One stream for all waits of the followed files, whatever their records call theirs
    #[arg(long = "as", value_name = "NAME", value_parser = options::stream_name, requires = "follow")]
    one_stream: Option<String>,
    /// Certificates (PEM) to trust at an https webhook, instead of the system's
    #[arg(long, value_name = "FILE", requires = "webhook")]
    webhook_trust: Option<PathBuf>,
    /// Seed of everything drawn
    #[arg(long, value_name = "N", default_value_t = 1)]
    seed: u64,
}

/// A form of the log.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum LogForm {
    /// For a person
    #[default]
    Text,
    /// A JSON object a line
    Json,
}

/// How much is written down.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum LogLevel {
    /// What needs somebody
    Error,
    /// And what may soon
    Warn,
    /// And refused requests, changes, start and end
    #[default]
    Info,
    /// And every request
    Debug,
}

impl Serve {
    pub(super) fn run(&self) -> Result<Exit, Failure> {
        self.start_log();
        let demo = self.demo.then(tempfile::tempdir).transpose().context("cannot make a folder for the demo");
        let demo = demo.or_exit(Exit::System)?;
        let config = self.config(demo.as_ref().map(|folder| folder.path().to_owned()))?;
        if is_open_to_others(&self.listen, config.token.as_ref()) {
            tracing::warn!(
                address = %self.listen,
                "it runs open: everyone who reaches this address may read and write; give it a --token-file"
            );
        }
        let runtime = tokio::runtime::Builder::new_multi_thread()
            .enable_all()
            .build()
            .context("cannot start the runtime")
            .or_exit(Exit::System)?;
        runtime.block_on(self.serve(config))
    }

    async fn serve(&self, config: Config) -> Result<Exit, Failure> {
        let listener = TcpListener::bind(self.listen).await;
        let listener =
            listener.with_context(|| format!("cannot listen on {}", self.listen)).map_err(|error| {
                Failure::new(Exit::System, error).with_remedy("choose another address with --listen")
            })?;
        let address = listener.local_addr().context("the listener has no address").or_exit(Exit::System)?;
        let scheme = if config.tls.is_some() { "https" } else { "http" };
        let shutdown = signals().context("cannot take signals").or_exit(Exit::System)?;
        let (demo, seed) = (self.demo, self.seed);
        let started = tokio::task::spawn_blocking(move || {
            let mut daemon = Daemon::start(config)?;
            let told = if demo { Some((daemon.feed_demo(seed)?, daemon.settle(PATIENCE))) } else { None };
            Ok((daemon, told))
        });
        let started: Result<(Daemon, _), ServeError> =
            started.await.context("starting was broken off").or_exit(Exit::System)?;
        let (daemon, told) = started.map_err(failure)?;
        let reload = daemon.reload_policy();
        let hang_ups = hang_ups(reload).context("cannot take signals").or_exit(Exit::System)?;
        if let Some((fed, set)) = told {
            print(&text::advice_set(&set, Page::standard_output()))?;
            print(&format!(
                "{} waits of Fernhollow are in, and more come as time goes by.\nthe page: {scheme}://{address}/\n\
                 advice:   {scheme}://{address}/v1/advice\nmetrics:  {scheme}://{address}/metrics\nCtrl-C ends it.\n",
                say::count(fed.waits as f64)
            ))?;
        }
        tracing::info!(address = %format!("{scheme}://{address}"), "serving");
        let outcome = daemon.run(listener, shutdown).await;
        hang_ups.abort();
        outcome.map_err(failure)?;
        Ok(Exit::Well)
    }

    fn config(&self, demo: Option<PathBuf>) -> Result<Config, Failure> {
        let mut policy = self.policy.clone();
        let data = match (demo, &self.data) {
            (Some(folder), _) => {
                if policy.is_none() {
                    let file = folder.join("policy.yaml");
                    std::fs::write(&file, demo::POLICY)
                        .context("cannot write the demo's policy")
                        .or_exit(Exit::System)?;
                    policy = Some(file);
                }
                folder.join("data")
            }
            (None, Some(data)) => data.clone(),
            (None, None) => return Err(Failure::new(Exit::Usage, anyhow!("--data or --demo is needed"))),
        };
        let mut config = Config::new(data);
        config.policy = policy.map_or_else(PolicyFile::none, PolicyFile::at);
        config.seed = self.seed;
        config.advice_share = if self.demo { 1.0 } else { f64::from(self.advice_share) / 100.0 };
        config.refresh = self.refresh;
        config.metric_streams = self.metric_streams;
        config.ledger.keep_for = f64::from(self.keep) * 86_400.0;
        config.ledger.most_bytes = self.keep_mb.map(|mb| mb.saturating_mul(1_000_000));
        config.ledger.most_streams = self.most_streams;
        config.ledger.most_open = self.most_open;
        config.limits.connections = self.most_connections;
        config.limits.body_bytes = usize::from(self.body_mb) * 1_000_000;
        config.limits.unpacked_bytes = 8 * config.limits.body_bytes as u64;
        config.limits.bodies_bytes = config.limits.bodies_bytes.max(4 * config.limits.body_bytes);
        config.token = self.token_file.as_deref().map(read_token).transpose().or_exit(Exit::BadInput)?;
        config.signing = match (self.read_only, self.demo) {
            (true, _) => Signing::Nobody,
            // Its folder is removed at the end.
            (false, true) => Signing::Anyone,
            (false, false) => Signing::WithToken,
        };
        config.weekly =
            Runs { folder: self.weekly_folder.clone(), settled: self.settled.clone(), webhook: None };
        if let (Some(address), Some(secret)) = (&self.webhook, &self.webhook_secret) {
            let secret = read_token(secret).or_exit(Exit::BadInput)?;
            let webhook = Webhook::new(address.clone(), secret, self.webhook_trust.as_deref());
            config.weekly.webhook = Some(webhook.or_exit(Exit::BadInput)?);
        }
        let mut options =
            Options { format: self.input, one_stream: self.one_stream.clone(), ..Options::default() };
        self.foreign.apply(&mut options);
        let followed = |path: &PathBuf| Followed { path: path.clone(), options: options.clone() };
        config.follow = self.follow.iter().map(followed).collect();
        if let (Some(certificate), Some(key)) = (&self.certificate, &self.key) {
            config.tls = Some(read_tls(certificate, key).or_exit(Exit::BadInput)?);
        }
        Ok(config)
    }

    fn start_log(&self) {
        let level = match self.log_level {
            LogLevel::Error => LevelFilter::ERROR,
            LogLevel::Warn => LevelFilter::WARN,
            LogLevel::Info => LevelFilter::INFO,
            LogLevel::Debug => LevelFilter::DEBUG,
        };
        let log = tracing_subscriber::fmt().with_writer(io::stderr).with_max_level(level).with_target(false);
        // A second start in one process (a test) keeps the first log.
        let _ = match self.log {
            LogForm::Text => {
                let plain = std::env::var_os("NO_COLOR").is_some_and(|value| !value.is_empty());
                log.with_ansi(!plain && io::stderr().is_terminal()).try_init()
            }
            LogForm::Json => log.json().flatten_event(true).with_current_span(false).try_init(),
        };
    }
}

fn failure(error: ServeError) -> Failure {
    let (exit, remedy) = match &error {
        ServeError::Policy(_) => (Exit::BadInput, None),
        ServeError::Ledger(ledger) => {
            let exit = match ledger {
                LedgerError::Foreign { .. } | LedgerError::Newer { .. } | LedgerError::Damaged { .. } => {
                    Exit::BadInput
                }
                _ => Exit::System,
            };
            (exit, Some(ledger.remedy()))
        }
        _ => (Exit::System, None),
    };
    let failure = Failure::new(exit, error);
    match remedy {
        Some(remedy) => failure.with_remedy(remedy),
        None => failure,
    }
}

/// Over when the process is asked to end.
#[cfg(unix)]
fn signals() -> io::Result<impl Future<Output = ()> + Send> {
    use tokio::signal::unix::{SignalKind, signal};
    let (mut interrupt, mut terminate) = (signal(SignalKind::interrupt())?, signal(SignalKind::terminate())?);
    Ok(async move {
        tokio::select! {
            _ = interrupt.recv() => {}
            _ = terminate.recv() => {}
        }
    })
}

#[cfg(not(unix))]
fn signals() -> io::Result<impl Future<Output = ()> + Send> {
    Ok(async {
        let _ = tokio::signal::ctrl_c().await;
    })
}

/// Reads the policy again at each hang-up.
#[cfg(unix)]
fn hang_ups(reload: impl Fn() + Send + Sync + 'static) -> io::Result<tokio::task::JoinHandle<()>> {
    use tokio::signal::unix::{SignalKind, signal};
    let mut hang_up = signal(SignalKind::hangup())?;
    Ok(tokio::spawn(async move {
        while hang_up.recv().await.is_some() {
            tokio::task::block_in_place(&reload);
        }
    }))
}

#[cfg(not(unix))]
fn hang_ups(_: impl Fn() + Send + Sync + 'static) -> io::Result<tokio::task::JoinHandle<()>> {
    Ok(tokio::spawn(std::future::pending()))
}

fn duration(text: &str) -> Result<f64, String> {
    say::parse_duration(text).map_err(|error| error.to_string())
}

fn at_least_one(text: &str) -> Result<usize, String> {
    text.parse().ok().filter(|n| *n > 0).ok_or_else(|| "write a whole number from 1".to_owned())
}
