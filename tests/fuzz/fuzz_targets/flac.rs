//! FLAC: a stream that may be damaged anywhere. Built for fuzzing, the decoder
//! does not compare checksums, so that damage gets past them.
#![no_main]

mod common;

use foldtrace::capture::OpenOptions;
use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| {
    common::read_twice(&[b"fLaC", data], &OpenOptions::default());
});
