//! The rules by which telemetry becomes waits, from the policy and in sentences.

use super::finding::{Flaw, shown};
use super::keys::{self, Key, Section};
use super::read::{Fields, Reader};
use super::schema::set;
use crate::intake::{Condition, MAX_CONDITIONS, MAX_RULE_BYTES, RuleError, Rules, Template};

impl Reader {
    pub(super) fn telemetry(&mut self, file: &Fields<'_>) -> Rules {
        let mut rules = Rules::default();
        let Some(map) = self.map(file, &keys::TELEMETRY, Section::Telemetry) else { return rules };
        set(&mut rules.stream, self.value(&map, &keys::TELEMETRY_STREAM, template));
        set(&mut rules.resends, self.value(&map, &keys::RESENDS, name));
        rules.left_out = self.conditions(&map, &keys::LEFT_OUT);
        rules.gave_up = self.conditions(&map, &keys::TELEMETRY_GAVE_UP);
        rules.failed = self.conditions(&map, &keys::TELEMETRY_FAILED);
        rules.done = self.conditions(&map, &keys::TELEMETRY_DONE);
        rules
    }

    /// The conditions under a key.
    pub(super) fn conditions(&mut self, map: &Fields<'_>, key: &'static Key) -> Vec<Condition> {
        let items = self.items(map, key).unwrap_or_default();
        if items.len() > MAX_CONDITIONS {
            self.unfit(map.place(key), key, Flaw::Range { value: format!("{} conditions", items.len()) });
            return Vec::new();
        }
        items
            .iter()
            .filter_map(|item| self.scalar(item, item.at, key, |text| unfit(text, Condition::new(text))))
            .collect()
    }
}

/// What streams are called.
pub(super) fn template(text: &str) -> Result<Template, Flaw> {
    unfit(text, Template::new(text))
}

fn name(text: &str) -> Result<String, Flaw> {
    let name = text.trim();
    let is_word = |c: char| c.is_alphanumeric() || matches!(c, '.' | '_' | '-' | '/' | ':');
    let fits = (1..=MAX_RULE_BYTES).contains(&name.len()) && name.chars().all(is_word);
    if fits { Ok(name.to_owned()) } else { Err(Flaw::Unreadable { value: shown(text) }) }
}

fn unfit<T>(text: &str, read: Result<T, RuleError>) -> Result<T, Flaw> {
    read.map_err(|error| Flaw::Rule { value: shown(text), error })
}

/// The rules as sentences, for one kind of thing (`spans and histograms`); nothing of what is as it is unless said.
pub(super) fn sentences(rules: &Rules, of: &str) -> Vec<String> {
    let usual = Rules::default();
    let mut says = Vec::new();
    if rules.stream != usual.stream {
        says.push(format!("The streams of {of} are called `{}`.", rules.stream));
    }
    if rules.resends != usual.resends {
        says.push(format!("`{}` counts how often a request had been sent before.", rules.resends));
    }
    for (conditions, what) in [
        (&rules.left_out, "are left out"),
        (&rules.gave_up, "were given up"),
        (&rules.failed, "have failed"),
        (&rules.done, "are done"),
    ] {
        if !conditions.is_empty() {
            let all: Vec<String> = conditions.iter().map(|condition| format!("`{condition}`")).collect();
            says.push(format!("Those with {} {what}.", all.join(" or ")));
        }
    }
    says
}
