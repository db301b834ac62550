//! One writer per folder: an advisory lock that the system gives back when the process ends, however it ends.

use std::fs::{File, OpenOptions, TryLockError};
use std::io::{Read, Seek, Write};
use std::path::Path;

use crate::ledger::LedgerError;

/// Held as long as it lives.
#[derive(Debug)]
pub(super) struct FolderLock {
    file: File,
}

impl FolderLock {
    /// Takes the lock of a folder and writes this process's id into its file.
    pub(super) fn take(folder: &Path) -> Result<FolderLock, LedgerError> {
        let path = folder.join("lock");
        let mut file = OpenOptions::new()
            .read(true)
            .write(true)
            .create(true)
            .truncate(false)
            .open(&path)
            .map_err(|error| LedgerError::io("opening", &path, error))?;
        match file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                let mut pid = String::new();
                let _ = file.read_to_string(&mut pid);
                return Err(LedgerError::InUse { folder: folder.to_owned(), pid: pid.trim().parse().ok() });
            }
            Err(TryLockError::Error(error)) => return Err(LedgerError::io("locking", &path, error)),
        }
        // The id is for people; a full disk must not keep a ledger shut for want of it.
        let _ = file.rewind();
        let _ = file.set_len(0);
        let _ = writeln!(file, "{}", std::process::id());
        Ok(FolderLock { file })
    }
}

impl Drop for FolderLock {
    /// Closing the file would not do while a process that was just forked from this one, and has not yet begun its own
    /// program, has it too.
    fn drop(&mut self) {
        let _ = self.file.unlock();
    }
}
