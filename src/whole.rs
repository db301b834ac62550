//! Files that are whole or not there, and that several may change: one at a time, each from what the one before left.

use std::fs::{self, File};
use std::io::{self, ErrorKind, Write};
use std::path::{Path, PathBuf};

/// What could not be done to which file.
#[derive(Debug, thiserror::Error)]
#[error("cannot {doing} {}: {source}", path.display())]
pub struct FileError {
    /// What was to be done.
    pub doing: &'static str,
    /// The file.
    pub path: PathBuf,
    /// Why it could not. [`ErrorKind::ResourceBusy`] where somebody else writes the file all the time.
    pub source: io::Error,
}

fn failed(doing: &'static str, path: &Path) -> impl FnOnce(io::Error) -> FileError {
    let path = path.to_owned();
    move |source| FileError { doing, path, source }
}

/// Writes one file whole or not at all, through a link to what it names; one that is there keeps its mode. It is on the
/// disk when this returns.
///
/// # Errors
/// [`FileError`]; what was there is there still.
pub fn replace(path: &Path, bytes: &[u8]) -> Result<(), FileError> {
    let written = fs::canonicalize(path).or_else(|_| Ok(path.to_owned())).and_then(|target: PathBuf| {
        let (folder, name) = (parent(&target), target.file_name().unwrap_or_default().to_string_lossy());
        let prefix = format!(".{name}.");
        let mut partial = tempfile::Builder::new();
        partial.prefix(&prefix).suffix(".partial");
        // As others make files there; a temporary one would be its owner's alone.
        #[cfg(unix)]
        partial.permissions(std::os::unix::fs::PermissionsExt::from_mode(0o666));
        let mut partial = partial.tempfile_in(folder)?;
        partial.write_all(bytes)?;
        if let Ok(there) = fs::metadata(&target) {
            partial.as_file().set_permissions(there.permissions())?;
        }
        partial.as_file().sync_all()?;
        partial.persist(&target).map(drop).map_err(|error| error.error)
    });
    written.map_err(failed("write", path))
}

/// The folder in which a file lies.
fn parent(path: &Path) -> &Path {
    path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."))
}

/// Changes a file that others may be changing too. `change` makes the new text of the one that is there (empty where none
/// is), or says that there is nothing to write.
///
/// # Errors
/// [`FileError`], and those of `change`.
pub fn change<T, E: From<FileError>>(
    path: &Path,
    mut change: impl FnMut(&[u8]) -> Result<(T, Option<String>), E>,
) -> Result<T, E> {
    let target = fs::canonicalize(path).unwrap_or_else(|_| path.to_owned());
    // The folder itself is locked, so that no other file is left in it.
    #[cfg(unix)]
    let lock = File::open(parent(&target));
    #[cfg(not(unix))]
    let lock = File::create(target.with_extension("lock"));
    let lock =
        lock.and_then(|lock| lock.lock().map(|()| lock)).map_err(failed("lock the folder of", path))?;
    for _ in 0..TRIES {
        let old = read(path)?;
        let (value, new) = change(&old)?;
        let Some(new) = new else { return Ok(value) };
        // An editor takes no lock.
        if read(path)? == old {
            replace(path, new.as_bytes())?;
            drop(lock);
            return Ok(value);
        }
    }
    let busy = io::Error::new(ErrorKind::ResourceBusy, "somebody changes it all the time");
    Err(failed("change", path)(busy).into())
}

/// How often a file is read anew because somebody wrote it meanwhile.
const TRIES: usize = 5;

/// A file's bytes; none where there is no file.
///
/// # Errors
/// [`FileError`].
pub fn read(path: &Path) -> Result<Vec<u8>, FileError> {
    match fs::read(path) {
        Err(error) if error.kind() == ErrorKind::NotFound => Ok(Vec::new()),
        read => read.map_err(failed("read", path)),
    }
}
