//! Which cells of a band stand out, and what stands there.
//!
//! Peaks at full resolution become steady lines, fitted together. What they do
//! not explain, and patches that stand out only when smoothed, are judged as
//! wandering tones or dropped as humps of noise.

use super::refine::{Line, Residual, View, refine};
use super::statistic::{Coarse, Fine};
use super::threshold;
use super::wander::{Judged, Wanderer, judge};
use crate::spectrum::Band;
use crate::spectrum::fft::Complex64;
use std::ops::Range;

/// Cells from 0 that are left alone: a tone with fewer periods in the whole
/// recording than this cannot be told from drift.
const LOWEST: usize = 4;
/// Peaks this close, in cells, belong to one bunch.
const BUNCH: usize = 10;
/// A bunch of this many peaks is not a set of steady tones.
const SPLINTERS: usize = 4;
/// Chance that noise alone makes a fitted steady line look unsteady.
const UNSTEADY_CHANCE: f64 = 1e-4;

/// Chance that a cell of a pedestal or hump passes for a line on it.
const RAGGED_CHANCE: f64 = 1e-5;
/// Share of the false alarms granted to peaks at full resolution.
const FINE_SHARE: f64 = 0.75;

/// What was found in a band.
pub struct Found {
    /// Steady tones.
    pub lines: Vec<Line>,
    /// Tones that move or come and go.
    pub wanderers: Vec<Wanderer>,
}

/// Finds the tones of a band.
///
/// `false_alarms` is the expected number of tones found in the whole band when
/// it holds noise only.
pub fn detect(band: &Band, false_alarms: f64) -> Found {
    let mut fine = Fine::new(band);
    let (bunches, singles) = bunches(&peaks(band, &fine, FINE_SHARE * false_alarms));
    let mut lines: Vec<Line> = singles.iter().map(|&i| start(band, &fine, i)).collect();
    let mut residual = refine(band, &mut lines);
    if !lines.is_empty() {
        // With the strong ones out, weaker ones may stand out of the leakage.
        let rest = Fine::new(residual.band());
        let offset = band.first_bin as f64;
        let near = |i: usize| {
            lines
                .iter()
                .any(|l| (l.bin - offset - i as f64).abs() < 3.0)
                || bunches
                    .iter()
                    .any(|b| b.start < i + BUNCH && i < b.end + BUNCH)
        };
        let more: Vec<Line> = peaks(residual.band(), &rest, FINE_SHARE * false_alarms)
            .into_iter()
            .filter(|&i| !near(i))
            .map(|i| start(band, &rest, i))
            .collect();
        if !more.is_empty() {
            lines.extend(more);
            residual = refine(band, &mut lines);
        }
        fine.hann_floor = rest.hann_floor;
    }

    // Unsteady lines and splinters ask for a judgement; so do coarse patches.
    let offset = band.first_bin;
    let mut patches: Vec<Range<usize>> = bunches;
    for line in &lines {
        if unsteady(line) {
            let centre = (line.bin.round() as usize).saturating_sub(offset);
            patches.push(centre.saturating_sub(8)..(centre + 9).min(band.bins.len()));
        }
    }
    let mut wanderers = Vec::new();
    for patch in merge(patches) {
        settle(
            band,
            &fine,
            patch,
            &mut lines,
            &mut residual,
            &mut wanderers,
        );
    }
    coarse_patches(
        band,
        &fine,
        (1.0 - FINE_SHARE) * false_alarms,
        &mut lines,
        &mut residual,
        &mut wanderers,
    );
    lines.retain(|l| l.c.norm_sqr() > 0.0 && l.bin.is_finite());
    Found { lines, wanderers }
}

/// Cells that exceed the threshold in some view and are not a stronger peak's
/// leakage, strongest first.
fn peaks(band: &Band, fine: &Fine, false_alarms: f64) -> Vec<usize> {
    let n = band.bins.len();
    // Three views of a cell, closely correlated, exceed a high threshold about
    // 1.7 times as often as one (counted on white noise at 1e-3 to 1e-5).
    let pfa = false_alarms / (1.7 * n as f64);
    let plain_worth = fine.plain_floor.cells / correlation(&fine.plain, &fine.plain_floor.level, 1);
    let hann_worth = fine.hann_floor.cells / correlation(&fine.hann, &fine.hann_floor.level, 3);
    let plain_ratio = threshold::ratio(1.0, plain_worth, pfa) as f32;
    let hann_ratio = threshold::ratio(1.0, hann_worth, pfa) as f32;
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
    let mut by_bin = std::collections::BTreeMap::<usize, f32>::new();
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
    stronger: &std::collections::BTreeMap<usize, f32>,
) -> bool {
    let (power, floor) = match view {
        View::Plain => (&fine.plain, fine.plain_floor.level[i]),
        View::Hann => (&fine.hann, fine.hann_floor.level[i]),
    };
    let mut around: Vec<f32> = (i.saturating_sub(14)..(i + 15).min(power.len()))
        .filter(|&k| k.abs_diff(i) >= 3)
        .filter(|&k| stronger.range(k.saturating_sub(2)..=k + 2).next().is_none())
        .map(|k| power[k])
        .collect();
    if around.len() < 6 {
        return true;
    }
    let mid = around.len() / 2;
    let median = *around.select_nth_unstable_by(mid, f32::total_cmp).1;
    let level = median / std::f32::consts::LN_2;
    // 2.08/n is the relative variance of a median of exponentials; Hann cells
    // are worth about half.
    let worth = around.len() as f64 / 2.08 / if view == View::Hann { 1.94 } else { 1.0 };
    let raised = f64::from(level / floor) > 1.0 + 3.0 / worth.sqrt();
    !raised || f64::from(value / level) > threshold::ratio(1.0, worth, RAGGED_CHANCE)
}

/// Over how many cells the power is correlated: 1 on steady noise, more when the
/// noise came in bursts (a burst of length τ smears its pattern over 1/τ). A
/// floor over n cells is then worth only n over this.
///
/// `from_lag` is the first lag at which steady noise has none: 1, or 3 under a
/// Hann window, whose neighbours its floor has counted already.
fn correlation(power: &[f32], floor: &[f32], from_lag: usize) -> f64 {
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

/// Splits peaks into bunches of splinters (as ranges of cells) and the rest.
fn bunches(peaks: &[usize]) -> (Vec<Range<usize>>, Vec<usize>) {
    let mut sorted = peaks.to_vec();
    sorted.sort_unstable();
    let mut ranges = Vec::new();
    let mut singles = Vec::new();
    for bunch in sorted.chunk_by(|a, b| b - a <= BUNCH) {
        match bunch {
            [first, .., last] if bunch.len() >= SPLINTERS => {
                ranges.push(first.saturating_sub(2)..last + 3);
            }
            _ => singles.extend_from_slice(bunch),
        }
    }
    (ranges, singles)
}

/// A line to start fitting from.
fn start(band: &Band, fine: &Fine, i: usize) -> Line {
    let k = (band.first_bin + i) as f64;
    // between this cell and its larger neighbour, by their amplitudes
    let left = i.checked_sub(1).map_or(0.0, |j| fine.plain[j].sqrt());
    let right = fine.plain.get(i + 1).map_or(0.0, |p| p.sqrt());
    let here = fine.plain[i].sqrt().max(f32::MIN_POSITIVE);
    let shift = if right >= left {
        right / (right + here)
    } else {
        -left / (left + here)
    };
    let (plain_floor, hann_floor) = (fine.plain_floor.level[i], fine.hann_floor.level[i]);
    let view = if plain_floor > 1.4 * hann_floor {
        View::Hann
    } else {
        View::Plain
    };
    Line {
        bin: k + f64::from(shift),
        bin_sd: 0.0,
        c: Complex64::default(),
        noise: f64::from(match view {
            View::Plain => plain_floor,
            View::Hann => hann_floor,
        }),
        view,
        leftover: 1.0,
    }
}

/// Is there more around a fitted line than noise explains?
fn unsteady(line: &Line) -> bool {
    // 17 cells less the 3 real parameters of the line
    let shape = match line.view {
        View::Plain => 15.5,
        View::Hann => 15.5 / 1.94,
    };
    threshold::exceedance(shape, 2.5, line.leftover) < UNSTEADY_CHANCE
}

fn merge(mut ranges: Vec<Range<usize>>) -> Vec<Range<usize>> {
    ranges.sort_by_key(|r| r.start);
    let mut merged: Vec<Range<usize>> = Vec::new();
    for r in ranges {
        match merged.last_mut() {
            Some(last) if r.start <= last.end => last.end = last.end.max(r.end),
            _ => merged.push(r),
        }
    }
    merged
}

/// Judges a patch with the lines inside it put back; if it is one wandering tone
/// the lines inside were its splinters, otherwise they stay if they stand out of
/// the patch itself.
fn settle(
    band: &Band,
    fine: &Fine,
    patch: Range<usize>,
    lines: &mut Vec<Line>,
    residual: &mut Residual,
    wanderers: &mut Vec<Wanderer>,
) {
    let offset = band.first_bin as f64;
    let patch = patch.start..patch.end.min(band.bins.len());
    if patch.is_empty() {
        return;
    }
    let inside = |l: &Line| {
        l.bin - offset > patch.start as f64 - 3.0 && l.bin - offset < patch.end as f64 + 2.0
    };
    for line in lines.iter().filter(|l| inside(l)) {
        residual.add(line, 1.0);
    }
    // Broader and broader: the patch is where it stood out, not all it covers.
    let floor = fine.hann_floor.level[(patch.start + patch.end) / 2];
    let edges = [patch.start, patch.end - 1].map(|k| fine.hann_floor.level[k]);
    let noise = f64::from(edges.into_iter().fold(floor, f32::min));
    let mut judged = Judged::Noise;
    for widen in [0, 1, 3] {
        let extra = widen * patch.len().max(8);
        let core = patch.start.saturating_sub(extra)..(patch.end + extra).min(band.bins.len());
        let others = lines
            .iter()
            .any(|l| !inside(l) && core.contains(&((l.bin - offset).max(0.0) as usize)));
        if others && widen > 0 {
            break;
        }
        judged = judge(residual.band(), core, noise);
        if let Judged::Tone(_) = judged {
            break;
        }
    }
    match judged {
        Judged::Tone(tone) => {
            lines.retain(|l| !inside(l));
            wanderers.push(tone);
        }
        Judged::Noise => {
            let cells = patch.len() as f64;
            let total: f64 = residual.band().bins[patch.clone()]
                .iter()
                .map(|z| f64::from(z.norm_sqr()))
                .sum();
            let n = band.samples;
            lines.retain(|l| {
                if !inside(l) || !unsteady(l) {
                    return true;
                }
                // against the mean of the rest of the patch
                let own = l.snr(n) * l.noise;
                let rest = ((total - own) / cells).max(l.noise);
                own > threshold::ratio(1.0, cells / 2.0, 1e-4) * rest
            });
            for line in lines.iter().filter(|l| inside(l)) {
                residual.add(line, -1.0);
            }
        }
    }
}

/// Patches that stand out at coarser and coarser resolution.
fn coarse_patches(
    band: &Band,
    fine: &Fine,
    false_alarms: f64,
    lines: &mut Vec<Line>,
    residual: &mut Residual,
    wanderers: &mut Vec<Wanderer>,
) {
    let scales: Vec<Coarse> = (1..12)
        .map_while(|s| Coarse::new(&fine.hann, 1.0, 4usize.pow(s), band.first_bin == 0))
        .collect();
    let tests: usize = scales.iter().map(|c| c.power.len()).sum();
    for coarse in &scales {
        let pfa = false_alarms / tests as f64;
        for patch in stand_out(coarse, pfa) {
            if !explained(band, coarse, &patch, lines, wanderers) {
                settle(band, fine, patch, lines, residual, wanderers);
            }
        }
    }
}

/// Contiguous patches of a coarse view above threshold, as cells; patches of
/// more than a dozen widths are left for a coarser view.
pub fn stand_out(coarse: &Coarse, pfa: f64) -> Vec<Range<usize>> {
    let ratios: Vec<f32> = coarse
        .power
        .iter()
        .zip(&coarse.floor.level)
        .map(|(p, f)| p / f)
        .collect();
    // Bursts leave fewer degrees of freedom than the plan says; the spread of
    // the ratios themselves shows how many.
    let shape = coarse.shape.min(shape_from_spread(&ratios));
    let high = threshold::ratio(shape, coarse.floor.cells, pfa) as f32;
    let low = (1.0 + 2.0 / shape.sqrt()) as f32;
    let lowest = LOWEST.div_ceil(coarse.stride);
    let mut found = Vec::new();
    let mut i = lowest;
    while i < ratios.len() {
        if ratios[i] <= high {
            i += 1;
            continue;
        }
        let mut start = i;
        while start > lowest && ratios[start - 1] > low {
            start -= 1;
        }
        while i < ratios.len() && ratios[i] > low {
            i += 1;
        }
        if i - start <= 24 {
            found.push(coarse.cells(start).start..coarse.cells(i - 1).end);
        }
    }
    found
}

/// Shape of the gamma distribution whose quartiles are as far apart as those of
/// `ratios`: for a near-normal one the interquartile range is 1.349/√shape.
fn shape_from_spread(ratios: &[f32]) -> f64 {
    if ratios.len() < 64 {
        return f64::INFINITY;
    }
    let mut r = ratios.to_vec();
    let q = r.len() / 4;
    let low = *r.select_nth_unstable_by(q, f32::total_cmp).1;
    let high = *r.select_nth_unstable_by(3 * q, f32::total_cmp).1;
    let spread = f64::from(high - low).max(1e-9);
    (1.349 / spread).powi(2)
}

/// Do the tones already found account for what stands out in a patch?
fn explained(
    band: &Band,
    coarse: &Coarse,
    patch: &Range<usize>,
    lines: &[Line],
    wanderers: &[Wanderer],
) -> bool {
    let offset = band.first_bin as f64;
    let (a, b) = (patch.start as f64 - 3.0, patch.end as f64 + 2.0);
    let of_lines: f64 = lines
        .iter()
        .filter(|l| l.bin - offset > a && l.bin - offset < b)
        .map(|l| l.snr(band.samples) * l.noise)
        .sum();
    let of_wanderers: f64 = wanderers
        .iter()
        .filter(|w| w.cells.end as f64 - offset > a && (w.cells.start as f64) - offset < b)
        .map(|w| w.strength * w.strength * (w.present.1 - w.present.0))
        .sum();
    of_lines + of_wanderers > 0.7 * coarse.excess(patch)
}
