//! Files of waits become waits: each format, what is refused and with what words, and that threads change nothing.

#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

#[path = "support/kept.rs"]
mod kept;

use std::io::{self, Cursor, Read, Write};
use std::num::NonZeroUsize;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use kept::Kept;
use outwait::intake::{
    Allowed, Because, Format, HeaderError, IntakeError, Measure, Options, Record, Report, Sink, Source, read,
};
use outwait::wait::{Age, Ending, Wait};
use proptest::prelude::*;

type Owned = (String, Option<String>, Wait);

impl Kept {
    fn waits(&self) -> Vec<Wait> {
        self.0.iter().map(|(_, _, wait)| *wait).collect()
    }

    fn ages(&self) -> Vec<f64> {
        self.waits().iter().map(exact).collect()
    }

    fn streams(&self) -> Vec<&str> {
        self.0.iter().map(|(stream, _, _)| stream.as_str()).collect()
    }
}

fn exact(wait: &Wait) -> f64 {
    match wait.age() {
        Age::Exact(age) => age,
        Age::Between { .. } => panic!("{wait:?} has no exact age"),
    }
}

fn one_thread() -> Options {
    Options { threads: NonZeroUsize::new(1), ..Options::default() }
}

fn lenient() -> Options {
    Options { bad_lines: Allowed::All, ..one_thread() }
}

fn source(name: &str, bytes: impl AsRef<[u8]>) -> Source {
    Source::reader(name, Cursor::new(bytes.as_ref().to_vec()))
}

fn read_bytes(name: &str, bytes: impl AsRef<[u8]>, options: &Options) -> Result<(Kept, Report), IntakeError> {
    read(vec![source(name, bytes)], options, Kept::default(), &mut |_| ())
}

fn read_text(text: &str) -> (Kept, Report) {
    read_bytes("waits", text, &one_thread()).unwrap()
}

fn gzip(bytes: &[u8]) -> Vec<u8> {
    let mut encoder = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    encoder.write_all(bytes).unwrap();
    encoder.finish().unwrap()
}

fn zstd(bytes: &[u8]) -> Vec<u8> {
    zstd::encode_all(bytes, 0).unwrap()
}

/// Line, field and reason of the bad lines spelled out.
fn found(report: &Report) -> Vec<(u64, &str, &str)> {
    report.bad.examples.iter().map(|bad| (bad.line, bad.field, bad.reason.as_str())).collect()
}

// ---- Records

/// 2026-11-30T00:00:00Z is so many days after 1970-01-01.
const NOVEMBER_30: f64 = 20_787.0 * 86_400.0;

#[test]
fn a_record_with_every_field() {
    let line = concat!(
        r#"{"stream":"catalogue.lookup","at":"2026-11-30T10:00:00Z","elapsed":0.0183,"ending":"gave_up","#,
        r#""attempt":2,"id":"r-8831","entered":0.01,"count":3,"host":["any",{"thing":null}]}"#,
    );
    let (kept, report) = read_text(line);
    let wait = Wait::new(0.0183, Ending::GaveUp).unwrap().with_attempt(2).unwrap();
    let wait = wait.with_entered(0.01).unwrap().with_count(3).unwrap();
    let wait = wait.with_at(NOVEMBER_30 + 36_000.0).unwrap();
    assert_eq!(kept.0, [("catalogue.lookup".into(), Some("r-8831".into()), wait)]);
    assert_eq!((report.lines, report.waits, report.bad.count), (1, 1, 0));
    assert_eq!((report.oldest, report.newest), (wait.at(), wait.at()));
}

#[test]
fn what_is_left_out_has_its_default() {
    let (kept, _) = read_text(r#"{"elapsed":"18.3ms","stream":"s","at":null,"ending":null}"#);
    assert_eq!(kept.0, [("s".into(), None, Wait::new(0.0183, Ending::Done).unwrap())]);
}

#[test]
fn ages_in_every_spelling() {
    for (spelling, seconds) in [
        (r#""elapsed":"2d 4h""#, 187_200.0),
        (r#""elapsed":"0.25""#, 0.25),
        (r#""elapsed":1.83e-2"#, 0.0183),
        (r#""elapsed_ms":18.3"#, 0.0183),
        (r#""elapsed_us":18300"#, 0.0183),
        (r#""elapsed_ns":18300000"#, 0.0183),
        (r#""elapsed_s":"18.3ms""#, 0.0183),
        (r#""\u0065lapsed":7"#, 7.0),
        (r#" "elapsed" : 7 "#, 7.0),
    ] {
        let (kept, _) = read_text(&format!(r#"{{"stream":"s",{spelling}}}"#));
        assert_eq!(kept.ages(), [seconds], "{spelling}");
    }
}

#[test]
fn an_id_in_figures_keeps_them() {
    let (kept, _) = read_text(r#"{"stream":"s","elapsed":1,"id":18446744073709551615}"#);
    assert_eq!(kept.0[0].1.as_deref(), Some("18446744073709551615"));
}

#[test]
fn buckets() {
    for (spelling, over, upto) in [
        (r#""over":0.1,"upto":0.25"#, 0.1, 0.25),
        (r#""over":"100ms","upto":"inf""#, 0.1, f64::INFINITY),
        (r#""over_ms":5,"upto":"+Inf""#, 0.005, f64::INFINITY),
    ] {
        let (kept, _) = read_text(&format!(r#"{{"stream":"s",{spelling},"count":40}}"#));
        let wait = Wait::between(over, upto, Ending::Done).unwrap().with_count(40).unwrap();
        assert_eq!(kept.waits(), [wait], "{spelling}");
    }
}

#[test]
fn start_and_end_in_one_line() {
    let (kept, _) =
        read_text(r#"{"stream":"s","started":"1970-01-01T00:01:40Z","ended":130.5,"ending":"failed"}"#);
    assert_eq!(kept.waits(), [Wait::new(30.5, Ending::Failed).unwrap().with_at(130.5).unwrap()]);
    // An age beside them is the age; they only say when.
    let (kept, _) = read_text(r#"{"stream":"s","started":100,"elapsed":30}"#);
    assert_eq!(kept.waits(), [Wait::new(30.0, Ending::Done).unwrap().with_at(130.0).unwrap()]);
}

// ---- Pairs

#[test]
fn starts_and_ends_in_any_order() {
    let lines = [
        r#"{"id":"a","stream":"s","started":100}"#,
        r#"{"id":"b","stream":"s","ended":111,"ending":"gave_up"}"#,
        r#"{"id":"a","stream":"other","started":90}"#,
        r#"{"id":"a","stream":"s","ended":105}"#,
        r#"{"id":"b","stream":"s","started":101,"attempt":1}"#,
        r#"{"id":"a","stream":"s","started":106,"attempt":2}"#,
        r#"{"id":"never","stream":"s","ended":107}"#,
        r#"{"id":"last","stream":"s","started":111}"#,
    ];
    let (kept, report) = read_text(&lines.join("\n"));
    let wait = |age, ending, at, attempt| {
        Wait::new(age, ending).unwrap().with_at(at).unwrap().with_attempt(attempt).unwrap()
    };
    let expected = [
        ("s", "a", wait(5.0, Ending::Done, 105.0, 1)),
        ("s", "b", wait(10.0, Ending::GaveUp, 111.0, 1)),
        // Starts without an end are open, seen last at the newest time: in the order of the file.
        ("other", "a", wait(21.0, Ending::Waiting, 111.0, 1)),
        ("s", "a", wait(5.0, Ending::Waiting, 111.0, 2)),
    ];
    assert_eq!(kept.0, expected.map(|(stream, id, wait)| (stream.into(), Some(id.into()), wait)));
    assert_eq!((report.pairs.joined, report.pairs.open, report.pairs.seen), (2, 2, Some(111.0)));
    assert_eq!((report.pairs.open_unseen, report.pairs.ends_alone), (1, 1));
    assert_eq!(report.pairs.ends_alone_ids, ["never"]);
    assert_eq!((report.waits, report.lines), (4, 8));
}

#[test]
fn pairs_over_files_and_formats() {
    let sources = vec![
        source("starts.ndjson", r#"{"id":"7","stream":"s","started":100}"#),
        source("ends.csv", "stream,ended_ms,id\ns,104500,7\n"),
    ];
    let (kept, report) = read(sources, &one_thread(), Kept::default(), &mut |_| ()).unwrap();
    assert_eq!(kept.ages(), [4.5]);
    let formats: Vec<_> = report.files.iter().map(|file| file.format).collect();
    assert_eq!(formats, [Some(Format::Ndjson), Some(Format::Csv)]);
}

#[test]
fn halves_that_do_not_fit_are_bad_lines() {
    let lines = [
        r#"{"id":"a","stream":"s","started":100}"#,
        r#"{"id":"a","stream":"s","started":101}"#,
        r#"{"id":"a","stream":"s","ended":99}"#,
        r#"{"id":"b","stream":"s","started":100}"#,
        r#"{"id":"b","stream":"s","ended":100}"#,
        r#"{"stream":"s","started":100}"#,
        r#"{"id":"c","stream":"s","started":1764547200000}"#,
        r#"{"id":"d","stream":"s","ended":100,"count":2}"#,
        r#"{"stream":"s","elapsed":1}"#,
    ];
    let (kept, report) = read_bytes("waits", lines.join("\n"), &lenient()).unwrap();
    assert_eq!(kept.ages(), [1.0]);
    assert_eq!(
        found(&report),
        [
            (
                2,
                "started",
                "a wait with the id \"a\" has started already, and is still without the other half"
            ),
            (3, "ended", "it lies 1.00 s before the start"),
            (5, "elapsed", "0 is not an age in seconds above 0 and at most 1e10"),
            (6, "id", "`started` stands alone, and nothing ties it to the other half of the wait"),
            (7, "started", "\"1764547200000\" is not a time"),
            (8, "count", "it contradicts `ended`"),
        ]
    );
}

// ---- Bad lines

#[test]
fn bad_lines_say_field_reason_and_remedy() {
    for (line, field, reason, remedy) in [
        (r#"{"stream":"s"}"#, "elapsed", "missing", "`over` and `upto`"),
        (r#"{"elapsed":1}"#, "stream", "missing", "--stream NAME"),
        (r#"{"stream":"s","elapsed":0}"#, "elapsed", "0 is not an age", "\"over\":0"),
        (r#"{"stream":"s","elapsed":-3}"#, "elapsed", "-3 is not an age", "above 0"),
        (r#"{"stream":"s","elapsed":1e12}"#, "elapsed", "1000000000000 is not an age", "another unit"),
        (r#"{"stream":"s","elapsed":NaN}"#, "elapsed", "not JSON", "no NaN"),
        (r#"{"stream":"s","elapsed":Infinity}"#, "elapsed", "not JSON", "no infinity"),
        (r#"{"stream":"s","elapsed":1e999}"#, "elapsed", "not JSON: number out of range", "JSON"),
        (r#"{"stream":"s","elapsed":"NaN"}"#, "elapsed", "\"NaN\" is not a duration", "250ms"),
        (r#"{"stream":"s","elapsed":"soon"}"#, "elapsed", "\"soon\" is not a duration", "250ms"),
        (r#"{"stream":"s","elapsed":true}"#, "elapsed", "it is true or false", "seconds (0.25)"),
        (r#"{"stream":"s","elapsed":[1]}"#, "elapsed", "it is an array", "seconds (0.25)"),
        (r#"{"stream":"s","elapsed":1,"elapsed":1}"#, "elapsed", "twice", "keep one"),
        (r#"{"stream":"s","elapsed":1,"elapsed_ms":1000}"#, "elapsed", "twice", "keep one"),
        (r#"{"stream":5,"elapsed":1}"#, "stream", "it is a number", "quotation marks"),
        (r#"{"stream":"a b","elapsed":1}"#, "stream", "holds ' '", "letters, digits"),
        (r#"{"stream":"","elapsed":1}"#, "stream", "no name", "--stream NAME"),
        (r#"{"stream":"s","elapsed":1,"ending":"ok"}"#, "ending", "\"ok\" is not an ending", "gave_up"),
        (r#"{"stream":"s","elapsed":1,"ending":1}"#, "ending", "it is a number", "quotation marks"),
        (r#"{"stream":"s","elapsed":1,"at":"noon"}"#, "at", "\"noon\" is not a time", "RFC 3339"),
        (r#"{"stream":"s","elapsed":1,"at":1764547200250}"#, "at", "not a time", "not milliseconds"),
        (r#"{"stream":"s","elapsed":1,"at":false}"#, "at", "true or false", "RFC 3339"),
        (r#"{"stream":"s","elapsed":1,"attempt":0}"#, "attempt", "count from 1", "first try 1"),
        (r#"{"stream":"s","elapsed":1,"attempt":1.5}"#, "attempt", "not a whole number", "whole number"),
        (r#"{"stream":"s","elapsed":1,"attempt":5e9}"#, "attempt", "not a whole number", "whole number"),
        (r#"{"stream":"s","elapsed":1,"count":0}"#, "count", "0 is not a count", "how many equal waits"),
        (r#"{"stream":"s","elapsed":1,"count":-1}"#, "count", "not a whole number", "whole number"),
        (r#"{"stream":"s","elapsed":1,"count":2e15}"#, "count", "is not a count", "how many equal waits"),
        (r#"{"stream":"s","elapsed":1,"entered":1}"#, "entered", "cannot begin at age 1", "below the age"),
        (r#"{"stream":"s","elapsed":1,"over":1}"#, "over", "contradicts `elapsed`", "either"),
        (r#"{"stream":"s","elapsed":1,"upto":1}"#, "upto", "contradicts `elapsed`", "either"),
        (r#"{"stream":"s","over":1}"#, "upto", "missing", "\"inf\""),
        (r#"{"stream":"s","upto":1}"#, "over", "missing", "give it"),
        (r#"{"stream":"s","over":2,"upto":1}"#, "upto", "empty", "`over` below `upto`"),
        (r#"{"stream":"s","started":5,"ended":4}"#, "ended", "1.00 s before the start", "two clocks"),
        (r#"{"stream":"s","started":-5,"ended":4}"#, "started", "\"-5\" is not a time", "RFC 3339"),
        (r#"{"stream":"s","elapsed":1,"id":1.5}"#, "id", "a broken number", "quotation marks"),
        (r#"{"stream":"s","elapsed":1"#, "line", "not JSON: EOF", "one JSON object a line"),
        (r#"{"stream":"s","elapsed":1}}"#, "line", "not JSON: trailing", "one JSON object a line"),
        (r#"["s",1]"#, "line", "not JSON", "one JSON object a line"),
        ("what?", "line", "not JSON", "one JSON object a line"),
    ] {
        let good = r#"{"stream":"s","elapsed":1}"#;
        let (kept, report) = read_bytes("w.ndjson", format!("{good}\n{line}\n{good}"), &lenient()).unwrap();
        assert_eq!(kept.0.len(), 2, "{line}");
        let [bad] = &report.bad.examples[..] else { panic!("{line}: {:?}", report.bad) };
        assert_eq!((bad.file.as_str(), bad.line, bad.field), ("w.ndjson", 2, field), "{line}: {bad}");
        assert!(bad.reason.contains(reason), "{line}: {bad}");
        assert!(bad.remedy.contains(remedy), "{line}: {bad}");
    }
}

#[test]
fn lines_that_are_not_text_or_too_long() {
    let mut bytes = b"{\"stream\":\"s\",\"elapsed\":1}\n{\"stream\":\"\xff\",\"elapsed\":1}\n".to_vec();
    let note = "x".repeat(10_000_000);
    bytes.extend(format!("{{\"stream\":\"s\",\"elapsed\":1,\"note\":\"{note}\"}}\n").bytes());
    bytes.extend(b"\0\0\0\n{\"stream\":\"s\",\"elapsed\":2}");
    let (kept, report) = read_bytes("waits", &bytes, &lenient()).unwrap();
    assert_eq!(kept.ages(), [1.0, 2.0]);
    assert_eq!(
        found(&report),
        [
            (2, "line", "the line is not UTF-8 text"),
            (3, "line", "the line is longer than 1048576 bytes"),
            (4, "line", "not JSON: expected value at column 1")
        ]
    );
    // The same where a long line fits into a block.
    let options = Options { line_bytes: 100, ..lenient() };
    let note = "x".repeat(100);
    let text = format!(
        "{{\"stream\":\"s\",\"elapsed\":1}}\n{{\"stream\":\"s\",\"elapsed\":1,\"note\":\"{note}\"}}\n"
    );
    let (kept, report) = read_bytes("waits", text, &options).unwrap();
    assert_eq!((kept.ages(), found(&report)[0].0), (vec![1.0], 2));
}

#[test]
fn more_bad_lines_than_allowed_end_it_with_the_whole_account() {
    let mut text = String::new();
    for i in 0..100 {
        text += match i % 4 {
            0 => "{\"stream\":\"s\",\"elapsed\":1}\n",
            1 => "{\"stream\":\"s\",\"elapsed\":0}\n",
            2 => "{\"stream\":\"s\",\"elapsed\":0,\"ending\":\"failed\"}\n",
            _ => "{\"stream\":\"s\",\"elapsed\":-1}\n",
        };
    }
    let allow = |number| Options { bad_lines: Allowed::AtMost(number), ..one_thread() };
    let (kept, report) = read_bytes("waits", &text, &allow(75)).unwrap();
    assert_eq!((kept.0.len(), report.bad.count), (25, 75));
    let Err(error) = read_bytes("waits", &text, &allow(74)) else { panic!() };
    assert_eq!(
        error.to_string(),
        "75 of 100 lines are bad, and 74 are allowed; the first is waits:2: elapsed: 0 is not an age in \
         seconds above 0 and at most 1e10; a wait too short for the clock is \"over\":0 and \"upto\": the \
         clock's step, in place of `elapsed`"
    );
    let IntakeError::BadLines { report, .. } = error else { panic!() };
    let counts: Vec<_> = report.bad.by_reason.iter().map(|c| (c.field, c.reason, c.lines)).collect();
    assert_eq!(counts, [("elapsed", "zero", 50), ("elapsed", "negative", 25)]);
    assert_eq!(report.bad.examples.len(), 20);
    assert_eq!(report.files[0].bad, 75);
}

// ---- CSV

#[test]
fn csv_with_quotes_units_and_other_columns() {
    let text = "\u{feff}id,Elapsed_MS, stream ,ending,\"no\ntes\",at,attempt,entered\r\n\
                a,18.3,s,,\"line\nbreak, and \"\"marks\"\"\",2026-11-30T10:00:00.5+01:00,,\r\n\
                \r\n\
                7,2 s,\"s\",gave_up,,1764547200.25,2,1s";
    let (kept, report) = read_text(text);
    let first = Wait::new(0.0183, Ending::Done).unwrap().with_at(NOVEMBER_30 + 9.0 * 3600.0 + 0.5).unwrap();
    let second = Wait::new(2.0, Ending::GaveUp).unwrap().with_attempt(2).unwrap();
    let second = second.with_entered(1.0).unwrap().with_at(1_764_547_200.25).unwrap();
    assert_eq!(kept.0, [("s".into(), Some("a".into()), first), ("s".into(), Some("7".into()), second)]);
    assert_eq!((report.lines, report.files[0].format), (6, Some(Format::Csv)));
}

#[test]
fn csv_rows_that_are_bad_have_their_line() {
    let text = "elapsed,stream,note\n1,s,\n\n0,s,\"a\nb\"\n2,s\n3,s,,\n4,a b,\nx,s,\n5,s,\"c\n6,s,\n";
    let (kept, report) = read_bytes("w.csv", text, &lenient()).unwrap();
    assert_eq!(kept.ages(), [1.0, 6.0]);
    assert_eq!(
        found(&report),
        [
            (4, "elapsed", "0 is not an age in seconds above 0 and at most 1e10"),
            (6, "line", "the row has 2 cells, the header 3"),
            (7, "line", "the row has 4 cells, the header 3"),
            (8, "stream", "the stream name holds ' '"),
            (9, "elapsed", "\"x\" is not a duration"),
            (10, "line", "a quotation mark is never closed"),
        ]
    );
    assert_eq!(report.lines, 11);
}

#[test]
fn csv_by_semicolon_and_tab() {
    for delimiter in [';', '\t'] {
        let text = "stream,elapsed,at\ns,1,2026-11-30T10:00:00Z\n".replace(',', &delimiter.to_string());
        assert_eq!(read_text(&text).0.ages(), [1.0]);
    }
}

#[test]
fn headers_that_cannot_be_used() {
    let header = |text: &str| match read_bytes("w.csv", text, &one_thread()) {
        Err(IntakeError::Header { source, .. }) => source,
        other => panic!("{text}: {other:?}"),
    };
    let missing = |field, nearest: &str| HeaderError::Missing { field, nearest: Some(nearest.into()) };
    assert_eq!(header("stream,elapsd,at\ns,1,2\n"), missing("elapsed", "elapsd"));
    assert_eq!(header("stream,Elapsed Time\ns,1\n"), missing("elapsed", "Elapsed Time"));
    assert_eq!(header("strm,elapsed\ns,1\n"), missing("stream", "strm"));
    assert_eq!(header("stream,latency\ns,1\n"), missing("elapsed", "latency"));
    assert_eq!(header("stream,upto\ns,1\n"), HeaderError::Missing { field: "over", nearest: None });
    assert_eq!(header("stream,elapsed,elapsed_ms\ns,1,1\n"), HeaderError::Twice { field: "elapsed" });
    let error = read_bytes("w.csv", "stream,elapsd\ns,1\n", &one_thread()).unwrap_err().to_string();
    assert!(error.contains("no column `elapsed`; the nearest is \"elapsd\""), "{error}");
    // Without a stream's column the name must come from elsewhere.
    let named = Options { streams: Some(outwait::glob::Glob::new("s").unwrap()), ..one_thread() };
    assert_eq!(read_bytes("w.csv", "elapsed\n1\n", &named).unwrap().0.streams(), ["s"]);
}

// ---- SWF

/// Written after the field list of the format's definition, version 2.2 (Feitelson, Parallel Workloads Archive;
/// from memory): 1 job, 2 submit, 3 wait, 4 run, 5 processors, ... 11 status, 12 user, 13 group, 14 executable,
/// 15 queue, 16 partition, 17 preceding job, 18 think time. Status 0 failed, 1 completed, 5 cancelled; 2, 3, 4
/// are parts of a job that was checkpointed.
const JOBS: &str = "\
; Version: 2.2
;   Computer: Fernhollow scanning room
;
; UnixStartTime: 1000000
; Queue: 3 [nightly]
   1   0  10  100  4 -1 -1  4  200 -1 1  1 1 1  3 -1 -1 -1
   2   5  20   50  4 -1 -1  4  200 -1 0  1 1 1 -1  2 -1 -1
   3   6  30   70  4 -1 -1  4  200 -1 5  1 1 1  0 -1 -1 -1
   4   7  40   -1 -1 -1 -1  4  200 -1 5  1 1 1  3 -1 -1 -1
   5   8  50    0  0 -1 -1  4  200 -1 5  1 1 1  3 -1 -1 -1
   6   9   0   60  4 -1 -1  4  200 -1 1  1 1 1  3 -1 -1 -1
   7  10  -1   80  4 -1 -1  4  200 -1 1  1 1 1  3 -1 -1 -1
   8  11  15   30  4 -1 -1  4  200 -1 2  1 1 1  3 -1 -1 -1
   9  12  15   30  4 -1 -1  4  200 -1 4  1 1 1  3 -1 -1 -1
; a word in between
  10  13  25   90  4 -1 -1  4  200 -1 -1 1 1 1  3 -1 -1 -1
";

#[test]
fn swf_wait_times() {
    let (kept, report) = read_text(JOBS);
    let wait = |age, ending, at| Wait::new(age, ending).unwrap().with_at(1e6 + at).unwrap();
    let expected = [
        ("queue-3", "1", wait(10.0, Ending::Done, 10.0)),
        ("partition-2", "2", wait(20.0, Ending::Done, 25.0)),
        ("queue-0", "3", wait(30.0, Ending::Done, 36.0)),
        ("queue-3", "4", wait(40.0, Ending::GaveUp, 47.0)),
        ("queue-3", "5", wait(50.0, Ending::GaveUp, 58.0)),
        // In whole seconds 0 is anything below 1.
        ("queue-3", "6", Wait::between(0.0, 1.0, Ending::Done).unwrap().with_at(1e6 + 9.0).unwrap()),
        ("queue-3", "10", wait(25.0, Ending::Done, 38.0)),
    ];
    assert_eq!(kept.0, expected.map(|(stream, id, wait)| (stream.into(), Some(id.into()), wait)));
    assert_eq!((report.left_out.unmeasured, report.left_out.partial), (1, 2));
    let comments: Vec<_> = report.comments.iter().map(|comment| comment.text.as_str()).collect();
    let header = ["Version: 2.2", "Computer: Fernhollow scanning room", "UnixStartTime: 1000000"];
    assert_eq!(comments[..3], header);
    assert_eq!(comments[3..], ["Queue: 3 [nightly]", "a word in between"]);
}

#[test]
fn swf_run_times() {
    let options = Options { measure: Measure::Run, ..one_thread() };
    let (kept, report) = read_bytes("jobs.swf", JOBS, &options).unwrap();
    let jobs =
        kept.0.iter().map(|(_, id, wait)| (id.as_deref().unwrap(), exact(wait), wait.ending(), wait.at()));
    assert_eq!(
        jobs.collect::<Vec<_>>(),
        [
            ("1", 100.0, Ending::Done, Some(1_000_110.0)),
            ("2", 50.0, Ending::Failed, Some(1_000_075.0)),
            ("3", 70.0, Ending::GaveUp, Some(1_000_106.0)),
            ("6", 60.0, Ending::Done, Some(1_000_069.0)),
            // When it started is not known.
            ("7", 80.0, Ending::Done, None),
            ("10", 90.0, Ending::Done, Some(1_000_128.0)),
        ]
    );
    assert_eq!((report.left_out.unmeasured, report.left_out.partial), (2, 2));
}

#[test]
fn swf_bad_lines_and_missing_names() {
    let good = "1 0 10 100 4 -1 -1 4 200 -1 1 1 1 1 3 -1 -1 -1";
    let (no_number, no_queue) = (good.replace(" 10 ", " ten "), good.replace(" 3 ", " -1 "));
    let text = format!("{good}\n1 2 3\n{no_number}\n{no_queue}\n{good} 19\n");
    let (kept, report) = read_bytes("jobs.swf", text, &lenient()).unwrap();
    assert_eq!((kept.0.len(), kept.waits()[0].at()), (1, None));
    assert_eq!(
        found(&report),
        [
            (2, "line", "the line has 3 fields, not 18"),
            (3, "wait time", "\"ten\" is not a number"),
            (4, "stream", "it is missing"),
            (5, "line", "the line has 19 fields, not 18"),
        ]
    );
    let error = read_bytes("jobs.swf", good.replace(" 10 ", " -1 "), &one_thread()).unwrap_err();
    assert!(matches!(error, IntakeError::NoWaits { .. }), "{error:?}");
    assert!(error.to_string().contains("--measure run"), "{error}");
}

/// Where reference data lie, here or in a shared folder beside the checkout.
fn reference(name: &str) -> Option<PathBuf> {
    let folders = ["tests/reference", "../shared/reference", "../../shared/reference"];
    let places = folders.map(|folder| PathBuf::from(folder).join("data").join(name));
    let found = places.into_iter().find(|place| place.is_file());
    if found.is_none() {
        println!("skipped: {name} is not at hand");
    }
    found
}

#[test]
fn swf_agrees_with_the_table_made_from_it() {
    // HPC2N-2002, Parallel Workloads Archive, its first 3170 jobs; another program made the table from them.
    let Some(log) = reference("hpc2n_2002_first_jobs.swf") else { return };
    let Some(table) = reference("hpc2n_2002_waits.csv") else { return };
    let (jobs, _) = read(vec![Source::path(log)], &one_thread(), Kept::default(), &mut |_| ()).unwrap();
    let mut table = csv::Reader::from_path(table).unwrap();
    let rows: Vec<(f64, String, f64, String)> = table.deserialize().collect::<Result<_, _>>().unwrap();
    assert_eq!((jobs.0.len(), rows.len()), (3170, 3170));
    for ((_, _, wait), (elapsed, ending, submitted, _)) in jobs.0.iter().zip(&rows) {
        match wait.age() {
            Age::Exact(age) => assert_eq!(age, *elapsed),
            Age::Between { over, upto } => assert_eq!((over, upto, *elapsed), (0.0, 1.0, 0.0)),
        }
        assert_eq!(wait.ending().name(), ending);
        // The table has the time of submission, a wait the time of its end.
        assert_eq!(wait.at(), Some(submitted + elapsed));
    }
}

// ---- Streams, windows, suspicions

#[test]
fn a_name_names_and_filters_and_a_pattern_filters() {
    let text = "{\"stream\":\"catalogue.lookup\",\"elapsed\":1}\n\
                {\"stream\":\"courier.slots\",\"elapsed\":2}\n\
                {\"elapsed\":3}";
    let select = |pattern| Options { streams: Some(outwait::glob::Glob::new(pattern).unwrap()), ..lenient() };
    let (kept, report) = read_bytes("waits", text, &select("catalogue.*")).unwrap();
    assert_eq!((kept.ages(), report.left_out.other_streams, report.bad.count), (vec![1.0], 1, 1));
    let (kept, report) = read_bytes("waits", text, &select("courier.slots")).unwrap();
    assert_eq!((kept.ages(), report.left_out.other_streams, report.bad.count), (vec![2.0, 3.0], 1, 0));
    assert_eq!(kept.streams(), ["courier.slots", "courier.slots"]);
}

#[test]
fn a_window_is_closed_at_its_start_and_open_at_its_end() {
    let text = r#"{"stream":"s","elapsed":1,"at":99.9}
        {"stream":"s","elapsed":2,"at":100}
        {"stream":"s","elapsed":3,"at":"1970-01-01T00:03:19.9Z"}
        {"stream":"s","elapsed":4,"at":200}
        {"stream":"s","elapsed":5}
        {"stream":"s","id":"a","started":50}
        {"stream":"s","id":"a","ended":150}
        {"stream":"s","id":"b","started":50}
        {"stream":"s","id":"b","ended":250}
        {"stream":"s","id":"c","started":150}"#;
    let options = Options { since: Some(100.0), until: Some(200.0), ..lenient() };
    let (kept, report) = read_bytes("waits", text, &options).unwrap();
    assert_eq!(kept.ages(), [2.0, 3.0, 100.0]);
    // The last is open at 250, the newest time: not seen last inside the window.
    assert_eq!((report.left_out.outside_window, report.pairs.open), (4, 0));
    assert_eq!(found(&report), [(5, "at", "it is missing, and a window of time was asked for")]);
}

#[test]
fn milliseconds_given_as_seconds_are_pointed_out() {
    let line = |i| {
        format!("{{\"stream\":\"s\",\"elapsed\":{},\"at\":{}.25}}\n", 20 + i * 7 % 300, 1_764_547_200 + i)
    };
    let lines: String = (0..300).map(line).collect();
    let (_, report) = read_text(&lines);
    let [suspicion] = &report.suspicions[..] else { panic!("{:?}", report.suspicions) };
    assert_eq!((suspicion.ages, suspicion.whole, suspicion.because), (300, 300, Because::TimesAreFiner));
    assert!(suspicion.to_string().contains("`elapsed_ms`"), "{suspicion}");
    // Said with the unit there is nothing to suspect.
    assert!(read_text(&lines.replace("elapsed", "elapsed_ms")).1.suspicions.is_empty());
}

// ---- Inputs

#[test]
fn packed_or_not_with_any_line_ends() {
    let plain = "{\"stream\":\"s\",\"elapsed\":1}\n{\"stream\":\"s\",\"elapsed\":2}\n";
    let bytes = |text: &str| text.as_bytes().to_vec();
    for (what, input, waits) in [
        ("plain", bytes(plain), 2),
        ("CRLF", bytes(&plain.replace('\n', "\r\n")), 2),
        ("no newline at the end", bytes(plain.trim_end()), 2),
        ("BOM", bytes(&format!("\u{feff}{plain}")), 2),
        ("BOM and blank lines", bytes(&format!("\u{feff}\n \r\n{plain}\n\n")), 2),
        ("long blank head", bytes(&format!("{}{plain}", "\n".repeat(1_000_000))), 2),
        ("gzip", gzip(plain.as_bytes()), 2),
        ("gzip, two members", [gzip(plain.as_bytes()), gzip(plain.as_bytes())].concat(), 4),
        ("zstd", zstd(plain.as_bytes()), 2),
        ("zstd, two frames", [zstd(plain.as_bytes()), zstd(plain.as_bytes())].concat(), 4),
        ("gzip with a BOM", gzip(format!("\u{feff}{plain}").as_bytes()), 2),
    ] {
        let outcome = read_bytes("waits", input, &one_thread());
        let (kept, _) = outcome.unwrap_or_else(|error| panic!("{what}: {error}"));
        assert_eq!(kept.0.len(), waits, "{what}");
    }
}

#[test]
fn inputs_that_cannot_be_read() {
    let waits: String =
        (0..5000).map(|i| format!("{{\"stream\":\"s\",\"elapsed\":{}.5}}\n", i * i)).collect();
    let cut = |bytes: Vec<u8>| bytes[..bytes.len() / 2].to_vec();
    let spoilt = |mut bytes: Vec<u8>| {
        let middle = bytes.len() / 2;
        bytes[middle..middle + 8].fill(0x55);
        bytes
    };
    type Is = fn(&IntakeError) -> bool;
    let damaged: Is = |error| matches!(error, IntakeError::Damaged { .. });
    let unrecognised: Is = |error| matches!(error, IntakeError::Unrecognised { .. });
    let no_waits: Is = |error| matches!(error, IntakeError::NoWaits { .. });
    for (what, bytes, is, words) in [
        ("empty", b"".to_vec(), no_waits, "no waits in empty: it is empty"),
        ("blank", b"\n\r\n \n".to_vec(), no_waits, "it is empty"),
        ("header only", b"stream,elapsed\n".to_vec(), no_waits, "it has no records"),
        ("empty gzip", gzip(b""), no_waits, "it is empty"),
        ("cut gzip", cut(gzip(waits.as_bytes())), damaged, "gzip"),
        ("cut zstd", cut(zstd(waits.as_bytes())), damaged, "zstd"),
        ("spoilt gzip", spoilt(gzip(waits.as_bytes())), damaged, "gzip"),
        ("gzip head only", gzip(waits.as_bytes())[..3].to_vec(), damaged, "gzip"),
        ("binary", vec![1, 0, 2, 255, 254, 0, 9], unrecognised, "is binary data"),
        ("UTF-16", b"\xff\xfe{\0}\0".to_vec(), unrecognised, "is UTF-16 text"),
        ("array", b"[{\"stream\":\"s\",\"elapsed\":1}]".to_vec(), unrecognised, "is a JSON array"),
        ("prose", b"It was a dark and stormy night".to_vec(), unrecognised, "a text that begins"),
        ("start", b"{\"stream\":\"s\",\"started\":1,\"id\":\"a\"}".to_vec(), no_waits, "single pair"),
    ] {
        for threads in [1, 3] {
            let options = Options { threads: NonZeroUsize::new(threads), ..lenient() };
            let error = read_bytes(what, &bytes, &options).expect_err(what);
            assert!(is(&error) && error.to_string().contains(words), "{what}: {error:?}: {error}");
        }
    }
    let only_bad = read_bytes("waits", "{\"elapsed\":0}\n{}\n", &lenient()).unwrap_err().to_string();
    assert!(
        only_bad.contains("all 2 lines with a record are bad; the first is waits:1: stream"),
        "{only_bad}"
    );
}

#[test]
fn files_that_are_none() {
    let folder = tempfile::tempdir().unwrap();
    let read_path = |path| read(vec![Source::path(path)], &one_thread(), Kept::default(), &mut |_| ());
    let missing = read_path(folder.path().join("none.csv")).unwrap_err();
    assert!(
        matches!(missing, IntakeError::Open { .. }) && missing.to_string().contains("none.csv"),
        "{missing}"
    );
    let directory = read_path(folder.path().into()).unwrap_err();
    assert!(matches!(directory, IntakeError::Directory { .. }), "{directory}");
}

#[test]
fn progress_counts_bytes_as_they_lie_there() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("waits.csv.gz");
    std::fs::write(&file, gzip(b"stream,elapsed\ns,1\n")).unwrap();
    let mut seen = Vec::new();
    let sources = vec![Source::path(&file), Source::argument(file.as_os_str())];
    let (kept, report) = read(sources, &one_thread(), Kept::default(), &mut |p| seen.push(p)).unwrap();
    let bytes = 2 * std::fs::metadata(&file).unwrap().len();
    assert_eq!((kept.0.len(), report.files[1].lines), (2, 2));
    let last = seen.last().unwrap();
    assert_eq!((last.bytes, last.total, last.lines), (bytes, Some(bytes), 4));
}

#[test]
fn a_reader_that_fails_midway() {
    struct Failing;
    impl Read for Failing {
        fn read(&mut self, _: &mut [u8]) -> io::Result<usize> {
            Err(io::Error::other("the cable is out"))
        }
    }
    let line = b"{\"stream\":\"s\",\"elapsed\":1}\n".repeat(50_000);
    for threads in [1, 2] {
        let options = Options { threads: NonZeroUsize::new(threads), ..one_thread() };
        let sources = vec![Source::reader("pipe", Cursor::new(line.clone()).chain(Failing))];
        let error = read(sources, &options, Kept::default(), &mut |_| ()).unwrap_err();
        assert!(matches!(error, IntakeError::Read { .. }), "{error}");
    }
}

#[test]
fn what_is_held_does_not_grow_with_the_input() {
    const LINE: &[u8] = b"{\"stream\":\"s\",\"elapsed\":1.25,\"at\":1764547200}\n";
    const LINES: u64 = 600_000;
    /// Makes lines as they are asked for, and counts their bytes.
    struct Endless(Arc<AtomicU64>);
    impl Read for Endless {
        fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
            let from = self.0.load(Ordering::SeqCst);
            let bytes = buffer.len().min((LINES * LINE.len() as u64 - from) as usize);
            let line = LINE.iter().cycle().skip((from % LINE.len() as u64) as usize);
            buffer[..bytes].iter_mut().zip(line).for_each(|(byte, &next)| *byte = next);
            self.0.fetch_add(bytes as u64, Ordering::SeqCst);
            Ok(bytes)
        }
    }
    struct Counted(u64);
    impl Sink for Counted {
        fn take(&mut self, _: &Record<'_>) {
            self.0 += 1;
        }
        fn fork(&self) -> Self {
            Counted(0)
        }
        fn absorb(&mut self, other: Self) {
            self.0 += other.0;
        }
    }
    for threads in [1, 2] {
        let made = Arc::new(AtomicU64::new(0));
        let sources = vec![Source::reader("endless", Endless(Arc::clone(&made)))];
        let options = Options { threads: NonZeroUsize::new(threads), ..Options::default() };
        let mut held = 0;
        let (counted, _) = read(sources, &options, Counted(0), &mut |progress| {
            held = held.max(made.load(Ordering::SeqCst) - progress.lines * LINE.len() as u64);
        })
        .unwrap();
        assert_eq!(counted.0, LINES);
        // Of 29 MB, no more than a few blocks a thread are ever between the reader and the report.
        assert!(held < 4_000_000, "{held}");
    }
}

#[test]
fn unpacked_bytes_have_a_limit() {
    let bomb = gzip(&b"{\"stream\":\"s\",\"elapsed\":1}\n".repeat(100_000));
    let options = Options { total_bytes: 1_000_000, ..one_thread() };
    let error = read_bytes("bomb.gz", &bomb, &options).unwrap_err();
    assert!(matches!(error, IntakeError::TooMuch { limit: 1_000_000, .. }), "{error}");
}

#[test]
fn a_sink_that_panics_is_not_waited_for() {
    struct Fragile;
    impl Sink for Fragile {
        fn take(&mut self, _: &Record<'_>) {
            panic!("as the test wants");
        }
        fn fork(&self) -> Self {
            Fragile
        }
        fn absorb(&mut self, _: Self) {}
    }
    let line = b"{\"stream\":\"s\",\"elapsed\":1}\n".repeat(500_000);
    let options = Options { threads: NonZeroUsize::new(2), ..Options::default() };
    let reading = || read(vec![source("waits", line)], &options, Fragile, &mut |_| ()).is_ok();
    assert!(std::panic::catch_unwind(std::panic::AssertUnwindSafe(reading)).is_err());
}

// ---- Properties

/// Any wait, with times of 1/64 s that come through text and double alike.
fn wait() -> impl Strategy<Value = Wait> {
    let age = (1u64..=10_000_000_000_000_000, 0i32..16).prop_map(|(n, places)| n as f64 / 10f64.powi(places));
    let age = age.prop_filter("too long", |age| *age <= 1e10);
    let upto = prop_oneof![3 => Just(0.0), 1 => Just(1.5), 1 => Just(f64::INFINITY)];
    let at =
        (0u32..2_000_000_000, 0u32..64).prop_map(|(whole, part)| f64::from(whole) + f64::from(part) / 64.0);
    let ending = prop::sample::select(&Ending::ALL[..]);
    (age, upto, ending, 0.0..0.99, 1u32..5, 1u64..1000, prop::option::of(at)).prop_map(
        |(age, upto, ending, entered, attempt, count, at)| {
            let wait = match age * upto {
                upto if upto > age && (upto <= 1e10 || upto.is_infinite()) => {
                    Wait::between(age, upto, ending)
                }
                _ => Wait::new(age, ending),
            };
            let wait = wait.unwrap().with_attempt(attempt).unwrap().with_count(count).unwrap();
            let wait = wait.with_entered(age * entered).unwrap();
            at.map_or(wait, |at| wait.with_at(at).unwrap())
        },
    )
}

fn records() -> impl Strategy<Value = Vec<Owned>> {
    let id = prop::option::of("[a-z0-9 \"\\\\,;\né\u{1F600}]{1,12}");
    prop::collection::vec(("[a-zé0-9._/:-]{1,20}", id, wait()), 1..40)
}

fn cells((stream, id, wait): &Owned) -> Vec<(&'static str, serde_json::Value)> {
    let mut cells = vec![("stream", stream.as_str().into()), ("ending", wait.ending().name().into())];
    match wait.age() {
        Age::Exact(age) => cells.push(("elapsed", age.into())),
        Age::Between { over, upto } => {
            cells.push(("over", over.into()));
            cells.push(("upto", if upto.is_finite() { upto.into() } else { "inf".into() }));
        }
    }
    cells.push(("attempt", wait.attempt().into()));
    cells.push(("count", wait.count().into()));
    cells.push(("entered", wait.entered().into()));
    cells.extend(wait.at().map(|at| ("at", at.into())));
    cells.extend(id.as_deref().map(|id| ("id", id.into())));
    cells
}

fn ndjson(records: &[Owned]) -> String {
    let object = |record| {
        let cells = cells(record).into_iter().map(|(name, value)| (name.to_string(), value));
        serde_json::Value::Object(cells.collect()).to_string() + "\n"
    };
    records.iter().map(object).collect()
}

fn csv(records: &[Owned]) -> Vec<u8> {
    const COLUMNS: [&str; 10] =
        ["stream", "ending", "elapsed", "over", "upto", "attempt", "count", "entered", "at", "id"];
    let mut writer = csv::Writer::from_writer(Vec::new());
    writer.write_record(COLUMNS).unwrap();
    for record in records {
        let cells = cells(record);
        let row = COLUMNS.map(|column| match cells.iter().find(|(name, _)| *name == column) {
            Some((_, serde_json::Value::String(text))) => text.clone(),
            Some((_, value)) => value.to_string(),
            None => String::new(),
        });
        writer.write_record(row).unwrap();
    }
    writer.into_inner().unwrap()
}

fn sorted(kept: &Kept) -> Vec<String> {
    let mut all: Vec<_> = kept.0.iter().map(|record| format!("{record:?}")).collect();
    all.sort();
    all
}

proptest! {
    #[test]
    fn what_is_written_reads_back(mut records in records()) {
        let (kept, _) = read_bytes("waits", ndjson(&records), &one_thread()).unwrap();
        prop_assert_eq!(&kept.0, &records);
        for (_, id, _) in &mut records {
            // Cells are trimmed, and an empty one is absent.
            *id = id.as_deref().map(str::trim).filter(|id| !id.is_empty()).map(String::from);
        }
        let (kept, _) = read_bytes("waits", csv(&records), &one_thread()).unwrap();
        prop_assert_eq!(&kept.0, &records);
    }

    #[test]
    fn any_bytes_give_waits_or_words(
        bytes in prop::collection::vec(any::<u8>(), 0..300),
        format in prop::option::of(prop::sample::select(&Format::ALL[..])),
        head in prop::sample::select(
            &["", "{", "; UnixStartTime: 5\n", "stream,elapsed,at\n", "\u{1f}\u{8b}", "s,\"elapsed\"\n\""][..]
        ),
    ) {
        let all = [head.as_bytes(), &bytes].concat();
        for all in [all.clone(), gzip(&all), zstd(&all)] {
            match read_bytes("x", &all, &Options { format, line_bytes: 100, ..lenient() }) {
                Ok((kept, report)) => prop_assert_eq!(kept.0.len() as u64, report.waits),
                Err(error) => prop_assert!(!error.to_string().is_empty()),
            }
        }
    }

    #[test]
    fn every_record_is_accounted_for(records in prop::collection::vec(
        prop::collection::vec((
            prop::sample::select(&["stream", "elapsed", "at", "started", "ended", "id", "over", "upto", "x"][..]),
            "\"[a-z0-9:. -]{0,6}\"|\"a\"|-?[0-9.e]{1,6}|-?[0-9]{1,3}|null|[1]",
        ), 0..6), 1..30),
    ) {
        let line = |members: &Vec<(&str, String)>| {
            let members: Vec<_> = members.iter().map(|(key, value)| format!("\"{key}\":{value}")).collect();
            format!("{{{}}}\n", members.join(","))
        };
        let text: String = records.iter().map(line).collect();
        let options = Options { streams: Some(outwait::glob::Glob::new("a").unwrap()), ..lenient() };
        let report = match read_bytes("x.ndjson", text, &options) {
            Ok((_, report)) => report,
            Err(IntakeError::NoWaits { report }) => *report,
            Err(error) => return Err(TestCaseError::fail(error.to_string())),
        };
        // A pair takes two lines; one whose end is bad is counted as joined and as bad.
        let pairs = &report.pairs;
        let lines = report.waits + report.bad.count + report.left_out.other_streams;
        prop_assert_eq!(lines + pairs.joined + pairs.open_unseen + pairs.ends_alone, report.lines);
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(12))]
    #[test]
    fn threads_change_nothing(seed in any::<u32>(), kind in 0usize..3) {
        // Several blocks of 256 KiB, with bad lines and halves of waits far apart.
        let mut state = u64::from(seed) + 1;
        let mut random = |below: u64| {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            (state >> 33) % below
        };
        let heads = ["", "stream,elapsed,id,started,ended,note\n", "; UnixStartTime: 77\n"];
        let mut text = String::from(heads[kind]);
        for i in 0..30_000 {
            let (stream, age, id) = (random(5), random(2000), random(4000));
            text += &match (kind, random(8)) {
                (0, 0) => format!("{{\"stream\":\"s{stream}\",\"started\":{i},\"id\":\"{id}\"}}\n"),
                (0, 1) => format!("{{\"stream\":\"s{stream}\",\"ended\":{i},\"id\":\"{id}\"}}\n"),
                (0, _) => format!("{{\"stream\":\"s{stream}\",\"elapsed\":{age},\"at\":{i}.5}}\n"),
                (1, 0) => format!("s{stream},,{id},{i},,\n"),
                (1, 1) => format!("s{stream},,{id},,{i},\"two\nlines\"\n"),
                (1, 2) => format!("s{stream},{age},,,,\"open\n"),
                (1, _) => format!("s{stream},{age},,,,a note to fill the row up to some more bytes\n"),
                (_, 0) => format!("{i} {age}\n"),
                _ => format!("{i} {i} {age} 5 1 -1 -1 1 -1 -1 {} 1 1 1 {stream} -1 -1 -1\n", random(7)),
            };
        }
        let threads = |number| Options { threads: NonZeroUsize::new(number), ..lenient() };
        let (one, report) = read_bytes("waits", &text, &threads(1)).unwrap();
        prop_assert!(one.0.len() > 1000 && report.bad.count > 0);
        for number in [2, 5] {
            let (kept, again) = read_bytes("waits", &text, &threads(number)).unwrap();
            prop_assert_eq!(sorted(&kept), sorted(&one));
            prop_assert_eq!(&again, &report);
        }
        let (packed, again) = read_bytes("waits", gzip(text.as_bytes()), &threads(2)).unwrap();
        prop_assert_eq!(sorted(&packed), sorted(&one));
        prop_assert_eq!(&again, &report);
    }
}
