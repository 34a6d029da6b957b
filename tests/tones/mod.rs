//! Tones found in simulated recordings: one row each, none from noise, and an
//! interval that holds. The full figures come from `scripts/validate_tones.rs`;
//! these are the ones that fit a test run. Seeds are fixed.

mod tracks;

use foldtrace::spectrum::plan::Plan;
use foldtrace::spectrum::samples::InMemory;
use foldtrace::tones::{Search, Tone, ToneSet, find};
use rand::{RngExt, SeedableRng, rngs::StdRng};
use rand_distr::{Distribution, StandardNormal};
use std::f64::consts::TAU;

fn noise(rng: &mut StdRng, n: usize) -> Vec<f32> {
    (0..n).map(|_| StandardNormal.sample(rng)).collect()
}

fn add(x: &mut [f32], rate: f64, hz: f64, amplitude: f64, phase: f64) {
    for (i, v) in x.iter_mut().enumerate() {
        *v += (amplitude * (TAU * hz * i as f64 / rate + phase).cos()) as f32;
    }
}

fn run(rate_hz: f64, channels: Vec<Vec<f32>>) -> ToneSet {
    let recording = InMemory { rate_hz, channels };
    find(&recording, &Search::default(), &|_, _| ()).unwrap()
}

fn near(set: &ToneSet, hz: f64, within: f64) -> &Tone {
    let found: Vec<&Tone> = set
        .tones
        .iter()
        .filter(|t| (t.seen_hz.0 - hz).abs() < within)
        .collect();
    assert_eq!(found.len(), 1, "tones near {hz}: {:?}", set.tones);
    found[0]
}

#[test]
fn intervals_hold_at_the_bound() {
    let mut rng = StdRng::seed_from_u64(101);
    let (rate, n) = (1000.0, 30_000);
    let (mut inside, mut squares, mut count) = (0, 0.0, 0.0);
    for _ in 0..20 {
        let mut x = noise(&mut rng, n);
        let tones: Vec<(f64, f64)> = (0..5)
            .map(|i| {
                let hz = 40.0 + 90.0 * f64::from(i) + 40.0 * rng.random::<f64>();
                let amplitude = 0.2 * 10f64.powf(2.0 * rng.random::<f64>());
                add(&mut x, rate, hz, amplitude, TAU * rng.random::<f64>());
                (hz, amplitude)
            })
            .collect();
        let set = run(rate, vec![x]);
        assert_eq!(set.tones.len(), 5);
        for (hz, amplitude) in tones {
            let tone = near(&set, hz, 0.1);
            let error = tone.seen_hz.0 - hz;
            // var(ω) ≥ 24σ²/(A²N(N²−1)) for a real tone (Rife & Boorstyn 1974)
            let n = n as f64;
            let bound = (24.0 / (amplitude * amplitude * n * (n * n - 1.0))).sqrt() * rate / TAU;
            squares += (error / bound).powi(2);
            inside += usize::from(error.abs() <= tone.seen_hz_u95);
            count += 1.0;
        }
    }
    // 100 tones: rms known to 7 %, coverage to 2.2 %; four standard errors of each
    let rms = (squares / count).sqrt();
    assert!((0.72..1.28).contains(&rms), "rms error over bound {rms}");
    assert!(inside >= 87, "{inside} of {count} inside");
}

#[test]
fn noise_makes_no_tones() {
    let mut rng = StdRng::seed_from_u64(102);
    let mut found = 0;
    for trial in 0..150 {
        let mut x = noise(&mut rng, 1_024 + 150 * trial);
        if trial % 3 == 1 {
            // brown
            let mut sum = 0.0;
            for v in &mut x {
                sum = 0.999 * sum + *v;
                *v = sum;
            }
        } else if trial % 3 == 2 {
            // a burst and a level change
            let n = x.len();
            x[n / 5..n / 4].iter_mut().for_each(|v| *v *= 30.0);
            x[n / 2..].iter_mut().for_each(|v| *v *= 3.0);
        }
        found += run(1.0, vec![x]).tones.len();
    }
    // 1.5 expected; 7 or more has a chance of 1e-3
    assert!(found <= 6, "{found} tones in 150 recordings of noise");
}

#[test]
fn a_long_recording_is_measured_whole() {
    let mut rng = StdRng::seed_from_u64(103);
    let (rate, n) = (8000.0, 2_500_000);
    let mut x = noise(&mut rng, n);
    let tones = [
        (50.013, 0.05),
        (1_234.567_8, 0.02),
        (1234.9, 0.03),
        (3999.2, 0.05),
    ];
    for (hz, amplitude) in tones {
        add(&mut x, rate, hz, amplitude, TAU * rng.random::<f64>());
    }
    let set = run(rate, vec![x]);
    assert!(matches!(set.plan, Plan::Segments { .. }));
    assert_eq!(set.tones.len(), tones.len(), "{:?}", set.tones);
    for (hz, amplitude) in tones {
        let tone = near(&set, hz, 0.01);
        let error = (tone.seen_hz.0 - hz).abs();
        assert!(error < 2.0 * tone.seen_hz_u95, "{hz}: {error} {tone:?}");
        let n = n as f64;
        let bound = (24.0 / (amplitude * amplitude * n * n * n)).sqrt() * rate / TAU;
        assert!(
            tone.seen_hz_u95 < 1.96 * 1.3 * bound,
            "{hz}: {tone:?} bound {bound}"
        );
        let level = 20.0 * f64::log10(amplitude);
        assert!((tone.level_dbfs - level).abs() < 0.6, "{hz}: {tone:?}");
    }
}

#[test]
fn a_wandering_family_has_one_row_a_line() {
    let mut rng = StdRng::seed_from_u64(104);
    let (rate, n) = (4000.0, 240_000);
    let mut x = noise(&mut rng, n);
    let keep = f64::exp(-1.0 / 40_000.0);
    let (mut phase, mut u, mut mean) = (0.0, 0.0, 0.0);
    let phases: Vec<f64> = (0..n)
        .map(|_| {
            let step: f64 = StandardNormal.sample(&mut rng);
            u = keep * u + (1.0 - keep * keep).sqrt() * step;
            let hz = 48.7 * (1.0 + 1e-3 * u);
            mean += hz / n as f64;
            phase += hz / rate;
            phase
        })
        .collect();
    for order in 1..=20 {
        for (v, p) in x.iter_mut().zip(&phases) {
            *v += (0.5 * (TAU * f64::from(order) * p).cos()) as f32;
        }
    }
    let set = run(rate, vec![x]);
    assert_eq!(set.tones.len(), 20);
    for order in 1..=20 {
        let hz = f64::from(order) * mean;
        near(&set, hz, 4e-4 * hz);
    }
}

#[test]
fn one_tone_in_two_channels_is_one_row() {
    let mut rng = StdRng::seed_from_u64(105);
    let mut left = noise(&mut rng, 40_000);
    let mut right = noise(&mut rng, 40_000);
    add(&mut left, 8000.0, 440.3, 0.5, 0.3);
    add(&mut right, 8000.0, 440.3, 0.2, 1.3);
    add(&mut right, 8000.0, 951.2, 0.3, 0.0);
    let set = run(8000.0, vec![left, right]);
    assert_eq!(set.tones.len(), 2);
    let both = near(&set, 440.3, 0.05);
    let channels: Vec<usize> = both.channels.iter().map(|c| c.channel).collect();
    assert_eq!(channels, [0, 1]);
    // amplitude error of a tone: 1/√(2·SNR per cell), here under 0.2 dB
    assert!((both.channels[1].level_dbfs - 20.0 * 0.2f64.log10()).abs() < 0.6);
}

#[test]
fn missing_samples_are_bridged_and_counted() {
    let mut rng = StdRng::seed_from_u64(106);
    let mut x = noise(&mut rng, 40_000);
    add(&mut x, 1000.0, 61.7, 1.0, 0.0);
    for i in (0..40_000).step_by(97) {
        x[i] = f32::NAN;
    }
    x[20_000..20_400].fill(f32::NAN);
    let set = run(1000.0, vec![x]);
    assert_eq!(set.tones.len(), 1);
    near(&set, 61.7, 0.01);
    assert!(set.missing[0] > 800, "{:?}", set.missing);
}

#[test]
fn faults_are_reported_and_make_no_tones() {
    let mut rng = StdRng::seed_from_u64(111);
    let n = 60_000;
    // 16-bit steps, so that repeats mean something
    let quantised = |x: &[f32]| -> Vec<f32> { x.iter().map(|v| (v * 300.0).round()).collect() };
    let mut x: Vec<f32> = noise(&mut rng, n);
    for v in &mut x {
        // an offset, which every dropout interrupts
        *v += 8.0;
    }
    add(&mut x, 1000.0, 61.7, 0.5, 0.0);
    let mut dropping = quantised(&x);
    for start in (1_500..n).step_by(1_000) {
        dropping[start..start + 25].fill(0.0);
    }
    let set = run(1000.0, vec![dropping]);
    assert_eq!(set.tones.len(), 1, "{:?}", set.tones);
    near(&set, 61.7, 0.01);
    let dropped = 25 * (n - 1_500).div_ceil(1_000) as u64;
    assert!(
        set.condition[0].stuck.abs_diff(dropped) < dropped / 20,
        "{dropped}: {:?}",
        set.condition[0].stuck
    );
    let clipped: Vec<f32> = quantised(&x).iter().map(|v| v.min(2_700.0)).collect();
    let set = run(1000.0, vec![clipped, vec![5.0; n]]);
    assert!(set.condition[0].clipped > 500 && set.condition[0].stuck == 0);
    assert!(set.condition[1].constant && !set.condition[0].constant);
    assert!(
        set.tones
            .iter()
            .all(|t| t.channels.iter().all(|c| c.channel == 0))
    );
}

#[test]
fn channels_find_together_what_none_finds_alone() {
    let mut rng = StdRng::seed_from_u64(112);
    let n = 30_000;
    let (mut found, mut alone) = (0, 0);
    for _ in 0..10 {
        let channels: Vec<Vec<f32>> = (0..3)
            .map(|_| {
                let mut x = noise(&mut rng, n);
                // 10.5 dB in a cell: 1.5 dB below one channel's threshold
                let phase = TAU * rng.random::<f64>();
                add(
                    &mut x,
                    1000.0,
                    123.45,
                    (4.0 * 11.2 / n as f64).sqrt(),
                    phase,
                );
                x
            })
            .collect();
        alone += run(1000.0, vec![channels[0].clone()]).tones.len();
        let set = run(1000.0, channels);
        found += usize::from(set.tones.len() == 1 && set.tones[0].channels.len() >= 2);
    }
    assert!(found >= 7 && alone <= 4, "together {found}, alone {alone}");
    // The same noise in every channel adds nothing.
    let mut x = noise(&mut rng, n);
    add(&mut x, 1000.0, 123.45, (4.0 * 7.0 / n as f64).sqrt(), 0.0);
    assert!(run(1000.0, vec![x; 3]).tones.is_empty());
}

#[test]
fn a_tone_that_comes_and_goes_is_timed() {
    let mut rng = StdRng::seed_from_u64(107);
    let (rate, n) = (1000.0, 100_000);
    let mut x = noise(&mut rng, n);
    for (i, v) in x.iter_mut().enumerate().take(60_000).skip(25_000) {
        *v += (0.5 * (TAU * 123.4 * i as f64 / rate).cos()) as f32;
    }
    let set = run(rate, vec![x]);
    assert_eq!(set.tones.len(), 1, "{:?}", set.tones);
    let tone = near(&set, 123.4, 0.01);
    assert!((tone.from_s - 25.0).abs() < 4.0, "{tone:?}");
    assert!((tone.to_s - 60.0).abs() < 4.0, "{tone:?}");
    assert!(
        (tone.level_dbfs - 20.0 * 0.5f64.log10()).abs() < 1.0,
        "{tone:?}"
    );
}

#[test]
fn fewer_periods_than_tell_a_tone_from_drift_make_none() {
    let mut rng = StdRng::seed_from_u64(109);
    let n = 20_000;
    for periods in [0.4, 1.3, 2.2, 3.1] {
        let mut x = noise(&mut rng, n);
        add(&mut x, 1.0, periods / n as f64, 30.0, 0.7);
        let set = run(1.0, vec![x]);
        assert!(set.tones.is_empty(), "{periods} periods: {:?}", set.tones);
    }
}

#[test]
fn rounding_makes_no_tones() {
    // Whole numbers of period 13: lines at the six multiples of rate/13, and
    // nothing but single-precision rounding between them.
    let x: Vec<f32> = (0..2_000).map(|i| ((i * 5) % 13) as f32).collect();
    let set = run(13.0, vec![x]);
    assert_eq!(set.tones.len(), 6, "{:?}", set.tones);
    for (tone, k) in set.tones.iter().zip(1..) {
        assert!((tone.seen_hz.0 - f64::from(k)).abs() < 1e-3, "{tone:?}");
    }
}

#[test]
fn next_to_either_end_intervals_are_honest() {
    let mut rng = StdRng::seed_from_u64(108);
    let (rate, n) = (1000.0, 20_000);
    let cell = rate / n as f64;
    let mut inside = 0;
    let mut count = 0;
    for trial in 0..40 {
        let mut x = noise(&mut rng, n);
        let off = (5.0 + 3.0 * rng.random::<f64>()) * cell;
        let hz = if trial % 2 == 0 {
            off
        } else {
            rate / 2.0 - off
        };
        add(&mut x, rate, hz, 0.3, TAU * rng.random::<f64>());
        let set = run(rate, vec![x]);
        if let Some(t) = set.tones.iter().find(|t| (t.seen_hz.0 - hz).abs() < cell) {
            count += 1;
            inside += usize::from((t.seen_hz.0 - hz).abs() <= t.seen_hz_u95);
        }
    }
    assert!(count >= 36, "found {count}");
    assert!(inside * 100 >= count * 85, "{inside} of {count} inside");
}

/// A machine that runs ten seconds of every thirty: one row, whether it picks up its
/// phase where it left it or starts anew; a beat of two tones stays two, a modulated
/// tone keeps its sidebands.
#[test]
fn a_tone_that_cycles_is_one_row_with_its_duty() {
    let mut rng = StdRng::seed_from_u64(110);
    let (rate, n) = (500.0, 150_000);
    for (period, on_share, anew, amplitude) in [
        (30.0, 1.0 / 3.0, false, 0.5),
        (30.0, 1.0 / 3.0, true, 2.0),
        (11.0, 0.6, false, 0.5),
    ] {
        let mut x = noise(&mut rng, n);
        let mut phase = 0.0;
        let mut last = f64::INFINITY;
        let (mut on, mut first, mut end) = (0, n, 0);
        for (i, v) in x.iter_mut().enumerate() {
            let t = (i as f64 / rate + 5.0) % period;
            if t < last && anew {
                phase = TAU * rng.random::<f64>();
            }
            last = t;
            if t < on_share * period {
                *v += (amplitude * (TAU * 61.3 * i as f64 / rate + phase).cos()) as f32;
                on += 1;
                first = first.min(i);
                end = i + 1;
            }
        }
        let duty = f64::from(on) / (end - first) as f64;
        let set = run(rate, vec![x]);
        let what = format!(
            "period {period}, on {on_share}, anew {anew}: {:?}",
            set.tones
        );
        assert_eq!(set.tones.len(), 1, "{what}");
        let tone = &set.tones[0];
        // each stretch is known to its own resolution, all of them to a good deal less
        assert!((tone.seen_hz.0 - 61.3).abs() < 0.02, "{what}");
        assert!((tone.duty - duty).abs() < 0.06, "duty {duty}, {what}");
        assert!(
            (tone.level_dbfs - 20.0 * f64::log10(amplitude)).abs() < 0.6,
            "{what}"
        );
        assert!(
            (tone.from_s - first as f64 / rate).abs() < 0.13 * period,
            "{what}"
        );
        assert!(
            (tone.to_s - end as f64 / rate).abs() < 0.13 * period,
            "{what}"
        );
    }
    let mut beat = noise(&mut rng, n);
    add(&mut beat, rate, 61.30, 0.5, 0.0);
    add(&mut beat, rate, 61.35, 0.5, 1.0);
    let mut modulated = noise(&mut rng, n);
    for (hz, amplitude) in [(61.3, 0.5), (61.1, 0.2), (61.5, 0.2)] {
        add(&mut modulated, rate, hz, amplitude, 0.3);
    }
    assert_eq!(run(rate, vec![beat]).tones.len(), 2);
    let set = run(rate, vec![modulated]);
    assert_eq!(set.tones.len(), 3);
    assert!(set.tones.iter().all(|t| t.duty == 1.0));
}
