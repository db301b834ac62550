//! Formats that were not written for this program against the bare decode by their library, on the same bytes in the same
//! run: `cargo bench --bench formats`. One thread each, but for Arrow's last row. The bare decode touches the same columns and adds up what it
//! finds, and makes no record of it.

#![allow(clippy::unwrap_used, missing_docs)]

use std::hint::black_box;
use std::num::NonZeroUsize;
use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use arrow_array::cast::AsArray;
use arrow_array::types::{Float64Type, TimestampMicrosecondType};
use arrow_array::{Array, Float64Array, RecordBatch, StringArray, TimestampMicrosecondArray};
use criterion::{Criterion, Throughput, criterion_group, criterion_main};
use outwait::intake::{Access, Database, Mapping, Options, Pattern, Record, Sink, Source, read};
use outwait::wait::Age;
use parquet::arrow::ArrowWriter;
use parquet::arrow::arrow_reader::ParquetRecordBatchReaderBuilder;
use parquet::basic::Compression;
use parquet::file::properties::WriterProperties;

#[cfg(feature = "postgres")]
#[path = "../tests/support/postgres.rs"]
mod server;

const ROWS: usize = 200_000;

/// Adds up, as the bare decodes do.
#[derive(Default)]
struct Sum(f64);

impl Sink for Sum {
    #[inline]
    fn take(&mut self, record: &Record<'_>) {
        if let Age::Exact(age) = record.wait.age() {
            self.0 += age + record.wait.at().unwrap_or(0.0) + record.stream.len() as f64;
        }
    }
    fn fork(&self) -> Self {
        Sum::default()
    }
    fn absorb(&mut self, other: Self) {
        self.0 += other.0;
    }
}

fn ours(source: Source, options: &Options) -> f64 {
    on_threads(1, source, options)
}

fn on_threads(threads: usize, source: Source, options: &Options) -> f64 {
    let options = Options { threads: NonZeroUsize::new(threads), ..options.clone() };
    let (sum, report) = read(vec![source], &options, Sum::default(), &mut |_| ()).unwrap();
    assert_eq!(report.waits, ROWS as u64);
    sum.0
}

const STREAMS: [&str; 4] = ["catalogue.lookup", "index.search", "courier.slots", "scan.pages"];

fn row(i: usize) -> (&'static str, f64, &'static str, i64) {
    let ending = if i.is_multiple_of(29) { "gave_up" } else { "done" };
    (STREAMS[i * 7 % 4], 1e-4 * (1 + i * i % 9_973) as f64, ending, 1_796_040_000_000_000 + 20_000 * i as i64)
}

fn batch() -> RecordBatch {
    let streams = StringArray::from_iter_values((0..ROWS).map(|i| row(i).0));
    let elapsed = Float64Array::from_iter_values((0..ROWS).map(|i| row(i).1));
    let endings = StringArray::from_iter_values((0..ROWS).map(|i| row(i).2));
    let at = TimestampMicrosecondArray::from_iter_values((0..ROWS).map(|i| row(i).3)).with_timezone("UTC");
    RecordBatch::try_from_iter([
        ("stream", Arc::new(streams) as Arc<dyn Array>),
        ("elapsed", Arc::new(elapsed)),
        ("ending", Arc::new(endings)),
        ("at", Arc::new(at)),
    ])
    .unwrap()
}

fn add_up(batch: &RecordBatch) -> f64 {
    let streams: &StringArray = batch.column(0).as_string();
    let elapsed = batch.column(1).as_primitive::<Float64Type>();
    let endings: &StringArray = batch.column(2).as_string();
    let at = batch.column(3).as_primitive::<TimestampMicrosecondType>();
    (0..batch.num_rows())
        .map(|i| {
            elapsed.value(i) + at.value(i) as f64 + (streams.value(i).len() + endings.value(i).len()) as f64
        })
        .sum()
}

fn columns(criterion: &mut Criterion, folder: &Path) {
    let path = folder.join("waits.parquet");
    let properties = WriterProperties::builder().set_compression(Compression::SNAPPY).build();
    let file = std::fs::File::create(&path).unwrap();
    let batch = batch();
    let mut writer = ArrowWriter::try_new(file, batch.schema(), Some(properties)).unwrap();
    writer.write(&batch).unwrap();
    writer.close().unwrap();
    let mut group = criterion.benchmark_group("parquet");
    group.throughput(Throughput::Bytes(path.metadata().unwrap().len()));
    group.bench_function("parquet crate, bare", |b| {
        b.iter(|| {
            let file = std::fs::File::open(&path).unwrap();
            let reader = ParquetRecordBatchReaderBuilder::try_new(file).unwrap().with_batch_size(8192);
            reader.build().unwrap().map(|batch| add_up(&batch.unwrap())).sum::<f64>()
        });
    });
    group.bench_function("1 thread", |b| b.iter(|| ours(Source::path(&path), &Options::default())));
    group.finish();

    let path = folder.join("waits.arrow");
    let file = std::fs::File::create(&path).unwrap();
    let mut writer = arrow_ipc::writer::FileWriter::try_new(file, &batch.schema()).unwrap();
    for from in (0..ROWS).step_by(8192) {
        writer.write(&batch.slice(from, 8192.min(ROWS - from))).unwrap();
    }
    writer.finish().unwrap();
    let mut group = criterion.benchmark_group("arrow");
    group.throughput(Throughput::Bytes(path.metadata().unwrap().len()));
    group.bench_function("arrow-ipc crate, bare", |b| {
        b.iter(|| {
            let file = std::io::BufReader::new(std::fs::File::open(&path).unwrap());
            let reader = arrow_ipc::reader::FileReader::try_new(file, None).unwrap();
            reader.map(|batch| add_up(&batch.unwrap())).sum::<f64>()
        });
    });
    group.bench_function("1 thread", |b| b.iter(|| ours(Source::path(&path), &Options::default())));
    // Its decoder hardly works; ours hands each wait on, which threads share.
    group.bench_function("2 threads", |b| {
        b.iter(|| on_threads(2, Source::path(&path), &Options::default()));
    });
    group.finish();
}

fn lines(criterion: &mut Criterion) {
    let log: String = (0..ROWS)
        .map(|i| {
            let (stream, elapsed, ending, at) = row(i);
            let status = if ending == "done" { 200 } else { 499 };
            format!(
                "10.0.0.7 - - [{}] \"GET /x HTTP/1.1\" {status} 512 {elapsed:.4} {stream}\n",
                at as f64 / 1e6
            )
        })
        .collect();
    let expression = r#"\[(?<at>[^\]]+)\] "[^"]*" (?<ending>\d{3}) \d+ (?<elapsed>\S+) (?<stream>\S+)$"#;
    let mapping = Mapping::default().with_endings("499=gave_up,*=done").unwrap();
    let options = Options {
        pattern: Some(Arc::new(Pattern::new(expression).unwrap())),
        mapping: Some(Arc::new(mapping)),
        ..Options::default()
    };
    let log: &'static str = String::leak(log);
    let mut group = criterion.benchmark_group("pattern");
    group.throughput(Throughput::Bytes(log.len() as u64));
    group.bench_function("regex crate, bare", |b| {
        let regex = regex::Regex::new(expression).unwrap();
        let mut at = regex.capture_locations();
        b.iter(|| {
            let mut sum = 0.0;
            for line in log.lines() {
                regex.captures_read(&mut at, black_box(line)).unwrap();
                let text = |group| at.get(group).map_or("", |(from, upto): (usize, usize)| &line[from..upto]);
                let number = |group| text(group).parse::<f64>().unwrap();
                sum += number(1) + number(3) + (text(2).len() + text(4).len()) as f64;
            }
            sum
        });
    });
    group.bench_function("1 thread", |b| b.iter(|| ours(Source::reader("log", log.as_bytes()), &options)));
    group.finish();

    let journal: String = (0..ROWS)
        .map(|i| {
            let (stream, elapsed, ending, at) = row(i);
            format!(
                "{{\"__CURSOR\":\"s=739ad463;i={i:x}\",\"__REALTIME_TIMESTAMP\":\"{at}\",\"_BOOT_ID\":\"6c7c6013\",\
                 \"PRIORITY\":\"6\",\"_SYSTEMD_UNIT\":\"{stream}.service\",\"_PID\":\"4711\",\
                 \"MESSAGE\":\"{{\\\"elapsed\\\":{elapsed},\\\"ending\\\":\\\"{ending}\\\"}}\"}}\n"
            )
        })
        .collect();
    let journal: &'static str = String::leak(journal);
    let mut group = criterion.benchmark_group("journal");
    group.throughput(Throughput::Bytes(journal.len() as u64));
    group.bench_function("serde_json, bare", |b| {
        #[derive(serde::Deserialize)]
        #[serde(rename_all = "UPPERCASE")]
        struct Entry<'a> {
            #[serde(rename = "__REALTIME_TIMESTAMP")]
            at: &'a str,
            #[serde(rename = "_SYSTEMD_UNIT")]
            unit: &'a str,
            message: String,
        }
        #[derive(serde::Deserialize)]
        struct Bare<'a> {
            elapsed: f64,
            ending: &'a str,
        }
        b.iter(|| {
            let mut sum = 0.0;
            for line in journal.lines() {
                let entry: Entry<'_> = serde_json::from_str(black_box(line)).unwrap();
                let bare: Bare<'_> = serde_json::from_str(&entry.message).unwrap();
                sum += bare.elapsed
                    + entry.at.parse::<f64>().unwrap()
                    + (entry.unit.len() + bare.ending.len()) as f64;
            }
            sum
        });
    });
    let options = Options::default();
    group.bench_function("1 thread", |b| {
        b.iter(|| ours(Source::reader("journal", journal.as_bytes()), &options))
    });
    group.finish();
}

fn sqlite(criterion: &mut Criterion, folder: &Path) {
    let path = folder.join("waits.sqlite3");
    let mut db = rusqlite::Connection::open(&path).unwrap();
    db.execute_batch("CREATE TABLE waits (stream TEXT, elapsed REAL, ending TEXT, at REAL)").unwrap();
    let all = db.transaction().unwrap();
    for i in 0..ROWS {
        let (stream, elapsed, ending, at) = row(i);
        let mut insert = all.prepare_cached("INSERT INTO waits VALUES (?1, ?2, ?3, ?4)").unwrap();
        insert.execute((stream, elapsed, ending, at as f64 / 1e6)).unwrap();
    }
    all.commit().unwrap();
    drop(db);
    let query = "SELECT stream, elapsed, ending, at FROM waits";
    let mut group = criterion.benchmark_group("sqlite");
    group.throughput(Throughput::Bytes(path.metadata().unwrap().len()));
    group.bench_function("rusqlite, bare", |b| {
        b.iter(|| {
            let db = rusqlite::Connection::open(&path).unwrap();
            let mut statement = db.prepare(query).unwrap();
            let mut rows = statement.query([]).unwrap();
            let mut sum = 0.0;
            while let Some(row) = rows.next().unwrap() {
                let text = |i| row.get_ref(i).unwrap().as_str().unwrap().len() as f64;
                sum += text(0) + row.get::<_, f64>(1).unwrap() + text(2) + row.get::<_, f64>(3).unwrap();
            }
            sum
        });
    });
    group.bench_function("1 thread, one more that asks", |b| {
        b.iter(|| {
            let database = Database::at(path.to_str().unwrap(), Access::default()).unwrap();
            ours(Source::query(database, query), &Options::default())
        });
    });
    group.finish();
}

/// A server with the rows in a table.
#[cfg(feature = "postgres")]
fn table() -> Option<server::Server> {
    let Some(server) = server::Server::start() else {
        println!("postgres: skipped, it is not installed (Debian's package postgresql)");
        return None;
    };
    let mut client = server.client().unwrap();
    client
        .batch_execute("CREATE TABLE waits (stream text, elapsed float8, ending text, at timestamptz)")
        .unwrap();
    let mut into = client.copy_in("COPY waits FROM STDIN").unwrap();
    for (stream, elapsed, ending, at) in (0..ROWS).map(row) {
        let at = jiff::Timestamp::from_microsecond(at).unwrap();
        let line = format!("{stream}\t{elapsed}\t{ending}\t{at}\n");
        std::io::Write::write_all(&mut into, line.as_bytes()).unwrap();
    }
    into.finish().unwrap();
    client.batch_execute("VACUUM ANALYZE waits").unwrap();
    Some(server)
}

/// A server on loopback, which computes nothing. Each reading connects anew; bytes are those of the values.
#[cfg(feature = "postgres")]
fn postgres(criterion: &mut Criterion) {
    use std::time::{SystemTime, UNIX_EPOCH};

    use ::postgres::fallible_iterator::FallibleIterator;

    // Started by the first that is asked to measure.
    let server = std::cell::LazyCell::new(table);
    let query = "SELECT stream, elapsed, ending, at FROM waits";
    let mut group = criterion.benchmark_group("postgres");
    let bytes: usize =
        (0..ROWS).map(row).map(|(stream, _, ending, _)| stream.len() + ending.len() + 16).sum();
    group.throughput(Throughput::Bytes(bytes as u64));
    group.bench_function("postgres crate, bare", |b| {
        let Some(server) = &*server else { return b.iter(|| ()) };
        b.iter(|| {
            let mut client = server.client().unwrap();
            let rows = client.query_raw(query, [""; 0]).unwrap();
            let add = |sum: f64, row: ::postgres::Row| {
                let text = |i| row.get::<_, &str>(i).len() as f64;
                let at = row.get::<_, SystemTime>(3).duration_since(UNIX_EPOCH).unwrap().as_secs_f64();
                Ok(sum + text(0) + row.get::<_, f64>(1) + text(2) + at)
            };
            rows.fold(0.0, add).unwrap()
        });
    });
    group.bench_function("1 thread, one more that asks", |b| {
        let Some(server) = &*server else { return b.iter(|| ()) };
        let address = format!("{}?sslmode=disable", server.address());
        b.iter(|| {
            let access = Access { password: Some(server::PASSWORD.into()), ..Access::default() };
            ours(Source::query(Database::at(&address, access).unwrap(), query), &Options::default())
        });
    });
    group.finish();
}

#[cfg(not(feature = "postgres"))]
fn postgres(_: &mut Criterion) {
    println!("postgres: skipped, it is not built in");
}

fn benches(criterion: &mut Criterion) {
    let folder = tempfile::tempdir().unwrap();
    lines(criterion);
    columns(criterion, folder.path());
    sqlite(criterion, folder.path());
    postgres(criterion);
}

criterion_group! {
    name = formats;
    config = Criterion::default().sample_size(10).measurement_time(Duration::from_secs(3)).warm_up_time(Duration::from_secs(1));
    targets = benches
}
criterion_main!(formats);
