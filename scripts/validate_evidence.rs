//! Evidence from time, on simulated recordings: what it claims and how often it is
//! right.
//!
//!     cargo run --release --example validate_evidence -- [FIRST_SEED [TRIALS [PART]]]
//!
//! Parts: `stamps`, `phase`, `reference`, `movement`; all without one. Tuning used
//! seeds below 100000; the default report starts at 100000.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use foldtrace::capture::StampedBlock;
use foldtrace::evidence::movement::{Series, compare};
use foldtrace::evidence::phase;
use foldtrace::evidence::reference::{Reference, beside};
use foldtrace::evidence::timestamps::{self, Target};
use foldtrace::fold::fold;
use foldtrace::spectrum::samples::InMemory;
use foldtrace::tones::{self, ChannelLevel, Search, Tone};
use foldtrace::units::{SeenHz, TrueHz};
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
    if wanted("phase") {
        phase(first, trials);
    }
    if wanted("reference") {
        reference(first, trials);
    }
    if wanted("movement") {
        movement(first, trials);
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

/// What stands beside the visible fundamental.
#[derive(Clone, Copy, PartialEq, Debug)]
enum Beside {
    /// Its harmonic.
    Harmonic,
    /// A steady tone near where one would fold.
    Steady,
    /// One that wanders as much, on its own.
    Independent,
    /// Noise only.
    Nothing,
}

/// Mains wandering 10 mHz rms over ten minutes, 70 dB over the noise in a cell of
/// the whole, and one other thing.
struct Mains {
    recording: InMemory,
    order: u32,
    seen_hz: f64,
    inverted: bool,
    /// rms wander of a harmonic of that order.
    spread_hz: f64,
    fundamental_hz: f64,
}

fn mains(rng: &mut StdRng, beside: Beside, snr_db: f64) -> Mains {
    let seconds = 600.0;
    let rate_hz: f64 = rng.random_range(330.0..600.0);
    let n = (seconds * rate_hz) as usize;
    let fundamental_hz = 50.0 + 0.02 * normal(rng);
    let order = rng.random_range(2..=60u32);
    let line = f64::from(order) * fundamental_hz;
    let memory_s = (rng.random_range(5f64.ln()..60f64.ln())).exp();
    let path = wander(rng, n, rate_hz, memory_s, 0.010);
    let other = wander(rng, n, rate_hz, memory_s, 0.010);
    let amplitude = |db: f64| 2.0 * (10f64.powf(db / 10.0) / n as f64).sqrt();
    let (a1, a2) = (amplitude(70.0), amplitude(snr_db));
    let (p1, p2) = (rng.random::<f64>(), rng.random::<f64>());
    // Off by less than its spread, so that frequency alone does not tell.
    let spread_hz = 0.010 * f64::from(order);
    let off = 0.5 * spread_hz * normal(rng);
    let samples = (0..n)
        .map(|i| {
            let t = i as f64 / rate_hz;
            let mut x = a1 * wave(fundamental_hz * t + path[i] + p1) + normal(rng);
            x += a2
                * match beside {
                    Beside::Harmonic => {
                        wave(f64::from(order) * (fundamental_hz * t + path[i]) + p2)
                    }
                    Beside::Steady => wave((line + off) * t + p2),
                    Beside::Independent => {
                        wave((line + off) * t + f64::from(order) * other[i] + p2)
                    }
                    Beside::Nothing => 0.0,
                };
            x as f32
        })
        .collect();
    let cycles = line / rate_hz;
    Mains {
        recording: InMemory {
            rate_hz,
            channels: vec![samples],
        },
        order,
        seen_hz: fold(TrueHz(line), rate_hz).0,
        inverted: cycles - cycles.floor() > 0.5,
        spread_hz,
        fundamental_hz,
    }
}

fn wave(turns: f64) -> f64 {
    (TAU * (turns - turns.round())).cos()
}

/// Turns of a smooth random wander of `rms_hz` that forgets itself in `memory_s`.
fn wander(rng: &mut StdRng, n: usize, rate_hz: f64, memory_s: f64, rms_hz: f64) -> Vec<f64> {
    // Two low passes in a row; made at a tenth of a memory, then followed linearly.
    let step = (memory_s * rate_hz / 20.0).max(1.0);
    let keep = (-1.0f64 / 20.0).exp();
    let (mut a, mut b) = (0.0, 0.0);
    let mut coarse = Vec::new();
    for i in 0..(n as f64 / step) as usize + 400 {
        a = keep * a + (1.0 - keep * keep).sqrt() * normal(rng);
        b = keep * b + (1.0 - keep) * a;
        if i >= 398 {
            coarse.push(b);
        }
    }
    let hz: Vec<f64> = (0..n)
        .map(|i| {
            let x = i as f64 / step;
            let j = x as usize;
            coarse[j] + (coarse[j + 1] - coarse[j]) * (x - j as f64)
        })
        .collect();
    let mean = hz.iter().sum::<f64>() / n as f64;
    let rms = (hz.iter().map(|h| (h - mean).powi(2)).sum::<f64>() / n as f64).sqrt();
    let mut turns = 0.0;
    hz.iter()
        .map(|h| {
            turns += rms_hz * (h - mean) / rms / rate_hz;
            turns
        })
        .collect()
}

fn tone(seen_hz: f64, u95: f64, wander_hz: f64, snr_db: f64) -> Tone {
    Tone {
        number: 0,
        seen_hz: SeenHz(seen_hz),
        seen_hz_u95: u95,
        level_dbfs: -30.0,
        snr_db,
        from_s: 0.0,
        to_s: 600.0,
        duty: 1.0,
        wander_hz,
        linewidth_hz: 0.0,
        track: Vec::new(),
        track_step_s: 0.0,
        channels: vec![ChannelLevel {
            channel: 0,
            level_dbfs: -30.0,
            snr_db,
        }],
    }
}

fn phase(first: u64, trials: u64) {
    println!("Phase lock: mains wandering 10 mHz rms, 10 min, order 2 to 60");
    println!(
        "beside       snr_db  locked  order_right  sense_right  wrong_order  (known place / found)"
    );
    for (beside, snr_db) in [
        (Beside::Harmonic, 15.0),
        (Beside::Harmonic, 30.0),
        (Beside::Harmonic, 50.0),
        (Beside::Steady, 15.0),
        (Beside::Steady, 40.0),
        (Beside::Independent, 15.0),
        (Beside::Independent, 30.0),
        (Beside::Independent, 50.0),
        (Beside::Nothing, 0.0),
    ] {
        let case = format!("{beside:?}{snr_db}");
        if std::env::var("EVIDENCE_CASE").is_ok_and(|c| c != case) {
            continue;
        }
        let mut counts = [[0u32; 4]; 2];
        let mut found_trials = 0;
        for seed in first..first + trials {
            let mut rng = StdRng::seed_from_u64(seed);
            let m = mains(&mut rng, beside, snr_db);
            // By a tone at its place, as if the detector had found it; and by what
            // the detector finds.
            let cell = 1.0 / 600.0;
            let spread = if beside == Beside::Steady {
                0.0
            } else {
                m.spread_hz
            };
            let known = vec![
                tone(m.fundamental_hz, 0.2 * cell, 0.010, 70.0),
                tone(m.seen_hz, 0.2 * spread + cell, spread, snr_db),
            ];
            // The detector takes longest: a quarter of the trials.
            let found = (seed % 4 == 0).then(|| {
                tones::find(&m.recording, &Search::default(), &|_, _| ())
                    .unwrap()
                    .tones
            });
            found_trials += u64::from(found.is_some());
            for (count, tones) in counts.iter_mut().zip([Some(&known), found.as_ref()]) {
                let Some(tones) = tones else { continue };
                let locks = phase::locks(&m.recording, tones).unwrap();
                if std::env::var_os("EVIDENCE_VERBOSE").is_some() {
                    println!(
                        "seed {seed} order {} seen {:.3} inverted {} tones {}",
                        m.order,
                        m.seen_hz,
                        m.inverted,
                        tones.len()
                    );
                    for l in &locks {
                        println!("    {l:?}");
                    }
                }
                let near = |l: &&phase::PhaseLock| {
                    (l.seen_hz.0 - m.seen_hz).abs() < 5.0 * m.spread_hz + 0.02
                        && l.ln_ratio > LOCKED
                };
                let best = locks
                    .iter()
                    .filter(near)
                    .max_by(|a, b| a.ln_ratio.total_cmp(&b.ln_ratio));
                if let Some(best) = best {
                    count[0] += 1;
                    count[1] += u32::from(best.order == m.order);
                    count[2] += u32::from((best.multiplier < 0.0) == m.inverted);
                }
                count[3] += locks
                    .iter()
                    .filter(|l| {
                        l.ln_ratio > LOCKED && !(beside == Beside::Harmonic && l.order == m.order)
                    })
                    .count() as u32;
            }
        }
        for (count, how) in counts.iter().zip(["known place", "found"]) {
            let of = if how == "found" { found_trials } else { trials };
            let share = |i: usize| f64::from(count[i]) / of as f64;
            println!(
                "{:12} {snr_db:5}   {:.4}  {:.4}  {:.4}  {:.4}  {how}",
                format!("{beside:?}"),
                share(0),
                share(1),
                share(2),
                share(3)
            );
        }
    }
}

/// ln ratio from which a lock is called one: odds of a thousand.
const LOCKED: f64 = 6.9;

/// A motor with a tachometer log: ramping by 2 %, or hunting with an unknown offset of
/// the clocks.
fn reference(first: u64, trials: u64) {
    println!("Reference: a motor of 24.5 Hz, 120 s at about 500 Hz, a log of one value a second");
    for (what, ramp, hunting, offset) in [
        ("ramp of 2 %, common clock", 0.02, 0.0, 0.0),
        (
            "hunting by 0.2 % rms, clock off by 40 s at most",
            0.0,
            0.002,
            40.0,
        ),
    ] {
        let (mut lines, mut tracked, mut named, mut signs, mut wrong) = (0, 0, 0, 0, 0);
        let (mut offsets, mut off_squares, mut aligned) = (0.0, 0.0, 0);
        for seed in first..first + trials {
            let mut rng = StdRng::seed_from_u64(seed);
            let rate_hz: f64 = rng.random_range(450.0..550.0);
            let n = (120.0 * rate_hz) as usize;
            let lead = 60.0;
            let all = n + (2.0 * lead * rate_hz) as usize;
            let path = wander(&mut rng, all, rate_hz, 8.0, 24.5 * hunting + 1e-9);
            let skip = (lead * rate_hz) as usize;
            // Turns of the shaft at time t of the recording, from 60 s before.
            let shaft = |i: usize| {
                let t = (i as f64 - skip as f64) / rate_hz;
                24.5 * (t + ramp * t * t / 240.0) + path[i]
            };
            let orders = [1u32, 2, 3, 7, 14, 21, 28, 33];
            let phases: Vec<f64> = orders.iter().map(|_| rng.random()).collect();
            let samples: Vec<f32> = (0..n)
                .map(|i| {
                    let turns = shaft(i + skip);
                    let mut x = normal(&mut rng);
                    for (o, p) in orders.iter().zip(&phases) {
                        x += wave(f64::from(*o) * turns + p);
                    }
                    x as f32
                })
                .collect();
            let recording = InMemory {
                rate_hz,
                channels: vec![samples],
            };
            let shift = offset * rng.random_range(-1.0..1.0);
            let mut log = Series::default();
            let second = rate_hz as usize;
            for i in (0..all - second).step_by(second) {
                let hz = (shaft(i + second) - shaft(i)) / (second as f64 / rate_hz);
                let t = (i + second / 2) as f64 / rate_hz - lead;
                let noise = 24.5 * 1e-4;
                log.push(t + lead, hz + noise * normal(&mut rng), noise);
            }
            let log = Reference {
                source: "motor".into(),
                series: log,
                origin_s: -lead + shift,
            };
            let found = tones::find(&recording, &Search::default(), &|_, _| ()).unwrap();
            let followed: Vec<(usize, &Tone)> = found.tones.iter().enumerate().collect();
            let Some(beside) = beside(&log, &followed, None, 120.0) else {
                continue;
            };
            if offset > 0.0 {
                aligned += u32::from(beside.offset_u95_s > 0.0);
                let error = beside.offset_s + lead;
                offsets += error.abs();
                off_squares += f64::from(error.abs() <= beside.offset_u95_s);
            }
            for (i, t) in found.tones.iter().enumerate() {
                let mean = 24.5 * (1.0 + ramp / 2.0);
                let Some(&order) = orders.iter().find(|o| {
                    let seen = fold(TrueHz(f64::from(**o) * mean), rate_hz).0;
                    (seen - t.seen_hz.0).abs()
                        < f64::from(**o) * 24.5 * (ramp * 0.3 + hunting) + 0.1
                }) else {
                    continue;
                };
                lines += 1;
                tracked += u32::from(t.track.len() >= 6);
                let Some((_, f)) = beside.follows.iter().find(|f| f.0 == i) else {
                    continue;
                };
                let cycles = f64::from(order) * mean / rate_hz;
                let inverted = cycles - cycles.floor() > 0.5;
                if f.ln_ratio < 3.0 {
                    continue;
                }
                let is = f.slope.abs().round() as u32 == order;
                named += u32::from(is);
                signs += u32::from((f.slope < 0.0) == inverted);
                wrong += u32::from(!is);
                if std::env::var_os("EVIDENCE_VERBOSE").is_some() {
                    println!("    order {order} inverted {inverted}: {f:?}");
                }
            }
        }
        println!(
            "{what}: {lines} lines seen, {tracked} with a track, {named} orders named right, {wrong} wrong, {signs} senses right"
        );
        if offset > 0.0 {
            let n = trials as f64;
            println!(
                "    aligned {aligned} of {trials}, mean error {:.2} s, within its interval {:.2}",
                offsets / n,
                off_squares / n
            );
        }
    }
}

/// Two tracks that do, and do not, move together.
fn movement(first: u64, trials: u64) {
    println!("Movement: 40 windows, tracks of common or of independent wander");
    for (what, common) in [("common", true), ("independent", false)] {
        let (mut told, mut covered, mut signs) = (0, 0, 0);
        for seed in first..first + trials {
            let mut rng = StdRng::seed_from_u64(seed);
            let memory_s = rng.random_range(2.0..60.0);
            let a = wander(&mut rng, 4000, 10.0, memory_s, 0.02);
            let b = wander(&mut rng, 4000, 10.0, memory_s, 0.02);
            let sign: f64 = if rng.random() { 1.0 } else { -1.0 };
            let ratio = sign * rng.random_range(1.5..30.0);
            let (mut x, mut y) = (Series::default(), Series::default());
            for w in 0..40 {
                let mean = |p: &[f64]| (p[(w * 100 + 99).min(3999)] - p[w * 100]) / 9.9;
                let t = w as f64 * 10.0;
                let (sx, sy) = (0.004, 0.01 * ratio.abs() / 5.0);
                x.push(t, 50.0 + mean(&a) + sx * normal(&mut rng), sx);
                let moved = ratio * mean(if common { &a } else { &b });
                y.push(t, 120.0 + moved + sy * normal(&mut rng), sy);
            }
            let Some(f) = compare(&y, &x) else { continue };
            told += u32::from(f.ln_ratio > 4.6);
            covered += u32::from((f.slope - ratio).abs() < 1.96 * f.sd);
            signs += u32::from(f.slope * ratio > 0.0);
        }
        let share = |n: u32| f64::from(n) / trials as f64;
        println!(
            "{what:12} odds over 100: {:.3}  slope in its 95 % interval: {:.3}  sign right: {:.3}",
            share(told),
            share(covered),
            share(signs)
        );
    }
}
