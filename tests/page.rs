//! The page, the picture and the help files, as a user gets them. What a browser makes
//! of the page is tested by `scripts/page_in_browser.py`.

use crate::cli::foldtrace;
use foldtrace::report::page::{Planned, Record, Subject, write_triage};
use foldtrace::sources::Site;
use foldtrace::triage::{self, Options};
use sha2::{Digest, Sha256};
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::time::SystemTime;

fn sample(name: &str) -> String {
    format!("{}/sample-data/{name}", env!("CARGO_MANIFEST_DIR"))
}

fn text(path: &Path) -> &str {
    path.to_str().unwrap()
}

/// The page of the skid at 8000 Hz.
fn skid() -> String {
    let (recording, site) = (sample("recordings/skid-8000.wav"), sample("orrowmere.toml"));
    let output = foldtrace(&["triage", &recording, "--site", &site, "--report", "-"]);
    assert_eq!(output.status.code(), Some(0));
    String::from_utf8(output.stdout).unwrap()
}

/// All values of an attribute.
fn values<'a>(page: &'a str, attribute: &str) -> Vec<&'a str> {
    let start = format!(" {attribute}=\"");
    page.split(&start)
        .skip(1)
        .map(|rest| rest.split('"').next().unwrap())
        .collect()
}

#[test]
fn a_page_stands_alone_and_its_links_lead_somewhere() {
    let page = skid();
    assert!(
        page.starts_with("<!doctype html>"),
        "nothing beside the page"
    );
    let ids = values(&page, "id");
    let distinct: BTreeSet<&str> = ids.iter().copied().collect();
    assert_eq!(distinct.len(), ids.len(), "ids are given once");
    for n in 1..=39 {
        assert!(distinct.contains(format!("tone-{n}").as_str()), "tone {n}");
    }
    for link in values(&page, "href") {
        match link.strip_prefix('#') {
            Some(id) => assert!(distinct.contains(id), "{link} leads nowhere"),
            None => assert_eq!(link, "data:,"),
        }
    }
    for named in values(&page, "aria-labelledby") {
        for id in named.split(' ') {
            assert!(distinct.contains(id), "no name {id}");
        }
    }
    // The namespace of SVG is a name, not an address that is loaded.
    let outside = page.replace("xmlns=\"http://www.w3.org/2000/svg\"", "");
    for word in ["http:", "https:", "//www", "@import", " src=", "url(http"] {
        assert!(!outside.contains(word), "{word}");
    }
    assert_eq!(page.matches("<script").count(), 1);
}

#[test]
fn a_page_is_a_record() {
    let page = skid();
    for file in ["recordings/skid-8000.wav", "orrowmere.toml"] {
        let digest: String = Sha256::digest(std::fs::read(sample(file)).unwrap())
            .iter()
            .map(|b| format!("{b:02x}"))
            .collect();
        assert!(page.contains(&digest), "{file}");
    }
    assert!(page.contains(&format!("foldtrace {}", env!("CARGO_PKG_VERSION"))));
    assert!(page.contains("foldtrace triage "), "the command line");
    for words in [
        "3066.46",
        "circulation drive",
        "not described",
        "isolate and lock out",
        "Content-Security-Policy",
    ] {
        assert!(page.contains(words), "{words}");
    }
}

/// Names that would do something if they were not escaped.
const HOSTILE: [&str; 5] = [
    "</title><script>alert(1)</script>",
    "\"><img src=x onerror=alert(1)>",
    "=1+1|' /C calc'!A0",
    "]]>--><!-- {{ 7 * 7 }} {% endblock %}",
    "'\"&lt;&#60;",
];
const UNPRINTABLE: &str = "up\u{202e}nwod\u{1b}[2J\u{7}\u{ffff}";

/// A folder with a log whose own name, columns and sources are hostile.
fn hostile(folder: &tempfile::TempDir) -> (PathBuf, PathBuf) {
    let mut log = format!(
        "time,\"{}\",{}\n",
        HOSTILE[1].replace('"', "\"\""),
        HOSTILE[2]
    );
    let mut noise: u32 = 7;
    for i in 0..6000 {
        noise = noise.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        let hiss = f64::from(noise >> 16) / 65_536.0 - 0.5;
        let t = f64::from(i) / 500.0;
        let hum = (std::f64::consts::TAU * 50.0 * t).sin()
            + 0.3 * (std::f64::consts::TAU * 350.0 * t).sin();
        log.push_str(&format!(
            "{t},{:.5},{:.5}\n",
            hum + 0.05 * hiss,
            0.5 * hum - 0.04 * hiss
        ));
    }
    // A slash cannot be in a file's name, control characters not in a site file's.
    let name = HOSTILE[0].replace('/', "") + UNPRINTABLE + ".csv";
    let recording = folder.path().join(name);
    std::fs::write(&recording, log).unwrap();
    let toml = |name: &str| {
        let escaped: String = name
            .chars()
            .map(|c| format!("\\u{:04X}", u32::from(c)))
            .collect();
        format!("[[source]]\nname = \"{escaped}\"\nkind = \"mains\"\nhz = 50\n\n")
    };
    let mut listed = toml(HOSTILE[0]);
    for (i, name) in HOSTILE.iter().enumerate().skip(1) {
        listed.push_str(&toml(name).replace("hz = 50", &format!("hz = {}", 50 + 7 * i)));
    }
    let site = folder.path().join("site.toml");
    std::fs::write(&site, listed).unwrap();
    (recording, site)
}

#[test]
fn hostile_names_do_nothing_anywhere() {
    let folder = tempfile::tempdir().unwrap();
    let (recording, site) = hostile(&folder);
    let [page, list, picture, pixels] =
        ["p.html", "s.csv", "p.svg", "p.png"].map(|n| folder.path().join(n));
    let output = foldtrace(&[
        "triage",
        text(&recording),
        "--site",
        text(&site),
        "--report",
        text(&page),
        "--suspects",
        text(&list),
        "--picture",
        text(&picture),
    ]);
    assert_eq!(output.status.code(), Some(0), "{output:?}");
    let terminal = String::from_utf8(output.stdout).unwrap();
    let obeyed = |c: char| (c.is_control() && c != '\n') || c == '\u{202e}';
    assert!(!terminal.contains(obeyed), "{terminal:?}");
    assert!(terminal.contains("<script>"), "a terminal may show it");

    let page = std::fs::read_to_string(&page).unwrap();
    assert_eq!(page.matches("<script").count(), 1);
    assert_eq!(
        page.matches("</title>").count(),
        page.matches("<title").count()
    );
    for bad in [
        "<img",
        "alert(1)</",
        "]]>",
        "<!--",
        " 49 ",
        "\u{202e}",
        "\u{1b}",
    ] {
        assert!(!page.contains(bad), "{bad:?}");
    }
    assert!(page.contains("script&#62;alert(1)"), "shown as words");

    let picture = std::fs::read_to_string(&picture).unwrap();
    assert!(!picture.contains("<script") && picture.contains("script&#62;"));
    // Drawing it means that it is well-formed.
    let output = foldtrace(&[
        "triage",
        text(&recording),
        "--site",
        text(&site),
        "--picture",
        text(&pixels),
    ]);
    assert_eq!(output.status.code(), Some(0), "{output:?}");

    let mut list = csv::Reader::from_path(list).unwrap();
    let mut rows = 0;
    for row in list.records() {
        for cell in &row.unwrap() {
            assert!(!cell.contains(obeyed), "{cell:?}");
            let number = cell.parse::<f64>().is_ok();
            assert!(
                number || !cell.starts_with(['=', '+', '-', '@']),
                "{cell:?}"
            );
        }
        rows += 1;
    }
    assert!(rows > 0);
}

#[test]
fn a_picture_is_what_its_name_says() {
    let folder = tempfile::tempdir().unwrap();
    let recording = sample("recordings/skid-8000.wav");
    let site = sample("orrowmere.toml");
    let picture = |name: &str| {
        let path = folder.path().join(name);
        let output = foldtrace(&[
            "triage",
            &recording,
            "--site",
            &site,
            "--picture",
            text(&path),
        ]);
        (output.status.code(), std::fs::read(&path).ok())
    };
    let (code, png) = picture("p.PNG");
    assert_eq!(code, Some(0));
    let png = png.unwrap();
    assert!(png.starts_with(b"\x89PNG\r\n\x1a\n"));
    assert_eq!(png[16..20], 2240u32.to_be_bytes(), "width");
    let (code, svg) = picture("p.svg");
    assert_eq!(code, Some(0));
    let svg = String::from_utf8(svg.unwrap()).unwrap();
    assert!(svg.contains("33 circulation drive 1c-2o") && !svg.contains("href"));
    assert_eq!(picture("p.gif"), (Some(2), None));
}

#[test]
fn exports_keep_out_of_each_others_way() {
    let recording = sample("recordings/fan-logger.csv");
    for arguments in [
        vec!["triage", &recording, "--report", "-", "--json", "-"],
        vec!["triage", &recording, "--report", &recording],
        vec!["triage", &recording, &recording, "--picture", "p.png"],
    ] {
        let output = foldtrace(&arguments);
        assert_eq!(output.status.code(), Some(2), "{arguments:?}");
        assert!(output.stdout.is_empty());
    }
}

#[test]
fn several_recordings_share_a_page_and_failures_are_on_it() {
    let (one, two) = (
        sample("recordings/skid-8000.wav"),
        sample("recordings/fan-logger.csv"),
    );
    let output = foldtrace(&["triage", &one, "absent.wav", &two, "--report", "-"]);
    assert_eq!(output.status.code(), Some(1));
    let page = String::from_utf8(output.stdout).unwrap();
    let ids = values(&page, "id");
    let distinct: BTreeSet<&str> = ids.iter().copied().collect();
    assert_eq!(distinct.len(), ids.len());
    assert!(distinct.contains("tone-3") && distinct.contains("r2-tone-3"));
    assert!(page.contains("Could not be read") && page.contains("absent.wav"));
}

#[test]
fn a_planned_test_is_shown_with_its_cautions() {
    let site = Site::builtin();
    let path = sample("recordings/fan-logger.csv");
    let result = triage::run(Path::new(&path), &site, &Options::default(), &|_, _| ()).unwrap();
    let planned = Planned {
        words: "Record at 300 Hz: the <fan> moves.".into(),
        cautions: vec!["Stay clear of the belt.".into()],
    };
    let record = Record {
        command_line: "foldtrace".into(),
        made: SystemTime::UNIX_EPOCH,
        inputs: Vec::new(),
    };
    let page = |planned: &[Option<Planned>]| {
        let subject = Subject {
            results: std::slice::from_ref(&result),
            failed: &[],
            site: &site,
            site_name: "built-in",
            top: 5,
            planned,
            references: &[],
        };
        let mut out = Vec::new();
        write_triage(&subject, &record, &mut out).unwrap();
        String::from_utf8(out).unwrap()
    };
    let with = page(&[Some(planned)]);
    assert!(with.contains("Record at 300 Hz: the &#60;fan&#62; moves."));
    assert!(with.contains("Stay clear of the belt."));
    assert!(!page(&[]).contains("Next test."));
}

/// Every command says first what it is for and last how to try it, and that works.
#[test]
fn the_examples_of_the_help_work() {
    let folder = tempfile::tempdir().unwrap();
    let copy = |name: &str| {
        let to = folder.path().join("sample-data").join(name);
        std::fs::create_dir_all(to.parent().unwrap()).unwrap();
        std::fs::copy(sample(name), to).unwrap();
    };
    for name in [
        "orrowmere.toml",
        "orrowmere-logger.toml",
        "recordings/skid-8000.wav",
        "recordings/skid-11025.wav",
        "recordings/fan-logger.csv",
    ] {
        copy(name);
    }
    let help = |arguments: &[&str]| {
        let output = foldtrace(arguments);
        String::from_utf8(output.stdout).unwrap()
    };
    let all = help(&["--help"]);
    let commands: Vec<&str> = all
        .split_once("Commands:\n")
        .unwrap()
        .1
        .lines()
        .take_while(|l| l.starts_with("  "))
        .filter(|l| !l.starts_with("   "))
        .filter_map(|l| l.split_whitespace().next())
        .filter(|&c| c != "help")
        .collect();
    assert!(commands.contains(&"triage") && commands.contains(&"help-files"));
    for command in commands {
        let text = help(&[command, "--help"]);
        let first = text.lines().next().unwrap();
        assert!(
            !first.starts_with("Usage") && first.len() > 20,
            "{command}: {first}"
        );
        let (_, examples) = text
            .split_once("Example:\n")
            .or_else(|| text.split_once("Examples:\n"))
            .unwrap_or_else(|| panic!("{command} has no example"));
        for line in examples
            .replace("\\\n", " ")
            .lines()
            .filter(|l| !l.trim().is_empty())
        {
            let called = line.split(" (").next().unwrap().trim();
            let mut words = called.split_whitespace();
            assert_eq!(words.next(), Some("foldtrace"), "{command}: {line}");
            let output = Command::new(env!("CARGO_BIN_EXE_foldtrace"))
                .args(words)
                .current_dir(folder.path())
                .output()
                .unwrap();
            assert_eq!(output.status.code(), Some(0), "{line}: {output:?}");
        }
    }
    for file in [
        "foldtrace.1",
        "foldtrace-triage.1",
        "foldtrace.bash",
        "_foldtrace",
        "foldtrace.fish",
    ] {
        let path = folder.path().join("target/help-files").join(file);
        assert!(std::fs::metadata(&path).unwrap().len() > 200, "{file}");
    }
}
