//! A daemon in this process, on a free port, with a clock of the test's own.

use std::net::SocketAddr;
use std::path::Path;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, mpsc};
use std::thread::JoinHandle;

use outwait::serve::{Config, Daemon, ServeError};
use tempfile::TempDir;
use tokio::sync::oneshot;

/// Noon of 30 November 2026 UTC (`date -u -d 2026-11-30T12:00Z +%s`).
pub(crate) const NOON: f64 = 1_796_040_000.0;

pub(crate) struct House {
    pub(crate) address: SocketAddr,
    _folder: Option<TempDir>,
    clock: Arc<AtomicU64>,
    stop: Option<oneshot::Sender<()>>,
    thread: Option<JoinHandle<Result<(), ServeError>>>,
}

impl House {
    /// A daemon on a new folder.
    pub(crate) fn new() -> House {
        House::with(|_| {})
    }

    pub(crate) fn with(change: impl FnOnce(&mut Config)) -> House {
        let folder = tempfile::tempdir().unwrap();
        let mut house = House::on(folder.path(), change).unwrap();
        house._folder = Some(folder);
        house
    }

    /// A daemon that feeds itself the demo, as of now.
    #[allow(dead_code)] // not every binary of tests asks for it
    pub(crate) fn demo(change: impl FnOnce(&mut Config)) -> House {
        let folder = tempfile::tempdir().unwrap();
        let fed = |daemon: &mut Daemon| {
            daemon.feed_demo(1).unwrap();
            daemon.settle(300.0);
        };
        let clock = Config::new("").clock;
        let mut house =
            House::fed(folder.path(), |config| (config.clock = clock, change(config)).1, fed).unwrap();
        house._folder = Some(folder);
        house
    }

    /// A daemon on a folder that is there.
    pub(crate) fn on(folder: &Path, change: impl FnOnce(&mut Config)) -> Result<House, ServeError> {
        House::fed(folder, change, |_| {})
    }

    fn fed(
        folder: &Path,
        change: impl FnOnce(&mut Config),
        feed: impl FnOnce(&mut Daemon),
    ) -> Result<House, ServeError> {
        let clock = Arc::new(AtomicU64::new(NOON.to_bits()));
        let mut config = Config::new(folder);
        let hands = Arc::clone(&clock);
        config.clock = Arc::new(move || f64::from_bits(hands.load(Ordering::SeqCst)));
        config.advice_share = 1.0;
        config.refresh = 0.05;
        change(&mut config);
        let mut daemon = Daemon::start(config)?;
        feed(&mut daemon);
        let (stop, stopped) = oneshot::channel();
        let (tell, told) = mpsc::channel();
        let thread = std::thread::spawn(move || {
            let runtime =
                tokio::runtime::Builder::new_multi_thread().worker_threads(2).enable_all().build().unwrap();
            runtime.block_on(async {
                let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
                tell.send(listener.local_addr().unwrap()).unwrap();
                daemon.run(listener, async { drop(stopped.await) }).await
            })
        });
        let address = told.recv().unwrap();
        Ok(House { address, _folder: None, clock, stop: Some(stop), thread: Some(thread) })
    }

    pub(crate) fn set_clock(&self, now: f64) {
        self.clock.store(now.to_bits(), Ordering::SeqCst);
    }

    /// Ends it as a signal would.
    pub(crate) fn stop(&mut self) {
        drop(self.stop.take());
        if let Some(thread) = self.thread.take() {
            thread.join().unwrap().unwrap();
        }
    }
}

impl Drop for House {
    fn drop(&mut self) {
        drop(self.stop.take());
        if let Some(thread) = self.thread.take() {
            let _ = thread.join();
        }
    }
}

/// Asks until the answer is as wanted; the advice comes a moment after the waits.
pub(crate) fn until<T>(what: &str, mut ask: impl FnMut() -> Option<T>) -> T {
    let end = std::time::Instant::now() + std::time::Duration::from_secs(60);
    loop {
        if let Some(found) = ask() {
            return found;
        }
        assert!(std::time::Instant::now() < end, "{what} did not come");
        std::thread::sleep(std::time::Duration::from_millis(20));
    }
}

/// Lines of a stream: half of the waits over before 20 s, evenly, the other half at 90 s.
pub(crate) fn courier(stream: &str, waits: u32) -> String {
    use std::fmt::Write;
    let mut lines = String::new();
    for i in 0..waits {
        let elapsed = if i % 2 == 0 { 0.01 + 19.9 * f64::from(i) / f64::from(waits) } else { 90.0 };
        let at = NOON - 60.0 - f64::from(i % 3_000);
        writeln!(lines, r#"{{"stream":"{stream}","elapsed":{elapsed},"at":{at}}}"#).unwrap();
    }
    lines
}
