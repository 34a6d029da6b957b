//! FLAC: whole, cut and damaged streams, against the samples that went in
//! (written by libFLAC; see scripts/make_flac_fixtures.py).

use super::*;

fn fixture(name: &str) -> Vec<u8> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference/flac");
    std::fs::read(folder.join(name)).unwrap()
}

/// What the script put in, as fractions of full scale.
fn expected(bits: u32, channels: usize) -> Vec<Vec<f32>> {
    let full = f64::from((1i32 << (bits - 1)) - 1);
    let value = |n: usize, c: usize| {
        let turn = std::f64::consts::TAU * n as f64 * (c + 1) as f64 / 97.3;
        let whole = (0.7 * full * turn.sin()).round_ties_even() + ((n * 7919 + c) % 5) as f64 - 2.0;
        (whole / f64::from(1i32 << (bits - 1))) as f32
    };
    let channel = |c| (0..5000).map(|n| value(n, c)).collect();
    (0..channels).map(channel).collect()
}

#[test]
fn samples_are_those_that_went_in() {
    let folder = Folder::new();
    for (name, bits, channels) in [
        ("mono8.flac", 8, 1),
        ("mono16.flac", 16, 1),
        ("stereo16.flac", 16, 2),
        ("three24.flac", 24, 3),
    ] {
        let capture = open(&folder.write(name, fixture(name))).unwrap();
        let spec = capture.spec();
        assert_eq!((spec.rate_hz, spec.frames), (8000.0, 5000), "{name}");
        assert_eq!(spec.format, format!("{bits}-bit FLAC"));
        assert_eq!(spec.step, Some(2f64.powi(1 - bits)));
        assert!(spec.normalised && spec.notes.is_empty(), "{:?}", spec.notes);
        for frames_per_block in [1, 999, 10_000] {
            // Sines of another library may round the other way now and then.
            let step = 2f32.powi(1 - bits);
            let read = read(&capture, frames_per_block);
            for (read, expected) in read.iter().zip(expected(bits as u32, channels)) {
                let off = read.iter().zip(&expected).filter(|(a, b)| a != b);
                assert!(off.clone().count() <= 2, "{name}");
                assert!(off.clone().all(|(a, b)| (a - b).abs() <= step), "{name}");
            }
        }
    }
}

#[test]
fn content_decides_and_tags_are_passed_over() {
    let folder = Folder::new();
    let plain = fixture("mono16.flac");
    let whole = read(&open(&folder.write("x.flac", &plain)).unwrap(), 777);
    let tag = [&b"ID3\x04\0\0\0\0\0\x14"[..], &[0; 20]].concat();
    let trailer = [&b"TAG"[..], &[0; 125]].concat();
    for (name, bytes) in [
        ("x.wav", plain.clone()),
        ("tagged.flac", [tag, plain.clone()].concat()),
        ("trailer.flac", [plain.clone(), trailer].concat()),
        ("padded.flac", [plain.clone(), vec![0; 5000]].concat()),
    ] {
        let capture = open(&folder.write(name, bytes)).unwrap();
        assert_eq!(read(&capture, 777), whole, "{name}");
        assert_eq!(notes(&capture), "", "{name}");
    }
    assert_eq!(
        open_at(&folder.write("x.flac", &plain), 7999.5)
            .unwrap()
            .spec()
            .rate_hz,
        7999.5
    );
}

/// Where frames of the file start: there, the decoder finds the next ones.
fn frame_starts(bytes: &[u8]) -> Vec<usize> {
    let sync = |&at: &usize| bytes[at] == 0xFF && bytes[at + 1] & 0xFE == 0xF8;
    (42..bytes.len() - 5).filter(sync).collect()
}

#[test]
fn damage_costs_its_own_frame_only() {
    let folder = Folder::new();
    // Three channels of 24 bits make two frames; damage the first.
    let mut bytes = fixture("three24.flac");
    let whole = read(&open(&folder.write("whole.flac", &bytes)).unwrap(), 4096);
    let first = frame_starts(&bytes)[0];
    bytes[first + 400] ^= 0x20;
    let capture = open(&folder.write("hit.flac", &bytes)).unwrap();
    assert_eq!(capture.spec().frames, 5000);
    assert!(
        notes(&capture).starts_with("1 damaged place (")
            && notes(&capture).ends_with("4096 samples taken as missing"),
        "{}",
        notes(&capture)
    );
    for frames_per_block in [5, 4096] {
        let read = read(&capture, frames_per_block);
        for (read, whole) in read.iter().zip(&whole) {
            assert!(read[..4096].iter().all(|sample| sample.is_nan()));
            assert_eq!(read[4096..], whole[4096..]);
        }
    }
}

#[test]
fn a_cut_stream_is_read_as_far_as_it_goes() {
    let folder = Folder::new();
    let bytes = fixture("three24.flac");
    let cut = &bytes[..bytes.len() - 100];
    let capture = open(&folder.write("cut.flac", cut)).unwrap();
    assert_eq!(capture.spec().frames, 4096);
    assert_eq!(
        notes(&capture),
        "the file ends early: 4096 of 5000 samples read"
    );
    assert_eq!(read(&capture, 1000)[0].len(), 4096);
    // The number of samples need not be told.
    let mut untold = cut.to_vec();
    untold[21] &= 0xF0;
    untold[22..26].fill(0);
    let capture = open(&folder.write("untold.flac", untold)).unwrap();
    assert_eq!(capture.spec().frames, 4096);
    assert_eq!(
        notes(&capture),
        "the file ends within a frame: read as far as it goes"
    );
}

#[test]
fn flac_faults_are_named() {
    let folder = Folder::new();
    let whole = fixture("mono16.flac");
    let mut no_rate = whole.clone();
    no_rate[18..20].fill(0);
    no_rate[20] &= 0x0F;
    let mut bits17 = whole.clone();
    bits17[20] = (bits17[20] & 0xFE) | 1;
    bits17[21] &= 0x0F;
    let first = frame_starts(&whole)[0];
    for (bytes, message) in [
        (whole[..4].to_vec(), "the file ends in its header"),
        (whole[..30].to_vec(), "the file ends in its header"),
        (whole[..first].to_vec(), "has a header but no samples"),
        (
            whole[..first + 40].to_vec(),
            "damaged FLAC: the file ends within a frame",
        ),
        (no_rate, "--rate HZ"),
        (bits17, "FLAC with 17-bit samples"),
        ([&b"fLaC"[..], &[0x55; 3000]].concat(), "FLAC"),
    ] {
        let text = refusal(&folder.write("fault.flac", &bytes));
        assert!(text.contains(message), "{text:?} lacks {message:?}");
    }
}
