//! Files that the fuzzer once tripped the readers with, and its seeds.

use super::*;

fn files(folder: &str) -> Vec<PathBuf> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join(folder);
    let entries = std::fs::read_dir(&folder).unwrap();
    let mut files: Vec<PathBuf> = entries.map(|entry| entry.unwrap().path()).collect();
    files.sort();
    assert!(!files.is_empty(), "{}", folder.display());
    files
}

/// Either one line of refusal, or samples that are the same on each pass.
fn check(path: &Path) {
    for rate_hz in [None, Some(12.5)] {
        let options = OpenOptions {
            rate_hz,
            ..OpenOptions::default()
        };
        match Capture::open(path, &options) {
            Err(error) => {
                one_line(error);
            }
            Ok(capture) if capture.spec().frames < 1_000_000 => {
                assert_eq!(bits(&read(&capture, 17)), bits(&read(&capture, 1000)));
            }
            Ok(_) => {}
        }
    }
}

#[test]
fn what_the_fuzzer_found_stays_mended() {
    for path in files("tests/capture/finds") {
        check(&path);
    }
}

#[test]
fn the_seeds_of_the_fuzzer_are_read_or_refused() {
    let folder = Folder::new();
    for path in files("tests/fuzz/seeds/csv_layout") {
        let bytes = std::fs::read(&path).unwrap();
        check(&folder.write("seed.csv", &bytes[1..]));
    }
    for path in files("tests/fuzz/seeds/wav_header") {
        let bytes = std::fs::read(&path).unwrap();
        let magic = if bytes[0] == 0 { b"RF64" } else { b"RIFF" };
        check(&folder.write(
            "seed.wav",
            [magic, &b"\xFF\xFF\xFF\xFFWAVE"[..], &bytes[1..]].concat(),
        ));
    }
    for path in files("tests/fuzz/seeds/flac") {
        let bytes = std::fs::read(&path).unwrap();
        let path = folder.write("seed.flac", [&b"fLaC"[..], &bytes].concat());
        check(&path);
        assert!(open(&path).is_ok());
    }
}
