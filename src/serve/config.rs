//! What a daemon is started with: its folder, its limits, its secrets.

use std::fmt;
use std::io::Read;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::{Duration, SystemTime};

use subtle::ConstantTimeEq;

use super::reload::PolicyFile;
use super::weekly::Runs;
use crate::ledger;
use crate::policy::Followed;

/// Unix seconds of now.
pub type Clock = Arc<dyn Fn() -> f64 + Send + Sync>;

/// Everything a daemon is started with.
#[derive(Clone)]
pub struct Config {
    /// The folder of its ledger; one daemon, one folder.
    pub data: PathBuf,
    /// What is asked for, stream by stream.
    pub policy: PolicyFile,
    /// What the ledger keeps.
    pub ledger: ledger::Options,
    /// What is taken from clients.
    pub limits: Limits,
    /// Who may ask; anyone who reaches it without.
    pub token: Option<Token>,
    /// Who may settle over HTTP.
    pub signing: Signing,
    /// The certificate and key; plain HTTP without.
    pub tls: Option<Arc<tokio_rustls::rustls::ServerConfig>>,
    /// Share of all processors that advice may take, in (0, 1].
    pub advice_share: f64,
    /// Least time between two advices on one stream, s.
    pub refresh: f64,
    /// Most streams that stand in the metrics.
    pub metric_streams: usize,
    /// Where the weekly runs go.
    pub weekly: Runs,
    /// The files that are followed.
    pub follow: Vec<Followed>,
    /// Seed of everything drawn.
    pub seed: u64,
    /// What time it is.
    pub clock: Clock,
}

impl Config {
    /// A daemon on a folder, with everything else as it is unless said.
    pub fn new(data: impl Into<PathBuf>) -> Config {
        Config {
            data: data.into(),
            policy: PolicyFile::none(),
            ledger: ledger::Options::default(),
            limits: Limits::default(),
            token: None,
            signing: Signing::default(),
            tls: None,
            advice_share: 0.25,
            refresh: 10.0,
            metric_streams: 1_000,
            weekly: Runs::default(),
            follow: Vec::new(),
            seed: 1,
            clock: Arc::new(system_time),
        }
    }

    /// Whether somebody who got as far as this may settle.
    pub(super) fn may_settle(&self) -> bool {
        match self.signing {
            Signing::Nobody => false,
            Signing::WithToken => self.token.is_some(),
            Signing::Anyone => true,
        }
    }

    /// Threads that advise: enough for the share, at least one.
    pub(super) fn advisers(&self) -> usize {
        (self.advice_share * cores()).ceil().max(1.0) as usize
    }

    /// Share of its time that each of them works.
    pub(super) fn adviser_share(&self) -> f64 {
        (self.advice_share * cores() / self.advisers() as f64).clamp(0.01, 1.0)
    }
}

fn cores() -> f64 {
    std::thread::available_parallelism().map_or(1.0, |n| n.get() as f64)
}

fn system_time() -> f64 {
    SystemTime::now().duration_since(SystemTime::UNIX_EPOCH).map_or(0.0, |since| since.as_secs_f64())
}

/// Who may settle over HTTP: on the pages, or by `/v1/settle`. The file of decisions is not concerned.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Signing {
    /// Nobody: it is read only.
    Nobody,
    /// Whoever shows the token; nobody where there is none.
    #[default]
    WithToken,
    /// Whoever reaches it.
    Anyone,
}

/// What is taken from clients, and how long they may take over it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Limits {
    /// Longest body as it is sent, bytes.
    pub body_bytes: usize,
    /// Longest body unpacked, bytes.
    pub unpacked_bytes: u64,
    /// Longest line, bytes.
    pub line_bytes: usize,
    /// Most bytes of bodies in memory at once, of all clients together.
    pub bodies_bytes: usize,
    /// Most connections at once.
    pub connections: usize,
    /// Longest time until a request's head is complete.
    pub head: Duration,
    /// Longest time until a body is complete.
    pub body: Duration,
    /// Longest time over everything else of one request.
    pub request: Duration,
    /// Batches that may wait for the disk at once.
    pub queue: usize,
}

impl Default for Limits {
    fn default() -> Limits {
        Limits {
            body_bytes: 32 << 20,
            unpacked_bytes: 256 << 20,
            line_bytes: 64 << 10,
            bodies_bytes: 256 << 20,
            connections: 1_024,
            head: Duration::from_secs(10),
            body: Duration::from_secs(30),
            request: Duration::from_secs(60),
            queue: 1_024,
        }
    }
}

/// A secret that clients show. It is never printed.
#[derive(Clone)]
pub struct Token(Box<[u8]>);

impl Token {
    /// Whether what was shown is it, in a time that does not tell where they differ.
    pub fn is(&self, shown: &[u8]) -> bool {
        self.0.ct_eq(shown).into()
    }

    /// The value of the header that shows it.
    pub(crate) fn bearer(&self) -> String {
        format!("Bearer {}", String::from_utf8_lossy(&self.0))
    }

    /// The bytes, as a key for signing.
    pub(crate) fn key(&self) -> &[u8] {
        &self.0
    }
}

impl fmt::Debug for Token {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Token(..)")
    }
}

/// Why a secret was not taken from its file.
#[derive(Debug, thiserror::Error)]
pub enum SecretError {
    /// The file cannot be read.
    #[error("cannot read the token in {}: {source}", path.display())]
    Read {
        /// The file.
        path: PathBuf,
        /// Why.
        source: std::io::Error,
    },
    /// Too short to be a secret, or not one word of printable ASCII.
    #[error("{} holds no token: one line of {LEAST} to {MOST} printable ASCII characters without spaces is needed", path.display())]
    Form {
        /// The file.
        path: PathBuf,
    },
    /// Others may read it.
    #[error("{} can be read by others; take that right away (mode 600)", path.display())]
    Exposed {
        /// The file.
        path: PathBuf,
    },
}

const LEAST: usize = 16;
const MOST: usize = 512;

/// Reads a token from the first line of a file that only its owner may read.
///
/// # Errors
/// [`SecretError`].
pub fn read_token(path: &Path) -> Result<Token, SecretError> {
    let read = |source| SecretError::Read { path: path.to_owned(), source };
    let file = std::fs::File::open(path).map_err(read)?;
    #[cfg(unix)]
    {
        use std::os::unix::fs::PermissionsExt;
        // Group and others; a secret mounted for a group of its own is left to whoever mounts it.
        if file.metadata().map_err(read)?.permissions().mode() & 0o007 != 0 {
            return Err(SecretError::Exposed { path: path.to_owned() });
        }
    }
    let mut text = String::new();
    file.take(MOST as u64 + 2).read_to_string(&mut text).map_err(read)?;
    let line = text.lines().next().unwrap_or_default().trim();
    let is_word = line.bytes().all(|byte| byte.is_ascii_graphic());
    if !(LEAST..=MOST).contains(&line.len()) || !is_word {
        return Err(SecretError::Form { path: path.to_owned() });
    }
    Ok(Token(line.as_bytes().into()))
}
