//! What the user says of a table goes before what is found in it.

use super::*;
use foldtrace::capture::{DecimalSign, LayoutOptions, TextEncoding, TimeChoice, TimeNotation};

fn options(rate_hz: Option<f64>, layout: LayoutOptions) -> OpenOptions {
    OpenOptions {
        rate_hz,
        layout,
        ..OpenOptions::default()
    }
}

fn column(name: &str) -> Option<TimeChoice> {
    Some(TimeChoice::Column(name.into()))
}

/// Rate, channel names and samples of the last channel as they stand in the file.
fn opened(bytes: impl AsRef<[u8]>, options: &OpenOptions) -> (f64, Vec<String>, Vec<f32>) {
    let folder = Folder::new();
    let capture = Capture::open(&folder.write("x.csv", bytes), options).unwrap();
    let channels = &capture.spec().channels;
    let names = channels
        .iter()
        .map(|channel| channel.name.clone())
        .collect();
    let offset = channels.last().unwrap().offset as f32;
    let samples = read(&capture, 19).pop().unwrap();
    let rate_hz = capture.spec().rate_hz;
    (
        rate_hz,
        names,
        samples.iter().map(|sample| sample + offset).collect(),
    )
}

fn primes() -> Vec<f32> {
    (0..48).map(prime).collect()
}

#[test]
fn each_guess_can_be_overridden() {
    let row = |i: usize| format!("{},{}", i as f64 / 64.0, prime(i));
    let plain = table("t,x\n", 48, row);
    let none = LayoutOptions::default;
    let utf16: Vec<u8> = plain.encode_utf16().flat_map(u16::to_le_bytes).collect();
    let cases: Vec<(&str, Vec<u8>, OpenOptions)> = vec![
        (
            "delimiter",
            plain.replace(',', "~").into(),
            options(
                None,
                LayoutOptions {
                    delimiter: Some(b'~'),
                    ..none()
                },
            ),
        ),
        (
            "time column by name",
            table("u,t,x\n", 48, |i| format!("{},{}", 5 * i, row(i))).into(),
            options(
                None,
                LayoutOptions {
                    time: column("T"),
                    ..none()
                },
            ),
        ),
        (
            "time column by number",
            table("u,when,x\n", 48, |i| format!("{},{}", 5 * i, row(i))).into(),
            options(
                None,
                LayoutOptions {
                    time: column("2"),
                    ..none()
                },
            ),
        ),
        (
            "time unit",
            table("t,x\n", 48, |i| {
                format!("{},{}", i as f64 * 15.625, prime(i))
            })
            .into(),
            options(
                None,
                LayoutOptions {
                    time_as: Some(TimeNotation::Milliseconds),
                    ..none()
                },
            ),
        ),
        (
            "count of samples",
            table("q,x\n", 48, |i| format!("{},{}", 100 + i, prime(i))).into(),
            options(
                Some(64.0),
                LayoutOptions {
                    time: column("q"),
                    time_as: Some(TimeNotation::Samples),
                    ..none()
                },
            ),
        ),
        (
            "first row",
            format!("9,8\n7,6\n{plain}").into(),
            options(
                None,
                LayoutOptions {
                    first_row: Some(4),
                    ..none()
                },
            ),
        ),
        (
            "comment",
            table("t,x\n", 48, |i| format!("{}\n!7,7", row(i))).into(),
            options(
                None,
                LayoutOptions {
                    comment: Some("!".into()),
                    ..none()
                },
            ),
        ),
        (
            "encoding",
            utf16,
            options(
                None,
                LayoutOptions {
                    encoding: Some(TextEncoding::Utf16Le),
                    ..none()
                },
            ),
        ),
        (
            "quotes",
            table("t,x,n\n", 48, |i| {
                format!("{},{}", row(i), if i == 9 { "\"" } else { "" })
            })
            .into(),
            options(
                None,
                LayoutOptions {
                    quoted: Some(false),
                    time: column("t"),
                    ..none()
                },
            ),
        ),
    ];
    for (name, bytes, options) in cases {
        let (rate_hz, _, samples) = opened(bytes, &options);
        assert!((rate_hz - 64.0).abs() < 1e-9, "{name}: {rate_hz}");
        assert_eq!(samples, primes(), "{name}");
    }
}

#[test]
fn decimal_sign_names_and_units() {
    let text = table("t;x\n", 48, |i| format!("{i};1.{i:03}"));
    let decimal = |sign| LayoutOptions {
        decimal: Some(sign),
        time: Some(TimeChoice::Nothing),
        ..LayoutOptions::default()
    };
    let (_, names, samples) = opened(&text, &options(Some(5.0), decimal(DecimalSign::Comma)));
    assert_eq!(names, ["t", "x"]);
    assert_eq!(samples[2], 1002.0);
    let (_, _, samples) = opened(&text, &options(Some(5.0), decimal(DecimalSign::Point)));
    assert_eq!(samples[2], 1.002);

    let text = table("a,b\nm,V\nfrom,here\n", 48, |i| {
        format!("{},{}", i as f64 / 64.0, prime(i))
    });
    let lines = LayoutOptions {
        names_line: Some(1),
        units_line: Some(2),
        time: column("1"),
        ..LayoutOptions::default()
    };
    let folder = Folder::new();
    let capture = Capture::open(&folder.write("x.csv", &text), &options(None, lines)).unwrap();
    let channel = &capture.spec().channels[0];
    assert_eq!(
        (channel.name.as_str(), channel.unit.as_deref()),
        ("b", Some("V"))
    );
}

#[test]
fn dates_are_read_in_the_order_that_is_said() {
    let text = table("time,x\n", 48, |i| {
        format!("05/07/2031 10:00:{i:02},{}", prime(i))
    });
    let folder = Folder::new();
    for (notation, words) in [
        (TimeNotation::DayFirst, "day-first date"),
        (TimeNotation::MonthFirst, "month-first date"),
    ] {
        let layout = LayoutOptions {
            time_as: Some(notation),
            ..LayoutOptions::default()
        };
        let capture = Capture::open(&folder.write("d.csv", &text), &options(None, layout)).unwrap();
        let read_as = capture.spec().read_as.join(", ");
        assert!(read_as.ends_with(words), "{read_as}");
        assert_eq!(notes(&capture), "", "what was said is no guess");
    }
}

#[test]
fn what_cannot_be_is_said() {
    let folder = Folder::new();
    let text = table("t,x\n", 48, |i| format!("{},{}", i as f64 / 64.0, prime(i)));
    let path = folder.write("x.csv", text);
    let none = LayoutOptions::default;
    for (layout, message) in [
        (
            LayoutOptions {
                time: column("z"),
                ..none()
            },
            "has no column \"z\", only 1 \"t\", 2 \"x\"",
        ),
        (
            LayoutOptions {
                first_row: Some(400),
                ..none()
            },
            "has no line 400",
        ),
        (
            LayoutOptions {
                names_line: Some(400),
                ..none()
            },
            "--names-line",
        ),
        (
            LayoutOptions {
                time: Some(TimeChoice::Nothing),
                ..none()
            },
            "--rate HZ",
        ),
        (
            LayoutOptions {
                time_as: Some(TimeNotation::Samples),
                ..none()
            },
            "--rate HZ",
        ),
    ] {
        let error = Capture::open(&path, &options(None, layout)).unwrap_err();
        let text = one_line(error);
        assert!(text.contains(message), "{text:?} lacks {message:?}");
    }
}
