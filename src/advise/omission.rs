//! Where a sampler left samples out: what stands for them, if the policy says so, and what is said if it does not.

use std::borrow::Cow;

use super::{Terms, caution};
use crate::advice::Advice;
use crate::policy::Entry;
use crate::say;
use crate::tally::Cells;

impl Entry {
    /// The waits as an open loop would have seen them, if the entry says that a closed one took them.
    pub(super) fn whole<'c>(&self, taken: &'c Cells) -> Cow<'c, Cells> {
        match self.sampled_every {
            None => Cow::Borrowed(taken),
            Some(every) => Cow::Owned(taken.with_omitted(every)),
        }
    }
}

impl Terms<'_> {
    /// Warns that the waits look like those of a sampler that asks every `every` s and was held up for `longest` s, unless
    /// the policy knows. Only a log in its order shows that, so the reader of one must say it.
    pub fn warn_of_closed_loop(&self, advice: &mut Advice, every: f64, longest: f64) {
        let known = self.policy.and_then(|policy| policy.entry_for(&advice.stream));
        if known.is_some_and(|(entry, _)| entry.sampled_every.is_some()) {
            return;
        }
        let (every, longest) = (say::duration(every), say::duration(longest));
        advice.cautions.push(caution(
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
        ));
    }
}
