//! Several recordings together, the next test, and the way forward.

use crate::cli::foldtrace;
use foldtrace::fold::{Chain, fold};
use foldtrace::plan::{What, plan, rates};
use foldtrace::predict;
use foldtrace::reconcile::{Capture, Reconciled, reconcile};
use foldtrace::sources::Site;
use foldtrace::suspects::{Scene, infer};
use foldtrace::tones::Tone;
use foldtrace::units::{SeenHz, TrueHz};
use std::collections::BTreeMap;

/// Sixty seconds' worth of tones `(seen Hz, SNR dB)`, good to 0.002 Hz.
fn tones(list: &[(f64, f64)]) -> Vec<Tone> {
    let mut sorted = list.to_vec();
    sorted.sort_by(|a, b| a.0.total_cmp(&b.0));
    sorted
        .iter()
        .enumerate()
        .map(|(i, &(hz, snr_db))| Tone {
            number: i + 1,
            seen_hz: SeenHz(hz),
            seen_hz_u95: 0.002,
            level_dbfs: snr_db - 100.0,
            snr_db,
            from_s: 0.0,
            to_s: 60.0,
            wander_hz: 0.0,
            linewidth_hz: 0.0,
            track: Vec::new(),
            track_step_s: 0.0,
            duty: 1.0,
            channels: Vec::new(),
        })
        .collect()
}

/// Reconciles recordings `(rate, lines)`.
fn together(site: &str, recordings: &[(f64, Vec<(f64, f64)>)]) -> Reconciled {
    let site = Site::from_toml(site).unwrap();
    let read: Vec<(Chain, Vec<Tone>)> = recordings
        .iter()
        .map(|(rate, lines)| (Chain::single(*rate).unwrap(), tones(lines)))
        .collect();
    let scenes: Vec<Scene> = read
        .iter()
        .map(|(chain, tones)| Scene {
            tones,
            site: &site,
            chain,
            duration_s: 60.0,
            full_scale_known: true,
            evidence: None,
        })
        .collect();
    let found: Vec<_> = scenes.iter().map(infer).collect();
    let captures: Vec<Capture> = scenes
        .iter()
        .zip(&found)
        .map(|(scene, inference)| Capture {
            scene: *scene,
            inference,
        })
        .collect();
    reconcile(&captures, &rates::usual(recordings[0].0))
}

/// Lines `(true Hz, SNR)` as one rate shows them with a clock off by `ppm`.
fn recorded(rate: f64, ppm: f64, lines: &[(f64, f64)]) -> (f64, Vec<(f64, f64)>) {
    let seen = lines
        .iter()
        .map(|&(f, snr)| (fold(TrueHz(f / (1.0 + 1e-6 * ppm)), rate).0, snr))
        .collect();
    (rate, seen)
}

const BARE: &str = "[recorder]\nclock_ppm = 50\n";
const EXACT: &str = "[recorder]\nclock_ppm = 0.001\nbandwidth_hz = 3000\n";

/// The Chinese remainder theorem for real lines, seen by magnitude: with rates 7·20
/// and 9·20 Hz and remainders known to a small part of the common factor, what is
/// left open are the solutions of f ≡ ±r₁ (mod 140), f ≡ ±r₂ (mod 180) below the
/// limit, and no more (the robust theorem of Wang and Xia, 2010: errors below a
/// quarter of the common factor do no harm; from memory).
#[test]
fn remainders_leave_the_solutions_of_the_congruences() {
    let rates = [140.0, 180.0];
    for f in [35.0, 333.0, 1001.0, 1234.0, 2222.0, 2719.0] {
        let lines = [(f, 40.0)];
        let result = together(
            EXACT,
            &[
                recorded(rates[0], 0.0, &lines),
                recorded(rates[1], 0.0, &lines),
            ],
        );
        assert_eq!(result.tones.len(), 1, "{f}");
        let tone = &result.tones[0];
        assert_eq!(tone.sightings.len(), 2, "{f}");
        let solutions: Vec<f64> = (0..=3000)
            .map(f64::from)
            .filter(|x| {
                rates
                    .iter()
                    .all(|&r| (fold(TrueHz(*x), r).0 - fold(TrueHz(f), r).0).abs() < 1e-9)
            })
            .collect();
        assert!(solutions.contains(&f));
        let mut stated: Vec<f64> = tone
            .rows
            .iter()
            .filter(|r| r.suspect == "unlisted" && r.probability > 0.0005)
            .filter_map(|r| Some(r.true_hz?.0))
            .collect();
        stated.sort_by(f64::total_cmp);
        for s in &stated {
            // The rest is what would be there were the two not one tone.
            let known = solutions.iter().any(|x| (x - s).abs() < 0.05);
            let p = tone
                .rows
                .iter()
                .find(|r| r.true_hz.is_some_and(|t| t.0 == *s))
                .unwrap();
            assert!(known || p.probability < 0.1, "{f}: {s} in {solutions:?}");
        }
        assert!(
            stated.iter().any(|s| (f - s).abs() < 0.05),
            "{f} not in {stated:?}"
        );
        // A line that would be real where both show it needs no other explanation;
        // elsewhere no solution is passed over.
        let real = rates.iter().all(|r| f < r / 2.0);
        for x in solutions.iter().filter(|_| !real) {
            let direct = rates.iter().any(|r| *x < r / 2.0);
            let found = stated.iter().any(|s| (x - s).abs() < 0.05);
            let taken = solutions.iter().any(|y| rates.iter().all(|r| *y < r / 2.0));
            assert!(found || direct || taken, "{f}: {x} not in {stated:?}");
        }
    }
}

/// One rate leaves the ladder, two leave one place, to within the clock.
#[test]
fn an_unlisted_tone_is_found_from_the_rates_alone() {
    let f = 30_123.4;
    let lines = [(f, 40.0), (611.0, 40.0), (2321.7, 35.0)];
    let result = together(
        BARE,
        &[
            recorded(8000.0, 22.0, &lines),
            recorded(11_025.0, -31.0, &lines),
        ],
    );
    let tone = result
        .tones
        .iter()
        .find(|t| t.places().first().is_some_and(|p| (p.0 - f).abs() < 5.0))
        .unwrap();
    assert_eq!(tone.sightings.len(), 2);
    let (hz, u95, probability) = tone.places()[0];
    assert!(probability > 0.9, "{tone:?}");
    assert!((hz - f).abs() < 1.5 * u95, "{hz} ± {u95}");
    // The interval is that of two clocks of 50 ppm averaged.
    assert!(u95 < 50e-6 * f, "{u95}");
    let row = tone.rows.first().unwrap();
    assert_eq!(row.suspect, "unlisted");
    assert!(result.belonging[0].same_place > 0.95);
}

/// What is seen in one recording only stays as open as it was.
#[test]
fn a_lonely_tone_stays_on_its_ladder() {
    let common = [(611.0, 40.0), (2321.7, 35.0), (1710.3, 30.0)];
    let mut first = common.to_vec();
    first.push((3000.5, 20.0));
    let result = together(
        BARE,
        &[
            recorded(8000.0, 0.0, &first),
            recorded(11_025.0, 10.0, &common),
        ],
    );
    let lonely = result
        .tones
        .iter()
        .find(|t| t.sightings.len() == 1)
        .unwrap();
    assert!(lonely.rows.len() > 5);
    assert!(lonely.extra_rate.is_some());
    let all: f64 = lonely.rows.iter().map(|r| r.probability).sum();
    assert!((all - 1.0).abs() < 0.01, "{all}");
}

/// Recordings of two places are told from two of one, whatever mains they share.
#[test]
fn mixed_up_recordings_are_recognised() {
    let site =
        "[recorder]\nclock_ppm = 50\n[[source]]\nname = \"mains\"\nkind = \"mains\"\nhz = 50\n";
    let mains = [
        (50.003, 40.0),
        (100.006, 45.0),
        (150.009, 38.0),
        (300.018, 30.0),
    ];
    let here = [
        (611.7, 40.0),
        (2321.7, 35.0),
        (917.55, 33.0),
        (22_345.0, 30.0),
        (3511.0, 31.0),
    ];
    let there = [
        (1234.1, 40.0),
        (745.9, 35.0),
        (2917.05, 33.0),
        (31_345.0, 30.0),
        (3099.0, 31.0),
    ];
    let with = |lines: &[(f64, f64)]| [&mains[..], lines].concat();
    let one = together(
        site,
        &[
            recorded(8000.0, 5.0, &with(&here)),
            recorded(11_025.0, -9.0, &with(&here)),
        ],
    );
    assert!(one.belonging[0].same_place > 0.95, "{:?}", one.belonging);
    assert!(one.belonging[0].shared > 4.5, "{:?}", one.belonging);
    assert_eq!(one.belonging[0].mains, 4);
    let two = together(
        site,
        &[
            recorded(8000.0, 5.0, &with(&here)),
            recorded(11_025.0, -9.0, &with(&there)),
        ],
    );
    assert!(two.belonging[0].same_place < 0.1, "{:?}", two.belonging);
    assert!(two.tones.iter().all(|t| t.sightings.len() == 1));
}

/// A comb that keeps its samples when the rate changes is the recorder's own.
#[test]
fn a_comb_that_keeps_its_samples_is_the_recorders() {
    let real = [(611.7, 40.0), (2321.7, 35.0), (917.55, 33.0)];
    let comb = |rate: f64| -> Vec<(f64, f64)> {
        (1..=4)
            .map(|k| (f64::from(k) * rate / 777.0, 30.0))
            .collect()
    };
    let recording = |rate: f64, ppm: f64| {
        let (rate, mut seen) = recorded(rate, ppm, &real);
        seen.extend(comb(rate));
        (rate, seen)
    };
    let result = together(BARE, &[recording(8000.0, 7.0), recording(11_025.0, -12.0)]);
    for k in 1..=4 {
        let at = f64::from(k) * 8000.0 / 777.0;
        let tone = result
            .tones
            .iter()
            .find(|t| {
                t.sightings[0].capture == 0
                    && t.sightings.len() == 2
                    && t.rows[0].true_hz.is_some_and(|h| (h.0 - at).abs() < 0.1)
            })
            .unwrap_or_else(|| panic!("tooth {k}: {:#?}", result.tones));
        assert_eq!(tone.rows[0].suspect, "recorder", "{tone:?}");
    }
}

fn rows(arguments: &[&str]) -> Vec<BTreeMap<String, String>> {
    let output = foldtrace(arguments);
    assert_eq!(output.status.code(), Some(0), "{output:?}");
    csv::Reader::from_reader(output.stdout.as_slice())
        .deserialize()
        .map(Result::unwrap)
        .collect()
}

const SKID: [&str; 4] = [
    "sample-data/recordings/skid-8000.wav",
    "sample-data/recordings/skid-11025.wav",
    "--site",
    "sample-data/orrowmere.toml",
];

/// The demo recordings: every tone is in both, and where it truly is.
#[test]
fn the_demo_recordings_are_reconciled() {
    let list = rows(&[&["reconcile"], &SKID[..], &["--suspects", "-"]].concat());
    assert_eq!(list[0].len(), 21);
    let mut truth: Vec<(f64, f64)> = Vec::new();
    let mut reader = csv::Reader::from_path("sample-data/truth.csv").unwrap();
    for r in reader.deserialize::<BTreeMap<String, String>>() {
        let r = r.unwrap();
        if r["recording"] == "skid-8000.wav" {
            truth.push((r["seen_hz"].parse().unwrap(), r["true_hz"].parse().unwrap()));
        }
    }
    for (seen, true_hz) in truth {
        let top = list
            .iter()
            .find(|r| {
                r["rank"] == "1" && (r["seen_hz"].parse::<f64>().unwrap() - seen).abs() < 0.02
            })
            .unwrap_or_else(|| panic!("{seen}"));
        assert!(top["recording"].contains(" + "), "{top:?}");
        let error = (top["true_hz"].parse::<f64>().unwrap() - true_hz).abs();
        assert!(
            error < 1.5 * top["true_hz_u95"].parse::<f64>().unwrap() + 0.05,
            "{top:?} {true_hz}"
        );
    }
    // The one that nothing listed made was open in each recording alone.
    let stray = list
        .iter()
        .find(|r| r["rank"] == "1" && r["seen_hz"].starts_with("1733.1"))
        .unwrap();
    assert_eq!(stray["suspect"], "unlisted");
    assert_eq!(stray["verdict"], "direct");
    for r in &list {
        assert!(!(r["suspect"] == "unlisted" && r["true_hz"].is_empty()) || r["zone"].is_empty());
    }
    for n in list.iter().map(|r| &r["tone"]) {
        let sum: f64 = list
            .iter()
            .filter(|r| &r["tone"] == n)
            .map(|r| r["probability"].parse::<f64>().unwrap())
            .sum();
        assert!(sum <= 1.0 && sum > 0.9, "{n}: {sum}");
    }
}

#[test]
fn reconcile_needs_two_recordings() {
    let output = foldtrace(&["reconcile", SKID[0]]);
    assert_eq!(output.status.code(), Some(2));
    let output = foldtrace(&["reconcile", SKID[0], "absent.wav"]);
    assert_eq!(output.status.code(), Some(1));
    let output = foldtrace(&["reconcile", SKID[0], SKID[1], "--rates", "1,2,3"]);
    assert_eq!(output.status.code(), Some(2));
    let output = foldtrace(&[&["reconcile"], &SKID[..], &["--json", SKID[1]]].concat());
    assert_eq!(output.status.code(), Some(2));
}

/// A source seen either where it shows or folded: the test that moves one and not the
/// other is proposed, and says where each would be seen.
#[test]
fn a_plan_says_what_will_be_seen() {
    let site = Site::from_toml(
        "[recorder]\nclock_ppm = 50\naperture_s = 0.0\nbandwidth_hz = 30000\n[[source]]\nname = \"converter\"\nkind = \"clock\"\nhz = 25240\ntolerance = \"3 %\"\norders = 1\n",
    )
    .unwrap();
    let chain = Chain::single(8000.0).unwrap();
    let tones = tones(&[(1240.0, 30.0)]);
    let scene = Scene {
        tones: &tones,
        site: &site,
        chain: &chain,
        duration_s: 60.0,
        full_scale_known: true,
        evidence: None,
    };
    let inference = infer(&scene);
    let planned = plan(&scene, &inference, &[11_025.0, 16_000.0]);
    assert_eq!(planned.open.len(), 1);
    let rate = planned
        .tests
        .iter()
        .find(|t| t.what == What::Rate(11_025.0))
        .unwrap();
    let told = &rate.tones[0];
    let under = |name: &str| {
        told.outcomes
            .iter()
            .find(|o| o.under.iter().any(|u| u.0.contains(name)))
            .unwrap_or_else(|| panic!("{name} in {told:?}"))
            .shows
    };
    // 25 240 Hz at 11 025 Hz: 25 240 − 2·11 025 = 3190 Hz.
    assert!(
        matches!(under("converter"), foldtrace::plan::Shows::At(hz) if (hz - 3190.0).abs() < 0.1),
        "{told:?}"
    );
    assert_eq!(under("real there"), foldtrace::plan::Shows::Same);
    assert!(
        told.prospect.bits > 0.5 && told.prospect.settles > 0.8,
        "{told:?}"
    );
    // Twice the rate leaves both 1240 Hz and what folds there as it was: 24 000 + 1240
    // is 16 000 + 9240, seen at 6760 Hz, but less is told apart than at 11 025 Hz.
    assert!(planned.tests[0].bits >= rate.bits - 1e-9);
    let off = planned
        .tests
        .iter()
        .find(|t| matches!(&t.what, What::Off { source } if source == "converter"))
        .unwrap();
    assert!(off.bits < rate.bits);
}

#[test]
fn triage_ends_with_the_next_test() {
    let output = foldtrace(&["triage", SKID[0], SKID[2], SKID[3]]);
    let text = String::from_utf8(output.stdout).unwrap();
    let next: Vec<&str> = text
        .lines()
        .filter(|l| l.starts_with("Best next test:"))
        .collect();
    assert_eq!(next.len(), 1, "{text}");
    assert!(next[0].contains("tone 26 (1733.13 Hz)"), "{next:?}");
}

#[test]
fn plans_and_predictions_are_printed() {
    let output = foldtrace(&["plan", SKID[0], SKID[2], SKID[3], "--rates", "11025,16000"]);
    let text = String::from_utf8(output.stdout).unwrap();
    assert!(
        text.contains("record again at 11025 Hz") && text.contains("Caution:"),
        "{text}"
    );
    let json = foldtrace(&["plan", SKID[0], SKID[2], SKID[3], "--json", "-"]);
    let json: serde_json::Value = serde_json::from_slice(&json.stdout).unwrap();
    assert!(!json["tests"].as_array().unwrap().is_empty());
    let output = foldtrace(&[
        "predict",
        SKID[2],
        SKID[3],
        "--rate",
        "8000",
        "--keep-clear",
        "20-60",
    ]);
    let text = String::from_utf8(output.stdout).unwrap();
    assert!(
        text.contains("circulation drive 1c-2o") && text.contains("keeps the sources apart best"),
        "{text}"
    );
    for bad in [
        vec!["predict", "--rate", "0"],
        vec!["predict", "--rate", "8000", "--keep-clear", "60-20"],
        vec!["predict", "--rate", "8000", "--keep-clear", "5000-6000"],
        vec!["predict", "--rate", "8000.5", "--wav", "x.wav"],
        vec!["predict", "--rate", "8000", "--seconds", "5"],
        vec!["predict", "--rate", "8000", "--wav", "-"],
        vec!["plan", SKID[0], "--rates", "8000,x"],
    ] {
        let output = foldtrace(&bad);
        assert_eq!(output.status.code(), Some(2), "{bad:?} {output:?}");
        assert_eq!(
            String::from_utf8(output.stderr).unwrap().lines().count(),
            1,
            "{bad:?}"
        );
    }
}

/// A synthesised recording shows each line where the table says, and the same seed
/// gives the same bytes.
#[test]
fn a_synthesised_recording_shows_what_was_predicted() {
    let folder = tempfile::tempdir().unwrap();
    let site = folder.path().join("site.toml");
    std::fs::write(
        &site,
        "[recorder]\nbandwidth_hz = 50000\naperture_s = 0.0\nantialias = { family = \"butterworth\", order = 1, corner_hz = 20000 }\n[[source]]\nname = \"pump\"\nkind = \"shaft\"\nhz = 24.3\norders = 3\n[[source]]\nname = \"charger\"\nkind = \"clock\"\nhz = 27210\norders = 1\n",
    )
    .unwrap();
    let make = |name: &str, ppm: &str, seed: &str| {
        let wav = folder.path().join(name);
        let output = foldtrace(&[
            "predict",
            "--site",
            site.to_str().unwrap(),
            "--rate",
            "8000",
            "--wav",
            wav.to_str().unwrap(),
            "--seconds",
            "20",
            "--clock-error",
            ppm,
            "--seed",
            seed,
        ]);
        assert_eq!(output.status.code(), Some(0), "{output:?}");
        wav
    };
    let wav = make("a.wav", "40", "3");
    assert_eq!(
        std::fs::read(&wav).unwrap(),
        std::fs::read(make("b.wav", "40", "3")).unwrap()
    );
    assert_ne!(
        std::fs::read(&wav).unwrap(),
        std::fs::read(make("c.wav", "40", "4")).unwrap()
    );
    let list = rows(&[
        "triage",
        wav.to_str().unwrap(),
        "--site",
        site.to_str().unwrap(),
        "--suspects",
        "-",
    ]);
    let seen: Vec<f64> = list
        .iter()
        .filter(|r| r["rank"] == "1")
        .map(|r| r["seen_hz"].parse().unwrap())
        .collect();
    for f in [24.3, 48.6, 72.9, 27_210.0] {
        let expected = fold(TrueHz(f / (1.0 + 40e-6)), 8000.0).0;
        assert!(
            seen.iter().any(|s| (s - expected).abs() < 0.02),
            "{f}: {expected} in {seen:?}"
        );
    }
    // The input is spared.
    let before = std::fs::read(&site).unwrap();
    let output = foldtrace(&[
        "predict",
        "--site",
        site.to_str().unwrap(),
        "--rate",
        "8000",
        "--wav",
        site.to_str().unwrap(),
    ]);
    assert_eq!(output.status.code(), Some(2));
    assert_eq!(std::fs::read(&site).unwrap(), before);
}

/// Chances within bands over the whole seen axis add up to one, and agree with draws.
#[test]
fn chances_of_a_folded_line_add_up() {
    let site = Site::from_toml(
        "[[source]]\nname = \"a\"\nkind = \"tone\"\nhz = 2310\ntolerance = \"20 %\"\n[[source]]\nname = \"b\"\nkind = \"tone\"\nhz = 130\ntolerance = \"60 Hz\"\n[[source]]\nname = \"c\"\nkind = \"tone\"\nhz = 995\ntolerance = \"3 Hz\"\n",
    )
    .unwrap();
    let chain = Chain::single(1000.0).unwrap();
    let p = predict::predict(&site, &chain, Some((20.0, 60.0)), 0.5);
    for line in &p.lines {
        let total: f64 = (0..50)
            .map(|i| line.chance_within(f64::from(i) * 10.0, f64::from(i + 1) * 10.0, 1000.0))
            .sum();
        assert!((total - 1.0).abs() < 1e-6, "{line:?}: {total}");
        // Quantiles of the normal, folded by hand.
        let count = 20_000;
        let inside = (0..count)
            .filter(|i| {
                let q = (f64::from(*i) + 0.5) / f64::from(count);
                let z = quantile(q);
                let seen = fold(TrueHz(line.true_hz + z * line.sd_hz), 1000.0).0;
                (20.0..60.0).contains(&seen)
            })
            .count();
        let expected = inside as f64 / f64::from(count);
        assert!(
            (line.in_band - expected).abs() < 0.002,
            "{line:?}: {expected}"
        );
    }
}

/// Quantile of the standard normal by bisection of its distribution function.
fn quantile(q: f64) -> f64 {
    use statrs::function::erf::erfc;
    let (mut low, mut high) = (-9.0, 9.0);
    for _ in 0..60 {
        let middle: f64 = 0.5 * (low + high);
        if 0.5 * erfc(-middle / std::f64::consts::SQRT_2) < q {
            low = middle;
        } else {
            high = middle;
        }
    }
    0.5 * (low + high)
}
