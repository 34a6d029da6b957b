//! WAV headers that lie, are cut, or carry other chunks.

use super::*;

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
        assert_primes(&riff_file(b"RIFF", &chunks), note);
    }
}

#[test]
fn a_cut_frame_is_dropped_and_noted() {
    let mut bytes = riff_file(
        b"RIFF",
        &[
            fmt(1, 1, 8000, 16, 2),
            chunk(b"data", None, &pcm16(&PRIMES)),
        ],
    );
    bytes.push(77);
    let size = bytes.len() - 44;
    bytes[40..44].copy_from_slice(&(size as u32).to_le_bytes());
    assert_primes(&bytes, "the last byte is no whole frame");
}

/// Chunks around the primes in 16 bits, one channel.
fn around(before: &[Vec<u8>], after: &[Vec<u8>]) -> Vec<u8> {
    let data = chunk(b"data", None, &pcm16(&PRIMES));
    riff_file(
        b"RIFF",
        &[before, &[fmt(1, 1, 8000, 16, 2), data], after].concat(),
    )
}

#[test]
fn other_chunks_and_pads_are_passed_over() {
    let list = || chunk(b"LIST", None, b"INFOISFT\x05\x00\x00\x00abcd\x00");
    assert_primes(&around(&[list()], &[]), "");
    assert_primes(
        &around(&[chunk(b"junk", None, &[b'd'; 4001])], &[list()]),
        "",
    );
    // An odd chunk whose pad byte was forgotten.
    let mut unpadded = chunk(b"junk", None, b"data\x01\x00\x00\x00\x07");
    assert_eq!(unpadded.pop(), Some(0));
    assert_primes(&around(&[unpadded], &[]), "");
    // The format after the data.
    let data = chunk(b"data", None, &pcm16(&PRIMES));
    let late = riff_file(b"RIFF", &[data.clone(), fmt(1, 1, 8000, 16, 2)]);
    assert_primes(&late, "");
    let second = chunk(b"data", None, &pcm16(&[1, 2]));
    assert_primes(&around(&[], &[second]), "a second data chunk was left out");
}

#[test]
fn sizes_and_rates_in_the_header_may_be_wrong() {
    let good = around(&[], &[]);
    let with = |at: usize, bytes: &[u8]| {
        let mut bad = good.clone();
        bad[at..at + bytes.len()].copy_from_slice(bytes);
        bad
    };
    for riff_size in [0, 1, 12, u32::MAX] {
        assert_primes(&with(4, &riff_size.to_le_bytes()), "");
    }
    assert_primes(&with(28, &1u32.to_le_bytes()), "byte rate 1 does not fit");
    assert_primes(
        &with(32, &1u16.to_le_bytes()),
        "impossible frame size of 1 byte: taken as 2",
    );
    assert_primes(
        &with(32, &0u16.to_le_bytes()),
        "impossible frame size of 0 bytes",
    );
}

#[test]
fn large_file_headers_take_the_size_from_ds64() {
    let data = chunk(b"data", Some(u32::MAX), &pcm16(&PRIMES));
    let ds64 = |size: u64| {
        let sizes = [100u64, size, 24].map(u64::to_le_bytes).concat();
        chunk(b"ds64", None, &[sizes, vec![0; 4]].concat())
    };
    let list = chunk(b"LIST", None, b"INFO");
    for magic in [b"RF64", b"BW64"] {
        let bytes = riff_file(
            magic,
            &[ds64(48), fmt(1, 1, 8000, 16, 2), data.clone(), list.clone()],
        );
        assert_primes(&bytes, "");
        for unknown in [0, u64::MAX] {
            let bytes = riff_file(
                magic,
                &[ds64(unknown), fmt(1, 1, 8000, 16, 2), data.clone()],
            );
            assert_primes(&bytes, "read to the end");
        }
    }
    // Plain sizes are allowed, too.
    let plain = [
        fmt(1, 1, 8000, 16, 2),
        chunk(b"data", None, &pcm16(&PRIMES)),
    ];
    assert_primes(&riff_file(b"RF64", &plain), "");
}

#[test]
fn a_wrapped_data_size_is_seen_through() {
    // 4 GiB and 48 bytes of samples under a size of 48; a hole on the disk.
    let folder = Folder::new();
    let path = folder.write("large.wav", around(&[], &[]));
    let file = std::fs::OpenOptions::new().write(true).open(&path).unwrap();
    file.set_len(44 + 48 + (1 << 32)).unwrap();
    let capture = open(&path).unwrap();
    assert_eq!(capture.spec().frames, 24 + (1 << 31));
    assert!(notes(&capture).contains("more than 4 GiB"));
    let mut block = Block::default();
    assert!(capture.blocks(24).unwrap().next_into(&mut block).unwrap());
    assert_eq!(block.samples, [fractions(&PRIMES, 32768.0)]);
}

#[test]
fn a_broadcast_chunk_tells_the_start() {
    let mut body = vec![0; 602];
    body[320..338].copy_from_slice(b"2031-05-0723-59-08");
    assert_primes(
        &around(&[chunk(b"bext", None, &body)], &[]),
        "recording started 2031-05-07 23-59-08",
    );
    body[320..324].copy_from_slice(b"\x1b[1m");
    assert_primes(
        &around(&[chunk(b"bext", None, &body)], &[]),
        "started \\u{1b}[1m-05-07",
    );
    assert_primes(&around(&[chunk(b"bext", None, &[0; 602])], &[]), "");
    assert_primes(&around(&[chunk(b"bext", None, &[65; 9])], &[]), "");
}

#[test]
fn any_cut_or_flipped_header_is_an_answer() {
    use rand::{RngExt, SeedableRng};
    let folder = Folder::new();
    let good = around(
        &[
            chunk(b"junk", None, b"abc"),
            chunk(b"bext", None, &[66; 602]),
        ],
        &[],
    );
    for n in 0..good.len() {
        // Whatever it is called, it is opened or refused, never a panic.
        let cut = open(&folder.write("cut.wav", &good[..n]));
        assert!(cut.is_ok() || !one_line(cut.unwrap_err()).is_empty());
    }
    const SEED: u64 = 20_311;
    let mut random = rand::rngs::StdRng::seed_from_u64(SEED);
    for case in 0..2000 {
        let mut bytes = good.clone();
        for _ in 0..random.random_range(1..8) {
            let at = random.random_range(0..bytes.len());
            bytes[at] = *[0, 1, 0x7F, 0x80, 0xFF, random.random()]
                .get(case % 6)
                .unwrap();
        }
        if let Ok(capture) = open(&folder.write("flip.wav", &bytes)) {
            let channels = capture.spec().channels.len() as u64;
            let held = capture.spec().frames * channels;
            assert!(held <= bytes.len() as u64, "seed {SEED}, case {case}");
            read(&capture, 100);
        }
    }
}
