//! What was acknowledged is counted once: in memory and on disk, through crashes, full disks and damaged files.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

mod coding;
mod crashes;
mod faults;
mod golden;
mod made;
mod suite;
