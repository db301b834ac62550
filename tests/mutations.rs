//! Parsers that face the network or a disk meet seeded mutations of good input: no panic, and what they take holds.
//!
//! `OUTWAIT_MUTATIONS=1000000 cargo test --release --test mutations` for a long run; `fuzz/` holds the same targets for a
//! coverage-guided fuzzer.
#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/otlp.rs"]
mod telemetry_of;

use std::io::Write;
use std::num::NonZeroUsize;

use outwait::intake::{Allowed, Format, Mapping, Options, Pattern, Record, Sink, Source, read};
use outwait::policy;
use outwait::tally::Tally;
use outwait::wait::{Age, Ending, Wait, check_stream};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

fn rounds() -> u64 {
    std::env::var("OUTWAIT_MUTATIONS").map_or(4_000, |rounds| rounds.parse().unwrap())
}

/// One to eight changes: bits, bytes cut, doubled, taken from elsewhere, or words that parsers know.
fn mutate(bytes: &mut Vec<u8>, words: &[&[u8]], random: &mut Xoshiro256PlusPlus) {
    for _ in 0..random.random_range(1..9) {
        let at = random.random_range(0..=bytes.len());
        let length = random.random_range(0..=(bytes.len() - at).min(24));
        match random.random_range(0..6) {
            0 if at < bytes.len() => bytes[at] ^= 1 << random.random_range(0..8),
            1 if at < bytes.len() => bytes[at] = random.random(),
            2 => drop(bytes.drain(at..at + length)),
            3 => {
                let copy = bytes[at..at + length].to_vec();
                let to = random.random_range(0..=bytes.len());
                bytes.splice(to..to, copy);
            }
            4 => bytes.truncate(at),
            _ => {
                let word = words[random.random_range(0..words.len())];
                bytes.splice(at..at, word.iter().copied());
            }
        }
    }
}

struct Checking {
    waits: u64,
}

impl Sink for Checking {
    fn take(&mut self, record: &Record<'_>) {
        check_stream(record.stream).unwrap();
        let wait = &record.wait;
        let (low, high) = match wait.age() {
            Age::Exact(age) => (age, age),
            Age::Between { over, upto } => (over, upto),
        };
        assert!(low >= 0.0 && high > 0.0 && low <= high && low.is_finite(), "{wait:?}");
        assert!(wait.count() > 0 && wait.attempt() > 0 && (0.0..=low).contains(&wait.entered()), "{wait:?}");
        assert!(wait.at().is_none_or(f64::is_finite));
        self.waits += 1;
    }
    fn fork(&self) -> Self {
        Checking { waits: 0 }
    }
    fn absorb(&mut self, other: Self) {
        self.waits += other.waits;
    }
}

#[test]
fn bodies() {
    const NDJSON: &str = "{\"stream\":\"catalogue.lookup\",\"at\":\"2026-11-30T10:00:00Z\",\"elapsed\":0.0183,\"ending\":\"done\",\"attempt\":1,\"id\":\"r-8831\",\"entered\":0}\n\
        {\"stream\":\"a/b:c\",\"elapsed\":\"2d 4h\",\"ending\":\"gave_up\",\"count\":3}\n{\"stream\":\"a\",\"over\":1,\"upto\":\"inf\",\"ending\":\"failed\"}\n\
        {\"stream\":\"a\",\"id\":\"x\",\"started\":1796040000}\n{\"stream\":\"a\",\"id\":\"x\",\"ended\":1796040009.5,\"ending\":\"done\"}\n";
    const CSV: &str = "stream,elapsed_ms,ending,at,\"attempt\"\ncatalogue.lookup,18.3,done,2026-11-30T10:00:00Z,1\n\"a,b\",5,failed,,2\n";
    const SWF: &str = "; UnixStartTime: 1796040000\n1 0 10 100 4 -1 -1 4 -1 -1 1 3 1 1 1 1 -1 -1\n2 5 -1 -1 4 -1 -1 4 -1 -1 5 3 1 1 1 1 -1 -1\n";
    const JOURNAL: &str = "{\"__REALTIME_TIMESTAMP\":\"1796040000000000\",\"_SYSTEMD_UNIT\":\"courier@2.service\",\"MESSAGE\":\"{\\\"elapsed\\\":0.25,\\\"ending\\\":\\\"failed\\\"}\"}\n\
        {\"__REALTIME_TIMESTAMP\":\"1796040001000000\",\"_SYSTEMD_UNIT\":[\"a.service\",\"b\"],\"MESSAGE\":[99,97,108,108,32,97,32,53,48,48,32,49,53,32,91,48,57,47,79,99,116,47,50,48,50,54,93]}\n";
    const ACCESS: &str = "call catalogue.lookup 200 18 [30/Nov/2026:10:00:00 +0000]\ncall a/b:c 499 2500 [30/Nov/2026:10:00:01 +0100]\ncall a - - [-]\n";
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    gzip.write_all(NDJSON.as_bytes()).unwrap();
    let corpus = [
        NDJSON.into(),
        CSV.into(),
        SWF.into(),
        gzip.finish().unwrap(),
        zstd::encode_all(NDJSON.as_bytes(), 1).unwrap(),
        JOURNAL.into(),
        ACCESS.into(),
    ];
    let words: [&[u8]; 15] = [
        b"__REALTIME_TIMESTAMP",
        b"NaN",
        b"1e999",
        b"-0",
        b"null",
        b"{",
        b"}}",
        b"\"",
        b"\xff\xfe",
        b"\r\n",
        b",",
        b"\"elapsed\":",
        b"\\u0000",
        b"9223372036854775808",
        b"\xef\xbb\xbf",
    ];
    let options = Options {
        bad_lines: Allowed::All,
        threads: NonZeroUsize::new(1),
        line_bytes: 4_096,
        total_bytes: 1 << 20,
        ..Options::default()
    };
    let pattern =
        Pattern::new(r"call (?<stream>\S+) (?<ending>\S+) (?<elapsed_ms>\S+) \[(?<at>[^\]]*)\]").unwrap();
    let mapping = Mapping::default().with_endings("499=gave_up,5??=failed,2??=done").unwrap();
    let mapping = mapping.with_time_format("%d/%b/%Y:%H:%M:%S %z").unwrap();
    let by_pattern =
        Options { pattern: Some(pattern.into()), mapping: Some(mapping.into()), ..options.clone() };
    let columns = Mapping::default().with_columns("elapsed=elapsed_ms:ms,at=stream,stream=at").unwrap();
    let renamed = Options { mapping: Some(columns.into()), most_open: 1, ..options.clone() };
    let mut random = Xoshiro256PlusPlus::seed_from_u64(3);
    let mut taken = 0;
    for _ in 0..rounds() {
        let number = random.random_range(0..corpus.len());
        let mut body: Vec<u8> = corpus[number].clone();
        mutate(&mut body, &words, &mut random);
        // The last two are for a pattern; any of them may meet other options than its own.
        let options = match random.random_range(0..24) {
            0 => &renamed,
            1 => &by_pattern,
            _ if number + 2 >= corpus.len() => &by_pattern,
            _ => &options,
        };
        let source = Source::reader("body", std::io::Cursor::new(body));
        if let Ok((sink, report)) = read(vec![source], options, Checking { waits: 0 }, &mut |_| ()) {
            assert_eq!(sink.waits, report.waits);
            taken += sink.waits;
        }
    }
    assert!(taken > rounds() / 8, "{taken} waits survived: the mutations are too wild to test anything");
}

/// Tables in columns, by other people's decoders: an error, or waits that hold.
#[cfg(feature = "columnar")]
#[test]
fn tables() {
    let corpus = [
        include_bytes!("reference/columns/waits-snappy.parquet").to_vec(),
        include_bytes!("reference/columns/bad-rows.parquet").to_vec(),
        include_bytes!("reference/columns/types.parquet").to_vec(),
        include_bytes!("reference/columns/waits.arrow").to_vec(),
        include_bytes!("reference/columns/waits.arrows").to_vec(),
    ];
    let words: [&[u8]; 5] =
        [b"\xff\xff\xff\xff", b"\x00\x00\x00\x00", b"PAR1", b"\xff\xff\xff\x7f", b"\x15\xfe"];
    let options = Options {
        bad_lines: Allowed::All,
        threads: NonZeroUsize::new(1),
        total_bytes: 1 << 20,
        ..Options::default()
    };
    let mut random = Xoshiro256PlusPlus::seed_from_u64(11);
    let (mut sound, mut refused) = (0, 0);
    for _ in 0..rounds() / 8 {
        let mut bytes = corpus[random.random_range(0..corpus.len())].clone();
        mutate(&mut bytes, &words, &mut random);
        let source = Source::reader("table", std::io::Cursor::new(bytes));
        match read(vec![source], &options, Checking { waits: 0 }, &mut |_| ()) {
            Ok((sink, report)) => {
                assert_eq!(sink.waits, report.waits);
                sound += 1;
            }
            Err(error) => refused += usize::from(!error.to_string().is_empty()),
        }
    }
    assert!(refused > 10, "{sound} sound, {refused} refused");
}

/// Expressions for lines, and what stands for what.
#[test]
fn patterns_and_mappings() {
    let corpus: [&[u8]; 3] = [
        br#"\[(?<at>[^\]]+)\] "[^"]*" (?<ending>\d{3}) \d+ (?<elapsed_us>\S+)$"#,
        b"elapsed=duration_ms:ms,at=ts:us,stream=service",
        b"499=gave_up,5??=failed,*=done",
    ];
    let words: [&[u8]; 8] =
        [b"(?<elapsed>", b"{9999}", b"((a{1000}){1000})", b"(?x)", b"%d%H%", b"=", b":ms", b"\\p{L}"];
    let mut random = Xoshiro256PlusPlus::seed_from_u64(13);
    let mut sound = 0;
    for _ in 0..rounds() / 4 {
        let mut bytes = corpus[random.random_range(0..corpus.len())].to_vec();
        mutate(&mut bytes, &words, &mut random);
        let text = String::from_utf8_lossy(&bytes);
        sound += usize::from(Pattern::new(&text).is_ok());
        sound += usize::from(Mapping::default().with_columns(&text).is_ok());
        sound += usize::from(Mapping::default().with_endings(&text).is_ok());
        let _ = Mapping::default().with_time_format(&text);
    }
    assert!(sound > 10, "{sound}");
}

/// Telemetry in each of its forms.
#[test]
fn telemetry() {
    let spans = telemetry_of::traces(
        "desk",
        vec![
            telemetry_of::span("loan", 5_000_000, vec![telemetry_of::attribute("error.type", "timeout")], 2),
            telemetry_of::span("loan", 0, vec![telemetry_of::attribute("http.request.resend_count", 2)], 0),
        ],
    );
    let points = telemetry_of::metrics(
        "desk",
        vec![
            telemetry_of::histogram("wait", 1, telemetry_of::point(0, &[0.0, 5.0, 10.0], &[1, 2, 3, 4])),
            telemetry_of::histogram("wait", 2, telemetry_of::point(0, &[5.0], &[1, 2])),
            telemetry_of::Metric {
                unit: "s".into(),
                data: Some(telemetry_of::Data::Exponential(telemetry_of::Exponential {
                    aggregation_temporality: 1,
                    data_points: vec![telemetry_of::ExponentialPoint {
                        time_unix_nano: telemetry_of::NOON_NANO,
                        count: 6,
                        scale: 3,
                        zero_count: 1,
                        positive: Some(telemetry_of::Buckets { offset: -4, bucket_counts: vec![1, 0, 4] }),
                        ..Default::default()
                    }],
                })),
                ..Default::default()
            },
        ],
    );
    const JSON: &str = r#"{"resourceSpans":[{"resource":{"attributes":[{"key":"service.name","value":{"stringValue":"desk"}}]},
        "scopeSpans":[{"spans":[{"name":"loan","kind":3,"startTimeUnixNano":"1796039999000000000","endTimeUnixNano":1796040000000000000,
        "attributes":[{"key":"n","value":{"intValue":"5"}},{"key":"d","value":{"doubleValue":1.5}}],"status":{"code":2}}]}]}]}"#;
    const METRICS_JSON: &str = r#"{"resourceMetrics":[{"scopeMetrics":[{"metrics":[{"name":"w","unit":"ms","exponentialHistogram":{
        "aggregationTemporality":1,"dataPoints":[{"timeUnixNano":"1796040000000000000","count":"3","scale":2,"zeroCount":1,
        "positive":{"offset":-1,"bucketCounts":["1","1"]},"zeroThreshold":0.5}]}}]}]}]}"#;
    const TEXT: &str = "# TYPE w_seconds histogram\nw_seconds_bucket{r=\"a\\n\",le=\"0.1\"} 3\nw_seconds_bucket{r=\"a\\n\",le=\"+Inf\"} 5 # {} 0.7\n\
        w_seconds_count{r=\"a\\n\"} 5\nw_seconds_sum{r=\"a\\n\"} NaN\n# EOF\n";
    let corpus = [
        (Format::OtlpTraces, prost::Message::encode_to_vec(&spans)),
        (Format::OtlpMetrics, prost::Message::encode_to_vec(&points)),
        (Format::OtlpTraces, JSON.into()),
        (Format::OtlpMetrics, METRICS_JSON.into()),
        (Format::MetricsText, TEXT.into()),
    ];
    let words: [&[u8]; 12] = [
        b"\xff\xff\xff\xff\xff\xff\xff\xff\xff\x01",
        b"\x0a\x00",
        b"\x00\x00\x00\x00\x00\x00\xf8\x7f",
        b"null",
        b"[[[[",
        b"{}",
        b"\"NaN\"",
        b"9223372036854775808",
        b"-1",
        b"le=\"+Inf\"",
        b"\n# EOF",
        b"1e999",
    ];
    let mut random = Xoshiro256PlusPlus::seed_from_u64(11);
    let mut taken = 0;
    for _ in 0..rounds() {
        let (format, mut body) = corpus[random.random_range(0..corpus.len())].clone();
        mutate(&mut body, &words, &mut random);
        let options = Options {
            format: Some(format),
            bad_lines: Allowed::All,
            threads: NonZeroUsize::new(1),
            total_bytes: 1 << 20,
            ..Options::default()
        };
        let source = Source::reader("body", std::io::Cursor::new(body));
        if let Ok((sink, report)) = read(vec![source], &options, Checking { waits: 0 }, &mut |_| ()) {
            assert_eq!(sink.waits, report.waits);
            taken += sink.waits;
        }
    }
    assert!(taken > rounds() / 10, "{taken} waits survived: the mutations are too wild to test anything");
}

#[test]
fn policies() {
    let corpus = [
        include_bytes!("../policies/fernhollow.yaml").to_vec(),
        include_bytes!("../policies/reference.yaml").to_vec(),
    ];
    let words: [&[u8]; 10] = [b"- ", b": ", b"{", b"]", b"&a ", b"*a", b"!!", b"\t", b"never", b"-1s"];
    let mut random = Xoshiro256PlusPlus::seed_from_u64(5);
    let (mut sound, mut wrong) = (0, 0);
    for _ in 0..rounds() / 4 {
        let mut bytes = corpus[random.random_range(0..corpus.len())].clone();
        mutate(&mut bytes, &words, &mut random);
        match policy::parse_bytes(&bytes, "policy.yaml") {
            Ok(policy) => sound += usize::from(!policy.entries.is_empty()),
            Err(error) => wrong += usize::from(!error.to_string().is_empty()),
        }
    }
    assert!(sound > 10 && wrong > 10, "{sound} sound, {wrong} wrong");
}

#[test]
fn stored_tallies() {
    let mut tally = Tally::default();
    for i in 1..6_000u32 {
        let wait = Wait::new(f64::from(i) * 1.37e-3, Ending::ALL[i as usize % 4]).unwrap();
        tally.add(&wait.with_attempt(1 + i % 2).unwrap().with_entered(f64::from(i % 3) * 1e-4).unwrap());
    }
    tally.add(&Wait::between(1.0, f64::INFINITY, Ending::Done).unwrap().with_at(1_796_040_000.0).unwrap());
    let mut bytes = Vec::new();
    tally.encode(&mut bytes);
    let mut random = Xoshiro256PlusPlus::seed_from_u64(7);
    let mut refused = 0;
    for _ in 0..rounds() {
        let mut changed = bytes.clone();
        mutate(&mut changed, &[b"\xff\xff\xff\xff\xff\xff\xff\xff\xff\x01", b"\x00"], &mut random);
        match Tally::decode(&changed) {
            Ok(read) => {
                let mut again = Vec::new();
                read.encode(&mut again);
                assert_eq!(Tally::decode(&again).unwrap(), read);
            }
            Err(_) => refused += 1,
        }
    }
    assert!(refused > 0);
}
