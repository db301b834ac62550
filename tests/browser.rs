//! Every page of the demo in a real browser: `tests/browser/look.mjs` drives it. Needs node, Chromium, and the packages
//! `playwright-core` and `axe-core` in the folder that `OUTWAIT_BROWSER` names, or in `target/browser/node_modules`; where
//! something is missing it says so and does nothing.
#![allow(clippy::unwrap_used, clippy::panic, dead_code)] // a test may fail; the house is shared

#[path = "daemon/house.rs"]
mod house;

use std::path::{Path, PathBuf};
use std::process::Command;

use outwait::serve::{PolicyFile, Signing};

fn found(program: &str) -> Option<PathBuf> {
    std::env::split_paths(&std::env::var_os("PATH")?)
        .map(|folder| folder.join(program))
        .find(|file| file.is_file())
}

#[test]
fn every_page_in_a_browser() {
    let home = Path::new(env!("CARGO_MANIFEST_DIR"));
    let ours = home.join("target/browser/node_modules");
    let modules = std::env::var_os("OUTWAIT_BROWSER").map_or(ours, PathBuf::from);
    let (Some(node), Some(chromium)) = (found("node"), found("chromium")) else {
        println!("skipped: node and chromium are needed");
        return;
    };
    if !["playwright-core", "axe-core"].iter().all(|package| modules.join(package).is_dir()) {
        println!("skipped: playwright-core and axe-core are needed in {}", modules.display());
        return;
    }
    let policy = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(policy.path(), outwait::demo::POLICY).unwrap();
    let house = house::House::demo(|config| {
        config.policy = PolicyFile::at(policy.path());
        config.signing = Signing::Anyone;
    });
    let shots = home.join("target/browser/shots");
    let seen = Command::new(node)
        .arg(home.join("tests/browser/look.mjs"))
        .args([&modules, &chromium])
        .arg(format!("http://{}", house.address))
        .arg(&shots)
        .output()
        .unwrap();
    println!("{}", String::from_utf8_lossy(&seen.stdout));
    assert!(seen.status.success(), "{}", String::from_utf8_lossy(&seen.stderr));
}
