//! Policy files.
#![no_main]

use libfuzzer_sys::fuzz_target;

fuzz_target!(|bytes: &[u8]| {
    let _ = outwait::policy::parse_bytes(bytes, "policy.yaml");
});
