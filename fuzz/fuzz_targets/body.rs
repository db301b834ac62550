//! Bodies of waits in every format, packed or not.
#![no_main]

use libfuzzer_sys::fuzz_target;
use outwait::intake::Options;

#[path = "../counting.rs"]
mod counting;

fuzz_target!(|body: &[u8]| {
    counting::count(body, Options { line_bytes: 4_096, total_bytes: 1 << 20, ..Options::default() });
});
