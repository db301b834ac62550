//! The picture that goes with a recommendation.

use crate::advice::{Advice, Change};
use crate::advise::{Curves, name_hash};
use crate::chart::{Picture, at_both_widths};

/// What each give-up time earns, at both widths, where a change is proposed; its curves are asked for only then.
pub fn picture(advice: &Advice, curves: impl FnOnce() -> Curves) -> Option<String> {
    let decision = &advice.advice;
    let changes = match decision.proposal {
        Some(proposal) => proposal.change != Change::Keep,
        None => decision.give_up_after_s.is_some(),
    };
    changes.then(|| {
        let prefix = format!("w{:016x}", name_hash(&advice.stream));
        let curves = curves();
        at_both_widths(720, &prefix, |frame| Picture::Rate.draw(&curves, frame)).markup
    })
}
