//! The daemon: waits in over HTTP, advice and survival histograms out, nothing lost.
//!
//! Three kinds of thread, one task each. The runtime's threads speak HTTP and never touch the disk or a fit. The *keeper*
//! (`keeper`) owns the ledger: it files whatever has come in meanwhile in one commit and only then lets the answers
//! go. The *advisers* (`adviser`) read the ledger beside it and keep the advice fresh, on a bounded share of the
//! processors.
//!
//! Listener, clock and shutdown are passed in, so that a test binds port 0 and turns its own clock.

mod adviser;
mod body;
mod clerk;
mod config;
mod connections;
mod demo;
mod diary;
mod follow;
mod http;
mod keeper;
mod loss;
mod metrics;
mod page;
mod problem;
mod reload;
mod road;
mod scrape;
mod sessions;
mod settling;
mod shared;
mod studies;
mod tls;
mod week;
mod weekly;

use std::future::Future;
use std::net::SocketAddr;
use std::sync::Arc;
use std::thread::JoinHandle;

use tokio::net::TcpListener;

pub use crate::policy::Followed;
pub use config::{Clock, Config, Limits, SecretError, Signing, Token, read_token};
pub use http::OPENAPI;
pub use reload::{PolicyFile, ReloadError};
pub use tls::{TlsError, read_certificates, read_tls};
pub use weekly::{Runs, Webhook};

use crate::ledger::{Ledger, LedgerError, SqliteLedger};
use diary::Diary;
use settling::Settling;
use shared::Shared;

/// Why the daemon could not start, or had to end.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ServeError {
    /// The ledger cannot be opened.
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    /// The policy cannot be read.
    #[error(transparent)]
    Policy(#[from] ReloadError),
    /// A metric cannot be made; a fault of the program.
    #[error("metrics: {0}")]
    Metrics(#[from] prometheus::Error),
    /// A thread or a socket was refused.
    #[error("the system refused {what}: {source}")]
    System {
        /// What was asked of it.
        what: &'static str,
        /// Its answer.
        source: std::io::Error,
    },
}

/// A daemon that stands ready: the ledger is open, what it holds is known.
pub struct Daemon {
    shared: Arc<Shared>,
    threads: Vec<JoinHandle<()>>,
    clerk: JoinHandle<Diary>,
    keeper: JoinHandle<()>,
}

impl Daemon {
    /// Opens the ledger and starts the threads. Blocks while it reads the ledger's log.
    ///
    /// # Errors
    /// [`ServeError`] if the folder is in use, damaged or not writable, or the policy does not hold.
    pub fn start(config: Config) -> Result<Daemon, ServeError> {
        let policy = config.policy.load()?;
        let ledger = SqliteLedger::open(&config.data, config.ledger.clone())?;
        for damage in ledger.damage() {
            tracing::error!(%damage, "part of the ledger is broken; the rest is served");
        }
        let readers = (0..config.advisers()).map(|_| ledger.reader()).collect::<Result<Vec<_>, _>>()?;
        let settling = Settling::open(&ledger)?;
        let (shared, queue) = Shared::new(config, policy, ledger.sqlite_reader()?, settling)?;
        let refused = |what| move |source| ServeError::System { what, source };
        let keeper = keeper::start(ledger, queue, Arc::clone(&shared)).map_err(refused("a thread"))?;
        let mut threads = Vec::new();
        for (number, reader) in readers.into_iter().enumerate() {
            let adviser = adviser::start(number, reader, Arc::clone(&shared));
            threads.push(adviser.map_err(refused("a thread"))?);
        }
        threads.push(reload::watch(Arc::clone(&shared)).map_err(refused("a thread"))?);
        let clerk = clerk::start(Arc::clone(&shared)).map_err(refused("a thread"))?;
        threads.push(scrape::start(Arc::clone(&shared)).map_err(refused("a thread"))?);
        threads.push(weekly::start(Arc::clone(&shared)).map_err(refused("a thread"))?);
        for followed in &shared.config.follow {
            let follower = follow::start(followed.clone(), Arc::clone(&shared), Arc::default());
            threads.push(follower.map_err(refused("a thread"))?);
        }
        threads.push(follow::follow_policy(Arc::clone(&shared)).map_err(refused("a thread"))?);
        shared.desk.at_once(shared.streams());
        Ok(Daemon { shared, threads, clerk, keeper })
    }

    /// Reads the policy file again now, as a hang-up signal asks for.
    pub fn reload_policy(&self) -> impl Fn() + Send + Sync + 'static {
        let shared = Arc::clone(&self.shared);
        move || reload::again(&shared)
    }

    /// Feeds itself the demo scenario, as if it were traffic. Returns when what lies before now has been filed.
    ///
    /// # Errors
    /// [`ServeError`] if it cannot be filed.
    pub fn feed_demo(&mut self, seed: u64) -> Result<demo::Fed, ServeError> {
        let (fed, thread) = demo::feed(&self.shared, seed)?;
        self.threads.push(thread);
        // What was advised on the way rests on a part of it.
        self.shared.desk.at_once(self.shared.streams());
        Ok(fed)
    }

    /// Waits until every stream that has waits has advice, or until the time (s) is over.
    pub fn settle(&self, at_most: f64) -> crate::advice::AdviceSet {
        self.shared.desk.wait_until_idle(at_most);
        self.shared.advice_set()
    }

    /// Serves until `shutdown` is over; then takes no more requests, answers those it has, files what was taken, and
    /// closes the ledger.
    ///
    /// # Errors
    /// [`ServeError::System`] if the listener fails for good.
    pub async fn run(
        self,
        listener: TcpListener,
        shutdown: impl Future<Output = ()> + Send,
    ) -> Result<(), ServeError> {
        let Daemon { shared, threads, clerk, keeper } = self;
        let router = http::router(&shared);
        let outcome = connections::accept(listener, router, &shared, shutdown).await;
        shared.stop();
        let ended = tokio::task::spawn_blocking(move || {
            let mut lost = threads.into_iter().filter_map(|thread| thread.join().err()).count();
            match clerk.join() {
                Ok(mut diary) => diary.write(&shared),
                Err(_) => lost += 1,
            }
            shared.all_handed_in();
            lost += usize::from(keeper.join().is_err());
            if lost > 0 {
                tracing::error!(lost, "threads ended by a panic");
            }
        });
        let _ = ended.await;
        tracing::info!("the ledger is closed");
        outcome.map_err(|source| ServeError::System { what: "connections", source })
    }
}

/// What may be said when a server does not stand on loopback and has no token.
pub fn is_open_to_others(address: &SocketAddr, token: Option<&Token>) -> bool {
    !address.ip().is_loopback() && token.is_none()
}
