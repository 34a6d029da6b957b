//! Steady lines of a channel with missing samples, one after the other from the
//! strongest down (matching pursuit, Mallat and Zhang 1993), each fitted to the
//! samples that are there. Gaps give a line sidelobes, but its highest peak stays
//! where it is; once it is taken away, so are they.

use super::normal::Normal;
use crate::spectrum::fft::{Complex32, RealFft};
use std::f64::consts::TAU;

/// A line that gaps are filled with.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Line {
    /// Cycles per sample.
    pub cycles: f64,
    /// Amplitudes of cosine and sine.
    pub cos: f64,
    pub sin: f64,
}

impl Line {
    pub(super) fn at(&self, frame: u64) -> f64 {
        // The whole turns dropped first: a sine of a large number loses digits.
        let (sin, cos) = (TAU * (self.cycles * frame as f64).fract()).sin_cos();
        self.cos * cos + self.sin * sin
    }
}

/// Power of a peak over the median of all bins from which its line leaves a hole
/// that matters.
const WORTH: f32 = 40.0;

/// The strongest lines of `samples` (NaN where missing), at most `most`.
pub(super) fn pursue(samples: &[f32], most: usize) -> Vec<Line> {
    let present: Vec<(u64, f64)> = (0..)
        .zip(samples)
        .filter(|(_, sample)| sample.is_finite())
        .map(|(frame, &sample)| (frame, f64::from(sample)))
        .collect();
    if present.len() < 16 {
        return Vec::new();
    }
    let grid = (2 * samples.len()).next_power_of_two();
    let cell = grid as f64 / samples.len() as f64;
    let mut fft = RealFft::new(grid);
    let mut lines: Vec<Line> = Vec::new();
    let mut rest = left_by(&present, &mut lines);
    while lines.len() < most {
        let Some(bin) = highest(&mut fft, grid, &rest, &lines, cell) else {
            break;
        };
        let cycles = refined(&rest, bin as f64 / grid as f64, 1.0 / grid as f64);
        // Alone first, which is quick.
        let mut one = vec![Line {
            cycles,
            cos: 0.0,
            sin: 0.0,
        }];
        rest = left_by(&rest, &mut one);
        lines.extend(one);
    }
    // Each again beside the others, then all together.
    for _ in 0..2 {
        rest = left_by(&present, &mut lines);
        for line in &mut lines {
            let with: Vec<(u64, f64)> = rest
                .iter()
                .map(|&(frame, value)| (frame, value + line.at(frame)))
                .collect();
            line.cycles = refined(&with, line.cycles, 0.25 / grid as f64);
        }
    }
    left_by(&present, &mut lines);
    lines
}

/// Fits a constant and the lines to the values, and gives what they leave.
fn left_by(values: &[(u64, f64)], lines: &mut [Line]) -> Vec<(u64, f64)> {
    let mut normal = Normal::new(1 + 2 * lines.len());
    let mut row = vec![1.0; 1 + 2 * lines.len()];
    for &(frame, value) in values {
        let pairs = row.get_mut(1..).unwrap_or_default().chunks_exact_mut(2);
        for (line, pair) in lines.iter().zip(pairs) {
            let (sin, cos) = (TAU * (line.cycles * frame as f64).fract()).sin_cos();
            pair.copy_from_slice(&[cos, sin]);
        }
        normal.add(&row, value);
    }
    let solved = normal.solve();
    let pairs = solved.get(1..).unwrap_or_default().chunks_exact(2);
    for (line, pair) in lines.iter_mut().zip(pairs) {
        if let &[cos, sin] = pair {
            (line.cos, line.sin) = (cos, sin);
        }
    }
    let constant = solved.first().copied().unwrap_or(0.0);
    let left = |&(frame, value): &(u64, f64)| {
        let model: f64 = lines.iter().map(|line| line.at(frame)).sum();
        (frame, value - constant - model)
    };
    values.iter().map(left).collect()
}

/// The bin of the highest peak that is worth a line and not within a cell of one.
fn highest(
    fft: &mut RealFft,
    grid: usize,
    rest: &[(u64, f64)],
    lines: &[Line],
    cell: f64,
) -> Option<usize> {
    let mut padded = vec![0.0f32; grid];
    for &(frame, value) in rest {
        if let Some(place) = padded.get_mut(frame as usize) {
            *place = value as f32;
        }
    }
    let mut bins = vec![Complex32::default(); fft.bins()];
    fft.forward(&mut padded, &mut bins);
    let powers: Vec<f32> = bins.iter().map(Complex32::norm_sqr).collect();
    let mut sorted = powers.clone();
    let middle = sorted.len() / 2;
    let (_, &mut median, _) = sorted.select_nth_unstable_by(middle, f32::total_cmp);
    let taken = |bin: usize| {
        let near = |line: &Line| (line.cycles * grid as f64 - bin as f64).abs() < cell;
        lines.iter().any(near)
    };
    let first = cell.ceil() as usize;
    let candidates = powers.iter().enumerate().skip(first);
    let (bin, &power) = candidates
        .filter(|&(bin, _)| !taken(bin))
        .max_by(|a, b| a.1.total_cmp(b.1))?;
    (power > WORTH * median).then_some(bin)
}

/// Where the transform of the values is highest within `width` of a frequency,
/// by golden section.
fn refined(values: &[(u64, f64)], cycles: f64, width: f64) -> f64 {
    const GOLDEN: f64 = 0.618_033_988_749_895;
    let height = |cycles: f64| {
        let (mut re, mut im) = (0.0, 0.0);
        for &(frame, value) in values {
            let (sin, cos) = (TAU * (cycles * frame as f64).fract()).sin_cos();
            re += value * cos;
            im += value * sin;
        }
        re * re + im * im
    };
    let (mut low, mut high) = (cycles - width, cycles + width);
    let mut inner = [high - GOLDEN * (high - low), low + GOLDEN * (high - low)];
    let mut heights = inner.map(height);
    for _ in 0..24 {
        if heights[0] > heights[1] {
            high = inner[1];
            inner = [high - GOLDEN * (high - low), inner[0]];
            heights = [height(inner[0]), heights[0]];
        } else {
            low = inner[0];
            inner = [inner[1], low + GOLDEN * (high - low)];
            heights = [heights[1], height(inner[1])];
        }
    }
    (low + high) / 2.0
}
