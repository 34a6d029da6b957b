//! Tracks: every strong tone has one, steady or not, and its standard deviations
//! and independence hold.

use super::{add, near, noise, run};
use foldtrace::tones::track::{coarser, pairs};
use foldtrace::tones::{Tone, TrackPoint};
use rand::{RngExt, SeedableRng, rngs::StdRng};
use rand_distr::{Distribution, StandardNormal};
use std::f64::consts::TAU;

const RATE: f64 = 1000.0;

/// Phase in turns at each sample and frequency in Hz.
struct Truth {
    turns: Vec<f64>,
    hz: Vec<f64>,
}

/// A smooth random walk about `hz`, `rms_hz` wide, `memory_s` slow.
fn wandering(rng: &mut StdRng, n: usize, hz: f64, rms_hz: f64, memory_s: f64) -> Truth {
    let keep = (-1.0 / (memory_s * RATE)).exp();
    let mut draw = || -> f64 { StandardNormal.sample(&mut *rng) };
    let (mut a, mut b) = (draw(), 0.0);
    let offset: Vec<f64> = (0..n)
        .map(|_| {
            a = keep * a + (1.0 - keep * keep).sqrt() * draw();
            b += (a - b) * (1.0 - keep);
            b
        })
        .collect();
    let rms = (offset.iter().map(|o| o * o).sum::<f64>() / n as f64).sqrt();
    let hz: Vec<f64> = offset.iter().map(|o| hz + rms_hz * o / rms).collect();
    let mut turns = rng.random::<f64>();
    let turns = hz
        .iter()
        .map(|f| {
            let now = turns;
            turns += f / RATE;
            now
        })
        .collect();
    Truth { turns, hz }
}

impl Truth {
    fn steady(rng: &mut StdRng, n: usize, hz: f64) -> Truth {
        let start = rng.random::<f64>();
        Truth {
            turns: (0..n).map(|i| start + hz * i as f64 / RATE).collect(),
            hz: vec![hz; n],
        }
    }

    fn times(&self, order: f64) -> Truth {
        Truth {
            turns: self.turns.iter().map(|t| order * t).collect(),
            hz: self.hz.iter().map(|f| order * f).collect(),
        }
    }

    fn add_to(&self, x: &mut [f32], amplitude: f64) {
        for (v, t) in x.iter_mut().zip(&self.turns) {
            *v += (amplitude * (TAU * t.fract()).cos()) as f32;
        }
    }

    /// What a track's point says it is: the mean under the weight t(L − t), and the
    /// phase at the middle.
    fn at(&self, p: &TrackPoint, step_s: f64) -> (f64, f64) {
        let from = ((p.at_s - step_s / 2.0) * RATE).round().max(0.0) as usize;
        let to = (((p.at_s + step_s / 2.0) * RATE).round() as usize).min(self.hz.len());
        let (mut sum, mut weights) = (0.0, 0.0);
        for (i, f) in self.hz[from..to].iter().enumerate() {
            let w = (i as f64 + 0.5) * ((to - from) as f64 - i as f64 - 0.5);
            sum += w * f;
            weights += w;
        }
        let at = p.at_s * RATE;
        let whole = (at as usize).min(self.turns.len() - 1);
        let turns = self.turns[whole] + self.hz[whole] / RATE * (at - whole as f64);
        (sum / weights, turns)
    }
}

/// Normalised errors of a track: of frequency, and of phase.
fn normalised(points: &[TrackPoint], step_s: f64, truth: &Truth) -> Vec<(f64, f64)> {
    points
        .iter()
        .map(|p| {
            let (hz, turns) = truth.at(p, step_s);
            let off = p.turns - turns;
            (
                (p.seen_hz.0 - hz) / p.sd_hz,
                (off - off.round()) / p.turns_sd,
            )
        })
        .collect()
}

fn mean(values: impl Iterator<Item = f64>) -> f64 {
    let (sum, n) = values.fold((0.0, 0.0), |(s, n), v| (s + v, n + 1.0));
    sum / n
}

fn track(tone: &Tone) -> (&[TrackPoint], f64) {
    (&tone.track, tone.track_step_s)
}

#[test]
fn steady_tones_have_flat_independent_tracks() {
    let mut rng = StdRng::seed_from_u64(201);
    let n = 60_000;
    let (mut errors, mut joined, mut neighbours) = (Vec::new(), Vec::new(), Vec::new());
    for _ in 0..8 {
        let mut x = noise(&mut rng, n);
        let placed: Vec<Truth> = (0..5)
            .map(|i| {
                let hz = 30.0 + 90.0 * f64::from(i) + 40.0 * rng.random::<f64>();
                let truth = Truth::steady(&mut rng, n, hz);
                // 27 to 47 dB in a cell of the whole
                truth.add_to(&mut x, 0.18 * 10f64.powf(rng.random()));
                truth
            })
            .collect();
        let set = run(RATE, vec![x]);
        for truth in &placed {
            let tone = near(&set, truth.hz[0], 0.1);
            let (points, step) = track(tone);
            assert!(points.len() >= 8, "{} points: {tone:?}", points.len());
            let e = normalised(points, step, truth);
            neighbours.extend(e.windows(2).map(|w| w[0].0 * w[1].0));
            errors.extend(e);
            joined.extend(normalised(&coarser(points, step), 2.0 * step, truth));
        }
    }
    // Each figure within four standard errors: √(2/n) of a variance, 1/√n of a
    // correlation. In a window SNR is 24 or more: sds are uncertain by a few per cent.
    let check = |e: &[(f64, f64)], what: &str| {
        let slack = 4.0 * (2.0 / e.len() as f64).sqrt() + 0.05;
        for (name, variance) in [
            ("frequency", mean(e.iter().map(|e| e.0 * e.0))),
            ("phase", mean(e.iter().map(|e| e.1 * e.1))),
        ] {
            assert!((variance - 1.0).abs() < slack, "{what} {name}: {variance}");
        }
        let both = mean(e.iter().map(|e| e.0 * e.1));
        assert!(both.abs() < slack, "{what}: correlation {both}");
    };
    check(&errors, "windows");
    check(&joined, "pairs of windows");
    let lag = mean(neighbours.iter().copied());
    assert!(
        lag.abs() < 4.0 / (neighbours.len() as f64).sqrt() + 0.02,
        "neighbours' correlation {lag}"
    );
}

#[test]
fn wandering_tones_are_followed() {
    let mut rng = StdRng::seed_from_u64(202);
    let n = 60_000;
    let mut errors = Vec::new();
    // from a tenth of a resolution cell (1/60 Hz) to thirty
    for rms_hz in [0.0016, 0.01, 0.05, 0.2, 0.5] {
        for _ in 0..3 {
            let mut x = noise(&mut rng, n);
            let truth = wandering(&mut rng, n, 123.0, rms_hz, 8.0);
            truth.add_to(&mut x, 1.0);
            let set = run(RATE, vec![x]);
            assert_eq!(set.tones.len(), 1, "{rms_hz}: {:?}", set.tones);
            let (points, step) = track(&set.tones[0]);
            assert!(points.len() >= 100, "{rms_hz}: {} points", points.len());
            errors.extend(normalised(points, step, &truth));
        }
    }
    let variance = mean(errors.iter().map(|e| e.0 * e.0));
    let slack = 4.0 * (2.0 / errors.len() as f64).sqrt() + 0.05;
    assert!((variance - 1.0).abs() < slack, "{variance}");
}

/// What later stages need of tracks: two lines of one fundamental move in proportion
/// to their orders, with the sign of the zone, and their phases stay locked.
#[test]
fn tracks_of_one_family_tell_order_and_sense() {
    let mut rng = StdRng::seed_from_u64(203);
    let n = 60_000;
    let mut x = noise(&mut rng, n);
    let base = wandering(&mut rng, n, 48.3, 0.004, 10.0);
    base.add_to(&mut x, 2.0);
    // 19 × 48.3 = 917.7 is seen at 82.3, inverted: sampling folds it by itself
    base.times(19.0).add_to(&mut x, 0.5);
    add(&mut x, RATE, 301.7, 0.7, 1.0);
    let set = run(RATE, vec![x]);
    assert_eq!(set.tones.len(), 3, "{:?}", set.tones);
    let first = near(&set, 48.3, 0.1);
    // Both in windows of 3.75 s, not much shorter than the movement.
    let slow = |tone: &Tone| {
        let (mut points, mut step) = (tone.track.clone(), tone.track_step_s);
        while step < 3.0 {
            points = coarser(&points, step);
            step *= 2.0;
        }
        (points, step)
    };
    let (one, step) = slow(first);
    let slope_to = |tone: &Tone| {
        let (other, other_step) = slow(tone);
        let both = pairs((&one, step), (&other, other_step));
        assert!(both.len() >= 15, "{}", both.len());
        let (a0, b0) = (
            mean(both.iter().map(|p| p.0.seen_hz.0)),
            mean(both.iter().map(|p| p.1.seen_hz.0)),
        );
        let ab: f64 = both
            .iter()
            .map(|(a, b)| (a.seen_hz.0 - a0) * (b.seen_hz.0 - b0))
            .sum();
        let aa: f64 = both.iter().map(|(a, _)| (a.seen_hz.0 - a0).powi(2)).sum();
        let own: f64 = both.iter().map(|(a, _)| a.sd_hz.powi(2)).sum();
        // its own noise flattens the slope
        ab / (aa - own)
    };
    let folded = slope_to(near(&set, 82.3, 0.1));
    let unrelated = slope_to(near(&set, 301.7, 0.1));
    assert!((folded + 19.0).abs() < 2.5, "slope {folded}");
    assert!(unrelated.abs() < 1.5, "slope {unrelated}");
    // Phase: φ + 19·φ₁ turns steadily with the sample rate, whole turns at whole seconds
    // times 1000, so only the constant is left.
    let locked: Vec<f64> = pairs(track(first), track(near(&set, 82.3, 0.1)))
        .iter()
        .map(|(a, b)| TAU * (b.turns + 19.0 * a.turns - RATE * b.at_s).fract())
        .collect();
    let coherence =
        mean(locked.iter().map(|p| p.cos())).hypot(mean(locked.iter().map(|p| p.sin())));
    assert!(coherence > 0.8, "coherence {coherence}");
}

#[test]
fn a_long_recording_has_the_same_tracks() {
    let mut rng = StdRng::seed_from_u64(204);
    let n = 2_400_000;
    let mut x = noise(&mut rng, n);
    let truth = wandering(&mut rng, n, 123.0, 0.03, 60.0);
    truth.add_to(&mut x, 0.3);
    let still = Truth::steady(&mut rng, n, 301.7);
    still.add_to(&mut x, 0.1);
    let set = run(RATE, vec![x]);
    assert_eq!(set.tones.len(), 2, "{:?}", set.tones);
    for (tone, truth) in set.tones.iter().zip([&truth, &still]) {
        let (points, step) = track(tone);
        assert!(points.len() >= 64, "{} points", points.len());
        let e = normalised(points, step, truth);
        let variance = mean(e.iter().map(|e| e.0 * e.0));
        let slack = 4.0 * (2.0 / e.len() as f64).sqrt() + 0.05;
        assert!((variance - 1.0).abs() < slack, "{variance}");
    }
}
