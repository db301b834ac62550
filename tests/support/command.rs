//! The command, run as a user would run it.

// Each test binary compiles its own copy and uses a part of it.
#![allow(dead_code, clippy::unwrap_used)]

use std::fs;
use std::path::Path;
use std::process::Output;

use tempfile::TempDir;

pub(crate) const BINARY: &str = env!("CARGO_BIN_EXE_outwait");

/// In a folder, with nothing from outside that would change what it says.
pub(crate) fn outwait(folder: &Path, arguments: &[&str]) -> assert_cmd::Command {
    let mut command = assert_cmd::Command::new(BINARY);
    command.current_dir(folder).args(arguments);
    for name in ["OUTWAIT_POLICY", "NO_COLOR", "COLUMNS", "CLICOLOR_FORCE"] {
        command.env_remove(name);
    }
    command
}

/// Exit code, standard output, standard error.
pub(crate) fn ended(output: Output) -> (i32, String, String) {
    let text = |bytes| String::from_utf8(bytes).unwrap();
    (output.status.code().unwrap_or(-1), text(output.stdout), text(output.stderr))
}

pub(crate) fn run(folder: &Path, arguments: &[&str]) -> (i32, String, String) {
    ended(outwait(folder, arguments).output().unwrap())
}

pub(crate) fn fed(folder: &Path, arguments: &[&str], input: impl Into<Vec<u8>>) -> (i32, String, String) {
    ended(outwait(folder, arguments).write_stdin(input).output().unwrap())
}

pub(crate) fn folder(files: &[(&str, &[u8])]) -> TempDir {
    let folder = tempfile::tempdir().unwrap();
    for (name, bytes) in files {
        fs::write(folder.path().join(name), bytes).unwrap();
    }
    folder
}
