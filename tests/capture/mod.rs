//! Reading recordings: every format and every fault, from files made here.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod csv;
mod dialects;
mod finds;
mod flac;
mod layout;
mod odd;
mod riff;
mod stamps;
mod wav;

use std::path::{Path, PathBuf};

use foldtrace::capture::{Block, Capture, CaptureError, OpenOptions};
use tempfile::TempDir;

/// Signed primes, so that a slip in sign, order or stride shows.
const PRIMES: [i32; 24] = [
    2, -3, 5, -7, 11, -13, 17, -19, 23, -29, 31, -37, 41, -43, 47, -53, 59, -61, 67, -71, 73, -79,
    83, -89,
];

struct Folder(TempDir);

impl Folder {
    fn new() -> Folder {
        Folder(tempfile::tempdir().unwrap())
    }

    fn write(&self, name: &str, bytes: impl AsRef<[u8]>) -> PathBuf {
        let path = self.0.path().join(name);
        // A file that is truncated and written again waits for the disk on
        // some file systems: thousands of cases would take seconds.
        let _ = std::fs::remove_file(&path);
        std::fs::write(&path, bytes).unwrap();
        path
    }
}

fn open(path: &Path) -> Result<Capture, CaptureError> {
    Capture::open(path, &OpenOptions::default())
}

fn open_at(path: &Path, rate_hz: f64) -> Result<Capture, CaptureError> {
    Capture::open(
        path,
        &OpenOptions {
            rate_hz: Some(rate_hz),
            ..OpenOptions::default()
        },
    )
}

/// The message of a file that must be refused.
fn refusal(path: &Path) -> String {
    one_line(open(path).expect_err("must be refused"))
}

fn one_line(error: CaptureError) -> String {
    let text = error.to_string();
    assert!(!text.chars().any(char::is_control), "{text:?}");
    text
}

/// All samples, read in blocks into dirty memory; checks the blocks' shape.
fn read(capture: &Capture, frames_per_block: usize) -> Vec<Vec<f32>> {
    let spec = capture.spec();
    let mut all = vec![Vec::new(); spec.channels.len()];
    let mut blocks = capture.blocks(frames_per_block).unwrap();
    let mut block = Block {
        first_frame: 99,
        samples: vec![vec![f32::MAX; 5]; 7],
    };
    let mut short = false;
    while blocks.next_into(&mut block).unwrap() {
        assert!(!short, "only the last block may be short");
        assert_eq!(block.first_frame, all[0].len() as u64);
        assert_eq!(block.samples.len(), all.len());
        short = block.frames() < frames_per_block;
        assert!(block.frames() > 0 && block.frames() <= frames_per_block);
        for (all, new) in all.iter_mut().zip(&block.samples) {
            assert_eq!(new.len(), block.samples[0].len());
            all.extend_from_slice(new);
        }
    }
    assert_eq!(all[0].len() as u64, spec.frames);
    assert!(
        !blocks.next_into(&mut block).unwrap(),
        "the end stays the end"
    );
    all
}

/// Bit patterns, so that NaN equals NaN.
fn bits(samples: &[Vec<f32>]) -> Vec<Vec<u32>> {
    samples
        .iter()
        .map(|channel| channel.iter().map(|x| x.to_bits()).collect())
        .collect()
}

fn notes(capture: &Capture) -> String {
    capture.spec().notes.join("; ")
}

/// A chunk with its pad byte.
fn chunk(id: &[u8; 4], size: Option<u32>, body: &[u8]) -> Vec<u8> {
    let mut bytes = id.to_vec();
    bytes.extend(size.unwrap_or(body.len() as u32).to_le_bytes());
    bytes.extend(body);
    bytes.resize(bytes.len().next_multiple_of(2), 0);
    bytes
}

fn riff_file(magic: &[u8; 4], chunks: &[Vec<u8>]) -> Vec<u8> {
    let body = chunks.concat();
    let mut bytes = magic.to_vec();
    bytes.extend((body.len() as u32 + 4).to_le_bytes());
    bytes.extend(b"WAVE");
    bytes.extend(body);
    bytes
}

fn fmt(tag: u16, channels: u16, rate: u32, bits: u16, width: u16) -> Vec<u8> {
    let frame = width * channels;
    let mut body = Vec::new();
    body.extend(tag.to_le_bytes());
    body.extend(channels.to_le_bytes());
    body.extend(rate.to_le_bytes());
    body.extend((rate * u32::from(frame)).to_le_bytes());
    body.extend(frame.to_le_bytes());
    body.extend(bits.to_le_bytes());
    chunk(b"fmt ", None, &body)
}

fn extensible(tag: u16, bits: u16, valid: u16) -> Vec<u8> {
    let mut body = fmt(0xFFFE, 1, 8000, bits, bits / 8)[8..].to_vec();
    body.extend(22u16.to_le_bytes());
    body.extend(valid.to_le_bytes());
    body.extend(0u32.to_le_bytes());
    body.extend(tag.to_le_bytes());
    body.extend(b"\x00\x00\x00\x00\x10\x00\x80\x00\x00\xAA\x00\x38\x9B\x71");
    chunk(b"fmt ", None, &body)
}

fn pcm16(samples: &[i32]) -> Vec<u8> {
    samples
        .iter()
        .flat_map(|&s| (s as i16).to_le_bytes())
        .collect()
}

fn fractions(samples: &[i32], full_scale: f32) -> Vec<f32> {
    samples.iter().map(|&s| s as f32 / full_scale).collect()
}

/// A table of time and the primes at `rate` from a row writer.
fn table(header: &str, rows: usize, row: impl Fn(usize) -> String) -> String {
    let mut text = header.to_owned();
    for i in 0..rows {
        text += &row(i);
        text.push('\n');
    }
    text
}

fn prime(i: usize) -> f32 {
    PRIMES[i % 24] as f32
}

#[test]
fn captures_are_shared_and_passes_are_sent() {
    fn shared<T: Send + Sync>() {}
    fn sent<T: Send>() {}
    shared::<Capture>();
    sent::<foldtrace::capture::Blocks>();
}

#[test]
fn passes_can_run_side_by_side_in_threads() {
    let folder = Folder::new();
    let text = table("t,x\n", 300, |i| {
        format!("{},{}", i as f64 / 64.0, prime(i))
    });
    let csv = open(&folder.write("s.csv", text)).unwrap();
    let chunks = [
        fmt(1, 1, 8000, 16, 2),
        chunk(b"data", None, &pcm16(&PRIMES)),
    ];
    let wav = open(&folder.write("s.wav", riff_file(b"RIFF", &chunks))).unwrap();
    for capture in [&csv, &wav] {
        let expected = bits(&read(capture, 1000));
        std::thread::scope(|scope| {
            let passes: Vec<_> = (1..5)
                .map(|n| scope.spawn(move || bits(&read(capture, n))))
                .collect();
            for pass in passes {
                assert_eq!(pass.join().unwrap(), expected);
            }
        });
        let mut blocks = capture.blocks(64).unwrap();
        std::thread::spawn(move || blocks.next_into(&mut Block::default()).unwrap())
            .join()
            .unwrap();
    }
}
