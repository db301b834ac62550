//! The daemon: what it takes, what it answers, and what it does when things go wrong. Every server here is started by
//! the test itself, on loopback and a free port.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)] // a test may fail

mod api;
mod client;
mod faults;
mod follow;
mod house;
mod kills;
mod metrics;
mod openapi;
mod otlp;
#[path = "../support/process.rs"]
mod process;
mod scrape;
mod security;
mod weekly;
