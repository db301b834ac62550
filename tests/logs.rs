//! Lines that were not written for this program become waits: access logs by a pattern, the journal, other names,
//! other endings, other times; and starts and ends that come late, in any order, or in too great a number.
#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/kept.rs"]
mod kept;

use std::io::Cursor;
use std::num::NonZeroUsize;
use std::sync::Arc;

use kept::Kept;
use outwait::intake::{
    Allowed, Format, IntakeError, Mapping, Options, Pattern, PatternError, Report, Source, read,
};
use outwait::wait::{Age, Ending};

impl Kept {
    fn told(&self) -> Vec<(&str, f64, Ending, Option<f64>)> {
        self.0
            .iter()
            .map(|(stream, _, wait)| {
                let Age::Exact(age) = wait.age() else { panic!("{wait:?}") };
                (stream.as_str(), age, wait.ending(), wait.at())
            })
            .collect()
    }
}

fn options() -> Options {
    Options { bad_lines: Allowed::All, threads: NonZeroUsize::new(1), ..Options::default() }
}

fn taken(text: &str, options: &Options) -> Result<(Kept, Report), IntakeError> {
    let source = Source::reader("log", Cursor::new(text.as_bytes().to_vec()));
    read(vec![source], options, Kept::default(), &mut |_| ())
}

fn patterned(expression: &str) -> Options {
    Options { pattern: Some(Arc::new(Pattern::new(expression).unwrap())), ..options() }
}

// ---- Patterns

/// The line is the example of the Apache HTTP Server's documentation of its combined log format, with the time taken
/// (`%D`, microseconds) and an upstream name behind it, as many servers are set to write.
const ACCESS: &str = "\
127.0.0.1 - frank [10/Oct/2000:13:55:36 -0700] \"GET /apache_pb.gif HTTP/1.0\" 200 2326 18300 catalogue.lookup
127.0.0.1 - frank [10/Oct/2000:13:55:37 -0700] \"GET /apache_pb.gif HTTP/1.0\" 499 0 2500000 catalogue.lookup
127.0.0.1 - frank [10/Oct/2000:13:55:38 -0700] \"GET /apache_pb.gif HTTP/1.0\" 502 0 700 index.search
127.0.0.1 - frank [10/Oct/2000:13:55:39 -0700] \"GET /apache_pb.gif HTTP/1.0\" 200 12 - index.search
a line of something else
";

const COMBINED: &str = r#"\[(?<at>[^]]+)\] "[^"]*" (?<ending>\d{3}) \d+ (?<elapsed_us>\S+) (?<stream>\S+)$"#;

#[test]
fn an_access_log_becomes_waits() {
    let mapping = Mapping::default().with_endings("499=gave_up,5??=failed,*=done").unwrap();
    let mapping = mapping.with_time_format("%d/%b/%Y:%H:%M:%S %z").unwrap();
    let options = Options { mapping: Some(Arc::new(mapping)), ..patterned(COMBINED) };
    let (kept, report) = taken(ACCESS, &options).unwrap();
    // `date -u -d '2000-10-10T13:55:36-07:00' +%s`
    let at = 971_211_336.0;
    assert_eq!(
        kept.told(),
        [
            ("catalogue.lookup", 0.0183, Ending::Done, Some(at)),
            ("catalogue.lookup", 2.5, Ending::GaveUp, Some(at + 1.0)),
            ("index.search", 0.0007, Ending::Failed, Some(at + 2.0)),
        ]
    );
    assert_eq!(report.files[0].format, Some(Format::Pattern));
    let bad: Vec<_> = report.bad.examples.iter().map(|bad| (bad.line, bad.field, bad.kind)).collect();
    assert_eq!(bad, [(4, "elapsed", "missing"), (5, "line", "not like the pattern")]);
    // By default no line may be missed.
    let strict = Options { bad_lines: Allowed::AtMost(0), ..options };
    assert!(matches!(taken(ACCESS, &strict), Err(IntakeError::BadLines { .. })));
}

#[test]
fn a_status_without_a_rule_is_refused_and_times_stay_checked() {
    let mapping = Mapping::default().with_endings("200=done").unwrap();
    let options = Options { mapping: Some(Arc::new(mapping)), ..patterned(COMBINED) };
    let Err(IntakeError::NoWaits { report }) = taken(ACCESS, &options) else { panic!("it read a wait") };
    let bad: Vec<_> = report.bad.examples.iter().map(|bad| (bad.line, bad.field, bad.kind)).collect();
    assert_eq!(bad[0], (1, "at", "not a time"));
    assert_eq!(bad[1], (2, "ending", "not an ending"));
}

#[test]
fn patterns_that_cannot_work_are_refused() {
    let refused = |expression: &str| Pattern::new(expression).unwrap_err();
    assert_eq!(refused("(?<took>.*)"), PatternError::Capture { name: "took".into() });
    assert_eq!(refused("(?<elapsed>.*)(?<elapsed_ms>.*)"), PatternError::Twice { field: "elapsed" });
    assert_eq!(refused("(?<stream>.*)"), PatternError::NoAge);
    assert!(matches!(refused("(?<elapsed>"), PatternError::Expression { .. }));
    // An expression that unrolls to billions of states is too large, not slow.
    assert!(matches!(refused("(?<elapsed>((a{1000}){1000}){1000})"), PatternError::Expression { .. }));
    assert_eq!(refused(&"a".repeat(5_000)), PatternError::Long);
}

/// Backtracking would take ages over such a line.
#[test]
fn a_hostile_line_costs_no_more_than_its_length() {
    let line = "a".repeat(200_000) + "\n(took 1.5)\n";
    let (kept, report) = taken(
        &line,
        &Options {
            one_stream: Some("s".into()),
            ..patterned(r"^(?:(?:a+)+b|\(took (?<elapsed>[0-9.]+)\))$")
        },
    )
    .unwrap();
    assert_eq!(kept.told(), [("s", 1.5, Ending::Done, None)]);
    assert_eq!(report.bad.count, 1);
}

#[test]
fn a_pattern_without_lines_for_it_says_so() {
    let asked = Options { format: Some(Format::Pattern), ..options() };
    assert!(matches!(taken("x\n", &asked), Err(IntakeError::NoPattern { .. })));
}

// ---- Other names

#[test]
fn columns_and_keys_by_other_names() {
    let mapping =
        || Mapping::default().with_columns("elapsed=duration_ms:ms,at=ts:ms,stream=service,ending=status");
    let mapping = mapping().unwrap().with_endings("2??=done,*=failed").unwrap();
    let options = Options { mapping: Some(Arc::new(mapping)), ..options() };
    let expected = [
        ("catalogue.lookup", 0.0183, Ending::Done, Some(1_796_040_000.5)),
        ("index.search", 0.25, Ending::Failed, Some(1_796_040_001.0)),
    ];
    let csv = "ts,service,duration_ms,status,elapsed\n1796040000500,catalogue.lookup,18.3,204,7\n\
               1796040001000,index.search,250,500,7\n";
    assert_eq!(taken(csv, &options).unwrap().0.told(), expected);
    let ndjson = "{\"ts\":1796040000500,\"service\":\"catalogue.lookup\",\"duration_ms\":18.3,\"status\":204,\"elapsed\":7}\n\
                  {\"ts\":1796040001000,\"service\":\"index.search\",\"duration_ms\":250,\"status\":\"500\"}\n";
    assert_eq!(taken(ndjson, &options).unwrap().0.told(), expected);
    let missing = taken("ts,service,duration,status\n", &options);
    let Err(IntakeError::Header { source, .. }) = missing else { panic!("no error") };
    assert_eq!(
        source.to_string(),
        "there is no column \"duration_ms\"; the nearest is \"duration\", and a field was to be read from it; map one that is there"
    );
}

// ---- The journal

/// Fields and values of the first entry are those of the example in systemd's "Journal Export Formats"; the messages of
/// the others are ours.
const JOURNAL: &str = r#"{"__CURSOR":"s=739ad463348b4ceca5a9e69c95a3c93f;i=4ece7;b=6c7c6013a26343b29e964691ff25d04c","__REALTIME_TIMESTAMP":"1342540861416409","__MONOTONIC_TIMESTAMP":"21415215982","_TRANSPORT":"syslog","PRIORITY":"4","SYSLOG_IDENTIFIER":"gdm-password]","MESSAGE":"AccountsService-DEBUG(+): ActUserManager: ignoring unspecified session '8' since it's not graphical: Success","_HOSTNAME":"epsilon"}
{"__REALTIME_TIMESTAMP":"1342540862500000","_SYSTEMD_UNIT":"courier@2.service","MESSAGE":"{\"elapsed\":0.25,\"ending\":\"failed\"}"}
{"__REALTIME_TIMESTAMP":"1342540863000000","_SYSTEMD_UNIT":"courier@2.service","MESSAGE":"{\"elapsed\":1,\"at\":7,\"stream\":\"own.name\"}"}
{"__REALTIME_TIMESTAMP":"1342540864000000","_SYSTEMD_UNIT":["a.service","b.service"],"MESSAGE":[116,111,111,107,32,49,56,109,115,255]}
{"__REALTIME_TIMESTAMP":"1342540865000000","_SYSTEMD_UNIT":"a.service","MESSAGE":null}
{"__REALTIME_TIMESTAMP":"1342540866000000","_SYSTEMD_UNIT":"a.service","MESSAGE":"{\"elapsed\":-1}"}
{"__REALTIME_TIMESTAMP":"1342540867000000","MESSAGE":"{\"elapsed\":1}"}
{"__REALTIME_TIMESTAMP":17,"MESSAGE":
"#;

#[test]
fn messages_of_the_journal_become_waits() {
    let options = Options { ..patterned(r"^took (?<elapsed_ms>\d+)ms") };
    let (kept, report) = taken(JOURNAL, &options).unwrap();
    assert_eq!(
        kept.told(),
        [
            ("courier-2", 0.25, Ending::Failed, Some(1_342_540_862.5)),
            ("own.name", 1.0, Ending::Done, Some(7.0)),
            ("a", 0.018, Ending::Done, Some(1_342_540_864.0)),
        ]
    );
    assert_eq!(report.files[0].format, Some(Format::Journal));
    assert_eq!(report.left_out.other_messages, 2);
    let bad: Vec<_> = report.bad.examples.iter().map(|bad| (bad.line, bad.field, bad.kind)).collect();
    assert_eq!(bad, [(6, "elapsed", "negative"), (7, "stream", "missing"), (8, "line", "not JSON")]);
    // Without a pattern only records speak.
    let (kept, report) = taken(JOURNAL, &self::options()).unwrap();
    assert_eq!((kept.0.len(), report.left_out.other_messages), (2, 3));
    let nothing = taken("{\"__REALTIME_TIMESTAMP\":\"1\",\"MESSAGE\":\"hello\"}\n", &self::options());
    assert!(nothing.err().unwrap().to_string().contains("none of its messages is a record"));
}

// ---- Starts and ends

fn start(id: u32, at: f64) -> String {
    format!("{{\"stream\":\"s\",\"id\":\"{id}\",\"started\":{at}}}\n")
}

fn end(id: u32, at: f64) -> String {
    format!("{{\"stream\":\"s\",\"id\":\"{id}\",\"ended\":{at}}}\n")
}

#[test]
fn ends_may_come_before_their_starts_and_very_late() {
    let mut text = end(0, 5.0) + &start(1, 0.0);
    for id in 2..5_000 {
        text += &start(id, f64::from(id));
        text += &end(id, f64::from(id) + 0.5);
    }
    text += &(start(0, 2.0) + &end(1, 9_000.0));
    let (kept, report) = taken(&text, &Options { most_open: 4, ..options() }).unwrap();
    let told = kept.told();
    assert_eq!(told.len(), 5_000);
    assert_eq!(told[4_998], ("s", 3.0, Ending::Done, Some(5.0)));
    assert_eq!(told[4_999], ("s", 9_000.0, Ending::Done, Some(9_000.0)));
    assert_eq!((report.pairs.joined, report.pairs.dropped, report.pairs.let_go), (5_000, 0, 0));
}

/// Too many at once: ends without a start go first, then the oldest starts become what they are so far.
#[test]
fn halves_beyond_the_bound_are_counted() {
    let mut text: String = (0..3).map(|id| end(id, 1.0)).collect();
    text += &(10..20).map(|id| start(id, f64::from(id))).collect::<String>();
    let (kept, report) = taken(&text, &Options { most_open: 5, ..options() }).unwrap();
    assert_eq!((report.pairs.dropped, report.pairs.let_go, report.pairs.ends_alone), (3, 5, 3));
    // When the 16th start came, five starts were open and the first of them had waited 5 s; and so on. At the end the
    // four that are left have waited to 19 s, and the last says nothing.
    let waiting = |age| ("s", age, Ending::Waiting);
    let told: Vec<_> =
        kept.told().into_iter().map(|(stream, age, ending, _)| (stream, age, ending)).collect();
    assert_eq!(told, [5.0, 5.0, 5.0, 5.0, 5.0, 4.0, 3.0, 2.0, 1.0].map(waiting));
    assert_eq!((report.pairs.open, report.pairs.open_unseen), (4, 1));
    // An end whose start was let go is an end alone.
    let (_, report) = taken(&(text + &end(10, 30.0)), &Options { most_open: 5, ..options() }).unwrap();
    assert_eq!(report.pairs.ends_alone, 4);
}
