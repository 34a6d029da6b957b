//! Tones that move: is a broadened patch of spectrum one tone, and if so where
//! is it, when, and how far does it stray?
//!
//! The patch goes back to a slow complex signal z(t). A tone, however it
//! wanders, keeps its amplitude: |z|² hardly varies. Noise shaped by a resonance
//! looks the same in a spectrum, but its |z|² is exponentially distributed. The
//! second moment of |z|² tells them apart.

use crate::spectrum::Band;
use crate::spectrum::fft::{Complex32, ComplexFft};
use statrs::function::erf::erfc;
use statrs::function::gamma::ln_gamma;

/// Chance at which a patch of Gaussian noise would be called a tone, given that
/// it stood out of the floor.
const NOISE_CALLED_TONE: f64 = 1e-4;

/// A tone that wanders or comes and goes.
#[derive(Debug, Clone)]
pub struct Wanderer {
    /// Mean frequency while present, bins of the band's grid.
    pub bin: f64,
    /// Standard deviation of that mean, bins.
    pub bin_sd: f64,
    /// rms excursion from the mean, bins.
    pub wander: f64,
    /// |c|·samples while present: as [`super::refine::Line`]'s.
    pub strength: f64,
    /// Noise power per cell.
    pub noise: f64,
    /// First and last moment present, as fractions of the recording.
    pub present: (f64, f64),
    /// Frequency over time.
    pub track: Vec<TrackPoint>,
    /// Cells it occupies.
    pub cells: std::ops::Range<usize>,
}

/// Frequency in one time window.
#[derive(Debug, Clone, Copy)]
pub struct TrackPoint {
    /// Centre of the window as a fraction of the recording.
    pub at: f64,
    /// Frequency, bins of the band's grid.
    pub bin: f64,
    /// Its standard deviation, bins.
    pub sd: f64,
}

/// Chance that the mean square over the square mean of `n` exponential variates
/// is at most `t`.
///
/// The shares of n exponentials are uniform on a simplex; `t` bounds them to a
/// ball about its centre of radius √((t−1)/n), whose volume over the simplex's
/// is an upper bound, sharp for small t. For large n the statistic is normal
/// about 2 with standard deviation 2/√n (delta method on the moments 1, 2, 6,
/// 24 of the exponential).
pub fn steadiness_of_noise(n: f64, t: f64) -> f64 {
    if n < 2.0 {
        return 1.0;
    }
    let radius2 = ((t - 1.0).max(0.0) / n).max(1e-300);
    let ball = ln_gamma(n) - 0.5 * n.ln() + 0.5 * (n - 1.0) * std::f64::consts::PI.ln()
        - ln_gamma(0.5 * (n + 1.0))
        + 0.5 * (n - 1.0) * radius2.ln();
    let normal = 0.5 * erfc((2.0 - t) * n.sqrt() / 2.0 / std::f64::consts::SQRT_2);
    if n < 40.0 {
        ball.min(0.0).exp()
    } else {
        ball.min(0.0).exp().min(normal)
    }
}

/// The patch as a signal in time: `cells` of the band, critically sampled.
struct Patch {
    first: usize,
    /// Cells, and samples over the whole grid.
    width: usize,
    z: Vec<Complex32>,
    power: f64,
    noise: f64,
}

impl Patch {
    fn cut(band: &Band, cells: std::ops::Range<usize>, noise: f64) -> Patch {
        let mut z = band.bins[cells.clone()].to_vec();
        let power = z.iter().map(|z| f64::from(z.norm_sqr())).sum();
        let noise = noise * z.len() as f64;
        ComplexFft::inverse(z.len()).process(&mut z);
        // Only the part of the grid that holds samples.
        let keep = (z.len() * band.samples).div_ceil(band.grid);
        z.truncate(keep);
        Patch {
            first: band.first_bin + cells.start,
            width: cells.len(),
            z,
            power,
            noise,
        }
    }

    /// Runs of samples during which the tone is on: all of it unless the power
    /// clearly falls to little.
    fn on(&self, smooth: usize) -> (usize, usize) {
        let n = self.z.len();
        let smooth = smooth.clamp(1, n);
        let mut sums = Vec::with_capacity(n);
        let mut sum: f64 = self.z[..smooth]
            .iter()
            .map(|z| f64::from(z.norm_sqr()))
            .sum();
        for i in 0..=n - smooth {
            sums.push(sum);
            if i + smooth < n {
                sum += f64::from(self.z[i + smooth].norm_sqr()) - f64::from(self.z[i].norm_sqr());
            }
        }
        let mut sorted = sums.clone();
        sorted.sort_by(f64::total_cmp);
        let high = sorted[sorted.len() - 1 - sorted.len() / 20];
        let off = self.noise * smooth as f64 / 1.0;
        let level = off + 0.3 * (high - off).max(0.0);
        let on = |&s: &f64| s > level;
        match (sums.iter().position(on), sums.iter().rposition(on)) {
            (Some(a), Some(b)) if b >= a => {
                // centre of the first and last window that is on
                let from = if a == 0 {
                    0
                } else {
                    (a + smooth / 2).min(n - 1)
                };
                let to = if b + smooth >= n {
                    n
                } else {
                    b + smooth / 2 + 1
                };
                (from, to.max(from + 1))
            }
            _ => (0, n),
        }
    }
}

/// Judges the cells `core` of `band` (indices into its bins) standing on a floor
/// of `noise` per cell: one tone, or `None` for noise shaped like a hump or
/// several things at once.
pub fn judge(band: &Band, core: std::ops::Range<usize>, noise: f64) -> Option<Wanderer> {
    let pad = (core.len() / 4).max(6);
    let cells = core.start.saturating_sub(pad)..(core.end + pad).min(band.bins.len());
    if cells.len() < 12 {
        return None;
    }
    let patch = Patch::cut(band, cells.clone(), noise);
    let tone_power = patch.power - patch.noise;
    if tone_power <= 0.0 {
        return None;
    }
    // Independent samples: what Gaussian noise of this shape would be worth.
    let (sum, sum2) = band.bins[cells.clone()]
        .iter()
        .map(|z| f64::from(z.norm_sqr()))
        .fold((0.0, 0.0), |(s, s2), p| (s + p, s2 + p * p));
    // exponential bins: E p² = 2 (E p)², hence the factor 2
    let occupied = (2.0 * sum * sum / sum2).clamp(2.0, cells.len() as f64);
    let (from, to) = patch.on((16.0 * cells.len() as f64 / occupied).ceil() as usize);
    let on = &patch.z[from..to];
    let (m2, m4) = on.iter().fold((0.0, 0.0), |(a, b), z| {
        let p = f64::from(z.norm_sqr());
        (a + p, b + p * p)
    });
    let steadiness = m4 * on.len() as f64 / (m2 * m2);
    let worth = occupied * on.len() as f64 / patch.z.len() as f64;
    let mean_power = m2 / on.len() as f64;
    let share = ((mean_power - patch.noise) / mean_power).clamp(0.0, 1.0);
    // A pure tone in noise has 2 − share²; half-way to that is as far as an
    // amplitude-modulated or disturbed one may be.
    let constant = 2.0 - steadiness >= 0.5 * share * share;
    if !constant || steadiness_of_noise(worth, steadiness) > NOISE_CALLED_TONE {
        return None;
    }
    let track = track(&patch, from, to, mean_power - patch.noise)?;
    let n = track.len() as f64;
    let mean = track.iter().map(|p| p.bin).sum::<f64>() / n;
    let variance = track.iter().map(|p| (p.bin - mean).powi(2)).sum::<f64>() / n;
    let measured = track.iter().map(|p| p.sd * p.sd).sum::<f64>() / n;
    let duty = on.len() as f64 / patch.z.len() as f64;
    let samples_share = band.samples as f64 / band.grid as f64;
    Some(Wanderer {
        bin: mean,
        bin_sd: (measured / n).sqrt(),
        wander: (variance - measured).max(0.0).sqrt(),
        strength: (tone_power * samples_share / duty).sqrt(),
        noise,
        present: (
            from as f64 / patch.z.len() as f64,
            to as f64 / patch.z.len() as f64,
        ),
        track,
        cells: band.first_bin + core.start..band.first_bin + core.end,
    })
}

/// Frequency over time: windows as long as the tone stays coherent in one.
fn track(patch: &Patch, from: usize, to: usize, tone_power: f64) -> Option<Vec<TrackPoint>> {
    let z = &patch.z[from..to];
    let n_all = patch.z.len() as f64;
    let mut best: Option<(f64, Vec<TrackPoint>)> = None;
    let mut windows = 3;
    while z.len() / windows >= 6 && windows <= 4096 {
        let m = z.len() / windows;
        let padded = (4 * m).next_power_of_two();
        let mut fft = ComplexFft::forward(padded);
        let mut work = vec![Complex32::default(); padded];
        let mut coherent = 0.0;
        let mut points = Vec::with_capacity(windows);
        for w in 0..windows {
            let start = w * z.len() / windows;
            work.fill(Complex32::default());
            work[..m].copy_from_slice(&z[start..start + m]);
            fft.process(&mut work);
            let powers: Vec<f64> = work.iter().map(|z| f64::from(z.norm_sqr())).collect();
            let (peak, &top) = powers
                .iter()
                .enumerate()
                .max_by(|a, b| a.1.total_cmp(b.1))?;
            let left = powers[(peak + padded - 1) % padded].max(1e-300).ln();
            let right = powers[(peak + 1) % padded].max(1e-300).ln();
            let centre = top.max(1e-300).ln();
            let bend = left - 2.0 * centre + right;
            let shift = if bend < 0.0 {
                0.5 * (left - right) / bend
            } else {
                0.0
            };
            // the largest of m noise cells adds this much by chance
            coherent += top / (m * m) as f64 - patch.noise * ((m as f64).ln() + 0.6) / m as f64;
            // Work bin j stands for j/padded of the patch's width; the width is
            // as many cells as the patch has samples over the whole grid.
            let cycles = (peak as f64 + shift) / padded as f64;
            // Cramér–Rao bound of one complex tone (Rife & Boorstyn 1974):
            // var(ω) = 6/(η·m³), η = tone over noise power per sample.
            let eta = tone_power / patch.noise.max(1e-30 * tone_power);
            let sd = (6.0 / (eta * (m as f64).powi(3))).sqrt() / std::f64::consts::TAU;
            let width = patch.width as f64;
            points.push(TrackPoint {
                at: (from + start) as f64 / n_all + 0.5 * m as f64 / n_all,
                bin: patch.first as f64 + cycles * width,
                sd: sd * width,
            });
        }
        let coherent = coherent / windows as f64;
        // Longer windows measure better: keep the first that holds the tone.
        if best.as_ref().is_none_or(|(c, _)| coherent > *c) {
            best = Some((coherent, points));
        }
        if coherent > 0.85 * tone_power {
            break;
        }
        windows *= 2;
    }
    let (coherent, points) = best?;
    (coherent > 0.3 * tone_power).then_some(points)
}
