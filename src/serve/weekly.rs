//! The week's recommendations on a schedule: into a folder, then to a webhook. What was done is kept in a small file, so that
//! no run is lost or made twice over restarts and changes of the clock.

use std::fs;
use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::thread::{Builder, JoinHandle};
use std::time::Duration;

use jiff::Timestamp;
use jiff::civil::Date;
use ring::hmac;
use serde::{Deserialize, Serialize};

use super::shared::Shared;
use super::week;
use super::{TlsError, Token};
use crate::client::{Address, CallError, Client};
use crate::report::{self, FormError, Schedule};
use crate::stopping::luby;

/// How often the clock is looked at.
const NAP: Duration = Duration::from_millis(500);
/// Pauses between deliveries are the universal sequence times this, s, and none is longer than the other.
const FIRST_PAUSE: f64 = 10.0;
const LONGEST_PAUSE: f64 = 3_600.0;
/// Patience with a webhook, over each step.
const PATIENCE: Duration = Duration::from_secs(10);
const STATE: &str = "weekly-state.json";

/// Where a daemon's weekly runs go.
#[derive(Clone, Debug, Default)]
pub struct Runs {
    /// The folder; `weekly` beside the ledger's unless said.
    pub folder: Option<PathBuf>,
    /// The file of what was settled; `settled.yaml` beside the ledger's unless said. Its times are in force, whatever the
    /// policy says.
    pub settled: Option<PathBuf>,
    /// Who is told.
    pub webhook: Option<Webhook>,
}

/// Who is told of the week's recommendations.
#[derive(Clone, Debug)]
pub struct Webhook {
    address: Address,
    /// By which each message is signed.
    secret: Token,
    client: Client,
}

impl Webhook {
    /// `trust` holds the certificates to trust at an https address, PEM; the system's without.
    ///
    /// # Errors
    /// [`TlsError`] where the file holds none.
    pub fn new(address: Address, secret: Token, trust: Option<&Path>) -> Result<Webhook, TlsError> {
        Ok(Webhook { address, secret, client: Client::new(trust, PATIENCE)? })
    }
}

/// What was done, as it is kept.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
struct State {
    /// The newest run that was made, by the day on which it was due.
    last: String,
    /// The run that the webhook has not taken yet.
    pending: Option<String>,
    /// How often it was tried.
    tries: u64,
    /// When to try again, Unix seconds.
    again: f64,
}

#[derive(Debug, thiserror::Error)]
enum RunError {
    #[error("{}: {source}", path.display())]
    File { path: PathBuf, source: io::Error },
    #[error(transparent)]
    Form(#[from] FormError),
    #[error("the run cannot be written: {0}")]
    Json(#[from] serde_json::Error),
}

/// Starts the thread that looks after the schedule.
pub(super) fn start(shared: Arc<Shared>) -> io::Result<JoinHandle<()>> {
    Builder::new().name("weekly".into()).spawn(move || {
        let mut keeper = Keeper { shared, told: String::new() };
        while !keeper.shared.is_stopping() {
            std::thread::sleep(NAP);
            if let Err(error) = keeper.look() {
                keeper.complain(error.to_string());
            }
        }
    })
}

struct Keeper {
    shared: Arc<Shared>,
    /// The last trouble told, so that it is told once and not twice a second.
    told: String,
}

impl Keeper {
    fn complain(&mut self, error: String) {
        if self.told != error {
            tracing::error!(error, "the weekly run waits until this is mended");
            self.told = error;
        }
    }

    fn folder(&self) -> PathBuf {
        let config = &self.shared.config;
        config.weekly.folder.clone().unwrap_or_else(|| config.data.join("weekly"))
    }

    fn look(&mut self) -> Result<(), RunError> {
        let Some(wanted) = self.shared.policy().and_then(|policy| policy.weekly.clone()) else {
            return Ok(());
        };
        let schedule = match Schedule::new(&wanted) {
            Ok(schedule) => schedule,
            Err(error) => {
                self.complain(error.to_string());
                return Ok(());
            }
        };
        let unix = self.shared.now();
        let Ok(now) = Timestamp::from_second(unix as i64) else { return Ok(()) };
        let folder = self.folder();
        fs::create_dir_all(&folder).map_err(|source| RunError::File { path: folder.clone(), source })?;
        let Some(mut state) = self.state(&folder)? else {
            // The first start: the next run is the first.
            if let Some(last) = schedule.latest(now) {
                keep(&folder, &State { last: last.to_string(), pending: None, tries: 0, again: 0.0 })?;
            }
            return Ok(());
        };
        let Ok(last) = state.last.parse::<Date>() else {
            self.complain(format!("{} names no day", folder.join(STATE).display()));
            return Ok(());
        };
        if let Some(due) = schedule.due(now, last) {
            self.run(&folder, due, now)?;
            let pending = self.shared.config.weekly.webhook.is_some().then(|| due.to_string());
            state = State { last: due.to_string(), pending, tries: 0, again: 0.0 };
            keep(&folder, &state)?;
            self.told.clear();
            tracing::info!(%due, folder = %folder.display(), "the week's recommendations are written");
        }
        // A clock that was put back makes no pause longer than the longest.
        if let Some(run) =
            state.pending.clone().filter(|_| unix >= state.again || state.again - unix > LONGEST_PAUSE)
        {
            self.deliver(&folder, &run, state, unix)?;
        }
        Ok(())
    }

    fn state(&mut self, folder: &Path) -> Result<Option<State>, RunError> {
        let path = folder.join(STATE);
        match fs::read(&path) {
            Ok(text) => match serde_json::from_slice(&text) {
                Ok(state) => Ok(Some(state)),
                Err(error) => {
                    // Rather a run too few, told, than one twice.
                    self.complain(format!("{} is damaged ({error}) and begun anew", path.display()));
                    Ok(None)
                }
            },
            Err(error) if error.kind() == io::ErrorKind::NotFound => Ok(None),
            Err(source) => Err(RunError::File { path, source }),
        }
    }

    /// Writes the run's files; made again, they are the same files. Its rows go into the ledger, for the next to be held
    /// against.
    fn run(&self, folder: &Path, due: Date, now: Timestamp) -> Result<(), RunError> {
        let shared = &self.shared;
        let mut week = week::at(shared, now, Some(due));
        week.due = Some(due.to_string());
        let json = serde_json::to_string_pretty(&week)? + "\n";
        let pictures = week::pictures(shared, &week);
        for (form, text) in [
            ("md", report::markdown(&week)),
            ("html", report::html(&week, &pictures)?),
            ("csv", report::csv(&week)?),
            ("json", json),
        ] {
            put(folder, &format!("weekly-{due}.{form}"), text.as_bytes())?;
        }
        week::keep(shared, due, &week).unwrap_or_else(
            |error| tracing::error!(%error, "the week cannot be kept for the next to be held against"),
        );
        Ok(())
    }

    /// Sends a run to the webhook; what fails for now is tried again by the universal schedule.
    fn deliver(&self, folder: &Path, run: &str, state: State, now: f64) -> Result<(), RunError> {
        let Some(Webhook { address, secret, client }) = &self.shared.config.weekly.webhook else {
            return keep(folder, &State { pending: None, ..state });
        };
        let path = folder.join(format!("weekly-{run}.json"));
        let body = fs::read(&path).map_err(|source| RunError::File { path, source })?;
        let sent = client.post(address, &headers(secret, run, now, &body), &body);
        let tries = state.tries + 1;
        let pause = (FIRST_PAUSE * luby(tries) as f64).min(LONGEST_PAUSE);
        match sent {
            Ok(()) => {
                tracing::info!(%run, tries, "the webhook has taken the week's recommendations");
                keep(folder, &State { pending: None, ..state })
            }
            Err(error) if is_final(&error) => {
                tracing::error!(%run, %error, "the webhook refuses the week's recommendations; they lie in the folder");
                keep(folder, &State { pending: None, ..state })
            }
            Err(error) => {
                tracing::warn!(%run, %error, tries, again_in_s = pause, "the webhook cannot be reached");
                keep(folder, &State { tries, again: now + pause, ..state })
            }
        }
    }
}

/// An answer that no other try would change: a redirect (not followed), or a refusal that is not about load or time.
fn is_final(error: &CallError) -> bool {
    matches!(error, CallError::Status { status } if (300..500).contains(status) && ![408, 425, 429].contains(status))
}

/// The signature is HMAC-SHA256 (RFC 2104) over the time, a point and the body, so that neither can be changed or sent again
/// much later; the id is the same for each try of one run.
fn headers(secret: &Token, run: &str, now: f64, body: &[u8]) -> Vec<(&'static str, String)> {
    let time = format!("{now:.0}");
    let mut context = hmac::Context::with_key(&hmac::Key::new(hmac::HMAC_SHA256, secret.key()));
    context.update(time.as_bytes());
    context.update(b".");
    context.update(body);
    let hex: String = context.sign().as_ref().iter().map(|byte| format!("{byte:02x}")).collect();
    vec![
        ("Content-Type", "application/json".into()),
        ("Outwait-Delivery", format!("weekly-{run}")),
        ("Outwait-Time", time),
        ("Outwait-Signature", format!("sha256={hex}")),
    ]
}

fn keep(folder: &Path, state: &State) -> Result<(), RunError> {
    put(folder, STATE, &serde_json::to_vec(state)?)
}

/// Whole or not at all, and on the disk before it counts.
fn put(folder: &Path, name: &str, bytes: &[u8]) -> Result<(), RunError> {
    let path = folder.join(name);
    let written = tempfile::NamedTempFile::new_in(folder).and_then(|mut file| {
        file.write_all(bytes)?;
        file.as_file().sync_all()?;
        file.persist(&path).map(drop).map_err(|error| error.error)
    });
    written.map_err(|source| RunError::File { path, source })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// RFC 4231, test case 2: key "Jefe", data "what do ya want for nothing?".
    #[test]
    fn the_signature_is_the_standards() {
        let tag = hmac::sign(&hmac::Key::new(hmac::HMAC_SHA256, b"Jefe"), b"what do ya want for nothing?");
        let hex: String = tag.as_ref().iter().map(|byte| format!("{byte:02x}")).collect();
        assert_eq!(hex, "5bdcc146bf60754e6a042426089575c75a003f089d2739839dec58b964ec3843");
    }

    #[test]
    fn redirects_and_refusals_are_final() {
        let status = |status| is_final(&CallError::Status { status });
        assert!(status(301) && status(307) && status(404) && status(410));
        assert!(!status(500) && !status(503) && !status(429) && !status(408));
        assert!(!is_final(&CallError::from(ureq::Error::ConnectionFailed)));
    }
}
