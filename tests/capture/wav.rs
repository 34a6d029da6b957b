//! WAV: samples against a slow twin, sample formats, and faults.

use foldtrace::capture::Spec;

use super::*;

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

#[test]
fn wav_faults_are_named() {
    let folder = Folder::new();
    let data = || chunk(b"data", None, &pcm16(&PRIMES));
    let wav = |chunks: &[Vec<u8>]| riff_file(b"RIFF", chunks);
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
            wav(&[fmt(1, 1, 8000, 72, 9), data()]),
            "72-bit integer samples",
        ),
        (
            wav(&[fmt(3, 1, 8000, 16, 2), data()]),
            "16-bit float samples",
        ),
        (wav(&[fmt(1, 5000, 8000, 8, 1), data()]), "5000 channels"),
        (wav(&[fmt(2, 1, 8000, 4, 1), data()]), "ADPCM"),
        (
            wav(&[fmt(7, 1, 8000, 16, 2), data()]),
            "16-bit mu-law samples in 2 bytes (convert it to PCM first)",
        ),
        (wav(&[fmt(0x55, 1, 8000, 0, 1), data()]), "MPEG"),
        (wav(&[fmt(0x1234, 1, 8000, 16, 2), data()]), "0x1234"),
        (wav(&[extensible(2, 8, 8), data()]), "ADPCM"),
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
        ((0..255).collect(), "not a WAV, FLAC or CSV recording"),
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
        &open(&folder.write("f.wav", riff_file(b"RIFF", &chunks))).unwrap(),
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
    let path = folder.write("rate.WAV", riff_file(b"RIFF", &chunks));
    let capture = open_at(&path, 8000.25).unwrap();
    assert_eq!(capture.spec().rate_hz, 8000.25);
    assert_eq!(
        notes(&capture),
        "sample rate 8000.25 Hz taken from --rate, not 8000 Hz from the header"
    );
    assert_eq!(
        notes(&open_at(&path, 8000.0).unwrap()),
        "sample rate 8000 Hz taken from --rate; the header tells the same"
    );
    for rate_hz in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        assert!(one_line(open_at(&path, rate_hz).unwrap_err()).contains("sample rate"));
    }
}

/// Opens one channel of integers, `width` bytes each.
fn integers(format: Vec<u8>, width: usize, values: &[i64]) -> (Vec<f32>, String, String) {
    let (samples, spec) = integers_and_spec(format, width, values);
    (samples, spec.format, spec.notes.join("; "))
}

fn integers_and_spec(format: Vec<u8>, width: usize, values: &[i64]) -> (Vec<f32>, Spec) {
    let folder = Folder::new();
    let body: Vec<u8> = values
        .iter()
        .flat_map(|v| v.to_le_bytes()[..width].to_vec())
        .collect();
    let bytes = riff_file(b"RIFF", &[format, chunk(b"data", None, &body)]);
    let capture = open(&folder.write("int.wav", bytes)).unwrap();
    (read(&capture, 5).remove(0), capture.spec().clone())
}

/// The step must be the smallest difference between samples that hold every
/// bit, whatever place the file gives them.
#[test]
fn the_step_is_that_of_the_bits_that_carry_data() {
    let check = |format: Vec<u8>, width: u16, values: &[i64], bits: i32| {
        let (samples, spec) = integers_and_spec(format, width.into(), values);
        let case = format!("{} {:?}", spec.format, spec.notes);
        assert_eq!(spec.step, Some(2f64.powi(1 - bits)), "{case}");
        // The third value is one step above the second.
        assert_eq!(
            Some(f64::from(samples[2] - samples[1])),
            spec.step,
            "{case}"
        );
    };
    let values: Vec<i64> = [5, -3, -2].into_iter().chain(0..50).collect();
    let moved = |n: u16| -> Vec<i64> { values.iter().map(|v| v << n).collect() };
    for (bits, width) in [(16, 2), (24, 3), (32, 4)] {
        check(fmt(1, 1, 8000, bits, width), width, &values, bits.into());
    }
    let unsigned: Vec<i64> = values.iter().map(|v| v + 128).collect();
    check(fmt(1, 1, 8000, 8, 1), 1, &unsigned, 8);
    for (bits, width) in [(12, 2), (20, 3), (24, 4)] {
        let spare = 8 * width - bits;
        let format = || fmt(1, 1, 8000, bits, width);
        check(format(), width, &moved(spare), bits.into());
        check(format(), width, &values, bits.into());
        // The header understates: all bits are in use.
        let mut full = values.clone();
        full.push((1 << (8 * width - 1)) - 1);
        check(format(), width, &full, 8 * i32::from(width));
    }
    check(extensible(1, 32, 24), 4, &moved(8), 24);
    let floats: Vec<i64> = (0..20u32).map(|i| (i as f32).to_bits().into()).collect();
    let (_, spec) = integers_and_spec(fmt(3, 1, 8000, 32, 4), 4, &floats);
    assert_eq!(spec.step, None);
}

#[test]
fn samples_in_wider_containers() {
    let primes: Vec<i64> = PRIMES.iter().map(|&p| p.into()).collect();
    for (bits, width) in [(12, 2), (20, 3), (24, 4), (20, 4), (18, 3)] {
        let full_scale = (1i64 << (bits - 1)) as f32;
        let expected: Vec<f32> = PRIMES.iter().map(|&p| p as f32 / full_scale).collect();
        let spare = 8 * width - bits;
        let format = || fmt(1, 1, 8000, bits, width);
        let upper: Vec<i64> = primes.iter().map(|p| p << spare).collect();
        let cleared: Vec<i64> = primes.iter().map(|p| p & ((1 << bits) - 1)).collect();
        let (samples, name, note) = integers(format(), width.into(), &upper);
        assert_eq!(
            (samples, note),
            (expected.clone(), String::new()),
            "{bits} in {width}"
        );
        assert_eq!(name, format!("{bits}-in-{}-bit WAV", 8 * width));
        for lower in [&primes, &cleared] {
            let (samples, _, note) = integers(format(), width.into(), lower);
            assert_eq!(samples, expected, "{bits} in {width}");
            assert!(note.contains("at the lower end"));
        }
        // Bits all over: the header understates.
        let mut full = upper.clone();
        full[5] = (1 << (8 * width - 1)) - 1;
        let (samples, _, note) = integers(format(), width.into(), &full);
        assert_eq!(samples[..5], expected[..5]);
        assert!(note.contains("are used"));
    }
}

#[test]
fn extensible_headers_and_wide_floats() {
    let primes: Vec<i64> = PRIMES.iter().map(|&p| p.into()).collect();
    let shifted: Vec<i64> = primes.iter().map(|p| p << 8).collect();
    let (samples, name, _) = integers(extensible(1, 32, 24), 4, &shifted);
    assert_eq!(
        (samples, name.as_str()),
        (fractions(&PRIMES, 8_388_608.0), "24-in-32-bit WAV")
    );
    // Valid bits of 0, or more than there are, mean all.
    for valid in [0, 16, 99] {
        let (samples, name, _) = integers(extensible(1, 16, valid), 2, &primes);
        assert_eq!(
            (samples, name.as_str()),
            (fractions(&PRIMES, 32_768.0), "16-bit WAV")
        );
    }
    let doubles: Vec<i64> = PRIMES
        .iter()
        .map(|&p| (f64::from(p) / 64.0).to_bits() as i64)
        .collect();
    for format in [fmt(3, 1, 8000, 64, 8), extensible(3, 64, 64)] {
        let (samples, name, _) = integers(format, 8, &doubles);
        assert_eq!(
            (samples, name.as_str()),
            (fractions(&PRIMES, 64.0), "64-bit float WAV")
        );
    }
    // Beyond the range of f32: missing rather than infinite.
    let huge: Vec<i64> = [1e300f64; 16].map(|v| v.to_bits() as i64).to_vec();
    assert!(
        integers(fmt(3, 1, 8000, 64, 8), 8, &huge)
            .0
            .iter()
            .all(|x| x.is_nan())
    );
}

#[test]
fn logarithmic_samples_are_decoded() {
    // Codes of +-0 or the least value, of the largest, and one between, with
    // their values in the 13 and 14 bits of ITU-T G.711, tables 1a to 2b.
    let a_law: [(u8, i32); 6] = [
        (0xD5, 1),
        (0x55, -1),
        (0xAA, 4032),
        (0x2A, -4032),
        (0xC5, 33),
        (0xB5, 1056),
    ];
    let mu_law: [(u8, i32); 6] = [
        (0xFF, 0),
        (0x7F, 0),
        (0xFE, 2),
        (0x80, 8031),
        (0x00, -8031),
        (0x6F, -33),
    ];
    let folder = Folder::new();
    for (tag, name, codes, full_scale) in
        [(6, "A-law", a_law, 4096.0), (7, "mu-law", mu_law, 8192.0)]
    {
        for format in [fmt(tag, 1, 8000, 8, 1), extensible(tag, 8, 8)] {
            let body: Vec<u8> = (0..60).map(|i| codes[i % 6].0).collect();
            let bytes = riff_file(b"RIFF", &[format, chunk(b"data", None, &body)]);
            let capture = open(&folder.write("log.wav", bytes)).unwrap();
            assert_eq!(capture.spec().format, format!("{name} WAV"));
            assert_eq!(notes(&capture), "");
            let expected: Vec<f32> = (0..60)
                .map(|i| codes[i % 6].1 as f32 / full_scale)
                .collect();
            assert_eq!(read(&capture, 7), [expected], "{name}");
        }
        // The step is the least distance between any two values.
        let all: Vec<u8> = (0..=255).collect();
        let chunks = [fmt(tag, 1, 8000, 8, 1), chunk(b"data", None, &all)];
        let capture = open(&folder.write("all.wav", riff_file(b"RIFF", &chunks))).unwrap();
        let mut values = read(&capture, 256).remove(0);
        values.sort_unstable_by(f32::total_cmp);
        values.dedup_by(|a, b| a == b);
        let steps = values.windows(2).map(|pair| f64::from(pair[1] - pair[0]));
        assert_eq!(
            capture.spec().step,
            Some(steps.fold(1.0, f64::min)),
            "{name}"
        );
    }
}
