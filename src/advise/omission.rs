//! Where a sampler left samples out: what stands for them, if the policy says so, and what is said if it does not.

use std::borrow::Cow;

use super::{Terms, caution};
use crate::advice::Caution;
use crate::policy::Entry;
use crate::say;
use crate::tally::Cells;

impl Entry {
    /// The waits as an open loop would have seen them, if the entry says that a closed one took them.
    pub(crate) fn whole<'c>(&self, taken: &'c Cells) -> Cow<'c, Cells> {
        match self.sampled_every {
            None => Cow::Borrowed(taken),
            Some(every) => Cow::Owned(taken.with_omitted(every)),
        }
    }

    /// Parts of the waits taken, likewise: together they are the whole.
    pub(crate) fn whole_parts(&self, taken: &Cells, parts: Vec<Cells>) -> Vec<Cells> {
        match self.sampled_every {
            None => parts,
            Some(every) => taken.parts_with_omitted(&parts, every),
        }
    }
}

impl Terms<'_> {
    /// Warns that the waits of a stream look like those of a sampler that asks every `every` s and was held up for `longest`
    /// s, unless the policy knows. Only a log in its order shows that, so the reader of one must say it.
    pub fn closed_loop(&self, stream: &str, every: f64, longest: f64) -> Option<Caution> {
        let known = self.policy.and_then(|policy| policy.entry_for(stream));
        if known.is_some_and(|(entry, _)| entry.sampled_every.is_some()) {
            return None;
        }
        let (every, longest) = (say::duration(every), say::duration(longest));
        Some(caution(
            "closed_loop",
            format!(
                "the waits look like those of a sampler that asks about every {every} and waits for each answer: no \
                 two overlap, and while an answer took up to {longest} it asked nothing, so slow times are seen too \
                 rarely"
            ),
            format!(
                "if it is one, say `sampled_every: {every}` in the policy; if the work itself goes one after the other, \
                 leave it"
            ),
        ))
    }
}
