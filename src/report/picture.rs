//! The picture that goes with a recommendation.

use crate::advice::{Advice, Change};
use crate::advise::{Curves, name_hash};
use crate::chart::{Frame, Picture};

/// What each give-up time earns, as an `<svg>` element, where a change is proposed; its curves are asked for only then.
pub fn picture(advice: &Advice, curves: impl FnOnce() -> Curves) -> Option<String> {
    let decision = &advice.advice;
    let changes = match decision.proposal {
        Some(proposal) => proposal.change != Change::Keep,
        None => decision.give_up_after_s.is_some(),
    };
    changes.then(|| {
        let prefix = format!("w{:016x}", name_hash(&advice.stream));
        let frame = Frame { width: 720, prefix: &prefix, styled: false };
        Picture::Rate.draw(&curves(), &frame).markup
    })
}
