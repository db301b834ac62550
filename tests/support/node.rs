//! Other people's checkers, run by node. `.ci/run` puts them into `target/checkers`; a test that finds none says so.

#![allow(clippy::unwrap_used)]

use std::path::{Path, PathBuf};
use std::process::Command;

/// What a script (an ES module) prints that has `input`, `require` and `folder`, the folder of the checkers. Nothing, and a
/// printed word, where `needs` is not there. A script that fails stops the test with what it said.
pub(crate) fn asked(needs: &str, script: &str, input: &str) -> Option<String> {
    let folder = PathBuf::from(option_env!("CARGO_TARGET_DIR").unwrap_or("target"));
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join(folder).join("checkers");
    if !folder.join(needs).exists() {
        println!("skipped: there is no {needs} in {}", folder.display());
        return None;
    }
    let head = "import {readFileSync} from 'node:fs'; import {createRequire} from 'node:module';\
                const [folder, file] = process.argv.slice(-2), input = readFileSync(file, 'utf8');\
                const require = createRequire(folder + '/');";
    let given = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(given.path(), input).unwrap();
    let output = Command::new("node")
        .args(["--input-type=module", "-e", &format!("{head}\n{script}"), "--"])
        .args([&folder, given.path()])
        .output()
        .unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    Some(String::from_utf8(output.stdout).unwrap())
}
