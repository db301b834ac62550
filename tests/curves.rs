//! The nonparametric curves against general-purpose libraries, published tables and slow obvious twins.

mod support;

use support::{SETS, Zeros, expected, set};

#[test]
fn reference_files_hold_what_their_answers_say() {
    for name in SETS {
        let (Some(set), Some(answer)) = (set(name), expected(name)) else { continue };
        assert_eq!(set.rows.len() as u64, answer["rows"].as_u64().unwrap(), "{name}");
        let zeros = set.rows.len() - set.waits(None, Zeros::Drop).len();
        assert_eq!(zeros as u64, answer["n_zero"].as_u64().unwrap(), "{name}");
        assert_eq!(set.cells(None, Zeros::AsLeast).total(), set.rows.len() as f64, "{name}");
    }
}
