//! Cells that stand out at full resolution.

use super::refine::{NOISE_REACH, View};
use super::statistic::Fine;
use super::threshold;
use crate::spectrum::Band;
use crate::spectrum::floor::Floor;
use std::collections::BTreeMap;

/// Cells from 0 that are left alone: a tone with fewer periods in the whole
/// recording than this cannot be told from drift.
pub const LOWEST: usize = 4;
/// Chance that a cell of a pedestal or hump passes for a line on it.
const RAGGED_CHANCE: f64 = 1e-5;

/// The same for the few cells right beside it.
const NARROW_CHANCE: f64 = 1e-4;

/// A median of exponentials has 1/ln²2 times the relative variance of their mean.
const MEDIAN_COST: f64 = 2.08;
/// Hann-windowed cells are worth one in this many.
const HANN_CELLS: f64 = 1.94;

/// How high a cell, and later a fitted line, must stand.
pub struct Level {
    /// Share of the false alarms per cell.
    per_cell: f64,
    /// Cells that the floors are worth.
    plain_worth: f64,
    hann_worth: f64,
}

/// A cell is looked at from here on, as a share of what a fitted line must
/// reach: between two cells the best view is 0.9 dB low.
const FIRST_LOOK: f64 = 0.8;

impl Level {
    /// For `false_alarms` expected in the band when it holds noise only.
    pub fn new(fine: &Fine, false_alarms: f64) -> Level {
        // A fitted line's noise is the median of the cells around it.
        let worth = |floor: &Floor, power: &[f32], lag, around: f64| {
            floor.cells.min(around) / correlation(power, &floor.level, lag)
        };
        let around = (2 * NOISE_REACH + 1) as f64 / MEDIAN_COST;
        Level {
            per_cell: false_alarms / fine.plain.len() as f64,
            plain_worth: worth(&fine.plain_floor, &fine.plain, 1, around),
            hann_worth: worth(&fine.hann_floor, &fine.hann, 3, around / HANN_CELLS),
        }
    }

    /// What a fitted line's power over noise must exceed.
    ///
    /// The fit takes the highest point of a continuous spectrum. By Rice's
    /// formula that of N cells exceeds T about N·√(πT/3)·exp(−T) times.
    pub fn fitted(&self, view: View) -> f64 {
        let crossings = (std::f64::consts::PI * 16.0 / 3.0).sqrt();
        let worth = match view {
            View::Plain => self.plain_worth,
            View::Hann => self.hann_worth,
        };
        let t = threshold::ratio(1.0, worth, (self.per_cell / crossings).min(0.5));
        match view {
            View::Plain => t,
            // a Hann window passes 1.5 cells of noise
            View::Hann => 1.5 * t,
        }
    }
}

/// Cells that stand out in some view and are not a stronger peak's leakage,
/// strongest first.
pub fn peaks(band: &Band, fine: &Fine, level: &Level) -> Vec<usize> {
    let n = band.bins.len();
    let plain_ratio = (FIRST_LOOK * level.fitted(View::Plain)) as f32;
    let hann_ratio = (FIRST_LOOK * level.fitted(View::Hann) / 1.5) as f32;
    let lowest = LOWEST.saturating_sub(band.first_bin);
    let highest = n.saturating_sub(if 2 * (band.first_bin + n) > band.grid {
        2
    } else {
        0
    });
    let mut strong: Vec<(f32, usize)> = (lowest..highest)
        .filter_map(|i| {
            let plain_floor = fine.plain_floor.level[i];
            let hit = fine.plain[i] > plain_ratio * plain_floor
                || fine.between[i] > plain_ratio * plain_floor
                || fine.hann[i] > hann_ratio * fine.hann_floor.level[i];
            hit.then(|| {
                (
                    fine.plain[i].max(fine.between[i]).max(1.5 * fine.hann[i]),
                    i,
                )
            })
        })
        .collect();
    strong.sort_by(|a, b| b.0.total_cmp(&a.0).then(a.1.cmp(&b.1)));
    let mut accepted: Vec<(usize, f32)> = Vec::new();
    let mut by_bin = BTreeMap::<usize, f32>::new();
    for (power, i) in strong {
        let stands_in = |view: View| {
            let (value, floor, ratio) = match view {
                View::Plain => (
                    fine.plain[i].max(fine.between[i]),
                    fine.plain_floor.level[i],
                    plain_ratio,
                ),
                View::Hann => (fine.hann[i], fine.hann_floor.level[i], hann_ratio),
            };
            value > ratio * floor
                && !by_bin
                    .range(i.saturating_sub(4096)..i + 4096)
                    .any(|(&j, &p)| value < 4.0 * leakage(view, i.abs_diff(j), p))
                && above_pedestal(fine, view, i, value, &by_bin)
        };
        if stands_in(View::Hann) || stands_in(View::Plain) {
            accepted.push((i, power));
            by_bin.insert(i, power);
        }
    }
    accepted.into_iter().map(|(i, _)| i).collect()
}

/// The most that a steady tone of power `p` puts `distance` cells away.
fn leakage(view: View, distance: usize, p: f32) -> f32 {
    // `p` may be 1 dB low between cells, and the tone half a cell nearer.
    let d = distance as f32 - 0.5;
    let p = 1.3 * p;
    match view {
        View::Plain if distance < 2 => p,
        View::Plain => p / (std::f32::consts::PI * d).powi(2),
        View::Hann if distance < 3 => p,
        View::Hann => 0.67 * p / (std::f32::consts::PI * d * (d * d - 1.0)).powi(2),
    }
}

/// A strong tone that jitters stands on a pedestal of its own noise, and a
/// resonance narrower than the floor's windows is ragged too: where the immediate
/// surroundings stand above the floor, a line must stand out of *them*.
fn above_pedestal(
    fine: &Fine,
    view: View,
    i: usize,
    value: f32,
    stronger: &BTreeMap<usize, f32>,
) -> bool {
    let (power, floor) = match view {
        View::Plain => (&fine.plain, fine.plain_floor.level[i]),
        View::Hann => (&fine.hann, fine.hann_floor.level[i]),
    };
    let around = |reach: usize| -> Option<(f64, f64)> {
        let mut cells: Vec<f32> = (i.saturating_sub(reach)..(i + reach + 1).min(power.len()))
            .filter(|&k| k.abs_diff(i) >= 3)
            .filter(|&k| stronger.range(k.saturating_sub(2)..=k + 2).next().is_none())
            .map(|k| power[k])
            .collect();
        if cells.len() < 6 {
            return None;
        }
        let mid = cells.len() / 2;
        let median = *cells.select_nth_unstable_by(mid, f32::total_cmp).1;
        let shared = if view == View::Hann { HANN_CELLS } else { 1.0 };
        let worth = cells.len() as f64 / MEDIAN_COST / shared;
        Some((f64::from(median) / std::f64::consts::LN_2, worth))
    };
    let Some((level, worth)) = around(14) else {
        return true;
    };
    let raised = level / f64::from(floor) > 1.0 + 3.0 / worth.sqrt();
    let above = |level: f64, worth: f64, chance: f64| {
        f64::from(value) / level > threshold::ratio(1.0, worth, chance)
    };
    // A hump no wider than that is highest where the line would be.
    !raised
        || above(level, worth, RAGGED_CHANCE)
            && around(8).is_none_or(|(level, worth)| above(level, worth, NARROW_CHANCE))
}

/// Over how many cells the power is correlated: 1 on steady noise, more when the
/// noise came in bursts (a burst of length τ smears its pattern over 1/τ). A
/// floor over n cells is then worth only n over this.
///
/// `from_lag` is the first lag at which steady noise has none: 1, or 3 under a
/// Hann window, whose neighbours its floor has counted already.
fn correlation(power: &[f32], floor: &[f32], from_lag: usize) -> f64 {
    // A broad tone or hump is correlated too, but only where it is: most parts of the
    // band decide.
    let part = (power.len() / 16).max(256);
    let mut parts: Vec<f64> = power
        .chunks(part)
        .zip(floor.chunks(part))
        .map(|(p, f)| correlation_in(p, f, from_lag))
        .collect();
    let mid = parts.len() / 2;
    if parts.is_empty() {
        return 1.0;
    }
    *parts.select_nth_unstable_by(mid, f64::total_cmp).1
}

fn correlation_in(power: &[f32], floor: &[f32], from_lag: usize) -> f64 {
    // capped, so that tones do not count
    let y: Vec<f32> = power
        .iter()
        .zip(floor)
        .map(|(p, f)| (p / f).min(4.0))
        .collect();
    let n = y.len() as f64;
    let mean = (y.iter().map(|&v| f64::from(v)).sum::<f64>() / n) as f32;
    let y: Vec<f32> = y.into_iter().map(|v| v - mean).collect();
    let covariance = |lag: usize| -> f64 {
        // partial sums keep f32 exact enough and fast
        y.chunks(4096)
            .enumerate()
            .map(|(c, a)| {
                let b = &y[(c * 4096 + lag).min(y.len())..];
                f64::from(a.iter().zip(b).map(|(a, b)| a * b).sum::<f32>())
            })
            .sum::<f64>()
            / n
    };
    let variance = covariance(0);
    if variance <= 0.0 {
        return 1.0;
    }
    let mut sum = 0.0;
    for lag in from_lag..128.min(y.len()) {
        let r = covariance(lag) / variance;
        if r < 3.0 / n.sqrt() {
            break;
        }
        sum += r;
    }
    1.0 + 2.0 * sum
}
