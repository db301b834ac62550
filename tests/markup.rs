//! Pages that are written to files are HTML that a validator of others takes: `html-validate` (npm), its set `standard`, which
//! follows the HTML living standard.

// A test may fail.
#![allow(clippy::unwrap_used)]

#[path = "support/command.rs"]
mod command;
#[path = "support/node.rs"]
mod node;

use std::fs;

use command::run;

#[test]
fn pages_are_sound_html() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path();
    assert_eq!(run(path, &["demo", "."]).0, 0);
    let given = ["waits.ndjson", "--policy", "policy.yaml"];
    let made = |command: &str, more: &[&str]| {
        let (code, out, err) = run(path, &[&[command], &given[..], more].concat());
        assert_eq!(code, 0, "{err}");
        out
    };
    let mut pages = vec![made("weekly", &["--format", "html"]), made("audit", &["--format", "html"])];
    for command in ["weigh", "replay"] {
        made(command, &["--pictures", command]);
        let pictures = path.join(command);
        let page = fs::read_dir(&pictures).unwrap().map(|entry| entry.unwrap().path());
        pages.extend(
            page.filter(|file| file.extension().is_some_and(|e| e == "html"))
                .map(|file| fs::read_to_string(file).unwrap()),
        );
    }
    assert_eq!(pages.len(), 4);
    let script = "const {HtmlValidate} = require('html-validate');\
                  const judge = new HtmlValidate({root: true, extends: ['html-validate:standard']});\
                  for (const page of JSON.parse(input)) {\
                    const said = await judge.validateString(page);\
                    for (const {messages} of said.results)\
                      for (const m of messages.slice(0, 20)) console.log(`${m.line}:${m.column} ${m.ruleId}: ${m.message}`);\
                  }";
    let input = serde_json::to_string(&pages).unwrap();
    if let Some(said) = node::asked("node_modules/html-validate", script, &input) {
        assert_eq!(said, "");
        // And it does judge.
        let broken = serde_json::to_string(&["<!DOCTYPE html><p><div></p>"]).unwrap();
        assert_ne!(node::asked("node_modules/html-validate", script, &broken).as_deref(), Some(""));
    }
}
