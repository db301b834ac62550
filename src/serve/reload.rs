//! The policy file, read again when it changes or when asked: a bad new file is refused and the old one stays.

use std::fs::{self, File};
use std::io::{self, Read};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::thread::{Builder, JoinHandle};
use std::time::{Duration, SystemTime};

use super::shared::Shared;
use crate::policy::{self, Policy, PolicyError};

/// How often the file is looked at.
const PAUSE: Duration = Duration::from_millis(500);

/// Where the policy comes from.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct PolicyFile(Option<PathBuf>);

/// A policy and how it stands.
#[derive(Clone, Debug, Default)]
pub(super) struct Standing {
    /// The one in force; `None` where no file was named.
    pub(super) policy: Option<Arc<Policy>>,
    /// Why the file as it lies there now is not in force.
    pub(super) refused: Option<Arc<str>>,
    /// The file's state when it was read last.
    seen: Option<Seen>,
}

type Seen = (SystemTime, u64);

/// Why a policy file was not taken.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ReloadError {
    /// It cannot be read.
    #[error("cannot read the policy {}: {source}", path.display())]
    Read {
        /// The file.
        path: PathBuf,
        /// Why.
        source: io::Error,
    },
    /// It does not hold.
    #[error(transparent)]
    Policy(#[from] PolicyError),
}

impl PolicyFile {
    /// No file: every stream is advised under the assumptions that stand for a missing policy.
    pub fn none() -> PolicyFile {
        PolicyFile(None)
    }

    /// A file.
    pub fn at(path: impl Into<PathBuf>) -> PolicyFile {
        PolicyFile(Some(path.into()))
    }

    pub(super) fn load(&self) -> Result<Standing, ReloadError> {
        let Some(path) = &self.0 else { return Ok(Standing::default()) };
        let seen = seen(path);
        Ok(Standing { policy: Some(Arc::new(read(path)?)), refused: None, seen })
    }
}

fn seen(path: &Path) -> Option<Seen> {
    let metadata = fs::metadata(path).ok()?;
    Some((metadata.modified().ok()?, metadata.len()))
}

fn read(path: &Path) -> Result<Policy, ReloadError> {
    let unread = |source| ReloadError::Read { path: path.to_owned(), source };
    let mut bytes = Vec::new();
    let most = policy::MAX_BYTES as u64 + 1;
    File::open(path).and_then(|file| file.take(most).read_to_end(&mut bytes)).map_err(unread)?;
    Ok(policy::parse_bytes(&bytes, &path.display().to_string())?)
}

/// Reads the file again. What stood stays if it does not hold.
pub(super) fn again(shared: &Shared) {
    let Some(path) = &shared.config.policy.0 else { return };
    let old = shared.standing();
    let seen = seen(path);
    match read(path) {
        Ok(policy) if old.policy.as_deref() == Some(&policy) => {
            shared.set_standing(Standing { seen, refused: None, ..old });
        }
        Ok(policy) => {
            tracing::info!(file = %path.display(), "the policy has changed; all advice is made anew");
            shared.set_standing(Standing { policy: Some(Arc::new(policy)), refused: None, seen });
            shared.desk.at_once(shared.streams());
        }
        Err(error) => {
            tracing::error!(%error, "the policy is refused; the last sound one stays in force");
            shared.set_standing(Standing { refused: Some(error.to_string().into()), seen, ..old });
        }
    }
}

/// Starts the thread that looks after the file.
pub(super) fn watch(shared: Arc<Shared>) -> io::Result<JoinHandle<()>> {
    Builder::new().name("policy".into()).spawn(move || {
        let Some(path) = shared.config.policy.0.clone() else { return };
        while !shared.is_stopping() {
            std::thread::sleep(PAUSE);
            if seen(&path) != shared.standing().seen {
                again(&shared);
            }
        }
    })
}
