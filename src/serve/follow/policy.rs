//! The logs that the policy names: followed as long as it names them so.

use std::io;
use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::{Builder, JoinHandle};

use super::super::shared::Shared;
use super::NAP;
use crate::policy::{Followed, Policy};

/// One that the policy names.
struct Named {
    followed: Followed,
    left: Arc<AtomicBool>,
    thread: JoinHandle<()>,
}

/// Starts the thread that starts and ends the others.
pub(in crate::serve) fn start(shared: Arc<Shared>) -> io::Result<JoinHandle<()>> {
    Builder::new().name("logs".into()).spawn(move || {
        let (mut policy, mut named): (Option<Arc<Policy>>, Vec<Named>) = (None, Vec::new());
        while !shared.is_stopping() {
            let present = shared.policy();
            if present.as_ref().map(Arc::as_ptr) != policy.as_ref().map(Arc::as_ptr) {
                take_over(present.as_deref(), &mut named, &shared);
                policy = present;
            }
            std::thread::sleep(NAP);
        }
        leave(named);
    })
}

/// What stays as it was is followed on; what is changed is left first, and goes on from the place filed.
fn take_over(policy: Option<&Policy>, named: &mut Vec<Named>, shared: &Arc<Shared>) {
    let wanted = policy.map_or(&[][..], |policy| &policy.followed);
    let (stay, go) = std::mem::take(named).into_iter().partition(|one| wanted.contains(&one.followed));
    *named = stay;
    leave(go);
    for followed in wanted {
        if named.iter().any(|one| one.followed == *followed) {
            continue;
        }
        let file = followed.path.display().to_string();
        // Under another name too: two that follow one log would count its waits twice.
        let mut others = shared.config.follow.iter().chain(named.iter().map(|one| &one.followed));
        if others.any(|other| same(&other.path, &followed.path)) {
            tracing::warn!(
                file,
                "it is followed already, as an option or another entry says; what this entry says of it is not looked at"
            );
            continue;
        }
        let left = Arc::new(AtomicBool::new(false));
        match super::start(followed.clone(), Arc::clone(shared), Arc::clone(&left)) {
            Ok(thread) => named.push(Named { followed: followed.clone(), left, thread }),
            Err(error) => {
                tracing::error!(file, %error, "the system refused a thread; the log is not followed")
            }
        }
    }
}

fn leave(named: Vec<Named>) {
    named.iter().for_each(|one| one.left.store(true, Ordering::Relaxed));
    for Named { followed, thread, .. } in named {
        match thread.join() {
            Ok(()) => tracing::info!(file = %followed.path.display(), "no longer followed"),
            Err(_) => tracing::error!(file = %followed.path.display(), "its thread ended by a panic"),
        }
    }
}

/// Whether two names are of one file, as far as can be told now.
fn same(one: &Path, other: &Path) -> bool {
    let whole = |path: &Path| path.canonicalize().or_else(|_| std::path::absolute(path));
    matches!((whole(one), whole(other)), (Ok(one), Ok(other)) if one == other)
}
