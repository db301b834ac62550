//! Parquet and Arrow tables written by pyarrow say what the same waits say as NDJSON, whatever their types and codecs;
//! a window leaves out groups without reading them, and says the same as if it had.
#![cfg(feature = "columnar")]
#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

#[path = "support/kept.rs"]
mod kept;

use std::num::NonZeroUsize;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use arrow_array::{ArrayRef, Float64Array, RecordBatch, StringArray};
use kept::Kept;
use outwait::intake::{Allowed, Format, IntakeError, Mapping, Options, Report, Source, read};
use outwait::wait::{Age, Wait};
use parquet::arrow::ArrowWriter;
use parquet::file::properties::WriterProperties;
use parquet::file::reader::{FileReader, SerializedFileReader};

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

/// Six bytes for two thousand million elements that take no room: its decoder would be at it for hours.
#[test]
fn a_footer_that_says_more_than_it_holds_is_damaged() {
    let mut footer = [0x09, 0xfe, 0x01, 0xf1, 0xff, 0xff, 0xff, 0xff, 0x07].repeat(2_000);
    footer.push(0);
    let length = u32::try_from(footer.len()).unwrap().to_le_bytes();
    let bytes = [&b"PAR1"[..], &footer, &length, b"PAR1"].concat();
    let error = taken(Source::reader("hours", std::io::Cursor::new(bytes)), &threads(1)).unwrap_err();
    assert!(error.to_string().contains("its footer does not hold what it says"), "{error}");
}

/// The same where a page begins.
#[test]
fn a_page_that_says_more_than_it_holds_is_damaged() {
    let mut bytes = std::fs::read(table("waits-none.parquet")).unwrap();
    let metadata = SerializedFileReader::new(bytes::Bytes::from(bytes.clone())).unwrap();
    let head = [0x09, 0xfe, 0x01, 0xf1, 0xff, 0xff, 0xff, 0xff, 0x07].repeat(4);
    for column in metadata.metadata().row_groups().iter().flat_map(|group| group.columns()) {
        let start = usize::try_from(column.byte_range().0).unwrap();
        bytes[start..start + head.len()].copy_from_slice(&head);
    }
    let error = taken(Source::reader("hours", std::io::Cursor::new(bytes)), &threads(1)).unwrap_err();
    assert!(error.to_string().contains("a page head is false"), "{error}");
}

/// Texts so long that the head of their page, which holds the least and the greatest, is longer than what is read at first.
#[test]
fn a_page_with_a_long_head_is_read() {
    let columns: [(&str, ArrayRef); 3] = [
        ("stream", Arc::new(StringArray::from(vec!["catalogue.lookup"; 3]))),
        ("elapsed", Arc::new(Float64Array::from(vec![1.0, 2.0, 3.0]))),
        ("id", Arc::new(StringArray::from(vec!["r".repeat(10_000); 3]))),
    ];
    let batch = RecordBatch::try_from_iter(columns).unwrap();
    let properties = WriterProperties::builder()
        .set_dictionary_enabled(false)
        .set_statistics_truncate_length(None)
        .set_write_page_header_statistics(true);
    let mut bytes = Vec::new();
    let mut writer = ArrowWriter::try_new(&mut bytes, batch.schema(), Some(properties.build())).unwrap();
    writer.write(&batch).unwrap();
    writer.close().unwrap();
    let (kept, report) = taken(Source::reader("long", std::io::Cursor::new(bytes)), &threads(1)).unwrap();
    assert_eq!((kept.0.len(), report.bad.count), (3, 0));
}

#[test]
fn tables_are_refused_where_none_is_taken() {
    for name in ["waits-gzip.parquet", "waits.arrow", "waits.arrows"] {
        let error = file(name, &Options { tables: false, ..threads(1) }).unwrap_err();
        assert!(matches!(error, IntakeError::Table { .. }), "{name}: {error}");
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

/// Some writers give texts as bytes. A row whose bytes are no text is refused, and the others are read.
#[test]
fn texts_given_as_bytes() {
    use arrow_array::{Array, BinaryArray, BinaryViewArray, Float64Array, LargeBinaryArray, RecordBatch};
    let names: [&[u8]; 5] = [b"scan.job", b"scan.job", b"\xff\xfe", b"courier.slot", b"scan.job"];
    let ids: [&[u8]; 5] = [b"a", b"b", b"c", b"d", b"\xc3("];
    let folder = tempfile::tempdir().unwrap();
    let streams: [Arc<dyn Array>; 3] = [
        Arc::new(BinaryArray::from_iter_values(names)),
        Arc::new(LargeBinaryArray::from_iter_values(names)),
        Arc::new(BinaryViewArray::from_iter_values(names)),
    ];
    for (number, stream) in streams.into_iter().enumerate() {
        let elapsed = Arc::new(Float64Array::from(vec![1.0, 2.0, 3.0, 4.0, 5.0]));
        let id = Arc::new(BinaryArray::from_iter_values(ids));
        let columns: [(&str, Arc<dyn Array>); 3] = [("stream", stream), ("elapsed", elapsed), ("id", id)];
        let batch = RecordBatch::try_from_iter(columns).unwrap();
        let (arrow, parquet) = (folder.path().join("waits.arrow"), folder.path().join("waits.parquet"));
        let file = std::fs::File::create(&arrow).unwrap();
        let mut writer = arrow_ipc::writer::FileWriter::try_new(file, &batch.schema()).unwrap();
        writer.write(&batch).unwrap();
        writer.finish().unwrap();
        let file = std::fs::File::create(&parquet).unwrap();
        let mut writer = parquet::arrow::ArrowWriter::try_new(file, batch.schema(), None).unwrap();
        writer.write(&batch).unwrap();
        writer.close().unwrap();
        for path in [arrow, parquet] {
            let lenient = Options { bad_lines: Allowed::All, ..threads(1) };
            let (kept, report) =
                read(vec![Source::path(path)], &lenient, Kept::default(), &mut |_| ()).unwrap();
            let read: Vec<_> =
                kept.0.iter().map(|(stream, id, _)| (stream.as_str(), id.as_deref())).collect();
            let expected = [("scan.job", Some("a")), ("scan.job", Some("b")), ("courier.slot", Some("d"))];
            assert_eq!(read, expected, "{number}");
            let bad: Vec<_> = report.bad.examples.iter().map(|bad| (bad.line, bad.kind)).collect();
            assert_eq!(bad, [(3, "not UTF-8 text"), (5, "not UTF-8 text")], "{number}");
        }
    }
}

/// Plain rows are taken by the column, all others by the field. Beside a column of a field that no plain row has, itself without
/// a value, all are taken by the field: the same waits in the same order, the same rows refused for the same reasons.
#[test]
fn rows_taken_by_the_column_and_by_the_field_say_the_same() {
    use arrow_array::types::Int32Type;
    use arrow_array::{
        ArrayRef, DictionaryArray, Float64Array, Int16Array, Int64Array, RecordBatch, StringArray,
        TimestampMicrosecondArray,
    };
    // For a while a row in 40 is odd in one of many ways, some in two; then none is, for longer than rows are looked at at once.
    let mut state = 7u64;
    let mut draw = |below: usize| {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 33) as usize % below
    };
    let rows = 20_000;
    let names: Vec<String> = (0..300).map(|i| format!("branch-of-the-library-{i:03}.lookup")).collect();
    let odd_names = [None, Some(""), Some("two words"), Some("\u{e4}"), Some("x")];
    let ages = [None, Some(0.0), Some(-1.0), Some(f64::NAN), Some(f64::INFINITY), Some(1e14), Some(1e-9)];
    let endings = [Some("done"), Some("failed"), Some("gave_up"), Some("waiting"), None];
    let odd_endings = [Some(""), Some("lost"), Some("DONE"), Some("done ")];
    let times = [None, Some(-1), Some(i64::MAX), Some(i64::MIN), Some(0)];
    let attempts = [None, Some(0), Some(-1), Some(1 << 40), Some(7)];
    let (mut stream, mut elapsed, mut ending, mut at, mut attempt, mut id, mut status) =
        (Vec::new(), Vec::new(), Vec::new(), Vec::new(), Vec::new(), Vec::new(), Vec::new());
    for row in 0..rows {
        let mut odd = || draw(80) == 0 && row % 10_000 < 4_000;
        let (a, b, c, d, e) = (odd(), odd(), odd(), odd(), odd());
        stream.push(if a { odd_names[draw(5)] } else { Some(names[draw(300)].as_str()) });
        elapsed.push(if b { ages[draw(7)] } else { Some(0.5 + draw(10_000) as f64) });
        ending.push(if c { odd_endings[draw(4)] } else { endings[draw(5)] });
        at.push(if d { times[draw(5)] } else { Some(1_796_040_000_000_000 + 1_000 * row as i64) });
        attempt.push(if e { attempts[draw(5)] } else { Some(1 + draw(2) as i64) });
        id.push([None, Some("".to_owned()), Some(format!("r-{row}"))][draw(3)].clone());
        status.push([Some(200i16), Some(499), Some(503), Some(-1), None][draw(5)]);
    }
    let folder = tempfile::tempdir().unwrap();
    let told = |columns: &[(&str, ArrayRef)], name: &str, options: &Options| {
        let batch = RecordBatch::try_from_iter(columns.iter().cloned()).unwrap();
        let (arrow, parquet) = (folder.path().join(name), folder.path().join(format!("{name}.parquet")));
        let file = std::fs::File::create(&arrow).unwrap();
        let mut writer = arrow_ipc::writer::FileWriter::try_new(file, &batch.schema()).unwrap();
        writer.write(&batch.slice(0, 15_000)).unwrap();
        writer.write(&batch.slice(15_000, rows - 15_000)).unwrap();
        writer.finish().unwrap();
        let file = std::fs::File::create(&parquet).unwrap();
        let mut writer = parquet::arrow::ArrowWriter::try_new(file, batch.schema(), None).unwrap();
        writer.write(&batch).unwrap();
        writer.close().unwrap();
        [arrow, parquet].map(|path| {
            let source = vec![Source::path(path)];
            let (kept, report) = read(source, options, Kept::default(), &mut |_| ()).unwrap();
            let bad: Vec<_> = report.bad.examples.iter().map(|bad| (bad.line, bad.to_string())).collect();
            let bad: Vec<_> =
                bad.iter().map(|(line, text)| (*line, text.split_once(": ").unwrap().1.to_owned())).collect();
            (
                kept.0,
                bad,
                report.bad.by_reason,
                report.left_out,
                report.suspicions,
                report.oldest,
                report.newest,
            )
        })
    };
    let endings: ArrayRef = Arc::new(StringArray::from(ending.clone()));
    let coded: ArrayRef = Arc::new(ending.iter().copied().collect::<DictionaryArray<Int32Type>>());
    let statuses: ArrayRef = Arc::new(Int16Array::from(status));
    let streams: ArrayRef = Arc::new(StringArray::from(stream.clone()));
    let coded_streams: ArrayRef = Arc::new(stream.iter().copied().collect::<DictionaryArray<Int32Type>>());
    let mapping = Mapping::default().with_endings("499=gave_up,5??=failed,lost=failed,2??=done").unwrap();
    let lenient = Options { bad_lines: Allowed::All, ..threads(1) };
    let mapped = Options { mapping: Some(Arc::new(mapping)), ..lenient.clone() };
    let window = Options { since: Some(1_796_040_003.0), until: Some(1_796_040_015.0), ..lenient.clone() };
    let one = Options { one_stream: Some("all".into()), ..lenient.clone() };
    let some =
        Options { streams: Some(outwait::policy::Glob::new("branch*1?.lookup").unwrap()), ..lenient.clone() };
    for (number, (stream, ending, options)) in [
        (&streams, &endings, &lenient),
        (&coded_streams, &coded, &lenient),
        (&streams, &statuses, &mapped),
        (&coded_streams, &endings, &mapped),
        (&streams, &coded, &window),
        (&streams, &endings, &one),
        (&coded_streams, &coded, &some),
    ]
    .into_iter()
    .enumerate()
    {
        let mut columns: Vec<(&str, ArrayRef)> = vec![
            ("stream", Arc::clone(stream)),
            ("elapsed_ms", Arc::new(Float64Array::from(elapsed.clone()))),
            ("ending", Arc::clone(ending)),
            ("at", Arc::new(TimestampMicrosecondArray::from(at.clone()))),
            ("attempt", Arc::new(Int64Array::from(attempt.clone()))),
        ];
        if number % 2 == 0 {
            columns.push(("id", Arc::new(StringArray::from(id.clone()))));
        }
        let by_column = told(&columns, &format!("{number}-a"), options);
        columns.push(("entered", Arc::new(Float64Array::from(vec![None; rows]))));
        let by_field = told(&columns, &format!("{number}-b"), options);
        assert!(by_column[0].0.len() > 500 && by_column[0].1.len() > 5, "{number}");
        for (one, other) in by_column.iter().zip(&by_field).chain([(&by_column[0], &by_column[1])]) {
            assert_eq!(one.0.len(), other.0.len(), "{number}");
            assert!(one == other, "{number}: {:?} {:?}", one.1, other.1);
        }
    }
}
