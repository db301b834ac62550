//! Telemetry: the first byte says in which form the rest is.
#![no_main]

use libfuzzer_sys::fuzz_target;
use outwait::intake::{Format, Options};

#[path = "../counting.rs"]
mod counting;

fuzz_target!(|bytes: &[u8]| {
    let Some((form, body)) = bytes.split_first() else { return };
    let format = [Format::OtlpTraces, Format::OtlpMetrics, Format::MetricsText][usize::from(form % 3)];
    counting::count(body, Options { format: Some(format), total_bytes: 1 << 20, ..Options::default() });
});
