//! The demo recordings against what the script that made them put in.

use crate::cli::foldtrace;
use std::collections::BTreeMap;

struct Truth {
    seen_hz: f64,
    wander_hz: f64,
    true_hz: f64,
    names: Vec<String>,
    folded: bool,
    level_dbfs: f64,
}

fn truth(recording: &str) -> Vec<Truth> {
    let mut reader = csv::Reader::from_path("sample-data/truth.csv").unwrap();
    let headers = reader.headers().unwrap().clone();
    let column = |name: &str| headers.iter().position(|h| h == name).unwrap();
    let at: BTreeMap<&str, usize> = [
        "recording",
        "seen_hz",
        "true_hz",
        "source",
        "line",
        "level_dbfs",
        "folded",
        "wander_hz",
        "also",
    ]
    .into_iter()
    .map(|name| (name, column(name)))
    .collect();
    reader
        .records()
        .map(Result::unwrap)
        .filter(|r| &r[at["recording"]] == recording)
        .map(|r| {
            let mut names = vec![format!("{} {}", &r[at["source"]], &r[at["line"]])];
            // two lines at exactly one frequency: either name is right
            names.extend(Some(r[at["also"]].to_owned()).filter(|a| !a.is_empty()));
            Truth {
                seen_hz: r[at["seen_hz"]].parse().unwrap(),
                true_hz: r[at["true_hz"]].parse().unwrap(),
                wander_hz: r[at["wander_hz"]].parse().unwrap(),
                level_dbfs: r[at["level_dbfs"]].parse().unwrap(),
                folded: &r[at["folded"]] == "yes",
                names,
            }
        })
        .collect()
}

/// Tones with their suspects from the suspect list.
fn triage(recording: &str, site: &str) -> Vec<Vec<BTreeMap<String, String>>> {
    let output = foldtrace(&[
        "triage",
        &format!("sample-data/recordings/{recording}"),
        "--site",
        &format!("sample-data/{site}"),
        "--suspects",
        "-",
    ]);
    assert_eq!(output.status.code(), Some(0));
    let mut reader = csv::Reader::from_reader(output.stdout.as_slice());
    let mut tones: Vec<Vec<BTreeMap<String, String>>> = Vec::new();
    for row in reader.deserialize::<BTreeMap<String, String>>() {
        let row = row.unwrap();
        match tones.last_mut() {
            Some(tone) if tone[0]["tone"] == row["tone"] => tone.push(row),
            _ => tones.push(vec![row]),
        }
    }
    tones
}

fn number(row: &BTreeMap<String, String>, column: &str) -> f64 {
    row[column].parse().unwrap()
}

fn check(recording: &str, site: &str) {
    let truth = truth(recording);
    let tones = triage(recording, site);
    assert!(truth.len() > 10);
    assert_eq!(tones.len(), truth.len(), "{recording}: tones found");
    // each true tone has its own row, so as many rows means none is invented
    for (tone, t) in tones.iter().zip(&truth) {
        let top = &tone[0];
        let context = || format!("{recording}: {} seen at {}: {top:?}", t.names[0], t.seen_hz);
        let error = (number(top, "seen_hz") - t.seen_hz).abs();
        // three times the 95 % interval, and never more than a cell or the wander
        assert!(error < 3.0 * number(top, "seen_hz_u95"), "{}", context());
        assert!(error < 0.0134f64.max(t.wander_hz), "{}", context());
        assert!(
            (number(top, "level_dbfs") - t.level_dbfs).abs() < 1.5,
            "{}",
            context()
        );
        assert_eq!(top["rank"], "1");
        if t.folded {
            let name = format!("{} {}", top["suspect"], top["line"]);
            assert!(t.names.contains(&name), "{}", context());
            assert!(number(top, "probability") >= 0.9, "{}", context());
            assert_eq!(top["verdict"], "folded", "{}", context());
            // the recorder's clock is known to 100 ppm
            let near = 3.0 * number(top, "true_hz_u95") + 1e-4 * t.true_hz;
            assert!(
                (number(top, "true_hz") - t.true_hz).abs() < near,
                "{}",
                context()
            );
        } else {
            assert_ne!(top["verdict"], "folded", "{}", context());
        }
    }
}

/// The README's worked session shows what the program prints.
#[test]
fn the_readme_shows_what_is_printed() {
    let readme = std::fs::read_to_string("README.md").unwrap();
    let shown: Vec<&str> = readme
        .lines()
        .filter(|l| l.contains("FOLDED   circulation drive 1c-2o"))
        .collect();
    assert_eq!(shown.len(), 1);
    let output = foldtrace(&[
        "triage",
        "sample-data/recordings/skid-8000.wav",
        "--site",
        "sample-data/orrowmere.toml",
    ]);
    let printed = String::from_utf8(output.stdout).unwrap();
    assert!(
        printed.lines().any(|l| l.trim() == shown[0].trim()),
        "{}\nis not in\n{printed}",
        shown[0]
    );
    for fitted in ["output 43.8150 ± 0.0044 Hz", "carrier 5021.16 ± 0.50 Hz"] {
        assert!(
            readme.contains(fitted) && printed.contains(fitted),
            "{fitted}"
        );
    }
}

#[test]
fn the_skid_at_8000_hz() {
    check("skid-8000.wav", "orrowmere.toml");
}

#[test]
fn the_skid_at_11025_hz() {
    check("skid-11025.wav", "orrowmere.toml");
}

#[test]
fn the_fan_logger() {
    check("fan-logger.csv", "orrowmere-logger.toml");
}
