//! What was decided before an advice: the times that somebody settled, and when.

use std::collections::BTreeMap;

use super::History;
use crate::policy::GiveUp;

/// What was decided of one stream.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Before {
    /// The give-up time that was settled and is therefore in force, whatever the policy says.
    pub now: Option<GiveUp>,
    /// What was proposed, and how long ago the time in force was changed.
    pub history: History,
}

/// What was decided of every stream; those that it does not name have no past.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Past(BTreeMap<String, Before>);

impl Past {
    /// What was decided of a stream.
    pub fn of(&self, stream: &str) -> Before {
        self.0.get(stream).copied().unwrap_or_default()
    }

    /// Puts a time in force, whatever was settled.
    pub fn put_in_force(&mut self, stream: &str, now: GiveUp) {
        self.0.entry(stream.to_owned()).or_default().now = Some(now);
    }
}

impl FromIterator<(String, Before)> for Past {
    fn from_iter<I: IntoIterator<Item = (String, Before)>>(all: I) -> Past {
        Past(all.into_iter().collect())
    }
}
