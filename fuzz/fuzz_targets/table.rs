//! Tables in columns: Parquet, Arrow files and streams. A start with the files of tests/reference/columns helps.
#![no_main]

use libfuzzer_sys::fuzz_target;
use outwait::intake::{Format, Options};

#[path = "../counting.rs"]
mod counting;

fuzz_target!(|bytes: &[u8]| {
    for format in [Format::Parquet, Format::Arrow] {
        counting::count(bytes, Options { format: Some(format), total_bytes: 1 << 20, ..Options::default() });
    }
});
