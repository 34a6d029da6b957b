//! Odd files that a careful practitioner can read, each with the samples that
//! are in it.

use super::*;

/// The primes less the first, as a table of values holds them.
fn primes(rows: usize) -> Vec<f32> {
    (0..rows).map(|i| prime(i) - 2.0).collect()
}

/// Opens a text and compares rate and samples of its first channel.
fn check(name: &str, bytes: impl AsRef<[u8]>, rate_hz: f64, rows: usize) -> String {
    let folder = Folder::new();
    let capture = open(&folder.write("odd.csv", bytes)).unwrap_or_else(|e| panic!("{name}: {e}"));
    let spec = capture.spec();
    assert!(
        (spec.rate_hz / rate_hz - 1.0).abs() < 1e-6,
        "{name}: {}",
        spec.rate_hz
    );
    assert_eq!(
        read(&capture, 17)[0],
        primes(rows),
        "{name}: {}",
        notes(&capture)
    );
    notes(&capture)
}

fn seconds(i: usize) -> f64 {
    i as f64 / 64.0
}

#[test]
fn numbers_in_many_hands() {
    type Row = Box<dyn Fn(usize) -> String>;
    let cases: Vec<(&str, &str, Row)> = vec![
        (
            "bars",
            "t|x\n",
            Box::new(|i| format!("{}|{}", seconds(i), prime(i))),
        ),
        (
            "declared",
            "sep=;\nt;x\n",
            Box::new(|i| format!("{};{}", seconds(i), prime(i))),
        ),
        (
            "formula text",
            "t,x\n",
            Box::new(|i| format!("=\"{}\",=\"{}\"", seconds(i), prime(i))),
        ),
        (
            "apostrophes",
            "t,x\n",
            Box::new(|i| format!("'{},'{}", seconds(i), prime(i))),
        ),
        (
            "single quotes",
            "'t','x'\n",
            Box::new(|i| format!("'{}','{}'", seconds(i), prime(i))),
        ),
        (
            "units in cells",
            "t,x\n",
            Box::new(|i| format!("{} s,{} mV", seconds(i), prime(i))),
        ),
        (
            "Fortran",
            "t x\n",
            Box::new(|i| format!("{:E} {:E}", seconds(i), prime(i)).replace('E', "D")),
        ),
        (
            "pairs around commas",
            "t,x\n",
            Box::new(|i| format!("{:.6},{:.1}", seconds(i), prime(i)).replace('.', ",")),
        ),
        (
            "grouped thousands",
            "t;x\n",
            // The first row tells what 2.005 means.
            Box::new(|i| {
                let time = format!("{:.6}", seconds(i)).replace('.', ",");
                let value = prime(i) as i32 + 2000;
                let (high, low) = (value / 1000, value % 1000);
                format!("{time};{high}.{low:03}{}", if i == 0 { ",0" } else { "" })
            }),
        ),
    ];
    for (name, header, row) in cases {
        check(name, table(header, 48, row), 64.0, 48);
    }
}

#[test]
fn text_with_damage() {
    let text = table("t,x\n", 400, |i| format!("{},{}", seconds(i), prime(i)));
    let bytes = text.as_bytes();
    let at = bytes.iter().position(|&c| c == b'\n').unwrap() + 1;
    check(
        "zeros at the end",
        [bytes, &[0; 3_000_000]].concat(),
        64.0,
        400,
    );
    check(
        "zeros near the start",
        [&bytes[..at], &[0; 512], &bytes[at..]].concat(),
        64.0,
        400,
    );
    check(
        "zeros far down",
        [&bytes[..4100], &[0; 4096], &bytes[4100..]].concat(),
        64.0,
        400,
    );
    check("end of text", [bytes, b"\x1A"].concat(), 64.0, 400);
    let mixed: String = text
        .lines()
        .zip(["\n", "\r\n", "\r"].into_iter().cycle())
        .map(|(line, end)| format!("{line}{end}"))
        .collect();
    check("mixed line ends", mixed, 64.0, 400);
    check("doubled line ends", text.replace('\n', "\r\r\n"), 64.0, 400);
    let again = text.replacen("\n1,", "\nt,x\n1,", 1);
    assert_ne!(again, text);
    check("a heading again", again, 64.0, 400);
    let preamble: String = (0..1500).map(|i| format!("note {i} of many\n")).collect();
    check("a long preamble", preamble + &text, 64.0, 400);
}

#[test]
fn times_in_many_hands() {
    let clock = |i: usize, sep: &str| {
        let whole = 36_000 + i / 64;
        let micros = i % 64 * 15_625;
        let (h, m, s) = (whole / 3600, whole / 60 % 60, whole % 60);
        if sep.is_empty() {
            format!("{h:02}{m:02}{s:02}.{micros:06}")
        } else {
            format!("{h:02}{sep}{m:02}{sep}{s:02}.{micros:06}")
        }
    };
    type Stamp<'a> = Box<dyn Fn(usize) -> String + 'a>;
    let cases: Vec<(&str, Stamp)> = vec![
        ("time", Box::new(|i| format!("20310507T{}", clock(i, "")))),
        ("time", Box::new(|i| format!("20310507{}", clock(i, "")))),
        (
            "time",
            Box::new(|i| format!("\"May 7, 2031 {}\"", clock(i, ":"))),
        ),
        (
            "Zeit",
            Box::new(|i| format!("7. Mai 2031 {}", clock(i, ":"))),
        ),
        (
            "time",
            Box::new(|i| format!("2031-05-07 {} CEST", clock(i, ":"))),
        ),
        (
            "time",
            Box::new(|i| format!("{:.12}", 48_000.4 + seconds(i) / 86_400.0)),
        ),
        (
            "t [d]",
            Box::new(|i| format!("{:.14}", seconds(i) / 86_400.0)),
        ),
        (
            "tiempo_ms",
            Box::new(|i| format!("{}", 1000.0 * seconds(i))),
        ),
        // Seconds of a day stay seconds.
        (
            "time",
            Box::new(|i| format!("{:.6}", 43_200.0 + seconds(i))),
        ),
        (
            "sec,usec",
            Box::new(|i| format!("{},{}", 1_900_000_000 + i / 64, i % 64 * 15_625)),
        ),
        ("time", Box::new(|i| format!("{:.6}", 7.0 - seconds(i)))),
    ];
    for (heading, stamp) in cases {
        let text = table(&format!("{heading},x\n"), 200, |i| {
            format!("{},{}", stamp(i), prime(i))
        });
        check(&format!("{heading} {}", stamp(1)), text, 64.0, 200);
    }
}

#[test]
fn one_stamp_a_second_for_many_rows() {
    let text = table("time,x\n", 900, |i| {
        format!("2031-05-07T10:00:{:02},{}", i / 250, prime(i))
    });
    check("stamps in whole seconds", text, 250.0, 900);
    // Rounded to a step a little longer than the period: now and then two rows
    // share a stamp.
    let text = table("t,x\n", 3000, |i| {
        format!("{:.3},{}", i as f64 / 1024.0, prime(i))
    });
    check("stamps rounded up", text, 1024.0, 3000);
}

#[test]
fn steps_of_the_clock_are_no_gaps() {
    let local = |i: usize, jump: i64| {
        // Two minutes before the hour, an hour is left out or comes again.
        let second = 7080 + i as i64 / 8 + if i < 960 { 0 } else { jump };
        let (h, m, s) = (second / 3600, second / 60 % 60, second % 60);
        format!("2031-03-30 {h:02}:{m:02}:{s:02}.{:03}", i % 8 * 125)
    };
    for jump in [3600, -3600] {
        let text = table("time,x\n", 2000, |i| {
            format!("{},{}", local(i, jump), prime(i))
        });
        let notes = check("daylight saving", text, 8.0, 2000);
        assert!(notes.contains("1 hour of daylight saving"), "{notes}");
    }
    // With a zone, an hour is an hour.
    let folder = Folder::new();
    let text = table("time,x\n", 2000, |i| {
        format!("{}Z,{}", local(i, 3600), prime(i))
    });
    let capture = open(&folder.write("gap.csv", text)).unwrap();
    assert_eq!(
        (capture.spec().gaps, capture.spec().frames),
        (1, 2000 + 8 * 3600)
    );
    let restart = table("t,x\n", 400, |i| {
        format!("{},{}", seconds(i % 200), prime(i))
    });
    assert!(check("restart", restart, 64.0, 400).contains("1 row steps back"));
    let set = table("time,x\n", 400, |i| {
        let year = if i < 100 { 1970 } else { 2031 };
        format!("{year}-01-01T00:{:02}:{:02},{}", i / 60, i % 60, prime(i))
    });
    assert!(check("clock set", set, 1.0, 400).contains("a clock that was set"));
}

#[test]
fn a_count_of_samples_tells_lost_ones() {
    let folder = Folder::new();
    let text = table("sample,x\n", 300, |i| match i % 50 {
        20 => "# lost".into(),
        _ => format!("{i},{}", prime(i)),
    });
    let capture = open_at(&folder.write("lost.csv", text), 50.0).unwrap();
    let spec = capture.spec();
    assert_eq!((spec.frames, spec.gaps, spec.rate_hz), (300, 6, 50.0));
    assert!(read(&capture, 99)[0][20].is_nan());
}

#[test]
fn values_that_stand_for_none_are_missing() {
    let folder = Folder::new();
    for mark in [
        "-9999", "-999.25", "9.91E37", "1.#QNAN", "no data", "#DIV/0!",
    ] {
        let text = table("t,x\n", 300, |i| match i % 40 {
            7 => format!("{},{mark}", seconds(i)),
            _ => format!("{},{}", seconds(i), prime(i)),
        });
        let capture = open(&folder.write("m.csv", text)).unwrap();
        let read = read(&capture, 64);
        for (i, sample) in read[0].iter().enumerate() {
            assert_eq!(sample.is_nan(), i % 40 == 7, "{mark}, row {i}");
        }
    }
    // A reading among others like it stands for itself.
    let text = table("t,x\n", 300, |i| {
        format!(
            "{},{}",
            seconds(i),
            if i % 40 == 7 { 9999 } else { 9000 + i * 7 }
        )
    });
    let capture = open(&folder.write("r.csv", text)).unwrap();
    assert!(
        read(&capture, 64)[0]
            .iter()
            .all(|sample| sample.is_finite())
    );
    let nothing = table("t,x\n", 50, |i| format!("{},NaN", seconds(i)));
    let capture = open(&folder.write("n.csv", nothing)).unwrap();
    assert!(read(&capture, 64)[0].iter().all(|sample| sample.is_nan()));
}

#[test]
fn headers_that_lie_or_leave_out() {
    let folder = Folder::new();
    let samples: Vec<i32> = PRIMES.to_vec();
    let data = || chunk(b"data", None, &pcm16(&samples));
    let format = |change: &dyn Fn(&mut Vec<u8>)| {
        let mut bytes = fmt(1, 1, 8000, 16, 2);
        change(&mut bytes);
        bytes
    };
    let set = |at: usize, with: &'static [u8]| {
        format(&move |bytes: &mut Vec<u8>| bytes[8 + at..8 + at + with.len()].copy_from_slice(with))
    };
    let old = chunk(b"fmt ", None, &fmt(1, 1, 8000, 16, 2)[8..22]);
    let lie = [&b"LIST\xFF\xFF\xFF\x7FINFO"[..], &[0; 20]].concat();
    let mut long = fmt(1, 1, 8000, 16, 2);
    long[4..8].copy_from_slice(&[0, 0, 0, 16]);
    let cases = [
        ("no bits", vec![set(14, b"\0\0"), data()]),
        ("no channels", vec![set(2, b"\0\0"), data()]),
        ("no rate", vec![set(4, b"\0\0\0\0"), data()]),
        ("frame size", vec![set(12, b"\x07\0"), data()]),
        ("no bits field", vec![old, data()]),
        (
            "a list that claims too much",
            vec![fmt(1, 1, 8000, 16, 2), lie, data()],
        ),
        ("a format that claims too much", vec![long, data()]),
        (
            "zeros between",
            vec![fmt(1, 1, 8000, 16, 2), vec![0; 12], data()],
        ),
        (
            "an empty data chunk first",
            vec![fmt(1, 1, 8000, 16, 2), chunk(b"data", None, b""), data()],
        ),
    ];
    for (name, chunks) in cases {
        let path = folder.write("lie.wav", riff_file(b"RIFF", &chunks));
        let capture = open(&path).unwrap_or_else(|e| panic!("{name}: {e}"));
        assert_eq!(capture.spec().rate_hz, 8000.0, "{name}");
        assert_eq!(read(&capture, 7), [fractions(&samples, 32_768.0)], "{name}");
    }
}

#[test]
fn the_big_end_first() {
    let folder = Folder::new();
    for width in [2usize, 3, 4] {
        let mut body = vec![0, 1, 0, 1];
        body.extend(8000u32.to_be_bytes());
        body.extend((8000 * width as u32).to_be_bytes());
        body.extend((width as u16).to_be_bytes());
        body.extend((8 * width as u16).to_be_bytes());
        let data: Vec<u8> = PRIMES
            .iter()
            .flat_map(|&prime| (prime << (32 - 8 * width)).to_be_bytes()[..width].to_vec())
            .collect();
        let mut bytes = b"RIFX\0\0\0\0WAVE".to_vec();
        for (id, body) in [(b"fmt ", &body), (b"data", &data)] {
            bytes.extend(id);
            bytes.extend((body.len() as u32).to_be_bytes());
            bytes.extend(body);
        }
        let capture = open(&folder.write("big.wav", &bytes)).unwrap();
        assert_eq!(capture.spec().rate_hz, 8000.0);
        let full = 2f32.powi(8 * width as i32 - 1);
        assert_eq!(read(&capture, 5), [fractions(&PRIMES, full)], "{width}");
    }
}

#[test]
fn samples_lost_at_even_distances_are_lost_all_the_same() {
    let folder = Folder::new();
    for apart in [20, 33, 50] {
        let kept = (0..3000).filter(|i| i % apart != apart / 2);
        let rows: String = kept
            .map(|i| format!("{:.2},{}\n", i as f64 / 50.0, prime(i)))
            .collect();
        let capture = open(&folder.write("l.csv", format!("t,x\n{rows}"))).unwrap();
        let spec = capture.spec();
        assert!(
            (spec.rate_hz / 50.0 - 1.0).abs() < 1e-9,
            "{apart}: {}",
            spec.rate_hz
        );
        assert_eq!(spec.frames, 3000, "{apart}: {}", notes(&capture));
        let lost = (0..3000).filter(|i| i % apart == apart / 2).count();
        assert_eq!(spec.gaps, lost as u64, "{apart}");
    }
}
