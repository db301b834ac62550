//! Stored tallies: what is decoded encodes to something that decodes to the same.
#![no_main]

use libfuzzer_sys::fuzz_target;
use outwait::tally::Tally;

fuzz_target!(|bytes: &[u8]| {
    if let Ok(tally) = Tally::decode(bytes) {
        let mut again = Vec::new();
        tally.encode(&mut again);
        assert_eq!(Tally::decode(&again).expect("own bytes"), tally);
    }
});
