//! Pages of metrics that the daemon is to read, from the policy and in sentences.

use super::entry::Scrape;
use super::finding::{Fault, Flaw, shown};
use super::keys::{self, DEFAULT_EVERY, DEFAULT_TIMEOUT, MAX_SCRAPES, Section};
use super::read::{Fields, Reader};
use super::scalar::{choice, file_name, span, within};
use super::schema::set;
use super::telemetry::{self, template};
use super::tree::Node;
use crate::intake::Exposition;
use crate::say;

/// Units by name, s.
const UNITS: [(&str, f64); 4] = [("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9)];

impl Reader {
    pub(super) fn scrapes(&mut self, file: &Fields<'_>) -> Vec<Scrape> {
        let name = |scrape: &Scrape| scrape.url.clone();
        self.sources(file, (&keys::SCRAPE, MAX_SCRAPES), Reader::scrape, (&keys::SCRAPE_URL, name))
    }

    fn scrape(&mut self, node: &Node) -> Option<Scrape> {
        let map = self.fields(node, Section::Scrape, &keys::PAGE)?;
        if map.get(&keys::SCRAPE_URL).is_none() {
            self.fault(map.at, Section::Scrape.path(), Fault::Missing(&keys::SCRAPE_URL));
        }
        let url = self.value(&map, &keys::SCRAPE_URL, url);
        let mut rules = Exposition::default().rules;
        set(&mut rules.stream, self.value(&map, &keys::SCRAPE_STREAM, template));
        rules.left_out = self.conditions(&map, &keys::SCRAPE_LEFT_OUT);
        rules.gave_up = self.conditions(&map, &keys::SCRAPE_GAVE_UP);
        rules.failed = self.conditions(&map, &keys::SCRAPE_FAILED);
        rules.done = self.conditions(&map, &keys::SCRAPE_DONE);
        let (mut every, mut timeout) = (DEFAULT_EVERY, DEFAULT_TIMEOUT);
        let upto = |text: &str, least: f64, most: f64| {
            span(text).and_then(|s| within(s, (least..=most).contains(&s), text))
        };
        set(&mut every, self.value(&map, &keys::EVERY, |text| upto(text, 1.0, 86_400.0)));
        set(&mut timeout, self.value(&map, &keys::TIMEOUT, |text| upto(text, f64::MIN_POSITIVE, 300.0)));
        let trust = self.value(&map, &keys::TRUST, file_name);
        let header_file = self.value(&map, &keys::HEADER_FILE, file_name);
        let unit = self.value(&map, &keys::SCRAPE_UNIT, |text| choice(text, &UNITS));
        Some(Scrape { url: url?, every, timeout, trust, header_file, unit, rules })
    }
}

/// An address of a page, without a name or a password in it.
fn url(text: &str) -> Result<String, Flaw> {
    let uri: Result<ureq::http::Uri, _> = text.trim().parse();
    let fits = uri.is_ok_and(|uri| {
        matches!(uri.scheme_str(), Some("http" | "https"))
            && uri.authority().is_some_and(|authority| !authority.as_str().contains('@'))
    });
    if fits { Ok(text.trim().to_owned()) } else { Err(Flaw::Unreadable { value: shown(text) }) }
}

/// What is read there, in a sentence or more.
pub(super) fn sentence(scrape: &Scrape) -> String {
    let Scrape { url, every, unit, .. } = scrape;
    let mut says = vec![format!("Histograms at {url} are read every {}.", say::duration(*every))];
    if let Some((name, _)) = UNITS.into_iter().find(|(_, seconds)| Some(*seconds) == *unit) {
        says.push(format!("Those whose names end in no unit are in {name}."));
    }
    if scrape.header_file.is_some() {
        says.push("A header from a file is shown.".into());
    }
    says.extend(telemetry::sentences(&scrape.rules, &Exposition::default().rules, "that page"));
    says.join(" ")
}
