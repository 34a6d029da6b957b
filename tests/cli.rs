//! The program as a user runs it: output, exit codes, one line per error.

use std::path::{Path, PathBuf};
use std::process::{Command, Output};

/// Runs the program.
pub fn foldtrace(arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_foldtrace"))
        .args(arguments)
        .output()
        .unwrap()
}

fn stdout(output: &Output) -> String {
    String::from_utf8(output.stdout.clone()).unwrap()
}

/// The one line on stderr, checked to be just that.
fn complaint(output: &Output) -> String {
    let text = String::from_utf8(output.stderr.clone()).unwrap();
    assert_eq!(text.lines().count(), 1, "not one line: {text:?}");
    assert!(text.starts_with("foldtrace: "), "{text}");
    assert!(
        !text.trim_end().chars().any(char::is_control),
        "control characters: {text:?}"
    );
    text
}

fn file(folder: &tempfile::TempDir, name: &str, content: &[u8]) -> PathBuf {
    let path = folder.path().join(name);
    std::fs::write(&path, content).unwrap();
    path
}

fn text(path: &Path) -> &str {
    path.to_str().unwrap()
}

/// A short WAV with one tone at `cycles` per sample.
fn wav(folder: &tempfile::TempDir, name: &str, rate: u32, cycles: f64) -> PathBuf {
    let path = folder.path().join(name);
    let spec = hound::WavSpec {
        channels: 1,
        sample_rate: rate,
        bits_per_sample: 16,
        sample_format: hound::SampleFormat::Int,
    };
    let mut writer = hound::WavWriter::create(&path, spec).unwrap();
    let mut noise: u32 = 1;
    for i in 0..20_000 {
        noise = noise.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        let hiss = f64::from(noise >> 16) / 65_536.0 - 0.5;
        let tone = (std::f64::consts::TAU * cycles * f64::from(i)).sin();
        writer
            .write_sample((8000.0 * tone + 300.0 * hiss) as i16)
            .unwrap();
    }
    writer.finalize().unwrap();
    path
}

#[test]
fn bad_input_gets_one_line_and_exit_1() {
    let folder = tempfile::tempdir().unwrap();
    let header = {
        let path = folder.path().join("h.wav");
        let spec = hound::WavSpec {
            channels: 1,
            sample_rate: 8000,
            bits_per_sample: 16,
            sample_format: hound::SampleFormat::Int,
        };
        hound::WavWriter::create(&path, spec)
            .unwrap()
            .finalize()
            .unwrap();
        path
    };
    let no_rate: String = (0..200).map(|i| format!("{}\n", (i * 37) % 11)).collect();
    let words = "time,level\n0,1\n1,2\n2,three\n3,four\n4,five\n5,six\n".repeat(20);
    let cases = [
        (file(&folder, "empty.wav", b""), "empty"),
        (header, "no samples"),
        (
            file(&folder, "text.wav", b"these are only words\n"),
            "not a WAV",
        ),
        (file(&folder, "words.csv", words.as_bytes()), "line"),
        (file(&folder, "norate.csv", no_rate.as_bytes()), "--rate"),
        (folder.path().join("absent.wav"), "absent.wav"),
    ];
    for (path, expected) in cases {
        let output = foldtrace(&["triage", text(&path)]);
        let line = complaint(&output);
        assert!(line.contains(expected), "{path:?}: {line}");
        assert_eq!(output.status.code(), Some(1), "{line}");
    }
}

#[test]
fn a_bad_recording_does_not_stop_the_others() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.1234);
    let output = foldtrace(&["triage", "absent.wav", text(&good)]);
    assert_eq!(output.status.code(), Some(1));
    assert!(stdout(&output).contains("good.wav"));
    complaint(&output);
}

#[test]
fn wrong_usage_and_bad_site_files_exit_2() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.1234);
    let site = file(
        &folder,
        "site.toml",
        b"[[source]]\nname = \"m\"\nkind = \"mains\"\nherz = 50\n",
    );
    let site_line = foldtrace(&["triage", text(&good), "--site", text(&site)]);
    let line = complaint(&site_line);
    assert!(
        line.contains("site.toml") && line.contains("line 4") && line.contains("herz"),
        "{line}"
    );
    assert_eq!(site_line.status.code(), Some(2));
    for arguments in [
        vec!["triage"],
        vec!["no-such-command"],
        vec!["fold", "abc", "--rate", "8000"],
        vec!["fold", "100", "--rate", "0"],
        vec!["fold", "-5", "--rate", "80"],
        vec!["fold", "5", "--rate", "-80"],
        vec!["fold", "1e300", "--rate", "80"],
        vec!["fold", "nan", "--rate", "80"],
        vec![],
        vec!["unfold", "9000", "--rate", "8000", "--up-to", "20000"],
        vec!["triage", text(&good), "--top", "0"],
        vec!["triage", text(&good), "--suspects", "-", "--json", "-"],
    ] {
        let output = foldtrace(&arguments);
        complaint(&output);
        assert_eq!(output.status.code(), Some(2), "{arguments:?}");
        assert!(output.stdout.is_empty(), "{arguments:?}");
    }
}

#[test]
fn names_cannot_move_the_cursor() {
    complaint(&foldtrace(&["triage", "no\u{1b}[2J\nsuch.wav"]));
}

#[test]
fn exports_take_stdout_alone() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.1234);
    let list = foldtrace(&["triage", text(&good), "--suspects", "-"]);
    let list = stdout(&list);
    assert!(
        list.starts_with("recording,channel,tone,seen_hz,"),
        "{list}"
    );
    let json = foldtrace(&["triage", text(&good), "--json", "-"]);
    let json: serde_json::Value = serde_json::from_slice(&json.stdout).unwrap();
    let tones = &json["recordings"][0]["tones"];
    assert_eq!(tones.as_array().unwrap().len(), 1);
    let seen = tones[0]["seen_hz"].as_f64().unwrap();
    assert!((seen - 0.1234 * 8000.0).abs() < 0.01, "{seen}");
}

#[test]
fn exports_to_files_leave_the_table() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.1234);
    let list = folder.path().join("list.csv");
    let output = foldtrace(&["triage", text(&good), "--suspects", text(&list)]);
    assert_eq!(output.status.code(), Some(0));
    assert!(stdout(&output).contains("In short:"));
    let mut reader = csv::Reader::from_path(&list).unwrap();
    assert_eq!(reader.headers().unwrap().len(), 21);
    let rows: Vec<csv::StringRecord> = reader.records().map(Result::unwrap).collect();
    assert!(rows.iter().any(|r| &r[13] == "unlisted"));
    let sum: f64 = rows.iter().map(|r| r[19].parse::<f64>().unwrap()).sum();
    assert!(sum <= 1.0 && sum > 0.5, "{sum}");
    let nowhere = folder.path().join("absent").join("list.csv");
    let output = foldtrace(&["triage", text(&good), "--suspects", text(&nowhere)]);
    complaint(&output);
    assert_eq!(output.status.code(), Some(1));
}

#[test]
fn an_export_never_replaces_what_is_read() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.1234);
    let before = std::fs::read(&good).unwrap();
    let linked = folder.path().join("linked.csv");
    std::fs::hard_link(&good, &linked).unwrap();
    for target in [&good, &linked] {
        let output = foldtrace(&["triage", text(&good), "--suspects", text(target)]);
        assert!(complaint(&output).contains("input"));
        assert_eq!(output.status.code(), Some(2));
    }
    assert_eq!(std::fs::read(&good).unwrap(), before);
    let both = folder.path().join("both");
    let output = foldtrace(&[
        "triage",
        text(&good),
        "--suspects",
        text(&both),
        "--json",
        text(&both),
    ]);
    complaint(&output);
    assert_eq!(output.status.code(), Some(2));
    assert!(!both.exists());
}

#[test]
fn a_rate_given_overrides_the_file() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.25);
    let json = foldtrace(&["triage", text(&good), "--rate", "1000.5", "--json", "-"]);
    let json: serde_json::Value = serde_json::from_slice(&json.stdout).unwrap();
    let seen = json["recordings"][0]["tones"][0]["seen_hz"]
        .as_f64()
        .unwrap();
    assert!((seen - 0.25 * 1000.5).abs() < 0.001, "{seen}");
}

#[test]
fn inspect_says_what_was_read_as_triage_does() {
    let folder = tempfile::tempdir().unwrap();
    let rows: String = (0..600)
        .map(|i| {
            let (day, second) = (5 + i / 400, i % 400);
            format!(
                "{day:02}/07/2031 00:{:02}:{:02};{},5\n",
                second / 60,
                second % 60,
                i % 7
            )
        })
        .collect();
    let log = file(&folder, "log.csv", format!("Zeit;U [V]\n{rows}").as_bytes());
    let done = foldtrace(&["inspect", text(&log)]);
    assert_eq!(done.status.code(), Some(0));
    let screen = stdout(&done);
    let line = "  read as: semicolon, decimal comma, names in line 1, rows from line 2, time in column 1 as day-first date, 1 Hz";
    assert!(screen.lines().any(|l| l.starts_with(line)), "{screen}");
    assert!(screen.contains("columns: U [V]"), "{screen}");
    // Triage says the same lines, and how finely it resolves.
    let triage = stdout(&foldtrace(&["triage", text(&log)]));
    for line in screen.lines().skip(1) {
        assert!(triage.contains(line), "{line:?} is not in {triage}");
    }

    let said = foldtrace(&[
        "inspect",
        text(&log),
        "--time-as",
        "month-first",
        "--rate",
        "2.5",
    ]);
    assert!(
        stdout(&said).contains("month-first date, 2.5 Hz"),
        "{}",
        stdout(&said)
    );

    let both = foldtrace(&["inspect", text(&folder.path().join("none.csv")), text(&log)]);
    assert_eq!(both.status.code(), Some(1));
    assert!(complaint(&both).contains("none.csv"));
    assert!(stdout(&both).contains("read as"));
    for wrong in [
        ["--delimiter", "ab"],
        ["--decimal", "dot"],
        ["--first-row", "0"],
        ["--time-as", "weeks"],
    ] {
        let refused = foldtrace(&["inspect", text(&log), wrong[0], wrong[1]]);
        assert_eq!(refused.status.code(), Some(2), "{wrong:?}");
        assert!(complaint(&refused).contains(wrong[0]), "{wrong:?}");
    }
    let lost = foldtrace(&["inspect", text(&log), "--time", "clock"]);
    assert!(complaint(&lost).contains("has no column \"clock\", only 1 \"Zeit\", 2 \"U\""));
}

#[test]
fn a_channel_that_is_not_there_is_named() {
    let folder = tempfile::tempdir().unwrap();
    let good = wav(&folder, "good.wav", 8000, 0.25);
    let output = foldtrace(&["triage", text(&good), "--channel", "3"]);
    assert!(complaint(&output).contains("no channel 3"));
    assert_eq!(output.status.code(), Some(1));
}

#[test]
fn fold_and_unfold_agree() {
    // common practice: 100 Hz sampled at 80 Hz is seen at 20 Hz
    let folded = stdout(&foldtrace(&["fold", "100", "--rate", "80"]));
    let row: Vec<&str> = folded.lines().last().unwrap().split_whitespace().collect();
    assert_eq!(row[1].parse::<f64>().unwrap(), 20.0, "{folded}");
    assert_eq!(row[2], "3", "{folded}");
    let ladder = stdout(&foldtrace(&[
        "unfold", "20", "--rate", "80", "--up-to", "200",
    ]));
    let rungs: Vec<f64> = ladder
        .lines()
        .filter_map(|l| l.split_whitespace().next()?.parse().ok())
        .collect();
    assert_eq!(rungs, [20.0, 60.0, 100.0, 140.0, 180.0], "{ladder}");
}

#[test]
fn sources_are_listed() {
    let built_in = stdout(&foldtrace(&["sources"]));
    assert!(built_in.contains("50"), "{built_in}");
    let site = stdout(&foldtrace(&[
        "sources",
        "--site",
        "sample-data/orrowmere.toml",
    ]));
    assert!(
        site.contains("circulation drive") && site.contains("2c-1o"),
        "{site}"
    );
}

#[test]
fn a_closed_pipe_is_no_error() {
    use std::process::Stdio;
    let mut child = Command::new(env!("CARGO_BIN_EXE_foldtrace"))
        .args(["unfold", "20", "--rate", "80", "--up-to", "4000000"])
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    drop(child.stdout.take());
    let output = child.wait_with_output().unwrap();
    assert!(output.stderr.is_empty());
    assert_eq!(output.status.code(), Some(0));
}
