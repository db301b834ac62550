//! The thread that keeps the books beside the waits: decisions in step with their file, and each day's advice.

use std::io;
use std::sync::Arc;
use std::thread::{Builder, JoinHandle};
use std::time::Duration;

use super::diary::Diary;
use super::settling;
use super::shared::Shared;

/// How often it looks.
const NAP: Duration = Duration::from_millis(250);

/// Starts the thread. It leaves its diary to whoever stops it: the advisers may have said something since.
pub(super) fn start(shared: Arc<Shared>) -> io::Result<JoinHandle<Diary>> {
    Builder::new().name("clerk".into()).spawn(move || {
        let mut diary = Diary::default();
        while !shared.is_stopping() {
            settling::keep_in_step(&shared);
            diary.write(&shared);
            std::thread::sleep(NAP);
        }
        diary
    })
}
