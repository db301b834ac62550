//! What an advice rests on, kept for judging single waits by it.

use super::Study;
use crate::advice::Advice;
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

impl Study {
    /// The advice, and what is believed where a give-up time is advised, or waiting it out; the other curves are let go of.
    pub fn into_believed(self) -> (Advice, Option<Believed>) {
        let believed = self.settled().and_then(|(settled, bounds)| {
            Some(Believed {
                outlook: settled.average.clone(),
                worth: settled.worth,
                retry: settled.retry,
                limits: Limits::new(bounds.floor, bounds.ceiling).ok()?,
                at: settled.at,
            })
        });
        (self.into_advice(), believed)
    }
}
