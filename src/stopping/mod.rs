//! Outlook + worth -> rate, optimum, value of holding on, doubt, edge of sight. METHODS.md sections 5 to 8.

mod band;
mod competing;
mod deadline;
mod holding;
mod objective;
mod optimum;
mod retry;
mod worth;

pub use band::band;
pub use competing::{Competing, Failure};
pub use deadline::{Deadline, NextAttempt};
pub use holding::{Hold, Holding};
pub use objective::{Limits, Objective};
pub use optimum::{Kind, Optimum, best};
pub use retry::{Odds, Request, Retry};
pub use worth::{Aim, Fade, MAX_ATTEMPTS, Pause, TimeCost, Worth, WorthError};
