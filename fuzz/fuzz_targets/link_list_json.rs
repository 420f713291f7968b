#![no_main]
//! A link list of JSON lines.

mod sound;

use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| sound::check([b"{\"time\":0,\"source\":1,\"target\":2}\n", data].concat().as_slice()));
