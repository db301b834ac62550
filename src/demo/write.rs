//! The one part of the demo that touches files: it writes the scenario to a folder, or leaves it as it was.

use super::generate::{DemoRecord, Scenario};
use super::readme::readme;
use std::fmt::Write as _;
use std::fs::{self, File};
use std::io::{self, Write as _};
use std::path::{Path, PathBuf};

/// The policy of the scenario, as it lies in `policies/`.
pub const POLICY: &str = include_str!("../../policies/fernhollow.yaml");

/// The file of waits.
pub(super) const WAITS: &str = "waits.ndjson";

/// Every file of the demo: waits, policy, README.
const NAMES: [&str; 3] = [WAITS, "policy.yaml", "README.md"];

/// What was written.
#[derive(Clone, Debug, PartialEq)]
pub struct Written {
    /// The files, in the order waits, policy, README; also those that were there already, byte for byte.
    pub files: [PathBuf; 3],
    /// Number of waits.
    pub waits: usize,
}

/// Why the demo was not written. Nothing that was in the folder is changed then, and no file in it is half written.
#[derive(Debug, thiserror::Error)]
pub enum DemoError {
    /// Something that is not the demo's lies in the folder.
    #[error("{} is not the demo's, and lies where the demo was to go", path.display())]
    Occupied {
        /// The stranger.
        path: PathBuf,
    },
    /// A file of the demo's name with other contents.
    #[error("{} is there already, and is not what this seed gives", path.display())]
    Differs {
        /// The file.
        path: PathBuf,
    },
    /// The system refused.
    #[error("cannot {doing} {}", path.display())]
    System {
        /// What was tried: `create`, `read`, `write`, `rename`.
        doing: &'static str,
        /// With which file or folder.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
}

impl DemoError {
    /// What to do about it.
    pub fn remedy(&self) -> &'static str {
        match self {
            DemoError::Occupied { .. } => "name a folder that is empty or does not exist yet",
            DemoError::Differs { .. } => "name another folder, or delete this file if you do not need it",
            DemoError::System { source, .. } => match source.kind() {
                io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => {
                    "free about 30 MB there, or name a folder on another disk"
                }
                io::ErrorKind::NotADirectory | io::ErrorKind::AlreadyExists => {
                    "name a folder; a file is in the way"
                }
                _ => "name a folder in which you may write",
            },
        }
    }
}

/// Writes the scenario (four weeks up to [`super::END`]) to a folder, which is created if need be: `waits.ndjson`,
/// `policy.yaml`, `README.md`.
///
/// Never replaces a file: what is there already with the same bytes stays, anything else is refused. Files are
/// written under temporary names first and renamed once all are complete.
///
/// # Errors
/// [`DemoError`], naming the file or folder.
pub fn write(folder: &Path, seed: u64) -> Result<Written, DemoError> {
    fs::create_dir_all(folder).map_err(system("create", folder))?;
    refuse_strangers(folder)?;

    let scenario = Scenario::new(seed);
    let records: Vec<DemoRecord> = scenario.waits().collect();
    let texts = [ndjson(&records), POLICY.into(), readme(&scenario, &records)];
    let mut missing = Vec::new();
    for (name, text) in NAMES.iter().zip(&texts) {
        let path = folder.join(name);
        if !is_there(&path, text)? {
            missing.push((partial(folder, name), path, text));
        }
    }
    let written = missing.iter().try_for_each(|(partial, _, text)| put(partial, text)).and_then(|()| {
        missing.iter().try_for_each(|(from, to, _)| fs::rename(from, to).map_err(system("rename", to)))
    });
    if let Err(error) = written {
        for (partial, ..) in &missing {
            // What cannot be removed either is the demo's own, and is replaced by the next try.
            let _ = fs::remove_file(partial);
        }
        return Err(error);
    }
    Ok(Written { files: NAMES.map(|name| folder.join(name)), waits: records.len() })
}

fn ndjson(records: &[DemoRecord]) -> String {
    let mut text = String::with_capacity(records.len() * 128);
    for record in records {
        // Writing to a String cannot fail.
        let _ = writeln!(text, "{record}");
    }
    text
}

/// Where a file lies until it is complete.
fn partial(folder: &Path, name: &str) -> PathBuf {
    folder.join(format!(".{name}.partial"))
}

fn refuse_strangers(folder: &Path) -> Result<(), DemoError> {
    let own = NAMES.iter().flat_map(|name| [folder.join(name), partial(folder, name)]).collect::<Vec<_>>();
    for entry in fs::read_dir(folder).map_err(system("read", folder))? {
        let path = entry.map_err(system("read", folder))?.path();
        if !own.contains(&path) {
            return Err(DemoError::Occupied { path });
        }
    }
    Ok(())
}

/// Whether the file is there already with these very contents.
fn is_there(path: &Path, text: &str) -> Result<bool, DemoError> {
    let length = match fs::metadata(path) {
        Ok(meta) => meta.len(),
        // A dangling link is not "not there": renaming over it would replace it.
        Err(error) if error.kind() == io::ErrorKind::NotFound && path.symlink_metadata().is_err() => {
            return Ok(false);
        }
        Err(error) => return Err(system("read", path)(error)),
    };
    // The length first, so that a huge stranger is never read.
    if length == text.len() as u64 && fs::read(path).map_err(system("read", path))? == text.as_bytes() {
        return Ok(true);
    }
    Err(DemoError::Differs { path: path.into() })
}

fn put(partial: &Path, text: &str) -> Result<(), DemoError> {
    match fs::remove_file(partial) {
        Err(error) if error.kind() != io::ErrorKind::NotFound => return Err(system("write", partial)(error)),
        _ => {}
    }
    // New, so that nothing that was put there meanwhile is written through.
    let file = File::create_new(partial).map_err(system("create", partial))?;
    fill(file, partial, text)
}

fn fill(mut file: File, path: &Path, text: &str) -> Result<(), DemoError> {
    file.write_all(text.as_bytes()).and_then(|()| file.sync_all()).map_err(system("write", path))
}

fn system(doing: &'static str, path: &Path) -> impl FnOnce(io::Error) -> DemoError {
    move |source| DemoError::System { doing, path: path.into(), source }
}

#[cfg(all(test, target_os = "linux"))]
mod tests {
    use super::*;

    /// `/dev/full` answers every write with "no space left on device" (full(4)).
    #[test]
    fn a_full_disk_names_the_file() {
        let full = Path::new("/dev/full");
        let file = File::options().write(true).open(full).unwrap();
        let error = fill(file, full, "anything").unwrap_err();
        assert_eq!(error.to_string(), "cannot write /dev/full");
        assert!(error.remedy().starts_with("free about 30 MB"), "{error:?}");
    }
}
