//! Every key that a policy may hold, with what it takes, and every default and limit.
//!
//! To add a key: a row in [`KEYS`], a field in `entry.rs`, a line in `read.rs`, a line in
//! `policies/reference.yaml`. Error messages, the nearest-key search and the reference follow from the row.

/// Largest policy, bytes: 1 MiB.
pub const MAX_BYTES: usize = 1 << 20;
/// Most values in a policy once aliases are followed.
pub const MAX_VALUES: usize = 1_000_000;
/// Deepest nesting of lists and maps; the schema needs 5.
pub const MAX_DEPTH: usize = 16;
/// Most entries.
pub const MAX_ENTRIES: usize = 20_000;
/// Most streams that one entry may say it calls.
pub const MAX_CALLS: usize = 100;
/// Most pages that the daemon may be told to read.
pub const MAX_SCRAPES: usize = 1_000;
/// Most logs that the daemon may be told to follow; each takes a thread.
pub const MAX_FOLLOWED: usize = 100;
/// How often a page is read unless said; s, 1 to a day.
pub const DEFAULT_EVERY: f64 = 60.0;
/// How long each step of a reading may take unless said; s, above 0 to 300.
pub const DEFAULT_TIMEOUT: f64 = 10.0;
/// Most findings that one [`super::PolicyError`] lists.
pub const MAX_PROBLEMS: usize = 50;
/// Most attempts of one request that a policy may allow.
pub const MAX_ATTEMPTS: u32 = 100;
/// Largest worth or cost, either sign, in the unit of worth.
pub const MAX_WORTH: f64 = 1e12;
/// Least worth of a completion, and least carrying cost in worth per second.
pub const LEAST_WORTH: f64 = 1e-12;

/// What is waited for, unless `kind` says so.
pub const DEFAULT_KIND: super::Kind = super::Kind::Request;
/// Attempts allowed by `aim: deadline` without `attempts`; whole number, 1 to [`MAX_ATTEMPTS`].
pub const DEFAULT_DEADLINE_ATTEMPTS: u32 = 3;
/// Factor by which pauses grow from attempt to attempt; number, 1 to 10.
pub const DEFAULT_BACKOFF_FACTOR: f64 = 1.0;
/// Largest change of a give-up time in one step; share of the time in force, above 0 to 10.
pub const DEFAULT_LARGEST_STEP: f64 = 0.5;
/// Completions needed before advice is given; number, 1 to 1e9.
pub const DEFAULT_EVIDENCE: u32 = 300;
/// How far back waits count; s, above 0 to 1e10.
pub const DEFAULT_WINDOW: f64 = 14.0 * 86_400.0;
/// Gain below which no change is proposed; share of the rate, 0 to below 1.
pub const DEFAULT_SLACK: f64 = 0.01;
/// Gain below which a standing proposal is not replaced; share of the rate, 0 to below 1.
pub const DEFAULT_HYSTERESIS: f64 = 0.005;
/// Rest after a change before the next is proposed; s, 0 to 1e10.
pub const DEFAULT_COOL_DOWN: f64 = 7.0 * 86_400.0;

/// A part of the policy that holds keys.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Section {
    /// The file itself.
    File,
    /// One entry under `streams`.
    Entry,
    /// `worth`.
    Worth,
    /// `fades`.
    Fades,
    /// `pause`.
    Pause,
    /// `retry`.
    Retry,
    /// `retry.backoff`.
    Backoff,
    /// `guard`.
    Guard,
    /// `weekly`, of the file.
    Weekly,
    /// `telemetry`, of the file.
    Telemetry,
    /// One entry under `scrape`.
    Scrape,
    /// One entry under `follow`.
    Follow,
}

impl Section {
    /// Path inside the file or the entry: empty, `worth`, `retry.backoff`.
    pub fn path(self) -> &'static str {
        match self {
            Section::File | Section::Entry => "",
            Section::Worth => "worth",
            Section::Fades => "fades",
            Section::Pause => "pause",
            Section::Retry => "retry",
            Section::Backoff => "retry.backoff",
            Section::Guard => "guard",
            Section::Weekly => "weekly",
            Section::Telemetry => "telemetry",
            Section::Scrape => "scrape",
            Section::Follow => "follow",
        }
    }

    /// The keys that may stand in it.
    pub fn keys(self) -> impl Iterator<Item = &'static Key> {
        KEYS.iter().copied().filter(move |key| key.section == self)
    }
}

/// One key of the policy.
#[derive(Debug, PartialEq)]
pub struct Key {
    /// Where it stands.
    pub section: Section,
    /// Its name.
    pub name: &'static str,
    /// What it takes, with unit and range.
    pub takes: &'static str,
    /// A value that it takes.
    pub example: &'static str,
    /// The value it has when absent, or what its absence means.
    pub default: &'static str,
    /// What it means.
    pub about: &'static str,
}

impl Key {
    /// Path inside the file or the entry: `version`, `guard.slack`.
    pub fn path(&self) -> String {
        match self.section.path() {
            "" => self.name.to_owned(),
            section => format!("{section}.{}", self.name),
        }
    }
}

/// Declares one constant a key, and the list of them all.
macro_rules! keys {
    ($($constant:ident: $section:ident $name:literal, $takes:literal, $example:literal, $default:literal, $about:literal;)*) => {
        $(pub(super) static $constant: Key = Key {
            section: Section::$section,
            name: $name,
            takes: $takes,
            example: $example,
            default: $default,
            about: $about,
        };)*

        /// Every key, in the order of the reference.
        pub static KEYS: &[&Key] = &[$(&$constant),*];
    };
}

keys! {
    VERSION: File "version", "the number 1", "1", "none, it must be given",
        "Version of this schema.";
    STREAMS: File "streams", "a list of entries, at least one", "[{match: \"*\", aim: rate}]", "none, it must be given",
        "The entries; of those that match a stream the first counts.";

    WEEKLY: File "weekly", "a map of day, hour and time_zone", "{day: monday, hour: 6, time_zone: Europe/Paris}", "none, no run of its own",
        "When the daemon makes the week's recommendations.";
    WEEKLY_DAY: Weekly "day", "a day from monday to sunday", "monday", "monday",
        "On which day.";
    WEEKLY_HOUR: Weekly "hour", "a whole number from 0 to 23", "6", "6",
        "At which hour by the clock of the time zone.";
    TIME_ZONE: Weekly "time_zone", "a name of the tz database", "Europe/Paris", "UTC",
        "Whose clock, summer time included.";

    MATCH: Entry "match", "a stream name, with * for any run of characters and ? for one", "\"catalogue.*\"", "none, it must be given",
        "The streams that this entry speaks for.";
    KIND: Entry "kind", "request, job or reply", "request", "request",
        "What is waited for: a service's answer, a piece of work, or a person or partner.";
    AIM: Entry "aim", "rate, finish, carrying_cost or deadline", "rate", "none, and then no advice, since nothing says what waiting costs",
        "What is sought: most worth per second; least time until done; most worth less the cost of waiting; best chance by a deadline.";
    WORTH: Entry "worth", "a map of done, failed and gave_up", "{done: 1.0, gave_up: 0.2}", "its keys' defaults",
        "What each ending is worth, in any one unit.";
    WORTH_DONE: Worth "done", "a number from 1e-12 to 1e12", "1.0", "1",
        "Worth of a completion.";
    WORTH_FAILED: Worth "failed", "a number from -1e12 to 1e12", "0.0", "0",
        "Worth of a failure.";
    WORTH_GAVE_UP: Worth "gave_up", "a number from -1e12 to 1e12", "0.0", "0",
        "Worth of giving up: above 0 where a fallback answers, below 0 where a cancellation costs.";
    FADES: Entry "fades", "a map with exactly one of half_life, zero_at and half_at", "{half_life: 4h}", "none, the worth stays",
        "How the worth of a completion falls with its age.";
    HALF_LIFE: Fades "half_life", "a duration with its unit, above 0", "4h", "none",
        "The worth halves each time this passes.";
    ZERO_AT: Fades "zero_at", "a duration with its unit, above 0", "8h", "none",
        "The worth falls in a straight line to 0 at this age.";
    HALF_AT: Fades "half_at", "a duration with its unit, above 0", "1h", "none",
        "The worth falls fast, then ever more slowly: half at this age, a third at twice, a quarter at three times.";
    ATTEMPT_COST: Entry "attempt_cost", "a number from 0 to 1e12", "0.01", "0",
        "Cost of starting an attempt, in the unit of worth, paid at each start.";
    PAUSE: Entry "pause", "a map of done, failed and gave_up", "{failed: 10ms, gave_up: 10ms}", "its keys' defaults",
        "Time lost before the waiter can start again.";
    PAUSE_DONE: Pause "done", "a duration with its unit, 0 or more", "0s", "0s",
        "Pause after a completion.";
    PAUSE_FAILED: Pause "failed", "a duration with its unit, 0 or more", "10ms", "0s",
        "Pause after a failure.";
    PAUSE_GAVE_UP: Pause "gave_up", "a duration with its unit, 0 or more", "10ms", "0s",
        "Pause after giving up.";
    CARRYING_COST: Entry "carrying_cost", "a number per s, min, h or d, at least 1e-12/s", "0.02/s", "none; `aim: carrying_cost` needs it",
        "What waiting costs, in the unit of worth per unit of time.";
    DEADLINE: Entry "deadline", "a duration with its unit, above 0", "2s", "none; `aim: deadline` needs it",
        "When it must be done, counted from the first start.";
    NOW: Entry "now", "a duration with its unit, above 0, or never", "800ms", "not known",
        "The give-up time in force today.";
    RETRY: Entry "retry", "a map of attempts, load_ceiling, sticky, repeatable and backoff", "{attempts: 3, repeatable: true}", "its keys' defaults",
        "What happens after giving up.";
    ATTEMPTS: Retry "attempts", "a whole number from 1 to 100", "3", "no cap, except 3 for `aim: deadline`",
        "Most attempts of one request, the first included.";
    LOAD_CEILING: Retry "load_ceiling", "a number from 1 to 100", "1.2", "no ceiling",
        "Most attempts a request on average: what the other side can bear.";
    STICKY: Retry "sticky", "from_data, unknown, or a share from 0 to below 1", "from_data", "from_data",
        "How often a retry meets the same slow cause as the attempt it replaces.";
    REPEATABLE: Retry "repeatable", "true or false", "true", "false",
        "Whether doing the work twice harms nobody.";
    BACKOFF: Retry "backoff", "a map of factor and jitter", "{factor: 2, jitter: full}", "its keys' defaults",
        "How the pause after giving up grows from attempt to attempt.";
    FACTOR: Backoff "factor", "a number from 1 to 10", "2", "1",
        "Each pause is this many times the one before.";
    JITTER: Backoff "jitter", "none or full", "full", "none",
        "Whether a pause is drawn evenly between 0 and its full length.";
    GUARD: Entry "guard", "a map of floor, ceiling, largest_step, evidence, window, slack, hysteresis and cool_down", "{floor: 20ms, ceiling: 5s}", "its keys' defaults",
        "What the advice must keep to.";
    FLOOR: Guard "floor", "a duration with its unit, above 0", "20ms", "none; the 5th percentile of completions where a restart is free",
        "Least give-up time.";
    CEILING: Guard "ceiling", "a duration with its unit, above 0", "5s", "none",
        "Largest give-up time.";
    LARGEST_STEP: Guard "largest_step", "a share above 0 and at most 10 (1000%)", "50%", "50%",
        "Largest change in one step, as a share of the time in force.";
    EVIDENCE: Guard "evidence", "a whole number from 1 to 1000000000", "300", "300",
        "Completions needed before advice is given.";
    WINDOW: Guard "window", "a duration with its unit, above 0", "14d", "14d",
        "How far back waits count.";
    SLACK: Guard "slack", "a share from 0 to below 1", "1%", "1%",
        "A change that gains less than this share of the rate is not proposed.";
    HYSTERESIS: Guard "hysteresis", "a share from 0 to below 1", "0.5%", "0.5%",
        "A proposal that stands is replaced only by one that gains at least this share of the rate.";
    COOL_DOWN: Guard "cool_down", "a duration with its unit, 0 or more", "7d", "7d",
        "Rest after a change before the next is proposed.";
    SAMPLED_EVERY: Entry "sampled_every", "a duration with its unit, above 0", "100ms", "none, the waits are as they come",
        "How often a sampler that waits for each answer means to ask; what it did not ask during slow answers is put back.";
    CALLS: Entry "calls", "a list of stream names, at most 100", "[index.search]", "none",
        "The streams that this one waits for in its turn.";

    TELEMETRY: File "telemetry", "a map of stream, resends, left_out, gave_up, failed and done", "{stream: \"{service.name}.{name}\"}", "its keys' defaults",
        "How spans and histograms that come by OTLP become waits.";
    TELEMETRY_STREAM: Telemetry "stream", "a text with names of attributes in braces, {a|b} for the first that is there; name, kind, status and scope are the thing's own", "\"{service.name}.{name}\"", "\"{service.name}.{name}\"",
        "What their streams are called; what a name cannot hold becomes _.";
    RESENDS: Telemetry "resends", "a name of an attribute", "http.request.resend_count", "http.request.resend_count",
        "The attribute that counts how often a request had been sent before.";
    LEFT_OUT: Telemetry "left_out", "a list of attribute=pattern, with * for any run of characters and ? for one", "[\"kind=internal\"]", "none",
        "What is no wait of interest.";
    TELEMETRY_GAVE_UP: Telemetry "gave_up", "a list of attribute=pattern, with * for any run of characters and ? for one", "[\"error.type=*Abandoned*\"]", "none; timeouts and cancellations on the side that waits are taken so",
        "When the waiter has left.";
    TELEMETRY_FAILED: Telemetry "failed", "a list of attribute=pattern, with * for any run of characters and ? for one", "[\"http.response.status_code=5??\"]", "none; a status of error and an error.type are taken so",
        "When it has failed.";
    TELEMETRY_DONE: Telemetry "done", "a list of attribute=pattern, with * for any run of characters and ? for one", "[\"error.type=404\"]", "none; all else is taken so",
        "When it is done, although it looks otherwise.";

    SCRAPE: File "scrape", "a list of entries, at most 1000", "[{url: \"http://127.0.0.1:9100/metrics\"}]", "none",
        "Pages of metrics that the daemon reads on a schedule: the Prometheus text format or OpenMetrics.";
    SCRAPE_URL: Scrape "url", "an address that begins http:// or https://", "\"http://127.0.0.1:9100/metrics\"", "none, it must be given",
        "Where the page is. What it answers is not followed elsewhere.";
    EVERY: Scrape "every", "a duration with its unit, from 1s to 1d", "30s", "60s",
        "How often it is read.";
    TIMEOUT: Scrape "timeout", "a duration with its unit, above 0 and at most 5min", "10s", "10s",
        "How long each step of a reading may take.";
    TRUST: Scrape "trust", "a name of a PEM file", "/etc/outwait/ca.pem", "the system's certificates",
        "The certificates to trust.";
    HEADER_FILE: Scrape "header_file", "a name of a file with one line, `Name: value`, that others may not read", "/etc/outwait/scrape-header", "none",
        "A header to show, such as one with a token.";
    SCRAPE_UNIT: Scrape "unit", "s, ms, us or ns", "ms", "none; histograms whose names end in no unit of time are left out",
        "The unit of histograms whose names end in none.";
    SCRAPE_STREAM: Scrape "stream", "a text with names of labels in braces, {a|b} for the first that is there; name is the metric's own", "\"{name}.{route}\"", "\"{name}\"",
        "What their streams are called; what a name cannot hold becomes _.";
    SCRAPE_LEFT_OUT: Scrape "left_out", "a list of label=pattern, with * for any run of characters and ? for one", "[\"name=go_*\"]", "none",
        "What is no wait of interest.";
    SCRAPE_GAVE_UP: Scrape "gave_up", "a list of label=pattern, with * for any run of characters and ? for one", "[\"code=499\"]", "none; an error_type that speaks of a timeout or a cancellation is taken so",
        "When the waiter has left.";
    SCRAPE_FAILED: Scrape "failed", "a list of label=pattern, with * for any run of characters and ? for one", "[\"code=5??\"]", "none; an error_type is taken so",
        "When it has failed.";
    SCRAPE_DONE: Scrape "done", "a list of label=pattern, with * for any run of characters and ? for one", "[\"code=404\"]", "none; all else is taken so",
        "When it is done, although it looks otherwise.";

    FOLLOW: File "follow", "a list of entries, at most 100", "[{file: /var/log/waits.ndjson}]", "none",
        "Logs that the daemon follows over rotations and restarts, as those named with --follow.";
    FOLLOW_FILE: Follow "file", "a name of a file", "/var/log/waits.ndjson", "none, it must be given",
        "The log.";
    FOLLOW_INPUT: Follow "input", "ndjson, csv, journal or pattern", "ndjson", "found out by its first lines",
        "Its format.";
    FOLLOW_AS: Follow "as", "a stream name", "catalogue.lookup", "none, each record names its stream",
        "One stream for all of its waits, whatever the records call theirs.";
    FOLLOW_PATTERN: Follow "pattern", "a regular expression with captures named after fields", "'^(?<stream>\\S+) (?<elapsed_ms>\\d+)$'", "none, its lines are records",
        "How a line becomes a record.";
    FOLLOW_COLUMNS: Follow "columns", "a text of FIELD=COLUMN or FIELD=COLUMN:UNIT, with commas between", "\"elapsed=duration_ms:ms,at=ts\"", "none, names are those of fields",
        "Which column or key holds which field.";
    FOLLOW_ENDING_OF: Follow "ending_of", "a text of GLOB=ENDING, with commas between", "\"499=gave_up,5??=failed,*=done\"", "none, endings are called done, failed, gave_up and waiting",
        "Which ending a status stands for; the first that matches counts.";
    FOLLOW_TIME_FORMAT: Follow "time_format", "a day and a time of day in the letters of strftime", "\"%d/%b/%Y:%H:%M:%S %z\"", "RFC 3339 or Unix seconds",
        "How times in words are written.";
}

/// Stands for the file where its keys should be and are not.
pub(super) static FILE: Key = Key {
    section: Section::File,
    name: "version",
    takes: "a map of version and streams",
    example: "1",
    default: "none, it must be given",
    about: "The policy itself.",
};

/// Stands for a page where its keys should be and are not.
pub(super) static PAGE: Key = Key {
    section: Section::File,
    name: "scrape",
    takes: "a map of keys, `url` among them",
    example: "[{url: \"http://127.0.0.1:9100/metrics\"}]",
    default: "none",
    about: "A page of metrics.",
};

/// Stands for a log where its keys should be and are not.
pub(super) static LOG: Key = Key {
    section: Section::File,
    name: "follow",
    takes: "a map of keys, `file` among them",
    example: "[{file: /var/log/waits.ndjson}]",
    default: "none",
    about: "A log.",
};

/// Stands for an entry where its keys should be and are not.
pub(super) static ENTRY: Key = Key {
    section: Section::Entry,
    name: "- match",
    takes: "a map of keys, `match` among them",
    example: "\"catalogue.*\"",
    default: "none, it must be given",
    about: "An entry.",
};
