//! Time stamps: cells in every format, and what a clock makes of a column.
#![no_main]

use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| foldtrace::capture::fuzzing::time_stamps(data));
