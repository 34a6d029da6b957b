//! `scan` as a user runs it: whatever happens on the way, the same files at the end.

use crate::cli::foldtrace;
use rand::{RngExt, SeedableRng, rngs::StdRng};
use std::collections::BTreeMap;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::{Command, Output, Stdio};
use std::time::{Duration, Instant};

/// Few lines, so that the time goes into what is tested here.
const SITE: &str = "[recorder]\nbandwidth_hz = 2000\n\n[[source]]\nname = \"mains\"\nkind = \"mains\"\nhz = 50.0\ntolerance = \"0.1 %\"\norders = 6\n";

/// A folder with a site file and `count` short recordings under `recs/`: noise, a
/// mains hum, a tone at 777.7 Hz in every third, and one file that is no recording.
struct Place {
    folder: tempfile::TempDir,
}

impl Place {
    fn new(count: u32) -> Place {
        let place = Place {
            folder: tempfile::tempdir().unwrap(),
        };
        std::fs::create_dir(place.path("recs")).unwrap();
        std::fs::write(place.path("site.toml"), SITE).unwrap();
        for i in 0..count {
            place.wav(&format!("recs/r{i:03}.wav"), 4096, i);
        }
        if count > 3 {
            std::fs::write(place.path("recs/r001b.wav"), b"not a wave").unwrap();
        }
        place
    }

    fn path(&self, name: &str) -> PathBuf {
        self.folder.path().join(name)
    }

    fn wav(&self, name: &str, rate: u32, seed: u32) {
        let spec = hound::WavSpec {
            channels: 1,
            sample_rate: rate,
            bits_per_sample: 16,
            sample_format: hound::SampleFormat::Int,
        };
        let mut writer = hound::WavWriter::create(self.path(name), spec).unwrap();
        let mut random = StdRng::seed_from_u64(u64::from(seed));
        let level = if seed.is_multiple_of(3) { 0.1 } else { 0.0 };
        for n in 0..4096 {
            let t = std::f64::consts::TAU * f64::from(n) / f64::from(rate);
            let x = 0.2 * (49.97 * t).sin()
                + 0.1 * (3.0 * 49.97 * t).sin()
                + level * (777.7 * t).sin()
                + 0.01 * (random.random::<f64>() - 0.5);
            writer.write_sample((x * 32_767.0) as i16).unwrap();
        }
        writer.finalize().unwrap();
    }

    /// `scan recs --out OUT` from inside the folder.
    fn command(&self, out: &str, more: &[&str]) -> Command {
        let mut command = Command::new(env!("CARGO_BIN_EXE_foldtrace"));
        command
            .current_dir(self.folder.path())
            .args(["scan", "recs", "--out", out, "--site", "site.toml"])
            .args(more)
            .stdin(Stdio::null());
        command
    }

    fn scan(&self, out: &str, more: &[&str]) -> Output {
        self.command(out, more).output().unwrap()
    }

    /// Every file that a scan left, by name.
    fn results(&self, out: &str) -> BTreeMap<String, Vec<u8>> {
        std::fs::read_dir(self.path(out))
            .unwrap()
            .map(|entry| {
                let entry = entry.unwrap();
                let name = entry.file_name().into_string().unwrap();
                (name, std::fs::read(entry.path()).unwrap())
            })
            .collect()
    }

    fn rows(&self, file: &str) -> Vec<csv::StringRecord> {
        let mut reader = csv::Reader::from_path(self.path(file)).unwrap();
        reader.records().map(Result::unwrap).collect()
    }
}

/// The one line on stderr, checked to be just that, and the exit code.
fn refusal(output: &Output) -> (String, i32) {
    let text = String::from_utf8(output.stderr.clone()).unwrap();
    assert_eq!(text.lines().count(), 1, "not one line: {text:?}");
    assert!(text.starts_with("foldtrace: "), "{text}");
    assert!(
        !text.trim_end().chars().any(char::is_control),
        "control characters: {text:?}"
    );
    (text, output.status.code().unwrap())
}

#[test]
fn every_recording_is_a_row_and_a_bad_one_tells_why() {
    let place = Place::new(7);
    std::fs::write(place.path("recs/readme.md"), "words").unwrap();
    let output = place.scan("out", &["--jobs", "2"]);
    assert_eq!(output.status.code(), Some(1));
    assert!(output.stderr.is_empty(), "{output:?}");
    let rows = place.rows("out/recordings.csv");
    assert_eq!(rows.len(), 8);
    assert_eq!(
        &rows[0][0],
        Path::new("recs").join("r000.wav").to_str().unwrap()
    );
    assert_eq!(&rows[2][1], "failed");
    assert!(rows[2][2].contains("not a WAV"), "{:?}", rows[2]);
    for row in rows.iter().filter(|r| &r[1] == "read") {
        assert_eq!((&row[3], &row[5], &row[9]), ("4096", "4096", "1.000"));
    }
    let suspects = place.rows("out/suspects.csv");
    let third = |r: &&csv::StringRecord| &r[13] == "mains" && &r[14] == "3x";
    assert_eq!(suspects.iter().filter(third).count(), 7);
    let summary = String::from_utf8(output.stdout).unwrap();
    for expected in [
        "7 recordings read",
        "1 could not be",
        "1 other file",
        "mains in 7",
    ] {
        assert!(summary.contains(expected), "{expected}: {summary}");
    }
    // what triage says of one, scan says too
    let one = foldtrace(&[
        "triage",
        place.path("recs/r003.wav").to_str().unwrap(),
        "--site",
        place.path("site.toml").to_str().unwrap(),
        "--suspects",
        "-",
    ]);
    let alone = String::from_utf8(one.stdout).unwrap();
    let tail = |line: &str| line.split_once(',').unwrap().1.to_owned();
    let among = std::fs::read_to_string(place.path("out/suspects.csv")).unwrap();
    let among: Vec<String> = among
        .lines()
        .filter(|l| l.contains("r003.wav"))
        .map(tail)
        .collect();
    assert_eq!(alone.lines().skip(1).map(tail).collect::<Vec<_>>(), among);
}

#[test]
fn what_comes_back_is_listed() {
    let place = Place::new(9);
    place.scan("out", &[]);
    let rows = place.rows("out/recurring.csv");
    let of = |basis: &str| rows.iter().filter(|r| &r[0] == basis).collect::<Vec<_>>();
    let source = of("source");
    assert_eq!(source.len(), 2, "{rows:?}");
    for (row, line) in source.iter().zip(["1x", "3x"]) {
        assert_eq!((&row[2], &row[17], &row[18]), ("9", "mains", line));
    }
    let seen = of("seen");
    assert_eq!(seen.len(), 1, "{rows:?}");
    assert_eq!((&seen[0][2], &seen[0][3]), ("3", "9"));
    assert!(seen[0][4].ends_with("r000.wav") && seen[0][5].ends_with("r006.wav"));
    let hz: f64 = seen[0][6].parse().unwrap();
    // 1 s at 50 dB or more in a cell: the bound is below 2e-3 Hz
    assert!((hz - 777.7).abs() < 5e-3, "{hz}");
}

/// The pump skid of the sample data, recorded at two rates: every settled frequency
/// is one of the truth's, and the folded ones are called so.
#[test]
fn a_true_frequency_is_settled_by_two_rates() {
    let out = tempfile::tempdir().unwrap();
    let folder = out.path().join("out");
    let output = foldtrace(&[
        "scan",
        "sample-data/recordings/skid-8000.wav",
        "sample-data/recordings/skid-11025.wav",
        "--out",
        folder.to_str().unwrap(),
        "--site",
        "sample-data/orrowmere.toml",
    ]);
    assert_eq!(output.status.code(), Some(0), "{output:?}");
    let mut truth = csv::Reader::from_path("sample-data/truth.csv").unwrap();
    let truth: Vec<f64> = truth
        .records()
        .map(Result::unwrap)
        .filter(|r| r[0].starts_with("skid"))
        .map(|r| r[2].parse().unwrap())
        .collect();
    let mut reader = csv::Reader::from_path(folder.join("recurring.csv")).unwrap();
    let rows: Vec<csv::StringRecord> = reader.records().map(Result::unwrap).collect();
    let settled: Vec<&csv::StringRecord> = rows.iter().filter(|r| &r[0] == "true").collect();
    assert!(settled.len() > 20, "{}", settled.len());
    let mut strangers = 0;
    for row in &settled {
        let hz: f64 = row[7].parse().unwrap();
        // clocks within 100 ppm each
        strangers += usize::from(!truth.iter().any(|t| (hz - t).abs() <= 2e-4 * t));
    }
    // settled from 90 % on: one in ten may be wrong
    assert!(
        strangers * 10 <= settled.len(),
        "{strangers} of {}",
        settled.len()
    );
    let whistle = settled
        .iter()
        .find(|r| r[7].starts_with("4933."))
        .expect("the whistle at 3066 Hz");
    assert_eq!(&whistle[1], "8000+11025");
    assert_eq!(&whistle[15], "folded+direct");
    assert_eq!((&whistle[17], &whistle[18]), ("circulation drive", "1c-2o"));
    let probability: f64 = whistle[19].parse().unwrap();
    assert!(probability > 0.95, "{probability}");
}

#[test]
fn the_number_of_jobs_changes_no_byte() {
    let place = Place::new(12);
    place.scan("one", &["--jobs", "1"]);
    place.scan("four", &["--jobs", "4"]);
    let one = place.results("one");
    assert_eq!(one.len(), 4, "{:?}", one.keys());
    assert_eq!(one, place.results("four"));
}

/// `kill -9` at twenty moments spread at random over the run, then `--resume`, which
/// is itself killed now and then.
#[cfg(unix)]
#[test]
fn killed_at_any_moment_it_goes_on_to_the_same_bytes() {
    let place = Place::new(24);
    let began = Instant::now();
    place.scan("undisturbed", &["--jobs", "2"]);
    let whole = began.elapsed();
    let expected = place.results("undisturbed");
    let mut random = StdRng::seed_from_u64(20);
    let mut interrupted = 0;
    for moment in 0..20 {
        let out = format!("killed-{moment}");
        let jobs = ["1", "2", "3", "4"][moment % 4];
        let kills = 1 + moment % 2;
        for _ in 0..kills {
            let mut child = place
                .command(&out, &["--jobs", jobs, "--resume"])
                .stdout(Stdio::null())
                .spawn()
                .unwrap();
            std::thread::sleep(whole.mul_f64(random.random::<f64>()));
            // On Unix this is signal 9.
            child.kill().unwrap();
            let status = child.wait().unwrap();
            interrupted += usize::from(status.code().is_none());
            check_prefix(&place, &out, &expected);
        }
        let output = place.scan(&out, &["--jobs", jobs, "--resume"]);
        assert_eq!(output.status.code(), Some(1), "{output:?}");
        assert_eq!(place.results(&out), expected, "killed at moment {moment}");
    }
    assert!(
        interrupted >= 10,
        "only {interrupted} runs were killed in time"
    );
}

/// What a killed scan left: whole rows of whole recordings, as they will stay.
fn check_prefix(place: &Place, out: &str, expected: &BTreeMap<String, Vec<u8>>) {
    for name in ["suspects.csv", "recordings.csv"] {
        if let Ok(bytes) = std::fs::read(place.path(out).join(name)) {
            assert!(expected[name].starts_with(&bytes), "{name}");
        }
    }
    if let Ok(bytes) = std::fs::read(place.path(out).join("recurring.csv")) {
        assert_eq!(bytes, expected["recurring.csv"]);
    }
}

/// A limit on the size of files stands in for a disk that fills up.
#[cfg(unix)]
#[test]
fn a_full_disk_is_one_line_and_loses_nothing_finished() {
    let place = Place::new(30);
    place.scan("undisturbed", &[]);
    let expected = place.results("undisturbed");
    for blocks in [0, 1, 2, 4] {
        let out = format!("full-{blocks}");
        let script = format!("ulimit -f {blocks}; trap '' XFSZ; exec \"$0\" \"$@\"");
        let output = Command::new("sh")
            .current_dir(place.folder.path())
            .args(["-c", &script, env!("CARGO_BIN_EXE_foldtrace")])
            .args(["scan", "recs", "--out", &out, "--site", "site.toml"])
            .output()
            .unwrap();
        let (line, code) = refusal(&output);
        assert_eq!(code, 1, "{line}");
        assert!(line.contains(&out), "{line}");
        check_prefix(&place, &out, &expected);
        assert!(!place.path(&out).join("recurring.csv").exists());
        let output = place.scan(&out, &["--resume"]);
        assert_eq!(output.status.code(), Some(1), "{output:?}");
        assert_eq!(place.results(&out), expected);
    }
}

#[cfg(target_os = "linux")]
#[test]
fn a_place_that_cannot_be_written_is_one_line() {
    let place = Place::new(2);
    std::fs::write(place.path("file"), "mine").unwrap();
    std::fs::create_dir(place.path("linked")).unwrap();
    std::os::unix::fs::symlink("/dev/full", place.path("linked/suspects.csv")).unwrap();
    let mut places = vec![
        "file",
        "file/below",
        "/dev/full",
        "/proc/foldtrace",
        "linked",
    ];
    // The administrator may write into a read-only folder; then there is nothing to test.
    let locked = place.path("locked");
    std::fs::create_dir(&locked).unwrap();
    let mut permissions = std::fs::metadata(&locked).unwrap().permissions();
    permissions.set_readonly(true);
    std::fs::set_permissions(&locked, permissions).unwrap();
    if std::fs::write(locked.join("probe"), "").is_err() {
        places.push("locked");
    }
    for out in places {
        let output = place.scan(out, &[]);
        let (line, code) = refusal(&output);
        assert_eq!(code, 1, "{out}: {line}");
        assert!(output.stdout.is_empty(), "{out}");
    }
    assert_eq!(std::fs::read(place.path("file")).unwrap(), b"mine");
    let full = std::fs::OpenOptions::new()
        .write(true)
        .open("/dev/full")
        .unwrap();
    let output = place.command("out", &[]).stdout(full).output().unwrap();
    assert_eq!(refusal(&output).1, 1);
}

#[test]
fn an_earlier_scan_is_neither_replaced_nor_mixed_with() {
    let place = Place::new(5);
    place.scan("out", &[]);
    let before = place.results("out");
    let (line, code) = refusal(&place.scan("out", &[]));
    assert!(line.contains("--resume") && code == 2, "{line}");
    let (line, code) = refusal(&place.scan("out", &["--resume", "--top", "3"]));
    assert!(line.contains("options") && code == 2, "{line}");
    std::fs::write(place.path("site.toml"), SITE.replace("0.1 %", "0.2 %")).unwrap();
    let (line, code) = refusal(&place.scan("out", &["--resume"]));
    assert!(line.contains("site file") && code == 2, "{line}");
    std::fs::write(place.path("site.toml"), SITE).unwrap();
    place.wav("recs/r900.wav", 4096, 900);
    let (line, code) = refusal(&place.scan("out", &["--resume"]));
    assert!(line.contains("recordings") && code == 2, "{line}");
    std::fs::remove_file(place.path("recs/r900.wav")).unwrap();
    assert_eq!(place.results("out"), before);
    // the same again has nothing left to do
    let again = place.scan("out", &["--resume", "--jobs", "3"]);
    assert_eq!(again.status.code(), Some(1));
    let summary = String::from_utf8(again.stdout).unwrap();
    assert!(summary.contains("(6 before this run)"), "{summary}");
    assert_eq!(place.results("out"), before);
    // into the folder that is scanned, or over someone else's file
    let (line, code) = refusal(&place.scan("recs", &[]));
    assert!(line.contains("among") && code == 2, "{line}");
    std::fs::create_dir(place.path("theirs")).unwrap();
    std::fs::write(place.path("theirs/recordings.csv"), "mine").unwrap();
    let (line, code) = refusal(&place.scan("theirs", &["--resume"]));
    assert!(line.contains("recordings.csv") && code == 2, "{line}");
    assert_eq!(place.results("theirs").len(), 1);
}

#[cfg(unix)]
#[test]
fn two_scans_into_one_folder_keep_apart() {
    let place = Place::new(60);
    let mut first = place
        .command("out", &["--jobs", "1"])
        .stdout(Stdio::null())
        .spawn()
        .unwrap();
    let started = Instant::now();
    let table = place.path("out/recordings.csv");
    while std::fs::metadata(&table).map_or(0, |m| m.len()) < 100 {
        assert!(started.elapsed() < Duration::from_secs(60), "never began");
        std::thread::yield_now();
    }
    for more in [&["--resume"][..], &[]] {
        let second = place.scan("out", more);
        // Had the first one ended already, this would say something else.
        let (line, code) = refusal(&second);
        assert!(line.contains("another scan is writing"), "{line}");
        assert_eq!(code, 1);
    }
    assert_eq!(first.wait().unwrap().code(), Some(1));
    place.scan("alone", &["--jobs", "1"]);
    assert_eq!(place.results("out"), place.results("alone"));
}

#[cfg(unix)]
#[test]
fn names_can_do_no_harm() {
    let place = Place::new(1);
    for name in [
        "=1+1.wav",
        "\u{1b}[2J\n.wav",
        "a,\"b\".wav",
        "\u{202e}vaw.wav",
    ] {
        let hostile = place.path("recs").join(name);
        std::fs::copy(place.path("recs/r000.wav"), hostile).unwrap();
    }
    let inside = Command::new(env!("CARGO_BIN_EXE_foldtrace"))
        .current_dir(place.path("recs"))
        .args(["scan", "=1+1.wav", ".", "--out", "../out"])
        .output()
        .unwrap();
    assert_eq!(inside.status.code(), Some(0), "{inside:?}");
    for file in [
        "out/recordings.csv",
        "out/suspects.csv",
        "out/recurring.csv",
    ] {
        let text = std::fs::read_to_string(place.path(file)).unwrap();
        let unsafe_character =
            |c: char| (c.is_control() && c != '\r' && c != '\n') || c == '\u{202e}';
        assert!(!text.chars().any(unsafe_character), "{file}: {text:?}");
    }
    let names: Vec<String> = place
        .rows("out/recordings.csv")
        .iter()
        .map(|r| r[0].to_owned())
        .collect();
    assert_eq!(names[0], "'=1+1.wav");
    assert!(names.contains(&"./a,\"b\".wav".to_owned()), "{names:?}");
    assert!(
        names.contains(&"./\\u{1b}[2J\\u{a}.wav".to_owned()),
        "{names:?}"
    );
    assert_eq!(names.len(), 6);
}

#[test]
fn names_come_from_a_list_or_from_stdin() {
    let place = Place::new(3);
    let list = "recs/r002.wav\r\n\nrecs/absent.wav\nrecs/r000.wav\n";
    std::fs::write(place.path("list.txt"), list).unwrap();
    let scan = |from: &str, out: &str| {
        let mut child = Command::new(env!("CARGO_BIN_EXE_foldtrace"))
            .current_dir(place.folder.path())
            .args(["scan", "--names-from", from, "--out", out])
            .stdin(Stdio::piped())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .unwrap();
        let mut stdin = child.stdin.take().unwrap();
        // One that reads a file instead may be gone already.
        let _ = stdin.write_all(list.as_bytes());
        drop(stdin);
        child.wait_with_output().unwrap()
    };
    assert_eq!(scan("-", "a").status.code(), Some(1));
    assert_eq!(scan("list.txt", "b").status.code(), Some(1));
    assert_eq!(place.results("a"), place.results("b"));
    let rows = place.rows("a/recordings.csv");
    let column = |i: usize| rows.iter().map(|r| r[i].to_owned()).collect::<Vec<_>>();
    assert_eq!(
        column(0),
        ["recs/r002.wav", "recs/absent.wav", "recs/r000.wav"]
    );
    assert_eq!(column(1), ["read", "failed", "read"]);
    let (line, code) = refusal(&scan("nowhere.txt", "c"));
    assert!(line.contains("nowhere.txt") && code == 1, "{line}");
    let empty = place.path("empty");
    std::fs::create_dir(&empty).unwrap();
    let (line, code) = refusal(&foldtrace(&[
        "scan",
        empty.to_str().unwrap(),
        "--out",
        place.path("d").to_str().unwrap(),
    ]));
    assert!(line.contains("no recording") && code == 1, "{line}");
    assert!(!place.path("d").exists());
}
