//! The studies that were asked for last, so that a second question about a stream is answered at once.

use std::collections::VecDeque;
use std::sync::{Arc, Mutex, OnceLock, PoisonError};
use std::time::{Duration, Instant};

use crate::advise::{Curves, Study};

/// Studies kept. Each holds a few megabytes.
const MOST: usize = 8;
/// For how long a question about another give-up time may be answered from a study of what was known then.
const GOOD_FOR: Duration = Duration::from_secs(60);

/// A study with its curves.
pub(super) struct Kept {
    stream: String,
    tag: u64,
    made: Instant,
    pub(super) study: Study,
    curves: OnceLock<Curves>,
}

impl Kept {
    /// Its curves, worked out once.
    pub(super) fn curves(&self) -> &Curves {
        self.curves.get_or_init(|| self.study.curves())
    }
}

/// The studies, the latest last.
#[derive(Default)]
pub(super) struct Studies(Mutex<VecDeque<Arc<Kept>>>);

impl Studies {
    /// The study behind the advice of this tag.
    pub(super) fn exact(&self, stream: &str, tag: u64) -> Option<Arc<Kept>> {
        self.find(|kept| kept.stream == stream && kept.tag == tag)
    }

    /// A study of the stream that is young enough.
    pub(super) fn recent(&self, stream: &str) -> Option<Arc<Kept>> {
        self.find(|kept| kept.stream == stream && kept.made.elapsed() < GOOD_FOR)
    }

    /// Lets go of all: they were made for another policy.
    pub(super) fn forget(&self) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).clear();
    }

    fn find(&self, is_it: impl Fn(&Kept) -> bool) -> Option<Arc<Kept>> {
        let all = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        all.iter().rev().find(|kept| is_it(kept)).cloned()
    }

    /// Keeps a study in place of an older one of its stream.
    pub(super) fn keep(&self, tag: u64, study: Study) -> Arc<Kept> {
        let stream = study.advice().stream.clone();
        let kept = Arc::new(Kept { stream, tag, made: Instant::now(), study, curves: OnceLock::new() });
        let mut all = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        all.retain(|other| other.stream != kept.stream);
        if all.len() >= MOST {
            all.pop_front();
        }
        all.push_back(Arc::clone(&kept));
        kept
    }
}
