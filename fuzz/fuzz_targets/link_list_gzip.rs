#![no_main]
//! A compressed link list: the bytes after the head of a gzip member (RFC 1952, section 2.3).

mod sound;

use libfuzzer_sys::fuzz_target;

const HEAD: [u8; 10] = [0x1f, 0x8b, 8, 0, 0, 0, 0, 0, 0, 0xff];

fuzz_target!(|data: &[u8]| sound::check([&HEAD, data].concat().as_slice()));
