//! CSV: any text, with and without a rate from the user.
#![no_main]

mod common;

use foldtrace::capture::OpenOptions;
use libfuzzer_sys::fuzz_target;

fuzz_target!(|data: &[u8]| {
    let Some((&choice, rest)) = data.split_first() else {
        return;
    };
    let options = OpenOptions {
        rate_hz: (choice >= 128).then_some(12.5),
        ..OpenOptions::default()
    };
    // Often enough the same rows again, so that short finds make long files.
    let again = [1, 1, 2, 20][usize::from(choice % 4)];
    common::read_twice(&vec![rest; again], &options);
});
