//! Reading recordings: every format and every fault, from files made here.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::io::{Seek, SeekFrom, Write};
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

/// Interleaved integers as hound writes them.
fn hound_file(
    folder: &Folder,
    spec: hound::WavSpec,
    bytes_per_sample: u16,
    data: &[i32],
) -> PathBuf {
    let path = folder.0.path().join("hound.wav");
    let spec_ex = hound::WavSpecEx {
        spec,
        bytes_per_sample,
    };
    let file = std::fs::File::create(&path).unwrap();
    let mut writer = hound::WavWriter::new_with_spec_ex(file, spec_ex).unwrap();
    for &sample in data {
        match spec.sample_format {
            hound::SampleFormat::Int => writer.write_sample(sample).unwrap(),
            hound::SampleFormat::Float => writer.write_sample(sample as f32 / 64.0).unwrap(),
        }
    }
    writer.finalize().unwrap();
    path
}

/// The slow obvious twin: hound, sample by sample.
fn by_hound(path: &Path) -> Vec<Vec<f32>> {
    let mut reader = hound::WavReader::open(path).unwrap();
    let spec = reader.spec();
    let flat: Vec<f32> = match spec.sample_format {
        hound::SampleFormat::Float => reader.samples::<f32>().map(Result::unwrap).collect(),
        hound::SampleFormat::Int => {
            let full_scale = (1u64 << (spec.bits_per_sample - 1)) as f32;
            reader
                .samples::<i32>()
                .map(|s| s.unwrap() as f32 / full_scale)
                .collect()
        }
    };
    let channels = usize::from(spec.channels);
    (0..channels)
        .map(|c| flat.iter().skip(c).step_by(channels).copied().collect())
        .collect()
}

#[test]
fn every_wav_format_reads_as_its_slow_twin() {
    use hound::SampleFormat::{Float, Int};
    let folder = Folder::new();
    let formats = [
        (8, 1, Int),
        (16, 2, Int),
        (24, 3, Int),
        (24, 4, Int),
        (32, 4, Int),
        (32, 4, Float),
    ];
    for (bits_per_sample, bytes, sample_format) in formats {
        for channels in [1, 2, 3, 7] {
            let spec = hound::WavSpec {
                channels,
                sample_rate: 8000,
                bits_per_sample,
                sample_format,
            };
            let top = (1i64 << (bits_per_sample.min(24) - 1)) as i32;
            let data: Vec<i32> = (0..i32::from(channels) * 1000)
                .map(|i| match i {
                    0 => -top,
                    1 => top - 1,
                    _ => PRIMES[i as usize % 24] * (1 + i % 24 / 23) % top,
                })
                .collect();
            let path = hound_file(&folder, spec, bytes, &data);
            let capture = open(&path).unwrap();
            let case = format!("{bits_per_sample} bits in {bytes} bytes, {channels} channels");
            let expected = by_hound(&path);
            assert_eq!(expected[0].len(), 1000);
            assert_eq!(
                capture.spec().channels.len(),
                usize::from(channels),
                "{case}"
            );
            assert_eq!(capture.spec().rate_hz, 8000.0);
            assert!(capture.spec().normalised);
            for frames_per_block in [1, 7, 1000, 4096] {
                let samples = read(&capture, frames_per_block);
                assert_eq!(
                    bits(&samples),
                    bits(&expected),
                    "{case}, {frames_per_block} a block"
                );
            }
        }
    }
}

#[test]
fn the_twins_would_differ_if_one_slipped() {
    let folder = Folder::new();
    let spec = hound::WavSpec {
        channels: 2,
        sample_rate: 8000,
        bits_per_sample: 16,
        sample_format: hound::SampleFormat::Int,
    };
    let path = hound_file(&folder, spec, 2, &PRIMES.repeat(2));
    let mut bytes = std::fs::read(&path).unwrap();
    let expected = by_hound(&path);
    // Swap the channels of the last frame.
    let n = bytes.len();
    bytes.swap(n - 1, n - 3);
    bytes.swap(n - 2, n - 4);
    let other = folder.write("other.wav", bytes);
    assert_ne!(bits(&read(&open(&other).unwrap(), 64)), bits(&expected));
}

/// A chunk with its pad byte.
fn chunk(id: &[u8; 4], size: Option<u32>, body: &[u8]) -> Vec<u8> {
    let mut bytes = id.to_vec();
    bytes.extend(size.unwrap_or(body.len() as u32).to_le_bytes());
    bytes.extend(body);
    bytes.resize(bytes.len().next_multiple_of(2), 0);
    bytes
}

fn riff(magic: &[u8; 4], chunks: &[Vec<u8>]) -> Vec<u8> {
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

/// Opens bytes as a WAV that must hold the primes in 16 bits, one channel.
fn assert_primes(bytes: &[u8], note: &str) {
    let folder = Folder::new();
    let capture = open(&folder.write("primes.wav", bytes)).unwrap();
    assert_eq!(read(&capture, 10), [fractions(&PRIMES, 32768.0)]);
    match note {
        "" => assert_eq!(notes(&capture), ""),
        _ => assert!(
            notes(&capture).contains(note),
            "{:?} lacks {note:?}",
            notes(&capture)
        ),
    }
}

#[test]
fn a_data_size_that_lies_is_read_to_the_end() {
    let body = pcm16(&PRIMES);
    for (size, note) in [
        (None, ""),
        (
            Some(480),
            "data chunk claims 240 frames, file holds 24: read to the end",
        ),
        (Some(0x7FFF_FFFE), "claims 1073741823 frames, file holds 24"),
        (Some(0), "never finished"),
        (Some(u32::MAX), "never finished"),
    ] {
        let chunks = [fmt(1, 1, 8000, 16, 2), chunk(b"data", size, &body)];
        assert_primes(&riff(b"RIFF", &chunks), note);
    }
}

#[test]
fn a_cut_frame_is_dropped_and_noted() {
    let mut bytes = riff(
        b"RIFF",
        &[
            fmt(1, 1, 8000, 16, 2),
            chunk(b"data", None, &pcm16(&PRIMES)),
        ],
    );
    bytes.push(77);
    let size = bytes.len() - 44;
    bytes[40..44].copy_from_slice(&(size as u32).to_le_bytes());
    assert_primes(&bytes, "last 1 bytes are no whole frame");
}

#[test]
fn wav_faults_are_named() {
    let folder = Folder::new();
    let data = || chunk(b"data", None, &pcm16(&PRIMES));
    let wav = |chunks: &[Vec<u8>]| riff(b"RIFF", chunks);
    let cases: Vec<(Vec<u8>, &str)> = vec![
        (
            wav(&[fmt(1, 1, 8000, 16, 2), chunk(b"data", None, b"")]),
            "has a header but no samples",
        ),
        (wav(&[fmt(1, 1, 8000, 16, 2)]), "no data chunk"),
        (wav(&[data()]), "no format chunk"),
        (wav(&[]), "no format chunk"),
        (b"RIFF\x10".to_vec(), "the file ends inside it"),
        (wav(&[fmt(1, 0, 8000, 16, 2), data()]), "0 channels"),
        (wav(&[fmt(1, 1, 0, 16, 2), data()]), "--rate HZ"),
        (wav(&[fmt(1, 1, 8000, 0, 0), data()]), "0 bits"),
        (
            wav(&[fmt(1, 1, 8000, 40, 5), data()]),
            "40-bit integer samples",
        ),
        (
            wav(&[fmt(3, 1, 8000, 16, 2), data()]),
            "16-bit float samples",
        ),
        (wav(&[fmt(1, 5000, 8000, 8, 1), data()]), "5000 channels"),
        (wav(&[fmt(2, 1, 8000, 4, 1), data()]), "ADPCM"),
        (
            wav(&[fmt(7, 1, 8000, 8, 1), data()]),
            "mu-law samples (convert it to PCM first)",
        ),
        (wav(&[fmt(0x55, 1, 8000, 0, 1), data()]), "MPEG"),
        (wav(&[fmt(0x1234, 1, 8000, 16, 2), data()]), "0x1234"),
        (wav(&[extensible(6, 8, 8), data()]), "A-law"),
        (
            wav(&[chunk(b"fmt ", None, &[1, 0, 1, 0]), data()]),
            "4 bytes",
        ),
        (
            wav(&[fmt(1, 1, 8000, 16, 2), chunk(b"data", None, &[0; 30])]),
            "too short: 15 samples",
        ),
        (vec![], "is empty"),
        (b"\x1F\x8B\x08\x00abcdefgh".to_vec(), "gzip-compressed"),
        (b"PK\x03\x04abcdefgh".to_vec(), "zip"),
        (b"OggS\x00abcdefghij".to_vec(), "Ogg"),
        (b"fLaC\x00abcdefghij".to_vec(), "FLAC"),
        (b"ID3\x03\x00\x00abcdefg".to_vec(), "MP3"),
        (
            b"RIFF\x20\x00\x00\x00AVI LIST".to_vec(),
            "another kind than WAVE",
        ),
        (
            b"t,a\n0,1\n".to_vec(),
            "is not a WAV file: it starts with the text \"t,a",
        ),
        ((0..255).collect(), "not a WAV or CSV recording"),
    ];
    for (bytes, message) in cases {
        let text = refusal(&folder.write("fault.wav", &bytes));
        assert!(text.contains(message), "{text:?} lacks {message:?}");
    }
    assert!(refusal(folder.0.path()).contains("is a directory"));
    assert!(refusal(&folder.0.path().join("none.wav")).contains("cannot be read"));
}

#[test]
fn float_samples_that_are_none_are_missing() {
    let folder = Folder::new();
    let mut values = [0.25f32; 20];
    values[3] = f32::NAN;
    values[4] = f32::INFINITY;
    values[5] = f32::NEG_INFINITY;
    values[6] = -1.5;
    let body: Vec<u8> = values.iter().flat_map(|v| v.to_le_bytes()).collect();
    let chunks = [fmt(3, 1, 8000, 32, 4), chunk(b"data", None, &body)];
    let samples = read(
        &open(&folder.write("f.wav", riff(b"RIFF", &chunks))).unwrap(),
        6,
    );
    assert!(samples[0][3..6].iter().all(|x| x.is_nan()));
    assert_eq!(&samples[0][..3], [0.25; 3]);
    assert_eq!(samples[0][6], -1.5);
}

#[test]
fn a_rate_on_the_command_line_goes_first() {
    let folder = Folder::new();
    let chunks = [
        fmt(1, 1, 8000, 16, 2),
        chunk(b"data", None, &pcm16(&PRIMES)),
    ];
    let path = folder.write("rate.WAV", riff(b"RIFF", &chunks));
    let capture = open_at(&path, 8000.25).unwrap();
    assert_eq!(capture.spec().rate_hz, 8000.25);
    assert!(notes(&capture).contains("overridden"));
    for rate_hz in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        assert!(one_line(open_at(&path, rate_hz).unwrap_err()).contains("sample rate"));
    }
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
fn a_plain_csv_reads_with_rate_units_and_offset() {
    let folder = Folder::new();
    let text = table("time_s,accel [m/s^2],U (V)\n", 100, |i| {
        format!(
            "{:.6},{},{}",
            i as f64 / 2000.0,
            1e6 + f64::from(prime(i)) / 8.0,
            prime(i + 1)
        )
    });
    let capture = open(&folder.write("a.csv", &text)).unwrap();
    let spec = capture.spec();
    assert_eq!(spec.rate_hz, 2000.0);
    assert_eq!((spec.frames, spec.normalised), (100, false));
    assert_eq!(spec.channels[0].name, "accel");
    assert_eq!(spec.channels[0].unit.as_deref(), Some("m/s^2"));
    assert_eq!(spec.channels[1].name, "U");
    assert_eq!(spec.channels[1].unit.as_deref(), Some("V"));
    assert_eq!(spec.channels[0].offset, 1e6 + 0.25);
    assert_eq!(spec.notes, [""; 0]);
    let samples = read(&capture, 100);
    // Exact: the offset goes before the value is narrowed.
    let expected = |i: usize| (prime(i) / 8.0 - 0.25, prime(i + 1) - prime(1));
    for (i, (&a, &u)) in samples[0].iter().zip(&samples[1]).enumerate() {
        assert_eq!((a, u), expected(i), "row {i}");
    }
    for frames_per_block in [1, 7, 33, 1000] {
        assert_eq!(bits(&read(&capture, frames_per_block)), bits(&samples));
    }
}

#[test]
fn delimiters_decimal_marks_and_headings() {
    let folder = Folder::new();
    let comma = |x: f64| x.to_string().replace('.', ",");
    let row = |i: usize| (i as f64 / 64.0, f64::from(prime(i)) / 4.0);
    let cases = [
        (
            "comma",
            table("t,x\n", 50, |i| format!("{},{}", row(i).0, row(i).1)),
        ),
        (
            "comma and blanks",
            table("t, x\n", 50, |i| format!("{}, {}", row(i).0, row(i).1)),
        ),
        (
            "semicolon",
            table("t;x\n", 50, |i| format!("{};{}", row(i).0, row(i).1)),
        ),
        (
            "tab",
            table("Time\tx\n", 50, |i| format!("{}\t{}", row(i).0, row(i).1)),
        ),
        (
            "decimal comma",
            table("t;x\n", 50, |i| {
                format!("{};{}", comma(row(i).0), comma(row(i).1))
            }),
        ),
        (
            "tab and decimal comma",
            table("t\tx\n", 50, |i| {
                format!("{}\t{}", comma(row(i).0), comma(row(i).1))
            }),
        ),
        (
            "mark",
            table("\u{FEFF}t,x\n", 50, |i| {
                format!("{},{}", row(i).0, row(i).1)
            }),
        ),
        (
            "crlf",
            table("t,x\r\n", 50, |i| format!("{},{}\r", row(i).0, row(i).1)),
        ),
        (
            "no heading",
            table("", 50, |i| format!("{},{}", row(i).0, row(i).1)),
        ),
        (
            "quotes",
            table("\"t\",\"x\"\n", 50, |i| {
                format!("\"{}\",\"{}\"", comma(row(i).0), row(i).1)
            }),
        ),
        (
            "ms",
            table("t [ms],x\n", 50, |i| {
                format!("{},{}", row(i).0 * 1e3, row(i).1)
            }),
        ),
        (
            "us",
            table("time_us,x\n", 50, |i| {
                format!("{},{}", row(i).0 * 1e6, row(i).1)
            }),
        ),
        (
            "x first",
            table("x,t\n", 50, |i| format!("{},{}", row(i).1, row(i).0)),
        ),
        (
            "epoch in ms",
            table("timestamp,x\n", 50, |i| {
                format!("{:.3},{}", 1.7e12 + row(i).0 * 1e3, row(i).1)
            }),
        ),
    ];
    for (case, text) in cases {
        let capture = open(&folder.write("t.csv", &text)).unwrap_or_else(|e| panic!("{case}: {e}"));
        assert_eq!(capture.spec().rate_hz, 64.0, "{case}");
        let name = if case == "no heading" {
            "column 2"
        } else {
            "x"
        };
        assert_eq!(capture.spec().channels[0].name, name, "{case}");
        let expected: Vec<f32> = (0..50).map(|i| (prime(i) - 2.0) / 4.0).collect();
        assert_eq!(read(&capture, 20), [expected], "{case}");
    }
}

#[test]
fn without_time_the_rate_is_asked_for() {
    let folder = Folder::new();
    let path = folder.write(
        "x.csv",
        table("a,b\n", 30, |i| format!("{},{}", prime(i), i * i)),
    );
    assert_eq!(
        refusal(&path),
        "no time column found: give the sample rate with --rate HZ"
    );
    let capture = open_at(&path, 12.5).unwrap();
    assert_eq!(capture.spec().rate_hz, 12.5);
    assert_eq!(capture.spec().channels.len(), 2);
    let one = folder.write("one.csv", table("", 30, |i| format!("{}", prime(i))));
    assert_eq!(read(&open_at(&one, 1.0).unwrap(), 8)[0][1], -5.0);
    let counted = folder.write("n.csv", table("", 30, |i| format!("{i},{}", prime(i))));
    assert!(refusal(&counted).contains("only counts the rows"));
    let capture = open_at(&counted, 10.0).unwrap();
    assert_eq!(capture.spec().channels[0].name, "column 2");
}

#[test]
fn missing_values_are_nan_and_words_are_counted() {
    let folder = Folder::new();
    let marks = ["", "NA", "NaN", "#N/A", "null", "OL", "inf", "-", "oops"];
    let text = table("t,x\n", 100, |i| match i % 10 {
        5 => format!("{},{}", i as f64 / 10.0, marks[i / 10 % marks.len()]),
        _ => format!("{},{}", i as f64 / 10.0, prime(i)),
    });
    let capture = open(&folder.write("m.csv", &text)).unwrap();
    let samples = read(&capture, 32);
    for (i, x) in samples[0].iter().enumerate() {
        assert_eq!(x.is_nan(), i % 10 == 5, "row {i}");
    }
    let note =
        "1 cells of column \"x\" are no numbers (first: line 87, \"oops\"): taken as missing";
    assert_eq!(capture.spec().notes, [note]);
}

#[test]
fn a_gap_is_filled_so_that_index_and_time_agree() {
    let folder = Folder::new();
    let text = table("t,x\n", 5000, |i| {
        let frame = if i < 1000 {
            i
        } else if i < 3000 {
            i + 1
        } else {
            i + 12_001
        };
        format!("{:.4},{}", frame as f64 / 1000.0, prime(frame) + 3.0)
    });
    let capture = open(&folder.write("gap.csv", &text)).unwrap();
    assert_eq!(capture.spec().frames, 17_001);
    assert_eq!(capture.spec().rate_hz, 1000.0);
    assert!(notes(&capture).contains("2 gaps"), "{}", notes(&capture));
    assert!(notes(&capture).contains("12001 missing samples"));
    let samples = read(&capture, 777);
    for (i, &x) in samples[0].iter().enumerate() {
        if i == 1000 || (3001..15_001).contains(&i) {
            assert!(x.is_nan(), "frame {i}");
        } else {
            assert_eq!(x, prime(i) - 2.0, "frame {i}");
        }
    }
    assert_eq!(bits(&read(&capture, 1)), bits(&samples));
}

#[test]
fn a_gap_beyond_reason_is_refused() {
    let folder = Folder::new();
    let text = table("t,x\n", 100, |i| {
        format!("{},1.5", if i < 50 { i } else { i + 100_000 })
    });
    let message = refusal(&folder.write("jump.csv", &text));
    assert!(
        message.starts_with("line 52: the time jumps ahead by 100000 samples"),
        "{message}"
    );
}

#[test]
fn stamps_that_repeat_or_go_back() {
    let folder = Folder::new();
    // Row 40 twice; at row 70 the clock is set back by 3 s.
    let text = table("t,x\n", 101, |i| {
        let frame = if i <= 40 { i } else { i - 1 };
        let time = frame as f64 / 10.0 - if frame < 70 { 0.0 } else { 3.0 };
        format!("{time:.1},{}", prime(frame))
    });
    let capture = open(&folder.write("back.csv", &text)).unwrap();
    assert_eq!(capture.spec().frames, 100);
    assert!(
        notes(&capture).contains("1 rows repeat the stamp"),
        "{}",
        notes(&capture)
    );
    assert!(
        notes(&capture).contains("1 rows step back"),
        "{}",
        notes(&capture)
    );
    let expected: Vec<f32> = (0..100).map(|i| prime(i) - 2.0).collect();
    assert_eq!(read(&capture, 64), [expected]);

    let falling = table("t,x\n", 50, |i| format!("{},1", 50 - i));
    assert!(refusal(&folder.write("f.csv", falling)).contains("does not increase"));
    let still = table("t,x\n", 50, |_| "7,1".into());
    assert!(refusal(&folder.write("s.csv", still)).contains("does not increase"));
}

#[test]
fn csv_faults_are_named() {
    let folder = Folder::new();
    let words = table("t,x\n", 40, |i| match i % 3 {
        0 => format!("{i},abc"),
        _ => format!("{i},{i}"),
    });
    let wide = vec!["1"; 5000].join(",") + "\n";
    let cases: Vec<(String, &str)> = vec![
        (
            words,
            "line 2, column 2: \"abc\" is not a number (nor are 14 of 40 cells",
        ),
        ("t,x\n".into(), "has a header but no samples"),
        ("\n\n\n".into(), "is empty"),
        (
            table("t,x\n", 15, |i| format!("{i},{i}")),
            "too short: 15 samples",
        ),
        (
            "Dear all,\nhere is the list.\nGreetings\n".into(),
            "no rows of numbers",
        ),
        (
            table("t,x\n", 40, |i| format!("{i},low")),
            "line 2, column 2: \"low\" is not a number",
        ),
        (wide.repeat(30), "5000 channels"),
        ("1,".repeat(1 << 20), "line 1 is longer than 1048576 bytes"),
        (
            table("t,x\n", 40, |i| {
                format!("{i},{}red", if i == 0 { "\u{1b}" } else { "" })
            }),
            "line 2, column 2: \"\\u{1b}red\" is not a number",
        ),
    ];
    for (text, message) in cases {
        let refused = refusal(&folder.write("fault.csv", &text));
        assert!(refused.contains(message), "{refused:?} lacks {message:?}");
    }
}

#[test]
fn a_word_column_is_left_out_if_there_are_others() {
    let folder = Folder::new();
    let text = table("t,state,x\n", 40, |i| format!("{i},on,{}", prime(i)));
    let capture = open(&folder.write("w.csv", text)).unwrap();
    assert_eq!(capture.spec().channels.len(), 1);
    assert_eq!(capture.spec().channels[0].name, "x");
    assert_eq!(
        capture.spec().notes,
        ["column \"state\" holds words: left out"]
    );
}

#[test]
fn an_open_quote_or_endless_line_far_down_stops_the_reader() {
    let folder = Folder::new();
    let rows = table("t,x\n", 100_000, |i| format!("{i},{}", prime(i)));
    for start in ["100000,\"", "100000,1"] {
        let path = folder.0.path().join("long.csv");
        let mut file = std::fs::File::create(&path).unwrap();
        file.write_all(rows.as_bytes()).unwrap();
        file.write_all(start.as_bytes()).unwrap();
        // A hole of 3 GB that costs no disk: reading it whole would show.
        file.seek(SeekFrom::Current(3_000_000_000)).unwrap();
        file.write_all(b"1\n").unwrap();
        let message = refusal(&path);
        assert!(message.contains("line 100002 is longer"), "{message}");
    }
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
    let wav = open(&folder.write("s.wav", riff(b"RIFF", &chunks))).unwrap();
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
