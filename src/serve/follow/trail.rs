//! What a followed file is called once it is rotated, in which order, and which of them goes on from a place.
//!
//! Rotated files are known by their names alone: the followed name with a number or a date behind it, or before its
//! extension (`waits.log.1`, `waits.log.2.gz`, `waits.log-20261201`, `waits-2026-12-01.log.zst`). Times of files say
//! less: who packs them may set new ones.

use std::cmp::Reverse;
use std::path::{Path, PathBuf};

use super::opened::{Opened, identity};
use crate::ledger::Position;

/// How old a rotated file is by its name; the newer the less.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Rank {
    /// `.1` is the newest.
    Number(u64),
    /// The latest date is the newest.
    Date(Reverse<String>),
}

/// The file that goes on from a place, at that place, and whether it has the followed name.
pub(super) fn find(path: &Path, position: &Position) -> Option<(Opened, bool)> {
    let rotated = rotated(path);
    // The very file first, wherever it is now; then whatever has the same bytes: a copy, a packed one.
    [true, false].into_iter().find_map(|same| {
        let present = std::iter::once((path, true));
        present
            .chain(rotated.iter().map(|(_, path)| (path.as_path(), false)))
            .find_map(|(path, present)| Some((Opened::resume(path, position, same).ok().flatten()?, present)))
    })
}

/// The rotated file that came next after the one that was read to its end; `None` if that is the present one.
pub(super) fn after(path: &Path, position: &Position) -> Option<PathBuf> {
    let rotated = rotated(path);
    let very = |path: &Path| identity(path).is_ok_and(|file| file == position.file);
    let same = |path: &Path| Opened::resume(path, position, false).is_ok_and(|found| found.is_some());
    let (rank, _) = rotated.iter().find(|(_, path)| very(path)).or_else(|| {
        // An empty one has no bytes that tell it.
        rotated.iter().find(|(_, path)| position.offset > 0 && same(path))
    })?;
    let alike = |other: &Rank| {
        matches!((other, rank), (Rank::Number(_), Rank::Number(_)) | (Rank::Date(_), Rank::Date(_)))
    };
    rotated.iter().rfind(|(other, _)| alike(other) && other < rank).map(|(_, path)| path.clone())
}

/// The rotated files, the newest first; of one that lies there twice, packed and not, the plain one first.
fn rotated(path: &Path) -> Vec<(Rank, PathBuf)> {
    let Some(name) = path.file_name().and_then(|name| name.to_str()) else { return Vec::new() };
    let Some(Ok(entries)) = path.parent().map(std::fs::read_dir) else { return Vec::new() };
    let mut found: Vec<_> = entries
        .filter_map(|entry| {
            let path = entry.ok()?.path();
            Some((rank(path.file_name()?.to_str()?, name)?, path))
        })
        .collect();
    found.sort();
    found
}

/// The rank of a name among those of a rotated file; `None` if it is another file's.
fn rank(name: &str, of: &str) -> Option<Rank> {
    let plain = [".gz", ".zst"].iter().find_map(|ending| name.strip_suffix(ending)).unwrap_or(name);
    let between = |before: &str, behind: &str| {
        let middle = plain.strip_prefix(before)?.strip_suffix(behind)?.strip_prefix(['.', '-'])?;
        let first = middle.bytes().next()?;
        let sound = first.is_ascii_digit()
            && middle
                .bytes()
                .all(|byte| byte.is_ascii_digit() || matches!(byte, b'.' | b'_' | b':' | b'T' | b'-'));
        sound.then_some(middle)
    };
    let middle = between(of, "").or_else(|| {
        let (stem, extension) = of.rsplit_once('.')?;
        between(stem, &format!(".{extension}"))
    })?;
    match middle.parse() {
        // Eight digits are a day, ten and more a moment.
        Ok(number) if middle.len() < 8 => Some(Rank::Number(number)),
        _ => Some(Rank::Date(Reverse(middle.to_owned()))),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_of_rotated_files() {
        let date = |text: &str| Some(Rank::Date(Reverse(text.into())));
        assert_eq!(rank("waits.log.1", "waits.log"), Some(Rank::Number(1)));
        assert_eq!(rank("waits.log.12.gz", "waits.log"), Some(Rank::Number(12)));
        assert_eq!(rank("waits.3.log.zst", "waits.log"), Some(Rank::Number(3)));
        assert_eq!(rank("waits.log-20261201", "waits.log"), date("20261201"));
        assert_eq!(rank("waits-2026-12-01T10:00.log.gz", "waits.log"), date("2026-12-01T10:00"));
        for other in [
            "waits.log",
            "waits.log.bak",
            "waits.log.1.bak",
            "waits.logs.1",
            "other.log.1",
            "waits.log.",
            "waits.log.gz",
        ] {
            assert_eq!(rank(other, "waits.log"), None, "{other}");
        }
        assert!(Rank::Number(1) < Rank::Number(2) && date("20261202") < date("20261201"));
    }
}
