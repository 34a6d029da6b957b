//! CSV time columns: notations, rounding, jitter, gaps, midnight.

use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};

use super::*;

/// Hours, minutes and seconds of a time of day in s.
fn clock(seconds: f64, digits: usize) -> String {
    let whole = seconds as u64;
    let width = if digits > 0 { digits + 3 } else { 2 };
    let rest = (whole % 60) as f64 + seconds.fract();
    format!(
        "{:02}:{:02}:{rest:0width$.digits$}",
        whole / 3600,
        whole / 60 % 60
    )
}

#[test]
fn written_times_give_the_rate() {
    let folder = Folder::new();
    let at = |i: usize| 43_200.0 + i as f64 / 64.0;
    let date = |prefix: &str, i: usize| format!("{prefix}{}", clock(at(i), 6));
    type Stamp<'a> = Box<dyn Fn(usize) -> String + 'a>;
    let cases: Vec<(&str, Stamp)> = vec![
        ("time", Box::new(|i| clock(at(i), 6))),
        ("Time of day", Box::new(|i| clock(at(i), 6))),
        ("elapsed", Box::new(|i| clock(200.0 * 3600.0 + at(i), 6))),
        (
            "t",
            Box::new(|i| format!("{:02}:{:09.6}", i / 64 / 60, i as f64 / 64.0 % 60.0)),
        ),
        ("timestamp", Box::new(|i| date("2031-05-07T", i) + "Z")),
        ("timestamp", Box::new(|i| date("2031-05-07 ", i) + "+02:00")),
        ("Zeitpunkt", Box::new(|i| date("07.05.2031 ", i))),
        ("when", Box::new(|i| date("20310507T", i))),
        (
            "time",
            Box::new(|i| format!("{:.6}", 1.9e9 + i as f64 / 64.0)),
        ),
        (
            "time",
            Box::new(|i| format!("{}", 1_900_000_000_000_000_u64 + 15_625 * i as u64)),
        ),
        (
            "t (min)",
            Box::new(|i| format!("{}", i as f64 / 64.0 / 60.0)),
        ),
        ("t [ns]", Box::new(|i| format!("{}", 15_625_000 * i))),
        ("", Box::new(|i| format!("{:e}", i as f64 / 64.0))),
    ];
    for (name, stamp) in cases {
        let text = table(&format!("{name},x\n"), 200, |i| {
            format!("{},{}", stamp(i), prime(i))
        });
        let path = folder.write("t.csv", &text);
        let case = format!("{name:?} {}", stamp(1));
        let capture = open(&path).unwrap_or_else(|e| panic!("{case}: {e}"));
        let rate_hz = capture.spec().rate_hz;
        assert!((rate_hz - 64.0).abs() < 1e-6, "{case}: {rate_hz}");
        assert_eq!(capture.spec().frames, 200, "{case}: {}", notes(&capture));
    }
}

#[test]
fn days_and_months_are_told_apart_or_the_choice_is_noted() {
    let folder = Folder::new();
    let rows = |day: &dyn Fn(usize) -> String| {
        table("time,x\n", 48, |i| {
            format!("{} {:02}:00:00,{}", day(i / 24), i % 24, prime(i))
        })
    };
    let hourly = |text: &str| {
        let capture = open(&folder.write("d.csv", text)).unwrap();
        assert!(
            (capture.spec().rate_hz * 3600.0 - 1.0).abs() < 1e-9,
            "{}",
            notes(&capture)
        );
        assert_eq!(capture.spec().frames, 48);
        notes(&capture)
    };
    assert_eq!(hourly(&rows(&|d| format!("{}/5/2031", 13 + d))), "");
    assert_eq!(hourly(&rows(&|d| format!("5/{}/2031", 13 + d))), "");
    assert_eq!(hourly(&rows(&|d| format!("{}.5.2031", 7 + d))), "");
    assert_eq!(hourly(&rows(&|d| format!("2031-05-{:02}", 7 + d))), "");
    let text = table("time,x\n", 20, |i| {
        format!("7/5/2031 10:00:{i:02},{}", prime(i))
    });
    let capture = open(&folder.write("one_day.csv", text)).unwrap();
    assert_eq!(
        notes(&capture),
        "dates were read day first, not month first"
    );
}

#[test]
fn ambiguous_dates_take_the_order_in_which_time_runs_evenly() {
    let folder = Folder::new();
    // 7 and 8 May: read the other way, a month lies between them.
    let month_first = table("time,x\n", 48, |i| {
        format!("5/{}/2031 {:02}:00:00,{}", 7 + i / 24, i % 24, prime(i))
    });
    let capture = open(&folder.write("m.csv", month_first)).unwrap();
    assert_eq!(capture.spec().frames, 48);
    assert!(
        notes(&capture).contains("month first, not day first"),
        "{}",
        notes(&capture)
    );
}

#[test]
fn a_clock_passes_midnight() {
    let folder = Folder::new();
    let start = 86_400.0 - 5.0;
    let text = table("Date,Time,x\n", 2000, |i| {
        let time = start + i as f64 / 100.0;
        let (day, time) = if time < 86_400.0 {
            (7, time)
        } else {
            (8, time - 86_400.0)
        };
        format!("2031-05-{day:02},{},{}", clock(time, 3), prime(i))
    });
    let capture = open(&folder.write("midnight.csv", text)).unwrap();
    assert_eq!(capture.spec().frames, 2000);
    assert_eq!(capture.spec().rate_hz, 100.0);
    assert_eq!(notes(&capture), "column \"Date\" holds times: left out");
    assert_eq!(capture.spec().channels.len(), 1);
}

#[test]
fn rounded_stamps_keep_every_row_and_the_rate() {
    let folder = Folder::new();
    for (rate, step) in [
        (8000.0, 1e-3),
        (44_100.0, 1e-3),
        (44_100.0, 1e-2),
        (1100.0, 1e-3),
        (1000.0, 1e-3),
        (900.0, 1e-3),
        (640.0, 1e-3),
        (333.3, 1e-3),
        (3.0, 1.0),
        (400.0, 1.0),
        (1.7, 1.0),
        (10_000.0, 1.0),
    ] {
        for (how, phase) in [
            ("down", 0.0),
            ("to the nearest", 0.5),
            ("down from within", 0.77),
        ] {
            let rows = if rate * step > 1000.0 { 30_000 } else { 8000 };
            let text = table("t,x\n", rows, |i| {
                let time = ((i as f64 / rate / step + phase + 1e-9).floor()) * step;
                format!("{time:.6},{}", prime(i))
            });
            let capture = open(&folder.write("r.csv", text)).unwrap();
            let case = format!("{rate} Hz rounded {how} to {step} s: {}", notes(&capture));
            assert_eq!(capture.spec().frames, rows as u64, "{case}");
            // At worst both ends are off by a step; half is left as a margin.
            let allowed = rate * step / (rows as f64 / rate);
            let error = (capture.spec().rate_hz - rate).abs();
            assert!(error <= allowed, "{case}: off by {error} of {allowed}");
        }
    }
}

#[test]
fn jitter_makes_no_gaps_and_losses_are_found_in_it() {
    const SEED: u64 = 4711;
    let folder = Folder::new();
    for (case, (jitter, loss)) in [
        (0.0, 0.0),
        (0.1, 0.0),
        (0.5, 0.0),
        (0.9, 0.0),
        (0.0, 0.1),
        (0.1, 0.02),
        (0.4, 0.01),
    ]
    .into_iter()
    .enumerate()
    {
        let mut random = StdRng::seed_from_u64(SEED + case as u64);
        let rate = 250.0;
        let mut frame = 0u64;
        let mut kept = Vec::new();
        let text = table("t,x\n", 20_000, |_| String::new());
        let mut text = text.lines().next().unwrap().to_owned() + "\n";
        for _ in 0..20_000 {
            while frame > 5 && random.random::<f64>() < loss {
                frame += 1;
            }
            let late = jitter * (random.random::<f64>() - 0.5);
            text += &format!(
                "{:.7},{}\n",
                (frame as f64 + late) / rate,
                prime(kept.len())
            );
            kept.push(frame);
            frame += 1;
        }
        let capture = open(&folder.write("j.csv", text)).unwrap();
        let case = format!(
            "seed {SEED}, jitter {jitter}, loss {loss}: {}",
            notes(&capture)
        );
        assert_eq!(capture.spec().frames, frame, "{case}");
        let samples = read(&capture, 4096);
        let found: Vec<u64> = (0..frame)
            .filter(|&i| !samples[0][i as usize].is_nan())
            .collect();
        assert_eq!(found, kept, "{case}");
        // Three standard errors of a least-squares slope (even jitter: width/√12).
        let n = kept.len() as f64;
        let allowed = 3.0 * rate * jitter / n.powf(1.5) + 1e-9 * rate;
        assert!((capture.spec().rate_hz - rate).abs() <= allowed, "{case}");
        assert_eq!(jitter > 0.3, notes(&capture).contains("scatter"), "{case}");
    }
}

#[test]
fn rows_stamped_in_bursts_have_no_gaps() {
    let folder = Folder::new();
    let text = table("t,x\n", 20_000, |i| {
        let burst = i / 10;
        format!(
            "{:.6},{}",
            burst as f64 / 10.0 + (i % 10) as f64 * 1e-4,
            prime(i)
        )
    });
    let capture = open(&folder.write("b.csv", text)).unwrap();
    assert_eq!(capture.spec().frames, 20_000, "{}", notes(&capture));
    assert!(
        (capture.spec().rate_hz / 100.0 - 1.0).abs() < 1e-4,
        "{}",
        capture.spec().rate_hz
    );
    assert!(notes(&capture).contains("evenly spaced"));
}

#[test]
fn one_bad_stamp_is_no_gap() {
    let folder = Folder::new();
    for bad in ["0.0", "", "x"] {
        let text = table("t,x\n", 500, |i| match i {
            300 => format!("{bad},{}", prime(i)),
            _ => format!("{:.3},{}", i as f64 / 100.0, prime(i)),
        });
        let capture = open(&folder.write("bad.csv", text)).unwrap();
        assert_eq!(capture.spec().frames, 500, "{bad:?}: {}", notes(&capture));
        assert_eq!(capture.spec().rate_hz, 100.0, "{bad:?}");
        assert!(
            notes(&capture).starts_with("1 row "),
            "{bad:?}: {}",
            notes(&capture)
        );
    }
    let text = table("t,x\n", 100, |i| match i % 3 {
        0 => format!("late,{i}.5"),
        _ => format!("{:.2},{i}.5", i as f64 / 100.0),
    });
    let message = refusal(&folder.write("bad.csv", text));
    assert!(
        message.starts_with("line 2, column 1: not a time"),
        "{message}"
    );
}

#[test]
fn a_second_time_and_a_row_count_are_no_channels() {
    let folder = Folder::new();
    let text = table("no,timestamp,elapsed_ms,x\n", 100, |i| {
        format!(
            "{i},2031-05-07 10:00:{:02},{},{}",
            i / 10,
            i * 100,
            prime(i)
        )
    });
    let capture = open(&folder.write("two.csv", text)).unwrap();
    assert_eq!(capture.spec().rate_hz, 10.0);
    assert_eq!(capture.spec().channels.len(), 1);
    assert_eq!(
        notes(&capture),
        "column \"timestamp\" is a second time: left out; column \"no\" only counts the rows: left out"
    );
}
