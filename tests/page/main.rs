//! The pages as a browser without a script gets them. Every server here is started by the test itself, on loopback and a
//! free port.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, dead_code)] // a test may fail; the house is shared

#[path = "../daemon/client.rs"]
mod client;
#[path = "../daemon/house.rs"]
mod house;

mod deciding;
mod pages;
mod signing;
