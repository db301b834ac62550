//! A folder that a command writes into: each file whole or not at all, and every failure names its file.

use std::fs::{self, File};
use std::io::{self, ErrorKind, Write};
use std::path::{Path, PathBuf};

use anyhow::Context;

use super::exit::{Exit, Failure};
use crate::whole::{self, FileError};

/// Longest name of a stream in a file's name, bytes: with what follows it, within the 255 that file systems have.
const LONGEST: usize = 200;

/// A folder to write into.
#[derive(Clone, Debug)]
pub(super) struct Folder(PathBuf);

impl Folder {
    /// Makes it, and those above it, unless it is there.
    pub(super) fn open(path: &Path) -> Result<Folder, Failure> {
        fs::create_dir_all(path).map_err(|error| failure(error, "make the folder", path))?;
        Ok(Folder(path.to_owned()))
    }

    /// Writes a file under a temporary name and gives it its own once it is whole; one of that name is replaced.
    pub(super) fn put(&self, name: &str, text: &str) -> Result<(), Failure> {
        let path = self.0.join(name);
        let partial = self.0.join(format!(".{name}.partial"));
        let written = write(&partial, text).and_then(|()| fs::rename(&partial, &path));
        written.map_err(|error| {
            // What cannot be removed either is replaced by the next try.
            let _ = fs::remove_file(&partial);
            failure(error, "write", &path)
        })
    }
}

/// Writes one file whole or not at all, through a link to what it names; one that is there keeps its mode.
pub(super) fn replace(path: &Path, text: &str) -> Result<(), Failure> {
    Ok(whole::replace(path, text.as_bytes())?)
}

/// A file's bytes; none where there is no file.
pub(super) fn read(path: &Path) -> Result<Vec<u8>, Failure> {
    Ok(whole::read(path)?)
}

impl From<FileError> for Failure {
    fn from(FileError { doing, path, source }: FileError) -> Failure {
        failure(source, doing, &path)
    }
}

fn write(partial: &Path, text: &str) -> io::Result<()> {
    match fs::remove_file(partial) {
        Err(error) if error.kind() != ErrorKind::NotFound => return Err(error),
        _ => {}
    }
    // New, so that nothing that was put there meanwhile is written through.
    File::create_new(partial)?.write_all(text.as_bytes())
}

fn failure(error: io::Error, doing: &str, path: &Path) -> Failure {
    let (exit, remedy) = match error.kind() {
        ErrorKind::StorageFull | ErrorKind::QuotaExceeded => {
            (Exit::System, "free some room there, or name a folder on another disk")
        }
        ErrorKind::ResourceBusy => (Exit::System, "close what edits it, and start again"),
        ErrorKind::NotADirectory | ErrorKind::AlreadyExists | ErrorKind::IsADirectory => {
            (Exit::BadInput, "name another folder; something else of that name is in the way")
        }
        _ => (Exit::System, "name a folder in which you may write"),
    };
    let told: Result<(), io::Error> = Err(error);
    match told.with_context(|| format!("cannot {doing} {}", path.display())) {
        Err(error) => Failure::new(exit, error).with_remedy(remedy),
        Ok(()) => Failure::new(exit, anyhow::anyhow!("cannot {doing} {}", path.display())),
    }
}

/// A stream's name as the beginning of a file's: no two names give the same, also where capitals do not count, and none
/// leads out of its folder. `number` tells apart the few that are too long.
///
/// `/` becomes `~`, `:` becomes `=`, a capital `+` and its small letter, a leading point `+.`, any other letter its code
/// point between two `@`.
pub(super) fn file_name(stream: &str, number: usize) -> String {
    let mut name = String::with_capacity(stream.len());
    for (i, c) in stream.chars().enumerate() {
        match c {
            '.' if i == 0 => name.push_str("+."),
            'a'..='z' | '0'..='9' | '.' | '_' | '-' => name.push(c),
            '/' => name.push('~'),
            ':' => name.push('='),
            'A'..='Z' => name.extend(['+', c.to_ascii_lowercase()]),
            c => name += &format!("@{:x}@", u32::from(c)),
        }
    }
    if name.len() > LONGEST {
        let mark = format!("!{number}");
        name.truncate(LONGEST - mark.len());
        name += &mark;
    }
    name
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::HashSet;

    #[test]
    fn names_neither_meet_nor_escape() {
        let long = ["Ä".repeat(100), "A".repeat(199), "A".repeat(200)];
        let streams =
            ["a/b", "a:b", "a.b", "A.b", "a", "A", "..", ".", "../..", "/etc/passwd", "é", "e", "a-rate"];
        let streams: Vec<&str> = streams.into_iter().chain(long.iter().map(String::as_str)).collect();
        let names: Vec<String> = streams.iter().enumerate().map(|(i, s)| file_name(s, i)).collect();
        for name in &names {
            assert!(name.is_ascii() && name.len() <= LONGEST && !name.contains('/'), "{name}");
            assert!(!name.starts_with('.'), "{name}");
        }
        let folded: HashSet<String> = names.iter().map(|name| name.to_lowercase()).collect();
        assert_eq!(folded.len(), streams.len());
        assert_eq!(file_name("catalogue.lookup", 0), "catalogue.lookup");
    }

    /// `/dev/full` answers every write with "no space left on device" (full(4)).
    #[cfg(target_os = "linux")]
    #[test]
    fn a_full_disk_names_the_file() {
        let error =
            File::options().write(true).open("/dev/full").unwrap().write_all(b"anything").unwrap_err();
        let told = failure(error, "write", Path::new("pictures/desk-rate.svg"));
        assert!(format!("{told:?}").contains("cannot write pictures/desk-rate.svg"), "{told:?}");
    }

    #[test]
    fn a_file_is_whole_or_not_there() {
        let folder = tempfile::tempdir().unwrap();
        let into = Folder::open(&folder.path().join("a/b")).unwrap();
        into.put("x.svg", "one").unwrap();
        into.put("x.svg", "two").unwrap();
        let names: Vec<_> = fs::read_dir(folder.path().join("a/b")).unwrap().collect();
        assert_eq!(names.len(), 1);
        assert_eq!(fs::read_to_string(folder.path().join("a/b/x.svg")).unwrap(), "two");
        assert!(Folder::open(&folder.path().join("a/b/x.svg")).is_err());
    }
}
