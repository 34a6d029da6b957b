//! What every recording must keep to, whatever bytes it is made of.

use foldtrace::capture::{Block, Capture, OpenOptions};
use std::cell::RefCell;
use std::io::{Seek, Write};

thread_local! {
    static FILE: RefCell<tempfile::NamedTempFile> =
        RefCell::new(tempfile::NamedTempFile::new().expect("a temporary file"));
}

/// Opens the bytes as a recording and, where that works, passes over it twice.
pub fn read_twice(pieces: &[&[u8]], options: &OpenOptions) {
    FILE.with_borrow_mut(|named| {
        let path = named.path().to_owned();
        let file = named.as_file_mut();
        file.set_len(0).expect("a file that can be emptied");
        file.rewind().expect("a file that can be rewound");
        for piece in pieces {
            file.write_all(piece).expect("room for the file");
        }
        let bytes: usize = pieces.iter().map(|piece| piece.len()).sum();
        match Capture::open(&path, options) {
            Err(error) => {
                let text = error.to_string();
                assert!(!text.chars().any(char::is_control), "one line: {text:?}");
            }
            Ok(capture) => {
                let spec = capture.spec();
                assert!(spec.rate_hz.is_finite() && spec.rate_hz > 0.0);
                // Gaps are filled in and constant frames of FLAC are short, but
                // there is a bound.
                if spec.frames > 20_000_000 {
                    assert!(spec.frames <= 65_536 * (bytes as u64 + 1));
                    return;
                }
                let first = digest(&capture, 4096);
                let second = digest(&capture, 1000);
                assert_eq!(first, second, "every pass gives the same samples");
            }
        }
    });
}

/// Frames and a sum over all bits of all samples.
fn digest(capture: &Capture, frames_per_block: usize) -> (u64, u64) {
    let mut blocks = capture.blocks(frames_per_block).expect("opens again");
    let mut block = Block::default();
    let (mut frames, mut sum) = (0, 0u64);
    while blocks.next_into(&mut block).expect("reads again") {
        assert_eq!(block.samples.len(), capture.spec().channels.len());
        assert_eq!(block.first_frame, frames);
        frames += block.frames() as u64;
        for (channel, samples) in block.samples.iter().enumerate() {
            assert_eq!(samples.len(), block.frames());
            for sample in samples {
                assert!(sample.is_finite() || sample.is_nan());
                sum = sum.wrapping_add((u64::from(sample.to_bits()) + 1) * (channel as u64 + 1));
            }
        }
    }
    assert_eq!(frames, capture.spec().frames);
    (frames, sum)
}
