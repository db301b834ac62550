//! Proof on waits that no rule has seen: learn on weeks 1 to k, earn on week k + 1, roll on; ours beside the time in force
//! and the rules in common use. METHODS.md section 9. Pure: no files, no clock; the same seed gives the same numbers.
//!
//! In: a [`Log`], filled wait by wait in their order. Out: a [`ReplaySet`]. A [`Roll`] leads from one to the other.
//!
//! What a rule with one give-up time earns on a week is a function of that week's counts, so nothing but these is kept. Only
//! RFC 6298 moves with every wait; its timer runs along while the log is filled, and what it makes of each wait is counted
//! beside. Old timeouts hide ends: see `earn.rs` and [`RuleReplay::hidden_share`].

mod earn;
mod gather;
mod report;
mod resample;
mod roll;
mod words;

pub use gather::Log;
pub use report::{ADVICE, IN_FORCE, Note, Period, ReplaySet, RuleReplay, SCHEMA, StreamReplay};
pub use roll::Roll;
