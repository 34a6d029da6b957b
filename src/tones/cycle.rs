//! Tones that go on and off: one tone with a duty, not the many lines that its
//! switching makes of it.
//!
//! Back in time, such a tone's power has two values, full and none, and little between
//! them. A beat of two tones or a modulated one passes through everything between.

use super::track::{Work, fit};
use crate::spectrum::fft::Complex32;

/// Power, as a share of full, above which it is on; and from which to which it is
/// neither on nor off.
const ON: f64 = 0.4;
const BETWEEN: std::ops::Range<f64> = 0.15..0.65;
/// Most of the time that may be spent between, beyond what switching itself takes.
const MOST_BETWEEN: f64 = 0.04;
/// Most power while off, as a share of full.
const MOST_OFF: f64 = 0.05;
/// Shares of the time on between which a tone comes and goes.
const DUTY: std::ops::Range<f64> = 0.04..0.92;
/// What counts as switching.
#[derive(Debug, Clone, Copy)]
pub struct Demand {
    /// Least stretches on.
    pub stretches: usize,
    /// Most that the power varies while on, square over square mean, beyond noise.
    pub steadiness: f64,
    /// The tone's energy over the noise density in a stretch that is called on or off.
    pub clear: f64,
}

/// Of a strong line among side lines, which noise does not have.
pub const OF_LINES: Demand = Demand {
    stretches: 2,
    steadiness: 1.12,
    clear: 30.0,
};
/// Of a patch of spectrum. Noise shaped by a resonance comes and goes as well, but
/// each time as strong as chance has it: its stretches' powers vary by about 0.4 of
/// their square. R of them are as even as this once in about (0.4/0.03)^((R − 1)/2) recordings.
pub const OF_PATCH: Demand = Demand {
    stretches: 10,
    steadiness: 1.03,
    clear: 150.0,
};

/// A tone that was on more than once.
#[derive(Debug, Clone, PartialEq)]
pub struct Cycle {
    /// Stretches in which it was on, as samples of the signal.
    pub on: Vec<std::ops::Range<usize>>,
    /// Mean power while on, the noise taken off.
    pub power: f64,
    /// Frequency, cycles per sample of the signal, and its standard deviation.
    pub cycles: f64,
    /// See `cycles`.
    pub cycles_sd: f64,
}

impl Cycle {
    /// Share of the time on from the first moment to the last.
    pub fn duty(&self) -> f64 {
        match (self.on.first(), self.on.last()) {
            (Some(first), Some(last)) => {
                let on: usize = self.on.iter().map(|r| r.len()).sum();
                on as f64 / (last.end - first.start).max(1) as f64
            }
            _ => 0.0,
        }
    }
}

/// Looks for a tone that switches in `z`, whose samples hold a noise power of `noise`.
pub fn cycle(z: &[Complex32], noise: f64, demand: Demand, work: &mut Work) -> Option<Cycle> {
    let n = z.len();
    let power: Vec<f64> = z.iter().map(|z| f64::from(z.norm_sqr())).collect();
    let mean = power.iter().sum::<f64>() / n.max(1) as f64 - noise;
    if n < 48 || mean <= 0.0 {
        return None;
    }
    // Full power is not known before on and off are: from the mean up.
    let mut full = mean;
    let mut found = None;
    for _ in 0..4 {
        let smooth = ((demand.clear * noise / full).ceil() as usize).max(1);
        if smooth * 12 > n {
            return None;
        }
        let level = smoothed(&power, smooth);
        let on = |p: f64| p > noise + ON * full;
        let mut runs: Vec<std::ops::Range<usize>> = Vec::new();
        for (i, &p) in level.iter().enumerate() {
            match runs.last_mut() {
                Some(r) if on(p) && r.end == i => r.end = i + 1,
                _ if on(p) => runs.push(i..i + 1),
                _ => {}
            }
        }
        // Means well inside the stretches.
        let inner = |r: &std::ops::Range<usize>| {
            r.start + smooth..r.end.saturating_sub(smooth).max(r.start + smooth)
        };
        let (sum, count) = runs
            .iter()
            .flat_map(inner)
            .filter_map(|i| power.get(i))
            .fold((0.0, 0usize), |(s, c), p| (s + p, c + 1));
        if count < smooth {
            return None;
        }
        let next = sum / count as f64 - noise;
        let settled = (next / full - 1.0).abs() < 0.05;
        full = next;
        found = Some((runs, level, smooth));
        if settled {
            break;
        }
    }
    let (runs, level, smooth) = found?;
    let on: usize = runs.iter().map(|r| r.len()).sum();
    // While off there is nothing but noise.
    let near = |i: usize| {
        runs.iter()
            .any(|r| r.start < i + smooth + 1 && i < r.end + smooth)
    };
    let (sum, count) = (0..n)
        .filter(|&i| !near(i))
        .fold((0.0, 0usize), |(s, c), i| (s + power[i], c + 1));
    if sum / count.max(1) as f64 > noise + MOST_OFF * full {
        return None;
    }
    if runs.len() < demand.stretches || !DUTY.contains(&(on as f64 / n as f64)) {
        return None;
    }
    let switched = 2 * runs.len() * smooth;
    let between = level
        .iter()
        .filter(|&&p| BETWEEN.contains(&((p - noise) / full)))
        .count();
    if switched * 2 > n || between as f64 > MOST_BETWEEN * n as f64 + 0.8 * switched as f64 {
        return None;
    }
    let inner: Vec<f64> = runs
        .iter()
        .filter(|r| r.len() > 2 * smooth)
        .flat_map(|r| level[r.start + smooth..r.end - smooth].iter().copied())
        .collect();
    let m = inner.len().max(1) as f64;
    let first = inner.iter().sum::<f64>() / m;
    let second = inner.iter().map(|p| p * p).sum::<f64>() / m;
    // A smoothed power of SNR s varies by 2/s.
    let by_noise = 2.0 * noise / (full * smooth as f64);
    if second / (first * first) > demand.steadiness + by_noise {
        return None;
    }
    // Frequency: each stretch's own, by their precision (var 6/(η·m³), Rife &
    // Boorstyn 1974).
    let eta = full / noise.max(1e-30 * full);
    let longest = runs.iter().max_by_key(|r| r.len())?.clone();
    let about = fit(z.get(longest)?, 0.0, 0.5, work)?.cycles;
    let (mut sum, mut weights) = (0.0, 0.0);
    for r in &runs {
        if (r.len() as f64) * eta < OF_LINES.clear {
            continue;
        }
        let m = r.len() as f64;
        let Some(own) = fit(z.get(r.clone())?, about, 2.0 / m, work) else {
            continue;
        };
        let weight = eta * m.powi(3);
        sum += weight * own.cycles;
        weights += weight;
    }
    (weights > 0.0).then(|| Cycle {
        on: runs,
        power: full,
        cycles: sum / weights,
        cycles_sd: (6.0 / weights).sqrt() / std::f64::consts::TAU,
    })
}

/// Mean over `width` samples about each, fewer at the ends.
fn smoothed(power: &[f64], width: usize) -> Vec<f64> {
    let mut sums = vec![0.0];
    for p in power {
        sums.push(sums.last().copied().unwrap_or(0.0) + p);
    }
    (0..power.len())
        .map(|i| {
            let from = i.saturating_sub(width / 2);
            let to = (i + width - width / 2).min(power.len());
            (sums[to] - sums[from]) / (to - from) as f64
        })
        .collect()
}
