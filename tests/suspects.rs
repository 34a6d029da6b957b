//! Suspects: what a tone may and may not be blamed on, and whether probabilities
//! mean what they say over simulated scenes that tuning never saw.

#[path = "../scripts/scenes/mod.rs"]
mod scenes;
#[path = "../scripts/scenes/score.rs"]
mod score;

use foldtrace::fold::Chain;
use foldtrace::sources::Site;
use foldtrace::suspects::{Cause, Finding, Inference, Scene, infer};
use foldtrace::tones::Tone;
use foldtrace::units::{SeenHz, TrueHz};

/// A minute's worth of tones `(Hz, ± Hz, SNR dB, wander Hz)`.
fn tones(list: &[(f64, f64, f64, f64)]) -> Vec<Tone> {
    let mut sorted = list.to_vec();
    sorted.sort_by(|a, b| a.0.total_cmp(&b.0));
    sorted
        .iter()
        .enumerate()
        .map(|(i, &(hz, u95, snr_db, wander_hz))| Tone {
            number: i + 1,
            seen_hz: SeenHz(hz),
            seen_hz_u95: u95,
            level_dbfs: snr_db - 100.0,
            snr_db,
            from_s: 0.0,
            to_s: 60.0,
            duty: 1.0,
            wander_hz,
            ..Tone::default()
        })
        .collect()
}

fn run(site: &str, rate_hz: f64, tones: &[Tone]) -> Inference {
    let site = Site::from_toml(site).unwrap();
    let chain = Chain::single(rate_hz).unwrap();
    infer(&Scene {
        tones,
        site: &site,
        chain: &chain,
        duration_s: 60.0,
        full_scale_known: true,
        evidence: None,
    })
}

fn share(finding: &Finding, wanted: &str) -> f64 {
    finding
        .suspects
        .iter()
        .filter(|s| matches!(&s.cause, Cause::Source { name, .. } if name == wanted))
        .map(|s| s.probability)
        .sum()
}

fn total(finding: &Finding) -> f64 {
    finding.unlisted_direct
        + finding.unlisted_folded
        + finding.suspects.iter().map(|s| s.probability).sum::<f64>()
}

const LOOSE: &str = r#"
[[source]]
name = "oscillator"
kind = "clock"
hz = 62500.0
tolerance = "3 %"
orders = 10
"#;

/// The case that an ordinary posterior gets wrong: it slides the oscillator onto
/// any lone tone and claims it with certainty.
#[test]
fn a_tone_may_not_vouch_for_itself() {
    for hz in [37.2, 123.4, 271.8, 444.4] {
        let inference = run(LOOSE, 1000.0, &tones(&[(hz, 0.001, 40.0, 0.0)]));
        let finding = &inference.findings[0];
        let p = share(finding, "oscillator");
        assert!(p < 0.35, "{hz}: {p}");
        for s in &finding.suspects {
            assert!(s.coincidence > 1.0, "{hz}: {s:?}");
        }
    }
}

/// ... but ten tones that one frequency explains are its own.
#[test]
fn many_tones_of_one_loose_source_are_its_own() {
    let chain = Chain::single(1000.0).unwrap();
    let lines: Vec<(f64, f64, f64, f64)> = (1..=8)
        .map(|k| {
            let f = 62_831.37 * f64::from(k);
            (chain.see(TrueHz(f)).seen.0, 0.001, 50.0, 0.0)
        })
        .collect();
    let inference = run(LOOSE, 1000.0, &tones(&lines));
    for finding in &inference.findings {
        assert!(share(finding, "oscillator") > 0.5, "{finding:?}");
        assert!(finding.folded_probability > 0.5, "{finding:?}");
    }
}

/// A family that should show many lines and shows one is doubted.
#[test]
fn missing_lines_count() {
    let site = "[[source]]\nname = \"pump\"\nkind = \"shaft\"\nhz = 25.0\ntolerance = \"2 %\"\norders = 10\n";
    let family: Vec<(f64, f64, f64, f64)> = (1..=8)
        .map(|k| (25.1 * f64::from(k), 0.002, 60.0, 0.0))
        .collect();
    let whole = run(site, 1000.0, &tones(&family));
    // The same fifth multiple alone, as strong.
    let alone = run(site, 1000.0, &tones(&family[4..5]));
    let (whole, alone) = (
        share(&whole.findings[4], "pump"),
        share(&alone.findings[0], "pump"),
    );
    assert!(whole > 0.99, "{whole}");
    assert!(alone < 0.7 * whole, "{alone}");
}

#[test]
fn a_wandering_tone_is_not_a_crystals() {
    let site = "[[source]]\nname = \"crystal\"\nkind = \"clock\"\nhz = 10250.0\ntolerance = \"100 ppm\"\norders = 3\n";
    let steady = run(site, 1000.0, &tones(&[(249.9, 0.01, 50.0, 0.0)]));
    let wandering = run(site, 1000.0, &tones(&[(249.9, 0.01, 50.0, 1.5)]));
    let (steady, wandering) = (
        share(&steady.findings[0], "crystal"),
        share(&wandering.findings[0], "crystal"),
    );
    assert!(steady > 0.8, "{steady}");
    assert!(wandering < 0.5 * steady, "{wandering} {steady}");
}

/// A shaft and the gear on it share one latent: the gear's lines tell the speed.
#[test]
fn sources_that_share_a_latent_are_solved_together() {
    let site = r#"
[[source]]
name = "shaft"
kind = "shaft"
hz = 24.0
tolerance = "2 %"
orders = 4

[[source]]
name = "gear"
kind = "gear"
on = "shaft"
teeth = 31
"#;
    let speed = 24.137;
    let mut list: Vec<(f64, f64, f64, f64)> = [29.0, 30.0, 31.0, 32.0, 33.0, 62.0]
        .iter()
        .map(|k| (speed * k, 0.002, 50.0, 0.0))
        .collect();
    list.push((speed, 0.05, 30.0, 0.0));
    let inference = run(site, 8000.0, &tones(&list));
    assert!(share(&inference.findings[0], "shaft") > 0.8);
    assert!(share(&inference.findings[3], "gear") > 0.95);
    let (_, hz, u95) = &inference.fits[0].latents[0];
    // The recorder's own clock is not known better than 100 ppm.
    assert!((hz - speed).abs() < 0.004 && *u95 < 0.02, "{hz} ± {u95}");
}

/// Two latents: carrier and output of a drive are found from its folded lines.
#[test]
fn a_drive_is_found_from_folded_sidebands() {
    let site = r#"
[[source]]
name = "drive"
kind = "drive"
carrier_hz = 4000.0
carrier_tolerance = "1 %"
output_hz = 43.0
output_tolerance = "5 %"
orders = 4
"#;
    let chain = Chain::single(1000.0).unwrap();
    let (c, o) = (4013.7, 42.31);
    let list: Vec<(f64, f64, f64, f64)> = [
        (0.0, 1.0),
        (1.0, 0.0),
        (1.0, 2.0),
        (1.0, -2.0),
        (2.0, 1.0),
        (2.0, -1.0),
        (3.0, 2.0),
    ]
    .iter()
    .map(|(m, n)| (chain.see(TrueHz(m * c + n * o)).seen.0, 0.002, 50.0, 0.0))
    .collect();
    let inference = run(site, 1000.0, &tones(&list));
    for finding in &inference.findings {
        assert!(share(finding, "drive") > 0.9, "{finding:?}");
    }
    let output = inference.fits[0]
        .latents
        .iter()
        .find(|l| l.0.contains("output"))
        .unwrap();
    assert!((output.1 - o).abs() < 0.01, "{output:?}");
}

/// A reference known to 5 ppm shows the recorder's error of 60 ppm.
#[test]
fn the_clock_error_is_recovered() {
    let site = r#"
[recorder]
clock_ppm = 100

[[source]]
name = "reference"
kind = "clock"
hz = 100000.0
tolerance = "5 ppm"
orders = 6
"#;
    let chain = Chain::single(48_000.0).unwrap();
    let list: Vec<(f64, f64, f64, f64)> = (1..=6)
        .map(|k| {
            let seen = chain.see_with_clock(TrueHz(100_000.0 * f64::from(k)), 60e-6);
            (seen.seen.0, 0.002, 50.0, 0.0)
        })
        .collect();
    let inference = run(site, 48_000.0, &tones(&list));
    let clock = inference.clock;
    assert!(
        (clock.ppm - 60.0).abs() < 5.0 && clock.ppm_u95 < 8.0,
        "{clock:?}"
    );
    assert_eq!(clock.latents, 1);
    // ... and true frequencies are given in true hertz.
    for finding in &inference.findings {
        let top = &finding.suspects[0];
        let k = (top.true_hz.0 / 100_000.0).round();
        assert!(
            (top.true_hz.0 - k * 100_000.0).abs() < 2.0 * top.true_hz_u95,
            "{top:?}"
        );
    }
}

/// A clipped 300 Hz tone at 1000 samples/s folds its third harmonic to 100 Hz.
#[test]
fn harmonics_of_a_clipping_tone_are_its_products() {
    let inference = run(
        LOOSE,
        1000.0,
        &tones(&[(300.137, 1e-4, 98.0, 0.0), (99.589, 3e-4, 60.0, 0.0)]),
    );
    let finding = &inference.findings[0];
    let top = &finding.suspects[0];
    assert_eq!(top.cause, Cause::Parents(vec![2]), "{finding:?}");
    assert_eq!(top.line, "3x");
    assert!(top.probability > 0.5, "{top:?}");
}

/// A seam at every 64th sample makes a comb that keeps to the rate.
#[test]
fn a_comb_at_a_fraction_of_the_rate_is_the_recorders() {
    let list: Vec<(f64, f64, f64, f64)> = (1..=7)
        .map(|k| (1000.0 / 64.0 * f64::from(k), 2e-4, 40.0, 0.0))
        .collect();
    let inference = run(LOOSE, 1000.0, &tones(&list));
    let recorder = inference
        .findings
        .iter()
        .filter(|f| {
            f.suspects
                .first()
                .is_some_and(|s| s.cause == Cause::Recorder)
        })
        .count();
    assert!(recorder >= 5, "{recorder} {:?}", inference.findings);
}

#[test]
fn shares_sum_to_one_and_stay_in_range() {
    for seed in 900..906 {
        let s = scenes::simulate(seed);
        let inference = infer(&Scene {
            tones: &s.tones,
            site: &s.site,
            chain: &s.chain,
            duration_s: s.duration_s,
            full_scale_known: true,
            evidence: None,
        });
        assert_eq!(inference.findings.len(), s.tones.len());
        for f in &inference.findings {
            let sum = total(f);
            assert!((sum - 1.0).abs() < 1e-3, "seed {seed}: {sum} {f:?}");
            assert!((0.0..=1.0).contains(&f.folded_probability), "{f:?}");
            for s in &f.suspects {
                assert!(
                    s.probability.is_finite() && s.true_hz.0 >= 0.0 && s.zone >= 1,
                    "{s:?}"
                );
            }
        }
    }
}

#[test]
fn nothing_to_do_is_done() {
    let none = run(LOOSE, 1000.0, &[]);
    assert!(none.findings.is_empty());
    assert_eq!(none.fits.len(), 1);
    assert!((none.fits[0].present_probability - 0.5).abs() < 0.3);
}

/// Figures on scenes that tuning never saw; the full report, split by kind, comes
/// from `scripts/calibration.rs`.
#[test]
fn probabilities_mean_what_they_say() {
    let mut scores = score::Scores::default();
    for seed in 500_000..500_030 {
        scores.add(seed, &scenes::simulate(seed), false);
    }
    let all = scores.overall();
    assert!(all.tones > 500, "{all:?}");
    assert!(all.top > 0.95 && all.zone > 0.9, "{all:?}");
    assert!(all.log_loss < 0.3, "{all:?}");
    assert!(all.ece_suspect < 0.04 && all.ece_folded < 0.04, "{all:?}");
    assert!(scores.folded().top > 0.9, "{:?}", scores.folded());
}
