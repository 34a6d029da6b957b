//! Every tone found, with its track, and what the track says of its mean.

use super::mean;
use super::refine::{Line, Residual};
use super::track::{self, Target, Track};
use super::wander::Wanderer;

/// A track that leaves a steady tone less probable than this shows wander.
const UNSTEADY: f64 = 0.01;

/// A tone measured, in bins of the band's grid.
#[derive(Debug, Clone)]
pub struct Fit {
    /// Mean frequency while present.
    pub bin: f64,
    /// Standard deviation of that mean.
    pub bin_sd: f64,
    /// rms excursion from the mean; 0 when steady.
    pub wander: f64,
    /// |c|·samples while present: the tone is 2·|c|·cos(…).
    pub strength: f64,
    /// Noise power per cell.
    pub noise: f64,
    /// First and last moment present, as fractions of the recording.
    pub present: (f64, f64),
    /// Share of the time between those.
    pub duty: f64,
    /// Frequency and phase over time.
    pub track: Track,
}

/// Every tone with its track.
pub fn followed(residual: &Residual, lines: &[Line], wanderers: &[Wanderer]) -> Vec<Fit> {
    let band = residual.band();
    let mut work = track::Work::default();
    // resolution cells in a bin
    let cells = band.samples as f64 / band.grid as f64;
    // Other wanderers are still there. In a window of w-th length the skirt of one that
    // is ρ times as strong is ρ/(πd) at d of the window's cells: where that is to be
    // as small as for an equal one, d is ρ times as large.
    let alone = |own: usize, bin: f64, strength: f64| {
        wanderers
            .iter()
            .enumerate()
            .filter(|&(i, _)| i != own)
            .map(|(_, w)| ((w.bin - bin).abs() - w.strays) / (w.strength / strength).max(1.0))
            .fold(f64::INFINITY, f64::min)
    };
    let steady = lines.iter().map(|l| {
        let target = Target {
            bin: l.bin,
            strays: 0.0,
            snr: l.snr(band.samples),
            noise: l.noise,
            present: (0.0, 1.0),
            alone: alone(usize::MAX, l.bin, l.c.norm() * band.samples as f64),
        };
        let track = track::follow(band, &target, |k| residual.with(l, k), &mut work);
        let (bin, bin_sd, wander) = settled(l, &track, cells);
        Fit {
            bin,
            bin_sd,
            wander,
            strength: l.c.norm() * band.samples as f64,
            noise: l.noise,
            present: target.present,
            duty: 1.0,
            track,
        }
    });
    let mut fits: Vec<Fit> = steady.collect();
    fits.extend(wanderers.iter().enumerate().filter_map(|(i, w)| {
        let target = Target {
            bin: w.bin,
            strays: w.strays,
            snr: w.strength * w.strength / w.noise,
            noise: w.noise,
            present: w.present,
            alone: alone(i, w.bin, w.strength),
        };
        let track = track::follow(band, &target, |k| band.get(k), &mut work);
        if track.jumps() {
            return None;
        }
        // What was on and off has its mean from the stretches it was on.
        let whole = (w.duty == 1.0).then(|| mean::mean(&track, w.bin * cells, w.present));
        let (bin, bin_sd, wander) = match whole.flatten() {
            Some(m) => (
                w.bin + m.offset / cells,
                m.variance.sqrt() / cells,
                mean::excursion(&track) / cells,
            ),
            None => (w.bin, w.bin_sd, w.wander),
        };
        Some(Fit {
            bin,
            bin_sd,
            wander,
            strength: w.strength,
            noise: w.noise,
            present: w.present,
            duty: w.duty,
            track,
        })
    }));
    fits
}

/// Frequency, its standard deviation and the wander, in bins, of a line fitted as
/// steady, in the light of its track.
fn settled(line: &Line, track: &Track, cells: f64) -> (f64, f64, f64) {
    let Some(m) = mean::mean(track, line.bin * cells, (0.0, 1.0)) else {
        return (line.bin, line.bin_sd.hypot(line.strayed), 0.0);
    };
    let wander = if m.steady < UNSTEADY {
        mean::excursion(track) / cells
    } else {
        0.0
    };
    (
        line.bin + m.shift / cells,
        line.bin_sd.hypot(m.more.sqrt() / cells),
        wander,
    )
}
