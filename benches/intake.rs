//! Intake against the bare decoders of its formats, on the same bytes in the same run.
//!
//! `cargo bench --bench intake`. The sink is a realistic one: a hash map of streams, an HDR histogram each. On a
//! busy machine compare the lines of one run with each other, not with another run's; `recording` is what the sink
//! costs alone.

#![allow(clippy::unwrap_used, missing_docs)]

use std::collections::HashMap;
use std::hint::black_box;
use std::io::{Read, Write};
use std::num::NonZeroUsize;
use std::time::Duration;

use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use hdrhistogram::Histogram;
use outwait::intake::{Options, Record, Sink, Source, read};
use outwait::wait::{Age, Ending, Wait};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

const LINES: usize = 1_000_000;
const STREAMS: [&str; 8] = [
    "catalogue.lookup",
    "catalogue.search",
    "index.search",
    "courier.slots",
    "lender.reply",
    "desk.queue",
    "scan.pages",
    "index.rebuild",
];

/// What a tally does with a wait, without its days and attempts.
#[derive(Default)]
struct Histograms(HashMap<String, Endings>);

type Endings = [Option<Histogram<u32>>; 4];

fn count(endings: &mut Endings, age: f64, ending: Ending) {
    let new = || Histogram::new_with_bounds(1, 1 << 40, 3).unwrap();
    endings[ending as usize].get_or_insert_with(new).record((age * 1e6) as u64).unwrap();
}

impl Sink for Histograms {
    fn take(&mut self, record: &Record<'_>) {
        let Age::Exact(age) = record.wait.age() else { return };
        match self.0.get_mut(record.stream) {
            Some(endings) => count(endings, age, record.wait.ending()),
            None => count(self.0.entry(record.stream.into()).or_default(), age, record.wait.ending()),
        }
    }

    fn fork(&self) -> Self {
        Histograms::default()
    }

    fn absorb(&mut self, other: Self) {
        for (stream, theirs) in other.0 {
            let mine = self.0.entry(stream).or_default();
            for (mine, theirs) in mine.iter_mut().zip(theirs) {
                match (mine, theirs) {
                    (Some(mine), Some(theirs)) => mine.add(theirs).unwrap(),
                    (mine, Some(theirs)) => *mine = Some(theirs),
                    _ => {}
                }
            }
        }
    }
}

struct Row {
    stream: &'static str,
    elapsed: f64,
    ending: Ending,
    at: f64,
}

fn rows() -> Vec<Row> {
    let mut random = Xoshiro256PlusPlus::seed_from_u64(1);
    (0..LINES)
        .map(|i| {
            let elapsed = (0.02 * (2.0 * (random.random::<f64>() - 0.5)).exp() * 1e4).round() / 1e4;
            let ending = if random.random_bool(0.97) { Ending::Done } else { Ending::GaveUp };
            let at = 1_764_547_200.0 + (i as f64 / 50.0 * 100.0).round() / 100.0;
            Row {
                stream: STREAMS[random.random_range(0..STREAMS.len())],
                elapsed: elapsed.max(1e-4),
                ending,
                at,
            }
        })
        .collect()
}

/// The bare parse: no check, no default, no other order of fields.
#[derive(serde::Deserialize)]
struct Bare<'a> {
    stream: &'a str,
    elapsed: f64,
    ending: &'a str,
    at: f64,
}

fn bare_parse(text: &str) -> f64 {
    let mut sum = 0.0;
    let mut from = 0;
    while let Some(length) = memchr::memchr(b'\n', &text.as_bytes()[from..]) {
        let bare: Bare<'_> = serde_json::from_str(&text[from..from + length]).unwrap();
        sum += bare.elapsed + bare.at + (bare.stream.len() + bare.ending.len()) as f64;
        from += length + 1;
    }
    sum
}

fn bare_csv(bytes: &[u8]) -> f64 {
    let mut reader = csv::Reader::from_reader(bytes);
    let headers = reader.headers().unwrap().clone();
    let (mut row, mut sum) = (csv::StringRecord::new(), 0.0);
    while reader.read_record(&mut row).unwrap() {
        let bare: Bare<'_> = row.deserialize(Some(&headers)).unwrap();
        sum += bare.elapsed + bare.at + (bare.stream.len() + bare.ending.len()) as f64;
    }
    sum
}

fn ours(bytes: &'static [u8], threads: usize) -> Histograms {
    let options = Options {
        threads: NonZeroUsize::new(threads),
        streams: Some(outwait::glob::Glob::new("*").unwrap()),
        ..Options::default()
    };
    let source = Source::reader("bench", bytes);
    let (histograms, report) = read(vec![source], &options, Histograms::default(), &mut |_| ()).unwrap();
    assert_eq!(report.waits, LINES as u64);
    histograms
}

fn leak(bytes: Vec<u8>) -> &'static [u8] {
    Vec::leak(bytes)
}

fn benches(criterion: &mut Criterion) {
    let rows = rows();
    let mut ndjson = String::new();
    let mut csv = String::from("stream,elapsed,ending,at\n");
    let mut swf = String::from("; Version: 2.2\n; UnixStartTime: 1027839845\n");
    for (i, Row { stream, elapsed, ending, at }) in rows.iter().enumerate() {
        use std::fmt::Write as _;
        let name = ending.name();
        writeln!(ndjson, r#"{{"stream":"{stream}","elapsed":{elapsed},"ending":"{name}","at":{at}}}"#)
            .unwrap();
        writeln!(csv, "{stream},{elapsed},{name},{at}").unwrap();
        let wait = 1 + (elapsed * 1e5) as u64;
        writeln!(swf, "{i} {} {wait} 3600 8 -1 -1 8 7200 -1 1 12 3 -1 1 -1 -1 -1", 60 * i).unwrap();
    }
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    gzip.write_all(ndjson.as_bytes()).unwrap();
    let gzip = leak(gzip.finish().unwrap());
    let zstd = leak(zstd::encode_all(ndjson.as_bytes(), 3).unwrap());
    let text: &'static str = String::leak(ndjson);
    let (csv, swf) = (leak(csv.into_bytes()), leak(swf.into_bytes()));

    let mut group = criterion.benchmark_group("ndjson");
    group.throughput(Throughput::Elements(LINES as u64));
    group.bench_function("serde_json, bare", |b| b.iter(|| bare_parse(black_box(text))));
    group.bench_function("1 thread", |b| b.iter(|| ours(text.as_bytes(), 1)));
    group.bench_function("2 threads", |b| b.iter(|| ours(text.as_bytes(), 2)));
    group.finish();

    let mut group = criterion.benchmark_group("recording");
    group.throughput(Throughput::Elements(LINES as u64));
    group.bench_function("histogram", |b| {
        let mut histogram = Histogram::<u32>::new_with_bounds(1, 1 << 40, 3).unwrap();
        b.iter(|| rows.iter().for_each(|row| histogram.record((row.elapsed * 1e6) as u64).unwrap()));
    });
    group.bench_function("sink", |b| {
        let waits: Vec<_> = rows.iter().map(|row| Wait::new(row.elapsed, row.ending).unwrap()).collect();
        let mut sink = Histograms::default();
        b.iter(|| {
            for (row, &wait) in rows.iter().zip(&waits) {
                sink.take(&Record { stream: row.stream, place: 0, id: None, wait });
            }
        });
    });
    group.finish();

    let mut group = criterion.benchmark_group("csv");
    group.throughput(Throughput::Bytes(csv.len() as u64));
    group.bench_function("csv crate, bare", |b| b.iter(|| bare_csv(black_box(csv))));
    group.bench_function("1 thread", |b| b.iter(|| ours(csv, 1)));
    group.bench_function("2 threads", |b| b.iter(|| ours(csv, 2)));
    group.finish();

    let mut group = criterion.benchmark_group("swf");
    group.throughput(Throughput::Bytes(swf.len() as u64));
    group.bench_function("1 thread", |b| b.iter(|| ours(swf, 1)));
    group.bench_function("2 threads", |b| b.iter(|| ours(swf, 2)));
    group.finish();

    let mut group = criterion.benchmark_group("packed ndjson");
    group.throughput(Throughput::Bytes(text.len() as u64));
    group.bench_function("gzip, bare", |b| {
        let mut unpacked = Vec::new();
        b.iter(|| {
            unpacked.clear();
            flate2::read::GzDecoder::new(gzip).read_to_end(&mut unpacked).unwrap()
        });
    });
    group.bench_function("gzip, 1 thread", |b| b.iter(|| ours(gzip, 1)));
    group.bench_function("gzip, 2 threads", |b| b.iter(|| ours(gzip, 2)));
    group.bench_function("zstd, 1 thread", |b| b.iter(|| ours(zstd, 1)));
    group.bench_function("zstd, 2 threads", |b| b.iter(|| ours(zstd, 2)));
    group.finish();
}

criterion_group! {
    name = intake;
    config = Criterion::default().sample_size(20).measurement_time(Duration::from_secs(3)).warm_up_time(Duration::from_secs(1));
    targets = benches
}
criterion_main!(intake);
