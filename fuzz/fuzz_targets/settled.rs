//! Files of settled times.
#![no_main]

use libfuzzer_sys::fuzz_target;

fuzz_target!(|bytes: &[u8]| {
    let _ = outwait::settle::parse(bytes, "settled.yaml");
});
