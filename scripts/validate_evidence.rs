//! Evidence from time, on simulated recordings: what it claims and how often it is
//! right.
//!
//!     cargo run --release --example validate_evidence -- [FIRST_SEED [TRIALS [PART]]]
//!
//! Parts: `stamps`, `phase`, `reference`, `movement`; all without one. Tuning used
//! seeds below 100000; the default report starts at 100000.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use foldtrace::capture::StampedBlock;
use foldtrace::evidence::timestamps::{self, Target};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};
use rand_distr::{Distribution, StandardNormal};
use std::f64::consts::{SQRT_2, TAU};

fn normal(rng: &mut StdRng) -> f64 {
    StandardNormal.sample(rng)
}

fn main() {
    let mut args = std::env::args().skip(1);
    let first: u64 = args.next().map_or(100_000, |a| a.parse().expect("a seed"));
    let trials: u64 = args.next().map_or(200, |a| a.parse().expect("a count"));
    let part = args.next();
    let wanted = |name: &str| part.as_deref().is_none_or(|p| p == name);
    if wanted("stamps") {
        stamps(first, trials);
    }
}

/// A 100 Hz log of a minute with 5 % timing jitter, one unlisted tone.
fn stamps(first: u64, trials: u64) {
    println!("Uneven stamps: 100 Hz, 60 s, jitter 0.5 ms rms, a tone at 20 to 400 Hz");
    println!("snr_db  right  bound  claimed  claimed_right");
    for snr_db in [10.0, 15.0, 18.0, 20.0, 30.0, 50.0] {
        let (mut right, mut bound, mut claimed, mut claimed_right) = (0.0, 0.0, 0.0, 0.0);
        for seed in first..first + trials {
            let mut rng = StdRng::seed_from_u64(seed);
            let hz = rng.random_range(20.0..400.0);
            let (block, target) = log_of(&mut rng, hz, snr_db, 5e-4, 0.0, true);
            let evidence = timestamps::test(&block, &[target], 450.0).unwrap().unwrap();
            let rungs = &evidence.tones[0].rungs;
            let best = rungs
                .iter()
                .max_by(|a, b| a.ln_likelihood.total_cmp(&b.ln_likelihood))
                .unwrap();
            let is_right = (best.true_hz.0 - hz).abs() < 0.1;
            right += f64::from(is_right);
            let total: f64 = rungs.iter().map(|r| r.ln_likelihood.exp()).sum();
            if 1.0 / total > 0.95 {
                claimed += 1.0;
                claimed_right += f64::from(is_right);
            }
            let snr = 10f64.powf(snr_db / 10.0);
            // What the best test between the truth and its two neighbours could do,
            // were they independent: no method can do much better.
            let d = snr * (1.0 - (-(TAU * 100.0 * 5e-4).powi(2)).exp());
            bound += (1.0 - 0.5 * erfc((d / 2.0).sqrt() / SQRT_2)).powi(2);
        }
        let n = trials as f64;
        println!(
            "{snr_db:6}  {:.3}  {:.3}  {:7.3}  {:.3}",
            right / n,
            bound / n,
            claimed / n,
            claimed_right / f64::max(claimed, 1.0)
        );
    }
    for (what, jitter, step, honest) in [
        ("rounded to the period", 5e-4, 0.01, true),
        ("rounded to 1 ms, even samples", 0.0, 0.001, true),
        ("jitter of the stamps only", 5e-4, 0.0, false),
        (
            "jitter of the stamps only, rounded to 1 ms",
            5e-4,
            0.001,
            false,
        ),
        ("true jitter 0.5 ms, rounded to 1 ms", 5e-4, 0.001, true),
    ] {
        let (mut claims, mut wrong, mut right) = (0, 0, 0);
        for seed in first..first + trials {
            let mut rng = StdRng::seed_from_u64(seed);
            let hz = rng.random_range(20.0..400.0);
            let (block, target) = log_of(&mut rng, hz, 40.0, jitter, step, honest);
            let evidence = timestamps::test(&block, &[target], 450.0).unwrap().unwrap();
            let Some(tone) = evidence.tones.first() else {
                continue;
            };
            let total: f64 = tone.rungs.iter().map(|r| r.ln_likelihood.exp()).sum();
            if let Some(best) = tone
                .rungs
                .iter()
                .find(|r| r.ln_likelihood.exp() / total > 0.8)
            {
                claims += 1;
                if (best.true_hz.0 - hz).abs() < 0.1 {
                    right += 1;
                } else {
                    wrong += 1;
                }
            }
        }
        println!(
            "{what}, 40 dB: {claims} of {trials} claim a rung at 80 %, {right} right, {wrong} wrong"
        );
    }
}

/// The log, and the tone as a detector would have found it. `snr_db` is in a
/// resolution cell of the whole log. `honest`: samples are taken when stamped.
fn log_of(
    rng: &mut StdRng,
    hz: f64,
    snr_db: f64,
    jitter_s: f64,
    step_s: f64,
    honest: bool,
) -> (StampedBlock, Target) {
    let (rate, n) = (100.0, 6000);
    let amplitude = 2.0 * (10f64.powf(snr_db / 10.0) / n as f64).sqrt();
    let phase = rng.random_range(0.0..TAU);
    let start = rng.random_range(0.0..0.01);
    let mut block = StampedBlock {
        frames: (0..n as u64).collect(),
        times_s: Vec::new(),
        samples: vec![Vec::new()],
    };
    for i in 0..n {
        let even = start + i as f64 / rate;
        let stamped = even + jitter_s * normal(rng);
        let taken = if honest { stamped } else { even };
        let written = if step_s > 0.0 {
            (stamped / step_s).round() * step_s
        } else {
            stamped
        };
        block.times_s.push(written);
        let x = amplitude * (TAU * hz * taken + phase).cos() + normal(rng) + 3.0;
        block.samples[0].push(x as f32);
    }
    let origin = block.times_s[0];
    block.times_s.iter_mut().for_each(|t| *t -= origin);
    let cycles = hz / rate - (hz / rate).round();
    // Cramér–Rao bound, in cycles per sample
    let sd = 3f64.sqrt() / (TAU / 2.0 * n as f64 * 2.0) / 10f64.powf(snr_db / 20.0);
    let target = Target {
        tone: 0,
        channel: 0,
        cycles: (cycles.abs() + sd * normal(rng)).clamp(0.0, 0.5),
        cycles_u95: 1.96 * sd,
        wander_hz: 0.0,
    };
    (block, target)
}

fn erfc(x: f64) -> f64 {
    statrs::function::erf::erfc(x)
}
