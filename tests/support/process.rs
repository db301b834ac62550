//! The daemon in a process of its own, on a free port of loopback; stopped by its own process id.

// Each binary compiles its own copy and uses a part of it; what cannot be started should stop the caller.
#![allow(dead_code, clippy::unwrap_used, clippy::expect_used)]

use std::io::{BufRead, BufReader};
use std::net::SocketAddr;
use std::path::Path;
use std::process::{Child, Command, ExitStatus, Stdio};

pub(crate) struct Process {
    child: Child,
    pub(crate) address: SocketAddr,
}

impl Process {
    pub(crate) fn start(folder: &Path) -> Process {
        Process::with(folder, &[])
    }

    /// With more arguments.
    pub(crate) fn with(folder: &Path, arguments: &[&str]) -> Process {
        let mut child = Command::new(env!("CARGO_BIN_EXE_outwait"))
            .args(["serve", "--listen", "127.0.0.1:0", "--log", "json", "--data"])
            .arg(folder)
            .args(arguments)
            .env_remove("OUTWAIT_POLICY")
            .stderr(Stdio::piped())
            .stdout(Stdio::null())
            .spawn()
            .unwrap();
        let mut lines = BufReader::new(child.stderr.take().unwrap()).lines();
        let address = lines
            .by_ref()
            .map_while(Result::ok)
            .find_map(|line| {
                let log: serde_json::Value = serde_json::from_str(&line).ok()?;
                log["address"].as_str()?.strip_prefix("http://")?.parse().ok()
            })
            .expect("the daemon says where it listens");
        // Nobody must wait for a reader of the log.
        std::thread::spawn(move || lines.for_each(drop));
        Process { child, address }
    }

    /// At once, with nothing put in order (SIGKILL).
    pub(crate) fn kill(mut self) {
        self.child.kill().unwrap();
        self.child.wait().unwrap();
    }

    /// In order (SIGTERM); how it ended.
    pub(crate) fn stop(mut self) -> ExitStatus {
        self.ask_to_stop();
        self.child.wait().unwrap()
    }

    fn ask_to_stop(&self) {
        let _ = Command::new("kill").args(["-TERM", &self.id().to_string()]).status();
    }

    pub(crate) fn id(&self) -> u32 {
        self.child.id()
    }

    /// Resident, MiB.
    pub(crate) fn memory(&self) -> f64 {
        let status = std::fs::read_to_string(format!("/proc/{}/status", self.id())).unwrap_or_default();
        let line = status.lines().find(|line| line.starts_with("VmRSS"));
        line.and_then(|line| line.split_whitespace().nth(1)?.parse::<f64>().ok()).unwrap_or(0.0) / 1024.0
    }
}

impl Drop for Process {
    /// In order (SIGTERM), unless it is over.
    fn drop(&mut self) {
        if let Ok(None) = self.child.try_wait() {
            self.ask_to_stop();
            let _ = self.child.wait();
        }
    }
}
