//! Outlook + worth -> rate, optimum, value of holding on, doubt, edge of sight. METHODS.md sections 5 to 8.

mod worth;

pub use worth::{Aim, Fade, Pause, Worth};
