#![no_main]
//! A CSV link list, from its header on or from its second line on.

mod sound;

use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| {
    sound::check(data);
    sound::check([b"time,source,target\n", data].concat().as_slice());
});
