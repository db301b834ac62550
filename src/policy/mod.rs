//! What an operator may ask for: the policy file, from its text to validated values. Every key: `policies/reference.yaml`.
//!
//! In: the text of a YAML file. Out: a [`Policy`], an [`Entry`] for every pattern of streams with all defaults
//! filled in, and [`Warning`]s; or a [`PolicyError`] with everything that is wrong, where, and what to do about it.
//! [`describe()`] says in sentences what a policy means. No files, no clock.
//!
//! ```
//! let policy = outwait::policy::parse("version: 1\nstreams: [{match: 'scan.*', aim: finish}]", "p.yaml").unwrap();
//! let (entry, _) = policy.entry_for("scan.job").unwrap();
//! assert!(entry.worth.is_some());
//!
//! let error = outwait::policy::parse("version: 1\nstreams: [{match: '*', iam: rate}]", "p.yaml").unwrap_err();
//! assert_eq!(error.to_string(), "p.yaml:2:24: entry 1: `iam` is not a key here\n  did you mean `aim`?");
//! ```

mod check;
mod describe;
mod entry;
mod finding;
mod follow;
mod keys;
mod read;
pub(crate) mod scalar;
mod schema;
mod scrape;
mod telemetry;
pub(crate) mod tree;

pub use crate::glob::{Glob, GlobError};
pub use describe::{Description, Endings, Settings, Subject, describe};
pub use entry::{
    Backoff, Entry, Followed, GiveUp, Guard, Jitter, Kind, NO_COST_OF_TIME, Policy, Retry, Scrape, Sticky,
    Weekly,
};
pub(crate) use finding::shown;
pub use finding::{Concern, Fault, Finding, Flaw, Place, PolicyError, Problem, Remedy, Slip, Warning};
pub use keys::{
    DEFAULT_BACKOFF_FACTOR, DEFAULT_COOL_DOWN, DEFAULT_DEADLINE_ATTEMPTS, DEFAULT_EVERY, DEFAULT_EVIDENCE,
    DEFAULT_HYSTERESIS, DEFAULT_KIND, DEFAULT_LARGEST_STEP, DEFAULT_SLACK, DEFAULT_TIMEOUT, DEFAULT_WINDOW,
    KEYS, Key, LEAST_WORTH, MAX_ATTEMPTS, MAX_BYTES, MAX_CALLS, MAX_DEPTH, MAX_ENTRIES, MAX_FOLLOWED,
    MAX_PROBLEMS, MAX_SCRAPES, MAX_VALUES, MAX_WORTH, Section,
};
pub use schema::{parse, parse_bytes};
