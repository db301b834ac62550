//! What each key of a policy becomes: one line a key, each naming its row in [`super::keys`].

use super::entry::{Backoff, Entry, GiveUp, Guard, Jitter, Kind, Policy, Retry, Sticky, Weekly, aim_name};
use super::finding::{Concern, Fault, Flaw, Place, shown};
use super::keys::{self, LEAST_WORTH, MAX_WORTH, Section};
use super::read::{Fields, Reader};
use super::scalar::{self, choice, number, part, pause, span, whole};
use super::tree::{self, Node};
use super::{Glob, PolicyError};
use crate::stopping::{Aim, Fade, Worth};
use crate::wait::check_stream;

/// Reads a policy. `name` is what the file is called in messages.
///
/// # Errors
/// [`PolicyError`] with all that is wrong (the first [`keys::MAX_PROBLEMS`] of it), each with its line, column and
/// remedy.
pub fn parse(text: &str, name: &str) -> Result<Policy, PolicyError> {
    let mut reader = Reader::default();
    let policy = reader.policy(text);
    reader.finish(policy, name)
}

/// Reads a policy from the bytes of a file, as [`parse`].
///
/// # Errors
/// As [`parse`], and [`Fault::NotText`] where the bytes are not UTF-8.
pub fn parse_bytes(bytes: &[u8], name: &str) -> Result<Policy, PolicyError> {
    let valid = match std::str::from_utf8(bytes) {
        Ok(text) => return parse(text, name),
        Err(error) => error.valid_up_to(),
    };
    let before = String::from_utf8_lossy(&bytes[..valid]);
    let line = before.matches('\n').count() + 1;
    let column = before.rsplit('\n').next().map_or(0, |line| line.chars().count()) + 1;
    let mut reader = Reader::default();
    reader.fault(Place { line, column }, "", Fault::NotText { byte: bytes[valid] });
    reader.finish(None, name)
}

impl Reader {
    fn policy(&mut self, text: &str) -> Option<Policy> {
        if text.len() > keys::MAX_BYTES {
            self.fault(Place::START, "", Fault::Large { bytes: text.len() });
            return None;
        }
        let root = tree::read(text, &mut |at, what| self.fault(at, "", what));
        let Some(root) = root.filter(|root| !root.is_null()) else {
            if self.is_faultless() {
                self.fault(Place::START, "", Fault::Empty);
            }
            return None;
        };
        let file = self.fields(&root, Section::File, &keys::FILE)?;
        let version = self.required(&file, &keys::VERSION, |t| whole(t, 1, 1));
        let entries = self.entries(&file);
        let weekly = self.weekly(&file);
        let telemetry = self.telemetry(&file);
        let scrapes = self.scrapes(&file);
        let followed = self.followed(&file);
        let (version, entries) = (version?, entries?);
        Some(Policy { version, entries, weekly, telemetry, scrapes, followed, warnings: Vec::new() })
    }

    fn weekly(&mut self, file: &Fields<'_>) -> Option<Weekly> {
        let map = self.map(file, &keys::WEEKLY, Section::Weekly)?;
        let names = ["monday", "tuesday", "wednesday", "thursday", "friday", "saturday", "sunday"];
        let days: Vec<(&'static str, u8)> = names.into_iter().zip(0..).collect();
        let mut weekly = Weekly { day: 0, hour: 6, time_zone: "UTC".into() };
        set(&mut weekly.day, self.value(&map, &keys::WEEKLY_DAY, |t| choice(t, &days)));
        set(
            &mut weekly.hour,
            self.value(&map, &keys::WEEKLY_HOUR, |t| whole(t, 0, 23).map(|hour| hour as u8)),
        );
        set(&mut weekly.time_zone, self.value(&map, &keys::TIME_ZONE, scalar::time_zone));
        Some(weekly)
    }

    fn entries(&mut self, file: &Fields<'_>) -> Option<Vec<Entry>> {
        if file.get(&keys::STREAMS).is_none() {
            self.fault(file.at, "", Fault::Missing(&keys::STREAMS));
        }
        let items = self.items(file, &keys::STREAMS)?;
        let at = file.place(&keys::STREAMS);
        if items.is_empty() {
            self.unfit(at, &keys::STREAMS, Flaw::Shape { found: "an empty list" });
        }
        if items.len() > keys::MAX_ENTRIES {
            self.fault(at, keys::STREAMS.path(), Fault::Entries { entries: items.len() });
            return None;
        }
        let mut entries = Vec::with_capacity(items.len());
        for (i, node) in items.iter().enumerate() {
            self.entry = Some(i + 1);
            entries.extend(self.one_entry(node, i + 1));
        }
        self.entry = None;
        if self.is_faultless() {
            self.check_together(&entries, items);
        }
        Some(entries)
    }

    fn one_entry(&mut self, node: &Node, number: usize) -> Option<Entry> {
        let fields = self.fields(node, Section::Entry, &keys::ENTRY)?;
        let matches = self.pattern(&fields);
        let kinds = Kind::ALL.map(|kind| (kind.name(), kind));
        let kind = self.value(&fields, &keys::KIND, |t| choice(t, &kinds)).unwrap_or(keys::DEFAULT_KIND);
        let retry = self.retry(&fields, kind);
        let worth = self.worth(&fields, &retry);
        let now = self.value(&fields, &keys::NOW, scalar::give_up);
        let guard = self.guard(&fields, now);
        let sampled_every = self.value(&fields, &keys::SAMPLED_EVERY, span);
        let calls = self.calls(&fields);
        let (matches, line) = (matches?, node.at.line);
        let entry = Entry { matches, number, line, kind, worth, now, retry, guard, sampled_every, calls };
        if let Some(worth) = entry.worth.filter(|_| entry.restart_is_free()) {
            let what = Concern::FreeRestart { aim: aim_name(worth.aim) };
            self.concern(fields.place(&keys::AIM), &keys::AIM, what);
        }
        Some(entry)
    }

    fn pattern(&mut self, entry: &Fields<'_>) -> Option<Glob> {
        let text = self.required(entry, &keys::MATCH, |t| Ok(t.to_owned()))?;
        let refuse = |why| Fault::Pattern { pattern: shown(&text), why };
        Glob::new(&text)
            .map_err(|why| self.fault(entry.place(&keys::MATCH), keys::MATCH.path(), refuse(why)))
            .ok()
    }

    /// Aim and prices; `None` without an aim, or with a faulty one.
    fn worth(&mut self, entry: &Fields<'_>, retry: &Retry) -> Option<Worth> {
        let mut worth = Worth::default();
        if let Some(map) = self.map(entry, &keys::WORTH, Section::Worth) {
            let any = |t: &str| number(t, -MAX_WORTH, MAX_WORTH);
            set(&mut worth.done, self.value(&map, &keys::WORTH_DONE, |t| number(t, LEAST_WORTH, MAX_WORTH)));
            set(&mut worth.failed, self.value(&map, &keys::WORTH_FAILED, any));
            set(&mut worth.gave_up, self.value(&map, &keys::WORTH_GAVE_UP, any));
        }
        set(&mut worth.fade, self.fade(entry));
        set(&mut worth.attempt_cost, self.value(entry, &keys::ATTEMPT_COST, |t| number(t, 0.0, MAX_WORTH)));
        if let Some(map) = self.map(entry, &keys::PAUSE, Section::Pause) {
            set(&mut worth.pause.done, self.value(&map, &keys::PAUSE_DONE, pause));
            set(&mut worth.pause.failed, self.value(&map, &keys::PAUSE_FAILED, pause));
            set(&mut worth.pause.gave_up, self.value(&map, &keys::PAUSE_GAVE_UP, pause));
        }
        if let Sticky::Given(phi) = retry.sticky {
            worth.sticky = phi;
        }
        worth.aim = self.aim(entry, retry)?;
        self.check_prices(entry, &worth);
        Some(worth)
    }

    fn aim(&mut self, entry: &Fields<'_>, retry: &Retry) -> Option<Aim> {
        #[derive(Clone, Copy)]
        enum Name {
            Rate,
            Finish,
            CarryingCost,
            Deadline,
        }
        let names = [
            ("rate", Name::Rate),
            ("finish", Name::Finish),
            ("carrying_cost", Name::CarryingCost),
            ("deadline", Name::Deadline),
        ];
        let cost = self.value(entry, &keys::CARRYING_COST, scalar::cost_of_time);
        let deadline = self.value(entry, &keys::DEADLINE, span);
        if entry.get(&keys::AIM).is_none() {
            self.check_aimless(entry);
        }
        match self.value(entry, &keys::AIM, |t| choice(t, &names))? {
            Name::Rate => Some(Aim::Rate),
            Name::Finish => Some(Aim::Finish),
            Name::CarryingCost => {
                self.needed(entry, "carrying_cost", &keys::CARRYING_COST);
                cost.map(Aim::CarryingCost)
            }
            Name::Deadline => {
                self.needed(entry, "deadline", &keys::DEADLINE);
                let attempts = retry.attempts.unwrap_or(keys::DEFAULT_DEADLINE_ATTEMPTS);
                if retry.attempts.is_none() {
                    self.concern(entry.place(&keys::AIM), &keys::AIM, Concern::AttemptsAssumed(attempts));
                }
                deadline.map(|by| Aim::Deadline { by, attempts })
            }
        }
    }

    /// Tells that an aim lacks its key, if it does.
    fn needed(&mut self, entry: &Fields<'_>, aim: &'static str, key: &'static keys::Key) {
        if entry.get(key).is_none() {
            self.fault(entry.place(&keys::AIM), keys::AIM.path(), Fault::AimNeeds { aim, key });
        }
    }

    fn fade(&mut self, entry: &Fields<'_>) -> Option<Fade> {
        let map = self.map(entry, &keys::FADES, Section::Fades)?;
        let mut given = 0;
        let mut fade = None;
        for (key, of) in [
            (&keys::HALF_LIFE, Fade::HalfLife as fn(f64) -> Fade),
            (&keys::ZERO_AT, Fade::ZeroAt),
            (&keys::HALF_AT, Fade::HalfAt),
        ] {
            given += usize::from(map.get(key).is_some());
            fade = self.value(&map, key, span).map(of).or(fade);
        }
        if given != 1 {
            self.fault(map.at, keys::FADES.path(), Fault::Fades { given });
        }
        fade
    }

    fn retry(&mut self, entry: &Fields<'_>, kind: Kind) -> Retry {
        let mut retry = Retry::default();
        let Some(map) = self.map(entry, &keys::RETRY, Section::Retry) else { return retry };
        retry.attempts = self.value(&map, &keys::ATTEMPTS, |t| whole(t, 1, keys::MAX_ATTEMPTS));
        retry.load_ceiling =
            self.value(&map, &keys::LOAD_CEILING, |t| number(t, 1.0, f64::from(keys::MAX_ATTEMPTS)));
        set(&mut retry.sticky, self.value(&map, &keys::STICKY, scalar::sticky));
        set(&mut retry.repeatable, self.value(&map, &keys::REPEATABLE, scalar::flag));
        if let Some(backoff) = self.map(&map, &keys::BACKOFF, Section::Backoff) {
            retry.backoff = self.backoff(&backoff);
        }
        self.check_retry(&map, &retry, kind);
        retry
    }

    fn backoff(&mut self, map: &Fields<'_>) -> Backoff {
        let mut backoff = Backoff::default();
        let jitters = [("none", Jitter::None), ("full", Jitter::Full)];
        set(&mut backoff.factor, self.value(map, &keys::FACTOR, |t| number(t, 1.0, 10.0)));
        set(&mut backoff.jitter, self.value(map, &keys::JITTER, |t| choice(t, &jitters)));
        backoff
    }

    fn guard(&mut self, entry: &Fields<'_>, now: Option<GiveUp>) -> Guard {
        let mut guard = Guard::default();
        let Some(map) = self.map(entry, &keys::GUARD, Section::Guard) else { return guard };
        guard.floor = self.value(&map, &keys::FLOOR, span);
        guard.ceiling = self.value(&map, &keys::CEILING, span);
        set(&mut guard.largest_step, self.value(&map, &keys::LARGEST_STEP, scalar::step));
        set(&mut guard.evidence, self.value(&map, &keys::EVIDENCE, |t| whole(t, 1, 1_000_000_000)));
        set(&mut guard.window, self.value(&map, &keys::WINDOW, span));
        set(&mut guard.slack, self.value(&map, &keys::SLACK, part));
        set(&mut guard.hysteresis, self.value(&map, &keys::HYSTERESIS, part));
        set(&mut guard.cool_down, self.value(&map, &keys::COOL_DOWN, pause));
        let (floor, ceiling) = (guard.floor.unwrap_or(0.0), guard.ceiling.unwrap_or(f64::INFINITY));
        if floor >= ceiling {
            self.fault(map.place(&keys::FLOOR), keys::FLOOR.path(), Fault::NoRoom { floor, ceiling });
        }
        // That nobody gives up today is no slip, whatever the ceiling.
        if let Some(GiveUp::After(now)) = now
            && !(floor..=ceiling).contains(&now)
        {
            self.concern(entry.place(&keys::NOW), &keys::NOW, Concern::OutsideGuard(now));
        }
        guard
    }

    fn calls(&mut self, entry: &Fields<'_>) -> Vec<String> {
        let items = self.items(entry, &keys::CALLS).unwrap_or_default();
        if items.len() > keys::MAX_CALLS {
            let flaw = Flaw::Range { value: format!("{} streams", items.len()) };
            self.unfit(entry.place(&keys::CALLS), &keys::CALLS, flaw);
            return Vec::new();
        }
        let mut calls = Vec::with_capacity(items.len());
        for item in items {
            let Some(name) = self.scalar(item, item.at, &keys::CALLS, |t| Ok(t.to_owned())) else { continue };
            match check_stream(&name) {
                Ok(()) => calls.push(name),
                Err(why) => {
                    let what = Fault::Stream { name: shown(&name), why };
                    self.fault(item.at, keys::CALLS.path(), what);
                }
            }
        }
        calls
    }
}

/// Replaces a default by what was read, if anything was.
pub(super) fn set<T>(field: &mut T, read: Option<T>) {
    if let Some(value) = read {
        *field = value;
    }
}
