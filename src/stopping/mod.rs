//! Outlook + worth -> rate, optimum, value of holding on, doubt, edge of sight. METHODS.md sections 5 to 8.

mod band;
mod competing;
mod deadline;
mod far_tail;
mod hedge;
mod holding;
mod objective;
mod optimum;
mod quantile;
mod request_time;
mod retry;
mod rivals;
mod sticky;
mod universal;
mod worth;

pub use band::band;
pub use competing::{Competing, Failure};
pub use deadline::{Deadline, NextAttempt};
pub use far_tail::{FarTail, TailEffect, decay, expected_time};
pub use hedge::{CopyOrRetry, Points, SecondCopy, copy_or_retry};
pub use holding::{Hold, Holding};
pub use objective::{Limits, Objective};
pub use optimum::{Kind, Optimum, best};
pub use request_time::RequestTime;
pub use retry::{Odds, Request, Retry};
pub use rivals::{RetransmissionTimer, Rule};
pub use sticky::{Reached, Stickiness, flips_at, stickiness};
pub use universal::{luby, universal_schedule};
pub use worth::{Aim, Fade, MAX_ATTEMPTS, Pause, TimeCost, Worth, WorthError};
