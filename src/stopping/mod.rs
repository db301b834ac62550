//! Outlook + worth -> rate, optimum, value of holding on, doubt, edge of sight. METHODS.md sections 5 to 8.

mod competing;
mod worth;

pub use competing::{Competing, Failure};
pub use worth::{Aim, Fade, MAX_ATTEMPTS, Pause, TimeCost, Worth, WorthError};
