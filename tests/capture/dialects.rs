//! CSV as programs and people leave it: remarks, preambles, units under the
//! heading, other encodings, quotes, and what cannot be told apart.

use super::*;

/// 64 Hz of the primes less the first, as every file here holds them.
fn assert_primes(name: &str, bytes: impl AsRef<[u8]>, channel: &str, unit: Option<&str>) -> String {
    let folder = Folder::new();
    let path = folder.write("x.csv", bytes);
    let capture = open(&path).unwrap_or_else(|e| panic!("{name}: {e}"));
    assert_eq!(capture.spec().rate_hz, 64.0, "{name}");
    let found = &capture.spec().channels[0];
    assert_eq!(
        (found.name.as_str(), found.unit.as_deref()),
        (channel, unit),
        "{name}"
    );
    let expected: Vec<f32> = (0..48).map(|i| prime(i) - 2.0).collect();
    assert_eq!(
        read(&capture, 17),
        [expected],
        "{name}: {}",
        notes(&capture)
    );
    notes(&capture)
}

fn row(i: usize) -> String {
    format!("{},{}", i as f64 / 64.0, prime(i))
}

fn plain(header: &str) -> String {
    table(header, 48, row)
}

#[test]
fn lines_before_the_rows() {
    let headings = [
        ("preamble", "Recorder 7\nSerial, 1234\n\nt,x\n", "x", None),
        (
            "preamble with quotes",
            "\"Hall, north\"\nby \"A. N.\"\nt,x\n",
            "x",
            None,
        ),
        ("stray quote", "# 5\" disk, \"old\nt,x\n", "x", None),
        ("hash heading", "# made by hand\n# t,x\n", "x", None),
        ("hash preamble", "#x\n#y\nt,x [V]\n", "x", Some("V")),
        ("percent", "% remark, second\nt,x\n", "x", None),
        ("slashes", "// remark\nt,x\n", "x", None),
        ("semicolon remark", "; remark; more\nt,x\n", "x", None),
        ("units row", "t,x\ns,m/s^2\n", "x", Some("m/s^2")),
        ("units row in brackets", "t,x\n[s],[mV]\n", "x", Some("mV")),
        (
            "units row and a blank line",
            "Time,Channel A\n(s),(mV)\n\n",
            "Channel A",
            Some("mV"),
        ),
        ("axes above", "x-axis,1\nsecond,Volt\n", "Volt", None),
        ("unit after a slash", "t/s,U/kV\n", "U", Some("kV")),
        ("unit after a comma", "\"t, s\",\"a, g\"\n", "a", Some("g")),
        ("braces", "t (s),x {Pa}\n", "x", Some("Pa")),
        ("no unit", "t,x (left)\n", "x (left)", None),
        ("blank lines", "\n\n\nt,x\n\n", "x", None),
        (
            "long name",
            "t,\"acceleration, bearing 2 [mm/s^2]\"\n",
            "acceleration, bearing 2",
            Some("mm/s^2"),
        ),
        ("preamble of numbers", "7\n8\nt,x\n", "x", None),
    ];
    for (name, header, channel, unit) in headings {
        assert_eq!(
            assert_primes(name, plain(header), channel, unit),
            "",
            "{name}"
        );
    }
}

#[test]
fn a_delimiter_goes_before_blanks() {
    let rows = |header: &str, row: &dyn Fn(f64, i32) -> String| {
        table(&format!("{header}\n"), 48, |i| {
            row(i as f64 * 1e3 / 64.0, PRIMES[i % 24])
        })
    };
    for delimiter in ["\t", ";", ",", ", ", "; ", " ,", "\t "] {
        let header = format!("time (ms){delimiter}vib 1 (mm/s)");
        let text = rows(&header, &|ms, x| format!("{ms}{delimiter}{x}"));
        let note = assert_primes(&header, text, "vib 1", Some("mm/s"));
        assert_eq!(note, "", "{header:?}");
        // Whole numbers: "5," reads as one, too.
        let header = format!("time (us){delimiter}vib (mm/s)");
        let text = rows(&header, &|ms, x| format!("{:.0}{delimiter}{x}", ms * 1e3));
        let note = assert_primes(&header, text, "vib", Some("mm/s"));
        assert_eq!(note, "", "{header:?}");
        // A date and a time in one cell, split at blanks, would be one number more.
        let header = format!("date and time{delimiter}vib (mm/s)");
        let text = rows(&header, &|ms, x| {
            format!("2031-05-17 12:30:{:09.6}{delimiter}{x}", ms / 1e3)
        });
        assert_primes(&header, text, "vib", Some("mm/s"));
        // Remarks of several words after each row.
        let header = format!("time (ms){delimiter}vib{delimiter}what was on");
        let text = rows(&header, &|ms, x| {
            format!("{ms}{delimiter}{x}{delimiter}fan 2 on")
        });
        let note = assert_primes(&header, text, "vib", None);
        assert_eq!(note, "column \"what was on\" holds words: left out");
    }
    // Blanks it is where nothing else fits.
    let comma = |x: f64| x.to_string().replace('.', ",");
    let text = rows("Hall 7, north\nt_ms x", &|ms, x| {
        format!("{}   {x},0", comma(ms))
    });
    assert_primes("decimal comma", text, "x", None);
    let text = rows("Serial, 12\nt_ms x", &|ms, x| {
        format!("{ms}{}{x}", if x < 7 { "\t " } else { "  " })
    });
    assert_primes("blanks and tabs", text, "x", None);
    let text = rows("t_ms\tn x", &|ms, x| format!("{ms}\t7 {x}"));
    let folder = Folder::new();
    let capture = open(&folder.write("mixed.csv", text)).unwrap();
    assert_eq!(capture.spec().channels.len(), 2);
}

#[test]
fn lines_among_and_after_the_rows() {
    for (name, line, note) in [
        ("hash", "# paused, \"here", ""),
        ("slashes", "// paused", ""),
        ("percent", "% paused", ""),
        ("blank", "", ""),
        ("empty cells", ",", ""),
        ("heading again", "t,x", "1 line without a number: left out"),
        ("words", "paused", "1 line without a number: left out"),
    ] {
        for at in [20, 48] {
            let mut lines: Vec<String> = (0..48).map(row).collect();
            lines.insert(at, line.into());
            let text = "t,x\n".to_owned() + &lines.join("\n");
            assert_eq!(assert_primes(name, text, "x", None), note, "{name}");
        }
    }
    let trailing = plain("t,x,\n").replace('\n', ",\n").replace(",,\n", ",\n");
    assert_eq!(assert_primes("trailing delimiter", trailing, "x", None), "");
    let only_rows = "t,x\n".to_owned() + &plain("").replace('\n', ",\n");
    assert_eq!(
        assert_primes("trailing delimiter in rows", only_rows, "x", None),
        ""
    );
}

#[test]
fn other_encodings() {
    let text = plain("t,Größe [°]\n");
    let with_bom: Vec<u16> = format!("\u{FEFF}{text}").encode_utf16().collect();
    let without: Vec<u16> = text.encode_utf16().collect();
    let latin1: Vec<u8> = text.chars().map(|c| c as u32 as u8).collect();
    let encodings = [
        ("UTF-8", text.clone().into_bytes()),
        ("UTF-8 with a mark", format!("\u{FEFF}{text}").into_bytes()),
        (
            "UTF-16, little end first",
            with_bom.iter().flat_map(|u| u.to_le_bytes()).collect(),
        ),
        (
            "UTF-16, big end first",
            with_bom.iter().flat_map(|u| u.to_be_bytes()).collect(),
        ),
        (
            "UTF-16 without a mark",
            without.iter().flat_map(|u| u.to_le_bytes()).collect(),
        ),
        ("Latin-1", latin1),
        (
            "carriage returns only",
            text.replace('\n', "\r").into_bytes(),
        ),
        ("both", text.replace('\n', "\r\n").into_bytes()),
    ];
    for (name, bytes) in encodings {
        assert_eq!(assert_primes(name, bytes, "Größe", Some("°")), "", "{name}");
    }
}

#[test]
fn long_utf16_is_converted_across_reads() {
    let folder = Folder::new();
    let text = table("t,x \u{1F50A}\n", 30_000, |i| {
        format!("{},{}", i as f64 / 64.0, prime(i))
    });
    let bytes: Vec<u8> = text.encode_utf16().flat_map(|u| u.to_le_bytes()).collect();
    let wide = open(&folder.write("wide.csv", bytes)).unwrap();
    let narrow = open(&folder.write("narrow.csv", &text)).unwrap();
    assert_eq!(wide.spec().channels[0].name, "x \u{1F50A}");
    assert_eq!(bits(&read(&wide, 4096)), bits(&read(&narrow, 4096)));
}

#[test]
fn numbers_in_many_hands() {
    let minus = plain("t,x\n").replace(",-", ",\u{2212}");
    assert_eq!(assert_primes("typographic minus", minus, "x", None), "");
    let plus = table("t,x\n", 48, |i| {
        format!("{:+},{:+}", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("plus", plus, "x", None), "");
    let exponent = table("t,x\n", 48, |i| {
        format!("{:E},{:e}", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("exponent", exponent, "x", None), "");
    let points = table("t,x\n", 48, |i| {
        format!("{},{}.", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("bare point", points, "x", None), "");
    let padded = table("t,x\n", 48, |i| {
        format!("  {:>9}  ,\u{A0}{}\t", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("padding", padded, "x", None), "");
    let quoted = table("\"t\",\"x\"\n", 48, |i| {
        format!("\"{}\",\"{}\"", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("quotes", quoted, "x", None), "");
    let late = plain("t,x\n")
        .replace(",89", ",\"89\"")
        .replace(",-89", ",\"-89\"");
    assert_eq!(assert_primes("a few quotes", late, "x", None), "");
    let blanks = table("t x\n", 48, |i| {
        format!(" {:9}   {:5}", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("blanks", blanks, "x", None), "");
    let blanks = table("# t   x\n", 48, |i| {
        format!("{:9.6e} {:5}", i as f64 / 64.0, prime(i))
    });
    assert_eq!(assert_primes("blanks, remark", blanks, "x", None), "");
}

#[test]
fn a_decimal_comma_is_not_a_delimiter() {
    let folder = Folder::new();
    let quarter = |i: usize| format!("{:.2}", f64::from(prime(i)) / 4.0).replace('.', ",");
    let expected = [(0..48)
        .map(|i| (prime(i) - 2.0) / 4.0)
        .collect::<Vec<f32>>()];
    for header in ["U\n", ""] {
        let path = folder.write("one.csv", table(header, 48, quarter));
        let capture = open_at(&path, 100.0).unwrap();
        assert_eq!(read(&capture, 99), expected, "{header:?}");
    }
    for header in ["t,U\n", ""] {
        let text = table(header, 48, |i| format!("0,{:04},{}", i * 10, quarter(i)));
        let capture = open(&folder.write("two.csv", text)).unwrap();
        assert!((capture.spec().rate_hz - 1000.0).abs() < 1e-6);
        assert_eq!(read(&capture, 99), expected, "{header:?}");
        assert!(
            notes(&capture).contains("commas both"),
            "{}",
            notes(&capture)
        );
    }
}

#[test]
fn a_rate_in_the_preamble_serves_without_a_time_column() {
    let folder = Folder::new();
    for (line, rate_hz) in [
        ("Sample rate: 2000 Hz", 2000.0),
        ("# sampling rate = 2 kHz", 2000.0),
        ("Sampling frequency,44100", 44_100.0),
        ("fs=12.5", 12.5),
        ("# sample_rate_hz: 8000", 8000.0),
        ("Sampling interval: 0.5 ms", 2000.0),
        ("Sample period;0.001", 1000.0),
    ] {
        let text = table(&format!("Recorder 7\n{line}\nx,y\n"), 48, |i| {
            format!("{},{}", prime(i), prime(i + 1))
        });
        let capture = open(&folder.write("p.csv", &text)).unwrap_or_else(|e| panic!("{line}: {e}"));
        assert!(
            (capture.spec().rate_hz / rate_hz - 1.0).abs() < 1e-12,
            "{line}"
        );
        assert!(
            notes(&capture).contains("taken from line 2"),
            "{line}: {}",
            notes(&capture)
        );
        assert_eq!(
            open_at(&folder.write("p.csv", text), 3.0)
                .unwrap()
                .spec()
                .rate_hz,
            3.0
        );
    }
    for line in [
        "Baud rate: 9600",
        "Samples: 48",
        "Range: 50 Hz",
        "Sample rate: unknown",
    ] {
        let text = table(&format!("{line}\nx,y\n"), 48, |i| {
            format!("{},{}", prime(i), prime(i + 1))
        });
        assert!(
            refusal(&folder.write("p.csv", text)).contains("--rate HZ"),
            "{line}"
        );
    }
}

#[test]
fn garbled_tables_are_an_answer() {
    use rand::{RngExt, SeedableRng};
    const SEED: u64 = 31_337;
    const BITS: &[&str] = &[
        "0",
        "1",
        "-7",
        ".5",
        ",",
        ",",
        ",",
        ";",
        "\t",
        "\n",
        "\n",
        "\n",
        "\"",
        "#",
        " ",
        "t",
        "x",
        "[s]",
        "12:30:",
        "2031-05-07",
        "e",
        "E9",
        "nan",
        "\r",
        "\u{FEFF}",
        "ü",
        "\\",
        "1e308",
        "%",
        "99999999999999999999",
        "-",
        "/",
        ":",
    ];
    let folder = Folder::new();
    let mut random = rand::rngs::StdRng::seed_from_u64(SEED);
    let mut opened = 0;
    for case in 0..1500 {
        let mut text = plain(if case % 2 == 0 { "t,x\n" } else { "" });
        for _ in 0..random.random_range(1..20) {
            let places: Vec<usize> = text.char_indices().map(|(at, _)| at).collect();
            let at = places[random.random_range(0..places.len())];
            text.insert_str(at, BITS[random.random_range(0..BITS.len())]);
        }
        let path = folder.write("garbled.csv", &text);
        match open(&path) {
            Ok(capture) => {
                opened += 1;
                assert!(capture.spec().rate_hz > 0.0, "seed {SEED}, case {case}");
                assert!(
                    capture.spec().frames <= 50 * 101,
                    "seed {SEED}, case {case}"
                );
                let once = bits(&read(&capture, 64));
                assert_eq!(bits(&read(&capture, 5)), once, "seed {SEED}, case {case}");
            }
            Err(e) => assert!(!one_line(e).is_empty()),
        }
    }
    assert!(
        opened > 100,
        "the cases should be near enough to a table: {opened}"
    );
}

#[test]
fn settings_beside_the_first_rows_are_left_out() {
    let text = table("", 48, |i| {
        let setting = ["Record length,48,,", "Points,,,", "Trigger,7,,", ",,,"][i.min(3)];
        format!("{setting}{}", row(i))
    });
    let note = assert_primes("settings", text, "column 5", None);
    assert!(
        note.contains("\"column 4\" taken as the time in seconds"),
        "{note}"
    );
}

#[test]
fn any_bytes_are_an_answer() {
    use rand::{RngExt, SeedableRng};
    const SEED: u64 = 271;
    let folder = Folder::new();
    let mut random = rand::rngs::StdRng::seed_from_u64(SEED);
    let starts: [&[u8]; 8] = [
        b"",
        b"RIFF",
        b"RIFF\x00\x00\x00\x00WAVEfmt ",
        b"\xFF\xFE",
        b"\xFE\xFF",
        b"\xEF\xBB\xBF",
        b"t,x\n",
        b"RF64\xFF\xFF\xFF\xFFWAVEds64",
    ];
    for case in 0..1600 {
        let mut bytes = starts[case % 8].to_vec();
        let most = [255, 127, 64, 13][case / 8 % 4];
        let length = random.random_range(0..400);
        bytes.extend((0..length).map(|_| random.random_range(0..=most)));
        match open(&folder.write("any.csv", &bytes)) {
            Ok(capture) => drop(read(&capture, 7)),
            Err(e) => assert!(!one_line(e).is_empty(), "seed {SEED}, case {case}"),
        }
    }
}
