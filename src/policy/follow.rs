//! Logs that the daemon is to follow, from the policy and in sentences.

use std::path::PathBuf;
use std::sync::Arc;

use super::entry::Followed;
use super::finding::{Fault, Flaw};
use super::keys::{self, MAX_FOLLOWED, Section};
use super::read::{Fields, Reader};
use super::scalar::{choice, file_name};
use super::tree::Node;
use crate::intake::{Format, Mapping, MappingError, Options, Pattern};
use crate::wait::check_stream;

/// Formats that can be followed.
const FORMATS: [Format; 4] = [Format::Ndjson, Format::Csv, Format::Journal, Format::Pattern];

impl Reader {
    pub(super) fn followed(&mut self, file: &Fields<'_>) -> Vec<Followed> {
        // `./` and `//` make no other file.
        let name =
            |followed: &Followed| followed.path.components().collect::<PathBuf>().display().to_string();
        self.sources(file, (&keys::FOLLOW, MAX_FOLLOWED), Reader::one_followed, (&keys::FOLLOW_FILE, name))
    }

    fn one_followed(&mut self, node: &Node) -> Option<Followed> {
        let map = self.fields(node, Section::Follow, &keys::LOG)?;
        if map.get(&keys::FOLLOW_FILE).is_none() {
            self.fault(map.at, Section::Follow.path(), Fault::Missing(&keys::FOLLOW_FILE));
        }
        let path = self.value(&map, &keys::FOLLOW_FILE, file_name);
        let formats = FORMATS.map(|format| (format.name(), format));
        let pattern = |text: &str| Pattern::new(text).map_err(|error| Flaw::Log(error.to_string()));
        let mapped =
            |mapping: Result<Mapping, MappingError>| mapping.map_err(|error| Flaw::Log(error.to_string()));
        let plain = Mapping::default;
        let mapping = [
            self.value(&map, &keys::FOLLOW_COLUMNS, |text| mapped(plain().with_columns(text))),
            self.value(&map, &keys::FOLLOW_ENDING_OF, |text| mapped(plain().with_endings(text))),
            self.value(&map, &keys::FOLLOW_TIME_FORMAT, |text| mapped(plain().with_time_format(text))),
        ];
        let options = Options {
            format: self.value(&map, &keys::FOLLOW_INPUT, |text| choice(text, &formats)),
            pattern: self.value(&map, &keys::FOLLOW_PATTERN, pattern).map(Arc::new),
            mapping: mapping.into_iter().flatten().reduce(Mapping::and).map(Arc::new),
            one_stream: self.value(&map, &keys::FOLLOW_AS, stream),
            ..Options::default()
        };
        Some(Followed { path: path?, options })
    }
}

fn stream(text: &str) -> Result<String, Flaw> {
    match check_stream(text.trim()) {
        Ok(()) => Ok(text.trim().to_owned()),
        Err(error) => Err(Flaw::Log(error.to_string())),
    }
}

/// What is followed, in a sentence or more.
pub(super) fn sentence(followed: &Followed) -> String {
    let Followed { path, options } = followed;
    let mut says = vec![format!("The log {} is followed.", path.display())];
    if let Some(format) = options.format.filter(|format| *format != Format::Pattern) {
        says.push(format!("It is read as {}.", format.name()));
    }
    if let Some(stream) = &options.one_stream {
        says.push(format!("All of its waits are of the stream `{stream}`."));
    }
    if options.pattern.is_some() {
        says.push("Its lines become records by a pattern.".into());
    }
    if options.mapping.is_some() {
        says.push("Its names, endings or times are read as the policy says.".into());
    }
    says.join(" ")
}
