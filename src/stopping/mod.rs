//! When to give up, what it earns, and how sure that is. METHODS.md sections 5 to 8.
//!
//! In: an [`Outlook`](crate::outlook::Outlook) (what the future of a wait looks like), a [`Worth`] (what time and endings
//! are worth), a [`Retry`] (what follows an attempt that was not done) and [`Limits`]. Out: plain numbers. Nothing here
//! reads data or policies; randomness comes in as a generator.
//!
//! | question | answer |
//! |---|---|
//! | What does a give-up time earn? | [`Objective`]; on a grid, for thousands of curves, [`GridObjective`] |
//! | Which earns the most, and what is as good? | [`best`], [`band()`]; under a deadline [`Deadline`] |
//! | Is holding on worth it for a wait that is open now? | [`Holding`] |
//! | What do retries add, and how long does a request take? | [`Retry::request`], [`RequestTime`], [`FarTail`] |
//! | Do retries meet the same fate? | [`stickiness`], [`flips_at`] |
//! | Would a second copy do better? | [`SecondCopy`], [`copy_or_retry`] |
//! | Which time loses least over all that the data leave open? | [`Doubt`], with [`Bootstrap`] for the empirical curve |
//! | What if the answer lies past the present timeout? | [`Sides`], [`Look`] |
//! | What would the usual rules do? | [`Rule`], [`RetransmissionTimer`]; before any evidence [`universal_schedule`] |
//! | Do callers stay as long as their callees try? | [`check_chain`], [`attempts_caused`] |
//!
//! [`Competing`] is the outlook of laws taken as true; the empirical one is [`Empirical`](crate::curve::Empirical).

mod band;
mod chain;
mod competing;
mod deadline;
mod doubt;
mod edge;
mod far_tail;
mod grid_objective;
mod hedge;
mod holding;
mod objective;
mod optimum;
mod quantile;
mod replicates;
mod request_time;
mod retry;
mod rivals;
mod sticky;
mod universal;
mod worth;

pub use band::band;
pub use chain::{ChainFinding, Station, attempts_caused, check_chain};
pub use competing::{Competing, Failure};
pub use deadline::{Deadline, NextAttempt};
pub(crate) use doubt::weighted_quantile;
pub use doubt::{BestOfCurve, Choice, Doubt, Regret};
pub use edge::{Look, Sides};
pub use far_tail::{FarTail, TailEffect, decay, expected_time};
pub use grid_objective::GridObjective;
pub use hedge::{CopyOrRetry, Points, SecondCopy, copy_or_retry};
pub use holding::{Hold, Holding};
pub use objective::{Limits, Objective};
pub use optimum::{Kind, Optimum, best};
pub use replicates::Bootstrap;
pub use request_time::RequestTime;
pub use retry::{Odds, Request, Retry};
pub use rivals::{RetransmissionTimer, Rule};
pub use sticky::{Reached, Stickiness, flips_at, stickiness};
pub use universal::{luby, universal_schedule};
pub use worth::{Aim, Fade, MAX_ATTEMPTS, Pause, TimeCost, Worth, WorthError};
