//! WAV: any chunks after any of the three magic words.
#![no_main]

mod common;

use foldtrace::capture::OpenOptions;
use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| {
    let Some((&choice, rest)) = data.split_first() else {
        return;
    };
    let magic: &[u8] = match choice % 8 {
        0 => b"RF64\xFF\xFF\xFF\xFFWAVE",
        1 => b"BW64\xFF\xFF\xFF\xFFWAVE",
        2 => b"",
        _ => b"RIFF\x00\x01\x00\x00WAVE",
    };
    let options = OpenOptions {
        rate_hz: (choice >= 128).then_some(12.5),
        ..OpenOptions::default()
    };
    common::read_twice(&[magic, rest], &options);
});
