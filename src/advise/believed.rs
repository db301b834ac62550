//! What an advice rests on, kept for judging single waits by it.

use crate::outlook::Average;
use crate::stopping::{Limits, Retry, Worth};

/// The outlook after all doubt, with the terms it was judged on and the time that was advised.
#[derive(Clone, Debug)]
pub struct Believed {
    /// The average of all curves the data leave open; it speaks up to the ceiling of `limits`.
    pub outlook: Average,
    /// The price list, with the stickiness and the mean pauses that were counted with.
    pub worth: Worth,
    /// What happens on retries.
    pub retry: Retry,
    /// Floor and ceiling of the give-up time.
    pub limits: Limits,
    /// The advised give-up time, s; the ceiling where waiting it out is advised.
    pub at: f64,
}
