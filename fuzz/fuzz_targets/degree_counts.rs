#![no_main]
//! Degree counts of any pairs.

use libfuzzer_sys::fuzz_target;
use tailcast::model::DegreeCounts;

fuzz_target!(|pairs: Vec<(u64, u64)>| {
    match DegreeCounts::from_pairs(&pairs) {
        Ok(counts) => {
            assert_eq!(counts.nodes(), pairs.iter().map(|pair| pair.1).sum::<u64>());
            assert_eq!(counts.tail_size(0), counts.nodes());
            assert_eq!(counts.tail_size(counts.largest() + 1), 0);
            assert!(counts.iter().is_sorted_by(|one, next| one.0 < next.0));
        }
        Err(faults) => assert!(!faults.is_empty() && faults.iter().all(|fault| !fault.to_string().is_empty())),
    }
});
