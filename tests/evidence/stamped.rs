//! Time stamps: from the file to the rung.

use foldtrace::capture::{Capture, OpenOptions, StampedBlock};
use foldtrace::evidence::timestamps::{self, Target};
use rand::{SeedableRng, rngs::StdRng};
use rand_distr::{Distribution, StandardNormal};
use std::f64::consts::TAU;
use std::fmt::Write;

fn write(text: &str) -> (tempfile::TempDir, Capture) {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("log.csv");
    std::fs::write(&path, text).unwrap();
    let capture = Capture::open(&path, &OpenOptions::default()).unwrap();
    (folder, capture)
}

/// A 100 Hz log with 5 % jitter and a tone at 237.4 Hz, 27 dB over the noise in a cell;
/// stamps are written with `digits` decimals.
fn log(digits: usize) -> String {
    let mut rng = StdRng::seed_from_u64(21);
    let mut normal = || -> f64 { StandardNormal.sample(&mut rng) };
    let mut text = "time,value\n".to_owned();
    for i in 0..2000 {
        let t = 0.01 * f64::from(i) + 0.002 + 5e-4 * normal();
        let x = 20.0 + (TAU * 237.4 * t).cos() + normal();
        let _ = writeln!(text, "{t:.digits$},{x:.4}");
    }
    text
}

/// Where the detector would see it: 237.4 = 2·100 + 37.4.
const TARGET: Target = Target {
    tone: 0,
    channel: 0,
    cycles: 0.374,
    cycles_u95: 1e-4,
    wander_hz: 0.0,
};

#[test]
fn rows_come_with_their_own_times() {
    let mut text = "time,a\n".to_owned();
    for i in 0..40 {
        // Rows 10 to 14 are lost, row 20 has no stamp.
        if (10..15).contains(&i) {
            continue;
        }
        let time = if i == 20 {
            String::new()
        } else {
            format!("{:.3}", 5.0 + 0.01 * f64::from(i))
        };
        let _ = writeln!(text, "{time},{i}");
    }
    let (_folder, capture) = write(&text);
    let mut pass = capture.stamped_blocks(7).unwrap().unwrap();
    let (mut block, mut rows) = (StampedBlock::default(), Vec::new());
    while pass.next_into(&mut block).unwrap() {
        for (i, (&frame, &time)) in block.frames.iter().zip(&block.times_s).enumerate() {
            rows.push((frame, time, block.samples[0][i]));
        }
    }
    assert_eq!(rows.len(), 34);
    for (frame, time, value) in rows {
        assert!((time - 0.01 * frame as f64).abs() < 1e-9, "{frame} {time}");
        assert_eq!(value, frame as f32);
    }
    assert_eq!(pass.origin_s(), Some(5.0));
}

#[test]
fn a_file_without_times_has_no_stamped_rows() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("log.csv");
    std::fs::write(&path, "value\n".to_owned() + &"1\n2\n".repeat(20)).unwrap();
    let options = OpenOptions {
        rate_hz: Some(10.0),
        ..OpenOptions::default()
    };
    let capture = Capture::open(&path, &options).unwrap();
    assert!(capture.stamped_blocks(7).unwrap().is_none());
    assert!(
        timestamps::test(&capture, &[TARGET], 400.0)
            .unwrap()
            .is_none()
    );
}

#[test]
fn jitter_tells_the_rung() {
    let (_folder, capture) = write(&log(6));
    let evidence = timestamps::test(&capture, &[TARGET], 450.0)
        .unwrap()
        .unwrap();
    let tone = &evidence.tones[0];
    let best = tone.rungs.iter().find(|r| r.ln_likelihood == 0.0).unwrap();
    assert!((best.true_hz.0 - 237.4).abs() < 0.05, "{best:?}");
    assert_eq!(best.zone, 5);
    assert!(!best.sense.is_inverted());
    // Nine rungs up to 450 Hz, the others at odds of 20 and more against them.
    assert_eq!(tone.rungs.len(), 9);
    let others = tone.rungs.iter().filter(|r| r.ln_likelihood < -3.0).count();
    assert_eq!(others, 8, "{:?}", tone.rungs);
    assert!((evidence.jitter_s / 5e-4 - 1.0).abs() < 0.1);
    assert!(
        evidence.statement.contains("jitter by"),
        "{}",
        evidence.statement
    );
}

#[test]
fn stamps_rounded_to_the_period_claim_nothing() {
    let (_folder, capture) = write(&log(2));
    let evidence = timestamps::test(&capture, &[TARGET], 450.0)
        .unwrap()
        .unwrap();
    assert!(evidence.tones.is_empty());
    assert_eq!(evidence.jitter_s, 0.0);
    assert!(
        evidence.statement.contains("nothing"),
        "{}",
        evidence.statement
    );
}
