//! Parquet and Arrow tables written by pyarrow say what the same waits say as NDJSON, whatever their types and codecs;
//! a window leaves out groups without reading them, and says the same as if it had.
#![cfg(feature = "columnar")]
#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/kept.rs"]
mod kept;

use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use kept::Kept;
use outwait::intake::{Allowed, Format, IntakeError, Mapping, Options, Report, Source, read};
use outwait::wait::{Age, Wait};

fn table(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference/columns").join(name)
}

fn threads(n: usize) -> Options {
    Options { threads: NonZeroUsize::new(n), ..Options::default() }
}

fn taken(source: Source, options: &Options) -> Result<(Kept, Report), IntakeError> {
    let (mut kept, report) = read(vec![source], options, Kept::default(), &mut |_| ())?;
    kept.0.sort_by(|a, b| (a.2.at(), &a.1).partial_cmp(&(b.2.at(), &b.1)).unwrap());
    Ok((kept, report))
}

fn file(name: &str, options: &Options) -> Result<(Kept, Report), IntakeError> {
    taken(Source::path(table(name)), options)
}

/// To the last bit but for ages and times that come in other units.
fn same(name: &str, found: &Kept, expected: &Kept) {
    assert_eq!(found.0.len(), expected.0.len(), "{name}");
    for ((stream, id, wait), (other, other_id, same)) in found.0.iter().zip(&expected.0) {
        let exact = |wait: &Wait| match wait.age() {
            Age::Exact(age) => age,
            Age::Between { .. } => panic!("{wait:?}"),
        };
        assert_eq!((stream, id), (other, other_id), "{name}");
        assert_eq!((wait.ending(), wait.attempt()), (same.ending(), same.attempt()), "{name}");
        assert!((exact(wait) / exact(same) - 1.0).abs() < 1e-15, "{name}: {wait:?} {same:?}");
        assert!((wait.at().unwrap() - same.at().unwrap()).abs() < 1e-6, "{name}: {wait:?} {same:?}");
    }
}

#[test]
fn every_type_and_codec_says_the_same() {
    let (expected, _) = file("waits.ndjson", &threads(1)).unwrap();
    assert_eq!(expected.0.len(), 600);
    let mapping = Mapping::default()
        .with_columns("elapsed=duration_ms:ms,at=ts,stream=service,ending=status,attempt=try,id=key")
        .and_then(|mapping| mapping.with_endings("499=gave_up,5??=failed,1??=waiting,*=done"))
        .unwrap();
    for name in [
        "waits-none.parquet",
        "waits-snappy.parquet",
        "waits-gzip.parquet",
        "waits-zstd.parquet",
        "waits-lz4.parquet",
        "types.parquet",
        "mapped.parquet",
        "waits.arrow",
        "types.arrow",
        "waits.arrows",
    ] {
        for n in [1, 3] {
            let mut options = threads(n);
            if name == "mapped.parquet" {
                options.mapping = Some(Arc::new(mapping.clone()));
            }
            let (kept, report) = file(name, &options).unwrap();
            same(name, &kept, &expected);
            assert_eq!((report.lines, report.waits, report.bad.count), (600, 600, 0), "{name}");
            let format = if name.contains("parquet") { Format::Parquet } else { Format::Arrow };
            assert_eq!(report.files[0].format, Some(format));
        }
    }
}

#[test]
fn from_a_pipe_and_packed_as_well() {
    let (expected, _) = file("waits.ndjson", &threads(1)).unwrap();
    for name in ["waits-snappy.parquet", "waits.arrow", "waits.arrows"] {
        let bytes = std::fs::read(table(name)).unwrap();
        let packed = zstd::encode_all(&bytes[..], 1).unwrap();
        for bytes in [bytes, packed] {
            let (kept, _) = taken(Source::reader("pipe", std::io::Cursor::new(bytes)), &threads(2)).unwrap();
            same(name, &kept, &expected);
        }
    }
}

/// Three groups; times grow by 300 s from 2026-11-28T23:00Z. A window that the second and third lie outside of reads
/// one group, and everything that is said of the data is the same as from NDJSON.
#[test]
fn groups_outside_the_window_are_not_read_and_counted_all_the_same() {
    // `date -u -d 2026-11-28T23:00Z +%s`
    let start = 1_795_906_800.0;
    for (since, until) in [
        (None, Some(start + 50_000.0)),
        (Some(start + 125_000.0), None),
        (Some(start + 70_000.0), Some(start + 70_301.0)),
        (Some(start + 60_000.0), Some(start + 119_000.0)),
    ] {
        let options = Options { since, until, ..threads(2) };
        let (expected, told) = file("waits.ndjson", &options).unwrap();
        let (kept, report) = file("waits-zstd.parquet", &options).unwrap();
        same("window", &kept, &expected);
        assert_eq!(report.left_out, told.left_out);
        assert_eq!((report.oldest, report.newest, report.lines), (told.oldest, told.newest, told.lines));
        // Statistics of nanoseconds as well.
        same("window", &file("types.parquet", &options).unwrap().0, &expected);
    }
    // That they are not read shows where they cannot be: the bytes of the first group are spoilt.
    let mut spoilt = std::fs::read(table("waits-none.parquet")).unwrap();
    spoilt[4..8_000].fill(0xff);
    let source = || Source::reader("spoilt", std::io::Cursor::new(spoilt.clone()));
    assert!(matches!(taken(source(), &threads(1)), Err(IntakeError::Columns { .. })));
    let late = Options { since: Some(start + 120_000.0), ..threads(1) };
    assert_eq!(taken(source(), &late).unwrap().0.0.len(), 200);
}

#[test]
fn what_cannot_be_waits_is_named() {
    let told = |name: &str| file(name, &threads(1)).err().unwrap().to_string();
    let text = told("wrong-type.parquet");
    assert!(text.contains("the column \"elapsed\" is Timestamp") && text.contains("no `elapsed`"), "{text}");
    let text = told("no-age.parquet");
    assert!(text.contains("there is no column `elapsed`; the nearest is \"elapse\""), "{text}");
    let lenient = Options { bad_lines: Allowed::All, ..threads(1) };
    let (kept, report) = file("bad-rows.parquet", &lenient).unwrap();
    assert_eq!((kept.0.len(), report.bad.count), (1, 5));
    let bad: Vec<_> = report.bad.examples.iter().map(|bad| (bad.line, bad.field, bad.kind)).collect();
    assert_eq!(bad[1], (3, "elapsed", "negative"));
    assert_eq!(bad[2], (4, "stream", "missing"));
    assert_eq!(bad[3], (5, "elapsed", "missing"));
}

#[test]
fn a_table_that_is_cut_off_is_damaged() {
    for name in ["waits-snappy.parquet", "waits.arrow", "waits.arrows"] {
        let bytes = std::fs::read(table(name)).unwrap();
        for length in [8, 100, bytes.len() / 2, bytes.len() - 20] {
            let cut = Source::reader("cut", std::io::Cursor::new(bytes[..length].to_vec()));
            let error = taken(cut, &threads(1)).err();
            let error = error.unwrap_or_else(|| panic!("{name} cut to {length} bytes was read"));
            assert!(matches!(error, IntakeError::Columns { .. }), "{name} {length}: {error}");
        }
    }
}

/// Written by arrow-rs, which fills the magic word up to 64 bytes where pyarrow fills it up to 8.
#[test]
fn a_file_of_another_writer() {
    use arrow_array::{ArrayRef, Float64Array, RecordBatch, StringArray};
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("waits.arrow");
    let streams: ArrayRef = Arc::new(StringArray::from(vec!["courier.slot", "scan.job"]));
    let elapsed: ArrayRef = Arc::new(Float64Array::from(vec![1.5, 90.0]));
    let batch = RecordBatch::try_from_iter([("stream", streams), ("elapsed", elapsed)]).unwrap();
    let file = std::fs::File::create(&path).unwrap();
    let mut writer = arrow_ipc::writer::FileWriter::try_new(file, &batch.schema()).unwrap();
    writer.write(&batch).unwrap();
    writer.finish().unwrap();
    let (kept, report) = read(vec![Source::path(path)], &threads(1), Kept::default(), &mut |_| ()).unwrap();
    assert_eq!((report.waits, report.bad.count), (2, 0));
    let ages: Vec<(&str, Age)> =
        kept.0.iter().map(|(stream, _, wait)| (stream.as_str(), wait.age())).collect();
    assert_eq!(ages, [("courier.slot", Age::Exact(1.5)), ("scan.job", Age::Exact(90.0))]);
}
