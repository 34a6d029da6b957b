//! Ties between tones and to references, through the program's own detector.

use foldtrace::evidence::reference::{Reference, ReferenceError, ReferenceFile};
use foldtrace::evidence::{Anchor, Basis, Evidence, Tie, gather};
use foldtrace::fold::Chain;
use foldtrace::spectrum::samples::InMemory;
use foldtrace::tones::{Search, Tone, find};
use rand::{SeedableRng, rngs::StdRng};
use rand_distr::{Distribution, StandardNormal};
use std::f64::consts::TAU;
use std::fmt::Write;

const RATE_HZ: f64 = 331.0;
const SECONDS: f64 = 200.0;

/// Turns of a 50 Hz line that sways by some 15 mHz in a way that never repeats here.
fn turns(t: f64) -> f64 {
    let sway = |period: f64, phase: f64| 0.02 * period / TAU * (TAU * t / period + phase).sin();
    50.0 * t + sway(61.0, 0.3) + sway(23.7, 1.9) + 0.5 * sway(11.3, 4.0)
}

/// The line, its 17th harmonic folded to 850 − 3·331 = −143 Hz, a steady tone.
fn recording() -> InMemory {
    let mut rng = StdRng::seed_from_u64(8);
    let n = (RATE_HZ * SECONDS) as usize;
    let samples = (0..n)
        .map(|i| {
            let t = i as f64 / RATE_HZ;
            let noise: f64 = StandardNormal.sample(&mut rng);
            let wave = |turns: f64| (TAU * turns.fract()).cos();
            (5.0 * wave(turns(t)) + wave(17.0 * turns(t) + 0.2) + 0.3 * wave(87.3 * t) + noise)
                as f32
        })
        .collect();
    InMemory {
        rate_hz: RATE_HZ,
        channels: vec![samples],
    }
}

fn evidence(references: &[Reference]) -> (Vec<Tone>, Evidence) {
    let recording = recording();
    let tones = find(&recording, &Search::default(), &|_, _| ())
        .unwrap()
        .tones;
    let chain = Chain::single(RATE_HZ).unwrap();
    let evidence = gather(&recording, &tones, &chain, references, None).unwrap();
    (tones, evidence)
}

fn near(tones: &[Tone], hz: f64) -> usize {
    tones
        .iter()
        .position(|t| (t.seen_hz.0 - hz).abs() < 1.0)
        .unwrap()
}

#[test]
fn a_folded_harmonic_is_locked_and_a_steady_tone_is_not() {
    let (tones, evidence) = evidence(&[]);
    let (base, harmonic, steady) = (near(&tones, 50.0), near(&tones, 143.0), near(&tones, 87.3));
    let lock = evidence
        .ties_of(harmonic)
        .into_iter()
        .find(|t| t.to == Anchor::Tone(base) && t.by == Basis::Phase)
        .unwrap();
    assert_eq!(lock.multiplier, -17.0);
    assert!(lock.ln_ratio > 20.0, "{lock:?}");
    assert_eq!(lock.ln_likelihood(-17.0), Some(lock.ln_ratio));
    assert_eq!(lock.ln_likelihood(17.0), None);
    // Steady beside what sways: no tie is believed.
    for tie in evidence.ties_of(steady) {
        assert!(tie.ln_ratio < 3.0, "{tie:?}");
    }
    assert!(evidence.stamps.is_none() && evidence.sampling.is_none());
    assert_eq!(evidence.ln_rung(harmonic, 850.0), 0.0);
    assert!(
        serde_json::to_string(&evidence)
            .unwrap()
            .contains("\"multiplier\":-17.0")
    );
}

#[test]
fn a_reference_names_the_order() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("grid.csv");
    let mut text = "time_s,grid [Hz]\n".to_owned();
    for second in 0..230 {
        // Its clock shows 1000 s when the recording starts.
        let t = f64::from(second) - 15.0;
        let _ = writeln!(
            text,
            "{},{:.6}",
            1000.0 + t,
            turns(t + 0.5) - turns(t - 0.5)
        );
    }
    std::fs::write(&path, text).unwrap();
    let file = ReferenceFile::parse(&format!("mains={}", path.display())).unwrap();
    let reference = Reference::read(&file).unwrap();
    let (tones, evidence) = evidence(&[reference]);
    let beside = &evidence.references[0];
    // The reference's first value is 15 s before the recording.
    assert!((beside.offset_s + 15.0).abs() < 1.0, "{beside:?}");
    assert!((beside.mean_hz - 50.0).abs() < 2e-3);
    let tied = |tone: usize| -> &Tie {
        let mains = Anchor::Reference("mains".into());
        evidence
            .ties
            .iter()
            .find(|t| t.tone == tone && t.to == mains)
            .unwrap()
    };
    let harmonic = tied(near(&tones, 143.0));
    assert!(
        (harmonic.multiplier + 17.0).abs() < 3.0 * harmonic.sd
            && harmonic.sd < 0.5
            && harmonic.ln_ratio > 5.0,
        "{harmonic:?}"
    );
    assert!(tied(near(&tones, 50.0)).ln_ratio > 5.0);
    assert!(tied(near(&tones, 87.3)).ln_ratio < 3.0);
}

#[test]
fn pulses_and_rpm_are_references_and_other_tables_are_not() {
    let folder = tempfile::tempdir().unwrap();
    let read = |text: &str| {
        let path = folder.path().join("reference.csv");
        std::fs::write(&path, text).unwrap();
        Reference::read(&ReferenceFile {
            source: "pump motor".into(),
            path,
        })
    };
    let mut pulses = "pulse_s\n".to_owned();
    let mut rpm = "time,rpm\n".to_owned();
    let mut other = "time,temperature\n".to_owned();
    for i in 0..100 {
        let _ = writeln!(pulses, "{:.4}", 3.0 + 0.04 * f64::from(i));
        let _ = writeln!(rpm, "{i},1500");
        let _ = writeln!(other, "{i},20.5");
    }
    for text in [&pulses, &rpm] {
        let reference = read(text).unwrap();
        assert!(
            reference
                .series
                .hz
                .iter()
                .all(|hz| (hz - 25.0).abs() < 1e-6),
            "{reference:?}"
        );
    }
    assert_eq!(read(&pulses).unwrap().origin_s, 3.0);
    let error = read(&other).unwrap_err();
    assert!(
        matches!(error, ReferenceError::NoFrequency { .. }),
        "{error}"
    );
    assert!(error.to_string().contains("temperature"));
    assert!(ReferenceFile::parse("grid.csv").is_err() && ReferenceFile::parse("=x").is_err());
}
