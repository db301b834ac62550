//! Fernhollow, an invented network of lending libraries: a scenario whose true laws are known.
//!
//! [`Scenario`] turns a seed into [`DemoRecord`]s, [`truth()`] says what was put in and which give-up time would be
//! right; both are pure. Only `write.rs` touches files. Nothing here describes a real library.

mod fernhollow;
mod generate;
mod latent;
mod readme;
mod truth;
mod write;

pub use fernhollow::truth;
pub use generate::{DemoRecord, END, MAX_WEEKS, Scenario, ScenarioError, waits};
pub use latent::{Latent, Shape};
pub use truth::{Best, Retries, Rhythm, Stream, Terms, TrueOutlook};
pub use write::{DemoError, POLICY, Written, write};
