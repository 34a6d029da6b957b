//! CSV: dialects, missing values, gaps, and faults.

use std::io::{Seek, SeekFrom, Write};

use super::*;

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
        "column \"x\" has 1 cell that is no number (first: line 87, \"oops\"): taken as missing";
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
    assert_eq!((capture.spec().frames, capture.gaps()), (17_001, 2));
    assert_eq!(capture.spec().rate_hz, 1000.0);
    assert!(notes(&capture).contains("2 gaps"), "{}", notes(&capture));
    assert!(notes(&capture).contains("12001 samples were filled in as missing"));
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
fn a_jump_beyond_reason_is_a_clock_that_was_set() {
    let folder = Folder::new();
    let text = table("t,x\n", 100, |i| {
        format!("{},{}", if i < 50 { i } else { i + 100_000 }, prime(i))
    });
    let capture = open(&folder.write("jump.csv", &text)).unwrap();
    assert_eq!((capture.spec().frames, capture.spec().gaps), (100, 0));
    assert_eq!(capture.spec().rate_hz, 1.0);
    assert_eq!(
        notes(&capture),
        "1 jump ahead in time is too long for a gap: taken as a clock that was set, with no sample lost"
    );
    let jumps = table("t,x\n", 100, |i| {
        format!("{},{}", i + i / 25 * 9000, prime(i))
    });
    let capture = open(&folder.write("jumps.csv", jumps)).unwrap();
    assert_eq!((capture.spec().frames, capture.spec().gaps), (100, 0));
    assert!(
        notes(&capture).contains("3 jumps ahead"),
        "{}",
        notes(&capture)
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
        notes(&capture).contains("1 row repeats the stamp before it"),
        "{}",
        notes(&capture)
    );
    assert!(
        notes(&capture).contains("1 row steps back in time"),
        "{}",
        notes(&capture)
    );
    let expected: Vec<f32> = (0..100).map(|i| prime(i) - 2.0).collect();
    assert_eq!(read(&capture, 64), [expected]);

    let falling = table("t,x\n", 50, |i| format!("{},1", 50 - i));
    let capture = open(&folder.write("f.csv", falling)).unwrap();
    assert_eq!((capture.spec().frames, capture.spec().rate_hz), (50, 1.0));
    assert!(
        notes(&capture).contains("runs backwards"),
        "{}",
        notes(&capture)
    );
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
            "line 2, column 2: \"abc\" is not a number (words in 14 of 40 cells",
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
fn an_endless_run_of_zeros_far_down_ends_the_table() {
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
        let started = std::time::Instant::now();
        let capture = open(&path).unwrap();
        assert_eq!(capture.spec().frames, 100_001);
        assert!(started.elapsed().as_secs() < 20, "{:?}", started.elapsed());
    }
}

#[test]
fn a_line_without_an_end_stops_the_reader() {
    let folder = Folder::new();
    let rows = table("t,x\n", 2000, |i| format!("{i},{}", prime(i)));
    for start in ["2000,\"", "2000,1"] {
        let endless = "1".repeat(3_000_000);
        let path = folder.write("long.csv", format!("{rows}{start}{endless}\n"));
        let message = refusal(&path);
        assert!(message.contains("line 2002 is longer"), "{message}");
    }
}

#[test]
fn a_useless_time_column_is_done_without_if_the_rate_is_given() {
    let folder = Folder::new();
    let standing = table("time,x\n", 50, |i| format!("7,{}", prime(i)));
    let shuffled = table("time,x\n", 5000, |i| {
        format!("{},{}", i * 1709 % 5000, prime(i))
    });
    for text in [standing, shuffled] {
        let fault = "does not increase";
        let path = folder.write("t.csv", &text);
        assert!(refusal(&path).contains(fault), "{}", refusal(&path));
        let capture = open_at(&path, 5.0).unwrap();
        assert_eq!(
            notes(&capture),
            "column \"time\" is no usable time: left out"
        );
        assert_eq!(capture.spec().frames, text.lines().count() as u64 - 1);
        assert_eq!(capture.spec().rate_hz, 5.0);
        assert_eq!(capture.spec().channels.len(), 1);
    }
}

#[test]
fn a_temperature_is_no_time_and_equal_names_are_numbered() {
    let folder = Folder::new();
    let text = table("time,T,a,a\n", 50, |i| {
        format!(
            "{},{},{},{}",
            i as f64 / 64.0,
            20.0 + f64::from(prime(i)),
            prime(i),
            i * i
        )
    });
    let capture = open(&folder.write("t.csv", text)).unwrap();
    let names: Vec<&str> = capture
        .spec()
        .channels
        .iter()
        .map(|c| c.name.as_str())
        .collect();
    assert_eq!(names, ["T", "a (column 3)", "a (column 4)"]);
    assert_eq!(notes(&capture), "");
    let only = folder.write(
        "only.csv",
        table("time\n", 50, |i| format!("{}", i as f64 / 64.0)),
    );
    assert_eq!(refusal(&only), "no column of values beside the time");
}

#[test]
fn one_is_not_many() {
    let folder = Folder::new();
    // One frame is missing before row 18.
    let odd = |i: usize, many: bool| match i {
        10 => Some("100,1,1\npaused".into()),
        12 => Some("120,1,oops".into()),
        14 => Some("140,1".into()),
        16 => Some("160,1,1,9".into()),
        22 if many => Some("paused\n230,1,oops".into()),
        24 if many => Some("250,1".into()),
        26 if many => Some("270,1,1,9".into()),
        _ => None,
    };
    let text = |many: bool| {
        table("t_ms,x,y\n", 60, |i| {
            let time = if i < 18 { i } else { i + 1 } + if many && i > 40 { 2 } else { 0 };
            odd(i, many).unwrap_or_else(|| format!("{}0,1,{}", time, prime(i)))
        })
    };
    let one = open(&folder.write("one.csv", text(false))).unwrap();
    let one = one.spec().notes.clone();
    assert_eq!(
        one,
        [
            "1 line without a number: left out",
            "1 row has fewer cells than the others: taken as missing",
            "1 row has more cells than the others: the surplus was left out",
            "1 gap in the time column: 1 sample was filled in as missing (the longest, 1, before line 21)",
            "column \"y\" has 1 cell that is no number (first: line 15, \"oops\"): taken as missing",
        ]
    );
    let many = notes(&open(&folder.write("many.csv", text(true))).unwrap());
    for part in [
        "2 lines without a number",
        "2 rows have fewer",
        "2 rows have more",
        "2 gaps in",
        "3 samples were",
        "2 cells that are no numbers",
    ] {
        assert!(many.contains(part), "{many:?} lacks {part:?}");
    }
    let refused = one_line(open_at(&folder.write("short.csv", "7.5\n"), 9.0).unwrap_err());
    assert!(refused.starts_with("too short: 1 sample ("), "{refused}");
}

#[test]
fn a_name_stays_as_it_is_in_the_file() {
    let folder = Folder::new();
    let text = table(
        "t, \u{1b}[31mred\u{1b}[0m ,\"\u{1b}[2J \" (V),\u{1b}\u{202e}x [\u{7}]\n",
        60,
        |i| format!("{i}.5,{},oops,7", prime(i)),
    );
    let capture = open(&folder.write("esc.csv", text)).unwrap();
    let [red, other] = &capture.spec().channels[..] else {
        panic!("{:?}", capture.spec().channels);
    };
    assert_eq!(red.name, "\u{1b}[31mred\u{1b}[0m");
    assert_eq!(other.name, "\u{1b}\u{202e}x");
    assert_eq!(other.unit.as_deref(), Some("\u{7}"));
    assert_eq!(
        notes(&capture),
        "column \"\\u{1b}[2J\" holds words: left out"
    );
}

#[test]
fn the_notes_say_which_rate_was_taken() {
    let folder = Folder::new();
    let stamped = table("Sample rate: 7 Hz\nt,x\n", 50, |i| {
        format!("{:.3},{}", i as f64 / 2000.0 * 2.0, prime(i))
    });
    let told = table("Sample rate: 1 kHz\nx,y\n", 50, |i| {
        format!("{},{}", prime(i), prime(i + 1))
    });
    for (text, place) in [(stamped, "the time column"), (told, "line 1")] {
        let path = folder.write("r.csv", text);
        for (rate_hz, note) in [
            (
                1000.0,
                format!("sample rate 1000 Hz taken from --rate; {place} tells the same"),
            ),
            (
                1000.25,
                format!("sample rate 1000.25 Hz taken from --rate, not 1000 Hz from {place}"),
            ),
            (
                48_000.0,
                format!("sample rate 48000 Hz taken from --rate, not 1000 Hz from {place}"),
            ),
        ] {
            let capture = open_at(&path, rate_hz).unwrap();
            assert_eq!(notes(&capture), note);
            assert_eq!(capture.spec().rate_hz, rate_hz);
            assert_eq!(capture.spec().frames, 50);
            assert_eq!(capture.spec().step, None);
        }
    }
}
