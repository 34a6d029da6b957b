//! Which cells of a band stand out, and what stands there.
//!
//! Peaks at full resolution become steady lines, fitted together. What they do
//! not explain, and patches that stand out only when smoothed, are judged as
//! wandering tones or dropped as humps of noise.

use super::cycle::OF_PATCH;
use super::fits::{Fit, followed};
use super::peaks::{LOWEST, Level, peaks};
use super::refine::{Line, Residual, View, refine};
use super::regions::merge;
use super::statistic::{Coarse, Fine, lower};
use super::switching::{WIDEST_CYCLE, cycles, judge_cycle};
use super::threshold;
use super::track;
use super::wander::{Wanderer, judge};
use crate::spectrum::Band;
use crate::spectrum::fft::Complex64;
use std::ops::Range;

/// Periods in the whole recording below which a fitted line is drift.
const SLOWEST: f64 = LOWEST as f64 - 0.5;
/// Peaks this close, in cells, belong to one bunch.
const BUNCH: usize = 10;
/// A bunch of this many peaks is not a set of steady tones.
const SPLINTERS: usize = 4;
/// Chance that noise alone makes a fitted steady line look unsteady.
const UNSTEADY_CHANCE: f64 = 1e-4;
/// Chance that the highest cell of a hump passes for a line on it.
const HUMP_CHANCE: f64 = 1e-6;
/// A patch gathers the highest of many cells: it must hold this many times what
/// a single steady line must.
const PATCH_MARGIN: f64 = 3.0;
/// Share of the false alarms granted to peaks at full resolution.
const FINE_SHARE: f64 = 0.75;

/// What was found in a band.
pub struct Found {
    /// Steady tones, and tones that move or come and go.
    pub tones: Vec<Fit>,
    /// The band without the steady ones.
    pub rest: Band,
}

impl Found {
    /// Nothing looked for yet.
    pub fn nothing(band: Band) -> Found {
        Found {
            tones: Vec::new(),
            rest: band,
        }
    }
}

/// Finds the tones of a band.
///
/// `false_alarms` is the expected number of tones found in the whole band when
/// it holds noise only. `broad` are cells that stood out of a view wider than the band.
pub fn detect(band: &Band, false_alarms: f64, broad: &[Range<usize>]) -> Found {
    let mut fine = Fine::new(band);
    let level = Level::new(&fine, FINE_SHARE * false_alarms);
    let mut standing = peaks(band, &fine, &level);
    let mut work = track::Work::default();
    let cycles = cycles(band, &fine, &standing, level.fitted(View::Plain), &mut work);
    let of_cycle = |i: usize| {
        let k = i + band.first_bin;
        cycles
            .iter()
            .any(|c| c.cells.start <= k + 2 && k < c.cells.end + 2)
    };
    standing.retain(|&i| !of_cycle(i));
    let (bunches, singles) = bunches(&standing);
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
        let more: Vec<Line> = peaks(residual.band(), &rest, &level)
            .into_iter()
            .filter(|&i| !near(i) && !of_cycle(i))
            .map(|i| start(band, &rest, i))
            .collect();
        if !more.is_empty() {
            lines.extend(more);
            residual = refine(band, &mut lines);
        }
        fine.hann_floor = rest.hann_floor;
    }
    let scales = Coarse::ladder(&fine.hann, 1.0, band.first_bin == 0)
        .map(|mut coarse| {
            lower(&mut coarse.floor, band, coarse.stride);
            coarse.floor.raise(band.least_noise);
            coarse
        })
        .collect();
    let mut patches = bunches;
    patches.extend(lines.iter().filter(|l| unsteady(l)).map(|line| {
        let centre = (line.bin.round() as usize).saturating_sub(band.first_bin);
        centre.saturating_sub(8)..(centre + 9).min(band.bins.len())
    }));
    let mut search = Patches {
        fine,
        scales,
        residual,
        lines,
        wanderers: cycles,
        threshold: level.fitted(View::Plain),
        work,
    };
    search.settle_all(patches);
    search.coarse((1.0 - FINE_SHARE) * false_alarms);
    let unexplained = broad
        .iter()
        .filter(|p| !search.accounted(p, search.excess(p)))
        .cloned()
        .collect();
    search.settle_all(unexplained);
    let Patches {
        lines,
        wanderers,
        mut residual,
        ..
    } = search;
    let wanderers = apart(wanderers, band.samples as f64 / band.grid as f64);
    let (lines, splinters): (Vec<Line>, Vec<Line>) = lines.into_iter().partition(|l| {
        l.bin.is_finite()
            && l.bin >= SLOWEST
            && stands_out(l, band.samples, &level)
            && !is_splinter(l, &wanderers, band)
    });
    for line in splinters.iter().filter(|l| l.bin.is_finite()) {
        residual.add(line, 1.0);
    }
    Found {
        tones: followed(&residual, &lines, &wanderers),
        rest: residual.into_band(),
    }
}

/// Does a wandering tone stray over `bin`?
fn strays_over(w: &Wanderer, bin: f64) -> bool {
    (w.bin - bin).abs() < (3.0 * w.wander).max(1.5)
}

/// Drops what lies where a stronger wandering tone strays: its splinters.
fn apart(mut wanderers: Vec<Wanderer>, cells: f64) -> Vec<Wanderer> {
    wanderers.sort_by(|a, b| b.strength.total_cmp(&a.strength));
    let mut kept: Vec<Wanderer> = Vec::new();
    for tone in wanderers {
        let strength = tone.strength * tone.duty;
        if !kept
            .iter()
            .any(|k| strays_over(k, tone.bin) || k.switching_at(tone.bin, cells) > strength)
        {
            kept.push(tone);
        }
    }
    kept
}

fn is_splinter(line: &Line, wanderers: &[Wanderer], band: &Band) -> bool {
    let samples = band.samples;
    let cells = samples as f64 / band.grid as f64;
    let strength = line.c.norm() * samples as f64;
    wanderers.iter().any(|w| {
        w.strength > strength
            && (strays_over(w, line.bin) || w.switching_at(line.bin, cells) > strength)
    })
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
        peak: k + f64::from(shift),
        bin: k + f64::from(shift),
        bin_sd: 0.0,
        c: Complex64::default(),
        noise: f64::from(match view {
            View::Plain => plain_floor,
            View::Hann => hann_floor,
        }),
        view,
        strayed: 0.0,
        leftover: 1.0,
    }
}

/// Does a fitted line exceed the final threshold, over what is left around it
/// if that is clearly more than the floor?
fn stands_out(line: &Line, samples: usize, level: &Level) -> bool {
    // 17 cells of noise are within a half of their mean 98 % of the time
    let raised = (line.leftover / 1.5).max(1.0);
    line.snr(samples) > raised * level.fitted(line.view)
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

/// What is known while broad patches are looked at.
struct Patches {
    fine: Fine,
    scales: Vec<Coarse>,
    /// The band without the lines.
    residual: Residual,
    lines: Vec<Line>,
    wanderers: Vec<Wanderer>,
    /// What a steady line's power over noise must exceed.
    threshold: f64,
    work: track::Work,
}

impl Patches {
    fn band(&self) -> &Band {
        self.residual.band()
    }

    /// Does the line lie in these cells?
    fn inside(&self, line: &Line, cells: &Range<usize>) -> bool {
        let at = line.bin - self.band().first_bin as f64;
        at > cells.start as f64 - 3.0 && at < cells.end as f64 + 2.0
    }

    /// The lowest floor that any resolution sees under a cell: a line broad
    /// enough to lift the floor at one resolution is narrow at a coarser one.
    fn base(&self, cell: usize) -> f64 {
        self.scales
            .iter()
            .filter_map(|c| c.floor.level.get(cell / c.stride))
            .chain(self.fine.hann_floor.level.get(cell))
            .fold(f64::INFINITY, |low, &f| low.min(f64::from(f)))
    }

    /// Settles patches, strongest first.
    fn settle_all(&mut self, patches: Vec<Range<usize>>) {
        let power = |p: &Range<usize>| -> f32 {
            self.fine.hann[p.start..p.end.min(self.fine.hann.len())]
                .iter()
                .sum()
        };
        let mut ordered = merge(patches, 0);
        ordered.sort_by(|a, b| power(b).total_cmp(&power(a)).then(a.start.cmp(&b.start)));
        for patch in ordered {
            self.settle(patch);
        }
    }

    /// Where a patch ends: outwards in strips until a strip is down at the floor
    /// or holds a steady line of its own. The strips are an eighth of the patch
    /// wide, so that a gap in a ragged spectrum does not end it.
    fn grow(&self, patch: Range<usize>) -> Range<usize> {
        let n = self.fine.hann.len();
        let widest = (n / 48).max(64);
        let mut core = patch.clone();
        let (mut left, mut right) = (true, true);
        while (left || right) && core.len() < widest {
            let strip = (core.len() / 8).max(6);
            let raised = |cells: Range<usize>| {
                let m = cells.len();
                if m < 3
                    || self
                        .lines
                        .iter()
                        .any(|l| !self.inside(l, &patch) && !unsteady(l) && self.inside(l, &cells))
                {
                    return false;
                }
                let mean = self.fine.hann[cells.clone()]
                    .iter()
                    .map(|&p| f64::from(p))
                    .sum::<f64>()
                    / m as f64;
                // Hann cells are worth about half an independent one
                let sd = (1.94 / m as f64).sqrt();
                mean > self.base(cells.start + m / 2) * (1.2 + 2.5 * sd)
            };
            if left {
                let next = core.start.saturating_sub(strip);
                left = raised(next..core.start);
                if left {
                    core.start = next;
                }
            }
            if right {
                let next = (core.end + strip).min(n);
                right = raised(core.end..next);
                if right {
                    core.end = next;
                }
            }
        }
        core
    }

    /// Judges a patch with the lines inside it put back; if it is one wandering
    /// tone the lines inside were its splinters, otherwise they stay if they
    /// stand out of the patch itself.
    fn settle(&mut self, patch: Range<usize>) {
        let patch = patch.start..patch.end.min(self.band().bins.len());
        let first = self.band().first_bin;
        let taken = self
            .wanderers
            .iter()
            .any(|w| w.cells.start < patch.end + first && w.cells.end > patch.start + first);
        if patch.is_empty() {
            return;
        }
        if taken {
            // a splinter of a tone already settled
            let lines = std::mem::take(&mut self.lines);
            self.lines = lines
                .into_iter()
                .filter(|l| !(self.inside(l, &patch) && unsteady(l)))
                .collect();
            return;
        }
        let core = self.grow(patch.clone());
        let noise = (core.start..core.end)
            .step_by((core.len() / 8).max(1))
            .map(|k| self.base(k))
            .fold(f64::INFINITY, f64::min);
        let (inner, outer): (Vec<Line>, Vec<Line>) = std::mem::take(&mut self.lines)
            .into_iter()
            .partition(|l| self.inside(l, &core));
        for line in &inner {
            self.residual.add(line, 1.0);
        }
        self.lines = outer;
        // A patch that reaches down to 0 Hz is drift.
        let drift = core.start + first < LOWEST;
        // Wider cuts show switching more sharply.
        let band = self.residual.band();
        let judged = [4, 1]
            .into_iter()
            .map(|wider| {
                let more = wider * core.len();
                core.start.saturating_sub(more)..(core.end + more).min(band.bins.len())
            })
            .filter(|cells| cells.len() < 2 * WIDEST_CYCLE)
            .find_map(|cells| judge_cycle(band, cells, noise, OF_PATCH, &mut self.work))
            .or_else(|| judge(band, core, noise))
            .filter(|t| !drift && t.strength.powi(2) > PATCH_MARGIN * self.threshold * noise);
        if let Some(tone) = judged {
            self.wanderers.push(tone);
            return;
        }
        for line in inner {
            // An unsteady line that is not a tone of its own is the highest of
            // the cells of a hump; the 17 around it tell how high those are.
            let stands = line.snr(self.band().samples)
                > line.leftover * threshold::ratio(1.0, 8.0, HUMP_CHANCE);
            if !unsteady(&line) || stands {
                self.residual.add(&line, -1.0);
                self.lines.push(line);
            }
        }
    }

    /// Patches that stand out at coarser and coarser resolution.
    fn coarse(&mut self, false_alarms: f64) {
        let tests: usize = self.scales.iter().map(|c| c.power.len()).sum();
        for scale in 0..self.scales.len() {
            let patches: Vec<Range<usize>> =
                stand_out(&self.scales[scale], false_alarms / tests as f64)
                    .into_iter()
                    .filter(|p| !self.accounted(p, self.scales[scale].excess(p)))
                    .collect();
            self.settle_all(patches);
        }
    }

    /// Power above the floor in a patch, at full resolution.
    fn excess(&self, patch: &Range<usize>) -> f64 {
        (patch.start..patch.end.min(self.fine.hann.len()))
            .map(|k| f64::from(self.fine.hann[k]) - self.base(k))
            .sum()
    }

    /// Do the tones already found account for the power that stands out in a patch?
    fn accounted(&self, patch: &Range<usize>, excess: f64) -> bool {
        let first = self.band().first_bin;
        let of_lines: f64 = self
            .lines
            .iter()
            .filter(|l| self.inside(l, patch))
            .map(|l| l.snr(self.band().samples) * l.noise)
            .sum();
        let of_wanderers: f64 = self
            .wanderers
            .iter()
            .filter(|w| w.cells.end > patch.start + first && w.cells.start < patch.end + first)
            .map(|w| w.strength * w.strength * (w.present.1 - w.present.0) * w.duty)
            .sum();
        of_lines + of_wanderers > 0.7 * excess
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
